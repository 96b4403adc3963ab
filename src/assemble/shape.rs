//! Sizes, arms and the Fanaroff–Riley ratio of the whole source.

use super::Findings;
use super::sums::of_cut_sides;
use crate::extent::{Extent, Outline, resolution_limit, widest_across};
use crate::measurement::{Because, Measurement, OrMissing};
use crate::record::{ArmBasis, Symmetry};
use crate::source::sides::{BRIGHTEST_BEYOND_BEAMS, Feature};
use crate::stats::normal_deviate;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg, wrap_undirected_deg};

/// Sizes of the whole source in plane units.
pub(super) struct Extents {
    pub(super) size: Measurement,
    pub(super) deconvolved: Measurement,
    pub(super) axial_ratio: Measurement,
}

/// Signal-to-noise of a maximum that counts as a feature.
const LEAST_PEAK: f64 = 5.0;

/// Calls `f` with what extents are measured on.
pub(super) fn with_outline<T>(findings: &Findings, f: impl FnOnce(&Outline) -> T) -> T {
    let model = findings.model;
    // Fainter maxima are as often the noise's.
    let detected = model.peaks.iter().filter(|p| p.signal_to_noise >= LEAST_PEAK);
    let peaks: Vec<(Pixel, f64)> = detected.map(|p| (p.pixel, p.value)).collect();
    f(&Outline {
        window: &model.window,
        frame: &model.frame,
        beam: &findings.observed.working_beam,
        level: model.level,
        contour: &model.contour,
        peaks: &peaks,
    })
}

pub(super) fn measure_extents(findings: &Findings) -> Extents {
    let Findings { observed, model, settings, .. } = *findings;
    let beam = &observed.working_beam;
    let z = normal_deviate(settings.confidence);
    let strongest = model.peaks.iter().map(|p| p.signal_to_noise).fold(1.5, f64::max);
    let limit = |direction_deg: f64| resolution_limit(beam.reach_along(direction_deg), strongest);
    let off_beam = |extent: &Extent, cut_off: bool| {
        extent.deconvolved(cut_off, limit(extent.direction_deg), settings.confidence, z)
    };
    with_outline(findings, |outline| {
        let along = outline.between(model.ends);
        let size = along.size(model.cut_off, settings.confidence);
        let deconvolved = off_beam(&along, model.cut_off);
        let across_deg = along.direction_deg + 90.0;
        let width = widest_across(&model.contour, &model.frame, along.direction_deg)
            .map(|points| off_beam(&outline.along(points, across_deg), false));
        let axial_ratio = match (deconvolved, width) {
            (
                Measurement::Value { value: l, minus: less, plus: more, .. },
                Some(Measurement::Value { value: w, minus: narrower, plus: wider, .. }),
            ) => {
                let value = (l / w).max(1.0);
                let error = |a: f64, b: f64| value * (a / l).hypot(b / w);
                Measurement::value(value, error(less, wider), error(more, narrower))
            }
            (
                Measurement::Value { value: l, .. },
                Some(Measurement::UpperLimit { upper_limit, confidence }),
            ) => Measurement::lower_limit((l / upper_limit).max(1.0), confidence),
            _ => Measurement::missing(Because::Unresolved),
        };
        Extents { size, deconvolved, axial_ratio }
    })
}

/// What follows from the two sides' ends.
pub(super) struct Arms {
    pub(super) position_angle_deg: Measurement,
    pub(super) hotspot_separation: Measurement,
    pub(super) folded: Measurement,
    pub(super) unfolded: Measurement,
    pub(super) basis: ArmBasis,
    /// Record index of the longer arm.
    pub(super) longer: Option<usize>,
    pub(super) because: Because,
    pub(super) misalignment_deg: Measurement,
    pub(super) bend_deg: Measurement,
}

impl Arms {
    /// No arms, for one reason.
    pub(super) fn missing(because: Because) -> Self {
        let none = Measurement::missing(because);
        Self {
            position_angle_deg: none,
            hotspot_separation: none,
            folded: none,
            unfolded: none,
            basis: ArmBasis::None,
            longer: None,
            because,
            misalignment_deg: none,
            bend_deg: none,
        }
    }
}

/// The end of a side as seen from the core: its hot spot, else its ridge's end.
#[derive(Clone, Copy)]
pub(super) struct SideEnd {
    pub(super) offset: SkyOffset,
    /// 1σ inwards and outwards along the direction from the core, its own error included.
    pub(super) radial: (f64, f64),
    /// 1σ across it, its own error included.
    pub(super) aside: f64,
    pub(super) is_hotspot: bool,
}

impl SideEnd {
    pub(super) fn distance(&self) -> Measurement {
        Measurement::value(self.offset.radius(), self.radial.0, self.radial.1)
    }

    pub(super) fn position_angle_deg(&self) -> Measurement {
        Measurement::symmetric(self.offset.position_angle_deg(), self.aside_deg())
    }

    fn aside_deg(&self) -> f64 {
        (self.aside / self.offset.radius()).to_degrees()
    }

    /// Variance along a position angle.
    fn variance_along(&self, pa_deg: f64) -> f64 {
        let turn = (pa_deg - self.offset.position_angle_deg()).to_radians();
        let radial = 0.5 * (self.radial.0 + self.radial.1);
        (radial * turn.cos()).powi(2) + (self.aside * turn.sin()).powi(2)
    }
}

/// The end of a model side; `with_core` counts the core's error in.
pub(super) fn side_end(findings: &Findings, k: usize, with_core: bool) -> Option<SideEnd> {
    let (ridges, features) = findings.model.sides.as_ref()?;
    let core = if with_core { findings.model.core.position_sigma } else { 0.0 };
    if let Some(spot) = features[k].hotspot {
        let pa_deg = spot.offset.position_angle_deg();
        let radial = spot.sigma_along(pa_deg).hypot(core);
        let aside = spot.sigma_along(pa_deg + 90.0).hypot(core);
        let (offset, radial) = (spot.offset, (radial, radial));
        return Some(SideEnd { offset, radial, aside, is_hotspot: true });
    }
    let end = ridges[k].end?;
    let radius = end.offset.radius();
    Some(SideEnd {
        offset: end.offset,
        radial: (end.along.minus.hypot(core), end.along.plus.hypot(core)),
        aside: (end.bearing_sigma_deg().to_radians() * radius).hypot(core),
        is_hotspot: false,
    })
}

pub(super) fn arms(findings: &Findings, order: [usize; 2]) -> Arms {
    if findings.model.sides.is_none() {
        return Arms::missing(Because::NoCore);
    }
    let [a, b] = match order.map(|k| side_end(findings, k, false)) {
        [Some(a), Some(b)] => [a, b],
        [one, other] => {
            let mut arms = Arms::missing(Because::SideNotDetected);
            // One side still has a direction.
            let of = |k: usize| side_end(findings, order[k], true);
            if let Some(end) = one.and(of(0)).or_else(|| other.and(of(1))) {
                let pa_deg = wrap_undirected_deg(end.offset.position_angle_deg());
                arms.position_angle_deg = Measurement::symmetric(pa_deg, end.aside_deg());
            }
            return arms;
        }
    };
    let core = findings.model.core.position_sigma;
    let chord = b.offset.minus(a.offset);
    let chord_deg = chord.position_angle_deg();
    let sigma_along = |pa_deg: f64| (a.variance_along(pa_deg) + b.variance_along(pa_deg)).sqrt();
    let both_hotspots = a.is_hotspot && b.is_hotspot;
    let (ra, rb) = (a.offset.radius(), b.offset.radius());
    // The core's place moves both arms at once.
    let both = core * (1.0 / ra + 1.0 / rb);
    let unfolded = ra / rb;
    let error = |a: f64, b: f64| unfolded * (a / ra).hypot(b / rb).hypot(both);
    let (less, more) = (error(a.radial.0, b.radial.1), error(a.radial.1, b.radial.0));
    let cut = order.map(|k| findings.model.side_cut[k]);
    let confidence = findings.settings.confidence;
    let either_cut = cut.contains(&true);
    let misalignment =
        wrap_difference_deg(b.offset.position_angle_deg() - a.offset.position_angle_deg() - 180.0);
    let turned = (a.aside / ra).hypot(b.aside / rb).hypot(both).to_degrees();
    let inverse = Measurement::value(unfolded, less, more).decreasing(f64::recip);
    let folded = if unfolded >= 1.0 { Measurement::value(unfolded, less, more) } else { inverse };
    Arms {
        position_angle_deg: Measurement::symmetric(
            wrap_undirected_deg(chord_deg),
            (sigma_along(chord_deg + 90.0) / chord.radius()).to_degrees(),
        ),
        hotspot_separation: if both_hotspots && either_cut {
            let z = normal_deviate(confidence);
            Measurement::lower_limit(chord.radius() - z * sigma_along(chord_deg), confidence)
        } else if both_hotspots {
            Measurement::symmetric(chord.radius(), sigma_along(chord_deg))
        } else {
            Measurement::missing(Because::NoHotspot)
        },
        folded: if either_cut {
            Measurement::missing(Because::LeavesMap)
        } else {
            at_least(folded, 1.0)
        },
        unfolded: of_cut_sides(Measurement::value(unfolded, less, more), cut, confidence),
        basis: if both_hotspots { ArmBasis::Hotspots } else { ArmBasis::Ends },
        longer: (!either_cut).then_some(usize::from(unfolded < 1.0)),
        because: if either_cut { Because::LeavesMap } else { Because::SideNotDetected },
        misalignment_deg: Measurement::symmetric(misalignment, turned),
        bend_deg: at_least(Measurement::symmetric(misalignment.abs(), turned), 0.0),
    }
}

/// A folded quantity: its intervals end at the least value it can have.
fn at_least(value: Measurement, least: f64) -> Measurement {
    match value {
        Measurement::Value { value: v, minus, plus, .. } => {
            Measurement::value(v, minus.min(v - least), plus)
                .with_ci95((v - 1.96 * minus).max(least), v + 1.96 * plus)
        }
        other => other,
    }
}

/// A bend smaller than this is none, whatever its error: slow turns of a few degrees are in
/// every jet (own choice).
const LEAST_BEND_DEG: f64 = 5.0;
/// A bend is one where it exceeds its error this many times.
const BEND_SIGMA: f64 = 2.0;

/// Symmetry of the sides from their signed bends (end minus inner position angle, both
/// counted from north through east): turns of one sense make an S (inversion), of opposite
/// senses a C (mirror).
pub(super) fn symmetry(bends_deg: [Measurement; 2]) -> OrMissing<Symmetry> {
    let mut turns = [0.0; 2];
    let mut unsure = false;
    for (turn, bend) in turns.iter_mut().zip(bends_deg) {
        match bend {
            Measurement::Value { value, minus, plus, .. } => {
                let sigma = 0.5 * (minus + plus);
                if value.abs() >= LEAST_BEND_DEG.max(BEND_SIGMA * sigma) {
                    *turn = value.signum();
                } else {
                    unsure |= value.abs() + BEND_SIGMA * sigma >= 3.0 * LEAST_BEND_DEG;
                }
            }
            Measurement::Missing { missing } => return OrMissing::missing(missing),
            _ => unsure = true,
        }
    }
    let product: f64 = turns[0] * turns[1];
    OrMissing::Present(if product > 0.0 {
        Symmetry::Inversion
    } else if product < 0.0 {
        Symmetry::Mirror
    } else if turns == [0.0, 0.0] && !unsure {
        Symmetry::Straight
    } else {
        Symmetry::Undecided
    })
}

pub(super) struct FrRatios {
    pub(super) whole: Measurement,
    pub(super) deconvolved: Measurement,
    /// Over the deconvolved size, for the class: between the *regions* of highest brightness
    /// (Fanaroff & Riley 1974), which on a side that fades from the core lie where the search
    /// begins and not at a faint maximum farther out.
    pub(super) of_regions: Measurement,
}

/// Distance of the brightest points over the size. A side on which no peak stands out beyond
/// 1.5 beams falls outwards: its brightest point lies within that distance, or within that of
/// the farthest maximum that noise may have made.
pub(super) fn fr_ratios(
    findings: &Findings,
    order: [usize; 2],
    size: Measurement,
    deconvolved: Measurement,
) -> FrRatios {
    let missing = |because| FrRatios {
        whole: Measurement::missing(because),
        deconvolved: Measurement::missing(because),
        of_regions: Measurement::missing(because),
    };
    let Some((ridges, features)) = &findings.model.sides else { return missing(Because::NoCore) };
    if findings.model.cut_off {
        // What lies beyond the edge may be brighter.
        return missing(Because::LeavesMap);
    }
    let nearest = BRIGHTEST_BEYOND_BEAMS * findings.observed.working_beam.major;
    let bound = |k: usize| features[k].falls_from.max(nearest);
    let chord = |f: &Feature, g: &Feature| {
        let chord = g.offset.minus(f.offset);
        let pa_deg = chord.position_angle_deg();
        (chord.radius(), f.sigma_along(pa_deg).hypot(g.sigma_along(pa_deg)))
    };
    let core = findings.model.core.position_sigma;
    let one = |f: &Feature, other: f64| {
        let sigma = f.sigma_along(f.offset.position_angle_deg()).hypot(core);
        (f.distance() + normal_deviate(findings.settings.confidence) * sigma + other, 0.0)
    };
    let over = |points: [Option<&Feature>; 2], bounds: [f64; 2], size: Measurement| {
        let ((distance, sigma), monotonic) = match points {
            [Some(f), Some(g)] => (chord(f, g), false),
            [Some(f), None] => (one(f, bounds[1]), true),
            [None, Some(g)] => (one(g, bounds[0]), true),
            [None, None] => ((bounds[0] + bounds[1], 0.0), true),
        };
        over_size(distance, sigma, size, monotonic, findings)
    };
    let peaks = order.map(|k| features[k].brightest.as_ref());
    // A side whose ridge is brighter where the search begins than at any peak beyond is
    // brightest there.
    let regions = order.map(|k| {
        let start = ridges[k].points.iter().find(|p| p.distance >= nearest);
        let start = start.map_or(0.0, |p| p.brightness);
        features[k].brightest.as_ref().filter(|f| f.peak.value > start)
    });
    FrRatios {
        whole: over(peaks, order.map(bound), size),
        deconvolved: over(peaks, order.map(bound), deconvolved),
        of_regions: over(regions, [nearest; 2], deconvolved),
    }
}

/// A distance over a size: a value, or an upper limit where the distance is one.
pub(super) fn over_size(
    distance: f64,
    sigma: f64,
    size: Measurement,
    is_limit: bool,
    findings: &Findings,
) -> Measurement {
    let confidence = findings.settings.confidence;
    match size {
        Measurement::Value { value, minus, plus, .. } if value > 0.0 => {
            if is_limit {
                let least = value - normal_deviate(confidence) * minus;
                // The brightest points of a source lie inside it: no limit at all.
                if least <= distance {
                    Measurement::missing(Because::Unresolved)
                } else {
                    Measurement::upper_limit(distance / least, confidence)
                }
            } else {
                let ratio = distance / value;
                let error = |size_error: f64| ratio * (sigma / distance).hypot(size_error / value);
                Measurement::value(ratio, error(plus), error(minus))
            }
        }
        Measurement::Missing { missing } => Measurement::missing(missing),
        _ => Measurement::missing(Because::Unresolved),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn symmetry_follows_the_senses_of_the_bends() {
        let of = |a: (f64, f64), b: (f64, f64)| {
            symmetry([Measurement::symmetric(a.0, a.1), Measurement::symmetric(b.0, b.1)])
        };
        let is = |s: Symmetry| OrMissing::Present(s);
        // Both turn from north towards east: an S about the core.
        assert_eq!(of((20.0, 2.0), (15.0, 2.0)), is(Symmetry::Inversion));
        assert_eq!(of((20.0, 2.0), (-15.0, 2.0)), is(Symmetry::Mirror));
        assert_eq!(of((1.0, 2.0), (-3.0, 2.0)), is(Symmetry::Straight));
        // One bend that is sure and one that is none; and two of which nothing is known.
        assert_eq!(of((20.0, 2.0), (1.0, 2.0)), is(Symmetry::Undecided));
        assert_eq!(of((10.0, 20.0), (5.0, 20.0)), is(Symmetry::Undecided));
        let none = Measurement::missing(Because::JetNotDetected);
        let one = symmetry([Measurement::symmetric(20.0, 1.0), none]);
        assert_eq!(one, OrMissing::missing(Because::JetNotDetected));
    }

    #[test]
    fn a_folded_quantity_does_not_reach_below_its_least_value() {
        match at_least(Measurement::symmetric(1.05, 0.2), 1.0) {
            Measurement::Value { minus, plus, ci95: Some([low, high]), .. } => {
                assert!((minus - 0.05).abs() < 1e-12 && (plus - 0.2).abs() < 1e-12);
                assert!((low - 1.0).abs() < 1e-12 && (high - 1.442).abs() < 1e-12);
            }
            other => panic!("expected a value, got {other:?}"),
        }
    }
}
