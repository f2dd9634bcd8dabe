//! `[[pointing]]` and `[image]`: what to image, and onto which pixels.

use super::document::{At, Section, count, list, number, pair, text};
use super::{Problem, RunFile};
use crate::sky::{Direction, GeometryError, ImageGeometry};
use serde::Serialize;
use std::path::PathBuf;
use toml::de::DeValue;

/// Smallest and largest tolerance of the gridded sums. Below 1e-7 the rounding of a double-precision grid and of
/// single-precision visibilities (6e-8) would decide, not the method; above 0.1 the sums would be no measurement.
pub const TOLERANCES: (f64, f64) = (1e-7, 0.1);
/// Most pixels of an image: each of the images in memory takes 8 GiB then.
pub const MOST_PIXELS: usize = 1 << 30;
const DEFAULT_TOLERANCE: f64 = 1e-4;
const DEFAULT_LOWEST_RESPONSE: f64 = 0.1;

/// One entry `[[pointing]]`: a visibility file, and how to take it.
#[derive(Debug, Clone, Serialize)]
pub struct Pointing {
    /// Line of the entry.
    #[serde(skip)]
    pub line: usize,
    /// The visibility file, relative paths resolved.
    pub visibilities: At<PathBuf>,
    /// Where the stations pointed, when not at the file's phase centre.
    pub aim: Option<At<Direction>>,
    /// Which sources of a multi-source file.
    pub sources: Sources,
    /// Angle from the aim, degrees, beyond which every response is 0; overrides that of `[image]`.
    pub response_radius_deg: Option<At<f64>>,
    /// The file's inverse variances are multiplied by this, 1e-12 to 1e12.
    pub weight_scale: f64,
}

/// Sources of a multi-source file; each becomes a pointing.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Sources {
    /// Every source.
    All,
    /// The sources of these names.
    Named(Vec<String>),
}

/// `[image]`.
#[derive(Debug, Clone, Serialize)]
pub struct Image {
    /// Line of the table.
    #[serde(skip)]
    pub line: usize,
    /// The common pixel grid.
    pub geometry: ImageGeometry,
    /// Promised relative error of the gridded sums (L2 over the field).
    pub tolerance: At<f64>,
    /// Window that spreads visibilities on the grid.
    pub window: GridWindow,
    /// Pixels with sqrt(W / max W) below this are blank.
    pub lowest_response: At<f64>,
    /// Angle from each aim, degrees, beyond which every response is 0: part of the beams' definition.
    pub response_radius_deg: Option<At<f64>>,
}

/// Windows that spread visibilities on the grid.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum GridWindow {
    /// Kaiser–Bessel.
    #[default]
    KaiserBessel,
    /// Prolate spheroidal.
    Spheroidal,
    /// The nearest cell: a boxcar.
    Nearest,
}

impl RunFile {
    /// The response cut-off of a pointing, degrees: its own, or that of `[image]`.
    pub fn response_radius_deg(&self, pointing: usize) -> Option<f64> {
        let own = self.pointings.get(pointing).and_then(|p| p.response_radius_deg);
        own.or(self.image.as_ref().and_then(|image| image.response_radius_deg)).map(|radius| radius.value)
    }
}

/// A direction written `[right ascension, declination]` in degrees.
pub(super) fn direction(value: &DeValue) -> Option<Direction> {
    let [ra, dec] = pair(number(|_| true))(value)?;
    ((-360.0..=360.0).contains(&ra) && (-90.0..=90.0).contains(&dec)).then(|| Direction::from_deg(ra, dec))
}

pub(super) const DIRECTION: &str =
    "[right ascension, declination] in degrees: -360 to 360 and -90 to 90, for example [152.678, 41.863]";
const RADIUS: &str = "an angle in degrees, greater than 0 and less than 90";

pub(super) fn response_radius(section: &Section) -> Option<At<f64>> {
    section.optional("response_radius_deg", RADIUS, number(|deg| deg > 0.0 && deg < 90.0))
}

/// Limits of `weight_scale`: weights stated in MJy⁻² to µJy⁻² become Jy⁻²; single precision holds the products of any sensible weights.
const WEIGHT_SCALES: (f64, f64) = (1e-12, 1e12);

pub(super) fn read_pointing(section: &Section) -> Option<Pointing> {
    let visibilities = section.required("visibilities", "the name of a visibility file (FITS)", text);
    let aim = section.optional("aim_deg", DIRECTION, direction);
    let sources = section
        .optional("sources", "\"all\" or a list of source names, for example [\"A1\", \"A2\"]", sources)
        .map_or(Sources::All, |at| at.value);
    if let (Some(aim), Sources::Named(names)) = (aim, &sources)
        && names.len() > 1
    {
        let problem = Problem::Conflict {
            found: format!("one aim for {} sources", names.len()),
            expected: "one entry [[pointing]] for each source that has an aim of its own".to_owned(),
        };
        section.complain(aim.line, "aim_deg", problem);
    }
    let response_radius_deg = response_radius(section);
    let (low, high) = WEIGHT_SCALES;
    let expected = format!(
        "a number from {low:e} to {high:e} that the file's weights are multiplied by, so that they are inverse variances in \
         Jy⁻²"
    );
    let weight_scale =
        section.or("weight_scale", 1.0, &expected, number(|scale| (low..=high).contains(&scale))).value;
    section.finish();
    let visibilities = visibilities?;
    let path = section.document.resolve(&visibilities.value);
    let visibilities = At { value: path, line: visibilities.line };
    Some(Pointing { line: section.line, visibilities, aim, sources, response_radius_deg, weight_scale })
}

fn sources(value: &DeValue) -> Option<Sources> {
    match value {
        DeValue::String(word) if word == "all" => Some(Sources::All),
        _ => list(text)(value).filter(|names| !names.is_empty()).map(Sources::Named),
    }
}

pub(super) fn read_image(section: &Section) -> Option<Image> {
    let grid = read_grid(section);
    let (low, high) = TOLERANCES;
    let tolerance = section.or(
        "tolerance",
        DEFAULT_TOLERANCE,
        &format!(
            "a relative error from {low:e} to {high}: below, the rounding of single-precision visibilities decides, \
             above, the sums measure nothing"
        ),
        number(|t| (low..=high).contains(&t)),
    );
    let window = section.or(
        "window",
        GridWindow::default(),
        "\"kaiser-bessel\", \"spheroidal\" or \"nearest\" (which keeps no small tolerance)",
        |value| match value {
            DeValue::String(word) if word == "kaiser-bessel" => Some(GridWindow::KaiserBessel),
            DeValue::String(word) if word == "spheroidal" => Some(GridWindow::Spheroidal),
            DeValue::String(word) if word == "nearest" => Some(GridWindow::Nearest),
            _ => None,
        },
    );
    let window = window.value;
    let lowest_response = section.or(
        "lowest_response",
        DEFAULT_LOWEST_RESPONSE,
        "a fraction of the largest response, at least 0 and less than 1",
        number(|level| (0.0..1.0).contains(&level)),
    );
    let response_radius_deg = response_radius(section);
    section.finish();
    let geometry = grid?;
    Some(Image { line: section.line, geometry, tolerance, window, lowest_response, response_radius_deg })
}

/// The pixel grid that `centre_deg`, `size_px` and `pixel_arcsec` describe.
pub(super) fn read_grid(section: &Section) -> Option<ImageGeometry> {
    let centre = section.required("centre_deg", DIRECTION, direction);
    let size = section.required(
        "size_px",
        "[width, height]: two whole numbers of pixels, each at least 1",
        pair(count(1, u32::MAX as usize)),
    );
    let pixel = section.required(
        "pixel_arcsec",
        "the side of a pixel in arcseconds, greater than 0",
        number(|arcsec| arcsec > 0.0),
    );
    let (centre, size, pixel) = (centre?, size?, pixel?);
    let [width, height] = size.value;
    if width.checked_mul(height).is_none_or(|pixels| pixels > MOST_PIXELS) {
        let expected = format!("at most {MOST_PIXELS} pixels in all (8 GiB for each image in memory)");
        section.complain(size.line, "size_px", Problem::value(format!("{width} × {height} pixels"), expected));
        return None;
    }
    match ImageGeometry::new(centre.value, width, height, (pixel.value / 3600.0).to_radians()) {
        Ok(geometry) => Some(geometry),
        Err(error) => {
            let (at, key) = match error {
                GeometryError::BadPixel { .. } => (pixel.line, "pixel_arcsec"),
                _ => (size.line, "size_px"),
            };
            let problem = Problem::Conflict {
                found: error.to_string(),
                expected: "an image whose corners all lie in one hemisphere".to_owned(),
            };
            section.complain(at, key, problem);
            None
        }
    }
}
