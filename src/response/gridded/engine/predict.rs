//! From a sky to visibilities: the transpose of gridding, step by step.

use super::prepare::Prepared;
use super::runs::{Scratch as RunScratch, View};
use super::tables::Table;
use super::{BATCH, Engine, Task};
use crate::observation::Block;
use crate::response::ResponseError;
use crate::response::gridded::offgrid::{Spread, half_width};
#[cfg(test)]
use crate::response::gridded::plan::Plan;
use crate::response::gridded::vector::{Cell, GridReal, LANES, real};
use crate::response::rows::cis_turns;
use crate::sky::{Component, ImageGeometry};
use ndarray::LinalgScalar;
use num_complex::{Complex, Complex32, Complex64};
use rayon::prelude::*;

impl<T: GridReal + LinalgScalar> Engine<T> {
    pub(in crate::response::gridded) fn predict(
        &self,
        geometry: &ImageGeometry,
        sky: &[Component],
        blocks: &mut [Block],
    ) -> Result<(), ResponseError> {
        let groups = self.intensity.groups().len();
        let sums = self.predicted(geometry, sky, blocks)?;
        for (block, sums) in blocks.iter_mut().zip(&sums) {
            block.data.fill(Complex32::ZERO);
            for row in 0..block.rows() {
                for channel in 0..block.channels {
                    let at = block.index(row, channel);
                    for (group, (_, hands)) in self.intensity.groups().iter().enumerate() {
                        let [re, im] = sums[(row * block.channels + channel) * groups + group];
                        for &hand in hands {
                            block.data[at + hand] = Complex32::new(re as f32, im as f32);
                        }
                    }
                }
            }
        }
        Ok(())
    }

    /// Visibilities of `sky`, real and imaginary, `[block][(row, channel, group of hands)]`, before they are rounded to f32.
    pub(in crate::response::gridded) fn predicted(
        &self,
        geometry: &ImageGeometry,
        sky: &[Component],
        blocks: &[Block],
    ) -> Result<Vec<Vec<[f64; 2]>>, ResponseError> {
        let spectra = self.model_images(geometry, sky)?;
        let groups = self.intensity.groups().len();
        let prepared: Vec<Prepared> = blocks.iter().map(|block| self.prepare(block)).collect();
        blocks.iter().zip(&prepared).try_for_each(|(block, prepared)| self.check_reach(block, prepared))?;
        // in the order that runs go through: neighbours there are written by one thread
        let mut ordered: Vec<Vec<[f64; 2]>> =
            blocks.iter().map(|b| vec![[0.0; 2]; b.rows() * b.channels * groups]).collect();
        for task in self.tasks() {
            let tables: Vec<Table<T>> = prepared.iter().map(|p| self.kernel_table(p, task.partition)).collect();
            for (power, model) in spectra.images.iter().enumerate() {
                let grid = self.model_grid(task, model);
                for ((block, prepared), (table, sums)) in
                    blocks.iter().zip(&prepared).zip(tables.iter().zip(&mut ordered))
                {
                    let per_row = block.channels * groups;
                    let view = View { task, block, prepared, table };
                    let factors: Vec<f64> =
                        self.frequencies_hz.iter().map(|&hz| spectra.factor(power, hz)).collect();
                    let rows_at_once = (BATCH / per_row.max(1)).clamp(16, 4096);
                    sums.par_chunks_mut(rows_at_once * per_row).enumerate().for_each_init(
                        RunScratch::new,
                        |scratch, (chunk, sums)| {
                            let rows = chunk * rows_at_once..((chunk + 1) * rows_at_once).min(block.rows());
                            self.gather_rows(&view, rows.clone(), scratch, &grid, |place, share, value| {
                                let value = value * (factors[place.channel] * share.part);
                                let at = (place.ordered - rows.start) * per_row + place.channel * groups;
                                let sum = &mut sums[at + share.group];
                                sum[0] += value.re;
                                sum[1] += value.im;
                            });
                        },
                    );
                }
            }
        }
        let sums = blocks.iter().zip(&prepared).zip(&ordered).map(|((block, prepared), ordered)| {
            let per_row = (block.channels * groups).max(1);
            let mut sums = vec![[0.0; 2]; ordered.len()];
            for (from, &row) in ordered.chunks_exact(per_row).zip(&prepared.order) {
                sums[row as usize * per_row..][..per_row].copy_from_slice(from);
            }
            sums
        });
        Ok(sums.collect())
    }

    /// The plan this engine follows.
    #[cfg(test)]
    pub(in crate::response::gridded) fn plan(&self) -> &Plan {
        &self.plan
    }

    /// The grid a task predicts from: the model times screens and conjugate layer phase, tapered and transformed.
    fn model_grid(&self, task: Task, model: &[f64]) -> Vec<Cell<T>> {
        let (nx, _) = self.plan.patch.size;
        let terms = &self.plan.partitions[task.partition].kernel;
        let matrices = self.pixels(terms);
        let paired = self.plan.layers.centred;
        let w = self.plan.layers.w(task.layer);
        let tapered: Vec<Complex<T>> = model
            .par_iter()
            .enumerate()
            .map(|(at, &flux)| {
                let value = flux * self.taper.0[at % nx] * self.taper.1[at / nx];
                let phase = if paired { Complex64::ONE } else { cis_turns(-w * self.bend[at]) };
                Complex::new(real(value * phase.re), real(value * phase.im))
            })
            .collect();
        let blocks = terms.screens.len().div_ceil(LANES);
        let mut grid = vec![Cell::zero(); self.plan.shape.cells() * blocks];
        for block in 0..blocks {
            let of = self.lanes(task.partition, block);
            let indices: Vec<usize> = (block * LANES..block * LANES + of.terms).collect();
            let images: Vec<Vec<Complex<T>>> = if paired {
                let pair = |pair: &[usize]| {
                    let a = Self::screen(terms, pair[0], &matrices);
                    let b = pair.get(1).map(|&b| Self::screen(terms, b, &matrices));
                    match b {
                        Some(b) => {
                            let screens = a.iter().zip(&b);
                            let both = |(z, (&a, &b)): (&Complex<T>, (&T, &T))| Complex::new(z.re * a, z.re * b);
                            tapered.iter().zip(screens).map(both).collect()
                        }
                        None => tapered.iter().zip(&a).map(|(z, &a)| Complex::new(z.re * a, T::zero())).collect(),
                    }
                };
                indices.par_chunks(2).map(pair).collect()
            } else {
                let one = |&index: &usize| {
                    let screen = Self::screen(terms, index, &matrices);
                    tapered.iter().zip(&screen).map(|(z, &screen)| z.scale(screen)).collect()
                };
                indices.par_iter().map(one).collect()
            };
            self.transform.to_grid(&images, of, paired, &mut grid);
        }
        grid
    }

    /// Model images of a sky on the patch's pixels, one a power of ln ν.
    fn model_images(&self, geometry: &ImageGeometry, sky: &[Component]) -> Result<Spectra, ResponseError> {
        let tolerance = self.plan.report.tolerance;
        let (low, high) = self
            .frequencies_hz
            .iter()
            .fold((f64::INFINITY, 0.0f64), |(low, high), &hz| (low.min(hz), high.max(hz)));
        let middle_hz = (low * high).sqrt();
        let half_log = 0.5 * (high / low).ln();
        let steepest = sky.iter().map(|c| c.spectral_index.abs()).fold(0.0, f64::max) * half_log;
        let mut count = 1;
        let mut term = steepest;
        while term > 0.02 * tolerance && count < 40 {
            count += 1;
            term *= steepest / count as f64;
        }
        let (nx, ny) = self.plan.patch.size;
        let mut images = vec![vec![0.0; nx * ny]; count];
        let shape = &self.plan.shape;
        let band = |half: usize, n: usize| (half as f64 / n as f64).min(0.5);
        let reach = band(shape.origin.0, shape.fft.0).max(band(shape.origin.1, shape.fft.1));
        let half = half_width(reach, 0.02 * tolerance);
        let (x0, y0) = self.plan.patch.origin;
        for component in sky {
            let refuse = |reason: String| ResponseError::Component { name: component.name.clone(), reason };
            let [al, am, an] = self.beams.aim().frame().lmn(component.direction);
            if an <= 0.0 || !self.beams.inside(al, am) {
                continue;
            }
            let (x, y) = geometry
                .pixel_of(component.direction)
                .ok_or_else(|| refuse("it lies beyond the hemisphere of the image".to_owned()))?;
            let spread = Spread::new(x, y, half).map_err(&refuse)?;
            let mut outside = 0.0f64;
            for (px, py, weight) in spread.pixels() {
                let in_image =
                    (0..geometry.width as i64).contains(&px) && (0..geometry.height as i64).contains(&py);
                if !in_image {
                    outside = outside.max(weight.abs());
                    continue;
                }
                let (cx, cy) = (px - x0 as i64, py - y0 as i64);
                if !(0..nx as i64).contains(&cx) || !(0..ny as i64).contains(&cy) {
                    continue; // beyond the patch the beams are below their share of the tolerance
                }
                let flux = component.flux_at(middle_hz) * weight;
                let mut factor = 1.0;
                for image in &mut images {
                    image[cy as usize * nx + cx as usize] += flux * factor;
                    factor *= component.spectral_index;
                }
            }
            if outside > 0.02 * tolerance {
                return Err(refuse("it lies too close to, or beyond, the edge of the image".to_owned()));
            }
        }
        Ok(Spectra { images, middle_hz })
    }
}

/// A sky on the patch's pixels: S(ν) = Σ_j image_j · (ln ν/ν_mid)^j / j!.
struct Spectra {
    images: Vec<Vec<f64>>,
    middle_hz: f64,
}

impl Spectra {
    fn factor(&self, power: usize, hz: f64) -> f64 {
        let x = (hz / self.middle_hz).ln();
        (1..=power).map(|j| x / j as f64).product()
    }
}
