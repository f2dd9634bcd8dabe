//! Images of single fields combined into one mosaic: I = Σ w_i I_i / Σ w_i, its inverse variance Σ w_i.
//!
//! Each field is convolved to the smallest beam common to all ([`common_beam`](self::common_beam())), interpolated on the
//! pixels of the mosaic and added with its weight, w_i the inverse variance of the field there (after the convolution). What
//! that does to a source of the beam's shape is measured in every run ([`Transfer`]). Fields are read one at a time, twice:
//! first for what they are, then to be added.
//!
//! A beam is a Gaussian, constant on the pixels of its field; its position angle belongs to the reference point of the
//! header. The beam of the mosaic is constant on its pixels. Where projections stretch the sky differently across a field the
//! two cannot agree everywhere; the measured errors include that, at 25 places of each field.

mod common_beam;
mod convolve;
mod error;
mod field;
mod grid;
mod interpolate;
mod reproject;
mod transfer;

pub use common_beam::{ALIKE, CommonBeam, common_beam};
pub use convolve::{FLAT, TAPER, UNCOVERED, convolve, variance_factor};
pub use error::CombineError;
pub use field::{Field, FieldFacts, MOST_FIELD_PIXELS, read_field};
pub use grid::{MOST_MOSAIC_PIXELS, default_grid};
pub use interpolate::{Interpolation, TAPS, linear};
pub use transfer::{PLACES, Transfer};

use crate::imaging::beam_fit::FittedBeam;
use crate::response::window::WindowError;
use crate::run::FieldEntry;
use crate::sky::ImageGeometry;
use field::widths;
use nalgebra::Matrix2;
use ndarray::Array2;
use reproject::Reprojection;

/// Frequencies that differ by less than this, relative, are one.
const SAME_FREQUENCY: f64 = 1e-6;
/// Pixels across a beam below which interpolation loses more than a thousandth of a peak.
const FEWEST_ACROSS: f64 = 3.0;

/// What became of a field.
#[derive(Debug, Clone)]
pub struct FieldOutcome {
    /// What it is.
    pub facts: FieldFacts,
    /// Kernel that it was convolved with: full widths, radians on the sky at its reference point, and position angle there;
    /// `None` when it was not.
    pub kernel: Option<[f64; 3]>,
    /// Noise after the convolution over noise before.
    pub noise_factor: f64,
    /// Pixels of the mosaic that it reached.
    pub pixels: usize,
    /// What happens to a source of its beam's shape.
    pub transfer: Transfer,
    /// Pixels across the narrower axis of its beam, along the longer side of a pixel.
    pub pixels_across: f64,
}

/// A mosaic.
#[derive(Debug, Clone)]
pub struct Combined {
    /// Its pixels.
    pub geometry: ImageGeometry,
    /// Jy/beam, `[y][x]`; NaN where no field reaches.
    pub sky: Array2<f64>,
    /// Inverse variance, (Jy/beam)⁻²; 0 where no field reaches.
    pub weight: Array2<f64>,
    /// Its beam, at the centre.
    pub beam: FittedBeam,
    /// Frequency: the mean over the fields, each with its total weight, Hz.
    pub frequency_hz: f64,
    /// Lowest and highest frequency of the fields, Hz.
    pub frequencies_hz: [f64; 2],
    /// The fields, in their order.
    pub fields: Vec<FieldOutcome>,
    /// What the reader must know.
    pub warnings: Vec<String>,
}

/// How far the work is: called with the field's number, from 0, and what happens to it.
pub type Watch<'a> = &'a dyn Fn(usize, &str);

/// Combines fields on the pixels of `wanted`, or on the smallest image that holds all.
///
/// # Errors
/// [`CombineError`], before anything is added when a field or the grid is at fault.
pub fn combine(
    entries: &[FieldEntry],
    wanted: Option<ImageGeometry>,
    watch: Watch,
) -> Result<Combined, CombineError> {
    if entries.is_empty() {
        return Err(CombineError::NoField);
    }
    let mut facts = Vec::new();
    for (number, entry) in entries.iter().enumerate() {
        watch(number, "looked at");
        facts.push(read_field(entry)?.facts);
    }
    let geometry = match wanted {
        Some(geometry) => grid::sized(geometry)?,
        None => default_grid(&facts)?,
    };
    let beams: Vec<Option<Matrix2<f64>>> = facts.iter().map(|f| beam_on(f, &geometry)).collect();
    // without a beam there, on the mosaic's hemisphere, a field cannot be taken in
    let window =
        |(facts, beam): (&FieldFacts, &Option<Matrix2<f64>>)| beam.and_then(|_| grid::window(facts, &geometry));
    let windows: Vec<Option<[usize; 4]>> = facts.iter().zip(&beams).map(window).collect();
    // a field off the mosaic has no say in its beam
    let taking_part: Vec<Matrix2<f64>> =
        windows.iter().zip(&beams).filter(|(window, _)| window.is_some()).filter_map(|(_, beam)| *beam).collect();
    let common = common_beam(&taking_part).ok_or_else(|| no_overlap(&geometry, &facts))?;
    let interpolation = Interpolation::new().map_err(fault)?;

    let mut sky = Array2::zeros((geometry.height, geometry.width));
    let mut weight = Array2::zeros((geometry.height, geometry.width));
    let mut fields = Vec::new();
    for (number, ((facts, entry), window)) in facts.into_iter().zip(entries).zip(windows).enumerate() {
        let kernel = kernel_of(&facts, &common, &geometry);
        let across = pixels_across(&facts);
        let mut outcome = FieldOutcome {
            kernel: kernel.map(|kernel| {
                let axes = facts.wcs.axes();
                widths(&(axes * kernel * axes.transpose()))
            }),
            noise_factor: kernel.map_or(1.0, |kernel| variance_factor(&facts.beam_px, &kernel).sqrt()),
            pixels: 0,
            transfer: Transfer { peak: f64::NAN, flux: f64::NAN, anywhere: f64::NAN, places: 0 },
            pixels_across: across,
            facts,
        };
        if let Some(window) = window {
            watch(number, "added");
            let Field { mut image, weight: own, .. } = read_field(entry)?;
            if let Some(kernel) = &kernel {
                image = convolve(&image, &outcome.facts.beam_px, kernel);
            }
            let seen = Reprojection::new(&image, Some(&own), outcome.facts.wcs, &geometry, &interpolation);
            let factor = outcome.noise_factor.powi(-2);
            outcome.pixels = reproject::add(&seen, factor, &geometry, window, &mut sky, &mut weight);
            if outcome.pixels > 0 {
                outcome.transfer = transfer::measure(
                    &outcome.facts,
                    kernel.as_ref(),
                    &common.covariance,
                    &geometry,
                    &interpolation,
                );
            }
        }
        fields.push(outcome);
    }
    if fields.iter().all(|field| field.pixels == 0) {
        let facts: Vec<FieldFacts> = fields.iter().map(|field| field.facts.clone()).collect();
        if !facts.iter().any(|facts| grid::touches(facts, &geometry)) {
            return Err(no_overlap(&geometry, &facts));
        }
        return Err(CombineError::NothingLeft { convolved: fields.iter().any(|field| field.kernel.is_some()) });
    }
    sky.zip_mut_with(&weight, |sum, &weight| *sum = if weight > 0.0 { *sum / weight } else { f64::NAN });
    let (frequency_hz, frequencies_hz) = frequencies(&fields);
    let mut combined = Combined {
        geometry,
        sky,
        weight,
        beam: mosaic_beam(&common, &geometry),
        frequency_hz,
        frequencies_hz,
        fields,
        warnings: Vec::new(),
    };
    combined.warnings = warnings(&combined, &common);
    Ok(combined)
}

/// A window of fixed, sound parameters is refused only by a fault of the program.
fn fault(error: WindowError) -> CombineError {
    CombineError::Fits(
        crate::fits::FitsProblem::Unwritable {
            what: "the interpolation".to_owned(),
            found: error.to_string(),
            expected: "a window; this is a fault of evensky".to_owned(),
        }
        .at(std::path::Path::new("combine")),
    )
}

/// The beam of a field on the pixels of the mosaic, at its middle; `None` when that lies off the hemisphere.
fn beam_on(facts: &FieldFacts, geometry: &ImageGeometry) -> Option<Matrix2<f64>> {
    let steps = grid::steps(&facts.wcs, geometry, grid::middle(facts))?;
    let beam = steps * facts.beam_px * steps.transpose();
    Some((beam + beam.transpose()) / 2.0)
}

/// What a field must be convolved with, square pixels of the field; `None` when nothing is to be done.
fn kernel_of(facts: &FieldFacts, common: &CommonBeam, geometry: &ImageGeometry) -> Option<Matrix2<f64>> {
    if common.alike {
        return None;
    }
    let back = grid::steps(&facts.wcs, geometry, grid::middle(facts))?.try_inverse()?;
    let wanted = back * common.covariance * back.transpose();
    if common_beam::ratios(&facts.beam_px, &wanted)[1] <= 1.0 + ALIKE {
        return None;
    }
    let lacking = wanted - facts.beam_px;
    let eigen = nalgebra::SymmetricEigen::new((lacking + lacking.transpose()) / 2.0);
    let positive = Matrix2::from_diagonal(&eigen.eigenvalues.map(|v| v.max(0.0)));
    Some(eigen.eigenvectors * positive * eigen.eigenvectors.transpose())
}

fn pixels_across(facts: &FieldFacts) -> f64 {
    transfer::smallest_width(&facts.beam_px)
}

fn mosaic_beam(common: &CommonBeam, geometry: &ImageGeometry) -> FittedBeam {
    // x runs West
    let axes = Matrix2::new(-geometry.pixel, 0.0, 0.0, geometry.pixel);
    let [major, minor, position_angle] = widths(&(axes * common.covariance * axes.transpose()));
    // nothing was fitted
    FittedBeam { major, minor, position_angle, largest_misfit: f64::NAN, pixels: 0 }
}

fn frequencies(fields: &[FieldOutcome]) -> (f64, [f64; 2]) {
    let used = || fields.iter().filter(|f| f.pixels > 0);
    let total: f64 = used().map(|f| f.facts.total_weight).sum();
    let mean = used().map(|f| f.facts.frequency_hz * (f.facts.total_weight / total)).sum();
    let range = used().fold([f64::INFINITY, 0.0], |[low, high], f| {
        [f64::min(low, f.facts.frequency_hz), f64::max(high, f.facts.frequency_hz)]
    });
    // one frequency stays what it is, to the last digit
    (if range[0] == range[1] { range[0] } else { mean }, range)
}

fn no_overlap(geometry: &ImageGeometry, facts: &[FieldFacts]) -> CombineError {
    let shown: Vec<String> = facts
        .iter()
        .take(4)
        .filter_map(|facts| {
            let [x, y] = grid::middle(facts);
            let (ra, dec) = facts.wcs.direction_of(x, y)?.to_deg();
            Some(format!("[{ra:.4}, {dec:.4}]"))
        })
        .collect();
    CombineError::NoOverlap {
        centre_deg: geometry.centre.to_deg().into(),
        width: geometry.width,
        height: geometry.height,
        fields: shown.join(", ") + if facts.len() > 4 { ", …" } else { "" },
    }
}

fn warnings(combined: &Combined, common: &CommonBeam) -> Vec<String> {
    let mut warnings = Vec::new();
    let name = |field: &FieldOutcome| field.facts.path.display().to_string();
    for field in &combined.fields {
        warnings.extend(field.facts.notes.iter().cloned());
        if field.pixels == 0 {
            warnings.push(format!(
                "{}: adds nothing, no pixel of the mosaic lies within it (or farther than its edges take from it)",
                name(field)
            ));
        } else if field.pixels_across < FEWEST_ACROSS {
            warnings.push(format!(
                "{}: the beam is sampled by {:.2} pixels across its narrower axis, fewer than 3; a peak is kept to {:.1e} on the \
                 pixels of this mosaic",
                name(field),
                field.pixels_across,
                field.transfer.peak
            ));
        }
        if field.pixels > 0 && field.transfer.places == 0 {
            warnings.push(format!(
                "{}: the error of peaks and flux densities was not measured: no place for it lies on the mosaic, or the beam is \
                 wider than 780 pixels",
                name(field)
            ));
        }
    }
    let across = transfer::smallest_width(&common.covariance);
    if across < FEWEST_ACROSS {
        warnings.push(format!(
            "the mosaic has {across:.2} pixels across the narrower axis of its beam, fewer than 3: peaks fall between \
             pixels; take a smaller pixel_arcsec"
        ));
    }
    let [low, high] = combined.frequencies_hz;
    if high > low * (1.0 + SAME_FREQUENCY) {
        warnings.push(format!(
            "the fields have frequencies from {low:.6e} to {high:.6e} Hz; nothing is scaled with frequency, the header \
             states their mean by weight, and where fields overlap a source's flux density is that of a frequency in between"
        ));
    }
    warnings
}
