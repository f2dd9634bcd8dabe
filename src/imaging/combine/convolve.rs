//! Convolution of a field to a wider beam, by Fourier transform.
//!
//! A Gaussian of unit integral and covariance K takes a beam of covariance C to C + K; √(det(C + K)/det C), the ratio of the
//! beams' areas, keeps Jy/beam right. K acts as exp(−2π² kᵀ K k) on frequencies k, so a kernel narrower than a pixel, as
//! beams of other shapes ask for in one direction, is as exact as a wide one. Such a kernel rings over the whole image where
//! something breaks off, though: it is left as it is up to [`FLAT`] standard deviations along either axis and brought to
//! zero over [`TAPER`] pixels from there, which a sampled beam does not feel (tested to 1e-4 of its peak).
//!
//! Blank pixels (and all beyond the edge) count as 0, and a result is blank where more than [`UNCOVERED`] of the kernel fell
//! on them: there sources in the blank region could be missed by that fraction of their brightness. Blank regions grow by
//! 1.3 full widths of the kernel as a rule, and by no more than 4.5 standard deviations and 8 pixels along either axis.
//!
//! Noise is taken to be correlated like the beam, exp(−½ xᵀ C⁻¹ x), as the noise of an image of visibilities with natural
//! weights is. Then the variance of the result is det(C + K) / √(det C · det(C + 2K)) times that of the image, 1 or more.

use nalgebra::Matrix2;
use ndarray::Array2;
use num_complex::Complex64;
use rayon::prelude::*;
use rustfft::{Fft, FftPlanner};
use std::f64::consts::PI;
use std::sync::Arc;

/// Largest share of the kernel on blank pixels.
pub const UNCOVERED: f64 = 1e-3;
/// The kernel is whole up to here, in its standard deviations along an axis: exp(−10) of its peak is left.
pub const FLAT: f64 = 4.5;
/// Pixels over which it falls to zero.
pub const TAPER: f64 = 8.0;

/// Pixels that a kernel of this variance along an axis reaches along it.
pub(super) fn reach(variance: f64) -> f64 {
    FLAT * variance.max(0.0).sqrt() + TAPER
}

/// Factor of the noise's variance: a beam of covariance `beam` convolved with `kernel`, in Jy/beam of either.
pub fn variance_factor(beam: &Matrix2<f64>, kernel: &Matrix2<f64>) -> f64 {
    let wide = (beam + kernel).determinant();
    wide / (beam.determinant() * (beam + kernel * 2.0).determinant()).sqrt()
}

/// `image` (Jy/beam, NaN where blank) convolved from `beam` to `beam + kernel`, covariances in square pixels (first, second
/// axis).
pub fn convolve(image: &Array2<f64>, beam: &Matrix2<f64>, kernel: &Matrix2<f64>) -> Array2<f64> {
    let (height, width) = image.dim();
    let margin = |variance: f64| reach(variance).ceil() as usize + 1;
    let (columns, rows) = (smooth(width + margin(kernel[(0, 0)])), smooth(height + margin(kernel[(1, 1)])));
    let scale = ((beam + kernel).determinant() / beam.determinant()).sqrt();
    // the values in the real part, what was measured in the imaginary part: a real even kernel keeps them apart
    let mut grid = vec![Complex64::ZERO; columns * rows];
    grid.par_chunks_mut(columns).zip(image.outer_iter().collect::<Vec<_>>()).for_each(|(row, values)| {
        for (cell, &value) in row.iter_mut().zip(values) {
            if value.is_finite() {
                *cell = Complex64::new(value, 1.0);
            }
        }
    });
    let fft = Fft2::new(columns, rows);
    let transfer = fft.transfer(kernel);
    let mut turned = fft.forward(grid);
    turned.par_iter_mut().zip(&transfer).for_each(|(cell, factor)| *cell *= factor);
    let grid = fft.inverse(turned);
    let mut out = Array2::from_elem((height, width), f64::NAN);
    for ((y, x), value) in out.indexed_iter_mut() {
        let cell = grid[y * columns + x];
        // a blank pixel stays blank, however narrow the kernel: nothing was measured there
        if (cell.im - 1.0).abs() <= UNCOVERED && image[[y, x]].is_finite() {
            *value = scale * cell.re;
        }
    }
    out
}

/// Transforms of one size. Spectra are kept turned: column by column.
struct Fft2 {
    columns: usize,
    rows: usize,
    /// Forward and inverse, along rows and along columns.
    plans: [[Arc<dyn Fft<f64>>; 2]; 2],
}

impl Fft2 {
    fn new(columns: usize, rows: usize) -> Fft2 {
        let mut planner = FftPlanner::new();
        let plans = [columns, rows].map(|n| [planner.plan_fft_forward(n), planner.plan_fft_inverse(n)]);
        Fft2 { columns, rows, plans }
    }

    fn forward(&self, mut grid: Vec<Complex64>) -> Vec<Complex64> {
        along_rows(&mut grid, &*self.plans[0][0]);
        let mut turned = transposed(&grid, self.columns, self.rows);
        along_rows(&mut turned, &*self.plans[1][0]);
        turned
    }

    /// Without the factor 1/(columns · rows).
    fn inverse(&self, mut turned: Vec<Complex64>) -> Vec<Complex64> {
        along_rows(&mut turned, &*self.plans[1][1]);
        let mut grid = transposed(&turned, self.rows, self.columns);
        along_rows(&mut grid, &*self.plans[0][1]);
        grid
    }

    /// What the kernel does to each frequency, over columns · rows: real, 1/(columns · rows) at frequency 0.
    fn transfer(&self, kernel: &Matrix2<f64>) -> Vec<f64> {
        let (columns, rows) = (self.columns, self.rows);
        let signed = |i: usize, n: usize| if 2 * i > n { i as f64 - n as f64 } else { i as f64 };
        let mut turned = vec![Complex64::ZERO; columns * rows];
        turned.par_chunks_mut(rows).enumerate().for_each(|(column, cells)| {
            let kx = signed(column, columns) / columns as f64;
            for (row, cell) in cells.iter_mut().enumerate() {
                let ky = signed(row, rows) / rows as f64;
                // the highest frequency of an even length is its own negative: no sign, so no product with it
                let both = if 2 * column == columns || 2 * row == rows { 0.0 } else { kx * ky };
                let form = kernel[(0, 0)] * kx * kx + 2.0 * kernel[(0, 1)] * both + kernel[(1, 1)] * ky * ky;
                cell.re = (-2.0 * PI * PI * form).exp();
            }
        });
        let mut values = self.inverse(turned);
        let window = |n: usize, variance: f64| -> Vec<f64> {
            let flat = reach(variance) - TAPER;
            let value = |at: f64| match (at.abs() - flat) / TAPER {
                beyond if beyond <= 0.0 => 1.0,
                beyond if beyond < 1.0 => (0.5 * PI * beyond).cos().powi(2),
                _ => 0.0,
            };
            (0..n).map(|i| value(signed(i, n))).collect()
        };
        let (across, up) = (window(columns, kernel[(0, 0)]), window(rows, kernel[(1, 1)]));
        values.par_chunks_mut(columns).zip(&up).for_each(|(row, &up)| {
            row.iter_mut().zip(&across).for_each(|(cell, across)| *cell *= across * up);
        });
        let turned = self.forward(values);
        let whole = turned[0].re * (columns * rows) as f64;
        turned.into_iter().map(|cell| cell.re / whole).collect()
    }
}

fn along_rows(grid: &mut [Complex64], fft: &dyn Fft<f64>) {
    let scratch = fft.get_inplace_scratch_len();
    grid.par_chunks_mut(fft.len())
        .for_each_init(|| vec![Complex64::ZERO; scratch], |room, row| fft.process_with_scratch(row, room));
}

fn transposed(grid: &[Complex64], columns: usize, rows: usize) -> Vec<Complex64> {
    let mut turned = vec![Complex64::ZERO; grid.len()];
    turned.par_chunks_mut(rows).enumerate().for_each(|(column, out)| {
        for (row, cell) in out.iter_mut().enumerate() {
            *cell = grid[row * columns + column];
        }
    });
    turned
}

/// The next number with no prime factor above 5.
fn smooth(least: usize) -> usize {
    (least.max(1)..)
        .find(|&n| {
            let rest = [2, 3, 5].into_iter().fold(n, |mut n, p| {
                while n.is_multiple_of(p) {
                    n /= p;
                }
                n
            });
            rest == 1
        })
        .unwrap_or(least)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn gaussian(covariance: &Matrix2<f64>, x: f64, y: f64) -> f64 {
        let inverse = covariance.try_inverse().unwrap();
        let form = inverse[(0, 0)] * x * x + 2.0 * inverse[(0, 1)] * x * y + inverse[(1, 1)] * y * y;
        (-0.5 * form).exp()
    }

    /// The sum of two covariances, with the peak kept. Bound: what a beam of 3.5 pixels across its minor axis has beyond the
    /// sampling theorem and near its limit.
    #[test]
    fn a_gaussian_becomes_the_wider_gaussian() {
        let beam = Matrix2::new(4.0, 0.8, 0.8, 2.5);
        for kernel in [
            Matrix2::new(9.0, -3.0, -3.0, 2.0),
            Matrix2::new(4.0, -2.0, -2.0, 1.0), // a line, aslant
            Matrix2::new(0.01, 0.0, 0.0, 0.0),
            Matrix2::zeros(),
        ] {
            let (x0, y0) = (40.3, 31.8);
            let image = Array2::from_shape_fn((64, 81), |(y, x)| gaussian(&beam, x as f64 - x0, y as f64 - y0));
            let got = convolve(&image, &beam, &kernel);
            let mut worst = 0.0f64;
            for ((y, x), &value) in got.indexed_iter().filter(|(_, v)| !v.is_nan()) {
                worst = worst.max((value - gaussian(&(beam + kernel), x as f64 - x0, y as f64 - y0)).abs());
            }
            assert!(worst <= 1e-4, "{kernel}: {worst:e}");
            assert!(!got[[31, 40]].is_nan());
        }
    }

    /// Blank regions grow as stated, also by kernels narrower than a pixel, and what is kept misses at most the share stated.
    #[test]
    fn blanks_grow_as_stated() {
        let beam = Matrix2::identity() * 4.0;
        for (kernel, grown) in [
            // a corner has two edges
            (Matrix2::identity() * 6.0, 1.4 * (6.0 * 8.0 * 2f64.ln()).sqrt()),
            (Matrix2::new(2.0, 1.0, 1.0, 0.5), reach(2.0)), // a line, aslant
            (Matrix2::identity() * 0.05, reach(0.05)),
        ] {
            let mut image = Array2::from_elem((80, 80), 2.0);
            let whole = convolve(&image, &beam, &kernel);
            image[[40, 40]] = f64::NAN;
            let holed = convolve(&image, &beam, &kernel);
            let scale = ((beam + kernel).determinant() / beam.determinant()).sqrt();
            for ((y, x), &value) in holed.indexed_iter() {
                let from_hole = (y as f64 - 40.0).abs().max((x as f64 - 40.0).abs());
                let from_edge = [x, y, 79 - x, 79 - y].into_iter().min().unwrap() as f64 + 1.0;
                assert!(value.is_finite() || from_hole <= grown || from_edge <= grown, "{kernel} {x} {y}");
                assert!(
                    value.is_nan() || (value / (2.0 * scale) - 1.0).abs() <= 1.001 * UNCOVERED,
                    "{x} {y} {value}"
                );
            }
            assert!(holed[[40, 40]].is_nan());
            assert!((whole[[40, 40]] / (2.0 * scale) - 1.0).abs() <= 1e-12);
        }
    }

    #[test]
    fn noise_grows_by_the_stated_factor() {
        let unit = Matrix2::identity();
        assert_eq!(variance_factor(&unit, &Matrix2::zeros()), 1.0);
        // round: (1 + k)² / (1 + 2k)
        let factor = variance_factor(&unit, &(unit * 0.5));
        assert!((factor - 2.25 / 2.0).abs() <= 1e-15, "{factor}");
    }

    #[test]
    fn lengths_are_smooth() {
        assert_eq!([1, 7, 11, 121, 1000, 1001].map(smooth), [1, 8, 12, 125, 1000, 1024]);
    }
}
