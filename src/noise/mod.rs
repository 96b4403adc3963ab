//! The noise of a map: background and rms as smooth functions of position, and the
//! correlation of the noise from pixel to pixel.
//!
//! The map is cut into tiles of at least ten beams. A first look takes each tile's mode and
//! the spread of the values below it (emission only adds); tiles on emission are told by
//! their spread and by a robust plane through the others. Then emission and deep holes are
//! masked (3 rms around a peak of 5 rms, grown by one beam), mean and rms of what is left
//! are found by clipping at 3 rms with the Gaussian correction for the tails, and this is
//! done once more. What the tiles differ by is kept only as far as their errors cannot
//! explain it. A mirrored or transposed map gives the mirrored or transposed answer.

mod aperture;
mod censored;
mod correlation;
mod model;
mod smooth;
mod tiles;

pub use aperture::{ApertureScatter, ApertureWeights, aperture_scatter, structure_factor};
pub use correlation::{CorrelationSettings, KernelEllipse, NoiseCorrelation, measure_correlation};
pub use model::Noise;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use thiserror::Error;

use crate::grid::{Grid, PixelMask};
use crate::regions::{Run, groups_above};
use crate::stats::{PresentRange, clipped_about, mad_sigma};

/// How background and rms are measured.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct NoiseSettings {
    /// Smallest width of a tile in beam majors. Default 10: about 90 independent samples,
    /// the rms of one tile to 7 %.
    pub tile_beams: f64,
    /// Smallest width of a tile in pixels. Default 32.
    pub minimum_tile_px: usize,
    /// Width of a tile where the beam is not known, in pixels. Default 48.
    pub unknown_beam_tile_px: usize,
    /// Values further than this many rms from the mean are left out. Default 3; the rms is
    /// corrected for the cut.
    pub clip_sigma: f64,
    /// Peak of what is masked as emission, in rms. Default 5.
    pub detection_sigma: f64,
    /// Outline of what is masked as emission, in rms. Default 3.
    pub outline_sigma: f64,
    /// Fewest pixels from which noise is measured. Default 50: the rms to 10 % at best.
    pub minimum_pixels: usize,
    /// Smallest share of usable pixels in a tile; others follow their neighbours. Default 0.3.
    pub minimum_usable: f64,
}

impl Default for NoiseSettings {
    fn default() -> Self {
        Self {
            tile_beams: 10.0,
            minimum_tile_px: 32,
            unknown_beam_tile_px: 48,
            clip_sigma: 3.0,
            detection_sigma: 5.0,
            outline_sigma: 3.0,
            minimum_pixels: 50,
            minimum_usable: 0.3,
        }
    }
}

/// What is known of the map's noise beforehand. The default knows nothing.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct NoiseHints {
    /// FWHM of the beam in pixels, (major, minor).
    pub beam_px: Option<(f64, f64)>,
    /// Difference of neighbouring stored values, in the map's unit; 0 where not quantised.
    pub quantisation_step: f64,
    /// Values at or below this were cut off (set to it) before the map reached us.
    pub clipped_floor: Option<f64>,
    /// The rms stated by the observer: used as it is, everywhere.
    pub given_rms: Option<f64>,
}

/// Why the noise of a map cannot be measured.
#[derive(Clone, Debug, Error, PartialEq)]
pub enum NoiseError {
    /// No pixel has a value.
    #[error("all {pixels} pixels are blank: give a map with values (check `blank_value`)")]
    AllBlank {
        /// Number of pixels of the map.
        pixels: usize,
    },
    /// Every pixel has the same value.
    #[error("all {pixels} pixels with a value are {value}: there is nothing to measure")]
    AllEqual {
        /// Number of pixels with a value.
        pixels: usize,
        /// The value.
        value: f64,
    },
    /// Too few pixels have a value.
    #[error("{found} pixels with a value, the noise needs {needed}: give a larger map, or `rms`")]
    TooFewPixels {
        /// Pixels with a value.
        found: usize,
        /// Pixels needed.
        needed: usize,
    },
    /// The map was cut off above its noise.
    #[error(
        "the map's noise cannot be seen: {share_percent:.0} % of its pixels are {as_what}: \
         give `rms`, or `contour_floor`"
    )]
    NotVisible {
        /// Share of the pixels cut off, in per cent.
        share_percent: f64,
        /// What they were replaced by.
        as_what: &'static str,
    },
    /// Emission leaves no empty sky.
    #[error(
        "{found} pixels free of emission, the noise needs {needed}: give a wider map, or `rms`"
    )]
    NoEmptySky {
        /// Pixels free of emission.
        found: usize,
        /// Pixels needed.
        needed: usize,
    },
    /// The rms stated by the observer is no positive number.
    #[error("`rms` is {rms}: it must be a positive number")]
    BadRms {
        /// The value given.
        rms: f64,
    },
}

impl NoiseError {
    /// Stable code, kebab-case.
    pub const fn code(&self) -> &'static str {
        match self {
            Self::AllBlank { .. } => "all-blank",
            Self::AllEqual { .. } => "all-equal",
            Self::TooFewPixels { .. } => "too-few-pixels",
            Self::NotVisible { .. } => "noise-not-visible",
            Self::NoEmptySky { .. } => "no-empty-sky",
            Self::BadRms { .. } => "bad-rms",
        }
    }
}

/// Measures background and rms over the map (see the module's documentation).
///
/// With `hints.given_rms` the rms is that number everywhere; the background is measured
/// where it can be and 0 otherwise.
///
/// # Errors
/// [`NoiseError`] says what was found, what is needed and what the observer can give.
pub fn estimate_noise(
    grid: &dyn Grid,
    settings: &NoiseSettings,
    hints: &NoiseHints,
) -> Result<Noise, NoiseError> {
    let field = Field::load(grid);
    if field.present == 0 {
        return Err(NoiseError::AllBlank { pixels: field.values.len() });
    }
    let Some(rms) = hints.given_rms else {
        return measure(&field, settings, hints);
    };
    if !(rms.is_finite() && rms > 0.0) {
        return Err(NoiseError::BadRms { rms });
    }
    let mut noise = match measure(&field, settings, hints) {
        Ok(noise) => noise,
        Err(NoiseError::AllEqual { value, .. }) => {
            Noise::uniform(field.columns, field.rows, value, rms)
        }
        Err(_) => Noise::uniform(field.columns, field.rows, 0.0, rms),
    };
    noise.rms_nodes.fill(rms);
    noise.global_rms = rms;
    noise.method = "given";
    noise.quantisation_floor = quantisation_floor(hints);
    noise.source_mask = source_mask(&field, &noise, settings, grow_px(hints, None));
    Ok(noise)
}

fn measure(
    field: &Field,
    settings: &NoiseSettings,
    hints: &NoiseHints,
) -> Result<Noise, NoiseError> {
    if field.present < settings.minimum_pixels.max(2) {
        let needed = settings.minimum_pixels.max(2);
        return Err(NoiseError::TooFewPixels { found: field.present, needed });
    }
    // Exactly equal is meant: the smallest difference is a structure.
    if field.highest.total_cmp(&field.lowest).is_eq() {
        return Err(NoiseError::AllEqual { pixels: field.present, value: field.lowest });
    }
    if let Some(floor) = censored::floor_of(field, hints) {
        return censored::estimate(field, settings, hints, floor);
    }
    censored::check_for_cut_to_blank(field)?;
    tiles::estimate(field, settings, hints)
}

/// Smallest rms that the number format can show (uniform rounding error of one step).
pub(crate) fn quantisation_floor(hints: &NoiseHints) -> f64 {
    let step = hints.quantisation_step;
    if step.is_finite() && step > 0.0 { step / 12f64.sqrt() } else { 0.0 }
}

/// How far emission is masked beyond its outline: one beam major, else the FWHM of the
/// noise's correlation, else 3 px.
pub(crate) fn grow_px(hints: &NoiseHints, correlation_px: Option<f64>) -> f64 {
    let known = hints.beam_px.map(|(major, _)| major).filter(|b| b.is_finite() && *b > 0.0);
    known.or(correlation_px).unwrap_or(3.0).clamp(1.5, 200.0)
}

/// The pixels that belong to emission (or to holes as deep) and those within `grow_px`, or
/// within a fifth of the radius of a circle of the same area where that is more: connected pixels beyond the outline threshold with one beyond the detection threshold.
pub fn source_mask(
    grid: &dyn Grid,
    noise: &Noise,
    settings: &NoiseSettings,
    grow_px: f64,
) -> PixelMask {
    let (outline, detection) = (settings.outline_sigma, settings.detection_sigma);
    let groups = groups_above(grid, noise, outline.min(detection), detection, true);
    grown_mask(&groups, grid.columns(), grid.rows(), grow_px)
}

fn grown_mask(groups: &[Vec<Run>], columns: usize, rows: usize, grow_px: f64) -> PixelMask {
    let mut mask = PixelMask::new(columns, rows);
    for group in groups {
        // The faint wings of a wide source are wide: a fifth of its radius leads a Gaussian
        // of 500 rms from 3 to 0.3 rms.
        let area: usize = group.iter().map(Run::len).sum();
        let radius = (area as f64 / std::f64::consts::PI).sqrt();
        for run in group {
            mask.set_run_grown(run.y, run.x0, run.x1, grow_px.max(0.2 * radius));
        }
    }
    mask
}

/// A map's values in memory, row by row, blank = NaN.
pub(crate) struct Field {
    pub columns: usize,
    pub rows: usize,
    pub values: Vec<f64>,
    /// Number of pixels with a value, and their range.
    pub present: usize,
    pub lowest: f64,
    pub highest: f64,
}

impl Field {
    fn load(grid: &dyn Grid) -> Self {
        let (columns, rows) = (grid.columns(), grid.rows());
        let mut values = Vec::with_capacity(columns.saturating_mul(rows));
        let mut row = Vec::new();
        let (mut present, mut lowest, mut highest) = (0, f64::INFINITY, f64::NEG_INFINITY);
        for y in 0..rows {
            grid.row_into(y, &mut row);
            row.resize(columns, f64::NAN);
            let range = PresentRange::of(&row);
            present += range.count;
            lowest = range.lowest.min(lowest);
            highest = range.highest.max(highest);
            values.extend_from_slice(&row);
        }
        Self { columns, rows, values, present, lowest, highest }
    }

    fn row(&self, y: usize) -> &[f64] {
        let start = y.saturating_mul(self.columns);
        self.values.get(start..start.saturating_add(self.columns)).unwrap_or(&[])
    }
}

impl Grid for Field {
    fn rows(&self) -> usize {
        self.rows
    }

    fn columns(&self) -> usize {
        self.columns
    }

    fn value(&self, x: usize, y: usize) -> f64 {
        if x < self.columns { self.row(y).get(x).copied().unwrap_or(f64::NAN) } else { f64::NAN }
    }

    fn row_into(&self, y: usize, out: &mut Vec<f64>) {
        out.clear();
        out.extend_from_slice(self.row(y));
    }
}

/// Robust rms in a ring.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AnnulusRms {
    /// Rms of value − background about 0, outliers beyond 3 rms left out, in the map's unit.
    pub rms: f64,
    /// Number of pixels in the ring that are neither blank nor masked.
    pub pixels: usize,
}

/// The rms of what is left after the background at distances `inner_px` to `outer_px` from
/// a position (column, row), `mask` left out: the noise that counts beside a bright core,
/// whose sidelobes it includes. Taken about zero, so a shallow bowl counts as well. `None`
/// with fewer than 20 pixels.
pub fn rms_at_distance(
    grid: &dyn Grid,
    noise: &Noise,
    mask: &PixelMask,
    centre: (f64, f64),
    inner_px: f64,
    outer_px: f64,
) -> Option<AnnulusRms> {
    let in_range = |low: f64, high: f64, size: usize| {
        let low = low.ceil().clamp(0.0, size as f64) as usize;
        low..((high.floor() + 1.0).clamp(0.0, size as f64) as usize).max(low)
    };
    let (mut row, mut background, mut rms) = (Vec::new(), Vec::new(), Vec::new());
    let mut found = Vec::new();
    let columns = in_range(centre.0 - outer_px, centre.0 + outer_px, grid.columns());
    for y in in_range(centre.1 - outer_px, centre.1 + outer_px, grid.rows()) {
        grid.row_into(y, &mut row);
        noise.part_into(y, columns.clone(), &mut background, &mut rms);
        let dy = y as f64 - centre.1;
        for x in columns.clone() {
            let d = (x as f64 - centre.0).hypot(dy);
            let wanted = d >= inner_px && d <= outer_px && !mask.get(x, y);
            let residual = row
                .get(x)
                .zip(background.get(x - columns.start))
                .map(|(value, level)| value - level);
            found.extend(residual.filter(|r| wanted && !r.is_nan()));
        }
    }
    if found.len() < 20 {
        return None;
    }
    let start = mad_sigma(&mut found.clone(), 0.0)?;
    let pixels = found.len();
    let rms = clipped_about(&found, 0.0, start, 3.0).map_or(start, |c| c.rms);
    (rms.is_finite() && rms > 0.0).then_some(AnnulusRms { rms, pixels })
}

#[cfg(test)]
mod tests;
