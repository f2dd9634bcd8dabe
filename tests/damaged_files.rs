//! More than 500 damaged files, seeded: each must give an error or a sane read. No panic, no hang, and memory bounded.
//!
//! Bound on memory, asserted for every file: 16 MiB + 32 × the length of the file. (Blocks are at most 16 MiB, but
//! never larger than the rows of the file ask for. 16 MiB: chunks of the file, and an index of station numbers up to
//! a million. 32: one byte of a file becomes at most 6 bytes of visibilities and weights, twice for the pass that
//! looks at the file first, and a card of 80 bytes becomes some 300.)

mod fits_support;

use evensky::fits::{ColumnSpec, FitsFile, FitsWriter, HduKind, Header, Table};
use evensky::observation::{BlockSource, MemorySource, Selection, open, write_idi};
use fits_support::{Groups, folder};
use rand::seq::IndexedRandom;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::alloc::{GlobalAlloc, Layout, System};
use std::path::Path;
use std::sync::atomic::{AtomicUsize, Ordering::Relaxed};
use std::sync::{Mutex, PoisonError};
use std::time::{Duration, Instant};

static NOW: AtomicUsize = AtomicUsize::new(0);
static PEAK: AtomicUsize = AtomicUsize::new(0);
/// The tests here take turns: they count the memory of the whole process.
static ALONE: Mutex<()> = Mutex::new(());

/// The system's allocator, counting.
struct Counting;

// SAFETY: every call goes unchanged to the system's allocator; the counters touch no memory of the caller's.
unsafe impl GlobalAlloc for Counting {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        PEAK.fetch_max(NOW.fetch_add(layout.size(), Relaxed) + layout.size(), Relaxed);
        // SAFETY: the caller keeps the contract of `alloc`.
        unsafe { System.alloc(layout) }
    }
    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        NOW.fetch_sub(layout.size(), Relaxed);
        // SAFETY: the caller keeps the contract of `dealloc`.
        unsafe { System.dealloc(pointer, layout) }
    }
}

#[global_allocator]
static ALLOCATOR: Counting = Counting;

const FIXED_BOUND: usize = 16 << 20;
const PER_BYTE: usize = 32;
/// For one file of some ten thousand bytes; a sound one takes milliseconds.
const PATIENCE: Duration = Duration::from_secs(20);

fn base_files(folder: &Path) -> Vec<(&'static str, Vec<u8>)> {
    let plain = Groups::sound();
    let mut sources = Groups::sound();
    sources.parameters.push(("SOURCE", 1.0, 0.0));
    sources.sources = vec![(1, "A", 150.0, 30.0), (2, "B", 151.0, 30.0)];
    sources.groups.iter_mut().enumerate().for_each(|(n, g)| g.insert(6, f64::from(1 + (n as u32) % 2)));
    let mut integers = Groups::sound();
    integers.bitpix = 16;
    integers.parameters.iter_mut().take(3).for_each(|p| p.1 = 1e-10);
    integers.parameters[5].1 = 0.25;
    integers.axes.swap(2, 3); // another axis order
    for group in &mut integers.groups {
        (0..3).for_each(|i| group[i] /= 1e-10);
        group[5] /= 0.25;
    }
    let plain_path = plain.write(folder);
    let mut memory = MemorySource::read(open(&plain_path, &Selection::All).unwrap()[0].as_mut()).unwrap();
    let idi = folder.join("a.idifits");
    write_idi(&idi, &mut [&mut memory as &mut dyn BlockSource]).unwrap();
    let image = folder.join("a.fits");
    let mut writer = FitsWriter::create(&image).unwrap();
    let mut header = Header::new();
    header.set("OBJECT", "x".repeat(100), "").set("BSCALE", 1.0, "").history("made for damage");
    writer.image_f32(&header, &[20, 30], &[1.5; 600]).unwrap();
    let columns = vec![ColumnSpec::text("NAME", 5), ColumnSpec::f64("X", 2, "m"), ColumnSpec::i32("N", 1, "")];
    let mut table = writer.table("THINGS", &Header::new(), columns, 50).unwrap();
    for n in 0..50 {
        table.text("abc").unwrap();
        table.f64(&[f64::from(n), 1.0]).unwrap();
        table.i32(&[n]).unwrap();
    }
    table.end().unwrap();
    writer.finish().unwrap();
    vec![
        ("groups", plain.bytes()),
        ("groups of two sources", sources.bytes()),
        ("integer groups", integers.bytes()),
        ("FITS-IDI", std::fs::read(idi).unwrap()),
        ("image and table", std::fs::read(image).unwrap()),
    ]
}

/// Positions of the cards of all headers.
fn cards(bytes: &[u8]) -> Vec<usize> {
    let mut found = Vec::new();
    let mut inside = false;
    for (block, content) in bytes.chunks(2880).enumerate() {
        inside = inside || content.starts_with(b"SIMPLE  =") || content.starts_with(b"XTENSION=");
        for (n, card) in content.chunks_exact(80).enumerate() {
            if inside {
                found.push(block * 2880 + n * 80);
            }
            if inside && card.starts_with(b"END     ") {
                inside = false;
            }
        }
    }
    found
}

fn damaged(name: &str, bytes: &[u8], random: &mut ChaCha8Rng) -> Vec<(String, Vec<u8>)> {
    let cards = cards(bytes);
    let mut all = Vec::new();
    // Cut at every block, just before and after, and in places drawn at random.
    let cuts = (0..=bytes.len() / 2880).flat_map(|b| [(b * 2880).saturating_sub(1), b * 2880, b * 2880 + 1]);
    let drawn: Vec<usize> = (0..20).map(|_| random.random_range(0..bytes.len())).collect();
    for cut in cuts.chain(drawn).filter(|cut| *cut < bytes.len()) {
        all.push((format!("{name}, cut at {cut}"), bytes[..cut].to_vec()));
    }
    // Every size given every evil value.
    let sizes = [
        "BITPIX", "NAXIS", "PCOUNT", "GCOUNT", "TFIELDS", "TFORM", "MAXIS", "EXTVER", "TMATX", "CRPIX", "CDELT",
        "CRVAL", "TSCAL", "PSCAL", "PZERO", "REF_PIXL", "CTYPE", "PTYPE", "NO_BAND",
    ];
    let evil = [
        "-1",
        "0",
        "1",
        "2",
        "65535",
        "2147483648",
        "9223372036854775807",
        "1E300",
        "'4294967296E'",
        "'0D'",
        "T",
        "",
    ];
    let named: Vec<usize> =
        cards.iter().copied().filter(|at| sizes.iter().any(|s| bytes[*at..].starts_with(s.as_bytes()))).collect();
    for at in &named {
        let value = evil.choose(random).unwrap();
        let mut copy = bytes.to_vec();
        copy[at + 10..at + 80].copy_from_slice(format!("{value:>20}{:50}", "").as_bytes()[..70].as_ref());
        all.push((format!("{name}, {} = {value}", String::from_utf8_lossy(&bytes[*at..at + 8])), copy));
    }
    for _ in 0..60 {
        let (at, value) = (*named.choose(random).unwrap(), evil.choose(random).unwrap());
        let mut copy = bytes.to_vec();
        copy[at + 10..at + 80].copy_from_slice(format!("{value:>20}{:50}", "").as_bytes());
        all.push((format!("{name}, {} = {value}", String::from_utf8_lossy(&bytes[at..at + 8])), copy));
    }
    for round in 0..60 {
        // Bits in header cards, one to four.
        let mut copy = bytes.to_vec();
        for _ in 0..random.random_range(1..=4) {
            let at = cards.choose(random).unwrap() + random.random_range(0..80);
            copy[at] ^= 1 << random.random_range(0..8);
        }
        all.push((format!("{name}, header bits {round}"), copy));
    }
    for round in 0..20 {
        // Two cards exchanged.
        let mut copy = bytes.to_vec();
        let (a, b) = (*cards.choose(random).unwrap(), *cards.choose(random).unwrap());
        let (first, second) = (copy[a..a + 80].to_vec(), copy[b..b + 80].to_vec());
        copy[a..a + 80].copy_from_slice(&second);
        copy[b..b + 80].copy_from_slice(&first);
        all.push((format!("{name}, cards exchanged {round}"), copy));
    }
    for round in 0..30 {
        // Bytes anywhere, a run of them.
        let mut copy = bytes.to_vec();
        let at = random.random_range(0..copy.len());
        let end = (at + random.random_range(1..64)).min(copy.len());
        copy[at..end].fill_with(|| random.random());
        all.push((format!("{name}, noise at {at} ({round})"), copy));
    }
    for block in 0..bytes.len() / 2880 {
        // A block lost, a block doubled.
        let mut copy = bytes.to_vec();
        copy.drain(block * 2880..(block + 1) * 2880);
        all.push((format!("{name}, block {block} lost"), copy));
        let mut copy = bytes.to_vec();
        let doubled = copy[block * 2880..(block + 1) * 2880].to_vec();
        copy.splice(block * 2880..block * 2880, doubled);
        all.push((format!("{name}, block {block} doubled"), copy));
    }
    all
}

/// Reads all that can be read; checks what a block promises. The error, if any.
fn read_all(path: &Path) -> Result<(), String> {
    for mut source in open(path, &Selection::All).map_err(|e| e.to_string())? {
        let (stations, channels, hands) = {
            let o = source.observation();
            assert!(o.frequencies_hz.iter().all(|f| f.is_finite() && *f > 0.0));
            (o.stations.len(), o.frequencies_hz.len(), o.hands.len())
        };
        while let Some(block) = source.next_block().map_err(|e| e.to_string())? {
            assert_eq!((block.channels, block.hands), (channels, hands));
            assert_eq!(block.data.len(), block.rows() * channels * hands);
            assert_eq!(block.weight.len(), block.data.len());
            assert!(block.weight.iter().all(|w| w.is_finite() && *w >= 0.0));
            assert!(block.data.iter().all(|v| v.re.is_finite() && v.im.is_finite()));
            assert!(block.uvw_m.iter().flatten().chain(&block.mjd_utc).all(|x| x.is_finite()));
            assert!(block.first.iter().chain(&block.second).all(|s| (*s as usize) < stations));
        }
    }
    Ok(())
}

fn read_parts(path: &Path) -> Result<(), String> {
    let file = FitsFile::open(path).map_err(|e| e.to_string())?;
    for (n, hdu) in file.hdus().iter().enumerate() {
        match hdu.kind {
            HduKind::Image => drop(file.image_f64(n).map_err(|e| e.to_string())?),
            HduKind::BinaryTable => {
                let table = Table::new(hdu).map_err(|e| e.at(path).to_string())?;
                let visit = |_, row: &[u8]| {
                    table.columns.iter().for_each(|c| drop((c.number(row, 0), c.text(row))));
                    Ok(())
                };
                table.for_each_row::<evensky::fits::FitsError>(&file, visit).map_err(|e| e.to_string())?;
            }
            _ => {}
        }
    }
    Ok(())
}

#[test]
fn damage_gives_an_error_or_a_sane_read() {
    let _turn = ALONE.lock().unwrap_or_else(PoisonError::into_inner);
    let folder = folder();
    let mut random = ChaCha8Rng::seed_from_u64(20_261_201);
    let path = folder.path().join("damaged.fits");
    let (mut files, mut refused, mut worst, mut slowest) = (0, 0, 0.0f64, Duration::ZERO);
    for (name, bytes) in base_files(folder.path()) {
        std::fs::write(&path, &bytes).unwrap();
        read_parts(&path).unwrap();
        assert!(
            name.starts_with("image") || read_all(&path) == Ok(()),
            "{name} must be sound: {:?}",
            read_all(&path)
        );
        for (what, bytes) in damaged(name, &bytes, &mut random) {
            std::fs::write(&path, &bytes).unwrap();
            let (before, start) = (NOW.load(Relaxed), Instant::now());
            PEAK.store(before, Relaxed);
            let outcome = std::panic::catch_unwind(|| [read_all(&path), read_parts(&path)]);
            let (used, took) = (PEAK.load(Relaxed) - before, start.elapsed());
            let [visibilities, parts] = outcome.unwrap_or_else(|_| panic!("panicked: {what}"));
            for error in [&visibilities, &parts].into_iter().filter_map(|r| r.as_ref().err()) {
                assert!(error.contains("damaged.fits"), "{what}: the error must name the file: {error}");
            }
            let bound = FIXED_BOUND + PER_BYTE * bytes.len();
            assert!(used <= bound, "{what}: {used} bytes of memory, bound {bound}");
            assert!(took < PATIENCE, "{what}: took {took:?}");
            worst = worst.max(used as f64 / bound as f64);
            slowest = slowest.max(took);
            files += 1;
            refused += usize::from(visibilities.is_err());
        }
    }
    println!("{files} files, {refused} refused, memory at most {worst:.3} of the bound, slowest {slowest:?}");
    assert!(files >= 500, "{files}");
    // Most damage must be seen: what is left changes a comment, a value in its range, or a visibility.
    assert!(refused * 2 > files, "{refused} of {files}");
}

/// A header that never ends must not be read to the end of a huge file, nor its declared data allocated.
#[test]
fn huge_sparse_files_are_refused_quickly() {
    let _turn = ALONE.lock().unwrap_or_else(PoisonError::into_inner);
    let folder = folder();
    let path = folder.path().join("huge.fits");
    let mut bytes = Groups::sound().bytes();
    let end = cards(&bytes).into_iter().find(|at| bytes[*at..].starts_with(b"END     ")).unwrap();
    bytes[end..end + 3].copy_from_slice(b"   ");
    bytes.truncate(2 * 2880);
    std::fs::write(&path, &bytes).unwrap();
    let blanks = std::fs::OpenOptions::new().append(true).open(&path).unwrap();
    blanks.set_len(1 << 40).unwrap();
    let before = NOW.load(Relaxed);
    PEAK.store(before, Relaxed);
    let message = open(&path, &Selection::All).map(drop).unwrap_err().to_string();
    assert!(message.contains("no END card within 4096 blocks"), "{message}");
    // The header's own 4096 blocks, doubled while they grow.
    assert!(PEAK.load(Relaxed) - before < 64 << 20);
}
