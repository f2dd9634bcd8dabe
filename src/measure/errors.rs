//! Errors of Gaussian fits in correlated noise.
//!
//! Two ways, both tested against noise images:
//!
//! - [`covariance`]: least squares that weights all pixels alike returns p = (JᵀJ)⁻¹Jᵀd, so noise of covariance N gives the
//!   parameters exactly (to first order) the covariance (JᵀJ)⁻¹ JᵀNJ (JᵀJ)⁻¹, on whatever pixels were fitted.
//! - [`condon`]: the closed forms of Condon (1997, PASP 109, 166), eqs. 20, 21, 41 and 42, for noise that is white noise
//!   smoothed with a Gaussian beam. His exponents were found by simulation for fits of a compact region.
//!
//! Which correlation? The noise of a naturally weighted dirty image is the transform of the weights' density over the (u, v)
//! plane, and so is the point spread function: its autocorrelation *is* the point spread function ([`Correlation::Image`]).
//! White noise smoothed with a beam, the model of the closed forms, has an autocorrelation √2 wider than that beam.

use super::gaussian::{Ellipse, FWHM2};
use nalgebra::DMatrix;
use ndarray::Array2;

/// Autocorrelation of the noise: 1 at distance 0.
#[derive(Debug, Clone)]
pub enum Correlation {
    /// Every pixel for itself.
    White,
    /// A Gaussian, widths in pixels.
    Gaussian(Ellipse),
    /// An image of the autocorrelation `[y][x]` (any scale, NaN = 0) and the column and row of its peak: the point spread
    /// function, for natural weights.
    Image(Array2<f64>, (usize, usize)),
}

impl Correlation {
    /// At a distance in pixels: columns, rows.
    pub fn at(&self, dx: isize, dy: isize) -> f64 {
        match self {
            Correlation::White => f64::from(u8::from(dx == 0 && dy == 0)),
            Correlation::Gaussian(ellipse) => {
                let (sin, cos) = ellipse.position_angle.sin_cos();
                let (east, north) = (-dx as f64, dy as f64);
                let along = (east * sin + north * cos) / ellipse.major;
                let across = (east * cos - north * sin) / ellipse.minor;
                (-0.5 * FWHM2 * (along * along + across * across)).exp()
            }
            Correlation::Image(image, (x0, y0)) => {
                let value = |dx: isize, dy: isize| {
                    let (x, y) = (x0.checked_add_signed(dx)?, y0.checked_add_signed(dy)?);
                    image.get([y, x]).copied().filter(|v| v.is_finite())
                };
                // an autocorrelation is even; the image may have only one half, or a slope where it is none
                let peak = image[[*y0, *x0]];
                match (value(dx, dy), value(-dx, -dy)) {
                    (Some(a), Some(b)) => 0.5 * (a + b) / peak,
                    (Some(a), None) | (None, Some(a)) => a / peak,
                    (None, None) => 0.0,
                }
            }
        }
    }
}

/// Most pixels whose pairs are summed; regions of more are thinned, and the covariance scaled by the share left out.
const MOST_PIXELS: usize = 2500;

/// The covariance of parameters fitted without weights: `jacobian` has a row for each of `pixels` (column, row), `noise` the
/// standard deviation of each. `None` when the parameters are not determined.
pub fn covariance(
    jacobian: &DMatrix<f64>,
    pixels: &[(usize, usize)],
    noise: &[f64],
    correlation: &Correlation,
) -> Option<DMatrix<f64>> {
    let inverse = jacobian.tr_mul(jacobian).cholesky()?.inverse();
    let parameters = jacobian.ncols();
    // Thinned sums stand for the whole: each pixel kept stands for `step` of them on either side of N. The noise left
    // out is alike, because steps are short against a region that large.
    let step = pixels.len().div_ceil(MOST_PIXELS).max(1);
    let kept: Vec<usize> = (0..pixels.len()).step_by(step).collect();
    let share = pixels.len() as f64 / kept.len() as f64;
    let mut weighted = DMatrix::zeros(kept.len(), parameters);
    for (row, &i) in kept.iter().enumerate() {
        weighted.set_row(row, &(jacobian.row(i) * noise[i]));
    }
    let mut spread = DMatrix::zeros(kept.len(), parameters);
    for (a, &i) in kept.iter().enumerate() {
        let (xi, yi) = pixels[i];
        for (b, &j) in kept.iter().enumerate() {
            let (xj, yj) = pixels[j];
            let rho = correlation.at(xj as isize - xi as isize, yj as isize - yi as isize);
            if rho != 0.0 {
                for p in 0..parameters {
                    spread[(a, p)] += rho * weighted[(b, p)];
                }
            }
        }
    }
    let middle = weighted.tr_mul(&spread) * (share * share);
    Some(&inverse * middle * &inverse)
}

/// Errors of one Gaussian by the closed forms of Condon (1997), relative ones as fractions.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CondonErrors {
    /// Of the peak, relative.
    pub peak: f64,
    /// Of the integrated flux density, relative.
    pub integrated: f64,
    /// Of the place along the major axis, in the unit of the widths.
    pub along_major: f64,
    /// Of the place along the minor axis.
    pub along_minor: f64,
    /// Of the major axis, relative.
    pub major: f64,
    /// Of the minor axis, relative.
    pub minor: f64,
    /// Of the position angle, radians; at most a quarter turn, which is not to know it.
    pub position_angle: f64,
}

/// The closed forms for noise smoothed with a beam of geometric mean width `noise_width`: `signal_to_noise` is peak over
/// noise, `size` the *fitted* widths.
///
/// - ρ² = θ_M θ_m/(4 θ_N²) · [1 + (θ_N/θ_M)²]^a · [1 + (θ_N/θ_m)²]^b · (A/μ)², with (a, b) = (3/2, 3/2) for the peak,
///   (5/2, 1/2) for the major axis and the place along it, (1/2, 5/2) for the minor axis, the place along it and the
///   position angle
/// - μ²(A)/A² = μ²(θ)/θ² = 8 ln 2 μ²(x)/θ² = 2/ρ²; μ²(φ) = 4/ρ² · [θ_M θ_m/(θ_M² − θ_m²)]²
/// - μ²(S)/S² = μ²(A)/A² + θ_N²/(θ_M θ_m) · [μ²(θ_M)/θ_M² + μ²(θ_m)/θ_m²]
///
/// A fit whose shape is held fixed has the peak's error for both, and the same errors of place.
pub fn condon(signal_to_noise: f64, size: &Ellipse, noise_width: f64) -> CondonErrors {
    let Ellipse { major, minor, .. } = *size;
    let n2 = noise_width * noise_width;
    let two_by_rho2 = |a: f64, b: f64| {
        let rho2 = major * minor / (4.0 * n2)
            * (1.0 + n2 / (major * major)).powf(a)
            * (1.0 + n2 / (minor * minor)).powf(b)
            * signal_to_noise
            * signal_to_noise;
        2.0 / rho2
    };
    let (peak2, major2, minor2) = (two_by_rho2(1.5, 1.5), two_by_rho2(2.5, 0.5), two_by_rho2(0.5, 2.5));
    let difference = major * major - minor * minor;
    let angle = if difference > 0.0 { (2.0 * minor2).sqrt() * major * minor / difference } else { f64::INFINITY };
    CondonErrors {
        peak: peak2.sqrt(),
        integrated: (peak2 + n2 / (major * minor) * (major2 + minor2)).sqrt(),
        along_major: (major2 / FWHM2).sqrt() * major,
        along_minor: (minor2 / FWHM2).sqrt() * minor,
        major: major2.sqrt(),
        minor: minor2.sqrt(),
        position_angle: angle.min(std::f64::consts::FRAC_PI_2),
    }
}

/// The closed forms for noise that is independent from pixel to pixel (Condon 1997, eqs. 20 and 21):
/// ρ² = π θ_M θ_m / (8 ln 2 h²) · (A/μ)², `pixel` = h in the unit of the widths.
pub fn condon_white(signal_to_noise: f64, size: &Ellipse, pixel: f64) -> CondonErrors {
    let Ellipse { major, minor, .. } = *size;
    let rho2 = std::f64::consts::PI * major * minor / (FWHM2 * pixel * pixel) * signal_to_noise * signal_to_noise;
    let error = (2.0 / rho2).sqrt();
    let difference = major * major - minor * minor;
    let angle = if difference > 0.0 { 2f64.sqrt() * error * major * minor / difference } else { f64::INFINITY };
    CondonErrors {
        peak: error,
        integrated: error,
        along_major: error * major / FWHM2.sqrt(),
        along_minor: error * minor / FWHM2.sqrt(),
        major: error,
        minor: error,
        position_angle: angle.min(std::f64::consts::FRAC_PI_2),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::measure::gaussian::PixelGaussian;
    use approx::assert_relative_eq;

    /// 20″ × 10″, pixels of 2″, signal to noise 20, white noise: values computed with numpy from the published formulas
    /// and, to 1e-9, from the full Fisher matrix of the six parameters.
    #[test]
    fn closed_forms_in_white_noise() {
        let size = Ellipse { major: 20.0, minor: 10.0, position_angle: 0.3 };
        let e = condon_white(20.0, &size, 2.0);
        assert_relative_eq!(e.peak, 0.01328565, max_relative = 1e-6);
        assert_relative_eq!(e.along_major, 0.1128379, max_relative = 1e-6);
        assert_relative_eq!(e.along_minor, 0.0564190, max_relative = 1e-6);
        assert_relative_eq!(e.major * 20.0, 0.265713, max_relative = 1e-5);
        assert_relative_eq!(e.position_angle.to_degrees(), 0.717677, max_relative = 1e-5);
        assert_relative_eq!(e.integrated, 0.01328565, max_relative = 1e-6);
    }

    /// A point source in noise smoothed by the beam: 1, 0.424661 θ, 1 and √3, times noise over signal (the published
    /// exponents, from memory; the numbers follow by arithmetic).
    #[test]
    fn closed_forms_of_a_point_in_smoothed_noise() {
        let e = condon(10.0, &Ellipse { major: 7.0, minor: 7.0, position_angle: 0.0 }, 7.0);
        assert_relative_eq!(e.peak, 0.1, max_relative = 1e-12);
        assert_relative_eq!(e.along_major, 0.0424661 * 7.0, max_relative = 1e-5);
        assert_relative_eq!(e.major, 0.1, max_relative = 1e-12);
        assert_relative_eq!(e.integrated, 0.1 * 3f64.sqrt(), max_relative = 1e-12);
        assert_eq!(e.position_angle, std::f64::consts::FRAC_PI_2);
    }

    fn whole_source(fwhm: f64, level: f64) -> (DMatrix<f64>, Vec<(usize, usize)>) {
        let g = PixelGaussian {
            peak: 1.0,
            centre: [60.0, 60.0],
            covariance: [fwhm * fwhm / FWHM2, 0.0, fwhm * fwhm / FWHM2],
        };
        let mut pixels = Vec::new();
        let mut rows = Vec::new();
        for y in 0..121 {
            for x in 0..121 {
                let (value, slopes) = g.value_and_slopes(x as f64, y as f64);
                if value > level {
                    pixels.push((x, y));
                    rows.extend(slopes);
                }
            }
        }
        (DMatrix::from_row_slice(pixels.len(), 6, &rows), pixels)
    }

    /// Exact covariance of a fit to the whole of a point source in noise smoothed by its beam: peak 1, place 0.600561 θ,
    /// width 1.224745, flux √5; fitted above half, a tenth and a hundredth of the peak: (0.991, 0.376, 0.561, 1.719),
    /// (0.958, 0.520, 0.881, 1.990), (0.980, 0.592, 1.156, 2.193). Computed with numpy, ten pixels a width. Bound
    /// 2 %: pixels on the very edge of a region fall in or out by rounding.
    #[test]
    fn the_covariance_depends_on_the_region_as_computed_outside() {
        let fwhm = 10.0;
        let smoothed = Correlation::Gaussian(Ellipse {
            major: fwhm * 2f64.sqrt(),
            minor: fwhm * 2f64.sqrt(),
            position_angle: 0.0,
        });
        for (level, want) in [
            (1e-5, [1.0, 0.600561, 1.224745, 2.236068]),
            (0.5, [0.991, 0.376, 0.561, 1.719]),
            (0.1, [0.958, 0.520, 0.881, 1.990]),
            (0.01, [0.980, 0.592, 1.156, 2.193]),
        ] {
            let (jacobian, pixels) = whole_source(fwhm, level);
            let c = covariance(&jacobian, &pixels, &vec![1.0; pixels.len()], &smoothed).unwrap();
            let s2 = fwhm * fwhm / FWHM2;
            // θ_M² ∝ variance: dθ/θ = ½ dC/C; flux ∝ peak √(C_ee C_nn)
            let flux = [1.0, 0.0, 0.0, 0.5 / s2, 0.0, 0.5 / s2];
            let variance: f64 =
                (0..6).flat_map(|i| (0..6).map(move |j| (i, j))).map(|(i, j)| flux[i] * flux[j] * c[(i, j)]).sum();
            let got = [c[(0, 0)].sqrt(), c[(1, 1)].sqrt() / fwhm, 0.5 * c[(3, 3)].sqrt() / s2, variance.sqrt()];
            for (g, w) in got.iter().zip(want) {
                assert_relative_eq!(*g, w, max_relative = 0.02);
            }
        }
    }

    /// White noise: the covariance is the Fisher matrix's inverse, whose closed form the paper gives; the bound is the sum
    /// over pixels against the integral.
    #[test]
    fn the_covariance_in_white_noise_is_the_closed_form() {
        let (jacobian, pixels) = whole_source(10.0, 1e-9);
        let c = covariance(&jacobian, &pixels, &vec![0.05; pixels.len()], &Correlation::White).unwrap();
        let e = condon_white(20.0, &Ellipse { major: 10.0, minor: 10.0, position_angle: 0.0 }, 1.0);
        assert_relative_eq!(c[(0, 0)].sqrt(), e.peak, max_relative = 1e-3);
        assert_relative_eq!(c[(1, 1)].sqrt(), e.along_major, max_relative = 1e-3);
    }

    #[test]
    fn an_image_of_the_correlation_is_made_even() {
        let mut image = Array2::zeros((3, 3));
        image[[1, 1]] = 2.0;
        image[[1, 2]] = 1.0;
        image[[1, 0]] = 0.8;
        image[[0, 0]] = f64::NAN;
        image[[2, 2]] = 0.5;
        let c = Correlation::Image(image, (1, 1));
        assert_eq!(
            [c.at(0, 0), c.at(1, 0), c.at(-1, 0), c.at(1, 1), c.at(-1, -1), c.at(5, 0)],
            [1.0, 0.45, 0.45, 0.25, 0.25, 0.0]
        );
    }
}
