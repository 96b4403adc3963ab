//! Bad input of every kind: one line that helps, or a record with flags; never a panic.

use std::path::Path;

use ndarray::Array2;
use serde_json::Value;

use crate::support::{
    Double, Outcome, Run, at, find, flag_codes, noise_map, npy, npy_f4, npy_with_header, parse,
    png, png8, png16, point_map, text_grid,
};

/// Keys that the record of a failed map keeps.
const FAILED_KEYS: [&str; 8] =
    ["record_version", "id", "file", "status", "error", "input", "settings", "software"];

/// How a case must end.
enum Expect {
    /// Exit status 2, no record: what the error line says.
    Refused(&'static [&'static str]),
    /// Exit status 1 and a failed record: its code, what the error line says.
    Failed(&'static str, &'static [&'static str]),
    /// Exit status 0: one of these states, and these flags among others.
    Record(&'static [&'static str], &'static [&'static str]),
}
use Expect::{Failed, Record, Refused};

/// What the program says of numbers it does not take.
const NUMBERS: &str = "needed are plain real or whole numbers";
/// What it says of files it does not take.
const READ: &str = "read are .npy arrays, gray PNG images and text grids";

const NOTHING: &[&str] = &["no-detection"];
const FOUND: &[&str] = &["measured", "unresolved"];
const ANY: &[&str] = &["measured", "unresolved", "no-detection"];

/// A map file `map` measured with these flags; more files where a case needs them.
struct Case {
    name: &'static str,
    map: Vec<u8>,
    files: Vec<(&'static str, Vec<u8>)>,
    flags: Vec<String>,
    expect: Expect,
}

fn case(name: &'static str, map: impl Into<Vec<u8>>, flags: &str, expect: Expect) -> Case {
    let flags = flags.split_whitespace().map(str::to_owned).collect();
    Case { name, map: map.into(), files: Vec::new(), flags, expect }
}

/// The same with a description beside the map.
fn beside(name: &'static str, text: impl Into<Vec<u8>>, expect: Expect) -> Case {
    let mut case = case(name, npy_f4(&noise_map(64, 60, 1)), "", expect);
    case.files.push(("map.map.json", text.into()));
    case
}

/// The same with a manifest.
fn listed(name: &'static str, text: impl Into<Vec<u8>>, expect: Expect) -> Case {
    let mut case = case(name, npy_f4(&noise_map(64, 60, 1)), "--manifest list", expect);
    case.files.push(("list", text.into()));
    case
}

/// Checks a table and names every case that fails.
fn check_all(cases: Vec<Case>) {
    let failed: Vec<&str> = cases
        .into_iter()
        .filter_map(|case| {
            let name = case.name;
            std::panic::catch_unwind(move || check(case)).is_err().then_some(name)
        })
        .collect();
    assert!(failed.is_empty(), "{failed:?}: see above");
}

fn check(case: Case) {
    let Case { name, map, files, flags, expect } = case;
    let status = match &expect {
        Refused(_) => 2,
        Failed(..) => 1,
        Record(..) => 0,
    };
    let mut run = Run::new(["measure", "map.npy", "--json", "out.json"])
        .args(flags)
        .file("map.npy", &map)
        .status(status);
    for (file, content) in files {
        run = run.file(file, content);
    }
    println!("{name}");
    let outcome = run.run();
    assert!(!outcome.names().iter().any(|n| n.starts_with('.')), "{name}: {:?}", outcome.names());
    judge(name, &outcome, &expect);
}

fn judge(name: &str, outcome: &Outcome, expect: &Expect) {
    let says = |parts: &[&str]| {
        let line = outcome.error_line();
        for part in parts {
            assert!(line.contains(part), "{name}: {line:?} lacks {part:?}");
        }
        let message = line.trim_start_matches("error: ");
        let first = message.chars().next().expect("a message");
        assert!(!first.is_uppercase(), "{name}: {line}");
    };
    match expect {
        Refused(parts) => {
            says(parts);
            assert!(!outcome.path("out.json").exists(), "{name}: a record was written");
            assert_eq!(outcome.stdout, "", "{name}");
        }
        Failed(code, parts) => {
            says(parts);
            let record = outcome.json("out.json");
            assert_eq!(at(&record, "error.code"), code, "{name}");
            failed_contract(&record);
        }
        Record(states, flags) => {
            assert_eq!(outcome.stderr, "", "{name}");
            let record = outcome.json("out.json");
            let status = at(&record, "status").as_str().expect("a text");
            let codes = flag_codes(&record);
            assert!(states.contains(&status), "{name}: {status} {codes:?}");
            for flag in *flags {
                assert!(codes.contains(flag), "{name}: no {flag} in {codes:?}");
            }
            assert!(!outcome.stdout.contains("NaN"), "{name}: {}", outcome.stdout);
        }
    }
}

fn failed_contract(record: &Value) {
    for key in FAILED_KEYS {
        assert!(record.get(key).is_some(), "no {key} in {record}");
    }
    assert_eq!(at(record, "status"), "failed");
    for text in ["error.code", "error.message", "software.version"] {
        assert!(at(record, text).as_str().is_some_and(|text| !text.is_empty()), "{text}");
    }
    let input = at(record, "input");
    assert!(
        find(input, "sha256").is_some() || at(input, "missing") == "not-read",
        "the input is told as far as it was read: {input}"
    );
}

fn header(descr: &str, shape: &str) -> String {
    format!("{{'descr': {descr}, 'fortran_order': False, 'shape': {shape}, }}")
}

#[test]
fn damaged_array_files() {
    let good = npy_f4(&noise_map(64, 60, 1));
    let zeros = vec![0u8; 256];
    let mut long_header = b"\x93NUMPY\x02\x00".to_vec();
    long_header.extend(0xffff_fff0u32.to_le_bytes());
    long_header.extend(b"{'descr': '<f4'");
    let mut trailing = good.clone();
    trailing.extend(b"more");
    let with = |descr: &str, shape: &str| npy_with_header(&header(descr, shape), &zeros);
    check_all(vec![
        case("empty file", "", "", Failed("empty-file", &["the file is empty", "save the map"])),
        case("cut in the magic", &good[..7], "", Failed("truncated", &["cut short", "header"])),
        case("cut in the header", &good[..40], "", Failed("truncated", &["cut short", "40 bytes"])),
        case(
            "cut in the body",
            &good[..good.len() - 5],
            "",
            Failed("truncated", &["found 15355 bytes", "needed 15360", "copy it again"]),
        ),
        case("no body", &good[..128], "", Failed("truncated", &["found 0 bytes"])),
        case("bytes after the array", trailing, "", Failed("trailing-bytes", &["4 bytes follow"])),
        case("4 GiB header", long_header, "", Failed("damaged-header", &["4294967280 bytes"])),
        case(
            "huge shape",
            with("'<f4'", "(4000000000, 4000000000)"),
            "",
            Failed("truncated", &["more bytes than any file can hold"]),
        ),
        case(
            "shape beyond 64 bits",
            with("'<f4'", "(9000000000000000000, 9)"),
            "",
            Failed("truncated", &["more bytes than any file can hold"]),
        ),
        case(
            "large shape, small file",
            with("'<f8'", "(30000, 30000)"),
            "",
            Failed("truncated", &["found 256 bytes", "needed 7200000000"]),
        ),
        case(
            "negative shape",
            with("'<f4'", "(-4, 16)"),
            "",
            Failed("damaged-header", &["shape holds something else than whole numbers"]),
        ),
        case(
            "no shape",
            npy_with_header("{'descr': '<f4', 'fortran_order': False, }", &zeros),
            "",
            Failed("damaged-header", &["lacks descr, fortran_order or shape"]),
        ),
        case(
            "zero rows",
            npy_with_header(&header("'<f4'", "(0, 16)"), b""),
            "",
            Failed("no-pixels", &["0 rows and 16 columns"]),
        ),
        case("one axis", with("'<f4'", "(64,)"), "", Failed("too-few-axes", &["[64]", "reshape"])),
        case(
            "no axis",
            npy_with_header(&header("'<f4'", "()"), &zeros[..4]),
            "",
            Failed("too-few-axes", &["[]"]),
        ),
        case("three axes", with("'<f4'", "(4, 4, 4)"), "", Failed("too-many-axes", &["[4, 4, 4]"])),
        case(
            "objects",
            with("'|O'", "(8, 8)"),
            "",
            Failed("unsupported-numbers", &["Python objects", NUMBERS, "float32"]),
        ),
        case(
            "structures",
            with("[('a', '<f4'), ('b', '<f4')]", "(8, 8)"),
            "",
            Failed("unsupported-numbers", &["a structured array", NUMBERS]),
        ),
        case(
            "complex",
            with("'<c8'", "(4, 8)"),
            "",
            Failed("unsupported-numbers", &["complex numbers ('<c8')", NUMBERS]),
        ),
        case(
            "strings",
            with("'<U4'", "(4, 4)"),
            "",
            Failed("unsupported-numbers", &["'<U4'", NUMBERS]),
        ),
        case("dates", with("'<M8[s]'", "(4, 8)"), "", Failed("unsupported-numbers", &["'<M8[s]'"])),
        case(
            "control characters in the header",
            with("'\u{1b}[31m\u{7}'", "(8, 8)"),
            "",
            Failed("unsupported-numbers", &["\\u{1b}"]),
        ),
        case(
            "header is a bomb of brackets",
            npy_with_header(&"(".repeat(20_000), b""),
            "",
            Failed("damaged-header", &["'{' is needed"]),
        ),
        case(
            "version 9",
            [&b"\x93NUMPY\x09\x00"[..], &zeros].concat(),
            "",
            Failed("damaged-header", &["version is 9", "1 to 3"]),
        ),
        case(
            "plane of a plane",
            good.clone(),
            "--plane 3",
            Failed("no-such-plane", &["plane 3", "one plane"]),
        ),
        case("array of a single array", good, "--array a", Failed("no-such-array", &["\"a\""])),
    ]);
}

#[test]
fn other_files() {
    let gray = png16(&(noise_map(64, 60, 1) * 100.0 + 1000.0));
    let mut bomb = gray.clone();
    bomb[16..24].copy_from_slice(&[0, 0, 0xff, 0xff, 0, 0, 0x7f, 0xff]);
    // PNG specification, third edition, 11.2.1: byte 25 of the file is the colour type.
    let mut palette = png8(&(noise_map(16, 16, 1) + 100.0));
    palette[25] = 3;
    let mut flipped = gray.clone();
    let middle = flipped.len() / 2;
    flipped[middle] ^= 0xff;
    check_all(vec![
        case(
            "colour PNG",
            png(image::RgbImage::new(9, 9)),
            "",
            Failed("unsupported-pixels", &["colours", "16-bit gray", "single-channel gray"]),
        ),
        case(
            "PNG with transparency",
            png(image::GrayAlphaImage::new(9, 9)),
            "",
            Failed("unsupported-pixels", &["transparency"]),
        ),
        case("palette PNG", palette, "", Failed("unsupported-pixels", &["a colour palette"])),
        case("PNG cut in the header", &gray[..20], "", Failed("truncated", &["PNG header"])),
        case(
            "PNG cut in the data",
            &gray[..gray.len() / 2],
            "",
            Failed("damaged-data", &["image data are damaged", "save the map again"]),
        ),
        case("PNG with a changed byte", flipped, "", Failed("damaged-data", &["are damaged"])),
        case(
            "PNG bomb",
            bomb,
            "",
            Failed("truncated", &["needed at least", "65535 x 32767 pixels"]),
        ),
        case(
            "ragged text",
            "1 2 3\n4 5\n",
            "",
            Failed("ragged-row", &["line 2 has 2", "needed 3"]),
        ),
        case(
            "words in text",
            "1 2\n3 north\n",
            "",
            Failed("bad-number", &["line 2, field 2", "\"north\"", "needed a number"]),
        ),
        case("only comments", "# nothing\n\n", "", Failed("no-pixels", &["0 rows"])),
        case("a huge line of text", "x".repeat(1 << 20), "", Failed("bad-number", &["line 1"])),
        case(
            "commas for points",
            "1,5;2,5\n3,5;4,5\n",
            "",
            Failed("mixed-separators", &["line 1"]),
        ),
        case(
            "a container with header cards",
            format!("SIMPLE  ={:>21}", "T"),
            "",
            Failed("unsupported-format", &["a FITS container", READ, ".npy"]),
        ),
        case("TIFF", "II*\0\x08\0\0\0", "", Failed("unsupported-format", &["a TIFF image", READ])),
        case("npz", "PK\x03\x04rest", "", Failed("unsupported-format", &["a zip archive", READ])),
        case("PNM", "P5\n2 2\n255\nabcd", "", Failed("unsupported-format", &["a PNM image", READ])),
        case(
            "JPEG",
            [0xff, 0xd8, 0xff, 0xe0],
            "",
            Failed("unsupported-format", &["a JPEG image", "lossy"]),
        ),
        case("pickle", [0x80, 4, 0x95, 0], "", Failed("unsupported-format", &["pickle"])),
        case(
            "random bytes",
            (0..4096u32).map(|i| (i * i % 251) as u8).collect::<Vec<_>>(),
            "",
            Failed("unsupported-format", &["binary data", READ]),
        ),
        case(
            "its own description",
            r#"{"redshift": 1}"#,
            "",
            Failed("unsupported-format", &["JSON", "name the map, not its description"]),
        ),
    ]);
}

/// Changes every pixel.
fn mapped(map: Array2<f64>, f: impl Fn((usize, usize), f64) -> f64) -> Array2<f64> {
    let mut out = map;
    for (place, value) in out.indexed_iter_mut() {
        *value = f(place, *value);
    }
    out
}

#[test]
fn odd_numbers() {
    let double = Double::default();
    let flags = double.flags().join(" ");
    let map = double.map();
    let f8 = |map: &Array2<f64>| npy(map, "<f8", false);
    let with = |f: &dyn Fn((usize, usize), f64) -> f64| f8(&mapped(map.clone(), f));
    let flat = |value: f64| npy_f4(&Array2::from_elem((64, 60), value));
    let extremes = [f64::MAX, f64::MIN, 1e308, -1e308];
    check_all(vec![
        case(
            "one pixel",
            npy_f4(&Array2::ones((1, 1))),
            "",
            Failed("too-few-pixels", &["larger map"]),
        ),
        case("one row", npy_f4(&noise_map(200, 1, 1)), "", Record(NOTHING, &[])),
        case("one column", npy_f4(&noise_map(1, 200, 1)), "", Record(NOTHING, &[])),
        case(
            "two by two",
            npy_f4(&noise_map(2, 2, 1)),
            "",
            Failed("too-few-pixels", &["4 pixels", "larger map"]),
        ),
        case("all blank", flat(f64::NAN), "", Failed("all-blank", &["all 3840 pixels are blank"])),
        case("all infinite", flat(f64::INFINITY), "", Failed("all-blank", &["3840 pixels"])),
        case("all equal", flat(3.25), "", Failed("all-equal", &["3.25", "nothing to measure"])),
        case("all zero", flat(0.0), "", Failed("all-equal", &["0", "nothing to measure"])),
        case(
            "half blank",
            with(&|(y, _), v| if y < 70 { f64::NAN } else { v }),
            &flags,
            Record(ANY, &[]),
        ),
        case(
            "blank core",
            with(&|(y, x), v| {
                if y.abs_diff(68) < 6 && x.abs_diff(76) < 6 { f64::NAN } else { v }
            }),
            &flags,
            Record(ANY, &[]),
        ),
        case(
            "infinities sprinkled",
            with(&|(y, x), v| match (y * 31 + x * 17) % 97 {
                0 => f64::INFINITY,
                1 => f64::NEG_INFINITY,
                2 => f64::NAN,
                _ => v,
            }),
            &flags,
            Record(FOUND, &[]),
        ),
        case(
            "denormals",
            with(&|_, v| v * 1e-312),
            &flags,
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "1e300",
            with(&|_, v| v * 1e300),
            &flags,
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "largest numbers",
            with(&|(y, x), _| extremes[(y * 7 + x * 13) % 4]),
            &flags,
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "one of the largest",
            with(&|at, v| if at == (30, 30) { f64::MAX } else { v }),
            &flags,
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "f4 beyond its range by its scale",
            npy_f4(&map),
            &format!("{flags} --value-scale 1e300"),
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "scale to nothing",
            npy_f4(&map),
            &format!("{flags} --value-scale 1e-320"),
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "exponents of large numbers",
            npy_f4(&map),
            "--value-transfer log10 --value-scale 1e200",
            Failed("brightness-range", &["the brightest pixel is", "1e-60 to 1e60", "value_scale"]),
        ),
        case(
            "huge dynamic range",
            with(&|at, v| if at == (68, 76) { 1e12 } else { v }),
            &flags,
            Record(ANY, &[]),
        ),
        case("all negative", with(&|_, v| -v - 50.0), &flags, Record(ANY, &[])),
        case("a large offset", with(&|_, v| v + 1e6), &flags, Record(FOUND, &[])),
        case("a chessboard", with(&|(y, x), _| ((x + y) % 2) as f64), &flags, Record(ANY, &[])),
        case("a ramp", with(&|(y, x), _| (x + 1000 * y) as f64), &flags, Record(ANY, &[])),
        case(
            "two levels of 8 bits",
            png8(&mapped(map.clone(), |_, v| if v > 2.0 { 255.0 } else { 0.0 })),
            "",
            Record(ANY, &["saturated-pixels", "quantised"]),
        ),
        case(
            "no noise, contour given",
            f8(&Double { seed: None, ..double }.map()),
            &format!("{flags} --contour-floor 0.3"),
            Record(FOUND, &[]),
        ),
        case(
            "no noise",
            f8(&Double { seed: None, ..double }.map()),
            &flags,
            Failed("noise-not-visible", &["rms", "contour_floor"]),
        ),
        case(
            "text of extremes",
            "1e308 -1e308 nan\n1e-320 0 inf\n4 5 6\n",
            "",
            Failed("brightness-range", &["1e308", "value_scale"]),
        ),
        case("text grid of the source", text_grid(&map), &flags, Record(&["measured"], &[])),
    ]);
}

#[test]
fn odd_descriptions_on_the_command_line() {
    let double = Double::default();
    let map = npy_f4(&double.map());
    let all = double.flags().join(" ");
    let on = |name, flags: &str, expect| case(name, map.clone(), &format!("{all} {flags}"), expect);
    let only = |name, flags: &str, expect| case(name, map.clone(), flags, expect);
    let scale = "--pixel-scale-arcsec 0.5";
    check_all(vec![
        only(
            "beam larger than the map",
            &format!("{scale} --beam-major-arcsec 200"),
            Failed(
                "bad-description-value",
                &["beam_major_arcsec is", "longer side, 150 px", "pixel scale"],
            ),
        ),
        only(
            "beam of a light year",
            &format!("{scale} --beam-major-arcsec 1e9"),
            Failed(
                "bad-description-value",
                &["beam_major_arcsec is", "longer side, 150 px", "pixel scale"],
            ),
        ),
        only(
            "beam below a pixel",
            &format!("{scale} --beam-major-arcsec 0.1"),
            Record(ANY, &["beam-undersampled"]),
        ),
        only(
            "beam of almost nothing",
            &format!("{scale} --beam-major-arcsec 1e-300"),
            Record(ANY, &[]),
        ),
        only(
            "a needle of a beam",
            &format!("{scale} --beam-major-arcsec 50 --beam-minor-arcsec 1e-9"),
            Failed("no-empty-sky", &["wider map"]),
        ),
        only("beam without a scale", "--beam-major-arcsec 3", Record(ANY, &[])),
        only(
            "beam of zero",
            "--beam-major-arcsec 0",
            Failed("bad-description-value", &["beam_major_arcsec is 0", "above 0"]),
        ),
        only(
            "beam below zero",
            "--beam-major-arcsec -3",
            Failed("bad-description-value", &["beam_major_arcsec is -3", "above 0"]),
        ),
        only(
            "minor over major",
            "--beam-major-arcsec 3 --beam-minor-arcsec 4",
            Failed("bad-description-value", &["beam_minor_arcsec is 4", "swap the two"]),
        ),
        only(
            "minor alone",
            "--beam-minor-arcsec 4",
            Failed("incomplete-keys", &["beam_minor_arcsec is given without beam_major_arcsec"]),
        ),
        only(
            "scale of zero",
            "--pixel-scale-arcsec 0",
            Failed("bad-description-value", &["pixel_scale_arcsec is 0", "above 0"]),
        ),
        only(
            "scale below zero",
            "--pixel-scale-arcsec -1",
            Failed("bad-description-value", &["east right"]),
        ),
        only("very oblong pixels", "--pixel-scale-arcsec 0.01,30", Record(ANY, &[])),
        only(
            "scale twice",
            "--pixel-scale-arcsec 1 --pixel-scale-mas 1000",
            Failed("conflicting-keys", &["pixel_scale_arcsec and pixel_scale_mas"]),
        ),
        on(
            "flag twice",
            "--redshift-error 0.1 --redshift-error 0.1",
            Refused(&["--redshift-error", "multiple"]),
        ),
        only(
            "negative redshift",
            "--redshift -0.1",
            Failed("bad-description-value", &["redshift is -0.1", "not below 0"]),
        ),
        on("distance beyond the Universe", "--distance-mpc 1e300", Record(ANY, &[])),
        only(
            "huge redshift",
            "--redshift 1e300 --frequency-ghz 1e-300 --unit Jy/beam",
            Record(ANY, &[]),
        ),
        only(
            "a universe without a big bang",
            "--redshift 2 --omega-matter 0.1 --omega-lambda 1.5",
            Record(FOUND, &[]),
        ),
        only("no expansion", "--redshift 0.1 --hubble-km-s-mpc 0", Refused(&["hubble"])),
        only(
            "detection below outline",
            "--detection-sigma 3 --outline-sigma 4",
            Refused(&["--detection-sigma is 3", "at least --outline-sigma"]),
        ),
        only(
            "half a host",
            "--host-x-px 3",
            Failed("incomplete-keys", &["host_x_px is given without host_y_px"]),
        ),
        only(
            "host outside the map",
            "--host-x-px 5000 --host-y-px -3000",
            Failed("bad-description-value", &["host_x_px is at column 5000", "on the map"]),
        ),
        only(
            "host at the end of the number line",
            "--host-x-px 1e308 --host-y-px 1e308",
            Failed("bad-description-value", &["host_x_px", "on the map"]),
        ),
        only(
            "host on the far side of the sky",
            &format!(
                "{scale} --centre-ra-deg 0 --centre-dec-deg 0 --host-ra-deg 180 --host-dec-deg 0"
            ),
            Failed("bad-description-value", &["host_ra_deg", "far side of the sky"]),
        ),
        only(
            "host by sky, map without coordinates",
            "--host-ra-deg 10 --host-dec-deg 10",
            Record(ANY, &["host-unplaced"]),
        ),
        only(
            "core outside the map",
            "--core-x-px 150 --core-y-px 3",
            Failed(
                "bad-description-value",
                &["core_x_px is 150", "between 0 and 149", "150 columns"],
            ),
        ),
        only("core in a corner", "--core-x-px 0 --core-y-px 0", Record(ANY, &[])),
        only(
            "pole as the centre",
            &format!("{scale} --centre-ra-deg 0 --centre-dec-deg 90"),
            Record(FOUND, &[]),
        ),
        only(
            "declination of 91",
            "--centre-ra-deg 0 --centre-dec-deg 91",
            Failed("bad-description-value", &["centre_dec_deg is 91", "between -90 and 90"]),
        ),
        only(
            "scale factor of zero",
            "--value-scale 0",
            Failed("bad-description-value", &["value_scale is 0", "other than 0"]),
        ),
        only("rms of zero", "--rms 0", Failed("bad-description-value", &["rms is 0", "above 0"])),
        only("rms above everything", "--rms 1e300", Record(NOTHING, &[])),
        only("rms of almost nothing", "--rms 1e-300", Record(ANY, &[])),
        only("contour above everything", "--contour-floor 1e300", Record(ANY, &[])),
        only("blank is everything", "--blank-value 0 --value-scale 2", Record(ANY, &[])),
        only(
            "saturated from below",
            "--saturation-value -1000",
            Record(ANY, &["saturated-pixels"]),
        ),
        only(
            "calibration error of 200 %",
            "--flux-scale-error 2",
            Failed("bad-description-value", &["flux_scale_error is 2", "fraction"]),
        ),
        only(
            "spectral index of 50",
            "--spectral-index 50",
            Failed("bad-description-value", &["spectral_index is 50", "-10 and 10"]),
        ),
        on("spectral index that cancels the boost", "--core-spectral-index -10", Record(ANY, &[])),
        only("boost without an exponent", "--spectral-index -2", Record(ANY, &[])),
        only("boost that works backwards", "--spectral-index -9.5", Record(ANY, &[])),
        only(
            "day that is not",
            "--epoch 2019-02-30",
            Refused(&["epoch", "2019-02-30", "ISO date"]),
        ),
        only("strips of hundred beams", "--strip-inner-beams 100", Record(ANY, &[])),
        only("limits almost sure", "--confidence 0.9999 --ratio-value-sigma 100", Record(ANY, &[])),
    ]);
}

#[test]
fn odd_descriptions_in_files() {
    let key = |code, parts| Failed(code, parts);
    check_all(vec![
        beside(
            "unknown key",
            r#"{"redshif": 0.1}"#,
            key("unknown-key", &["map.map.json", "\"redshif\"", "redshift"]),
        ),
        beside(
            "wrong type",
            r#"{"redshift": "near"}"#,
            key("bad-description-value", &["redshift is \"near\"", "a number"]),
        ),
        beside(
            "a list for a number",
            r#"{"redshift": [0.1]}"#,
            key("bad-description-value", &["redshift is [0.1]"]),
        ),
        beside(
            "NaN",
            r#"{"redshift": NaN}"#,
            key("description-syntax", &["map.map.json", "line 1"]),
        ),
        beside(
            "a number beyond doubles",
            r#"{"redshift": 1e999}"#,
            key("description-syntax", &["map.map.json"]),
        ),
        beside(
            "wrong unit",
            r#"{"unit": "Jansky"}"#,
            key("bad-description-value", &["unit is \"Jansky\"", "Jy/beam"]),
        ),
        beside("broken JSON", r#"{"redshift": 0.1"#, key("description-syntax", &["line 1 column"])),
        beside("a list", "[1, 2]", key("description-syntax", &["needed is a JSON object"])),
        beside("two objects", "{} {}", key("description-syntax", &["map.map.json"])),
        beside("empty", "", key("description-syntax", &["needed is a JSON object"])),
        beside(
            "key twice",
            r#"{"redshift": 0.1, "redshift": 0.2}"#,
            key("duplicate-key", &["redshift", "twice"]),
        ),
        beside(
            "not UTF-8",
            b"{\"id\": \"\xff\xfe\"}".to_vec(),
            key("unreadable-description", &["not UTF-8", "save it as UTF-8"]),
        ),
        beside("nested without end", "[".repeat(100_000), key("description-syntax", &["JSON"])),
        beside("a key with a line break", "{\"red\\nshift\": 1}", key("unknown-key", &["\\n"])),
        beside(
            "a megabyte of spaces",
            format!("{{{}}}", " ".repeat(3 << 20)),
            key("unreadable-description", &["bytes, at most", "shorten it"]),
        ),
        beside("null is not given", r#"{"redshift": null}"#, Record(NOTHING, &[])),
        listed(
            "unknown column",
            "file,redshif\nmap.npy,1\n",
            Refused(&["list, header", "\"redshif\"", "redshift"]),
        ),
        listed(
            "ragged row",
            "file,redshift\nmap.npy\n",
            Refused(&["list, line 2", "1 cells", "mend the row"]),
        ),
        listed(
            "file twice",
            "file,redshift\nmap.npy,1\n./map.npy,2\n",
            Refused(&["list, line 3", "already on line 2"]),
        ),
        listed("no column file", "redshift\n1\n", Refused(&["column file"])),
        listed("empty", "", Refused(&["column file"])),
        listed(
            "wrong value",
            "file,redshift\nmap.npy,far\n",
            Refused(&["list, line 2", "redshift is \"far\""]),
        ),
        listed("not UTF-8", b"file,id\nmap.npy,\xff\n".to_vec(), Refused(&["not UTF-8"])),
        listed("broken JSON Lines", "{\"file\": \"map.npy\"}\n{\"file\"\n", Refused(&["line 2"])),
        listed("a map as the manifest", npy_f4(&noise_map(9, 9, 1)), Refused(&["list"])),
        listed("an open quotation mark", "file,id\nmap.npy,\"x\n", Record(NOTHING, &[])),
    ]);
    let mut whole = case(
        "defaults that are a list",
        npy_f4(&noise_map(64, 60, 1)),
        "--defaults d",
        Refused(&["d: needed is a JSON object"]),
    );
    whole.files.push(("d", b"[]".to_vec()));
    check(whole);
    let outcome =
        Run::new(["measure", "--manifest", "list"]).file("list", "file\n").status(2).run();
    assert!(outcome.error_line().contains("no map"), "{}", outcome.stderr);
}

/// Measures `map` in a folder prepared by the case.
fn place(name: &str, map: &str, prepare: impl FnOnce(&Path), expect: &Expect) {
    let status = if matches!(expect, Record(..)) { 0 } else { 1 };
    let run = Run::new(["measure", map, "--json", "out.json"]).prepared(prepare).status(status);
    judge(name, &run.run(), expect);
}

#[test]
fn odd_places() {
    let nothing = |_: &Path| {};
    place("missing", "no.npy", nothing, &Failed("file-not-found", &["no.npy", "check the path"]));
    let empty = Run::new(["measure", "", "--json", "out.json"]).status(2).run();
    judge("empty name", &empty, &Refused(&["a value is required"]));
    place("line break in the name", "a\nb.npy", nothing, &Failed("file-not-found", &["a\\nb.npy"]));
    place("folder", ".", nothing, &Failed("is-folder", &["this is a folder", "inside it"]));
    place(
        "name too long",
        &"x".repeat(5000),
        nothing,
        &Failed("unreadable-description", &["long"]),
    );
}

#[cfg(unix)]
#[test]
fn odd_places_of_unix() {
    use std::os::unix::ffi::OsStrExt;
    use std::os::unix::fs::{PermissionsExt, symlink};

    let not_regular = Failed("not-a-regular-file", &["pipe, socket or device", "save the map"]);
    place("device", "/dev/zero", |_| {}, &not_regular);
    let pipe = |folder: &Path| {
        let made = std::process::Command::new("mkfifo").arg(folder.join("pipe")).status();
        assert!(made.expect("mkfifo is part of every Unix").success());
    };
    place("pipe", "pipe", pipe, &not_regular);
    let ring = |folder: &Path| {
        symlink("b.npy", folder.join("a.npy")).expect("linked");
        symlink("a.npy", folder.join("b.npy")).expect("linked");
    };
    place("ring of links", "a.npy", ring, &Failed("io", &["cannot be read", "symbolic link"]));
    let broken = |folder: &Path| symlink("gone", folder.join("a.npy")).expect("linked");
    place("broken link", "a.npy", broken, &Failed("file-not-found", &["a.npy"]));
    let pipe_beside = |folder: &Path| {
        std::fs::write(folder.join("a.npy"), npy_f4(&noise_map(64, 60, 1))).expect("written");
        let made = std::process::Command::new("mkfifo").arg(folder.join("a.map.json")).status();
        assert!(made.expect("mkfifo is part of every Unix").success());
    };
    place(
        "pipe as a description",
        "a.npy",
        pipe_beside,
        &Failed("unreadable-description", &["a.map.json", "pipe"]),
    );

    let locked = |folder: &Path| {
        let path = folder.join("a.npy");
        std::fs::write(&path, npy_f4(&noise_map(64, 60, 1))).expect("written");
        std::fs::set_permissions(&path, PermissionsExt::from_mode(0o000)).expect("set");
    };
    let probe = tempfile::tempdir().expect("a folder");
    locked(probe.path());
    if std::fs::File::open(probe.path().join("a.npy")).is_ok() {
        eprintln!("skipped: no permission (this account may read everything)");
    } else {
        place("no permission", "a.npy", locked, &Failed("permission-denied", &["permission"]));
    }

    let name = std::ffi::OsStr::from_bytes(b"m\xff.npy");
    let outcome = Run::new(["measure", "--json", "out.json"])
        .args([name])
        .file(name, npy_f4(&noise_map(64, 60, 1)))
        .run();
    assert_eq!(at(&outcome.json("out.json"), "file"), "m\u{fffd}.npy");
}

#[test]
fn sources_in_awkward_places() {
    let flags = Double::default().flags().join(" ");
    let flags = flags.split(" --host-x-px").next().expect("a text").to_owned();
    let double = |core: (f64, f64), arm_px: f64, size: (usize, usize)| {
        npy_f4(&Double { core, arm_px, size, ..Double::default() }.map())
    };
    check_all(vec![
        case(
            "source over the edge",
            double((140.0, 130.0), 50.0, (150, 140)),
            &flags,
            Record(FOUND, &["source-leaves-map"]),
        ),
        case(
            "source wider than the map",
            double((32.0, 30.0), 60.0, (64, 60)),
            &flags,
            Record(ANY, &[]),
        ),
        case(
            "map of a few beams",
            double((12.0, 12.0), 8.0, (25, 24)),
            &flags,
            Failed("no-empty-sky", &["wider map"]),
        ),
        case("a strip of a map", double((70.0, 5.0), 50.0, (150, 10)), &flags, Record(ANY, &[])),
        case(
            "a point",
            npy_f4(&point_map(128, 120, 20.0, 1)),
            &flags,
            Record(&["unresolved"], &[]),
        ),
        case(
            "a point in a corner",
            npy_f4(&mapped(noise_map(90, 80, 1), |(y, x), v| {
                v + 20.0 * (-0.1 * (x * x + y * y) as f64).exp()
            })),
            &flags,
            Record(FOUND, &[]),
        ),
        case("noise alone", npy_f4(&noise_map(128, 120, 1)), &flags, Record(NOTHING, &[])),
        case(
            "noise down to one sigma",
            npy_f4(&noise_map(128, 120, 1)),
            &format!("{flags} --outline-sigma 1 --detection-sigma 1"),
            Record(ANY, &[]),
        ),
        case(
            "a jet side that is not there",
            double((76.0, 68.0), 50.0, (150, 140)),
            &format!("{flags} --jet-side-pa-deg 215"),
            Record(FOUND, &["jet-side-given"]),
        ),
    ]);
}

#[test]
fn a_failed_record_on_standard_output_is_whole() {
    let outcome =
        Run::new(["measure", "a.npy", "--json", "-"]).file("a.npy", "1 x\n").status(1).run();
    let record = parse(&outcome.stdout);
    failed_contract(&record);
    assert!(at(&record, "error.message").as_str().is_some_and(|m| m.contains("line 1, field 2")));
}
