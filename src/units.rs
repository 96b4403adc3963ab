//! Small types for numbers whose mix-up would be a wrong answer, and angle wrapping.
//!
//! Position angles are degrees from north through east. A directed angle (a jet, a side)
//! lies in [0, 360), an undirected one (an axis, a beam) in [0, 180), a difference in
//! (−180, 180].
//!
//! Sines and roots of sums come from `libm`: made maps and records do not depend on the
//! platform's mathematics library.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// A position on the array: `x` = column, `y` = row as stored in the file (row 0 is the
/// first row stored), 0-based; an integer is a pixel's centre.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Pixel {
    /// Column, 0-based.
    pub x: f64,
    /// Row, 0-based, as stored.
    pub y: f64,
}

impl Pixel {
    /// A position from column and row.
    pub const fn new(x: f64, y: f64) -> Self {
        Self { x, y }
    }

    /// Distance to another position in pixels.
    pub fn distance_px(self, other: Self) -> f64 {
        libm::hypot(self.x - other.x, self.y - other.y)
    }
}

/// An offset on the sky, in arcsec where the pixel scale is known, else in pixels.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct SkyOffset {
    /// Towards east.
    pub east: f64,
    /// Towards north.
    pub north: f64,
}

impl SkyOffset {
    /// An offset from its two components.
    pub const fn new(east: f64, north: f64) -> Self {
        Self { east, north }
    }

    /// The offset of length `radius` in the direction `pa_deg` (north through east).
    pub fn polar(radius: f64, pa_deg: f64) -> Self {
        let (sin, cos) = libm::sincos(pa_deg.to_radians());
        Self { east: radius * sin, north: radius * cos }
    }

    /// Length of the offset.
    pub fn radius(self) -> f64 {
        libm::hypot(self.east, self.north)
    }

    /// Directed position angle in [0, 360); 0 for a zero offset.
    pub fn position_angle_deg(self) -> f64 {
        wrap_directed_deg(libm::atan2(self.east, self.north).to_degrees())
    }

    /// This offset minus another.
    pub fn minus(self, other: Self) -> Self {
        Self { east: self.east - other.east, north: self.north - other.north }
    }

    /// This offset plus another.
    pub fn plus(self, other: Self) -> Self {
        Self { east: self.east + other.east, north: self.north + other.north }
    }

    /// This offset times a number.
    pub fn times(self, factor: f64) -> Self {
        Self { east: self.east * factor, north: self.north * factor }
    }

    /// Scalar product with another offset.
    pub fn dot(self, other: Self) -> f64 {
        self.east * other.east + self.north * other.north
    }
}

/// Wraps a directed angle into [0, 360).
pub fn wrap_directed_deg(angle_deg: f64) -> f64 {
    // One turn off is the usual case, and much cheaper than a division.
    let wrapped = if (-360.0..0.0).contains(&angle_deg) {
        angle_deg + 360.0
    } else if (0.0..360.0).contains(&angle_deg) {
        angle_deg
    } else {
        angle_deg.rem_euclid(360.0)
    };
    // −1e-20 wraps to 360 exactly and −0.0 keeps its sign: both become 0.
    if wrapped < 360.0 { wrapped + 0.0 } else { 0.0 }
}

/// Wraps an undirected angle into [0, 180).
pub fn wrap_undirected_deg(angle_deg: f64) -> f64 {
    let wrapped = angle_deg.rem_euclid(180.0);
    if wrapped < 180.0 { wrapped + 0.0 } else { 0.0 }
}

/// Wraps a difference of angles into (−180, 180].
pub fn wrap_difference_deg(angle_deg: f64) -> f64 {
    let wrapped = wrap_directed_deg(angle_deg);
    if wrapped > 180.0 { wrapped - 360.0 } else { wrapped }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn position_angles_run_from_north_through_east() {
        // Definition of the International Astronomical Union; 30° because 45° cannot tell
        // the two argument orders apart.
        let cases = [
            (0.0, 1.0, 0.0),
            (1.0, 0.0, 90.0),
            (0.0, -1.0, 180.0),
            (-1.0, 0.0, 270.0),
            (1.0, 3f64.sqrt(), 30.0),
        ];
        for (east, north, expected) in cases {
            let got = SkyOffset::new(east, north).position_angle_deg();
            assert!((got - expected).abs() < 1e-12, "({east}, {north}): {got}");
            let back = SkyOffset::polar(2.0, expected);
            assert!((back.position_angle_deg() - expected).abs() < 1e-12);
            assert!((back.radius() - 2.0).abs() < 1e-12);
        }
    }

    #[test]
    fn wrapping_stays_inside_its_half_open_interval() {
        assert_eq!(wrap_directed_deg(-1e-20).to_bits(), 0f64.to_bits());
        assert_eq!(wrap_directed_deg(-0.0).to_bits(), 0f64.to_bits());
        assert_eq!(wrap_directed_deg(725.0).to_bits(), 5f64.to_bits());
        assert_eq!(wrap_undirected_deg(-10.0).to_bits(), 170f64.to_bits());
        assert_eq!(wrap_undirected_deg(180.0).to_bits(), 0f64.to_bits());
        assert_eq!(wrap_difference_deg(180.0).to_bits(), 180f64.to_bits());
        assert_eq!(wrap_difference_deg(-180.0).to_bits(), 180f64.to_bits());
        assert_eq!(wrap_difference_deg(190.0).to_bits(), (-170f64).to_bits());
    }
}
