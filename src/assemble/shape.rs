//! Sizes, arms and the Fanaroff–Riley ratio of the whole source.

use super::Findings;
use super::sums::of_cut_sides;
use crate::extent::{Extent, feature_sigma, resolution_limit, widest_across};
use crate::measurement::{Because, Measurement};
use crate::record::ArmBasis;
use crate::source::sides::{BRIGHTEST_BEYOND_BEAMS, end_offset};
use crate::stats::normal_deviate;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg, wrap_undirected_deg};

/// Sizes of the whole source in plane units.
pub(super) struct Extents {
    pub(super) size: Measurement,
    pub(super) deconvolved: Measurement,
    pub(super) axial_ratio: Measurement,
}

pub(super) fn measure_extents(findings: &Findings) -> Extents {
    let Findings { observed, model, settings, .. } = *findings;
    let beam = &observed.working_beam;
    let z = normal_deviate(settings.confidence);
    let peaks: Vec<(Pixel, f64)> = model.peaks.iter().map(|p| (p.pixel, p.value)).collect();
    let between = |points: [Pixel; 2]| {
        Extent::between(&model.window, &model.frame, beam, model.level, &peaks, points)
    };
    let strongest = model.peaks.iter().map(|p| p.signal_to_noise).fold(1.5, f64::max);
    let along = between(model.ends);
    let limit = |direction_deg: f64| resolution_limit(beam.reach_along(direction_deg), strongest);
    let size = along.size(model.cut_off, settings.confidence);
    let deconvolved =
        along.deconvolved(model.cut_off, limit(along.direction_deg), settings.confidence, z);
    let width = widest_across(&model.contour, &model.frame, along.direction_deg).map(|points| {
        // Only the part of the chord across the axis counts.
        let across_deg = along.direction_deg + 90.0;
        let mut extent = between(points);
        let chord = model.frame.difference(points[0], points[1]);
        extent.length = chord.dot(SkyOffset::polar(1.0, across_deg)).abs();
        extent.deconvolved(false, limit(across_deg), settings.confidence, z)
    });
    let axial_ratio = match (deconvolved, width) {
        (
            Measurement::Value { value: l, minus, .. },
            Some(Measurement::Value { value: w, minus: sw, .. }),
        ) => {
            let value = (l / w).max(1.0);
            Measurement::symmetric(value, value * (minus / l).hypot(sw / w))
        }
        (
            Measurement::Value { value: l, .. },
            Some(Measurement::UpperLimit { upper_limit, confidence }),
        ) => Measurement::lower_limit((l / upper_limit).max(1.0), confidence),
        _ => Measurement::missing(Because::Unresolved),
    };
    Extents { size, deconvolved, axial_ratio }
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

/// 1σ of a side's end along each axis: a hot spot's fit error, or half a beam for a ridge
/// that fades.
pub(super) fn end_sigma(findings: &Findings, k: usize) -> f64 {
    let beam = findings.observed.working_beam.mean_fwhm();
    let Some((_, features)) = &findings.model.sides else { return beam };
    features[k].hotspot.map_or(0.5 * beam, |h| feature_sigma(beam, h.peak.signal_to_noise))
}

pub(super) fn arms(findings: &Findings, order: [usize; 2]) -> Arms {
    let Some((ridges, features)) = &findings.model.sides else {
        return Arms::missing(Because::NoCore);
    };
    let ends = order.map(|k| end_offset(&ridges[k], &features[k]));
    let sigma = order.map(|k| end_sigma(findings, k));
    let core_sigma = findings.model.core.position_sigma;
    let (Some(a), Some(b)) = (ends[0], ends[1]) else {
        let mut one = Arms::missing(Because::SideNotDetected);
        // One side still has a direction.
        if let Some((k, end)) = ends.iter().enumerate().find_map(|(k, e)| e.map(|e| (k, e))) {
            let error = (sigma[k].hypot(core_sigma) / end.radius()).to_degrees();
            one.position_angle_deg =
                Measurement::symmetric(wrap_undirected_deg(end.position_angle_deg()), error);
        }
        return one;
    };
    let chord = b.minus(a);
    let both_hotspots = order.iter().all(|&k| features[k].hotspot.is_some());
    let chord_sigma = sigma[0].hypot(sigma[1]);
    let angle_sigma = (chord_sigma / chord.radius()).to_degrees();
    let (ra, rb) = (a.radius(), b.radius());
    let unfolded = ra / rb;
    let unfolded_sigma = unfolded
        * ((sigma[0] / ra).powi(2)
            + (sigma[1] / rb).powi(2)
            + (core_sigma * (1.0 / ra + 1.0 / rb)).powi(2))
        .sqrt();
    let cut = order.map(|k| findings.model.side_cut[k]);
    let confidence = findings.settings.confidence;
    let either_cut = cut.contains(&true);
    let misalignment = wrap_difference_deg(b.position_angle_deg() - a.position_angle_deg() - 180.0);
    let misalignment_sigma = ((sigma[0] / ra).powi(2)
        + (sigma[1] / rb).powi(2)
        + (core_sigma * (1.0 / ra + 1.0 / rb)).powi(2))
    .sqrt()
    .to_degrees();
    // Folded at 1: the error bar may not reach below.
    let folded = unfolded.max(1.0 / unfolded);
    let folded_sigma = unfolded_sigma * folded / unfolded;
    Arms {
        position_angle_deg: Measurement::symmetric(
            wrap_undirected_deg(chord.position_angle_deg()),
            angle_sigma,
        ),
        hotspot_separation: if both_hotspots && either_cut {
            Measurement::lower_limit(chord.radius(), confidence)
        } else if both_hotspots {
            Measurement::symmetric(chord.radius(), chord_sigma)
        } else {
            Measurement::missing(Because::NoHotspot)
        },
        folded: if either_cut {
            Measurement::missing(Because::LeavesMap)
        } else {
            Measurement::value(folded, folded_sigma.min(folded - 1.0), folded_sigma)
        },
        unfolded: of_cut_sides(Measurement::symmetric(unfolded, unfolded_sigma), cut, confidence),
        basis: if both_hotspots { ArmBasis::Hotspots } else { ArmBasis::Ends },
        longer: (!either_cut).then_some(usize::from(unfolded < 1.0)),
        because: if either_cut { Because::LeavesMap } else { Because::SideNotDetected },
        misalignment_deg: Measurement::symmetric(misalignment, misalignment_sigma),
        bend_deg: Measurement::value(
            misalignment.abs(),
            misalignment_sigma.min(misalignment.abs()),
            misalignment_sigma,
        ),
    }
}

pub(super) struct FrRatios {
    pub(super) whole: Measurement,
    pub(super) deconvolved: Measurement,
}

/// Distance of the brightest points over the size. A side without a peak of its own beyond
/// 1.5 beams falls from the core outwards: its brightest point lies within that distance.
pub(super) fn fr_ratios(
    findings: &Findings,
    order: [usize; 2],
    size: Measurement,
    deconvolved: Measurement,
) -> FrRatios {
    let missing = |because| FrRatios {
        whole: Measurement::missing(because),
        deconvolved: Measurement::missing(because),
    };
    let Some((_, features)) = &findings.model.sides else { return missing(Because::NoCore) };
    let beam = &findings.observed.working_beam;
    let points = order.map(|k| features[k].brightest);
    let sigma = order.map(|k| {
        features[k]
            .brightest
            .map_or(0.0, |f| feature_sigma(beam.mean_fwhm(), f.peak.signal_to_noise))
    });
    let nearest = BRIGHTEST_BEYOND_BEAMS * beam.major;
    let (distance, monotonic) = match points {
        [Some(a), Some(b)] => (a.offset.minus(b.offset).radius(), false),
        [Some(a), None] | [None, Some(a)] => (a.distance() + nearest, true),
        [None, None] => (2.0 * nearest, true),
    };
    let confidence = findings.settings.confidence;
    let over = |size: Measurement| match size {
        Measurement::Value { value, minus, .. } if value > 0.0 => {
            let ratio = distance / value;
            if monotonic && ratio >= 1.0 {
                // The brightest points of a source lie inside it: no limit at all.
                Measurement::missing(Because::Unresolved)
            } else if monotonic {
                Measurement::upper_limit(ratio, confidence)
            } else {
                let error = ratio * (sigma[0].hypot(sigma[1]) / distance).hypot(minus / value);
                Measurement::symmetric(ratio, error)
            }
        }
        Measurement::LowerLimit { lower_limit, confidence } if lower_limit > 0.0 => {
            Measurement::upper_limit(distance / lower_limit, confidence)
        }
        Measurement::UpperLimit { .. } => Measurement::missing(Because::Unresolved),
        Measurement::Missing { missing } => Measurement::missing(missing),
        _ => Measurement::missing(Because::Unresolved),
    };
    FrRatios { whole: over(size), deconvolved: over(deconvolved) }
}
