//! What a run says about its deconvolution.

use super::record::BeamFigures;
use super::summary::{flux, thousands};
use crate::imaging::deconvolve::{MajorCycle, Stop};
use serde::{Deserialize, Serialize};

/// What a deconvolution did and what it left.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct DeconvolutionFigures {
    /// Method, as in the run file.
    pub method: String,
    /// Why it stopped.
    pub stop: Stop,
    /// The same in words.
    pub stop_reason: String,
    /// Whether a level that was asked for ended it.
    pub finished: bool,
    /// Components of all minor cycles.
    pub components: u64,
    /// Rows of `components.csv`: pixels with flux, and points.
    pub component_rows: usize,
    /// Compact sources fitted to the visibilities.
    pub fitted_points: usize,
    /// Flux density of the model at the frequency of the image, Jy.
    pub model_jy: f64,
    /// Largest absolute residual where components were allowed, Jy/beam.
    pub residual_peak_jy_per_beam: f64,
    /// Largest absolute residual over the noise of the weight map.
    pub residual_peak_over_noise: f64,
    /// Root mean square of the residual over the noise of the weight map: 1 when all that is left is that noise.
    pub residual_rms_over_noise: f64,
    /// Highest pixel of the restored image over the largest absolute residual.
    pub dynamic_range: f64,
    /// Highest side lobe of the local point spread functions.
    pub side_lobe: f64,
    /// Pixels where components were looked for.
    pub searched_pixels: usize,
    /// Restoring beam.
    pub restoring_beam: BeamFigures,
    /// Major cycles that an earlier run, stopped on its way, had made.
    #[serde(default)]
    pub continued_after_cycle: Option<usize>,
    /// Major cycles.
    pub cycles: Vec<MajorCycle>,
}

impl DeconvolutionFigures {
    /// One line for the history of an image.
    pub fn history(&self) -> String {
        format!("deconvolution: {}", deconvolution_line(self))
    }
}

/// One line for the closing summary and the page.
pub(super) fn deconvolution_line(figures: &DeconvolutionFigures) -> String {
    let points = match figures.fitted_points {
        0 => String::new(),
        1 => ", 1 fitted point".to_owned(),
        n => format!(", {n} fitted points"),
    };
    format!(
        "{}: {} components{points} in {} major cycle{}, {:.4} Jy; residual at most {} ({:.1} × noise); {}",
        figures.method,
        thousands(figures.components),
        figures.cycles.len(),
        if figures.cycles.len() == 1 { "" } else { "s" },
        figures.model_jy,
        flux(figures.residual_peak_jy_per_beam),
        figures.residual_peak_over_noise,
        figures.stop_reason
    )
}
