//! Reading images: any BITPIX, scaled by BSCALE and BZERO, BLANK as NaN.

use super::big_endian::{Element, NumberKind};
use super::{FitsError, FitsFile, FitsProblem, Hdu, HduKind};

/// Bytes read at a time.
const CHUNK: usize = 1 << 20;

impl FitsFile {
    fn image(&self, hdu: usize) -> Result<&Hdu, FitsError> {
        let found = match self.hdus().get(hdu) {
            Some(found) if found.kind == HduKind::Image => return Ok(found),
            Some(other) => format!("{:?}", other.kind),
            None => format!("only {} headers", self.hdus().len()),
        };
        let keyword = "image".to_string();
        let expected = "an image".to_string();
        Err(FitsProblem::BadValue { hdu: format!("header {hdu}"), keyword, found, expected }.at(self.path()))
    }

    /// The pixels of the image at header number `hdu` (0 is the primary), first axis fastest, as f64.
    ///
    /// # Errors
    /// When there is no image there or it cannot be read.
    pub fn image_f64(&self, hdu: usize) -> Result<Vec<f64>, FitsError> {
        self.pixels(hdu, |value| value)
    }

    /// As [`image_f64`](Self::image_f64), rounded to f32.
    ///
    /// # Errors
    /// When there is no image there or it cannot be read.
    pub fn image_f32(&self, hdu: usize) -> Result<Vec<f32>, FitsError> {
        self.pixels(hdu, |value| value as f32)
    }

    fn pixels<T>(&self, hdu: usize, convert: fn(f64) -> T) -> Result<Vec<T>, FitsError> {
        let hdu = self.image(hdu)?;
        let scaling = Scaling::of(hdu).map_err(|problem| problem.at(self.path()))?;
        let size = hdu.number.size();
        let total = (hdu.data_bytes / size as u64) as usize;
        let mut pixels = Vec::with_capacity(total);
        let mut chunk = vec![0; CHUNK.min(hdu.data_bytes as usize)];
        let mut at = 0;
        while at < hdu.data_bytes {
            let bytes = (hdu.data_bytes - at).min(CHUNK as u64) as usize;
            self.read_at(hdu.data_start + at, &mut chunk[..bytes])?;
            scaling.append(&chunk[..bytes], hdu.number, convert, &mut pixels);
            at += bytes as u64;
        }
        Ok(pixels)
    }
}

/// physical = stored · scale + zero.
struct Scaling {
    scale: f64,
    zero: f64,
    blank: Option<i64>,
}

impl Scaling {
    fn of(hdu: &Hdu) -> Result<Scaling, FitsProblem> {
        let blank = if hdu.number.is_integer() { hdu.header.integer("BLANK")? } else { None };
        Ok(Scaling {
            scale: hdu.header.float("BSCALE")?.unwrap_or(1.0),
            zero: hdu.header.float("BZERO")?.unwrap_or(0.0),
            blank,
        })
    }

    fn append<T>(&self, bytes: &[u8], number: NumberKind, convert: fn(f64) -> T, out: &mut Vec<T>) {
        match number {
            NumberKind::U8 => self.append_as::<u8, T>(bytes, convert, out),
            NumberKind::I16 => self.append_as::<i16, T>(bytes, convert, out),
            NumberKind::I32 => self.append_as::<i32, T>(bytes, convert, out),
            NumberKind::I64 => self.append_as::<i64, T>(bytes, convert, out),
            NumberKind::F32 => self.append_as::<f32, T>(bytes, convert, out),
            NumberKind::F64 => self.append_as::<f64, T>(bytes, convert, out),
        }
    }

    fn append_as<E: Element, T>(&self, bytes: &[u8], convert: fn(f64) -> T, out: &mut Vec<T>) {
        let blank = self.blank.map(|blank| blank as f64);
        out.extend(bytes.chunks_exact(E::SIZE).map(|raw| {
            let stored = E::from_be(raw).to_f64();
            convert(if blank == Some(stored) { f64::NAN } else { stored * self.scale + self.zero })
        }));
    }
}
