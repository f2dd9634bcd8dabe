//! When compact sources are fitted, and which fits are kept: as one point, as a double, or as pixels after all.

use super::points::{self, Crowd};
use super::{Model, Observer, Run};
use crate::response::ResponseError;
use ndarray::Array2;

/// Compact sources are fitted when the highest residual has fallen to this fraction since the last time.
const FIT_EVERY: f64 = 0.1;
/// Most times that compact sources are fitted.
const MOST_FITS: usize = 8;
/// At the end they are fitted when it has fallen to this fraction since the last time.
const FIT_AT_END: f64 = 0.5;
/// Brightness, in multiples of the highest residual, above which parts of the model are taken for sources.
const ESTABLISHED: f64 = 3.0;
/// A fitted point is kept where it leaves less than what is established, or this multiple of the noise,
const FIT_KEPT: f64 = 4.0;
/// or this fraction of itself.
const FIT_PART: f64 = 0.1;
/// A point that leaves more than this multiple of the noise is tried as a double,
const SPLIT_ABOVE: f64 = 5.0;
/// which is kept where it leaves less than this fraction of that.
const SPLIT_GAIN: f64 = 0.6;
/// Rounds in which the worst points are tried as doubles, in one fit.
const MOST_ROUNDS: usize = 4;

impl Run<'_> {
    /// Whether compact sources are to be fitted now: `peak` is the highest above its level, if there is one.
    pub(super) fn fit_is_due(&self, image: &[f32], peak: Option<f64>) -> bool {
        if self.settings().fit_points_above_noise.is_none() || self.fits >= MOST_FITS || self.cycles.is_empty() {
            return false;
        }
        let height = self.highest(image);
        let (reference, cycles) = match self.last_fit {
            Some(last) => last,
            None => (self.highest(&self.scaling.search_image(self.task.numerator)), 0),
        };
        let ends = peak.is_none()
            || self.cycles.len() >= self.settings().max_major_cycles
            || self.components >= self.settings().max_components;
        self.cycles.len() > cycles && height <= if ends { FIT_AT_END } else { FIT_EVERY } * reference
    }

    /// The highest absolute value where components are allowed.
    fn highest(&self, image: &[f32]) -> f64 {
        let allowed = image.iter().zip(&self.allowed).filter(|(_, allowed)| **allowed);
        f64::from(allowed.map(|(value, _)| value.abs()).fold(0.0, f32::max))
    }

    /// Fits compact sources once: new ones, and those fitted before.
    pub(super) fn fit(&mut self, observer: &mut dyn Observer) -> Result<(), ResponseError> {
        let Some(above) = self.settings().fit_points_above_noise else { return Ok(()) };
        let height = self.highest(&self.scaling.search_image(&self.numerator));
        self.fits += 1;
        self.last_fit = Some((height, self.cycles.len()));
        let mut model = self.model.clone();
        let established = ESTABLISHED * height;
        let field = points::Field {
            geometry: &self.task.geometry,
            scaling: &self.scaling,
            beam: &self.task.beam,
            settings: &self.task.settings,
            numerator: &self.numerator,
            above: above.max(established),
            doubtful: established,
            refused: &self.refused,
        };
        let new = points::replace_crowds(&mut model, &field);
        self.refused.clear();
        self.crowds.extend(new);
        let mut numerator = self.refined(&mut model, observer)?;
        let mut tried: Vec<String> = Vec::new();
        for _ in 0..MOST_ROUNDS {
            if !self.split_worst(&mut model, &mut numerator, &mut tried, observer)? {
                break;
            }
        }
        // what points do not describe at all becomes pixels again
        let image = self.scaling.search_image(&numerator);
        let (kept, failed): (Vec<Crowd>, Vec<Crowd>) = std::mem::take(&mut self.crowds)
            .into_iter()
            .partition(|crowd| self.fits_well(crowd, &model, &image, established.max(FIT_KEPT)));
        self.crowds = kept;
        for crowd in &failed {
            model.points.retain(|point| !crowd.names.contains(&point.name));
            crowd.pixels.iter().for_each(|(pixel, flux)| model.pixels[*pixel] += flux);
            self.refused.push(crowd.middle());
        }
        if !failed.is_empty() {
            numerator = self.refined(&mut model, observer)?;
        }
        (self.model, self.numerator) = (model, numerator);
        Ok(())
    }

    /// Tries the points that leave most as doubles, and keeps those doubles that leave much less. The others are not
    /// touched: their residual may be the side lobes of these. False when there is nothing to try.
    fn split_worst(
        &mut self,
        model: &mut Model,
        numerator: &mut Array2<f64>,
        tried: &mut Vec<String>,
        observer: &mut dyn Observer,
    ) -> Result<bool, ResponseError> {
        let image = self.scaling.search_image(numerator);
        let left: Vec<f64> = self.crowds.iter().map(|crowd| self.highest_around(&image, crowd.middle())).collect();
        let open = |n: &usize| {
            let crowd = &self.crowds[*n];
            let worth = left[*n] > SPLIT_ABOVE;
            worth && crowd.names.len() == 1 && crowd.pixels.len() > 1 && !tried.contains(&crowd.names[0])
        };
        let worst = (0..left.len()).filter(open).map(|n| left[n]).fold(0.0, f64::max);
        let chosen: Vec<usize> = (0..left.len()).filter(open).filter(|&n| left[n] >= 0.5 * worst).collect();
        if chosen.is_empty() {
            return Ok(false);
        }
        let mut trial = model.clone();
        let mut pairs = Vec::new();
        for &n in &chosen {
            let crowd = &self.crowds[n];
            tried.push(crowd.names[0].clone());
            let number = points::next_number(&model.points).max(points::next_number(&trial.points));
            let pair = crowd.double(&self.task.geometry, &self.task.settings, number);
            trial.points.retain(|point| !crowd.names.contains(&point.name));
            pairs.push(pair.iter().map(|point| point.name.clone()).collect::<Vec<_>>());
            trial.points.extend(pair);
        }
        let refined = self.refined(&mut trial, observer)?;
        let image = self.scaling.search_image(&refined);
        let (mut undone, mut done) = (false, false);
        for (&n, names) in chosen.iter().zip(pairs) {
            let now = self.highest_around(&image, self.crowds[n].middle());
            if now < SPLIT_GAIN * left[n] {
                tried.extend(names.iter().cloned());
                self.crowds[n].names = names;
                done = true;
            } else {
                trial.points.retain(|point| !names.contains(&point.name));
                let single = model.points.iter().find(|point| self.crowds[n].names.contains(&point.name));
                trial.points.extend(single.cloned());
                undone = true;
            }
        }
        if !done {
            return Ok(true);
        }
        *numerator = if undone { self.refined(&mut trial, observer)? } else { refined };
        *model = trial;
        Ok(true)
    }

    /// Fits the points of a model; its residual.
    fn refined(&mut self, model: &mut Model, observer: &mut dyn Observer) -> Result<Array2<f64>, ResponseError> {
        points::refine(
            &mut self.task.parts,
            &self.task.geometry,
            model,
            &self.task.beam,
            &self.task.settings,
            &mut |rows| observer.rows(rows),
        )?;
        Ok(self.residual(model, observer)?.0)
    }

    /// Whether points stand where their pixels were, and leave no more than `most` there, or a small part of themselves
    /// (which pixels then describe).
    fn fits_well(&self, crowd: &Crowd, model: &Model, image: &[f32], most: f64) -> bool {
        let middle = crowd.middle();
        let near = model.points.iter().filter(|point| crowd.names.contains(&point.name)).all(|point| {
            let place = self.task.geometry.pixel_of(point.direction);
            place.is_some_and(|(x, y)| (x - middle.0).hypot(y - middle.1) <= self.beam_px())
        });
        near && self.highest_around(image, middle) <= most.max(FIT_PART * self.own_height(crowd, model))
    }

    /// Flux of a crowd's points over the noise there.
    fn own_height(&self, crowd: &Crowd, model: &Model) -> f64 {
        let own = model.points.iter().filter(|point| crowd.names.contains(&point.name));
        let flux: f64 = own.map(|point| point.flux_at(self.task.settings.reference_hz)).sum();
        let middle = crowd.middle();
        let pixel = [middle.1.round() as usize, middle.0.round() as usize];
        flux.abs() * self.scaling.per_jy.get(pixel).copied().unwrap_or(0.0)
    }

    /// Highest absolute value within a beam of a pixel.
    fn highest_around(&self, image: &[f32], (x, y): (f64, f64)) -> f64 {
        let (width, height) = (self.task.geometry.width, self.task.geometry.height);
        let reach = self.beam_px();
        let span = |v: f64, n: usize| {
            let low = (v - reach).max(0.0) as usize;
            low.min(n)..((v + reach).max(0.0) as usize + 1).min(n)
        };
        let columns = span(x, width);
        let around = span(y, height).flat_map(|row| columns.clone().map(move |column| row * width + column));
        f64::from(around.map(|at| image[at].abs()).fold(0.0, f32::max))
    }
}
