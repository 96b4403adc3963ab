//! The step between stored levels: 1 for most integers, hidden in floating-point data that
//! were integers once, absent in most maps. The noise of a map is never below step / √12.

use super::read::StoredArray;
use crate::stats::sort_ascending;

/// Values looked at in long arrays.
const SAMPLE: usize = 20_000;
/// Fewest values from which a step of floating-point data is believed.
const MIN_SAMPLE: usize = 100;
/// Different values over all values above which the data are called continuous.
const MAX_DISTINCT_FRACTION: f64 = 0.7;

/// Step between the levels of `stored` (the array's values; blanks NaN), 0 if there is none.
pub(super) fn step(array: &StoredArray, stored: &[f64]) -> f64 {
    match array.dtype.as_str() {
        "bool" => 1.0,
        "int8" | "int16" | "uint8" | "uint16" => short_integer_step(stored),
        _ if array.is_integer() => smallest_gap(&sorted_sample(stored)),
        "float64" => float_step(&sorted_sample(stored), f64::EPSILON),
        _ => float_step(&sorted_sample(stored), f64::from(f32::EPSILON)),
    }
}

/// Smallest gap between 8- and 16-bit levels, from all pixels.
fn short_integer_step(stored: &[f64]) -> f64 {
    const LOWEST: f64 = -32768.0;
    let mut present = vec![false; 32768 + 65536];
    for &value in stored.iter().filter(|v| v.is_finite()) {
        // Saturating conversion; 16-bit values all lie inside.
        if let Some(mark) = present.get_mut((value - LOWEST) as usize) {
            *mark = true;
        }
    }
    let levels: Vec<f64> =
        present.iter().enumerate().filter(|(_, p)| **p).map(|(i, _)| i as f64).collect();
    smallest_gap(&levels)
}

/// Up to about [`SAMPLE`] finite values, evenly drawn, in ascending order.
fn sorted_sample(stored: &[f64]) -> Vec<f64> {
    // An odd stride does not fall in step with rows of even length.
    let stride = (stored.len() / SAMPLE) | 1;
    let mut sample: Vec<f64> =
        stored.iter().step_by(stride).copied().filter(|v| v.is_finite()).collect();
    sort_ascending(&mut sample);
    sample
}

fn smallest_gap(sorted: &[f64]) -> f64 {
    let gaps = sorted.windows(2).filter_map(|pair| match pair {
        &[a, b] if b > a => Some(b - a),
        _ => None,
    });
    gaps.reduce(f64::min).unwrap_or(0.0)
}

/// Step of floating-point values that repeat often and all lie on one ladder.
fn float_step(sorted: &[f64], epsilon: f64) -> f64 {
    let (Some(first), Some(last)) = (sorted.first(), sorted.last()) else {
        return 0.0;
    };
    let rounding = 4.0 * epsilon * first.abs().max(last.abs());
    let mut levels: Vec<(f64, usize)> = Vec::new();
    for &value in sorted {
        match levels.last_mut() {
            Some((level, count)) if value - *level <= rounding => *count += 1,
            _ => levels.push((value, 1)),
        }
    }
    // One value may be frequent for another reason: a floor, a fill.
    let most = levels.iter().map(|level| level.1).max().unwrap_or(0);
    let (others, other_levels) = (sorted.len() - most, levels.len().saturating_sub(1));
    if others < MIN_SAMPLE || other_levels as f64 > MAX_DISTINCT_FRACTION * others as f64 {
        return 0.0;
    }
    let levels: Vec<f64> = levels.into_iter().map(|level| level.0).collect();
    let mut step = smallest_gap(&levels);
    if step <= 0.0 {
        return 0.0;
    }
    // Climb the ladder, refining the step by the height reached, so that rounding of single
    // values does not add up.
    let mut rung = 0.0;
    let mut rungs = vec![0.0];
    for pair in levels.windows(2) {
        if let &[a, b] = pair {
            rung += ((b - a) / step).round();
            rungs.push(rung);
            if rung <= 1000.0 {
                step = (b - first) / rung;
            }
        }
    }
    step = (last - first) / rung;
    let fits = levels
        .iter()
        .zip(&rungs)
        .all(|(level, rung)| (level - first - rung * step).abs() < 0.1 * step + rounding);
    if fits && step.is_finite() { step } else { 0.0 }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::map::read::Samples;
    use rand::{RngExt, SeedableRng};

    fn array(dtype: &str) -> StoredArray {
        StoredArray {
            samples: Samples::F64(Vec::new()),
            rows: 0,
            columns: 0,
            format: "npy",
            dtype: dtype.to_owned(),
            shape: Vec::new(),
            sha256: String::new(),
        }
    }

    fn noise(scale: f64) -> Vec<f64> {
        let mut random = rand_pcg::Pcg64Mcg::seed_from_u64(3);
        (0..50_000)
            .map(|_| scale * ((0..12).map(|_| random.random::<f64>()).sum::<f64>() - 6.0))
            .collect()
    }

    #[test]
    fn integers_have_the_gap_of_their_levels() {
        let levels =
            |step: f64| -> Vec<f64> { noise(20.0).iter().map(|v| v.round() * step).collect() };
        for dtype in ["int16", "int32", "int64"] {
            assert!((step(&array(dtype), &levels(1.0)) - 1.0).abs() < 1e-12);
            assert!((step(&array(dtype), &levels(3.0)) - 3.0).abs() < 1e-12);
        }
        assert!(step(&array("uint8"), &[5.0, 5.0, f64::NAN]).abs() < 1e-12);
    }

    #[test]
    fn floating_point_data_show_a_step_only_where_they_have_one() {
        for dtype in ["float32", "float64"] {
            let round = |v: f64| {
                if dtype == "float32" { f64::from(v as f32) } else { v }
            };
            let smooth: Vec<f64> = noise(1e-3).into_iter().map(round).collect();
            assert!(step(&array(dtype), &smooth).abs() < 1e-30, "continuous {dtype}");
            let clipped: Vec<f64> = smooth.iter().map(|v| v.max(0.0)).collect();
            assert!(step(&array(dtype), &clipped).abs() < 1e-30, "clipped {dtype}");
            for levels_per_sigma in [0.7, 3.0, 50.0] {
                let wanted = 1e-3 / levels_per_sigma;
                let stepped: Vec<f64> = noise(1e-3)
                    .into_iter()
                    .map(|v| round((v / wanted).round() * wanted + 0.123e-3))
                    .collect();
                let got = step(&array(dtype), &stepped);
                assert!((got / wanted - 1.0).abs() < 1e-3, "{dtype} {levels_per_sigma}: {got}");
            }
        }
    }
}
