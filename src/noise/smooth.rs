//! From noisy tile values to a smooth model: plane, shrinkage, missing tiles.

/// Cuts one axis of `size` pixels into `count` equal windows, symmetric about its middle.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) struct Axis {
    pub size: usize,
    pub count: usize,
}

impl Axis {
    /// First and one past last pixel of a window. A pixel centre that lies exactly on a
    /// boundary belongs to both sides, so a mirrored map has mirrored windows.
    pub fn window(self, i: usize) -> std::ops::Range<usize> {
        let (w, n) = (self.size as i128, self.count as i128);
        let i = i as i128;
        // Centre x is inside where 2 i w ≤ 2 n x + n ≤ 2 (i + 1) w.
        let low = (2 * i * w - n).max(0);
        let low = (low + 2 * n - 1) / (2 * n);
        let high = (2 * (i + 1) * w - n).max(0) / (2 * n);
        let low = low.clamp(0, w) as usize;
        low..((high + 1).clamp(0, w) as usize).max(low)
    }

    pub fn centre(self, i: usize) -> f64 {
        (i as f64 + 0.5) * self.size as f64 / self.count as f64 - 0.5
    }

    /// The windows' centres and the two edges; a single window has one node.
    pub fn nodes(self) -> Vec<f64> {
        if self.count < 2 {
            return vec![0.5 * (self.size as f64 - 1.0)];
        }
        let mut nodes = vec![-0.5];
        nodes.extend((0..self.count).map(|i| self.centre(i)));
        nodes.push(self.size as f64 - 0.5);
        nodes
    }

    /// The window next to a node.
    fn window_of_node(self, node: usize) -> usize {
        node.saturating_sub(1).min(self.count - 1)
    }
}

/// A tile's value with its standard error; `None` where it could not be measured.
pub(crate) type TileValue = Option<(f64, f64)>;

/// A plane a + b u + c v, u and v running from −½ to ½ over the map.
#[derive(Clone, Copy, Debug, Default)]
pub(crate) struct Plane {
    pub level: f64,
    pub slope_x: f64,
    pub slope_y: f64,
}

impl Plane {
    pub fn at(&self, x: Axis, y: Axis, px: f64, py: f64) -> f64 {
        self.level + self.slope_x * relative(x, px) + self.slope_y * relative(y, py)
    }
}

fn relative(axis: Axis, at: f64) -> f64 {
    (at - 0.5 * (axis.size as f64 - 1.0)) / axis.size as f64
}

/// Weighted least-squares plane; a slope is left out along an axis on which fewer than
/// three windows are measured, or where the fit is degenerate.
pub(crate) fn fit_plane(values: &[(f64, f64, f64, f64)]) -> Option<Plane> {
    // (u, v, value, weight), moments about the weighted means.
    let total: f64 = values.iter().map(|p| p.3).sum();
    if total.is_nan() || total <= 0.0 {
        return None;
    }
    let mean = |f: fn(&(f64, f64, f64, f64)) -> f64| {
        values.iter().map(|p| p.3 * f(p)).sum::<f64>() / total
    };
    let (mu, mv, mz) = (mean(|p| p.0), mean(|p| p.1), mean(|p| p.2));
    let (mut uu, mut uv, mut vv, mut uz, mut vz) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for (u, v, z, w) in values {
        let (u, v, z) = (u - mu, v - mv, z - mz);
        uu += w * u * u;
        uv += w * u * v;
        vv += w * v * v;
        uz += w * u * z;
        vz += w * v * z;
    }
    let distinct = |f: fn(&(f64, f64, f64, f64)) -> f64| {
        let mut all: Vec<f64> = values.iter().map(f).collect();
        all.sort_by(f64::total_cmp);
        all.dedup_by(|a, b| (*a - *b).abs() < 1e-9);
        all.len()
    };
    let (along_x, along_y) = (distinct(|p| p.0) >= 3, distinct(|p| p.1) >= 3);
    let determinant = uu * vv - uv * uv;
    let (slope_x, slope_y) = match (along_x, along_y) {
        (true, true) if determinant > 1e-3 * uu * vv && values.len() >= 6 => {
            ((uz * vv - vz * uv) / determinant, (vz * uu - uz * uv) / determinant)
        }
        (true, false) if values.len() >= 4 => (uz / uu, 0.0),
        (false, true) if values.len() >= 4 => (0.0, vz / vv),
        _ => (0.0, 0.0),
    };
    let level = mz - slope_x * mu - slope_y * mv;
    let plane = Plane { level, slope_x, slope_y };
    (level.is_finite() && slope_x.is_finite() && slope_y.is_finite()).then_some(plane)
}

/// Tiles (row-major) as points of a plane fit with weights 1/error².
pub(crate) fn points(tiles: &[TileValue], x: Axis, y: Axis) -> Vec<(f64, f64, f64, f64)> {
    let mut points = Vec::with_capacity(tiles.len());
    for (index, tile) in tiles.iter().enumerate() {
        if let Some((value, error)) = tile {
            let (i, j) = (index % x.count, index / x.count);
            let weight = 1.0 / (error * error);
            points.push((relative(x, x.centre(i)), relative(y, y.centre(j)), *value, weight));
        }
    }
    points
}

/// Node values of a smooth model. With `shrink`, what the tiles' errors explain is taken
/// out: the slope of the plane and the tiles' deviations from it are multiplied by
/// max(0, 1 − c/χ²) (positive-part James & Stein 1961 with the 95 % point of χ² as c), so
/// that a map of even noise gets one value and real structure is kept.
pub(crate) fn node_values(tiles: &[TileValue], x: Axis, y: Axis, shrink: bool) -> Option<Vec<f64>> {
    let data = points(tiles, x, y);
    let mut plane = fit_plane(&data)?;
    let total: f64 = data.iter().map(|p| p.3).sum();
    let mean = data.iter().map(|p| p.2 * p.3).sum::<f64>() / total;
    let on_plane = |p: &(f64, f64, f64, f64), plane: &Plane| {
        plane.level + plane.slope_x * p.0 + plane.slope_y * p.1
    };
    let mut keep = 1.0;
    if shrink {
        let chi_flat: f64 = data.iter().map(|p| p.3 * (p.2 - mean) * (p.2 - mean)).sum();
        let chi_plane: f64 = data
            .iter()
            .map(|p| {
                let r = p.2 - on_plane(p, &plane);
                p.3 * r * r
            })
            .sum();
        let slope_share = shrinkage(chi_flat - chi_plane, 6.0);
        let (mu, mv) = (
            data.iter().map(|p| p.0 * p.3).sum::<f64>() / total,
            data.iter().map(|p| p.1 * p.3).sum::<f64>() / total,
        );
        plane.slope_x *= slope_share;
        plane.slope_y *= slope_share;
        plane.level = mean - plane.slope_x * mu - plane.slope_y * mv;
        let freedom = (data.len() as f64 - 3.0).max(1.0);
        keep = shrinkage(chi_plane, freedom + 2.0 * (2.0 * freedom).sqrt());
    }
    let mut deviations: Vec<Option<f64>> = tiles
        .iter()
        .enumerate()
        .map(|(index, tile)| {
            let (i, j) = (index % x.count, index / x.count);
            tile.map(|(value, _)| keep * (value - plane.at(x, y, x.centre(i), y.centre(j))))
        })
        .collect();
    fill_missing(&mut deviations, x.count, y.count);
    let (nodes_x, nodes_y) = (x.nodes(), y.nodes());
    let mut out = Vec::with_capacity(nodes_x.len() * nodes_y.len());
    for (b, py) in nodes_y.iter().enumerate() {
        for (a, px) in nodes_x.iter().enumerate() {
            let tile = y.window_of_node(b) * x.count + x.window_of_node(a);
            let deviation = deviations.get(tile).copied().flatten().unwrap_or(0.0);
            out.push(plane.at(x, y, *px, *py) + deviation);
        }
    }
    Some(out)
}

fn shrinkage(chi_squared: f64, scale: f64) -> f64 {
    if chi_squared > scale { 1.0 - scale / chi_squared } else { 0.0 }
}

/// Gives every empty tile the mean of its filled neighbours (edge neighbours twice the
/// weight of corner ones), layer by layer from the filled ones outwards.
fn fill_missing(tiles: &mut [Option<f64>], columns: usize, rows: usize) {
    let mut missing: Vec<usize> =
        tiles.iter().enumerate().filter(|(_, t)| t.is_none()).map(|(i, _)| i).collect();
    while !missing.is_empty() && missing.len() < tiles.len() {
        let mut found = Vec::new();
        for index in &missing {
            let (i, j) = (index % columns, index / columns);
            let (mut sum, mut weight) = (0.0, 0.0);
            for b in j.saturating_sub(1)..=(j + 1).min(rows - 1) {
                for a in i.saturating_sub(1)..=(i + 1).min(columns - 1) {
                    if let Some(Some(value)) = tiles.get(b * columns + a) {
                        let w = if a == i || b == j { 2.0 } else { 1.0 };
                        sum += w * value;
                        weight += w;
                    }
                }
            }
            if weight > 0.0 {
                found.push((*index, sum / weight));
            }
        }
        if found.is_empty() {
            return;
        }
        for (index, value) in found {
            tiles[index] = Some(value);
        }
        missing.retain(|index| tiles[*index].is_none());
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn windows_mirror_and_cover_every_pixel() {
        for size in [1usize, 2, 7, 32, 33, 100, 299, 300] {
            for count in 1..=size.min(9) {
                let axis = Axis { size, count };
                let mut covered = vec![0; size];
                for i in 0..count {
                    let window = axis.window(i);
                    let mirror = axis.window(count - 1 - i);
                    assert_eq!(window.start, size - mirror.end, "{size} / {count}");
                    assert_eq!(window.end, size - mirror.start);
                    window.for_each(|x| covered[x] += 1);
                }
                assert!(covered.iter().all(|c| *c == 1 || *c == 2), "{size} / {count}");
            }
        }
    }

    #[test]
    fn a_plane_comes_back_through_missing_tiles() {
        let (x, y) = (Axis { size: 100, count: 5 }, Axis { size: 80, count: 4 });
        let truth = Plane { level: 2.0, slope_x: 0.7, slope_y: -0.3 };
        let tiles: Vec<TileValue> = (0..20)
            .map(|i| {
                let (a, b) = (x.centre(i % 5), y.centre(i / 5));
                (i % 7 != 0).then(|| (truth.at(x, y, a, b), 0.01))
            })
            .collect();
        let nodes = node_values(&tiles, x, y, true).expect("most are measured");
        for (b, py) in y.nodes().iter().enumerate() {
            for (a, px) in x.nodes().iter().enumerate() {
                // Shrinkage takes c/χ² of the slope, here 6/10⁴.
                assert!((nodes[b * 7 + a] - truth.at(x, y, *px, *py)).abs() < 1e-3);
            }
        }
        assert_eq!(
            node_values(
                &[None, None],
                Axis { size: 9, count: 2 },
                Axis { size: 9, count: 1 },
                true
            ),
            None
        );
    }
}
