//! The error of a weighted sum of pixels.

use super::{Noise, NoiseCorrelation};
use crate::grid::{Grid, PixelMask};
use crate::stats::{dot, mad_sigma, median};

/// Most products (lags × pixels) summed one by one; larger apertures use Σ C alone.
const MOST_PRODUCTS: usize = 40_000_000;

/// Weights on the pixels of a small window of a map: what is summed, and how.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct ApertureWeights {
    /// First column of the window.
    pub x0: usize,
    /// First row of the window.
    pub y0: usize,
    /// Number of columns.
    pub width: usize,
    /// Number of rows.
    pub height: usize,
    /// Weights, row by row; missing ones count as 0.
    pub weights: Vec<f64>,
}

impl ApertureWeights {
    /// Weights from a function of column and row of the map; what is not finite becomes 0.
    pub fn from_fn(
        x0: usize,
        y0: usize,
        width: usize,
        height: usize,
        mut weight: impl FnMut(usize, usize) -> f64,
    ) -> Self {
        let mut weights = Vec::with_capacity(width.saturating_mul(height));
        for y in y0..y0 + height {
            for x in x0..x0 + width {
                let w = weight(x, y);
                weights.push(if w.is_finite() { w } else { 0.0 });
            }
        }
        Self { x0, y0, width, height, weights }
    }

    /// Weights from single cells (column, row, weight); `None` where there is none. A cell
    /// named twice gets the sum.
    pub fn from_cells(cells: impl IntoIterator<Item = (usize, usize, f64)>) -> Option<Self> {
        let cells: Vec<_> = cells.into_iter().filter(|(.., w)| w.is_finite()).collect();
        let x0 = cells.iter().map(|c| c.0).min()?;
        let y0 = cells.iter().map(|c| c.1).min()?;
        let width = cells.iter().map(|c| c.0).max()? - x0 + 1;
        let height = cells.iter().map(|c| c.1).max()? - y0 + 1;
        let mut weights = vec![0.0; width * height];
        for (x, y, w) in cells {
            if let Some(slot) = weights.get_mut((y - y0) * width + x - x0) {
                *slot += w;
            }
        }
        Some(Self { x0, y0, width, height, weights })
    }

    fn row(&self, j: usize) -> &[f64] {
        let start = j.saturating_mul(self.width);
        self.weights.get(start..start.saturating_add(self.width)).unwrap_or(&[])
    }

    /// The same window with every weight times the local rms.
    fn times_rms(&self, noise: &Noise) -> Self {
        let mut rms = Vec::new();
        let mut weights = Vec::with_capacity(self.weights.len());
        let first = self.x0.min(noise.columns.saturating_sub(1));
        for j in 0..self.height {
            noise.rms_part_into(self.y0 + j, first..self.x0 + self.width, &mut rms);
            for (i, w) in self.row(j).iter().enumerate() {
                let rms = rms.get(self.x0 - first + i).or(rms.last()).copied().unwrap_or(0.0);
                weights.push(w * rms);
            }
        }
        Self { weights, ..*self }
    }

    /// Σ w value and Σ w over the window; blank pixels are left out of both.
    pub fn sum(&self, grid: &dyn Grid) -> (f64, f64) {
        let (mut total, mut weight) = (0.0, 0.0);
        let mut values = Vec::new();
        for j in 0..self.height {
            grid.row_into(self.y0 + j, &mut values);
            let line = values.get(self.x0..).unwrap_or(&[]);
            for (w, value) in self.row(j).iter().zip(line) {
                if !value.is_nan() {
                    total += w * value;
                    weight += w;
                }
            }
        }
        (total, weight)
    }

    /// Σ over the map of a(p) b(p + lag).
    fn overlap(&self, other: &Self, dx: isize, dy: isize) -> f64 {
        // Column i of this window meets column i + shift of the other.
        let shift = self.x0 as isize + dx - other.x0 as isize;
        let drop = self.y0 as isize + dy - other.y0 as isize;
        let first = (-shift).max(0);
        let last = (self.width as isize).min(other.width as isize - shift);
        if last <= first {
            return 0.0;
        }
        let rows = (-drop).max(0)..(self.height as isize).min(other.height as isize - drop);
        rows.map(|j| {
            let a = self.row(j as usize).get(first as usize..last as usize).unwrap_or(&[]);
            let b = other
                .row((j + drop) as usize)
                .get((first + shift) as usize..(last + shift) as usize)
                .unwrap_or(&[]);
            dot(a, b)
        })
        .sum()
    }
}

impl NoiseCorrelation {
    /// Variance of Σ w x over an aperture of noise: Σ over lags of C(lag) times the
    /// autocorrelation of w·rms, the rms being the local one. In the map's unit squared
    /// times the weights' squared; never negative. Apertures above about 10⁵ px use
    /// Σ (w rms)² · Σ C, which holds where they are much wider than the correlation.
    pub fn aperture_variance(&self, aperture: &ApertureWeights, noise: &Noise) -> f64 {
        self.variance_of(&aperture.times_rms(noise))
    }

    /// The same for noise of one rms everywhere.
    pub fn aperture_variance_uniform(&self, aperture: &ApertureWeights, rms: f64) -> f64 {
        rms * rms * self.variance_of(aperture)
    }

    fn variance_of(&self, w: &ApertureWeights) -> f64 {
        let own = w.overlap(w, 0, 0);
        if self.half_plane().len().saturating_mul(w.weights.len()) > MOST_PRODUCTS {
            return own * self.sum();
        }
        let pairs: f64 =
            self.half_plane().iter().map(|(dx, dy, c)| c * w.overlap(w, *dx, *dy)).sum();
        // Measured coefficients need not be positive definite: a tenth of white noise is
        // the least a sum of pixels can have.
        (own + 2.0 * pairs).max(0.01 * own)
    }

    /// Covariance of two weighted sums of the same noise; their windows may differ.
    pub fn aperture_covariance(
        &self,
        first: &ApertureWeights,
        second: &ApertureWeights,
        noise: &Noise,
    ) -> f64 {
        let (a, b) = (first.times_rms(noise), second.times_rms(noise));
        let own = a.overlap(&b, 0, 0);
        let pixels = a.weights.len().min(b.weights.len());
        if self.half_plane().len().saturating_mul(pixels) > MOST_PRODUCTS / 2 {
            return own * self.sum();
        }
        let lags = self.half_plane().iter();
        let pairs: f64 =
            lags.map(|(dx, dy, c)| c * (a.overlap(&b, *dx, *dy) + a.overlap(&b, -*dx, -*dy))).sum();
        own + pairs
    }
}

/// How much the same aperture scatters over empty sky.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ApertureScatter {
    /// Robust standard deviation of Σ w (value − background), scaled to the local rms at
    /// the aperture's own place, in the map's unit times the weights.
    pub scatter: f64,
    /// Median of the same sums: what the background model leaves.
    pub median: f64,
    /// Number of places. The scatter from n independent ones is known to 1.17/√n of itself
    /// (a median absolute deviation); places that overlap are not independent.
    pub placements: usize,
}

/// Lays the aperture on a lattice of places, symmetric about the map's middle, skips those
/// that meet a masked or blank pixel, and returns the scatter of the sums: it holds what a
/// correlation of small lags does not (stripes, bowls). At most `max_positions` places are
/// tried. `None` with fewer than 10 places.
pub fn aperture_scatter(
    grid: &dyn Grid,
    noise: &Noise,
    mask: &PixelMask,
    aperture: &ApertureWeights,
    max_positions: usize,
) -> Option<ApertureScatter> {
    let (columns, rows) = (grid.columns(), grid.rows());
    let room_x = columns.checked_sub(aperture.width)?;
    let room_y = rows.checked_sub(aperture.height)?;
    let own = aperture.times_rms(noise);
    // Normalised map once: every placement reads only what its weights touch.
    let mut signal = Vec::with_capacity(columns * rows);
    let (mut values, mut background, mut rms) = (Vec::new(), Vec::new(), Vec::new());
    for y in 0..rows {
        grid.row_into(y, &mut values);
        noise.row_into(y, &mut background, &mut rms);
        let masked = mask.row(y);
        for (x, value) in values.iter().enumerate() {
            let usable = !masked.get(x).copied().unwrap_or(false);
            let z = (value - background.get(x)?) / rms.get(x)?;
            signal.push(if usable { z } else { f64::NAN });
        }
    }
    let (places_x, places_y) = places(room_x, room_y, max_positions);
    let mut sums = Vec::new();
    for top in &places_y {
        for left in &places_x {
            let mut sum = 0.0;
            for j in 0..own.height {
                let start = (top + j) * columns + left;
                let line = signal.get(start..start + own.width)?;
                // Weight 0 must not meet NaN: 0 × NaN is NaN.
                sum += own
                    .row(j)
                    .iter()
                    .zip(line)
                    .map(|(w, z)| if w.abs() > 0.0 { w * z } else { 0.0 })
                    .sum::<f64>();
                if sum.is_nan() {
                    break;
                }
            }
            if sum.is_finite() {
                sums.push(sum);
            }
        }
    }
    let placements = sums.len();
    if placements < 10 {
        return None;
    }
    let middle = median(&mut sums)?;
    let scatter = mad_sigma(&mut sums, middle)?;
    Some(ApertureScatter { scatter, median: middle, placements })
}

/// Offsets along both axes, symmetric about the middle, evenly spread.
fn places(room_x: usize, room_y: usize, most: usize) -> (Vec<usize>, Vec<usize>) {
    let cells = (room_x + 1) as f64 * (room_y + 1) as f64;
    let spacing = (cells / most.max(1) as f64).sqrt().max(1.0);
    let along = |room: usize| (((room + 1) as f64 / spacing).floor() as usize).clamp(1, room + 1);
    let (mut count_x, mut count_y) = (along(room_x), along(room_y));
    // A narrow room leaves its share of places to the other axis.
    if count_x == 1 {
        count_y = most.clamp(1, room_y + 1);
    } else if count_y == 1 {
        count_x = most.clamp(1, room_x + 1);
    }
    (symmetric_places(room_x, count_x), symmetric_places(room_y, count_y))
}

/// About `count` offsets from 0 to `room`, evenly spread and symmetric about the middle.
fn symmetric_places(room: usize, count: usize) -> Vec<usize> {
    if count <= 1 {
        let middle = [room / 2, room - room / 2];
        return if room.is_multiple_of(2) { vec![middle[0]] } else { middle.to_vec() };
    }
    // An odd number of places needs one in the middle.
    let count = if count % 2 == 1 && room % 2 == 1 { count - 1 } else { count };
    let steps = (count - 1).max(1);
    let lower = |k: usize| k * room / steps;
    (0..count).map(|k| if 2 * k < count { lower(k) } else { room - lower(count - 1 - k) }).collect()
}

/// Places an aperture is laid on at the most to see structure.
const STRUCTURE_PLACES: usize = 400;

/// By how much an aperture's scatter over empty sky exceeds what the correlation predicts: 1
/// where it does not within its own error (two standard errors), or cannot be tried.
pub fn structure_factor(
    grid: &dyn Grid,
    noise: &Noise,
    correlation: &NoiseCorrelation,
    mask: &PixelMask,
    aperture: &ApertureWeights,
) -> f64 {
    let predicted = correlation.aperture_variance(aperture, noise).sqrt();
    match aperture_scatter(grid, noise, mask, aperture, STRUCTURE_PLACES) {
        Some(seen) if predicted > 0.0 && seen.placements >= 20 => {
            let factor = seen.scatter / predicted;
            // A median absolute deviation of n places is known to 1.17/√n.
            let error = 1.17 / (seen.placements as f64).sqrt();
            if factor > 1.0 + 2.0 * error { factor } else { 1.0 }
        }
        _ => 1.0,
    }
}

#[cfg(test)]
mod tests;
