//! Gridding by a plan: visibilities to N and W here, a sky to visibilities in `predict`; what both need is in `tables`
//! (station quantities) and `finish` (screens and transforms).

mod finish;
mod predict;
mod tables;

use tables::{Nodes, Table, uniform_step};

use super::patch::Patch;
use super::plan::{Partition, Plan, kernel_feeds};
use super::tiles::tile_order;
use super::transform::{Scratch, Transform};
use super::vector::{Cell, GridReal, Instructions, LANES, Lane, Sample, Share, accumulate, real, spread};
use super::{Options, Sums};
use crate::beam::StationBeams;
use crate::observation::{Block, BlockSource, Observation};
use crate::response::ResponseError;
use crate::response::rows::{Intensity, Recentre, Seen, cis_turns, wavelengths_per_metre};
use crate::response::window::{PolynomialWindow, Window, locate};
use ndarray::LinalgScalar;
use num_complex::Complex64;
use rayon::prelude::*;

/// Samples sorted by tiles of the grid and handed to the inner loops at once.
const BATCH: usize = 1 << 17;
/// Shares of the normaliser handed to the inner loop at once.
const SHARES: usize = 256;
/// Channels between phases computed from scratch.
const ANCHOR: usize = 16;
/// Pixels added at once: a chunk of the eight images of a block stays in the second cache.
const CHUNK: usize = 2048;
/// Power terms a cell of the power table holds.
const POWER_LANES: usize = 2 * LANES;

pub(super) struct Engine<T: GridReal> {
    plan: Plan,
    beams: StationBeams,
    intensity: Intensity,
    recentre: Recentre,
    wavelengths_per_metre: Vec<f64>,
    frequencies_hz: Vec<f64>,
    stations: usize,
    feeds: Vec<usize>,
    powers: Vec<Power>,
    window: PolynomialWindow<T>,
    transform: Transform<T>,
    /// 1 / transform of the window, per column and per row of the patch.
    taper: (Vec<f64>, Vec<f64>),
    /// Pixels inside the response cut-off.
    mask: Vec<bool>,
    /// Curvature less its middle, per pixel; empty where w is ignored.
    bend: Vec<f64>,
    instructions: Instructions,
    grid_memory: usize,
    /// First partition of each pair of stations (their class), [`u32::MAX`] for pairs without data.
    class: Vec<u32>,
    bands: Vec<Band<T>>,
}

/// How the station quantities of one partition follow frequency.
struct Band<T> {
    /// Frequencies at which patterns are evaluated for the kernel's directions and for the power's.
    kernel: Nodes<T>,
    power: Nodes<T>,
    /// Step in wavelengths per metre between channels, where it is the same for all.
    step: Option<f64>,
}

/// A real station quantity whose pairwise products make |A|².
#[derive(Debug, Clone, Copy, PartialEq)]
enum Power {
    /// |g|² of a feed.
    Feed(usize),
    /// Real part of g₀ g₁*.
    CrossRe,
    /// Imaginary part of g₀ g₁*.
    CrossIm,
}

/// A partition in one layer of w, being gridded.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Task {
    partition: usize,
    layer: usize,
}

/// A task and one copy of its grids, one a block of terms.
struct Work<T> {
    task: Task,
    copy: usize,
    grids: Vec<Vec<Cell<T>>>,
}

/// A block's rows about the patch's centre, and the distinct times they were taken at.
struct Prepared {
    /// u′, v′, path and w of each row, metres.
    rows: Vec<[f64; 4]>,
    time: Vec<u32>,
    angles: Vec<Vec<f64>>,
}

/// 1 with weight 1 where any of `hands` is usable, nothing elsewhere: what prediction goes through.
fn used(block: &Block, at: usize, hands: &[usize]) -> (Complex64, f64) {
    let any = hands.iter().any(|hand| block.weight[at + hand] > 0.0);
    (Complex64::ONE, if any { 1.0 } else { 0.0 })
}

impl<T: GridReal + LinalgScalar> Engine<T> {
    pub(super) fn new(
        plan: Plan,
        observation: &Observation,
        beams: &StationBeams,
        intensity: Intensity,
        options: Options,
    ) -> Result<Self, ResponseError> {
        let tolerance = plan.report.tolerance;
        let refuse = |e: crate::response::window::WindowError| ResponseError::Tolerance {
            asked: tolerance,
            reachable: super::SMALLEST_TOLERANCE,
            reason: e.to_string(),
        };
        let window = plan.window.window().map_err(refuse)?;
        let rounding = if plan.double { 1e-13 } else { 3e-7 };
        let polynomial = PolynomialWindow::new(&window, (0.02 * tolerance).max(rounding)).map_err(refuse)?;
        let taper = |size: usize, n: usize| -> Vec<f64> {
            let first = Patch::span(size).0;
            (0..size).map(|i| 1.0 / window.transform((i as f64 + first) / n as f64)).collect()
        };
        let (nx, ny) = plan.patch.size;
        let offsets = |i: usize| ((i % nx) as f64 + Patch::span(nx).0, (i / nx) as f64 + Patch::span(ny).0);
        let mask = (0..nx * ny)
            .into_par_iter()
            .map(|i| {
                let (dx, dy) = offsets(i);
                let [l, m] = plan.patch.aim_lm(dx, dy);
                plan.patch.in_front(dx, dy) && beams.inside(l, m)
            })
            .collect();
        let bend = if plan.layers.bends {
            (0..nx * ny)
                .into_par_iter()
                .map(|i| {
                    let (dx, dy) = offsets(i);
                    plan.patch.curvature(dx, dy) - plan.middle_bend
                })
                .collect()
        } else {
            Vec::new()
        };
        let feeds = kernel_feeds(&intensity);
        let powers: Vec<Power> = intensity
            .groups()
            .iter()
            .flat_map(|(seen, _)| match seen {
                Seen::Feed(feed) => vec![Power::Feed(*feed)],
                Seen::Mean => vec![Power::Feed(0), Power::Feed(1), Power::CrossRe, Power::CrossIm],
            })
            .collect();
        let available = Instructions::available();
        let instructions =
            if available.contains(&options.instructions) { options.instructions } else { Instructions::Plain };
        let stations = observation.stations.len();
        let mut class = vec![u32::MAX; stations * stations];
        for (&(p, q), &first) in &plan.class_of_pair {
            class[p as usize * stations + q as usize] = first as u32;
        }
        let angles: Vec<Vec<f64>> = plan.probe_times.iter().map(|&mjd| beams.angles_at(mjd)).collect();
        let bands = plan
            .partitions
            .iter()
            .map(|partition| {
                let hz = &observation.frequencies_hz[partition.channels.clone()];
                let error = 0.01 * tolerance;
                Band {
                    kernel: Nodes::choose(beams, &feeds, &partition.kernel, &angles, hz, error),
                    power: Nodes::choose(beams, &feeds, &partition.power, &angles, hz, error),
                    step: uniform_step(hz),
                }
            })
            .collect();
        Ok(Engine {
            class,
            bands,
            recentre: Recentre::new(&observation.phase_centre.frame(), plan.patch.image_frame()),
            wavelengths_per_metre: observation.frequencies_hz.iter().map(|&hz| wavelengths_per_metre(hz)).collect(),
            frequencies_hz: observation.frequencies_hz.clone(),
            stations,
            beams: beams.clone(),
            transform: Transform::new(plan.shape, plan.patch.size),
            taper: (taper(nx, plan.shape.fft.0), taper(ny, plan.shape.fft.1)),
            window: polynomial,
            intensity,
            feeds,
            powers,
            mask,
            bend,
            instructions,
            grid_memory: options.grid_memory,
            plan,
        })
    }

    /// Refuses rows with usable visibilities that lie beyond what grids and layers were made for.
    fn check_reach(&self, block: &Block, prepared: &Prepared) -> Result<(), ResponseError> {
        let Plan { reach_m, w_m, .. } = &self.plan;
        // rounding of rotations of baselines of some thousand kilometres
        let within = |value: f64, low: f64, high: f64| value >= low - 1e-6 && value <= high + 1e-6;
        for (row, &[u, v, _, w]) in prepared.rows.iter().enumerate() {
            let fits =
                within(u, -reach_m.0, reach_m.0) && within(v, -reach_m.1, reach_m.1) && within(w, w_m.0, w_m.1);
            let cells = block.index(row, 0)..block.index(row + 1, 0);
            if !fits && block.weight[cells].iter().any(|weight| *weight > 0.0) {
                return Err(ResponseError::Unplanned { row });
            }
        }
        Ok(())
    }

    fn grid_bytes(&self, partition: &Partition) -> usize {
        partition.kernel.points.len().div_ceil(LANES) * self.plan.shape.cells() * size_of::<Cell<T>>()
    }

    pub(super) fn memory_bytes(&self) -> usize {
        let screens: usize = self
            .plan
            .partitions
            .iter()
            .map(|p| (p.kernel.screens.iter().chain(&p.power.screens)).map(|s| s.len() * 16).sum::<usize>())
            .sum();
        let grids: usize = self.plan.partitions.iter().map(|p| self.grid_bytes(p) * self.plan.layers.count).sum();
        screens + grids.min(self.grid_memory)
    }

    fn tasks(&self) -> Vec<Task> {
        let layers = self.plan.layers.count;
        (0..self.plan.partitions.len())
            .flat_map(|partition| (0..layers).map(move |layer| Task { partition, layer }))
            .collect()
    }

    fn prepare(&self, block: &Block) -> Prepared {
        let mut angles: Vec<Vec<f64>> = Vec::new();
        let mut known = std::collections::HashMap::new();
        let mut time = Vec::with_capacity(block.rows());
        for &mjd in &block.mjd_utc {
            let index = *known.entry(mjd.to_bits()).or_insert_with(|| {
                angles.push(self.beams.angles_at(mjd));
                angles.len() as u32 - 1
            });
            time.push(index);
        }
        let rows = block
            .uvw_m
            .par_iter()
            .map(|&uvw| {
                let turned = self.recentre.turn(uvw);
                let (u, v, path) = self.plan.patch.effective(turned.uvw_m);
                [u, v, turned.shift_m + path, turned.uvw_m[2]]
            })
            .collect();
        Prepared { rows, time, angles }
    }

    /// Calls `each` with the samples of `rows` that belong to `task`; `weights` decides what they carry: for spreading the
    /// weighted visibilities (unweighted ones are skipped), for predicting 1 for every one that is used.
    ///
    /// `each` gets the sample, (row, channel, group) and the turns from the image's phase to the patch's.
    #[inline(always)]
    fn samples(
        &self,
        task: Task,
        block: &Block,
        at: (&Prepared, &Table<T>),
        rows: std::ops::Range<usize>,
        spreading: bool,
        mut each: impl FnMut(Sample<T>, (usize, usize, usize), f64),
    ) {
        let (prepared, table) = at;
        let plan = &self.plan;
        let partition = &plan.partitions[task.partition];
        let class = task.partition - task.partition % plan.channel_groups.len();
        let shape = &plan.shape;
        let support = plan.window.support;
        let pixel = plan.patch.pixel();
        let (scale_x, scale_y) = (-pixel * shape.fft.0 as f64, pixel * shape.fft.1 as f64);
        let fold = |position: f64, n: usize| {
            let n = n as f64;
            if position.abs() > 0.5 * n { position - n * (position / n).round() } else { position }
        };
        let layer_w = plan.layers.w(task.layer);
        let band_step = self.bands[task.partition].step;
        let k_band = partition
            .channels
            .clone()
            .map(|channel| self.wavelengths_per_metre[channel])
            .fold((f64::INFINITY, 0.0f64), |(low, high), k| (low.min(k), high.max(k)));
        for row in rows {
            let (p, q) = (block.first[row], block.second[row]);
            if self.class[p as usize * self.stations + q as usize] as usize != class {
                continue;
            }
            let [u, v, path, w_m] = prepared.rows[row];
            // w is proportional to frequency: a row's layers lie between those of the band's ends
            let ends = (plan.layers.of(w_m * k_band.0), plan.layers.of(w_m * k_band.1));
            if task.layer < ends.0.min(ends.1) || task.layer > ends.0.max(ends.1) {
                continue;
            }
            let time = prepared.time[row];
            // turns of the phase per wavenumber; from channel to channel the phase turns by the same step, and is computed
            // anew often enough that rounding stays below 1e-15
            let path = path + if plan.layers.bends { w_m * plan.middle_bend } else { 0.0 };
            let step = band_step.filter(|_| spreading).map(|step| cis_turns(path * step));
            let mut phase = Complex64::ONE;
            for (local, channel) in partition.channels.clone().enumerate() {
                let k = self.wavelengths_per_metre[channel];
                let w = w_m * k;
                let turns = path * k;
                if spreading {
                    phase = match step {
                        Some(step) if local % ANCHOR != 0 => phase * step,
                        _ => cis_turns(turns),
                    };
                }
                if plan.layers.count > 1 && plan.layers.of(w) != task.layer {
                    continue;
                }
                let at = block.index(row, channel);
                for (group, (seen, hands)) in self.intensity.groups().iter().enumerate() {
                    let (value, weight) =
                        if spreading { Intensity::weighted(block, at, hands) } else { used(block, at, hands) };
                    if weight == 0.0 {
                        continue;
                    }
                    let value = if spreading { value * phase } else { value };
                    let (first_x, fx) = locate(fold(u * k * scale_x, shape.fft.0), support);
                    let (first_y, fy) = locate(fold(v * k * scale_y, shape.fft.1), support);
                    let column = first_x + shape.origin.0 as i64;
                    let line = first_y + shape.origin.1 as i64;
                    let cell = line as usize * shape.width + column as usize;
                    let dw = if plan.layers.bends { real(w - layer_w) } else { T::zero() };
                    let mut emit = |feed: usize, value: Complex64| {
                        let slot = self.feeds.iter().position(|&f| f == feed).unwrap_or(0);
                        let sample = Sample {
                            cell: cell as u32,
                            p: table.at(time, local, slot, self.stations, p),
                            q: table.at(time, local, slot, self.stations, q),
                            fx: real(fx),
                            fy: real(fy),
                            dw,
                            re: real(value.re),
                            im: real(value.im),
                        };
                        each(sample, (row, channel, group), turns);
                    };
                    match seen {
                        Seen::Feed(feed) => emit(*feed, value),
                        Seen::Mean => {
                            emit(0, 0.5 * value);
                            emit(1, 0.5 * value);
                        }
                    }
                }
            }
        }
    }

    fn lanes<'a>(&'a self, table: &'a Table<T>, bends: &'a [[T; LANES]]) -> Vec<Lane<'a, T>> {
        bends
            .iter()
            .enumerate()
            .map(|(offset, bend)| Lane {
                table: &table.cells,
                offset: offset as u32,
                bend,
                bends: self.plan.layers.bends,
                width: self.plan.shape.width,
                window: &self.window,
            })
            .collect()
    }

    fn term_bends(partition: &Partition) -> Vec<[T; LANES]> {
        let points = &partition.kernel.points;
        points
            .chunks(LANES)
            .map(|chunk| {
                let mut bend = [T::zero(); LANES];
                for (b, point) in bend.iter_mut().zip(chunk) {
                    *b = real(point.bend);
                }
                bend
            })
            .collect()
    }

    /// Spreads the rows of `block` that belong to `task` onto its grids.
    fn spread_rows(
        &self,
        task: Task,
        block: &Block,
        prepared: &Prepared,
        table: &Table<T>,
        rows: std::ops::Range<usize>,
        grids: &mut [Vec<Cell<T>>],
    ) {
        let bends = Self::term_bends(&self.plan.partitions[task.partition]);
        let lanes = self.lanes(table, &bends);
        let mut batch: Vec<Sample<T>> = Vec::new();
        let mut sorted: Vec<Sample<T>> = Vec::new();
        let (width, height) = (self.plan.shape.width, self.plan.shape.height);
        let mut flush = |batch: &mut Vec<Sample<T>>| {
            sorted.clear();
            sorted.extend(tile_order(batch, width, height).into_iter().map(|index| batch[index as usize]));
            // block by block: all blocks at a sample, one after the other, measured half as fast
            for (lane, grid) in lanes.iter().zip(grids.iter_mut()) {
                spread(self.instructions, &sorted, lane, grid);
            }
            batch.clear();
        };
        self.samples(task, block, (prepared, table), rows, true, |sample, _, _| {
            batch.push(sample);
            if batch.len() == BATCH {
                flush(&mut batch);
            }
        });
        flush(&mut batch);
    }

    /// Adds a block's share of a partition's power coefficients.
    fn add_powers(
        &self,
        partition_index: usize,
        block: &Block,
        prepared: &Prepared,
        table: &Table<T>,
        rows: std::ops::Range<usize>,
        out: &mut [[f64; POWER_LANES]],
    ) {
        let partition = &self.plan.partitions[partition_index];
        let class = partition_index - partition_index % self.plan.channel_groups.len();
        let slot_of = |power: Power| self.powers.iter().position(|&p| p == power).unwrap_or(0);
        let mut batch: Vec<Share<T>> = Vec::with_capacity(SHARES + 4);
        let mut flush = |batch: &mut Vec<Share<T>>| {
            for (offset, out) in out.iter_mut().enumerate() {
                accumulate(self.instructions, batch, &table.cells, offset as u32, out);
            }
            batch.clear();
        };
        for row in rows {
            let (p, q) = (block.first[row], block.second[row]);
            if self.class[p as usize * self.stations + q as usize] as usize != class {
                continue;
            }
            let time = prepared.time[row];
            for (local, channel) in partition.channels.clone().enumerate() {
                let at = block.index(row, channel);
                for (seen, hands) in self.intensity.groups() {
                    let (_, weight) = Intensity::weighted(block, at, hands);
                    if weight == 0.0 {
                        continue;
                    }
                    let mut emit = |power: Power, weight: f64| {
                        let slot = slot_of(power);
                        batch.push(Share {
                            p: table.at(time, local, slot, self.stations, p),
                            q: table.at(time, local, slot, self.stations, q),
                            weight: real(weight),
                        });
                    };
                    match seen {
                        Seen::Feed(feed) => emit(Power::Feed(*feed), weight),
                        Seen::Mean => {
                            emit(Power::Feed(0), 0.25 * weight);
                            emit(Power::Feed(1), 0.25 * weight);
                            emit(Power::CrossRe, 0.5 * weight);
                            emit(Power::CrossIm, 0.5 * weight);
                        }
                    }
                    if batch.len() >= SHARES {
                        flush(&mut batch);
                    }
                }
            }
        }
        flush(&mut batch);
    }

    pub(super) fn adjoint(&self, source: &mut dyn BlockSource, sums: &mut Sums) -> Result<(), ResponseError> {
        let tasks = self.tasks();
        let threads = rayon::current_num_threads();
        let mut first_pass = true;
        let mut scratch = Scratch::default();
        let mut powers: Vec<Vec<[f64; POWER_LANES]>> = self
            .plan
            .partitions
            .iter()
            .map(|p| vec![[0.0; POWER_LANES]; p.power.points.len().div_ceil(POWER_LANES)])
            .collect();
        let mut start = 0;
        while start < tasks.len() {
            let mut end = start;
            let mut bytes = 0;
            while end < tasks.len() {
                bytes += self.grid_bytes(&self.plan.partitions[tasks[end].partition]);
                if end > start && bytes > self.grid_memory {
                    break;
                }
                end += 1;
            }
            let chunk = &tasks[start..end];
            // where there are fewer tasks than threads, each task's rows are shared by several copies of its grids
            let copies = threads.div_ceil(chunk.len()).max(1);
            let blank = |task: &Task| -> Vec<Vec<Cell<T>>> {
                let blocks = self.plan.partitions[task.partition].kernel.points.len().div_ceil(LANES);
                vec![vec![[T::zero(); 2 * LANES]; self.plan.shape.cells()]; blocks]
            };
            let mut work: Vec<Work<T>> = chunk
                .iter()
                .flat_map(|task| (0..copies).map(move |copy| (*task, copy)))
                .map(|(task, copy)| Work { task, copy, grids: blank(&task) })
                .collect();
            source.rewind()?;
            while let Some(block) = source.next_block()? {
                let prepared = self.prepare(&block);
                self.check_reach(&block, &prepared)?;
                let mut tables: Vec<Option<Table<T>>> = self.plan.partitions.iter().map(|_| None).collect();
                for task in chunk {
                    tables[task.partition].get_or_insert_with(|| self.kernel_table(&prepared, task.partition));
                }
                let rows = block.rows();
                work.par_iter_mut().for_each(|Work { task, copy, grids }| {
                    let part = *copy * rows / copies..(*copy + 1) * rows / copies;
                    if let Some(table) = &tables[task.partition] {
                        self.spread_rows(*task, &block, &prepared, table, part, grids);
                    }
                });
                if first_pass {
                    powers.par_iter_mut().enumerate().for_each(|(index, out)| {
                        let table = self.power_table(&prepared, index);
                        self.add_powers(index, &block, &prepared, &table, 0..rows, out);
                    });
                }
            }
            let mut ready: Vec<(Task, Vec<Vec<Cell<T>>>)> = Vec::with_capacity(chunk.len());
            for Work { task, copy, grids } in work {
                match ready.last_mut() {
                    Some((_, whole)) if copy > 0 => {
                        for (whole, part) in whole.iter_mut().zip(&grids) {
                            whole.par_iter_mut().zip(part).for_each(|(cell, add)| {
                                cell.iter_mut().zip(add).for_each(|(c, &a)| *c = *c + a);
                            });
                        }
                    }
                    _ => ready.push((task, grids)),
                }
            }
            for tasks in ready.chunk_by(|a, b| a.0.partition == b.0.partition) {
                self.finish(tasks, &mut scratch, &mut sums.numerator);
            }
            first_pass = false;
            start = end;
        }
        for (partition, powers) in self.plan.partitions.iter().zip(&powers) {
            self.finish_powers(partition, powers, &mut sums.normaliser);
        }
        Ok(())
    }
}
