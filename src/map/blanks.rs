//! Blank regions, clipped floors and saturated plateaus that nobody told us about, found in
//! the stored values.
//!
//! Blank regions are often filled with one value, mostly zero. In floating-point data a
//! connected block of identical values cannot be noise. It need not be blank, though: a map
//! clipped from below has its floor there, and a saturated one its ceiling.

use crate::stats::{PresentRange, sort_ascending};

/// Pixels a block of identical values needs before it counts.
const MIN_BLOCK_PIXELS: usize = 64;
/// Columns and rows it must span.
const MIN_BLOCK_SPAN: usize = 8;
/// Fraction of the map that must equal its minimum before it is called clipped: 2 % is
/// Gaussian noise clipped at −2σ.
const MIN_CLIPPED_FRACTION: f64 = 0.02;
/// Beyond this fraction a floor is a floor even where the next brightness is far above it:
/// the map was masked by a threshold, and what is left is the source.
const MASKED_FRACTION: f64 = 0.5;
/// Below this fraction of equal neighbours quantised noise has no large blocks: half of the
/// bonds of a square lattice must be joined before it hangs together (H. Kesten 1980).
const MAX_EQUAL_NEIGHBOURS: f64 = 0.25;
/// Pixels looked at together where equal neighbours are looked for.
const STRETCH: usize = 16;
/// Most different fill values looked for.
const MAX_FILL_VALUES: usize = 32;
/// Most neighbours of the floor whose heights above it are compared.
const MAX_GAPS: usize = 100_000;

/// What the stored values say about themselves.
#[derive(Clone, Debug, Default, PartialEq)]
pub(super) struct Findings {
    /// Values that fill blank regions.
    pub fill_values: Vec<f64>,
    /// Stored value below which the map was clipped.
    pub clipped_floor: Option<f64>,
    /// Pixels of connected plateaus at the map's maximum.
    pub plateau_pixels: usize,
}

/// The extremes of the map and how often they occur.
struct Extremes {
    lowest: f64,
    lowest_count: usize,
    second_lowest: f64,
    second_lowest_count: usize,
    highest: f64,
    second_highest: f64,
    finite: usize,
}

impl Extremes {
    /// `None` where there are fewer than two different values.
    fn of(stored: &[f64]) -> Option<Self> {
        let PresentRange { count: finite, lowest, highest } = PresentRange::of(stored);
        // Plain passes over the array, each of them many pixels at a time.
        const LANES: usize = 8;
        let (mut low, mut high) = ([f64::INFINITY; LANES], [f64::NEG_INFINITY; LANES]);
        let (chunks, rest) = stored.as_chunks::<LANES>();
        let above = |v: f64, low: f64| if v > lowest && v < low { v } else { low };
        let below = |v: f64, high: f64| if v < highest && v > high { v } else { high };
        for chunk in chunks {
            for lane in 0..LANES {
                low[lane] = above(chunk[lane], low[lane]);
                high[lane] = below(chunk[lane], high[lane]);
            }
        }
        let second_lowest = low.iter().chain(rest).fold(f64::INFINITY, |low, v| above(*v, low));
        let second_highest =
            high.iter().chain(rest).fold(f64::NEG_INFINITY, |high, v| below(*v, high));
        let count = |level: f64| -> usize {
            stored.iter().map(|v| usize::from((*v - level).abs() <= 0.0)).sum()
        };
        (second_lowest.is_finite() && second_highest.is_finite()).then(|| Self {
            lowest,
            lowest_count: count(lowest),
            second_lowest,
            second_lowest_count: count(second_lowest),
            highest,
            second_highest,
            finite,
        })
    }

    fn has_low_outlier(&self) -> bool {
        self.second_lowest - self.lowest > self.highest - self.second_lowest
    }

    fn has_high_outlier(&self) -> bool {
        self.highest - self.second_highest > self.second_highest - self.lowest
    }
}

/// Looks for fill values, a clipped floor and plateaus. Blanks already known are NaN, zeros
/// have no sign. `step` is the quantisation step of the stored values, 0 if there is none;
/// whole numbers (`is_integer`) have identical neighbours anyway and are not searched for
/// blocks.
pub(super) fn inspect(stored: &[f64], columns: usize, step: f64, is_integer: bool) -> Findings {
    let mut findings = Findings::default();
    let Some(extremes) = Extremes::of(stored) else {
        return findings;
    };
    findings.clipped_floor = clipped_floor(stored, columns, step, &extremes);
    let fraction = extremes.lowest_count as f64 / extremes.finite as f64;
    let is_masked = findings.clipped_floor.is_some() && fraction > MASKED_FRACTION;
    // Without noise, identical values say nothing about blanks.
    if is_integer || is_masked {
        return findings;
    }
    let mut refused: Vec<f64> = Vec::new();
    for block in blocks(stored, columns) {
        let value = block.value;
        let same = |other: &f64| other.total_cmp(&value).is_eq();
        if same(&extremes.highest) && !extremes.has_high_outlier() {
            findings.plateau_pixels += block.pixels;
            continue;
        }
        let is_floor = same(&extremes.lowest) && findings.clipped_floor.is_some();
        let known = findings.fill_values.iter().chain(&refused).any(same);
        if is_floor || known || findings.fill_values.len() + refused.len() >= MAX_FILL_VALUES {
            continue;
        }
        let by_chance = step > 0.0
            && equal_neighbours(stored, columns, value) > MAX_EQUAL_NEIGHBOURS
            && !stands_out(stored, value, step);
        if by_chance {
            refused.push(value);
        } else {
            findings.fill_values.push(value);
        }
    }
    findings
}

/// Fraction of neighbours within a row that are equal, pairs with `value` left out.
fn equal_neighbours(stored: &[f64], columns: usize, value: f64) -> f64 {
    let (mut pairs, mut equal) = (0usize, 0usize);
    for row in stored.chunks(columns.max(1)) {
        for pair in row.windows(2) {
            if let &[a, b] = pair
                && a.is_finite()
                && b.is_finite()
                && a.total_cmp(&value).is_ne()
                && b.total_cmp(&value).is_ne()
            {
                pairs += 1;
                equal += usize::from(a.total_cmp(&b).is_eq());
            }
        }
    }
    equal as f64 / pairs.max(1) as f64
}

/// Whether a level of quantised values holds far more pixels than its two neighbours.
fn stands_out(stored: &[f64], value: f64, step: f64) -> bool {
    let (mut own, mut below, mut above) = (0usize, 0usize, 0usize);
    for &v in stored {
        let levels = (v - value) / step;
        if levels.abs() < 0.5 {
            own += 1;
        } else if (0.5..1.5).contains(&levels) {
            above += 1;
        } else if levels < 0.0 && levels > -1.5 {
            below += 1;
        }
    }
    own > 5 * below.max(above)
}

/// The floor of a clipped map, if it is one.
///
/// Three things tell a floor from a fill value: it is the minimum, it is frequent, and the
/// brightness beside it begins right above it (or hardly anything else is left).
fn clipped_floor(stored: &[f64], columns: usize, step: f64, extremes: &Extremes) -> Option<f64> {
    let fraction = extremes.lowest_count as f64 / extremes.finite as f64;
    let is_frequent = fraction > MIN_CLIPPED_FRACTION
        && extremes.lowest_count >= MIN_BLOCK_PIXELS
        && extremes.lowest_count > extremes.second_lowest_count;
    if !is_frequent || extremes.has_low_outlier() {
        return None;
    }
    let next_level = step > 0.0 && extremes.second_lowest - extremes.lowest <= 1.5 * step;
    if next_level || begins_at_floor(stored, columns, extremes.lowest) {
        Some(extremes.lowest)
    } else if fraction > MASKED_FRACTION {
        Some(extremes.second_lowest)
    } else {
        None
    }
}

/// Whether the heights of the floor's neighbours above it go down to nothing: their lowest
/// tenth lies below 0.3 of their median (0.19 for Gaussian noise cut at its mean, 0.15 for
/// an exponential, 1 for a step).
fn begins_at_floor(stored: &[f64], columns: usize, floor: f64) -> bool {
    let mut gaps = Vec::new();
    let mut compare = |a: f64, b: f64| {
        let (low, high) = (a.min(b), a.max(b));
        if low.total_cmp(&floor).is_eq() && high > floor && gaps.len() < MAX_GAPS {
            gaps.push(high - floor);
        }
    };
    for row in stored.chunks(columns.max(1)) {
        for pair in row.windows(2) {
            if let &[a, b] = pair {
                compare(a, b);
            }
        }
    }
    for (&a, &b) in stored.iter().zip(stored.iter().skip(columns)) {
        compare(a, b);
    }
    sort_ascending(&mut gaps);
    match (gaps.get(gaps.len() / 10), gaps.get(gaps.len() / 2)) {
        (Some(tenth), Some(median)) => *tenth < 0.3 * median,
        _ => false,
    }
}

struct Block {
    value: f64,
    pixels: usize,
}

/// Connected (by sides) blocks of identical values that are large enough.
fn blocks(stored: &[f64], columns: usize) -> Vec<Block> {
    let mut found = Vec::new();
    if columns < MIN_BLOCK_SPAN {
        return found;
    }
    let mut seen = vec![false; stored.len()];
    let mut open = Vec::new();
    // Most stretches hold no equal neighbours: told many pixels at a time.
    let dull = |start: usize| {
        let one = stored.get(start..).and_then(|rest| rest.first_chunk::<STRETCH>());
        let right = stored.get(start + 1..).and_then(|rest| rest.first_chunk::<STRETCH>());
        let down = stored.get(start + columns..).and_then(|rest| rest.first_chunk::<STRETCH>());
        let (Some(one), Some(right), Some(down)) = (one, right, down) else { return false };
        let mut equal = 0u32;
        for k in 0..STRETCH {
            let same = |other: f64| (one[k] - other).abs() <= 0.0;
            equal |= u32::from(same(right[k]) | same(down[k]));
        }
        equal == 0
    };
    let starts = (0..stored.len())
        .step_by(STRETCH)
        .filter(|start| !dull(*start))
        .flat_map(|start| start..(start + STRETCH).min(stored.len()));
    for start in starts {
        let value = stored[start];
        let begins = |i: usize| stored.get(i).is_some_and(|v| v.total_cmp(&value).is_eq());
        if !value.is_finite() || seen.get(start) != Some(&false) {
            continue;
        }
        if !begins(start + 1) && !begins(start + columns) {
            continue;
        }
        let (mut pixels, mut left, mut right) = (0usize, usize::MAX, 0usize);
        let mut bottom = start / columns;
        if let Some(mark) = seen.get_mut(start) {
            *mark = true;
        }
        open.push(start);
        while let Some(at) = open.pop() {
            let (row, column) = (at / columns, at % columns);
            pixels += 1;
            left = left.min(column);
            right = right.max(column);
            bottom = bottom.max(row);
            let neighbours = [
                (column > 0).then(|| at - 1),
                (column + 1 < columns).then_some(at + 1),
                at.checked_sub(columns),
                Some(at + columns),
            ];
            for next in neighbours.into_iter().flatten() {
                if begins(next)
                    && let Some(mark) = seen.get_mut(next).filter(|mark| !**mark)
                {
                    *mark = true;
                    open.push(next);
                }
            }
        }
        let height = bottom + 1 - start / columns;
        if pixels >= MIN_BLOCK_PIXELS
            && right + 1 - left >= MIN_BLOCK_SPAN
            && height >= MIN_BLOCK_SPAN
        {
            found.push(Block { value, pixels });
        }
    }
    found
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{RngExt, SeedableRng};

    const SIDE: usize = 128;

    /// Noise of standard deviation 1 (sum of twelve uniform numbers).
    fn noise() -> Vec<f64> {
        let mut random = rand_pcg::Pcg64Mcg::seed_from_u64(7);
        (0..SIDE * SIDE)
            .map(|_| (0..12).map(|_| random.random::<f64>()).sum::<f64>() - 6.0)
            .collect()
    }

    /// Mean of 5 × 5 neighbours: noise with a beam.
    fn smooth_noise() -> Vec<f64> {
        let rough = noise();
        let at = |x: usize, y: usize| rough[(y % SIDE) * SIDE + x % SIDE];
        (0..SIDE * SIDE)
            .map(|i| (0..25).map(|k| at(i % SIDE + k % 5, i / SIDE + k / 5)).sum::<f64>() / 5.0)
            .collect()
    }

    fn outside_circle(i: usize) -> bool {
        let middle = (SIDE as f64 - 1.0) / 2.0;
        ((i % SIDE) as f64 - middle).hypot((i / SIDE) as f64 - middle) > SIDE as f64 / 2.0
    }

    #[test]
    fn plain_noise_has_nothing_to_report() {
        assert_eq!(inspect(&noise(), SIDE, 0.0, false), Findings::default());
        assert_eq!(inspect(&smooth_noise(), SIDE, 0.0, false), Findings::default());
        assert_eq!(inspect(&[1.0; 400], 20, 0.0, false), Findings::default());
        assert_eq!(inspect(&[], 0, 0.0, false), Findings::default());
    }

    #[test]
    fn corners_filled_with_one_value_are_blank() {
        for fill in [0.0, -9999.0, 1e30, 0.25] {
            for map in [noise(), smooth_noise()] {
                let filled: Vec<f64> =
                    (0..map.len()).map(|i| if outside_circle(i) { fill } else { map[i] }).collect();
                let got = inspect(&filled, SIDE, 0.0, false);
                assert_eq!(got.fill_values, [fill]);
                assert_eq!((got.clipped_floor, got.plateau_pixels), (None, 0), "{fill}");
            }
        }
    }

    #[test]
    fn a_clipped_map_keeps_its_floor() {
        // Clipped at −1, 0, 1 and 3 σ: from a sixth to nearly all pixels on the floor.
        for floor in [-1.0, 0.0, 1.0, 3.0] {
            for map in [noise(), smooth_noise()] {
                let mut clipped: Vec<f64> = map.iter().map(|v| v.max(floor)).collect();
                clipped[SIDE * 64 + 64] = 50.0;
                let got = inspect(&clipped, SIDE, 0.0, false);
                // So few pixels stand above 3 σ that the lowest of them may be the answer.
                let found = got.clipped_floor.expect("clipped");
                assert!((0.0..0.05).contains(&(found - floor)), "{floor}: {found}");
                assert!(floor > 2.0 || (found - floor).abs() < 1e-12, "{floor}: {found}");
                assert!(got.fill_values.is_empty(), "{floor}: {got:?}");
            }
        }
    }

    #[test]
    fn a_masked_map_is_clipped_at_its_threshold() {
        // A Gaussian source, everything below 5 set to 0.
        let map: Vec<f64> = (0..SIDE * SIDE)
            .map(|i| {
                let (dx, dy) = ((i % SIDE) as f64 - 60.2, (i / SIDE) as f64 - 70.7);
                let v = 100.0 * (-(dx * dx + dy * dy) / 100.0).exp();
                if v < 5.0 { 0.0 } else { v }
            })
            .collect();
        let got = inspect(&map, SIDE, 0.0, false);
        let lowest_left = map.iter().copied().filter(|v| *v > 0.0).fold(f64::MAX, f64::min);
        let floor = got.clipped_floor.expect("clipped");
        assert!(floor.abs() < 1e-12 || (floor - lowest_left).abs() < 1e-12, "{floor}");
        assert!(got.fill_values.is_empty());
    }

    #[test]
    fn a_ceiling_is_a_plateau_and_not_blank() {
        let map: Vec<f64> = noise()
            .iter()
            .enumerate()
            .map(|(i, v)| {
                let (dx, dy) = ((i % SIDE) as f64 - 64.0, (i / SIDE) as f64 - 64.0);
                (v + 200.0 * (-(dx * dx + dy * dy) / 200.0).exp()).min(60.0)
            })
            .collect();
        let got = inspect(&map, SIDE, 0.0, false);
        assert!(got.fill_values.is_empty() && got.clipped_floor.is_none());
        // 200 exp(−r²/200) > 60 for r² < 200 ln(10/3): π·240.8 = 756 pixels.
        assert!((got.plateau_pixels as f64 - 756.0).abs() < 30.0, "{}", got.plateau_pixels);
    }

    #[test]
    fn coarse_levels_are_not_blank_but_a_fill_among_them_is() {
        let coarse: Vec<f64> =
            smooth_noise().iter().map(|v| (v / 0.5).round() * 0.5 + 0.0).collect();
        assert_eq!(inspect(&coarse, SIDE, 0.5, false), Findings::default());
        let filled: Vec<f64> =
            (0..coarse.len()).map(|i| if outside_circle(i) { -50.0 } else { coarse[i] }).collect();
        assert_eq!(inspect(&filled, SIDE, 0.5, false).fill_values, [-50.0]);
    }

    #[test]
    fn a_patch_of_zeros_in_finely_quantised_data_is_blank() {
        // 0.04 σ per level: the zeros are not much more frequent than their neighbours.
        let patched: Vec<f64> = smooth_noise()
            .iter()
            .enumerate()
            .map(|(i, v)| {
                let inside = i % SIDE < 20 && i / SIDE < 20;
                if inside { 0.0 } else { (v / 0.04).round() * 0.04 + 0.0 }
            })
            .collect();
        assert_eq!(inspect(&patched, SIDE, 0.04, false).fill_values, [0.0]);
    }

    #[test]
    fn extremes_are_counted_in_one_pass_as_in_several() {
        let map: Vec<f64> = noise().iter().map(|v| (v * 2.0).round() + 0.0).collect();
        let sorted = |mut v: Vec<f64>| {
            v.sort_by(f64::total_cmp);
            v
        };
        let all = sorted(map.clone());
        let levels = {
            let mut l = all.clone();
            l.dedup();
            l
        };
        let count = |level: f64| all.iter().filter(|v| (**v - level).abs() < 0.1).count();
        let got = Extremes::of(&map).expect("several levels");
        let n = levels.len();
        for (got, wanted) in [
            (got.lowest, levels[0]),
            (got.second_lowest, levels[1]),
            (got.second_highest, levels[n - 2]),
            (got.highest, levels[n - 1]),
        ] {
            assert!((got - wanted).abs() < 1e-12);
        }
        assert_eq!(got.lowest_count, count(levels[0]));
        assert_eq!(got.second_lowest_count, count(levels[1]));
        assert_eq!(got.finite, map.len());
    }

    #[test]
    fn integer_maps_report_floors_only() {
        let map: Vec<f64> = smooth_noise().iter().map(|v| (v * 4.0).round().max(0.0)).collect();
        let got = inspect(&map, SIDE, 1.0, true);
        assert_eq!(got, Findings { clipped_floor: Some(0.0), ..Findings::default() });
    }
}
