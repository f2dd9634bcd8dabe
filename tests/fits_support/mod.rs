//! Hand-packed random-groups files and small tables, independent of the reader under test.
#![allow(dead_code)]

use evensky::fits::{ColumnSpec, FitsWriter, Header};
use std::path::{Path, PathBuf};

/// A folder for the files of one test; removed when dropped.
pub fn folder() -> tempfile::TempDir {
    tempfile::tempdir().expect("a temporary folder")
}

/// One header card.
pub fn card(text: &str) -> Vec<u8> {
    format!("{text:<80.80}").into_bytes()
}

/// Header blocks of `cards`, END added.
pub fn header(cards: &[String]) -> Vec<u8> {
    let mut bytes: Vec<u8> = cards.iter().flat_map(|text| card(text)).collect();
    bytes.extend(card("END"));
    bytes.resize(bytes.len().next_multiple_of(2880), b' ');
    bytes
}

/// A station of the test array: number, STABXYZ, MNTSTA.
pub type StationRow = (i32, [f64; 3], i32);

/// A random-groups file to be.
#[derive(Clone)]
pub struct Groups {
    pub bitpix: i64,
    /// PTYPE, PSCAL, PZERO.
    pub parameters: Vec<(&'static str, f64, f64)>,
    /// CTYPE, length, CRVAL, CDELT.
    pub axes: Vec<(&'static str, usize, f64, f64)>,
    /// Stored numbers: parameters, then array.
    pub groups: Vec<Vec<f64>>,
    /// Further cards of the main header.
    pub cards: Vec<String>,
    /// GCOUNT when it is to lie.
    pub gcount: Option<i64>,
    /// PCOUNT when it is to lie.
    pub pcount: Option<i64>,
    pub centre_m: [f64; 3],
    pub stations: Vec<StationRow>,
    /// More keywords of the station table.
    pub station_keys: Vec<(&'static str, evensky::fits::Value)>,
    /// IF FREQ, CH WIDTH, SIDEBAND of each band; one row.
    pub bands: Vec<(f64, f32, i32)>,
    /// Number, name, RAEPO, DECEPO.
    pub sources: Vec<(i32, &'static str, f64, f64)>,
}

/// Near the Greenwich meridian line of no place in particular: 20° East, 45° North.
pub const CENTRE: [f64; 3] = [4_245_000.0, 1_545_000.0, 4_488_000.0];
pub const RA_DEG: f64 = 150.0;
pub const DEC_DEG: f64 = 30.0;
/// 2020-01-01 as a Julian Date at 0h.
pub const DAY: f64 = 2_458_849.5;

/// Offsets of four stations, Earth-fixed, metres.
pub const OFFSETS: [[f64; 3]; 4] =
    [[0.0, 0.0, 0.0], [-120.0, 310.0, 95.0], [410.0, -60.0, -380.0], [77.0, 530.0, 12.0]];

impl Groups {
    /// Four stations, XX and YY, three channels, two times, all weights 4: `value` gives real and imaginary part.
    pub fn sound() -> Groups {
        let mut file = Groups {
            bitpix: -32,
            parameters: vec![
                ("UU---SIN", 1.0, 0.0),
                ("VV---SIN", 1.0, 0.0),
                ("WW---SIN", 1.0, 0.0),
                ("BASELINE", 1.0, 0.0),
                ("DATE", 1.0, DAY),
                ("DATE", 1.0, 0.0),
            ],
            axes: vec![
                ("COMPLEX", 3, 1.0, 1.0),
                ("STOKES", 2, -5.0, -1.0),
                ("FREQ", 3, 1.4e9, 1e6),
                ("IF", 1, 1.0, 1.0),
                ("RA", 1, RA_DEG, 1.0),
                ("DEC", 1, DEC_DEG, 1.0),
            ],
            groups: Vec::new(),
            cards: vec!["OBJECT  = 'FIELD A '".into(), "EQUINOX =               2000.0".into()],
            gcount: None,
            pcount: None,
            centre_m: CENTRE,
            stations: OFFSETS.iter().enumerate().map(|(n, offset)| (n as i32 + 1, *offset, 0)).collect(),
            station_keys: Vec::new(),
            bands: vec![(0.0, 1e6, 1)],
            sources: Vec::new(),
        };
        for (time, day_part) in [0.25, 0.5].into_iter().enumerate() {
            for p in 0..4 {
                for q in p + 1..4 {
                    let uvw = seconds(p, q, DAY + day_part);
                    let mut group = vec![uvw[0], uvw[1], uvw[2], (256 * (p + 1) + q + 1) as f64, 0.0, day_part];
                    for cell in 0..6 {
                        let value = (time * 100 + p * 20 + q * 6 + cell) as f64;
                        group.extend([value, -value / 8.0, 4.0]);
                    }
                    file.groups.push(group);
                }
            }
        }
        file
    }

    /// The bytes of the file.
    pub fn bytes(&self) -> Vec<u8> {
        let mut cards = vec![
            "SIMPLE  =                    T".to_string(),
            format!("BITPIX  = {:>20}", self.bitpix),
            format!("NAXIS   = {:>20}", self.axes.len() + 1),
            "NAXIS1  =                    0".to_string(),
        ];
        cards.extend(self.axes.iter().enumerate().map(|(n, a)| format!("NAXIS{:<3}= {:>20}", n + 2, a.1)));
        cards.push("EXTEND  =                    T".into());
        cards.push("GROUPS  =                    T".into());
        cards.push(format!("PCOUNT  = {:>20}", self.pcount.unwrap_or(self.parameters.len() as i64)));
        cards.push(format!("GCOUNT  = {:>20}", self.gcount.unwrap_or(self.groups.len() as i64)));
        for (n, (name, length, value, step)) in self.axes.iter().enumerate() {
            let _ = length;
            cards.push(format!("CTYPE{:<3}= '{name:<8}'", n + 2));
            cards.push(format!("CRVAL{:<3}= {value:>20.8}", n + 2));
            cards.push(format!("CDELT{:<3}= {step:>20.8}", n + 2));
            cards.push(format!("CRPIX{:<3}= {:>20.8}", n + 2, 1.0));
        }
        for (n, (name, scale, zero)) in self.parameters.iter().enumerate() {
            cards.push(format!("PTYPE{:<3}= '{name:<8}'", n + 1));
            cards.push(format!("PSCAL{:<3}= {scale:>20.12E}", n + 1));
            cards.push(format!("PZERO{:<3}= {zero:>20.12E}", n + 1));
        }
        cards.extend(self.cards.iter().cloned());
        let mut bytes = header(&cards);
        for number in self.groups.iter().flatten() {
            match self.bitpix {
                -32 => bytes.extend((*number as f32).to_be_bytes()),
                -64 => bytes.extend(number.to_be_bytes()),
                32 => bytes.extend((number.round() as i32).to_be_bytes()),
                _ => bytes.extend((number.round() as i16).to_be_bytes()),
            }
        }
        bytes.resize(bytes.len().next_multiple_of(2880), 0);
        bytes.extend(self.tables());
        bytes
    }

    /// The extensions, made by the table writer (which its own tests hold against astropy).
    fn tables(&self) -> Vec<u8> {
        let folder = folder();
        let path = folder.path().join("tables.fits");
        let mut writer = FitsWriter::create(&path).unwrap();
        writer.empty_primary(&Header::new()).unwrap();
        if !self.stations.is_empty() {
            let mut keys = Header::new();
            keys.set("EXTVER", 1, "").set("UT1UTC", -0.2, "").set("ARRNAM", "TESTARR", "");
            for (key, value) in ["ARRAYX", "ARRAYY", "ARRAYZ"].iter().zip(self.centre_m) {
                keys.set(key, value, "");
            }
            for (key, value) in &self.station_keys {
                keys.set(key, value.clone(), "");
            }
            let columns = vec![
                ColumnSpec::text("ANNAME", 8),
                ColumnSpec::f64("STABXYZ", 3, "METERS"),
                ColumnSpec::i32("NOSTA", 1, ""),
                ColumnSpec::i32("MNTSTA", 1, ""),
                ColumnSpec::f32("POLAA", 1, "DEGREES"),
            ];
            let mut table = writer.table("TEST AN", &keys, columns, self.stations.len()).unwrap();
            for (number, offset, mount) in &self.stations {
                table.text(&format!("S{number}")).unwrap();
                table.f64(offset).unwrap();
                table.i32(&[*number]).unwrap();
                table.i32(&[*mount]).unwrap();
                table.f32(&[15.0]).unwrap();
            }
            table.end().unwrap();
        }
        if !self.bands.is_empty() {
            let n = self.bands.len();
            let columns = vec![
                ColumnSpec::i32("FRQSEL", 1, ""),
                ColumnSpec::f64("IF FREQ", n, "HZ"),
                ColumnSpec::f32("CH WIDTH", n, "HZ"),
                ColumnSpec::i32("SIDEBAND", n, ""),
            ];
            let mut table = writer.table("TEST FQ", &Header::new(), columns, 1).unwrap();
            table.i32(&[1]).unwrap();
            table.f64(&self.bands.iter().map(|b| b.0).collect::<Vec<_>>()).unwrap();
            table.f32(&self.bands.iter().map(|b| b.1).collect::<Vec<_>>()).unwrap();
            table.i32(&self.bands.iter().map(|b| b.2).collect::<Vec<_>>()).unwrap();
            table.end().unwrap();
        }
        if !self.sources.is_empty() {
            let columns = vec![
                ColumnSpec::i32("ID. NO.", 1, ""),
                ColumnSpec::text("SOURCE", 16),
                ColumnSpec::f64("RAEPO", 1, "DEGREES"),
                ColumnSpec::f64("DECEPO", 1, "DEGREES"),
                ColumnSpec::f64("EPOCH", 1, "YEARS"),
            ];
            let mut table = writer.table("TEST SU", &Header::new(), columns, self.sources.len()).unwrap();
            for (id, name, ra, dec) in &self.sources {
                table.i32(&[*id]).unwrap();
                table.text(name).unwrap();
                table.f64(&[*ra]).unwrap();
                table.f64(&[*dec]).unwrap();
                table.f64(&[2000.0]).unwrap();
            }
            table.end().unwrap();
        }
        writer.finish().unwrap();
        std::fs::read(&path).unwrap().split_off(2880)
    }

    /// Writes it into `folder`.
    pub fn write(&self, folder: &Path) -> PathBuf {
        let path = folder.join("test.uvfits");
        std::fs::write(&path, self.bytes()).unwrap();
        path
    }
}

/// UU, VV, WW in seconds of (p, q), first minus second, after Thompson, Moran & Swenson (ch. 4) with the Greenwich
/// hour angle from `evensky`'s ERFA; only ever compared at the per-cent level or with itself.
pub fn seconds(p: usize, q: usize, jd: f64) -> [f64; 3] {
    let b = [0, 1, 2].map(|i| OFFSETS[q][i] - OFFSETS[p][i]);
    let frame = evensky::sky::Direction::from_deg(RA_DEG, DEC_DEG).frame();
    let uvw = evensky::observation::baseline_uvw(b, &frame, jd - 2_400_000.5, -0.2);
    uvw.map(|x| -x / evensky::observation::SPEED_OF_LIGHT)
}
