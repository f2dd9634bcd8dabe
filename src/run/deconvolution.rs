//! `[deconvolution]`: how, how far and where components are looked for.

use super::document::{At, Document, Section, count, list, number, pair, text};
use super::file_problem;
use super::tables::{Circle, read_circles};
use super::{Problem, RunFile};
use serde::Serialize;
use std::path::PathBuf;
use toml::de::DeValue;

/// Kinds of deconvolution.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum DeconvolutionMethod {
    /// The dirty image only.
    #[default]
    None,
    /// Högbom (1974).
    Hogbom,
    /// After Clark (1980).
    Clark,
    /// After Cornwell (2008).
    MultiScale,
}

/// What levels are multiples of.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum NoiseSource {
    /// The weight map.
    #[default]
    Weights,
    /// The residual around each place, where it is higher than the weight map says.
    Measured,
}

/// `[deconvolution]`.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Deconvolution {
    /// Line of the table; 1 where there is none.
    #[serde(skip)]
    pub line: usize,
    /// Which minor cycle.
    pub method: DeconvolutionMethod,
    /// Share of a peak that one component takes.
    pub loop_gain: f64,
    /// Stop below this multiple of the local noise; 0: never.
    pub stop_at_noise: f64,
    /// Stop below this flux density, Jy/beam; 0: never.
    pub stop_at_jy: f64,
    /// Most components.
    pub max_components: usize,
    /// Most passes over the visibilities.
    pub max_major_cycles: usize,
    /// Fraction of its first peak at which a minor cycle ends.
    pub major_depth: f64,
    /// What levels are multiples of.
    pub noise: NoiseSource,
    /// Full widths of the components, arcseconds, ascending; `None`: chosen by the beam.
    pub scales_arcsec: Option<Vec<f64>>,
    /// How much narrower components are preferred.
    pub scale_bias: f64,
    /// FITS mask on the pixels of the image.
    pub mask: Option<At<PathBuf>>,
    /// The circles of `mask_circles`, read.
    pub circles: Option<Vec<Circle>>,
    /// The file of `mask_circles`.
    pub mask_circles: Option<At<PathBuf>>,
    /// Automatic mask: multiple of the measured noise.
    pub mask_above_noise: Option<f64>,
    /// Whether the model must stay at or above zero.
    pub non_negative: bool,
    /// Components to start from (CSV).
    pub start_from: Option<At<PathBuf>>,
    /// Spectral index of all components.
    pub spectral_index: f64,
    /// Terms of the spectra of pixels; 1: all have the common spectrum.
    pub frequency_terms: usize,
    /// Fit compact sources above this multiple of the noise straight to the visibilities.
    pub fit_points_above_noise: Option<f64>,
    /// Restoring beam, full widths in arcseconds; `None`: the fitted one.
    pub restoring_beam_arcsec: Option<[f64; 2]>,
    /// Its position angle, North through East, degrees.
    pub restoring_angle_deg: f64,
}

impl Default for Deconvolution {
    fn default() -> Self {
        Deconvolution {
            line: 1,
            method: DeconvolutionMethod::None,
            loop_gain: 0.1,
            stop_at_noise: 3.0,
            stop_at_jy: 0.0,
            max_components: 100_000,
            max_major_cycles: 30,
            major_depth: 0.1,
            noise: NoiseSource::Weights,
            scales_arcsec: None,
            scale_bias: 0.6,
            mask: None,
            circles: None,
            mask_circles: None,
            mask_above_noise: None,
            non_negative: false,
            start_from: None,
            spectral_index: 0.0,
            frequency_terms: 1,
            fit_points_above_noise: None,
            restoring_beam_arcsec: None,
            restoring_angle_deg: 0.0,
        }
    }
}

impl Deconvolution {
    /// The files that it names.
    pub fn files(&self) -> impl Iterator<Item = &PathBuf> {
        [&self.mask, &self.mask_circles, &self.start_from].into_iter().flatten().map(|file| &file.value)
    }
}

impl RunFile {
    /// A complaint about a file that `[deconvolution]` names, found when it was used.
    pub fn deconvolution_file(
        &self,
        key: &str,
        file: &At<PathBuf>,
        problem: String,
        expected: &'static str,
    ) -> super::RunError {
        let problem = Problem::File { file: file.value.clone(), problem, expected };
        self.complaint(file.line, &format!("deconvolution.{key}"), problem).into()
    }
}

const METHODS: &str = "\"none\", \"hogbom\", \"clark\" or \"multi-scale\"";
const MULTIPLE: &str = "a multiple of the noise, greater than 0";

fn method(value: &DeValue) -> Option<DeconvolutionMethod> {
    let DeValue::String(word) = value else { return None };
    match word.as_ref() {
        "none" => Some(DeconvolutionMethod::None),
        "hogbom" | "högbom" => Some(DeconvolutionMethod::Hogbom),
        "clark" => Some(DeconvolutionMethod::Clark),
        "multi-scale" => Some(DeconvolutionMethod::MultiScale),
        _ => None,
    }
}

fn truth(value: &DeValue) -> Option<bool> {
    match value {
        DeValue::Boolean(truth) => Some(*truth),
        _ => None,
    }
}

/// Reads the table; complaints leave a value out.
pub(super) fn read_deconvolution(section: &Section) -> Deconvolution {
    let plain = Deconvolution::default();
    let method = section.required("method", METHODS, method);
    let loop_gain = section.or(
        "loop_gain",
        plain.loop_gain,
        "the share of a peak that one component takes: greater than 0, at most 1",
        number(|gain| gain > 0.0 && gain <= 1.0),
    );
    let at_jy = section.optional(
        "stop_at_jy",
        "a flux density in Jy/beam, greater than 0, or 0 for no such limit",
        number(|jy| jy >= 0.0),
    );
    // a flux density asked for alone is not to be undercut by a limit nobody mentioned
    let plain_noise = if at_jy.is_some_and(|at| at.value > 0.0) { 0.0 } else { plain.stop_at_noise };
    let at_noise = section.or(
        "stop_at_noise",
        plain_noise,
        "a multiple of the local noise, greater than 0, or 0 for no such limit",
        number(|multiple| multiple >= 0.0),
    );
    let max_components = section.or(
        "max_components",
        plain.max_components,
        "a whole number from 1 to 1000000000",
        count(1, 1_000_000_000),
    );
    let max_major_cycles =
        section.or("max_major_cycles", plain.max_major_cycles, "a whole number from 1 to 10000", count(1, 10_000));
    let major_depth = section.or(
        "major_depth",
        plain.major_depth,
        "the fraction of its first peak at which a minor cycle ends: 0.001 to 0.9",
        number(|depth| (0.001..=0.9).contains(&depth)),
    );
    let noise = section.or("noise", plain.noise, "\"weights\" or \"measured\"", |value| match value {
        DeValue::String(word) if word == "weights" => Some(NoiseSource::Weights),
        DeValue::String(word) if word == "measured" => Some(NoiseSource::Measured),
        _ => None,
    });
    let scales = section.optional(
        "scales_arcsec",
        "full widths of components in arcseconds, ascending from 0 (a point), at most 12, for example [0, 60, 180]",
        |value| {
            list(number(|scale| scale >= 0.0))(value).filter(|scales| {
                (1..=12).contains(&scales.len()) && scales[0] == 0.0 && scales.is_sorted_by(|a, b| a < b)
            })
        },
    );
    let scale_bias = section.or(
        "scale_bias",
        plain.scale_bias,
        "how much narrower components are preferred: at least 0 and less than 1",
        number(|bias| (0.0..1.0).contains(&bias)),
    );
    if let (Some(method), Some(scales)) = (method, &scales)
        && method.value != DeconvolutionMethod::MultiScale
        && method.value != DeconvolutionMethod::None
    {
        let problem = Problem::Conflict {
            found: "scales for a method that has only points".to_owned(),
            expected: "method = \"multi-scale\", or no scales_arcsec".to_owned(),
        };
        section.complain(scales.line, "scales_arcsec", problem);
    }
    let mask = file(section, "mask", "the name of a FITS image on the pixels of the image, not 0 where open");
    let mask_circles = file(section, "mask_circles", "the name of a CSV table of circles");
    let mask_above_noise = section.optional("mask_above_noise", MULTIPLE, number(|multiple| multiple > 0.0));
    let non_negative = section.or("non_negative", plain.non_negative, "true or false", truth);
    let start_from = file(section, "start_from", "the name of a component list (CSV)");
    let spectral_index = section.or(
        "spectral_index",
        plain.spectral_index,
        "the spectral index of all components, -10 to 10",
        number(|alpha| alpha.abs() <= 10.0),
    );
    let terms = section.or(
        "frequency_terms",
        plain.frequency_terms,
        "the number of terms in frequency: 1 (one spectrum for all), 2 (spectral index) or 3 (and curvature)",
        count(1, 3),
    );
    let fit_points = section.optional("fit_points_above_noise", MULTIPLE, number(|multiple| multiple > 0.0));
    if terms.value > 1 {
        let conflict = |found: &str, expected: &str| Problem::Conflict {
            found: found.to_owned(),
            expected: expected.to_owned(),
        };
        if fit_points.is_some() {
            let problem = conflict(
                "frequency terms beside fitted points, which have spectra of their own",
                "frequency_terms = 1, or no fit_points_above_noise",
            );
            section.complain(terms.line, "frequency_terms", problem);
        }
        if method.as_ref().is_some_and(|method| method.value == DeconvolutionMethod::MultiScale) {
            let problem = conflict(
                "frequency terms for extended components, which have one spectrum",
                "method = \"clark\" or \"hogbom\", or frequency_terms = 1",
            );
            section.complain(terms.line, "frequency_terms", problem);
        }
    }
    let beam = section.optional(
        "restoring_beam_arcsec",
        "[major, minor]: full widths at half maximum in arcseconds, greater than 0, the larger first",
        |value| pair(number(|width| width > 0.0))(value).filter(|[major, minor]| major >= minor),
    );
    let angle = section.optional(
        "restoring_angle_deg",
        "the position angle of the major axis, North through East, in degrees: -180 to 180",
        number(|deg| deg.abs() <= 180.0),
    );
    if let (Some(angle), None) = (angle, beam)
        && !section.has("restoring_beam_arcsec")
    {
        let problem = Problem::Conflict {
            found: "an angle for a beam that is not given".to_owned(),
            expected: "restoring_beam_arcsec beside it, or neither".to_owned(),
        };
        section.complain(angle.line, "restoring_angle_deg", problem);
    }
    section.finish();
    let circles = mask_circles.as_ref().and_then(|file| {
        let table = read_circles(&file.value);
        table.map_err(|complaints| complaints.into_iter().for_each(|c| section.document.add(c))).ok()
    });
    Deconvolution {
        line: section.line,
        method: method.map_or(plain.method, |at| at.value),
        loop_gain: loop_gain.value,
        stop_at_noise: at_noise.value,
        stop_at_jy: at_jy.map_or(0.0, |at| at.value),
        max_components: max_components.value,
        max_major_cycles: max_major_cycles.value,
        major_depth: major_depth.value,
        noise: noise.value,
        scales_arcsec: scales.map(|at| at.value),
        scale_bias: scale_bias.value,
        mask,
        circles,
        mask_circles,
        mask_above_noise: mask_above_noise.map(|at| at.value),
        non_negative: non_negative.value,
        start_from,
        spectral_index: spectral_index.value,
        frequency_terms: terms.value,
        fit_points_above_noise: fit_points.map(|at| at.value),
        restoring_beam_arcsec: beam.map(|at| at.value),
        restoring_angle_deg: angle.map_or(0.0, |at| at.value),
    }
}

/// A file that must be there; relative to the run file.
fn file(section: &Section, key: &'static str, expected: &'static str) -> Option<At<PathBuf>> {
    let name = section.optional(key, expected, text)?;
    let document: &Document = section.document;
    let path = document.resolve(&name.value);
    if let Some(problem) = file_problem(&path) {
        section.complain(name.line, key, Problem::File { file: path, problem, expected });
        return None;
    }
    Some(At { value: path, line: name.line })
}
