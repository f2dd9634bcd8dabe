//! Directions on the celestial sphere and the tangent frames in which u, v, w and l, m, n are measured.

use nalgebra::{Matrix3, Vector3};
use serde::{Deserialize, Serialize};

/// A direction in the ICRS, in radians.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Direction {
    /// Right ascension, radians.
    pub ra: f64,
    /// Declination, radians.
    pub dec: f64,
}

impl Direction {
    /// A direction from right ascension and declination in degrees.
    pub fn from_deg(ra_deg: f64, dec_deg: f64) -> Self {
        Direction { ra: ra_deg.to_radians(), dec: dec_deg.to_radians() }
    }

    /// Right ascension (0 to 360) and declination in degrees.
    pub fn to_deg(self) -> (f64, f64) {
        (self.ra.to_degrees().rem_euclid(360.0), self.dec.to_degrees())
    }

    /// The unit vector of this direction in ICRS axes.
    pub fn unit_vector(self) -> Vector3<f64> {
        let (sin_ra, cos_ra) = self.ra.sin_cos();
        let (sin_dec, cos_dec) = self.dec.sin_cos();
        Vector3::new(cos_dec * cos_ra, cos_dec * sin_ra, sin_dec)
    }

    /// The direction of a vector in ICRS axes (any length but zero).
    pub fn from_vector(v: &Vector3<f64>) -> Self {
        Direction { ra: v.y.atan2(v.x).rem_euclid(std::f64::consts::TAU), dec: v.z.atan2(v.x.hypot(v.y)) }
    }

    /// Angle to another direction, radians; accurate for small and large angles alike.
    pub fn separation(self, other: Direction) -> f64 {
        let (a, b) = (self.unit_vector(), other.unit_vector());
        a.cross(&b).norm().atan2(a.dot(&b))
    }

    /// The tangent frame at this direction.
    pub fn frame(self) -> TangentFrame {
        TangentFrame::at(self)
    }
}

/// East, north and outward unit vectors at a direction: the axes of (l, m, n) and of (u, v, w).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TangentFrame {
    /// Rows: east, north, towards the centre; columns: ICRS x, y, z.
    pub axes: Matrix3<f64>,
}

impl TangentFrame {
    /// The frame at `centre`. At a pole East and North follow the right ascension given.
    pub fn at(centre: Direction) -> Self {
        let (sin_ra, cos_ra) = centre.ra.sin_cos();
        let (sin_dec, cos_dec) = centre.dec.sin_cos();
        TangentFrame {
            axes: Matrix3::new(
                -sin_ra,
                cos_ra,
                0.0,
                -sin_dec * cos_ra,
                -sin_dec * sin_ra,
                cos_dec,
                cos_dec * cos_ra,
                cos_dec * sin_ra,
                sin_dec,
            ),
        }
    }

    /// (l, m, n) of a direction; `n` is negative for directions in the far hemisphere.
    pub fn lmn(&self, direction: Direction) -> [f64; 3] {
        (self.axes * direction.unit_vector()).into()
    }

    /// The direction at (l, m) in the near hemisphere, or `None` outside it.
    pub fn direction(&self, l: f64, m: f64) -> Option<Direction> {
        let n2 = 1.0 - l * l - m * m;
        (n2 >= 0.0).then(|| Direction::from_vector(&(self.axes.transpose() * Vector3::new(l, m, n2.sqrt()))))
    }

    /// The matrix that takes components in this frame (for example u, v, w) to components in `other`.
    pub fn rotation_to(&self, other: &TangentFrame) -> Matrix3<f64> {
        other.axes * self.axes.transpose()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;

    /// Outside value: astropy.wcs SIN, (31°, 46°) about (30°, 45°), to its ten printed digits.
    #[test]
    fn direction_cosines_of_a_known_pair() {
        let [l, m, n] = Direction::from_deg(30.0, 45.0).frame().lmn(Direction::from_deg(31.0, 46.0));
        for (got, want) in [(l, 0.0121234602), (m, 0.0175272182), (n, 0.9997728834)] {
            assert_abs_diff_eq!(got, want, epsilon = 1e-10);
        }
    }

    #[test]
    fn directions_round_trip_at_poles_and_across_zero() {
        for (ra, dec) in [(0.0, 90.0), (123.0, -90.0), (359.9999, 10.0), (0.0001, -41.0)] {
            let frame = Direction::from_deg(ra, dec).frame();
            let there = frame.direction(0.01, -0.02).unwrap();
            let [l, m, _] = frame.lmn(there);
            assert_abs_diff_eq!(l, 0.01, epsilon = 1e-15);
            assert_abs_diff_eq!(m, -0.02, epsilon = 1e-15);
        }
    }
}
