//! The pixels a source's components are fitted to.

use crate::map::beam::Beam;
use crate::map::geometry::LocalFrame;
use crate::noise::NoiseCorrelation;
use crate::units::{Pixel, SkyOffset};
use crate::window::Window;

/// More pixels than this are thinned.
const MOST_PIXELS: usize = 8_000;
/// What lies this near to a place, in beams, is described with it.
const NEAR_BEAMS: f64 = 1.5;

/// Usable pixels of the source, grown by half a beam, with offsets in beams.
pub(super) struct Pixels {
    /// Columns of the box of the pixels.
    pub(super) columns: usize,
    /// Rows of the box.
    pub(super) rows: usize,
    /// Pixels of the map per step of the box (thinned where the noise is well sampled).
    pub(super) stride: usize,
    /// Index into the lists below by box cell; −1 where not fitted.
    pub(super) index: Vec<i32>,
    /// Box cell (column, row) of each pixel.
    pub(super) cell: Vec<(u32, u32)>,
    /// Position in beams of each pixel.
    pub(super) position: Vec<[f64; 2]>,
    /// Brightness of each pixel.
    pub(super) value: Vec<f64>,
    /// Local rms of each pixel.
    sigma: Vec<f64>,
    /// Root mean square of the local rms.
    pub(super) rms: f64,
    /// Box cell to beams: beams = matrix · (column, row) + shift.
    pub(super) to_beams: [[f64; 2]; 2],
    shift: [f64; 2],
    from_beams: [[f64; 2]; 2],
    corner: Pixel,
    /// Fitted pixels per independent sample of the noise.
    per_sample: f64,
    /// Box steps and weights of the beam, for the smoothed residual.
    beam_cells: Vec<(i32, i32, f64)>,
    /// Variance of the smoothed residual's amplitude over the local variance.
    beam_variance: f64,
}

/// A place where the model falls short.
#[derive(Clone, Copy)]
pub(super) struct ResidualPeak {
    pub(super) at: [f64; 2],
    pub(super) amplitude: f64,
    pub(super) significance: f64,
}

impl Pixels {
    pub(super) fn of(
        window: &Window,
        beam: &Beam,
        frame: &LocalFrame,
        correlation: &NoiseCorrelation,
    ) -> Option<Self> {
        let scale = frame.mean_scale();
        if !(scale.is_finite() && scale > 0.0 && beam.minor > 0.0 && beam.major.is_finite()) {
            return None;
        }
        let grown = grown_mask(window, (0.5 * beam.mean_fwhm() / scale).min(1e4));
        let (columns, rows) = (window.columns(), window.rows());
        let inside = |x: usize, y: usize| {
            grown.get(y * columns + x).copied().unwrap_or(false) && window.usable(y, x)
        };
        let cells: Vec<(usize, usize)> = (0..rows)
            .flat_map(|y| (0..columns).map(move |x| (x, y)))
            .filter(|&(x, y)| inside(x, y))
            .collect();
        let x_low = cells.iter().map(|c| c.0).min()?;
        let x_high = cells.iter().map(|c| c.0).max()?;
        let y_low = cells.iter().map(|c| c.1).min()?;
        let y_high = cells.iter().map(|c| c.1).max()?;
        let stride = stride(beam, scale, correlation, cells.len());
        // Thinned symmetrically about the box's middle.
        let first = |low: usize, high: usize| low + ((high - low) % stride) / 2;
        let (x_first, y_first) = (first(x_low, x_high), first(y_low, y_high));
        let box_columns = (x_high - x_first) / stride + 1;
        let box_rows = (y_high - y_first) / stride + 1;

        let along = SkyOffset::polar(1.0 / beam.major, beam.pa_deg);
        let across = SkyOffset::polar(1.0 / beam.minor, beam.pa_deg + 90.0);
        let corner = Pixel::new((window.x0 + x_first) as f64, (window.y0 + y_first) as f64);
        let step = stride as f64;
        let step_x = frame.difference(corner, Pixel::new(corner.x + step, corner.y));
        let step_y = frame.difference(corner, Pixel::new(corner.x, corner.y + step));
        let to_beams =
            [[step_x.dot(along), step_y.dot(along)], [step_x.dot(across), step_y.dot(across)]];
        let determinant = to_beams[0][0] * to_beams[1][1] - to_beams[0][1] * to_beams[1][0];
        if !(determinant.abs() > 0.0 && determinant.is_finite()) {
            return None;
        }
        let from_beams = [
            [to_beams[1][1] / determinant, -to_beams[0][1] / determinant],
            [-to_beams[1][0] / determinant, to_beams[0][0] / determinant],
        ];
        let mut out = Self {
            columns: box_columns,
            rows: box_rows,
            stride,
            index: vec![-1; box_columns * box_rows],
            cell: Vec::new(),
            position: Vec::new(),
            value: Vec::new(),
            sigma: Vec::new(),
            rms: 0.0,
            to_beams,
            shift: [0.0, 0.0],
            from_beams,
            corner,
            per_sample: 1.0,
            beam_cells: Vec::new(),
            beam_variance: 1.0,
        };
        for row in 0..box_rows {
            for column in 0..box_columns {
                let (x, y) = (x_first + stride * column, y_first + stride * row);
                if x >= columns || y >= rows || !inside(x, y) {
                    continue;
                }
                let sigma = window.rms[[y, x]];
                out.index[row * box_columns + column] = out.cell.len() as i32;
                out.cell.push((column as u32, row as u32));
                out.position.push(out.of_cell(column as f64, row as f64));
                out.value.push(window.brightness[[y, x]]);
                out.sigma.push(if sigma.is_finite() { sigma.max(0.0) } else { 0.0 });
            }
        }
        if out.value.len() < 7 {
            return None;
        }
        let n = out.value.len() as f64;
        let highest = out.value.iter().map(|v| v.abs()).fold(0.0, f64::max);
        // A map without noise: nothing below 1e-12 of the brightest is told.
        out.rms = (out.sigma.iter().map(|s| s * s).sum::<f64>() / n).sqrt().max(1e-12 * highest);
        for sigma in &mut out.sigma {
            *sigma = sigma.max(1e-12 * highest);
        }
        out.per_sample = (correlation.sum() / (step * step)).max(1.0);
        out.beam_cells = out.beam_stencil();
        out.beam_variance = out.stencil_variance(correlation);
        (out.rms.is_finite() && highest > 0.0).then_some(out)
    }

    fn of_cell(&self, column: f64, row: f64) -> [f64; 2] {
        let m = &self.to_beams;
        [
            m[0][0] * column + m[0][1] * row + self.shift[0],
            m[1][0] * column + m[1][1] * row + self.shift[1],
        ]
    }

    /// Box column and row of a position in beams.
    pub(super) fn to_cell(&self, at: [f64; 2]) -> (f64, f64) {
        let m = &self.from_beams;
        let (a, b) = (at[0] - self.shift[0], at[1] - self.shift[1]);
        (m[0][0] * a + m[0][1] * b, m[1][0] * a + m[1][1] * b)
    }

    /// Position in beams of a map pixel.
    pub(super) fn beams(&self, pixel: Pixel) -> [f64; 2] {
        let step = self.stride as f64;
        self.of_cell((pixel.x - self.corner.x) / step, (pixel.y - self.corner.y) / step)
    }

    /// Map pixel of a position in beams.
    pub(super) fn map_pixel(&self, at: [f64; 2]) -> Pixel {
        let (column, row) = self.to_cell(at);
        let step = self.stride as f64;
        Pixel::new(self.corner.x + step * column, self.corner.y + step * row)
    }

    /// Index of the pixel at a box cell.
    pub(super) fn at(&self, column: i64, row: i64) -> Option<usize> {
        let (c, r) = (usize::try_from(column).ok()?, usize::try_from(row).ok()?);
        if c >= self.columns || r >= self.rows {
            return None;
        }
        self.index.get(r * self.columns + c).and_then(|&i| usize::try_from(i).ok())
    }

    /// Whether the position lies on a fitted pixel or next to one (a hole in the source).
    pub(super) fn holds(&self, at: [f64; 2]) -> bool {
        let (column, row) = self.to_cell(at);
        if !(column.is_finite() && row.is_finite()) {
            return false;
        }
        let (c, r) = (column.round() as i64, row.round() as i64);
        (-1..=1).any(|dr| {
            (-1..=1).any(|dc| self.at(c.saturating_add(dc), r.saturating_add(dr)).is_some())
        })
    }

    /// Length of the box's diagonal in beams.
    pub(super) fn extent(&self) -> f64 {
        let (c, r) = (self.columns as f64, self.rows as f64);
        let m = &self.to_beams;
        let one = (m[0][0] * c + m[0][1] * r).hypot(m[1][0] * c + m[1][1] * r);
        let other = (m[0][0] * c - m[0][1] * r).hypot(m[1][0] * c - m[1][1] * r);
        one.max(other)
    }

    /// Brightest pixel and its position.
    pub(super) fn brightest(&self) -> Option<(f64, [f64; 2])> {
        self.value
            .iter()
            .zip(&self.position)
            .map(|(v, p)| (*v, *p))
            .max_by(|a, b| a.0.total_cmp(&b.0))
            .filter(|(value, _)| *value > 0.0)
    }

    /// Local rms of a pixel.
    pub(super) fn sigma_at(&self, index: usize) -> Option<f64> {
        self.sigma.get(index).copied()
    }

    /// Number of independent samples, at least 1.
    pub(super) fn independent(&self) -> f64 {
        (self.value.len() as f64 / self.per_sample).max(1.0)
    }

    /// The sum of squares that one independent sample of noise leaves.
    pub(super) fn sample_square(&self) -> f64 {
        self.rms * self.rms * self.per_sample
    }

    /// Σ residual² over noise and model error, per independent sample.
    pub(super) fn chi_squared(&self, residual: &[f64], model_error: f64) -> f64 {
        let sum: f64 = residual
            .iter()
            .zip(self.value.iter().zip(&self.sigma))
            .map(|(r, (value, sigma))| {
                r * r / (sigma * sigma + (model_error * value).powi(2)).max(f64::MIN_POSITIVE)
            })
            .sum();
        sum / self.per_sample
    }

    /// χ² over the number of samples of the pixels within [`NEAR_BEAMS`] of a place, or of all.
    pub(super) fn reduced_near(
        &self,
        residual: &[f64],
        model_error: f64,
        place: Option<[f64; 2]>,
    ) -> f64 {
        let near =
            |at: &[f64; 2]| place.is_none_or(|p| (p[0] - at[0]).hypot(p[1] - at[1]) <= NEAR_BEAMS);
        let (mut sum, mut count) = (0.0, 0.0);
        for (k, _) in self.position.iter().enumerate().filter(|(_, at)| near(at)) {
            let (r, value, sigma) = (residual[k], self.value[k], self.sigma[k]);
            let square = sigma * sigma + (model_error * value).powi(2);
            sum += r * r / square.max(f64::MIN_POSITIVE);
            count += 1.0;
        }
        sum / f64::max(count, 1.0)
    }

    /// Root mean square of residual over noise.
    pub(super) fn residual_over_noise(&self, residual: &[f64]) -> f64 {
        let sum: f64 = residual
            .iter()
            .zip(&self.sigma)
            .map(|(r, sigma)| (r / sigma.max(f64::MIN_POSITIVE)).powi(2))
            .sum();
        let mean = (sum / residual.len().max(1) as f64).sqrt();
        if mean.is_finite() { mean } else { 0.0 }
    }

    /// The place where a beam-shaped component would stand highest above noise and model
    /// error, at least [`NEAR_BEAMS`] from the places tried before.
    pub(super) fn highest_residual(
        &self,
        residual: &[f64],
        model_error: f64,
        tried: &[[f64; 2]],
    ) -> Option<ResidualPeak> {
        let mut best: Option<ResidualPeak> = None;
        for (k, &(column, row)) in self.cell.iter().enumerate() {
            let (mut sum, mut norm) = (0.0, 0.0);
            for &(dc, dr, weight) in &self.beam_cells {
                let near =
                    self.at(i64::from(column) + i64::from(dc), i64::from(row) + i64::from(dr));
                if let Some(r) = near.and_then(|i| residual.get(i)) {
                    sum += weight * r;
                    norm += weight * weight;
                }
            }
            let (Some(&value), Some(&sigma), Some(&at)) =
                (self.value.get(k), self.sigma.get(k), self.position.get(k))
            else {
                continue;
            };
            let again = tried.iter().any(|p| (p[0] - at[0]).hypot(p[1] - at[1]) < NEAR_BEAMS);
            if !(norm > 0.0 && sum > 0.0) || again {
                continue;
            }
            let amplitude = sum / norm;
            let error = (sigma * sigma * self.beam_variance + (model_error * value).powi(2)).sqrt();
            let significance = amplitude / error.max(f64::MIN_POSITIVE);
            if significance.is_finite() && best.is_none_or(|b| significance > b.significance) {
                best = Some(ResidualPeak { at, amplitude, significance });
            }
        }
        best
    }

    /// The beam on the box's cells out to one FWHM.
    fn beam_stencil(&self) -> Vec<(i32, i32, f64)> {
        let reach = |k: usize| {
            let row = self.from_beams[k];
            (row[0].hypot(row[1]).ceil()).clamp(1.0, 60.0) as i32
        };
        let (reach_x, reach_y) = (reach(0), reach(1));
        let mut cells = Vec::new();
        for dr in -reach_y..=reach_y {
            for dc in -reach_x..=reach_x {
                let m = &self.to_beams;
                let (c, r) = (f64::from(dc), f64::from(dr));
                let squared =
                    (m[0][0] * c + m[0][1] * r).powi(2) + (m[1][0] * c + m[1][1] * r).powi(2);
                if squared <= 1.0 {
                    cells.push((dc, dr, (-4.0 * std::f64::consts::LN_2 * squared).exp()));
                }
            }
        }
        cells
    }

    fn stencil_variance(&self, correlation: &NoiseCorrelation) -> f64 {
        // A stencil of more cells than this is a map of no structure on the pixel scale.
        if self.beam_cells.len() > 700 {
            return 1.0;
        }
        let step = self.stride as isize;
        let norm: f64 = self.beam_cells.iter().map(|c| c.2 * c.2).sum();
        let mut sum = 0.0;
        for a in &self.beam_cells {
            for b in &self.beam_cells {
                let lag = (step * (b.0 - a.0) as isize, step * (b.1 - a.1) as isize);
                sum += a.2 * b.2 * correlation.at(lag.0, lag.1);
            }
        }
        (sum / (norm * norm)).clamp(1.0 / norm * 0.1, 2.0)
    }
}

/// Thinning that keeps four samples per FWHM of beam and noise, or the number of pixels low.
fn stride(beam: &Beam, scale: f64, correlation: &NoiseCorrelation, count: usize) -> usize {
    let beam_px = beam.minor / scale;
    let smooth = (beam_px.min(correlation.correlation_fwhm_px()) / 4.0).floor();
    let crowded = (count as f64 / MOST_PIXELS as f64).sqrt().floor().min(beam_px / 3.0);
    (smooth.max(crowded).max(1.0) as usize).min(1000)
}

/// The member pixels of the window grown by a radius, row by row.
fn grown_mask(window: &Window, radius_px: f64) -> Vec<bool> {
    let (columns, rows) = (window.columns(), window.rows());
    let mut mask = vec![false; columns * rows];
    let member = |x: usize, y: usize| window.member.get((y, x)).copied().unwrap_or(false);
    let reach = radius_px.floor().max(0.0) as usize;
    for y in 0..rows {
        for x in 0..columns {
            if !member(x, y) {
                continue;
            }
            mask[y * columns + x] = true;
            let inner = x > 0
                && y > 0
                && member(x - 1, y)
                && member(x + 1, y)
                && member(x, y - 1)
                && member(x, y + 1);
            if inner {
                continue;
            }
            for dy in 0..=reach {
                let half = (radius_px * radius_px - (dy * dy) as f64).max(0.0).sqrt() as usize;
                let (low, high) = (x.saturating_sub(half), (x + half).min(columns - 1));
                let above = (y + dy < rows).then_some(y + dy);
                let below = y.checked_sub(dy);
                for row in [above, below].into_iter().flatten() {
                    if let Some(run) = mask.get_mut(row * columns + low..=row * columns + high) {
                        run.fill(true);
                    }
                }
            }
        }
    }
    mask
}
