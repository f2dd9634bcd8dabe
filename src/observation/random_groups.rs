//! Random-groups visibility files (FITS Standard 4.0, §6) with their station, frequency and source tables.

use super::fields::Quantity;
use super::file_source::{Pair, Segment};
use super::frequencies::{Reference, read_set_ups};
use super::matrix::{Axis, Matrix};
use super::open::{ReadOptions, Selection, content};
use super::pointings::{Parts, Source, assemble, check_equinox, direction, read_sources};
use super::station_table::StationTables;
use super::{BlockSource, ObservationError};
use crate::fits::{FitsFile, Groups, Hdu, HduKind};

/// MJD 0 as a Julian Date.
pub(super) const MJD_ZERO: f64 = 2_400_000.5;

/// The tables whose EXTNAME ends in this word.
fn tables<'a>(file: &'a FitsFile, word: &'a str) -> impl Iterator<Item = &'a Hdu> {
    file.hdus().iter().filter(move |hdu| {
        hdu.kind == HduKind::BinaryTable && hdu.name().split_whitespace().last().is_some_and(|last| last == word)
    })
}

pub(super) fn open(
    file: FitsFile,
    selection: &Selection,
    options: ReadOptions,
) -> Result<Vec<Box<dyn BlockSource>>, ObservationError> {
    let path = file.path().to_path_buf();
    let complain = |problem: String, expected: &str| content(&path, problem, expected);
    let hdu = &file.hdus()[0];
    let header = &hdu.header;
    let fits = |problem: crate::fits::FitsProblem| problem.at(&path);
    let groups = Groups::new(hdu).map_err(fits)?;
    if groups.count == 0 {
        return Err(complain("GCOUNT = 0: the file holds no visibility".to_string(), "at least one group"));
    }

    let axes: Vec<Axis> = groups
        .axes
        .iter()
        .enumerate()
        .map(|(n, length)| Axis::read(header, n + 2, *length))
        .collect::<Result<_, _>>()
        .map_err(fits)?;
    let parameter_bytes = groups.parameters.len() * groups.number.size();
    let scale = header.float("BSCALE").map_err(fits)?.unwrap_or(1.0);
    let zero = header.float("BZERO").map_err(fits)?.unwrap_or(0.0);
    let blank = header.integer("BLANK").map_err(fits)?;
    let array_bytes = groups.group_bytes.saturating_sub(parameter_bytes);
    let matrix = Matrix::new(&axes, parameter_bytes, array_bytes, groups.number)
        .map_err(|(problem, expected)| content(&path, problem, expected))?
        .scaled(scale, zero, blank);

    let mut stations = StationTables::default();
    for table in tables(&file, "AN") {
        stations.add(&file, table)?;
    }
    if stations.stations.is_empty() {
        return Err(complain("there is no station table, or it is empty".to_string(), "a table named '... AN'"));
    }

    let quantity = |name: &str| Quantity::of_groups(&groups, name);
    let need = |name: &str| {
        quantity(name).ok_or_else(|| {
            let all: Vec<&str> = groups.parameters.iter().map(|p| p.name.as_str()).collect();
            content(
                &path,
                format!("no group parameter {name} among {}", all.join(", ")),
                "UU, VV, WW, BASELINE, DATE",
            )
        })
    };
    let pair = match (quantity("BASELINE"), quantity("ANTENNA1"), quantity("ANTENNA2")) {
        (Some(baseline), _, _) => Pair::Baseline(baseline),
        (None, Some(first), Some(second)) => Pair::Two(first, second),
        _ => Pair::Baseline(need("BASELINE")?),
    };
    let segment = Segment {
        start: groups.start,
        row_bytes: groups.group_bytes,
        rows: groups.count,
        row_name: "group".to_string(),
        uvw: [need("UU")?, need("VV")?, need("WW")?],
        pair,
        subarray: quantity("SUBARRAY"),
        mjd: need("DATE")?.shifted(stations.to_utc_s / 86_400.0).shifted(-MJD_ZERO),
        source: quantity("SOURCE"),
        set_up: quantity("FREQSEL"),
        matrix,
    };

    let mut notes = Vec::new();
    let axis = |name: &str| axes.iter().find(|axis| axis.name == name);
    let Some(freq) = axis("FREQ") else { return Err(complain("no FREQ axis".to_string(), "one")) };
    let reference = Reference { hz: freq.value, pixel: freq.pixel, step_hz: freq.step };
    let set_ups = match tables(&file, "FQ").next() {
        Some(table) => read_set_ups(&file, table, segment.matrix.bands)?,
        None => Vec::new(),
    };
    let sources = match tables(&file, "SU").next() {
        Some(table) => read_sources(&file, table, segment.matrix.bands, &mut notes)?,
        None => {
            let name = header.text("OBJECT").map_err(fits)?.unwrap_or_default();
            let (Some(ra), Some(dec)) = (axis("RA"), axis("DEC")) else {
                return Err(complain("no RA and DEC axes, and no source table".to_string(), "either"));
            };
            let equinox = match header.float("EQUINOX").map_err(fits)? {
                None => header.float("EPOCH").map_err(fits)?,
                stated => stated,
            };
            check_equinox(&path, equinox, "the phase centre", &mut notes)?;
            let phase_centre = direction(&path, "the phase centre", ra.at(0), dec.at(0))?;
            let aim = match (header.float("OBSRA").map_err(fits)?, header.float("OBSDEC").map_err(fits)?) {
                (Some(ra), Some(dec)) => direction(&path, "the pointing (OBSRA, OBSDEC)", ra, dec)?,
                _ => phase_centre,
            };
            vec![Source { id: 0, name, phase_centre, aim, shift_hz: Vec::new() }]
        }
    };
    let array_name = header.text("TELESCOP").map_err(fits)?.unwrap_or_else(|| stations.array_name.clone());
    let parts = Parts { segments: vec![segment], stations, set_ups, reference, sources, array_name, notes, file };
    assemble(parts, selection, options)
}
