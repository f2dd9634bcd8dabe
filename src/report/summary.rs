//! The closing summary: what a person reads in ten seconds, and the same as one JSON object.

use super::combined::fields_line;
use super::deconvolution::deconvolution_line;
use super::measured::measured_line;
use super::record::{Accuracy, BeamFigures, RunRecord, WeightingFigures};

/// The closing summary in plain text, without a newline at the end.
pub fn summary_text(record: &RunRecord, folder: &str) -> String {
    let mut text = String::new();
    for warning in &record.warnings {
        push(&mut text, &format!("WARNING: {warning}"));
    }
    if let Some(line) = broken_promise(record) {
        push(&mut text, &format!("WARNING: {line}"));
    }
    push(&mut text, &made(record));
    if let Some(accuracy) = &record.accuracy {
        push(&mut text, &format!("accuracy   {}", accuracy_line(accuracy)));
    }
    if let Some(combined) = &record.combined {
        push(&mut text, &format!("fields     {}", fields_line(combined)));
        push(&mut text, &format!("error      {}", combined.kept()));
    }
    if let Some(noise) = &record.noise {
        push(&mut text, &format!("noise      {} at its lowest, thermal only", flux(noise.lowest_jy_per_beam)));
    }
    if let Some(figures) = &record.deconvolution {
        push(&mut text, &format!("model      {}", deconvolution_line(figures)));
    }
    if let Some(beam) = &record.beam {
        push(
            &mut text,
            &format!(
                "beam       {} at position angle {}°",
                sizes(beam),
                format!("{:.1}", beam.position_angle_deg).replace('-', "−")
            ),
        );
    }
    if let Some(weighting) = &record.weighting {
        push(&mut text, &format!("weights    {}", weighting_line(weighting)));
    }
    if let Some(measured) = &record.measured {
        push(&mut text, &format!("sources    {}", measured_line(measured)));
    }
    let seconds: f64 = record.timings.iter().map(|t| t.seconds).sum();
    if seconds > 0.0 {
        push(&mut text, &format!("time       {} on {} threads", duration(seconds), record.threads));
    }
    if let Some(first) = look_first(record) {
        push(&mut text, &format!("look first {}", join(folder, first)));
    }
    text
}

/// Scheme, price and side lobes in a line.
pub(super) fn weighting_line(weighting: &WeightingFigures) -> String {
    let mut line = weighting.scheme.clone();
    if weighting.relative_noise > 1.0 {
        line += &format!("; noise {:.2} times that of natural weights", weighting.relative_noise);
        if let Some(there) = weighting.relative_noise_at_centre {
            line += &format!(", {there:.2} at the peak of the point spread function");
        }
    }
    if let (Some(high), Some(low)) = (weighting.highest_side_lobe, weighting.lowest_side_lobe) {
        line += "; side lobes beyond 1.2 beams ";
        line += &format!("up to {:.1} % and down to {:.1} %", 100.0 * high, 100.0 * low).replace('-', "−");
    }
    line
}

/// The summary as a JSON object for `--json`: the record with the folder and the place to look first.
pub fn summary_json(record: &RunRecord, folder: &str) -> serde_json::Value {
    let mut object = match serde_json::to_value(record) {
        Ok(serde_json::Value::Object(map)) => map,
        _ => serde_json::Map::new(),
    };
    object.insert("folder".to_string(), folder.into());
    object.insert("look_first".to_string(), look_first(record).map(|p| join(folder, p)).into());
    object.insert("summary".to_string(), summary_sentence(record).into());
    serde_json::Value::Object(object)
}

/// One sentence without the title: what was made of what. Empty when nothing was.
pub fn summary_sentence(record: &RunRecord) -> String {
    match what(record) {
        text if text.is_empty() => text,
        text => format!("{text}."),
    }
}

/// The warning for an accuracy outside the promise, or `None`.
pub(super) fn broken_promise(record: &RunRecord) -> Option<String> {
    let accuracy = record.accuracy.as_ref().filter(|a| !a.kept)?;
    Some(format!(
        "the promised accuracy was not kept: promised {}, measured {}; do not publish from these images, and please \
         report it with run.json",
        scientific(accuracy.promised),
        scientific(accuracy.worst())
    ))
}

/// Promised beside measured, in one line.
pub(super) fn accuracy_line(accuracy: &Accuracy) -> String {
    format!(
        "promised {}, measured {} (N) and {} (W): {}",
        scientific(accuracy.promised),
        scientific(accuracy.measured_numerator),
        scientific(accuracy.measured_normaliser),
        if accuracy.kept { "kept" } else { "NOT KEPT" }
    )
}

fn made(record: &RunRecord) -> String {
    let title = if record.title.is_empty() { "untitled run" } else { &record.title };
    match what(record) {
        text if text.is_empty() => title.to_string(),
        text => format!("{title}: {text}"),
    }
}

fn what(record: &RunRecord) -> String {
    let used: u64 = record.pointings.iter().map(|p| p.visibilities_used).sum();
    let flagged: u64 = record.pointings.iter().map(|p| p.visibilities_flagged).sum();
    let excluded: u64 = record.pointings.iter().map(|p| p.visibilities_excluded).sum();
    let mut parts = Vec::new();
    if let Some(image) = &record.image {
        parts.push(format!("{} × {} pixels of {}", image.width_px, image.height_px, arcsec(image.pixel_arcsec)));
    }
    if !record.pointings.is_empty() {
        let pointings = record.pointings.len();
        let plural = if pointings == 1 { "" } else { "s" };
        let left_out = match (flagged, excluded) {
            (0, 0) => String::new(),
            (_, 0) => format!(" ({} more were flagged)", thousands(flagged)),
            (0, _) => format!(" ({} more were excluded by [weighting])", thousands(excluded)),
            _ => format!(
                " ({} more were flagged, {} excluded by [weighting])",
                thousands(flagged),
                thousands(excluded)
            ),
        };
        parts.push(format!("from {pointings} pointing{plural}, {} visibilities{left_out}", thousands(used)));
    }
    parts.join(" ")
}

fn look_first(record: &RunRecord) -> Option<&str> {
    let named = |name: &str| record.products.iter().map(|p| p.path.as_str()).find(|p| *p == name);
    ["report.html", "dirty.png", "dirty.fits", "sky.png"]
        .into_iter()
        .find_map(named)
        .or(record.products.first().map(|p| p.path.as_str()))
}

fn join(folder: &str, file: &str) -> String {
    std::path::Path::new(folder).join(file).display().to_string()
}

fn push(text: &mut String, line: &str) {
    if !text.is_empty() {
        text.push('\n');
    }
    text.push_str(line);
}

/// A number such as `3.2e-5`; `not a number` when it is none.
pub(super) fn scientific(value: f64) -> String {
    if !value.is_finite() {
        return "not a number".to_string();
    }
    let text = format!("{value:.1e}");
    text.replace(".0e", "e")
}

/// A flux density per beam with the prefix that keeps it readable.
pub(super) fn flux(jy: f64) -> String {
    let (value, unit) = match jy.abs() {
        v if v >= 1.0 => (jy, "Jy/beam"),
        v if v >= 1e-3 => (jy * 1e3, "mJy/beam"),
        v if v >= 1e-6 => (jy * 1e6, "µJy/beam"),
        _ => (jy * 1e9, "nJy/beam"),
    };
    format!("{} {unit}", digits(value))
}

/// An angle in the unit that keeps it readable.
pub(super) fn arcsec(angle: f64) -> String {
    super::picture::readable_angle((angle / 3600.0).to_radians())
}

/// The sizes of a beam in one unit.
pub(super) fn sizes(beam: &BeamFigures) -> String {
    let radians = |arcsec: f64| (arcsec / 3600.0).to_radians();
    super::picture::readable_sizes(radians(beam.major_arcsec), radians(beam.minor_arcsec))
}

/// Three significant digits.
pub(super) fn digits(value: f64) -> String {
    if value == 0.0 || !value.is_finite() {
        return format!("{value}");
    }
    let decimals = (2 - value.abs().log10().floor() as i32).max(0) as usize;
    format!("{value:.decimals$}")
}

/// A whole number in groups of three.
pub(super) fn thousands(count: u64) -> String {
    let plain = count.to_string();
    let mut text = String::new();
    for (i, digit) in plain.chars().enumerate() {
        if i > 0 && (plain.len() - i).is_multiple_of(3) {
            text.push('\u{202f}');
        }
        text.push(digit);
    }
    text
}

/// A duration in seconds, minutes or hours.
pub(super) fn duration(seconds: f64) -> String {
    match seconds {
        s if s < 0.0995 => format!("{:.0} ms", s * 1e3),
        s if s < 100.0 => format!("{} s", digits(s)),
        s if s < 5940.0 => format!("{:.1} min", s / 60.0),
        s => format!("{:.1} h", s / 3600.0),
    }
}

/// A size in bytes with a decimal prefix.
pub(super) fn bytes(count: u64) -> String {
    let value = count as f64;
    match value {
        v if v < 1e3 => format!("{count} bytes"),
        v if v < 1e6 => format!("{} kB", digits(v / 1e3)),
        v if v < 1e9 => format!("{} MB", digits(v / 1e6)),
        v => format!("{} GB", digits(v / 1e9)),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_for_people() {
        assert_eq!(scientific(3.24e-5), "3.2e-5");
        assert_eq!(scientific(1e-4), "1e-4");
        assert_eq!(scientific(f64::NAN), "not a number");
        assert_eq!(flux(0.000_123_4), "123 µJy/beam");
        assert_eq!(flux(0.0456), "45.6 mJy/beam");
        assert_eq!(thousands(1_234_567), "1\u{202f}234\u{202f}567");
        assert_eq!(thousands(12), "12");
        assert_eq!(duration(0.01), "10 ms");
        assert_eq!(duration(21.34), "21.3 s");
        assert_eq!(duration(600.0), "10.0 min");
        assert_eq!(bytes(4_200_000), "4.20 MB");
    }
}
