//! A list of sources completed: flux densities from the visibilities, noise and response from the weight map, pointings.

use super::fit::height_at;
use super::found::RISE;
use super::islands::{Peak, peaks};
use super::joint::{JointFluxes, JointOptions, Reading, joint_fluxes, survey};
use super::normal::Seen;
use super::{Ellipse, MeasureError, Method, Source};
use crate::imaging::beam_fit::FittedBeam;
use crate::imaging::flat_noise;
use crate::observation::{Block, Watched};
use crate::response::{Sums, UnitSource};
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
    /// Further searches in the residual; needs an imager in every [`Reading`].
    pub search: Option<Search>,
}

/// Further searches in what the model leaves of the visibilities.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Search {
    /// Most rounds.
    pub rounds: usize,
    /// Lowest peak of the residual, in multiples of its noise.
    pub find_above_noise: f64,
    /// The pixel grid of the imagers.
    pub geometry: ImageGeometry,
    /// Spectral index that new sources are taken to have.
    pub spectral_index: f64,
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
    /// Sources found in residuals.
    pub added: usize,
    /// Pairs that could not be told apart: (the one that holds the flux, the other).
    pub merged: Vec<(String, String)>,
}

/// Sources that are tried as two points, those of the highest signal to noise.
const MOST_TRIED: usize = 20;
/// By how much χ² must fall for a Gaussian to be better than a point, and two points than either. Both have three numbers more
/// than a point, by which chance lowers it less than this in 99 of 100 cases (χ² of three degrees of freedom: 11.3).
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

/// A source without its size.
fn one_point(source: &Source) -> Source {
    let mut point = Source { deconvolved: None, flux_error_jy: None, ..source.clone() };
    point.remarks.retain(|remark| remark != "resolved");
    point
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
/// With `options.search`, peaks of what the model leaves are added to the list and all is fitted again, in rounds, until
/// nothing stands out: neighbours that the beam makes one peak come apart, and what hid beside bright sources shows.
///
/// # Errors
/// When the visibilities cannot be read, or sums are no numbers.
pub fn fluxes_from_visibilities(
    sources: &mut Vec<Source>,
    pointings: &mut [Reading],
    options: &ListOptions,
    rows: impl FnMut(u64),
) -> Result<ListFluxes, MeasureError> {
    let mut fitter = Fitter { pointings, options, rows, passes: 0, unconfirmed: 0, split: 0 };
    fitter.confirm(sources)?;
    let mut joint = fitter.refine(sources)?;
    let mut added = 0;
    if let Some(search) = &options.search {
        for _ in 0..search.rounds {
            let new = fitter.residual_peaks(sources, &joint, search)?;
            if new.is_empty() {
                break;
            }
            let before = sources.clone();
            let (old, count) = (joint, new.len());
            sources.extend(new);
            fitter.confirm(sources)?;
            joint = fitter.refine(sources)?;
            // what was added must explain something, or rounds would go on adding and dropping it
            if joint.misfit + BETTER >= old.misfit {
                (*sources, joint) = (before, old);
                break;
            }
            added += count;
        }
    }
    let (passes, unconfirmed, split) = (fitter.passes, fitter.unconfirmed, fitter.split);
    let merged = write_fluxes(sources, &joint, options);
    Ok(ListFluxes {
        covariance: joint.covariance,
        reduced_misfit: joint.reduced_misfit,
        data: joint.data,
        passes,
        unconfirmed,
        split,
        added,
        merged,
    })
}

/// The steps of [`fluxes_from_visibilities`].
struct Fitter<'a, 'p, F> {
    pointings: &'a mut [Reading<'p>],
    options: &'a ListOptions,
    rows: F,
    passes: usize,
    unconfirmed: usize,
    split: usize,
}

impl<F: FnMut(u64)> Fitter<'_, '_, F> {
    fn joint(
        &mut self,
        sources: &[Source],
        index_error: f64,
        wander: Option<f64>,
    ) -> Result<JointFluxes, MeasureError> {
        let options = JointOptions { index_error, wander, frame: self.options.frame };
        let units = units(sources, self.options.reference_hz);
        let joint = joint_fluxes(self.pointings, &units, options, &mut self.rows)?;
        self.passes += joint.passes;
        Ok(joint)
    }

    /// Leaves out sources that the visibilities do not confirm. They go before places and spectra are fitted: a false one
    /// that soaks up its neighbours' flux spoils theirs.
    fn confirm(&mut self, sources: &mut Vec<Source>) -> Result<(), MeasureError> {
        let Some(level) = self.options.confirm else { return Ok(()) };
        loop {
            let joint = self.joint(sources, 0.0, None)?;
            if !self.drop_unconfirmed(sources, &joint, level) {
                return Ok(());
            }
        }
    }

    /// Leaves out the sources that a fit does not confirm; whether there were any.
    fn drop_unconfirmed(&mut self, sources: &mut Vec<Source>, joint: &JointFluxes, level: f64) -> bool {
        let confirmed = |at: usize| joint.merged_into[at].is_none() && joint.flux[at].0 >= level * joint.flux[at].1;
        let before = sources.len();
        let mut at = 0..before;
        sources.retain(|_| at.next().is_none_or(confirmed));
        self.unconfirmed += before - sources.len();
        sources.len() < before
    }

    /// Fits everything that is free, tries wide sources as one point and as two, and moves the list to the fitted places.
    fn refine(&mut self, sources: &mut Vec<Source>) -> Result<JointFluxes, MeasureError> {
        let (index_error, wander) = (self.options.index_error, self.options.wander);
        let mut joint = self.joint(sources, index_error, wander)?;
        if wander.is_some() {
            let wide = sources.clone();
            for index in wide_sources(sources, &joint) {
                // a bright point between pixels of the model is a little wide in the image: is it one in the visibilities?
                let mut trial = sources.clone();
                trial[index] = one_point(&sources[index]);
                let point = self.joint(&trial, index_error, wander)?;
                if point.misfit <= joint.misfit + BETTER {
                    *sources = trial;
                    joint = point;
                }
                let mut trial = sources.clone();
                let [one, other] = two_points(&wide[index], &self.options.frame);
                trial[index] = one;
                trial.push(other);
                let two = self.joint(&trial, index_error, wander)?;
                let stands = |at: usize| {
                    let (flux, error) = two.flux[at];
                    two.merged_into[at].is_none() && flux > self.options.confirm.unwrap_or(0.0) * error
                };
                if two.misfit + BETTER < joint.misfit && stands(index) && stands(trial.len() - 1) {
                    *sources = trial;
                    joint = two;
                    self.split += 1;
                }
            }
        }
        // what the first pass confirmed, free places may have emptied
        while let Some(level) = self.options.confirm
            && self.drop_unconfirmed(sources, &joint, level)
        {
            joint = self.joint(sources, index_error, wander)?;
        }
        for (source, place) in sources.iter_mut().zip(&joint.place) {
            if let Some((direction, [by_l, by_m])) = place {
                source.direction = *direction;
                // l and m are foreshortened away from the image's centre: these errors are small by 1 − n at most
                source.place_error = Some([*by_l, *by_m]);
            }
        }
        Ok(joint)
    }

    /// Peaks of the residual, those that the side lobes of the highest could not make.
    fn residual_peaks(
        &mut self,
        sources: &[Source],
        joint: &JointFluxes,
        search: &Search,
    ) -> Result<Vec<Source>, MeasureError> {
        let mut sums = Sums::zero(&search.geometry);
        let mut model = units(sources, self.options.reference_hz);
        for (unit, index) in model.iter_mut().zip(&joint.index) {
            unit.spectral_index = index.map_or(unit.spectral_index, |(index, _)| index);
        }
        let fluxes: Vec<f64> = joint.flux.iter().map(|f| if f.0.is_finite() { f.0 } else { 0.0 }).collect();
        for Reading { exact, source, imager } in self.pointings.iter_mut() {
            let Some(imager) = imager else { return Ok(Vec::new()) };
            let units = exact.unit_sources(&model);
            let rows = &mut self.rows;
            let mut left = 0;
            let mut residual = Watched::new(*source, |block: &mut Block| {
                exact.subtract(&units, &fluxes, block);
                left += block.rows() as u64;
                Ok(())
            });
            imager.adjoint(&mut residual, &mut sums)?;
            rows(left);
        }
        self.passes += 1;
        let signal_to_noise = flat_noise(&sums, self.options.lowest_response);
        let highest = signal_to_noise.iter().copied().filter(|v| v.is_finite()).fold(0.0, f64::max);
        let level = search.find_above_noise.max(SIDE_LOBES * highest);
        let found = peaks(signal_to_noise.view(), search.find_above_noise.min(3.0), level, RISE);
        let put = |peak: &Peak| {
            let direction = search.geometry.direction_of(peak.pixel.0 as f64, peak.pixel.1 as f64)?;
            let mut source = Source::at("", direction, search.spectral_index);
            source.remarks.push("found in the residual".to_owned());
            Some(source)
        };
        Ok(found.iter().filter_map(put).collect())
    }
}

/// Peaks of a residual are taken down to this fraction of its highest: lower ones may be its side lobes, and wait for the
/// next round.
const SIDE_LOBES: f64 = 0.4;

/// Puts the results of the joint fit in the list; pairs that could not be told apart.
fn write_fluxes(sources: &mut [Source], joint: &JointFluxes, options: &ListOptions) -> Vec<(String, String)> {
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
    merged
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
