//! The visibility array of a row: its axes, and its values in bulk.

use super::Hand;
use crate::fits::{Element, FitsProblem, Header, NumberKind};
use num_complex::Complex32;

/// One axis of the array, the way headers describe it.
#[derive(Debug, Clone)]
pub(super) struct Axis {
    /// Keyword number, for messages.
    pub number: usize,
    /// CTYPE, up to any dash, in capitals.
    pub name: String,
    /// NAXISn or MAXISn.
    pub length: usize,
    /// CRVAL.
    pub value: f64,
    /// CDELT.
    pub step: f64,
    /// CRPIX.
    pub pixel: f64,
}

impl Axis {
    /// Axis `number` of `header`.
    pub fn read(header: &Header, number: usize, length: usize) -> Result<Axis, FitsProblem> {
        let keyword = |stem: &str| format!("{stem}{number}");
        let name = header.text(&keyword("CTYPE"))?;
        let name = name.ok_or_else(|| header.complain(&keyword("CTYPE"), "the name of an axis"))?;
        Ok(Axis {
            number,
            name: super::fields::stem(&name),
            length,
            value: header.float(&keyword("CRVAL"))?.unwrap_or(0.0),
            step: header.float(&keyword("CDELT"))?.unwrap_or(1.0),
            pixel: header.float(&keyword("CRPIX"))?.unwrap_or(1.0),
        })
    }

    /// The axis value at element `index`, from 0.
    pub fn at(&self, index: usize) -> f64 {
        self.value + (index as f64 + 1.0 - self.pixel) * self.step
    }
}

/// A complaint: what was found, what was expected.
pub(super) type Complaint = (String, String);

/// Weights that stand in a column beside the array (FITS-IDI).
#[derive(Debug, Clone, Copy)]
pub(super) struct WeightColumn {
    /// Where it begins in the row.
    pub offset: usize,
    /// Kind of number.
    pub kind: NumberKind,
    /// Elements: 1, one a band, or one a hand and band (hand fastest).
    pub count: usize,
}

/// Where the visibilities stand in a row, and in which order.
#[derive(Debug, Clone)]
pub(super) struct Matrix {
    offset: usize,
    kind: NumberKind,
    scale: f64,
    zero: f64,
    blank: Option<f64>,
    /// 2 (real, imaginary) or 3 (and weight).
    pub planes: usize,
    /// Bands.
    pub bands: usize,
    /// Channels of one band.
    pub channels_per_band: usize,
    /// Hands, in file order.
    pub hands: Vec<Hand>,
    /// For (channel, hand) in our order, the number of its cell in the file; `None` when the orders agree.
    order: Option<Vec<usize>>,
    /// For each hand its place after the stations change sides (XY becomes YX); `None` when one is missing.
    swapped: Option<Vec<usize>>,
    weights: Option<WeightColumn>,
}

fn lone<'a>(axes: &'a [Axis], names: &[&str]) -> Result<Option<&'a Axis>, Complaint> {
    let mut found = axes.iter().filter(|axis| names.contains(&axis.name.as_str()));
    match (found.next(), found.next()) {
        (Some(a), Some(b)) => Err((
            format!("axes {} and {} are both {}", a.number, b.number, names[0]),
            format!("one {} axis", names[0]),
        )),
        (first, _) => Ok(first),
    }
}

impl Matrix {
    /// Understands the axes. The first must be COMPLEX; STOKES, FREQ and IF (or BAND) may come in any order; any other
    /// must have length 1. The array must fill `bytes` from `offset`, which lie in the file: nothing is allocated before
    /// that is known.
    pub fn new(axes: &[Axis], offset: usize, bytes: usize, kind: NumberKind) -> Result<Matrix, Complaint> {
        let first = axes.first().ok_or_else(|| ("no axes".to_string(), "COMPLEX, STOKES, FREQ".to_string()))?;
        if first.name != "COMPLEX" {
            return Err((
                format!("axis {} (CTYPE{}) is {:?}", first.number, first.number, first.name),
                "COMPLEX as the first axis".to_string(),
            ));
        }
        if lone(axes, &["COMPLEX"])?.is_none() || !(2..=3).contains(&first.length) {
            return Err((
                format!("the COMPLEX axis has length {}", first.length),
                "2 (real, imaginary) or 3 (real, imaginary, weight)".to_string(),
            ));
        }
        let need = |names: &[&str]| {
            lone(axes, names)?.ok_or_else(|| {
                let all: Vec<_> = axes.iter().map(|axis| axis.name.as_str()).collect();
                (format!("the axes are {}: none is {}", all.join(", "), names[0]), format!("a {} axis", names[0]))
            })
        };
        let (stokes, freq, band) = (need(&["STOKES"])?, need(&["FREQ"])?, lone(axes, &["IF", "BAND"])?);
        let mut strides = [0; 3]; // of stokes, freq and band, in cells
        let mut stride = 1usize;
        for axis in &axes[1..] {
            match axis.name.as_str() {
                "STOKES" => strides[0] = stride,
                "FREQ" => strides[1] = stride,
                "IF" | "BAND" => strides[2] = stride,
                _ if axis.length == 1 => {}
                _ => {
                    return Err((
                        format!("axis {} ({:?}) has length {}", axis.number, axis.name, axis.length),
                        "length 1 for an axis that is none of COMPLEX, STOKES, FREQ, IF, BAND".to_string(),
                    ));
                }
            }
            if axis.length == 0 {
                return Err((
                    format!("axis {} ({}) has length 0", axis.number, axis.name),
                    "1 or more".to_string(),
                ));
            }
            stride = stride.checked_mul(axis.length).ok_or_else(|| {
                (
                    "the product of the axes passes what a machine can count".to_string(),
                    "a smaller array".to_string(),
                )
            })?;
        }
        let needed = stride.checked_mul(first.length).and_then(|n| n.checked_mul(kind.size()));
        if needed != Some(bytes) {
            let needed = needed.map_or("more bytes than a machine can count".to_string(), |n| format!("{n} bytes"));
            return Err((
                format!("a row has {bytes} bytes of data, but the axes ask for {needed}"),
                "the same".into(),
            ));
        }
        let hands = hands(stokes)?;
        let bands = band.map_or(1, |axis| axis.length);
        let straight = strides[0] == 1 && strides[1] == hands.len() && (bands == 1 || strides[2] == stride / bands);
        let order = (!straight).then(|| {
            let mut order = Vec::with_capacity(stride);
            for b in 0..bands {
                for c in 0..freq.length {
                    order.extend((0..hands.len()).map(|h| h * strides[0] + c * strides[1] + b * strides[2]));
                }
            }
            order
        });
        let partner = |hand: &Hand| match hand {
            Hand::XY => Hand::YX,
            Hand::YX => Hand::XY,
            Hand::RL => Hand::LR,
            Hand::LR => Hand::RL,
            same => *same,
        };
        let swapped = hands.iter().map(|hand| hands.iter().position(|h| *h == partner(hand))).collect();
        Ok(Matrix {
            offset,
            kind,
            scale: 1.0,
            zero: 0.0,
            blank: None,
            planes: first.length,
            bands,
            channels_per_band: freq.length,
            hands,
            order,
            swapped,
            weights: None,
        })
    }

    /// Sets the scaling of the stored numbers and the integer that marks missing ones.
    pub fn scaled(mut self, scale: f64, zero: f64, blank: Option<i64>) -> Matrix {
        (self.scale, self.zero) = (scale, zero);
        self.blank = blank.filter(|_| self.kind.is_integer()).map(|blank| blank as f64);
        self
    }

    /// Sets the column of weights: they are the weights when the array has none, and mark unused data in any case.
    pub fn weighted(mut self, weights: WeightColumn) -> Result<Matrix, Complaint> {
        if ![1, self.bands, self.bands * self.hands.len()].contains(&weights.count) {
            return Err((
                format!("the WEIGHT column has {} elements", weights.count),
                format!("1, {} (bands) or {} (hands × bands)", self.bands, self.bands * self.hands.len()),
            ));
        }
        self.weights = Some(weights);
        Ok(self)
    }

    /// Whether a weight of its own comes with the data.
    pub fn has_weights(&self) -> bool {
        self.planes == 3 || self.weights.is_some()
    }

    /// Whether weights come with the data and in a column too.
    pub fn has_both_weights(&self) -> bool {
        self.planes == 3 && self.weights.is_some()
    }

    /// Channels of all bands.
    pub fn channels(&self) -> usize {
        self.bands * self.channels_per_band
    }

    /// Visibilities of one row.
    pub fn cells(&self) -> usize {
        self.channels() * self.hands.len()
    }

    /// Where it ends in the row.
    fn end(&self) -> usize {
        self.offset + self.cells() * self.planes * self.kind.size()
    }

    /// Whether rows can be turned to the other order of stations.
    pub fn can_swap(&self) -> bool {
        self.swapped.is_some()
    }

    /// Appends the visibilities and weights of many short rows, as [`append`](Self::append) does of one; false, and nothing is
    /// done, where rows are long or numbers are not plain single-precision ones in our order.
    pub fn append_rows(
        &self,
        rows: &[u8],
        row_bytes: usize,
        data: &mut Vec<Complex32>,
        weight: &mut Vec<f32>,
    ) -> bool {
        let plain = self.kind == NumberKind::F32 && self.scale == 1.0 && self.zero == 0.0;
        let short = self.cells() <= BATCH && self.end() <= row_bytes;
        if !plain || !short || self.order.is_some() || self.weights.is_some() {
            return false;
        }
        match self.planes {
            2 => self.append_short::<8>(rows, row_bytes, data, weight),
            _ => self.append_short::<12>(rows, row_bytes, data, weight),
        }
        true
    }

    fn append_short<const N: usize>(
        &self,
        rows: &[u8],
        row_bytes: usize,
        data: &mut Vec<Complex32>,
        weight: &mut Vec<f32>,
    ) {
        let cells = self.cells();
        let (start, count) = (weight.len(), rows.len() / row_bytes * cells);
        data.resize(start + count, Complex32::ZERO);
        weight.resize(start + count, 0.0);
        let out = data[start..].chunks_exact_mut(cells).zip(weight[start..].chunks_exact_mut(cells));
        for (row, (values, weights)) in rows.chunks_exact(row_bytes).zip(out) {
            let row = row[self.offset..self.offset + cells * N].as_chunks::<N>().0;
            for (cell, (value, weight)) in row.iter().zip(values.iter_mut().zip(weights)) {
                let word = |at: usize| u32::from_be_bytes([cell[at], cell[at + 1], cell[at + 2], cell[at + 3]]);
                let stated = if N == 12 { word(8) } else { 1.0f32.to_bits() };
                (*value, *weight) = checked(word(0), word(4), stated);
            }
        }
    }

    /// Appends the visibilities and weights of a row of the file. Weights that are not positive and finite, and those
    /// of data that are not finite, become 0; data that are not finite become 0 too, so that no sum meets a NaN.
    pub fn append(&self, row: &[u8], scratch: &mut Scratch, data: &mut Vec<Complex32>, weight: &mut Vec<f32>) {
        let raw = row.get(self.offset..self.end()).unwrap_or(&[]);
        let start = weight.len();
        if let (NumberKind::F32, true, None) = (self.kind, self.scale == 1.0 && self.zero == 0.0, &self.order) {
            match self.planes {
                2 => append_plain::<8>(raw, scratch, data, weight),
                _ => append_plain::<12>(raw, scratch, data, weight),
            }
        } else {
            match self.kind {
                NumberKind::U8 => self.append_scaled::<u8>(raw, data, weight),
                NumberKind::I16 => self.append_scaled::<i16>(raw, data, weight),
                NumberKind::I32 => self.append_scaled::<i32>(raw, data, weight),
                NumberKind::I64 => self.append_scaled::<i64>(raw, data, weight),
                NumberKind::F32 => self.append_scaled::<f32>(raw, data, weight),
                NumberKind::F64 => self.append_scaled::<f64>(raw, data, weight),
            }
        }
        if let Some(column) = self.weights {
            self.apply_column(row, column, &mut weight[start..]);
        }
    }

    fn append_scaled<E: Element>(&self, raw: &[u8], data: &mut Vec<Complex32>, weight: &mut Vec<f32>) {
        let cell_bytes = self.planes * E::SIZE;
        let number = |bytes: &[u8]| {
            let stored = E::from_be(bytes).to_f64();
            let missing = self.blank == Some(stored);
            if missing { f32::NAN } else { (stored * self.scale + self.zero) as f32 }
        };
        for cell in 0..self.cells() {
            let at = self.order.as_ref().map_or(cell, |order| order[cell]) * cell_bytes;
            let bytes = &raw[at..at + cell_bytes];
            let (re, im) = (number(&bytes[..E::SIZE]), number(&bytes[E::SIZE..2 * E::SIZE]));
            let stated = if self.planes == 3 { number(&bytes[2 * E::SIZE..]) } else { 1.0 };
            let (value, stated) = checked(re.to_bits(), im.to_bits(), stated.to_bits());
            data.push(value);
            weight.push(stated);
        }
    }

    fn apply_column(&self, row: &[u8], column: WeightColumn, weight: &mut [f32]) {
        let hands = self.hands.len();
        let size = column.kind.size();
        let per_hand = column.count == self.bands * hands;
        for (band, part) in weight.chunks_exact_mut(self.channels_per_band * hands).enumerate() {
            for hand in 0..hands {
                let element = match column.count {
                    _ if per_hand => band * hands + hand,
                    1 => 0,
                    _ => band,
                };
                let stated = row.get(column.offset + element * size..).map_or(0.0, |b| column.kind.get(b)) as f32;
                let usable = stated > 0.0 && stated.is_finite();
                for cell in part[hand..].iter_mut().step_by(hands) {
                    let own = if self.planes == 3 { *cell } else { stated };
                    *cell = if usable && *cell > 0.0 { own } else { 0.0 };
                }
            }
        }
    }

    /// Turns a row to the other order of its stations: V_qp = V_pq^H, so values are conjugated and the crossed hands
    /// change places. Does nothing when that is impossible; see [`can_swap`](Self::can_swap).
    pub fn swap(&self, data: &mut [Complex32], weight: &mut [f32]) {
        let Some(partner) = &self.swapped else { return };
        let hands = self.hands.len();
        for (values, weights) in data.chunks_exact_mut(hands).zip(weight.chunks_exact_mut(hands)) {
            for (hand, other) in partner.iter().enumerate() {
                if *other > hand {
                    values.swap(hand, *other);
                    weights.swap(hand, *other);
                }
            }
            values.iter_mut().for_each(|value| value.im = -value.im);
        }
    }
}

/// The hands of a STOKES axis.
fn hands(axis: &Axis) -> Result<Vec<Hand>, Complaint> {
    if axis.length > 12 {
        return Err((format!("the STOKES axis has length {}", axis.length), "at most 12".to_string()));
    }
    let mut hands = Vec::new();
    for index in 0..axis.length {
        let code = axis.at(index);
        let hand = if code.fract() == 0.0 && code.abs() < 100.0 { Hand::from_code(code as i64) } else { None };
        let expected =
            || "different codes among 1..4 (I Q U V), -1..-4 (RR LL RL LR), -5..-8 (XX YY XY YX)".to_string();
        match hand {
            Some(hand) if !hands.contains(&hand) => hands.push(hand),
            Some(hand) => return Err((format!("the STOKES axis holds {} twice", hand.name()), expected())),
            None => return Err((format!("the STOKES axis holds {code} at element {}", index + 1), expected())),
        }
    }
    Ok(hands)
}

/// Exponent bits of an f32: all set for infinities and NaN.
const EXPONENT: u32 = 0x7f80_0000;

/// What of a stated value and weight, all given by their bits, may be used. Without branches: bad data come in patterns
/// that no processor foresees.
#[inline(always)]
fn checked(re: u32, im: u32, weight: u32) -> (Complex32, f32) {
    let finite = (re & EXPONENT != EXPONENT) & (im & EXPONENT != EXPONENT);
    // Above +0 and below +infinity; negative weights have the highest bit set.
    let usable = finite & (weight.wrapping_sub(1) < EXPONENT - 1);
    let mask = |keep: bool| 0u32.wrapping_sub(u32::from(keep));
    let (data, used) = (mask(finite), mask(usable));
    (Complex32::new(f32::from_bits(re & data), f32::from_bits(im & data)), f32::from_bits(weight & used))
}

/// Visibilities converted together.
const BATCH: usize = 128;

/// Room for a batch, kept by the caller: clearing it for every row cost more than converting a short one.
#[derive(Debug)]
pub(super) struct Scratch {
    words: [u32; 3 * BATCH],
    values: [Complex32; BATCH],
    weights: [f32; BATCH],
}

impl Default for Scratch {
    fn default() -> Self {
        Scratch { words: [0; 3 * BATCH], values: [Complex32::ZERO; BATCH], weights: [0.0; BATCH] }
    }
}

/// Unscaled f32 in our order: cells of N bytes, 8 without and 12 with a weight.
///
/// A batch is swapped and checked in `scratch` and appended in one go: value by value was several times slower.
fn append_plain<const N: usize>(
    raw: &[u8],
    scratch: &mut Scratch,
    data: &mut Vec<Complex32>,
    weight: &mut Vec<f32>,
) {
    let Scratch { words, values, weights } = scratch;
    for batch in raw.chunks(BATCH * N) {
        for (word, bytes) in words.iter_mut().zip(batch.as_chunks::<4>().0) {
            *word = u32::from_be_bytes(*bytes);
        }
        let cells = batch.len() / N;
        if N == 12 {
            for ((cell, value), weight) in
                words.as_chunks::<3>().0[..cells].iter().zip(values.iter_mut()).zip(weights.iter_mut())
            {
                (*value, *weight) = checked(cell[0], cell[1], cell[2]);
            }
        } else {
            for ((cell, value), weight) in
                words.as_chunks::<2>().0[..cells].iter().zip(values.iter_mut()).zip(weights.iter_mut())
            {
                (*value, *weight) = checked(cell[0], cell[1], 1.0f32.to_bits());
            }
        }
        data.extend_from_slice(&values[..cells]);
        weight.extend_from_slice(&weights[..cells]);
    }
}
