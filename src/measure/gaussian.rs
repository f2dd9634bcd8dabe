//! Elliptical Gaussians: widths and position angle, covariance, convolution and deconvolution.
//!
//! A Gaussian is its covariance over (East, North): convolution adds covariances, and no angle runs wild when it is round.
//! Full widths at half maximum θ and standard deviations σ: θ = σ √(8 ln 2). Position angles run from North through East.

use crate::imaging::beam_fit::FittedBeam;
use serde::{Deserialize, Serialize};
use std::f64::consts::{FRAC_PI_2, LN_2, PI};

/// (θ/σ)² of a Gaussian, 8 ln 2.
pub const FWHM2: f64 = 8.0 * LN_2;

/// Full widths at half maximum of an ellipse, in any one unit of length, and its position angle.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Ellipse {
    /// Along the major axis.
    pub major: f64,
    /// Along the minor axis.
    pub minor: f64,
    /// Of the major axis, North through East, radians, in (−π/2, π/2].
    pub position_angle: f64,
}

impl Ellipse {
    /// Covariance over (East, North): `[ee, en, nn]`.
    pub fn covariance(&self) -> [f64; 3] {
        let (sin, cos) = self.position_angle.sin_cos();
        let (major, minor) = (self.major * self.major / FWHM2, self.minor * self.minor / FWHM2);
        [major * sin * sin + minor * cos * cos, (major - minor) * sin * cos, major * cos * cos + minor * sin * sin]
    }

    /// The ellipse of a covariance; `None` unless both its axes have a positive length.
    pub fn of_covariance(covariance: [f64; 3]) -> Option<Ellipse> {
        let [major2, minor2, position_angle] = axes(covariance);
        let lengths = (major2 * FWHM2, minor2 * FWHM2);
        (lengths.1 > 0.0 && lengths.0.is_finite()).then(|| Ellipse {
            major: lengths.0.sqrt(),
            minor: lengths.1.sqrt(),
            position_angle,
        })
    }

    /// This ellipse in another unit of length.
    pub fn scaled(&self, by: f64) -> Ellipse {
        Ellipse { major: self.major * by, minor: self.minor * by, ..*self }
    }

    /// Convolution of two Gaussians.
    pub fn convolved(&self, other: &Ellipse) -> Option<Ellipse> {
        let (a, b) = (self.covariance(), other.covariance());
        Ellipse::of_covariance(std::array::from_fn(|i| a[i] + b[i]))
    }

    /// What, convolved with `beam`, gives this ellipse. An axis along which this is no wider than the beam gets length 0;
    /// `None` when that is so along both.
    pub fn deconvolved(&self, beam: &Ellipse) -> Option<Ellipse> {
        let (a, b) = (self.covariance(), beam.covariance());
        let [major2, minor2, position_angle] = axes(std::array::from_fn(|i| a[i] - b[i]));
        // rounding of the difference is no width
        let rounding = 1e-12 * (a[0] + a[2]);
        (major2 > rounding).then(|| Ellipse {
            major: (major2 * FWHM2).sqrt(),
            minor: if minor2 > rounding { (minor2 * FWHM2).sqrt() } else { 0.0 },
            position_angle,
        })
    }

    /// Solid angle π θ_M θ_m / (4 ln 2).
    pub fn solid_angle(&self) -> f64 {
        PI * self.major * self.minor / (4.0 * LN_2)
    }
}

impl From<&FittedBeam> for Ellipse {
    /// In radians.
    fn from(beam: &FittedBeam) -> Self {
        Ellipse { major: beam.major, minor: beam.minor, position_angle: beam.position_angle }
    }
}

/// Variance along the major axis, along the minor axis, position angle of the major axis.
fn axes([ee, en, nn]: [f64; 3]) -> [f64; 3] {
    let middle = 0.5 * (ee + nn);
    let half = (0.5 * (nn - ee)).hypot(en);
    // the direction (sin p, cos p) of the larger variance: tan 2p = 2 en / (nn − ee)
    let mut angle = if half > 1e-14 * middle.abs() { 0.5 * (2.0 * en).atan2(nn - ee) } else { 0.0 };
    if angle <= -FRAC_PI_2 {
        angle += PI;
    }
    [middle + half, middle - half, angle]
}

/// One Gaussian on the pixels of an image.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PixelGaussian {
    /// Peak, in the unit of the image.
    pub peak: f64,
    /// Column and row of its centre.
    pub centre: [f64; 2],
    /// Covariance over (East, North), pixels²; columns count towards the West.
    pub covariance: [f64; 3],
}

impl PixelGaussian {
    /// Value at a pixel, and its derivatives by peak, column, row and the three covariances.
    pub fn value_and_slopes(&self, x: f64, y: f64) -> (f64, [f64; 6]) {
        let [ee, en, nn] = self.covariance;
        let determinant = ee * nn - en * en;
        let (east, north) = (self.centre[0] - x, y - self.centre[1]);
        // C⁻¹ d
        let (a, b) = ((nn * east - en * north) / determinant, (ee * north - en * east) / determinant);
        let unit = (-0.5 * (a * east + b * north)).exp();
        let value = self.peak * unit;
        // d exponent / dC = ½ (C⁻¹d)(C⁻¹d)ᵀ, the off-diagonal one twice
        (value, [unit, -a * value, b * value, 0.5 * a * a * value, a * b * value, 0.5 * b * b * value])
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;

    fn ellipse(major: f64, minor: f64, degrees: f64) -> Ellipse {
        Ellipse { major, minor, position_angle: f64::to_radians(degrees) }
    }

    /// Covariance addition (computed independently with numpy): fit 20 × 12 at 30° less a beam of 10 × 8 at −20° is
    /// 17.95323 × 7.59484 at 33.8495°; 5 × 3 at 40° under that beam is 10.70610 × 9.13124 at 173.1648°.
    #[test]
    fn known_deconvolution_and_convolution() {
        let beam = ellipse(10.0, 8.0, -20.0);
        let source = ellipse(20.0, 12.0, 30.0).deconvolved(&beam).unwrap();
        for (got, want) in
            [(source.major, 17.95323), (source.minor, 7.59484), (source.position_angle.to_degrees(), 33.8495)]
        {
            assert_abs_diff_eq!(got, want, epsilon = 1e-4);
        }
        let seen = ellipse(5.0, 3.0, 40.0).convolved(&beam).unwrap();
        for (got, want) in
            [(seen.major, 10.70610), (seen.minor, 9.13124), (seen.position_angle.to_degrees(), 173.1648 - 180.0)]
        {
            assert_abs_diff_eq!(got, want, epsilon = 1e-4);
        }
        // 15 π ab / (4 ln 2): 6″ × 4″ is 27.194161 square arcseconds
        assert_abs_diff_eq!(ellipse(6.0, 4.0, 0.0).solid_angle(), 27.194161, epsilon = 1e-6);
    }

    #[test]
    fn what_is_no_wider_than_the_beam_has_no_size() {
        let beam = ellipse(10.0, 8.0, 20.0);
        assert_eq!(beam.deconvolved(&beam), None);
        assert_eq!(ellipse(9.0, 7.0, 20.0).deconvolved(&beam), None);
        let thin = ellipse(12.0, 7.9, 20.0).deconvolved(&beam).unwrap();
        assert!(thin.minor == 0.0 && (thin.major - 44f64.sqrt()).abs() < 1e-9, "{thin:?}");
        assert_eq!(Ellipse::of_covariance([1.0, 2.0, 1.0]), None);
        assert_eq!(Ellipse::of_covariance([f64::NAN, 0.0, 1.0]), None);
    }

    /// Derivatives against central differences; the bound is their own truncation, h² times third derivatives.
    #[test]
    fn slopes_are_derivatives() {
        let g = PixelGaussian { peak: 2.5, centre: [3.2, -1.1], covariance: [3.0, -0.8, 2.0] };
        let with = |i: usize, h: f64| {
            let mut p = [g.peak, g.centre[0], g.centre[1], g.covariance[0], g.covariance[1], g.covariance[2]];
            p[i] += h;
            PixelGaussian { peak: p[0], centre: [p[1], p[2]], covariance: [p[3], p[4], p[5]] }
        };
        for (x, y) in [(3.0, -1.0), (1.0, 1.0), (5.5, -3.0)] {
            let (_, slopes) = g.value_and_slopes(x, y);
            for (i, slope) in slopes.iter().enumerate() {
                let h = 1e-5;
                let difference =
                    (with(i, h).value_and_slopes(x, y).0 - with(i, -h).value_and_slopes(x, y).0) / (2.0 * h);
                assert_abs_diff_eq!(*slope, difference, epsilon = 1e-8);
            }
        }
    }
}
