//! The Kaiser–Bessel window.

use super::{Window, WindowError, i0_scaled};
use std::f64::consts::PI;

/// I₀(β √(1−η²)) / I₀(β), η = 2d/W. Its transform is a closed form: W sinh(z)/(z I₀(β)), z² = β² − (πWx)²
/// (sin where z² < 0). Jackson et al. 1991, IEEE Trans. Med. Imaging 10, 473.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct KaiserBessel {
    support: usize,
    beta: f64,
    /// exp(−β) I₀(β).
    scaled_centre: f64,
}

impl KaiserBessel {
    /// A window of `support` cells and shape β.
    ///
    /// # Errors
    /// When the support is not from 1 to 16 or β not from 0 to 500.
    pub fn new(support: usize, beta: f64) -> Result<Self, WindowError> {
        WindowError::check_support(support)?;
        WindowError::unless((0.0..=500.0).contains(&beta), "beta", beta, "a number from 0 to 500")?;
        Ok(KaiserBessel { support, beta, scaled_centre: i0_scaled(beta) })
    }

    /// β of Beatty, Nishimura & Pauly 2005 (IEEE Trans. Med. Imaging 24, 799) for padding σ = L/field:
    /// π √(W²(σ − ½)²/σ² − 0.8).
    ///
    /// # Errors
    /// When the support is not from 1 to 16, or too small for the formula to have a value, or σ not from 1 to 8.
    pub fn beatty(support: usize, oversampling: f64) -> Result<Self, WindowError> {
        WindowError::check_support(support)?;
        check_oversampling(oversampling)?;
        let square = (support as f64 * (oversampling - 0.5) / oversampling).powi(2) - 0.8;
        WindowError::unless(square >= 0.0, "support", support as f64, "wide enough for Beatty's formula (W ≥ 2)")?;
        Self::new(support, PI * square.sqrt())
    }

    /// The shape parameter.
    pub fn beta(&self) -> f64 {
        self.beta
    }
}

pub(super) fn check_oversampling(oversampling: f64) -> Result<(), WindowError> {
    let good = oversampling > 1.0 && oversampling <= 8.0;
    WindowError::unless(good, "padding", oversampling, "L/field above 1 and up to 8")
}

impl Window for KaiserBessel {
    fn support(&self) -> usize {
        self.support
    }

    fn value(&self, d: f64) -> f64 {
        let eta = 2.0 * d / self.support as f64;
        if eta.abs() > 1.0 {
            return 0.0;
        }
        // (1−η)(1+η) keeps its digits near the edge, where 1−η² would not
        let z = self.beta * ((1.0 - eta) * (1.0 + eta)).sqrt();
        i0_scaled(z) / self.scaled_centre * (z - self.beta).exp()
    }

    fn transform(&self, x: f64) -> f64 {
        let width = self.support as f64;
        let frequency = PI * width * x;
        let square = (self.beta - frequency) * (self.beta + frequency);
        // sinh(z)/z · exp(−β), without overflow for large z and without cancellation for small z
        let scaled = if square >= 1.0 {
            let z = square.sqrt();
            ((z - self.beta).exp() - (-z - self.beta).exp()) / (2.0 * z)
        } else {
            let z = square.abs().sqrt();
            let ratio = if z < 1e-3 {
                1.0 + square / 6.0
            } else if square > 0.0 {
                z.sinh() / z
            } else {
                z.sin() / z
            };
            ratio * (-self.beta).exp()
        };
        width * scaled / self.scaled_centre
    }

    fn name(&self) -> &'static str {
        "Kaiser–Bessel"
    }
}

#[cfg(test)]
mod tests {
    use super::super::transform_by_quadrature;
    use super::*;

    #[test]
    fn transform_is_the_quadrature_of_the_value() {
        for (support, beta) in [(1, 0.0), (2, 1.0), (4, 8.996), (6, 13.855), (7, 17.0), (16, 36.0)] {
            let window = KaiserBessel::new(support, beta).unwrap();
            let peak = window.transform(0.0);
            let edge = beta / (PI * support as f64);
            for x in [0.0, 0.1, 0.25, 0.4999, 0.75, 1.0, 2.3, edge, edge * (1.0 + 1e-9), edge + 1e-7, edge - 1e-4] {
                let (got, want) = (window.transform(x), transform_by_quadrature(&window, x));
                let error = (got - want).abs() / peak;
                assert!(error <= 1e-14, "W = {support}, x = {x}: {got:e} against {want:e}, relative {error:e}");
            }
        }
    }

    #[test]
    fn is_one_at_the_centre_and_nothing_beyond_the_edge() {
        let window = KaiserBessel::new(5, 12.0).unwrap();
        assert_eq!(window.value(0.0), 1.0);
        assert_eq!(window.value(2.5001), 0.0);
        assert!(window.value(2.5) > 0.0 && window.value(-2.5) == window.value(2.5));
    }

    #[test]
    fn refuses_what_cannot_be() {
        for (support, beta) in [(0, 1.0), (17, 1.0), (4, -1.0), (4, f64::NAN), (4, 501.0)] {
            assert!(matches!(KaiserBessel::new(support, beta), Err(WindowError::Parameter { .. })));
        }
        assert!(KaiserBessel::beatty(1, 1.25).is_err());
        assert!(KaiserBessel::beatty(6, 1.0).is_err());
        assert!(KaiserBessel::beatty(6, f64::NAN).is_err());
    }
}
