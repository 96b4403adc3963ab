//! The jet of one side: its flux, widening, and what one map tells of the criteria of a jet.

use std::collections::BTreeMap;

use super::Findings;
use super::side::{jet_flux, strip_signal};
use super::units::Units;
use crate::measurement::{Bare, Because, Measurement, OrMissing};
use crate::record::JetRecord;
use crate::ridge::Ridge;
use crate::stats::median;

pub(super) fn jet_record(findings: &Findings, units: &Units, k: usize) -> JetRecord {
    let detected =
        strip_signal(findings, k).is_some_and(|s| s >= findings.settings.ratio_value_sigma);
    let flux_density_mjy = jet_flux(findings, units, k);
    let (Some((ridges, _)), Some(strips)) = (&findings.model.sides, &findings.strips) else {
        let because = Because::NoRoomForStrip;
        return JetRecord {
            detected,
            criteria: OrMissing::missing(because),
            flux_density_mjy,
            opening_angle_deg: Measurement::missing(because),
            width_exponent: Bare::missing(because),
        };
    };
    let strip = strips.placed.strip;
    let ends = (strip.inner, strip.outer);
    let confidence = findings.settings.confidence;
    let (opening, exponent, criteria) = if detected {
        let core_sigma = findings.model.core.position_sigma;
        (
            ridges[k].opening_angle_deg(ends, findings.observed.working_beam.major, confidence),
            ridges[k].width_exponent(ends).map_or(Bare::missing(Because::Unresolved), |e| {
                Bare::number(e, Because::OutOfDomain)
            }),
            OrMissing::from_option(
                criteria(&ridges[k], ends, findings.observed.working_beam.major, core_sigma),
                Because::JetNotDetected,
            ),
        )
    } else {
        let because = Because::JetNotDetected;
        (Measurement::missing(because), Bare::missing(because), OrMissing::missing(because))
    };
    JetRecord {
        detected,
        criteria,
        flux_density_mjy,
        opening_angle_deg: units.deconvolved(opening),
        width_exponent: if units.deconvolved(opening) == opening {
            exponent
        } else {
            Bare::missing(Because::NoBeam)
        },
    }
}

/// What a jet is (Bridle & Perley 1984, ARA&A 22, 319), as far as one map tells: at least
/// four times as long as wide; separable from other extended structures by its brightness or in
/// space; aligned with the core where it is closest to it. `None` where the ridge has no point
/// in the strip.
///
/// The length is that from the core to the strip's outer end, the width the median FWHM inside
/// (seen through the beam, so that a short jet of unknown width does not pass). Separable is a
/// ridge that falls to half its brightness on both sides at half of its points or more. It is
/// aligned where the line through its points in the strip's first two beams passes the core
/// within half a beam.
fn criteria(
    ridge: &Ridge,
    (inner, outer): (f64, f64),
    beam_major: f64,
    core_sigma: f64,
) -> Option<BTreeMap<String, bool>> {
    let points: Vec<_> =
        ridge.points.iter().filter(|p| p.distance >= inner && p.distance < outer).collect();
    let first = points.first()?;
    let mut widths: Vec<f64> = points.iter().filter_map(|p| p.width.best()).collect();
    let separable = 2 * widths.len() >= points.len();
    let width = median(&mut widths);
    let last = points.last()?;
    let reach = if outer > last.distance + beam_major { last.distance } else { outer };
    let next = points.iter().rev().find(|p| p.distance <= first.distance + 2.0 * beam_major)?;
    let along = next.offset.minus(first.offset);
    // Distance of the core from the line through the two points.
    let miss = (along.east * first.offset.north - along.north * first.offset.east).abs()
        / along.radius().max(f64::MIN_POSITIVE);
    let lever = first.distance / along.radius().max(f64::MIN_POSITIVE);
    let noise = (first.aside_sigma() * (1.0 + lever)).hypot(next.aside_sigma() * lever);
    let aligned = along.radius() > 0.0
        && miss <= (0.5 * beam_major).max(2.0 * noise.hypot(core_sigma)).min(beam_major);
    Some(BTreeMap::from([
        ("four_times_as_long_as_wide".to_owned(), width.is_some_and(|w| reach >= 4.0 * w)),
        ("separable".to_owned(), separable),
        ("aligned_with_core".to_owned(), aligned),
    ]))
}
