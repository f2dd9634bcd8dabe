//! What the run file refuses and how it says so, through the library; `command_line.rs` does the same through the
//! program.

use evensky::run::{GridWindow, Method, Problem, RunError, RunFile, Shape, Sources};
use std::path::Path;

const GOOD: &str = r#"title = "Two dishes"

[[pointing]]
visibilities = "a.fits"

[[pointing]]
visibilities = "sub/b.fits"
aim_deg = [152.0, 41]
sources = ["N1"]
response_radius_deg = 2.5

[image]
centre_deg = [152.678, 41.863]
size_px = [400, 300]
pixel_arcsec = 25
response_radius_deg = 3

[weighting]
scheme = "natural"

[beams.dish13]
shape = "airy"
diameter_m = 13.0
blockage_m = 1.3

[beams.dish8]
shape = "gaussian"
half_power_deg = [1.7, 1.58]
at_hz = [1.26e9, 1.36e9]
axis_ratio = 1.05

[[stations]]
match = "HF*"
beam = "dish13"
"#;

const SIMULATE: &str = r#"
[simulate]
output = "made.fits"
sky = "sky.csv"
stations = "layout.csv"
site_deg = [21.4, -30.7]
site_height_m = 1050
start_utc = 2026-03-01T20:15:00Z
times = 10
interval_s = 60
integration_s = 30
first_hz = 1.3e9
channel_hz = 2e7
channels = 6
hands = ["XX", "YY"]
noise_jy = 0.01
seed = 7
flagged_fraction = 0.03
[[simulate.pointing]]
name = "N1"
aim_deg = [152.0, 41.0]
[[simulate.pointing]]
name = "N2"
aim_deg = [153.0, 41.0]
start_utc = "2026-03-02T20:15:00"
response_radius_deg = 1.5
"#;

fn parse(text: &str) -> Result<RunFile, RunError> {
    RunFile::parse(Path::new("folder/run.toml"), text)
}

/// The complaint about `text`, which must be the only one; `at` is "line: key".
fn only_complaint(text: &str, at: &str) -> String {
    let error = parse(text).expect_err(text);
    let message = error.to_string();
    assert_eq!(error.complaints().len(), 1, "{message}");
    let start = format!("folder/run.toml:{at}");
    assert!(message.starts_with(&start), "expected {start}: {message}");
    message
}

/// `GOOD` with one line replaced, and the number of that line.
fn with(line: &str, replacement: &str) -> (String, usize) {
    let number = 1 + GOOD.lines().position(|l| l == line).unwrap_or_else(|| panic!("{line}"));
    (GOOD.replacen(&format!("{line}\n"), &format!("{replacement}\n"), 1), number)
}

#[test]
fn a_good_file_is_resolved_with_defaults() {
    let run = parse(GOOD).unwrap();
    assert_eq!(run.pointings[1].visibilities.value, Path::new("folder/sub/b.fits"));
    assert_eq!((run.pointings[0].line, run.pointings[1].visibilities.line), (3, 7));
    assert_eq!(run.pointings[0].sources, Sources::All);
    assert_eq!(run.pointings[1].sources, Sources::Named(vec!["N1".to_owned()]));
    assert_eq!((run.response_radius_deg(0), run.response_radius_deg(1)), (Some(3.0), Some(2.5)));
    let image = run.image().unwrap();
    assert_eq!((image.geometry.width, image.geometry.height), (400, 300));
    assert!((image.geometry.pixel.to_degrees() * 3600.0 - 25.0).abs() < 1e-12);
    assert_eq!((image.tolerance.value, image.lowest_response.value), (1e-4, 0.1));
    assert_eq!(run.beams["dish13"].shape, Shape::Airy { diameter_m: 13.0, blockage_m: 1.3 });
    let two = Shape::Gaussian { half_power_deg: vec![1.7, 1.58], at_hz: vec![1.26e9, 1.36e9], axis_ratio: 1.05 };
    assert_eq!(run.beams["dish8"].shape, two);
    // resolved settings go to run.json
    let json = serde_json::to_value(&run).unwrap();
    assert_eq!(json["beams"]["dish13"]["shape"], "airy");
    assert_eq!(json["station_rules"][0]["match"], "HF*");
}

#[test]
fn a_simulation_can_stand_alone_or_beside_an_image() {
    let run = parse(SIMULATE).unwrap();
    let simulate = run.simulate.as_ref().unwrap();
    assert_eq!(simulate.output.value, Path::new("folder/made.fits"));
    assert_eq!(simulate.method.value, Method::Exact);
    assert_eq!((simulate.integration_s, simulate.seed), (30.0, 7));
    // astropy 8.0.2: Time("2026-03-01T20:15:00", scale="utc").mjd
    let starts: Vec<f64> = simulate.pointings.iter().map(|p| p.start_mjd_utc).collect();
    assert_eq!(starts, [61100.84375, 61101.84375]);
    assert!(run.image().unwrap_err().to_string().contains("image: missing; expected a table [image]"));
    assert!(run.pointings().is_err());
    let both = parse(&format!("{GOOD}{SIMULATE}")).unwrap();
    assert_eq!(both.simulated_response_radius_deg(0), Some(3.0));
    assert_eq!(both.simulated_response_radius_deg(1), Some(1.5));
    assert!(both.image().is_ok());
}

#[test]
fn windows_have_names() {
    let parsed =
        |name: &str| parse(&GOOD.replace("pixel_arcsec = 25", &format!("pixel_arcsec = 25\nwindow = {name}")));
    for (name, window) in [
        ("\"kaiser-bessel\"", GridWindow::KaiserBessel),
        ("\"spheroidal\"", GridWindow::Spheroidal),
        ("\"nearest\"", GridWindow::Nearest),
    ] {
        assert_eq!(parsed(name).unwrap().image().unwrap().window, window);
    }
    assert_eq!(parse(GOOD).unwrap().image().unwrap().window, GridWindow::default());
    for bad in ["\"boxcar\"", "7"] {
        let refused = parsed(bad).unwrap_err().to_string();
        assert!(refused.contains("image.window: found") && refused.contains("\"spheroidal\""), "{refused}");
    }
}

#[test]
fn unknown_keys_suggest_the_nearest() {
    for (line, replacement, key, meant) in [
        (
            "pixel_arcsec = 25",
            "pixel_arcsec = 25\nlowest_responce = 0.1",
            "image.lowest_responce",
            "lowest_response",
        ),
        ("blockage_m = 1.3", "\nblockage = 1.3", "beams.dish13.blockage", "blockage_m"),
        (
            "beam = \"dish13\"",
            "beam = \"dish13\"\npointing_arcmins = [0, 0]",
            "stations.pointing_arcmins",
            "pointing_arcmin",
        ),
        ("sources = [\"N1\"]", "\nsource = [\"N1\"]", "pointing[2].source", "sources"),
        ("[weighting]", "[wheighting]", "wheighting", "weighting"),
    ] {
        let (text, number) = with(line, replacement);
        let number = number + usize::from(replacement.contains('\n'));
        let message = only_complaint(&text, &format!("{number}: {key}: unknown key"));
        assert!(message.contains(&format!("did you mean \"{meant}\"?")), "{message}");
        assert!(message.contains("expected one of: "), "{message}");
    }
}

#[test]
fn a_key_of_another_shape_is_unknown() {
    let (text, number) = with("axis_ratio = 1.05", "diameter_m = 8.0");
    let message = only_complaint(&text, &format!("{number}: beams.dish8.diameter_m: unknown key"));
    assert!(message.ends_with("expected one of: shape, half_power_deg, at_hz, axis_ratio"), "{message}");
}

#[test]
fn wrong_types_and_values_say_what_was_found_and_expected() {
    for (line, replacement, key, found, expected) in [
        (
            "pixel_arcsec = 25",
            "pixel_arcsec = \"25\"",
            "image.pixel_arcsec",
            "found the string \"25\"",
            "side of a pixel",
        ),
        ("pixel_arcsec = 25", "pixel_arcsec = -1", "image.pixel_arcsec", "found the number -1", "greater than 0"),
        ("pixel_arcsec = 25", "pixel_arcsec = nan", "image.pixel_arcsec", "found the number nan", "greater than 0"),
        (
            "pixel_arcsec = 25",
            "pixel_arcsec = 1e999",
            "image.pixel_arcsec",
            "found the number 1e999",
            "greater than 0",
        ),
        ("size_px = [400, 300]", "size_px = [0, 300]", "image.size_px", "the list [0, 300]", "each at least 1"),
        ("size_px = [400, 300]", "size_px = [400]", "image.size_px", "the list [400]", "[width, height]"),
        ("size_px = [400, 300]", "size_px = [40.5, 300]", "image.size_px", "the list [40.5, 300]", "whole numbers"),
        (
            "size_px = [400, 300]",
            "size_px = [100000, 100000]",
            "image.size_px",
            "100000 × 100000",
            "at most 1073741824",
        ),
        (
            "size_px = [400, 300]",
            "size_px = [40000, 300]",
            "image.size_px",
            "wider than a hemisphere",
            "one hemisphere",
        ),
        ("centre_deg = [152.678, 41.863]", "centre_deg = [10, 91]", "image.centre_deg", "[10, 91]", "-90 to 90"),
        (
            "scheme = \"natural\"",
            "scheme = \"unifrom\"",
            "weighting.scheme",
            "no weighting scheme is called \"unifrom\"",
            "uniform",
        ),
        ("scheme = \"natural\"", "scheme = 3", "weighting.scheme", "found the number 3", "natural"),
        ("diameter_m = 13.0", "diameter_m = 0", "beams.dish13.diameter_m", "found the number 0", "greater than 0"),
        (
            "blockage_m = 1.3",
            "blockage_m = 13",
            "beams.dish13.blockage_m",
            "a blockage of 13 m",
            "less than diameter_m",
        ),
        (
            "shape = \"airy\"",
            "shape = \"airey\"",
            "beams.dish13.shape",
            "no shape is called \"airey\" (did you mean \"airy\"?)",
            "gaussian",
        ),
        (
            "at_hz = [1.26e9, 1.36e9]",
            "at_hz = [-1.26e9, 1.36e9]",
            "beams.dish8.at_hz",
            "the list [-1.26e9, 1.36e9]",
            "greater than 0",
        ),
        ("at_hz = [1.26e9, 1.36e9]", "at_hz = [1.36e9, 1.26e9]", "beams.dish8.at_hz", "out of order", "ascending"),
        ("match = \"HF*\"", "match = \"HF[\"", "stations.match", "\"HF[\", which is no glob", "* any letters"),
        (
            "beam = \"dish13\"",
            "beam = \"dish31\"",
            "stations.beam",
            "no beam is called \"dish31\" (did you mean \"dish13\"?)",
            "there are: dish13, dish8",
        ),
        ("beam = \"dish13\"", "beam = [\"dish13\"]", "stations.beam", "the list [\"dish13\"]", "name of a beam"),
        (
            "sources = [\"N1\"]",
            "sources = \"N1\"",
            "pointing[2].sources",
            "the string \"N1\"",
            "list of source names",
        ),
        (
            "sources = [\"N1\"]",
            "sources = [\"N1\", \"N2\"]",
            "pointing[2].aim_deg",
            "one aim for 2 sources",
            "one entry [[pointing]]",
        ),
        ("title = \"Two dishes\"", "title = 2026-03-01", "title", "the time 2026-03-01", "a title"),
        ("title = \"Two dishes\"", "title = \"\"", "title", "an empty string", "a title"),
    ] {
        let (text, number) = with(line, replacement);
        // the one complaint about another line than the one changed
        let number = if key.ends_with("aim_deg") { number - 1 } else { number };
        let message = only_complaint(&text, &format!("{number}: {key}: "));
        assert!(message.contains(found), "{replacement}: {message}");
        assert!(message.contains(expected), "{replacement}: {message}");
    }
}

#[test]
fn the_tolerance_has_a_range_and_a_reason() {
    for tolerance in ["0", "1e-20", "0.2", "-1e-4", "inf", "nan"] {
        let (text, number) = with("pixel_arcsec = 25", &format!("pixel_arcsec = 25\ntolerance = {tolerance}"));
        let message = only_complaint(&text, &format!("{}: image.tolerance: found the number ", number + 1));
        assert!(message.contains("expected a relative error from 1e-7 to 0.1: below, the rounding"), "{message}");
    }
    for tolerance in ["1e-7", "0.1"] {
        let (text, _) = with("pixel_arcsec = 25", &format!("pixel_arcsec = 25\ntolerance = {tolerance}"));
        assert!(parse(&text).is_ok(), "{tolerance}");
    }
}

#[test]
fn everything_wrong_is_reported_at_once_in_the_order_of_lines() {
    let text = "colour = 1\n[[pointing]]\n[image]\nsize_px = [0, 0]\n[[stations]]\nmatch = \"*\"\nbeam = \"x\"\n";
    let error = parse(text).unwrap_err();
    let lines: Vec<usize> = error.complaints().iter().map(|complaint| complaint.line).collect();
    assert_eq!(lines, [1, 2, 3, 3, 4, 7], "{error}");
    assert_eq!(error.to_string().lines().count(), 6);
    assert!(error.to_string().contains("3: image.centre_deg: missing; expected [right ascension, declination]"));
}

#[test]
fn missing_keys_are_named_where_they_should_be() {
    for (line, key) in [
        ("visibilities = \"a.fits\"", "pointing[1].visibilities"),
        ("centre_deg = [152.678, 41.863]", "image.centre_deg"),
        ("size_px = [400, 300]", "image.size_px"),
        ("pixel_arcsec = 25", "image.pixel_arcsec"),
        ("shape = \"airy\"", "beams.dish13.shape"),
        ("diameter_m = 13.0", "beams.dish13.diameter_m"),
        ("half_power_deg = [1.7, 1.58]", "beams.dish8.half_power_deg"),
        ("at_hz = [1.26e9, 1.36e9]", "beams.dish8.at_hz"),
        ("match = \"HF*\"", "stations.match"),
        ("beam = \"dish13\"", "stations.beam"),
    ] {
        let (text, number) = with(line, "");
        let error = parse(&text).unwrap_err();
        let complaint = &error.complaints()[0];
        assert_eq!(complaint.key, key);
        assert!(matches!(complaint.problem, Problem::Missing { .. }), "{error}");
        assert!(complaint.line < number, "{error}");
    }
}

#[test]
fn tables_written_as_something_else() {
    only_complaint(&GOOD.replacen("[[stations]]", "[stations]", 1), "32: stations: found a table; expected a list");
    let message = only_complaint(&GOOD.replacen("[weighting]", "[[weighting]]", 1), "18: weighting: found");
    assert!(message.contains("expected a table, written [weighting]"), "{message}");
    // a table or a key twice is an error of TOML itself
    for (addition, word) in [("[image]\n", "image"), ("[beams.dish8]\n", "dish8"), ("beam = \"dish8\"\n", "beam")] {
        let message = only_complaint(&format!("{GOOD}{addition}"), "35: duplicate key at ");
        assert!(message.contains(word), "{message}");
    }
}

#[test]
fn errors_of_syntax_have_lines() {
    for (text, line) in [("title = \n", 1), ("a = 1\n[image\n", 2), ("a = 1\n\n= 3\n", 3), ("a = \"x\nb = 2", 1)] {
        let error = parse(text).unwrap_err();
        assert_eq!(error.complaints()[0].line, line, "{text:?}: {error}");
        assert!(error.complaints().iter().all(|c| matches!(c.problem, Problem::Syntax(_))), "{error}");
    }
}

#[test]
fn an_empty_file_asks_for_nothing() {
    for text in ["", "\n# only a comment\n", "title = \"x\"\n"] {
        only_complaint(text, "1: pointing: missing; expected entries [[pointing]]");
    }
}

#[test]
fn what_a_simulation_refuses() {
    for (line, replacement, key, part) in [
        ("times = 10", "times = 0", "simulate.times", "a whole number, at least 1"),
        (
            "integration_s = 30",
            "integration_s = 90",
            "simulate.integration_s",
            "no more than interval_s, which is 60",
        ),
        ("first_hz = 1.3e9", "first_hz = -1.3e9", "simulate.first_hz", "found the number -1.3e9"),
        ("channel_hz = 2e7", "channel_hz = 0", "simulate.channel_hz", "greater than 0"),
        ("hands = [\"XX\", \"YY\"]", "hands = [\"XX\", \"LL\"]", "simulate.hands", "[\"RR\", \"LL\"]"),
        ("noise_jy = 0.01", "noise_jy = -1", "simulate.noise_jy", "at least 0"),
        ("seed = 7", "seed = -7", "simulate.seed", "at least 0"),
        ("flagged_fraction = 0.03", "flagged_fraction = 1", "simulate.flagged_fraction", "less than 1"),
        ("seed = 7", "method = \"gridded\"", "simulate.method", "\"gridded\" without a table [image]"),
        ("seed = 7", "method = \"fast\"", "simulate.method", "\"exact\" or \"gridded\""),
        ("site_deg = [21.4, -30.7]", "site_deg = [21.4, -130.7]", "simulate.site_deg", "-90 to 90"),
        (
            "start_utc = 2026-03-01T20:15:00Z",
            "start_utc = 2026-03-01",
            "simulate.start_utc",
            "2026-03-01T20:15:00Z",
        ),
        (
            "start_utc = 2026-03-01T20:15:00Z",
            "",
            "simulate.pointing[1].start_utc",
            "missing; expected here or in [simulate]",
        ),
        ("name = \"N2\"", "name = \"N1\"", "simulate.pointing[2].name", "\"N1\" a second time"),
        (
            "name = \"N2\"",
            "name = \"a name that is far too long\"",
            "simulate.pointing[2].name",
            "at most 16 letters",
        ),
    ] {
        let number = 1 + SIMULATE.lines().position(|l| l == line).unwrap_or_else(|| panic!("{line}"));
        let text = SIMULATE.replacen(&format!("{line}\n"), &format!("{replacement}\n"), 1);
        let number = if replacement.is_empty() { 19 } else { number };
        let message = only_complaint(&text, &format!("{number}: {key}: "));
        assert!(message.contains(part), "{message}");
    }
}

#[test]
fn gridded_simulation_needs_the_image() {
    let text = format!("{GOOD}{}", SIMULATE.replace("seed = 7", "method = \"gridded\""));
    assert_eq!(parse(&text).unwrap().simulate.unwrap().method.value, Method::Gridded);
}

/// Writes a table beside a run file and reads both.
fn with_table(table: &str, run: &str) -> (tempfile::TempDir, Result<RunFile, RunError>) {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("table.csv"), table).unwrap();
    std::fs::write(folder.path().join("run.toml"), run).unwrap();
    let result = RunFile::read(&folder.path().join("run.toml"));
    (folder, result)
}

fn table_run() -> String {
    format!("station_table = \"table.csv\"\n{GOOD}")
}

#[test]
fn the_station_table_comes_first_and_entries_override_it() {
    let table = "# positions and beams\nname,east_m,north_m,up_m,beam,pointing_x_arcmin,pointing_y_arcmin\n\
                 HF01,1,2,3,dish8,0.5,-0.5\nLF01,1,2,3, dish8 ,,\nXF01,1,2,3,,1.5,\n";
    let (_folder, run) = with_table(table, &table_run());
    let run = run.unwrap();
    let of = |name: &str| {
        let settings = run.station(name);
        (settings.beam, settings.pointing_arcmin)
    };
    assert_eq!(of("HF01"), (Some("dish13".to_owned()), [0.5, -0.5]));
    assert_eq!(of("LF01"), (Some("dish8".to_owned()), [0.0, 0.0]));
    assert_eq!(of("XF01"), (None, [1.5, 0.0]));
    assert_eq!(of("YF01"), (None, [0.0, 0.0]));
    let warnings = run.unmatched(&["HF01", "LF01"]);
    assert!(
        warnings.len() == 1 && warnings[0].ends_with("no visibility file has the station XF01"),
        "{warnings:?}"
    );
}

#[test]
fn bad_station_tables_name_the_row() {
    for (table, at, part) in [
        ("name,beam\nHF01,dish13\nHF02,dish9\n", "3: beam", "no beam is called \"dish9\""),
        ("name,beam\nHF01,dish13,7\n", "2: ", "3 cells under 2 headings"),
        ("name,beam,pointing_x_arcmin\nHF01,dish13,east\n", "2: pointing_x_arcmin", "found \"east\""),
        ("name,beam,pointing_x_arcmin\nHF01,dish13,inf\n", "2: pointing_x_arcmin", "found \"inf\""),
        ("name,beam\n,dish13\n", "2: name", "an empty cell"),
        ("station,beam\nHF01,dish13\n", "1: name", "the columns station, beam"),
        ("name,beam\nHF01,dish13\n\nHF01,dish8\n", "4: name", "also stands on line 2"),
        ("name,beam\n", "1: ", "no rows"),
        ("", "1: name", "the columns"),
        ("name,name\na,b\n", "1: name", "the column twice"),
    ] {
        let (_folder, run) = with_table(table, &table_run());
        let message = run.expect_err(table).to_string();
        assert!(message.contains(&format!("table.csv:{at}")), "{table:?}: {message}");
        assert!(message.contains(part), "{table:?}: {message}");
    }
}

#[test]
fn a_station_table_that_is_not_there() {
    let error = RunFile::parse(Path::new("nowhere/run.toml"), &table_run()).unwrap_err().to_string();
    assert!(error.contains("nowhere/run.toml:1: station_table: nowhere/table.csv: no such file"), "{error}");
}

#[test]
fn layouts_are_read_and_refused_by_row() {
    let run = SIMULATE.replace("layout.csv", "table.csv");
    let good = "name,east_m,north_m,up_m,mount,diameter_m,beam\nA,0,0,0,,13,x\nB,10.5,-3,1,equatorial,,y\n";
    let (_folder, read) = with_table(good, &run);
    let stations = read.unwrap().simulate.unwrap().layout().unwrap();
    assert_eq!(stations[1].east_north_up_m, [10.5, -3.0, 1.0]);
    assert_eq!((stations[0].diameter_m, stations[1].diameter_m), (Some(13.0), None));
    for (table, at, part) in [
        ("name,east_m,north_m\nA,0,0\n", "1: up_m", "the columns name, east_m, north_m"),
        ("name,east_m,north_m,up_m\nA,0,0,0\n", "1: name", "one station; expected at least two"),
        ("name,east_m,north_m,up_m\nA,0,,0\nB,1,1,1\n", "2: north_m", "an empty cell"),
        ("name,east_m,north_m,up_m\nA,0,0,0\nA,1,1,1\n", "3: name", "also stands on line 2"),
        ("name,east_m,north_m,up_m,mount\nA,0,0,0,xy\nB,1,1,1,\n", "2: mount", "\"alt-azimuth\" or \"equatorial\""),
        ("name,east_m,north_m,up_m,diameter_m\nA,0,0,0,-1\nB,1,1,1,\n", "2: diameter_m", "greater than 0"),
    ] {
        let (_folder, read) = with_table(table, &run);
        let message = read.unwrap().simulate.unwrap().layout().expect_err(table).to_string();
        assert!(message.contains(&format!("table.csv:{at}: ")), "{message}");
        assert!(message.contains(part), "{message}");
    }
}

/// Every key that the page about the run file shows is one that is read, and its example is a good run file.
#[test]
fn the_page_about_the_run_file_is_true() {
    let page = include_str!("../docs/run-file.md");
    let examples: Vec<&str> = page.split("```toml\n").skip(1).filter_map(|rest| rest.split("```").next()).collect();
    assert!(examples.len() >= 2, "only {} examples", examples.len());
    for example in examples {
        let folder = tempfile::tempdir().unwrap();
        let table = "name,beam\nW01,dish13\n";
        std::fs::write(folder.path().join("stations.csv"), table).unwrap();
        if let Err(error) = RunFile::parse(&folder.path().join("run.toml"), example) {
            panic!("{error}\n{example}");
        }
    }
}

/// A seeded storm of broken files: an error or a run, never a panic.
#[test]
fn broken_files_never_panic() {
    use rand::{Rng, SeedableRng};
    let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(20_261_201);
    let whole = format!("{GOOD}{SIMULATE}");
    let (mut refused, mut taken) = (0, 0);
    for _ in 0..3000 {
        let mut bytes = whole.clone().into_bytes();
        for _ in 0..rng.random_range(1..4) {
            let at = rng.random_range(0..bytes.len());
            match rng.random_range(0..4) {
                0 => bytes.truncate(at.max(1)),
                1 => bytes[at] = b"[]{}=\"'\n.,#-09e_"[rng.random_range(0..16)],
                2 => drop(bytes.remove(at)),
                _ => bytes.insert(at, b"[]{}=\"'\n.,#-09e_"[rng.random_range(0..16)]),
            }
        }
        match std::str::from_utf8(&bytes).map(parse) {
            Ok(Ok(_)) => taken += 1,
            Ok(Err(error)) => {
                refused += 1;
                assert!(error.to_string().starts_with("folder/run.toml:"), "{error}");
                assert!(!error.complaints().is_empty());
            }
            Err(_) => {}
        }
    }
    assert!(
        refused > 1000 && taken > 50,
        "{refused} refused, {taken} taken: the storm does not test what it should"
    );
}
