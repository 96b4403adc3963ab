//! Noise and artefacts against closed forms: moments, autocorrelations, sums, quantiles.

use super::*;

const fn shape(major_px: f64, minor_px: f64, angle_deg: f64) -> GaussianShape {
    GaussianShape { major_px, minor_px, angle_deg }
}

/// exp(−4 ln 2 q/2), q the square of the lag in FWHM of the kernel.
fn expected_correlation(shape: GaussianShape, lag: (isize, isize)) -> f64 {
    let (cos, sin) = direction(shape.angle_deg);
    let (dx, dy) = (lag.0 as f64, lag.1 as f64);
    let (along, across) = (dx * cos + dy * sin, dy * cos - dx * sin);
    let q = (along / shape.major_px).powi(2) + (across / shape.minor_px).powi(2);
    (-0.5 * FOUR_LN2 * q).exp()
}

/// Σ a(x, y) a(x + lag) and the number of products.
fn lagged_sum(map: &Array2<f64>, (dx, dy): (isize, isize)) -> (f64, f64) {
    let (rows, columns) = map.dim();
    let (nx, ny) = (columns - dx.unsigned_abs(), rows - dy.unsigned_abs());
    let from = |d: isize| (-d).max(0) as usize;
    let (x, y) = (from(dx), from(dy));
    let (to_x, to_y) = ((x as isize + dx) as usize, (y as isize + dy) as usize);
    let part = |x: usize, y: usize| {
        let range = |start: usize, size: usize| Slice::from(start..start + size);
        map.slice_each_axis(|axis| if axis.axis == Axis(0) { range(y, ny) } else { range(x, nx) })
    };
    let (a, b) = (part(x, y), part(to_x, to_y));
    ((&a * &b).sum(), (nx * ny) as f64)
}

/// The whole two-dimensional kernel: what it makes of a single bright pixel.
fn kernel_image(shape: GaussianShape) -> Array2<f64> {
    let lines = lines_of_kernel(shape.moments());
    let reach = |step: fn(&Line) -> isize| -> usize {
        lines.iter().map(|line| line.reach() * step(line).unsigned_abs()).sum()
    };
    let (rx, ry) = (reach(|line| line.step.0), reach(|line| line.step.1));
    let mut point = Array2::zeros((4 * ry + 1, 4 * rx + 1));
    point[(2 * ry, 2 * rx)] = 1.0;
    lines.iter().fold(point, |map, line| line.smooth(&map))
}

#[test]
fn kernels_of_lines_have_unit_squares_and_the_gaussians_moments_and_correlation() {
    for (major, minor) in [(3.0, 3.0), (3.2, 3.0), (5.0, 5.0), (6.0, 4.5), (12.0, 3.0), (24.0, 3.0)]
    {
        for angle in [0.0, 7.0, 22.5, 30.0, 45.0, 63.4, 90.0, 119.0, 171.0] {
            let shape = shape(major, minor, angle);
            let kernel = kernel_image(shape);
            // The closed form for three lines against the sum over the kernel's own pixels.
            let squares = kernel.mapv(|w| w * w).sum();
            assert!((squares - 1.0).abs() < 1e-12, "{shape:?}: {squares}");
            let (rows, columns) = kernel.dim();
            let (cx, cy) = ((columns / 2) as f64, (rows / 2) as f64);
            let mut moments = [0.0; 3];
            for ((y, x), w) in kernel.indexed_iter() {
                let (dx, dy) = (x as f64 - cx, y as f64 - cy);
                for (sum, product) in moments.iter_mut().zip([dx * dx, dx * dy, dy * dy]) {
                    *sum += w * product * FWHM_PER_SIGMA * FWHM_PER_SIGMA;
                }
            }
            // Cut off at 4.7 σ a Gaussian loses 7e-5 of its variance.
            let total = kernel.sum();
            for (sum, expected) in moments.iter().zip(shape.moments()) {
                assert!((sum / total - expected).abs() < 3e-4 * major * major, "{shape:?}");
            }
            // Narrow lines are not quite Gaussian: 0.006 at worst, for 3.2 × 3 px.
            let limit = if minor > 4.0 { 2e-3 } else { 0.008 };
            for lag_y in -9isize..=9 {
                for lag_x in -9isize..=9 {
                    let lag = (lag_x, lag_y);
                    if lag_x.unsigned_abs() >= columns || lag_y.unsigned_abs() >= rows {
                        continue;
                    }
                    let correlation = lagged_sum(&kernel, lag).0;
                    let expected = expected_correlation(shape, lag);
                    let off = (correlation - expected).abs();
                    assert!(off < limit, "{shape:?} {lag:?}: {correlation} for {expected}");
                }
            }
        }
    }
}

#[test]
fn lines_sum_to_the_form_they_came_from() {
    // Σ λ v vᵀ = D, with weights not below zero: Selling's formula. λ from the line's weights:
    // its variance, which is exact only to the cut at 4.7 σ.
    for (major, minor, angle) in [(5.0, 5.0, 10.0), (9.0, 3.0, 33.0), (512.0, 3.0, 12.3)] {
        let moments = shape(major, minor, angle).moments();
        let lines = lines_of_kernel(moments);
        assert!(!lines.is_empty() && lines.len() <= 3);
        let mut sums = [0.0; 3];
        for line in &lines {
            let offset = |i: usize| i as f64 - line.reach() as f64;
            let second: f64 =
                line.weights.iter().enumerate().map(|(i, w)| w * offset(i).powi(2)).sum();
            let variance = second / line.weights.iter().sum::<f64>();
            let (vx, vy) = (line.step.0 as f64, line.step.1 as f64);
            for (sum, product) in sums.iter_mut().zip([vx * vx, vx * vy, vy * vy]) {
                *sum += variance * FWHM_PER_SIGMA * FWHM_PER_SIGMA * product;
            }
        }
        for (sum, moment) in sums.iter().zip(moments) {
            assert!((sum - moment).abs() < 3e-4 * major * major, "{sums:?} for {moments:?}");
        }
    }
}

/// Mean square, mean and correlations over draws of unit noise.
fn statistics(
    kind: NoiseKind,
    size: usize,
    draws: u64,
    lags: &[(isize, isize)],
) -> (f64, f64, Vec<f64>) {
    let (mut square, mut mean) = (0.0, 0.0);
    let mut sums = vec![0.0; lags.len()];
    for draw in 0..draws {
        let map = unit_noise(size, size, kind, stream_seed(1, draw, "noise"));
        square += lagged_sum(&map, (0, 0)).0 / (size * size) as f64 / draws as f64;
        mean += map.sum() / (size * size) as f64 / draws as f64;
        for (sum, lag) in sums.iter_mut().zip(lags) {
            let (products, number) = lagged_sum(&map, *lag);
            *sum += products / number / draws as f64;
        }
    }
    (square.sqrt(), mean, sums.iter().map(|sum| sum / square).collect())
}

const KERNELS: [GaussianShape; 9] = [
    shape(5.0, 5.0, 0.0),
    shape(6.0, 4.0, 90.0),
    shape(6.0, 4.0, 35.0),
    shape(5.5, 5.0, 150.0),
    shape(24.0, 3.0, 0.0),
    shape(24.0, 3.0, 63.0),
    // Made on finer pixels.
    shape(1.5, 1.0, 20.0),
    shape(16.0, 2.0, 110.0),
    // Made on coarser pixels.
    shape(24.0, 20.0, 70.0),
];

/// Holds unit noise to rms 1, mean 0 and the Gaussian's autocorrelation at lags out to three
/// beams in eight directions; `rms` and `correlation` are the allowed differences. `draws` is
/// for a kernel of 5 × 5 px: a wider one gets as many independent samples.
fn check_noise(size: usize, draws: u64, rms: f64, correlation: f64) {
    for kernel in KERNELS {
        let spread = (kernel.major_px * kernel.minor_px / 25.0).max(1.0).ceil();
        let lags: Vec<(isize, isize)> = (0..8)
            .flat_map(|i| {
                let (cos, sin) = direction(22.5 * f64::from(i) + kernel.angle_deg);
                let fwhm = 1.0 / (cos / kernel.major_px).hypot(sin / kernel.minor_px);
                [0.3, 0.7, 1.0, 1.5, 2.0, 3.0].map(|beams| {
                    let (dx, dy) = direction(22.5 * f64::from(i));
                    ((beams * fwhm * dx).round() as isize, (beams * fwhm * dy).round() as isize)
                })
            })
            .collect();
        let (found, mean, correlations) =
            statistics(NoiseKind::Smoothed(kernel), size, draws * spread as u64, &lags);
        assert!((found - 1.0).abs() < rms, "{kernel:?}: rms {found}");
        // The mean varies twice as much as the rms: √(Σ R) against √(Σ R²/2).
        assert!(mean.abs() < 3.0 * rms, "{kernel:?}: mean {mean}");
        for (lag, found) in lags.iter().zip(correlations) {
            let expected = expected_correlation(kernel, *lag);
            let off = (found - expected).abs();
            assert!(off < correlation, "{kernel:?} {lag:?}: {found} for {expected}");
        }
    }
    let lags = [(1, 0), (0, 1), (1, 1), (-1, 1), (2, 0), (7, 3), (0, 15)];
    for kind in [NoiseKind::White, NoiseKind::Smoothed(GaussianShape::POINT)] {
        let (found, mean, correlations) = statistics(kind, size, draws, &lags);
        // 28 times as many independent samples as through a beam of 5 px.
        assert!((found - 1.0).abs() < 0.5 * rms && mean.abs() < 0.5 * rms, "{found} {mean}");
        assert!(correlations.iter().all(|c| c.abs() < 0.5 * correlation), "{correlations:?}");
    }
}

#[test]
fn noise_has_unit_rms_and_the_kernels_correlation() {
    // 3 × 256² px over 28 px per independent sample: rms known to 0.8 %.
    check_noise(256, 3, 0.02, 0.05);
}

#[test]
#[ignore = "long: run with --ignored"]
fn forty_large_draws_have_unit_rms_and_the_kernels_correlation() {
    // 40 × 1024² px over 28 px per independent sample: rms known to 0.06 %.
    check_noise(1024, 40, 0.002, 0.01);
}

#[test]
fn edges_have_the_rms_of_the_middle() {
    // 600 draws of the corner, an edge and the middle: each mean square known to 6 %. Padding
    // that is left out would make it a quarter in the corner.
    for kernel in [shape(6.0, 4.0, 35.0), shape(2.0, 1.5, 10.0), shape(28.0, 23.0, 70.0)] {
        let mut squares = [0.0; 4];
        for seed in 0..600 {
            let map = unit_noise(31, 25, NoiseKind::Smoothed(kernel), seed);
            let places = [(0, 0), (24, 30), (0, 15), (12, 15)];
            for (sum, place) in squares.iter_mut().zip(places) {
                *sum += map[place].powi(2) / 600.0;
            }
        }
        assert!(squares.iter().all(|square| (square - 1.0).abs() < 0.25), "{kernel:?} {squares:?}");
    }
}

#[test]
fn noise_is_the_same_everywhere() {
    // The bytes this code wrote on x86_64: another platform or order must write the same.
    let bits = |kind| unit_noise(2, 1, kind, 7).mapv(f64::to_bits).into_raw_vec_and_offset().0;
    assert_eq!(bits(NoiseKind::White), [13829221845539370684, 4593786821480656663]);
    let smooth = |major, minor, angle| bits(NoiseKind::Smoothed(shape(major, minor, angle)));
    assert_eq!(smooth(5.0, 5.0, 0.0), [4607071204110267038, 4607323346429423226]);
    assert_eq!(smooth(6.0, 4.0, 35.0), [4584684375645268741, 4596938007697222427]);
    assert_eq!(smooth(2.0, 2.0, 0.0), [4603952739689296450, 4605870244438343852]);
    assert_eq!(smooth(30.0, 20.0, 35.0), [13835250620752929163, 13835129138413987968]);
    let map = unit_noise(4, 2, NoiseKind::White, 7);
    assert_ne!(map, unit_noise(4, 2, NoiseKind::White, 8));
    // A point is white noise, the same noise.
    assert_eq!(map, unit_noise(4, 2, NoiseKind::Smoothed(GaussianShape::POINT), 7));
}

#[test]
fn no_kernel_is_too_odd() {
    let odd = [f64::NAN, f64::INFINITY, -5.0, 0.0, 1e-300, 1e300, 700.0, 3.0];
    for major in odd {
        for minor in odd {
            for angle in [0.0, 12.3, f64::NAN] {
                let kind = NoiseKind::Smoothed(shape(major, minor, angle));
                let map = unit_noise(5, 3, kind, 1);
                assert_eq!(map.dim(), (3, 5));
                assert!(map.iter().all(|v| v.abs() < 6.0), "{kind:?}: {map}");
                assert_eq!(unit_noise(0, 3, kind, 1).dim(), (3, 0));
            }
        }
    }
}

#[test]
#[ignore = "timing: run with --ignored --nocapture"]
fn time_of_a_map_of_300_px() {
    for kernel in [
        GaussianShape::POINT,
        shape(5.0, 5.0, 0.0),
        shape(5.0, 4.0, 35.0),
        shape(5.0, 5.0, 35.0),
        shape(24.0, 3.0, 63.0),
        shape(2.0, 1.5, 20.0),
        shape(60.0, 50.0, 35.0),
    ] {
        let times: Vec<f64> = (0..41)
            .map(|seed| {
                let start = std::time::Instant::now();
                let map = unit_noise(300, 300, NoiseKind::Smoothed(kernel), seed);
                let time = start.elapsed().as_secs_f64() * 1e3;
                assert!(map[(0, 0)].is_finite());
                time
            })
            .collect();
        let least = times.iter().copied().fold(f64::INFINITY, f64::min);
        let middle = crate::stats::median(&mut times.clone()).expect("41 times");
        println!("{kernel:?}: least {least:.2} ms, median {middle:.2} ms");
    }
}

#[test]
fn seeds_follow_the_published_hash_and_mixer() {
    // Test vectors of FNV-1a (64 bits) and the first output of SplitMix64 from state 0.
    assert_eq!(fnv1a("".bytes()), 0xcbf2_9ce4_8422_2325);
    assert_eq!(fnv1a("a".bytes()), 0xaf63_dc4c_8601_ec8c);
    assert_eq!(fnv1a("foobar".bytes()), 0x8594_4171_f739_67e8);
    assert_eq!(split_mix(0), 0xe220_a839_7b1d_cdaf);
    // The hash goes over the name, then seed and index, least byte first.
    let bytes = [b'a', 2, 1, 0, 0, 0, 0, 0, 0, 3, 0, 0, 0, 0, 0, 0, 0];
    assert_eq!(stream_seed(258, 3, "a"), split_mix(fnv1a(bytes.into_iter())));
    // Neighbours in seed, index or name differ in about half of the 64 bits.
    let first = stream_seed(5, 8, "noise");
    for other in [(6, 8, "noise"), (5, 9, "noise"), (8, 5, "noise"), (5, 8, "noisf"), (5, 8, "")] {
        let differing = (first ^ stream_seed(other.0, other.1, other.2)).count_ones();
        assert!((14..=50).contains(&differing), "{other:?}: {differing} bits");
    }
}

#[test]
fn draws_have_the_moments_of_their_distributions() {
    let mut draws = Draws::new(11);
    let n = 200_000;
    let mean_of = |values: &[f64], power: i32| {
        values.iter().map(|v| v.powi(power)).sum::<f64>() / values.len() as f64
    };
    let uniform: Vec<f64> = (0..n).map(|_| draws.uniform()).collect();
    assert!(uniform.iter().all(|v| (0.0..1.0).contains(v)));
    // Standard error 0.29/√n = 0.0006 (mean 1/2), 0.0007 (mean square 1/3).
    assert!((mean_of(&uniform, 1) - 0.5).abs() < 0.003);
    assert!((mean_of(&uniform, 2) - 1.0 / 3.0).abs() < 0.003);
    let open: Vec<f64> = (0..n).map(|_| draws.open_uniform()).collect();
    assert!(open.iter().all(|v| *v > 0.0 && *v <= 1.0));
    assert!((mean_of(&open, 1) - 0.5).abs() < 0.003);
    let normal: Vec<f64> = (0..n).map(|_| draws.normal()).collect();
    // Moments 0, 1, 0, 3 with standard errors 1, √2, √15, √96 over √n = 447.
    for (power, expected, error) in [(1, 0.0, 1.0), (2, 1.0, 1.4), (3, 0.0, 3.9), (4, 3.0, 9.8)] {
        let found = mean_of(&normal, power);
        assert!((found - expected).abs() < 4.0 * error / 447.0, "moment {power}: {found}");
    }
    // The open one is the other one a step further.
    let (mut a, mut b) = (Draws::new(3), Draws::new(3));
    assert!((b.open_uniform() - a.uniform() - 0.5f64.powi(53)).abs() < 1e-17);
}

#[test]
fn the_rms_field_is_one_in_the_middle_and_has_its_ratios() {
    let flat = RmsField { gradient: 1.0, gradient_angle_deg: 20.0, edge_rise: 1.0 };
    assert!(rms_field(5, 4, &flat).iter().all(|f| (f - 1.0).abs() < 1e-15));
    let field = rms_field(41, 21, &RmsField { gradient: 4.0, gradient_angle_deg: 0.0, ..flat });
    assert!((field[(10, 20)] - 1.0).abs() < 1e-15);
    // Exponential in between: 4 from edge to edge, 2 from the middle to the edge, √2 halfway.
    assert!((field[(3, 40)] / field[(3, 0)] - 4.0).abs() < 1e-12);
    assert!((field[(10, 40)] - 2.0).abs() < 1e-12);
    assert!((field[(0, 30)] - 2f64.sqrt()).abs() < 1e-12);
    // Towards +y at 90°, and from corner to corner when it runs obliquely.
    let field = rms_field(41, 21, &RmsField { gradient: 9.0, gradient_angle_deg: 90.0, ..flat });
    assert!((field[(20, 7)] - 3.0).abs() < 1e-12 && (field[(0, 7)] - 1.0 / 3.0).abs() < 1e-12);
    let field = rms_field(41, 21, &RmsField { gradient: 9.0, gradient_angle_deg: 30.0, ..flat });
    assert!((field[(20, 40)] - 3.0).abs() < 1e-12 && (field[(0, 0)] - 1.0 / 3.0).abs() < 1e-12);
    // A Gaussian primary beam: the logarithm goes with r².
    let field = rms_field(41, 21, &RmsField { edge_rise: 16.0, ..flat });
    assert!((field[(10, 20)] - 1.0).abs() < 1e-15);
    for corner in [(0, 0), (0, 40), (20, 0), (20, 40)] {
        assert!((field[corner] - 16.0).abs() < 1e-12);
    }
    assert!((field[(5, 10)] - 2.0).abs() < 1e-12, "half of the radius, a quarter of the logarithm");
    // What is no ratio counts as 1, and extremes stay finite.
    for odd in [0.0, -2.0, f64::NAN, f64::INFINITY] {
        let field = RmsField { gradient: odd, gradient_angle_deg: odd, edge_rise: odd };
        assert!(rms_field(3, 3, &field).iter().all(|f| (f - 1.0).abs() < 1e-15));
    }
    let field = RmsField { gradient: 1e308, gradient_angle_deg: 0.0, edge_rise: 1e308 };
    assert!(rms_field(9, 9, &field).iter().all(|f| f.is_finite()));
    assert!((rms_field(1, 1, &field)[(0, 0)] - 1.0).abs() < 1e-15);
}

#[test]
fn stripes_have_their_rms_period_and_direction() {
    // Over phases the mean square at one pixel is rms²; 4000 draws know it to 1.5 %.
    let squares: f64 =
        (0..4000).map(|seed| stripes(1, 1, 3.0, 17.0, 30.0, seed)[(0, 0)].powi(2)).sum();
    assert!((squares / 4000.0 / 9.0 - 1.0).abs() < 0.06, "{squares}");
    // Many beats of the band average over phases within one map: 40 periods long.
    let map = stripes(400, 9, 2.0, 10.0, 90.0, 3);
    assert!((map.mapv(|v| v * v).mean().expect("not empty").sqrt() - 2.0).abs() < 0.05);
    // Crests at 90° run along y: every column is constant.
    for column in map.columns() {
        assert!(column.iter().all(|v| (v - column[0]).abs() < 1e-12));
    }
    // Within one period ahead it repeats, up to the bandwidth: mean of cos over ±5 % of 2π.
    let (products, number) = lagged_sum(&map, (10, 0));
    let phases = [-0.05, -0.025, 0.0, 0.025, 0.05].map(|d: f64| (2.0 * PI * d).cos());
    let expected = 4.0 * phases.iter().sum::<f64>() / 5.0;
    assert!((products / number - expected).abs() < 0.1, "{} {expected}", products / number);
    assert!(lagged_sum(&map, (5, 0)).0 < 0.0, "half a period ahead it has turned over");
    // Five periods ahead it would be the same again, were it one pure wave: cos(±π/2) and less.
    let (products, number) = lagged_sum(&map, (50, 0));
    assert!(products / number < 0.7 * 4.0);
    // Crests at 30°: along (cos 30°, sin 30°) nothing changes; (26, 15) px lies 0.01 px off.
    let map = stripes(60, 60, 1.0, 20.0, 30.0, 4);
    assert!((map[(5, 5)] - map[(20, 31)]).abs() < 0.02);
    assert!((map[(20, 5)] - map[(5, 31)]).abs() > 0.05);
    assert_ne!(map, stripes(60, 60, 1.0, 20.0, 30.0, 5));
    // Any period is drawn, and no number makes it blank.
    for odd in [f64::NAN, f64::INFINITY, 0.0, -1.0, 1e-300, 1e300] {
        assert!(stripes(5, 5, 1.0, odd, 10.0, 1).iter().all(|v| v.abs() < 4.0));
        assert!(stripes(5, 5, 1.0, 9.0, odd, 1).iter().all(|v| v.abs() < 4.0));
    }
}

#[test]
fn rings_leave_the_centre_and_fall_with_the_root_of_the_radius() {
    let map = rings(201, 101, (40.0, 50.0), 2.0, 20.0);
    for x in 30..=50 {
        assert_eq!(map[(50, x)].to_bits(), 0, "within half a period, column {x}");
    }
    // sin(2π r/P) √(3P/4r): −1 at 15 px, +√(15/25) at 25 px, −√(15/95) at 95 px.
    assert!((map[(50, 55)] + 2.0).abs() < 1e-12);
    assert!((map[(50, 65)] - 2.0 * 0.6f64.sqrt()).abs() < 1e-12);
    assert!((map[(50, 135)] + 2.0 * (15.0 / 95.0f64).sqrt()).abs() < 1e-12);
    // Round: 15 px away along 3-4-5 too. Continuous where it starts: slope π/P √1.5 per px.
    assert!((map[(62, 49)] + 2.0).abs() < 1e-12);
    assert!(map[(50, 51)].abs() < 2.0 * 1.23 * 2.0 * PI / 20.0);
    // The first ring is the strongest, and its extreme is 0.6 % above the amplitude (tan x = 2x).
    assert!(map.iter().all(|v| v.abs() < 2.0 * 1.006));
    for odd in [f64::NAN, f64::INFINITY, 0.0, -1.0, 1e-300, 1e300] {
        assert!(rings(5, 5, (2.0, 2.0), 1.0, odd).iter().all(|v| v.is_finite()));
        assert!(rings(5, 5, (odd, 2.0), 1.0, 9.0).iter().all(|v| v.is_finite()));
    }
}

#[test]
fn spokes_alternate_and_fall_with_the_root_of_the_radius() {
    let (count, beam) = (4, 4.0);
    let centre = (150.0, 150.0);
    let map = spokes(301, 301, centre, 3.0, count, beam, 9);
    assert_eq!(map[(150, 150)].to_bits(), 0, "zero at the centre");
    // Neighbours are two beams apart at 2 × 4 × 4/π = 10.2 px. Around a circle of 120 px there
    // are eight spokes, alternating, of height ±3 √(10.2/120).
    let height = 3.0 * (32.0 / PI / 120.0f64).sqrt();
    let turn = 45.0 * Draws::new(9).uniform();
    for i in 0..8 {
        let sign = if i % 2 == 0 { 1.0 } else { -1.0 };
        let (dx, dy) = direction(turn + 45.0 * f64::from(i));
        let (x, y) = ((150.0 + 120.0 * dx).round(), (150.0 + 120.0 * dy).round());
        // The nearest pixel lies off the ridge by up to 0.71 px: at least 0.91 of it.
        let found = map[(y as usize, x as usize)] * sign / height;
        assert!((0.9..1.01).contains(&found), "spoke {i}: {found}");
        // Between two spokes there is nothing.
        let (dx, dy) = direction(turn + 45.0 * f64::from(i) + 22.5);
        let (x, y) = ((150.0 + 120.0 * dx) as usize, (150.0 + 120.0 * dy) as usize);
        assert!(map[(y, x)].abs() < 1e-9);
    }
    assert!(map.iter().all(|v| v.abs() <= 3.0), "nowhere above the amplitude");
    // One spoke across has the beam's FWHM: sum of a cut over its height is beam √(π/4 ln 2).
    let one = spokes(301, 301, centre, 1.0, 1, beam, 9);
    let angle = 180.0 * Draws::new(9).uniform();
    let (cos, sin) = direction(angle);
    let cut: f64 = (0..301).map(|y| one[(y, 250)]).sum();
    let radius = 100.0 / cos.abs();
    let along = (2.0 * beam / PI / radius).sqrt();
    let across = beam * GAUSSIAN_AREA.sqrt() / cos.abs();
    assert!(sin.abs() < 0.8, "a spoke that the column cuts well inside the map");
    assert!((cut / (along * across) - 1.0).abs() < 0.02, "{cut} {along} {across}");
    assert_ne!(one, spokes(301, 301, centre, 1.0, 1, beam, 10), "another orientation");
    for odd in [f64::NAN, f64::INFINITY, 0.0, -1.0, 1e-300, 1e300] {
        assert!(spokes(5, 5, (2.0, 2.0), 1.0, 3, odd, 1).iter().all(|v| v.is_finite()));
        assert!(spokes(5, 5, (odd, 2.0), 1.0, 3, 2.0, 1).iter().all(|v| v.is_finite()));
    }
    assert!(spokes(5, 5, (2.0, 2.0), 1.0, 0, 2.0, 1).iter().all(|v| v.to_bits() == 0));
}

#[test]
fn a_bowl_holds_its_flux_and_has_its_width() {
    for (fwhm, centre) in [(30.0, (100.0, 90.3)), (2.0, (100.4, 80.0)), (0.0, (50.0, 50.5))] {
        let map = bowl(200, 180, centre, 7.0, fwhm);
        // A Gaussian of 2 px sampled at 1 px sums to its integral within 2 × 1.3e-6.
        assert!((map.sum() + 7.0).abs() < 7.0 * 3e-6, "{fwhm}: {}", map.sum());
        assert!(map.iter().all(|v| *v <= 0.0));
    }
    let map = bowl(200, 180, (100.0, 90.0), 7.0, 30.0);
    // Depth flux/(1.133 FWHM²); half of it half a FWHM away.
    assert!((map[(90, 100)] + 7.0 / (GAUSSIAN_AREA * 900.0)).abs() < 1e-15);
    assert!((map[(105, 100)] / map[(90, 100)] - 0.5).abs() < 1e-12);
    for odd in [f64::NAN, f64::INFINITY, 0.0, -1.0, 1e-300, 1e300] {
        assert!(bowl(5, 5, (2.0, 2.0), 1.0, odd).iter().all(|v| v.is_finite()));
        assert!(bowl(5, 5, (odd, 2.0), 1.0, 9.0).iter().all(|v| v.is_finite()));
    }
}

/// Bits, so that blank pixels compare.
fn bits(map: &Array2<f64>) -> Vec<u64> {
    map.iter().map(|v| v.to_bits()).collect()
}

#[test]
fn clipping_replaces_what_is_below_and_nothing_else() {
    let map = ndarray::array![[-1.0, 0.5, 2.0], [1.0, f64::NAN, 0.9]];
    let clipped = |level, how| {
        let mut map = map.clone();
        clip(&mut map, level, how);
        bits(&map)
    };
    let nan = f64::NAN;
    assert_eq!(clipped(1.0, Clip::None), bits(&map));
    let zero = ndarray::array![[0.0, 0.0, 2.0], [1.0, nan, 0.0]];
    assert_eq!(clipped(1.0, Clip::Zero), bits(&zero), "the level itself stays");
    let blank = ndarray::array![[nan, nan, 2.0], [1.0, nan, nan]];
    assert_eq!(clipped(1.0, Clip::Blank), bits(&blank));
    let floor = ndarray::array![[1.0, 1.0, 2.0], [1.0, nan, 1.0]];
    assert_eq!(clipped(1.0, Clip::Floor), bits(&floor));
    for odd in [nan, f64::INFINITY, f64::NEG_INFINITY] {
        assert_eq!(clipped(odd, Clip::Floor), bits(&map));
    }
}

#[test]
fn borders_and_discs_blank_the_pixels_in_them() {
    let blanks = |map: &Array2<f64>| map.iter().filter(|v| v.is_nan()).count();
    let empty = || Array2::<f64>::zeros((7, 10));
    for (border, left) in [(0, 70), (1, 40), (2, 18), (3, 4), (4, 0), (usize::MAX, 0)] {
        let mut map = empty();
        blank_border(&mut map, border);
        assert_eq!(70 - blanks(&map), left, "border of {border} px");
        assert_eq!(map[(3, 4)].is_nan(), left == 0, "the middle goes last");
    }
    // 1, 5, 13 lattice points within 0, 1, 2 px of one; a corner keeps a quarter and its edges.
    for (radius, expected) in [(0.0, 1), (1.0, 5), (2.0, 13), (-1.0, 0), (f64::NAN, 0), (1e300, 70)]
    {
        let mut map = empty();
        blank_discs(&mut map, &[(4.0, 3.0)], radius);
        assert_eq!(blanks(&map), expected, "radius {radius}");
    }
    let mut map = empty();
    blank_discs(&mut map, &[(9.0, 0.0), (0.5, 6.0), (-50.0, 3.0), (f64::NAN, 3.0)], 1.0);
    // (9, 0): itself and two neighbours. (0.5, 6): columns 0 and 1.
    assert_eq!(blanks(&map), 5);
    assert!(map[(0, 9)].is_nan() && map[(1, 9)].is_nan() && map[(0, 8)].is_nan());
    assert!(map[(6, 0)].is_nan() && map[(6, 1)].is_nan());
}

#[test]
fn holes_lie_anywhere_inside_the_map() {
    let centres = hole_centres(100, 50, 4000, 6);
    assert_eq!(centres.len(), 4000);
    assert!(centres.iter().all(|(x, y)| (0.0..=99.0).contains(x) && (0.0..=49.0).contains(y)));
    // Uniform: means 49.5 and 24.5 with standard errors 28.6/63 and 14.1/63.
    let mean = |axis: fn(&(f64, f64)) -> f64| centres.iter().map(axis).sum::<f64>() / 4000.0;
    assert!((mean(|c| c.0) - 49.5).abs() < 1.8 && (mean(|c| c.1) - 24.5).abs() < 0.9);
    assert_ne!(centres, hole_centres(100, 50, 4000, 7));
    assert!(hole_centres(0, 50, 3, 1).is_empty());
}

#[test]
fn quantising_rounds_half_to_even() {
    let mut map = ndarray::array![[0.25, 0.75, 1.25, -0.25], [-0.76, 0.3, f64::NAN, 1e300]];
    quantise(&mut map, 0.5);
    // 0.5, 1.5, 2.5, −0.5 steps go to 0, 2, 2, −0; −1.52 to −2, 0.6 to 1.
    let expected = ndarray::array![[0.0, 1.0, 1.0, -0.0], [-1.0, 0.5, f64::NAN, 1e300]];
    assert_eq!(bits(&map), bits(&expected));
    for odd in [0.0, -1.0, f64::NAN, f64::INFINITY, 1e-300] {
        quantise(&mut map, odd);
        let far = map.iter().zip(&expected).any(|(a, b)| (a - b).abs() > 1e-9);
        assert!(!far, "a step of {odd}: {map}");
        assert!(map[(1, 3)] > 9e299 && map[(1, 2)].is_nan());
    }
}

#[test]
fn neighbours_are_poisson_uniform_and_a_power_law() {
    let (columns, rows) = (60, 40);
    let inside =
        |&(x, y, _): &(f64, f64, f64)| (-0.5..59.5).contains(&x) && (-0.5..39.5).contains(&y);
    let of_seed =
        |mean, seed| neighbour_fluxes_and_places(columns, rows, mean, (2.0, 200.0, 1.5), seed);
    let (mut sum, mut squares, mut all) = (0.0, 0.0, Vec::new());
    let draws = 4000;
    for seed in 0..draws {
        let list = of_seed(5.0, stream_seed(1, seed, "neighbours"));
        let count = list.iter().filter(|n| inside(n)).count() as f64;
        sum += count;
        squares += count * count;
        all.extend(list);
    }
    // Poisson: mean and variance 5, known to √(5/4000) = 0.035 and 5 √(2.2/4000) = 0.12.
    let mean = sum / draws as f64;
    let variance = squares / draws as f64 - mean * mean;
    assert!((mean - 5.0).abs() < 0.14, "{mean}");
    assert!((variance - 5.0).abs() < 0.5, "{variance}");
    // 80 × 60 px hold twice what 60 × 40 hold; all lie within 10 px of the map.
    assert!((all.len() as f64 / draws as f64 - 10.0).abs() < 0.2);
    assert!(
        all.iter().all(|(x, y, _)| x.abs() < 69.6 && y.abs() < 49.6 && *x > -10.6 && *y > -10.6)
    );
    // Quantiles of S^−1.5 from 2 to 200: (2^−½ + u (200^−½ − 2^−½))^−2; u = ½ gives 6.61.
    let mut fluxes: Vec<f64> = all.iter().map(|n| n.2).collect();
    assert!(fluxes.iter().all(|s| (2.0..=200.0).contains(s)));
    for share in [0.1, 0.5, 0.9] {
        let (low, high) = (0.5f64.sqrt(), 0.005f64.sqrt());
        let expected = (low + share * (high - low)).powi(-2);
        let found = crate::stats::quantile(&mut fluxes, share).expect("not empty");
        // 40000 fluxes: shares known to 0.0025, fluxes at 0.9 to 1.2 %.
        assert!((found / expected - 1.0).abs() < 0.05, "{share}: {found} for {expected}");
    }
    // A large mean goes without underflow: e^−2000 is zero. Standard deviation 1.4 √2000.
    let count = of_seed(2000.0, 1).iter().filter(|n| inside(n)).count() as f64;
    assert!((count - 2000.0).abs() < 4.0 * 2000f64.sqrt(), "{count}");
    for odd in [0.0, -3.0, f64::NAN, f64::INFINITY] {
        assert!(of_seed(odd, 1).is_empty());
    }
    for range in [(0.0, 1.0, 1.5), (2.0, 1.0, 1.5), (1.0, f64::INFINITY, 1.5), (1.0, 2.0, f64::NAN)]
    {
        assert!(neighbour_fluxes_and_places(9, 9, 50.0, range, 1).is_empty(), "{range:?}");
    }
    assert!(neighbour_fluxes_and_places(0, 9, 50.0, (1.0, 2.0, 1.5), 1).is_empty());
}

#[test]
fn power_laws_of_any_slope_have_closed_quantiles() {
    // Slope 1: logarithmic. Slope 0: uniform. Slope −1: (1 + 3 u)^½ for 1 to 2. Slope 3:
    // (1 − ¾ u)^−½.
    assert!((power_law_quantile(1.0, 100.0, 1.0, 0.5) - 10.0).abs() < 1e-12);
    assert!((power_law_quantile(1.0, 100.0, 1.0 + 1e-9, 0.5) - 10.0).abs() < 1e-6);
    assert!((power_law_quantile(2.0, 4.0, 0.0, 0.25) - 2.5).abs() < 1e-12);
    assert!((power_law_quantile(1.0, 2.0, -1.0, 0.5) - 2.5f64.sqrt()).abs() < 1e-12);
    assert!((power_law_quantile(1.0, 2.0, 3.0, 0.5) - 0.625f64.powf(-0.5)).abs() < 1e-12);
    // Extreme slopes pile up at one end, and nothing overflows.
    assert!((power_law_quantile(1.0, 10.0, 1e6, 0.9) - 1.0).abs() < 1e-5);
    assert!((power_law_quantile(1.0, 10.0, -1e6, 0.1) - 10.0).abs() < 1e-4);
    for slope in [-1e300, -3.0, 0.0, 1.0, 2.5, 1e300] {
        for share in [0.0, 0.5, 1.0 - f64::EPSILON] {
            let value = power_law_quantile(1e-300, 1e300, slope, share);
            assert!((1e-300..=1e300).contains(&value), "{slope} {share}: {value}");
        }
        assert!((power_law_quantile(3.0, 3.0, slope, 0.5) - 3.0).abs() < 1e-12);
    }
}
