//! The measurement equation summed directly, in double precision: slow, and the judge of everything faster.

use super::rows::{Intensity, Recentre, Seen, cis_turns, rows_by_time, wavelengths_per_metre};
use super::{Response, ResponseError, Sums};
use crate::beam::StationBeams;
use crate::observation::{Block, BlockSource, Observation};
use crate::sky::{Component, Direction, ImageGeometry, TangentFrame};
use num_complex::{Complex32, Complex64};
use rayon::prelude::*;

/// Directions handled by one thread at a time.
const POINTS_PER_TASK: usize = 32;

/// Direct sums over visibilities and directions. Cost: visibilities × directions.
///
/// The order of every sum is fixed, so results do not depend on the number of threads.
#[derive(Debug, Clone)]
pub struct Exact {
    geometry: ImageGeometry,
    pub(super) beams: StationBeams,
    pub(super) recentre: Recentre,
    image_frame: TangentFrame,
    pub(super) frequencies_hz: Vec<f64>,
    pub(super) intensity: Intensity,
}

/// A direction as the sums need it.
pub(super) struct Point {
    /// l, m, n − 1 about the image centre.
    pub(super) lmn1: [f64; 3],
    /// l, m about the aim.
    aim_lm: [f64; 2],
    /// Inside the response cut-off and in front of the stations.
    seen: bool,
}

impl Exact {
    /// The exact response of one pointing.
    pub fn new(observation: &Observation, beams: StationBeams, geometry: ImageGeometry) -> Self {
        let image_frame = geometry.frame();
        Exact {
            geometry,
            recentre: Recentre::new(&observation.phase_centre.frame(), &image_frame),
            image_frame,
            frequencies_hz: observation.frequencies_hz.clone(),
            intensity: Intensity::new(observation, beams.feeds_alike()),
            beams,
        }
    }

    pub(super) fn point(&self, direction: Direction) -> Point {
        let [l, m, _] = self.image_frame.lmn(direction);
        let [al, am, an] = self.beams.aim().frame().lmn(direction);
        let r2 = l * l + m * m;
        // n − 1 without cancellation near the centre
        let n1 = -r2 / (1.0 + (1.0 - r2).max(0.0).sqrt());
        Point { lmn1: [l, m, n1], aim_lm: [al, am], seen: an > 0.0 && self.beams.inside(al, am) }
    }

    /// N and W in given directions, summed over all blocks of `source`.
    ///
    /// # Errors
    /// When the source cannot be read.
    pub fn adjoint_at(
        &self,
        source: &mut dyn BlockSource,
        directions: &[Direction],
    ) -> Result<Vec<(f64, f64)>, ResponseError> {
        let points: Vec<Point> = directions.iter().map(|&d| self.point(d)).collect();
        let mut sums = vec![(0.0, 0.0); points.len()];
        source.rewind()?;
        while let Some(block) = source.next_block()? {
            let times = rows_by_time(&block);
            sums.par_chunks_mut(POINTS_PER_TASK)
                .zip(points.par_chunks(POINTS_PER_TASK))
                .for_each(|(sums, points)| self.add_block(&block, &times, points, sums));
        }
        Ok(sums)
    }

    /// Beam products of every station at `points`, `[feed][station][point]`.
    pub(super) fn station_voltages(&self, angles: &[f64], hz: f64, points: &[Point]) -> [Vec<Vec<Complex64>>; 2] {
        let lm: Vec<[f64; 2]> = points.iter().map(|p| p.aim_lm).collect();
        let of_feed = |feed: usize| -> Vec<Vec<Complex64>> {
            (0..self.beams.len())
                .map(|station| {
                    let mut out = vec![Complex64::ZERO; points.len()];
                    self.beams.voltages(station, angles[station], hz, feed, &lm, &mut out);
                    for (value, point) in out.iter_mut().zip(points) {
                        if !point.seen {
                            *value = Complex64::ZERO;
                        }
                    }
                    out
                })
                .collect()
        };
        let first = of_feed(0);
        let second = if self.beams.feeds_alike() { Vec::new() } else { of_feed(1) };
        [first, second]
    }

    pub(super) fn product(
        &self,
        voltages: &[Vec<Vec<Complex64>>; 2],
        seen: Seen,
        p: usize,
        q: usize,
        at: usize,
    ) -> Complex64 {
        let of = |feed: usize| voltages[feed][p][at] * voltages[feed][q][at].conj();
        match seen {
            Seen::Feed(feed) => of(feed),
            Seen::Mean => 0.5 * (of(0) + of(1)),
        }
    }

    fn add_block(&self, block: &Block, times: &[(f64, Vec<usize>)], points: &[Point], sums: &mut [(f64, f64)]) {
        for (time, rows) in times {
            let angles = self.beams.angles_at(*time);
            for (channel, &hz) in self.frequencies_hz.iter().enumerate() {
                let voltages = self.station_voltages(&angles, hz, points);
                let k = wavelengths_per_metre(hz);
                for &row in rows {
                    let turned = self.recentre.turn(block.uvw_m[row]);
                    let [u, v, w] = turned.uvw_m;
                    let (p, q) = (block.first[row] as usize, block.second[row] as usize);
                    for (seen, hands) in self.intensity.groups() {
                        let (value, weight) = Intensity::weighted(block, block.index(row, channel), hands);
                        if weight == 0.0 {
                            continue;
                        }
                        for (at, (point, sum)) in points.iter().zip(sums.iter_mut()).enumerate() {
                            let a = self.product(&voltages, *seen, p, q, at);
                            let [l, m, n1] = point.lmn1;
                            let turns = k * (turned.shift_m + u * l + v * m + w * n1);
                            sum.0 += (a.conj() * value * cis_turns(turns)).re;
                            sum.1 += weight * a.norm_sqr();
                        }
                    }
                }
            }
        }
    }
}

impl Response for Exact {
    fn geometry(&self) -> &ImageGeometry {
        &self.geometry
    }

    fn predict(&self, sky: &[Component], blocks: &mut [Block]) -> Result<(), ResponseError> {
        blocks.iter_mut().for_each(|block| self.predict_exactly(sky, block));
        Ok(())
    }

    fn adjoint(&self, source: &mut dyn BlockSource, sums: &mut Sums) -> Result<(), ResponseError> {
        let (width, height) = (self.geometry.width, self.geometry.height);
        let directions: Vec<Direction> = (0..width * height)
            .map(|i| {
                let (l, m) = self.geometry.lm((i % width) as f64, (i / width) as f64);
                self.image_frame.direction(l, m).unwrap_or(self.geometry.centre)
            })
            .collect();
        for (i, (n, w)) in self.adjoint_at(source, &directions)?.into_iter().enumerate() {
            sums.numerator[[i / width, i % width]] += n;
            sums.normaliser[[i / width, i % width]] += w;
        }
        Ok(())
    }
}

impl Exact {
    /// As [`Response::predict`], which for direct sums cannot fail.
    pub fn predict_exactly(&self, sky: &[Component], block: &mut Block) {
        let points: Vec<Point> = sky.iter().map(|c| self.point(c.direction)).collect();
        let fluxes: Vec<Vec<f64>> =
            self.frequencies_hz.iter().map(|&hz| sky.iter().map(|c| c.flux_at(hz)).collect()).collect();
        let times = rows_by_time(block);
        let predicted: Vec<(usize, usize, Complex64)> = times
            .par_iter()
            .flat_map_iter(|(time, rows)| self.predict_time(block, *time, rows, &points, &fluxes))
            .collect();
        block.data.fill(Complex32::ZERO);
        for (at, hand, value) in predicted {
            block.data[at + hand] = Complex32::new(value.re as f32, value.im as f32);
        }
    }

    fn predict_time(
        &self,
        block: &Block,
        time: f64,
        rows: &[usize],
        points: &[Point],
        fluxes: &[Vec<f64>],
    ) -> Vec<(usize, usize, Complex64)> {
        let angles = self.beams.angles_at(time);
        let mut out = Vec::with_capacity(rows.len() * block.channels * block.hands);
        for (channel, &hz) in self.frequencies_hz.iter().enumerate() {
            let voltages = self.station_voltages(&angles, hz, points);
            let k = wavelengths_per_metre(hz);
            for &row in rows {
                let turned = self.recentre.turn(block.uvw_m[row]);
                let [u, v, w] = turned.uvw_m;
                let (p, q) = (block.first[row] as usize, block.second[row] as usize);
                for (seen, hands) in self.intensity.groups() {
                    let mut sum = Complex64::ZERO;
                    for (at, point) in points.iter().enumerate() {
                        let [l, m, n1] = point.lmn1;
                        let fringe = cis_turns(-k * (turned.shift_m + u * l + v * m + w * n1));
                        sum += fluxes[channel][at] * self.product(&voltages, *seen, p, q, at) * fringe;
                    }
                    out.extend(hands.iter().map(|&hand| (block.index(row, channel), hand, sum)));
                }
            }
        }
        out
    }
}
