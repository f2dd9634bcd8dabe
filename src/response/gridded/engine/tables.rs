//! Station quantities at the terms' directions: what a visibility's kernel coefficients are products of.
//!
//! Patterns are evaluated at a few frequencies and interpolated to the channels where that is exact enough.

use super::{Engine, POWER_LANES, Power, Prepared};
use crate::beam::StationBeams;
use crate::response::gridded::plan::Partition;
use crate::response::gridded::smooth::{chebyshev_points, interpolation};
use crate::response::gridded::terms::Terms;
use crate::response::gridded::vector::{Cell, GridReal, LANES, real};
use crate::response::rows::wavelengths_per_metre;
use ndarray::LinalgScalar;
use num_complex::Complex64;
use rayon::prelude::*;

/// Frequencies that patterns are evaluated at, and how their values there make those of every channel.
pub(super) struct Nodes<T> {
    hz: Vec<f64>,
    /// `[channel][node]`; `None` where every channel is a node.
    weights: Option<Vec<Vec<T>>>,
}

/// Which station quantities a table holds.
struct Quantities<'a, T> {
    terms: &'a Terms,
    nodes: &'a Nodes<T>,
    /// Terms a cell holds.
    lanes: usize,
    slots: usize,
}

/// Station quantities of one partition at its terms' directions, for one block of rows.
pub(super) struct Table<T> {
    pub(super) cells: Vec<Cell<T>>,
    /// Cells a station takes.
    per_station: usize,
    channels: usize,
    slots: usize,
}

impl<T> Table<T> {
    pub(super) fn at(&self, time: u32, channel: usize, slot: usize, stations: usize, station: u32) -> u32 {
        let entry = ((time as usize * self.channels + channel) * self.slots + slot) * stations + station as usize;
        (entry * self.per_station) as u32
    }
}

impl<T: GridReal + LinalgScalar> Engine<T> {
    /// Fills a table: `write` turns a station's voltages of both feeds at the terms' directions into a slot's values.
    fn table(
        &self,
        prepared: &Prepared,
        partition: &Partition,
        of: Quantities<T>,
        write: impl Fn(usize, &[Vec<Complex64>; 2], usize, &mut [Cell<T>]) + Sync,
    ) -> Table<T> {
        let Quantities { terms, nodes, lanes, slots } = of;
        let lm: Vec<[f64; 2]> = terms.points.iter().map(|p| p.aim_lm).collect();
        let per_station = terms.points.len().div_ceil(lanes);
        let channels = partition.channels.len();
        let per_channel = slots * self.stations * per_station;
        let per_time = channels * per_channel;
        let mut taking_part = vec![false; self.stations];
        for &(p, q) in &partition.pairs {
            taking_part[p as usize] = true;
            taking_part[q as usize] = true;
        }
        let fill = |time: usize, only_turning: bool, cells: &mut [Cell<T>], scratch: &mut Vec<Cell<T>>| {
            let mut voltages = [Vec::new(), Vec::new()];
            let count = nodes.hz.len();
            scratch.resize(count * slots * per_station, [T::zero(); 2 * LANES]);
            for station in (0..self.stations).filter(|&s| taking_part[s]) {
                if only_turning && !self.beams.turns(station) {
                    continue;
                }
                for (node, at_node) in nodes.hz.iter().zip(scratch.chunks_exact_mut(slots * per_station)) {
                    for &feed in &self.feeds {
                        voltages[feed].resize(lm.len(), Complex64::ZERO);
                        let angle = prepared.angles[time][station];
                        self.beams.voltages(station, angle, *node, feed, &lm, &mut voltages[feed]);
                    }
                    for (slot, cells) in at_node.chunks_exact_mut(per_station).enumerate() {
                        write(slot, &voltages, lm.len(), cells);
                    }
                }
                for slot in 0..slots {
                    for channel in 0..channels {
                        let start = channel * per_channel + (slot * self.stations + station) * per_station;
                        let out = &mut cells[start..start + per_station];
                        let from = |node: usize| &scratch[(node * slots + slot) * per_station..][..per_station];
                        match &nodes.weights {
                            None => out.copy_from_slice(from(channel)),
                            Some(weights) => {
                                out.fill([T::zero(); 2 * LANES]);
                                for (node, &weight) in weights[channel].iter().enumerate() {
                                    for (out, cell) in out.iter_mut().zip(from(node)) {
                                        out.iter_mut().zip(cell).for_each(|(o, &c)| *o = *o + c * weight);
                                    }
                                }
                            }
                        }
                    }
                }
            }
        };
        let mut cells = vec![[T::zero(); 2 * LANES]; prepared.angles.len() * per_time];
        if !cells.is_empty() {
            // stations that do not turn look alike at all times: copy what the first time gave them
            let (first, rest) = cells.split_at_mut(per_time);
            fill(0, false, first, &mut Vec::new());
            let first = &*first;
            let all_turn = (0..self.stations).all(|s| !taking_part[s] || self.beams.turns(s));
            rest.par_chunks_mut(per_time).enumerate().for_each_init(Vec::new, |scratch, (index, cells)| {
                if !all_turn {
                    cells.copy_from_slice(first);
                }
                fill(index + 1, true, cells, scratch);
            });
        }
        Table { cells, per_station, channels, slots }
    }

    pub(super) fn kernel_table(&self, prepared: &Prepared, index: usize) -> Table<T> {
        let partition = &self.plan.partitions[index];
        let feeds = self.feeds.clone();
        let write = |slot: usize, voltages: &[Vec<Complex64>; 2], count: usize, cells: &mut [Cell<T>]| {
            for (j, value) in voltages[feeds[slot]][..count].iter().enumerate() {
                cells[j / LANES][j % LANES] = real(value.re);
                cells[j / LANES][j % LANES + LANES] = real(value.im);
            }
        };
        let nodes = &self.bands[index].kernel;
        let of = Quantities { terms: &partition.kernel, nodes, lanes: LANES, slots: self.feeds.len() };
        self.table(prepared, partition, of, write)
    }

    pub(super) fn power_table(&self, prepared: &Prepared, index: usize) -> Table<T> {
        let partition = &self.plan.partitions[index];
        let powers = self.powers.clone();
        let write = |slot: usize, voltages: &[Vec<Complex64>; 2], count: usize, cells: &mut [Cell<T>]| {
            for j in 0..count {
                let value = match powers[slot] {
                    Power::Feed(feed) => voltages[feed][j].norm_sqr(),
                    Power::CrossRe => (voltages[0][j] * voltages[1][j].conj()).re,
                    Power::CrossIm => (voltages[0][j] * voltages[1][j].conj()).im,
                };
                cells[j / POWER_LANES][j % POWER_LANES] = real(value);
            }
        };
        let nodes = &self.bands[index].power;
        let of = Quantities { terms: &partition.power, nodes, lanes: POWER_LANES, slots: self.powers.len() };
        self.table(prepared, partition, of, write)
    }
}

/// The step in wavelengths per metre between channels, if it is the same for all of several.
pub(super) fn uniform_step(hz: &[f64]) -> Option<f64> {
    let step = (*hz.last()? - hz.first()?) / (hz.len() - 1).max(1) as f64;
    let even = hz.windows(2).all(|pair| (pair[1] - pair[0] - step).abs() <= 1e-9 * step.abs());
    (hz.len() > 2 && even).then(|| wavelengths_per_metre(step))
}

impl<T: GridReal> Nodes<T> {
    /// The fewest Chebyshev points in frequency through which every station's voltages at the terms' directions are
    /// interpolated to within `error`, measured at all channels and a few times; every channel where that is no fewer.
    pub(super) fn choose(
        beams: &StationBeams,
        feeds: &[usize],
        terms: &Terms,
        angles: &[Vec<f64>],
        hz: &[f64],
        error: f64,
    ) -> Self {
        let every = Nodes { hz: hz.to_vec(), weights: None };
        let (low, high) = hz.iter().fold((f64::INFINITY, 0.0f64), |(low, high), &f| (low.min(f), high.max(f)));
        let lm: Vec<[f64; 2]> = terms.points.iter().map(|p| p.aim_lm).collect();
        let voltages = |frequencies: &[f64]| -> Vec<Vec<Complex64>> {
            frequencies
                .par_iter()
                .map(|&hz| {
                    let mut all = Vec::new();
                    for angles in angles {
                        for (station, &angle) in angles.iter().enumerate() {
                            for &feed in feeds {
                                let mut out = vec![Complex64::ZERO; lm.len()];
                                beams.voltages(station, angle, hz, feed, &lm, &mut out);
                                all.append(&mut out);
                            }
                        }
                    }
                    all
                })
                .collect()
        };
        if hz.len() < 6 {
            return every;
        }
        let probes: Vec<f64> = hz.iter().copied().step_by(hz.len().div_ceil(12)).collect();
        let truth = voltages(&probes);
        for count in (3..).take_while(|&count| 3 * count <= 2 * hz.len() && count <= 24) {
            let nodes = chebyshev_points(low, high, count);
            let known = voltages(&nodes);
            let matrix = interpolation(&nodes, &probes);
            let worst = truth
                .iter()
                .enumerate()
                .flat_map(|(probe, truth)| truth.iter().enumerate().map(move |(at, value)| (probe, at, *value)))
                .map(|(probe, at, value)| {
                    let sum: Complex64 = (0..count).map(|n| known[n][at] * matrix[[probe, n]]).sum();
                    (sum - value).norm()
                })
                .fold(0.0, f64::max);
            if worst <= error {
                let matrix = interpolation(&nodes, hz);
                let weights = matrix.outer_iter().map(|row| row.iter().map(|&w| real(w)).collect()).collect();
                return Nodes { hz: nodes, weights: Some(weights) };
            }
        }
        every
    }
}
