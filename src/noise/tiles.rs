//! Local background and rms from tiles.

use super::smooth::{Axis, TileValue, fit_plane, node_values, points};
use super::{Field, Noise, NoiseError, NoiseHints, NoiseSettings};
use super::{grow_px, grown_mask, quantisation_floor, source_mask};
use crate::grid::PixelMask;
use crate::regions::groups_of_signal;
use crate::stats::{SortedSample, clipped, dot, median, quantile};

/// Tiles larger than this are sampled at every second pixel of both axes in the first look.
const FULL_SAMPLE_PX: usize = 900;

/// Tiles that spread more than this many times the quietest ones are not used to find the
/// level of the sky: an rms that varies by 4 over the map passes.
const QUIET: f64 = 4.0;

/// What was measured in a tile.
#[derive(Clone, Copy, Debug)]
struct Tile {
    background: f64,
    rms: f64,
    used: usize,
}

/// How noise is spread over neighbouring pixels: from the correlation at one pixel's
/// distance along x and y.
#[derive(Clone, Copy, Debug)]
struct Reach {
    /// Sum of the correlation over all lags: pixels per independent sample of the mean.
    mean_px: f64,
    /// Sum of its square: pixels per independent sample of the variance.
    variance_px: f64,
    /// FWHM of the smoothing kernel, geometric mean of both axes.
    fwhm_px: f64,
}

pub(super) fn estimate(
    field: &Field,
    settings: &NoiseSettings,
    hints: &NoiseHints,
) -> Result<Noise, NoiseError> {
    let x = axis(field.columns, settings, hints);
    let y = axis(field.rows, settings, hints);
    let step = hints.quantisation_step.max(0.0);
    let first = first_look(field, settings, x, y, step);
    let needed = settings.minimum_pixels.max(2);
    let no_sky = |found| NoiseError::NoEmptySky { found, needed };
    let guess = Reach { mean_px: 20.0, variance_px: 10.0, fwhm_px: 3.0 };
    let mut noise = model(field, &first, x, y, hints, guess, false).ok_or_else(|| no_sky(0))?;
    let mut reach = None;
    let mut signal = Vec::with_capacity(field.values.len());
    for _ in 0..2 {
        let fwhm = reach.map(|r: Reach| r.fwhm_px);
        normalised_into(field, &noise, &mut signal);
        mask_sources(&mut signal, field, settings, grow_px(hints, fwhm));
        let measured = measure_reach(&signal, field.columns);
        reach = Some(measured);
        let mut found = masked_look(&signal, &noise, settings, x, y, step);
        if found.iter().all(Option::is_none) {
            // No tile has enough empty sky of its own: all of it together.
            let whole = pooled(&signal, &noise, settings);
            let free = signal.iter().filter(|v| !v.is_nan()).count();
            found.fill(Some(whole.ok_or_else(|| no_sky(free))?));
        }
        noise = model(field, &found, x, y, hints, measured, true).ok_or_else(|| no_sky(0))?;
    }
    let fwhm = reach.map(|r| r.fwhm_px);
    noise.source_mask = source_mask(field, &noise, settings, grow_px(hints, fwhm));
    Ok(noise)
}

/// The windows of one axis: at least ten beams wide.
pub(super) fn axis(size: usize, settings: &NoiseSettings, hints: &NoiseHints) -> Axis {
    let wide = match hints.beam_px {
        Some((major, _)) if major.is_finite() && major > 0.0 => settings.tile_beams * major,
        _ => settings.unknown_beam_tile_px as f64,
    };
    let wide = wide.max(settings.minimum_tile_px as f64).max(1.0);
    Axis { size, count: ((size as f64 / wide).floor() as usize).max(1) }
}

/// The first look: mode and lower spread of every tile; emission does not enter.
fn first_look(
    field: &Field,
    settings: &NoiseSettings,
    x: Axis,
    y: Axis,
    step: f64,
) -> Vec<Option<Tile>> {
    let mut buffer = Vec::new();
    let mut samples: Vec<(SortedSample, Option<(f64, f64)>)> = Vec::new();
    for j in 0..y.count {
        for i in 0..x.count {
            let (columns, rows) = (x.window(i), y.window(j));
            let thin = columns.len() * rows.len() > FULL_SAMPLE_PX;
            // Every second pixel counted from the nearer edge: the same for mirrored maps.
            let keep = |at: usize, size: usize| !thin || at.min(size - 1 - at).is_multiple_of(2);
            let kept: Vec<usize> = columns.filter(|c| keep(*c, field.columns)).collect();
            buffer.clear();
            for row in rows.filter(|row| keep(*row, field.rows)) {
                let line = field.row(row);
                buffer.extend(kept.iter().map(|c| line.get(*c).copied().unwrap_or(f64::NAN)));
            }
            let mut sample = SortedSample::default();
            sample.refill(&mut buffer);
            let start =
                (sample.values().len() >= 15).then(|| mode_and_spread(&sample, settings, step));
            samples.push((sample, start.flatten()));
        }
    }
    let mut spreads: Vec<f64> = samples.iter().filter_map(|s| s.1.map(|(_, rms)| rms)).collect();
    // The quietest tiles set the scale: emission may fill all but a few of them.
    let Some(usual) = quantile(&mut spreads, 0.1) else {
        return vec![None; samples.len()];
    };
    // A robust plane through the backgrounds of the quiet tiles tells where the sky is.
    let quiet: Vec<TileValue> = samples
        .iter()
        .map(|s| {
            let quiet = s.1.filter(|(_, rms)| *rms <= QUIET * usual);
            // The quieter, the surer: the weight falls with the fourth power of the rms.
            quiet.map(|(level, rms)| (level, rms * rms / usual))
        })
        .collect();
    let sky = robust_levels(&quiet, x, y, usual);
    samples
        .iter()
        .zip(sky)
        .map(|((sample, start), sky)| {
            let used = sample.values().len();
            let (level, rms) = (*start)?;
            if rms <= QUIET * usual && level - sky <= 3.0 * usual {
                // Where a good part of the tile lies below the sky, that side tells its rms.
                let below = sample.lower_sigma(sky, used / 4).filter(|s| *s > 0.3 * rms);
                let rms = below.map_or(rms, |below| rms.min(1.2 * below).max(0.5 * step));
                return Some(Tile { background: level, rms, used });
            }
            let rms = sample.lower_sigma(sky, (used / 10).max(5))?.max(0.5 * step);
            (rms > 0.0).then_some(Tile { background: sky, rms, used })
        })
        .collect()
}

fn mode_and_spread(
    sample: &SortedSample,
    settings: &NoiseSettings,
    step: f64,
) -> Option<(f64, f64)> {
    let mode = sample.mode()?;
    let spread = sample.lower_sigma(mode, 5).unwrap_or(0.0).max(0.5 * step);
    let kept = sample.clipped(mode, spread, settings.clip_sigma)?;
    let rms = kept.rms.max(0.5 * step);
    (rms > 0.0).then_some((kept.mean, rms))
}

/// Plane of least absolute deviations (iteratively reweighted) at every tile; where there
/// are fewer than six quiet tiles, the median of the quietest of them.
fn robust_levels(quiet: &[TileValue], x: Axis, y: Axis, scale: f64) -> Vec<f64> {
    let mut data = points(quiet, x, y);
    let surest = data.iter().map(|p| p.3).fold(0.0, f64::max);
    // A fifth of the weight: half as noisy again.
    let mut levels: Vec<f64> = data.iter().filter(|p| p.3 >= 0.2 * surest).map(|p| p.2).collect();
    let middle = median(&mut levels).unwrap_or(0.0);
    if data.len() < 6 {
        return vec![middle; quiet.len()];
    }
    let mut plane = None;
    let weights: Vec<f64> = data.iter().map(|p| p.3).collect();
    for _ in 0..12 {
        let Some(fit) = fit_plane(&data) else { break };
        for (p, weight) in data.iter_mut().zip(&weights) {
            let r = p.2 - (fit.level + fit.slope_x * p.0 + fit.slope_y * p.1);
            p.3 = weight / r.abs().max(0.2 * scale);
        }
        plane = Some(fit);
    }
    (0..quiet.len())
        .map(|index| {
            let (px, py) = (x.centre(index % x.count), y.centre(index / x.count));
            plane.map_or(middle, |plane| plane.at(x, y, px, py))
        })
        .collect()
}

/// (value − background)/rms, NaN where blank.
fn normalised_into(field: &Field, noise: &Noise, out: &mut Vec<f64>) {
    out.clear();
    let (mut background, mut rms) = (Vec::new(), Vec::new());
    for y in 0..field.rows {
        noise.row_into(y, &mut background, &mut rms);
        let row = field.row(y).iter().zip(background.iter().zip(&rms));
        out.extend(row.map(|(value, (level, rms))| (value - level) / rms));
    }
}

/// Makes NaN of what [`source_mask`] masks, found in the normalised values themselves.
fn mask_sources(signal: &mut [f64], field: &Field, settings: &NoiseSettings, grow_px: f64) {
    let (outline, detection) = (settings.outline_sigma, settings.detection_sigma);
    let columns = field.columns;
    let groups = groups_of_signal(signal, columns, outline.min(detection), detection);
    if groups.is_empty() {
        return;
    }
    let mask = grown_mask(&groups, columns, field.rows, grow_px);
    for (y, line) in signal.chunks_exact_mut(columns.max(1)).enumerate() {
        let row = mask.row(y);
        if row.contains(&true) {
            for (value, _) in line.iter_mut().zip(row).filter(|(_, masked)| **masked) {
                *value = f64::NAN;
            }
        }
    }
}

/// Clipped mean and rms of what is not masked in every tile.
fn masked_look(
    signal: &[f64],
    noise: &Noise,
    settings: &NoiseSettings,
    x: Axis,
    y: Axis,
    step: f64,
) -> Vec<Option<Tile>> {
    let mut buffer: Vec<f64> = Vec::new();
    let mut out = Vec::with_capacity(x.count * y.count);
    for j in 0..y.count {
        for i in 0..x.count {
            let (columns, rows) = (x.window(i), y.window(j));
            let area = columns.len() * rows.len();
            buffer.clear();
            for row in rows {
                let start = row * x.size;
                let line = signal.get(start + columns.start..start + columns.end).unwrap_or(&[]);
                // Counted first: most lines are whole and are copied at once.
                if line.iter().map(|v| usize::from(v.is_nan())).sum::<usize>() == 0 {
                    buffer.extend_from_slice(line);
                } else {
                    buffer.extend(line.iter().filter(|v| !v.is_nan()));
                }
            }
            let enough = (settings.minimum_usable * area as f64).max(20.0);
            let measured = (buffer.len() as f64 >= enough)
                .then(|| {
                    let at = (x.centre(i), y.centre(j));
                    clipped_tile(
                        &buffer,
                        noise.background(at.0, at.1),
                        noise.rms(at.0, at.1),
                        step,
                        settings,
                    )
                })
                .flatten();
            out.push(measured);
        }
    }
    out
}

/// A tile from values normalised by a model's `level` and `rms` there.
fn clipped_tile(
    signal: &[f64],
    level: f64,
    rms: f64,
    step: f64,
    settings: &NoiseSettings,
) -> Option<Tile> {
    // Rounded values need a window that reaches the neighbouring steps.
    let start = (0.5 * step / rms).max(1.0);
    let kept = clipped(signal, 0.0, start, settings.clip_sigma)?;
    let found = kept.rms.max(step / 12f64.sqrt() / rms);
    let used = signal.len();
    (found > 0.0).then_some(Tile { background: level + kept.mean * rms, rms: found * rms, used })
}

fn pooled(signal: &[f64], noise: &Noise, settings: &NoiseSettings) -> Option<Tile> {
    let all: Vec<f64> = signal.iter().copied().filter(|v| !v.is_nan()).collect();
    if all.len() < settings.minimum_pixels.max(2) {
        return None;
    }
    clipped_tile(&all, noise.global_background, noise.global_rms, 0.0, settings)
}

/// Correlation at one pixel's distance and what a Gaussian of that width sums to.
fn measure_reach(signal: &[f64], columns: usize) -> Reach {
    let ratio = |(product, power): (f64, f64)| {
        if power > 0.0 { (product / power).clamp(0.0, 0.999) } else { 0.0 }
    };
    let (mut along, mut across) = ((0.0, 0.0), (0.0, 0.0));
    let mut previous: Option<(&[f64], Option<f64>)> = None;
    for row in signal.chunks_exact(columns.max(1)) {
        let square = whole_square(row);
        let shifted = row.get(1..).unwrap_or(&[]);
        let ends = row.first().zip(row.last()).map(|(a, b)| 0.5 * (a * a + b * b));
        add(
            &mut along,
            match square.zip(ends) {
                Some((square, ends)) => (dot(row, shifted), square - ends),
                None => pair_moments(row, shifted),
            },
        );
        if let Some((above, above_square)) = previous {
            add(
                &mut across,
                match above_square.zip(square) {
                    Some((one, other)) => (dot(above, row), 0.5 * (one + other)),
                    None => pair_moments(above, row),
                },
            );
        }
        previous = Some((row, square));
    }
    let (rho_x, rho_y) = (ratio(along), ratio(across));
    // ρ(d) = ρ(1)^(d²): sums over integer lags, squares with twice the exponent.
    let sum = |rho: f64, power: f64| {
        1.0 + 2.0
            * (1..200)
                .map(|d| rho.powf(power * f64::from(d * d)))
                .take_while(|v| *v > 1e-6)
                .sum::<f64>()
    };
    let fwhm = |rho: f64| {
        if rho < 1e-3 { 0.5 } else { (2.0 * std::f64::consts::LN_2 / -rho.ln()).sqrt() }
    };
    Reach {
        mean_px: sum(rho_x, 1.0) * sum(rho_y, 1.0),
        variance_px: sum(rho_x, 2.0) * sum(rho_y, 2.0),
        fwhm_px: (fwhm(rho_x) * fwhm(rho_y)).sqrt(),
    }
}

fn add(sums: &mut (f64, f64), (product, power): (f64, f64)) {
    sums.0 += product;
    sums.1 += power;
}

/// Sum of the squares of a row whose values all lie within ±4 (and are not NaN): its pairs
/// need no looking at one by one.
fn whole_square(row: &[f64]) -> Option<f64> {
    let outside: usize = row.iter().map(|v| usize::from(v.is_nan() | (v.abs() > 4.0))).sum();
    (outside == 0).then(|| dot(row, row))
}

/// Sums of a b and of (a² + b²)/2 over pairs that are both within ±4 (and not NaN).
fn pair_moments(a: &[f64], b: &[f64]) -> (f64, f64) {
    const LANES: usize = 8;
    let shared = a.len().min(b.len());
    let (a, b) = (a.get(..shared).unwrap_or(&[]), b.get(..shared).unwrap_or(&[]));
    let term = |a: f64, b: f64| {
        let both = (a.abs() <= 4.0) & (b.abs() <= 4.0);
        if both { (a * b, 0.5 * (a * a + b * b)) } else { (0.0, 0.0) }
    };
    let (mut products, mut powers) = ([0.0; LANES], [0.0; LANES]);
    let (a_chunks, a_rest) = a.as_chunks::<LANES>();
    let (b_chunks, b_rest) = b.as_chunks::<LANES>();
    for (a, b) in a_chunks.iter().zip(b_chunks) {
        for lane in 0..LANES {
            let (product, power) = term(a[lane], b[lane]);
            products[lane] += product;
            powers[lane] += power;
        }
    }
    let mut sums = (products.iter().sum::<f64>(), powers.iter().sum::<f64>());
    for (a, b) in a_rest.iter().zip(b_rest) {
        let (product, power) = term(*a, *b);
        sums = (sums.0 + product, sums.1 + power);
    }
    sums
}

/// The smooth model through the tiles.
fn model(
    field: &Field,
    tiles: &[Option<Tile>],
    x: Axis,
    y: Axis,
    hints: &NoiseHints,
    reach: Reach,
    shrink: bool,
) -> Option<Noise> {
    let mut backgrounds: Vec<TileValue> = Vec::with_capacity(tiles.len());
    let mut logs: Vec<TileValue> = Vec::with_capacity(tiles.len());
    let (mut weight, mut power, mut level) = (0.0, 0.0, 0.0);
    for tile in tiles {
        let Some(tile) = tile else {
            backgrounds.push(None);
            logs.push(None);
            continue;
        };
        let used = tile.used as f64;
        let for_mean = (used / reach.mean_px).max(1.5);
        let for_variance = (used / reach.variance_px).max(1.5);
        // The mean taken off hides its own variance; the mean of ln s lies below ln σ.
        let unbiased = if shrink {
            -0.5 * libm::log(1.0 - 1.0 / for_mean.max(2.0)) + 0.5 / for_variance
        } else {
            0.0
        };
        backgrounds.push(Some((tile.background, tile.rms / for_mean.sqrt())));
        // Clipping costs a little of the sample's information on the spread.
        logs.push(Some((libm::log(tile.rms) + unbiased, 1.1 / (2.0 * for_variance).sqrt())));
        weight += used;
        power += used * tile.rms * tile.rms * libm::exp(2.0 * unbiased - 1.0 / for_variance);
        level += used * tile.background;
    }
    if weight <= 0.0 {
        return None;
    }
    let floor = quantisation_floor(hints);
    let (mean, root) = (level / weight, (power / weight).sqrt());
    let background_nodes = node_values(&backgrounds, x, y, shrink)?;
    let rms_nodes: Vec<f64> = node_values(&logs, x, y, shrink)?
        .iter()
        .map(|log| libm::exp(*log).max(floor).max(f64::MIN_POSITIVE))
        .collect();
    let finite = |values: &[f64]| values.iter().all(|v| v.is_finite());
    if !(finite(&background_nodes) && finite(&rms_nodes) && root.is_finite()) {
        return None;
    }
    Some(Noise {
        columns: field.columns,
        rows: field.rows,
        nodes_x: x.nodes(),
        nodes_y: y.nodes(),
        background_nodes,
        rms_nodes,
        method: if x.count * y.count > 1 { "local" } else { "global" },
        global_rms: root.max(floor).max(f64::MIN_POSITIVE),
        global_background: mean,
        quantisation_floor: floor,
        source_mask: PixelMask::new(field.columns, field.rows),
    })
}
