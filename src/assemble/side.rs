//! The record of one side.

use super::Findings;
use super::shape::end_sigma;
use super::sums::Sums;
use super::units::Units;
use crate::brightness::positive_upper_limit;
use crate::extent::{Extent, FARTHEST_POINT, feature_sigma, position_sigma};
use crate::measurement::{Bare, Because, Measurement, OrMissing};
use crate::record::{HotspotRecord, JetRecord, LobeRecord, RidgePointRecord, Role, SideRecord};
use crate::ridge::Ridge;
use crate::source::sides::{BRIGHTEST_BEYOND_BEAMS, end_offset};
use crate::units::{Pixel, wrap_difference_deg, wrap_directed_deg};

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
        record.jet.criteria = OrMissing::missing(Because::NotImplemented);
        return record;
    }
    let beam = &findings.observed.working_beam;
    let core_sigma = model.core.position_sigma;
    let end = end_offset(ridge, side);
    let end_sigma = end_sigma(findings, k);
    let end_pa = end.map_or(Measurement::missing(Because::SideNotDetected), |e| {
        Measurement::symmetric(
            e.position_angle_deg(),
            (end_sigma.hypot(core_sigma) / e.radius()).to_degrees(),
        )
    });
    let bearing_sigma = |distance: f64, signal: f64| {
        ((position_sigma(beam.mean_fwhm(), signal)).hypot(core_sigma) / distance).to_degrees()
    };
    let inner_distance = 2.0 * beam.major;
    let inner_pa = ridge.points.iter().find(|p| p.distance >= inner_distance).map_or(
        Measurement::missing(Because::JetNotDetected),
        |p| {
            let sigma = bearing_sigma(inner_distance, p.signal_to_noise());
            Measurement::symmetric(ridge.bearing_at(inner_distance), sigma)
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
            .arcsec(Measurement::symmetric(h.distance(), end_sigma.hypot(core_sigma))),
        position_angle_deg: end_pa,
        peak_brightness_mjy_per_beam: units
            .brightness(h.peak.value, h.peak.value / h.peak.signal_to_noise),
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
        ridge_length_arcsec: if ridge.points.is_empty() {
            Measurement::missing(Because::JetNotDetected)
        } else {
            units.arcsec(Measurement::symmetric(
                ridge.length(),
                (0.1 * beam.mean_fwhm()).hypot(core_sigma),
            ))
        },
        length_kpc: Measurement::missing(Because::NoRedshift),
        flux_density_mjy: flux,
        fr_ratio: fr,
        jet: JetRecord {
            detected: strip_signal(findings, k).is_some_and(|s| s >= settings.ratio_value_sigma),
            criteria: OrMissing::missing(Because::NotImplemented),
            flux_density_mjy: jet_flux(findings, units, k),
            opening_angle_deg: Measurement::missing(Because::NotImplemented),
            width_exponent: Bare::missing(Because::NotImplemented),
        },
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
    let beam = &observed.working_beam;
    let peaks: Vec<(Pixel, f64)> = model.peaks.iter().map(|p| (p.pixel, p.value)).collect();
    let extent = Extent::between(
        &model.window,
        &model.frame,
        beam,
        model.level,
        &peaks,
        [model.frame.origin, pixel],
    );
    let length = offset.radius();
    let sigma = (FARTHEST_POINT * extent.ends[1].sigma).hypot(model.core.position_sigma);
    let size = if model.side_cut[k] {
        Measurement::lower_limit(length, settings.confidence)
    } else {
        Measurement::symmetric(length, sigma)
    };
    let fr = match features[k].brightest {
        Some(f) => {
            let ratio = f.distance() / length;
            let error = feature_sigma(beam.mean_fwhm(), f.peak.signal_to_noise);
            Measurement::symmetric(ratio, ratio * (error / f.distance()).hypot(sigma / length))
        }
        None => Measurement::upper_limit(
            (BRIGHTEST_BEYOND_BEAMS * beam.major / length).min(1.0),
            settings.confidence,
        ),
    };
    (size, if model.side_cut[k] { fr_of_cut(fr, settings.confidence) } else { fr })
}

/// A ratio over a length that is only known from below is an upper limit.
pub(super) fn fr_of_cut(fr: Measurement, confidence: f64) -> Measurement {
    fr.best().map_or(fr, |value| Measurement::upper_limit(value, confidence))
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
    let mean_square: f64 = inside
        .iter()
        .map(|p| {
            p.brightness / weight
                * (position_sigma(beam.mean_fwhm(), p.signal_to_noise()) / p.distance).powi(2)
        })
        .sum();
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
