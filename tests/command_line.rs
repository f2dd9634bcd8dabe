//! The program as a person meets it: exit status, what it says where, and how it says no.

use std::path::{Path, PathBuf};
use std::process::{Command, Output, Stdio};

const FELL: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/data/hollin-fell");

fn evensky() -> Command {
    Command::new(env!("CARGO_BIN_EXE_evensky"))
}

fn said(bytes: &[u8]) -> String {
    String::from_utf8(bytes.to_vec()).expect("messages are UTF-8")
}

/// Runs, and checks the status; returns standard output and standard error.
fn run(arguments: &[&str], status: i32) -> (String, String) {
    let Output { status: got, stdout, stderr } = evensky().args(arguments).output().expect("the program starts");
    let (out, err) = (said(&stdout), said(&stderr));
    assert_eq!(got.code(), Some(status), "{arguments:?}\n--- out\n{out}\n--- err\n{err}");
    (out, err)
}

/// A folder with the run file `run.toml` in it.
struct Folder(tempfile::TempDir);

impl Folder {
    fn with(text: &[u8]) -> Folder {
        let folder = tempfile::tempdir().expect("a temporary folder");
        std::fs::write(folder.path().join("run.toml"), text).expect("a run file");
        Folder(folder)
    }

    fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    /// Runs a command on the run file: must be refused with status 2 and say nothing on standard output.
    fn refused(&self, command: &str) -> String {
        let file = self.path("run.toml");
        let (out, err) = run(&[command, "--quiet", file.to_str().expect("a plain name")], 2);
        assert_eq!(out, "");
        err
    }
}

/// A run file for the first Hollin Fell pointing, with one line replaced.
fn fell(line: &str, replacement: &str) -> Folder {
    let good = format!(
        r#"[[pointing]]
visibilities = "{FELL}/fell-1-clean.uvfits"
[image]
centre_deg = [152.678, 41.863]
size_px = [40, 40]
pixel_arcsec = 250.0
[beams.dish13]
shape = "airy"
diameter_m = 13.0
[[stations]]
match = "*"
beam = "dish13"
"#
    );
    assert!(line.is_empty() || good.contains(line), "{line}");
    Folder::with(good.replacen(line, replacement, 1).as_bytes())
}

#[test]
fn run_files_are_refused_with_file_line_and_key() {
    for (line, replacement, parts) in [
        (
            "pixel_arcsec",
            "pixle_arcsec",
            ["run.toml:6: image.pixle_arcsec: unknown key", "did you mean \"pixel_arcsec\"?"],
        ),
        ("= 250.0", "= true", ["run.toml:6: image.pixel_arcsec: found true", "expected the side of a pixel"]),
        ("[40, 40]", "[0, 40]", ["run.toml:5: image.size_px: found the list [0, 40]", "each at least 1"]),
        (
            "[40, 40]",
            "[4000, 4000]",
            ["run.toml:5: image.size_px: the image is wider than a hemisphere", "expected"],
        ),
        ("250.0", "250.0\ntolerance = 0", ["run.toml:7: image.tolerance: found the number 0", "from 1e-7 to 0.1"]),
        (
            "250.0",
            "250.0\ntolerance = 1e-20",
            ["run.toml:7: image.tolerance: found the number 1e-20", "from 1e-7 to 0.1"],
        ),
        (
            "beam = \"dish13\"",
            "beam = \"dish12\"",
            ["run.toml:12: stations.beam: no beam is called \"dish12\"", "did you mean \"dish13\"?"],
        ),
        (
            "\"airy\"",
            "\"round\"",
            ["run.toml:8: beams.dish13.shape: no shape is called \"round\"", "gaussian, airy, unity"],
        ),
        ("\"*\"", "\"{HF\"", ["run.toml:11: stations.match: found \"{HF\", which is no glob", "expected a glob"]),
        ("[beams", "[image]\n[beams", ["run.toml:7: duplicate key at `image`", "expected TOML"]),
        ("fell-1-clean", "fell-9", ["run.toml:2: pointing.visibilities: ", "fell-9.uvfits: no such file"]),
        (
            "/fell-1-clean.uvfits",
            "",
            ["run.toml:2: pointing.visibilities: ", "hollin-fell: is a folder; expected a visibility file"],
        ),
        ("[image]", "[picture]", ["run.toml:3: picture: unknown key", "expected one of: title"]),
        ("diameter_m = 13.0", "", ["run.toml:7: beams.dish13.diameter_m: missing", "diameter in metres"]),
    ] {
        let message = fell(line, replacement).refused("image");
        for part in parts {
            assert!(message.contains(part), "{replacement}: no {part:?} in\n{message}");
        }
    }
}

#[test]
fn all_stations_without_a_beam_are_named() {
    let message = fell("\"*\"", "\"HF*\"").refused("image");
    assert!(
        message.contains("run.toml:10: stations: no beam for stations LF01, LF02, LF03, LF04, LF05 of "),
        "{message}"
    );
    assert!(message.contains("`match = \"LF0*\"`, `beam = \"dish13\"`"), "{message}");
}

#[test]
fn a_bad_row_of_the_station_table_is_named() {
    let folder = fell("[[pointing]]", "station_table = \"who.csv\"\n[[pointing]]");
    std::fs::write(folder.path("who.csv"), "name,beam,pointing_x_arcmin\nHF01,dish13,0.1\nHF02,dish13,a lot\n")
        .expect("a table");
    let message = folder.refused("image");
    assert!(
        message.contains("who.csv:3: pointing_x_arcmin: found \"a lot\"; expected an offset in arcminutes"),
        "{message}"
    );
}

#[test]
fn files_that_are_no_run_files() {
    let folder = Folder::with(b"title = \"fell\"\nx = \"\xff\"\n");
    assert!(folder.refused("image").contains("run.toml:2: the run file is not UTF-8 text"));
    assert!(
        Folder::with(b"").refused("image").contains("run.toml:1: pointing: missing; expected entries [[pointing]]")
    );
    let (_, message) = run(&["image", "nowhere/run.toml"], 2);
    assert!(message.contains("nowhere/run.toml: the run file cannot be read: "), "{message}");
    let (_, message) = run(&["image", FELL], 2);
    assert!(message.contains("hollin-fell: the run file cannot be read: "), "{message}");
}

#[test]
fn the_other_table_is_asked_for() {
    let message = fell("", "").refused("simulate");
    assert!(message.contains("run.toml:1: simulate: missing; expected a table [simulate]"), "{message}");
    let simulate = "[simulate]\noutput='o'\nsky='sky.csv'\nstations='lay.csv'\nsite_deg=[1,2]\ntimes=1\ninterval_s=1\n\
        first_hz=1e9\nchannel_hz=1e6\nchannels=1\nhands=['I']\nstart_utc=2026-01-01T00:00:00Z\n\
        [[simulate.pointing]]\nname='A'\naim_deg=[1,2]\n";
    let folder = Folder::with(simulate.as_bytes());
    assert!(folder.refused("image").contains("run.toml:1: image: missing; expected a table [image]"));
    let message = folder.refused("simulate");
    assert!(
        message.contains("run.toml:3: simulate.sky: ") && message.contains("sky.csv: no such file"),
        "{message}"
    );
    assert!(message.contains("run.toml:4: simulate.stations: "), "{message}");
}

/// A file stands where the folder should be made (permissions would not stop a superuser).
#[test]
fn an_output_folder_that_cannot_be_made_is_told() {
    let folder = fell("", "");
    let (file, out) = (folder.path("run.toml"), folder.path("run.toml/products"));
    let [file, out] = [&file, &out].map(|path| path.to_str().expect("a plain name"));
    let (said, message) = run(&["image", "--quiet", file, "--out", out], 1);
    assert!(
        said.is_empty() && message.contains("run.toml/products: the output folder cannot be made or written in ("),
        "{message}"
    );
}

#[test]
fn wrong_usage_has_status_2_and_help_status_0() {
    for wrong in
        [&["imagine", "x"][..], &["image"], &["describe"], &["image", "a", "b"], &["describe", "a", "--thread"]]
    {
        let (out, err) = run(wrong, 2);
        assert!(out.is_empty() && err.contains("Usage: evensky"), "{wrong:?}: {err}");
    }
    assert!(run(&["describe", "a", "--threads", "0"], 2).1.contains("--threads"));
    assert!(run(&["describe", "a", "--out", "b"], 2).1.contains("describe writes no files"));
    for help in [&["--help"][..], &["-h"], &["image", "--help"], &["simulate", "-h"], &["describe", "--help"]] {
        let (out, err) = run(help, 0);
        assert!(
            err.is_empty() && out.contains("Usage: evensky") && out.contains("--threads <N>"),
            "{help:?}: {out}"
        );
    }
    assert_eq!(run(&["--version"], 0).0, format!("evensky {}\n", env!("CARGO_PKG_VERSION")));
}

#[test]
fn describe_tells_what_the_files_hold() {
    let files: Vec<String> = (1..=3).map(|i| format!("{FELL}/fell-{i}-clean.uvfits")).collect();
    let (out, err) = run(&["describe", "--threads", "1", &files[0], &files[1], &files[2]], 0);
    // the README beside the files: 14 stations, dishes of 13 m and 8 m, 6 channels of 20 MHz from 1.30 GHz, 24 times
    // 12 min apart, XX and YY
    for part in [
        "6, 1.3 GHz to 1.4 GHz, each 20 MHz wide",
        "24 times, mostly 720 s apart",
        "hands         XX YY",
        "stations      14, about longitude",
        "stations      14, as for ",
        "    pixel_arcsec = ",
    ] {
        assert!(out.contains(part), "no {part:?} in\n{out}");
    }
    assert!(err.contains("reading: 3 files in "), "{err}");
    let rows = |start: &str| out.lines().filter(|line| line.trim_start().starts_with(start)).count();
    assert_eq!((rows("HF0"), rows("LF0")), (9, 5));
    let dish = |name: &str| out.lines().find(|line| line.contains(name)).map(str::to_owned).unwrap_or_default();
    assert!(dish("HF01").contains(" 13.0  alt-azimuth") && dish("LF01").contains(" 8.0  alt-azimuth"), "{out}");
}

#[test]
fn described_positions_are_those_of_the_layout() {
    let (out, err) = run(&["describe", "--json", &format!("{FELL}/fell-1-clean.uvfits")], 0);
    assert_eq!(err, "", "no progress with --json");
    let told: serde_json::Value = serde_json::from_str(&out).expect("one JSON object");
    let stations = told["pointings"][0]["stations"].as_array().expect("stations");
    let layout = std::fs::read_to_string(format!("{FELL}/fell-stations.csv")).expect("the layout");
    let wanted: Vec<(String, [f64; 3])> = layout
        .lines()
        .skip(1)
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            (cells[0].to_owned(), [1, 2, 3].map(|i| cells[i].parse().expect("a number")))
        })
        .collect();
    assert_eq!((wanted.len(), stations.len()), (14, 14));
    let mean: [f64; 3] = [0, 1, 2].map(|axis| wanted.iter().map(|(_, enu)| enu[axis]).sum::<f64>() / 14.0);
    for (station, (name, enu)) in stations.iter().zip(&wanted) {
        assert_eq!(station["name"].as_str(), Some(name.as_str()));
        for axis in 0..3 {
            let got = station["east_north_up_m"][axis].as_f64().expect("a number");
            // about the mean, not the site: over 450 m the verticals part by 7e-5 rad (3 cm), and the tables' own rounding
            let difference = (got - (enu[axis] - mean[axis])).abs();
            assert!(difference < 0.05, "{name} axis {axis}: {got} differs by {difference} m");
        }
    }
}

#[test]
fn describe_refuses_what_is_no_visibility_file() {
    let folder = Folder::with(b"title = 'not FITS'");
    for (name, part) in [("run.toml", "run.toml"), ("missing.fits", "missing.fits"), ("", "")] {
        let file = folder.path(name);
        let (out, err) = run(&["describe", "--quiet", file.to_str().expect("a plain name")], 1);
        assert!(out.is_empty() && err.starts_with("evensky: ") && err.contains(part), "{name}: {err}");
        assert!(err.lines().count() <= 3, "{err}");
    }
}

#[test]
fn quiet_says_nothing_but_the_result() {
    let file = format!("{FELL}/fell-1-clean.uvfits");
    let (out, err) = run(&["--quiet", "describe", &file], 0);
    assert!(err.is_empty() && out.contains("HOLLIN"), "{err}");
}

/// The reader of a pipe that has seen enough is no failure.
#[test]
fn a_closed_pipe_is_success() {
    let file = format!("{FELL}/fell-1-clean.uvfits");
    let mut child = evensky()
        .args(["describe", "--json", &file])
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("the program starts");
    drop(child.stdout.take());
    let output = child.wait_with_output().expect("the program ends");
    assert_eq!((output.status.code(), said(&output.stderr).as_str()), (Some(0), ""));
}

/// A standard output that takes nothing is a failure that is told.
#[cfg(target_os = "linux")]
#[test]
fn a_full_standard_output_is_told() {
    let full = std::fs::OpenOptions::new().write(true).open("/dev/full").expect("/dev/full");
    let file = format!("{FELL}/fell-1-clean.uvfits");
    let output = evensky().args(["describe", "--quiet", &file]).stdout(full).output().expect("the program starts");
    assert_eq!(output.status.code(), Some(1));
    assert!(said(&output.stderr).contains("standard output cannot be written: "), "{}", said(&output.stderr));
}

/// Names that are not UTF-8 are names like others.
#[cfg(unix)]
#[test]
fn any_file_name_can_be_described() {
    use std::os::unix::ffi::OsStrExt;
    let folder = Folder::with(b"");
    let odd = folder.path("").join(Path::new(std::ffi::OsStr::from_bytes(b"f\xe9ll [1].uvfits")));
    std::fs::copy(format!("{FELL}/fell-1-clean.uvfits"), &odd).expect("a copy");
    let output = evensky().args(["describe", "--quiet"]).arg(&odd).output().expect("the program starts");
    assert_eq!(output.status.code(), Some(0), "{}", said(&output.stderr));
}
