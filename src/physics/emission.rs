//! Powers, brightness temperature and core prominence. Spectral index: S ∝ ν^(−α).

use std::f64::consts::{LN_2, PI};

use crate::constants::{ARCSEC_PER_RADIAN, BOLTZMANN_J_K, KM_PER_MPC, SPEED_OF_LIGHT_KM_S};
use crate::measurement::{Because, Measurement};

/// One mJy in W m⁻² Hz⁻¹ (1 Jy = 1e-26 W m⁻² Hz⁻¹ by definition).
const W_M2_HZ_PER_MJY: f64 = 1e-29;

/// Brightness temperature in K of an elliptical Gaussian of 1 Jy at 1 GHz with axes of
/// 1 mas × 1 mas (FWHM): 2 ln 2 c²/(π k) in these units = 1.22212e12.
///
/// Source: Rayleigh–Jeans law over the Gaussian's solid angle π θ₁ θ₂/(4 ln 2); the trade
/// rounds it to 1.22e12 (Kovalev et al. 2005, AJ 130, 2473; from memory).
pub const BRIGHTNESS_TEMPERATURE_K: f64 = {
    let speed_of_light_m_s = SPEED_OF_LIGHT_KM_S * 1e3;
    let radian_per_mas = 1e-3 / ARCSEC_PER_RADIAN;
    2.0 * LN_2 * speed_of_light_m_s * speed_of_light_m_s * 1e-26
        / (PI * BOLTZMANN_J_K * 1e18 * radian_per_mas * radian_per_mas)
};

/// Monochromatic power: L = 4π D_L² S (1+z)^(α−1).
///
/// Units: flux density in mJy, luminosity distance in Mpc; result in W/Hz over the whole
/// sphere, never per steradian (see [`per_steradian`]).
/// Assumes: isotropic emission and one power law between the observed frequency and
/// (1+z) times it; the power is that at the rest-frame frequency equal to the observed one.
/// Valid for: finite numbers, z ≥ 0, D_L > 0; else `None`. A negative flux stays negative.
/// Source: Hogg 1999, astro-ph/9905116, equation 24 with a power law put in.
pub fn luminosity_w_per_hz(
    flux_density_mjy: f64,
    luminosity_distance_mpc: f64,
    redshift: f64,
    spectral_index: f64,
) -> Option<f64> {
    if !(luminosity_distance_mpc > 0.0 && redshift >= 0.0) {
        return None;
    }
    let distance_m = luminosity_distance_mpc * KM_PER_MPC * 1e3;
    let power = 4.0
        * PI
        * distance_m
        * distance_m
        * flux_density_mjy
        * W_M2_HZ_PER_MJY
        * (1.0 + redshift).powf(spectral_index - 1.0);
    power.is_finite().then_some(power)
}

/// A power over the whole sphere (W/Hz) as the W/Hz/sr of older papers: L/4π.
///
/// The two differ by 1.0992 dex; the break between the classes of Fanaroff & Riley (1974)
/// is quoted both ways.
pub fn per_steradian(luminosity_w_per_hz: f64) -> f64 {
    luminosity_w_per_hz / (4.0 * PI)
}

/// Brightness temperature of an elliptical Gaussian in its own frame:
/// T_b = 1.2221e12 K · S (1+z)/(ν² θ₁ θ₂).
///
/// Units: flux density in mJy, observing frequency in GHz, deconvolved FWHM axes in mas; K.
/// Assumes: Rayleigh–Jeans; the axes are the source's, not convolved with the beam.
/// Valid for: positive frequency and axes, z ≥ 0; else `None`.
/// Source: Kovalev et al. 2005, AJ 130, 2473 (from memory); see [`BRIGHTNESS_TEMPERATURE_K`].
pub fn brightness_temperature_k(
    flux_density_mjy: f64,
    frequency_ghz: f64,
    major_mas: f64,
    minor_mas: f64,
    redshift: f64,
) -> Option<f64> {
    if !(frequency_ghz > 0.0 && major_mas > 0.0 && minor_mas > 0.0 && redshift >= 0.0) {
        return None;
    }
    let temperature = BRIGHTNESS_TEMPERATURE_K * flux_density_mjy * 1e-3 * (1.0 + redshift)
        / (frequency_ghz * frequency_ghz * major_mas * minor_mas);
    temperature.is_finite().then_some(temperature)
}

/// Core prominence at the observed frequency: S_core/(S_total − S_core).
///
/// Units: both flux densities in the same unit; a pure number.
/// Assumes: the two errors are independent (first order, ∂/∂S_core = S_total/(S_total−S_core)²,
/// ∂/∂S_total = −S_core/(S_total−S_core)²); a flux-scale error common to both cancels in
/// truth, so leave it out of what is passed in.
/// An upper limit on the core gives an upper limit, and so does a lower limit on the total, with
/// the core's upper end (+ 1.645 σ) put in. Where the extended emission is less than
/// three times its error, the result is a 95 % lower limit with the extended emission's
/// upper end (max(S_total − S_core, 0) + 1.645 σ) put in.
/// Source: usage of the trade, for instance Fan & Zhang 2003, A&A 407, 899.
pub fn core_prominence(core: Measurement, total: Measurement) -> Measurement {
    use Measurement::{LowerLimit, Missing, UpperLimit, Value};
    let out_of_domain = Measurement::missing(Because::OutOfDomain);
    let ratio = |c: f64, t: f64| {
        if t > c && c >= 0.0 { c / (t - c) } else { f64::NAN }
    };
    match (core, total) {
        (Missing { missing }, _) | (_, Missing { missing }) => Measurement::missing(missing),
        (
            Value { value: c, minus: c_minus, plus: c_plus, .. },
            Value { value: t, minus: t_minus, plus: t_plus, .. },
        ) => {
            if c < 0.0 {
                return out_of_domain;
            }
            let extended = t - c;
            let sigma = (0.5 * (c_minus + c_plus)).hypot(0.5 * (t_minus + t_plus));
            if extended < 3.0 * sigma || extended <= 0.0 {
                return Measurement::lower_limit(c / (extended.max(0.0) + 1.645 * sigma), 0.95);
            }
            let (by_core, by_total) = (t / (extended * extended), c / (extended * extended));
            Measurement::value(
                c / extended,
                (by_core * c_minus).hypot(by_total * t_plus),
                (by_core * c_plus).hypot(by_total * t_minus),
            )
        }
        (UpperLimit { upper_limit, confidence }, Value { value, .. }) => {
            Measurement::upper_limit(ratio(upper_limit, value), confidence)
        }
        (LowerLimit { lower_limit, confidence }, Value { value, .. }) => {
            Measurement::lower_limit(ratio(lower_limit, value), confidence)
        }
        (Value { value, plus, .. }, LowerLimit { lower_limit, confidence }) => {
            Measurement::upper_limit(ratio(value + 1.645 * plus, lower_limit), confidence)
        }
        (Value { value, .. }, UpperLimit { upper_limit, confidence }) => {
            Measurement::lower_limit(ratio(value, upper_limit), confidence)
        }
        _ => out_of_domain,
    }
}

/// Core prominence at the rest-frame frequency equal to the observed one:
/// [S_core/(S_total − S_core)] (1+z)^(α_core − α_total).
///
/// Assumes: the extended emission has the index `total_spectral_index`, the core its own,
/// each a power law. Valid for: z ≥ 0; else missing.
/// Source: Fan & Zhang 2003, A&A 407, 899 (with α_core = 0 there).
pub fn core_prominence_rest(
    observed: Measurement,
    redshift: f64,
    core_spectral_index: f64,
    total_spectral_index: f64,
) -> Measurement {
    let factor = (1.0 + redshift).powf(core_spectral_index - total_spectral_index);
    if redshift >= 0.0 && factor.is_finite() && factor > 0.0 {
        observed.scaled(factor)
    } else {
        Measurement::missing(Because::OutOfDomain)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(a: f64, b: f64, relative: f64) {
        assert!((a - b).abs() <= relative * b.abs(), "{a} is not {b}");
    }

    #[test]
    fn power_of_one_jansky_at_one_megaparsec() {
        // log10(4π Mpc² 1e-26) = 20.077911, computed by hand from the definitions.
        let power = luminosity_w_per_hz(1000.0, 1.0, 0.0, 0.7).expect("in domain");
        assert!((power.log10() - 20.077_911).abs() < 1e-6);
        close(power / per_steradian(power), 4.0 * PI, 1e-15);
        // α = 1: the K correction cancels the (1+z) of the bandwidth.
        let shifted = luminosity_w_per_hz(1000.0, 1.0, 2.0, 1.0).expect("in domain");
        close(shifted, power, 1e-15);
        // α = 0: one factor of 1 + z less.
        let flat = luminosity_w_per_hz(1000.0, 1.0, 2.0, 0.0).expect("in domain");
        close(flat, power / 3.0, 1e-14);
        assert!(luminosity_w_per_hz(1.0, -1.0, 0.0, 0.7).is_none());
        assert!(luminosity_w_per_hz(f64::NAN, 1.0, 0.0, 0.7).is_none());
    }

    #[test]
    fn brightness_temperature_inverts_the_rayleigh_jeans_law() {
        // S = 2 k T ν²/c² · π θ²/(4 ln 2): T = 1e10 K, 5 GHz, 1 mas, in SI units.
        let theta = 1e-3 / 3600.0 * PI / 180.0;
        let flux_si =
            2.0 * 1.380_649e-23 * 1e10 * 25e18 / 299_792_458f64.powi(2) * PI * theta * theta
                / (4.0 * LN_2);
        let t = brightness_temperature_k(flux_si * 1e29, 5.0, 1.0, 1.0, 0.0).expect("in domain");
        close(t, 1e10, 1e-12);
        assert!(brightness_temperature_k(1.0, 5.0, 0.0, 1.0, 0.0).is_none());
        assert!(brightness_temperature_k(1.0, 0.0, 1.0, 1.0, 0.0).is_none());
    }

    #[test]
    fn core_prominence_of_values_and_limits() {
        let total = Measurement::symmetric(110.0, 1.0);
        match core_prominence(Measurement::symmetric(10.0, 1.0), total) {
            Measurement::Value { value, minus, plus, .. } => {
                close(value, 0.1, 1e-14);
                // √((110/100²)² + (10/100²)²) by hand.
                close(minus, 0.011_045_361, 1e-7);
                close(plus, minus, 1e-14);
            }
            other => panic!("expected a value, got {other:?}"),
        }
        let limit = core_prominence(Measurement::upper_limit(10.0, 0.95), total);
        assert_eq!(limit, Measurement::upper_limit(0.1, 0.95));
        // A core that is the whole source: the extended emission is below 1.645·√2.
        match core_prominence(Measurement::symmetric(110.0, 1.0), total) {
            Measurement::LowerLimit { lower_limit, .. } => {
                close(lower_limit, 110.0 / (1.645 * 2f64.sqrt()), 1e-12);
            }
            other => panic!("expected a lower limit, got {other:?}"),
        }
        let beyond = core_prominence(Measurement::upper_limit(200.0, 0.95), total);
        assert_eq!(beyond, Measurement::missing(Because::OutOfDomain));
        let rest = core_prominence_rest(Measurement::upper_limit(0.1, 0.95), 1.0, 0.0, 1.0);
        assert_eq!(rest, Measurement::upper_limit(0.05, 0.95));
    }
}
