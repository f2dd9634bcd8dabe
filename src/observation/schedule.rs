//! Observations that have not been made: rows with u, v, w for a list of stations and times, to be filled by prediction.

use super::{Block, Hand, Observation, Station, baseline_uvw};
use crate::sky::Direction;
use num_complex::Complex32;

/// What is to be observed.
#[derive(Debug, Clone)]
pub struct Schedule {
    /// Name of the array.
    pub array_name: String,
    /// Stations, Earth-fixed.
    pub stations: Vec<Station>,
    /// Mid-integration times, Modified Julian Date, UTC.
    pub mjd_utc: Vec<f64>,
    /// Channel centres, Hz.
    pub frequencies_hz: Vec<f64>,
    /// Channel width, Hz.
    pub width_hz: f64,
    /// Correlation products.
    pub hands: Vec<Hand>,
    /// Weight of every visibility, Jy⁻².
    pub weight: f32,
}

impl Schedule {
    /// One pointing towards `aim` (also the phase centre): all pairs of stations at all times, data 0. UT1 = UTC.
    pub fn pointing(&self, name: &str, aim: Direction) -> (Observation, Block) {
        let observation = Observation {
            origin: "schedule".to_owned(),
            name: name.to_owned(),
            array_name: self.array_name.clone(),
            phase_centre: aim,
            aim,
            stations: self.stations.clone(),
            frequencies_hz: self.frequencies_hz.clone(),
            widths_hz: vec![self.width_hz; self.frequencies_hz.len()],
            hands: self.hands.clone(),
            ut1_utc_s: 0.0,
            notes: Vec::new(),
        };
        let frame = aim.frame();
        let mut block = Block { channels: self.frequencies_hz.len(), hands: self.hands.len(), ..Block::default() };
        for &mjd in &self.mjd_utc {
            let uvw: Vec<[f64; 3]> =
                self.stations.iter().map(|s| baseline_uvw(s.position_m, &frame, mjd, 0.0)).collect();
            for p in 0..self.stations.len() {
                for q in p + 1..self.stations.len() {
                    block.mjd_utc.push(mjd);
                    block.uvw_m.push(std::array::from_fn(|axis| uvw[q][axis] - uvw[p][axis]));
                    block.first.push(p as u32);
                    block.second.push(q as u32);
                }
            }
        }
        let count = block.rows() * block.channels * block.hands;
        block.data = vec![Complex32::ZERO; count];
        block.weight = vec![self.weight; count];
        (observation, block)
    }
}
