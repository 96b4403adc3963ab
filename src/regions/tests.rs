//! Regions against two other labellings, maxima against known Gaussians.

use std::collections::BTreeSet;

use image::{GrayImage, Luma};
use imageproc::region_labelling::{Connectivity, connected_components};
use ndarray::Array2;
use rand::{Rng, SeedableRng};
use rand_pcg::Pcg64Mcg;

use super::*;
use crate::grid::orientation::Orientation;
use crate::simulate::{Amount, GaussianComponent, GaussianShape, NoiseKind, Scene};

type Partition = BTreeSet<Vec<(usize, usize)>>;

fn by_runs(mask: &Array2<bool>) -> Partition {
    let (rows, columns) = mask.dim();
    let groups = connected_runs(rows, |y, found| {
        let mut x = 0;
        while x < columns {
            if mask[(y, x)] {
                let x0 = x;
                while x + 1 < columns && mask[(y, x + 1)] {
                    x += 1;
                }
                found.push((Run { y, x0, x1: x }, true));
            }
            x += 1;
        }
    });
    let pixels = |runs: &Vec<Run>| -> Vec<(usize, usize)> {
        let mut all: Vec<_> =
            runs.iter().flat_map(|r| (r.x0..=r.x1).map(move |x| (r.y, x))).collect();
        all.sort_unstable();
        all
    };
    groups.iter().map(pixels).collect()
}

fn by_flood(mask: &Array2<bool>) -> Partition {
    let (rows, columns) = mask.dim();
    let mut seen = Array2::from_elem((rows, columns), false);
    let mut out = Partition::new();
    for start in (0..rows).flat_map(|y| (0..columns).map(move |x| (y, x))) {
        if !mask[start] || seen[start] {
            continue;
        }
        let (mut open, mut group) = (vec![start], Vec::new());
        seen[start] = true;
        while let Some((y, x)) = open.pop() {
            group.push((y, x));
            for b in y.saturating_sub(1)..=(y + 1).min(rows - 1) {
                for a in x.saturating_sub(1)..=(x + 1).min(columns - 1) {
                    if mask[(b, a)] && !seen[(b, a)] {
                        seen[(b, a)] = true;
                        open.push((b, a));
                    }
                }
            }
        }
        group.sort_unstable();
        out.insert(group);
    }
    out
}

fn by_image_labels(mask: &Array2<bool>) -> Partition {
    let (rows, columns) = mask.dim();
    let image = GrayImage::from_fn(columns as u32, rows as u32, |x, y| {
        Luma([u8::from(mask[(y as usize, x as usize)]) * 255])
    });
    let labels = connected_components(&image, Connectivity::Eight, Luma([0u8]));
    let mut groups = std::collections::BTreeMap::<u32, Vec<(usize, usize)>>::new();
    for (x, y, label) in labels.enumerate_pixels() {
        if label.0[0] > 0 {
            groups.entry(label.0[0]).or_default().push((y as usize, x as usize));
        }
    }
    groups
        .into_values()
        .map(|mut g| {
            g.sort_unstable();
            g
        })
        .collect()
}

#[test]
fn random_masks_split_into_the_same_groups_three_ways() {
    let mut rng = Pcg64Mcg::seed_from_u64(1);
    let mut checked = 0;
    for case in 0..600 {
        let columns = 1 + (rng.next_u64() % 24) as usize;
        let rows = 1 + (rng.next_u64() % 20) as usize;
        let filled = 5 + 10 * (case % 10);
        let mask = Array2::from_shape_simple_fn((rows, columns), || rng.next_u64() % 100 < filled);
        let runs = by_runs(&mask);
        assert_eq!(runs, by_flood(&mask), "case {case}");
        // The crate's own labelling cannot take a single pixel.
        if rows * columns > 1 {
            assert_eq!(runs, by_image_labels(&mask), "case {case}");
            checked += 1;
        }
    }
    assert!(checked > 500);
}

#[test]
fn a_region_needs_a_strong_pixel_and_keeps_its_faint_ones() {
    let nan = f64::NAN;
    let map = ndarray::array![
        [0.0, 3.5, 0.0, 0.0, 0.0, 4.9, 4.9, 0.0],
        [0.0, 0.0, 7.0, 0.0, 0.0, 4.9, 0.0, 0.0],
        [0.0, 3.1, 0.0, 2.9, 0.0, 0.0, 0.0, 0.0],
        [0.0, 0.0, 0.0, 0.0, 0.0, nan, 9.0, 9.0],
        [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
    ] + 10.0;
    let noise = Noise::uniform(8, 5, 10.0, 1.0);
    let regions = find_regions(&map, &noise, &RegionSettings::default());
    assert_eq!(regions.len(), 2, "4.9 everywhere is no detection");
    let (bright, faint) = (&regions[0], &regions[1]);
    assert_eq!((bright.area_px, faint.area_px), (2, 3));
    assert!((bright.peak.x - 6.5).abs() < 1e-12, "two pixels share the peak: their mean");
    assert!(bright.touches_edge && bright.touches_blank);
    assert!(faint.touches_edge && !faint.touches_blank);
    assert!((faint.sum - 13.6).abs() < 1e-12);
    assert!((faint.centroid.0 - (3.5 + 14.0 + 3.1) / 13.6).abs() < 1e-12);
    assert!((faint.centroid.1 - (7.0 + 6.2) / 13.6).abs() < 1e-12);
    assert_eq!(faint.bbox, PixelBox { x0: 1, y0: 0, x1: 2, y1: 2 });
    assert!((faint.peak.snr - 7.0).abs() < 1e-12 && (faint.peak.value - 17.0).abs() < 1e-12);
    assert!(faint.contains(2, 1) && !faint.contains(1, 1) && !faint.contains(7, 3));
    let large = RegionSettings { minimum_area_px: 3, ..RegionSettings::default() };
    assert_eq!(find_regions(&map, &noise, &large).len(), 1);
    let mask = region_mask(8, 5, &regions, 0.0);
    assert_eq!(mask.count(), 5);
}

fn field(seed: u64) -> (Array2<f64>, Vec<(f64, f64)>) {
    let truth = vec![(30.3, 40.7), (43.6, 40.2), (70.0, 20.5), (25.25, 75.0)];
    let component = |(i, (x, y)): (usize, &(f64, f64))| GaussianComponent {
        x_px: *x,
        y_px: *y,
        amount: Amount::Peak(400.0 - 80.0 * i as f64),
        shape: GaussianShape::POINT,
    };
    let beam = GaussianShape::circular(5.0);
    let map = Scene {
        components: truth.iter().enumerate().map(component).collect(),
        noise: Some((NoiseKind::Smoothed(beam), 1.0, seed)),
        ..Scene::empty(110, 96, beam)
    }
    .render();
    (map, truth)
}

#[test]
fn maxima_are_found_to_a_fraction_of_a_pixel() {
    let (map, truth) = field(3);
    let noise = Noise::uniform(110, 96, 0.0, 1.0);
    let regions = find_regions(&map, &noise, &RegionSettings::default());
    let peaks = local_maxima(&map, &noise, &regions, 5.0, 10.0);
    assert_eq!(peaks.len(), truth.len());
    for (peak, (x, y)) in peaks.iter().zip(&truth) {
        // Position error of a point: beam / (2.35 √2 snr)-like, below 0.03 px at 160 rms.
        assert!((peak.x - x).abs() < 0.05 && (peak.y - y).abs() < 0.05, "{peak:?} {x} {y}");
    }
    let merged = local_maxima(&map, &noise, &regions, 15.0, 10.0);
    assert_eq!(merged.len(), 3, "13.3 px apart: the brighter one stays");
    assert!((merged[0].x - 30.3).abs() < 0.05);
    assert!(local_maxima(&map, &noise, &[], 5.0, 10.0).is_empty());
}

#[test]
fn a_flat_top_is_one_peak_in_its_middle() {
    let mut map = Array2::zeros((20, 30));
    for (x, y) in [(10, 8), (11, 8), (12, 8), (11, 9)] {
        map[(y, x)] = 50.0;
    }
    let noise = Noise::uniform(30, 20, 0.0, 1.0);
    let regions = find_regions(&map, &noise, &RegionSettings::default());
    let peaks = local_maxima(&map, &noise, &regions, 0.0, 5.0);
    assert_eq!(peaks.len(), 1);
    assert!((peaks[0].x - 11.0).abs() < 1e-12 && (peaks[0].y - 8.25).abs() < 1e-12);
}

#[test]
fn turned_maps_have_turned_regions_and_peaks() {
    let (map, _) = field(4);
    let noise = Noise::uniform(110, 96, 0.0, 1.0);
    let regions = find_regions(&map, &noise, &RegionSettings::default());
    let peaks = local_maxima(&map, &noise, &regions, 5.0, 10.0);
    for turn in Orientation::all() {
        let turned = turn.apply(&map);
        let (columns, rows) = (turned.ncols(), turned.nrows());
        let noise = Noise::uniform(columns, rows, 0.0, 1.0);
        let other = find_regions(&turned, &noise, &RegionSettings::default());
        assert_eq!(regions.len(), other.len());
        for (a, b) in regions.iter().zip(&other) {
            assert_eq!(a.area_px, b.area_px);
            assert!((a.sum / b.sum - 1.0).abs() < 1e-9);
            let (x, y) = turn.position(a.centroid.0, a.centroid.1, columns, rows);
            assert!((x - b.centroid.0).abs() < 1e-9 && (y - b.centroid.1).abs() < 1e-9);
        }
        let moved = local_maxima(&turned, &noise, &other, 5.0, 10.0);
        assert_eq!(moved.len(), peaks.len());
        for (a, b) in peaks.iter().zip(&moved) {
            let (x, y) = turn.position(a.x, a.y, columns, rows);
            assert!((x - b.x).abs() < 1e-9 && (y - b.y).abs() < 1e-9, "{turn:?}");
            assert!((a.value / b.value - 1.0).abs() < 1e-9);
        }
    }
}
