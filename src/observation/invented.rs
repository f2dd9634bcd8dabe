//! Invented observations: from `[simulate]` of a run file to rows for prediction to fill, and noise and flags upon them.
//!
//! Noise is Gaussian, of the stated standard deviation in the real part and in the imaginary part of every visibility;
//! weights are its inverse variance. Flags strike whole rows, each with the stated probability. Every pointing draws
//! both from random streams of its own, so that a pointing more, or another share of flags, leaves the noise as it was.

use super::{Block, Hand, Mount, Observation, ParallacticAngles, Schedule, Site, Station};
use crate::run::{LayoutMount, Problem, RunError, RunFile, Simulate};
use num_complex::Complex32;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::StandardNormal;

/// Times in one block, at least and at most: threads share a block by its times.
const TIMES_PER_BLOCK: (usize, usize) = (8, 64);
/// Visibilities in one block, where that leaves it times enough.
const VISIBILITIES_PER_BLOCK: usize = 1 << 20;
/// Most visibilities of a file: they are held in memory, 12 bytes each (3 GiB), while it is made.
const MOST_VISIBILITIES: usize = 1 << 28;
/// Stations that a BASELINE number has room for.
const MOST_STATIONS: usize = 2047;
const SECONDS_PER_DAY: f64 = 86_400.0;

/// One pointing of an invented observation.
#[derive(Debug, Clone)]
pub struct Invented {
    /// Stations, channels, hands, aim.
    pub observation: Observation,
    /// Its rows in the order of time; data 0 until they are predicted.
    pub blocks: Vec<Block>,
    /// Rows left out, since a station would have looked below the lowest elevation.
    pub rows_too_low: usize,
    /// Lowest and highest elevation of the aim at any station in the rows kept, radians; `None` without rows.
    pub elevation: Option<[f64; 2]>,
    /// Index of its entry `[[simulate.pointing]]`.
    pub entry: usize,
}

/// The stations of the layout that `[simulate]` names, Earth-fixed.
///
/// # Errors
/// When the layout cannot be read, naming line and column; when the site is no place, or there are too many stations.
pub fn invented_stations(run: &RunFile, simulate: &Simulate) -> Result<Vec<Station>, RunError> {
    let layout = simulate.layout()?;
    if layout.len() > MOST_STATIONS {
        let found = format!("{} stations in {}", layout.len(), simulate.stations.value.display());
        let problem =
            Problem::value(found, format!("at most {MOST_STATIONS}: the file format has room for no more"));
        return Err(run.complaint(simulate.stations.line, "simulate.stations", problem).into());
    }
    let [longitude, latitude] = simulate.site_deg;
    let site =
        Site::new(longitude.to_radians(), latitude.to_radians(), simulate.site_height_m).ok_or_else(|| {
            let problem = Problem::value(format!("the site [{longitude}, {latitude}]"), "a place on the Earth");
            run.complaint(simulate.line, "simulate.site_deg", problem)
        })?;
    let station = |layout: crate::run::LayoutStation| Station {
        name: layout.name,
        position_m: site.to_earth(layout.east_north_up_m),
        mount: match layout.mount {
            LayoutMount::AltAzimuth => Mount::AltAzimuth,
            LayoutMount::Equatorial => Mount::Equatorial,
        },
        diameter_m: layout.diameter_m,
        feed_angle: 0.0,
    };
    Ok(layout.into_iter().map(station).collect())
}

/// All pointings that `[simulate]` asks for: rows with u, v, w, weights, and data 0.
///
/// # Errors
/// When the stations cannot be had, the file would hold more than memory should, or the sky is too low for all rows.
pub fn invent(run: &RunFile, simulate: &Simulate) -> Result<Vec<Invented>, RunError> {
    let stations = invented_stations(run, simulate)?;
    let hands: Vec<Hand> = simulate.hands.iter().filter_map(|name| Hand::from_name(name)).collect();
    let pairs = stations.len() * (stations.len() - 1) / 2;
    let visibilities = [simulate.times, simulate.channels, hands.len(), simulate.pointings.len()]
        .iter()
        .try_fold(pairs, |product, &count| product.checked_mul(count))
        .filter(|&count| count <= MOST_VISIBILITIES);
    if visibilities.is_none() {
        let found = format!(
            "{} pairs of stations × {} times × {} channels × {} hands × {} pointings",
            pairs,
            simulate.times,
            simulate.channels,
            hands.len(),
            simulate.pointings.len()
        );
        let expected = format!("at most {MOST_VISIBILITIES} visibilities in one file; simulate in parts");
        return Err(run.complaint(simulate.line, "simulate", Problem::value(found, expected)).into());
    }
    let weight = if simulate.noise_jy > 0.0 { 1.0 / (simulate.noise_jy * simulate.noise_jy) } else { 1.0 } as f32;
    if !(weight.is_finite() && weight > 0.0) {
        let problem = Problem::value(
            format!("a noise of {:e} Jy", simulate.noise_jy),
            "0, or a noise whose inverse square is a weight in single precision (about 1e-19 to 1e19 Jy)",
        );
        return Err(run.complaint(simulate.line, "simulate.noise_jy", problem).into());
    }
    let channel = |index: usize| simulate.first_hz + index as f64 * simulate.channel_hz;
    let mut schedule = Schedule {
        array_name: simulate.array.clone(),
        stations,
        mjd_utc: Vec::new(),
        frequencies_hz: (0..simulate.channels).map(channel).collect(),
        width_hz: simulate.channel_hz,
        hands,
        weight,
    };
    let lowest = simulate.lowest_elevation_deg.to_radians();
    let per_time = (pairs * simulate.channels * schedule.hands.len()).max(1);
    let times_per_block = (VISIBILITIES_PER_BLOCK / per_time).clamp(TIMES_PER_BLOCK.0, TIMES_PER_BLOCK.1);
    let mut invented = Vec::with_capacity(simulate.pointings.len());
    for (entry, pointing) in simulate.pointings.iter().enumerate() {
        let time = |index: usize| pointing.start_mjd_utc + index as f64 * simulate.interval_s / SECONDS_PER_DAY;
        let times: Vec<f64> = (0..simulate.times).map(time).collect();
        schedule.mjd_utc.clear();
        let (mut observation, _) = schedule.pointing(&pointing.name, pointing.aim);
        observation.origin = run.path.display().to_string();
        let mut one = Invented { observation, blocks: Vec::new(), rows_too_low: 0, elevation: None, entry };
        let angles = ParallacticAngles::new(&one.observation);
        for chunk in times.chunks(times_per_block) {
            schedule.mjd_utc = chunk.to_vec();
            let (_, block) = schedule.pointing(&pointing.name, pointing.aim);
            one.keep_high_rows(block, &angles, lowest, pairs);
        }
        invented.push(one);
    }
    if invented.iter().all(|one| one.blocks.is_empty()) {
        let found = format!(
            "no row: every aim stays below {}° at every time, at one station of each pair or both",
            simulate.lowest_elevation_deg
        );
        let expected = "times when the aims are up (start_utc, times, interval_s), or a lower lowest_elevation_deg";
        return Err(run.complaint(simulate.line, "simulate.start_utc", Problem::value(found, expected)).into());
    }
    Ok(invented)
}

impl Invented {
    /// Number of rows.
    pub fn rows(&self) -> usize {
        self.blocks.iter().map(Block::rows).sum()
    }

    /// Number of visibilities, flagged ones among them.
    pub fn visibilities(&self) -> usize {
        self.blocks.iter().map(|block| block.data.len()).sum()
    }

    /// Number of rows without any weight.
    pub fn flagged_rows(&self) -> usize {
        let flagged = |block: &Block| {
            let cells = (block.channels * block.hands).max(1);
            block.weight.chunks(cells).filter(|weights| weights.iter().all(|weight| *weight == 0.0)).count()
        };
        self.blocks.iter().map(flagged).sum()
    }

    /// Takes the rows of `block` whose two stations both see the aim at or above `lowest`.
    fn keep_high_rows(&mut self, block: Block, angles: &ParallacticAngles, lowest: f64, pairs: usize) {
        let cells = block.channels * block.hands;
        let mut kept = Block { channels: block.channels, hands: block.hands, ..Block::default() };
        for first in (0..block.rows()).step_by(pairs.max(1)) {
            let elevations = angles.elevations_at(block.mjd_utc[first]);
            for row in first..(first + pairs).min(block.rows()) {
                let (p, q) = (elevations[block.first[row] as usize], elevations[block.second[row] as usize]);
                if p.min(q) < lowest {
                    self.rows_too_low += 1;
                    continue;
                }
                let [low, high] = self.elevation.unwrap_or([f64::INFINITY, f64::NEG_INFINITY]);
                self.elevation = Some([low.min(p).min(q), high.max(p).max(q)]);
                kept.mjd_utc.push(block.mjd_utc[row]);
                kept.uvw_m.push(block.uvw_m[row]);
                kept.first.push(block.first[row]);
                kept.second.push(block.second[row]);
                kept.data.extend_from_slice(&block.data[row * cells..][..cells]);
                kept.weight.extend_from_slice(&block.weight[row * cells..][..cells]);
            }
        }
        if kept.rows() > 0 {
            self.blocks.push(kept);
        }
    }

    /// Adds the noise of `[simulate]` to the data, and flags rows by giving them the weight 0.
    pub fn add_noise_and_flags(&mut self, simulate: &Simulate) {
        let stream = |number: usize| {
            let mut random = ChaCha8Rng::seed_from_u64(simulate.seed);
            random.set_stream(number as u64);
            random
        };
        let (mut noise, mut flags) = (stream(2 * self.entry), stream(2 * self.entry + 1));
        let mut draw = || simulate.noise_jy * noise.sample::<f64, _>(StandardNormal);
        for block in &mut self.blocks {
            let cells = block.channels * block.hands;
            if simulate.noise_jy > 0.0 {
                for value in &mut block.data {
                    let (re, im) = (f64::from(value.re) + draw(), f64::from(value.im) + draw());
                    *value = Complex32::new(re as f32, im as f32);
                }
            }
            for weights in block.weight.chunks_mut(cells.max(1)) {
                if flags.random::<f64>() < simulate.flagged_fraction {
                    weights.fill(0.0);
                }
            }
        }
    }
}
