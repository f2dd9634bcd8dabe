//! Pixels on which a list of point sources can be predicted by gridding, whatever image is wanted of it later.

use super::rows::wavelengths_per_metre;
use crate::beam::StationBeams;
use crate::observation::{Block, Observation};
use crate::sky::{Component, ImageGeometry};
use thiserror::Error;

/// Pixels in the finest fringe: twice the sampling theorem's two, so that sources between pixels can be interpolated.
const PIXELS_PER_FRINGE: f64 = 4.0;
/// Pixels beyond the outermost source: room for its interpolation kernel.
const MARGIN: f64 = 64.0;
/// Widest grid worth its memory and time (8192² double-precision cells are 0.5 GiB a term).
const WIDEST: usize = 8192;
/// Direction cosine that corners may reach: the projection is steep beyond.
const FARTHEST_CORNER: f64 = 0.95;

/// Why there are no such pixels.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum FineGridError {
    /// Too many of them.
    #[error(
        "the gridded prediction of {pointing} would need {width} × {width} pixels of {pixel_arcsec:.3} arcsec (a quarter \
         of the finest fringe), to reach {name} {away_deg:.3}° from the aim; it stops at {WIDEST} × {WIDEST}"
    )]
    TooWide {
        /// The pointing.
        pointing: String,
        /// Pixels to a side.
        width: usize,
        /// Side of a pixel, arcseconds.
        pixel_arcsec: f64,
        /// The outermost component.
        name: String,
        /// Its angle from the aim, degrees.
        away_deg: f64,
    },
    /// The projection does not reach so far.
    #[error("the gridded prediction of {pointing} does not reach {name}, {away_deg:.1}° from the aim")]
    TooFar {
        /// The pointing.
        pointing: String,
        /// The outermost component.
        name: String,
        /// Its angle from the aim, degrees.
        away_deg: f64,
    },
}

/// A square geometry about the aim: pixels of a quarter of the finest fringe of `blocks`, as wide as the components of
/// `sky` that the stations see, and 64 pixels more to each side.
///
/// # Errors
/// When that is wider than 8192 pixels, or a component is so far from the aim that the projection does not hold it.
pub fn fine_grid(
    observation: &Observation,
    beams: &StationBeams,
    sky: &[Component],
    blocks: &[Block],
) -> Result<ImageGeometry, FineGridError> {
    let frame = observation.aim.frame();
    let (mut reach, mut outermost) = (0.0f64, None);
    for component in sky {
        let [l, m, n] = frame.lmn(component.direction);
        if n > 0.0 && beams.inside(l, m) && l.abs().max(m.abs()) >= reach {
            reach = l.abs().max(m.abs());
            outermost = Some(component);
        }
    }
    let name = outermost.map_or_else(String::new, |component| component.name.clone());
    let away_deg = outermost.map_or(0.0, |component| component.direction.separation(observation.aim).to_degrees());
    let pointing = observation.name.clone();
    let farthest = FARTHEST_CORNER / std::f64::consts::SQRT_2;
    if reach >= 0.9 * farthest {
        return Err(FineGridError::TooFar { pointing, name, away_deg });
    }

    let highest = observation.frequencies_hz.iter().copied().fold(0.0, f64::max);
    let longest = blocks.iter().flat_map(|b| &b.uvw_m).map(|[u, v, _]| u.hypot(*v)).fold(0.0, f64::max);
    let fringes = longest * wavelengths_per_metre(highest);
    // a short array's quarter fringe is so wide that the margin would pass the horizon: finer pixels then
    let pixel =
        (1.0 / (PIXELS_PER_FRINGE * fringes.max(f64::MIN_POSITIVE))).min((farthest - reach) / (MARGIN + 2.0));
    let width = 2 * (reach / pixel + MARGIN).ceil() as usize + 2;
    let pixel_arcsec = pixel.to_degrees() * 3600.0;
    let too_wide =
        FineGridError::TooWide { pointing: pointing.clone(), width, pixel_arcsec, name: name.clone(), away_deg };
    if width > WIDEST {
        return Err(too_wide);
    }
    ImageGeometry::new(observation.aim, width, width, pixel).map_err(|_| FineGridError::TooFar {
        pointing,
        name,
        away_deg,
    })
}
