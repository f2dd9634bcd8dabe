//! Normal equations of flux densities, summed straight over visibilities.
//!
//! With v = M x + noise, M the columns of [`crate::response::Columns`] times the spectra, Ω the visibilities' own weights
//! 1/σ² (never imaging weights: they would only lose), and x real,
//!
//! > H = Re(Mᴴ Ω M),  b = Re(Mᴴ Ω v),  x = H⁻¹ b,  covariance of x = H⁻¹,
//!
//! because 1/σ² is the inverse variance of the real part and of the imaginary part alike. This is the estimator of least
//! variance (Gauss and Markov) when the list of sources is complete.

use super::MeasureError;
use crate::observation::{Block, BlockSource};
use crate::response::{Columns, Exact, TimeRows, UnitSource, UnitSources};
use nalgebra::{DMatrix, DVector};
use rayon::prelude::*;
use std::f64::consts::TAU;

/// Shares of a block summed side by side; fixed, so that the order of every sum does not depend on the threads. Fewer for
/// many unknowns, whose matrices would fill the memory.
fn shares(unknowns: usize) -> usize {
    ((1 << 24) / (unknowns * unknowns).max(1)).clamp(2, 16)
}

/// What one pointing knows of each source.
#[derive(Debug, Clone, PartialEq)]
pub struct Seen {
    /// Sum of all weights of the pointing, Jy⁻².
    pub weight: f64,
    /// Σ ω |A|² of each source, Jy⁻².
    pub of_source: Vec<f64>,
}

impl Seen {
    /// Root mean square beam product of the pointing at a source: 1 on the axis of all stations.
    pub fn response(&self, source: usize) -> f64 {
        if self.weight > 0.0 { (self.of_source[source] / self.weight).sqrt() } else { 0.0 }
    }
}

/// Sums over visibilities for a list of sources.
#[derive(Debug, Clone)]
pub struct NormalEquations {
    sources: Vec<UnitSource>,
    /// Sources that have a second unknown: the slope by ln ν.
    slopes: Vec<usize>,
    /// Sources that have two more unknowns: the place.
    places: Vec<usize>,
    matrix: DMatrix<f64>,
    right: DVector<f64>,
    /// Σ ω |v|².
    data: f64,
    samples: u64,
    /// Σ ω |A|², and times L and L², L = ln(ν/ν₀), for each source.
    moments: Vec<[f64; 3]>,
    seen: Vec<Seen>,
    with_matrix: bool,
}

impl NormalEquations {
    /// Equations for the flux densities of `sources` at their reference frequencies, and for those whose indices are in
    /// `slopes` (ascending) also for S·δα, the change of the spectral index: to first order
    /// S (ν/ν₀)^(α+δα) = S (ν/ν₀)^α + S δα ln(ν/ν₀) (ν/ν₀)^α; and for those in `places` also for S·δl and S·δm, the way in
    /// direction cosines of the image. The unknowns stand in this order, all δl before all δm.
    pub fn new(sources: Vec<UnitSource>, slopes: Vec<usize>, places: Vec<usize>) -> Self {
        let unknowns = sources.len() + slopes.len() + 2 * places.len();
        NormalEquations {
            matrix: DMatrix::zeros(unknowns, unknowns),
            right: DVector::zeros(unknowns),
            data: 0.0,
            samples: 0,
            moments: vec![[0.0; 3]; sources.len()],
            seen: Vec::new(),
            with_matrix: true,
            sources,
            slopes,
            places,
        }
    }

    /// Only what each pointing knows of each source, at a fraction of the cost: no equations.
    pub fn survey(sources: Vec<UnitSource>) -> Self {
        NormalEquations { with_matrix: false, ..NormalEquations::new(sources, Vec::new(), Vec::new()) }
    }

    /// Adds all visibilities of a pointing. `rows` is told the number of rows as they are done.
    ///
    /// # Errors
    /// When they cannot be read.
    pub fn add(
        &mut self,
        exact: &Exact,
        source: &mut dyn BlockSource,
        mut rows: impl FnMut(u64),
    ) -> Result<(), MeasureError> {
        let units = exact.unit_sources(&self.sources);
        let mut seen = Seen { weight: 0.0, of_source: vec![0.0; self.sources.len()] };
        source.rewind()?;
        while let Some(block) = source.next_block()? {
            for part in self.block(exact, &units, &block) {
                self.matrix += part.matrix;
                self.right += part.right;
                self.data += part.data;
                self.samples += part.samples;
                seen.weight += part.weight;
                for ((moment, seen), more) in self.moments.iter_mut().zip(&mut seen.of_source).zip(part.moments) {
                    (0..3).for_each(|i| moment[i] += more[i]);
                    *seen += more[0];
                }
            }
            rows(block.rows() as u64);
        }
        self.seen.push(seen);
        Ok(())
    }

    fn block(&self, exact: &Exact, units: &UnitSources, block: &Block) -> Vec<Part> {
        let times = TimeRows::of(block);
        let tasks: Vec<(usize, usize)> =
            (0..times.len()).flat_map(|time| (0..exact.channels()).map(move |channel| (time, channel))).collect();
        let share = tasks.len().div_ceil(shares(self.right.len())).max(1);
        tasks
            .par_chunks(share)
            .map(|tasks| {
                let mut part = Part::new(if self.with_matrix { self.right.len() } else { 0 }, self.sources.len());
                for &(time, channel) in tasks {
                    part.add(&exact.columns(units, block, &times[time], channel), self);
                }
                // without equations the empty sums still have to add to the full ones
                if !self.with_matrix {
                    part.matrix = DMatrix::zeros(self.right.len(), self.right.len());
                    part.right = DVector::zeros(self.right.len());
                }
                part
            })
            .collect()
    }

    /// The sources.
    pub fn sources(&self) -> &[UnitSource] {
        &self.sources
    }

    /// H, unknowns × unknowns, Jy⁻².
    pub fn matrix(&self) -> &DMatrix<f64> {
        &self.matrix
    }

    /// b, one for each unknown, Jy⁻¹.
    pub fn right(&self) -> &DVector<f64> {
        &self.right
    }

    /// What each pointing knows of each source, in the order they were added.
    pub fn seen(&self) -> &[Seen] {
        &self.seen
    }

    /// Σ ω |A|² over all pointings at a source: the naturally weighted mosaic's inverse variance there, Jy⁻².
    pub fn weight_at(&self, source: usize) -> f64 {
        self.moments[source][0]
    }

    /// Frequency at which N/W of natural weights measures a source of moderate spectral index, Hz: the mean of ln ν under
    /// ω|A|². `None` when nothing sees it.
    pub fn effective_hz(&self, source: usize) -> Option<f64> {
        let [w0, w1, _] = self.moments[source];
        (w0 > 0.0).then(|| self.sources[source].reference_hz * (w1 / w0).exp())
    }

    /// What the error of a source's spectral index would be, were it alone: 1/(S √Σω|A|²(L − L̄)²).
    pub fn index_error(&self, source: usize, flux_jy: f64) -> f64 {
        let [w0, w1, w2] = self.moments[source];
        1.0 / (flux_jy.abs() * (w2 - w1 * w1 / w0).max(0.0).sqrt())
    }

    /// Number of (real) data.
    pub fn data_count(&self) -> u64 {
        2 * self.samples
    }

    /// Σ ω |v − M x|² of a solution.
    pub fn misfit(&self, x: &DVector<f64>) -> f64 {
        self.data - 2.0 * self.right.dot(x) + (&self.matrix * x).dot(x)
    }

    /// The unknowns and their covariance. Sources that nothing sees are left out: 0, with infinite variance.
    ///
    /// # Errors
    /// [`MeasureError::Singular`] naming two sources that the visibilities cannot tell apart.
    pub fn solve(&self) -> Result<Solution, MeasureError> {
        let unknowns = self.right.len();
        let used: Vec<usize> = (0..unknowns).filter(|&i| self.matrix[(i, i)] > 0.0).collect();
        let scale: Vec<f64> = used.iter().map(|&i| self.matrix[(i, i)].sqrt()).collect();
        let n = used.len();
        let correlation = DMatrix::from_fn(n, n, |a, b| self.matrix[(used[a], used[b])] / (scale[a] * scale[b]));
        if let Some((first, second)) = self.confused(&correlation, &used) {
            return Err(MeasureError::Singular {
                first,
                second,
                separation_arcsec: self.sources[first]
                    .direction
                    .separation(self.sources[second].direction)
                    .to_degrees()
                    * 3600.0,
                correlation: self.overlap(first, second),
            });
        }
        let mut x = DVector::zeros(unknowns);
        let mut covariance = DMatrix::from_diagonal_element(unknowns, unknowns, f64::INFINITY);
        if n > 0 {
            let Some(factor) = correlation.cholesky() else { return Err(MeasureError::NotANumber) };
            let inverse = factor.inverse();
            let right = DVector::from_fn(n, |a, _| self.right[used[a]] / scale[a]);
            let solved = factor.solve(&right);
            for (a, &i) in used.iter().enumerate() {
                x[i] = solved[a] / scale[a];
                for (b, &j) in used.iter().enumerate() {
                    covariance[(i, j)] = inverse[(a, b)] / (scale[a] * scale[b]);
                }
            }
        }
        Ok(Solution { x, covariance })
    }

    /// The source that an unknown belongs to.
    pub fn source_of(&self, unknown: usize) -> usize {
        let (fluxes, slopes, places) = (self.sources.len(), self.slopes.len(), self.places.len());
        match unknown {
            flux if flux < fluxes => flux,
            slope if slope < fluxes + slopes => self.slopes[slope - fluxes],
            place => self.places[(place - fluxes - slopes) % places.max(1)],
        }
    }

    /// H_ij / √(H_ii H_jj): 1 for sources that no visibility tells apart, in effect the point spread function between them.
    pub fn overlap(&self, first: usize, second: usize) -> f64 {
        self.matrix[(first, second)] / (self.matrix[(first, first)] * self.matrix[(second, second)]).sqrt()
    }

    /// The two sources that carry most of the direction that the equations do not determine, when there is one; one source
    /// twice where it is its own unknowns that cannot be told apart.
    fn confused(&self, correlation: &DMatrix<f64>, used: &[usize]) -> Option<(usize, usize)> {
        if used.len() < 2 || correlation.iter().any(|c| !c.is_finite()) {
            return None;
        }
        let eigen = correlation.clone().symmetric_eigen();
        let (at, least) = eigen.eigenvalues.iter().enumerate().min_by(|a, b| a.1.total_cmp(b.1))?;
        if *least > SINGULAR {
            return None;
        }
        let mut shares = vec![0.0; self.sources.len()];
        for (a, &unknown) in used.iter().enumerate() {
            shares[self.source_of(unknown)] += eigen.eigenvectors[(a, at)].powi(2);
        }
        let mut order: Vec<usize> = (0..shares.len()).collect();
        order.sort_by(|&a, &b| shares[b].total_cmp(&shares[a]).then(a.cmp(&b)));
        let first = order[0];
        // flux density, slope and place of one source alone
        let second = *order.get(1).filter(|&&second| shares[second] > ALONE).unwrap_or(&first);
        Some((first.min(second), first.max(second)))
    }
}

/// Least eigenvalue of the normalised equations below which they count as singular: the errors of the sources concerned
/// would be √(1/1e-6) = 1000 times that of either alone, and no flux density is published with those.
const SINGULAR: f64 = 1e-6;
/// A second source's share of an undetermined direction below which it has nothing to do with it.
const ALONE: f64 = 0.01;

/// Unknowns and covariance.
#[derive(Debug, Clone)]
pub struct Solution {
    /// Flux densities, then slopes.
    pub x: DVector<f64>,
    /// Their covariance, Jy²; infinite on the diagonal of what nothing sees.
    pub covariance: DMatrix<f64>,
}

/// Partial sums.
struct Part {
    matrix: DMatrix<f64>,
    right: DVector<f64>,
    data: f64,
    weight: f64,
    samples: u64,
    moments: Vec<[f64; 3]>,
}

impl Part {
    fn new(unknowns: usize, sources: usize) -> Part {
        Part {
            matrix: DMatrix::zeros(unknowns, unknowns),
            right: DVector::zeros(unknowns),
            data: 0.0,
            weight: 0.0,
            samples: 0,
            moments: vec![[0.0; 3]; sources],
        }
    }

    fn add(&mut self, columns: &Columns, equations: &NormalEquations) {
        let (count, samples) = (equations.sources.len(), columns.weight.len());
        if samples == 0 || count == 0 {
            self.samples += samples as u64;
            self.weight += columns.weight.iter().sum::<f64>();
            self.data += columns.data.iter().zip(&columns.weight).map(|(v, w)| w * v.norm_sqr()).sum::<f64>();
            return;
        }
        let logs: Vec<f64> = equations.sources.iter().map(|s| (columns.hz / s.reference_hz).ln()).collect();
        for (power, &weight) in columns.beam_power.chunks_exact(count).zip(&columns.weight) {
            self.weight += weight;
            for ((moment, power), log) in self.moments.iter_mut().zip(power).zip(&logs) {
                let w = weight * power;
                moment[0] += w;
                moment[1] += w * log;
                moment[2] += w * log * log;
            }
        }
        if self.right.is_empty() {
            return;
        }
        self.samples += samples as u64;
        let unknowns = self.right.len();
        // real and imaginary parts as rows of their own, scaled by √ω
        let mut rows = DMatrix::zeros(2 * samples, unknowns);
        let mut values = DVector::zeros(2 * samples);
        for (k, (model, (data, weight))) in
            columns.model.chunks_exact(count).zip(columns.data.iter().zip(&columns.weight)).enumerate()
        {
            let root = weight.sqrt();
            values[2 * k] = root * data.re;
            values[2 * k + 1] = root * data.im;
            self.data += weight * data.norm_sqr();
            for (s, value) in model.iter().enumerate() {
                let scaled = value * (root * columns.spectra[s]);
                rows[(2 * k, s)] = scaled.re;
                rows[(2 * k + 1, s)] = scaled.im;
            }
            for (i, &s) in equations.slopes.iter().enumerate() {
                rows[(2 * k, count + i)] = rows[(2 * k, s)] * logs[s];
                rows[(2 * k + 1, count + i)] = rows[(2 * k + 1, s)] * logs[s];
            }
            let (first, many) = (count + equations.slopes.len(), equations.places.len());
            for (i, &s) in equations.places.iter().enumerate() {
                let slopes = columns.phase_slopes[k * count + s];
                for (axis, slope) in slopes.iter().enumerate() {
                    // −2πi u' M
                    let (re, im) = (rows[(2 * k, s)], rows[(2 * k + 1, s)]);
                    rows[(2 * k, first + axis * many + i)] = TAU * slope * im;
                    rows[(2 * k + 1, first + axis * many + i)] = -TAU * slope * re;
                }
            }
        }
        self.matrix.gemm_tr(1.0, &rows, &rows, 1.0);
        self.right.gemv_tr(1.0, &rows, &values, 1.0);
    }
}
