use super::*;

fn close(a: f64, b: f64, tolerance: f64) {
    assert!((a - b).abs() <= tolerance, "{a} is not {b}");
}

/// Value and errors of a measurement that must have them.
fn parts(measurement: Measurement) -> (f64, f64, f64) {
    match measurement {
        Measurement::Value { value, minus, plus, .. } => (value, minus, plus),
        other => panic!("expected a value, got {other:?}"),
    }
}

#[test]
fn closed_forms_at_round_numbers() {
    // β = 0.6: Γ = 1.25; at θ = 0 δ = 2, R = 4^p, Q = 4; at θ = 90° δ = 0.8, R = 1.
    close(lorentz_factor(0.6).expect("in domain"), 1.25, 1e-15);
    close(doppler_factor(0.6, 0.0).expect("in domain"), 2.0, 1e-15);
    close(doppler_factor(0.6, 90.0).expect("in domain"), 0.8, 1e-15);
    close(doppler_factor(0.6, 180.0).expect("in domain"), 0.5, 1e-15);
    close(arm_length_ratio(0.6, 0.0).expect("in domain"), 4.0, 1e-14);
    close(jet_to_counter_jet_ratio(0.6, 0.0, 2.5).expect("in domain"), 32.0, 1e-12);
    close(jet_to_counter_jet_ratio(0.6, 90.0, 2.5).expect("in domain"), 1.0, 1e-15);
    close(jet_to_counter_jet_ratio(0.6, 180.0, 2.5).expect("in domain"), 1.0 / 32.0, 1e-15);
    close(beta_cos_theta_from_ratio(32.0, 2.5).expect("in domain"), 0.6, 1e-15);
    close(apparent_speed(0.6, 90.0).expect("in domain"), 0.6, 1e-15);
    // cos θ = 0.6 as well: β_app = βΓ = 0.75, its largest.
    let angle = 0.6f64.acos().to_degrees();
    close(apparent_speed(0.6, angle).expect("in domain"), 0.75, 1e-14);
    close(doppler_factor(0.6, angle).expect("in domain"), 1.25, 1e-14);
    close(viewing_angle_from_doppler_deg(0.6, 1.25).expect("in domain"), angle, 1e-12);
    close(viewing_angle_max_deg(0.5).expect("in domain"), 60.0, 1e-12);
    close(viewing_angle_max_deg(-0.5).expect("in domain"), 60.0, 1e-12);
    close(lorentz_factor_min(-0.6).expect("in domain"), 1.25, 1e-15);
    close(beta_min(-0.6).expect("in domain"), 0.6, 0.0);
    let limits = limits_from_apparent_speed(0.75).expect("in domain");
    close(limits.beta_min, 0.6, 1e-15);
    close(limits.lorentz_factor_min, 1.25, 1e-15);
    close(limits.viewing_angle_at_beta_min_deg, angle, 1e-12);
    close(limits.viewing_angle_max_deg, 2.0 * angle, 1e-12);
}

#[test]
fn no_digits_are_lost_close_to_the_speed_of_light() {
    // Γ = 1e6 at θ = 0: δ = 2Γ (1 − 1/4Γ² + …), not the noise of 1 − β.
    let beta = speed_from_lorentz_factor(1e6).expect("in domain");
    let delta = doppler_factor(beta, 0.0).expect("in domain");
    // 1 − β = 5e-13 is held to 2⁻⁵³ in β: 1.1e-4 of its relative size in Γ and δ alike.
    close(delta / (2.0 * lorentz_factor(beta).expect("in domain")), 1.0, 1e-12);
    // A milli-degree off the axis 1 − β cos θ = (1 − β) + θ²/2.
    let theta = 1e-3f64.to_radians();
    let beta = 1.0 - 1e-12;
    let expected = 2.0f64 / ((1.0 - beta) + 0.5 * theta * theta);
    let got = arm_length_ratio(beta, 1e-3).expect("in domain");
    close(got / expected, 1.0, 1e-9);
}

#[test]
fn every_speed_and_angle_goes_there_and_back() {
    for b in 1..200 {
        let beta = f64::from(b) / 200.0;
        for t in 0..=90 {
            let theta = f64::from(t);
            let gamma = lorentz_factor(beta).expect("in domain");
            let approaching = doppler_factor(beta, theta).expect("in domain");
            let receding = doppler_factor(beta, 180.0 - theta).expect("in domain");
            // 1/δ₁ + 1/δ₂ = 2Γ and 0 < δ ≤ 2Γ.
            close((1.0 / approaching + 1.0 / receding) / (2.0 * gamma), 1.0, 1e-12);
            assert!(approaching > 0.0 && approaching <= 2.0 * gamma);
            let p = 2.6;
            let ratio = jet_to_counter_jet_ratio(beta, theta, p).expect("in domain");
            assert!(ratio >= 1.0);
            close(ratio / (approaching / receding).powf(p), 1.0, 1e-12);
            let x = beta_cos_theta_from_ratio(ratio, p).expect("in domain");
            close(x, beta * theta.to_radians().cos(), 1e-13);
            // The closed-form bounds hold for the truth.
            assert!(beta_min(x).expect("in domain") <= beta + 1e-13);
            assert!(viewing_angle_max_deg(x).expect("in domain") >= theta - 1e-5);
            assert!(lorentz_factor_min(x).expect("in domain") <= gamma * (1.0 + 1e-11));
            let apparent = apparent_speed(beta, theta).expect("in domain");
            let limits = limits_from_apparent_speed(apparent).expect("in domain");
            assert!(limits.beta_min <= beta + 1e-13);
            assert!(limits.viewing_angle_max_deg >= theta);
            assert!(apparent <= beta * gamma * (1.0 + 1e-12), "never above its maximum");
            for found in [
                speed_and_angle_from_apparent_speed(x, apparent),
                speed_and_angle_from_doppler(apparent, approaching),
            ] {
                let found = found.expect("a speed below 1");
                close(found.beta, beta, 1e-11);
                close(found.viewing_angle_deg, theta, 1e-8);
                close(found.lorentz_factor / gamma, 1.0, 1e-9);
            }
            if t > 0 {
                let speed = speed_from_apparent_speed(apparent, theta).expect("in domain");
                close(speed, beta, 1e-12);
                let (fast, slow) =
                    ejection_proper_motions_mas_per_year(beta, theta, 0.01).expect("in domain");
                let found = speed_and_angle_from_ejection(fast, slow, 0.01).expect("below 1");
                close(found.beta, beta, 1e-11);
                close(found.viewing_angle_deg, theta, 1e-8);
                assert!(ejection_distance_max_mpc(fast, slow).expect("in domain") > 0.01);
                let q = arm_length_ratio(beta, theta).expect("in domain");
                close(fast / slow / q, 1.0, 1e-12);
            }
        }
    }
}

#[test]
fn length_ratio_and_apparent_speed_give_the_short_formula() {
    // tan θ = 2 β_app/(q − 1), from x = (q − 1)/(q + 1).
    for (q, apparent) in [(1.5, 0.2), (2.0, 0.3), (4.0, 1.5)] {
        let x = beta_cos_theta_from_arm_length_ratio(q).expect("in domain");
        let found = speed_and_angle_from_apparent_speed(x, apparent).expect("below 1");
        let expected = (2.0 * apparent / (q - 1.0)).atan().to_degrees();
        close(found.viewing_angle_deg, expected, 1e-11);
    }
    // β cos θ = 0 with β_app = 2 would need β = 2.
    assert!(speed_and_angle_from_apparent_speed(0.0, 2.0).is_none());
}

#[test]
fn outside_its_domain_every_formula_gives_none() {
    for beta in [-0.1, 1.0, 1.5, f64::NAN, f64::INFINITY] {
        assert!(lorentz_factor(beta).is_none());
        assert!(doppler_factor(beta, 30.0).is_none());
        assert!(apparent_speed(beta, 30.0).is_none());
        assert!(jet_to_counter_jet_ratio(beta, 30.0, 2.5).is_none());
    }
    for theta in [-1.0, 181.0, f64::NAN] {
        assert!(doppler_factor(0.5, theta).is_none());
        assert!(arm_length_ratio(0.5, theta).is_none());
    }
    for ratio in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        assert!(beta_cos_theta_from_ratio(ratio, 2.5).is_none());
    }
    assert!(beta_cos_theta_from_ratio(2.0, 0.0).is_none());
    assert!(viewing_angle_max_deg(1.1).is_none());
    assert!(viewing_angle_from_doppler_deg(0.6, 2.1).is_none());
    assert!(beta_cos_theta_from_ejection(0.0, 0.0).is_none());
    assert!(speed_and_angle_from_ejection(17.6, 9.0, 1e3).is_none());
    assert!(speed_from_lorentz_factor(0.9).is_none());
    assert!(speed_and_angle_from_doppler(1.0, 0.0).is_none());
    assert!(limits_from_apparent_speed(-1.0).is_none());
}

#[test]
fn the_error_of_a_ratio_reaches_beta_cos_theta() {
    // d(β cos θ) = 2q/(p R (q+1)²) dR with q = R^(1/p): R = 10 ± 2, p = 2.5 gives 0.0326 to
    // first order, so ± 0.002 gives 3.26e-5.
    let (_, minus, plus) = parts(beta_cos_theta(Measurement::symmetric(10.0, 0.002), 2.5));
    let q = 10f64.powf(0.4);
    let slope = 2.0 * q / (2.5 * 10.0 * (q + 1.0) * (q + 1.0));
    close(2.0 * slope, 0.0326, 5e-5);
    // The bend over the interval is of relative size dR/R = 2e-4.
    close(minus, 0.002 * slope, 2e-4 * 0.002 * slope);
    close(plus, 0.002 * slope, 2e-4 * 0.002 * slope);
    // Over ± 2 the function bends: the ends go through it exactly.
    let (value, minus, plus) = parts(beta_cos_theta(Measurement::symmetric(10.0, 2.0), 2.5));
    close(value, 0.430_505_5, 1e-7);
    close(value - minus, beta_cos_theta_from_ratio(8.0, 2.5).expect("in domain"), 1e-15);
    close(value + plus, beta_cos_theta_from_ratio(12.0, 2.5).expect("in domain"), 1e-15);
    assert!(minus > plus);
    let forms = constrain_from_ratio(Measurement::symmetric(10.0, 2.0), 0.5, 0.0, Flow::Continuous);
    let (same, below, above) = parts(forms.beta_cos_theta);
    close(same, value, 1e-15);
    close(below, minus, 1e-14);
    close(above, plus, 1e-14);
}

#[test]
fn the_error_of_the_spectral_index_enters_in_quadrature() {
    // R exact: only α's error is left, dx/dα = −(1 − x²) ln R/(2p²).
    let forms =
        constrain_from_ratio(Measurement::symmetric(10.0, 0.0), 0.5, 0.01, Flow::Continuous);
    let (x, minus, plus) = parts(forms.beta_cos_theta);
    let expected = (1.0 - x * x) * 10f64.ln() / (2.0 * 6.25) * 0.01;
    // The bend of the function over the interval is of second order in 0.01.
    close(0.5 * (minus + plus), expected, 1e-2 * expected);
    // A slow twin: move α itself.
    let moved =
        constrain_from_ratio(Measurement::symmetric(10.0, 0.0), 0.51, 0.0, Flow::Continuous);
    close(x - parts(moved.beta_cos_theta).0, minus, 1e-2 * minus);
    // Not the limits.
    let limit = Measurement::lower_limit(10.0, 0.95);
    let with = constrain_from_ratio(limit, 0.5, 0.2, Flow::Continuous);
    let without = constrain_from_ratio(limit, 0.5, 0.0, Flow::Continuous);
    assert_eq!(with, without);
}

#[test]
fn limits_end_on_the_right_side() {
    let above =
        |r| constrain_from_ratio(Measurement::lower_limit(r, 0.95), 0.0, 0.0, Flow::Continuous);
    let below =
        |r| constrain_from_ratio(Measurement::upper_limit(r, 0.95), 0.0, 0.0, Flow::Continuous);
    let lower = |m: Measurement| match m {
        Measurement::LowerLimit { lower_limit, confidence } => {
            close(confidence, 0.95, 0.0);
            lower_limit
        }
        other => panic!("expected a lower limit, got {other:?}"),
    };
    let upper = |m: Measurement| match m {
        Measurement::UpperLimit { upper_limit, .. } => upper_limit,
        other => panic!("expected an upper limit, got {other:?}"),
    };
    // R > 4, p = 2: β cos θ > 1/3, θ < arccos 1/3, Γ > 1/√(1 − 1/9).
    let forms = above(4.0);
    close(lower(forms.beta_cos_theta), 1.0 / 3.0, 1e-15);
    close(lower(forms.beta_min), 1.0 / 3.0, 1e-15);
    close(upper(forms.viewing_angle_max_deg), 70.528_779_365_509_3, 1e-12);
    close(lower(forms.lorentz_factor_min), 1.060_660_171_779_821_2, 1e-14);
    // R < 1/4: the same for the other side.
    let mirrored = below(0.25);
    close(upper(mirrored.beta_cos_theta), -1.0 / 3.0, 1e-15);
    assert_eq!(mirrored.beta_min, forms.beta_min);
    assert_eq!(mirrored.viewing_angle_max_deg, forms.viewing_angle_max_deg);
    assert_eq!(mirrored.lorentz_factor_min, forms.lorentz_factor_min);
    // R > 1/4 and R < 4 bound β cos θ but not its size.
    for (forms, x) in [(above(0.25), -1.0 / 3.0), (below(4.0), 1.0 / 3.0)] {
        let got = if x < 0.0 { lower(forms.beta_cos_theta) } else { upper(forms.beta_cos_theta) };
        close(got, x, 1e-15);
        close(lower(forms.beta_min), 0.0, 0.0);
        close(upper(forms.viewing_angle_max_deg), 90.0, 1e-13);
        close(lower(forms.lorentz_factor_min), 1.0, 0.0);
    }
}

#[test]
fn an_interval_across_one_reaches_down_to_rest() {
    let ratio = Measurement::value(1.2, 0.4, 0.6).with_ci95(0.5, 2.5);
    let forms = constrain_from_ratio(ratio, 0.6, 0.2, Flow::Continuous);
    let (x, minus, plus) = parts(forms.beta_cos_theta);
    assert!(x > 0.0 && x - minus < 0.0 && x + plus < 1.0);
    let (least, down, up) = parts(forms.beta_min);
    close(least - down, 0.0, 1e-16);
    close(least + up, x + plus, 1e-15);
    let (angle, _, wider) = parts(forms.viewing_angle_max_deg);
    close(angle + wider, 90.0, 1e-12);
    assert!(angle < 90.0);
    let (gamma, down, _) = parts(forms.lorentz_factor_min);
    close(gamma - down, 1.0, 1e-15);
    match (forms.beta_min, forms.viewing_angle_max_deg) {
        (
            Measurement::Value { ci95: Some([a, b]), .. },
            Measurement::Value { ci95: Some([c, d]), .. },
        ) => {
            close(a, 0.0, 0.0);
            close(d, 90.0, 1e-12);
            close(c, b.acos().to_degrees(), 1e-9);
        }
        other => panic!("expected 95 % intervals, got {other:?}"),
    }
    // The mirror image: 1/R with its interval turned round differs in the sign of x only.
    let turned = Measurement::value(1.0 / 1.2, 1.0 / 1.2 - 1.0 / 1.8, 1.0 / 0.8 - 1.0 / 1.2);
    let mirrored = constrain_from_ratio(turned, 0.6, 0.2, Flow::Continuous);
    close(parts(mirrored.beta_cos_theta).0, -x, 1e-15);
    close(parts(mirrored.beta_min).2, up, 1e-14);
}

#[test]
fn nothing_measured_becomes_nan() {
    let ratios = [
        Measurement::symmetric(1.0, 1.5),
        Measurement::symmetric(0.0, 1.0),
        Measurement::symmetric(-2.0, 1.0),
        Measurement::symmetric(1e300, 1e299),
        Measurement::symmetric(1e-300, 0.0).with_ci95(0.0, 1.0),
        Measurement::lower_limit(0.0, 0.95),
        Measurement::lower_limit(1e300, 0.95),
        Measurement::upper_limit(-1.0, 0.95),
        Measurement::missing(Because::NoCore),
    ];
    for ratio in ratios {
        for index in [-5.0, -2.0, 0.0, 0.6, f64::NAN, f64::INFINITY] {
            for flow in [Flow::Continuous, Flow::Blob] {
                let forms = constrain_from_ratio(ratio, index, 0.2, flow);
                let text = serde_json::to_string(&forms).expect("plain data");
                assert!(!text.contains("null"), "{ratio:?} {index}: {text}");
            }
        }
    }
    let kept = constrain_from_ratio(Measurement::missing(Because::NoCore), 0.6, 0.2, Flow::Blob);
    assert_eq!(kept.beta_min, Measurement::missing(Because::NoCore));
    // An interval of R reaching below zero: β cos θ down to −1, Γ_min without an end.
    let wide = constrain_from_ratio(Measurement::symmetric(1.0, 1.5), 0.6, 0.2, Flow::Continuous);
    let (x, minus, _) = parts(wide.beta_cos_theta);
    close(x - minus, -1.0, 1e-15);
    let (angle, down, _) = parts(wide.viewing_angle_max_deg);
    close(angle - down, 0.0, 1e-12);
    assert_eq!(wide.lorentz_factor_min, Measurement::missing(Because::OutOfDomain));
}
