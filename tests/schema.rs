//! The record against its schema, its table of quantities and the contract's list of paths.

use std::collections::BTreeSet;
use std::path::Path;

use jetspan::quantity::{QUANTITIES, without_indices};
use serde_json::Value;

use crate::support::{Double, Run, find, noise_map, npy_f4, parse, point_map};

/// Paths that every record of a map that could be measured holds, whatever was found.
const CONTRACT_PATHS: &[&str] = &[
    "record_version",
    "id",
    "file",
    "status",
    "flags",
    "settings",
    "software",
    "input.sha256",
    "input.format",
    "input.shape",
    "input.dtype",
    "map",
    "noise.rms_mjy_per_beam",
    "noise.background_mjy_per_beam",
    "noise.rms_near_core_mjy_per_beam",
    "noise.dynamic_range",
    "noise.correlation_fwhm_px",
    "noise.method",
    "core.position",
    "core.position_error_arcsec",
    "core.basis",
    "core.confidence",
    "core.rivals",
    "core.flux_density_mjy",
    "source.position",
    "source.total_flux_density_mjy",
    "source.contour_flux_density_mjy",
    "source.peak_brightness_mjy_per_beam",
    "source.peak_signal_to_noise",
    "source.contour_mjy_per_beam",
    "source.largest_angular_size_arcsec",
    "source.largest_angular_size_deconvolved_arcsec",
    "source.component_separation_arcsec",
    "source.position_angle_deg",
    "source.hotspot_separation_arcsec",
    "source.fr_ratio",
    "source.fr_ratio_deconvolved",
    "source.fr_class.class",
    "source.fr_class.probability",
    "source.arm_length_ratio",
    "source.longer_arm",
    "source.arm_length_ratio_jet_side",
    "source.lobe_flux_ratio",
    "source.misalignment_deg",
    "source.bend_deg",
    "source.symmetry",
    "source.axial_ratio",
    "source.core_prominence",
    "source.core_prominence_rest",
    "components",
    "brightness.jet_to_counter_jet_ratio",
    "brightness.jet_flux_density_mjy",
    "brightness.counter_jet_flux_density_mjy",
    "brightness.strip_covariance_mjy2",
    "brightness.aperture",
    "brightness.peak_ratio",
    "brightness.profile",
    "brightness.sidedness_sigma",
    "physics.scale_kpc_per_arcsec",
    "physics.cosmology",
    "physics.projected_length_kpc",
    "physics.luminosity_w_per_hz",
    "physics.core_luminosity_w_per_hz",
    "physics.core_brightness_temperature_k",
    "physics.beaming.exponent",
    "physics.beaming.spectral_index",
    "physics.beaming.flow",
    "physics.beaming.beta_cos_theta",
    "physics.beaming.viewing_angle_max_deg",
    "physics.beaming.beta_min",
    "physics.beaming.lorentz_factor_min",
    "physics.beaming.other_flow",
    "physics.posterior",
];

/// The same of each side.
const SIDE_PATHS: &[&str] = &[
    "role",
    "position_angle_deg",
    "inner_position_angle_deg",
    "end_position_angle_deg",
    "bend_deg",
    "length_arcsec",
    "ridge_length_arcsec",
    "length_kpc",
    "flux_density_mjy",
    "fr_ratio",
    "jet.detected",
    "jet.criteria",
    "jet.flux_density_mjy",
    "jet.opening_angle_deg",
    "jet.width_exponent",
    "hotspot",
    "lobe",
    "ridge",
];

/// Paths inside groups and lists that are there: where the group is, these are in it.
const GROUP_PATHS: &[(&str, &[&str])] = &[
    ("core.position", &["x_px", "y_px", "ra_deg", "dec_deg"]),
    ("source.position", &["x_px", "y_px", "ra_deg", "dec_deg", "basis"]),
    ("sides[].lobe", &["flux_density_mjy", "length_arcsec", "width_arcsec"]),
    (
        "sides[].ridge[]",
        &[
            "distance_arcsec",
            "east_arcsec",
            "north_arcsec",
            "brightness_mjy_per_beam",
            "brightness_relative",
            "width_arcsec",
            "width_deconvolved_arcsec",
        ],
    ),
    (
        "components[]",
        &[
            "role",
            "position",
            "flux_density_mjy",
            "peak_brightness_mjy_per_beam",
            "major_arcsec",
            "minor_arcsec",
            "position_angle_deg",
            "deconvolved.major_arcsec",
            "deconvolved.minor_arcsec",
            "deconvolved.position_angle_deg",
        ],
    ),
    ("brightness.aperture", &["inner_arcsec", "outer_arcsec", "half_width_arcsec"]),
    ("brightness.profile[]", &["distance_arcsec", "ratio"]),
    ("physics.posterior", &["beta", "viewing_angle_deg", "lorentz_factor", "doppler_factor"]),
    ("flags[]", &["code", "severity", "stage", "message", "numbers"]),
];

/// Groups whose numbers are no measurements: what was given, chosen, or says how to read.
const NOT_MEASURED: &[&str] = &[
    "record_version",
    "settings",
    "software",
    "input",
    "map",
    "flags",
    "error",
    "physics.cosmology",
];

/// Records of every situation, by name.
fn records() -> Vec<(&'static str, Value)> {
    let double = Double::default();
    let map = npy_f4(&double.map());
    let faint = Double { jets: (60.0, 0.0), ..double };
    let without = |keys: &[&str]| -> Vec<String> {
        double
            .flags()
            .chunks(2)
            .filter(|pair| !keys.contains(&pair[0].as_str()))
            .flatten()
            .cloned()
            .collect()
    };
    let unit_none: Vec<String> = double
        .flags()
        .into_iter()
        .map(|word| if word == "mJy/beam" { "none".to_owned() } else { word })
        .collect();
    let no_scale =
        ["--pixel-scale-arcsec", "--beam-major-arcsec", "--beam-minor-arcsec", "--beam-pa-deg"];
    let point = without(&["--host-x-px", "--host-y-px"]);
    let situations: [(&'static str, Vec<u8>, Vec<String>); 8] = [
        ("measured", map.clone(), double.flags()),
        ("counter-jet below the noise", npy_f4(&faint.map()), faint.flags()),
        ("unresolved", npy_f4(&point_map(128, 120, 20.0, 1)), point.clone()),
        ("no-detection", npy_f4(&noise_map(128, 120, 1)), point),
        ("failed", b"1 x\n".to_vec(), Vec::new()),
        ("no pixel scale", map.clone(), without(&no_scale)),
        ("unit none", map.clone(), unit_none),
        ("nothing known", map, Vec::new()),
    ];
    situations
        .into_iter()
        .map(|(name, bytes, flags)| {
            let outcome = Run::new(["measure", "map.npy", "--json", "-"])
                .args(flags)
                .file("map.npy", bytes)
                .status(i32::from(name == "failed"))
                .run();
            let record = outcome.stdout_json();
            let wanted = match name {
                "unresolved" | "no-detection" | "failed" => name,
                _ => "measured",
            };
            assert_eq!(record["status"], wanted, "{name}");
            (name, record)
        })
        .collect()
}

fn committed(name: &str) -> String {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("schemas").join(name);
    std::fs::read_to_string(path).unwrap_or_default()
}

#[test]
fn committed_schemas_are_those_of_the_program() {
    for of in ["record", "description"] {
        let name =
            if of == "record" { "record.schema.json" } else { "map-description.schema.json" };
        let printed = Run::new(["schema", of]).run().stdout;
        assert!(
            printed == committed(name),
            "schemas/{name} is not what the program prints; make it anew with\n\
             cargo run --release -- schema {of} > schemas/{name}"
        );
    }
}

#[test]
fn records_of_every_situation_are_valid() {
    let schema = parse(&Run::new(["schema", "record"]).run().stdout);
    let validator = jsonschema::validator_for(&schema).expect("a schema");
    for (name, record) in records() {
        let errors: Vec<String> = validator
            .iter_errors(&record)
            .map(|error| format!("{}: {error}", error.instance_path()).chars().take(300).collect())
            .collect();
        assert!(errors.is_empty(), "{name}: {}", errors.join("\n"));
        // A validator that accepts everything would pass as well.
        let mut broken = record.clone();
        broken["status"] = Value::from("splendid");
        assert!(!validator.is_valid(&broken), "{name}: any status is accepted");
        let mut broken = record;
        broken.as_object_mut().expect("an object").remove("software");
        assert!(!validator.is_valid(&broken), "{name}: a key may be left out");
    }
}

#[test]
fn descriptions_are_valid_where_the_program_takes_them() {
    let schema = parse(&Run::new(["schema", "description"]).run().stdout);
    let validator = jsonschema::validator_for(&schema).expect("a schema");
    for (text, good) in [
        (r#"{}"#, true),
        (r#"{"pixel_scale_arcsec":[0.5,0.6],"unit":"Jy/beam","epoch":"2019-05-21"}"#, true),
        (r#"{"pixel_scale_arcsec":[0.5]}"#, false),
        (r#"{"unit":"Jy"}"#, false),
        (r#"{"redshif":0.1}"#, false),
        (r#"{"plane":-1}"#, false),
        (r#"{"rms":"low"}"#, false),
    ] {
        assert_eq!(validator.is_valid(&parse(text)), good, "{text}");
        let run = Run::new(["measure", "map.npy"])
            .file("map.npy", npy_f4(&noise_map(48, 44, 1)))
            .file("map.map.json", text)
            .status(i32::from(!good));
        assert!(good == run.run().stderr.is_empty(), "{text}");
    }
}

#[test]
fn every_path_of_the_contract_is_always_there() {
    let mut missing = Vec::new();
    for (name, record) in records() {
        if name == "failed" {
            continue;
        }
        for path in CONTRACT_PATHS {
            if find(&record, path).is_none() {
                missing.push(format!("{name}: {path}"));
            }
        }
        let sides = record["sides"].as_array().expect("a list");
        assert_eq!(sides.len(), 2, "{name}");
        for (index, side) in sides.iter().enumerate() {
            for path in SIDE_PATHS {
                if find(side, path).is_none() {
                    missing.push(format!("{name}: sides[{index}].{path}"));
                }
            }
        }
        let roles: Vec<&Value> = sides.iter().map(|side| &side["role"]).collect();
        assert!(roles == ["jet", "counter-jet"] || roles == ["first", "second"], "{roles:?}");
        each_node(&record, "", &mut |path, value| {
            let Some((_, inner)) = GROUP_PATHS.iter().find(|(group, _)| *group == path) else {
                return;
            };
            for path in inner.iter().filter(|_| value.get("missing").is_none()) {
                if find(value, path).is_none() {
                    missing.push(format!("{name}: {path} of a group that is there: {value}"));
                }
            }
        });
    }
    assert!(missing.is_empty(), "{}", missing.join("\n"));
}

#[test]
fn measurements_have_one_of_their_shapes() {
    let shapes: [&[&str]; 6] = [
        &["minus", "plus", "value"],
        &["ci95", "minus", "plus", "value"],
        &["confidence", "lower_limit"],
        &["confidence", "upper_limit"],
        &["missing"],
        &["ci68", "ci95", "median"],
    ];
    for (name, record) in records() {
        each_node(&record, "", &mut |path, value| {
            if !is_measurement(value) || path.starts_with("map.") {
                return;
            }
            let mut keys: Vec<&str> =
                value.as_object().expect("an object").keys().map(String::as_str).collect();
            keys.sort_unstable();
            assert!(shapes.contains(&keys.as_slice()), "{name}: {path} is {value}");
            for side in ["minus", "plus"] {
                assert!(value.get(side).is_none_or(|v| v.as_f64() >= Some(0.0)), "{path} {value}");
            }
        });
    }
}

/// Calls `f` with the path (indices left out) and value of every node but the root.
fn each_node(value: &Value, path: &str, f: &mut dyn FnMut(&str, &Value)) {
    if !path.is_empty() {
        f(path, value);
    }
    match value {
        Value::Object(members) => {
            for (key, inner) in members {
                let inner_path =
                    if path.is_empty() { key.clone() } else { format!("{path}.{key}") };
                each_node(inner, &inner_path, f);
            }
        }
        Value::Array(items) => {
            for inner in items {
                each_node(inner, &format!("{path}[]"), f);
            }
        }
        _ => {}
    }
}

fn is_measurement(value: &Value) -> bool {
    ["value", "lower_limit", "upper_limit", "missing", "median"]
        .iter()
        .any(|key| value.get(key).is_some())
}

fn is_not_measured(path: &str) -> bool {
    NOT_MEASURED.iter().any(|root| is_below(path, root))
}

/// Whether `path` is `root` or lies below it.
fn is_below(path: &str, root: &str) -> bool {
    path.strip_prefix(root)
        .is_some_and(|rest| rest.is_empty() || rest.starts_with('.') || rest.starts_with('['))
}

/// Whether the table explains a path; a group that is missing is explained by its members.
fn is_explained(path: &str, is_missing: bool) -> bool {
    !jetspan::quantity::find(path).is_empty()
        || (is_missing && QUANTITIES.iter().any(|q| is_below(q.path, path)))
}

#[test]
fn every_number_of_a_record_is_explained() {
    let mut unknown = BTreeSet::new();
    for (_, record) in records() {
        each_node(&record, "", &mut |path, value| {
            let is_number = value.is_number() && !is_part_of_measurement(path);
            if (is_number || is_measurement(value)) && !is_not_measured(path) {
                let is_missing = value.get("missing").is_some();
                if !is_explained(path, is_missing) {
                    unknown.insert(path.to_owned());
                }
            }
        });
    }
    // A list of kinds or words is no quantity, present or missing.
    for word in ["source.longer_arm", "source.symmetry", "sides[].jet.criteria"] {
        unknown.remove(word);
    }
    assert!(unknown.is_empty(), "not in the table of quantities: {unknown:#?}");
}

fn is_part_of_measurement(path: &str) -> bool {
    let path = path.strip_suffix("[]").unwrap_or(path);
    let name = path.rsplit('.').next().unwrap_or(path);
    let parts = ["value", "minus", "plus", "ci95", "lower_limit", "upper_limit", "median", "ci68"];
    parts.contains(&name)
        || (name == "confidence" && path != "core.confidence" && {
            !path.ends_with("rivals[].confidence")
        })
}

#[test]
fn every_quantity_of_the_table_has_its_place_in_the_schema() {
    let schema = parse(&Run::new(["schema", "record"]).run().stdout);
    let mut lost = Vec::new();
    for quantity in QUANTITIES {
        assert_eq!(without_indices(quantity.path), quantity.path);
        let mut places = vec![&schema];
        for step in quantity.path.split('.') {
            let (name, is_list) = match step.strip_suffix("[]") {
                Some(name) => (name, true),
                None => (step, false),
            };
            places = places.iter().flat_map(|place| property(&schema, place, name)).collect();
            if is_list {
                places = places.iter().flat_map(|place| members(&schema, place)).collect();
            }
        }
        if places.is_empty() {
            lost.push(quantity.path);
        }
    }
    assert!(lost.is_empty(), "in the table, not in the schema: {lost:#?}");
}

/// The schemas a schema stands for: itself, what it refers to, its alternatives.
fn alternatives<'a>(root: &'a Value, schema: &'a Value) -> Vec<&'a Value> {
    let mut out = vec![schema];
    if let Some(name) = schema["$ref"].as_str() {
        let pointer = name.trim_start_matches('#');
        out.extend(root.pointer(pointer).into_iter().flat_map(|s| alternatives(root, s)));
    }
    for list in ["anyOf", "oneOf", "allOf"] {
        for inner in schema[list].as_array().into_iter().flatten() {
            out.extend(alternatives(root, inner));
        }
    }
    out
}

fn property<'a>(root: &'a Value, schema: &'a Value, name: &str) -> Vec<&'a Value> {
    alternatives(root, schema).into_iter().filter_map(|s| s["properties"].get(name)).collect()
}

fn members<'a>(root: &'a Value, schema: &'a Value) -> Vec<&'a Value> {
    alternatives(root, schema).into_iter().filter_map(|s| s.get("items")).collect()
}
