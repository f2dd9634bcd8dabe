//! Residual visibilities, data − predict(model), block by block, and their numerator.
//!
//! Blocks are read in batches of bounded size, since a prediction transforms the model once for each call, whatever the
//! number of visibilities.

use super::spectral::{Basis, tilt};
use crate::observation::{Block, BlockSource, MemorySource, Observation, ObservationError};
use crate::response::{Exact, Response, ResponseError, Sums};
use crate::sky::{Component, Direction, ImageGeometry};
use ndarray::Array2;
use std::collections::VecDeque;

/// Memory of one batch of blocks, bytes (as much again for the model of it).
const BATCH_BYTES: usize = 256 << 20;

/// One pointing as deconvolution needs it.
pub struct Part<'a> {
    /// Its visibilities, with the weights of the image.
    pub source: &'a mut dyn BlockSource,
    /// The response that made the dirty image.
    pub response: &'a dyn Response,
    /// Direct sums: for single sources, and for those that gridding cannot place.
    pub exact: &'a Exact,
    /// Where its stations aim.
    pub aim: Direction,
}

/// A sky as it is predicted.
#[derive(Debug, Clone, Default)]
pub struct Sky {
    /// Components on pixel centres.
    pub pixels: Vec<Component>,
    /// Point sources anywhere.
    pub points: Vec<Component>,
    /// Further terms of the spectra of pixels: what a basis multiplies by ξ, ξ² …
    pub terms: Vec<Vec<Component>>,
    /// The basis of the terms.
    pub basis: Option<Basis>,
}

/// The source of a pointing, its data less the model.
pub struct ResidualSource<'p, 'a> {
    part: &'p mut Part<'a>,
    sky: &'p Sky,
    all: Vec<Component>,
    /// Point sources are summed directly: gridding could not place them.
    points_apart: bool,
    ready: VecDeque<Block>,
    /// Why the blocks ended early.
    failure: Option<ResponseError>,
}

impl<'p, 'a> ResidualSource<'p, 'a> {
    /// The residual of `part` when `sky` is taken off.
    pub fn new(part: &'p mut Part<'a>, sky: &'p Sky) -> Self {
        let all = sky.pixels.iter().chain(&sky.points).cloned().collect();
        ResidualSource { part, sky, all, points_apart: false, ready: VecDeque::new(), failure: None }
    }

    /// What went wrong while blocks were handed out: blocks end early then.
    ///
    /// # Errors
    /// When the model could not be predicted.
    pub fn finish(self) -> Result<(), ResponseError> {
        self.failure.map_or(Ok(()), Err)
    }

    fn fill(&mut self) -> Result<(), ObservationError> {
        let mut batch = Vec::new();
        let mut bytes = 0;
        while bytes < BATCH_BYTES {
            let Some(block) = self.part.source.next_block()? else { break };
            bytes += block.data.len() * 12 + block.rows() * 40;
            batch.push(block);
        }
        if batch.is_empty() || (self.all.is_empty() && self.sky.terms.iter().all(Vec::is_empty)) {
            self.ready.extend(batch);
            return Ok(());
        }
        match self.model_of(&batch) {
            Ok(model) => {
                for (block, model) in batch.iter_mut().zip(&model) {
                    block.data.iter_mut().zip(&model.data).for_each(|(data, model)| *data -= model);
                }
                self.ready.extend(batch);
            }
            Err(failure) => self.failure = Some(failure),
        }
        Ok(())
    }

    fn model_of(&mut self, batch: &[Block]) -> Result<Vec<Block>, ResponseError> {
        let mut model = self.constant_terms(batch)?;
        let Some(basis) = self.sky.basis else { return Ok(model) };
        let xi = xi(self.part.source.observation(), &basis);
        for (term, sky) in self.sky.terms.iter().enumerate().filter(|(_, sky)| !sky.is_empty()) {
            let factors: Vec<f32> = xi.iter().map(|xi| xi.powi(term as i32 + 1)).collect();
            let mut more = batch.to_vec();
            self.part.response.predict(sky, &mut more)?;
            for (block, more) in model.iter_mut().zip(&mut more) {
                tilt(more, &factors);
                block.data.iter_mut().zip(&more.data).for_each(|(sum, more)| *sum += more);
            }
        }
        Ok(model)
    }

    fn constant_terms(&mut self, batch: &[Block]) -> Result<Vec<Block>, ResponseError> {
        let mut model = batch.to_vec();
        if !self.points_apart {
            match self.part.response.predict(&self.all, &mut model) {
                Err(ResponseError::Component { .. }) if !self.sky.points.is_empty() => self.points_apart = true,
                other => return other.map(|()| model),
            }
        }
        self.part.response.predict(&self.sky.pixels, &mut model)?;
        for block in &mut model {
            let mut points = block.clone();
            self.part.exact.predict_exactly(&self.sky.points, &mut points);
            block.data.iter_mut().zip(&points.data).for_each(|(sum, point)| *sum += point);
        }
        Ok(model)
    }
}

/// ξ of every channel.
fn xi(observation: &Observation, basis: &Basis) -> Vec<f32> {
    observation.frequencies_hz.iter().map(|&hz| basis.at(hz) as f32).collect()
}

impl BlockSource for ResidualSource<'_, '_> {
    fn observation(&self) -> &Observation {
        self.part.source.observation()
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.ready.clear();
        self.failure = None;
        self.part.source.rewind()
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        if self.ready.is_empty() && self.failure.is_none() {
            self.fill()?;
        }
        Ok(self.ready.pop_front())
    }
}

/// The numerator N of the residual of all pointings. `rows` is told the rows as they are read.
///
/// # Errors
/// When visibilities cannot be read or the model cannot be predicted.
pub fn residual_numerator(
    parts: &mut [Part],
    geometry: &ImageGeometry,
    sky: &Sky,
    rows: &mut (dyn FnMut(u64) + Send),
) -> Result<Array2<f64>, ResponseError> {
    let mut sums = Sums::zero(geometry);
    for part in parts {
        let response = part.response;
        let mut residual = ResidualSource::new(part, sky);
        let mut counted = crate::observation::Watched::new(&mut residual, |block| {
            rows(block.rows() as u64);
            Ok(())
        });
        response.adjoint(&mut counted, &mut sums)?;
        residual.finish()?;
    }
    Ok(sums.numerator)
}

/// The numerators N_t of the residual for all terms of a basis, N_0 first. Blocks are held in batches, so that a model is
/// predicted once for all terms.
///
/// # Errors
/// As [`residual_numerator`].
pub fn residual_terms(
    parts: &mut [Part],
    geometry: &ImageGeometry,
    sky: &Sky,
    basis: &Basis,
    rows: &mut (dyn FnMut(u64) + Send),
) -> Result<Vec<Array2<f64>>, ResponseError> {
    let mut sums = vec![Sums::zero(geometry); basis.terms];
    for part in parts {
        let response = part.response;
        let observation = part.source.observation().clone();
        let xi = xi(&observation, basis);
        let mut residual = ResidualSource::new(part, sky);
        residual.rewind()?;
        loop {
            let mut blocks = Vec::new();
            let mut bytes = 0;
            while bytes < BATCH_BYTES {
                let Some(block) = residual.next_block()? else { break };
                rows(block.rows() as u64);
                bytes += block.data.len() * 12 + block.rows() * 40;
                blocks.push(block);
            }
            if blocks.is_empty() {
                break;
            }
            let mut batch = MemorySource::new(observation.clone(), blocks);
            for (term, sums) in sums.iter_mut().enumerate() {
                if term > 0 {
                    batch.blocks_mut().iter_mut().for_each(|block| tilt(block, &xi));
                }
                response.adjoint(&mut batch, sums)?;
            }
        }
        residual.finish()?;
    }
    Ok(sums.into_iter().map(|sums| sums.numerator).collect())
}
