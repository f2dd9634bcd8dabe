//! Masks: where components may lie.

use crate::fits::{FitsError, FitsFile, FitsProblem, Header};
use crate::run::Circle;
use crate::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use std::path::Path;
use thiserror::Error;

/// How far the grid of a mask may be off, pixels.
const OFF: f64 = 0.01;

/// Why a mask cannot be used.
#[derive(Debug, Error)]
pub enum MaskError {
    /// The file cannot be read.
    #[error(transparent)]
    Fits(#[from] FitsError),
    /// A keyword cannot be read.
    #[error(transparent)]
    Header(#[from] FitsProblem),
    /// Its pixels are not those of the image.
    #[error("its {what} is {found}; expected {expected}, as in the products of this image")]
    Grid {
        /// Keyword, or the size.
        what: String,
        /// What stands there.
        found: String,
        /// What the image has.
        expected: String,
    },
}

/// Pixels whose centre lies in a circle.
pub fn circles_mask(geometry: &ImageGeometry, circles: &[Circle]) -> Array2<bool> {
    let mut mask = Array2::from_elem((geometry.height, geometry.width), false);
    for circle in circles {
        let centre = Direction::from_deg(circle.centre_deg[0], circle.centre_deg[1]);
        let radius = (circle.radius_arcsec / 3600.0).to_radians();
        for ((y, x), open) in mask.indexed_iter_mut() {
            if !*open && let Some(direction) = geometry.direction_of(x as f64, y as f64) {
                *open = direction.separation(centre) <= radius;
            }
        }
    }
    mask
}

/// Reads a mask: an image on the pixels of `geometry`, open where it is neither 0 nor blank.
///
/// # Errors
/// When it cannot be read, or its pixels are others.
pub fn read_mask(path: &Path, geometry: &ImageGeometry) -> Result<Array2<bool>, MaskError> {
    let file = FitsFile::open(path)?;
    let header = &file.hdus()[0].header;
    let other =
        |what: &str, found: String, expected: String| MaskError::Grid { what: what.to_owned(), found, expected };
    let axes = header.integer("NAXIS")?.unwrap_or(0);
    let mut size = Vec::new();
    for axis in 1..=axes {
        size.push(header.integer(&format!("NAXIS{axis}"))?.unwrap_or(0));
    }
    let expected = [geometry.width as i64, geometry.height as i64];
    if size.len() < 2 || size[..2] != expected || size[2..].iter().any(|&n| n != 1) {
        let shown = |n: &[i64]| n.iter().map(i64::to_string).collect::<Vec<_>>().join(" × ");
        return Err(other("size", format!("{} pixels", shown(&size)), format!("{} pixels", shown(&expected))));
    }
    check_grid(header, geometry, &other)?;
    let pixels = file.image_f64(0)?;
    let open = pixels.iter().map(|value| value.is_finite() && *value != 0.0).collect();
    Array2::from_shape_vec((geometry.height, geometry.width), open)
        .map_err(|error| other("size", error.to_string(), "as many pixels as its header says".to_owned()))
}

fn check_grid(
    header: &Header,
    geometry: &ImageGeometry,
    other: &dyn Fn(&str, String, String) -> MaskError,
) -> Result<(), MaskError> {
    for (key, expected) in [("CTYPE1", "RA---SIN"), ("CTYPE2", "DEC--SIN")] {
        let found = header.text(key)?.unwrap_or_default();
        if found != expected {
            return Err(other(key, format!("{found:?}"), format!("{expected:?}")));
        }
    }
    let (ra, dec) = geometry.centre.to_deg();
    let (x0, y0) = geometry.reference();
    let step = geometry.pixel.to_degrees();
    let longest = geometry.width.max(geometry.height) as f64;
    let turn = |found: f64| (found - ra + 180.0).rem_euclid(360.0) - 180.0 + ra;
    for (key, expected, most) in [
        ("CRVAL1", ra, OFF * step / geometry.centre.dec.cos().abs().max(1e-3)),
        ("CRVAL2", dec, OFF * step),
        ("CRPIX1", x0 as f64 + 1.0, OFF),
        ("CRPIX2", y0 as f64 + 1.0, OFF),
        ("CDELT1", -step, OFF * step / longest),
        ("CDELT2", step, OFF * step / longest),
    ] {
        let found = header.float(key)?.unwrap_or(f64::NAN);
        let near = if key == "CRVAL1" { turn(found) } else { found };
        let off = (near - expected).abs();
        if off.is_nan() || off > most {
            return Err(other(key, found.to_string(), expected.to_string()));
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::{ProductHeader, write_image_product};

    fn geometry() -> ImageGeometry {
        ImageGeometry::new(Direction::from_deg(0.01, 50.0), 60, 40, 1e-4).unwrap()
    }

    fn written(image: &Array2<f64>, of: &ImageGeometry) -> (tempfile::TempDir, std::path::PathBuf) {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("mask.fits");
        let about = ProductHeader { frequency_hz: 1e9, ..ProductHeader::default() };
        write_image_product(&path, image.view(), of, &about).unwrap();
        (folder, path)
    }

    #[test]
    fn a_product_is_a_mask() {
        let mut image = Array2::zeros((40, 60));
        (image[[3, 4]], image[[39, 59]], image[[0, 0]]) = (1.0, -2.5, f64::NAN);
        let (_folder, path) = written(&image, &geometry());
        let mask = read_mask(&path, &geometry()).unwrap();
        let open: Vec<_> = mask.indexed_iter().filter(|(_, open)| **open).map(|(at, _)| at).collect();
        assert_eq!(open, [(3, 4), (39, 59)]);
    }

    #[test]
    fn other_pixels_are_refused_by_name() {
        let (_folder, path) = written(&Array2::zeros((40, 60)), &geometry());
        let centre = geometry().centre;
        let moved = Direction { ra: centre.ra + 2e-5, ..centre };
        for (wanted, key) in [
            (ImageGeometry { width: 61, ..geometry() }, "size"),
            (ImageGeometry { pixel: 1.01e-4, ..geometry() }, "CDELT1"),
            (ImageGeometry { centre: moved, ..geometry() }, "CRVAL1"),
            (ImageGeometry { centre: Direction { dec: centre.dec + 2e-5, ..centre }, ..geometry() }, "CRVAL2"),
        ] {
            let error = read_mask(&path, &wanted).unwrap_err().to_string();
            assert!(error.contains(&format!("its {key} is")), "{error}");
        }
        assert!(read_mask(Path::new("nothing.fits"), &geometry()).is_err());
    }

    /// Area of a circle: 1 % for a radius of 15 pixels, whose edge has about 94 pixels of which half count.
    #[test]
    fn circles_are_round_on_the_sky() {
        let centre = geometry().direction_of(30.0, 20.0).unwrap().to_deg();
        let circle = Circle { centre_deg: centre.into(), radius_arcsec: (15.0 * 1e-4f64).to_degrees() * 3600.0 };
        let mask = circles_mask(&geometry(), &[circle]);
        let open = mask.iter().filter(|open| **open).count() as f64;
        assert!((open / (std::f64::consts::PI * 225.0) - 1.0).abs() < 0.02, "{open}");
        assert!(mask[[20, 30]] && mask[[20, 44]] && !mask[[20, 46]]);
    }
}
