//! A map ready to be measured: brightness, blanks, geometry, beam and description.
//!
//! `bytes → read → StoredArray`, `text → description → MapDescription`, and both together
//! → [`SkyMap`].

pub mod beam;
mod blanks;
pub mod description;
pub mod geometry;
pub mod image;
mod keys;
pub mod manifest;
pub mod npy;
mod quantisation;
pub mod read;
pub mod text;
mod words;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::stats::PresentRange;
use crate::units::Pixel;
pub use beam::Beam;
use description::{BrightnessUnit, DescriptionError, MapDescription, Rows, ValueTransfer};
use geometry::{SkyGeometry, SkyPosition};
pub use read::{Samples, StoredArray};

/// Integer maps with at least this many pixels at the largest number of their type are
/// saturated; fewer are the peak of a picture scaled to its maximum.
const MIN_SATURATED_PIXELS: usize = 64;

/// Brightest pixels that are measured, in the map's unit: fourth powers stay far inside
/// double precision.
const BRIGHTEST: std::ops::RangeInclusive<f64> = 1e-60..=1e60;

/// What is known about the file a map came from.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct InputFacts {
    /// SHA-256 of the file's bytes.
    pub sha256: String,
    /// `npy`, `png` or `text`.
    pub format: String,
    /// Shape as stored.
    pub shape: Vec<u64>,
    /// Type of the stored numbers.
    pub dtype: String,
}

impl InputFacts {
    /// The facts of a stored array.
    pub fn of(stored: &StoredArray) -> Self {
        Self {
            sha256: stored.sha256.clone(),
            format: stored.format.to_owned(),
            shape: stored.shape.clone(),
            dtype: stored.dtype.clone(),
        }
    }
}

/// Factors from the map's unit to flux densities.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FluxFactors {
    /// Brightness: mJy/beam in one unit of the map.
    pub mjy_per_beam: f64,
    /// Flux: mJy in one unit of the map summed over one pixel.
    pub mjy_per_pixel: f64,
}

/// A map of brightness on the sky.
#[derive(Clone, Debug)]
pub struct SkyMap {
    /// Brightness in the map's unit, linear, row-major as stored; blank pixels are NaN.
    pub samples: Samples,
    /// Number of rows.
    pub rows: usize,
    /// Number of columns.
    pub columns: usize,
    /// What the observer knows, with the row order of the format filled in.
    pub description: MapDescription,
    /// Where pixels lie on the sky.
    pub geometry: SkyGeometry,
    /// The beam of the description, in plane units; `None` without beam or pixel scale.
    pub beam: Option<Beam>,
    /// Step between brightness levels at the map's median, in its unit; 0 if there is none.
    pub quantisation_step: f64,
    /// Number of blank pixels.
    pub blank_count: usize,
    /// Number of pixels at or above saturation: given, or a plateau at the maximum.
    pub saturated: usize,
    /// Brightness below which the map seems to have been clipped, in its unit.
    pub clipped_floor: Option<f64>,
    /// What is known about the file.
    pub input: InputFacts,
}

/// The row order of a file format, where the description says nothing.
pub fn default_rows(format: &str) -> Rows {
    if format == "png" { Rows::TopDown } else { Rows::BottomUp }
}

impl SkyMap {
    /// Assembles a map from a stored array and its description.
    ///
    /// Blank are NaN, infinities, the description's blank value, and in floating-point data
    /// connected blocks of one fill value. Then brightness = offset + scale × f(stored).
    ///
    /// # Errors
    /// A core outside the array, a beam longer than the map, brightnesses so large or small
    /// that their squares do not fit into a number.
    pub fn from_stored(
        mut stored: StoredArray,
        mut description: MapDescription,
    ) -> Result<Self, DescriptionError> {
        let (rows, columns) = (stored.rows, stored.columns);
        let format_rows = default_rows(stored.format);
        description.rows = description.rows.or(Some(format_rows));
        let geometry = SkyGeometry::new(rows, columns, &description, format_rows);
        check_core(&description, &geometry)?;
        let beam = geometry.has_scale().then(|| described_beam(&description)).flatten();
        check_beam(beam, &geometry)?;
        check_host(&description, &geometry)?;

        let input = InputFacts::of(&stored);
        let is_single = matches!(stored.samples, Samples::F32(_));
        let blank = BlankValue::new(&description, &stored);
        // Adding zero takes the sign from −0.
        let cleaned = |value: f64| {
            if value.is_finite() && !blank.is(value) { value + 0.0 } else { f64::NAN }
        };
        let mut values: Vec<f64> =
            match std::mem::replace(&mut stored.samples, Samples::F64(Vec::new())) {
                Samples::F32(numbers) => numbers.iter().map(|&n| cleaned(f64::from(n))).collect(),
                Samples::F64(mut numbers) => {
                    numbers.iter_mut().for_each(|value| *value = cleaned(*value));
                    numbers
                }
            };
        let step = quantisation::step(&stored, &values);
        let findings = blanks::inspect(&values, columns, step, stored.is_integer());
        if !findings.fill_values.is_empty() {
            for value in &mut values {
                if findings.fill_values.iter().any(|fill| fill.total_cmp(value).is_eq()) {
                    *value = f64::NAN;
                }
            }
        }
        let saturated = saturated_pixels(&values, &description, &stored, findings.plateau_pixels);

        let brightness = |stored: f64| {
            let value = description.value_transfer.undo(stored);
            description.value_offset + description.value_scale * value
        };
        let quantisation_step = if step > 0.0 {
            let middle = median(&values);
            let at_middle = (brightness(middle + step) - brightness(middle)).abs();
            if at_middle.is_finite() { at_middle } else { 0.0 }
        } else {
            0.0
        };
        let unchanged = description.value_transfer == ValueTransfer::Linear
            && description.value_offset.to_bits() == 0f64.to_bits()
            && description.value_scale.to_bits() == 1f64.to_bits();
        let clipped_floor = findings.clipped_floor.map(brightness).filter(|v| v.is_finite());
        if !unchanged {
            for value in &mut values {
                let linear = brightness(*value);
                *value = if linear.is_finite() { linear } else { f64::NAN };
            }
        }
        // Infinities became blank above.
        let range = PresentRange::of(&values);
        check_brightness(&range)?;
        let blank_count = values.len() - range.count;
        let samples = if is_single && unchanged {
            // Exact: the values are the stored single-precision numbers or blank.
            Samples::F32(values.iter().map(|&value| value as f32).collect())
        } else {
            Samples::F64(values)
        };
        Ok(Self {
            samples,
            rows,
            columns,
            geometry,
            beam,
            quantisation_step,
            blank_count,
            saturated,
            clipped_floor,
            input,
            description,
        })
    }

    /// Brightness of a pixel (column, row); NaN where it is blank or outside the array.
    pub fn value(&self, x: usize, y: usize) -> f64 {
        if x < self.columns && y < self.rows {
            self.samples.get(y * self.columns + x)
        } else {
            f64::NAN
        }
    }

    /// Whether a pixel is blank or outside the array.
    pub fn is_blank(&self, x: usize, y: usize) -> bool {
        self.value(x, y).is_nan()
    }

    /// Puts the brightness of row `y` into `row`, whatever was in it; empty outside the array.
    pub fn row_into(&self, y: usize, row: &mut Vec<f64>) {
        row.clear();
        let start = y.saturating_mul(self.columns);
        let range = start..start.saturating_add(self.columns);
        match &self.samples {
            Samples::F32(numbers) => {
                row.extend(numbers.get(range).unwrap_or_default().iter().map(|&n| f64::from(n)));
            }
            Samples::F64(numbers) => {
                row.extend_from_slice(numbers.get(range).unwrap_or_default());
            }
        }
    }

    /// The rms given by the observer, in the map's unit.
    pub const fn given_rms(&self) -> Option<f64> {
        self.description.rms
    }

    /// The lowest level the observer trusts: the larger of `clip_floor` and `contour_floor`.
    pub fn least_contour(&self) -> Option<f64> {
        match (self.description.clip_floor, self.description.contour_floor) {
            (Some(a), Some(b)) => Some(a.max(b)),
            (a, b) => a.or(b),
        }
        .filter(|level| *level > 0.0)
    }

    /// Whether the map's unit is a flux unit.
    pub fn has_flux_unit(&self) -> bool {
        self.description.unit.and_then(BrightnessUnit::mjy_factor).is_some()
    }

    /// mJy in one unit of the map summed over a pixel, for units that need no beam to say so.
    pub fn mjy_per_pixel_without_beam(&self) -> Option<f64> {
        self.description.unit.filter(|u| u.is_per_pixel()).and_then(BrightnessUnit::mjy_factor)
    }

    /// Share of the usable pixels that sit at the floor at which the map was clipped; `None`
    /// for a map that was not.
    pub fn clipped_fraction(&self) -> Option<f64> {
        let floor = self.clipped_floor?;
        let count = (0..self.samples.len())
            .filter(|&k| {
                let value = self.samples.get(k);
                value.is_finite() && value <= floor
            })
            .count();
        let usable = self.samples.len() - self.blank_count;
        (usable > 0).then(|| count as f64 / usable as f64)
    }

    /// Number of pixels, blank ones included.
    pub const fn pixel_count(&self) -> usize {
        self.samples.len()
    }

    /// Factors to flux densities, with the given beam (the map's own, or an estimate).
    ///
    /// `None` without a flux unit or without a beam: what a beam holds and what a pixel holds
    /// differ by the beam's area in pixels, Ω_beam / Ω_pixel.
    pub fn flux_factors(&self, beam: Option<&Beam>) -> Option<FluxFactors> {
        let unit = self.description.unit?;
        let factor = unit.mjy_factor()?;
        let area_px = beam?.area_px(&self.geometry);
        if !(area_px.is_finite() && area_px > 0.0) {
            return None;
        }
        Some(if unit.is_per_beam() {
            FluxFactors { mjy_per_beam: factor, mjy_per_pixel: factor / area_px }
        } else {
            FluxFactors { mjy_per_beam: factor * area_px, mjy_per_pixel: factor }
        })
    }

    /// Pixel position of the host galaxy, where the description gives one that the map's
    /// geometry can place; it may lie outside the array.
    pub fn host_pixel(&self) -> Option<Pixel> {
        described_host(&self.description, &self.geometry)
    }

    /// Whether a host is given by sky coordinates that cannot be placed: the map's centre or
    /// pixel scale is not known.
    pub fn host_is_unplaced(&self) -> bool {
        self.description.host_ra_deg.is_some() && !self.geometry.has_sky()
    }

    /// Pixel position of the core as chosen by the observer.
    pub fn given_core(&self) -> Option<Pixel> {
        match (self.description.core_x_px, self.description.core_y_px) {
            (Some(x), Some(y)) => Some(Pixel { x, y }),
            _ => None,
        }
    }
}

fn check_core(
    description: &MapDescription,
    geometry: &SkyGeometry,
) -> Result<(), DescriptionError> {
    for (key, core, length, what) in [
        ("core_x_px", description.core_x_px, geometry.columns(), "columns"),
        ("core_y_px", description.core_y_px, geometry.rows(), "rows"),
    ] {
        let last = length as f64 - 1.0;
        if let Some(core) = core.filter(|core| !(-0.5..=last + 0.5).contains(core)) {
            return Err(DescriptionError::BadValue {
                place: "map description".to_owned(),
                key,
                found: core.to_string(),
                needed: format!("between 0 and {last}: the map has {length} {what}"),
            });
        }
    }
    Ok(())
}

/// The host's place on the map, where it is given and can be placed.
fn described_host(description: &MapDescription, geometry: &SkyGeometry) -> Option<Pixel> {
    if let (Some(x), Some(y)) = (description.host_x_px, description.host_y_px) {
        return Some(Pixel { x, y });
    }
    let (ra_deg, dec_deg) = (description.host_ra_deg?, description.host_dec_deg?);
    geometry.pixel_of_sky(SkyPosition { ra_deg, dec_deg })
}

/// A host outside the array: it or the centre is wrong, and nothing could be found at it.
fn check_host(
    description: &MapDescription,
    geometry: &SkyGeometry,
) -> Result<(), DescriptionError> {
    let given = description.host_x_px.is_some() || description.host_ra_deg.is_some();
    let by_sky_without_sky = description.host_ra_deg.is_some() && !geometry.has_sky();
    let host = described_host(description, geometry);
    if !given || by_sky_without_sky || host.is_some_and(|host| geometry.contains(host)) {
        return Ok(());
    }
    let found = host.map_or("on the far side of the sky".to_owned(), |host| {
        format!("at column {:.1}, row {:.1}", host.x, host.y)
    });
    Err(DescriptionError::BadValue {
        place: "map description".to_owned(),
        key: if description.host_x_px.is_some() { "host_x_px" } else { "host_ra_deg" },
        found,
        needed: format!(
            "on the map, columns 0 to {} and rows 0 to {}: mend the host or the map's centre",
            geometry.columns().saturating_sub(1),
            geometry.rows().saturating_sub(1)
        ),
    })
}

/// A beam longer than the whole map: one of the two is not in arcsec.
fn check_beam(beam: Option<Beam>, geometry: &SkyGeometry) -> Result<(), DescriptionError> {
    let side = geometry.rows().max(geometry.columns()) as f64;
    match beam.map(|beam| (beam.major, beam.major / geometry.mean_scale())) {
        Some((arcsec, pixels)) if pixels > side => Err(DescriptionError::BadValue {
            place: "map description".to_owned(),
            key: "beam_major_arcsec",
            found: format!("{arcsec} ({pixels:.3e} px)"),
            needed: format!("at most the map's longer side, {side} px: mend it or the pixel scale"),
        }),
        _ => Ok(()),
    }
}

fn check_brightness(range: &PresentRange) -> Result<(), DescriptionError> {
    let largest = (-range.lowest).max(range.highest).max(0.0);
    // Zero everywhere is another complaint's matter.
    if largest > 0.0 && !BRIGHTEST.contains(&largest) {
        let (&least, &most) = (BRIGHTEST.start(), BRIGHTEST.end());
        return Err(DescriptionError::BrightnessRange { largest, least, most });
    }
    Ok(())
}

/// The beam in arcsec; without a position angle its long axis points north.
fn described_beam(description: &MapDescription) -> Option<Beam> {
    let major = description.beam_major_arcsec?;
    let minor = description.beam_minor_arcsec.unwrap_or(major);
    Beam::new(major, minor, description.beam_pa_deg.unwrap_or(0.0))
}

/// The description's blank value as the stored type holds it.
struct BlankValue {
    low: f64,
    high: f64,
}

impl BlankValue {
    fn new(description: &MapDescription, stored: &StoredArray) -> Self {
        let Some(given) = description.blank_value else {
            return Self { low: f64::INFINITY, high: f64::NEG_INFINITY };
        };
        let (low, high) = match stored.dtype.as_str() {
            // Half precision keeps eleven binary digits: nearest is within half of the last.
            "float16" => {
                let half = given.abs() / 2048.0;
                (given - half, given + half)
            }
            "float32" => (f64::from(given as f32), f64::from(given as f32)),
            _ => (given, given),
        };
        Self { low: low.min(high), high }
    }

    fn is(&self, value: f64) -> bool {
        self.low <= value && value <= self.high
    }
}

fn saturated_pixels(
    values: &[f64],
    description: &MapDescription,
    stored: &StoredArray,
    plateau_pixels: usize,
) -> usize {
    let count = |full: f64, rising: bool| {
        values.iter().filter(|&&v| if rising { v >= full } else { v <= full }).count()
    };
    if let Some(full) = description.saturation_value {
        // On a negative (dark = bright) small stored values are the bright ones.
        return count(full, description.value_scale > 0.0);
    }
    let largest = match stored.dtype.as_str() {
        "uint8" => 255.0,
        "int8" => 127.0,
        "uint16" => 65535.0,
        "int16" => 32767.0,
        _ => return plateau_pixels,
    };
    let pixels = count(largest, true);
    if pixels >= MIN_SATURATED_PIXELS { pixels } else { 0 }
}

/// Median of the values that are not blank; 0 if there are none.
fn median(values: &[f64]) -> f64 {
    let mut finite: Vec<f64> = values.iter().copied().filter(|v| v.is_finite()).collect();
    let middle = finite.len() / 2;
    if finite.is_empty() {
        return 0.0;
    }
    *finite.select_nth_unstable_by(middle, f64::total_cmp).1
}

impl crate::grid::Grid for SkyMap {
    fn rows(&self) -> usize {
        self.rows
    }

    fn columns(&self) -> usize {
        self.columns
    }

    fn value(&self, x: usize, y: usize) -> f64 {
        Self::value(self, x, y)
    }

    fn row_into(&self, y: usize, out: &mut Vec<f64>) {
        Self::row_into(self, y, out);
    }
}

#[cfg(test)]
#[path = "map_tests.rs"]
mod tests;
