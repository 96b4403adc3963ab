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
    // A source larger than a tile averages the background of several.
    let resting_on = (background_px + area_px).max(1.0);
    let background = rms_sum * rms_sum * correlation.sum().max(1.0) / resting_on;
    Sum { value, sigma: (variance.max(0.0) + background).sqrt(), area_px }
}

/// What fades out of a sum's edge, from the flux in the outermost ring and in the equal one
/// inside it, when the fall from ring to ring goes on: a geometric series. Half of it is its
/// own error. Nothing is added where the rings do not fall or hold no flux.
pub fn beyond_edge(inner_ring: f64, outer_ring: &Sum) -> Sum {
    let fall = outer_ring.value / inner_ring;
    if !(inner_ring > 0.0 && outer_ring.value > 0.0 && fall < 1.0) {
        return Sum::default();
    }
    let fall = fall.min(STEEPEST_REMAINDER);
    let share = fall / (1.0 - fall);
    let value = outer_ring.value * share;
    Sum { value, sigma: (0.5 * value).hypot(outer_ring.sigma * share), area_px: 0.0 }
}

/// Rings that fall less than this from one to the next say little about what follows.
const STEEPEST_REMAINDER: f64 = 0.6;

impl Sum {
    /// This sum and another whose noise is its own.
    pub fn plus(self, other: Self) -> Self {
        Self {
            value: self.value + other.value,
            sigma: self.sigma.hypot(other.sigma),
            area_px: self.area_px + other.area_px,
        }
    }
}

/// The same sum alone, where its error is not asked for.
pub fn value_where(window: &Window, inside: impl Fn(usize, usize) -> bool) -> f64 {
    let cells = window.brightness.indexed_iter();
    cells.filter(|((r, c), _)| window.usable(*r, *c) && inside(*r, *c)).map(|(_, b)| b).sum()
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

#[cfg(test)]
mod tests {
    use ndarray::Array2;

    use super::*;

    #[test]
    fn a_sum_of_white_noise_has_root_n_and_the_background_adds() {
        let n = 20;
        let window = Window {
            x0: 0,
            y0: 0,
            brightness: Array2::from_elem((n, n), 2.0),
            rms: Array2::from_elem((n, n), 0.5),
            member: Array2::from_elem((n, n), true),
            foreign: Array2::from_elem((n, n), false),
        };
        let noise = Noise::uniform(n, n, 0.0, 0.5);
        let white = NoiseCorrelation::white();
        let sum = sum_where(&window, (&noise, &white), 1e30, |r, _| r < 10);
        assert!((sum.value - 400.0).abs() < 1e-9 && (sum.area_px - 200.0).abs() < 1e-12);
        // σ √N = 0.5 √200.
        assert!((sum.sigma - 0.5 * 200f64.sqrt()).abs() < 1e-9, "{}", sum.sigma);
        // A background known from 200 + 200 pixels is off by σ/√400 in each of the 200: half the
        // variance again.
        let unsure = sum_where(&window, (&noise, &white), 200.0, |r, _| r < 10);
        assert!((unsure.sigma - sum.sigma * 1.5f64.sqrt()).abs() < 1e-9, "{}", unsure.sigma);
    }

    #[test]
    fn what_fades_beyond_the_edge_is_a_geometric_series() {
        let ring = Sum { value: 8.0, sigma: 1.0, area_px: 40.0 };
        // 16, 8, then 4 + 2 + 1 + ... = 8; its error is half of it and the ring's noise.
        let rest = beyond_edge(16.0, &ring);
        assert!((rest.value - 8.0).abs() < 1e-12);
        assert!((rest.sigma - 17f64.sqrt()).abs() < 1e-12);
        for (inner, outer) in [(8.0, 9.0), (-1.0, 1.0), (5.0, -2.0)] {
            let rest = beyond_edge(inner, &Sum { value: outer, sigma: 1.0, area_px: 40.0 });
            assert_eq!(rest, Sum::default(), "{inner} {outer}");
        }
    }

    #[test]
    fn neighbours_and_blanks_are_left_out() {
        let mut window = Window {
            x0: 3,
            y0: 4,
            brightness: Array2::from_elem((5, 5), 1.0),
            rms: Array2::from_elem((5, 5), 1.0),
            member: Array2::from_elem((5, 5), true),
            foreign: Array2::from_elem((5, 5), false),
        };
        window.brightness[[0, 0]] = f64::NAN;
        window.foreign[[1, 1]] = true;
        let noise = Noise::uniform(10, 10, 0.0, 1.0);
        let sum = sum_where(&window, (&noise, &NoiseCorrelation::white()), 1e30, |_, _| true);
        assert!((sum.value - 23.0).abs() < 1e-12);
    }
}
