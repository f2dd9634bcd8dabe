//! Which way of gridding costs least: how visibilities are parted, how far apart the layers in w lie, how wide the window.

use super::family::Family;
use super::survey::Survey;
use super::terms::Terms;
use super::transform::GridShape;
use super::vector::LANES;
use crate::response::window::{Choice, choose};
use std::collections::BTreeMap;
use std::ops::Range;
use std::sync::Mutex;

/// Rough costs, in nanoseconds of one thread (measured with `cargo bench --bench gridding`; only ratios matter).
mod cost {
    /// A visibility in one block of terms: fixed, and per cell of the window.
    pub const SAMPLE: f64 = 25.0;
    pub const CELL: f64 = 0.7;
    /// A cell of a transform, per term, all passes included.
    pub const TRANSFORM: f64 = 10.0;
    /// A pixel multiplied by its screen, per term.
    pub const PIXEL: f64 = 8.0;
}

/// Half ranges of the phase of w within a layer that are tried, turns. Wide layers are few, and want more terms.
const HALF_TURNS: [f64; 7] = [4.0, 2.0, 1.0, 0.5, 0.24, 0.1, 0.04];
/// Numbers of channel groups that are tried.
const GROUPS: [usize; 5] = [1, 2, 4, 8, 16];
/// Chebyshev nodes a side that estimates are made on.
const NODES: (usize, usize) = (14, 14);

/// A way of gridding.
#[derive(Debug, Clone, Copy)]
pub(super) struct Candidate {
    /// Whether each class of station pairs has its own terms.
    pub by_class: bool,
    /// Channel groups.
    pub groups: usize,
    /// Padding.
    pub oversampling: f64,
    pub window: Choice,
    /// Layers in w.
    pub layers: usize,
    total: f64,
}

/// What the choice is made from.
pub(super) struct Question<'a> {
    pub survey: &'a Survey,
    pub classes: &'a [Vec<(u32, u32)>],
    pub frequencies_hz: &'a [f64],
    /// Largest difference of kernels allowed.
    pub bound: f64,
    /// Aliasing allowed on one axis.
    pub window_error: f64,
    /// |u|, |v| at the longest baseline times the pixel.
    pub reach: (f64, f64),
    pub patch_size: (usize, usize),
    /// Half range of the phase of w over all visibilities and the patch, turns; 0 where w does not matter.
    pub turns: f64,
    /// Half range of the curvature over the patch.
    pub half_bend: f64,
}

/// The cheapest way; `None` when no window is good enough. `family` is used as scratch.
pub(super) fn cheapest(question: &Question, family: &mut Family) -> Option<Candidate> {
    let windows: Vec<(f64, Choice)> =
        [1.5, 2.0].into_iter().filter_map(|s| Some((s, window(question.window_error, s)?))).collect();
    let mut best: Option<Candidate> = None;
    let mut tried: Vec<usize> = Vec::new();
    for half_turns in HALF_TURNS {
        let layers = layer_count(question.turns, half_turns);
        if tried.contains(&layers) {
            continue;
        }
        tried.push(layers);
        let turns = question.turns / layers as f64;
        family.half_w = if question.half_bend > 0.0 { turns / question.half_bend } else { 0.0 };
        let mut worth_more_layers = false;
        for by_class in [false, true] {
            if by_class && (question.classes.len() == 1 || !worth_more_layers) {
                continue;
            }
            for groups in GROUPS {
                if groups > question.frequencies_hz.len() {
                    break;
                }
                let (per_sample, terms) = estimate(question, family, by_class, groups);
                let mut worth_parting = false;
                for &(oversampling, window) in &windows {
                    let shape = GridShape::new(question.patch_size, oversampling, question.reach, window.support);
                    let cells = (window.support * window.support) as f64;
                    let spread = question.survey.samples as f64 * per_sample * (cost::SAMPLE + cost::CELL * cells);
                    let pixels = (question.patch_size.0 * question.patch_size.1) as f64;
                    let length = (shape.fft.0 * shape.fft.1.min(2 * shape.height)) as f64;
                    let transforms =
                        terms * (groups * layers) as f64 * (cost::TRANSFORM * length + cost::PIXEL * pixels);
                    worth_parting |= spread > transforms;
                    let total = spread + transforms;
                    if best.is_none_or(|best| total < best.total) {
                        best = Some(Candidate { by_class, groups, oversampling, window, layers, total });
                    }
                }
                worth_more_layers |= worth_parting;
                // parting further saves some spreading and doubles the transforms
                if !worth_parting {
                    break;
                }
            }
        }
        if !worth_more_layers {
            break;
        }
    }
    best
}

/// Blocks of terms per visibility, and terms of all classes in one channel group.
fn estimate(question: &Question, family: &mut Family, by_class: bool, groups: usize) -> (f64, f64) {
    // the widest group is the first: its channels span the largest ratio
    let channels = channel_groups(question.frequencies_hz.len(), groups)[0].clone();
    family.frequencies_hz = question.frequencies_hz[channels].to_vec();
    let everything = [question.survey.pairs.clone()];
    let classes: &[Vec<(u32, u32)>] = if by_class { question.classes } else { &everything };
    let (mut per_sample, mut terms) = (0.0, 0.0);
    for pairs in classes {
        family.pairs.clone_from(pairs);
        let count = Terms::estimate(family, NODES, question.bound);
        let fraction = pairs.len() as f64 / question.survey.pairs.len().max(1) as f64;
        per_sample += fraction * count.div_ceil(LANES) as f64;
        terms += count as f64;
    }
    (per_sample, terms)
}

/// The window for an error and a padding; pointings ask for the same ones again and again.
fn window(error: f64, oversampling: f64) -> Option<Choice> {
    static KNOWN: Mutex<BTreeMap<(u64, u64), Option<Choice>>> = Mutex::new(BTreeMap::new());
    let key = (error.to_bits(), oversampling.to_bits());
    let mut known = KNOWN.lock().unwrap_or_else(std::sync::PoisonError::into_inner);
    *known.entry(key).or_insert_with(|| choose(error, oversampling).ok())
}

/// Runs of channels, as even as they go.
pub(super) fn channel_groups(channels: usize, groups: usize) -> Vec<Range<usize>> {
    (0..groups).map(|g| g * channels / groups..(g + 1) * channels / groups).collect()
}

fn layer_count(turns: f64, half_turns: f64) -> usize {
    if turns == 0.0 { 1 } else { (turns / half_turns - 1e-9).ceil().max(1.0) as usize }
}
