//! Priors on the speed and the viewing angle of a jet: what is known of a population before
//! its sources are measured. Made samples are drawn from them, and a joint constraint on speed
//! and angle weighs with them.
//!
//! Symbols: β = speed over that of light, Γ = Lorentz factor, η = artanh β = rapidity,
//! θ = viewing angle of the approaching jet, µ = cos θ, w = 1 − µ, δ = Doppler factor,
//! k = power of δ by which a source is over-represented.
//!
//! Transcendental functions come from `libm`: the same bytes on every machine.

use super::beaming::{lorentz_factor, speed_from_lorentz_factor};

/// Largest Lorentz factor of a prior: there 1 − β is known to three digits.
const MAX_LORENTZ_FACTOR: f64 = 1e6;
/// Largest power of Γ or δ, either sign.
const MAX_POWER: f64 = 100.0;
/// Cells of the tabulated distribution of the rapidity.
const CELLS: usize = 512;

/// How speeds are distributed in a population.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum SpeedPrior {
    /// Flat in β.
    Uniform {
        /// Smallest β.
        low: f64,
        /// Largest β, below 1.
        high: f64,
    },
    /// dN/dΓ ∝ Γ^(−slope).
    LorentzPowerLaw {
        /// Smallest Γ.
        low: f64,
        /// Largest Γ.
        high: f64,
        /// Slope.
        slope: f64,
    },
}

/// How viewing angles are distributed in a population.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum AnglePrior {
    /// Axes that point everywhere alike: flat in cos θ, dN/dθ ∝ sin θ.
    Isotropic {
        /// Smallest θ, degrees.
        low_deg: f64,
        /// Largest θ, degrees, at most 180.
        high_deg: f64,
    },
}

/// Which sources of the population are seen.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Selection {
    /// All alike.
    All,
    /// Those above a limit of flux density. Where the parent population has
    /// N(>L) ∝ L^(−q), a source whose flux density is boosted by δ^n is over-represented by
    /// δ^(n q). The flux density meant is that of the approaching jet: n = p.
    ///
    /// Source: Urry & Padovani 1995, PASP 107, 803; Vermeulen & Cohen 1994, ApJ 430, 467
    /// (both from memory).
    FluxLimited {
        /// q of the parent population.
        counts_slope: f64,
        /// n of the boost.
        exponent: f64,
    },
}

/// Why a prior cannot be used.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum PriorsError {
    /// Speeds in no order or outside their domain.
    #[error("the speeds go from {low} to {high}, needed is 0 <= low < high < 1")]
    Speeds {
        /// Lower end found.
        low: f64,
        /// Upper end found.
        high: f64,
    },
    /// Lorentz factors in no order or outside their domain.
    #[error("the Lorentz factors go from {low} to {high}, needed is 1 <= low < high <= 1e6")]
    LorentzFactors {
        /// Lower end found.
        low: f64,
        /// Upper end found.
        high: f64,
    },
    /// Angles in no order or outside their domain.
    #[error("the viewing angles go from {low_deg} to {high_deg}, needed is 0 <= low < high <= 180")]
    Angles {
        /// Lower end found.
        low_deg: f64,
        /// Upper end found.
        high_deg: f64,
    },
    /// A power that no number can hold.
    #[error("{what} is {found}, needed is a number from -100 to 100")]
    Power {
        /// Which power.
        what: &'static str,
        /// The one found.
        found: f64,
    },
}

/// Joint prior on β and θ.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Priors {
    speed: SpeedPrior,
    angle: AnglePrior,
    selection: Selection,
}

impl Priors {
    /// A prior whose ranges lie in their domain.
    ///
    /// # Errors
    /// Ends in no order or outside their domain; slopes beyond ±100, also n q.
    pub fn new(
        speed: SpeedPrior,
        angle: AnglePrior,
        selection: Selection,
    ) -> Result<Self, PriorsError> {
        let power = |what, found: f64| {
            if found.abs() <= MAX_POWER { Ok(()) } else { Err(PriorsError::Power { what, found }) }
        };
        match speed {
            SpeedPrior::Uniform { low, high } => {
                if !(0.0 <= low && low < high && high < 1.0) {
                    return Err(PriorsError::Speeds { low, high });
                }
            }
            SpeedPrior::LorentzPowerLaw { low, high, slope } => {
                if !(1.0 <= low && low < high && high <= MAX_LORENTZ_FACTOR) {
                    return Err(PriorsError::LorentzFactors { low, high });
                }
                power("the slope of the Lorentz factors", slope)?;
            }
        }
        let AnglePrior::Isotropic { low_deg, high_deg } = angle;
        if !(0.0 <= low_deg && low_deg < high_deg && high_deg <= 180.0) {
            return Err(PriorsError::Angles { low_deg, high_deg });
        }
        let priors = Self { speed, angle, selection };
        power("slope of the counts times exponent of the boost", priors.doppler_power())?;
        Ok(priors)
    }

    /// k = n q: the power of δ by which a source is over-represented.
    fn doppler_power(&self) -> f64 {
        match self.selection {
            Selection::All => 0.0,
            Selection::FluxLimited { counts_slope, exponent } => counts_slope * exponent,
        }
    }

    /// Smallest and largest β.
    fn speeds(&self) -> (f64, f64) {
        match self.speed {
            SpeedPrior::Uniform { low, high } => (low, high),
            SpeedPrior::LorentzPowerLaw { low, high, .. } => {
                let speed = |gamma| speed_from_lorentz_factor(gamma).unwrap_or(0.0);
                (speed(low), speed(high))
            }
        }
    }

    /// Smallest and largest η. From Γ and not from β, which keeps fewer digits.
    fn rapidities(&self) -> (f64, f64) {
        match self.speed {
            SpeedPrior::Uniform { low, high } => (libm::atanh(low), libm::atanh(high)),
            SpeedPrior::LorentzPowerLaw { low, high, .. } => (libm::acosh(low), libm::acosh(high)),
        }
    }

    /// Smallest and largest w = 1 − cos θ.
    fn versines(&self) -> (f64, f64) {
        let AnglePrior::Isotropic { low_deg, high_deg } = self.angle;
        (versine(low_deg), versine(high_deg))
    }

    /// ln of the density of (β, cos θ), up to a constant: with respect to dβ d(cos θ).
    ///
    /// `None` where the density is zero. Formula: ln p(β) + k ln δ, with p(β) = 1 or
    /// Γ^(−slope) · βΓ³, as dΓ/dβ = βΓ³.
    pub fn log_density(&self, beta: f64, cos_theta: f64) -> Option<f64> {
        let (low, high) = self.speeds();
        let (least, most) = self.versines();
        let versine = 1.0 - cos_theta;
        if !((low..=high).contains(&beta) && (least..=most).contains(&versine)) {
            return None;
        }
        let log_gamma = libm::log(lorentz_factor(beta)?);
        let of_speed = match self.speed {
            SpeedPrior::Uniform { .. } => 0.0,
            SpeedPrior::LorentzPowerLaw { slope, .. } => {
                libm::log(beta) + (3.0 - slope) * log_gamma
            }
        };
        let log_doppler = -log_gamma - libm::log((1.0 - beta) + beta * versine);
        let log_density = of_speed + self.doppler_power() * log_doppler;
        log_density.is_finite().then_some(log_density)
    }

    /// ln of the density of η, integrated over the angles, up to a constant; −∞ at η = 0
    /// where Lorentz factors begin at 1.
    ///
    /// Formula: dβ = dη/Γ², dΓ = sinh η dη, δ = 1/[Γ (1 − β + βw)].
    fn log_marginal(&self, rapidity: f64) -> f64 {
        let log_gamma = libm::log(libm::cosh(rapidity));
        let of_speed = match self.speed {
            SpeedPrior::Uniform { .. } => -2.0 * log_gamma,
            SpeedPrior::LorentzPowerLaw { slope, .. } => {
                libm::log(libm::sinh(rapidity)) - slope * log_gamma
            }
        };
        let power = self.doppler_power();
        of_speed - power * log_gamma + AngleIntegral::new(rapidity, self.versines()).log(power)
    }
}

/// ∫ (1 − βµ)^(−k) dµ over a range of angles at one speed, in closed form.
///
/// With a = 1 − βµ at the smallest angle, D the range of µ, t = βD/a and
/// x = ln(1 + βD'/a) for a part D' of the range: ∫ = a^(−k) (a/β) (e^((1−k)x) − 1)/(1−k). Nothing
/// is lost at k = 1 or β = 0, where the quotients tend to 1.
struct AngleIntegral {
    /// w at the smallest angle.
    least: f64,
    /// D.
    range: f64,
    /// a.
    start: f64,
    /// t.
    growth: f64,
}

impl AngleIntegral {
    fn new(rapidity: f64, (least, most): (f64, f64)) -> Self {
        let beta = libm::tanh(rapidity);
        // 1 − β without loss at high speeds.
        let rest = 2.0 / (libm::exp(2.0 * rapidity) + 1.0);
        let start = rest + beta * least;
        Self { least, range: most - least, start, growth: beta * (most - least) / start }
    }

    /// (1 − k) x over the whole range.
    fn exponent(&self, power: f64) -> f64 {
        (1.0 - power) * libm::log1p(self.growth)
    }

    /// ln of the integral.
    fn log(&self, power: f64) -> f64 {
        let whole = libm::log1p(self.growth);
        let mean = if self.growth > 0.0 { libm::log(whole / self.growth) } else { 0.0 };
        -power * libm::log(self.start)
            + libm::log(self.range)
            + mean
            + log_mean_exponential(self.exponent(power))
    }

    /// w below which lies this share of the integral.
    fn quantile(&self, share: f64, power: f64) -> f64 {
        let part = exponential_quantile(share, self.exponent(power));
        let of_range = if self.growth > 0.0 {
            libm::expm1(part * libm::log1p(self.growth)) / self.growth
        } else {
            share
        };
        self.least + self.range * of_range.clamp(0.0, 1.0)
    }
}

/// ln((e^y − 1)/y), the ln of the mean of e^(yx) over 0 ≤ x ≤ 1.
fn log_mean_exponential(y: f64) -> f64 {
    if y.abs() < 1e-12 {
        0.5 * y
    } else if y > 1.0 {
        // e^y itself need not fit a number.
        y + libm::log(-libm::expm1(-y) / y)
    } else {
        libm::log(libm::expm1(y) / y)
    }
}

/// x between 0 and 1 below which lies this share of a density that goes as e^(yx) there.
///
/// Formula: x = ln(1 + u (e^y − 1))/y. Valid for: 0 ≤ share ≤ 1, any finite y.
pub(crate) fn exponential_quantile(share: f64, y: f64) -> f64 {
    let quantile = if y.abs() < 1e-12 {
        share
    } else if y > 1.0 {
        // e^y itself need not fit a number.
        1.0 + libm::log(share + (1.0 - share) * libm::exp(-y)) / y
    } else {
        libm::log1p(share * libm::expm1(y)) / y
    };
    quantile.clamp(0.0, 1.0)
}

/// 1 − cos θ: no digits lost at small angles, exact at 0°, 90° and 180°.
fn versine(angle_deg: f64) -> f64 {
    if angle_deg < 60.0 {
        let half_sine = libm::sin((0.5 * angle_deg).to_radians());
        2.0 * half_sine * half_sine
    } else {
        1.0 - libm::sin((90.0 - angle_deg).to_radians())
    }
}

/// The angle in degrees of 1 − cos θ.
fn angle_of_versine_deg(versine: f64) -> f64 {
    (2.0 * libm::atan2(versine.sqrt(), (2.0 - versine).sqrt())).to_degrees()
}

/// Angle in degrees below which lies this share of angles that are flat in their cosine.
pub(crate) fn isotropic_quantile_deg(share: f64, low_deg: f64, high_deg: f64) -> f64 {
    let (least, most) = (versine(low_deg), versine(high_deg));
    angle_of_versine_deg(least + share * (most - least)).clamp(low_deg, high_deg)
}

/// The number as a share: from 0 to 1, and 0 where it is none.
fn as_share(number: f64) -> f64 {
    if number > 0.0 { number.min(1.0) } else { 0.0 }
}

/// Draws speeds and angles from a prior; holds the distribution of η as a table.
#[derive(Clone, Debug, PartialEq)]
pub struct Sampler {
    priors: Priors,
    /// η at the first edge of the table.
    start: f64,
    /// Width of a cell.
    step: f64,
    /// ln of the marginal that counts as 1.
    offset: f64,
    /// Integral of the marginal up to each edge.
    cumulative: Vec<f64>,
}

impl Sampler {
    /// The table of a prior.
    pub fn new(priors: Priors) -> Self {
        let (start, end) = priors.rapidities();
        let step = (end - start) / CELLS as f64;
        let edge = |i: usize| start + step * i as f64;
        let offset = (0..=CELLS).map(|i| priors.log_marginal(edge(i))).fold(f64::MIN, f64::max);
        let mut sampler = Self { priors, start, step, offset, cumulative: vec![0.0] };
        let mut sum = 0.0;
        for i in 0..CELLS {
            sum += sampler.mass(edge(i), edge(i + 1));
            sampler.cumulative.push(sum);
        }
        sampler
    }

    fn marginal(&self, rapidity: f64) -> f64 {
        libm::exp(self.priors.log_marginal(rapidity) - self.offset)
    }

    /// Integral of the marginal over at most a cell: Gauss–Legendre quadrature with three
    /// nodes (Abramowitz & Stegun 1964, table 25.4).
    fn mass(&self, from: f64, to: f64) -> f64 {
        let (middle, half) = (0.5 * (from + to), 0.5 * (to - from));
        let node = half * 0.6f64.sqrt();
        let sides = self.marginal(middle - node) + self.marginal(middle + node);
        half * (5.0 * sides + 8.0 * self.marginal(middle)) / 9.0
    }

    /// η below which lies this share of the sources.
    fn rapidity(&self, share: f64) -> f64 {
        if share >= 1.0 {
            // The last cells may be too rare to tell from none.
            return self.start + self.step * CELLS as f64;
        }
        let total = self.cumulative.last().copied().unwrap_or(0.0);
        let target = share * total;
        let after = self.cumulative.partition_point(|&sum| sum < target);
        let cell = after.saturating_sub(1).min(CELLS - 1);
        let wanted = target - self.cumulative.get(cell).copied().unwrap_or(0.0);
        let from = self.start + self.step * cell as f64;
        // Newton's steps, kept between the ends that enclose the answer.
        let (mut low, mut high) = (from, from + self.step);
        let mut rapidity = 0.5 * (low + high);
        for _ in 0..60 {
            let excess = self.mass(from, rapidity) - wanted;
            if excess >= 0.0 {
                high = rapidity;
            } else {
                low = rapidity;
            }
            let newton = rapidity - excess / self.marginal(rapidity);
            let next = if newton >= low && newton <= high { newton } else { 0.5 * (low + high) };
            let change = (next - rapidity).abs();
            rapidity = next;
            if change <= 1e-13 * self.step {
                break;
            }
        }
        rapidity
    }

    /// β and θ in degrees of two numbers between 0 and 1: β grows with the first at any second,
    /// θ with the second at any first.
    ///
    /// By the inverse of the cumulative distributions, of β over all angles and then of cos θ at
    /// that β. The table's own error is below 1e-9 of the whole for k up to 20.
    pub fn sample(&self, of_speed: f64, of_angle: f64) -> (f64, f64) {
        let rapidity = self.rapidity(as_share(of_speed));
        let (low, high) = self.priors.speeds();
        let AnglePrior::Isotropic { low_deg, high_deg } = self.priors.angle;
        let versine = AngleIntegral::new(rapidity, self.priors.versines())
            .quantile(as_share(of_angle), self.priors.doppler_power());
        let angle_deg = angle_of_versine_deg(versine);
        (libm::tanh(rapidity).clamp(low, high), angle_deg.clamp(low_deg, high_deg))
    }
}

#[cfg(test)]
mod tests {
    use rand::{Rng, SeedableRng};
    use rand_pcg::Pcg64Mcg;

    use super::*;
    use crate::physics::beaming::doppler_factor;

    const UNIFORM: SpeedPrior = SpeedPrior::Uniform { low: 0.0, high: 0.99 };
    const POWER_LAW: SpeedPrior = SpeedPrior::LorentzPowerLaw { low: 1.5, high: 30.0, slope: 1.7 };
    const HALF: AnglePrior = AnglePrior::Isotropic { low_deg: 0.0, high_deg: 90.0 };
    const WHOLE: AnglePrior = AnglePrior::Isotropic { low_deg: 0.0, high_deg: 180.0 };
    const LIMITED: Selection = Selection::FluxLimited { counts_slope: 1.5, exponent: 2.6 };

    fn sampler(speed: SpeedPrior, angle: AnglePrior, selection: Selection) -> Sampler {
        Sampler::new(Priors::new(speed, angle, selection).expect("valid"))
    }

    fn gamma(beta: f64) -> f64 {
        lorentz_factor(beta).expect("below 1")
    }

    /// Mean over the prior, by a lattice of shares in place of random ones.
    fn mean(sampler: &Sampler, f: impl Fn(f64, f64) -> f64) -> f64 {
        let n = 300;
        let share = |i: usize| (i as f64 + 0.5) / n as f64;
        let all = (0..n * n).map(|i| sampler.sample(share(i / n), share(i % n)));
        all.map(|(beta, angle_deg)| f(beta, angle_deg)).sum::<f64>() / (n * n) as f64
    }

    fn close(found: f64, expected: f64, tolerance: f64) {
        let off = (found / expected - 1.0).abs();
        assert!(off <= tolerance, "{found} is not {expected}: off by {off:e}");
    }

    #[test]
    fn uniform_speeds_and_isotropic_axes_follow_their_closed_forms() {
        let sampler = sampler(UNIFORM, HALF, Selection::All);
        for share in [0.001, 0.1, 0.5, 0.9, 0.999] {
            // Cumulative: β/0.99, and 1 − cos θ as the density of θ is sin θ.
            let (beta, angle_deg) = sampler.sample(share, share);
            close(beta, 0.99 * share, 1e-10);
            close(angle_deg, libm::acos(1.0 - share).to_degrees(), 1e-12);
            close(angle_deg, isotropic_quantile_deg(share, 0.0, 90.0), 1e-14);
        }
    }

    #[test]
    fn lorentz_factors_follow_the_quantiles_of_their_power_law() {
        for slope in [-1.0f64, 0.0, 1.0, 1.7, 3.0] {
            let speed = SpeedPrior::LorentzPowerLaw { low: 1.0, high: 1000.0, slope };
            let sampler = sampler(speed, HALF, Selection::All);
            for share in [0.01, 0.3, 0.7, 0.99] {
                let expected = if (slope - 1.0).abs() < 1e-9 {
                    1000f64.powf(share)
                } else {
                    let power = 1.0 - slope;
                    (1.0 + share * (1000f64.powf(power) - 1.0)).powf(1.0 / power)
                };
                close(gamma(sampler.sample(share, 0.5).0), expected, 1e-8);
            }
        }
    }

    #[test]
    fn ends_are_reached_and_nothing_falls_back() {
        let fast = SpeedPrior::LorentzPowerLaw { low: 1.0, high: 1e6, slope: 2.0 };
        let steep = Selection::FluxLimited { counts_slope: 10.0, exponent: 10.0 };
        let inverse = Selection::FluxLimited { counts_slope: 10.0, exponent: -10.0 };
        let flat = Selection::FluxLimited { counts_slope: 0.5, exponent: 2.0 };
        let narrow = AnglePrior::Isotropic { low_deg: 5.0, high_deg: 5.001 };
        for (speed, angle, selection) in [
            (UNIFORM, HALF, Selection::All),
            (UNIFORM, WHOLE, flat),
            (POWER_LAW, HALF, LIMITED),
            (fast, WHOLE, steep),
            (fast, WHOLE, inverse),
            (fast, narrow, LIMITED),
        ] {
            let sampler = sampler(speed, angle, selection);
            let (low, high) = sampler.priors.speeds();
            let AnglePrior::Isotropic { low_deg, high_deg } = angle;
            let (first, last) = (sampler.sample(0.0, 0.0), sampler.sample(1.0, 1.0));
            assert!((first.0 - low).abs() < 1e-12 && (first.1 - low_deg).abs() < 1e-9);
            assert!((last.0 - high).abs() < 1e-12, "{speed:?} {selection:?}");
            assert!((last.1 - high_deg).abs() < 1e-9, "{speed:?} {selection:?}");
            let mut before = first;
            for i in 0..=2000 {
                let share = f64::from(i) / 2000.0;
                let (beta, angle_deg) =
                    (sampler.sample(share, 0.3).0, sampler.sample(0.3, share).1);
                assert!(beta >= before.0 && angle_deg >= before.1 - 1e-12, "{selection:?} {share}");
                assert!(beta < 1.0 && (low_deg..=high_deg).contains(&angle_deg));
                before = (beta, angle_deg);
            }
            // A number that is none counts as 0: no NaN goes out.
            assert_eq!(sampler.sample(f64::NAN, f64::NAN), first);
        }
    }

    #[test]
    fn a_limit_on_flux_means_nothing_where_counts_are_flat() {
        let flat = Selection::FluxLimited { counts_slope: 0.0, exponent: 2.6 };
        let (with, without) =
            (sampler(POWER_LAW, HALF, flat), sampler(POWER_LAW, HALF, Selection::All));
        for i in 0..100 {
            let share = f64::from(i) / 100.0;
            assert_eq!(with.sample(share, 1.0 - share), without.sample(share, 1.0 - share));
        }
    }

    #[test]
    fn the_integral_over_angles_passes_smoothly_through_its_special_powers() {
        for rapidity in [0.0, 1e-9, 1e-3, 1.0, 5.0, 14.0] {
            let integral = AngleIntegral::new(rapidity, (0.0, 2.0));
            // k = 0: the range itself.
            close(integral.log(0.0), 2f64.ln(), 1e-12);
            // k = 1: 2η/β; k = 2: 2Γ².
            if rapidity > 0.0 {
                close(integral.log(1.0), (2.0 * rapidity / rapidity.tanh()).ln(), 1e-12);
            }
            close(integral.log(2.0), (2.0 * rapidity.cosh().powi(2)).ln(), 1e-12);
            for power in [1.0 - 1e-13, 1.0 - 1e-9, 1.0 + 1e-13, 1.0 + 1e-9] {
                close(integral.log(power), integral.log(1.0), 1e-7);
                let at_one = integral.quantile(0.4, 1.0);
                close(integral.quantile(0.4, power), at_one, 1e-7);
            }
        }
        // No speed, no preferred angle.
        close(AngleIntegral::new(0.0, (0.0, 2.0)).quantile(0.3, 3.0), 0.6, 1e-15);
    }

    #[test]
    fn mean_doppler_factors_follow_their_closed_forms() {
        let at = |beta| SpeedPrior::Uniform { low: beta, high: beta + 1e-9 };
        let doppler = |beta, angle_deg| doppler_factor(beta, angle_deg).expect("in domain");
        for beta in [0.2f64, 0.6, 0.9] {
            // Isotropic: ½∫δ dµ = ln[(1+β)/(1−β)]/(2Γβ).
            let expected = ((1.0 + beta) / (1.0 - beta)).ln() / (2.0 * gamma(beta) * beta);
            close(mean(&sampler(at(beta), WHOLE, Selection::All), doppler), expected, 1e-4);
            // Weighted by δ²: ∫δ³/∫δ² = Γ, as ∫δ³dµ = 2Γ and ∫δ²dµ = 2.
            let limited = Selection::FluxLimited { counts_slope: 1.0, exponent: 2.0 };
            close(mean(&sampler(at(beta), WHOLE, limited), doppler), gamma(beta), 1e-4);
        }
    }

    /// Numbers of scipy 1.17.1:
    /// ```text
    /// s, lo, hi, k = 1.7, 1.5, 30.0, 1.5*2.6
    /// def over_mu(g, f=lambda m: 1.0, start=0.0):
    ///     b = sqrt(1-1/g**2)
    ///     return quad(lambda m: f(m)*(g*(1-b*m))**-k, start, 1, epsabs=0, epsrel=1e-12, limit=500)[0]
    /// def over_g(f, a=lo, b=hi): return quad(f, a, b, epsabs=0, epsrel=1e-11, limit=500)[0]
    /// N = over_g(lambda g: g**-s*over_mu(g))
    /// median = brentq(lambda x: over_g(lambda g: g**-s*over_mu(g), lo, x)/N-0.5, lo, hi, xtol=1e-11)
    /// mean_gamma = over_g(lambda g: g*g**-s*over_mu(g))/N
    /// mean_angle = over_g(lambda g: g**-s*over_mu(g, lambda m: degrees(arccos(m))))/N
    /// below_10 = over_g(lambda g: g**-s*over_mu(g, start=cos(radians(10))))/N
    /// ```
    #[test]
    fn a_flux_limited_sample_has_the_moments_of_an_outside_integration() {
        let sampler = sampler(POWER_LAW, HALF, LIMITED);
        close(gamma(sampler.sample(0.5, 0.5).0), 17.269057628704147, 1e-8);
        close(mean(&sampler, |beta, _| gamma(beta)), 16.847959887537357, 1e-5);
        close(mean(&sampler, |_, angle_deg| angle_deg), 3.2481705758888086, 3e-3);
        let below = mean(&sampler, |_, angle_deg| f64::from(u8::from(angle_deg < 10.0)));
        close(below, 0.9446590418917744, 1e-3);
    }

    /// χ² of 1e5 samples in bins of β and θ against the density, integrated bin by bin.
    fn chi_square(sampler: &Sampler, seed: u64) -> (f64, usize) {
        const BINS: usize = 12;
        const FINE: usize = 24;
        let (low, high) = sampler.priors.rapidities();
        let (least, most) = sampler.priors.versines();
        let total = BINS * FINE;
        let rapidity = |i: f64| low + (high - low) * i / total as f64;
        // w grows with the fourth power, so that small angles are resolved.
        let versine = |j: f64| least + (most - least) * (j / total as f64).powi(4);
        let mut expected = vec![0.0; BINS * BINS];
        for i in 0..total {
            let beta = rapidity(i as f64 + 0.5).tanh();
            let width = rapidity(i as f64 + 1.0).tanh() - rapidity(i as f64).tanh();
            for j in 0..total {
                let height = versine(j as f64 + 1.0) - versine(j as f64);
                let density = sampler
                    .priors
                    .log_density(beta, 1.0 - versine(j as f64 + 0.5))
                    .map_or(0.0, f64::exp);
                expected[i / FINE * BINS + j / FINE] += density * width * height;
            }
        }
        let sum: f64 = expected.iter().sum();
        let mut counted = vec![0.0; BINS * BINS];
        let mut rng = Pcg64Mcg::seed_from_u64(seed);
        let mut uniform = || (rng.next_u64() >> 11) as f64 / (1u64 << 53) as f64;
        let number = 100_000;
        for _ in 0..number {
            let (beta, angle_deg) = sampler.sample(uniform(), uniform());
            let i = (beta.atanh() - low) / (high - low) * BINS as f64;
            let share = ((versine_of(angle_deg) - least) / (most - least)).max(0.0);
            let j = share.powf(0.25) * BINS as f64;
            counted[(i as usize).min(BINS - 1) * BINS + (j as usize).min(BINS - 1)] += 1.0;
        }
        let pairs = expected.iter().map(|e| e / sum * f64::from(number)).zip(counted);
        // Scarce bins together.
        let (mut chi_square, mut bins, mut rest) = (0.0, 0, (0.0, 0.0));
        for (expected, counted) in pairs {
            if expected < 10.0 {
                rest = (rest.0 + expected, rest.1 + counted);
            } else {
                chi_square += (counted - expected).powi(2) / expected;
                bins += 1;
            }
        }
        if rest.0 >= 10.0 {
            chi_square += (rest.1 - rest.0).powi(2) / rest.0;
            bins += 1;
        }
        (chi_square, bins - 1)
    }

    fn versine_of(angle_deg: f64) -> f64 {
        2.0 * (0.5 * angle_deg.to_radians()).sin().powi(2)
    }

    #[test]
    fn samples_are_distributed_as_the_density_says() {
        let flat = Selection::FluxLimited { counts_slope: 0.5, exponent: 2.0 };
        let slow = SpeedPrior::Uniform { low: 0.1, high: 0.9 };
        for (seed, (speed, angle, selection)) in [
            (UNIFORM, HALF, Selection::All),
            (slow, WHOLE, flat),
            (UNIFORM, HALF, LIMITED),
            (POWER_LAW, HALF, Selection::All),
            (POWER_LAW, HALF, LIMITED),
            (POWER_LAW, AnglePrior::Isotropic { low_deg: 3.0, high_deg: 40.0 }, LIMITED),
        ]
        .into_iter()
        .enumerate()
        {
            let (chi_square, freedom) = chi_square(&sampler(speed, angle, selection), seed as u64);
            // Mean n, variance 2n: 4 sigma.
            let n = freedom as f64;
            assert!(freedom >= 20, "{freedom} bins are too few");
            let off = (chi_square - n) / (2.0 * n).sqrt();
            assert!(off.abs() < 4.0, "{speed:?} {selection:?}: {chi_square} of {freedom}");
        }
    }

    #[test]
    fn the_density_is_that_of_the_formula_and_nothing_outside() {
        let priors = Priors::new(POWER_LAW, HALF, LIMITED).expect("valid");
        let by_hand = |beta: f64, angle_deg: f64| {
            let doppler: f64 = doppler_factor(beta, angle_deg).expect("in domain");
            (doppler.powf(3.9) * gamma(beta).powf(3.0 - 1.7) * beta).ln()
        };
        let cosine = |angle_deg: f64| angle_deg.to_radians().cos();
        for (beta, angle_deg) in [(0.8, 10.0), (0.95, 60.0), (0.99, 2.0), (0.999, 89.0)] {
            let found = priors.log_density(beta, cosine(angle_deg)).expect("inside");
            close(found, by_hand(beta, angle_deg), 1e-10);
        }
        for (beta, cosine) in
            [(0.5, 0.5), (0.99999, 0.5), (0.9, -0.1), (0.9, 1.1), (f64::NAN, 0.5), (0.9, f64::NAN)]
        {
            assert_eq!(priors.log_density(beta, cosine), None, "{beta} {cosine}");
        }
        // Both ends belong to it; at rest a power law in Γ has no density.
        assert!(priors.log_density(0.9, 0.0).is_some() && priors.log_density(0.9, 1.0).is_some());
        let from_rest = SpeedPrior::LorentzPowerLaw { low: 1.0, high: 30.0, slope: 1.7 };
        let priors = Priors::new(from_rest, HALF, LIMITED).expect("valid");
        assert_eq!(priors.log_density(0.0, 0.5), None);
        assert_eq!(
            Priors::new(UNIFORM, HALF, LIMITED).expect("valid").log_density(0.0, 0.5),
            Some(0.0)
        );
    }

    #[test]
    fn priors_outside_their_domain_say_what_they_need() {
        let angle = |low_deg, high_deg| AnglePrior::Isotropic { low_deg, high_deg };
        let speed = |low, high| SpeedPrior::Uniform { low, high };
        let gamma = |low, high, slope| SpeedPrior::LorentzPowerLaw { low, high, slope };
        let steep = Selection::FluxLimited { counts_slope: 10.0, exponent: f64::INFINITY };
        for (speed, angle, selection, words) in [
            (speed(0.5, 0.5), HALF, Selection::All, "low < high < 1"),
            (speed(0.5, 1.0), HALF, Selection::All, "from 0.5 to 1"),
            (speed(f64::NAN, 0.5), HALF, Selection::All, "NaN"),
            (gamma(0.5, 3.0, 2.0), HALF, Selection::All, "1 <= low"),
            (gamma(2.0, 2e6, 2.0), HALF, Selection::All, "<= 1e6"),
            (gamma(2.0, 20.0, f64::NAN), HALF, Selection::All, "slope"),
            (UNIFORM, angle(10.0, 181.0), Selection::All, "181"),
            (UNIFORM, angle(20.0, 10.0), Selection::All, "from 20 to 10"),
            (UNIFORM, HALF, steep, "exponent of the boost"),
        ] {
            let error = Priors::new(speed, angle, selection).expect_err(words).to_string();
            assert!(error.contains(words), "{error}");
        }
    }
}
