//! Runs: rows of one station pair, close in time, in one band of channels. Their visibilities meet on scraps of grid, and
//! what a scrap holds meets the terms once.

use super::prepare::{Prepared, Row};
use super::tables::Table;
use super::{Engine, Task};
use crate::observation::Block;
use crate::response::gridded::bands::{Band, MOST_DEGREES, chebyshev};
use crate::response::gridded::vector::{
    Cell, Collection, Expansion, GridReal, LANES, Look, Modes, Piece, Sample, Scrap, coefficients, collect, expand,
    fetch, fetch_soon, gather, real, spread,
};
use crate::response::rows::{Intensity, Seen, cis_turns};
use crate::response::window::locate;
use ndarray::LinalgScalar;
use num_complex::Complex64;
use std::ops::Range;

/// Channels between phases computed from scratch.
const ANCHOR: usize = 16;
/// How far apart in cells visibilities of a scrap may lie: it fits the first cache then.
const SPAN: f64 = 8.0;
/// Rows of a run at most.
const ROWS: usize = 64;

/// Which kernels a group of hands sees, and how much of each.
#[derive(Debug, Clone, Copy)]
pub(super) struct Share {
    pub group: usize,
    /// Index among the engine's feeds.
    pub slot: usize,
    pub part: f64,
}

/// Where a sample belongs: index in the order of rows, channel, and its phase.
#[derive(Debug, Clone, Copy)]
pub(super) struct Place {
    pub ordered: usize,
    pub channel: usize,
    pub phase: Complex64,
}

/// What a task looks at in a block.
pub(super) struct View<'a, T> {
    pub task: Task,
    pub block: &'a Block,
    pub prepared: &'a Prepared,
    pub table: &'a Table<T>,
}

/// Rows (positions in the order) and a band.
struct Run<'a, T> {
    rows: Range<usize>,
    band: usize,
    of: &'a Band<T>,
    share: Share,
}

/// Memory that runs use again and again.
pub(super) struct Scratch<T> {
    samples: Vec<Sample<T>>,
    places: Vec<Place>,
    cells: Vec<Cell<T>>,
    width: usize,
    /// First column and one past the last that samples touch, row by row.
    touched: Vec<(u32, u32)>,
    pieces: Vec<Piece>,
    coefficients: Vec<Cell<T>>,
    /// Modes of each block that are not 0.
    kept: Vec<usize>,
    times: Vec<[T; MOST_DEGREES]>,
    /// w at the places of a run's nodes, metres.
    node_w: Vec<f64>,
    got: Vec<[f64; 2]>,
}

impl<T: GridReal> Scratch<T> {
    pub(super) fn new() -> Self {
        Scratch {
            samples: Vec::new(),
            places: Vec::new(),
            cells: Vec::new(),
            width: 0,
            touched: Vec::new(),
            pieces: Vec::new(),
            coefficients: Vec::new(),
            kept: Vec::new(),
            times: Vec::new(),
            node_w: Vec::new(),
            got: Vec::new(),
        }
    }
}

impl<T: GridReal + LinalgScalar> Engine<T> {
    /// What each group of hands sees.
    fn shares(&self) -> Vec<Share> {
        let slot_of = |feed: usize| self.feeds.iter().position(|&f| f == feed).unwrap_or(0);
        let groups = self.intensity.groups().iter().enumerate();
        groups
            .flat_map(|(group, (seen, _))| match seen {
                Seen::Feed(feed) => vec![Share { group, slot: slot_of(*feed), part: 1.0 }],
                Seen::Mean => (0..2).map(|feed| Share { group, slot: slot_of(feed), part: 0.5 }).collect(),
            })
            .collect()
    }

    /// Calls `each` with every run of the view's task among `rows` (positions in the order).
    fn runs(
        &self,
        view: &View<T>,
        rows: Range<usize>,
        scratch: &mut Scratch<T>,
        mut each: impl FnMut(&Run<T>, &mut Scratch<T>),
    ) {
        let plan = &self.plan;
        let class = view.task.partition - view.task.partition % plan.channel_groups.len();
        let shares = self.shares();
        let row_at = |ordered: usize| &view.prepared.rows[view.prepared.order[ordered] as usize];
        // a pair at a time: its tracks in all bands lie close together on the grid
        let mut pair_start = rows.start;
        while pair_start < rows.end {
            let pair = row_at(pair_start).pair;
            let next = (pair_start + 1..rows.end).find(|&next| row_at(next).pair != pair).unwrap_or(rows.end);
            let of_pair = std::mem::replace(&mut pair_start, next)..next;
            if self.class[pair.0 as usize * self.stations + pair.1 as usize] as usize != class {
                continue;
            }
            for (index, band) in self.bands[view.task.partition].kernel.iter().enumerate() {
                let mine = |row: &Row| row.planned && plan.layers.of(row.w * band.middle_k) == view.task.layer;
                for &share in &shares {
                    let mut start = of_pair.start;
                    while start < of_pair.end {
                        let first = row_at(start);
                        if !mine(first) {
                            start += 1;
                            continue;
                        }
                        let most = of_pair.end.min(start + ROWS);
                        // places rise: w is followed through them
                        let goes_on = |next: usize| {
                            let (last, row) = (row_at(next - 1), row_at(next));
                            row.span == first.span && row.place > last.place && mine(row)
                        };
                        let mut end = (start + 1..most).find(|&next| !goes_on(next)).unwrap_or(most);
                        while !self.follow_w(view, start..end, band, &mut scratch.node_w) {
                            end = start + (end - start).div_ceil(2);
                        }
                        scratch.times.clear();
                        scratch.times.extend((start..end).map(|ordered| {
                            let mut powers = [T::zero(); MOST_DEGREES];
                            let polynomials = chebyshev(row_at(ordered).place, band.degrees());
                            powers.iter_mut().zip(polynomials).for_each(|(power, value)| *power = real(value));
                            powers
                        }));
                        // rows of a pair lie far apart in the block: those of the next run are asked for now
                        for next in end..of_pair.end.min(end + (end - start)) {
                            let row = view.prepared.order[next] as usize;
                            let from = view.block.index(row, band.channels.start);
                            let cells = from..from + band.channels.len() * view.block.hands;
                            fetch_soon(&view.block.data[cells.clone()]);
                            fetch_soon(&view.block.weight[cells]);
                        }
                        each(&Run { rows: start..end, band: index, of: band, share }, scratch);
                        start = end;
                    }
                }
            }
        }
    }

    /// w of some rows at the places of a band's nodes, by the polynomial through as many rows as there are powers of time;
    /// false when it passes other rows by too far.
    fn follow_w(&self, view: &View<T>, rows: Range<usize>, band: &Band<T>, node_w: &mut Vec<f64>) -> bool {
        let row_at = |ordered: usize| &view.prepared.rows[view.prepared.order[ordered] as usize];
        node_w.clear();
        let count = rows.len();
        let through = band.degrees().min(count);
        let knots: Vec<(f64, f64)> = (0..through)
            .map(|i| {
                let row = row_at(rows.start + if through == 1 { 0 } else { i * (count - 1) / (through - 1) });
                (row.place, row.w)
            })
            .collect();
        let follow = |x: f64| -> f64 {
            let term = |(i, &(at, w)): (usize, &(f64, f64))| -> f64 {
                let others = knots.iter().enumerate().filter(|&(j, _)| j != i);
                w * others.map(|(_, other)| (x - other.0) / (at - other.0)).product::<f64>()
            };
            knots.iter().enumerate().map(term).sum()
        };
        node_w.extend(band.times.iter().map(|&x| follow(x)));
        if !self.plan.layers.bends || count <= through {
            return true;
        }
        rows.clone().all(|ordered| {
            let row = row_at(ordered);
            (follow(row.place) - row.w).abs() <= self.w_error_m
        })
    }

    /// Cells of the grid per wavelength of u and v; u grows against the columns.
    fn cells_per_wavelength(&self) -> (f64, f64) {
        let (pixel, shape) = (self.plan.patch.pixel(), &self.plan.shape);
        (-pixel * shape.fft.0 as f64, pixel * shape.fft.1 as f64)
    }

    /// The coefficients of a run's modes, `[mode][block]`, and how many are kept, into `scratch`.
    fn run_coefficients(&self, view: &View<T>, run: &Run<T>, scratch: &mut Scratch<T>) {
        let layer_w = self.plan.layers.w(view.task.layer);
        let row = &view.prepared.rows[view.prepared.order[run.rows.start] as usize];
        let looks: Vec<Look<T>> = run
            .of
            .nodes
            .iter()
            .enumerate()
            .map(|(node, &(a, b))| {
                let at = |station: u32| view.table.at(row.span, (run.band, node), run.share.slot, station);
                let dw = self.plan.layers.bends.then(|| real(scratch.node_w[b] * run.of.k[a] - layer_w));
                Look { p: at(row.pair.0), q: at(row.pair.1), dw }
            })
            .collect();
        // most often the next run is that of the next span
        view.table.fetch(row.span + 1, run.share.slot, row.pair.0);
        view.table.fetch(row.span + 1, run.share.slot, row.pair.1);
        let mixing = self.bands[view.task.partition].mixing();
        scratch.coefficients.resize(looks.len() * mixing.blocks, Cell::zero());
        scratch.kept.resize(mixing.blocks, 0);
        let negligible = real(self.plan.mode_error.powi(2) / mixing.blocks as f64);
        let modes = Modes { of_nodes: &run.of.of_nodes, negligible };
        coefficients(self.instructions, &looks, &mixing, &modes, &mut scratch.coefficients, &mut scratch.kept);
    }

    /// Calls `each` with every scrap of a run that has samples: they, their places and the scrap's cells are in `scratch`.
    fn scraps(
        &self,
        view: &View<T>,
        run: &Run<T>,
        spreading: bool,
        scratch: &mut Scratch<T>,
        mut each: impl FnMut(&mut Scratch<T>),
    ) {
        let band = run.of;
        let (scale_x, scale_y) = self.cells_per_wavelength();
        let row_at = |ordered: usize| &view.prepared.rows[view.prepared.order[ordered] as usize];
        let (first, last) = (row_at(run.rows.start), row_at(run.rows.end - 1));
        let far = |uv: [f64; 2]| (uv[0] * scale_x).abs().max((uv[1] * scale_y).abs());
        let along = far(first.uv).max(far(last.uv)) * (band.ends_k.1 - band.ends_k.0);
        let across = far([last.uv[0] - first.uv[0], last.uv[1] - first.uv[1]]) * band.ends_k.1;
        let part = |length: f64, count: usize| -> Vec<Range<usize>> {
            let parts = ((length / SPAN).ceil() as usize).clamp(1, count);
            (0..parts).map(|p| p * count / parts..(p + 1) * count / parts).collect()
        };
        let channel_parts = part(along, band.channels.len());
        for lanes in part(across, run.rows.len()) {
            for local in &channel_parts {
                let ends = local.clone().map(|c| self.wavelengths_per_metre[band.channels.start + c]);
                let ends = ends.fold((f64::INFINITY, 0.0f64), |(low, high), k| (low.min(k), high.max(k)));
                let mut x = (f64::INFINITY, f64::NEG_INFINITY);
                let mut y = x;
                for lane in lanes.clone() {
                    let row = row_at(run.rows.start + lane);
                    // the very products that samples are placed by: rounding must not put one outside
                    let (x_per_k, y_per_k) = (row.uv[0] * scale_x, row.uv[1] * scale_y);
                    for k in [ends.0, ends.1] {
                        let (px, py) = (x_per_k * k, y_per_k * k);
                        x = (x.0.min(px), x.1.max(px));
                        y = (y.0.min(py), y.1.max(py));
                    }
                }
                let corner = self.lay_out(x, y, scratch);
                scratch.samples.clear();
                scratch.places.clear();
                for lane in lanes.clone() {
                    let ordered = run.rows.start + lane;
                    self.row_samples(view, run, (lane, ordered), (local.clone(), corner), spreading, scratch);
                }
                if !scratch.samples.is_empty() {
                    self.cut(x, y, corner, scratch);
                    each(scratch);
                }
            }
        }
    }

    /// Lays a scrap over positions from `x.0` to `x.1` and `y.0` to `y.1` cells; gives its corner.
    fn lay_out(&self, x: (f64, f64), y: (f64, f64), scratch: &mut Scratch<T>) -> (i64, i64) {
        let support = self.plan.window.support;
        let corner = (locate(x.0, support).0, locate(y.0, support).0);
        let width = (locate(x.1, support).0 - corner.0) as usize + support;
        let height = (locate(y.1, support).0 - corner.1) as usize + support;
        scratch.width = width;
        scratch.cells.clear();
        scratch.cells.resize(width * height, Cell::zero());
        scratch.touched.clear();
        scratch.touched.resize(height, (width as u32, 0));
        corner
    }

    /// The pieces of a scrap that samples touch. Positions beyond half the transform fold back by whole lengths of it.
    fn cut(&self, x: (f64, f64), y: (f64, f64), corner: (i64, i64), scratch: &mut Scratch<T>) {
        let shape = &self.plan.shape;
        let support = self.plan.window.support as u32;
        let fold = |middle: f64, n: usize| (middle / n as f64).round() as i64 * n as i64;
        let column = corner.0 - fold(0.5 * (x.0 + x.1), shape.fft.0) + shape.origin.0 as i64;
        let line = corner.1 - fold(0.5 * (y.0 + y.1), shape.fft.1) + shape.origin.1 as i64;
        let place = |at: i64, stored: usize, n: usize| -> usize {
            let n = n as i64;
            (if at < 0 {
                at + n
            } else if at >= stored as i64 {
                at - n
            } else {
                at
            }) as usize
        };
        scratch.pieces.clear();
        for (row, &(low, high)) in scratch.touched.iter().enumerate() {
            if high == 0 {
                continue;
            }
            let start = place(line + row as i64, shape.height, shape.fft.1) * shape.width;
            let (mut from, end) = (low as usize, (high - 1 + support) as usize);
            while from < end {
                let next = column + from as i64;
                // up to where the stored columns end
                let length = match next {
                    next if next < 0 => (end - from).min(next.unsigned_abs() as usize),
                    next if next >= shape.width as i64 => end - from,
                    _ => (end - from).min(shape.width - next as usize),
                };
                let to = start + place(next, shape.width, shape.fft.0);
                scratch.pieces.push(Piece { from: row * scratch.width + from, to, length });
                from += length;
            }
        }
    }

    /// Adds the samples of one row to a scrap's. For spreading they carry the weighted visibilities, and those without
    /// weight are left out; for prediction all that are used are there.
    #[inline(always)]
    fn row_samples(
        &self,
        view: &View<T>,
        run: &Run<T>,
        (lane, ordered): (usize, usize),
        (local, corner): (Range<usize>, (i64, i64)),
        spreading: bool,
        scratch: &mut Scratch<T>,
    ) {
        let band = run.of;
        let index = view.prepared.order[ordered] as usize;
        let row = &view.prepared.rows[index];
        let support = self.plan.window.support;
        let (scale_x, scale_y) = self.cells_per_wavelength();
        let (x_per_k, y_per_k) = (row.uv[0] * scale_x, row.uv[1] * scale_y);
        let hands = &self.intensity.groups()[run.share.group].1;
        // turns of the phase per wavenumber; from channel to channel the phase turns by the same step, and is computed anew
        // often enough that rounding stays below 1e-15
        let path = row.path + if self.plan.layers.bends { row.w * self.plan.middle_bend } else { 0.0 };
        let step = self.bands[view.task.partition].step.map(|step| cis_turns(path * step));
        let mut phase = Complex64::ONE;
        let mut last = (usize::MAX, 0);
        for (count, at) in local.enumerate() {
            let channel = band.channels.start + at;
            let k = self.wavelengths_per_metre[channel];
            phase = match step {
                Some(step) if count % ANCHOR != 0 => phase * step,
                _ => cis_turns(path * k),
            };
            let from = view.block.index(index, channel);
            let value = if spreading {
                let (value, weight) = Intensity::weighted(view.block, from, hands);
                if weight == 0.0 {
                    continue;
                }
                let value = if row.flipped { value.conj() } else { value };
                value * phase * run.share.part
            } else {
                if !hands.iter().any(|hand| view.block.weight[from + hand] > 0.0) {
                    continue;
                }
                scratch.places.push(Place { ordered, channel, phase });
                Complex64::ONE
            };
            let (first_x, fx) = locate(x_per_k * k, support);
            let (first_y, fy) = locate(y_per_k * k, support);
            let (down, across) = ((first_y - corner.1) as usize, (first_x - corner.0) as u32);
            // many channels start at the same cell
            if (down, across) != last {
                last = (down, across);
                for touched in &mut scratch.touched[down..down + support] {
                    *touched = (touched.0.min(across), touched.1.max(across + 1));
                }
            }
            scratch.samples.push(Sample {
                cell: (down * scratch.width) as u32 + across,
                channel: at as u32,
                row: lane as u32,
                fx: real(fx),
                fy: real(fy),
                re: real(value.re),
                im: real(value.im),
            });
        }
    }

    fn scrap<'a>(&'a self, run: &Run<'a, T>, width: usize, times: &'a [[T; MOST_DEGREES]]) -> Scrap<'a, T> {
        Scrap { profiles: &run.of.profiles, degrees: run.of.degrees(), times, width, window: &self.window }
    }

    /// Spreads the rows of a view (positions in the order) onto the task's grid.
    pub(super) fn spread_rows(
        &self,
        view: &View<T>,
        rows: Range<usize>,
        scratch: &mut Scratch<T>,
        grid: &mut [Cell<T>],
    ) {
        let blocks = self.bands[view.task.partition].mixing().blocks;
        let mut expansion = Expansion::new(blocks);
        self.runs(view, rows, scratch, |run, scratch| {
            let mut ready = false;
            self.scraps(view, run, true, scratch, |scratch| {
                if !ready {
                    self.run_coefficients(view, run, scratch);
                    expansion.take(&scratch.coefficients, &scratch.kept);
                    ready = true;
                }
                fetch(grid, &scratch.pieces, blocks);
                let with = self.scrap(run, scratch.width, &scratch.times);
                spread(self.instructions, &scratch.samples, &with, &mut scratch.cells);
                expand(self.instructions, &scratch.cells, &scratch.pieces, &expansion, grid);
            });
        });
    }

    /// Reads the grid of a task at the rows of a view (positions in the order): `each` gets a sample's place, the share it
    /// is, and its value turned back to the image's centre.
    pub(super) fn gather_rows(
        &self,
        view: &View<T>,
        rows: Range<usize>,
        scratch: &mut Scratch<T>,
        grid: &[Cell<T>],
        mut each: impl FnMut(&Place, Share, Complex64),
    ) {
        let blocks = self.bands[view.task.partition].mixing().blocks;
        let mut collection = Collection { cells: Vec::new() };
        self.runs(view, rows, scratch, |run, scratch| {
            let mut ready = false;
            self.scraps(view, run, false, scratch, |scratch| {
                if !ready {
                    self.run_coefficients(view, run, scratch);
                    collection.cells.clear();
                    collection.cells.resize(blocks * LANES, [Cell::zero(); 2]);
                    for (mode, coefficients) in scratch.coefficients.chunks_exact(blocks).enumerate() {
                        let terms = coefficients.iter().flat_map(|c| (0..LANES).map(move |j| (c[j], c[j + LANES])));
                        for ((re, im), [plain, turned]) in terms.zip(&mut collection.cells) {
                            (plain[mode], plain[mode + LANES]) = (re, -im);
                            (turned[mode], turned[mode + LANES]) = (im, re);
                        }
                    }
                    ready = true;
                }
                fetch(grid, &scratch.pieces, blocks);
                collect(self.instructions, grid, &scratch.pieces, &collection, &mut scratch.cells);
                scratch.got.resize(scratch.samples.len(), [0.0; 2]);
                let with = self.scrap(run, scratch.width, &scratch.times);
                gather(self.instructions, &scratch.samples, &with, &scratch.cells, &mut scratch.got);
                for (place, got) in scratch.places.iter().zip(&scratch.got) {
                    let value = Complex64::new(got[0], got[1]) * place.phase.conj();
                    let flipped = view.prepared.rows[view.prepared.order[place.ordered] as usize].flipped;
                    each(place, run.share, if flipped { value.conj() } else { value });
                }
            });
        });
    }
}
