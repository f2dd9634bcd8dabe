//! What combining fields amounted to, for `run.json` and the summary.

use super::summary::{arcsec, scientific};
use crate::imaging::combine::{Combined, FieldOutcome};
use serde::{Deserialize, Serialize};

/// A combination of fields.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct CombinedFigures {
    /// The fields, in the order of the fields file.
    pub fields: Vec<CombinedField>,
    /// Largest relative error of the peak of a source of the beam's shape, over all fields.
    pub largest_peak_error: Option<f64>,
    /// Largest relative error of its integrated flux density.
    pub largest_flux_error: Option<f64>,
    /// Whether fields were convolved to a common beam.
    pub convolved: bool,
    /// Lowest frequency of the fields, Hz.
    pub lowest_hz: f64,
    /// Highest frequency of the fields, Hz.
    pub highest_hz: f64,
}

/// One field.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct CombinedField {
    /// The image, as the fields file names it.
    pub image: String,
    /// Frequency, Hz.
    pub frequency_hz: f64,
    /// Beam: full width at half maximum of the major axis, arcseconds.
    pub beam_major_arcsec: f64,
    /// Minor axis, arcseconds.
    pub beam_minor_arcsec: f64,
    /// Position angle, North through East, degrees.
    pub beam_position_angle_deg: f64,
    /// Pixels across the narrower axis of the beam.
    pub pixels_across_beam: f64,
    /// Full widths at half maximum of the Gaussian that it was convolved with, arcseconds; `None` when it was not.
    pub kernel_arcsec: Option<[f64; 2]>,
    /// Position angle of that Gaussian, degrees.
    pub kernel_position_angle_deg: Option<f64>,
    /// Noise after the convolution over noise before, the noise taken to be correlated like the beam.
    pub noise_factor: f64,
    /// Usable pixels.
    pub usable_px: usize,
    /// Pixels of the mosaic that it reached.
    pub mosaic_px: usize,
    /// Relative error of the peak of a source of the beam's shape.
    pub peak_error: Option<f64>,
    /// Relative error of its integrated flux density.
    pub flux_error: Option<f64>,
    /// Largest difference from the beam of the mosaic at any pixel, as a fraction of the peak.
    pub largest_difference: Option<f64>,
    /// Places at which the three were measured.
    pub places: usize,
    /// Positions are FK5 of equinox 2000 by the header, taken as ICRS.
    pub fk5_taken_as_icrs: bool,
}

impl CombinedFigures {
    /// The figures of a mosaic.
    pub fn of(combined: &Combined) -> CombinedFigures {
        let fields: Vec<CombinedField> = combined.fields.iter().map(CombinedField::of).collect();
        // an error that is not known makes the largest unknown
        let largest = |of: fn(&CombinedField) -> Option<f64>| {
            let used = fields.iter().filter(|field| field.mosaic_px > 0);
            used.map(of).try_fold(0.0, |most: f64, error| Some(most.max(error?)))
        };
        CombinedFigures {
            largest_peak_error: largest(|field| field.peak_error),
            largest_flux_error: largest(|field| field.flux_error),
            convolved: fields.iter().any(|field| field.kernel_arcsec.is_some()),
            lowest_hz: combined.frequencies_hz[0],
            highest_hz: combined.frequencies_hz[1],
            fields,
        }
    }

    /// One field in a line of ASCII for HISTORY.
    pub fn history(&self) -> Vec<String> {
        let line = |field: &CombinedField| {
            let mut line = format!(
                "field {}: beam {:.4} x {:.4} arcsec at {:.2} deg, {:.6e} Hz",
                field.image,
                field.beam_major_arcsec,
                field.beam_minor_arcsec,
                field.beam_position_angle_deg,
                field.frequency_hz
            );
            if let (Some([major, minor]), Some(angle)) = (field.kernel_arcsec, field.kernel_position_angle_deg) {
                line += &format!(
                    ", convolved with {major:.4} x {minor:.4} arcsec at {angle:.2} deg, noise times {:.4}",
                    field.noise_factor
                );
            }
            line
        };
        self.fields.iter().map(line).chain(std::iter::once(self.kept())).collect()
    }

    /// What a source of the beam's shape keeps, in a sentence.
    pub fn kept(&self) -> String {
        match (self.largest_peak_error, self.largest_flux_error) {
            (Some(peak), Some(flux)) => format!(
                "a source of the beam's shape keeps its peak to {} and its flux density to {}",
                scientific(peak),
                scientific(flux)
            ),
            _ => "the error of peaks and flux densities could not be measured in every field".to_owned(),
        }
    }
}

impl CombinedField {
    fn of(outcome: &FieldOutcome) -> CombinedField {
        let facts = &outcome.facts;
        let arcseconds = |radians: f64| radians.to_degrees() * 3600.0;
        let known = |value: f64| value.is_finite().then_some(value);
        CombinedField {
            image: facts.path.display().to_string(),
            frequency_hz: facts.frequency_hz,
            beam_major_arcsec: arcseconds(facts.beam[0]),
            beam_minor_arcsec: arcseconds(facts.beam[1]),
            beam_position_angle_deg: facts.beam[2].to_degrees(),
            pixels_across_beam: outcome.pixels_across,
            kernel_arcsec: outcome.kernel.map(|[major, minor, _]| [arcseconds(major), arcseconds(minor)]),
            kernel_position_angle_deg: outcome.kernel.map(|kernel| kernel[2].to_degrees()),
            noise_factor: outcome.noise_factor,
            usable_px: facts.usable,
            mosaic_px: outcome.pixels,
            peak_error: known(outcome.transfer.peak),
            flux_error: known(outcome.transfer.flux),
            largest_difference: known(outcome.transfer.anywhere),
            places: outcome.transfer.places,
            fk5_taken_as_icrs: facts.fk5,
        }
    }
}

/// How many fields, and whether they had to be convolved.
pub(super) fn fields_line(figures: &CombinedFigures) -> String {
    let used = figures.fields.iter().filter(|field| field.mosaic_px > 0).count();
    let mut line = format!("{used} of {}", figures.fields.len());
    if figures.convolved {
        let most = figures.fields.iter().map(|field| field.noise_factor).fold(1.0, f64::max);
        let count = figures.fields.iter().filter(|field| field.kernel_arcsec.is_some()).count();
        line += &format!(", {count} convolved to the common beam, which multiplies noise by up to {most:.2}");
    }
    let wide = |field: &&CombinedField| field.kernel_arcsec.map_or(0.0, |kernel| kernel[0]);
    if let Some(field) = figures.fields.iter().max_by(|a, b| wide(a).total_cmp(&wide(b)))
        && wide(&field) > 0.0
    {
        line += &format!("; widest kernel {}", arcsec(wide(&field)));
    }
    line
}
