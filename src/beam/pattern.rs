//! The interface of every beam shape.

use num_complex::Complex64;
use std::fmt::Debug;
use thiserror::Error;

/// How a pattern's amplitude falls off, so that windows can end where it no longer matters.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Extent {
    /// The pattern never becomes negligible in a way worth knowing.
    Unbounded,
    /// Beyond this radius (direction cosine from the axis) the amplitude stays below the level asked about.
    Radius(f64),
}

/// A complex voltage pattern g(x, y, ν) per feed, normalised to 1 on its own axis.
///
/// `x`, `y` are direction cosines in the station frame, measured from the pattern's own axis (`x` towards East, `y`
/// towards North or, on an alt-azimuth mount, towards the zenith). The power pattern is |g|².
pub trait Pattern: Debug + Send + Sync {
    /// Voltage at each of `points` for a feed (0: X or R, 1: Y or L), written to `out` of the same length.
    fn voltages(&self, points: &[[f64; 2]], hz: f64, feed: usize, out: &mut [Complex64]);

    /// Voltage in one direction.
    fn voltage(&self, x: f64, y: f64, hz: f64, feed: usize) -> Complex64 {
        let mut out = [Complex64::ZERO];
        self.voltages(&[[x, y]], hz, feed, &mut out);
        out[0]
    }

    /// Whether both feeds have the same pattern.
    fn feeds_alike(&self) -> bool;

    /// Whether the pattern is unchanged by turning about its own axis.
    fn round(&self) -> bool;

    /// Radius beyond which |g| ≤ `level` for all frequencies at or above `hz`.
    fn extent(&self, level: f64, hz: f64) -> Extent;

    /// Full width of the power pattern at half power, radians; `None` when it has none.
    fn half_power_width(&self, hz: f64) -> Option<f64>;

    /// One line for people: shape and parameters with units.
    fn describe(&self) -> String;
}

/// A pattern parameter outside its range.
#[derive(Debug, Error, Clone, PartialEq)]
#[error("{parameter} is {value}: expected {expected}")]
pub struct PatternError {
    /// Parameter, with its unit.
    pub parameter: &'static str,
    /// What was given.
    pub value: f64,
    /// What is possible.
    pub expected: &'static str,
}

impl PatternError {
    /// Refuses a value unless `good`.
    pub(super) fn unless(
        good: bool,
        parameter: &'static str,
        value: f64,
        expected: &'static str,
    ) -> Result<(), Self> {
        if good { Ok(()) } else { Err(PatternError { parameter, value, expected }) }
    }
}
