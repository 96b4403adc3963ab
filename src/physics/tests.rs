use super::*;

fn close(a: f64, b: f64, relative: f64) {
    assert!((a - b).abs() <= relative * b.abs(), "{a} is not {b}");
}

fn parts(measurement: Measurement) -> (f64, f64, f64) {
    match measurement {
        Measurement::Value { value, minus, plus, .. } => (value, minus, plus),
        other => panic!("expected a value, got {other:?}"),
    }
}

/// A source with everything known.
fn input() -> PhysicsInput {
    PhysicsInput {
        redshift: Some(0.1),
        redshift_error: None,
        distance_mpc: None,
        frequency_ghz: Some(5.0),
        spectral_index: 0.6,
        spectral_index_error: 0.2,
        core_spectral_index: 0.0,
        total_spectral_index: 0.75,
        flow: Flow::Continuous,
        ratio: Measurement::value(10.0, 2.0, 3.0).with_ci95(6.5, 18.0),
        largest_angular_size_arcsec: Measurement::symmetric(20.0, 1.0),
        total_flux_density_mjy: Measurement::symmetric(300.0, 10.0),
        core_flux_density_mjy: Measurement::symmetric(50.0, 1.0),
        core_component_flux_density_mjy: Measurement::symmetric(50.0, 1.0),
        core_axes_mas: Some([Measurement::symmetric(2.0, 0.1), Measurement::symmetric(1.0, 0.1)]),
        side_length_arcsec: [
            Measurement::symmetric(11.0, 0.5),
            Measurement::lower_limit(9.0, 0.95),
        ],
    }
}

fn physics(input: &PhysicsInput) -> PhysicsOutput {
    constrain_physics(input, &Cosmology::default())
}

#[test]
fn a_known_source_gets_every_number() {
    let out = physics(&input());
    // 1.844295096 kpc/arcsec and D_L = 460.2999364 Mpc at z = 0.1 with 70, 0.3, 0.7
    // (astropy 8.0.2, a general library).
    let scale = *out.physics.scale_kpc_per_arcsec.present().expect("a redshift is given");
    close(scale, 1.844_295_096, 1e-9);
    let (length, error, _) = parts(out.physics.projected_length_kpc);
    close(length, 20.0 * 1.844_295_096, 1e-9);
    close(error, 1.844_295_096, 1e-9);
    close(parts(out.side_length_kpc[0]).0, 11.0 * 1.844_295_096, 1e-9);
    assert!(matches!(out.side_length_kpc[1], Measurement::LowerLimit { .. }));
    // 4π D_L² S (1+z)^(α−1), log10(4π Mpc² 1e-26) = 20.077911.
    let power = 10f64.powf(20.077_911) * 460.299_936_4f64.powi(2) * 0.3 * 1.1f64.powf(-0.25);
    close(parts(out.physics.luminosity_w_per_hz).0, power, 2e-6);
    let core = 10f64.powf(20.077_911) * 460.299_936_4f64.powi(2) * 0.05 / 1.1;
    close(parts(out.physics.core_luminosity_w_per_hz).0, core, 2e-6);
    // T_b = 1.22212e12 · 0.05 · 1.1/(25 · 2 · 1); errors √(0.02² + 0.05² + 0.1²) of it.
    let (temperature, minus, plus) = parts(out.physics.core_brightness_temperature_k);
    close(temperature, 1.222_12e12 * 0.05 * 1.1 / 50.0, 1e-5);
    close(minus / temperature, 0.113_578_2, 1e-5);
    close(plus, minus, 1e-12);
    let beaming = out.physics.beaming;
    assert_eq!(beaming.flow, Flow::Continuous);
    assert_eq!(beaming.other_flow.flow, Flow::Blob);
    close(*beaming.exponent.present().expect("finite"), 2.6, 1e-15);
    close(*beaming.other_flow.exponent.present().expect("finite"), 3.6, 1e-15);
    assert!(parts(beaming.beta_min).0 > parts(beaming.other_flow.beta_min).0);
    assert_eq!(out.physics.posterior, OrMissing::missing(Because::NotImplemented));
}

#[test]
fn the_keys_are_those_of_the_record() {
    let json = serde_json::to_value(physics(&input()).physics).expect("plain data");
    for path in [
        "/scale_kpc_per_arcsec",
        "/cosmology/hubble_km_s_mpc",
        "/cosmology/omega_matter",
        "/cosmology/omega_lambda",
        "/projected_length_kpc/value",
        "/luminosity_w_per_hz/value",
        "/core_luminosity_w_per_hz/value",
        "/core_brightness_temperature_k/value",
        "/beaming/exponent",
        "/beaming/spectral_index",
        "/beaming/flow",
        "/beaming/beta_cos_theta/ci95",
        "/beaming/viewing_angle_max_deg/ci95",
        "/beaming/beta_min/ci95",
        "/beaming/lorentz_factor_min/ci95",
        "/beaming/other_flow/exponent",
        "/beaming/other_flow/flow",
        "/beaming/other_flow/beta_cos_theta/value",
        "/beaming/other_flow/viewing_angle_max_deg/value",
        "/beaming/other_flow/beta_min/value",
        "/beaming/other_flow/lorentz_factor_min/value",
        "/posterior/missing",
    ] {
        assert!(json.pointer(path).is_some(), "{path} is not in {json}");
    }
    assert_eq!(json.pointer("/beaming/flow"), Some(&serde_json::json!("continuous")));
    let back: Physics = serde_json::from_value(json).expect("own output");
    assert_eq!(back, physics(&input()).physics);
    let schema = serde_json::to_string(&schemars::schema_for!(Physics)).expect("plain data");
    assert!(schema.contains("lorentz_factor_min"));
}

#[test]
fn the_redshift_error_enters_lengths_and_powers() {
    let sure = physics(&input());
    let unsure = physics(&PhysicsInput { redshift_error: Some(0.01), ..input() });
    // The ends by hand: 20″ at z = 0.09 and 0.11.
    let at = |z: f64| 20.0 * Cosmology::default().kpc_per_arcsec(z).expect("reached");
    let (value, minus, plus) = parts(unsure.physics.projected_length_kpc);
    let (same, own, _) = parts(sure.physics.projected_length_kpc);
    close(value, same, 1e-15);
    close(minus, own.hypot(at(0.1) - at(0.09)), 1e-12);
    close(plus, own.hypot(at(0.11) - at(0.1)), 1e-12);
    // A power grows roughly with z²: a tenth in z is two tenths in L, more upwards.
    let (power, minus, plus) = parts(unsure.physics.luminosity_w_per_hz);
    assert!(minus / power > 0.17 && minus / power < 0.21);
    assert!(plus / power > 0.21 && plus / power < 0.25);
    // Limits and what does not depend on it stay.
    assert_eq!(unsure.side_length_kpc[1], sure.side_length_kpc[1]);
    assert_eq!(unsure.physics.beaming, sure.physics.beaming);
    // An error larger than the redshift: down to zero, not below.
    let vague = physics(&PhysicsInput { redshift_error: Some(0.5), ..input() });
    let (power, minus, _) = parts(vague.physics.luminosity_w_per_hz);
    close(minus, power.hypot(power / 30.0), 1e-9);
    // A 95 % interval is widened by 1.96 of the redshift's share.
    let size = Measurement::symmetric(20.0, 1.0).with_ci95(18.0, 22.0);
    let wide = physics(&PhysicsInput {
        redshift_error: Some(0.01),
        largest_angular_size_arcsec: size,
        ..input()
    });
    match wide.physics.projected_length_kpc {
        Measurement::Value { value, ci95: Some([low, high]), .. } => {
            let scale = value / 20.0;
            close(value - low, (2.0 * scale).hypot(1.96 * (at(0.1) - at(0.09))), 1e-12);
            close(high - value, (2.0 * scale).hypot(1.96 * (at(0.11) - at(0.1))), 1e-12);
        }
        other => panic!("expected a 95 % interval, got {other:?}"),
    }
}

#[test]
fn a_given_distance_replaces_the_redshift() {
    let near = physics(&PhysicsInput {
        distance_mpc: Some(0.0032),
        redshift_error: Some(0.01),
        ..input()
    });
    let (length, error, _) = parts(near.physics.projected_length_kpc);
    close(length, 20.0 * 3.2 / 206_264.806_247, 1e-10);
    close(error / length, 0.05, 1e-12);
    // No factor of 1 + z in the brightness temperature either.
    let far = physics(&input());
    let ratio = parts(far.physics.core_brightness_temperature_k).0
        / parts(near.physics.core_brightness_temperature_k).0;
    close(ratio, 1.1, 1e-12);
}

#[test]
fn what_is_not_known_is_missing_with_its_reason() {
    let nowhere = physics(&PhysicsInput { redshift: None, ..input() });
    for missing in [
        nowhere.physics.projected_length_kpc,
        nowhere.physics.luminosity_w_per_hz,
        nowhere.physics.core_luminosity_w_per_hz,
        nowhere.physics.core_brightness_temperature_k,
        nowhere.side_length_kpc[0],
    ] {
        assert_eq!(missing, Measurement::missing(Because::NoRedshift));
    }
    assert_eq!(nowhere.physics.scale_kpc_per_arcsec, Bare::missing(Because::NoRedshift));
    assert!(!nowhere.physics.beaming.beta_min.is_missing());
    for redshift in [0.0, -0.001, f64::NAN, 1e9] {
        let wrong = physics(&PhysicsInput { redshift: Some(redshift), ..input() });
        let expected = Measurement::missing(Because::OutOfDomain);
        assert_eq!(wrong.physics.projected_length_kpc, expected);
        assert!(distance(Some(redshift), None, &Cosmology::default()).is_err());
    }
    let dark = physics(&PhysicsInput { frequency_ghz: None, ..input() });
    let expected = Measurement::missing(Because::NoFrequency);
    assert_eq!(dark.physics.core_brightness_temperature_k, expected);
    let unnamed = physics(&PhysicsInput {
        total_flux_density_mjy: Measurement::missing(Because::NoFluxUnit),
        core_flux_density_mjy: Measurement::missing(Because::NoCore),
        core_component_flux_density_mjy: Measurement::missing(Because::NoCore),
        ..input()
    });
    assert_eq!(unnamed.physics.luminosity_w_per_hz, Measurement::missing(Because::NoFluxUnit));
    let expected = Measurement::missing(Because::NoCore);
    assert_eq!(unnamed.physics.core_luminosity_w_per_hz, expected);
    assert_eq!(unnamed.physics.core_brightness_temperature_k, expected);
}

#[test]
fn limits_of_size_and_flux_reach_the_temperature_on_the_right_side() {
    let (full, ..) = parts(physics(&input()).physics.core_brightness_temperature_k);
    let with = |flux: Measurement, major: Measurement, minor: Measurement| {
        physics(&PhysicsInput {
            core_flux_density_mjy: flux,
            core_component_flux_density_mjy: flux,
            core_axes_mas: Some([major, minor]),
            ..input()
        })
        .physics
        .core_brightness_temperature_k
    };
    let flux = Measurement::symmetric(50.0, 1.0);
    let major = Measurement::symmetric(2.0, 0.1);
    let small = |axis, confidence| Measurement::upper_limit(axis, confidence);
    match with(flux, small(2.0, 0.95), small(1.0, 0.9)) {
        Measurement::LowerLimit { lower_limit, confidence } => {
            close(lower_limit, full, 1e-12);
            close(confidence, 0.9, 1e-15);
        }
        other => panic!("expected a lower limit, got {other:?}"),
    }
    assert!(matches!(with(flux, major, small(1.0, 0.95)), Measurement::LowerLimit { .. }));
    let faint = Measurement::upper_limit(50.0, 0.95);
    match with(faint, major, Measurement::symmetric(1.0, 0.1)) {
        Measurement::UpperLimit { upper_limit, .. } => close(upper_limit, full, 1e-12),
        other => panic!("expected an upper limit, got {other:?}"),
    }
    let neither = with(faint, major, small(1.0, 0.95));
    assert_eq!(neither, Measurement::missing(Because::OutOfDomain));
    let unresolved = Measurement::missing(Because::Unresolved);
    assert_eq!(with(flux, major, unresolved), unresolved);
    let point = with(flux, major, Measurement::symmetric(0.0, 0.1));
    assert_eq!(point, Measurement::missing(Because::OutOfDomain));
}

#[test]
fn no_input_makes_a_number_that_is_not_finite() {
    let numbers =
        [f64::NAN, f64::INFINITY, -f64::INFINITY, f64::MAX, -1.0, 0.0, 5e-324, 1e-300, 2.0, 1e300];
    for a in numbers {
        for b in numbers {
            for c in numbers {
                let shapes = [
                    Measurement::value(a, b, c).with_ci95(b, c),
                    Measurement::lower_limit(a, 0.95),
                    Measurement::upper_limit(a, 0.95),
                ];
                for m in shapes {
                    let out = physics(&PhysicsInput {
                        redshift: Some(b),
                        redshift_error: Some(c),
                        distance_mpc: (c > 1.0).then_some(c),
                        frequency_ghz: Some(c),
                        spectral_index: b,
                        spectral_index_error: c,
                        core_spectral_index: c,
                        total_spectral_index: b,
                        flow: Flow::Blob,
                        ratio: m,
                        largest_angular_size_arcsec: m,
                        total_flux_density_mjy: m,
                        core_flux_density_mjy: m,
                        core_component_flux_density_mjy: m,
                        core_axes_mas: Some([m, m]),
                        side_length_arcsec: [m, m],
                    });
                    let text = serde_json::to_string(&out.physics).expect("plain data");
                    assert!(!text.contains("null"), "{m:?} {a} {b} {c}: {text}");
                }
            }
        }
    }
}
