//! What the pixel stages need to know of a map: its shape and its values, row by row.

use ndarray::Array2;

/// A rectangular map of brightness in any unit. `x` is the column, `y` the row as stored;
/// a blank pixel reads as NaN, and so does a position outside the map.
pub trait Grid {
    /// Number of rows.
    fn rows(&self) -> usize;

    /// Number of columns.
    fn columns(&self) -> usize;

    /// The value at a pixel, in the map's unit; NaN where blank or outside.
    fn value(&self, x: usize, y: usize) -> f64;

    /// Replaces the content of `out` by row `y` (`columns` values, NaN where blank). A row
    /// outside the map is all NaN.
    fn row_into(&self, y: usize, out: &mut Vec<f64>) {
        out.clear();
        out.extend((0..self.columns()).map(|x| self.value(x, y)));
    }
}

/// An infinite value cannot be measured: it is blank.
fn finite_or_nan(value: f64) -> f64 {
    if value.is_finite() { value } else { f64::NAN }
}

impl Grid for Array2<f64> {
    fn rows(&self) -> usize {
        self.nrows()
    }

    fn columns(&self) -> usize {
        self.ncols()
    }

    fn value(&self, x: usize, y: usize) -> f64 {
        self.get((y, x)).map_or(f64::NAN, |v| finite_or_nan(*v))
    }

    fn row_into(&self, y: usize, out: &mut Vec<f64>) {
        out.clear();
        if y < self.nrows() {
            out.extend(self.row(y).iter().map(|v| finite_or_nan(*v)));
        } else {
            out.resize(self.ncols(), f64::NAN);
        }
    }
}

impl Grid for Array2<f32> {
    fn rows(&self) -> usize {
        self.nrows()
    }

    fn columns(&self) -> usize {
        self.ncols()
    }

    fn value(&self, x: usize, y: usize) -> f64 {
        self.get((y, x)).map_or(f64::NAN, |v| finite_or_nan(f64::from(*v)))
    }

    fn row_into(&self, y: usize, out: &mut Vec<f64>) {
        out.clear();
        if y < self.nrows() {
            out.extend(self.row(y).iter().map(|v| finite_or_nan(f64::from(*v))));
        } else {
            out.resize(self.ncols(), f64::NAN);
        }
    }
}

/// A yes or no for every pixel of a map. Positions outside read as `false`.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct PixelMask {
    columns: usize,
    rows: usize,
    bits: Vec<bool>,
}

impl PixelMask {
    /// A mask with no pixel set.
    pub fn new(columns: usize, rows: usize) -> Self {
        Self { columns, rows, bits: vec![false; columns.saturating_mul(rows)] }
    }

    /// Number of columns.
    pub fn columns(&self) -> usize {
        self.columns
    }

    /// Number of rows.
    pub fn rows(&self) -> usize {
        self.rows
    }

    /// Whether the pixel is set.
    pub fn get(&self, x: usize, y: usize) -> bool {
        x < self.columns && self.row(y).get(x).copied().unwrap_or(false)
    }

    /// One row; empty outside the map.
    pub fn row(&self, y: usize) -> &[bool] {
        let start = y.saturating_mul(self.columns);
        self.bits.get(start..start.saturating_add(self.columns)).unwrap_or(&[])
    }

    /// Sets the pixels `x0..=x1` of row `y`; what lies outside the map is left out.
    pub fn set_run(&mut self, y: usize, x0: usize, x1: usize) {
        if y >= self.rows || x0 >= self.columns || x1 < x0 {
            return;
        }
        let start = y * self.columns;
        let end = x1.min(self.columns - 1);
        if let Some(run) = self.bits.get_mut(start + x0..=start + end) {
            run.fill(true);
        }
    }

    /// Sets every pixel within `radius_px` (Euclid) of the run `x0..=x1` of row `y`.
    pub fn set_run_grown(&mut self, y: usize, x0: usize, x1: usize, radius_px: f64) {
        let radius = radius_px.clamp(0.0, 1e6);
        let reach = radius.floor() as usize;
        for dy in 0..=reach {
            let half = (radius * radius - (dy * dy) as f64).max(0.0).sqrt().floor() as usize;
            let (low, high) = (x0.saturating_sub(half), x1.saturating_add(half));
            self.set_run(y.saturating_add(dy), low, high);
            if dy > 0 && y >= dy {
                self.set_run(y - dy, low, high);
            }
        }
    }

    /// Number of pixels set.
    pub fn count(&self) -> usize {
        self.bits.iter().filter(|bit| **bit).count()
    }
}

/// The eight orientations of an array, for tests of equivariance.
#[cfg(test)]
pub(crate) mod orientation {
    use ndarray::Array2;

    /// Transposed first, then mirrored in x and y.
    #[derive(Clone, Copy, Debug)]
    pub(crate) struct Orientation {
        pub transpose: bool,
        pub flip_x: bool,
        pub flip_y: bool,
    }

    impl Orientation {
        pub(crate) fn all() -> impl Iterator<Item = Self> {
            (0..8).map(|bits| Self {
                transpose: bits & 1 != 0,
                flip_x: bits & 2 != 0,
                flip_y: bits & 4 != 0,
            })
        }

        pub(crate) fn apply(self, map: &Array2<f64>) -> Array2<f64> {
            let (rows, columns) = map.dim();
            let (r, c) = if self.transpose { (columns, rows) } else { (rows, columns) };
            Array2::from_shape_fn((r, c), |(y, x)| {
                let x = if self.flip_x { c - 1 - x } else { x };
                let y = if self.flip_y { r - 1 - y } else { y };
                if self.transpose { map[(x, y)] } else { map[(y, x)] }
            })
        }

        /// Where the original position lies in the turned map of `columns` × `rows`
        /// (the turned map's own shape).
        pub(crate) fn position(self, x: f64, y: f64, columns: usize, rows: usize) -> (f64, f64) {
            let (x, y) = if self.transpose { (y, x) } else { (x, y) };
            let x = if self.flip_x { columns as f64 - 1.0 - x } else { x };
            let y = if self.flip_y { rows as f64 - 1.0 - y } else { y };
            (x, y)
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn blank_infinite_and_outside_all_read_as_nan() {
        let map = ndarray::array![[1.0, f64::INFINITY, f64::NAN], [4.0, 5.0, 6.0]];
        assert!((map.value(0, 1) - 4.0).abs() < 1e-15, "x is the column, y the row");
        assert!(map.value(1, 0).is_nan() && map.value(2, 0).is_nan());
        assert!(map.value(3, 0).is_nan() && map.value(0, 2).is_nan());
        let mut row = vec![9.0; 7];
        map.row_into(5, &mut row);
        assert!(row.len() == 3 && row.iter().all(|v| v.is_nan()));
        let single = map.mapv(|v| v as f32);
        assert!(single.value(1, 0).is_nan());
        assert!((single.value(2, 1) - 6.0).abs() < 1e-15);
    }

    #[test]
    fn growing_a_run_covers_exactly_the_pixels_within_the_radius() {
        let mut mask = PixelMask::new(20, 15);
        mask.set_run_grown(7, 8, 10, 3.2);
        for y in 0..15usize {
            for x in 0..20usize {
                let near = (8..=10usize).any(|run_x| {
                    let (dx, dy) = (x as f64 - run_x as f64, y as f64 - 7.0);
                    dx * dx + dy * dy <= 3.2 * 3.2
                });
                assert_eq!(mask.get(x, y), near, "({x}, {y})");
            }
        }
        assert!(!mask.get(20, 0) && !mask.get(0, 15));
    }

    #[test]
    fn a_run_at_the_corner_is_cut_not_wrapped() {
        let mut mask = PixelMask::new(5, 4);
        mask.set_run_grown(0, 4, 9, 1.0);
        assert_eq!(mask.count(), 3, "(3,0), (4,0) and (4,1)");
        mask.set_run_grown(9, 0, 0, 2.0);
        assert_eq!(mask.count(), 3, "a row outside sets nothing near the map's end");
    }
}
