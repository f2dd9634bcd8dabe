//! Minor cycles on points: Högbom (1974) on the whole search image, after Clark (1980) on its high pixels.
//!
//! Högbom, J. A. 1974, A&AS 15, 417: find the highest absolute value, take off the loop gain times it times the point
//! spread function, note the component, again. Clark, B. G. 1980, A&A 89, 377: the same, but only on the pixels above a
//! limit and with a patch of the point spread function; everything else is made right by the pass over the visibilities
//! that follows. Here the passes over the visibilities are what ends every minor cycle, of either kind.

use super::local_psf::LocalPsfs;
use super::search::{Levels, Listed, Searched, Whole};
use ndarray::Array2;

/// Where a minor cycle starts, and when it ends.
pub struct Start<'a> {
    /// Columns of the image.
    pub width: usize,
    /// Rows of the image.
    pub height: usize,
    /// The search image, noise 1, 0 where blank.
    pub image: &'a [f32],
    /// Levels that peaks must exceed.
    pub levels: Levels,
    /// Point spread functions.
    pub psfs: &'a LocalPsfs,
    /// Share of a peak that one component takes.
    pub loop_gain: f64,
    /// The cycle ends where no peak exceeds this.
    pub level: f64,
    /// The cycle ends where no peak exceeds this times the flux it has moved: what is left may be errors of the local point
    /// spread functions.
    pub misfit: f64,
    /// Most components.
    pub most: u64,
    /// Model before this cycle in units of the search image, for models that must stay at or above zero.
    pub floor: Option<Array2<f64>>,
}

/// What a minor cycle found.
#[derive(Debug, Clone)]
pub struct Found {
    /// Amplitudes on pixels, in units of the search image, `[y][x]`.
    pub amplitudes: Array2<f64>,
    /// Number of components.
    pub components: u64,
    /// Sum of the amplitudes' absolute values (for extended components, of the peaks they make).
    pub moved: f64,
    /// What the search image should be now: (index, value) of the pixels followed.
    pub expected: Vec<(usize, f32)>,
}

/// Högbom's minor cycle.
pub fn hogbom(start: Start) -> Found {
    let mut whole = Whole::new(start.width, start.height, start.image.to_vec(), start.levels.clone());
    let mut found = points(&start, &mut whole);
    let levels = &start.levels;
    let open = |at: usize| levels.up[at].is_finite() || levels.down[at].is_finite();
    found.expected = whole.into_image().into_iter().enumerate().filter(|&(at, _)| open(at)).collect();
    found
}

/// Clark's minor cycle: pixels above the level at which it ends take part.
pub fn clark(start: Start) -> Found {
    let mut listed = Listed::new(start.width, start.image, &start.levels, start.level as f32);
    let mut found = points(&start, &mut listed);
    found.expected = listed.pixels().map(|(x, y, value)| (y * start.width + x, value)).collect();
    found
}

fn points(start: &Start, image: &mut dyn Searched) -> Found {
    let mut found = Found {
        amplitudes: Array2::zeros((start.height, start.width)),
        components: 0,
        moved: 0.0,
        expected: Vec::new(),
    };
    while found.components < start.most {
        let Some(peak) = image.peak() else { break };
        let height = f64::from(peak.value.abs());
        if height < start.level.max(start.misfit * found.moved) {
            break;
        }
        let (x, y) = (peak.x, peak.y);
        let Some(patch) = start.psfs.patch(x, y) else { break };
        let mut amplitude = start.loop_gain * f64::from(peak.value);
        if let Some(floor) = &start.floor {
            let stands = floor[[y, x]] + found.amplitudes[[y, x]];
            amplitude = amplitude.max(-stands);
            let down = if stands + amplitude > 0.0 { start.levels.up[y * start.width + x] } else { f32::INFINITY };
            image.set_down(x, y, down);
            if amplitude == 0.0 {
                continue;
            }
        }
        image.subtract(x, y, amplitude as f32, patch);
        found.amplitudes[[y, x]] += amplitude;
        found.components += 1;
        found.moved += amplitude.abs();
    }
    found
}

#[cfg(test)]
mod tests {
    use super::super::local_psf::Patch;
    use super::*;

    fn start<'a>(image: &'a [f32], width: usize, psfs: &'a LocalPsfs) -> Start<'a> {
        Start {
            width,
            height: image.len() / width,
            image,
            levels: Levels { up: vec![0.0; image.len()], down: vec![0.0; image.len()] },
            psfs,
            loop_gain: 0.5,
            level: 0.0,
            misfit: 0.0,
            most: 3,
            floor: None,
        }
    }

    /// By hand. Point spread function on a line: … 0, −0.25, 1, −0.25, 0 …, two sources: 8 at pixel 2, 4 at pixel 4.
    /// Dirty: [0, −2, 8, −2 − 1, 4, −1, 0]. Gain 1/2, three steps of Högbom's procedure:
    ///
    /// 1. peak 8 at 2, take 4:   [0, −1, 4, −2, 4, −1, 0]
    /// 2. peaks 4 at 2 and 4, the first counts, take 2 at 2: [0, −0.5, 2, −1.5, 4, −1, 0]
    /// 3. peak 4 at 4, take 2:   [0, −0.5, 2, −1, 2, −0.5, 0]
    #[test]
    fn three_steps_by_hand() {
        let psf = Patch::from_fn((6, 0), |dx, _| match dx {
            0 => 1.0,
            -1 | 1 => -0.25,
            _ => 0.0,
        });
        let psfs = LocalPsfs::uniform(7, 1, psf);
        let dirty = [0.0, -2.0, 8.0, -3.0, 4.0, -1.0, 0.0];
        for (name, found) in
            [("högbom", hogbom(start(&dirty, 7, &psfs))), ("clark", clark(start(&dirty, 7, &psfs)))]
        {
            assert_eq!(found.amplitudes.as_slice().unwrap(), [0.0, 0.0, 6.0, 0.0, 2.0, 0.0, 0.0], "{name}");
            assert_eq!((found.components, found.moved), (3, 8.0), "{name}");
            let left: Vec<f32> = found.expected.iter().map(|(_, value)| *value).collect();
            assert_eq!(left, [0.0, -0.5, 2.0, -1.0, 2.0, -0.5, 0.0], "{name}");
        }
    }

    /// The same with a model that may not fall below zero: with 1 at pixel 3 beforehand, a negative peak there may take
    /// that 1 away and no more.
    #[test]
    fn a_floor_holds() {
        let psfs = LocalPsfs::uniform(5, 1, Patch::from_fn((4, 0), |dx, _| f64::from(dx == 0)));
        let dirty = [0.0, -9.0, 0.5, -8.0, 0.0];
        let mut begin = start(&dirty, 5, &psfs);
        begin.most = 100;
        begin.level = 0.1;
        let mut floor = Array2::zeros((1, 5));
        floor[[0, 3]] = 1.0;
        for at in [0, 1, 2, 4] {
            begin.levels.down[at] = f32::INFINITY;
        }
        begin.floor = Some(floor);
        let found = hogbom(begin);
        assert_eq!(found.amplitudes[[0, 3]], -1.0);
        assert_eq!(found.amplitudes[[0, 1]], 0.0);
        assert!((found.amplitudes[[0, 2]] - 0.5).abs() < 0.1 && found.amplitudes[[0, 2]] > 0.0);
    }

    /// Ends: at the level, at the count, and where what is left may be errors of the point spread function.
    #[test]
    fn ends() {
        let psfs = LocalPsfs::uniform(3, 1, Patch::from_fn((2, 0), |dx, _| f64::from(dx == 0)));
        let dirty = [0.0, 8.0, 0.0];
        let run = |level: f64, misfit: f64, most: u64| {
            let mut begin = start(&dirty, 3, &psfs);
            (begin.level, begin.misfit, begin.most) = (level, misfit, most);
            hogbom(begin).components
        };
        assert_eq!(run(1.0, 0.0, 100), 4, "8 4 2 1 and then 0.5 is below 1");
        assert_eq!(run(0.0, 0.0, 2), 2);
        assert_eq!(run(0.0, 0.5, 100), 2, "2 left, 6 moved: below half of it");
    }
}
