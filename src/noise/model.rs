//! The smooth model of background and rms over a map.

use std::ops::Range;

use crate::grid::PixelMask;

/// Background and rms as smooth functions of position: values on a grid of nodes (the
/// tiles' centres and the map's edges), bilinear in between, constant outside the map.
#[derive(Clone, Debug, PartialEq)]
pub struct Noise {
    pub(crate) columns: usize,
    pub(crate) rows: usize,
    pub(crate) nodes_x: Vec<f64>,
    pub(crate) nodes_y: Vec<f64>,
    /// Row-major over the nodes.
    pub(crate) background_nodes: Vec<f64>,
    pub(crate) rms_nodes: Vec<f64>,
    /// How it was found: `local` (tiles), `global` (one value), `censored` (from the values
    /// above the level at which the map was cut off) or `given`.
    pub method: &'static str,
    /// Rms of the whole map: root mean square of the tiles' rms.
    pub global_rms: f64,
    /// Background of the whole map: mean of the tiles'.
    pub global_background: f64,
    /// Smallest rms the map's number format can show: quantisation step / √12, else 0.
    pub quantisation_floor: f64,
    /// The pixels left out as emission (or holes as deep), grown by about one beam.
    pub source_mask: PixelMask,
}

/// Pixels of a row that are worked out together.
const LANES: usize = 8;
const STEPS: [f64; LANES] = [0.0, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 7.0];

impl Noise {
    /// The same background and rms everywhere. A background that is not finite becomes 0,
    /// an rms that is not finite and positive becomes the smallest positive number.
    pub fn uniform(columns: usize, rows: usize, background: f64, rms: f64) -> Self {
        let background = if background.is_finite() { background } else { 0.0 };
        let rms = if rms.is_finite() && rms > 0.0 { rms } else { f64::MIN_POSITIVE };
        Self {
            columns,
            rows,
            nodes_x: vec![0.0],
            nodes_y: vec![0.0],
            background_nodes: vec![background],
            rms_nodes: vec![rms],
            method: "given",
            global_rms: rms,
            global_background: background,
            quantisation_floor: 0.0,
            source_mask: PixelMask::new(columns, rows),
        }
    }

    /// Background at a position (column, row), in the map's unit.
    pub fn background(&self, x: f64, y: f64) -> f64 {
        self.interpolate(&self.background_nodes, x, y)
    }

    /// Rms at a position (column, row), in the map's unit; positive.
    pub fn rms(&self, x: f64, y: f64) -> f64 {
        self.interpolate(&self.rms_nodes, x, y)
    }

    /// Replaces the contents by one row of background and rms (`columns` values each).
    pub fn row_into(&self, y: usize, background: &mut Vec<f64>, rms: &mut Vec<f64>) {
        self.part_into(y, 0..self.columns, background, rms);
    }

    /// The same for some columns of the row; those outside the map are left out.
    pub(crate) fn part_into(
        &self,
        y: usize,
        columns: Range<usize>,
        background: &mut Vec<f64>,
        rms: &mut Vec<f64>,
    ) {
        self.line_into(&self.background_nodes, y, columns.clone(), background);
        self.rms_part_into(y, columns, rms);
    }

    /// The rms of some columns of the row; those outside the map are left out.
    pub(crate) fn rms_part_into(&self, y: usize, columns: Range<usize>, rms: &mut Vec<f64>) {
        self.line_into(&self.rms_nodes, y, columns, rms);
    }

    /// Largest over smallest rms of the model's nodes.
    pub fn rms_range(&self) -> f64 {
        let low = self.rms_nodes.iter().copied().fold(f64::INFINITY, f64::min);
        let high = self.rms_nodes.iter().copied().fold(0.0, f64::max);
        if low > 0.0 && low.is_finite() { high / low } else { 1.0 }
    }

    /// About how many pixels the background at one place rests on: the map's area over its
    /// number of nodes.
    pub fn background_area_px(&self) -> f64 {
        (self.columns * self.rows) as f64 / self.background_nodes.len().max(1) as f64
    }

    fn interpolate(&self, nodes: &[f64], x: f64, y: f64) -> f64 {
        let (i, t) = bracket(&self.nodes_x, x);
        let (j, u) = bracket(&self.nodes_y, y);
        let width = self.nodes_x.len();
        let at = |i: usize, j: usize| nodes.get(j * width + i).copied().unwrap_or(0.0);
        let (i1, j1) = ((i + 1).min(width - 1), (j + 1).min(self.nodes_y.len() - 1));
        let low = at(i, j) + t * (at(i1, j) - at(i, j));
        let high = at(i, j1) + t * (at(i1, j1) - at(i, j1));
        low + u * (high - low)
    }

    fn line_into(&self, nodes: &[f64], y: usize, columns: Range<usize>, out: &mut Vec<f64>) {
        let (left, right) = (columns.start, columns.end.min(self.columns));
        let length = right.saturating_sub(left);
        let width = self.nodes_x.len();
        let (j, u) = bracket(&self.nodes_y, y as f64);
        let j1 = (j + 1).min(self.nodes_y.len() - 1);
        let row = |j: usize| nodes.get(j * width..(j + 1) * width).unwrap_or(&[]);
        let mut values = row(j).iter().zip(row(j1)).map(|(low, high)| low + u * (high - low));
        let first = values.next().unwrap_or(0.0);
        // Even noise has one value along the row.
        if values.clone().all(|value| value.to_bits() == first.to_bits()) {
            out.clear();
            out.resize(length, first);
            return;
        }
        // Whole blocks are written: what runs beyond an interval is written again by the next
        // one, what runs beyond the last column is cut off.
        out.resize(length + LANES, first);
        let (mut start, mut a) = (left, first);
        for (interval, b) in self.nodes_x.windows(2).zip(values) {
            let &[x0, x1] = interval else { continue };
            let end = ((x1.max(0.0) as usize) + 1).min(right);
            if end <= start {
                a = b;
                continue;
            }
            let slope = (b - a) / (x1 - x0);
            let blocks = out.get_mut(start - left..).unwrap_or(&mut []).as_chunks_mut::<LANES>().0;
            for block in blocks.iter_mut().take((end - start).div_ceil(LANES)) {
                let at = start as f64;
                for (value, step) in block.iter_mut().zip(STEPS) {
                    *value = a + slope * ((at + step) - x0);
                }
                start += LANES;
            }
            (start, a) = (end, b);
        }
        out.truncate(length);
    }
}

/// The interval of the nodes that holds a position, and the fraction within it (0 to 1).
fn bracket(nodes: &[f64], at: f64) -> (usize, f64) {
    let (Some(first), Some(last)) = (nodes.first(), nodes.last()) else {
        return (0, 0.0);
    };
    if nodes.len() < 2 || at.is_nan() {
        return (0, 0.0);
    }
    let at = at.clamp(*first, *last);
    let i = nodes.partition_point(|node| *node <= at).clamp(1, nodes.len() - 1) - 1;
    (i, (at - nodes[i]) / (nodes[i + 1] - nodes[i]))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rows_and_points_agree_and_a_plane_is_exact() {
        let (columns, rows) = (23, 17);
        let nodes_x = vec![-0.5, 5.25, 11.0, 16.75, 22.5];
        let nodes_y = vec![-0.5, 8.0, 16.5];
        let plane = |x: f64, y: f64| 3.0 + 0.2 * x - 0.1 * y;
        let nodes: Vec<f64> =
            nodes_y.iter().flat_map(|y| nodes_x.iter().map(move |x| plane(*x, *y))).collect();
        let noise = Noise {
            nodes_x,
            nodes_y,
            rms_nodes: nodes.iter().map(|v| v * v).collect(),
            background_nodes: nodes,
            ..Noise::uniform(columns, rows, 0.0, 1.0)
        };
        let (mut background, mut rms) = (Vec::new(), Vec::new());
        for y in 0..rows {
            noise.row_into(y, &mut background, &mut rms);
            assert_eq!((background.len(), rms.len()), (columns, columns));
            for x in 0..columns {
                let (fx, fy) = (x as f64, y as f64);
                assert!((background[x] - plane(fx, fy)).abs() < 1e-12);
                assert!((noise.background(fx, fy) - background[x]).abs() < 1e-12);
                assert!((noise.rms(fx, fy) - rms[x]).abs() < 1e-12);
            }
            let (mut part, mut rms_part) = (Vec::new(), Vec::new());
            for columns in [0..1, 3..19, 7..23, 20..40, 30..40] {
                noise.part_into(y, columns.clone(), &mut part, &mut rms_part);
                let end = columns.end.min(23);
                assert_eq!(part, background[columns.start.min(end)..end], "{columns:?}");
                assert_eq!(rms_part, rms[columns.start.min(end)..end], "{columns:?}");
            }
        }
        assert!((noise.background(-9.0, 3.0) - plane(-0.5, 3.0)).abs() < 1e-12);
        assert!(noise.background(f64::NAN, 3.0).is_finite());
        let flat = Noise::uniform(4, 3, f64::NAN, -1.0);
        assert!(flat.rms(1.0, 1.0) > 0.0 && flat.background(1.0, 1.0).abs() < 1e-300);
    }
}
