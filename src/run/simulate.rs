//! `[simulate]`: an invented observation, for tests, demonstrations and planning.

use super::calendar::mjd_of_day;
use super::document::{At, Section, count, list, number, pair, text, whole};
use super::image::{DIRECTION, direction, response_radius};
use super::tables::read_layout;
use super::{LayoutStation, Problem, RunError, RunFile};
use crate::sky::Direction;
use serde::Serialize;
use std::path::PathBuf;
use toml::de::DeValue;
use toml::value::{Datetime, Offset};

/// `[simulate]`.
#[derive(Debug, Clone, Serialize)]
pub struct Simulate {
    /// Line of the table.
    #[serde(skip)]
    pub line: usize,
    /// The visibility file to write, resolved relative to the run file.
    pub output: At<PathBuf>,
    /// Component list (CSV).
    pub sky: At<PathBuf>,
    /// Station layout (CSV), read with [`Simulate::layout`].
    pub stations: At<PathBuf>,
    /// Name of the array.
    pub array: String,
    /// Longitude (East positive) and geodetic latitude of the site, degrees, WGS84.
    pub site_deg: [f64; 2],
    /// Height of the site above the ellipsoid, metres.
    pub site_height_m: f64,
    /// What is observed; each is a source of the file.
    pub pointings: Vec<SimulatedPointing>,
    /// Number of integrations.
    pub times: usize,
    /// From one integration to the next, seconds.
    pub interval_s: f64,
    /// Length of one integration, seconds.
    pub integration_s: f64,
    /// Centre of the first channel, Hz.
    pub first_hz: f64,
    /// From one channel to the next, and their width, Hz.
    pub channel_hz: f64,
    /// Number of channels.
    pub channels: usize,
    /// Parallel hands of one kind, or Stokes I: `["XX", "YY"]`, `["RR", "LL"]`, one of them, or `["I"]`.
    pub hands: Vec<String>,
    /// Standard deviation of the real part of a visibility, and of its imaginary part, Jy.
    pub noise_jy: f64,
    /// Seed of noise and flags.
    pub seed: u64,
    /// Share of the rows flagged.
    pub flagged_fraction: f64,
    /// Rows are left out while either station would look below this elevation, degrees.
    pub lowest_elevation_deg: f64,
    /// How the visibilities are predicted.
    pub method: At<Method>,
}

/// One entry `[[simulate.pointing]]`.
#[derive(Debug, Clone, Serialize)]
pub struct SimulatedPointing {
    /// Line of the entry.
    #[serde(skip)]
    pub line: usize,
    /// Name of the source.
    pub name: String,
    /// Aim and phase centre.
    pub aim: Direction,
    /// Middle of the first integration, Modified Julian Date (UTC): its own, or that of `[simulate]`.
    pub start_mjd_utc: f64,
    /// Angle from the aim, degrees, beyond which every response is 0; overrides that of `[image]`.
    pub response_radius_deg: Option<At<f64>>,
}

/// How visibilities are predicted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Method {
    /// Direct sums.
    Exact,
    /// The gridded response, to the tolerance of `[image]`.
    Gridded,
}

impl Simulate {
    /// Reads the station layout.
    ///
    /// # Errors
    /// Naming file, line and column of everything wrong with it.
    pub fn layout(&self) -> Result<Vec<LayoutStation>, RunError> {
        read_layout(&self.stations.value).map_err(RunError::Complaints)
    }
}

impl RunFile {
    /// The response cut-off of a simulated pointing, degrees: its own, or that of `[image]`.
    pub fn simulated_response_radius_deg(&self, pointing: usize) -> Option<f64> {
        let own =
            self.simulate.as_ref().and_then(|s| s.pointings.get(pointing)).and_then(|p| p.response_radius_deg);
        own.or(self.image.as_ref().and_then(|image| image.response_radius_deg)).map(|radius| radius.value)
    }
}

const MOMENT: &str = "a time in UTC, for example 2026-03-01T20:15:00Z, of the middle of the first integration";
const HANDS: &str = "[\"XX\", \"YY\"], [\"RR\", \"LL\"], one of these four alone, or [\"I\"]";
const WHOLE: &str = "a whole number, at least 1";
const MANY: usize = 10_000_000;

pub(super) fn read_simulate(section: &Section, has_image: bool) -> Option<Simulate> {
    let output = section.required("output", "the name of the visibility file to write", text);
    let sky = section.required("sky", "the name of a component list (CSV)", text);
    let stations = section.required("stations", "the name of a station layout (CSV)", text);
    let array = section.optional("array", "the name of the array, at most 16 letters", |v| {
        text(v).filter(|name| name.is_ascii() && name.len() <= 16)
    });
    let site = section.required(
        "site_deg",
        "[longitude, latitude] in degrees: -180 to 360 (East positive) and -90 to 90",
        |value| pair(number(|_| true))(value).filter(|[x, y]| (-180.0..=360.0).contains(x) && y.abs() <= 90.0),
    );
    let height = section.or("site_height_m", 0.0, "a height in metres, -1000 to 10000", |v| {
        number(|m| (-1000.0..=10000.0).contains(&m))(v)
    });
    let start = section.optional("start_utc", MOMENT, moment);
    let times = section.required("times", WHOLE, count(1, MANY));
    let seconds = "a length of time in seconds, greater than 0";
    let interval = section.required("interval_s", seconds, number(|s| s > 0.0));
    let integration = section.optional("integration_s", seconds, number(|s| s > 0.0));
    let first = section.required("first_hz", "the centre of the first channel in Hz, greater than 0", |v| {
        number(|hz| hz > 0.0)(v)
    });
    let width = section.required("channel_hz", "a channel's width in Hz, greater than 0", number(|hz| hz > 0.0));
    let channels = section.required("channels", WHOLE, count(1, MANY));
    let hands = section.required("hands", HANDS, hands);
    let noise = section.or("noise_jy", 0.0, "a standard deviation in Jy, at least 0", number(|jy| jy >= 0.0));
    let seed = section
        .optional("seed", "a whole number, at least 0", |value| whole(value).and_then(|n| u64::try_from(n).ok()));
    let flagged = section.or(
        "flagged_fraction",
        0.0,
        "a fraction, at least 0 and less than 1",
        number(|f| (0.0..1.0).contains(&f)),
    );
    let lowest_elevation = section.or(
        "lowest_elevation_deg",
        0.0,
        "an elevation in degrees, -90 to less than 90",
        number(|deg| (-90.0..90.0).contains(&deg)),
    );
    let method = section.or("method", Method::Exact, "\"exact\" or \"gridded\"", |value| match value {
        DeValue::String(word) if word == "exact" => Some(Method::Exact),
        DeValue::String(word) if word == "gridded" => Some(Method::Gridded),
        _ => None,
    });
    if method.value == Method::Gridded && !has_image {
        let problem = Problem::Conflict {
            found: "\"gridded\" without a table [image]".to_owned(),
            expected: "[image], whose tolerance the gridded prediction keeps, or method = \"exact\"".to_owned(),
        };
        section.complain(method.line, "method", problem);
    }
    let pointings = read_pointings(section, start);
    section.finish();
    if let (Some(integration), Some(interval)) = (integration, interval)
        && integration.value > interval.value
    {
        let problem = Problem::value(
            format!("integrations of {} s", integration.value),
            format!("no more than interval_s, which is {}", interval.value),
        );
        section.complain(integration.line, "integration_s", problem);
    }
    let resolved = |at: At<String>| At { value: section.document.resolve(&at.value), line: at.line };
    Some(Simulate {
        line: section.line,
        output: resolved(output?),
        sky: resolved(sky?),
        stations: resolved(stations?),
        array: array.map_or_else(|| "INVENTED".to_owned(), |at| at.value),
        site_deg: site?.value,
        site_height_m: height.value,
        pointings,
        times: times?.value,
        interval_s: interval?.value,
        integration_s: integration.or(interval)?.value,
        first_hz: first?.value,
        channel_hz: width?.value,
        channels: channels?.value,
        hands: hands?.value,
        noise_jy: noise.value,
        seed: seed.map_or(0, |at| at.value),
        flagged_fraction: flagged.value,
        lowest_elevation_deg: lowest_elevation.value,
        method,
    })
}

fn read_pointings(section: &Section, start: Option<At<f64>>) -> Vec<SimulatedPointing> {
    let mut pointings: Vec<SimulatedPointing> = Vec::new();
    let entries = section.tables("pointing");
    if entries.is_empty() && !section.has("pointing") {
        let expected = "at least one entry [[simulate.pointing]] with name and aim_deg".to_owned();
        section.complain(section.line, "pointing", Problem::Missing { expected });
    }
    for entry in entries {
        let name = entry.required("name", "the name of the pointing, at most 16 letters", |value| {
            text(value).filter(|name| name.is_ascii() && name.len() <= 16)
        });
        let aim = entry.required("aim_deg", DIRECTION, direction);
        let own = entry.optional("start_utc", MOMENT, moment);
        let response_radius_deg = response_radius(&entry);
        entry.finish();
        if own.is_none() && start.is_none() && !entry.has("start_utc") && !section.has("start_utc") {
            let expected = format!("here or in [simulate] {MOMENT}");
            entry.complain(entry.line, "start_utc", Problem::Missing { expected });
        }
        let (Some(name), Some(aim), Some(start)) = (name, aim, own.or(start)) else { continue };
        if pointings.iter().any(|other| other.name == name.value) {
            let problem = Problem::value(format!("{:?} a second time", name.value), "a name of its own");
            entry.complain(name.line, "name", problem);
        }
        let (aim, start_mjd_utc) = (aim.value, start.value);
        pointings.push(SimulatedPointing {
            line: entry.line,
            name: name.value,
            aim,
            start_mjd_utc,
            response_radius_deg,
        });
    }
    pointings
}

/// A TOML time, or a string that reads as one, as Modified Julian Date; without an offset it is UTC.
fn moment(value: &DeValue) -> Option<f64> {
    let moment = match value {
        DeValue::Datetime(moment) => *moment,
        DeValue::String(text) => text.trim().parse::<Datetime>().ok()?,
        _ => return None,
    };
    let (date, time) = (moment.date?, moment.time?);
    let offset_minutes = match moment.offset {
        None | Some(Offset::Z) => 0.0,
        Some(Offset::Custom { minutes }) => f64::from(minutes),
    };
    let seconds = f64::from(time.hour) * 3600.0
        + (f64::from(time.minute) - offset_minutes) * 60.0
        + f64::from(time.second.unwrap_or(0))
        + f64::from(time.nanosecond.unwrap_or(0)) * 1e-9;
    let year = i32::from(date.year);
    (1900..=2200)
        .contains(&year)
        .then(|| mjd_of_day(year, i32::from(date.month), i32::from(date.day)) + seconds / 86_400.0)
}

fn hands(value: &DeValue) -> Option<Vec<String>> {
    let names = list(text)(value)?;
    let allowed: [&[&str]; 9] =
        [&["XX", "YY"], &["YY", "XX"], &["RR", "LL"], &["LL", "RR"], &["XX"], &["YY"], &["RR"], &["LL"], &["I"]];
    allowed.iter().any(|set| names.iter().eq(set.iter())).then_some(names)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Outside values: astropy 8.0.2, Time(…, scale='utc').mjd.
    #[test]
    fn times_become_modified_julian_dates() {
        for (written, mjd) in [
            ("2000-01-01T12:00:00Z", 51544.5),
            ("2026-03-01T20:15:00Z", 61100.84375),
            ("2024-02-29T23:59:59.5", 60369.999994212965),
            ("1999-12-31T23:00:00-01:00", 51544.0),
            ("1995-10-10T00:00:00Z", 50000.0),
        ] {
            let got = moment(&DeValue::String(written.into())).unwrap();
            assert!((got - mjd).abs() < 1e-10, "{written}: {got} against {mjd}");
        }
        for wrong in ["2026-03-01", "20:15:00", "yesterday", "2026-13-01T00:00:00Z", "2026-02-30T00:00:00Z"] {
            assert_eq!(moment(&DeValue::String(wrong.into())), None, "{wrong}");
        }
    }
}
