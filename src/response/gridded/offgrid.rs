//! Point sources between pixels.
//!
//! A function of (l, m) whose Fourier support stays within ±b cycles per pixel, b < 1/2, is interpolated between pixels by
//! sinc times a Gaussian (the regularised Whittaker–Kotelnikov–Shannon sampling series: Qian 2003, Proc. AMS 131, 1169):
//! with M pixels to each side the relative error is about exp(−π M (1 − 2b)/2). Its transpose spreads a point source onto
//! pixels, so that what is predicted from the pixels equals what the point itself gives.

use std::f64::consts::PI;

/// Pixels to each side at most.
const MOST: usize = 64;

/// How many pixels to each side keep the relative error below `error` for a band of ±`reach` cycles per pixel, with what
/// `reach` allows; `None` where pixels are too coarse for any.
pub(crate) fn half_width(reach: f64, error: f64) -> Option<(usize, f64)> {
    let room = 1.0 - 2.0 * reach;
    if room <= 0.0 {
        return None;
    }
    let wanted = (-2.0 * error.ln() / (PI * room)).ceil() as usize + 2;
    (wanted <= MOST).then_some((wanted, room))
}

/// A point source's weights on the pixels around it.
pub(crate) struct Spread {
    columns: Vec<(i64, f64)>,
    rows: Vec<(i64, f64)>,
}

impl Spread {
    /// Spreads a point at pixel position (x, y); exactly one pixel when the position is that of one.
    pub(crate) fn new(x: f64, y: f64, half: Option<(usize, f64)>) -> Result<Spread, String> {
        let along = |position: f64| -> Result<Vec<(i64, f64)>, String> {
            let nearest = position.round();
            if (position - nearest).abs() < 1e-7 {
                return Ok(vec![(nearest as i64, 1.0)]);
            }
            let (half, room) =
                half.ok_or("it lies between pixels, and these are too coarse for the longest baselines")?;
            // the Gaussian whose truncation and spectral leakage balance
            let variance = half as f64 / (PI * room);
            let first = position.floor() as i64 - half as i64 + 1;
            Ok((first..first + 2 * half as i64)
                .map(|pixel| {
                    let d = position - pixel as f64;
                    (pixel, (PI * d).sin() / (PI * d) * (-d * d / (2.0 * variance)).exp())
                })
                .collect())
        };
        Ok(Spread { columns: along(x)?, rows: along(y)? })
    }

    /// (column, row, weight) of every pixel touched.
    pub(crate) fn pixels(&self) -> impl Iterator<Item = (i64, i64, f64)> + '_ {
        self.rows.iter().flat_map(|&(y, wy)| self.columns.iter().map(move |&(x, wx)| (x, y, wx * wy)))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Fringes within the band come out of the pixels as from the point itself, to the error asked for.
    #[test]
    fn a_spread_point_has_the_fringes_of_the_point() {
        for error in [1e-3, 1e-6, 1e-9] {
            let reach = 0.3;
            let spread = Spread::new(10.37, -4.81, half_width(reach, error)).unwrap();
            for (u, v) in [(0.0, 0.0), (0.3, 0.1), (-0.29, 0.3), (0.17, -0.22)] {
                let phase = |x: f64, y: f64| num_complex::Complex64::cis(2.0 * PI * (u * x + v * y));
                let sum: num_complex::Complex64 =
                    spread.pixels().map(|(x, y, w)| phase(x as f64, y as f64) * w).sum();
                let got = (sum - phase(10.37, -4.81)).norm();
                assert!(got <= 4.0 * error, "asked {error:e}, got {got:e} at {u}, {v}");
            }
        }
    }
}
