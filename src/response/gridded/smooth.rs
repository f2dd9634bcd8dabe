//! Smooth functions of the field through Chebyshev points: where beams are sampled, and how samples become pixels.
//!
//! Beam products and curvature phases are entire functions of (l, m), so interpolation through Chebyshev points of
//! the second kind converges faster than any power of the number of points. Barycentric form: Berrut & Trefethen
//! 2004, SIAM Review 46, 501, eq. 5.4.

use ndarray::Array2;
use std::f64::consts::PI;

/// Chebyshev points of the second kind over [low, high], `count` ≥ 2 (one point in the middle for 1).
pub(crate) fn chebyshev_points(low: f64, high: f64, count: usize) -> Vec<f64> {
    let (middle, half) = (0.5 * (low + high), 0.5 * (high - low));
    if count == 1 {
        return vec![middle];
    }
    (0..count).map(|i| middle - half * (PI * i as f64 / (count - 1) as f64).cos()).collect()
}

/// The matrix `[target][node]` that takes values at [`chebyshev_points`] to values at `targets`.
pub(crate) fn interpolation(nodes: &[f64], targets: &[f64]) -> Array2<f64> {
    let last = nodes.len() - 1;
    let mut matrix = Array2::zeros((targets.len(), nodes.len()));
    for (row, &x) in targets.iter().enumerate() {
        if let Some(hit) = nodes.iter().position(|&node| node == x) {
            matrix[[row, hit]] = 1.0;
            continue;
        }
        let weight = |j: usize| {
            let sign = if j.is_multiple_of(2) { 1.0 } else { -1.0 };
            let end = if j == 0 || j == last { 0.5 } else { 1.0 };
            sign * end / (x - nodes[j])
        };
        let total: f64 = (0..nodes.len()).map(weight).sum();
        for j in 0..nodes.len() {
            matrix[[row, j]] = weight(j) / total;
        }
    }
    matrix
}

#[cfg(test)]
mod tests {
    use super::*;

    /// exp is analytic: 24 points over a length of 4 leave an error below (e L/4n)^n ≈ 1e-14 times e^2.
    #[test]
    fn interpolates_the_exponential_to_rounding() {
        let nodes = chebyshev_points(-2.0, 2.0, 24);
        let targets: Vec<f64> = (0..97).map(|i| -2.0 + 4.0 * i as f64 / 96.0).collect();
        let matrix = interpolation(&nodes, &targets);
        let worst = targets
            .iter()
            .enumerate()
            .map(|(i, t)| {
                let got: f64 = nodes.iter().enumerate().map(|(j, n)| matrix[[i, j]] * n.exp()).sum();
                (got - t.exp()).abs()
            })
            .fold(0.0, f64::max);
        assert!(worst < 2e-14, "worst {worst:e}");
    }
}
