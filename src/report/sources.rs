//! The source list as tables: one list of columns, three formats (CSV, VOTable, FITS).

use super::votable::votable;
use super::whole_file::{WriteError, write_whole};
use crate::fits::{ColumnSpec, FitsError, FitsWriter, Header};
use crate::measure::{Ellipse, Source};
use nalgebra::DMatrix;
use std::io::Write;
use std::path::Path;
use thiserror::Error;

/// What a column holds for one source.
#[derive(Debug, Clone, PartialEq)]
pub enum Cell {
    /// Text.
    Text(String),
    /// A number; `None` when it was not measured.
    Number(Option<f64>),
    /// A count.
    Count(u32),
}

/// One column of the source list.
pub struct SourceColumn {
    /// Name: the heading in all formats.
    pub name: &'static str,
    /// Unit as VOTable and FITS write it; empty for a pure number.
    pub unit: &'static str,
    /// Unified Content Descriptor (IVOA UCD1+).
    pub ucd: &'static str,
    /// What it holds.
    pub what: &'static str,
    /// Its cell for a source.
    pub cell: fn(&Source) -> Cell,
}

fn degrees(angle: f64) -> f64 {
    angle.to_degrees()
}

fn arcsec(angle: f64) -> f64 {
    angle.to_degrees() * 3600.0
}

fn size(source: &Source, of: fn(&Ellipse) -> f64) -> Cell {
    Cell::Number(source.size.map(|size| of(&size.ellipse)))
}

fn size_error(source: &Source, of: fn(&Ellipse) -> f64) -> Cell {
    Cell::Number(source.size.map(|size| of(&size.error)))
}

fn deconvolved(source: &Source, of: fn(&Ellipse) -> f64) -> Cell {
    Cell::Number(source.deconvolved.as_ref().map(of))
}

/// The columns, in their order.
pub const SOURCE_COLUMNS: [SourceColumn; 27] = {
    const fn column(
        name: &'static str,
        unit: &'static str,
        ucd: &'static str,
        what: &'static str,
        cell: fn(&Source) -> Cell,
    ) -> SourceColumn {
        SourceColumn { name, unit, ucd, what, cell }
    }
    [
        column("name", "", "meta.id;meta.main", "name: the list's, or one made from the place", |s| {
            Cell::Text(s.name.clone())
        }),
        column("ra_deg", "deg", "pos.eq.ra;meta.main", "right ascension, ICRS", |s| {
            Cell::Number(Some(s.direction.to_deg().0))
        }),
        column("dec_deg", "deg", "pos.eq.dec;meta.main", "declination, ICRS", |s| {
            Cell::Number(Some(s.direction.to_deg().1))
        }),
        column(
            "flux_jy",
            "Jy",
            "phot.flux.density;em.radio",
            "integrated flux density at the reference frequency",
            |s| Cell::Number(s.flux_jy),
        ),
        column(
            "flux_error_jy",
            "Jy",
            "stat.error;phot.flux.density",
            "its standard error, thermal noise only",
            |s| Cell::Number(s.flux_error_jy),
        ),
        column("peak_jy_per_beam", "Jy/beam", "phot.flux.density;stat.max", "peak in the image", |s| {
            Cell::Number(s.peak_jy)
        }),
        column(
            "noise_jy_per_beam",
            "Jy/beam",
            "instr.det.noise",
            "standard deviation of the image's noise there",
            |s| Cell::Number(s.noise_jy),
        ),
        column("response", "", "instr.sensitivity", "lowest noise of the image over the noise there", |s| {
            Cell::Number(s.response)
        }),
        column(
            "east_error_arcsec",
            "arcsec",
            "stat.error;pos.eq.ra",
            "error of the place towards East, on the sky",
            |s| Cell::Number(s.place_error.map(|e| arcsec(e[0]))),
        ),
        column("north_error_arcsec", "arcsec", "stat.error;pos.eq.dec", "error of the place towards North", |s| {
            Cell::Number(s.place_error.map(|e| arcsec(e[1])))
        }),
        column("peak_error_jy_per_beam", "Jy/beam", "stat.error", "error of the peak", |s| {
            Cell::Number(s.peak_error_jy)
        }),
        column("pointings", "", "meta.number;obs", "number of pointings that see it", |s| {
            Cell::Count(u32::try_from(s.pointings).unwrap_or(u32::MAX))
        }),
        column(
            "spectral_index",
            "",
            "spect.index",
            "alpha of S ~ frequency^alpha: fitted, given or assumed",
            |s| Cell::Number(Some(s.spectral_index)),
        ),
        column("spectral_index_error", "", "stat.error;spect.index", "its error where it was fitted", |s| {
            Cell::Number(s.spectral_index_error)
        }),
        column(
            "major_arcsec",
            "arcsec",
            "phys.angSize.smajAxis",
            "fitted full width at half maximum, major axis",
            |s| size(s, |e| arcsec(e.major)),
        ),
        column(
            "minor_arcsec",
            "arcsec",
            "phys.angSize.sminAxis",
            "fitted full width at half maximum, minor axis",
            |s| size(s, |e| arcsec(e.minor)),
        ),
        column(
            "position_angle_deg",
            "deg",
            "pos.posAng",
            "of the major axis, North through East, in the image",
            |s| size(s, |e| degrees(e.position_angle)),
        ),
        column("major_error_arcsec", "arcsec", "stat.error", "error of the major axis", |s| {
            size_error(s, |e| arcsec(e.major))
        }),
        column("minor_error_arcsec", "arcsec", "stat.error", "error of the minor axis", |s| {
            size_error(s, |e| arcsec(e.minor))
        }),
        column("position_angle_error_deg", "deg", "stat.error", "error of the position angle", |s| {
            size_error(s, |e| degrees(e.position_angle))
        }),
        column(
            "deconvolved_major_arcsec",
            "arcsec",
            "phys.angSize.smajAxis",
            "major axis with the beam taken out",
            |s| deconvolved(s, |e| arcsec(e.major)),
        ),
        column(
            "deconvolved_minor_arcsec",
            "arcsec",
            "phys.angSize.sminAxis",
            "minor axis with the beam taken out",
            |s| deconvolved(s, |e| arcsec(e.minor)),
        ),
        column(
            "deconvolved_position_angle_deg",
            "deg",
            "pos.posAng",
            "position angle with the beam taken out",
            |s| deconvolved(s, |e| degrees(e.position_angle)),
        ),
        column("signal_to_noise", "", "stat.snr", "flux density over its error", |s| {
            Cell::Number(s.flux_jy.zip(s.flux_error_jy).map(|(flux, error)| flux / error))
        }),
        column("reference_hz", "Hz", "em.freq", "frequency of the flux density", |s| Cell::Number(s.reference_hz)),
        column("method", "", "meta.code", "visibilities, image-point or image-gaussian", |s| {
            Cell::Text(s.method.name().to_owned())
        }),
        column("remarks", "", "meta.note", "what to know about it", |s| Cell::Text(s.remarks.join("; "))),
    ]
};

/// The headings, in their order.
pub fn source_headings() -> Vec<&'static str> {
    SOURCE_COLUMNS.iter().map(|column| column.name).collect()
}

/// Why a source list was not written.
#[derive(Debug, Error)]
pub enum SourcesError {
    /// The file could not be written.
    #[error(transparent)]
    Write(#[from] WriteError),
    /// The FITS file could not be written.
    #[error(transparent)]
    Fits(#[from] FitsError),
}

fn csv_bytes(rows: impl Iterator<Item = Vec<String>>) -> std::io::Result<Vec<u8>> {
    let mut writer = csv::Writer::from_writer(Vec::new());
    for row in rows {
        writer.write_record(&row)?;
    }
    writer.into_inner().map_err(|error| std::io::Error::other(error.to_string()))
}

/// Shortest decimal text that reads back as the same number; empty for none.
fn number(value: Option<f64>) -> String {
    value.filter(|v| v.is_finite()).map_or(String::new(), |v| v.to_string())
}

/// Writes the list as CSV: a heading, a row a source, an empty cell for what was not measured.
///
/// # Errors
/// When the file cannot be written.
pub fn write_source_csv(path: &Path, sources: &[Source]) -> Result<(), SourcesError> {
    let row = |source: &Source| {
        let text = |column: &SourceColumn| match (column.cell)(source) {
            Cell::Text(text) => text,
            Cell::Number(value) => number(value),
            Cell::Count(count) => count.to_string(),
        };
        SOURCE_COLUMNS.iter().map(text).collect()
    };
    let heading = source_headings().into_iter().map(str::to_owned).collect();
    write_whole(path, |file| {
        let bytes = csv_bytes(std::iter::once(heading).chain(sources.iter().map(row)))?;
        file.write_all(&bytes)
    })?;
    Ok(())
}

/// Writes the list as a VOTable 1.4.
///
/// # Errors
/// When the file cannot be written.
pub fn write_source_votable(path: &Path, sources: &[Source], title: &str) -> Result<(), SourcesError> {
    write_whole(path, |file| file.write_all(votable(sources, title).as_bytes()))?;
    Ok(())
}

/// Writes the list as a FITS binary table, NaN for what was not measured.
///
/// # Errors
/// When the file cannot be written.
pub fn write_source_fits(path: &Path, sources: &[Source], header: &Header) -> Result<(), SourcesError> {
    let cells: Vec<Vec<Cell>> =
        sources.iter().map(|source| SOURCE_COLUMNS.iter().map(|column| (column.cell)(source)).collect()).collect();
    let example = Source::at("", crate::sky::Direction { ra: 0.0, dec: 0.0 }, 0.0);
    let specs: Vec<ColumnSpec> = SOURCE_COLUMNS
        .iter()
        .enumerate()
        .map(|(at, column)| match (column.cell)(&example) {
            Cell::Text(_) => {
                let length =
                    |row: &Vec<Cell>| if let Cell::Text(text) = &row[at] { text.chars().count() } else { 0 };
                ColumnSpec::text(column.name, cells.iter().map(length).max().unwrap_or(0).max(1))
            }
            Cell::Number(_) => ColumnSpec::f64(column.name, 1, column.unit),
            Cell::Count(_) => ColumnSpec::i32(column.name, 1, column.unit),
        })
        .collect();
    let mut writer = FitsWriter::create(path)?;
    let mut table = writer.table("SOURCES", header, specs, sources.len())?;
    for row in &cells {
        for cell in row {
            match cell {
                Cell::Text(text) => table.text(text)?,
                Cell::Number(value) => table.f64(&[value.filter(|v| v.is_finite()).unwrap_or(f64::NAN)])?,
                Cell::Count(count) => table.i32(&[i32::try_from(*count).unwrap_or(i32::MAX)])?,
            }
        }
    }
    table.end()?;
    writer.finish()?;
    Ok(())
}

/// Writes the covariance of flux densities, Jy²: a heading with the names, a row a source that begins with its name.
/// Cells of flux densities that were not measured are empty.
///
/// # Errors
/// When the file cannot be written.
pub fn write_covariance(path: &Path, names: &[String], covariance: &DMatrix<f64>) -> Result<(), SourcesError> {
    let heading: Vec<String> = std::iter::once("name".to_owned()).chain(names.iter().cloned()).collect();
    let rows = names.iter().enumerate().map(|(i, name)| {
        std::iter::once(name.clone()).chain((0..names.len()).map(|j| number(Some(covariance[(i, j)])))).collect()
    });
    write_whole(path, |file| file.write_all(&csv_bytes(std::iter::once(heading).chain(rows))?))?;
    Ok(())
}
