//! The pixel grid of an image.

use super::{Direction, TangentFrame};
use serde::Serialize;
use thiserror::Error;

/// An orthographic image: centre, size and pixel.
///
/// Pixels are counted from 0, x towards the West (East is left), y towards the North; array order is `[y][x]`.
/// The centre lies on pixel `(width / 2, height / 2)`, FITS pixel `(width / 2 + 1, height / 2 + 1)`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct ImageGeometry {
    /// Where the projection touches the sphere.
    pub centre: Direction,
    /// Number of columns.
    pub width: usize,
    /// Number of rows.
    pub height: usize,
    /// Pixel side, as a direction cosine (radians at the centre).
    pub pixel: f64,
}

/// Why an image geometry was refused.
#[derive(Debug, Error, PartialEq)]
pub enum GeometryError {
    /// A side of no pixels.
    #[error("the image is {width} × {height} pixels: both sides must be at least 1")]
    Empty {
        /// Columns asked for.
        width: usize,
        /// Rows asked for.
        height: usize,
    },
    /// A pixel that is not a positive number.
    #[error("the pixel is {arcsec} arcsec: it must be a positive number")]
    BadPixel {
        /// Pixel asked for, arcseconds.
        arcsec: f64,
    },
    /// A corner would lie beyond the hemisphere.
    #[error(
        "the image is wider than a hemisphere: its corner lies at direction cosine {corner:.3} (must stay below 1); \
         take fewer or smaller pixels"
    )]
    BeyondHemisphere {
        /// Direction cosine of the corner.
        corner: f64,
    },
}

impl ImageGeometry {
    /// A geometry whose corners lie in the near hemisphere.
    ///
    /// # Errors
    /// When a side is empty, the pixel is not positive and finite, or a corner passes the hemisphere.
    pub fn new(centre: Direction, width: usize, height: usize, pixel: f64) -> Result<Self, GeometryError> {
        if width == 0 || height == 0 {
            return Err(GeometryError::Empty { width, height });
        }
        if !(pixel.is_finite() && pixel > 0.0) {
            return Err(GeometryError::BadPixel { arcsec: pixel.to_degrees() * 3600.0 });
        }
        let corner = (width as f64 / 2.0).hypot(height as f64 / 2.0) * pixel;
        if corner >= 1.0 {
            return Err(GeometryError::BeyondHemisphere { corner });
        }
        Ok(ImageGeometry { centre, width, height, pixel })
    }

    /// Pixel column and row of the centre.
    pub fn reference(&self) -> (usize, usize) {
        (self.width / 2, self.height / 2)
    }

    /// The tangent frame at the centre.
    pub fn frame(&self) -> TangentFrame {
        self.centre.frame()
    }

    /// (l, m) of a pixel position; whole numbers are pixel centres.
    pub fn lm(&self, x: f64, y: f64) -> (f64, f64) {
        let (x0, y0) = self.reference();
        (-(x - x0 as f64) * self.pixel, (y - y0 as f64) * self.pixel)
    }

    /// Pixel position of (l, m).
    pub fn pixel_at(&self, l: f64, m: f64) -> (f64, f64) {
        let (x0, y0) = self.reference();
        (x0 as f64 - l / self.pixel, y0 as f64 + m / self.pixel)
    }

    /// Pixel position of a direction, or `None` in the far hemisphere.
    pub fn pixel_of(&self, direction: Direction) -> Option<(f64, f64)> {
        let [l, m, n] = self.frame().lmn(direction);
        (n > 0.0).then(|| self.pixel_at(l, m))
    }

    /// The direction at a pixel position, or `None` beyond the hemisphere.
    pub fn direction_of(&self, x: f64, y: f64) -> Option<Direction> {
        let (l, m) = self.lm(x, y);
        self.frame().direction(l, m)
    }
}
