//! The fitted components in the record, and what follows from them.

use super::units::Units;
use super::{Findings, position};
use crate::components::{Component, outermost_separation};
use crate::extent::resolution_limit;
use crate::measurement::{Because, Measurement};
use crate::record::{ComponentRecord, ComponentRole, ShapeRecord};
use crate::units::Pixel;

/// A component within this many beam majors of the core or a hot spot is called after it.
const SAME_PLACE_BEAMS: f64 = 0.6;

/// Distance between the two outermost fitted components.
pub(super) fn component_separation(findings: &Findings) -> Measurement {
    // Two points are what they are; with more components how many were fitted moves each end.
    let beam = findings.observed.working_beam.mean_fwhm();
    let many = findings.components.components.len() > 2;
    let systematic = if many { 0.05 * beam * std::f64::consts::SQRT_2 } else { 0.0 };
    let components = &findings.components.components;
    let frame = &findings.model.frame;
    let Some((separation, sigma, ends)) = outermost_separation(components, frame) else {
        return Measurement::missing(Because::TooFewFeatures);
    };
    let minus = sigma.hypot(systematic);
    let (Some(one), Some(other)) = (components.get(ends.0), components.get(ends.1)) else {
        return Measurement::symmetric(separation, minus);
    };
    // An end much wider than the beam may hide the feature that ends the source: as likely
    // anywhere in its outer half, within 0.34 of its width with 68 %.
    let axis_deg = frame.offset(one.pixel).minus(frame.offset(other.pixel)).position_angle_deg();
    let width = findings.observed.working_beam.projected_fwhm(axis_deg + 90.0);
    let hidden = |c: &Component| {
        let (sin, cos) = (axis_deg - c.pa_deg).to_radians().sin_cos();
        let along = (c.major.0 * cos).powi(2) + (c.minor.0 * sin).powi(2);
        0.34 * (along - 2.0 * width * width).max(0.0).sqrt()
    };
    let plus = minus.hypot(hidden(one).hypot(hidden(other)));
    let found = Measurement::value(separation, minus, plus);
    // Of a source that leaves the map an end may lie outside.
    if findings.model.cut_off { found.as_lower_limit(findings.settings.confidence) } else { found }
}

/// The fitted components, brightest flux first.
pub(super) fn component_records(findings: &Findings, units: &Units) -> Vec<ComponentRecord> {
    let model = findings.model;
    let near = SAME_PLACE_BEAMS * findings.observed.working_beam.major;
    let nearest = |at: Pixel| {
        let distance = |c: &Component| model.frame.separation(c.pixel, at);
        let list = findings.components.components.iter().enumerate();
        list.map(|(k, c)| (k, distance(c)))
            .filter(|(_, d)| *d <= near)
            .min_by(|a, b| a.1.total_cmp(&b.1))
            .map(|(k, _)| k)
    };
    let core = model.core.fit.and_then(|fit| nearest(fit.pixel));
    let hotspots: Vec<usize> = model
        .sides
        .iter()
        .flat_map(|(_, features)| features)
        .filter_map(|side| nearest(side.hotspot?.peak.pixel))
        .collect();
    findings
        .components
        .components
        .iter()
        .enumerate()
        .map(|(k, c)| ComponentRecord {
            role: if core == Some(k) {
                ComponentRole::Core
            } else if hotspots.contains(&k) {
                ComponentRole::Hotspot
            } else {
                ComponentRole::Other
            },
            position: position(findings.map, c.pixel),
            position_error_arcsec: units.bare_arcsec(c.position_sigma),
            flux_density_mjy: units.flux(c.flux, c.flux_sigma),
            peak_brightness_mjy_per_beam: units.brightness(c.peak, c.peak_sigma),
            major_arcsec: units.arcsec(Measurement::symmetric(c.major.0, c.major.1)),
            minor_arcsec: units.arcsec(Measurement::symmetric(c.minor.0, c.minor.1)),
            position_angle_deg: Measurement::symmetric(c.pa_deg, c.pa_sigma_deg),
            deconvolved: ShapeRecord {
                major_arcsec: units.deconvolved(units.arcsec(c.deconvolved.major)),
                minor_arcsec: units.deconvolved(units.arcsec(c.deconvolved.minor)),
                position_angle_deg: units.deconvolved(c.deconvolved.position_angle_deg),
            },
        })
        .collect()
}

/// The component with role core.
pub(super) fn core_component(components: &[ComponentRecord]) -> Option<&ComponentRecord> {
    components.iter().find(|c| c.role == ComponentRole::Core)
}

/// Deconvolved axes of the core in mas: those of the component with role core; where the fit
/// tells none there but a beam-shaped component was found, it is a point, and the smallest
/// size that could be told from one stands in as upper limit.
pub(super) fn core_axes_mas(
    findings: &Findings,
    units: &Units,
    components: &[ComponentRecord],
) -> Option<[Measurement; 2]> {
    let axes = match (core_component(components), findings.model.core.fit) {
        (Some(c), _) => [c.deconvolved.major_arcsec, c.deconvolved.minor_arcsec],
        (None, Some(fit)) => {
            let beam = &findings.observed.working_beam;
            let signal = fit.peak / fit.peak_noise.max(f64::MIN_POSITIVE);
            [beam.major, beam.minor].map(|fwhm| {
                let limit = resolution_limit(fwhm, signal);
                let limit = Measurement::upper_limit(limit, findings.settings.confidence);
                units.deconvolved(units.arcsec(limit))
            })
        }
        (None, None) if findings.model.core.pixel.is_some() => {
            [Measurement::missing(Because::TooFewFeatures); 2]
        }
        (None, None) => return None,
    };
    Some(axes.map(|axis| axis.scaled(1000.0)))
}
