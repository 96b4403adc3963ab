//! Tests of the core's choice and of its fit.

use ndarray::Array2;

use super::core::{CORE_DETECTION_SIGMA, Core, KnownCore, Peak, choose_core};
use super::core_fit::{FitContext, Placing, fit_core, fit_point, invert_symmetric};
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
    SkyGeometry::new(SIZE, SIZE, &description, Rows::BottomUp)
        .local_frame(Pixel::new(30.0, 30.0))
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
        let sky: f64 =
            points.iter().map(|(p, b)| b * beam.profile(frame.difference(*p, at))).sum();
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

#[test]
fn a_point_on_a_slope_is_recovered_exactly() {
    let truth = Pixel::new(31.3, 28.6);
    let window = window(&[(truth, 5.0)], 0.7, 0.1);
    let (noise, correlation) = noise();
    let start = Pixel::new(31.0, 29.0);
    let fit = fit_point(&window, start, true, &beam(), &frame(), (&noise, &correlation))
        .expect("a fit");
    // Noise-free and linear but for the position, which converges quadratically.
    assert!(fit.pixel.distance_px(truth) < 1e-6, "{:?}", fit.pixel);
    assert!((fit.peak - 5.0).abs() < 1e-6);
    assert!(fit.residual < 1e-6);
}

#[test]
fn jets_that_start_at_the_core_are_taken_off() {
    // A line of points half a pixel apart for each jet, summed through the beam: brightness
    // 3 and 1 per beam on the ridge, at 30° and 200°.
    let core = Pixel::new(30.0, 30.0);
    let frame = frame();
    let mut points = vec![(core, 5.0)];
    for (bearing, level) in [(30.0, 3.0), (200.0, 1.0)] {
        let step = 0.1;
        // Points of peak p every `step` along a line add up to p · (cut of the beam along
        // the line) · 1.0645 / step.
        let peak = level * step / (1.064_467 * beam().reach_along(bearing));
        for k in 0..130 {
            let d = (f64::from(k) + 0.5) * step;
            points.push((frame.moved(core, SkyOffset::polar(d, bearing)), peak));
        }
    }
    let window = window(&points, 0.2, 0.0);
    let (noise, correlation) = noise();
    let noise = (&noise, &correlation);
    let on_jets = fit_point_on_jets(&window, core, &[30.0, 200.0], &beam(), &frame, noise);
    let peak = on_jets.expect("a fit").peak;
    assert!((peak - 5.0).abs() < 0.03, "{peak}");
    // What a sloping plane makes of it: part of the jets' start counts as core.
    let on_plane = fit_point(&window, core, false, &beam(), &frame, noise).expect("a fit");
    assert!(on_plane.peak > 5.5, "{}", on_plane.peak);
}

#[test]
fn error_of_the_peak_is_the_scatter_of_fits() {
    // White noise at a fixed position: 400 draws; their scatter is known to 3.5 %.
    let (noise, correlation) = noise();
    let at = Pixel::new(30.0, 30.0);
    let clean = window(&[(at, 5.0)], 0.0, 0.0);
    let mut peaks = Vec::new();
    let mut stated = 0.0;
    for seed in 0..400 {
        let mut noisy = clean.clone();
        noisy.brightness +=
            &(crate::simulate::unit_noise(SIZE, SIZE, crate::simulate::NoiseKind::White, seed)
                * 0.1);
        let fit = fit_point(&noisy, at, false, &beam(), &frame(), (&noise, &correlation))
            .expect("a fit");
        peaks.push(fit.peak);
        stated = fit.peak_sigma;
    }
    let mean = peaks.iter().sum::<f64>() / 400.0;
    let scatter = (peaks.iter().map(|p| (p - mean).powi(2)).sum::<f64>() / 399.0).sqrt();
    assert!((scatter / stated - 1.0).abs() < 0.11, "{scatter} against {stated}");
    assert!((mean - 5.0).abs() < 4.0 * stated / 20.0);
}

#[test]
fn the_host_marks_the_core_and_bounds_its_flux() {
    let (noise, correlation) = noise();
    let lobes = [(Pixel::new(18.0, 30.0), 8.0), (Pixel::new(42.0, 30.0), 8.0)];
    let choose = |window: &Window, known: KnownCore, peaks: &[Peak]| {
        let ends = [Pixel::new(14.0, 30.0), Pixel::new(46.0, 30.0)];
        choose_core(
            window,
            peaks,
            known,
            ends,
            &beam(),
            &frame(),
            (&noise, &correlation),
            1.645,
        )
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
