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

use super::bands::{Band, Costs, Demand};
use super::patch::Patch;
use super::plan::{Partition, Plan, kernel_feeds};
use super::terms::Terms;
use super::transform::{Scratch, Transform};
use super::vector::{Cell, GridReal, Instructions, LANES, Mixing, real};
use super::{Options, Sums};
use crate::beam::StationBeams;
use crate::observation::{BlockSource, Observation};
use crate::response::ResponseError;
use crate::response::rows::{Intensity, Recentre, wavelengths_per_metre};
use crate::response::window::{PolynomialWindow, Window};
use ndarray::LinalgScalar;
use rayon::prelude::*;

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
}

/// How kernels of one partition follow from station voltages.
struct Bands<T> {
    /// Bands of channels for kernels and for powers.
    kernel: Vec<Band<T>>,
    power: Vec<Band<T>>,
    /// Step in wavelengths per metre between channels, where it is the same for all.
    step: Option<f64>,
    /// Bend of the terms' directions, by blocks of eight.
    bends: Vec<[T; LANES]>,
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
        let angles: Vec<Vec<f64>> = plan.probe_times.iter().map(|&mjd| beams.angles_at(mjd)).collect();
        let bands = plan
            .partitions
            .iter()
            .map(|partition| Bands::choose(&plan, partition, beams, &feeds, &angles, &observation.frequencies_hz))
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
                vec![[T::zero(); 2 * LANES]; self.plan.shape.cells() * blocks]
            };
            let mut work: Vec<Work<T>> = chunk
                .iter()
                .flat_map(|task| (0..copies).map(move |copy| (*task, copy)))
                .map(|(task, copy)| Work { task, copy, grid: blank(&task), scratch: RunScratch::new() })
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
                work.par_iter_mut().for_each(|Work { task, copy, grid, scratch }| {
                    let part = *copy * rows / copies..(*copy + 1) * rows / copies;
                    if let Some(table) = &tables[task.partition] {
                        let view = View { task: *task, block: &block, prepared: &prepared, table };
                        self.spread_rows(&view, part, scratch, grid);
                    }
                });
                if first_pass {
                    self.add_block_powers(&block, &prepared, &mut powers);
                }
            }
            let mut ready: Vec<(Task, Vec<Cell<T>>)> = Vec::with_capacity(chunk.len());
            for Work { task, copy, grid, .. } in work {
                match ready.last_mut() {
                    Some((_, whole)) if copy > 0 => {
                        whole.par_iter_mut().zip(&grid).with_min_len(4096).for_each(|(cell, add)| {
                            cell.iter_mut().zip(add).for_each(|(c, &a)| *c = *c + a);
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

impl<T: GridReal> Bands<T> {
    fn choose(
        plan: &Plan,
        partition: &Partition,
        beams: &StationBeams,
        feeds: &[usize],
        angles: &[Vec<f64>],
        hz: &[f64],
    ) -> Self {
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
        let demand = Demand {
            beams,
            pairs,
            feeds,
            lm: &kernel_lm,
            bends: &bends,
            w_m: plan.w_m.1,
            angles,
            error: plan.error,
            power: false,
            fewest: plan.fewest_bands,
        };
        let kernel_bands = Band::choose(&demand, hz, first, costs);
        let power_demand =
            Demand { lm: &power_lm, bends: &[], error: plan.power_error, power: true, fewest: 1, ..demand };
        let power_bands = Band::choose(&power_demand, hz, first, costs);
        let mut mix = vec![[T::zero(); 2 * LANES]; kernel.points.len() * blocks];
        for ((term, point), &value) in kernel.mix.indexed_iter() {
            let cell = &mut mix[point * blocks + term / LANES];
            (cell[term % LANES], cell[term % LANES + LANES]) = (real(value), real(value));
        }
        let bends = kernel.points.chunks(LANES).map(|chunk| {
            let mut bend = [T::zero(); LANES];
            bend.iter_mut().zip(chunk).for_each(|(b, point)| *b = real(point.bend));
            bend
        });
        let k: Vec<f64> = hz.iter().map(|&hz| wavelengths_per_metre(hz)).collect();
        Bands {
            kernel: kernel_bands,
            power: power_bands,
            step: uniform_step(&k),
            bends: bends.collect(),
            mix,
            blocks,
        }
    }
}
