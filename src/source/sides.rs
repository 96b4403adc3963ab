//! The two sides of the source: which emission belongs to which, their hot spots, their
//! brightest points and ends.

use crate::extent::maximum_sigma;
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::{Noise, NoiseCorrelation};
use crate::ridge::Ridge;
use crate::source::core::Peak;
use crate::source::hotspot::{SpotFit, fit_spot, variance_along};
use crate::units::{Pixel, SkyOffset, wrap_difference_deg};
use crate::window::Window;

/// A peak as seen from the core.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Feature {
    /// The peak.
    pub peak: Peak,
    /// Offset from the core, sky units.
    pub offset: SkyOffset,
    /// Covariance of the place (east-east, east-north, north-north), the core's not counted.
    pub covariance: [f64; 3],
    /// 1σ of the brightness, map unit.
    pub brightness_sigma: f64,
}

impl Feature {
    /// Distance from the core, sky units.
    pub fn distance(&self) -> f64 {
        self.offset.radius()
    }

    /// 1σ of the place along a position angle.
    pub fn sigma_along(&self, pa_deg: f64) -> f64 {
        variance_along(self.covariance, pa_deg).sqrt()
    }
}

/// What one side holds.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct SideFeatures {
    /// The hot spot.
    pub hotspot: Option<Feature>,
    /// The brightest peak beyond 1.5 beams from the core; `None` where none stands out.
    pub brightest: Option<Feature>,
    /// Where there is no such peak: the side falls outwards from this distance on at least.
    pub falls_from: f64,
    /// The contour's farthest point from the core.
    pub farthest: Option<(Pixel, SkyOffset)>,
}

/// A hot spot is at least this bright against the side's brightest peak: knots may outshine
/// it, but a speck at the end of a fading jet is none.
const HOTSPOT_BRIGHTNESS: f64 = 0.25;
/// Beyond a hot spot, 1.5 beams farther out, the brightness has fallen below this share of
/// it: a jet or plume that goes on is brighter. Hot spots exceed their surroundings four
/// times (criterion of Bridle et al. 1994, AJ 108, 766; from memory), and lie at the end of the
/// jet (another of theirs).
const HOTSPOT_SURROUNDINGS: f64 = 0.25;
/// Where surroundings are compared, in beams from the spot, and how far to either side of the
/// outward direction.
const SURROUNDINGS_BEAMS: f64 = 1.5;
const SURROUNDINGS_DEG: f64 = 60.0;
/// Least share of a hot spot's brightness that is shaped as the beam: what is wider than
/// about two beams is a lobe's or plume's maximum (they ask for a twentieth of the source's
/// size, which most maps do not resolve).
const HOTSPOT_COMPACT: f64 = 0.4;
/// Peaks nearer to a detected core than this many beams are its own.
const CORE_BEAMS: f64 = 0.6;
/// Hot spots are looked for beyond this many beams.
const HOTSPOT_BEYOND_BEAMS: f64 = 1.0;
/// Brightest points are looked for beyond this many beams from the core (definition of the
/// Fanaroff–Riley ratio in the record).
pub const BRIGHTEST_BEYOND_BEAMS: f64 = 1.5;
/// A local maximum stands this many rms above the lowest place on the ridge between it and the
/// core: noise on a slope makes lower ones.
const PROMINENCE_SIGMA: f64 = 1.5;

/// The side an offset from the core belongs to: the one whose ridge is nearer along the
/// circle through it.
pub fn side_of(ridges: &[Ridge; 2], offset: SkyOffset) -> usize {
    let distance = offset.radius();
    let bearing = offset.position_angle_deg();
    let turn = |ridge: &Ridge| wrap_difference_deg(bearing - ridge.bearing_at(distance)).abs();
    usize::from(turn(&ridges[1]) < turn(&ridges[0]))
}

/// Offset of a side's end: its hot spot, else its ridge's end.
pub fn end_offset(ridge: &Ridge, features: &SideFeatures) -> Option<SkyOffset> {
    features.hotspot.map(|h| h.offset).or_else(|| ridge.end.map(|end| end.offset))
}

/// What features are found in.
#[derive(Clone, Copy)]
pub struct FeatureInput<'a> {
    /// The source's local maxima.
    pub peaks: &'a [Peak],
    /// Points of its contour.
    pub contour: &'a [Pixel],
    /// Both ridges.
    pub ridges: &'a [Ridge; 2],
    /// Frame about the core.
    pub frame: &'a LocalFrame,
    /// The beam.
    pub beam: &'a Beam,
    /// Whether a core's component is detected.
    pub core_detected: bool,
    /// The map around the source, without the core's component.
    pub window: &'a Window,
    /// Noise and its correlation.
    pub noise: (&'a Noise, &'a NoiseCorrelation),
}

/// Sorts peaks and contour points to the sides and picks each side's features.
pub fn find_features(input: &FeatureInput) -> [SideFeatures; 2] {
    let FeatureInput { ridges, frame, beam, .. } = *input;
    let mut sides = [SideFeatures::default(), SideFeatures::default()];
    for &point in input.contour {
        let offset = frame.offset(point);
        let side = &mut sides[side_of(ridges, offset)];
        if side.farthest.is_none_or(|(_, far)| offset.radius() > far.radius()) {
            side.farthest = Some((point, offset));
        }
    }
    let mut peaks: [Vec<(Peak, SkyOffset)>; 2] = [Vec::new(), Vec::new()];
    let nearest = if input.core_detected { CORE_BEAMS } else { 0.3 } * beam.major;
    for &peak in input.peaks {
        let offset = frame.offset(peak.pixel);
        if offset.radius() > nearest {
            peaks[side_of(ridges, offset)].push((peak, offset));
        }
    }
    for ((side, peaks), ridge) in sides.iter_mut().zip(&mut peaks).zip(ridges) {
        // From the farthest to the nearest.
        peaks.sort_by(|a, b| b.1.radius().total_cmp(&a.1.radius()));
        side.hotspot = hotspot(input, peaks);
        let beyond = BRIGHTEST_BEYOND_BEAMS * beam.major;
        let outer: Vec<_> = peaks.iter().copied().filter(|p| p.1.radius() >= beyond).collect();
        side.brightest = brightest(input, ridge, &outer);
        side.falls_from = outer.first().map_or(beyond, |p| p.1.radius());
    }
    sides
}

/// The outermost peak that is compact, ends the jet and is not faint against the side's
/// brightest. `peaks` from the farthest inwards.
///
/// Of a double of doubles this is the inner pair, as long as the outer lobes hold no hot spot
/// of their own any more.
fn hotspot(input: &FeatureInput, peaks: &[(Peak, SkyOffset)]) -> Option<Feature> {
    let beyond = HOTSPOT_BEYOND_BEAMS * input.beam.major;
    let outer = || peaks.iter().filter(|p| p.1.radius() > beyond);
    let highest = outer().map(|p| p.0.value).fold(0.0, f64::max);
    outer().filter(|p| p.0.value >= HOTSPOT_BRIGHTNESS * highest).find_map(|&(peak, offset)| {
        let outward_deg = offset.position_angle_deg();
        let FeatureInput { window, beam, frame, noise, .. } = *input;
        let spot = fit_spot(window, peak.pixel, outward_deg + 180.0, beam, frame, noise)?;
        let compact = spot.component >= HOTSPOT_COMPACT * spot.brightness;
        (compact && ends_here(input, &spot, outward_deg)).then(|| Feature {
            peak: Peak { pixel: spot.pixel, value: spot.brightness, ..peak },
            offset: frame.offset(spot.pixel),
            covariance: spot.covariance,
            brightness_sigma: spot.brightness_sigma,
        })
    })
}

/// Whether the brightness falls off beyond a spot. Two rms are allowed for the highest of the
/// few places looked at.
fn ends_here(input: &FeatureInput, spot: &SpotFit, outward_deg: f64) -> bool {
    let rms = input.window.rms_at(spot.pixel).unwrap_or(0.0);
    let steps = 8;
    (-steps / 2..=steps / 2)
        .filter_map(|k| {
            let pa_deg = outward_deg + 2.0 * SURROUNDINGS_DEG * f64::from(k) / f64::from(steps);
            let reach = SURROUNDINGS_BEAMS * input.beam.reach_along(pa_deg);
            let at = input.frame.moved(spot.pixel, SkyOffset::polar(reach, pa_deg));
            input.window.bilinear(at)
        })
        .all(|brightness| brightness - 2.0 * rms <= HOTSPOT_SURROUNDINGS * spot.brightness)
}

/// The brightest of the peaks that stand out. Where others are as bright within the noise, the
/// place is unsure by their distances.
fn brightest(
    input: &FeatureInput,
    ridge: &Ridge,
    peaks: &[(Peak, SkyOffset)],
) -> Option<Feature> {
    let FeatureInput { window, beam, frame, .. } = *input;
    let standing: Vec<_> =
        peaks.iter().copied().filter(|(p, o)| stands_out(input, ridge, p, *o)).collect();
    let &(peak, offset) =
        standing.iter().max_by(|a, b| a.0.value.total_cmp(&b.0.value))?;
    let rms = peak.value / peak.signal_to_noise.max(1.0);
    let pa_deg = offset.position_angle_deg();
    let square = |pa_deg: f64| maximum_sigma(window, frame, beam, peak.pixel, pa_deg).powi(2);
    let (along, across) = (SkyOffset::polar(1.0, pa_deg), SkyOffset::polar(1.0, pa_deg + 90.0));
    let mut covariance = [0.0; 3];
    let mut add = |unit: SkyOffset, variance: f64| {
        covariance[0] += variance * unit.east * unit.east;
        covariance[1] += variance * unit.east * unit.north;
        covariance[2] += variance * unit.north * unit.north;
    };
    add(along, square(pa_deg));
    add(across, square(pa_deg + 90.0));
    // Weights of the peaks by how probably each is the brightest.
    let weight = |p: &Peak| (-((peak.value - p.value) / (2.0 * rms)).powi(2)).exp();
    let total: f64 = standing.iter().map(|(p, _)| weight(p)).sum();
    for (other, place) in &standing {
        add(place.minus(offset), weight(other) / total);
    }
    Some(Feature { peak, offset, covariance, brightness_sigma: rms })
}

/// Whether a peak rises above what lies between it and the core along the ridge, or between it
/// and the ridge where it lies beside it.
fn stands_out(input: &FeatureInput, ridge: &Ridge, peak: &Peak, offset: SkyOffset) -> bool {
    let FeatureInput { window, beam, frame, .. } = *input;
    let rms = peak.value / peak.signal_to_noise.max(1.0);
    let distance = offset.radius();
    let on_ridge = SkyOffset::polar(distance, ridge.bearing_at(distance));
    let aside = on_ridge.minus(offset);
    let lowest = if aside.radius() > 0.5 * beam.minor {
        (1..=8)
            .filter_map(|k| {
                window.bilinear(frame.pixel(offset.plus(aside.times(f64::from(k) / 8.0))))
            })
            .fold(peak.value, f64::min)
    } else {
        ridge
            .points
            .iter()
            .filter(|p| p.distance > beam.major && p.distance < distance)
            .map(|p| p.brightness)
            .fold(peak.value, f64::min)
    };
    peak.value - lowest >= PROMINENCE_SIGMA * rms
}
