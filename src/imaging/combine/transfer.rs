//! What combining does to a source of the beam's shape, measured: a Gaussian of the field's own beam, drawn on the field's
//! pixels, taken through the same convolution, world coordinates and interpolation, and compared with the Gaussian of the
//! mosaic's beam at the same place on the sky.

use super::convolve::{convolve, reach};
use super::field::{FWHM2, FieldFacts};
use super::grid::{middle, steps};
use super::interpolate::Interpolation;
use super::reproject::Reprojection;
use crate::sky::ImageGeometry;
use nalgebra::{Matrix2, SymmetricEigen, Vector2};
use ndarray::Array2;
use std::f64::consts::PI;

/// Rows and columns of places in a field, from side to side, each at another place within its pixel.
const ACROSS: usize = 5;
/// Places in a field.
pub const PLACES: usize = ACROSS * ACROSS;
/// Reach of a drawn Gaussian, in full widths at half maximum of the wider beam: exp(−4 ln2 · 2.6²) = 7e-9 is left.
const REACH: f64 = 2.6;
/// Largest reach of a drawn Gaussian, pixels: beams of more than some 780 pixels are not measured.
const FARTHEST: f64 = 2048.0;
/// How far towards the sides, as a fraction of half the field.
const OUTWARDS: f64 = 0.8;

/// The largest errors found; NaN when nothing could be measured.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Transfer {
    /// Difference at any pixel above half the peak, as a fraction of the peak.
    pub peak: f64,
    /// Relative error of the integrated flux density, with the beam of the mosaic.
    pub flux: f64,
    /// Difference from the Gaussian at any pixel, as a fraction of its peak.
    pub anywhere: f64,
    /// Places at which this was measured.
    pub places: usize,
}

/// Measures a field whose beam is widened by `kernel` (square pixels of the field; `None` when it is not) in a mosaic of
/// beam `target` (square pixels of the mosaic).
pub(super) fn measure(
    facts: &FieldFacts,
    kernel: Option<&Matrix2<f64>>,
    target: &Matrix2<f64>,
    geometry: &ImageGeometry,
    interpolation: &Interpolation,
) -> Transfer {
    let mut worst = Transfer { peak: f64::NAN, flux: f64::NAN, anywhere: f64::NAN, places: 0 };
    let [x, y] = middle(facts);
    let [x0, x1, y0, y1] = facts.extent.map(|v| v as f64);
    for place in 0..PLACES {
        let outwards = |step: usize| 2.0 * step as f64 / (ACROSS - 1) as f64 - 1.0;
        let (across, up) = (outwards(place % ACROSS), outwards(place / ACROSS));
        // golden-ratio steps: no two places have one phase on the pixels
        let phase = |step: f64| (place as f64 * step).fract();
        let at = [
            (x + across * OUTWARDS * 0.5 * (x1 - x0)).floor() + phase(0.618_034),
            (y + up * OUTWARDS * 0.5 * (y1 - y0)).floor() + phase(0.381_966 + 0.072_949),
        ];
        let Some(found) = one(facts, kernel, target, geometry, interpolation, at) else { continue };
        // NaN stays: f64::max would drop it
        let larger = |a: f64, b: f64| if worst.places == 0 || b.is_nan() || b > a { b } else { a };
        worst = Transfer {
            peak: larger(worst.peak, found[0]),
            flux: larger(worst.flux, found[1]),
            anywhere: larger(worst.anywhere, found[2]),
            places: worst.places + 1,
        };
    }
    worst
}

/// Errors of peak, flux density and of any pixel, for a source at a pixel position of the field; `None` when that is off the
/// mosaic.
fn one(
    facts: &FieldFacts,
    kernel: Option<&Matrix2<f64>>,
    target: &Matrix2<f64>,
    geometry: &ImageGeometry,
    interpolation: &Interpolation,
    at: [f64; 2],
) -> Option<[f64; 3]> {
    let direction = facts.wcs.direction_of(at[0], at[1])?;
    let (cx, cy) = geometry.pixel_of(direction)?;
    let on_mosaic = cx >= -0.5 && cy >= -0.5 && cx < geometry.width as f64 && cy < geometry.height as f64;
    if !on_mosaic {
        return None;
    }
    let back = steps(&facts.wcs, geometry, at)?.try_inverse()?;
    // the mosaic's beam on the pixels of the field: what the image must hold
    let widest = back * target * back.transpose();
    let half = (REACH * largest_width(&widest)).ceil() + 8.0;
    let reach = (REACH * largest_width(target)).ceil();
    if !(half <= FARTHEST && reach <= FARTHEST) {
        return None;
    }
    let corner = [at[0].floor() - half, at[1].floor() - half];
    let side = 2 * half as usize + 2;
    let inverse = facts.beam_px.try_inverse()?;
    let stamp = Array2::from_shape_fn((side, side), |(y, x)| {
        gaussian(&inverse, Vector2::new(x as f64 + corner[0] - at[0], y as f64 + corner[1] - at[1]))
    });
    let stamp = kernel.map_or_else(|| stamp.clone(), |kernel| widened(&stamp, &facts.beam_px, kernel));
    let seen = Reprojection::new(&stamp, None, facts.wcs.moved(corner[0], corner[1]), geometry, interpolation);

    let inverse = target.try_inverse()?;
    let (mut sum, mut anywhere, mut peak) = (0.0f64, 0.0f64, 0.0f64);
    let steps = 2 * reach as usize + 1;
    for j in 0..steps {
        for i in 0..steps {
            let (x, y) = (cx.round() - reach + i as f64, cy.round() - reach + j as f64);
            let (l, m) = geometry.lm(x, y);
            let want = gaussian(&inverse, Vector2::new(x - cx, y - cy));
            // beyond the stamp the Gaussian is nothing
            let got = seen.at(l, m).map_or(0.0, |(value, _)| value);
            sum += got;
            anywhere = anywhere.max((got - want).abs());
            if want >= 0.5 {
                peak = peak.max((got - want).abs());
            }
        }
    }
    let flux = (sum / (2.0 * PI * target.determinant().sqrt()) - 1.0).abs();
    Some([peak, flux, anywhere])
}

/// As [`convolve`], on a stamp with room around it, so that its edge is not taken for blank pixels.
fn widened(stamp: &Array2<f64>, beam: &Matrix2<f64>, kernel: &Matrix2<f64>) -> Array2<f64> {
    let side = stamp.nrows();
    let room = reach(kernel[(0, 0)].max(kernel[(1, 1)])).ceil() as usize + 2;
    let mut wide = Array2::zeros((side + 2 * room, side + 2 * room));
    wide.slice_mut(ndarray::s![room..room + side, room..room + side]).assign(stamp);
    convolve(&wide, beam, kernel).slice(ndarray::s![room..room + side, room..room + side]).to_owned()
}

fn gaussian(inverse: &Matrix2<f64>, at: Vector2<f64>) -> f64 {
    (-0.5 * at.dot(&(inverse * at))).exp()
}

/// Full width at half maximum along the longest axis.
pub(super) fn largest_width(covariance: &Matrix2<f64>) -> f64 {
    (FWHM2 * SymmetricEigen::new(*covariance).eigenvalues.max().max(0.0)).sqrt()
}

/// Full width at half maximum along the shortest axis.
pub(super) fn smallest_width(covariance: &Matrix2<f64>) -> f64 {
    (FWHM2 * SymmetricEigen::new(*covariance).eigenvalues.min().max(0.0)).sqrt()
}
