//! Station quantities at the terms' directions and the bands' nodes: what kernel coefficients are products of.

use super::{Engine, POWER_LANES, Power, Prepared};
use crate::response::gridded::bands::Band;
use crate::response::gridded::plan::Partition;
use crate::response::gridded::terms::Terms;
use crate::response::gridded::vector::{Cell, GridReal, LANES, real};
use ndarray::LinalgScalar;
use num_complex::Complex64;
use rayon::prelude::*;

/// Which station quantities a table holds.
struct Quantities<'a, T> {
    terms: &'a Terms,
    bands: &'a [Band<T>],
    /// Directions a cell holds.
    lanes: usize,
    slots: usize,
}

/// Station quantities of one partition at its terms' directions, for one block of rows:
/// `[time][band and node][slot][station][block of directions]`.
pub(super) struct Table<T> {
    cells: Vec<Cell<T>>,
    /// Cells a station takes.
    per_station: usize,
    /// Nodes of all bands, and of those before each.
    nodes: usize,
    before: Vec<usize>,
    slots: usize,
    stations: usize,
}

impl<T> Table<T> {
    /// Where a station's cells start.
    pub(super) fn start(&self, time: u32, (band, node): (usize, usize), slot: usize, station: u32) -> usize {
        let at = time as usize * self.nodes + self.before[band] + node;
        ((at * self.slots + slot) * self.stations + station as usize) * self.per_station
    }

    /// A station's cells.
    pub(super) fn at(&self, time: u32, node: (usize, usize), slot: usize, station: u32) -> &[Cell<T>] {
        let start = self.start(time, node, slot, station);
        &self.cells[start..start + self.per_station]
    }

    /// All cells.
    pub(super) fn cells(&self) -> &[Cell<T>] {
        &self.cells
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
        let Quantities { terms, bands, lanes, slots } = of;
        let lm: Vec<[f64; 2]> = terms.points.iter().map(|p| p.aim_lm).collect();
        let per_station = lm.len().div_ceil(lanes);
        let hz: Vec<f64> = bands.iter().flat_map(|band| band.hz.iter().copied()).collect();
        let mut before = Vec::with_capacity(bands.len());
        let mut nodes = 0;
        for band in bands {
            before.push(nodes);
            nodes += band.hz.len();
        }
        let per_node = slots * self.stations * per_station;
        let per_time = nodes * per_node;
        let mut taking_part = vec![false; self.stations];
        for &(p, q) in &partition.pairs {
            taking_part[p as usize] = true;
            taking_part[q as usize] = true;
        }
        let fill = |time: usize, only_turning: bool, cells: &mut [Cell<T>]| {
            let mut voltages = [Vec::new(), Vec::new()];
            for (&hz, cells) in hz.iter().zip(cells.chunks_exact_mut(per_node)) {
                for station in (0..self.stations).filter(|&s| taking_part[s]) {
                    if only_turning && !self.beams.turns(station) {
                        continue;
                    }
                    for &feed in &self.feeds {
                        voltages[feed].resize(lm.len(), Complex64::ZERO);
                        let angle = prepared.angles[time][station];
                        self.beams.voltages(station, angle, hz, feed, &lm, &mut voltages[feed]);
                    }
                    for slot in 0..slots {
                        let start = (slot * self.stations + station) * per_station;
                        write(slot, &voltages, lm.len(), &mut cells[start..start + per_station]);
                    }
                }
            }
        };
        let mut cells = vec![[T::zero(); 2 * LANES]; prepared.angles.len() * per_time];
        if !cells.is_empty() {
            // stations that do not turn look alike at all times: copy what the first time gave them
            let (first, rest) = cells.split_at_mut(per_time);
            fill(0, false, first);
            let first = &*first;
            let all_turn = (0..self.stations).all(|s| !taking_part[s] || self.beams.turns(s));
            rest.par_chunks_mut(per_time).enumerate().for_each(|(index, cells)| {
                if !all_turn {
                    cells.copy_from_slice(first);
                }
                fill(index + 1, true, cells);
            });
        }
        Table { cells, per_station, nodes, before, slots, stations: self.stations }
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
        let bands = &self.bands[index].kernel;
        let of = Quantities { terms: &partition.kernel, bands, lanes: LANES, slots: self.feeds.len() };
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
        let bands = &self.bands[index].power;
        let of = Quantities { terms: &partition.power, bands, lanes: POWER_LANES, slots: self.powers.len() };
        self.table(prepared, partition, of, write)
    }
}

/// The step in wavelengths per metre between channels, if it is the same for all of several.
pub(super) fn uniform_step(k: &[f64]) -> Option<f64> {
    let step = (*k.last()? - *k.first()?) / (k.len() - 1).max(1) as f64;
    let even = k.windows(2).all(|pair| (pair[1] - pair[0] - step).abs() <= 1e-9 * step.abs());
    (k.len() > 2 && even).then_some(step)
}
