//! A cell of sixteen numbers in vector registers.
//!
//! The types for AVX2 and AVX-512 may only be used inside functions compiled for those instructions (`vector::compiled`),
//! into which everything here is inlined; nothing else can name them through [`Register`] without going through
//! `Instructions::detect`.

#![allow(unsafe_code)]

use super::vector::{Cell, GridReal};

/// Sixteen numbers, held wherever is fastest.
pub(crate) trait Register<T: GridReal>: Copy {
    fn load(cell: &Cell<T>) -> Self;
    fn store(self, cell: &mut Cell<T>);
    /// self · factor
    fn times(self, factor: T) -> Self;
    /// self · factor + add
    fn times_plus(self, factor: T, add: Self) -> Self;
    /// self · other + add, number by number
    fn product_plus(self, other: Self, add: Self) -> Self;
}

/// An array: what any processor has, and what the others must equal.
#[derive(Clone, Copy)]
pub(crate) struct Plain<T>(Cell<T>);

impl<T: GridReal> Register<T> for Plain<T> {
    #[inline(always)]
    fn load(cell: &Cell<T>) -> Self {
        Plain(*cell)
    }

    #[inline(always)]
    fn store(self, cell: &mut Cell<T>) {
        *cell = self.0;
    }

    #[inline(always)]
    fn times(self, factor: T) -> Self {
        Plain(Cell(self.0.0.map(|v| v * factor)))
    }

    #[inline(always)]
    fn times_plus(mut self, factor: T, add: Self) -> Self {
        self.0.iter_mut().zip(add.0.iter()).for_each(|(v, &a)| *v = *v * factor + a);
        self
    }

    #[inline(always)]
    fn product_plus(mut self, other: Self, add: Self) -> Self {
        self.0.iter_mut().zip(other.0.iter()).zip(add.0.iter()).for_each(|((v, &o), &a)| *v = *v * o + a);
        self
    }
}

#[cfg(target_arch = "x86_64")]
pub(crate) use x86::{DoubleAvx2, DoubleAvx512, SingleAvx2, SingleAvx512};

#[cfg(target_arch = "x86_64")]
mod x86 {
    use super::{Cell, Register};
    use std::arch::x86_64::*;

    macro_rules! register {
        ($(#[$doc:meta])* $name:ident, $t:ty, $vector:ty, $count:literal, $width:literal,
         $load:ident, $store:ident, $splat:ident, $mul:ident, $fma:ident) => {
            $(#[$doc])*
            #[derive(Clone, Copy)]
            pub(crate) struct $name([$vector; $count]);

            // SAFETY, for all of these: they are inlined into functions compiled for the instructions (see the module
            // text), and loads and stores stay within the sixteen numbers of a cell.
            impl Register<$t> for $name {
                #[inline(always)]
                fn load(cell: &Cell<$t>) -> Self {
                    let mut out = [unsafe { $load(cell.as_ptr()) }; $count];
                    for (i, out) in out.iter_mut().enumerate().skip(1) {
                        *out = unsafe { $load(cell.as_ptr().add(i * $width)) };
                    }
                    $name(out)
                }

                #[inline(always)]
                fn store(self, cell: &mut Cell<$t>) {
                    for i in 0..$count {
                        unsafe { $store(cell.as_mut_ptr().add(i * $width), self.0[i]) };
                    }
                }

                #[inline(always)]
                fn times(mut self, factor: $t) -> Self {
                    for i in 0..$count {
                        self.0[i] = unsafe { $mul(self.0[i], $splat(factor)) };
                    }
                    self
                }

                #[inline(always)]
                fn times_plus(mut self, factor: $t, add: Self) -> Self {
                    for i in 0..$count {
                        self.0[i] = unsafe { $fma(self.0[i], $splat(factor), add.0[i]) };
                    }
                    self
                }

                #[inline(always)]
                fn product_plus(mut self, other: Self, add: Self) -> Self {
                    for i in 0..$count {
                        self.0[i] = unsafe { $fma(self.0[i], other.0[i], add.0[i]) };
                    }
                    self
                }
            }
        };
    }

    register!(
        /// Sixteen f32 in two AVX2 registers.
        SingleAvx2, f32, __m256, 2, 8,
        _mm256_loadu_ps, _mm256_storeu_ps, _mm256_set1_ps, _mm256_mul_ps, _mm256_fmadd_ps
    );
    register!(
        /// Sixteen f32 in one AVX-512 register.
        SingleAvx512, f32, __m512, 1, 16,
        _mm512_loadu_ps, _mm512_storeu_ps, _mm512_set1_ps, _mm512_mul_ps, _mm512_fmadd_ps
    );
    register!(
        /// Sixteen f64 in four AVX2 registers.
        DoubleAvx2, f64, __m256d, 4, 4,
        _mm256_loadu_pd, _mm256_storeu_pd, _mm256_set1_pd, _mm256_mul_pd, _mm256_fmadd_pd
    );
    register!(
        /// Sixteen f64 in two AVX-512 registers.
        DoubleAvx512, f64, __m512d, 2, 8,
        _mm512_loadu_pd, _mm512_storeu_pd, _mm512_set1_pd, _mm512_mul_pd, _mm512_fmadd_pd
    );
}
