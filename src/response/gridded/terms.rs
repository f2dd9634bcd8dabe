//! Terms: a few screens that stand for all kernels of a partition, with a measured error.
//!
//! Every member of a partition (a station pair at a time, a channel, a feed and an offset in w) has the screen
//! M(x) = A*(x) exp(2πi δw κ(x)). *Empirical interpolation* (Barrault, Maday, Nguyen & Patera 2004), here as Gaussian
//! elimination with complete pivoting on the matrix members × directions, picks K directions x_j so that
//!
//!   M(x) ≈ Σ_j M(x_j) θ_j(x),   θ_j(x_i) = δ_ij,
//!
//! for all members at once. The coefficients M(x_j) are products of station voltages in K directions: kernels of
//! different baselines, times and channels need no table of their own and no steps in parallactic angle or frequency.
//! The elimination's remainder is the largest difference over all training members and directions; members and
//! directions it never saw are then drawn at random, measured, and taken into the training if they exceed the bound.

use super::family::{Family, Member, PatchPoint};
use super::smooth::{chebyshev_points, interpolation};
use nalgebra::DMatrix;
use ndarray::Array2;
use num_complex::Complex64;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rayon::prelude::*;

/// Training members times directions at most: bounds memory (16 bytes each) and build time.
const TRAINING_ENTRIES: usize = 1_500_000;
/// Training members at most.
const TRAINING_MEMBERS: usize = 1200;
/// Members and directions drawn afresh in each check.
const CHECK_MEMBERS: usize = 400;
const CHECK_POINTS: usize = 160;
/// Rounds of train-and-check at most.
const ROUNDS: usize = 7;
/// How far one member may pass the bound that all of them keep in the root mean square.
pub(crate) const WORST_MEMBER: f64 = 3.0;
/// More terms than this never pay.
pub(crate) const MOST_TERMS: usize = 320;

/// The screens of one partition.
#[derive(Debug, Clone)]
pub(crate) struct Terms {
    /// The K directions.
    pub points: Vec<PatchPoint>,
    /// θ_j at the Chebyshev nodes, `[term][y][x]`.
    pub screens: Vec<Array2<Complex64>>,
    /// Chebyshev nodes, offsets in pixels from the patch's centre.
    pub nodes_x: Vec<f64>,
    /// See `nodes_x`.
    pub nodes_y: Vec<f64>,
    /// Largest difference met: the elimination's remainder and the check on fresh members, whichever is larger.
    pub largest: f64,
    /// Members trained on and checked.
    pub measured_members: usize,
}

/// Why no terms could be found.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct TooManyTerms {
    /// Difference reached with the most terms allowed.
    pub reached: f64,
}

impl Terms {
    /// Terms whose difference from the members, root mean square over the field, stays below `bound` in the root mean
    /// square of all members and below [`WORST_MEMBER`] times it for every one.
    pub(crate) fn build(family: &Family, mut nodes: (usize, usize), bound: f64) -> Result<Terms, TooManyTerms> {
        let mut rng = ChaCha8Rng::seed_from_u64(0x7e12);
        let (mut nodes_x, mut nodes_y) = node_positions(family, nodes);
        let mut points = node_points(family, &nodes_x, &nodes_y);
        let most = (TRAINING_ENTRIES / points.len()).clamp(24, TRAINING_MEMBERS);
        let mut members = family.training(most, &mut rng);
        // a little below the bound, so that members in between stay below it
        let mut goal = 0.8 * bound;
        let mut reached = f64::INFINITY;
        let mut measured = members.len();
        for round in 0..ROUNDS {
            if round > 0 && round % 2 == 0 {
                // what more members did not mend, more nodes may
                nodes = (nodes.0 + nodes.0.div_ceil(4), nodes.1 + nodes.1.div_ceil(4));
                (nodes_x, nodes_y) = node_positions(family, nodes);
                points = node_points(family, &nodes_x, &nodes_y);
            }
            let mut matrix = family.screens(&members, &points);
            let cross = eliminate(&mut matrix, points.len(), goal, MOST_TERMS);
            if cross.measure() > bound {
                return Err(TooManyTerms { reached: cross.measure() });
            }
            let terms = Terms::from_cross(family, &members, &points, &cross, nodes_x.clone(), nodes_y.clone());
            let fresh = family.random(CHECK_MEMBERS, &mut rng);
            measured += fresh.len();
            let (mean, worst, offenders) = terms.check(family, &fresh, bound, &mut rng);
            reached = mean.max(worst / WORST_MEMBER);
            let largest = cross.remainder.max(worst);
            if reached <= bound {
                return Ok(Terms { largest, measured_members: measured, ..terms });
            }
            members.extend(offenders);
            goal *= 0.7;
        }
        Err(TooManyTerms { reached })
    }

    fn from_cross(
        family: &Family,
        members: &[Member],
        points: &[PatchPoint],
        cross: &Cross,
        nodes_x: Vec<f64>,
        nodes_y: Vec<f64>,
    ) -> Terms {
        let count = cross.rows.len();
        let chosen: Vec<Member> = cross.rows.iter().map(|&row| members[row].clone()).collect();
        let rows = family.screens(&chosen, points);
        let n = points.len();
        let square = DMatrix::from_fn(count, count, |i, j| rows[i * n + cross.columns[j]]);
        let right = DMatrix::from_row_slice(count, n, &rows);
        let solved = square.full_piv_lu().solve(&right).unwrap_or_else(|| DMatrix::zeros(count, n));
        let shape = (nodes_y.len(), nodes_x.len());
        let screens =
            (0..count).map(|j| Array2::from_shape_fn(shape, |(y, x)| solved[(j, y * shape.1 + x)])).collect();
        let picked = cross.columns.iter().map(|&column| points[column]).collect();
        Terms { points: picked, screens, nodes_x, nodes_y, largest: cross.remainder, measured_members: 0 }
    }

    /// θ_j in any direction of the patch, `[term][target]`, through the Chebyshev nodes.
    fn screens_at(&self, targets: &[PatchPoint]) -> Vec<Vec<Complex64>> {
        let xs: Vec<f64> = targets.iter().map(|t| t.dx).collect();
        let ys: Vec<f64> = targets.iter().map(|t| t.dy).collect();
        let (px, py) = (interpolation(&self.nodes_x, &xs), interpolation(&self.nodes_y, &ys));
        let at = |screen: &Array2<Complex64>, target: usize| -> Complex64 {
            let mut sum = Complex64::ZERO;
            for (y, row) in screen.outer_iter().enumerate() {
                let across: Complex64 = row.iter().enumerate().map(|(x, &value)| value * px[[target, x]]).sum();
                sum += across * py[[target, y]];
            }
            sum
        };
        self.screens.iter().map(|screen| (0..targets.len()).map(|t| at(screen, t)).collect()).collect()
    }

    /// Differences between `members` and their sums of terms at random directions: root mean square of all, the largest,
    /// and who exceeds `bound`.
    fn check(
        &self,
        family: &Family,
        members: &[Member],
        bound: f64,
        rng: &mut ChaCha8Rng,
    ) -> (f64, f64, Vec<Member>) {
        let targets = family.random_points(CHECK_POINTS, rng);
        let differences = self.differences(family, members, &targets);
        let worst = differences.iter().copied().fold(0.0, f64::max);
        let offenders =
            members.iter().zip(&differences).filter(|(_, d)| **d > bound).map(|(m, _)| m.clone()).collect();
        let square: f64 = differences.iter().map(|d| d * d).sum();
        let worst = if square.is_nan() { f64::NAN } else { worst };
        ((square / members.len().max(1) as f64).sqrt(), worst, offenders)
    }

    /// For each member the root mean square over `targets` of M − Σ M(x_j) θ_j.
    pub(crate) fn differences(&self, family: &Family, members: &[Member], targets: &[PatchPoint]) -> Vec<f64> {
        let screens = self.screens_at(targets);
        members
            .par_iter()
            .map(|member| {
                let truth = family.screens(std::slice::from_ref(member), targets);
                let coefficients = family.screens(std::slice::from_ref(member), &self.points);
                let square = |t: usize| {
                    let sum: Complex64 = coefficients.iter().zip(&screens).map(|(c, s)| c * s[t]).sum();
                    (sum - truth[t]).norm_sqr()
                };
                ((0..targets.len()).map(square).sum::<f64>() / targets.len().max(1) as f64).sqrt()
            })
            .collect()
    }

    /// How many terms a bound would take, from a small sample: for planning.
    pub(crate) fn estimate(family: &Family, nodes: (usize, usize), bound: f64) -> usize {
        let mut rng = ChaCha8Rng::seed_from_u64(0x0e57);
        let (nodes_x, nodes_y) = node_positions(family, (nodes.0.min(18), nodes.1.min(18)));
        let points = node_points(family, &nodes_x, &nodes_y);
        let members = family.training(160, &mut rng);
        let mut matrix = family.screens(&members, &points);
        eliminate(&mut matrix, points.len(), 0.8 * bound, 120).rows.len()
    }
}

fn node_positions(family: &Family, (x, y): (usize, usize)) -> (Vec<f64>, Vec<f64>) {
    let ((left, right), (low, high)) = family.span();
    (chebyshev_points(left, right, x), chebyshev_points(low, high, y))
}

fn node_points(family: &Family, xs: &[f64], ys: &[f64]) -> Vec<PatchPoint> {
    ys.iter().flat_map(|&y| xs.iter().map(move |&x| family.point(x, y))).collect()
}

/// How many Chebyshev nodes each axis needs, so that interpolation of any member errs by less than `bound`.
pub(crate) fn node_counts(family: &Family, bound: f64) -> (usize, usize) {
    const MOST: usize = 200;
    const LINES: usize = 9;
    let members = family.training(16, &mut ChaCha8Rng::seed_from_u64(0xc4eb));
    let ((left, right), (low, high)) = family.span();
    let needed = |from: f64, to: f64, along_x: bool| -> usize {
        if from == to {
            return 1;
        }
        let (first, last) = if along_x { (low, high) } else { (left, right) };
        let lines: Vec<f64> = (0..LINES).map(|i| first + (last - first) * i as f64 / (LINES - 1) as f64).collect();
        let place = |t: f64, line: f64| if along_x { family.point(t, line) } else { family.point(line, t) };
        let probes: Vec<f64> = (0..37).map(|i| from + (to - from) * (i as f64 + 0.37) / 37.6).collect();
        let mut count = 8;
        while count < MOST {
            let nodes = chebyshev_points(from, to, count);
            let matrix = interpolation(&nodes, &probes);
            let worst = lines
                .iter()
                .map(|&line| {
                    let at_nodes: Vec<PatchPoint> = nodes.iter().map(|&t| place(t, line)).collect();
                    let at_probes: Vec<PatchPoint> = probes.iter().map(|&t| place(t, line)).collect();
                    let known = family.screens(&members, &at_nodes);
                    let truth = family.screens(&members, &at_probes);
                    let mut worst: f64 = 0.0;
                    for m in 0..members.len() {
                        for p in 0..probes.len() {
                            let sum: Complex64 = (0..count).map(|j| known[m * count + j] * matrix[[p, j]]).sum();
                            worst = worst.max((sum - truth[m * probes.len() + p]).norm());
                        }
                    }
                    worst
                })
                .fold(0.0, f64::max);
            if worst <= bound {
                break;
            }
            count += (count / 6).max(2);
        }
        count
    };
    (needed(left, right, true), needed(low, high, false))
}

/// Pivots of an elimination, and what is left of the rows.
struct Cross {
    rows: Vec<usize>,
    columns: Vec<usize>,
    /// Largest root mean square of any row.
    remainder: f64,
    /// Root mean square of all.
    mean: f64,
}

impl Cross {
    /// What is compared with a bound.
    fn measure(&self) -> f64 {
        self.mean.max(self.remainder / WORST_MEMBER)
    }
}

/// What is left of a row: where its largest entry stands, that entry's square, and the sum of all squares.
#[derive(Clone, Copy)]
struct Left {
    column: usize,
    peak: f64,
    total: f64,
}

impl Left {
    const NOTHING: Left = Left { column: 0, peak: 0.0, total: 0.0 };

    #[inline(always)]
    fn take(&mut self, column: usize, entry: Complex64) {
        let size = entry.norm_sqr();
        self.total += size;
        if size > self.peak {
            self.peak = size;
            self.column = column;
        }
    }
}

/// Gaussian elimination with complete pivoting, in place, until what is left ([`Cross::measure`]) is at most `goal`.
fn eliminate(matrix: &mut [Complex64], columns: usize, goal: f64, most: usize) -> Cross {
    let look = |row: &[Complex64]| {
        let mut left = Left::NOTHING;
        row.iter().enumerate().for_each(|(column, &entry)| left.take(column, entry));
        left
    };
    let mut left: Vec<Left> = matrix.par_chunks(columns).map(look).collect();
    let mut cross = Cross { rows: Vec::new(), columns: Vec::new(), remainder: 0.0, mean: 0.0 };
    loop {
        let total = left.iter().map(|l| l.total).fold(0.0, f64::max);
        cross.remainder = (total / columns.max(1) as f64).sqrt();
        let sum: f64 = left.iter().map(|l| l.total).sum();
        cross.mean = (sum / matrix.len().max(1) as f64).sqrt();
        let best = left.iter().enumerate().max_by(|a, b| a.1.peak.total_cmp(&b.1.peak));
        let Some((row, &Left { column, .. })) = best else { return cross };
        if cross.measure() <= goal || cross.rows.len() == most {
            return cross;
        }
        cross.rows.push(row);
        cross.columns.push(column);
        let pivot: Vec<Complex64> = matrix[row * columns..(row + 1) * columns].to_vec();
        let inverse = pivot[column].inv();
        left.par_iter_mut().zip(matrix.par_chunks_mut(columns)).for_each(|(left, entries)| {
            let factor = entries[column] * inverse;
            *left = Left::NOTHING;
            for (at, (entry, &p)) in entries.iter_mut().zip(&pivot).enumerate() {
                *entry = if at == column { Complex64::ZERO } else { *entry - factor * p };
                left.take(at, *entry);
            }
        });
        // what the pivot row holds now is rounding only
        matrix[row * columns..(row + 1) * columns].fill(Complex64::ZERO);
        left[row] = Left::NOTHING;
    }
}
