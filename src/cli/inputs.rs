//! The visibilities of a run file, opened, each pointing with the beams of its stations.

use super::CliError;
use super::progress::Progress;
use crate::beam::{StationBeams, patterns, station_beams};
use crate::imaging::Weighted;
use crate::observation::{BlockSource, Selection, open};
use crate::run::{Problem, RunError, RunFile, Sources};
use std::collections::BTreeSet;

/// One pointing, ready to be imaged.
pub struct PointingInput {
    /// Its visibilities.
    pub source: Box<dyn BlockSource>,
    /// The beams of its stations, about the aim of the run file or else of the visibility file.
    pub beams: StationBeams,
    /// Index of its entry `[[pointing]]`.
    pub entry: usize,
}

/// Opens every pointing of `run` and gives its stations their beams. Globs and table rows that concern no station, and
/// notes of the readers, are told through `progress`.
///
/// # Errors
/// [`RunError`] when the run file is at fault: beams, stations without one, files that are not there. Otherwise when a
/// visibility file cannot be read.
pub fn open_pointings(run: &RunFile, progress: &Progress) -> Result<Vec<PointingInput>, CliError> {
    patterns(run)?;
    let mut inputs = Vec::new();
    let mut complaints = Vec::new();
    let mut names = BTreeSet::new();
    for (entry, pointing) in run.pointings()?.iter().enumerate() {
        let selection = match &pointing.sources {
            Sources::All => Selection::All,
            Sources::Named(names) => Selection::Names(names.clone()),
        };
        let sources = open(&pointing.visibilities.value, &selection)?;
        if let Some(aim) = pointing.aim
            && sources.len() > 1
        {
            let problem = Problem::Conflict {
                found: format!(
                    "one aim for the {} sources of {}",
                    sources.len(),
                    pointing.visibilities.value.display()
                ),
                expected:
                    "one entry [[pointing]] for each source that has an aim of its own (sources = [\"NAME\"])"
                        .to_owned(),
            };
            complaints.push(run.complaint(aim.line, "pointing.aim_deg", problem));
            continue;
        }
        for source in sources {
            let source: Box<dyn BlockSource> = match pointing.weight_scale {
                1.0 => source,
                scale => Box::new(Weighted::new(source, scale)),
            };
            let mut observation = source.observation().clone();
            if let Some(aim) = pointing.aim {
                observation.aim = aim.value;
            }
            for note in &observation.notes {
                progress.note(&format!("{}: {note}", observation.origin));
            }
            names.extend(observation.stations.iter().map(|station| station.name.clone()));
            match station_beams(run, &observation, run.response_radius_deg(entry)) {
                Ok(beams) => inputs.push(PointingInput { source, beams, entry }),
                Err(RunError::Complaints(more)) => complaints.extend(more),
                Err(other) => return Err(other.into()),
            }
        }
    }
    if !complaints.is_empty() {
        return Err(RunError::Complaints(complaints).into());
    }
    let names: Vec<&str> = names.iter().map(String::as_str).collect();
    for warning in run.unmatched(&names) {
        progress.warn(&warning);
    }
    Ok(inputs)
}
