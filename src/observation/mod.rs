//! Calibrated visibilities of one pointing: stations, channels, hands, and rows handed out in blocks.
//!
//! Everything here is already in the project's convention: for the pair (p, q) the baseline is r_q − r_p, u, v, w
//! are metres in the tangent frame of the phase centre, and a weight of 0 means "not used".

mod block;
mod fields;
mod file_source;
mod frequencies;
mod hand;
mod idi_reader;
mod idi_writer;
mod invented;
mod matrix;
mod memory;
mod meta;
mod open;
mod pointings;
mod random_groups;
mod schedule;
mod site;
mod station;
mod station_axes;
mod station_table;
mod summary;
mod time;
mod watched;

pub use block::Block;
pub use hand::Hand;
pub use idi_writer::{write_idi, write_idi_through};
pub use invented::{Invented, invent, invented_stations};
pub use memory::MemorySource;
pub use meta::{BlockSource, Observation, ObservationError};
pub use open::{ReadOptions, Selection, open, open_with};
pub use schedule::Schedule;
pub use site::Site;
pub use station::{Mount, Station};
pub use summary::{StationSummary, SuggestedImage, Summary, suggest_image};
pub use time::{ParallacticAngles, baseline_uvw, hour_angle_declination, parallactic_angle};
pub use watched::Watched;

/// Speed of light in vacuum, m/s (exact, SI).
pub const SPEED_OF_LIGHT: f64 = 299_792_458.0;
