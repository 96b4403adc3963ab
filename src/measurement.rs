//! A measured number: a value with its error, a limit with its confidence, or the reason
//! why there is none. Nothing here is ever NaN or infinite.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// Why a quantity is not given.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize, JsonSchema,
)]
#[serde(rename_all = "kebab-case")]
pub enum Because {
    /// The beam is neither given nor visible in the noise.
    NoBeam,
    /// The description gives no pixel scale: only pixels and angles can be measured.
    NoPixelScale,
    /// The map's unit is unknown or arbitrary.
    NoFluxUnit,
    /// Neither redshift nor distance is given.
    NoRedshift,
    /// The observing frequency is not given.
    NoFrequency,
    /// The description gives no sky coordinates.
    NoCoordinates,
    /// No source was found on the map.
    NoSource,
    /// No core could be chosen, so nothing can be measured from it.
    NoCore,
    /// The source leaves the map on both sides.
    LeavesMap,
    /// The core is too unsure for a number that hangs on it.
    CoreUnsure,
    /// The source is not resolved by the beam.
    Unresolved,
    /// No emission of this side stands above the noise.
    SideNotDetected,
    /// No jet stands above the noise between core and lobe.
    JetNotDetected,
    /// The side has no hot spot.
    NoHotspot,
    /// The side has no lobe beyond its jet.
    NoLobe,
    /// There is no room for a strip between core and lobe or map edge.
    NoRoomForStrip,
    /// Both sides lie below the noise: their ratio is unbounded.
    BothSidesBelowNoise,
    /// The two strips hold too many blank pixels.
    BlankPixels,
    /// The formula has no solution for what was measured.
    OutOfDomain,
    /// The noise of the map is not known.
    NoNoiseEstimate,
    /// Fewer features than the quantity needs.
    TooFewFeatures,
    /// The file could not be read.
    NotRead,
    /// This version does not measure it yet.
    NotImplemented,
}

/// A measured number in exactly one of four shapes.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(untagged)]
pub enum Measurement {
    /// A value with its 68 % interval.
    Value {
        /// The value.
        value: f64,
        /// Distance from the value down to the lower end of the 68 % interval.
        minus: f64,
        /// Distance from the value up to the upper end of the 68 % interval.
        plus: f64,
        /// The 95 % interval, given where the error is not Gaussian.
        #[serde(default, skip_serializing_if = "Option::is_none")]
        ci95: Option<[f64; 2]>,
    },
    /// The true value is larger than this, with the stated one-sided confidence.
    LowerLimit {
        /// The bound.
        lower_limit: f64,
        /// One-sided confidence, 0 to 1.
        confidence: f64,
    },
    /// The true value is smaller than this, with the stated one-sided confidence.
    UpperLimit {
        /// The bound.
        upper_limit: f64,
        /// One-sided confidence, 0 to 1.
        confidence: f64,
    },
    /// There is no number, for this reason.
    Missing {
        /// The reason's code.
        missing: Because,
    },
}

impl Measurement {
    /// A value with a symmetric error; missing where either is not finite.
    pub fn symmetric(value: f64, sigma: f64) -> Self {
        Self::value(value, sigma, sigma)
    }

    /// A value with its 68 % interval; missing where a number is not finite.
    pub fn value(value: f64, minus: f64, plus: f64) -> Self {
        if value.is_finite() && minus.is_finite() && plus.is_finite() {
            Self::Value { value, minus: minus.abs(), plus: plus.abs(), ci95: None }
        } else {
            Self::missing(Because::OutOfDomain)
        }
    }

    /// The same with a 95 % interval beside it.
    pub fn with_ci95(self, low: f64, high: f64) -> Self {
        match self {
            Self::Value { value, minus, plus, .. } if low.is_finite() && high.is_finite() => {
                // Rounding may not leave the value outside its own interval.
                Self::Value { value, minus, plus, ci95: Some([low.min(value), high.max(value)]) }
            }
            other => other,
        }
    }

    /// A one-sided lower limit; missing where the bound is not finite.
    pub fn lower_limit(bound: f64, confidence: f64) -> Self {
        if bound.is_finite() {
            Self::LowerLimit { lower_limit: bound, confidence }
        } else {
            Self::missing(Because::OutOfDomain)
        }
    }

    /// A one-sided upper limit; missing where the bound is not finite.
    pub fn upper_limit(bound: f64, confidence: f64) -> Self {
        if bound.is_finite() {
            Self::UpperLimit { upper_limit: bound, confidence }
        } else {
            Self::missing(Because::OutOfDomain)
        }
    }

    /// No number, and why.
    pub const fn missing(because: Because) -> Self {
        Self::Missing { missing: because }
    }

    /// The value, where there is one (limits give `None`).
    pub fn best(self) -> Option<f64> {
        match self {
            Self::Value { value, .. } => Some(value),
            _ => None,
        }
    }

    /// Half the 68 % interval, where there is a value.
    pub fn sigma(self) -> Option<f64> {
        match self {
            Self::Value { minus, plus, .. } => Some(0.5 * (minus + plus)),
            _ => None,
        }
    }

    /// A value as a lower limit: what is known from below only (saturated, cut off).
    pub fn as_lower_limit(self, confidence: f64) -> Self {
        match self {
            Self::Value { value, .. } => Self::lower_limit(value, confidence),
            other => other,
        }
    }

    /// A value as an upper limit.
    pub fn as_upper_limit(self, confidence: f64) -> Self {
        match self {
            Self::Value { value, .. } => Self::upper_limit(value, confidence),
            other => other,
        }
    }

    /// Whether this is `Missing`.
    pub fn is_missing(self) -> bool {
        matches!(self, Self::Missing { .. })
    }

    /// Multiplies value, errors and limits by a positive exact number.
    pub fn scaled(self, factor: f64) -> Self {
        debug_assert!(factor > 0.0);
        self.increasing(|v| v * factor)
    }

    /// Through an increasing function: limits keep their side.
    pub fn increasing(self, f: impl Fn(f64) -> f64) -> Self {
        match self {
            Self::Value { value, minus, plus, ci95 } => {
                let y = f(value);
                let out = Self::value(y, y - f(value - minus), f(value + plus) - y);
                ci95.map_or(out, |[low, high]| out.with_ci95(f(low), f(high)))
            }
            Self::LowerLimit { lower_limit, confidence } => {
                Self::lower_limit(f(lower_limit), confidence)
            }
            Self::UpperLimit { upper_limit, confidence } => {
                Self::upper_limit(f(upper_limit), confidence)
            }
            missing @ Self::Missing { .. } => missing,
        }
    }

    /// Through a decreasing function: limits change side, errors swap.
    pub fn decreasing(self, f: impl Fn(f64) -> f64) -> Self {
        match self {
            Self::Value { value, minus, plus, ci95 } => {
                let y = f(value);
                let out = Self::value(y, y - f(value + plus), f(value - minus) - y);
                ci95.map_or(out, |[low, high]| out.with_ci95(f(high), f(low)))
            }
            Self::LowerLimit { lower_limit, confidence } => {
                Self::upper_limit(f(lower_limit), confidence)
            }
            Self::UpperLimit { upper_limit, confidence } => {
                Self::lower_limit(f(upper_limit), confidence)
            }
            missing @ Self::Missing { .. } => missing,
        }
    }

    /// Adds an independent fractional error in quadrature (a flux scale's, say).
    pub fn with_fractional_error(self, fraction: f64) -> Self {
        match self {
            Self::Value { value, minus, plus, .. } => {
                let scale = fraction * value.abs();
                Self::value(value, minus.hypot(scale), plus.hypot(scale))
            }
            other => other,
        }
    }
}

/// Something that is there, or the reason why it is not.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(untagged)]
pub enum OrMissing<T> {
    /// It is there.
    Present(T),
    /// It is not, for this reason.
    Missing {
        /// The reason's code.
        missing: Because,
    },
}

impl<T> OrMissing<T> {
    /// Absent, and why.
    pub const fn missing(because: Because) -> Self {
        Self::Missing { missing: because }
    }

    /// From an option: absent for the given reason where it is `None`.
    pub fn from_option(option: Option<T>, because: Because) -> Self {
        option.map_or(Self::missing(because), Self::Present)
    }

    /// What is there, if anything.
    pub const fn present(&self) -> Option<&T> {
        match self {
            Self::Present(inner) => Some(inner),
            Self::Missing { .. } => None,
        }
    }
}

/// A bare number (positions, noise, probabilities), or the reason why it is absent.
pub type Bare = OrMissing<f64>;

impl Bare {
    /// A bare number; absent for `because` where it is not finite.
    pub fn number(value: f64, because: Because) -> Self {
        if value.is_finite() { Self::Present(value) } else { Self::missing(because) }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn limits_change_side_through_a_decreasing_function() {
        let r = Measurement::lower_limit(4.0, 0.95);
        // R > 4 with p = 2: β cos θ > (4^½ − 1)/(4^½ + 1) = 1/3, and θ < arccos(1/3).
        let x = r.increasing(|r| (r.sqrt() - 1.0) / (r.sqrt() + 1.0));
        let theta = x.decreasing(|x| x.acos().to_degrees());
        match theta {
            Measurement::UpperLimit { upper_limit, confidence } => {
                assert!((upper_limit - 70.528_779_365_509_3).abs() < 1e-10);
                assert!((confidence - 0.95).abs() < 1e-15);
            }
            other => panic!("expected an upper limit, got {other:?}"),
        }
    }

    #[test]
    fn each_shape_is_written_with_its_own_keys_only() {
        let shapes = [
            (Measurement::value(1.5, 0.25, 0.5), r#"{"value":1.5,"minus":0.25,"plus":0.5}"#),
            (Measurement::lower_limit(2.0, 0.95), r#"{"lower_limit":2.0,"confidence":0.95}"#),
            (Measurement::upper_limit(2.0, 0.95), r#"{"upper_limit":2.0,"confidence":0.95}"#),
            (Measurement::missing(Because::NoCore), r#"{"missing":"no-core"}"#),
        ];
        for (shape, text) in shapes {
            assert_eq!(serde_json::to_string(&shape).expect("plain data"), text);
            let back: Measurement = serde_json::from_str(text).expect("own output");
            assert_eq!(back, shape);
        }
    }

    #[test]
    fn nothing_that_is_not_finite_gets_through() {
        assert!(Measurement::value(f64::NAN, 1.0, 1.0).is_missing());
        assert!(Measurement::lower_limit(f64::INFINITY, 0.95).is_missing());
        assert!(Measurement::symmetric(1.0, 1.0).increasing(f64::ln).is_missing());
    }
}
