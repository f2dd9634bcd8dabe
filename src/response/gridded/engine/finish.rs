//! From grids to the sky: transforms, screens, and the sums over terms and layers.

use super::{CHUNK, Engine, Task};
use crate::response::gridded::patch::Patch;
use crate::response::gridded::smooth::interpolation;
use crate::response::gridded::terms::Terms;
use crate::response::gridded::transform::{Lanes, Scratch};
use crate::response::gridded::vector::{Cell, GridReal, LANES, double, real};
use crate::response::rows::cis_turns;
use ndarray::{Array2, Axis, LinalgScalar, s};
use num_complex::{Complex, Complex64};
use rayon::prelude::*;

impl<T: GridReal + LinalgScalar> Engine<T> {
    /// One term's screen on the patch's pixels.
    pub(super) fn screen(terms: &Terms, index: usize, (px, py): &(Array2<T>, Array2<T>)) -> Array2<T> {
        py.dot(&terms.screens[index].mapv(real)).dot(&px.t()).as_standard_layout().into_owned()
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

    /// Which terms lie in a block of a partition's grid.
    pub(super) fn lanes(&self, partition: usize, block: usize) -> Lanes {
        let terms = self.plan.partitions[partition].kernel.screens.len();
        Lanes { block, blocks: terms.div_ceil(LANES), terms: LANES.min(terms - block * LANES) }
    }

    /// Transforms the grids of one partition's tasks and adds them to N. Screens are made once for all layers.
    pub(super) fn finish(
        &self,
        tasks: &[(Task, Vec<Cell<T>>)],
        scratch: &mut Scratch<T>,
        numerator: &mut Array2<f64>,
    ) {
        let Some((Task { partition, .. }, _)) = tasks.first() else { return };
        let (nx, ny) = self.plan.patch.size;
        let terms = &self.plan.partitions[*partition].kernel;
        let matrices = self.pixels(terms);
        let paired = self.plan.layers.centred;
        let zero = Complex::new(T::zero(), T::zero());
        let mut sums = vec![vec![zero; nx * ny]; tasks.len()];
        for block in 0..terms.screens.len().div_ceil(LANES) {
            let of = self.lanes(*partition, block);
            let screens: Vec<Array2<T>> = (block * LANES..block * LANES + of.terms)
                .into_par_iter()
                .map(|index| Self::screen(terms, index, &matrices))
                .collect();
            let screens: Vec<&[T]> = screens.iter().map(|screen| screen.as_slice().unwrap_or(&[])).collect();
            for ((_, grid), sum) in tasks.iter().zip(&mut sums) {
                self.transform.to_patch(grid, of, paired, scratch);
                let images = &scratch.images;
                sum.par_chunks_mut(CHUNK).enumerate().for_each(|(chunk, sum)| {
                    let here = chunk * CHUNK..chunk * CHUNK + sum.len();
                    if paired {
                        for (pair, image) in screens.chunks(2).zip(images) {
                            let image = &image[here.clone()];
                            match pair {
                                [a, b] => {
                                    let screens = a[here.clone()].iter().zip(&b[here.clone()]);
                                    for ((sum, z), (&a, &b)) in sum.iter_mut().zip(image).zip(screens) {
                                        sum.re = sum.re + z.re * a + z.im * b;
                                    }
                                }
                                _ => {
                                    for ((sum, z), &a) in sum.iter_mut().zip(image).zip(&pair[0][here.clone()]) {
                                        sum.re = sum.re + z.re * a;
                                    }
                                }
                            }
                        }
                    } else {
                        for (screen, image) in screens.iter().zip(images) {
                            let parts = image[here.clone()].iter().zip(&screen[here.clone()]);
                            for (sum, (&z, &screen)) in sum.iter_mut().zip(parts) {
                                *sum = *sum + z.scale(screen);
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
                    value += if paired {
                        z.re
                    } else {
                        (z * cis_turns(self.plan.layers.w(task.layer) * self.bend[at])).re
                    };
                }
                *out += value * self.taper.0[x] * self.taper.1[y];
            }
        });
    }
}
