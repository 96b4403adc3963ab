//! Robust statistics on slices: finite numbers in, a finite number or `None` out.
//!
//! Functions that take `&mut [f64]` reorder it. All of them expect finite values; a NaN
//! sorts to the ends and a result that is not finite is `None`.

use crate::constants::SIGMA_PER_MAD;

/// Most iterations a clipped estimate may take; it stops earlier when it stands still.
const CLIP_ITERATIONS: usize = 30;

/// Sorts ascending by IEEE total order (as `f64::total_cmp`): the bits are turned into whole
/// numbers of the same order first, whose comparison is one instruction.
pub fn sort_ascending(values: &mut [f64]) {
    // Negative numbers run backwards in their bits; the turn is its own inverse.
    let turned = |bits: i64| bits ^ (((bits >> 63) as u64) >> 1) as i64;
    let mut keys: Vec<i64> = values.iter().map(|v| turned(v.to_bits() as i64)).collect();
    keys.sort_unstable();
    for (value, key) in values.iter_mut().zip(keys) {
        *value = f64::from_bits(turned(key) as u64);
    }
}

/// Σ a b in eight lanes, over the shorter length.
pub(crate) fn dot(a: &[f64], b: &[f64]) -> f64 {
    let shared = a.len().min(b.len());
    let (a, b) = (a.get(..shared).unwrap_or(&[]), b.get(..shared).unwrap_or(&[]));
    let mut lanes = [0.0; 8];
    let (a8, a_rest) = a.as_chunks::<8>();
    let (b8, b_rest) = b.as_chunks::<8>();
    for (a, b) in a8.iter().zip(b8) {
        for lane in 0..8 {
            lanes[lane] += a[lane] * b[lane];
        }
    }
    lanes.iter().sum::<f64>() + a_rest.iter().zip(b_rest).map(|(a, b)| a * b).sum::<f64>()
}

/// How many values are present (not NaN), and their range.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct PresentRange {
    pub count: usize,
    /// +∞ where none is present.
    pub lowest: f64,
    /// −∞ where none is present.
    pub highest: f64,
}

impl PresentRange {
    pub fn of(values: &[f64]) -> Self {
        const LANES: usize = 8;
        let mut lowest = [f64::INFINITY; LANES];
        let mut highest = [f64::NEG_INFINITY; LANES];
        let (chunks, rest) = values.as_chunks::<LANES>();
        // Comparisons with NaN are false: blanks do not count.
        let below = |a: f64, b: f64| if a < b { a } else { b };
        let above = |a: f64, b: f64| if a > b { a } else { b };
        for chunk in chunks {
            for lane in 0..LANES {
                lowest[lane] = below(chunk[lane], lowest[lane]);
                highest[lane] = above(chunk[lane], highest[lane]);
            }
        }
        let count = values.iter().map(|v| usize::from(!v.is_nan())).sum();
        Self {
            count,
            lowest: lowest.iter().chain(rest).fold(f64::INFINITY, |low, v| below(*v, low)),
            highest: highest.iter().chain(rest).fold(f64::NEG_INFINITY, |high, v| above(*v, high)),
        }
    }
}

/// The median: the middle value, or the mean of the two middle values. `None` when empty.
pub fn median(values: &mut [f64]) -> Option<f64> {
    quantile(values, 0.5)
}

/// The quantile `q` (0 to 1) by linear interpolation between order statistics at rank
/// `q (n − 1)` (Hyndman & Fan 1996, definition 7). `None` when empty or `q` is outside.
pub fn quantile(values: &mut [f64], q: f64) -> Option<f64> {
    if values.is_empty() || !(0.0..=1.0).contains(&q) {
        return None;
    }
    let rank = q * (values.len() - 1) as f64;
    let below = (rank.floor() as usize).min(values.len() - 1);
    let fraction = rank - below as f64;
    let (_, low, above) = values.select_nth_unstable_by(below, f64::total_cmp);
    let low = *low;
    let result = if fraction > 0.0 {
        let high = above.iter().copied().min_by(f64::total_cmp)?;
        low + fraction * (high - low)
    } else {
        low
    };
    result.is_finite().then_some(result)
}

/// The quantile of values that are already sorted, as [`quantile`].
pub fn sorted_quantile(sorted: &[f64], q: f64) -> Option<f64> {
    if sorted.is_empty() || !(0.0..=1.0).contains(&q) {
        return None;
    }
    let rank = q * (sorted.len() - 1) as f64;
    let below = rank.floor() as usize;
    let low = *sorted.get(below)?;
    let high = *sorted.get(below + 1).unwrap_or(&low);
    let result = low + (rank - below as f64) * (high - low);
    result.is_finite().then_some(result)
}

/// Standard deviation from the median absolute deviation about `centre`, scaled for
/// Gaussian noise. The values are replaced by their absolute deviations.
pub fn mad_sigma(values: &mut [f64], centre: f64) -> Option<f64> {
    for value in values.iter_mut() {
        *value = (*value - centre).abs();
    }
    median(values).map(|mad| mad * SIGMA_PER_MAD)
}

/// Variance of a unit Gaussian cut off at ±`k`: 1 − 2 k φ(k) / erf(k/√2) (Johnson, Kotz &
/// Balakrishnan 1994, section 13.10.1). Between 0 and 1.
pub fn truncated_variance(k: f64) -> f64 {
    if k <= 0.0 || k.is_nan() {
        return 0.0;
    }
    if k > 8.0 {
        return 1.0;
    }
    let density = libm::exp(-0.5 * k * k) / (2.0 * std::f64::consts::PI).sqrt();
    let inside = libm::erf(k * std::f64::consts::FRAC_1_SQRT_2);
    (1.0 - 2.0 * k * density / inside).max(0.0)
}

/// Mean and rms of the Gaussian under contaminated values.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Clipped {
    /// Mean of the values kept.
    pub mean: f64,
    /// Standard deviation, corrected for the tails cut off.
    pub rms: f64,
    /// Number of values kept.
    pub used: usize,
}

/// Mean and rms by iterative clipping at ±`clip` rms about the mean, starting from a guess.
/// The rms is divided by that of a Gaussian cut at ±`clip`, so Gaussian values are
/// recovered without bias. `None` where fewer than two values are left, or where the
/// start is not finite and positive.
pub fn clipped(values: &[f64], mean: f64, rms: f64, clip: f64) -> Option<Clipped> {
    let mut window = ClipWindow::default();
    iterate_clip(mean, rms, clip, None, |centre, half| window.moments(values, centre, half))
}

/// The rms about a fixed centre by iterative clipping, as [`clipped`].
pub fn clipped_about(values: &[f64], centre: f64, rms: f64, clip: f64) -> Option<Clipped> {
    let mut window = ClipWindow::default();
    iterate_clip(centre, rms, clip, Some(centre), |centre, half| {
        window.moments(values, centre, half)
    })
}

/// Sorted values with running sums: each clipping step costs a binary search.
#[derive(Debug, Default)]
pub struct SortedSample {
    values: Vec<f64>,
    sums: Vec<f64>,
    squares: Vec<f64>,
    origin: f64,
}

impl SortedSample {
    /// Takes the finite values of `values`, which is emptied.
    pub fn refill(&mut self, values: &mut Vec<f64>) {
        values.retain(|v| v.is_finite());
        std::mem::swap(&mut self.values, values);
        values.clear();
        sort_ascending(&mut self.values);
        // Squares about the median lose no digits to a large offset.
        self.origin = sorted_quantile(&self.values, 0.5).unwrap_or(0.0);
        let (mut sum, mut square) = (0.0, 0.0);
        self.sums.clear();
        self.squares.clear();
        self.sums.push(0.0);
        self.squares.push(0.0);
        for value in &self.values {
            let d = value - self.origin;
            sum += d;
            square += d * d;
            self.sums.push(sum);
            self.squares.push(square);
        }
    }

    /// The values, ascending.
    pub fn values(&self) -> &[f64] {
        &self.values
    }

    /// [`clipped`] on this sample.
    pub fn clipped(&self, mean: f64, rms: f64, clip: f64) -> Option<Clipped> {
        iterate_clip(mean, rms, clip, None, |centre, half| {
            let low = self.values.partition_point(|v| *v < centre - half);
            let high = self.values.partition_point(|v| *v <= centre + half).max(low);
            let part = |sums: &[f64]| match (sums.get(high), sums.get(low)) {
                (Some(h), Some(l)) => h - l,
                _ => 0.0,
            };
            let n = (high - low) as f64;
            let shift = centre - self.origin;
            let (s, q) = (part(&self.sums), part(&self.squares));
            // Moments about the centre from moments about the origin.
            (high - low, s - n * shift, q - 2.0 * shift * s + n * shift * shift)
        })
    }

    /// Centre of the densest part: the shortest half is halved until an eighth of the
    /// values is left (a half-sample mode stopped early; Bickel & Frühwirth 2006), whose
    /// mean is returned. It stays on the noise while up to about 80 % of the values
    /// belong to bright, spread-out emission. `None` when empty.
    pub fn mode(&self) -> Option<f64> {
        let total = self.values.len();
        let stop = (total / 8).max(3);
        let (mut low, mut high) = (0, total);
        while high - low > stop {
            let half = (high - low).div_ceil(2).max(stop);
            if half >= high - low {
                break;
            }
            let width =
                |start: usize| match (self.values.get(start), self.values.get(start + half - 1)) {
                    (Some(a), Some(b)) => b - a,
                    _ => f64::INFINITY,
                };
            let best =
                (low..=high - half).min_by(|a, b| width(*a).total_cmp(&width(*b))).unwrap_or(low);
            (low, high) = (best, best + half);
        }
        let kept = self.values.get(low..high)?;
        let mean = kept.iter().sum::<f64>() / kept.len() as f64;
        mean.is_finite().then_some(mean)
    }

    /// Standard deviation from the values below `centre` alone: their median distance,
    /// scaled for Gaussian noise. Emission only adds, so it does not enter. `None` where
    /// fewer than `minimum` values lie below.
    pub fn lower_sigma(&self, centre: f64, minimum: usize) -> Option<f64> {
        let below = self.values.partition_point(|v| *v < centre);
        if below < minimum.max(1) {
            return None;
        }
        let middle = sorted_quantile(self.values.get(..below)?, 0.5)?;
        Some((centre - middle) * SIGMA_PER_MAD)
    }
}

/// Share of the first window that later ones are expected to hold.
const INNER_SHARE: f64 = 0.8;

/// Moments within a window that changes little from call to call: what lies deep inside the
/// first window is summed once, the few values beyond are looked at each time.
#[derive(Default)]
struct ClipWindow {
    /// Centre and half width of the inner part; 0 wide before the first call.
    centre: f64,
    inner: f64,
    /// Count, sum and sum of squares of its deviations from that centre.
    moments: (f64, f64, f64),
    /// The values outside it.
    beyond: Vec<f64>,
}

impl ClipWindow {
    /// Count, sum and sum of squares of the deviations from `centre` within ±`half`.
    fn moments(&mut self, values: &[f64], centre: f64, half: f64) -> (usize, f64, f64) {
        let shift = centre - self.centre;
        if self.inner <= 0.0 || shift.abs() + self.inner > half {
            self.split(values, centre, INNER_SHARE * half);
        }
        let (count, sum, square) = self.moments;
        let shift = centre - self.centre;
        // Moments about the new centre from those about the first.
        let about =
            (count, sum - count * shift, square - 2.0 * shift * sum + count * shift * shift);
        let all = self.beyond.iter().fold(about, |total, value| {
            let d = value - centre;
            let kept = if d.abs() <= half { d } else { 0.0 };
            let one = if d.abs() <= half { 1.0 } else { 0.0 };
            (total.0 + one, total.1 + kept, total.2 + kept * kept)
        });
        (all.0 as usize, all.1, all.2)
    }

    fn split(&mut self, values: &[f64], centre: f64, inner: f64) {
        const LANES: usize = 8;
        let (mut sums, mut squares) = ([0.0; LANES], [0.0; LANES]);
        self.beyond.clear();
        let (chunks, rest) = values.as_chunks::<LANES>();
        for chunk in chunks {
            let d = chunk.map(|v| v - centre);
            let mut inside = 0u32;
            for lane in 0..LANES {
                let kept = if d[lane].abs() <= inner { d[lane] } else { 0.0 };
                sums[lane] += kept;
                squares[lane] += kept * kept;
                inside += u32::from(d[lane].abs() <= inner);
            }
            if inside < LANES as u32 {
                let outer =
                    chunk.iter().zip(d).filter(|(_, d)| d.abs().is_nan() || d.abs() > inner);
                self.beyond.extend(outer.map(|(v, _)| *v));
            }
        }
        let mut total = (sums.iter().sum::<f64>(), squares.iter().sum::<f64>());
        for value in rest {
            let d = value - centre;
            if d.abs() <= inner {
                total = (total.0 + d, total.1 + d * d);
            } else {
                self.beyond.push(*value);
            }
        }
        let count = (values.len() - self.beyond.len()) as f64;
        (self.centre, self.inner, self.moments) = (centre, inner, (count, total.0, total.1));
    }
}

/// The clipping loop over any source of window moments.
fn iterate_clip(
    mean: f64,
    rms: f64,
    clip: f64,
    fixed: Option<f64>,
    mut moments: impl FnMut(f64, f64) -> (usize, f64, f64),
) -> Option<Clipped> {
    if !(mean.is_finite() && rms.is_finite() && rms > 0.0 && clip > 0.0) {
        return None;
    }
    let correction = truncated_variance(clip);
    let (mut centre, mut sigma) = (mean, rms);
    let mut result = None;
    for _ in 0..CLIP_ITERATIONS {
        let (used, sum, square) = moments(centre, clip * sigma);
        if used < 2 {
            return None;
        }
        let n = used as f64;
        let (shift, variance) = if fixed.is_some() {
            (0.0, square / n)
        } else {
            (sum / n, (square - sum * sum / n) / (n - 1.0))
        };
        let next =
            Clipped { mean: centre + shift, rms: (variance.max(0.0) / correction).sqrt(), used };
        if !(next.mean.is_finite() && next.rms.is_finite()) {
            return None;
        }
        let still = shift.abs() <= 5e-4 * sigma && (next.rms - sigma).abs() <= 5e-4 * sigma;
        result = Some(next);
        if still || next.rms <= 0.0 {
            break;
        }
        (centre, sigma) = (next.mean, next.rms);
    }
    result
}

/// Φ(z): probability that a normal deviate lies below `z`.
pub fn normal_probability(z: f64) -> f64 {
    0.5 * libm::erfc(-z / std::f64::consts::SQRT_2)
}

/// Φ⁻¹(p): the normal deviate with probability `p` below it; ±38 stands for p = 0 and 1,
/// beyond which a double holds no probability.
pub fn normal_deviate(p: f64) -> f64 {
    if p.is_nan() {
        return 0.0;
    }
    // erfc⁻¹ keeps its digits in the lower tail; the upper one is its mirror image.
    let deviate = |q: f64| -std::f64::consts::SQRT_2 * statrs::function::erf::erfc_inv(2.0 * q);
    let z = if p <= 0.5 { deviate(p.max(0.0)) } else { -deviate((1.0 - p).max(0.0)) };
    z.clamp(-38.0, 38.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Quantiles of the unit Gaussian: a sample without sampling noise.
    fn gaussian_quantiles(n: usize) -> Vec<f64> {
        use statrs::distribution::{ContinuousCDF, Normal};
        let normal = Normal::standard();
        (0..n).map(|i| normal.inverse_cdf((i as f64 + 0.5) / n as f64)).collect()
    }

    fn close(a: f64, b: f64, tolerance: f64) {
        assert!((a - b).abs() < tolerance, "{a} is not {b} within {tolerance}");
    }

    #[test]
    fn quantiles_interpolate_between_order_statistics() {
        // Worked by hand: ranks 0..4 of 1, 2, 4, 8, 16; q = 0.6 is rank 2.4.
        let values = [16.0, 1.0, 8.0, 2.0, 4.0];
        close(quantile(&mut values.clone(), 0.6).expect("five values"), 4.0 + 0.4 * 4.0, 1e-12);
        close(median(&mut [3.0, 1.0, 2.0, 10.0]).expect("four values"), 2.5, 1e-12);
        let mut sorted = values;
        sorted.sort_by(f64::total_cmp);
        for q in [0.0, 0.1, 0.25, 0.5, 0.77, 1.0] {
            let twin = sorted_quantile(&sorted, q).expect("five values");
            close(quantile(&mut values.clone(), q).expect("five values"), twin, 1e-12);
        }
        assert_eq!(median(&mut []), None);
        assert_eq!(quantile(&mut [1.0], 1.5), None);
        assert_eq!(median(&mut [f64::NAN]), None);
    }

    #[test]
    fn sorting_by_bits_is_the_total_order() {
        let mut values: Vec<f64> = (0..500).map(|i| f64::from(i * 7919 % 501) - 250.0).collect();
        values.extend([0.0, -0.0, f64::INFINITY, f64::NEG_INFINITY, f64::NAN, -f64::NAN, 1e-310]);
        let mut twin = values.clone();
        twin.sort_by(f64::total_cmp);
        sort_ascending(&mut values);
        let bits = |v: &[f64]| v.iter().map(|v| v.to_bits()).collect::<Vec<_>>();
        assert_eq!(bits(&values), bits(&twin));
    }

    #[test]
    fn truncated_variance_agrees_with_its_integral() {
        for k in [0.5, 1.0, 2.0, 3.0, 4.5] {
            let steps = 20_000;
            let (mut norm, mut second) = (0.0, 0.0);
            for i in 0..steps {
                let x = -k + 2.0 * k * (f64::from(i) + 0.5) / f64::from(steps);
                let w = (-0.5 * x * x).exp();
                norm += w;
                second += w * x * x;
            }
            close(truncated_variance(k), second / norm, 1e-7);
        }
        close(truncated_variance(50.0), 1.0, 1e-15);
    }

    #[test]
    fn clipping_recovers_a_gaussian_under_bright_outliers() {
        let mut values: Vec<f64> =
            gaussian_quantiles(20_000).iter().map(|v| 7.0 + 0.5 * v).collect();
        values.extend((0..1000).map(|i| 12.0 + f64::from(i)));
        let got = clipped(&values, 6.7, 0.3, 3.0).expect("a start is given");
        close(got.mean, 7.0, 1e-3);
        close(got.rms, 0.5, 2e-3);
        let mut sample = SortedSample::default();
        sample.refill(&mut values.clone());
        let twin = sample.clipped(6.7, 0.3, 3.0).expect("a start is given");
        close(got.mean, twin.mean, 1e-9);
        close(got.rms, twin.rms, 1e-9);
        assert_eq!(got.used, twin.used);
        let about = clipped_about(&values, 7.0, 0.3, 3.0).expect("a start is given");
        close(about.rms, 0.5, 2e-3);
        let mut copy = values.clone();
        let middle = median(&mut copy).expect("not empty");
        // 4.8 % outliers on one side move the MAD by about 7 %.
        close(mad_sigma(&mut copy, middle).expect("not empty"), 0.5, 0.05);
    }

    #[test]
    fn the_mode_stays_on_the_noise_while_emission_holds_three_quarters() {
        let mut values = gaussian_quantiles(2000);
        values.extend((0..6000).map(|i| 0.02 * f64::from(i)));
        let mut sample = SortedSample::default();
        sample.refill(&mut values);
        close(sample.mode().expect("not empty"), 0.0, 0.5);
        close(sample.lower_sigma(0.0, 10).expect("half the noise lies below"), 1.0, 0.02);
        assert_eq!(sample.lower_sigma(-10.0, 1), None, "nothing lies below");
    }

    #[test]
    fn degenerate_samples_give_none() {
        assert_eq!(clipped(&[], 0.0, 1.0, 3.0), None);
        assert_eq!(clipped(&[1.0, 2.0], 0.0, f64::NAN, 3.0), None);
        assert_eq!(clipped(&[1.0, 2.0], 0.0, 0.0, 3.0), None);
        let mut sample = SortedSample::default();
        sample.refill(&mut vec![f64::NAN]);
        assert_eq!(sample.mode(), None);
    }

    #[test]
    fn normal_deviates_are_the_tabled_ones() {
        // Standard normal table: Φ(1) = 0.841345, Φ⁻¹(0.975) = 1.959964, Φ⁻¹(0.95) = 1.644854.
        assert!((normal_probability(1.0) - 0.841_344_746).abs() < 1e-9);
        assert!((normal_deviate(0.975) - 1.959_963_985).abs() < 1e-8);
        assert!((normal_deviate(0.95) - 1.644_853_627).abs() < 1e-8);
        for p in [1e-12, 1e-3, 0.3, 0.5, 0.9] {
            assert!((normal_probability(normal_deviate(p)) / p - 1.0).abs() < 1e-7, "{p}");
        }
        assert!(normal_deviate(0.0) < -37.0 && normal_deviate(1.0) > 37.0);
    }
}
