//! `evensky simulate RUN.toml`: an invented observation, predicted, made noisy, and written as a visibility file.

use super::progress::{Progress, Stage};
use super::{CliError, Common};
use crate::beam::{StationBeams, patterns, station_beams};
use crate::observation::{BlockSource, Invented, MemorySource, invent, write_idi};
use crate::response::gridded::Options;
use crate::response::{Exact, Gridded, Response, fine_grid};
use crate::run::{Method, Problem, RunFile, Simulate, iso_utc};
use crate::sky::{Component, ImageGeometry, read_components};
use clap::Args;
use serde::Serialize;
use std::fmt::Write;
use std::path::{Path, PathBuf};
use std::time::Instant;

/// Arguments of `simulate`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// The run file (TOML); its table "simulate" says what to observe
    #[arg(value_name = "RUN.toml")]
    pub run: PathBuf,
}

/// What `--json` prints.
#[derive(Debug, Serialize)]
struct Record {
    title: Option<String>,
    output: PathBuf,
    bytes: u64,
    array: String,
    stations: usize,
    components: usize,
    channels: usize,
    frequency_hz: [f64; 2],
    hands: Vec<String>,
    method: Method,
    tolerance: Option<f64>,
    noise_jy: f64,
    seed: u64,
    lowest_elevation_deg: f64,
    visibilities: usize,
    rows: usize,
    flagged_rows: usize,
    rows_too_low: usize,
    pointings: Vec<PointingRecord>,
    seconds: f64,
}

/// One pointing of the file.
#[derive(Debug, Serialize)]
struct PointingRecord {
    name: String,
    aim_deg: [f64; 2],
    first_utc: Option<String>,
    last_utc: Option<String>,
    elevation_deg: Option<[f64; 2]>,
    rows: usize,
    flagged_rows: usize,
    rows_too_low: usize,
}

/// Makes the observation.
///
/// # Errors
/// [`crate::run::RunError`] when the run file, the layout, or what they ask for is at fault; otherwise when the sky
/// cannot be read or predicted, or the file not written.
pub fn run(arguments: &Arguments, common: &Common) -> Result<String, CliError> {
    let started = Instant::now();
    let run = RunFile::read(&arguments.run)?;
    let simulate = run.simulate()?;
    patterns(&run)?;
    let sky = read_components(&simulate.sky.value).map_err(|error| CliError::Command(error.into()))?;
    let output = output(&run, simulate, common)?;
    let progress = common.progress();
    let mut pointings = invent(&run, simulate)?;
    tell_low_rows(&progress, simulate, &pointings);
    pointings.retain(|pointing| !pointing.blocks.is_empty());
    let names: Vec<&str> = match pointings.first() {
        Some(first) => first.observation.stations.iter().map(|station| station.name.as_str()).collect(),
        None => Vec::new(),
    };
    for warning in run.unmatched(&names) {
        progress.warn(&warning);
    }
    let beams: Vec<StationBeams> = pointings
        .iter()
        .map(|p| station_beams(&run, &p.observation, run.simulated_response_radius_deg(p.entry)))
        .collect::<Result<_, _>>()?;

    let total: usize = pointings.iter().map(Invented::visibilities).sum();
    let stage = progress.stage("predicting", "visibilities", Some(total as u64));
    for (pointing, beams) in pointings.iter_mut().zip(&beams) {
        predict(&run, simulate, pointing, beams, &sky, &stage)?;
        pointing.add_noise_and_flags(simulate);
    }
    stage.finish();
    if pointings.iter().all(|pointing| pointing.flagged_rows() == pointing.rows()) {
        let expected = "a row that is not flagged: a smaller fraction, more rows, or another seed".to_owned();
        let problem = Problem::Conflict { found: "all rows came to be flagged".to_owned(), expected };
        let complaint = run.complaint(simulate.line, "simulate.flagged_fraction", problem);
        return Err(CliError::Run(complaint.into()));
    }
    let mut record = record(&run, simulate, output, sky.len(), &pointings);

    let stage = progress.stage("writing", "visibilities", Some(total as u64));
    write(&record.output, pointings)?;
    stage.add(total as u64);
    stage.finish();
    record.bytes = std::fs::metadata(&record.output).map_or(0, |meta| meta.len());
    record.seconds = started.elapsed().as_secs_f64();
    common.conclusion(&record, || prose(&record, &run, &arguments.run))
}

/// Where the file goes: its name in the run file, in the folder of `--out` if that is given. Checked before the work:
/// the folder is there, and no input would be written over.
fn output(run: &RunFile, simulate: &Simulate, common: &Common) -> Result<PathBuf, CliError> {
    let wanted = &simulate.output;
    let complain = |found: String, expected: &str| {
        run.complaint(wanted.line, "simulate.output", Problem::value(found, expected)).into()
    };
    let name = wanted.value.file_name();
    let path = match (&common.out, name) {
        (_, None) => {
            return Err(CliError::Run(complain(format!("{:?}", wanted.value), "the name of a file to write")));
        }
        (Some(_), Some(name)) => common.out_folder(&run.path)?.join(name),
        (None, Some(_)) => wanted.value.clone(),
    };
    let folder = match path.parent() {
        Some(parent) if !parent.as_os_str().is_empty() => parent.to_owned(),
        _ => PathBuf::from("."),
    };
    if !folder.is_dir() {
        let found = format!("{}, whose folder is not there", path.display());
        return Err(CliError::Run(complain(found, "a file in a folder that exists, or --out DIR")));
    }
    if path.is_dir() {
        let found = format!("{}, which is a folder", path.display());
        return Err(CliError::Run(complain(found, "the name of a file to write")));
    }
    let same = |other: &Path| match (path.canonicalize(), other.canonicalize()) {
        (Ok(one), Ok(other)) => one == other,
        _ => false,
    };
    let mut inputs = run.inputs();
    inputs.extend([simulate.sky.value.clone(), simulate.stations.value.clone()]);
    if let Some(input) = inputs.iter().find(|input| same(input)) {
        let found = format!("{}, which is an input of this simulation", input.display());
        return Err(CliError::Run(complain(found, "a file of its own")));
    }
    Ok(path)
}

fn tell_low_rows(progress: &Progress, simulate: &Simulate, pointings: &[Invented]) {
    for pointing in pointings.iter().filter(|pointing| pointing.rows_too_low > 0) {
        let (low, rows) = (pointing.rows_too_low, pointing.rows());
        let name = &pointing.observation.name;
        let limit = simulate.lowest_elevation_deg;
        if rows == 0 {
            progress.warn(&format!("{name} is left out: all its {low} rows are below {limit}° elevation"));
        } else {
            progress.note(&format!("{name}: {low} of {} rows left out, below {limit}° elevation", low + rows));
        }
    }
}

/// Fills the rows of one pointing with the model.
fn predict(
    run: &RunFile,
    simulate: &Simulate,
    pointing: &mut Invented,
    beams: &StationBeams,
    sky: &[Component],
    stage: &Stage,
) -> Result<(), CliError> {
    match simulate.method.value {
        Method::Exact => {
            // the exact response needs a centre only; its phases are measured about it
            let geometry = ImageGeometry { centre: pointing.observation.aim, width: 1, height: 1, pixel: 1e-6 };
            let response = Exact::new(&pointing.observation, beams.clone(), geometry);
            for block in &mut pointing.blocks {
                response.predict(sky, std::slice::from_mut(block))?;
                stage.add(block.data.len() as u64);
            }
        }
        Method::Gridded => {
            let geometry = fine_grid(&pointing.observation, beams, sky, &pointing.blocks).map_err(|error| {
                let problem = Problem::value(error.to_string(), "method = \"exact\" for this observation");
                CliError::Run(run.complaint(simulate.method.line, "simulate.method", problem).into())
            })?;
            let tolerance = run.image()?.tolerance.value;
            let (observation, blocks) = (&pointing.observation, &pointing.blocks);
            let options = Options::default();
            let response = Gridded::for_blocks(observation, beams, geometry, tolerance, blocks, options)?;
            response.predict(sky, &mut pointing.blocks)?;
            stage.add(pointing.visibilities() as u64);
        }
    }
    Ok(())
}

fn write(path: &Path, pointings: Vec<Invented>) -> Result<(), CliError> {
    let mut sources: Vec<MemorySource> =
        pointings.into_iter().map(|pointing| MemorySource::new(pointing.observation, pointing.blocks)).collect();
    let mut sources: Vec<&mut dyn BlockSource> = sources.iter_mut().map(|s| s as &mut dyn BlockSource).collect();
    Ok(write_idi(path, &mut sources)?)
}

fn record(
    run: &RunFile,
    simulate: &Simulate,
    output: PathBuf,
    components: usize,
    pointings: &[Invented],
) -> Record {
    let of_pointing = |p: &Invented| {
        let times = || p.blocks.iter().flat_map(|block| &block.mjd_utc);
        PointingRecord {
            name: p.observation.name.clone(),
            aim_deg: p.observation.aim.to_deg().into(),
            first_utc: times().next().and_then(|mjd| iso_utc(*mjd)),
            last_utc: times().last().and_then(|mjd| iso_utc(*mjd)),
            elevation_deg: p.elevation.map(|range| range.map(f64::to_degrees)),
            rows: p.rows(),
            flagged_rows: p.flagged_rows(),
            rows_too_low: p.rows_too_low,
        }
    };
    let records: Vec<PointingRecord> = pointings.iter().map(of_pointing).collect();
    let gridded = simulate.method.value == Method::Gridded;
    let last = simulate.channels.saturating_sub(1) as f64;
    Record {
        title: run.title.clone(),
        output,
        bytes: 0,
        array: simulate.array.clone(),
        stations: pointings.first().map_or(0, |p| p.observation.stations.len()),
        components,
        channels: simulate.channels,
        frequency_hz: [simulate.first_hz, simulate.first_hz + last * simulate.channel_hz],
        hands: simulate.hands.clone(),
        method: simulate.method.value,
        tolerance: run.image.as_ref().filter(|_| gridded).map(|image| image.tolerance.value),
        noise_jy: simulate.noise_jy,
        seed: simulate.seed,
        lowest_elevation_deg: simulate.lowest_elevation_deg,
        visibilities: pointings.iter().map(Invented::visibilities).sum(),
        rows: records.iter().map(|p| p.rows).sum(),
        flagged_rows: records.iter().map(|p| p.flagged_rows).sum(),
        rows_too_low: records.iter().map(|p| p.rows_too_low).sum(),
        pointings: records,
        seconds: 0.0,
    }
}

fn prose(record: &Record, run: &RunFile, run_file: &Path) -> String {
    let mut text = String::new();
    // writing to a string cannot fail
    let _ = describe(&mut text, record, run, run_file);
    text
}

fn describe(out: &mut String, r: &Record, run: &RunFile, run_file: &Path) -> std::fmt::Result {
    if let Some(title) = &r.title {
        writeln!(out, "{title}")?;
    }
    writeln!(
        out,
        "{}: {} visibilities of {} components, {:.2} MB, in {:.1} s",
        r.output.display(),
        r.visibilities,
        r.components,
        r.bytes as f64 / 1e6,
        r.seconds
    )?;
    let [low, high] = r.frequency_hz.map(|hz| hz / 1e9);
    writeln!(
        out,
        "  {}: {} stations, {} channels from {low} to {high} GHz, {}",
        r.array,
        r.stations,
        r.channels,
        r.hands.join(" ")
    )?;
    let predicted = match r.tolerance {
        Some(tolerance) => format!("predicted by gridding, tolerance {tolerance:e}"),
        None => "predicted by direct sums".to_owned(),
    };
    writeln!(out, "  {predicted}; noise {} Jy (real and imaginary part each), seed {}", r.noise_jy, r.seed)?;
    writeln!(out, "  {} of {} rows flagged", r.flagged_rows, r.rows)?;
    if r.rows_too_low > 0 {
        writeln!(out, "  {} rows left out, below {}° elevation", r.rows_too_low, r.lowest_elevation_deg)?;
    }
    let width = r.pointings.iter().map(|p| p.name.chars().count()).max().unwrap_or(0);
    for p in &r.pointings {
        let [ra, dec] = p.aim_deg;
        write!(out, "  {:<width$}  aim {ra:.4}° {dec:+.4}°, {} rows", p.name, p.rows)?;
        if let (Some(first), Some(last)) = (&p.first_utc, &p.last_utc) {
            write!(out, ", {first} to {last}")?;
        }
        if let Some([low, high]) = p.elevation_deg {
            write!(out, ", elevation {low:.0}° to {high:.0}°")?;
        }
        writeln!(out)?;
    }
    let written = r.output.canonicalize().ok();
    let imaged = run.pointings.iter().any(|p| p.visibilities.value.canonicalize().ok() == written);
    if written.is_some() && imaged && run.image.is_some() {
        writeln!(out, "Next: evensky image {}", run_file.display())
    } else {
        writeln!(out, "Next: evensky describe {}", r.output.display())
    }
}
