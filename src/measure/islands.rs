//! Islands of pixels above a level, and the peaks that stand apart in each.
//!
//! Pixels enter in falling order of signal to noise, as land emerges from a sinking sea. A pixel without neighbours above
//! water is a new peak; one that touches land joins it; where it joins two, the lower of the two peaks is a peak of its own
//! only when it rises above this saddle by enough, else it is a shoulder of the higher one. Neighbours touch by sides or
//! corners. One pass, order of pixels fixed: the result does not depend on anything but the image.

use ndarray::ArrayView2;

/// A peak: a source to be fitted.
#[derive(Debug, Clone, PartialEq)]
pub struct Peak {
    /// Column and row of its highest pixel.
    pub pixel: (usize, usize),
    /// Signal to noise there.
    pub height: f64,
    /// Which island it stands on.
    pub island: usize,
    /// The pixels (column, row) that drain to it: above the island's level, nearer to this peak than any saddle.
    pub pixels: Vec<(usize, usize)>,
}

/// How far above a saddle a peak must rise to count as one of its own.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Rise {
    /// In units of the noise.
    pub noise: f64,
    /// As a fraction of the peak's own height.
    pub fraction: f64,
}

/// The peaks of `signal_to_noise` (`[y][x]`, NaN = blank) that reach `peak_level`, on islands above `island_level`, highest
/// first.
pub fn peaks(signal_to_noise: ArrayView2<f64>, island_level: f64, peak_level: f64, rise: Rise) -> Vec<Peak> {
    let (height, width) = signal_to_noise.dim();
    let value = |at: usize| signal_to_noise[[at / width, at % width]];
    let mut order: Vec<usize> = (0..height * width).filter(|&at| value(at) > island_level).collect();
    order.sort_by(|&a, &b| value(b).total_cmp(&value(a)).then(a.cmp(&b)));

    const WATER: usize = usize::MAX;
    let mut basin_of = vec![WATER; height * width];
    let mut basins: Vec<Basin> = Vec::new();
    for &at in &order {
        let (x, y) = (at % width, at / width);
        let mut touched: Vec<usize> = Vec::new();
        for row in y.saturating_sub(1)..=(y + 1).min(height - 1) {
            for column in x.saturating_sub(1)..=(x + 1).min(width - 1) {
                let neighbour = basin_of[row * width + column];
                if neighbour != WATER && !touched.contains(&neighbour) {
                    touched.push(neighbour);
                }
            }
        }
        // the steepest way up decides which peak a pixel drains to: that of its highest neighbour
        let up = (y.saturating_sub(1)..=(y + 1).min(height - 1))
            .flat_map(|row| (x.saturating_sub(1)..=(x + 1).min(width - 1)).map(move |column| row * width + column))
            .filter(|&n| basin_of[n] != WATER)
            .max_by(|&a, &b| value(a).total_cmp(&value(b)).then(b.cmp(&a)));
        let Some(up) = up else {
            basin_of[at] = basins.len();
            basins.push(Basin { peak: at, merged_into: None, island: basins.len() });
            continue;
        };
        basin_of[at] = basin_of[up];
        // the living peaks whose lands meet here
        let mut meeting: Vec<usize> = touched.iter().map(|&basin| living(&basins, basin)).collect();
        meeting.sort_by(|&a, &b| value(basins[b].peak).total_cmp(&value(basins[a].peak)).then(a.cmp(&b)));
        meeting.dedup();
        let Some((&highest, rest)) = meeting.split_first() else { continue };
        let island = root(&basins, basins[highest].island);
        for &lower in rest {
            let top = value(basins[lower].peak);
            let enough = top - value(at) >= rise.noise.max(rise.fraction * top);
            let lower_island = root(&basins, basins[lower].island);
            basins[lower_island].island = island;
            if !(enough && top >= peak_level) {
                basins[lower].merged_into = Some(highest);
            }
        }
    }

    let mut index_of = vec![None; basins.len()];
    let mut found: Vec<Peak> = Vec::new();
    for (index, basin) in basins.iter().enumerate() {
        if basin.merged_into.is_none() && value(basin.peak) >= peak_level {
            index_of[index] = Some(found.len());
            let pixel = (basin.peak % width, basin.peak / width);
            let island = root(&basins, basin.island);
            found.push(Peak { pixel, height: value(basin.peak), island, pixels: Vec::new() });
        }
    }
    for &at in &order {
        if let Some(peak) = index_of[living(&basins, basin_of[at])] {
            found[peak].pixels.push((at % width, at / width));
        }
    }
    found.sort_by(|a, b| b.height.total_cmp(&a.height).then((a.pixel.1, a.pixel.0).cmp(&(b.pixel.1, b.pixel.0))));
    let mut islands: Vec<usize> = Vec::new();
    for peak in &mut found {
        let island = islands.iter().position(|&i| i == peak.island).unwrap_or_else(|| {
            islands.push(peak.island);
            islands.len() - 1
        });
        peak.island = island;
    }
    found
}

struct Basin {
    peak: usize,
    /// The higher peak whose shoulder this is.
    merged_into: Option<usize>,
    /// A basin of the same island; itself when it is the island's root.
    island: usize,
}

fn living(basins: &[Basin], mut basin: usize) -> usize {
    while let Some(higher) = basins[basin].merged_into {
        basin = higher;
    }
    basin
}

fn root(basins: &[Basin], mut basin: usize) -> usize {
    while basins[basin].island != basin {
        basin = basins[basin].island;
    }
    basin
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::{Array2, array};

    const RISE: Rise = Rise { noise: 1.5, fraction: 0.0 };

    /// Worked by hand: two peaks of 9 and 7 with a saddle of 4 are two, with a saddle of 6 one; 5 on its own island is one.
    #[test]
    fn saddles_part_peaks() {
        let image = |saddle: f64| {
            array![
                [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 5.0],
                [4.0, 9.0, saddle, 7.0, 4.0, 0.0, 0.0],
                [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, f64::NAN],
            ]
        };
        let two = peaks(image(4.0).view(), 3.0, 5.0, RISE);
        let places: Vec<_> = two.iter().map(|p| (p.pixel, p.height, p.island, p.pixels.len())).collect();
        assert_eq!(places, [((1, 1), 9.0, 0, 3), ((3, 1), 7.0, 0, 2), ((6, 0), 5.0, 1, 1)]);
        let one = peaks(image(6.0).view(), 3.0, 5.0, RISE);
        let places: Vec<_> = one.iter().map(|p| (p.pixel, p.pixels.len(), p.island)).collect();
        assert_eq!(places, [((1, 1), 5, 0), ((6, 0), 1, 1)]);
    }

    #[test]
    fn corners_touch_plateaus_are_one_and_nothing_is_nothing() {
        let corner = array![[6.0, 0.0], [0.0, 6.0]];
        assert_eq!(peaks(corner.view(), 3.0, 5.0, RISE).len(), 1);
        assert_eq!(peaks(Array2::from_elem((4, 5), 8.0).view(), 3.0, 5.0, RISE).len(), 1);
        assert_eq!(peaks(Array2::from_elem((4, 5), f64::NAN).view(), 3.0, 5.0, RISE).len(), 0);
        assert_eq!(peaks(Array2::zeros((0, 0)).view(), 3.0, 5.0, RISE).len(), 0);
        // a low hill between two peaks merges into one of them and does not join them
        let ridge = array![[9.0, 4.0, 4.5, 4.0, 8.0]];
        assert_eq!(peaks(ridge.view(), 3.0, 5.0, RISE).len(), 2);
    }
}
