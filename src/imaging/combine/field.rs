//! One field: its image, its weights, and what its header says.

use super::CombineError;
use super::error::at;
use super::transfer::{largest_width, smallest_width};
use crate::fits::{CelestialAxes, FitsFile, Hdu, HduKind, Header, celestial_axes};
use crate::run::{Depth, FieldEntry};
use crate::sky::CelestialWcs;
use nalgebra::Matrix2;
use ndarray::Array2;
use std::path::{Path, PathBuf};

/// Most pixels of a field: image, weights and the transforms of a convolution then take about 12 GiB.
pub const MOST_FIELD_PIXELS: usize = 1 << 28;
/// How far the grid of a weight map may be off, pixels.
const OFF: f64 = 0.01;

/// What is known of a field besides its pixels.
#[derive(Debug, Clone)]
pub struct FieldFacts {
    /// The image.
    pub path: PathBuf,
    /// Where its pixels lie.
    pub wcs: CelestialWcs,
    /// Columns and rows.
    pub size: [usize; 2],
    /// First and last column, first and last row of the pixels that are not blank.
    pub extent: [usize; 4],
    /// Beam: full widths at half maximum, radians, and position angle at the reference point, North through East, radians.
    pub beam: [f64; 3],
    /// The beam as a covariance of its Gaussian in square pixels (first and second axis).
    pub beam_px: Matrix2<f64>,
    /// Frequency, Hz.
    pub frequency_hz: f64,
    /// Start of the observation, Modified Julian Date (UTC), when the header has it.
    pub start_mjd_utc: Option<f64>,
    /// Usable pixels.
    pub usable: usize,
    /// Sum of all weights, (Jy/beam)⁻².
    pub total_weight: f64,
    /// What the reader should know about it.
    pub notes: Vec<String>,
    /// Whether its positions are FK5 by the header.
    pub fk5: bool,
}

/// A field with its pixels, `[second axis][first axis]`.
#[derive(Debug, Clone)]
pub struct Field {
    /// What is known of it.
    pub facts: FieldFacts,
    /// Jy/beam; NaN where blank.
    pub image: Array2<f64>,
    /// Inverse variance, (Jy/beam)⁻²; 0 where the image is blank, positive elsewhere.
    pub weight: Array2<f64>,
}

/// Full width at half maximum of a Gaussian of standard deviation 1, squared.
pub(super) const FWHM2: f64 = 8.0 * std::f64::consts::LN_2;

/// Reads an image with the noise that `entry` gives it.
///
/// # Errors
/// When a file cannot be read, is no image, or does not say what is needed (world coordinates, beam, frequency, unit);
/// when the weights lie on other pixels, or nothing is usable.
pub fn read_field(entry: &FieldEntry) -> Result<Field, CombineError> {
    let path = &entry.image.value;
    let (file, number, axes) = open(path)?;
    let header = &file.hdus()[number].header;
    let Some(axes) = axes.map_err(at(path))? else { return Err(CombineError::NotAnImage { path: path.clone() }) };
    let (width, height) = (axes.width, axes.height);
    if width.checked_mul(height).is_none_or(|n| n > MOST_FIELD_PIXELS) {
        return Err(CombineError::FieldTooLarge { path: path.clone(), width, height, most: MOST_FIELD_PIXELS });
    }
    let unit = unit_of(header, path)?;
    if plain(&unit) != "jy/beam" && plain(&unit) != "jybeam-1" {
        let expected =
            "Jy/beam; scale the image, or write BUNIT if it is in Jy/beam and does not say so".to_owned();
        return Err(CombineError::Unit { path: path.clone(), found: unit, expected });
    }
    let beam = beam_of(header).map_err(at(path))?;
    let beam_px = in_pixels(beam, &axes.wcs);
    let (major_px, minor_px) = (largest_width(&beam_px), smallest_width(&beam_px));
    // degrees and arcseconds are easily mistaken
    if !(minor_px >= 1.0 && major_px < width.max(height) as f64) {
        return Err(CombineError::Beam { path: path.clone(), major_px, minor_px, width, height });
    }
    let frequency_hz = axes.frequency_hz.ok_or_else(|| {
        at(path)(
            header.complain("RESTFRQ", "the frequency in Hz, here or as an axis FREQ; write it into the header"),
        )
    })?;
    let mut notes = Vec::new();
    let mut image = shaped(file.image_f64(number)?, width, height, path)?;
    let weight = match &entry.depth {
        Depth::NoiseJy(noise) => Array2::from_elem((height, width), noise.powi(-2)),
        Depth::Weight(map) => read_map(&map.value, path, &axes, true, &mut notes)?,
        Depth::Noise(map) => {
            read_map(&map.value, path, &axes, false, &mut notes)?.mapv(|s| if s > 0.0 { s.powi(-2) } else { 0.0 })
        }
    };
    let usable = Usable::of(&mut image, weight, path)?;
    let start_mjd_utc = match header.text("TIMESYS").map_err(at(path))?.as_deref() {
        None | Some("UTC") => header.float("MJD-OBS").ok().flatten().filter(|v| v.is_finite()),
        Some(_) => None,
    };
    let facts = FieldFacts {
        path: path.clone(),
        wcs: axes.wcs,
        size: [width, height],
        extent: usable.extent,
        beam,
        beam_px,
        frequency_hz,
        start_mjd_utc,
        usable: usable.count,
        total_weight: usable.total,
        notes,
        fk5: axes.fk5,
    };
    Ok(Field { facts, image, weight: usable.weight })
}

/// The file, the number of its first image, and the celestial axes there; no axes when there is no image at all.
type Opened = (FitsFile, usize, Result<Option<CelestialAxes>, crate::fits::FitsProblem>);

fn open(path: &Path) -> Result<Opened, CombineError> {
    let file = FitsFile::open(path)?;
    let holds = |hdu: &Hdu| hdu.kind == HduKind::Image && hdu.axes.len() >= 2 && hdu.data_bytes > 0;
    let number = file.hdus().iter().position(holds);
    let axes = number.map(|n| celestial_axes(&file.hdus()[n])).transpose();
    Ok((file, number.unwrap_or(0), axes))
}

fn shaped(pixels: Vec<f64>, width: usize, height: usize, path: &Path) -> Result<Array2<f64>, CombineError> {
    Array2::from_shape_vec((height, width), pixels).map_err(|_| CombineError::NotAnImage { path: path.to_owned() })
}

fn unit_of(header: &Header, path: &Path) -> Result<String, CombineError> {
    Ok(header.text("BUNIT").map_err(at(path))?.unwrap_or_default())
}

/// A unit without blanks and capitals.
fn plain(unit: &str) -> String {
    unit.chars().filter(|c| !c.is_whitespace()).flat_map(char::to_lowercase).collect()
}

/// BMAJ, BMIN, BPA in radians.
fn beam_of(header: &Header) -> Result<[f64; 3], crate::fits::FitsProblem> {
    let width = |key: &str| {
        let expected =
            "the restoring beam, full width at half maximum in degrees; write BMAJ, BMIN and BPA into the header";
        header.float(key)?.filter(|v| v.is_finite() && *v > 0.0).ok_or_else(|| header.complain(key, expected))
    };
    let (major, minor) = (width("BMAJ")?, width("BMIN")?);
    if minor > major {
        return Err(header.complain("BMIN", "at most BMAJ"));
    }
    let angle = match header.float("BPA")? {
        Some(angle) if angle.is_finite() => angle,
        None if minor == major => 0.0,
        _ => return Err(header.complain("BPA", "the position angle of the beam in degrees, North through East")),
    };
    Ok([major.to_radians(), minor.to_radians(), angle.to_radians()])
}

/// Covariance (East, North) in square radians of a beam of these widths and position angle.
pub(super) fn covariance([major, minor, angle]: [f64; 3]) -> Matrix2<f64> {
    let (sin, cos) = angle.sin_cos();
    let turn = Matrix2::new(sin, cos, cos, -sin); // columns: along the major axis, along the minor
    turn * Matrix2::new(major * major / FWHM2, 0.0, 0.0, minor * minor / FWHM2) * turn.transpose()
}

/// Widths and position angle of a covariance (East, North) in square radians; the angle is in (−π/2, π/2].
pub(super) fn widths(covariance: &Matrix2<f64>) -> [f64; 3] {
    let half = 0.5 * (covariance[(1, 1)] - covariance[(0, 0)]);
    let mean = 0.5 * covariance.trace();
    let apart = half.hypot(covariance[(0, 1)]);
    let angle = if apart <= 1e-12 * mean { 0.0 } else { 0.5 * covariance[(0, 1)].atan2(half) };
    let angle = if angle <= -std::f64::consts::FRAC_PI_2 { -angle } else { angle };
    [(FWHM2 * (mean + apart)).sqrt(), (FWHM2 * (mean - apart).max(0.0)).sqrt(), angle]
}

/// The beam on the pixels of the image, the same everywhere on it: as it is at the reference point.
fn in_pixels(beam: [f64; 3], wcs: &CelestialWcs) -> Matrix2<f64> {
    // the matrix of a sound header has an inverse
    let inverse = wcs.axes().try_inverse().unwrap_or_else(Matrix2::zeros);
    inverse * covariance(beam) * inverse.transpose()
}

/// A map of weights (or of noise) on the pixels of the image.
fn read_map(
    path: &Path,
    image: &Path,
    axes: &CelestialAxes,
    weights: bool,
    notes: &mut Vec<String>,
) -> Result<Array2<f64>, CombineError> {
    let what = if weights { "weights" } else { "noise" };
    let (file, number, own) = open(path)?;
    let Some(hdu) = file.hdus().get(number).filter(|hdu| hdu.kind == HduKind::Image && hdu.axes.len() >= 2) else {
        return Err(CombineError::NotAnImage { path: path.to_owned() });
    };
    let other = |found: String, expected: String| CombineError::OtherPixels {
        path: path.to_owned(),
        image: image.to_owned(),
        what,
        found,
        expected,
    };
    let size: Vec<u64> = hdu.axes.iter().copied().filter(|&n| n != 1).collect();
    let of_image: Vec<u64> = [axes.width as u64, axes.height as u64].into_iter().filter(|&n| n != 1).collect();
    if size != of_image {
        let shown = |n: &[u64]| n.iter().map(u64::to_string).collect::<Vec<_>>().join(" × ");
        return Err(other(format!("has {} pixels", shown(&hdu.axes)), format!("{} × {}", axes.width, axes.height)));
    }
    // a map without world coordinates is taken to lie on its image
    if hdu.header.get("CTYPE1").is_some()
        && let Some(own) = own.map_err(at(path))?
    {
        let corner = [axes.width as f64 - 1.0, axes.height as f64 - 1.0];
        for (x, y) in [(0.0, 0.0), (corner[0], 0.0), (0.0, corner[1]), (corner[0], corner[1])] {
            if let Some(there) = axes.wcs.direction_of(x, y) {
                let [gx, gy] = own.wcs.pixel_of(there).unwrap_or([f64::NAN; 2]);
                let off = (gx - x).hypot(gy - y);
                let near = off <= OFF; // a NaN is not
                if !near {
                    let found = format!("its pixel ({x}, {y}), counted from 0, lies {off:.2} pixels off");
                    return Err(other(found, "on the sky".to_owned()));
                }
            }
        }
    }
    let unit = unit_of(&hdu.header, path)?;
    let said = plain(&unit);
    let known = [
        "beam2jy-2",
        "jy-2beam2",
        "beam2/jy2",
        "beam**2jy**-2",
        "beam^2/jy^2",
        "beam**2/jy**2",
        "(jy/beam)^-2",
        "(jy/beam)**-2",
        "(jy/beam)-2",
        "1/(jy/beam)^2",
        "1/(jy/beam)**2",
        "1/(jy/beam)2",
    ];
    let is_noise = said == "jy/beam" || said == "jybeam-1";
    let wrong = |expected: &str| CombineError::Unit {
        path: path.to_owned(),
        found: unit.clone(),
        expected: expected.to_owned(),
    };
    match (weights, said.as_str()) {
        (true, _) if is_noise => {
            return Err(wrong("(Jy/beam)^-2; a map of standard deviations is given as noise = \"FILE\""));
        }
        (false, other) if known.contains(&other) => {
            return Err(wrong("Jy/beam; a map of inverse variances is given as weight = \"FILE\""));
        }
        (false, other) if !other.is_empty() && !is_noise => return Err(wrong("Jy/beam")),
        (true, other) if !other.is_empty() && !known.contains(&other) => {
            notes.push(format!("{}: the unit {unit:?} is taken to be (Jy/beam)^-2", path.display()));
        }
        _ => {}
    }
    shaped(file.image_f64(number)?, axes.width, axes.height, path)
}

/// Pixels that are not blank and have a weight.
struct Usable {
    weight: Array2<f64>,
    extent: [usize; 4],
    count: usize,
    total: f64,
}

impl Usable {
    /// Blanks every pixel of `image` without a value or a positive weight.
    fn of(image: &mut Array2<f64>, mut weight: Array2<f64>, path: &Path) -> Result<Usable, CombineError> {
        let (height, width) = image.dim();
        let mut extent = [width, 0, height, 0];
        let (mut count, mut total, mut weighted) = (0, 0.0, false);
        for (((y, x), value), weight) in image.indexed_iter_mut().zip(&mut weight) {
            let sound = weight.is_finite() && *weight > 0.0;
            weighted |= sound;
            if sound && value.is_finite() {
                count += 1;
                total += *weight;
                extent = [extent[0].min(x), extent[1].max(x), extent[2].min(y), extent[3].max(y)];
            } else {
                (*value, *weight) = (f64::NAN, 0.0);
            }
        }
        let why = match (count, weighted) {
            (0, false) => "all its weights are zero, negative or blank",
            (0, true) => "all its pixels are blank where its weights are positive",
            _ => return Ok(Usable { weight, extent, count, total }),
        };
        Err(CombineError::NothingThere { path: path.to_owned(), why })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn beams_come_back_from_their_covariance() {
        for angle in [-80.0f64, -30.0, 0.0, 45.0, 90.0] {
            let beam = [3e-5, 2e-5, angle.to_radians()];
            let got = widths(&covariance(beam));
            for (got, want) in got.iter().zip(beam) {
                assert!((got - want).abs() <= 1e-12, "{angle}: {got} {want}");
            }
        }
        // North: the covariance lies along the second axis
        let north = covariance([2.0, 1.0, 0.0]);
        assert!(north[(1, 1)] > north[(0, 0)] && north[(0, 1)].abs() <= 1e-16);
    }

    #[test]
    fn units_are_read_as_people_write_them() {
        for unit in ["Jy/beam", "JY/BEAM ", "jy / beam"] {
            assert_eq!(plain(unit), "jy/beam");
        }
        assert_eq!(plain("Jy beam-1"), "jybeam-1");
    }
}
