//! Between interleaved term grids and the pixels of a patch: pruned two-dimensional transforms.
//!
//! Only cells that visibilities reach are stored, and only pixels of the patch are kept, so both passes skip what is
//! known to be zero or unwanted. Cells beyond half the transform's size fold back, as pixels at whole numbers demand.

use super::patch::Patch;
use super::vector::{Cell, GridReal, LANES, real};
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

/// Which terms of a grid: one block of all that lie interleaved in its cells.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Lanes {
    /// The block.
    pub block: usize,
    /// Blocks of the grid.
    pub blocks: usize,
    /// Terms in the block.
    pub terms: usize,
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

    /// The patch images of some terms of a grid, `[term][y][x]`, into `scratch.images`; not yet divided by the window's
    /// transform.
    ///
    /// Paired, only the real parts of the images are made, two terms in one transform: the real part of a term's image is
    /// the transform of the Hermitian part of its grid, and one becomes the real, the other the imaginary part.
    pub(crate) fn to_patch(&self, grid: &[Cell<T>], of: Lanes, paired: bool, scratch: &mut Scratch<T>) {
        let (nx, ny) = self.size;
        let (gx, gy) = self.shape.fft;
        let (width, height) = (self.shape.width, self.shape.height);
        let zero = Complex::new(T::zero(), T::zero());
        let half: T = real(0.5);
        let Scratch { rows, images } = scratch;
        let count = if paired { of.terms.div_ceil(2) } else { of.terms };
        // every entry is overwritten: no need to clear what an earlier call left
        rows.resize(height * count * nx, zero);
        images.resize_with(images.len().max(count), Vec::new);
        let cell = |line: usize, column: usize| &grid[(line * width + column) * of.blocks + of.block];
        rows.par_chunks_mut(count * nx).enumerate().for_each_init(
            || (vec![zero; gx * count], vec![zero; self.to_sky.0.get_inplace_scratch_len()]),
            |(buffer, scratch), (line, out)| {
                buffer.fill(zero);
                for (column, &at) in self.at.columns.iter().enumerate() {
                    let here = cell(line, column);
                    if paired {
                        // the cell of opposite u, v
                        let there = cell(height - 1 - line, width - 1 - column);
                        for pair in 0..count {
                            let (a, b) = (2 * pair, 2 * pair + 1);
                            // Ha + i Hb with H(u) = (G(u) + G*(−u))/2
                            let a = (here[a] + there[a], here[a + LANES] - there[a + LANES]);
                            let b = (here[b] + there[b], here[b + LANES] - there[b + LANES]);
                            let entry = &mut buffer[pair * gx + at];
                            *entry = *entry + Complex::new(half * (a.0 - b.1), half * (a.1 + b.0));
                        }
                    } else {
                        for term in 0..count {
                            let entry = &mut buffer[term * gx + at];
                            *entry = *entry + Complex::new(here[term], here[term + LANES]);
                        }
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
        images[..count].par_iter_mut().enumerate().for_each_init(
            || (vec![zero; gy * STRIP], vec![zero; self.to_sky.1.get_inplace_scratch_len()]),
            |(buffer, scratch), (term, image)| {
                image.resize(nx * ny, zero);
                for start in (0..nx).step_by(STRIP) {
                    let strip = STRIP.min(nx - start);
                    buffer.fill(zero);
                    for (row, &at) in self.at.rows.iter().enumerate() {
                        let line = &rows[(row * count + term) * nx + start..][..strip];
                        for (c, &value) in line.iter().enumerate() {
                            let entry = &mut buffer[c * gy + at];
                            *entry = *entry + value;
                        }
                    }
                    self.to_sky.1.process_with_scratch(&mut buffer[..strip * gy], scratch);
                    for (line, &at) in image.chunks_exact_mut(nx).zip(&self.at.ys) {
                        for (c, out) in line[start..start + strip].iter_mut().enumerate() {
                            *out = buffer[c * gy + at];
                        }
                    }
                }
            },
        );
    }

    /// The exact transpose of [`Transform::to_patch`] with conjugate phases: patch images into the cells of a grid. Paired,
    /// images hold two real ones, as there.
    pub(crate) fn to_grid(&self, images: &[Vec<Complex<T>>], of: Lanes, paired: bool, grid: &mut [Cell<T>]) {
        let (nx, _) = self.size;
        let (gx, gy) = self.shape.fft;
        let (width, height) = (self.shape.width, self.shape.height);
        let zero = Complex::new(T::zero(), T::zero());
        let half: T = real(0.5);
        let columns: Vec<Vec<Complex<T>>> = images
            .par_iter()
            .map(|image| {
                let mut out = vec![zero; height * nx];
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
        let row_of = |line: usize, buffer: &mut [Complex<T>], scratch: &mut [Complex<T>]| {
            buffer.fill(zero);
            for (row, columns) in buffer.chunks_exact_mut(gx).zip(&columns) {
                for (&value, &at) in columns[line * nx..(line + 1) * nx].iter().zip(&self.at.xs) {
                    row[at] = value;
                }
            }
            self.to_grid.0.process_with_scratch(buffer, scratch);
        };
        let write = |line: &[Complex<T>], opposite: &[Complex<T>], cells: &mut [Cell<T>]| {
            let cells = cells.chunks_exact_mut(of.blocks);
            for (column, (cells, &at)) in cells.zip(&self.at.columns).enumerate() {
                let cell = &mut cells[of.block];
                *cell = Cell::zero();
                for image in 0..images.len() {
                    let here = line[image * gx + at];
                    if paired {
                        // F = Ga + i Gb with both Hermitian
                        let there = opposite[image * gx + self.at.columns[width - 1 - column]];
                        let (a, b) = (2 * image, 2 * image + 1);
                        cell[a] = half * (here.re + there.re);
                        cell[a + LANES] = half * (here.im - there.im);
                        cell[b] = half * (here.im + there.im);
                        cell[b + LANES] = half * (there.re - here.re);
                    } else {
                        cell[image] = here.re;
                        cell[image + LANES] = here.im;
                    }
                }
            }
        };
        // a row and its opposite go together
        let per_row = width * of.blocks;
        let half_height = height / 2;
        let (top, rest) = grid.split_at_mut(half_height * per_row);
        let (middle, bottom) = rest.split_at_mut(per_row);
        let memory = || {
            let line = || vec![zero; gx * images.len()];
            (line(), line(), vec![zero; self.to_grid.0.get_inplace_scratch_len()])
        };
        let (mut line, _, mut scratch) = memory();
        row_of(half_height, &mut line, &mut scratch);
        write(&line, &line, middle);
        top.par_chunks_mut(per_row).zip(bottom.par_chunks_mut(per_row).rev()).enumerate().for_each_init(
            memory,
            |(buffer, opposite, scratch), (line, (above, below))| {
                row_of(line, buffer, scratch);
                row_of(height - 1 - line, opposite, scratch);
                write(buffer, opposite, above);
                write(opposite, buffer, below);
            },
        );
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{Rng, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    /// Two terms in one transform give the real parts that each gives alone, folded positions and all, and the way back is
    /// the transpose. Bound: rounding of transforms of some thousand cells.
    #[test]
    fn pairs_of_terms_share_a_transform() {
        let mut rng = ChaCha8Rng::seed_from_u64(11);
        for reach in [(0.2, 0.3), (0.7, 0.45)] {
            let size = (21, 26);
            let shape = GridShape::new(size, 1.5, reach, 6);
            let transform = Transform::<f64>::new(shape, size);
            let of = Lanes { block: 1, blocks: 2, terms: 7 };
            let mut grid = vec![Cell::zero(); 2 * shape.cells()];
            grid.iter_mut().for_each(|cell| cell.0.fill_with(|| rng.random::<f64>() - 0.5));
            for cell in grid.iter_mut().skip(1).step_by(2) {
                // a term that is not there
                (cell[7], cell[7 + LANES]) = (0.0, 0.0);
            }
            let (mut alone, mut paired) = (Scratch::default(), Scratch::default());
            transform.to_patch(&grid, of, false, &mut alone);
            transform.to_patch(&grid, of, true, &mut paired);
            for term in 0..of.terms {
                for (one, two) in alone.images[term].iter().zip(&paired.images[term / 2]) {
                    let two = if term % 2 == 0 { two.re } else { two.im };
                    assert!((one.re - two).abs() <= 1e-11, "term {term}: {} and {two}", one.re);
                }
            }
            // ⟨real images, images of the grid⟩ = ⟨grid of the images, grid⟩, real parts
            let images: Vec<Vec<Complex<f64>>> = (0..4)
                .map(|pair| {
                    let second = if pair == 3 { 0.0 } else { 1.0 };
                    let mut draw = || rng.random::<f64>() - 0.5;
                    (0..size.0 * size.1).map(|_| Complex::new(draw(), second * draw())).collect()
                })
                .collect();
            let mut back = vec![Cell::zero(); 2 * shape.cells()];
            transform.to_grid(&images, of, true, &mut back);
            let left: f64 = images
                .iter()
                .zip(&paired.images)
                .flat_map(|(a, b)| a.iter().zip(b).map(|(a, b)| a.re * b.re + a.im * b.im))
                .sum();
            let right: f64 = grid
                .iter()
                .zip(&back)
                .skip(1)
                .step_by(2)
                .flat_map(|(a, b)| a.iter().zip(b.iter()).map(|(a, b)| a * b))
                .sum();
            assert!((left - right).abs() <= 1e-9 * left.abs().max(1.0), "{left} and {right}");
        }
    }
}
