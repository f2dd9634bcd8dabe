//! `[weighting]`: how much each visibility counts in the image.

use super::Problem;
use super::document::{Section, number, pair, text};
use serde::Serialize;

/// `[weighting]`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Weighting {
    /// The scheme.
    pub scheme: Scheme,
    /// R of robust weights: −2 is nearly uniform, +2 nearly natural.
    pub robustness: f64,
    /// Whose density uniform and robust weights go by.
    pub density: DensityOf,
    /// Side of a cell of the density, wavelengths; by default the reciprocal of the image's width and height.
    pub cell_wavelengths: Option<f64>,
    /// Outer taper: full width at half maximum in the image of the Gaussian that a point is convolved with, arcseconds.
    pub outer_taper_arcsec: Option<f64>,
    /// Outer taper: a raised cosine that falls from 1 to 0 between two distances, wavelengths.
    pub outer_cosine_wavelengths: Option<[f64; 2]>,
    /// Inner taper: weights times 1 − exp(−ρ²/2s²) at the distance ρ, s in wavelengths.
    pub inner_taper_wavelengths: Option<f64>,
    /// Distances outside this range are not used, wavelengths.
    pub uv_range_wavelengths: Option<[f64; 2]>,
    /// Lengths √(u² + v²) outside this range are not used, metres.
    pub uv_range_m: Option<[f64; 2]>,
}

/// How weights go by the density of visibilities.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Scheme {
    /// Not at all: each visibility by its inverse variance.
    #[default]
    Natural,
    /// Inversely: each filled cell counts the same.
    Uniform,
    /// In between (Briggs 1995).
    Robust,
}

/// Whose density.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum DensityOf {
    /// That of all pointings together.
    #[default]
    All,
    /// That of each pointing by itself.
    Pointing,
}

impl Default for Weighting {
    fn default() -> Self {
        Weighting {
            scheme: Scheme::Natural,
            robustness: 0.0,
            density: DensityOf::All,
            cell_wavelengths: None,
            outer_taper_arcsec: None,
            outer_cosine_wavelengths: None,
            inner_taper_wavelengths: None,
            uv_range_wavelengths: None,
            uv_range_m: None,
        }
    }
}

impl Weighting {
    /// Whether every weight is the inverse variance.
    pub fn is_natural(&self) -> bool {
        Weighting { robustness: 0.0, density: DensityOf::All, cell_wavelengths: None, ..*self }
            == Weighting::default()
    }

    /// The ranges alone, of natural weights; `None` where there are none.
    pub fn ranges(&self) -> Option<Weighting> {
        let (uv_range_wavelengths, uv_range_m) = (self.uv_range_wavelengths, self.uv_range_m);
        let any = uv_range_wavelengths.is_some() || uv_range_m.is_some();
        any.then(|| Weighting { uv_range_wavelengths, uv_range_m, ..Weighting::default() })
    }

    /// In words, for records.
    pub fn describe(&self) -> String {
        let mut words = match self.scheme {
            Scheme::Natural => "natural".to_owned(),
            Scheme::Uniform => "uniform".to_owned(),
            Scheme::Robust => format!("robust, robustness {}", self.robustness),
        };
        if self.scheme != Scheme::Natural && self.density == DensityOf::Pointing {
            words += ", density of each pointing";
        }
        if let Some(cell) = self.cell_wavelengths.filter(|_| self.scheme != Scheme::Natural) {
            words += &format!(", cells of {cell} wavelengths");
        }
        if let Some(width) = self.outer_taper_arcsec {
            words += &format!(", outer taper {width} arcsec");
        }
        if let Some([from, to]) = self.outer_cosine_wavelengths {
            words += &format!(", raised cosine from {from} to {to} wavelengths");
        }
        if let Some(scale) = self.inner_taper_wavelengths {
            words += &format!(", inner taper {scale} wavelengths");
        }
        if let Some([from, to]) = self.uv_range_wavelengths {
            words += &format!(", only {from} to {to} wavelengths");
        }
        if let Some([from, to]) = self.uv_range_m {
            words += &format!(", only {from} to {to} m");
        }
        words
    }
}

const SCHEMES: [&str; 3] = ["natural", "uniform", "robust"];

/// Least side of a cell, wavelengths: 1 over 2, the width of the whole hemisphere in direction cosines. No image is wider, and
/// what smaller cells tell apart no image shows.
const LEAST_CELL: f64 = 0.5;

pub(super) fn read_weighting(section: &Section) -> Weighting {
    let expected = "the name of a weighting scheme: \"natural\", \"uniform\" or \"robust\"";
    let named = section.optional("scheme", expected, text).and_then(|at| match at.value.as_str() {
        "natural" => Some(Scheme::Natural),
        "uniform" => Some(Scheme::Uniform),
        "robust" => Some(Scheme::Robust),
        _ => {
            let known = SCHEMES.map(String::from).to_vec();
            section.complain(at.line, "scheme", Problem::unknown_name("weighting scheme", &at.value, known));
            None
        }
    });
    let scheme = named.unwrap_or_default();
    let robustness = section.optional(
        "robustness",
        "a number from -5 (uniform) to 5 (natural)",
        number(|r| (-5.0..=5.0).contains(&r)),
    );
    let density = section.optional(
        "density",
        "\"all\" pointings together or each \"pointing\" by itself",
        |value| match text(value)?.as_str() {
            "all" => Some(DensityOf::All),
            "pointing" => Some(DensityOf::Pointing),
            _ => None,
        },
    );
    let cell = section.optional(
        "cell_wavelengths",
        &format!(
            "the side of a cell of the density in wavelengths, at least {LEAST_CELL}: such cells tell apart all that a \
             hemisphere can show"
        ),
        number(|side| side >= LEAST_CELL),
    );
    // a key that would do nothing is a misunderstanding; not told beside a scheme that is wrong itself
    if named.is_some() || !section.has("scheme") {
        let by_density = "scheme = \"uniform\" or \"robust\"";
        for (line, key, idle, found, expected) in [
            (
                robustness.map(|at| at.line),
                "robustness",
                scheme != Scheme::Robust,
                "a robustness without robust weights",
                "scheme = \"robust\"",
            ),
            (
                density.map(|at| at.line),
                "density",
                scheme == Scheme::Natural,
                "a density, which natural weights do not go by",
                by_density,
            ),
            (
                cell.map(|at| at.line),
                "cell_wavelengths",
                scheme == Scheme::Natural,
                "cells of a density, which natural weights do not go by",
                by_density,
            ),
        ] {
            if let Some(line) = line.filter(|_| idle) {
                let problem = Problem::Conflict { found: found.to_owned(), expected: expected.to_owned() };
                section.complain(line, key, problem);
            }
        }
    }
    let positive = |key: &'static str, what: &str| {
        section.optional(key, &format!("{what}, greater than 0"), number(|value| value > 0.0)).map(|at| at.value)
    };
    let range = |key: &'static str, unit: &str| {
        let expected = format!("[from, to]: two distances in {unit}, the second greater than the first");
        section
            .optional(key, &expected, |value| {
                let [from, to] = pair(number(|value| value >= 0.0))(value)?;
                (to > from).then_some([from, to])
            })
            .map(|at| at.value)
    };
    let weighting = Weighting {
        scheme,
        robustness: robustness.map_or(0.0, |at| at.value),
        density: density.map_or(DensityOf::All, |at| at.value),
        cell_wavelengths: cell.map(|at| at.value),
        outer_taper_arcsec: positive("outer_taper_arcsec", "a full width at half maximum in arcseconds"),
        outer_cosine_wavelengths: range("outer_cosine_wavelengths", "wavelengths"),
        inner_taper_wavelengths: positive("inner_taper_wavelengths", "a distance in wavelengths"),
        uv_range_wavelengths: range("uv_range_wavelengths", "wavelengths"),
        uv_range_m: range("uv_range_m", "metres"),
    };
    section.finish();
    weighting
}
