//! Anti-alias windows: how one visibility is spread over the cells around it.
//!
//! A window of support W lives on |d| ≤ W/2 cells about the visibility's exact position. Spreading with `value` and
//! transforming multiplies the image by `transform(x)`, x = l/L with L the padded field (the reciprocal of the cell), so
//! the image is divided by `transform` once, at the end. What is left is aliasing, measured by [`aliasing`]:
//! sky outside ±L/2 that a finite window lets in, which padding (σ = L/field > 1) keeps away from the field used.
//!
//! Position convention (everywhere in this crate): a visibility at position `x` cells falls on the cells
//! `first .. first + W`, `first = ceil(x − W/2)`, and with `f = first − (x − W/2)` in [0, 1) the i-th of them lies at
//! distance `d = i − W/2 + f`. See [`locate`].

mod bessel;
mod choose;
mod kaiser_bessel;
mod nearest;
mod polynomial;
mod spheroidal;

pub use bessel::i0_scaled;
pub use choose::{Aliasing, Choice, Kind, aliasing, best_kaiser_bessel, choose, choose_kind};
pub use kaiser_bessel::KaiserBessel;
pub use nearest::Nearest;
pub use polynomial::{MAX_TAPS, PolynomialWindow, Real, locate};
pub use spheroidal::Spheroidal;

use std::fmt::Debug;
use thiserror::Error;

/// A real, even window over a few cells, and its transform.
pub trait Window: Send + Sync + Debug {
    /// Support W in cells: the window lives on |d| ≤ W/2 and is 0 beyond.
    fn support(&self) -> usize;

    /// The window at `d` cells from the visibility; 1 at 0.
    fn value(&self, d: f64) -> f64;

    /// ∫ value(d) cos(2π d x) dd, for any x = l/L (the image lies within |x| ≤ 1/2, aliases beyond).
    fn transform(&self, x: f64) -> f64;

    /// Its usual name.
    fn name(&self) -> &'static str;
}

/// Why a window could not be made.
#[derive(Debug, Error, Clone, PartialEq)]
pub enum WindowError {
    /// A parameter outside its range.
    #[error("window {parameter} is {value}: expected {expected}")]
    Parameter {
        /// Which.
        parameter: &'static str,
        /// What was given.
        value: f64,
        /// What is possible.
        expected: &'static str,
    },
    /// No window of at most [`MAX_TAPS`] cells keeps the tolerance.
    #[error(
        "no window of {MAX_TAPS} cells or fewer keeps aliasing below {asked:e} with padding {oversampling}: \
         the smallest within reach is {reachable:e}; ask for a larger tolerance or more padding"
    )]
    Unreachable {
        /// Tolerance asked for.
        asked: f64,
        /// Padding σ = L/field.
        oversampling: f64,
        /// Smallest worst-case aliasing reached.
        reachable: f64,
    },
    /// A polynomial fit that cannot be as good as asked.
    #[error(
        "no polynomial of degree {degree} or lower follows the {window} window to {asked:e}: reached {reached:e}"
    )]
    Fit {
        /// The window's name.
        window: &'static str,
        /// Largest degree tried.
        degree: usize,
        /// Error asked for.
        asked: f64,
        /// Error reached.
        reached: f64,
    },
}

impl WindowError {
    fn unless(good: bool, parameter: &'static str, value: f64, expected: &'static str) -> Result<(), Self> {
        if good { Ok(()) } else { Err(WindowError::Parameter { parameter, value, expected }) }
    }

    fn check_support(support: usize) -> Result<(), Self> {
        let good = (1..=MAX_TAPS).contains(&support);
        Self::unless(good, "support", support as f64, "a whole number of cells from 1 to 16")
    }
}

/// Transform of `window` by composite Gauss–Legendre quadrature: the slow truth that closed forms are tested against.
#[cfg(test)]
pub(crate) fn transform_by_quadrature(window: &dyn Window, x: f64) -> f64 {
    // Eight-point rule nodes and weights (Abramowitz & Stegun table 25.4), on pieces of 1/32 cell.
    const RULE: [(f64, f64); 4] = [
        (0.183_434_642_495_649_8, 0.362_683_783_378_362),
        (0.525_532_409_916_329, 0.313_706_645_877_887_3),
        (0.796_666_477_413_626_7, 0.222_381_034_453_374_47),
        (0.960_289_856_497_536_3, 0.101_228_536_290_376_26),
    ];
    let (half, pieces) = (window.support() as f64 / 2.0, 32 * window.support());
    let width = half / pieces as f64;
    let term = |d: f64| window.value(d) * (std::f64::consts::TAU * d * x).cos();
    let mut sum = 0.0;
    for piece in 0..pieces {
        let middle = (piece as f64 + 0.5) * width;
        for (node, weight) in RULE {
            sum += weight * (term(middle - node * width / 2.0) + term(middle + node * width / 2.0));
        }
    }
    sum * width
}
