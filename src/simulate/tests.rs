//! Made sources against closed forms.

use ndarray::Array2;

use super::observe::{Canvas, Observation, described_core};
use super::parameters::Parameters;
use super::source::{Look, Part, SkyGaussian, TwinSource, twin_source};
use super::truth::{Aperture, Truth, TruthInput, truth};
use crate::extent::beam_reach;
use crate::physics::beaming::{
    apparent_speed, arm_length_ratio, doppler_factor, jet_to_counter_jet_ratio,
    proper_motion_mas_per_year,
};
use crate::units::{SkyOffset, wrap_difference_deg};

const LOOK: Look = Look { frequency_ghz: 1.4, years: 0.0, seed: 7 };

/// Two jets of 60 arcsec and nothing else, 300 × 300 px of 1 arcsec, beam 5 arcsec.
fn jets() -> Parameters {
    let mut p = Parameters::default();
    p.source.viewing_angle_deg = 50.0;
    p.source.position_angle_deg = 30.0;
    p.arms.length_arcsec = Some(60.0);
    p.jet.flux_density_mjy = Some(20.0);
    p.jet.speed = 0.6;
    p.map.columns = 301;
    p.map.rows = 301;
    p
}

fn with_everything() -> Parameters {
    let mut p = jets();
    p.core.flux_density_mjy = Some(15.0);
    p.hotspots.flux_density_mjy = 10.0;
    p.lobes.flux_density_mjy = 60.0;
    p.lobes.flux_ratio = 1.3;
    p.bridge.flux_density_mjy = 20.0;
    p.halo.flux_density_mjy = 12.0;
    p.halo.fwhm_arcsec = 50.0;
    p.outer.flux_density_mjy = 8.0;
    p.outer.length_ratio = 1.5;
    p.plumes.flux_density_mjy = 9.0;
    p.plumes.length_arcsec = 20.0;
    p.knots.count = 4;
    p
}

fn seen(p: &Parameters) -> (TwinSource, Observation) {
    let observation = Observation::new(p, described_core(p)).expect("an array");
    let source = twin_source(p, observation.beam.minor, &LOOK).expect("a source");
    (source, observation)
}

fn canvas(observation: &Observation, parts: &[SkyGaussian]) -> Canvas {
    let mut canvas = Canvas::around(observation, parts);
    canvas.add(observation, parts);
    canvas
}

fn truth_of(p: &Parameters, rms: f64) -> Truth {
    let (source, observation) = seen(p);
    let whole = canvas(&observation, &source.parts);
    let input = TruthInput { parameters: p, look: LOOK, rms_mjy_per_beam: rms, whole: &whole };
    truth(source, observation, &input)
}

fn number(truth: &Truth, path: &str) -> f64 {
    truth.values.get(path).unwrap_or_else(|| panic!("{path} is there"))
}

#[test]
fn flux_in_is_flux_out() {
    let p = with_everything();
    let (source, observation) = seen(&p);
    // Each table's flux arrives: twice the mean of the pairs, once what there is one of.
    for (part, flux) in [
        (Part::Core, 15.0),
        (Part::Hotspot, 20.0),
        (Part::Lobe, 120.0),
        (Part::Bridge, 20.0),
        (Part::Halo, 12.0),
        (Part::OuterLobe, 16.0),
        (Part::Plume, 18.0),
    ] {
        let sum = source.flux_of_mjy(part, None);
        assert!((sum / flux - 1.0).abs() < 1e-12, "{part:?}: {sum}");
    }
    let jet = source.flux_of_mjy(Part::Jet, Some(0)) + source.flux_of_mjy(Part::Knot, Some(0));
    assert!((jet / 20.0 - 1.0).abs() < 1e-9, "{jet}");
    let lobes = [0, 1].map(|side| source.flux_of_mjy(Part::Lobe, Some(side)));
    assert!((lobes[0] / lobes[1] - 1.3).abs() < 1e-12);
    let canvas = canvas(&observation, &source.parts);
    let sum = canvas.brightness.sum() / observation.beam_area_px;
    assert!((sum / source.total_flux_mjy() - 1.0).abs() < 1e-5, "{sum}");
    // The array is cut out of the canvas without loss: the source lies inside it.
    let mut array = Array2::zeros((301, 301));
    canvas.add_to(&mut array, 1.0);
    assert!((array.sum() / canvas.brightness.sum() - 1.0).abs() < 1e-4);
    let at = observation.frame.origin;
    let middle = array[(at.y as usize, at.x as usize)];
    let exact = observation.brightness_at(&source.parts, SkyOffset::default());
    assert!((middle / exact - 1.0).abs() < 1e-9, "{middle} {exact}");
}

#[test]
fn the_map_does_not_depend_on_the_size_of_its_pixels() {
    let mut coarse = with_everything();
    coarse.map.beam_minor_arcsec = Some(3.0);
    coarse.map.beam_pa_deg = 20.0;
    let mut fine = coarse;
    fine.map.pixel_scale_arcsec = 0.5;
    (fine.map.columns, fine.map.rows) = (601, 601);
    let array = |p: &Parameters| {
        let (source, observation) = seen(p);
        let mut array = Array2::zeros((p.map.rows, p.map.columns));
        canvas(&observation, &source.parts).add_to(&mut array, 1.0);
        array
    };
    let (coarse, fine) = (array(&coarse), array(&fine));
    let peak = coarse.iter().copied().fold(0.0, f64::max);
    for ((y, x), value) in coarse.indexed_iter() {
        // Both have a pixel at the core, in their middles.
        let other = fine[(2 * y, 2 * x)];
        assert!((value - other).abs() < 1e-9 * peak, "{x} {y}: {value} {other}");
    }
}

/// Sum over the pixels of a map within the strip of one side of a straight jet.
fn strip_sum(canvas: &Canvas, pa_deg: f64, aperture: &Aperture) -> f64 {
    let (along, across) = (SkyOffset::polar(1.0, pa_deg), SkyOffset::polar(1.0, pa_deg + 90.0));
    canvas
        .brightness
        .indexed_iter()
        .filter(|((y, x), _)| {
            let o = canvas.frame.offset(crate::units::Pixel::new(*x as f64, *y as f64));
            let radius = o.radius();
            radius >= aperture.inner_arcsec
                && radius < aperture.outer_arcsec
                && o.dot(along) > 0.0
                && o.dot(across).abs() <= aperture.half_width_arcsec
        })
        .map(|(_, v)| v)
        .sum()
}

#[test]
fn ratio_of_noise_free_strips_is_the_closed_form() {
    for (beta, theta, flow, index, p_wanted) in [
        (0.6, 50.0, "continuous", 0.6, 2.6),
        (0.95, 20.0, "continuous", 0.5, 2.5),
        (0.3, 80.0, "blob", 0.7, 3.7),
        (0.99, 60.0, "blob", 0.0, 3.0),
        (0.0, 40.0, "continuous", 0.6, 2.6),
    ] {
        let mut p = jets();
        p.jet.speed = beta;
        p.source.viewing_angle_deg = theta;
        p.jet.flow = flow;
        p.jet.spectral_index = index;
        p.jet.fade = 1.5;
        p.jet.width_arcsec = 6.0;
        p.map.beam_minor_arcsec = Some(3.0);
        p.map.beam_pa_deg = 75.0;
        let (source, observation) = seen(&p);
        let canvas = canvas(&observation, &source.parts);
        let aperture = Aperture { inner_arcsec: 10.0, outer_arcsec: 50.0, half_width_arcsec: 8.0 };
        let sums = [30.0, 210.0].map(|pa| strip_sum(&canvas, pa, &aperture));
        let wanted = jet_to_counter_jet_ratio(beta, theta, p_wanted).expect("in domain");
        // The core lies on a pixel, so the two strips hold the same pixels turned.
        assert!((sums[0] / sums[1] / wanted - 1.0).abs() < 1e-3, "{beta} {theta}: {sums:?}");
        let truth = truth_of(&p, 0.05);
        let ratio = number(&truth, "brightness.jet_to_counter_jet_ratio");
        assert!((ratio / wanted - 1.0).abs() < 1e-9, "{ratio} {wanted}");
    }
}

#[test]
fn strip_fluxes_agree_with_sums_over_pixels() {
    // A fine grid, so that the strip's edges cut few pixels.
    let mut p = jets();
    p.map.pixel_scale_arcsec = 0.25;
    (p.map.columns, p.map.rows) = (801, 801);
    p.jet.width_arcsec = 5.0;
    p.knots.count = 3;
    let (source, observation) = seen(&p);
    let canvas = canvas(&observation, &source.parts);
    let truth = truth_of(&p, 0.05);
    for aperture in [
        Aperture { inner_arcsec: 10.0, outer_arcsec: 55.0, half_width_arcsec: 5.0 },
        Aperture { inner_arcsec: 15.0, outer_arcsec: 40.0, half_width_arcsec: 2.5 },
    ] {
        let fluxes = truth.strip_fluxes_mjy(&aperture);
        for (index, pa) in [30.0, 210.0].into_iter().enumerate() {
            let sum = strip_sum(&canvas, pa, &aperture) / observation.beam_area_px;
            // Edges are a quarter of an arcsec sharp, and arcs where the formula has lines.
            assert!((fluxes[index] / sum - 1.0).abs() < 0.01, "{} {sum}", fluxes[index]);
        }
    }
}

#[test]
fn a_slowing_jet_shows_the_local_ratio() {
    let mut p = jets();
    p.jet.speed = 0.9;
    p.jet.end_speed = Some(0.3);
    p.jet.slowing_from = 0.25;
    p.jet.slowing_to = 0.75;
    let truth = truth_of(&p, 0.05);
    for (from, to, beta) in [(3.0, 10.0, 0.9), (50.0, 58.0, 0.3)] {
        let aperture = Aperture { inner_arcsec: from, outer_arcsec: to, half_width_arcsec: 8.0 };
        let [jet, counter] = truth.strip_fluxes_mjy(&aperture);
        let wanted = jet_to_counter_jet_ratio(beta, 50.0, 2.6).expect("in domain");
        // Slowing begins at 15 and ends at 45 arcsec: the beam (σ 2.1) reaches neither strip.
        assert!((jet / counter / wanted - 1.0).abs() < 0.01, "{beta}: {}", jet / counter);
    }
    let half = truth.source.speed_at(30.0);
    assert!((half - 0.6).abs() < 1e-12, "half-way of a linear fall: {half}");
}

#[test]
fn sizes_and_bearings_of_two_points_are_the_closed_form() {
    // Hot spots alone, unequal arms: the contour of a point of peak S at level c reaches
    // ½ b √log₂(S/c) beyond it.
    let mut p = jets();
    p.jet.flux_density_mjy = None;
    p.hotspots.flux_density_mjy = 20.0;
    p.hotspots.flux_ratio = 3.0;
    p.arms.advance_speed = 0.2;
    p.arms.environment_ratio = 1.4;
    let truth = truth_of(&p, 0.1);
    let ratio = 1.4 * arm_length_ratio(0.2, 50.0).expect("in domain");
    assert!((number(&truth, "source.arm_length_ratio") / ratio - 1.0).abs() < 1e-9);
    let separation = number(&truth, "source.hotspot_separation_arcsec");
    assert!((separation - 120.0).abs() < 1e-9, "mean arm 60: {separation}");
    let reach = beam_reach(30.0, 0.3, 5.0) + beam_reach(10.0, 0.3, 5.0);
    let size = number(&truth, "source.largest_angular_size_arcsec");
    // Marching squares on pixels of a fifth of the beam.
    assert!((size - separation - reach).abs() < 0.05, "{size}");
    let deconvolved = number(&truth, "source.largest_angular_size_deconvolved_arcsec");
    assert!((deconvolved - separation).abs() < 0.06, "{deconvolved}");
    // Without a jet no side is the jet's: the first is the one that points to [0°, 180°).
    assert!((number(&truth, "sides.0.end_position_angle_deg") - 30.0).abs() < 1e-9);
    assert!((number(&truth, "sides.1.end_position_angle_deg") - 210.0).abs() < 1e-9);
    assert_eq!(truth.values.word("sides.0.role"), Some("first"));
    let long = number(&truth, "sides.0.hotspot.distance_arcsec");
    let length = number(&truth, "sides.0.length_arcsec");
    assert!((length - long - beam_reach(30.0, 0.3, 5.0)).abs() < 0.05);
    assert!((number(&truth, "source.fr_ratio_deconvolved") - 1.0).abs() < 1e-2);
    assert_eq!(truth.values.word("source.fr_class.class"), Some("II"));
}

#[test]
fn bends_turn_by_the_angle_asked_for_and_keep_their_symmetry() {
    for (shape, sign) in [("inversion", 1.0), ("mirror", -1.0)] {
        let mut p = jets();
        p.bend.shape = shape;
        p.bend.angle_deg = 60.0;
        p.bend.from = 0.5;
        p.bend.to = 1.0;
        let (source, _) = seen(&p);
        for (side, start, sign) in [(0, 30.0, 1.0), (1, 210.0, sign)] {
            let (_, direction) = source.paths[side].at(60.0);
            assert!((wrap_difference_deg(direction - start) - sign * 60.0).abs() < 1e-9);
            // 30 arcsec straight on, then an arc of 30 arcsec: its chord is
            // 2 (s/τ) sin(τ/2) = 28.648 at half the turn.
            let end = SkyOffset::polar(30.0, start)
                .plus(SkyOffset::polar(28.647_889_756_541_16, start + sign * 30.0));
            assert!(source.paths[side].at(60.0).0.minus(end).radius() < 1e-9, "{shape} {side}");
        }
        let mean = source.paths[0].at(60.0).0.plus(source.paths[1].at(60.0).0);
        // Inversion: each point's opposite is on the other side.
        assert_eq!(mean.radius() < 1e-9, shape == "inversion");
        let t = source.paths[0].reaching(40.0).expect("reached");
        assert!((source.paths[0].at(t).0.radius() - 40.0).abs() < 1e-9);
        assert_eq!(source.paths[0].reaching(61.0), None);
    }
}

#[test]
fn a_helix_swings_to_both_sides_of_its_axis() {
    let mut p = jets();
    p.bend.helix_amplitude_arcsec = 4.0;
    p.bend.helix_period_arcsec = 40.0;
    let (source, _) = seen(&p);
    let across = SkyOffset::polar(1.0, 120.0);
    for (t, aside) in [(10.0, 4.0), (20.0, 0.0), (30.0, -4.0), (40.0, 0.0)] {
        let offset = source.paths[0].at(t).0;
        assert!((offset.dot(across) - aside).abs() < 1e-9, "{t}");
        // Precession about the core: the other jet swings the other way.
        assert!(source.paths[1].at(t).0.plus(offset).radius() < 1e-9);
    }
}

#[test]
fn the_core_is_boosted_on_both_sides() {
    let mut p = jets();
    p.core.unbeamed_flux_density_mjy = Some(2.0);
    p.core.lorentz_factor = Some(5.0);
    p.core.spectral_index = 0.1;
    p.source.viewing_angle_deg = 20.0;
    let (source, _) = seen(&p);
    let beta = (1.0f64 - 1.0 / 25.0).sqrt();
    let boost = |theta| doppler_factor(beta, theta).expect("in domain").powf(2.1);
    let wanted = 2.0 * (boost(20.0) + boost(160.0));
    assert!((source.flux_of_mjy(Part::Core, None) / wanted - 1.0).abs() < 1e-12);
    // At the pole's angle of 90° both jets of unbeamed flux F show F δ^p each.
    let mut p = jets();
    p.source.viewing_angle_deg = 90.0;
    p.jet.flux_density_mjy = None;
    p.jet.unbeamed_flux_density_mjy = Some(10.0);
    let (source, _) = seen(&p);
    let wanted = 10.0 * 0.8f64.powf(2.6);
    for side in [0, 1] {
        let flux = source.flux_of_mjy(Part::Jet, Some(side));
        assert!((flux / wanted - 1.0).abs() < 1e-9, "δ = 1/Γ = 0.8 at 90°: {flux}");
    }
}

#[test]
fn spectra_and_lengths_follow_frequency_and_redshift() {
    let mut p = with_everything();
    p.source.redshift = Some(0.1);
    p.arms.length_arcsec = None;
    p.arms.length_kpc = Some(200.0);
    let at = |frequency_ghz: f64| {
        twin_source(&p, 5.0, &Look { frequency_ghz, ..LOOK }).expect("a source")
    };
    let (low, high) = (at(1.4), at(14.0));
    for (part, index) in [(Part::Core, 0.0), (Part::Jet, 0.6), (Part::Lobe, 0.8)] {
        let ratio = low.flux_of_mjy(part, None) / high.flux_of_mjy(part, None);
        assert!((ratio / 10f64.powf(index) - 1.0).abs() < 1e-9, "{part:?}");
    }
    // 200 kpc × sin 50° at 1.8443 kpc/arcsec (z = 0.1, H₀ 70, Ω_m 0.3, flat; astropy 6,
    // FlatLambdaCDM, from memory to four digits).
    assert!((low.arms_arcsec[0] - 200.0 * 50f64.to_radians().sin() / 1.8443).abs() < 0.05);
}

#[test]
fn moving_knots_run_at_the_apparent_speed() {
    let mut p = jets();
    p.source.redshift = Some(0.5);
    p.source.viewing_angle_deg = 10.0;
    p.jet.speed = 0.99;
    p.knots.count = 1;
    p.knots.motion = "moving";
    p.arms.length_arcsec = Some(0.02);
    let knot = |years: f64, side: usize| {
        let source = twin_source(&p, 0.001, &Look { years, ..LOOK }).expect("a source");
        let at = |piece: &&SkyGaussian| piece.part == Part::Knot && piece.side == Some(side);
        source.parts.iter().find(at).map(|piece| piece.offset.radius()).expect("a knot")
    };
    let moved = knot(2.0, 0) - knot(0.0, 0);
    let speed = apparent_speed(0.99, 10.0).expect("in domain");
    let distance = seen(&p).0.distance.expect("a redshift").transverse_comoving_mpc();
    let wanted = 2e-3 * proper_motion_mas_per_year(speed, distance).expect("in domain");
    assert!((moved / wanted - 1.0).abs() < 1e-9, "{moved} {wanted}");
    // The receding one of the pair is seen nearer by (1 − β cos θ)/(1 + β cos θ).
    let behind = 1.0 / arm_length_ratio(0.99, 10.0).expect("in domain");
    assert!((knot(2.0, 1) / knot(2.0, 0) - behind).abs() < 1e-9);
}

#[test]
fn mirrored_turned_and_oblong_arrays_show_the_same_sky() {
    let plain = with_everything();
    let place = SkyOffset::new(12.0, -7.0);
    let brightness = |p: &Parameters| {
        let (source, observation) = seen(p);
        let mut array = Array2::zeros((p.map.rows, p.map.columns));
        canvas(&observation, &source.parts).add_to(&mut array, 1.0);
        let at = observation.frame.pixel(place);
        let (x, y) = (at.x.round(), at.y.round());
        let on_sky = observation.frame.offset(crate::units::Pixel::new(x, y));
        let exact = observation.brightness_at(&source.parts, on_sky);
        assert!((array[(y as usize, x as usize)] / exact - 1.0).abs() < 1e-9);
        observation.brightness_at(&source.parts, place)
    };
    let wanted = brightness(&plain);
    for (order, east, up, aspect) in [
        ("top-down", "left", 0.0, 1.0),
        ("bottom-up", "right", 40.0, 1.0),
        ("top-down", "right", -77.0, 1.5),
    ] {
        let mut p = plain;
        p.map.row_order = order;
        p.map.east = east;
        p.map.up_pa_deg = up;
        p.map.pixel_aspect = aspect;
        assert!((brightness(&p) / wanted - 1.0).abs() < 1e-9, "{order} {east} {up} {aspect}");
    }
}

#[test]
fn numbers_that_need_each_other_are_asked_for() {
    let mut p = jets();
    p.arms.length_arcsec = None;
    let source = |p: &Parameters| twin_source(p, 5.0, &LOOK).map(|_| ()).map_err(|e| e.to_string());
    assert!(source(&p).is_err_and(|e| e.contains("length")));
    p.arms.length_kpc = Some(10.0);
    assert!(source(&p).is_err_and(|e| e.contains("redshift")));
    p.source.distance_mpc = Some(20.0);
    assert_eq!(source(&p), Ok(()));
}
