//! From measured numbers to physical ones: lengths, powers, brightness temperature and the
//! closed forms of relativistic beaming. Plain formulas; nothing here knows of maps.

pub mod beaming;
pub mod cosmology;
pub mod emission;
pub mod priors;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

pub use beaming::{BeamingClosedForms, Flow, constrain_from_ratio};
pub use cosmology::{Cosmology, CosmologyError, Distance};

use crate::measurement::{Bare, Because, Measurement, OrMissing};

/// What the physics needs to know: numbers of the observer and measurements of the map.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PhysicsInput {
    /// Redshift of the source.
    pub redshift: Option<f64>,
    /// Its error, 1σ; enters the errors of lengths and powers.
    pub redshift_error: Option<f64>,
    /// Distance in Mpc of a nearby source; where given, the redshift is not used.
    pub distance_mpc: Option<f64>,
    /// Observing frequency in GHz.
    pub frequency_ghz: Option<f64>,
    /// Spectral index α of the jet, S ∝ ν^(−α).
    pub spectral_index: f64,
    /// Its error, 1σ.
    pub spectral_index_error: f64,
    /// Spectral index of the core.
    pub core_spectral_index: f64,
    /// Spectral index of the whole source.
    pub total_spectral_index: f64,
    /// Which exponent the ratio is read with.
    pub flow: Flow,
    /// Jet to counter-jet ratio, `sides[0]` over `sides[1]`.
    pub ratio: Measurement,
    /// Largest angular size in arcsec.
    pub largest_angular_size_arcsec: Measurement,
    /// Flux density of the whole source in mJy.
    pub total_flux_density_mjy: Measurement,
    /// Flux density of the core in mJy.
    pub core_flux_density_mjy: Measurement,
    /// Flux density in mJy of the very component whose axes follow; the core's where none is
    /// told apart.
    pub core_component_flux_density_mjy: Measurement,
    /// Deconvolved axes (FWHM, major and minor) of the core's component in mas; an upper
    /// limit where the axis is below the resolution limit.
    pub core_axes_mas: Option<[Measurement; 2]>,
    /// Lengths of the two sides in arcsec.
    pub side_length_arcsec: [Measurement; 2],
}

/// The record's `physics` group.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Physics {
    /// Proper transverse length in kpc that spans one arcsec.
    pub scale_kpc_per_arcsec: Bare,
    /// The cosmology used.
    pub cosmology: Cosmology,
    /// Projected length of the largest angular size in kpc.
    pub projected_length_kpc: Measurement,
    /// Power of the whole source in W/Hz (not per steradian): 4π D_L² S (1+z)^(α_total − 1).
    pub luminosity_w_per_hz: Measurement,
    /// Power of the core in W/Hz, with the core's spectral index.
    pub core_luminosity_w_per_hz: Measurement,
    /// Brightness temperature of the core in K, in its own frame.
    pub core_brightness_temperature_k: Measurement,
    /// Closed forms from the jet to counter-jet ratio.
    pub beaming: Beaming,
    /// The constraint on speed and angle from all that is known.
    pub posterior: OrMissing<Posterior>,
}

/// Closed forms from the ratio, with those of the other flow beside them.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Beaming {
    /// The exponent p of R = [(1 + β cos θ)/(1 − β cos θ)]^p.
    pub exponent: Bare,
    /// The jet's spectral index α used, S ∝ ν^(−α).
    pub spectral_index: Bare,
    /// The flow that sets the exponent.
    pub flow: Flow,
    /// β cos θ of `sides[0]`; negative where `sides[1]` is the brighter one.
    pub beta_cos_theta: Measurement,
    /// Largest angle between line of sight and jet axis in degrees (for β → 1), 0 to 90.
    pub viewing_angle_max_deg: Measurement,
    /// Smallest speed in units of c (for θ → 0).
    pub beta_min: Measurement,
    /// Smallest Lorentz factor (for θ → 0).
    pub lorentz_factor_min: Measurement,
    /// The same with the exponent of the other flow.
    pub other_flow: BeamingClosedForms,
}

/// A quantity of the posterior: median and equal-tailed intervals.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct PosteriorQuantity {
    /// The median.
    pub median: f64,
    /// The 68 % interval.
    pub ci68: [f64; 2],
    /// The 95 % interval.
    pub ci95: [f64; 2],
}

/// Constraint on speed and angle. This version does not compute it yet.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Posterior {
    /// Speed in units of c.
    pub beta: PosteriorQuantity,
    /// Viewing angle in degrees.
    pub viewing_angle_deg: PosteriorQuantity,
    /// Lorentz factor.
    pub lorentz_factor: PosteriorQuantity,
    /// Doppler factor of the approaching jet.
    pub doppler_factor: PosteriorQuantity,
    /// Largest size over the sine of the viewing angle, in kpc.
    pub deprojected_length_kpc: OrMissing<PosteriorQuantity>,
}

/// The `physics` group with what belongs elsewhere in the record.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct PhysicsOutput {
    /// The record's `physics` group.
    pub physics: Physics,
    /// Projected lengths of the two sides in kpc, for `sides[i].length_kpc`.
    pub side_length_kpc: [Measurement; 2],
}

/// Turns measured numbers into physical ones.
///
/// Errors: that of the redshift is carried by evaluating each factor at z − σ_z and z + σ_z
/// (never below 0) and adding the differences in quadrature to the measurement's own error,
/// 1.96 of them to its 95 % interval; limits use the redshift as it is. A redshift without a
/// distance in this cosmology, or a distance that is not positive, makes what needs it
/// `out-of-domain`; [`distance`] says why in words. The cosmology is written down as it is:
/// [`Cosmology::check`] one that was put together by hand first.
pub fn constrain_physics(input: &PhysicsInput, cosmology: &Cosmology) -> PhysicsOutput {
    let place = Place::new(input, cosmology);
    let scale = |d: Distance| Some(d.kpc_per_arcsec());
    let length = |size: Measurement| place.scaled(size, scale);
    let power = |flux: Measurement, index: f64| {
        place.scaled(flux, |d| {
            emission::luminosity_w_per_hz(1.0, d.luminosity_mpc(), d.redshift(), index)
        })
    };
    let forms = |flow| {
        constrain_from_ratio(input.ratio, input.spectral_index, input.spectral_index_error, flow)
    };
    let chosen = forms(input.flow);
    let physics = Physics {
        scale_kpc_per_arcsec: match place.best {
            Ok(distance) => Bare::number(distance.kpc_per_arcsec(), Because::OutOfDomain),
            Err(because) => Bare::missing(because),
        },
        cosmology: *cosmology,
        projected_length_kpc: length(input.largest_angular_size_arcsec),
        luminosity_w_per_hz: power(input.total_flux_density_mjy, input.total_spectral_index),
        core_luminosity_w_per_hz: power(input.core_flux_density_mjy, input.core_spectral_index),
        core_brightness_temperature_k: core_brightness_temperature_k(input, &place),
        beaming: Beaming {
            exponent: chosen.exponent,
            spectral_index: chosen.spectral_index,
            flow: chosen.flow,
            beta_cos_theta: chosen.beta_cos_theta,
            viewing_angle_max_deg: chosen.viewing_angle_max_deg,
            beta_min: chosen.beta_min,
            lorentz_factor_min: chosen.lorentz_factor_min,
            other_flow: forms(input.flow.other()),
        },
        posterior: OrMissing::missing(Because::NotImplemented),
    };
    PhysicsOutput { physics, side_length_kpc: input.side_length_arcsec.map(length) }
}

/// The distance of a source: given directly, else from its redshift; `None` where neither is
/// known.
///
/// # Errors
/// A redshift or distance from which none follows.
pub fn distance(
    redshift: Option<f64>,
    distance_mpc: Option<f64>,
    cosmology: &Cosmology,
) -> Result<Option<Distance>, CosmologyError> {
    match (distance_mpc, redshift) {
        (Some(given), _) => Distance::from_distance_mpc(given).map(Some),
        (None, Some(z)) => Distance::from_redshift(z, cosmology).map(Some),
        (None, None) => Ok(None),
    }
}

/// The source's distance, and that at either end of the redshift's interval.
struct Place {
    best: Result<Distance, Because>,
    /// At z − σ and z + σ; an end without a distance is left out.
    ends: [Option<Distance>; 2],
}

impl Place {
    fn new(input: &PhysicsInput, cosmology: &Cosmology) -> Self {
        let best = match distance(input.redshift, input.distance_mpc, cosmology) {
            Ok(Some(distance)) => Ok(distance),
            Ok(None) => Err(Because::NoRedshift),
            Err(_) => Err(Because::OutOfDomain),
        };
        let at = |redshift: f64| {
            let mpc = cosmology.transverse_comoving_distance_mpc(redshift).ok()?;
            Some(Distance::Redshift { redshift, transverse_comoving_mpc: mpc })
        };
        let ends = match (best, input.redshift_error) {
            (Ok(Distance::Redshift { redshift, .. }), Some(error)) if error > 0.0 => {
                [at((redshift - error).max(0.0)), at(redshift + error)]
            }
            _ => [None, None],
        };
        Self { best, ends }
    }

    /// A measurement times a positive factor that depends on the distance, the redshift's
    /// error included. A factor that has no value at an end of the interval, or turns over
    /// inside it, is taken at the ends all the same: its least and largest of the three.
    fn scaled(
        &self,
        measurement: Measurement,
        factor: impl Fn(Distance) -> Option<f64>,
    ) -> Measurement {
        if measurement.is_missing() {
            return measurement;
        }
        let best = match self.best {
            Ok(distance) => match factor(distance) {
                Some(best) if best > 0.0 && best.is_finite() => best,
                _ => return Measurement::missing(Because::OutOfDomain),
            },
            Err(because) => return Measurement::missing(because),
        };
        let scaled = measurement.scaled(best);
        let Measurement::Value { value, minus, plus, ci95 } = scaled else {
            return scaled;
        };
        let (mut least, mut largest) = (best, best);
        for end in self.ends.into_iter().flatten() {
            // D = 0 at z = 0: the formula for a power has no value there, and the factor is 0.
            let at_end = factor(end).unwrap_or(0.0);
            least = least.min(at_end);
            largest = largest.max(at_end);
        }
        let (fall, rise) = (1.0 - least / best, largest / best - 1.0);
        // A negative flux falls where the factor rises.
        let (down, up) = if value >= 0.0 { (fall, rise) } else { (rise, fall) };
        let (down, up) = (down * value.abs(), up * value.abs());
        let out = Measurement::value(value, minus.hypot(down), plus.hypot(up));
        ci95.map_or(out, |[low, high]| {
            out.with_ci95(
                value - (value - low).hypot(1.96 * down),
                value + (high - value).hypot(1.96 * up),
            )
        })
    }
}

/// T_b = 1.2221e12 K S (1+z)/(ν² θ₁ θ₂) with limits: an axis that is only an upper limit
/// makes T_b a lower limit, a core that is only an upper limit makes it an upper limit, both
/// together leave it without a number. The other inputs enter a limit at their values. Two
/// limited axes keep the lesser confidence: their product exceeds the product of the limits
/// less often than either axis alone for sizes consistent with zero.
///
/// The error of a value is first order, in quadrature of the fractional errors.
fn core_brightness_temperature_k(input: &PhysicsInput, place: &Place) -> Measurement {
    let missing = Measurement::missing;
    let flux = input.core_component_flux_density_mjy;
    if flux.is_missing() {
        return flux;
    }
    let Some(frequency_ghz) = input.frequency_ghz else {
        return missing(Because::NoFrequency);
    };
    let Some(axes) = input.core_axes_mas else {
        return missing(Because::NoCore);
    };
    let [major, minor] = axes;
    for axis in axes {
        if axis.is_missing() {
            return axis;
        }
    }
    let (Some(major), Some(minor)) = (Factor::new(major), Factor::new(minor)) else {
        return missing(Because::OutOfDomain);
    };
    let Some(flux) = Factor::new(flux) else {
        return missing(Because::OutOfDomain);
    };
    let product = flux.over(major).and_then(|f| f.over(minor));
    let Some(product) = product else {
        return missing(Because::OutOfDomain);
    };
    // The unit temperature holds frequency and redshift: S/(θ₁ θ₂) = 1 mJy/mas².
    place.scaled(product.measurement(), |d| {
        emission::brightness_temperature_k(1.0, frequency_ghz, 1.0, 1.0, d.redshift())
    })
}

/// Which way a factor is bounded.
#[derive(Clone, Copy, PartialEq)]
enum Bound {
    Neither,
    Below(f64),
    Above(f64),
}

/// A positive factor of a product, with fractional errors or a bound with its confidence.
#[derive(Clone, Copy)]
struct Factor {
    value: f64,
    minus: f64,
    plus: f64,
    bound: Bound,
}

impl Factor {
    /// `None` where the number is missing or not positive.
    fn new(measurement: Measurement) -> Option<Self> {
        let factor = match measurement {
            Measurement::Value { value, minus, plus, .. } => {
                Self { value, minus: minus / value, plus: plus / value, bound: Bound::Neither }
            }
            Measurement::LowerLimit { lower_limit, confidence } => {
                Self { value: lower_limit, minus: 0.0, plus: 0.0, bound: Bound::Below(confidence) }
            }
            Measurement::UpperLimit { upper_limit, confidence } => {
                Self { value: upper_limit, minus: 0.0, plus: 0.0, bound: Bound::Above(confidence) }
            }
            Measurement::Missing { .. } => return None,
        };
        (factor.value > 0.0 && factor.value.is_finite()).then_some(factor)
    }

    /// The quotient; `None` where two bounds pull in opposite directions.
    fn over(self, divisor: Self) -> Option<Self> {
        let turned = match divisor.bound {
            Bound::Neither => Bound::Neither,
            Bound::Below(confidence) => Bound::Above(confidence),
            Bound::Above(confidence) => Bound::Below(confidence),
        };
        let bound = match (self.bound, turned) {
            (Bound::Neither, other) | (other, Bound::Neither) => other,
            (Bound::Below(a), Bound::Below(b)) => Bound::Below(a.min(b)),
            (Bound::Above(a), Bound::Above(b)) => Bound::Above(a.min(b)),
            _ => return None,
        };
        Some(Self {
            value: self.value / divisor.value,
            minus: self.minus.hypot(divisor.plus),
            plus: self.plus.hypot(divisor.minus),
            bound,
        })
    }

    /// Value or limit.
    fn measurement(self) -> Measurement {
        match self.bound {
            Bound::Neither => {
                Measurement::value(self.value, self.minus * self.value, self.plus * self.value)
            }
            Bound::Below(confidence) => Measurement::lower_limit(self.value, confidence),
            Bound::Above(confidence) => Measurement::upper_limit(self.value, confidence),
        }
    }
}

#[cfg(test)]
mod tests;
