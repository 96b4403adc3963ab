//! Real survey maps: cut-outs of FIRST (Becker, White & Helfand 1995, ApJ 450, 559) with
//! labels by Miraghaei & Best 2017 (MNRAS 466, 4346) as collected by Porter & Scaife 2023
//! (arXiv 2305.11108). The maps are test material that is not shipped: they are read from
//! `../shared` beside the checkout, and the test says so where that is absent. The labels are
//! read here for scoring only. The thresholds of joining regions and of fitting components
//! were set on these very maps, so the shares below are those of a training set.

use std::collections::HashMap;
use std::path::PathBuf;

use serde_json::Value;

use crate::support::{Run, at, find, parse};

fn folder() -> Option<PathBuf> {
    let folder = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("../shared/maps/survey-dev");
    if folder.join("manifest.csv").is_file() {
        Some(folder)
    } else {
        eprintln!("skipped: {} is not there", folder.display());
        None
    }
}

#[test]
fn every_survey_map_is_measured_and_sizes_of_doubles_agree_with_the_labels() {
    let Some(folder) = folder() else { return };
    let outcome = Run::new(["measure", "--manifest"])
        .args([folder.join("manifest.csv")])
        .args(["--json", "-"])
        .status(0)
        .run();
    let records: Vec<Value> = outcome.stdout.lines().map(parse).collect();
    assert_eq!(records.len(), 160);

    let mut labels = HashMap::new();
    let mut reader = csv::Reader::from_path(folder.join("labels.csv")).expect("labels");
    for row in reader.records() {
        let row = row.expect("a row");
        labels.insert(row[0].to_owned(), row);
    }
    let (mut doubles, mut components, mut hotspots) = (0, 0, 0);
    for record in &records {
        let status = at(record, "status").as_str().expect("text");
        assert!(status == "measured" || status == "unresolved", "{status}");
        let file = at(record, "file").as_str().expect("text");
        let name = file.rsplit('/').next().expect("a name");
        let label = &labels[name];
        if (&label[1], &label[2], &label[3]) != ("2", "1", "standard") {
            continue;
        }
        doubles += 1;
        let size: f64 = label[4].parse().expect("a number");
        let agrees = |path: &str| {
            find(record, path).and_then(Value::as_f64).is_some_and(|v| (v / size - 1.0).abs() < 0.2)
        };
        components += i32::from(agrees("source.component_separation_arcsec.value"));
        hotspots += i32::from(agrees("source.hotspot_separation_arcsec.value"));
    }
    eprintln!(
        "within 20 % of the label: components {components}, hot spots {hotspots} of {doubles}"
    );
    assert_eq!(doubles, 48);
    // Measured when this was written: 47 and 44. A change that loses more than two is looked at.
    assert!(components >= 45 && hotspots >= 42);
}

#[test]
fn cores_are_found_without_a_host_as_often_as_their_confidence_says() {
    let Some(folder) = folder() else { return };
    // The host lies at the middle of each map; it is withheld here.
    let mut reader = csv::Reader::from_path(folder.join("manifest.csv")).expect("manifest");
    let heads = reader.headers().expect("heads").clone();
    let keep: Vec<usize> = (0..heads.len()).filter(|&k| !heads[k].starts_with("host")).collect();
    let mut text = keep.iter().map(|&k| &heads[k]).collect::<Vec<_>>().join(",") + "\n";
    for row in reader.records() {
        let row = row.expect("a row");
        let cells: Vec<String> = keep
            .iter()
            .map(|&k| {
                let absolute = folder.join(&row[k]).display().to_string();
                if &heads[k] == "file" { absolute } else { row[k].to_owned() }
            })
            .collect();
        text += &(cells.join(",") + "\n");
    }
    let outcome = Run::new(["measure", "--manifest", "maps.csv", "--json", "-"])
        .file("maps.csv", text)
        .status(0)
        .run();
    let (mut sure, mut right) = (0, 0);
    for record in outcome.stdout.lines().map(parse) {
        let confidence = at(&record, "core.confidence").as_f64().expect("a number");
        if confidence < 0.8 {
            continue;
        }
        sure += 1;
        let place =
            |key: &str| at(&record, &format!("core.position.{key}")).as_f64().expect("a number");
        // One beam of 5.4 arcsec is 3 px.
        right += i32::from((place("x_px") - 149.5).hypot(place("y_px") - 149.5) < 3.0);
    }
    eprintln!("confidence of 0.8 or more: {right} of {sure} cores at the host");
    assert!(sure >= 10 && right * 10 >= sure * 8);
}
