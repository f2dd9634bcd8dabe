//! CSV tables that a run file names: the station table (who has which beam) and the station layout (who stands where).

use super::{Complaint, Problem};
use serde::Serialize;
use std::path::{Path, PathBuf};

/// The rows of `station_table`.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StationTable {
    /// The file.
    pub path: PathBuf,
    /// Its rows; no name twice.
    pub rows: Vec<StationRow>,
}

/// One row of the station table.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StationRow {
    /// Line in the file.
    #[serde(skip)]
    pub line: usize,
    /// Station name.
    pub name: String,
    /// Name of its beam; `None` when the cell is empty or there is no such column.
    pub beam: Option<String>,
    /// Pointing offset in the station frame, arcminutes; `None` when the cells are empty or there are no such columns.
    pub pointing_arcmin: Option<[f64; 2]>,
}

impl StationTable {
    /// The row of a station.
    pub fn row(&self, name: &str) -> Option<&StationRow> {
        self.rows.iter().find(|row| row.name == name)
    }
}

/// How a simulated station follows the sky.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum LayoutMount {
    /// Alt-azimuth.
    AltAzimuth,
    /// Equatorial.
    Equatorial,
}

/// One station of a layout: a place about the site.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct LayoutStation {
    /// Name.
    pub name: String,
    /// East, north, up of the site, metres.
    pub east_north_up_m: [f64; 3],
    /// Mount.
    pub mount: LayoutMount,
    /// Dish diameter, metres.
    pub diameter_m: Option<f64>,
}

/// A circle on the sky.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Circle {
    /// Right ascension and declination of its centre (ICRS), degrees.
    pub centre_deg: [f64; 2],
    /// Radius, arcseconds.
    pub radius_arcsec: f64,
}

/// A CSV file with a heading, its cells reached by column name.
struct Csv<'p> {
    path: &'p Path,
    headings: Vec<String>,
    complaints: Vec<Complaint>,
}

impl<'p> Csv<'p> {
    /// Hands each row to `each`, which returns `None` after it complained.
    fn read<T>(
        path: &'p Path,
        needed: &[&str],
        known: &[&str],
        mut each: impl FnMut(&mut Csv, usize, &csv::StringRecord) -> Option<T>,
    ) -> Result<Vec<T>, Vec<Complaint>> {
        let expected = format!("a CSV table with the columns {}", known.join(", "));
        let failed = |line: usize, error: &dyn std::fmt::Display| {
            vec![Complaint::new(path, line, "", Problem::value(error.to_string(), expected.clone()))]
        };
        let content = std::fs::read(path).map_err(|error| failed(1, &error))?;
        let mut reader =
            csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).from_reader(content.as_slice());
        let headings: Vec<String> = reader
            .headers()
            .map_err(|error| failed(1, &error))?
            .iter()
            .map(|heading| heading.trim_start_matches('\u{feff}').to_owned())
            .collect();
        let mut table = Csv { path, headings, complaints: Vec::new() };
        for &column in needed {
            match table.headings.iter().filter(|heading| *heading == column).count() {
                1 => {}
                0 => {
                    let found = table.headings.join(", ");
                    table.complain(1, column, Problem::value(format!("the columns {found}"), expected.clone()));
                }
                _ => table.complain(1, column, Problem::value("the column twice", "it once")),
            }
        }
        if !table.complaints.is_empty() {
            return Err(table.complaints);
        }
        let mut rows = Vec::new();
        for record in reader.records() {
            match record {
                Ok(record) => {
                    let line = record.position().map_or(1, |position| line_from(&content, position.byte()));
                    rows.extend(each(&mut table, line, &record));
                }
                Err(error) => {
                    let line = error.position().map_or(1, |position| line_from(&content, position.byte()));
                    let found = match error.kind() {
                        csv::ErrorKind::UnequalLengths { expected_len, len, .. } => {
                            format!("{len} cells under {expected_len} headings")
                        }
                        _ => error.to_string(),
                    };
                    table.complain(line, "", Problem::value(found, "one cell for every heading, in UTF-8"));
                }
            }
        }
        if rows.is_empty() && table.complaints.is_empty() {
            table.complain(1, "", Problem::value("no rows", expected));
        }
        if table.complaints.is_empty() { Ok(rows) } else { Err(table.complaints) }
    }

    fn complain(&mut self, line: usize, column: &str, problem: Problem) {
        self.complaints.push(Complaint::new(self.path, line, column, problem));
    }

    /// The cell of a column; `None` when it is empty or there is no such column.
    fn cell<'r>(&self, record: &'r csv::StringRecord, column: &str) -> Option<&'r str> {
        let index = self.headings.iter().position(|heading| heading == column)?;
        record.get(index).filter(|cell| !cell.is_empty())
    }

    fn name(&mut self, line: usize, record: &csv::StringRecord) -> Option<String> {
        let name = self.cell(record, "name").map(str::to_owned);
        if name.is_none() {
            self.complain(line, "name", Problem::value("an empty cell", "the station's name"));
        }
        name
    }

    /// A number that `accepts` takes: `Ok(None)` for an empty cell, `Err` after a complaint.
    fn number(
        &mut self,
        line: usize,
        record: &csv::StringRecord,
        column: &str,
        expected: &str,
        accepts: impl Fn(f64) -> bool,
    ) -> Result<Option<f64>, ()> {
        let Some(cell) = self.cell(record, column) else { return Ok(None) };
        match cell.parse::<f64>() {
            Ok(number) if number.is_finite() && accepts(number) => Ok(Some(number)),
            _ => {
                self.complain(line, column, Problem::value(format!("{cell:?}"), expected));
                Err(())
            }
        }
    }

    /// Complaints about names that stand in two rows.
    fn repeated<'n>(path: &Path, names: impl Iterator<Item = (usize, &'n str)>) -> Vec<Complaint> {
        let mut seen = std::collections::BTreeMap::new();
        names
            .filter_map(|(line, name)| {
                let first = *seen.entry(name).or_insert(line);
                (first != line).then(|| {
                    let found = format!("{name:?}, which also stands on line {first}");
                    Complaint::new(path, line, "name", Problem::value(found, "every station once"))
                })
            })
            .collect()
    }
}

/// The line of the first row at or after a byte: the reader counts from the end of the row before, so blank lines and
/// comments lie between.
fn line_from(content: &[u8], byte: u64) -> usize {
    let start = usize::try_from(byte).map_or(content.len(), |byte| byte.min(content.len()));
    let before = content[..start].iter().filter(|&&b| b == b'\n').count();
    let skipped = content[start..]
        .split(|&b| b == b'\n')
        .take_while(|line| line.is_empty() || line == b"\r" || line.starts_with(b"#"));
    1 + before + skipped.count()
}

/// Reads a station table: columns `name` and any of `beam`, `pointing_x_arcmin`, `pointing_y_arcmin`; others are left
/// alone, so that one file can hold positions too.
pub(super) fn read_station_table(path: &Path) -> Result<StationTable, Vec<Complaint>> {
    let known = ["name", "beam", "pointing_x_arcmin", "pointing_y_arcmin"];
    let rows = Csv::read(path, &known[..1], &known, |table, line, record| {
        let name = table.name(line, record)?;
        let beam = table.cell(record, "beam").map(str::to_owned);
        let expected = "an offset in arcminutes, below 5400 (90 degrees)";
        let x = table.number(line, record, known[2], expected, |arcmin| arcmin.abs() < 5400.0);
        let y = table.number(line, record, known[3], expected, |arcmin| arcmin.abs() < 5400.0);
        let pointing_arcmin = match (x.ok()?, y.ok()?) {
            (None, None) => None,
            (x, y) => Some([x.unwrap_or(0.0), y.unwrap_or(0.0)]),
        };
        Some(StationRow { line, name, beam, pointing_arcmin })
    })?;
    let repeated = Csv::repeated(path, rows.iter().map(|row| (row.line, row.name.as_str())));
    if repeated.is_empty() { Ok(StationTable { path: path.to_owned(), rows }) } else { Err(repeated) }
}

/// Reads a station layout: columns `name`, `east_m`, `north_m`, `up_m`, and optionally `mount` (`alt-azimuth`, the
/// default, or `equatorial`) and `diameter_m`; others are left alone.
pub(super) fn read_layout(path: &Path) -> Result<Vec<LayoutStation>, Vec<Complaint>> {
    let known = ["name", "east_m", "north_m", "up_m", "mount", "diameter_m"];
    let rows = Csv::read(path, &known[..4], &known, |table, line, record| {
        let name = table.name(line, record);
        let mut place = [0.0; 3];
        let mut complete = true;
        for (value, column) in place.iter_mut().zip(&known[1..4]) {
            let expected = "a length in metres, less than an Earth radius";
            match table.number(line, record, column, expected, |m| m.abs() < 6.4e6) {
                Ok(Some(metres)) => *value = metres,
                Ok(None) => {
                    table.complain(line, column, Problem::value("an empty cell", expected));
                    complete = false;
                }
                Err(()) => complete = false,
            }
        }
        let mount = match table.cell(record, "mount") {
            None | Some("alt-azimuth") => Some(LayoutMount::AltAzimuth),
            Some("equatorial") => Some(LayoutMount::Equatorial),
            Some(other) => {
                let problem = Problem::value(format!("{other:?}"), "\"alt-azimuth\" or \"equatorial\"");
                table.complain(line, "mount", problem);
                None
            }
        };
        let expected = "the dish's diameter in metres, greater than 0";
        let diameter_m = table.number(line, record, "diameter_m", expected, |m| m > 0.0).ok()?;
        let station = LayoutStation { name: name?, east_north_up_m: place, mount: mount?, diameter_m };
        complete.then_some((line, station))
    })?;
    let mut complaints = Csv::repeated(path, rows.iter().map(|(line, station)| (*line, station.name.as_str())));
    if rows.len() < 2 {
        complaints.push(Complaint::new(path, 1, "name", Problem::value("one station", "at least two stations")));
    }
    if complaints.is_empty() { Ok(rows.into_iter().map(|(_, station)| station).collect()) } else { Err(complaints) }
}

/// Reads circles: columns `ra_deg`, `dec_deg`, `radius_arcsec`; others are left alone.
pub(super) fn read_circles(path: &Path) -> Result<Vec<Circle>, Vec<Complaint>> {
    let known = ["ra_deg", "dec_deg", "radius_arcsec"];
    Csv::read(path, &known, &known, |table, line, record| {
        let mut needed = |column: &str, expected: &str, accepts: fn(f64) -> bool| {
            let number = table.number(line, record, column, expected, accepts).ok()?;
            if number.is_none() {
                table.complain(line, column, Problem::value("an empty cell", expected));
            }
            number
        };
        let ra = needed("ra_deg", "a right ascension in degrees, -360 to 360", |deg| deg.abs() <= 360.0);
        let dec = needed("dec_deg", "a declination in degrees, -90 to 90", |deg| deg.abs() <= 90.0);
        let radius = needed("radius_arcsec", "a radius in arcseconds, greater than 0", |arcsec| arcsec > 0.0);
        Some(Circle { centre_deg: [ra?, dec?], radius_arcsec: radius? })
    })
}
