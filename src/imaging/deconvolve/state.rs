//! The state of a deconvolution between two passes over the visibilities: enough to go on as if it had never stopped.

use super::points::Crowd;
use super::settings::MajorCycle;
use super::{Model, Run};
use crate::sky::Component;
use ndarray::Array2;
use serde::{Deserialize, Serialize};

/// What a deconvolution knows after a pass. Everything else follows from the data and the settings.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct State {
    /// Rows and columns of the image.
    shape: (usize, usize),
    pixels: Vec<f64>,
    points: Vec<Component>,
    numerator: Vec<f64>,
    /// Further terms of pixels, and their numerators.
    terms: Vec<Vec<f64>>,
    further: Vec<Vec<f64>>,
    grown: Vec<bool>,
    components: u64,
    cycles: Vec<MajorCycle>,
    crowds: Vec<Crowd>,
    refused: Vec<(f64, f64)>,
    fits: usize,
    last_fit: Option<(f64, usize)>,
    pub(super) pace: Pace,
}

/// How the last cycles went.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub(super) struct Pace {
    /// What local point spread functions are reckoned to err, as a fraction of the flux moved.
    pub misfit: f64,
    /// The lowest peak so far,
    pub lowest: f64,
    /// and the cycles since then.
    pub waited: usize,
}

impl State {
    /// Major cycles that were made.
    pub fn cycles(&self) -> usize {
        self.cycles.len()
    }

    /// Whether it is one of an image of so many rows and columns, whole.
    pub fn fits(&self, shape: (usize, usize)) -> bool {
        let count = shape.0 * shape.1;
        self.shape == shape && [self.pixels.len(), self.numerator.len(), self.grown.len()] == [count; 3]
    }
}

fn flat(images: &[Array2<f64>]) -> Vec<Vec<f64>> {
    images.iter().map(|image| image.iter().copied().collect()).collect()
}

impl Run<'_> {
    /// The state now.
    pub(super) fn state(&self, pace: Pace) -> State {
        State {
            shape: self.numerator.dim(),
            pixels: self.model.pixels.iter().copied().collect(),
            points: self.model.points.clone(),
            numerator: self.numerator.iter().copied().collect(),
            terms: flat(&self.model.terms),
            further: flat(&self.further),
            grown: self.grown.clone(),
            components: self.components,
            cycles: self.cycles.clone(),
            crowds: self.crowds.clone(),
            refused: self.refused.clone(),
            fits: self.fits,
            last_fit: self.last_fit,
            pace,
        }
    }

    /// Goes back to a state of the same deconvolution; `None`, and nothing changed, where it is not one of this image.
    pub(super) fn take_up(&mut self, state: State) -> Option<Pace> {
        if !state.fits(self.numerator.dim()) {
            return None;
        }
        let pixels = Array2::from_shape_vec(state.shape, state.pixels).ok()?;
        let numerator = Array2::from_shape_vec(state.shape, state.numerator).ok()?;
        let images = |all: Vec<Vec<f64>>| -> Option<Vec<Array2<f64>>> {
            all.into_iter().map(|image| Array2::from_shape_vec(state.shape, image).ok()).collect()
        };
        let (terms, further) = (images(state.terms)?, images(state.further)?);
        if [terms.len(), further.len()] != [self.further.len(); 2] {
            return None;
        }
        self.model = Model { pixels, points: state.points, terms };
        (self.numerator, self.further) = (numerator, further);
        self.grown = state.grown;
        self.components = state.components;
        self.cycles = state.cycles;
        self.crowds = state.crowds;
        self.refused = state.refused;
        self.fits = state.fits;
        self.last_fit = state.last_fit;
        Some(state.pace)
    }
}
