//! Tests of assembling a map: blanks, transfer, fluxes, host, row order.

use super::*;
use crate::constants::GAUSSIAN_AREA;
use description::{Layer, Origin, resolve};

fn described(text: &str) -> MapDescription {
    let layer = Layer::from_json_text(text, Origin::Sidecar, "test").expect("good keys");
    resolve(vec![layer]).expect("good values")
}

fn stored(dtype: &str, columns: usize, numbers: &[f64]) -> StoredArray {
    let narrow = ["float16", "float32", "uint8", "uint16", "int16"].contains(&dtype);
    StoredArray {
        samples: if narrow {
            Samples::F32(numbers.iter().map(|&n| n as f32).collect())
        } else {
            Samples::F64(numbers.to_vec())
        },
        rows: numbers.len() / columns,
        columns,
        format: "npy",
        dtype: dtype.to_owned(),
        shape: vec![(numbers.len() / columns) as u64, columns as u64],
        sha256: String::new(),
    }
}

fn map(dtype: &str, columns: usize, numbers: &[f64], text: &str) -> SkyMap {
    SkyMap::from_stored(stored(dtype, columns, numbers), described(text)).expect("a map")
}

fn row(map: &SkyMap, y: usize) -> Vec<f64> {
    let mut row = vec![9.0; 3];
    map.row_into(y, &mut row);
    row
}

#[test]
fn values_and_rows_are_those_stored() {
    let m = map("float32", 3, &[1.0, 2.0, 3.0, 4.0, 5.0, 6.5], "{}");
    assert_eq!(row(&m, 1), [4.0, 5.0, 6.5]);
    assert!((m.value(2, 1) - 6.5).abs() < 1e-12);
    assert!(m.is_blank(3, 0) && m.is_blank(0, 2) && row(&m, 2).is_empty());
    assert!(matches!(m.samples, Samples::F32(_)));
    assert_eq!((m.blank_count, m.saturated, m.clipped_floor), (0, 0, None));
    assert_eq!(m.description.rows, Some(Rows::BottomUp));
    let origin = m.description.entries().into_iter().find(|e| e.0 == "rows").expect("rows").2;
    assert_eq!(origin, Origin::BuiltIn);
}

#[test]
fn blanks_are_nan_infinities_and_the_blank_value_of_the_stored_type() {
    let numbers = [f64::NAN, f64::INFINITY, f64::NEG_INFINITY, -9999.9, 0.5, -9999.0];
    for dtype in ["float32", "float64"] {
        let m = map(dtype, 3, &numbers, r#"{"blank_value": -9999.9}"#);
        assert_eq!(m.blank_count, 4, "{dtype}");
        assert!(!m.is_blank(1, 1) && !m.is_blank(2, 1));
    }
    // −9999.9 in half precision is −10000.
    let m = map("float16", 2, &[-10000.0, -9984.0], r#"{"blank_value": -9999.9}"#);
    assert!(m.is_blank(0, 0) && !m.is_blank(1, 0));
    let m = map("uint8", 2, &[0.0, 1.0], r#"{"blank_value": 0}"#);
    assert!(m.is_blank(0, 0) && !m.is_blank(1, 0));
}

#[test]
fn stretches_are_undone_before_scale_and_offset() {
    let text = |transfer: &str| {
        format!(r#"{{"value_transfer": "{transfer}", "value_scale": 2, "value_offset": 1}}"#)
    };
    for (transfer, stored, wanted) in [
        ("linear", [3.0, -2.0], [7.0, -3.0]),
        ("sqrt", [3.0, -2.0], [19.0, -7.0]),
        ("log10", [3.0, -2.0], [2001.0, 1.02]),
    ] {
        let m = map("float32", 2, &stored, &text(transfer));
        for (got, wanted) in row(&m, 0).into_iter().zip(wanted) {
            assert!((got - wanted).abs() < 1e-12 * wanted.abs(), "{transfer}: {got}");
        }
    }
    let m = map("float64", 2, &[400.0, 1.0], &text("log10"));
    assert!(m.is_blank(0, 0), "10^400 is no number");
    assert_eq!(m.blank_count, 1);
}

#[test]
fn the_quantisation_step_is_in_brightness() {
    let ramp: Vec<f64> = (0..100).map(|i| f64::from(i % 10)).collect();
    let m = map("uint8", 10, &ramp, r#"{"value_scale": -0.5}"#);
    assert!((m.quantisation_step - 0.5).abs() < 1e-12);
    // The median level is 5: from 25 to 36 once squared.
    let m = map("uint8", 10, &ramp, r#"{"value_transfer": "sqrt"}"#);
    assert!((m.quantisation_step - 11.0).abs() < 1e-12, "{}", m.quantisation_step);
}

#[test]
fn saturation_is_counted_on_the_bright_side() {
    let ramp: Vec<f64> = (0..100).map(f64::from).collect();
    assert_eq!(map("uint8", 10, &ramp, r#"{"saturation_value": 90}"#).saturated, 10);
    let negative = r#"{"saturation_value": 5, "value_scale": -1}"#;
    assert_eq!(map("uint8", 10, &ramp, negative).saturated, 6);
    let mut full = ramp.clone();
    full.extend([255.0; 100]);
    assert_eq!(map("uint8", 10, &full, "{}").saturated, 100);
    full.truncate(110);
    assert_eq!(map("uint8", 10, &full, "{}").saturated, 0);
}

#[test]
fn a_block_of_fill_becomes_blank_and_a_floor_does_not() {
    let wave = |i: usize| (i as f64 * 0.7).sin() * (i as f64 * 0.013).cos() + 1e-7 * i as f64;
    let filled: Vec<f64> = (0..4096).map(|i| if i / 64 < 12 { 0.0 } else { wave(i) }).collect();
    let m = map("float32", 64, &filled, r#"{"value_offset": 3}"#);
    assert_eq!((m.blank_count, m.clipped_floor), (12 * 64, None));
    let clipped: Vec<f64> = (0..4096).map(|i| wave(i).max(0.0)).collect();
    let m = map("float32", 64, &clipped, r#"{"value_offset": 3}"#);
    assert_eq!((m.blank_count, m.clipped_floor), (0, Some(3.0)));
}

#[test]
fn flux_factors_use_the_beam_area_in_pixels() {
    let numbers = [0.0; 144];
    let text = |unit: &str| {
        format!(
            r#"{{"pixel_scale_arcsec": [0.5, 0.25], "beam_major_arcsec": 3,
                "beam_minor_arcsec": 2, "unit": "{unit}"}}"#
        )
    };
    // Ω_beam = 1.133 × 6, a pixel 0.125 square arcsec.
    let area_px = GAUSSIAN_AREA * 6.0 / 0.125;
    for (unit, per_beam, per_pixel) in [
        ("Jy/beam", 1e3, 1e3 / area_px),
        ("uJy/beam", 1e-3, 1e-3 / area_px),
        ("mJy/pixel", area_px, 1.0),
    ] {
        let m = map("float32", 12, &numbers, &text(unit));
        let got = m.flux_factors(m.beam.as_ref()).expect("a flux unit");
        assert!((got.mjy_per_beam / per_beam - 1.0).abs() < 1e-12, "{unit}");
        assert!((got.mjy_per_pixel / per_pixel - 1.0).abs() < 1e-12, "{unit}");
        assert_eq!(m.flux_factors(None), None);
    }
    let m = map("float32", 12, &numbers, &text("none"));
    assert_eq!(m.flux_factors(m.beam.as_ref()), None);
    let m = map("float32", 12, &numbers, r#"{"beam_major_arcsec": 3}"#);
    assert_eq!(m.beam, None, "a beam in arcsec cannot be laid on pixels of unknown size");
}

#[test]
fn the_host_is_placed_by_pixel_or_by_sky() {
    let numbers = [0.0; 121];
    let m = map("float32", 11, &numbers, r#"{"host_x_px": 3, "host_y_px": 4.5}"#);
    assert_eq!(m.host_pixel(), Some(Pixel { x: 3.0, y: 4.5 }));
    let text = r#"{"host_ra_deg": 0.001, "host_dec_deg": 0.002, "centre_ra_deg": 360,
        "centre_dec_deg": 0, "pixel_scale_arcsec": 3.6}"#;
    let host = map("float32", 11, &numbers, text).host_pixel().expect("placed");
    // 3.6 arcsec = 0.001 degrees: one pixel east (left), two north (up), from (5, 5).
    assert!(host.distance_px(Pixel { x: 4.0, y: 7.0 }) < 1e-6, "{host:?}");
    let unplaced = r#"{"host_ra_deg": 0.001, "host_dec_deg": 0.002}"#;
    assert_eq!(map("float32", 11, &numbers, unplaced).host_pixel(), None);
}

#[test]
fn a_core_outside_the_array_is_an_error() {
    let array = stored("float32", 4, &[0.0; 8]);
    let core = described(r#"{"core_x_px": 1, "core_y_px": 2}"#);
    let error = SkyMap::from_stored(array, core).expect_err("two rows only");
    assert_eq!(error.code(), "bad-description-value");
    assert!(error.to_string().contains("core_y_px is 2"), "{error}");
}

#[test]
fn the_shared_survey_maps_are_read_where_they_are_present() {
    let folder = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/maps/survey-dev");
    let Ok(folder) = folder.read_dir() else {
        eprintln!("skipped: no ../shared/maps/survey-dev");
        return;
    };
    for entry in folder.flatten() {
        let path = entry.path();
        if path.extension().is_some_and(|e| e == "npy" || e == "png") {
            let array = read::read_map_file(&path, None, None).expect("readable");
            let m = SkyMap::from_stored(array, MapDescription::default()).expect("a map");
            assert!(m.blank_count < m.pixel_count(), "{}", path.display());
        }
    }
}
