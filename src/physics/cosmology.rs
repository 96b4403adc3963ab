//! Distances in a Friedmann universe of matter and a cosmological constant, any curvature.

use std::f64::consts::PI;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use thiserror::Error;

use crate::constants::{ARCSEC_PER_RADIAN, KM_PER_MPC, SECONDS_PER_YEAR, SPEED_OF_LIGHT_KM_S};

/// Largest redshift the distances are given for: beyond it radiation, which is left out here,
/// rules the expansion.
pub const REDSHIFT_MAX: f64 = 3000.0;

/// The expansion: Hubble constant and density parameters today. The curvature is what is
/// missing to one, `1 − omega_matter − omega_lambda`; there is no radiation.
///
/// The fields are open for reading and for settings files; every method checks them first,
/// so a value put in by hand is refused with an error, never turned into NaN.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default, deny_unknown_fields)]
pub struct Cosmology {
    /// Hubble constant in km/s/Mpc.
    pub hubble_km_s_mpc: f64,
    /// Matter density over the critical density, today.
    pub omega_matter: f64,
    /// Density of the cosmological constant over the critical density.
    pub omega_lambda: f64,
}

/// Why a distance cannot be given.
#[derive(Clone, Copy, Debug, PartialEq, Error)]
pub enum CosmologyError {
    /// The Hubble constant is not usable.
    #[error(
        "hubble constant is {0} km/s/Mpc, needed above 0 and at most 10000: give hubble_km_s_mpc, such as 70"
    )]
    Hubble(f64),
    /// The matter density is not usable.
    #[error("omega_matter is {0}, needed from 0 to 100: give omega_matter, such as 0.3")]
    OmegaMatter(f64),
    /// The density of the cosmological constant is not usable.
    #[error("omega_lambda is {0}, needed from -100 to 100: give omega_lambda, such as 0.7")]
    OmegaLambda(f64),
    /// The redshift is not usable.
    #[error(
        "redshift is {0}, needed from 0 to 3000: give a cosmological redshift, or distance_mpc for a nearby source"
    )]
    Redshift(f64),
    /// A source at redshift zero has no distance.
    #[error(
        "redshift is {0}, needed above 0 for a distance: give distance_mpc for a nearby source"
    )]
    NoDistance(f64),
    /// The distance is not usable.
    #[error("distance is {0} Mpc, needed above 0 and finite: give distance_mpc in megaparsec")]
    DistanceMpc(f64),
    /// The model never was as small as the redshift asks.
    #[error(
        "the cosmology has no redshift {redshift}: its expansion turns round at or before redshift {turn:.4}; lower omega_lambda or raise omega_matter"
    )]
    NoBigBang {
        /// The redshift asked for.
        redshift: f64,
        /// A redshift not above the one asked for at which E² is zero or negative.
        turn: f64,
    },
    /// The source would lie beyond the antipode of a closed universe.
    #[error(
        "redshift {0} lies beyond the antipode of this closed cosmology, where distances shrink again: use another cosmology"
    )]
    BeyondAntipode(f64),
}

impl Default for Cosmology {
    /// H₀ = 70 km/s/Mpc, Ω_m = 0.3, Ω_Λ = 0.7: the round numbers most papers use.
    fn default() -> Self {
        Self { hubble_km_s_mpc: 70.0, omega_matter: 0.3, omega_lambda: 0.7 }
    }
}

impl Cosmology {
    /// A cosmology from H₀ in km/s/Mpc, Ω_m and Ω_Λ.
    ///
    /// Old papers: Einstein–de Sitter is `new(h, 1.0, 0.0)`; a model with deceleration
    /// parameter q₀ and Λ = 0 is `new(h, 2.0 * q0, 0.0)`.
    ///
    /// # Errors
    /// A number that is not finite or out of range.
    pub fn new(
        hubble_km_s_mpc: f64,
        omega_matter: f64,
        omega_lambda: f64,
    ) -> Result<Self, CosmologyError> {
        let cosmology = Self { hubble_km_s_mpc, omega_matter, omega_lambda };
        cosmology.check()?;
        Ok(cosmology)
    }

    /// Whether the three numbers are usable.
    ///
    /// # Errors
    /// The first number that is not finite or out of range.
    pub fn check(&self) -> Result<(), CosmologyError> {
        if !(self.hubble_km_s_mpc > 0.0 && self.hubble_km_s_mpc <= 1e4) {
            Err(CosmologyError::Hubble(self.hubble_km_s_mpc))
        } else if !(0.0..=100.0).contains(&self.omega_matter) {
            Err(CosmologyError::OmegaMatter(self.omega_matter))
        } else if !(-100.0..=100.0).contains(&self.omega_lambda) {
            Err(CosmologyError::OmegaLambda(self.omega_lambda))
        } else {
            Ok(())
        }
    }

    /// Curvature parameter Ω_k = 1 − Ω_m − Ω_Λ (Hogg 1999, equation 7); negative = closed.
    pub fn omega_curvature(&self) -> f64 {
        1.0 - self.omega_matter - self.omega_lambda
    }

    /// Hubble distance c/H₀ in Mpc (Hogg 1999, equation 4).
    pub fn hubble_distance_mpc(&self) -> f64 {
        SPEED_OF_LIGHT_KM_S / self.hubble_km_s_mpc
    }

    /// E²(x) = Ω_m x³ + Ω_k x² + Ω_Λ with x = 1 + z (Hogg 1999, equation 14, squared).
    fn expansion_squared(&self, x: f64) -> f64 {
        x * x * self.omega_matter.mul_add(x, self.omega_curvature()) + self.omega_lambda
    }

    /// Refuses redshifts that the model does not reach.
    fn check_redshift(&self, redshift: f64) -> Result<(), CosmologyError> {
        self.check()?;
        if !(0.0..=REDSHIFT_MAX).contains(&redshift) {
            return Err(CosmologyError::Redshift(redshift));
        }
        // E² is smallest at an end of the interval or where its derivative
        // 3 Ω_m x² + 2 Ω_k x vanishes.
        let end = 1.0 + redshift;
        let turning = if self.omega_matter > 0.0 {
            (-2.0 * self.omega_curvature() / (3.0 * self.omega_matter)).clamp(1.0, end)
        } else {
            end
        };
        for x in [turning, end] {
            // A positive E² below the rounding of its terms is zero for our purpose.
            if self.expansion_squared(x) <= 1e-14 * x * x * (1.0 + self.omega_lambda.abs()) {
                return Err(CosmologyError::NoBigBang { redshift, turn: x - 1.0 });
            }
        }
        Ok(())
    }

    /// Line-of-sight comoving distance in Mpc: (c/H₀) ∫₀ᶻ dz′/E(z′).
    ///
    /// Units: Mpc. Valid for: 0 ≤ z ≤ 3000. Accurate to 1e-10 relative or better.
    /// Source: Hogg 1999, astro-ph/9905116, equation 15; radiation left out.
    ///
    /// # Errors
    /// Unusable numbers, or a model that never reached this redshift.
    pub fn comoving_distance_mpc(&self, redshift: f64) -> Result<f64, CosmologyError> {
        self.check_redshift(redshift)?;
        Ok(self.hubble_distance_mpc() * self.comoving_integral(redshift))
    }

    /// ∫ dz/E as ∫ x/E du with x = 1 + z = eᵘ: smooth over any range of redshift.
    fn comoving_integral(&self, redshift: f64) -> f64 {
        integrate(
            |u| libm::exp(u) / self.expansion_squared(libm::exp(u)).sqrt(),
            libm::log1p(redshift),
        )
    }

    /// Transverse comoving distance D_M in Mpc (the proper-motion distance).
    ///
    /// Units: Mpc. Valid for: as the comoving distance, and nearer than the antipode of a
    /// closed universe. Source: Hogg 1999, equation 16.
    ///
    /// # Errors
    /// As [`Self::comoving_distance_mpc`], and beyond the antipode.
    pub fn transverse_comoving_distance_mpc(&self, redshift: f64) -> Result<f64, CosmologyError> {
        self.check_redshift(redshift)?;
        let integral = self.comoving_integral(redshift);
        let curvature = self.omega_curvature();
        let root = curvature.abs().sqrt();
        let bent = if curvature > 0.0 {
            libm::sinh(root * integral) / root
        } else if curvature < 0.0 {
            if root * integral >= PI {
                return Err(CosmologyError::BeyondAntipode(redshift));
            }
            libm::sin(root * integral) / root
        } else {
            integral
        };
        Ok(self.hubble_distance_mpc() * bent)
    }

    /// Angular diameter distance D_A = D_M/(1+z) in Mpc (Hogg 1999, equation 18).
    ///
    /// # Errors
    /// As [`Self::transverse_comoving_distance_mpc`].
    pub fn angular_diameter_distance_mpc(&self, redshift: f64) -> Result<f64, CosmologyError> {
        Ok(self.transverse_comoving_distance_mpc(redshift)? / (1.0 + redshift))
    }

    /// Luminosity distance D_L = D_M (1+z) in Mpc (Hogg 1999, equation 21).
    ///
    /// # Errors
    /// As [`Self::transverse_comoving_distance_mpc`].
    pub fn luminosity_distance_mpc(&self, redshift: f64) -> Result<f64, CosmologyError> {
        Ok(self.transverse_comoving_distance_mpc(redshift)? * (1.0 + redshift))
    }

    /// Proper transverse length in kpc that spans one arcsec at this redshift.
    ///
    /// # Errors
    /// As [`Self::transverse_comoving_distance_mpc`].
    pub fn kpc_per_arcsec(&self, redshift: f64) -> Result<f64, CosmologyError> {
        Ok(self.angular_diameter_distance_mpc(redshift)? * 1e3 / ARCSEC_PER_RADIAN)
    }

    /// Lookback time in 10⁹ Julian years: (1/H₀) ∫₀ᶻ dz′/((1+z′) E(z′)).
    /// Source: Hogg 1999, equation 30.
    ///
    /// # Errors
    /// As [`Self::comoving_distance_mpc`].
    pub fn lookback_time_gyr(&self, redshift: f64) -> Result<f64, CosmologyError> {
        self.check_redshift(redshift)?;
        let integral =
            integrate(|u| 1.0 / self.expansion_squared(libm::exp(u)).sqrt(), libm::log1p(redshift));
        Ok(integral * KM_PER_MPC / self.hubble_km_s_mpc / (SECONDS_PER_YEAR * 1e9))
    }
}

/// How far a source is: through a cosmology from its redshift, or given directly.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Distance {
    /// From a redshift: D_A = D_M/(1+z), D_L = D_M (1+z).
    Redshift {
        /// The redshift, above 0.
        redshift: f64,
        /// Transverse comoving distance D_M in Mpc.
        transverse_comoving_mpc: f64,
    },
    /// Given directly, nearby or in the Galaxy: space is flat and still, so that
    /// D_A = D_M = D_L and no factor of 1 + z enters anywhere.
    Given {
        /// The distance in Mpc.
        distance_mpc: f64,
    },
}

impl Distance {
    /// From a redshift above 0.
    ///
    /// # Errors
    /// A redshift without a distance in this cosmology; zero has none.
    pub fn from_redshift(redshift: f64, cosmology: &Cosmology) -> Result<Self, CosmologyError> {
        if redshift <= 0.0 {
            return Err(CosmologyError::NoDistance(redshift));
        }
        let transverse_comoving_mpc = cosmology.transverse_comoving_distance_mpc(redshift)?;
        Ok(Self::Redshift { redshift, transverse_comoving_mpc })
    }

    /// From a distance in Mpc.
    ///
    /// # Errors
    /// A distance that is not positive and finite.
    pub fn from_distance_mpc(distance_mpc: f64) -> Result<Self, CosmologyError> {
        if distance_mpc > 0.0 && distance_mpc.is_finite() {
            Ok(Self::Given { distance_mpc })
        } else {
            Err(CosmologyError::DistanceMpc(distance_mpc))
        }
    }

    /// The redshift that enters formulas; 0 where the distance was given.
    pub const fn redshift(self) -> f64 {
        match self {
            Self::Redshift { redshift, .. } => redshift,
            Self::Given { .. } => 0.0,
        }
    }

    /// Transverse comoving distance D_M in Mpc, for proper motions.
    pub const fn transverse_comoving_mpc(self) -> f64 {
        match self {
            Self::Redshift { transverse_comoving_mpc, .. } => transverse_comoving_mpc,
            Self::Given { distance_mpc } => distance_mpc,
        }
    }

    /// Angular diameter distance D_A in Mpc.
    pub fn angular_diameter_mpc(self) -> f64 {
        self.transverse_comoving_mpc() / (1.0 + self.redshift())
    }

    /// Luminosity distance D_L in Mpc.
    pub fn luminosity_mpc(self) -> f64 {
        self.transverse_comoving_mpc() * (1.0 + self.redshift())
    }

    /// Proper transverse length in kpc that spans one arcsec.
    pub fn kpc_per_arcsec(self) -> f64 {
        self.angular_diameter_mpc() * 1e3 / ARCSEC_PER_RADIAN
    }
}

/// Half of the nodes of 16-point Gauss–Legendre quadrature on (−1, 1), symmetric
/// (Abramowitz & Stegun 1964, table 25.4), and their weights.
const GAUSS_LEGENDRE_16: [(f64, f64); 8] = [
    (0.095_012_509_837_637_44, 0.189_450_610_455_068_5),
    (0.281_603_550_779_258_9, 0.182_603_415_044_923_6),
    (0.458_016_777_657_227_4, 0.169_156_519_395_002_54),
    (0.617_876_244_402_643_7, 0.149_595_988_816_576_73),
    (0.755_404_408_355_003, 0.124_628_971_255_533_87),
    (0.865_631_202_387_831_8, 0.095_158_511_682_492_78),
    (0.944_575_023_073_232_6, 0.062_253_523_938_647_894),
    (0.989_400_934_991_649_9, 0.027_152_459_411_754_095),
];

/// One panel of 16-point Gauss–Legendre quadrature.
fn panel(f: &impl Fn(f64) -> f64, from: f64, to: f64) -> f64 {
    let middle = 0.5 * (from + to);
    let half = 0.5 * (to - from);
    half * GAUSS_LEGENDRE_16
        .iter()
        .map(|&(node, weight)| weight * (f(middle - half * node) + f(middle + half * node)))
        .sum::<f64>()
}

/// ∫₀ᵗᵒ f: panels no wider than ½, each halved until its halves agree with it to 1e-13.
fn integrate(f: impl Fn(f64) -> f64, to: f64) -> f64 {
    let panels = (to / 0.5).ceil().max(1.0);
    let width = to / panels;
    let mut open: Vec<(f64, f64, f64, u32)> = (0..panels as u32)
        .map(|i| {
            let from = width * f64::from(i);
            (from, from + width, panel(&f, from, from + width), 40)
        })
        .collect();
    let mut sum = 0.0;
    while let Some((from, to, whole, depth)) = open.pop() {
        let middle = 0.5 * (from + to);
        let (left, right) = (panel(&f, from, middle), panel(&f, middle, to));
        if depth == 0 || (left + right - whole).abs() <= 1e-13 * (left + right).abs() {
            sum += left + right;
        } else {
            open.push((from, middle, left, depth - 1));
            open.push((middle, to, right, depth - 1));
        }
    }
    sum
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(a: f64, b: f64, relative: f64) {
        assert!((a - b).abs() <= relative * b.abs(), "{a} is not {b}");
    }

    const REDSHIFTS: [f64; 8] = [1e-6, 1e-3, 0.0169, 0.1, 1.0, 3.0, 6.0, 20.0];

    #[test]
    fn quadrature_is_exact_for_polynomials_of_degree_31() {
        // A 16-point rule integrates degree 2·16 − 1 exactly: checks every digit of the table.
        for degree in [0, 1, 2, 7, 16, 30, 31] {
            let exact = 1.0 / f64::from(degree + 1);
            close(panel(&|x: f64| x.powi(degree), 0.0, 1.0), exact, 4e-15);
        }
    }

    #[test]
    fn einstein_de_sitter_has_its_closed_form() {
        // D_M = (2c/H₀)(1 − 1/√(1+z)), t = (2/3H₀)(1 − (1+z)^(−3/2)); textbook results.
        let model = Cosmology::new(50.0, 1.0, 0.0).expect("valid");
        for z in REDSHIFTS {
            // 1 − 1/√(1+z) without cancellation.
            let s = (1.0 + z).sqrt();
            let exact = 2.0 * model.hubble_distance_mpc() * z / (s * (s + 1.0));
            close(model.comoving_distance_mpc(z).expect("reached"), exact, 1e-12);
            let age = 2.0 / 3.0 * KM_PER_MPC / 50.0 / (SECONDS_PER_YEAR * 1e9);
            let lookback = -age * (-1.5 * z.ln_1p()).exp_m1();
            close(model.lookback_time_gyr(z).expect("reached"), lookback, 1e-12);
        }
    }

    #[test]
    fn mattig_formula_without_lambda() {
        // Mattig 1958, AN 284, 109: D_M = c/(H₀ q₀²(1+z)) [q₀ z + (q₀−1)(√(1+2q₀z) − 1)].
        for q0 in [0.05, 0.1, 0.5, 0.8] {
            let model = Cosmology::new(100.0, 2.0 * q0, 0.0).expect("valid");
            for z in [0.1, 1.0, 3.0, 20.0] {
                let bracket = q0 * z + (q0 - 1.0) * ((1.0 + 2.0 * q0 * z).sqrt() - 1.0);
                let exact = model.hubble_distance_mpc() * bracket / (q0 * q0 * (1.0 + z));
                // 1e-11: the closed form itself cancels to a few parts in 1e13 at small q₀ z.
                close(model.transverse_comoving_distance_mpc(z).expect("reached"), exact, 1e-11);
            }
        }
    }

    #[test]
    fn de_sitter_and_milne_have_their_closed_forms() {
        let sitter = Cosmology::new(70.0, 0.0, 1.0).expect("valid");
        let milne = Cosmology::new(70.0, 0.0, 0.0).expect("valid");
        for z in REDSHIFTS {
            let hubble = sitter.hubble_distance_mpc();
            close(sitter.transverse_comoving_distance_mpc(z).expect("reached"), hubble * z, 1e-12);
            // Empty universe: D_M = (c/H₀) sinh ln(1+z) = (c/H₀) z (2+z)/(2(1+z)).
            let exact = hubble * z * (2.0 + z) / (2.0 * (1.0 + z));
            close(milne.transverse_comoving_distance_mpc(z).expect("reached"), exact, 1e-12);
        }
    }

    #[test]
    fn small_redshifts_follow_hubbles_law_to_second_order() {
        // D_C = (c/H₀)(z − (1+q₀) z²/2 + O(z³)), q₀ = Ω_m/2 − Ω_Λ.
        for (matter, lambda) in [(0.3, 0.7), (0.3, 0.0), (1.2, 0.0), (0.3, 0.9)] {
            let model = Cosmology::new(70.0, matter, lambda).expect("valid");
            let q0 = 0.5 * matter - lambda;
            let z = 1e-6;
            let exact = model.hubble_distance_mpc() * (z - 0.5 * (1.0 + q0) * z * z);
            close(model.comoving_distance_mpc(z).expect("reached"), exact, 5e-12);
            let zero = model.luminosity_distance_mpc(0.0).expect("reached");
            assert_eq!(zero.to_bits(), 0f64.to_bits());
        }
    }

    #[test]
    fn quadrature_agrees_with_a_plain_sum() {
        // The slow twin: Simpson's rule in z with 200 000 steps; its own error is below 1e-12
        // at these redshifts.
        for (matter, lambda) in [(0.3, 0.7), (0.05, 0.0), (0.2, 0.8), (0.3, 1.5), (1.2, 0.0)] {
            let model = Cosmology::new(70.0, matter, lambda).expect("valid");
            for z in [1e-6, 0.3, 2.0, 20.0] {
                let steps = 200_000;
                let h = z / f64::from(steps);
                let mut sum = 0.0;
                for i in 0..=steps {
                    let weight = match i {
                        _ if i == 0 || i == steps => 1.0,
                        _ if i % 2 == 1 => 4.0,
                        _ => 2.0,
                    };
                    sum += weight / model.expansion_squared(1.0 + h * f64::from(i)).sqrt();
                }
                let slow = model.hubble_distance_mpc() * sum * h / 3.0;
                close(model.comoving_distance_mpc(z).expect("reached"), slow, 1e-10);
            }
        }
    }

    #[test]
    fn distances_are_continuous_where_the_curvature_changes_sign() {
        let flat = Cosmology::new(70.0, 0.3, 0.7).expect("valid");
        for step in [-1e-9, 1e-9] {
            let bent = Cosmology::new(70.0, 0.3, 0.7 + step).expect("valid");
            let a = bent.transverse_comoving_distance_mpc(2.0).expect("reached");
            close(a, flat.transverse_comoving_distance_mpc(2.0).expect("reached"), 1e-8);
        }
    }

    #[test]
    fn models_without_a_big_bang_and_bad_numbers_are_refused() {
        // Ω_m = 0.1, Ω_Λ = 1.5: E² = 0.1 x³ − 0.6 x² + 1.5 vanishes at x = 1.9167.
        let bounce = Cosmology::new(70.0, 0.1, 1.5).expect("valid numbers");
        assert!(bounce.comoving_distance_mpc(0.91).is_ok());
        for z in [0.92, 1.0, 3.0, 5.0, 20.0] {
            let error = bounce.luminosity_distance_mpc(z).expect_err("E² has been negative");
            assert!(matches!(error, CosmologyError::NoBigBang { turn, .. } if turn <= z));
        }
        // Ω_m = 0, Ω_Λ = 2: E² = 2 − x² vanishes at x = √2.
        let empty = Cosmology::new(70.0, 0.0, 2.0).expect("valid numbers");
        assert!(empty.comoving_distance_mpc(0.4).is_ok());
        assert!(empty.comoving_distance_mpc(0.42).is_err());
        for z in [f64::NAN, f64::INFINITY, -0.1, 1e9] {
            assert!(matches!(
                Cosmology::default().comoving_distance_mpc(z),
                Err(CosmologyError::Redshift(_))
            ));
        }
        for (h, m, l) in [
            (0.0, 0.3, 0.7),
            (-70.0, 0.3, 0.7),
            (f64::NAN, 0.3, 0.7),
            (70.0, -0.1, 0.7),
            (70.0, f64::INFINITY, 0.7),
            (70.0, 0.3, f64::NAN),
        ] {
            assert!(Cosmology::new(h, m, l).is_err());
            let by_hand = Cosmology { hubble_km_s_mpc: h, omega_matter: m, omega_lambda: l };
            assert!(by_hand.luminosity_distance_mpc(1.0).is_err());
        }
        assert!(Distance::from_redshift(0.0, &Cosmology::default()).is_err());
        assert!(Distance::from_redshift(f64::NAN, &Cosmology::default()).is_err());
        assert!(Distance::from_distance_mpc(-1.0).is_err());
    }

    #[test]
    fn every_model_gives_a_positive_distance_or_an_error() {
        for m in 0..=20 {
            for l in -10..=30 {
                let (matter, lambda) = (0.1 * f64::from(m), 0.1 * f64::from(l));
                let model = Cosmology::new(70.0, matter, lambda).expect("valid numbers");
                for z in REDSHIFTS {
                    if let Ok(distance) = model.transverse_comoving_distance_mpc(z) {
                        assert!(distance.is_finite() && distance > 0.0, "{model:?} {z}");
                    }
                }
            }
        }
    }

    #[test]
    fn a_given_distance_knows_no_redshift() {
        let given = Distance::from_distance_mpc(0.0032).expect("positive");
        close(given.luminosity_mpc(), given.angular_diameter_mpc(), 1e-15);
        close(given.transverse_comoving_mpc(), 0.0032, 1e-15);
        // 1 arcsec at 1 pc is 1 au by definition of the parsec: 1 kpc per 206264.8 kpc.
        close(given.kpc_per_arcsec(), 3.2 * PI / 648_000.0, 1e-15);
        let far = Distance::from_redshift(1.0, &Cosmology::default()).expect("reached");
        close(far.luminosity_mpc(), 4.0 * far.angular_diameter_mpc(), 1e-15);
    }
}
