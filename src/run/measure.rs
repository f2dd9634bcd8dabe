//! `[measure]`: which sources to measure, and how.

use super::document::{At, Section, count, number, text};
use super::{Problem, RunError, RunFile};
use serde::Serialize;
use std::path::PathBuf;
use toml::de::DeValue;

const DEFAULT_FIND: f64 = 5.0;
const DEFAULT_ISLAND: f64 = 3.0;
const DEFAULT_ROUNDS: usize = 12;
const DEFAULT_INDEX_ERROR: f64 = 0.3;
const DEFAULT_INDEX: f64 = -0.7;

/// `[measure]`.
#[derive(Debug, Clone, Serialize)]
pub struct Measure {
    /// Line of the table.
    #[serde(skip)]
    pub line: usize,
    /// CSV list of the places to measure; `None` to find sources in the image.
    pub positions: Option<At<PathBuf>>,
    /// Lowest peak of a source, in multiples of the local noise.
    pub find_above_noise: At<f64>,
    /// Pixels above this multiple of the local noise that touch each other make one island.
    pub island_above_noise: At<f64>,
    /// Most rounds of searching what the model leaves of the visibilities.
    pub rounds: At<usize>,
    /// What is fitted to a source in the image.
    pub shape: SourceShape,
    /// Where flux densities come from.
    pub fluxes_from: FluxesFrom,
    /// How errors of fits in the image are reckoned.
    pub errors: FitErrors,
    /// Spectral indices are fitted where their error would not pass this; 0 fits none.
    pub spectral_index_error: At<f64>,
    /// Spectral index of sources for which none is given or fitted.
    pub assumed_spectral_index: At<f64>,
}

/// What is fitted to a source in the image.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum SourceShape {
    /// A Gaussian where it is wider than the beam beyond doubt, else a point.
    Auto,
    /// The beam, only place and height free.
    Point,
    /// A Gaussian of any size.
    Gaussian,
}

/// Where flux densities come from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum FluxesFrom {
    /// One joint linear least squares straight on the visibilities.
    Visibilities,
    /// The fits in the image.
    Image,
}

/// How errors of fits in the image are reckoned.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum FitErrors {
    /// The exact covariance of the fit on its own pixels, with the noise's correlation.
    Covariance,
    /// The closed forms of Condon (1997) for correlated noise.
    Condon,
}

impl RunFile {
    /// `[measure]`, when there is one and the list of positions it names exists.
    ///
    /// # Errors
    /// When that list is not there or is a folder.
    pub fn measure(&self) -> Result<Option<&Measure>, RunError> {
        if let Some(positions) = self.measure.as_ref().and_then(|measure| measure.positions.as_ref()) {
            self.check_files(std::iter::once(("measure.positions", positions)), "a CSV list of positions")?;
        }
        Ok(self.measure.as_ref())
    }
}

/// One of a few words.
fn word<T: Copy>(choices: &[(&str, T)]) -> impl Fn(&DeValue) -> Option<T> {
    move |value| match value {
        DeValue::String(word) => choices.iter().find(|(name, _)| name == word).map(|&(_, choice)| choice),
        _ => None,
    }
}

pub(super) fn read_measure(section: &Section) -> Measure {
    let positions =
        section.optional("positions", "the name of a CSV list of positions (name, ra_deg, dec_deg)", text);
    let multiple = "a multiple of the local noise, greater than 0 and at most 1000000";
    let level = || number(|m| m > 0.0 && m <= 1e6);
    let find = section.or("find_above_noise", DEFAULT_FIND, multiple, level());
    // an island may not stand higher than the peaks it holds: the default gives way, a contradiction is told
    let island = section.or("island_above_noise", DEFAULT_ISLAND.min(find.value), multiple, level());
    if island.value > find.value {
        let problem = Problem::Conflict {
            found: format!("islands above {} times the noise, peaks above {}", island.value, find.value),
            expected: "island_above_noise no higher than find_above_noise".to_owned(),
        };
        section.complain(island.line, "island_above_noise", problem);
    }
    let rounds = section.or("rounds", DEFAULT_ROUNDS, "a number of further searches, 0 to 100", count(0, 100));
    let shapes = [("auto", SourceShape::Auto), ("point", SourceShape::Point), ("gaussian", SourceShape::Gaussian)];
    let shape = section.or("shape", SourceShape::Auto, "\"auto\", \"point\" or \"gaussian\"", word(&shapes));
    let places = [("visibilities", FluxesFrom::Visibilities), ("image", FluxesFrom::Image)];
    let fluxes =
        section.or("fluxes_from", FluxesFrom::Visibilities, "\"visibilities\" or \"image\"", word(&places));
    let kinds = [("covariance", FitErrors::Covariance), ("condon", FitErrors::Condon)];
    let errors = section.or("errors", FitErrors::Covariance, "\"covariance\" or \"condon\"", word(&kinds));
    let index_error = section.or(
        "spectral_index_error",
        DEFAULT_INDEX_ERROR,
        "the largest error of a spectral index worth fitting, at least 0 (0 fits none) and at most 10",
        number(|e| (0.0..=10.0).contains(&e)),
    );
    let index = section.or(
        "assumed_spectral_index",
        DEFAULT_INDEX,
        "a spectral index, -10 to 10",
        number(|index| index.abs() <= 10.0),
    );
    section.finish();
    let given = |key: &str| section.has(key);
    if positions.is_some() {
        // the places are given, their flux densities come from the visibilities: nothing is searched or fitted in the image
        for key in ["find_above_noise", "island_above_noise", "rounds", "shape", "errors"] {
            if given(key) {
                let problem = Problem::Conflict {
                    found: format!("{key} beside positions"),
                    expected: format!("either positions, or a search with {key}"),
                };
                section.complain(section.line_of(key), key, problem);
            }
        }
        if fluxes.value == FluxesFrom::Image {
            let problem = Problem::Conflict {
                found: "\"image\" beside positions".to_owned(),
                expected: "\"visibilities\": flux densities at given positions are fitted to the visibilities"
                    .to_owned(),
            };
            section.complain(fluxes.line, "fluxes_from", problem);
        }
    } else if fluxes.value == FluxesFrom::Image && given("rounds") && rounds.value > 0 {
        let problem = Problem::Conflict {
            found: "further rounds with fluxes_from = \"image\"".to_owned(),
            expected: "fluxes_from = \"visibilities\", which leaves the residual that is searched".to_owned(),
        };
        section.complain(rounds.line, "rounds", problem);
    } else if fluxes.value == FluxesFrom::Image && given("spectral_index_error") && index_error.value > 0.0 {
        let problem = Problem::Conflict {
            found: "a spectral index with fluxes_from = \"image\"".to_owned(),
            expected: "fluxes_from = \"visibilities\", which spectral indices are fitted to".to_owned(),
        };
        section.complain(index_error.line, "spectral_index_error", problem);
    }
    let resolved = |at: At<String>| At { value: section.document.resolve(&at.value), line: at.line };
    Measure {
        line: section.line,
        positions: positions.map(resolved),
        find_above_noise: find,
        island_above_noise: island,
        rounds,
        shape: shape.value,
        fluxes_from: fluxes.value,
        errors: errors.value,
        spectral_index_error: index_error,
        assumed_spectral_index: index,
    }
}
