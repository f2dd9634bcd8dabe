//! Between interleaved term grids and the pixels of a patch: pruned two-dimensional transforms.
//!
//! Only cells that visibilities reach are stored, and only pixels of the patch are kept, so both passes skip what is
//! known to be zero or unwanted. Cells beyond half the transform's size fold back, as pixels at whole numbers demand.

use super::patch::Patch;
use super::vector::{Cell, GridReal, LANES};
use num_complex::Complex;
use rayon::prelude::*;
use rustfft::{Fft, FftPlanner};
use std::sync::Arc;

/// Columns transformed together, for the sake of cache lines.
const STRIP: usize = 16;

/// Sizes of a pointing's grids.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct GridShape {
    /// Length of the transforms, x and y.
    pub fft: (usize, usize),
    /// Cell 0 stands at this stored column and row.
    pub origin: (usize, usize),
    /// Stored columns.
    pub width: usize,
    /// Stored rows.
    pub height: usize,
}

impl GridShape {
    /// Grids for a patch of `size` pixels padded by `oversampling`, whose visibilities reach `reach` cells per unit
    /// of transform length (|u| times pixel), with a window of `support` cells.
    pub(crate) fn new(size: (usize, usize), oversampling: f64, reach: (f64, f64), support: usize) -> GridShape {
        let length = |n: usize| good_length(((n as f64 * oversampling).ceil() as usize).max(2 * support).max(16));
        let fft = (length(size.0), length(size.1));
        let half = |reach: f64, n: usize| ((reach * n as f64).ceil() as usize).min(n / 2) + support / 2 + 2;
        let origin = (half(reach.0, fft.0), half(reach.1, fft.1));
        GridShape { fft, origin, width: 2 * origin.0 + 1, height: 2 * origin.1 + 1 }
    }

    /// Stored cells.
    pub fn cells(&self) -> usize {
        self.width * self.height
    }
}

/// The smallest even 5-smooth number at least `n`.
fn good_length(n: usize) -> usize {
    let smooth = |mut m: usize| {
        for p in [2, 3, 5] {
            while m.is_multiple_of(p) {
                m /= p;
            }
        }
        m == 1
    };
    (n..).find(|&m| m.is_multiple_of(2) && smooth(m)).unwrap_or(n)
}

/// Transforms for one grid shape and patch size.
pub(crate) struct Transform<T: GridReal> {
    shape: GridShape,
    size: (usize, usize),
    to_sky: (Arc<dyn Fft<T>>, Arc<dyn Fft<T>>),
    to_grid: (Arc<dyn Fft<T>>, Arc<dyn Fft<T>>),
    /// Index in the transform of every stored column and row, and of every pixel column and row.
    at: Places,
}

/// Memory that transforms use again and again.
#[derive(Debug, Default)]
pub(crate) struct Scratch<T> {
    rows: Vec<Complex<T>>,
    /// What the last call made.
    pub images: Vec<Vec<Complex<T>>>,
}

struct Places {
    columns: Vec<usize>,
    rows: Vec<usize>,
    xs: Vec<usize>,
    ys: Vec<usize>,
}

/// Index in a transform of length `n` of a signed position.
fn wrap(position: i64, n: usize) -> usize {
    position.rem_euclid(n as i64) as usize
}

impl<T: GridReal> Transform<T> {
    pub(crate) fn new(shape: GridShape, size: (usize, usize)) -> Self {
        let mut planner = FftPlanner::new();
        let stored = |count: usize, origin: usize, n: usize| -> Vec<usize> {
            (0..count).map(|i| wrap(i as i64 - origin as i64, n)).collect()
        };
        let pixels = |size: usize, n: usize| -> Vec<usize> {
            (0..size).map(|i| wrap(i as i64 + Patch::span(size).0 as i64, n)).collect()
        };
        let at = Places {
            columns: stored(shape.width, shape.origin.0, shape.fft.0),
            rows: stored(shape.height, shape.origin.1, shape.fft.1),
            xs: pixels(size.0, shape.fft.0),
            ys: pixels(size.1, shape.fft.1),
        };
        Transform {
            at,
            shape,
            size,
            to_sky: (planner.plan_fft_inverse(shape.fft.0), planner.plan_fft_inverse(shape.fft.1)),
            to_grid: (planner.plan_fft_forward(shape.fft.0), planner.plan_fft_forward(shape.fft.1)),
        }
    }

    /// The patch images of the first `terms` terms of a grid, `[term][y][x]`, into `scratch.images`; not yet divided by the
    /// window's transform.
    pub(crate) fn to_patch(&self, grid: &[Cell<T>], terms: usize, scratch: &mut Scratch<T>) {
        let (nx, ny) = self.size;
        let (gx, gy) = self.shape.fft;
        let zero = Complex::new(T::zero(), T::zero());
        let Scratch { rows, images } = scratch;
        // every entry is overwritten: no need to clear what an earlier call left
        rows.resize(self.shape.height * terms * nx, zero);
        images.resize_with(images.len().max(terms), Vec::new);
        rows.par_chunks_mut(terms * nx).zip(grid.par_chunks(self.shape.width)).for_each_init(
            || (vec![zero; gx * terms], vec![zero; self.to_sky.0.get_inplace_scratch_len()]),
            |(buffer, scratch), (out, cells)| {
                buffer.fill(zero);
                for (cell, &at) in cells.iter().zip(&self.at.columns) {
                    for term in 0..terms {
                        let entry = &mut buffer[term * gx + at];
                        *entry = *entry + Complex::new(cell[term], cell[term + LANES]);
                    }
                }
                self.to_sky.0.process_with_scratch(buffer, scratch);
                for (out, line) in out.chunks_exact_mut(nx).zip(buffer.chunks_exact(gx)) {
                    for (out, &at) in out.iter_mut().zip(&self.at.xs) {
                        *out = line[at];
                    }
                }
            },
        );
        let rows = &*rows;
        images[..terms].par_iter_mut().enumerate().for_each_init(
            || (vec![zero; gy * STRIP], vec![zero; self.to_sky.1.get_inplace_scratch_len()]),
            |(buffer, scratch), (term, image)| {
                image.resize(nx * ny, zero);
                for start in (0..nx).step_by(STRIP) {
                    let count = STRIP.min(nx - start);
                    buffer.fill(zero);
                    for (row, &at) in self.at.rows.iter().enumerate() {
                        let line = &rows[(row * terms + term) * nx + start..][..count];
                        for (c, &value) in line.iter().enumerate() {
                            let entry = &mut buffer[c * gy + at];
                            *entry = *entry + value;
                        }
                    }
                    self.to_sky.1.process_with_scratch(&mut buffer[..count * gy], scratch);
                    for (line, &at) in image.chunks_exact_mut(nx).zip(&self.at.ys) {
                        for (c, out) in line[start..start + count].iter_mut().enumerate() {
                            *out = buffer[c * gy + at];
                        }
                    }
                }
            },
        );
    }

    /// The exact transpose of [`Transform::to_patch`] with conjugate phases: patch images into a grid.
    pub(crate) fn to_grid(&self, images: &[Vec<Complex<T>>], grid: &mut [Cell<T>]) {
        let (nx, _) = self.size;
        let (gx, gy) = self.shape.fft;
        let terms = images.len();
        let zero = Complex::new(T::zero(), T::zero());
        let columns: Vec<Vec<Complex<T>>> = images
            .par_iter()
            .map(|image| {
                let mut out = vec![zero; self.shape.height * nx];
                let mut buffer = vec![zero; gy * STRIP];
                let mut scratch = vec![zero; self.to_grid.1.get_inplace_scratch_len()];
                for start in (0..nx).step_by(STRIP) {
                    let count = STRIP.min(nx - start);
                    buffer.fill(zero);
                    for (line, &at) in image.chunks_exact(nx).zip(&self.at.ys) {
                        for (c, &value) in line[start..start + count].iter().enumerate() {
                            buffer[c * gy + at] = value;
                        }
                    }
                    self.to_grid.1.process_with_scratch(&mut buffer[..count * gy], &mut scratch);
                    for (line, &at) in out.chunks_exact_mut(nx).zip(&self.at.rows) {
                        for (c, out) in line[start..start + count].iter_mut().enumerate() {
                            *out = buffer[c * gy + at];
                        }
                    }
                }
                out
            })
            .collect();
        grid.par_chunks_mut(self.shape.width).enumerate().for_each_init(
            || (vec![zero; gx * terms], vec![zero; self.to_grid.0.get_inplace_scratch_len()]),
            |(buffer, scratch), (row, cells)| {
                buffer.fill(zero);
                for (line, columns) in buffer.chunks_exact_mut(gx).zip(&columns) {
                    for (&value, &at) in columns[row * nx..(row + 1) * nx].iter().zip(&self.at.xs) {
                        line[at] = value;
                    }
                }
                self.to_grid.0.process_with_scratch(buffer, scratch);
                for (cell, &at) in cells.iter_mut().zip(&self.at.columns) {
                    *cell = [T::zero(); 2 * LANES];
                    for term in 0..terms {
                        let value = buffer[term * gx + at];
                        cell[term] = value.re;
                        cell[term + LANES] = value.im;
                    }
                }
            },
        );
    }
}
