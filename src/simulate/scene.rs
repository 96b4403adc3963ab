//! Maps with known truth: elliptical Gaussians seen through a Gaussian beam, and noise.
//!
//! The same input gives the same bytes on every machine: random numbers come from a named
//! generator, transcendental functions from `libm`, and sums run in a fixed order.

use super::noise::{NoiseKind, unit_noise};
use crate::constants::GAUSSIAN_AREA;
use ndarray::Array2;

/// An elliptical Gaussian shape on the array.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GaussianShape {
    /// Longer FWHM in pixels (0 for a point).
    pub major_px: f64,
    /// Shorter FWHM in pixels.
    pub minor_px: f64,
    /// Direction of the major axis in the array frame: degrees from +x (columns) towards
    /// +y (rows as stored).
    pub angle_deg: f64,
}

impl GaussianShape {
    /// A circular Gaussian of this FWHM.
    pub const fn circular(fwhm_px: f64) -> Self {
        Self { major_px: fwhm_px, minor_px: fwhm_px, angle_deg: 0.0 }
    }

    /// The shape with these second moments xx, xy, yy in px² of FWHM².
    pub fn from_moments([xx, xy, yy]: [f64; 3]) -> Self {
        let split = libm::hypot(xx - yy, 2.0 * xy);
        Self {
            major_px: (0.5 * (xx + yy + split)).max(0.0).sqrt(),
            minor_px: (0.5 * (xx + yy - split)).max(0.0).sqrt(),
            angle_deg: 0.5 * libm::atan2(2.0 * xy, xx - yy).to_degrees(),
        }
    }

    /// The point.
    pub const POINT: Self = Self::circular(0.0);

    /// Second moments xx, xy, yy in FWHM² units.
    pub fn moments(self) -> [f64; 3] {
        let (sin, cos) = libm::sincos(self.angle_deg.to_radians());
        let (a, b) = (self.major_px * self.major_px, self.minor_px * self.minor_px);
        [a * cos * cos + b * sin * sin, (a - b) * sin * cos, a * sin * sin + b * cos * cos]
    }
}

/// Exponent of e beyond which a Gaussian is not drawn: 1e-13 of its peak.
const REACH_EXPONENT: f64 = 30.0;

/// Adds a Gaussian of this peak to a map, sampled at the pixel centres: `centre_px` is column
/// and row, `moments` are the second moments xx, xy, yy in px² of FWHM². A shape without
/// extent, or one that is not a number, adds nothing.
///
/// Along a row a Gaussian follows from its neighbours by two products
/// (e^(−a(x+1)²) = e^(−ax²) · r, r ← r · e^(−2a)), which keeps 1e-11 over a thousand pixels.
pub fn add_gaussian(map: &mut Array2<f64>, centre_px: (f64, f64), peak: f64, moments: [f64; 3]) {
    let [xx, xy, yy] = moments;
    let determinant = xx * yy - xy * xy;
    let (cx, cy) = centre_px;
    if determinant <= 0.0 || ![determinant, peak, cx, cy].iter().all(|v| v.is_finite()) {
        return;
    }
    let four_ln2 = 4.0 * std::f64::consts::LN_2;
    let (rows, columns) = map.dim();
    let half = (REACH_EXPONENT * yy / four_ln2).sqrt();
    let first = (cy - half).ceil().clamp(0.0, rows as f64) as usize;
    let end = ((cy + half).floor() + 1.0).clamp(first as f64, rows as f64) as usize;
    let a = four_ln2 * yy / determinant;
    let step = libm::exp(-2.0 * a);
    for y in first..end {
        let dy = y as f64 - cy;
        let along_row = four_ln2 * dy * dy / yy;
        if along_row >= REACH_EXPONENT {
            continue;
        }
        let middle = cx + xy / yy * dy;
        let half = ((REACH_EXPONENT - along_row) / a).sqrt();
        let low = (middle - half).ceil().clamp(0.0, columns as f64) as usize;
        let high = ((middle + half).floor() + 1.0).clamp(low as f64, columns as f64) as usize;
        if low >= high {
            continue;
        }
        let start = (middle.round().clamp(low as f64, (high - 1) as f64)) as usize;
        let d = start as f64 - middle;
        let top = peak * libm::exp(-along_row - a * d * d);
        let mut row = map.row_mut(y);
        let Some(row) = row.as_slice_mut() else { continue };
        let (mut value, mut ratio) = (top, libm::exp(-a * (1.0 + 2.0 * d)));
        for pixel in &mut row[start..high] {
            *pixel += value;
            value *= ratio;
            ratio *= step;
        }
        ratio = libm::exp(-a * (1.0 - 2.0 * d));
        value = top;
        for pixel in row[low..start].iter_mut().rev() {
            value *= ratio;
            ratio *= step;
            *pixel += value;
        }
    }
}

/// How bright a component is.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Amount {
    /// Peak brightness after convolution, in unit/beam.
    Peak(f64),
    /// Flux density, in the unit of the map without "per beam".
    Flux(f64),
}

/// An elliptical Gaussian of the sky, before the beam.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GaussianComponent {
    /// Column of the centre.
    pub x_px: f64,
    /// Row of the centre, as stored.
    pub y_px: f64,
    /// How bright it is.
    pub amount: Amount,
    /// Shape before convolution.
    pub shape: GaussianShape,
}

/// A chain of equal circular Gaussians, evenly spaced along a straight line: a jet. The
/// flux density is shared equally; spacing of up to half the FWHM makes a smooth ridge.
/// Both ends carry a component (a single one sits at the start).
pub fn jet(
    from_px: (f64, f64),
    to_px: (f64, f64),
    flux: f64,
    fwhm_px: f64,
    count: usize,
) -> Vec<GaussianComponent> {
    let steps = count.saturating_sub(1).max(1) as f64;
    (0..count)
        .map(|i| {
            let t = i as f64 / steps;
            GaussianComponent {
                x_px: from_px.0 + t * (to_px.0 - from_px.0),
                y_px: from_px.1 + t * (to_px.1 - from_px.1),
                amount: Amount::Flux(flux / count as f64),
                shape: GaussianShape::circular(fwhm_px),
            }
        })
        .collect()
}

/// What a simulated map is made of.
#[derive(Clone, Debug, PartialEq)]
pub struct Scene {
    /// Number of columns.
    pub columns: usize,
    /// Number of rows.
    pub rows: usize,
    /// The restoring beam. A component and beam that are both points give nothing.
    pub beam: GaussianShape,
    /// The sky.
    pub components: Vec<GaussianComponent>,
    /// Brightness added everywhere, in unit/beam.
    pub background: f64,
    /// Kind of noise, its rms in unit/beam, and the seed; `None` for a map without noise.
    pub noise: Option<(NoiseKind, f64, u64)>,
}

impl Scene {
    /// An empty sky of this size seen with this beam, without noise.
    pub const fn empty(columns: usize, rows: usize, beam: GaussianShape) -> Self {
        Self { columns, rows, beam, components: Vec::new(), background: 0.0, noise: None }
    }

    /// Peak brightness of a component after convolution, in unit/beam. Exact: a Gaussian
    /// through a Gaussian is a Gaussian whose second moments add, and the peak falls by
    /// the ratio of the solid angles.
    pub fn peak_brightness(&self, component: &GaussianComponent) -> f64 {
        match component.amount {
            Amount::Peak(peak) => peak,
            Amount::Flux(flux) => {
                let beam_area = (self.beam.major_px * self.beam.minor_px).abs();
                flux * beam_area / self.convolved_area(component)
            }
        }
    }

    /// Flux density of a component, in the map's unit without "per beam".
    pub fn flux(&self, component: &GaussianComponent) -> f64 {
        match component.amount {
            Amount::Flux(flux) => flux,
            Amount::Peak(peak) => {
                let beam_area = (self.beam.major_px * self.beam.minor_px).abs();
                peak * self.convolved_area(component) / beam_area
            }
        }
    }

    /// Solid angle of the beam in pixels.
    pub fn beam_area_px(&self) -> f64 {
        GAUSSIAN_AREA * self.beam.major_px * self.beam.minor_px
    }

    fn convolved(&self, component: &GaussianComponent) -> [f64; 3] {
        let (a, b) = (component.shape.moments(), self.beam.moments());
        [a[0] + b[0], a[1] + b[1], a[2] + b[2]]
    }

    /// Product of the two convolved FWHM.
    fn convolved_area(&self, component: &GaussianComponent) -> f64 {
        let [xx, xy, yy] = self.convolved(component);
        (xx * yy - xy * xy).max(0.0).sqrt()
    }

    /// The map in unit/beam, sampled at the pixel centres.
    pub fn render(&self) -> Array2<f64> {
        let mut map = match self.noise {
            Some((kind, rms, seed)) => unit_noise(self.columns, self.rows, kind, seed) * rms,
            None => Array2::zeros((self.rows, self.columns)),
        };
        if self.background.abs() > 0.0 {
            map += self.background;
        }
        for component in &self.components {
            let centre = (component.x_px, component.y_px);
            let peak = self.peak_brightness(component);
            add_gaussian(&mut map, centre, peak, self.convolved(component));
        }
        map
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_point_of_flux_s_peaks_at_s_per_beam_and_sums_to_it() {
        let beam = GaussianShape { major_px: 6.0, minor_px: 4.0, angle_deg: 30.0 };
        let mut scene = Scene::empty(81, 71, beam);
        let shape = GaussianShape { major_px: 9.0, minor_px: 2.0, angle_deg: 110.0 };
        let centre = (40.0, 35.0);
        for shape in [GaussianShape::POINT, shape] {
            let c = GaussianComponent {
                x_px: centre.0,
                y_px: centre.1,
                amount: Amount::Flux(3.0),
                shape,
            };
            scene.components = vec![c];
            let map = scene.render();
            assert!((map[(35, 40)] - scene.peak_brightness(&c)).abs() < 1e-12);
            // Sum over beam area = flux (sampling error of a 4 px beam is below 1e-6).
            assert!((map.sum() / scene.beam_area_px() - 3.0).abs() < 1e-6, "{}", map.sum());
            if shape == GaussianShape::POINT {
                assert!((map[(35, 40)] - 3.0).abs() < 1e-12);
            }
            let by_peak = GaussianComponent { amount: Amount::Peak(map[(35, 40)]), ..c };
            assert!((scene.flux(&by_peak) - 3.0).abs() < 1e-9);
        }
    }

    #[test]
    fn the_analytic_convolution_agrees_with_a_numerical_one() {
        // A fine sum of point sources with the component's own Gaussian weights.
        let beam = GaussianShape { major_px: 5.0, minor_px: 3.5, angle_deg: 70.0 };
        let shape = GaussianShape { major_px: 8.0, minor_px: 3.0, angle_deg: 20.0 };
        let mut scene = Scene::empty(64, 64, beam);
        let at = |x, y, amount, shape| GaussianComponent { x_px: x, y_px: y, amount, shape };
        scene.components = vec![at(31.3, 30.8, Amount::Flux(1.0), shape)];
        let exact = scene.render();
        let sky = Scene {
            beam: GaussianShape::POINT,
            components: vec![at(31.3, 30.8, Amount::Peak(1.0), shape)],
            ..scene.clone()
        }
        .render();
        let total = sky.sum();
        scene.components = sky
            .indexed_iter()
            .filter(|(_, v)| **v > 1e-9)
            .map(|((y, x), v)| {
                at(x as f64, y as f64, Amount::Flux(v / total), GaussianShape::POINT)
            })
            .collect();
        let numerical = scene.render();
        let worst = exact.iter().zip(&numerical).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max);
        // The sky is sampled at 1 px where its FWHM is 3: aliasing of 1e-4.
        assert!(worst < 1e-4, "{worst}");
    }

    #[test]
    fn the_major_axis_points_from_x_towards_y() {
        let shape = GaussianShape { major_px: 12.0, minor_px: 3.0, angle_deg: 30.0 };
        let mut scene = Scene::empty(41, 41, GaussianShape::circular(3.0));
        scene.components =
            vec![GaussianComponent { x_px: 20.0, y_px: 20.0, amount: Amount::Peak(1.0), shape }];
        let map = scene.render();
        // 7 px along 30° is (6.06, 3.5); across it is (−3.5, 6.06).
        assert!(map[(24, 26)] > 5.0 * map[(26, 16)]);
        assert!(map[(24, 26)] > 5.0 * map[(16, 26)], "x towards y, not away from it");
    }

    #[test]
    fn rows_by_products_agree_with_exponentials() {
        // A wide tilted Gaussian, partly off the array: products run over 700 pixels.
        let shape = GaussianShape { major_px: 400.0, minor_px: 150.0, angle_deg: 25.0 };
        let centre = (613.7, 31.2);
        let mut map = Array2::zeros((120, 700));
        add_gaussian(&mut map, centre, 2.0, shape.moments());
        let (sin, cos) = 25f64.to_radians().sin_cos();
        for ((y, x), value) in map.indexed_iter() {
            let (dx, dy) = (x as f64 - centre.0, y as f64 - centre.1);
            let (along, across) = (dx * cos + dy * sin, dy * cos - dx * sin);
            let q = (along / 400.0).powi(2) + (across / 150.0).powi(2);
            let wanted = 2.0 * (-4.0 * std::f64::consts::LN_2 * q).exp();
            // 700 products of rounding 1e-16 each, squared by the growing ratio: 1e-11.
            assert!((value - wanted).abs() < 3e-11 * wanted + 2.0 * 1e-13, "{x} {y}: {value}");
        }
        // Nothing is drawn for a point, a place that is no number, or far outside.
        let before = map.clone();
        add_gaussian(&mut map, centre, 1.0, [0.0; 3]);
        add_gaussian(&mut map, (f64::NAN, 1.0), 1.0, shape.moments());
        add_gaussian(&mut map, (1e9, -1e9), 1.0, shape.moments());
        assert_eq!(map, before);
    }

    #[test]
    fn a_jet_shares_its_flux_among_the_chain() {
        let chain = jet((10.0, 5.0), (20.0, 25.0), 2.0, 3.0, 11);
        let total: f64 =
            chain.iter().map(|c| Scene::empty(1, 1, GaussianShape::circular(3.0)).flux(c)).sum();
        assert!((total - 2.0).abs() < 1e-12);
        assert!((chain[10].x_px - 20.0).abs() < 1e-12 && (chain[10].y_px - 25.0).abs() < 1e-12);
        assert!(jet((0.0, 0.0), (1.0, 1.0), 1.0, 1.0, 0).is_empty());
    }
}
