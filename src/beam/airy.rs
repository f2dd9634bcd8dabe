//! The beam of a uniformly lit circular aperture with a central blockage.

use super::{Extent, Pattern, PatternError};
use crate::observation::SPEED_OF_LIGHT;
use num_complex::Complex64;
use std::f64::consts::PI;

/// g = (D² jinc(πDr/λ) − d² jinc(πdr/λ)) / (D² − d²), jinc(x) = 2 J₁(x)/x, r = √(x² + y²) as a direction cosine.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Airy {
    diameter_m: f64,
    blockage_m: f64,
}

impl Airy {
    /// A dish of `diameter_m` with a central hole of `blockage_m`.
    ///
    /// # Errors
    /// When the diameter is not positive or the blockage not between 0 and the diameter.
    pub fn new(diameter_m: f64, blockage_m: f64) -> Result<Self, PatternError> {
        PatternError::unless(
            diameter_m.is_finite() && diameter_m > 0.0,
            "diameter_m",
            diameter_m,
            "a positive length",
        )?;
        let fits = (0.0..diameter_m).contains(&blockage_m);
        PatternError::unless(fits, "blockage_m", blockage_m, "a length from 0 to less than diameter_m")?;
        Ok(Airy { diameter_m, blockage_m })
    }

    fn amplitude(&self, r: f64, hz: f64) -> f64 {
        let k = PI * hz / SPEED_OF_LIGHT * r;
        let (full, hole) = (self.diameter_m.powi(2), self.blockage_m.powi(2));
        let blocked = if hole > 0.0 { hole * jinc(k * self.blockage_m) } else { 0.0 };
        (full * jinc(k * self.diameter_m) - blocked) / (full - hole)
    }
}

impl Pattern for Airy {
    fn voltages(&self, points: &[[f64; 2]], hz: f64, _feed: usize, out: &mut [Complex64]) {
        for (out, &[x, y]) in out.iter_mut().zip(points) {
            *out = Complex64::new(self.amplitude(x.hypot(y), hz), 0.0);
        }
    }

    fn feeds_alike(&self) -> bool {
        true
    }

    fn round(&self) -> bool {
        true
    }

    fn extent(&self, level: f64, hz: f64) -> Extent {
        // |J₁(x)| ≤ √(2/(πx)) · 1.06 for x ≥ 1 bounds both terms: |g| ≤ 1.7 √D (√D + √d) x₀^{-3/2} …, kept as one envelope.
        let (d, b) = (self.diameter_m, self.blockage_m);
        let envelope = |x_per_m: f64| {
            let term = |a: f64| if a > 0.0 { a * a * 1.7 * (a * x_per_m).powf(-1.5) } else { 0.0 };
            (term(d) + term(b)) / (d * d - b * b)
        };
        // envelope(k) is a pure power k^{-3/2}
        let k = (envelope(1.0) / level).powf(2.0 / 3.0);
        let first_valid = 1.0 / if b > 0.0 { b } else { d };
        Extent::Radius(k.max(first_valid) * SPEED_OF_LIGHT / (PI * hz))
    }

    fn half_power_width(&self, hz: f64) -> Option<f64> {
        // the power pattern falls monotonically to its first null, which lies beyond half power
        let (mut low, mut high) = (0.0, 1.22 * SPEED_OF_LIGHT / (hz * self.diameter_m));
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if self.amplitude(middle, hz).powi(2) > 0.5 {
                low = middle;
            } else {
                high = middle;
            }
        }
        Some(low + high)
    }

    fn describe(&self) -> String {
        format!("airy, dish {} m, blockage {} m", self.diameter_m, self.blockage_m)
    }
}

/// 2 J₁(x)/x, 1 at x = 0.
pub(crate) fn jinc(x: f64) -> f64 {
    let x = x.abs();
    if x < 1e-4 { 1.0 - x * x / 8.0 } else { 2.0 * libm::j1(x) / x }
}
