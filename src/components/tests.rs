use ndarray::Array2;

use super::*;
use crate::noise::KernelEllipse;
use crate::simulate::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, unit_noise};
use crate::units::wrap_difference_deg;

/// North up, east left, `scale` per pixel.
fn frame(scale: f64) -> LocalFrame {
    LocalFrame {
        origin: Pixel::new(30.0, 30.0),
        to_sky: [[-scale, 0.0], [0.0, scale]],
        to_pixel: [[-1.0 / scale, 0.0], [0.0, 1.0 / scale]],
    }
}

fn window(brightness: Array2<f64>, rms: f64, member: impl Fn(usize, usize) -> bool) -> Window {
    let shape = brightness.raw_dim();
    Window {
        x0: 7,
        y0: 11,
        rms: Array2::from_elem(shape, rms),
        member: Array2::from_shape_fn(shape, |(r, c)| member(r, c)),
        foreign: Array2::from_elem(shape, false),
        brightness,
    }
}

/// The pixels above a level.
fn above(brightness: Array2<f64>, rms: f64, level: f64) -> Window {
    let copy = brightness.clone();
    window(brightness, rms, |r, c| copy[[r, c]] >= level)
}

fn noise_of(window: &Window, rms: f64) -> Noise {
    Noise::uniform(window.columns() + window.x0, window.rows() + window.y0, 0.0, rms)
}

fn smooth(fwhm_px: f64) -> NoiseCorrelation {
    NoiseCorrelation::of_kernel(KernelEllipse {
        major_px: fwhm_px,
        minor_px: fwhm_px,
        angle_deg: 0.0,
    })
}

fn gaussian(x: f64, y: f64, peak: f64, shape: [f64; 3]) -> GaussianComponent {
    let [major_px, minor_px, angle_deg] = shape;
    let shape = GaussianShape { major_px, minor_px, angle_deg };
    GaussianComponent { x_px: x, y_px: y, amount: Amount::Peak(peak), shape }
}

/// Local maxima of a window, plainly.
fn peaks(window: &Window, rms: f64) -> Vec<Peak> {
    let mut found = Vec::new();
    for r in 1..window.rows() - 1 {
        for c in 1..window.columns() - 1 {
            let v = window.brightness[[r, c]];
            let top =
                (r - 1..=r + 1).all(|i| (c - 1..=c + 1).all(|j| window.brightness[[i, j]] <= v));
            if top && v > 5.0 * rms && window.member[[r, c]] {
                found.push(Peak { pixel: window.pixel(r, c), value: v, signal_to_noise: v / rms });
            }
        }
    }
    found.sort_by(|a, b| b.value.total_cmp(&a.value));
    found
}

fn fitted(window: &Window, beam: &Beam, scale: f64, rms: f64, kernel_px: f64) -> FitReport {
    let (noise, correlation) = (noise_of(window, rms), smooth(kernel_px));
    let settings = ComponentSettings::default();
    let peaks = peaks(window, rms);
    fit_components(window, &peaks, beam, &frame(scale), (&noise, &correlation), &settings)
}

fn angle_between(a: f64, b: f64) -> f64 {
    (wrap_difference_deg(2.0 * (a - b)) / 2.0).abs()
}

#[test]
fn analytic_gaussians_are_recovered_exactly() {
    // Beam 6″ × 4.5″ at PA 30°; 1.5″ pixels, north up and east left: PA = array angle − 90°,
    // mirrored: a direction (cos a, sin a) in (x, y) has east −cos a, north sin a.
    let beam = Beam::new(6.0, 4.5, 30.0).expect("a beam");
    let array_angle = 90.0 + 30.0;
    let scene = Scene {
        components: vec![
            gaussian(22.3, 31.8, 5.0, [7.0, 2.0, 25.0]),
            gaussian(38.6, 28.1, 2.0, [0.5, 0.3, 0.0]),
        ],
        ..Scene::empty(
            61,
            60,
            GaussianShape { major_px: 4.0, minor_px: 3.0, angle_deg: array_angle },
        )
    };
    let window = above(scene.render(), 1e-9, 1e-2);
    let report = fitted(&window, &beam, 1.5, 1e-9, 3.5);
    assert_eq!(report.components.len(), 2, "{report:?}");
    assert!(report.converged && !report.truncated);
    for (got, truth) in report.components.iter().zip(&scene.components) {
        assert!((got.pixel.x - 7.0 - truth.x_px).abs() < 1e-6, "{got:?}");
        assert!((got.pixel.y - 11.0 - truth.y_px).abs() < 1e-6, "{got:?}");
        assert!((got.peak / scene.peak_brightness(truth) - 1.0).abs() < 1e-6, "{got:?}");
        let flux = scene.flux(truth) * scene.beam_area_px();
        assert!((got.flux / flux - 1.0).abs() < 1e-6, "{got:?}");
    }
    let first = report.components[0];
    let shape = first.deconvolved;
    // 7 and 2 pixels of 1.5″; array angle 25° is east −cos 25°, north sin 25°: PA −65° = 115°.
    assert!((shape.major.best().expect("resolved") - 10.5).abs() < 1e-5, "{shape:?}");
    assert!((shape.minor.best().expect("resolved") - 3.0).abs() < 1e-4, "{shape:?}");
    let pa = shape.position_angle_deg.best().expect("elongated");
    assert!(angle_between(pa, 115.0) < 1e-5, "{pa}");
}

#[test]
fn a_blended_pair_is_told_apart() {
    // Two points 1.2 beams apart, peaks 3 : 2, at S/N 100 in beam-smoothed noise: the fainter
    // is no local maximum of its own or hardly one.
    let beam = Beam::round(6.0).expect("a beam");
    let mut worst: f64 = 0.0;
    for seed in 0..10 {
        let scene = Scene {
            components: vec![
                gaussian(27.0, 30.0, 3.0, [0.0; 3]),
                gaussian(32.76, 34.32, 2.0, [0.0; 3]),
            ],
            noise: Some((NoiseKind::Smoothed(GaussianShape::circular(6.0)), 0.03, seed)),
            ..Scene::empty(61, 61, GaussianShape::circular(6.0))
        };
        let window = above(scene.render(), 0.03, 0.15);
        let report = fitted(&window, &beam, 1.0, 0.03, 6.0);
        assert_eq!(report.components.len(), 2, "seed {seed}: {report:?}");
        let (separation, sigma, _) =
            outermost_separation(&report.components, &frame(1.0)).expect("a pair");
        worst = worst.max((separation - 7.2).abs());
        assert!(sigma > 0.0 && sigma < 0.6, "{sigma}");
    }
    // Each centre is known to about 0.6 FWHM/(S/N) = 0.04 px, blending triples it.
    assert!(worst < 0.6, "{worst}");
}

#[test]
fn a_hot_spot_on_a_lobe_is_a_component_of_its_own() {
    // A lobe of three beams with a point at 120 rms in its outer half;
    // far away a chain of knots that Gaussians take many steps to describe must not hide it.
    let beam = Beam::round(6.0).expect("a beam");
    for seed in 0..6 {
        let mut components = vec![
            gaussian(30.0, 30.0, 3.0, [18.0, 14.0, 0.0]),
            gaussian(22.5, 30.0, 3.6, [0.0; 3]),
            gaussian(60.0, 30.0, 2.0, [50.0, 2.0, 0.0]),
        ];
        components.extend((0..7).map(|k| {
            let k = f64::from(k);
            gaussian(72.0 + 5.0 * k, 30.0 + 3.0 * (1.3 * k).sin(), 2.0 + (k - 3.0).abs(), [3.0; 3])
        }));
        let scene = Scene {
            components,
            noise: Some((NoiseKind::Smoothed(GaussianShape::circular(6.0)), 0.03, seed)),
            ..Scene::empty(121, 61, GaussianShape::circular(6.0))
        };
        let window = above(scene.render(), 0.03, 0.09);
        let report = fitted(&window, &beam, 1.0, 0.03, 6.0);
        let own = report.components.iter().find(|c| {
            // Window cells begin at (7, 11).
            (c.pixel.x - 29.5).hypot(c.pixel.y - 41.0) < 1.0 && c.minor.0 < 8.0
        });
        // Noise moves a point of S/N 120 by 0.03 px, the slope of the lobe by a few times that.
        assert!(own.is_some(), "seed {seed}: {:?}", report.components);
    }
}

#[test]
fn one_gaussian_stays_one() {
    // Elongated and bright, yet a single Gaussian: not to be split.
    let beam = Beam::round(6.0).expect("a beam");
    for seed in 0..10 {
        let scene = Scene {
            components: vec![gaussian(30.2, 29.7, 3.0, [9.0, 2.0, 40.0])],
            noise: Some((NoiseKind::Smoothed(GaussianShape::circular(6.0)), 0.03, seed)),
            ..Scene::empty(61, 61, GaussianShape::circular(6.0))
        };
        let window = above(scene.render(), 0.03, 0.15);
        let report = fitted(&window, &beam, 1.0, 0.03, 6.0);
        assert_eq!(report.components.len(), 1, "seed {seed}: {report:?}");
        assert!(outermost_separation(&report.components, &frame(1.0)).is_none());
    }
}

#[test]
fn a_point_has_upper_limits_and_an_extended_source_values() {
    let beam = Beam::new(6.0, 5.0, 20.0).expect("a beam");
    let own = GaussianShape { major_px: 6.0, minor_px: 5.0, angle_deg: 110.0 };
    for (shape, resolved) in
        [([0.0; 3], [false; 2]), ([8.0, 0.0, 60.0], [true, false]), ([9.0, 6.0, 0.0], [true; 2])]
    {
        let scene = Scene {
            components: vec![gaussian(30.0, 30.0, 1.0, shape)],
            ..Scene::empty(61, 61, own)
        };
        let window = above(scene.render(), 0.02, 0.06);
        let report = fitted(&window, &beam, 1.0, 0.02, 5.5);
        assert_eq!(report.components.len(), 1, "{report:?}");
        let got = report.components[0].deconvolved;
        assert_eq!([got.major, got.minor].map(|m| m.best().is_some()), resolved, "{got:?}");
        assert_eq!(got.position_angle_deg.best().is_some(), resolved[0], "{got:?}");
        for axis in [got.major, got.minor] {
            if let Measurement::UpperLimit { upper_limit, confidence } = axis {
                // S/N 50: resolution limit 0.13 of the beam, at most a beam with the errors.
                assert!(upper_limit > 0.6 && upper_limit < 6.0, "{upper_limit}");
                assert!((confidence - 0.95).abs() < 1e-12);
            }
        }
    }
}

#[test]
fn nothing_breaks_on_degenerate_input() {
    let beam = Beam::round(4.0).expect("a beam");
    let flat = |value: f64| Array2::from_elem((20, 20), value);
    let mut holes = Scene {
        components: vec![gaussian(9.5, 9.5, 1.0, [4.0, 2.0, 30.0])],
        ..Scene::empty(20, 20, GaussianShape::circular(4.0))
    }
    .render();
    for k in 0..20 {
        holes[[k, (k * 7) % 20]] = f64::NAN;
        holes[[(k * 3) % 20, k]] = f64::NAN;
    }
    let mut spike = flat(0.0);
    spike[[10, 10]] = 1e300;
    let all = |_: usize, _: usize| true;
    let none = |_: usize, _: usize| false;
    let one = |r: usize, c: usize| r == 10 && c == 10;
    let windows = [
        window(flat(1.0), 0.1, all),
        window(flat(0.0), 0.1, all),
        window(flat(-1.0), 0.1, all),
        window(flat(f64::NAN), 0.1, all),
        window(flat(1.0), 0.0, all),
        window(flat(1.0), f64::NAN, one),
        window(flat(1.0), 0.1, one),
        window(flat(1.0), 0.1, none),
        window(spike, 0.1, all),
        window(holes, 0.01, all),
        window(Array2::zeros((0, 0)), 0.1, all),
        window(Array2::from_elem((1, 1), 1.0), 0.1, all),
    ];
    let odd_peaks = [(f64::NAN, 1.0), (1e9, 2.0), (17.0, f64::INFINITY), (17.0, 5.0)]
        .map(|(x, value)| Peak { pixel: Pixel::new(x, 21.0), value, signal_to_noise: 50.0 });
    for (k, window) in windows.iter().enumerate() {
        for scale in [1.0, 40.0, 0.01] {
            for list in [&odd_peaks[..], &[]] {
                let settings = ComponentSettings::default();
                let noise = Noise::uniform(40, 40, 0.0, 0.1);
                let report = fit_components(
                    window,
                    list,
                    &beam,
                    &frame(scale),
                    (&noise, &smooth(4.0)),
                    &settings,
                );
                assert!(report.residual_rms_over_noise.is_finite(), "{k}: {report:?}");
                assert!(report.evaluations < 1000, "{k}: {report:?}");
                for c in &report.components {
                    assert!(c.peak > 0.0 && c.flux.is_finite() && c.major.0 >= c.minor.0, "{k}");
                    assert!(c.position_sigma.is_finite() && c.flux_sigma.is_finite(), "{k}");
                }
            }
        }
    }
    let report = fitted(&windows[9], &beam, 1.0, 0.01, 4.0);
    // Holes take pixels away, not accuracy: the map holds no noise.
    assert_eq!(report.components.len(), 1);
    assert!((report.components[0].peak - 1.0).abs() < 1e-3, "{report:?}");
}

#[test]
fn mirrored_and_turned_maps_give_mirrored_and_turned_components() {
    use crate::grid::orientation::Orientation;
    let scene = Scene {
        components: vec![
            gaussian(20.0, 30.0, 3.0, [5.0, 2.0, 40.0]),
            gaussian(27.0, 33.0, 2.0, [3.0, 1.0, 10.0]),
            gaussian(40.0, 36.0, 2.5, [4.0, 4.0, 0.0]),
        ],
        noise: Some((NoiseKind::Smoothed(GaussianShape::circular(5.0)), 0.02, 3)),
        ..Scene::empty(63, 57, GaussianShape::circular(5.0))
    };
    let map = scene.render();
    let beam = Beam::round(5.0).expect("a beam");
    let run = |map: Array2<f64>| fitted(&above(map, 0.02, 0.1), &beam, 1.0, 0.02, 5.0);
    let upright = run(map.clone());
    assert!(upright.components.len() >= 3, "{upright:?}");
    for orientation in Orientation::all() {
        let (columns, rows) = if orientation.transpose { (57, 63) } else { (63, 57) };
        let report = run(orientation.apply(&map));
        assert_eq!(report.components.len(), upright.components.len());
        for (a, b) in upright.components.iter().zip(&report.components) {
            let (x, y) = orientation.position(a.pixel.x - 7.0, a.pixel.y - 11.0, columns, rows);
            // Sums run in another order; the minimum is flat to the square root of rounding,
            // and the fit stops within 1 % of an error of it.
            let apart = (b.pixel.x - 7.0 - x).hypot(b.pixel.y - 11.0 - y);
            assert!(apart < 1e-6, "{orientation:?}: {apart}");
            assert!((a.flux / b.flux - 1.0).abs() < 1e-6, "{orientation:?}");
            assert!((a.major.0 / b.major.0 - 1.0).abs() < 1e-6, "{orientation:?}");
            assert!((a.flux_sigma / b.flux_sigma - 1.0).abs() < 1e-5, "{orientation:?}");
        }
    }
}

#[test]
fn errors_agree_with_a_linear_calculation() {
    // Own linear calculation of V = (JᵀJ)⁻¹ JᵀCJ (JᵀJ)⁻¹ on a fine grid, independent of this
    // code (shared/reference/gaussian-fit-errors.csv; its simulated fits agree within 6 %).
    // Fitted major, minor, kernel; errors at S/N = 1: amplitude, position along both axes,
    // major, minor, position angle (rad), flux.
    let rows = [
        [12.0, 8.0, 6.0, 1.05815, 6.67800, 3.98199, 1.19028, 1.00914, 1.77914, 1.52374],
        [18.0, 9.0, 6.0, 0.94713, 8.59034, 3.76711, 1.06943, 0.85966, 0.88159, 1.21209],
        [24.0, 12.0, 6.0, 0.81230, 9.21042, 4.24579, 0.87758, 0.75677, 0.76207, 0.94043],
    ];
    // Three times finer pixels: the same errors from a thinned map.
    for (row, finer) in rows.into_iter().flat_map(|row| [(row, 1.0), (row, 3.0)]) {
        let [major, minor, kernel, amplitude, along, across, d_major, d_minor, d_pa, d_flux] = row;
        let beam = Beam::round(6.0 * finer).expect("a beam");
        let deconvolved = |fwhm: f64| finer * (fwhm * fwhm - 36.0).sqrt();
        let shape = [deconvolved(major), deconvolved(minor), 33.0];
        let scene = Scene {
            components: vec![gaussian(50.0 * finer, 50.0 * finer, 1.0, shape)],
            ..Scene::empty(
                (100.0 * finer) as usize + 1,
                (100.0 * finer) as usize + 1,
                GaussianShape::circular(6.0 * finer),
            )
        };
        let snr = 50.0;
        let window = window(scene.render(), 1.0 / snr, |_, _| true);
        let report = fitted(&window, &beam, 1.0, 1.0 / snr, kernel * finer);
        assert_eq!(report.components.len(), 1);
        let got = report.components[0];
        let pairs = [
            ("peak", got.peak_sigma * snr, amplitude),
            (
                "position",
                got.position_sigma * snr / finer,
                (0.5 * (along * along + across * across)).sqrt(),
            ),
            ("major", got.major.1 / got.major.0 * snr, d_major),
            ("minor", got.minor.1 / got.minor.0 * snr, d_minor),
            ("angle", got.pa_sigma_deg.to_radians() * snr, d_pa),
            ("flux", got.flux_sigma / got.flux * snr, d_flux),
        ];
        for (name, got, expected) in pairs {
            // Derivatives are cut where the Gaussian falls below 0.4 % of its peak.
            assert!((got / expected - 1.0).abs() < 0.02, "{major} {name}: {got} for {expected}");
        }
    }
}

#[test]
fn errors_are_the_scatter_of_simulated_fits() {
    let beam = Beam::round(6.0).expect("a beam");
    let scene = Scene {
        components: vec![
            gaussian(30.3, 30.6, 1.0, [10.4, 5.3, 33.0]),
            gaussian(44.0, 41.0, 0.8, [6.0, 3.0, 80.0]),
        ],
        ..Scene::empty(75, 75, GaussianShape::circular(6.0))
    };
    let clean = scene.render();
    let rms = 1.0 / 40.0;
    let truth =
        fitted(&window(clean.clone(), 1e-9, |r, c| clean[[r, c]] > 0.02), &beam, 1.0, 1e-9, 6.0);
    assert_eq!(truth.components.len(), 2);
    let mut pulls = [const { Vec::new() }; 5];
    for seed in 0..300 {
        let noise = unit_noise(75, 75, NoiseKind::Smoothed(GaussianShape::circular(6.0)), seed);
        let map = &clean + &(noise * rms);
        let report = fitted(&window(map, rms, |r, c| clean[[r, c]] > 0.02), &beam, 1.0, rms, 6.0);
        for t in &truth.components {
            let near = |c: &&Component| c.pixel.distance_px(t.pixel) < 3.0;
            let Some(c) = report.components.iter().find(near) else { continue };
            pulls[0].push((c.flux - t.flux) / c.flux_sigma);
            pulls[1].push((c.pixel.x - t.pixel.x) / c.position_sigma);
            pulls[1].push((c.pixel.y - t.pixel.y) / c.position_sigma);
            pulls[2].push((c.major.0 - t.major.0) / c.major.1);
            pulls[3].push((c.minor.0 - t.minor.0) / c.minor.1);
            pulls[4].push((c.peak - t.peak) / c.peak_sigma);
        }
    }
    for (name, list) in ["flux", "position", "major", "minor", "peak"].iter().zip(&pulls) {
        let n = list.len() as f64;
        let mean = list.iter().sum::<f64>() / n;
        let width = (list.iter().map(|p| (p - mean).powi(2)).sum::<f64>() / n).sqrt();
        eprintln!("{name}: {n} pulls, mean {mean:.3}, width {width:.3}");
        assert!(n >= 590.0, "{name}: {n}");
        // 600 pulls: the width is known to 3 %, the linear theory holds to a few per cent.
        assert!((0.9..1.1).contains(&width), "{name}: {width}");
        assert!(mean.abs() < 0.25, "{name}: {mean}");
    }
}

#[test]
fn crumbs_and_halos_are_no_ends() {
    let at = |x: f64, peak: f64, flux: f64| Component {
        pixel: Pixel::new(x, 0.0),
        position_sigma: 0.3,
        peak,
        peak_sigma: 0.01,
        signal_to_noise: 100.0 * peak,
        flux,
        flux_sigma: 0.1,
        major: (6.0, 0.1),
        minor: (6.0, 0.1),
        pa_deg: 0.0,
        pa_sigma_deg: 90.0,
        deconvolved: DeconvolvedShape {
            major: Measurement::missing(Because::Unresolved),
            minor: Measurement::missing(Because::Unresolved),
            position_angle_deg: Measurement::missing(Because::Unresolved),
        },
    };
    let pair = [at(0.0, 1.0, 10.0), at(20.0, 0.5, 4.0)];
    let (separation, sigma, ends) = outermost_separation(&pair, &frame(2.0)).expect("two");
    // 20 px of 2 units; two ends of 0.3 each.
    assert!((separation - 40.0).abs() < 1e-12 && (sigma - 0.18f64.sqrt()).abs() < 1e-12);
    assert_eq!(ends, (0, 1));
    let mut more = pair.to_vec();
    more.push(at(90.0, 0.2, 0.1)); // a crumb: 2 % of the second largest flux
    more.push(at(80.0, 0.02, 5.0)); // a halo: 4 % of the second highest peak
    more.push(Component { signal_to_noise: 4.0, ..at(70.0, 0.2, 3.0) }); // 4 rms
    assert_eq!(outermost_separation(&more, &frame(2.0)).map(|o| o.2), Some((0, 1)));
    assert!(outermost_separation(&pair[..1], &frame(2.0)).is_none());
    assert!(outermost_separation(&[], &frame(2.0)).is_none());
}
