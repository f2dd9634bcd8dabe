//! The promise, measured: gridded against exact sums on a sample of a run's own visibilities and pixels.

use super::Mosaic;
use super::mosaic::Pointing;
use crate::observation::{Block, BlockSource, Observation, ObservationError};
use crate::response::{Response, ResponseError, Sums};
use crate::sky::Direction;
use rand::seq::index::sample;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// Terms of the exact sums that a check may cost: seconds of one processor, whatever the size of the data.
const MOST_TERMS: u64 = 150_000_000;
/// Pixels compared, at least and at most.
const PIXELS: (u64, u64) = (48, 256);

/// What a self-check found.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SelfCheck {
    /// Relative L2 error of the numerator N over the pixels compared.
    pub numerator_error: f64,
    /// Relative L2 error of the normaliser W over the pixels compared.
    pub normaliser_error: f64,
    /// Visibilities in the sums compared.
    pub visibilities: u64,
    /// Pixels compared.
    pub pixels: u64,
    /// Whether all usable visibilities took part, so that the compared sums are those of the products.
    pub complete: bool,
}

/// Compares `sums` with exact sums at random pixels. Where all visibilities would cost too much, a random sample of rows
/// is summed both ways instead. `None` when nothing was summed.
///
/// # Errors
/// When visibilities cannot be read.
pub fn self_check(mosaic: &mut Mosaic, sums: &Sums, seed: u64) -> Result<Option<SelfCheck>, ResponseError> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let geometry = *mosaic.geometry();
    let (width, _) = (geometry.width, geometry.height);
    let seen: Vec<usize> =
        sums.normaliser.iter().enumerate().filter(|(_, w)| **w > 0.0).map(|(at, _)| at).collect();
    let used: u64 = mosaic.pointings().iter().map(|p| p.tally.used).sum();
    if seen.is_empty() || used == 0 {
        return Ok(None);
    }
    let pixels = (MOST_TERMS / used.max(1)).clamp(PIXELS.0, PIXELS.1).min(seen.len() as u64);
    let chosen: Vec<usize> = sample(&mut rng, seen.len(), pixels as usize).into_iter().map(|i| seen[i]).collect();
    let directions: Vec<Direction> = chosen
        .iter()
        .map(|at| geometry.direction_of((at % width) as f64, (at / width) as f64).unwrap_or(geometry.centre))
        .collect();
    let share = MOST_TERMS as f64 / (used * pixels) as f64;
    let complete = share >= 1.0;
    let mut exact = vec![(0.0, 0.0); directions.len()];
    let mut visibilities = 0;
    let mut thinned_sums = if complete { None } else { Some(Sums::zero(&geometry)) };
    for (number, pointing) in mosaic.pointings_mut().iter_mut().enumerate() {
        let Pointing { source, gridded, exact: judge, .. } = pointing;
        let seed = seed ^ (number as u64 + 1).wrapping_mul(0x9e37_79b9_7f4a_7c15);
        let mut part = Thinned::new(source.as_mut(), share, seed);
        for (sum, (n, w)) in exact.iter_mut().zip(judge.adjoint_at(&mut part, &directions)?) {
            sum.0 += n;
            sum.1 += w;
        }
        visibilities += part.taken;
        if let Some(sums) = &mut thinned_sums {
            gridded.adjoint(&mut part, sums)?;
        }
    }
    let got = thinned_sums.as_ref().unwrap_or(sums);
    let mut error = [0.0, 0.0];
    let mut size = [0.0, 0.0];
    for (&at, &(n, w)) in chosen.iter().zip(&exact) {
        let place = [at / width, at % width];
        error[0] += (got.numerator[place] - n).powi(2);
        error[1] += (got.normaliser[place] - w).powi(2);
        size[0] += n * n;
        size[1] += w * w;
    }
    let relative = |i: usize| if size[i] > 0.0 { f64::sqrt(error[i] / size[i]) } else { 0.0 };
    Ok(Some(SelfCheck {
        numerator_error: relative(0),
        normaliser_error: relative(1),
        visibilities,
        pixels,
        complete,
    }))
}

/// A source with a random share of its rows, the same in every pass.
struct Thinned<'a> {
    inner: &'a mut dyn BlockSource,
    share: f64,
    seed: u64,
    rng: ChaCha8Rng,
    hands: Vec<usize>,
    /// Usable visibilities of total intensity handed out since the last rewind.
    taken: u64,
}

impl<'a> Thinned<'a> {
    fn new(inner: &'a mut dyn BlockSource, share: f64, seed: u64) -> Self {
        let hands = inner.observation().total_intensity();
        Thinned { inner, share, seed, rng: ChaCha8Rng::seed_from_u64(seed), hands, taken: 0 }
    }
}

impl BlockSource for Thinned<'_> {
    fn observation(&self) -> &Observation {
        self.inner.observation()
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.rng = ChaCha8Rng::seed_from_u64(self.seed);
        self.taken = 0;
        self.inner.rewind()
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        let Some(mut block) = self.inner.next_block()? else { return Ok(None) };
        for row in 0..block.rows() {
            let draw: f64 = self.rng.random();
            for channel in 0..block.channels {
                let at = block.index(row, channel);
                for &hand in &self.hands {
                    if draw >= self.share {
                        block.weight[at + hand] = 0.0;
                    }
                    self.taken += u64::from(block.weight[at + hand] > 0.0);
                }
            }
        }
        Ok(Some(block))
    }
}
