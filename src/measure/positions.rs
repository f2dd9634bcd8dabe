//! Lists of places to measure: the columns of a component list, of which only name and place are needed, or those of
//! `sources.csv`, so that what one run found can be measured by another.

use crate::sky::Direction;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use thiserror::Error;

/// A place to measure.
#[derive(Debug, Clone, PartialEq)]
pub struct Position {
    /// Name; no two alike.
    pub name: String,
    /// Where.
    pub direction: Direction,
    /// Spectral index, when the list gives one.
    pub spectral_index: Option<f64>,
}

/// Why a list of places was refused.
#[derive(Debug, Error)]
pub enum PositionsError {
    /// The file could not be read as a table.
    #[error("{}: {source}; expected a CSV table with the columns name, ra_deg, dec_deg", path.display())]
    Csv {
        /// The file.
        path: PathBuf,
        /// What the reader said, with the row.
        source: csv::Error,
    },
    /// A column that must be there, or nobody knows.
    #[error("{}: column {column}: {problem}; expected {expected}", path.display())]
    Column {
        /// The file.
        path: PathBuf,
        /// Heading.
        column: String,
        /// What is wrong.
        problem: String,
        /// What should stand there.
        expected: String,
    },
    /// A cell that cannot stand there.
    #[error("{}: row {row}, column {column}: {found:?} is not {expected}", path.display())]
    Cell {
        /// The file.
        path: PathBuf,
        /// Row, 1 is the first after the heading.
        row: usize,
        /// Heading.
        column: &'static str,
        /// What stands there.
        found: String,
        /// What should.
        expected: String,
    },
    /// No rows.
    #[error("{}: no rows; expected at least one place to measure", path.display())]
    Empty {
        /// The file.
        path: PathBuf,
    },
}

const NEEDED: [&str; 3] = ["name", "ra_deg", "dec_deg"];

/// Reads a list of places. Columns `name`, `ra_deg`, `dec_deg`, and `spectral_index` when it is there; other columns of a
/// component list and of `sources.csv` (`known`) are passed over, any other is refused: it may be one of these misspelt.
///
/// # Errors
/// Naming file, row and column of the first thing that is wrong.
pub fn read_positions(path: &Path, known: &[&str]) -> Result<Vec<Position>, PositionsError> {
    let csv_error = |source| PositionsError::Csv { path: path.to_owned(), source };
    let mut reader =
        csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).from_path(path).map_err(csv_error)?;
    let headings: Vec<String> = reader
        .headers()
        .map_err(csv_error)?
        .iter()
        .map(|heading| heading.trim_start_matches('\u{feff}').to_owned())
        .collect();
    let column = |column: &str, problem: &str, expected: String| PositionsError::Column {
        path: path.to_owned(),
        column: column.to_owned(),
        problem: problem.to_owned(),
        expected,
    };
    let others = ["flux_jy", "reference_hz", "spectral_index"];
    for (index, heading) in headings.iter().enumerate() {
        let all = NEEDED.iter().chain(&others).chain(known);
        if !all.clone().any(|k| k == heading) {
            let nearest = all
                .map(|k| (strsim::jaro_winkler(heading, k), k))
                .max_by(|a, b| a.0.total_cmp(&b.0))
                .filter(|(score, _)| *score > 0.75)
                .map_or(String::new(), |(_, k)| format!(" (did you mean {k}?)"));
            let expected = "name, ra_deg, dec_deg, spectral_index, or a column of sources.csv".to_owned();
            return Err(column(heading, &format!("unknown{nearest}"), expected));
        }
        if headings[..index].contains(heading) {
            return Err(column(heading, "stands there twice", "every column once".to_owned()));
        }
    }
    for needed in NEEDED {
        if !headings.iter().any(|h| h == needed) {
            return Err(column(needed, "missing", format!("it beside {}", headings.join(", "))));
        }
    }
    let mut positions = Vec::new();
    let mut names: BTreeMap<String, usize> = BTreeMap::new();
    for (index, record) in reader.records().enumerate() {
        let record = record.map_err(csv_error)?;
        let row = index + 1;
        let cell = |name: &str| headings.iter().position(|h| h == name).and_then(|i| record.get(i)).unwrap_or("");
        let bad = |column: &'static str, expected: &str| PositionsError::Cell {
            path: path.to_owned(),
            row,
            column,
            found: cell(column).to_owned(),
            expected: expected.to_owned(),
        };
        let number = |column: &'static str, expected: &str, accepts: &dyn Fn(f64) -> bool| {
            let value = cell(column).parse::<f64>().ok().filter(|v| v.is_finite() && accepts(*v));
            value.ok_or_else(|| bad(column, expected))
        };
        let name = cell("name").to_owned();
        if name.is_empty() || name.chars().any(char::is_control) {
            return Err(bad("name", "a name"));
        }
        if let Some(first) = names.insert(name.clone(), row) {
            return Err(bad("name", &format!("a name of its own: row {first} has it too")));
        }
        let ra = number("ra_deg", "a right ascension in degrees, -360 to 360", &|v| v.abs() <= 360.0)?;
        let dec = number("dec_deg", "a declination in degrees, -90 to 90", &|v| v.abs() <= 90.0)?;
        let spectral_index = match cell("spectral_index") {
            "" => None,
            _ => Some(number("spectral_index", "a spectral index, -10 to 10", &|v| v.abs() <= 10.0)?),
        };
        positions.push(Position { name, direction: Direction::from_deg(ra, dec), spectral_index });
    }
    if positions.is_empty() {
        return Err(PositionsError::Empty { path: path.to_owned() });
    }
    Ok(positions)
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::io::Write;

    fn read(text: &str) -> Result<Vec<Position>, PositionsError> {
        let mut file = tempfile::NamedTempFile::new().unwrap();
        file.write_all(text.as_bytes()).unwrap();
        read_positions(file.path(), &["response", "flux_error_jy"])
    }

    #[test]
    fn component_lists_and_source_lists_are_read() {
        let sky = "name,ra_deg,dec_deg,flux_jy,reference_hz,spectral_index\n# remark\nA, 10.5, -20, 1.5, 1e9, -1\nB, 0, 90,,,\n";
        let read_sky = read(sky).unwrap();
        assert_eq!(read_sky.len(), 2);
        assert_eq!((read_sky[0].name.as_str(), read_sky[0].spectral_index), ("A", Some(-1.0)));
        assert_eq!((read_sky[1].direction.to_deg().1, read_sky[1].spectral_index), (90.0, None));
        assert_eq!(read("response,dec_deg,ra_deg,name\n0.5,2,1,A\n").unwrap()[0].name, "A");
    }

    #[test]
    fn what_is_wrong_is_named() {
        let heading = "name,ra_deg,dec_deg,spectral_index\n";
        for (text, said) in [
            ("name,ra_deg\nA,1\n".to_owned(), "column dec_deg: missing"),
            ("name,ra_deg,dec_deg,spectral_indx\nA,1,2,3\n".to_owned(), "did you mean spectral_index?"),
            ("name,ra_deg,dec_deg,dec_deg\nA,1,2,3\n".to_owned(), "column dec_deg: stands there twice"),
            (format!("{heading}A,1,2,0\n,1,2,0\n"), "row 2, column name: \"\""),
            (format!("{heading}A,1,2,0\nA,3,2,0\n"), "row 1 has it too"),
            (format!("{heading}A,400,2,0\n"), "row 1, column ra_deg: \"400\""),
            (format!("{heading}A,1,NaN,0\n"), "row 1, column dec_deg: \"NaN\""),
            (format!("{heading}A,1,91,0\n"), "row 1, column dec_deg: \"91\""),
            (format!("{heading}A,1,2,steep\n"), "row 1, column spectral_index: \"steep\""),
            (format!("{heading}A,1,2,1e3\n"), "row 1, column spectral_index"),
            (format!("{heading}A,1,2\n"), "line: 2"),
            (heading.to_owned(), "no rows"),
            (String::new(), "column name: missing"),
        ] {
            let error = read(&text).unwrap_err().to_string();
            assert!(error.contains(said), "{text:?} gave {error:?}");
        }
        assert!(read_positions(Path::new("no such.csv"), &[]).unwrap_err().to_string().starts_with("no such.csv:"));
    }
}
