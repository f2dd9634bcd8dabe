//! The run file: what a person asks for, read and checked before anything heavy starts.
//!
//! A run file is TOML (`docs/run-file.md` lists every key). Units are in the names of the keys, paths are relative to
//! the run file, unknown keys are errors. Everything wrong is reported together, each complaint with file, line and
//! key, what was found and what was expected.
//!
//! This is the leftmost room: it knows nothing of observations or patterns, only of what was written. Values carry
//! their line ([`At`]), so that rooms further right can complain about them just as precisely, with
//! [`RunFile::complaint`]. What joins the run file to an observation, the beam of every station, is
//! [`crate::beam::station_beams`].
//!
//! ```
//! # fn main() -> Result<(), evensky::run::RunError> {
//! let text = r#"
//! [[pointing]]
//! visibilities = "north.fits"
//! [image]
//! centre_deg = [152.7, 41.9]
//! size_px = [400, 400]
//! pixel_arcsec = 25
//! [beams.dish]
//! shape = "airy"
//! diameter_m = 13
//! [[stations]]
//! match = "*"
//! beam = "dish"
//! "#;
//! let run = evensky::run::RunFile::parse("somewhere/run.toml".as_ref(), text)?;
//! assert_eq!(run.station("N1").beam.as_deref(), Some("dish"));
//! # Ok(())
//! # }
//! ```

mod beams;
mod calendar;
mod combine;
mod deconvolution;
mod document;
mod error;
mod image;
mod measure;
mod simulate;
mod tables;
mod weighting;

pub use beams::{Beam, SHAPES, Shape, StationRule, StationSettings};
pub use calendar::{fits_date, iso_utc, mjd_of_day};
pub use combine::{Depth, FieldEntry, FieldsFile};
pub use deconvolution::{Deconvolution, DeconvolutionMethod, NoiseSource};
pub use document::At;
pub use error::{Complaint, Problem, RunError};
pub use image::{GridWindow, Image, MOST_PIXELS, Pointing, Sources, TOLERANCES};
pub use measure::{FitErrors, FluxesFrom, Measure, SourceShape};
pub use simulate::{Method, Simulate, SimulatedPointing};
pub use tables::{Circle, LayoutMount, LayoutStation, StationRow, StationTable};
pub use weighting::{DensityOf, Scheme, Weighting};

use document::{Document, Section, text};
use serde::Serialize;
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};

/// A run file, checked and with its defaults filled in.
#[derive(Debug, Clone, Serialize)]
pub struct RunFile {
    /// Where it was read from.
    pub path: PathBuf,
    /// Title, for pictures and the report.
    pub title: Option<String>,
    /// Entries `[[pointing]]`.
    pub pointings: Vec<Pointing>,
    /// `[image]`; see [`RunFile::image`] to insist on it.
    pub image: Option<Image>,
    /// `[weighting]`.
    pub weighting: Weighting,
    /// `[deconvolution]`.
    pub deconvolution: Deconvolution,
    /// `[measure]`; see [`RunFile::measure`] for it with its files checked.
    pub measure: Option<Measure>,
    /// Tables `[beams.NAME]`.
    pub beams: BTreeMap<String, Beam>,
    /// `station_table`, read.
    pub station_table: Option<StationTable>,
    /// Entries `[[stations]]`, in their order.
    pub station_rules: Vec<StationRule>,
    /// `[simulate]`; see [`RunFile::simulate`] to insist on it.
    pub simulate: Option<Simulate>,
}

impl RunFile {
    /// Reads and checks a run file, and the station table it names.
    ///
    /// # Errors
    /// [`RunError`] with everything that is wrong.
    pub fn read(path: &Path) -> Result<RunFile, RunError> {
        RunFile::parse(path, &read_text(path)?)
    }

    /// Checks the text of a run file that is, or could be, at `path`.
    ///
    /// # Errors
    /// [`RunError`] with everything that is wrong.
    pub fn parse(path: &Path, content: &str) -> Result<RunFile, RunError> {
        let document = Document::new(path, content);
        let table = document.parse()?;
        let run = read(&Section::root(&document, &table));
        document.failure().map_or(Ok(run), Err)
    }

    /// `[image]`, which imaging needs.
    ///
    /// # Errors
    /// When there is none.
    pub fn image(&self) -> Result<&Image, RunError> {
        self.image
            .as_ref()
            .ok_or_else(|| self.missing("image", "a table [image] with centre_deg, size_px, pixel_arcsec"))
    }

    /// The entries `[[pointing]]`, which imaging needs, when all their files exist.
    ///
    /// # Errors
    /// When there are none, or naming every file that is not there or is a folder.
    pub fn pointings(&self) -> Result<&[Pointing], RunError> {
        if self.pointings.is_empty() {
            return Err(self.missing("pointing", "at least one entry [[pointing]] with visibilities = \"FILE\""));
        }
        let files = self.pointings.iter().map(|p| ("pointing.visibilities", &p.visibilities));
        self.check_files(files, "a visibility file (FITS)")?;
        Ok(&self.pointings)
    }

    /// `[simulate]`, which a simulation needs, when the files it reads exist.
    ///
    /// # Errors
    /// When there is none, or naming every file that is not there or is a folder.
    pub fn simulate(&self) -> Result<&Simulate, RunError> {
        let simulate = self.simulate.as_ref().ok_or_else(|| self.missing("simulate", "a table [simulate]"))?;
        let files = [("simulate.sky", &simulate.sky), ("simulate.stations", &simulate.stations)];
        self.check_files(files.into_iter(), "a CSV table")?;
        Ok(simulate)
    }

    /// A complaint about a key of this file, as an error.
    pub fn complaint(&self, line: usize, key: &str, problem: Problem) -> Complaint {
        Complaint::new(&self.path, line, key, problem)
    }

    /// The files besides visibilities that decide the result: the run file, its station table, what its `[deconvolution]`
    /// names, its list of positions.
    pub fn inputs(&self) -> Vec<PathBuf> {
        let table = self.station_table.as_ref().map(|table| &table.path);
        let positions = self.measure.as_ref().and_then(|m| m.positions.as_ref()).map(|at| &at.value);
        let named = table.into_iter().chain(self.deconvolution.files()).chain(positions);
        std::iter::once(&self.path).chain(named).cloned().collect()
    }

    fn missing(&self, key: &str, expected: &str) -> RunError {
        self.complaint(1, key, Problem::Missing { expected: expected.to_owned() }).into()
    }

    fn check_files<'f>(
        &self,
        files: impl Iterator<Item = (&'static str, &'f At<PathBuf>)>,
        expected: &'static str,
    ) -> Result<(), RunError> {
        let complaints: Vec<Complaint> = files
            .filter_map(|(key, file)| {
                let problem = file_problem(&file.value)?;
                let problem = Problem::File { file: file.value.clone(), problem, expected };
                Some(self.complaint(file.line, key, problem))
            })
            .collect();
        if complaints.is_empty() { Ok(()) } else { Err(RunError::Complaints(complaints)) }
    }
}

/// The text of a run file.
fn read_text(path: &Path) -> Result<String, RunError> {
    let bytes = std::fs::read(path).map_err(|source| RunError::Read { path: path.to_owned(), source })?;
    String::from_utf8(bytes).map_err(|error| {
        let valid = error.utf8_error().valid_up_to();
        let line = 1 + error.as_bytes()[..valid].iter().filter(|&&b| b == b'\n').count();
        RunError::NotText { path: path.to_owned(), line }
    })
}

/// Why a file cannot be read, as far as that shows without opening it.
fn file_problem(path: &Path) -> Option<String> {
    match std::fs::metadata(path) {
        Ok(found) if found.is_dir() => Some("is a folder".to_owned()),
        Ok(_) => None,
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => {
            Some("no such file (paths are relative to the run file)".to_owned())
        }
        Err(error) => Some(error.to_string()),
    }
}

fn read(root: &Section) -> RunFile {
    let document = root.document;
    let title = root.optional("title", "a title, in quotes", text).map(|at| at.value);
    let station_table = root.optional("station_table", "the name of a CSV table of stations", text);
    let pointings = root.tables("pointing").iter().filter_map(image::read_pointing).collect();
    let image = root.table("image").and_then(|section| image::read_image(&section));
    let weighting = root.table("weighting").map_or_else(Weighting::default, |s| weighting::read_weighting(&s));
    let measure = root.table("measure").map(|section| measure::read_measure(&section));
    let deconvolution =
        root.table("deconvolution").map_or_else(Deconvolution::default, |s| deconvolution::read_deconvolution(&s));
    let beam_sections = root.table("beams").map(|beams| beams.named_tables()).unwrap_or_default();
    // a beam that is itself wrong is still a name that exists
    let beam_names: Vec<String> = beam_sections.iter().map(|(name, _)| name.clone()).collect();
    let beams = beam_sections.into_iter().filter_map(|(name, s)| Some((name, beams::read_beam(&s)?))).collect();
    let station_rules: Vec<StationRule> = root.tables("stations").iter().filter_map(beams::read_rule).collect();
    let simulate = root.table("simulate").and_then(|s| simulate::read_simulate(&s, root.has("image")));
    root.finish();
    if !root.has("pointing") && !root.has("simulate") {
        let expected = "entries [[pointing]] with visibilities to image, or a table [simulate]".to_owned();
        document.complain(1, "pointing", Problem::Missing { expected });
    }
    let station_table = station_table.and_then(|name| {
        let path = document.resolve(&name.value);
        if let Some(problem) = file_problem(&path) {
            let problem = Problem::File { file: path, problem, expected: "a CSV table of stations" };
            document.complain(name.line, "station_table", problem);
            return None;
        }
        let table = tables::read_station_table(&path);
        table.map_err(|complaints| complaints.into_iter().for_each(|c| document.add(c))).ok()
    });
    for complaint in beams::unknown_beams(document.path, &beam_names, &station_rules, station_table.as_ref()) {
        document.add(complaint);
    }
    RunFile {
        path: document.path.to_owned(),
        title,
        pointings,
        image,
        weighting,
        deconvolution,
        measure,
        beams,
        station_table,
        station_rules,
        simulate,
    }
}
