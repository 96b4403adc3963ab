//! Units put on numbers in the map's own unit, or the reason why that cannot be done.

use crate::map::SkyMap;
use crate::map::description::BrightnessUnit;
use crate::measurement::{Bare, Because, Measurement};
use crate::pipeline::Observed;

/// Puts units on numbers in the map's own unit, or says why that cannot be done.
#[derive(Clone, Copy)]
pub(super) struct Units {
    /// mJy/beam per map unit.
    pub(super) per_beam: Result<f64, Because>,
    /// mJy per map unit summed over one pixel.
    pub(super) per_pixel: Result<f64, Because>,
    /// Fractional error of the flux scale.
    pub(super) scale_error: f64,
    /// Plane units are arcsec.
    pub(super) has_scale: bool,
    /// Pixels per plane unit.
    pub(super) px_per_unit: f64,
    /// The beam is given or was read off the noise.
    pub(super) has_beam: bool,
}

/// Least fractional error of a flux whose beam was read off the noise: a dirty beam's noise is
/// not quite the restoring beam's.
const ESTIMATED_BEAM_ERROR: f64 = 0.15;

/// Fractional error of fluxes: the flux scale's, and the beam's area where it was estimated
/// and the unit is per beam.
fn scale_error(map: &SkyMap, observed: &Observed) -> f64 {
    let scale = map.description.flux_scale_error_or_default().unwrap_or(0.0);
    let per_beam = map.description.unit.is_some_and(BrightnessUnit::is_per_beam);
    let estimated = map.beam.is_none() && observed.beam.is_some();
    if estimated && per_beam { scale.hypot(ESTIMATED_BEAM_ERROR) } else { scale }
}

impl Units {
    pub(super) fn new(map: &SkyMap, observed: &Observed) -> Self {
        let because = if map.has_flux_unit() { Because::NoBeam } else { Because::NoFluxUnit };
        let factors = map.flux_factors(observed.beam.as_ref());
        Self {
            per_beam: factors.map(|f| f.mjy_per_beam).ok_or(because),
            // A map in flux per pixel is summed without knowing the beam.
            per_pixel: factors
                .map(|f| f.mjy_per_pixel)
                .or_else(|| map.mjy_per_pixel_without_beam())
                .ok_or(because),
            scale_error: scale_error(map, observed),
            has_scale: map.geometry.has_scale(),
            px_per_unit: 1.0 / map.geometry.mean_scale(),
            has_beam: observed.beam.is_some(),
        }
    }

    /// Brightness with noise error only.
    pub(super) fn brightness_noise(&self, value: f64, sigma: f64) -> Measurement {
        match self.per_beam {
            Ok(factor) => Measurement::symmetric(value * factor, sigma * factor),
            Err(because) => Measurement::missing(because),
        }
    }

    /// Brightness with the flux scale's error.
    pub(super) fn brightness(&self, value: f64, sigma: f64) -> Measurement {
        self.brightness_noise(value, sigma).with_fractional_error(self.scale_error)
    }

    /// Flux with noise error only.
    pub(super) fn flux_noise(&self, sum: f64, sigma: f64) -> Measurement {
        match self.per_pixel {
            Ok(factor) => Measurement::symmetric(sum * factor, sigma * factor),
            Err(because) => Measurement::missing(because),
        }
    }

    /// Flux with the flux scale's error.
    pub(super) fn flux(&self, sum: f64, sigma: f64) -> Measurement {
        self.flux_noise(sum, sigma).with_fractional_error(self.scale_error)
    }

    /// A flux in map unit × pixels, with the flux scale's error.
    pub(super) fn flux_of(&self, sum: Measurement) -> Measurement {
        match self.per_pixel {
            Ok(factor) => sum.scaled(factor).with_fractional_error(self.scale_error),
            Err(_) if sum.is_missing() => sum,
            Err(because) => Measurement::missing(because),
        }
    }

    pub(super) fn bare_brightness(&self, value: f64) -> Bare {
        match self.per_beam {
            Ok(factor) => Bare::number(value * factor, Because::OutOfDomain),
            Err(because) => Bare::missing(because),
        }
    }

    /// A length in plane units as arcsec.
    pub(super) fn arcsec(&self, length: Measurement) -> Measurement {
        if self.has_scale || length.is_missing() {
            length
        } else {
            Measurement::missing(Because::NoPixelScale)
        }
    }

    pub(super) fn bare_arcsec(&self, length: f64) -> Bare {
        if self.has_scale {
            Bare::number(length, Because::OutOfDomain)
        } else {
            Bare::missing(Because::NoPixelScale)
        }
    }

    /// What has the beam taken off, where the beam is known.
    pub(super) fn deconvolved(&self, value: Measurement) -> Measurement {
        if self.has_beam || value.is_missing() {
            value
        } else {
            Measurement::missing(Because::NoBeam)
        }
    }

    /// A length in plane units as pixels.
    pub(super) fn px(&self, length: Measurement) -> Measurement {
        length.scaled(self.px_per_unit)
    }
}
