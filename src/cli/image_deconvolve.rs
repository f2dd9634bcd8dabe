//! The deconvolution of `image`: from the sums to the model, the residual and the restored sky.

use super::CliError;
use super::image_files::Sheet;
use super::image_state::Keeper;
use super::progress::{Progress, Stage};
use crate::imaging::beam_fit::FittedBeam;
use crate::imaging::deconvolve::local_psf::Scaling;
use crate::imaging::deconvolve::{
    MajorCycle, Minor, Model, NoiseLevel, Observer, Part, Settings, Spectrum, State, Task, circles_mask,
    deconvolve, read_mask, restored_model, spectrum,
};
use crate::imaging::{Mosaic, Pointing};
use crate::report::{BeamFigures, DeconvolutionFigures};
use crate::response::Sums;
use crate::run::{Deconvolution, DeconvolutionMethod, NoiseSource, RunFile};
use crate::sky::{Component, ImageGeometry, read_components};
use ndarray::{Array2, Zip};

/// Images of a deconvolved run; blank pixels are NaN.
pub(super) struct Deconvolved {
    /// Restored model and residual, Jy/beam.
    pub sky: Array2<f64>,
    /// N/W of the residual, Jy/beam.
    pub residual: Array2<f64>,
    /// Model, Jy/pixel; nowhere blank.
    pub model: Array2<f64>,
    /// Noise of the flat sky, Jy/beam.
    pub noise: Array2<f64>,
    /// Spectral index and curvature, with frequency terms.
    pub spectrum: Option<Spectrum>,
    /// All components.
    pub components: Vec<Component>,
    /// The restoring beam.
    pub beam: FittedBeam,
    /// For the record.
    pub figures: DeconvolutionFigures,
}

/// What the dirty image is made of.
pub(super) struct Dirty<'a> {
    pub sums: &'a Sums,
    /// Weight map: inverse variance of N/W.
    pub weight: &'a Array2<f64>,
    /// N/W, NaN where blank.
    pub image: &'a Array2<f64>,
    pub beam: Option<FittedBeam>,
    pub frequency_hz: f64,
}

/// Why nothing can be restored.
#[derive(Debug, thiserror::Error)]
#[error(
    "no beam could be fitted to the point spread function, and a model is restored with one; expected \
     restoring_beam_arcsec in [deconvolution], or pixels that resolve the beam"
)]
struct NoBeam;

/// Deconvolves as the run file asks; `None` when it does not.
pub(super) fn deconvolved(
    run: &RunFile,
    mosaic: &mut Mosaic,
    dirty: &Dirty,
    keeper: &mut Keeper,
    progress: &Progress,
) -> Result<Option<Deconvolved>, CliError> {
    let asked = &run.deconvolution;
    if asked.method == DeconvolutionMethod::None {
        return Ok(None);
    }
    let geometry = *mosaic.geometry();
    let beam = match asked.restoring_beam_arcsec {
        Some(widths) => {
            let [major, minor] = widths.map(|arcsec| (arcsec / 3600.0).to_radians());
            let position_angle = asked.restoring_angle_deg.to_radians();
            FittedBeam { major, minor, position_angle, largest_misfit: 0.0, pixels: 0 }
        }
        None => dirty.beam.ok_or_else(|| CliError::Command(Box::new(NoBeam)))?,
    };
    let settings = settings(asked, &geometry, dirty.beam.as_ref().unwrap_or(&beam), dirty.frequency_hz);
    let seen = dirty.image.mapv(|value| !value.is_nan());
    let state = keeper.take();
    let continued = state.as_ref().map(State::cycles);
    let task = Task {
        geometry,
        mask: mask(run, &geometry)?,
        start: start(run, &geometry, &settings)?,
        state,
        parts: mosaic
            .pointings_mut()
            .iter_mut()
            .map(|Pointing { source, gridded, exact, aim, .. }| Part {
                source: source.as_mut(),
                response: gridded,
                exact,
                aim: *aim,
            })
            .collect(),
        numerator: &dirty.sums.numerator,
        normaliser: &dirty.sums.normaliser,
        weight: dirty.weight,
        seen: &seen,
        beam,
        settings: settings.clone(),
    };
    let stage = progress.stage("deconvolving", "rows", None);
    let outcome = deconvolve(task, &mut Telling { progress, stage: &stage, keeper })?;
    stage.finish();

    let scaling = Scaling::new(&dirty.sums.normaliser, dirty.weight, &seen);
    let spectrum = spectrum(&outcome, &scaling, &geometry, &beam, &settings);
    let mut residual = outcome.numerator;
    Zip::from(&mut residual).and(&dirty.sums.normaliser).and(&seen).for_each(|value, w, seen| {
        *value = if *seen { *value / w } else { f64::NAN };
    });
    let mut sky = restored_model(&outcome.model, &geometry, &beam, settings.reference_hz);
    Zip::from(&mut sky).and(&residual).for_each(|value, residual| *value += residual);
    let noise = Zip::from(dirty.weight)
        .and(&seen)
        .map_collect(|weight, seen| if *seen && *weight > 0.0 { 1.0 / weight.sqrt() } else { f64::NAN });
    let mut components = outcome.model.points.clone();
    components.extend(outcome.model.pixel_components(&geometry, settings.reference_hz, settings.spectral_index));
    let left = Left::of(&residual, &noise);
    let brightest = sky.iter().copied().filter(|value| value.is_finite()).fold(0.0, f64::max);
    let figures = DeconvolutionFigures {
        method: method_name(asked.method).to_owned(),
        stop: outcome.stop,
        stop_reason: outcome.stop.describe().to_owned(),
        finished: outcome.stop.finished(),
        components: outcome.components,
        component_rows: components.len(),
        fitted_points: outcome.fitted_points,
        model_jy: outcome.model.flux_at(settings.reference_hz),
        residual_peak_jy_per_beam: left.peak,
        residual_peak_over_noise: left.peak_over_noise,
        residual_rms_over_noise: left.rms_over_noise,
        dynamic_range: if left.peak > 0.0 { brightest / left.peak } else { 0.0 },
        side_lobe: outcome.side_lobe,
        searched_pixels: outcome.searched_pixels,
        restoring_beam: BeamFigures::from(&beam),
        continued_after_cycle: continued,
        cycles: outcome.cycles,
    };
    let model = outcome.model.image(&geometry, settings.reference_hz);
    Ok(Some(Deconvolved { sky, residual, model, noise, spectrum, components, beam, figures }))
}

/// The residual in figures.
struct Left {
    peak: f64,
    peak_over_noise: f64,
    rms_over_noise: f64,
}

impl Left {
    fn of(residual: &Array2<f64>, noise: &Array2<f64>) -> Left {
        let mut left = Left { peak: 0.0, peak_over_noise: 0.0, rms_over_noise: 0.0 };
        let mut count = 0.0;
        for (value, noise) in residual.iter().zip(noise).filter(|(value, _)| !value.is_nan()) {
            let over = value.abs() / noise;
            left.peak = left.peak.max(value.abs());
            left.peak_over_noise = left.peak_over_noise.max(over);
            left.rms_over_noise += over * over;
            count += 1.0;
        }
        left.rms_over_noise = f64::sqrt(left.rms_over_noise / f64::max(count, 1.0));
        left
    }
}

fn method_name(method: DeconvolutionMethod) -> &'static str {
    match method {
        DeconvolutionMethod::None => "none",
        DeconvolutionMethod::Hogbom => "hogbom",
        DeconvolutionMethod::Clark => "clark",
        DeconvolutionMethod::MultiScale => "multi-scale",
    }
}

fn settings(asked: &Deconvolution, geometry: &ImageGeometry, beam: &FittedBeam, reference_hz: f64) -> Settings {
    let minor = match asked.method {
        DeconvolutionMethod::None | DeconvolutionMethod::Clark => Minor::Clark,
        DeconvolutionMethod::Hogbom => Minor::Hogbom,
        DeconvolutionMethod::MultiScale => {
            let scales_px = match &asked.scales_arcsec {
                Some(scales) => {
                    scales.iter().map(|arcsec| (arcsec / 3600.0).to_radians() / geometry.pixel).collect()
                }
                None => default_scales(geometry, beam),
            };
            Minor::MultiScale { scales_px, bias: asked.scale_bias }
        }
    };
    Settings {
        loop_gain: asked.loop_gain,
        stop_at_noise: asked.stop_at_noise,
        stop_at_jy: asked.stop_at_jy,
        max_components: asked.max_components as u64,
        max_major_cycles: asked.max_major_cycles,
        major_depth: asked.major_depth,
        non_negative: asked.non_negative,
        noise: match asked.noise {
            NoiseSource::Weights => NoiseLevel::Weights,
            NoiseSource::Measured => NoiseLevel::Measured,
        },
        mask_above_noise: asked.mask_above_noise,
        fit_points_above_noise: asked.fit_points_above_noise,
        spectral_index: asked.spectral_index,
        frequency_terms: asked.frequency_terms,
        ..Settings::new(minor, reference_hz)
    }
}

/// A point, and one and a half beams doubled as long as six of them fit into the image (common practice, no source).
fn default_scales(geometry: &ImageGeometry, beam: &FittedBeam) -> Vec<f64> {
    let widest = geometry.width.min(geometry.height) as f64 / 6.0;
    let first = 1.5 * beam.major / geometry.pixel;
    let wide = (0..4).map(|n| first * f64::from(1 << n)).filter(|scale| *scale <= widest);
    std::iter::once(0.0).chain(wide).collect()
}

fn mask(run: &RunFile, geometry: &ImageGeometry) -> Result<Option<Array2<bool>>, CliError> {
    let asked = &run.deconvolution;
    let mut mask: Option<Array2<bool>> = None;
    if let Some(file) = &asked.mask {
        let read = read_mask(&file.value, geometry);
        mask = Some(read.map_err(|error| {
            run.deconvolution_file("mask", file, error.to_string(), "a FITS image on the pixels of the image")
        })?);
    }
    if let Some(circles) = &asked.circles {
        let open = circles_mask(geometry, circles);
        mask = Some(match mask {
            Some(other) => Zip::from(&other).and(&open).map_collect(|a, b| *a || *b),
            None => open,
        });
    }
    if let (Some(open), Some(file)) = (&mask, asked.mask.as_ref().or(asked.mask_circles.as_ref()))
        && !open.iter().any(|open| *open)
    {
        let key = if asked.mask.is_some() { "mask" } else { "mask_circles" };
        let problem = "no pixel of the image is open".to_owned();
        return Err(run.deconvolution_file(key, file, problem, "a mask that opens some").into());
    }
    Ok(mask)
}

fn start(run: &RunFile, geometry: &ImageGeometry, settings: &Settings) -> Result<Model, CliError> {
    let Some(file) = &run.deconvolution.start_from else { return Ok(Model::empty(geometry)) };
    let sky = read_components(&file.value)
        .map_err(|error| run.deconvolution_file("start_from", file, error.to_string(), "a component list (CSV)"))?;
    Ok(Model::from_components(sky, geometry, settings.reference_hz, settings.spectral_index))
}

/// Major cycles told to the person who waits.
struct Telling<'a> {
    progress: &'a Progress,
    stage: &'a Stage<'a>,
    keeper: &'a mut Keeper,
}

impl Observer for Telling<'_> {
    fn rows(&mut self, rows: u64) {
        self.stage.add(rows);
    }

    fn cycle(&mut self, number: usize, cycle: &MajorCycle) {
        self.progress.note(&format!(
            "major cycle {number}: {} components, {:.4} Jy, residual at most {:.3e} Jy/beam ({:.1} × noise)",
            cycle.components, cycle.model_jy, cycle.peak_jy_per_beam, cycle.peak_over_noise
        ));
    }

    fn state(&mut self, state: &State) {
        self.keeper.keep(state, self.progress);
    }
}

impl Deconvolved {
    /// What must be known before the images are trusted.
    pub(super) fn warnings(&self) -> Option<String> {
        let figures = &self.figures;
        (!figures.finished).then(|| {
            format!(
                "deconvolution ended before its levels were reached: {}; the residual still has {:.1} times the noise",
                figures.stop_reason, figures.residual_peak_over_noise
            )
        })
    }

    /// What the images cannot tell.
    pub(super) fn limits(&self) -> Vec<String> {
        let mut limits = vec![
            "The sky is in Jy per restoring beam where the model holds the flux, and in Jy per dirty beam where the \
             residual does: flux below the level at which deconvolution stopped is not on the same scale for extended \
             sources."
                .to_owned(),
            "Components outside the mask or below lowest_response are not looked for; the side lobes of such sources are \
             still there."
                .to_owned(),
        ];
        if self.spectrum.is_some() {
            limits.push(
                "Spectral indices are those of the polynomial in frequency that was fitted: over wide bands a power law is \
                 not one. Their errors hold the thermal noise only. components.csv has the constant terms alone."
                    .to_owned(),
            );
        }
        limits
    }

    /// The images, to be written.
    pub(super) fn sheets(&self) -> Vec<Sheet<'_>> {
        let mut sheets = vec![
            Sheet {
                name: "sky",
                image: &self.sky,
                bunit: "Jy/beam",
                unit: "Jy/beam",
                quantity: "Sky, flat",
                what: "restored model plus residual on the flat sky",
                caption: "The model seen with the restoring beam, and what is left added to it, corrected for the primary \
                          beams of all stations. The noise differs from place to place: see the noise map.",
                beam: Some(self.beam),
            },
            Sheet {
                name: "residual",
                image: &self.residual,
                bunit: "Jy/beam",
                unit: "Jy/beam",
                quantity: "Residual, flat sky",
                what: "dirty image of data less model, N/W",
                caption: "What the model does not explain. Look for rings and stripes around the brightest sources.",
                beam: Some(self.beam),
            },
            Sheet {
                name: "model",
                image: &self.model,
                bunit: "Jy/pixel",
                unit: "Jy/pixel",
                quantity: "Model",
                what: "flux density of the components on each pixel",
                caption: "Flux density of the components on each pixel; fitted points stand on the pixel nearest to them, \
                          components.csv has their places.",
                beam: None,
            },
            Sheet {
                name: "noise",
                image: &self.noise,
                bunit: "Jy/beam",
                unit: "Jy/beam",
                quantity: "Noise of the flat sky",
                what: "thermal noise of the flat sky, one over the root of the weight map",
                caption: "Thermal noise at each pixel, as the weights of the visibilities state it.",
                beam: None,
            },
        ];
        sheets.extend(self.spectrum.iter().flat_map(spectral_sheets));
        sheets
    }
}

fn spectral_sheets(spectrum: &Spectrum) -> Vec<Sheet<'_>> {
    let sheet = |name, image, quantity, what, caption| Sheet {
        name,
        image,
        bunit: "",
        unit: "",
        quantity,
        what,
        caption,
        beam: None,
    };
    let mut sheets = vec![
        sheet(
            "spectral-index",
            &spectrum.index,
            "Spectral index",
            "spectral index of the restored sky, S ~ nu^index, where it is 5 times its noise or more",
            "Slope of the logarithm of the flux density at the frequency of the image. The beams' own change with frequency \
             is corrected for. Blank where the sky is fainter than five times its noise.",
        ),
        sheet(
            "spectral-index-error",
            &spectrum.index_error,
            "Standard error of the spectral index",
            "standard error of the spectral index, thermal noise only",
            "From thermal noise alone; errors of the beams' widths with frequency come on top.",
        ),
    ];
    if let (Some(curvature), Some(error)) = (&spectrum.curvature, &spectrum.curvature_error) {
        sheets.push(sheet(
            "spectral-curvature",
            curvature,
            "Spectral curvature",
            "curvature b of the spectrum, S ~ nu^(index + b ln(nu/nu0))",
            "How the spectral index changes with the logarithm of frequency, halved: S ∝ ν^(α + β ln(ν/ν₀)).",
        ));
        sheets.push(sheet(
            "spectral-curvature-error",
            error,
            "Standard error of the spectral curvature",
            "standard error of the spectral curvature, thermal noise only",
            "From thermal noise alone.",
        ));
    }
    sheets
}
