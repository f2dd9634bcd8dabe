//! Prolate spheroidal windows.

use super::{Window, WindowError};
use nalgebra::{DMatrix, SymmetricEigen};
use std::f64::consts::{PI, SQRT_2};

/// (1−η²)^α ψ_α0(c, η) / ψ_α0(c, 0), η = 2d/W, α = 0 or 1.
///
/// ψ_α0 solves (1−η²)ψ″ − 2(α+1)ηψ′ + (b − c²η²)ψ = 0 with the smallest b. For α = 0 it is the function band-limited to c
/// that is most concentrated in [−1, 1] (Slepian & Pollak 1961); α = 1 weights the concentration towards the middle
/// of the image (Schwab 1984, in "Indirect Imaging", Cambridge). With c = πW/2 the transform over |x| ≤ 1/2 is ψ again.
///
/// ψ is a short sum of orthonormal Legendre (α = 0) or Gegenbauer C^(3/2) (α = 1) polynomials. In that basis the
/// operator is a symmetric matrix: k(k+2α+1) on its diagonal plus c² times the square of "multiply by η".
#[derive(Debug, Clone, PartialEq)]
pub struct Spheroidal {
    support: usize,
    alpha: u32,
    c: f64,
    /// Coefficients of the orthonormal polynomials of degree 0, 2, 4, …, scaled so that the window is 1 at 0.
    coefficients: Vec<f64>,
    /// b_k of η p_k = b_{k+1} p_{k+1} + b_k p_{k−1}, from k = 0.
    recurrence: Vec<f64>,
}

impl Spheroidal {
    /// A window of `support` cells, weighting exponent `alpha` (0 or 1) and c = πW/2.
    ///
    /// # Errors
    /// When the support is not from 1 to 16 or `alpha` not 0 or 1.
    pub fn new(support: usize, alpha: u32) -> Result<Self, WindowError> {
        Self::with_c(support, alpha, 0.5 * PI * support as f64)
    }

    /// The same with any bandwidth parameter `c`.
    ///
    /// # Errors
    /// As [`Spheroidal::new`], and when `c` is not from 0 to 100.
    pub fn with_c(support: usize, alpha: u32, c: f64) -> Result<Self, WindowError> {
        WindowError::check_support(support)?;
        WindowError::unless(alpha <= 1, "alpha", f64::from(alpha), "0 or 1")?;
        WindowError::unless((0.0..=100.0).contains(&c), "c", c, "a number from 0 to 100")?;
        // coefficients fall off faster than exponentially beyond degree c
        let terms = 30 + c.ceil() as usize;
        let a = f64::from(alpha);
        let recurrence: Vec<f64> = (0..2 * terms + 2).map(|k| multiply_by_eta(k as f64, a)).collect();
        let b = |k: usize| recurrence[k];
        let matrix = DMatrix::from_fn(terms, terms, |i, j| {
            let (low, k) = (i.min(j), 2 * i);
            match i.abs_diff(j) {
                0 => k as f64 * (k as f64 + 2.0 * a + 1.0) + c * c * (b(k).powi(2) + b(k + 1).powi(2)),
                1 => c * c * b(2 * low + 1) * b(2 * low + 2),
                _ => 0.0,
            }
        });
        let eigen = SymmetricEigen::new(matrix);
        let smallest = eigen.eigenvalues.imin();
        let mut window = Spheroidal {
            support,
            alpha,
            c,
            coefficients: eigen.eigenvectors.column(smallest).iter().copied().collect(),
            recurrence,
        };
        let centre = window.psi(0.0);
        window.coefficients.iter_mut().for_each(|coefficient| *coefficient /= centre);
        Ok(window)
    }

    /// The bandwidth parameter.
    pub fn c(&self) -> f64 {
        self.c
    }

    /// ψ_α0(c, η)/ψ_α0(c, 0), without the weight (1−η²)^α, for |η| ≤ 1. With c = πW/2 this is also the shape of the
    /// transform, at η = 2x.
    pub fn psi(&self, eta: f64) -> f64 {
        // norms of the constant polynomial: √½ over [−1, 1], √¾ with weight 1−η²
        let (mut before, mut here) = (0.0, if self.alpha == 0 { SQRT_2 / 2.0 } else { 0.75_f64.sqrt() });
        let mut sum = self.coefficients[0] * here;
        for k in 1..2 * self.coefficients.len() - 1 {
            let next = (eta * here - self.recurrence[k - 1] * before) / self.recurrence[k];
            (before, here) = (here, next);
            if k % 2 == 0 {
                sum += self.coefficients[k / 2] * here;
            }
        }
        sum
    }
}

/// b_k for polynomials orthonormal under (1−η²)^α: ½√(k(k+2α)/((k+α)²−¼)).
fn multiply_by_eta(k: f64, a: f64) -> f64 {
    if k == 0.0 { 0.0 } else { (k * (k + 2.0 * a) / ((k + a).powi(2) - 0.25)).sqrt() / 2.0 }
}

/// Spherical Bessel functions j_0 … j_last of `x` > 0, by downward recurrence, scaled by the larger of j_0 and j_1.
fn spherical_bessel(x: f64, last: usize) -> Vec<f64> {
    let start = last.max(x.ceil() as usize) + 40;
    let mut values = vec![0.0; last + 1];
    let (mut above, mut here) = (0.0, 1e-200);
    for k in (0..start).rev() {
        let below = (2 * k + 3) as f64 / x * here - above;
        (above, here) = (here, below);
        if k <= last {
            values[k] = here;
        }
        if here.abs() > 1e150 {
            (above, here) = (above * 1e-250, here * 1e-250);
            values.iter_mut().for_each(|value| *value *= 1e-250);
        }
    }
    let (sin, cos) = x.sin_cos();
    let (j0, j1) = (sin / x, (sin / x - cos) / x);
    let scale = if j0.abs() >= j1.abs() || x < 1.0 { j0 / values[0] } else { j1 / values[1] };
    values.iter_mut().for_each(|value| *value *= scale);
    values
}

impl Window for Spheroidal {
    fn support(&self) -> usize {
        self.support
    }

    fn value(&self, d: f64) -> f64 {
        let eta = 2.0 * d / self.support as f64;
        if eta.abs() > 1.0 {
            return 0.0;
        }
        let weight = if self.alpha == 0 { 1.0 } else { (1.0 - eta) * (1.0 + eta) };
        weight * self.psi(eta)
    }

    fn transform(&self, x: f64) -> f64 {
        let frequency = (PI * self.support as f64 * x).abs();
        let half = self.support as f64 / 2.0;
        // ∫ P_k cos(ωη) = 2 (−1)^(k/2) j_k(ω);  ∫ (1−η²) C_k^(3/2) cos(ωη) = 2 (−1)^(k/2) (k+1)(k+2) j_{k+1}(ω)/ω
        // (Abramowitz & Stegun 10.1.14 and Gegenbauer's generalisation of it); the constants below carry the norms.
        let last = 2 * self.coefficients.len();
        let small = frequency < 1e-8;
        let bessel = if small { vec![] } else { spherical_bessel(frequency, last) };
        let mut sum = 0.0;
        for (i, coefficient) in self.coefficients.iter().enumerate() {
            let k = 2 * i;
            let term = match (self.alpha, small) {
                (0, true) => {
                    if k == 0 {
                        SQRT_2
                    } else {
                        0.0
                    }
                }
                (0, false) => 2.0 * (k as f64 + 0.5).sqrt() * bessel[k],
                // j_1(ω)/ω → 1/3
                (_, true) => {
                    if k == 0 {
                        4.0 / 3.0 * 0.75_f64.sqrt()
                    } else {
                        0.0
                    }
                }
                (_, false) => {
                    let kk = k as f64;
                    2.0 * ((kk + 1.0) * (kk + 2.0) * (kk + 1.5)).sqrt() * bessel[k + 1] / frequency
                }
            };
            sum += if i % 2 == 0 { coefficient * term } else { -coefficient * term };
        }
        half * sum
    }

    fn name(&self) -> &'static str {
        "prolate spheroidal"
    }
}

#[cfg(test)]
mod tests {
    use super::super::transform_by_quadrature;
    use super::*;

    #[test]
    fn transform_is_the_quadrature_of_the_value() {
        for (support, alpha) in [(1, 0), (1, 1), (4, 0), (5, 1), (6, 0), (6, 1), (8, 1), (16, 0), (16, 1)] {
            let window = Spheroidal::new(support, alpha).unwrap();
            let peak = window.transform(0.0);
            for x in [0.0, 1e-9, 1e-7, 0.01, 0.1, 0.25, 0.4999, 0.5, 0.75, 1.0, 2.3, 5.1] {
                let (got, want) = (window.transform(x), transform_by_quadrature(&window, x));
                let error = (got - want).abs() / peak;
                assert!(error <= 2e-14, "W = {support}, α = {alpha}, x = {x}: {got:e} against {want:e}, {error:e}");
            }
        }
    }

    /// Schwab 1984: with c = πW/2 the transform over the padded field is the function itself.
    #[test]
    fn transform_over_the_field_is_psi_again() {
        for (support, alpha) in [(4, 0), (6, 0), (6, 1), (7, 1), (12, 1)] {
            let window = Spheroidal::new(support, alpha).unwrap();
            let peak = window.transform(0.0);
            for step in 0..=20 {
                let x = f64::from(step) / 40.0;
                let error = (window.transform(x) / peak - window.psi(2.0 * x)).abs();
                assert!(error <= 1e-14, "W = {support}, α = {alpha}, x = {x}: {error:e}");
            }
        }
    }

    /// c = 0: the lowest Legendre or Gegenbauer polynomial, a constant.
    #[test]
    fn without_bandwidth_psi_is_flat() {
        for alpha in [0, 1] {
            let window = Spheroidal::with_c(4, alpha, 0.0).unwrap();
            for eta in [0.0, 0.3, -0.8, 1.0] {
                assert!((window.psi(eta) - 1.0).abs() <= 1e-14);
            }
        }
    }

    #[test]
    fn refuses_what_cannot_be() {
        assert!(Spheroidal::new(0, 0).is_err());
        assert!(Spheroidal::new(17, 0).is_err());
        assert!(Spheroidal::new(6, 2).is_err());
        assert!(Spheroidal::with_c(6, 0, f64::NAN).is_err());
        assert!(Spheroidal::with_c(6, 0, -1.0).is_err());
    }
}
