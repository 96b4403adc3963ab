//! How the noise is correlated from pixel to pixel.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::Noise;
use crate::grid::{Grid, PixelMask};

/// Values are rounded to this fraction of the rms, so that sums are exact and their order
/// does not matter.
const STEPS_PER_RMS: f64 = 512.0;
/// Residuals beyond this many rms are cut to it.
const CUT_SIGMA: f64 = 4.0;
/// The largest number below a half: added, it rounds to the nearest where the rest is cut off.
const BELOW_HALF: f64 = 0.499_999_999_999_999_94;

/// How the correlation is measured.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct CorrelationSettings {
    /// Largest lag in beam majors. Default 2.4, where the correlation of an ideal map is
    /// 3·10⁻⁴ (2 where the beam is wider than 10 px: 4·10⁻³).
    pub reach_beams: f64,
    /// Largest lag where the beam is not known, in pixels. Default 16.
    pub unknown_beam_reach_px: usize,
    /// Width of the window in the map's middle from which it is measured. Default 300 px;
    /// less where lags are many, more where most of the window is masked.
    pub window_px: usize,
}

impl Default for CorrelationSettings {
    fn default() -> Self {
        Self { reach_beams: 2.4, unknown_beam_reach_px: 16, window_px: 300 }
    }
}

/// The elliptical Gaussian that makes white noise look like the map's.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct KernelEllipse {
    /// FWHM along the major axis in pixels.
    pub major_px: f64,
    /// FWHM along the minor axis in pixels.
    pub minor_px: f64,
    /// Direction of the major axis in the array frame, degrees from +x (columns) towards
    /// +y (rows as stored), in [0, 180).
    pub angle_deg: f64,
}

impl KernelEllipse {
    /// The correlation of white noise smoothed with this kernel at a lag (dx, dy): a Gaussian
    /// √2 as wide, 0 where it is below 10⁻⁶.
    fn correlation(self) -> impl Fn(isize, isize) -> f64 {
        let (sin, cos) = libm::sincos(self.angle_deg.to_radians());
        move |dx, dy| self.correlation_at((dx as f64, dy as f64), (sin, cos))
    }

    fn correlation_at(&self, (dx, dy): (f64, f64), (sin, cos): (f64, f64)) -> f64 {
        let u = (dx * cos + dy * sin) / self.major_px;
        let v = (dy * cos - dx * sin) / self.minor_px;
        let c = libm::exp(-2.0 * std::f64::consts::LN_2 * (u * u + v * v));
        if c > 1e-6 { c } else { 0.0 }
    }
}

/// The noise's autocorrelation, 1 at lag 0.
///
/// Measured coefficients of far lags are mostly sampling noise, and a large aperture sums
/// hundreds of them. So a variance uses: the measured values in the core (the lags joined
/// to 0 in which the correlation exceeds twice its error, and their neighbours); outside,
/// single lags beyond 4 errors, and means over a row or column of lags beyond 4 errors
/// (stripes); elsewhere the tail of the Gaussian fitted to the core, or 0 where none fits.
/// The error of a coefficient is √(Σ C² / pairs) (Bartlett 1946). Structure wider than the largest lag is not seen: [`super::aperture_scatter`] is.
#[derive(Clone, Debug, PartialEq)]
pub struct NoiseCorrelation {
    reach: usize,
    measured: Vec<f64>,
    kept: Vec<f64>,
    lags: Vec<(isize, isize, f64)>,
    sum: f64,
    kernel: Option<KernelEllipse>,
    samples: usize,
}

impl NoiseCorrelation {
    /// Noise that is independent from pixel to pixel.
    pub fn white() -> Self {
        Self::from_measured(0, vec![1.0], &[1.0], 1)
    }

    /// The correlation of white noise smoothed with an elliptical Gaussian: a Gaussian √2
    /// times as wide.
    pub fn of_kernel(kernel: KernelEllipse) -> Self {
        let finite = kernel.major_px.is_finite() && kernel.minor_px > 0.0;
        if !finite || !kernel.angle_deg.is_finite() || kernel.major_px > 1e3 {
            return Self::white();
        }
        let reach = (2.7 * kernel.major_px).ceil().max(1.0) as usize;
        let correlation = kernel.correlation();
        let values = lags(reach).map(|(dx, dy)| correlation(dx, dy)).collect();
        let mut out = Self::from_measured(reach, values, &[], usize::MAX);
        out.kernel = Some(kernel);
        out
    }

    /// `pairs` per lag (empty: exact values, everything is kept).
    fn from_measured(reach: usize, measured: Vec<f64>, pairs: &[f64], samples: usize) -> Self {
        let kernel = fit_kernel(reach, &measured);
        let kept = if pairs.is_empty() {
            measured.clone()
        } else {
            significant(reach, &measured, pairs, kernel)
        };
        let sum = symmetric_sum(&kept);
        let lags = lags(reach)
            .zip(&kept)
            .filter(|((dx, dy), c)| (*dy, *dx) > (0, 0) && c.abs() > 0.0)
            .map(|((dx, dy), c)| (dx, dy, *c))
            .collect();
        Self { reach, measured, kept, lags, sum, kernel, samples }
    }

    /// Largest lag measured, in pixels along x or y.
    pub fn reach_px(&self) -> usize {
        self.reach
    }

    /// Number of pixels it was measured from.
    pub fn samples(&self) -> usize {
        self.samples
    }

    /// The measured coefficient; 0 beyond the largest lag.
    pub fn measured(&self, dx: isize, dy: isize) -> f64 {
        lag_index(self.reach, dx, dy).and_then(|i| self.measured.get(i).copied()).unwrap_or(0.0)
    }

    /// The coefficient used for variances (see the type's documentation).
    pub fn at(&self, dx: isize, dy: isize) -> f64 {
        lag_index(self.reach, dx, dy).and_then(|i| self.kept.get(i).copied()).unwrap_or(0.0)
    }

    /// Sum of the coefficients over all lags used: pixels per independent sample of a mean
    /// over a large area. At least a tenth.
    pub fn sum(&self) -> f64 {
        self.sum.max(0.1)
    }

    /// The non-zero coefficients of one half of the plane of lags, (dx, dy, C), without lag 0.
    pub(super) fn half_plane(&self) -> &[(isize, isize, f64)] {
        &self.lags
    }

    /// FWHM of the Gaussian kernel that makes white noise look like this one (that of the
    /// autocorrelation over √2), geometric mean of both axes, in pixels. Where no Gaussian
    /// can be fitted: from the half level of the coefficients interpolated along x and y
    /// (0.71 for noise that is white on the pixel scale).
    pub fn correlation_fwhm_px(&self) -> f64 {
        if let Some(kernel) = self.kernel {
            return (kernel.major_px * kernel.minor_px).sqrt();
        }
        let crossing = |along: &dyn Fn(isize) -> f64| {
            let mut previous = 1.0;
            for d in 1..=self.reach as isize {
                let value = along(d);
                if value <= 0.5 {
                    return (d - 1) as f64 + (previous - 0.5) / (previous - value);
                }
                previous = value;
            }
            if self.reach == 0 { 0.5 } else { self.reach as f64 }
        };
        let (x, y) = (crossing(&|d| self.measured(d, 0)), crossing(&|d| self.measured(0, d)));
        2.0 * (x * y).sqrt() * std::f64::consts::FRAC_1_SQRT_2
    }

    /// The elliptical Gaussian fitted to the logarithm of the coefficients at small lags
    /// (above 0.3; above 0.1 where those are few), divided by √2: an estimate of the beam.
    /// `None` where the noise is white on the pixel scale.
    pub fn kernel_ellipse(&self) -> Option<KernelEllipse> {
        self.kernel
    }
}

/// Measures the correlation from (value − background)/rms outside `mask`, values beyond
/// 4 rms cut to 4, in a window about the map's middle. The bias from the mean taken off is
/// put back. White noise is returned for maps of fewer than 200 usable pixels.
pub fn measure_correlation(
    grid: &dyn Grid,
    noise: &Noise,
    mask: &PixelMask,
    beam_major_px: Option<f64>,
    settings: &CorrelationSettings,
) -> NoiseCorrelation {
    let (columns, rows) = (grid.columns(), grid.rows());
    let reach = match beam_major_px.filter(|b| b.is_finite() && *b > 0.0) {
        Some(beam) if beam <= 10.0 => {
            (settings.reach_beams * beam).ceil().clamp(8.0, 24.0) as usize
        }
        Some(beam) => (2.0 * beam).ceil().clamp(24.0, 60.0) as usize,
        None => settings.unknown_beam_reach_px.clamp(1, 60),
    };
    let reach = reach.min(columns.min(rows).saturating_sub(1) / 3);
    let count = (2 * reach + 1) * (2 * reach + 1) / 2 + 1;
    let mut side = ((5e7 / count as f64).sqrt() as usize).clamp(160, settings.window_px.max(160));
    loop {
        let window = Window::load(grid, noise, mask, side, reach);
        let whole = side >= columns && side >= rows;
        if window.usable >= 20_000.min(side * side / 3) || whole || side > 4000 {
            if window.usable < 200 || reach == 0 {
                return NoiseCorrelation::white();
            }
            return window.correlate(reach);
        }
        side *= 2;
    }
}

/// Rounded residuals of a window about the map's middle; 0 where not usable.
struct Window {
    columns: usize,
    rows: usize,
    /// Zeros lie before the first row and after each: as many as the largest lag.
    values: Vec<i16>,
    gap: usize,
    /// Columns rounded up to a multiple of 16, and the distance from row to row.
    padded: usize,
    stride: usize,
    /// Which pixels are usable, in rows where not all are.
    words: usize,
    bits: Vec<u64>,
    usable: usize,
    /// Of each row the number of usable pixels left of each column and of all; empty where
    /// every pixel is usable.
    counts: Vec<Vec<u32>>,
}

impl Window {
    fn load(grid: &dyn Grid, noise: &Noise, mask: &PixelMask, side: usize, reach: usize) -> Self {
        let centred = |size: usize| {
            if size <= side {
                (0, size)
            } else {
                ((size - side).div_ceil(2), size - 2 * (size - side).div_ceil(2))
            }
        };
        let ((left, columns), (top, rows)) = (centred(grid.columns()), centred(grid.rows()));
        let words = columns.div_ceil(64) + 1;
        let padded = columns.next_multiple_of(16);
        let gap = reach;
        let stride = padded + gap;
        let mut values = vec![0i16; gap + stride * rows];
        let mut bits = vec![0u64; words * rows];
        let mut usable = 0;
        let mut counts = Vec::with_capacity(rows);
        let (mut row, mut background, mut rms) = (Vec::new(), Vec::new(), Vec::new());
        for y in 0..rows {
            grid.row_into(top + y, &mut row);
            noise.row_into(top + y, &mut background, &mut rms);
            let part = left..left + columns;
            let (Some(row), Some(background), Some(rms)) =
                (row.get(part.clone()), background.get(part.clone()), rms.get(part.clone()))
            else {
                counts.push(vec![0; columns + 1]);
                continue;
            };
            let start = gap + y * stride;
            let rounded = &mut values[start..start + columns];
            let mut blanks = 0;
            for (out, (value, (level, rms))) in
                rounded.iter_mut().zip(row.iter().zip(background.iter().zip(rms)))
            {
                let signal = (value - level) / rms;
                blanks += usize::from(signal.is_nan());
                let cut = signal.clamp(-CUT_SIGMA, CUT_SIGMA) * STEPS_PER_RMS;
                // To the nearest, halves away from zero: NaN becomes 0.
                *out = (cut + BELOW_HALF.copysign(cut)) as i32 as i16;
            }
            let masked = mask.row(top + y).get(part).unwrap_or(&[]);
            if blanks == 0 && !masked.contains(&true) {
                usable += columns;
                counts.push(Vec::new());
                continue;
            }
            let mut left_of = vec![0u32];
            let mut count = 0;
            for (x, out) in rounded.iter_mut().enumerate() {
                let blank = ((row[x] - background[x]) / rms[x]).is_nan();
                if blank || masked.get(x).copied().unwrap_or(false) {
                    *out = 0;
                } else {
                    bits[y * words + x / 64] |= 1 << (x % 64);
                    count += 1;
                }
                left_of.push(count);
            }
            usable += count as usize;
            counts.push(left_of);
        }
        Self { columns, rows, values, gap, padded, stride, words, bits, usable, counts }
    }

    /// Number of pairs of usable pixels at a lag with dy ≥ 0.
    fn pairs(&self, dx: isize, dy: usize) -> f64 {
        let shift = dx.unsigned_abs();
        let width = self.columns.saturating_sub(shift);
        // Columns of the first row whose partner lies in the window, and of their partners.
        let (a0, b0) = if dx >= 0 { (0, shift) } else { (shift, 0) };
        let within =
            |counts: &[u32], start: usize| u64::from(counts[start + width] - counts[start]);
        let mut pairs = 0u64;
        for y in 0..self.rows.saturating_sub(dy) {
            pairs += match (&self.counts[y][..], &self.counts[y + dy][..]) {
                ([], []) => width as u64,
                (first, []) => within(first, a0),
                ([], second) => within(second, b0),
                _ => {
                    let (low, high) =
                        (&self.bits[y * self.words..], &self.bits[(y + dy) * self.words..]);
                    // The row whose pixels lie further right is shifted down onto the other.
                    let (still, moved) = if dx >= 0 { (low, high) } else { (high, low) };
                    common_bits(&still[..self.words], &moved[..self.words], shift)
                }
            };
        }
        pairs as f64
    }

    /// Sum of products at a lag with dy ≥ 0.
    fn pair_sum(&self, dx: isize, dy: usize) -> i64 {
        let row = |y: usize| self.gap + y * self.stride;
        (0..self.rows.saturating_sub(dy))
            .map(|y| {
                // Beyond the window a row holds zeros: its whole length can be summed.
                let (a, b) = (row(y), row(y + dy).saturating_add_signed(dx));
                dot(&self.values[a..a + self.padded], &self.values[b..b + self.padded])
            })
            .sum()
    }

    fn correlate(&self, reach: usize) -> NoiseCorrelation {
        let mut values = vec![0.0; (2 * reach + 1) * (2 * reach + 1)];
        let mut pairs = vec![0.0; values.len()];
        let power = self.pair_sum(0, 0) as f64 / self.pairs(0, 0).max(1.0);
        if power.is_nan() || power <= 0.0 {
            return NoiseCorrelation::white();
        }
        for (dx, dy) in lags(reach).filter(|(dx, dy)| (*dy, *dx) >= (0, 0)) {
            let row = dy.unsigned_abs();
            let count = self.pairs(dx, row);
            let c = if count >= 30.0 { self.pair_sum(dx, row) as f64 / count / power } else { 0.0 };
            for (dx, dy) in [(dx, dy), (-dx, -dy)] {
                if let Some(i) = lag_index(reach, dx, dy) {
                    values[i] = c;
                    pairs[i] = count;
                }
            }
        }
        // Taking off the mean of N pixels lowers every coefficient by ΣC/N.
        let kept = significant(reach, &values, &pairs, fit_kernel(reach, &values));
        let bias = (symmetric_sum(&kept) / self.usable as f64).clamp(0.0, 0.1);
        for value in &mut values {
            *value = (*value + bias) / (1.0 + bias);
        }
        NoiseCorrelation::from_measured(reach, values, &pairs, self.usable)
    }
}

/// Exact sum of products of two slices of equal length, a multiple of 16.
fn dot(a: &[i16], b: &[i16]) -> i64 {
    let ((a32, a_rest), (b32, b_rest)) = (a.as_chunks::<32>(), b.as_chunks::<32>());
    let ((a16, _), (b16, _)) = (a_rest.as_chunks::<16>(), b_rest.as_chunks::<16>());
    let long = a32.iter().zip(b32).map(|(a, b)| products(a, b));
    let short = a16.iter().zip(b16).map(|(a, b)| products(a, b));
    long.chain(short).map(i64::from).sum()
}

/// Sum of products, which fits 32 bits: 32 (4 · 512)² < 2³¹. Written out at this length it
/// becomes eight products an instruction.
fn products<const N: usize>(a: &[i16; N], b: &[i16; N]) -> i32 {
    a.iter().zip(b).map(|(a, b)| i32::from(*a) * i32::from(*b)).sum()
}

/// Bits set in both `a` and `b` moved down by `shift`.
fn common_bits(a: &[u64], b: &[u64], shift: usize) -> u64 {
    let (skip, bits) = (shift / 64, shift % 64);
    let b = b.get(skip..).unwrap_or(&[]);
    let mut count = 0;
    for (i, word) in b.iter().enumerate() {
        let next = b.get(i + 1).copied().unwrap_or(0);
        let moved = if bits == 0 { *word } else { word >> bits | next << (64 - bits) };
        count += u64::from((a[i] & moved).count_ones());
    }
    count
}

/// All lags of the square, row by row.
fn lags(reach: usize) -> impl Iterator<Item = (isize, isize)> {
    let reach = reach as isize;
    (-reach..=reach).flat_map(move |dy| (-reach..=reach).map(move |dx| (dx, dy)))
}

fn lag_index(reach: usize, dx: isize, dy: isize) -> Option<usize> {
    let inside = dx.unsigned_abs() <= reach && dy.unsigned_abs() <= reach;
    let at = |d: isize| (d + reach as isize) as usize;
    inside.then(|| at(dy) * (2 * reach + 1) + at(dx))
}

/// Sum in an order that a mirrored or transposed square shares: sorted by size.
fn symmetric_sum(values: &[f64]) -> f64 {
    let mut sorted = values.to_vec();
    sorted.sort_unstable_by(f64::total_cmp);
    sorted.iter().sum()
}

/// The lags joined to 0 (4 neighbours) in which the coefficient exceeds a threshold.
fn joined(reach: usize, values: &[f64], threshold: impl Fn(usize) -> f64) -> Vec<bool> {
    let mut inside = vec![false; values.len()];
    let mut open = vec![(0isize, 0isize)];
    while let Some((dx, dy)) = open.pop() {
        let Some(i) = lag_index(reach, dx, dy) else {
            continue;
        };
        if inside[i] || ((dx, dy) != (0, 0) && values[i] <= threshold(i)) {
            continue;
        }
        inside[i] = true;
        open.extend([(dx + 1, dy), (dx - 1, dy), (dx, dy + 1), (dx, dy - 1)]);
    }
    inside
}

/// The coefficients worth summing.
fn significant(
    reach: usize,
    values: &[f64],
    pairs: &[f64],
    kernel: Option<KernelEllipse>,
) -> Vec<f64> {
    let square = |inside: &[bool]| -> f64 {
        let kept: Vec<f64> =
            values.iter().zip(inside).filter(|(_, i)| **i).map(|(v, _)| v * v).collect();
        symmetric_sum(&kept).max(1.0)
    };
    let power = square(&joined(reach, values, |_| 0.1));
    let error = |i: usize| (power / pairs.get(i).copied().unwrap_or(0.0).max(1.0)).sqrt();
    let core = joined(reach, values, |i| 2.0 * error(i));
    let widened: Vec<bool> = lags(reach)
        .map(|(dx, dy)| {
            [(0, 0), (1, 0), (-1, 0), (0, 1), (0, -1)]
                .iter()
                .any(|(a, b)| lag_index(reach, dx + a, dy + b).is_some_and(|i| core[i]))
        })
        .collect();
    let mut kept: Vec<f64> = values
        .iter()
        .enumerate()
        .map(|(i, v)| if widened[i] || v.abs() > 4.0 * error(i) { *v } else { 0.0 })
        .collect();
    // Stripes: means over the far lags of a line. Neighbouring coefficients are correlated
    // like the square root of the correlation itself (exact for a Gaussian).
    let half = reach as isize;
    let line = |along_x: bool, fixed: isize| -> f64 {
        let at = |d: isize| {
            let (dx, dy) = if along_x { (d, fixed) } else { (fixed, d) };
            lag_index(reach, dx, dy)
        };
        let near = |d: isize| {
            let (dx, dy) = if along_x { (d, 0) } else { (0, d) };
            lag_index(reach, dx, dy)
                .map_or(0.0, |i| if core[i] { values[i].max(0.0).sqrt() } else { 0.0 })
        };
        let width: f64 = 1.0 + 2.0 * (1..=half).map(near).sum::<f64>();
        let far: Vec<usize> = (-half..=half).filter_map(at).filter(|i| !widened[*i]).collect();
        if far.len() < 8 {
            return 0.0;
        }
        let n = far.len() as f64;
        let mean = symmetric_sum(&far.iter().map(|i| values[*i]).collect::<Vec<_>>()) / n;
        let worst = far.iter().map(|i| error(*i)).fold(0.0, f64::max);
        if mean.abs() > 4.0 * worst * (width / n).sqrt().min(1.0) { mean } else { 0.0 }
    };
    let row_means: Vec<f64> = (-half..=half).map(|dy| line(true, dy)).collect();
    let column_means: Vec<f64> = (-half..=half).map(|dx| line(false, dx)).collect();
    let tail = kernel.map(KernelEllipse::correlation);
    for (i, (dx, dy)) in lags(reach).enumerate() {
        if !widened[i] && kept[i].abs() <= 0.0 {
            let (r, c) = (row_means[(dy + half) as usize], column_means[(dx + half) as usize]);
            kept[i] = if r.abs() >= c.abs() { r } else { c };
            if kept[i].abs() <= 0.0 {
                kept[i] = tail.as_ref().map_or(0.0, |tail| tail(dx, dy));
            }
        }
    }
    kept
}

/// Weighted fit of −ln C = a dx² + 2 b dx dy + c dy².
fn fit_kernel(reach: usize, values: &[f64]) -> Option<KernelEllipse> {
    let close = |dx, dy| lag_index(reach, dx, dy).and_then(|i| values.get(i).copied());
    if close(1, 0)? < 0.1 || close(0, 1)? < 0.1 {
        return None;
    }
    let pick = |level: f64| -> Vec<(f64, f64, f64)> {
        let inside = joined(reach, values, |_| level);
        lags(reach)
            .enumerate()
            .filter(|(i, (dx, dy))| inside[*i] && (*dy, *dx) > (0, 0))
            .map(|(i, (dx, dy))| (dx as f64, dy as f64, values[i].min(1.0)))
            .collect()
    };
    let mut near = pick(0.3);
    if near.len() < 4 {
        near = pick(0.1);
    }
    if near.len() < 4 {
        return None;
    }
    // Normal equations in (dx², 2 dx dy, dy²); the weight C² makes errors of C count alike.
    let mut m = [[0.0; 3]; 3];
    let mut r = [0.0; 3];
    for (dx, dy, c) in near {
        let basis = [dx * dx, 2.0 * dx * dy, dy * dy];
        let (weight, z) = (c * c, -libm::log(c));
        for i in 0..3 {
            r[i] += weight * basis[i] * z;
            for j in 0..3 {
                m[i][j] += weight * basis[i] * basis[j];
            }
        }
    }
    let determinant = |m: &[[f64; 3]; 3]| {
        m[0][0] * (m[1][1] * m[2][2] - m[1][2] * m[2][1])
            - m[0][1] * (m[1][0] * m[2][2] - m[1][2] * m[2][0])
            + m[0][2] * (m[1][0] * m[2][1] - m[1][1] * m[2][0])
    };
    let base = determinant(&m);
    if base.is_nan() || base.abs() <= 1e-9 * m[0][0] * m[1][1] * m[2][2] {
        return None;
    }
    let solve = |column: usize| {
        let mut replaced = m;
        for (line, value) in replaced.iter_mut().zip(r) {
            line[column] = value;
        }
        determinant(&replaced) / base
    };
    let (a, b, c) = (solve(0), solve(1), solve(2));
    let (middle, half) = (0.5 * (a + c), (0.5 * (a - c)).hypot(b));
    // Half level at λ d² = ln 2; FWHM is twice that, the kernel √2 narrower.
    let fwhm = |lambda: f64| {
        2.0 * (std::f64::consts::LN_2 / lambda).sqrt() * std::f64::consts::FRAC_1_SQRT_2
    };
    let (major_px, minor_px) = (fwhm(middle - half), fwhm(middle + half));
    if middle - half <= 0.0 || !major_px.is_finite() || !minor_px.is_finite() {
        return None;
    }
    let angle = if half > 0.0 { 0.5 * libm::atan2(-2.0 * b, c - a).to_degrees() } else { 0.0 };
    Some(KernelEllipse { major_px, minor_px, angle_deg: crate::units::wrap_undirected_deg(angle) })
}
