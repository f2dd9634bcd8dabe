//! `evensky combine FIELDS.toml`: images of single fields, with their weights, in one mosaic.

use super::image::{Unreadable, check_writable, hand_over, now_utc, product, stem, told};
use super::image_files::{FilesError, Sheet, Written, write_sheet};
use super::{CliError, Common};
use crate::imaging::combine::{Combined, UNCOVERED, combine};
use crate::report::{
    BeamFigures, CombinedFigures, ImageFigures, InputFile, Noise, ProductHeader, RunRecord, StageTime,
    summary_json, summary_text, write_json,
};
use crate::run::FieldsFile;
use clap::Args;
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::time::Instant;

/// Arguments of `combine`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// The fields file (TOML): images and their weights or noise
    #[arg(value_name = "FIELDS.toml")]
    pub fields: PathBuf,
}

/// Combines the fields.
///
/// # Errors
/// When they cannot be combined.
pub fn run(arguments: &Arguments, common: &Common) -> Result<String, CliError> {
    let progress = common.progress();
    let started = Instant::now();
    let file = FieldsFile::read(&arguments.fields)?;
    let folder = common.out_folder(&arguments.fields)?;
    check_writable(&folder)?;
    spare_inputs(&file, &folder)?;
    let mut record = RunRecord {
        title: file.title.clone().unwrap_or_else(|| stem(&arguments.fields)),
        command: "combine".to_owned(),
        run_file: arguments.fields.display().to_string(),
        started_utc: now_utc(),
        threads: rayon::current_num_threads(),
        settings: serde_json::to_value(&file)?,
        inputs: checksums(&file)?,
        ..RunRecord::default()
    };
    timed(&mut record, "checksums", started);

    let started = Instant::now();
    let stage = progress.stage("combining", "passes over fields", Some(2 * file.fields.len() as u64));
    let combined = combine(&file.fields, file.image, &|_, _| stage.add(1)).map_err(told)?;
    stage.finish();
    timed(&mut record, "combining", started);
    describe(&mut record, &combined);

    let started = Instant::now();
    let unfinished = tempfile::Builder::new()
        .prefix(".unfinished-")
        .tempdir_in(&folder)
        .map_err(|source| CliError::Folder { path: folder.clone(), source })?;
    let written = write(&combined, &record, unfinished.path()).map_err(told)?;
    timed(&mut record, "writing products", started);
    record.products = written.products;
    record.products.push(product("run.json", "inputs, settings, measured errors, timings"));
    for warning in &record.warnings {
        progress.warn(warning);
    }
    write_json(&unfinished.path().join("run.json"), &record).map_err(told)?;
    hand_over(unfinished.path(), &folder, &record.products)?;
    let place = folder.display().to_string();
    let said = summary_json(&record, &place);
    common.conclusion(&said, || summary_text(&record, &place) + "\n")
}

/// What is written.
const PRODUCTS: [&str; 5] = ["sky.fits", "sky.png", "weight.fits", "weight.png", "run.json"];

/// A product that would take the place of an input.
#[derive(Debug, thiserror::Error)]
#[error(
    "{} is an input, and a product of that name would take its place; choose another folder with --out",
    path.display()
)]
struct OverInput {
    path: PathBuf,
}

/// Refuses a folder where products would be written over the fields file or what it names.
fn spare_inputs(file: &FieldsFile, folder: &Path) -> Result<(), CliError> {
    let inputs = file.fields.iter().flat_map(|field| field.files()).map(|(_, at)| at.value.clone());
    for path in std::iter::once(file.path.clone()).chain(inputs) {
        let Ok(input) = path.canonicalize() else { continue };
        let taken = |name: &str| folder.join(name).canonicalize().is_ok_and(|there| there == input);
        if PRODUCTS.iter().any(|name| taken(name)) {
            return Err(told(OverInput { path }));
        }
    }
    Ok(())
}

fn timed(record: &mut RunRecord, stage: &str, started: Instant) {
    record.timings.push(StageTime { stage: stage.to_owned(), seconds: started.elapsed().as_secs_f64() });
}

/// Size and checksum of every file, each once.
fn checksums(file: &FieldsFile) -> Result<Vec<InputFile>, CliError> {
    let named = file.fields.iter().flat_map(|field| field.files()).map(|(role, at)| (role, at.value.clone()));
    let mut seen = BTreeSet::new();
    std::iter::once(("fields file", file.path.clone()))
        .chain(named)
        .filter(|(_, path)| seen.insert(path.clone()))
        .map(|(role, path)| {
            InputFile::measure(&path, role).map_err(|source| told(Unreadable { path: path.clone(), source }))
        })
        .collect()
}

fn describe(record: &mut RunRecord, combined: &Combined) {
    let geometry = &combined.geometry;
    let filled = combined.weight.iter().filter(|weight| **weight > 0.0).count();
    record.image = Some(ImageFigures {
        filled_fraction: Some(filled as f64 / combined.weight.len() as f64),
        reference_hz: Some(combined.frequency_hz),
        ..ImageFigures::of(geometry)
    });
    record.beam = Some(BeamFigures::from(&combined.beam));
    record.noise = noise(combined);
    record.combined = Some(CombinedFigures::of(combined));
    record.warnings.extend(combined.warnings.iter().cloned());
    record.limits.extend(limits(combined));
}

fn noise(combined: &Combined) -> Option<Noise> {
    let mut weights: Vec<f64> = combined.weight.iter().copied().filter(|weight| *weight > 0.0).collect();
    let (place, deepest) = combined
        .weight
        .indexed_iter()
        .fold(((0, 0), 0.0), |best, (at, &weight)| if weight > best.1 { (at, weight) } else { best });
    let direction = combined.geometry.direction_of(place.1 as f64, place.0 as f64)?;
    let (lowest_at_ra_deg, lowest_at_dec_deg) = direction.to_deg();
    let middle = weights.len() / 2;
    if weights.is_empty() {
        return None;
    }
    let median = *weights.select_nth_unstable_by(middle, f64::total_cmp).1;
    Some(Noise {
        lowest_jy_per_beam: deepest.sqrt().recip(),
        lowest_at_ra_deg,
        lowest_at_dec_deg,
        median_jy_per_beam: Some(median.sqrt().recip()),
    })
}

/// What the figures cannot tell.
fn limits(combined: &Combined) -> Vec<String> {
    let mut limits = vec![
        "the errors of peak and flux density are those of a source of the beam's shape at 25 places of each field, \
         without noise; what is wrong in a field (beam, side lobes, calibration) stays wrong"
            .to_owned(),
        "weights are the stated ones: fields are taken to be independent of each other, and noise that interpolation \
         lowers a little between pixels is not counted as gained"
            .to_owned(),
        "blank pixels and the edge of a field take up to 6 of its pixels around them along".to_owned(),
    ];
    if combined.fields.iter().any(|field| field.kernel.is_some()) {
        limits.push(format!(
            "the noise of convolved fields is propagated as if it were correlated like their beam and even across the \
             kernel; blank pixels count as empty sky where they hold less than {:.1} % of the kernel, and spread as far as the kernel reaches elsewhere",
            100.0 * UNCOVERED
        ));
    }
    if combined.fields.iter().any(|field| field.facts.fk5) {
        limits.push(
            "positions in FK5 (J2000) are taken as ICRS: the two agree to some tens of milliarcseconds".to_owned(),
        );
    }
    limits
}

fn write(combined: &Combined, record: &RunRecord, folder: &Path) -> Result<Written, FilesError> {
    let figures = record.combined.clone().unwrap_or_default();
    let starts: Option<Vec<f64>> = combined.fields.iter().map(|field| field.facts.start_mjd_utc).collect();
    let header = ProductHeader {
        object: record.title.clone(),
        frequency_hz: combined.frequency_hz,
        beam: Some(combined.beam),
        start_mjd_utc: starts.and_then(|starts| starts.into_iter().min_by(f64::total_cmp)),
        history: std::iter::once(format!(
            "evensky combine: {} fields, sum of weight times image",
            figures.fields.len()
        ))
        .chain(figures.history())
        .collect(),
        ..ProductHeader::default()
    };
    let sheets = [
        Sheet {
            name: "sky",
            image: &combined.sky,
            bunit: "Jy/beam",
            unit: "Jy/beam",
            quantity: "Mosaic of combined fields",
            what: "fields combined by inverse variance",
            caption: "",
            beam: Some(combined.beam),
        },
        Sheet {
            name: "weight",
            image: &combined.weight,
            bunit: "beam2 Jy-2",
            unit: "(Jy/beam)^{−2}",
            quantity: "Weight: inverse variance of the mosaic",
            what: "inverse variance of the mosaic",
            caption: "",
            beam: None,
        },
    ];
    let mut written = Written::default();
    for sheet in &sheets {
        write_sheet(sheet, &combined.geometry, &header, folder, &mut written)?;
    }
    Ok(written)
}
