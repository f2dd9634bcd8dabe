//! Which way of gridding costs least: how visibilities are parted, how far apart the layers in w lie, how wide the window.

use super::bands::{Costs, Extent};
use super::family::Family;
use super::survey::Survey;
use super::terms::{MOST_ESTIMATED, Terms};
use super::transform::GridShape;
use super::vector::LANES;
use crate::response::window::{Choice, Kind, choose_kind};
use std::collections::BTreeMap;
use std::ops::Range;
use std::sync::Mutex;

/// Rough costs, in nanoseconds of one thread (measured with `cargo bench --bench gridding`; only ratios matter); what a
/// visibility costs is told by [`Costs`].
mod cost {
    /// A cell of a transform, per term, both passes.
    pub const TRANSFORM: f64 = 6.5;
    /// A pixel multiplied by its screen, per term.
    pub const PIXEL: f64 = 6.0;
    /// Of both, where two terms share a transform.
    pub const PAIRED: f64 = 0.55;
    /// Elimination, per direction, and components, per direction cubed.
    pub const DIRECTION: f64 = 4e6;
    pub const COMPONENTS: f64 = 30.0;
    /// How often terms are used, at the least: dirty image, point spread function, self-check, predictions.
    pub const USES: f64 = 4.0;
    /// Estimates that ended at the most directions they can see are not to be trusted.
    pub const UNKNOWN: f64 = 20.0;
}

/// Half ranges of the phase of w within a layer that are tried, turns. Wide layers are few, and want more terms.
const HALF_TURNS: [f64; 7] = [4.0, 2.0, 1.0, 0.5, 0.24, 0.1, 0.04];
/// Numbers of channel groups that are tried.
const GROUPS: [usize; 5] = [1, 2, 4, 8, 16];
/// Chebyshev nodes a side that estimates are made on.
const NODES: (usize, usize) = (14, 14);
/// Rows that are reckoned to share a span.
const SPAN_ROWS: f64 = 4.0;
/// How far w of a band's ends may lie outside its layer, in half layers.
pub(super) const SLACK: f64 = 0.15;

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
    pub layering: Layering,
    total: f64,
}

/// How w is parted.
#[derive(Debug, Clone, Copy)]
pub(super) struct Layering {
    /// Layers.
    pub count: usize,
    /// One layer at w = 0: terms are transformed in pairs, for the price of twice the range.
    pub centred: bool,
    /// Half range of the phase of w that terms must stand for, turns.
    pub turns: f64,
    /// Bands of channels at least in every channel group, so that w of a row stays near its layer throughout.
    pub bands: usize,
}

/// What the choice is made from.
pub(super) struct Question<'a> {
    pub survey: &'a Survey,
    pub classes: &'a [Vec<(u32, u32)>],
    pub frequencies_hz: &'a [f64],
    /// Largest difference of kernels allowed.
    pub bound: f64,
    /// Kind of window, and aliasing allowed on one axis.
    pub window: Kind,
    pub window_error: f64,
    /// |u|, |v| at the longest baseline times the pixel.
    pub reach: (f64, f64),
    /// The mean of √(u² + v²) times the pixel.
    pub mean_reach: f64,
    pub patch_size: (usize, usize),
    /// Phase of the smallest and of the largest w at the edge of the patch, turns; 0 where w does not matter.
    pub turns: (f64, f64),
    /// Half range of the curvature over the patch.
    pub half_bend: f64,
    /// Radians that the Earth turns between rows of a pair.
    pub turn: f64,
}

impl Question<'_> {
    /// Ways to part w, from few layers to many.
    fn layerings(&self) -> Vec<Layering> {
        let (low, high) = self.turns;
        let mut all = vec![Layering { count: 1, centred: true, turns: high, bands: 1 }];
        if high == 0.0 {
            return all;
        }
        let half_range = 0.5 * (high - low);
        let mut tried = 0;
        for half_turns in HALF_TURNS {
            let count = ((half_range / half_turns - 1e-9).ceil() as usize).max(1);
            if count == tried {
                continue;
            }
            tried = count;
            let turns = half_range / count as f64;
            if count == 1 {
                all.push(Layering { count, centred: false, turns, bands: 1 });
                continue;
            }
            let (low_hz, high_hz) = range(self.frequencies_hz);
            let strays = high * 0.5 * (high_hz - low_hz) / high_hz;
            let bands = (strays / (SLACK * turns)).ceil() as usize;
            all.push(Layering { count, centred: false, turns: (1.0 + SLACK) * turns, bands: bands.max(1) });
        }
        all
    }
}

fn range(hz: &[f64]) -> (f64, f64) {
    hz.iter().fold((f64::INFINITY, 0.0f64), |(low, high), &f| (low.min(f), high.max(f)))
}

/// The cheapest way; `None` when no window is good enough. `family` is used as scratch.
pub(super) fn cheapest(question: &Question, family: &mut Family) -> Option<Candidate> {
    let windows: Vec<(f64, Choice)> =
        paddings(question.window).iter().filter_map(|&s| Some((s, window(question, s)?))).collect();
    let mut best: Option<Candidate> = None;
    let (low_hz, high_hz) = range(question.frequencies_hz);
    let width = (high_hz - low_hz) / (0.5 * (high_hz + low_hz));
    // one centred layer pays for small ranges of w only
    let layerings = question.layerings().into_iter().filter(|way| !way.centred || way.turns < 2.0 * HALF_TURNS[0]);
    for layering in layerings {
        family.half_w = if question.half_bend > 0.0 { layering.turns / question.half_bend } else { 0.0 };
        let mut worth_more_layers = false;
        for by_class in [false, true] {
            if by_class && (question.classes.len() == 1 || !worth_more_layers) {
                continue;
            }
            for groups in GROUPS {
                if groups > question.frequencies_hz.len() {
                    break;
                }
                let parts = estimate(question, family, by_class, groups);
                let terms: f64 = parts.iter().map(|part| part.terms as f64).sum();
                let mut worth_parting = false;
                for &(oversampling, window) in &windows {
                    let shape = GridShape::new(question.patch_size, oversampling, question.reach, window.support);
                    let bands = groups * layering.bands.div_ceil(groups).max(1);
                    let channels = question.frequencies_hz.len() as f64 / bands as f64;
                    let extent = Extent {
                        channels,
                        rows: SPAN_ROWS.min(question.survey.times.len() as f64),
                        width: width / bands as f64,
                        turn: question.turn,
                        nodes: LANES,
                    };
                    let per_sample: f64 = parts
                        .iter()
                        .map(|part| {
                            let costs = Costs {
                                support: window.support,
                                distance: question.mean_reach * shape.fft.0 as f64,
                                blocks: part.terms.div_ceil(LANES),
                                directions: part.directions,
                            };
                            part.fraction * costs.of(extent)
                        })
                        .sum();
                    let spread = question.survey.samples as f64 * per_sample;
                    let pixels = (question.patch_size.0 * question.patch_size.1) as f64;
                    let length = (shape.fft.0 * shape.fft.1.min(2 * shape.height)) as f64;
                    let paired = if layering.centred { cost::PAIRED } else { 1.0 };
                    let transforms = paired
                        * terms
                        * (groups * layering.count) as f64
                        * (cost::TRANSFORM * length + cost::PIXEL * pixels);
                    let build: f64 = parts.iter().map(|part| part.build(groups)).sum();
                    let known = parts.iter().all(|part| part.directions < MOST_ESTIMATED);
                    let once = build / cost::USES;
                    worth_parting |= spread > transforms + once || !known;
                    worth_more_layers |= spread + once > transforms || !known;
                    let total = (spread + transforms + once) * if known { 1.0 } else { cost::UNKNOWN };
                    if best.is_none_or(|best| total < best.total) {
                        best = Some(Candidate { by_class, groups, oversampling, window, layering, total });
                    }
                }
                // parting further saves some spreading and doubles the transforms
                if !worth_parting {
                    break;
                }
            }
        }
        if !worth_more_layers && !layering.centred {
            break;
        }
    }
    best
}

/// A class of station pairs in one channel group.
struct Part {
    terms: usize,
    directions: usize,
    /// Of all pairs.
    fraction: f64,
}

impl Part {
    /// What making its terms costs in all channel groups.
    fn build(&self, groups: usize) -> f64 {
        let directions = self.directions as f64;
        groups as f64 * (cost::DIRECTION * directions + cost::COMPONENTS * directions.powi(3))
    }
}

fn estimate(question: &Question, family: &mut Family, by_class: bool, groups: usize) -> Vec<Part> {
    // the widest group is the first: its channels span the largest ratio
    let channels = channel_groups(question.frequencies_hz.len(), groups)[0].clone();
    family.frequencies_hz = question.frequencies_hz[channels].to_vec();
    let everything = [question.survey.pairs.clone()];
    let classes: &[Vec<(u32, u32)>] = if by_class { question.classes } else { &everything };
    let all = question.survey.pairs.len().max(1) as f64;
    classes
        .iter()
        .map(|pairs| {
            family.pairs.clone_from(pairs);
            let (terms, directions) = Terms::estimate(family, NODES, question.bound);
            Part { terms, directions, fraction: pairs.len() as f64 / all }
        })
        .collect()
}

/// Paddings that are tried. The nearest cell gains by the most.
fn paddings(kind: Kind) -> &'static [f64] {
    if kind == Kind::Nearest { &[2.0] } else { &[1.5, 1.75, 2.0] }
}

/// The window for an error and a padding; pointings ask for the same ones again and again.
fn window(question: &Question, oversampling: f64) -> Option<Choice> {
    static KNOWN: Mutex<BTreeMap<(Kind, u64, u64), Option<Choice>>> = Mutex::new(BTreeMap::new());
    let (kind, error) = (question.window, question.window_error);
    let key = (kind, error.to_bits(), oversampling.to_bits());
    let mut known = KNOWN.lock().unwrap_or_else(std::sync::PoisonError::into_inner);
    *known.entry(key).or_insert_with(|| choose_kind(kind, error, oversampling).ok())
}

/// Runs of channels, as even as they go.
pub(super) fn channel_groups(channels: usize, groups: usize) -> Vec<Range<usize>> {
    (0..groups).map(|g| g * channels / groups..(g + 1) * channels / groups).collect()
}
