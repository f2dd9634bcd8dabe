//! Terms: a few screens that stand for all kernels of a partition, with a measured error.
//!
//! Every member of a partition (a station pair at a time, a channel, a feed and an offset in w) has the screen
//! M(x) = A*(x) exp(2πi δw κ(x)). *Empirical interpolation* (Barrault, Maday, Nguyen & Patera 2004), here as Gaussian
//! elimination with complete pivoting on the matrix members × directions, real and imaginary parts each a row, picks P
//! directions x_j and real screens θ_j with
//!
//!   M(x) ≈ Σ_j M(x_j) θ_j(x),   θ_j(x_i) = δ_ij,
//!
//! for all members at once. A principal component analysis of the members' expansions then finds the K < P combinations
//! φ_k of the θ_j that hold all but the error allowed:
//!
//!   M(x) ≈ Σ_k c_k φ_k(x),   c_k = Σ_j mix_kj M(x_j).
//!
//! The M(x_j) are products of station voltages in P directions: kernels of different baselines, times and channels need no
//! table of their own and no steps in parallactic angle. The screens are real, so that the members of negative w, and the
//! opposite baselines, have the conjugate coefficients. Members and directions that were never seen are drawn at random,
//! measured, and taken into the training if they exceed the bound.

use super::family::{Family, Member, PatchPoint};
use super::smooth::{chebyshev_points, interpolation};
use nalgebra::{DMatrix, SymmetricEigen};
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
/// How much finer than the bound the elimination goes before components are dropped.
const FINER: f64 = 0.4;
/// Components per direction, roughly: for planning.
const COMPONENTS: f64 = 0.73;
/// Directions that an estimate counts at most.
pub(crate) const MOST_ESTIMATED: usize = 150;
/// More terms than this never pay.
pub(crate) const MOST_TERMS: usize = 400;

/// The screens of one partition.
#[derive(Debug, Clone)]
pub(crate) struct Terms {
    /// The P directions.
    pub points: Vec<PatchPoint>,
    /// How values in these directions make coefficients, `[term][direction]`.
    pub mix: Array2<f64>,
    /// The K screens at the Chebyshev nodes, `[term][y][x]`.
    pub screens: Vec<Array2<f64>>,
    /// Chebyshev nodes, offsets in pixels from the patch's centre.
    pub nodes_x: Vec<f64>,
    /// See `nodes_x`.
    pub nodes_y: Vec<f64>,
    /// Largest difference met on fresh members.
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
        let mut goal = 0.7 * bound;
        let mut reached = f64::INFINITY;
        let mut measured = members.len();
        for round in 0..ROUNDS {
            if round > 0 && round % 2 == 0 {
                // what more members did not mend, more nodes may
                nodes = (nodes.0 + nodes.0.div_ceil(4), nodes.1 + nodes.1.div_ceil(4));
                (nodes_x, nodes_y) = node_positions(family, nodes);
                points = node_points(family, &nodes_x, &nodes_y);
            }
            let screens = family.screens(&members, &points);
            let mut rows = Rows::of(&screens, points.len());
            // finer than asked: what the components leave out then is most of what may be left out
            let cross = eliminate(&mut rows, if family.power { goal } else { FINER * goal }, MOST_TERMS);
            if cross.measure() > bound {
                return Err(TooManyTerms { reached: cross.measure() });
            }
            let mut terms = Terms::from_cross(&screens, &points, &cross, nodes_x.clone(), nodes_y.clone());
            if !family.power {
                let left = (goal * goal - cross.measure().powi(2)).max(0.0).sqrt();
                terms.keep_components(&screens, &cross, left);
            }
            let fresh = family.random(CHECK_MEMBERS, &mut rng);
            measured += fresh.len();
            let (mean, worst, offenders) = terms.check(family, &fresh, bound, &mut rng);
            reached = mean.max(worst / WORST_MEMBER);
            if reached <= bound {
                return Ok(Terms { largest: worst, measured_members: measured, ..terms });
            }
            members.extend(offenders);
            goal *= 0.7;
        }
        Err(TooManyTerms { reached })
    }

    /// The θ_j of an elimination: a term each.
    fn from_cross(
        screens: &[Complex64],
        points: &[PatchPoint],
        cross: &Cross,
        nodes_x: Vec<f64>,
        nodes_y: Vec<f64>,
    ) -> Terms {
        let (count, n) = (cross.rows.len(), points.len());
        let entry = |row: usize, column: usize| {
            let value = screens[row / 2 * n + column];
            if row.is_multiple_of(2) { value.re } else { value.im }
        };
        let square = DMatrix::from_fn(count, count, |i, j| entry(cross.rows[i], cross.columns[j]));
        let right = DMatrix::from_fn(count, n, |i, j| entry(cross.rows[i], j));
        let solved = square.full_piv_lu().solve(&right).unwrap_or_else(|| DMatrix::zeros(count, n));
        let shape = (nodes_y.len(), nodes_x.len());
        let screens =
            (0..count).map(|j| Array2::from_shape_fn(shape, |(y, x)| solved[(j, y * shape.1 + x)])).collect();
        let picked = cross.columns.iter().map(|&column| points[column]).collect();
        Terms {
            points: picked,
            mix: Array2::eye(count),
            screens,
            nodes_x,
            nodes_y,
            largest: 0.0,
            measured_members: 0,
        }
    }

    /// Replaces the screens by the fewest combinations that leave at most `error` of the members' expansions out, root mean
    /// square over field and members, and [`WORST_MEMBER`] times it of each.
    fn keep_components(&mut self, screens: &[Complex64], cross: &Cross, error: f64) {
        let (count, n) = (self.screens.len(), self.nodes_x.len() * self.nodes_y.len());
        if count == 0 {
            return;
        }
        let weights = areas(&self.nodes_x, &self.nodes_y);
        let theta = DMatrix::from_fn(count, n, |j, at| self.screens[j].as_slice().map_or(0.0, |s| s[at]));
        let weighted = DMatrix::from_fn(n, count, |at, j| theta[(j, at)] * weights[at]);
        // ⟨f, g⟩ over the field of f = Σ a_j θ_j is aᵀ G b with G = L Lᵀ
        let gram = SymmetricEigen::new(&theta * weighted);
        let root = gram.eigenvalues.map(|v| v.max(1e-24).sqrt());
        let l = DMatrix::from_fn(count, count, |i, j| gram.eigenvectors[(i, j)] * root[j]);
        let members = screens.len() / n;
        let coefficients = DMatrix::from_fn(2 * members, count, |row, j| {
            let value = screens[row / 2 * n + cross.columns[j]];
            if row.is_multiple_of(2) { value.re } else { value.im }
        });
        let orthogonal = coefficients * &l;
        let covariance = orthogonal.tr_mul(&orthogonal) / members as f64;
        let components = SymmetricEigen::new(covariance);
        let mut by_size: Vec<usize> = (0..count).collect();
        by_size.sort_by(|&a, &b| components.eigenvalues[b].total_cmp(&components.eigenvalues[a]));
        let projected = &orthogonal * &components.eigenvectors;
        let mut left = vec![0.0; members];
        let mut kept = count;
        // from the smallest on, as long as what is left out stays small
        while kept > 1 {
            let next = by_size[kept - 1];
            for (member, left) in left.iter_mut().enumerate() {
                *left += projected[(2 * member, next)].powi(2) + projected[(2 * member + 1, next)].powi(2);
            }
            let mean = left.iter().sum::<f64>() / members as f64;
            let worst = left.iter().copied().fold(0.0, f64::max);
            if mean.sqrt() > error || worst.sqrt() > 0.75 * WORST_MEMBER * error {
                break;
            }
            kept -= 1;
        }
        let v = DMatrix::from_fn(count, kept, |j, k| components.eigenvectors[(j, by_size[k])]);
        let mix = &l * &v;
        self.mix = Array2::from_shape_fn((kept, count), |(k, j)| mix[(j, k)]);
        // φ = Vᵀ L⁻¹ θ
        let inverse = DMatrix::from_fn(count, count, |i, j| gram.eigenvectors[(j, i)] / root[i]);
        let phi = v.tr_mul(&inverse) * theta;
        let shape = (self.nodes_y.len(), self.nodes_x.len());
        self.screens =
            (0..kept).map(|k| Array2::from_shape_fn(shape, |(y, x)| phi[(k, y * shape.1 + x)])).collect();
    }

    /// The screens in any direction of the patch, `[term][target]`, through the Chebyshev nodes.
    fn screens_at(&self, targets: &[PatchPoint]) -> Vec<Vec<f64>> {
        let xs: Vec<f64> = targets.iter().map(|t| t.dx).collect();
        let ys: Vec<f64> = targets.iter().map(|t| t.dy).collect();
        let (px, py) = (interpolation(&self.nodes_x, &xs), interpolation(&self.nodes_y, &ys));
        let at = |screen: &Array2<f64>, target: usize| -> f64 {
            let mut sum = 0.0;
            for (y, row) in screen.outer_iter().enumerate() {
                let across: f64 = row.iter().enumerate().map(|(x, &value)| value * px[[target, x]]).sum();
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

    /// For each member the root mean square over `targets` of M − Σ c_k φ_k.
    pub(crate) fn differences(&self, family: &Family, members: &[Member], targets: &[PatchPoint]) -> Vec<f64> {
        let screens = self.screens_at(targets);
        members
            .par_iter()
            .map(|member| {
                let truth = family.screens(std::slice::from_ref(member), targets);
                let values = family.screens(std::slice::from_ref(member), &self.points);
                let coefficients: Vec<Complex64> = self
                    .mix
                    .outer_iter()
                    .map(|row| row.iter().zip(&values).map(|(&mix, value)| value * mix).sum())
                    .collect();
                let square = |t: usize| {
                    let sum: Complex64 = coefficients.iter().zip(&screens).map(|(c, s)| c * s[t]).sum();
                    (sum - truth[t]).norm_sqr()
                };
                ((0..targets.len()).map(square).sum::<f64>() / targets.len().max(1) as f64).sqrt()
            })
            .collect()
    }

    /// How many terms and directions a bound would take, from a small sample: for planning.
    pub(crate) fn estimate(family: &Family, nodes: (usize, usize), bound: f64) -> (usize, usize) {
        let mut rng = ChaCha8Rng::seed_from_u64(0x0e57);
        let (nodes_x, nodes_y) = node_positions(family, (nodes.0.min(18), nodes.1.min(18)));
        let points = node_points(family, &nodes_x, &nodes_y);
        let members = family.training(160, &mut rng);
        let mut rows = Rows::of(&family.screens(&members, &points), points.len());
        let directions = eliminate(&mut rows, 0.7 * FINER * bound, MOST_ESTIMATED).rows.len();
        (((COMPONENTS * directions as f64).ceil() as usize).max(1), directions)
    }
}

/// Areas that Chebyshev nodes stand for, of all 1: from middle to middle between neighbours.
fn areas(xs: &[f64], ys: &[f64]) -> Vec<f64> {
    let lengths = |at: &[f64]| -> Vec<f64> {
        let (first, last) = (at[0], at[at.len() - 1]);
        if first == last {
            return vec![1.0 / at.len() as f64; at.len()];
        }
        let before = |i: usize| if i == 0 { first } else { at[i - 1] };
        let after = |i: usize| if i + 1 == at.len() { last } else { at[i + 1] };
        (0..at.len()).map(|i| 0.5 * (after(i) - before(i)) / (last - first)).collect()
    };
    let (x, y) = (lengths(xs), lengths(ys));
    y.iter().flat_map(|&b| x.iter().map(move |&a| a * b)).collect()
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

/// Members as real rows: real part, imaginary part.
struct Rows {
    entries: Vec<f64>,
    columns: usize,
}

impl Rows {
    fn of(screens: &[Complex64], columns: usize) -> Rows {
        let mut entries = Vec::with_capacity(2 * screens.len());
        for screen in screens.chunks_exact(columns) {
            entries.extend(screen.iter().map(|z| z.re));
            entries.extend(screen.iter().map(|z| z.im));
        }
        Rows { entries, columns }
    }
}

/// Pivots of an elimination (rows count real and imaginary parts), and what is left of the members.
struct Cross {
    rows: Vec<usize>,
    columns: Vec<usize>,
    /// Largest root mean square of any member.
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

/// What is left of a row: where its largest entry stands, that entry's size, and the sum of all squares.
#[derive(Clone, Copy)]
struct Left {
    column: usize,
    peak: f64,
    total: f64,
}

impl Left {
    const NOTHING: Left = Left { column: 0, peak: 0.0, total: 0.0 };

    fn of(row: &[f64]) -> Left {
        let mut total = 0.0;
        let mut peak = 0.0f64;
        for &entry in row {
            total += entry * entry;
            peak = peak.max(entry.abs());
        }
        let column = row.iter().position(|entry| entry.abs() == peak).unwrap_or(0);
        Left { column, peak, total }
    }
}

/// Gaussian elimination with complete pivoting, in place, until what is left ([`Cross::measure`]) is at most `goal`.
fn eliminate(rows: &mut Rows, goal: f64, most: usize) -> Cross {
    let Rows { entries: matrix, columns } = rows;
    let columns = *columns;
    let mut left: Vec<Left> = matrix.par_chunks(columns).map(Left::of).collect();
    let mut cross = Cross { rows: Vec::new(), columns: Vec::new(), remainder: 0.0, mean: 0.0 };
    loop {
        let members = left.chunks_exact(2).map(|parts| parts[0].total + parts[1].total);
        let (sum, worst) = members.fold((0.0, 0.0f64), |(sum, worst), m| (sum + m, worst.max(m)));
        cross.remainder = (worst / columns.max(1) as f64).sqrt();
        cross.mean = (sum / (matrix.len() / 2).max(1) as f64).sqrt();
        let best = left.iter().enumerate().max_by(|a, b| a.1.peak.total_cmp(&b.1.peak));
        let Some((row, &Left { column, peak, .. })) = best else { return cross };
        if cross.measure() <= goal || cross.rows.len() == most || peak == 0.0 {
            return cross;
        }
        cross.rows.push(row);
        cross.columns.push(column);
        let pivot: Vec<f64> = matrix[row * columns..(row + 1) * columns].to_vec();
        let inverse = pivot[column].recip();
        left.par_iter_mut().zip(matrix.par_chunks_mut(columns)).with_min_len(64).for_each(|(left, entries)| {
            if left.peak == 0.0 {
                return;
            }
            let factor = entries[column] * inverse;
            entries.iter_mut().zip(&pivot).for_each(|(entry, &p)| *entry -= factor * p);
            entries[column] = 0.0;
            *left = Left::of(entries);
        });
        // what the pivot row holds now is rounding only
        matrix[row * columns..(row + 1) * columns].fill(0.0);
        left[row] = Left::NOTHING;
    }
}
