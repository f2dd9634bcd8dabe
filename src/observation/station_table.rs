//! Station tables: AN beside random groups, ARRAY_GEOMETRY and ANTENNA in FITS-IDI.

use super::open::content;
use super::{Mount, ObservationError, Station};
use crate::fits::{FitsFile, Hdu, Table};

/// Station numbers above this are taken for damage.
const LARGEST_NUMBER: f64 = 1e6;
/// No array has as many stations.
const MOST_STATIONS: u64 = 10_000;
const NONE: u32 = u32::MAX;

/// A station as its table gives it, before the axes are decided upon.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct RawStation {
    pub station: Station,
    /// STABXYZ, metres.
    pub offset_m: [f64; 3],
    /// ARRAYX, ARRAYY, ARRAYZ, metres.
    pub centre_m: [f64; 3],
}

/// All station tables of a file.
#[derive(Debug, Clone, Default)]
pub(super) struct StationTables {
    pub stations: Vec<RawStation>,
    /// By array number (EXTVER): for each station number its index.
    arrays: Vec<(i64, Vec<u32>)>,
    /// ARRNAM of the first table.
    pub array_name: String,
    /// UT1UTC of the first table.
    pub ut1_utc_s: f64,
    /// What turns the times of the file into UTC, seconds.
    pub to_utc_s: f64,
    /// XYZHAND says LEFT.
    pub left_handed: bool,
    pub notes: Vec<String>,
}

impl StationTables {
    /// Reads one table more.
    pub fn add(&mut self, file: &FitsFile, hdu: &Hdu) -> Result<(), ObservationError> {
        let path = file.path();
        let header = &hdu.header;
        let table = Table::new(hdu).map_err(|e| e.at(path))?;
        let get = |key: &str| header.float(key).map_err(|e| e.at(path));
        let text = |key: &str| header.text(key).map(Option::unwrap_or_default).map_err(|e| e.at(path));
        let first = self.arrays.is_empty();
        let centre_m = [get("ARRAYX")?, get("ARRAYY")?, get("ARRAYZ")?].map(|c| c.unwrap_or(0.0));
        if first {
            self.array_name = text("ARRNAM")?;
            self.ut1_utc_s = get("UT1UTC")?.unwrap_or(0.0);
            self.left_handed = text("XYZHAND")?.eq_ignore_ascii_case("LEFT");
            self.time_system(&table.label, &text("TIMSYS")?, &text("TIMESYS")?, get("IATUTC")?, get("DATUTC")?);
            if self.ut1_utc_s.abs() > 1.0 {
                self.notes
                    .push(format!("{}: UT1UTC = {} s is not believed; 0 is used", table.label, self.ut1_utc_s));
                self.ut1_utc_s = 0.0;
            }
        }
        if table.rows > MOST_STATIONS {
            let problem = format!("{}: {} stations", table.label, table.rows);
            return Err(content(path, problem, format!("at most {MOST_STATIONS}")));
        }
        let number = hdu.version();
        if self.arrays.iter().any(|(n, _)| *n == number) {
            let problem = format!("two station tables have EXTVER = {number}");
            return Err(content(path, problem, "a number of its own for each"));
        }
        let position = table.numbers(&["STABXYZ"], 3).map_err(|e| e.at(path))?;
        let nosta = table.numbers(&["NOSTA"], 1).map_err(|e| e.at(path))?;
        let name = table.find(&["ANNAME"]);
        let (mount, diameter, angle) = (table.find(&["MNTSTA"]), table.find(&["DIAMETER"]), table.find(&["POLAA"]));
        let optional = |column: Option<&crate::fits::Column>, row: &[u8]| column.and_then(|c| c.number(row, 0));
        let mut index = Vec::new();
        table.for_each_row(file, |row, bytes| {
            let at = || format!("{}: row {}", table.label, row + 1);
            let offset_m = [0, 1, 2].map(|i| position.number(bytes, i).unwrap_or(f64::NAN));
            if offset_m.iter().any(|x| !x.is_finite()) {
                return Err(content(path, format!("{}: STABXYZ = {offset_m:?}", at()), "three finite numbers"));
            }
            let number = nosta.number(bytes, 0).unwrap_or(f64::NAN);
            if !(number.fract() == 0.0 && (0.0..=LARGEST_NUMBER).contains(&number)) {
                return Err(content(path, format!("{}: NOSTA = {number}", at()), "a whole number, 0 to 1000000"));
            }
            let number = number as usize;
            let named = name.and_then(|c| c.text(bytes)).filter(|n| !n.is_empty());
            let named = named.unwrap_or_else(|| format!("station {number}"));
            let code = optional(mount, bytes).filter(|m| m.is_finite()).unwrap_or(0.0);
            let feed = optional(angle, bytes).filter(|a| a.is_finite()).unwrap_or(0.0);
            let station = RawStation {
                station: Station {
                    name: named,
                    position_m: [0.0; 3],
                    mount: Mount::from_code(code as i32),
                    diameter_m: optional(diameter, bytes).filter(|d| d.is_finite() && *d > 0.0),
                    feed_angle: feed.to_radians(),
                },
                offset_m,
                centre_m,
            };
            if index.len() <= number {
                index.resize(number + 1, NONE);
            }
            if index[number] != NONE {
                return Err(content(
                    path,
                    format!("{}: NOSTA = {number} stands there twice", at()),
                    "different numbers",
                ));
            }
            // A station that several arrays share is one station.
            let known = if first { None } else { self.stations.iter().position(|s| *s == station) };
            index[number] = known.unwrap_or(self.stations.len()) as u32;
            if known.is_none() {
                self.stations.push(station);
            }
            Ok(())
        })?;
        self.arrays.push((number, index));
        Ok(())
    }

    /// Takes the feed angles (and nothing else) from an ANTENNA table of FITS-IDI.
    pub fn add_feeds(&mut self, file: &FitsFile, hdu: &Hdu) -> Result<(), ObservationError> {
        let table = Table::new(hdu).map_err(|e| e.at(file.path()))?;
        let (Some(number), Some(angle)) = (table.find(&["ANTENNA_NO", "NOSTA"]), table.find(&["POLAA"])) else {
            self.notes.push(format!("{}: no ANTENNA_NO and POLAA columns; feed angles are 0", table.label));
            return Ok(());
        };
        let array = table.find(&["ARRAY"]);
        table.for_each_row(file, |_, bytes| {
            let array = array.and_then(|c| c.number(bytes, 0)).unwrap_or(1.0);
            if let Some(index) = number.number(bytes, 0).and_then(|n| self.index(array as i64, n))
                && let Some(angle) = angle.number(bytes, 0).filter(|a| a.is_finite())
            {
                self.stations[index as usize].station.feed_angle = angle.to_radians();
            }
            Ok(())
        })
    }

    fn time_system(&mut self, label: &str, timsys: &str, timesys: &str, iatutc: Option<f64>, datutc: Option<f64>) {
        let system = if timsys.is_empty() { timesys } else { timsys }.trim().to_ascii_uppercase();
        match system.as_str() {
            "" | "UTC" => {}
            "IAT" | "TAI" => match iatutc.or(datutc).filter(|s| *s != 0.0) {
                Some(seconds) => {
                    self.to_utc_s = -seconds;
                    self.notes.push(format!("{label}: times are {system}; {seconds} s taken off to make them UTC"));
                }
                None => self.notes.push(format!(
                    "{label}: times are {system}, but neither IATUTC nor DATUTC says how far from UTC: taken as UTC, \
                     up to 37 s wrong"
                )),
            },
            other => self.notes.push(format!("{label}: time system {other:?} is not known; taken as UTC")),
        }
    }

    /// How many arrays (subarrays) there are.
    pub fn array_count(&self) -> usize {
        self.arrays.len()
    }

    /// Index of a station by array and station number. Where there is only one table, every array uses it.
    #[inline]
    pub fn index(&self, array: i64, number: f64) -> Option<u32> {
        let whole = number as u32; // saturates; NaN becomes 0 and is found below
        if f64::from(whole) != number {
            return None;
        }
        let table = match &self.arrays[..] {
            [(_, only)] => only,
            several => &several.iter().find(|(n, _)| *n == array)?.1,
        };
        table.get(whole as usize).copied().filter(|index| *index != NONE)
    }
}
