//! Writing visibilities as FITS-IDI tables (the registered convention).
//!
//! One file holds one or several pointings as sources of one array. u, v, w and times are written in double precision,
//! weights beside each visibility, so that our reader gets back what was written.

use super::{Block, BlockSource, Hand, Observation, ObservationError, SPEED_OF_LIGHT};
use crate::fits::{ColumnSpec, FitsError, FitsProblem, FitsWriter, Header};
use erfa::aliases::eraGmst06;
use std::fs::File;
use std::io::Write;
use std::path::Path;

/// MJD 0 as a Julian Date.
const MJD_ZERO: f64 = 2_400_000.5;
/// Rotation of the Earth in a day of UT1, degrees (IERS Conventions 2010, eq. 5.15, with the precession of a day).
const DEGREES_PER_DAY: f64 = 360.985_647_366;
/// Stations that the larger of the two BASELINE encodings has room for.
const MOST_STATIONS: usize = 2047;

/// Writes pointings of one array into one file, each a source. The file appears whole or not at all.
///
/// Hands are written in the order of their FITS codes (XX, YY, XY, YX), since the STOKES axis must be regular. A
/// channel raster that is not regular is written as several bands, down to one for each channel.
///
/// # Errors
/// When there is no pointing, they differ in stations, channels or hands, two have one name, the hands have no regular
/// codes, a source cannot be read, or writing fails.
pub fn write_idi(path: impl AsRef<Path>, pointings: &mut [&mut dyn BlockSource]) -> Result<(), ObservationError> {
    write_idi_through(path, pointings, |file| Box::new(file))
}

/// As [`write_idi`], through what `wrap` makes of the file (see [`FitsWriter::create_through`]).
///
/// # Errors
/// As [`write_idi`].
pub fn write_idi_through(
    path: impl AsRef<Path>,
    pointings: &mut [&mut dyn BlockSource],
    wrap: impl FnOnce(File) -> Box<dyn Write + Send>,
) -> Result<(), ObservationError> {
    let path = path.as_ref();
    let refuse = |what: &str, found: String, expected: &str| {
        let (what, expected) = (what.to_string(), expected.to_string());
        ObservationError::from(FitsProblem::Unwritable { what, found, expected }.at(path))
    };
    let Some(first) = pointings.first().map(|p| p.observation().clone()) else {
        return Err(refuse("visibilities", "no pointing".to_string(), "at least one"));
    };
    for (n, pointing) in pointings.iter().enumerate() {
        let other = pointing.observation();
        let same = other.stations == first.stations
            && other.frequencies_hz == first.frequencies_hz
            && other.widths_hz == first.widths_hz
            && other.hands == first.hands
            && other.ut1_utc_s == first.ut1_utc_s;
        if !same {
            return Err(refuse(
                "pointings into one file",
                format!("{} differs from {}", other.name, first.name),
                "the same stations, channels, hands and UT1 - UTC in all",
            ));
        }
        if pointings[..n].iter().any(|p| p.observation().name == other.name) {
            return Err(refuse("pointings into one file", format!("two named {}", other.name), "different names"));
        }
    }
    if !(2..=MOST_STATIONS).contains(&first.stations.len()) {
        return Err(refuse("the stations", format!("{}", first.stations.len()), "2 to 2047"));
    }
    if first.frequencies_hz.is_empty() || first.frequencies_hz.len() != first.widths_hz.len() {
        return Err(refuse(
            "the channels",
            format!("{}", first.frequencies_hz.len()),
            "1 or more, each with a width",
        ));
    }
    let raster = Raster::of(&first.frequencies_hz, &first.widths_hz);
    let hands = HandOrder::of(&first.hands).ok_or_else(|| {
        let names: Vec<_> = first.hands.iter().map(|h| h.name()).collect();
        refuse("the hands", names.join(", "), "different hands whose FITS codes are evenly spaced")
    })?;
    let (mut rows, mut start) = (0usize, f64::INFINITY);
    for pointing in pointings.iter_mut() {
        pointing.rewind()?;
        while let Some(block) = pointing.next_block()? {
            rows += block.rows();
            start = block.mjd_utc.iter().copied().fold(start, f64::min);
        }
    }
    if rows == 0 || !start.is_finite() {
        return Err(refuse("visibilities", "no rows".to_string(), "at least one, with a time"));
    }

    let day = start.floor();
    let common = Common { observation: &first, raster: &raster, hands: &hands, day, date: date_of_mjd(day) };
    let mut writer = FitsWriter::create_through(path, wrap)?;
    let mut primary = Header::new();
    primary
        .set("GROUPS", true, "FITS-IDI tables follow")
        .set("PCOUNT", 0, "")
        .set("GCOUNT", 0, "")
        .set("OBJECT", "BINARY TB", "")
        .set("TELESCOP", first.array_name.as_str(), "")
        .set("ORIGIN", "evensky", "")
        .set("DATE-OBS", common.date.as_str(), "day of the first row");
    writer.empty_primary(&primary)?;
    common.array_geometry(&mut writer)?;
    common.antenna(&mut writer)?;
    common.frequency(&mut writer)?;
    common.sources(&mut writer, &pointings.iter().map(|p| p.observation().clone()).collect::<Vec<_>>())?;
    common.uv_data(&mut writer, pointings, rows)?;
    writer.finish()?;
    Ok(())
}

/// Channels as bands of equal length with regular spacing.
struct Raster {
    bands: usize,
    per_band: usize,
}

impl Raster {
    /// The fewest bands that describe the channels exactly.
    fn of(centres: &[f64], widths: &[f64]) -> Raster {
        let total = centres.len();
        let regular = |per_band: usize| {
            // CH_WIDTH holds f32, CHAN_BW one f64 for all: exact only while all widths are alike.
            let alike = widths.iter().all(|w| (w - widths[0]).abs() <= 1e-12 * widths[0]);
            centres.chunks(per_band).zip(widths.chunks(per_band)).all(|(c, w)| {
                let step = if per_band > 1 { c[1] - c[0] } else { w[0] };
                let close = |i: usize| (c[i] - c[0] - i as f64 * step).abs() <= 1e-14 * c[i].abs();
                per_band == 1 || (alike && (step.abs() - w[0]).abs() <= 1e-12 * w[0] && (0..per_band).all(close))
            })
        };
        let bands = (1..=total).find(|bands| total % bands == 0 && regular(total / bands)).unwrap_or(total);
        Raster { bands, per_band: total / bands }
    }
}

/// Hands in the order of a regular STOKES axis.
struct HandOrder {
    /// For each place in the file, the place in memory.
    places: Vec<usize>,
    first: i64,
    step: i64,
}

impl HandOrder {
    fn of(hands: &[Hand]) -> Option<HandOrder> {
        let mut places: Vec<usize> = (0..hands.len()).collect();
        places.sort_by_key(|place| hands[*place].code().abs());
        let codes: Vec<i64> = places.iter().map(|place| hands[*place].code()).collect();
        let first = *codes.first()?;
        let step = codes.get(1).map_or(first.signum(), |second| second - first);
        let regular = step != 0 && codes.iter().enumerate().all(|(n, code)| *code == first + n as i64 * step);
        regular.then_some(HandOrder { places, first, step })
    }
}

/// What all tables repeat.
struct Common<'a> {
    observation: &'a Observation,
    raster: &'a Raster,
    hands: &'a HandOrder,
    /// MJD of the reference day.
    day: f64,
    /// The same as text.
    date: String,
}

impl Common<'_> {
    fn header(&self, revision: i32) -> Header {
        let mut header = Header::new();
        header
            .set("EXTVER", 1, "")
            .set("TABREV", revision, "revision of this table")
            .set("NO_STKD", self.hands.places.len(), "correlation products")
            .set("STK_1", self.hands.first, "code of the first")
            .set("NO_BAND", self.raster.bands, "bands")
            .set("NO_CHAN", self.raster.per_band, "channels of each band")
            .set("REF_FREQ", self.observation.frequencies_hz[0], "[Hz] reference frequency")
            .set("CHAN_BW", self.observation.widths_hz[0], "[Hz] channel spacing")
            .set("REF_PIXL", 1.0, "channel of the reference frequency")
            .set("OBSCODE", "", "")
            .set("ARRNAM", self.observation.array_name.as_str(), "")
            .set("RDATE", self.date.as_str(), "reference day");
        header
    }

    fn array_geometry(&self, writer: &mut FitsWriter) -> Result<(), FitsError> {
        let stations = &self.observation.stations;
        let width = name_width(stations.iter().map(|s| s.name.as_str()));
        let (ut1, tt) = (self.day + self.observation.ut1_utc_s / 86_400.0, self.day + 69.184 / 86_400.0);
        let mut header = self.header(1);
        header
            .set("FRAME", "GEOCENTRIC", "")
            .set("ARRAYX", 0.0, "[m] positions are geocentric")
            .set("ARRAYY", 0.0, "[m]")
            .set("ARRAYZ", 0.0, "[m]")
            .set("NUMORB", 0, "")
            .set("FREQ", self.observation.frequencies_hz[0], "[Hz]")
            .set("TIMSYS", "UTC", "")
            .set(
                "GSTIA0",
                eraGmst06(MJD_ZERO, ut1, MJD_ZERO, tt).to_degrees(),
                "[deg] sidereal time at 0h of RDATE",
            )
            .set("DEGPDY", DEGREES_PER_DAY, "[deg/d]")
            .set("UT1UTC", self.observation.ut1_utc_s, "[s]")
            .set("POLARX", 0.0, "[arcsec] not applied")
            .set("POLARY", 0.0, "[arcsec] not applied")
            .set("XYZHAND", "RIGHT", "");
        let columns = vec![
            ColumnSpec::text("ANNAME", width),
            ColumnSpec::f64("STABXYZ", 3, "METERS"),
            ColumnSpec::f32("DERXYZ", 3, "M/SEC"),
            ColumnSpec::i32("NOSTA", 1, ""),
            ColumnSpec::i32("MNTSTA", 1, ""),
            ColumnSpec::f32("STAXOF", 3, "METERS"),
            ColumnSpec::f32("DIAMETER", 1, "METERS"),
        ];
        let mut table = writer.table("ARRAY_GEOMETRY", &header, columns, stations.len())?;
        for (n, station) in stations.iter().enumerate() {
            table.text(&station.name)?;
            table.f64(&station.position_m)?;
            table.f32(&[0.0; 3])?;
            table.i32(&[n as i32 + 1])?;
            table.i32(&[station.mount.code()])?;
            table.f32(&[0.0; 3])?;
            table.f32(&[station.diameter_m.unwrap_or(0.0) as f32])?;
        }
        table.end()
    }

    fn antenna(&self, writer: &mut FitsWriter) -> Result<(), FitsError> {
        let stations = &self.observation.stations;
        let bands = self.raster.bands;
        let (a, b) = if (-4..=-1).contains(&self.hands.first) { ("R", "L") } else { ("X", "Y") };
        let mut header = self.header(1);
        header.set("NOPCAL", 0, "no leakage terms").set("POLTYPE", "APPROX", "");
        let columns = vec![
            ColumnSpec::f64("TIME", 1, "DAYS"),
            ColumnSpec::f32("TIME_INTERVAL", 1, "DAYS"),
            ColumnSpec::text("ANNAME", name_width(stations.iter().map(|s| s.name.as_str()))),
            ColumnSpec::i32("ANTENNA_NO", 1, ""),
            ColumnSpec::i32("ARRAY", 1, ""),
            ColumnSpec::i32("FREQID", 1, ""),
            ColumnSpec::i32("NO_LEVELS", 1, ""),
            ColumnSpec::text("POLTYA", 1),
            ColumnSpec::f32("POLAA", bands, "DEGREES"),
            ColumnSpec::text("POLTYB", 1),
            ColumnSpec::f32("POLAB", bands, "DEGREES"),
        ];
        let mut table = writer.table("ANTENNA", &header, columns, stations.len())?;
        for (n, station) in stations.iter().enumerate() {
            let angle = station.feed_angle.to_degrees() as f32;
            table.f64(&[0.0])?;
            table.f32(&[1.0])?;
            table.text(&station.name)?;
            table.i32(&[n as i32 + 1])?;
            table.i32(&[1])?;
            table.i32(&[1])?;
            table.i32(&[0])?;
            table.text(a)?;
            table.f32(&vec![angle; bands])?;
            table.text(b)?;
            table.f32(&vec![if a == "X" { angle + 90.0 } else { angle }; bands])?;
        }
        table.end()
    }

    fn frequency(&self, writer: &mut FitsWriter) -> Result<(), FitsError> {
        let Raster { bands, per_band } = *self.raster;
        let (centres, widths) = (&self.observation.frequencies_hz, &self.observation.widths_hz);
        let starts = || (0..bands).map(|band| band * per_band);
        let columns = vec![
            ColumnSpec::i32("FREQID", 1, ""),
            ColumnSpec::f64("BANDFREQ", bands, "HZ"),
            ColumnSpec::f32("CH_WIDTH", bands, "HZ"),
            ColumnSpec::f32("TOTAL_BANDWIDTH", bands, "HZ"),
            ColumnSpec::i32("SIDEBAND", bands, ""),
        ];
        let falls = |start: usize| per_band > 1 && centres[start + 1] < centres[start];
        let mut table = writer.table("FREQUENCY", &self.header(1), columns, 1)?;
        table.i32(&[1])?;
        table.f64(&starts().map(|s| centres[s] - centres[0]).collect::<Vec<_>>())?;
        table.f32(&starts().map(|s| widths[s] as f32).collect::<Vec<_>>())?;
        table.f32(&starts().map(|s| (widths[s] * per_band as f64) as f32).collect::<Vec<_>>())?;
        table.i32(&starts().map(|s| if falls(s) { -1 } else { 1 }).collect::<Vec<_>>())?;
        table.end()
    }

    fn sources(&self, writer: &mut FitsWriter, pointings: &[Observation]) -> Result<(), FitsError> {
        let bands = self.raster.bands;
        let mut header = self.header(1);
        header.comment("RAAPP and DECAPP repeat the catalogue position: no apparent place was computed.");
        let mut columns = vec![
            ColumnSpec::i32("SOURCE_ID", 1, ""),
            ColumnSpec::text("SOURCE", name_width(pointings.iter().map(|p| p.name.as_str())).max(16)),
            ColumnSpec::i32("QUAL", 1, ""),
            ColumnSpec::text("CALCODE", 4),
            ColumnSpec::i32("FREQID", 1, ""),
        ];
        columns.extend(["IFLUX", "QFLUX", "UFLUX", "VFLUX"].map(|name| ColumnSpec::f32(name, bands, "JY")));
        columns.extend([ColumnSpec::f32("ALPHA", bands, ""), ColumnSpec::f32("FREQOFF", bands, "HZ")]);
        columns.extend(["RAEPO", "DECEPO"].map(|name| ColumnSpec::f64(name, 1, "DEGREES")));
        columns.push(ColumnSpec::text("EQUINOX", 8));
        columns.extend(["RAAPP", "DECAPP", "RAOBS", "DECOBS"].map(|name| ColumnSpec::f64(name, 1, "DEGREES")));
        columns.push(ColumnSpec::f64("SYSVEL", bands, "M/SEC"));
        columns.extend([ColumnSpec::text("VELTYP", 8), ColumnSpec::text("VELDEF", 8)]);
        columns.push(ColumnSpec::f64("RESTFREQ", bands, "HZ"));
        columns.extend(["PMRA", "PMDEC"].map(|name| ColumnSpec::f64(name, 1, "DEG/DAY")));
        columns.push(ColumnSpec::f32("PARALLAX", 1, "ARCSEC"));
        let mut table = writer.table("SOURCE", &header, columns, pointings.len())?;
        for (n, pointing) in pointings.iter().enumerate() {
            let (ra, dec) = pointing.phase_centre.to_deg();
            let (ra_aim, dec_aim) = pointing.aim.to_deg();
            table.i32(&[n as i32 + 1])?;
            table.text(&pointing.name)?;
            table.i32(&[0])?;
            table.text("")?;
            table.i32(&[1])?;
            for _ in 0..6 {
                table.f32(&vec![0.0; bands])?;
            }
            table.f64(&[ra])?;
            table.f64(&[dec])?;
            table.text("J2000")?;
            for angle in [ra, dec, ra_aim, dec_aim] {
                table.f64(&[angle])?;
            }
            table.f64(&vec![0.0; bands])?;
            table.text("")?;
            table.text("")?;
            table.f64(&vec![0.0; bands])?;
            table.f64(&[0.0])?;
            table.f64(&[0.0])?;
            table.f32(&[0.0])?;
        }
        table.end()
    }

    fn uv_data(
        &self,
        writer: &mut FitsWriter,
        pointings: &mut [&mut dyn BlockSource],
        rows: usize,
    ) -> Result<(), ObservationError> {
        let Raster { bands, per_band } = *self.raster;
        let hands = self.hands.places.len();
        let mut header = self.header(2);
        let axes = [
            ("COMPLEX", 3, 1.0, 1.0),
            ("STOKES", hands, self.hands.first as f64, self.hands.step as f64),
            ("FREQ", per_band, self.observation.frequencies_hz[0], self.observation.widths_hz[0]),
            ("BAND", bands, 1.0, 1.0),
            ("RA", 1, 0.0, 1.0),
            ("DEC", 1, 0.0, 1.0),
        ];
        header
            .set("DATE-OBS", self.date.as_str(), "day of the first row")
            .set("EQUINOX", "J2000", "")
            .set("NMATRIX", 1, "")
            .set("TMATX10", true, "the array")
            .set("MAXIS", axes.len(), "axes of the array");
        for (n, (name, length, value, step)) in axes.into_iter().enumerate() {
            let n = n + 1;
            header
                .set(&format!("MAXIS{n}"), length, "")
                .set(&format!("CTYPE{n}"), name, "")
                .set(&format!("CDELT{n}"), step, "")
                .set(&format!("CRPIX{n}"), 1.0, "")
                .set(&format!("CRVAL{n}"), value, "");
        }
        let cells = bands * per_band * hands;
        let columns = vec![
            ColumnSpec::f64("UU", 1, "SECONDS"),
            ColumnSpec::f64("VV", 1, "SECONDS"),
            ColumnSpec::f64("WW", 1, "SECONDS"),
            ColumnSpec::f64("DATE", 1, "DAYS"),
            ColumnSpec::f64("TIME", 1, "DAYS"),
            ColumnSpec::i32("BASELINE", 1, ""),
            ColumnSpec::i32("ARRAY", 1, ""),
            ColumnSpec::i32("SOURCE_ID", 1, ""),
            ColumnSpec::i32("FREQID", 1, ""),
            ColumnSpec::f32("FLUX", 3 * cells, "JY"),
        ];
        let stations = self.observation.stations.len();
        let (base, step) = if stations > 255 { (65_536, 2048) } else { (0, 256) };
        let mut table = writer.table("UV_DATA", &header, columns, rows)?;
        let mut flux = Vec::with_capacity(3 * cells);
        for (source, pointing) in pointings.iter_mut().enumerate() {
            pointing.rewind()?;
            while let Some(block) = pointing.next_block()? {
                for row in 0..block.rows() {
                    for x in block.uvw_m[row] {
                        table.f64(&[-x / SPEED_OF_LIGHT])?;
                    }
                    let day = block.mjd_utc[row].floor();
                    table.f64(&[day + MJD_ZERO])?;
                    table.f64(&[block.mjd_utc[row] - day])?;
                    let (first, second) = (block.first[row] as i32 + 1, block.second[row] as i32 + 1);
                    table.i32(&[base + step * first + second])?;
                    table.i32(&[1])?;
                    table.i32(&[source as i32 + 1])?;
                    table.i32(&[1])?;
                    self.fill_flux(&block, row, &mut flux);
                    table.f32(&flux)?;
                }
            }
        }
        table.end()?;
        Ok(())
    }

    fn fill_flux(&self, block: &Block, row: usize, flux: &mut Vec<f32>) {
        flux.clear();
        for channel in 0..block.channels {
            let at = block.index(row, channel);
            for place in &self.hands.places {
                let value = block.data[at + place];
                flux.extend([value.re, value.im, block.weight[at + place]]);
            }
        }
    }
}

/// Names are 8 characters in the convention; a longer one is not cut.
fn name_width<'a>(names: impl Iterator<Item = &'a str>) -> usize {
    names.map(|name| name.chars().count()).max().unwrap_or(0).max(8)
}

/// `YYYY-MM-DD` of a Modified Julian Date (Gregorian calendar).
fn date_of_mjd(mjd: f64) -> String {
    // Counted from 1 March of year 0, in cycles of 400 years of 146 097 days.
    let days = mjd as i64 + 678_881;
    let (cycle, day) = (days.div_euclid(146_097), days.rem_euclid(146_097));
    let year = (day - day / 1460 + day / 36_524 - day / 146_096) / 365;
    let day = day - (365 * year + year / 4 - year / 100);
    let month = (5 * day + 2) / 153;
    let day = day - (153 * month + 2) / 5 + 1;
    let (month, carry) = if month < 10 { (month + 3, 0) } else { (month - 9, 1) };
    format!("{:04}-{month:02}-{day:02}", cycle * 400 + year + carry)
}

#[cfg(test)]
mod tests {
    use super::{Raster, date_of_mjd};

    /// astropy.time.Time(mjd, format='mjd').iso
    #[test]
    fn days_become_dates() {
        for (mjd, date) in [(51544.0, "2000-01-01"), (51603.0, "2000-02-29"), (60000.0, "2023-02-25")] {
            assert_eq!(date_of_mjd(mjd), date);
        }
    }

    #[test]
    fn channels_become_the_fewest_bands() {
        let shape = |centres: &[f64], widths: &[f64]| {
            let raster = Raster::of(centres, widths);
            (raster.bands, raster.per_band)
        };
        assert_eq!(shape(&[1e9, 1.1e9, 1.2e9], &[1e8; 3]), (1, 3));
        assert_eq!(shape(&[1e9, 1.1e9, 2e9, 2.1e9], &[1e8; 4]), (2, 2));
        assert_eq!(shape(&[1e9, 1.1e9, 1.3e9], &[1e8; 3]), (3, 1));
        assert_eq!(shape(&[1e9, 1.1e9], &[5e7; 2]), (2, 1)); // gaps between channels
        assert_eq!(shape(&[1.1e9, 1e9], &[1e8; 2]), (1, 2)); // falling
    }
}
