//! The two sides of the source: which emission belongs to which, their hot spots, their
//! brightest points and ends.

use crate::extent::maximum_sigma;
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::{Noise, NoiseCorrelation};
use crate::ridge::{Ridge, RidgePoint};
use crate::source::core::Peak;
use crate::source::hotspot::{fit_spot, variance_along};
use crate::stats::median;
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
/// At this many beams from a hot spot the brightness has fallen to this share of its: the
/// median all around (what is wider than about two beams is a lobe's or plume's maximum), and
/// the highest outwards (a jet or plume that goes on is brighter). Hot spots exceed their
/// surroundings four times and lie at the end of the jet (two criteria of Bridle et al. 1994,
/// AJ 108, 766, from memory; their third, a twentieth of the source's size, is not resolved by
/// most maps).
const HOTSPOT_FALL: (f64, f64) = (1.5, 0.25);
/// The same for one too wide for that, and wider than a bump in a jet.
const WIDE_FALL: (f64, f64) = (2.0, 0.15);
/// A hot spot farther than this many beams from the core stands this many rms, and this share
/// of its own brightness, above the faintest place of the ridge on its way from the core: bumps
/// in a jet that fades do not.
const ROOM_BEAMS: f64 = 2.0;
const RISE_SIGMA: f64 = 3.0;
const RISE_SHARE: f64 = 0.2;
/// At how many places surroundings are compared, and how far from the direction away from the
/// core a place counts as outward.
const SURROUNDINGS_PLACES: u32 = 24;
const SURROUNDINGS_DEG: f64 = 60.0;
/// Many lobes have no compact spot on the maps we get. Their head counts as the hot spot where
/// it is the brightest of its side to this share, lies beyond this share of the side, has the
/// way from the core three times fainter somewhere (the side is edge-brightened), is so wide
/// that at 1.5 beams nearly a fifth is left around it (a bump in a jet is narrower), and has fallen to
/// half two beams outwards (own choice on real survey maps and made plumes).
const LOBE_BRIGHTNESS: f64 = 0.75;
const LOBE_PLACE: f64 = 0.7;
const LOBE_CONTRAST: f64 = 1.0 / 3.0;
const LOBE_WIDTH: (f64, f64) = (1.5, 0.18);
const LOBE_FALL: (f64, f64) = (2.0, 0.5);
/// A fit counts fully where this share of the brightness is shaped as the beam, and not at all
/// below the other.
const FULL_COMPONENT: f64 = 0.6;
const LEAST_COMPONENT: f64 = 0.4;
/// Peaks nearer to a detected core than this many beams are its own.
const CORE_BEAMS: f64 = 0.6;
/// Hot spots are looked for beyond this many beams.
const HOTSPOT_BEYOND_BEAMS: f64 = 0.6;
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
        side.hotspot = hotspot(input, ridge, peaks);
        let beyond = BRIGHTEST_BEYOND_BEAMS * beam.major;
        let outer: Vec<_> = peaks.iter().copied().filter(|p| p.1.radius() >= beyond).collect();
        side.brightest = brightest(input, ridge, &outer);
        side.falls_from = outer.first().map_or(beyond, |p| p.1.radius());
    }
    sides
}

/// The outermost peak that is compact, ends the jet and is not faint against the side's
/// brightest; where there is none, the outermost head of a lobe. `peaks` from the farthest
/// inwards.
///
/// Of a double of doubles this is the inner pair, as long as the outer lobes hold no hot spot
/// of their own any more.
fn hotspot(input: &FeatureInput, ridge: &Ridge, peaks: &[(Peak, SkyOffset)]) -> Option<Feature> {
    let beyond = HOTSPOT_BEYOND_BEAMS * input.beam.major;
    let outer = || peaks.iter().filter(|p| p.1.radius() > beyond);
    let highest = outer().map(|p| p.0.value).fold(0.0, f64::max);
    let of_brightness = |least: f64| outer().filter(move |p| p.0.value >= least * highest);
    let (peak, offset) = of_brightness(HOTSPOT_BRIGHTNESS)
        .find(|p| is_compact_end(input, ridge, &p.0, p.1))
        .or_else(|| of_brightness(LOBE_BRIGHTNESS).find(|p| is_lobe(input, ridge, &p.0, p.1)))?;
    Some(placed(input, ridge, peak, *offset))
}

/// A hot spot at a local maximum, freed from the pull of what it stands in.
fn placed(input: &FeatureInput, ridge: &Ridge, peak: &Peak, offset: SkyOffset) -> Feature {
    let FeatureInput { window, beam, frame, noise, .. } = *input;
    let outward_deg = offset.position_angle_deg();
    // The jet comes along the ridge.
    let inside = (offset.radius() - 1.5 * beam.major).max(0.0);
    let jet = SkyOffset::polar(inside, ridge.bearing_at(inside)).minus(offset);
    let fit = fit_spot(window, peak.pixel, jet.position_angle_deg(), beam, frame, noise);
    let (pixel, value, covariance, brightness_sigma) = match fit {
        Some(spot) => {
            // A maximum too broad for a beam-shaped component is where it seems to be.
            let share = spot.component / spot.brightness;
            let trust =
                ((share - LEAST_COMPONENT) / (FULL_COMPONENT - LEAST_COMPONENT)).clamp(0.0, 1.0);
            let shift = frame.difference(peak.pixel, spot.pixel);
            let mut covariance = spot.covariance;
            widen(&mut covariance, shift, 1.0 - trust);
            let value = peak.value + trust * (spot.brightness - peak.value);
            let pixel = frame.moved(peak.pixel, shift.times(trust));
            (pixel, value, covariance, spot.brightness_sigma)
        }
        None => {
            let rms = peak.value / peak.signal_to_noise.max(1.0);
            (peak.pixel, peak.value, maximum_covariance(input, peak, outward_deg), rms)
        }
    };
    Feature {
        peak: Peak { pixel, value, ..*peak },
        offset: frame.offset(pixel),
        covariance,
        brightness_sigma,
    }
}

/// What a peak stands in, over its own brightness.
struct Surroundings {
    /// The highest brightness outwards.
    outward: f64,
    /// The median brightness all around.
    around: f64,
    /// The rms.
    rms: f64,
}

impl Surroundings {
    fn of(input: &FeatureInput, peak: &Peak, outward_deg: f64, beams: f64) -> Self {
        let rms = input.window.rms_at(peak.pixel).unwrap_or(0.0);
        let places: Vec<(bool, f64)> = (0..SURROUNDINGS_PLACES)
            .filter_map(|k| {
                let turn = 360.0 * f64::from(k) / f64::from(SURROUNDINGS_PLACES);
                let pa_deg = outward_deg + turn;
                let reach = beams * input.beam.reach_along(pa_deg);
                let at = input.frame.moved(peak.pixel, SkyOffset::polar(reach, pa_deg));
                let is_outward = wrap_difference_deg(turn).abs() <= SURROUNDINGS_DEG;
                Some((is_outward, input.window.bilinear(at)?))
            })
            .collect();
        let outward = places.iter().filter(|p| p.0).map(|p| p.1).fold(0.0, f64::max);
        let mut all: Vec<f64> = places.iter().map(|p| p.1).collect();
        Self {
            outward: outward / peak.value,
            rms: rms / peak.value,
            around: median(&mut all).unwrap_or(0.0) / peak.value,
        }
    }

    /// Whether both have fallen to a share; one and a half rms are allowed for the highest of the few
    /// places looked at.
    fn fallen_to(&self, share: f64) -> bool {
        self.outward - 1.5 * self.rms <= share && self.around <= share
    }
}

/// Whether a peak is compact, rises from the ridge and nothing as bright goes on beyond it.
fn is_compact_end(input: &FeatureInput, ridge: &Ridge, peak: &Peak, offset: SkyOffset) -> bool {
    let at = |beams| Surroundings::of(input, peak, offset.position_angle_deg(), beams);
    let near = at(HOTSPOT_FALL.0);
    let faintest = faintest_inside(input, ridge, peak, offset.radius());
    let room = offset.radius() > ROOM_BEAMS * input.beam.major;
    let least_rise = (RISE_SIGMA * near.rms).max(RISE_SHARE) * peak.value;
    (!room || peak.value - faintest >= least_rise)
        && (near.fallen_to(HOTSPOT_FALL.1)
            || near.around >= LOBE_WIDTH.1 && at(WIDE_FALL.0).fallen_to(WIDE_FALL.1))
}

/// The lowest brightness of a ridge between one beam and a distance from the core, no more than
/// the peak's.
fn faintest_inside(input: &FeatureInput, ridge: &Ridge, peak: &Peak, distance: f64) -> f64 {
    let way = |p: &&RidgePoint| p.distance > input.beam.major && p.distance < distance;
    ridge.points.iter().filter(way).map(|p| p.brightness).fold(peak.value, f64::min)
}

/// Whether a peak is the head of a lobe: wider than a jet, falling off beyond it, in the outer
/// part of its side, and far brighter than the faintest place of the ridge on its way from the
/// core.
fn is_lobe(input: &FeatureInput, ridge: &Ridge, peak: &Peak, offset: SkyOffset) -> bool {
    let (distance, outward_deg) = (offset.radius(), offset.position_angle_deg());
    let length = ridge.points.last().map_or(0.0, |p| p.distance);
    distance > LOBE_PLACE * length
        && faintest_inside(input, ridge, peak, distance) <= LOBE_CONTRAST * peak.value
        && Surroundings::of(input, peak, outward_deg, LOBE_WIDTH.0).around >= LOBE_WIDTH.1
        && Surroundings::of(input, peak, outward_deg, LOBE_FALL.0).outward <= LOBE_FALL.1
}

/// Covariance of a local maximum's place from noise alone.
fn maximum_covariance(input: &FeatureInput, peak: &Peak, pa_deg: f64) -> [f64; 3] {
    let FeatureInput { window, beam, frame, .. } = *input;
    let mut covariance = [0.0; 3];
    for pa_deg in [pa_deg, pa_deg + 90.0] {
        let sigma = maximum_sigma(window, frame, beam, peak.pixel, pa_deg);
        widen(&mut covariance, SkyOffset::polar(sigma, pa_deg), 1.0);
    }
    covariance
}

/// Adds the scatter of a shift that happens with some probability.
fn widen(covariance: &mut [f64; 3], shift: SkyOffset, probability: f64) {
    covariance[0] += probability * shift.east * shift.east;
    covariance[1] += probability * shift.east * shift.north;
    covariance[2] += probability * shift.north * shift.north;
}

/// The brightest of the peaks that stand out. Where others are as bright within the noise, the
/// place is unsure by their distances.
fn brightest(input: &FeatureInput, ridge: &Ridge, peaks: &[(Peak, SkyOffset)]) -> Option<Feature> {
    let standing: Vec<_> =
        peaks.iter().copied().filter(|(p, o)| stands_out(input, ridge, p, *o)).collect();
    let &(peak, offset) = standing.iter().max_by(|a, b| a.0.value.total_cmp(&b.0.value))?;
    let rms = peak.value / peak.signal_to_noise.max(1.0);
    let mut covariance = maximum_covariance(input, &peak, offset.position_angle_deg());
    // Weights of the peaks by how probably each is the brightest.
    let weight = |p: &Peak| (-((peak.value - p.value) / (2.0 * rms)).powi(2)).exp();
    let total: f64 = standing.iter().map(|(p, _)| weight(p)).sum();
    for (other, place) in &standing {
        widen(&mut covariance, place.minus(offset), weight(other) / total);
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
