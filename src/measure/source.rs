//! One measured source.

use super::gaussian::Ellipse;
use crate::sky::Direction;
use serde::{Deserialize, Serialize};

/// How a flux density was measured.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Method {
    /// Joint least squares on the visibilities.
    Visibilities,
    /// The beam fitted in the image.
    ImagePoint,
    /// A Gaussian fitted in the image.
    ImageGaussian,
}

impl Method {
    /// As it stands in tables.
    pub fn name(self) -> &'static str {
        match self {
            Method::Visibilities => "visibilities",
            Method::ImagePoint => "image-point",
            Method::ImageGaussian => "image-gaussian",
        }
    }
}

/// Fitted widths with their errors.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Size {
    /// Full widths at half maximum and position angle, radians, in the plane of the image.
    pub ellipse: Ellipse,
    /// Their errors, radians.
    pub error: Ellipse,
}

/// One measured source. What was not measured is `None`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Source {
    /// Name: the list's, or one made from its place.
    pub name: String,
    /// Where it is.
    pub direction: Direction,
    /// Error of the place towards East and North on the sky, radians; `None` for a place that was given.
    pub place_error: Option<[f64; 2]>,
    /// Frequency of the flux density, Hz.
    pub reference_hz: Option<f64>,
    /// Integrated flux density on the flat sky at the reference frequency, Jy.
    pub flux_jy: Option<f64>,
    /// Its error, Jy.
    pub flux_error_jy: Option<f64>,
    /// Peak in the image, Jy/beam.
    pub peak_jy: Option<f64>,
    /// Its error, Jy/beam.
    pub peak_error_jy: Option<f64>,
    /// Noise of the image there, Jy/beam.
    pub noise_jy: Option<f64>,
    /// Response there, 1 where the mosaic is deepest.
    pub response: Option<f64>,
    /// Number of pointings that see it.
    pub pointings: usize,
    /// Fitted widths, when they were free.
    pub size: Option<Size>,
    /// Widths with the beam taken out, radians; `None` when no wider than the beam or not fitted.
    pub deconvolved: Option<Ellipse>,
    /// Spectral index: fitted, given or assumed.
    pub spectral_index: f64,
    /// Error of the spectral index where it was fitted.
    pub spectral_index_error: Option<f64>,
    /// Where the flux density comes from.
    pub method: Method,
    /// What to know about it, a few words each.
    pub remarks: Vec<String>,
}

impl Source {
    /// A source of which only the place is known.
    pub fn at(name: &str, direction: Direction, spectral_index: f64) -> Source {
        Source {
            name: name.to_owned(),
            direction,
            place_error: None,
            reference_hz: None,
            flux_jy: None,
            flux_error_jy: None,
            peak_jy: None,
            peak_error_jy: None,
            noise_jy: None,
            response: None,
            pointings: 0,
            size: None,
            deconvolved: None,
            spectral_index,
            spectral_index_error: None,
            method: Method::Visibilities,
            remarks: Vec::new(),
        }
    }
}
