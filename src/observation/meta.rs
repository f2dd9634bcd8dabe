//! What is known of an observation before its visibilities are read, and the interface that hands them out.

use super::{Block, Hand, Station};
use crate::sky::Direction;
use serde::Serialize;
use std::path::PathBuf;
use thiserror::Error;

/// One pointing: everything but the visibilities.
#[derive(Debug, Clone, Serialize)]
pub struct Observation {
    /// Where it was read from, for messages.
    pub origin: String,
    /// Name of the pointing (FITS OBJECT or SOURCE).
    pub name: String,
    /// Name of the array (TELESCOP).
    pub array_name: String,
    /// Direction for which u, v, w and phases were computed.
    pub phase_centre: Direction,
    /// Direction the stations were pointed at.
    pub aim: Direction,
    /// Stations; rows refer to them by index.
    pub stations: Vec<Station>,
    /// Centre frequency of every channel of every band, Hz, in file order.
    pub frequencies_hz: Vec<f64>,
    /// Width of every channel, Hz.
    pub widths_hz: Vec<f64>,
    /// Correlation products, in file order.
    pub hands: Vec<Hand>,
    /// UT1 − UTC, seconds, as stated by the file (0 when it does not say).
    pub ut1_utc_s: f64,
    /// Things the reader noticed that a person should know.
    pub notes: Vec<String>,
}

impl Observation {
    /// Indices of the hands that carry total intensity: parallel hands and Stokes I.
    pub fn total_intensity(&self) -> Vec<usize> {
        (0..self.hands.len()).filter(|&hand| self.hands[hand].carries_total_intensity()).collect()
    }
}

/// Reads one pointing's visibilities, block by block, as often as asked.
pub trait BlockSource: Send {
    /// What the blocks belong to.
    fn observation(&self) -> &Observation;

    /// Starts again at the first row.
    ///
    /// # Errors
    /// When the file can no longer be read.
    fn rewind(&mut self) -> Result<(), ObservationError>;

    /// The next block of rows, or `None` after the last.
    ///
    /// # Errors
    /// When the file is damaged or cannot be read.
    fn next_block(&mut self) -> Result<Option<Block>, ObservationError>;

    /// The next block to look at, kept in `kept` by sources that make their blocks as they go.
    ///
    /// # Errors
    /// As [`BlockSource::next_block`].
    fn lend_block<'a>(&'a mut self, kept: &'a mut Option<Block>) -> Result<Option<&'a Block>, ObservationError> {
        *kept = self.next_block()?;
        Ok(kept.as_ref())
    }
}

/// Why visibilities could not be had.
#[derive(Debug, Error)]
pub enum ObservationError {
    /// A FITS-level failure; it names the file.
    #[error(transparent)]
    Fits(#[from] crate::fits::FitsError),
    /// The file is good FITS but not visibilities we understand.
    #[error("{}: {problem}; expected {expected}", path.display())]
    Content {
        /// The file.
        path: PathBuf,
        /// What was found, with the keyword, table or row.
        problem: String,
        /// What was expected.
        expected: String,
    },
}
