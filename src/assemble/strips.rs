//! The record of jet against counter-jet.

use super::roles::Order;
use super::units::Units;
use super::{Findings, MOST_BLANK, Strips};
use crate::brightness::{FluxPair, StripPair, ratio};
use crate::measurement::{Bare, Because, Measurement, OrMissing};
use crate::record::{ApertureRecord, BrightnessRecord, ProfilePointRecord};
use crate::units::SkyOffset;

pub(super) fn brightness_record(
    findings: &Findings,
    units: &Units,
    order: &Order,
) -> BrightnessRecord {
    let because =
        if findings.model.sides.is_none() { Because::NoCore } else { Because::NoRoomForStrip };
    let Some(strips) = &findings.strips else {
        return BrightnessRecord::missing(because);
    };
    let settings = findings.settings;
    let [a, b] = order.index;
    let flux_pair = |pair: &StripPair| FluxPair {
        numerator: pair.fluxes[a].sum,
        denominator: pair.fluxes[b].sum,
        numerator_variance: pair.variance[a],
        denominator_variance: pair.variance[b],
        covariance: pair.covariance,
    };
    let ratio_of = |pair: &StripPair| {
        if findings.core_is_unsure() {
            return Measurement::missing(Because::CoreUnsure);
        }
        if strips.blank_fraction > MOST_BLANK {
            return Measurement::missing(Because::BlankPixels);
        }
        ratio(flux_pair(pair), settings.ratio_value_sigma, settings.confidence)
    };
    let pair = &strips.pair;
    let flux = |k: usize| units.flux_noise(pair.fluxes[k].sum, pair.variance[k].sqrt());
    let peak = findings.model.peak.value;
    let strip = strips.placed.strip;
    BrightnessRecord {
        jet_to_counter_jet_ratio: ratio_of(pair),
        jet_flux_density_mjy: flux(a),
        counter_jet_flux_density_mjy: flux(b),
        strip_covariance_mjy2: match units.per_pixel {
            Ok(factor) => Bare::number(pair.covariance * factor * factor, Because::OutOfDomain),
            Err(because) => Bare::missing(because),
        },
        aperture: OrMissing::Present(ApertureRecord {
            inner_arcsec: units.bare_arcsec(strip.inner),
            outer_arcsec: units.bare_arcsec(strip.outer),
            half_width_arcsec: units.bare_arcsec(strip.half_width),
            inner_px: strip.inner * units.px_per_unit,
            outer_px: strip.outer * units.px_per_unit,
            half_width_px: strip.half_width * units.px_per_unit,
            counter_strip_follows_ridge: strips.placed.follows[b],
        }),
        peak_ratio: peak_ratio(findings, order, strips),
        profile: strips
            .profile
            .iter()
            .map(|(distance, piece)| {
                let mean = |k: usize| {
                    let area = piece.fluxes[k].area_px.max(f64::MIN_POSITIVE);
                    (piece.fluxes[k].sum / area, piece.variance[k].sqrt() / area)
                };
                let ((jet, jet_sigma), (counter, counter_sigma)) = (mean(a), mean(b));
                ProfilePointRecord {
                    distance_arcsec: units.bare_arcsec(*distance),
                    ratio: ratio_of(piece),
                    jet_brightness_mjy_per_beam: units.brightness_noise(jet, jet_sigma),
                    counter_jet_brightness_mjy_per_beam: units
                        .brightness_noise(counter, counter_sigma),
                    jet_brightness_relative: jet / peak,
                    counter_jet_brightness_relative: counter / peak,
                }
            })
            .collect(),
        sidedness_sigma: Bare::from_option(order.sidedness, Because::BlankPixels),
    }
}

/// Ratio of the brightest places along the two strips' middles.
pub(super) fn peak_ratio(findings: &Findings, order: &Order, strips: &Strips) -> Measurement {
    let Some((ridges, _)) = &findings.model.sides else {
        return Measurement::missing(Because::NoCore);
    };
    let model = findings.model;
    let refs = [&ridges[0], &ridges[1]];
    let strip = strips.placed.strip;
    let step = findings.observed.working_beam.minor / 4.0;
    let steps = (((strip.outer - strip.inner) / step).ceil() as usize).clamp(1, 2000);
    let brightest = |k: usize| {
        (0..=steps)
            .filter_map(|i| {
                let d = strip.inner + (strip.outer - strip.inner) * i as f64 / steps as f64;
                let bearing = strips.placed.bearing(refs, k, d);
                let at = model.frame.pixel(SkyOffset::polar(d, bearing));
                Some((model.coreless.cubic(at)?, model.coreless.rms_at(at)?))
            })
            .max_by(|x, y| x.0.total_cmp(&y.0))
    };
    let (Some(jet), Some(counter)) = (brightest(order.index[0]), brightest(order.index[1])) else {
        return Measurement::missing(Because::BlankPixels);
    };
    ratio(
        FluxPair {
            numerator: jet.0,
            denominator: counter.0,
            numerator_variance: jet.1 * jet.1,
            denominator_variance: counter.1 * counter.1,
            covariance: 0.0,
        },
        // A maximum over noise is biased upwards: only strong peaks make a value.
        findings.settings.follow_ridge_sigma,
        findings.settings.confidence,
    )
}
