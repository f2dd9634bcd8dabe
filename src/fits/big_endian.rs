//! Numbers as FITS stores them: big-endian, of six kinds.

/// The number kinds of BITPIX (FITS Standard 4.0, table 8).
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum NumberKind {
    /// Unsigned bytes, BITPIX 8.
    U8,
    /// 16-bit integers.
    I16,
    /// 32-bit integers.
    I32,
    /// 64-bit integers.
    I64,
    /// 32-bit IEEE floats, BITPIX −32.
    F32,
    /// 64-bit IEEE floats, BITPIX −64.
    F64,
}

impl NumberKind {
    /// From BITPIX.
    pub fn from_bitpix(bitpix: i64) -> Option<NumberKind> {
        Some(match bitpix {
            8 => NumberKind::U8,
            16 => NumberKind::I16,
            32 => NumberKind::I32,
            64 => NumberKind::I64,
            -32 => NumberKind::F32,
            -64 => NumberKind::F64,
            _ => return None,
        })
    }

    /// Bytes of one number.
    pub fn size(self) -> usize {
        match self {
            NumberKind::U8 => 1,
            NumberKind::I16 => 2,
            NumberKind::I32 | NumberKind::F32 => 4,
            NumberKind::I64 | NumberKind::F64 => 8,
        }
    }

    /// Whether it is an integer, for which BLANK or TNULL may mark missing values.
    pub fn is_integer(self) -> bool {
        !matches!(self, NumberKind::F32 | NumberKind::F64)
    }

    /// The number at the start of `bytes`; NaN when there are too few bytes.
    #[inline]
    pub fn get(self, bytes: &[u8]) -> f64 {
        match self {
            NumberKind::U8 => first::<u8>(bytes),
            NumberKind::I16 => first::<i16>(bytes),
            NumberKind::I32 => first::<i32>(bytes),
            NumberKind::I64 => first::<i64>(bytes),
            NumberKind::F32 => first::<f32>(bytes),
            NumberKind::F64 => first::<f64>(bytes),
        }
    }
}

#[inline(always)]
fn first<T: Element>(bytes: &[u8]) -> f64 {
    bytes.get(..T::SIZE).map_or(f64::NAN, |b| T::from_be(b).to_f64())
}

/// A number kind as a type, for loops that must not ask for the kind of every value.
pub trait Element: Copy {
    /// Bytes of one number.
    const SIZE: usize;
    /// From exactly `SIZE` big-endian bytes.
    fn from_be(bytes: &[u8]) -> Self;
    /// As f64 (64-bit integers beyond 2⁵³ are rounded).
    fn to_f64(self) -> f64;
}

macro_rules! element {
    ($($kind:ty),*) => {$(
        impl Element for $kind {
            const SIZE: usize = size_of::<$kind>();
            #[inline(always)]
            fn from_be(bytes: &[u8]) -> Self {
                let mut exact = [0; size_of::<$kind>()];
                exact.copy_from_slice(bytes);
                <$kind>::from_be_bytes(exact)
            }
            #[inline(always)]
            fn to_f64(self) -> f64 {
                self as f64
            }
        }
    )*};
}
element!(u8, i16, i32, i64, f32, f64);
