//! Sound visibility files: what is read must be what was packed, or what astropy reads.

mod fits_support;

use evensky::fits::Value;
use evensky::observation::{
    BlockSource, Hand, MemorySource, Mount, ReadOptions, SPEED_OF_LIGHT, Selection, baseline_uvw, open, open_with,
    write_idi,
};
use fits_support::{CENTRE, DAY, Groups, OFFSETS, folder, seconds};
use num_complex::Complex32;
use std::path::{Path, PathBuf};

fn hollin_fell(n: usize) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join(format!("tests/data/hollin-fell/fell-{n}-clean.uvfits"))
}

fn only(path: &Path) -> MemorySource {
    let mut sources = open(path, &Selection::All).unwrap_or_else(|e| panic!("{e}"));
    assert_eq!(sources.len(), 1);
    MemorySource::read(sources[0].as_mut()).unwrap_or_else(|e| panic!("{e}"))
}

fn has_note(source: &dyn BlockSource, words: &str) -> bool {
    source.observation().notes.iter().any(|note| note.contains(words))
}

/// Expected numbers: astropy 8.0.2, `fits.open(f)[0].data` and the tables' own cells.
#[test]
fn hollin_fell_as_astropy_reads_it() {
    struct Expected {
        usable: usize,
        unused: usize,
        weight_sum: f64,
        data_sum: (f64, f64),
        date: (f64, f64),
        name: &'static str,
        centre_deg: (f64, f64),
        row_1000: (Complex32, f64),
    }
    let files = [
        Expected {
            usable: 25284,
            unused: 924,
            weight_sum: 6165120.0,
            data_sum: (-1002.3047414891189, -2107.23238670922),
            date: (2451548.398333311, 2451548.5900000334),
            name: "P1",
            centre_deg: (152.3, 41.7),
            row_1000: (Complex32::new(0.18134527, 0.21319471), 9.823789923757431e-07),
        },
        Expected {
            usable: 25380,
            unused: 828,
            weight_sum: 6207552.0,
            data_sum: (429.06651549536036, -363.9758113704447),
            date: (2451548.401111126, 2451548.592777729),
            name: "P2",
            centre_deg: (153.0589575246904, 41.7),
            row_1000: (Complex32::new(0.32047752, -0.6662387), 9.833083822741173e-07),
        },
        Expected {
            usable: 25440,
            unused: 768,
            weight_sum: 6221184.0,
            data_sum: (-430.2752194396114, -250.42100390770702),
            date: (2451548.403888881, 2451548.595555544),
            name: "P3",
            centre_deg: (152.6794787623452, 42.190733333333334),
            row_1000: (Complex32::new(-0.72476774, 0.015481776), 9.882403446681565e-07),
        },
    ];
    for (n, expected) in files.iter().enumerate() {
        let source = only(&hollin_fell(n + 1));
        let seen = source.observation();
        assert_eq!((seen.name.as_str(), seen.array_name.as_str()), (expected.name, "HOLLIN"));
        assert_eq!(seen.hands, [Hand::XX, Hand::YY]);
        assert_eq!(seen.frequencies_hz, [1.30e9, 1.32e9, 1.34e9, 1.36e9, 1.38e9, 1.40e9]);
        assert_eq!(seen.widths_hz, [2e7; 6]);
        let (ra, dec) = seen.phase_centre.to_deg();
        // One rounding each way between degrees and radians.
        assert!((ra - expected.centre_deg.0).abs() < 1e-12 && (dec - expected.centre_deg.1).abs() < 1e-12);
        assert!(seen.aim.separation(seen.phase_centre) < 1e-12);

        let names: Vec<&str> = seen.stations.iter().map(|s| s.name.as_str()).collect();
        let array = [
            "HF01", "HF02", "HF03", "HF04", "HF05", "HF06", "HF07", "HF08", "HF09", "LF01", "LF02", "LF03", "LF04",
            "LF05",
        ];
        assert_eq!(names, array);
        assert!(seen.stations.iter().all(|s| s.mount == Mount::AltAzimuth && s.feed_angle == 0.0));
        let diameters: Vec<_> = seen.stations.iter().filter_map(|s| s.diameter_m).collect();
        assert_eq!(diameters, [[13.0; 9].as_slice(), &[8.0; 5]].concat());
        let first =
            [3716338.3503520824 + 2.82469811, -188261.57930318202 - 182.14785596, 5162788.134154688 - 10.28495973];
        for (got, want) in seen.stations[0].position_m.iter().zip(first) {
            assert!((got - want).abs() < 1e-7, "{got} against {want}"); // eight printed decimals
        }
        assert!(has_note(&source, "in Earth-fixed axes"), "{:?}", seen.notes);

        let mut count = (0, 0);
        let (mut weights, mut sum, mut rows) = (0.0, (0.0, 0.0), 0);
        let (mut earliest, mut latest) = (f64::INFINITY, f64::NEG_INFINITY);
        for block in source.blocks() {
            rows += block.rows();
            count.0 += block.weight.iter().filter(|w| **w > 0.0).count();
            count.1 += block.weight.iter().filter(|w| **w == 0.0).count();
            weights += block.weight.iter().map(|w| f64::from(*w)).sum::<f64>();
            sum.0 += block.data.iter().map(|v| f64::from(v.re)).sum::<f64>();
            sum.1 += block.data.iter().map(|v| f64::from(v.im)).sum::<f64>();
            earliest = block.mjd_utc.iter().copied().fold(earliest, f64::min);
            latest = block.mjd_utc.iter().copied().fold(latest, f64::max);
        }
        assert_eq!((rows, count), (2184, (expected.usable, expected.unused)));
        assert_eq!(weights, expected.weight_sum);
        // The order of summation differs: 26208 terms of order 1 in f64.
        assert!(
            (sum.0 - expected.data_sum.0).abs() < 1e-8 && (sum.1 - expected.data_sum.1).abs() < 1e-8,
            "{sum:?}"
        );
        // astropy's Julian Dates are f64 (5e-10 day), for two of the files sums of f32.
        for (got, want) in [(earliest, expected.date.0), (latest, expected.date.1)] {
            assert!((got + 2_400_000.5 - want).abs() < 1e-9, "{got} against {want}");
        }
        let block = &source.blocks()[0];
        let at = block.index(1000, 3) + 1;
        assert_eq!((block.data[at], block.weight[at]), (expected.row_1000.0, 64.0));
        assert_eq!(block.uvw_m[1000][0], -SPEED_OF_LIGHT * expected.row_1000.1);
        assert_eq!((block.first[1000], block.second[1000]), (12, 13)); // BASELINE 3342 = 256·13 + 14
    }
}

/// Every row's u, v, w must follow from the station table; the rest is f32 rounding (6e-8) and what is left out of
/// the time system (UT1, polar motion: the simulated file has neither).
#[test]
fn hollin_fell_baselines_follow_from_the_stations() {
    let source = only(&hollin_fell(1));
    let seen = source.observation();
    let frame = seen.phase_centre.frame();
    let mut worst = 0.0f64;
    for block in source.blocks() {
        for row in 0..block.rows() {
            let [p, q] = [block.first[row], block.second[row]].map(|s| seen.stations[s as usize].position_m);
            let b = [0, 1, 2].map(|i| q[i] - p[i]);
            let uvw = baseline_uvw(b, &frame, block.mjd_utc[row], seen.ut1_utc_s);
            let off = (0..3).map(|i| (uvw[i] - block.uvw_m[row][i]).powi(2)).sum::<f64>().sqrt();
            worst = worst.max(off / b.iter().map(|x| x * x).sum::<f64>().sqrt());
        }
    }
    println!("largest disagreement {worst:.2e} of the baseline");
    assert!(worst < 1e-4, "{worst}"); // 20 arcsec: aberration and frame left out by one side
}

#[test]
fn the_packed_values_come_back() {
    let folder = folder();
    let source = only(&Groups::sound().write(folder.path()));
    let seen = source.observation();
    assert_eq!(seen.frequencies_hz, [1.4e9, 1.401e9, 1.402e9]);
    assert_eq!((seen.ut1_utc_s, seen.name.as_str(), seen.array_name.as_str()), (-0.2, "FIELD A", "TESTARR"));
    assert!((seen.stations[1].feed_angle - 15f64.to_radians()).abs() < 1e-7);
    let block = &source.blocks()[0];
    assert_eq!(block.rows(), 12);
    assert_eq!((block.mjd_utc[0], block.mjd_utc[11]), (DAY - 2_400_000.5 + 0.25, DAY - 2_400_000.5 + 0.5));
    assert_eq!(&block.first[..6], [0, 0, 0, 1, 1, 2]);
    assert_eq!(&block.second[..6], [1, 2, 3, 2, 3, 3]);
    // Group 7 is the first of the second time, stations 0 and 1: values 106 + cell.
    let at = block.index(6, 2) + 1;
    assert_eq!(block.data[at], Complex32::new(111.0, -111.0 / 8.0));
    assert!(block.weight.iter().all(|w| *w == 4.0));
    let expected = seconds(0, 1, DAY + 0.25).map(|x| -SPEED_OF_LIGHT * f64::from(x as f32));
    assert_eq!(block.uvw_m[0], expected);
}

#[test]
fn small_blocks_and_rewinding_give_the_same_rows() {
    let whole = only(&hollin_fell(2));
    let options = ReadOptions { block_bytes: 300_000 };
    let mut source = open_with(hollin_fell(2), &Selection::All, options).unwrap().remove(0);
    for _pass in 0..2 {
        source.rewind().unwrap();
        let (mut rows, mut blocks) = (0, 0);
        while let Some(block) = source.next_block().unwrap() {
            let from = &whole.blocks()[0];
            let cells = block.channels * block.hands;
            assert_eq!(block.data, from.data[rows * cells..][..block.data.len()]);
            assert_eq!(block.weight, from.weight[rows * cells..][..block.weight.len()]);
            assert_eq!(block.uvw_m, from.uvw_m[rows..][..block.rows()]);
            rows += block.rows();
            blocks += 1;
        }
        assert!(rows == 2184 && blocks > 10, "{rows} rows in {blocks} blocks");
    }
}

#[test]
fn weights_that_mean_unused() {
    let folder = folder();
    let mut file = Groups::sound();
    let stated = [-4.0, 0.0, f64::NAN, f64::INFINITY, 4.0, 4.0];
    for (cell, weight) in stated.into_iter().enumerate() {
        file.groups[0][6 + 3 * cell + 2] = weight;
    }
    file.groups[0][6 + 3 * 4] = f64::NAN; // real part
    file.groups[0][6 + 3 * 5 + 1] = f64::NEG_INFINITY; // imaginary part
    let source = only(&file.write(folder.path()));
    let block = &source.blocks()[0];
    assert_eq!(&block.weight[..7], [0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 4.0]);
    assert!(block.data.iter().all(|v| v.re.is_finite() && v.im.is_finite()));
    assert_eq!(block.data[0], Complex32::new(6.0, -0.75)); // a flagged value that is finite stays visible
}

#[test]
fn no_weight_plane_means_weight_one() {
    let folder = folder();
    let mut file = Groups::sound();
    file.axes[0].1 = 2;
    for group in &mut file.groups {
        let array = group.split_off(6);
        group.extend(array.chunks(3).flat_map(|cell| [cell[0], cell[1]]));
    }
    let source = only(&file.write(folder.path()));
    assert!(source.blocks()[0].weight.iter().all(|w| *w == 1.0));
    assert_eq!(source.blocks()[0].data[1], Complex32::new(7.0, -0.875));
    assert!(has_note(&source, "no weights"));
}

/// FITS Standard 4.0 §6.2: physical = stored · PSCAL + PZERO, also for integers with BSCALE and BZERO.
#[test]
fn integers_are_scaled() {
    let folder = folder();
    let mut file = Groups::sound();
    file.bitpix = 32;
    file.cards.push(format!("BSCALE  = {:>20}", 0.125));
    file.cards.push(format!("BZERO   = {:>20}", -8.0));
    file.cards.push(format!("BLANK   = {:>20}", -999));
    let scales = [1e-15, 1e-15, 1e-15, 1.0, 1.0, 1e-9];
    for (parameter, scale) in file.parameters.iter_mut().zip(scales) {
        parameter.1 = scale;
    }
    for group in &mut file.groups {
        for (n, stored) in group.iter_mut().enumerate() {
            *stored = if n < 6 { *stored / scales[n] } else { (*stored + 8.0) / 0.125 };
        }
    }
    file.groups[0][6] = -999.0;
    let source = only(&file.write(folder.path()));
    let block = &source.blocks()[0];
    assert_eq!(block.weight[0], 0.0, "BLANK");
    assert_eq!(&block.weight[1..6], [4.0; 5]);
    assert_eq!(block.data[1], Complex32::new(7.0, -0.875));
    let expected = seconds(0, 1, DAY + 0.25).map(|x| -SPEED_OF_LIGHT * x);
    for (got, want) in block.uvw_m[0].iter().zip(expected) {
        assert!((got - want).abs() < 1e-15 * SPEED_OF_LIGHT, "half a unit of 1e-15 s");
    }
    assert!((block.mjd_utc[0] - (DAY - 2_400_000.5 + 0.25)).abs() < 1e-9);
}

#[test]
fn names_match_before_the_dashes() {
    for names in [["UU", "VV", "WW"], ["UU--", "VV--", "WW--"], ["UU-L-SIN", "VV-L-SIN", "WW-L-SIN"]] {
        let folder = folder();
        let mut file = Groups::sound();
        for (parameter, name) in file.parameters.iter_mut().zip(names) {
            parameter.0 = name;
        }
        assert_eq!(only(&file.write(folder.path())).blocks()[0].rows(), 12, "{names:?}");
    }
}

/// Station numbers past 255 use 65536 + 2048·first + second.
#[test]
fn both_baseline_encodings() {
    let folder = folder();
    let mut file = Groups::sound();
    file.stations[3].0 = 300;
    for group in &mut file.groups {
        let number = |n: f64| if n == 4.0 { 300.0 } else { n };
        let (first, second) = (number((group[3] / 256.0).floor()), number(group[3] % 256.0));
        group[3] = if second > 255.0 { 65_536.0 + 2048.0 * first + second } else { 256.0 * first + second };
    }
    let source = only(&file.write(folder.path()));
    assert_eq!(&source.blocks()[0].second[..6], [1, 2, 3, 2, 3, 3]);
    assert_eq!(source.observation().stations[3].name, "S300");
}

#[test]
fn separate_station_parameters() {
    let folder = folder();
    let mut file = Groups::sound();
    file.parameters[3] = ("ANTENNA1", 1.0, 0.0);
    file.parameters.push(("ANTENNA2", 1.0, 0.0));
    file.parameters.push(("SUBARRAY", 1.0, 0.0));
    for group in &mut file.groups {
        let baseline = group[3];
        group[3] = (baseline / 256.0).floor();
        group.insert(6, baseline % 256.0);
        group.insert(7, 1.0);
    }
    let source = only(&file.write(folder.path()));
    assert_eq!(&source.blocks()[0].first[..6], [0, 0, 0, 1, 1, 2]);
    assert_eq!(&source.blocks()[0].second[..6], [1, 2, 3, 2, 3, 3]);
}

/// V_qp = V_pq^H: a row that names the later station first is turned, its crossed hands exchanged.
#[test]
fn reversed_rows_are_turned() {
    let folder = folder();
    let mut file = Groups::sound();
    file.axes[1] = ("STOKES", 4, -5.0, -1.0);
    file.axes[2].1 = 1;
    for group in &mut file.groups {
        group.truncate(6);
        group.extend([1.0, 10.0, 4.0, 2.0, 20.0, 5.0, 3.0, 30.0, 6.0, 4.0, 40.0, 7.0]);
    }
    file.groups[0][3] = 256.0 * 2.0 + 1.0;
    (0..3).for_each(|i| file.groups[0][i] = -file.groups[0][i]);
    let source = only(&file.write(folder.path()));
    let block = &source.blocks()[0];
    assert_eq!(source.observation().hands, [Hand::XX, Hand::YY, Hand::XY, Hand::YX]);
    assert_eq!((block.first[0], block.second[0]), (0, 1));
    let turned = [(1.0, -10.0), (2.0, -20.0), (4.0, -40.0), (3.0, -30.0)].map(|(re, im)| Complex32::new(re, im));
    assert_eq!(block.data[..4], turned);
    assert_eq!(block.weight[..4], [4.0, 5.0, 7.0, 6.0]);
    assert_eq!(block.uvw_m[0], seconds(0, 1, DAY + 0.25).map(|x| -SPEED_OF_LIGHT * f64::from(x as f32)));
    assert_eq!(block.data[4], Complex32::new(1.0, 10.0)); // the next row was in order
    assert!(has_note(&source, "1 rows name the later station"));
}

#[test]
fn autocorrelations_are_skipped_and_counted() {
    let folder = folder();
    let mut file = Groups::sound();
    for n in 1..=4 {
        let mut group = file.groups[0].clone();
        group[3] = 257.0 * f64::from(n);
        file.groups.insert(3, group);
    }
    let source = only(&file.write(folder.path()));
    assert_eq!(source.blocks()[0].rows(), 12);
    let mut again = open(file.write(folder.path()), &Selection::All).unwrap().remove(0);
    while again.next_block().unwrap().is_some() {}
    assert!(has_note(again.as_ref(), "4 rows are autocorrelations"), "{:?}", again.observation().notes);
}

/// Bands follow each other in file order; a lower sideband falls with channel number.
#[test]
fn several_bands_flatten_in_file_order() {
    let folder = folder();
    let mut file = Groups::sound();
    file.axes[3].1 = 2;
    file.bands = vec![(0.0, 1e6, 1), (5e7, 5e5, -1)];
    for group in &mut file.groups {
        let array = group[6..].to_vec();
        group.extend(array.iter().enumerate().map(|(n, v)| if n % 3 == 2 { 9.0 } else { *v }));
    }
    let source = only(&file.write(folder.path()));
    let seen = source.observation();
    assert_eq!(seen.frequencies_hz, [1.4e9, 1.401e9, 1.402e9, 1.45e9, 1.4495e9, 1.449e9]);
    assert_eq!(seen.widths_hz, [1e6, 1e6, 1e6, 5e5, 5e5, 5e5]);
    assert_eq!(source.blocks()[0].weight[..12], [[4.0; 6], [9.0; 6]].concat());
}

/// Any order of STOKES, FREQ and IF is found by CTYPE.
#[test]
fn axes_in_another_order() {
    let folder = folder();
    let mut file = Groups::sound();
    file.axes = vec![file.axes[0], file.axes[3], file.axes[2], file.axes[4], file.axes[1], file.axes[5]];
    for group in &mut file.groups {
        let array = group.split_off(6); // hand fastest
        for hand in 0..2 {
            (0..3).for_each(|channel| group.extend(&array[(channel * 2 + hand) * 3..][..3]));
        }
    }
    let moved = only(&file.write(folder.path()));
    let plain = only(&Groups::sound().write(folder.path()));
    assert_eq!(moved.blocks()[0].data, plain.blocks()[0].data);
}

/// The same array told in axes turned to its meridian (longitude 20°) must give the same positions.
#[test]
fn local_meridian_axes_are_recognised() {
    let folder = folder();
    let earth = only(&Groups::sound().write(folder.path()));
    assert!(has_note(&earth, "in Earth-fixed axes"), "{:?}", earth.observation().notes);
    let mut file = Groups::sound();
    let (sin, cos) = CENTRE[1].atan2(CENTRE[0]).sin_cos();
    for (station, [x, y, z]) in file.stations.iter_mut().zip(OFFSETS) {
        station.1 = [cos * x + sin * y, cos * y - sin * x, z];
    }
    let local = only(&file.write(folder.path()));
    assert!(has_note(&local, "turned to the local meridian"), "{:?}", local.observation().notes);
    for (a, b) in earth.observation().stations.iter().zip(&local.observation().stations) {
        for (x, y) in a.position_m.iter().zip(b.position_m) {
            assert!((x - y).abs() < 1e-8, "{x} against {y}"); // rounding of 6.4e6 m
        }
    }
}

#[test]
fn left_handed_tables_are_turned() {
    for stated in [true, false] {
        let folder = folder();
        let mut file = Groups::sound();
        file.stations.iter_mut().for_each(|s| s.1[1] = -s.1[1]);
        if stated {
            file.station_keys.push(("XYZHAND", Value::from("LEFT")));
        }
        let source = only(&file.write(folder.path()));
        assert!(has_note(&source, "left-handed Earth-fixed axes"), "{:?}", source.observation().notes);
        assert_eq!(source.observation().stations[1].position_m[1], CENTRE[1] + OFFSETS[1][1]);
    }
}

#[test]
fn a_table_that_fits_in_no_axes_is_noted_with_its_residual() {
    let folder = folder();
    let mut file = Groups::sound();
    file.stations.iter_mut().for_each(|s| s.1.rotate_left(1));
    let source = only(&file.write(folder.path()));
    assert!(has_note(&source, "do not fit in any axes"), "{:?}", source.observation().notes);
}

#[test]
fn uvw_of_the_opposite_sign_are_noted_and_other_units_converted() {
    let folder = folder();
    let mut file = Groups::sound();
    file.groups.iter_mut().for_each(|g| (0..3).for_each(|i| g[i] = -g[i]));
    assert!(has_note(&only(&file.write(folder.path())), "opposite sign"));

    for (factor, name) in [(SPEED_OF_LIGHT, "metres"), (1.4e9, "wavelengths")] {
        let mut file = Groups::sound();
        file.groups.iter_mut().for_each(|g| (0..3).for_each(|i| g[i] *= factor));
        let source = only(&file.write(folder.path()));
        assert!(has_note(&source, name), "{:?}", source.observation().notes);
        let expected = seconds(0, 1, DAY + 0.25).map(|x| -SPEED_OF_LIGHT * x);
        for (got, want) in source.blocks()[0].uvw_m[0].iter().zip(expected) {
            assert!((got - want).abs() < 1e-4, "{got} against {want} m"); // f32 of some hundred metres
        }
    }
}

#[test]
fn atomic_time_is_taken_back_to_utc() {
    let folder = folder();
    let mut file = Groups::sound();
    file.station_keys = vec![("TIMSYS", Value::from("IAT")), ("IATUTC", Value::from(37.0))];
    let source = only(&file.write(folder.path()));
    let expected = DAY - 2_400_000.5 + 0.25 - 37.0 / 86_400.0;
    assert!((source.blocks()[0].mjd_utc[0] - expected).abs() < 1e-10);
}

fn two_sources() -> Groups {
    let mut file = Groups::sound();
    file.parameters.push(("SOURCE", 1.0, 0.0));
    file.sources = vec![(3, "NORTH", 150.0, 30.0), (7, "SOUTH", 151.0, 29.0), (9, "EMPTY", 152.0, 28.0)];
    for (n, group) in file.groups.iter_mut().enumerate() {
        group.insert(6, if n % 4 == 3 { 7.0 } else { 3.0 });
    }
    file
}

#[test]
fn sources_become_pointings() {
    let folder = folder();
    let path = two_sources().write(folder.path());
    let mut all = open(&path, &Selection::All).unwrap();
    let names: Vec<_> = all.iter().map(|s| s.observation().name.clone()).collect();
    assert_eq!(names, ["NORTH", "SOUTH"]); // nothing of the third was observed
    let north = MemorySource::read(all[0].as_mut()).unwrap();
    let south = MemorySource::read(all[1].as_mut()).unwrap();
    assert_eq!((north.blocks()[0].rows(), south.blocks()[0].rows()), (9, 3));
    assert_eq!(south.blocks()[0].data[0], Complex32::new(32.0, -4.0)); // stations 1 and 2: 20 + 12
    let (ra, dec) = south.observation().phase_centre.to_deg();
    assert!((ra - 151.0).abs() < 1e-12 && (dec - 29.0).abs() < 1e-12);

    let mut picked = open(&path, &Selection::named("SOUTH")).unwrap();
    assert_eq!(picked.len(), 1);
    assert_eq!(MemorySource::read(picked[0].as_mut()).unwrap().blocks()[0].data, south.blocks()[0].data);
}

#[test]
fn an_unknown_source_lists_the_known_ones() {
    let folder = folder();
    let message = match open(two_sources().write(folder.path()), &Selection::named("WEST")) {
        Ok(_) => panic!("found a source that is not there"),
        Err(error) => error.to_string(),
    };
    for part in ["test.uvfits", "WEST", "NORTH, SOUTH, EMPTY"] {
        assert!(message.contains(part), "{message}");
    }
}

fn assert_same(written: &MemorySource, read: &MemorySource) {
    let (a, b) = (written.observation(), read.observation());
    assert_eq!((&a.name, &a.array_name, &a.hands), (&b.name, &b.array_name, &b.hands));
    assert_eq!(a.stations.len(), b.stations.len());
    for (x, y) in a.stations.iter().zip(&b.stations) {
        assert_eq!((&x.name, x.position_m, x.mount, x.diameter_m), (&y.name, y.position_m, y.mount, y.diameter_m));
        assert!((x.feed_angle - y.feed_angle).abs() < 1e-6); // POLAA holds f32 degrees
    }
    for (x, y) in a.frequencies_hz.iter().zip(&b.frequencies_hz).chain(a.widths_hz.iter().zip(&b.widths_hz)) {
        assert!((x - y).abs() <= 1e-14 * x, "{x} against {y}");
    }
    assert!(a.phase_centre.separation(b.phase_centre) < 1e-15 && a.aim.separation(b.aim) < 1e-15);
    let bits = |source: &MemorySource| -> Vec<[u32; 3]> {
        let blocks = source.blocks().iter();
        blocks.flat_map(|b| b.data.iter().zip(&b.weight)).map(|(v, w)| [v.re, v.im, *w].map(f32::to_bits)).collect()
    };
    assert_eq!(bits(written), bits(read), "data and weights bit for bit");
    let rows = |source: &MemorySource| -> Vec<(f64, [f64; 3], u32, u32)> {
        let each = source.blocks().iter().flat_map(|b| (0..b.rows()).map(move |r| (b, r)));
        each.map(|(b, r)| (b.mjd_utc[r], b.uvw_m[r], b.first[r], b.second[r])).collect()
    };
    for (x, y) in rows(written).iter().zip(rows(read)) {
        assert_eq!((x.0, x.2, x.3), (y.0, y.2, y.3));
        (0..3).for_each(|i| assert!((x.1[i] - y.1[i]).abs() <= 1e-9 * x.1[i].abs()));
    }
}

/// All three pointings into one FITS-IDI file and back.
#[test]
fn fits_idi_gives_back_what_was_written() {
    let folder = folder();
    let path = folder.path().join("fell.idifits");
    let mut written: Vec<MemorySource> = (1..=3).map(|n| only(&hollin_fell(n))).collect();
    let mut pointings: Vec<&mut dyn BlockSource> = written.iter_mut().map(|s| s as &mut dyn BlockSource).collect();
    write_idi(&path, &mut pointings).unwrap();
    let mut read = open(&path, &Selection::All).unwrap();
    assert_eq!(read.len(), 3);
    for (written, read) in written.iter().zip(&mut read) {
        assert_same(written, &MemorySource::read(read.as_mut()).unwrap());
        assert!(has_note(read.as_ref(), "in Earth-fixed axes"), "{:?}", read.observation().notes);
    }
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1, "nothing left beside the file");
}

#[test]
fn fits_idi_of_irregular_channels_and_crossed_hands() {
    let folder = folder();
    let original = only(&Groups::sound().write(folder.path()));
    let mut observation = original.observation().clone();
    observation.frequencies_hz = vec![1.4e9, 1.4123456789e9, 1.39e9];
    observation.widths_hz = vec![1e6, 2e6, 5e5];
    observation.hands = vec![Hand::YX, Hand::XX];
    let mut odd = MemorySource::new(observation.clone(), original.blocks().to_vec());
    let path = folder.path().join("odd.idifits");
    let refused = write_idi(&path, &mut [&mut odd]);
    assert!(refused.is_ok(), "-5 and -8 are evenly spaced: {refused:?}");
    let mut read = open(&path, &Selection::All).unwrap();
    let read = MemorySource::read(read[0].as_mut()).unwrap();
    assert_eq!(read.observation().hands, [Hand::XX, Hand::YX]);
    assert_eq!(read.blocks()[0].data[0], original.blocks()[0].data[1], "hands in the order of their codes");
    for (x, y) in observation.frequencies_hz.iter().zip(&read.observation().frequencies_hz) {
        assert!((x - y).abs() <= 1e-14 * x, "{x} against {y}");
    }
    assert_eq!(read.observation().widths_hz, [1e6, 2e6, 5e5]);
}
