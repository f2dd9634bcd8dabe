//! Sources found in an image, put on the sky.

use super::errors::{Correlation, condon};
use super::fit::{FittedPeak, MOST_TOGETHER, Plate, RESOLVED, Shapes, fit_peaks, noise_of};
use super::gaussian::Ellipse;
use super::islands::{Rise, peaks};
use super::{Method, Source};
use crate::imaging::beam_fit::FittedBeam;
use crate::measure::source::Size;
use crate::sky::{Direction, ImageGeometry};
use nalgebra::DMatrix;
use ndarray::ArrayView2;
use std::f64::consts::{FRAC_PI_2, PI};

/// How far a peak must rise above the saddle to a higher one: twice the noise, and a fiftieth of itself (a deconvolved
/// image holds ripples of its bright sources). Common practice, no source.
pub(super) const RISE: Rise = Rise { noise: 2.0, fraction: 0.02 };

/// How errors are reckoned.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Errors {
    /// The exact covariance of each fit on its own pixels.
    Covariance,
    /// The closed forms of Condon (1997) for correlated noise, with the beam as the noise's smoothing.
    Condon,
}

/// What counts as a source, and how it is fitted.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FindOptions {
    /// Lowest peak, in multiples of the local noise.
    pub find_above_noise: f64,
    /// Pixels above this multiple that touch make one island.
    pub island_above_noise: f64,
    /// Which shapes are free.
    pub shapes: Shapes,
    /// How errors are reckoned.
    pub errors: Errors,
    /// Spectral index that sources are taken to have.
    pub spectral_index: f64,
}

/// Finds and fits the sources of `image` (flat sky, Jy/beam, `[y][x]`, NaN = blank), whose inverse variance is `weight`,
/// highest peak over noise first. `correlation` is the noise's autocorrelation: for natural weights the point spread
/// function. Names are those of the places; number of pointings and response are left open.
pub fn find_sources(
    image: ArrayView2<f64>,
    weight: ArrayView2<f64>,
    geometry: &ImageGeometry,
    beam: &FittedBeam,
    correlation: &Correlation,
    options: &FindOptions,
) -> Vec<Source> {
    let noise = noise_of(weight);
    let signal_to_noise = &image / &noise;
    let found = peaks(signal_to_noise.view(), options.island_above_noise, options.find_above_noise, RISE);
    let plate =
        Plate { image, noise: noise.view(), beam: Ellipse::from(beam).scaled(1.0 / geometry.pixel), correlation };
    let fitted = fit_peaks(&plate, &found, options.shapes);
    let mut sources: Vec<Source> =
        fitted.iter().filter_map(|one| on_the_sky(one, &plate, geometry, options)).collect();
    super::name_sources(&mut sources);
    sources
}

fn on_the_sky(one: &FittedPeak, plate: &Plate, geometry: &ImageGeometry, options: &FindOptions) -> Option<Source> {
    let [x, y] = one.gaussian.centre;
    let direction = geometry.direction_of(x, y)?;
    let fitted = Ellipse::of_covariance(one.gaussian.covariance)?;
    let mut flux_error = one.flux.1;
    let mut peak_error = one.covariance[(0, 0)].sqrt();
    let mut place =
        [[one.covariance[(1, 1)], one.covariance[(1, 2)]], [one.covariance[(2, 1)], one.covariance[(2, 2)]]];
    let mut size_error = one.shape_free.then(|| size_errors(one.gaussian.covariance, &one.covariance));
    if options.errors == Errors::Condon && !one.remarks.unfitted {
        let smoothing = (plate.beam.major * plate.beam.minor).sqrt();
        let e = condon(one.gaussian.peak / one.noise, &fitted, smoothing);
        peak_error = e.peak * one.gaussian.peak;
        flux_error = if one.shape_free { e.integrated * one.flux.0 } else { peak_error };
        // along the axes, turned to columns (West) and rows (North)
        let (sin, cos) = fitted.position_angle.sin_cos();
        let (major, minor) = (e.along_major.powi(2), e.along_minor.powi(2));
        let mixed = -(major - minor) * sin * cos;
        place = [[major * sin * sin + minor * cos * cos, mixed], [mixed, major * cos * cos + minor * sin * sin]];
        size_error = one.shape_free.then_some(Ellipse {
            major: e.major * fitted.major,
            minor: e.minor * fitted.minor,
            position_angle: e.position_angle,
        });
    }
    let deconvolved = one.shape_free.then(|| fitted.deconvolved(&plate.beam)).flatten();
    let mut remarks = Vec::new();
    if one.remarks.unfitted {
        remarks.push("not fitted: highest pixel".to_owned());
    }
    if one.together > 1 {
        remarks.push(format!("fitted with {} others", one.together - 1));
    }
    if one.remarks.crowded {
        remarks.push(format!("more than {} peaks close by, fitted alone", MOST_TOGETHER));
    }
    if one.remarks.edge {
        remarks.push("at the edge".to_owned());
    }
    if one.shape_free && one.flux.0 - one.gaussian.peak > RESOLVED * one.flux.1.hypot(peak_error) {
        remarks.push("resolved".to_owned());
    }
    Some(Source {
        place_error: Some(place_error(geometry, direction, [x, y], place)),
        flux_jy: Some(one.flux.0),
        flux_error_jy: Some(flux_error),
        peak_jy: Some(one.gaussian.peak),
        peak_error_jy: Some(peak_error),
        noise_jy: Some(one.noise),
        size: size_error
            .map(|error| Size { ellipse: fitted.scaled(geometry.pixel), error: sky_error(error, geometry.pixel) }),
        deconvolved: deconvolved.map(|e| e.scaled(geometry.pixel)),
        method: if one.shape_free { Method::ImageGaussian } else { Method::ImagePoint },
        remarks,
        ..Source::at("", direction, options.spectral_index)
    })
}

fn sky_error(error: Ellipse, pixel: f64) -> Ellipse {
    Ellipse { major: error.major * pixel, minor: error.minor * pixel, position_angle: error.position_angle }
}

/// Errors towards East and North on the sky from a covariance over (column, row), through the projection.
fn place_error(geometry: &ImageGeometry, at: Direction, [x, y]: [f64; 2], c: [[f64; 2]; 2]) -> [f64; 2] {
    let frame = at.frame();
    let step = 0.01;
    let slope = |dx: f64, dy: f64| {
        let there = geometry.direction_of(x + dx, y + dy).map(|d| frame.lmn(d));
        there.map_or([geometry.pixel, geometry.pixel], |[l, m, _]| [l / step, m / step])
    };
    let (by_x, by_y) = (slope(step, 0.0), slope(0.0, step));
    std::array::from_fn(|i| {
        let variance =
            by_x[i] * by_x[i] * c[0][0] + by_x[i] * by_y[i] * (c[0][1] + c[1][0]) + by_y[i] * by_y[i] * c[1][1];
        variance.max(0.0).sqrt()
    })
}

/// Errors of widths and position angle from the covariance of the fit, by central differences.
fn size_errors(shape: [f64; 3], covariance: &DMatrix<f64>) -> Ellipse {
    let h = 1e-5 * (shape[0] + shape[2]);
    let mut slopes = [[0.0; 3]; 3];
    for i in 0..3 {
        let moved = |by: f64| {
            let mut there = shape;
            there[i] += by;
            Ellipse::of_covariance(there).map(|e| [e.major, e.minor, e.position_angle])
        };
        if let (Some(up), Some(down)) = (moved(h), moved(-h)) {
            let mut turned = up[2] - down[2];
            turned -= PI * (turned / PI).round();
            for (quantity, difference) in [up[0] - down[0], up[1] - down[1], turned].into_iter().enumerate() {
                slopes[quantity][i] = difference / (2.0 * h);
            }
        }
    }
    let part = covariance.view((3, 3), (3, 3)).into_owned();
    let [major, minor, angle] = slopes.map(|s| super::fit::quadratic(&s, &part).max(0.0).sqrt());
    Ellipse { major, minor, position_angle: angle.min(FRAC_PI_2) }
}
