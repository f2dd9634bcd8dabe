//! Images as FITS products: four axes (right ascension, declination, frequency, Stokes I), ICRS, SIN projection.
//!
//! A pixel is a direction cosine, and so is the intermediate coordinate of a SIN projection in radians (Calabretta &
//! Greisen 2002, eq. 60 with θ near 90°): CDELT is the pixel in degrees, exactly. LONPOLE and LATPOLE are written out
//! because the default LONPOLE is 0, not 180, for a reference point at the pole. ICRS needs no EQUINOX and gets none.
//! docs/products.md describes every keyword.

use crate::fits::{FitsError, Header, write_image_f32};
use crate::imaging::beam_fit::FittedBeam;
use crate::run::fits_date;
use crate::sky::ImageGeometry;
use ndarray::ArrayView2;
use std::path::Path;
use thiserror::Error;

/// What a product's header says besides its place on the sky.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct ProductHeader {
    /// Unit of the pixels as FITS writes it, for example `Jy/beam`; empty for a pure number.
    pub bunit: String,
    /// Name of the field.
    pub object: String,
    /// Frequency of the image, Hz; also RESTFRQ.
    pub frequency_hz: f64,
    /// Width in frequency that went in, Hz; 0 when unknown.
    pub bandwidth_hz: f64,
    /// Beam; `None` leaves BMAJ, BMIN and BPA out.
    pub beam: Option<FittedBeam>,
    /// Start of the observation, Modified Julian Date, UTC; `None` leaves DATE-OBS and MJD-OBS out.
    pub start_mjd_utc: Option<f64>,
    /// What the image is, one line, as a COMMENT.
    pub description: String,
    /// Settings and steps, one HISTORY entry each; long ones are wrapped.
    pub history: Vec<String>,
}

/// Why an image product could not be written.
#[derive(Debug, Error)]
pub enum ProductError {
    /// Image and geometry disagree.
    #[error(
        "{path}: the image has {rows} rows of {columns} pixels, its geometry {height} of {width}; they must agree"
    )]
    Shape {
        /// The product.
        path: String,
        /// Rows of the image.
        rows: usize,
        /// Columns of the image.
        columns: usize,
        /// Rows of the geometry.
        height: usize,
        /// Columns of the geometry.
        width: usize,
    },
    /// A header value that cannot stand in a FITS file.
    #[error("{path}: {key} is {found}; expected {expected}")]
    Value {
        /// The product.
        path: String,
        /// FITS keyword.
        key: &'static str,
        /// What was given.
        found: String,
        /// What should be given.
        expected: &'static str,
    },
    /// The file could not be written.
    #[error(transparent)]
    Fits(#[from] FitsError),
}

/// Writes an image (`[y][x]`, NaN = blank) as a FITS file of 32-bit floats, whole or not at all.
///
/// # Errors
/// When image and geometry differ in size, a header value cannot be written, or the file cannot.
pub fn write_image_product<T: Copy + Into<f64>>(
    path: &Path,
    image: ArrayView2<T>,
    geometry: &ImageGeometry,
    about: &ProductHeader,
) -> Result<(), ProductError> {
    let name = || path.display().to_string();
    let (rows, columns) = image.dim();
    if (rows, columns) != (geometry.height, geometry.width) {
        let (height, width) = (geometry.height, geometry.width);
        return Err(ProductError::Shape { path: name(), rows, columns, height, width });
    }
    let header = product_header(path, geometry, about)?;
    // Standard order of an ndarray's iteration is rows from the first, x fastest: that of FITS.
    let pixels: Vec<f32> = image.iter().map(|v| (*v).into() as f32).collect();
    write_image_f32(path, &header, &[columns, rows, 1, 1], &pixels)?;
    Ok(())
}

fn product_header(path: &Path, geometry: &ImageGeometry, about: &ProductHeader) -> Result<Header, ProductError> {
    let bad = |key, found: String, expected| ProductError::Value {
        path: path.display().to_string(),
        key,
        found,
        expected,
    };
    if !(about.frequency_hz.is_finite() && about.frequency_hz > 0.0) {
        return Err(bad("RESTFRQ", about.frequency_hz.to_string(), "a positive frequency in Hz"));
    }
    let bandwidth = match about.bandwidth_hz {
        w if w.is_finite() && w > 0.0 => w,
        0.0 => about.frequency_hz, // An axis of one pixel needs a step; unknown width, no narrower claim.
        w => return Err(bad("CDELT3", w.to_string(), "a bandwidth in Hz that is not negative")),
    };
    let start = match about.start_mjd_utc {
        None => None,
        Some(mjd) => {
            let date = fits_date(mjd);
            let expected = "a Modified Julian Date between the years 1858 and 9999";
            Some((mjd, date.ok_or_else(|| bad("MJD-OBS", mjd.to_string(), expected))?))
        }
    };

    let (ra, dec) = geometry.centre.to_deg();
    let (x0, y0) = geometry.reference();
    let step = geometry.pixel.to_degrees();
    let mut header = Header::new();
    header
        .set("BUNIT", ascii(&about.bunit, 68), "unit of the pixel values")
        .set("OBJECT", ascii(&about.object, 68), "name of the field")
        .set("CTYPE1", "RA---SIN", "right ascension, orthographic projection")
        .set("CRPIX1", x0 as f64 + 1.0, "reference pixel")
        .set("CRVAL1", ra, "[deg] right ascension there")
        .set("CDELT1", -step, "[deg] pixel, as a direction cosine")
        .set("CUNIT1", "deg", "")
        .set("CTYPE2", "DEC--SIN", "declination, orthographic projection")
        .set("CRPIX2", y0 as f64 + 1.0, "reference pixel")
        .set("CRVAL2", dec, "[deg] declination there")
        .set("CDELT2", step, "[deg] pixel, as a direction cosine")
        .set("CUNIT2", "deg", "")
        .set("CTYPE3", "FREQ", "frequency")
        .set("CRPIX3", 1.0, "")
        .set("CRVAL3", about.frequency_hz, "[Hz] frequency of the image")
        .set("CDELT3", bandwidth, "[Hz] width in frequency")
        .set("CUNIT3", "Hz", "")
        .set("CTYPE4", "STOKES", "Stokes parameter, 1 = I")
        .set("CRPIX4", 1.0, "")
        .set("CRVAL4", 1.0, "Stokes I")
        .set("CDELT4", 1.0, "")
        .set("LONPOLE", 180.0, "[deg] native longitude of the pole")
        .set("LATPOLE", dec, "[deg] native latitude of the pole")
        .set("RADESYS", "ICRS", "celestial reference system")
        .set("RESTFRQ", about.frequency_hz, "[Hz] reference frequency");
    if about.bunit.is_empty() {
        header.set("BUNIT", "", "pure number");
    }
    if let Some(beam) = &about.beam {
        header
            .set("BMAJ", beam.major.to_degrees(), "[deg] beam, major axis, full width half maximum")
            .set("BMIN", beam.minor.to_degrees(), "[deg] beam, minor axis, full width half maximum")
            .set("BPA", beam.position_angle.to_degrees(), "[deg] beam, North through East");
    }
    if let Some((mjd, date)) = start {
        header
            .set("DATE-OBS", date, "start of the observation")
            .set("MJD-OBS", mjd, "[d] start of the observation")
            .set("TIMESYS", "UTC", "time system of the dates");
    }
    header.set("ORIGIN", format!("evensky {}", env!("CARGO_PKG_VERSION")), "program that wrote this file");
    if !about.description.is_empty() {
        header.comment(&ascii(&about.description, usize::MAX));
    }
    for entry in &about.history {
        for line in wrapped(&ascii(entry, usize::MAX), 70) {
            header.history(&line);
        }
    }
    Ok(header)
}

/// The text in the printable ASCII that a FITS header may hold, at most `longest` letters. Signs with a plain spelling
/// get it, others become `?`.
fn ascii(text: &str, longest: usize) -> String {
    let mut plain = String::new();
    for letter in text.chars() {
        match letter {
            ' '..='~' => plain.push(letter),
            '\n' | '\t' | '\r' => plain.push(' '),
            '×' => plain.push('x'),
            '−' | '–' | '—' => plain.push('-'),
            'µ' | 'μ' => plain.push('u'),
            '°' => plain.push_str(" deg"),
            '′' | '’' => plain.push('\''),
            '″' => plain.push('"'),
            '√' => plain.push_str("sqrt"),
            '²' => plain.push_str("^2"),
            'ä' | 'à' | 'á' | 'â' | 'å' => plain.push('a'),
            'é' | 'è' | 'ê' | 'ë' => plain.push('e'),
            'í' | 'ï' | 'î' => plain.push('i'),
            'ö' | 'ó' | 'ô' | 'ø' => plain.push('o'),
            'ü' | 'ú' | 'û' => plain.push('u'),
            'ñ' => plain.push('n'),
            'ç' => plain.push('c'),
            'ß' => plain.push_str("ss"),
            _ => plain.push('?'),
        }
    }
    plain.chars().take(longest).collect()
}

/// Lines of at most `room` letters, broken at spaces where there are any; continued lines are indented.
fn wrapped(text: &str, room: usize) -> Vec<String> {
    let mut lines = Vec::new();
    let mut line = String::new();
    for word in text.split(' ').filter(|w| !w.is_empty()) {
        let mut word = word;
        if !line.trim().is_empty() && line.len() + 1 + word.len() > room {
            lines.push(std::mem::replace(&mut line, " ".to_string()));
        }
        loop {
            let gap = usize::from(!line.is_empty());
            let free = room - line.len() - gap;
            if gap == 1 {
                line.push(' ');
            }
            if word.len() <= free {
                line.push_str(word);
                break;
            }
            let (head, tail) = word.split_at(free); // ASCII only: any place is a letter boundary.
            line.push_str(head);
            lines.push(std::mem::replace(&mut line, " ".to_string()));
            word = tail;
        }
    }
    if !line.trim().is_empty() {
        lines.push(line);
    }
    lines
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn history_is_wrapped_without_losing_a_letter() {
        let long = format!("tolerance = 1e-4 {} end of it", "x".repeat(200));
        let lines = wrapped(&ascii(&long, usize::MAX), 70);
        assert!(lines.iter().all(|l| l.len() <= 70), "{lines:?}");
        let squeezed = |s: &str| s.replace(' ', "");
        assert_eq!(squeezed(&lines.concat()), squeezed(&long));
        assert_eq!(wrapped("short", 70), ["short"]);
        assert!(wrapped("", 70).is_empty());
    }

    #[test]
    fn headers_are_plain_ascii() {
        assert_eq!(ascii("12″ × 8″ at −3°, Bjørn 日", 99), "12\" x 8\" at -3 deg, Bjorn ?");
        assert_eq!(ascii("long name", 4), "long");
    }

    /// Outside values: astropy.time.Time(mjd, format='mjd').isot, 8.0.2.
    #[test]
    fn dates() {
        for (mjd, want) in MJD_TABLE {
            assert_eq!(fits_date(*mjd).as_deref(), Some(*want));
        }
        for bad in [-1.0, f64::NAN, f64::INFINITY, 3e6] {
            assert_eq!(fits_date(bad), None, "{bad}");
        }
    }

    const MJD_TABLE: &[(f64, &str)] = &[
        (0.0, "1858-11-17T00:00:00.000"),
        (51544.5, "2000-01-01T12:00:00.000"),
        (61375.170214, "2026-12-01T04:05:06.490"),
        (60369.999999999, "2024-03-01T00:00:00.000"),
        (60370.25, "2024-03-01T06:00:00.000"),
        (58849.0, "2020-01-01T00:00:00.000"),
        (88127.75, "2100-02-28T18:00:00.000"),
        (45000.123456, "1982-01-31T02:57:46.598"),
    ];
}
