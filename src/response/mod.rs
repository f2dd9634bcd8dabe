//! The measurement equation and its adjoint, behind one trait.
//!
//! For the visibility k of stations p, q, with beam product A_k = g_p g_q*, weight ω_k and a Stokes I sky:
//!
//! - predict: V_k = Σ_s S_s(ν) A_k(s) exp(−2πi (u l + v m + w (n − 1)))
//! - adjoint: N(l,m) = Σ_k ω_k Re[A_k* V_k exp(+2πi (u l + v m + w (n − 1)))], W(l,m) = Σ_k ω_k |A_k|²
//!
//! Sums run over all parallel hands and Stokes I products; a Stokes I product sees the mean of the two feeds' products.
//! Two implementations: [`Exact`], the direct sums in double precision, and [`Gridded`], fast to a promised relative
//! error. Nothing above this folder knows which it holds.

mod columns;
mod exact;
mod fine_grid;
pub mod gridded;
mod rows;
pub mod window;

pub use columns::{Columns, TimeRows, UnitSource, UnitSources};
pub use exact::Exact;
pub use fine_grid::{FineGridError, fine_grid};
pub use gridded::Gridded;
pub(crate) use rows::{Recentre, wavelengths_per_metre};

use crate::observation::{Block, BlockSource, ObservationError};
use crate::sky::{Component, ImageGeometry};
use ndarray::Array2;
use thiserror::Error;

/// The two sums of the adjoint over the common pixel grid, `[y][x]`.
#[derive(Debug, Clone)]
pub struct Sums {
    /// Numerator N, Jy · Jy⁻².
    pub numerator: Array2<f64>,
    /// Normaliser W, Jy⁻².
    pub normaliser: Array2<f64>,
}

impl Sums {
    /// Zero sums over a geometry.
    pub fn zero(geometry: &ImageGeometry) -> Self {
        let shape = (geometry.height, geometry.width);
        Sums { numerator: Array2::zeros(shape), normaliser: Array2::zeros(shape) }
    }
}

/// Predicts visibilities of one pointing and sums them back onto the sky. See the module text for the formulas.
pub trait Response: Send + Sync {
    /// The common pixel grid.
    fn geometry(&self) -> &ImageGeometry;

    /// Overwrites the data of `blocks` (parallel hands and Stokes I; other hands become 0) with the model of `sky`.
    /// Weights stay as they are. Visibilities that are not used (weight 0) may be left 0.
    ///
    /// # Errors
    /// When the sky cannot be predicted to the promised tolerance.
    fn predict(&self, sky: &[Component], blocks: &mut [Block]) -> Result<(), ResponseError>;

    /// Adds N and W of all blocks of `source` to `sums`.
    ///
    /// # Errors
    /// When the source cannot be read.
    fn adjoint(&self, source: &mut dyn BlockSource, sums: &mut Sums) -> Result<(), ResponseError>;

    /// Adds W of all blocks of `source` to `sum`, and nothing else.
    ///
    /// # Errors
    /// When the source cannot be read.
    fn normaliser(&self, source: &mut dyn BlockSource, sum: &mut Array2<f64>) -> Result<(), ResponseError> {
        let mut sums = Sums { numerator: Array2::zeros(sum.dim()), normaliser: Array2::zeros(sum.dim()) };
        self.adjoint(source, &mut sums)?;
        *sum += &sums.normaliser;
        Ok(())
    }
}

/// Why a response could not be made or applied.
#[derive(Debug, Error)]
pub enum ResponseError {
    /// The visibilities could not be read.
    #[error(transparent)]
    Observation(#[from] ObservationError),
    /// The tolerance is beyond reach.
    #[error("tolerance {asked:e} cannot be kept: {reason}; the smallest that can is about {reachable:e}")]
    Tolerance {
        /// What was asked for.
        asked: f64,
        /// The smallest that works.
        reachable: f64,
        /// Why.
        reason: String,
    },
    /// Visibilities that a plan does not reach.
    #[error(
        "row {row} of a block (counted from 0) has u, v, w beyond those the response was planned for; plan it with the \
         visibilities it is applied to"
    )]
    Unplanned {
        /// The row.
        row: usize,
    },
    /// A component lies where the gridded prediction cannot reach.
    #[error(
        "component {name:?} cannot be predicted by gridding: {reason}; use a wider image, finer pixels, or the exact method"
    )]
    Component {
        /// The component.
        name: String,
        /// Why.
        reason: String,
    },
}
