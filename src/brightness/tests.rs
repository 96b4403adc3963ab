//! Strips against closed forms; ratios and limits of noisy fluxes.

use ndarray::Array2;

use super::*;
use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::{Noise, NoiseCorrelation};
use crate::ridge::Ridge;
use crate::units::{Pixel, wrap_difference_deg};
use crate::window::Window;

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

/// North up, east left, a pixel a unit, the core in the middle of 161 × 161 px.
const FRAME: LocalFrame = LocalFrame {
    origin: Pixel::new(80.0, 80.0),
    to_sky: [[-1.0, 0.0], [0.0, 1.0]],
    to_pixel: [[-1.0, 0.0], [0.0, 1.0]],
};

/// A window of which the brightness is a function of the distance from the core and of that
/// across a straight line through it to north and south (along the circle).
fn window(brightness: impl Fn(f64, f64) -> f64) -> Window {
    let cells = Array2::from_shape_fn((161, 161), |(r, c)| {
        let offset = FRAME.offset(Pixel::new(c as f64, r as f64));
        let pa = offset.position_angle_deg();
        let turn = [0.0, 180.0]
            .map(|axis: f64| wrap_difference_deg(pa - axis))
            .into_iter()
            .min_by(|a, b| a.abs().total_cmp(&b.abs()))
            .unwrap_or(0.0);
        brightness(offset.radius(), offset.radius() * turn.to_radians())
    });
    Window {
        x0: 0,
        y0: 0,
        rms: Array2::from_elem(cells.dim(), 0.01),
        member: Array2::from_elem(cells.dim(), true),
        foreign: Array2::from_elem(cells.dim(), false),
        brightness: cells,
    }
}

fn gaussian(across: f64, fwhm: f64) -> f64 {
    (-4.0 * std::f64::consts::LN_2 * (across / fwhm).powi(2)).exp()
}

fn straight(deg: f64) -> Ridge {
    Ridge { start_deg: deg, detected: false, points: Vec::new(), end: None }
}

fn placed() -> PlacedStrip {
    PlacedStrip {
        strip: Strip { inner: 12.0, outer: 52.0, half_width: 3.25, jet_fwhm: 5.0 },
        reference: 0,
        follows: [false; 2],
        axis_deg: [0.0, 180.0],
        lobe: [false; 2],
    }
}

fn measured(window: &Window, placed: &PlacedStrip) -> StripPair {
    let noise = Noise::uniform(161, 161, 0.0, 0.01);
    let around = PolarCells::around(window, &FRAME, 60.0);
    let (a, b) = (straight(0.0), straight(180.0));
    let ends = (placed.strip.inner, placed.strip.outer);
    let white = NoiseCorrelation::white();
    measure_strips(window, &FRAME, &around, [&a, &b], placed, ends, (&noise, &white))
}

#[test]
fn a_base_of_fourth_order_leaves_the_jet_alone() {
    let base = |x: f64| 3.0 - 0.2 * x + 0.02 * x * x - 4e-5 * x.powi(4);
    let window = window(|_, x| 2.0 * gaussian(x, 5.0) + base(x));
    let pair = measured(&window, &placed());
    // Area along times across: 40 × 2 ∫ over ±3.25 of a Gaussian of FWHM 5 and height 1.
    let across = 5.0
        * (std::f64::consts::PI / (4.0 * std::f64::consts::LN_2)).sqrt()
        * libm::erf(2.0 * std::f64::consts::LN_2.sqrt() * 3.25 / 5.0);
    for flux in &pair.fluxes {
        // The base holds 13 times the jet's flux; edges are shares of 25 points a pixel.
        assert!((flux.sum / (80.0 * across) - 1.0).abs() < 0.01, "{} {}", flux.sum, 80.0 * across);
    }
    // White noise of 0.01 in 260 pixels and what the bands add.
    let sigma = pair.variance[0].sqrt();
    assert!(sigma > 0.01 * 260f64.sqrt(), "{sigma}");
}

#[test]
fn a_wide_bridge_is_taken_off_to_a_hundredth_and_what_is_left_is_in_the_error() {
    // A Gaussian bridge five times wider and as bright as the jet.
    let with = measured(&window(|_, x| gaussian(x, 5.0) + gaussian(x, 25.0)), &placed());
    let without = measured(&window(|_, x| gaussian(x, 5.0)), &placed());
    let left = with.fluxes[0].sum - without.fluxes[0].sum;
    let bridge = 40.0 * 6.5;
    assert!((left / bridge).abs() < 0.012, "{left} of {bridge}");
    let noise = without.variance[0];
    let model = (with.variance[0] - noise).sqrt();
    assert!(model > left.abs(), "{model} covers {left}");
}

#[test]
fn holes_leave_the_flux_of_a_jet_where_it_was() {
    let whole = window(|_, x| gaussian(x, 5.0));
    let mut holed = whole.clone();
    for ((r, c), value) in holed.brightness.indexed_iter_mut() {
        if (r as f64 - 105.0).hypot(c as f64 - 81.0) < 4.0 {
            *value = f64::NAN;
        }
    }
    let (a, b) = (measured(&whole, &placed()), measured(&holed, &placed()));
    for side in [0, 1] {
        // The place opposite the hole is left out as well.
        assert!(b.fluxes[side].blank_fraction > 0.1, "{}", b.fluxes[side].blank_fraction);
        assert!((b.fluxes[side].sum / a.fluxes[side].sum - 1.0).abs() < 0.02);
    }
}

#[test]
fn strips_end_before_flares_and_widen_with_the_jet() {
    let beam = Beam::round(5.0).expect("a beam");
    let noise = Noise::uniform(161, 161, 0.0, 0.01);
    let (a, b) = (straight(0.0), straight(180.0));
    let beams = (&noise, 28.3);
    // Emission beside the jet begins at 40: the strip ends a beam before.
    let flare = window(|r, x| gaussian(x, 5.0) + if r > 40.0 { 0.3 } else { 0.0 });
    let around = PolarCells::around(&flare, &FRAME, 70.0);
    let short = placed().short_of_flares(&flare, &FRAME, &around, [&a, &b], &beam, beams);
    // Pieces of half a beam: 39.5 is the last that begins before 40, 42 the first inside.
    assert!((34.0..=37.5).contains(&short.strip.outer), "{}", short.strip.outer);
    let even = window(|_, x| gaussian(x, 5.0) + 0.3);
    let kept = placed().short_of_flares(&even, &FRAME, &around, [&a, &b], &beam, beams);
    assert!((kept.strip.outer - 52.0).abs() < 1e-12, "an even bridge is no flare");
    // A jet of 8 on a bridge of 40: the nearest width tried is 7.8.
    let wide = window(|_, x| gaussian(x, 8.0) + 0.5 * gaussian(x, 40.0));
    let around = PolarCells::around(&wide, &FRAME, 60.0);
    let fitted = placed().fitted_to_jet(&wide, &FRAME, &around, [&a, &b], beams);
    assert!((fitted.strip.jet_fwhm - 7.8).abs() < 1e-9, "{}", fitted.strip.jet_fwhm);
    assert!((fitted.strip.half_width / fitted.strip.jet_fwhm - 0.65).abs() < 1e-12);
}
