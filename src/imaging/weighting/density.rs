//! How densely the u, v plane is filled: the sum of inverse variances in every cell.

use std::collections::HashMap;

/// Filled cells that a density may have in any case, half of the plane counted: 7/8 of 2²⁵ places of 25 bytes, 0.84 GB,
/// and half as much again while the table grows.
pub(super) const MOST_CELLS: usize = 7 << 22;

/// Beyond this many cells from the centre positions are not told apart: far outside any array, well inside an i64.
const FARTHEST: f64 = 1e18;

/// A cell, as (column, row) from that of the centre.
type Cell = (i64, i64);

/// The sum D of inverse variances in every filled cell, where each visibility counts at (u, v) and at (−u, −v).
///
/// Opposite cells hold the same, so that only one of each two is kept. What lies in the cell of the centre lies there twice.
#[derive(Debug, Clone, Default)]
pub(super) struct Density {
    half: HashMap<Cell, f64>,
    /// Sum of all, each visibility counted once.
    total: f64,
}

/// The cell of (u, v), or the opposite one: that of the two which is kept.
fn kept(u: f64, v: f64, sides: (f64, f64)) -> Cell {
    let count = |at: f64, side: f64| (at / side).round().clamp(-FARTHEST, FARTHEST) as i64;
    let (x, y) = (count(u, sides.0), count(v, sides.1));
    if y > 0 || (y == 0 && x >= 0) { (x, y) } else { (-x, -y) }
}

impl Density {
    /// Adds a visibility at u, v, in the unit of the cells' `sides`.
    pub(super) fn add(&mut self, u: f64, v: f64, sides: (f64, f64), weight: f64) {
        let cell = kept(u, v, sides);
        let times = if cell == (0, 0) { 2.0 } else { 1.0 };
        *self.half.entry(cell).or_default() += times * weight;
        self.total += weight;
    }

    /// D in the cell of u, v; 0 where nothing is.
    pub(super) fn at(&self, u: f64, v: f64, sides: (f64, f64)) -> f64 {
        self.half.get(&kept(u, v, sides)).copied().unwrap_or(0.0)
    }

    /// Cells kept.
    pub(super) fn cells(&self) -> usize {
        self.half.len()
    }

    /// f² of robust weights: (5 · 10^−R)² · 2Σw / Σ D², sums of D² over all cells, hence of w twice over all visibilities.
    pub(super) fn robust(&self, robustness: f64) -> f64 {
        // sums over a map go in no fixed order: sorted, so that runs repeat to the last bit
        let mut squares: Vec<f64> =
            self.half.iter().map(|(cell, d)| if *cell == (0, 0) { d * d } else { 2.0 * d * d }).collect();
        squares.sort_by(f64::total_cmp);
        let squares: f64 = squares.iter().sum();
        if squares > 0.0 { (5.0 * 10f64.powf(-robustness)).powi(2) * 2.0 * self.total / squares } else { 0.0 }
    }
}
