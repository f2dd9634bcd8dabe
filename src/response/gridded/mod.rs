//! The fast response: windows, terms and layers, to a promised relative error.
//!
//! A visibility's gridding kernel is the transform of its screen A_pq*(l,m) exp(2πi w κ(l,m)). Instead of one table per
//! baseline, time, channel and w, a partition's screens are expanded in a few common real screens φ_k, its *terms*:
//!
//! ```text
//! N(l,m) = Re Σ_layers exp(2πi w_layer κ) Σ_k φ_k(l,m) · F[ Σ_v c_vk ω_v V_v ⊛ window ](l,m) / taper(l,m)
//! ```
//!
//! F is a Fourier transform of a grid filled with a plain separable window at each visibility's exact position. The terms
//! of a partition lie interleaved in memory. Three ideas keep the work small:
//!
//! - Along a pair's track the coefficients c_vk are smooth: visibilities of neighbouring channels and times meet a few
//!   *nodes* on a scrap of grid in the first cache, and what the scrap sums to meets the terms once.
//! - Only real parts count, so rows of negative w are taken as conjugates of the opposite baseline: half the layers. With one
//!   layer at w = 0 the images of two terms come out of one transform.
//! - The normaliser needs no grid: |A_pq|² is expanded the same way and its coefficients are summed.
//!
//! Files, in the order of a run: `patch` (which pixels), `survey` (how far u, v, w reach), `plan` and `choice` (shares of the
//! tolerance, partitions, layers), `family`, `smooth` and `terms` (kernels), `bands` (nodes), `engine` (gridding), `vector`
//! and `register` (inner loops), `transform`.

mod bands;
mod choice;
mod engine;
mod family;
mod offgrid;
mod patch;
mod plan;
mod register;
mod smooth;
mod survey;
mod terms;
mod transform;
mod vector;

#[cfg(test)]
mod tests;

pub use plan::{KernelReport, LARGEST_TOLERANCE, SMALLEST_TOLERANCE};
pub use transform::GridShape;
pub use vector::Instructions;

use super::rows::Intensity;
use super::window::Kind;
use super::{Response, ResponseError, Sums};
use crate::beam::StationBeams;
use crate::observation::{Block, BlockSource, Observation};
use crate::sky::{Component, ImageGeometry};
use engine::Engine;
use patch::Patch;
use plan::{Inputs, Plan};
use survey::Survey;

/// The gridded response of one pointing, planned for the visibilities it was made with.
pub struct Gridded {
    geometry: ImageGeometry,
    engine: Option<Precision>,
    report: KernelReport,
    used: u64,
}

enum Precision {
    Single(Engine<f32>),
    Double(Engine<f64>),
}

/// How a [`Gridded`] is to be run; the defaults are what programs want.
#[derive(Debug, Clone, Copy)]
pub struct Options {
    /// Instructions of the inner loops (never more than the processor has).
    pub instructions: Instructions,
    /// Memory that grids may take at once, bytes; more passes over the visibilities are made where it is not enough.
    pub grid_memory: usize,
    /// Double-precision grids whatever the tolerance.
    pub force_double: bool,
    /// Kind of anti-alias window. With [`Kind::Nearest`] the tolerance is kept but for its aliasing, which is what it is:
    /// [`KernelReport::window_error`].
    pub window: Kind,
}

impl Default for Options {
    fn default() -> Self {
        Options {
            instructions: Instructions::detect(),
            grid_memory: 3 << 30,
            force_double: false,
            window: Kind::default(),
        }
    }
}

impl Gridded {
    /// Plans and builds kernels for the visibilities of `source`: the relative L2 errors of N and of W over the patch
    /// stay below `tolerance`.
    ///
    /// # Errors
    /// When the tolerance is out of range or out of reach, or the source cannot be read.
    pub fn new(
        beams: &StationBeams,
        geometry: ImageGeometry,
        tolerance: f64,
        source: &mut dyn BlockSource,
        options: Options,
    ) -> Result<Gridded, ResponseError> {
        let observation = source.observation().clone();
        Self::build(&observation, beams, geometry, tolerance, options, |intensity, patch| {
            Survey::new(&observation, intensity, patch, source)
        })
    }

    /// As [`Gridded::new`], for visibilities at hand (to predict them, say).
    ///
    /// # Errors
    /// When the tolerance is out of range or out of reach.
    pub fn for_blocks(
        observation: &Observation,
        beams: &StationBeams,
        geometry: ImageGeometry,
        tolerance: f64,
        blocks: &[Block],
        options: Options,
    ) -> Result<Gridded, ResponseError> {
        Self::build(observation, beams, geometry, tolerance, options, |intensity, patch| {
            Ok(Survey::of_blocks(observation, intensity, patch, blocks))
        })
    }

    fn build(
        observation: &Observation,
        beams: &StationBeams,
        geometry: ImageGeometry,
        tolerance: f64,
        options: Options,
        survey: impl FnOnce(&Intensity, &Patch) -> Result<Survey, crate::observation::ObservationError>,
    ) -> Result<Gridded, ResponseError> {
        if !(SMALLEST_TOLERANCE..=LARGEST_TOLERANCE).contains(&tolerance) {
            return Err(ResponseError::Tolerance {
                asked: tolerance,
                reachable: SMALLEST_TOLERANCE,
                reason: format!("tolerances from {SMALLEST_TOLERANCE:e} to {LARGEST_TOLERANCE:e} are kept"),
            });
        }
        let lowest = observation.frequencies_hz.iter().copied().fold(f64::INFINITY, f64::min);
        let patch = Patch::around(&geometry, beams, lowest, plan::edge_level(tolerance));
        let intensity = Intensity::new(observation, beams.feeds_alike());
        let nothing = Gridded { geometry, engine: None, report: KernelReport::default(), used: 0 };
        let Some(patch) = patch else { return Ok(nothing) };
        let survey = survey(&intensity, &patch)?;
        if survey.used == 0 {
            return Ok(nothing);
        }
        let frequencies_hz = &observation.frequencies_hz;
        let mut plan = Plan::make(Inputs {
            beams,
            intensity: &intensity,
            frequencies_hz,
            survey: &survey,
            patch,
            tolerance,
            window: options.window,
        })?;
        plan.double |= options.force_double;
        let double = plan.double;
        let mut report = plan.report.clone();
        report.double_precision = double;
        let engine = if double {
            Precision::Double(Engine::new(plan, observation, beams, intensity, options)?)
        } else {
            Precision::Single(Engine::new(plan, observation, beams, intensity, options)?)
        };
        report.memory_bytes = match &engine {
            Precision::Single(engine) => engine.memory_bytes(),
            Precision::Double(engine) => engine.memory_bytes(),
        };
        Ok(Gridded { geometry, engine: Some(engine), report, used: survey.used })
    }

    /// What the kernel cache holds and how good it is.
    pub fn report(&self) -> &KernelReport {
        &self.report
    }

    /// Usable visibilities that the plan was made for.
    pub fn used(&self) -> u64 {
        self.used
    }
}

impl Response for Gridded {
    fn geometry(&self) -> &ImageGeometry {
        &self.geometry
    }

    fn predict(&self, sky: &[Component], blocks: &mut [Block]) -> Result<(), ResponseError> {
        match &self.engine {
            Some(Precision::Single(engine)) => engine.predict(&self.geometry, sky, blocks),
            Some(Precision::Double(engine)) => engine.predict(&self.geometry, sky, blocks),
            None => {
                blocks.iter_mut().for_each(|block| block.data.fill(num_complex::Complex32::ZERO));
                Ok(())
            }
        }
    }

    fn adjoint(&self, source: &mut dyn BlockSource, sums: &mut Sums) -> Result<(), ResponseError> {
        match &self.engine {
            Some(Precision::Single(engine)) => engine.adjoint(source, sums),
            Some(Precision::Double(engine)) => engine.adjoint(source, sums),
            None => Ok(()),
        }
    }

    fn normaliser(
        &self,
        source: &mut dyn BlockSource,
        sum: &mut ndarray::Array2<f64>,
    ) -> Result<(), ResponseError> {
        match &self.engine {
            Some(Precision::Single(engine)) => engine.normaliser(source, sum),
            Some(Precision::Double(engine)) => engine.normaliser(source, sum),
            None => Ok(()),
        }
    }
}
