//! Days of the Gregorian calendar and Modified Julian Dates, both ways (Fliegel & van Flandern 1968, CACM 11, 657).

/// Modified Julian Date at 0 h of a day.
pub fn mjd_of_day(year: i32, month: i32, day: i32) -> f64 {
    let a = (month - 14) / 12;
    let julian = (1461 * (year + 4800 + a)) / 4 + (367 * (month - 2 - 12 * a)) / 12
        - (3 * ((year + 4900 + a) / 100)) / 4
        + day
        - 32_075;
    f64::from(julian) - 2_400_001.0
}

/// A Modified Julian Date (UTC) as ISO 8601 to the nearest second, `2026-03-01T20:15:00Z`; `None` when it is not a date
/// of the years 1858 to 9999. Leap seconds do not show: a day has 86 400 seconds here.
pub fn iso_utc(mjd: f64) -> Option<String> {
    let (date, _) = date_and_time(mjd, 1)?;
    Some(format!("{date}Z"))
}

/// As [`iso_utc`] to the nearest millisecond and as FITS writes it, without the Z (FITS Standard 4.0, §9.1.1).
pub fn fits_date(mjd: f64) -> Option<String> {
    let (date, milliseconds) = date_and_time(mjd, 1000)?;
    Some(format!("{date}.{milliseconds:03}"))
}

/// Date and time to the second, and what remains in parts of a second, `parts` to the second.
fn date_and_time(mjd: f64, parts: i64) -> Option<(String, i64)> {
    if !(0.0..=2_973_483.0).contains(&mjd) {
        return None;
    }
    let total = (mjd * 86_400.0 * parts as f64).round() as i64;
    let (day_number, within) = (total.div_euclid(86_400 * parts), total.rem_euclid(86_400 * parts));
    let (second, part) = (within / parts, within % parts);
    let mut l = day_number + 2_400_001 + 68_569;
    let n = 4 * l / 146_097;
    l -= (146_097 * n + 3) / 4;
    let i = 4000 * (l + 1) / 1_461_001;
    l = l - 1461 * i / 4 + 31;
    let j = 80 * l / 2447;
    let day = l - 2447 * j / 80;
    l = j / 11;
    let (month, year) = (j + 2 - 12 * l, 100 * (n - 49) + i + l);
    let (hour, minute, second) = (second / 3600, second / 60 % 60, second % 60);
    Some((format!("{year:04}-{month:02}-{day:02}T{hour:02}:{minute:02}:{second:02}"), part))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Outside values: astropy 8.0.2, Time(…, scale='utc').mjd.
    #[test]
    fn known_days() {
        for (date, mjd) in
            [((2000, 1, 1), 51544.0), ((2026, 3, 1), 61100.0), ((2024, 2, 29), 60369.0), ((1995, 10, 10), 50000.0)]
        {
            assert_eq!(mjd_of_day(date.0, date.1, date.2), mjd);
            let written = format!("{:04}-{:02}-{:02}T20:15:00Z", date.0, date.1, date.2);
            assert_eq!(iso_utc(mjd + 0.84375).as_deref(), Some(written.as_str()));
        }
    }

    #[test]
    fn every_day_of_four_centuries_returns() {
        let first = mjd_of_day(1900, 1, 1) as i64;
        for mjd in first..first + 146_097 {
            // before 17 November 1858 the date is negative and not told
            let Some(written) = iso_utc(mjd as f64) else { panic!("{mjd}") };
            let part = |range: std::ops::Range<usize>| written[range].parse::<i32>().unwrap();
            assert_eq!(mjd_of_day(part(0..4), part(5..7), part(8..10)), mjd as f64, "{written}");
        }
    }

    #[test]
    fn what_is_no_date_is_not_told() {
        for mjd in [f64::NAN, -1.0, f64::INFINITY, 1e9] {
            assert_eq!(iso_utc(mjd), None);
        }
        // rounding up to midnight turns the day
        assert_eq!(iso_utc(51_543.999_999).as_deref(), Some("2000-01-01T00:00:00Z"));
    }
}
