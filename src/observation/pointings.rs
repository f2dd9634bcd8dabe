//! From what a file holds to its pointings: which rows belong to which, and what is known of each.

use super::file_source::{FileSource, Key, Range, Segment, Shared};
use super::frequencies::{Band, Reference, SetUp, channels};
use super::open::{ReadOptions, Selection, content};
use super::station_axes::{Decision, Sample, decide};
use super::station_table::StationTables;
use super::{Block, BlockSource, Observation, ObservationError};
use crate::fits::{Column, FitsFile, Hdu, Table};
use crate::sky::Direction;
use std::collections::HashMap;
use std::path::Path;
use std::sync::Arc;

/// Memory of a block while a file is looked at for the first time.
const PROBE_BYTES: usize = 1 << 20;
/// Rows whose u, v, w are compared with the station table.
const SAMPLES: usize = 64;
/// Runs of rows remembered for one pointing; beyond that the rows between are read and left out.
const MOST_RANGES: usize = 10_000;
/// Each pointing holds its own list of stations: all of them together stay below a gigabyte.
const MOST_STATION_COPIES: usize = 4_000_000;

/// A source: a row of the source table, or what the main header says.
#[derive(Debug, Clone)]
pub(super) struct Source {
    pub id: i64,
    pub name: String,
    pub phase_centre: Direction,
    pub aim: Direction,
    /// FREQOFF of each band, Hz.
    pub shift_hz: Vec<f64>,
}

/// All that a file holds, whatever its kind.
#[derive(Debug)]
pub(super) struct Parts {
    pub file: FitsFile,
    pub segments: Vec<Segment>,
    pub stations: StationTables,
    pub set_ups: Vec<SetUp>,
    pub reference: Reference,
    pub sources: Vec<Source>,
    pub array_name: String,
    pub notes: Vec<String>,
}

/// Refuses equinoxes other than 2000; notes when none is stated.
pub(super) fn check_equinox(
    path: &Path,
    equinox: Option<f64>,
    whose: &str,
    notes: &mut Vec<String>,
) -> Result<(), ObservationError> {
    match equinox.filter(|e| *e != 0.0) {
        Some(equinox) if (equinox - 2000.0).abs() < 1e-3 => Ok(()),
        Some(equinox) => Err(content(
            path,
            format!("the position of {whose} is of equinox {equinox}"),
            "equinox 2000 (FK5 or ICRS)",
        )),
        None => {
            notes.push(format!("no equinox is stated for the position of {whose}; taken as 2000"));
            Ok(())
        }
    }
}

/// A direction from degrees, or a complaint.
pub(super) fn direction(path: &Path, whose: &str, ra: f64, dec: f64) -> Result<Direction, ObservationError> {
    if ra.is_finite() && ra.abs() <= 720.0 && dec.abs() <= 90.0 {
        return Ok(Direction::from_deg(ra, dec));
    }
    let problem = format!("the position of {whose} is right ascension {ra}, declination {dec} degrees");
    Err(content(path, problem, "right ascension 0 to 360, declination -90 to 90"))
}

/// Reads a source table: SU beside random groups, SOURCE in FITS-IDI.
pub(super) fn read_sources(
    file: &FitsFile,
    hdu: &Hdu,
    bands: usize,
    notes: &mut Vec<String>,
) -> Result<Vec<Source>, ObservationError> {
    let path = file.path();
    let table = Table::new(hdu).map_err(|e| e.at(path))?;
    let need = |names: &[&str]| table.numbers(names, 1).map_err(|e| e.at(path));
    let id = need(&["ID. NO.", "SOURCE_ID", "ID_NO"])?;
    let (ra, dec) = (need(&["RAEPO"])?, need(&["DECEPO"])?);
    let (ra_aim, dec_aim) = (table.find(&["RAOBS"]), table.find(&["DECOBS"]));
    let (name, epoch) = (table.find(&["SOURCE"]), table.find(&["EPOCH", "EQUINOX"]));
    let shift = table.find(&["FREQOFF"]);
    let mut sources = Vec::new();
    let mut unstated = Vec::new();
    table.for_each_row(file, |row, bytes| {
        let number = |column: Option<&Column>| column.and_then(|c| c.number(bytes, 0));
        let id = id.number(bytes, 0).unwrap_or(f64::NAN).round() as i64;
        let name = name.and_then(|c| c.text(bytes)).filter(|n| !n.is_empty()).unwrap_or(format!("source {id}"));
        let whose = format!("{name} ({} row {})", table.label, row + 1);
        // EQUINOX is text such as "J2000" in FITS-IDI.
        let equinox = number(epoch).or_else(|| {
            let text = epoch.and_then(|c| c.text(bytes))?;
            text.trim_start_matches(['J', 'B']).parse().ok()
        });
        check_equinox(path, equinox, &whose, &mut unstated)?;
        unstated.truncate(1);
        let phase_centre =
            direction(path, &whose, number(Some(ra)).unwrap_or(f64::NAN), number(Some(dec)).unwrap_or(f64::NAN))?;
        // Some writers leave 0, 0 where no pointing position was recorded.
        let aim = match (number(ra_aim), number(dec_aim)) {
            (Some(ra), Some(dec)) if ra != 0.0 || dec != 0.0 => direction(path, &whose, ra, dec)?,
            _ => phase_centre,
        };
        let shift_hz = (0..bands).map_while(|band| shift.and_then(|c| c.number(bytes, band))).collect();
        sources.push(Source { id, name, phase_centre, aim, shift_hz });
        Ok::<(), ObservationError>(())
    })?;
    // One note stands for all rows.
    notes.extend(unstated);
    if sources.is_empty() {
        return Err(content(path, format!("{}: no rows", table.label), "at least one source"));
    }
    Ok(sources)
}

/// Makes the pointings that are asked for.
pub(super) fn assemble(
    parts: Parts,
    selection: &Selection,
    options: ReadOptions,
) -> Result<Vec<Box<dyn BlockSource>>, ObservationError> {
    let Parts { file, segments, stations, set_ups, reference, sources, array_name, mut notes } = parts;
    let path = file.path().to_path_buf();
    check_names(&path, &sources, selection)?;
    if stations.stations.len() < 2 {
        let problem = format!("the station table has {} stations", stations.stations.len());
        return Err(content(&path, problem, "at least 2"));
    }
    if segments.iter().all(|s| s.rows == 0) {
        return Err(content(&path, "there are no visibility rows (GCOUNT or NAXIS2 is 0)", "at least one"));
    }
    let by_source = sources.len() > 1;
    let by_set_up = set_ups.len() > 1 && segments.iter().any(|s| s.set_up.is_some());
    if by_source && segments.iter().any(|s| s.source.is_none()) {
        let problem = format!("{} sources, but no SOURCE number in the rows", sources.len());
        return Err(content(&path, problem, "a SOURCE parameter or column"));
    }
    notes.splice(0..0, file.notes().iter().cloned());
    notes.extend(stations.notes.iter().cloned());
    if segments.iter().any(|s| !s.matrix.has_weights()) {
        notes.push("the data have no weights: each is given the weight 1".to_string());
    }
    if stations.array_count() > 1 {
        notes.push(format!("{} arrays (subarrays); times are taken as stated for each", stations.array_count()));
    }
    let shared = Arc::new(Shared { file, segments, stations });
    let keys = if by_source || by_set_up {
        find_rows(&shared, by_source, by_set_up)?
    } else {
        let all = shared.segments.iter().enumerate();
        let ranges = all.map(|(segment, s)| Range { segment, first: 0, end: s.rows }).collect();
        vec![(Key { source: None, set_up: None }, ranges, 0, 0)]
    };

    let wanted = match selection {
        Selection::All => keys.len(),
        Selection::Names(names) => names.len(),
    };
    let station_count = shared.stations.stations.len();
    if wanted.saturating_mul(station_count) > MOST_STATION_COPIES {
        let problem = format!("{wanted} pointings of {station_count} stations are too many at once");
        return Err(content(&path, problem, "fewer, chosen by name"));
    }
    let by_id: HashMap<i64, &Source> = sources.iter().rev().map(|source| (source.id, source)).collect();
    let mut decision: Option<Decision> = None;
    let mut pointings: Vec<FileSource> = Vec::new();
    let mut unusable = Vec::new();
    for (key, ranges, segment, row) in keys {
        let at = || shared.segments.get(segment).map_or(String::new(), |s| s.row_label(row));
        let source = match key.source {
            None => &sources[0],
            Some(id) => by_id.get(&id).copied().ok_or_else(|| {
                let known: Vec<String> = sources.iter().map(|s| s.id.to_string()).collect();
                content(&path, format!("{}: SOURCE is {id}", at()), format!("one of {}", known.join(", ")))
            })?,
        };
        if let Selection::Names(names) = selection
            && !names.contains(&source.name)
        {
            continue;
        }
        let matrix = &shared.segments[0].matrix;
        let bands = match (key.set_up, set_ups.first()) {
            (Some(id), _) => set_ups.iter().find(|s| s.id == id).map(|s| s.bands.clone()).ok_or_else(|| {
                let known: Vec<String> = set_ups.iter().map(|s| s.id.to_string()).collect();
                content(&path, format!("{}: FREQID is {id}", at()), format!("one of {}", known.join(", ")))
            })?,
            (None, Some(only)) => only.bands.clone(),
            (None, None) if matrix.bands == 1 => {
                vec![Band { offset_hz: 0.0, width_hz: reference.step_hz, lower: false }]
            }
            (None, None) => {
                let problem = format!("{} bands (IF axis), but no frequency table", matrix.bands);
                return Err(content(&path, problem, "an FQ or FREQUENCY table"));
            }
        };
        let (frequencies_hz, widths_hz) = channels(reference, &bands, matrix.channels_per_band, &source.shift_hz)
            .map_err(|(problem, expected)| content(&path, problem, expected))?;
        let observation = Observation {
            origin: path.display().to_string(),
            name: source.name.clone(),
            array_name: array_name.clone(),
            phase_centre: source.phase_centre,
            aim: source.aim,
            stations: shared.stations.stations.iter().map(|s| s.station.clone()).collect(),
            frequencies_hz,
            widths_hz,
            hands: matrix.hands.clone(),
            ut1_utc_s: shared.stations.ut1_utc_s,
            notes: notes.clone(),
        };
        let mut pointing = FileSource::new(Arc::clone(&shared), observation, key, ranges, PROBE_BYTES);
        let Some(samples) = probe(&mut pointing)? else {
            unusable.push(source.name.clone());
            continue;
        };
        let frame = source.phase_centre.frame();
        let decided = decision.get_or_insert_with(|| decide(&shared.stations, &samples, &frame, reference.hz));
        // A fresh one: the probe's small blocks and counts are forgotten.
        let FileSource { observation, ranges, .. } = pointing;
        let mut pointing = FileSource::new(Arc::clone(&shared), observation, key, ranges, options.block_bytes);
        for (station, position) in pointing.observation.stations.iter_mut().zip(&decided.positions_m) {
            station.position_m = *position;
        }
        pointing.uvw_scale = decided.uvw_scale;
        pointing.observation.notes.extend(decided.notes.iter().cloned());
        pointings.push(pointing);
    }
    if pointings.is_empty() {
        let whose = if unusable.is_empty() { String::new() } else { format!(" of {}", unusable.join(", ")) };
        let problem = format!("no usable visibility{whose}: all are flagged, not finite, or autocorrelations");
        return Err(content(&path, problem, "at least one with a positive weight"));
    }
    if !unusable.is_empty() {
        let note = format!("left out, since nothing of them is usable: {}", unusable.join(", "));
        pointings.iter_mut().for_each(|p| p.observation.notes.push(note.clone()));
    }
    Ok(pointings.into_iter().map(|pointing| Box::new(pointing) as Box<dyn BlockSource>).collect())
}

fn check_names(path: &Path, sources: &[Source], selection: &Selection) -> Result<(), ObservationError> {
    let Selection::Names(names) = selection else { return Ok(()) };
    let known: Vec<&str> = sources.iter().map(|s| s.name.as_str()).collect();
    if names.is_empty() {
        return Err(content(path, "no source is selected", format!("some of {}", known.join(", "))));
    }
    match names.iter().find(|name| !known.contains(&name.as_str())) {
        Some(name) => {
            Err(content(path, format!("no source is named {name:?}"), format!("one of {}", known.join(", "))))
        }
        None => Ok(()),
    }
}

/// Reads on until a block holds a usable visibility: rows spread over it, or `None` when there is none.
fn probe(pointing: &mut FileSource) -> Result<Option<Vec<Sample>>, ObservationError> {
    while let Some(block) = pointing.next_block()? {
        let cells = block.channels * block.hands;
        let usable = |block: &Block, row: usize| block.weight[row * cells..][..cells].iter().any(|w| *w > 0.0);
        let rows: Vec<usize> = (0..block.rows()).filter(|row| usable(&block, *row)).collect();
        if rows.is_empty() {
            continue;
        }
        let samples = rows.iter().step_by(rows.len().div_ceil(SAMPLES)).map(|row| Sample {
            first: block.first[*row],
            second: block.second[*row],
            mjd_utc: block.mjd_utc[*row],
            uvw_m: block.uvw_m[*row],
        });
        return Ok(Some(samples.collect()));
    }
    Ok(None)
}

/// A pointing's key, its rows, and the segment and row where it first appears.
type Rows = (Key, Vec<Range>, usize, u64);

/// Goes once through a file of several sources or set-ups and notes which rows belong to which.
fn find_rows(shared: &Shared, by_source: bool, by_set_up: bool) -> Result<Vec<Rows>, ObservationError> {
    let mut found: Vec<Rows> = Vec::new();
    let mut places: HashMap<Key, usize> = HashMap::new();
    for (segment, layout) in shared.segments.iter().enumerate() {
        let per_chunk = (PROBE_BYTES / layout.row_bytes).max(1) as u64;
        let mut raw = Vec::new();
        let mut row = 0;
        while row < layout.rows {
            let rows = per_chunk.min(layout.rows - row);
            raw.resize(rows as usize * layout.row_bytes, 0);
            shared.file.read_at(layout.start + row * layout.row_bytes as u64, &mut raw)?;
            for bytes in raw.chunks_exact(layout.row_bytes) {
                let key = Key::of(layout, bytes, by_source, by_set_up);
                let place = *places.entry(key).or_insert_with(|| {
                    found.push((key, Vec::new(), segment, row));
                    found.len() - 1
                });
                let ranges = &mut found[place].1;
                let full = ranges.len() >= MOST_RANGES;
                match ranges.last_mut() {
                    Some(last) if last.segment == segment && (last.end == row || full) => last.end = row + 1,
                    _ => ranges.push(Range { segment, first: row, end: row + 1 }),
                }
                row += 1;
            }
        }
    }
    Ok(found)
}
