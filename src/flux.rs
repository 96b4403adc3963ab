//! Sums over parts of a source, with errors from the noise's measured correlation.

use crate::noise::{ApertureWeights, Noise, NoiseCorrelation};
use crate::regions::{Region, region_mask};
use crate::window::Window;

/// A sum of brightness over pixels and its noise, map unit × pixels.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Sum {
    /// The sum.
    pub value: f64,
    /// 1σ from correlated noise, and from the background's own error.
    pub sigma: f64,
    /// Pixels summed.
    pub area_px: f64,
}

/// Sums the window's usable pixels for which `inside` holds.
///
/// `background_px` is the number of pixels the local background rests on: its error is the
/// same for all pixels and grows with their number.
pub fn sum_where(
    window: &Window,
    (noise, correlation): (&Noise, &NoiseCorrelation),
    background_px: f64,
    inside: impl Fn(usize, usize) -> bool,
) -> Sum {
    let mut value = 0.0;
    let mut area_px = 0.0;
    let mut rms_sum = 0.0;
    let mut cells = Vec::new();
    for ((r, c), &brightness) in window.brightness.indexed_iter() {
        if window.usable(r, c) && inside(r, c) {
            value += brightness;
            area_px += 1.0;
            rms_sum += window.rms[[r, c]];
            cells.push((window.x0 + c, window.y0 + r, 1.0));
        }
    }
    let variance = ApertureWeights::from_cells(cells)
        .map_or(0.0, |w| correlation.aperture_variance(&w, noise));
    // Mean of n correlated samples: variance σ² ΣC / n, times (number of pixels)².
    let background = rms_sum * rms_sum * correlation.sum().max(1.0) / background_px.max(1.0);
    Sum { value, sigma: (variance.max(0.0) + background).sqrt(), area_px }
}

/// Window cells within `grow_px` of the members, neighbours left out.
pub fn widened(
    window: &Window,
    members: &[Region],
    columns: usize,
    rows: usize,
    grow_px: f64,
) -> ndarray::Array2<bool> {
    let mask = region_mask(columns, rows, members, grow_px);
    ndarray::Array2::from_shape_fn(window.brightness.dim(), |(r, c)| {
        mask.get(window.x0 + c, window.y0 + r) && !window.foreign[[r, c]]
    })
}
