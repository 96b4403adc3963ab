//! Noise with known truth: even, graded, striped, cut off, rounded, crowded.

use ndarray::Array2;

use super::*;
use crate::grid::orientation::Orientation;
use crate::regions::{RegionSettings, find_regions};
use crate::simulate::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, unit_noise};

const BEAM: f64 = 5.0;

fn smooth() -> NoiseKind {
    NoiseKind::Smoothed(GaussianShape::circular(BEAM))
}

fn beam_hints() -> NoiseHints {
    NoiseHints { beam_px: Some((BEAM, BEAM)), ..NoiseHints::default() }
}

fn estimate(map: &Array2<f64>, hints: &NoiseHints) -> Noise {
    estimate_noise(map, &NoiseSettings::default(), hints).expect("the map shows its noise")
}

fn source(x: f64, y: f64, peak: f64, fwhm: f64) -> GaussianComponent {
    let shape = GaussianShape::circular(fwhm);
    GaussianComponent { x_px: x, y_px: y, amount: Amount::Peak(peak), shape }
}

fn scene(size: usize, components: Vec<GaussianComponent>, seed: u64) -> Array2<f64> {
    let beam = GaussianShape::circular(BEAM);
    Scene { components, noise: Some((smooth(), 1.0, seed)), ..Scene::empty(size, size, beam) }
        .render()
}

/// Mean over the map of estimate/truth of the rms, and the rms of background − truth.
fn compare(
    noise: &Noise,
    truth_rms: impl Fn(f64, f64) -> f64,
    truth_level: impl Fn(f64, f64) -> f64,
) -> (f64, f64, f64) {
    let (mut ratio, mut worst, mut offset, mut n) = (0.0, 1.0f64, 0.0, 0.0);
    for y in (0..noise.rows).step_by(3) {
        for x in (0..noise.columns).step_by(3) {
            let (x, y) = (x as f64, y as f64);
            let r = noise.rms(x, y) / truth_rms(x, y);
            ratio += r;
            worst = if (r.ln()).abs() > worst.ln().abs() { r } else { worst };
            offset += ((noise.background(x, y) - truth_level(x, y)) / truth_rms(x, y)).powi(2);
            n += 1.0;
        }
    }
    (ratio / n, worst, (offset / n).sqrt())
}

#[test]
fn even_noise_is_recovered_without_bias() {
    for (kind, hints, name) in [
        (NoiseKind::White, NoiseHints::default(), "white"),
        (smooth(), beam_hints(), "smoothed, beam known"),
        (smooth(), NoiseHints::default(), "smoothed, beam unknown"),
    ] {
        let maps = 40;
        let (mut ratio, mut worst, mut global) = (0.0, 1.0f64, 0.0);
        for seed in 0..maps {
            let map = unit_noise(300, 300, kind, seed) * 2.5 + 10.0;
            let noise = estimate(&map, &hints);
            let (mean, far, _) = compare(&noise, |_, _| 2.5, |_, _| 10.0);
            ratio += mean / maps as f64;
            global += noise.global_rms / 2.5 / maps as f64;
            worst = if far.ln().abs() > worst.ln().abs() { far } else { worst };
        }
        eprintln!("{name}: rms ratio {ratio:.4}, global {global:.4}, worst place {worst:.3}");
        // 40 maps of 3200 independent samples know the rms to 0.2 %.
        assert!((ratio - 1.0).abs() < 0.01, "{name}: {ratio}");
        assert!((global - 1.0).abs() < 0.01, "{name}: {global}");
        // One tile's rms is known to 7 %: an even map must not show more than two of these.
        assert!(worst.ln().abs() < 0.15, "{name}: {worst}");
    }
}

#[test]
fn empty_maps_rarely_show_a_source() {
    let mut found = 0;
    for seed in 100..200 {
        let map = unit_noise(300, 300, smooth(), seed);
        let noise = estimate(&map, &beam_hints());
        found += find_regions(&map, &noise, &RegionSettings::default()).len();
    }
    eprintln!("5 sigma regions on 100 empty maps: {found}");
    // Expected from the density of maxima of a Gaussian field above 5 rms (Bond &
    // Efstathiou 1987): about 0.02 per map, 2 in all; 8 would be a chance of 1e-3.
    assert!(found < 8, "{found}");
}

#[test]
fn gradients_of_rms_and_background_are_followed() {
    let (mut mean, mut offset) = (0.0, 0.0);
    let mut worst = 1.0f64;
    let (rms, level) = (|x: f64, _y: f64| 1.0 + 3.0 * x / 299.0, |_x: f64, y: f64| 8.0 * y / 299.0);
    let maps = 8;
    for seed in 0..maps {
        let mut map = unit_noise(300, 300, smooth(), seed);
        for ((y, x), v) in map.indexed_iter_mut() {
            *v = *v * rms(x as f64, y as f64) + level(x as f64, y as f64);
        }
        let noise = estimate(&map, &beam_hints());
        let (m, w, o) = compare(&noise, rms, level);
        mean += m / maps as f64;
        offset += o / maps as f64;
        worst = if w.ln().abs() > worst.ln().abs() { w } else { worst };
    }
    eprintln!(
        "gradient 1 to 4: mean ratio {mean:.3}, worst {worst:.3}, background {offset:.3} rms"
    );
    assert!((mean - 1.0).abs() < 0.03, "{mean}");
    assert!(worst.ln().abs() < 0.3, "{worst}");
    // A tile's mean is known to 0.15 rms.
    assert!(offset < 0.2, "{offset}");
}

#[test]
fn sources_do_not_raise_background_or_rms() {
    let mut crowd = Vec::new();
    for i in 0..60u32 {
        let t = f64::from(i);
        crowd.push(source((37.0 * t) % 300.0, (101.0 * t) % 293.0, 6.0 + 3.0 * t, 0.0));
    }
    let cases = [
        ("bright point", vec![source(150.0, 150.0, 1e5, 0.0)]),
        ("extended", vec![source(150.0, 150.0, 100.0, 40.0), source(90.0, 150.0, 300.0, 8.0)]),
        ("half the map", vec![source(150.0, 150.0, 500.0, 85.0)]),
        ("crowded field", crowd),
    ];
    for (name, components) in cases {
        let mut mean = (0.0, 0.0, 0.0);
        for seed in 0..5 {
            let noise = estimate(&scene(300, components.clone(), seed), &beam_hints());
            let got = compare(&noise, |_, _| 1.0, |_, _| 0.0);
            mean = (mean.0 + got.0 / 5.0, mean.1 + got.1 / 5.0, mean.2 + got.2 / 5.0);
        }
        eprintln!("{name}: ratio {:.3}, worst {:.3}, background {:.3} rms", mean.0, mean.1, mean.2);
        assert!((mean.0 - 1.0).abs() < 0.05, "{name}: {mean:?}");
        assert!(mean.2 < 0.25, "{name}: {mean:?}");
    }
}

#[test]
fn emission_that_leaves_only_the_corners_is_still_told_from_the_sky() {
    // 3 rms at 149 px from the middle: four fifths of the map are emission.
    let map = scene(300, vec![source(150.0, 150.0, 500.0, 110.0)], 1);
    let noise = estimate(&map, &beam_hints());
    let (mean, worst, offset) = compare(&noise, |_, _| 1.0, |_, _| 0.0);
    eprintln!("corners only: ratio {mean:.3}, worst {worst:.3}, background {offset:.3} rms");
    // The corners hold wings of up to 3 rms that nothing tells from background.
    assert!(mean > 0.8 && mean < 1.3, "{mean}");
    assert!(offset < 1.2, "{offset}");
}

#[test]
fn sidelobes_around_a_very_bright_source_raise_the_local_rms_only() {
    let mut map = scene(300, vec![source(150.0, 150.0, 1e5, 0.0)], 3);
    for ((y, x), v) in map.indexed_iter_mut() {
        let r = (x as f64 - 150.0).hypot(y as f64 - 150.0);
        // Rings of 20 rms at 12 px, falling as r^-2.
        if r > 8.0 {
            *v += 2e3 * (r / 12.0).powi(-2) * (0.8 * r).sin() * 0.01;
        }
    }
    let noise = estimate(&map, &beam_hints());
    let far = noise.rms(20.0, 20.0);
    let near = rms_at_distance(&map, &noise, &PixelMask::new(300, 300), (150.0, 150.0), 12.0, 24.0)
        .expect("the ring is full");
    eprintln!(
        "sidelobes: far {far:.3}, model near {:.3}, ring {:.3}",
        noise.rms(150.0, 170.0),
        near.rms
    );
    assert!((far - 1.0).abs() < 0.15, "{far}");
    // Rings of 20 (12 px) to 5 (24 px) rms over √2 of amplitude.
    assert!(near.rms > 5.0 && near.rms < 14.0, "{}", near.rms);
}

#[test]
fn bowls_pull_the_background_down_only_where_they_are() {
    let mut map = scene(300, vec![source(150.0, 150.0, 2000.0, 10.0)], 4);
    for ((y, x), v) in map.indexed_iter_mut() {
        let r2 = (x as f64 - 150.0).powi(2) + (y as f64 - 150.0).powi(2);
        *v -= 6.0 * (-r2 / (2.0 * 35.0f64.powi(2))).exp();
    }
    let noise = estimate(&map, &beam_hints());
    let (far, beside) = (noise.background(20.0, 20.0), noise.background(150.0, 195.0));
    eprintln!("bowl: far {far:.2}, beside {beside:.2} (truth -2.6), rms {:.3}", noise.global_rms);
    assert!(far.abs() < 0.5, "{far}");
    assert!(beside < -1.0, "{beside}");
    assert!((noise.rms(20.0, 20.0) - 1.0).abs() < 0.2);
}

#[test]
fn stripes_count_as_noise() {
    let mut map = scene(300, vec![], 5);
    for ((y, _), v) in map.indexed_iter_mut() {
        *v += 1.0 * (y as f64 * 0.35).sin();
    }
    let noise = estimate(&map, &beam_hints());
    // 1² + 1²/2.
    assert!((noise.global_rms - 1.5f64.sqrt()).abs() < 0.06, "{}", noise.global_rms);
}

#[test]
fn low_values_replaced_by_zero_in_coarse_steps_do_not_hide_the_noise() {
    // Steps of one rms, all below −1.5 rms set to 0: two levels of a half Gaussian, whose own
    // rms is 0.83. The rms rises from 1 to 2.5 along x, as tiles have to show.
    for seed in 0..4 {
        let smooth = scene(300, Vec::new(), seed);
        let stored = |rms: &dyn Fn(usize) -> f64| {
            Array2::from_shape_fn((300, 300), |(y, x)| {
                let level = (rms(x) * smooth[[y, x]]).round();
                if level < -1.0 { 0.0 } else { level }
            })
        };
        let hints = NoiseHints { quantisation_step: 1.0, ..beam_hints() };
        let even = estimate(&stored(&|_| 1.0), &hints);
        assert_eq!(even.method, "censored");
        assert!((even.rms(150.0, 150.0) - 1.0).abs() < 0.06, "{}", even.rms(150.0, 150.0));
        let rising = |x: usize| 1.0 + 1.5 * x as f64 / 299.0;
        let noise = estimate(&stored(&rising), &hints);
        // A tile's own share of high values tells its rms to about 10 %; the first third and
        // the last of the map differ by 1.9.
        let ratio = noise.rms(270.0, 150.0) / noise.rms(30.0, 150.0);
        assert!((1.4..2.5).contains(&ratio), "{ratio}");
        // Without the replacement the same steps are ordinary noise.
        assert_eq!(estimate(&smooth.mapv(|v| v.round()), &hints).method, "local");
    }
}

#[test]
fn maps_cut_off_at_a_floor_are_read_from_what_is_left() {
    for (floor, level) in [(0.0, 0.0), (0.0, 0.5), (0.0, -0.4), (-1.0, 0.0)] {
        let (mut rms, mut background) = (0.0, 0.0);
        for seed in 0..6 {
            let map = scene(300, vec![source(150.0, 150.0, 200.0, 30.0)], seed)
                .mapv(|v| (v + level).max(floor));
            let noise = estimate(&map, &beam_hints());
            assert_eq!(noise.method, "censored");
            rms += noise.global_rms / 6.0;
            background += noise.global_background / 6.0;
        }
        eprintln!("floor {floor}, level {level}: rms {rms:.3}, background {background:.3}");
        assert!((rms - 1.0).abs() < 0.04, "{rms}");
        assert!((background - level).abs() < 0.06, "{background}");
    }
}

#[test]
fn maps_without_visible_noise_are_errors_that_say_what_to_give() {
    let map = scene(200, vec![source(100.0, 100.0, 200.0, 30.0)], 1);
    let settings = NoiseSettings::default();
    for replacement in [f64::NAN, 0.0] {
        let cut = map.mapv(|v| if v > 3.0 { v } else { replacement });
        let error = estimate_noise(&cut, &settings, &beam_hints()).expect_err("no noise left");
        let text = error.to_string();
        assert!(matches!(error, NoiseError::NotVisible { .. }), "{text}");
        assert!(text.contains("`rms`") && text.contains("`contour_floor`"), "{text}");
        let hints = NoiseHints { given_rms: Some(1.0), ..beam_hints() };
        let noise = estimate(&cut, &hints);
        assert_eq!(noise.method, "given");
        assert!((noise.rms(7.0, 9.0) - 1.0).abs() < 1e-12);
        assert!(noise.source_mask.get(100, 100) && !noise.source_mask.get(3, 3));
    }
    let blank = Array2::from_elem((9, 9), f64::NAN);
    let error = estimate_noise(&blank, &settings, &NoiseHints::default()).expect_err("blank");
    assert_eq!(error, NoiseError::AllBlank { pixels: 81 });
    let flat = Array2::from_elem((9, 9), 3.0);
    let error = estimate_noise(&flat, &settings, &NoiseHints::default()).expect_err("flat");
    assert_eq!(error, NoiseError::AllEqual { pixels: 81, value: 3.0 });
    let tiny = unit_noise(7, 7, NoiseKind::White, 1);
    let error = estimate_noise(&tiny, &settings, &NoiseHints::default()).expect_err("tiny");
    assert_eq!(error, NoiseError::TooFewPixels { found: 49, needed: 50 });
    let empty = Array2::<f64>::zeros((0, 5));
    assert!(estimate_noise(&empty, &settings, &NoiseHints::default()).is_err());
    let bad = NoiseHints { given_rms: Some(-1.0), ..NoiseHints::default() };
    assert!(estimate_noise(&map, &settings, &bad).is_err());
}

#[test]
fn blank_corners_and_holes_do_not_matter() {
    let mut map = scene(300, vec![source(120.0, 180.0, 300.0, 12.0)], 6);
    for ((y, x), v) in map.indexed_iter_mut() {
        let r = (x as f64 - 149.5).hypot(y as f64 - 149.5);
        let hole = (x as f64 - 200.0).hypot(y as f64 - 100.0) < 25.0;
        if r > 150.0 || hole {
            *v = f64::NAN;
        }
    }
    let noise = estimate(&map, &beam_hints());
    let (mean, worst, offset) = compare(&noise, |_, _| 1.0, |_, _| 0.0);
    assert!((mean - 1.0).abs() < 0.05 && worst.ln().abs() < 0.2, "{mean} {worst}");
    assert!(offset < 0.2, "{offset}");
}

#[test]
fn rounded_maps_never_fall_below_the_step() {
    let base = scene(300, vec![source(150.0, 150.0, 300.0, 30.0)], 7);
    for (step, offset) in [(0.5, 0.2), (1.0, 0.3), (2.5, 0.0), (2.5, 0.9), (8.0, 0.0)] {
        let map = base.mapv(|v| ((v + offset) / step).round() * step);
        let hints = NoiseHints { quantisation_step: step, ..beam_hints() };
        let noise = estimate(&map, &hints);
        let floor = step / 12f64.sqrt();
        let truth = (1.0 + floor * floor).sqrt();
        eprintln!("step {step}: rms {:.3}, truth {truth:.3}, floor {floor:.3}", noise.global_rms);
        assert!((noise.quantisation_floor - floor).abs() < 1e-12);
        assert!(noise.rms(10.0, 10.0) >= floor - 1e-12);
        // Rounding error adds step²/12 while the rms is not far below the step.
        if step <= 1.0 {
            assert!((noise.global_rms / truth - 1.0).abs() < 0.05, "{}", noise.global_rms);
        } else {
            assert!(noise.global_rms < 1.6 * truth, "{}", noise.global_rms);
        }
        // Cut off at 0 as an 8-bit image is.
        let cut = map.mapv(|v| v.max(0.0));
        let noise = estimate(&cut, &hints);
        eprintln!(
            "   cut at 0: {} {:.3} {:.3}",
            noise.method, noise.global_rms, noise.global_background
        );
        assert!(noise.global_rms >= floor - 1e-12 && noise.global_rms < 1.6 * truth);
    }
}

#[test]
fn small_maps_use_one_tile() {
    let mut sum = 0.0;
    for seed in 0..60 {
        let map = unit_noise(30, 26, NoiseKind::White, seed);
        let noise = estimate(&map, &NoiseHints::default());
        assert_eq!(noise.method, "global");
        sum += noise.global_rms / 60.0;
    }
    // 60 × 780 samples: 0.4 %.
    assert!((sum - 1.0).abs() < 0.02, "{sum}");
}

#[test]
fn turned_and_mirrored_maps_give_turned_and_mirrored_noise() {
    let mut map = Array2::zeros((141, 200));
    let field = scene(200, vec![source(60.0, 70.0, 150.0, 15.0), source(130.0, 40.0, 1e3, 0.0)], 8);
    for ((y, x), v) in map.indexed_iter_mut() {
        *v = field[(y, x)] * (1.0 + x as f64 / 150.0) + 0.01 * y as f64;
    }
    map[(100, 150)] = f64::NAN;
    let noise = estimate(&map, &beam_hints());
    assert_eq!(noise.method, "local");
    for turn in Orientation::all() {
        let turned = turn.apply(&map);
        let other = estimate(&turned, &beam_hints());
        for y in (0..141usize).step_by(7) {
            for x in (0..200usize).step_by(7) {
                let (fx, fy) = (x as f64, y as f64);
                let (tx, ty) = turn.position(fx, fy, turned.ncols(), turned.nrows());
                let (a, b) = (noise.rms(fx, fy), other.rms(tx, ty));
                assert!((a / b - 1.0).abs() < 1e-9, "{turn:?} ({x}, {y}): {a} {b}");
                let (a, b) = (noise.background(fx, fy), other.background(tx, ty));
                assert!((a - b).abs() < 1e-9, "{turn:?} ({x}, {y}): {a} {b}");
                let mask = other.source_mask.get(tx as usize, ty as usize);
                assert_eq!(noise.source_mask.get(x, y), mask);
            }
        }
        assert!((noise.global_rms / other.global_rms - 1.0).abs() < 1e-9);
    }
    // The unit of the map must not matter.
    let scaled = estimate(&map.mapv(|v| v * 1e-7), &beam_hints());
    assert!((scaled.rms(50.0, 50.0) / noise.rms(50.0, 50.0) * 1e7 - 1.0).abs() < 1e-9);
}

#[test]
fn odd_shapes_and_odd_values_give_numbers_or_errors_never_a_panic() {
    let shapes = [(0, 0), (0, 7), (1, 1), (1, 400), (400, 1), (2, 200), (3, 3), (64, 64)];
    for (rows, columns) in shapes {
        let white = unit_noise(columns, rows, NoiseKind::White, 1);
        let spotted = Array2::from_shape_fn((rows, columns), |(y, x)| {
            if (x + y) % 3 == 0 { f64::NAN } else { white[(y, x)] }
        });
        let extremes = white.mapv(|v| if v > 0.0 { 1e300 } else { -1e300 });
        let tiny = white.mapv(|v| v * 1e-310);
        let blank = white.mapv(|_| f64::INFINITY);
        for map in [white, spotted, extremes, tiny, blank] {
            for beam in [None, Some((5.0, 3.0)), Some((f64::NAN, -1.0)), Some((1e9, 1e9))] {
                for given_rms in [None, Some(0.5)] {
                    let hints = NoiseHints { beam_px: beam, given_rms, ..NoiseHints::default() };
                    let Ok(noise) = estimate_noise(&map, &NoiseSettings::default(), &hints) else {
                        continue;
                    };
                    let (mut level, mut rms) = (Vec::new(), Vec::new());
                    for y in 0..rows {
                        noise.row_into(y, &mut level, &mut rms);
                        assert!(level.len() == columns && rms.len() == columns);
                        assert!(level.iter().all(|v| v.is_finite()));
                        assert!(rms.iter().all(|v| v.is_finite() && *v > 0.0));
                    }
                    let correlation = measure_correlation(
                        &map,
                        &noise,
                        &noise.source_mask,
                        beam.map(|b| b.0),
                        &CorrelationSettings::default(),
                    );
                    assert!(correlation.sum().is_finite());
                    assert!(correlation.correlation_fwhm_px().is_finite());
                    let regions = find_regions(&map, &noise, &RegionSettings::default());
                    for peak in crate::regions::local_maxima(&map, &noise, &regions, 3.0, 5.0) {
                        assert!(peak.value.is_finite() && peak.snr.is_finite());
                    }
                    let lines = crate::contour::contour_lines(&map, 0.5, None);
                    let points = lines.iter().flat_map(|l| &l.points);
                    assert!(points.clone().all(|p| p.x.is_finite() && p.y.is_finite()));
                }
            }
        }
    }
}
