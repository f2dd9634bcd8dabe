//! Why fields cannot be combined.

use crate::fits::{FitsError, FitsProblem};
use crate::sky::GeometryError;
use std::path::PathBuf;
use thiserror::Error;

/// Why fields cannot be combined. Every message names the file and what to do.
#[derive(Debug, Error)]
pub enum CombineError {
    /// A file that cannot be read, or whose header is not understood.
    #[error(transparent)]
    Fits(#[from] FitsError),
    /// A file without an image.
    #[error("{}: holds no image of two or more axes; expected a FITS image of one plane", path.display())]
    NotAnImage {
        /// The file.
        path: PathBuf,
    },
    /// An image with too many pixels.
    #[error("{}: {width} × {height} pixels; at most {most} can be read; cut the image into pieces", path.display())]
    FieldTooLarge {
        /// The file.
        path: PathBuf,
        /// Columns.
        width: usize,
        /// Rows.
        height: usize,
        /// Most pixels.
        most: usize,
    },
    /// A map of weights or noise on other pixels.
    #[error(
        "{}: {found}, its image {} {expected}; a map of {what} must lie on the pixels of its image", path.display(),
        image.display()
    )]
    OtherPixels {
        /// The map.
        path: PathBuf,
        /// The image.
        image: PathBuf,
        /// `weights` or `noise`.
        what: &'static str,
        /// What the map has.
        found: String,
        /// What the image has.
        expected: String,
    },
    /// A unit other than the one needed.
    #[error("{}: BUNIT is {found:?}; expected {expected}", path.display())]
    Unit {
        /// The file.
        path: PathBuf,
        /// What stands there.
        found: String,
        /// What should.
        expected: String,
    },
    /// No usable pixel.
    #[error("{}: {why}; leave this field out, or give another map of its noise", path.display())]
    NothingThere {
        /// The file.
        path: PathBuf,
        /// What is wrong with all pixels.
        why: &'static str,
    },
    /// No field reaches the output grid.
    #[error(
        "no field overlaps the pixels of [image] (centre {centre_deg:?} degrees, {width} × {height} pixels); the fields lie \
         around {fields}; compare centre_deg with these, or leave [image] out"
    )]
    NoOverlap {
        /// Centre of the grid, degrees.
        centre_deg: [f64; 2],
        /// Columns.
        width: usize,
        /// Rows.
        height: usize,
        /// Places of the fields in words.
        fields: String,
    },
    /// All that reaches the grid is lost at edges and around blanks.
    #[error(
        "nothing is left of the fields on the pixels of the mosaic: interpolation takes 6 pixels along every edge and around \
         every blank pixel, a convolution what its kernel reaches; give larger images, without holes{}",
        if *.convolved { ", or of more similar beams" } else { "" }
    )]
    NothingLeft {
        /// Whether any field was convolved.
        convolved: bool,
    },
    /// A beam that the pixels of its image cannot hold.
    #[error(
        "{}: BMAJ and BMIN make a beam of {major_px:.4} × {minor_px:.4} pixels, the image has {width} × {height}; expected at \
         least one pixel and less than the image (both are in degrees)", path.display()
    )]
    Beam {
        /// The image.
        path: PathBuf,
        /// Longest full width at half maximum, pixels.
        major_px: f64,
        /// Shortest, pixels.
        minor_px: f64,
        /// Columns.
        width: usize,
        /// Rows.
        height: usize,
    },
    /// The mosaic would be too large.
    #[error(
        "the mosaic would have {width} × {height} pixels of {pixel_arcsec:.4} arcsec; at most {most} in all are made (its \
         images would take {gib:.0} GiB of memory); give a table [image] with a larger pixel or a smaller size"
    )]
    TooLarge {
        /// Columns.
        width: usize,
        /// Rows.
        height: usize,
        /// Pixel, arcseconds.
        pixel_arcsec: f64,
        /// Most pixels.
        most: usize,
        /// Memory for it, GiB.
        gib: f64,
    },
    /// No grid holds the fields.
    #[error("the fields do not fit on one image ({0}); give a table [image] for the part wanted")]
    Grid(#[from] GeometryError),
    /// Nothing to combine.
    #[error("there is no field; expected at least one")]
    NoField,
}

/// Names the file beside a problem of its header.
pub(super) fn at(path: &std::path::Path) -> impl Fn(FitsProblem) -> CombineError {
    move |problem| CombineError::Fits(problem.at(path))
}
