//! Gridding by a plan: visibilities to N and W, and a sky to visibilities.

use super::offgrid::{Spread, half_width};
use super::patch::Patch;
use super::plan::{Partition, Plan};
use super::smooth::{chebyshev_points, interpolation};
use super::terms::Terms;
use super::tiles::tile_order;
use super::transform::{Scratch, Transform};
use super::vector::{
    Cell, GridReal, Instructions, LANES, Lane, Sample, Share, accumulate, double, gather, real, spread,
};
use super::{Options, Sums};
use crate::beam::StationBeams;
use crate::observation::{Block, BlockSource, Observation};
use crate::response::ResponseError;
use crate::response::rows::{Intensity, Recentre, Seen, cis_turns, wavelengths_per_metre};
use crate::response::window::{PolynomialWindow, Window, locate};
use crate::sky::{Component, ImageGeometry};
use ndarray::{Array2, Axis, LinalgScalar, s};
use num_complex::{Complex, Complex32, Complex64};
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

/// Frequencies that patterns are evaluated at, and how their values there make those of every channel.
struct Nodes<T> {
    hz: Vec<f64>,
    /// `[channel][node]`; `None` where every channel is a node.
    weights: Option<Vec<Vec<T>>>,
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

/// Which station quantities a table holds.
struct Quantities<'a, T> {
    terms: &'a Terms,
    nodes: &'a Nodes<T>,
    /// Terms a cell holds.
    lanes: usize,
    slots: usize,
}

/// Station quantities of one partition at its terms' directions, for one block of rows.
struct Table<T> {
    cells: Vec<Cell<T>>,
    /// Cells a station takes.
    per_station: usize,
    channels: usize,
    slots: usize,
}

impl<T> Table<T> {
    fn at(&self, time: u32, channel: usize, slot: usize, stations: usize, station: u32) -> u32 {
        let entry = ((time as usize * self.channels + channel) * self.slots + slot) * stations + station as usize;
        (entry * self.per_station) as u32
    }
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
        let mut feeds: Vec<usize> = Vec::new();
        let mut powers: Vec<Power> = Vec::new();
        for (seen, _) in intensity.groups() {
            match seen {
                Seen::Feed(feed) => {
                    feeds.push(*feed);
                    powers.push(Power::Feed(*feed));
                }
                Seen::Mean => {
                    feeds.extend([0, 1]);
                    powers.extend([Power::Feed(0), Power::Feed(1), Power::CrossRe, Power::CrossIm]);
                }
            }
        }
        feeds.sort_unstable();
        feeds.dedup();
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

    fn kernel_table(&self, prepared: &Prepared, index: usize) -> Table<T> {
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

    fn power_table(&self, prepared: &Prepared, index: usize) -> Table<T> {
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

    /// Calls `each` with the samples of `rows` that belong to `task`; `weights` decides what they carry: for spreading the
    /// weighted visibilities (unweighted ones are skipped), for predicting 1 for every one.
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
                        if spreading { Intensity::weighted(block, at, hands) } else { (Complex64::ONE, 1.0) };
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

    /// θ of one term on the patch's pixels, real and imaginary parts (the latter only where it is not 0).
    fn screen(terms: &Terms, index: usize, (px, py): &(Array2<T>, Array2<T>)) -> (Array2<T>, Option<Array2<T>>) {
        let part = |pick: fn(&Complex64) -> f64| -> Option<Array2<T>> {
            let values = terms.screens[index].mapv(|z| real(pick(&z)));
            if terms.screens[index].iter().all(|z| pick(z) == 0.0) {
                return None;
            }
            Some(py.dot(&values).dot(&px.t()).as_standard_layout().into_owned())
        };
        let shape = (py.nrows(), px.nrows());
        (part(|z| z.re).unwrap_or_else(|| Array2::zeros(shape)), part(|z| z.im))
    }

    /// Interpolation matrices from a partition's nodes to the patch's pixels.
    fn pixels(&self, terms: &Terms) -> (Array2<T>, Array2<T>) {
        let offsets = |n: usize| -> Vec<f64> { (0..n).map(|i| i as f64 + Patch::span(n).0).collect() };
        let (nx, ny) = self.plan.patch.size;
        (
            interpolation(&terms.nodes_x, &offsets(nx)).mapv(real),
            interpolation(&terms.nodes_y, &offsets(ny)).mapv(real),
        )
    }

    /// Transforms the grids of one partition's tasks and adds them to N. Screens are made once for all layers.
    fn finish(&self, tasks: &[(Task, Vec<Vec<Cell<T>>>)], scratch: &mut Scratch<T>, numerator: &mut Array2<f64>) {
        let Some((first_task, first_grids)) = tasks.first() else { return };
        let (nx, ny) = self.plan.patch.size;
        let terms = &self.plan.partitions[first_task.partition].kernel;
        let matrices = self.pixels(terms);
        let zero = Complex::new(T::zero(), T::zero());
        let mut sums = vec![vec![zero; nx * ny]; tasks.len()];
        for block in 0..first_grids.len() {
            let first = block * LANES;
            let count = LANES.min(terms.points.len() - first);
            let screens: Vec<(Array2<T>, Option<Array2<T>>)> =
                (first..first + count).into_par_iter().map(|index| Self::screen(terms, index, &matrices)).collect();
            for ((_, grids), sum) in tasks.iter().zip(&mut sums) {
                self.transform.to_patch(&grids[block], count, scratch);
                let images = &scratch.images[..count];
                sum.par_chunks_mut(CHUNK).enumerate().for_each(|(chunk, sum)| {
                    let here = chunk * CHUNK..chunk * CHUNK + sum.len();
                    for (image, (re, im)) in images.iter().zip(&screens) {
                        let re = re.as_slice().unwrap_or(&[]);
                        let image = &image[here.clone()];
                        match im.as_ref().and_then(|im| im.as_slice()) {
                            None => {
                                for ((sum, &z), &re) in sum.iter_mut().zip(image).zip(&re[here.clone()]) {
                                    *sum = *sum + z.scale(re);
                                }
                            }
                            Some(im) => {
                                let parts = re[here.clone()].iter().zip(&im[here.clone()]);
                                for ((sum, &z), (&re, &im)) in sum.iter_mut().zip(image).zip(parts) {
                                    *sum = *sum + z * Complex::new(re, im);
                                }
                            }
                        }
                    }
                });
            }
        }
        let (x0, y0) = self.plan.patch.origin;
        let mut window = numerator.slice_mut(s![y0..y0 + ny, x0..x0 + nx]);
        window.axis_iter_mut(Axis(0)).into_par_iter().enumerate().for_each(|(y, mut row)| {
            for (x, out) in row.iter_mut().enumerate() {
                let at = y * nx + x;
                if !self.mask[at] {
                    continue;
                }
                let mut value = 0.0;
                for ((task, _), sum) in tasks.iter().zip(&sums) {
                    let z = Complex64::new(double(sum[at].re), double(sum[at].im));
                    value += if self.plan.layers.bends {
                        (z * cis_turns(self.plan.layers.w(task.layer) * self.bend[at])).re
                    } else {
                        z.re
                    };
                }
                *out += value * self.taper.0[x] * self.taper.1[y];
            }
        });
    }

    fn finish_powers(&self, partition: &Partition, powers: &[[f64; POWER_LANES]], normaliser: &mut Array2<f64>) {
        let (nx, ny) = self.plan.patch.size;
        let terms = &partition.power;
        let mut nodes = Array2::<f64>::zeros((terms.nodes_y.len(), terms.nodes_x.len()));
        for (j, screen) in terms.screens.iter().enumerate() {
            let factor = powers[j / POWER_LANES][j % POWER_LANES];
            nodes.zip_mut_with(screen, |sum, z| *sum += factor * z.re);
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

    pub(super) fn predict(
        &self,
        geometry: &ImageGeometry,
        sky: &[Component],
        blocks: &mut [Block],
    ) -> Result<(), ResponseError> {
        let groups = self.intensity.groups().len();
        let sums = self.predicted(geometry, sky, blocks)?;
        for (block, sums) in blocks.iter_mut().zip(&sums) {
            block.data.fill(Complex32::ZERO);
            for row in 0..block.rows() {
                for channel in 0..block.channels {
                    let at = block.index(row, channel);
                    for (group, (_, hands)) in self.intensity.groups().iter().enumerate() {
                        let [re, im] = sums[(row * block.channels + channel) * groups + group];
                        for &hand in hands {
                            block.data[at + hand] = Complex32::new(re as f32, im as f32);
                        }
                    }
                }
            }
        }
        Ok(())
    }

    /// Visibilities of `sky`, real and imaginary, `[block][(row, channel, group of hands)]`, before they are rounded to f32.
    pub(super) fn predicted(
        &self,
        geometry: &ImageGeometry,
        sky: &[Component],
        blocks: &[Block],
    ) -> Result<Vec<Vec<[f64; 2]>>, ResponseError> {
        let spectra = self.model_images(geometry, sky)?;
        let groups = self.intensity.groups().len();
        let mut sums: Vec<Vec<[f64; 2]>> =
            blocks.iter().map(|b| vec![[0.0; 2]; b.rows() * b.channels * groups]).collect();
        let prepared: Vec<Prepared> = blocks.iter().map(|block| self.prepare(block)).collect();
        for task in self.tasks() {
            let partition = &self.plan.partitions[task.partition];
            let tables: Vec<Table<T>> = prepared.iter().map(|p| self.kernel_table(p, task.partition)).collect();
            let bends = Self::term_bends(partition);
            for (power, model) in spectra.images.iter().enumerate() {
                let grids = self.model_grids(task, model);
                for ((block, prepared), (table, sums)) in
                    blocks.iter().zip(&prepared).zip(tables.iter().zip(&mut sums))
                {
                    let lanes = self.lanes(table, &bends);
                    let per_row = block.channels * groups;
                    let rows_at_once = (BATCH / per_row.max(1)).clamp(16, 4096);
                    sums.par_chunks_mut(rows_at_once * per_row).enumerate().for_each(|(chunk, sums)| {
                        let rows = chunk * rows_at_once..((chunk + 1) * rows_at_once).min(block.rows());
                        let mut batch = Vec::new();
                        let mut places = Vec::new();
                        self.samples(
                            task,
                            block,
                            (prepared, table),
                            rows.clone(),
                            false,
                            |sample, place, turns| {
                                batch.push(sample);
                                places.push((place, turns));
                            },
                        );
                        let order = tile_order(&batch, self.plan.shape.width, self.plan.shape.height);
                        let sorted: Vec<Sample<T>> = order.iter().map(|&index| batch[index as usize]).collect();
                        let mut got = vec![[0.0; 2]; sorted.len()];
                        for (lane, grid) in lanes.iter().zip(&grids) {
                            gather(self.instructions, &sorted, lane, grid, &mut got);
                        }
                        for (&index, got) in order.iter().zip(&got) {
                            let ((row, channel, group), turns) = &places[index as usize];
                            let factor = spectra.factor(power, self.frequencies_hz[*channel]);
                            let mean = matches!(self.intensity.groups()[*group].0, Seen::Mean);
                            let share = if mean { 0.5 * factor } else { factor };
                            let value = Complex64::new(got[0], got[1]) * cis_turns(-turns) * share;
                            let sum = &mut sums[(row - rows.start) * per_row + channel * groups + group];
                            sum[0] += value.re;
                            sum[1] += value.im;
                        }
                    });
                }
            }
        }
        Ok(sums)
    }

    /// The plan this engine follows.
    #[cfg(test)]
    pub(super) fn plan(&self) -> &Plan {
        &self.plan
    }

    /// The grids a task predicts from: the model times conjugate screens and layer phase, tapered and transformed.
    fn model_grids(&self, task: Task, model: &[f64]) -> Vec<Vec<Cell<T>>> {
        let (nx, _) = self.plan.patch.size;
        let terms = &self.plan.partitions[task.partition].kernel;
        let matrices = self.pixels(terms);
        let w = self.plan.layers.w(task.layer);
        let tapered: Vec<Complex<T>> = model
            .par_iter()
            .enumerate()
            .map(|(at, &flux)| {
                let value = flux * self.taper.0[at % nx] * self.taper.1[at / nx];
                let phase = if self.plan.layers.bends { cis_turns(-w * self.bend[at]) } else { Complex64::ONE };
                Complex::new(real(value * phase.re), real(value * phase.im))
            })
            .collect();
        let count = terms.points.len();
        (0..count.div_ceil(LANES))
            .map(|block| {
                let indices: Vec<usize> = (block * LANES..((block + 1) * LANES).min(count)).collect();
                let images: Vec<Vec<Complex<T>>> = indices
                    .par_iter()
                    .map(|&index| {
                        let (re, im) = Self::screen(terms, index, &matrices);
                        match im {
                            None => tapered.iter().zip(&re).map(|(z, &re)| z.scale(re)).collect(),
                            Some(im) => tapered
                                .iter()
                                .zip(&re)
                                .zip(&im)
                                .map(|((z, &re), &im)| *z * Complex::new(re, T::zero() - im))
                                .collect(),
                        }
                    })
                    .collect();
                let mut grid = vec![[T::zero(); 2 * LANES]; self.plan.shape.cells()];
                self.transform.to_grid(&images, &mut grid);
                grid
            })
            .collect()
    }

    /// Model images of a sky on the patch's pixels, one a power of ln ν.
    fn model_images(&self, geometry: &ImageGeometry, sky: &[Component]) -> Result<Spectra, ResponseError> {
        let tolerance = self.plan.report.tolerance;
        let (low, high) = self
            .frequencies_hz
            .iter()
            .fold((f64::INFINITY, 0.0f64), |(low, high), &hz| (low.min(hz), high.max(hz)));
        let middle_hz = (low * high).sqrt();
        let half_log = 0.5 * (high / low).ln();
        let steepest = sky.iter().map(|c| c.spectral_index.abs()).fold(0.0, f64::max) * half_log;
        let mut count = 1;
        let mut term = steepest;
        while term > 0.02 * tolerance && count < 40 {
            count += 1;
            term *= steepest / count as f64;
        }
        let (nx, ny) = self.plan.patch.size;
        let mut images = vec![vec![0.0; nx * ny]; count];
        let shape = &self.plan.shape;
        let band = |half: usize, n: usize| (half as f64 / n as f64).min(0.5);
        let reach = band(shape.origin.0, shape.fft.0).max(band(shape.origin.1, shape.fft.1));
        let half = half_width(reach, 0.02 * tolerance);
        let (x0, y0) = self.plan.patch.origin;
        for component in sky {
            let refuse = |reason: String| ResponseError::Component { name: component.name.clone(), reason };
            let [al, am, an] = self.beams.aim().frame().lmn(component.direction);
            if an <= 0.0 || !self.beams.inside(al, am) {
                continue;
            }
            let (x, y) = geometry
                .pixel_of(component.direction)
                .ok_or_else(|| refuse("it lies beyond the hemisphere of the image".to_owned()))?;
            let spread = Spread::new(x, y, half).map_err(&refuse)?;
            let mut outside = 0.0f64;
            for (px, py, weight) in spread.pixels() {
                let in_image =
                    (0..geometry.width as i64).contains(&px) && (0..geometry.height as i64).contains(&py);
                if !in_image {
                    outside = outside.max(weight.abs());
                    continue;
                }
                let (cx, cy) = (px - x0 as i64, py - y0 as i64);
                if !(0..nx as i64).contains(&cx) || !(0..ny as i64).contains(&cy) {
                    continue; // beyond the patch the beams are below their share of the tolerance
                }
                let flux = component.flux_at(middle_hz) * weight;
                let mut factor = 1.0;
                for image in &mut images {
                    image[cy as usize * nx + cx as usize] += flux * factor;
                    factor *= component.spectral_index;
                }
            }
            if outside > 0.02 * tolerance {
                return Err(refuse("it lies too close to, or beyond, the edge of the image".to_owned()));
            }
        }
        Ok(Spectra { images, middle_hz })
    }
}

/// The step in wavelengths per metre between channels, if it is the same for all of several.
fn uniform_step(hz: &[f64]) -> Option<f64> {
    let step = (*hz.last()? - hz.first()?) / (hz.len() - 1).max(1) as f64;
    let even = hz.windows(2).all(|pair| (pair[1] - pair[0] - step).abs() <= 1e-9 * step.abs());
    (hz.len() > 2 && even).then(|| wavelengths_per_metre(step))
}

impl<T: GridReal> Nodes<T> {
    /// The fewest Chebyshev points in frequency through which every station's voltages at the terms' directions are
    /// interpolated to within `error`, measured at all channels and a few times; every channel where that is no fewer.
    fn choose(
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

/// A sky on the patch's pixels: S(ν) = Σ_j image_j · (ln ν/ν_mid)^j / j!.
struct Spectra {
    images: Vec<Vec<f64>>,
    middle_hz: f64,
}

impl Spectra {
    fn factor(&self, power: usize, hz: f64) -> f64 {
        let x = (hz / self.middle_hz).ln();
        (1..=power).map(|j| x / j as f64).product()
    }
}
