//! From images and visibilities to a list of sources: places, flux densities, sizes, spectral indices, and their errors.
//!
//! - [`find_sources`]: peaks of signal to noise in any flat-sky image (deconvolved or dirty), islands, Gaussians fitted by
//!   Levenberg and Marquardt's method, errors for correlated noise.
//! - [`joint_fluxes`]: flux densities at given places by one linear least squares straight on the visibilities, with the true
//!   beam of every baseline, and their covariance. [`NormalEquations`] and [`crate::response::Columns`] are its parts, open
//!   to whoever propagates errors through it.
//!
//! `docs/measuring.md` holds the formulas and the biases: noise bias, clean bias, resolved sources.

pub mod errors;
mod fit;
mod found;
mod gaussian;
mod islands;
mod joint;
mod least_squares;
mod list;
mod names;
mod normal;
mod positions;
mod source;

pub use errors::Correlation;
pub use fit::{CORE, FittedPeak, MOST_TOGETHER, Plate, RESOLVED, Remarks, Shapes, fit_peaks, height_at, noise_of};
pub use found::{Errors, FindOptions, find_sources};
pub use gaussian::{Ellipse, PixelGaussian};
pub use islands::{Peak, Rise, peaks};
pub use joint::{JointFluxes, JointOptions, Reading, joint_fluxes, survey};
pub use least_squares::{Fitted, fit as least_squares};
pub use list::{ListFluxes, ListOptions, Search, fluxes_from_visibilities, read_maps, survey_visibilities};
pub use names::{name_sources, position_name};
pub use normal::{NormalEquations, Seen, Solution};
pub use positions::{Position, PositionsError, read_positions};
pub use source::{Method, Size, Source};

use crate::observation::ObservationError;
use crate::response::ResponseError;
use thiserror::Error;

/// Why sources could not be measured.
#[derive(Debug, Error)]
pub enum MeasureError {
    /// The visibilities could not be read.
    #[error(transparent)]
    Observation(#[from] ObservationError),
    /// The residual could not be gridded.
    #[error(transparent)]
    Response(#[from] ResponseError),
    /// Two sources whose visibilities are the same.
    #[error(
        "sources {first} and {second} of the list (counted from 0) cannot be told apart: they lie {separation_arcsec:.3} \
         arcsec from each other, their visibilities agree to {:.1e}; measure one of them, or their sum",
        1.0 - .correlation.abs()
    )]
    Singular {
        /// The first of the pair.
        first: usize,
        /// The second.
        second: usize,
        /// Angle between them, arcseconds.
        separation_arcsec: f64,
        /// Overlap of their visibilities, −1 to 1.
        correlation: f64,
    },
    /// Sums that are no numbers.
    #[error(
        "the normal equations hold values that are no numbers; look for sources at impossible places or weights beyond \
         the range of the sums"
    )]
    NotANumber,
}
