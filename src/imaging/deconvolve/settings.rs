//! What a deconvolution is asked to do, and what it says it did.

use serde::{Deserialize, Serialize};

/// How components are found between two passes over the visibilities.
#[derive(Debug, Clone, PartialEq)]
pub enum Minor {
    /// Högbom (1974): the highest pixel, the whole local point spread function.
    Hogbom,
    /// After Clark (1980): only pixels above a limit, a patch of the point spread function.
    Clark,
    /// After Cornwell (2008): Gaussians of several widths.
    MultiScale {
        /// Full widths at half maximum, pixels, ascending; 0 is a point.
        scales_px: Vec<f64>,
        /// How much smaller widths are preferred, 0 (not at all) to less than 1.
        bias: f64,
    },
}

/// Which noise the levels are multiples of.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum NoiseLevel {
    /// That of the weight map: thermal noise as the weights of the visibilities state it.
    #[default]
    Weights,
    /// Measured in the residual around each place, where that is more than the weight map says.
    Measured,
}

/// Settings of a deconvolution; lengths in pixels, flux densities in Jy.
#[derive(Debug, Clone, PartialEq)]
pub struct Settings {
    /// Minor cycle.
    pub minor: Minor,
    /// Share of a peak that one component takes, above 0 and at most 1.
    pub loop_gain: f64,
    /// Stop where no peak exceeds this multiple of the local noise; 0 is never.
    pub stop_at_noise: f64,
    /// Stop where no peak exceeds this flux density, Jy/beam; 0 is never.
    pub stop_at_jy: f64,
    /// Most components.
    pub max_components: u64,
    /// Most passes over the visibilities.
    pub max_major_cycles: usize,
    /// A minor cycle ends where its highest peak has fallen to this fraction.
    pub major_depth: f64,
    /// No pixel of the model falls below zero.
    pub non_negative: bool,
    /// What the levels are multiples of.
    pub noise: NoiseLevel,
    /// Look only where the residual once stood above this multiple of the noise measured around it.
    pub mask_above_noise: Option<f64>,
    /// Fit position, flux density and spectral index of compact sources above this multiple of the noise.
    pub fit_points_above_noise: Option<f64>,
    /// Spectral index of the components.
    pub spectral_index: f64,
    /// Terms of the spectra of pixels: 1 where all have the common one. (Points only; not with fitted points.)
    pub frequency_terms: usize,
    /// Frequency that flux densities belong to, Hz.
    pub reference_hz: f64,
}

impl Settings {
    /// Everyday settings at a frequency.
    pub fn new(minor: Minor, reference_hz: f64) -> Settings {
        Settings {
            minor,
            loop_gain: 0.1,
            stop_at_noise: 3.0,
            stop_at_jy: 0.0,
            max_components: 100_000,
            max_major_cycles: 30,
            major_depth: 0.1,
            non_negative: false,
            noise: NoiseLevel::Weights,
            mask_above_noise: None,
            fit_points_above_noise: None,
            spectral_index: 0.0,
            frequency_terms: 1,
            reference_hz,
        }
    }
}

/// Why a deconvolution ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Stop {
    /// No peak above the multiple of the noise.
    Noise,
    /// No peak above the flux density.
    FluxDensity,
    /// The number of components.
    Components,
    /// The number of passes over the visibilities.
    MajorCycles,
    /// The last passes lowered the highest peak no further.
    Stalled,
    /// A pass did not lower the misfit, whatever share of its components was taken; that pass was undone.
    Diverged,
    /// There was no pixel to look at.
    NothingToSearch,
}

impl Stop {
    /// In words.
    pub fn describe(self) -> &'static str {
        match self {
            Stop::Noise => "no peak above the multiple of the noise",
            Stop::FluxDensity => "no peak above the flux density asked for",
            Stop::Components => "the number of components was reached",
            Stop::MajorCycles => "the number of major cycles was reached",
            Stop::Stalled => "the highest peak fell no further",
            Stop::Diverged => "the misfit fell no further: the last cycle was undone",
            Stop::NothingToSearch => "no pixel may hold a component",
        }
    }

    /// Whether what was asked for has been reached.
    pub fn finished(self) -> bool {
        matches!(self, Stop::Noise | Stop::FluxDensity)
    }
}

/// One major cycle: components found, visibilities predicted, residual made anew.
#[derive(Debug, Clone, Copy, PartialEq, Default, Serialize, Deserialize)]
pub struct MajorCycle {
    /// Components of this cycle's minor cycle.
    pub components: u64,
    /// Flux density of the model after it, Jy.
    pub model_jy: f64,
    /// Highest peak of the residual after it, in multiples of the noise of the weight map.
    pub peak_over_noise: f64,
    /// Flux density of that peak, Jy/beam.
    pub peak_jy_per_beam: f64,
    /// Share of the components that was taken (1 where the misfit fell with all of them).
    pub step: f64,
    /// Largest difference between the residual that the minor cycle expected and the true one, as a fraction of the
    /// flux it moved: how much the local point spread functions err.
    pub psf_misfit: f64,
}
