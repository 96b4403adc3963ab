//! What the observer knows about a map: the keys, the layers they come from, and the typed
//! description that results.
//!
//! Layers from lowest to highest: built-in, defaults, manifest row, the file beside the map,
//! flags. Each key is decided on its own by the highest layer that gives it. Two exceptions,
//! where one quantity has two spellings (`_arcsec` and `_mas`, host by sky or by pixel,
//! apparent speed or proper motion): a higher layer's spelling replaces the lower one's.

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use serde_json::{Map, Value, json};

#[cfg(test)]
use super::keys::edit_distance;
use super::keys::{ALTERNATIVES, NEEDS};
use super::read::read_regular_file;
use crate::units::{wrap_directed_deg, wrap_undirected_deg};

pub use super::keys::{DESCRIPTION_KEYS, KeySpec, ValueKind, key_spec, nearest};
pub use super::manifest::{Manifest, ManifestEntry};
pub use super::words::{BrightnessUnit, East, Rows, ValueTransfer};

/// Longest description file read, bytes.
const MAX_DESCRIPTION_BYTES: u64 = 1 << 20;

/// Where a value came from.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize, JsonSchema,
)]
#[serde(rename_all = "kebab-case")]
pub enum Origin {
    /// Nobody gave it: the program's own default.
    BuiltIn,
    /// The defaults of a folder.
    Defaults,
    /// The map's row of a manifest.
    Manifest,
    /// The description file beside the map.
    #[serde(rename = "beside-map")]
    Sidecar,
    /// The command line.
    Flag,
}

/// When the map was observed.
#[derive(Clone, Debug, PartialEq)]
pub struct Epoch {
    /// Calendar year and the elapsed fraction of it.
    pub decimal_year: f64,
    /// As given.
    pub given: Value,
}

/// The description of one map, in canonical units; `None` = not given.
///
/// `Default` is the description of a map about which nothing is said.
#[derive(Clone, Debug, PartialEq)]
pub struct MapDescription {
    /// Pixel size along columns (x) and rows (y), arcsec.
    pub pixel_scale_arcsec: Option<[f64; 2]>,
    /// FWHM of the beam's long axis, arcsec.
    pub beam_major_arcsec: Option<f64>,
    /// FWHM of the beam's short axis, arcsec; the long axis where that alone is given.
    pub beam_minor_arcsec: Option<f64>,
    /// Position angle of the beam's long axis, degrees, [0, 180); north where a beam is given
    /// without one.
    pub beam_pa_deg: Option<f64>,
    /// Unit of the brightness.
    pub unit: Option<BrightnessUnit>,
    /// Brightness per unstretched stored value.
    pub value_scale: f64,
    /// Brightness of the unstretched stored value 0.
    pub value_offset: f64,
    /// How the stored values were stretched.
    pub value_transfer: ValueTransfer,
    /// Stored value that means no data.
    pub blank_value: Option<f64>,
    /// Stored value that means at least this bright.
    pub saturation_value: Option<f64>,
    /// Row order; the format's where it is not given.
    pub rows: Option<Rows>,
    /// Handedness.
    pub east: East,
    /// Position angle of what is displayed up, degrees, [0, 360).
    pub up_pa_deg: f64,
    /// Right ascension of the centre position, degrees, [0, 360).
    pub centre_ra_deg: Option<f64>,
    /// Declination of the centre position, degrees.
    pub centre_dec_deg: Option<f64>,
    /// Column of the centre position.
    pub centre_x_px: Option<f64>,
    /// Row of the centre position.
    pub centre_y_px: Option<f64>,
    /// Right ascension of the host galaxy, degrees, [0, 360).
    pub host_ra_deg: Option<f64>,
    /// Declination of the host galaxy, degrees.
    pub host_dec_deg: Option<f64>,
    /// Column of the host galaxy.
    pub host_x_px: Option<f64>,
    /// Row of the host galaxy.
    pub host_y_px: Option<f64>,
    /// Column of the core as chosen by the observer.
    pub core_x_px: Option<f64>,
    /// Row of the core as chosen by the observer.
    pub core_y_px: Option<f64>,
    /// Position angle of the jet side, degrees, [0, 360).
    pub jet_side_pa_deg: Option<f64>,
    /// Observing frequency, GHz.
    pub frequency_ghz: Option<f64>,
    /// Redshift.
    pub redshift: Option<f64>,
    /// Its error.
    pub redshift_error: Option<f64>,
    /// Distance, Mpc; replaces the redshift's.
    pub distance_mpc: Option<f64>,
    /// When it was observed.
    pub epoch: Option<Epoch>,
    /// Spectral index of the jet; see [`Self::jet_spectral_index`].
    pub spectral_index: Option<f64>,
    /// Its error.
    pub spectral_index_error: Option<f64>,
    /// Spectral index of the core; see [`Self::core_spectral_index_or_default`].
    pub core_spectral_index: Option<f64>,
    /// Spectral index of the whole source; see [`Self::total_spectral_index_or_default`].
    pub total_spectral_index: Option<f64>,
    /// Apparent speed over that of light.
    pub apparent_speed: Option<f64>,
    /// Its error.
    pub apparent_speed_error: Option<f64>,
    /// Proper motion, milliarcsec per year.
    pub proper_motion_mas_per_year: Option<f64>,
    /// Its error, milliarcsec per year.
    pub proper_motion_mas_per_year_error: Option<f64>,
    /// Fractional calibration error; see [`Self::flux_scale_error_or_default`].
    pub flux_scale_error: Option<f64>,
    /// Noise given by the observer, in the map's unit.
    pub rms: Option<f64>,
    /// Brightness below which the map was clipped, in its unit.
    pub clip_floor: Option<f64>,
    /// Lowest contour to trust, in the map's unit.
    pub contour_floor: Option<f64>,
    /// Emission wider than this is lost, arcsec.
    pub largest_recoverable_scale_arcsec: Option<f64>,
    /// Name of the source.
    pub id: Option<String>,
    /// Plane of an array with more than two axes.
    pub plane: Option<u64>,
    /// Array of an archive.
    pub array: Option<String>,
    /// Where each given key came from; `_mas` keys stand under their `_arcsec` name.
    pub origins: BTreeMap<&'static str, Origin>,
}

impl Default for MapDescription {
    fn default() -> Self {
        Self {
            pixel_scale_arcsec: None,
            beam_major_arcsec: None,
            beam_minor_arcsec: None,
            beam_pa_deg: None,
            unit: None,
            value_scale: 1.0,
            value_offset: 0.0,
            value_transfer: ValueTransfer::Linear,
            blank_value: None,
            saturation_value: None,
            rows: None,
            east: East::Left,
            up_pa_deg: 0.0,
            centre_ra_deg: None,
            centre_dec_deg: None,
            centre_x_px: None,
            centre_y_px: None,
            host_ra_deg: None,
            host_dec_deg: None,
            host_x_px: None,
            host_y_px: None,
            core_x_px: None,
            core_y_px: None,
            jet_side_pa_deg: None,
            frequency_ghz: None,
            redshift: None,
            redshift_error: None,
            distance_mpc: None,
            epoch: None,
            spectral_index: None,
            spectral_index_error: None,
            core_spectral_index: None,
            total_spectral_index: None,
            apparent_speed: None,
            apparent_speed_error: None,
            proper_motion_mas_per_year: None,
            proper_motion_mas_per_year_error: None,
            flux_scale_error: None,
            rms: None,
            clip_floor: None,
            contour_floor: None,
            largest_recoverable_scale_arcsec: None,
            id: None,
            plane: None,
            array: None,
            origins: BTreeMap::new(),
        }
    }
}

impl MapDescription {
    /// Spectral index of the jet with its error; 0.6 ± 0.2 where none is given, error 0
    /// where an index is given without one.
    pub fn jet_spectral_index(&self) -> (f64, f64) {
        let unknown_error = if self.spectral_index.is_some() { 0.0 } else { 0.2 };
        (self.spectral_index.unwrap_or(0.6), self.spectral_index_error.unwrap_or(unknown_error))
    }

    /// Spectral index of the core; 0 where none is given.
    pub fn core_spectral_index_or_default(&self) -> f64 {
        self.core_spectral_index.unwrap_or(0.0)
    }

    /// Spectral index of the whole source; 0.75 where none is given.
    pub fn total_spectral_index_or_default(&self) -> f64 {
        self.total_spectral_index.unwrap_or(0.75)
    }

    /// Fractional calibration error; where none is given 0.05 if the unit is a flux unit,
    /// else none.
    pub fn flux_scale_error_or_default(&self) -> Option<f64> {
        let is_flux = self.unit.is_some_and(|unit| unit.mjy_factor().is_some());
        self.flux_scale_error.or(is_flux.then_some(0.05))
    }

    /// Every key that is given or has a built-in default, in the table's order, with its
    /// value in canonical units (`_arcsec`) and its origin.
    ///
    /// The row order appears where it is given, or once the map has been assembled.
    pub fn entries(&self) -> Vec<(&'static str, Value, Origin)> {
        let (spectral_index, spectral_index_error) = self.jet_spectral_index();
        DESCRIPTION_KEYS
            .iter()
            .filter_map(|spec| {
                let value = match spec.name {
                    "pixel_scale_arcsec" => self.pixel_scale_arcsec.map(|[x, y]| {
                        if x.to_bits() == y.to_bits() { json!(x) } else { json!([x, y]) }
                    }),
                    "beam_major_arcsec" => self.beam_major_arcsec.map(Value::from),
                    "beam_minor_arcsec" => self.beam_minor_arcsec.map(Value::from),
                    "beam_pa_deg" => {
                        let assumed = self.beam_major_arcsec.map(|_| 0.0);
                        self.beam_pa_deg.or(assumed).map(Value::from)
                    }
                    "unit" => self.unit.map(|unit| Value::from(unit.word())),
                    "value_scale" => Some(Value::from(self.value_scale)),
                    "value_offset" => Some(Value::from(self.value_offset)),
                    "value_transfer" => Some(Value::from(self.value_transfer.word())),
                    "blank_value" => self.blank_value.map(Value::from),
                    "saturation_value" => self.saturation_value.map(Value::from),
                    "rows" => self.rows.map(|rows| Value::from(rows.word())),
                    "east" => Some(Value::from(self.east.word())),
                    "up_pa_deg" => Some(Value::from(self.up_pa_deg)),
                    "centre_ra_deg" => self.centre_ra_deg.map(Value::from),
                    "centre_dec_deg" => self.centre_dec_deg.map(Value::from),
                    "centre_x_px" => self.centre_x_px.map(Value::from),
                    "centre_y_px" => self.centre_y_px.map(Value::from),
                    "host_ra_deg" => self.host_ra_deg.map(Value::from),
                    "host_dec_deg" => self.host_dec_deg.map(Value::from),
                    "host_x_px" => self.host_x_px.map(Value::from),
                    "host_y_px" => self.host_y_px.map(Value::from),
                    "core_x_px" => self.core_x_px.map(Value::from),
                    "core_y_px" => self.core_y_px.map(Value::from),
                    "jet_side_pa_deg" => self.jet_side_pa_deg.map(Value::from),
                    "frequency_ghz" => self.frequency_ghz.map(Value::from),
                    "redshift" => self.redshift.map(Value::from),
                    "redshift_error" => self.redshift_error.map(Value::from),
                    "distance_mpc" => self.distance_mpc.map(Value::from),
                    "epoch" => self.epoch.as_ref().map(|epoch| epoch.given.clone()),
                    "spectral_index" => Some(Value::from(spectral_index)),
                    "spectral_index_error" => Some(Value::from(spectral_index_error)),
                    "core_spectral_index" => {
                        Some(Value::from(self.core_spectral_index_or_default()))
                    }
                    "total_spectral_index" => {
                        Some(Value::from(self.total_spectral_index_or_default()))
                    }
                    "apparent_speed" => self.apparent_speed.map(Value::from),
                    "apparent_speed_error" => self.apparent_speed_error.map(Value::from),
                    "proper_motion_mas_per_year" => {
                        self.proper_motion_mas_per_year.map(Value::from)
                    }
                    "proper_motion_mas_per_year_error" => {
                        self.proper_motion_mas_per_year_error.map(Value::from)
                    }
                    "flux_scale_error" => self.flux_scale_error_or_default().map(Value::from),
                    "rms" => self.rms.map(Value::from),
                    "clip_floor" => self.clip_floor.map(Value::from),
                    "contour_floor" => self.contour_floor.map(Value::from),
                    "largest_recoverable_scale_arcsec" => {
                        self.largest_recoverable_scale_arcsec.map(Value::from)
                    }
                    "id" => self.id.clone().map(Value::from),
                    "plane" => self.plane.map(Value::from),
                    "array" => self.array.clone().map(Value::from),
                    _ => None,
                }?;
                let origin = self.origins.get(spec.name).copied().unwrap_or(Origin::BuiltIn);
                Some((spec.name, value, origin))
            })
            .collect()
    }
}

/// Why a description cannot be used. The message says where.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum DescriptionError {
    /// A key that is not in the table.
    #[error("{place}: unknown key {found:?}: the nearest known key is {nearest}")]
    UnknownKey {
        /// Where it stands.
        place: String,
        /// The key found.
        found: String,
        /// The nearest known one.
        nearest: &'static str,
    },
    /// A key that stands there twice.
    #[error("{place}: the key {key} is given twice: keep one")]
    DuplicateKey {
        /// Where it stands.
        place: String,
        /// The key.
        key: String,
    },
    /// Brightnesses whose squares no longer fit into a number.
    #[error(
        "the brightest pixel is {largest:e} in size, needed is {least:e} to {most:e}: check value_scale and value_transfer, give blanks as blank_value, or choose another unit"
    )]
    BrightnessRange {
        /// Largest size of a brightness.
        largest: f64,
        /// Smallest that is measured.
        least: f64,
        /// Largest that is measured.
        most: f64,
    },
    /// A value of the wrong type or outside its range.
    #[error("{place}: {key} is {found}, needed is {needed}")]
    BadValue {
        /// Where it stands.
        place: String,
        /// The key.
        key: &'static str,
        /// The value found.
        found: String,
        /// What is needed.
        needed: String,
    },
    /// Two keys that say the same in two ways.
    #[error("{place}: {first} and {second} say the same thing twice: keep one of them")]
    Conflict {
        /// Where they stand.
        place: String,
        /// The one key.
        first: &'static str,
        /// The other.
        second: &'static str,
    },
    /// A key that is of no use without another.
    #[error("{place}: {key} is given without {needed}: give both or neither")]
    Incomplete {
        /// Where it stands.
        place: String,
        /// The key given.
        key: &'static str,
        /// The key it needs.
        needed: &'static str,
    },
    /// Text that is not the JSON or CSV that is needed.
    #[error("{place}: {message}")]
    Syntax {
        /// Where.
        place: String,
        /// What is wrong and what is needed.
        message: String,
    },
    /// A file that cannot be read.
    #[error("{place}: {message}")]
    Unreadable {
        /// Which file.
        place: String,
        /// Why.
        message: String,
    },
    /// A map that stands in a manifest twice.
    #[error(
        "{place}: {file} stands in the manifest already on line {first_line}: keep one of the two"
    )]
    DuplicateFile {
        /// Where the second stands.
        place: String,
        /// The map.
        file: String,
        /// Line of the first.
        first_line: u64,
    },
}

impl DescriptionError {
    /// The stable code of this kind of error, in kebab case.
    pub const fn code(&self) -> &'static str {
        match self {
            Self::UnknownKey { .. } => "unknown-key",
            Self::DuplicateKey { .. } => "duplicate-key",
            Self::BadValue { .. } => "bad-description-value",
            Self::BrightnessRange { .. } => "brightness-range",
            Self::Conflict { .. } => "conflicting-keys",
            Self::Incomplete { .. } => "incomplete-keys",
            Self::Syntax { .. } => "description-syntax",
            Self::Unreadable { .. } => "unreadable-description",
            Self::DuplicateFile { .. } => "duplicate-file",
        }
    }
}

/// Values from one place.
#[derive(Clone, Debug, PartialEq)]
pub struct Layer {
    /// What kind of place.
    pub origin: Origin,
    /// The values by key.
    pub values: BTreeMap<String, Value>,
    /// Which file, and line where it matters; for messages.
    pub where_: String,
}

/// A JSON object whose keys are kept in order, repeated ones too.
struct Pairs(Vec<(String, Value)>);

impl<'de> Deserialize<'de> for Pairs {
    fn deserialize<D: serde::Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct Visitor;
        impl<'de> serde::de::Visitor<'de> for Visitor {
            type Value = Pairs;
            fn expecting(&self, formatter: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
                formatter.write_str("an object of keys and values")
            }
            fn visit_map<A: serde::de::MapAccess<'de>>(
                self,
                mut access: A,
            ) -> Result<Pairs, A::Error> {
                let mut pairs = Vec::new();
                while let Some(pair) = access.next_entry()? {
                    pairs.push(pair);
                }
                Ok(Pairs(pairs))
            }
        }
        deserializer.deserialize_map(Visitor)
    }
}

/// The keys and values of a JSON object, in order.
pub(super) fn json_pairs(
    text: &str,
    place: &str,
) -> Result<Vec<(String, Value)>, DescriptionError> {
    let text = text.strip_prefix('\u{feff}').unwrap_or(text);
    serde_json::from_str::<Pairs>(text).map(|pairs| pairs.0).map_err(|error| {
        DescriptionError::Syntax {
            place: place.to_owned(),
            message: format!("needed is a JSON object of keys and values: {error}"),
        }
    })
}

impl Layer {
    /// From the text of a JSON object; `null` means not given.
    ///
    /// # Errors
    /// Text that is no such object, unknown or repeated keys, values of the wrong type.
    pub fn from_json_text(
        text: &str,
        origin: Origin,
        where_: &str,
    ) -> Result<Self, DescriptionError> {
        Self::from_pairs(json_pairs(text, where_)?, origin, where_)
    }

    /// From keys and JSON values.
    ///
    /// # Errors
    /// Unknown or repeated keys, values of the wrong type.
    pub fn from_pairs(
        pairs: impl IntoIterator<Item = (String, Value)>,
        origin: Origin,
        where_: &str,
    ) -> Result<Self, DescriptionError> {
        let mut values = BTreeMap::new();
        for (key, value) in pairs {
            let spec = known_key(&key, where_)?;
            if values.contains_key(spec.name) {
                return Err(DescriptionError::DuplicateKey { place: where_.to_owned(), key });
            }
            if !value.is_null() {
                values.insert(key, checked(spec, value, where_)?);
            }
        }
        Ok(Self { origin, values, where_: where_.to_owned() })
    }

    /// From keys and values as typed on the command line; keys with hyphens or underscores.
    ///
    /// # Errors
    /// Unknown or repeated keys, text that is no value of the key's kind.
    pub fn from_flag_pairs<K: AsRef<str>, V: AsRef<str>>(
        pairs: impl IntoIterator<Item = (K, V)>,
    ) -> Result<Self, DescriptionError> {
        let mut values = Vec::new();
        for (key, text) in pairs {
            let key = key.as_ref().trim_start_matches("--").replace('-', "_");
            let place = format!("--{}", key.replace('_', "-"));
            let value = value_from_text(known_key(&key, &place)?, text.as_ref(), &place)?;
            values.push((key, value));
        }
        Self::from_pairs(values, Origin::Flag, "command line")
    }
}

/// The table's row of a key, or an error that names the nearest one.
fn known_key(name: &str, place: &str) -> Result<&'static KeySpec, DescriptionError> {
    key_spec(name).ok_or_else(|| {
        let known = DESCRIPTION_KEYS.iter().map(|spec| spec.name);
        DescriptionError::UnknownKey {
            place: place.to_owned(),
            found: shortened(name),
            nearest: nearest(name, known).unwrap_or("id"),
        }
    })
}

fn shortened(text: &str) -> String {
    if text.chars().count() <= 60 {
        return text.to_owned();
    }
    text.chars().take(57).chain("...".chars()).collect()
}

fn bad_value(
    spec: &KeySpec,
    found: impl std::fmt::Display,
    needed: impl Into<String>,
    place: &str,
) -> DescriptionError {
    let name = key_spec(spec.name).map_or("value", |spec| spec.name);
    DescriptionError::BadValue {
        place: place.to_owned(),
        key: name,
        found: shortened(&found.to_string()),
        needed: needed.into(),
    }
}

/// A JSON value of the key's kind, in canonical spelling.
fn checked(spec: &KeySpec, value: Value, place: &str) -> Result<Value, DescriptionError> {
    let is_number = |value: &Value| value.as_f64().is_some_and(f64::is_finite);
    match spec.kind {
        ValueKind::Number if is_number(&value) => Ok(value),
        ValueKind::Number => Err(bad_value(spec, &value, "a number", place)),
        ValueKind::NumberOrPair => {
            let pair = value.as_array().is_some_and(|v| v.len() == 2 && v.iter().all(is_number));
            if pair || is_number(&value) {
                Ok(value)
            } else {
                Err(bad_value(spec, &value, "a number, or two as [x, y]", place))
            }
        }
        ValueKind::Text => match value {
            Value::String(text) if !text.trim().is_empty() => Ok(Value::String(text)),
            Value::Number(number) => Ok(Value::String(number.to_string())),
            other => Err(bad_value(spec, other, "a text", place)),
        },
        ValueKind::Choice(words) => {
            let found = value.as_str().map(|word| word.trim().replace(['µ', 'μ'], "u"));
            // Any case but that of a leading m: mJy and MJy differ by a factor of 10⁹.
            let is = |word: &str, found: &str| {
                word == found
                    || (!found.starts_with('M') && word.to_lowercase() == found.to_lowercase())
            };
            let matching = found.as_deref().and_then(|f| words.iter().find(|word| is(word, f)));
            if let Some(word) = matching {
                return Ok(Value::from(*word));
            }
            let short = found.map(|f| f.replace("Jansky", "Jy").replace("jansky", "Jy"));
            let near = short.and_then(|found| nearest(&found, words.iter().copied()));
            let hint = near.map_or(String::new(), |word| format!(" (the nearest is {word})"));
            Err(bad_value(spec, value, format!("one of {}{hint}", words.join(", ")), place))
        }
        ValueKind::Integer if value.as_u64().is_some() => Ok(value),
        ValueKind::Integer => Err(bad_value(spec, &value, "a whole number from 0", place)),
        ValueKind::Epoch => match decimal_year(&value) {
            Some(_) => Ok(value),
            None => {
                let needed = "a decimal year (2019.39) or an ISO date (2019-05-21)";
                Err(bad_value(spec, &value, needed, place))
            }
        },
    }
}

/// A value from text: a flag or a cell of a table.
pub(super) fn value_from_text(
    spec: &KeySpec,
    text: &str,
    place: &str,
) -> Result<Value, DescriptionError> {
    let text = text.trim();
    let number = |text: &str| text.trim().parse::<f64>().ok().filter(|n| n.is_finite());
    let value = match spec.kind {
        ValueKind::Number => number(text).map(Value::from),
        ValueKind::NumberOrPair => number(text).map(Value::from).or_else(|| {
            let inside = text.trim_start_matches('[').trim_end_matches(']').trim();
            let (x, y) =
                inside.split_once([',', ';']).or_else(|| inside.split_once(char::is_whitespace))?;
            Some(json!([number(x)?, number(y)?]))
        }),
        ValueKind::Integer => text.parse::<u64>().ok().map(Value::from),
        ValueKind::Epoch => number(text).map(Value::from),
        ValueKind::Text | ValueKind::Choice(_) => None,
    };
    checked(spec, value.unwrap_or_else(|| Value::from(text)), place)
}

/// Calendar year and fraction of a decimal year or an ISO date; a date alone is its 0 h.
fn decimal_year(value: &Value) -> Option<f64> {
    let plausible = |year: f64| (1900.0..2200.0).contains(&year).then_some(year);
    if let Some(year) = value.as_f64() {
        return plausible(year);
    }
    let text = value.as_str()?.trim();
    if let Ok(year) = text.parse::<f64>() {
        return plausible(year);
    }
    let (date, time) = match text.split_once(['T', ' ']) {
        Some((date, time)) => (date, Some(time)),
        None => (text, None),
    };
    let mut parts = date.split('-').map(|part| {
        part.bytes().all(|byte| byte.is_ascii_digit()).then(|| part.parse::<u32>().ok()).flatten()
    });
    let (year, month, day) = (parts.next()??, parts.next()??, parts.next()??);
    if parts.next().is_some() {
        return None;
    }
    let leap = year.is_multiple_of(4) && (!year.is_multiple_of(100) || year.is_multiple_of(400));
    let lengths = [31, if leap { 29 } else { 28 }, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31];
    let before = usize::try_from(month.checked_sub(1)?).ok()?;
    if day == 0 || day > *lengths.get(before)? {
        return None;
    }
    let day_of_year = lengths.iter().take(before).sum::<u32>() + day - 1;
    let fraction = time.map_or(Some(0.0), day_fraction)?;
    let days = if leap { 366.0 } else { 365.0 };
    plausible(f64::from(year) + (f64::from(day_of_year) + fraction) / days)
}

/// Fraction of a day of `hh:mm`, `hh:mm:ss` or `hh:mm:ss.s`, in universal time.
fn day_fraction(time: &str) -> Option<f64> {
    let mut parts = time.trim_end_matches('Z').split(':');
    let mut part = |below: f64| match parts.next() {
        None => Some(None),
        Some(text) => {
            let value = text.parse::<f64>().ok().filter(|v| (0.0..below).contains(v))?;
            Some(Some(value))
        }
    };
    let (hours, minutes, seconds) = (part(24.0)??, part(60.0)??, part(61.0)?.unwrap_or(0.0));
    Some((hours + (minutes + seconds / 60.0) / 60.0) / 24.0)
}

/// The description file beside a map: only the last extension is replaced.
pub fn sidecar_path(map_path: &Path) -> PathBuf {
    map_path.with_extension("map.json")
}

/// The layer of the description file beside a map, where there is one.
///
/// # Errors
/// A file that cannot be read or is no description.
pub fn read_sidecar(map_path: &Path) -> Result<Option<Layer>, DescriptionError> {
    if map_path.file_name().is_none() {
        // `.` or `/`: a folder, which reading the map refuses.
        return Ok(None);
    }
    let path = sidecar_path(map_path);
    match path.try_exists() {
        Ok(false) => Ok(None),
        Ok(true) => read_layer(&path, Origin::Sidecar).map(Some),
        Err(error) => Err(DescriptionError::Unreadable {
            place: path.display().to_string(),
            message: format!("the file cannot be looked up: {error}"),
        }),
    }
}

/// The layer of a file of defaults for a folder of maps.
///
/// # Errors
/// A file that cannot be read or is no description.
pub fn read_defaults(path: &Path) -> Result<Layer, DescriptionError> {
    read_layer(path, Origin::Defaults)
}

fn read_layer(path: &Path, origin: Origin) -> Result<Layer, DescriptionError> {
    let text = read_text(path, MAX_DESCRIPTION_BYTES)?;
    Layer::from_json_text(&text, origin, &path.display().to_string())
}

/// The text of a regular file of at most `most` bytes.
pub(super) fn read_text(path: &Path, most: u64) -> Result<String, DescriptionError> {
    let unreadable = |message: String| DescriptionError::Unreadable {
        place: path.display().to_string(),
        message,
    };
    let bytes = read_regular_file(path, most).map_err(|error| match error {
        super::read::ReadError::FileTooLarge { bytes } => {
            unreadable(format!("the file has {bytes} bytes, at most {most} are read: shorten it"))
        }
        other => unreadable(other.to_string()),
    })?;
    String::from_utf8(bytes)
        .map_err(|_| unreadable("the text is not UTF-8: save it as UTF-8".to_owned()))
}

/// A merged value with where it came from.
struct Given {
    spec: &'static KeySpec,
    value: Value,
    origin: Origin,
    place: String,
}

/// The values that hold after all layers, with the checks that read them.
struct Merged(BTreeMap<&'static str, Given>);

impl Merged {
    fn number(
        &self,
        name: &str,
        needed: &str,
        good: impl Fn(f64) -> bool,
    ) -> Result<Option<f64>, DescriptionError> {
        let Some(given) = self.0.get(name) else {
            return Ok(None);
        };
        match given.value.as_f64() {
            Some(number) if number.is_finite() && good(number) => Ok(Some(number)),
            _ => Err(bad_value(given.spec, &given.value, needed, &given.place)),
        }
    }

    fn any(&self, name: &str) -> Result<Option<f64>, DescriptionError> {
        self.number(name, "a finite number", |_| true)
    }

    fn positive(&self, name: &str) -> Result<Option<f64>, DescriptionError> {
        self.number(name, "a number above 0", |n| n > 0.0)
    }

    fn not_negative(&self, name: &str) -> Result<Option<f64>, DescriptionError> {
        self.number(name, "a number not below 0", |n| n >= 0.0)
    }

    fn declination(&self, name: &str) -> Result<Option<f64>, DescriptionError> {
        self.number(name, "between -90 and 90 degrees", |n| n.abs() <= 90.0)
    }

    fn spectral_index(&self, name: &str) -> Result<Option<f64>, DescriptionError> {
        self.number(name, "between -10 and 10", |n| n.abs() <= 10.0)
    }

    fn directed(&self, name: &str) -> Result<Option<f64>, DescriptionError> {
        Ok(self.any(name)?.map(wrap_directed_deg))
    }

    /// A positive angle from its `_arcsec` or `_mas` key.
    fn arcsec(&self, stem: &str) -> Result<Option<f64>, DescriptionError> {
        match self.positive(&format!("{stem}_arcsec"))? {
            Some(arcsec) => Ok(Some(arcsec)),
            None => Ok(self.positive(&format!("{stem}_mas"))?.map(|mas| mas / 1e3)),
        }
    }

    fn pixel_scale_arcsec(&self) -> Result<Option<[f64; 2]>, DescriptionError> {
        for (name, per_arcsec) in [("pixel_scale_arcsec", 1.0), ("pixel_scale_mas", 1e3)] {
            let Some(given) = self.0.get(name) else {
                continue;
            };
            let pair = match given.value.as_array().map(Vec::as_slice) {
                Some([x, y]) => [x.as_f64(), y.as_f64()],
                _ => [given.value.as_f64(); 2],
            };
            let good = |n: &f64| (1e-12..=36_000.0).contains(n);
            let [x, y] = pair.map(|n| n.map(|n| n / per_arcsec).filter(good));
            return match (x, y) {
                (Some(x), Some(y)) => Ok(Some([x, y])),
                _ => {
                    let needed = "above 0 and at most 36000 arcsec (a mirrored map: east right)";
                    Err(bad_value(given.spec, &given.value, needed, &given.place))
                }
            };
        }
        Ok(None)
    }

    fn word(&self, name: &str) -> Option<&str> {
        self.0.get(name).and_then(|given| given.value.as_str())
    }

    fn text(&self, name: &str) -> Option<String> {
        self.word(name).map(str::to_owned)
    }

    fn place(&self, name: &str) -> String {
        self.0.get(name).map_or("description".to_owned(), |given| given.place.clone())
    }

    /// The first key of a list that is given.
    fn first_of(&self, names: &[&'static str]) -> Option<&'static str> {
        names.iter().copied().find(|name| self.0.contains_key(name))
    }
}

/// Merges layers, whatever order they are listed in, and checks the result.
///
/// # Errors
/// An unknown key, a value of the wrong type or outside its range, a quantity said in two
/// ways by one layer, a half-given position or beam.
pub fn resolve(mut layers: Vec<Layer>) -> Result<MapDescription, DescriptionError> {
    layers.sort_by_key(|layer| layer.origin);
    let mut merged = Merged(BTreeMap::new());
    for layer in layers {
        for &(one, other) in ALTERNATIVES {
            let given = |names: &[&'static str]| {
                names.iter().copied().find(|name| layer.values.contains_key(*name))
            };
            match (given(one), given(other)) {
                (Some(first), Some(second)) => {
                    return Err(DescriptionError::Conflict { place: layer.where_, first, second });
                }
                (Some(_), None) => other.iter().for_each(|name| drop(merged.0.remove(name))),
                (None, Some(_)) => one.iter().for_each(|name| drop(merged.0.remove(name))),
                (None, None) => {}
            }
        }
        for (key, value) in layer.values {
            let spec = known_key(&key, &layer.where_)?;
            let value = checked(spec, value, &layer.where_)?;
            let place = layer.where_.clone();
            merged.0.insert(spec.name, Given { spec, value, origin: layer.origin, place });
        }
    }
    for &(key, needed) in NEEDS {
        if let (Some(given), None) = (merged.0.get(key), merged.0.get(needed)) {
            return Err(incomplete(given, needed));
        }
    }
    typed(&merged)
}

fn incomplete(given: &Given, needed: &'static str) -> DescriptionError {
    DescriptionError::Incomplete { place: given.place.clone(), key: given.spec.name, needed }
}

fn typed(merged: &Merged) -> Result<MapDescription, DescriptionError> {
    let beam_major_arcsec = merged.arcsec("beam_major")?;
    let mut beam_minor_arcsec = merged.arcsec("beam_minor")?;
    let minor_key = merged.first_of(&["beam_minor_arcsec", "beam_minor_mas"]);
    let needs_major = minor_key.or(merged.first_of(&["beam_pa_deg"]));
    match (beam_major_arcsec, beam_minor_arcsec) {
        (None, _) => {
            if let Some(given) = needs_major.and_then(|name| merged.0.get(name)) {
                return Err(incomplete(given, "beam_major_arcsec"));
            }
        }
        (Some(major), Some(minor)) if minor > major => {
            return Err(DescriptionError::BadValue {
                place: minor_key.map_or_else(String::new, |name| merged.place(name)),
                key: minor_key.unwrap_or("beam_minor_arcsec"),
                found: format!("{minor} arcsec"),
                needed: format!("at most beam_major, {major} arcsec: swap the two or mend one"),
            });
        }
        (Some(_), Some(_)) => {}
        (Some(major), None) => beam_minor_arcsec = Some(major),
    }
    if let (Some(given), None) = (merged.0.get("centre_x_px"), merged.0.get("centre_ra_deg")) {
        return Err(incomplete(given, "centre_ra_deg"));
    }
    let not_zero = |n: f64| n != 0.0;
    let origins = merged
        .0
        .values()
        .map(|given| {
            let canonical = match given.spec.name {
                "pixel_scale_mas" => "pixel_scale_arcsec",
                "beam_major_mas" => "beam_major_arcsec",
                "beam_minor_mas" => "beam_minor_arcsec",
                name => name,
            };
            (canonical, given.origin)
        })
        .collect();
    Ok(MapDescription {
        pixel_scale_arcsec: merged.pixel_scale_arcsec()?,
        beam_major_arcsec,
        beam_minor_arcsec,
        beam_pa_deg: merged.any("beam_pa_deg")?.map(wrap_undirected_deg),
        unit: merged.word("unit").and_then(BrightnessUnit::from_word),
        value_scale: merged
            .number("value_scale", "a number other than 0", not_zero)?
            .unwrap_or(1.0),
        value_offset: merged.any("value_offset")?.unwrap_or(0.0),
        value_transfer: match merged.word("value_transfer") {
            Some("sqrt") => ValueTransfer::Sqrt,
            Some("log10") => ValueTransfer::Log10,
            _ => ValueTransfer::Linear,
        },
        blank_value: merged.any("blank_value")?,
        saturation_value: merged.any("saturation_value")?,
        rows: match merged.word("rows") {
            Some("bottom-up") => Some(Rows::BottomUp),
            Some("top-down") => Some(Rows::TopDown),
            _ => None,
        },
        east: if merged.word("east") == Some("right") { East::Right } else { East::Left },
        up_pa_deg: merged.directed("up_pa_deg")?.unwrap_or(0.0),
        centre_ra_deg: merged.directed("centre_ra_deg")?,
        centre_dec_deg: merged.declination("centre_dec_deg")?,
        centre_x_px: merged.any("centre_x_px")?,
        centre_y_px: merged.any("centre_y_px")?,
        host_ra_deg: merged.directed("host_ra_deg")?,
        host_dec_deg: merged.declination("host_dec_deg")?,
        host_x_px: merged.any("host_x_px")?,
        host_y_px: merged.any("host_y_px")?,
        core_x_px: merged.any("core_x_px")?,
        core_y_px: merged.any("core_y_px")?,
        jet_side_pa_deg: merged.directed("jet_side_pa_deg")?,
        frequency_ghz: merged.positive("frequency_ghz")?,
        redshift: merged.not_negative("redshift")?,
        redshift_error: merged.not_negative("redshift_error")?,
        distance_mpc: merged.positive("distance_mpc")?,
        epoch: merged.0.get("epoch").and_then(|given| {
            let decimal_year = decimal_year(&given.value)?;
            Some(Epoch { decimal_year, given: given.value.clone() })
        }),
        spectral_index: merged.spectral_index("spectral_index")?,
        spectral_index_error: merged.not_negative("spectral_index_error")?,
        core_spectral_index: merged.spectral_index("core_spectral_index")?,
        total_spectral_index: merged.spectral_index("total_spectral_index")?,
        apparent_speed: merged.not_negative("apparent_speed")?,
        apparent_speed_error: merged.not_negative("apparent_speed_error")?,
        proper_motion_mas_per_year: merged.not_negative("proper_motion_mas_per_year")?,
        proper_motion_mas_per_year_error: merged
            .not_negative("proper_motion_mas_per_year_error")?,
        flux_scale_error: merged
            .number("flux_scale_error", "a fraction from 0 to 1", |n| (0.0..=1.0).contains(&n))?,
        rms: merged.positive("rms")?,
        clip_floor: merged.any("clip_floor")?,
        contour_floor: merged.not_negative("contour_floor")?,
        largest_recoverable_scale_arcsec: merged.positive("largest_recoverable_scale_arcsec")?,
        id: merged.text("id"),
        plane: merged.0.get("plane").and_then(|given| given.value.as_u64()),
        array: merged.text("array"),
        origins,
    })
}

/// JSON schema (draft 2020-12) of the description file, made from the table.
pub fn description_schema() -> Value {
    let mut properties = Map::new();
    for spec in DESCRIPTION_KEYS {
        let mut entry = match spec.kind {
            ValueKind::Number => json!({"type": "number"}),
            ValueKind::NumberOrPair => json!({"anyOf": [
                {"type": "number"},
                {"type": "array", "items": {"type": "number"}, "minItems": 2, "maxItems": 2},
            ]}),
            ValueKind::Text => json!({"type": ["string", "number"]}),
            ValueKind::Choice(words) => json!({"enum": words}),
            ValueKind::Integer => json!({"type": "integer", "minimum": 0}),
            ValueKind::Epoch => json!({"type": ["number", "string"]}),
        };
        if let Some(entry) = entry.as_object_mut() {
            entry.insert("description".to_owned(), Value::from(spec.help));
        }
        properties.insert(spec.name.to_owned(), entry);
    }
    json!({
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "Map description",
        "description": "What the observer knows about a map; every key may be left out.",
        "type": "object",
        "properties": properties,
        "additionalProperties": false,
    })
}

#[cfg(test)]
#[path = "description_tests.rs"]
mod tests;
