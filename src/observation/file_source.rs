//! Rows of a visibility file, handed out block by block, for random groups and FITS-IDI alike.

use super::fields::Quantity;
use super::matrix::{Matrix, Scratch};
use super::open::content;
use super::station_table::StationTables;
use super::{Block, BlockSource, Observation, ObservationError, SPEED_OF_LIGHT};
use crate::fits::FitsFile;
use rayon::prelude::*;
use std::sync::Arc;

/// Bytes of the file that one thread reads and converts at a time: few enough to stay in its cache, enough to be worth its wake-up.
const CHUNK: usize = 1 << 20;
/// Dates outside (1941 to 2132) are taken for damage or for another kind of date.
const PLAUSIBLE_MJD: std::ops::RangeInclusive<f64> = 30_000.0..=100_000.0;

/// How a row names its stations.
#[derive(Debug, Clone)]
pub(super) enum Pair {
    /// BASELINE, both in one number.
    Baseline(Quantity),
    /// A number for each.
    Two(Quantity, Quantity),
}

/// A run of rows of equal length and layout: all the random groups, or one UV_DATA table.
#[derive(Debug, Clone)]
pub(super) struct Segment {
    pub start: u64,
    pub row_bytes: usize,
    pub rows: u64,
    /// "group" or "UV_DATA (extension 5) row".
    pub row_name: String,
    pub uvw: [Quantity; 3],
    pub pair: Pair,
    pub subarray: Option<Quantity>,
    /// Modified Julian Date, UTC.
    pub mjd: Quantity,
    pub source: Option<Quantity>,
    pub set_up: Option<Quantity>,
    pub matrix: Matrix,
}

impl Segment {
    /// "group 17".
    pub fn row_label(&self, row: u64) -> String {
        format!("{} {}", self.row_name, row + 1)
    }
}

/// What all pointings of a file share.
#[derive(Debug)]
pub(super) struct Shared {
    pub file: FitsFile,
    pub segments: Vec<Segment>,
    pub stations: StationTables,
}

/// Rows `first..end` of a segment.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Range {
    pub segment: usize,
    pub first: u64,
    pub end: u64,
}

/// Which rows belong to a pointing; `None` means that all do.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub(super) struct Key {
    pub source: Option<i64>,
    pub set_up: Option<i64>,
}

impl Key {
    /// The key of a row, of the parts that matter.
    pub fn of(segment: &Segment, row: &[u8], by_source: bool, by_set_up: bool) -> Key {
        let number = |used: bool, quantity: &Option<Quantity>| {
            if used { quantity.as_ref().map(|q| q.value(row).round() as i64) } else { None }
        };
        Key { source: number(by_source, &segment.source), set_up: number(by_set_up, &segment.set_up) }
    }
}

/// One pointing of a file.
#[derive(Debug)]
pub(super) struct FileSource {
    pub shared: Arc<Shared>,
    pub observation: Observation,
    pub key: Key,
    pub ranges: Vec<Range>,
    pub uvw_scale: f64,
    pub block_rows: usize,
    /// Position: range, row.
    next: (usize, u64),
    decoders: Vec<Decoder>,
    /// Source number of the first row, where the file has no source table to tell several apart.
    lone_source: Option<i64>,
    skipped: Skipped,
    counted: bool,
}

/// What it takes to decode a run of rows, and what was found there; several work side by side.
#[derive(Debug, Default)]
struct Decoder {
    raw: Vec<u8>,
    scratch: Box<Scratch>,
    part: Block,
    columns: Columns,
    skipped: Skipped,
    failed: Option<ObservationError>,
}

/// Quantities of many rows.
#[derive(Debug, Default)]
struct Columns {
    uvw: [Vec<f64>; 3],
    mjd: Vec<f64>,
    baseline: Vec<f64>,
}

/// What decoding looks up and does not change.
#[derive(Clone, Copy)]
struct Lookup<'a> {
    shared: &'a Shared,
    segment: &'a Segment,
    key: Key,
    uvw_scale: f64,
    lone_source: Option<i64>,
}

/// Rows that are not handed out.
#[derive(Debug, Clone, Copy, Default)]
struct Skipped {
    autocorrelations: u64,
    without_coordinates: u64,
    reversed: u64,
}

impl FileSource {
    pub fn new(
        shared: Arc<Shared>,
        observation: Observation,
        key: Key,
        ranges: Vec<Range>,
        block_bytes: usize,
    ) -> FileSource {
        let cells = shared.segments.first().map_or(1, |s| s.matrix.cells());
        let row_bytes = cells.saturating_mul(12).saturating_add(40);
        let block_rows = (block_bytes.saturating_sub(CHUNK) / row_bytes).max(1);
        let next = (0, ranges.first().map_or(0, |r| r.first));
        FileSource {
            shared,
            observation,
            key,
            ranges,
            uvw_scale: 1.0,
            block_rows,
            next,
            decoders: Vec::new(),
            lone_source: None,
            skipped: Skipped::default(),
            counted: false,
        }
    }

    fn rows_left(&self) -> u64 {
        let (at, row) = self.next;
        self.ranges.iter().skip(at).map(|r| r.end - r.first).sum::<u64>()
            - self.ranges.get(at).map_or(0, |r| row - r.first)
    }

    fn empty_block(&self) -> Block {
        let rows = self.rows_left().min(self.block_rows as u64) as usize;
        let (channels, hands) = (self.observation.frequencies_hz.len(), self.observation.hands.len());
        let cells = rows * channels * hands;
        Block {
            mjd_utc: Vec::with_capacity(rows),
            uvw_m: Vec::with_capacity(rows),
            first: Vec::with_capacity(rows),
            second: Vec::with_capacity(rows),
            channels,
            hands,
            data: Vec::with_capacity(cells),
            weight: Vec::with_capacity(cells),
        }
    }

    /// Appends rows of the file to `block` until it is full or the rows have ended.
    fn fill(&mut self, block: &mut Block) -> Result<(), ObservationError> {
        let shared = Arc::clone(&self.shared);
        while block.rows() < self.block_rows {
            let Some(range) = self.ranges.get(self.next.0) else { return Ok(()) };
            if self.next.1 >= range.end {
                self.next.0 += 1;
                self.next.1 = self.ranges.get(self.next.0).map_or(0, |r| r.first);
                continue;
            }
            let segment = &shared.segments[range.segment];
            let per_chunk = (CHUNK / segment.row_bytes).max(1) as u64;
            let rows = (range.end - self.next.1).min((self.block_rows - block.rows()) as u64);
            let chunks = rows.div_ceil(per_chunk).min(rayon::current_num_threads() as u64).max(1);
            let (first, rows) = (self.next.1, rows.min(chunks * per_chunk));
            let lone_source = self.lone_source(&shared, segment, first)?;
            let lookup = Lookup { shared: &shared, segment, key: self.key, uvw_scale: self.uvw_scale, lone_source };
            self.decoders.resize_with(self.decoders.len().max(chunks as usize), Decoder::default);
            let decoders = &mut self.decoders[..chunks as usize];
            // the first goes on with the block itself: its rows are not copied again
            let (channels, hands) = (block.channels, block.hands);
            decoders.iter_mut().for_each(|decoder| decoder.part.clear(channels, hands));
            std::mem::swap(&mut decoders[0].part, block);
            decoders.par_iter_mut().enumerate().for_each(|(chunk, decoder)| {
                let from = first + chunk as u64 * per_chunk;
                decoder.decode(lookup, (from, (from + per_chunk).min(first + rows)));
            });
            std::mem::swap(&mut decoders[0].part, block);
            for decoder in decoders {
                if let Some(error) = decoder.failed.take() {
                    return Err(error);
                }
                block.append(&mut decoder.part);
                self.skipped.add(std::mem::take(&mut decoder.skipped));
            }
            self.next.1 += rows;
        }
        Ok(())
    }

    /// The source that all rows must name where nothing tells several apart: that of the first row read.
    fn lone_source(
        &mut self,
        shared: &Shared,
        segment: &Segment,
        row: u64,
    ) -> Result<Option<i64>, ObservationError> {
        let Some(source) = segment.source.as_ref().filter(|_| self.key.source.is_none()) else { return Ok(None) };
        if self.lone_source.is_none() {
            let mut bytes = vec![0; segment.row_bytes];
            shared.file.read_at(segment.start + row * segment.row_bytes as u64, &mut bytes)?;
            self.lone_source = Some(source.value(&bytes).round() as i64);
        }
        Ok(self.lone_source)
    }

    /// Adds what a whole pass has counted to the notes, once.
    fn note_skipped(&mut self) {
        if std::mem::replace(&mut self.counted, true) {
            return;
        }
        let Skipped { autocorrelations, without_coordinates, reversed } = self.skipped;
        let notes = &mut self.observation.notes;
        if autocorrelations > 0 {
            notes.push(format!("{autocorrelations} rows are autocorrelations: skipped"));
        }
        if without_coordinates > 0 {
            notes.push(format!("{without_coordinates} rows have neither usable data nor coordinates: skipped"));
        }
        if reversed > 0 {
            let can = self.shared.segments.iter().all(|s| s.matrix.can_swap());
            let what = if can { "turned" } else { "left, since a crossed hand is missing" };
            notes.push(format!("{reversed} rows name the later station of the table first: {what}"));
        }
    }
}

impl Decoder {
    /// Adds rows `first..end` to `part`, up to the first that is wrong.
    fn decode(&mut self, lookup: Lookup, (first, end): (u64, u64)) {
        let row_bytes = lookup.segment.row_bytes;
        let rows = (end - first) as usize;
        let mut part = std::mem::take(&mut self.part);
        let mut raw = std::mem::take(&mut self.raw);
        raw.resize(rows * row_bytes, 0);
        let start = lookup.segment.start + first * row_bytes as u64;
        let decoded = lookup.shared.file.read_at(start, &mut raw).map_err(Into::into).and_then(|()| {
            if self.take_plain(lookup, &raw, &mut part) {
                return Ok(());
            }
            let mut numbered = raw.chunks_exact(row_bytes).zip(first..);
            numbered.try_for_each(|(bytes, row)| self.take_row(lookup, row, bytes, &mut part))
        });
        self.failed = decoded.err();
        self.raw = raw;
        self.part = part;
    }

    /// Decodes all rows together where nothing is the matter with any: one pointing and set-up, single precision, short rows, known
    /// stations in their order, dates and coordinates as they should be. False, and nothing is done, where something is.
    fn take_plain(&mut self, lookup: Lookup, rows: &[u8], block: &mut Block) -> bool {
        let Lookup { shared, segment, key, uvw_scale, lone_source } = lookup;
        let Segment { row_bytes, uvw, pair: Pair::Baseline(baseline), subarray: None, mjd, matrix, .. } = segment
        else {
            return false;
        };
        if key.source.is_some()
            || key.set_up.is_some()
            || lone_source.is_some()
            || shared.stations.array_count() > 1
            || rows.len() < *row_bytes
        {
            return false;
        }
        let columns = &mut self.columns;
        // stored for first minus second station, in light travel time: ours is r_second − r_first, in metres
        let to_metres = -SPEED_OF_LIGHT * uvw_scale;
        let mut known = mjd.column(rows, *row_bytes, &mut columns.mjd)
            && baseline.column(rows, *row_bytes, &mut columns.baseline);
        for (quantity, column) in uvw.iter().zip(&mut columns.uvw) {
            known = known && quantity.column(rows, *row_bytes, column);
            column.iter_mut().for_each(|value| *value *= to_metres);
        }
        if !known {
            return false;
        }
        let finite = |column: &Vec<f64>| column.iter().fold(0.0, |sum, v| sum + 0.0 * v) == 0.0;
        let plausible = columns.mjd.iter().fold(true, |all, mjd| all & PLAUSIBLE_MJD.contains(mjd));
        if !plausible || !columns.uvw.iter().all(finite) {
            return false;
        }
        let before = block.first.len();
        for &baseline in &columns.baseline {
            let pair = pair_of(baseline).map(|pair| pair.map(|number| shared.stations.index(1, number)));
            match pair {
                Some([Some(first), Some(second)]) if first < second => {
                    block.first.push(first);
                    block.second.push(second);
                }
                _ => break,
            }
        }
        let sound = block.first.len() - before == columns.baseline.len();
        if !sound || !matrix.append_rows(rows, *row_bytes, &mut block.data, &mut block.weight) {
            block.first.truncate(before);
            block.second.truncate(before);
            return false;
        }
        block.mjd_utc.extend_from_slice(&columns.mjd);
        let [u, v, w] = &columns.uvw;
        block.uvw_m.extend(u.iter().zip(v).zip(w).map(|((u, v), w)| [*u, *v, *w]));
        true
    }

    fn take_row(
        &mut self,
        lookup: Lookup,
        row: u64,
        bytes: &[u8],
        block: &mut Block,
    ) -> Result<(), ObservationError> {
        let Lookup { shared, segment, key, uvw_scale, lone_source } = lookup;
        let complain = |problem: String, expected: &str| {
            content(shared.file.path(), format!("{}: {problem}", segment.row_label(row)), expected)
        };
        let (by_source, by_set_up) = (key.source.is_some(), key.set_up.is_some());
        if (by_source || by_set_up) && Key::of(segment, bytes, by_source, by_set_up) != key {
            return Ok(());
        }
        if let (Some(first), Some(source)) = (lone_source, &segment.source) {
            let source = source.value(bytes).round() as i64;
            if source != first {
                let problem = format!("SOURCE is {source}, in the rows before it was {first}");
                return Err(complain(problem, "a source table (SU or SOURCE) when there are several sources"));
            }
        }
        let (array, numbers) = station_numbers(segment, bytes, shared.stations.array_count() > 1);
        let [first, second] = numbers.map(|number| shared.stations.index(array, number));
        let (Some(mut first), Some(mut second)) = (first, second) else {
            let missing = if first.is_none() { numbers[0] } else { numbers[1] };
            let problem = format!("station number {missing} (array {array}) is not in the station table");
            return Err(complain(problem, "stations of the station table only"));
        };
        if first == second {
            self.skipped.autocorrelations += 1;
            return Ok(());
        }
        let start = block.weight.len();
        segment.matrix.append(bytes, &mut self.scratch, &mut block.data, &mut block.weight);
        // Stored for first minus second station, in light travel time: ours is r_second − r_first, in metres.
        let mut uvw = [0, 1, 2].map(|i| -SPEED_OF_LIGHT * uvw_scale * segment.uvw[i].value(bytes));
        let mjd = segment.mjd.value(bytes);
        let located = uvw.iter().all(|x| x.is_finite());
        if !located || !PLAUSIBLE_MJD.contains(&mjd) {
            if block.weight[start..].iter().all(|w| *w == 0.0) {
                block.weight.truncate(start);
                block.data.truncate(start);
                self.skipped.without_coordinates += 1;
                return Ok(());
            }
            return Err(if located {
                complain(format!("its date is MJD {mjd}"), "a Julian Date between 1941 and 2132")
            } else {
                complain(format!("u, v, w are {uvw:?} m"), "finite numbers in a row with usable data")
            });
        }
        if first > second {
            self.skipped.reversed += 1;
            if segment.matrix.can_swap() {
                std::mem::swap(&mut first, &mut second);
                uvw = uvw.map(|x| -x);
                segment.matrix.swap(&mut block.data[start..], &mut block.weight[start..]);
            }
        }
        block.mjd_utc.push(mjd);
        block.uvw_m.push(uvw);
        block.first.push(first);
        block.second.push(second);
        Ok(())
    }
}

impl Skipped {
    fn add(&mut self, other: Skipped) {
        self.autocorrelations += other.autocorrelations;
        self.without_coordinates += other.without_coordinates;
        self.reversed += other.reversed;
    }
}

/// The two station numbers in a baseline number without its fraction; `None` where it is none.
#[inline]
fn pair_of(baseline: f64) -> Option<[f64; 2]> {
    if !(0.0..9e15).contains(&baseline) {
        return None;
    }
    // Whole numbers from here on: a call of floor() for each was the slowest part of a short row.
    let whole = (baseline + 1e-4) as u64;
    let (base, step) = if whole >= 65_536 { (65_536, 2048) } else { (0, 256) };
    Some([((whole - base) / step) as f64, ((whole - base) % step) as f64])
}

/// Array number and the two station numbers of a row.
fn station_numbers(segment: &Segment, row: &[u8], several_arrays: bool) -> (i64, [f64; 2]) {
    let stated = segment.subarray.as_ref().map(|q| q.value(row).round() as i64);
    match &segment.pair {
        Pair::Two(first, second) => (stated.unwrap_or(1), [first.value(row), second.value(row)]),
        Pair::Baseline(baseline) => {
            let baseline = baseline.value(row);
            let Some(numbers) = pair_of(baseline) else { return (1, [baseline, f64::NAN]) };
            // The fraction is (array − 1)/100; a large f32 has no room for it, so it is looked at only when needed.
            let whole = ((baseline + 1e-4) as u64) as f64;
            let array = if several_arrays { 1 + ((baseline - whole) * 100.0).round() as i64 } else { 1 };
            (stated.unwrap_or(array), numbers)
        }
    }
}

impl BlockSource for FileSource {
    fn observation(&self) -> &Observation {
        &self.observation
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.next = (0, self.ranges.first().map_or(0, |r| r.first));
        self.skipped = Skipped::default();
        Ok(())
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        let mut block = self.empty_block();
        self.fill(&mut block)?;
        if block.rows() == 0 {
            self.note_skipped();
            return Ok(None);
        }
        Ok(Some(block))
    }
}
