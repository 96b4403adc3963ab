//! Joint least-squares fit of Gaussians given in beams, and its covariance.

use super::pixels::Pixels;
use crate::noise::NoiseCorrelation;
use crate::stats::dot;

/// 4 ln 2: a Gaussian falls to half at half its FWHM.
const FOUR_LN_2: f64 = 4.0 * std::f64::consts::LN_2;
/// Products summed for the covariance at the most.
const MOST_PRODUCTS: usize = 3_000_000;
/// Shares of the peak down to which derivatives are kept, from the best to the shortest.
const DERIVATIVE_CUTS: [f64; 4] = [0.004, 0.02, 0.1, 0.4];

/// A exp(−4 ln 2 |F (position − centre)|²), positions in beams, F symmetric.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Gaussian {
    pub(super) amplitude: f64,
    pub(super) centre: [f64; 2],
    /// F: 11, 12, 22.
    root: [f64; 3],
}

/// Axes of a Gaussian: inverse FWHM in beams and unit vectors.
#[derive(Clone, Copy)]
pub(super) struct Axes {
    /// Inverse FWHM along the short axis (the larger eigenvalue of F).
    pub(super) narrow: f64,
    /// Inverse FWHM along the long axis.
    pub(super) wide: f64,
    /// Direction of the short axis.
    pub(super) short: [f64; 2],
    /// Direction of the long axis.
    pub(super) long: [f64; 2],
}

impl Gaussian {
    /// A round one of this width in beams.
    pub(super) fn beam_shaped(amplitude: f64, centre: [f64; 2], width: f64) -> Self {
        Self { amplitude, centre, root: [1.0 / width, 0.0, 1.0 / width] }
    }

    pub(super) fn axes(&self) -> Axes {
        let [a, b, c] = self.root;
        let (mean, half) = (0.5 * (a + c), (0.5 * (a - c)).hypot(b));
        let angle = if half > 0.0 { 0.5 * (2.0 * b).atan2(a - c) } else { 0.0 };
        let (sin, cos) = angle.sin_cos();
        Axes { narrow: mean + half, wide: mean - half, short: [cos, sin], long: [-sin, cos] }
    }

    /// FWHM of the long axis in beams.
    pub(super) fn longest(&self) -> f64 {
        1.0 / self.axes().wide
    }

    /// Integral over that of a beam of peak 1.
    pub(super) fn volume(&self) -> f64 {
        let [a, b, c] = self.root;
        self.amplitude / (a * c - b * b)
    }

    /// Whether the two overlap so far that a change of one moves the other.
    pub(super) fn is_near(&self, other: &Self) -> bool {
        let apart = (self.centre[0] - other.centre[0]).hypot(self.centre[1] - other.centre[1]);
        apart < 0.5 + 0.7 * (self.longest() + other.longest())
    }

    pub(super) fn is_finite(&self) -> bool {
        self.amplitude.is_finite()
            && self.centre.iter().chain(&self.root).all(|v| v.is_finite())
            && self.volume().is_finite()
    }

    /// Changed by steps of amplitude, centre along short and long axis, and F along
    /// short-short, long-long and short-long.
    pub(super) fn changed(&self, step: [f64; 6]) -> Self {
        let Axes { short: s, long: l, .. } = self.axes();
        let [_, ds, dl, a, b, c] = step;
        Self {
            amplitude: self.amplitude + step[0],
            centre: [
                self.centre[0] + ds * s[0] + dl * l[0],
                self.centre[1] + ds * s[1] + dl * l[1],
            ],
            root: [
                self.root[0] + a * s[0] * s[0] + b * l[0] * l[0] + 2.0 * c * s[0] * l[0],
                self.root[1] + a * s[0] * s[1] + b * l[0] * l[1] + c * (s[0] * l[1] + l[0] * s[1]),
                self.root[2] + a * s[1] * s[1] + b * l[1] * l[1] + 2.0 * c * s[1] * l[1],
            ],
        }
    }

    /// The change, cut to what one step may do, within the limits.
    fn stepped(&self, step: &[f64], limits: &Limits) -> Self {
        let axes = self.axes();
        let get = |k: usize| step.get(k).copied().unwrap_or(0.0);
        let mut cut = [get(0), get(1), get(2), get(3), get(4), get(5)]
            .map(|v| if v.is_finite() { v } else { 0.0 });
        cut[0] = cut[0].max(-0.8 * self.amplitude.abs());
        let width = 0.5 * (1.0 / axes.wide).clamp(1.0, 2.0);
        let moved = cut[1].hypot(cut[2]);
        if moved > width {
            cut[1] *= width / moved;
            cut[2] *= width / moved;
        }
        cut[3] = cut[3].clamp(-0.5 * axes.narrow, axes.narrow);
        cut[4] = cut[4].clamp(-0.5 * axes.wide, axes.wide);
        cut[5] = cut[5].clamp(-0.5 * axes.wide, 0.5 * axes.wide);
        let mut out = self.changed(cut);
        let (low, high) = (1.0 / limits.widest, 1.0 / limits.narrowest);
        let now = out.axes();
        if now.narrow > high || now.wide < low {
            let (n, w) = (now.narrow.clamp(low, high), now.wide.clamp(low, high));
            let (s, l) = (now.short, now.long);
            out.root = [
                n * s[0] * s[0] + w * l[0] * l[0],
                n * s[0] * s[1] + w * l[0] * l[1],
                n * s[1] * s[1] + w * l[1] * l[1],
            ];
        }
        out
    }
}

/// Bounds of a fit.
#[derive(Clone, Copy)]
pub(super) struct Limits {
    /// Smallest FWHM in beams.
    pub(super) narrowest: f64,
    /// Largest FWHM in beams.
    pub(super) widest: f64,
    /// Share of the sum of squares that is not worth another step.
    pub(super) precision: f64,
    /// Most evaluations.
    pub(super) evaluations: usize,
}

/// A fit at its end.
pub(super) struct Fit {
    pub(super) gaussians: Vec<Gaussian>,
    /// Brightness minus model at the pixels.
    pub(super) residual: Vec<f64>,
    pub(super) evaluations: usize,
    pub(super) converged: bool,
    stamps: Vec<Stamp>,
}

/// Where one Gaussian is not negligible, with its derivatives there.
#[derive(Default)]
struct Stamp {
    centre: [f64; 2],
    longest: f64,
    index: Vec<u32>,
    /// Of each parameter one list.
    slope: [Vec<f64>; 6],
}

impl Stamp {
    /// Whether the product of the two Gaussians is not negligible: its integral is
    /// exp(−4 ln 2 d²/(w₁² + w₂²)) of that at no distance, 10⁻³ at the limit.
    fn meets(&self, other: &Self) -> bool {
        let apart = (self.centre[0] - other.centre[0]).hypot(self.centre[1] - other.centre[1]);
        apart * apart <= 2.5 * (self.longest.powi(2) + other.longest.powi(2))
    }
}

/// The model at one set of parameters.
struct State {
    residual: Vec<f64>,
    squares: f64,
    stamps: Vec<Stamp>,
}

fn evaluate(pixels: &Pixels, target: &[f64], gaussians: &[Gaussian]) -> State {
    let mut residual = target.to_vec();
    let stamps = gaussians
        .iter()
        .map(|gaussian| {
            let stamp = stamp(pixels, gaussian);
            for (&i, g) in stamp.index.iter().zip(&stamp.slope[0]) {
                if let Some(r) = residual.get_mut(i as usize) {
                    *r -= gaussian.amplitude * g;
                }
            }
            stamp
        })
        .collect();
    let squares = residual.iter().map(|r| r * r).sum();
    State { residual, squares, stamps }
}

fn stamp(pixels: &Pixels, gaussian: &Gaussian) -> Stamp {
    let axes = gaussian.axes();
    let mut out = Stamp { centre: gaussian.centre, longest: 1.0 / axes.wide, ..Stamp::default() };
    if !gaussian.is_finite() || axes.wide <= 0.0 {
        return out;
    }
    // Negligible: below a fiftieth of the noise.
    let reach = (50.0 * gaussian.amplitude.abs() / pixels.rms).ln().clamp(5.0, 34.0) / FOUR_LN_2;
    // Half width of the ellipse |F d|² = reach along the box's axes.
    let (ns, nl) = (reach.sqrt() / axes.narrow, reach.sqrt() / axes.wide);
    let (centre_x, centre_y) = pixels.to_cell(gaussian.centre);
    let zero = pixels.to_cell([0.0, 0.0]);
    let axis = |v: [f64; 2], length: f64| {
        let (x, y) = pixels.to_cell([v[0] * length, v[1] * length]);
        (x - zero.0, y - zero.1)
    };
    let (a, b) = (axis(axes.short, ns), axis(axes.long, nl));
    let range = |centre: f64, half: f64, size: usize| {
        let low = (centre - half).ceil().clamp(0.0, size as f64) as usize;
        let high = ((centre + half).floor() + 1.0).clamp(0.0, size as f64) as usize;
        low..high.max(low)
    };
    let columns = range(centre_x, a.0.hypot(b.0), pixels.columns);
    let rows = range(centre_y, a.1.hypot(b.1), pixels.rows);
    let (s, l) = (axes.short, axes.long);
    let room = columns.len() * rows.len();
    out.index.reserve(room);
    let [mut along, mut across, mut g] = [(); 3].map(|()| Vec::with_capacity(room));
    for row in rows {
        let start = row * pixels.columns;
        let Some(line) = pixels.index.get(start + columns.start..start + columns.end) else {
            continue;
        };
        for &i in line {
            let Some(position) = usize::try_from(i).ok().and_then(|i| pixels.position.get(i))
            else {
                continue;
            };
            let d = [position[0] - gaussian.centre[0], position[1] - gaussian.centre[1]];
            let (ds, dl) = (d[0] * s[0] + d[1] * s[1], d[0] * l[0] + d[1] * l[1]);
            let (us, ul) = (axes.narrow * ds, axes.wide * dl);
            let squared = us * us + ul * ul;
            if squared > reach {
                continue;
            }
            out.index.push(i as u32);
            along.push(ds);
            across.push(dl);
            g.push((-FOUR_LN_2 * squared).exp());
        }
    }
    // Derivatives list by list: many pixels at a time.
    let scale = 2.0 * FOUR_LN_2 * gaussian.amplitude;
    let (n, w) = (axes.narrow, axes.wide);
    let lists = [
        derivative(&g, &along, |ds| scale * n * n * ds),
        derivative(&g, &across, |dl| scale * w * w * dl),
        derivative(&g, &along, |ds| -scale * n * ds * ds),
        derivative(&g, &across, |dl| -scale * w * dl * dl),
    ];
    let both: Vec<f64> = along.iter().zip(&across).map(|(ds, dl)| ds * dl).collect();
    let mixed = derivative(&g, &both, |product| -scale * (n + w) * product);
    let [d1, d2, d3, d4] = lists;
    out.slope = [g, d1, d2, d3, d4, mixed];
    out
}

/// The Gaussian times a function of the place, pixel by pixel.
fn derivative(g: &[f64], place: &[f64], of: impl Fn(f64) -> f64) -> Vec<f64> {
    g.iter().zip(place).map(|(g, at)| g * of(*at)).collect()
}

/// JᵀJ (row-major) and Jᵀ residual.
fn normal_equations(pixels: &Pixels, residual: &[f64], stamps: &[Stamp]) -> (Vec<f64>, Vec<f64>) {
    let count = 6 * stamps.len();
    let mut matrix = vec![0.0; count * count];
    let mut right = vec![0.0; count];
    let mut place = vec![-1i32; pixels.value.len()];
    let mut shared = Shared::default();
    for (a, first) in stamps.iter().enumerate() {
        let own: Vec<f64> = first.index.iter().map(|&i| residual[i as usize]).collect();
        for (p, slope) in first.slope.iter().enumerate() {
            right[6 * a + p] = dot(slope, &own);
            for (q, other) in first.slope.iter().enumerate().skip(p) {
                let v = dot(slope, other);
                matrix[(6 * a + p) * count + 6 * a + q] = v;
                matrix[(6 * a + q) * count + 6 * a + p] = v;
            }
        }
        if stamps.iter().skip(a + 1).all(|second| !first.meets(second)) {
            continue;
        }
        for (n, &i) in first.index.iter().enumerate() {
            place[i as usize] = n as i32;
        }
        for (b, second) in stamps.iter().enumerate().skip(a + 1) {
            if !first.meets(second) {
                continue;
            }
            shared.gather(&place, first, second);
            for (p, u) in shared.first.iter().enumerate() {
                for (q, w) in shared.second.iter().enumerate() {
                    let v = dot(u, w);
                    matrix[(6 * a + p) * count + 6 * b + q] = v;
                    matrix[(6 * b + q) * count + 6 * a + p] = v;
                }
            }
        }
        for &i in &first.index {
            place[i as usize] = -1;
        }
    }
    (matrix, right)
}

/// The derivatives of two Gaussians at the pixels both have.
#[derive(Default)]
struct Shared {
    at: Vec<(u32, u32)>,
    first: [Vec<f64>; 6],
    second: [Vec<f64>; 6],
}

impl Shared {
    /// `place`: of each pixel its number in the first list, negative where it is not there.
    fn gather(&mut self, place: &[i32], first: &Stamp, second: &Stamp) {
        self.at.clear();
        let numbered = second.index.iter().zip(0u32..);
        self.at.extend(
            numbered.filter_map(|(&i, m)| u32::try_from(place[i as usize]).ok().map(|n| (n, m))),
        );
        for (list, slope) in self.first.iter_mut().zip(&first.slope) {
            list.clear();
            list.extend(self.at.iter().map(|(n, _)| slope[*n as usize]));
        }
        for (list, slope) in self.second.iter_mut().zip(&second.slope) {
            list.clear();
            list.extend(self.at.iter().map(|(_, m)| slope[*m as usize]));
        }
    }
}

/// Lower triangular factor of a symmetric positive-definite matrix; `None` where it is none.
fn cholesky(matrix: &[f64], n: usize) -> Option<Vec<f64>> {
    let mut factor = vec![0.0; n * n];
    for i in 0..n {
        for j in 0..=i {
            let (a, b) = (&factor[i * n..i * n + j], &factor[j * n..j * n + j]);
            let sum = matrix[i * n + j] - a.iter().zip(b).map(|(x, y)| x * y).sum::<f64>();
            if i == j {
                if !(sum > 1e-13 * matrix[i * n + i] && sum.is_finite()) {
                    return None;
                }
                factor[i * n + i] = sum.sqrt();
            } else {
                factor[i * n + j] = sum / factor[j * n + j];
            }
        }
    }
    Some(factor)
}

fn solve(factor: &[f64], n: usize, right: &[f64]) -> Vec<f64> {
    let mut x = right.to_vec();
    for i in 0..n {
        let sum: f64 = (0..i).map(|k| factor[i * n + k] * x[k]).sum();
        x[i] = (x[i] - sum) / factor[i * n + i];
    }
    for i in (0..n).rev() {
        let sum: f64 = (i + 1..n).map(|k| factor[k * n + i] * x[k]).sum();
        x[i] = (x[i] - sum) / factor[i * n + i];
    }
    x
}

/// Holds shape parameters that stand at a limit and are pushed beyond it.
fn freeze(gaussians: &[Gaussian], limits: &Limits, matrix: &mut [f64], right: &mut [f64]) {
    let count = right.len();
    let (low, high) = (1.0 / limits.widest, 1.0 / limits.narrowest);
    for (k, gaussian) in gaussians.iter().enumerate() {
        let axes = gaussian.axes();
        let held = |value: f64, push: f64| {
            (value >= high * (1.0 - 1e-9) && push > 0.0)
                || (value <= low * (1.0 + 1e-9) && push < 0.0)
        };
        let narrow = held(axes.narrow, right[6 * k + 3]);
        let wide = held(axes.wide, right[6 * k + 4]);
        let list = [(narrow, 3), (wide, 4), (narrow && wide, 5)];
        for (_, p) in list.into_iter().filter(|(hold, _)| *hold) {
            let at = 6 * k + p;
            for q in 0..count {
                matrix[at * count + q] = 0.0;
                matrix[q * count + at] = 0.0;
            }
            matrix[at * count + at] = 1.0;
            right[at] = 0.0;
        }
    }
}

/// Brightness with the given Gaussians taken off.
pub(super) fn without(pixels: &Pixels, gaussians: &[Gaussian]) -> Vec<f64> {
    evaluate(pixels, &pixels.value, gaussians).residual
}

/// Least squares to the target values at the pixels, from a start; `None` where nothing can
/// be evaluated.
pub(super) fn minimise(
    pixels: &Pixels,
    target: &[f64],
    start: Vec<Gaussian>,
    limits: &Limits,
) -> Option<Fit> {
    let mut gaussians = start;
    let mut state = evaluate(pixels, target, &gaussians);
    let mut evaluations = 1;
    let mut damping = 1e-2;
    let mut converged = false;
    if !state.squares.is_finite() {
        return None;
    }
    'steps: while evaluations < limits.evaluations {
        let (mut matrix, mut right) = normal_equations(pixels, &state.residual, &state.stamps);
        freeze(&gaussians, limits, &mut matrix, &mut right);
        let count = right.len();
        loop {
            let mut damped = matrix.clone();
            for i in 0..count {
                damped[i * count + i] += damping * matrix[i * count + i].max(f64::MIN_POSITIVE);
            }
            let trial = cholesky(&damped, count).map(|factor| {
                let step = solve(&factor, count, &right);
                gaussians
                    .iter()
                    .zip(step.chunks(6))
                    .map(|(g, step)| g.stepped(step, limits))
                    .collect::<Vec<_>>()
            });
            if let Some(trial) = trial {
                let next = evaluate(pixels, target, &trial);
                evaluations += 1;
                if next.squares < state.squares {
                    let gained = state.squares - next.squares;
                    let enough = (pixels.sample_square() + next.squares) * limits.precision;
                    gaussians = trial;
                    state = next;
                    damping = (0.15 * damping).max(1e-12);
                    if gained <= enough {
                        converged = true;
                        break 'steps;
                    }
                    continue 'steps;
                }
            }
            damping *= 8.0;
            if damping > 1e8 {
                // No direction leads down: the minimum to working precision.
                converged = true;
                break 'steps;
            }
            if evaluations >= limits.evaluations {
                break 'steps;
            }
        }
    }
    Some(Fit { gaussians, residual: state.residual, evaluations, converged, stamps: state.stamps })
}

/// Covariance of the six parameters of each Gaussian, (JᵀJ)⁻¹ JᵀCJ (JᵀJ)⁻¹ with all of
/// them free; `None` where the normal equations are singular or the sums too long.
pub(super) fn covariance(
    pixels: &Pixels,
    fit: &Fit,
    correlation: &NoiseCorrelation,
) -> Option<Vec<[[f64; 6]; 6]>> {
    let stamps = &fit.stamps;
    let (matrix, _) = normal_equations(pixels, &fit.residual, stamps);
    let count = 6 * stamps.len();
    let scale: Vec<f64> = (0..count).map(|i| matrix[i * count + i].sqrt()).collect();
    if scale.iter().any(|s| !(*s > 0.0 && s.is_finite())) {
        return None;
    }
    let scaled: Vec<f64> =
        (0..count * count).map(|k| matrix[k] / (scale[k / count] * scale[k % count])).collect();
    let factor = cholesky(&scaled, count)?;
    let middle = correlated_products(pixels, stamps, correlation)?;
    let middle: Vec<f64> =
        (0..count * count).map(|k| middle[k] / (scale[k / count] * scale[k % count])).collect();
    // X = N⁻¹ M, V = N⁻¹ Xᵀ.
    let columns = |m: &[f64]| -> Vec<f64> {
        let mut out = vec![0.0; count * count];
        for j in 0..count {
            let column: Vec<f64> = (0..count).map(|i| m[i * count + j]).collect();
            for (i, v) in solve(&factor, count, &column).into_iter().enumerate() {
                // Stored transposed: the next solve runs over the other index.
                out[j * count + i] = v;
            }
        }
        out
    };
    let variance = columns(&columns(&middle));
    Some(
        (0..stamps.len())
            .map(|k| {
                let mut block = [[0.0; 6]; 6];
                for (p, line) in block.iter_mut().enumerate() {
                    for (q, v) in line.iter_mut().enumerate() {
                        let (i, j) = (6 * k + p, 6 * k + q);
                        *v = variance[i * count + j] / (scale[i] * scale[j]);
                    }
                }
                block
            })
            .collect(),
    )
}

/// JᵀCJ by direct sums over pairs of pixels. Far out, where a Gaussian is below a small share
/// of its peak, its derivatives are left out.
fn correlated_products(
    pixels: &Pixels,
    stamps: &[Stamp],
    correlation: &NoiseCorrelation,
) -> Option<Vec<f64>> {
    let count = 6 * stamps.len();
    let step = pixels.stride as isize;
    let reach = (correlation.reach_px() / pixels.stride) as isize;
    let side = (2 * reach + 1) as usize;
    let mut table = vec![0.0; side * side];
    for dy in -reach..=reach {
        for dx in -reach..=reach {
            table[(dy + reach) as usize * side + (dx + reach) as usize] =
                correlation.at(step * dx, step * dy);
        }
    }
    // The farther out the better (1 % at 0.004); less of each where the sums would be long.
    let near = DERIVATIVE_CUTS.iter().find_map(|&cut| {
        let near: Vec<Near> = stamps.iter().map(|stamp| Near::of(pixels, stamp, cut)).collect();
        let cells: usize = near.iter().map(|n| n.cells.len()).sum();
        let lags: usize = near.iter().map(|n| n.filled.len().min(side * side)).sum();
        (cells.saturating_mul(lags) <= MOST_PRODUCTS).then_some(near)
    })?;
    let mut out = vec![0.0; count * count];
    for (a, first) in near.iter().enumerate() {
        for (b, second) in near.iter().enumerate().skip(a) {
            let mut block = [[0.0; 6]; 6];
            for (&(column, row), u) in first.cells.iter().zip(&first.slopes) {
                let smoothed = second.smoothed(&table, reach, column as isize, row as isize);
                for (line, u) in block.iter_mut().zip(u) {
                    for (sum, v) in line.iter_mut().zip(&smoothed) {
                        *sum += u * v;
                    }
                }
            }
            for (p, line) in block.iter().enumerate() {
                for (q, v) in line.iter().enumerate() {
                    out[(6 * a + p) * count + 6 * b + q] = *v;
                    out[(6 * b + q) * count + 6 * a + p] = *v;
                }
            }
        }
    }
    Some(out)
}

/// Derivatives times the local rms where a Gaussian is above a share of its peak, also as a
/// filled rectangle.
struct Near {
    cells: Vec<(u32, u32)>,
    slopes: Vec<[f64; 6]>,
    left: isize,
    top: isize,
    width: isize,
    height: isize,
    filled: Vec<[f64; 6]>,
}

impl Near {
    fn of(pixels: &Pixels, stamp: &Stamp, cut: f64) -> Self {
        let (mut cells, mut slopes) = (Vec::new(), Vec::new());
        for (n, &i) in stamp.index.iter().enumerate() {
            if stamp.slope[0][n] < cut {
                continue;
            }
            let slope: [f64; 6] = std::array::from_fn(|k| stamp.slope[k][n]);
            if let (Some(&cell), Some(sigma)) =
                (pixels.cell.get(i as usize), pixels.sigma_at(i as usize))
            {
                cells.push(cell);
                slopes.push(slope.map(|v| v * sigma));
            }
        }
        let left = cells.iter().map(|c| c.0).min().unwrap_or(0);
        let top = cells.iter().map(|c| c.1).min().unwrap_or(0);
        let width = cells.iter().map(|c| c.0 + 1 - left).max().unwrap_or(0) as usize;
        let height = cells.iter().map(|c| c.1 + 1 - top).max().unwrap_or(0) as usize;
        let mut filled = vec![[0.0; 6]; width * height];
        for (&(c, r), slope) in cells.iter().zip(&slopes) {
            if let Some(slot) = filled.get_mut((r - top) as usize * width + (c - left) as usize) {
                *slot = *slope;
            }
        }
        Self {
            cells,
            slopes,
            left: left as isize,
            top: top as isize,
            width: width as isize,
            height: height as isize,
            filled,
        }
    }

    /// Σ C(lag) derivative(at + lag).
    fn smoothed(&self, table: &[f64], reach: isize, column: isize, row: isize) -> [f64; 6] {
        let side = 2 * reach + 1;
        let mut sums = [0.0; 6];
        let first = (column - reach).max(self.left);
        let last = (column + reach + 1).min(self.left + self.width);
        if last <= first {
            return sums;
        }
        for r in (row - reach).max(self.top)..(row + reach + 1).min(self.top + self.height) {
            let weights = (r - row + reach) * side + first - column + reach;
            let slopes = (r - self.top) * self.width + first - self.left;
            let length = last - first;
            let weights = table.get(weights as usize..(weights + length) as usize).unwrap_or(&[]);
            let slopes =
                self.filled.get(slopes as usize..(slopes + length) as usize).unwrap_or(&[]);
            for (weight, slope) in weights.iter().zip(slopes) {
                for (sum, v) in sums.iter_mut().zip(slope) {
                    *sum += weight * v;
                }
            }
        }
        sums
    }
}
