//! Samples in the order of the grid, so that the cells they fall on stay in the processor's cache.
//!
//! Rows of a file come in the order of time: one after the other they fall all over the grids, which together are larger
//! than any cache. Sorted by tiles of the grid, samples of a tile find its cells where the last one left them.

use super::vector::Sample;

/// Side of a tile, cells: with the window's rim, one block of terms of it takes some 30 kB.
const SIDE: usize = 16;

/// The order (indices into `samples`) that goes through the grid tile by tile; stable, so that sums are repeatable.
pub(crate) fn tile_order<T>(samples: &[Sample<T>], width: usize, height: usize) -> Vec<u32> {
    let across = width.div_ceil(SIDE);
    let tile = |sample: &Sample<T>| {
        let (line, column) = (sample.cell as usize / width, sample.cell as usize % width);
        line / SIDE * across + column / SIDE
    };
    let mut starts = vec![0u32; across * height.div_ceil(SIDE) + 1];
    let tiles: Vec<u32> = samples.iter().map(|sample| tile(sample) as u32).collect();
    for &tile in &tiles {
        starts[tile as usize + 1] += 1;
    }
    for tile in 1..starts.len() {
        starts[tile] += starts[tile - 1];
    }
    let mut order = vec![0u32; samples.len()];
    for (index, &tile) in tiles.iter().enumerate() {
        let place = &mut starts[tile as usize];
        order[*place as usize] = index as u32;
        *place += 1;
    }
    order
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_sample_once_tile_by_tile_and_stable() {
        let (width, height) = (37, 50);
        let sample = |cell: u32| Sample { cell, p: 0, q: 0, fx: 0.0f32, fy: 0.0, dw: 0.0, re: 0.0, im: 0.0 };
        let samples: Vec<Sample<f32>> = (0..1000u32).map(|i| sample(i * 7919 % (37 * 50))).collect();
        let order = tile_order(&samples, width, height);
        let mut seen = order.clone();
        seen.sort_unstable();
        assert_eq!(seen, (0..1000).collect::<Vec<u32>>());
        let tile = |i: u32| {
            let cell = samples[i as usize].cell as usize;
            (cell / width / SIDE, cell % width / SIDE)
        };
        for pair in order.windows(2) {
            assert!(tile(pair[0]) <= tile(pair[1]));
            assert!(tile(pair[0]) != tile(pair[1]) || pair[0] < pair[1], "within a tile the order stays");
        }
    }
}
