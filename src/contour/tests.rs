//! Contours of shapes whose contours are known.

use ndarray::Array2;
use rand::{Rng, SeedableRng};
use rand_pcg::Pcg64Mcg;

use super::*;
use crate::grid::orientation::Orientation;
use crate::noise::Noise;
use crate::regions::{RegionSettings, find_regions};
use crate::simulate::{Amount, GaussianComponent, GaussianShape, Scene};

fn gaussian(size: usize, x: f64, y: f64, shape: GaussianShape) -> Array2<f64> {
    let amount = Amount::Peak(1.0);
    Scene {
        components: vec![GaussianComponent { x_px: x, y_px: y, amount, shape }],
        ..Scene::empty(size, size, GaussianShape::POINT)
    }
    .render()
}

#[test]
fn a_gaussians_contour_is_its_circle() {
    for (fwhm, level) in [(5.0, 0.5), (5.0, 0.1), (5.0, 0.02), (8.0, 0.3), (20.0, 0.7)] {
        let map = gaussian(81, 40.3, 39.6, GaussianShape::circular(fwhm));
        let lines = contour_lines(&map, level, None);
        assert_eq!(lines.len(), 1);
        assert!(lines[0].is_closed());
        let radius = 0.5 * fwhm * f64::log2(1.0 / level).sqrt();
        let radii = lines[0].points.iter().map(|p| p.distance_px(Pixel::new(40.3, 39.6)));
        let n = lines[0].points.len() as f64;
        let mean = radii.clone().sum::<f64>() / n;
        let worst = radii.map(|r| (r - radius).abs()).fold(0.0, f64::max);
        eprintln!("fwhm {fwhm}, level {level}: mean {:+.4}, worst {worst:.4} px", mean - radius);
        assert!(worst < 0.02, "{worst}");
    }
}

#[test]
fn an_ellipses_farthest_pair_is_its_major_axis() {
    let shape = GaussianShape { major_px: 24.0, minor_px: 9.0, angle_deg: 35.0 };
    let map = gaussian(101, 50.2, 49.7, shape);
    let lines = contour_lines(&map, 0.5, None);
    let (a, b, d) = farthest_pair(lines[0].points.iter().copied(), &PIXEL_METRIC).expect("a line");
    // Points lie on the pixel grid's lines: the tip, 1.7 px in radius, falls between them.
    assert!((d - 24.0).abs() < 0.1, "{d}");
    let angle = (b.y - a.y).atan2(b.x - a.x).to_degrees().rem_euclid(180.0);
    assert!((angle - 35.0).abs() < 2.0, "{angle}");
    // Pixels of 0.2 by 0.5: the same points, measured on the sky.
    let metric = [[-0.2, 0.0], [0.0, 0.5]];
    let (_, _, sky) = farthest_pair(lines[0].points.iter().copied(), &metric).expect("a line");
    let slow = brute_force(&lines[0].points, &metric);
    assert!((sky - slow).abs() < 1e-12);
}

fn brute_force(points: &[Pixel], metric: &Metric) -> f64 {
    let mut best = 0.0f64;
    for a in points {
        for b in points {
            best = best.max(squared_length(metric, *a, *b));
        }
    }
    best.sqrt()
}

#[test]
fn the_farthest_pair_agrees_with_all_pairs() {
    let mut rng = Pcg64Mcg::seed_from_u64(5);
    let mut number = || (rng.next_u64() % 1000) as f64 / 10.0;
    for n in 1..60 {
        let points: Vec<Pixel> = (0..n).map(|_| Pixel::new(number(), number())).collect();
        let metric = [[number() - 50.0, number() - 50.0], [number() - 50.0, number() - 50.0]];
        let (a, b, d) = farthest_pair(points.iter().copied(), &metric).expect("points");
        assert!((d - brute_force(&points, &metric)).abs() < 1e-9 * (1.0 + d));
        assert!((squared_length(&metric, a, b).sqrt() - d).abs() < 1e-9 * (1.0 + d));
        // No point lies outside the hull.
        let hull = convex_hull(points.iter().copied());
        for p in points.iter().filter(|_| hull.len() > 2) {
            for (i, a) in hull.iter().enumerate() {
                let b = hull[(i + 1) % hull.len()];
                let turn = (b.x - a.x) * (p.y - a.y) - (b.y - a.y) * (p.x - a.x);
                assert!(turn >= -1e-9);
            }
        }
    }
    assert_eq!(farthest_pair([], &PIXEL_METRIC), None);
    assert_eq!(farthest_pair([Pixel::new(f64::NAN, 0.0)], &PIXEL_METRIC), None);
}

#[test]
fn lines_are_open_at_the_edge_and_beside_blanks() {
    let ramp = Array2::from_shape_fn((6, 9), |(_, x)| x as f64);
    let lines = contour_lines(&ramp, 3.25, None);
    assert_eq!(lines.len(), 1, "a straight line, not closed along the border");
    assert_eq!(lines[0].ends, Some([LineEnd::MapEdge, LineEnd::MapEdge]));
    assert!(lines[0].points.iter().all(|p| (p.x - 3.25).abs() < 1e-12));
    assert_eq!(lines[0].points.len(), 6);
    let mut holed = ramp.clone();
    holed[(3, 3)] = f64::NAN;
    let lines = contour_lines(&holed, 3.25, None);
    assert_eq!(lines.len(), 2);
    for line in &lines {
        let ends = line.ends.expect("open");
        assert!(ends.contains(&LineEnd::MapEdge) && ends.contains(&LineEnd::Blank), "{ends:?}");
    }
    let window = PixelBox { x0: 1, y0: 1, x1: 6, y1: 4 };
    let lines = contour_lines(&ramp, 3.25, Some(window));
    assert_eq!(lines[0].ends, Some([LineEnd::Window, LineEnd::Window]));
    assert_eq!(lines[0].points.len(), 4);
    assert!(contour_lines(&ramp, 50.0, None).is_empty());
    assert!(contour_lines(&Array2::from_elem((1, 5), 1.0), 0.5, None).is_empty());
    let all_blank = Array2::from_elem((4, 4), f64::NAN);
    assert!(contour_lines(&all_blank, 0.5, None).is_empty());
}

#[test]
fn a_saddle_is_joined_where_its_middle_is_above() {
    // Means 0.725 and 0.6 about the level 0.7.
    for (low, joined) in [(0.45, true), (0.2, false)] {
        let map = ndarray::array![[1.0, low], [low, 1.0]];
        let lines = contour_lines(&map, 0.7, None);
        assert_eq!(lines.len(), 2);
        // Joined: each line cuts off a low corner.
        let cuts_low = lines.iter().all(|line| {
            let near = |p: Pixel, x: f64, y: f64| p.distance_px(Pixel::new(x, y)) < 1.0;
            line.points.iter().all(|p| near(*p, 1.0, 0.0))
                || line.points.iter().all(|p| near(*p, 0.0, 1.0))
        });
        assert_eq!(cuts_low, joined, "mean {}", 0.5 * (1.0 + low));
    }
}

#[test]
fn every_orientation_gives_the_same_points() {
    let mut rng = Pcg64Mcg::seed_from_u64(9);
    let mut map = Array2::from_shape_simple_fn((15, 22), || (rng.next_u64() % 9) as f64);
    map[(7, 7)] = f64::NAN;
    let sorted = |lines: &[Polyline], turn: Option<Orientation>| {
        let mut points: Vec<(i64, i64)> = lines
            .iter()
            .flat_map(|l| &l.points)
            .map(|p| {
                let (x, y) = turn.map_or((p.x, p.y), |t| {
                    let (c, r) = if t.transpose { (15, 22) } else { (22, 15) };
                    t.position(p.x, p.y, c, r)
                });
                ((x * 1e9).round() as i64, (y * 1e9).round() as i64)
            })
            .collect();
        points.sort_unstable();
        points
    };
    // 4 is a value of the map: saddles and pixels on the level are among the cells.
    for level in [2.5, 4.0] {
        let lines = contour_lines(&map, level, None);
        for turn in Orientation::all() {
            let other = contour_lines(&turn.apply(&map), level, None);
            assert_eq!(lines.len(), other.len(), "{turn:?}");
            assert_eq!(sorted(&lines, Some(turn)), sorted(&other, None), "{turn:?}");
        }
    }
}

#[test]
fn the_regions_contour_leaves_islands_out() {
    let beam = GaussianShape::circular(6.0);
    let at = |x, y, peak| GaussianComponent {
        x_px: x,
        y_px: y,
        amount: Amount::Peak(peak),
        shape: GaussianShape::POINT,
    };
    let map = Scene {
        components: vec![at(20.0, 20.0, 50.0), at(45.0, 22.0, 30.0), at(2.0, 40.0, 30.0)],
        ..Scene::empty(64, 48, beam)
    }
    .render();
    let noise = Noise::uniform(64, 48, 0.0, 1.0);
    let regions = find_regions(&map, &noise, &RegionSettings::default());
    assert_eq!(regions.len(), 3);
    let one = contour_of_regions(&map, 3.0, &[&regions[0]]);
    assert_eq!(one.len(), 1);
    assert!(one[0].is_closed());
    assert!(one[0].points.iter().all(|p| p.distance_px(Pixel::new(20.0, 20.0)) < 7.0));
    let all: Vec<&Region> = regions.iter().collect();
    let together = contour_of_regions(&map, 3.0, &all);
    let whole = contour_lines(&map, 3.0, None);
    assert_eq!(together.len(), 3);
    let count = |lines: &[Polyline]| lines.iter().map(|l| l.points.len()).sum::<usize>();
    assert_eq!(count(&together), count(&whole));
    assert_eq!(together.iter().filter(|l| !l.is_closed()).count(), 1, "one leaves the map");
}
