//! One made map with its truth, and the scenario that makes it.

use ndarray::Array2;
use serde_json::{Map, Value, json};

use super::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene, jet};

/// One made map.
#[derive(Clone, Debug)]
pub struct Made {
    /// The file's name without its ending.
    pub name: String,
    /// Rows as stored, in the unit described; NaN is blank.
    pub brightness: Array2<f64>,
    /// Keys of the map description.
    pub description: Map<String, Value>,
    /// What is true of it: one object.
    pub truth: Value,
    /// What to store it as.
    pub file: FileFormat,
}

/// What a map is stored as.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FileFormat {
    /// Kind of file.
    pub format: Format,
    /// Type of the stored numbers.
    pub dtype: Dtype,
    /// Order of their bytes.
    pub byte_order: ByteOrder,
    /// Brightness per count, for whole numbers.
    pub integer_step: f64,
    /// Brightness of the count 0, for whole numbers.
    pub integer_offset: f64,
}

/// Kind of file.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Format {
    /// One array.
    Npy,
    /// An archive of one array.
    Npz,
    /// Gray picture.
    Png,
    /// Gray picture.
    Tiff,
    /// Gray picture.
    Pgm,
    /// Picture of floating-point numbers.
    Pfm,
    /// Grid of numbers.
    Text,
}

/// Type of the stored numbers.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Dtype {
    /// Single precision.
    F4,
    /// Double precision.
    F8,
    /// 16 bits, signed.
    I2,
    /// 32 bits, signed.
    I4,
    /// 8 bits, unsigned.
    U1,
    /// 16 bits, unsigned.
    U2,
}

/// Order of the bytes of a number.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ByteOrder {
    /// Least significant first.
    Little,
    /// Most significant first.
    Big,
}

/// Why a scenario cannot be used.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ScenarioError {
    /// A value that is not possible.
    #[error("{place}: {key}: found {found}, needed {needed}")]
    BadValue {
        /// Where it stands.
        place: String,
        /// Its key.
        key: String,
        /// What was found.
        found: String,
        /// What was needed.
        needed: &'static str,
    },
}

/// What to make.
#[derive(Clone, Debug)]
pub struct Scenario {
    name: String,
    count: usize,
    seed: u64,
    columns: usize,
    rows: usize,
    file: FileFormat,
    rest: String,
}

impl Scenario {
    /// Reads a scenario.
    ///
    /// # Errors
    /// A value that is not possible.
    pub fn parse(text: &str, place: &str) -> Result<Self, ScenarioError> {
        let mut scenario = Self {
            name: "made".to_owned(),
            count: 1,
            seed: 1,
            columns: 64,
            rows: 60,
            file: FileFormat {
                format: Format::Npy,
                dtype: Dtype::F4,
                byte_order: ByteOrder::Little,
                integer_step: 0.01,
                integer_offset: -1.0,
            },
            rest: String::new(),
        };
        for line in text.lines() {
            let (key, value) = line.split_once('=').map_or(("", ""), |(k, v)| (k.trim(), v.trim()));
            let bad = |needed| ScenarioError::BadValue {
                place: place.to_owned(),
                key: key.to_owned(),
                found: value.to_owned(),
                needed,
            };
            let whole = || value.parse::<usize>().map_err(|_| bad("a whole number"));
            match key {
                "count" => scenario.count = whole()?,
                "seed" => scenario.seed = whole()? as u64,
                _ => scenario.rest += &format!("{line}\n"),
            }
            let word = value.trim_matches('"');
            match key {
                "name" => scenario.name = word.to_owned(),
                "columns" => scenario.columns = whole()?,
                "rows" => scenario.rows = whole()?,
                "format" => {
                    scenario.file.format = match word {
                        "npy" => Format::Npy,
                        "npz" => Format::Npz,
                        "png" => Format::Png,
                        "tiff" => Format::Tiff,
                        "pgm" => Format::Pgm,
                        "pfm" => Format::Pfm,
                        "text" => Format::Text,
                        _ => return Err(bad("a format")),
                    };
                }
                "dtype" => {
                    scenario.file.dtype = match word {
                        "f4" => Dtype::F4,
                        "f8" => Dtype::F8,
                        "i2" => Dtype::I2,
                        "i4" => Dtype::I4,
                        "u1" => Dtype::U1,
                        "u2" => Dtype::U2,
                        _ => return Err(bad("a type of numbers")),
                    };
                }
                "byte_order" if word == "big" => scenario.file.byte_order = ByteOrder::Big,
                _ => {}
            }
        }
        Ok(scenario)
    }

    /// A built-in scenario.
    pub fn named(name: &str) -> Option<Result<Self, ScenarioError>> {
        (name == "bright-double").then(|| Self::parse("name = \"bright-double\"\n", name))
    }

    /// Names of the built-in scenarios, with a line about each.
    pub fn names() -> Vec<(&'static str, String)> {
        vec![("bright-double", "two bright jets of unequal strength".to_owned())]
    }

    /// Its name.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// How many sources.
    pub const fn count(&self) -> usize {
        self.count
    }

    /// Seed of all draws.
    pub const fn seed(&self) -> u64 {
        self.seed
    }

    /// The same with another count and seed.
    pub fn with(self, count: Option<usize>, seed: Option<u64>) -> Self {
        Self { count: count.unwrap_or(self.count), seed: seed.unwrap_or(self.seed), ..self }
    }

    /// The text as given, with count and seed as used.
    pub fn to_toml(&self) -> String {
        format!("count = {}\nseed = {}\n{}", self.count, self.seed, self.rest)
    }

    /// All epochs of one source.
    ///
    /// # Errors
    /// None today.
    pub fn make(&self, index: usize) -> Result<Vec<Made>, ScenarioError> {
        let mut scene = Scene::empty(self.columns, self.rows, GaussianShape::circular(4.0));
        let (x, y) = (self.columns as f64 / 2.0, self.rows as f64 / 2.0);
        scene.components.push(GaussianComponent {
            x_px: x,
            y_px: y,
            amount: Amount::Peak(20.0),
            shape: GaussianShape::POINT,
        });
        scene.components.extend(jet((x, y), (1.6 * x, y), 60.0, 1.5, 20));
        scene.components.extend(jet((x, y), (0.4 * x, y), 30.0, 1.5, 20));
        scene.noise =
            Some((NoiseKind::Smoothed(scene.beam), 0.1, self.seed.wrapping_add(index as u64)));
        let name = format!("{}-{index:05}", self.name);
        let description = json!({
            "id": name, "pixel_scale_arcsec": 1.0, "beam_major_arcsec": 4.0, "unit": "mJy/beam",
            "rows": "bottom-up", "host_x_px": x, "host_y_px": y, "redshift": 0.1
        });
        let Value::Object(description) = description else { return Ok(Vec::new()) };
        let truth = json!({"core": {"flux_density_mjy": 20.0}});
        Ok(vec![Made { name, brightness: scene.render(), description, truth, file: self.file }])
    }
}
