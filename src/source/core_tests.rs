//! Tests of the core's choice and of its fit.

use ndarray::Array2;

use super::core::{KnownCore, Peak, choose_core};
use super::core_fit::{FitContext, Placing, PointFit, fit_core, fit_point, invert_symmetric};
use crate::map::beam::Beam;
use crate::map::description::{MapDescription, Rows};
use crate::map::geometry::{LocalFrame, SkyGeometry};
use crate::measurement::{Because, Measurement};
use crate::noise::{Noise, NoiseCorrelation};
use crate::record::CoreBasis;
use crate::ridge::{Ridge, RidgePoint};
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

const SIZE: usize = 61;

fn frame() -> LocalFrame {
    let description =
        MapDescription { pixel_scale_arcsec: Some([0.5, 0.5]), ..MapDescription::default() };
    SkyGeometry::new(SIZE, SIZE, &description, Rows::BottomUp).local_frame(Pixel::new(30.0, 30.0))
}

fn beam() -> Beam {
    Beam { major: 3.0, minor: 2.0, pa_deg: 30.0 }
}

/// Points of given brightness on a sloping base.
fn window(points: &[(Pixel, f64)], level: f64, slope: f64) -> Window {
    let frame = frame();
    let beam = beam();
    let brightness = Array2::from_shape_fn((SIZE, SIZE), |(r, c)| {
        let at = Pixel::new(c as f64, r as f64);
        let sky: f64 = points.iter().map(|(p, b)| b * beam.profile(frame.difference(*p, at))).sum();
        sky + level + slope * frame.offset(at).east
    });
    Window {
        x0: 0,
        y0: 0,
        rms: Array2::from_elem((SIZE, SIZE), 0.1),
        member: Array2::from_elem((SIZE, SIZE), true),
        foreign: Array2::from_elem((SIZE, SIZE), false),
        brightness,
    }
}

fn noise() -> (Noise, NoiseCorrelation) {
    (Noise::uniform(SIZE, SIZE, 0.0, 0.1), NoiseCorrelation::white())
}

fn peak(pixel: Pixel, value: f64) -> Peak {
    Peak { pixel, value, signal_to_noise: value / 0.1 }
}

/// A fit on a window of the noise above.
fn fitted(window: &Window, fit: impl Fn(&FitContext) -> Option<PointFit>) -> PointFit {
    let (noise, correlation) = noise();
    let (beam, frame) = (beam(), frame());
    fit(&FitContext { window, beam: &beam, frame: &frame, noise: (&noise, &correlation) })
        .expect("a fit")
}

/// A straight ridge from the middle of the map.
fn ridge(bearing_deg: f64) -> Ridge {
    let points = (1..=12)
        .map(|k| RidgePoint {
            distance: f64::from(k),
            bearing_deg,
            offset: SkyOffset::polar(f64::from(k), bearing_deg),
            brightness: 1.0,
            rms: 0.1,
            beam_width: 1.0,
            width_model: 0.0,
            width: Measurement::missing(Because::Unresolved),
            width_deconvolved: Measurement::missing(Because::Unresolved),
        })
        .collect();
    Ridge { start_deg: bearing_deg, detected: true, points, end: None }
}

/// Points that make a jet of a brightness (on its ridge, as a function of the distance) from the
/// middle of the map.
fn jet(bearing_deg: f64, brightness: impl Fn(f64) -> f64) -> Vec<(Pixel, f64)> {
    let step = 0.1;
    // Points of peak p every `step` along a line add up to p · (cut of the beam along the
    // line) · 1.0645 / step.
    let unit = step / (1.064_467 * beam().reach_along(bearing_deg));
    let distance = |k: u32| (f64::from(k) + 0.5) * step;
    (0..130)
        .map(distance)
        .map(|d| {
            let at = frame().moved(Pixel::new(30.0, 30.0), SkyOffset::polar(d, bearing_deg));
            (at, unit * brightness(d))
        })
        .collect()
}

#[test]
fn a_point_on_a_slope_is_recovered_exactly() {
    let truth = Pixel::new(31.3, 28.6);
    let window = window(&[(truth, 5.0)], 0.7, 0.1);
    let fit = fitted(&window, |context| fit_point(context, Pixel::new(31.0, 29.0), Placing::Free));
    // Noise-free and linear but for the position, which converges quadratically.
    assert!(fit.pixel.distance_px(truth) < 1e-6, "{:?}", fit.pixel);
    assert!((fit.peak - 5.0).abs() < 1e-6);
    assert!(fit.residual < 1e-6);
    // A place that is known stays, and its fit is biased by the way it is off.
    let start = Pixel::new(31.0, 29.0);
    let fixed = fitted(&window, |context| fit_point(context, start, Placing::fixed(&beam())));
    assert!(fixed.pixel.distance_px(start) < 1e-6 && fixed.peak < 5.0);
}

#[test]
fn jets_that_start_at_the_core_are_taken_off() {
    let core = Pixel::new(30.0, 30.0);
    let mut points = vec![(core, 5.0)];
    points.extend(jet(30.0, |_| 3.0));
    points.extend(jet(200.0, |_| 1.0));
    let flat = window(&points, 0.2, 0.0);
    let ridges = [ridge(30.0), ridge(200.0)];
    let both = [&ridges[0], &ridges[1]];
    let on_jets = |window: &Window| {
        fitted(window, |context| fit_core(context, core, Placing::Free, &both, core))
    };
    // The core of 5 at its place, to a small part of the error stated for jets this bright.
    let fit = on_jets(&flat);
    assert!((fit.peak - 5.0).abs() < 0.25 * fit.peak_sigma, "{fit:?}");
    assert!((fit.peak - 5.0).abs() < 0.05, "{fit:?}");
    assert!(fit.pixel.distance_px(core) < 0.05, "{fit:?}");
    assert!(fit.peak_sigma > fit.peak_noise);
    // What a sloping plane makes of it: part of the jets' start counts as core, and the brighter
    // jet pulls it.
    let on_plane = fitted(&flat, |context| fit_point(context, core, Placing::Free));
    assert!(on_plane.peak > 5.5, "{on_plane:?}");
    assert!(on_plane.pixel.distance_px(core) > 4.0 * fit.pixel.distance_px(core));

    // Jets that fade by half over a beam, and a knot as bright as the core a beam away.
    let mut points = vec![(core, 5.0), (frame().moved(core, SkyOffset::polar(3.0, 30.0)), 5.0)];
    points.extend(jet(30.0, |d| 3.0 * (-0.2 * d).exp()));
    points.extend(jet(200.0, |d| (-0.2 * d).exp()));
    let fit = on_jets(&window(&points, 0.2, 0.0));
    // Blended along the beam's long axis: the error says so, and holds.
    assert!((fit.peak - 5.0).abs() < 2.0 * fit.peak_sigma, "{fit:?}");
    assert!(fit.peak_sigma > 0.5 && fit.peak_sigma < 1.5, "{fit:?}");
    assert!(fit.pixel.distance_px(core) * 0.5 < 3.0 * fit.position.sigma(), "{fit:?}");
}

#[test]
fn errors_are_the_scatter_of_fits() {
    // White noise: 400 draws; their scatter is known to 3.5 %. A point alone on a plane at a
    // fixed place, and free with the error of its place.
    let at = Pixel::new(30.0, 30.0);
    let clean = window(&[(at, 5.0)], 0.0, 0.0);
    let (mut peaks, mut east, mut north) = (Vec::new(), Vec::new(), Vec::new());
    let (mut peak_sigma, mut position) = (0.0, super::core_fit::PositionError::default());
    for seed in 0..400 {
        let mut noisy = clean.clone();
        noisy.brightness +=
            &(crate::simulate::unit_noise(SIZE, SIZE, crate::simulate::NoiseKind::White, seed)
                * 0.1);
        let fixed = fitted(&noisy, |context| fit_point(context, at, Placing::fixed(&beam())));
        peaks.push(fixed.peak);
        peak_sigma = fixed.peak_sigma;
        let free = fitted(&noisy, |context| fit_core(context, at, Placing::Free, &[], at));
        let off = frame().offset(free.pixel);
        east.push(off.east);
        north.push(off.north);
        position = free.position;
    }
    let mean = |values: &[f64]| values.iter().sum::<f64>() / 400.0;
    let scatter = |values: &[f64]| {
        let middle = mean(values);
        (values.iter().map(|v| (v - middle).powi(2)).sum::<f64>() / 399.0).sqrt()
    };
    let close = |values: &[f64], stated: f64| {
        assert!((scatter(values) / stated - 1.0).abs() < 0.11, "{} {stated}", scatter(values));
    };
    close(&peaks, peak_sigma);
    close(&east, position.east_east.sqrt());
    close(&north, position.north_north.sqrt());
    assert!((mean(&peaks) - 5.0).abs() < 4.0 * peak_sigma / 20.0);
    // The beam is longer towards north-east: the two errors go together.
    let product: Vec<f64> = east.iter().zip(&north).map(|(a, b)| a * b).collect();
    let together = mean(&product) / (scatter(&east) * scatter(&north));
    assert!((together - position.correlation()).abs() < 0.15 && together > 0.2, "{together}");
}

#[test]
fn a_ridge_seen_from_beside_keeps_its_points() {
    let shift = SkyOffset::new(0.3, -0.2);
    let seen = ridge(70.0).seen_from(shift);
    for (before, after) in ridge(70.0).points.iter().zip(&seen.points) {
        assert!(after.offset.plus(shift).minus(before.offset).radius() < 1e-12);
        let polar = SkyOffset::polar(after.distance, after.bearing_deg);
        assert!(polar.minus(after.offset).radius() < 1e-9);
    }
}

#[test]
fn the_host_marks_the_core_and_bounds_its_flux() {
    let (noise, correlation) = noise();
    let lobes = [(Pixel::new(18.0, 30.0), 8.0), (Pixel::new(42.0, 30.0), 8.0)];
    let choose = |window: &Window, known: KnownCore, peaks: &[Peak]| {
        let ends = [Pixel::new(14.0, 30.0), Pixel::new(46.0, 30.0)];
        let (beam, frame) = (beam(), frame());
        let context =
            FitContext { window, beam: &beam, frame: &frame, noise: (&noise, &correlation) };
        choose_core(&context, peaks, known, ends, 1.645)
    };
    let lobe_peaks: Vec<Peak> = lobes.iter().map(|(p, v)| peak(*p, *v)).collect();
    let host = KnownCore { host: Some(Pixel::new(30.0, 30.0)), given: None };

    let without = choose(&window(&lobes, 0.0, 0.0), host, &lobe_peaks);
    assert_eq!(without.basis, CoreBasis::Host);
    assert!(without.fit.is_none());
    // Nothing there: the bound is the noise's, 1.645 × 0.1.
    assert!((without.peak_upper.expect("a bound") - 0.1645).abs() < 1e-3);

    let mut all = lobes.to_vec();
    all.push((Pixel::new(30.4, 30.2), 2.0));
    let mut peaks = lobe_peaks.clone();
    peaks.push(peak(Pixel::new(30.4, 30.2), 2.0));
    let with = choose(&window(&all, 0.0, 0.0), host, &peaks);
    assert!(with.pixel.expect("a core").distance_px(Pixel::new(30.4, 30.2)) < 0.01);
    assert!((with.fit.expect("a fit").peak - 2.0).abs() < 0.01);

    // Without a host the compact one in the middle is chosen, without one nothing is.
    let found = choose(&window(&all, 0.0, 0.0), KnownCore::default(), &peaks);
    assert_eq!(found.basis, CoreBasis::CompactCentral);
    assert!(found.pixel.expect("a core").distance_px(Pixel::new(30.4, 30.2)) < 0.01);

    // Two alike are hot spots: no core is invented.
    let none = choose(&window(&lobes, 0.0, 0.0), KnownCore::default(), &lobe_peaks);
    assert_eq!((none.basis, none.pixel), (CoreBasis::None, None));
    // A bright end with a knot of a fifth is a core with a one-sided jet.
    let jet = [(Pixel::new(18.0, 30.0), 10.0), (Pixel::new(38.0, 30.0), 2.0)];
    let jet_peaks: Vec<Peak> = jet.iter().map(|(p, v)| peak(*p, *v)).collect();
    let end = choose(&window(&jet, 0.0, 0.0), KnownCore::default(), &jet_peaks);
    assert_eq!(end.basis, CoreBasis::OneSidedEnd);
    assert!(end.pixel.expect("a core").distance_px(Pixel::new(18.0, 30.0)) < 0.01);

    let given = KnownCore { given: Some(Pixel::new(25.0, 31.0)), host: host.host };
    let used = choose(&window(&all, 0.0, 0.0), given, &peaks);
    assert_eq!((used.basis, used.pixel), (CoreBasis::Given, given.given));
}

#[test]
fn inverse_times_matrix_is_one() {
    let m = vec![vec![4.0, 1.0, 0.5], vec![1.0, 3.0, 0.2], vec![0.5, 0.2, 2.0]];
    let inverse = invert_symmetric(&m).expect("positive definite");
    for (i, row) in inverse.iter().enumerate() {
        for j in 0..3 {
            let product: f64 = row.iter().zip(&m).map(|(a, line)| a * line[j]).sum();
            assert!((product - f64::from(u8::from(i == j))).abs() < 1e-12);
        }
    }
    assert!(invert_symmetric(&[vec![1.0, 1.0], vec![1.0, 1.0]]).is_none());
}
