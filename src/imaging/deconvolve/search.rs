//! Peak search and subtraction: the two inner loops of every minor cycle.
//!
//! Both run over whole rows of f32 in plain loops that compile to vector instructions; a subtraction notes the highest
//! peak of every row it touches, so that a search looks at one number a row.

use super::local_psf::Patch;
use rayon::prelude::*;

/// Pixels of one subtraction above which rows are shared among threads.
const SHARED: usize = 1 << 17;

/// Where a component may lie: a peak counts where it exceeds the level of its pixel. Infinite: never.
#[derive(Debug, Clone, PartialEq)]
pub struct Levels {
    /// For positive peaks.
    pub up: Vec<f32>,
    /// For negative peaks (as positive numbers).
    pub down: Vec<f32>,
}

/// A peak found.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Peak {
    /// Column.
    pub x: usize,
    /// Row.
    pub y: usize,
    /// Value, with its sign.
    pub value: f32,
}

/// Something that knows its peaks and can have a point spread function taken off.
pub trait Searched {
    /// The highest peak above its level; `None` when there is none.
    fn peak(&self) -> Option<Peak>;
    /// Takes off `amount` times `patch`, its middle at (x, y).
    fn subtract(&mut self, x: usize, y: usize, amount: f32, patch: &Patch);
    /// Sets the level for negative peaks of one pixel.
    fn set_down(&mut self, x: usize, y: usize, level: f32);
}

/// The whole image.
pub struct Whole {
    width: usize,
    height: usize,
    image: Vec<f32>,
    levels: Levels,
    /// Highest excess-worthy peak of each row.
    rows: Vec<f32>,
}

/// What a pixel counts for: its absolute value where it exceeds its level, else 0.
#[inline(always)]
fn counts(value: f32, up: f32, down: f32) -> f32 {
    let above = if value > up { value } else { 0.0 };
    let below = if -value > down { -value } else { 0.0 };
    if above > below { above } else { below }
}

/// The highest count of a row.
fn row_peak(image: &[f32], up: &[f32], down: &[f32]) -> f32 {
    const LANES: usize = 16;
    let mut best = [0.0f32; LANES];
    let whole = image.len() / LANES * LANES;
    let chunks = image[..whole].chunks_exact(LANES);
    for ((v, u), d) in chunks.zip(up[..whole].chunks_exact(LANES)).zip(down[..whole].chunks_exact(LANES)) {
        for lane in 0..LANES {
            let count = counts(v[lane], u[lane], d[lane]);
            best[lane] = if count > best[lane] { count } else { best[lane] };
        }
    }
    let rest = (whole..image.len()).map(|i| counts(image[i], up[i], down[i]));
    best.into_iter().chain(rest).fold(0.0, f32::max)
}

/// image −= amount · patch, over one stretch of a row.
fn subtract_row(image: &mut [f32], amount: f32, patch: &[f32]) {
    for (value, p) in image.iter_mut().zip(patch) {
        *value -= amount * p;
    }
}

impl Whole {
    /// An image `[y][x]` of finite values.
    pub fn new(width: usize, height: usize, image: Vec<f32>, levels: Levels) -> Whole {
        let mut whole = Whole { width, height, image, levels, rows: vec![0.0; height] };
        whole.rows = (0..height).into_par_iter().map(|y| whole.peak_of_row(y)).collect();
        whole
    }

    fn peak_of_row(&self, y: usize) -> f32 {
        let row = y * self.width..(y + 1) * self.width;
        row_peak(&self.image[row.clone()], &self.levels.up[row.clone()], &self.levels.down[row])
    }

    /// The image as it stands.
    pub fn into_image(self) -> Vec<f32> {
        self.image
    }

    /// The levels.
    pub fn levels(&self) -> &Levels {
        &self.levels
    }
}

impl Searched for Whole {
    fn peak(&self) -> Option<Peak> {
        let (mut y, mut best) = (0, 0.0);
        for (row, &count) in self.rows.iter().enumerate() {
            if count > best {
                (y, best) = (row, count);
            }
        }
        if best <= 0.0 {
            return None;
        }
        let start = y * self.width;
        let x = (0..self.width).find(|x| {
            let at = start + x;
            counts(self.image[at], self.levels.up[at], self.levels.down[at]) == best
        })?;
        Some(Peak { x, y, value: self.image[start + x] })
    }

    fn subtract(&mut self, x: usize, y: usize, amount: f32, patch: &Patch) {
        let (hx, hy) = patch.half;
        let (x0, x1) = (x.saturating_sub(hx), (x + hx + 1).min(self.width));
        let (y0, y1) = (y.saturating_sub(hy), (y + hy + 1).min(self.height));
        let first = x0 + hx - x;
        let width = self.width;
        let one = |row: usize, image: &mut [f32], count: &mut f32, up: &[f32], down: &[f32]| {
            let from = patch.row(row as i64 - y as i64);
            subtract_row(&mut image[x0..x1], amount, &from[first..first + (x1 - x0)]);
            *count = row_peak(image, up, down);
        };
        let pixels = y0 * width..y1 * width;
        let (image, rows) = (&mut self.image[pixels.clone()], &mut self.rows[y0..y1]);
        let (up, down) = (&self.levels.up[pixels.clone()], &self.levels.down[pixels]);
        if (x1 - x0) * (y1 - y0) < SHARED {
            let all = image.chunks_mut(width).zip(rows).zip(up.chunks(width).zip(down.chunks(width)));
            for (at, ((image, count), (up, down))) in all.enumerate() {
                one(y0 + at, image, count, up, down);
            }
        } else {
            image
                .par_chunks_mut(width)
                .zip(rows)
                .zip(up.par_chunks(width).zip(down.par_chunks(width)))
                .enumerate()
                .with_min_len(32)
                .for_each(|(at, ((image, count), (up, down)))| one(y0 + at, image, count, up, down));
        }
    }

    fn set_down(&mut self, x: usize, y: usize, level: f32) {
        self.levels.down[y * self.width + x] = level;
        self.rows[y] = self.peak_of_row(y);
    }
}

/// Only the pixels that exceed a limit, row by row (Clark 1980).
pub struct Listed {
    /// Start of each row's pixels in the lists below, and the end of the last.
    starts: Vec<usize>,
    columns: Vec<u32>,
    values: Vec<f32>,
    levels: Levels,
    rows: Vec<f32>,
}

impl Listed {
    /// Lists the pixels of `image` whose absolute value exceeds `limit` and that may hold a component.
    pub fn new(width: usize, image: &[f32], levels: &Levels, limit: f32) -> Listed {
        let mut listed = Listed {
            starts: vec![0],
            columns: Vec::new(),
            values: Vec::new(),
            levels: Levels { up: Vec::new(), down: Vec::new() },
            rows: Vec::new(),
        };
        for (y, row) in image.chunks(width).enumerate() {
            for (x, &value) in row.iter().enumerate() {
                let (up, down) = (levels.up[y * width + x], levels.down[y * width + x]);
                if value.abs() >= limit && (up.is_finite() || down.is_finite()) {
                    listed.columns.push(x as u32);
                    listed.values.push(value);
                    listed.levels.up.push(up);
                    listed.levels.down.push(down);
                }
            }
            listed.starts.push(listed.columns.len());
            listed.rows.push(0.0);
            listed.rows[y] = listed.peak_of_row(y);
        }
        listed
    }

    fn peak_of_row(&self, y: usize) -> f32 {
        let row = self.starts[y]..self.starts[y + 1];
        row_peak(&self.values[row.clone()], &self.levels.up[row.clone()], &self.levels.down[row])
    }

    /// Pixels listed.
    pub fn len(&self) -> usize {
        self.values.len()
    }

    /// Whether none is.
    pub fn is_empty(&self) -> bool {
        self.values.is_empty()
    }

    /// (x, y, value) of every pixel listed.
    pub fn pixels(&self) -> impl Iterator<Item = (usize, usize, f32)> + '_ {
        (0..self.rows.len()).flat_map(move |y| {
            (self.starts[y]..self.starts[y + 1]).map(move |at| (self.columns[at] as usize, y, self.values[at]))
        })
    }
}

impl Searched for Listed {
    fn peak(&self) -> Option<Peak> {
        let (mut y, mut best) = (0, 0.0);
        for (row, &count) in self.rows.iter().enumerate() {
            if count > best {
                (y, best) = (row, count);
            }
        }
        if best <= 0.0 {
            return None;
        }
        let at = (self.starts[y]..self.starts[y + 1])
            .find(|&at| counts(self.values[at], self.levels.up[at], self.levels.down[at]) == best)?;
        Some(Peak { x: self.columns[at] as usize, y, value: self.values[at] })
    }

    fn subtract(&mut self, x: usize, y: usize, amount: f32, patch: &Patch) {
        let (hx, hy) = patch.half;
        let height = self.rows.len();
        for row in y.saturating_sub(hy)..(y + hy + 1).min(height) {
            let (start, end) = (self.starts[row], self.starts[row + 1]);
            if start == end {
                continue;
            }
            let columns = &self.columns[start..end];
            let low = columns.partition_point(|&c| (c as usize) + hx < x);
            let high = columns.partition_point(|&c| c as usize <= x + hx);
            let from = patch.row(row as i64 - y as i64);
            let values = &mut self.values[start + low..start + high];
            for (value, &column) in values.iter_mut().zip(&columns[low..high]) {
                *value -= amount * from[column as usize + hx - x];
            }
            self.rows[row] = self.peak_of_row(row);
        }
    }

    fn set_down(&mut self, x: usize, y: usize, level: f32) {
        let row = self.starts[y]..self.starts[y + 1];
        if let Ok(at) = self.columns[row.clone()].binary_search(&(x as u32)) {
            self.levels.down[row.start + at] = level;
            self.rows[y] = self.peak_of_row(y);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{Rng, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    fn open(pixels: usize) -> Levels {
        Levels { up: vec![0.0; pixels], down: vec![0.0; pixels] }
    }

    /// Peak and subtraction against the plain definition, on images of awkward sizes, levels random; the whole image and
    /// the list must do the same where the list has all pixels. Exact: the same operations in the same order.
    #[test]
    fn whole_and_listed_are_the_plain_definition() {
        let mut rng = ChaCha8Rng::seed_from_u64(3);
        for (width, height) in [(1, 1), (7, 3), (16, 5), (33, 40), (401, 350)] {
            let mut image: Vec<f32> = (0..width * height).map(|_| rng.random_range(-1.0..1.0)).collect();
            let mut level = |share: f32| {
                let draw = |rng: &mut ChaCha8Rng| if rng.random::<f32>() < share { f32::INFINITY } else { 0.2 };
                (0..width * height).map(|_| draw(&mut rng)).collect::<Vec<f32>>()
            };
            let levels = Levels { up: level(0.3), down: level(0.6) };
            let mut whole = Whole::new(width, height, image.clone(), levels.clone());
            let mut listed = Listed::new(width, &image, &levels, 0.0);
            let patch =
                Patch::from_fn((200, 9), |dx, dy| (0.3 * dx as f64).cos() * (-0.1 * (dy * dy) as f64).exp());
            let plain = |image: &[f32]| -> Option<Peak> {
                let count = |i: usize| counts(image[i], levels.up[i], levels.down[i]);
                let best = (0..image.len()).map(count).fold(0.0, f32::max);
                let at = (0..image.len()).find(|&i| best > 0.0 && count(i) == best)?;
                Some(Peak { x: at % width, y: at / width, value: image[at] })
            };
            for _ in 0..6 {
                let peak = whole.peak();
                assert_eq!(peak, plain(&image), "{width} × {height}");
                assert_eq!(peak, listed.peak());
                let Some(Peak { x, y, value }) = peak else { break };
                whole.subtract(x, y, 0.3 * value, &patch);
                listed.subtract(x, y, 0.3 * value, &patch);
                for (i, pixel) in image.iter_mut().enumerate() {
                    let offset = ((i % width) as i64 - x as i64, (i / width) as i64 - y as i64);
                    *pixel -= 0.3 * value * patch.at(offset.0, offset.1);
                }
            }
            assert_eq!(whole.into_image(), image);
            assert!(listed.pixels().all(|(x, y, value)| image[y * width + x] == value));
        }
    }

    #[test]
    fn levels_shut_pixels_and_signs() {
        let mut levels = open(4);
        levels.up[0] = f32::INFINITY;
        levels.down[0] = f32::INFINITY;
        levels.down[3] = f32::INFINITY;
        let mut whole = Whole::new(4, 1, vec![9.0, 2.0, -3.0, -5.0], levels);
        assert_eq!(whole.peak(), Some(Peak { x: 2, y: 0, value: -3.0 }));
        whole.set_down(3, 0, 0.0);
        assert_eq!(whole.peak(), Some(Peak { x: 3, y: 0, value: -5.0 }));
        let shut = Levels { up: vec![f32::INFINITY; 4], down: vec![f32::INFINITY; 4] };
        assert_eq!(Whole::new(4, 1, vec![9.0, 2.0, -3.0, -5.0], shut).peak(), None);
    }
}
