//! Point spread functions of the search image at a grid of places, from one pass over the visibilities.
//!
//! The search image is r = N/t, t the noise of N (t = √W for natural weights): its noise is 1 everywhere. A source of
//! S Jy at s adds a p(x; s) with a = S W(s)/t(s) and
//!
//! p(x; s) = P(x, s) t(s) / (W(s) t(x)),  P(x, s) = Σ_k ω_k Re[A_k*(x) A_k(s) e^{2πi(…)}],  p(s; s) = 1.
//!
//! P differs from place to place in two ways: pointings contribute differently, and within a pointing the classes of
//! stations do. The first, much the larger, is followed: with W_j the normaliser of pointing j alone and its measured
//! P_j(x, s_j) for one source s_j near its aim,
//!
//! P(x, s) ≈ Σ_j √W_j(x) √W_j(s) q_j(x − s),  q_j(d) = P_j(s_j + d, s_j) / (√W_j(s_j + d) √W_j(s_j)),
//!
//! which is exact when all stations of a pointing have one beam. What it leaves is measured after every major cycle (the
//! residual expected against the true one) and bounds the depth of the next minor cycle.

use super::residual::Part;
use crate::observation::{Block, Watched};
use crate::response::{ResponseError, Sums};
use crate::sky::{Component, ImageGeometry};
use ndarray::Array2;
use rayon::prelude::*;

/// Memory of all local point spread functions, bytes.
const MEMORY: usize = 512 << 20;
/// Places along each axis for a mosaic.
const PLACES: usize = 8;
/// A pointing's own response, relative to its largest, below which its point spread function is not known.
const LOWEST_OWN_RESPONSE: f64 = 0.03;

/// A point spread function around its peak, 1 there.
#[derive(Debug, Clone, PartialEq)]
pub struct Patch {
    /// Pixels to each side: columns, rows.
    pub half: (usize, usize),
    /// `[dy + half.1][dx + half.0]`.
    pub values: Vec<f32>,
}

impl Patch {
    /// A patch of zeros.
    pub fn zeros(half: (usize, usize)) -> Patch {
        Patch { half, values: vec![0.0; (2 * half.0 + 1) * (2 * half.1 + 1)] }
    }

    /// A patch from a function of (dx, dy).
    pub fn from_fn(half: (usize, usize), f: impl Fn(i64, i64) -> f64) -> Patch {
        let (hx, hy) = (half.0 as i64, half.1 as i64);
        let values = (-hy..=hy).flat_map(|dy| (-hx..=hx).map(move |dx| (dx, dy))).map(|(dx, dy)| f(dx, dy) as f32);
        Patch { half, values: values.collect() }
    }

    /// The row at offset `dy`.
    pub fn row(&self, dy: i64) -> &[f32] {
        let width = 2 * self.half.0 + 1;
        let row = (dy + self.half.1 as i64) as usize;
        &self.values[row * width..(row + 1) * width]
    }

    /// The value at an offset; 0 beyond.
    pub fn at(&self, dx: i64, dy: i64) -> f32 {
        let (hx, hy) = (self.half.0 as i64, self.half.1 as i64);
        if dx.abs() > hx || dy.abs() > hy { 0.0 } else { self.row(dy)[(dx + hx) as usize] }
    }
}

/// The images that turn numerators into the search image and back; all `[y][x]`.
#[derive(Debug, Clone)]
pub struct Scaling {
    /// Normaliser W, Jy⁻².
    pub normaliser: Array2<f64>,
    /// Noise of the numerator, t, Jy⁻¹; 0 where blank.
    pub noise: Array2<f64>,
    /// √(weight map) = W/t, Jy⁻¹: signal to noise of 1 Jy; 0 where blank.
    pub per_jy: Array2<f64>,
}

impl Scaling {
    /// From the normaliser and the weight map (inverse variance of N/W); blank where `seen` is false.
    pub fn new(normaliser: &Array2<f64>, weight: &Array2<f64>, seen: &Array2<bool>) -> Scaling {
        let mut noise = Array2::zeros(normaliser.dim());
        let mut per_jy = Array2::zeros(normaliser.dim());
        let all = noise.iter_mut().zip(per_jy.iter_mut()).zip(normaliser.iter().zip(weight)).zip(seen);
        for (((noise, per_jy), (&w, &weight)), &seen) in all {
            if seen && w > 0.0 && weight > 0.0 {
                *per_jy = weight.sqrt();
                *noise = w / *per_jy;
            }
        }
        Scaling { normaliser: normaliser.clone(), noise, per_jy }
    }

    /// The search image of a numerator; 0 where blank.
    pub fn search_image(&self, numerator: &Array2<f64>) -> Vec<f32> {
        let pairs = numerator.iter().zip(&self.noise);
        pairs.map(|(n, &t)| if t > 0.0 { (n / t) as f32 } else { 0.0 }).collect()
    }
}

/// Local point spread functions: each pixel takes that of the cell it lies in.
#[derive(Debug, Clone)]
pub struct LocalPsfs {
    cells: (usize, usize),
    cell_px: (usize, usize),
    patches: Vec<Option<Patch>>,
    /// Highest side lobe (absolute value away from the main lobe) within the patches.
    pub side_lobe: f64,
    /// Largest absolute value known beyond the patches.
    pub beyond: f64,
    /// By cell: the normaliser at the place that stands for it, Jy⁻²; 0 where nothing is seen.
    pub peaks: Vec<f64>,
    /// Normaliser of the visibilities that they were measured with, `[y][x]`, Jy⁻².
    pub normaliser: Array2<f64>,
}

impl LocalPsfs {
    /// The same patch everywhere.
    pub fn uniform(width: usize, height: usize, patch: Patch) -> LocalPsfs {
        let side_lobe = side_lobe(&patch);
        LocalPsfs {
            cells: (1, 1),
            cell_px: (width.max(1), height.max(1)),
            patches: vec![Some(patch)],
            side_lobe,
            beyond: 0.0,
            peaks: vec![1.0],
            normaliser: Array2::ones((height, width)),
        }
    }

    /// The cell that pixel (x, y) lies in.
    pub fn cell(&self, x: usize, y: usize) -> usize {
        let (cx, cy) = (x / self.cell_px.0, y / self.cell_px.1);
        cy.min(self.cells.1 - 1) * self.cells.0 + cx.min(self.cells.0 - 1)
    }

    /// The patch of pixel (x, y); `None` where nothing is seen.
    pub fn patch(&self, x: usize, y: usize) -> Option<&Patch> {
        self.patches[self.cell(x, y)].as_ref()
    }

    /// All patches, by cell.
    pub fn patches(&self) -> &[Option<Patch>] {
        &self.patches
    }

    /// Measures them. `most_half` bounds the patches' half width, `copies` says how many images of a patch's size the
    /// caller makes of each.
    ///
    /// # Errors
    /// When visibilities cannot be read.
    pub fn measure(
        parts: &mut [Part],
        geometry: &ImageGeometry,
        scaling: &Scaling,
        most_half: usize,
        copies: usize,
        rows: &mut (dyn FnMut(u64) + Send),
    ) -> Result<LocalPsfs, ResponseError> {
        let (width, height) = (geometry.width, geometry.height);
        let half = ((width - 1).min(most_half), (height - 1).min(most_half));
        let pixels = (2 * half.0 + 1) * (2 * half.1 + 1);
        let affordable = (MEMORY / (4 * pixels * copies.max(1))).max(1).isqrt();
        let along = if parts.len() > 1 { PLACES.min(affordable) } else { 1 };
        let cells = (along.min(width), along.min(height));
        let cell_px = (width.div_ceil(cells.0), height.div_ceil(cells.1));
        let places: Vec<Option<(usize, usize)>> = (0..cells.0 * cells.1)
            .map(|cell| {
                let (cx, cy) = (cell % cells.0, cell / cells.0);
                place_in_cell(scaling, (cx * cell_px.0, cy * cell_px.1), cell_px)
            })
            .collect();
        let mut sums: Vec<Option<Vec<f64>>> = places.iter().map(|p| p.map(|_| vec![0.0; pixels])).collect();
        let mut beyond: f64 = 0.0;
        let mut normaliser = Array2::zeros((height, width));
        for part in parts {
            let Some(own) = OwnPsf::measure(part, geometry, &mut normaliser, rows)? else { continue };
            sums.par_iter_mut().zip(&places).for_each(|(sum, place)| {
                if let (Some(sum), Some(place)) = (sum, place) {
                    own.add(sum, half, *place, scaling);
                }
            });
            beyond = beyond.max(own.largest_beyond(half));
        }
        let middle = half.1 * (2 * half.0 + 1) + half.0;
        let peaks = sums.iter().map(|sum| sum.as_ref().map_or(0.0, |sum| sum[middle])).collect();
        let patches: Vec<Option<Patch>> = sums
            .into_iter()
            .zip(&places)
            .map(|(sum, place)| Some(normalised(sum?, half, (*place)?, scaling)))
            .collect();
        let side_lobe = patches.iter().flatten().map(side_lobe).fold(0.0, f64::max);
        Ok(LocalPsfs { cells, cell_px, patches, side_lobe, beyond, peaks, normaliser })
    }
}

/// The pixel of a cell that stands for it: the seen pixel nearest to its middle.
fn place_in_cell(scaling: &Scaling, origin: (usize, usize), size: (usize, usize)) -> Option<(usize, usize)> {
    let (height, width) = scaling.noise.dim();
    let middle = ((origin.0 + size.0 / 2) as i64, (origin.1 + size.1 / 2) as i64);
    let columns = origin.0..(origin.0 + size.0).min(width);
    (origin.1..(origin.1 + size.1).min(height))
        .flat_map(|y| columns.clone().map(move |x| (x, y)))
        .filter(|&(x, y)| scaling.noise[[y, x]] > 0.0)
        .min_by_key(|&(x, y)| (x as i64 - middle.0).pow(2) + (y as i64 - middle.1).pow(2))
}

/// What one pointing alone makes of one source near its aim.
struct OwnPsf {
    width: usize,
    height: usize,
    /// The source's pixel.
    place: (i64, i64),
    /// √W_j, 0 where too little is seen.
    root: Vec<f64>,
    /// q_j on the pixels of the image; NaN where unknown.
    spread: Vec<f64>,
}

impl OwnPsf {
    fn measure(
        part: &mut Part,
        geometry: &ImageGeometry,
        normaliser: &mut Array2<f64>,
        rows: &mut (dyn FnMut(u64) + Send),
    ) -> Result<Option<OwnPsf>, ResponseError> {
        let (width, height) = (geometry.width, geometry.height);
        let (x, y) = geometry.pixel_of(part.aim).unwrap_or((0.0, 0.0));
        let inside = |v: f64, n: usize| v.round().clamp(0.0, (n - 1) as f64);
        let (x, y) = (inside(x, width), inside(y, height));
        let unit = Component {
            name: "unit".to_owned(),
            direction: geometry.direction_of(x, y).unwrap_or(geometry.centre),
            flux_jy: 1.0,
            reference_hz: 1.0,
            spectral_index: 0.0,
        };
        let sky = [unit];
        let mut sums = Sums::zero(geometry);
        let (response, exact) = (part.response, part.exact);
        let mut modelled = Watched::new(part.source, |block: &mut Block| {
            rows(block.rows() as u64);
            exact.predict_exactly(&sky, block);
            Ok(())
        });
        response.adjoint(&mut modelled, &mut sums)?;
        *normaliser += &sums.normaliser;
        let most = sums.normaliser.iter().copied().fold(0.0, f64::max);
        let place = (x as i64, y as i64);
        let at_place = sums.normaliser[[y as usize, x as usize]];
        // an aim so far beyond the image that its edge sees next to nothing
        if most.is_nan() || most <= 0.0 || at_place < LOWEST_OWN_RESPONSE.powi(2) * most {
            return Ok(None);
        }
        let root: Vec<f64> = sums.normaliser.iter().map(|w| w.max(0.0).sqrt()).collect();
        let least = LOWEST_OWN_RESPONSE * most.sqrt();
        let spread = sums
            .numerator
            .iter()
            .zip(&root)
            .map(|(n, &root)| if root >= least { n / (root * at_place.sqrt()) } else { f64::NAN })
            .collect();
        Ok(Some(OwnPsf { width, height, place, root, spread }))
    }

    fn spread_at(&self, x: i64, y: i64) -> f64 {
        let inside = (0..self.width as i64).contains(&x) && (0..self.height as i64).contains(&y);
        if inside { self.spread[y as usize * self.width + x as usize] } else { f64::NAN }
    }

    /// q_j(d); where it was not seen, that of −d (it is symmetric), and 0 where neither was.
    fn q(&self, dx: i64, dy: i64) -> f64 {
        let seen = self.spread_at(self.place.0 + dx, self.place.1 + dy);
        let value = if seen.is_nan() { self.spread_at(self.place.0 - dx, self.place.1 - dy) } else { seen };
        if value.is_nan() { 0.0 } else { value }
    }

    /// Adds this pointing's share of P(c + d, c) to a patch about `place`; where c + d is not seen, with the responses at
    /// c (a source elsewhere in the cell may reach such an offset).
    fn add(&self, sum: &mut [f64], half: (usize, usize), place: (usize, usize), scaling: &Scaling) {
        let here = self.root[place.1 * self.width + place.0];
        if here * here < 1e-6 * scaling.normaliser[[place.1, place.0]] {
            return;
        }
        let columns = 2 * half.0 + 1;
        for (row, sums) in sum.chunks_mut(columns).enumerate() {
            let dy = row as i64 - half.1 as i64;
            let y = place.1 as i64 + dy;
            for (column, sum) in sums.iter_mut().enumerate() {
                let dx = column as i64 - half.0 as i64;
                let x = place.0 as i64 + dx;
                let there =
                    if seen(scaling, x, y) { self.root[y as usize * self.width + x as usize] } else { here };
                *sum += here * there * self.q(dx, dy);
            }
        }
    }

    /// Largest value seen outside a patch.
    fn largest_beyond(&self, half: (usize, usize)) -> f64 {
        let mut largest: f64 = 0.0;
        for (at, value) in self.spread.iter().enumerate().filter(|(_, value)| !value.is_nan()) {
            let (dx, dy) = ((at % self.width) as i64 - self.place.0, (at / self.width) as i64 - self.place.1);
            if dx.unsigned_abs() as usize > half.0 || dy.unsigned_abs() as usize > half.1 {
                largest = largest.max(value.abs());
            }
        }
        largest
    }
}

fn seen(scaling: &Scaling, x: i64, y: i64) -> bool {
    let (height, width) = scaling.noise.dim();
    (0..width as i64).contains(&x)
        && (0..height as i64).contains(&y)
        && scaling.noise[[y as usize, x as usize]] > 0.0
}

/// p = P t(c) / (W(c) t(x)), with t(c) for t(x) where x is not seen; exactly 1 at the peak.
fn normalised(sum: Vec<f64>, half: (usize, usize), place: (usize, usize), scaling: &Scaling) -> Patch {
    let columns = 2 * half.0 + 1;
    let peak = sum[half.1 * columns + half.0];
    let here = scaling.noise[[place.1, place.0]];
    let values = sum
        .iter()
        .enumerate()
        .map(|(at, value)| {
            let x = place.0 as i64 + (at % columns) as i64 - half.0 as i64;
            let y = place.1 as i64 + (at / columns) as i64 - half.1 as i64;
            let ratio = if seen(scaling, x, y) { here / scaling.noise[[y as usize, x as usize]] } else { 1.0 };
            if peak > 0.0 { (value / peak * ratio) as f32 } else { 0.0 }
        })
        .collect();
    Patch { half, values }
}

/// The largest absolute value outside the main lobe: the connected pixels around the peak above zero.
fn side_lobe(patch: &Patch) -> f64 {
    let (columns, rows) = (2 * patch.half.0 + 1, 2 * patch.half.1 + 1);
    let mut main = vec![false; patch.values.len()];
    let start = patch.half.1 * columns + patch.half.0;
    let mut open = vec![start];
    main[start] = true;
    while let Some(at) = open.pop() {
        let (x, y) = (at % columns, at / columns);
        let mut visit = |next: usize| {
            // a lobe falls outwards: what rises again is a side lobe
            if !main[next] && patch.values[next] > 0.0 && patch.values[next] <= patch.values[at] {
                main[next] = true;
                open.push(next);
            }
        };
        if x > 0 {
            visit(at - 1);
        }
        if x + 1 < columns {
            visit(at + 1);
        }
        if y > 0 {
            visit(at - columns);
        }
        if y + 1 < rows {
            visit(at + columns);
        }
    }
    patch.values.iter().zip(&main).filter(|(_, main)| !**main).map(|(v, _)| f64::from(v.abs())).fold(0.0, f64::max)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_patch_is_indexed_by_offset() {
        let patch = Patch::from_fn((2, 1), |dx, dy| (10 * dy + dx) as f64);
        assert_eq!((patch.at(0, 0), patch.at(2, -1), patch.at(-2, 1)), (0.0, -8.0, 8.0));
        assert_eq!((patch.at(3, 0), patch.at(0, 2)), (0.0, 0.0));
        assert_eq!(patch.row(1), [8.0, 9.0, 10.0, 11.0, 12.0]);
    }

    #[test]
    fn the_side_lobe_is_not_the_main_lobe() {
        let patch = Patch::from_fn((20, 20), |dx, dy| {
            let r = (dx as f64).hypot(dy as f64);
            if r < 4.0 {
                1.0 - r / 4.0
            } else if (9.0..11.0).contains(&r) {
                -0.3
            } else {
                0.1
            }
        });
        assert!((side_lobe(&patch) - 0.3).abs() < 1e-6);
    }

    /// Natural weights: t = √W, so that 1 Jy is W/t = √W in the search image.
    #[test]
    fn scaling_of_natural_weights() {
        let w = ndarray::array![[4.0, 0.0, 9.0]];
        let scaling = Scaling::new(&w, &w, &ndarray::array![[true, true, false]]);
        assert_eq!(scaling.noise, ndarray::array![[2.0, 0.0, 0.0]]);
        assert_eq!(scaling.per_jy, ndarray::array![[2.0, 0.0, 0.0]]);
        assert_eq!(scaling.search_image(&ndarray::array![[8.0, 1.0, 1.0]]), [4.0, 0.0, 0.0]);
        // twice the noise that natural weights would have: half the signal to noise
        let scaling = Scaling::new(&w, &(&w / 4.0), &ndarray::array![[true, true, true]]);
        assert_eq!((scaling.noise[[0, 0]], scaling.per_jy[[0, 2]]), (4.0, 1.5));
    }
}
