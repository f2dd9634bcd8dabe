//! FITS files (FITS Standard 4.0): headers, images, binary tables and random groups, read and written.
//!
//! Knows nothing of interferometry. Names are taken literally, compressed files are refused, and nothing is allocated
//! before the sizes in a header have been checked against the length of the file. Data are read in blocks by position,
//! so a file may be larger than memory; a file cut short while it is read gives an error. Files are written beside
//! their final name and renamed when they are whole: a failed write leaves nothing behind.
//!
//! ```
//! use evensky::fits::{FitsFile, Header, write_image_f32};
//! let path = std::env::temp_dir().join(format!("evensky-doc-{}.fits", std::process::id()));
//! let mut header = Header::new();
//! header.set("OBJECT", "Test field", "name of the field").set("BMAJ", 0.0125, "[deg]").history("made in a doc test");
//! write_image_f32(&path, &header, &[3, 2], &[0.0, 1.0, 2.0, 3.0, 4.0, 5.0])?;
//! let file = FitsFile::open(&path)?;
//! assert_eq!(file.image_f32(0)?, [0.0, 1.0, 2.0, 3.0, 4.0, 5.0]);
//! assert_eq!(file.hdus()[0].header.float("BMAJ")?, Some(0.0125));
//! # std::fs::remove_file(&path).unwrap();
//! # Ok::<(), Box<dyn std::error::Error>>(())
//! ```
#![forbid(unsafe_code)]

mod big_endian;
mod card;
mod celestial;
mod error;
mod file;
mod groups;
mod header;
mod image;
mod table;
mod table_write;
mod write;

pub use big_endian::{Element, NumberKind};
pub use card::Value;
pub use celestial::{CelestialAxes, celestial_axes};
pub use error::{FitsError, FitsProblem};
pub use file::{FitsFile, Hdu, HduKind};
pub use groups::{GroupParameter, Groups};
pub use header::Header;
pub use table::{Column, ColumnKind, Table};
pub use table_write::{ColumnSpec, TableWriter};
pub use write::{FitsWriter, write_image_f32, write_image_f64};

/// Length of a FITS block, bytes.
pub const BLOCK: usize = 2880;
/// Length of a header card, bytes.
pub const CARD: usize = 80;
