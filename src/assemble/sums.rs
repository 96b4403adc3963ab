//! Fluxes of the parts of a source.

use super::Findings;
use crate::brightness::{FluxPair, ratio};
use crate::flux::{Sum, beyond_edge, sum_where, value_where, widened};
use crate::measurement::{Because, Measurement};
use crate::source::sides::{end_offset, side_of};
use crate::units::SkyOffset;

/// Sums over the parts of the source.
pub(super) struct Sums {
    pub(super) total: Sum,
    pub(super) contour: Sum,
    /// By the model's side index.
    pub(super) sides: [Sum; 2],
    /// By the record's order; `None` where there is no strip or no lobe.
    pub(super) lobes: Option<[Sum; 2]>,
    /// The lobes' second moments across their axes, plane units squared, by record order.
    pub(super) lobe_width: [Option<f64>; 2],
    pub(super) beam_area_px: f64,
}

pub(super) fn sum_parts(findings: &Findings, order: [usize; 2]) -> Sums {
    let Findings { map, observed, chosen, model, .. } = *findings;
    let members = chosen.of(&observed.regions);
    let beam = &observed.working_beam;
    let grow = beam.major / map.geometry.mean_scale();
    let inside = widened(&model.window, &members, map.columns, map.rows, grow);
    let background_px = observed.noise.background_area_px();
    let correlation = (&observed.noise, &observed.correlation);
    let total = sum_where(&model.window, correlation, background_px, |r, c| inside[[r, c]]);
    let contour = sum_where(&model.window, correlation, background_px, |r, c| {
        model.window.member[[r, c]] && model.window.brightness[[r, c]] >= model.level
    });
    let nothing = Sum::default();
    let mut sums = Sums {
        total,
        contour,
        sides: [nothing; 2],
        lobes: None,
        lobe_width: [None; 2],
        beam_area_px: beam.area_px(&map.geometry),
    };
    // The outermost half beam of what is summed, and the half beam inside it.
    let half = widened(&model.window, &members, map.columns, map.rows, 0.5 * grow);
    let own = |r: usize, c: usize| model.window.member[[r, c]];
    let rest = |part: &dyn Fn(usize, usize) -> bool| {
        let outer = sum_where(&model.window, correlation, background_px, |r, c| {
            inside[[r, c]] && !half[[r, c]] && part(r, c)
        });
        let inner = value_where(&model.window, |r, c| half[[r, c]] && !own(r, c) && part(r, c));
        beyond_edge(inner, &outer)
    };
    let Some((ridges, features)) = &model.sides else {
        sums.total = sums.total.plus(rest(&|_, _| true));
        return sums;
    };
    let offset = |r: usize, c: usize| model.frame.offset(model.coreless.pixel(r, c));
    let side = |r: usize, c: usize| side_of(ridges, offset(r, c));
    sums.sides = [0, 1].map(|k| {
        sum_where(&model.coreless, correlation, background_px, |r, c| {
            inside[[r, c]] && side(r, c) == k
        })
    });
    for k in [0, 1] {
        let rest = rest(&|r, c| side(r, c) == k);
        sums.sides[k] = sums.sides[k].plus(rest);
        sums.total = sums.total.plus(rest);
    }
    if let Some(strips) = &findings.strips {
        let edge = strips.placed.strip.outer + beam.major;
        sums.lobes = Some(order.map(|k| {
            sum_where(&model.coreless, correlation, background_px, |r, c| {
                inside[[r, c]] && side(r, c) == k && offset(r, c).radius() > edge
            })
        }));
        sums.lobe_width = order.map(|k| {
            let axis = end_offset(&ridges[k], &features[k])?;
            let across = SkyOffset::polar(1.0, axis.position_angle_deg() + 90.0);
            let (mut weight, mut first, mut second) = (0.0, 0.0, 0.0);
            for ((r, c), &b) in model.coreless.brightness.indexed_iter() {
                if model.window.member[[r, c]]
                    && model.coreless.usable(r, c)
                    && b > 0.0
                    && side(r, c) == k
                    && offset(r, c).radius() > edge
                {
                    let x = offset(r, c).dot(across);
                    weight += b;
                    first += b * x;
                    second += b * x * x;
                }
            }
            (weight > 0.0).then(|| (second / weight - (first / weight).powi(2)).max(0.0))
        });
    }
    sums
}

/// The core's flux in map unit × pixels, with noise error only.
pub(super) fn core_sum(findings: &Findings, sums: &Sums) -> Measurement {
    let core = &findings.model.core;
    if findings.observed.beam.is_none() {
        // The flux of a beam-shaped component is its peak times the beam's area.
        return Measurement::missing(Because::NoBeam);
    }
    let area = sums.beam_area_px;
    match (core.fit, core.peak_upper) {
        (Some(fit), _) => Measurement::symmetric(fit.peak * area, fit.peak_sigma * area),
        (None, Some(upper)) => Measurement::upper_limit(upper * area, findings.settings.confidence),
        (None, None) => Measurement::missing(Because::NoCore),
    }
}

/// Lobe flux of the record's first side over that of the second.
pub(super) fn lobe_flux_ratio(findings: &Findings, sums: &Sums, order: [usize; 2]) -> Measurement {
    let settings = findings.settings;
    let has_lobe = |k: usize| findings.strips.as_ref().is_some_and(|s| s.placed.lobe[k]);
    if !order.iter().all(|&k| has_lobe(k)) {
        return Measurement::missing(Because::NoLobe);
    }
    let Some([a, b]) = sums.lobes else { return Measurement::missing(Because::NoLobe) };
    if a.area_px < 1.0 || b.area_px < 1.0 {
        return Measurement::missing(Because::NoLobe);
    }
    let whole = ratio(
        FluxPair {
            numerator: a.value,
            denominator: b.value,
            numerator_variance: a.sigma * a.sigma,
            denominator_variance: b.sigma * b.sigma,
            covariance: 0.0,
        },
        settings.ratio_value_sigma,
        settings.confidence,
    );
    of_cut_sides(whole, order.map(|k| findings.model.side_cut[k]), settings.confidence)
}

/// A ratio of two sides of which one or both leave the map: what is missing makes it a limit.
pub(super) fn of_cut_sides(ratio: Measurement, cut: [bool; 2], confidence: f64) -> Measurement {
    match cut {
        [false, false] => ratio,
        [true, false] => ratio.as_lower_limit(confidence),
        [false, true] => ratio.as_upper_limit(confidence),
        [true, true] => Measurement::missing(Because::LeavesMap),
    }
}
