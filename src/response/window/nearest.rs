//! Nearest-cell gridding, seen as a window.

use super::Window;
use std::f64::consts::PI;

/// A boxcar one cell wide: all of a visibility goes to the nearest cell. Its transform is sinc(x), so the image falls
/// to 2/π at the middle of an edge of the padded field and (2/π)² at a corner.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Nearest;

impl Window for Nearest {
    fn support(&self) -> usize {
        1
    }

    fn value(&self, d: f64) -> f64 {
        if d.abs() <= 0.5 { 1.0 } else { 0.0 }
    }

    fn transform(&self, x: f64) -> f64 {
        let phase = PI * x;
        if phase.abs() < 1e-4 { 1.0 - phase * phase / 6.0 } else { phase.sin() / phase }
    }

    fn name(&self) -> &'static str {
        "nearest cell"
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn transform_is_the_quadrature_of_the_value() {
        for x in [0.0, 1e-5, 1.1e-4, 0.1, 0.5, 1.3, 7.7] {
            let (got, want) = (Nearest.transform(x), super::super::transform_by_quadrature(&Nearest, x));
            assert!((got - want).abs() <= 1e-14, "x = {x}: {got} against {want}");
        }
    }
}
