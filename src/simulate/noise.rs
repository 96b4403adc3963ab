//! Noise and the artefacts of real maps, in pixels and array angles.
//!
//! An array angle runs from +x (columns) towards +y (rows as stored), in degrees. Blank pixels
//! are NaN, and only the functions that blank make any. Every random number of made maps comes
//! from [`Draws`], whose seed comes from [`stream_seed`].

use std::f64::consts::{LN_2, PI};

use ndarray::{Array1, Array2, Axis, Slice};
use rand::{Rng, SeedableRng};
use rand_pcg::Pcg64Mcg;

use super::scene::GaussianShape;
use crate::constants::{FWHM_PER_SIGMA, GAUSSIAN_AREA};

/// Where a smoothing kernel is cut off, in standard deviations.
const KERNEL_REACH_SIGMA: f64 = 4.7;
/// Least FWHM a kernel is worked with, in pixels: narrower ones are made on finer pixels.
const FINE_FWHM_PX: f64 = 3.0;
/// FWHM in coarse pixels of kernels so wide that they are made on coarser pixels.
const COARSE_FWHM_PX: f64 = 10.0;
/// FWHM of the Gaussian that brings coarse pixels back to the map's, in coarse pixels.
const RETURN_FWHM_PX: f64 = 2.5;
/// Shortest axis of a kernel, in pixels: neighbours are then correlated by 0.004.
const LEAST_FWHM_PX: f64 = 0.5;
/// Longest axis of a kernel, in the pixels it is worked with.
const MOST_FWHM_PX: f64 = 512.0;
/// 4 ln 2: a Gaussian is exp(−4 ln 2 (distance/FWHM)²).
const FOUR_LN2: f64 = 4.0 * LN_2;
/// Gaussians are left out beyond this many FWHM, where they are below 1e-10.
const GAUSSIAN_REACH_FWHM: f64 = 3.0;
/// Number of sinusoids in a band of stripes.
const STRIPE_WAVES: usize = 5;
/// Bandwidth of stripes over their wave number.
const STRIPE_BANDWIDTH: f64 = 0.1;
/// How far outside the map neighbours may lie, in pixels.
const NEIGHBOUR_MARGIN_PX: f64 = 10.0;
/// Most neighbours expected on one map; a larger mean is taken as this one.
const MOST_NEIGHBOURS: f64 = 1e7;

/// The seed of one stream of random numbers: FNV-1a (Fowler, Noll & Vo 1991) over the bytes
/// of the name, the seed and the index (both little-endian), finished with the mixer
/// SplitMix64 (Steele, Lea & Flood 2014, OOPSLA, 453). Streams of other names, seeds or
/// indices have nothing in common.
pub fn stream_seed(seed: u64, index: u64, name: &str) -> u64 {
    let numbers = seed.to_le_bytes().into_iter().chain(index.to_le_bytes());
    split_mix(fnv1a(name.bytes().chain(numbers)))
}

fn fnv1a(bytes: impl Iterator<Item = u8>) -> u64 {
    const OFFSET_BASIS: u64 = 0xcbf2_9ce4_8422_2325;
    const PRIME: u64 = 0x0000_0100_0000_01b3;
    bytes.fold(OFFSET_BASIS, |hash, byte| (hash ^ u64::from(byte)).wrapping_mul(PRIME))
}

/// The first output of SplitMix64 from this state.
fn split_mix(state: u64) -> u64 {
    let z = state.wrapping_add(0x9e37_79b9_7f4a_7c15);
    let z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    let z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    z ^ (z >> 31)
}

/// Random numbers out of one stream.
#[derive(Clone, Debug)]
pub struct Draws {
    generator: Pcg64Mcg,
    spare: Option<f64>,
}

impl Draws {
    /// The stream of this seed.
    pub fn new(seed: u64) -> Self {
        Self { generator: Pcg64Mcg::seed_from_u64(seed), spare: None }
    }

    /// 53 random bits as a whole number.
    fn bits53(&mut self) -> f64 {
        (self.generator.next_u64() >> 11) as f64
    }

    /// Uniform in [0, 1), in steps of 2⁻⁵³.
    pub fn uniform(&mut self) -> f64 {
        const STEP: f64 = 1.0 / (1u64 << 53) as f64;
        self.bits53() * STEP
    }

    /// Uniform in (0, 1], in steps of 2⁻⁵³: its logarithm is finite.
    pub fn open_uniform(&mut self) -> f64 {
        const STEP: f64 = 1.0 / (1u64 << 53) as f64;
        (self.bits53() + 1.0) * STEP
    }

    /// Gaussian with mean 0 and standard deviation 1 (Box & Muller 1958).
    pub fn normal(&mut self) -> f64 {
        if let Some(spare) = self.spare.take() {
            return spare;
        }
        let radius = (-2.0 * libm::log(self.open_uniform())).sqrt();
        let (sin, cos) = libm::sincos(2.0 * PI * self.uniform());
        self.spare = Some(radius * sin);
        radius * cos
    }

    /// Number of events of a Poisson process with this mean: exponential gaps that fit into it.
    fn poisson(&mut self, mean: f64) -> usize {
        let mut events = 0;
        let mut at = -libm::log(self.open_uniform());
        while at < mean {
            events += 1;
            at -= libm::log(self.open_uniform());
        }
        events
    }
}

/// The noise of a map.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum NoiseKind {
    /// Independent from pixel to pixel.
    White,
    /// White noise smoothed with this kernel (for an ideal map: the beam).
    Smoothed(GaussianShape),
}

/// Noise of this kind with an expected rms of exactly 1 and mean 0, the same at the edges as in
/// the middle. Smoothed noise has the autocorrelation exp(−4 ln 2 q/2), q being the square of
/// the lag in kernel FWHM: √2 times as wide as the kernel.
///
/// A kernel with a major axis of less than half a pixel is a point and gives white noise, as does
/// one with an axis or angle that is not finite; a minor axis below that is taken as half a pixel. A kernel longer than 512 px (of those it is
/// worked with: coarser than the map's where the minor axis exceeds 20 px) is cut to that.
pub fn unit_noise(columns: usize, rows: usize, kind: NoiseKind, seed: u64) -> Array2<f64> {
    let mut draws = Draws::new(seed);
    let NoiseKind::Smoothed(shape) = kind else { return white(&mut draws, columns, rows) };
    let (a, b) = (shape.major_px.abs(), shape.minor_px.abs());
    let possible = columns > 0 && rows > 0 && finite(&[a, b, shape.angle_deg]);
    if !possible || a.max(b) < LEAST_FWHM_PX {
        return white(&mut draws, columns, rows);
    }
    let minor = a.min(b).clamp(LEAST_FWHM_PX, 1e9);
    let scaled = |factor: f64| GaussianShape {
        major_px: (a.max(LEAST_FWHM_PX) * factor).min(MOST_FWHM_PX),
        minor_px: (b.max(LEAST_FWHM_PX) * factor).min(MOST_FWHM_PX),
        angle_deg: shape.angle_deg,
    };
    if minor < FINE_FWHM_PX {
        let split = (FINE_FWHM_PX / minor).ceil();
        let fine = |pixels: usize| (pixels - 1) * split as usize + 1;
        let noise = smoothed(&mut draws, fine(columns), fine(rows), scaled(split).moments());
        return noise.slice_each_axis(|_| Slice::new(0, None, split as isize)).to_owned();
    }
    let joined = (minor / COARSE_FWHM_PX).floor();
    if joined < 2.0 {
        return smoothed(&mut draws, columns, rows, scaled(1.0).moments());
    }
    smoothed_on_coarse_pixels(&mut draws, columns, rows, scaled(1.0 / joined).moments(), joined)
}

fn white(draws: &mut Draws, columns: usize, rows: usize) -> Array2<f64> {
    Array2::from_shape_simple_fn((rows, columns), || draws.normal())
}

/// White noise through a kernel given by its second moments xx, xy, yy (FWHM² in pixels²).
fn smoothed(draws: &mut Draws, columns: usize, rows: usize, moments: [f64; 3]) -> Array2<f64> {
    let lines = lines_of_kernel(moments);
    let margin = |step: fn(&Line) -> isize| -> usize {
        lines.iter().map(|line| 2 * line.reach() * step(line).unsigned_abs()).sum()
    };
    let (wider, higher) = (margin(|line| line.step.0), margin(|line| line.step.1));
    let source = white(draws, columns + wider, rows + higher);
    lines.iter().fold(source, |map, line| line.smooth(&map))
}

/// Noise whose kernel spans many pixels, made on coarse pixels of `joined` map pixels and brought
/// back with a narrow Gaussian. That Gaussian's own moments are taken off the kernel's, so that
/// the whole is the kernel asked for; what the coarse pixels leave behind is below 1e-4.
fn smoothed_on_coarse_pixels(
    draws: &mut Draws,
    columns: usize,
    rows: usize,
    [xx, xy, yy]: [f64; 3],
    joined: f64,
) -> Array2<f64> {
    let back = RETURN_FWHM_PX * RETURN_FWHM_PX;
    let reach = (KERNEL_REACH_SIGMA * RETURN_FWHM_PX / FWHM_PER_SIGMA).ceil();
    let coarse = |pixels: usize| ((pixels - 1) as f64 / joined) as usize + 2 + 2 * reach as usize;
    let moments = [xx - back, xy, yy - back];
    let noise = smoothed(draws, coarse(columns), coarse(rows), moments);
    // The first map pixel lies on the coarse pixel `reach`.
    let weights = |pixel: usize| {
        let at = pixel as f64 / joined + reach;
        let first = (at.floor() - reach) as usize;
        let taps = 0..=2 * reach as usize + 1;
        let weight = move |tap: usize| {
            let distance = at - (first + tap) as f64;
            libm::exp(-FOUR_LN2 * distance * distance / back)
        };
        (first, taps.map(weight).collect::<Vec<f64>>())
    };
    let mut across = Array2::zeros((noise.nrows(), columns));
    for (x, mut to) in across.columns_mut().into_iter().enumerate() {
        let (first, weights) = weights(x);
        for (from, weight) in noise.columns().into_iter().skip(first).zip(weights) {
            to.scaled_add(weight, &from);
        }
    }
    // The noise has rms 1 and moments m; through a Gaussian of area A and moments b its variance
    // becomes A² √(|m|/|m + b|).
    let determinant = |[xx, xy, yy]: [f64; 3]| xx * yy - xy * xy;
    let lost = (determinant(moments) / determinant([xx, xy, yy])).sqrt().sqrt();
    let scale = 1.0 / (GAUSSIAN_AREA * back * lost);
    let mut out = Array2::zeros((rows, columns));
    for (y, mut to) in out.rows_mut().into_iter().enumerate() {
        let (first, weights) = weights(y);
        for (from, weight) in across.rows().into_iter().skip(first).zip(weights) {
            to.scaled_add(weight * scale, &from);
        }
    }
    out
}

/// A symmetric one-dimensional kernel along a direction of the pixel lattice.
#[derive(Clone, Debug, PartialEq)]
struct Line {
    /// Columns and rows from one weight to the next.
    step: (isize, isize),
    /// Weights, the middle one on the pixel itself.
    weights: Vec<f64>,
}

impl Line {
    /// A Gaussian with this second moment (FWHM² in steps²); its squares sum to 1.
    ///
    /// A sampled Gaussian of less than two steps has another second moment than the Gaussian
    /// itself. The one with the right moment is found there, by bisection in the ratio of the
    /// first weight to the middle one.
    fn new(step: (isize, isize), moment: f64) -> Self {
        let reach = (KERNEL_REACH_SIGMA * moment.sqrt() / FWHM_PER_SIGMA).ceil().max(1.0) as usize;
        let offsets = || (0..=2 * reach).map(|i| i as f64 - reach as f64);
        let gaussian =
            |moment: f64| offsets().map(|d| libm::exp(-FOUR_LN2 * d * d / moment)).collect();
        let weights: Vec<f64> = if moment < 4.0 {
            let variance = moment / (FWHM_PER_SIGMA * FWHM_PER_SIGMA);
            let weights = |ratio: f64| -> Vec<f64> { gaussian(-FOUR_LN2 / libm::log(ratio)) };
            let (mut low, mut high) = (0.0, 0.7);
            for _ in 0..60 {
                let middle = 0.5 * (low + high);
                let kernel = weights(middle);
                let second: f64 = offsets().zip(&kernel).map(|(d, w)| d * d * w).sum();
                if second < variance * kernel.iter().sum::<f64>() {
                    low = middle;
                } else {
                    high = middle;
                }
            }
            weights(high)
        } else {
            gaussian(moment)
        };
        let norm = weights.iter().map(|w| w * w).sum::<f64>().sqrt();
        Self { step, weights: weights.iter().map(|w| w / norm).collect() }
    }

    fn reach(&self) -> usize {
        self.weights.len() / 2
    }

    /// Σ w(i) w(i + lag).
    fn autocorrelation(&self, lag: usize) -> f64 {
        self.weights.iter().zip(self.weights.iter().skip(lag)).map(|(a, b)| a * b).sum()
    }

    /// The part of the smoothed map that every weight reaches.
    fn smooth(&self, map: &Array2<f64>) -> Array2<f64> {
        let reach = self.reach() as isize;
        let (step_x, step_y) = self.step;
        let less = |step: isize| 2 * self.reach() * step.unsigned_abs();
        let columns = map.ncols().saturating_sub(less(step_x));
        let rows = map.nrows().saturating_sub(less(step_y));
        let mut out = Array2::zeros((rows, columns));
        for (y, mut to) in out.rows_mut().into_iter().enumerate() {
            for (i, weight) in self.weights.iter().enumerate() {
                let d = i as isize - reach;
                let x0 = (reach * step_x.abs() + d * step_x) as usize;
                let y0 = (reach * step_y.abs() + d * step_y) as usize;
                let from = map.row(y + y0).slice_axis_move(Axis(0), Slice::from(x0..x0 + columns));
                to.scaled_add(*weight, &from);
            }
        }
        out
    }
}

/// A Gaussian kernel as the convolution of at most three one-dimensional ones along lattice
/// directions, scaled so that the squares of the whole kernel sum to 1: unit white noise keeps
/// its rms.
///
/// Selling's reduction (1874, Journal für die reine und angewandte Mathematik 77, 143; Conway &
/// Sloane 1992) writes a positive form D as Σ λ v vᵀ over three lattice vectors with λ ≥ 0: for
/// an obtuse superbase b of D, λ = −bᵢ·D bⱼ and v is the third bₖ turned by 90°. The second
/// moments of one-dimensional kernels add in the same way.
fn lines_of_kernel([xx, xy, yy]: [f64; 3]) -> Vec<Line> {
    let product = |a: (isize, isize), b: (isize, isize)| {
        let (ax, ay, bx, by) = (a.0 as f64, a.1 as f64, b.0 as f64, b.1 as f64);
        xx * ax * bx + xy * (ax * by + ay * bx) + yy * ay * by
    };
    let mut base = [(1, 0), (0, -1), (-1, 1)];
    // Pairs and what is left, such that a kernel along the axes gives columns, then rows.
    let pairs = [(0, 2, 1), (1, 2, 0), (0, 1, 2)];
    let tolerance = 1e-12 * (xx + yy);
    // One step shortens the base; kernels are at most 512/3 times as long as wide.
    for _ in 0..1000 {
        let acute = pairs.iter().find(|(i, j, _)| product(base[*i], base[*j]) > tolerance);
        let Some(&(i, j, k)) = acute else { break };
        let (a, b) = (base[i], base[j]);
        base[k] = (a.0 - b.0, a.1 - b.1);
        base[i] = (-a.0, -a.1);
    }
    let mut lines: Vec<Line> = pairs
        .iter()
        .map(|&(i, j, k)| ((-base[k].1, base[k].0), -product(base[i], base[j])))
        .filter(|(_, moment)| *moment > 1e-6)
        .map(|(step, moment)| Line::new(step, moment))
        .collect();
    // The three directions sum to zero, so each product of weights of three lines that meets
    // itself in the square has the same lag on all of them. Two lines are independent.
    if let [a, b, c] = &mut lines[..] {
        let lags = a.weights.len();
        let product =
            |lag| a.autocorrelation(lag) * b.autocorrelation(lag) * c.autocorrelation(lag);
        let squares = product(0) + 2.0 * (1..lags).map(product).sum::<f64>();
        let norm = squares.sqrt();
        c.weights.iter_mut().for_each(|w| *w /= norm);
    }
    lines
}

/// A pattern from a function of column and row.
fn pattern(columns: usize, rows: usize, value: impl Fn(f64, f64) -> f64) -> Array2<f64> {
    Array2::from_shape_fn((rows, columns), |(y, x)| value(x as f64, y as f64))
}

/// Cosine and sine of an angle in degrees.
fn direction(angle_deg: f64) -> (f64, f64) {
    let (sin, cos) = libm::sincos(angle_deg * (PI / 180.0));
    (cos, sin)
}

/// Whether all are finite; a pattern of anything else is zero everywhere.
fn finite(numbers: &[f64]) -> bool {
    numbers.iter().all(|number| number.is_finite())
}

/// How the rms changes over a map.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RmsField {
    /// Ratio of the rms where the map ends along the direction to that where it begins.
    pub gradient: f64,
    /// The direction.
    pub gradient_angle_deg: f64,
    /// Rms at the corners over that at the middle.
    pub edge_rise: f64,
}

/// Factor on the rms: 1 at the array's middle, exponential along the gradient, and rising
/// outwards as exp(r²) does. Mosaics and maps near a bright source have noise that grows to one
/// side; dividing by a Gaussian primary beam makes it rise towards all edges.
///
/// Along the gradient the map ends at its outermost pixels in that direction (corners, unless it
/// runs along an axis). A ratio that is not positive and finite counts as 1.
pub fn rms_field(columns: usize, rows: usize, field: &RmsField) -> Array2<f64> {
    let log_ratio =
        |ratio: f64| if ratio > 0.0 && ratio.is_finite() { libm::log(ratio) } else { 0.0 };
    let angle = if field.gradient_angle_deg.is_finite() { field.gradient_angle_deg } else { 0.0 };
    let (ux, uy) = direction(angle);
    let half = |pixels: usize| 0.5 * pixels.saturating_sub(1) as f64;
    let (half_x, half_y) = (half(columns), half(rows));
    let per = |numerator: f64, length: f64| if length > 0.0 { numerator / length } else { 0.0 };
    let slope = per(log_ratio(field.gradient), 2.0 * (half_x * ux.abs() + half_y * uy.abs()));
    let rise = per(log_ratio(field.edge_rise), half_x * half_x + half_y * half_y);
    pattern(columns, rows, |x, y| {
        let (dx, dy) = (x - half_x, y - half_y);
        let exponent = slope * (dx * ux + dy * uy) + rise * (dx * dx + dy * dy);
        libm::exp(exponent.clamp(-700.0, 700.0))
    })
}

/// Stripes with this expected rms, as a few bad visibilities or a correlator fault leave them: a
/// band of close sinusoids with random phases, 10 % of the wave number wide, so that the stripes
/// fade and return over the map. Crests run along `angle_deg`; a period below 2 px is taken as 2.
///
/// Five waves of amplitude rms √(2/5): at every pixel the mean square over the phases is rms².
pub fn stripes(
    columns: usize,
    rows: usize,
    rms: f64,
    period_px: f64,
    angle_deg: f64,
    seed: u64,
) -> Array2<f64> {
    let mut out = Array2::zeros((rows, columns));
    if !finite(&[rms, period_px, angle_deg]) {
        return out;
    }
    let mut draws = Draws::new(seed);
    let (cos, sin) = direction(angle_deg);
    // sin(a + b) from tables along the columns and along the rows.
    let table = |pixels: usize, wave: f64, phase: f64| -> (Array1<f64>, Array1<f64>) {
        let angle = |i: usize| libm::sincos(wave * i as f64 + phase);
        let pairs: Vec<(f64, f64)> = (0..pixels).map(angle).collect();
        (pairs.iter().map(|pair| pair.0).collect(), pairs.iter().map(|pair| pair.1).collect())
    };
    for i in 0..STRIPE_WAVES {
        let place = i as f64 / (STRIPE_WAVES - 1) as f64 - 0.5;
        let wave = 2.0 * PI / period_px.max(2.0) * (1.0 + STRIPE_BANDWIDTH * place);
        let (sin_x, cos_x) = table(columns, -wave * sin, 2.0 * PI * draws.uniform());
        let (sin_y, cos_y) = table(rows, wave * cos, 0.0);
        for (mut to, (sin_y, cos_y)) in out.rows_mut().into_iter().zip(sin_y.iter().zip(&cos_y)) {
            to.scaled_add(*cos_y, &sin_x);
            to.scaled_add(*sin_y, &cos_x);
        }
    }
    out * (rms * (2.0 / STRIPE_WAVES as f64).sqrt())
}

/// Sidelobe rings about a bright feature, as incomplete cleaning leaves them: a cosine in radius
/// that falls as 1/√r, A √(3P/4r) cos(2π r/P − π/2), and zero within the first half period P/2,
/// where it starts continuously. As about a filled aperture the first ring is negative: −A at
/// three quarters of a period. A period below 2 px is taken as 2.
pub fn rings(
    columns: usize,
    rows: usize,
    centre_px: (f64, f64),
    amplitude: f64,
    period_px: f64,
) -> Array2<f64> {
    if !finite(&[centre_px.0, centre_px.1, amplitude, period_px]) {
        return Array2::zeros((rows, columns));
    }
    let period = period_px.max(2.0);
    pattern(columns, rows, |x, y| {
        let periods = libm::hypot(x - centre_px.0, y - centre_px.1) / period;
        if periods <= 0.5 {
            return 0.0;
        }
        amplitude * (0.75 / periods).sqrt() * libm::sin(2.0 * PI * (periods % 1.0))
    })
}

/// Spokes through a bright feature, as the arms of an array leave them in a short observation:
/// stripes along `count` diameters, evenly spread from a random direction, one positive and the
/// next negative (an odd number has two positive neighbours). Across they are Gaussians with the
/// beam's FWHM. Along they rise from zero at the centre to ±`amplitude` where neighbours are two
/// beams apart, r = 2 count beam/π, and fall as 1/√r beyond.
pub fn spokes(
    columns: usize,
    rows: usize,
    centre_px: (f64, f64),
    amplitude: f64,
    count: usize,
    beam_px: f64,
    seed: u64,
) -> Array2<f64> {
    let numbers = [centre_px.0, centre_px.1, amplitude, beam_px];
    if !finite(&numbers) || beam_px <= 0.0 || count == 0 {
        return Array2::zeros((rows, columns));
    }
    let turn = Draws::new(seed).uniform();
    let normals: Vec<(f64, f64, f64)> = (0..count)
        .map(|i| {
            let (cos, sin) = direction(180.0 * (i as f64 + turn) / count as f64);
            (-sin, cos, if i % 2 == 0 { 1.0 } else { -1.0 })
        })
        .collect();
    let apart = 2.0 * count as f64 * beam_px / PI;
    pattern(columns, rows, |x, y| {
        let (dx, dy) = (x - centre_px.0, y - centre_px.1);
        let radius = libm::hypot(dx, dy) / apart;
        let along = if radius < 1.0 { radius } else { 1.0 / radius.sqrt() };
        let mut across = 0.0;
        for (nx, ny, sign) in &normals {
            let distance = (dx * nx + dy * ny) / beam_px;
            if distance.abs() < GAUSSIAN_REACH_FWHM {
                across += sign * libm::exp(-FOUR_LN2 * distance * distance);
            }
        }
        amplitude * (along * across)
    })
}

/// The bowl that missing short baselines leave around a source: a negative Gaussian whose sum
/// over pixels is −`flux_px` (what falls off the map included). A FWHM below 2 px is taken as 2,
/// so that the sum over pixels is the integral to 3e-6.
pub fn bowl(
    columns: usize,
    rows: usize,
    centre_px: (f64, f64),
    flux_px: f64,
    fwhm_px: f64,
) -> Array2<f64> {
    if !finite(&[centre_px.0, centre_px.1, flux_px, fwhm_px]) {
        return Array2::zeros((rows, columns));
    }
    let fwhm = fwhm_px.max(2.0);
    let line = |pixels: usize, centre: f64| -> Array1<f64> {
        let value = |i: usize| {
            let distance = (i as f64 - centre) / fwhm;
            libm::exp(-FOUR_LN2 * distance * distance)
        };
        (0..pixels).map(value).collect()
    };
    let (across, along) = (line(columns, centre_px.0), line(rows, centre_px.1));
    let depth = flux_px / GAUSSIAN_AREA / fwhm / fwhm;
    Array2::from_shape_fn((rows, columns), |(y, x)| -depth * (across[x] * along[y]))
}

/// What becomes of brightness below a level.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Clip {
    /// It stays.
    None,
    /// It becomes 0, as in maps masked for display.
    Zero,
    /// It becomes blank, as in published moment and polarisation maps.
    Blank,
    /// It becomes the level, as in pictures with a cut.
    Floor,
}

/// Clips what lies below `level`. Blank pixels stay blank; a level that is not finite clips
/// nothing.
pub fn clip(map: &mut Array2<f64>, level: f64, clip: Clip) {
    let replacement = match clip {
        Clip::None => return,
        Clip::Zero => 0.0,
        Clip::Blank => f64::NAN,
        Clip::Floor => level,
    };
    if level.is_finite() {
        map.mapv_inplace(|value| if value < level { replacement } else { value });
    }
}

/// Blanks a border of this many pixels, as gridding and mosaicking leave it.
pub fn blank_border(map: &mut Array2<f64>, border_px: usize) {
    let (rows, columns) = map.dim();
    let outside = |i: usize, size: usize| i < border_px || size - i <= border_px;
    for ((y, x), value) in map.indexed_iter_mut() {
        if outside(x, columns) || outside(y, rows) {
            *value = f64::NAN;
        }
    }
}

/// Blanks the pixels whose centres lie within `radius_px` of one of the centres (column, row):
/// holes where bright neighbours were cut out or data were flagged.
pub fn blank_discs(map: &mut Array2<f64>, centres_px: &[(f64, f64)], radius_px: f64) {
    let range = |centre: f64, size: usize| {
        let low = (centre - radius_px).ceil().clamp(0.0, size as f64) as usize;
        let high = ((centre + radius_px).floor() + 1.0).clamp(0.0, size as f64) as usize;
        low..high.max(low)
    };
    let (rows, columns) = map.dim();
    for &(cx, cy) in centres_px {
        if !finite(&[cx, cy]) || radius_px.is_nan() || radius_px < 0.0 {
            continue;
        }
        for y in range(cy, rows) {
            for x in range(cx, columns) {
                let (dx, dy) = (x as f64 - cx, y as f64 - cy);
                if dx * dx + dy * dy <= radius_px * radius_px {
                    map[(y, x)] = f64::NAN;
                }
            }
        }
    }
}

/// Centres for [`blank_discs`]: uniform between the centres of the outermost pixels. None on a
/// map without pixels.
pub fn hole_centres(columns: usize, rows: usize, count: usize, seed: u64) -> Vec<(f64, f64)> {
    let (Some(last_x), Some(last_y)) = (columns.checked_sub(1), rows.checked_sub(1)) else {
        return Vec::new();
    };
    let mut draws = Draws::new(seed);
    (0..count).map(|_| (draws.uniform() * last_x as f64, draws.uniform() * last_y as f64)).collect()
}

/// Rounds brightness to whole steps, half to even, as storing in integers does. Blank pixels stay
/// blank; a step that is not positive and finite changes nothing.
pub fn quantise(map: &mut Array2<f64>, step: f64) {
    if step > 0.0 && step.is_finite() {
        map.mapv_inplace(|value| {
            let steps = (value / step).round_ties_even();
            if steps.is_finite() { steps * step } else { value }
        });
    }
}

/// Unrelated point sources: column, row and flux of each. Their number is Poisson with a mean of
/// `mean_count` on the map. Places are uniform over the map and 10 px around it (with as many
/// sources per pixel), whose beams reach into the map. Fluxes follow dN/dS ∝ S^−slope between
/// the least and the largest, by the inverse of the cumulative distribution. Nothing where the
/// range is not 0 < least ≤ largest or a number is not finite.
pub fn neighbour_fluxes_and_places(
    columns: usize,
    rows: usize,
    mean_count: f64,
    (least, largest, slope): (f64, f64, f64),
    seed: u64,
) -> Vec<(f64, f64, f64)> {
    let area = columns as f64 * rows as f64;
    let possible = finite(&[mean_count, least, largest, slope]);
    if !possible || least <= 0.0 || largest < least || area <= 0.0 {
        return Vec::new();
    }
    let (wide, high) =
        (columns as f64 + 2.0 * NEIGHBOUR_MARGIN_PX, rows as f64 + 2.0 * NEIGHBOUR_MARGIN_PX);
    let mut draws = Draws::new(seed);
    let count = draws.poisson((mean_count * (wide * high / area)).min(MOST_NEIGHBOURS));
    (0..count)
        .map(|_| {
            // Pixel 0 begins half a pixel before its centre.
            let x = draws.uniform() * wide - NEIGHBOUR_MARGIN_PX - 0.5;
            let y = draws.uniform() * high - NEIGHBOUR_MARGIN_PX - 0.5;
            (x, y, power_law_quantile(least, largest, slope, draws.uniform()))
        })
        .collect()
}

/// The value below which a share of the distribution dN/dS ∝ S^−slope on [least, largest] lies.
/// With e = 1 − slope it is (least^e + share (largest^e − least^e))^(1/e), for slope 1
/// least (largest/least)^share; written from the end where most values are, so that no power
/// overflows.
fn power_law_quantile(least: f64, largest: f64, slope: f64, share: f64) -> f64 {
    let exponent = 1.0 - slope;
    let span = libm::log(largest) - libm::log(least);
    let value = if exponent.abs() < 1e-12 {
        least * libm::exp(share * span)
    } else {
        let (end, share) = if exponent > 0.0 { (largest, 1.0 - share) } else { (least, share) };
        let step = libm::log1p(share * libm::expm1(-exponent.abs() * span));
        end * libm::exp(step / exponent)
    };
    value.clamp(least, largest)
}

#[cfg(test)]
mod tests;
