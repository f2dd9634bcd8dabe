//! A point source of the sky model.

use super::Direction;
use serde::{Deserialize, Serialize};

/// A point source with a power-law spectrum: S(ν) = flux_jy · (ν / reference_hz)^spectral_index.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Component {
    /// Name, for people.
    pub name: String,
    /// Where it is.
    pub direction: Direction,
    /// Stokes I flux density at the reference frequency, Jy.
    pub flux_jy: f64,
    /// Reference frequency, Hz.
    pub reference_hz: f64,
    /// Spectral index α of S ∝ ν^α.
    pub spectral_index: f64,
}

impl Component {
    /// Flux density at a frequency, Jy.
    pub fn flux_at(&self, hz: f64) -> f64 {
        if self.spectral_index == 0.0 {
            self.flux_jy
        } else {
            self.flux_jy * (hz / self.reference_hz).powf(self.spectral_index)
        }
    }
}
