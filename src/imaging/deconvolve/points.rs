//! Compact sources fitted straight to the visibilities: position, flux density and spectral index, all jointly.
//!
//! Pixels hold a source between them only as a crowd of components of both signs, and only with the common spectrum. At
//! dynamic ranges above about a thousand that is what is left in the residual. Here the crowd is replaced by one point
//! source whose four numbers minimise
//!
//! χ² = Σ_k ω_k |V_k − M_k|² + Σ_s (α_s − α_0)²/σ_α²
//!
//! over all such sources at once (Gauss–Newton; the model M through the exact direct sums with every station's beam; the
//! weak second term, σ_α = 3, only keeps spectra that the data do not determine near the common one α_0). What one point
//! does not describe is tried as two; what two do not describe gets its crowd back.

use super::local_psf::Scaling;
use super::model::Model;
use super::residual::{Part, ResidualSource, Sky};
use super::restore::restored_model;
use super::settings::Settings;
use crate::imaging::beam_fit::FittedBeam;
use crate::observation::{Block, BlockSource};
use crate::response::{Exact, ResponseError};
use crate::sky::{Component, ImageGeometry};
use nalgebra::{DMatrix, DVector};
use ndarray::Array2;
use num_complex::{Complex32, Complex64};
use rayon::prelude::*;
use serde::{Deserialize, Serialize};

/// Most sources fitted: the normal matrix has four rows for each, and each is predicted five times a pass.
pub const MOST_POINTS: usize = 200;
/// Passes over the visibilities of one fit.
const MOST_PASSES: usize = 10;
/// A pass that lowers χ² by less than this fraction is the last.
const CONVERGED: f64 = 1e-4;
/// Steps for derivatives along l and m, as a fraction of the beam's minor axis.
const STEP: f64 = 0.05;
/// Standard deviation of the weak term on spectral indices.
const INDEX_SIGMA: f64 = 3.0;
/// Samples taken into the normal matrix at a time.
const SAMPLES: usize = 1 << 13;
/// Numbers fitted for each source.
const EACH: usize = 4;

/// A point and the pixels that it replaced.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Crowd {
    /// Names of the points that replace it: one, or two for a double.
    pub names: Vec<String>,
    /// ([y, x], flux density).
    pub pixels: Vec<([usize; 2], f64)>,
}

impl Crowd {
    /// The middle of the pixels, (x, y), weighted by the size of their flux.
    pub fn middle(&self) -> (f64, f64) {
        let weighted = self.pixels.iter().map(|&([y, x], flux)| (x as f64, y as f64, flux.abs()));
        middle(weighted)
    }

    /// Two points in place of the pixels: the middles of their two halves, found as the two means that all pixels are
    /// nearest to (Lloyd's iteration from the outermost pixels of their longer axis).
    pub fn double(&self, geometry: &ImageGeometry, settings: &Settings, first_number: usize) -> Vec<Component> {
        let all: Vec<(f64, f64, f64)> =
            self.pixels.iter().map(|&([y, x], f)| (x as f64, y as f64, f.abs())).collect();
        let (cx, cy) = middle(all.iter().copied());
        let second = |f: fn(f64, f64) -> f64| all.iter().map(|(x, y, w)| w * f(x - cx, y - cy)).sum::<f64>();
        let angle = 0.5 * (2.0 * second(|x, y| x * y)).atan2(second(|x, y| x * x - y * y));
        let size: f64 = all.iter().map(|p| p.2).sum();
        let along = second(|x, y| x * x + y * y) / size;
        let offset = (angle.cos() * along.sqrt(), angle.sin() * along.sqrt());
        let mut means = [(cx - offset.0, cy - offset.1), (cx + offset.0, cy + offset.1)];
        let nearer = |means: &[(f64, f64); 2], x: f64, y: f64| {
            let far = |m: (f64, f64)| (x - m.0).hypot(y - m.1);
            usize::from(far(means[1]) < far(means[0]))
        };
        for _ in 0..20 {
            for half in 0..2 {
                let own = all.iter().copied().filter(|&(x, y, _)| nearer(&means, x, y) == half);
                let new = middle(own);
                if new.0.is_finite() {
                    means[half] = new;
                }
            }
        }
        (0..2)
            .filter_map(|half| {
                let own = self.pixels.iter().filter(|&&([y, x], _)| nearer(&means, x as f64, y as f64) == half);
                Some(Component {
                    name: name(first_number + half),
                    direction: geometry.direction_of(means[half].0, means[half].1)?,
                    flux_jy: own.map(|(_, flux)| flux).sum(),
                    reference_hz: settings.reference_hz,
                    spectral_index: settings.spectral_index,
                })
            })
            .collect()
    }
}

fn middle(points: impl Iterator<Item = (f64, f64, f64)>) -> (f64, f64) {
    let sums = points.fold((0.0, 0.0, 0.0), |s, (x, y, w)| (s.0 + w * x, s.1 + w * y, s.2 + w));
    (sums.0 / sums.2, sums.1 / sums.2)
}

fn name(number: usize) -> String {
    format!("fit-{number:04}")
}

/// A number that no fitted point of a list has, nor any above it.
pub fn next_number(points: &[Component]) -> usize {
    let numbers = points.iter().filter_map(|point| point.name.strip_prefix("fit-")?.parse::<usize>().ok());
    numbers.max().unwrap_or(0) + 1
}

/// How far around a peak its crowd of pixels reaches, pixels.
fn reach(geometry: &ImageGeometry, beam: &FittedBeam) -> f64 {
    (0.5 * beam.minor / geometry.pixel).max(1.5)
}

/// What the choice of compact sources goes by.
pub struct Field<'a> {
    /// The pixel grid.
    pub geometry: &'a ImageGeometry,
    /// Scaling of the search image.
    pub scaling: &'a Scaling,
    /// Restoring beam.
    pub beam: &'a FittedBeam,
    /// Settings.
    pub settings: &'a Settings,
    /// Numerator of the residual.
    pub numerator: &'a Array2<f64>,
    /// Brightness over noise that a source must have.
    pub above: f64,
    /// Brightness over noise below which pixels of the model are doubtful.
    pub doubtful: f64,
    /// Places, in pixels, where points were tried in vain.
    pub refused: &'a [(f64, f64)],
}

/// Puts points in place of the crowds of compact sources, and takes away what is doubtful: the pixels that are no brighter
/// than a few times the highest residual are as likely side lobes as sources, and as fixed parts of the model they would
/// pull the fit. Minor cycles find again what was real.
pub fn replace_crowds(model: &mut Model, field: &Field) -> Vec<Crowd> {
    absorb(field.geometry, model, field.beam, field.settings);
    let on_pixels = Model { pixels: model.pixels.clone(), points: Vec::new(), terms: Vec::new() };
    let restored = restored_model(&on_pixels, field.geometry, field.beam, field.settings.reference_hz);
    let candidates = candidates(model, &restored, field);
    let mut crowds = Vec::new();
    for (component, pixels) in candidates {
        pixels.iter().for_each(|(pixel, _)| model.pixels[*pixel] = 0.0);
        crowds.push(Crowd { names: vec![component.name.clone()], pixels });
        model.points.push(component);
    }
    drop_doubtful(model, field);
    crowds
}

/// Takes away pixels whose brightness, without the points, is below what is established, and all within a beam of a point:
/// they are as likely the errors of an earlier fit as anything else.
fn drop_doubtful(model: &mut Model, field: &Field) {
    let hz = field.settings.reference_hz;
    let on_pixels = Model { pixels: model.pixels.clone(), points: Vec::new(), terms: Vec::new() };
    let restored = restored_model(&on_pixels, field.geometry, field.beam, hz);
    for ((flux, brightness), per_jy) in model.pixels.iter_mut().zip(&restored).zip(&field.scaling.per_jy) {
        if (brightness * per_jy).abs() < field.doubtful {
            *flux = 0.0;
        }
    }
    let within = field.beam.major / field.geometry.pixel;
    let Model { pixels, points, .. } = model;
    for point in points.iter().filter(|point| made_here(point)) {
        let Some(place) = field.geometry.pixel_of(point.direction) else { continue };
        around(pixels, place, within).iter().for_each(|(pixel, _)| pixels[*pixel] = 0.0);
    }
}

/// Whether this module made a point.
pub fn made_here(point: &Component) -> bool {
    point.name.starts_with("fit-")
}

/// Components that later minor cycles put within a beam of a fitted point belong to it.
fn absorb(geometry: &ImageGeometry, model: &mut Model, beam: &FittedBeam, settings: &Settings) {
    let reach = reach(geometry, beam);
    let Model { pixels, points, .. } = model;
    for point in points.iter_mut().filter(|point| made_here(point)) {
        let Some((x, y)) = geometry.pixel_of(point.direction) else { continue };
        let crowd = around(pixels, (x, y), reach);
        let flux: f64 = crowd.iter().map(|(_, flux)| flux).sum();
        point.flux_jy += flux / (settings.reference_hz / point.reference_hz).powf(point.spectral_index);
        crowd.iter().for_each(|(pixel, _)| pixels[*pixel] = 0.0);
    }
}

fn around(pixels: &Array2<f64>, place: (f64, f64), reach: f64) -> Vec<([usize; 2], f64)> {
    let (height, width) = pixels.dim();
    let span = |v: f64, n: usize| {
        let low = (v - reach).ceil().max(0.0) as usize;
        low..((v + reach).floor().max(-1.0) + 1.0).min(n as f64) as usize
    };
    let columns = span(place.0, width);
    span(place.1, height)
        .flat_map(|y| columns.clone().map(move |x| [y, x]))
        .filter(|&[y, x]| (x as f64 - place.0).hypot(y as f64 - place.1) <= reach && pixels[[y, x]] != 0.0)
        .map(|pixel| (pixel, pixels[pixel]))
        .collect()
}

/// Pixels of the model and their flux densities, Jy.
type Heap = Vec<([usize; 2], f64)>;

/// Peaks of model and residual together that are bright enough and stand alone, brightest first, each with its crowd.
fn candidates(model: &Model, restored: &Array2<f64>, field: &Field) -> Vec<(Component, Heap)> {
    let Field { geometry, scaling, beam, settings, .. } = *field;
    let mut image = restored.clone();
    for ((value, n), (w, t)) in
        image.iter_mut().zip(field.numerator).zip(scaling.normaliser.iter().zip(&scaling.noise))
    {
        *value = if *t > 0.0 { *value + n / w } else { 0.0 };
    }
    let (height, width) = image.dim();
    let apart = (beam.major / geometry.pixel).ceil().max(1.0) as usize;
    let reach = reach(geometry, beam);
    let taken: Vec<(f64, f64)> = model
        .points
        .iter()
        .filter_map(|point| geometry.pixel_of(point.direction))
        .chain(field.refused.iter().copied())
        .collect();
    let mut peaks: Vec<(f64, usize, usize)> = image
        .indexed_iter()
        .filter(|&((y, x), &value)| {
            value * scaling.per_jy[[y, x]] > field.above
                && (1..width.saturating_sub(1)).contains(&x)
                && (1..height.saturating_sub(1)).contains(&y)
                && taken.iter().all(|t| (x as f64 - t.0).hypot(y as f64 - t.1) > reach + 1.0)
        })
        .filter(|&((y, x), &value)| {
            (y.saturating_sub(apart)..(y + apart + 1).min(height))
                .all(|j| (x.saturating_sub(apart)..(x + apart + 1).min(width)).all(|i| image[[j, i]] <= value))
        })
        .map(|((y, x), &value)| (value * scaling.per_jy[[y, x]], x, y))
        .collect();
    peaks.sort_by(|a, b| b.0.total_cmp(&a.0));
    let earlier = model.points.iter().filter(|point| made_here(point)).count();
    peaks.truncate(MOST_POINTS.saturating_sub(earlier));
    let first = next_number(&model.points);
    peaks
        .into_iter()
        .filter_map(|(_, x, y)| {
            let value = image[[y, x]];
            let off = |low: f64, high: f64| {
                let curvature = low + high - 2.0 * value;
                if curvature < 0.0 { (0.5 * (low - high) / curvature).clamp(-0.5, 0.5) } else { 0.0 }
            };
            let place = (
                x as f64 + off(image[[y, x - 1]], image[[y, x + 1]]),
                y as f64 + off(image[[y - 1, x]], image[[y + 1, x]]),
            );
            let crowd = around(&model.pixels, place, reach);
            let direction = geometry.direction_of(place.0, place.1)?;
            (!crowd.is_empty()).then_some((direction, value, crowd))
        })
        .enumerate()
        .map(|(number, (direction, flux_jy, crowd))| {
            let (reference_hz, spectral_index) = (settings.reference_hz, settings.spectral_index);
            (Component { name: name(first + number), direction, flux_jy, reference_hz, spectral_index }, crowd)
        })
        .collect()
}

/// Gauss–Newton on all points made here; the best state seen is kept. Returns the passes made.
///
/// # Errors
/// When visibilities cannot be read or the model cannot be predicted.
pub fn refine(
    parts: &mut [Part],
    geometry: &ImageGeometry,
    model: &mut Model,
    beam: &FittedBeam,
    settings: &Settings,
    rows: &mut (dyn FnMut(u64) + Send),
) -> Result<usize, ResponseError> {
    let (mut points, fixed): (Vec<Component>, Vec<Component>) = model.points.drain(..).partition(made_here);
    if points.is_empty() {
        model.points = fixed;
        return Ok(0);
    }
    let pixels = model.pixel_components(geometry, settings.reference_hz, settings.spectral_index);
    let mut best: Option<(f64, Vec<Component>)> = None;
    let mut shrink = 1.0;
    let mut passes = 0;
    let mut last = DVector::zeros(EACH * points.len());
    while passes < MOST_PASSES {
        let sky = Sky {
            pixels: pixels.clone(),
            points: fixed.iter().chain(&points).cloned().collect(),
            ..Sky::default()
        };
        let normal = Normal::gather(parts, geometry, &sky, &points, beam, settings, rows)?;
        passes += 1;
        match &best {
            Some((chi2, state)) if normal.chi2 > *chi2 || normal.chi2.is_nan() => {
                // too far: half of the last step, from the best state
                shrink *= 0.5;
                points = moved(state, geometry, &last, shrink);
                continue;
            }
            Some((chi2, _)) if chi2 - normal.chi2 < CONVERGED * normal.chi2.abs() => {
                best = Some((normal.chi2, points.clone()));
                break;
            }
            _ => best = Some((normal.chi2, points.clone())),
        }
        let Some(step) = normal.step() else { break };
        (last, shrink) = (step, 1.0);
        points = moved(&points, geometry, &last, shrink);
    }
    model.points = fixed;
    model.points.extend(best.map_or(points, |(_, state)| state));
    Ok(passes)
}

/// Points after a share of a step; positions move by at most one pixel at a time.
fn moved(points: &[Component], geometry: &ImageGeometry, step: &DVector<f64>, share: f64) -> Vec<Component> {
    points
        .iter()
        .enumerate()
        .map(|(at, point)| {
            let of = |k: usize| share * step[EACH * at + k];
            let direction = geometry
                .pixel_of(point.direction)
                .and_then(|(x, y)| geometry.direction_of(x + of(1).clamp(-1.0, 1.0), y + of(2).clamp(-1.0, 1.0)));
            Component {
                name: point.name.clone(),
                direction: direction.unwrap_or(point.direction),
                flux_jy: point.flux_jy + of(0),
                reference_hz: point.reference_hz,
                spectral_index: (point.spectral_index + of(3)).clamp(-20.0, 20.0),
            }
        })
        .collect()
}

/// The normal equations of one pass.
struct Normal {
    matrix: DMatrix<f64>,
    right: DVector<f64>,
    chi2: f64,
}

/// A visibility, or the mean of the hands that see the same.
struct Sample {
    at: usize,
    channel: usize,
    root_weight: f64,
    residual: [f64; 2],
}

impl Normal {
    fn zero(unknowns: usize) -> Normal {
        Normal { matrix: DMatrix::zeros(unknowns, unknowns), right: DVector::zeros(unknowns), chi2: 0.0 }
    }

    fn sum(&mut self, other: Normal) {
        self.matrix += other.matrix;
        self.right += other.right;
        self.chi2 += other.chi2;
    }

    fn gather(
        parts: &mut [Part],
        geometry: &ImageGeometry,
        sky: &Sky,
        points: &[Component],
        beam: &FittedBeam,
        settings: &Settings,
        rows: &mut (dyn FnMut(u64) + Send),
    ) -> Result<Normal, ResponseError> {
        let unknowns = EACH * points.len();
        let mut normal = Normal::zero(unknowns);
        let step_px = STEP * beam.minor / geometry.pixel;
        for part in parts {
            let exact = part.exact;
            let observation = part.source.observation().clone();
            let hands = observation.total_intensity();
            let mut residual = ResidualSource::new(part, sky);
            residual.rewind()?;
            while let Some(block) = residual.next_block()? {
                rows(block.rows() as u64);
                let at_once = (SAMPLES / (block.channels * hands.len()).max(1)).max(1);
                let starts: Vec<usize> = (0..block.rows()).step_by(at_once).collect();
                // in the order of the rows, so that the number of threads changes nothing
                let pieces: Vec<Normal> = starts
                    .par_iter()
                    .map(|&start| {
                        let piece = rows_of(&block, start..(start + at_once).min(block.rows()));
                        let mut part = Normal::zero(unknowns);
                        part.add(&piece, exact, geometry, points, step_px, &hands, &observation.frequencies_hz);
                        part
                    })
                    .collect();
                pieces.into_iter().for_each(|piece| normal.sum(piece));
            }
            residual.finish()?;
        }
        for (at, point) in points.iter().enumerate() {
            let (row, precision) = (EACH * at + 3, INDEX_SIGMA.powi(-2));
            let off = point.spectral_index - settings.spectral_index;
            normal.matrix[(row, row)] += precision;
            normal.right[row] -= precision * off;
            normal.chi2 += precision * off * off;
        }
        Ok(normal)
    }

    #[expect(clippy::too_many_arguments)]
    fn add(
        &mut self,
        residual: &Block,
        exact: &Exact,
        geometry: &ImageGeometry,
        points: &[Component],
        step_px: f64,
        hands: &[usize],
        frequencies_hz: &[f64],
    ) {
        let mut scratch = residual.clone();
        let mut predict = |component: Component| {
            exact.predict_exactly(&[component], &mut scratch);
            scratch.data.clone()
        };
        let first = points.first().map(|point| predict(point.clone())).unwrap_or_default();
        let used = samples(residual, hands, &first);
        let both = |z: Complex32| [f64::from(z.re), f64::from(z.im)];
        // two real rows a sample, √ω times; one column an unknown, the last for the residual
        let mut columns = DMatrix::<f64>::zeros(2 * used.len(), EACH * points.len() + 1);
        let fill = |column: usize, columns: &mut DMatrix<f64>, value: &dyn Fn(&Sample) -> [f64; 2]| {
            for (sample, pair) in used.iter().zip(columns.column_mut(column).as_mut_slice().chunks_mut(2)) {
                let [re, im] = value(sample);
                pair.copy_from_slice(&[sample.root_weight * re, sample.root_weight * im]);
            }
        };
        fill(EACH * points.len(), &mut columns, &|sample| sample.residual);
        for (number, point) in points.iter().enumerate() {
            let unit = |dx: f64, dy: f64| {
                let place = geometry.pixel_of(point.direction);
                let direction = place.and_then(|(x, y)| geometry.direction_of(x + dx, y + dy));
                Component { flux_jy: 1.0, direction: direction.unwrap_or(point.direction), ..point.clone() }
            };
            let here = predict(unit(0.0, 0.0));
            let flux = point.flux_jy;
            fill(EACH * number, &mut columns, &|s| both(here[s.at]));
            for (k, (dx, dy)) in [(1, (step_px, 0.0)), (2, (0.0, step_px))] {
                let (plus, minus) = (predict(unit(dx, dy)), predict(unit(-dx, -dy)));
                let slope = flux / (2.0 * step_px);
                fill(EACH * number + k, &mut columns, &|s| both(plus[s.at] - minus[s.at]).map(|v| slope * v));
            }
            fill(EACH * number + 3, &mut columns, &|s| {
                both(here[s.at]).map(|v| v * flux * (frequencies_hz[s.channel] / point.reference_hz).ln())
            });
        }
        let unknowns = EACH * points.len();
        let (derivatives, data) = (columns.columns(0, unknowns), columns.column(unknowns));
        self.matrix += derivatives.transpose() * derivatives;
        self.right += derivatives.transpose() * data;
        self.chi2 += data.norm_squared();
    }

    /// The Gauss–Newton step; scaled to a unit diagonal, since the unknowns have unlike units.
    fn step(&self) -> Option<DVector<f64>> {
        let scale: Vec<f64> =
            self.matrix.diagonal().iter().map(|d| if *d > 0.0 { 1.0 / d.sqrt() } else { 0.0 }).collect();
        let mut scaled = self.matrix.clone();
        for (row, a) in scale.iter().enumerate() {
            for (column, b) in scale.iter().enumerate() {
                scaled[(row, column)] *= a * b;
            }
            scaled[(row, row)] += 1e-9;
        }
        let right = DVector::from_iterator(scale.len(), self.right.iter().zip(&scale).map(|(r, s)| r * s));
        let solved = scaled.cholesky()?.solve(&right);
        let step = DVector::from_iterator(scale.len(), solved.iter().zip(&scale).map(|(v, s)| v * s));
        step.iter().all(|v| v.is_finite()).then_some(step)
    }
}

/// The usable samples of a block; hands whose prediction is the same (feeds with one beam) become one, which halves the
/// work and changes χ² by a constant.
fn samples(residual: &Block, hands: &[usize], prediction: &[Complex32]) -> Vec<Sample> {
    let cells = || (0..residual.rows()).flat_map(|row| (0..residual.channels).map(move |channel| (row, channel)));
    let alike = hands.split_first().is_some_and(|(first, others)| {
        cells().all(|(row, channel)| {
            let at = residual.index(row, channel);
            others.iter().all(|hand| prediction.get(at + hand) == prediction.get(at + first))
        })
    });
    let mut all = Vec::new();
    for (row, channel) in cells() {
        let at = residual.index(row, channel);
        let groups = if alike { hands.chunks(hands.len()) } else { hands.chunks(1) };
        for group in groups {
            let (mut weight, mut sum) = (0.0, Complex64::ZERO);
            for hand in group.iter().filter(|&hand| residual.weight[at + hand] > 0.0) {
                let own = f64::from(residual.weight[at + hand]);
                weight += own;
                let z = residual.data[at + hand];
                sum += own * Complex64::new(f64::from(z.re), f64::from(z.im));
            }
            if weight > 0.0 {
                let mean = sum / weight;
                let root_weight = weight.sqrt();
                all.push(Sample { at: at + group[0], channel, root_weight, residual: [mean.re, mean.im] });
            }
        }
    }
    all
}

fn rows_of(block: &Block, rows: std::ops::Range<usize>) -> Block {
    let cells = block.index(rows.start, 0)..block.index(rows.end, 0);
    Block {
        mjd_utc: block.mjd_utc[rows.clone()].to_vec(),
        uvw_m: block.uvw_m[rows.clone()].to_vec(),
        first: block.first[rows.clone()].to_vec(),
        second: block.second[rows].to_vec(),
        channels: block.channels,
        hands: block.hands,
        data: block.data[cells.clone()].to_vec(),
        weight: block.weight[cells].to_vec(),
    }
}
