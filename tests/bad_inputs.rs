//! Bad input to `evensky image`, through the binary: the exit status (2 for the run file, 1 for all else), a message that
//! names the file and the key, keyword or row and says what was expected, and no file left in the output folder.
//!
//! Where each case of the list is tested:
//!
//! | case | here | elsewhere (more of it) |
//! |---|---|---|
//! | visibility file missing | `missing_visibility_file` | command_line.rs, bad_visibility_files.rs |
//! | a directory in its place | `directory_for_visibilities` | command_line.rs, bad_visibility_files.rs |
//! | empty file | `empty_visibility_file` | bad_visibility_files.rs |
//! | truncated header, truncated data | `truncated_header`, `truncated_data` | bad_visibility_files.rs, damaged_files.rs |
//! | wrong axis order | `wrong_axis_order` | bad_visibility_files.rs |
//! | GCOUNT = 0 | `no_groups` | bad_visibility_files.rs |
//! | no usable visibility | `no_usable_visibility`, `only_crossed_hands` | bad_visibility_files.rs |
//! | station in data but not in the table | `station_not_in_the_table` | bad_visibility_files.rs |
//! | station without a beam | `station_without_a_beam` | command_line.rs |
//! | zero or negative frequency | `zero_frequency`, `negative_frequency` | bad_visibility_files.rs |
//! | NaN u, v, w | `uvw_not_a_number` | bad_visibility_files.rs |
//! | unknown key, wrong type | `unknown_key`, `wrong_type` | run_file.rs, command_line.rs |
//! | image of 0 pixels | `image_of_no_pixels` | run_file.rs, command_line.rs |
//! | image wider than a hemisphere | `image_wider_than_a_hemisphere` | run_file.rs, command_line.rs |
//! | tolerance 0, tolerance 1e-20 | `tolerance_of_zero`, `tolerance_beyond_reach` | run_file.rs |
//! | output folder not writable | `output_below_a_file`, `output_is_a_file`, `output_where_nothing_can_be_made`, `output_on_a_read_only_disk` | report_page.rs |
//! | disk full | `disk_full` | fits_files.rs (injected), report_page.rs |

mod fits_support;

use fits_support::{Groups, folder};
use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
use std::process::Command;

/// A sound run file for [`Groups::sound`].
const RUN: &str = r#"title = "Bad input"
[[pointing]]
visibilities = "test.uvfits"
[image]
centre_deg = [150.0, 30.0]
size_px = [32, 30]
pixel_arcsec = 20.0
tolerance = 1e-3
[beams.dish]
shape = "gaussian"
half_power_deg = 0.9
at_hz = 1.4e9
[[stations]]
match = "S*"
beam = "dish"
"#;

/// Inputs in a folder of their own, and where the products would go.
struct Case {
    folder: tempfile::TempDir,
    out: PathBuf,
}

/// How a run ended.
struct Ended {
    status: Option<i32>,
    out: String,
    err: String,
}

impl Case {
    /// Sound inputs.
    fn sound() -> Case {
        Case::of(&Groups::sound())
    }

    fn of(file: &Groups) -> Case {
        let folder = folder();
        file.write(folder.path());
        std::fs::write(folder.path().join("run.toml"), RUN).unwrap();
        let out = folder.path().join("products");
        Case { folder, out }
    }

    /// Sound inputs but for a piece of the run file.
    fn run_file(from: &str, to: &str) -> Case {
        assert!(RUN.contains(from), "{from}");
        let case = Case::sound();
        std::fs::write(case.path("run.toml"), RUN.replacen(from, to, 1)).unwrap();
        case
    }

    /// Sound inputs but for the bytes of the visibility file.
    fn bytes(spoil: impl FnOnce(&mut Vec<u8>)) -> Case {
        let case = Case::sound();
        let mut bytes = Groups::sound().bytes();
        spoil(&mut bytes);
        std::fs::write(case.path("test.uvfits"), bytes).unwrap();
        case
    }

    /// Sound inputs but for what the visibility file says.
    fn groups(spoil: impl FnOnce(&mut Groups)) -> Case {
        let mut file = Groups::sound();
        spoil(&mut file);
        Case::of(&file)
    }

    fn path(&self, name: &str) -> PathBuf {
        self.folder.path().join(name)
    }

    fn command(&self) -> Command {
        let mut command = Command::new(env!("CARGO_BIN_EXE_evensky"));
        command.args(["image", "--quiet", "--threads", "1"]).arg(self.path("run.toml")).arg("--out").arg(&self.out);
        command
    }

    fn run(&self) -> Ended {
        ended(self.command())
    }

    /// The run must end with `status` and a message that holds `parts`, and leave no file.
    #[track_caller]
    fn refused(&self, status: i32, parts: &[&str]) -> String {
        let ended = self.run();
        said_no(&ended, status, parts);
        assert_eq!(listing(&self.out), Vec::<String>::new(), "files were left");
        assert!(!self.path("run-out").exists());
        ended.err
    }
}

fn ended(mut command: Command) -> Ended {
    let output = command.output().expect("the program starts");
    let text = |bytes: Vec<u8>| String::from_utf8(bytes).expect("messages are UTF-8");
    Ended { status: output.status.code(), out: text(output.stdout), err: text(output.stderr) }
}

#[track_caller]
fn said_no(ended: &Ended, status: i32, parts: &[&str]) {
    let Ended { status: got, out, err } = ended;
    assert_eq!(*got, Some(status), "--- out\n{out}\n--- err\n{err}");
    assert_eq!(out, "", "nothing on standard output");
    // warnings may come before
    assert!(err.lines().any(|line| line.starts_with("evensky: ")) && !err.contains("panicked"), "{err}");
    for part in parts {
        assert!(err.contains(part), "{part:?} is not in: {err}");
    }
}

fn listing(folder: &Path) -> Vec<String> {
    let Ok(entries) = std::fs::read_dir(folder) else { return Vec::new() };
    let mut names: Vec<String> =
        entries.map(|entry| entry.unwrap().file_name().to_string_lossy().into_owned()).collect();
    names.sort();
    names
}

/// The control: without damage the run succeeds, so that every refusal below is due to its own damage.
#[test]
fn sound_input_makes_products() {
    let case = Case::sound();
    let ended = case.run();
    assert_eq!(ended.status, Some(0), "{}", ended.err);
    assert_eq!(listing(&case.out).len(), 8, "{:?}", listing(&case.out));
}

#[test]
fn missing_visibility_file() {
    let case = Case::sound();
    std::fs::remove_file(case.path("test.uvfits")).unwrap();
    case.refused(2, &["run.toml:3: pointing.visibilities: ", "test.uvfits: no such file", "expected"]);
}

#[test]
fn directory_for_visibilities() {
    let case = Case::sound();
    std::fs::remove_file(case.path("test.uvfits")).unwrap();
    std::fs::create_dir(case.path("test.uvfits")).unwrap();
    case.refused(
        2,
        &["run.toml:3: pointing.visibilities: ", "test.uvfits: is a folder", "expected a visibility file"],
    );
}

#[test]
fn empty_visibility_file() {
    Case::bytes(Vec::clear).refused(1, &["test.uvfits: the file is empty", "expected a FITS file"]);
}

#[test]
fn truncated_header() {
    Case::bytes(|b| b.truncate(2880)).refused(1, &["test.uvfits: primary header", "no END card", "cut short"]);
}

#[test]
fn truncated_data() {
    let parts = ["test.uvfits: primary header", "declares 1152 bytes", "ends at byte 6260", "cut short"];
    Case::bytes(|b| b.truncate(2 * 2880 + 500)).refused(1, &parts);
}

#[test]
fn wrong_axis_order() {
    let parts = ["test.uvfits: ", "CTYPE2", "STOKES", "expected COMPLEX as the first axis"];
    Case::groups(|f| f.axes.swap(0, 1)).refused(1, &parts);
}

#[test]
fn no_groups() {
    Case::groups(|f| f.groups.clear()).refused(1, &["test.uvfits: ", "GCOUNT = 0", "at least one group"]);
}

#[test]
fn no_usable_visibility() {
    let flag = |f: &mut Groups| f.groups.iter_mut().for_each(|g| (0..6).for_each(|c| g[6 + 3 * c + 2] = -1.0));
    Case::groups(flag).refused(1, &["test.uvfits: no usable visibility", "expected", "positive weight"]);
}

/// Sound visibilities none of which measures total intensity.
#[test]
fn only_crossed_hands() {
    let crossed = |f: &mut Groups| f.axes[1].2 = -7.0;
    Case::groups(crossed).refused(1, &["no usable visibility", "expected parallel hands or Stokes I"]);
}

#[test]
fn station_not_in_the_table() {
    let parts = ["test.uvfits: group 5", "station number 9", "not in the station table", "expected"];
    Case::groups(|f| f.groups[4][3] = 256.0 * 2.0 + 9.0).refused(1, &parts);
}

#[test]
fn station_without_a_beam() {
    let parts = ["run.toml:13: stations: no beam for station", "S1", "S4", "test.uvfits", "match = \""];
    Case::run_file("match = \"S*\"", "match = \"S[23]\"").refused(2, &parts);
}

#[test]
fn zero_frequency() {
    Case::groups(|f| f.axes[2].2 = 0.0).refused(1, &["test.uvfits: ", "channel 1 of band 1", "0 Hz", "above 0"]);
}

#[test]
fn negative_frequency() {
    let parts = ["test.uvfits: ", "channel 1 of band 1", "-1400000000 Hz", "above 0"];
    Case::groups(|f| f.axes[2].2 = -1.4e9).refused(1, &parts);
}

#[test]
fn uvw_not_a_number() {
    let parts = ["test.uvfits: group 3", "u, v, w", "NaN", "expected finite numbers"];
    Case::groups(|f| f.groups[2][1] = f64::NAN).refused(1, &parts);
}

#[test]
fn unknown_key() {
    let parts =
        ["run.toml:7: image.pixle_arcsec: unknown key", "did you mean \"pixel_arcsec\"?", "expected one of"];
    Case::run_file("pixel_arcsec", "pixle_arcsec").refused(2, &parts);
}

#[test]
fn wrong_type() {
    let parts = ["run.toml:7: image.pixel_arcsec: found", "expected the side of a pixel in arcseconds"];
    Case::run_file("= 20.0", "= \"20\"").refused(2, &parts);
}

#[test]
fn image_of_no_pixels() {
    let parts = ["run.toml:6: image.size_px: found the list [0, 30]", "each at least 1"];
    Case::run_file("[32, 30]", "[0, 30]").refused(2, &parts);
}

#[test]
fn image_wider_than_a_hemisphere() {
    let parts = ["run.toml:6: image.size_px: the image is wider than a hemisphere", "expected"];
    Case::run_file("[32, 30]", "[30000, 30000]").refused(2, &parts);
}

#[test]
fn tolerance_of_zero() {
    let parts = ["run.toml:8: image.tolerance: found the number 0", "expected a relative error from 1e-7 to 0.1"];
    Case::run_file("1e-3", "0").refused(2, &parts);
}

#[test]
fn tolerance_beyond_reach() {
    let parts =
        ["run.toml:8: image.tolerance: found the number 1e-20", "expected a relative error from 1e-7 to 0.1"];
    Case::run_file("1e-3", "1e-20").refused(2, &parts);
}

#[test]
fn image_where_no_pointing_looks() {
    let parts = ["no pixel of the image reaches lowest_response", "no pointing looks there", "compare centre_deg"];
    Case::run_file("[150.0, 30.0]", "[200.0, -30.0]").refused(1, &parts);
}

// ---- the output folder -------------------------------------------------------------------------------------------

/// A folder below an ordinary file cannot be made, whoever asks (permission bits do not stop the superuser).
#[test]
fn output_below_a_file() {
    let mut case = Case::sound();
    std::fs::write(case.path("plain"), "text").unwrap();
    case.out = case.path("plain/below");
    case.refused(1, &["plain/below: the output folder cannot be made", "--out DIR"]);
    assert_eq!(std::fs::read(case.path("plain")).unwrap(), b"text");
}

#[test]
fn output_is_a_file() {
    let mut case = Case::sound();
    std::fs::write(case.path("plain"), "text").unwrap();
    case.out = case.path("plain");
    case.refused(1, &["plain: the output folder cannot be made", "--out DIR"]);
    assert_eq!(std::fs::read(case.path("plain")).unwrap(), b"text");
}

/// The kernel's own folder of processes takes no files or folders, from the superuser neither.
#[cfg(target_os = "linux")]
#[test]
fn output_where_nothing_can_be_made() {
    let mut case = Case::sound();
    case.out = PathBuf::from("/proc");
    let ended = case.run();
    said_no(&ended, 1, &["/proc", "expected", "--out DIR"]);
    case.out = PathBuf::from("/proc/evensky-products");
    case.refused(1, &["/proc/evensky-products: the output folder cannot be made", "--out DIR"]);
}

/// A private place for mounts: the prefix of a shell command line, or why there is none here.
#[cfg(target_os = "linux")]
fn private_mounts() -> Result<Vec<&'static str>, String> {
    let mut reasons = Vec::new();
    for way in [vec!["unshare", "--mount"], vec!["unshare", "--mount", "--map-root-user"]] {
        let folder = folder();
        let trial = Command::new(way[0])
            .args(&way[1..])
            .args(["sh", "-c", "mount -t tmpfs -o size=64k none \"$0\" && test -z \"$(ls \"$0\")\""])
            .arg(folder.path())
            .output();
        match trial {
            Ok(output) if output.status.success() => return Ok(way),
            Ok(output) => reasons.push(String::from_utf8_lossy(&output.stderr).trim().to_owned()),
            Err(error) => reasons.push(format!("{}: {error}", way[0])),
        }
    }
    Err(reasons.join("; "))
}

/// Says on the real standard error, which the test harness does not swallow, how a test was run.
fn say(text: &str) {
    use std::io::Write;
    let _ = writeln!(std::io::stderr(), "{text}");
}

/// Runs the case with its output folder on a fresh memory disk mounted with `options`, the files of `before` (none when
/// empty) already on it; what the disk then holds is copied to `kept`.
#[cfg(target_os = "linux")]
fn on_a_disk(way: &[&str], case: &Case, options: &str, before: &Path, kept: &Path) -> Ended {
    std::fs::create_dir_all(&case.out).unwrap();
    std::fs::create_dir_all(kept).unwrap();
    let script = "disk=$1; before=$2; kept=$3; options=$4; shift 4; \
                  mount -t tmpfs -o \"$options\" none \"$disk\" || exit 99; \
                  if test -n \"$(ls \"$before\")\"; then cp \"$before\"/* \"$disk\" || exit 98; fi; \
                  \"$@\"; status=$?; cp -a \"$disk/.\" \"$kept\" || exit 97; exit $status";
    let program = case.command();
    let mut command = Command::new(way[0]);
    command.args(&way[1..]).args(["sh", "-c", script, "sh"]).arg(&case.out).arg(before).arg(kept).arg(options);
    command.arg(program.get_program()).args(program.get_args());
    ended(command)
}

#[cfg(target_os = "linux")]
#[test]
fn output_on_a_read_only_disk() {
    let way = match private_mounts() {
        Ok(way) => way,
        Err(reason) => {
            // root and permission bits aside, this is what a person can meet without a mount
            say(&format!("output_on_a_read_only_disk: NO MOUNT ({reason}); ran on /proc instead"));
            let mut case = Case::sound();
            case.out = PathBuf::from("/proc/self");
            said_no(&case.run(), 1, &["/proc/self", "expected", "--out DIR"]);
            return;
        }
    };
    let (case, kept) = (Case::sound(), folder());
    let nothing = folder();
    let ended = on_a_disk(&way, &case, "ro", nothing.path(), kept.path());
    said_no(&ended, 1, &["products", "ead-only", "expected", "--out DIR"]);
    assert!(listing(kept.path()).is_empty());
    say(&format!("output_on_a_read_only_disk: ran on a read-only memory disk ({})", way.join(" ")));
}

/// The file can be read to its end.
fn whole(path: &Path) {
    let name = path.file_name().unwrap().to_string_lossy().into_owned();
    if name.ends_with(".fits") {
        let file = evensky::fits::FitsFile::open(path).unwrap_or_else(|e| panic!("{e}"));
        assert_eq!(file.image_f32(0).unwrap().len(), 32 * 30, "{name}");
        assert!(file.length().is_multiple_of(2880), "{name}");
    } else if name.ends_with(".png") {
        let file = std::io::BufReader::new(std::fs::File::open(path).unwrap());
        let mut reader = png::Decoder::new(file).read_info().unwrap_or_else(|e| panic!("{name}: {e}"));
        let mut pixels = vec![0; reader.output_buffer_size().unwrap()];
        reader.next_frame(&mut pixels).and_then(|_| reader.finish()).unwrap_or_else(|e| panic!("{name}: {e}"));
    } else {
        let text = std::fs::read_to_string(path).unwrap();
        match name.as_str() {
            "run.json" => drop(serde_json::from_str::<serde_json::Value>(&text).unwrap()),
            "report.html" => assert!(text.trim_end().ends_with("</html>")),
            other => panic!("{other} is no product: something half made was left"),
        }
    }
}

/// A disk that fills up, at many places of the run: an error that names the product, and no half-made file.
#[test]
fn disk_full() {
    disk_full_by_injection();
    #[cfg(target_os = "linux")]
    match private_mounts() {
        Ok(way) => {
            let tried = disk_full_on_a_small_disk(&way);
            say(&format!(
                "disk_full: ran on {tried} memory disks that filled up ({}), and with a failing writer",
                way.join(" ")
            ));
        }
        Err(reason) => say(&format!("disk_full: NO MOUNT ({reason}); ran with a failing writer only")),
    }
    #[cfg(not(target_os = "linux"))]
    say("disk_full: no memory disks here; ran with a failing writer only");
}

/// Disks from too small for the first image to just too small for the last file, empty or with the products of an earlier
/// run on them. Afterwards they hold what they held before.
#[cfg(target_os = "linux")]
fn disk_full_on_a_small_disk(way: &[&str]) -> usize {
    let case = Case::sound();
    let (nothing, earlier) = (folder(), folder());
    let ended = on_a_disk(way, &case, "size=64m", nothing.path(), earlier.path());
    assert_eq!(ended.status, Some(0), "{}", ended.err);
    let contents = |folder: &Path| -> BTreeMap<String, Vec<u8>> {
        let names = listing(folder).into_iter();
        names.map(|name| (name.clone(), std::fs::read(folder.join(&name)).unwrap())).collect()
    };
    let products = contents(earlier.path());
    assert_eq!(products.len(), 8);
    products.keys().for_each(|name| whole(&earlier.path().join(name)));
    // memory disks count in pages
    let room: u64 = products.values().map(|bytes| (bytes.len() as u64).next_multiple_of(4096)).sum();
    let mut named = std::collections::BTreeSet::new();
    let mut tried = 0;
    for (before, taken) in [(nothing.path(), 0), (earlier.path(), room)] {
        for free in [4096, room / 7, room / 4, room / 2, room * 3 / 4, room - 8192] {
            let kept = folder();
            let size = (taken + free).next_multiple_of(4096);
            let ended = on_a_disk(way, &case, &format!("size={size}"), before, kept.path());
            said_no(&ended, 1, &["products", "No space left on device"]);
            let name = products.keys().find(|name| ended.err.contains(name.as_str()));
            named.insert(name.unwrap_or_else(|| panic!("the message must name a product: {}", ended.err)));
            assert!(contents(kept.path()) == contents(before), "{size}: {:?}", listing(kept.path()));
            tried += 1;
        }
    }
    assert!(named.len() >= 3, "the disks filled up at different products: {named:?}");
    tried
}

/// A writer that takes so many bytes, then none.
struct Filling(u64);

impl std::io::Write for Filling {
    fn write(&mut self, bytes: &[u8]) -> std::io::Result<usize> {
        if self.0 < bytes.len() as u64 {
            return Err(std::io::ErrorKind::StorageFull.into());
        }
        self.0 -= bytes.len() as u64;
        Ok(bytes.len())
    }

    fn flush(&mut self) -> std::io::Result<()> {
        Ok(())
    }
}

/// The two ways by which products are written, through a writer that fails: an older product of the name stays whole.
fn disk_full_by_injection() {
    let folder = folder();
    let path = folder.path().join("dirty.fits");
    evensky::fits::write_image_f32(&path, &evensky::fits::Header::new(), &[32, 30], &[1.5; 960]).unwrap();
    let before = std::fs::read(&path).unwrap();
    for room in [0, 100, 2880, 5000] {
        let written =
            evensky::fits::FitsWriter::create_through(&path, |_| Box::new(Filling(room))).and_then(|mut w| {
                w.image_f32(&evensky::fits::Header::new(), &[32, 30], &[2.5; 960])?;
                w.finish()
            });
        let message = written.expect_err("a full disk").to_string();
        assert!(message.contains("dirty.fits"), "{message}");
    }
    let page = folder.path().join("report.html");
    let message = evensky::report::write_whole(&page, |_| Err(std::io::ErrorKind::StorageFull.into()))
        .expect_err("a full disk")
        .to_string();
    assert!(message.contains("report.html") && message.contains("check the space"), "{message}");
    assert_eq!(listing(folder.path()), ["dirty.fits"]);
    assert_eq!(std::fs::read(&path).unwrap(), before);
}
