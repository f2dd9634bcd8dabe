//! Pointings summed into one mosaic.

use super::weighting::{Price, Share, Weigher, WeighingError, Weighted, most_cells, weigh};
use crate::beam::StationBeams;
use crate::observation::{Block, BlockSource, Watched};
use crate::response::gridded::Options;
use crate::response::{Exact, Gridded, Response, ResponseError, Sums};
use crate::run::Weighting;
use crate::sky::{Component, Direction, ImageGeometry};
use ndarray::Array2;

/// One pointing with both its responses.
pub struct Pointing {
    /// Its visibilities, with imaging weights once there are any.
    pub source: Weighted,
    /// The fast response.
    pub gridded: Gridded,
    /// The exact one, its judge.
    pub exact: Exact,
    /// Where its stations aim.
    pub aim: Direction,
    /// What its visibilities amount to.
    pub tally: Tally,
    /// What it gives to the sums with the weights it has.
    pub share: Share,
}

impl Pointing {
    /// Whether its beams reach the image; otherwise it adds nothing.
    pub fn reaches(&self) -> bool {
        self.gridded.report().patch_px.0 > 0
    }
}

/// What the visibilities of a pointing amount to: total-intensity hands only.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Tally {
    /// Rows.
    pub rows: u64,
    /// Visibilities used.
    pub used: u64,
    /// Visibilities not used (flagged).
    pub flagged: u64,
    /// Sum of weights, Jy⁻².
    pub weight: f64,
    /// Sum of weight times frequency, Hz Jy⁻².
    pub weight_hz: f64,
    /// First and last time, MJD UTC; infinite when there are no rows.
    pub span: (f64, f64),
}

impl Tally {
    /// What natural weights give to the sums.
    fn share(&self) -> Share {
        Share { used: self.used, excluded: 0, weight: self.weight, weight_hz: self.weight_hz }
    }

    fn add(&mut self, block: &Block, hands: &[usize], frequencies_hz: &[f64]) {
        self.rows += block.rows() as u64;
        for row in 0..block.rows() {
            self.span.0 = self.span.0.min(block.mjd_utc[row]);
            self.span.1 = self.span.1.max(block.mjd_utc[row]);
            for (channel, hz) in frequencies_hz.iter().enumerate() {
                let at = block.index(row, channel);
                for &hand in hands {
                    let weight = f64::from(block.weight[at + hand]);
                    if weight > 0.0 {
                        self.used += 1;
                        self.weight += weight;
                        self.weight_hz += weight * hz;
                    } else {
                        self.flagged += 1;
                    }
                }
            }
        }
    }
}

/// A mosaic under way: a common pixel grid and the pointings that contribute to it.
pub struct Mosaic {
    geometry: ImageGeometry,
    pointings: Vec<Pointing>,
}

impl Mosaic {
    /// A mosaic of no pointings yet.
    pub fn new(geometry: ImageGeometry) -> Self {
        Mosaic { geometry, pointings: Vec::new() }
    }

    /// Plans and builds the kernels of a pointing. `rows` is told the number of rows as they are read.
    ///
    /// # Errors
    /// When the visibilities cannot be read or the tolerance cannot be kept.
    pub fn add(
        &mut self,
        source: Box<dyn BlockSource>,
        beams: StationBeams,
        tolerance: f64,
        options: Options,
        mut rows: impl FnMut(u64) + Send,
    ) -> Result<(), ResponseError> {
        let mut source = Weighted::new(source, 1.0);
        let mut observation = source.observation().clone();
        observation.aim = beams.aim();
        let hands = observation.total_intensity();
        let mut tally = Tally { span: (f64::INFINITY, f64::NEG_INFINITY), ..Tally::default() };
        let gridded = {
            let mut counted = Watched::new(source.as_mut(), |block| {
                tally.add(block, &hands, &observation.frequencies_hz);
                rows(block.rows() as u64);
                Ok(())
            });
            Gridded::new(&beams, self.geometry, tolerance, &mut counted, options)?
        };
        if tally.rows == 0 {
            // a pointing that does not reach the image is planned unread; what it holds is told all the same
            source.rewind()?;
            while let Some(block) = source.next_block()? {
                tally.add(&block, &hands, &observation.frequencies_hz);
                rows(block.rows() as u64);
            }
        }
        let aim = beams.aim();
        let exact = Exact::new(&observation, beams, self.geometry);
        self.pointings.push(Pointing { source, gridded, exact, aim, tally, share: tally.share() });
        Ok(())
    }

    /// The pointings.
    pub fn pointings(&self) -> &[Pointing] {
        &self.pointings
    }

    /// The pointings, to be read again.
    pub fn pointings_mut(&mut self) -> &mut [Pointing] {
        &mut self.pointings
    }

    /// The common pixel grid.
    pub fn geometry(&self) -> &ImageGeometry {
        &self.geometry
    }

    /// Gives every pointing that reaches the image imaging weights; what they cost.
    ///
    /// # Errors
    /// When visibilities cannot be read, or the density of uniform or robust weights would take too much memory.
    pub fn weigh(&mut self, weighting: &Weighting, rows: impl FnMut(u64)) -> Result<Price, WeighingError> {
        let geometry = self.geometry;
        // what adds nothing to the image has no part in its density either
        let mut seen: Vec<&mut Pointing> =
            self.pointings.iter_mut().filter(|pointing| pointing.reaches()).collect();
        let mut weighers = Vec::with_capacity(seen.len());
        for pointing in &mut seen {
            pointing.source.weigh_by(None);
            weighers.push(Weigher::new(*weighting, pointing.source.observation(), &geometry));
        }
        let mut sources: Vec<&mut dyn BlockSource> =
            seen.iter_mut().map(|pointing| &mut pointing.source as &mut dyn BlockSource).collect();
        let (price, shares) = weigh(&mut weighers, &mut sources, most_cells(&geometry), rows)?;
        for ((pointing, weigher), share) in seen.into_iter().zip(weighers).zip(shares) {
            pointing.source.weigh_by(Some(weigher));
            pointing.share = share;
        }
        Ok(price)
    }

    /// Mean frequency of the visibilities in the sums by the weights they have there, Hz; `None` when there are none.
    pub fn frequency_hz(&self) -> Option<f64> {
        let seen = self.pointings.iter().filter(|pointing| pointing.reaches());
        let (weight, weight_hz) =
            seen.fold((0.0, 0.0), |sum, p| (sum.0 + p.share.weight, sum.1 + p.share.weight_hz));
        (weight > 0.0).then(|| weight_hz / weight)
    }

    /// Does something with inverse variances as weights, within the ranges of u, v that the imaging weights have, and gives
    /// the imaging weights back afterwards.
    pub fn naturally<R>(&mut self, work: impl FnOnce(&mut Mosaic) -> R) -> R {
        self.weighed_by(|weigher| weigher.ranges(), work)
    }

    /// The normaliser W of natural weights and all usable visibilities in a direction, by direct sums, Jy⁻².
    ///
    /// # Errors
    /// When visibilities cannot be read.
    pub fn natural_weight_at(&mut self, direction: Direction) -> Result<f64, ResponseError> {
        self.weighed_by(
            |_| None,
            |mosaic| {
                let mut sum = 0.0;
                for Pointing { source, exact, .. } in &mut mosaic.pointings {
                    sum += exact.adjoint_at(source.as_mut(), &[direction])?.iter().map(|(_, w)| w).sum::<f64>();
                }
                Ok(sum)
            },
        )
    }

    /// Does something with other weights, and gives the imaging weights back afterwards.
    fn weighed_by<R>(
        &mut self,
        other: impl Fn(&Weigher) -> Option<Weigher>,
        work: impl FnOnce(&mut Mosaic) -> R,
    ) -> R {
        let exchange = |source: &mut Weighted| {
            let lent = source.weigher().and_then(&other);
            source.weigh_by(lent)
        };
        let own: Vec<Option<Weigher>> =
            self.pointings.iter_mut().map(|pointing| exchange(&mut pointing.source)).collect();
        let result = work(self);
        for (pointing, weigher) in self.pointings.iter_mut().zip(own) {
            pointing.source.weigh_by(weigher);
        }
        result
    }

    /// Inverse variance of the flat sky: W² / Σ ω²/w |A|², which with natural weights is W.
    ///
    /// # Errors
    /// When visibilities cannot be read.
    pub fn weight_map(
        &mut self,
        sums: &Sums,
        mut rows: impl FnMut(u64) + Send,
    ) -> Result<Array2<f64>, ResponseError> {
        if self.pointings.iter().all(|pointing| pointing.source.weigher().is_none()) {
            return Ok(sums.normaliser.clone());
        }
        let mut variance = Array2::zeros(sums.normaliser.dim());
        for Pointing { source, gridded, .. } in &mut self.pointings {
            let weigher = source.weigher().cloned();
            // ω of the source times ω/w once more
            let mut squared = Watched::new(source.as_mut(), |block: &mut Block| {
                rows(block.rows() as u64);
                if let Some(weigher) = &weigher {
                    weigher.apply(block);
                }
                Ok(())
            });
            gridded.normaliser(&mut squared, &mut variance)?;
        }
        let mut map = sums.normaliser.clone();
        map.zip_mut_with(&variance, |w, &v| *w = if v > 0.0 { *w * *w / v } else { 0.0 });
        Ok(map)
    }

    /// N and W of all pointings: one sum, not a patchwork.
    ///
    /// # Errors
    /// When visibilities cannot be read.
    pub fn sums(&mut self, mut rows: impl FnMut(u64) + Send) -> Result<Sums, ResponseError> {
        let mut sums = Sums::zero(&self.geometry);
        for pointing in &mut self.pointings {
            let mut counted = Watched::new(pointing.source.as_mut(), |block| {
                rows(block.rows() as u64);
                Ok(())
            });
            pointing.gridded.adjoint(&mut counted, &mut sums)?;
        }
        Ok(sums)
    }

    /// The point spread function of the flat sky at `place`: N/W of the visibilities of 1 Jy there and nothing else,
    /// NaN where `blank` is. A dirty image of one such source equals it, times the flux density.
    ///
    /// # Errors
    /// When visibilities cannot be read.
    pub fn point_spread(
        &mut self,
        place: Direction,
        sums: &Sums,
        blank: &Array2<f64>,
        mut rows: impl FnMut(u64) + Send,
    ) -> Result<Array2<f64>, ResponseError> {
        let source = Component {
            name: "unit".to_owned(),
            direction: place,
            flux_jy: 1.0,
            reference_hz: 1.0,
            spectral_index: 0.0,
        };
        let sky = [source];
        let mut of_unit = Sums { numerator: Array2::zeros(blank.dim()), normaliser: Array2::zeros(blank.dim()) };
        for Pointing { source, gridded, exact, .. } in &mut self.pointings {
            let mut modelled = Watched::new(source.as_mut(), |block: &mut Block| {
                rows(block.rows() as u64);
                // one component: the direct sum is the cheap way, and it has no error to add
                exact.predict_exactly(&sky, block);
                Ok(())
            });
            gridded.adjoint(&mut modelled, &mut of_unit)?;
        }
        let mut psf = of_unit.numerator;
        ndarray::Zip::from(&mut psf).and(&sums.normaliser).and(blank).for_each(|value, &w, &b| {
            *value = if b.is_nan() { f64::NAN } else { *value / w };
        });
        Ok(psf)
    }
}
