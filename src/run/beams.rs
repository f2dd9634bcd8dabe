//! `[beams.NAME]` and `[[stations]]`: the patterns, and which station has which.

use super::document::{At, Section, list, number, pair, text};
use super::{Complaint, Problem, RunFile, StationTable};
use globset::{GlobBuilder, GlobMatcher};
use serde::Serialize;
use std::collections::BTreeMap;
use toml::de::DeValue;

/// One table `[beams.NAME]`.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Beam {
    /// Line of the table.
    #[serde(skip)]
    pub line: usize,
    /// Line of each key of the table.
    #[serde(skip)]
    pub key_lines: BTreeMap<&'static str, usize>,
    /// Shape and its parameters.
    #[serde(flatten)]
    pub shape: Shape,
}

/// A beam shape and its parameters, in the units of their keys.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(tag = "shape", rename_all = "kebab-case")]
pub enum Shape {
    /// A Gaussian, its width measured at one or several frequencies.
    Gaussian {
        /// Full widths at half power, degrees.
        half_power_deg: Vec<f64>,
        /// The frequencies they were measured at, Hz, ascending; as many.
        at_hz: Vec<f64>,
        /// Width along x over width along y.
        axis_ratio: f64,
    },
    /// A uniformly lit circular dish.
    Airy {
        /// Dish diameter, metres.
        diameter_m: f64,
        /// Diameter of the central blockage, metres.
        blockage_m: f64,
    },
    /// 1 everywhere.
    Unity,
}

/// Names of the shapes that exist.
pub const SHAPES: [&str; 3] = ["gaussian", "airy", "unity"];

/// One entry `[[stations]]`.
#[derive(Debug, Clone, Serialize)]
pub struct StationRule {
    /// Line of the entry.
    #[serde(skip)]
    pub line: usize,
    /// The glob as written.
    #[serde(rename = "match")]
    pub pattern: At<String>,
    /// The glob, ready to match.
    #[serde(skip)]
    pub matcher: GlobMatcher,
    /// Name of the beam.
    pub beam: Option<At<String>>,
    /// Pointing offset in the station frame, arcminutes.
    pub pointing_arcmin: Option<At<[f64; 2]>>,
}

/// What the run file says of one station: the station table first, then every `[[stations]]` entry that matches, later
/// ones over earlier ones, field by field.
#[derive(Debug, Clone, PartialEq)]
pub struct StationSettings {
    /// Name of the beam; `None` when nothing gives the station one.
    pub beam: Option<String>,
    /// Pointing offset in the station frame, arcminutes.
    pub pointing_arcmin: [f64; 2],
}

impl RunFile {
    /// What the run file says of the station called `name`.
    pub fn station(&self, name: &str) -> StationSettings {
        let row = self.station_table.as_ref().and_then(|table| table.row(name));
        let mut settings = StationSettings {
            beam: row.and_then(|row| row.beam.clone()),
            pointing_arcmin: row.and_then(|row| row.pointing_arcmin).unwrap_or_default(),
        };
        for rule in self.station_rules.iter().filter(|rule| rule.matcher.is_match(name)) {
            if let Some(beam) = &rule.beam {
                settings.beam = Some(beam.value.clone());
            }
            if let Some(pointing) = rule.pointing_arcmin {
                settings.pointing_arcmin = pointing.value;
            }
        }
        settings
    }

    /// Sentences about globs and table rows that concern none of `stations` (the names of all stations of all
    /// pointings): most often a slip of the pen, but no error, since an array may be observed in parts.
    pub fn unmatched(&self, stations: &[&str]) -> Vec<String> {
        let mut warnings: Vec<String> = self
            .station_rules
            .iter()
            .filter(|rule| !stations.iter().any(|name| rule.matcher.is_match(name)))
            .map(|rule| {
                format!(
                    "{}:{}: stations.match: \"{}\" matches no station; there are: {}",
                    self.path.display(),
                    rule.pattern.line,
                    rule.pattern.value,
                    stations.join(", ")
                )
            })
            .collect();
        if let Some(table) = &self.station_table {
            let strangers: Vec<&str> =
                table.rows.iter().map(|row| row.name.as_str()).filter(|name| !stations.contains(name)).collect();
            if !strangers.is_empty() {
                warnings.push(format!(
                    "{}: no visibility file has the station{} {}",
                    table.path.display(),
                    if strangers.len() == 1 { "" } else { "s" },
                    strangers.join(", ")
                ));
            }
        }
        warnings
    }
}

const FREQUENCY: &str = "a frequency in Hz, greater than 0, or an ascending list of them";
const WIDTH: &str = "a full width at half power in degrees, greater than 0, or a list of them, one for each at_hz";

pub(super) fn read_beam(section: &Section) -> Option<Beam> {
    let expected = format!("the name of a shape: {}", SHAPES.map(|s| format!("\"{s}\"")).join(", "));
    let name = section.required("shape", &expected, text)?;
    let shape = match name.value.as_str() {
        "gaussian" => read_gaussian(section),
        "airy" => read_airy(section),
        "unity" => Some(Shape::Unity),
        other => {
            // the keys of an unknown shape cannot be judged
            let known = SHAPES.map(String::from).to_vec();
            section.complain(name.line, "shape", Problem::unknown_name("shape", other, known));
            return None;
        }
    };
    section.finish();
    let keys = ["shape", "half_power_deg", "at_hz", "axis_ratio", "diameter_m", "blockage_m"];
    let key_lines =
        keys.into_iter().filter(|key| section.has(key)).map(|key| (key, section.line_of(key))).collect();
    Some(Beam { line: section.line, key_lines, shape: shape? })
}

fn read_gaussian(section: &Section) -> Option<Shape> {
    let widths = section.required("half_power_deg", WIDTH, one_or_more(|deg| deg > 0.0 && deg < 180.0));
    let frequencies = section.required("at_hz", FREQUENCY, one_or_more(|hz| hz > 0.0));
    let axis_ratio =
        section.or("axis_ratio", 1.0, "the width along x over that along y, greater than 0", number(|a| a > 0.0));
    let (widths, frequencies) = (widths?, frequencies?);
    let (n, m) = (widths.value.len(), frequencies.value.len());
    if n != m {
        let problem = Problem::Conflict {
            found: format!(
                "{n} width{} for {m} frequenc{}",
                if n == 1 { "" } else { "s" },
                if m == 1 { "y" } else { "ies" }
            ),
            expected: "as many half_power_deg as at_hz".to_owned(),
        };
        section.complain(widths.line, "half_power_deg", problem);
        return None;
    }
    if !frequencies.value.is_sorted_by(|a, b| a < b) {
        section.complain(frequencies.line, "at_hz", Problem::value("frequencies out of order", FREQUENCY));
        return None;
    }
    Some(Shape::Gaussian { half_power_deg: widths.value, at_hz: frequencies.value, axis_ratio: axis_ratio.value })
}

fn one_or_more(accepts: impl Fn(f64) -> bool + Copy) -> impl Fn(&DeValue) -> Option<Vec<f64>> {
    move |value| match value {
        DeValue::Array(_) => list(number(accepts))(value).filter(|values| !values.is_empty()),
        _ => number(accepts)(value).map(|one| vec![one]),
    }
}

fn read_airy(section: &Section) -> Option<Shape> {
    let diameter =
        section.required("diameter_m", "the dish's diameter in metres, greater than 0", number(|m| m > 0.0));
    let blockage = section.or(
        "blockage_m",
        0.0,
        "the diameter of the central blockage in metres, at least 0",
        number(|m| m >= 0.0),
    );
    let diameter = diameter?;
    if blockage.value >= diameter.value {
        let expected = format!("less than diameter_m, which is {}", diameter.value);
        let problem = Problem::value(format!("a blockage of {} m", blockage.value), expected);
        section.complain(blockage.line, "blockage_m", problem);
        return None;
    }
    Some(Shape::Airy { diameter_m: diameter.value, blockage_m: blockage.value })
}

pub(super) fn read_rule(section: &Section) -> Option<StationRule> {
    let pattern = section.required("match", "a glob on station names, for example \"HF*\"", text);
    let beam = section.optional("beam", "the name of a beam, a table [beams.NAME]", text);
    let pointing_arcmin = section.optional(
        "pointing_arcmin",
        "[dx, dy] in arcminutes in the station frame (+y towards the zenith or North), each below 5400 (90 degrees)",
        pair(number(|arcmin| arcmin.abs() < 5400.0)),
    );
    if !section.has("beam") && !section.has("pointing_arcmin") {
        let expected = "beam, pointing_arcmin or both: the entry gives its stations nothing".to_owned();
        section.complain(section.line, "beam", Problem::Missing { expected });
    }
    section.finish();
    let pattern = pattern?;
    match GlobBuilder::new(&pattern.value).build() {
        Ok(glob) => {
            let matcher = glob.compile_matcher();
            Some(StationRule { line: section.line, pattern, matcher, beam, pointing_arcmin })
        }
        Err(error) => {
            let found = format!("{:?}, which is no glob: {}", pattern.value, error.kind());
            let expected =
                "a glob on station names: * any letters, ? one letter, [12] one of these, {HF,LF}* either";
            section.complain(pattern.line, "match", Problem::value(found, expected));
            None
        }
    }
}

/// Complaints about beams that rules or rows of the station table name and no table defines.
pub(super) fn unknown_beams(
    run_file: &std::path::Path,
    beams: &[String],
    rules: &[StationRule],
    table: Option<&StationTable>,
) -> Vec<Complaint> {
    let unknown = |name: &str| !beams.iter().any(|known| known == name);
    let problem = |name: &str| Problem::unknown_name("beam", name, beams.to_vec());
    let of_rules = rules.iter().filter_map(|rule| rule.beam.as_ref()).filter(|beam| unknown(&beam.value));
    let mut complaints: Vec<Complaint> =
        of_rules.map(|beam| Complaint::new(run_file, beam.line, "stations.beam", problem(&beam.value))).collect();
    for (table, row) in table.iter().flat_map(|table| table.rows.iter().map(move |row| (table, row))) {
        if let Some(beam) = row.beam.as_deref().filter(|beam| unknown(beam)) {
            complaints.push(Complaint::new(&table.path, row.line, "beam", problem(beam)));
        }
    }
    complaints
}
