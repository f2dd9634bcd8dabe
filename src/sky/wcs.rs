//! Where the pixels of any image lie: zenithal projections of Calabretta & Greisen (2002, A&A 395, 1077, §5.1).
//!
//! With (l, m, n) the direction in the tangent frame of the reference point (East, North, outwards), turned by the native
//! longitude φp of the celestial pole,
//!
//! > a = −l cos φp + m sin φp,  b = −m cos φp − l sin φp  (φp = 180°: a = l, b = m),
//!
//! a zenithal projection is (x, y) = s (a, b), where s depends on n alone: 1 (SIN), 1/n (TAN), θ/sin θ (ARC, θ the angle
//! from the reference point), 2/(1 + n) (STG), √(2/(1 + n)) (ZEA). The slant SIN adds (ξ, η)(1 − n). In this form nothing is
//! singular at the reference point. (x, y), here in radians, is the matrix of the header times the distance in pixels from
//! the reference pixel. LATPOLE has no part in these projections.
//!
//! Pixels are counted from 0, whole numbers are pixel centres.

use super::{Direction, TangentFrame};
use nalgebra::{Matrix2, Vector2, Vector3};

/// A zenithal projection about its reference point.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Zenithal {
    /// Orthographic; with ξ, η other than 0 slant, as of arrays along one line.
    Sin {
        /// PVi_1 of the latitude axis.
        xi: f64,
        /// PVi_2 of the latitude axis.
        eta: f64,
    },
    /// Gnomonic.
    Tan,
    /// Equidistant.
    Arc,
    /// Stereographic.
    Stg,
    /// Equal area.
    Zea,
}

impl Zenithal {
    /// (x, y) of a direction (a, b, n), radians; `None` where the projection does not show it.
    fn project(self, a: f64, b: f64, n: f64) -> Option<[f64; 2]> {
        let scale = match self {
            Zenithal::Sin { xi, eta } => {
                if n < 0.0 {
                    return None;
                }
                // 1 − n without the loss of digits near the reference point
                let rest = (a * a + b * b) / (1.0 + n);
                return Some([a + xi * rest, b + eta * rest]);
            }
            Zenithal::Tan if n > 0.0 => 1.0 / n,
            Zenithal::Arc if n > -1.0 => {
                let sine = a.hypot(b);
                if sine < 1e-9 && n > 0.0 { 1.0 } else { sine.atan2(n) / sine }
            }
            Zenithal::Stg if n > -1.0 => 2.0 / (1.0 + n),
            Zenithal::Zea if n > -1.0 => (2.0 / (1.0 + n)).sqrt(),
            _ => return None,
        };
        Some([a * scale, b * scale])
    }

    /// The direction (a, b, n) at (x, y), radians; `None` where there is none.
    fn deproject(self, x: f64, y: f64) -> Option<[f64; 3]> {
        let square = x * x + y * y;
        match self {
            Zenithal::Sin { xi, eta } => {
                // a² + b² + n² = 1 with a = x − ξu, b = y − ηu, n = 1 − u: the root nearer to the reference point
                let (first, half) = (1.0 + xi * xi + eta * eta, 1.0 + xi * x + eta * y);
                let root = half * half - first * square;
                let u = square / (half + root.max(0.0).sqrt());
                (root >= 0.0 && half > 0.0 && u <= 1.0).then_some([x - xi * u, y - eta * u, 1.0 - u])
            }
            Zenithal::Tan => {
                let n = 1.0 / (1.0 + square).sqrt();
                Some([x * n, y * n, n])
            }
            Zenithal::Arc => {
                let angle = square.sqrt();
                let scale = if angle < 1e-9 { 1.0 } else { angle.sin() / angle };
                (angle <= std::f64::consts::PI).then(|| [x * scale, y * scale, angle.cos()])
            }
            Zenithal::Stg => {
                let n = (4.0 - square) / (4.0 + square);
                Some([x * (1.0 + n) / 2.0, y * (1.0 + n) / 2.0, n])
            }
            Zenithal::Zea => {
                let n = 1.0 - square / 2.0;
                (n >= -1.0).then(|| [x * ((1.0 + n) / 2.0).sqrt(), y * ((1.0 + n) / 2.0).sqrt(), n])
            }
        }
    }
}

/// The world coordinates of an image: pixel positions to directions and back.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CelestialWcs {
    projection: Zenithal,
    reference: Direction,
    reference_pixel: [f64; 2],
    matrix: Matrix2<f64>,
    inverse: Matrix2<f64>,
    frame: TangentFrame,
    pole: (f64, f64),
}

impl CelestialWcs {
    /// World coordinates about `reference`, which lies on `reference_pixel` (counted from 0). `matrix` takes a distance in
    /// pixels to (x, y) in radians; `pole` is φp, the native longitude of the celestial pole (LONPOLE), radians.
    ///
    /// `None` when a number is not finite or the matrix has no inverse.
    pub fn new(
        projection: Zenithal,
        reference: Direction,
        reference_pixel: [f64; 2],
        matrix: Matrix2<f64>,
        pole: f64,
    ) -> Option<CelestialWcs> {
        let inverse = matrix.try_inverse()?;
        let numbers = [reference.ra, reference.dec, reference_pixel[0], reference_pixel[1], pole];
        let sound = numbers.iter().chain(matrix.iter()).chain(inverse.iter()).all(|v| v.is_finite());
        // exact for the usual pole of 180°, where cos and sin of the rounded π are not
        let turn = if pole == std::f64::consts::PI { (0.0, -1.0) } else { pole.sin_cos() };
        sound.then(|| CelestialWcs {
            projection,
            reference,
            reference_pixel,
            matrix,
            inverse,
            frame: reference.frame(),
            pole: turn,
        })
    }

    /// The reference point (CRVAL).
    pub fn reference(&self) -> Direction {
        self.reference
    }

    /// The tangent frame at the reference point.
    pub fn frame(&self) -> &TangentFrame {
        &self.frame
    }

    /// The projection.
    pub fn projection(&self) -> Zenithal {
        self.projection
    }

    /// The pixel of the reference point, counted from 0.
    pub fn reference_pixel(&self) -> [f64; 2] {
        self.reference_pixel
    }

    /// Steps of one pixel along either axis (columns) in (l, m) at the reference point, radians.
    pub fn axes(&self) -> Matrix2<f64> {
        let (sin, cos) = self.pole;
        Matrix2::new(-cos, -sin, sin, -cos) * self.matrix
    }

    /// The same sky on pixels counted from another corner: what was pixel (x, y) becomes (x − dx, y − dy).
    pub fn moved(&self, dx: f64, dy: f64) -> CelestialWcs {
        let [x, y] = self.reference_pixel;
        CelestialWcs { reference_pixel: [x - dx, y - dy], ..*self }
    }

    /// Pixel position of (l, m, n) in the frame of the reference point, or `None` where the projection does not show it.
    pub fn pixel_of_lmn(&self, lmn: &Vector3<f64>) -> Option<[f64; 2]> {
        let (sin, cos) = self.pole;
        let (a, b) = (-lmn.x * cos + lmn.y * sin, -lmn.y * cos - lmn.x * sin);
        let [x, y] = self.projection.project(a, b, lmn.z)?;
        let step = self.inverse * Vector2::new(x, y);
        Some([self.reference_pixel[0] + step.x, self.reference_pixel[1] + step.y])
    }

    /// (l, m, n) in the frame of the reference point at a pixel position, or `None` off the sky.
    pub fn lmn_of(&self, x: f64, y: f64) -> Option<Vector3<f64>> {
        let (sin, cos) = self.pole;
        let plane = self.matrix * Vector2::new(x - self.reference_pixel[0], y - self.reference_pixel[1]);
        let [a, b, n] = self.projection.deproject(plane.x, plane.y)?;
        Some(Vector3::new(-a * cos - b * sin, a * sin - b * cos, n))
    }

    /// Pixel position of a direction, or `None` where the projection does not show it.
    pub fn pixel_of(&self, direction: Direction) -> Option<[f64; 2]> {
        self.pixel_of_lmn(&(self.frame.axes * direction.unit_vector()))
    }

    /// The direction at a pixel position, or `None` off the sky.
    pub fn direction_of(&self, x: f64, y: f64) -> Option<Direction> {
        Some(Direction::from_vector(&(self.frame.axes.transpose() * self.lmn_of(x, y)?)))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::sky::ImageGeometry;
    use std::f64::consts::PI;

    const ALL: [Zenithal; 6] = [
        Zenithal::Sin { xi: 0.0, eta: 0.0 },
        Zenithal::Sin { xi: -0.3, eta: 0.9 },
        Zenithal::Tan,
        Zenithal::Arc,
        Zenithal::Stg,
        Zenithal::Zea,
    ];

    /// Rounding: 1e-12 radians in pixels of 1e-3 is 1e-9.
    #[test]
    fn pixels_come_back_from_the_sky() {
        for projection in ALL {
            for (ra, dec, pole) in [(0.0, 90.0, 0.0), (359.99, -12.0, PI), (77.0, 60.0, 2.1), (10.0, -90.0, PI)] {
                let matrix = Matrix2::new(-1e-3, 2e-4, 3e-4, 1.2e-3);
                let reference = Direction::from_deg(ra, dec);
                let wcs = CelestialWcs::new(projection, reference, [31.5, -7.0], matrix, pole).unwrap();
                for (x, y) in [(31.5, -7.0), (0.0, 0.0), (300.0, 250.0), (-200.0, 410.0)] {
                    let direction = wcs.direction_of(x, y).unwrap();
                    let [gx, gy] = wcs.pixel_of(direction).unwrap();
                    let error = (gx - x).hypot(gy - y);
                    assert!(error <= 1e-9, "{projection:?} at {ra}, {dec}: ({x}, {y}) came back as ({gx}, {gy})");
                }
            }
        }
    }

    #[test]
    fn sin_is_the_geometry_of_our_own_images() {
        let geometry = ImageGeometry::new(Direction::from_deg(0.02, 71.0), 300, 200, 1e-3).unwrap();
        let (x0, y0) = geometry.reference();
        let matrix = Matrix2::new(-geometry.pixel, 0.0, 0.0, geometry.pixel);
        let wcs = CelestialWcs::new(ALL[0], geometry.centre, [x0 as f64, y0 as f64], matrix, PI).unwrap();
        for (x, y) in [(0.0, 0.0), (299.0, 12.5), (150.0, 100.0)] {
            let (a, b) = (wcs.direction_of(x, y).unwrap(), geometry.direction_of(x, y).unwrap());
            assert!(a.separation(b) <= 1e-15, "{a:?} {b:?}");
        }
        assert_eq!(wcs.axes(), matrix);
    }

    #[test]
    fn what_a_projection_does_not_show_is_none() {
        let matrix = Matrix2::new(-0.1, 0.0, 0.0, 0.1);
        let here = Direction::from_deg(40.0, 10.0);
        let away = |deg: f64| Direction::from_deg(40.0, 10.0 + deg);
        for (projection, shown, hidden) in
            [(ALL[0], 89.0, 91.0), (Zenithal::Tan, 89.0, 91.0), (Zenithal::Arc, 170.0, 180.0)]
        {
            let wcs = CelestialWcs::new(projection, here, [0.0; 2], matrix, PI).unwrap();
            assert!(wcs.pixel_of(away(-shown)).is_some(), "{projection:?}");
            if hidden < 180.0 {
                assert!(wcs.pixel_of(away(-hidden)).is_none(), "{projection:?}");
            }
        }
        let wcs = |projection| CelestialWcs::new(projection, here, [0.0; 2], matrix, PI).unwrap();
        assert!(wcs(ALL[0]).direction_of(8.0, 8.0).is_none());
        assert!(wcs(Zenithal::Zea).direction_of(15.0, 15.0).is_none());
        assert!(wcs(Zenithal::Arc).direction_of(30.0, 15.0).is_none());
        assert!(CelestialWcs::new(Zenithal::Tan, here, [0.0; 2], Matrix2::zeros(), PI).is_none());
        assert!(CelestialWcs::new(Zenithal::Tan, here, [f64::NAN; 2], matrix, PI).is_none());
    }
}
