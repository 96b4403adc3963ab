//! The restoring beam: an elliptical Gaussian given by its full widths at half maximum.

use super::geometry::SkyGeometry;
use crate::constants::GAUSSIAN_AREA;
use crate::units::{SkyOffset, wrap_undirected_deg};

/// An axis is resolved only where its squared deconvolved width exceeds this fraction of the
/// squared fitted major axis: below it the difference of squares is rounding of widths that
/// are given to nine digits.
const ROUNDING: f64 = 1e-9;

/// An elliptical Gaussian beam, in the plane units of the map's geometry: arcsec where the
/// pixel scale is known, else pixels.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Beam {
    /// Full width at half maximum of the long axis.
    pub major: f64,
    /// Full width at half maximum of the short axis.
    pub minor: f64,
    /// Position angle of the long axis, degrees from north through east, [0, 180).
    pub pa_deg: f64,
}

/// One axis of a deconvolved Gaussian.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Axis {
    /// Its full width at half maximum, in the beam's units.
    Resolved(f64),
    /// The fitted width does not exceed the beam's in this direction.
    Unresolved,
}

impl Axis {
    /// The width, where it is resolved.
    pub const fn width(self) -> Option<f64> {
        match self {
            Self::Resolved(width) => Some(width),
            Self::Unresolved => None,
        }
    }
}

/// A Gaussian with the beam taken off.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Deconvolved {
    /// The long axis.
    pub major: Axis,
    /// The short axis; unresolved wherever the long one is.
    pub minor: Axis,
    /// Position angle of the long axis, [0, 180); `None` where the long axis is unresolved
    /// or the source is round.
    pub pa_deg: Option<f64>,
}

/// Second moments of an elliptical Gaussian in units of squared FWHM.
#[derive(Clone, Copy)]
struct Moments {
    east_east: f64,
    north_north: f64,
    east_north: f64,
}

impl Moments {
    fn of(major: f64, minor: f64, pa_deg: f64) -> Self {
        let (sin, cos) = pa_deg.to_radians().sin_cos();
        let (long, short) = (major * major, minor * minor);
        Self {
            east_east: long * sin * sin + short * cos * cos,
            north_north: long * cos * cos + short * sin * sin,
            east_north: (long - short) * sin * cos,
        }
    }
}

impl Beam {
    /// A beam from its two widths and the position angle of the long axis. Swapped axes are
    /// put right; `None` where a width is not positive or a number is not finite.
    pub fn new(major: f64, minor: f64, pa_deg: f64) -> Option<Self> {
        let good = major > 0.0 && minor > 0.0 && major.is_finite() && minor.is_finite();
        if !good || !pa_deg.is_finite() {
            return None;
        }
        Some(if major >= minor {
            Self { major, minor, pa_deg: wrap_undirected_deg(pa_deg) }
        } else {
            Self { major: minor, minor: major, pa_deg: wrap_undirected_deg(pa_deg + 90.0) }
        })
    }

    /// A round beam; `None` where the width is not positive and finite.
    pub fn round(fwhm: f64) -> Option<Self> {
        Self::new(fwhm, fwhm, 0.0)
    }

    /// Brightness at an offset from a point source over its peak: exp(−4 ln 2 q) with q the
    /// square of the offset in units of the FWHM.
    pub fn profile(&self, offset: SkyOffset) -> f64 {
        let (along, across) = self.components(offset);
        let q = (along / self.major).powi(2) + (across / self.minor).powi(2);
        (-4.0 * std::f64::consts::LN_2 * q).exp()
    }

    /// Gradient of the logarithm of [`Self::profile`], per plane unit.
    pub fn log_gradient(&self, offset: SkyOffset) -> SkyOffset {
        let (along, across) = self.components(offset);
        let k = -8.0 * std::f64::consts::LN_2;
        let (a, b) = (k * along / self.major.powi(2), k * across / self.minor.powi(2));
        SkyOffset::polar(a, self.pa_deg).plus(SkyOffset::polar(b, self.pa_deg + 90.0))
    }

    /// An offset's components along the major axis and across it.
    fn components(&self, offset: SkyOffset) -> (f64, f64) {
        let axis = SkyOffset::polar(1.0, self.pa_deg);
        let normal = SkyOffset::polar(1.0, self.pa_deg + 90.0);
        (offset.dot(axis), offset.dot(normal))
    }

    /// Solid angle Ω = π/(4 ln 2) · major · minor, in squared plane units.
    pub fn solid_angle(&self) -> f64 {
        GAUSSIAN_AREA * self.major * self.minor
    }

    /// Solid angle over that of one pixel.
    pub fn area_px(&self, geometry: &SkyGeometry) -> f64 {
        self.solid_angle() / geometry.pixel_area()
    }

    /// Geometric mean of the two widths: the round beam of the same solid angle.
    pub fn mean_fwhm(&self) -> f64 {
        (self.major * self.minor).sqrt()
    }

    /// FWHM of the beam's marginal across a ridge that runs along `direction_pa_deg`:
    /// √(b_maj² sin²Δ + b_min² cos²Δ), Δ = beam angle − ridge direction.
    ///
    /// This is what a long thin ridge is broadened by, and it differs from the width of a
    /// cut through the beam's centre ([`Self::reach_along`]).
    pub fn projected_fwhm(&self, direction_pa_deg: f64) -> f64 {
        let (sin, cos) = (self.pa_deg - direction_pa_deg).to_radians().sin_cos();
        (self.major * sin).hypot(self.minor * cos)
    }

    /// FWHM of the cut through the beam's centre along `pa_deg`:
    /// 1/√(cos²Δ/b_maj² + sin²Δ/b_min²), Δ = `pa_deg` − beam angle.
    pub fn reach_along(&self, pa_deg: f64) -> f64 {
        let (sin, cos) = (pa_deg - self.pa_deg).to_radians().sin_cos();
        1.0 / (cos / self.major).hypot(sin / self.minor)
    }

    /// Takes this beam off a fitted Gaussian (major, minor, position angle in degrees).
    ///
    /// Gaussians convolve by adding their second-moment matrices, so the source's matrix is
    /// the fitted one minus the beam's, and its axes follow from the eigenvalues. An
    /// eigenvalue that is not positive is an unresolved axis. Equivalent to J. P. Wild
    /// (1970), Australian Journal of Physics 23, 113 (from memory).
    pub fn deconvolve(&self, fitted: (f64, f64, f64)) -> Deconvolved {
        let (major, minor, pa_deg) = fitted;
        let fit = Moments::of(major, minor, pa_deg);
        let beam = Moments::of(self.major, self.minor, self.pa_deg);
        let east_east = fit.east_east - beam.east_east;
        let north_north = fit.north_north - beam.north_north;
        let east_north = fit.east_north - beam.east_north;
        let sum = east_east + north_north;
        let split = (north_north - east_east).hypot(2.0 * east_north);
        let least = ROUNDING * major.max(minor).powi(2);
        let axis = |squared: f64| {
            if squared > least && squared.is_finite() {
                Axis::Resolved(squared.sqrt())
            } else {
                Axis::Unresolved
            }
        };
        let long = axis(0.5 * (sum + split));
        let has_direction = long != Axis::Unresolved && split > least;
        Deconvolved {
            major: long,
            minor: axis(0.5 * (sum - split)),
            pa_deg: has_direction.then(|| {
                let twice = (2.0 * east_north).atan2(north_north - east_east);
                wrap_undirected_deg(0.5 * twice.to_degrees())
            }),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::units::wrap_difference_deg;

    /// Source, beam and their convolution; major, minor, position angle each.
    type Row = ([f64; 3], [f64; 3], [f64; 3]);

    /// Own computation by eigenvalues of the summed second-moment matrices (nine decimals),
    /// checked against the closed formula of Wild (1970); not made by this code.
    const CONVOLVED: [Row; 6] = [
        ([10.0, 4.0, 30.0], [6.0, 5.0, 80.0], [11.397_402_313, 6.862_887_185, 33.758_763_8]),
        ([3.0, 1.0, 150.0], [1.5, 1.2, -20.0], [3.350_785_730, 1.569_151_043, 150.905_573_0]),
        ([2.0, 2.0, 0.0], [5.0, 3.0, 45.0], [5.385_164_807, 3.605_551_275, 45.0]),
        ([0.5, 0.1, 100.0], [1.0, 0.6, 10.0], [1.004_987_562, 0.781_024_968, 10.0]),
        ([8.0, 0.0, 60.0], [4.0, 4.0, 0.0], [8.944_271_910, 4.0, 60.0]),
        ([20.0, 6.0, 175.0], [12.0, 7.0, 5.0], [23.274_813_312, 9.342_540_624, 177.050_066_6]),
    ];

    #[test]
    fn deconvolution_returns_the_source_that_was_convolved() {
        for (source, beam, fit) in CONVOLVED {
            let beam = Beam::new(beam[0], beam[1], beam[2]).expect("a beam");
            let got = beam.deconvolve((fit[0], fit[1], fit[2]));
            let major = got.major.width().expect("resolved");
            assert!((major - source[0]).abs() < 1e-7, "{source:?}: {got:?}");
            if source[1] > 0.0 {
                let minor = got.minor.width().expect("resolved");
                assert!((minor - source[1]).abs() < 1e-7, "{source:?}: {got:?}");
            } else {
                assert_eq!(got.minor, Axis::Unresolved);
            }
            match got.pa_deg {
                // Seven decimals of the fitted angle.
                Some(pa) => {
                    let off = wrap_difference_deg(2.0 * (pa - source[2])) / 2.0;
                    assert!(off.abs() < 1e-6, "{source:?}: {got:?}");
                }
                None => assert!((source[0] - source[1]).abs() < 1e-12, "{source:?}: {got:?}"),
            }
        }
    }

    #[test]
    fn aligned_gaussians_subtract_in_quadrature() {
        let beam = Beam::new(4.0, 3.0, 0.0).expect("a beam");
        let got = beam.deconvolve((5.0, 5.0, 0.0));
        // 5² − 4² = 3² along north, 5² − 3² = 4² along east: the long axis points east.
        assert!((got.major.width().expect("resolved") - 4.0).abs() < 1e-12);
        assert!((got.minor.width().expect("resolved") - 3.0).abs() < 1e-12);
        assert!((got.pa_deg.expect("elongated") - 90.0).abs() < 1e-9);
        assert_eq!(
            beam.deconvolve((4.0, 3.0, 0.0)),
            Deconvolved { major: Axis::Unresolved, minor: Axis::Unresolved, pa_deg: None }
        );
        assert_eq!(beam.deconvolve((3.9, 2.9, 0.0)).major, Axis::Unresolved);
        assert_eq!(beam.deconvolve((f64::NAN, 1.0, 0.0)).major, Axis::Unresolved);
    }

    #[test]
    fn widths_along_and_across_agree_at_the_axes_and_differ_between() {
        let beam = Beam::new(6.0, 2.0, 30.0).expect("a beam");
        // A ridge along the beam's long axis is broadened by the short one, and so on.
        assert!((beam.projected_fwhm(30.0) - 2.0).abs() < 1e-12);
        assert!((beam.projected_fwhm(120.0) - 6.0).abs() < 1e-12);
        assert!((beam.reach_along(30.0) - 6.0).abs() < 1e-12);
        assert!((beam.reach_along(120.0) - 2.0).abs() < 1e-12);
        // Ridge along 60°, Δ = −30°: √(36/4 + 4·3/4) = √12; cut along 60°: 1/√(3/4/36 + 1/4/4).
        assert!((beam.projected_fwhm(60.0) - 12f64.sqrt()).abs() < 1e-12);
        assert!((beam.reach_along(60.0) - 12f64.sqrt()).abs() < 1e-12);
        // The marginal across a direction times the cut along it is major × minor.
        for pa in [0.0, 17.0, 95.0, 178.0] {
            let product = beam.projected_fwhm(pa) * beam.reach_along(pa);
            assert!((product - 12.0).abs() < 1e-12, "{pa}");
        }
    }

    #[test]
    fn the_solid_angle_is_the_sum_of_the_sampled_gaussian() {
        let beam = Beam::new(6.0, 4.0, 25.0).expect("a beam");
        let mut sum = 0.0;
        for north in -30..=30 {
            for east in -30..=30 {
                let radius = f64::from(north).hypot(f64::from(east));
                let pa = f64::from(east).atan2(f64::from(north)).to_degrees();
                let width = beam.reach_along(pa);
                sum += (-4.0 * std::f64::consts::LN_2 * (radius / width).powi(2)).exp();
            }
        }
        // Sampling error of a Gaussian 4 px wide: below 2·exp(−π²·σ²·2) = 1e-24 relative.
        assert!((sum / beam.solid_angle() - 1.0).abs() < 1e-10, "{sum}");
    }

    #[test]
    fn swapped_axes_are_put_right_and_nonsense_is_no_beam() {
        let beam = Beam::new(2.0, 6.0, 100.0).expect("a beam");
        assert_eq!(beam, Beam { major: 6.0, minor: 2.0, pa_deg: 10.0 });
        for (major, minor, pa) in
            [(0.0, 1.0, 0.0), (1.0, -1.0, 0.0), (f64::NAN, 1.0, 0.0), (1.0, 1.0, f64::INFINITY)]
        {
            assert_eq!(Beam::new(major, minor, pa), None);
        }
    }
}
