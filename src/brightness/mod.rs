//! Jet against counter-jet: flux in matched strips, their ratio with interval or limit.
//!
//! A strip lies along a side's ridge between two radial distances; the other side's strip is
//! the same, turned by 180° about the core, unless that side's own ridge is strong enough to
//! be followed. What lies under it (bridge, lobe wings, halo) is taken off: a polynomial of
//! fourth order across, fitted to the bands on both sides. Nothing in the rule looks at whether
//! a strip holds signal or noise.
//!
//! Each strip flux is a weighted sum of pixels, so that its error follows from the noise's
//! measured autocorrelation.

mod place;
mod strip;

pub use place::{PlacedStrip, StripRule, StripSide, place_strip};
pub use strip::{PolarCells, Strip, StripFlux, StripPair, measure_strips};

use crate::measurement::{Because, Measurement};
use crate::stats::normal_deviate;

/// Two noisy fluxes, their variances and covariance.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FluxPair {
    /// Flux over which the ratio is taken.
    pub numerator: f64,
    /// Flux by which it is divided.
    pub denominator: f64,
    /// Variance of the numerator.
    pub numerator_variance: f64,
    /// Variance of the denominator.
    pub denominator_variance: f64,
    /// Their covariance.
    pub covariance: f64,
}

/// Ratio of two noisy fluxes that are truly ≥ 0.
///
/// Where both stand `value_sigma` above their errors: the value with its 68 and 95 % intervals
/// from the profile likelihood of the two fluxes, which for Gaussian errors is Fieller's
/// (1954, J. R. Stat. Soc. B 16, 175): all R with |N − R D| ≤ z √(σ_N² − 2 R cov + R² σ_D²).
/// Where only one does: a one-sided limit, the quantile of the posterior of N/D for a flat
/// prior on both fluxes ≥ 0. Such a limit holds at least as often as stated, also when the
/// faint flux is truly zero or happens to be measured negative. Where neither does: missing.
pub fn ratio(pair: FluxPair, value_sigma: f64, confidence: f64) -> Measurement {
    let FluxPair {
        numerator: n,
        denominator: d,
        numerator_variance: vn,
        denominator_variance: vd,
        ..
    } = pair;
    if !(vn > 0.0 && vd > 0.0 && n.is_finite() && d.is_finite()) {
        return Measurement::missing(Because::OutOfDomain);
    }
    let strong = |flux: f64, variance: f64| flux >= value_sigma * variance.sqrt();
    match (strong(n, vn), strong(d, vd)) {
        (true, true) => {
            let value = n / d;
            let (Some((low, high)), Some((low95, high95))) =
                (fieller(pair, 1.0), fieller(pair, 1.959_963_984_540_054))
            else {
                return Measurement::missing(Because::OutOfDomain);
            };
            Measurement::value(value, value - low, high - value).with_ci95(low95.max(0.0), high95)
        }
        (true, false) => posterior_lower_limit(pair, confidence)
            .map_or(Measurement::missing(Because::OutOfDomain), |b| {
                Measurement::lower_limit(b, confidence)
            }),
        (false, true) => {
            let turned = FluxPair {
                numerator: d,
                denominator: n,
                numerator_variance: vd,
                denominator_variance: vn,
                covariance: pair.covariance,
            };
            posterior_lower_limit(turned, confidence)
                .filter(|b| *b > 0.0)
                .map_or(Measurement::missing(Because::OutOfDomain), |b| {
                    Measurement::upper_limit(1.0 / b, confidence)
                })
        }
        (false, false) => Measurement::missing(Because::BothSidesBelowNoise),
    }
}

/// Both ends of Fieller's interval at `z` standard deviations; `None` where it is unbounded.
fn fieller(pair: FluxPair, z: f64) -> Option<(f64, f64)> {
    let z2 = z * z;
    let a = pair.denominator * pair.denominator - z2 * pair.denominator_variance;
    let b = pair.numerator * pair.denominator - z2 * pair.covariance;
    let c = pair.numerator * pair.numerator - z2 * pair.numerator_variance;
    let discriminant = b * b - a * c;
    (a > 0.0 && discriminant >= 0.0).then(|| {
        let root = discriminant.sqrt();
        ((b - root) / a, (b + root) / a)
    })
}

/// The bound B with P(N/D > B) = confidence under the posterior of both fluxes (≥ 0, flat).
///
/// P(N > B D) is found by integrating over D ≥ 0: for each D the numerator's conditional
/// distribution is Gaussian. Simpson's rule over ±8σ; bisection on B.
fn posterior_lower_limit(pair: FluxPair, confidence: f64) -> Option<f64> {
    let sn = pair.numerator_variance.sqrt();
    let sd = pair.denominator_variance.sqrt();
    let rho = (pair.covariance / (sn * sd)).clamp(-0.999, 0.999);
    let conditional_sigma = sn * (1.0 - rho * rho).sqrt();
    let low = (pair.denominator - 8.0 * sd).max(0.0);
    let high = (pair.denominator + 8.0 * sd).max(sd * 0.5).max(low + sd);
    let steps = 800;
    let h = (high - low) / f64::from(steps);
    // Beyond ±8σ the tail is 0 or 1 to 1e-15.
    let upper_tail = |x: f64| match x {
        x if x > 8.0 => 0.0,
        x if x < -8.0 => 1.0,
        x => 0.5 * libm::erfc(x / std::f64::consts::SQRT_2),
    };
    // Scaled by the weight at the lower end so that a very negative flux does not underflow.
    let u0 = ((low - pair.denominator) / sd).max(0.0);
    let nodes: Vec<(f64, f64, f64)> = (0..=steps)
        .map(|k| {
            let d = low + f64::from(k) * h;
            let u = (d - pair.denominator) / sd;
            let simpson = match k {
                k if k == 0 || k == steps => 1.0,
                k if k % 2 == 1 => 4.0,
                _ => 2.0,
            };
            let weight = simpson * (-0.5 * (u * u - u0 * u0)).exp();
            (d, pair.numerator + rho * sn * u, weight)
        })
        .collect();
    let all: f64 =
        nodes.iter().map(|(_, mean, weight)| weight * upper_tail(-mean / conditional_sigma)).sum();
    let probability = |bound: f64| -> f64 {
        let above: f64 = nodes
            .iter()
            .map(|(d, mean, weight)| weight * upper_tail((bound * d - mean) / conditional_sigma))
            .sum();
        above / all
    };
    let mut lower = 0.0;
    let mut upper = (pair.numerator + 8.0 * sn) / (1e-3 * sd).max(pair.denominator.abs() * 1e-3);
    if !(upper.is_finite() && probability(upper) < confidence) {
        return None;
    }
    for _ in 0..200 {
        let middle = 0.5 * (lower + upper);
        if probability(middle) >= confidence {
            lower = middle;
        } else {
            upper = middle;
        }
        if upper - lower <= 1e-8 * upper {
            break;
        }
    }
    Some(lower)
}

/// Upper bound at `confidence` of a flux that is truly ≥ 0, measured as `flux` ± `sigma`:
/// the posterior quantile for a flat prior. Never below what a boundary-free limit gives.
pub fn positive_upper_limit(flux: f64, sigma: f64, confidence: f64) -> f64 {
    // P(F < U | F ≥ 0) = confidence; with Q the upper tail: Q((U − f)/σ) = (1 − c) Q(−f/σ).
    let tail = (1.0 - confidence) * 0.5 * libm::erfc(-flux / sigma / std::f64::consts::SQRT_2);
    if tail > 1e-300 {
        flux - sigma * normal_deviate(tail)
    } else {
        // Far below zero the posterior is an exponential of scale σ²/|flux|.
        sigma * sigma / flux.abs() * -(1.0 - confidence).ln()
    }
}
#[cfg(test)]
mod tests;
