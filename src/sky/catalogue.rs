//! Component lists in CSV: `name, ra_deg, dec_deg, flux_jy, reference_hz, spectral_index`.

use super::{Component, Direction};
use serde::Deserialize;
use std::path::{Path, PathBuf};
use thiserror::Error;

/// Why a component list could not be read.
#[derive(Debug, Error)]
pub enum CatalogueError {
    /// The file could not be opened or a row has the wrong shape.
    #[error("{}: {source}; expected the columns name, ra_deg, dec_deg, flux_jy, and optionally reference_hz, spectral_index", path.display())]
    Csv {
        /// The file.
        path: PathBuf,
        /// What the CSV reader said, with the row.
        source: csv::Error,
    },
    /// A number outside its range.
    #[error("{}: row {row}, column {column}: {value} is not {expected}", path.display())]
    Value {
        /// The file.
        path: PathBuf,
        /// Row, 1 is the first after the heading.
        row: usize,
        /// Column heading.
        column: &'static str,
        /// What stands there.
        value: f64,
        /// What should stand there.
        expected: &'static str,
    },
}

// A misspelt optional column must not silently flatten every spectrum.
#[derive(Deserialize)]
#[serde(deny_unknown_fields)]
struct Row {
    name: String,
    ra_deg: f64,
    dec_deg: f64,
    flux_jy: f64,
    reference_hz: Option<f64>,
    spectral_index: Option<f64>,
}

/// Reads a component list. Without `reference_hz` a spectrum must be flat.
///
/// # Errors
/// When the file cannot be read, a column is missing or unknown, or a number is outside its range; the row is named.
pub fn read_components(path: &Path) -> Result<Vec<Component>, CatalogueError> {
    let csv_error = |source| CatalogueError::Csv { path: path.to_owned(), source };
    let mut reader =
        csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).from_path(path).map_err(csv_error)?;
    let mut components = Vec::new();
    for (index, row) in reader.deserialize::<Row>().enumerate() {
        let row = row.map_err(csv_error)?;
        let check = |column, value: f64, good: bool, expected| {
            if good {
                Ok(())
            } else {
                Err(CatalogueError::Value { path: path.to_owned(), row: index + 1, column, value, expected })
            }
        };
        let index_or_flat = row.spectral_index.unwrap_or(0.0);
        let reference = row.reference_hz.unwrap_or(1.0);
        check(
            "ra_deg",
            row.ra_deg,
            row.ra_deg.is_finite() && row.ra_deg.abs() <= 360.0,
            "a right ascension in degrees",
        )?;
        check("dec_deg", row.dec_deg, row.dec_deg.abs() <= 90.0, "a declination from -90 to 90 degrees")?;
        check("flux_jy", row.flux_jy, row.flux_jy.is_finite(), "a flux density")?;
        check("spectral_index", index_or_flat, index_or_flat.is_finite(), "a finite number")?;
        check("reference_hz", reference, reference.is_finite() && reference > 0.0, "a positive frequency")?;
        let spectrum_has_reference = row.reference_hz.is_some() || index_or_flat == 0.0;
        check("spectral_index", index_or_flat, spectrum_has_reference, "usable without a reference_hz beside it")?;
        components.push(Component {
            name: row.name,
            direction: Direction::from_deg(row.ra_deg, row.dec_deg),
            flux_jy: row.flux_jy,
            reference_hz: reference,
            spectral_index: index_or_flat,
        });
    }
    Ok(components)
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::io::Write;

    fn read(text: &str) -> Result<Vec<Component>, CatalogueError> {
        let mut file = tempfile::NamedTempFile::new().unwrap();
        file.write_all(text.as_bytes()).unwrap();
        read_components(file.path())
    }

    #[test]
    fn reads_spectra_comments_and_absent_columns() {
        let sky = read(
            "name, ra_deg, dec_deg, flux_jy, reference_hz, spectral_index\n# a remark\nA, 10.5, -20, 1.5, 1e9, -1\nB, 0, 90, -2, ,\n",
        )
        .unwrap();
        assert_eq!((sky[0].name.as_str(), sky[0].flux_at(2e9)), ("A", 0.75));
        assert_eq!(sky[1].flux_at(5e9), -2.0);
        assert_eq!(read("name,ra_deg,dec_deg,flux_jy\nA,1,2,3\n").unwrap()[0].flux_at(1e9), 3.0);
    }

    /// What is wrong must be named, with its row.
    #[test]
    fn names_what_is_wrong() {
        let heading = "name,ra_deg,dec_deg,flux_jy,reference_hz,spectral_index\n";
        for (text, said) in [
            ("name,ra_deg,dec_deg\nA,1,2\n".to_owned(), "flux_jy"),
            ("name,ra_deg,dec_deg,flux_jy,spectral_idx\nA,1,2,3,-1\n".to_owned(), "spectral_idx"),
            (format!("{heading}A,1,2,3,1e9,0\nB,1,91,3,1e9,0\n"), "row 2, column dec_deg: 91"),
            (format!("{heading}A,1,NaN,3,1e9,0\n"), "dec_deg"),
            (format!("{heading}A,inf,2,3,1e9,0\n"), "ra_deg"),
            (format!("{heading}A,1,2,NaN,1e9,0\n"), "flux_jy"),
            (format!("{heading}A,1,2,3,0,-0.7\n"), "reference_hz"),
            (format!("{heading}A,1,2,3,,-0.7\n"), "reference_hz"),
            (format!("{heading}A,1,2,three,1e9,0\n"), "line: 2"),
            (format!("{heading}A,1,2\n"), "line: 2"),
        ] {
            let error = read(&text).unwrap_err().to_string();
            assert!(error.contains(said), "{text:?} gave {error:?}");
        }
        let missing = read_components(Path::new("no such sky.csv")).unwrap_err().to_string();
        assert!(missing.starts_with("no such sky.csv:"), "{missing}");
    }
}
