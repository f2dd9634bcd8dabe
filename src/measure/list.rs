//! A list of sources completed: flux densities from the visibilities, noise and response from the weight map, pointings.

use super::fit::height_at;
use super::joint::{JointFluxes, JointOptions, Reading, joint_fluxes, survey};
use super::normal::Seen;
use super::{Ellipse, MeasureError, Method, Source};
use crate::imaging::beam_fit::FittedBeam;
use crate::response::UnitSource;
use crate::sky::{Direction, ImageGeometry, TangentFrame};
use nalgebra::DMatrix;
use ndarray::ArrayView2;

/// How a list is completed.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ListOptions {
    /// Frequency that flux densities are given at: that of the image's header, Hz.
    pub reference_hz: f64,
    /// Spectral indices are fitted where their error would not pass this; 0 fits none.
    pub index_error: f64,
    /// Root mean square beam product from which on a pointing counts as seeing a source.
    pub lowest_response: f64,
    /// Signal to noise that the joint fit must confirm, or the source is taken for a side lobe and left out; `None` for
    /// places that were given, which all stay.
    pub confirm: Option<f64>,
    /// Places are fitted to the visibilities too, within this angle (radians) of those of the image; `None` holds them.
    pub wander: Option<f64>,
    /// The image's frame.
    pub frame: TangentFrame,
}

/// What the joint fit of a list amounts to.
#[derive(Debug, Clone)]
pub struct ListFluxes {
    /// Covariance of the flux densities in the order of the list, Jy²; NaN for those not measured.
    pub covariance: DMatrix<f64>,
    /// Σ ω|v − M x|² over data less unknowns.
    pub reduced_misfit: f64,
    /// Number of real data.
    pub data: u64,
    /// Times the visibilities were read.
    pub passes: usize,
    /// Sources left out because the visibilities do not confirm them.
    pub unconfirmed: usize,
    /// Sources that the visibilities part in two where the image has one.
    pub split: usize,
    /// Pairs that could not be told apart: (the one that holds the flux, the other).
    pub merged: Vec<(String, String)>,
}

/// Sources that are tried as two points, those of the highest signal to noise.
const MOST_TRIED: usize = 20;
/// By how much χ² must fall for two points to be better than a Gaussian of held shape. The two have three free numbers more,
/// by which chance lowers it less than this in 99 of 100 cases (χ² of three degrees of freedom: 11.3).
const BETTER: f64 = 12.0;

/// Sources with a size, highest signal to noise first.
fn wide_sources(sources: &[Source], joint: &JointFluxes) -> Vec<usize> {
    let signal = |&index: &usize| joint.flux[index].0 / joint.flux[index].1;
    let mut wide: Vec<usize> = (0..sources.len())
        .filter(|&i| sources[i].method == Method::ImageGaussian && sources[i].deconvolved.is_some())
        .filter(|i| signal(i).is_finite())
        .collect();
    wide.sort_by(|a, b| signal(b).total_cmp(&signal(a)).then(a.cmp(b)));
    wide.truncate(MOST_TRIED);
    wide
}

/// A source as two points of half its flux each, whose second moment along its major axis is the source's.
fn two_points(source: &Source, frame: &TangentFrame) -> [Source; 2] {
    let shape = source.deconvolved.map_or([0.0; 3], |shape| Ellipse { minor: 0.0, ..shape }.covariance());
    let [l, m, _] = frame.lmn(source.direction);
    let (dl, dm) = (shape[0].sqrt(), shape[2].sqrt() * if shape[1] < 0.0 { -1.0 } else { 1.0 });
    [1.0, -1.0].map(|sign| {
        let direction = frame.direction(l + sign * dl, m + sign * dm).unwrap_or(source.direction);
        let mut point = Source::at(&source.name, direction, source.spectral_index);
        point.remarks = source.remarks.iter().filter(|r| *r != "resolved").cloned().collect();
        point.remarks.push("two points in one peak of the image".to_owned());
        point
    })
}

/// Factor from which on a source's error counts as widened by its neighbours.
const WIDENED: f64 = 1.5;

fn units(sources: &[Source], reference_hz: f64) -> Vec<UnitSource> {
    let unit = |source: &Source| UnitSource {
        direction: source.direction,
        shape: match (source.method, &source.deconvolved) {
            (Method::ImageGaussian, Some(shape)) => shape.covariance(),
            _ => [0.0; 3],
        },
        reference_hz,
        spectral_index: source.spectral_index,
    };
    sources.iter().map(unit).collect()
}

fn count_pointings(seen: &[Seen], source: usize, lowest: f64) -> usize {
    seen.iter().filter(|pointing| pointing.response(source) > 0.0 && pointing.response(source) >= lowest).count()
}

/// Flux densities, and spectral indices where they can be had, of all sources of the list by joint least squares on the
/// visibilities. Sources with a deconvolved size enter with it, held; the error of their flux density is then no less than
/// the relative one of the image's fit, which knows that the size is uncertain.
///
/// # Errors
/// When the visibilities cannot be read, or sums are no numbers.
pub fn fluxes_from_visibilities(
    sources: &mut Vec<Source>,
    pointings: &mut [Reading],
    options: &ListOptions,
    mut rows: impl FnMut(u64),
) -> Result<ListFluxes, MeasureError> {
    let mut unconfirmed = 0;
    let mut passes = 0;
    let mut fit = |sources: &[Source], index_error: f64, wander| -> Result<JointFluxes, MeasureError> {
        let joint = JointOptions { index_error, wander, frame: options.frame };
        joint_fluxes(pointings, &units(sources, options.reference_hz), joint, &mut rows)
    };
    if let Some(level) = options.confirm {
        // the false ones first go, and only then are spectra fitted: one that soaks up its neighbours' flux spoils theirs
        loop {
            let joint = fit(sources, 0.0, None)?;
            passes += joint.passes;
            let mut keep = joint
                .flux
                .iter()
                .zip(&joint.merged_into)
                .map(|(&(flux, error), merged)| merged.is_none() && flux >= level * error)
                .collect::<Vec<bool>>()
                .into_iter();
            let before = sources.len();
            sources.retain(|_| keep.next().unwrap_or(true));
            unconfirmed += before - sources.len();
            if sources.len() == before {
                break;
            }
        }
    }
    let mut joint = fit(sources, options.index_error, options.wander)?;
    passes += joint.passes;
    let mut split = 0;
    if options.wander.is_some() {
        for index in wide_sources(sources, &joint) {
            let mut trial = sources.clone();
            let [one, other] = two_points(&sources[index], &options.frame);
            trial[index] = one;
            trial.push(other);
            let two = fit(&trial, options.index_error, options.wander)?;
            passes += two.passes;
            let last = trial.len() - 1;
            let stands = |at: usize| {
                let (flux, error) = two.flux[at];
                two.merged_into[at].is_none() && flux > options.confirm.unwrap_or(0.0) * error
            };
            if two.misfit + BETTER < joint.misfit && stands(index) && stands(last) {
                *sources = trial;
                joint = two;
                split += 1;
            }
        }
    }
    for (source, place) in sources.iter_mut().zip(&joint.place) {
        if let Some((direction, [by_l, by_m])) = place {
            source.direction = *direction;
            // l and m are foreshortened away from the image's centre: these errors are small by 1 − n at most
            source.place_error = Some([*by_l, *by_m]);
        }
    }
    if options.wander.is_some() {
        super::name_sources(sources);
    }
    let names: Vec<String> = sources.iter().map(|s| s.name.clone()).collect();
    let mut merged = Vec::new();
    for (index, source) in sources.iter_mut().enumerate() {
        let (flux, error) = joint.flux[index];
        source.pointings = count_pointings(&joint.seen, index, options.lowest_response);
        source.reference_hz = Some(options.reference_hz);
        if let Some((fitted, error)) = joint.index[index] {
            source.spectral_index = fitted;
            source.spectral_index_error = Some(error);
        }
        if let Some(holder) = joint.merged_into[index] {
            source.remarks.push(format!("cannot be told apart from {0}: its flux is in {0}", names[holder]));
            merged.push((names[holder].clone(), names[index].clone()));
            (source.flux_jy, source.flux_error_jy) = (None, None);
        } else if flux.is_nan() {
            source.remarks.push("seen by no visibility".to_owned());
            (source.flux_jy, source.flux_error_jy) = (None, None);
        } else {
            let image = source.flux_jy.zip(source.flux_error_jy).filter(|_| source.method == Method::ImageGaussian);
            let of_shape = image.map_or(0.0, |(flux_in_image, error)| error / flux_in_image * flux);
            source.flux_jy = Some(flux);
            source.flux_error_jy = Some(error.max(of_shape.abs()));
            if joint.widened[index] > WIDENED {
                source.remarks.push(format!("error widened {:.1} times by neighbours", joint.widened[index]));
            }
        }
        source.method = Method::Visibilities;
        let weight = joint.weight[index];
        if source.noise_jy.is_none() && weight > 0.0 {
            // off the image: as natural weights have it
            source.noise_jy = Some(1.0 / weight.sqrt());
        }
    }
    for (holder, other) in &merged {
        if let Some(source) = sources.iter_mut().find(|s| s.name == *holder) {
            source.remarks.push(format!("holds the flux of {other} too"));
        }
    }
    Ok(ListFluxes {
        covariance: joint.covariance,
        reduced_misfit: joint.reduced_misfit,
        data: joint.data,
        passes,
        unconfirmed,
        split,
        merged,
    })
}

/// Completes sources measured in the image: pointings that see them and, unless `at_reference` says that the image already
/// stands at the reference frequency everywhere (it was made with spectral terms), flux densities brought from the
/// frequency that N/W has at their place to the reference frequency, with their assumed spectral index.
///
/// # Errors
/// When the visibilities cannot be read.
pub fn survey_visibilities(
    sources: &mut [Source],
    pointings: &mut [Reading],
    options: &ListOptions,
    at_reference: bool,
    rows: impl FnMut(u64),
) -> Result<(), MeasureError> {
    let survey = survey(pointings, &units(sources, options.reference_hz), rows)?;
    for (index, source) in sources.iter_mut().enumerate() {
        source.pointings = count_pointings(survey.seen(), index, options.lowest_response);
        source.reference_hz = Some(options.reference_hz);
        if let Some(hz) = survey.effective_hz(index).filter(|_| !at_reference) {
            let factor = (options.reference_hz / hz).powf(source.spectral_index);
            source.flux_jy = source.flux_jy.map(|flux| flux * factor);
            source.flux_error_jy = source.flux_error_jy.map(|error| error * factor);
        }
    }
    Ok(())
}

/// Between pixels, linearly; `None` off the image or beside a blank pixel.
fn between(image: ArrayView2<f64>, x: f64, y: f64) -> Option<f64> {
    let (height, width) = image.dim();
    let (x0, y0) = (x.floor(), y.floor());
    if !(x0 >= 0.0 && y0 >= 0.0 && x <= (width - 1) as f64 && y <= (height - 1) as f64) {
        return None;
    }
    let (fx, fy) = (x - x0, y - y0);
    let mut sum = 0.0;
    for (dx, dy, share) in
        [(0, 0, (1.0 - fx) * (1.0 - fy)), (1, 0, fx * (1.0 - fy)), (0, 1, (1.0 - fx) * fy), (1, 1, fx * fy)]
    {
        if share > 0.0 {
            sum += share * image[[y0 as usize + dy, x0 as usize + dx]];
        }
    }
    sum.is_finite().then_some(sum)
}

/// Reads noise, response and, where no fit gave one, peak of every source off the image and its weight map (inverse
/// variance). Sources off the image get none.
pub fn read_maps(
    sources: &mut [Source],
    image: ArrayView2<f64>,
    weight: ArrayView2<f64>,
    geometry: &ImageGeometry,
    beam: Option<&FittedBeam>,
) {
    let most = weight.iter().copied().filter(|w| w.is_finite()).fold(0.0, f64::max);
    let place = |direction: Direction| geometry.pixel_of(direction);
    for source in sources {
        let Some((x, y)) = place(source.direction) else { continue };
        if let Some(w) = between(weight, x, y).filter(|&w| w > 0.0) {
            source.noise_jy = Some(1.0 / w.sqrt());
            source.response = Some((w / most).sqrt());
        }
        if let (None, Some(beam)) = (source.peak_jy, beam) {
            source.peak_jy = height_at(image, &Ellipse::from(beam).scaled(1.0 / geometry.pixel), x, y);
        }
    }
}
