//! Whole-program runs in a folder of their own, map files of every kind, and a made-up source.

use std::ffi::OsString;
use std::fs::File;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

use jetspan::map::SkyMap;
use jetspan::map::description::{Layer, Origin, resolve};
use jetspan::map::read::{Samples, StoredArray};
use jetspan::pipeline::{MapName, measure};
use jetspan::record::MapRecord;
use jetspan::settings::Settings;
use jetspan::simulate::{
    Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, jet as jet_chain,
};
use ndarray::Array2;
use serde_json::Value;
use tempfile::TempDir;

/// A run that takes longer hangs: the largest map of the tests needs a few seconds.
const TIME_LIMIT: Duration = Duration::from_secs(180);

/// One call of the program in a new folder, with the status it must end with.
pub struct Run {
    folder: TempDir,
    arguments: Vec<OsString>,
    status: i32,
}

impl Run {
    /// A call of one command that must end with status 0.
    pub fn new<S: Into<OsString>>(arguments: impl IntoIterator<Item = S>) -> Self {
        Self {
            folder: tempfile::tempdir().expect("a temporary folder"),
            arguments: arguments.into_iter().map(Into::into).collect(),
            status: 0,
        }
    }

    /// Puts a file into the folder, subfolders too.
    pub fn file(self, name: impl AsRef<Path>, content: impl AsRef<[u8]>) -> Self {
        let path = self.folder.path().join(name);
        std::fs::create_dir_all(path.parent().expect("inside the folder")).expect("made");
        std::fs::write(path, content).expect("written");
        self
    }

    /// Does anything else to the folder.
    pub fn prepared(self, prepare: impl FnOnce(&Path)) -> Self {
        prepare(self.folder.path());
        self
    }

    /// More arguments.
    pub fn args<S: Into<OsString>>(mut self, arguments: impl IntoIterator<Item = S>) -> Self {
        self.arguments.extend(arguments.into_iter().map(Into::into));
        self
    }

    /// The exit status expected.
    pub fn status(mut self, status: i32) -> Self {
        self.status = status;
        self
    }

    /// Runs it; fails where the status differs, the program panicked or took too long.
    #[track_caller]
    pub fn run(self) -> Outcome {
        let Self { folder, arguments, status } = self;
        // Output goes to files: a full pipe could stop the program.
        let logs = tempfile::tempdir().expect("a temporary folder");
        let log = |name: &str| File::create(logs.path().join(name)).expect("a log");
        let mut child = Command::new(program())
            .args(&arguments)
            .current_dir(folder.path())
            .stdin(Stdio::null())
            .stdout(log("stdout"))
            .stderr(log("stderr"))
            .spawn()
            .expect("the program starts");
        let start = Instant::now();
        let code = loop {
            if let Some(ended) = child.try_wait().expect("a child") {
                break ended.code();
            }
            if start.elapsed() > TIME_LIMIT {
                let _ = child.kill();
                panic!("jetspan {arguments:?} did not end within {TIME_LIMIT:?}");
            }
            std::thread::sleep(Duration::from_millis(2));
        };
        let read = |name: &str| {
            let bytes = std::fs::read(logs.path().join(name)).expect("a log");
            String::from_utf8_lossy(&bytes).into_owned()
        };
        let outcome = Outcome { folder, stdout: read("stdout"), stderr: read("stderr") };
        assert!(
            code == Some(status) && !outcome.stderr.contains("panicked"),
            "jetspan {arguments:?} ended with {code:?}, expected {status}\nstdout:\n{}\nstderr:\n{}",
            outcome.stdout.chars().take(2000).collect::<String>(),
            outcome.stderr
        );
        outcome
    }
}

/// The program under test.
pub fn program() -> &'static str {
    env!("CARGO_BIN_EXE_jetspan")
}

/// What a run left behind; the folder lives as long as this.
pub struct Outcome {
    folder: TempDir,
    /// Standard output.
    pub stdout: String,
    /// Standard error.
    pub stderr: String,
}

impl Outcome {
    /// A path in the run's folder.
    pub fn path(&self, name: impl AsRef<Path>) -> PathBuf {
        self.folder.path().join(name)
    }

    /// Names of everything in the folder, in order.
    pub fn names(&self) -> Vec<String> {
        let mut names: Vec<String> = std::fs::read_dir(self.folder.path())
            .expect("the folder")
            .map(|entry| entry.expect("an entry").file_name().to_string_lossy().into_owned())
            .collect();
        names.sort();
        names
    }

    /// A file of JSON in the folder.
    #[track_caller]
    pub fn json(&self, name: &str) -> Value {
        parse(&std::fs::read_to_string(self.path(name)).expect("the file is there"))
    }

    /// Standard output as one JSON value.
    #[track_caller]
    pub fn stdout_json(&self) -> Value {
        parse(&self.stdout)
    }

    /// The error as one line without its line break; fails unless there is exactly one line,
    /// `error: ` and a message in lower case.
    #[track_caller]
    pub fn error_line(&self) -> &str {
        let line = self.stderr.strip_suffix('\n').unwrap_or_else(|| {
            panic!("no line on standard error: {:?}", self.stderr);
        });
        assert!(!line.contains('\n'), "more than one line: {line}");
        assert!(!line.contains('\r') && !line.contains('\u{1b}'), "control characters: {line:?}");
        assert!(line.starts_with("error: "), "{line}");
        line
    }
}

/// JSON text as a value; nothing in it may be null.
#[track_caller]
pub fn parse(text: &str) -> Value {
    let value: Value = serde_json::from_str(text)
        .unwrap_or_else(|error| panic!("no JSON: {error}: {}", &text[..text.len().min(300)]));
    assert!(!holds_null(&value), "a null in {text}");
    value
}

fn holds_null(value: &Value) -> bool {
    match value {
        Value::Null => true,
        Value::Array(items) => items.iter().any(holds_null),
        Value::Object(members) => members.values().any(holds_null),
        _ => false,
    }
}

/// The value at a path such as `sides[0].jet.detected`.
#[track_caller]
pub fn at<'a>(record: &'a Value, path: &str) -> &'a Value {
    find(record, path).unwrap_or_else(|| panic!("no {path} in {record:#}"))
}

/// The same, where it is there.
pub fn find<'a>(record: &'a Value, path: &str) -> Option<&'a Value> {
    path.split('.').try_fold(record, |value, step| {
        let (name, index) = match step.strip_suffix(']').and_then(|step| step.split_once('[')) {
            Some((name, index)) => (name, Some(index.parse::<usize>().expect("an index"))),
            None => (step, None),
        };
        let member = value.get(name)?;
        index.map_or(Some(member), |index| member.get(index))
    })
}

/// The number a measurement or a bare number holds at a path.
#[track_caller]
pub fn number(record: &Value, path: &str) -> f64 {
    let value = at(record, path);
    value
        .get("value")
        .unwrap_or(value)
        .as_f64()
        .unwrap_or_else(|| panic!("{path} holds no number: {value}"))
}

/// Codes of a record's flags.
pub fn flag_codes(record: &Value) -> Vec<&str> {
    let flags = record.get("flags").and_then(Value::as_array).map_or(&[][..], Vec::as_slice);
    flags.iter().filter_map(|flag| flag.get("code")?.as_str()).collect()
}

/// Bytes of an `.npy` file of version 1 with this header dictionary.
pub fn npy_with_header(dictionary: &str, body: &[u8]) -> Vec<u8> {
    let mut header = dictionary.to_owned();
    // The array starts at a multiple of 64 bytes (NumPy Enhancement Proposal 1).
    header += &" ".repeat((64 - (10 + dictionary.len() + 1) % 64) % 64);
    header.push('\n');
    let length = u16::try_from(header.len()).expect("a short header");
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend(length.to_le_bytes());
    bytes.extend(header.bytes());
    bytes.extend(body);
    bytes
}

/// Bytes of an `.npy` file: `descr` is one of `f4 f8 u1 u2 i2 i4` after `<`, `>` or `|`;
/// column after column where `fortran`. Integers are rounded.
pub fn npy(map: &Array2<f64>, descr: &str, fortran: bool) -> Vec<u8> {
    let (order, kind) = descr.split_at(1);
    let encode = |v: f64| -> Vec<u8> {
        let mut bytes = match kind {
            "f4" => (v as f32).to_le_bytes().to_vec(),
            "f8" => v.to_le_bytes().to_vec(),
            "u1" => (v.round() as u8).to_le_bytes().to_vec(),
            "u2" => (v.round() as u16).to_le_bytes().to_vec(),
            "i2" => (v.round() as i16).to_le_bytes().to_vec(),
            "i4" => (v.round() as i32).to_le_bytes().to_vec(),
            other => panic!("no writer for {other}"),
        };
        if order == ">" {
            bytes.reverse();
        }
        bytes
    };
    let body: Vec<u8> = if fortran {
        map.t().iter().flat_map(|&v| encode(v)).collect()
    } else {
        map.iter().flat_map(|&v| encode(v)).collect()
    };
    let (rows, columns) = map.dim();
    let order = if fortran { "True" } else { "False" };
    npy_with_header(
        &format!(
            "{{'descr': '{descr}', 'fortran_order': {order}, 'shape': ({rows}, {columns}), }}"
        ),
        &body,
    )
}

/// A map in single precision, little-endian, row after row: the usual case.
pub fn npy_f4(map: &Array2<f64>) -> Vec<u8> {
    npy(map, "<f4", false)
}

/// Bytes of a PNG file of any picture of the image crate.
pub fn png(picture: impl Into<image::DynamicImage>) -> Vec<u8> {
    let mut bytes = std::io::Cursor::new(Vec::new());
    picture.into().write_to(&mut bytes, image::ImageFormat::Png).expect("written to memory");
    bytes.into_inner()
}

/// Bytes of a gray PNG file with 16 bits; the array's first row is on top.
pub fn png16(map: &Array2<f64>) -> Vec<u8> {
    let (rows, columns) = map.dim();
    let pixels = map.iter().map(|v| v.round() as u16).collect();
    png(image::ImageBuffer::<image::Luma<u16>, Vec<u16>>::from_raw(
        columns as u32,
        rows as u32,
        pixels,
    )
    .expect("as many pixels as the array"))
}

/// Bytes of a gray PNG file with 8 bits; the array's first row is on top.
pub fn png8(map: &Array2<f64>) -> Vec<u8> {
    let (rows, columns) = map.dim();
    let pixels = map.iter().map(|v| v.round() as u8).collect();
    png(image::GrayImage::from_raw(columns as u32, rows as u32, pixels)
        .expect("as many pixels as the array"))
}

/// A text grid with the shortest text that gives each number back exactly.
pub fn text_grid(map: &Array2<f64>) -> String {
    map.rows()
        .into_iter()
        .map(|row| row.iter().map(|v| format!("{v:e}")).collect::<Vec<_>>().join(" ") + "\n")
        .collect()
}

/// Pixel size of the made-up sources, arcsec.
pub const SCALE_ARCSEC: f64 = 0.5;
/// rms of their noise, mJy/beam.
pub const RMS: f64 = 0.1;

/// A made-up source with two sides, in mJy/beam, array frame.
#[derive(Clone, Copy, Debug)]
pub struct Double {
    /// Columns and rows.
    pub size: (usize, usize),
    /// The restoring beam.
    pub beam: GaussianShape,
    /// Core: column, row.
    pub core: (f64, f64),
    /// Direction of the brighter side from +x towards +y, degrees.
    pub direction_deg: f64,
    /// Core to hot spot, pixels.
    pub arm_px: f64,
    /// Flux of each jet between core and lobe, mJy: brighter side, fainter side.
    pub jets: (f64, f64),
    /// Seed of the noise; `None` for a map without.
    pub seed: Option<u64>,
}

impl Default for Double {
    fn default() -> Self {
        Self {
            size: (150, 140),
            beam: GaussianShape::circular(5.0),
            core: (76.0, 68.0),
            direction_deg: 35.0,
            arm_px: 50.0,
            jets: (60.0, 12.0),
            seed: Some(1),
        }
    }
}

impl Double {
    /// What it is made of.
    pub fn scene(&self) -> Scene {
        let mut scene = Scene::empty(self.size.0, self.size.1, self.beam);
        let place = |distance: f64, direction_deg: f64| {
            let (sin, cos) = direction_deg.to_radians().sin_cos();
            (self.core.0 + distance * cos, self.core.1 + distance * sin)
        };
        let component = |at: (f64, f64), amount, shape| GaussianComponent {
            x_px: at.0,
            y_px: at.1,
            amount,
            shape,
        };
        scene.components.push(component(self.core, Amount::Peak(40.0), GaussianShape::POINT));
        for (turn, flux, hotspot) in [(0.0, self.jets.0, 25.0), (180.0, self.jets.1, 18.0)] {
            let direction = self.direction_deg + turn;
            let (from, to) = (place(3.0, direction), place(0.85 * self.arm_px, direction));
            scene.components.extend(jet_chain(from, to, flux, 1.5, 60));
            // Hot spot and lobe turned a little against the jet, the same way on both sides.
            let end = place(self.arm_px, direction + 3.0);
            scene.components.push(component(end, Amount::Peak(hotspot), GaussianShape::POINT));
            let lobe = place(0.92 * self.arm_px, direction + 3.0);
            let shape = GaussianShape { major_px: 14.0, minor_px: 9.0, angle_deg: direction };
            scene.components.push(component(lobe, Amount::Peak(6.0), shape));
        }
        scene.noise = self.seed.map(|seed| (NoiseKind::Smoothed(self.beam), RMS, seed));
        scene
    }

    /// The map, mJy/beam.
    pub fn map(&self) -> Array2<f64> {
        self.scene().render()
    }

    /// A full description of the map as arguments; row 0 south, column 0 east.
    pub fn flags(&self) -> Vec<String> {
        // Array angle a (from +x = west towards +y = north) has position angle a − 90°.
        let beam_pa = (self.beam.angle_deg - 90.0).rem_euclid(180.0);
        [
            ("pixel-scale-arcsec", SCALE_ARCSEC.to_string()),
            ("beam-major-arcsec", (self.beam.major_px * SCALE_ARCSEC).to_string()),
            ("beam-minor-arcsec", (self.beam.minor_px * SCALE_ARCSEC).to_string()),
            ("beam-pa-deg", beam_pa.to_string()),
            ("unit", "mJy/beam".to_owned()),
            ("frequency-ghz", "1.4".to_owned()),
            ("redshift", "0.1".to_owned()),
            ("spectral-index", "0.6".to_owned()),
            ("centre-ra-deg", "150.0".to_owned()),
            ("centre-dec-deg", "20.0".to_owned()),
            ("host-x-px", self.core.0.to_string()),
            ("host-y-px", self.core.1.to_string()),
        ]
        .into_iter()
        .flat_map(|(key, value)| [format!("--{key}"), value])
        .collect()
    }
}

/// Noise alone, smoothed by the beam, in mJy/beam.
pub fn noise_map(columns: usize, rows: usize, seed: u64) -> Array2<f64> {
    let mut scene = Scene::empty(columns, rows, GaussianShape::circular(5.0));
    scene.noise = Some((NoiseKind::Smoothed(scene.beam), RMS, seed));
    scene.render()
}

/// One point source on noise, in mJy/beam.
pub fn point_map(columns: usize, rows: usize, peak: f64, seed: u64) -> Array2<f64> {
    let mut scene = Scene::empty(columns, rows, GaussianShape::circular(5.0));
    scene.noise = Some((NoiseKind::Smoothed(scene.beam), RMS, seed));
    scene.components.push(GaussianComponent {
        x_px: 0.5 * columns as f64,
        y_px: 0.5 * rows as f64,
        amount: Amount::Peak(peak),
        shape: GaussianShape::POINT,
    });
    scene.render()
}

/// The record of an array in memory with a description as JSON, or the code of the reason why
/// it cannot be measured.
pub fn measure_array(
    array: &Array2<f64>,
    description: &str,
    settings: &Settings,
) -> Result<MapRecord, &'static str> {
    let (rows, columns) = array.dim();
    let stored = StoredArray {
        samples: Samples::F32(array.iter().map(|&v| v as f32).collect()),
        rows,
        columns,
        format: "npy",
        dtype: "float32".to_owned(),
        shape: vec![rows as u64, columns as u64],
        sha256: String::new(),
    };
    let layer = Layer::from_json_text(description, Origin::Sidecar, "made").expect("a description");
    let description = resolve(vec![layer]).expect("consistent description");
    let map = SkyMap::from_stored(stored, description).expect("a map");
    let name = MapName { id: "made".to_owned(), file: "made.npy".to_owned() };
    measure(&map, &name, settings).map_err(|error| error.code())
}
