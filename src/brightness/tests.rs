//! Ratios and limits of noisy fluxes.

use super::*;

fn pair(n: f64, d: f64, sn: f64, sd: f64, rho: f64) -> FluxPair {
    FluxPair {
        numerator: n,
        denominator: d,
        numerator_variance: sn * sn,
        denominator_variance: sd * sd,
        covariance: rho * sn * sd,
    }
}

#[test]
fn strong_fluxes_give_first_order_errors() {
    // For S/N → ∞ Fieller's interval is R √(1/snr_n² + 1/snr_d²): first-order propagation.
    let Measurement::Value { value, minus, plus, ci95 } =
        ratio(pair(1000.0, 500.0, 1.0, 1.0, 0.0), 3.0, 0.95)
    else {
        panic!("a value")
    };
    let expected = 2.0 * (1e-3f64.powi(2) + 2e-3f64.powi(2)).sqrt();
    assert!((value - 2.0).abs() < 1e-12);
    assert!(
        (minus - expected).abs() < 0.01 * expected && (plus - expected).abs() < 0.01 * expected
    );
    let [low, high] = ci95.expect("not Gaussian, so given");
    assert!(((high - low) / (plus + minus) - 1.959_96).abs() < 0.01);
}

#[test]
fn interval_and_limit_hold_as_often_as_they_say() {
    // Frequencies over Gaussian draws; quantiles stand for random numbers, so the test is
    // exact to the grid: 400 × 400 equal-probability cells.
    let deviates: Vec<f64> =
        (0..400).map(|k| normal_deviate((f64::from(k) + 0.5) / 400.0)).collect();
    for (truth_n, truth_d) in [(40.0, 8.0), (20.0, 20.0)] {
        let (mut inside68, mut inside95) = (0, 0);
        for a in &deviates {
            for b in &deviates {
                if let Measurement::Value { value, minus, plus, ci95 } =
                    ratio(pair(truth_n + a, truth_d + b, 1.0, 1.0, 0.0), 1.5, 0.95)
                {
                    let truth = truth_n / truth_d;
                    inside68 += u32::from((value - minus..=value + plus).contains(&truth));
                    let [low, high] = ci95.expect("given");
                    inside95 += u32::from((low..=high).contains(&truth));
                }
            }
        }
        let share = |n: u32| f64::from(n) / 160_000.0;
        // Fieller's intervals are exact; 0.5 % is the grid's and the 1.5σ gate's share.
        assert!((share(inside68) - 0.6827).abs() < 0.005, "{}", share(inside68));
        assert!((share(inside95) - 0.95).abs() < 0.005, "{}", share(inside95));
    }
    // Limits: hold at least as often as stated, at a true flux of 0, 1 and 2σ.
    let few: Vec<f64> = (0..40).map(|k| normal_deviate((f64::from(k) + 0.5) / 40.0)).collect();
    for truth_d in [0.0, 1.0, 2.0] {
        let (mut held, mut all) = (0, 0);
        for a in &few {
            for b in &few {
                if let Measurement::LowerLimit { lower_limit, .. } =
                    ratio(pair(20.0 + a, truth_d + b, 1.0, 1.0, 0.0), 3.0, 0.95)
                {
                    all += 1;
                    held += i32::from(lower_limit * truth_d <= 20.0);
                }
            }
        }
        assert!(all > 1000);
        let share = f64::from(held) / f64::from(all);
        assert!(share >= 0.945, "true flux {truth_d}: {share}");
    }
}

#[test]
fn ratio_turns_over_with_its_sides() {
    let there = ratio(pair(12.0, 0.4, 1.0, 1.0, 0.2), 3.0, 0.95);
    let back = ratio(pair(0.4, 12.0, 1.0, 1.0, 0.2), 3.0, 0.95);
    match (there, back) {
        (
            Measurement::LowerLimit { lower_limit, .. },
            Measurement::UpperLimit { upper_limit, .. },
        ) => {
            // Bisected to 1e-8 in either direction.
            assert!((lower_limit * upper_limit - 1.0).abs() < 2e-8);
        }
        other => panic!("limits expected, got {other:?}"),
    }
    assert!(ratio(pair(1.0, 1.0, 1.0, 1.0, 0.0), 3.0, 0.95).is_missing());
}

#[test]
fn upper_limit_of_a_positive_flux() {
    // f = 0: U = σ Φ⁻¹(1 − 0.05/2) = 1.960σ, the half-normal's 95 % point.
    assert!((positive_upper_limit(0.0, 1.0, 0.95) - 1.959_964).abs() < 1e-5);
    // Far above zero it is the boundary-free limit f + 1.645σ.
    assert!((positive_upper_limit(20.0, 1.0, 0.95) - 21.644_854).abs() < 1e-5);
    // Far below zero: exponential tail, −ln(0.05)/|f| to 1/f²; continuous with the other branch.
    let deep = positive_upper_limit(-30.0, 1.0, 0.95);
    assert!((deep - 2.995_73 / 30.0).abs() < 0.01 * deep, "{deep}");
}
