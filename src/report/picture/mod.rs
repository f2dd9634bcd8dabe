//! PNG pictures of images: axes in right ascension and declination through the real projection, colour bar, beam.
//!
//! North is up and East left. An image of more than about 1300 pixels a side is averaged in blocks (blank pixels left
//! out), a small one enlarged by a whole factor with its pixels kept crisp; the small print says which. Blank pixels
//! are hatched. On a two-sided scale paper white is exactly zero.

mod canvas;
mod colours;
mod graticule;
mod layout;
mod scale;
mod sexagesimal;
mod text;

pub use canvas::{Canvas, Rgb};
pub use colours::ColourMap;
pub use graticule::{Coordinate, Edge, Frame, Graticule, InnerLabel, LabelRoom, Tick, graticule};
pub use layout::paint;
pub(super) use layout::{readable_angle, readable_sizes};
pub use scale::{BarNumbers, Scale, Stretch};

use super::whole_file::{WriteError, write_whole};
use crate::imaging::beam_fit::FittedBeam;
use crate::sky::ImageGeometry;
use std::io::Write;
use std::path::Path;
use thiserror::Error;

/// What a picture says besides the pixels.
#[derive(Debug, Clone, PartialEq)]
pub struct PictureSpec<'a> {
    /// Large line at the top, for example the title of the run.
    pub title: &'a str,
    /// Name of the quantity, for example `Flux density, flat sky`.
    pub quantity: &'a str,
    /// Its unit, empty for a pure number; `^{…}` raises.
    pub unit: &'a str,
    /// Where the pixels are on the sky.
    pub geometry: ImageGeometry,
    /// Beam drawn in the corner.
    pub beam: Option<FittedBeam>,
    /// Range, stretch and colours; `None` chooses them from the values ([`Scale::automatic`]).
    pub scale: Option<Scale>,
}

/// Why a picture could not be made.
#[derive(Debug, Error)]
pub enum PictureError {
    /// Image and geometry disagree.
    #[error(
        "picture: the image has {rows} rows of {columns} pixels, its geometry {height} of {width}; they must agree"
    )]
    Shape {
        /// Rows of the image.
        rows: usize,
        /// Columns of the image.
        columns: usize,
        /// Rows of the geometry.
        height: usize,
        /// Columns of the geometry.
        width: usize,
    },
    /// A colour scale without a range.
    #[error(
        "picture: the colour scale from {low} to {high} with softening {softening} is not usable; give finite \
         numbers, the lower first, and a positive softening"
    )]
    BadScale {
        /// Lower end.
        low: f64,
        /// Upper end.
        high: f64,
        /// Softening of the asinh stretch (1 for linear).
        softening: f64,
    },
    /// The font inside the program is damaged.
    #[error("picture: the font inside the program cannot be read; this is a defect of the build")]
    Font,
    /// The PNG encoder refused.
    #[error("picture: the PNG could not be made ({0})")]
    Png(#[from] png::EncodingError),
    /// The file could not be written.
    #[error(transparent)]
    Write(#[from] WriteError),
}

/// Writes a painted picture as a PNG file.
///
/// # Errors
/// When the PNG cannot be made or the file not written; nothing is left behind then.
pub fn write_picture(path: &Path, canvas: &Canvas) -> Result<(), PictureError> {
    let bytes = canvas.png()?;
    write_whole(path, |file| file.write_all(&bytes))?;
    Ok(())
}
