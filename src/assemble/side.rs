//! The record of one side.

use super::Findings;
use super::jet::jet_record;
use super::shape::{over_size, side_end, with_outline};
use super::sums::Sums;
use super::units::Units;
use crate::brightness::positive_upper_limit;
use crate::measurement::{Because, Measurement, OrMissing};
use crate::record::{HotspotRecord, LobeRecord, RidgePointRecord, Role, SideRecord};
use crate::ridge::Ridge;
use crate::source::sides::BRIGHTEST_BEYOND_BEAMS;
use crate::stats::normal_deviate;
use crate::units::{wrap_difference_deg, wrap_directed_deg};

pub(super) fn side_record(
    findings: &Findings,
    units: &Units,
    sums: &Sums,
    k: usize,
    role: Role,
) -> SideRecord {
    let model = findings.model;
    let settings = findings.settings;
    let Some((ridges, features)) = &model.sides else {
        return SideRecord::missing(role, Because::NoCore);
    };
    let (ridge, side) = (&ridges[k], &features[k]);
    let flux = units.flux(sums.sides[k].value, sums.sides[k].sigma);
    let cut = |m: Measurement| {
        if model.side_cut[k] { m.as_lower_limit(settings.confidence) } else { m }
    };
    let flux = cut(flux);
    if !ridge.detected && side.hotspot.is_none() {
        let mut record = SideRecord::missing(role, Because::SideNotDetected);
        record.flux_density_mjy = flux;
        record.jet.flux_density_mjy = jet_flux(findings, units, k);
        return record;
    }
    let beam = &findings.observed.working_beam;
    let core_sigma = model.core.position_sigma;
    let end = side_end(findings, k, true);
    let end_pa =
        end.map_or(Measurement::missing(Because::SideNotDetected), |e| e.position_angle_deg());
    let inner_distance = 2.0 * beam.major;
    let inner_pa = ridge.points.iter().find(|p| p.distance >= inner_distance).map_or(
        Measurement::missing(Because::JetNotDetected),
        |p| {
            let sigma = p.aside_sigma().hypot(core_sigma) / inner_distance;
            Measurement::symmetric(ridge.bearing_at(inner_distance), sigma.to_degrees())
        },
    );
    let bend = match (end_pa, inner_pa) {
        (
            Measurement::Value { value: e, minus: se, .. },
            Measurement::Value { value: i, minus: si, .. },
        ) => Measurement::symmetric(wrap_difference_deg(e - i), se.hypot(si)),
        _ => Measurement::missing(Because::JetNotDetected),
    };
    let (size, fr) = side_size(findings, k);
    let hotspot = side.hotspot.map(|h| HotspotRecord {
        x_px: h.peak.pixel.x,
        y_px: h.peak.pixel.y,
        east_arcsec: units.bare_arcsec(h.offset.east),
        north_arcsec: units.bare_arcsec(h.offset.north),
        distance_arcsec: units
            .arcsec(end.map_or(Measurement::missing(Because::NoHotspot), |end| end.distance())),
        position_angle_deg: end_pa,
        peak_brightness_mjy_per_beam: units.brightness(h.peak.value, h.brightness_sigma),
        signal_to_noise: h.peak.signal_to_noise,
    });
    let record_index = usize::from(matches!(role, Role::CounterJet | Role::Second));
    let lobe = lobe_record(findings, units, sums, (k, record_index), size);
    let peak = model.peak.value;
    SideRecord {
        role,
        position_angle_deg: mean_bearing(findings, ridge, core_sigma),
        inner_position_angle_deg: inner_pa,
        end_position_angle_deg: end_pa,
        bend_deg: bend,
        length_arcsec: units.arcsec(size),
        length_px: units.px(size),
        ridge_length_arcsec: ridge.length(beam.mean_fwhm(), settings.outline_sigma).map_or(
            Measurement::missing(Because::JetNotDetected),
            |(length, minus, plus)| {
                let (minus, plus) = (minus.hypot(core_sigma), plus.hypot(core_sigma));
                units.arcsec(cut(Measurement::value(length, minus, plus)))
            },
        ),
        length_kpc: Measurement::missing(Because::NoRedshift),
        flux_density_mjy: flux,
        fr_ratio: fr,
        jet: jet_record(findings, units, k),
        hotspot: OrMissing::from_option(hotspot, Because::NoHotspot),
        lobe,
        ridge: ridge
            .points
            .iter()
            .map(|p| RidgePointRecord {
                distance_arcsec: units.bare_arcsec(p.distance),
                east_arcsec: units.bare_arcsec(p.offset.east),
                north_arcsec: units.bare_arcsec(p.offset.north),
                brightness_mjy_per_beam: units.brightness_noise(p.brightness, p.rms),
                brightness_relative: p.brightness / peak,
                width_arcsec: units.arcsec(p.width),
                width_deconvolved_arcsec: units.deconvolved(units.arcsec(p.width_deconvolved)),
            })
            .collect(),
    }
}

/// Length of a side in plane units and its Fanaroff–Riley ratio.
pub(super) fn side_size(findings: &Findings, k: usize) -> (Measurement, Measurement) {
    let Findings { observed, model, settings, .. } = *findings;
    let none = Measurement::missing(Because::SideNotDetected);
    let Some((_, features)) = &model.sides else { return (none, none) };
    let Some((pixel, offset)) = features[k].farthest else { return (none, none) };
    let extent = with_outline(findings, |outline| outline.between([model.frame.origin, pixel]));
    let wander = extent.ends[1].wander;
    let length = (offset.radius() - wander.bias).max(0.0);
    let core = model.core.position_sigma;
    let size = Measurement::value(length, wander.minus.hypot(core), wander.plus.hypot(core))
        .with_ci95(
            length - wander.minus95.hypot(1.96 * core),
            length + wander.plus95.hypot(1.96 * core),
        );
    if model.side_cut[k] {
        let least = length - normal_deviate(settings.confidence) * wander.minus.hypot(core);
        let size = Measurement::lower_limit(least, settings.confidence);
        // What lies beyond the edge may be brighter.
        return (size, Measurement::missing(Because::LeavesMap));
    }
    let nearest = BRIGHTEST_BEYOND_BEAMS * observed.working_beam.major;
    let fr = match features[k].brightest {
        Some(f) => {
            let sigma = f.sigma_along(f.offset.position_angle_deg());
            over_size(f.distance(), sigma, size, false, findings)
        }
        None => over_size(features[k].falls_from.max(nearest), 0.0, size, true, findings),
    };
    (size, fr)
}

/// Flux-weighted bearing of a ridge inside the strip.
pub(super) fn mean_bearing(findings: &Findings, ridge: &Ridge, core_sigma: f64) -> Measurement {
    let Some(strips) = &findings.strips else {
        return Measurement::missing(Because::NoRoomForStrip);
    };
    let beam = &findings.observed.working_beam;
    let strip = strips.placed.strip;
    let inside: Vec<_> = ridge
        .points
        .iter()
        .filter(|p| p.distance >= strip.inner && p.distance < strip.outer && p.brightness > 0.0)
        .collect();
    let Some(first) = inside.first() else { return Measurement::missing(Because::JetNotDetected) };
    let weight: f64 = inside.iter().map(|p| p.brightness).sum();
    let turn: f64 = inside
        .iter()
        .map(|p| p.brightness * wrap_difference_deg(p.bearing_deg - first.bearing_deg))
        .sum::<f64>()
        / weight;
    // Points closer than a beam share their noise: as many independent ones as beams.
    let beams = ((strip.outer - strip.inner) / beam.major).max(1.0);
    let mean_square: f64 =
        inside.iter().map(|p| p.brightness / weight * (p.aside_sigma() / p.distance).powi(2)).sum();
    let middle = 0.5 * (strip.inner + strip.outer);
    let sigma = (mean_square / beams).sqrt().hypot(core_sigma / middle).to_degrees();
    Measurement::symmetric(wrap_directed_deg(first.bearing_deg + turn), sigma)
}

/// Strip flux of a model side over its error.
pub(super) fn strip_signal(findings: &Findings, k: usize) -> Option<f64> {
    let pair = &findings.strips.as_ref()?.pair;
    (pair.variance[k] > 0.0).then(|| pair.fluxes[k].sum / pair.variance[k].sqrt())
}

/// Flux of a side's jet: a value from 3σ, else an upper limit for a flux ≥ 0.
pub(super) fn jet_flux(findings: &Findings, units: &Units, k: usize) -> Measurement {
    let Some(strips) = &findings.strips else {
        return Measurement::missing(Because::NoRoomForStrip);
    };
    let (sum, sigma) = (strips.pair.fluxes[k].sum, strips.pair.variance[k].sqrt());
    if sigma <= 0.0 {
        return Measurement::missing(Because::BlankPixels);
    }
    if sum >= findings.settings.ratio_value_sigma * sigma {
        return units.flux(sum, sigma);
    }
    let confidence = findings.settings.confidence;
    match units.per_pixel {
        Ok(factor) => Measurement::upper_limit(
            positive_upper_limit(sum, sigma, confidence) * factor,
            confidence,
        ),
        Err(because) => Measurement::missing(because),
    }
}

pub(super) fn lobe_record(
    findings: &Findings,
    units: &Units,
    sums: &Sums,
    (model_index, index): (usize, usize),
    size: Measurement,
) -> OrMissing<LobeRecord> {
    let (Some(lobes), Some(strips)) = (sums.lobes, &findings.strips) else {
        return OrMissing::missing(Because::NoLobe);
    };
    let edge = strips.placed.strip.outer + findings.observed.working_beam.major;
    let lobe = lobes[index];
    if !strips.placed.lobe[model_index] {
        return OrMissing::missing(Because::NoLobe);
    }
    let seen = lobe.value >= findings.settings.ratio_value_sigma * lobe.sigma;
    if lobe.area_px < 1.0 || !seen || size.best().is_some_and(|length| length <= edge) {
        return OrMissing::missing(Because::NoLobe);
    }
    let beam = findings.observed.working_beam.mean_fwhm();
    let signal = (lobe.value / lobe.sigma.max(f64::MIN_POSITIVE)).max(1.0);
    OrMissing::Present(LobeRecord {
        flux_density_mjy: if findings.model.side_cut[model_index] {
            units.flux(lobe.value, lobe.sigma).as_lower_limit(findings.settings.confidence)
        } else {
            units.flux(lobe.value, lobe.sigma)
        },
        length_arcsec: units.arcsec(size.increasing(|s| s - edge)),
        width_arcsec: units.arcsec(sums.lobe_width[index].map_or(
            Measurement::missing(Because::NoLobe),
            |square| {
                let width = crate::constants::FWHM_PER_SIGMA * square.sqrt();
                Measurement::symmetric(width, width.max(beam) / signal)
            },
        )),
    })
}
