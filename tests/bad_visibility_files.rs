//! What is wrong with a visibility file is said by name: file, keyword or row, what was found, what was expected.

mod fits_support;

use evensky::observation::{MemorySource, Selection, open};
use fits_support::{DAY, Groups, folder};
use std::path::Path;

/// Opens and reads everything; the message of the error that must come.
fn complaint(path: &Path) -> String {
    let result = open(path, &Selection::All).and_then(|sources| {
        sources.into_iter().try_for_each(|mut source| MemorySource::read(source.as_mut()).map(drop))
    });
    match result {
        Ok(()) => panic!("{} was read without complaint", path.display()),
        Err(error) => error.to_string(),
    }
}

fn must_say(message: &str, parts: &[&str]) {
    for part in parts {
        assert!(message.contains(part), "{part:?} is not in: {message}");
    }
}

/// The complaint about a sound file after `spoil`; it must name the file and hold `parts`.
fn spoiled(spoil: impl FnOnce(&mut Groups), parts: &[&str]) {
    let folder = folder();
    let mut file = Groups::sound();
    spoil(&mut file);
    let message = complaint(&file.write(folder.path()));
    must_say(&message, &["test.uvfits"]);
    must_say(&message, parts);
}

/// As [`spoiled`], of the bytes.
fn spoiled_bytes(spoil: impl FnOnce(&mut Vec<u8>), parts: &[&str]) {
    let folder = folder();
    let mut bytes = Groups::sound().bytes();
    spoil(&mut bytes);
    let path = folder.path().join("test.uvfits");
    std::fs::write(&path, bytes).unwrap();
    let message = complaint(&path);
    must_say(&message, &["test.uvfits"]);
    must_say(&message, parts);
}

#[test]
fn missing_file() {
    let folder = folder();
    must_say(&complaint(&folder.path().join("nowhere.uvfits")), &["nowhere.uvfits", "cannot open"]);
}

#[test]
fn directory() {
    let folder = folder();
    must_say(&complaint(folder.path()), &["not an ordinary file"]);
}

#[test]
fn empty_file() {
    spoiled_bytes(Vec::clear, &["empty", "expected a FITS file"]);
}

#[test]
fn not_fits() {
    spoiled_bytes(|b| *b = b"name,ra_deg,dec_deg\n".repeat(300), &["not a FITS file", "name,ra_deg"]);
}

#[test]
fn gzip() {
    spoiled_bytes(
        |b| b.splice(0..4, [0x1f, 0x8b, 8, 0]).for_each(drop),
        &["gzip-compressed", "decompress it first"],
    );
}

#[test]
fn truncated_header() {
    spoiled_bytes(|b| b.truncate(2880), &["primary header", "no END card", "cut short"]);
}

#[test]
fn truncated_data() {
    spoiled_bytes(|b| b.truncate(2 * 2880 + 500), &["declares 1152 bytes", "the file ends at byte 6260"]);
}

#[test]
fn truncated_table() {
    spoiled_bytes(|b| b.truncate(b.len() - 2880), &["extension 2 (TEST FQ)", "declares"]);
}

#[test]
fn wrong_axis_order() {
    spoiled(|f| f.axes.swap(0, 1), &["CTYPE2", "STOKES", "expected COMPLEX as the first axis"]);
}

#[test]
fn missing_axis() {
    spoiled(|f| f.axes[1].0 = "COLOUR", &["none is STOKES"]);
}

#[test]
fn unknown_long_axis() {
    spoiled(|f| (f.axes[2].1, f.axes[3]) = (1, ("SCAN", 3, 1.0, 1.0)), &["SCAN", "length 3", "expected length 1"]);
}

#[test]
fn axis_of_length_zero() {
    spoiled(|f| f.axes[2].1 = 0, &["FREQ", "length 0"]);
}

#[test]
fn unknown_stokes_code() {
    spoiled(|f| f.axes[1].2 = -8.0, &["STOKES", "-9", "expected different codes"]);
}

#[test]
fn same_hand_twice() {
    spoiled(|f| f.axes[1].3 = 0.0, &["XX twice"]);
}

#[test]
fn no_groups() {
    spoiled(|f| f.groups.clear(), &["GCOUNT = 0", "at least one group"]);
}

#[test]
fn negative_gcount() {
    spoiled(|f| f.gcount = Some(-1), &["GCOUNT = -1", "0 or more"]);
}

#[test]
fn fewer_groups_declared_than_there_are() {
    let long = |f: &mut Groups| f.groups = f.groups.iter().cycle().take(240).cloned().collect();
    spoiled(|f| (long(f), f.gcount = Some(12)).0, &["primary header", "next header begins", "GCOUNT"]);
}

#[test]
fn pcount_one_too_small() {
    spoiled(|f| f.pcount = Some(5), &["PCOUNT = 5", "PTYPE6"]);
}

#[test]
fn pcount_one_too_large() {
    spoiled(|f| (f.pcount, f.gcount) = (Some(7), Some(11)), &["PTYPE7", "missing"]);
}

#[test]
fn parameter_missing() {
    spoiled(|f| f.parameters[2].0 = "XX", &["no group parameter WW", "UU---SIN"]);
}

#[test]
fn scale_of_zero() {
    spoiled(|f| f.parameters[1].1 = 0.0, &["PSCAL2", "not zero"]);
}

#[test]
fn no_usable_visibility() {
    let flag = |f: &mut Groups| f.groups.iter_mut().for_each(|g| (0..6).for_each(|c| g[6 + 3 * c + 2] = -1.0));
    spoiled(flag, &["no usable visibility", "positive weight"]);
}

#[test]
fn only_autocorrelations() {
    spoiled(|f| f.groups.iter_mut().for_each(|g| g[3] = 257.0), &["no usable visibility"]);
}

#[test]
fn station_not_in_the_table() {
    spoiled(|f| f.groups[4][3] = 256.0 * 2.0 + 9.0, &["group 5", "station number 9", "not in the station table"]);
}

#[test]
fn baseline_that_is_no_number() {
    spoiled(|f| f.groups[4][3] = f64::NAN, &["group 5", "station number NaN"]);
}

#[test]
fn no_station_table() {
    spoiled(|f| f.stations.clear(), &["no station table", "AN"]);
}

#[test]
fn a_single_station() {
    spoiled(|f| f.stations.truncate(1), &["1 stations", "at least 2"]);
}

#[test]
fn station_twice() {
    spoiled(|f| f.stations[2].0 = 2, &["TEST AN", "row 3", "NOSTA = 2 stands there twice"]);
}

#[test]
fn station_without_position() {
    spoiled(|f| f.stations[2].1[0] = f64::NAN, &["TEST AN", "row 3", "STABXYZ"]);
}

#[test]
fn zero_frequency() {
    spoiled(|f| f.axes[2].2 = 0.0, &["channel 1 of band 1", "0 Hz", "above 0"]);
}

#[test]
fn negative_frequency() {
    spoiled(|f| f.axes[2].2 = -1.4e9, &["channel 1 of band 1", "-1400000000 Hz"]);
}

#[test]
fn zero_channel_width() {
    spoiled(|f| f.bands[0].1 = 0.0, &["band 1", "0 Hz wide"]);
}

#[test]
fn bands_without_a_frequency_table() {
    let two = |f: &mut Groups| {
        (f.axes[2].1, f.axes[3].1) = (1, 3);
        f.bands.clear();
    };
    spoiled(two, &["3 bands", "no frequency table"]);
}

#[test]
fn uvw_that_are_no_numbers() {
    spoiled(|f| f.groups[2][1] = f64::NAN, &["group 3", "u, v, w", "NaN", "finite"]);
}

#[test]
fn infinite_uvw() {
    spoiled(|f| f.groups[2][0] = f64::INFINITY, &["group 3", "u, v, w", "inf"]);
}

#[test]
fn uvw_that_are_no_numbers_in_an_unused_row_are_passed_over() {
    let folder = folder();
    let mut file = Groups::sound();
    file.groups[2][1] = f64::NAN;
    (0..6).for_each(|c| file.groups[2][6 + 3 * c + 2] = 0.0);
    let mut source = open(file.write(folder.path()), &Selection::All).unwrap().remove(0);
    assert_eq!(MemorySource::read(source.as_mut()).unwrap().blocks()[0].rows(), 11);
    assert!(source.observation().notes.iter().any(|n| n.contains("1 rows have neither")));
}

#[test]
fn impossible_date() {
    spoiled(|f| f.groups[1][4] = -DAY, &["group 2", "MJD", "Julian Date"]);
}

#[test]
fn old_equinox() {
    spoiled(|f| f.cards[1] = "EQUINOX =               1950.0".into(), &["equinox 1950", "expected equinox 2000"]);
}

#[test]
fn declination_beyond_the_pole() {
    spoiled(|f| f.axes[5].2 = 91.0, &["phase centre", "declination 91"]);
}

#[test]
fn source_without_a_row_in_the_source_table() {
    let sources = |f: &mut Groups| {
        f.parameters.push(("SOURCE", 1.0, 0.0));
        f.sources = vec![(1, "A", 150.0, 30.0), (2, "B", 151.0, 30.0)];
        f.groups.iter_mut().enumerate().for_each(|(n, g)| g.insert(6, if n == 7 { 5.0 } else { 1.0 }));
    };
    spoiled(sources, &["group 8", "SOURCE is 5", "one of 1, 2"]);
}

#[test]
fn several_sources_without_a_source_table() {
    let sources = |f: &mut Groups| {
        f.parameters.push(("SOURCE", 1.0, 0.0));
        f.groups.iter_mut().enumerate().for_each(|(n, g)| g.insert(6, if n == 7 { 5.0 } else { 1.0 }));
    };
    spoiled(sources, &["group 8", "SOURCE is 5, in the rows before it was 1", "source table"]);
}

#[test]
fn an_image_is_not_a_visibility_file() {
    let folder = folder();
    let path = folder.path().join("image.fits");
    evensky::fits::write_image_f32(&path, &evensky::fits::Header::new(), &[2, 2], &[0.0; 4]).unwrap();
    must_say(&complaint(&path), &["image.fits", "no random groups", "FITS-IDI"]);
}

#[test]
fn the_file_cut_short_while_it_is_read() {
    let folder = folder();
    let mut file = Groups::sound();
    file.groups = file.groups.iter().cycle().take(12_000).cloned().collect();
    let path = file.write(folder.path());
    let mut source = open(&path, &Selection::All).unwrap().remove(0);
    std::fs::OpenOptions::new().write(true).open(&path).unwrap().set_len(100_000).unwrap();
    let message = MemorySource::read(source.as_mut()).unwrap_err().to_string();
    must_say(&message, &["test.uvfits", "could not be read"]);
}
