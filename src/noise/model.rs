//! The smooth model of background and rms over a map.

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
        self.line_into(&self.background_nodes, y, background);
        self.line_into(&self.rms_nodes, y, rms);
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

    fn line_into(&self, nodes: &[f64], y: usize, out: &mut Vec<f64>) {
        out.clear();
        let width = self.nodes_x.len();
        let (j, u) = bracket(&self.nodes_y, y as f64);
        let j1 = (j + 1).min(self.nodes_y.len() - 1);
        let at = |i: usize| {
            let low = nodes.get(j * width + i).copied().unwrap_or(0.0);
            let high = nodes.get(j1 * width + i).copied().unwrap_or(0.0);
            low + u * (high - low)
        };
        let first = at(0);
        // Even noise has one value along the row.
        if (1..width).all(|i| at(i).to_bits() == first.to_bits()) {
            out.resize(self.columns, first);
            return;
        }
        for i in 0..width - 1 {
            let (x0, x1) = (self.nodes_x[i], self.nodes_x[i + 1]);
            let (a, b) = (at(i), at(i + 1));
            let end = if i + 2 == width {
                self.columns
            } else {
                ((x1.floor().max(0.0) as usize) + 1).min(self.columns)
            };
            let slope = (b - a) / (x1 - x0);
            // Through i32: that conversion is done for several pixels at once.
            out.extend((out.len()..end).map(|x| a + slope * (f64::from(x as i32) - x0)));
        }
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
        }
        assert!((noise.background(-9.0, 3.0) - plane(-0.5, 3.0)).abs() < 1e-12);
        assert!(noise.background(f64::NAN, 3.0).is_finite());
        let flat = Noise::uniform(4, 3, f64::NAN, -1.0);
        assert!(flat.rms(1.0, 1.0) > 0.0 && flat.background(1.0, 1.0).abs() < 1e-300);
    }
}
