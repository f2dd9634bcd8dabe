//! From the run file to the beam of every station of a pointing.
//!
//! The run file is left of the observation in the flow of data and knows no stations, so the two meet here: what was
//! written ([`crate::run`]) with who observed ([`crate::observation`]).

use super::{Airy, Gaussian, Pattern, PatternError, StationBeam, StationBeams, Unity};
use crate::observation::Observation;
use crate::run::{Beam, Problem, RunError, RunFile, Shape};
use std::collections::BTreeMap;
use std::sync::Arc;

/// The patterns of all tables `[beams.NAME]`, by name.
///
/// # Errors
/// When a parameter is outside its range, with its line.
pub fn patterns(run: &RunFile) -> Result<BTreeMap<String, Arc<dyn Pattern>>, RunError> {
    run.beams
        .iter()
        .map(|(name, beam)| {
            let complain = |error: PatternError| {
                let line = beam.key_lines.get(error.parameter).copied().unwrap_or(beam.line);
                let problem = Problem::value(error.value.to_string(), error.expected);
                run.complaint(line, &format!("beams.{name}.{}", error.parameter), problem)
            };
            Ok((name.clone(), pattern(beam).map_err(complain)?))
        })
        .collect()
}

fn pattern(beam: &Beam) -> Result<Arc<dyn Pattern>, PatternError> {
    Ok(match &beam.shape {
        Shape::Gaussian { half_power_deg, at_hz, axis_ratio } => {
            let widths: Vec<(f64, f64)> =
                at_hz.iter().zip(half_power_deg).map(|(&hz, deg)| (hz, deg.to_radians())).collect();
            Arc::new(Gaussian::measured(&widths, *axis_ratio)?)
        }
        &Shape::Airy { diameter_m, blockage_m } => Arc::new(Airy::new(diameter_m, blockage_m)?),
        Shape::Unity => Arc::new(Unity),
    })
}

/// The beams of every station of `observation`, about its aim, as the run file assigns them.
///
/// `response_radius_deg` is the cut-off of this pointing ([`RunFile::response_radius_deg`] or
/// [`RunFile::simulated_response_radius_deg`]). An `aim_deg` of the run file is to be set in `observation` before.
///
/// # Errors
/// When a beam cannot be made, or naming all stations that were given none.
pub fn station_beams(
    run: &RunFile,
    observation: &Observation,
    response_radius_deg: Option<f64>,
) -> Result<StationBeams, RunError> {
    let patterns = patterns(run)?;
    let mut without = Vec::new();
    let mut beams = Vec::with_capacity(observation.stations.len());
    for station in &observation.stations {
        let settings = run.station(&station.name);
        // names are checked when the run file is read: one that no table defines cannot get here
        let found = settings.beam.and_then(|name| patterns.get(&name).map(|pattern| (name, Arc::clone(pattern))));
        match found {
            Some((beam_name, pattern)) => {
                let offset = settings.pointing_arcmin.map(|arcmin| (arcmin / 60.0).to_radians());
                beams.push(StationBeam { pattern, offset, beam_name });
            }
            None => without.push(station.name.clone()),
        }
    }
    if !without.is_empty() {
        let line = run.station_rules.first().map_or(1, |rule| rule.line);
        let origin = observation.origin.clone();
        let problem = Problem::NoBeam { stations: without, origin, beams: run.beams.keys().cloned().collect() };
        return Err(run.complaint(line, "stations", problem).into());
    }
    Ok(StationBeams::new(observation, beams, response_radius_deg.map(|deg| deg.to_radians().sin())))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::observation::{Mount, Station};
    use crate::sky::Direction;

    const RUN: &str = r#"
[[pointing]]
visibilities = "a.fits"

[beams.large]
shape = "airy"
diameter_m = 13
[beams.small]
shape = "gaussian"
half_power_deg = [1.6, 1.3]
at_hz = [1.3e9, 1.6e9]

[[stations]]
match = "H*"
beam = "large"
[[stations]]
match = "*2"
pointing_arcmin = [3.0, -4.0]
[[stations]]
match = "H3"
beam = "small"
"#;

    fn observation(names: &[&str]) -> Observation {
        let station = |name: &&str| Station {
            name: (*name).to_owned(),
            position_m: [4.0e6, 0.0, 5.0e6],
            mount: Mount::AltAzimuth,
            diameter_m: None,
            feed_angle: 0.0,
        };
        let centre = Direction::from_deg(10.0, 20.0);
        Observation {
            origin: "a.fits".to_owned(),
            name: "A".to_owned(),
            array_name: "invented".to_owned(),
            phase_centre: centre,
            aim: centre,
            stations: names.iter().map(station).collect(),
            frequencies_hz: vec![1.4e9],
            widths_hz: vec![1e6],
            hands: vec![],
            ut1_utc_s: 0.0,
            notes: vec![],
        }
    }

    #[test]
    fn later_entries_override_earlier_ones_field_by_field() {
        let run = RunFile::parse("run.toml".as_ref(), RUN).unwrap();
        let beams = station_beams(&run, &observation(&["H1", "H2", "H3"]), Some(2.0)).unwrap();
        let names: Vec<&str> = (0..3).map(|i| beams.beam(i).beam_name.as_str()).collect();
        assert_eq!(names, ["large", "large", "small"]);
        assert_eq!(beams.beam(0).offset, [0.0, 0.0]);
        let [dx, dy] = beams.beam(1).offset.map(|offset| offset.to_degrees() * 60.0);
        assert!((dx - 3.0).abs() < 1e-12 && (dy + 4.0).abs() < 1e-12, "{dx} {dy}");
        let radius = beams.radius().unwrap();
        assert!((radius.asin().to_degrees() - 2.0).abs() < 1e-12, "{radius}");
    }

    #[test]
    fn all_stations_without_a_beam_are_named_with_a_remedy() {
        let run = RunFile::parse("run.toml".as_ref(), RUN).unwrap();
        let message = station_beams(&run, &observation(&["H1", "L1", "L2"]), None).unwrap_err().to_string();
        for part in ["run.toml:13: stations: no beam for stations L1, L2 of a.fits", "match = \"L*\"", "\"large\""]
        {
            assert!(message.contains(part), "{message}");
        }
    }

    #[test]
    fn globs_and_rows_that_concern_no_station_are_told() {
        let run = RunFile::parse("run.toml".as_ref(), RUN).unwrap();
        assert_eq!(run.unmatched(&["H1", "H2", "H3"]), Vec::<String>::new());
        let warnings = run.unmatched(&["H1", "H2"]);
        assert_eq!(warnings, ["run.toml:20: stations.match: \"H3\" matches no station; there are: H1, H2"]);
    }
}
