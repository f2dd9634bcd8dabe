//! How fast random groups become blocks, against a memory copy of the same bytes in the same run.
//!
//! `cargo bench --bench fits_read`: best of several passes each, and their ratio (1 is as fast as the copy). The file
//! is read from the page cache: what is measured is the conversion, not the disk.

use evensky::fits::{ColumnSpec, FitsWriter, Header};
use evensky::observation::{Selection, open};
use std::hint::black_box;
use std::io::Write;
use std::path::Path;
use std::time::Instant;

const PASSES: usize = 31;
const STATIONS: usize = 32;

/// A file of about `megabytes` with `channels` channels and two hands.
fn make(path: &Path, megabytes: usize, channels: usize) -> u64 {
    let group = 6 + 3 * 2 * channels;
    let groups = (megabytes << 20) / (4 * group);
    let mut cards = vec![
        "SIMPLE  =                    T".to_string(),
        "BITPIX  =                  -32".to_string(),
        "NAXIS   =                    6".to_string(),
        "NAXIS1  =                    0".to_string(),
    ];
    let axes = [
        ("COMPLEX", 3, 1.0, 1.0),
        ("STOKES", 2, -5.0, -1.0),
        ("FREQ", channels, 1.4e9, 1e6),
        ("RA", 1, 10.0, 1.0),
        ("DEC", 1, 20.0, 1.0),
    ];
    for (n, (name, length, value, step)) in axes.into_iter().enumerate() {
        let n = n + 2;
        cards.push(format!("NAXIS{n}  = {length:>20}"));
        cards.push(format!("CTYPE{n}  = '{name:<8}'"));
        cards.push(format!("CRVAL{n}  = {value:>20.3}"));
        cards.push(format!("CDELT{n}  = {step:>20.3}"));
        cards.push(format!("CRPIX{n}  = {:>20.3}", 1.0));
    }
    cards.push("GROUPS  =                    T".to_string());
    cards.push("PCOUNT  =                    6".to_string());
    cards.push(format!("GCOUNT  = {groups:>20}"));
    for (n, name) in ["UU", "VV", "WW", "BASELINE", "DATE", "DATE"].into_iter().enumerate() {
        cards.push(format!("PTYPE{}  = '{name:<8}'", n + 1));
    }
    cards.push("PZERO5  =            2458849.5".to_string());
    cards.push("EQUINOX =               2000.0".to_string());
    cards.push("END".to_string());
    let mut header: Vec<u8> = cards.iter().flat_map(|card| format!("{card:<80}").into_bytes()).collect();
    header.resize(header.len().next_multiple_of(2880), b' ');
    let mut file = std::io::BufWriter::new(std::fs::File::create(path).expect("a file"));
    file.write_all(&header).expect("space");
    let mut pair = (0, 1);
    for n in 0..groups {
        let mut numbers = vec![1e-7, 2e-7, 3e-7, (256 * (pair.0 + 1) + pair.1 + 1) as f32, 0.0, 0.5];
        numbers.extend((0..3 * 2 * channels).map(|i| 1.0 + ((n + i) % 97) as f32));
        let bytes: Vec<u8> = numbers.iter().flat_map(|x| x.to_be_bytes()).collect();
        file.write_all(&bytes).expect("space");
        pair = if pair.1 + 1 < STATIONS {
            (pair.0, pair.1 + 1)
        } else {
            ((pair.0 + 1) % (STATIONS - 1), (pair.0 + 1) % (STATIONS - 1) + 1)
        };
    }
    let written = groups * group * 4;
    file.write_all(&vec![0; written.next_multiple_of(2880) - written]).expect("space");
    let tables = path.with_extension("tables");
    let mut writer = FitsWriter::create(&tables).expect("a file");
    let columns =
        vec![ColumnSpec::text("ANNAME", 8), ColumnSpec::f64("STABXYZ", 3, ""), ColumnSpec::i32("NOSTA", 1, "")];
    writer.empty_primary(&Header::new()).expect("space");
    let mut table = writer.table("B AN", &Header::new(), columns, STATIONS).expect("space");
    for n in 0..STATIONS {
        table.text(&format!("S{n}")).expect("space");
        table.f64(&[6.4e6, n as f64 * 30.0, 0.0]).expect("space");
        table.i32(&[n as i32 + 1]).expect("space");
    }
    table.end().expect("space");
    writer.finish().expect("space");
    file.write_all(&std::fs::read(&tables).expect("the tables")[2880..]).expect("space");
    file.flush().expect("space");
    written as u64
}

/// The shortest of several passes, seconds.
fn best(mut pass: impl FnMut()) -> f64 {
    let time = |pass: &mut dyn FnMut()| {
        let start = Instant::now();
        pass();
        start.elapsed().as_secs_f64()
    };
    (0..PASSES).map(|_| time(&mut pass)).fold(f64::INFINITY, f64::min)
}

fn main() {
    let folder = tempfile::tempdir().expect("a folder");
    for (what, channels) in [("wide rows, 128 channels × 2 hands", 128), ("narrow rows, 3 channels × 2 hands", 3)]
    {
        let path = folder.path().join("bench.uvfits");
        let bytes = make(&path, 64, channels);
        let mut source = open(&path, &Selection::All).expect("a sound file").remove(0);
        let from: Vec<u8> = vec![1; bytes as usize];
        let mut to: Vec<u8> = vec![0; bytes as usize];
        let copy = best(|| {
            to.copy_from_slice(black_box(&from));
            black_box(&mut to);
        });
        let mut rows = 0;
        let read = best(|| {
            source.rewind().expect("a sound file");
            rows = 0;
            while let Some(block) = source.next_block().expect("a sound file") {
                rows += black_box(block).rows();
            }
        });
        let speed = |seconds: f64| bytes as f64 / seconds / 1e9;
        println!(
            "{what}: {:.0} MB, {rows} rows: read {:.2} GB/s, copy {:.2} GB/s, ratio {:.3} (at least 0.333 wanted)",
            bytes as f64 / 1e6,
            speed(read),
            speed(copy),
            copy / read
        );
    }
}
