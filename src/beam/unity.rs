//! The pattern of a station that sees all of the sky alike.

use super::{Extent, Pattern};
use num_complex::Complex64;

/// g = 1 everywhere: no beam correction.
#[derive(Debug, Clone, Copy, Default)]
pub struct Unity;

impl Pattern for Unity {
    fn voltages(&self, points: &[[f64; 2]], _hz: f64, _feed: usize, out: &mut [Complex64]) {
        out[..points.len()].fill(Complex64::ONE);
    }

    fn feeds_alike(&self) -> bool {
        true
    }

    fn round(&self) -> bool {
        true
    }

    fn extent(&self, _level: f64, _hz: f64) -> Extent {
        Extent::Unbounded
    }

    fn half_power_width(&self, _hz: f64) -> Option<f64> {
        None
    }

    fn describe(&self) -> String {
        "unity".to_owned()
    }
}
