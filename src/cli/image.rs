//! `evensky image RUN.toml`: the mosaic, its weight map and point spread function, pictures and report.

use super::image_deconvolve::{Deconvolved, Dirty, deconvolved};
use super::image_files::Images;
use super::image_measure::{self, Measurement, Plates};
use super::image_state::Keeper;
use super::inputs::{PointingInput, open_pointings};
use super::progress::Progress;
use super::{CliError, Common};
use crate::beam::StationBeams;
use crate::imaging::beam_fit::fit_beam;
use crate::imaging::{Mosaic, Pointing, Price, flat_sky, response_map, self_check, side_lobes};
use crate::observation::{Mount, Observation};
use crate::report::{
    Accuracy, BeamFigures, ImageFigures, InputFile, KernelFigures, Noise, PointingRecord, Product, ProductHeader,
    RunRecord, StageTime, StationGroup, WeightingFigures, WriteError, summary_json, summary_text, write_json,
    write_page,
};
use crate::response::Sums;
use crate::response::gridded::Options;
use crate::response::window::Kind;
use crate::run::{GridWindow, Image, RunFile, Weighting, iso_utc};
use crate::sky::{Direction, ImageGeometry};
use clap::Args;
use ndarray::Array2;
use std::collections::{BTreeMap, BTreeSet};
use std::path::{Path, PathBuf};
use std::time::{Instant, SystemTime, UNIX_EPOCH};

/// Arguments of `image`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// The run file (TOML)
    #[arg(value_name = "RUN.toml")]
    pub run: PathBuf,
    /// Go on with a deconvolution that was stopped, from its last major cycle
    #[arg(long = "continue")]
    pub go_on: bool,
}

/// Makes the mosaic.
///
/// # Errors
/// When it cannot be made.
pub fn run(arguments: &Arguments, common: &Common) -> Result<String, CliError> {
    let progress = common.progress();
    let started = Instant::now();
    let run = RunFile::read(&arguments.run)?;
    let settings = run.image()?.clone();
    let inputs = open_pointings(&run, &progress)?;
    let folder = common.out_folder(&arguments.run)?;
    check_writable(&folder)?;
    let request = image_measure::prepare(&run)?;

    let mut record = RunRecord {
        title: run.title.clone().unwrap_or_else(|| stem(&arguments.run)),
        command: "image".to_owned(),
        run_file: arguments.run.display().to_string(),
        started_utc: now_utc(),
        threads: rayon::current_num_threads(),
        settings: serde_json::to_value(&run)?,
        ..RunRecord::default()
    };
    record.inputs = checksums(&run)?;
    record.stations = station_groups(&inputs);
    let keeper = Keeper::new(&folder, &arguments.run, &record, arguments.go_on, &progress)?;
    let mut making = Making {
        keeper,
        progress: &progress,
        run: &run,
        record,
        settings,
        weighting: run.weighting,
        request,
        measurement: None,
    };
    making.timed("opening and checksums", started);
    let images = making.images(inputs)?;
    let started = Instant::now();
    // all products are made here and moved at the end: a run that fails leaves those of an earlier one as they were, and
    // no record ever stands beside images of another run
    let unfinished = tempfile::Builder::new()
        .prefix(".unfinished-")
        .tempdir_in(&folder)
        .map_err(|source| CliError::Folder { path: folder.clone(), source })?;
    let written = images.write(unfinished.path()).map_err(told)?;
    let tables = making.measurement.as_ref().map(|m| m.write(unfinished.path())).transpose().map_err(told)?;
    making.timed("writing products", started);
    let mut record = making.record;
    record.products = written.products;
    record.products.extend(tables.unwrap_or_default());
    for warning in &record.warnings {
        progress.warn(warning);
    }
    record.products.push(product("run.json", "inputs, settings, measured accuracy, timings"));
    record.products.push(product("report.html", "this run on one page"));
    write_page(&unfinished.path().join("report.html"), &record, &written.pictures).map_err(told)?;
    write_json(&unfinished.path().join("run.json"), &record).map_err(told)?;
    hand_over(unfinished.path(), &folder, &record.products)?;
    making.keeper.done();
    let place = folder.display().to_string();
    let said = summary_json(&record, &place);
    common.conclusion(&said, || summary_text(&record, &place) + "\n")
}

/// The run file's name, where it has no title.
pub(super) fn stem(path: &Path) -> String {
    path.file_stem().unwrap_or(path.as_os_str()).to_string_lossy().into_owned()
}

pub(super) fn told(error: impl std::error::Error + Send + Sync + 'static) -> CliError {
    CliError::Command(Box::new(error))
}

pub(super) fn product(path: &str, what: &str) -> Product {
    Product { path: path.to_owned(), what: what.to_owned() }
}

/// Moves the finished products to their places.
pub(super) fn hand_over(from: &Path, to: &Path, products: &[Product]) -> Result<(), CliError> {
    for Product { path, .. } in products {
        let place = to.join(path);
        std::fs::rename(from.join(path), &place)
            .map_err(|source| told(WriteError::Rename { path: place, source }))?;
    }
    Ok(())
}

/// Finds out before the long work that the folder takes files.
pub(super) fn check_writable(folder: &Path) -> Result<(), CliError> {
    tempfile::Builder::new()
        .prefix(".evensky-")
        .tempfile_in(folder)
        .map(drop)
        .map_err(|source| CliError::Folder { path: folder.to_owned(), source })
}

pub(super) fn now_utc() -> String {
    let seconds = SystemTime::now().duration_since(UNIX_EPOCH).map_or(0.0, |d| d.as_secs_f64());
    iso_utc(40_587.0 + seconds / 86_400.0).unwrap_or_default()
}

/// Size and checksum of every file that decides the result, each once.
fn checksums(run: &RunFile) -> Result<Vec<InputFile>, CliError> {
    let visibilities = run.pointings()?.iter().map(|p| ("visibilities", p.visibilities.value.clone()));
    let others = run.inputs().into_iter().map(|path| (if path == run.path { "run file" } else { "table" }, path));
    let mut inputs: Vec<InputFile> = Vec::new();
    let mut seen = BTreeSet::new();
    for (role, path) in others.chain(visibilities) {
        if seen.insert(path.clone()) {
            let measured = InputFile::measure(&path, role);
            inputs.push(measured.map_err(|source| told(Unreadable { path, source }))?);
        }
    }
    Ok(inputs)
}

/// An input that could not be read to the end.
#[derive(Debug, thiserror::Error)]
#[error("{}: cannot be read ({source}); expected a readable file", path.display())]
pub(super) struct Unreadable {
    pub(super) path: PathBuf,
    pub(super) source: std::io::Error,
}

fn station_groups(inputs: &[PointingInput]) -> Vec<StationGroup> {
    let mut groups: BTreeMap<(String, String, &'static str), (Vec<String>, f64)> = BTreeMap::new();
    for input in inputs {
        let observation = input.source.observation();
        for (index, station) in observation.stations.iter().enumerate() {
            let beam = input.beams.beam(index);
            let key = (beam.beam_name.clone(), beam.pattern.describe(), station.mount.name());
            let (names, largest) = groups.entry(key).or_default();
            if !names.contains(&station.name) {
                names.push(station.name.clone());
            }
            *largest = largest.max(beam.offset[0].hypot(beam.offset[1]));
        }
    }
    groups
        .into_iter()
        .map(|((beam, description, mount), (stations, offset))| StationGroup {
            beam,
            description,
            mount: mount.to_owned(),
            stations,
            largest_pointing_offset_arcmin: Some(offset.to_degrees() * 60.0),
        })
        .collect()
}

/// A run under way.
struct Making<'a> {
    keeper: Keeper,
    progress: &'a Progress,
    run: &'a RunFile,
    record: RunRecord,
    settings: Image,
    weighting: Weighting,
    /// What `[measure]` asks for, and what came of it.
    request: Option<image_measure::Request>,
    measurement: Option<Measurement>,
}

impl Making<'_> {
    fn timed(&mut self, stage: &str, started: Instant) {
        let seconds = started.elapsed().as_secs_f64();
        self.record.timings.push(StageTime { stage: stage.to_owned(), seconds });
    }

    fn images(&mut self, inputs: Vec<PointingInput>) -> Result<Images, CliError> {
        let geometry = self.settings.geometry;
        let tolerance = self.settings.tolerance.value;
        let window = match self.settings.window {
            GridWindow::KaiserBessel => Kind::KaiserBessel,
            GridWindow::Spheroidal => Kind::Spheroidal,
            GridWindow::Nearest => Kind::Nearest,
        };
        let options = Options { window, ..Options::default() };
        let mut mosaic = Mosaic::new(geometry);
        let mut names: Vec<(String, Direction, usize)> = Vec::new();

        let started = Instant::now();
        let stage = self.progress.stage("building kernels", "rows", None);
        let mut band: (f64, f64) = (f64::INFINITY, 0.0);
        for PointingInput { source, beams, .. } in inputs {
            let observation = source.observation();
            band = band_of(observation, band);
            names.push((observation.name.clone(), beams.aim(), observation.stations.len()));
            self.notice_mounts(observation, &beams);
            mosaic.add(source, beams, tolerance, options, |rows| stage.add(rows))?;
        }
        stage.finish();
        self.timed("building kernels", started);
        self.describe(&mosaic, &names);
        if self.record.pointings.iter().all(|p| p.visibilities_used == 0) {
            return Err(told(NothingToImage::Visibilities));
        }

        let price = self.weigh(&mut mosaic)?;
        let started = Instant::now();
        let rows = mosaic.pointings().iter().map(|p| p.tally.rows).sum();
        let stage = self.progress.stage("gridding", "rows", Some(rows));
        let sums = mosaic.sums(|rows| stage.add(rows))?;
        stage.finish();
        self.timed("gridding", started);

        let weight = mosaic.weight_map(&sums, |_| ())?;
        let dirty = flat_sky(&sums, self.settings.lowest_response.value);
        let reference = reference_pixel(&geometry, &sums, &dirty).ok_or_else(|| told(NothingToImage::Pixels))?;
        let place = geometry.direction_of(reference.0 as f64, reference.1 as f64).unwrap_or(geometry.centre);
        if reference != geometry.reference() {
            self.record.warnings.push(format!(
                "the image centre lies below lowest_response; the point spread function is that of the deepest pixel, \
                 ({}, {}) counted from 0",
                reference.0, reference.1
            ));
        }
        let started = Instant::now();
        let stage = self.progress.stage("point spread function", "rows", Some(rows));
        let psf = mosaic.point_spread(place, &sums, &dirty, |rows| stage.add(rows))?;
        stage.finish();
        self.timed("point spread function", started);
        let beam = match fit_beam(psf.view(), reference, geometry.pixel) {
            Ok(beam) => Some(beam),
            Err(error) => {
                self.record
                    .warnings
                    .push(format!("no beam could be fitted, BMAJ, BMIN and BPA are absent: {error}"));
                None
            }
        };
        self.record.beam = beam.as_ref().map(BeamFigures::from);
        let lobes = beam.as_ref().map(|beam| side_lobes(psf.view(), reference, beam, geometry.pixel));
        let at_centre = match price {
            Some(_) => {
                let natural = mosaic.natural_weight_at(place)?;
                Some((natural / weight[[reference.1, reference.0]]).sqrt()).filter(|noise| noise.is_finite())
            }
            None => None,
        };
        self.record.weighting = Some(WeightingFigures::new(&self.weighting, price, at_centre, lobes));

        let started = Instant::now();
        let stage = self.progress.stage("checking against exact sums", "", None);
        let check = self_check(&mut mosaic, &sums, 0x5e1f)?;
        stage.finish();
        self.timed("checking against exact sums", started);
        if let Some(check) = check {
            // the nearest cell is promised no more than it can keep
            let tolerance = match &self.record.kernels {
                Some(kernels) if kernels.window == Kind::Nearest.name() => tolerance + kernels.aliasing,
                _ => tolerance,
            };
            let accuracy = Accuracy::new(
                tolerance,
                check.numerator_error,
                check.normaliser_error,
                check.visibilities,
                check.pixels,
            );
            if !accuracy.kept {
                // the page and the summary say it from the record; this says it whatever is quiet
                self.progress.warn(&format!(
                    "THE PROMISED ACCURACY WAS NOT KEPT: promised {tolerance:e}, measured {:.1e} for the numerator and \
                     {:.1e} for the normaliser. Do not use these images; please report this run file",
                    check.numerator_error, check.normaliser_error
                ));
            }
            self.record.accuracy = Some(accuracy);
        }

        let frequency_hz = mosaic.frequency_hz().ok_or_else(|| told(NothingToImage::Weights))?;
        self.noise(&geometry, &weight, &dirty, frequency_hz);
        let made = Dirty { sums: &sums, weight: &weight, image: &dirty, beam, frequency_hz };
        let deconvolved = self.deconvolved(&mut mosaic, &made)?;
        // sources are measured on the restored sky where there is one
        let (name, image, restored) = match &deconvolved {
            Some(made) => ("sky", &made.sky, Some(&made.beam)),
            None => ("dirty", &dirty, beam.as_ref()),
        };
        let plates = Plates {
            name,
            image,
            weight: &weight,
            psf: (&psf, reference),
            geometry,
            beam: restored,
            reference_hz: frequency_hz,
        };
        self.measure(&plates, &mut mosaic)?;
        let start = mosaic.pointings().iter().map(|p| p.tally.span.0).fold(f64::INFINITY, f64::min);
        let header = ProductHeader {
            bunit: "Jy/beam".to_owned(),
            object: self.record.title.clone(),
            frequency_hz,
            bandwidth_hz: (band.1 - band.0).max(0.0),
            beam,
            start_mjd_utc: start.is_finite().then_some(start),
            description: String::new(),
            history: self.history(),
        };
        Ok(Images { geometry, dirty, weight, psf, deconvolved, header })
    }

    /// Imaging weights, where others than natural are asked for; what they cost.
    fn weigh(&mut self, mosaic: &mut Mosaic) -> Result<Option<Price>, CliError> {
        if self.weighting.is_natural() {
            return Ok(None);
        }
        let started = Instant::now();
        let stage = self.progress.stage("weighting", "rows", None);
        let price = mosaic.weigh(&self.weighting, |rows| stage.add(rows)).map_err(told)?;
        stage.finish();
        self.timed("weighting", started);
        if !mosaic.pointings().iter().any(Pointing::reaches) {
            return Err(told(NothingToImage::Pixels));
        }
        if price.imaging.is_nan() || price.imaging <= 0.0 {
            return Err(told(NothingToImage::Weights));
        }
        for (pointing, record) in mosaic.pointings().iter().zip(&mut self.record.pointings) {
            record.visibilities_used = pointing.share.used;
            record.visibilities_excluded = pointing.share.excluded;
            if pointing.share.used == 0 && pointing.share.excluded > 0 {
                self.record.warnings.push(format!(
                    "[weighting] excludes all visibilities of pointing {}; it adds nothing",
                    record.name
                ));
            }
        }
        Ok(Some(price))
    }

    /// Sources, when the run file asks for them.
    fn measure(&mut self, plates: &Plates, mosaic: &mut Mosaic) -> Result<(), CliError> {
        let Some(request) = &self.request else { return Ok(()) };
        let started = Instant::now();
        let stage = self.progress.stage("measuring sources", "rows", None);
        // the estimator of least error goes by inverse variances, whatever the image is weighted by; what a range of u, v
        // excludes was not meant to be used, and is not
        let title = &self.record.title;
        let measured = mosaic
            .naturally(|mosaic| image_measure::measure(request, plates, mosaic, title, |rows| stage.add(rows)))?;
        stage.finish();
        self.record.warnings.extend(measured.warnings.iter().cloned());
        self.record.measured = Some(measured.figures.clone());
        self.measurement = Some(measured);
        self.timed("measuring sources", started);
        Ok(())
    }

    fn deconvolved(&mut self, mosaic: &mut Mosaic, dirty: &Dirty) -> Result<Option<Deconvolved>, CliError> {
        let started = Instant::now();
        let deconvolved = deconvolved(self.run, mosaic, dirty, &mut self.keeper, self.progress)?;
        if let Some(made) = &deconvolved {
            self.timed("deconvolving", started);
            self.record.warnings.extend(made.warnings());
            self.record.limits.extend(made.limits());
            self.record.deconvolution = Some(made.figures.clone());
        }
        Ok(deconvolved)
    }

    /// A pattern that is not round, on a mount whose turning is not known here, would be placed wrongly.
    fn notice_mounts(&mut self, observation: &Observation, beams: &StationBeams) {
        let odd: Vec<&str> = observation
            .stations
            .iter()
            .enumerate()
            .filter(|(index, station)| {
                let beam = beams.beam(*index);
                let known = matches!(station.mount, Mount::AltAzimuth | Mount::Equatorial);
                let turning_matters = !beam.pattern.round() || beam.offset != [0.0, 0.0];
                !known && turning_matters
            })
            .map(|(_, station)| station.name.as_str())
            .collect();
        if !odd.is_empty() {
            let warning = format!(
                "{}: the beams of {} are taken not to turn on the sky; only alt-azimuth mounts turn and equatorial ones do \
                 not, others are not yet known",
                observation.origin,
                odd.join(", ")
            );
            if !self.record.warnings.contains(&warning) {
                self.record.warnings.push(warning);
            }
        }
    }

    fn describe(&mut self, mosaic: &Mosaic, names: &[(String, Direction, usize)]) {
        let mut kernels = KernelFigures::default();
        for (pointing, (name, aim, stations)) in mosaic.pointings().iter().zip(names) {
            let report = pointing.gridded.report();
            let (ra, dec) = aim.to_deg();
            self.record.pointings.push(PointingRecord {
                name: name.clone(),
                aim_ra_deg: ra,
                aim_dec_deg: dec,
                stations: *stations,
                visibilities_used: pointing.tally.used,
                visibilities_excluded: 0,
                visibilities_flagged: pointing.tally.flagged,
                window_width_px: report.patch_px.0,
                window_height_px: report.patch_px.1,
            });
            if pointing.tally.used == 0 {
                self.record.warnings.push(format!("pointing {name} has no usable visibility and adds nothing"));
            } else if report.patch_px.0 == 0 {
                self.record.warnings.push(format!("pointing {name} does not reach the image and adds nothing"));
            }
            kernels.members += report.members as u64;
            kernels.distinct += report.distinct_kernels as u64;
            kernels.terms = kernels.terms.max(report.terms.iter().copied().max().unwrap_or(0) as u64);
            kernels.largest_difference = kernels.largest_difference.max(report.largest_difference);
            kernels.bound = if kernels.bound == 0.0 { report.bound } else { kernels.bound.min(report.bound) };
            kernels.memory_bytes = kernels.memory_bytes.max(report.memory_bytes as u64);
            kernels.build_seconds += report.build_seconds;
            if report.padding > 0.0 {
                kernels.window = report.window.name().to_owned();
                kernels.window_support = kernels.window_support.max(report.window_support as u64);
                let padding = if kernels.padding == 0.0 { f64::INFINITY } else { kernels.padding };
                kernels.padding = padding.min(report.padding);
                kernels.aliasing = kernels.aliasing.max(report.window_error);
            }
        }
        if kernels.window == Kind::Nearest.name() {
            self.record.warnings.push(format!(
                "window \"nearest\" does not keep the tolerance of {:e}: sources outside the image come through with up to {:.2} \
                 of their strength, and the sums are promised no better than that. It is here for comparison, not for \
                 measuring",
                self.settings.tolerance.value, kernels.aliasing
            ));
        }
        self.record.kernels = Some(kernels);
    }

    fn noise(&mut self, geometry: &ImageGeometry, weight: &Array2<f64>, dirty: &Array2<f64>, frequency_hz: f64) {
        let mut noises: Vec<(f64, usize)> = weight
            .iter()
            .zip(dirty)
            .enumerate()
            .filter(|(_, (_, d))| !d.is_nan())
            .map(|(at, (w, _))| (1.0 / w.sqrt(), at))
            .collect();
        noises.sort_by(|a, b| a.0.total_cmp(&b.0));
        let mut figures = ImageFigures::of(geometry);
        figures.filled_fraction = Some(noises.len() as f64 / dirty.len() as f64);
        figures.reference_hz = Some(frequency_hz);
        self.record.image = Some(figures);
        if let Some(&(lowest, at)) = noises.first() {
            let (x, y) = (at % geometry.width, at / geometry.width);
            let (ra, dec) = geometry.direction_of(x as f64, y as f64).unwrap_or(geometry.centre).to_deg();
            self.record.noise = Some(Noise {
                lowest_jy_per_beam: lowest,
                lowest_at_ra_deg: ra,
                lowest_at_dec_deg: dec,
                median_jy_per_beam: noises.get(noises.len() / 2).map(|n| n.0),
            });
        }
    }

    fn history(&self) -> Vec<String> {
        let record = &self.record;
        let mut lines = vec![
            format!("made by evensky {} image, run file {}", record.versions.evensky, record.run_file),
            format!("weights: {}; Stokes I from all parallel hands or Stokes I data", self.weighting.describe()),
            format!("pixels below {} of the largest response are blank", self.settings.lowest_response.value),
        ];
        lines.extend(record.weighting.iter().flat_map(WeightingFigures::history));
        if let Some(kernels) = record.kernels.as_ref().filter(|kernels| kernels.padding > 0.0) {
            lines.push(format!(
                "gridding window {}, support in cells {}, padding {}, aliasing at most {:.1e}",
                kernels.window, kernels.window_support, kernels.padding, kernels.aliasing
            ));
        }
        if let Some(a) = &record.accuracy {
            lines.push(format!(
                "relative error of the sums: promised {:e}, measured {:.1e} (N) and {:.1e} (W) on {} pixels",
                a.promised, a.measured_numerator, a.measured_normaliser, a.sample_pixels
            ));
        }
        if let Some(figures) = &record.deconvolution {
            lines.push(figures.history());
        }
        for group in &record.stations {
            lines.push(format!("beam {}: {} ({} stations)", group.beam, group.description, group.stations.len()));
        }
        for p in &record.pointings {
            lines.push(format!(
                "pointing {}: aim {:.6} {:.6} deg, {} visibilities",
                p.name, p.aim_ra_deg, p.aim_dec_deg, p.visibilities_used
            ));
        }
        lines
    }
}

/// Why there is nothing to show.
#[derive(Debug, thiserror::Error)]
enum NothingToImage {
    #[error(
        "no usable visibility in any pointing: all weights are zero, or no hand carries total intensity; expected parallel \
         hands or Stokes I with positive weights"
    )]
    Visibilities,
    #[error(
        "[weighting] leaves no visibility: uv_range_wavelengths, uv_range_m or tapers exclude all; compare them with the \
         baselines that `evensky describe` shows"
    )]
    Weights,
    #[error(
        "no pixel of the image reaches lowest_response: no pointing looks there; compare centre_deg with the aims that \
         `evensky describe` shows"
    )]
    Pixels,
}

/// Lowest and highest edge of all channels seen so far.
fn band_of(observation: &Observation, band: (f64, f64)) -> (f64, f64) {
    observation.frequencies_hz.iter().zip(&observation.widths_hz).fold(band, |(low, high), (hz, width)| {
        let half = 0.5 * width.abs();
        (low.min(hz - half), high.max(hz + half))
    })
}

/// The image centre, or the deepest pixel where the centre is blank; `None` when all are.
fn reference_pixel(geometry: &ImageGeometry, sums: &Sums, dirty: &Array2<f64>) -> Option<(usize, usize)> {
    let (x, y) = geometry.reference();
    if !dirty[[y, x]].is_nan() {
        return Some((x, y));
    }
    let response = response_map(sums);
    let mut best: Option<((usize, usize), f64)> = None;
    for (((y, x), &r), d) in response.indexed_iter().zip(dirty) {
        if !d.is_nan() && best.is_none_or(|(_, most)| r > most) {
            best = Some(((x, y), r));
        }
    }
    best.map(|(place, _)| place)
}
