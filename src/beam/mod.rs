//! Primary beams: complex voltage patterns of stations, and who has which.
//!
//! A [`Pattern`] knows directions in its own station frame only. [`StationBeams`] places patterns on the sky of one
//! pointing: parallactic rotation, pointing offset, and the aim the pattern is centred on.

mod airy;
mod assignment;
mod gaussian;
mod pattern;
mod stations;
mod unity;

pub use airy::Airy;
pub use assignment::{patterns, station_beams};
pub use gaussian::Gaussian;
pub use pattern::{Extent, Pattern, PatternError};
pub use stations::{StationBeam, StationBeams};
pub use unity::Unity;
