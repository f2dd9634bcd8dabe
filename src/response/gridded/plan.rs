//! The plan of one pointing: how the tolerance is shared out, and how visibilities are parted so that work is least.
//!
//! A plan is made before any gridding, from the beams, the patch, a survey of the visibilities and the tolerance asked
//! for; the same inputs give the same plan.

use super::family::{Family, MEAN};
use super::patch::Patch;
use super::survey::Survey;
use super::terms::{MOST_TERMS, Terms, node_counts};
use super::transform::GridShape;
use super::vector::LANES;
use crate::beam::StationBeams;
use crate::response::ResponseError;
use crate::response::rows::{Intensity, Seen, wavelengths_per_metre};
use crate::response::window::{Choice, choose};
use serde::Serialize;
use std::collections::HashMap;
use std::f64::consts::TAU;
use std::ops::Range;
use std::time::Instant;

/// Shares of the tolerance. Errors of different origin add, so the shares sum to at most 1.
mod share {
    /// Aliasing of the window (largest over the field, both axes).
    pub const WINDOW: f64 = 0.25;
    /// Difference between any kernel and its terms, w included, relative to the products' root mean square.
    pub const TERMS: f64 = 0.5;
    /// Beam products beyond a patch's edge.
    pub const EDGE: f64 = 0.1;
    /// Curvature left out where w is ignored.
    pub const FLAT: f64 = 0.1;
}

/// Below this tolerance grids and tables are kept in double precision.
const SINGLE_PRECISION_DOWN_TO: f64 = 8e-6;
/// Smallest tolerance kept: f64 grids and the windows allow less, but fields of hundreds of terms do not.
pub const SMALLEST_TOLERANCE: f64 = 1e-7;
/// Largest tolerance that is still an image.
pub const LARGEST_TOLERANCE: f64 = 0.1;

/// Rough costs that choose between plans, in nanoseconds on a processor of the 2020s (measured once by
/// `cargo bench`; only their ratios matter).
mod cost {
    /// A visibility in one block of terms, fixed and per cell of the window.
    pub const SAMPLE: f64 = 25.0;
    pub const CELL: f64 = 0.55;
    /// A cell of a transform, per term, all passes included.
    pub const TRANSFORM: f64 = 12.0;
    /// A pixel multiplied by its screen, per term.
    pub const PIXEL: f64 = 15.0;
}

/// Visibilities that share terms: some station pairs, a run of channels.
#[derive(Debug, Clone)]
pub(crate) struct Partition {
    pub channels: Range<usize>,
    pub pairs: Vec<(u32, u32)>,
    /// Terms of the kernels.
    pub kernel: Terms,
    /// Terms of the power products, for the normaliser.
    pub power: Terms,
}

/// Layers in w.
#[derive(Debug, Clone, Copy, Serialize)]
pub(crate) struct Layers {
    /// Whether w matters at all.
    pub bends: bool,
    /// w of the first layer, wavelengths.
    pub first: f64,
    /// Distance between layers, wavelengths.
    pub step: f64,
    pub count: usize,
}

impl Layers {
    /// The layer a w belongs to.
    #[inline]
    pub(crate) fn of(&self, w: f64) -> usize {
        if self.count == 1 {
            return 0;
        }
        (((w - self.first) / self.step).round().max(0.0) as usize).min(self.count - 1)
    }

    /// w of a layer.
    pub(crate) fn w(&self, layer: usize) -> f64 {
        self.first + layer as f64 * self.step
    }
}

/// Everything decided before gridding a pointing.
#[derive(Debug, Clone)]
pub(crate) struct Plan {
    pub patch: Patch,
    pub shape: GridShape,
    pub window: Choice,
    pub layers: Layers,
    pub middle_bend: f64,
    pub partitions: Vec<Partition>,
    /// Index of the first partition of a pair's class; its channel groups follow.
    pub class_of_pair: HashMap<(u32, u32), usize>,
    pub channel_groups: Vec<Range<usize>>,
    pub double: bool,
    pub report: KernelReport,
}

/// What the kernel cache holds and how good it is.
#[derive(Debug, Clone, Default, Serialize)]
pub struct KernelReport {
    /// Tolerance the plan was made for.
    pub tolerance: f64,
    /// Beam products there are: station pairs × times × channels × feeds.
    pub members: usize,
    /// Kernels that stand for them: terms of all partitions, each transformed once a w layer.
    pub distinct_kernels: usize,
    /// Terms of each partition.
    pub terms: Vec<usize>,
    /// Terms of each partition's power products.
    pub power_terms: Vec<usize>,
    /// Largest difference met between a beam product (peak 1) and the kernel that stands for it.
    pub largest_difference: f64,
    /// The bound that difference must keep.
    pub bound: f64,
    /// Members measured in training and checks.
    pub measured_members: usize,
    /// Layers in w.
    pub w_layers: usize,
    /// Columns and rows of the patch of the common pixel grid.
    pub patch_px: (usize, usize),
    /// Lengths of the transforms.
    pub transform: (usize, usize),
    /// Support of the window, cells.
    pub window_support: usize,
    /// Aliasing of the window, largest over the field.
    pub window_error: f64,
    /// Whether grids are in double precision.
    pub double_precision: bool,
    /// Memory of screens and grids alive at once, bytes.
    pub memory_bytes: usize,
    /// Time to plan and build the kernels, seconds.
    pub build_seconds: f64,
}

/// What a plan is made from.
pub(crate) struct Inputs<'a> {
    pub beams: &'a StationBeams,
    pub intensity: &'a Intensity,
    pub frequencies_hz: &'a [f64],
    pub survey: &'a Survey,
    pub patch: Patch,
    pub tolerance: f64,
}

/// The patch level: beam products beyond the edge stay below this.
pub(crate) fn edge_level(tolerance: f64) -> f64 {
    share::EDGE * tolerance
}

struct Candidate {
    by_class: bool,
    groups: usize,
    oversampling: f64,
    turns: f64,
}

impl Plan {
    pub(crate) fn make(inputs: Inputs) -> Result<Plan, ResponseError> {
        let started = Instant::now();
        let Inputs { beams, intensity, frequencies_hz, survey, patch, tolerance } = inputs;
        let angles: Vec<Vec<f64>> = survey.times.iter().map(|&t| beams.angles_at(t)).collect();
        let (middle_bend, half_bend) = bend_range(&patch);
        let (lowest, highest) =
            frequencies_hz.iter().fold((f64::INFINITY, 0.0f64), |(low, high), &hz| (low.min(hz), high.max(hz)));
        let (k_low, k_high) = (wavelengths_per_metre(lowest), wavelengths_per_metre(highest));
        let w_range =
            ((survey.w_m.0 * k_low).min(survey.w_m.0 * k_high), (survey.w_m.1 * k_low).max(survey.w_m.1 * k_high));
        let furthest_w = w_range.0.abs().max(w_range.1.abs());
        let bends = TAU * furthest_w * half_bend > share::FLAT * tolerance;
        let turns_total = if bends { 0.5 * (w_range.1 - w_range.0) * half_bend } else { 0.0 };

        let mut family = Family {
            beams,
            patch: &patch,
            pairs: survey.pairs.clone(),
            angles: &angles,
            frequencies_hz: frequencies_hz.to_vec(),
            feeds: kernel_feeds(intensity),
            half_w: 0.0,
            middle_bend,
            power: false,
        };
        let (rms, power_rms) = products_rms(&family);
        let bound = share::TERMS * tolerance * rms;
        let power_bound = share::TERMS * tolerance * power_rms;
        let classes = pair_classes(beams, &survey.pairs);

        // choose the cheapest of a few ways
        let mut windows: HashMap<u64, Choice> = HashMap::new();
        for oversampling in [1.5, 2.0] {
            if let Ok(choice) = choose(0.5 * share::WINDOW * tolerance, oversampling) {
                windows.insert(oversampling.to_bits(), choice);
            }
        }
        let reach = (survey.u_m * k_high * patch.pixel(), survey.v_m * k_high * patch.pixel());
        let mut best: Option<(f64, Candidate)> = None;
        let halves: Vec<f64> = if turns_total > 0.0 {
            [0.24, 0.1, 0.04].iter().map(|&t: &f64| t.min(turns_total)).collect()
        } else {
            vec![0.0]
        };
        let mut tried_halves: Vec<f64> = Vec::new();
        for &turns in &halves {
            if tried_halves.contains(&turns) {
                continue;
            }
            tried_halves.push(turns);
            let layers = layer_count(turns_total, turns);
            family.half_w = if half_bend > 0.0 { turns / half_bend } else { 0.0 };
            let nodes = (14, 14);
            for by_class in [false, true] {
                if by_class && classes.len() == 1 {
                    continue;
                }
                for groups in [1, 2, 4, 8] {
                    if groups > frequencies_hz.len() {
                        break;
                    }
                    // the widest group is the first: its channels span the largest ratio
                    family.frequencies_hz =
                        frequencies_hz[channel_groups(frequencies_hz.len(), groups)[0].clone()].to_vec();
                    let mut per_sample = 0.0;
                    let mut terms = 0.0;
                    let lists: Vec<&Vec<(u32, u32)>> = classes.iter().collect();
                    let of_class: Vec<Vec<(u32, u32)>> =
                        if by_class { lists.into_iter().cloned().collect() } else { vec![survey.pairs.clone()] };
                    for pairs in of_class {
                        let fraction = pairs.len() as f64 / survey.pairs.len().max(1) as f64;
                        family.pairs = pairs;
                        let k = Terms::estimate(&family, nodes, bound);
                        per_sample += fraction * k.div_ceil(LANES) as f64;
                        terms += k as f64;
                    }
                    for (&bits, choice) in &windows {
                        let oversampling = f64::from_bits(bits);
                        let shape = GridShape::new(patch.size, oversampling, reach, choice.support);
                        let spread = survey.samples as f64
                            * per_sample
                            * (cost::SAMPLE + cost::CELL * (choice.support * choice.support) as f64);
                        let transforms = terms
                            * groups as f64
                            * layers as f64
                            * (cost::TRANSFORM * (shape.fft.0 * shape.fft.1.min(2 * shape.height)) as f64
                                + cost::PIXEL * (patch.size.0 * patch.size.1) as f64);
                        let total = spread + transforms;
                        if best.as_ref().is_none_or(|(least, _)| total < *least) {
                            best = Some((total, Candidate { by_class, groups, oversampling, turns }));
                        }
                    }
                }
            }
        }
        let refuse =
            |reason: String, reachable: f64| ResponseError::Tolerance { asked: tolerance, reachable, reason };
        let (_, chosen) = best.ok_or_else(|| {
            refuse("no anti-alias window of 16 cells or fewer is good enough".to_owned(), SMALLEST_TOLERANCE)
        })?;
        let window = windows[&chosen.oversampling.to_bits()];
        let shape = GridShape::new(patch.size, chosen.oversampling, reach, window.support);
        let layers = make_layers(bends, w_range, layer_count(turns_total, chosen.turns));
        family.half_w = if bends { 0.5 * layers.step } else { 0.0 };

        // build the terms of every partition
        let channel_groups = channel_groups(frequencies_hz.len(), chosen.groups);
        let of_class = if chosen.by_class { classes } else { vec![survey.pairs.clone()] };
        let mut partitions = Vec::new();
        let mut class_of_pair = HashMap::new();
        let mut report = KernelReport { tolerance, bound, w_layers: layers.count, ..KernelReport::default() };
        family.frequencies_hz = frequencies_hz.to_vec();
        family.pairs = survey.pairs.clone();
        let nodes = node_counts(&family, 0.1 * bound);
        let power_nodes = {
            family.power = true;
            let half_w = std::mem::replace(&mut family.half_w, 0.0);
            family.feeds = power_feeds(intensity);
            let counts = node_counts(&family, 0.1 * power_bound);
            family.feeds = kernel_feeds(intensity);
            family.half_w = half_w;
            family.power = false;
            counts
        };
        for (class, pairs) in of_class.into_iter().enumerate() {
            for &pair in &pairs {
                class_of_pair.insert(pair, class * channel_groups.len());
            }
            for channels in &channel_groups {
                family.pairs = pairs.clone();
                family.frequencies_hz = frequencies_hz[channels.clone()].to_vec();
                let too_many = |reached: f64, rms: f64| {
                    refuse(
                        format!("{MOST_TERMS} terms do not stand for the beam products of this field"),
                        2.0 * reached / (share::TERMS * rms),
                    )
                };
                let kernel = Terms::build(&family, nodes, bound).map_err(|e| too_many(e.reached, rms))?;
                report.members += family.members();
                family.power = true;
                let half_w = std::mem::replace(&mut family.half_w, 0.0);
                family.feeds = power_feeds(intensity);
                let power =
                    Terms::build(&family, power_nodes, power_bound).map_err(|e| too_many(e.reached, power_rms))?;
                family.feeds = kernel_feeds(intensity);
                family.half_w = half_w;
                family.power = false;
                report.terms.push(kernel.points.len());
                report.power_terms.push(power.points.len());
                report.measured_members += kernel.measured_members;
                report.largest_difference = report.largest_difference.max(kernel.largest);
                partitions.push(Partition { channels: channels.clone(), pairs: pairs.clone(), kernel, power });
            }
        }
        let double = tolerance < SINGLE_PRECISION_DOWN_TO;
        report.distinct_kernels = report.terms.iter().sum::<usize>() * layers.count;
        report.patch_px = patch.size;
        report.transform = shape.fft;
        report.window_support = window.support;
        report.window_error = window.aliasing.both_axes();
        report.double_precision = double;
        report.build_seconds = started.elapsed().as_secs_f64();
        Ok(Plan {
            patch,
            shape,
            window,
            layers,
            middle_bend,
            partitions,
            class_of_pair,
            channel_groups,
            double,
            report,
        })
    }
}

/// Middle and half of the range of the curvature over a patch.
fn bend_range(patch: &Patch) -> (f64, f64) {
    let ((left, right), (low, high)) = (Patch::span(patch.size.0), Patch::span(patch.size.1));
    let (mut least, mut most) = (f64::INFINITY, f64::NEG_INFINITY);
    // the curvature is concave with its top at the centre: its extremes lie there and on the rim
    let along = |from: f64, to: f64, i: usize| from + (to - from) * i as f64 / 16.0;
    let mut visit = |x: f64, y: f64| {
        let bend = patch.curvature(x, y);
        least = least.min(bend);
        most = most.max(bend);
    };
    visit(0.0, 0.0);
    for i in 0..=16 {
        visit(along(left, right, i), low);
        visit(along(left, right, i), high);
        visit(left, along(low, high, i));
        visit(right, along(low, high, i));
    }
    (0.5 * (least + most), 0.5 * (most - least))
}

fn kernel_feeds(intensity: &Intensity) -> Vec<usize> {
    let mut feeds: Vec<usize> = Vec::new();
    for (seen, _) in intensity.groups() {
        match seen {
            Seen::Feed(feed) => feeds.push(*feed),
            Seen::Mean => feeds.extend([0, 1]),
        }
    }
    feeds.sort_unstable();
    feeds.dedup();
    feeds
}

fn power_feeds(intensity: &Intensity) -> Vec<usize> {
    intensity.groups().iter().map(|(seen, _)| if let Seen::Feed(feed) = seen { *feed } else { MEAN }).collect()
}

/// Root mean square over a patch of the products and of their powers.
fn products_rms(family: &Family) -> (f64, f64) {
    use rand::SeedableRng;
    let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(0x4a35);
    let members = family.random(64, &mut rng);
    let points = family.random_points(400, &mut rng);
    let screens = family.screens(&members, &points);
    let count = screens.len().max(1) as f64;
    let square = screens.iter().map(|z| z.norm_sqr()).sum::<f64>() / count;
    let fourth = screens.iter().map(|z| z.norm_sqr().powi(2)).sum::<f64>() / count;
    (square.sqrt().max(1e-12), fourth.sqrt().max(1e-12))
}

/// Station pairs by the patterns of their two stations.
fn pair_classes(beams: &StationBeams, pairs: &[(u32, u32)]) -> Vec<Vec<(u32, u32)>> {
    let names: Vec<String> = (0..beams.len()).map(|s| beams.beam(s).pattern.describe()).collect();
    let mut classes: Vec<((&str, &str), Vec<(u32, u32)>)> = Vec::new();
    for &(p, q) in pairs {
        let (a, b) = (names[p as usize].as_str(), names[q as usize].as_str());
        let key = if a <= b { (a, b) } else { (b, a) };
        match classes.iter_mut().find(|(k, _)| *k == key) {
            Some((_, list)) => list.push((p, q)),
            None => classes.push((key, vec![(p, q)])),
        }
    }
    classes.into_iter().map(|(_, list)| list).collect()
}

fn channel_groups(channels: usize, groups: usize) -> Vec<Range<usize>> {
    (0..groups).map(|g| g * channels / groups..(g + 1) * channels / groups).collect()
}

fn layer_count(turns_total: f64, half_turns: f64) -> usize {
    if turns_total == 0.0 { 1 } else { ((turns_total / half_turns) - 1e-9).ceil().max(1.0) as usize }
}

fn make_layers(bends: bool, (low, high): (f64, f64), count: usize) -> Layers {
    if !bends {
        return Layers { bends, first: 0.0, step: 0.0, count: 1 };
    }
    let step = (high - low) / count as f64;
    Layers { bends, first: low + 0.5 * step, step, count }
}
