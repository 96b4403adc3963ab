//! Where a pixel lies on the sky: orientation, scale, tangent-plane projection, and the
//! local frame in which everything about one source is measured.

use super::description::{East, MapDescription, Rows};
use crate::constants::ARCSEC_PER_RADIAN;
use crate::units::{Pixel, SkyOffset, wrap_difference_deg, wrap_directed_deg};

/// A position on the sky in equatorial coordinates.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SkyPosition {
    /// Right ascension, degrees, [0, 360).
    pub ra_deg: f64,
    /// Declination, degrees, [−90, 90].
    pub dec_deg: f64,
}

type Matrix = [[f64; 2]; 2];

fn product(a: &Matrix, b: &Matrix) -> Matrix {
    let [[a00, a01], [a10, a11]] = *a;
    let [[b00, b01], [b10, b11]] = *b;
    [[a00 * b00 + a01 * b10, a00 * b01 + a01 * b11], [a10 * b00 + a11 * b10, a10 * b01 + a11 * b11]]
}

fn apply(matrix: &Matrix, first: f64, second: f64) -> (f64, f64) {
    let [[a, b], [c, d]] = *matrix;
    (a * first + b * second, c * first + d * second)
}

fn determinant(matrix: &Matrix) -> f64 {
    let [[a, b], [c, d]] = *matrix;
    a * d - b * c
}

fn inverse(matrix: &Matrix) -> Matrix {
    let [[a, b], [c, d]] = *matrix;
    let determinant = a * d - b * c;
    [[d / determinant, -b / determinant], [-c / determinant, a / determinant]]
}

/// Orientation, scale and position of a map on the sky.
///
/// Plane units are arcsec where the pixel scale is known ([`Self::has_scale`]), else pixels.
#[derive(Clone, Debug, PartialEq)]
pub struct SkyGeometry {
    rows: usize,
    columns: usize,
    reference: Pixel,
    /// Tangent-plane (east, north) per pixel (column, row).
    to_plane: Matrix,
    to_pixel: Matrix,
    has_scale: bool,
    tangent_point: Option<SkyPosition>,
}

/// A linear map between pixels and sky offsets about one pixel, with north as it is there.
///
/// Exact to first order at the origin. At the angle θ from the map's centre a tangent plane
/// is stretched by 1 + θ² along the radius and 1 + θ²/2 across, so over a whole map offsets
/// are off by a fraction of about θ²: 1e-8 at 20 arcsec, 1e-5 at 10 arcmin from the centre.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LocalFrame {
    /// The pixel whose sky offset is zero.
    pub origin: Pixel,
    /// (east, north) in plane units per pixel (column, row).
    pub to_sky: [[f64; 2]; 2],
    /// Its inverse.
    pub to_pixel: [[f64; 2]; 2],
}

impl LocalFrame {
    /// Sky offset of a pixel position from the origin, plane units.
    pub fn offset(&self, pixel: Pixel) -> SkyOffset {
        let (east, north) = apply(&self.to_sky, pixel.x - self.origin.x, pixel.y - self.origin.y);
        SkyOffset { east, north }
    }

    /// Pixel position of a sky offset from the origin.
    pub fn pixel(&self, offset: SkyOffset) -> Pixel {
        let (x, y) = apply(&self.to_pixel, offset.east, offset.north);
        Pixel { x: self.origin.x + x, y: self.origin.y + y }
    }

    /// Distance from a pixel's centre beyond which none of it lies, plane units.
    pub fn pixel_reach(&self) -> f64 {
        let column = libm::hypot(self.to_sky[0][0], self.to_sky[1][0]);
        let row = libm::hypot(self.to_sky[0][1], self.to_sky[1][1]);
        0.5 * (column + row)
    }

    /// Sky offset from one pixel position to another.
    pub fn difference(&self, from: Pixel, to: Pixel) -> SkyOffset {
        let (east, north) = apply(&self.to_sky, to.x - from.x, to.y - from.y);
        SkyOffset { east, north }
    }

    /// Distance of two pixel positions on the sky, plane units.
    pub fn separation(&self, a: Pixel, b: Pixel) -> f64 {
        self.difference(a, b).radius()
    }

    /// The pixel position a sky offset away from another.
    pub fn moved(&self, from: Pixel, by: SkyOffset) -> Pixel {
        let (x, y) = apply(&self.to_pixel, by.east, by.north);
        Pixel { x: from.x + x, y: from.y + y }
    }

    /// Plane units per pixel: the square root of a pixel's solid angle.
    pub fn mean_scale(&self) -> f64 {
        determinant(&self.to_sky).abs().sqrt()
    }
}

impl SkyGeometry {
    /// The geometry of an array of `rows` × `columns` as described; `default_rows` is the
    /// row order of the file's format.
    pub fn new(
        rows: usize,
        columns: usize,
        description: &MapDescription,
        default_rows: Rows,
    ) -> Self {
        let scale = description
            .pixel_scale_arcsec
            .filter(|scale| scale.iter().all(|s| s.is_finite() && *s > 0.0));
        let [scale_x, scale_y] = scale.unwrap_or([1.0, 1.0]);
        let up = SkyOffset::polar(1.0, description.up_pa_deg);
        let quarter = match description.east {
            // Angles grow counter-clockwise: what is right lies 90° before what is up.
            East::Left => -90.0,
            East::Right => 90.0,
        };
        let right = SkyOffset::polar(1.0, description.up_pa_deg + quarter);
        let sign = match description.rows.unwrap_or(default_rows) {
            Rows::BottomUp => 1.0,
            Rows::TopDown => -1.0,
        };
        let to_plane = [
            [right.east * scale_x, sign * up.east * scale_y],
            [right.north * scale_x, sign * up.north * scale_y],
        ];
        let middle = |length: usize| (length as f64 - 1.0) / 2.0;
        let tangent_point = match (description.centre_ra_deg, description.centre_dec_deg) {
            (Some(ra_deg), Some(dec_deg)) => Some(SkyPosition { ra_deg, dec_deg }),
            _ => None,
        };
        Self {
            rows,
            columns,
            reference: Pixel {
                x: description.centre_x_px.unwrap_or(middle(columns)),
                y: description.centre_y_px.unwrap_or(middle(rows)),
            },
            to_plane,
            to_pixel: inverse(&to_plane),
            has_scale: scale.is_some(),
            tangent_point: tangent_point.filter(|_| scale.is_some()),
        }
    }

    /// Whether plane units are arcsec; else they are pixels.
    pub const fn has_scale(&self) -> bool {
        self.has_scale
    }

    /// Whether right ascensions and declinations are known.
    pub const fn has_sky(&self) -> bool {
        self.tangent_point.is_some()
    }

    /// Number of rows.
    pub const fn rows(&self) -> usize {
        self.rows
    }

    /// Number of columns.
    pub const fn columns(&self) -> usize {
        self.columns
    }

    /// The pixel position at which the tangent plane touches the sky.
    pub const fn reference(&self) -> Pixel {
        self.reference
    }

    /// Solid angle of a pixel in squared plane units.
    pub fn pixel_area(&self) -> f64 {
        determinant(&self.to_plane).abs()
    }

    /// Square root of a pixel's solid angle, plane units.
    pub fn mean_scale(&self) -> f64 {
        self.pixel_area().sqrt()
    }

    /// Whether the position lies on the array, half a pixel of border included.
    pub fn contains(&self, pixel: Pixel) -> bool {
        let inside = |v: f64, length: usize| v >= -0.5 && v <= length as f64 - 0.5;
        inside(pixel.x, self.columns) && inside(pixel.y, self.rows)
    }

    /// Tangent-plane offset of a pixel position from [`Self::reference`], plane units;
    /// north is that of the reference.
    pub fn plane_offset(&self, pixel: Pixel) -> SkyOffset {
        let (east, north) =
            apply(&self.to_plane, pixel.x - self.reference.x, pixel.y - self.reference.y);
        SkyOffset { east, north }
    }

    /// Pixel position of a tangent-plane offset; inverse of [`Self::plane_offset`].
    pub fn pixel_of_plane(&self, offset: SkyOffset) -> Pixel {
        let (x, y) = apply(&self.to_pixel, offset.east, offset.north);
        Pixel { x: self.reference.x + x, y: self.reference.y + y }
    }

    /// Sky position of a pixel position; `None` without centre coordinates or pixel scale.
    ///
    /// Gnomonic projection; M. R. Calabretta and E. W. Greisen (2002), Astronomy and
    /// Astrophysics 395, 1077, section 5.1.3, solved for right ascension and declination
    /// so that it holds at the poles too.
    pub fn sky(&self, pixel: Pixel) -> Option<SkyPosition> {
        let centre = self.tangent_point?;
        let offset = self.plane_offset(pixel);
        let xi = offset.east / ARCSEC_PER_RADIAN;
        let eta = offset.north / ARCSEC_PER_RADIAN;
        let (sin, cos) = sin_cos_deg(centre.dec_deg);
        let towards_pole = cos - eta * sin;
        let position = SkyPosition {
            ra_deg: wrap_directed_deg(centre.ra_deg + xi.atan2(towards_pole).to_degrees()),
            dec_deg: (sin + eta * cos).atan2(xi.hypot(towards_pole)).to_degrees(),
        };
        (position.ra_deg.is_finite() && position.dec_deg.is_finite()).then_some(position)
    }

    /// Pixel position of a sky position; `None` without centre coordinates or pixel scale,
    /// or where the position lies 90° or more from the centre.
    pub fn pixel_of_sky(&self, position: SkyPosition) -> Option<Pixel> {
        let centre = self.tangent_point?;
        if !position.ra_deg.is_finite() || !position.dec_deg.is_finite() {
            return None;
        }
        let ra = wrap_difference_deg(position.ra_deg - centre.ra_deg).to_radians();
        let (sin_0, cos_0) = sin_cos_deg(centre.dec_deg);
        let cos = position.dec_deg.to_radians().cos();
        // 1 − cos α = 2 sin²(α/2) keeps the digits of small offsets.
        let versine = 2.0 * (ra / 2.0).sin().powi(2);
        let (sin_step, cos_step) = sin_cos_deg(position.dec_deg - centre.dec_deg);
        let forward = cos_step - cos_0 * cos * versine;
        if forward <= 1e-9 {
            return None;
        }
        let xi = cos * ra.sin() / forward;
        let eta = (sin_step + sin_0 * cos * versine) / forward;
        let pixel =
            self.pixel_of_plane(SkyOffset::new(xi * ARCSEC_PER_RADIAN, eta * ARCSEC_PER_RADIAN));
        (pixel.x.is_finite() && pixel.y.is_finite()).then_some(pixel)
    }

    /// The linear frame about a pixel position, with north as it is at that position.
    ///
    /// Where right ascension and declination are known, meridians converge: the frame is the
    /// derivative of the re-projection onto the plane that touches the sky there. Else north
    /// is the same everywhere.
    pub fn local_frame(&self, pixel: Pixel) -> LocalFrame {
        let to_sky =
            self.turn_of_north(pixel).map_or(self.to_plane, |turn| product(&turn, &self.to_plane));
        LocalFrame { origin: pixel, to_sky, to_pixel: inverse(&to_sky) }
    }

    /// Local (east, north) per tangent-plane (east, north) at a pixel position.
    ///
    /// The direction of the plane point (ξ, η) is V = s₀ + ξ e₀ + η n₀; a step (dξ, dη) moves
    /// the unit vector V/|V| by its part across V, over |V|; scalar products with the local
    /// east and north give the step on the sky. Right ascension is counted from the centre.
    fn turn_of_north(&self, pixel: Pixel) -> Option<Matrix> {
        let centre = self.tangent_point?;
        let position = self.sky(pixel)?;
        let plane = self.plane_offset(pixel);
        let xi = plane.east / ARCSEC_PER_RADIAN;
        let eta = plane.north / ARCSEC_PER_RADIAN;
        let length = (1.0 + xi * xi + eta * eta).sqrt();
        let (sin_0, cos_0) = sin_cos_deg(centre.dec_deg);
        let (sin, cos) = sin_cos_deg(position.dec_deg);
        let (sin_ra, cos_ra) = libm::sincos(libm::atan2(xi, cos_0 - eta * sin_0));
        // e₀ = (0, 1, 0), n₀ = (−sin δ₀, 0, cos δ₀); e and n at the pixel likewise.
        let turn = [
            [cos_ra / length, sin_ra * sin_0 / length],
            [-sin * sin_ra / length, (sin * cos_ra * sin_0 + cos * cos_0) / length],
        ];
        determinant(&turn).is_normal().then_some(turn)
    }
}

fn sin_cos_deg(angle_deg: f64) -> (f64, f64) {
    libm::sincos(angle_deg.to_radians())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn described(change: impl FnOnce(&mut MapDescription)) -> MapDescription {
        let mut description = MapDescription::default();
        change(&mut description);
        description
    }

    fn geometry(change: impl FnOnce(&mut MapDescription)) -> SkyGeometry {
        SkyGeometry::new(101, 201, &described(change), Rows::BottomUp)
    }

    #[test]
    fn eight_orientations_put_a_displayed_vector_where_the_compass_says() {
        // A vector as displayed: 1 to the right and √3 up, 30° clockwise from up.
        let sqrt3 = 3f64.sqrt();
        for rows in [Rows::BottomUp, Rows::TopDown] {
            for (east, sense) in [(East::Left, -1.0), (East::Right, 1.0)] {
                for up in [0.0, 90.0, 180.0, 270.0, 30.0] {
                    let g = geometry(|d| {
                        d.rows = Some(rows);
                        d.east = east;
                        d.up_pa_deg = up;
                        d.pixel_scale_arcsec = Some([2.0, 2.0]);
                    });
                    let dy = if rows == Rows::BottomUp { sqrt3 } else { -sqrt3 };
                    let pixel = Pixel::new(100.0 + 1.0, 50.0 + dy);
                    let offset = g.plane_offset(pixel);
                    // Angles grow counter-clockwise with east left: 30° clockwise is −30°.
                    let wanted = wrap_directed_deg(up + sense * 30.0);
                    let off = wrap_difference_deg(offset.position_angle_deg() - wanted);
                    assert!(off.abs() < 1e-9, "{rows:?} {east:?} {up}: {offset:?}");
                    assert!((offset.radius() - 4.0).abs() < 1e-12);
                    let back = g.pixel_of_plane(offset);
                    assert!(back.distance_px(pixel) < 1e-12);
                    let frame = g.local_frame(Pixel::new(3.0, 4.0));
                    let back = frame.pixel(frame.offset(pixel));
                    assert!(back.distance_px(pixel) < 1e-11);
                    assert!((frame.mean_scale() - 2.0).abs() < 1e-12);
                }
            }
        }
    }

    #[test]
    fn compass_points_with_north_up() {
        let g = geometry(|d| d.pixel_scale_arcsec = Some([0.5, 0.25]));
        for (dx, dy, pa, radius) in [
            (0.0, 4.0, 0.0, 1.0),
            (-2.0, 0.0, 90.0, 1.0),
            (0.0, -4.0, 180.0, 1.0),
            (2.0, 0.0, 270.0, 1.0),
            (-2.0, 4.0 * 3f64.sqrt(), 30.0, 2.0),
        ] {
            let offset = g.plane_offset(Pixel::new(100.0 + dx, 50.0 + dy));
            assert!(wrap_difference_deg(offset.position_angle_deg() - pa).abs() < 1e-9);
            assert!((offset.radius() - radius).abs() < 1e-12);
        }
        assert!((g.pixel_area() - 0.125).abs() < 1e-15);
    }

    #[test]
    fn without_a_scale_plane_units_are_pixels_and_there_is_no_sky() {
        let g = geometry(|d| {
            d.centre_ra_deg = Some(10.0);
            d.centre_dec_deg = Some(10.0);
        });
        assert!(!g.has_scale() && !g.has_sky());
        assert_eq!(g.sky(Pixel::new(0.0, 0.0)), None);
        assert!((g.plane_offset(Pixel::new(100.0, 53.0)).north - 3.0).abs() < 1e-15);
    }

    fn vector(position: SkyPosition) -> [f64; 3] {
        let (sin, cos) = position.dec_deg.to_radians().sin_cos();
        let (sin_ra, cos_ra) = position.ra_deg.to_radians().sin_cos();
        [cos * cos_ra, cos * sin_ra, sin]
    }

    fn dot(a: [f64; 3], b: [f64; 3]) -> f64 {
        a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
    }

    fn fields() -> [SkyPosition; 7] {
        [
            SkyPosition { ra_deg: 187.7, dec_deg: 12.4 },
            SkyPosition { ra_deg: 0.0, dec_deg: -30.0 },
            SkyPosition { ra_deg: 359.999, dec_deg: 45.0 },
            SkyPosition { ra_deg: 40.0, dec_deg: 89.9 },
            SkyPosition { ra_deg: 40.0, dec_deg: 90.0 },
            SkyPosition { ra_deg: 300.0, dec_deg: -90.0 },
            SkyPosition { ra_deg: 300.0, dec_deg: -85.0 },
        ]
    }

    fn field(centre: SkyPosition, scale: f64) -> SkyGeometry {
        geometry(|d| {
            d.pixel_scale_arcsec = Some([scale, scale]);
            d.centre_ra_deg = Some(centre.ra_deg);
            d.centre_dec_deg = Some(centre.dec_deg);
        })
    }

    #[test]
    fn the_projection_agrees_with_unit_vectors_everywhere() {
        for centre in fields() {
            // Pixels of one arcminute: the field is 3.3 degrees wide.
            let g = field(centre, 60.0);
            let (sin_ra, cos_ra) = centre.ra_deg.to_radians().sin_cos();
            let (sin, cos) = centre.dec_deg.to_radians().sin_cos();
            let [s, e, n] =
                [vector(centre), [-sin_ra, cos_ra, 0.0], [-sin * cos_ra, -sin * sin_ra, cos]];
            for pixel in [(0.0, 0.0), (200.0, 100.0), (100.0, 50.0), (30.0, 77.0), (100.0, 90.0)] {
                let pixel = Pixel::new(pixel.0, pixel.1);
                let plane = g.plane_offset(pixel);
                let position = g.sky(pixel).expect("a sky position");
                // The same point as a vector: central projection divides by the part along
                // the line of sight.
                let v = vector(position);
                let east = dot(v, e) / dot(v, s) * ARCSEC_PER_RADIAN;
                let north = dot(v, n) / dot(v, s) * ARCSEC_PER_RADIAN;
                // Rounding: 1e-16 rad × few = 1e-10 arcsec.
                assert!((east - plane.east).abs() < 1e-8, "{centre:?} {pixel:?}");
                assert!((north - plane.north).abs() < 1e-8, "{centre:?} {pixel:?}");
                let back = g.pixel_of_sky(position).expect("in front");
                assert!(back.distance_px(pixel) < 1e-9, "{centre:?} {pixel:?} {back:?}");
            }
        }
    }

    #[test]
    fn the_local_frame_is_the_derivative_on_the_sphere() {
        for centre in fields() {
            let g = field(centre, 60.0);
            for place in [(0.0, 0.0), (200.0, 100.0), (30.0, 77.0), (100.0, 55.0)] {
                let origin = Pixel::new(place.0, place.1);
                let frame = g.local_frame(origin);
                let at = g.sky(origin).expect("a sky position");
                let (sin_ra, cos_ra) = at.ra_deg.to_radians().sin_cos();
                let (sin, cos) = at.dec_deg.to_radians().sin_cos();
                let (e, n) = ([-sin_ra, cos_ra, 0.0], [-sin * cos_ra, -sin * sin_ra, cos]);
                let step = 1e-3;
                for (dx, dy) in [(step, 0.0), (0.0, step), (-0.6 * step, 0.8 * step)] {
                    let plus =
                        vector(g.sky(Pixel::new(origin.x + dx, origin.y + dy)).expect("sky"));
                    let minus =
                        vector(g.sky(Pixel::new(origin.x - dx, origin.y - dy)).expect("sky"));
                    let moved = [plus[0] - minus[0], plus[1] - minus[1], plus[2] - minus[2]];
                    let offset = frame.offset(Pixel::new(origin.x + dx, origin.y + dy));
                    // Rounding 1e-16 rad over a step of 3e-7 rad.
                    for (got, wanted) in [
                        (offset.east, dot(moved, e) / 2.0 * ARCSEC_PER_RADIAN),
                        (offset.north, dot(moved, n) / 2.0 * ARCSEC_PER_RADIAN),
                    ] {
                        assert!((got - wanted).abs() < 1e-7 * 60.0, "{centre:?} {place:?}");
                    }
                }
            }
        }
    }

    #[test]
    fn north_turns_with_the_meridians_at_high_declination() {
        let centre = SkyPosition { ra_deg: 40.0, dec_deg: 80.0 };
        let g = field(centre, 60.0);
        // One degree east in the plane: the pole lies at (0, cot δ₀), so north there points
        // to it, atan(−ξ / cot δ₀) from the centre's north.
        let pixel = Pixel::new(100.0 - 60.0, 50.0);
        let plane = g.plane_offset(pixel);
        let pole_north = ARCSEC_PER_RADIAN / centre.dec_deg.to_radians().tan();
        let to_pole = g.pixel_of_plane(SkyOffset::new(0.0, pole_north));
        let local = g.local_frame(pixel).offset(to_pole);
        assert!((plane.east - 3600.0).abs() < 1e-9);
        assert!(wrap_difference_deg(local.position_angle_deg()).abs() < 1e-9);
        let uncorrected = SkyOffset::new(0.0, pole_north).minus(plane).position_angle_deg();
        assert!((uncorrected - 354.3).abs() < 0.1, "{uncorrected}");
    }

    #[test]
    fn milliarcsecond_maps_keep_ten_digits_of_a_degree() {
        let g = field(SkyPosition { ra_deg: 187.705_930_7, dec_deg: 12.391_123_3 }, 1e-4);
        let pixel = Pixel::new(0.0, 100.0);
        let back = g.pixel_of_sky(g.sky(pixel).expect("sky")).expect("in front");
        // 1e-10 deg is 0.36 µas; a pixel here is 100 µas.
        assert!(back.distance_px(pixel) < 1e-2, "{back:?}");
    }

    #[test]
    fn the_far_side_of_the_sky_has_no_pixel() {
        let g = field(SkyPosition { ra_deg: 10.0, dec_deg: 20.0 }, 1.0);
        assert_eq!(g.pixel_of_sky(SkyPosition { ra_deg: 190.0, dec_deg: -20.0 }), None);
        assert_eq!(g.pixel_of_sky(SkyPosition { ra_deg: 190.0, dec_deg: 20.0 }), None);
        assert_eq!(g.pixel_of_sky(SkyPosition { ra_deg: f64::NAN, dec_deg: 20.0 }), None);
    }
}
