//! Lines of equal brightness with sub-pixel points, convex hulls and farthest pairs.

use std::collections::HashMap;

use crate::grid::Grid;
use crate::regions::{PixelBox, Region};
use crate::units::Pixel;

/// Why an open line ends where it does.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum LineEnd {
    /// At the map's outermost row or column.
    MapEdge,
    /// Beside a blank pixel.
    Blank,
    /// At the border of the window or regions asked for.
    Window,
}

/// One contour line.
#[derive(Clone, Debug, PartialEq)]
pub struct Polyline {
    /// Its points in order; a closed line does not repeat its first point.
    pub points: Vec<Pixel>,
    /// The reasons for its two ends; `None` for a closed line.
    pub ends: Option<[LineEnd; 2]>,
}

impl Polyline {
    /// Whether the line comes back to its start.
    pub fn is_closed(&self) -> bool {
        self.ends.is_none()
    }
}

/// The lines on which the map equals `level` (marching squares; Lorensen & Cline 1987 in
/// two dimensions). Points lie on the lines between neighbouring pixel centres, where the
/// cubic through four pixels in a row meets the level: linear interpolation puts the faint
/// contours of a source too far out, by 0.06 px at 2 % of a peak 5 px wide. A pixel equal to the level counts as above it. In a saddle the two pixels
/// above are joined where the mean of the four reaches the level: a rule that does not
/// depend on the orientation. Cells with a blank corner are skipped: the line is open
/// there. `window` restricts the cells to those inside a box of pixels.
pub fn contour_lines(grid: &dyn Grid, level: f64, window: Option<PixelBox>) -> Vec<Polyline> {
    let (columns, rows) = (grid.columns(), grid.rows());
    if columns < 2 || rows < 2 || !level.is_finite() {
        return Vec::new();
    }
    let whole = PixelBox { x0: 0, y0: 0, x1: columns - 1, y1: rows - 1 };
    let b = window.unwrap_or(whole);
    let (x1, y1) = (b.x1.min(columns - 1), b.y1.min(rows - 1));
    let mut tracer = Tracer::new(grid, level);
    for y in b.y0..y1 {
        tracer.cells(y, &[(b.x0, x1)]);
    }
    tracer.lines()
}

/// The contour of a set of regions: as [`contour_lines`], in the cells that touch a pixel
/// of the regions. Lines at levels below the regions' outline lie outside them and are not
/// found; islands elsewhere are left out.
pub fn contour_of_regions(grid: &dyn Grid, level: f64, regions: &[&Region]) -> Vec<Polyline> {
    let (columns, rows) = (grid.columns(), grid.rows());
    if columns < 2 || rows < 2 || !level.is_finite() {
        return Vec::new();
    }
    // Row of cells → ranges of cells (first, one past last).
    let mut wanted: Vec<(usize, usize, usize)> = Vec::new();
    for run in regions.iter().flat_map(|region| &region.runs) {
        let (first, last) = (run.x0.saturating_sub(1), (run.x1 + 1).min(columns - 1));
        if run.y > 0 {
            wanted.push((run.y - 1, first, last));
        }
        if run.y + 1 < rows {
            wanted.push((run.y, first, last));
        }
    }
    wanted.sort_unstable();
    let mut tracer = Tracer::new(grid, level);
    let mut ranges: Vec<(usize, usize)> = Vec::new();
    for group in wanted.chunk_by(|a, b| a.0 == b.0) {
        ranges.clear();
        for (_, first, last) in group {
            match ranges.last_mut() {
                Some(open) if *first <= open.1 => open.1 = open.1.max(*last),
                _ => ranges.push((*first, *last)),
            }
        }
        if let Some((y, _, _)) = group.first() {
            tracer.cells(*y, &ranges);
        }
    }
    tracer.lines()
}

/// The side between a pixel and its right (`across`) or lower neighbour.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
struct Side {
    x: usize,
    y: usize,
    across: bool,
}

struct Tracer<'a> {
    grid: &'a dyn Grid,
    level: f64,
    segments: Vec<[Side; 2]>,
    upper: (usize, Vec<f64>),
    lower: (usize, Vec<f64>),
}

impl<'a> Tracer<'a> {
    fn new(grid: &'a dyn Grid, level: f64) -> Self {
        let nothing = || (usize::MAX, Vec::new());
        Self { grid, level, segments: Vec::new(), upper: nothing(), lower: nothing() }
    }

    /// Cells of the row between pixel rows `y` and `y + 1`; a range of cells ends before
    /// its second number.
    fn cells(&mut self, y: usize, ranges: &[(usize, usize)]) {
        if self.lower.0 == y {
            std::mem::swap(&mut self.upper, &mut self.lower);
        } else {
            self.grid.row_into(y, &mut self.upper.1);
            self.upper.0 = y;
        }
        self.grid.row_into(y + 1, &mut self.lower.1);
        self.lower.0 = y + 1;
        for (first, last) in ranges {
            for x in *first..*last {
                let corners = (
                    self.upper.1.get(x),
                    self.upper.1.get(x + 1),
                    self.lower.1.get(x + 1),
                    self.lower.1.get(x),
                );
                let (Some(a), Some(b), Some(c), Some(d)) = corners else {
                    continue;
                };
                self.cell(x, y, [*a, *b, *c, *d]);
            }
        }
    }

    fn cell(&mut self, x: usize, y: usize, corners: [f64; 4]) {
        let above = corners.map(|v| v >= self.level);
        let number = above.iter().filter(|a| **a).count();
        if number == 0 || number == 4 || corners.iter().any(|v| v.is_nan()) {
            return;
        }
        // Sides in order around the cell: top, right, bottom, left.
        let sides = [
            Side { x, y, across: true },
            Side { x: x + 1, y, across: false },
            Side { x, y: y + 1, across: true },
            Side { x, y, across: false },
        ];
        let cut: Vec<usize> = (0..4).filter(|i| above[*i] != above[(i + 1) % 4]).collect();
        if let [a, b] = cut[..] {
            self.segments.push([sides[a], sides[b]]);
        } else {
            let mean = ((corners[0] + corners[2]) + (corners[1] + corners[3])) / 4.0;
            // Joined where the middle is above: each line then cuts off a corner below.
            let joined = mean >= self.level;
            let pairs = if above[0] == joined { [[0, 1], [2, 3]] } else { [[3, 0], [1, 2]] };
            for [a, b] in pairs {
                self.segments.push([sides[a], sides[b]]);
            }
        }
    }

    fn point(&self, side: Side) -> Pixel {
        let at = |offset: isize| {
            let shifted = |v: usize| v.checked_add_signed(offset);
            let (x, y) = if side.across {
                (shifted(side.x), Some(side.y))
            } else {
                (Some(side.x), shifted(side.y))
            };
            x.zip(y).map_or(f64::NAN, |(x, y)| self.grid.value(x, y))
        };
        let four = [at(-1), at(0), at(1), at(2)].map(|v| v - self.level);
        let (x, y) = (side.x as f64, side.y as f64);
        // From the pixel above the level: the same number from either direction.
        let t = if four[1] >= four[2] {
            crossing(four)
        } else {
            1.0 - crossing([four[3], four[2], four[1], four[0]])
        };
        if side.across { Pixel::new(x + t, y) } else { Pixel::new(x, y + t) }
    }

    /// Why a line ends on a side that only one cell knows.
    fn end(&self, side: Side) -> LineEnd {
        let (columns, rows) = (self.grid.columns(), self.grid.rows());
        let on_edge = if side.across {
            side.y == 0 || side.y + 1 == rows
        } else {
            side.x == 0 || side.x + 1 == columns
        };
        if on_edge {
            return LineEnd::MapEdge;
        }
        let blank = |x: usize, y: usize| self.grid.value(x, y).is_nan();
        let (x, y) = (side.x, side.y);
        let beside_blank = if side.across {
            blank(x, y - 1) || blank(x + 1, y - 1) || blank(x, y + 1) || blank(x + 1, y + 1)
        } else {
            blank(x - 1, y) || blank(x - 1, y + 1) || blank(x + 1, y) || blank(x + 1, y + 1)
        };
        if beside_blank { LineEnd::Blank } else { LineEnd::Window }
    }

    /// Joins the segments. Open lines come first, each kind in raster order of the cell in
    /// which it was first met.
    fn lines(self) -> Vec<Polyline> {
        let mut at_side: HashMap<Side, [usize; 2]> = HashMap::with_capacity(self.segments.len());
        for (index, segment) in self.segments.iter().enumerate() {
            for side in segment {
                at_side
                    .entry(*side)
                    .and_modify(|pair| pair[1] = index)
                    .or_insert([index, usize::MAX]);
            }
        }
        let single = |side: &Side| at_side.get(side).is_none_or(|pair| pair[1] == usize::MAX);
        let mut used = vec![false; self.segments.len()];
        let mut lines = Vec::new();
        let starts = |open: bool| {
            self.segments.iter().enumerate().filter_map(move |(index, [a, b])| {
                let from = if !open || single(a) { Some(*a) } else { single(b).then_some(*b) };
                from.map(|side| (index, side))
            })
        };
        for (index, from) in starts(true).chain(starts(false)) {
            if used[index] {
                continue;
            }
            let mut points = vec![self.point(from)];
            let (mut current, mut side) = (index, from);
            loop {
                used[current] = true;
                let [a, b] = self.segments[current];
                side = if side == a { b } else { a };
                points.push(self.point(side));
                let pair = at_side.get(&side).copied().unwrap_or([usize::MAX; 2]);
                let next = if pair[0] == current { pair[1] } else { pair[0] };
                if next == usize::MAX || used[next] {
                    break;
                }
                current = next;
            }
            let ends = if single(&side) {
                Some([self.end(from), self.end(side)])
            } else {
                points.pop();
                None
            };
            lines.push(Polyline { points, ends });
        }
        lines
    }
}

/// Where the polynomial through values at −1, 0, 1 and 2 falls through zero between 0 and
/// 1, given a value ≥ 0 at 0 and < 0 at 1. A missing outer value lowers the degree.
fn crossing([before, start, end, after]: [f64; 4]) -> f64 {
    // Newton's form about 0 and 1: the linear part, plus t (t − 1) times (c + d t).
    let (c, d) = match (before.is_nan(), after.is_nan()) {
        (true, true) => (0.0, 0.0),
        (false, true) => (0.5 * (before - 2.0 * start + end), 0.0),
        (true, false) => (0.5 * (start - 2.0 * end + after), 0.0),
        (false, false) => {
            let (first, second) = (before - 2.0 * start + end, start - 2.0 * end + after);
            // Curvature runs from the first to the second: c + d t with d = Δ/6.
            ((2.0 * first + second) / 6.0, (second - first) / 6.0)
        }
    };
    let value = |t: f64| start + t * (end - start) + t * (t - 1.0) * (c + d * t);
    let (mut low, mut high) = (0.0, 1.0);
    let mut t = start / (start - end);
    for _ in 0..60 {
        let v = value(t);
        if v >= 0.0 {
            low = t;
        } else {
            high = t;
        }
        // A Newton step where it stays inside, else the middle.
        let slope = (end - start) + (2.0 * t - 1.0) * (c + d * t) + t * (t - 1.0) * d;
        let next = t - v / slope;
        let next = if next > low && next < high { next } else { 0.5 * (low + high) };
        if (next - t).abs() < 1e-14 || high - low < 1e-14 {
            break;
        }
        t = next;
    }
    if t.is_finite() { t.clamp(0.0, 1.0) } else { 0.5 }
}

/// A linear map from pixel offsets to offsets on the sky: (m₀₀ dx + m₀₁ dy, m₁₀ dx + m₁₁ dy).
pub type Metric = [[f64; 2]; 2];

/// Pixels as they are.
pub const PIXEL_METRIC: Metric = [[1.0, 0.0], [0.0, 1.0]];

/// Squared length of an offset under a metric.
fn squared_length(metric: &Metric, from: Pixel, to: Pixel) -> f64 {
    let (dx, dy) = (to.x - from.x, to.y - from.y);
    let u = metric[0][0] * dx + metric[0][1] * dy;
    let v = metric[1][0] * dx + metric[1][1] * dy;
    u * u + v * v
}

/// The corners of the smallest convex polygon around the points, in order of turning from
/// +x towards +y, starting at the smallest x (then y); points on its sides are left out
/// (monotone chain, Andrew 1979). Points that are not finite are ignored.
pub fn convex_hull(points: impl IntoIterator<Item = Pixel>) -> Vec<Pixel> {
    let mut sorted: Vec<Pixel> =
        points.into_iter().filter(|p| p.x.is_finite() && p.y.is_finite()).collect();
    sorted.sort_by(|a, b| a.x.total_cmp(&b.x).then(a.y.total_cmp(&b.y)));
    sorted.dedup();
    if sorted.len() < 3 {
        return sorted;
    }
    let chain = |ordered: &mut dyn Iterator<Item = &Pixel>| {
        let mut hull: Vec<Pixel> = Vec::new();
        for p in ordered {
            while let [.., a, b] = hull[..] {
                if (b.x - a.x) * (p.y - a.y) - (b.y - a.y) * (p.x - a.x) > 0.0 {
                    break;
                }
                hull.pop();
            }
            hull.push(*p);
        }
        hull.pop();
        hull
    };
    let mut hull = chain(&mut sorted.iter());
    hull.extend(chain(&mut sorted.iter().rev()));
    hull
}

/// The two points farthest apart under a metric, and their distance in its unit. `None`
/// without points. All pairs of the hull's corners are compared.
pub fn farthest_pair(
    points: impl IntoIterator<Item = Pixel>,
    metric: &Metric,
) -> Option<(Pixel, Pixel, f64)> {
    let hull = convex_hull(points);
    let first = *hull.first()?;
    let mut best = (first, first, 0.0);
    for (i, a) in hull.iter().enumerate() {
        for b in hull.iter().skip(i + 1) {
            let d = squared_length(metric, *a, *b);
            if d > best.2 {
                best = (*a, *b, d);
            }
        }
    }
    let distance = best.2.sqrt();
    distance.is_finite().then_some((best.0, best.1, distance))
}

#[cfg(test)]
mod tests;
