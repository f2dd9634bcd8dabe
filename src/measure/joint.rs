//! Flux densities of all sources at once, from the visibilities; spectral indices and places where the data allow.

use super::MeasureError;
use super::normal::{NormalEquations, Seen, Solution};
use crate::observation::BlockSource;
use crate::response::{Exact, Response, UnitSource};
use crate::sky::{Direction, TangentFrame};
use nalgebra::DMatrix;

/// A pointing to be read: its exact response and its visibilities.
pub struct Reading<'a> {
    /// The response, with the true beams.
    pub exact: &'a Exact,
    /// The visibilities.
    pub source: &'a mut dyn BlockSource,
    /// What grids the residual for further searches; `None` to go without.
    pub imager: Option<&'a dyn Response>,
}

/// How flux densities are fitted.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct JointOptions {
    /// Spectral indices are fitted where their error would not pass this; 0 fits none.
    pub index_error: f64,
    /// Places are fitted too, for sources no farther than this (radians) from those given; `None` holds all places.
    pub wander: Option<f64>,
    /// Frame whose l and m shapes and places are measured in: the image's.
    pub frame: TangentFrame,
}

/// Flux densities with all that is known of them.
#[derive(Debug, Clone)]
pub struct JointFluxes {
    /// Flux density at its reference frequency, Jy, and its error; NaN where nothing sees the source or it stands aside.
    pub flux: Vec<(f64, f64)>,
    /// Covariance of the flux densities, Jy²; NaN where the flux density is.
    pub covariance: DMatrix<f64>,
    /// Spectral index and error where it was fitted.
    pub index: Vec<Option<(f64, f64)>>,
    /// Place and its errors by l and m, radians, where it was fitted.
    pub place: Vec<Option<(Direction, [f64; 2])>>,
    /// The source that holds the flux of this one, where the two cannot be told apart.
    pub merged_into: Vec<Option<usize>>,
    /// Factor by which its neighbours and its other unknowns widen a source's error, 1 when it stands alone.
    pub widened: Vec<f64>,
    /// Σ ω|A|² at each source, Jy⁻².
    pub weight: Vec<f64>,
    /// What each pointing knows of each source.
    pub seen: Vec<Seen>,
    /// Σ ω|v − M x|²: χ² of the fit.
    pub misfit: f64,
    /// The same over the number of data less that of unknowns: 1 when sources, beams and weights are right.
    pub reduced_misfit: f64,
    /// Number of real data.
    pub data: u64,
    /// Times the visibilities were read.
    pub passes: usize,
}

/// Most rounds for spectral indices and places; three or four settle them.
const MOST_ROUNDS: usize = 12;
/// Signal to noise below which neither is fitted: linear steps S δα / S mean nothing then.
const LEAST_SIGNAL: f64 = 5.0;
/// A round's step, in errors, below which an unknown has settled.
const SETTLED: f64 = 0.01;

/// Fits the flux densities of `sources` jointly. The first pass takes their spectral indices and places as given; where they
/// are to be fitted too, Gauss and Newton's rounds of linear fits follow. Two sources that cannot be told apart become one:
/// the first in the list keeps the flux of both. `rows` is told rows as they are read.
///
/// # Errors
/// When the visibilities cannot be read, or sums are no numbers.
pub fn joint_fluxes(
    pointings: &mut [Reading],
    sources: &[UnitSource],
    options: JointOptions,
    mut rows: impl FnMut(u64),
) -> Result<JointFluxes, MeasureError> {
    let mut state = State::new(sources);
    let mut passes = 0;
    let mut rounds = 0;
    loop {
        let active = state.active();
        let place = |source: usize| active.iter().position(|&a| a == source);
        let in_fit = |wanted: &[usize]| -> Vec<usize> { wanted.iter().filter_map(|&s| place(s)).collect() };
        let (slopes, places) = (in_fit(&state.slopes), in_fit(&state.places));
        let units = active.iter().map(|&i| state.sources[i]).collect();
        let mut equations = NormalEquations::new(units, slopes.clone(), places.clone());
        for pointing in pointings.iter_mut() {
            equations.add(pointing.exact, pointing.source, &mut rows)?;
        }
        passes += 1;
        let solution = match equations.solve() {
            Ok(solution) => solution,
            Err(MeasureError::Singular { first, second, .. }) => {
                state.confused(active[first], active[second]);
                continue;
            }
            Err(other) => return Err(other),
        };
        let mut settled = state.step(&active, &slopes, &places, &solution, &options);
        if rounds == 0 {
            state.choose(&active, &equations, &solution, &options);
            settled = state.slopes.is_empty() && state.places.is_empty();
        }
        rounds += 1;
        if settled || rounds >= MOST_ROUNDS {
            return Ok(state.conclude(&active, &equations, &solution, passes));
        }
    }
}

/// Where the rounds stand.
struct State {
    given: Vec<UnitSource>,
    sources: Vec<UnitSource>,
    slopes: Vec<usize>,
    places: Vec<usize>,
    index: Vec<Option<(f64, f64)>>,
    place: Vec<Option<(Direction, [f64; 2])>>,
    merged_into: Vec<Option<usize>>,
}

impl State {
    fn new(sources: &[UnitSource]) -> State {
        let count = sources.len();
        State {
            given: sources.to_vec(),
            sources: sources.to_vec(),
            slopes: Vec::new(),
            places: Vec::new(),
            index: vec![None; count],
            place: vec![None; count],
            merged_into: vec![None; count],
        }
    }

    /// Sources that take part, in their order; those that stand aside do not.
    fn active(&self) -> Vec<usize> {
        (0..self.sources.len()).filter(|&i| self.merged_into[i].is_none()).collect()
    }

    /// Two sources, or the unknowns of one, that the equations do not determine: the fewest unknowns go that may help.
    fn confused(&mut self, first: usize, second: usize) {
        let extra = |list: &Vec<usize>| list.contains(&first) || list.contains(&second);
        if extra(&self.places) {
            self.places.retain(|s| *s != first && *s != second);
            for source in [first, second] {
                self.sources[source].direction = self.given[source].direction;
                self.place[source] = None;
            }
        } else if extra(&self.slopes) {
            self.slopes.retain(|s| *s != first && *s != second);
            for source in [first, second] {
                self.sources[source].spectral_index = self.given[source].spectral_index;
                self.index[source] = None;
            }
        } else {
            self.merged_into[second] = Some(first);
        }
    }

    /// Decides after the first pass which spectral indices and places are fitted.
    fn choose(
        &mut self,
        active: &[usize],
        equations: &NormalEquations,
        solution: &Solution,
        options: &JointOptions,
    ) {
        for (at, &source) in active.iter().enumerate() {
            let (flux, error) = (solution.x[at], solution.covariance[(at, at)].sqrt());
            if flux > LEAST_SIGNAL * error {
                if equations.index_error(at, flux) <= options.index_error {
                    self.slopes.push(source);
                }
                if options.wander.is_some() {
                    self.places.push(source);
                }
            }
        }
    }

    /// Moves spectral indices and places by a round's solution; whether all have settled.
    fn step(
        &mut self,
        active: &[usize],
        slopes: &[usize],
        places: &[usize],
        solution: &Solution,
        options: &JointOptions,
    ) -> bool {
        let mut settled = true;
        let relative = |unknown: usize, flux: f64| {
            (solution.x[unknown] / flux, solution.covariance[(unknown, unknown)].sqrt() / flux.abs())
        };
        for (at, &slope) in slopes.iter().enumerate() {
            let source = active[slope];
            let (step, error) = relative(active.len() + at, solution.x[slope]);
            // a step of more than this is outside what the line stands for; the next round goes on from there
            self.sources[source].spectral_index += step.clamp(-2.0, 2.0);
            self.index[source] = Some((self.sources[source].spectral_index, error));
            settled &= step.abs() <= SETTLED * error;
        }
        let wander = options.wander.unwrap_or(0.0);
        for (at, &placed) in places.iter().enumerate() {
            let source = active[placed];
            let first = active.len() + slopes.len() + at;
            let ((dl, error_l), (dm, error_m)) =
                (relative(first, solution.x[placed]), relative(first + places.len(), solution.x[placed]));
            let length = dl.hypot(dm);
            let by = if length > 0.5 * wander { 0.5 * wander / length } else { 1.0 };
            let [l, m, _] = options.frame.lmn(self.sources[source].direction);
            let moved = options.frame.direction(l + by * dl, m + by * dm);
            match moved.filter(|d| d.separation(self.given[source].direction) <= wander) {
                Some(direction) => {
                    self.sources[source].direction = direction;
                    self.place[source] = Some((direction, [error_l, error_m]));
                    settled &= dl.abs() <= SETTLED * error_l && dm.abs() <= SETTLED * error_m;
                }
                None => {
                    // it runs away: what pulls it is another source, and its place is that of the image
                    self.sources[source].direction = self.given[source].direction;
                    self.place[source] = None;
                    self.places.retain(|&s| s != source);
                    settled = false;
                }
            }
        }
        settled
    }

    fn conclude(
        self,
        active: &[usize],
        equations: &NormalEquations,
        solution: &Solution,
        passes: usize,
    ) -> JointFluxes {
        let count = self.sources.len();
        let nan = f64::NAN;
        let place = |source: usize| active.iter().position(|&a| a == source);
        // what stands aside sees what its partner sees, to better than anything here can tell
        let holders: Vec<Option<usize>> = (0..count)
            .map(|source| {
                let mut at = source;
                while let Some(first) = self.merged_into[at] {
                    at = first;
                }
                place(at)
            })
            .collect();
        let of_seen = |seen: &Seen| Seen {
            weight: seen.weight,
            of_source: holders.iter().map(|h| h.map_or(0.0, |h| seen.of_source[h])).collect(),
        };
        let mut out = JointFluxes {
            flux: vec![(nan, nan); count],
            covariance: DMatrix::from_element(count, count, nan),
            index: self.index,
            place: self.place,
            merged_into: self.merged_into,
            widened: vec![nan; count],
            weight: holders.iter().map(|h| h.map_or(0.0, |h| equations.weight_at(h))).collect(),
            seen: equations.seen().iter().map(of_seen).collect(),
            misfit: equations.misfit(&solution.x),
            reduced_misfit: equations.misfit(&solution.x)
                / (equations.data_count() as f64 - solution.x.len() as f64).max(1.0),
            data: equations.data_count(),
            passes,
        };
        for (at, &source) in active.iter().enumerate() {
            let variance = solution.covariance[(at, at)];
            if !variance.is_finite() {
                continue;
            }
            out.flux[source] = (solution.x[at], variance.sqrt());
            out.widened[source] = (variance * equations.matrix()[(at, at)]).sqrt();
            for (other_at, &other) in active.iter().enumerate() {
                let known = solution.covariance[(other_at, other_at)].is_finite();
                out.covariance[(source, other)] = if known { solution.covariance[(at, other_at)] } else { nan };
            }
        }
        out
    }
}

/// What each pointing knows of each source, one pass over the visibilities, no fit.
///
/// # Errors
/// When the visibilities cannot be read.
pub fn survey(
    pointings: &mut [Reading],
    sources: &[UnitSource],
    mut rows: impl FnMut(u64),
) -> Result<NormalEquations, MeasureError> {
    let mut equations = NormalEquations::survey(sources.to_vec());
    for pointing in pointings.iter_mut() {
        equations.add(pointing.exact, pointing.source, &mut rows)?;
    }
    Ok(equations)
}
