//! Observations to be deconvolved through the library: invented arrays, skies predicted exactly, no files.
#![allow(dead_code)]

use crate::common::{Scene, Setting, scene};
use evensky::beam::StationBeams;
use evensky::imaging::beam_fit::{FittedBeam, fit_beam};
use evensky::imaging::deconvolve::{Model, Outcome, Part, Settings, Task, deconvolve};
use evensky::imaging::{Mosaic, Pointing, flat_sky};
use evensky::observation::{MemorySource, Observation};
use evensky::response::gridded::Options;
use evensky::response::{Exact, Sums};
use evensky::sky::{Component, ImageGeometry};
use ndarray::Array2;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

/// Tolerance of the gridded sums.
pub const TOLERANCE: f64 = 1e-5;
/// Response below which pixels are blank.
pub const LOWEST: f64 = 0.2;

/// A mosaic with its dirty image.
pub struct Field {
    pub geometry: ImageGeometry,
    pub mosaic: Mosaic,
    pub sums: Sums,
    /// N/W, NaN where blank.
    pub dirty: Array2<f64>,
    pub beam: FittedBeam,
}

/// What else a deconvolution may be given.
#[derive(Default)]
pub struct Given {
    pub mask: Option<Array2<bool>>,
    pub start: Option<Model>,
}

impl Field {
    /// `sky` as the arrays of `settings` see it; `noise` adds noise as the weights state it. Weights are multiplied by
    /// `claimed` afterwards: what they then claim is wrong by that factor.
    pub fn new(
        settings: &[Setting],
        sky: &[Component],
        geometry: ImageGeometry,
        noise: bool,
        claimed: f32,
    ) -> Field {
        Field::seen_otherwise(settings, sky, geometry, noise, claimed, |_, beams| beams)
    }

    /// As [`Field::new`], but imaged with the beams that `taken` makes of the true ones.
    pub fn seen_otherwise(
        settings: &[Setting],
        sky: &[Component],
        geometry: ImageGeometry,
        noise: bool,
        claimed: f32,
        taken: impl Fn(&Observation, StationBeams) -> StationBeams,
    ) -> Field {
        let mut mosaic = Mosaic::new(geometry);
        let mut rng = ChaCha8Rng::seed_from_u64(99);
        for setting in settings {
            let Scene { observation, mut block, beams } = scene(setting);
            Exact::new(&observation, beams.clone(), geometry).predict_exactly(sky, &mut block);
            for (data, weight) in block.data.iter_mut().zip(&mut block.weight) {
                let mut draw = || -> f32 { StandardNormal.sample(&mut rng) };
                if noise && *weight > 0.0 {
                    let sigma = 1.0 / weight.sqrt();
                    *data += num_complex::Complex32::new(sigma * draw(), sigma * draw());
                }
                *weight *= claimed;
            }
            let beams = taken(&observation, beams);
            let source = Box::new(MemorySource::new(observation, vec![block]));
            mosaic.add(source, beams, TOLERANCE, Options::default(), |_| {}).unwrap();
        }
        let sums = mosaic.sums(|_| {}).unwrap();
        let dirty = flat_sky(&sums, LOWEST);
        let (x, y) = geometry.reference();
        let psf = mosaic.point_spread(geometry.centre, &sums, &dirty, |_| {}).unwrap();
        let beam = fit_beam(psf.view(), (x, y), geometry.pixel).unwrap();
        Field { geometry, mosaic, sums, dirty, beam }
    }

    /// Deconvolves all that is seen.
    pub fn deconvolved(&mut self, settings: &Settings) -> Outcome {
        self.deconvolved_with(settings, Given::default())
    }

    pub fn deconvolved_with(&mut self, settings: &Settings, given: Given) -> Outcome {
        let seen = self.dirty.mapv(|value| !value.is_nan());
        let geometry = self.geometry;
        let parts =
            self.mosaic.pointings_mut().iter_mut().map(|Pointing { source, gridded, exact, aim, .. }| Part {
                source: source.as_mut(),
                response: gridded,
                exact,
                aim: *aim,
            });
        let task = Task {
            geometry,
            parts: parts.collect(),
            numerator: &self.sums.numerator,
            normaliser: &self.sums.normaliser,
            weight: &self.sums.normaliser,
            seen: &seen,
            mask: given.mask,
            state: None,
            start: given.start.unwrap_or_else(|| Model::empty(&geometry)),
            beam: self.beam,
            settings: settings.clone(),
        };
        deconvolve(task, &mut ()).unwrap()
    }

    /// N/W of an outcome's residual, NaN where blank.
    pub fn residual(&self, outcome: &Outcome) -> Array2<f64> {
        let mut image = &outcome.numerator / &self.sums.normaliser;
        image.iter_mut().zip(&self.dirty).filter(|(_, dirty)| dirty.is_nan()).for_each(|(r, _)| *r = f64::NAN);
        image
    }

    /// A component of constant flux density at a pixel position.
    pub fn source(geometry: &ImageGeometry, x: f64, y: f64, flux_jy: f64) -> Component {
        let direction = geometry.direction_of(x, y).unwrap();
        Component { name: "source".into(), direction, flux_jy, reference_hz: 1.35e9, spectral_index: 0.0 }
    }
}

/// Largest absolute value that is not blank; NaN when nothing is left.
pub fn largest(image: &Array2<f64>) -> f64 {
    image.iter().filter(|v| !v.is_nan()).map(|v| v.abs()).reduce(f64::max).unwrap_or(f64::NAN)
}

/// Flux density of model pixels within `reach` pixels of a place.
pub fn flux_around(model: &Model, x: f64, y: f64, reach: f64) -> f64 {
    let near = |(row, column): (usize, usize)| (column as f64 - x).hypot(row as f64 - y) <= reach;
    model.pixels.indexed_iter().filter(|(at, _)| near(*at)).map(|(_, flux)| flux).sum()
}
