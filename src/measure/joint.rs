//! Flux densities of all sources at once, from the visibilities; spectral indices where the data allow.

use super::MeasureError;
use super::normal::{NormalEquations, Seen};
use crate::observation::BlockSource;
use crate::response::{Exact, UnitSource};
use nalgebra::DMatrix;

/// A pointing to be read: its exact response and its visibilities.
pub struct Reading<'a> {
    /// The response, with the true beams.
    pub exact: &'a Exact,
    /// The visibilities.
    pub source: &'a mut dyn BlockSource,
}

/// How flux densities are fitted.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct JointOptions {
    /// Spectral indices are fitted where their error would not pass this; 0 fits none.
    pub index_error: f64,
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
    /// The source that holds the flux of this one, where the two cannot be told apart.
    pub merged_into: Vec<Option<usize>>,
    /// Factor by which its neighbours widen a source's error, 1 when it stands alone.
    pub widened: Vec<f64>,
    /// Σ ω|A|² at each source, Jy⁻².
    pub weight: Vec<f64>,
    /// What each pointing knows of each source.
    pub seen: Vec<Seen>,
    /// Σ ω|v − M x|² over the number of data less that of unknowns: 1 when sources, beams and weights are right.
    pub reduced_misfit: f64,
    /// Number of real data.
    pub data: u64,
    /// Times the visibilities were read.
    pub passes: usize,
}

/// Most rounds for spectral indices; two or three settle them.
const MOST_ROUNDS: usize = 8;
/// Signal to noise below which no spectral index is fitted: the linear step S δα / S means nothing then.
const LEAST_SIGNAL: f64 = 5.0;

/// Fits the flux densities of `sources` jointly. The first pass takes their spectral indices as given; where the error of
/// one would not pass the limit it is fitted too, by Gauss and Newton's rounds of linear fits. Two sources that cannot be
/// told apart become one: the first in the list keeps the flux of both. `rows` is told rows as they are read.
///
/// # Errors
/// When the visibilities cannot be read, or sums are no numbers.
pub fn joint_fluxes(
    pointings: &mut [Reading],
    sources: &[UnitSource],
    options: JointOptions,
    mut rows: impl FnMut(u64),
) -> Result<JointFluxes, MeasureError> {
    let count = sources.len();
    let mut merged_into: Vec<Option<usize>> = vec![None; count];
    let mut sources = sources.to_vec();
    let mut slopes: Vec<usize> = Vec::new();
    let mut index: Vec<Option<(f64, f64)>> = vec![None; count];
    let mut first_pass = true;
    let mut passes = 0;
    let mut rounds = 0;
    loop {
        // sources that stand aside take no part; the rest keep their order
        let active: Vec<usize> = (0..count).filter(|&i| merged_into[i].is_none()).collect();
        let place = |source: usize| active.iter().position(|&a| a == source);
        let active_slopes: Vec<usize> = slopes.iter().filter_map(|&s| place(s)).collect();
        let mut equations =
            NormalEquations::new(active.iter().map(|&i| sources[i]).collect(), active_slopes.clone());
        for pointing in pointings.iter_mut() {
            equations.add(pointing.exact, pointing.source, &mut rows)?;
        }
        passes += 1;
        let solution = match equations.solve() {
            Ok(solution) => solution,
            Err(MeasureError::Singular { first, second, .. }) => {
                let (first, second) = (active[first], active[second]);
                merged_into[second] = Some(first);
                slopes.retain(|&s| s != second);
                continue;
            }
            Err(other) => return Err(other),
        };
        let mut settled = true;
        for (at, &slope) in active_slopes.iter().enumerate() {
            let (unknown, source) = (active.len() + at, active[slope]);
            let flux = solution.x[slope];
            let step = solution.x[unknown] / flux;
            let error = solution.covariance[(unknown, unknown)].sqrt() / flux.abs();
            // a step of more than this is outside what the line stands for; the next round goes on from there
            sources[source].spectral_index += step.clamp(-2.0, 2.0);
            index[source] = Some((sources[source].spectral_index, error));
            settled &= step.abs() <= 0.01 * error;
        }
        if first_pass && options.index_error > 0.0 {
            first_pass = false;
            slopes = active
                .iter()
                .enumerate()
                .filter(|&(at, _)| {
                    let (flux, error) = (solution.x[at], solution.covariance[(at, at)].sqrt());
                    flux > LEAST_SIGNAL * error && equations.index_error(at, flux) <= options.index_error
                })
                .map(|(_, &source)| source)
                .collect();
            settled = slopes.is_empty();
        }
        rounds += 1;
        if !settled && rounds < MOST_ROUNDS {
            continue;
        }
        let nan = f64::NAN;
        let mut out = JointFluxes {
            flux: vec![(nan, nan); count],
            covariance: DMatrix::from_element(count, count, nan),
            index,
            merged_into,
            widened: vec![nan; count],
            weight: vec![0.0; count],
            seen: Vec::new(),
            reduced_misfit: equations.misfit(&solution.x)
                / (equations.data_count() as f64 - solution.x.len() as f64).max(1.0),
            data: equations.data_count(),
            passes,
        };
        for (at, &source) in active.iter().enumerate() {
            out.weight[source] = equations.weight_at(at);
            let variance = solution.covariance[(at, at)];
            if !variance.is_finite() {
                continue;
            }
            out.flux[source] = (solution.x[at], variance.sqrt());
            out.widened[source] = (variance * equations.matrix()[(at, at)]).sqrt();
            for (other_at, &other) in active.iter().enumerate() {
                let c = solution.covariance[(at, other_at)];
                let known = solution.covariance[(other_at, other_at)].is_finite();
                out.covariance[(source, other)] = if known { c } else { nan };
            }
        }
        // what stands aside sees what its partner sees, to better than anything here can tell
        let holder = |source: usize| {
            let mut at = source;
            while let Some(first) = out.merged_into[at] {
                at = first;
            }
            place(at)
        };
        let holders: Vec<Option<usize>> = (0..count).map(holder).collect();
        out.seen = equations
            .seen()
            .iter()
            .map(|seen| Seen {
                weight: seen.weight,
                of_source: holders.iter().map(|h| h.map_or(0.0, |h| seen.of_source[h])).collect(),
            })
            .collect();
        for (source, holder) in holders.iter().enumerate() {
            out.weight[source] = holder.map_or(0.0, |h| equations.weight_at(h));
        }
        return Ok(out);
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
