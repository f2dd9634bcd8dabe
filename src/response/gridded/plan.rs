//! The plan of one pointing: how the tolerance is shared out, and how visibilities are parted so that work is least.
//!
//! A plan is made before any gridding, from the beams, the patch, a survey of the visibilities and the tolerance asked
//! for; the same inputs give the same plan.

use super::bands::EARTH;
use super::choice::{Layering, Question, channel_groups, cheapest};
use super::family::{Family, MEAN};
use super::patch::Patch;
use super::survey::{SampleRow, Survey};
use super::terms::{MOST_TERMS, Terms, WORST_MEMBER, node_counts};
use super::transform::GridShape;
use crate::beam::StationBeams;
use crate::response::ResponseError;
use crate::response::rows::{Intensity, Seen, wavelengths_per_metre};
use crate::response::window::{Choice, Kind};
use serde::Serialize;
use std::collections::HashMap;
use std::f64::consts::TAU;
use std::ops::Range;
use std::time::Instant;

/// Shares of the tolerance. Errors of different origin add, so the shares sum to at most 1.
mod share {
    /// Aliasing of the window (largest over the field, both axes).
    pub const WINDOW: f64 = 0.17;
    /// Difference between kernels and their terms, w included, relative to the products' root mean square: root mean
    /// square over the field and over all members; no member alone passes [`super::terms::WORST_MEMBER`] times it.
    pub const TERMS: f64 = 0.53;
    /// Interpolation of products in frequency, within a band of channels: root mean square as for the terms.
    pub const BANDS: f64 = 0.12;
    /// Modes of that interpolation that are left out, run by run: root mean square over the field.
    pub const MODES: f64 = 0.1;
    /// Beam products beyond a patch's edge.
    pub const EDGE: f64 = 0.04;
    /// Curvature left out where w is ignored.
    pub const FLAT: f64 = 0.04;
}

/// Below this tolerance grids and tables are kept in double precision.
const SINGLE_PRECISION_DOWN_TO: f64 = 8e-6;
/// Smallest tolerance kept: f64 grids and the windows allow less, but fields of hundreds of terms do not.
pub const SMALLEST_TOLERANCE: f64 = crate::run::TOLERANCES.0;
/// Largest tolerance that is still an image.
pub const LARGEST_TOLERANCE: f64 = crate::run::TOLERANCES.1;

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
    /// One layer, at w = 0: its terms' images need real parts only.
    pub centred: bool,
    /// w of the first layer, wavelengths.
    pub first: f64,
    /// Distance between layers, wavelengths.
    pub step: f64,
    /// Its inverse.
    pub per_step: f64,
    pub count: usize,
}

impl Layers {
    /// The layer a w belongs to.
    #[inline]
    pub(crate) fn of(&self, w: f64) -> usize {
        if self.count == 1 {
            return 0;
        }
        // the conversion saturates: below the first layer is the first
        (((w - self.first) * self.per_step + 0.5) as usize).min(self.count - 1)
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
    /// Largest distance in w from a layer that terms stand for, wavelengths.
    #[cfg_attr(not(test), expect(dead_code, reason = "what the tests of bounds go by"))]
    pub half_w: f64,
    /// Bands of channels in every partition, at least.
    pub fewest_bands: usize,
    /// Mean of √(u² + v²) times the pixel.
    pub mean_reach: f64,
    /// Errors allowed in interpolating products, and their powers, within a band.
    pub error: f64,
    pub power_error: f64,
    /// Error allowed in leaving out modes of a run.
    pub mode_error: f64,
    pub middle_bend: f64,
    pub partitions: Vec<Partition>,
    /// Index of the first partition of a pair's class; its channel groups follow.
    pub class_of_pair: HashMap<(u32, u32), usize>,
    pub channel_groups: Vec<Range<usize>>,
    /// Largest |u′| and |v′|, and the range of |w|, that grids and layers were made for, metres.
    pub reach_m: (f64, f64),
    pub w_m: (f64, f64),
    /// Times of the observation (thinned, and all), some of the rows, and the time between those of a pair, days.
    pub times: Vec<f64>,
    pub all_times: Vec<f64>,
    pub sample: Vec<SampleRow>,
    pub interval: f64,
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
    /// Largest difference met between a beam product (peak 1) and the kernel that stands for it, root mean square over the
    /// field.
    pub largest_difference: f64,
    /// The bound that every such difference keeps; all of them together keep a third of it in the root mean square.
    pub bound: f64,
    /// Members measured in training and checks.
    pub measured_members: usize,
    /// Layers in w.
    pub w_layers: usize,
    /// Columns and rows of the patch of the common pixel grid.
    pub patch_px: (usize, usize),
    /// Lengths of the transforms.
    pub transform: (usize, usize),
    /// Kind of window.
    pub window: Kind,
    /// Support of the window, cells.
    pub window_support: usize,
    /// Aliasing of the window: what gets through of a source outside the padded field, at most, over the field and both axes.
    pub window_error: f64,
    /// Padding: transform over patch.
    pub padding: f64,
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
    pub window: Kind,
}

/// The patch level: beam products beyond the edge stay below this.
pub(crate) fn edge_level(tolerance: f64) -> f64 {
    share::EDGE * tolerance
}

impl Plan {
    pub(crate) fn make(inputs: Inputs) -> Result<Plan, ResponseError> {
        let started = Instant::now();
        let Inputs { beams, intensity, frequencies_hz, survey, patch, tolerance, window: kind } = inputs;
        let angles: Vec<Vec<f64>> = survey.times.iter().map(|&t| beams.angles_at(t)).collect();
        let (middle_bend, half_bend) = bend_range(&patch);
        let (lowest, highest) =
            frequencies_hz.iter().fold((f64::INFINITY, 0.0f64), |(low, high), &hz| (low.min(hz), high.max(hz)));
        let (k_low, k_high) = (wavelengths_per_metre(lowest), wavelengths_per_metre(highest));
        // rows of negative w are taken as the conjugates of opposite baselines
        let w_range = (survey.w_m.0 * k_low, survey.w_m.1 * k_high);
        let bends = TAU * w_range.1 * half_bend > share::FLAT * tolerance;
        let turns = if bends { (w_range.0 * half_bend, w_range.1 * half_bend) } else { (0.0, 0.0) };

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

        let reach = (survey.u_m * k_high * patch.pixel(), survey.v_m * k_high * patch.pixel());
        let question = Question {
            survey,
            classes: &classes,
            frequencies_hz,
            bound,
            window: kind,
            window_error: 0.5 * share::WINDOW * tolerance,
            reach,
            patch_size: patch.size,
            mean_reach: survey.mean_uv_m * k_high * patch.pixel(),
            turns,
            half_bend,
            turn: EARTH * survey.interval,
        };
        let chosen = cheapest(&question, &mut family);
        let refuse =
            |reason: String, reachable: f64| ResponseError::Tolerance { asked: tolerance, reachable, reason };
        let chosen = chosen.ok_or_else(|| {
            refuse(
                format!("no {} window of 16 cells or fewer aliases little enough", kind.name()),
                SMALLEST_TOLERANCE,
            )
        })?;
        let window = chosen.window;
        let shape = GridShape::new(patch.size, chosen.oversampling, reach, window.support);
        let layering = chosen.layering;
        let layers = make_layers(bends, w_range, layering);
        family.half_w = if bends { layering.turns / half_bend } else { 0.0 };

        // build the terms of every partition
        let channel_groups = channel_groups(frequencies_hz.len(), chosen.groups);
        let of_class = if chosen.by_class { classes } else { vec![survey.pairs.clone()] };
        let patch_pixel = patch.pixel();
        let mut partitions = Vec::new();
        let mut class_of_pair = HashMap::new();
        let mut report = KernelReport {
            tolerance,
            bound: WORST_MEMBER * bound,
            w_layers: layers.count,
            ..KernelReport::default()
        };
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
                report.terms.push(kernel.screens.len());
                report.power_terms.push(power.screens.len());
                report.measured_members += kernel.measured_members;
                report.largest_difference = report.largest_difference.max(kernel.largest);
                partitions.push(Partition { channels: channels.clone(), pairs: pairs.clone(), kernel, power });
            }
        }
        let half_w = family.half_w;
        let double = tolerance < SINGLE_PRECISION_DOWN_TO;
        report.distinct_kernels = report.terms.iter().sum::<usize>() * layers.count;
        report.patch_px = patch.size;
        report.transform = shape.fft;
        report.window = window.kind;
        report.padding = chosen.oversampling;
        report.window_support = window.support;
        report.window_error = window.aliasing.both_axes();
        report.double_precision = double;
        report.build_seconds = started.elapsed().as_secs_f64();
        Ok(Plan {
            patch,
            shape,
            window,
            layers,
            half_w,
            fewest_bands: layering.bands.div_ceil(chosen.groups),
            middle_bend,
            mean_reach: survey.mean_uv_m * k_high * patch_pixel,
            error: share::BANDS * tolerance * rms,
            mode_error: share::MODES * tolerance * rms,
            power_error: share::BANDS * tolerance * power_rms,
            partitions,
            class_of_pair,
            channel_groups,
            reach_m: (survey.u_m, survey.v_m),
            w_m: survey.w_m,
            times: survey.times.clone(),
            all_times: survey.all_times.clone(),
            sample: survey.sample.clone(),
            interval: survey.interval,
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

pub(super) fn kernel_feeds(intensity: &Intensity) -> Vec<usize> {
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
    type Class<'a> = ((&'a str, &'a str), Vec<(u32, u32)>);
    let mut classes: Vec<Class> = Vec::new();
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

fn make_layers(bends: bool, (low, high): (f64, f64), layering: Layering) -> Layers {
    let Layering { count, centred, .. } = layering;
    if !bends || centred {
        return Layers { bends, centred: true, first: 0.0, step: 0.0, per_step: 0.0, count: 1 };
    }
    let step = (high - low) / count as f64;
    Layers { bends, centred: false, first: low + 0.5 * step, step, per_step: step.recip(), count }
}
