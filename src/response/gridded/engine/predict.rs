//! From a sky to visibilities: the transpose of gridding, step by step.

use super::{BATCH, Engine, Prepared, Table, Task};
use crate::observation::Block;
use crate::response::ResponseError;
use crate::response::gridded::offgrid::{Spread, half_width};
#[cfg(test)]
use crate::response::gridded::plan::Plan;
use crate::response::gridded::tiles::tile_order;
use crate::response::gridded::vector::{Cell, GridReal, LANES, Sample, gather, real};
use crate::response::rows::{Seen, cis_turns};
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
        let mut sums: Vec<Vec<[f64; 2]>> =
            blocks.iter().map(|b| vec![[0.0; 2]; b.rows() * b.channels * groups]).collect();
        let prepared: Vec<Prepared> = blocks.iter().map(|block| self.prepare(block)).collect();
        blocks.iter().zip(&prepared).try_for_each(|(block, prepared)| self.check_reach(block, prepared))?;
        for task in self.tasks() {
            let partition = &self.plan.partitions[task.partition];
            let tables: Vec<Table<T>> = prepared.iter().map(|p| self.kernel_table(p, task.partition)).collect();
            let bends = Self::term_bends(partition);
            for (power, model) in spectra.images.iter().enumerate() {
                let grids = self.model_grids(task, model);
                for ((block, prepared), (table, sums)) in
                    blocks.iter().zip(&prepared).zip(tables.iter().zip(&mut sums))
                {
                    let lanes = self.lanes(table, &bends);
                    let per_row = block.channels * groups;
                    let rows_at_once = (BATCH / per_row.max(1)).clamp(16, 4096);
                    sums.par_chunks_mut(rows_at_once * per_row).enumerate().for_each(|(chunk, sums)| {
                        let rows = chunk * rows_at_once..((chunk + 1) * rows_at_once).min(block.rows());
                        let mut batch = Vec::new();
                        let mut places = Vec::new();
                        self.samples(
                            task,
                            block,
                            (prepared, table),
                            rows.clone(),
                            false,
                            |sample, place, turns| {
                                batch.push(sample);
                                places.push((place, turns));
                            },
                        );
                        let order = tile_order(&batch, self.plan.shape.width, self.plan.shape.height);
                        let sorted: Vec<Sample<T>> = order.iter().map(|&index| batch[index as usize]).collect();
                        let mut got = vec![[0.0; 2]; sorted.len()];
                        for (lane, grid) in lanes.iter().zip(&grids) {
                            gather(self.instructions, &sorted, lane, grid, &mut got);
                        }
                        for (&index, got) in order.iter().zip(&got) {
                            let ((row, channel, group), turns) = &places[index as usize];
                            let factor = spectra.factor(power, self.frequencies_hz[*channel]);
                            let mean = matches!(self.intensity.groups()[*group].0, Seen::Mean);
                            let share = if mean { 0.5 * factor } else { factor };
                            let value = Complex64::new(got[0], got[1]) * cis_turns(-turns) * share;
                            let sum = &mut sums[(row - rows.start) * per_row + channel * groups + group];
                            sum[0] += value.re;
                            sum[1] += value.im;
                        }
                    });
                }
            }
        }
        Ok(sums)
    }

    /// The plan this engine follows.
    #[cfg(test)]
    pub(in crate::response::gridded) fn plan(&self) -> &Plan {
        &self.plan
    }

    /// The grids a task predicts from: the model times conjugate screens and layer phase, tapered and transformed.
    fn model_grids(&self, task: Task, model: &[f64]) -> Vec<Vec<Cell<T>>> {
        let (nx, _) = self.plan.patch.size;
        let terms = &self.plan.partitions[task.partition].kernel;
        let matrices = self.pixels(terms);
        let w = self.plan.layers.w(task.layer);
        let tapered: Vec<Complex<T>> = model
            .par_iter()
            .enumerate()
            .map(|(at, &flux)| {
                let value = flux * self.taper.0[at % nx] * self.taper.1[at / nx];
                let phase = if self.plan.layers.bends { cis_turns(-w * self.bend[at]) } else { Complex64::ONE };
                Complex::new(real(value * phase.re), real(value * phase.im))
            })
            .collect();
        let count = terms.points.len();
        (0..count.div_ceil(LANES))
            .map(|block| {
                let indices: Vec<usize> = (block * LANES..((block + 1) * LANES).min(count)).collect();
                let images: Vec<Vec<Complex<T>>> = indices
                    .par_iter()
                    .map(|&index| {
                        let (re, im) = Self::screen(terms, index, &matrices);
                        match im {
                            None => tapered.iter().zip(&re).map(|(z, &re)| z.scale(re)).collect(),
                            Some(im) => tapered
                                .iter()
                                .zip(&re)
                                .zip(&im)
                                .map(|((z, &re), &im)| *z * Complex::new(re, T::zero() - im))
                                .collect(),
                        }
                    })
                    .collect();
                let mut grid = vec![[T::zero(); 2 * LANES]; self.plan.shape.cells()];
                self.transform.to_grid(&images, &mut grid);
                grid
            })
            .collect()
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
