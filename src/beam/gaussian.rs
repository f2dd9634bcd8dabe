//! A Gaussian beam whose width is proportional to wavelength.

use super::{Extent, Pattern, PatternError};
use num_complex::Complex64;
use std::f64::consts::LN_2;

/// g = exp(−2 ln2 (x²/θx² + y²/θy²)), θx = θ √a, θy = θ/√a, θ the full width at half *power*, θ ∝ 1/ν.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Gaussian {
    half_power: f64,
    at_hz: f64,
    axis_ratio: f64,
}

impl Gaussian {
    /// A pattern of full half-power width `half_power` (radians) at `at_hz`, and axis ratio θx/θy.
    ///
    /// # Errors
    /// When a parameter is not a positive finite number.
    pub fn new(half_power: f64, at_hz: f64, axis_ratio: f64) -> Result<Self, PatternError> {
        let positive = |v: f64| v.is_finite() && v > 0.0;
        let degrees = half_power.to_degrees();
        PatternError::unless(positive(degrees), "half_power_deg", degrees, "a positive angle")?;
        PatternError::unless(positive(at_hz), "at_hz", at_hz, "a positive frequency")?;
        PatternError::unless(positive(axis_ratio), "axis_ratio", axis_ratio, "a positive ratio")?;
        Ok(Gaussian { half_power, at_hz, axis_ratio })
    }

    fn width(&self, hz: f64) -> f64 {
        self.half_power * self.at_hz / hz
    }
}

impl Pattern for Gaussian {
    fn voltages(&self, points: &[[f64; 2]], hz: f64, _feed: usize, out: &mut [Complex64]) {
        let width = self.width(hz);
        let base = -2.0 * LN_2 / (width * width);
        let (kx, ky) = (base / self.axis_ratio, base * self.axis_ratio);
        for (out, &[x, y]) in out.iter_mut().zip(points) {
            *out = Complex64::new((kx * x * x + ky * y * y).exp(), 0.0);
        }
    }

    fn feeds_alike(&self) -> bool {
        true
    }

    fn round(&self) -> bool {
        self.axis_ratio == 1.0
    }

    fn extent(&self, level: f64, hz: f64) -> Extent {
        if level >= 1.0 {
            return Extent::Radius(0.0);
        }
        let widest = self.width(hz) * self.axis_ratio.max(1.0 / self.axis_ratio).sqrt();
        Extent::Radius(widest * (-level.ln() / (2.0 * LN_2)).sqrt())
    }

    fn half_power_width(&self, hz: f64) -> Option<f64> {
        Some(self.width(hz))
    }

    fn describe(&self) -> String {
        let ratio = if self.round() { String::new() } else { format!(", axis ratio {}", self.axis_ratio) };
        format!(
            "gaussian, {:.4}° at half power at {:.4} GHz{ratio}",
            self.half_power.to_degrees(),
            self.at_hz / 1e9
        )
    }
}
