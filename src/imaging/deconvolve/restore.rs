//! Restoring: the model seen with a Gaussian beam, and what is left added to it.
//!
//! sky(x) = Σ_s S_s g(x − s) + N_residual(x)/W(x), g of peak 1: a point source of S Jy has a peak of S Jy/beam.

use super::model::Model;
use crate::imaging::beam_fit::FittedBeam;
use crate::sky::ImageGeometry;
use ndarray::Array2;
use rayon::prelude::*;

/// A Gaussian is cut at this many full widths: exp(−4 ln2 · 2.5²) = 3e-8 of its peak.
const CUT: f64 = 2.5;
/// Rows that one thread restores at a time.
const BAND: usize = 32;

/// The model convolved with `beam`, Jy/beam; `hz` is the frequency of the image.
pub fn restored_model(model: &Model, geometry: &ImageGeometry, beam: &FittedBeam, hz: f64) -> Array2<f64> {
    let (width, height) = (geometry.width, geometry.height);
    let half = (CUT * beam.major / geometry.pixel).ceil() as i64;
    let side = (2 * half + 1) as usize;
    let value = |dx: f64, dy: f64| beam.value_at(-dx * geometry.pixel, dy * geometry.pixel);
    let stamp: Vec<f64> = (0..side * side)
        .map(|at| value((at % side) as f64 - half as f64, (at / side) as f64 - half as f64))
        .collect();
    // sorted by row, as an ndarray iterates
    let sources: Vec<(i64, i64, f64)> = model
        .pixels
        .indexed_iter()
        .filter(|(_, flux)| **flux != 0.0)
        .map(|((y, x), &flux)| (x as i64, y as i64, flux))
        .collect();
    let points: Vec<(f64, f64, f64)> = model
        .points
        .iter()
        .filter_map(|point| geometry.pixel_of(point.direction).map(|(x, y)| (x, y, point.flux_at(hz))))
        .collect();
    let mut image = Array2::zeros((height, width));
    let Some(pixels) = image.as_slice_mut() else { return image };
    pixels.par_chunks_mut(BAND * width).enumerate().for_each(|(band, rows)| {
        let first = (band * BAND) as i64;
        let last = first + (rows.len() / width) as i64 - 1;
        let from = sources.partition_point(|s| s.1 < first - half);
        let to = sources.partition_point(|s| s.1 <= last + half);
        for &(x, y, flux) in &sources[from..to] {
            let (x0, x1) = ((x - half).max(0), (x + half).min(width as i64 - 1));
            for row in (y - half).max(first)..=(y + half).min(last) {
                let start = ((row - y + half) as usize) * side + (x0 - x + half) as usize;
                let out = &mut rows[((row - first) as usize) * width..][x0 as usize..=x1 as usize];
                out.iter_mut().zip(&stamp[start..]).for_each(|(out, g)| *out += flux * g);
            }
        }
        for &(x, y, flux) in &points {
            let reach = half as f64;
            let low = |v: f64, n: i64| ((v - reach).ceil().max(0.0) as i64).min(n);
            let (x0, x1) = (low(x, width as i64), ((x + reach).floor().min(width as f64 - 1.0)) as i64);
            let (y0, y1) = (low(y, last + 1).max(first), ((y + reach).floor().min(last as f64)) as i64);
            for row in y0..=y1 {
                for column in x0..=x1 {
                    rows[(row - first) as usize * width + column as usize] +=
                        flux * value(column as f64 - x, row as f64 - y);
                }
            }
        }
    });
    image
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::sky::{Component, Direction};

    /// Pixel and point sources against the formula, at edges and across bands. Bound: the cut, 3e-8 of 3 Jy.
    #[test]
    fn the_model_is_a_sum_of_gaussians() {
        let geometry = ImageGeometry::new(Direction::from_deg(30.0, 10.0), 61, 83, 2e-4).unwrap();
        let beam = FittedBeam {
            major: 9.0 * geometry.pixel,
            minor: 5.0 * geometry.pixel,
            position_angle: 0.6,
            largest_misfit: 0.0,
            pixels: 0,
        };
        let mut model = Model::empty(&geometry);
        let mut places = vec![(60.0, 0.0, 1.5), (20.0, 33.0, -0.5), (30.0, 63.0, 1.0)];
        for &(x, y, flux) in &places {
            model.pixels[[y as usize, x as usize]] = flux;
        }
        for (x, y, flux_jy) in [(12.3, 31.7, 2.0), (-4.5, 82.4, 3.0)] {
            let direction = geometry.direction_of(x, y).unwrap();
            let reference_hz = 1e9;
            model.points.push(Component {
                name: String::new(),
                direction,
                flux_jy,
                reference_hz,
                spectral_index: 0.0,
            });
            places.push((x, y, flux_jy));
        }
        let image = restored_model(&model, &geometry, &beam, 1e9);
        let mut worst: f64 = 0.0;
        for ((y, x), &got) in image.indexed_iter() {
            let want: f64 = places
                .iter()
                .map(|&(px, py, flux)| {
                    let (dx, dy) = (x as f64 - px, y as f64 - py);
                    flux * beam.value_at(-dx * geometry.pixel, dy * geometry.pixel)
                })
                .sum();
            worst = worst.max((got - want).abs());
        }
        assert!(worst < 2e-7, "{worst:e}");
        assert!((image[[0, 60]] - 1.5).abs() < 1e-6);
    }
}
