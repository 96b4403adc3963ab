//! Made maps: the truth is known, so bias and error bars can be judged. Seeds are fixed; the
//! numbers of draws set the tolerances (binomial errors stated beside them).

use jetspan::measurement::Measurement;
use jetspan::record::{CoreBasis, MapRecord, Role, Status};
use jetspan::settings::Settings;
use jetspan::simulate::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, jet};

use crate::support::measure_array;

/// A map in Jy/beam with pixels of 1 arcsec and a round beam, measured with the defaults.
fn measured(scene: &Scene, more: &str) -> MapRecord {
    let text = format!(
        r#"{{"pixel_scale_arcsec": 1.0, "beam_major_arcsec": {}, "unit": "mJy/beam"{more}}}"#,
        scene.beam.major_px
    );
    measure_array(&scene.render(), &text, &Settings::default()).expect("a record")
}

const BEAM_PX: f64 = 5.0;
const MIDDLE: f64 = 99.5;

/// A two-sided source along the position angle 60°: core, two straight jets of constant
/// brightness, lobes with hot spots 60 px out. `jet_flux` and `counter_flux` are those of the
/// whole jets in units of the rms.
fn two_sided(jet_flux: f64, counter_flux: f64, seed: u64) -> Scene {
    let beam = GaussianShape::circular(BEAM_PX);
    let mut scene = Scene::empty(200, 200, beam);
    // North is up (rows bottom-up) and east left: position angle p points to (−sin p, cos p).
    let (sin, cos) = 60f64.to_radians().sin_cos();
    let at = |d: f64| (MIDDLE - d * sin, MIDDLE + d * cos);
    let point = |d: f64, peak: f64, fwhm: f64| GaussianComponent {
        x_px: at(d).0,
        y_px: at(d).1,
        amount: Amount::Peak(peak),
        shape: GaussianShape::circular(fwhm),
    };
    scene.components.push(point(0.0, 150.0, 0.0));
    scene.components.extend(jet(at(0.5), at(48.0), jet_flux, 1.0, 96));
    scene.components.extend(jet(at(-0.5), at(-48.0), counter_flux, 1.0, 96));
    for d in [60.0, -60.0] {
        scene.components.push(point(d, 80.0, 1.0));
        scene.components.push(point(d * 0.92, 25.0, 9.0));
    }
    scene.noise = Some((NoiseKind::Smoothed(beam), 1.0, seed));
    scene
}

/// Whether a 68 % interval holds a value.
fn holds(m: Measurement, truth: f64) -> Option<bool> {
    match m {
        Measurement::Value { value, minus, plus, .. } => {
            Some((value - minus..=value + plus).contains(&truth))
        }
        _ => None,
    }
}

#[test]
fn interval_of_the_ratio_holds_the_truth_two_times_in_three() {
    // Jets of 28 and 7 rms brightness on the ridge: R = 4, the fainter strip at 7σ. 200 draws of an honest 68 %
    // interval give 60–76 % in 98.5 of 100 such tests (binomial).
    let mut inside = 0;
    let mut pulls = Vec::new();
    for seed in 0..200 {
        let record =
            measured(&two_sided(240.0, 60.0, seed), r#", "host_x_px": 99.5, "host_y_px": 99.5"#);
        assert_eq!(record.sides[0].role, Role::Jet);
        let ratio = record.brightness.jet_to_counter_jet_ratio;
        let Measurement::Value { value, minus, plus, .. } = ratio else {
            panic!("a value at this brightness, got {ratio:?}");
        };
        inside += i32::from(holds(ratio, 4.0).expect("a value"));
        pulls.push((value / 4.0).ln() / (0.5 * (minus + plus) / value));
    }
    pulls.sort_by(f64::total_cmp);
    let share = f64::from(inside) / 200.0;
    let median = 0.5 * (pulls[99] + pulls[100]);
    eprintln!("R = 4: share inside {share}, median pull {median:.3}");
    assert!((0.60..=0.76).contains(&share), "68 % interval holds {share}");
    // Bias: the median of 200 unit deviates is known to 0.09; three of those.
    assert!(median.abs() < 0.27, "median pull {median}");
}

/// The two-sided source without lobes and hot spots, or with wide lobes close to the jets.
fn with_ends(jet_flux: f64, counter_flux: f64, wide_lobes: bool, seed: u64) -> Scene {
    let mut scene = two_sided(jet_flux, counter_flux, seed);
    // Core and 2 × 96 points of the jets stay.
    scene.components.truncate(193);
    if wide_lobes {
        let (sin, cos) = 60f64.to_radians().sin_cos();
        for d in [60.0, -60.0] {
            for (share, amount, fwhm) in
                [(1.0, Amount::Peak(80.0), 1.0), (0.9, Amount::Flux(400.0), 14.0)]
            {
                scene.components.push(GaussianComponent {
                    x_px: MIDDLE - share * d * sin,
                    y_px: MIDDLE + share * d * cos,
                    amount,
                    shape: GaussianShape::circular(fwhm),
                });
            }
        }
    }
    scene
}

#[test]
fn ratio_holds_for_jets_without_lobes_and_beside_wide_lobes() {
    for (wide_lobes, seed0) in [(false, 11_000), (true, 12_000)] {
        let (mut inside, mut values) = (0, Vec::new());
        for seed in seed0..seed0 + 100 {
            let scene = with_ends(480.0, 60.0, wide_lobes, seed);
            let record = measured(&scene, r#", "host_x_px": 99.5, "host_y_px": 99.5"#);
            let ratio = record.brightness.jet_to_counter_jet_ratio;
            let Measurement::Value { value, .. } = ratio else {
                panic!("lobes {wide_lobes}, seed {seed}: a value, got {ratio:?}");
            };
            inside += i32::from(holds(ratio, 8.0).expect("a value"));
            values.push(value);
        }
        values.sort_by(f64::total_cmp);
        let median = 0.5 * (values[49] + values[50]);
        eprintln!("R = 8, wide lobes {wide_lobes}: {inside} of 100 inside, median {median:.2}");
        // 68 of 100 within three binomial errors of 4.7; the median of R's known to 1.5 %, and
        // what is left of the lobes' wings under the strip.
        assert!((54..=82).contains(&inside), "{inside}");
        assert!((median / 8.0 - 1.0).abs() < 0.06, "{median}");
    }
}

#[test]
fn core_flux_leaves_the_jets_out() {
    // A core of 150 rms on jets of 27 and 7 rms that begin at it.
    let mut pulls = Vec::new();
    for seed in 21_000..21_060 {
        let scene = two_sided(240.0, 60.0, seed);
        let record = measured(&scene, r#", "host_x_px": 99.5, "host_y_px": 99.5"#);
        let flux = record.core.flux_density_mjy;
        // The flux scale's error of 5 % is not in the map.
        pulls.push(flux.best().expect("a core") / 150.0 - 1.0);
    }
    let mean = pulls.iter().sum::<f64>() / 60.0;
    eprintln!("core flux: mean off by {:.3} of the truth", mean);
    // 60 draws of 1.5 % each know the mean to 0.2 %; the made jets begin half a pixel out and
    // are a pixel wide, which leaves a per cent.
    assert!(mean.abs() < 0.02, "{mean}");
}

#[test]
fn limits_of_the_ratio_are_true_as_often_as_stated() {
    // Counter-jets of no flux, and of about one and two σ in the strip.
    for (counter, seed0) in [(0.0, 1000), (6.0, 2000), (12.0, 3000)] {
        let (mut limits, mut held) = (0, 0);
        for seed in seed0..seed0 + 100 {
            let record = measured(
                &two_sided(150.0, counter, seed),
                r#", "host_x_px": 99.5, "host_y_px": 99.5"#,
            );
            match record.brightness.jet_to_counter_jet_ratio {
                Measurement::LowerLimit { lower_limit, .. } => {
                    limits += 1;
                    held += i32::from(lower_limit * counter <= 150.0);
                }
                Measurement::Value { .. } => {}
                other => panic!("limit or value, got {other:?}"),
            }
        }
        let share = f64::from(held) / f64::from(limits);
        eprintln!("counter-jet {counter}: {limits} limits, {share} hold");
        assert!(limits >= 60 && share >= 0.90, "counter {counter}: {limits} limits, {share}");
    }
}

#[test]
fn geometry_of_a_known_source_is_recovered() {
    let mut worst: (f64, f64, f64) = (0.0, 0.0, 0.0);
    for seed in 5000..5020 {
        let record =
            measured(&two_sided(240.0, 60.0, seed), r#", "host_x_px": 99.5, "host_y_px": 99.5"#);
        assert_eq!(record.status, Status::Measured);
        assert_eq!(record.core.basis, CoreBasis::Host);
        let separation = record.source.hotspot_separation_arcsec.best().expect("two hot spots");
        let pa = record.sides[0].end_position_angle_deg.best().expect("an end");
        let axis = record.source.position_angle_deg.best().expect("an axis");
        let arms = record.source.arm_length_ratio_jet_side.best().expect("two arms");
        worst.0 = worst.0.max((separation - 120.0).abs());
        worst.1 = worst.1.max((pa - 60.0).abs().max((axis - 60.0).abs()));
        worst.2 = worst.2.max((arms - 1.0).abs());
        // Contour: hot spot of 80 rms at 60 px, level 3 rms: 60 + ½·5.1·√log₂(105/3) on
        // each side; the lobe adds a little. Between the bare hot spot's and one pixel more.
        let size = record.source.largest_angular_size_arcsec.best().expect("a size");
        assert!((size - 2.0 * 65.8).abs() < 2.0, "{size}");
        let total = record.source.total_flux_density_mjy.best().expect("a flux");
        let scene = two_sided(240.0, 60.0, seed);
        let truth: f64 = scene.components.iter().map(|c| scene.flux(c)).sum();
        assert!((total / truth - 1.0).abs() < 0.05, "total {total} of {truth}");
        // The sides and the core make up the total.
        let parts = record.core.flux_density_mjy.best().expect("a core")
            + record.sides[0].flux_density_mjy.best().expect("flux")
            + record.sides[1].flux_density_mjy.best().expect("flux");
        assert!((parts / total - 1.0).abs() < 0.01, "{parts} of {total}");
    }
    eprintln!("worst separation {:.2} px, angle {:.2} deg, arms {:.4}", worst.0, worst.1, worst.2);
    // Hot spots of S/N 80 on a lobe that pulls their peak inwards by less than half a pixel.
    assert!(worst.0 < 1.0 && worst.1 < 0.5 && worst.2 < 0.01);
}

#[test]
fn empty_maps_stay_empty() {
    let beam = GaussianShape::circular(4.0);
    let mut found = 0;
    for seed in 0..100 {
        let mut scene = Scene::empty(200, 200, beam);
        scene.noise = Some((NoiseKind::Smoothed(beam), 1.0, 70_000 + seed));
        let record = measured(&scene, "");
        found += i32::from(record.status != Status::NoDetection);
    }
    // Worsley et al. (1992, J. Cereb. Blood Flow Metab. 12, 900; from memory): noise smoothed
    // with FWHM f has A/f² · 4 ln 2 (2π)^(−3/2) u exp(−u²/2) peaks above u: 0.8 in 100 maps.
    eprintln!("detections in 100 empty maps: {found}");
    assert!(found <= 2);
}

#[test]
fn a_point_source_is_unresolved() {
    let beam = GaussianShape::circular(5.0);
    for seed in 0..20 {
        let mut scene = Scene::empty(120, 120, beam);
        scene.components.push(GaussianComponent {
            x_px: 61.3,
            y_px: 57.8,
            amount: Amount::Peak(60.0),
            shape: GaussianShape::POINT,
        });
        scene.noise = Some((NoiseKind::Smoothed(beam), 1.0, 90_000 + seed));
        let record = measured(&scene, "");
        assert_eq!(record.status, Status::Unresolved, "seed {seed}");
        assert!(record.brightness.jet_to_counter_jet_ratio.is_missing());
        let flux = record.core.flux_density_mjy.best().expect("the point is the core");
        // S/N 60 in a fit with a sloping base: within four of its errors of about 1/40.
        assert!((flux / 60.0 - 1.0).abs() < 0.1, "{flux}");
    }
}
