//! Maps whose low values were cut off: set to a floor, or blanked.

use statrs::distribution::{ContinuousCDF, Normal};

use super::smooth::{Axis, TileValue, node_values};
use super::tiles::axis;
use super::{Field, Noise, NoiseError, NoiseHints, NoiseSettings};
use super::{grow_px, quantisation_floor, source_mask};
use crate::grid::PixelMask;
use crate::stats::{sort_ascending, sorted_quantile};

/// Most of the pixels that may sit at the floor while the rest still shows the noise.
const MOST_AT_FLOOR: f64 = 0.8;

/// The level at which the map was cut off: stated, or the smallest value where many pixels
/// share it exactly (more than the next quantisation step holds). `None` for other maps.
pub(super) fn floor_of(field: &Field, hints: &NoiseHints) -> Option<f64> {
    let step = hints.quantisation_step.max(0.0);
    let floor = hints.clipped_floor.filter(|f| f.is_finite()).unwrap_or(field.lowest);
    let edge = floor + 0.5 * step;
    let at_floor = field.values.iter().filter(|v| **v <= edge).count();
    let share = at_floor as f64 / field.present as f64;
    if hints.clipped_floor.is_some() {
        return (at_floor >= 10).then_some(floor);
    }
    if step > 0.0 {
        let next = field.values.iter().filter(|v| **v > edge && **v <= edge + step).count();
        if share >= 0.02 && at_floor > next && at_floor >= 10 {
            return Some(floor);
        }
        return filled_level(field, step);
    }
    (at_floor >= 10 && share >= 0.005).then_some(floor)
}

/// The level 0 of a quantised map whose lower values were all replaced by 0 (not by the lowest
/// value left): its values end sharply below, and what is missing there is found in excess at 0.
fn filled_level(field: &Field, step: f64) -> Option<f64> {
    // The level 0 as it is stored: steps counted from the lowest one.
    let steps = (-field.lowest / step).round();
    let zero = field.lowest + steps * step;
    if !(steps >= 1.0 && zero.abs() < 0.25 * step) {
        return None;
    }
    // Φ⁻¹ of the share of values below an edge between two levels.
    let normal = Normal::standard();
    let deviate = |edge: f64| {
        let below: usize = field.values.iter().map(|v| usize::from(*v <= edge)).sum();
        let share = below as f64 / field.present as f64;
        (share > 0.0 && share < 1.0).then(|| normal.inverse_cdf(share))
    };
    let first = field.lowest + 0.5 * step;
    let (q0, q1) = (deviate(first)?, deviate(first + step)?);
    // Edges of a Gaussian lie at equal deviates: as many values as that should lie below.
    let missing = normal.cdf(2.0 * q0 - q1) * field.present as f64;
    if q0 < LEAST_LOWEST || missing < LEAST_MISSING {
        return None;
    }
    let above = (deviate(zero + 0.5 * step)?, deviate(zero + 1.5 * step)?);
    let spacing = above.1 - above.0;
    let excess = normal.cdf(above.0 - spacing) - normal.cdf(deviate(zero - 0.5 * step)?);
    let gone = normal.cdf(above.0 - (steps + 1.0) * spacing);
    (excess > 0.5 * gone).then_some(zero)
}

/// Deviate of the share of the lowest level of a map that ends sharply: 0.5 %. The lowest of
/// 10⁴ Gaussian values or more, in steps that show them, is rarer.
const LEAST_LOWEST: f64 = -2.58;
/// Values that must be missing below it: ten independent samples of a wide beam.
const LEAST_MISSING: f64 = 200.0;

/// Background and rms of a map cut off at `floor`. One value for the whole map first: a straight
/// line through (Gaussian quantile, value) of the values above the floor. The first fit
/// uses the lower 60 % of them; emission found with it is masked for the second. Then the rms
/// of each tile, from the share of its values far above the background, as far as the tiles
/// differ by more than their errors.
///
/// # Errors
/// [`NoiseError::NotVisible`] where more than 80 % of the pixels are at the floor, or
/// where a gap above it shows that the noise was cut off as a whole.
pub(super) fn estimate(
    field: &Field,
    settings: &NoiseSettings,
    hints: &NoiseHints,
    floor: f64,
) -> Result<Noise, NoiseError> {
    let step = hints.quantisation_step.max(0.0);
    let lowest_rms = quantisation_floor(hints);
    let mut mask = PixelMask::new(field.columns, field.rows);
    let mut noise = None;
    for round in 0..3 {
        let (above, at_floor) = split(field, &mask, floor + 0.5 * step);
        let total = above.len() + at_floor;
        if total < settings.minimum_pixels {
            return Err(NoiseError::NoEmptySky { found: total, needed: settings.minimum_pixels });
        }
        let share = at_floor as f64 / total as f64;
        let hidden = NoiseError::NotVisible {
            share_percent: 100.0 * share,
            as_what: "at the map's lowest value",
        };
        if round == 0 && gap_above(&above, floor, step) {
            return Err(hidden);
        }
        // Emission is not masked yet in the first round. Steps may be few: all are needed.
        let upper = match round {
            0 => share + 0.6 * (1.0 - share),
            _ if step > 0.0 => 0.999,
            _ => 0.99,
        };
        let emission_rules = share > MOST_AT_FLOOR || heavy_tail(&above, floor + 0.5 * step, step);
        let fit = if round == 0 && emission_rules {
            None
        } else if step > 0.0 {
            fit_steps(&above, at_floor, floor, step, upper)
        } else {
            fit_quantiles(&above, at_floor, upper)
        };
        let (level, rms) = match fit {
            Some((level, rms)) if rms > lowest_rms => (level, rms),
            // Rounding hides the noise: its floor is all that is known.
            _ if step > 0.0 && above.len() < total / 2 => (floor, lowest_rms),
            _ => return Err(hidden),
        };
        let mut model = Noise::uniform(field.columns, field.rows, level, rms);
        model.method = "censored";
        model.quantisation_floor = lowest_rms;
        mask = source_mask(field, &model, settings, grow_px(hints, None));
        model.source_mask = mask.clone();
        noise = Some(model);
    }
    let mut noise =
        noise.ok_or(NoiseError::NoEmptySky { found: 0, needed: settings.minimum_pixels })?;
    let (x, y) = (axis(field.columns, settings, hints), axis(field.rows, settings, hints));
    let even = Noise { source_mask: PixelMask::default(), ..noise.clone() };
    for _ in 0..2 {
        // Masked with an even rms, the noisiest places would miss their highest values.
        let tiles = tile_rms(field, &noise.source_mask, &even, hints, floor, (x, y));
        let Some(nodes) = node_values(&tiles, x, y, true) else { break };
        (noise.nodes_x, noise.nodes_y) = (x.nodes(), y.nodes());
        noise.background_nodes = vec![even.global_background; nodes.len()];
        let rms = |log: &f64| (even.global_rms * libm::exp(*log)).max(lowest_rms);
        noise.rms_nodes = nodes.iter().map(rms).collect();
        noise.source_mask = source_mask(field, &noise, settings, grow_px(hints, None));
    }
    Ok(noise)
}

/// Logarithm of each tile's rms over that of the whole map, with its error: from the share of
/// values above 1.3 rms of the whole map, or above the next edge between two steps.
fn tile_rms(
    field: &Field,
    mask: &PixelMask,
    even: &Noise,
    hints: &NoiseHints,
    floor: f64,
    (x, y): (Axis, Axis),
) -> Vec<TileValue> {
    let (level, rms) = (even.global_background, even.global_rms);
    let step = hints.quantisation_step.max(0.0);
    let lowest_edge = floor + 0.5 * step;
    let wanted = (level + 1.3 * rms).max(lowest_edge);
    let edge = if step > 0.0 {
        lowest_edge + ((wanted - lowest_edge) / step).round() * step
    } else {
        wanted
    };
    let normal = Normal::standard();
    // Pixels per independent sample: the beam's area.
    let per_sample = hints.beam_px.map_or(20.0, |(a, b)| crate::constants::GAUSSIAN_AREA * a * b);
    let tile = |columns: std::ops::Range<usize>, rows: std::ops::Range<usize>| {
        let (mut present, mut above) = (0usize, 0usize);
        for row in rows {
            let line = field.row(row).get(columns.clone())?;
            for (value, masked) in line.iter().zip(mask.row(row).get(columns.clone())?) {
                present += usize::from(!*masked && !value.is_nan());
                above += usize::from(!*masked && *value > edge);
            }
        }
        let samples = present as f64 / per_sample.max(1.0);
        let share = above as f64 / present.max(1) as f64;
        if samples < 5.0 || share <= 0.0 || share > 0.4 {
            return None;
        }
        let q = -normal.inverse_cdf(share);
        let density = libm::exp(-0.5 * q * q) / (2.0 * std::f64::consts::PI).sqrt();
        let error = (share * (1.0 - share) / samples).sqrt() / (density * q);
        let log = libm::log((edge - level) / (q * rms));
        (log.is_finite() && error.is_finite()).then_some((log, error))
    };
    (0..y.count)
        .flat_map(|j| (0..x.count).map(move |i| (i, j)))
        .map(|(i, j)| tile(x.window(i), y.window(j)))
        .collect()
}

/// The unmasked values above `edge`, sorted, and the number of those not above it.
fn split(field: &Field, mask: &PixelMask, edge: f64) -> (Vec<f64>, usize) {
    let mut above = Vec::new();
    let mut at_floor = 0;
    for y in 0..field.rows {
        for (value, masked) in field.row(y).iter().zip(mask.row(y)) {
            if *masked || value.is_nan() {
                continue;
            }
            if *value > edge {
                above.push(*value);
            } else {
                at_floor += 1;
            }
        }
    }
    sort_ascending(&mut above);
    (above, at_floor)
}

/// Whether the smallest value above the floor lies so far above it that a band of values,
/// the noise among them, must have been set to the floor.
fn gap_above(above: &[f64], floor: f64, step: f64) -> bool {
    let (Some(lowest), Some(middle)) = (above.first(), sorted_quantile(above, 0.5)) else {
        return true;
    };
    let gap = lowest - floor;
    let spacing = (middle - lowest) / (0.5 * above.len() as f64);
    gap > 1.5 * step && gap > 20.0 * spacing && gap > 0.02 * (middle - lowest)
}

/// Least-squares line through Gaussian quantiles up to the share `upper`.
fn fit_quantiles(above: &[f64], at_floor: usize, upper: f64) -> Option<(f64, f64)> {
    let total = (above.len() + at_floor) as f64;
    let last = ((upper * total) as usize).saturating_sub(at_floor).min(above.len());
    if last < 20 {
        return None;
    }
    let normal = Normal::standard();
    let samples = last.min(400);
    line((0..samples).filter_map(|i| {
        let rank = ((i as f64 + 0.5) * last as f64 / samples as f64) as usize;
        let share = (at_floor as f64 + rank as f64 + 0.5) / total;
        let q = normal.inverse_cdf(share);
        // Weight: density² over the variance of a share, as for a quantile's error.
        let density = libm::exp(-0.5 * q * q);
        above.get(rank).map(|v| (q, *v, density * density / (share * (1.0 - share))))
    }))
}

/// The same for rounded values: shares at the upper edges of the steps.
fn fit_steps(
    above: &[f64],
    at_floor: usize,
    floor: f64,
    step: f64,
    upper: f64,
) -> Option<(f64, f64)> {
    let total = (above.len() + at_floor) as f64;
    let normal = Normal::standard();
    let mut edges = Vec::new();
    for k in 0..4000 {
        let edge = floor + (f64::from(k) + 0.5) * step;
        let share = (at_floor + above.partition_point(|v| *v <= edge)) as f64 / total;
        if share > upper || share >= 1.0 - 2.0 / total {
            break;
        }
        if share * total >= 3.0 {
            let q = normal.inverse_cdf(share);
            let density = libm::exp(-0.5 * q * q);
            edges.push((q, edge, density * density / (share * (1.0 - share))));
        }
    }
    match edges[..] {
        // One edge alone: the background is taken to be the floor, and an rms above the
        // step would have shown more edges.
        [(q, edge, _)] if q > 0.0 => Some((floor, ((edge - floor) / q).min(step))),
        [_, _, ..] => line(edges.into_iter()),
        _ => None,
    }
}

/// Whether the values above the floor are spread like emission (about evenly in the
/// logarithm) and not like the upper part of noise: there, the distance of the 30 % point
/// from the edge is 2.0 to 2.2 times that of the 15 % point, whatever was cut off.
fn heavy_tail(above: &[f64], edge: f64, step: f64) -> bool {
    // Rounded values are spread evenly over their step.
    let spread = |q: f64| -> Option<f64> {
        let rank = (q * above.len() as f64) as usize;
        let value = *above.get(rank)?;
        let (low, high) =
            (above.partition_point(|v| *v < value), above.partition_point(|v| *v <= value));
        let place = (rank - low) as f64 + 0.5;
        Some(value - edge + step * (place / (high - low).max(1) as f64 - 0.5))
    };
    match (spread(0.15), spread(0.3)) {
        (Some(first), Some(second)) => second > 2.6 * first,
        _ => true,
    }
}

/// Weighted straight line value = level + rms · q, as (level, rms).
fn line(points: impl Iterator<Item = (f64, f64, f64)>) -> Option<(f64, f64)> {
    let (mut w, mut q, mut v, mut qq, mut qv) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for (x, y, weight) in points {
        w += weight;
        q += weight * x;
        v += weight * y;
        qq += weight * x * x;
        qv += weight * x * y;
    }
    let determinant = w * qq - q * q;
    if determinant.is_nan() || determinant <= 1e-12 * w * qq {
        return None;
    }
    let rms = (w * qv - q * v) / determinant;
    let level = (v - rms * q) / w;
    (rms > 0.0 && rms.is_finite() && level.is_finite()).then_some((level, rms))
}

/// Tells maps whose faint pixels were blanked: a sharp lower end of the values, and blank
/// pixels that lie beside the faintest ones.
///
/// # Errors
/// [`NoiseError::NotVisible`] for such a map.
pub(super) fn check_for_cut_to_blank(field: &Field) -> Result<(), NoiseError> {
    let pixels = field.values.len();
    let blank = pixels - field.present;
    if (blank as f64) < 0.1 * pixels as f64 || field.present < 50 {
        return Ok(());
    }
    let mut sorted: Vec<f64> = field.values.iter().copied().filter(|v| !v.is_nan()).collect();
    sort_ascending(&mut sorted);
    let at = |q| sorted_quantile(&sorted, q).unwrap_or(0.0);
    let (low, middle) = (at(0.16), at(0.5));
    // Gaussian values reach 2.5 rms below the middle in 100 samples; a cut distribution
    // ends within 1.7 of what would be one rms.
    if middle - field.lowest > 1.7 * (middle - low) {
        return Ok(());
    }
    let beside: Vec<f64> = (0..field.rows)
        .flat_map(|y| (0..field.columns).map(move |x| (x, y)))
        .filter_map(|(x, y)| {
            let value = field.row(y).get(x).copied().filter(|v| !v.is_nan())?;
            let blank = |x: Option<usize>, y: Option<usize>| match (x, y) {
                (Some(x), Some(y)) if x < field.columns => {
                    field.row(y).get(x).is_some_and(|v| v.is_nan())
                }
                _ => false,
            };
            let beside = blank(x.checked_sub(1), Some(y))
                || blank(Some(x + 1), Some(y))
                || blank(Some(x), y.checked_sub(1))
                || blank(Some(x), Some(y + 1));
            beside.then_some(value)
        })
        .collect();
    let faint = beside.iter().filter(|v| **v < at(0.3)).count();
    if 2 * faint > beside.len() {
        let share_percent = 100.0 * blank as f64 / pixels as f64;
        return Err(NoiseError::NotVisible { share_percent, as_what: "blank beside its faintest" });
    }
    Ok(())
}
