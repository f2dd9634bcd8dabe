//! The smallest beam that every field can be convolved to.
//!
//! A Gaussian of covariance C can be had from one of covariance C_i by convolution exactly when C − C_i has no negative
//! eigenvalue: when the ellipse of C holds that of C_i, both about one centre. The common beam is the C of the smallest area
//! that holds all. Found, in this order:
//!
//! 1. all beams alike within [`ALIKE`]: their mean, and nothing is convolved;
//! 2. one beam holds all others: that one;
//! 3. the smallest ellipse about two of them holds the rest. In coordinates in which the first is the unit circle and the
//!    second has axes along the coordinates, that ellipse is diag(max(1, λ));
//! 4. otherwise: the smallest ellipse about the points of all ellipses, by the algorithm of Khachiyan (1996, Math. Oper. Res.
//!    21, 307), each step with the farthest point of any of them; then scaled to hold all. Its area is within 0.1 % of the
//!    smallest.

use nalgebra::{Matrix2, SymmetricEigen, Vector2};

/// Beams whose squared widths differ by less than this, relative, are taken for one (common practice, no source). What that
/// costs is in the measured errors.
pub const ALIKE: f64 = 1e-3;
/// Rounding allowed where one ellipse holds another.
const ROUNDING: f64 = 1e-9;
/// Steps of Khachiyan's algorithm; the excess falls at least as 1/steps.
const MOST_STEPS: usize = 20_000;
/// Excess, in squared radius, at which it stops.
const EXCESS: f64 = 2e-4;

/// The common beam.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CommonBeam {
    /// Its covariance, in the units of the beams.
    pub covariance: Matrix2<f64>,
    /// Whether all beams are alike, so that nothing need be convolved.
    pub alike: bool,
}

/// The smallest beam that all of `beams` can be convolved to; `None` without beams.
pub fn common_beam(beams: &[Matrix2<f64>]) -> Option<CommonBeam> {
    let mean = beams.iter().sum::<Matrix2<f64>>() / beams.len() as f64;
    let first = beams.first()?;
    let same = |beam: &&Matrix2<f64>| {
        let [low, high] = ratios(&mean, beam);
        low >= 1.0 - ALIKE && high <= 1.0 + ALIKE
    };
    if beams.iter().filter(same).count() == beams.len() {
        let covariance = if beams.iter().all(|beam| beam == first) { *first } else { mean };
        return Some(CommonBeam { covariance, alike: true });
    }
    let holds_all = |outer: &Matrix2<f64>| beams.iter().all(|beam| ratios(outer, beam)[1] <= 1.0 + ROUNDING);
    let single = beams.iter().find(|beam| holds_all(beam)).copied();
    let covariance = single.or_else(|| about_two(beams, holds_all)).unwrap_or_else(|| about_all(beams));
    Some(CommonBeam { covariance, alike: false })
}

/// Smallest and largest ratio of squared radii, inner over outer, over all directions.
pub(super) fn ratios(outer: &Matrix2<f64>, inner: &Matrix2<f64>) -> [f64; 2] {
    let Some(cholesky) = outer.cholesky() else { return [f64::NAN; 2] };
    let Some(inverse) = cholesky.l().try_inverse() else { return [f64::NAN; 2] };
    let values = SymmetricEigen::new(symmetric(inverse * inner * inverse.transpose())).eigenvalues;
    [values.min(), values.max()]
}

fn symmetric(m: Matrix2<f64>) -> Matrix2<f64> {
    (m + m.transpose()) / 2.0
}

/// The smallest of the ellipses about two beams that holds all.
fn about_two(beams: &[Matrix2<f64>], holds_all: impl Fn(&Matrix2<f64>) -> bool) -> Option<Matrix2<f64>> {
    beams.iter().enumerate().find_map(|(i, first)| {
        let factor = first.cholesky()?.l();
        let inverse = factor.try_inverse()?;
        beams[..i].iter().find_map(|second| {
            let eigen = SymmetricEigen::new(symmetric(inverse * second * inverse.transpose()));
            let widest = Matrix2::from_diagonal(&eigen.eigenvalues.map(|v| v.max(1.0)));
            let turn = factor * eigen.eigenvectors;
            // an ellipse that is the smallest about two of them and holds all is the smallest about all
            Some(symmetric(turn * widest * turn.transpose())).filter(&holds_all)
        })
    })
}

/// Khachiyan's algorithm on the boundary points of all ellipses.
fn about_all(beams: &[Matrix2<f64>]) -> Matrix2<f64> {
    // a mixture of all is a start that no point degenerates
    let mut shape = beams.iter().sum::<Matrix2<f64>>() / (2.0 * beams.len() as f64);
    for _ in 0..MOST_STEPS {
        let Some(inverse) = shape.try_inverse() else { break };
        let Some((point, square)) = farthest(beams, &inverse) else { break };
        // in two dimensions the smallest ellipse {x: xᵀ M⁻¹ x ≤ 2} touches its points there
        if square <= 2.0 * (1.0 + EXCESS) {
            break;
        }
        let step = (square / 2.0 - 1.0) / (square - 1.0);
        shape = shape * (1.0 - step) + point * point.transpose() * step;
    }
    let most = beams.iter().map(|beam| ratios(&shape, beam)[1]).fold(0.0, f64::max);
    symmetric(shape * most)
}

/// The boundary point of any ellipse that is farthest out by `metric`, and its squared radius there.
fn farthest(beams: &[Matrix2<f64>], metric: &Matrix2<f64>) -> Option<(Vector2<f64>, f64)> {
    let mut best: Option<(Vector2<f64>, f64)> = None;
    for beam in beams {
        let factor = beam.cholesky()?.l();
        let eigen = SymmetricEigen::new(symmetric(factor.transpose() * metric * factor));
        let (at, square) = eigen.eigenvalues.argmax();
        if best.is_none_or(|(_, most)| square > most) {
            best = Some((factor * eigen.eigenvectors.column(at), square));
        }
    }
    best
}

#[cfg(test)]
mod tests {
    use super::super::field::{covariance, widths};
    use super::*;

    fn beam(major: f64, minor: f64, deg: f64) -> Matrix2<f64> {
        covariance([major, minor, deg.to_radians()])
    }

    fn holds(outer: &Matrix2<f64>, beams: &[Matrix2<f64>]) -> bool {
        beams.iter().all(|b| ratios(outer, b)[1] <= 1.0 + 1e-8)
    }

    #[test]
    fn alike_beams_are_left_alone() {
        let beams = [beam(5.0, 4.0, 10.0), beam(5.002, 4.0, 10.0)];
        assert!(common_beam(&beams).unwrap().alike);
        assert!(!common_beam(&[beam(5.0, 4.0, 10.0), beam(5.02, 4.0, 10.0)]).unwrap().alike);
        assert!(common_beam(&[]).is_none());
    }

    #[test]
    fn a_beam_that_holds_the_rest_is_the_common_one() {
        let beams = [beam(5.0, 4.0, 10.0), beam(9.0, 7.0, -70.0), beam(6.0, 6.0, 0.0)];
        assert_eq!(common_beam(&beams).unwrap().covariance, beams[1]);
    }

    /// Crossed ellipses of one size: the circle about both.
    #[test]
    fn crossed_beams_give_the_circle_about_them() {
        let beams = [beam(6.0, 3.0, 20.0), beam(6.0, 3.0, 110.0)];
        let got = widths(&common_beam(&beams).unwrap().covariance);
        assert!((got[0] - 6.0).abs() <= 1e-9 && (got[1] - 6.0).abs() <= 1e-9, "{got:?}");
    }

    /// Three equal ellipses 60° apart: by symmetry a circle of the major axis. Bound: 0.1 % in area, 0.05 % in width.
    #[test]
    fn three_turned_beams_give_the_circle_about_them() {
        let beams = [beam(6.0, 2.0, 0.0), beam(6.0, 2.0, 60.0), beam(6.0, 2.0, 120.0)];
        let common = common_beam(&beams).unwrap().covariance;
        let got = widths(&common);
        assert!(holds(&common, &beams));
        assert!((got[0] * got[1] / 36.0 - 1.0).abs() <= 1e-3, "{got:?}");
    }

    /// Against a search over all shapes: for a given axis ratio and angle the scale that holds all is known, so the
    /// smallest area is a minimum over two numbers. Bounds: 0.1 % of the method and 0.3 % of the search's mesh.
    #[test]
    fn no_shape_on_a_mesh_is_smaller() {
        let mut state = 7u64;
        let mut draw = || {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            (state >> 11) as f64 / (1u64 << 53) as f64
        };
        for count in [2, 3, 5, 8] {
            let beams: Vec<_> =
                (0..count).map(|_| beam(4.0 + 4.0 * draw(), 2.0 + 2.0 * draw(), 180.0 * draw())).collect();
            let common = common_beam(&beams).unwrap().covariance;
            assert!(holds(&common, &beams));
            let mut smallest = f64::INFINITY;
            for angle in 0..180 {
                for ratio in 0..160 {
                    let shape = beam(1.0 + 0.02 * f64::from(ratio), 1.0, f64::from(angle));
                    let scale = beams.iter().map(|b| ratios(&shape, b)[1]).fold(0.0, f64::max);
                    smallest = smallest.min(scale * shape.determinant().sqrt());
                }
            }
            let area = common.determinant().sqrt();
            assert!(area <= smallest * 1.001 && area >= smallest * 0.996, "{count}: {area} {smallest}");
        }
    }
}
