//! Bands: runs of channels through which kernel coefficients are interpolated.
//!
//! Along a row the coefficients c_k(ν) are smooth: a few nodes in frequency make those of every channel,
//! c_k(ν) = Σ_j L_j(ν) c_k(ν_j). A visibility then has to meet the nodes only, and their sums meet the many terms
//! (see [`super::vector::Scrap`]). How many nodes a band needs is measured, on station pairs drawn at random, at several
//! times, at the ends of the range of w.

use super::smooth::{chebyshev_points, interpolation};
use super::vector::{Cell, GridReal, LANES, real};
use crate::beam::StationBeams;
use crate::response::rows::wavelengths_per_metre;
use num_complex::Complex64;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rayon::prelude::*;
use std::f64::consts::TAU;
use std::ops::Range;

/// Station pairs that errors are measured on.
const PAIRS: usize = 40;
/// Frequencies between nodes that errors are measured at.
const PROBES: usize = 5;
/// How far the worst product may pass what all keep in the root mean square.
const WORST: f64 = 5.0;

/// A run of channels and its nodes.
#[derive(Debug, Clone)]
pub(super) struct Band<T> {
    /// Channels, counted over the whole observation.
    pub channels: Range<usize>,
    /// Frequencies of the nodes.
    pub hz: Vec<f64>,
    /// Wavelengths per metre at the nodes, and in the middle.
    pub k: Vec<f64>,
    pub middle_k: f64,
    /// Smallest and largest wavelengths per metre of the channels.
    pub ends_k: (f64, f64),
    /// `[channel][node]`.
    pub weights: Vec<Vec<f64>>,
    /// Rows that share a scrap, at most.
    pub rows: usize,
    /// `[row of the scrap][channel]`: the weights on that row's lanes, twice.
    pub profiles: Vec<Cell<T>>,
}

/// What a partition's bands must be good for.
pub(super) struct Demand<'a> {
    pub beams: &'a StationBeams,
    pub pairs: &'a [(u32, u32)],
    pub feeds: &'a [usize],
    /// Directions, l and m about the aim, where coefficients are taken.
    pub lm: &'a [[f64; 2]],
    /// Bend at these directions; empty where w does not matter.
    pub bends: &'a [f64],
    /// Largest |w|, metres.
    pub w_m: f64,
    /// Parallactic angles at a few times.
    pub angles: &'a [Vec<f64>],
    /// Error allowed of products, root mean square.
    pub error: f64,
    /// |g_p|²|g_q|² in place of g_p* g_q.
    pub power: bool,
    /// Bands at least.
    pub fewest: usize,
}

/// What makes a number of bands cheap or dear.
#[derive(Debug, Clone, Copy)]
pub(super) struct Costs {
    /// Cells of the window, one way.
    pub support: usize,
    /// Mean distance of the visibilities from the middle of the grid, cells.
    pub distance: f64,
    /// Blocks of terms, and directions.
    pub blocks: usize,
    pub directions: usize,
}

impl Costs {
    /// Rough cost of one visibility in nanoseconds (only ratios matter) in bands of `channels` whose frequencies spread by
    /// `width` relative to their middle, with `nodes` nodes.
    pub(super) fn of(&self, channels: f64, width: f64, nodes: usize) -> f64 {
        let rows = rows_of(nodes) as f64;
        let along = self.distance * width;
        let support = self.support as f64;
        let cells = support * support + 1.3 * support * along;
        let (lanes, blocks) = (nodes as f64 * rows, self.blocks as f64);
        let expanding = 1.2 * cells * (0.54 * lanes * blocks + 1.4 * blocks + 2.0);
        let coefficients = lanes * self.directions as f64 * (1.0 + 0.3 * blocks);
        20.0 + 0.55 * support * support + (expanding + coefficients) / (channels * rows)
    }
}

/// Rows that fit a scrap of eight lanes.
fn rows_of(nodes: usize) -> usize {
    (LANES / nodes).max(1)
}

impl<T: GridReal> Band<T> {
    /// The cheapest bands that keep the demand; every channel a band of its own where nothing else does.
    pub(super) fn choose(demand: &Demand, hz: &[f64], first: usize, costs: Costs) -> Vec<Band<T>> {
        let mut best: Option<(f64, Vec<Range<usize>>, usize)> = None;
        let mut bands = demand.fewest.clamp(1, hz.len());
        // fewer channels need no more nodes
        let mut nodes = LANES;
        loop {
            let parts: Vec<Range<usize>> =
                (0..bands).map(|b| b * hz.len() / bands..(b + 1) * hz.len() / bands).collect();
            let widest = parts.iter().map(ExactSizeIterator::len).max().unwrap_or(1);
            let needed = if widest == 1 {
                Some(1)
            } else {
                let ends = [&parts[0], &parts[parts.len() - 1]];
                let ends: Vec<&[f64]> = ends[..bands.min(2)].iter().map(|part| &hz[(*part).clone()]).collect();
                let mut good = None;
                for count in (1..=nodes.min(widest)).rev() {
                    let exact = count == widest;
                    if !exact && !ends.iter().all(|hz| demand.kept(hz, count)) {
                        break;
                    }
                    good = Some(count);
                }
                good
            };
            if let Some(count) = needed {
                nodes = count;
                let (low, high) = range(hz);
                let width = (high - low) / (0.5 * (high + low)) / bands as f64;
                let cost = costs.of(hz.len() as f64 / bands as f64, width, count);
                if best.as_ref().is_none_or(|(least, ..)| cost < *least) {
                    best = Some((cost, parts, count));
                } else if best.as_ref().is_some_and(|(least, ..)| cost > 1.5 * least) {
                    break;
                }
            }
            if bands == hz.len() {
                break;
            }
            bands = (2 * bands).min(hz.len());
        }
        let (_, parts, count) = best.unwrap_or_else(|| (0.0, (0..hz.len()).map(|c| c..c + 1).collect(), 1));
        parts.into_iter().map(|part| Band::new(&hz[part.clone()], first + part.start, count)).collect()
    }

    fn new(hz: &[f64], first: usize, count: usize) -> Band<T> {
        let nodes = if count >= hz.len() { hz.to_vec() } else { nodes_of(hz, count) };
        let matrix = interpolation(&nodes, hz);
        let weights: Vec<Vec<f64>> = matrix.outer_iter().map(|row| row.to_vec()).collect();
        let rows = rows_of(nodes.len());
        let mut profiles = vec![[T::zero(); 2 * LANES]; rows * hz.len()];
        for row in 0..rows {
            for (channel, weights) in weights.iter().enumerate() {
                let profile = &mut profiles[row * hz.len() + channel];
                for (node, &weight) in weights.iter().enumerate() {
                    profile[row * nodes.len() + node] = real(weight);
                    profile[row * nodes.len() + node + LANES] = real(weight);
                }
            }
        }
        let (low, high) = range(hz);
        Band {
            channels: first..first + hz.len(),
            k: nodes.iter().map(|&hz| wavelengths_per_metre(hz)).collect(),
            middle_k: wavelengths_per_metre(0.5 * (low + high)),
            ends_k: (wavelengths_per_metre(low), wavelengths_per_metre(high)),
            hz: nodes,
            weights,
            rows,
            profiles,
        }
    }
}

fn range(hz: &[f64]) -> (f64, f64) {
    hz.iter().fold((f64::INFINITY, 0.0f64), |(low, high), &f| (low.min(f), high.max(f)))
}

fn nodes_of(hz: &[f64], count: usize) -> Vec<f64> {
    let (low, high) = range(hz);
    chebyshev_points(low, high, count)
}

impl Demand<'_> {
    /// Whether interpolation through `count` nodes keeps the error.
    fn kept(&self, hz: &[f64], count: usize) -> bool {
        let (low, high) = range(hz);
        let nodes = nodes_of(hz, count);
        // between nodes, where errors are largest
        let probes: Vec<f64> = (0..PROBES)
            .map(|i| {
                low + (high - low) * (0.5 - 0.5 * (std::f64::consts::PI * (i as f64 + 0.5) / PROBES as f64).cos())
            })
            .chain([low, 0.5 * (low + high)])
            .collect();
        let matrix = interpolation(&nodes, &probes);
        let all: Vec<f64> = nodes.iter().chain(&probes).copied().collect();
        let looks: Vec<Vec<Vec<Complex64>>> = all.par_iter().map(|&hz| self.voltages(hz)).collect();
        let mut rng = ChaCha8Rng::seed_from_u64(0xbad5);
        let mut members = Vec::new();
        for _ in 0..PAIRS {
            let pair = self.pairs[rng.random_range(0..self.pairs.len())];
            let time = rng.random_range(0..self.angles.len().max(1));
            let feed = rng.random_range(0..self.feeds.len());
            let w = if self.bends.is_empty() { 0.0 } else { [-self.w_m, self.w_m][rng.random_range(0..2)] };
            members.push((pair, time, feed, w));
        }
        let errors: Vec<(f64, f64)> = members
            .par_iter()
            .map(|&((p, q), time, feed, w)| {
                let stations = self.beams.len();
                let at = |station: u32| (time * stations + station as usize) * self.feeds.len() + feed;
                let (p, q) = (at(p), at(q));
                let (mut sum, mut worst) = (0.0, 0.0f64);
                for direction in 0..self.lm.len() {
                    let value = |index: usize| -> Complex64 {
                        let (gp, gq) = (looks[index][p][direction], looks[index][q][direction]);
                        if self.power {
                            return Complex64::new(gp.norm_sqr() * gq.norm_sqr(), 0.0);
                        }
                        let product = gp.conj() * gq;
                        match self.bends.get(direction) {
                            Some(bend) => {
                                product * Complex64::cis(TAU * w * wavelengths_per_metre(all[index]) * bend)
                            }
                            None => product,
                        }
                    };
                    let known: Vec<Complex64> = (0..count).map(value).collect();
                    for probe in 0..probes.len() {
                        let got: Complex64 = known.iter().zip(matrix.row(probe)).map(|(k, &m)| k * m).sum();
                        let error = (got - value(count + probe)).norm();
                        sum += error * error;
                        // NaN must not pass
                        worst = if error <= worst { worst } else { error };
                    }
                }
                (sum / (self.lm.len() * probes.len()).max(1) as f64, worst)
            })
            .collect();
        let mean = (errors.iter().map(|e| e.0).sum::<f64>() / errors.len().max(1) as f64).sqrt();
        let worst = errors.iter().fold(0.0f64, |worst, e| if e.1 <= worst { worst } else { e.1 });
        mean <= self.error && worst <= WORST * self.error
    }

    /// `[(time, station, feed)][direction]`.
    fn voltages(&self, hz: f64) -> Vec<Vec<Complex64>> {
        let mut all = Vec::new();
        for angles in self.angles {
            for (station, &angle) in angles.iter().enumerate() {
                for &feed in self.feeds {
                    let mut out = vec![Complex64::ZERO; self.lm.len()];
                    self.beams.voltages(station, angle, hz, feed, self.lm, &mut out);
                    all.push(out);
                }
            }
        }
        all
    }
}
