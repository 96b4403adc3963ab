//! One sky stored in many ways gives one answer.

use jetspan::simulate::GaussianShape;
use ndarray::Array2;
use serde_json::Value;

use crate::support::{Double, Run, npy, png16, text_grid};

/// Relative difference allowed: sums run in another order, and nothing else may differ.
const RELATIVE: f64 = 1e-6;

/// Off-centre, not square, seen with an elliptical beam.
fn double() -> Double {
    Double {
        size: (150, 132),
        beam: GaussianShape { major_px: 6.0, minor_px: 4.5, angle_deg: 70.0 },
        core: (81.3, 61.8),
        direction_deg: 35.0,
        arm_px: 48.0,
        seed: Some(7),
        ..Double::default()
    }
}

/// The map with values that single precision holds exactly.
fn single_precision(map: &Array2<f64>) -> Array2<f64> {
    map.mapv(|v| f64::from(v as f32))
}

fn measured(file: &str, bytes: &[u8], flags: &[String]) -> Value {
    Run::new(["measure", file, "--json", "-"])
        .args(flags.iter().cloned())
        .file(file, bytes)
        .run()
        .stdout_json()
}

/// What depends on how the sky is stored, not on the sky.
fn is_of_the_array(path: &str) -> bool {
    ["map", "input", "file", "id", "settings", "software"]
        .iter()
        .any(|root| path == *root || path.starts_with(&format!("{root}.")))
        || path.ends_with(".x_px")
        || path.ends_with(".y_px")
}

/// Size below which two numbers are the same, for what can lie near zero.
fn floor(path: &str) -> f64 {
    let name = path.rsplit('.').find(|name| !["value", "minus", "plus"].contains(name));
    match name.unwrap_or(path) {
        name if name.ends_with("_deg") => 1.0,
        name if name.ends_with("_arcsec") => 0.5,
        "background_mjy_per_beam" => 0.1,
        _ => 0.0,
    }
}

/// All places where two records say different things.
fn differences(a: &Value, b: &Value) -> Vec<String> {
    let mut found = Vec::new();
    compare("", a, b, &mut found);
    found
}

fn compare(path: &str, a: &Value, b: &Value, found: &mut Vec<String>) {
    if is_of_the_array(path) {
        return;
    }
    match (a, b) {
        (Value::Object(x), Value::Object(y)) => {
            let keys: std::collections::BTreeSet<&String> = x.keys().chain(y.keys()).collect();
            for key in keys {
                let inner = if path.is_empty() { key.clone() } else { format!("{path}.{key}") };
                match (x.get(key), y.get(key)) {
                    (Some(a), Some(b)) => compare(&inner, a, b, found),
                    (one, other) => found.push(format!("{inner}: {one:?} | {other:?}")),
                }
            }
        }
        (Value::Array(x), Value::Array(y)) => {
            if x.len() != y.len() {
                found.push(format!("{path}: {} | {} members", x.len(), y.len()));
            }
            for (index, (a, b)) in x.iter().zip(y).enumerate() {
                compare(&format!("{path}[{index}]"), a, b, found);
            }
        }
        (Value::Number(_), Value::Number(_)) => {
            let (x, y) = (a.as_f64().expect("a number"), b.as_f64().expect("a number"));
            let mut difference = (x - y).abs();
            if path.contains("_deg.value") {
                // 180 is the period of an axis and divides that of a direction.
                difference = difference.min((difference - 360.0).abs());
                if path.contains("source.position_angle") || path.starts_with("components") {
                    difference = difference.min((difference - 180.0).abs());
                }
            }
            let size = x.abs().max(y.abs()).max(floor(path));
            if difference > RELATIVE * size {
                found.push(format!("{path}: {x} | {y}, relative {:.1e}", difference / size));
            }
        }
        // Messages hold rounded numbers; code and numbers of a flag are compared.
        _ if path.ends_with(".message") => {}
        _ if a == b => {}
        _ => found.push(format!("{path}: {a} | {b}")),
    }
}

#[track_caller]
fn same(name: &str, reference: &Value, other: &Value, all: &mut Vec<String>) {
    let found = differences(reference, other);
    if !found.is_empty() {
        all.push(format!("{name}: {} differ\n    {}", found.len(), found.join("\n    ")));
    }
}

/// Where a pixel position (column, row) comes to lie.
type Placing = Box<dyn Fn((f64, f64)) -> (f64, f64)>;

/// A way to store the sky: row order, handedness, what is up.
#[derive(Clone, Copy, Debug)]
struct Orientation {
    top_down: bool,
    mirrored: bool,
    up_pa_deg: i32,
}

impl Orientation {
    /// Column and row steps of the plain storage (row 0 south, column 0 east) for one step
    /// along a column and one along a row of this storage.
    fn steps(self) -> [(i64, i64); 2] {
        // (east, north) of a position angle that is a multiple of 90°.
        let sky = |pa_deg: i32| match pa_deg.rem_euclid(360) {
            0 => (0, 1),
            90 => (1, 0),
            180 => (0, -1),
            _ => (-1, 0),
        };
        let up = sky(self.up_pa_deg);
        // Position angles grow counter-clockwise unless mirrored: right is 90° before up.
        let right = sky(self.up_pa_deg + if self.mirrored { 90 } else { -90 });
        let along_rows = if self.top_down { (-up.0, -up.1) } else { up };
        [right, along_rows].map(|(east, north)| (-east, north))
    }

    /// The map in this storage, and where a pixel position of the plain one comes to lie.
    fn stored(self, map: &Array2<f64>) -> (Array2<f64>, Placing) {
        let (rows, columns) = map.dim();
        let [x_step, y_step] = self.steps();
        let turned = x_step.0 == 0;
        let (new_columns, new_rows) = if turned { (rows, columns) } else { (columns, rows) };
        let middle = (0.5 * (columns as f64 - 1.0), 0.5 * (rows as f64 - 1.0));
        let new_middle = (0.5 * (new_columns as f64 - 1.0), 0.5 * (new_rows as f64 - 1.0));
        let plain = move |x: f64, y: f64| {
            let (dx, dy) = (x - new_middle.0, y - new_middle.1);
            (
                middle.0 + dx * x_step.0 as f64 + dy * y_step.0 as f64,
                middle.1 + dx * x_step.1 as f64 + dy * y_step.1 as f64,
            )
        };
        let array = Array2::from_shape_fn((new_rows, new_columns), |(y, x)| {
            let (column, row) = plain(x as f64, y as f64);
            map[(row.round() as usize, column.round() as usize)]
        });
        // The steps are orthogonal: the way back is the transpose.
        let place = move |(x, y): (f64, f64)| {
            let (dx, dy) = (x - middle.0, y - middle.1);
            (
                new_middle.0 + dx * x_step.0 as f64 + dy * x_step.1 as f64,
                new_middle.1 + dx * y_step.0 as f64 + dy * y_step.1 as f64,
            )
        };
        (array, Box::new(place))
    }

    fn flags(self) -> Vec<String> {
        let rows = if self.top_down { "top-down" } else { "bottom-up" };
        let east = if self.mirrored { "right" } else { "left" };
        let up = self.up_pa_deg.to_string();
        ["--rows", rows, "--east", east, "--up-pa-deg", &up].map(str::to_owned).to_vec()
    }
}

/// Replaces the value of a flag.
fn with(flags: &[String], key: &str, value: impl ToString) -> Vec<String> {
    let mut flags = flags.to_vec();
    let place = flags.iter().position(|flag| flag == key).expect("a flag");
    flags[place + 1] = value.to_string();
    flags
}

#[test]
fn the_orientation_helper_is_right() {
    let map = Array2::from_shape_fn((3, 4), |(y, x)| (10 * y + x) as f64);
    let plain = Orientation { top_down: false, mirrored: false, up_pa_deg: 0 };
    assert_eq!(plain.stored(&map).0, map);
    // West up, east is where the last column was: the first stored row is the east edge.
    let turned = Orientation { top_down: false, mirrored: true, up_pa_deg: 270 };
    let (array, place) = turned.stored(&map);
    assert_eq!(array, map.t());
    assert_eq!(place((3.0, 1.0)), (1.0, 3.0));
}

#[test]
fn eight_orientations_give_the_same_sky() {
    let double = double();
    let map = single_precision(&double.map());
    let flags = double.flags();
    let reference = measured("map.npy", &npy(&map, "<f4", false), &flags);
    assert_eq!(reference["status"], "measured");
    let mut all = Vec::new();
    for top_down in [false, true] {
        for mirrored in [false, true] {
            for up_pa_deg in [0, 90, 180, 270] {
                let orientation = Orientation { top_down, mirrored, up_pa_deg };
                let (array, place) = orientation.stored(&map);
                let host = place(double.core);
                let mut described = with(&flags, "--host-x-px", host.0);
                described = with(&described, "--host-y-px", host.1);
                described.extend(orientation.flags());
                let record = measured("map.npy", &npy(&array, "<f4", false), &described);
                same(&format!("{orientation:?}"), &reference, &record, &mut all);
            }
        }
    }
    assert!(all.is_empty(), "{}", all.join("\n"));
    // The comparison would notice a wrong description.
    for wrong in [["--east", "right"], ["--up-pa-deg", "1"], ["--rows", "top-down"]] {
        let mut described = flags.clone();
        described.extend(wrong.map(str::to_owned));
        let record = measured("map.npy", &npy(&map, "<f4", false), &described);
        let found = differences(&reference, &record);
        assert!(found.iter().any(|f| f.contains("position_angle_deg")), "{wrong:?}: {found:?}");
    }
}

#[test]
fn types_orders_and_formats_give_the_same_answers() {
    let double = double();
    let map = single_precision(&double.map());
    let flags = double.flags();
    let reference = measured("map.npy", &npy(&map, "<f4", false), &flags);
    let mut all = Vec::new();
    for (descr, fortran) in
        [(">f4", false), ("<f4", true), ("<f8", false), (">f8", true), ("<f8", true)]
    {
        let record = measured("map.npy", &npy(&map, descr, fortran), &flags);
        same(&format!("{descr}, fortran {fortran}"), &reference, &record, &mut all);
    }
    let record = measured("map.txt", text_grid(&map).as_bytes(), &flags);
    same("text", &reference, &record, &mut all);
    assert!(all.is_empty(), "{}", all.join("\n"));
}

#[test]
fn units_scales_and_offsets_give_the_same_answers() {
    let double = double();
    let map = double.map();
    let flags = double.flags();
    let reference = measured("map.npy", &npy(&map, "<f8", false), &flags);
    let mut all = Vec::new();
    for (unit, factor) in [("Jy/beam", 1e-3), ("uJy/beam", 1e3)] {
        let flags = with(&flags, "--unit", unit);
        let record = measured("map.npy", &npy(&(&map * factor), "<f8", false), &flags);
        same(unit, &reference, &record, &mut all);
    }
    // Ω_beam / Ω_pixel of an elliptical Gaussian: π/(4 ln 2) × axes in pixels.
    let area = std::f64::consts::PI / (4.0 * std::f64::consts::LN_2)
        * double.beam.major_px
        * double.beam.minor_px;
    let per_pixel = with(&flags, "--unit", "mJy/pixel");
    let record = measured("map.npy", &npy(&(&map / area), "<f8", false), &per_pixel);
    same("mJy/pixel", &reference, &record, &mut all);
    let mut scaled = flags.clone();
    scaled.extend(["--value-scale", "0.25", "--value-offset", "-3.5"].map(str::to_owned));
    let stored = map.mapv(|v| (v + 3.5) / 0.25);
    let record = measured("map.npy", &npy(&stored, "<f8", false), &scaled);
    same("scale and offset", &reference, &record, &mut all);
    let mut square = flags.clone();
    square.extend(["--value-transfer", "sqrt"].map(str::to_owned));
    let stored = map.mapv(|v: f64| v.abs().sqrt().copysign(v));
    let record = measured("map.npy", &npy(&stored, "<f8", false), &square);
    same("square root", &reference, &record, &mut all);
    // Scale and beam in milliarcseconds.
    let mut mas = flags.clone();
    for key in ["--pixel-scale", "--beam-major", "--beam-minor"] {
        let place = mas.iter().position(|f| *f == format!("{key}-arcsec")).expect("a flag");
        let arcsec: f64 = mas[place + 1].parse().expect("a number");
        mas[place] = format!("{key}-mas");
        mas[place + 1] = (arcsec * 1e3).to_string();
    }
    let record = measured("map.npy", &npy(&map, "<f8", false), &mas);
    same("milliarcseconds", &reference, &record, &mut all);
    assert!(all.is_empty(), "{}", all.join("\n"));
}

#[test]
fn a_picture_and_an_array_of_the_same_integers_give_the_same_answers() {
    let double = double();
    // 0.01 mJy/beam a step, a tenth of the rms.
    let levels = double.map().mapv(|v| ((v + 5.0) / 0.01).round());
    let mut flags = double.flags();
    flags.extend(["--value-scale", "0.01", "--value-offset", "-5"].map(str::to_owned));
    let host_y = (double.size.1 - 1) as f64 - double.core.1;
    // The picture's first row is the northern one.
    let mut flipped = levels.clone();
    flipped.invert_axis(ndarray::Axis(0));
    let top_down = with(&flags, "--host-y-px", host_y);
    let picture = measured("map.png", &png16(&flipped), &top_down);
    assert_eq!(picture["input"]["dtype"], "uint16");
    let mut all = Vec::new();
    let mut described = top_down.clone();
    described.extend(["--rows", "top-down"].map(str::to_owned));
    for descr in ["<u2", ">u2", "<i4", "<f4"] {
        let array = measured("map.npy", &npy(&flipped, descr, false), &described);
        same(&format!("{descr}, top-down"), &picture, &array, &mut all);
    }
    let array = measured("map.npy", &npy(&levels, "<u2", false), &flags);
    same("<u2, bottom-up", &picture, &array, &mut all);
    assert!(all.is_empty(), "{}", all.join("\n"));
}

#[test]
fn without_a_flux_unit_ratios_sizes_and_angles_stay() {
    let double = double();
    let map = npy(&double.map(), "<f8", false);
    let flags = double.flags();
    let reference = measured("map.npy", &map, &flags);
    let other = measured("map.npy", &map, &with(&flags, "--unit", "none"));
    // Brightness, flux, power, temperature: what has a flux unit in its own.
    let has_flux_unit = |found: &String| {
        let path = found.split(": ").next().unwrap_or_default();
        path.split('.').any(|name| {
            ["_mjy", "_mjy_per_beam", "_mjy2", "_w_per_hz", "_k"].iter().any(|u| name.ends_with(u))
        })
    };
    let changed: Vec<String> =
        differences(&reference, &other).into_iter().filter(|found| !has_flux_unit(found)).collect();
    assert!(changed.is_empty(), "{}", changed.join("\n"));
    assert_eq!(other["source"]["total_flux_density_mjy"]["missing"], "no-flux-unit");
}
