//! Station quantities at the terms' directions and the bands' nodes: what kernel coefficients are products of.

use super::{Engine, POWER_LANES, Power, Prepared};
use crate::response::gridded::bands::Band;
use crate::response::gridded::plan::Partition;
use crate::response::gridded::terms::Terms;
use crate::response::gridded::vector::{Cell, DIRECTIONS, GridReal, fetch_soon, real};
use ndarray::LinalgScalar;
use num_complex::Complex64;
use rayon::prelude::*;

/// Which station quantities a table holds.
struct Quantities<'a, T> {
    terms: &'a Terms,
    bands: &'a [Band<T>],
    /// Cells for the quantities of a station in all directions.
    cells: usize,
    slots: usize,
}

/// Station quantities of one partition at its terms' directions, for one block of rows:
/// `[station][slot][span][band and node][block of directions]`:
/// runs go through one pair's spans one after the other.
pub(super) struct Table<T> {
    cells: Vec<Cell<T>>,
    /// Cells a station takes.
    per_station: usize,
    /// Nodes of all bands, and of those before each.
    nodes: usize,
    before: Vec<usize>,
    slots: usize,
    spans: usize,
}

impl<T> Table<T> {
    /// Where a station's cells start.
    pub(super) fn start(&self, span: u32, (band, node): (usize, usize), slot: usize, station: u32) -> usize {
        let at = (station as usize * self.slots + slot) * self.spans + span as usize;
        (at * self.nodes + self.before[band] + node) * self.per_station
    }

    /// A station's cells.
    pub(super) fn at(&self, span: u32, node: (usize, usize), slot: usize, station: u32) -> &[Cell<T>] {
        let start = self.start(span, node, slot, station);
        &self.cells[start..start + self.per_station]
    }

    /// Asks for a station's cells at all nodes in a span, if there is such a span.
    pub(super) fn fetch(&self, span: u32, slot: usize, station: u32) {
        if (span as usize) < self.spans {
            let start = self.start(span, (0, 0), slot, station);
            fetch_soon(&self.cells[start..start + self.nodes * self.per_station]);
        }
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
        let Quantities { terms, bands, cells: per_station, slots } = of;
        let lm: Vec<[f64; 2]> = terms.points.iter().map(|p| p.aim_lm).collect();
        // frequency and place in the span of every node
        let place_of = |x: f64| self.places.iter().position(|&place| place == x).unwrap_or(0);
        let at: Vec<(f64, usize)> = bands
            .iter()
            .flat_map(|band| band.nodes.iter().map(|&(a, b)| (band.hz[a], place_of(band.times[b]))))
            .collect();
        let mut before = Vec::with_capacity(bands.len());
        let mut nodes = 0;
        for band in bands {
            before.push(nodes);
            nodes += band.nodes.len();
        }
        let spans = prepared.angles.len();
        let per_span = nodes * per_station;
        let per_slot = spans * per_span;
        let mut taking_part = vec![false; self.stations];
        for &(p, q) in &partition.pairs {
            taking_part[p as usize] = true;
            taking_part[q as usize] = true;
        }
        let fill = |(station, cells): (usize, &mut [Cell<T>])| {
            if !taking_part[station] {
                return;
            }
            let mut voltages = [Vec::new(), Vec::new()];
            // a station that does not turn looks alike at all times: later spans copy the first
            let fresh = if self.beams.turns(station) { spans } else { 1 };
            for (span, angles) in prepared.angles.iter().enumerate().take(fresh) {
                for (node, &(hz, place)) in at.iter().enumerate() {
                    for &feed in &self.feeds {
                        voltages[feed].resize(lm.len(), Complex64::ZERO);
                        let angle = angles[place][station];
                        self.beams.voltages(station, angle, hz, feed, &lm, &mut voltages[feed]);
                    }
                    for slot in 0..slots {
                        let start = slot * per_slot + span * per_span + node * per_station;
                        write(slot, &voltages, lm.len(), &mut cells[start..start + per_station]);
                    }
                }
            }
            for slot in cells.chunks_exact_mut(per_slot) {
                let (known, rest) = slot.split_at_mut(fresh * per_span);
                rest.chunks_exact_mut(per_span).for_each(|cells| cells.copy_from_slice(&known[..per_span]));
            }
        };
        let mut cells = vec![Cell::zero(); self.stations * slots * per_slot];
        if !cells.is_empty() {
            cells.par_chunks_mut(slots * per_slot).enumerate().for_each(fill);
        }
        Table { cells, per_station, nodes, before, slots, spans }
    }

    pub(super) fn kernel_table(&self, prepared: &Prepared, index: usize) -> Table<T> {
        let partition = &self.plan.partitions[index];
        let feeds = self.feeds.clone();
        let write = |slot: usize, voltages: &[Vec<Complex64>; 2], count: usize, cells: &mut [Cell<T>]| {
            for (j, value) in voltages[feeds[slot]][..count].iter().enumerate() {
                let (pair, lane) = (j / DIRECTIONS, j % DIRECTIONS);
                (cells[2 * pair][lane], cells[2 * pair + 1][lane]) = (real(value.re), real(value.im));
            }
        };
        let bands = &self.bands[index].kernel;
        let cells = 2 * partition.kernel.points.len().div_ceil(DIRECTIONS);
        let of = Quantities { terms: &partition.kernel, bands, cells, slots: self.feeds.len() };
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
        let cells = partition.power.points.len().div_ceil(POWER_LANES);
        let of = Quantities { terms: &partition.power, bands, cells, slots: self.powers.len() };
        self.table(prepared, partition, of, write)
    }
}

/// The step in wavelengths per metre between channels, if it is the same for all of several.
pub(super) fn uniform_step(k: &[f64]) -> Option<f64> {
    let step = (*k.last()? - *k.first()?) / (k.len() - 1).max(1) as f64;
    let even = k.windows(2).all(|pair| (pair[1] - pair[0] - step).abs() <= 1e-9 * step.abs());
    (k.len() > 2 && even).then_some(step)
}
