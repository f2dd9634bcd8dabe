//! The stage of `image` that measures sources: reads the list of places, finds or takes them, fits, writes the tables.

use super::CliError;
use crate::fits::Header;
use crate::imaging::Mosaic;
use crate::imaging::beam_fit::FittedBeam;
use crate::measure::{
    Correlation, Errors, FindOptions, ListFluxes, ListOptions, Position, PositionsError, Reading, Search, Shapes,
    Source, find_sources, fluxes_from_visibilities, read_maps, read_positions, survey_visibilities,
};
use crate::report::{
    Measured, Product, SourcesError, source_headings, write_covariance, write_source_csv, write_source_fits,
    write_source_votable,
};
use crate::run::{FitErrors, FluxesFrom, Measure, RunFile, SourceShape, Weighting};
use crate::sky::ImageGeometry;
use nalgebra::DMatrix;
use ndarray::Array2;
use std::path::Path;

/// What to measure, read and checked before the long work.
pub(super) struct Request {
    settings: Measure,
    positions: Option<Vec<Position>>,
    lowest_response: f64,
    weighting: Weighting,
}

/// The images that sources are sought in.
pub(super) struct Plates<'a> {
    /// Name of the image: `dirty` or `sky`.
    pub name: &'a str,
    /// Flat sky, Jy/beam, NaN = blank.
    pub image: &'a Array2<f64>,
    /// Its inverse variance.
    pub weight: &'a Array2<f64>,
    /// The point spread function, and the pixel of its peak.
    pub psf: (&'a Array2<f64>, (usize, usize)),
    pub geometry: ImageGeometry,
    pub beam: Option<&'a FittedBeam>,
    /// The frequency that the header states, Hz.
    pub reference_hz: f64,
}

/// What was measured, ready to be written.
pub(super) struct Measurement {
    sources: Vec<Source>,
    covariance: Option<DMatrix<f64>>,
    title: String,
    reference_hz: f64,
    pub figures: Measured,
    pub warnings: Vec<String>,
}

/// Reads what `[measure]` asks for; `None` without that table.
pub(super) fn prepare(run: &RunFile) -> Result<Option<Request>, CliError> {
    let Some(settings) = run.measure()?.cloned() else { return Ok(None) };
    let lowest_response = run.image()?.lowest_response.value;
    let positions = match &settings.positions {
        Some(file) => Some(read_positions(&file.value, &source_headings()).map_err(list)?),
        None => None,
    };
    Ok(Some(Request { settings, positions, lowest_response, weighting: run.weighting }))
}

fn list(error: PositionsError) -> CliError {
    CliError::Command(Box::new(error))
}

/// Measures. `rows` is told rows of visibilities as they are read.
pub(super) fn measure(
    request: &Request,
    plates: &Plates,
    mosaic: &mut Mosaic,
    title: &str,
    rows: impl FnMut(u64),
) -> Result<Measurement, CliError> {
    let settings = &request.settings;
    let mut warnings = Vec::new();
    let dirty = plates.name == "dirty";
    let in_rounds = settings.fluxes_from == FluxesFrom::Visibilities && settings.rounds.value > 0;
    let mut sources = match (&request.positions, plates.beam) {
        (Some(positions), _) => positions
            .iter()
            .map(|p| {
                Source::at(&p.name, p.direction, p.spectral_index.unwrap_or(settings.assumed_spectral_index.value))
            })
            .collect(),
        // a dirty image is its own first residual: peaks come from the rounds, highest first, side lobes never
        (None, Some(_)) if dirty && in_rounds => Vec::new(),
        (None, Some(beam)) => find(settings, plates, beam, &mut warnings),
        (None, None) => {
            warnings
                .push("no source was sought: without a fitted beam there is nothing to compare peaks with".into());
            Vec::new()
        }
    };
    let options = ListOptions {
        reference_hz: plates.reference_hz,
        index_error: settings.spectral_index_error.value,
        lowest_response: request.lowest_response,
        // one error less than the peak had to have: the fit at the fitted place scatters about it
        wander: request.positions.is_none().then(|| plates.beam.map(|beam| 0.5 * beam.minor)).flatten(),
        frame: plates.geometry.frame(),
        search: request.positions.is_none().then_some(Search {
            rounds: settings.rounds.value,
            find_above_noise: settings.find_above_noise.value,
            geometry: plates.geometry,
            spectral_index: settings.assumed_spectral_index.value,
        }),
        confirm: request.positions.is_none().then(|| (settings.find_above_noise.value - 1.0).max(0.0)),
    };
    let mut pointings: Vec<Reading> = mosaic
        .pointings_mut()
        .iter_mut()
        .map(|p| Reading { exact: &p.exact, source: p.source.as_mut(), imager: Some(&p.gridded) })
        .collect();
    let told = |error| CliError::Command(Box::new(error));
    let joint = match settings.fluxes_from {
        FluxesFrom::Visibilities => {
            Some(fluxes_from_visibilities(&mut sources, &mut pointings, &options, rows).map_err(told)?)
        }
        FluxesFrom::Image => {
            survey_visibilities(&mut sources, &mut pointings, &options, false, rows).map_err(told)?;
            None
        }
    };
    read_maps(&mut sources, plates.image.view(), plates.weight.view(), &plates.geometry, plates.beam);
    let mut how = match (&request.positions, settings.fluxes_from) {
        (Some(_), _) => "places given, flux densities from the visibilities".to_owned(),
        (None, FluxesFrom::Visibilities) => {
            format!("found in {}.fits, flux densities from the visibilities", plates.name)
        }
        (None, FluxesFrom::Image) => format!("found and measured in {}.fits", plates.name),
    };
    if settings.fluxes_from == FluxesFrom::Visibilities && !request.weighting.is_natural() {
        how += ", weighted by inverse variances";
        if let Some(ranges) = request.weighting.ranges() {
            how += &format!(" ({})", ranges.describe());
        }
    }
    let mut figures = Measured::of(&sources, &how);
    if let Some(joint) = &joint {
        figures.unconfirmed = joint.unconfirmed;
        figures.passes = joint.passes;
        figures.reduced_misfit = joint.reduced_misfit.is_finite().then_some(joint.reduced_misfit);
        warn_of(joint, &mut warnings);
    }
    Ok(Measurement {
        covariance: joint.map(|joint| joint.covariance),
        sources,
        title: title.to_owned(),
        reference_hz: plates.reference_hz,
        figures,
        warnings,
    })
}

fn find(settings: &Measure, plates: &Plates, beam: &FittedBeam, warnings: &mut Vec<String>) -> Vec<Source> {
    let options = FindOptions {
        find_above_noise: settings.find_above_noise.value,
        island_above_noise: settings.island_above_noise.value,
        shapes: match settings.shape {
            // side lobes of neighbours widen what they cover: sizes in a dirty image mean nothing
            SourceShape::Auto if plates.name == "dirty" => Shapes::Point,
            SourceShape::Auto => Shapes::Auto,
            SourceShape::Point => Shapes::Point,
            SourceShape::Gaussian => Shapes::Gaussian,
        },
        errors: match settings.errors {
            FitErrors::Covariance => Errors::Covariance,
            FitErrors::Condon => Errors::Condon,
        },
        spectral_index: settings.assumed_spectral_index.value,
    };
    if plates.name == "dirty" {
        warnings.push(
            "sources were sought in the dirty image: side lobes of bright ones hide, shift and imitate faint ones; use \
             [deconvolution] or give positions"
                .to_owned(),
        );
    }
    let (psf, peak) = plates.psf;
    let correlation = Correlation::Image(psf.clone(), peak);
    find_sources(plates.image.view(), plates.weight.view(), &plates.geometry, beam, &correlation, &options)
}

/// Misfit from which on the model, the beams or the weights are called wrong: beyond what noise could do by far.
fn warn_of(joint: &ListFluxes, warnings: &mut Vec<String>) {
    for (holder, other) in &joint.merged {
        warnings.push(format!(
            "sources {holder} and {other} cannot be told apart by these visibilities: {holder} holds the flux of both, \
             {other} has none"
        ));
    }
    // the scatter of a reduced chi-squared of `data` degrees of freedom is √(2/data)
    let scatter = (2.0 / joint.data.max(1) as f64).sqrt();
    let misfit = joint.reduced_misfit;
    if misfit.is_finite() && (misfit - 1.0).abs() > (6.0 * scatter).max(0.05) {
        let why = if misfit > 1.0 {
            "sources are missing from the list, beams or calibration are off, or the weights of the files overstate \
             their accuracy; errors here are those of thermal noise alone"
        } else {
            "the weights of the files understate their accuracy, and the errors here are too large"
        };
        warnings.push(format!("the joint fit leaves {misfit:.3} times the scatter that the weights state: {why}"));
    }
}

impl Measurement {
    /// Writes the tables.
    pub(super) fn write(&self, folder: &Path) -> Result<Vec<Product>, SourcesError> {
        let mut header = Header::new();
        header.set("RESTFRQ", self.reference_hz, "[Hz] frequency of the flux densities").set(
            "RADESYS",
            "ICRS",
            "celestial reference system",
        );
        write_source_csv(&folder.join("sources.csv"), &self.sources)?;
        write_source_votable(&folder.join("sources.vot"), &self.sources, &self.title)?;
        write_source_fits(&folder.join("sources.fits"), &self.sources, &header)?;
        let product = |path: &str, what: &str| Product { path: path.to_owned(), what: what.to_owned() };
        let mut products = vec![
            product("sources.csv", "the sources, one a row; units in the headings"),
            product("sources.vot", "the same as VOTable"),
            product("sources.fits", "the same as FITS binary table"),
        ];
        if let Some(covariance) = &self.covariance {
            let names: Vec<String> = self.sources.iter().map(|s| s.name.clone()).collect();
            write_covariance(&folder.join("flux-covariance.csv"), &names, covariance)?;
            products.push(product("flux-covariance.csv", "covariance of the flux densities, Jy squared"));
        }
        Ok(products)
    }
}
