//! The normaliser: sums of weights times |A|² of every visibility, in the few directions that stand for all.

use super::prepare::{Prepared, Row};
use super::tables::Table;
use super::{Engine, POWER_LANES};
use crate::observation::{Block, BlockSource};
use crate::response::ResponseError;
use crate::response::gridded::bands::chebyshev;
use crate::response::gridded::patch::Patch;
use crate::response::gridded::plan::Partition;
use crate::response::gridded::smooth::interpolation;
use crate::response::gridded::vector::{GridReal, Share, accumulate, real};
use crate::response::rows::{Intensity, Seen};
use ndarray::{Array2, LinalgScalar};
use rayon::prelude::*;
use std::ops::Range;

/// Shares handed to the inner loop at once.
const SHARES: usize = 256;

/// A real station quantity whose pairwise products make |A|².
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Power {
    /// |g|² of a feed.
    Feed(usize),
    /// Real part of g₀ g₁*.
    CrossRe,
    /// Imaginary part of g₀ g₁*.
    CrossIm,
}

impl Power {
    /// The quantities that a product is made of, and how much of the weight each gets.
    pub(super) fn of(seen: Seen) -> Vec<(Power, f64)> {
        match seen {
            Seen::Feed(feed) => vec![(Power::Feed(feed), 1.0)],
            Seen::Mean => {
                vec![(Power::Feed(0), 0.25), (Power::Feed(1), 0.25), (Power::CrossRe, 0.5), (Power::CrossIm, 0.5)]
            }
        }
    }
}

impl<T: GridReal + LinalgScalar> Engine<T> {
    /// Power coefficients of every partition, all 0.
    pub(super) fn no_powers(&self) -> Vec<Vec<[f64; POWER_LANES]>> {
        let blank = |p: &Partition| vec![[0.0; POWER_LANES]; p.power.points.len().div_ceil(POWER_LANES)];
        self.plan.partitions.iter().map(blank).collect()
    }

    /// Adds a block's share to the power coefficients of every partition.
    pub(super) fn add_block_powers(
        &self,
        block: &Block,
        prepared: &Prepared,
        powers: &mut [Vec<[f64; POWER_LANES]>],
    ) {
        // sums of a fixed number of parts: what they come to does not depend on the number of threads
        const PARTS: usize = 16;
        let rows = block.rows();
        for (index, out) in powers.iter_mut().enumerate() {
            let table = self.power_table(prepared, index);
            let parts: Vec<Vec<[f64; POWER_LANES]>> = (0..PARTS)
                .into_par_iter()
                .map(|part| {
                    let mut sums = vec![[0.0; POWER_LANES]; out.len()];
                    let rows = part * rows / PARTS..(part + 1) * rows / PARTS;
                    self.add_powers(index, block, prepared, &table, rows, &mut sums);
                    sums
                })
                .collect();
            for part in &parts {
                for (out, part) in out.iter_mut().flatten().zip(part.iter().flatten()) {
                    *out += part;
                }
            }
        }
    }

    /// Adds W of all blocks of `source` to `normaliser`, and nothing else.
    pub(in crate::response::gridded) fn normaliser(
        &self,
        source: &mut dyn BlockSource,
        normaliser: &mut Array2<f64>,
    ) -> Result<(), ResponseError> {
        let mut powers = self.no_powers();
        source.rewind()?;
        let mut kept = None;
        while let Some(block) = source.lend_block(&mut kept)? {
            let prepared = self.prepare(block);
            self.check_reach(block, &prepared)?;
            self.add_block_powers(block, &prepared, &mut powers);
        }
        for (partition, powers) in self.plan.partitions.iter().zip(&powers) {
            self.finish_powers(partition, powers, normaliser);
        }
        Ok(())
    }

    /// Adds the share of some rows (positions in the order) to a partition's power coefficients. Weights are summed to the nodes
    /// first.
    fn add_powers(
        &self,
        partition_index: usize,
        block: &Block,
        prepared: &Prepared,
        table: &Table<T>,
        rows: Range<usize>,
        out: &mut [[f64; POWER_LANES]],
    ) {
        let class = partition_index - partition_index % self.plan.channel_groups.len();
        let slot_of = |power: Power| self.powers.iter().position(|&p| p == power).unwrap_or(0);
        let groups: Vec<(Vec<_>, &[usize])> = self
            .intensity
            .groups()
            .iter()
            .map(|(seen, hands)| {
                (
                    Power::of(*seen).into_iter().map(|(power, part)| (slot_of(power), part)).collect(),
                    hands.as_slice(),
                )
            })
            .collect();
        let mut batch: Vec<Share<T>> = Vec::with_capacity(2 * SHARES);
        let mut flush = |batch: &mut Vec<Share<T>>| {
            for (offset, out) in out.iter_mut().enumerate() {
                accumulate(self.instructions, batch, table.cells(), offset as u32, out);
            }
            batch.clear();
        };
        let mut sums = Vec::new();
        let row_at = |ordered: usize| &prepared.rows[prepared.order[ordered] as usize];
        let mut start = rows.start;
        while start < rows.end {
            let first = row_at(start);
            let (p, q) = first.pair;
            let together = |row: &Row| row.pair == first.pair && row.span == first.span;
            let end = (start + 1..rows.end).find(|&next| !together(row_at(next))).unwrap_or(rows.end);
            let run = std::mem::replace(&mut start, end)..end;
            if self.class[p as usize * self.stations + q as usize] as usize != class {
                continue;
            }
            for (band_index, band) in self.bands[partition_index].power.iter().enumerate() {
                let degrees = band.degrees();
                for (shares, hands) in &groups {
                    sums.clear();
                    sums.resize(band.nodes.len(), 0.0);
                    let mut any = false;
                    for ordered in run.clone() {
                        let index = prepared.order[ordered] as usize;
                        let times = chebyshev(row_at(ordered).place, degrees);
                        for (channel, weights) in band.channels.clone().zip(band.weights.chunks_exact(degrees)) {
                            let (_, weight) = Intensity::weighted(block, block.index(index, channel), hands);
                            if weight == 0.0 {
                                continue;
                            }
                            any = true;
                            for (time, weights) in times.iter().zip(weights) {
                                let weight = weight * time;
                                sums.iter_mut().zip(weights).for_each(|(sum, l)| *sum += weight * l);
                            }
                        }
                    }
                    if !any {
                        continue;
                    }
                    for (node, sum) in sums.iter().enumerate() {
                        for &(slot, part) in shares {
                            batch.push(Share {
                                p: table.start(first.span, (band_index, node), slot, p) as u32,
                                q: table.start(first.span, (band_index, node), slot, q) as u32,
                                weight: real(part * sum),
                            });
                        }
                    }
                }
                if batch.len() >= SHARES {
                    flush(&mut batch);
                }
            }
        }
        flush(&mut batch);
    }

    pub(super) fn finish_powers(
        &self,
        partition: &Partition,
        powers: &[[f64; POWER_LANES]],
        normaliser: &mut Array2<f64>,
    ) {
        let (nx, ny) = self.plan.patch.size;
        let terms = &partition.power;
        let mut nodes = Array2::<f64>::zeros((terms.nodes_y.len(), terms.nodes_x.len()));
        for (j, screen) in terms.screens.iter().enumerate() {
            let factor = powers[j / POWER_LANES][j % POWER_LANES];
            nodes.zip_mut_with(screen, |sum, theta| *sum += factor * theta);
        }
        let offsets = |n: usize| -> Vec<f64> { (0..n).map(|i| i as f64 + Patch::span(n).0).collect() };
        let image = interpolation(&terms.nodes_y, &offsets(ny))
            .dot(&nodes)
            .dot(&interpolation(&terms.nodes_x, &offsets(nx)).t());
        let (x0, y0) = self.plan.patch.origin;
        for ((y, x), &value) in image.indexed_iter() {
            if self.mask[y * nx + x] {
                // the sum is a sum of squares: what the expansion leaves below zero is error
                normaliser[[y0 + y, x0 + x]] += value.max(0.0);
            }
        }
    }
}
