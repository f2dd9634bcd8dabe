//! Patterns placed on the sky: which station has which pattern, and where it points.

use super::Pattern;
use crate::observation::{Mount, Observation, ParallacticAngles};
use crate::sky::Direction;
use num_complex::Complex64;
use std::sync::Arc;

/// One station's beam.
#[derive(Debug, Clone)]
pub struct StationBeam {
    /// The pattern.
    pub pattern: Arc<dyn Pattern>,
    /// Pointing offset (dx, dy) in the station frame, radians: the station really looks at (dx, dy).
    pub offset: [f64; 2],
    /// Name of the beam in the run file, for people.
    pub beam_name: String,
}

/// The beams of every station of one pointing, on the sky about its aim.
#[derive(Debug, Clone)]
pub struct StationBeams {
    beams: Vec<StationBeam>,
    turns: Vec<bool>,
    angles: ParallacticAngles,
    aim: Direction,
    radius: Option<f64>,
}

impl StationBeams {
    /// Beams of the stations of `observation`, one per station in its order. With `radius`, every response is 0 beyond
    /// that angle (as sine of the angle, a direction cosine) from the aim: a cut-off that is part of the definition.
    ///
    /// # Panics
    /// When the number of beams is not the number of stations.
    pub fn new(observation: &Observation, beams: Vec<StationBeam>, radius: Option<f64>) -> Self {
        assert_eq!(beams.len(), observation.stations.len(), "one beam per station");
        let turns = observation.stations.iter().map(|s| s.mount == Mount::AltAzimuth).collect();
        let angles = ParallacticAngles::new(observation);
        StationBeams { beams, turns, angles, aim: observation.aim, radius }
    }

    /// The direction all patterns are placed about.
    pub fn aim(&self) -> Direction {
        self.aim
    }

    /// Cut-off radius, a direction cosine from the aim.
    pub fn radius(&self) -> Option<f64> {
        self.radius
    }

    /// Number of stations.
    pub fn len(&self) -> usize {
        self.beams.len()
    }

    /// Whether there are no stations.
    pub fn is_empty(&self) -> bool {
        self.beams.is_empty()
    }

    /// The beam of a station.
    pub fn beam(&self, station: usize) -> &StationBeam {
        &self.beams[station]
    }

    /// Whether the station's response turns on the sky.
    pub fn turns(&self, station: usize) -> bool {
        let beam = &self.beams[station];
        self.turns[station] && !(beam.pattern.round() && beam.offset == [0.0, 0.0])
    }

    /// Whether all patterns are alike for both feeds.
    pub fn feeds_alike(&self) -> bool {
        self.beams.iter().all(|beam| beam.pattern.feeds_alike())
    }

    /// Parallactic angles of all stations at a time, radians (0 for stations that do not turn).
    pub fn angles_at(&self, mjd_utc: f64) -> Vec<f64> {
        let mut angles = self.angles.at(mjd_utc);
        for (station, angle) in angles.iter_mut().enumerate() {
            if !self.turns[station] {
                *angle = 0.0;
            }
        }
        angles
    }

    /// Voltages of a station at (l, m) about the aim, at parallactic angle `angle`. The cut-off radius is *not*
    /// applied here (see [`StationBeams::inside`]): away from it patterns are smooth, which kernels rely on.
    pub fn voltages(
        &self,
        station: usize,
        angle: f64,
        hz: f64,
        feed: usize,
        lm: &[[f64; 2]],
        out: &mut [Complex64],
    ) {
        let beam = &self.beams[station];
        let (s, c) = angle.sin_cos();
        let [dx, dy] = beam.offset;
        let points: Vec<[f64; 2]> = lm.iter().map(|&[l, m]| [l * c - m * s - dx, l * s + m * c - dy]).collect();
        beam.pattern.voltages(&points, hz, feed, out);
    }

    /// Whether (l, m) about the aim lies inside the cut-off radius.
    pub fn inside(&self, l: f64, m: f64) -> bool {
        self.radius.is_none_or(|radius| l.hypot(m) <= radius)
    }
}
