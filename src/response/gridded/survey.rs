//! One pass over the visibilities before gridding: how far u, v, w reach, when, and which pairs.

use super::patch::Patch;
use crate::observation::{Block, BlockSource, Observation, ObservationError};
use crate::response::rows::{Intensity, Recentre};
use std::collections::BTreeSet;

/// Distinct times kept at most; more are thinned evenly (they only choose where kernels are trained).
const TIMES_KEPT: usize = 512;

/// Rows kept as a sample, about: a run of them thins out what it has when it grows to twice as many.
const SAMPLE: usize = 64;

/// A row as an example of others.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct SampleRow {
    /// First and second station.
    pub pair: (u32, u32),
    /// u, v, w about the image centre, metres.
    pub uvw_m: [f64; 3],
}

impl SampleRow {
    /// w after the Earth has turned by an angle, seen from a declination.
    ///
    /// With the baseline (X, Y, Z), hour angle H: u = X sin H + Y cos H, w = cos δ (X cos H − Y sin H) + Z sin δ and
    /// cos δ · w − sin δ · v = X cos H − Y sin H (Thompson, Moran & Swenson 2017, eq. 4.1).
    pub(crate) fn w_after(&self, angle: f64, declination: f64) -> f64 {
        let [u, v, w] = self.uvw_m;
        let (sin, cos) = declination.sin_cos();
        let along = cos * w - sin * v;
        let constant = w - cos * along;
        cos * (along * angle.cos() - u * angle.sin()) + constant
    }
}

/// What one pass over a pointing's visibilities found, about a patch's centre.
#[derive(Debug, Clone, Default)]
pub(crate) struct Survey {
    /// Largest |u′| and |v′|, metres.
    pub u_m: f64,
    /// See `u_m`.
    pub v_m: f64,
    /// Smallest and largest |w|, metres.
    pub w_m: (f64, f64),
    /// Mean of √(u′² + v′²) over the rows with usable data, metres.
    pub mean_uv_m: f64,
    /// Rows with usable data.
    pub rows: u64,
    /// Some of them, spread evenly over all.
    pub sample: Vec<SampleRow>,
    /// Time between rows of a pair, the middle of all such, days; 0 where there is but one time.
    pub interval: f64,
    /// Distinct times, MJD, ascending (thinned).
    pub times: Vec<f64>,
    /// All of them.
    pub all_times: Vec<f64>,
    /// Station pairs with usable data, first and second as in the rows.
    pub pairs: Vec<(u32, u32)>,
    /// Usable visibilities of hands that carry total intensity.
    pub used: u64,
    /// (row, channel) samples with at least one usable hand: what is gridded.
    pub samples: u64,
}

impl Survey {
    pub(crate) fn new(
        observation: &Observation,
        intensity: &Intensity,
        patch: &Patch,
        source: &mut dyn BlockSource,
    ) -> Result<Survey, ObservationError> {
        source.rewind()?;
        let mut builder = Builder::new(observation, patch);
        let mut kept = None;
        while let Some(block) = source.lend_block(&mut kept)? {
            builder.add(block, intensity, patch);
        }
        Ok(builder.finish())
    }

    pub(crate) fn of_blocks(
        observation: &Observation,
        intensity: &Intensity,
        patch: &Patch,
        blocks: &[Block],
    ) -> Survey {
        let mut builder = Builder::new(observation, patch);
        for block in blocks {
            builder.add(block, intensity, patch);
        }
        builder.finish()
    }
}

struct Builder {
    survey: Survey,
    recentre: Recentre,
    times: BTreeSet<u64>,
    pairs: BTreeSet<(u32, u32)>,
    /// Every how many-th row goes into the sample.
    every: u64,
}

impl Builder {
    fn new(observation: &Observation, patch: &Patch) -> Self {
        let survey = Survey { w_m: (f64::INFINITY, f64::NEG_INFINITY), ..Survey::default() };
        let recentre = Recentre::new(&observation.phase_centre.frame(), patch.image_frame());
        Builder { survey, recentre, times: BTreeSet::new(), pairs: BTreeSet::new(), every: 1 }
    }

    fn add(&mut self, block: &Block, intensity: &Intensity, patch: &Patch) {
        let hands: Vec<usize> = intensity.groups().iter().flat_map(|(_, hands)| hands.iter().copied()).collect();
        for row in 0..block.rows() {
            let before = self.survey.used;
            for channel in 0..block.channels {
                let at = block.index(row, channel);
                let used = hands.iter().filter(|&&hand| block.weight[at + hand] > 0.0).count() as u64;
                self.survey.used += used;
                self.survey.samples += u64::from(used > 0);
            }
            if self.survey.used == before {
                continue;
            }
            let turned = self.recentre.turn(block.uvw_m[row]);
            let (u, v, _) = patch.effective(turned.uvw_m);
            let w = turned.uvw_m[2].abs();
            let s = &mut self.survey;
            s.u_m = s.u_m.max(u.abs());
            s.v_m = s.v_m.max(v.abs());
            s.mean_uv_m += u.hypot(v);
            if s.rows.is_multiple_of(self.every) {
                s.sample.push(SampleRow { pair: (block.first[row], block.second[row]), uvw_m: turned.uvw_m });
                if s.sample.len() == 2 * SAMPLE {
                    let mut at = 0;
                    s.sample.retain(|_| {
                        at += 1;
                        at % 2 == 1
                    });
                    self.every *= 2;
                }
            }
            s.rows += 1;
            s.w_m = (s.w_m.0.min(w), s.w_m.1.max(w));
            self.times.insert(block.mjd_utc[row].to_bits());
            self.pairs.insert((block.first[row], block.second[row]));
        }
    }

    fn finish(mut self) -> Survey {
        let all: Vec<f64> = self.times.iter().map(|&bits| f64::from_bits(bits)).collect();
        let mut intervals: Vec<f64> = all.windows(2).map(|pair| pair[1] - pair[0]).collect();
        intervals.sort_by(f64::total_cmp);
        self.survey.interval = intervals.get(intervals.len() / 2).copied().unwrap_or(0.0);
        let step = all.len().div_ceil(TIMES_KEPT).max(1);
        self.survey.times = all.iter().copied().step_by(step).chain(all.last().copied()).collect();
        self.survey.times.dedup();
        self.survey.all_times = all;
        self.survey.pairs = self.pairs.into_iter().collect();
        self.survey.mean_uv_m /= self.survey.rows.max(1) as f64;
        if self.survey.used == 0 {
            self.survey.w_m = (0.0, 0.0);
        }
        self.survey
    }
}
