//! A block's rows made ready: about the patch's centre, on the side of w ≥ 0, in the order of station pairs.

use super::Engine;
use crate::observation::Block;
use crate::response::ResponseError;
use crate::response::gridded::bands::Span;
use crate::response::gridded::plan::Plan;
use crate::response::gridded::vector::GridReal;
use ndarray::LinalgScalar;
use rayon::prelude::*;
use std::collections::HashMap;

/// A row about the patch's centre. Rows of negative w are taken as the conjugate visibility of the opposite baseline: only
/// real parts count, and half the range of w needs half the layers.
#[derive(Debug, Clone, Copy)]
pub(super) struct Row {
    /// u′ and v′, metres.
    pub uv: [f64; 2],
    /// Path from the image's centre to the patch's, metres.
    pub path: f64,
    /// w, metres; never negative.
    pub w: f64,
    /// First and second station.
    pub pair: (u32, u32),
    /// Which of the block's spans it lies in, and where in it, −1 to 1.
    pub span: u32,
    pub place: f64,
    /// Whether it stands for the opposite baseline.
    pub flipped: bool,
    /// Whether it lies within what grids and layers were made for.
    pub planned: bool,
}

/// A block's rows about the patch's centre, and the spans of time they lie in.
pub(super) struct Prepared {
    pub rows: Vec<Row>,
    /// Row indices, pair by pair, in the order of the block.
    pub order: Vec<u32>,
    /// Parallactic angles of all stations at the nodes' places of each span, `[span][place][station]`.
    pub angles: Vec<Vec<Vec<f64>>>,
}

impl<T: GridReal + LinalgScalar> Engine<T> {
    pub(super) fn prepare(&self, block: &Block) -> Prepared {
        let mut spans: Vec<Span> = Vec::new();
        let mut known = HashMap::new();
        let mut found = HashMap::new();
        let mut place = Vec::with_capacity(block.rows());
        for &mjd in &block.mjd_utc {
            let at = *known.entry(mjd.to_bits()).or_insert_with(|| {
                let span = self.lattice.span(mjd);
                let index = *found.entry((span.middle.to_bits(), span.half.to_bits())).or_insert_with(|| {
                    spans.push(span);
                    spans.len() as u32 - 1
                });
                (index, span.place(mjd))
            });
            place.push(at);
        }
        let angles = spans
            .par_iter()
            .map(|span| self.places.iter().map(|x| self.beams.angles_at(span.middle + span.half * x)).collect())
            .collect();
        let Plan { reach_m, w_m, .. } = &self.plan;
        // rounding of rotations of baselines of some thousand kilometres
        let within = |value: f64, low: f64, high: f64| value >= low - 1e-6 && value <= high + 1e-6;
        let rows: Vec<Row> = (0..block.rows())
            .into_par_iter()
            .map(|row| {
                let turned = self.recentre.turn(block.uvw_m[row]);
                let (u, v, path) = self.plan.patch.effective(turned.uvw_m);
                let (path, w) = (turned.shift_m + path, turned.uvw_m[2]);
                let (p, q) = (block.first[row], block.second[row]);
                let (span, place) = place[row];
                let flipped = w < 0.0;
                let (uv, path, w, pair) =
                    if flipped { ([-u, -v], -path, -w, (q, p)) } else { ([u, v], path, w, (p, q)) };
                let planned = within(uv[0], -reach_m.0, reach_m.0)
                    && within(uv[1], -reach_m.1, reach_m.1)
                    && within(w, w_m.0, w_m.1);
                Row { uv, path, w, pair, span, place, flipped, planned }
            })
            .collect();
        // stable counting sort
        let key = |row: &Row| row.pair.0 as usize * self.stations + row.pair.1 as usize;
        let mut starts = vec![0u32; self.stations * self.stations + 1];
        rows.iter().for_each(|row| starts[key(row) + 1] += 1);
        for pair in 1..starts.len() {
            starts[pair] += starts[pair - 1];
        }
        let mut order = vec![0u32; rows.len()];
        for (index, row) in rows.iter().enumerate() {
            let place = &mut starts[key(row)];
            order[*place as usize] = index as u32;
            *place += 1;
        }
        Prepared { rows, order, angles }
    }

    /// Refuses rows with usable visibilities that lie beyond what grids and layers were made for.
    pub(super) fn check_reach(&self, block: &Block, prepared: &Prepared) -> Result<(), ResponseError> {
        for (row, prepared) in prepared.rows.iter().enumerate() {
            let cells = block.index(row, 0)..block.index(row + 1, 0);
            if !prepared.planned && block.weight[cells].iter().any(|weight| *weight > 0.0) {
                return Err(ResponseError::Unplanned { row });
            }
        }
        Ok(())
    }
}
