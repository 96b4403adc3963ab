//! Connected regions above the noise, and the local maxima in them.
//!
//! A region is a set of 8-connected pixels at or above the outline threshold of which at
//! least one reaches the detection threshold (hysteresis). Pixels are held as runs; the
//! labels of a whole map are never stored.

use kiddo::{ImmutableKdTree, SquaredEuclidean};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::grid::{Grid, PixelMask};
use crate::noise::Noise;

/// Consecutive pixels of one row: columns `x0..=x1` of row `y`.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub struct Run {
    /// Row.
    pub y: usize,
    /// First column.
    pub x0: usize,
    /// Last column, included.
    pub x1: usize,
}

impl Run {
    /// Number of pixels.
    pub const fn len(&self) -> usize {
        self.x1 + 1 - self.x0
    }

    /// Never: a run holds at least one pixel.
    pub const fn is_empty(&self) -> bool {
        false
    }
}

/// A local maximum or a region's brightest place.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Peak {
    /// Column.
    pub x: f64,
    /// Row, as stored.
    pub y: f64,
    /// Value of the map there, background included, in the map's unit.
    pub value: f64,
    /// (value − background) / local rms.
    pub snr: f64,
}

/// The smallest box that holds a region; all four are included.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct PixelBox {
    /// First column.
    pub x0: usize,
    /// First row.
    pub y0: usize,
    /// Last column.
    pub x1: usize,
    /// Last row.
    pub y1: usize,
}

/// A connected region above the noise.
#[derive(Clone, Debug, PartialEq)]
pub struct Region {
    /// Its pixels, sorted by row and column.
    pub runs: Vec<Run>,
    /// Number of pixels.
    pub area_px: usize,
    /// Its brightest pixel. Where several pixels share the largest value (a saturated
    /// core) this is the mean of their positions.
    pub peak: Peak,
    /// Largest (value − background) / rms of its pixels.
    pub peak_snr: f64,
    /// Sum of value − background over its pixels, in the map's unit times pixels.
    pub sum: f64,
    /// Brightness-weighted mean position (column, row).
    pub centroid: (f64, f64),
    /// Its box.
    pub bbox: PixelBox,
    /// Whether it holds a pixel of the map's outermost rows or columns.
    pub touches_edge: bool,
    /// Whether one of the eight neighbours of its pixels is blank.
    pub touches_blank: bool,
}

impl Region {
    /// Whether the pixel belongs to the region.
    pub fn contains(&self, x: usize, y: usize) -> bool {
        let after = self.runs.partition_point(|run| (run.y, run.x0) <= (y, x));
        after
            .checked_sub(1)
            .and_then(|i| self.runs.get(i))
            .is_some_and(|run| run.y == y && run.x1 >= x)
    }
}

/// How regions are found.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct RegionSettings {
    /// A region needs one pixel at or above this many rms. Default 5: in 10⁵ independent
    /// samples noise reaches it with a chance of 3 %.
    pub detection_sigma: f64,
    /// Its outline lies at this many rms. Default 3.
    pub outline_sigma: f64,
    /// Fewest pixels; smaller ones are left out. Default 1 (the caller ties it to the beam).
    pub minimum_area_px: usize,
}

impl Default for RegionSettings {
    fn default() -> Self {
        Self { detection_sigma: 5.0, outline_sigma: 3.0, minimum_area_px: 1 }
    }
}

/// Finds the regions above the noise. Sorted by the value of the peak, brightest first;
/// equal peaks by area (larger first), then by their first pixel in raster order.
///
/// A map without pixels above the detection threshold gives an empty list.
pub fn find_regions(grid: &dyn Grid, noise: &Noise, settings: &RegionSettings) -> Vec<Region> {
    let outline = settings.outline_sigma.min(settings.detection_sigma);
    let groups = groups_above(grid, noise, outline, settings.detection_sigma, false);
    let mut regions: Vec<Region> = groups
        .into_iter()
        .filter(|runs| runs.iter().map(Run::len).sum::<usize>() >= settings.minimum_area_px.max(1))
        .filter_map(|runs| describe(grid, noise, runs))
        .collect();
    regions.sort_by(|a, b| {
        let by_peak = b.peak.value.total_cmp(&a.peak.value);
        by_peak.then(b.area_px.cmp(&a.area_px)).then_with(|| a.runs.first().cmp(&b.runs.first()))
    });
    regions
}

/// Pixels of a row that are looked at together.
const LANES: usize = 8;

/// The runs of every hysteresis group of (v − background)/rms; `both_signs` takes holes as
/// deep as the peaks too.
pub(crate) fn groups_above(
    grid: &dyn Grid,
    noise: &Noise,
    outline: f64,
    detection: f64,
    both_signs: bool,
) -> Vec<Vec<Run>> {
    let (mut values, mut background, mut rms) = (Vec::new(), Vec::new(), Vec::new());
    let mut heights: Vec<u8> = Vec::new();
    let signal = |value: f64, background: f64| {
        let signal = value - background;
        if both_signs { signal.abs() } else { signal }
    };
    connected_runs(grid.rows(), |y, found| {
        grid.row_into(y, &mut values);
        noise.row_into(y, &mut background, &mut rms);
        heights.clear();
        heights.resize(values.len(), 0);
        let blocks = values.chunks(LANES).zip(background.chunks(LANES)).zip(rms.chunks(LANES));
        for (((values, background), rms), heights) in blocks.zip(heights.chunks_mut(LANES)) {
            if let (Some(values), Some(background), Some(rms)) = (
                values.first_chunk::<LANES>(),
                background.first_chunk::<LANES>(),
                rms.first_chunk::<LANES>(),
            ) {
                let above = (0..LANES).fold(0u32, |above, k| {
                    above | u32::from(signal(values[k], background[k]) >= outline * rms[k])
                });
                if above == 0 {
                    continue;
                }
            }
            let row = values.iter().zip(background).zip(rms).zip(heights);
            for (((value, background), rms), height) in row {
                let signal = signal(*value, *background);
                *height = u8::from(signal >= outline * rms) + u8::from(signal >= detection * rms);
            }
        }
        runs_of_heights(&heights, y, found);
    })
}

/// The same of values that are already (v − background)/rms, row by row, both signs.
pub(crate) fn groups_of_signal(
    signal: &[f64],
    columns: usize,
    outline: f64,
    detection: f64,
) -> Vec<Vec<Run>> {
    let mut heights: Vec<u8> = Vec::new();
    let rows = signal.len() / columns.max(1);
    connected_runs(rows, |y, found| {
        let row = signal.get(y * columns..(y + 1) * columns).unwrap_or(&[]);
        heights.clear();
        heights.resize(columns, 0);
        for (values, heights) in row.chunks(LANES).zip(heights.chunks_mut(LANES)) {
            let above = values.first_chunk::<LANES>().is_none_or(|values| {
                values.iter().fold(0u32, |above, v| above | u32::from(v.abs() >= outline)) > 0
            });
            if above {
                for (v, height) in values.iter().zip(heights) {
                    *height = u8::from(v.abs() >= outline) + u8::from(v.abs() >= detection);
                }
            }
        }
        runs_of_heights(&heights, y, found);
    })
}

/// Runs of one row: a height is 0 below the outline, 1 above it, 2 above the detection
/// threshold.
fn runs_of_heights(heights: &[u8], y: usize, found: &mut Vec<(Run, bool)>) {
    let mut x = 0;
    while let Some(rest) = heights.get(x..) {
        // Empty sky is skipped eight pixels at a time.
        if rest.first_chunk::<8>().is_some_and(|eight| u64::from_ne_bytes(*eight) == 0) {
            x += 8;
            continue;
        }
        match rest.iter().position(|h| *h > 0) {
            None => break,
            Some(skip) if skip > 0 => x += skip,
            Some(_) => {
                let length = rest.iter().position(|h| *h == 0).unwrap_or(rest.len());
                let strong = rest.iter().take(length).any(|h| *h > 1);
                found.push((Run { y, x0: x, x1: x + length - 1 }, strong));
                x += length;
            }
        }
    }
}

/// Joins runs that touch (8 neighbours) into groups, row by row, and returns the groups of
/// which at least one run is marked as strong, in raster order of their first pixel.
pub(crate) fn connected_runs(
    rows: usize,
    mut runs_of_row: impl FnMut(usize, &mut Vec<(Run, bool)>),
) -> Vec<Vec<Run>> {
    let mut runs: Vec<(Run, bool)> = Vec::new();
    let mut parents: Vec<usize> = Vec::new();
    let mut fresh = Vec::new();
    let mut previous = 0..0;
    for y in 0..rows {
        fresh.clear();
        runs_of_row(y, &mut fresh);
        let start = runs.len();
        let mut candidate = previous.start;
        for (run, strong) in &fresh {
            let label = parents.len();
            parents.push(label);
            runs.push((*run, *strong));
            // Both rows are sorted: runs that end left of this one's reach are done with.
            while candidate < previous.end && runs[candidate].0.x1 + 1 < run.x0 {
                candidate += 1;
            }
            let mut other = candidate;
            while other < previous.end && runs[other].0.x0 <= run.x1 + 1 {
                join(&mut parents, label, other);
                other += 1;
            }
        }
        previous = start..runs.len();
    }
    let mut group_of_root = vec![usize::MAX; runs.len()];
    let mut groups: Vec<(Vec<Run>, bool)> = Vec::new();
    for (index, (run, strong)) in runs.iter().enumerate() {
        let root = root(&mut parents, index);
        if group_of_root[root] == usize::MAX {
            group_of_root[root] = groups.len();
            groups.push((Vec::new(), false));
        }
        let group = &mut groups[group_of_root[root]];
        group.0.push(*run);
        group.1 |= *strong;
    }
    groups.into_iter().filter(|(_, strong)| *strong).map(|(runs, _)| runs).collect()
}

fn root(parents: &mut [usize], mut index: usize) -> usize {
    while parents[index] != index {
        parents[index] = parents[parents[index]];
        index = parents[index];
    }
    index
}

fn join(parents: &mut [usize], a: usize, b: usize) {
    let (a, b) = (root(parents, a), root(parents, b));
    let (low, high) = (a.min(b), a.max(b));
    parents[high] = low;
}

/// Measures a group of runs.
fn describe(grid: &dyn Grid, noise: &Noise, runs: Vec<Run>) -> Option<Region> {
    let (columns, rows) = (grid.columns(), grid.rows());
    let first = *runs.first()?;
    let mut bbox = PixelBox { x0: first.x0, y0: first.y, x1: first.x1, y1: first.y };
    let (mut area_px, mut sum, mut moment_x, mut moment_y) = (0usize, 0.0, 0.0, 0.0);
    let mut brightest = (f64::NEG_INFINITY, 0.0, 0.0, 0.0);
    let mut peak_snr = f64::NEG_INFINITY;
    let mut touches_blank = false;
    let (mut values, mut background, mut rms) = (Vec::new(), Vec::new(), Vec::new());
    let mut loaded = usize::MAX;
    for run in &runs {
        if run.y != loaded {
            grid.row_into(run.y, &mut values);
            loaded = run.y;
        }
        noise.part_into(run.y, run.x0..run.x1 + 1, &mut background, &mut rms);
        bbox.x0 = bbox.x0.min(run.x0);
        bbox.x1 = bbox.x1.max(run.x1);
        bbox.y0 = bbox.y0.min(run.y);
        bbox.y1 = bbox.y1.max(run.y);
        area_px += run.len();
        for x in run.x0..=run.x1 {
            let value = values.get(x)?;
            let signal = value - background.get(x - run.x0)?;
            sum += signal;
            // Measured from the first pixel, so that a far corner loses no digits.
            moment_x += signal * (x as f64 - first.x0 as f64);
            moment_y += signal * (run.y as f64 - first.y as f64);
            peak_snr = peak_snr.max(signal / rms.get(x - run.x0)?);
            let order = value.total_cmp(&brightest.0);
            if order.is_gt() {
                brightest = (*value, x as f64, run.y as f64, 1.0);
            } else if order.is_eq() {
                brightest.1 += x as f64;
                brightest.2 += run.y as f64;
                brightest.3 += 1.0;
            }
        }
        touches_blank = touches_blank || blank_beside(grid, run);
    }
    let (value, x, y) = (brightest.0, brightest.1 / brightest.3, brightest.2 / brightest.3);
    let snr = (value - noise.background(x, y)) / noise.rms(x, y);
    let centroid = (first.x0 as f64 + moment_x / sum, first.y as f64 + moment_y / sum);
    let touches_edge =
        bbox.x0 == 0 || bbox.y0 == 0 || bbox.x1 + 1 >= columns || bbox.y1 + 1 >= rows;
    let finite = [value, snr, sum, centroid.0, centroid.1, peak_snr].iter().all(|v| v.is_finite());
    finite.then_some(Region {
        runs,
        area_px,
        peak: Peak { x, y, value, snr },
        peak_snr,
        sum,
        centroid,
        bbox,
        touches_edge,
        touches_blank,
    })
}

/// Whether a pixel of the ring around the run, inside the map, is blank.
fn blank_beside(grid: &dyn Grid, run: &Run) -> bool {
    let (low, high) =
        (run.x0.saturating_sub(1), (run.x1 + 1).min(grid.columns().saturating_sub(1)));
    (run.y.saturating_sub(1)..=(run.y + 1).min(grid.rows().saturating_sub(1))).any(|y| {
        if y == run.y {
            grid.value(low, y).is_nan() || grid.value(high, y).is_nan()
        } else {
            (low..=high).any(|x| grid.value(x, y).is_nan())
        }
    })
}

/// The pixels of the regions, each region grown by `grow_px` (Euclid) within the map.
pub fn region_mask(columns: usize, rows: usize, regions: &[Region], grow_px: f64) -> PixelMask {
    let mut mask = PixelMask::new(columns, rows);
    for run in regions.iter().flat_map(|region| &region.runs) {
        mask.set_run_grown(run.y, run.x0, run.x1, grow_px);
    }
    mask
}

/// The local maxima of the regions: pixels not below any of their eight neighbours, at
/// least `minimum_snr` above the background. Of maxima closer than `minimum_separation_px`
/// to a brighter one only the brightest stays. Positions are sub-pixel: the top of a
/// paraboloid fitted to the 3 × 3 pixels (to their logarithm where all nine stand 3 rms
/// above the background: exact for a Gaussian), never further than 0.75 px from the pixel.
/// A flat top gives the mean of its pixels. Sorted by value, brightest first.
pub fn local_maxima(
    grid: &dyn Grid,
    noise: &Noise,
    regions: &[Region],
    minimum_separation_px: f64,
    minimum_snr: f64,
) -> Vec<Peak> {
    let mut candidates: Vec<(usize, usize, f64)> = Vec::new();
    for run in regions.iter().flat_map(|region| &region.runs) {
        for x in run.x0..=run.x1 {
            let value = grid.value(x, run.y);
            // Few pixels pass this; the noise is worked out for them alone.
            if neighbours(grid, x, run.y).any(|other| other > value) {
                continue;
            }
            let (fx, fy) = (x as f64, run.y as f64);
            if value - noise.background(fx, fy) >= minimum_snr * noise.rms(fx, fy) {
                candidates.push((x, run.y, value));
            }
        }
    }
    let (middle_x, middle_y) =
        (0.5 * (grid.columns() as f64 - 1.0), 0.5 * (grid.rows() as f64 - 1.0));
    let off_centre = |c: &(usize, usize, f64)| {
        let (dx, dy) = (c.0 as f64 - middle_x, c.1 as f64 - middle_y);
        dx * dx + dy * dy
    };
    candidates.sort_by(|a, b| {
        let by_value = b.2.total_cmp(&a.2);
        by_value
            .then_with(|| off_centre(a).total_cmp(&off_centre(b)))
            .then_with(|| (a.1, a.0).cmp(&(b.1, b.0)))
    });
    let points: Vec<[f64; 2]> = candidates.iter().map(|c| [c.0 as f64, c.1 as f64]).collect();
    if points.is_empty() {
        return Vec::new();
    }
    let Ok(tree) = ImmutableKdTree::<f64, 2>::new_from_slice(&points) else {
        return Vec::new();
    };
    let near = |point: &[f64; 2], radius_squared: f64| -> Vec<usize> {
        let found =
            tree.query(point).within::<SquaredEuclidean<f64>>(radius_squared).unsorted().execute();
        let mut items: Vec<usize> =
            found.iter().filter_map(|hit| usize::try_from(hit.item).ok()).collect();
        items.sort_unstable();
        items
    };
    let separation = minimum_separation_px.max(0.0);
    let mut suppressed = vec![false; points.len()];
    let mut peaks = Vec::new();
    for index in 0..points.len() {
        if suppressed[index] {
            continue;
        }
        suppressed[index] = true;
        let (x, y, value) = candidates[index];
        // A flat top: every candidate of the same value that is joined to this one.
        let mut plateau = vec![index];
        let mut next = 0;
        while let Some(member) = plateau.get(next).copied() {
            next += 1;
            for other in near(&points[member], 2.0) {
                if !suppressed[other] && candidates[other].2.total_cmp(&value).is_eq() {
                    suppressed[other] = true;
                    plateau.push(other);
                }
            }
        }
        for other in near(&points[index], separation * separation) {
            suppressed[other] = true;
        }
        let peak = if plateau.len() > 1 {
            let n = plateau.len() as f64;
            let mean = |axis: usize| plateau.iter().map(|i| points[*i][axis]).sum::<f64>() / n;
            (mean(0), mean(1), value)
        } else {
            refine(grid, noise, x, y)
        };
        let snr = (peak.2 - noise.background(peak.0, peak.1)) / noise.rms(peak.0, peak.1);
        if snr.is_finite() {
            peaks.push(Peak { x: peak.0, y: peak.1, value: peak.2, snr });
        }
    }
    peaks
}

/// The values of the eight neighbours; NaN outside the map.
fn neighbours(grid: &dyn Grid, x: usize, y: usize) -> impl Iterator<Item = f64> + '_ {
    (0..9usize).filter(|i| *i != 4).map(move |i| {
        match ((x + i % 3).checked_sub(1), (y + i / 3).checked_sub(1)) {
            (Some(x), Some(y)) => grid.value(x, y),
            _ => f64::NAN,
        }
    })
}

/// Sub-pixel top: least-squares paraboloid through 3 × 3 pixels.
fn refine(grid: &dyn Grid, noise: &Noise, x: usize, y: usize) -> (f64, f64, f64) {
    let centre = (x as f64, y as f64, grid.value(x, y));
    let (Some(left), Some(top)) = (x.checked_sub(1), y.checked_sub(1)) else {
        return centre;
    };
    let background = noise.background(centre.0, centre.1);
    let floor = 3.0 * noise.rms(centre.0, centre.1);
    let mut patch = [[0.0; 3]; 3];
    for (j, line) in patch.iter_mut().enumerate() {
        for (i, cell) in line.iter_mut().enumerate() {
            *cell = grid.value(left + i, top + j) - background;
        }
    }
    if patch.iter().flatten().any(|v| !v.is_finite()) {
        return centre;
    }
    let logarithmic = patch.iter().flatten().all(|v| *v >= floor && *v > 0.0);
    if logarithmic {
        for cell in patch.iter_mut().flatten() {
            *cell = libm::log(*cell);
        }
    }
    let column = |i: usize| patch[0][i] + patch[1][i] + patch[2][i];
    let row = |j: usize| patch[j][0] + patch[j][1] + patch[j][2];
    // f = a + b x + c y + d x² + e x y + g y²: closed-form least squares on the 3 × 3.
    let b = (column(2) - column(0)) / 6.0;
    let c = (row(2) - row(0)) / 6.0;
    let d = (column(0) + column(2) - 2.0 * column(1)) / 6.0;
    let g = (row(0) + row(2) - 2.0 * row(1)) / 6.0;
    let e = (patch[2][2] + patch[0][0] - patch[0][2] - patch[2][0]) / 4.0;
    let determinant = 4.0 * d * g - e * e;
    if !(d < 0.0 && g < 0.0 && determinant > 1e-12 * d * g) {
        return centre;
    }
    let dx = (e * c - 2.0 * g * b) / determinant;
    let dy = (e * b - 2.0 * d * c) / determinant;
    if dx.abs() > 1.5 || dy.abs() > 1.5 {
        return centre;
    }
    let mean = (row(0) + row(1) + row(2)) / 9.0;
    let a = mean - 2.0 / 3.0 * (d + g);
    let top = a + 0.5 * (b * dx + c * dy);
    let value = background + if logarithmic { libm::exp(top) } else { top };
    if value.is_finite() { (centre.0 + dx, centre.1 + dy, value) } else { centre }
}

#[cfg(test)]
mod tests;
