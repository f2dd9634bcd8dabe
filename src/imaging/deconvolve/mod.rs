//! Deconvolution: a model sky whose predicted visibilities leave nothing but noise.
//!
//! **Major cycles.** Residual visibilities V − predict(model) go through the same [`Response`](crate::response::Response),
//! with the same beams of every station at every time, that made the dirty image; their numerator N is the truth that the
//! next minor cycle starts from. **Minor cycles** find components on the search image N/t, t the noise of N (√W for
//! natural weights: the flat-noise image), with local point spread functions ([`local_psf`]).
//!
//! The misfit χ²(c) = Σ ω |V − predict(model + α c)|² of a cycle's components c is a parabola in α that costs nothing to
//! know. With N before and N' after the cycle, at α = 1,
//!
//! χ²(α) = χ²(0) − 2 α b + α² q,  b = Σ_s c_s N(s),  q = Σ_s c_s (N(s) − N'(s)).
//!
//! Where the misfit would not fall well (b/q < 3/4) only the share α = b/q of the components is taken, and the residual,
//! linear in α, with it. So χ² falls in every cycle whatever the local point spread functions err (for components of one
//! flat spectrum, to the tolerance of the response): this is what makes a mosaic converge. How far the minor cycles may go
//! before their errors pass for sources is bounded by the same errors, measured: see [`MajorCycle::psf_misfit`]. Where a
//! cycle's components cannot lower the misfit at all (b ≤ 0), the minor cycle is made again with an eighth of them; the
//! first component alone, g N(s)/W(s) at the peak, has b/q = 1/g ≥ 1.
//!
//! Files, in the order of a run: `local_psf`, `local_noise` (measured noise, masks that grow), `search` (inner loops),
//! `minor` and `multi_scale` (minor cycles), `residual` (major cycles), `points` and `fitting` (compact sources), `spectral` and
//! `spectrum` (frequency terms), `state` (going on after a stop), `restore`.

mod fitting;
pub mod local_noise;
pub mod local_psf;
mod mask;
pub mod minor;
mod model;
pub mod multi_scale;
mod points;
mod residual;
mod restore;
pub mod search;
mod settings;
pub mod spectral;
mod spectrum;
mod state;

pub use mask::{MaskError, circles_mask, read_mask};
pub use model::{Model, write_components};
pub use points::MOST_POINTS;
pub use residual::{Part, ResidualSource, Sky, residual_numerator, residual_terms};
pub use restore::restored_model;
pub use settings::{MajorCycle, Minor, NoiseLevel, Settings, Stop};
pub use spectrum::{LOWEST_SIGNAL, Spectrum, spectrum};
pub use state::State;

use super::beam_fit::FittedBeam;
use crate::response::ResponseError;
use crate::sky::ImageGeometry;
use local_psf::{LocalPsfs, Scaling};
use minor::{Found, Start};
use ndarray::{Array2, Zip};
use points::Crowd;
use search::{Levels, Searched, Whole};
use spectral::{Basis, Spectral};
use state::Pace;

/// Half width of the patches of Clark's and the multi-scale minor cycle, pixels.
const PATCH_HALF: usize = 256;
/// Share b/q below which only that share of a cycle's components is taken.
const WHOLE_STEP: f64 = 0.75;
/// A cycle that lowers the peak by less than this fraction has not.
const FALL: f64 = 0.02;
/// So many cycles in a row without a lower peak are enough.
const PATIENCE: usize = 5;
/// What is to be deconvolved. Images are `[y][x]`.
pub struct Task<'a> {
    /// The pixel grid.
    pub geometry: ImageGeometry,
    /// The pointings.
    pub parts: Vec<Part<'a>>,
    /// Numerator N of the data, Jy · Jy⁻².
    pub numerator: &'a Array2<f64>,
    /// Normaliser W, Jy⁻².
    pub normaliser: &'a Array2<f64>,
    /// Weight map: inverse variance of N/W, Jy⁻² (W itself for natural weights).
    pub weight: &'a Array2<f64>,
    /// Pixels that are not blank.
    pub seen: &'a Array2<bool>,
    /// Pixels that may hold components; `None`: all that are seen.
    pub mask: Option<Array2<bool>>,
    /// What is known beforehand.
    pub start: Model,
    /// A state of the same deconvolution, to go on from; one of another image is passed over.
    pub state: Option<State>,
    /// Restoring beam (a length for masks and fits).
    pub beam: FittedBeam,
    /// Settings.
    pub settings: Settings,
}

/// What came of it.
pub struct Outcome {
    /// The model.
    pub model: Model,
    /// Numerator of the residual of the last major cycle.
    pub numerator: Array2<f64>,
    /// Those of the further frequency terms.
    pub further: Vec<Array2<f64>>,
    /// Moments of the weights in frequency, where there are such terms.
    pub spectral: Option<Spectral>,
    /// Components found in all minor cycles.
    pub components: u64,
    /// Major cycles.
    pub cycles: Vec<MajorCycle>,
    /// Why it ended.
    pub stop: Stop,
    /// Compact sources that stand as fitted points.
    pub fitted_points: usize,
    /// Highest side lobe of the local point spread functions.
    pub side_lobe: f64,
    /// Pixels where components were looked for, at the end.
    pub searched_pixels: usize,
}

/// Who wants to know how it goes.
pub trait Observer: Send {
    /// Rows of visibilities have been read.
    fn rows(&mut self, rows: u64);
    /// A major cycle ended.
    fn cycle(&mut self, number: usize, cycle: &MajorCycle);
    /// A state that can be gone on from, as [`Task::state`].
    fn state(&mut self, state: &State);
}

/// Nobody.
impl Observer for () {
    fn rows(&mut self, _: u64) {}
    fn cycle(&mut self, _: usize, _: &MajorCycle) {}
    fn state(&mut self, _: &State) {}
}

/// Deconvolves.
///
/// # Errors
/// When visibilities cannot be read or the model cannot be predicted.
pub fn deconvolve(mut task: Task, observer: &mut dyn Observer) -> Result<Outcome, ResponseError> {
    let scaling = Scaling::new(task.normaliser, task.weight, task.seen);
    let mut model = std::mem::replace(&mut task.start, Model::empty(&task.geometry));
    let fresh = model.points.is_empty() && model.pixels.iter().all(|flux| *flux == 0.0);
    let terms = task.settings.frequency_terms.max(1);
    model.terms = vec![Array2::zeros(task.numerator.dim()); terms - 1];
    let basis = (terms > 1).then(|| Basis::new(&task.parts, task.settings.reference_hz, terms));
    let mut run = Run {
        allowed: allowed(&task, &scaling),
        grown: vec![false; task.numerator.len()],
        numerator: task.numerator.clone(),
        further: model.terms.clone(),
        basis,
        model,
        scaling,
        components: 0,
        cycles: Vec::new(),
        crowds: Vec::new(),
        refused: Vec::new(),
        fits: 0,
        last_fit: None,
        task,
    };
    let pace = run.task.state.take().and_then(|state| run.take_up(state));
    if pace.is_none() && (!fresh || terms > 1) {
        (run.numerator, run.further) = run.residual(&run.model.clone(), observer)?;
    }
    run.go(pace, observer)
}

/// Pixels that may ever hold a component.
fn allowed(task: &Task, scaling: &Scaling) -> Vec<bool> {
    match &task.mask {
        None => scaling.noise.iter().map(|t| *t > 0.0).collect(),
        Some(mask) => scaling.noise.iter().zip(mask).map(|(t, open)| *t > 0.0 && *open).collect(),
    }
}

struct Run<'a> {
    task: Task<'a>,
    scaling: Scaling,
    allowed: Vec<bool>,
    /// The automatic mask.
    grown: Vec<bool>,
    model: Model,
    numerator: Array2<f64>,
    /// Numerators of the further frequency terms.
    further: Vec<Array2<f64>>,
    /// Their basis, where there are such terms.
    basis: Option<Basis>,
    components: u64,
    cycles: Vec<MajorCycle>,
    /// The pixels that fitted points replaced.
    crowds: Vec<Crowd>,
    /// Places (pixels) where a point was tried and did not fit.
    refused: Vec<(f64, f64)>,
    fits: usize,
    /// The highest residual when compact sources were last fitted, and the cycles by then.
    last_fit: Option<(f64, usize)>,
}

impl Run<'_> {
    fn settings(&self) -> &Settings {
        &self.task.settings
    }

    fn beam_px(&self) -> f64 {
        self.task.beam.major / self.task.geometry.pixel
    }

    /// Numerators of the residual of a model: N, and those of further frequency terms.
    fn residual(
        &mut self,
        model: &Model,
        observer: &mut dyn Observer,
    ) -> Result<(Array2<f64>, Vec<Array2<f64>>), ResponseError> {
        let Task { geometry, settings, parts, .. } = &mut self.task;
        let pixels = model.pixel_components(geometry, settings.reference_hz, settings.spectral_index);
        let terms = model.term_components(geometry, settings.reference_hz, settings.spectral_index);
        let sky = Sky { pixels, points: model.points.clone(), terms, basis: self.basis };
        let mut rows = |rows| observer.rows(rows);
        let Some(basis) = self.basis else {
            return Ok((residual_numerator(parts, geometry, &sky, &mut rows)?, Vec::new()));
        };
        let mut all = residual_terms(parts, geometry, &sky, &basis, &mut rows)?;
        let further = all.split_off(1);
        Ok((all.swap_remove(0), further))
    }

    fn go(mut self, pace: Option<Pace>, observer: &mut dyn Observer) -> Result<Outcome, ResponseError> {
        let (most_half, copies) = match &self.settings().minor {
            Minor::Hogbom => (usize::MAX, 1),
            Minor::Clark => (PATCH_HALF, 1),
            Minor::MultiScale { scales_px, .. } => (PATCH_HALF, 1 + multi_scale::copies(scales_px.len())),
        };
        let Task { parts, geometry, .. } = &mut self.task;
        let mut rows = |rows| observer.rows(rows);
        let (psfs, spectral) = match self.basis {
            None => (LocalPsfs::measure(parts, geometry, &self.scaling, most_half, copies, &mut rows)?, None),
            Some(basis) => {
                let spectral = Spectral::measure(parts, geometry, &self.scaling, most_half, basis, &mut rows)?;
                (spectral.plain().clone(), Some(spectral))
            }
        };
        // before anything is measured, what lies beyond the patches is what they are known to miss
        let fresh = Pace { misfit: 0.5 * psfs.beyond, lowest: f64::INFINITY, waited: 0 };
        let Pace { mut misfit, mut lowest, mut waited } = pace.unwrap_or(fresh);
        let (stop, levels) = loop {
            let image = self.scaling.search_image(&self.numerator);
            let levels = self.levels(&image);
            if levels.up.iter().all(|level| level.is_infinite()) && self.settings().mask_above_noise.is_none() {
                break (Stop::NothingToSearch, levels);
            }
            let whole = Whole::new(self.task.geometry.width, self.task.geometry.height, image, levels);
            let peak = whole.peak().map(|peak| f64::from(peak.value.abs()));
            let levels = whole.levels().clone();
            let image = whole.into_image();
            if self.fit_is_due(&image, peak) {
                self.fit(observer)?;
                (lowest, waited) = (f64::INFINITY, 0);
                observer.state(&self.state(Pace { misfit, lowest, waited }));
                continue;
            }
            let Some(peak) = peak else { break (self.reached(&image), levels) };
            if self.components >= self.settings().max_components {
                break (Stop::Components, levels);
            }
            if self.cycles.len() >= self.settings().max_major_cycles {
                break (Stop::MajorCycles, levels);
            }
            if peak < (1.0 - FALL) * lowest {
                (lowest, waited) = (peak, 0);
            } else {
                waited += 1;
                if waited >= PATIENCE {
                    break (Stop::Stalled, levels);
                }
            }
            let mut most = self.settings().max_components - self.components;
            let taken = loop {
                let (found, further) =
                    self.minor(&image, levels.clone(), (&psfs, spectral.as_ref()), peak, misfit, most);
                let count = found.components;
                if count == 0 {
                    break Err(Stop::Stalled);
                }
                let (lowered, measured) = self.major(found, further, observer)?;
                misfit = 2.0 * measured;
                if lowered {
                    break Ok(());
                }
                if count == 1 {
                    break Err(Stop::Diverged);
                }
                // too many components for these point spread functions; the first alone, at a peak, lowers the misfit
                most = (count / 8).max(1);
            };
            if let Err(stop) = taken {
                break (stop, levels);
            }
            observer.state(&self.state(Pace { misfit, lowest, waited }));
        };
        let points = self.model.points.iter().filter(|point| points::made_here(point)).count();
        Ok(Outcome {
            model: self.model,
            numerator: self.numerator,
            further: self.further,
            spectral,
            components: self.components,
            cycles: self.cycles,
            stop,
            fitted_points: points,
            side_lobe: psfs.side_lobe,
            searched_pixels: levels.up.iter().filter(|level| level.is_finite()).count(),
        })
    }

    /// Levels of all pixels now; the automatic mask grows here.
    fn levels(&mut self, image: &[f32]) -> Levels {
        let settings = &self.task.settings;
        let width = self.task.geometry.width;
        let seen: Vec<bool> = self.scaling.noise.iter().map(|t| *t > 0.0).collect();
        let measured = (settings.noise == NoiseLevel::Measured || settings.mask_above_noise.is_some())
            .then(|| local_noise::local_noise(image, &seen, width, self.beam_px()));
        if let (Some(above), Some(noise)) = (settings.mask_above_noise, &measured) {
            let reach = 0.5 * self.beam_px();
            local_noise::grow_mask(&mut self.grown, image, noise, width, above, reach);
        }
        let masked = settings.mask_above_noise.is_some();
        let up: Vec<f32> = self
            .scaling
            .per_jy
            .iter()
            .enumerate()
            .map(|(at, per_jy)| {
                if !self.allowed[at] || (masked && !self.grown[at]) {
                    return f32::INFINITY;
                }
                let noise = match (&measured, settings.noise) {
                    (Some(noise), NoiseLevel::Measured) => f64::from(noise[at]).max(1.0),
                    _ => 1.0,
                };
                (settings.stop_at_noise * noise).max(settings.stop_at_jy * per_jy) as f32
            })
            .collect();
        let mut down = up.clone();
        if settings.non_negative {
            down.iter_mut().zip(&self.model.pixels).filter(|(_, flux)| **flux <= 0.0).for_each(|(level, _)| {
                *level = f32::INFINITY;
            });
        }
        Levels { up, down }
    }

    /// Which of the two levels ended it: the one that binds at the highest pixel left.
    fn reached(&self, image: &[f32]) -> Stop {
        let settings = &self.task.settings;
        let highest = image
            .iter()
            .enumerate()
            .filter(|(at, _)| self.allowed[*at])
            .max_by(|a, b| a.1.abs().total_cmp(&b.1.abs()))
            .map(|(at, _)| at);
        let per_jy = highest.and_then(|at| self.scaling.per_jy.iter().nth(at).copied()).unwrap_or(0.0);
        if settings.stop_at_jy * per_jy > settings.stop_at_noise { Stop::FluxDensity } else { Stop::Noise }
    }

    /// A minor cycle: what it found in the search image, and flux densities of the further terms.
    fn minor(
        &self,
        image: &[f32],
        levels: Levels,
        (psfs, spectral): (&LocalPsfs, Option<&Spectral>),
        peak: f64,
        misfit: f64,
        most: u64,
    ) -> (Found, Vec<Array2<f64>>) {
        let settings = &self.task.settings;
        let start = Start {
            width: self.task.geometry.width,
            height: self.task.geometry.height,
            image,
            levels,
            psfs,
            loop_gain: settings.loop_gain,
            level: settings.major_depth * peak,
            misfit,
            most,
            floor: settings.non_negative.then(|| &self.model.pixels * &self.scaling.per_jy),
        };
        if let Some(spectral) = spectral {
            let images: Vec<Vec<f32>> = (1..spectral.basis.terms)
                .map(|term| spectral.search_image(term, &self.further[term - 1], &self.scaling))
                .collect();
            let whole = matches!(settings.minor, Minor::Hogbom);
            let (found, mut further) = spectral::minor_cycle(&start, &images, spectral, whole);
            for (term, image) in further.iter_mut().enumerate() {
                spectral.in_jy(term + 1, image, &self.scaling);
            }
            return (found, further);
        }
        let found = match &settings.minor {
            Minor::Hogbom => minor::hogbom(start),
            Minor::Clark => minor::clark(start),
            Minor::MultiScale { scales_px, bias } => multi_scale::multi_scale(start, scales_px, *bias),
        };
        (found, Vec::new())
    }

    /// Takes a minor cycle's components through the visibilities. Returns whether that lowered the misfit (nothing is
    /// changed where not), and how much the point spread functions erred.
    fn major(
        &mut self,
        found: Found,
        further: Vec<Array2<f64>>,
        observer: &mut dyn Observer,
    ) -> Result<(bool, f64), ResponseError> {
        let mut update = found.amplitudes;
        Zip::from(&mut update).and(&self.scaling.per_jy).for_each(|value, per_jy| {
            *value = if *per_jy > 0.0 { *value / per_jy } else { 0.0 };
        });
        let mut trial = self.model.clone();
        trial.pixels += &update;
        trial.terms.iter_mut().zip(&further).for_each(|(term, update)| *term += update);
        let (after, further_after) = self.residual(&trial, observer)?;
        let (mut b, mut q) = (0.0, 0.0);
        let mut add = |update: &Array2<f64>, before: &Array2<f64>, after: &Array2<f64>| {
            Zip::from(update).and(before).and(after).for_each(|c, before, after| {
                b += c * before;
                q += c * (before - after);
            });
        };
        add(&update, &self.numerator, &after);
        for ((update, before), after) in further.iter().zip(&self.further).zip(&further_after) {
            add(update, before, after);
        }
        let truth = self.scaling.search_image(&after);
        let erred = found.expected.iter().map(|&(at, value)| (truth[at] - value).abs()).fold(0.0, f32::max);
        let psf_misfit = if found.moved > 0.0 { f64::from(erred) / found.moved } else { 0.0 };
        if !(b > 0.0 && q > 0.0 && q.is_finite()) {
            return Ok((false, psf_misfit));
        }
        let step = if b / q < WHOLE_STEP { b / q } else { 1.0 };
        if step == 1.0 {
            (self.model, self.numerator, self.further) = (trial, after, further_after);
        } else {
            self.model.pixels.scaled_add(step, &update);
            self.model.terms.iter_mut().zip(&further).for_each(|(term, update)| term.scaled_add(step, update));
            Zip::from(&mut self.numerator).and(&after).for_each(|n, after| *n += step * (after - *n));
            for (n, after) in self.further.iter_mut().zip(&further_after) {
                Zip::from(n).and(after).for_each(|n, after| *n += step * (after - *n));
            }
        }
        self.components += found.components;
        let cycle = self.described(found.components, step, psf_misfit);
        observer.cycle(self.cycles.len() + 1, &cycle);
        self.cycles.push(cycle);
        Ok((true, psf_misfit))
    }

    /// The state after a cycle.
    fn described(&self, components: u64, step: f64, psf_misfit: f64) -> MajorCycle {
        let image = self.scaling.search_image(&self.numerator);
        let mut peak = (0.0f32, 0);
        for (at, value) in image.iter().enumerate().filter(|(at, _)| self.allowed[*at]) {
            if value.abs() > peak.0 {
                peak = (value.abs(), at);
            }
        }
        let per_jy = self.scaling.per_jy.iter().nth(peak.1).copied().unwrap_or(0.0);
        let peak_over_noise = f64::from(peak.0);
        MajorCycle {
            components,
            model_jy: self.model.flux_at(self.settings().reference_hz),
            peak_over_noise,
            peak_jy_per_beam: if per_jy > 0.0 { peak_over_noise / per_jy } else { 0.0 },
            step,
            psf_misfit,
        }
    }
}
