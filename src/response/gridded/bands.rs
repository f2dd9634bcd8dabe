//! Bands and spans: runs of channels and stretches of time through which kernel coefficients are interpolated.
//!
//! For one station pair the coefficients c_k(ν, t) are smooth: a few nodes in frequency and time make all of them,
//! c_k(ν, t) = Σ_j L_j(ν, t) c_k(ν_j, t_j). Values at the nodes are turned to coefficients of polynomials, the modes; a
//! visibility has to meet the modes only, and their sums meet the many terms (see [`super::vector::Scrap`]). The polynomials
//! are T_a(ν) T_b(t) with a < n_b, n_0 ≥ n_1 ≥ … (a lower set, on which interpolation through as many nodes of a grid is
//! always possible), chosen so that most error goes for least cost: by the Chebyshev coefficients of products of station
//! pairs drawn from the visibilities, and then measured again.

use super::smooth::chebyshev_points;
use super::survey::SampleRow;
use super::vector::{Cell, GridReal, LANES, real};
use crate::beam::StationBeams;
use crate::response::rows::wavelengths_per_metre;
use nalgebra::DMatrix;
use num_complex::Complex64;
use rayon::prelude::*;
use std::f64::consts::{PI, TAU};
use std::ops::Range;

/// Points in frequency and in time at which products are looked at.
const LOOKS: (usize, usize) = (9, 7);
/// Numbers of rows of a pair in one span that are tried.
const ROWS: [usize; 10] = [1, 2, 3, 4, 6, 8, 12, 16, 24, 32];
/// Polynomials in time at most.
pub(super) const MOST_DEGREES: usize = 6;
/// Interpolation through nodes errs more than the coefficients left out say.
const ALIASED: f64 = 1.5;
/// Earth's rotation, radians per day of UTC: 2π · 1.00273781191 (Capitaine et al. 2003, the rate of the Earth rotation angle).
pub(super) const EARTH: f64 = TAU * 1.002_737_811_911_354_5;

/// A run of channels, and its nodes in frequency and time.
#[derive(Debug, Clone)]
pub(super) struct Band<T> {
    /// Channels, counted over the whole observation.
    pub channels: Range<usize>,
    /// Frequencies of the nodes, and wavelengths per metre there.
    pub hz: Vec<f64>,
    pub k: Vec<f64>,
    /// Places of the nodes in a span, −1 to 1.
    pub times: Vec<f64>,
    /// The nodes: index of the frequency, index of the time.
    pub nodes: Vec<(usize, usize)>,
    /// Wavelengths per metre in the middle, and smallest and largest of the channels.
    pub middle_k: f64,
    pub ends_k: (f64, f64),
    /// `[channel][power of time]`: what T_b(t) adds to each node's weight.
    pub weights: Vec<Vec<f64>>,
    /// `[mode][node]`: the coefficients of the polynomials T_a T_b, in an order of falling importance, of a function known at
    /// the nodes.
    pub of_nodes: Vec<T>,
    /// `[channel][power of time]`: T_a of each mode that has this power, twice over; empty where there are more modes than
    /// a cell has lanes.
    pub profiles: Vec<Cell<T>>,
}

/// Stretches of time, each from one time of the observation to another.
#[derive(Debug, Clone, Default)]
pub(super) struct Lattice {
    /// Ascending.
    spans: Vec<Span>,
}

/// A stretch of time.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Span {
    pub middle: f64,
    pub half: f64,
}

impl Span {
    /// Where a time lies in it, −1 to 1.
    pub(super) fn place(&self, mjd: f64) -> f64 {
        if self.half == 0.0 { 0.0 } else { ((mjd - self.middle) / self.half).clamp(-1.0, 1.0) }
    }
}

impl Lattice {
    /// Parts `times` (MJD, ascending) into spans no longer than `length` days, in which parallactic angles change by no more
    /// than `most_turn` radians.
    pub(super) fn new(times: &[f64], length: f64, most_turn: f64, beams: &StationBeams) -> Lattice {
        let mut parts: Vec<&[f64]> = Vec::new();
        let mut left = times;
        while let Some(&start) = left.first() {
            // times are told to some microseconds
            let count = left.partition_point(|&mjd| mjd <= start + length + 1e-9).max(1);
            let (part, rest) = left.split_at(count);
            parts.push(part);
            left = rest;
        }
        let divided = |part: &[f64]| -> Vec<Span> {
            let mut spans = Vec::new();
            let mut waiting = vec![part];
            while let Some(part) = waiting.pop() {
                let (first, last) = (part[0], part[part.len() - 1]);
                if part.len() > 1 && turn(beams, first, last) > most_turn {
                    let (before, after) = part.split_at(part.len() / 2);
                    waiting.extend([after, before]);
                } else {
                    spans.push(Span { middle: 0.5 * (first + last), half: 0.5 * (last - first) });
                }
            }
            spans
        };
        Lattice { spans: parts.into_par_iter().map(divided).flatten().collect() }
    }

    /// The span that a time belongs to; one of its own where it lies in none.
    pub(super) fn span(&self, mjd: f64) -> Span {
        let next = self.spans.partition_point(|span| span.middle - span.half <= mjd);
        match next.checked_sub(1).map(|index| self.spans[index]) {
            Some(span) if mjd <= span.middle + span.half + 1e-9 && span.half > 0.0 => span,
            _ => Span { middle: mjd, half: 0.0 },
        }
    }
}

/// By how much parallactic angles of stations that turn change between two times, radians, at most.
pub(super) fn turn(beams: &StationBeams, from: f64, to: f64) -> f64 {
    let (a, b) = (beams.angles_at(from), beams.angles_at(to));
    (0..a.len())
        .filter(|&station| beams.turns(station))
        .map(|station| {
            let turned = (b[station] - a[station]).rem_euclid(TAU);
            turned.min(TAU - turned)
        })
        .fold(0.0, f64::max)
}

/// What a partition's bands must be good for.
#[derive(Clone, Copy)]
pub(super) struct Demand<'a> {
    pub beams: &'a StationBeams,
    /// Rows of the partition.
    pub rows: &'a [SampleRow],
    pub feeds: &'a [usize],
    /// Directions, l and m about the aim, where coefficients are taken.
    pub lm: &'a [[f64; 2]],
    /// Bend at these directions; empty where w does not matter.
    pub bends: &'a [f64],
    /// Declination of the image centre, radians.
    pub declination: f64,
    /// Middles of spans to look at, MJD.
    pub probes: &'a [f64],
    /// Time between rows of a pair, days; 0 where there is but one.
    pub interval: f64,
    /// Error allowed of products, root mean square.
    pub error: f64,
    /// |g_p|²|g_q|² in place of g_p* g_q.
    pub power: bool,
    /// Bands at least.
    pub fewest: usize,
    /// Nodes at most.
    pub lanes: usize,
}

/// What makes a choice cheap or dear.
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

/// Visibilities that share nodes: channels, rows, how much their frequencies spread relative to the middle, radians that
/// the Earth turns from row to row, nodes.
#[derive(Debug, Clone, Copy)]
pub(super) struct Extent {
    pub channels: f64,
    pub rows: f64,
    pub width: f64,
    pub turn: f64,
    pub nodes: usize,
}

impl Costs {
    /// Rough cost of one visibility in nanoseconds (only ratios matter).
    pub(super) fn of(&self, run: Extent) -> f64 {
        let support = self.support as f64;
        let (along, across) = (self.distance * run.width, self.distance * run.turn * (run.rows - 1.0));
        let cells = support * support + 1.3 * support * (along + across) + along * across;
        let (nodes, blocks) = (run.nodes as f64, self.blocks as f64);
        let expanding = 1.2 * cells * (0.2 * nodes * blocks + 1.4 * blocks + 3.0);
        let coefficients = nodes * self.directions as f64 * (0.5 + 0.5 * blocks);
        50.0 + 0.6 * support * support + (expanding + coefficients) / (run.channels * run.rows)
    }
}

/// Bands, and how many rows share a span.
#[derive(Debug, Clone)]
struct Way {
    bands: usize,
    rows: usize,
    /// Polynomials in frequency for each power of time.
    shape: Vec<usize>,
    cost: f64,
}

/// The cheapest bands that keep the demand, and the rows of a span; with `rows` given, for that many.
pub(super) fn choose<T: GridReal>(
    demand: &Demand,
    hz: &[f64],
    first: usize,
    costs: Costs,
    rows: Option<usize>,
) -> (Vec<Band<T>>, usize) {
    let mut error = demand.error;
    let most = rows.unwrap_or(ROWS[ROWS.len() - 1]);
    let spectrum = demand.spectrum(hz, most);
    for _ in 0..8 {
        let Some(way) = cheapest(demand, hz, costs, rows, error, &spectrum) else { break };
        let bands: Vec<Band<T>> = parts(hz.len(), way.bands)
            .into_iter()
            .map(|part| Band::new(&hz[part.clone()], first + part.start, &way.shape))
            .collect();
        // the first band is the widest for its frequency
        if demand.kept(&hz[..bands[0].channels.len()], &bands[0], way.rows) {
            return (bands, way.rows);
        }
        error *= 0.5;
    }
    // every channel and every time by itself is exact
    let rows = rows.unwrap_or(1);
    let shape = if rows == 1 { vec![1] } else { vec![1; MOST_DEGREES] };
    ((0..hz.len()).map(|c| Band::new(&hz[c..=c], first + c, &shape)).collect(), rows)
}

fn parts(channels: usize, bands: usize) -> Vec<Range<usize>> {
    (0..bands).map(|b| b * channels / bands..(b + 1) * channels / bands).collect()
}

/// Mean squares of the Chebyshev coefficients of products over a whole band and the longest span: `[frequency][time]`.
struct Spectrum {
    squares: Vec<Vec<f64>>,
    rows: usize,
}

impl Spectrum {
    /// Predicted error of a shape for 1/bands of the band and some rows: coefficients shrink with the powers of both.
    fn error(&self, shape: &[usize], bands: usize, rows: usize, channels: usize) -> f64 {
        let narrower = (bands as f64).recip();
        let shorter = (rows - 1) as f64 / (self.rows - 1).max(1) as f64;
        let widest = channels.div_ceil(bands);
        let mut sum = 0.0;
        for (a, line) in self.squares.iter().enumerate() {
            for (b, square) in line.iter().enumerate() {
                // as many polynomials as channels leave nothing out
                let held = shape.get(b).is_some_and(|&n| a < n || n >= widest)
                    || (shape.len() >= rows && {
                        // nor do as many powers of time as rows
                        let n = shape[rows - 1];
                        a < n || n >= widest
                    });
                if !held {
                    sum += square * narrower.powi(2 * a as i32) * shorter.powi(2 * b as i32);
                }
            }
        }
        ALIASED * sum.sqrt()
    }
}

fn cheapest(
    demand: &Demand,
    hz: &[f64],
    costs: Costs,
    rows: Option<usize>,
    error: f64,
    spectrum: &Spectrum,
) -> Option<Way> {
    let (low, high) = range(hz);
    let width = (high - low) / (0.5 * (high + low));
    let every: Vec<usize> = match rows {
        Some(rows) => vec![rows],
        None if demand.interval == 0.0 => vec![1],
        None => ROWS.to_vec(),
    };
    let mut best: Option<Way> = None;
    let mut bands = demand.fewest.clamp(1, hz.len());
    loop {
        let widest = hz.len().div_ceil(bands);
        for &rows in &every {
            for shape in shapes(demand.lanes, widest, if rows == 1 { 1 } else { MOST_DEGREES }) {
                if spectrum.error(&shape, bands, rows, hz.len()) > error {
                    continue;
                }
                let cost = costs.of(Extent {
                    channels: hz.len() as f64 / bands as f64,
                    rows: rows as f64,
                    width: width / bands as f64,
                    turn: EARTH * demand.interval,
                    nodes: shape.iter().sum(),
                });
                if best.as_ref().is_none_or(|best| cost < best.cost) {
                    best = Some(Way { bands, rows, shape, cost });
                }
            }
        }
        if bands == hz.len() {
            return best;
        }
        bands = (2 * bands).min(hz.len());
    }
}

/// All n_0 ≥ n_1 ≥ … of sum at most `lanes`, n_0 at most `widest`, at most `degrees` of them.
fn shapes(lanes: usize, widest: usize, degrees: usize) -> Vec<Vec<usize>> {
    fn grow(shape: &mut Vec<usize>, left: usize, most: usize, degrees: usize, all: &mut Vec<Vec<usize>>) {
        if !shape.is_empty() {
            all.push(shape.clone());
        }
        if shape.len() == degrees {
            return;
        }
        for next in 1..=most.min(left) {
            shape.push(next);
            grow(shape, left - next, next, degrees, all);
            shape.pop();
        }
    }
    let mut all = Vec::new();
    grow(&mut Vec::new(), lanes, widest, degrees, &mut all);
    all
}

fn range(hz: &[f64]) -> (f64, f64) {
    hz.iter().fold((f64::INFINITY, 0.0f64), |(low, high), &f| (low.min(f), high.max(f)))
}

/// Places in −1 to 1 through which polynomials of degree below `count` are interpolated; the first few of them serve fewer
/// polynomials well, too (each next one lies where the product of distances to those before is largest: Leja 1957).
fn places(count: usize) -> Vec<f64> {
    if count == 1 {
        return vec![0.0];
    }
    let mut left = chebyshev_points(-1.0, 1.0, count);
    let mut ordered = Vec::with_capacity(count);
    while !left.is_empty() {
        let reach = |x: f64| -> f64 { ordered.iter().map(|&o: &f64| (x - o).abs()).product::<f64>() };
        let start = |x: f64| if ordered.is_empty() && count > 2 { 2.0 - x.abs() } else { reach(x) };
        let next = (0..left.len()).max_by(|&a, &b| start(left[a]).total_cmp(&start(left[b])));
        ordered.push(left.swap_remove(next.unwrap_or(0)));
    }
    ordered
}

/// T_0 … T_{count−1} at x.
pub(super) fn chebyshev(x: f64, count: usize) -> Vec<f64> {
    let mut all = vec![1.0, x];
    for n in 2..count {
        all.push(2.0 * x * all[n - 1] - all[n - 2]);
    }
    all.truncate(count);
    all
}

impl<T: GridReal> Band<T> {
    fn new(hz: &[f64], first: usize, shape: &[usize]) -> Band<T> {
        let (low, high) = range(hz);
        let (middle, half) = (0.5 * (low + high), 0.5 * (high - low));
        let shape: Vec<usize> = shape.iter().map(|&n| n.min(hz.len())).collect();
        // as many nodes as channels: the channels themselves
        let exact = shape[0] == hz.len();
        let x_of = |hz: f64| if half == 0.0 { 0.0 } else { (hz - middle) / half };
        let xs: Vec<f64> = if exact { hz.iter().map(|&hz| x_of(hz)).collect() } else { places(shape[0]) };
        let times = places(shape.len());
        let nodes: Vec<(usize, usize)> =
            shape.iter().enumerate().flat_map(|(b, &n)| (0..n).map(move |a| (a, b))).collect();
        let count = nodes.len();
        // the polynomials at the nodes; its inverse makes polynomials of node values
        let matrix = DMatrix::from_fn(count, count, |row, column| {
            let ((a, b), (i, j)) = (nodes[column], nodes[row]);
            chebyshev(xs[i], a + 1)[a] * chebyshev(times[j], b + 1)[b]
        });
        let inverse = matrix.try_inverse().unwrap_or_else(|| DMatrix::identity(count, count));
        let degrees = shape.len();
        let mut weights = vec![vec![0.0; count]; hz.len() * degrees];
        for (channel, &hz) in hz.iter().enumerate() {
            let polynomials = chebyshev(x_of(hz), shape[0]);
            for (row, &(a, b)) in nodes.iter().enumerate() {
                for (node, weight) in weights[channel * degrees + b].iter_mut().enumerate() {
                    *weight += polynomials[a] * inverse[(row, node)];
                }
            }
        }
        // modes: the polynomials, those first that matter most as a rule
        let mut order: Vec<usize> = (0..count).collect();
        let degree = |&(a, b): &(usize, usize)| a as f64 / shape[0] as f64 + b as f64 / degrees as f64;
        order.sort_by(|&i, &j| degree(&nodes[i]).total_cmp(&degree(&nodes[j])));
        let of_nodes = order
            .iter()
            .flat_map(|&row| (0..count).map(move |node| (row, node)))
            .map(|at| real(inverse[at]))
            .collect();
        let mut profiles = Vec::new();
        if count <= LANES {
            profiles = vec![Cell::zero(); hz.len() * degrees];
            for (channel, &hz) in hz.iter().enumerate() {
                let polynomials = chebyshev(x_of(hz), shape[0]);
                for (mode, &row) in order.iter().enumerate() {
                    let (a, b) = nodes[row];
                    let cell = &mut profiles[channel * degrees + b];
                    (cell[mode], cell[mode + LANES]) = (real(polynomials[a]), real(polynomials[a]));
                }
            }
        }
        let nodes_hz: Vec<f64> = if exact { hz.to_vec() } else { xs.iter().map(|x| middle + half * x).collect() };
        Band {
            channels: first..first + hz.len(),
            k: nodes_hz.iter().map(|&hz| wavelengths_per_metre(hz)).collect(),
            hz: nodes_hz,
            times,
            nodes,
            middle_k: wavelengths_per_metre(middle),
            ends_k: (wavelengths_per_metre(low), wavelengths_per_metre(high)),
            weights,
            of_nodes,
            profiles,
        }
    }

    /// Powers of time.
    pub(super) fn degrees(&self) -> usize {
        self.times.len()
    }
}

impl Demand<'_> {
    /// Products of the rows in all directions at frequency × time points: `[row, direction][frequency][time]`.
    fn products(&self, hz: &[f64], times: &[f64], half_span: f64) -> Vec<Complex64> {
        let looked = |mjd: f64| self.beams.angles_at(mjd);
        let angles: Vec<Vec<Vec<f64>>> = self
            .probes
            .par_iter()
            .map(|&middle| times.iter().map(|&x| looked(middle + half_span * x)).collect())
            .collect();
        let per_row = self.lm.len() * hz.len() * times.len();
        let mut out = vec![Complex64::ZERO; self.rows.len() * per_row];
        out.par_chunks_mut(per_row.max(1)).zip(self.rows).enumerate().for_each(|(index, (out, row))| {
            let angles = &angles[index % angles.len().max(1)];
            let feed = self.feeds[index % self.feeds.len()];
            let mut voltages = [vec![Complex64::ZERO; self.lm.len()], vec![Complex64::ZERO; self.lm.len()]];
            for (f, &at_hz) in hz.iter().enumerate() {
                let k = wavelengths_per_metre(at_hz);
                for (t, &x) in times.iter().enumerate() {
                    for (end, station) in [row.pair.0, row.pair.1].into_iter().enumerate() {
                        let angle = angles[t][station as usize];
                        self.beams.voltages(station as usize, angle, at_hz, feed, self.lm, &mut voltages[end]);
                    }
                    let w = row.w_after(EARTH * half_span * x, self.declination);
                    for direction in 0..self.lm.len() {
                        let (p, q) = (voltages[0][direction], voltages[1][direction]);
                        let value = if self.power {
                            Complex64::new(p.norm_sqr() * q.norm_sqr(), 0.0)
                        } else {
                            let product = p.conj() * q;
                            match self.bends.get(direction) {
                                Some(bend) => product * Complex64::cis(TAU * w * k * bend),
                                None => product,
                            }
                        };
                        out[(direction * hz.len() + f) * times.len() + t] = value;
                    }
                }
            }
        });
        out
    }

    fn half_span(&self, rows: usize) -> f64 {
        0.5 * (rows - 1) as f64 * self.interval
    }

    fn spectrum(&self, hz: &[f64], rows: usize) -> Spectrum {
        let (low, high) = range(hz);
        let zeros = |n: usize| -> Vec<f64> { (0..n).map(|i| (PI * (i as f64 + 0.5) / n as f64).cos()).collect() };
        let (xs, ts) = (zeros(LOOKS.0), if rows == 1 || self.interval == 0.0 { vec![0.0] } else { zeros(LOOKS.1) });
        let at: Vec<f64> = xs.iter().map(|x| 0.5 * (low + high) + 0.5 * (high - low) * x).collect();
        let products = self.products(&at, &ts, self.half_span(rows));
        // coefficient n of a function known at the zeros: 2/N Σ f(x_i) T_n(x_i), half of it for n = 0
        let transform = |at: &[f64]| -> Vec<Vec<f64>> {
            (0..at.len())
                .map(|n| {
                    let scale = if n == 0 { 1.0 } else { 2.0 } / at.len() as f64;
                    at.iter().map(|&x| scale * chebyshev(x, n + 1)[n]).collect()
                })
                .collect()
        };
        let (of_x, of_t) = (transform(&xs), transform(&ts));
        let count = (products.len() / (xs.len() * ts.len())).max(1);
        let squares = products
            .par_chunks(xs.len() * ts.len())
            .fold(
                || vec![vec![0.0; ts.len()]; xs.len()],
                |mut sums, values| {
                    for (a, of_x) in of_x.iter().enumerate() {
                        let line: Vec<Complex64> = (0..ts.len())
                            .map(|t| of_x.iter().enumerate().map(|(f, &c)| values[f * ts.len() + t] * c).sum())
                            .collect();
                        for (b, of_t) in of_t.iter().enumerate() {
                            let c: Complex64 = line.iter().zip(of_t).map(|(z, &c)| z * c).sum();
                            sums[a][b] += c.norm_sqr() / count as f64;
                        }
                    }
                    sums
                },
            )
            .reduce(
                || vec![vec![0.0; ts.len()]; xs.len()],
                |mut a, b| {
                    a.iter_mut().flatten().zip(b.iter().flatten()).for_each(|(a, b)| *a += b);
                    a
                },
            );
        Spectrum { squares, rows }
    }

    /// Whether a band's interpolation keeps the error: measured between its nodes.
    fn kept<T: GridReal>(&self, hz: &[f64], band: &Band<T>, rows: usize) -> bool {
        let half_span = self.half_span(rows);
        // rows lie evenly from end to end
        let ts: Vec<f64> = match rows {
            1 => vec![0.0],
            rows => (0..rows).step_by(rows.div_ceil(5)).map(|i| 2.0 * i as f64 / (rows - 1) as f64 - 1.0).collect(),
        };
        // some channels: the weights are theirs
        let channels: Vec<usize> = (0..hz.len()).step_by(hz.len().div_ceil(6)).chain([hz.len() - 1]).collect();
        let probes: Vec<f64> = channels.iter().map(|&c| hz[c]).collect();
        let truth = self.products(&probes, &ts, half_span);
        let known = self.products(&band.hz, &band.times, half_span);
        let (per_truth, per_known) = (probes.len() * ts.len(), band.hz.len() * band.times.len());
        let mut sum = 0.0;
        for (truth, known) in truth.chunks_exact(per_truth).zip(known.chunks_exact(per_known)) {
            for (probe, &channel) in channels.iter().enumerate() {
                for (t, &x) in ts.iter().enumerate() {
                    let powers = chebyshev(x, band.degrees());
                    let mut got = Complex64::ZERO;
                    for (node, &(a, b)) in band.nodes.iter().enumerate() {
                        let weight: f64 = powers
                            .iter()
                            .zip(&band.weights[channel * band.degrees()..])
                            .map(|(power, weights)| power * weights[node])
                            .sum();
                        got += known[a * band.times.len() + b] * weight;
                    }
                    sum += (got - truth[probe * ts.len() + t]).norm_sqr();
                }
            }
        }
        let mean = sum / truth.len().max(1) as f64;
        mean.sqrt() <= self.error
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::response::gridded::tests::scene;

    /// What the Chebyshev polynomials of a shape span is reproduced at every channel and time. Bound: rounding, times a
    /// condition number below 1e4 of the small systems.
    #[test]
    fn every_shape_reproduces_its_polynomials() {
        let hz: Vec<f64> = (0..12).map(|c| 1.3e9 + 8e6 * f64::from(c)).collect();
        let (middle, half) = (0.5 * (hz[0] + hz[11]), 0.5 * (hz[11] - hz[0]));
        let all = shapes(LANES, hz.len(), MOST_DEGREES);
        assert!(all.len() > 60, "{} shapes", all.len());
        for shape in all {
            let band = Band::<f64>::new(&hz, 0, &shape);
            assert_eq!(band.nodes.len(), shape.iter().sum::<usize>());
            for (b, &n) in shape.iter().enumerate() {
                for a in 0..n {
                    let value =
                        |hz: f64, x: f64| chebyshev((hz - middle) / half, a + 1)[a] * chebyshev(x, b + 1)[b];
                    for (channel, &at) in hz.iter().enumerate() {
                        for x in [-1.0, -0.3, 0.77] {
                            let powers = chebyshev(x, band.degrees());
                            let mut got = 0.0;
                            for (node, &(i, j)) in band.nodes.iter().enumerate() {
                                let weights = &band.weights[channel * band.degrees()..];
                                let weight: f64 = powers.iter().zip(weights).map(|(p, w)| p * w[node]).sum();
                                got += weight * value(band.hz[i], band.times[j]);
                            }
                            let error = (got - value(at, x)).abs();
                            assert!(error <= 1e-11, "{shape:?}, T{a} T{b}: {error:e}");
                            // and by way of the modes
                            let count = band.nodes.len();
                            let through = |mode: usize| -> f64 {
                                let nodes = band.nodes.iter().zip(&band.of_nodes[mode * count..]);
                                let of_mode: f64 =
                                    nodes.map(|(&(i, j), c)| c * value(band.hz[i], band.times[j])).sum();
                                let profiles = &band.profiles[channel * band.degrees()..];
                                let profile: f64 = powers.iter().zip(profiles).map(|(p, c)| p * c[mode]).sum();
                                of_mode * profile
                            };
                            let error = ((0..count).map(through).sum::<f64>() - value(at, x)).abs();
                            assert!(error <= 1e-11, "{shape:?}, T{a} T{b}, modes: {error:e}");
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn spans_hold_all_times_and_end_at_them() {
        let (_, _, beams) = scene(1);
        let minute = 1.0 / 1440.0;
        // two scans with a gap between
        let times: Vec<f64> =
            (0..30).map(|i| 59_000.3 + minute * (f64::from(i) + if i < 13 { 0.0 } else { 7.4 })).collect();
        let lattice = Lattice::new(&times, 3.0 * minute, 1.0, &beams);
        for &mjd in &times {
            let span = lattice.span(mjd);
            assert!(2.0 * span.half <= 3.0 * minute + 2e-9);
            assert!((-1.0..=1.0).contains(&span.place(mjd)) && (mjd - span.middle).abs() <= span.half + 1e-9);
        }
        assert_eq!(lattice.span(times[12] + 3.0 * minute).half, 0.0, "a time in the gap stands alone");
        assert_eq!(lattice.span(50_000.0), Span { middle: 50_000.0, half: 0.0 });
        // where angles turn too fast for the whole span it is parted
        let whole = turn(&beams, times[0], times[3]);
        let parted = Lattice::new(&times[..4], 3.0 * minute, 0.6 * whole, &beams);
        assert_eq!(parted.spans.len(), 2);
    }

    /// w that the Earth's turning makes of a row's u, v, w against the array's own, half an hour later. Bound: the pole of
    /// date lies within 0.15° of the ICRS pole in this century, 2.6e-3 of the change, which is at most |b| times the angle.
    #[test]
    fn w_follows_the_turning_earth() {
        let (observation, block, _) = scene(5);
        let first = (block.first[0], block.second[0]);
        let rows: Vec<usize> =
            (0..block.rows()).filter(|&row| (block.first[row], block.second[row]) == first).collect();
        for pair in rows.windows(2) {
            let [a, b] = [pair[0], pair[1]];
            let sample = SampleRow { pair: first, uvw_m: block.uvw_m[a] };
            let angle = EARTH * (block.mjd_utc[b] - block.mjd_utc[a]);
            let got = sample.w_after(angle, observation.phase_centre.dec);
            let [u, v, w] = block.uvw_m[a];
            let bound = 2.6e-3 * (u * u + v * v + w * w).sqrt() * angle;
            let error = (got - block.uvw_m[b][2]).abs();
            assert!(error <= bound, "row {b}: {error:e} m, bound {bound:e}");
        }
        assert!(rows.len() > 2);
    }
}
