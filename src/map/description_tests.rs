//! Tests of the description: layers, origins, ranges, spellings, schema.

use super::*;

fn layer(origin: Origin, text: &str) -> Layer {
    Layer::from_json_text(text, origin, "test.map.json").unwrap_or_else(|e| panic!("{text}: {e}"))
}

fn one(text: &str) -> Result<MapDescription, DescriptionError> {
    resolve(vec![Layer::from_json_text(text, Origin::Sidecar, "test.map.json")?])
}

#[test]
fn the_highest_layer_that_gives_a_key_decides_it() {
    let defaults = layer(
        Origin::Defaults,
        r#"{"redshift": 1, "frequency_ghz": 1.4, "rms": 2, "unit": "Jy/beam"}"#,
    );
    let manifest = layer(Origin::Manifest, r#"{"redshift": 2, "frequency_ghz": 5, "rms": 3}"#);
    let sidecar = layer(Origin::Sidecar, r#"{"redshift": 3, "frequency_ghz": 8}"#);
    let flags = Layer::from_flag_pairs([("redshift", "4")]).expect("a flag");
    // The order in which the layers are listed does not matter.
    let got = resolve(vec![flags, sidecar, defaults, manifest]).expect("good layers");
    assert_eq!(got.redshift, Some(4.0));
    assert_eq!(got.frequency_ghz, Some(8.0));
    assert_eq!(got.rms, Some(3.0));
    assert_eq!(got.unit, Some(BrightnessUnit::JyPerBeam));
    let wanted = [
        ("frequency_ghz", Origin::Sidecar),
        ("redshift", Origin::Flag),
        ("rms", Origin::Manifest),
        ("unit", Origin::Defaults),
    ];
    assert_eq!(got.origins, BTreeMap::from(wanted));
    let words: Vec<_> =
        wanted.iter().map(|(_, o)| serde_json::to_string(o).expect("text")).collect();
    assert_eq!(words, ["\"beside-map\"", "\"flag\"", "\"manifest\"", "\"defaults\""]);
    assert_eq!(serde_json::to_string(&Origin::BuiltIn).expect("text"), "\"built-in\"");
}

#[test]
fn a_higher_layers_spelling_replaces_the_lower_ones() {
    let low = layer(
        Origin::Defaults,
        r#"{"pixel_scale_arcsec": [1, 2], "beam_major_arcsec": 4, "beam_minor_arcsec": 0.002,
            "host_ra_deg": 10, "host_dec_deg": 20, "apparent_speed": 3, "apparent_speed_error": 1}"#,
    );
    let high = layer(
        Origin::Flag,
        r#"{"pixel_scale_mas": 0.5, "beam_major_mas": 3, "host_x_px": 1, "host_y_px": 2,
            "proper_motion_mas_per_year": 0.1}"#,
    );
    let got = resolve(vec![low, high]).expect("good layers");
    assert_eq!(got.pixel_scale_arcsec, Some([0.5e-3, 0.5e-3]));
    assert_eq!((got.beam_major_arcsec, got.beam_minor_arcsec), (Some(3e-3), Some(2e-3)));
    assert_eq!((got.host_ra_deg, got.host_x_px), (None, Some(1.0)));
    assert_eq!((got.apparent_speed, got.apparent_speed_error), (None, None));
    assert_eq!(got.origins.get("pixel_scale_arcsec"), Some(&Origin::Flag));
    assert_eq!(got.origins.get("beam_minor_arcsec"), Some(&Origin::Defaults));
    assert_eq!(got.origins.get("host_ra_deg"), None);
}

#[test]
fn unknown_keys_are_answered_with_the_nearest_one() {
    for (found, nearest) in [
        ("pixel_scale", "pixel_scale_arcsec"),
        ("redshft", "redshift"),
        ("beam_maj_arcsec", "beam_major_arcsec"),
        ("center_ra_deg", "centre_ra_deg"),
        ("Frequency_GHz", "frequency_ghz"),
        ("spectral_index_err", "spectral_index_error"),
    ] {
        let error = one(&format!("{{\"{found}\": 1}}")).expect_err(found);
        assert_eq!(error.code(), "unknown-key");
        assert!(error.to_string().ends_with(&format!("key is {nearest}")), "{error}");
        assert!(error.to_string().starts_with("test.map.json: "), "{error}");
        let flag = Layer::from_flag_pairs([(found, "1")]).expect_err(found);
        assert_eq!(flag.code(), "unknown-key");
    }
    assert_eq!(edit_distance("kitten", "sitting"), 3);
    assert_eq!(edit_distance("", "abc"), 3);
}

#[test]
fn values_out_of_range_are_refused_with_what_is_needed() {
    for (text, code, part) in [
        (r#"{"pixel_scale_arcsec": 0}"#, "bad-description-value", "above 0"),
        (r#"{"pixel_scale_arcsec": [1, -1]}"#, "bad-description-value", "east right"),
        (r#"{"pixel_scale_arcsec": [1, 1, 1]}"#, "bad-description-value", "two as [x, y]"),
        (r#"{"pixel_scale_arcsec": "1"}"#, "bad-description-value", "a number"),
        (r#"{"pixel_scale_arcsec": 1, "pixel_scale_mas": 1}"#, "conflicting-keys", "keep one"),
        (r#"{"beam_major_arcsec": 1, "beam_minor_arcsec": 2}"#, "bad-description-value", "swap"),
        (r#"{"beam_minor_arcsec": 1}"#, "incomplete-keys", "beam_major_arcsec"),
        (r#"{"beam_pa_deg": 1}"#, "incomplete-keys", "beam_major_arcsec"),
        (r#"{"beam_major_arcsec": 0}"#, "bad-description-value", "above 0"),
        (r#"{"centre_ra_deg": 1}"#, "incomplete-keys", "centre_dec_deg"),
        (r#"{"centre_x_px": 1, "centre_y_px": 1}"#, "incomplete-keys", "centre_ra_deg"),
        (r#"{"centre_ra_deg": 1, "centre_dec_deg": 91}"#, "bad-description-value", "-90 and 90"),
        (r#"{"host_ra_deg": 1}"#, "incomplete-keys", "host_dec_deg"),
        (r#"{"host_ra_deg": 1, "host_dec_deg": 1, "host_x_px": 1}"#, "conflicting-keys", "keep"),
        (r#"{"core_y_px": 1}"#, "incomplete-keys", "core_x_px"),
        (r#"{"redshift": -0.1}"#, "bad-description-value", "not below 0"),
        (r#"{"redshift": 1, "redshift": 2}"#, "duplicate-key", "redshift"),
        (r#"{"redshift": true}"#, "bad-description-value", "a number"),
        (r#"{"redshift": NaN}"#, "description-syntax", "line 1"),
        (r#"{"frequency_ghz": 0}"#, "bad-description-value", "above 0"),
        (r#"{"spectral_index_error": -1}"#, "bad-description-value", "not below 0"),
        (r#"{"flux_scale_error": 5}"#, "bad-description-value", "from 0 to 1"),
        (r#"{"value_scale": 0}"#, "bad-description-value", "other than 0"),
        (r#"{"unit": "Jansky/beam"}"#, "bad-description-value", "nearest is Jy/beam"),
        (r#"{"rows": "up"}"#, "bad-description-value", "bottom-up, top-down"),
        (r#"{"plane": -1}"#, "bad-description-value", "whole number"),
        (r#"{"epoch": "yesterday"}"#, "bad-description-value", "ISO date"),
        (r#"{"id": ""}"#, "bad-description-value", "a text"),
        (r#"[1]"#, "description-syntax", "JSON object"),
        ("", "description-syntax", "JSON object"),
        (r#"{"rms": 1e999}"#, "description-syntax", "line 1"),
    ] {
        let error = one(text).expect_err(text);
        assert_eq!(error.code(), code, "{text}: {error}");
        assert!(error.to_string().contains(part), "{text}: {error}");
        assert!(!error.to_string().contains('\n'), "{error}");
    }
}

#[test]
fn angles_are_wrapped_and_words_are_read() {
    let got = one(
        r#"{"beam_major_arcsec": 2, "beam_pa_deg": -10, "up_pa_deg": -90, "centre_ra_deg": 370,
            "centre_dec_deg": -90, "unit": "µJy/beam", "rows": "top-down", "east": "right",
            "value_transfer": "log10", "jet_side_pa_deg": 725, "id": 12, "redshift": null}"#,
    )
    .expect("good values");
    assert_eq!(got.beam_pa_deg, Some(170.0));
    assert_eq!(got.beam_minor_arcsec, Some(2.0), "the long axis alone is a round beam");
    assert_eq!(got.up_pa_deg.to_bits(), 270f64.to_bits());
    assert_eq!(got.centre_ra_deg, Some(10.0));
    assert_eq!(got.unit, Some(BrightnessUnit::UjyPerBeam));
    assert_eq!((got.rows, got.east), (Some(Rows::TopDown), East::Right));
    assert_eq!(got.value_transfer, ValueTransfer::Log10);
    assert_eq!(got.jet_side_pa_deg, Some(5.0));
    assert_eq!((got.id.as_deref(), got.redshift), (Some("12"), None));
}

#[test]
fn epochs_are_decimal_years() {
    for (given, year) in [
        (json!(2019.5), 2019.5),
        (json!("2019.5"), 2019.5),
        (json!("2000-01-01"), 2000.0),
        (json!("2000-07-02"), 2000.5),
        (json!("2001-12-31T12:00:00Z"), 2001.0 + 364.5 / 365.0),
        (json!("1999-03-01 06:00"), 1999.0 + 59.25 / 365.0),
    ] {
        let got = decimal_year(&given).unwrap_or_else(|| panic!("{given}"));
        assert!((got - year).abs() < 1e-9, "{given}: {got}");
    }
    for given in [
        "2001-02-29",
        "2001-13-01",
        "2001-00-01",
        "2001-01-00",
        "01-01-2001",
        "2001-1",
        "2001-01-01T25:00",
        "+2001-01-01",
        "56000",
    ] {
        assert_eq!(decimal_year(&json!(given)), None, "{given}");
    }
}

#[test]
fn entries_hold_what_is_given_and_what_is_assumed() {
    let find = |description: &MapDescription, key: &str| {
        description.entries().into_iter().find(|entry| entry.0 == key).map(|e| (e.1, e.2))
    };
    let bare = MapDescription::default();
    assert_eq!(find(&bare, "spectral_index"), Some((json!(0.6), Origin::BuiltIn)));
    assert_eq!(find(&bare, "spectral_index_error"), Some((json!(0.2), Origin::BuiltIn)));
    assert_eq!(find(&bare, "total_spectral_index"), Some((json!(0.75), Origin::BuiltIn)));
    assert_eq!(find(&bare, "east"), Some((json!("left"), Origin::BuiltIn)));
    assert_eq!(find(&bare, "flux_scale_error"), None);
    assert_eq!(find(&bare, "redshift"), None);
    let given = one(
        r#"{"spectral_index": 0.8, "unit": "mJy/beam", "pixel_scale_mas": 500, "epoch": "2000-01-01"}"#,
    )
    .expect("good values");
    assert_eq!(find(&given, "spectral_index"), Some((json!(0.8), Origin::Sidecar)));
    assert_eq!(find(&given, "spectral_index_error"), Some((json!(0.0), Origin::BuiltIn)));
    assert_eq!(find(&given, "flux_scale_error"), Some((json!(0.05), Origin::BuiltIn)));
    assert_eq!(find(&given, "pixel_scale_arcsec"), Some((json!(0.5), Origin::Sidecar)));
    assert_eq!(find(&given, "epoch"), Some((json!("2000-01-01"), Origin::Sidecar)));
}

/// A good value of every key, as typed on the command line.
fn sample(spec: &KeySpec) -> (&'static str, Value) {
    match spec.kind {
        ValueKind::Number => ("0.5", json!(0.5)),
        ValueKind::NumberOrPair => ("0.5,0.25", json!([0.5, 0.25])),
        ValueKind::Text => ("a name", json!("a name")),
        ValueKind::Choice(words) => (words[1], json!(words[1])),
        ValueKind::Integer => ("3", json!(3)),
        ValueKind::Epoch => ("2000-01-01", json!("2000-01-01")),
    }
}

#[test]
fn every_key_of_the_table_is_read_and_comes_back_in_the_entries() {
    let mut names: Vec<_> = DESCRIPTION_KEYS.iter().map(|spec| spec.name).collect();
    names.sort_unstable();
    names.dedup();
    assert_eq!(names.len(), DESCRIPTION_KEYS.len(), "no key twice");
    for spec in DESCRIPTION_KEYS {
        let (text, value) = sample(spec);
        let flags = Layer::from_flag_pairs([(spec.name.replace('_', "-"), text)]).expect(spec.name);
        assert_eq!(flags.values.get(spec.name), Some(&value), "{}", spec.name);
        // Give whatever the key needs besides.
        let mut pairs = vec![(spec.name.to_owned(), value)];
        for (key, needed) in NEEDS {
            if *key == spec.name {
                pairs.push(((*needed).to_owned(), json!(0.5)));
            }
        }
        if spec.name.starts_with("beam_") && !spec.name.starts_with("beam_major") {
            pairs.push(("beam_major_arcsec".to_owned(), json!(3)));
        }
        if spec.name == "centre_x_px" || spec.name == "centre_y_px" {
            pairs.push(("centre_ra_deg".to_owned(), json!(3)));
            pairs.push(("centre_dec_deg".to_owned(), json!(3)));
        }
        let layer = Layer::from_pairs(pairs, Origin::Manifest, "row").expect(spec.name);
        let description = resolve(vec![layer]).expect(spec.name);
        let canonical = spec.name.replace("_mas", "_arcsec");
        let canonical = if spec.name.contains("mas_per_year") { spec.name } else { &canonical };
        let entry = description.entries().into_iter().find(|entry| entry.0 == canonical);
        assert_eq!(entry.expect(spec.name).2, Origin::Manifest, "{}", spec.name);
        assert!(!spec.help.is_empty() && !spec.group.is_empty() && !spec.value_name.is_empty());
    }
}

#[test]
fn the_schema_accepts_what_is_read_and_refuses_unknown_keys() {
    let schema = description_schema();
    let validator = jsonschema::validator_for(&schema).expect("a schema");
    for spec in DESCRIPTION_KEYS {
        let (_, value) = sample(spec);
        let mut object = Map::new();
        object.insert(spec.name.to_owned(), value);
        assert!(validator.is_valid(&Value::Object(object)), "{}", spec.name);
    }
    assert!(validator.is_valid(&json!({})));
    assert!(!validator.is_valid(&json!({"redshft": 1})));
    assert!(!validator.is_valid(&json!({"unit": "Jansky"})));
    assert!(!validator.is_valid(&json!({"pixel_scale_arcsec": [1, 2, 3]})));
}

#[test]
fn the_file_beside_the_map_replaces_only_the_last_extension() {
    for (map, sidecar) in [
        ("a/b.npy", "a/b.map.json"),
        ("a/b.c.png", "a/b.c.map.json"),
        ("noending", "noending.map.json"),
    ] {
        assert_eq!(sidecar_path(Path::new(map)), Path::new(sidecar));
    }
    let folder = tempfile::tempdir().expect("a folder");
    let map = folder.path().join("m.npy");
    assert_eq!(read_sidecar(&map), Ok(None));
    std::fs::write(folder.path().join("m.map.json"), r#"{"redshift": 0.2}"#).expect("written");
    let layer = read_sidecar(&map).expect("readable").expect("there");
    assert_eq!((layer.origin, layer.values.len()), (Origin::Sidecar, 1));
    let defaults = read_defaults(folder.path()).expect_err("a folder");
    assert_eq!(defaults.code(), "unreadable-description");
}
