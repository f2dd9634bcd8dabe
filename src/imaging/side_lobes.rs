//! The largest side lobes of a point spread function.

use super::beam_fit::FittedBeam;
use ndarray::ArrayView2;

/// Largest and most negative value of a point spread function in a plain annulus around its peak, relative to the peak.
///
/// The annulus knows nothing of nulls: a first side lobe that lies nearer than its inner edge is not seen, and a shoulder of
/// a main lobe that is far from Gaussian counts where it reaches further.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SideLobes {
    /// Largest, 0 where none is positive.
    pub highest: f64,
    /// Most negative, 0 where none is.
    pub lowest: f64,
}

/// From where on, in full widths at half maximum from the peak, a value counts as side lobe: the first null of most dirty
/// beams lies nearer (common practice, no source), and a Gaussian has fallen to 2 % of its peak.
const FROM: f64 = 1.2;
/// Up to where.
const TO: f64 = 10.0;

/// Side lobes around `peak` (column, row), between 1.2 and 10 fitted widths from it or as far as the image goes; blank pixels
/// are passed over. `pixel` is a pixel's side, radians.
pub fn side_lobes(psf: ArrayView2<f64>, peak: (usize, usize), beam: &FittedBeam, pixel: f64) -> SideLobes {
    let top = psf[[peak.1, peak.0]];
    let (sin, cos) = beam.position_angle.sin_cos();
    let mut lobes = SideLobes { highest: 0.0, lowest: 0.0 };
    for ((y, x), &value) in psf.indexed_iter() {
        // East and North of the peak
        let (l, m) = ((peak.0 as f64 - x as f64) * pixel, (y as f64 - peak.1 as f64) * pixel);
        let widths = ((l * sin + m * cos) / beam.major).hypot((l * cos - m * sin) / beam.minor);
        if (FROM..=TO).contains(&widths) && !value.is_nan() {
            lobes.highest = lobes.highest.max(value / top);
            lobes.lowest = lobes.lowest.min(value / top);
        }
    }
    lobes
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::Array2;

    /// A Gaussian, longer to the North-East, on a ring: only what lies outside the main lobe counts.
    #[test]
    fn only_what_lies_outside_the_main_lobe() {
        let beam = FittedBeam { major: 8.0, minor: 4.0, position_angle: 0.6, largest_misfit: 0.0, pixels: 0 };
        let (sin, cos) = 0.6f64.sin_cos();
        let mut psf = Array2::from_shape_fn((101, 101), |(y, x)| {
            let (l, m) = (50.0 - x as f64, y as f64 - 50.0);
            let r2 = ((l * sin + m * cos) / 8.0).powi(2) + ((l * cos - m * sin) / 4.0).powi(2);
            2.0 * (-4.0 * std::f64::consts::LN_2 * r2).exp()
        });
        let clean = side_lobes(psf.view(), (50, 50), &beam, 1.0);
        assert!(clean.highest < 0.0185 && clean.lowest == 0.0, "2^(−4·1.44) = 0.0185: {clean:?}");
        psf[[50, 57]] = 0.3;
        psf[[40, 50]] = -0.2;
        psf[[0, 0]] = f64::NAN;
        assert_eq!(side_lobes(psf.view(), (50, 50), &beam, 1.0), SideLobes { highest: 0.15, lowest: -0.1 });
    }
}
