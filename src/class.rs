//! Fanaroff–Riley class from the ratio of the peaks' distance to the whole size
//! (Fanaroff & Riley 1974, MNRAS 167, 31P): below ½ class I, above ½ class II.

use std::collections::BTreeMap;

use crate::measurement::Measurement;
use crate::record::{FrClass, FrClassName};
use crate::stats::normal_probability;

/// The dividing ratio.
pub const DIVISION: f64 = 0.5;
/// Probability a class needs to be given: one σ.
const DECISION: f64 = 0.8413;
/// A ratio is never surer than this: another contour level or beam moves it as much
/// (common practice).
const LEAST_SIGMA: f64 = 0.03;

/// Class from the ratio over the deconvolved size; `beams` is that size in beam majors.
pub fn classify(ratio: Measurement, beams: Option<f64>) -> FrClass {
    let none = |class| FrClass { class, probability: BTreeMap::new() };
    // Below one and a half beams two features cannot be told apart.
    match beams {
        None => return none(FrClassName::Unresolved),
        Some(beams) if beams < 1.5 => return none(FrClassName::Unresolved),
        Some(_) => {}
    }
    let probability_ii = match ratio {
        Measurement::Value { value, minus, plus, .. } => {
            let sigma = if value > DIVISION { minus } else { plus }.max(LEAST_SIGMA);
            normal_probability((value - DIVISION) / sigma)
        }
        Measurement::UpperLimit { upper_limit, confidence } if upper_limit <= DIVISION => {
            1.0 - confidence
        }
        Measurement::LowerLimit { lower_limit, confidence } if lower_limit >= DIVISION => {
            confidence
        }
        _ => return none(FrClassName::Undecided),
    };
    let class = if probability_ii >= DECISION {
        FrClassName::II
    } else if probability_ii <= 1.0 - DECISION {
        FrClassName::I
    } else {
        FrClassName::Undecided
    };
    let probability =
        BTreeMap::from([(FrClassName::I, 1.0 - probability_ii), (FrClassName::II, probability_ii)]);
    FrClass { class, probability }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_division_is_at_one_half() {
        let class = |value, sigma| classify(Measurement::symmetric(value, sigma), Some(10.0)).class;
        assert_eq!(class(0.8, 0.05), FrClassName::II);
        assert_eq!(class(0.2, 0.05), FrClassName::I);
        // 0.52 ± 0.05 is 0.4σ from the division: P(II) = 0.66 decides nothing.
        assert_eq!(class(0.52, 0.05), FrClassName::Undecided);
        let p = classify(Measurement::symmetric(0.52, 0.05), Some(10.0)).probability;
        assert!((p[&FrClassName::II] - 0.655_4).abs() < 1e-3);
    }

    #[test]
    fn limits_decide_on_their_own_side_only() {
        let upper = classify(Measurement::upper_limit(0.3, 0.95), Some(10.0));
        assert_eq!(upper.class, FrClassName::I);
        let open = classify(Measurement::upper_limit(0.7, 0.95), Some(10.0));
        assert_eq!(open.class, FrClassName::Undecided);
        assert_eq!(
            classify(Measurement::symmetric(0.9, 0.01), None).class,
            FrClassName::Unresolved
        );
    }
}
