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
        if level >= 1.0 {
            return Extent::Radius(0.0);
        }
        // |jinc(x)| ≤ 1, and ≤ 1.651 x^(−3/2): √(πx/2) |J₁(x)| is largest, 1.0340, at x = 2.166 (computed). The smaller of
        // the two for either term is an envelope that falls with radius: it holds at all radii beyond and all higher
        // frequencies.
        let (d, b) = (self.diameter_m, self.blockage_m);
        let term = |a: f64, k: f64| a * a * (1.651 * (a * k).powf(-1.5)).min(1.0);
        let envelope = |k: f64| (term(d, k) + term(b, k)) / (d * d - b * b);
        let (mut low, mut high) = (0.0, 1.0 / d);
        while envelope(high) > level && high < f64::MAX / 4.0 {
            (low, high) = (high, 2.0 * high);
        }
        for _ in 0..40 {
            let middle = 0.5 * (low + high);
            if envelope(middle) > level { low = middle } else { high = middle }
        }
        Extent::Radius(high * SPEED_OF_LIGHT / (PI * hz))
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

#[cfg(test)]
mod tests {
    use super::*;

    fn radius(dish: Airy, level: f64, hz: f64) -> f64 {
        match dish.extent(level, hz) {
            Extent::Radius(radius) => radius,
            Extent::Unbounded => f64::NAN,
        }
    }

    /// Bound of the definition itself: |g| ≤ level beyond the extent, at this and higher frequencies.
    #[test]
    fn nothing_above_the_level_beyond_the_extent() {
        for blockage in [0.0, 0.1, 2.0, 9.0] {
            let dish = Airy::new(13.0, blockage).unwrap();
            for level in [0.5, 0.1, 1e-2, 1e-4, 1e-6] {
                let start = radius(dish, level, 1.4e9);
                for step in 0..20_000 {
                    let r = start * (1.0 + 2e-3 * f64::from(step));
                    for hz in [1.4e9, 1.47e9] {
                        let got = dish.amplitude(r, hz).abs();
                        assert!(got <= level, "d = {blockage}, r = {r}: {got:e} above {level:e}");
                    }
                }
            }
        }
    }

    /// A small blockage must not widen the extent: its own pattern is wide but weak.
    #[test]
    fn extent_is_not_wasteful() {
        for level in [1e-2, 1e-3, 1e-4] {
            let open = radius(Airy::new(25.0, 0.0).unwrap(), level, 1.4e9);
            // 1.651 (πDr/λ)^(−3/2) = level
            let want = (1.651 / level).powf(2.0 / 3.0) * SPEED_OF_LIGHT / (PI * 1.4e9 * 25.0);
            assert!((open / want - 1.0).abs() < 1e-9, "{open} against {want}");
            // 0.1 m: at most 1.6e-5 of the voltage, 16 % of the lowest level, which costs 12 % of the radius
            let blocked = radius(Airy::new(25.0, 0.1).unwrap(), level, 1.4e9);
            assert!(blocked >= open && blocked <= 1.13 * open, "level {level:e}: {blocked} against {open}");
        }
    }

    #[test]
    fn every_level_has_an_end() {
        let dish = Airy::new(13.0, 1.3).unwrap();
        assert_eq!(radius(dish, 1.0, 1e9), 0.0);
        assert!(radius(dish, 0.0, 1e9) > 1.0);
        assert!(radius(dish, 1e-300, 1e9) > 1.0);
    }
}
