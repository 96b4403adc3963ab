//! The command line as its caller sees it: exit status, output, files.

use std::io::{BufRead, BufReader};
use std::process::{Command, Stdio};

use jetspan::map::description::{DESCRIPTION_KEYS, ValueKind};
use serde_json::Value;

use crate::support::{
    Double, Outcome, RMS, Run, at, find, noise_map, npy_f4, number, parse, program,
};

/// A call of `measure` on the usual made-up source, fully described by flags.
fn measure_double() -> Run {
    let double = Double::default();
    Run::new(["measure", "double.npy"])
        .args(double.flags())
        .file("double.npy", npy_f4(&double.map()))
}

fn lines(text: &str) -> Vec<Value> {
    text.lines().map(parse).collect()
}

#[test]
fn one_map_gives_a_page() {
    let outcome = measure_double().run();
    assert_eq!(outcome.stderr, "");
    assert!(outcome.stdout.starts_with("double  (double.npy)  measured\n"), "{}", outcome.stdout);
    for heading in ["noise", "core", "source", "sides", "jet against counter-jet"] {
        assert!(outcome.stdout.lines().any(|line| line == heading), "no {heading}");
    }
    assert!(!outcome.stdout.contains("NaN") && !outcome.stdout.contains("inf "));
    assert_eq!(outcome.names(), ["double.npy"], "nothing is written without --json");
}

#[test]
fn several_maps_give_a_line_each() {
    let outcome = measure_double()
        .args(["noise.npy"])
        .file("noise.npy", npy_f4(&noise_map(100, 90, 3)))
        .run();
    let table: Vec<&str> = outcome.stdout.lines().collect();
    assert_eq!(table.len(), 3, "{}", outcome.stdout);
    assert!(table[0].starts_with("map ") && table[1].starts_with("double "));
    assert!(table[2].starts_with("noise ") && table[2].contains("no detection"), "{}", table[2]);
}

#[test]
fn one_record_goes_to_a_file_beside_the_page() {
    let outcome = measure_double().args(["--json", "out.json"]).run();
    assert!(outcome.stdout.contains("jet against counter-jet"));
    let record = outcome.json("out.json");
    assert_eq!(at(&record, "status"), "measured");
    assert_eq!(at(&record, "file"), "double.npy");
    assert_eq!(at(&record, "record_version"), 1);
    // The noise put in; 4 % is three standard errors of the rms over 21000/28 beams.
    let rms = number(&record, "noise.rms_mjy_per_beam");
    assert!((rms / RMS - 1.0).abs() < 0.1, "{rms}");
    let total = number(&record, "source.total_flux_density_mjy");
    assert!(total > 100.0, "{total}");
}

#[test]
fn a_record_on_standard_output_comes_without_a_table() {
    let outcome = measure_double().args(["--json", "-"]).run();
    let record = outcome.stdout_json();
    assert_eq!(at(&record, "id"), "double");
    assert_eq!(outcome.names(), ["double.npy"]);
}

#[test]
fn a_failed_map_is_a_record_and_the_rest_goes_on() {
    let outcome = Run::new(["measure", "a.npy", "bad.npy", "c.npy", "--json", "-"])
        .file("a.npy", npy_f4(&noise_map(64, 60, 1)))
        .file("bad.npy", b"\x93NUMPY\x01\x00")
        .file("c.npy", npy_f4(&noise_map(64, 60, 2)))
        .status(1)
        .run();
    let records = lines(&outcome.stdout);
    let states: Vec<&Value> = records.iter().map(|record| at(record, "status")).collect();
    assert_eq!(states, ["no-detection", "failed", "no-detection"]);
    assert_eq!(at(&records[1], "error.code"), "truncated");
    assert!(outcome.error_line().starts_with("error: bad.npy: the file is cut short"));
}

#[test]
fn a_failed_map_alone_still_gives_its_page_and_record() {
    let run = || Run::new(["measure", "bad.npy"]).file("bad.npy", "1 x\n").status(1);
    assert!(run().run().stdout.contains("failed: line 1, field 2"));
    let outcome = run().args(["--json", "out.json"]).run();
    assert_eq!(at(&outcome.json("out.json"), "error.code"), "bad-number");
}

#[test]
fn a_manifest_alone_names_the_maps() {
    let outcome = Run::new(["measure", "--manifest", "lists/maps.csv", "--json", "-"])
        .file("lists/maps.csv", "file,id\nfar/a.npy,first\nb.npy,second\n")
        .file("lists/far/a.npy", npy_f4(&noise_map(64, 60, 1)))
        .file("lists/b.npy", npy_f4(&noise_map(64, 60, 2)))
        .run();
    let records = lines(&outcome.stdout);
    let ids: Vec<&Value> = records.iter().map(|record| at(record, "id")).collect();
    assert_eq!(ids, ["first", "second"]);
    assert_eq!(at(&records[0], "map.id.origin"), "manifest");
}

#[test]
fn four_layers_each_over_the_one_before() {
    let outcome = Run::new(["measure", "a.npy", "--json", "-", "--manifest", "maps.csv"])
        .args(["--defaults", "defaults.json", "--unit", "uJy/beam"])
        .file("a.npy", npy_f4(&noise_map(64, 60, 1)))
        .file(
            "defaults.json",
            r#"{"unit":"Jy/pixel","redshift":0.1,"frequency_ghz":1.4,"pixel_scale_arcsec":9}"#,
        )
        .file("maps.csv", "file,unit,redshift,frequency_ghz\na.npy,Jy/beam,0.2,5\n")
        .file("a.map.json", r#"{"unit":"mJy/beam","redshift":0.3}"#)
        .run();
    let record = outcome.stdout_json();
    for (key, value, origin) in [
        ("unit", Value::from("uJy/beam"), "flag"),
        ("redshift", Value::from(0.3), "beside-map"),
        ("frequency_ghz", Value::from(5.0), "manifest"),
        ("pixel_scale_arcsec", Value::from(9.0), "defaults"),
        ("east", Value::from("left"), "built-in"),
    ] {
        let used = at(&record, &format!("map.{key}"));
        let same = used["value"] == value || used["value"].as_f64() == value.as_f64();
        assert!(same && used["origin"] == origin, "{key}: {used}");
    }
}

/// A value of the right kind for a key, and what the record must show.
fn sample(name: &str, kind: ValueKind) -> (String, Value) {
    let text = match (name, kind) {
        ("pixel_scale_mas" | "beam_major_mas", _) => "1500",
        ("beam_minor_mas", _) => "1200",
        ("beam_major_arcsec", _) => "2.5",
        ("beam_minor_arcsec", _) => "2",
        (_, ValueKind::Choice(words)) => words[words.len() - 1],
        (_, ValueKind::Text) => "x1",
        (_, ValueKind::Epoch) => "2019-05-21",
        (_, ValueKind::Integer) => "0",
        _ => "0.75",
    };
    let value = text.parse::<f64>().map_or(Value::from(text), Value::from);
    (text.to_owned(), value)
}

#[test]
fn every_description_key_is_a_flag_with_hyphens() {
    for key in DESCRIPTION_KEYS {
        let flag = |name: &str| format!("--{}", name.replace('_', "-"));
        let (text, value) = sample(key.name, key.kind);
        // What this key is of no use without.
        let company: &[(&str, &str)] = match key.name {
            "beam_minor_arcsec" | "beam_minor_mas" | "beam_pa_deg" => &[("beam_major_arcsec", "3")],
            "centre_ra_deg" => &[("centre_dec_deg", "1")],
            "centre_dec_deg" => &[("centre_ra_deg", "1")],
            "centre_x_px" => {
                &[("centre_y_px", "1"), ("centre_ra_deg", "1"), ("centre_dec_deg", "1")]
            }
            "centre_y_px" => {
                &[("centre_x_px", "1"), ("centre_ra_deg", "1"), ("centre_dec_deg", "1")]
            }
            "host_ra_deg" => &[("host_dec_deg", "1")],
            "host_dec_deg" => &[("host_ra_deg", "1")],
            "host_x_px" => &[("host_y_px", "1")],
            "host_y_px" => &[("host_x_px", "1")],
            "core_x_px" => &[("core_y_px", "1")],
            "core_y_px" => &[("core_x_px", "1")],
            _ => &[],
        };
        let run = Run::new(["measure", "a.npy", "--json", "-", &flag(key.name), &text])
            .args(company.iter().flat_map(|(name, text)| [flag(name), (*text).to_owned()]))
            .file("a.npy", npy_f4(&noise_map(48, 44, 1)));
        if key.name == "array" {
            // No format read today has named arrays: the flag is understood, the map refused.
            let outcome = run.status(1).run();
            assert_eq!(at(&outcome.stdout_json(), "error.code"), "no-such-array");
            continue;
        }
        let record = run.run().stdout_json();
        let shown = key.name.replace("_mas", "_arcsec");
        let shown = if DESCRIPTION_KEYS.iter().any(|k| k.name == shown) {
            shown
        } else {
            key.name.to_owned()
        };
        let used = at(&record, &format!("map.{shown}"));
        assert_eq!(used["origin"], "flag", "{}", key.name);
        let same = match (used["value"].as_f64(), value.as_f64()) {
            // Milliarcseconds are shown in arcsec.
            (Some(a), Some(b)) if key.name.ends_with("_mas") => (a * 1e3 / b - 1.0).abs() < 1e-12,
            (Some(a), Some(b)) => (a - b).abs() < 1e-12,
            _ => used["value"] == value,
        };
        assert!(same, "{}: {used}, given {value}", key.name);
        // Underscores are the file's spelling.
        if key.name.contains('_') {
            let outcome =
                Run::new(["measure", "a.npy", &format!("--{}", key.name), &text]).status(2).run();
            assert!(outcome.error_line().contains(&flag(key.name)), "{}", outcome.stderr);
        }
    }
}

#[test]
fn a_micro_sign_is_as_good_as_a_u() {
    for sign in ["u", "\u{b5}", "\u{3bc}"] {
        let run =
            Run::new(["measure", "a.npy", "--json", "-", "--unit", &format!("{sign}Jy/beam")]);
        let record = run.file("a.npy", npy_f4(&noise_map(48, 44, 1))).run().stdout_json();
        assert_eq!(at(&record, "map.unit.value"), "uJy/beam", "{sign}");
    }
}

#[test]
fn explain_finds_paths_indices_and_endings() {
    let explain = |key: &str| Run::new(["explain", key]).run().stdout;
    let by_path = explain("sides[].length_arcsec");
    assert!(by_path.starts_with("sides[].length_arcsec\n  unit     arcsec\n"), "{by_path}");
    assert_eq!(explain("sides[1].length_arcsec"), by_path);
    let endings = explain("position_angle_deg");
    for path in ["source.position_angle_deg", "sides[].position_angle_deg"] {
        assert!(endings.lines().any(|line| line.starts_with(path)), "{endings}");
    }
    let all = Run::new(["explain"]).run().stdout;
    assert!(all.lines().count() >= jetspan::quantity::QUANTITIES.len());
    let outcome = Run::new(["explain", "core_prominense"]).status(2).run();
    assert!(outcome.error_line().contains("nearest: `core_prominence`"), "{}", outcome.stderr);
    assert_eq!(outcome.stdout, "");
}

#[test]
fn every_quantity_is_explained_by_its_own_path() {
    for quantity in jetspan::quantity::QUANTITIES {
        let text = Run::new(["explain", quantity.path]).run().stdout;
        // The text is wrapped: words count, not the breaks between them.
        let words = |text: &str| text.split_whitespace().collect::<Vec<_>>().join(" ");
        assert!(text.starts_with(quantity.path), "{text}");
        assert!(words(&text).contains(&words(quantity.meaning)), "{text}");
        assert!(text.lines().all(|line| line.chars().count() <= 80), "{text}");
    }
}

#[test]
fn explain_knows_symbols_flags_keys_and_groups() {
    for (word, part) in [
        ("las", "source.largest_angular_size_arcsec"),
        ("strip-blanks", "flag     Caution of stage brightness"),
        ("beam-major-arcsec", "flag     --beam-major-arcsec ARCSEC"),
        ("core", "core.flux_density_mjy  [mJy]"),
    ] {
        let text = Run::new(["explain", word]).run().stdout;
        assert!(text.contains(part), "{word}: {text}");
    }
}

#[test]
fn schemas_are_printed() {
    for of in ["record", "description"] {
        let schema = Run::new(["schema", of]).run().stdout_json();
        assert!(schema["$schema"].as_str().is_some_and(|s| s.contains("2020-12")), "{of}");
    }
    let outcome = Run::new(["schema", "recod"]).status(2).run();
    let line = outcome.error_line();
    assert!(line.contains("'recod'") && line.contains("record"), "{line}");
}

#[test]
fn wrong_calls_end_with_status_2_and_one_line() {
    for (arguments, parts) in [
        (&["measure"][..], &["no map named", "--manifest"][..]),
        (&["mesure"], &["mesure", "measure"]),
        (&["measure", "a.npy", "--redshif", "1"], &["--redshif", "--redshift"]),
        (&["measure", "a.npy", "--redshift", "near"], &["--redshift", "near", "a number"]),
        (&["measure", "a.npy", "--redshift", "nan"], &["--redshift", "nan", "a number"]),
        (&["measure", "a.npy", "--redshift"], &["--redshift", "value"]),
        (&["measure", "a.npy", "--unit", "Jy/Beam"], &["Jy/Beam", "Jy/beam"]),
        (&["measure", "a.npy", "--confidence", "95"], &["--confidence", "between 0.5 and 0.9999"]),
        (&["measure", "a.npy", "--confidence", "nan"], &["--confidence"]),
        (
            &["measure", "a.npy", "--detection-sigma", "2"],
            &["--detection-sigma", "--outline-sigma"],
        ),
        (&["measure", "a.npy", "--omega-matter", "-1"], &["omega"]),
        (&["measure", "a.npy", "--defaults", "no.json"], &["no.json", "does not exist"]),
        (&["measure", "a.npy", "--manifest", "no.csv"], &["no.csv", "does not exist"]),
        (&["schema"], &["OF"]),
    ] {
        let outcome = Run::new(arguments.iter().copied()).status(2).run();
        let line = outcome.error_line();
        for part in parts {
            assert!(line.contains(part), "{arguments:?}: {line} lacks {part}");
        }
        assert_eq!(outcome.stdout, "", "{arguments:?}");
    }
}

#[test]
fn help_fits_eighty_columns_and_long_help_has_reasons_and_examples() {
    for command in [&[][..], &["measure"], &["explain"], &["schema"]] {
        let help = |flag: &str| Run::new(command.iter().copied()).args([flag]).run().stdout;
        for line in help("-h").lines().chain(help("--help").lines()) {
            assert!(line.chars().count() <= 80, "{command:?}: {line}");
        }
        let long = help("--help");
        assert!(long.contains("Examples:") && long.contains("jetspan "), "{command:?}: {long}");
        assert!(long.len() > help("-h").len(), "{command:?}");
    }
    let long = Run::new(["measure", "--help"]).run().stdout;
    for reason in ["a strip that follows noise would be biased", "Exit status:"] {
        let flat = long.split_whitespace().collect::<Vec<_>>().join(" ");
        assert!(flat.contains(reason), "no {reason:?} in {flat}");
    }
    let version = Run::new(["--version"]).run().stdout;
    assert_eq!(version, format!("jetspan {}\n", env!("CARGO_PKG_VERSION")));
    assert!(Run::new([""; 0]).status(2).run().stderr.contains("Usage: jetspan"));
}

#[test]
fn a_closed_pipe_is_quiet_and_ends_the_work() {
    for arguments in [&["schema", "record"][..], &["explain"], &["measure", "--help"]] {
        let outcome = through_closed_pipe(arguments);
        assert_eq!(outcome, (Some(0), String::new()), "{arguments:?}");
    }
}

/// Runs with a reader that goes away after the first line; exit status and standard error.
fn through_closed_pipe(arguments: &[&str]) -> (Option<i32>, String) {
    let mut child = Command::new(program())
        .args(arguments)
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("starts");
    let mut first = String::new();
    let stdout = child.stdout.take().expect("piped");
    BufReader::with_capacity(16, stdout).read_line(&mut first).expect("a line");
    let output = child.wait_with_output().expect("ends");
    (output.status.code(), String::from_utf8_lossy(&output.stderr).into_owned())
}

#[test]
fn records_reach_their_file_though_nobody_reads_the_table() {
    let folder = tempfile::tempdir().expect("a folder");
    let path = |name: &str| folder.path().join(name).display().to_string();
    for name in ["a.npy", "b.npy", "c.npy"] {
        std::fs::write(path(name), npy_f4(&noise_map(64, 60, 1))).expect("written");
    }
    let maps = [path("a.npy"), path("b.npy"), path("c.npy")];
    let out = path("out.jsonl");
    let arguments = ["measure", &maps[0], &maps[1], &maps[2], "--json", &out];
    assert_eq!(through_closed_pipe(&arguments), (Some(0), String::new()));
    assert_eq!(std::fs::read_to_string(&out).expect("written").lines().count(), 3);
    // Without a file there is nothing to go on for.
    assert_eq!(through_closed_pipe(&arguments[..4]), (Some(0), String::new()));
}

#[cfg(unix)]
#[test]
fn files_have_ordinary_permissions_and_replace_what_was_there() {
    use std::os::unix::fs::PermissionsExt;
    let folder = tempfile::tempdir().expect("a folder");
    std::fs::write(folder.path().join("a.npy"), npy_f4(&noise_map(64, 60, 1))).expect("written");
    let out = folder.path().join("out.json");
    std::fs::write(&out, "old").expect("written");
    for (mask, mode) in [("022", 0o644), ("077", 0o600), ("002", 0o664)] {
        let script = format!("umask {mask}; exec \"$0\" measure a.npy --json out.json");
        let status = Command::new("sh")
            .args(["-c", &script, program()])
            .current_dir(folder.path())
            .stdout(Stdio::null())
            .status()
            .expect("a shell");
        assert!(status.success());
        let found = std::fs::metadata(&out).expect("written").permissions().mode() & 0o777;
        assert_eq!(found, mode, "umask {mask}");
        parse(&std::fs::read_to_string(&out).expect("written"));
        std::fs::remove_file(&out).expect("removed");
    }
}

#[cfg(unix)]
#[test]
fn a_link_is_written_through() {
    let outcome = Run::new(["measure", "a.npy", "--json", "link.json"])
        .file("a.npy", npy_f4(&noise_map(64, 60, 1)))
        .file("real.json", "old")
        .prepared(|folder| {
            std::os::unix::fs::symlink("real.json", folder.join("link.json")).expect("linked");
        })
        .run();
    assert!(outcome.path("link.json").symlink_metadata().expect("there").is_symlink());
    assert_eq!(at(&outcome.json("real.json"), "status"), "no-detection");
}

/// What must hold after a refused output: one line, nothing measured, nothing left.
fn refused(outcome: &Outcome, part: &str, names: &[&str]) {
    assert!(outcome.error_line().contains(part), "{} lacks {part}", outcome.stderr);
    assert_eq!(outcome.stdout, "");
    assert_eq!(outcome.names(), names);
}

#[test]
fn outputs_that_cannot_be_written_are_refused_before_the_work() {
    let run = |out: &str| {
        Run::new(["measure", "a.npy", "--json", out])
            .file("a.npy", npy_f4(&noise_map(64, 60, 1)))
            .status(2)
    };
    refused(&run("none/out.json").run(), "none/out.json", &["a.npy"]);
    refused(&run("dir").file("dir/x", "").run(), "it is a folder", &["a.npy", "dir"]);
    let outcome = run("old.json")
        .file("old.json", "old")
        .prepared(|folder| {
            let path = folder.join("old.json");
            let mut permissions = std::fs::metadata(&path).expect("there").permissions();
            permissions.set_readonly(true);
            std::fs::set_permissions(&path, permissions).expect("set");
        })
        .run();
    refused(&outcome, "read-only", &["a.npy", "old.json"]);
    assert_eq!(std::fs::read_to_string(outcome.path("old.json")).expect("there"), "old");
}

#[test]
fn no_output_takes_the_place_of_an_input() {
    let map = npy_f4(&noise_map(64, 60, 1));
    let sidecar = r#"{"redshift":0.1}"#;
    for out in ["a.npy", "./a.npy", "a.map.json", "list.csv", "defaults.json"] {
        let outcome = Run::new(["measure", "a.npy", "--manifest", "list.csv", "--defaults"])
            .args(["defaults.json", "--json", out])
            .file("a.npy", &map)
            .file("a.map.json", sidecar)
            .file("list.csv", "file\na.npy\n")
            .file("defaults.json", "{}")
            .status(2)
            .run();
        let names = ["a.map.json", "a.npy", "defaults.json", "list.csv"];
        refused(&outcome, "name another file for the output", &names);
        assert!(std::fs::read(outcome.path("a.npy")).expect("there") == map);
        assert!(std::fs::read_to_string(outcome.path("a.map.json")).expect("there") == sidecar);
    }
}

#[test]
fn the_same_map_gives_the_same_record() {
    let first = measure_double().args(["--json", "-"]).run().stdout;
    assert_eq!(first, measure_double().args(["--json", "-"]).run().stdout);
    // One indented object for one map, one line for several.
    assert!(first.lines().count() > 100);
    let two = measure_double().args(["double.npy", "--json", "-"]).run().stdout;
    assert_eq!(two.lines().count(), 2);
    assert_eq!(parse(two.lines().next().expect("a line")), parse(&first));
    assert!(find(&parse(&first), "software.version").is_some());
}
