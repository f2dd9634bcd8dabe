//! `evensky describe FILE…`: what visibility files hold, for a person; with `--json` the same for a program.

use super::{CliError, Common};
use crate::observation::{self, SuggestedImage, Summary, suggest_image};
use clap::Args;
use serde::Serialize;
use std::fmt::Write;
use std::path::PathBuf;

/// Arguments of `describe`.
#[derive(Debug, Args)]
pub struct Arguments {
    /// Visibility files (FITS random groups or FITS-IDI)
    #[arg(value_name = "FILE", required = true)]
    pub files: Vec<PathBuf>,
}

/// What `--json` prints.
#[derive(Debug, Serialize)]
struct Description {
    pointings: Vec<Summary>,
    suggested_image: Option<SuggestedImage>,
}

/// Describes the files.
///
/// # Errors
/// When one of them cannot be read.
pub fn run(arguments: &Arguments, common: &Common) -> Result<String, CliError> {
    if common.out.is_some() {
        return Err(CliError::Usage("describe writes no files: leave out --out, or redirect its output"));
    }
    let progress = common.progress();
    let stage = progress.stage("reading", "files", Some(arguments.files.len() as u64));
    let mut pointings = Vec::new();
    for file in &arguments.files {
        for mut source in observation::open(file, &observation::Selection::All)? {
            pointings.push(Summary::gather(source.as_mut())?);
        }
        stage.add(1);
    }
    stage.finish();
    let suggested_image = suggest_image(&pointings);
    let description = Description { pointings, suggested_image };
    common.conclusion(&description, || prose(&description))
}

fn prose(description: &Description) -> String {
    let mut text = String::new();
    let mut told: Vec<&Summary> = Vec::new();
    for pointing in &description.pointings {
        // pointings of one array are told its stations once
        let as_before = told.iter().find(|other| same_array(other, pointing)).map(|other| other.name.as_str());
        // writing to a string cannot fail
        let _ = pointing_prose(&mut text, pointing, as_before);
        told.push(pointing);
    }
    let _ = image_prose(&mut text, description);
    text
}

fn same_array(one: &Summary, other: &Summary) -> bool {
    let places = |summary: &Summary| {
        let place = |s: &observation::StationSummary| (s.name.clone(), s.east_north_up_m, s.mount, s.diameter_m);
        summary.stations.iter().map(place).collect::<Vec<_>>()
    };
    places(one) == places(other)
}

fn pointing_prose(out: &mut String, p: &Summary, stations_as: Option<&str>) -> std::fmt::Result {
    writeln!(out, "{}: {} ({})", p.origin, p.name, p.array)?;
    line(out, "phase centre", &position(p.phase_centre_deg))?;
    if p.aim_deg != p.phase_centre_deg {
        line(out, "aim", &position(p.aim_deg))?;
    }
    line(out, "time", &time_span(p))?;
    line(out, "channels", &channels(p))?;
    line(out, "hands", &p.hands.join(" "))?;
    line(out, "visibilities", &visibilities(p))?;
    if let Some([shortest, longest]) = p.baseline_m {
        line(out, "baselines", &format!("{shortest:.1} to {longest:.1} m"))?;
        let uv = format!("to {:.0} wavelengths, finest fringe {}", p.longest_uv_wavelengths, angle(fringe(p)));
        line(out, "u, v", &uv)?;
        line(out, "largest w", &format!("{:.0} wavelengths", p.largest_w_wavelengths))?;
    }
    if let (Some([major, minor]), Some(along)) = (p.beam_arcsec, p.beam_angle_deg) {
        let beam = format!("{} × {} at {along:.0}° (natural weights)", angle(major), angle(minor));
        line(out, "resolution", &beam)?;
    }
    match stations_as {
        Some(name) => line(out, "stations", &format!("{}, as for {name}", p.stations.len()))?,
        None => stations(out, p)?,
    }
    for note in &p.notes {
        line(out, "note", note)?;
    }
    writeln!(out)
}

fn stations(out: &mut String, p: &Summary) -> std::fmt::Result {
    let site = match p.site_deg {
        Some([longitude, latitude]) => format!(", about longitude {longitude:.5}°, latitude {latitude:.5}°"),
        None => String::new(),
    };
    line(out, "stations", &format!("{}{site}", p.stations.len()))?;
    let width = p.stations.iter().map(|s| s.name.chars().count()).max().unwrap_or(0).max(4);
    writeln!(
        out,
        "    {:<width$} {:>11} {:>11} {:>9} {:>11} {:>11} {:>9} {:>7}  {:<11} {:>12}",
        "name", "longitude°", "latitude°", "height m", "east m", "north m", "up m", "dish m", "mount", "usable"
    )?;
    for s in &p.stations {
        let [east, north, up] = s.east_north_up_m;
        let dish = s.diameter_m.map_or_else(|| "?".to_owned(), |metres| format!("{metres:.1}"));
        writeln!(
            out,
            "    {:<width$} {:>11.5} {:>11.5} {:>9.1} {east:>11.2} {north:>11.2} {up:>9.2} {dish:>7}  {:<11} {:>12}",
            s.name, s.longitude_deg, s.latitude_deg, s.height_m, s.mount, s.usable_visibilities
        )?;
    }
    Ok(())
}

fn image_prose(out: &mut String, description: &Description) -> std::fmt::Result {
    let Some(image) = &description.suggested_image else {
        return writeln!(out, "No usable visibility: no image can be made of this.");
    };
    let all = if description.pointings.len() > 1 { " for all of these" } else { "" };
    writeln!(out, "An image{all} to begin with (a quarter of the finest fringe a pixel, the main lobe of the")?;
    writeln!(out, "smallest dish at the lowest frequency about every aim):")?;
    writeln!(out)?;
    writeln!(out, "    [image]")?;
    writeln!(out, "    centre_deg = [{:.6}, {:.6}]", image.centre_deg[0], image.centre_deg[1])?;
    match image.size_px {
        Some([width, height]) => writeln!(out, "    size_px = [{width}, {height}]")?,
        None => {
            writeln!(out, "    # size_px: not known here, some file lacks dish diameters or the field is too wide")?
        }
    }
    writeln!(out, "    pixel_arcsec = {}", image.pixel_arcsec)
}

fn line(out: &mut String, name: &str, value: &str) -> std::fmt::Result {
    writeln!(out, "  {name:<13} {value}")
}

fn time_span(p: &Summary) -> String {
    let (Some(first), Some(last), Some([start, end])) = (&p.first_utc, &p.last_utc, p.mjd_utc) else {
        return "no rows, or no date of our time".to_owned();
    };
    let mut text = format!("{first} to {last} ({}), {} times", duration((end - start) * 86_400.0), p.times);
    if let Some(interval) = p.interval_s {
        let _ = write!(text, ", mostly {interval} s apart");
    }
    text
}

fn channels(p: &Summary) -> String {
    let (Some([low, high]), Some([narrow, wide])) = (p.frequency_hz, p.channel_width_hz) else {
        return "none".to_owned();
    };
    let width = if narrow == wide { hertz(wide) } else { format!("{} to {}", hertz(narrow), hertz(wide)) };
    format!("{}, {} to {}, each {width} wide", p.channels, hertz(low), hertz(high))
}

fn visibilities(p: &Summary) -> String {
    let all = p.usable_visibilities + p.flagged_visibilities;
    let share = if all == 0 { 0.0 } else { 100.0 * p.flagged_visibilities as f64 / all as f64 };
    let mut text = format!(
        "{} usable, {} flagged ({share:.1} %); {} of the usable measure Stokes I",
        p.usable_visibilities, p.flagged_visibilities, p.imaged_visibilities
    );
    if p.autocorrelation_rows > 0 {
        let _ = write!(text, "; {} rows of a station with itself besides", p.autocorrelation_rows);
    }
    text
}

/// Finest fringe, arcseconds.
fn fringe(p: &Summary) -> f64 {
    (1.0 / p.longest_uv_wavelengths).to_degrees() * 3600.0
}

fn position([ra, dec]: [f64; 2]) -> String {
    format!("right ascension {ra:.6}°, declination {dec:+.6}° ({}, {})", sexagesimal(ra / 15.0, "h"), {
        let sign = if dec < 0.0 { "-" } else { "+" };
        format!("{sign}{}", sexagesimal(dec.abs(), "°"))
    })
}

/// Hours or degrees, minutes and seconds, to a tenth of a second.
fn sexagesimal(value: f64, unit: &str) -> String {
    let tenths = (value * 36_000.0).round() as u64;
    let (whole, minutes, seconds) = (tenths / 36_000, tenths / 600 % 60, (tenths % 600) as f64 / 10.0);
    let (m, s) = if unit == "h" { ("m", "s") } else { ("'", "\"") };
    format!("{whole:02}{unit}{minutes:02}{m}{seconds:04.1}{s}")
}

fn angle(arcsec: f64) -> String {
    match arcsec {
        a if a >= 7200.0 => format!("{:.3}°", a / 3600.0),
        a if a >= 120.0 => format!("{:.2} arcmin", a / 60.0),
        a if a >= 0.1 => format!("{a:.2} arcsec"),
        a => format!("{:.3} milliarcsec", a * 1e3),
    }
}

fn hertz(hz: f64) -> String {
    match hz {
        v if v >= 1e9 => format!("{} GHz", digits(v / 1e9)),
        v if v >= 1e6 => format!("{} MHz", digits(v / 1e6)),
        v if v >= 1e3 => format!("{} kHz", digits(v / 1e3)),
        v => format!("{} Hz", digits(v)),
    }
}

/// Up to six decimals, without trailing zeros.
fn digits(value: f64) -> String {
    let text = format!("{value:.6}");
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}

fn duration(seconds: f64) -> String {
    match seconds {
        s if s >= 7200.0 => format!("{:.2} h", s / 3600.0),
        s if s >= 120.0 => format!("{:.1} min", s / 60.0),
        s => format!("{s:.1} s"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn quantities_for_people() {
        assert_eq!(
            position([152.678, -41.5]),
            "right ascension 152.678000°, declination -41.500000° (10h10m42.7s, -41°30'00.0\")"
        );
        assert_eq!(sexagesimal(0.999_999_99, "h"), "01h00m00.0s");
        assert_eq!(hertz(1.36e9), "1.36 GHz");
        assert_eq!(hertz(62_500.0), "62.5 kHz");
        assert_eq!(angle(7.5), "7.50 arcsec");
        assert_eq!(angle(0.004), "4.000 milliarcsec");
        assert_eq!(duration(86_400.0), "24.00 h");
    }
}
