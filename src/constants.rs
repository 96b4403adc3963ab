//! Physical and mathematical constants, each with its source.

/// Speed of light in km/s (exact, SI 2019).
pub const SPEED_OF_LIGHT_KM_S: f64 = 299_792.458;
/// Boltzmann constant in J/K (exact, SI 2019).
pub const BOLTZMANN_J_K: f64 = 1.380_649e-23;
/// One megaparsec in kilometres (IAU 2015 resolution B2: parsec = 648000/π au; au exact).
pub const KM_PER_MPC: f64 = 3.085_677_581_491_367e19;
/// Days in a Julian year (IAU).
pub const DAYS_PER_YEAR: f64 = 365.25;
/// Seconds in a Julian year.
pub const SECONDS_PER_YEAR: f64 = DAYS_PER_YEAR * 86_400.0;
/// Arcseconds in one radian.
pub const ARCSEC_PER_RADIAN: f64 = 648_000.0 / std::f64::consts::PI;
/// FWHM of a Gaussian over its standard deviation, √(8 ln 2).
pub const FWHM_PER_SIGMA: f64 = 2.354_820_045_030_949_3;
/// Solid angle of an elliptical Gaussian over the product of its two FWHM, π/(4 ln 2).
pub const GAUSSIAN_AREA: f64 = 1.133_090_035_456_798_5;
/// Median absolute deviation to standard deviation for Gaussian noise, 1/Φ⁻¹(3/4).
pub const SIGMA_PER_MAD: f64 = 1.482_602_218_505_602;
