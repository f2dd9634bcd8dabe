//! FITS-IDI visibility files: binary tables after the registered convention.

use super::fields::{Quantity, stem};
use super::file_source::{Pair, Segment};
use super::frequencies::{Reference, read_set_ups};
use super::matrix::{Axis, Matrix, WeightColumn};
use super::open::{ReadOptions, Selection, content};
use super::pointings::{Parts, assemble, read_sources};
use super::random_groups::MJD_ZERO;
use super::station_table::StationTables;
use super::{BlockSource, ObservationError, SPEED_OF_LIGHT};
use crate::fits::{Column, ColumnKind, FitsFile, FitsProblem, Hdu, Table};
use std::path::Path;

fn tables<'a>(file: &'a FitsFile, name: &'a str) -> impl Iterator<Item = &'a Hdu> {
    file.hdus().iter().filter(move |hdu| hdu.name() == name)
}

fn need<'a>(file: &'a FitsFile, name: &'a str) -> Result<&'a Hdu, ObservationError> {
    tables(file, name).next().ok_or_else(|| {
        let all: Vec<String> = file.hdus()[1..].iter().map(Hdu::name).collect();
        content(file.path(), format!("no {name} table among {}", all.join(", ")), "a table of that name")
    })
}

pub(super) fn open(
    file: FitsFile,
    selection: &Selection,
    options: ReadOptions,
) -> Result<Vec<Box<dyn BlockSource>>, ObservationError> {
    let path = file.path().to_path_buf();
    let mut stations = StationTables::default();
    need(&file, "ARRAY_GEOMETRY")?;
    for table in tables(&file, "ARRAY_GEOMETRY") {
        stations.add(&file, table)?;
    }
    for table in tables(&file, "ANTENNA") {
        stations.add_feeds(&file, table)?;
    }
    let mut notes = Vec::new();
    let mut segments: Vec<Segment> = Vec::new();
    let mut empty = 0;
    let mut reference = None;
    for hdu in tables(&file, "UV_DATA") {
        let (segment, this) = read_layout(&path, hdu, stations.to_utc_s)?;
        if segment.rows == 0 {
            empty += 1;
            continue;
        }
        if let Some(first) = segments.first() {
            let shape = |s: &Segment| (s.matrix.bands, s.matrix.channels_per_band, s.matrix.hands.clone());
            if shape(first) != shape(&segment) || reference != Some(this) {
                let problem =
                    format!("{}: other channels or hands than the first UV_DATA table", hdu.header.label());
                return Err(content(&path, problem, "the same in all"));
            }
        }
        reference = Some(this);
        segments.push(segment);
    }
    let (Some(reference), Some(first)) = (reference, segments.first()) else {
        return Err(content(&path, "the UV_DATA tables have no rows (NAXIS2 = 0)", "at least one visibility"));
    };
    // One note for all tables: a file may have thousands.
    if empty > 0 {
        notes.push(format!("{empty} UV_DATA tables have no rows"));
    }
    if segments.iter().any(|s| s.matrix.has_both_weights()) {
        notes.push("weights stand in the data and in a WEIGHT column; the column only flags".to_string());
    }
    let bands = first.matrix.bands;
    let set_ups = read_set_ups(&file, need(&file, "FREQUENCY")?, bands)?;
    if set_ups.is_empty() {
        return Err(content(&path, "the FREQUENCY table has no rows", "at least one"));
    }
    let sources = read_sources(&file, need(&file, "SOURCE")?, bands, &mut notes)?;
    let array_name = match file.hdus()[0].header.text("TELESCOP").map_err(|e| e.at(&path))? {
        Some(name) if !name.is_empty() => name,
        _ => stations.array_name.clone(),
    };
    assemble(Parts { segments, stations, set_ups, reference, sources, array_name, notes, file }, selection, options)
}

/// The layout of one UV_DATA table.
fn read_layout(path: &Path, hdu: &Hdu, to_utc_s: f64) -> Result<(Segment, Reference), ObservationError> {
    let fits = |problem: FitsProblem| problem.at(path);
    let header = &hdu.header;
    let table = Table::new(hdu).map_err(fits)?;
    let label = table.label.clone();
    let complain = |problem: String, expected: String| content(path, format!("{label}: {problem}"), expected);

    let (flux, kind) = flux_column(&table, hdu).map_err(fits)?;
    let dimensions = header.count("MAXIS").map_err(fits)?;
    if !(1..=99).contains(&dimensions) {
        return Err(fits(header.complain("MAXIS", "1 to 99")).into());
    }
    let mut axes = Vec::new();
    for n in 1..=dimensions as usize {
        let keyword = format!("MAXIS{n}");
        let length = header.count(&keyword).map_err(fits)?;
        let length = usize::try_from(length).map_err(|_| fits(header.complain(&keyword, "a smaller number")))?;
        axes.push(Axis::read(header, n, length).map_err(fits)?);
    }
    let mut matrix = Matrix::new(&axes, flux.offset, flux.width, kind)
        .map_err(|(problem, expected)| complain(problem, expected))?
        .scaled(flux.scale, flux.zero, flux.null);
    if let Some(column) = table.find(&["WEIGHT"]).filter(|c| c.repeat > 0)
        && let ColumnKind::Number(kind) = column.kind
    {
        let weights = WeightColumn { offset: column.offset, kind, count: column.repeat };
        matrix = matrix.weighted(weights).map_err(|(problem, expected)| complain(problem, expected))?;
    }
    for (keyword, length) in
        [("NO_STKD", matrix.hands.len()), ("NO_BAND", matrix.bands), ("NO_CHAN", matrix.channels_per_band)]
    {
        if header.integer(keyword).map_err(fits)?.is_some_and(|stated| stated != length as i64) {
            return Err(fits(header.complain(keyword, &format!("{length}, the length of its MAXIS"))).into());
        }
    }

    let freq = axes.iter().find(|axis| axis.name == "FREQ");
    let number = |keyword: &str, axis: fn(&Axis) -> f64| -> Result<f64, ObservationError> {
        Ok(header.float(keyword).map_err(fits)?.or(freq.map(axis)).unwrap_or(f64::NAN))
    };
    let reference = Reference {
        hz: number("REF_FREQ", |axis| axis.value)?,
        pixel: number("REF_PIXL", |axis| axis.pixel)?,
        step_hz: number("CHAN_BW", |axis| axis.step)?,
    };

    let coordinate = |name: &str| -> Result<Quantity, ObservationError> {
        let column = table.columns.iter().find(|c| stem(&c.name) == name);
        let quantity = column.and_then(|column| {
            let unit = column.unit.trim().to_ascii_uppercase();
            let to_seconds = match unit.as_str() {
                "M" | "METERS" | "METRES" | "METER" | "METRE" => 1.0 / SPEED_OF_LIGHT,
                "WAVELENGTHS" | "WAVELENGTH" | "LAMBDA" => 1.0 / reference.hz,
                _ => 1.0,
            };
            Quantity::of_column(column).map(|quantity| quantity.scaled(to_seconds))
        });
        quantity
            .ok_or_else(|| complain(format!("no column {name} of numbers"), "UU, VV and WW, seconds".to_string()))
    };
    let column = |names: &[&str]| table.find(names).and_then(Quantity::of_column);
    let pair = column(&["BASELINE"])
        .map(Pair::Baseline)
        .ok_or_else(|| complain("no column BASELINE of numbers".to_string(), "one".to_string()))?;
    let mjd = match (column(&["DATE"]), column(&["TIME"])) {
        (Some(date), Some(time)) => date.plus(time),
        (Some(date), None) => date,
        (None, Some(time)) => {
            let stated = header.text("RDATE").map_err(fits)?.or(header.text("DATE-OBS").map_err(fits)?);
            let day = stated.as_deref().and_then(mjd_of_date).ok_or_else(|| {
                complain("TIME without DATE, and no RDATE or DATE-OBS".to_string(), "a date".to_string())
            })?;
            time.shifted(MJD_ZERO + day)
        }
        (None, None) => return Err(complain("no columns DATE and TIME".to_string(), "both, in days".to_string())),
    };
    let segment = Segment {
        start: table.start,
        row_bytes: table.row_bytes,
        rows: table.rows,
        row_name: format!("{label}: row"),
        uvw: [coordinate("UU")?, coordinate("VV")?, coordinate("WW")?],
        pair,
        subarray: column(&["ARRAY"]),
        mjd: mjd.shifted(to_utc_s / 86_400.0).shifted(-MJD_ZERO),
        source: column(&["SOURCE", "SOURCE_ID"]),
        set_up: column(&["FREQID"]),
        matrix,
    };
    Ok((segment, reference))
}

/// The column that holds the array: marked by TMATXn, or named FLUX.
fn flux_column<'a>(table: &'a Table, hdu: &Hdu) -> Result<(&'a Column, crate::fits::NumberKind), FitsProblem> {
    let mut marked = None;
    for (n, column) in table.columns.iter().enumerate() {
        if hdu.header.logical(&format!("TMATX{}", n + 1))? == Some(true) {
            marked = Some(column);
        }
    }
    let column = marked.or_else(|| table.find(&["FLUX"]));
    match column.map(|c| (c, c.kind)) {
        Some((column, ColumnKind::Number(kind))) => Ok((column, kind)),
        other => Err(FitsProblem::Column {
            hdu: table.label.clone(),
            column: "FLUX".to_string(),
            found: other.map_or("no such column".to_string(), |(c, _)| c.describe()),
            expected: "a column of numbers, marked by TMATXn = T or named FLUX".to_string(),
        }),
    }
}

/// Modified Julian Date at 0h of `YYYY-MM-DD…` or of the old `DD/MM/YY`.
fn mjd_of_date(text: &str) -> Option<f64> {
    let number = |part: &str| part.trim().parse::<i64>().ok();
    let (year, month, day) = if let [day, month, year] = text.split('/').collect::<Vec<_>>()[..] {
        (1900 + number(year)?, number(month)?, number(day)?)
    } else {
        let [year, month, day] = text.get(..10)?.split('-').collect::<Vec<_>>()[..] else { return None };
        (number(year)?, number(month)?, number(day)?)
    };
    if !((1..=12).contains(&month) && (1..=31).contains(&day) && (1583..=9999).contains(&year)) {
        return None;
    }
    // Days of the Gregorian calendar, counted from 1 March of year 0: the leap day ends the year.
    let (y, m) = if month > 2 { (year, month - 3) } else { (year - 1, month + 9) };
    let days = 365 * y + y / 4 - y / 100 + y / 400 + (153 * m + 2) / 5 + day - 1;
    Some((days - 678_881) as f64)
}

#[cfg(test)]
mod tests {
    use super::mjd_of_date;

    /// MJD 51544.0 is 2000-01-01 and MJD 60000 is 2023-02-25 (astropy.time.Time(…).mjd).
    #[test]
    fn dates_become_days() {
        assert_eq!(mjd_of_date("2000-01-01"), Some(51544.0));
        assert_eq!(mjd_of_date("2023-02-25T12:00:00"), Some(60000.0));
        assert_eq!(mjd_of_date("17/11/58"), Some(36524.0));
        for bad in ["", "2000", "2000-13-01", "yesterday at noon", "1/2"] {
            assert_eq!(mjd_of_date(bad), None, "{bad}");
        }
    }
}
