//! The members of a partition: which screens M(x) its terms must stand for.

use super::patch::Patch;
use super::smooth::chebyshev_points;
use crate::beam::StationBeams;
use num_complex::Complex64;
use rand::Rng;
use rand::seq::index::sample;
use rand_chacha::ChaCha8Rng;
use rayon::prelude::*;
use std::collections::HashMap;
use std::f64::consts::TAU;

/// Times and channels that training members are drawn from, at most.
const TRAINING_TIMES: usize = 24;
const TRAINING_CHANNELS: usize = 5;
/// A direction in a patch.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct PatchPoint {
    /// Offset from the patch's centre, pixels.
    pub dx: f64,
    /// See `dx`.
    pub dy: f64,
    /// l, m about the aim.
    pub aim_lm: [f64; 2],
    /// Curvature κ less its middle value over the patch.
    pub bend: f64,
}

/// One member: a station pair at a time, a channel and a feed, and an offset in w.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Member {
    pub pair: (u32, u32),
    pub time: usize,
    pub hz: f64,
    /// 0 or 1, or [`MEAN`].
    pub feed: usize,
    /// w less that of its layer, wavelengths.
    pub dw: f64,
}

/// In place of a feed: the mean of both feeds' products, which a Stokes I product sees.
pub(crate) const MEAN: usize = 2;

/// What the members are made of.
pub(crate) struct Family<'a> {
    pub beams: &'a StationBeams,
    pub patch: &'a Patch,
    pub pairs: Vec<(u32, u32)>,
    /// Parallactic angles of all stations, for each time.
    pub angles: &'a [Vec<f64>],
    pub frequencies_hz: Vec<f64>,
    pub feeds: Vec<usize>,
    /// Largest |w − layer|, wavelengths.
    pub half_w: f64,
    /// Middle of the curvature over the patch.
    pub middle_bend: f64,
    /// The screens are |A|² instead of A* exp(2πi δw κ).
    pub power: bool,
}

impl Family<'_> {
    /// First and last pixel offset of the patch, in x and in y.
    pub(crate) fn span(&self) -> ((f64, f64), (f64, f64)) {
        (Patch::span(self.patch.size.0), Patch::span(self.patch.size.1))
    }

    pub(crate) fn point(&self, dx: f64, dy: f64) -> PatchPoint {
        let bend = self.patch.curvature(dx, dy) - self.middle_bend;
        PatchPoint { dx, dy, aim_lm: self.patch.aim_lm(dx, dy), bend }
    }

    pub(crate) fn random_points(&self, count: usize, rng: &mut ChaCha8Rng) -> Vec<PatchPoint> {
        let ((left, right), (low, high)) = self.span();
        (0..count)
            .map(|_| {
                let (a, b): (f64, f64) = (rng.random(), rng.random());
                self.point(left + a * (right - left), low + b * (high - low))
            })
            .collect()
    }

    /// Number of beam products (pairs, times, channels, feeds) there are.
    pub(crate) fn members(&self) -> usize {
        self.pairs.len() * self.angles.len() * self.frequencies_hz.len() * self.feeds.len()
    }

    /// Offsets in w that training members are drawn from: Chebyshev points, more of them the further phases turn.
    fn training_offsets(&self) -> Vec<f64> {
        if self.half_w == 0.0 {
            return vec![0.0];
        }
        let ((left, right), (low, high)) = self.span();
        let corner = self.point(left, low).bend.abs().max(self.point(right, high).bend.abs());
        let count = 7 + (12.0 * self.half_w * corner).ceil().min(60.0) as usize;
        chebyshev_points(-self.half_w, self.half_w, count)
    }

    fn draw(&self, times: &[usize], channels: &[usize], most: usize, rng: &mut ChaCha8Rng) -> Vec<Member> {
        let offsets = self.training_offsets();
        let all = self.pairs.len() * times.len() * channels.len() * self.feeds.len() * offsets.len();
        let chosen: Vec<usize> =
            if all <= most { (0..all).collect() } else { sample(rng, all, most).into_iter().collect() };
        chosen
            .into_iter()
            .map(|mut index| {
                let mut digit = |base: usize| {
                    let d = index % base;
                    index /= base;
                    d
                };
                Member {
                    dw: offsets[digit(offsets.len())],
                    feed: self.feeds[digit(self.feeds.len())],
                    hz: self.frequencies_hz[channels[digit(channels.len())]],
                    time: times[digit(times.len())],
                    pair: self.pairs[digit(self.pairs.len())],
                }
            })
            .collect()
    }

    /// Training members: spread evenly in time and frequency, at most `most`, drawn at random if there are more.
    pub(crate) fn training(&self, most: usize, rng: &mut ChaCha8Rng) -> Vec<Member> {
        let times = spread_evenly(self.angles.len(), TRAINING_TIMES);
        let channels = spread_evenly(self.frequencies_hz.len(), TRAINING_CHANNELS);
        self.draw(&times, &channels, most, rng)
    }

    /// Members from everything there is.
    pub(crate) fn random(&self, most: usize, rng: &mut ChaCha8Rng) -> Vec<Member> {
        let times: Vec<usize> = (0..self.angles.len()).collect();
        let channels: Vec<usize> = (0..self.frequencies_hz.len()).collect();
        let mut members = self.draw(&times, &channels, most, rng);
        for member in &mut members {
            let u: f64 = rng.random();
            member.dw = (2.0 * u - 1.0) * self.half_w;
        }
        members
    }

    /// The screens of `members` at `points`, `[member][point]`.
    pub(crate) fn screens(&self, members: &[Member], points: &[PatchPoint]) -> Vec<Complex64> {
        let lm: Vec<[f64; 2]> = points.iter().map(|p| p.aim_lm).collect();
        // members share stations at the same time and channel: each such look is evaluated once
        let mut index = HashMap::new();
        let mut looks: Vec<(u32, usize, u64, usize)> = Vec::new();
        let mut look_of = |station: u32, feed: usize, m: &Member| {
            let angle_time = if self.beams.turns(station as usize) { m.time } else { 0 };
            let key = (station, angle_time, m.hz.to_bits(), feed);
            *index.entry(key).or_insert_with(|| {
                looks.push(key);
                looks.len() - 1
            })
        };
        let mut ends_of = |m: &Member, feed: usize| (look_of(m.pair.0, feed, m), look_of(m.pair.1, feed, m));
        let ends: Vec<[(usize, usize); 2]> = members
            .iter()
            .map(|m| if m.feed == MEAN { [ends_of(m, 0), ends_of(m, 1)] } else { [ends_of(m, m.feed); 2] })
            .collect();
        let voltages: Vec<Vec<Complex64>> = looks
            .par_iter()
            .map(|&(station, time, hz_bits, feed)| {
                let mut out = vec![Complex64::ZERO; lm.len()];
                let angle = self.angles[time][station as usize];
                self.beams.voltages(station as usize, angle, f64::from_bits(hz_bits), feed, &lm, &mut out);
                out
            })
            .collect();
        let mut out = vec![Complex64::ZERO; members.len() * points.len()];
        out.par_chunks_mut(points.len().max(1)).zip(members.par_iter().zip(&ends)).for_each(
            |(out, (member, ends))| {
                for (at, (out, point)) in out.iter_mut().zip(points).enumerate() {
                    let product = |(p, q): (usize, usize)| voltages[p][at].conj() * voltages[q][at];
                    let mean = if member.feed == MEAN {
                        0.5 * (product(ends[0]) + product(ends[1]))
                    } else {
                        product(ends[0])
                    };
                    *out = if self.power {
                        Complex64::new(mean.norm_sqr(), 0.0)
                    } else if member.dw == 0.0 {
                        mean
                    } else {
                        mean * Complex64::cis(TAU * member.dw * point.bend)
                    };
                }
            },
        );
        out
    }
}

/// At most `most` indices out of `count`, evenly spread, ends included.
fn spread_evenly(count: usize, most: usize) -> Vec<usize> {
    if count <= most {
        return (0..count).collect();
    }
    (0..most).map(|i| i * (count - 1) / (most - 1)).collect()
}
