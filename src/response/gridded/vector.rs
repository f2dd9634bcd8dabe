//! The inner loops: visibilities onto scraps, scraps onto the grid of all terms, and back.
//!
//! A cell holds eight terms (or nodes, on a scrap): eight real parts then eight imaginary parts: 64 bytes in single precision, one vector
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

/// A small part of the grid with at most eight numbers a cell, one a node: visibilities that are close in u, v meet here,
/// and only what they sum to meets the many terms of the grid.
pub(crate) struct Scrap<'a, T> {
    /// How much of a visibility each node gets, for each power of time: `[channel][power]`, every weight twice.
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
    /// Station voltages, first and second station, one cell for eight directions.
    pub p: &'a [Cell<T>],
    /// See `p`.
    pub q: &'a [Cell<T>],
    /// w less that of the layer, wavelengths; `None` where w does not matter.
    pub dw: Option<T>,
}

/// What makes kernel coefficients of looks.
pub(crate) struct Mixing<'a, T> {
    /// Bend of each direction, turns per wavelength of w.
    pub bends: &'a [[T; LANES]],
    /// `[direction][block of terms]`: what each direction's value adds to each term, twice over.
    pub mix: &'a [Cell<T>],
    /// Blocks of terms.
    pub blocks: usize,
}

#[inline(always)]
fn fma<T: Real, const FUSED: bool>(a: T, b: T, c: T) -> T {
    if FUSED { a.mul_add(b, c) } else { a * b + c }
}

/// Half a cell: what the compiler makes one vector of.
type Half<T> = [T; LANES];

#[inline(always)]
fn halves<T: Copy>(cell: &Cell<T>) -> (Half<T>, Half<T>) {
    (std::array::from_fn(|j| cell.0[j]), std::array::from_fn(|j| cell.0[j + LANES]))
}

#[inline(always)]
fn each<T: Copy + Default>(a: &Half<T>, b: &Half<T>, f: impl Fn(T, T) -> T) -> Half<T> {
    let mut out = [T::default(); LANES];
    for j in 0..LANES {
        out[j] = f(a[j], b[j]);
    }
    out
}

#[inline(always)]
fn plus_product<T: GridReal, const FUSED: bool>(a: &Half<T>, b: &Half<T>, c: &Half<T>) -> Half<T> {
    let mut out = [T::default(); LANES];
    for j in 0..LANES {
        out[j] = fma::<T, FUSED>(a[j], b[j], c[j]);
    }
    out
}

#[inline(always)]
fn polynomial<T: GridReal, const FUSED: bool>(coefficients: &[f64], x: &Half<T>) -> Half<T> {
    let mut sum = [T::default(); LANES];
    for &c in coefficients.iter().rev() {
        sum = plus_product::<T, FUSED>(&sum, x, &[<T as Real>::from_f64(c); LANES]);
    }
    sum
}

/// conj(g_p) g_q exp(2πi δw κ) in eight directions.
#[inline(always)]
fn kernel_values<T: GridReal, const FUSED: bool>(
    gp: &Cell<T>,
    gq: &Cell<T>,
    dw: Option<T>,
    bend: &Half<T>,
) -> (Half<T>, Half<T>) {
    let ((pr, pi), (qr, qi)) = (halves(gp), halves(gq));
    let re = plus_product::<T, FUSED>(&pr, &qr, &each(&pi, &qi, |a, b| a * b));
    let im = each(&each(&pr, &qi, |a, b| a * b), &each(&pi, &qr, |a, b| a * b), |a, b| a - b);
    let Some(dw) = dw else { return (re, im) };
    let turns = each(bend, &[dw; LANES], |bend, dw| bend * dw);
    let t = each(&turns, &turns, |turns, _| turns - ((turns + T::WHOLE) - T::WHOLE));
    let t2 = each(&t, &t, |a, b| a * b);
    let cos = polynomial::<T, FUSED>(T::COS, &t2);
    let sin = each(&polynomial::<T, FUSED>(T::SIN, &t2), &t, |a, b| a * b);
    let turned_re = each(&each(&re, &cos, |a, b| a * b), &each(&im, &sin, |a, b| a * b), |a, b| a - b);
    (turned_re, plus_product::<T, FUSED>(&re, &sin, &each(&im, &cos, |a, b| a * b)))
}

/// Blocks of terms that are summed at once, in registers, at most.
const AT_ONCE: usize = 6;

/// Runs of blocks summed at once, as even as they go: one block alone waits for itself.
pub(crate) fn block_runs(blocks: usize) -> impl Iterator<Item = std::ops::Range<usize>> {
    let runs = blocks.div_ceil(AT_ONCE).max(1);
    (0..runs).map(move |run| run * blocks / runs..(run + 1) * blocks / runs)
}

/// Calls a body compiled for the number of blocks in a run.
macro_rules! by_blocks {
    ($body:ident, $register:ty, $run:expr, ($($arg:expr),*)) => {
        match $run.len() {
            1 => $body::<T, $register, 1>($($arg),*),
            2 => $body::<T, $register, 2>($($arg),*),
            3 => $body::<T, $register, 3>($($arg),*),
            4 => $body::<T, $register, 4>($($arg),*),
            5 => $body::<T, $register, 5>($($arg),*),
            _ => $body::<T, $register, 6>($($arg),*),
        }
    };
}

/// Directions whose values are computed together before they are mixed into terms.
const DIRECTIONS: usize = 8 * LANES;

/// The coefficients of all terms for each look, `[look][block]`.
#[inline(always)]
fn coefficients_body<T: GridReal, R: Register<T>, const FUSED: bool>(
    looks: &[Look<T>],
    mixing: &Mixing<T>,
    out: &mut [Cell<T>],
) {
    let zero = Cell::<T>::zero();
    let mut values = [zero; DIRECTIONS];
    for (look, out) in looks.iter().zip(out.chunks_exact_mut(mixing.blocks)) {
        out.fill(zero);
        let chunks = look.p.chunks(DIRECTIONS / LANES).zip(look.q.chunks(DIRECTIONS / LANES));
        let bends = mixing.bends.chunks(DIRECTIONS / LANES);
        let mix = mixing.mix.chunks(DIRECTIONS * mixing.blocks);
        for (((p, q), bends), mix) in chunks.zip(bends).zip(mix) {
            for (block, ((gp, gq), bend)) in p.iter().zip(q).zip(bends).enumerate() {
                let (re, im) = kernel_values::<T, FUSED>(gp, gq, look.dw, bend);
                for (lane, value) in values[block * LANES..(block + 1) * LANES].iter_mut().enumerate() {
                    value[..LANES].fill(re[lane]);
                    value[LANES..].fill(im[lane]);
                }
            }
            for run in block_runs(mixing.blocks) {
                by_blocks!(mix_blocks, R, run, (&values, mix, mixing.blocks, run.start, out));
            }
        }
    }
}

#[inline(always)]
fn mix_blocks<T: GridReal, R: Register<T>, const N: usize>(
    values: &[Cell<T>],
    mix: &[Cell<T>],
    blocks: usize,
    first: usize,
    out: &mut [Cell<T>],
) {
    let out = &mut out[first..first + N];
    let mut sums: [R; N] = std::array::from_fn(|n| R::load(&out[n]));
    for (value, row) in values.iter().zip(mix.chunks_exact(blocks)) {
        let value = R::load(value);
        for (sum, mix) in sums.iter_mut().zip(&row[first..first + N]) {
            *sum = value.product_plus(R::load(mix), *sum);
        }
    }
    for (sum, out) in sums.iter().zip(out) {
        sum.store(out);
    }
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

/// Adds a scrap to the grid: at each cell the sum over nodes of what they hold times their coefficients.
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
        for (cell, out) in from.iter().zip(to.chunks_exact_mut(blocks)) {
            for run in block_runs(blocks) {
                by_blocks!(expand_blocks, R, run, (cell, coefficients, run.start, out));
            }
        }
    }
}

#[inline(always)]
fn expand_blocks<T: GridReal, R: Register<T>, const N: usize>(
    cell: &Cell<T>,
    coefficients: &Expansion<T>,
    first: usize,
    out: &mut [Cell<T>],
) {
    let Some(out) = out[first..].first_chunk_mut::<N>() else { return };
    // `first` blocks of all nodes lie before these
    let nodes = coefficients.cells[first * coefficients.nodes..].as_chunks::<N>().0;
    let mut sums: [R; N] = std::array::from_fn(|n| R::load(&out[n]));
    let mut others: [R; N] = [R::load(&Cell::zero()); N];
    for ((node, &re), &im) in nodes[..coefficients.nodes].iter().zip(&cell.0[..LANES]).zip(&cell.0[LANES..]) {
        for n in 0..N {
            sums[n] = R::load(&node[n][0]).times_plus(re, sums[n]);
            others[n] = R::load(&node[n][1]).times_plus(im, others[n]);
        }
    }
    for n in 0..N {
        sums[n].times_plus(<T as Real>::from_f64(1.0), others[n]).store(&mut out[n]);
    }
}

/// Coefficients c of a run ready for [`expand`]: (c, i c), `[node][block]` for each of [`block_runs`].
pub(crate) struct Expansion<T> {
    /// See the type.
    pub cells: Vec<[Cell<T>; 2]>,
    /// Blocks of terms.
    pub blocks: usize,
    /// Nodes.
    pub nodes: usize,
}

impl<T: GridReal> Expansion<T> {
    /// For so many blocks, still empty.
    pub(crate) fn new(blocks: usize) -> Self {
        Expansion { cells: Vec::new(), blocks, nodes: 0 }
    }

    /// Takes coefficients `[node][block]`.
    pub(crate) fn take(&mut self, coefficients: &[Cell<T>]) {
        self.nodes = coefficients.len() / self.blocks;
        self.cells.clear();
        for run in block_runs(self.blocks) {
            for node in coefficients.chunks_exact(self.blocks) {
                self.cells.extend(node[run.clone()].iter().map(|c| {
                    let turned = std::array::from_fn(|at| if at < LANES { -c[at + LANES] } else { c[at - LANES] });
                    [*c, Cell(turned)]
                }));
            }
        }
    }
}

/// Coefficients c of a run ready for [`collect`]: `[term]`, (conj c, i conj c), a lane a node.
pub(crate) struct Collection<T> {
    /// See the type.
    pub cells: Vec<[Cell<T>; 2]>,
}

/// Makes a scrap of the grid: at each cell and node the sum over terms of the grid times conjugate coefficients.
#[inline(always)]
fn collect_body<T: GridReal, R: Register<T>>(
    grid: &[Cell<T>],
    pieces: &[Piece],
    coefficients: &Collection<T>,
    scrap: &mut [Cell<T>],
) {
    let blocks = coefficients.cells.len() / LANES;
    let zero = R::load(&Cell::zero());
    for piece in pieces {
        let from = &grid[piece.to * blocks..(piece.to + piece.length) * blocks];
        let to = &mut scrap[piece.from..piece.from + piece.length];
        for (terms, out) in from.chunks_exact(blocks).zip(to) {
            // several sums side by side: each alone would wait for itself
            let mut sums = [zero; 4];
            for (cell, coefficients) in terms.iter().zip(coefficients.cells.chunks_exact(LANES)) {
                for (lane, pair) in coefficients.iter().enumerate() {
                    let sum = &mut sums[lane % 4];
                    *sum = R::load(&pair[1])
                        .times_plus(cell[lane + LANES], R::load(&pair[0]).times_plus(cell[lane], *sum));
                }
            }
            let one = <T as Real>::from_f64(1.0);
            sums[0].times_plus(one, sums[1]).times_plus(one, sums[2].times_plus(one, sums[3])).store(out);
        }
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
    #[cfg(target_arch = "x86_64")]
    for piece in pieces {
        let cells = &grid[piece.to * blocks..(piece.to + piece.length) * blocks];
        for cell in cells {
            // SAFETY: a hint that reads nothing; the address is that of a cell at hand.
            unsafe {
                std::arch::x86_64::_mm_prefetch::<{ std::arch::x86_64::_MM_HINT_T1 }>(cell.0.as_ptr().cast())
            };
        }
    }
    #[cfg(not(target_arch = "x86_64"))]
    let _ = (grid, pieces, blocks);
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
        (looks: &[Look<T>], mixing: &Mixing<T>, out: &mut [Cell<T>]),
        |R| coefficients_body::<T, R<T>, true>(looks, mixing, out)
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
    /// Adds a scrap to the grid: at each cell the sum over nodes of what they hold times their coefficients.
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
    /// The coefficients of all terms for each look, `[look][block]`.
    coefficients, coefficients_avx2, coefficients_avx512,
    (looks: &[Look<T>], mixing: &Mixing<T>, out: &mut [Cell<T>]),
    coefficients_body::<T, Plain<T>, false>(looks, mixing, out)
);
dispatched!(
    /// Adds to `out` the sums over `shares` of weight times the product of both stations' sixteen powers.
    accumulate, accumulate_avx2, accumulate_avx512,
    (shares: &[Share<T>], table: &[Cell<T>], offset: u32, out: &mut [f64; 2 * LANES]),
    accumulate_body::<T, Plain<T>>(shares, table, offset, out)
);
