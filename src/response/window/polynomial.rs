//! Any window, evaluated fast: all its taps at once, by polynomials in the fractional position.

use super::{Window, WindowError};
use std::f64::consts::PI;
use std::fmt::Debug;
use std::ops::{Add, Mul, Sub};

/// Largest support of any window here.
pub const MAX_TAPS: usize = 16;

/// Cells a block of coefficients is padded to.
const LANES: usize = 8;

/// Largest polynomial degree tried.
const MAX_DEGREE: usize = 40;

/// The number types a window is evaluated in: `f32` and `f64`.
pub trait Real:
    Copy + Debug + Default + Send + Sync + Add<Output = Self> + Mul<Output = Self> + Sub<Output = Self> + 'static
{
    /// 1.
    const ONE: Self;

    /// The nearest number of this type.
    fn from_f64(value: f64) -> Self;

    /// Exactly, as `f64`.
    fn to_f64(self) -> f64;

    /// self · a + b with one rounding. A library call unless the calling function is compiled for a processor that has the
    /// instruction: use it only there.
    fn mul_add(self, a: Self, b: Self) -> Self;
}

macro_rules! real {
    ($t:ty) => {
        impl Real for $t {
            const ONE: Self = 1.0;

            fn from_f64(value: f64) -> Self {
                value as $t
            }

            fn to_f64(self) -> f64 {
                self.into()
            }

            #[inline(always)]
            fn mul_add(self, a: Self, b: Self) -> Self {
                <$t>::mul_add(self, a, b)
            }
        }
    };
}
real!(f32);
real!(f64);

/// First cell and fraction f in [0, 1) of a position in cells: the W cells `first ..` lie at `d = i − W/2 + f`.
#[inline(always)]
pub fn locate(position: f64, support: usize) -> (i64, f64) {
    let start = position - 0.5 * support as f64;
    // the smallest whole number not below, without the library call that `ceil` is on plain x86-64
    let cut = start as i64;
    let first = if (cut as f64) < start { cut + 1 } else { cut };
    (first, first as f64 - start)
}

/// A window as one polynomial a tap.
///
/// Coefficients lie tap-fastest, padded with zeros to 8 or 16 taps, so that one Horner step is one or two vector operations
/// over all taps. They are those of Chebyshev interpolation, in t = 2f − 1.
#[derive(Debug, Clone)]
pub struct PolynomialWindow<T> {
    support: usize,
    /// `[block of 8 taps][power of t, highest first]`.
    blocks: Vec<Vec<[T; LANES]>>,
    error: f64,
}

impl<T: Real> PolynomialWindow<T> {
    /// Follows `window` with the lowest degree whose largest error is at most `bound` (the window is 1 at its centre).
    ///
    /// # Errors
    /// When the support is not from 1 to 16, `bound` is not positive, or no degree up to 40 is good enough.
    pub fn new(window: &dyn Window, bound: f64) -> Result<Self, WindowError> {
        WindowError::check_support(window.support())?;
        WindowError::unless(bound > 0.0, "bound", bound, "a positive error")?;
        let mut best: Option<Self> = None;
        for degree in 0..=MAX_DEGREE {
            let fit = Self::of_degree(window, degree);
            if fit.error <= bound {
                return Ok(fit);
            }
            if best.as_ref().is_none_or(|best| fit.error < best.error) {
                best = Some(fit);
            }
        }
        let reached = best.map_or(f64::NAN, |fit| fit.error);
        Err(WindowError::Fit { window: window.name(), degree: MAX_DEGREE, asked: bound, reached })
    }

    fn of_degree(window: &dyn Window, degree: usize) -> Self {
        let support = window.support();
        let mut blocks = vec![vec![[T::default(); LANES]; degree + 1]; support.div_ceil(LANES)];
        for tap in 0..support {
            let value = |t: f64| window.value(tap as f64 - 0.5 * support as f64 + 0.5 * (t + 1.0));
            for (power, coefficient) in interpolate(value, degree).into_iter().enumerate() {
                blocks[tap / LANES][degree - power][tap % LANES] = T::from_f64(coefficient);
            }
        }
        let mut fit = PolynomialWindow { support, blocks, error: 0.0 };
        fit.error = fit.measure(window);
        fit
    }

    /// Largest |polynomial − window|, in the arithmetic of `T`, at 257 fractions a tap.
    fn measure(&self, window: &dyn Window) -> f64 {
        let mut worst = 0.0_f64;
        let mut taps = [T::default(); MAX_TAPS];
        for step in 0..=256 {
            // at f = 1 the last tap stands on the window's edge; positions never reach it
            let f = T::from_f64((f64::from(step) / 256.0).min(1.0 - 1e-7));
            self.taps(f, &mut taps);
            for (tap, got) in taps[..self.support].iter().enumerate() {
                let want = window.value(tap as f64 - 0.5 * self.support as f64 + f.to_f64());
                worst = worst.max((got.to_f64() - want).abs());
            }
        }
        worst
    }

    /// The window at the W taps of fraction `f` (see [`locate`]) in `out[..W]`; the rest of `out` up to the next
    /// multiple of 8 is 0, anything beyond is left alone.
    #[inline(always)]
    pub fn taps(&self, f: T, out: &mut [T; MAX_TAPS]) {
        self.evaluate::<false>(f, out);
    }

    /// As [`PolynomialWindow::taps`] with fused multiply-adds: for callers compiled for processors that have them.
    #[inline(always)]
    pub fn taps_fused(&self, f: T, out: &mut [T; MAX_TAPS]) {
        self.evaluate::<true>(f, out);
    }

    #[inline(always)]
    fn evaluate<const FUSED: bool>(&self, f: T, out: &mut [T; MAX_TAPS]) {
        let t = f + f - T::ONE;
        for (block, out) in self.blocks.iter().zip(out.chunks_exact_mut(LANES)) {
            let mut sum = [T::default(); LANES];
            for row in block {
                for (sum, &coefficient) in sum.iter_mut().zip(row) {
                    *sum = if FUSED { sum.mul_add(t, coefficient) } else { *sum * t + coefficient };
                }
            }
            out.copy_from_slice(&sum);
        }
    }

    /// Support W in cells.
    pub fn support(&self) -> usize {
        self.support
    }

    /// Degree of the polynomials.
    pub fn degree(&self) -> usize {
        self.blocks[0].len() - 1
    }

    /// Largest error, measured when it was made, relative to the window's centre.
    pub fn error(&self) -> f64 {
        self.error
    }
}

/// Coefficients of 1, t, t², … of the polynomial through `value` at the Chebyshev nodes of [−1, 1].
fn interpolate(value: impl Fn(f64) -> f64, degree: usize) -> Vec<f64> {
    let count = degree + 1;
    let angle = |node: usize| PI * (node as f64 + 0.5) / count as f64;
    let samples: Vec<f64> = (0..count).map(|node| value(angle(node).cos())).collect();
    let mut result = vec![0.0; count];
    // monomial coefficients of T_{k−1} and T_k
    let (mut before, mut here) = (vec![0.0; count], vec![0.0; count]);
    here[0] = 1.0;
    for k in 0..count {
        let sum: f64 = samples.iter().enumerate().map(|(node, s)| s * (k as f64 * angle(node)).cos()).sum();
        let coefficient = sum * if k == 0 { 1.0 } else { 2.0 } / count as f64;
        for (result, t) in result.iter_mut().zip(&here) {
            *result += coefficient * t;
        }
        // T_{k+1} = 2 t T_k − T_{k−1}; T_1 = t
        let factor = if k == 0 { 1.0 } else { 2.0 };
        let next: Vec<f64> =
            (0..count).map(|i| if i == 0 { 0.0 } else { factor * here[i - 1] } - before[i]).collect();
        before = if k == 0 { here } else { std::mem::take(&mut here) };
        here = next;
    }
    result
}

#[cfg(test)]
mod tests {
    use super::super::{KaiserBessel, Nearest, Spheroidal};
    use super::*;
    use rand::{Rng, SeedableRng};

    fn check<T: Real>(window: &dyn Window, bound: f64) {
        let fit = PolynomialWindow::<T>::new(window, bound).unwrap();
        assert!(fit.error() <= bound);
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(7);
        let (mut taps, mut fused) = ([T::from_f64(9.0); MAX_TAPS], [T::from_f64(9.0); MAX_TAPS]);
        for _ in 0..2000 {
            let position = random.random_range(-50.0..50.0);
            let (first, f) = locate(position, fit.support());
            // the fraction as the arithmetic has it: what rounding the position costs is not the fit's
            let f = T::from_f64(f.min(1.0 - 1e-7));
            fit.taps(f, &mut taps);
            fit.taps_fused(f, &mut fused);
            for tap in 0..fit.support() {
                let d = tap as f64 - 0.5 * fit.support() as f64 + f.to_f64();
                assert!((d - ((first + tap as i64) as f64 - position)).abs() <= 2e-7);
                let want = window.value(d);
                // random positions may fall a little beyond the measured grid's worst
                for got in [taps[tap], fused[tap]] {
                    let error = (got.to_f64() - want).abs();
                    assert!(
                        error <= 1.1 * bound,
                        "{window:?}: tap {tap}, f = {f:?}: error {error:e} over {bound:e}"
                    );
                }
            }
        }
    }

    #[test]
    fn follows_every_support_in_both_precisions() {
        for support in 2..=16 {
            let kaiser = KaiserBessel::new(support, 2.3 * support as f64).unwrap();
            let prolate = Spheroidal::new(support, 1).unwrap();
            for window in [&kaiser as &dyn Window, &prolate] {
                for bound in [1e-3, 1e-6] {
                    check::<f32>(window, bound);
                }
                for bound in [1e-4, 1e-8, 1e-12] {
                    check::<f64>(window, bound);
                }
            }
        }
        check::<f32>(&Nearest, 1e-7);
    }

    #[test]
    fn padding_taps_are_zero_and_the_rest_is_left_alone() {
        let fit = PolynomialWindow::<f64>::new(&KaiserBessel::new(5, 11.0).unwrap(), 1e-6).unwrap();
        let mut taps = [9.0; MAX_TAPS];
        fit.taps(0.3, &mut taps);
        assert!(taps[5..8].iter().all(|&v| v == 0.0) && taps[8..].iter().all(|&v| v == 9.0));
    }

    #[test]
    fn degree_grows_with_the_digits_asked_for() {
        let window = KaiserBessel::new(7, 16.0).unwrap();
        let degree = |bound| PolynomialWindow::<f64>::new(&window, bound).unwrap().degree();
        assert!(degree(1e-3) < degree(1e-6) && degree(1e-6) < degree(1e-12));
    }

    #[test]
    fn says_when_single_precision_cannot_follow() {
        let window = KaiserBessel::new(7, 16.0).unwrap();
        let refused = PolynomialWindow::<f32>::new(&window, 1e-12).unwrap_err();
        assert!(
            matches!(refused, WindowError::Fit { reached, .. } if reached > 1e-9 && reached < 1e-6),
            "{refused}"
        );
        assert!(PolynomialWindow::<f32>::new(&window, f64::NAN).is_err());
    }

    #[test]
    fn located_cells_surround_the_position() {
        for support in [1, 2, 3, 6, 7] {
            for position in [0.0, 0.25, 0.5, -0.5, 0.999, -3.75, 12.0] {
                let (first, f) = locate(position, support);
                assert!((0.0..1.0).contains(&f));
                let half = support as f64 / 2.0;
                let (left, right) = (first as f64 - position, first as f64 + support as f64 - 1.0 - position);
                assert!(left >= -half && right < half, "W = {support}, x = {position}: {left} to {right}");
            }
        }
    }
}
