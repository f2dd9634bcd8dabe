//! Baselines seen from a centre of the image, and what one channel of a row contributes to total intensity.

use crate::observation::{Block, Hand, Observation, SPEED_OF_LIGHT};
use crate::sky::TangentFrame;
use nalgebra::{Matrix3, Vector3};
use num_complex::{Complex32, Complex64};
use std::f64::consts::TAU;

/// Turns u, v, w and phases of a pointing's phase centre to another centre, exactly.
///
/// With the baseline b fixed in space, u, v, w are its components in the tangent frame of a centre s, and a phase
/// measured about s₀ becomes one about s₁ by the factor exp(+2πi (w₁ − w₀)/λ).
#[derive(Debug, Clone)]
pub(crate) struct Recentre {
    rotation: Matrix3<f64>,
}

/// A baseline about the new centre.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Turned {
    /// u, v, w in metres about the new centre.
    pub uvw_m: [f64; 3],
    /// Path that the phase centre's shift adds: visibilities turn by exp(+2πi shift/λ), metres.
    pub shift_m: f64,
}

impl Recentre {
    pub(crate) fn new(phase_centre: &TangentFrame, centre: &TangentFrame) -> Self {
        Recentre { rotation: phase_centre.rotation_to(centre) }
    }

    pub(crate) fn turn(&self, uvw_m: [f64; 3]) -> Turned {
        let turned = self.rotation * Vector3::from(uvw_m);
        Turned { uvw_m: turned.into(), shift_m: turned.z - uvw_m[2] }
    }
}

/// exp(2πi · turns), with whole turns taken out first.
#[inline]
pub(crate) fn cis_turns(turns: f64) -> Complex64 {
    // 1.5 · 2^52 added and taken away rounds to whole turns, up to 2^51 of them
    const WHOLE: f64 = 6_755_399_441_055_744.0;
    Complex64::cis(TAU * (turns - ((turns + WHOLE) - WHOLE)))
}

/// Wavenumber per metre of path: ν/c in wavelengths per metre.
pub(crate) fn wavelengths_per_metre(hz: f64) -> f64 {
    hz / SPEED_OF_LIGHT
}

/// Which beam product a hand sees.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Seen {
    /// The product of one feed's patterns.
    Feed(usize),
    /// The mean of both feeds' products (Stokes I).
    Mean,
}

/// The hands of a file that carry total intensity, grouped by the beam product they see.
///
/// Hands that see the same product (both parallel hands, when the feeds are alike) are summed before gridding.
#[derive(Debug, Clone)]
pub(crate) struct Intensity {
    groups: Vec<(Seen, Vec<usize>)>,
}

impl Intensity {
    pub(crate) fn new(observation: &Observation, feeds_alike: bool) -> Self {
        let mut groups: Vec<(Seen, Vec<usize>)> = Vec::new();
        for (index, hand) in observation.hands.iter().enumerate() {
            let seen = match (hand.parallel_feed(), *hand) {
                (Some(_), _) | (None, Hand::I) if feeds_alike => Seen::Feed(0),
                (Some(feed), _) => Seen::Feed(feed),
                (None, Hand::I) => Seen::Mean,
                _ => continue,
            };
            match groups.iter_mut().find(|(s, _)| *s == seen) {
                Some((_, hands)) => hands.push(index),
                None => groups.push((seen, vec![index])),
            }
        }
        Intensity { groups }
    }

    /// The groups: product seen, and the hands that see it.
    pub(crate) fn groups(&self) -> &[(Seen, Vec<usize>)] {
        &self.groups
    }

    /// Σ ω V and Σ ω over the hands of a group, for the (row, channel) that starts at `at` in the block's arrays.
    #[inline]
    pub(crate) fn weighted(block: &Block, at: usize, hands: &[usize]) -> (Complex64, f64) {
        let (mut value, mut weight) = (Complex64::ZERO, 0.0);
        for &hand in hands {
            let w = f64::from(block.weight[at + hand]);
            if w > 0.0 {
                let v: Complex32 = block.data[at + hand];
                value += Complex64::new(f64::from(v.re), f64::from(v.im)) * w;
                weight += w;
            }
        }
        (value, weight)
    }
}

/// Rows of a block grouped by equal time: (time, row indices), in order of first appearance.
pub(crate) fn rows_by_time(block: &Block) -> Vec<(f64, Vec<usize>)> {
    let mut order: Vec<usize> = (0..block.rows()).collect();
    order.sort_by(|&a, &b| block.mjd_utc[a].total_cmp(&block.mjd_utc[b]).then(a.cmp(&b)));
    let mut groups: Vec<(f64, Vec<usize>)> = Vec::new();
    for row in order {
        match groups.last_mut() {
            Some((time, rows)) if *time == block.mjd_utc[row] => rows.push(row),
            _ => groups.push((block.mjd_utc[row], vec![row])),
        }
    }
    groups
}
