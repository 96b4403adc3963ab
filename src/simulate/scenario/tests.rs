//! Reading scenarios, their errors, and what is drawn.

use super::*;

/// A scenario with nothing but what is needed, and these lines from line 3 on.
fn text(lines: &str) -> String {
    format!("name = \"made\"\narms.length_arcsec = 60\n{lines}")
}

fn scenario(lines: &str) -> Scenario {
    Scenario::parse(&text(lines), "made.toml").expect(lines)
}

fn at(scenario: &Scenario, index: usize) -> Parameters {
    scenario.parameters(index).expect("good")
}

#[test]
fn bad_scenarios_say_where_what_was_found_and_what_is_needed() {
    let long = format!("about = \"{}\"", "x".repeat(MAX_TEXT_BYTES));
    let deep = format!("jet.speed = {}", "[".repeat(100_000));
    let limited = "[sample]\nselection = 'flux-limited'\n";
    let speed = "[jet]\nspeed = { uniform = [0.1, 0.9] }\n";
    let limited_at_rest = format!("{limited}{speed}");
    let limited_list = format!("{limited}[jet]\nspeed = [0.1, 0.9]\n");
    let limited_wrong =
        format!("{limited}{speed}[source]\nviewing_angle_deg = {{ uniform = [0, 90] }}\n");
    let limited_steep = format!(
        "{limited}counts_slope = 10\n[jet]\nspectral_index = 9\nspeed = {{ uniform = [0.1, 0.9] }}\n[source]\nviewing_angle_deg = {{ isotropic = [0, 90] }}\n"
    );
    let bad: &[(&str, &[&str])] = &[
        // Text.
        ("[jet]\nspeed = = 2", &["made.toml:4:9", "not TOML", "correct it"]),
        ("[jet]\nspeed = 0.1\nspeed = 0.2", &["made.toml:5:1", "duplicate key"]),
        (&long, &["made.toml", "1000", "at most 1000000"]),
        (&deep, &["made.toml:3", "recursion"]),
        // Names.
        (
            "[jets]\nspeed = 0.5",
            &["made.toml:3", "unknown table \"jets\"", "nearest known one is jet"],
        ),
        ("[jet]\nsped = 0.5", &["made.toml:4", "unknown key \"jet.sped\"", "jet.speed"]),
        ("[jet]\nredshift = 0.5", &["made.toml:4", "\"jet.redshift\"", "source.redshift"]),
        ("viewing_angle_deg = 5", &["made.toml:3", "source.viewing_angle_deg"]),
        ("sed = 5", &["made.toml:3", "unknown key \"sed\"", "is seed"]),
        ("jet = 5", &["made.toml:3", "jet is 5", "a table", "[jet]"]),
        // Values.
        (
            "[jet]\nspeed = 1.0",
            &["made.toml:4", "jet.speed is 1.0", "at least 0 and below 1", "0.9"],
        ),
        ("[jet]\nspeed = nan", &["jet.speed is nan", "a number at least 0"]),
        ("[jet]\nend_speed = 2", &["jet.end_speed is 2", "correct it or leave the key out"]),
        ("[jet]\nspeed = 'fast'", &["jet.speed is 'fast'", "a number at least 0"]),
        ("[jet]\nspeed = [0.1,\n 1.5]", &["made.toml:5", "jet.speed is 1.5", "below 1"]),
        ("[jet]\nspeed = []", &["jet.speed is []", "at least one"]),
        ("[jet]\nspeed = [[0.1]]", &["jet.speed is [0.1]"]),
        (
            "[map]\ncolumns = 10.5",
            &["map.columns is 10.5", "a whole number from 1 to 20000", "300"],
        ),
        ("[map]\ncolumns = 0", &["map.columns is 0", "from 1 to 20000"]),
        ("[map]\nrows = { uniform = [1, 5] }", &["map.rows is { uniform", "whole number"]),
        ("[bend]\nshape = 'sine'", &["bend.shape is 'sine'", "none, inversion, mirror"]),
        ("[bend]\nshape = ['mirror', 3]", &["bend.shape is 3", "none, inversion, mirror"]),
        // Distributions.
        (
            "[jet]\nspeed = { gaussian = [0.5, 0.1] }",
            &["gaussian", "uniform, log_uniform, normal, power_law, isotropic"],
        ),
        (
            "[jet]\nspeed = { uniform = [0, 0.1], normal = [0.5, 0.1] }",
            &["one distribution out of"],
        ),
        ("[jet]\nspeed = {}", &["jet.speed is {}", "one distribution out of"]),
        ("[jet]\nspeed = { uniform = [0.5, 0.6, 0.7] }", &["[low, high]", "2 finite numbers"]),
        ("[jet]\nspeed = { uniform = 0.5 }", &["[low, high]", "2 finite numbers"]),
        ("[jet]\nspeed = { power_law = [0.5, 0.6] }", &["[low, high, slope]", "3 finite numbers"]),
        ("[jet]\nspeed = { uniform = [0.5, inf] }", &["2 finite numbers"]),
        ("[jet]\nspeed = { uniform = [0.6, 0.5] }", &["low below high"]),
        (
            "[jet]\nspeed = { uniform = [0.5, 1.0] }",
            &["ends are each a number at least 0 and below 1"],
        ),
        ("[jet]\nspeed = { log_uniform = [0, 0.5] }", &["low above 0"]),
        ("[jet]\nspeed = { power_law = [0, 0.5, 2] }", &["low above 0"]),
        ("[jet]\nspeed = { power_law = [0.1, 0.5, 1e300] }", &["slope from -100 to 100"]),
        ("[jet]\nspeed = { normal = [0.5, 0] }", &["sigma above 0"]),
        ("[jet]\nspeed = { normal = [7, 0.1] }", &["at least 1 %", "below 1"]),
        ("[jet]\nspeed = { isotropic = [0, 0.5] }", &["isotropic is for angles"]),
        ("[map]\nbeam_pa_deg = { isotropic = [-10, 90] }", &["from 0 to 180 degrees"]),
        // Top level.
        ("count = 0", &["made.toml:3", "count is 0", "from 1 to 10000000"]),
        ("count = 10000001", &["count is 10000001"]),
        ("count = 2.5", &["count is 2.5", "a whole number"]),
        ("seed = -1", &["seed is -1", "from 0"]),
        ("about = \"two\\nlines\"", &["about is", "one line"]),
        ("epochs = []", &["epochs is []", "1 to 1000 epochs"]),
        ("epochs = 5", &["epochs is 5", "a list of tables", "[[epochs]]"]),
        ("epochs = [5]", &["epochs is 5", "a table"]),
        ("[[epochs]]\nyears = 2000", &["made.toml:4", "\"epochs.years\"", "epochs.year"]),
        ("[[epochs]]\nyear = 1800", &["epochs.year is 1800", "at least 1900 and below 2200"]),
        (
            "[[epochs]]\nfrequency_ghz = [1, 2]",
            &["epochs.frequency_ghz is [1, 2]", "one number above 0"],
        ),
        // Several keys.
        (
            "[jet]\nspeed = 0.5\nlorentz_factor = 2",
            &["made.toml:5", "jet.speed and jet.lorentz_factor", "keep one"],
        ),
        (
            "[core]\nlorentz_factor = 2\nspeed = 0.5",
            &["made.toml:5", "core.speed and core.lorentz_factor"],
        ),
        (
            "[core]\nflux_density_mjy = 5\nunbeamed_flux_density_mjy = 2",
            &["core.flux_density_mjy and core.unbeamed"],
        ),
        (
            "[jet]\nflux_density_mjy = 5\nunbeamed_flux_density_mjy = 2",
            &["jet.flux_density_mjy and jet.unbeamed"],
        ),
        ("arms.length_kpc = 5", &["made.toml:3", "arms.length_arcsec and arms.length_kpc"]),
        (
            "[jet]\nslowing_from = 0.5\nslowing_to = [0.9, 0.5]",
            &["made.toml:4", "jet.slowing_from is 0.5", "below jet.slowing_to, which is 0.5"],
        ),
        ("[jet]\nslowing_to = 0", &["made.toml:4", "below jet.slowing_to, which is 0"]),
        ("[bend]\nfrom = 0.5\nto = 0.4", &["bend.from is 0.5", "at most bend.to"]),
        (
            "[map]\nbeam_minor_arcsec = 6",
            &["made.toml:4", "at most map.beam_major_arcsec, which is 5"],
        ),
        (
            "[map]\nbeam_minor_arcsec = { uniform = [1, 4] }\nbeam_major_arcsec = { uniform = [3, 8] }",
            &["is 4", "which is 3"],
        ),
        ("[neighbours]\nflux_min_mjy = 200", &["at most neighbours.flux_max_mjy, which is 100"]),
        (
            "[map]\ncolumns = [5, 20000]\nrows = 20000",
            &["made.toml:4", "20000 columns by 20000 rows", "100000000 pixels"],
        ),
        // Populations.
        (limited, &["jet.speed is not given", "power_law", "uniform"]),
        (&limited_list, &["made.toml:6", "jet.speed is a number", "lorentz_factor = { power_law"]),
        (&limited_at_rest, &["source.viewing_angle_deg is not given", "isotropic"]),
        (&limited_wrong, &["made.toml:8", "another distribution", "isotropic = [low, high]"]),
        (
            &limited_steep,
            &["made.toml:5", "sample.counts_slope is 10", "exponent 11", "-100 to 100"],
        ),
    ];
    for (lines, words) in bad {
        let error = Scenario::parse(&text(lines), "made.toml").expect_err(lines).to_string();
        assert!(error.starts_with("made.toml"), "{error}");
        assert!(error.chars().count() < 400, "{error}");
        for word in *words {
            assert!(error.contains(word), "no {word:?} in: {error}");
        }
    }
    let whole: &[(&str, &[&str])] = &[
        ("arms.length_arcsec = 60", &["there is no name", "my-sample"]),
        ("name = 'made'", &["there is no arms.length_arcsec or arms.length_kpc", "[arms]"]),
        (
            "name = 'made'\narms.length_kpc = 60",
            &["made.toml:2", "source.redshift or source.distance_mpc"],
        ),
        (
            "name = 'a/b'\narms.length_arcsec = 60",
            &["made.toml:1", "name is 'a/b'", "letters, digits and hyphens"],
        ),
        ("name = '-a'", &["no hyphen first"]),
        ("name = 5", &["name is 5"]),
        ("", &["there is no name"]),
    ];
    for (text, words) in whole {
        let error = Scenario::parse(text, "made.toml").expect_err(text).to_string();
        for word in *words {
            assert!(error.contains(word), "no {word:?} in: {error}");
        }
    }
}

#[test]
fn no_text_brings_the_reader_down() {
    for (_, text) in BUILT_IN {
        for end in 0..text.len() {
            drop(text.get(..end).map(|part| Scenario::parse(part, "cut")));
        }
        for (i, other) in text.bytes().enumerate().step_by(3) {
            for letter in ["0", "]", "é", "\"", "\n", "-", "="] {
                let mut changed = text.to_string();
                if other.is_ascii() {
                    changed.replace_range(i..=i, letter);
                }
                if let Ok(scenario) = Scenario::parse(&changed, "changed") {
                    drop(scenario.parameters(usize::MAX));
                }
            }
        }
    }
    assert!(Scenario::parse("\u{0}", "zero").is_err());
}

#[test]
fn built_in_scenarios_are_good_and_named_after_their_text() {
    assert!(Scenario::named("no-such").is_none());
    for (name, about) in Scenario::names() {
        let scenario = Scenario::named(name).expect("known").expect("good");
        assert_eq!(scenario.name(), name);
        assert!(!about.is_empty() && about == scenario.about());
        for index in 0..200 {
            let values = scenario.values(index).expect("good");
            for (spec, value) in PARAMETERS.iter().zip(values) {
                if let (ParameterKind::Number { range, .. }, Some(number)) =
                    (spec.kind, as_number(value))
                {
                    assert!(range.contains(number), "{name} {}.{} {number}", spec.table, spec.key);
                }
            }
            at(&scenario, index);
        }
    }
}

#[test]
fn a_scenario_without_tables_gives_the_defaults() {
    let scenario = scenario("");
    let mut expected = Parameters::default();
    expected.arms.length_arcsec = Some(60.0);
    assert_eq!(at(&scenario, 0), expected);
    assert_eq!(at(&scenario, usize::MAX), expected);
    assert_eq!((scenario.count(), scenario.seed(), scenario.about()), (1, 0, ""));
    assert_eq!(scenario.epochs(), [Epoch::default()]);
}

#[test]
fn lists_run_through_all_their_combinations_the_first_fastest() {
    // In the order of the table, not of the text: source, jet, map.
    let scenario = scenario(
        "[map]\ncolumns = [100, 200]\n[jet]\nflow = ['blob', 'continuous']\n[source]\nviewing_angle_deg = [10, 20.5, 0x1e]",
    );
    let found: Vec<_> = (0..13)
        .map(|i| at(&scenario, i))
        .map(|p| (p.source.viewing_angle_deg, p.jet.flow, p.map.columns))
        .collect();
    assert_eq!(
        found[..7],
        [
            (10.0, "blob", 100),
            (20.5, "blob", 100),
            (30.0, "blob", 100),
            (10.0, "continuous", 100),
            (20.5, "continuous", 100),
            (30.0, "continuous", 100),
            (10.0, "blob", 200),
        ]
    );
    assert_eq!(found[11], (30.0, "continuous", 200));
    assert_eq!(found[12], found[0]);
}

#[test]
fn a_parameter_more_or_another_count_changes_no_draw() {
    let lines = "[source]\nposition_angle_deg = { uniform = [0, 360] }\nredshift = { log_uniform = [0.1, 2] }\n";
    let one = scenario(lines);
    let two = scenario(&format!("{lines}[halo]\nflux_density_mjy = {{ normal = [5, 1] }}\n"))
        .with(Some(7), None);
    let other_seed = scenario(lines).with(None, Some(1));
    for index in [0, 1, 99, 12_345] {
        let (a, b) = (at(&one, index), at(&two, index));
        assert_eq!(a.source, b.source);
        assert!(b.halo.flux_density_mjy > 0.0 && a.halo.flux_density_mjy == 0.0);
        assert_eq!(a, at(&one, index), "the same at any time");
        assert!(a.source.redshift != at(&other_seed, index).source.redshift);
        assert!(a.source.redshift != at(&one, index + 1).source.redshift);
    }
}

/// Mean of what `f` says of 20 000 sources, with 1/√12 of a unit as the largest scatter.
fn mean(scenario: &Scenario, f: impl Fn(&Parameters) -> f64) -> f64 {
    (0..20_000).map(|i| f(&at(scenario, i))).sum::<f64>() / 20_000.0
}

#[test]
fn draws_follow_the_cumulative_distribution_that_is_written() {
    // The cumulative distribution of what is drawn is uniform: mean ½, mean square ⅓.
    type Cumulative = (&'static str, fn(f64) -> f64);
    let cases: &[Cumulative] = &[
        ("uniform = [10, 30]", |x| (x - 10.0) / 20.0),
        ("log_uniform = [0.5, 50]", |x| (x / 0.5).ln() / 100f64.ln()),
        ("power_law = [1, 80, 2.5]", |x| (1.0 - x.powf(-1.5)) / (1.0 - 80f64.powf(-1.5))),
        ("power_law = [1, 80, -1]", |x| (x * x - 1.0) / 6399.0),
        ("isotropic = [20, 80]", |x| {
            let cosine = |angle_deg: f64| angle_deg.to_radians().cos();
            (cosine(20.0) - cosine(x)) / (cosine(20.0) - cosine(80.0))
        }),
        ("normal = [5, 10]", |x| {
            // Cut off at 0 and 90, half a sigma below the mean and 8.5 above it.
            let below = |x: f64| 0.5 * libm::erfc((5.0 - x) / 10.0 / 2f64.sqrt());
            (below(x) - below(0.0)) / (below(90.0) - below(0.0))
        }),
    ];
    for (distribution, cumulative) in cases {
        let scenario = scenario(&format!("source.viewing_angle_deg = {{ {distribution} }}"));
        let share = |p: &Parameters| cumulative(p.source.viewing_angle_deg);
        let (first, second) = (mean(&scenario, share), mean(&scenario, |p| share(p).powi(2)));
        // Scatter of the means: √(1/12/20000) = 0.0020 and √(4/45/20000) = 0.0021.
        assert!((first - 0.5).abs() < 0.008, "{distribution}: {first}");
        assert!((second - 1.0 / 3.0).abs() < 0.0085, "{distribution}: {second}");
    }
}

/// Kolmogorov and Smirnov's largest distance of a sample from a density over 0 to 1.
fn distance(mut sample: Vec<f64>, density: impl Fn(f64) -> f64) -> f64 {
    sample.sort_by(f64::total_cmp);
    let steps = 20_000;
    let mut cumulative = vec![0.0];
    for i in 0..steps {
        cumulative.push(cumulative[i] + density((i as f64 + 0.5) / steps as f64));
    }
    let count = sample.len() as f64;
    let below = |x: f64| cumulative[(x * steps as f64) as usize] / cumulative[steps];
    let off = |(i, &x): (usize, &f64)| {
        (below(x) - i as f64 / count).abs().max((below(x) - (i + 1) as f64 / count).abs())
    };
    sample.iter().enumerate().map(off).fold(0.0, f64::max)
}

#[test]
fn speeds_and_angles_drawn_one_by_one_follow_the_priors_too() {
    let angle = AnglePrior::Isotropic { low_deg: 10.0, high_deg: 90.0 };
    for (line, speed) in [
        ("speed = { uniform = [0.2, 0.95] }", SpeedPrior::Uniform { low: 0.2, high: 0.95 }),
        (
            "lorentz_factor = { power_law = [1.2, 10, 2] }",
            SpeedPrior::LorentzPowerLaw { low: 1.2, high: 10.0, slope: 2.0 },
        ),
    ] {
        let priors = Priors::new(speed, angle, Selection::All).expect("valid");
        let lines = format!("source.viewing_angle_deg = {{ isotropic = [10, 90] }}\njet.{line}");
        let scenario = scenario(&lines);
        let drawn: Vec<_> = (0..10_000).map(|i| at(&scenario, i)).collect();
        let density = |beta, cosine| priors.log_density(beta, cosine).map_or(0.0, f64::exp);
        let speeds = drawn.iter().map(|p| p.jet.speed).collect();
        let cosines = drawn.iter().map(|p| p.source.viewing_angle_deg.to_radians().cos()).collect();
        // A distance of 1.95/√N happens once in 1000.
        let off = distance(speeds, |beta| density(beta, 0.5));
        assert!(off < 0.0195 + 5e-4, "{line}: {off}");
        let off = distance(cosines, |cosine| density(0.8, cosine));
        assert!(off < 0.0195 + 5e-4, "{line}: {off}");
    }
}

#[test]
fn a_flux_limited_sample_is_drawn_from_its_joint_prior() {
    let lines = |jet: &str| {
        format!(
            "seed = 5\n[sample]\nselection = 'flux-limited'\ncounts_slope = 1.2\n[source]\nviewing_angle_deg = {{ isotropic = [0, 90] }}\n[jet]\nlorentz_factor = {{ power_law = [2, 20, 1.5] }}\n{jet}"
        )
    };
    let speed = SpeedPrior::LorentzPowerLaw { low: 2.0, high: 20.0, slope: 1.5 };
    let angle = AnglePrior::Isotropic { low_deg: 0.0, high_deg: 90.0 };
    // p = 2 + index of a continuous jet, 3 + index of blobs.
    for (jet, exponents) in [
        ("spectral_index = 0.7", [2.7, 2.7]),
        ("flow = 'blob'", [3.6, 3.6]),
        ("flow = ['blob', 'continuous']\nspectral_index = 0.5", [3.5, 2.5]),
    ] {
        let scenario = scenario(&lines(jet));
        for (index, exponent) in exponents.into_iter().enumerate() {
            let selection = Selection::FluxLimited { counts_slope: 1.2, exponent };
            let sampler = Sampler::new(Priors::new(speed, angle, selection).expect("valid"));
            let share = |name| Draws::new(stream_seed(5, index as u64, name)).uniform();
            let expected =
                sampler.sample(share("jet.lorentz_factor"), share("source.viewing_angle_deg"));
            let found = at(&scenario, index);
            assert_eq!((found.jet.speed, found.source.viewing_angle_deg), expected, "{jet}");
            assert_eq!(found.jet.lorentz_factor, lorentz_factor(expected.0));
        }
    }
    // Those that point at us are over-represented: isotropic axes have a mean of 57.3°.
    let mean_angle = mean(&scenario(&lines("")), |p| p.source.viewing_angle_deg);
    assert!(mean_angle < 15.0, "{mean_angle}");
    // A uniform speed leaves the Lorentz factor out.
    let uniform = lines("").replace(
        "lorentz_factor = { power_law = [2, 20, 1.5] }",
        "speed = { uniform = [0.5, 0.9] }",
    );
    let found = at(&scenario(&uniform), 3);
    assert!(found.jet.lorentz_factor.is_none() && (0.5..=0.9).contains(&found.jet.speed));
}

#[test]
fn a_lorentz_factor_sets_the_speed() {
    let p = at(&scenario("[jet]\nlorentz_factor = 2\n[core]\nlorentz_factor = [1, 5]"), 0);
    // β = √(1 − 1/4); Γ = 1 is at rest.
    assert!((p.jet.speed - 0.75f64.sqrt()).abs() < 1e-15, "{}", p.jet.speed);
    assert!(p.core.speed == 0.0 && p.core.lorentz_factor == Some(1.0));
}

#[test]
fn a_broken_order_of_normal_draws_is_found_with_its_source() {
    let scenario = scenario("[bend]\nfrom = { normal = [0.5, 0.2] }\nto = 0.6");
    let errors: Vec<_> = (0..100).filter_map(|i| scenario.parameters(i).err()).collect();
    // 0.6 is half a sigma above the mean: 31 % of all, a little less inside the range.
    assert!((15..45).contains(&errors.len()), "{}", errors.len());
    let message = errors[0].to_string();
    assert!(
        message.contains("made.toml:4: bend.from is") && message.contains("(source "),
        "{message}"
    );
}

#[test]
fn epochs_keep_their_order_and_may_be_half_given() {
    let scenario = scenario(
        "[[epochs]]\nyear = 2001.5\n[[epochs]]\nfrequency_ghz = 5\nyear = 2003\n[[epochs]]",
    );
    let epoch = |frequency_ghz, year| Epoch { frequency_ghz, year };
    assert_eq!(
        scenario.epochs(),
        [epoch(None, Some(2001.5)), epoch(Some(5.0), Some(2003.0)), epoch(None, None)]
    );
}

#[test]
fn the_text_written_gives_the_same_scenario() {
    for lines in [
        "# a comment\n[jet]\nspeed = { uniform = [0.1, 0.5] } # another",
        "count = 1_0 # ten\nseed = 0xff\n[jet]\nspeed = 0.25",
        "seed = 3\n[map]\nrows = [10, 20]",
    ] {
        let given = scenario(lines);
        for used in [given.clone(), given.with(Some(123), Some(u64::MAX))] {
            let written = used.to_toml();
            let read = Scenario::parse(&written, "made.toml").expect("good");
            assert_eq!((read.count(), read.seed()), (used.count(), used.seed()), "{written}");
            assert_eq!(at(&read, 5), at(&used, 5));
            assert_eq!(read.to_toml(), written);
        }
    }
    let written = scenario("count = 1_0 # ten\nseed = 0xff").with(Some(7), None).to_toml();
    assert_eq!(written, text("count = 7 # ten\nseed = 255"));
    // What is not given comes to the top, the rest stays as it is.
    let written = scenario("# mine\n").to_toml();
    assert_eq!(written, format!("count = 1\nseed = 0\n{}", text("# mine\n")));
    // A mark of byte order is no part of the text.
    let marked = format!("\u{feff}{}", text("seed = 4"));
    assert_eq!(
        Scenario::parse(&marked, "m").expect("good").to_toml(),
        format!("count = 1\n{}", text("seed = 4"))
    );
    // Counts stay where a scenario may have them.
    assert_eq!(scenario("").with(Some(0), None).count(), 1);
    assert_eq!(scenario("").with(Some(usize::MAX), None).count(), MAX_COUNT);
}

#[test]
fn the_page_names_every_key_within_its_columns() {
    let page = parameter_page();
    for line in page.lines() {
        assert!(line.chars().count() <= PAGE_COLUMNS && line == line.trim_end(), "{line}");
    }
    for spec in PARAMETERS {
        assert!(page.contains(&format!("\n  {} ", spec.key)), "{}", spec.key);
    }
    for (table, about) in PARAMETER_TABLES {
        assert!(page.contains(&format!("\n[{table}]  {about}\n")), "{table}");
    }
    let flowed = page.split_whitespace().collect::<Vec<_>>().join(" ");
    for words in [
        "viewing_angle_deg angle between the approaching jet and the line of sight; a number from 0 to 90; 60 if not given",
        "shape symmetry of the two bends about the core; one of none, inversion, mirror; none if not given",
        "{ power_law = [low, high, slope] } dN/dx falls as x^-slope",
    ] {
        assert!(flowed.contains(words), "{words}");
    }
}

#[test]
fn ranges_read_as_words() {
    let range = |low, high, with_low, with_high| Range { low, high, with_low, with_high };
    for (range, words) in [
        (range(0.0, 90.0, true, true), "from 0 to 90"),
        (range(0.0, 1.0, true, false), "at least 0 and below 1"),
        (range(0.0, 20.0, false, true), "above 0 and at most 20"),
        (range(0.0, f64::INFINITY, false, false), "above 0"),
        (range(f64::NEG_INFINITY, 3.0, false, false), "below 3"),
        (range(f64::NEG_INFINITY, f64::INFINITY, false, false), "of any size"),
    ] {
        assert_eq!(range.to_string(), words);
    }
}
