//! Gaussians fitted to the peaks of an image.
//!
//! Peaks closer to each other than two beams are fitted together, so that none takes its neighbour's flux; their pixels are
//! the beam's core about each peak (above [`CORE`] of its height) and, where the shape is free, the island around. The core
//! does not depend on the noise of the pixels in it: a region of pixels *chosen* for standing high would measure high.

use super::errors::{Correlation, covariance};
use super::gaussian::{Ellipse, FWHM2, PixelGaussian};
use super::islands::Peak;
use super::least_squares::fit;
use nalgebra::{DMatrix, DVector};
use ndarray::{Array2, ArrayView2};
use std::collections::BTreeSet;

/// Level of the beam that bounds the pixels fitted about a peak. Noise is correlated over a beam: pixels farther out add
/// more noise than signal to sums that weight all alike, and errors of place and size *grow* with the region (0.38 θ, 0.52 θ,
/// 0.60 θ over signal to noise for the pixels above 0.5, above 0.1 and all: the test of `errors.rs`).
pub const CORE: f64 = 0.5;
/// Peaks fitted together at most; of closer crowds each is fitted on its own.
pub const MOST_TOGETHER: usize = 8;
/// Most pixels of one fit.
const MOST_PIXELS: usize = 20_000;

/// Which shapes are free.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Shapes {
    /// A Gaussian where its flux exceeds its peak by more than [`RESOLVED`] errors, else the beam.
    Auto,
    /// The beam.
    Point,
    /// Any Gaussian.
    Gaussian,
}

/// How many errors the integrated flux density must exceed the peak by, for a source to be called resolved.
pub const RESOLVED: f64 = 3.0;

/// A source fitted in the image, with the covariance of its numbers.
#[derive(Debug, Clone)]
pub struct FittedPeak {
    /// The Gaussian; its covariance is the beam's when the shape was held.
    pub gaussian: PixelGaussian,
    /// Covariance of peak, column, row and, when the shape was free, the three covariances.
    pub covariance: DMatrix<f64>,
    /// Noise at the peak's pixel.
    pub noise: f64,
    /// Integrated flux density over beam: peak × solid angle / beam's, and its error.
    pub flux: (f64, f64),
    /// Whether the shape was free.
    pub shape_free: bool,
    /// How many were fitted together.
    pub together: usize,
    /// What to know about it.
    pub remarks: Remarks,
}

/// What to know about a fit.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Remarks {
    /// No fit settled: peak and place are those of the highest pixel.
    pub unfitted: bool,
    /// More peaks stand around than are fitted together.
    pub crowded: bool,
    /// Blank pixels, or the image's edge, in the region.
    pub edge: bool,
}

/// An image to be measured.
#[derive(Clone, Copy)]
pub struct Plate<'a> {
    /// Jy/beam, `[y][x]`, NaN = blank.
    pub image: ArrayView2<'a, f64>,
    /// Standard deviation of the noise, Jy/beam.
    pub noise: ArrayView2<'a, f64>,
    /// The beam, widths in pixels.
    pub beam: Ellipse,
    /// Autocorrelation of the noise.
    pub correlation: &'a Correlation,
}

/// Fits all peaks. Result in the order of the peaks.
pub fn fit_peaks(plate: &Plate, peaks: &[Peak], shapes: Shapes) -> Vec<FittedPeak> {
    let mut fitted: Vec<Option<FittedPeak>> = vec![None; peaks.len()];
    for group in groups(peaks, 2.0 * plate.beam.major) {
        let crowded = group.len() > MOST_TOGETHER;
        let parts: Vec<Vec<usize>> = if crowded { group.iter().map(|&i| vec![i]).collect() } else { vec![group] };
        for part in parts {
            let members: Vec<&Peak> = part.iter().map(|&i| &peaks[i]).collect();
            for (&index, mut one) in part.iter().zip(fit_group(plate, &members, shapes)) {
                one.remarks.crowded = crowded;
                fitted[index] = Some(one);
            }
        }
    }
    fitted.into_iter().flatten().collect()
}

/// Chains of peaks no farther apart than `reach` pixels, each sorted.
fn groups(peaks: &[Peak], reach: f64) -> Vec<Vec<usize>> {
    let mut group_of: Vec<Option<usize>> = vec![None; peaks.len()];
    let mut all = Vec::new();
    for start in 0..peaks.len() {
        if group_of[start].is_some() {
            continue;
        }
        let mut members = vec![start];
        group_of[start] = Some(all.len());
        let mut next = 0;
        while next < members.len() {
            let (x, y) = peaks[members[next]].pixel;
            for (other, peak) in peaks.iter().enumerate() {
                let near = (peak.pixel.0 as f64 - x as f64).hypot(peak.pixel.1 as f64 - y as f64) <= reach;
                if near && group_of[other].is_none() {
                    group_of[other] = Some(all.len());
                    members.push(other);
                }
            }
            next += 1;
        }
        members.sort_unstable();
        all.push(members);
    }
    all
}

fn fit_group(plate: &Plate, peaks: &[&Peak], shapes: Shapes) -> Vec<FittedPeak> {
    let free = vec![shapes != Shapes::Point; peaks.len()];
    let held = vec![false; peaks.len()];
    match shapes {
        Shapes::Point => fit_with(plate, peaks, &free),
        Shapes::Gaussian => fit_with(plate, peaks, &free).or_else(|| fit_with(plate, peaks, &held)),
        Shapes::Auto => match fit_with(plate, peaks, &free) {
            Some(first) => {
                let free: Vec<bool> = first.iter().map(|one| resolved(one, &plate.beam)).collect();
                if free.iter().all(|&f| f) { Some(first) } else { fit_with(plate, peaks, &free) }
            }
            None => fit_with(plate, peaks, &held),
        },
    }
    .unwrap_or_else(|| peaks.iter().map(|peak| unfitted(plate, peak, peaks.len())).collect())
}

/// Whether the flux density exceeds the peak by more than [`RESOLVED`] times the error of their difference.
fn resolved(one: &FittedPeak, beam: &Ellipse) -> bool {
    let excess = one.flux.0 - one.gaussian.peak;
    // the derivative of S − A by the parameters: that of S, less 1 by the peak
    let mut slopes = flux_slopes(&one.gaussian, beam);
    slopes[0] -= 1.0;
    excess > RESOLVED * quadratic(&slopes, &one.covariance).sqrt()
}

/// Derivatives of the flux density by peak, place and covariance.
fn flux_slopes(g: &PixelGaussian, beam: &Ellipse) -> [f64; 6] {
    let [ee, en, nn] = g.covariance;
    let root = (ee * nn - en * en).sqrt();
    let beam_root = beam.major * beam.minor / FWHM2;
    let by = 0.5 * g.peak / (root * beam_root);
    [root / beam_root, 0.0, 0.0, by * nn, -2.0 * by * en, by * ee]
}

/// vᵀ C v, of as many as C has.
pub(super) fn quadratic(v: &[f64], c: &DMatrix<f64>) -> f64 {
    let n = c.nrows();
    (0..n).map(|i| (0..n).map(|j| v[i] * v[j] * c[(i, j)]).sum::<f64>()).sum()
}

/// The pixels fitted about peaks: the beam's core, and the island's pixels of those with a free shape. Second: whether
/// blank pixels or the edge cut into the core.
fn region(plate: &Plate, peaks: &[&Peak], free: &[bool]) -> (Vec<(usize, usize)>, Vec<bool>) {
    let (height, width) = plate.image.dim();
    let mut pixels = BTreeSet::new();
    let mut cut = vec![false; peaks.len()];
    let core = PixelGaussian { peak: 1.0, centre: [0.0, 0.0], covariance: plate.beam.covariance() };
    // a beam of a pixel or two still gets its nearest neighbours
    let reach = (plate.beam.major * (-(CORE.ln()) / (0.5 * FWHM2)).sqrt()).ceil().max(1.0) as isize;
    for (index, peak) in peaks.iter().enumerate() {
        for dy in -reach..=reach {
            for dx in -reach..=reach {
                let near = dx.abs() <= 1 && dy.abs() <= 1;
                if !(near || core.value_and_slopes(dx as f64, dy as f64).0 > CORE) {
                    continue;
                }
                let place = (peak.pixel.0.checked_add_signed(dx), peak.pixel.1.checked_add_signed(dy));
                match place {
                    (Some(x), Some(y)) if x < width && y < height && usable(plate, x, y) => {
                        pixels.insert((y, x));
                    }
                    _ => cut[index] = true,
                }
            }
        }
        if free[index] && peak.pixels.len() <= MOST_PIXELS {
            pixels.extend(peak.pixels.iter().filter(|&&(x, y)| usable(plate, x, y)).map(|&(x, y)| (y, x)));
        }
    }
    (pixels.into_iter().map(|(y, x)| (x, y)).collect(), cut)
}

fn usable(plate: &Plate, x: usize, y: usize) -> bool {
    plate.image[[y, x]].is_finite() && plate.noise[[y, x]].is_finite()
}

/// Fits peaks together; `None` when the fit does not settle on Gaussians near the peaks.
fn fit_with(plate: &Plate, peaks: &[&Peak], free: &[bool]) -> Option<Vec<FittedPeak>> {
    let (pixels, cut) = region(plate, peaks, free);
    let beam = plate.beam.covariance();
    let start_of: Vec<usize> = free
        .iter()
        .scan(0, |next, &free| {
            let at = *next;
            *next += if free { 6 } else { 3 };
            Some(at)
        })
        .collect();
    let count: usize = free.iter().map(|&free| if free { 6 } else { 3 }).sum();
    if pixels.len() <= count {
        return None;
    }
    let scale = peaks.iter().map(|p| plate.image[[p.pixel.1, p.pixel.0]].abs()).fold(0.0, f64::max);
    if scale.is_nan() || scale <= 0.0 {
        return None;
    }
    let data = DVector::from_iterator(pixels.len(), pixels.iter().map(|&(x, y)| plate.image[[y, x]] / scale));
    let mut start = DVector::zeros(count);
    for ((peak, &at), &free) in peaks.iter().zip(&start_of).zip(free) {
        let (x, y) = peak.pixel;
        start[at] = plate.image[[y, x]] / scale;
        start[at + 1] = x as f64;
        start[at + 2] = y as f64;
        if free {
            (0..3).for_each(|i| start[at + 3 + i] = beam[i]);
        }
    }
    let gaussian = |p: &DVector<f64>, index: usize| {
        let at = start_of[index];
        let covariance = if free[index] { [p[at + 3], p[at + 4], p[at + 5]] } else { beam };
        PixelGaussian { peak: p[at], centre: [p[at + 1], p[at + 2]], covariance }
    };
    let fitted = fit(start, &data, |p| {
        let gaussians: Vec<PixelGaussian> = (0..peaks.len()).map(|i| gaussian(p, i)).collect();
        // inside the ellipses, and no narrower than a fraction of a pixel, below which no pixel knows anything
        let sound = |c: [f64; 3]| c[0] > 0.0 && c[2] > 0.0 && c[0] * c[2] - c[1] * c[1] > 1e-4;
        if gaussians.iter().zip(free).any(|(g, &free)| free && !sound(g.covariance)) {
            return None;
        }
        let mut values = DVector::zeros(pixels.len());
        let mut jacobian = DMatrix::zeros(pixels.len(), count);
        for (row, &(x, y)) in pixels.iter().enumerate() {
            for (index, g) in gaussians.iter().enumerate() {
                let (value, slopes) = g.value_and_slopes(x as f64, y as f64);
                values[row] += value;
                let many = if free[index] { 6 } else { 3 };
                for (i, slope) in slopes.iter().take(many).enumerate() {
                    jacobian[(row, start_of[index] + i)] = *slope;
                }
            }
        }
        Some((values, jacobian))
    })?;
    let noise: Vec<f64> = pixels.iter().map(|&(x, y)| plate.noise[[y, x]] / scale).collect();
    let all = covariance(&fitted.jacobian, &pixels, &noise, plate.correlation)?;
    let mut out = Vec::with_capacity(peaks.len());
    for (index, peak) in peaks.iter().enumerate() {
        let mut g = gaussian(&fitted.parameters, index);
        let strayed = (g.centre[0] - peak.pixel.0 as f64).hypot(g.centre[1] - peak.pixel.1 as f64);
        let size = Ellipse::of_covariance(g.covariance)?;
        let allowed = plate.beam.major.max(1.5).max(0.5 * size.major);
        if !(strayed <= allowed && g.peak > 0.0) {
            return None;
        }
        let many = if free[index] { 6 } else { 3 };
        let mut own = all.view((start_of[index], start_of[index]), (many, many)).into_owned();
        // back from units of the highest peak
        g.peak *= scale;
        for i in 0..many {
            own[(0, i)] *= scale;
            own[(i, 0)] *= scale;
        }
        let flux = if free[index] {
            let ratio = size.major * size.minor / (plate.beam.major * plate.beam.minor);
            (g.peak * ratio, quadratic(&flux_slopes(&g, &plate.beam), &own).sqrt())
        } else {
            (g.peak, own[(0, 0)].sqrt())
        };
        out.push(FittedPeak {
            gaussian: g,
            covariance: own,
            noise: plate.noise[[peak.pixel.1, peak.pixel.0]],
            flux,
            shape_free: free[index],
            together: peaks.len(),
            remarks: Remarks { edge: cut[index], ..Remarks::default() },
        });
    }
    Some(out)
}

/// The highest pixel for what could not be fitted, its place known to the beam's width over the signal to noise.
fn unfitted(plate: &Plate, peak: &Peak, together: usize) -> FittedPeak {
    let (x, y) = peak.pixel;
    let (value, noise) = (plate.image[[y, x]], plate.noise[[y, x]]);
    let place = (plate.beam.major * noise / value).powi(2) + 1.0 / 12.0;
    FittedPeak {
        gaussian: PixelGaussian { peak: value, centre: [x as f64, y as f64], covariance: plate.beam.covariance() },
        covariance: DMatrix::from_diagonal(&DVector::from_vec(vec![noise * noise, place, place])),
        noise,
        flux: (value, noise),
        shape_free: false,
        together,
        remarks: Remarks { unfitted: true, edge: region(plate, &[peak], &[false]).1[0], crowded: false },
    }
}

/// Height of a beam-shaped source at a given place: linear least squares on the beam's core with the place held. `None`
/// off the image or where it is blank.
pub fn height_at(image: ArrayView2<f64>, beam: &Ellipse, x: f64, y: f64) -> Option<f64> {
    let (height, width) = image.dim();
    let g = PixelGaussian { peak: 1.0, centre: [x, y], covariance: beam.covariance() };
    let (mut sum, mut norm) = (0.0, 0.0);
    let reach = beam.major.ceil().max(1.0) as isize;
    let (cx, cy) = (x.round() as isize, y.round() as isize);
    for row in cy - reach..=cy + reach {
        for column in cx - reach..=cx + reach {
            let near = row == cy && column == cx;
            let (value, _) = g.value_and_slopes(column as f64, row as f64);
            if !(near || value > 0.5) {
                continue;
            }
            if row < 0 || column < 0 || row as usize >= height || column as usize >= width {
                return None;
            }
            let pixel = image[[row as usize, column as usize]];
            if !pixel.is_finite() {
                return None;
            }
            sum += value * pixel;
            norm += value * value;
        }
    }
    Some(sum / norm)
}

/// Standard deviations from an inverse variance, NaN where it is not positive.
pub fn noise_of(weight: ArrayView2<f64>) -> Array2<f64> {
    weight.mapv(|w| if w > 0.0 && w.is_finite() { 1.0 / w.sqrt() } else { f64::NAN })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::measure::islands::{Rise, peaks};
    use approx::assert_abs_diff_eq;

    fn drawn(sources: &[PixelGaussian], size: usize) -> Array2<f64> {
        Array2::from_shape_fn((size, size), |(y, x)| {
            sources.iter().map(|g| g.value_and_slopes(x as f64, y as f64).0).sum()
        })
    }

    const BEAM: Ellipse = Ellipse { major: 6.0, minor: 4.5, position_angle: 0.4 };

    fn measured(image: &Array2<f64>, noise: f64, shapes: Shapes) -> Vec<FittedPeak> {
        let noise = Array2::from_elem(image.dim(), noise);
        let found = peaks((image / &noise).view(), 3.0, 5.0, Rise { noise: 2.0, fraction: 0.02 });
        let correlation = Correlation::Gaussian(BEAM);
        let plate = Plate { image: image.view(), noise: noise.view(), beam: BEAM, correlation: &correlation };
        fit_peaks(&plate, &found, shapes)
    }

    /// Sampled Gaussians without noise come back, alone, blended and resolved; the bound is the solver's.
    #[test]
    fn what_was_drawn_is_measured() {
        let point =
            |peak: f64, x: f64, y: f64| PixelGaussian { peak, centre: [x, y], covariance: BEAM.covariance() };
        let wide = Ellipse { major: 11.0, minor: 7.0, position_angle: -1.0 };
        let sky = [
            point(2.0, 20.3, 21.7),
            point(1.2, 26.4, 24.1),
            PixelGaussian { peak: 0.9, centre: [60.2, 58.8], covariance: wide.covariance() },
        ];
        let fitted = measured(&drawn(&sky, 80), 1e-3, Shapes::Auto);
        assert_eq!(fitted.len(), 3);
        for (one, want) in fitted.iter().zip(&sky) {
            assert_abs_diff_eq!(one.gaussian.peak, want.peak, epsilon = 1e-5);
            assert_abs_diff_eq!(one.gaussian.centre[0], want.centre[0], epsilon = 1e-5);
            assert_abs_diff_eq!(one.gaussian.centre[1], want.centre[1], epsilon = 1e-5);
            assert_eq!(one.remarks, Remarks::default());
        }
        assert_eq!(fitted.iter().map(|f| f.shape_free).collect::<Vec<_>>(), [false, false, true]);
        assert_eq!(fitted.iter().map(|f| f.together).collect::<Vec<_>>(), [2, 2, 1]);
        let ratio = 77.0 / 27.0;
        assert_abs_diff_eq!(fitted[2].flux.0, 0.9 * ratio, epsilon = 1e-4);
        let size = Ellipse::of_covariance(fitted[2].gaussian.covariance).unwrap();
        assert_abs_diff_eq!(size.position_angle, -1.0, epsilon = 1e-4);
        assert_abs_diff_eq!(
            height_at(drawn(&sky[..1], 80).view(), &BEAM, 20.3, 21.7).unwrap(),
            2.0,
            epsilon = 1e-12
        );
    }

    #[test]
    fn edges_and_single_pixels_do_not_break_it() {
        let corner = PixelGaussian { peak: 1.0, centre: [0.2, 0.1], covariance: BEAM.covariance() };
        let fitted = measured(&drawn(&[corner], 30), 0.01, Shapes::Auto);
        assert!(fitted.len() == 1 && fitted[0].remarks.edge && (fitted[0].flux.0 - 1.0).abs() < 0.05);
        // one hot pixel amid blanks: no fit, still told
        let mut image = Array2::from_elem((9, 9), f64::NAN);
        image[[4, 4]] = 1.0;
        let fitted = measured(&image, 0.1, Shapes::Gaussian);
        assert!(fitted.len() == 1 && fitted[0].remarks.unfitted && fitted[0].remarks.edge);
        assert_eq!(fitted[0].flux, (1.0, 0.1));
        assert_eq!(height_at(image.view(), &BEAM, 4.0, 4.0), None);
        assert_eq!(height_at(image.view(), &BEAM, -20.0, 4.0), None);
    }
}
