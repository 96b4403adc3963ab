//! Special relativity of two opposite jets: formulas between speed, viewing angle, Doppler
//! factor, jet to counter-jet ratio and apparent speed.
//!
//! Symbols: β = speed over that of light, Γ = Lorentz factor, θ = angle between the jet and
//! the line of sight, δ = Doppler factor, α = spectral index with S ∝ ν^(−α), p = exponent
//! of the ratio, R = jet over counter-jet, x = β cos θ.
//!
//! Every function gives `None` outside the domain its doc states, never NaN.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::constants::{ARCSEC_PER_RADIAN, KM_PER_MPC, SECONDS_PER_YEAR, SPEED_OF_LIGHT_KM_S};
use crate::measurement::{Bare, Because, Measurement};

/// Proper motion times distance of one speed of light: 63.24108 mas/yr · Mpc
/// (Julian year of 365.25 d).
pub const MAS_MPC_PER_YEAR_PER_C: f64 =
    SPEED_OF_LIGHT_KM_S * SECONDS_PER_YEAR * ARCSEC_PER_RADIAN * 1e3 / KM_PER_MPC;

/// How the emitting plasma flows: sets the exponent p of the ratio.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Flow {
    /// A continuous jet, p = 2 + α (Scheuer & Readhead 1979, Nature 277, 182).
    #[default]
    Continuous,
    /// A single blob in each jet, p = 3 + α (Ryle & Longair 1967, MNRAS 136, 123). The two
    /// blobs are seen at different ages, so for evolving ones this is an approximation.
    Blob,
}

impl Flow {
    /// The exponent p for a spectral index α (S ∝ ν^(−α)).
    pub fn exponent(self, spectral_index: f64) -> f64 {
        match self {
            Self::Continuous => 2.0 + spectral_index,
            Self::Blob => 3.0 + spectral_index,
        }
    }

    /// The other flow.
    pub const fn other(self) -> Self {
        match self {
            Self::Continuous => Self::Blob,
            Self::Blob => Self::Continuous,
        }
    }
}

/// The number where it is finite.
fn finite(value: f64) -> Option<f64> {
    value.is_finite().then_some(value)
}

/// Whether speed and viewing angle are in their domain: 0 ≤ β < 1 and 0° ≤ θ ≤ 180°.
fn in_domain(beta: f64, viewing_angle_deg: f64) -> bool {
    (0.0..1.0).contains(&beta) && (0.0..=180.0).contains(&viewing_angle_deg)
}

/// 1 − β cos θ as (1 − β) + 2β sin²(θ/2): no digits lost at small angles and high speeds.
fn one_minus_beta_cos(beta: f64, viewing_angle_deg: f64) -> f64 {
    let half_sine = libm::sin((0.5 * viewing_angle_deg).to_radians());
    (1.0 - beta) + 2.0 * beta * half_sine * half_sine
}

/// 1 + β cos θ in the same way.
fn one_plus_beta_cos(beta: f64, viewing_angle_deg: f64) -> f64 {
    one_minus_beta_cos(beta, 180.0 - viewing_angle_deg)
}

/// sin θ, exactly 0 at 0° and 180°.
fn sine(viewing_angle_deg: f64) -> f64 {
    libm::sin(viewing_angle_deg.min(180.0 - viewing_angle_deg).to_radians())
}

/// Lorentz factor Γ = 1/√(1 − β²).
///
/// Units: pure numbers. Valid for: 0 ≤ β < 1. Source: special relativity.
pub fn lorentz_factor(beta: f64) -> Option<f64> {
    if (0.0..1.0).contains(&beta) { Some(1.0 / ((1.0 - beta) * (1.0 + beta)).sqrt()) } else { None }
}

/// Speed β = √(1 − 1/Γ²) of a Lorentz factor.
///
/// Valid for: Γ ≥ 1; β rounds to 1 above Γ = 1e8, which is then refused.
pub fn speed_from_lorentz_factor(lorentz_factor: f64) -> Option<f64> {
    if !(lorentz_factor >= 1.0 && lorentz_factor.is_finite()) {
        return None;
    }
    let inverse = 1.0 / lorentz_factor;
    let beta = ((1.0 - inverse) * (1.0 + inverse)).sqrt();
    (beta < 1.0).then_some(beta)
}

/// Doppler factor δ = 1/[Γ (1 − β cos θ)].
///
/// Units: θ in degrees; give 180 − θ for the receding jet.
/// Valid for: 0 ≤ β < 1, 0 ≤ θ ≤ 180. Assumes: the source's own redshift is taken off.
/// Source: Urry & Padovani 1995, PASP 107, 803, appendix A.
pub fn doppler_factor(beta: f64, viewing_angle_deg: f64) -> Option<f64> {
    if !in_domain(beta, viewing_angle_deg) {
        return None;
    }
    finite(((1.0 - beta) * (1.0 + beta)).sqrt() / one_minus_beta_cos(beta, viewing_angle_deg))
}

/// Viewing angle in degrees at which a flow of speed β shows the Doppler factor δ:
/// cos θ = (1 − 1/(Γδ))/β.
///
/// Valid for: 0 < β < 1 and δ between √((1−β)/(1+β)) and √((1+β)/(1−β)).
/// Source: the Doppler factor turned round (Urry & Padovani 1995, appendix A).
pub fn viewing_angle_from_doppler_deg(beta: f64, doppler_factor: f64) -> Option<f64> {
    let gamma = lorentz_factor(beta)?;
    if !(beta > 0.0 && doppler_factor > 0.0) {
        return None;
    }
    let cosine = (1.0 - 1.0 / (gamma * doppler_factor)) / beta;
    arccos_deg(cosine, 1e-12)
}

/// arccos in degrees; a cosine beyond ±1 by rounding (at most `slack`) counts as ±1.
fn arccos_deg(cosine: f64, slack: f64) -> Option<f64> {
    if cosine.abs() <= 1.0 + slack {
        finite(cosine.clamp(-1.0, 1.0).acos().to_degrees())
    } else {
        None
    }
}

/// Jet to counter-jet ratio R = [(1 + β cos θ)/(1 − β cos θ)]^p.
///
/// Units: θ in degrees; R below 1 for θ > 90°.
/// Assumes: two jets alike in their own frames, steady, optically thin, isotropic there,
/// compared at equal projected distances. Valid for: 0 ≤ β < 1, 0 ≤ θ ≤ 180, finite p, and
/// a ratio that fits a number. Source: Scheuer & Readhead 1979, Nature 277, 182;
/// Urry & Padovani 1995, appendix A.
pub fn jet_to_counter_jet_ratio(beta: f64, viewing_angle_deg: f64, exponent: f64) -> Option<f64> {
    let arms = arm_length_ratio(beta, viewing_angle_deg)?;
    finite(libm::pow(arms, exponent))
}

/// β cos θ = (R^(1/p) − 1)/(R^(1/p) + 1) = tanh(ln R/2p).
///
/// Valid for: R > 0, p > 0. Negative for R < 1.
/// Source: the ratio turned round (for instance Giovannini et al. 2001, ApJ 552, 508).
pub fn beta_cos_theta_from_ratio(ratio: f64, exponent: f64) -> Option<f64> {
    if ratio > 0.0 && ratio.is_finite() && exponent > 0.0 && exponent.is_finite() {
        Some((ratio.ln() / (2.0 * exponent)).tanh())
    } else {
        None
    }
}

/// β cos θ of a measured ratio, its error or limit carried through. An end of the interval
/// at or below zero counts as the smallest possible β cos θ, −1.
pub fn beta_cos_theta(ratio: Measurement, exponent: f64) -> Measurement {
    match half_log_ratio(ratio, exponent) {
        Ok(_) => ratio.increasing(|r| (r.max(0.0).ln() / (2.0 * exponent)).tanh()),
        Err(because) => Measurement::missing(because),
    }
}

/// Largest angle in degrees between line of sight and jet axis that allows β cos θ:
/// arccos |β cos θ|, reached for β → 1.
///
/// The axis, not the jet: always from 0 to 90, whichever side comes nearer.
/// Valid for: |β cos θ| ≤ 1.
pub fn viewing_angle_max_deg(beta_cos_theta: f64) -> Option<f64> {
    arccos_deg(beta_cos_theta.abs(), 0.0)
}

/// Smallest speed that allows β cos θ: |β cos θ|, reached for θ → 0.
///
/// Valid for: |β cos θ| ≤ 1.
pub fn beta_min(beta_cos_theta: f64) -> Option<f64> {
    (beta_cos_theta.abs() <= 1.0).then_some(beta_cos_theta.abs())
}

/// Smallest Lorentz factor that allows β cos θ: 1/√(1 − (β cos θ)²).
///
/// Valid for: |β cos θ| < 1.
pub fn lorentz_factor_min(beta_cos_theta: f64) -> Option<f64> {
    lorentz_factor(beta_cos_theta.abs())
}

/// Apparent transverse speed β_app = β sin θ/(1 − β cos θ), in units of c.
///
/// Units: θ in degrees; above 90° for a receding jet. Largest, βΓ, at cos θ = β.
/// Valid for: 0 ≤ β < 1, 0 ≤ θ ≤ 180. Source: Rees 1966, Nature 211, 468.
pub fn apparent_speed(beta: f64, viewing_angle_deg: f64) -> Option<f64> {
    if !in_domain(beta, viewing_angle_deg) {
        return None;
    }
    finite(beta * sine(viewing_angle_deg) / one_minus_beta_cos(beta, viewing_angle_deg))
}

/// Apparent speed in units of c of a proper motion: β_app = µ D_M/c.
///
/// Units: µ in mas/yr as observed, D_M the transverse comoving distance in Mpc, which holds
/// the one factor 1 + z; for a nearby source simply the distance.
/// Valid for: µ ≥ 0, D_M > 0, finite. Source: Hogg 1999, astro-ph/9905116, section 5.
pub fn apparent_speed_from_proper_motion(
    proper_motion_mas_per_year: f64,
    transverse_comoving_mpc: f64,
) -> Option<f64> {
    if proper_motion_mas_per_year >= 0.0 && transverse_comoving_mpc > 0.0 {
        finite(proper_motion_mas_per_year * transverse_comoving_mpc / MAS_MPC_PER_YEAR_PER_C)
    } else {
        None
    }
}

/// Proper motion in mas/yr of an apparent speed: the inverse of
/// [`apparent_speed_from_proper_motion`].
pub fn proper_motion_mas_per_year(
    apparent_speed: f64,
    transverse_comoving_mpc: f64,
) -> Option<f64> {
    if apparent_speed >= 0.0 && transverse_comoving_mpc > 0.0 {
        finite(apparent_speed * MAS_MPC_PER_YEAR_PER_C / transverse_comoving_mpc)
    } else {
        None
    }
}

/// What an apparent speed alone says: each bound holds at any other unknown.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ApparentSpeedLimits {
    /// Smallest speed, β_app/√(1 + β_app²).
    pub beta_min: f64,
    /// Smallest Lorentz factor, √(1 + β_app²).
    pub lorentz_factor_min: f64,
    /// Viewing angle in degrees at which the smallest speed is enough, arccot β_app.
    pub viewing_angle_at_beta_min_deg: f64,
    /// Largest viewing angle in degrees, 2 arccot β_app, reached for β → 1.
    pub viewing_angle_max_deg: f64,
}

/// Limits on speed and angle from an apparent speed (in units of c).
///
/// Valid for: β_app ≥ 0, finite. `beta_min` may round to 1 above β_app = 1e8.
/// Source: Urry & Padovani 1995, appendix A; the trade.
pub fn limits_from_apparent_speed(apparent_speed: f64) -> Option<ApparentSpeedLimits> {
    if !(apparent_speed >= 0.0 && apparent_speed.is_finite()) {
        return None;
    }
    let gamma = 1f64.hypot(apparent_speed);
    let angle_deg = 1f64.atan2(apparent_speed).to_degrees();
    Some(ApparentSpeedLimits {
        beta_min: apparent_speed / gamma,
        lorentz_factor_min: gamma,
        viewing_angle_at_beta_min_deg: angle_deg,
        viewing_angle_max_deg: 2.0 * angle_deg,
    })
}

/// Speed β = β_app/(sin θ + β_app cos θ) that shows the apparent speed at this angle.
///
/// Valid for: β_app ≥ 0, 0 < θ < 180 and a speed below 1, else `None`.
/// Source: the apparent speed turned round.
pub fn speed_from_apparent_speed(apparent_speed: f64, viewing_angle_deg: f64) -> Option<f64> {
    if !(apparent_speed >= 0.0 && viewing_angle_deg > 0.0 && viewing_angle_deg < 180.0) {
        return None;
    }
    let cosine = viewing_angle_deg.to_radians().cos();
    let beta = apparent_speed / apparent_speed.mul_add(cosine, sine(viewing_angle_deg));
    (0.0..1.0).contains(&beta).then_some(beta)
}

/// A speed with a viewing angle.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SpeedAndAngle {
    /// Speed in units of c.
    pub beta: f64,
    /// Lorentz factor.
    pub lorentz_factor: f64,
    /// Viewing angle of the approaching jet in degrees.
    pub viewing_angle_deg: f64,
}

impl SpeedAndAngle {
    /// From β cos θ and β sin θ; `None` where the speed is not below 1.
    fn from_components(along: f64, across: f64) -> Option<Self> {
        let beta = along.hypot(across);
        let lorentz_factor = lorentz_factor(beta)?;
        Some(Self { beta, lorentz_factor, viewing_angle_deg: across.atan2(along).to_degrees() })
    }
}

/// Lorentz factor and angle of an apparent speed with a Doppler factor:
/// Γ = (β_app² + δ² + 1)/(2δ), tan θ = 2β_app/(β_app² + δ² − 1).
///
/// Valid for: β_app ≥ 0, δ > 0 and Γ below 1e8. The angle is meaningless (0) where β_app = 0
/// and δ = 1, a source at rest.
/// Source: Urry & Padovani 1995, PASP 107, 803, appendix A.
pub fn speed_and_angle_from_doppler(
    apparent_speed: f64,
    doppler_factor: f64,
) -> Option<SpeedAndAngle> {
    if !(apparent_speed >= 0.0 && doppler_factor > 0.0) {
        return None;
    }
    let square = apparent_speed * apparent_speed;
    let lorentz_factor = (square + doppler_factor * doppler_factor + 1.0) / (2.0 * doppler_factor);
    let beta = speed_from_lorentz_factor(lorentz_factor.max(1.0))?;
    // δ² − 1 as a product keeps its digits near 1.
    let along = square + (doppler_factor - 1.0) * (doppler_factor + 1.0);
    let viewing_angle_deg = (2.0 * apparent_speed).atan2(along).to_degrees();
    Some(SpeedAndAngle { beta, lorentz_factor, viewing_angle_deg })
}

/// Proper motions (approaching, receding) in mas/yr of two opposite ejecta:
/// µ = (c/D) β sin θ/(1 ∓ β cos θ).
///
/// Units: θ in degrees, D in Mpc (D_M for a source with a redshift).
/// Valid for: 0 ≤ β < 1, 0 ≤ θ ≤ 90, D > 0.
/// Source: Mirabel & Rodríguez 1999, ARA&A 37, 409, section 3.2.
pub fn ejection_proper_motions_mas_per_year(
    beta: f64,
    viewing_angle_deg: f64,
    distance_mpc: f64,
) -> Option<(f64, f64)> {
    if !(0.0..=90.0).contains(&viewing_angle_deg) {
        return None;
    }
    let approaching = apparent_speed(beta, viewing_angle_deg)?;
    let receding = apparent_speed(beta, 180.0 - viewing_angle_deg)?;
    Some((
        proper_motion_mas_per_year(approaching, distance_mpc)?,
        proper_motion_mas_per_year(receding, distance_mpc)?,
    ))
}

/// β cos θ = (µ_a − µ_r)/(µ_a + µ_r) of two opposite ejecta; needs no distance.
///
/// Units: any, the same for both. Valid for: motions ≥ 0, not both 0.
/// Source: Mirabel & Rodríguez 1994, Nature 371, 46.
pub fn beta_cos_theta_from_ejection(approaching: f64, receding: f64) -> Option<f64> {
    if approaching >= 0.0 && receding >= 0.0 {
        finite((approaching - receding) / (approaching + receding))
    } else {
        None
    }
}

/// The same with its error, from two independent motions to first order:
/// σ = 2 √(µ_r² σ_a² + µ_a² σ_r²)/(µ_a + µ_r)².
pub fn beta_cos_theta_from_ejection_with_error(
    approaching: f64,
    approaching_error: f64,
    receding: f64,
    receding_error: f64,
) -> Measurement {
    let sum = approaching + receding;
    let sigma =
        2.0 * (receding * approaching_error).hypot(approaching * receding_error) / (sum * sum);
    beta_cos_theta_from_ejection(approaching, receding).map_or_else(
        || Measurement::missing(Because::OutOfDomain),
        |value| Measurement::symmetric(value, sigma),
    )
}

/// Largest distance in Mpc that two motions allow: D ≤ c/√(µ_a µ_r).
///
/// Units: mas/yr. Valid for: positive motions.
/// Source: Mirabel & Rodríguez 1994, Nature 371, 46.
pub fn ejection_distance_max_mpc(
    approaching_mas_per_year: f64,
    receding_mas_per_year: f64,
) -> Option<f64> {
    if approaching_mas_per_year > 0.0 && receding_mas_per_year > 0.0 {
        let mean = approaching_mas_per_year.sqrt() * receding_mas_per_year.sqrt();
        finite(MAS_MPC_PER_YEAR_PER_C / mean)
    } else {
        None
    }
}

/// Speed and angle of two opposite ejecta at a known distance:
/// β cos θ = (µ_a − µ_r)/(µ_a + µ_r), β sin θ = (2D/c) µ_a µ_r/(µ_a + µ_r).
///
/// Units: mas/yr, D in Mpc (D_M for a source with a redshift).
/// Valid for: motions ≥ 0, not both 0, D > 0 and below [`ejection_distance_max_mpc`].
/// Source: Mirabel & Rodríguez 1999, ARA&A 37, 409, section 3.2.
pub fn speed_and_angle_from_ejection(
    approaching_mas_per_year: f64,
    receding_mas_per_year: f64,
    distance_mpc: f64,
) -> Option<SpeedAndAngle> {
    let along = beta_cos_theta_from_ejection(approaching_mas_per_year, receding_mas_per_year)?;
    let sum = approaching_mas_per_year + receding_mas_per_year;
    let harmonic = 2.0 * approaching_mas_per_year * (receding_mas_per_year / sum);
    let across = apparent_speed_from_proper_motion(harmonic, distance_mpc)?;
    SpeedAndAngle::from_components(along, across)
}

/// Arm-length ratio Q = (1 + β cos θ)/(1 − β cos θ), approaching side over receding side.
///
/// Units: θ in degrees; β the advance speed of the two ends.
/// Assumes: both ends left together and advance alike. Valid for: 0 ≤ β < 1, 0 ≤ θ ≤ 180.
/// Source: Ryle & Longair 1967, MNRAS 136, 123.
pub fn arm_length_ratio(beta: f64, viewing_angle_deg: f64) -> Option<f64> {
    if !in_domain(beta, viewing_angle_deg) {
        return None;
    }
    finite(one_plus_beta_cos(beta, viewing_angle_deg) / one_minus_beta_cos(beta, viewing_angle_deg))
}

/// β cos θ = (Q − 1)/(Q + 1) of an arm-length ratio, approaching over receding.
///
/// Valid for: Q > 0, finite. Source: Ryle & Longair 1967 turned round.
pub fn beta_cos_theta_from_arm_length_ratio(ratio: f64) -> Option<f64> {
    beta_cos_theta_from_ratio(ratio, 1.0)
}

/// Speed and angle from β cos θ (of a flux or arm-length ratio) with an apparent speed:
/// β sin θ = β_app (1 − β cos θ).
///
/// Assumes: one speed behind both measurements. Valid for: |β cos θ| ≤ 1, β_app ≥ 0 and a
/// resulting speed below 1; else the two do not fit together and the result is `None`.
/// Source: the definition of the apparent speed.
pub fn speed_and_angle_from_apparent_speed(
    beta_cos_theta: f64,
    apparent_speed: f64,
) -> Option<SpeedAndAngle> {
    if !(beta_cos_theta.abs() <= 1.0 && apparent_speed >= 0.0) {
        return None;
    }
    let across = apparent_speed * (1.0 - beta_cos_theta);
    SpeedAndAngle::from_components(beta_cos_theta, across)
}

/// What a ratio of two jets says in closed form, for one kind of flow.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct BeamingClosedForms {
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
}

/// Closed forms from a jet to counter-jet ratio R (`sides[0]` over `sides[1]`).
///
/// With y = ln R/(2p): β cos θ = tanh y. The other three ask for the axis only, whichever
/// side comes nearer: β_min = tanh |y|, Γ_min = cosh |y|, θ_max = arccos tanh |y|.
///
/// A value: the ends of R's 68 % interval (and of `ci95`) go through the formulas. The
/// spectral index's error enters in quadrature as σ_y = |y| σ_α/p (1.96 σ_y at 95 %), its
/// first-order effect, which vanishes at R = 1. Where the interval reaches across R = 1 the
/// smallest possible |y| is 0: β_min then reaches down to 0 and θ_max up to 90°, and the
/// larger end of |y| is the farther of the two.
///
/// A limit: it becomes a limit on the right side, with R's confidence; the spectral index's
/// error does not enter. R > r with r ≥ 1 (or R < r with r ≤ 1) bounds |y| from below:
/// β_min and Γ_min get lower limits, θ_max an upper limit. A limit on the other side of 1
/// says nothing about |y|: the bounds are then the empty ones, β_min > 0, Γ_min > 1,
/// θ_max < 90°, true whatever R is.
///
/// Missing: R's own reason; `out-of-domain` where R or p is not positive, and for a Γ_min
/// whose interval has no finite end (an interval of R that reaches 0).
///
/// Assumes: two equal jets, steady, see [`jet_to_counter_jet_ratio`].
pub fn constrain_from_ratio(
    ratio: Measurement,
    spectral_index: f64,
    spectral_index_error: f64,
    flow: Flow,
) -> BeamingClosedForms {
    let exponent = flow.exponent(spectral_index);
    let log = half_log_ratio(ratio, exponent).map(|log| match log {
        Log::Value { y, low, high, ci95 } => {
            let error =
                if spectral_index_error.is_finite() { spectral_index_error.abs() } else { 0.0 };
            let sigma = (y * error / exponent).abs();
            let reach = |end: f64, sigma: f64| (end - y).hypot(sigma);
            Log::Value {
                y,
                low: y - reach(low, sigma),
                high: y + reach(high, sigma),
                ci95: ci95.map(|[a, b]| [y - reach(a, 1.96 * sigma), y + reach(b, 1.96 * sigma)]),
            }
        }
        limit => limit,
    });
    let bare = |number| Bare::number(number, Because::OutOfDomain);
    let folded = log.map(Log::folded);
    BeamingClosedForms {
        exponent: bare(exponent),
        spectral_index: bare(spectral_index),
        flow,
        beta_cos_theta: through(log, |log| log.increasing(f64::tanh)),
        // arccos tanh y = 2 arctan e^(−y), without loss of digits near 0°.
        viewing_angle_max_deg: through(folded, |log| {
            log.decreasing(|y| 2.0 * (-y).exp().atan().to_degrees())
        }),
        beta_min: through(folded, |log| log.increasing(f64::tanh)),
        lorentz_factor_min: through(folded, |log| log.increasing(f64::cosh)),
    }
}

/// The measurement of a logarithm that is there, or the reason why it is not.
fn through(log: Result<Log, Because>, f: impl Fn(Log) -> Measurement) -> Measurement {
    log.map_or_else(Measurement::missing, f)
}

/// y = ln R/(2p) as a value with the ends of its intervals (infinite ones allowed), or limit.
#[derive(Clone, Copy, Debug)]
enum Log {
    Value { y: f64, low: f64, high: f64, ci95: Option<[f64; 2]> },
    Above { bound: f64, confidence: f64 },
    Below { bound: f64, confidence: f64 },
}

/// ln R/(2p), or why there is none.
fn half_log_ratio(ratio: Measurement, exponent: f64) -> Result<Log, Because> {
    if !(exponent > 0.0 && exponent.is_finite()) {
        return Err(Because::OutOfDomain);
    }
    let log = |r: f64| r.max(0.0).ln() / (2.0 * exponent);
    match ratio {
        Measurement::Value { value, minus, plus, ci95 } if value > 0.0 => Ok(Log::Value {
            y: log(value),
            low: log(value - minus),
            high: log(value + plus),
            ci95: ci95.map(|[low, high]| [log(low), log(high)]),
        }),
        Measurement::LowerLimit { lower_limit, confidence } if lower_limit > 0.0 => {
            Ok(Log::Above { bound: log(lower_limit), confidence })
        }
        Measurement::UpperLimit { upper_limit, confidence } if upper_limit > 0.0 => {
            Ok(Log::Below { bound: log(upper_limit), confidence })
        }
        Measurement::Missing { missing } => Err(missing),
        _ => Err(Because::OutOfDomain),
    }
}

impl Log {
    /// |y|: an interval across 0 starts at 0 and ends at its farther end.
    fn folded(self) -> Self {
        let fold = |low: f64, high: f64| {
            let nearest = if low <= 0.0 && high >= 0.0 { 0.0 } else { low.abs().min(high.abs()) };
            (nearest, low.abs().max(high.abs()))
        };
        match self {
            Self::Value { y, low, high, ci95 } => {
                let ci95 = ci95.map(|[a, b]| fold(a, b).into());
                let (low, high) = fold(low, high);
                Self::Value { y: y.abs(), low, high, ci95 }
            }
            Self::Above { bound, confidence } => Self::Above { bound: bound.max(0.0), confidence },
            Self::Below { bound, confidence } => {
                Self::Above { bound: (-bound).max(0.0), confidence }
            }
        }
    }

    /// Through an increasing function of y.
    fn increasing(self, f: impl Fn(f64) -> f64) -> Measurement {
        match self {
            Self::Value { y, low, high, ci95 } => {
                let out = Measurement::value(f(y), f(y) - f(low), f(high) - f(y));
                ci95.map_or(out, |[low, high]| out.with_ci95(f(low), f(high)))
            }
            Self::Above { bound, confidence } => Measurement::lower_limit(f(bound), confidence),
            Self::Below { bound, confidence } => Measurement::upper_limit(f(bound), confidence),
        }
    }

    /// Through a decreasing function of y.
    fn decreasing(self, f: impl Fn(f64) -> f64) -> Measurement {
        match self {
            Self::Value { y, low, high, ci95 } => {
                let out = Measurement::value(f(y), f(y) - f(high), f(low) - f(y));
                ci95.map_or(out, |[low, high]| out.with_ci95(f(high), f(low)))
            }
            Self::Above { bound, confidence } => Measurement::upper_limit(f(bound), confidence),
            Self::Below { bound, confidence } => Measurement::lower_limit(f(bound), confidence),
        }
    }
}

#[cfg(test)]
mod tests;
