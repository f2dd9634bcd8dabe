//! From grids to the sky: transforms, screens, and the sums over terms and layers.

use super::{CHUNK, Engine, POWER_LANES, Task};
use crate::response::gridded::patch::Patch;
use crate::response::gridded::plan::Partition;
use crate::response::gridded::smooth::interpolation;
use crate::response::gridded::terms::Terms;
use crate::response::gridded::transform::Scratch;
use crate::response::gridded::vector::{Cell, GridReal, LANES, double, real};
use crate::response::rows::cis_turns;
use ndarray::{Array2, Axis, LinalgScalar, s};
use num_complex::{Complex, Complex64};
use rayon::prelude::*;

impl<T: GridReal + LinalgScalar> Engine<T> {
    /// θ of one term on the patch's pixels, real and imaginary parts (the latter only where it is not 0).
    pub(super) fn screen(
        terms: &Terms,
        index: usize,
        (px, py): &(Array2<T>, Array2<T>),
    ) -> (Array2<T>, Option<Array2<T>>) {
        let part = |pick: fn(&Complex64) -> f64| -> Option<Array2<T>> {
            let values = terms.screens[index].mapv(|z| real(pick(&z)));
            if terms.screens[index].iter().all(|z| pick(z) == 0.0) {
                return None;
            }
            Some(py.dot(&values).dot(&px.t()).as_standard_layout().into_owned())
        };
        let shape = (py.nrows(), px.nrows());
        (part(|z| z.re).unwrap_or_else(|| Array2::zeros(shape)), part(|z| z.im))
    }

    /// Interpolation matrices from a partition's nodes to the patch's pixels.
    pub(super) fn pixels(&self, terms: &Terms) -> (Array2<T>, Array2<T>) {
        let offsets = |n: usize| -> Vec<f64> { (0..n).map(|i| i as f64 + Patch::span(n).0).collect() };
        let (nx, ny) = self.plan.patch.size;
        (
            interpolation(&terms.nodes_x, &offsets(nx)).mapv(real),
            interpolation(&terms.nodes_y, &offsets(ny)).mapv(real),
        )
    }

    /// Transforms the grids of one partition's tasks and adds them to N. Screens are made once for all layers.
    pub(super) fn finish(
        &self,
        tasks: &[(Task, Vec<Vec<Cell<T>>>)],
        scratch: &mut Scratch<T>,
        numerator: &mut Array2<f64>,
    ) {
        let Some((first_task, first_grids)) = tasks.first() else { return };
        let (nx, ny) = self.plan.patch.size;
        let terms = &self.plan.partitions[first_task.partition].kernel;
        let matrices = self.pixels(terms);
        let zero = Complex::new(T::zero(), T::zero());
        let mut sums = vec![vec![zero; nx * ny]; tasks.len()];
        for block in 0..first_grids.len() {
            let first = block * LANES;
            let count = LANES.min(terms.points.len() - first);
            let screens: Vec<(Array2<T>, Option<Array2<T>>)> =
                (first..first + count).into_par_iter().map(|index| Self::screen(terms, index, &matrices)).collect();
            for ((_, grids), sum) in tasks.iter().zip(&mut sums) {
                self.transform.to_patch(&grids[block], count, scratch);
                let images = &scratch.images[..count];
                sum.par_chunks_mut(CHUNK).enumerate().for_each(|(chunk, sum)| {
                    let here = chunk * CHUNK..chunk * CHUNK + sum.len();
                    for (image, (re, im)) in images.iter().zip(&screens) {
                        let re = re.as_slice().unwrap_or(&[]);
                        let image = &image[here.clone()];
                        match im.as_ref().and_then(|im| im.as_slice()) {
                            None => {
                                for ((sum, &z), &re) in sum.iter_mut().zip(image).zip(&re[here.clone()]) {
                                    *sum = *sum + z.scale(re);
                                }
                            }
                            Some(im) => {
                                let parts = re[here.clone()].iter().zip(&im[here.clone()]);
                                for ((sum, &z), (&re, &im)) in sum.iter_mut().zip(image).zip(parts) {
                                    *sum = *sum + z * Complex::new(re, im);
                                }
                            }
                        }
                    }
                });
            }
        }
        let (x0, y0) = self.plan.patch.origin;
        let mut window = numerator.slice_mut(s![y0..y0 + ny, x0..x0 + nx]);
        window.axis_iter_mut(Axis(0)).into_par_iter().enumerate().for_each(|(y, mut row)| {
            for (x, out) in row.iter_mut().enumerate() {
                let at = y * nx + x;
                if !self.mask[at] {
                    continue;
                }
                let mut value = 0.0;
                for ((task, _), sum) in tasks.iter().zip(&sums) {
                    let z = Complex64::new(double(sum[at].re), double(sum[at].im));
                    value += if self.plan.layers.bends {
                        (z * cis_turns(self.plan.layers.w(task.layer) * self.bend[at])).re
                    } else {
                        z.re
                    };
                }
                *out += value * self.taper.0[x] * self.taper.1[y];
            }
        });
    }

    pub(super) fn finish_powers(
        &self,
        partition: &Partition,
        powers: &[[f64; POWER_LANES]],
        normaliser: &mut Array2<f64>,
    ) {
        let (nx, ny) = self.plan.patch.size;
        let terms = &partition.power;
        let mut nodes = Array2::<f64>::zeros((terms.nodes_y.len(), terms.nodes_x.len()));
        for (j, screen) in terms.screens.iter().enumerate() {
            let factor = powers[j / POWER_LANES][j % POWER_LANES];
            nodes.zip_mut_with(screen, |sum, z| *sum += factor * z.re);
        }
        let offsets = |n: usize| -> Vec<f64> { (0..n).map(|i| i as f64 + Patch::span(n).0).collect() };
        let image = interpolation(&terms.nodes_y, &offsets(ny))
            .dot(&nodes)
            .dot(&interpolation(&terms.nodes_x, &offsets(nx)).t());
        let (x0, y0) = self.plan.patch.origin;
        for ((y, x), &value) in image.indexed_iter() {
            if self.mask[y * nx + x] {
                // the sum is a sum of squares: what the expansion leaves below zero is error
                normaliser[[y0 + y, x0 + x]] += value.max(0.0);
            }
        }
    }
}
