//! Made maps as the caller of `jetspan simulate` sees them: a folder, whole or not at all.

use std::collections::BTreeMap;
use std::path::Path;
use std::process::{Command, Stdio};

use serde_json::Value;

use crate::support::{Outcome, Run, at, number, parse, program};

/// A small scenario; `more` are lines of the table `[file]`.
fn scenario(more: &str) -> String {
    format!(
        "name = \"test-double\"\nabout = \"two small jets\"\nseed = 5\ncount = 3\n\n\
         [core]\nflux_density_mjy = 20.0\n\n\
         [jet]\nflux_density_mjy = 60.0\n\n\
         [arms]\nlength_arcsec = 20.0\n\n\
         [map]\ncolumns = 70\nrows = 62\nbeam_major_arcsec = 4.0\n\n\
         [file]\n{more}\n"
    )
}

/// A call that makes the small scenario into `out`.
fn simulate<const N: usize>(arguments: [&str; N]) -> Run {
    Run::new(["simulate", "test.toml", "--out", "out"])
        .args(arguments)
        .file("test.toml", scenario("format = \"npy\""))
}

/// Every file of a folder with its bytes.
fn files(folder: &Path) -> BTreeMap<String, Vec<u8>> {
    std::fs::read_dir(folder)
        .expect("a folder")
        .map(|entry| {
            let entry = entry.expect("an entry");
            let bytes = std::fs::read(entry.path()).expect("a file");
            (entry.file_name().to_string_lossy().into_owned(), bytes)
        })
        .collect()
}

fn text(outcome: &Outcome, name: &str) -> String {
    std::fs::read_to_string(outcome.path(name)).expect("the file is there")
}

#[test]
fn a_folder_holds_maps_descriptions_manifest_truth_and_scenario() {
    let outcome = simulate([]).run();
    assert_eq!(outcome.stderr, "");
    assert_eq!(
        outcome.stdout,
        "3 maps written to out; measure with: jetspan measure --manifest out/manifest.csv\n"
    );
    assert_eq!(outcome.names(), ["out", "test.toml"]);
    let names: Vec<String> = files(&outcome.path("out")).into_keys().collect();
    let maps: Vec<&str> = names.iter().filter_map(|name| name.strip_suffix(".npy")).collect();
    assert_eq!(maps.len(), 3, "{names:?}");
    // Six files of maps and three lists.
    assert_eq!(names.len(), 9, "{names:?}");
    let truth: Vec<Value> = text(&outcome, "out/truth.jsonl").lines().map(parse).collect();
    let manifest = text(&outcome, "out/manifest.csv");
    let mut rows = manifest.lines();
    assert_eq!(rows.next(), Some("file,id,host_x_px,host_y_px"));
    // Names are in the order of the sources, and so are the lines of both lists.
    for (map, line) in maps.iter().zip(&truth) {
        assert!(map.starts_with("test-double-"), "{map}");
        let keys: Vec<&String> = line.as_object().expect("an object").keys().take(2).collect();
        assert_eq!(keys, ["id", "file"]);
        assert_eq!(at(line, "file"), &format!("{map}.npy"));
        let description = outcome.json(&format!("out/{map}.map.json"));
        assert_eq!(at(line, "id"), at(&description, "id"));
        let id = at(line, "id").as_str().expect("a text");
        let (x, y) = (at(&description, "host_x_px"), at(&description, "host_y_px"));
        assert_eq!(rows.next(), Some(format!("{map}.npy,{id},{x},{y}").as_str()));
    }
    assert_eq!((rows.next(), truth.len()), (None, 3));
    let used = text(&outcome, "out/scenario.toml");
    assert!(used.contains("count = 3") && used.contains("seed = 5"), "{used}");
}

#[test]
fn the_folder_is_measured_by_its_manifest() {
    let made = simulate([]).run();
    let maps = files(&made.path("out"));
    let mut run = Run::new(["measure", "--manifest", "out/manifest.csv", "--json", "out.jsonl"]);
    for (name, bytes) in &maps {
        run = run.file(format!("out/{name}"), bytes);
    }
    let outcome = run.run();
    let records: Vec<Value> = text(&outcome, "out.jsonl").lines().map(parse).collect();
    assert_eq!(records.len(), 3);
    for record in &records {
        assert_eq!(at(record, "status"), "measured");
        assert_eq!(at(record, "map.id.origin"), "beside-map");
        // The core put in has 20 mJy; the jet's inner end under its beam adds a few.
        let core = number(record, "core.flux_density_mjy");
        assert!((15.0..35.0).contains(&core), "{core}");
    }
}

#[test]
fn the_same_scenario_gives_the_same_bytes_with_any_number_of_threads() {
    let made = |arguments: &[&str]| {
        let outcome = simulate(["--count", "7"]).args(arguments.iter().copied()).run();
        (files(&outcome.path("out")), outcome.stdout)
    };
    let first = made(&["--threads", "1"]);
    assert_eq!(first.0.len(), 2 * 7 + 3);
    for arguments in [&["--threads", "1"][..], &["--threads", "2"], &["--threads", "5"], &[]] {
        assert!(made(arguments) == first, "{arguments:?}");
    }
    // Another seed is another sample, and a longer one begins like the shorter.
    assert!(made(&["--seed", "6"]).0 != first.0);
    let longer = simulate(["--count", "8"]).run();
    let longer = files(&longer.path("out"));
    let lists = |name: &str| name.ends_with(".npy") || name.ends_with(".map.json");
    for (name, bytes) in first.0.iter().filter(|(name, _)| lists(name)) {
        assert!(longer.get(name) == Some(bytes), "{name}");
    }
}

#[test]
fn the_scenario_in_the_folder_makes_it_anew() {
    let first = simulate(["--count", "2", "--seed", "77"]).run();
    let again = Run::new(["simulate", "again.toml", "--out", "out"])
        .file("again.toml", text(&first, "out/scenario.toml"))
        .run();
    let (first, again) = (files(&first.path("out")), files(&again.path("out")));
    assert_eq!(first.len(), 2 * 2 + 3);
    assert!(first == again);
}

#[test]
fn every_format_holds_the_same_brightness() {
    let Some(python) = python() else { return };
    let reference = made("format = \"npy\"\ndtype = \"f8\"");
    let mut others = Vec::new();
    for (format, dtypes) in [
        ("npy", &["f4", "i2", "i4", "u1", "u2"][..]),
        ("npz", &["f8", "i2"]),
        ("png", &["u1", "u2"]),
        ("tiff", &["f4", "f8", "i2", "i4", "u1", "u2"]),
        ("pgm", &["u1", "u2"]),
        ("pfm", &["f4"]),
        ("text", &["f4", "i2"]),
    ] {
        for dtype in dtypes {
            for order in ["little", "big"] {
                others.push(made(&format!(
                    "format = \"{format}\"\ndtype = \"{dtype}\"\nbyte_order = \"{order}\""
                )));
            }
        }
    }
    let output = Command::new(python)
        .arg(concat!(env!("CARGO_MANIFEST_DIR"), "/tests/simulate.py"))
        .arg(reference.path("out"))
        .args(others.iter().map(|other| other.path("out")))
        .output()
        .expect("python starts");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    // A line for every folder that was looked at.
    assert_eq!(output.stdout, b"out\n".repeat(2 * 20));
}

/// The small scenario in a format of its own.
fn made(file: &str) -> Outcome {
    Run::new(["simulate", "test.toml", "--out", "out", "--count", "1"])
        .file("test.toml", scenario(file))
        .run()
}

/// Python with the libraries of the check; without it the check is left out.
fn python() -> Option<&'static str> {
    let script = "import numpy, tifffile, PIL";
    let found = Command::new("python3").args(["-c", script]).stderr(Stdio::null()).status();
    if found.is_ok_and(|status| status.success()) {
        return Some("python3");
    }
    eprintln!("skipped: python3 with numpy, tifffile and Pillow is not here");
    None
}

#[test]
fn a_type_that_the_format_cannot_hold_is_refused_and_nothing_is_left() {
    let outcome = simulate([])
        .file("test.toml", scenario("format = \"png\"\ndtype = \"f8\""))
        .status(2)
        .run();
    for part in ["test-double-", "dtype f8 for a png file", "u1 or u2"] {
        assert!(outcome.error_line().contains(part), "{}", outcome.stderr);
    }
    assert_eq!((outcome.stdout.as_str(), outcome.names()), ("", vec!["test.toml".to_owned()]));
}

#[test]
fn the_scenario_comes_from_a_file_a_name_or_standard_input() {
    // A file wins over the built-in scenario of its name; a folder does not.
    let outcome = Run::new(["simulate", "bright-double", "--out", "out", "--count", "1"])
        .file("bright-double", scenario("format = \"npy\""))
        .run();
    let names: Vec<String> = files(&outcome.path("out")).into_keys().collect();
    assert!(names.iter().any(|name| name.starts_with("test-double-")), "{names:?}");
    let outcome = Run::new(["simulate", "bright-double", "--out", "out", "--count", "1"])
        .file("bright-double/x", "")
        .run();
    let names: Vec<String> = files(&outcome.path("out")).into_keys().collect();
    assert!(names.iter().any(|name| name.starts_with("bright-double-")), "{names:?}");

    let folder = tempfile::tempdir().expect("a folder");
    let input = folder.path().join("in");
    std::fs::write(&input, scenario("format = \"npy\"")).expect("written");
    let status = Command::new(program())
        .args(["simulate", "-", "--out", "out"])
        .current_dir(folder.path())
        .stdin(std::fs::File::open(&input).expect("there"))
        .stdout(Stdio::null())
        .status();
    assert!(status.expect("starts").success());
    assert_eq!(files(&folder.path().join("out")).len(), 9);
}

#[test]
fn built_in_scenarios_are_listed_a_line_each() {
    let list = Run::new(["simulate", "--list"]).run().stdout;
    let names = jetspan::simulate::Scenario::names();
    assert_eq!(list.lines().count(), names.len());
    for ((name, about), line) in names.iter().zip(list.lines()) {
        assert!(line.starts_with(&format!("{name} ")) && line.ends_with(about), "{line}");
    }
    assert!(list.contains("bright-double"));
}

#[test]
fn wrong_calls_end_with_status_2_and_one_line() {
    let valid = ["simulate", "test.toml", "--out", "out"];
    for (arguments, parts) in [
        (
            &["simulate", "brigth-double", "--out", "out"][..],
            &["brigth-double", "nearest: `bright-double`", "built in are"][..],
        ),
        (&["simulate", "none/x.toml", "--out", "out"], &["none/x.toml", "built in are"]),
        (&["simulate", "bytes.toml", "--out", "out"], &["bytes.toml", "UTF-8"]),
        (&["simulate", "long.toml", "--out", "out"], &["long.toml", "1048576 bytes"]),
        (&["simulate", "bad.toml", "--out", "out"], &["bad.toml", "count", "many"]),
        (&["simulate", "-", "--out", "out", "--count"], &["--count"]),
        (&["simulate"], &["SCENARIO", "--out"]),
        (&["simulate", "test.toml"], &["--out"]),
        (&["simulate", "test.toml", "--list"], &["--list"]),
        (&[&valid[..], &["--count", "0"]].concat(), &["--count", "'0'", "1.."]),
        (&[&valid[..], &["--count", "10000001"]].concat(), &["--count", "10000000"]),
        (&[&valid[..], &["--threads", "0"]].concat(), &["--threads", "'0'", "1.."]),
        (&[&valid[..], &["--seed", "-1"]].concat(), &["-1"]),
        (&[&valid[..], &["--seed", "1.5"]].concat(), &["--seed", "1.5"]),
        // scenario.toml could not hold it.
        (
            &[&valid[..], &["--seed", "9223372036854775808"]].concat(),
            &["--seed", "9223372036854775807"],
        ),
    ] {
        let outcome = Run::new(arguments.iter().copied())
            .file("test.toml", scenario(""))
            .file("bad.toml", "name = \"bad\"\ncount = \"many\"\n")
            .file("bytes.toml", b"name = \"\xff\"")
            .file("long.toml", "#".repeat((1 << 20) + 1))
            .status(2)
            .run();
        let line = outcome.error_line();
        for part in parts {
            assert!(line.contains(part), "{arguments:?}: {line} lacks {part}");
        }
        assert_eq!(outcome.stdout, "", "{arguments:?}");
        assert_eq!(outcome.names(), ["bad.toml", "bytes.toml", "long.toml", "test.toml"]);
    }
}

#[test]
fn folders_that_cannot_be_made_are_refused_before_the_work() {
    let run = |out: &str| {
        // Ten million sources would take days: the refusal comes first.
        Run::new(["simulate", "test.toml", "--count", "10000000", "--out", out])
            .file("test.toml", scenario(""))
            .file("old", "old")
            .file("full/x", "x")
            .status(2)
    };
    for (out, part) in [
        ("old", "there is a file of that name"),
        ("full", "a folder of that name with files in it"),
        (".", "files in it"),
        ("none/out", "there is no folder none"),
        ("old/out", "cannot make the folder old/out"),
        ("none/..", "no name"),
    ] {
        let outcome = run(out).run();
        let line = outcome.error_line();
        assert!(line.contains(part) && line.contains("name a new folder"), "{out}: {line}");
        assert_eq!(outcome.stdout, "", "{out}");
        assert_eq!(outcome.names(), ["full", "old", "test.toml"], "{out}");
        assert_eq!(text(&outcome, "old"), "old");
        assert_eq!(files(&outcome.path("full")).len(), 1);
    }
}

#[cfg(unix)]
#[test]
fn links_read_only_folders_and_the_current_one() {
    use std::os::unix::fs::{PermissionsExt, symlink};
    let outcome = simulate([])
        .prepared(|folder| symlink("nowhere", folder.join("out")).expect("linked"))
        .status(2)
        .run();
    assert!(outcome.error_line().contains("leads nowhere"), "{}", outcome.stderr);
    assert_eq!(outcome.names(), ["out", "test.toml"]);

    // The shell would go on standing in the folder that was replaced.
    let outcome = Run::new(["simulate", "bright-double", "--out", "."]).status(2).run();
    assert!(outcome.error_line().contains("the current folder"), "{}", outcome.stderr);
    assert_eq!(outcome.names(), [""; 0]);

    let closed = |folder: &Path| {
        std::fs::create_dir(folder.join("closed")).expect("made");
        let mode = std::fs::Permissions::from_mode(0o555);
        std::fs::set_permissions(folder.join("closed"), mode).expect("set");
        // Root may write everywhere.
        std::fs::write(folder.join("closed/probe"), "").is_err()
    };
    let mut applies = false;
    let run = Run::new(["simulate", "bright-double", "--out", "closed/out", "--count", "1"])
        .prepared(|folder| applies = closed(folder));
    if !applies {
        eprintln!("skipped: root may write into a read-only folder");
        return;
    }
    let outcome = run.status(2).run();
    assert!(outcome.error_line().contains("cannot be written to"), "{}", outcome.stderr);
    assert_eq!(files(&outcome.path("closed")).len(), 0);
}

#[cfg(unix)]
#[test]
fn an_empty_folder_is_filled_and_keeps_its_permissions() {
    use std::os::unix::fs::{MetadataExt, PermissionsExt, symlink};
    let mode = |path: &Path| std::fs::metadata(path).expect("there").mode() & 0o777;
    let outcome = simulate([])
        .prepared(|folder| {
            std::fs::create_dir(folder.join("real")).expect("made");
            let narrow = std::fs::Permissions::from_mode(0o750);
            std::fs::set_permissions(folder.join("real"), narrow).expect("set");
            symlink("real", folder.join("out")).expect("linked");
        })
        .run();
    // The link is written through.
    assert_eq!(outcome.names(), ["out", "real", "test.toml"]);
    assert!(outcome.path("out").symlink_metadata().expect("there").is_symlink());
    assert_eq!(files(&outcome.path("real")).len(), 9);
    assert_eq!(mode(&outcome.path("real")), 0o750);

    // A new one has those of an ordinary new folder, its files those of ordinary files.
    let folder = tempfile::tempdir().expect("a folder");
    let script = "umask 027; exec \"$0\" simulate bright-double --out out --count 1";
    let status = Command::new("sh")
        .args(["-c", script, program()])
        .current_dir(folder.path())
        .stdout(Stdio::null())
        .status();
    assert!(status.expect("a shell").success());
    assert_eq!(mode(&folder.path().join("out")), 0o750);
    assert_eq!(mode(&folder.path().join("out/manifest.csv")), 0o640);
}

#[cfg(unix)]
#[test]
fn a_disk_that_takes_no_more_leaves_nothing() {
    let folder = tempfile::tempdir().expect("a folder");
    // No file may have more than four blocks of 512 bytes: the first map does not fit.
    let script =
        "trap '' XFSZ; ulimit -f 4; exec \"$0\" simulate bright-double --out out --count 1";
    let output = Command::new("sh")
        .args(["-c", script, program()])
        .current_dir(folder.path())
        .output()
        .expect("a shell");
    let error = String::from_utf8_lossy(&output.stderr);
    assert_eq!(output.status.code(), Some(2), "{error}");
    assert!(error.starts_with("error: cannot make the folder out: "), "{error}");
    assert_eq!((error.lines().count(), output.stdout.len()), (1, 0), "{error}");
    assert!(files(folder.path()).is_empty());
}

#[cfg(unix)]
#[test]
fn the_folder_is_there_though_nobody_reads_the_last_line() {
    let folder = tempfile::tempdir().expect("a folder");
    let run = |to: &str, out: &str| {
        let script = format!("\"$0\" simulate bright-double --count 1 --out {out} {to}");
        Command::new("bash")
            .args(["-c", &script, program()])
            .current_dir(folder.path())
            .output()
            .expect("a shell")
    };
    // A reader that has gone is no failure.
    let output = run("| true; exit ${PIPESTATUS[0]}", "piped");
    assert_eq!((output.status.code(), output.stderr.as_slice()), (Some(0), &b""[..]));
    if Path::new("/dev/full").exists() {
        let output = run("> /dev/full", "full");
        let error = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(2), "{error}");
        assert!(error.contains("standard output"), "{error}");
        assert!(folder.path().join("full/manifest.csv").exists());
    }
    assert!(folder.path().join("piped/manifest.csv").exists());
}

#[test]
fn help_fits_eighty_columns_with_a_line_a_flag_and_teaches_at_length() {
    let help = |flag: &str| Run::new(["simulate", flag]).run().stdout;
    let (short, long) = (help("-h"), help("--help"));
    for line in short.lines().chain(long.lines()) {
        assert!(line.chars().count() <= 80, "{line}");
    }
    for flag in ["--out", "--count", "--seed", "--threads", "--list"] {
        let line = short.lines().find(|line| line.trim_start().starts_with(flag));
        // The help stands on the flag's own line.
        assert!(line.is_some_and(|line| line.split_whitespace().count() > 3), "{flag}: {short}");
    }
    assert_eq!(long.matches("\n    jetspan simulate ").count(), 2, "{long}");
    let flat = long.split_whitespace().collect::<Vec<_>>().join(" ");
    for part in ["Examples:", "Exit status:", "would be measured as one", "truth.jsonl"] {
        assert!(flat.contains(part), "no {part:?} in {flat}");
    }
}

#[test]
fn bad_scenarios_end_with_status_2_one_line_and_no_folder() {
    // Text that replaces the first occurrence of another in a good scenario, and what the error
    // must speak of.
    let good = scenario("format = \"npy\"");
    let bad: &[(&str, &str, &[&str])] = &[
        ("seed = 5", "seed = ", &["test.toml:3", "TOML"]),
        ("[core]", "[cores]", &["test.toml:6", "cores", "core"]),
        ("columns", "collumns", &["collumns", "map.columns"]),
        ("columns = 70", "columns = 0", &["map.columns", "0", "1"]),
        ("columns = 70", "columns = 7.5", &["map.columns", "7.5", "whole"]),
        ("columns = 70", "columns = \"many\"", &["map.columns", "many"]),
        ("columns = 70", "columns = []", &["map.columns", "at least one"]),
        ("columns = 70\nrows = 62", "columns = 20000\nrows = 20000", &["pixels"]),
        ("beam_major_arcsec = 4.0", "beam_major_arcsec = -4.0", &["map.beam_major_arcsec", "-4"]),
        ("beam_major_arcsec = 4.0", "beam_minor_arcsec = 9.0", &["beam_minor", "beam_major"]),
        ("flux_density_mjy = 60.0", "speed = 1.0", &["jet.speed", "below 1"]),
        ("flux_density_mjy = 60.0", "speed = 0.5\nlorentz_factor = 2", &["jet.speed", "twice"]),
        ("flux_density_mjy = 60.0", "flux_density_mjy = { uniform = [3, 1] }", &["uniform", "3"]),
        ("flux_density_mjy = 60.0", "flux_density_mjy = { even = [1, 3] }", &["even", "uniform"]),
        (
            "flux_density_mjy = 60.0",
            "flux_density_mjy = { uniform = [1] }",
            &["uniform", "2 finite numbers"],
        ),
        ("flux_density_mjy = 60.0", "flux_density_mjy = { log_uniform = [0, 1] }", &["0"]),
        ("flux_density_mjy = 60.0", "flux_density_mjy = nan", &["jet.flux_density_mjy", "nan"]),
        ("flux_density_mjy = 60.0", "flow = \"river\"", &["jet.flow", "river", "continuous"]),
        ("length_arcsec = 20.0", "length_kpc = 20.0", &["redshift"]),
        ("length_arcsec = 20.0", "advance_speed = 0.1", &["arms.length_arcsec"]),
        ("count = 3", "count = 0", &["count", "0"]),
        ("name = \"test-double\"", "name = \"a/b\"", &["name", "a/b", "letters"]),
        ("[arms]", "[sample]\nselection = \"flux-limited\"\n[arms]", &["jet.speed", "uniform"]),
        (
            "[arms]",
            "[knots]\ncount = 2\nmotion = \"moving\"\n[arms]",
            &["test-double-00000", "redshift"],
        ),
    ];
    for (from, to, words) in bad {
        assert!(good.contains(from), "{from}");
        let outcome = Run::new(["simulate", "test.toml", "--out", "out"])
            .file("test.toml", good.replacen(from, to, 1))
            .status(2)
            .run();
        assert_eq!(outcome.stdout, "", "{to}");
        assert_eq!(outcome.stderr.lines().count(), 1, "{to}: {}", outcome.stderr);
        for word in *words {
            assert!(outcome.stderr.contains(word), "{to}: no {word:?} in {}", outcome.stderr);
        }
        assert_eq!(outcome.names(), ["test.toml"], "{to}: nothing is left behind");
    }
}
