//! Sums over matched strips, the base under them taken off.

use super::place::PlacedStrip;
use crate::map::geometry::LocalFrame;
use crate::noise::{ApertureWeights, Noise, NoiseCorrelation};
use crate::ridge::Ridge;
use crate::units::{Pixel, wrap_difference_deg};
use crate::window::Window;

/// The strip, in sky units.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Strip {
    /// Inner radial end.
    pub inner: f64,
    /// Outer radial end.
    pub outer: f64,
    /// Half the width across the ridge.
    pub half_width: f64,
    /// FWHM across of the jet as seen, that of an unresolved one at the least.
    pub jet_fwhm: f64,
}

impl Strip {
    /// Inner and outer edge of the bands beside the strip.
    pub(super) fn bands(&self) -> (f64, f64) {
        let inner = (BAND_INNER_FWHM * self.jet_fwhm).max(BAND_INNER * self.half_width);
        (inner, (BAND_OUTER_FWHM * self.jet_fwhm).max(BAND_OUTER * self.half_width))
    }
}

/// Sum over one strip, the base taken off.
#[derive(Clone, Debug)]
pub struct StripFlux {
    /// Weighted sum of brightness over pixels, map unit × pixels.
    pub sum: f64,
    /// Pixels in the strip (fractions count).
    pub area_px: f64,
    /// Weights of the pixels, for the error.
    pub weights: Option<ApertureWeights>,
    /// Share of the strip that is not usable.
    pub blank_fraction: f64,
    /// What the highest two orders of the base took off the sum: how much hangs on its shape.
    pub base_curvature: f64,
}

/// Bands beside the strip run between these multiples of the jet's FWHM.
const BAND_INNER_FWHM: f64 = 1.1;
const BAND_OUTER_FWHM: f64 = 2.75;
/// Least inner and outer edge of the bands in half widths of the strip.
const BAND_INNER: f64 = 1.3;
const BAND_OUTER: f64 = 2.5;
/// Terms of the base across the strip: a polynomial of fourth order leaves 3, 0.6 and 0.1 % of
/// Gaussian bridges 3.5, 5 and 7 times wider than the jet, where a constant leaves 50, 32 and
/// 19 %.
const BASE_TERMS: usize = 5;
/// Share of what the highest orders of the base take off by which the base may be wrong: for
/// Gaussian bridges wider than three jets the orders left out hold less than this.
const BASE_DOUBT: f64 = 0.25;
/// Each pixel is divided into this many parts along each axis to find its share in a strip.
const PARTS: usize = 5;

/// A window's cells around the core in polar coordinates, by growing distance: made once,
/// used by every strip.
#[derive(Clone, Debug)]
pub struct PolarCells {
    cells: Vec<PolarCell>,
}

#[derive(Clone, Copy, Debug)]
pub(super) struct PolarCell {
    pub(super) row: usize,
    pub(super) column: usize,
    pub(super) radius: f64,
    pub(super) bearing_deg: f64,
    /// Whether both this cell and the one opposite the core hold usable brightness.
    pub(super) pair_usable: bool,
}

impl PolarCells {
    /// The cells within `reach` of the frame's origin.
    pub fn around(window: &Window, frame: &LocalFrame, reach: f64) -> Self {
        let mut cells = Vec::new();
        for row in 0..window.rows() {
            for column in 0..window.columns() {
                let offset = frame.offset(window.pixel(row, column));
                let radius = offset.radius();
                if radius <= reach {
                    let opposite = frame.pixel(offset.times(-1.0));
                    let pair_usable = window.usable(row, column) && window.usable_nearest(opposite);
                    let bearing_deg = offset.position_angle_deg();
                    cells.push(PolarCell { row, column, radius, bearing_deg, pair_usable });
                }
            }
        }
        cells.sort_by(|a, b| a.radius.total_cmp(&b.radius));
        Self { cells }
    }

    pub(super) fn between(&self, low: f64, high: f64) -> &[PolarCell] {
        let start = self.cells.partition_point(|c| c.radius < low);
        let end = self.cells.partition_point(|c| c.radius <= high);
        self.cells.get(start..end).unwrap_or(&[])
    }
}

/// A pixel's part in a strip and its bands.
struct Share {
    row: usize,
    column: usize,
    value: f64,
    in_strip: f64,
    in_band: f64,
    /// Distance from the ridge across, in half widths, signed.
    across: f64,
}

/// Sums a strip along bearings `bearing(d)` between two radial distances.
///
/// A pixel enters by its share inside the strip (25 points a pixel). Pixels that are blank or
/// another source's, or whose place opposite the core is, are left out on both sides. The base
/// is a polynomial in the distance across, fitted by least squares to the bands; what of the
/// jet itself reaches the bands is given back, as for a Gaussian of the jet's width. All of it
/// is linear in the pixels, and the same on both sides.
fn sum_strip(
    window: &Window,
    frame: &LocalFrame,
    around: &PolarCells,
    bearing: &dyn Fn(f64) -> f64,
    (inner, outer): (f64, f64),
    strip: &Strip,
) -> StripFlux {
    let half_width = strip.half_width;
    let (band_inner, band_outer) = strip.bands();
    let jet = |across: f64| {
        let q = across / strip.jet_fwhm;
        (-4.0 * std::f64::consts::LN_2 * q * q).exp()
    };
    let mut blank_area = 0.0;
    let mut area_px = 0.0;
    // The jet inside the strip, where pixels are usable and where they are not.
    let (mut all, mut lost) = (0.0, 0.0);
    let mut cells: Vec<Share> = Vec::new();
    let margin = frame.pixel_reach();
    for cell in around.between(inner - 2.0 * margin, outer + 2.0 * margin) {
        let turn = wrap_difference_deg(cell.bearing_deg - bearing(cell.radius));
        let signed = cell.radius * turn.to_radians();
        let across = signed.abs();
        if across > band_outer + 2.0 * margin && cell.radius > 2.0 * margin {
            continue;
        }
        let inside_ends = cell.radius >= inner + margin && cell.radius < outer - margin;
        let whole = inside_ends && turn.abs() < 45.0 && cell.radius > 4.0 * margin;
        let (in_strip, in_band) = if whole && across + margin <= half_width {
            (1.0, 0.0)
        } else if whole && across - margin >= band_inner && across + margin <= band_outer {
            (0.0, 1.0)
        } else if whole && across - margin > half_width && across + margin < band_inner {
            (0.0, 0.0)
        } else {
            let place = window.pixel(cell.row, cell.column);
            shares(frame, place, bearing, (inner, outer), half_width, (band_inner, band_outer))
        };
        if in_strip + in_band <= 0.0 {
            continue;
        }
        if !cell.pair_usable {
            blank_area += in_strip;
            lost += in_strip * jet(across);
            continue;
        }
        all += in_strip * jet(across);
        let value = window.brightness[[cell.row, cell.column]];
        area_px += in_strip;
        cells.push(Share {
            row: cell.row,
            column: cell.column,
            value,
            in_strip,
            in_band,
            across: signed / half_width,
        });
    }
    // Blank places are taken as filled like the rest; beyond half of the jet that says nothing.
    let whole_jet = all + lost.min(all);
    let weighted = |base: Option<[f64; BASE_TERMS]>| -> (Vec<f64>, f64) {
        let base = base.unwrap_or([0.0; BASE_TERMS]);
        let weights: Vec<f64> = cells
            .iter()
            .map(|cell| {
                let under: f64 = powers(cell.across).iter().zip(&base).map(|(p, b)| p * b).sum();
                cell.in_strip - cell.in_band * under
            })
            .collect();
        // What the bands take of the jet itself is given back.
        let kept: f64 =
            cells.iter().zip(&weights).map(|(c, w)| w * jet(c.across * half_width)).sum();
        let back = if kept > 0.3 * all { whole_jet / kept } else { 1.0 };
        let sum = back * weights.iter().zip(&cells).map(|(w, cell)| w * cell.value).sum::<f64>();
        (weights.into_iter().map(|w| back * w).collect(), sum)
    };
    let (weights, sum) = weighted(base_weights(&cells, BASE_TERMS));
    let (_, flatter) = weighted(base_weights(&cells, BASE_TERMS - 2));
    let weights = ApertureWeights::from_cells(
        cells.iter().zip(&weights).map(|(c, w)| (window.x0 + c.column, window.y0 + c.row, *w)),
    );
    StripFlux {
        sum,
        area_px,
        weights,
        blank_fraction: blank_area / (blank_area + area_px).max(f64::MIN_POSITIVE),
        base_curvature: flatter - sum,
    }
}

/// 1, x, x² ... x⁴.
pub(super) fn powers(x: f64) -> [f64; BASE_TERMS] {
    let square = x * x;
    [1.0, x, square, square * x, square * square]
}

/// Weights b such that Σ over the bands of value · Σ_k b_k x^k is the sum of the base under the
/// strip: b = B⁻¹ s with B = Σ_bands x^k x^l and s = Σ_strip x^k. `None` where the bands hold
/// less than a third of the strip's area or do not determine the base.
fn base_weights(cells: &[Share], terms: usize) -> Option<[f64; BASE_TERMS]> {
    let mut matrix = [[0.0; BASE_TERMS]; BASE_TERMS];
    let mut right = [0.0; BASE_TERMS];
    for cell in cells {
        let p = powers(cell.across);
        for k in 0..terms {
            right[k] += cell.in_strip * p[k];
            if cell.in_band > 0.0 {
                for l in 0..terms {
                    matrix[k][l] += cell.in_band * p[k] * p[l];
                }
            }
        }
    }
    if matrix[0][0] < 0.33 * right[0] {
        return None;
    }
    for k in terms..BASE_TERMS {
        matrix[k][k] = matrix[0][0];
    }
    eliminate(matrix, right)
}

/// Solution of M x = r by Gaussian elimination without pivoting, for matrices that are
/// positive definite; `None` where this one is not.
pub(super) fn eliminate<const N: usize>(
    mut matrix: [[f64; N]; N],
    mut right: [f64; N],
) -> Option<[f64; N]> {
    for k in 0..N {
        let pivot = matrix[k];
        if pivot[k].is_nan() || pivot[k] <= 0.0 {
            return None;
        }
        for row in k + 1..N {
            let factor = matrix[row][k] / pivot[k];
            let own = matrix[row][row];
            for (value, above) in matrix[row].iter_mut().zip(&pivot).skip(k) {
                *value -= factor * above;
            }
            if row == k + 1 && matrix[row][row] <= 1e-12 * own {
                return None;
            }
            right[row] -= factor * right[k];
        }
    }
    for k in (0..N).rev() {
        let known: f64 = (k + 1..N).map(|l| matrix[k][l] * right[l]).sum();
        right[k] = (right[k] - known) / matrix[k][k];
    }
    right.iter().all(|b| b.is_finite()).then_some(right)
}
/// Shares of a pixel's area inside a strip and inside the bands beside it.
fn shares(
    frame: &LocalFrame,
    middle: Pixel,
    bearing: &dyn Fn(f64) -> f64,
    (inner, outer): (f64, f64),
    half_width: f64,
    (band_inner, band_outer): (f64, f64),
) -> (f64, f64) {
    let (mut in_strip, mut in_band) = (0u32, 0u32);
    let part = |k: usize| (k as f64 + 0.5) / PARTS as f64 - 0.5;
    for i in 0..PARTS {
        for j in 0..PARTS {
            let offset = frame.offset(Pixel::new(middle.x + part(i), middle.y + part(j)));
            let d = offset.radius();
            if d < inner || d >= outer {
                continue;
            }
            let turn = wrap_difference_deg(offset.position_angle_deg() - bearing(d));
            if turn.abs() >= 90.0 {
                continue;
            }
            let across = d * turn.to_radians().abs();
            if across <= half_width {
                in_strip += 1;
            } else if across >= band_inner && across <= band_outer {
                in_band += 1;
            }
        }
    }
    let share = |n: u32| f64::from(n) / (PARTS * PARTS) as f64;
    (share(in_strip), share(in_band))
}
/// The two strips' fluxes with their covariance matrix (map unit × pixels).
#[derive(Clone, Debug)]
pub struct StripPair {
    /// First and second side.
    pub fluxes: [StripFlux; 2],
    /// Variances of the two and their covariance.
    pub variance: [f64; 2],
    /// Covariance of the two.
    pub covariance: f64,
}
impl StripPair {
    /// The pair with one side's flux in doubt by so much.
    pub fn in_doubt(mut self, side: usize, by: f64) -> Self {
        if let Some(variance) = self.variance.get_mut(side) {
            *variance += by * by;
        }
        self
    }

    /// The pair with its noise multiplied (≥ 1: residuals near the core, structure beyond the
    /// correlation).
    pub fn inflated(mut self, factor: f64) -> Self {
        let square = factor * factor;
        self.variance = self.variance.map(|v| v * square);
        self.covariance *= square;
        self
    }
}

/// Measures both sides in matched strips between the radial `ends`, the whole strip's or
/// those of a piece of it.
pub fn measure_strips(
    window: &Window,
    frame: &LocalFrame,
    around: &PolarCells,
    ridges: [&Ridge; 2],
    placed: &PlacedStrip,
    ends: (f64, f64),
    (noise, correlation): (&Noise, &NoiseCorrelation),
) -> StripPair {
    let fluxes = [0, 1].map(|side| {
        let bearing = |d: f64| placed.bearing(ridges, side, d);
        sum_strip(window, frame, around, &bearing, ends, &placed.strip)
    });
    let variance = [0, 1].map(|k| {
        let weights = fluxes[k].weights.as_ref();
        let noise = weights.map_or(0.0, |w| correlation.aperture_variance(w, noise));
        if noise > 0.0 { noise + (BASE_DOUBT * fluxes[k].base_curvature).powi(2) } else { 0.0 }
    });
    let covariance = match (&fluxes[0].weights, &fluxes[1].weights) {
        (Some(a), Some(b)) => correlation.aperture_covariance(a, b, noise),
        _ => 0.0,
    };
    // A base of the same shape on both sides is wrong by the same share of its curvature.
    let covariance =
        covariance + BASE_DOUBT * BASE_DOUBT * fluxes[0].base_curvature * fluxes[1].base_curvature;
    StripPair { fluxes, variance, covariance }
}
