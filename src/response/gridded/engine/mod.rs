//! Gridding by a plan: visibilities to N and W here, a sky to visibilities in `predict`; what both need is in `tables`
//! (station quantities) and `finish` (screens and transforms).

mod finish;
mod powers;
mod predict;
mod prepare;
mod runs;
mod tables;

use powers::Power;
use prepare::Prepared;
use runs::{Scratch as RunScratch, View};
use tables::{Table, uniform_step};

use super::bands::{self, Band, Costs, Demand, Lattice, turn};
use super::patch::Patch;
use super::plan::{Partition, Plan, kernel_feeds};
use super::survey::SampleRow;
use super::terms::Terms;
use super::transform::{Scratch, Transform};
use super::vector::{Cell, DIRECTIONS, GridReal, Instructions, LANES, Mixing, real};
use super::{Options, Sums};
use crate::beam::StationBeams;
use crate::observation::{BlockSource, Observation};
use crate::response::ResponseError;
use crate::response::rows::{Intensity, Recentre, wavelengths_per_metre};
use crate::response::window::PolynomialWindow;
use ndarray::LinalgScalar;
use rayon::prelude::*;

/// Times at which the turning of parallactic angles is looked at, at most.
const PROBED: usize = 48;
/// Rows of the sample that interpolation is measured on, at most.
const SAMPLED: usize = 40;
/// Samples that one thread predicts at once.
const BATCH: usize = 1 << 17;
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
    /// Curvature less its middle, per pixel; empty where layers do not need it.
    bend: Vec<f64>,
    instructions: Instructions,
    grid_memory: usize,
    /// First partition of each pair of stations (their class), [`u32::MAX`] for pairs without data.
    class: Vec<u32>,
    bands: Vec<Bands<T>>,
    /// Stretches of time that share nodes, and the places of these in each.
    lattice: Lattice,
    places: Vec<f64>,
    /// How far w may be from the polynomial that follows it, metres.
    w_error_m: f64,
}

/// How kernels of one partition follow from station voltages.
struct Bands<T> {
    /// Bands of channels for kernels and for powers.
    kernel: Vec<Band<T>>,
    power: Vec<Band<T>>,
    /// Step in wavelengths per metre between channels, where it is the same for all.
    step: Option<f64>,
    /// As [`Mixing::bends`].
    bends: Vec<Cell<T>>,
    /// As [`Mixing::mix`].
    mix: Vec<Cell<T>>,
    /// Blocks of terms.
    blocks: usize,
}

impl<T: GridReal> Bands<T> {
    fn mixing(&self) -> Mixing<'_, T> {
        Mixing { bends: &self.bends, mix: &self.mix, blocks: self.blocks }
    }
}

/// A partition in one layer of w, being gridded.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Task {
    partition: usize,
    layer: usize,
}

/// A task and one copy of its grid, the blocks of terms side by side in every cell.
struct Work<T> {
    task: Task,
    copy: usize,
    grid: Vec<Cell<T>>,
    scratch: RunScratch<T>,
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
        let centre_declination = plan.patch.centre_declination();
        let window = plan.window.window().map_err(refuse)?;
        let rounding = if plan.double { 1e-13 } else { 3e-7 };
        let polynomial =
            PolynomialWindow::new(window.as_ref(), (0.02 * tolerance).max(rounding)).map_err(refuse)?;
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
        let bend = if plan.layers.bends && !plan.layers.centred {
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
        let powers: Vec<Power> =
            intensity.groups().iter().flat_map(|(seen, _)| Power::of(*seen)).map(|(power, _)| power).collect();
        let available = Instructions::available();
        let instructions =
            if available.contains(&options.instructions) { options.instructions } else { Instructions::Plain };
        let stations = observation.stations.len();
        let mut class = vec![u32::MAX; stations * stations];
        for (&(p, q), &first) in &plan.class_of_pair {
            class[p as usize * stations + q as usize] = first as u32;
            class[q as usize * stations + p as usize] = first as u32;
        }
        let choose = |rows: Option<usize>| -> Vec<(Bands<T>, usize)> {
            let of = |partition| {
                Bands::choose(
                    &plan,
                    partition,
                    beams,
                    &feeds,
                    (&observation.frequencies_hz, centre_declination),
                    rows,
                )
            };
            plan.partitions.iter().map(of).collect()
        };
        // spans are the same for all partitions: those of the one that wants the shortest
        let mut chosen = choose(None);
        let rows = chosen.iter().map(|(_, rows)| *rows).min().unwrap_or(1);
        if chosen.iter().any(|&(_, wanted)| wanted != rows) {
            chosen = choose(Some(rows));
        }
        let bands: Vec<Bands<T>> = chosen.into_iter().map(|(bands, _)| bands).collect();
        let lattice = lattice(&plan, beams, rows);
        let mut places: Vec<f64> = Vec::new();
        for band in bands.iter().flat_map(|bands| bands.kernel.iter().chain(&bands.power)) {
            places.extend(&band.times);
        }
        places.sort_by(f64::total_cmp);
        places.dedup();
        let furthest_bend = plan.partitions.iter().flat_map(|p| &p.kernel.points).map(|p| p.bend.abs());
        let furthest_bend = furthest_bend.fold(f64::MIN_POSITIVE, f64::max);
        let k_high = observation.frequencies_hz.iter().map(|&hz| wavelengths_per_metre(hz)).fold(0.0, f64::max);
        let w_error_m = plan.error / (std::f64::consts::TAU * k_high * furthest_bend);
        Ok(Engine {
            class,
            bands,
            lattice,
            places,
            w_error_m,
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
        partition.kernel.screens.len().div_ceil(LANES) * self.plan.shape.cells() * size_of::<Cell<T>>()
    }

    pub(super) fn memory_bytes(&self) -> usize {
        let screens: usize = self
            .plan
            .partitions
            .iter()
            .map(|p| (p.kernel.screens.iter().chain(&p.power.screens)).map(|s| s.len() * 8).sum::<usize>())
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

    pub(super) fn adjoint(&self, source: &mut dyn BlockSource, sums: &mut Sums) -> Result<(), ResponseError> {
        let tasks = self.tasks();
        let threads = rayon::current_num_threads();
        let mut first_pass = true;
        let mut scratch = Scratch::default();
        let mut powers = self.no_powers();
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
            let blank = |task: &Task| -> Vec<Cell<T>> {
                let blocks = self.bands[task.partition].blocks;
                vec![Cell::zero(); self.plan.shape.cells() * blocks]
            };
            let mut work: Vec<Work<T>> = chunk
                .iter()
                .flat_map(|task| (0..copies).map(move |copy| (*task, copy)))
                .map(|(task, copy)| Work { task, copy, grid: blank(&task), scratch: RunScratch::new() })
                .collect();
            source.rewind()?;
            let mut kept = None;
            while let Some(block) = source.lend_block(&mut kept)? {
                let prepared = self.prepare(block);
                self.check_reach(block, &prepared)?;
                let mut tables: Vec<Option<Table<T>>> = self.plan.partitions.iter().map(|_| None).collect();
                for task in chunk {
                    tables[task.partition].get_or_insert_with(|| self.kernel_table(&prepared, task.partition));
                }
                let rows = block.rows();
                work.par_iter_mut().for_each(|Work { task, copy, grid, scratch }| {
                    let part = *copy * rows / copies..(*copy + 1) * rows / copies;
                    if let Some(table) = &tables[task.partition] {
                        let view = View { task: *task, block, prepared: &prepared, table };
                        self.spread_rows(&view, part, scratch, grid);
                    }
                });
                if first_pass {
                    self.add_block_powers(block, &prepared, &mut powers);
                }
            }
            let mut ready: Vec<(Task, Vec<Cell<T>>)> = Vec::with_capacity(chunk.len());
            for Work { task, copy, grid, .. } in work {
                match ready.last_mut() {
                    Some((_, whole)) if copy > 0 => {
                        whole.par_iter_mut().zip(&grid).with_min_len(4096).for_each(|(cell, add)| {
                            cell.iter_mut().zip(add.iter()).for_each(|(c, &a)| *c = *c + a);
                        });
                    }
                    _ => ready.push((task, grid)),
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

/// Spans of so many rows of a pair.
fn lattice(plan: &Plan, beams: &StationBeams, rows: usize) -> Lattice {
    if rows == 1 {
        return Lattice::default();
    }
    let length = (rows - 1) as f64 * plan.interval;
    let most_turn = 1.05 * turns(plan, beams, length).last().map_or(0.0, |turn| turn.0) + 1e-9;
    // an interval of jitter must not part what belongs together
    Lattice::new(&plan.all_times, 1.001 * length, most_turn, beams)
}

/// By how much parallactic angles turn within `step` about some of the observation's times, and those times; ascending,
/// without the fastest tenth.
fn turns(plan: &Plan, beams: &StationBeams, step: f64) -> Vec<(f64, f64)> {
    let times = &plan.times;
    let some = times.iter().copied().step_by(times.len().div_ceil(PROBED).max(1));
    let mut turns: Vec<(f64, f64)> = some
        .collect::<Vec<f64>>()
        .into_par_iter()
        .map(|mjd| (turn(beams, mjd - 0.5 * step, mjd + 0.5 * step), mjd))
        .collect();
    turns.sort_by(|a, b| a.0.total_cmp(&b.0));
    turns.truncate((9 * turns.len()).div_ceil(10));
    turns
}

impl<T: GridReal> Bands<T> {
    /// The bands of one partition, and the rows of a span that they are good for; with `rows` given, for that many.
    fn choose(
        plan: &Plan,
        partition: &Partition,
        beams: &StationBeams,
        feeds: &[usize],
        (hz, declination): (&[f64], f64),
        rows: Option<usize>,
    ) -> (Self, usize) {
        let Partition { channels, pairs, kernel, power } = partition;
        let first = channels.start;
        let hz = &hz[channels.clone()];
        let lm = |terms: &Terms| -> Vec<[f64; 2]> { terms.points.iter().map(|p| p.aim_lm).collect() };
        let blocks = kernel.screens.len().div_ceil(LANES);
        let costs = Costs {
            support: plan.window.support,
            distance: plan.mean_reach * plan.shape.fft.0 as f64,
            blocks,
            directions: kernel.points.len(),
        };
        let bends: Vec<f64> =
            if plan.layers.bends { kernel.points.iter().map(|p| p.bend).collect() } else { Vec::new() };
        let (kernel_lm, power_lm) = (lm(kernel), lm(power));
        // u, v, w of some rows, on pairs of this partition
        let every = plan.sample.len().div_ceil(SAMPLED).max(1);
        let sample: Vec<SampleRow> = plan
            .sample
            .iter()
            .step_by(every)
            .enumerate()
            .map(|(index, row)| {
                let mine = pairs.binary_search(&row.pair).is_ok();
                let pair = if mine { row.pair } else { pairs[index * 7919 % pairs.len()] };
                SampleRow { pair, ..*row }
            })
            .collect();
        // where angles turn fast, and where they turn as they mostly do
        let turning = turns(plan, beams, 8.0 * plan.interval);
        let middle = turning.len() / 2;
        let probes: Vec<f64> = [turning.last(), turning.get(middle), turning.first()]
            .into_iter()
            .flatten()
            .map(|turn| turn.1)
            .collect();
        let demand = Demand {
            beams,
            rows: &sample,
            feeds,
            lm: &kernel_lm,
            bends: &bends,
            declination,
            probes: &probes,
            interval: plan.interval,
            error: plan.error,
            power: false,
            fewest: plan.fewest_bands,
            lanes: LANES,
        };
        let (kernel_bands, rows) = bands::choose(&demand, hz, first, costs, rows);
        let power_demand =
            Demand { lm: &power_lm, bends: &[], error: plan.power_error, power: true, fewest: 1, ..demand };
        let (power_bands, _) = bands::choose(&power_demand, hz, first, costs, Some(rows));
        let pairs = blocks.div_ceil(2);
        let mut mix = vec![Cell::zero(); kernel.points.len() * pairs];
        for ((term, point), &value) in kernel.mix.indexed_iter() {
            mix[point * pairs + term / (2 * LANES)][term % (2 * LANES)] = real(value);
        }
        let bends = kernel.points.chunks(DIRECTIONS).map(|chunk| {
            let mut bend = Cell::zero();
            bend.iter_mut().zip(chunk).for_each(|(b, point)| *b = real(point.bend));
            bend
        });
        let k: Vec<f64> = hz.iter().map(|&hz| wavelengths_per_metre(hz)).collect();
        let bands = Bands {
            kernel: kernel_bands,
            power: power_bands,
            step: uniform_step(&k),
            bends: bends.collect(),
            mix,
            blocks,
        };
        (bands, rows)
    }
}
