//! `report.html`: one file that holds everything, readable on paper and on a telephone.
//!
//! Built with minijinja from `page.html` (kept beside this file), whose HTML escaping is on: no text of a run file or
//! station table can become markup. Pictures are inside as data; nothing is loaded from anywhere.

use super::deconvolution::deconvolution_line;
use super::measured::{flux_with_error, measured_line};
use super::record::RunRecord;
use super::summary::{
    accuracy_line, arcsec, broken_promise, bytes, digits, duration, flux, scientific, sizes, summary_sentence,
    thousands,
};
use super::whole_file::{WriteError, write_whole};
use base64::Engine;
use minijinja::{AutoEscape, Environment, context};
use std::io::Write;
use std::path::Path;
use thiserror::Error;

const TEMPLATE: &str = include_str!("page.html");

/// A picture for the page.
#[derive(Debug, Clone, PartialEq)]
pub struct PagePicture {
    /// Heading, for example `Dirty image`.
    pub title: String,
    /// What is seen and how to read it, one or two sentences.
    pub caption: String,
    /// PNG file content.
    pub png: Vec<u8>,
}

/// Why the page could not be made.
#[derive(Debug, Error)]
pub enum PageError {
    /// The template failed: a defect of evensky.
    #[error("report page: the template failed ({0}); this is a defect of evensky")]
    Template(#[from] minijinja::Error),
    /// The file could not be written.
    #[error(transparent)]
    Write(#[from] WriteError),
}

/// What every run has to say about its figures, whatever its data.
const ALWAYS_LIMITS: [&str; 4] = [
    "The noise is the thermal noise that the weights of the visibilities state. If those weights are wrong, so is it; \
     source confusion, side lobes and calibration errors come on top.",
    "Flux densities are as good as the beams given for the stations. The accuracy above is that of the arithmetic \
     with these beams, not of the beams.",
    "A dirty image still holds the side lobes of every source. Peaks in it are not a source list.",
    "The beam is a Gaussian fitted to the main lobe of the point spread function, which is that of the whole mosaic at \
     its reference pixel; elsewhere it differs as the pointings contribute differently.",
];

/// The page as HTML text.
///
/// # Errors
/// When the template fails.
pub fn render_page(record: &RunRecord, pictures: &[PagePicture]) -> Result<String, PageError> {
    let mut environment = Environment::new();
    environment.set_auto_escape_callback(|_| AutoEscape::Html);
    environment.set_undefined_behavior(minijinja::UndefinedBehavior::Strict);
    environment.add_filter("scientific", scientific);
    environment.add_filter("digits", digits);
    environment.add_filter("flux", flux);
    environment.add_filter("arcsec", arcsec);
    environment.add_filter("duration", duration);
    environment.add_filter("bytes", bytes);
    environment.add_filter("thousands", thousands);
    environment.add_filter("hours", right_ascension);
    environment.add_filter("degrees", declination);
    environment.add_filter("with_error", flux_with_error);
    environment.add_template("page.html", TEMPLATE)?;
    let figures = minijinja::Value::from(minijinja::value::Serde(record));
    let pictures: Vec<_> = pictures
        .iter()
        .map(|p| {
            let data = base64::engine::general_purpose::STANDARD.encode(&p.png);
            context! { title => p.title.as_str(), caption => p.caption.as_str(), data }
        })
        .collect();
    let settings = if record.settings.is_null() {
        String::new()
    } else {
        serde_json::to_string_pretty(&record.settings).unwrap_or_default()
    };
    let mut limits: Vec<&str> = record.limits.iter().map(String::as_str).collect();
    limits.extend(ALWAYS_LIMITS);
    let total: f64 = record.timings.iter().map(|t| t.seconds).sum();
    let longest = record.timings.iter().map(|t| t.seconds).fold(0.0f64, f64::max);
    let sentence = summary_sentence(record);
    let accuracy: Option<String> = record.accuracy.as_ref().map(accuracy_line);
    let broken = broken_promise(record);
    let deconvolved: Option<String> = record.deconvolution.as_ref().map(deconvolution_line);
    let measured: Option<String> = record.measured.as_ref().map(measured_line);
    let beam_sizes: Option<String> = record.beam.as_ref().map(sizes);
    let limits: Vec<String> = limits.into_iter().map(str::to_string).collect();
    let page = environment.get_template("page.html")?.render(context! {
        r => figures, sentence, accuracy, broken, deconvolved, measured, beam_sizes, pictures, settings, limits, total, longest
    })?;
    Ok(page)
}

/// Writes the page, whole or not at all.
///
/// # Errors
/// When the template fails or the file cannot be written.
pub fn write_page(path: &Path, record: &RunRecord, pictures: &[PagePicture]) -> Result<(), PageError> {
    let page = render_page(record, pictures)?;
    write_whole(path, |file| file.write_all(page.as_bytes()))?;
    Ok(())
}

/// `10h12m45.1s`; rounded as a whole, so that 60 seconds never stand there.
fn right_ascension(degrees: f64) -> String {
    let tenths = (degrees.rem_euclid(360.0) * 2400.0).round() as i64 % 864_000;
    format!("{:02}h{:02}m{:02}.{}s", tenths / 36_000, tenths / 600 % 60, tenths / 10 % 60, tenths % 10)
}

/// `+41°51′48″`.
fn declination(degrees: f64) -> String {
    let seconds = (degrees * 3600.0).round() as i64;
    let sign = if seconds < 0 { '−' } else { '+' };
    let size = seconds.abs();
    format!("{sign}{:02}°{:02}′{:02}″", size / 3600, size / 60 % 60, size % 60)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn positions_round_as_a_whole() {
        assert_eq!(right_ascension(152.678), "10h10m42.7s");
        assert_eq!(right_ascension(359.999_999_9), "00h00m00.0s");
        assert_eq!(right_ascension(-15.0), "23h00m00.0s");
        assert_eq!(declination(41.863), "+41°51′47″");
        assert_eq!(declination(-0.000_3), "−00°00′01″");
        assert_eq!(declination(9.999_999_9), "+10°00′00″");
    }
}
