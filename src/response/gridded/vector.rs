//! The inner loops: visibilities onto scraps, scraps onto the grid of all terms, and back.
//!
//! A cell holds eight terms (or modes, on a scrap): eight real parts then eight imaginary parts: 64 bytes in single precision, one vector
//! register of AVX-512 or two of AVX2. The same body is compiled for each instruction set and chosen at run time, since
//! released binaries are built for plain x86-64, where a fused multiply-add is a library call.
//!
//! The sums over cells are written on whole registers ([`super::register`]): left to itself, the compiler vectorises
//! them across cells, with scattered loads, and is ten times slower.
//!
//! `unsafe` here: calls of functions compiled for instructions whose presence was just checked.

#![allow(unsafe_code)]

use super::bands::MOST_DEGREES;
use super::register::{Plain, Register};

use crate::response::window::{MAX_TAPS, PolynomialWindow, Real};

/// Terms a cell holds.
pub(crate) const LANES: usize = 8;

/// Eight complex numbers: real parts, then imaginary parts. Aligned, so that a register is loaded from one cache line.
#[derive(Debug, Clone, Copy, PartialEq)]
#[repr(align(64))]
pub(crate) struct Cell<T>(pub [T; 2 * LANES]);

impl<T: GridReal> Cell<T> {
    pub(crate) fn zero() -> Self {
        Cell([T::zero(); 2 * LANES])
    }
}

impl<T> std::ops::Deref for Cell<T> {
    type Target = [T; 2 * LANES];

    #[inline(always)]
    fn deref(&self) -> &Self::Target {
        &self.0
    }
}

impl<T> std::ops::DerefMut for Cell<T> {
    #[inline(always)]
    fn deref_mut(&mut self) -> &mut Self::Target {
        &mut self.0
    }
}

/// The number types grids are made of.
pub(crate) trait GridReal: Real + rustfft::FftNum {
    /// Coefficients of cos(2πt) in t², constant first, for |t| ≤ 1/2.
    const COS: &'static [f64];
    /// Coefficients of sin(2πt)/t in t², constant first, for |t| ≤ 1/2.
    const SIN: &'static [f64];
    /// 1.5 times the number whose last bit is worth 1: added and taken away again, it rounds to whole numbers.
    const WHOLE: Self;
    /// A cell in AVX2 registers.
    #[cfg(target_arch = "x86_64")]
    type Avx2: Register<Self>;
    /// A cell in AVX-512 registers.
    #[cfg(target_arch = "x86_64")]
    type Avx512: Register<Self>;
}

/// A number in the grid's precision.
#[inline(always)]
pub(crate) fn real<T: GridReal>(value: f64) -> T {
    <T as Real>::from_f64(value)
}

/// A grid number in double precision.
#[inline(always)]
pub(crate) fn double<T: Real>(value: T) -> f64 {
    Real::to_f64(value)
}

// Taylor coefficients (−1)^k (2π)^{2k}/(2k)! and (−1)^k (2π)^{2k+1}/(2k+1)!; the first term left out is at most
// π^20/20! = 4e-9 in single, π^32/32! = 3e-20 in double precision.
const fn taylor<const N: usize>(odd: bool) -> [f64; N] {
    let tau = std::f64::consts::TAU;
    let mut out = [0.0; N];
    let mut term = if odd { tau } else { 1.0 };
    let mut k = 0;
    while k < N {
        out[k] = term;
        let n = 2 * k + if odd { 1 } else { 0 };
        term *= -(tau * tau) / ((n + 1) * (n + 2)) as f64;
        k += 1;
    }
    out
}
const COS_SINGLE: [f64; 10] = taylor(false);
const SIN_SINGLE: [f64; 10] = taylor(true);
const COS_DOUBLE: [f64; 16] = taylor(false);
const SIN_DOUBLE: [f64; 16] = taylor(true);

impl GridReal for f32 {
    #[cfg(target_arch = "x86_64")]
    type Avx2 = super::register::SingleAvx2;
    #[cfg(target_arch = "x86_64")]
    type Avx512 = super::register::SingleAvx512;
    const COS: &'static [f64] = &COS_SINGLE;
    const SIN: &'static [f64] = &SIN_SINGLE;
    const WHOLE: f32 = 12_582_912.0;
}

impl GridReal for f64 {
    #[cfg(target_arch = "x86_64")]
    type Avx2 = super::register::DoubleAvx2;
    #[cfg(target_arch = "x86_64")]
    type Avx512 = super::register::DoubleAvx512;
    const COS: &'static [f64] = &COS_DOUBLE;
    const SIN: &'static [f64] = &SIN_DOUBLE;
    const WHOLE: f64 = 6_755_399_441_055_744.0;
}

/// One visibility on its way to or from a scrap.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Sample<T> {
    /// First cell (row · width + column) of its footprint on the scrap.
    pub cell: u32,
    /// Its channel, counted in the band, and its row, counted in the run.
    pub channel: u32,
    /// See `channel`.
    pub row: u32,
    /// Fractions, as [`crate::response::window::locate`].
    pub fx: T,
    /// See `fx`.
    pub fy: T,
    /// Weighted visibility, turned to the patch's centre (spreading only).
    pub re: T,
    /// See `re`.
    pub im: T,
}

/// A small part of the grid with at most eight numbers a cell, one a mode: visibilities that are close in u, v meet here,
/// and only what they sum to meets the many terms of the grid.
pub(crate) struct Scrap<'a, T> {
    /// How much of a visibility each mode gets, for each power of time: `[channel][power]`, every weight twice.
    pub profiles: &'a [Cell<T>],
    /// Powers of time.
    pub degrees: usize,
    /// T_b of each row's time.
    pub times: &'a [[T; MOST_DEGREES]],
    /// Columns.
    pub width: usize,
    /// The window.
    pub window: &'a PolynomialWindow<T>,
}

/// A run of cells that lie side by side on a scrap and on the grid.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Piece {
    /// First cell on the scrap.
    pub from: usize,
    /// First cell of the grid.
    pub to: usize,
    /// Cells.
    pub length: usize,
}

/// Two station voltages at the terms' directions, and w, of one node of a run.
pub(crate) struct Look<'a, T> {
    /// Station voltages, first and second station: real parts in sixteen directions in one cell, imaginary parts in the next.
    pub p: &'a [Cell<T>],
    /// See `p`.
    pub q: &'a [Cell<T>],
    /// w less that of the layer, wavelengths; `None` where w does not matter.
    pub dw: Option<T>,
}

/// What makes kernel coefficients of looks.
pub(crate) struct Mixing<'a, T> {
    /// Bend of sixteen directions a cell, turns per wavelength of w.
    pub bends: &'a [Cell<T>],
    /// `[direction][sixteen terms]`: what each direction's value adds to each term.
    pub mix: &'a [Cell<T>],
    /// Blocks of terms.
    pub blocks: usize,
}

/// What coefficients at a run's nodes become: those of its modes.
pub(crate) struct Modes<'a, T> {
    /// `[mode][node]`.
    pub of_nodes: &'a [T],
    /// The last modes of a block are left out while the sum of their squares is at most this.
    pub negligible: T,
}

/// Σ coefficients[n] xⁿ in sixteen lanes.
#[inline(always)]
fn polynomial<T: GridReal, R: Register<T>>(coefficients: &[f64], x: R) -> R {
    let mut sum = R::load(&Cell::zero());
    for &c in coefficients.iter().rev() {
        sum = sum.product_plus(x, R::load(&Cell([real(c); 2 * LANES])));
    }
    sum
}

/// conj(g_p) g_q exp(2πi δw κ) in sixteen directions: real parts and imaginary parts.
#[inline(always)]
fn kernel_values<T: GridReal, R: Register<T>>(
    gp: &[Cell<T>],
    gq: &[Cell<T>],
    dw: Option<T>,
    bend: &Cell<T>,
    values: &mut [Cell<T>; 2],
) {
    let minus: T = real(-1.0);
    let zero = R::load(&Cell::zero());
    let ((pr, pi), (qr, qi)) = ((R::load(&gp[0]), R::load(&gp[1])), (R::load(&gq[0]), R::load(&gq[1])));
    let (mut re, mut im) = (
        pr.product_plus(qr, pi.product_plus(qi, zero)),
        pr.product_plus(qi, pi.times(minus).product_plus(qr, zero)),
    );
    if let Some(dw) = dw {
        let turns = R::load(bend).times(dw);
        let (one, whole): (T, T) = (real(1.0), T::WHOLE);
        let up = turns.times_plus(one, R::load(&Cell([whole; 2 * LANES])));
        let nearest = up.times_plus(one, R::load(&Cell([minus * whole; 2 * LANES])));
        let t = nearest.times_plus(minus, turns);
        let t2 = t.product_plus(t, zero);
        let cos = polynomial::<T, R>(T::COS, t2);
        let sin = polynomial::<T, R>(T::SIN, t2).product_plus(t, zero);
        let turned = re.product_plus(cos, im.times(minus).product_plus(sin, zero));
        im = re.product_plus(sin, im.product_plus(cos, zero));
        re = turned;
    }
    re.store(&mut values[0]);
    im.store(&mut values[1]);
}

/// Blocks of terms that are summed at once, in registers, at most.
const AT_ONCE: usize = 4;

/// Runs of blocks summed at once, as even as they go.
pub(crate) fn block_runs(blocks: usize) -> impl Iterator<Item = std::ops::Range<usize>> {
    let runs = blocks.div_ceil(AT_ONCE).max(1);
    (0..runs).map(move |run| run * blocks / runs..(run + 1) * blocks / runs)
}

/// Calls a body compiled for a number of things done at once, 1 to 4.
macro_rules! by_number {
    ($body:ident, $register:ty, $number:expr, [$($more:literal),*], ($($arg:expr),*)) => {
        match $number {
            1 => $body::<T, $register, 1, $($more),*>($($arg),*),
            2 => $body::<T, $register, 2, $($more),*>($($arg),*),
            3 => $body::<T, $register, 3, $($more),*>($($arg),*),
            _ => $body::<T, $register, 4, $($more),*>($($arg),*),
        }
    };
}

/// Directions whose values are computed together before they are mixed into terms.
pub(crate) const DIRECTIONS: usize = 2 * LANES;

/// The coefficients of all terms in each mode, `[mode][block]`, and how many modes of each block are kept.
#[inline(always)]
fn coefficients_body<T: GridReal, R: Register<T>>(
    looks: &[Look<T>],
    mixing: &Mixing<T>,
    modes: &Modes<T>,
    out: &mut [Cell<T>],
    kept: &mut [usize],
) {
    let zero = Cell::<T>::zero();
    let blocks = mixing.blocks;
    let pairs = blocks.div_ceil(2);
    let mut values = [[zero; 2]; LANES];
    // pairs of blocks that are summed before the next are: what eight looks come to stays in the first cache
    const AT_ONCE: usize = 8;
    for first in (0..pairs).step_by(AT_ONCE) {
        let end = pairs.min(first + AT_ONCE);
        let mut sums = [[[zero; 2]; AT_ONCE]; LANES];
        let rows = mixing.mix.chunks(DIRECTIONS * pairs);
        for (chunk, (bend, mix)) in mixing.bends.iter().zip(rows).enumerate() {
            for (look, values) in looks.iter().zip(&mut values) {
                let at = 2 * chunk..2 * chunk + 2;
                kernel_values::<T, R>(&look.p[at.clone()], &look.q[at], look.dw, bend, values);
            }
            // kept in memory: a value is then broadcast by the load, instead of shuffled out of a register
            let values = std::hint::black_box(&values);
            for (values, sums) in values[..looks.len()].chunks(2).zip(sums.chunks_mut(2)) {
                for pair in (first..end).step_by(2) {
                    let at = pair - first;
                    match (values.len(), end - pair) {
                        (2, 1) => mix_terms::<T, R, 2, 1>(values, mix, pairs, pair, sums, at),
                        (2, _) => mix_terms::<T, R, 2, 2>(values, mix, pairs, pair, sums, at),
                        (_, 1) => mix_terms::<T, R, 1, 1>(values, mix, pairs, pair, sums, at),
                        _ => mix_terms::<T, R, 1, 2>(values, mix, pairs, pair, sums, at),
                    }
                }
            }
        }
        for (sums, out) in sums.iter().zip(out.chunks_exact_mut(blocks)) {
            for (block, out) in out.iter_mut().enumerate().take(2 * end).skip(2 * first) {
                let [re, im] = &sums[block / 2 - first];
                let start = block % 2 * LANES;
                out[..LANES].copy_from_slice(&re[start..start + LANES]);
                out[LANES..].copy_from_slice(&im[start..start + LANES]);
            }
        }
    }
    for (block, kept) in kept.iter_mut().enumerate() {
        into_modes::<T, R>(modes.of_nodes, looks.len(), blocks, block, out);
        *kept = cut_modes(modes.negligible, looks.len(), blocks, block, out);
    }
}

/// Adds what sixteen directions' values of L looks make of N pairs of blocks of terms.
// loops, not closures: those are not always compiled for the instructions of the function they stand in
#[inline(always)]
fn mix_terms<T: GridReal, R: Register<T>, const L: usize, const N: usize>(
    values: &[[Cell<T>; 2]],
    mix: &[Cell<T>],
    pairs: usize,
    pair: usize,
    out: &mut [[[Cell<T>; 2]; 8]],
    at: usize,
) {
    let Some(values) = values.first_chunk::<L>() else { return };
    let mut sums = [[[R::load(&Cell::zero()); 2]; N]; L];
    for (sums, out) in sums.iter_mut().zip(out.iter()) {
        for (sums, out) in sums.iter_mut().zip(&out[at..at + N]) {
            *sums = [R::load(&out[0]), R::load(&out[1])];
        }
    }
    for (direction, row) in mix.chunks_exact(pairs).enumerate().take(DIRECTIONS) {
        let row = &row[pair..pair + N];
        for (values, sums) in values.iter().zip(&mut sums) {
            let (re, im) = (values[0].0[direction], values[1].0[direction]);
            for (sums, mix) in sums.iter_mut().zip(row) {
                let mix = R::load(mix);
                *sums = [mix.times_plus(re, sums[0]), mix.times_plus(im, sums[1])];
            }
        }
    }
    for (sums, out) in sums.iter().zip(out) {
        for ([re, im], out) in sums.iter().zip(&mut out[at..at + N]) {
            re.store(&mut out[0]);
            im.store(&mut out[1]);
        }
    }
}

/// Turns a block's values at the nodes into coefficients of the modes, in place.
#[inline(always)]
fn into_modes<T: GridReal, R: Register<T>>(
    of_nodes: &[T],
    count: usize,
    blocks: usize,
    block: usize,
    out: &mut [Cell<T>],
) {
    let mut nodes = [Cell::<T>::zero(); LANES];
    for (node, value) in nodes[..count].iter_mut().enumerate() {
        *value = out[node * blocks + block];
    }
    for (mode, weights) in of_nodes.chunks_exact(count).enumerate() {
        let mut sum = R::load(&Cell::zero());
        for (node, &weight) in nodes[..count].iter().zip(weights) {
            sum = R::load(node).times_plus(weight, sum);
        }
        sum.store(&mut out[mode * blocks + block]);
    }
}

/// Sets the last modes of a block to 0 as long as the sum of their squares is negligible; says how many are left.
#[inline(always)]
fn cut_modes<T: GridReal>(negligible: T, count: usize, blocks: usize, block: usize, out: &mut [Cell<T>]) -> usize {
    let mut squares = Cell::<T>::zero();
    for mode in (0..count).rev() {
        let cell = &mut out[mode * blocks + block];
        squares.iter_mut().zip(cell.iter()).for_each(|(sum, &c)| *sum = *sum + c * c);
        let sum = double(squares.iter().fold(T::zero(), |sum, &c| sum + c));
        // a NaN must stay
        if sum.is_nan() || sum > double(negligible) {
            return mode + 1;
        }
        *cell = Cell::zero();
    }
    0
}

#[inline(always)]
fn window_taps<T: GridReal, const FUSED: bool>(window: &PolynomialWindow<T>, f: T, taps: &mut [T; MAX_TAPS]) {
    if FUSED {
        window.taps_fused(f, taps);
    } else {
        window.taps(f, taps);
    }
}

/// The interpolation weights of a sample.
#[inline(always)]
fn profile<T: GridReal, R: Register<T>>(sample: &Sample<T>, with: &Scrap<T>) -> R {
    let powers = &with.times[sample.row as usize];
    let start = sample.channel as usize * with.degrees;
    let cells = &with.profiles[start..start + with.degrees];
    let mut sum = R::load(&cells[0]);
    for (cell, &power) in cells.iter().zip(powers).skip(1) {
        sum = R::load(cell).times_plus(power, sum);
    }
    sum
}

/// Samples whose taps are computed together, before any of them meets the scrap: the two loops then each run at the
/// processor's pace.
const TOGETHER: usize = 32;

#[inline(always)]
fn spread_body<T: GridReal, R: Register<T>, const W: usize, const FUSED: bool>(
    samples: &[Sample<T>],
    with: &Scrap<T>,
    cells: &mut [Cell<T>],
) {
    // a support of 0 stands for any
    let support = if W == 0 { with.window.support() } else { W };
    let mut values = [Cell::<T>::zero(); TOGETHER];
    let mut across = [[T::default(); MAX_TAPS]; TOGETHER];
    let mut down = [[T::default(); MAX_TAPS]; TOGETHER];
    for samples in samples.chunks(TOGETHER) {
        for (i, sample) in samples.iter().enumerate() {
            let mut both = Cell([sample.re; 2 * LANES]);
            both[LANES..].fill(sample.im);
            let zero = R::load(&Cell::zero());
            profile::<T, R>(sample, with).product_plus(R::load(&both), zero).store(&mut values[i]);
            window_taps::<T, FUSED>(with.window, sample.fx, &mut across[i]);
            window_taps::<T, FUSED>(with.window, sample.fy, &mut down[i]);
        }
        // kept in memory: a tap is then broadcast by the load, instead of shuffled out of a register
        let (values, across, down) = std::hint::black_box((&values, &across, &down));
        for (i, sample) in samples.iter().enumerate() {
            let value = R::load(&values[i]);
            let mut start = sample.cell as usize;
            for &tap in &down[i][..support] {
                let line = value.times(tap);
                for (cell, &tap) in cells[start..start + support].iter_mut().zip(&across[i][..support]) {
                    line.times_plus(tap, R::load(cell)).store(cell);
                }
                start += with.width;
            }
        }
    }
}

#[inline(always)]
fn gather_body<T: GridReal, R: Register<T>, const W: usize, const FUSED: bool>(
    samples: &[Sample<T>],
    with: &Scrap<T>,
    cells: &[Cell<T>],
    out: &mut [[f64; 2]],
) {
    let support = if W == 0 { with.window.support() } else { W };
    let zero = Cell::<T>::zero();
    let mut values = [zero; TOGETHER];
    let mut across = [[T::default(); MAX_TAPS]; TOGETHER];
    let mut down = [[T::default(); MAX_TAPS]; TOGETHER];
    for (samples, out) in samples.chunks(TOGETHER).zip(out.chunks_mut(TOGETHER)) {
        for (i, sample) in samples.iter().enumerate() {
            window_taps::<T, FUSED>(with.window, sample.fx, &mut across[i]);
            window_taps::<T, FUSED>(with.window, sample.fy, &mut down[i]);
        }
        let (across, down) = std::hint::black_box((&across, &down));
        for (i, sample) in samples.iter().enumerate() {
            let mut sum = R::load(&zero);
            let mut start = sample.cell as usize;
            for &tap in &down[i][..support] {
                let mut line = R::load(&zero);
                for (cell, &tap) in cells[start..start + support].iter().zip(&across[i][..support]) {
                    line = R::load(cell).times_plus(tap, line);
                }
                sum = line.times_plus(tap, sum);
                start += with.width;
            }
            profile::<T, R>(sample, with).product_plus(sum, R::load(&zero)).store(&mut values[i]);
        }
        for (value, out) in values.iter().zip(out) {
            let (mut re, mut im) = (T::default(), T::default());
            for j in 0..LANES {
                re = re + value[j];
                im = im + value[j + LANES];
            }
            *out = [double(re), double(im)];
        }
    }
}

/// Adds a scrap to the grid: at each cell the sum over modes of what they hold times their coefficients.
#[inline(always)]
fn expand_body<T: GridReal, R: Register<T>>(
    scrap: &[Cell<T>],
    pieces: &[Piece],
    coefficients: &Expansion<T>,
    grid: &mut [Cell<T>],
) {
    let blocks = coefficients.blocks;
    for piece in pieces {
        let from = &scrap[piece.from..piece.from + piece.length];
        let to = &mut grid[piece.to * blocks..(piece.to + piece.length) * blocks];
        // two cells at once: what is loaded of the coefficients serves both
        for (cells, out) in from.chunks(2).zip(to.chunks_mut(2 * blocks)) {
            for run in &coefficients.runs {
                let with = &coefficients.cells[run.cells.clone()];
                if cells.len() == 2 {
                    by_number!(
                        expand_blocks,
                        R,
                        run.blocks.len(),
                        [2],
                        (cells, with, run.blocks.start, blocks, out)
                    );
                } else {
                    by_number!(
                        expand_blocks,
                        R,
                        run.blocks.len(),
                        [1],
                        (cells, with, run.blocks.start, blocks, out)
                    );
                }
            }
        }
    }
}

#[inline(always)]
fn expand_blocks<T: GridReal, R: Register<T>, const N: usize, const C: usize>(
    cells: &[Cell<T>],
    coefficients: &[[Cell<T>; 2]],
    first: usize,
    blocks: usize,
    out: &mut [Cell<T>],
) {
    let Some(cells) = cells.first_chunk::<C>() else { return };
    let mut sums = [[R::load(&Cell::zero()); N]; C];
    for (cell, sums) in sums.iter_mut().enumerate() {
        for (n, sum) in sums.iter_mut().enumerate() {
            *sum = R::load(&out[cell * blocks + first + n]);
        }
    }
    for (mode, coefficients) in coefficients.as_chunks::<N>().0.iter().enumerate().take(LANES) {
        for (n, [plain, turned]) in coefficients.iter().enumerate() {
            let (plain, turned) = (R::load(plain), R::load(turned));
            for (cell, sums) in cells.iter().zip(&mut sums) {
                sums[n] = turned.times_plus(cell.0[mode + LANES], plain.times_plus(cell.0[mode], sums[n]));
            }
        }
    }
    for (cell, sums) in sums.iter().enumerate() {
        for (n, sum) in sums.iter().enumerate() {
            sum.store(&mut out[cell * blocks + first + n]);
        }
    }
}

/// Coefficients c of a run ready for [`expand`].
pub(crate) struct Expansion<T> {
    /// (c, i c): `[mode][block]` of each run of blocks.
    cells: Vec<[Cell<T>; 2]>,
    runs: Vec<BlockRun>,
    /// Blocks of terms.
    blocks: usize,
}

/// Blocks that are summed at once, and where their coefficients lie.
struct BlockRun {
    blocks: std::ops::Range<usize>,
    cells: std::ops::Range<usize>,
}

impl<T: GridReal> Expansion<T> {
    /// For so many blocks, still empty.
    pub(crate) fn new(blocks: usize) -> Self {
        Expansion { cells: Vec::new(), runs: Vec::new(), blocks }
    }

    /// Takes coefficients `[mode][block]`, of which `kept` modes of each block are not 0.
    pub(crate) fn take(&mut self, coefficients: &[Cell<T>], kept: &[usize]) {
        self.cells.clear();
        self.runs.clear();
        for blocks in block_runs(self.blocks) {
            let start = self.cells.len();
            let modes = kept[blocks.clone()].iter().copied().max().unwrap_or(0);
            for mode in coefficients.chunks_exact(self.blocks).take(modes) {
                self.cells.extend(mode[blocks.clone()].iter().map(|c| {
                    let turned = std::array::from_fn(|at| if at < LANES { -c[at + LANES] } else { c[at - LANES] });
                    [*c, Cell(turned)]
                }));
            }
            if modes > 0 {
                self.runs.push(BlockRun { blocks, cells: start..self.cells.len() });
            }
        }
    }
}

/// Coefficients c of a run ready for [`collect`]: `[term]`, (conj c, i conj c), a lane a mode.
pub(crate) struct Collection<T> {
    /// See the type.
    pub cells: Vec<[Cell<T>; 2]>,
}

/// Cells that are collected at once.
const COLLECTED: usize = 4;

/// Makes a scrap of the grid: at each cell and mode the sum over terms of the grid times conjugate coefficients.
#[inline(always)]
fn collect_body<T: GridReal, R: Register<T>>(
    grid: &[Cell<T>],
    pieces: &[Piece],
    coefficients: &Collection<T>,
    scrap: &mut [Cell<T>],
) {
    let blocks = coefficients.cells.len() / LANES;
    for piece in pieces {
        let from = &grid[piece.to * blocks..(piece.to + piece.length) * blocks];
        let to = &mut scrap[piece.from..piece.from + piece.length];
        for (terms, out) in from.chunks(COLLECTED * blocks).zip(to.chunks_mut(COLLECTED)) {
            by_number!(collect_cells, R, out.len(), [], (terms, coefficients, out));
        }
    }
}

#[inline(always)]
fn collect_cells<T: GridReal, R: Register<T>, const C: usize>(
    terms: &[Cell<T>],
    coefficients: &Collection<T>,
    out: &mut [Cell<T>],
) {
    let Some(out) = out.first_chunk_mut::<C>() else { return };
    let blocks = terms.len() / C;
    let mut sums = [R::load(&Cell::zero()); C];
    for (block, coefficients) in coefficients.cells.chunks_exact(LANES).enumerate() {
        for (lane, [plain, turned]) in coefficients.iter().enumerate() {
            let (plain, turned) = (R::load(plain), R::load(turned));
            for (number, sum) in sums.iter_mut().enumerate() {
                let cell = &terms[number * blocks + block];
                *sum = turned.times_plus(cell.0[lane + LANES], plain.times_plus(cell.0[lane], *sum));
            }
        }
    }
    for (sum, out) in sums.iter().zip(out) {
        sum.store(out);
    }
}

/// One visibility's share of the normaliser.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Share<T> {
    /// Where the stations' powers start in the table, in cells.
    pub p: u32,
    /// See `p`.
    pub q: u32,
    /// Weight.
    pub weight: T,
}

#[inline(always)]
fn accumulate_body<T: GridReal, R: Register<T>>(
    shares: &[Share<T>],
    table: &[Cell<T>],
    offset: u32,
    out: &mut [f64; 2 * LANES],
) {
    // short runs in T, their sums in double precision
    for run in shares.chunks(64) {
        let mut sum = R::load(&Cell::zero());
        for share in run {
            let (p, q) = (&table[(share.p + offset) as usize], &table[(share.q + offset) as usize]);
            sum = R::load(p).times(share.weight).product_plus(R::load(q), sum);
        }
        let mut total = Cell::zero();
        sum.store(&mut total);
        for (out, total) in out.iter_mut().zip(total.iter()) {
            *out += double(*total);
        }
    }
}

/// Asks for the cells of a grid that a scrap will meet, so that they are on their way while the scrap is filled.
#[inline]
pub(crate) fn fetch<T>(grid: &[Cell<T>], pieces: &[Piece], blocks: usize) {
    for piece in pieces {
        fetch_soon(&grid[piece.to * blocks..(piece.to + piece.length) * blocks]);
    }
}

/// Asks for memory that will be wanted soon.
#[inline]
pub(crate) fn fetch_soon<T>(wanted: &[T]) {
    #[cfg(target_arch = "x86_64")]
    for start in wanted.chunks((64 / size_of::<T>()).max(1)) {
        // SAFETY: a hint that reads nothing; the address is that of values at hand.
        unsafe { std::arch::x86_64::_mm_prefetch::<{ std::arch::x86_64::_MM_HINT_T1 }>(start.as_ptr().cast()) };
    }
    #[cfg(not(target_arch = "x86_64"))]
    let _ = wanted;
}

/// Which compiled body runs.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
pub enum Instructions {
    /// What every processor of the build's target has.
    Plain,
    /// AVX2 and fused multiply-add.
    Avx2,
    /// AVX-512.
    Avx512,
}

impl Instructions {
    /// The widest this processor has.
    pub fn detect() -> Instructions {
        #[cfg(target_arch = "x86_64")]
        {
            if is_x86_feature_detected!("avx512f")
                && is_x86_feature_detected!("avx512vl")
                && is_x86_feature_detected!("avx512dq")
            {
                return Instructions::Avx512;
            }
            if is_x86_feature_detected!("avx2") && is_x86_feature_detected!("fma") {
                return Instructions::Avx2;
            }
        }
        Instructions::Plain
    }

    /// All that this processor can run.
    pub fn available() -> Vec<Instructions> {
        match Instructions::detect() {
            Instructions::Plain => vec![Instructions::Plain],
            Instructions::Avx2 => vec![Instructions::Plain, Instructions::Avx2],
            Instructions::Avx512 => vec![Instructions::Plain, Instructions::Avx2, Instructions::Avx512],
        }
    }

    /// Name for people.
    pub fn name(self) -> &'static str {
        match self {
            Instructions::Plain => "plain",
            Instructions::Avx2 => "AVX2+FMA",
            Instructions::Avx512 => "AVX-512",
        }
    }
}

/// Calls a body compiled for the window's support; rare supports share one.
macro_rules! by_support {
    ($body:ident, $register:ty, $window:expr, ($($arg:expr),*)) => {
        match $window.support() {
            4 => $body::<T, $register, 4, true>($($arg),*),
            5 => $body::<T, $register, 5, true>($($arg),*),
            6 => $body::<T, $register, 6, true>($($arg),*),
            7 => $body::<T, $register, 7, true>($($arg),*),
            8 => $body::<T, $register, 8, true>($($arg),*),
            9 => $body::<T, $register, 9, true>($($arg),*),
            10 => $body::<T, $register, 10, true>($($arg),*),
            11 => $body::<T, $register, 11, true>($($arg),*),
            12 => $body::<T, $register, 12, true>($($arg),*),
            _ => $body::<T, $register, 0, true>($($arg),*),
        }
    };
}

#[cfg(target_arch = "x86_64")]
mod compiled {
    use super::*;

    macro_rules! for_both {
        ($avx2:ident, $avx512:ident, ($($arg:ident: $type:ty),*), |$register:ident| $body:expr) => {
            #[target_feature(enable = "avx2,fma")]
            pub(super) fn $avx2<T: GridReal>($($arg: $type),*) {
                type $register<T> = <T as GridReal>::Avx2;
                $body
            }

            #[target_feature(enable = "avx512f,avx512vl,avx512dq,avx2,fma")]
            pub(super) fn $avx512<T: GridReal>($($arg: $type),*) {
                type $register<T> = <T as GridReal>::Avx512;
                $body
            }
        };
    }

    for_both!(
        spread_avx2, spread_avx512,
        (samples: &[Sample<T>], with: &Scrap<T>, cells: &mut [Cell<T>]),
        |R| by_support!(spread_body, R<T>, with.window, (samples, with, cells))
    );
    for_both!(
        gather_avx2, gather_avx512,
        (samples: &[Sample<T>], with: &Scrap<T>, cells: &[Cell<T>], out: &mut [[f64; 2]]),
        |R| by_support!(gather_body, R<T>, with.window, (samples, with, cells, out))
    );
    for_both!(
        expand_avx2, expand_avx512,
        (scrap: &[Cell<T>], pieces: &[Piece], coefficients: &Expansion<T>, grid: &mut [Cell<T>]),
        |R| expand_body::<T, R<T>>(scrap, pieces, coefficients, grid)
    );
    for_both!(
        collect_avx2, collect_avx512,
        (grid: &[Cell<T>], pieces: &[Piece], coefficients: &Collection<T>, scrap: &mut [Cell<T>]),
        |R| collect_body::<T, R<T>>(grid, pieces, coefficients, scrap)
    );
    for_both!(
        coefficients_avx2, coefficients_avx512,
        (looks: &[Look<T>], mixing: &Mixing<T>, modes: &Modes<T>, out: &mut [Cell<T>], kept: &mut [usize]),
        |R| coefficients_body::<T, R<T>>(looks, mixing, modes, out, kept)
    );
    for_both!(
        accumulate_avx2, accumulate_avx512,
        (shares: &[Share<T>], table: &[Cell<T>], offset: u32, out: &mut [f64; 16]),
        |R| accumulate_body::<T, R<T>>(shares, table, offset, out)
    );
}

/// Defines a function that runs the body compiled for the processor at hand.
macro_rules! dispatched {
    ($(#[$doc:meta])* $name:ident, $avx2:ident, $avx512:ident, ($($arg:ident: $type:ty),*), $plain:expr) => {
        $(#[$doc])*
        pub(crate) fn $name<T: GridReal>(instructions: Instructions, $($arg: $type),*) {
            match instructions {
                Instructions::Plain => $plain,
                #[cfg(target_arch = "x86_64")]
                // SAFETY: `Instructions` other than Plain come from `detect`, which checked these features.
                Instructions::Avx2 => unsafe { compiled::$avx2($($arg),*) },
                #[cfg(target_arch = "x86_64")]
                // SAFETY: as above.
                Instructions::Avx512 => unsafe { compiled::$avx512($($arg),*) },
                #[cfg(not(target_arch = "x86_64"))]
                _ => $plain,
            }
        }
    };
}

dispatched!(
    /// Adds `samples` to a scrap.
    spread, spread_avx2, spread_avx512,
    (samples: &[Sample<T>], with: &Scrap<T>, cells: &mut [Cell<T>]),
    spread_body::<T, Plain<T>, 0, false>(samples, with, cells)
);
dispatched!(
    /// Reads a scrap at each sample, the transpose of [`spread`]; overwrites `out`.
    gather, gather_avx2, gather_avx512,
    (samples: &[Sample<T>], with: &Scrap<T>, cells: &[Cell<T>], out: &mut [[f64; 2]]),
    gather_body::<T, Plain<T>, 0, false>(samples, with, cells, out)
);
dispatched!(
    /// Adds a scrap to the grid: at each cell the sum over modes of what they hold times their coefficients.
    expand, expand_avx2, expand_avx512,
    (scrap: &[Cell<T>], pieces: &[Piece], coefficients: &Expansion<T>, grid: &mut [Cell<T>]),
    expand_body::<T, Plain<T>>(scrap, pieces, coefficients, grid)
);
dispatched!(
    /// Fills a scrap from the grid, the transpose of [`expand`].
    collect, collect_avx2, collect_avx512,
    (grid: &[Cell<T>], pieces: &[Piece], coefficients: &Collection<T>, scrap: &mut [Cell<T>]),
    collect_body::<T, Plain<T>>(grid, pieces, coefficients, scrap)
);
dispatched!(
    /// The coefficients of all terms in each mode, `[mode][block]`, from looks at the nodes, and how many modes of each block
    /// are kept; the rest are 0.
    coefficients, coefficients_avx2, coefficients_avx512,
    (looks: &[Look<T>], mixing: &Mixing<T>, modes: &Modes<T>, out: &mut [Cell<T>], kept: &mut [usize]),
    coefficients_body::<T, Plain<T>>(looks, mixing, modes, out, kept)
);
dispatched!(
    /// Adds to `out` the sums over `shares` of weight times the product of both stations' sixteen powers.
    accumulate, accumulate_avx2, accumulate_avx512,
    (shares: &[Share<T>], table: &[Cell<T>], offset: u32, out: &mut [f64; 2 * LANES]),
    accumulate_body::<T, Plain<T>>(shares, table, offset, out)
);
