//! A field on the pixels of the mosaic.
//!
//! For each pixel of the mosaic, its direction (l, m, n) is turned into the frame of the field's reference point and put
//! through the field's projection; the image is interpolated there by a windowed sinc, the weights linearly, so that they
//! stay positive. Values are Jy/beam and are not scaled with the area of pixels: a point source keeps its peak.

use super::interpolate::{Interpolation, linear};
use crate::sky::{CelestialWcs, ImageGeometry};
use nalgebra::{Matrix3, Vector3};
use ndarray::Array2;
use rayon::prelude::*;

/// An image that can be asked at places of a mosaic.
pub(super) struct Reprojection<'a> {
    image: &'a Array2<f64>,
    weight: Option<&'a Array2<f64>>,
    wcs: CelestialWcs,
    turn: Matrix3<f64>,
    kernel: &'a Interpolation,
}

impl<'a> Reprojection<'a> {
    /// `image` with `weight` (1 everywhere without) at `wcs`, seen from `geometry`.
    pub(super) fn new(
        image: &'a Array2<f64>,
        weight: Option<&'a Array2<f64>>,
        wcs: CelestialWcs,
        geometry: &ImageGeometry,
        kernel: &'a Interpolation,
    ) -> Self {
        let turn = geometry.frame().rotation_to(wcs.frame());
        Reprojection { image, weight, wcs, turn, kernel }
    }

    /// Value and weight at direction cosines of the mosaic; `None` where the image is blank or does not reach.
    pub(super) fn at(&self, l: f64, m: f64) -> Option<(f64, f64)> {
        let square = 1.0 - l * l - m * m;
        if square <= 0.0 {
            return None;
        }
        let [x, y] = self.wcs.pixel_of_lmn(&(self.turn * Vector3::new(l, m, square.sqrt())))?;
        let value = self.kernel.value(self.image, x, y);
        if value.is_nan() {
            return None;
        }
        let weight = self.weight.map_or(1.0, |map| linear(map, x, y));
        (weight > 0.0).then_some((value, weight))
    }
}

/// Adds weight · value and weight to the sums, over the pixels of `window` (first column and row, one past the last).
/// Returns the number of pixels reached.
pub(super) fn add(
    field: &Reprojection,
    factor: f64,
    geometry: &ImageGeometry,
    window: [usize; 4],
    numerator: &mut Array2<f64>,
    weights: &mut Array2<f64>,
) -> usize {
    let [x0, y0, x1, y1] = window;
    let width = geometry.width;
    let (Some(numerator), Some(weights)) = (numerator.as_slice_mut(), weights.as_slice_mut()) else { return 0 };
    let rows = numerator.par_chunks_mut(width).zip(weights.par_chunks_mut(width)).enumerate();
    rows.skip(y0)
        .take(y1 - y0)
        .map(|(y, (sums, weights))| {
            let mut reached = 0;
            for x in x0..x1 {
                let (l, m) = geometry.lm(x as f64, y as f64);
                if let Some((value, weight)) = field.at(l, m) {
                    sums[x] += factor * weight * value;
                    weights[x] += factor * weight;
                    reached += 1;
                }
            }
            reached
        })
        .sum()
}
