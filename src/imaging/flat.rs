//! Images from N and W, natural weights.
//!
//! - flat sky: N/W, Jy/beam, the flux density of an isolated point source at its pixel
//! - flat noise: N/√W, in units of its own noise, the same all over the field
//! - weight map: the inverse variance of the flat sky; for natural weights that is W itself

use crate::response::Sums;
use ndarray::{Array2, Zip};

/// √(W / max W): 1 where the mosaic is deepest, 0 where nothing looked.
pub fn response_map(sums: &Sums) -> Array2<f64> {
    let most = sums.normaliser.iter().copied().fold(0.0, f64::max);
    sums.normaliser.mapv(|w| if w > 0.0 && most > 0.0 { (w / most).sqrt() } else { 0.0 })
}

/// N/W where the response reaches `lowest_response` (above 0), NaN elsewhere.
pub fn flat_sky(sums: &Sums, lowest_response: f64) -> Array2<f64> {
    divided(sums, lowest_response, |n, w| n / w)
}

/// N/√W where the response reaches `lowest_response` (above 0), NaN elsewhere.
pub fn flat_noise(sums: &Sums, lowest_response: f64) -> Array2<f64> {
    divided(sums, lowest_response, |n, w| n / w.sqrt())
}

fn divided(sums: &Sums, lowest_response: f64, by: impl Fn(f64, f64) -> f64) -> Array2<f64> {
    let response = response_map(sums);
    let mut image = Array2::from_elem(response.dim(), f64::NAN);
    Zip::from(&mut image).and(&response).and(&sums.numerator).and(&sums.normaliser).for_each(|out, &r, &n, &w| {
        if r > 0.0 && r >= lowest_response {
            *out = by(n, w);
        }
    });
    image
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;
    use ndarray::array;

    /// Check value D6 (definitions of the linear mosaic): 1 Jy at A = 0.5 in one field of weight 1 gives N = A²S = 0.25,
    /// flat noise 0.5, flat sky 1; and D3: two fields A = (0.9, 0.4), σ = (1, 2), D = (0.95, 0.35).
    #[test]
    fn one_source_in_one_field_and_in_two() {
        let sums = Sums { numerator: array![[0.25, 0.0]], normaliser: array![[0.25, 1.0]] };
        assert_abs_diff_eq!(flat_sky(&sums, 0.1)[[0, 0]], 1.0, epsilon = 1e-15);
        assert_abs_diff_eq!(flat_noise(&sums, 0.1)[[0, 0]], 0.5, epsilon = 1e-15);
        assert!(flat_sky(&sums, 0.6)[[0, 0]].is_nan(), "response 0.5 is below 0.6");
        let n = 0.9 * 0.95 + 0.4 * 0.35 / 4.0;
        let w = 0.81 + 0.16 / 4.0;
        let two = Sums { numerator: array![[n]], normaliser: array![[w]] };
        assert_abs_diff_eq!(flat_sky(&two, 0.1)[[0, 0]], 1.0470588, epsilon = 1e-7);
        assert_abs_diff_eq!(1.0 / two.normaliser[[0, 0]].sqrt(), 1.0846523, epsilon = 1e-7);
    }

    #[test]
    fn where_nothing_looked_is_blank_not_zero() {
        let sums = Sums { numerator: array![[0.0, 1.0]], normaliser: array![[0.0, 2.0]] };
        assert!(flat_sky(&sums, 0.0)[[0, 0]].is_nan());
        let nothing = Sums { numerator: array![[0.0]], normaliser: array![[0.0]] };
        assert!(flat_sky(&nothing, 0.1)[[0, 0]].is_nan() && response_map(&nothing)[[0, 0]] == 0.0);
    }
}
