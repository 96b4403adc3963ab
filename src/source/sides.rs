//! The two sides of the source: which emission belongs to which, their hot spots, their
//! brightest points and ends.

use crate::extent::beam_reach;
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::ridge::Ridge;
use crate::source::core::Peak;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg};

/// A peak as seen from the core.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Feature {
    /// The peak.
    pub peak: Peak,
    /// Offset from the core, sky units.
    pub offset: SkyOffset,
}

impl Feature {
    /// Distance from the core, sky units.
    pub fn distance(&self) -> f64 {
        self.offset.radius()
    }
}

/// What one side holds.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct SideFeatures {
    /// The brightest peak of the side's outer part.
    pub hotspot: Option<Feature>,
    /// The brightest peak beyond 1.5 beams from the core; `None` where the side falls from
    /// there outwards.
    pub brightest: Option<Feature>,
    /// All peaks of the side, by growing distance.
    pub peaks: Vec<Feature>,
    /// The contour's farthest point from the core.
    pub farthest: Option<(Pixel, SkyOffset)>,
}

/// The outer part of a side, where a hot spot may lie, starts at this share of its length.
const OUTER_SHARE: f64 = 0.4;
/// A hot spot is at least this bright against the side's brightest peak.
const HOTSPOT_BRIGHTNESS: f64 = 0.2;
/// Peaks nearer to a detected core than this many beams are its own.
const CORE_BEAMS: f64 = 0.6;
/// Brightest points are looked for beyond this many beams from the core (definition of the
/// Fanaroff–Riley ratio in the record).
pub const BRIGHTEST_BEYOND_BEAMS: f64 = 1.5;

/// The side an offset from the core belongs to: the one whose ridge is nearer along the
/// circle through it.
pub fn side_of(ridges: &[Ridge; 2], offset: SkyOffset) -> usize {
    let distance = offset.radius();
    let bearing = offset.position_angle_deg();
    let turn = |ridge: &Ridge| wrap_difference_deg(bearing - ridge.bearing_at(distance)).abs();
    usize::from(turn(&ridges[1]) < turn(&ridges[0]))
}

/// Offset of a side's end: its hot spot, else its ridge's last point.
pub fn end_offset(ridge: &Ridge, features: &SideFeatures) -> Option<SkyOffset> {
    features.hotspot.map(|h| h.offset).or_else(|| ridge.points.last().map(|p| p.offset))
}

/// Sorts peaks and contour points to the sides and picks each side's features. `level` is
/// the contour's, map unit.
pub fn find_features(
    peaks: &[Peak],
    contour: &[Pixel],
    ridges: &[Ridge; 2],
    frame: &LocalFrame,
    beam: &Beam,
    level: f64,
    core_detected: bool,
) -> [SideFeatures; 2] {
    let mut sides = [SideFeatures::default(), SideFeatures::default()];
    for &point in contour {
        let offset = frame.offset(point);
        let side = &mut sides[side_of(ridges, offset)];
        if side.farthest.is_none_or(|(_, far)| offset.radius() > far.radius()) {
            side.farthest = Some((point, offset));
        }
    }
    for &peak in peaks {
        let offset = frame.offset(peak.pixel);
        let nearest = if core_detected { CORE_BEAMS } else { 0.3 } * beam.major;
        if offset.radius() > nearest {
            sides[side_of(ridges, offset)].peaks.push(Feature { peak, offset });
        }
    }
    for (index, side) in sides.iter_mut().enumerate() {
        side.peaks.sort_by(|a, b| a.distance().total_cmp(&b.distance()));
        let length = side.farthest.map_or(0.0, |(_, far)| far.radius());
        let brightest = |list: &mut dyn Iterator<Item = &Feature>| {
            list.max_by(|a, b| a.peak.value.total_cmp(&b.peak.value)).copied()
        };
        let overall = brightest(&mut side.peaks.iter());
        // The contour lies beyond an unresolved end by the beam's reach.
        let reach = overall.map_or(0.0, |f| beam_reach(f.peak.value, level, beam.mean_fwhm()));
        let length = (length - reach).max(0.0);
        let outer =
            brightest(&mut side.peaks.iter().filter(|f| f.distance() >= OUTER_SHARE * length));
        // A side that is brighter where the search begins than at any peak falls outwards.
        let nearest = BRIGHTEST_BEYOND_BEAMS * beam.major;
        let inner = ridges[index].points.iter().find(|p| p.distance >= nearest);
        let inner = inner.map_or(0.0, |p| p.brightness);
        side.brightest = brightest(&mut side.peaks.iter().filter(|f| f.distance() >= nearest))
            .filter(|f| f.peak.value > inner);
        side.hotspot = outer.filter(|f| {
            overall.is_some_and(|all| f.peak.value >= HOTSPOT_BRIGHTNESS * all.peak.value)
        });
    }
    sides
}
