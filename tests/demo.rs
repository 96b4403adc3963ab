//! The demo map of `demo-images/`: a made-up source of a made-up survey. It is regenerated
//! bit for bit here; `JETSPAN_REGENERATE=1 cargo test --release demo` writes it anew.

use std::path::PathBuf;

use jetspan::measurement::Measurement;
use jetspan::record::Role;
use jetspan::simulate::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, jet};

use crate::support::{Run, at, npy_f4, number};

const PIXEL_ARCSEC: f64 = 0.5;
const BEAM_ARCSEC: (f64, f64) = (2.4, 2.0);
const BEAM_PA_DEG: f64 = 25.0;
/// Truth of the scene, against which the measured demo is held below.
const RATIO: f64 = 3.2;

/// A bright two-sided double at position angle 52°, its lobes a little bent, two neighbours.
fn scene() -> Scene {
    // North up, east left, rows bottom-up: position angle p points to (−sin p, cos p), and a
    // direction p on the sky lies at 90° + p from +x towards +y.
    let beam = GaussianShape {
        major_px: BEAM_ARCSEC.0 / PIXEL_ARCSEC,
        minor_px: BEAM_ARCSEC.1 / PIXEL_ARCSEC,
        angle_deg: 90.0 + BEAM_PA_DEG,
    };
    let mut scene = Scene::empty(256, 256, beam);
    let core = (131.3, 124.6);
    let place = |distance: f64, pa_deg: f64| {
        let (sin, cos) = pa_deg.to_radians().sin_cos();
        (core.0 - distance * sin, core.1 + distance * cos)
    };
    let blob = |distance: f64, pa_deg: f64, flux: f64, fwhm: f64| GaussianComponent {
        x_px: place(distance, pa_deg).0,
        y_px: place(distance, pa_deg).1,
        amount: Amount::Flux(flux),
        shape: GaussianShape::circular(fwhm),
    };
    let (jet_pa, counter_pa) = (52.0, 232.0);
    scene.components.push(blob(0.0, 0.0, 9.0, 0.3));
    let jet_flux = 16.0;
    for (pa_deg, flux) in [(jet_pa, jet_flux), (counter_pa, jet_flux / RATIO)] {
        scene.components.extend(jet(place(0.5, pa_deg), place(62.0, pa_deg), flux, 1.5, 124));
    }
    // Hot spots, and lobes that fall back towards the core and to the south.
    scene.components.push(blob(78.0, 54.0, 14.0, 2.5));
    scene.components.push(blob(75.0, 229.0, 18.0, 2.8));
    for (distance, pa, flux, fwhm) in [
        (75.0, 56.0, 12.0, 9.0),
        (71.0, 60.0, 9.0, 13.0),
        (66.0, 66.0, 5.0, 16.0),
        (72.0, 227.0, 14.0, 10.0),
        (68.0, 222.0, 10.0, 14.0),
        (64.0, 216.0, 5.0, 17.0),
    ] {
        scene.components.push(blob(distance, pa, flux, fwhm));
    }
    for (x, y, flux) in [(38.4, 61.9, 1.4), (214.2, 203.7, 0.6)] {
        scene.components.push(GaussianComponent {
            x_px: x,
            y_px: y,
            amount: Amount::Flux(flux),
            shape: GaussianShape::POINT,
        });
    }
    scene.noise = Some((NoiseKind::Smoothed(beam), 0.03, 20_261_201));
    scene
}

const DESCRIPTION: &str = r#"{
  "id": "LANTERN 0417+38",
  "pixel_scale_arcsec": 0.5,
  "beam_major_arcsec": 2.4,
  "beam_minor_arcsec": 2.0,
  "beam_pa_deg": 25.0,
  "unit": "mJy/beam",
  "frequency_ghz": 3.0,
  "centre_ra_deg": 64.31275,
  "centre_dec_deg": 38.4419,
  "host_ra_deg": 64.312146,
  "host_dec_deg": 38.441494,
  "redshift": 0.214,
  "spectral_index": 0.6,
  "spectral_index_error": 0.1,
  "core_spectral_index": 0.0,
  "total_spectral_index": 0.75
}
"#;

fn folder() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("demo-images")
}

#[test]
fn demo_map_is_regenerated_bit_for_bit() {
    let files = [
        ("lantern-double.npy", npy_f4(&scene().render())),
        ("lantern-double.map.json", DESCRIPTION.as_bytes().to_vec()),
    ];
    for (name, bytes) in files {
        let path = folder().join(name);
        if std::env::var_os("JETSPAN_REGENERATE").is_some() {
            std::fs::write(&path, &bytes).expect("demo-images is there");
        }
        let committed = std::fs::read(&path).expect("the demo is committed");
        assert!(committed == bytes, "{name} differs from what the generator makes");
    }
}

#[test]
fn demo_record_agrees_with_the_scene() {
    let path = folder().join("lantern-double.npy");
    let outcome =
        Run::new(["measure"]).args([path.as_os_str()]).args(["--json", "-"]).status(0).run();
    let record = outcome.stdout_json();
    let ratio: Measurement =
        serde_json::from_value(at(&record, "brightness.jet_to_counter_jet_ratio").clone())
            .expect("a measurement");
    let Measurement::Value { ci95: Some([low, high]), .. } = ratio else {
        panic!("a value, got {ratio:?}")
    };
    assert!((low..=high).contains(&RATIO), "R = {RATIO} made, {low}–{high} measured");
    let role: Role = serde_json::from_value(at(&record, "sides[0].role").clone()).expect("a role");
    assert_eq!(role, Role::Jet);
    // Hot spots at 78 px along 54° and 75 px along 229°: 76.47 arcsec apart.
    let (a, b) = (54f64.to_radians(), 229f64.to_radians());
    let truth = 0.5 * (78.0 * a.sin() - 75.0 * b.sin()).hypot(78.0 * a.cos() - 75.0 * b.cos());
    let separation = number(&record, "source.hotspot_separation_arcsec.value");
    assert!((separation - truth).abs() < 0.5, "{separation} against {truth} arcsec");
    // A core of 9 mJy on jets that begin at it: within 3 % (noise 0.5 %, the jets' width).
    let core = number(&record, "core.flux_density_mjy.value");
    assert!((core / 9.0 - 1.0).abs() < 0.03, "{core} mJy of 9");
    // No caution on a good map.
    for flag in record["flags"].as_array().expect("flags") {
        assert_ne!(flag["severity"], "caution", "{flag}");
    }
}

#[test]
fn readme_shows_the_demo_as_it_is_measured() {
    let root = PathBuf::from(env!("CARGO_MANIFEST_DIR"));
    let path = root.join("README.md");
    let readme = std::fs::read_to_string(&path).expect("README.md is there");
    let opening = "```text\n";
    let start = readme.find(opening).expect("the page follows the first command") + opening.len();
    let end = start + readme[start..].find("```").expect("the block ends");
    let printed = std::process::Command::new(crate::support::program())
        .args(["measure", "demo-images/lantern-double.npy"])
        .current_dir(&root)
        .output()
        .expect("the program runs");
    let page = String::from_utf8(printed.stdout).expect("text");
    if std::env::var_os("JETSPAN_REGENERATE").is_some() {
        let fresh = format!("{}{page}{}", &readme[..start], &readme[end..]);
        std::fs::write(&path, fresh).expect("README.md may be written");
    } else {
        assert_eq!(&readme[start..end], page, "run JETSPAN_REGENERATE=1 cargo test --release demo");
    }
}
