//! The inner loops: spreading visibilities onto interleaved term grids, and reading them back.
//!
//! A cell holds eight terms, eight real parts then eight imaginary parts: 64 bytes in single precision, one vector
//! register of AVX-512 or two of AVX2. The same body is compiled for each instruction set and chosen at run time, since
//! released binaries are built for plain x86-64, where a fused multiply-add is a library call.
//!
//! The sums over cells are written on whole registers ([`super::register`]): left to itself, the compiler vectorises
//! them across cells, with scattered loads, and is ten times slower.
//!
//! `unsafe` here: calls of functions compiled for instructions whose presence was just checked.

#![allow(unsafe_code)]

use super::register::{Plain, Register};

use crate::response::window::{MAX_TAPS, PolynomialWindow, Real};

/// Terms a cell holds.
pub(crate) const LANES: usize = 8;

/// Eight complex numbers: real parts, then imaginary parts.
pub(crate) type Cell<T> = [T; 2 * LANES];

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

/// One visibility on its way to or from the grids.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Sample<T> {
    /// First cell (row · width + column) of its footprint.
    pub cell: u32,
    /// Where its station voltages start in the table, first and second station, in cells.
    pub p: u32,
    /// See `p`.
    pub q: u32,
    /// Fractions, as [`crate::response::window::locate`].
    pub fx: T,
    /// See `fx`.
    pub fy: T,
    /// w less that of the layer, wavelengths.
    pub dw: T,
    /// Weighted visibility, turned to the patch's centre (spreading only).
    pub re: T,
    /// See `re`.
    pub im: T,
}

/// What one block of eight terms needs.
pub(crate) struct Lane<'a, T> {
    /// Station voltages at the terms' directions.
    pub table: &'a [Cell<T>],
    /// Which cell after `p`, `q` this block is.
    pub offset: u32,
    /// Bend of each term's direction, turns per wavelength of w.
    pub bend: &'a [T; LANES],
    /// Whether w matters at all.
    pub bends: bool,
    /// Columns of the grid.
    pub width: usize,
    /// The window.
    pub window: &'a PolynomialWindow<T>,
}

#[inline(always)]
fn fma<T: Real, const FUSED: bool>(a: T, b: T, c: T) -> T {
    if FUSED { a.mul_add(b, c) } else { a * b + c }
}

#[inline(always)]
fn polynomial<T: Real, const FUSED: bool>(coefficients: &[f64], x: &[T; LANES]) -> [T; LANES] {
    let mut sum = [T::default(); LANES];
    for &c in coefficients.iter().rev() {
        let c = <T as Real>::from_f64(c);
        for lane in 0..LANES {
            sum[lane] = fma::<T, FUSED>(sum[lane], x[lane], c);
        }
    }
    sum
}

/// The kernel coefficients conj(g_p) g_q exp(2πi δw κ) at the terms' directions.
#[inline(always)]
fn coefficients<T: GridReal, const FUSED: bool>(sample: &Sample<T>, lane: &Lane<T>) -> Cell<T> {
    let gp = &lane.table[(sample.p + lane.offset) as usize];
    let gq = &lane.table[(sample.q + lane.offset) as usize];
    let mut out = [T::default(); 2 * LANES];
    for j in 0..LANES {
        let (pr, pi, qr, qi) = (gp[j], gp[j + LANES], gq[j], gq[j + LANES]);
        out[j] = fma::<T, FUSED>(pr, qr, pi * qi);
        out[j + LANES] = pr * qi - pi * qr;
    }
    if lane.bends {
        let mut t = [T::default(); LANES];
        let mut t2 = [T::default(); LANES];
        for j in 0..LANES {
            let turns = sample.dw * lane.bend[j];
            t[j] = turns - ((turns + T::WHOLE) - T::WHOLE);
            t2[j] = t[j] * t[j];
        }
        let cos = polynomial::<T, FUSED>(T::COS, &t2);
        let sin = polynomial::<T, FUSED>(T::SIN, &t2);
        for j in 0..LANES {
            let (c, s) = (cos[j], sin[j] * t[j]);
            let (re, im) = (out[j], out[j + LANES]);
            out[j] = re * c - im * s;
            out[j + LANES] = fma::<T, FUSED>(re, s, im * c);
        }
    }
    out
}

#[inline(always)]
fn window_taps<T: GridReal, const FUSED: bool>(window: &PolynomialWindow<T>, f: T, taps: &mut [T; MAX_TAPS]) {
    if FUSED {
        window.taps_fused(f, taps);
    } else {
        window.taps(f, taps);
    }
}

/// Samples whose coefficients and taps are computed together, before any of them meets the grid. The two loops then each
/// run at the processor's pace; sample by sample, every sum on the grid waits for its coefficients.
const TOGETHER: usize = 32;

#[inline(always)]
fn spread_body<T: GridReal, R: Register<T>, const W: usize, const FUSED: bool>(
    samples: &[Sample<T>],
    lane: &Lane<T>,
    grid: &mut [Cell<T>],
) {
    // a support of 0 stands for any
    let support = if W == 0 { lane.window.support() } else { W };
    let mut values = [[T::default(); 2 * LANES]; TOGETHER];
    let mut across = [[T::default(); MAX_TAPS]; TOGETHER];
    let mut down = [[T::default(); MAX_TAPS]; TOGETHER];
    for samples in samples.chunks(TOGETHER) {
        for (i, sample) in samples.iter().enumerate() {
            let m = coefficients::<T, FUSED>(sample, lane);
            for j in 0..LANES {
                values[i][j] = m[j] * sample.re - m[j + LANES] * sample.im;
                values[i][j + LANES] = fma::<T, FUSED>(m[j], sample.im, m[j + LANES] * sample.re);
            }
            window_taps::<T, FUSED>(lane.window, sample.fx, &mut across[i]);
            window_taps::<T, FUSED>(lane.window, sample.fy, &mut down[i]);
        }
        // kept in memory: a tap is then broadcast by the load, instead of shuffled out of a register
        let (values, across, down) = std::hint::black_box((&values, &across, &down));
        for (i, sample) in samples.iter().enumerate() {
            let value = R::load(&values[i]);
            let mut start = sample.cell as usize;
            for &tap in &down[i][..support] {
                let line = value.times(tap);
                for (cell, &tap) in grid[start..start + support].iter_mut().zip(&across[i][..support]) {
                    line.times_plus(tap, R::load(cell)).store(cell);
                }
                start += lane.width;
            }
        }
    }
}

#[inline(always)]
fn gather_body<T: GridReal, R: Register<T>, const W: usize, const FUSED: bool>(
    samples: &[Sample<T>],
    lane: &Lane<T>,
    grid: &[Cell<T>],
    out: &mut [[f64; 2]],
) {
    let support = if W == 0 { lane.window.support() } else { W };
    let zero = [T::default(); 2 * LANES];
    let mut values = [zero; TOGETHER];
    let mut across = [[T::default(); MAX_TAPS]; TOGETHER];
    let mut down = [[T::default(); MAX_TAPS]; TOGETHER];
    for (samples, out) in samples.chunks(TOGETHER).zip(out.chunks_mut(TOGETHER)) {
        for (i, sample) in samples.iter().enumerate() {
            window_taps::<T, FUSED>(lane.window, sample.fx, &mut across[i]);
            window_taps::<T, FUSED>(lane.window, sample.fy, &mut down[i]);
        }
        let (across, down) = std::hint::black_box((&across, &down));
        for (i, sample) in samples.iter().enumerate() {
            let mut sum = R::load(&zero);
            let mut start = sample.cell as usize;
            for &tap in &down[i][..support] {
                let mut line = R::load(&zero);
                for (cell, &tap) in grid[start..start + support].iter().zip(&across[i][..support]) {
                    line = R::load(cell).times_plus(tap, line);
                }
                sum = line.times_plus(tap, sum);
                start += lane.width;
            }
            sum.store(&mut values[i]);
        }
        for ((sample, value), out) in samples.iter().zip(&values).zip(out) {
            let m = coefficients::<T, FUSED>(sample, lane);
            // Σ conj(m) · value
            let (mut re, mut im) = (0.0, 0.0);
            for j in 0..LANES {
                let (mr, mi, vr, vi) =
                    (double(m[j]), double(m[j + LANES]), double(value[j]), double(value[j + LANES]));
                re += mr * vr + mi * vi;
                im += mr * vi - mi * vr;
            }
            out[0] += re;
            out[1] += im;
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
        let mut sum = R::load(&[T::default(); 2 * LANES]);
        for share in run {
            let (p, q) = (&table[(share.p + offset) as usize], &table[(share.q + offset) as usize]);
            sum = R::load(p).times(share.weight).product_plus(R::load(q), sum);
        }
        let mut total = [T::default(); 2 * LANES];
        sum.store(&mut total);
        for (out, total) in out.iter_mut().zip(&total) {
            *out += double(*total);
        }
    }
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

    #[target_feature(enable = "avx2,fma")]
    pub(super) fn spread_avx2<T: GridReal>(samples: &[Sample<T>], lane: &Lane<T>, grid: &mut [Cell<T>]) {
        by_support!(spread_body, T::Avx2, lane.window, (samples, lane, grid))
    }

    #[target_feature(enable = "avx512f,avx512vl,avx512dq,avx2,fma")]
    pub(super) fn spread_avx512<T: GridReal>(samples: &[Sample<T>], lane: &Lane<T>, grid: &mut [Cell<T>]) {
        by_support!(spread_body, T::Avx512, lane.window, (samples, lane, grid))
    }

    #[target_feature(enable = "avx2,fma")]
    pub(super) fn accumulate_avx2<T: GridReal>(
        shares: &[Share<T>],
        table: &[Cell<T>],
        offset: u32,
        out: &mut [f64; 16],
    ) {
        accumulate_body::<T, T::Avx2>(shares, table, offset, out);
    }

    #[target_feature(enable = "avx512f,avx512vl,avx512dq,avx2,fma")]
    pub(super) fn accumulate_avx512<T: GridReal>(
        shares: &[Share<T>],
        table: &[Cell<T>],
        offset: u32,
        out: &mut [f64; 16],
    ) {
        accumulate_body::<T, T::Avx512>(shares, table, offset, out);
    }

    #[target_feature(enable = "avx2,fma")]
    pub(super) fn gather_avx2<T: GridReal>(
        samples: &[Sample<T>],
        lane: &Lane<T>,
        grid: &[Cell<T>],
        out: &mut [[f64; 2]],
    ) {
        by_support!(gather_body, T::Avx2, lane.window, (samples, lane, grid, out))
    }

    #[target_feature(enable = "avx512f,avx512vl,avx512dq,avx2,fma")]
    pub(super) fn gather_avx512<T: GridReal>(
        samples: &[Sample<T>],
        lane: &Lane<T>,
        grid: &[Cell<T>],
        out: &mut [[f64; 2]],
    ) {
        by_support!(gather_body, T::Avx512, lane.window, (samples, lane, grid, out))
    }
}

/// Adds `samples` times their kernel coefficients to the grid of one block of terms.
pub(crate) fn spread<T: GridReal>(with: Instructions, samples: &[Sample<T>], lane: &Lane<T>, grid: &mut [Cell<T>]) {
    match with {
        Instructions::Plain => spread_body::<T, Plain<T>, 0, false>(samples, lane, grid),
        #[cfg(target_arch = "x86_64")]
        // SAFETY: `Instructions` other than Plain come from `detect`, which checked these features.
        Instructions::Avx2 => unsafe { compiled::spread_avx2(samples, lane, grid) },
        #[cfg(target_arch = "x86_64")]
        // SAFETY: as above.
        Instructions::Avx512 => unsafe { compiled::spread_avx512(samples, lane, grid) },
        #[cfg(not(target_arch = "x86_64"))]
        _ => spread_body::<T, Plain<T>, 0, false>(samples, lane, grid),
    }
}

/// Adds to `out` the sum over one block of terms of the grid at each sample times its conjugate kernel coefficients.
pub(crate) fn gather<T: GridReal>(
    with: Instructions,
    samples: &[Sample<T>],
    lane: &Lane<T>,
    grid: &[Cell<T>],
    out: &mut [[f64; 2]],
) {
    match with {
        Instructions::Plain => gather_body::<T, Plain<T>, 0, false>(samples, lane, grid, out),
        #[cfg(target_arch = "x86_64")]
        // SAFETY: `Instructions` other than Plain come from `detect`, which checked these features.
        Instructions::Avx2 => unsafe { compiled::gather_avx2(samples, lane, grid, out) },
        #[cfg(target_arch = "x86_64")]
        // SAFETY: as above.
        Instructions::Avx512 => unsafe { compiled::gather_avx512(samples, lane, grid, out) },
        #[cfg(not(target_arch = "x86_64"))]
        _ => gather_body::<T, Plain<T>, 0, false>(samples, lane, grid, out),
    }
}

/// Adds to `out` the sums over `shares` of weight times the product of both stations' sixteen powers.
pub(crate) fn accumulate<T: GridReal>(
    with: Instructions,
    shares: &[Share<T>],
    table: &[Cell<T>],
    offset: u32,
    out: &mut [f64; 2 * LANES],
) {
    match with {
        Instructions::Plain => accumulate_body::<T, Plain<T>>(shares, table, offset, out),
        #[cfg(target_arch = "x86_64")]
        // SAFETY: `Instructions` other than Plain come from `detect`, which checked these features.
        Instructions::Avx2 => unsafe { compiled::accumulate_avx2(shares, table, offset, out) },
        #[cfg(target_arch = "x86_64")]
        // SAFETY: as above.
        Instructions::Avx512 => unsafe { compiled::accumulate_avx512(shares, table, offset, out) },
        #[cfg(not(target_arch = "x86_64"))]
        _ => accumulate_body::<T, Plain<T>>(shares, table, offset, out),
    }
}
