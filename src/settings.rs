//! Settings of the measurement, each default with its reason. All are written into the
//! record, so that any result can be made again.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::physics::beaming::Flow;
use crate::physics::cosmology::Cosmology;

/// All settings of one measurement.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Settings {
    /// Signal-to-noise a region's peak must reach. 5: among the ~10⁴ beams of a cut-out,
    /// Gaussian noise passes it less than once in a hundred maps.
    pub detection_sigma: f64,
    /// Signal-to-noise down to which a region is followed. 3: the trade's usual lowest contour.
    pub outline_sigma: f64,
    /// One-sided confidence of limits.
    pub confidence: f64,
    /// Signal-to-noise both strip fluxes must reach for the ratio to be a value.
    pub ratio_value_sigma: f64,
    /// Difference of the strip fluxes, in its errors, from which a side is called the jet.
    pub sidedness_sigma: f64,
    /// Inner end of the strips in beam majors: the core's beam has fallen to 2⁻¹⁶ there.
    pub strip_inner_beams: f64,
    /// Half the strip's width in projected beam widths. 0.65: holds 87 % of an unresolved jet,
    /// the same on both sides, and leaves the ratio's scatter and what lies under it small.
    pub strip_half_width_beams: f64,
    /// Signal-to-noise the counter-jet's own ridge needs before its strip follows it.
    pub follow_ridge_sigma: f64,
    /// Flow type assumed in the beaming formulas.
    pub flow: Flow,
    /// Cosmology for distances.
    pub cosmology: Cosmology,
}

impl Default for Settings {
    fn default() -> Self {
        Self {
            detection_sigma: 5.0,
            outline_sigma: 3.0,
            confidence: 0.95,
            ratio_value_sigma: 3.0,
            sidedness_sigma: 3.0,
            strip_inner_beams: 2.0,
            strip_half_width_beams: 0.65,
            follow_ridge_sigma: 10.0,
            flow: Flow::Continuous,
            cosmology: Cosmology::default(),
        }
    }
}

/// A setting outside its range.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[error("{name} is {found}; it must be {needed}")]
pub struct SettingsError {
    /// Name of the setting as a flag.
    pub name: &'static str,
    /// What was given.
    pub found: f64,
    /// The range it must lie in.
    pub needed: &'static str,
}

impl Settings {
    /// Checks ranges and mutual order.
    ///
    /// # Errors
    /// The first setting that is out of its range.
    pub fn check(&self) -> Result<(), SettingsError> {
        let check = |name, found: f64, ok: bool, needed| {
            if ok && found.is_finite() {
                Ok(())
            } else {
                Err(SettingsError { name, found, needed })
            }
        };
        check(
            "--outline-sigma",
            self.outline_sigma,
            (1.0..=100.0).contains(&self.outline_sigma),
            "between 1 and 100",
        )?;
        check(
            "--detection-sigma",
            self.detection_sigma,
            self.detection_sigma >= self.outline_sigma && self.detection_sigma <= 1000.0,
            "at least --outline-sigma and at most 1000",
        )?;
        check(
            "--confidence",
            self.confidence,
            (0.5..=0.9999).contains(&self.confidence),
            "between 0.5 and 0.9999",
        )?;
        check(
            "--ratio-value-sigma",
            self.ratio_value_sigma,
            (1.5..=100.0).contains(&self.ratio_value_sigma),
            "between 1.5 and 100",
        )?;
        check(
            "--sidedness-sigma",
            self.sidedness_sigma,
            (0.0..=100.0).contains(&self.sidedness_sigma),
            "between 0 and 100",
        )?;
        check(
            "--strip-inner-beams",
            self.strip_inner_beams,
            (1.0..=100.0).contains(&self.strip_inner_beams),
            "between 1 and 100",
        )?;
        check(
            "--strip-half-width-beams",
            self.strip_half_width_beams,
            (0.25..=10.0).contains(&self.strip_half_width_beams),
            "between 0.25 and 10",
        )?;
        check(
            "--follow-ridge-sigma",
            self.follow_ridge_sigma,
            (3.0..=1e9).contains(&self.follow_ridge_sigma),
            "between 3 and 1e9",
        )
    }
}
