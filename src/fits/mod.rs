//! FITS
use thiserror::Error;
/// error
#[derive(Debug, Error)]
pub enum FitsError {
    /// x
    #[error("x")]
    X,
}
