//! Headers, images and tables: what is written comes back, and what stands in hand-packed files is read.

mod fits_support;

use evensky::fits::{ColumnSpec, FitsFile, FitsWriter, Header, Table, Value, write_image_f32, write_image_f64};
use fits_support::{folder, header};
use std::fs::File;
use std::io::{self, Write};
use std::path::Path;

/// An image file of the given BITPIX with raw big-endian data.
fn packed(folder: &Path, bitpix: i32, cards: &[&str], axes: &[usize], data: &[u8]) -> std::path::PathBuf {
    let mut all = vec!["SIMPLE  =                    T".to_string(), format!("BITPIX  = {bitpix:>20}")];
    all.push(format!("NAXIS   = {:>20}", axes.len()));
    all.extend(axes.iter().enumerate().map(|(n, a)| format!("NAXIS{:<3}= {a:>20}", n + 1)));
    all.extend(cards.iter().map(|c| c.to_string()));
    let mut bytes = header(&all);
    bytes.extend(data);
    bytes.resize(bytes.len().next_multiple_of(2880), 0);
    let path = folder.join("packed.fits");
    std::fs::write(&path, bytes).unwrap();
    path
}

#[test]
fn every_bitpix_is_read() {
    let folder = folder();
    let check = |bitpix: i32, data: &[u8], expected: &[f64]| {
        let path = packed(folder.path(), bitpix, &[], &[3], data);
        assert_eq!(FitsFile::open(path).unwrap().image_f64(0).unwrap(), expected, "BITPIX {bitpix}");
    };
    check(8, &[0, 1, 255], &[0.0, 1.0, 255.0]);
    check(16, &[0, 1, 0x80, 0, 0xff, 0xff], &[1.0, -32768.0, -1.0]);
    check(32, &[0, 0, 0, 1, 0x7f, 0xff, 0xff, 0xff, 0xff, 0xff, 0xff, 0xfe], &[1.0, 2147483647.0, -2.0]);
    check(64, &[1i64, -5, 1 << 40].map(i64::to_be_bytes).concat(), &[1.0, -5.0, 1099511627776.0]);
    check(-32, &[0.5f32, -1e-30, 3.25].map(f32::to_be_bytes).concat(), &[0.5, f64::from(-1e-30f32), 3.25]);
    check(-64, &[0.1f64, -1e-300, 3.25].map(f64::to_be_bytes).concat(), &[0.1, -1e-300, 3.25]);
}

/// FITS Standard 4.0 §4.4.2.5: physical = BZERO + BSCALE · stored; BLANK marks undefined integers; BZERO = 32768 makes
/// unsigned ones.
#[test]
fn images_are_scaled_and_blanked() {
    let folder = folder();
    let data = [-7i16, 0, 100].map(i16::to_be_bytes).concat();
    let cards =
        ["BSCALE  =                 0.25", "BZERO   =                -10.0", "BLANK   =                   -7"];
    let pixels = FitsFile::open(packed(folder.path(), 16, &cards, &[3], &data)).unwrap().image_f64(0).unwrap();
    assert!(pixels[0].is_nan());
    assert_eq!(pixels[1..], [-10.0, 15.0]);
    let unsigned = packed(folder.path(), 16, &["BZERO   =                32768"], &[3], &data);
    assert_eq!(FitsFile::open(unsigned).unwrap().image_f32(0).unwrap(), [32761.0, 32768.0, 32868.0]);
}

#[test]
fn values_as_people_write_them() {
    let folder = folder();
    let cards = [
        "STRING  = 'it''s here  '      / with a / and a '' in it",
        "EMPTY   = ''",
        "LONG    = 'first half, &'",
        "CONTINUE  'second&' / not yet",
        "CONTINUE  ' half'",
        "YES     = T / tight",
        "NO      =                    F",
        "COUNT   =                  -42 / number",
        "OLDREAL =            1.25D-003",
        "HUGE    =                1E400",
        "NOTNUM  =                  NAN",
        "BARE    =",
        "OPEN    = 'never closed",
        "HISTORY made by hand",
        "COMMENT = 'not a value'",
        "TWICE   =                    1",
        "TWICE   =                    2",
        "LAST    = 'ends in &'",
    ];
    let file = FitsFile::open(packed(folder.path(), 8, &cards, &[1], &[0])).unwrap();
    let header = &file.hdus()[0].header;
    let text = |key: &str| header.text(key).unwrap();
    assert_eq!(text("STRING").as_deref(), Some("it's here"));
    assert_eq!(text("EMPTY").as_deref(), Some(""));
    assert_eq!(text("LONG").as_deref(), Some("first half, second half"));
    assert_eq!(text("LAST").as_deref(), Some("ends in &"));
    assert_eq!((header.logical("YES").unwrap(), header.logical("NO").unwrap()), (Some(true), Some(false)));
    assert_eq!((header.integer("COUNT").unwrap(), header.float("COUNT").unwrap()), (Some(-42), Some(-42.0)));
    assert_eq!(header.float("OLDREAL").unwrap(), Some(1.25e-3));
    assert_eq!(header.float("BARE").unwrap(), None);
    assert_eq!(header.integer("TWICE").unwrap(), Some(1));
    assert_eq!(header.history_lines().collect::<Vec<_>>(), ["made by hand"]);
    for key in ["HUGE", "NOTNUM", "OPEN"] {
        let message = header.float(key).unwrap_err().to_string();
        assert!(message.contains(key) && message.contains("expected a number"), "{message}");
    }
    assert!(header.text("COUNT").unwrap_err().to_string().contains("COUNT = -42; expected a string"));
}

/// Every f64 must come back bit for bit: awkward ones and seeded random bit patterns.
#[test]
fn real_keywords_are_bit_exact() {
    use rand::{Rng, SeedableRng};
    let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(17);
    let mut values = vec![-1.0 / 3600.0, 0.1, 1e22, 1e16, 123456789012345680.0, 5e-324, f64::MAX, -0.0, 1e-5, 1e5];
    values.extend((0..500).map(|_| f64::from_bits(random.random())).filter(|v: &f64| v.is_finite()));
    let folder = folder();
    let path = folder.path().join("a.fits");
    let mut header = Header::new();
    for (n, value) in values.iter().enumerate() {
        header.set(&format!("KEY{n}"), *value, "a comment");
    }
    write_image_f32(&path, &header, &[1], &[0.0]).unwrap();
    let file = FitsFile::open(&path).unwrap();
    for (n, value) in values.iter().enumerate() {
        let read = file.hdus()[0].header.float(&format!("KEY{n}")).unwrap().unwrap();
        // −0 written as "-0.0" is a float and keeps its sign.
        assert_eq!(read.to_bits(), value.to_bits(), "{value:e}");
    }
}

#[test]
fn headers_round_trip() {
    let folder = folder();
    let path = folder.path().join("a.fits");
    let texts = [
        String::new(),
        "O'Neill's field".to_string(),
        "x".repeat(68),
        "y".repeat(69),
        "'".repeat(100),
        format!("{}&", "z".repeat(200)),
    ];
    let mut written = Header::new();
    for (n, text) in texts.iter().enumerate() {
        written.set(&format!("TEXT{n}"), text.as_str(), "a comment that may be dropped when there is no room");
    }
    written.set("FLAG", true, "").set("NUMBER", -7, "").set("BLANKED", f64::NAN, "not a number");
    written.set("NAXIS1", 99, "must not override the image's own");
    written.history(&"h".repeat(100)).comment("c");
    write_image_f64(&path, &written, &[2, 1], &[1.0, f64::NAN]).unwrap();
    let file = FitsFile::open(&path).unwrap();
    let read = &file.hdus()[0].header;
    for (n, text) in texts.iter().enumerate() {
        assert_eq!(read.text(&format!("TEXT{n}")).unwrap().as_deref(), Some(text.as_str()));
    }
    assert_eq!(read.logical("FLAG").unwrap(), Some(true));
    assert_eq!(read.integer("NAXIS1").unwrap(), Some(2));
    assert_eq!(read.get("BLANKED"), Some(&Value::Undefined));
    assert_eq!(read.history_lines().map(str::len).sum::<usize>(), 100);
    let pixels = file.image_f64(0).unwrap();
    assert!(pixels[0] == 1.0 && pixels[1].is_nan());
}

#[test]
fn several_headers_and_a_table() {
    let folder = folder();
    let path = folder.path().join("a.fits");
    let mut writer = FitsWriter::create(&path).unwrap();
    writer.image_f32(&Header::new(), &[2, 2], &[1.0, 2.0, 3.0, 4.0]).unwrap();
    let mut second = Header::new();
    second.set("EXTNAME", "WEIGHT", "");
    writer.image_f64(&second, &[3], &[5.0, 6.0, 7.0]).unwrap();
    let columns = vec![
        ColumnSpec::text("NAME", 6),
        ColumnSpec::f64("FLUX", 2, "Jy"),
        ColumnSpec::i32("N", 1, ""),
        ColumnSpec::f32("EMPTY", 0, ""),
    ];
    let mut table = writer.table("SOURCES", &Header::new(), columns, 2).unwrap();
    for n in 0..2 {
        table.text(&format!("S{n}")).unwrap();
        table.f64(&[f64::from(n), 0.1]).unwrap();
        table.i32(&[-n]).unwrap();
        table.f32(&[]).unwrap();
    }
    table.end().unwrap();
    writer.finish().unwrap();
    let file = FitsFile::open(&path).unwrap();
    assert_eq!(file.image_f32(1).unwrap(), [5.0, 6.0, 7.0]);
    assert!(file.image_f32(2).unwrap_err().to_string().contains("expected an image"));
    assert!(file.image_f32(3).is_err());
    let table = Table::new(&file.hdus()[2]).unwrap();
    let mut rows = Vec::new();
    let (name, flux) = (table.find(&["name"]).unwrap(), table.numbers(&["FLUX"], 2).unwrap());
    table
        .for_each_row::<evensky::fits::FitsError>(&file, |_, row| {
            rows.push((name.text(row).unwrap(), flux.number(row, 0).unwrap(), flux.number(row, 1).unwrap()));
            assert_eq!(flux.number(row, 2), None);
            Ok(())
        })
        .unwrap();
    assert_eq!(rows, [("S0".to_string(), 0.0, 0.1), ("S1".to_string(), 1.0, 0.1)]);
    assert!(table.numbers(&["NAME"], 1).unwrap_err().to_string().contains("NAME"));
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1);
}

#[test]
fn the_writer_refuses_contradictions_and_leaves_nothing() {
    let folder = folder();
    let path = folder.path().join("a.fits");
    assert!(write_image_f32(&path, &Header::new(), &[3, 3], &[0.0; 8]).is_err());
    let mut bad = Header::new();
    bad.set("lower", 1, "");
    let message = write_image_f32(&path, &bad, &[1], &[0.0]).unwrap_err().to_string();
    assert!(message.contains("lower") && message.contains("a.fits"), "{message}");
    let mut writer = FitsWriter::create(&path).unwrap();
    let mut table = writer.table("T", &Header::new(), vec![ColumnSpec::f64("A", 1, "")], 1).unwrap();
    assert!(table.f32(&[1.0]).is_err(), "another kind");
    assert!(table.f64(&[1.0, 2.0]).is_err(), "another length");
    table.f64(&[1.0]).unwrap();
    assert!(table.f64(&[1.0]).is_err(), "a row too many");
    drop(table);
    let table = writer.table("T", &Header::new(), vec![ColumnSpec::f64("A", 1, "")], 1).unwrap();
    assert!(table.end().is_err(), "a row too few");
    drop(writer);
    assert!(FitsWriter::create(&path).unwrap().finish().is_err(), "no header");
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0);
    assert!(FitsWriter::create(folder.path().join("missing/a.fits")).is_err());
}

/// A disk that is full after so many bytes.
struct Full {
    file: File,
    left: usize,
}

impl Write for Full {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        if self.left == 0 {
            return Err(io::ErrorKind::StorageFull.into());
        }
        let written = self.file.write(&bytes[..bytes.len().min(self.left)])?;
        self.left -= written;
        Ok(written)
    }
    fn flush(&mut self) -> io::Result<()> {
        self.file.flush()
    }
}

#[test]
fn a_full_disk_is_reported_and_the_old_file_kept() {
    let folder = folder();
    let path = folder.path().join("a.fits");
    std::fs::write(&path, "the old file").unwrap();
    for left in [0, 1, 2880, 2881, 100_000, 399_999] {
        let full = |file| Box::new(Full { file, left }) as Box<dyn Write + Send>;
        let result = FitsWriter::create_through(&path, full).and_then(|mut writer| {
            writer.image_f32(&Header::new(), &[100, 1000], &[1.0; 100_000])?;
            writer.finish()
        });
        let message = result.unwrap_err().to_string();
        assert!(message.contains("a.fits: cannot write the file"), "{message}");
        assert_eq!(std::fs::read_to_string(&path).unwrap(), "the old file");
        assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1, "nothing left behind");
    }
}

/// /dev/full refuses every byte the way a full disk does.
#[cfg(target_os = "linux")]
#[test]
fn the_full_device_is_reported() {
    let folder = folder();
    let path = folder.path().join("a.fits");
    let full = |_| Box::new(File::create("/dev/full").unwrap()) as Box<dyn Write + Send>;
    let mut writer = FitsWriter::create_through(&path, full).unwrap();
    let result = writer.image_f32(&Header::new(), &[10], &[1.0; 10]).and_then(|()| writer.finish());
    assert!(result.unwrap_err().to_string().contains("a.fits: cannot write the file"));
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0);
}

/// Names with characters that other readers take for instructions.
#[test]
fn names_are_taken_literally() {
    let folder = folder();
    for name in ["a.fits[1]", "!b.fits", "c.fits(copy)", "e+1", "|cat", "d*.fits.gz"] {
        let path = folder.path().join(name);
        write_image_f32(&path, &Header::new(), &[1], &[2.0]).unwrap();
        assert_eq!(FitsFile::open(&path).unwrap().image_f32(0).unwrap(), [2.0], "{name}");
    }
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 6);
}

#[cfg(unix)]
#[test]
fn written_files_have_the_permissions_of_any_new_file() {
    use std::os::unix::fs::PermissionsExt;
    let folder = folder();
    let (ours, plain) = (folder.path().join("a.fits"), folder.path().join("b"));
    write_image_f32(&ours, &Header::new(), &[1], &[2.0]).unwrap();
    std::fs::write(&plain, "").unwrap();
    let mode = |path: &Path| std::fs::metadata(path).unwrap().permissions().mode();
    assert_eq!(mode(&ours), mode(&plain));
}
