//! `evensky simulate`: what it writes, read back, against closed forms and the statement of the run file.

use evensky::observation::{
    BlockSource, MemorySource, Mount, Selection, Site, baseline_uvw, hour_angle_declination, open,
};
use num_complex::Complex64;
use std::f64::consts::TAU;
use std::path::PathBuf;
use std::process::{Command, Output};

const LIGHT: f64 = 299_792_458.0;
/// Longitude, latitude (degrees) and height of the invented site of these tests, in the open sea.
const SITE: [f64; 3] = [-28.5, 41.2, 15.0];

const LAYOUT: &str = "\
name,east_m,north_m,up_m,mount,diameter_m
P1,0,0,0,alt-azimuth,14
P2,120.5,-31.25,2.5,alt-azimuth,14
P3,-88.0,140.75,-1.5,alt-azimuth,14
P4,211.0,97.5,4.0,alt-azimuth,14
Q1,-163.25,-77.0,0.5,equatorial,9
Q2,35.0,-210.5,-3.0,equatorial,9
";
const SKY: &str = "\
name,ra_deg,dec_deg,flux_jy,reference_hz,spectral_index
A,201.30,29.80,1.25,1.2e9,-0.7
B,201.93,29.61,0.40,1.2e9,0.3
C,200.87,30.22,0.75,1.2e9,0.0
";

/// A folder with a run file, a layout and a sky.
struct Scene(tempfile::TempDir);

impl Scene {
    /// The scene with some lines of its run file replaced.
    fn new(changes: &[(&str, &str)]) -> Scene {
        let mut text = format!(
            r#"title = "A test"
[image]
centre_deg = [201.3, 29.8]
size_px = [64, 64]
pixel_arcsec = 90
tolerance = 1e-5
[simulate]
output = "seen.fits"
sky = "sky.csv"
stations = "layout.csv"
array = "TESTS"
site_deg = [{}, {}]
site_height_m = {}
start_utc = 2026-02-11T02:30:00Z
times = 20
interval_s = 600
integration_s = 30
first_hz = 1.15e9
channel_hz = 25e6
channels = 3
hands = ["XX", "YY"]
noise_jy = 0
seed = 5
method = "exact"
[[simulate.pointing]]
name = "WEST"
aim_deg = [201.3, 29.8]
[[simulate.pointing]]
name = "EAST"
aim_deg = [201.9, 29.9]
start_utc = 2026-02-11T02:35:00Z
[beams.large]
shape = "airy"
diameter_m = 14
blockage_m = 2
[beams.small]
shape = "gaussian"
half_power_deg = 1.9
at_hz = 1.2e9
axis_ratio = 1.1
[[stations]]
match = "P*"
beam = "large"
[[stations]]
match = "Q*"
beam = "small"
pointing_arcmin = [2.0, -3.5]
"#,
            SITE[0], SITE[1], SITE[2]
        );
        for (line, replacement) in changes {
            assert!(text.contains(line), "{line}");
            text = text.replace(line, replacement);
        }
        let folder = tempfile::tempdir().expect("a temporary folder");
        for (name, content) in [("run.toml", text.as_str()), ("layout.csv", LAYOUT), ("sky.csv", SKY)] {
            std::fs::write(folder.path().join(name), content).expect("a written file");
        }
        Scene(folder)
    }

    fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    /// Runs the program; returns standard output and standard error.
    fn simulate(&self, flags: &[&str], status: i32) -> (String, String) {
        let Output { status: got, stdout, stderr } = Command::new(env!("CARGO_BIN_EXE_evensky"))
            .arg("simulate")
            .arg(self.path("run.toml"))
            .args(flags)
            .output()
            .expect("the program starts");
        let [out, err] = [stdout, stderr].map(|bytes| String::from_utf8(bytes).expect("messages are UTF-8"));
        assert_eq!(got.code(), Some(status), "--- out\n{out}\n--- err\n{err}");
        (out, err)
    }

    /// Runs, and reads back what was written: one source a pointing.
    fn observed(&self) -> Vec<MemorySource> {
        self.simulate(&["--quiet"], 0);
        let sources = open(self.path("seen.fits"), &Selection::All).expect("a readable file");
        sources.into_iter().map(|mut s| MemorySource::read(s.as_mut()).expect("readable rows")).collect()
    }
}

fn data(source: &MemorySource) -> Vec<Complex64> {
    let all = source.blocks().iter().flat_map(|block| &block.data);
    all.map(|v| Complex64::new(f64::from(v.re), f64::from(v.im))).collect()
}

/// Gridded prediction keeps the tolerance of [image]: relative L2 over the visibilities of a pointing. Both beam classes,
/// both mounts, offsets, spectra.
#[test]
fn exact_and_gridded_prediction_agree_to_the_tolerance() {
    let exact = Scene::new(&[]).observed();
    for tolerance in [1e-3, 1e-5] {
        let line = format!("tolerance = {tolerance:e}");
        let gridded = Scene::new(&[("\"exact\"", "\"gridded\""), ("tolerance = 1e-5", &line)]).observed();
        assert_eq!((exact.len(), gridded.len()), (2, 2));
        for (exact, gridded) in exact.iter().zip(&gridded) {
            let (want, got) = (data(exact), data(gridded));
            assert_eq!(want.len(), got.len());
            let size: f64 = want.iter().map(|v| v.norm_sqr()).sum();
            let difference: f64 = want.iter().zip(&got).map(|(w, g)| (w - g).norm_sqr()).sum();
            let relative = (difference / size).sqrt();
            println!("{}: {relative:.2e}, promised {tolerance:e}", exact.observation().name);
            assert!(relative <= tolerance, "{}: {relative:e} above {tolerance:e}", exact.observation().name);
            assert!(relative > 0.0, "the two methods must not be one");
        }
    }
}

/// With no beams the visibility is Σ S(ν) exp(−2πi (u l + v m + w (n − 1))), here from the u, v, w in the file.
/// Bound: single-precision rounding of the sum of fluxes, 2.4 Jy · 6e-8, doubled.
#[test]
fn visibilities_are_those_of_the_measurement_equation() {
    let scene = Scene::new(&[
        ("shape = \"airy\"\ndiameter_m = 14\nblockage_m = 2", "shape = \"unity\""),
        ("shape = \"gaussian\"\nhalf_power_deg = 1.9\nat_hz = 1.2e9\naxis_ratio = 1.1", "shape = \"unity\""),
    ]);
    let sky = evensky::sky::read_components(&scene.path("sky.csv")).unwrap();
    let mut compared = 0;
    for source in scene.observed() {
        let observation = source.observation();
        let frame = observation.phase_centre.frame();
        for block in source.blocks() {
            for row in 0..block.rows() {
                let [u, v, w] = block.uvw_m[row];
                for (channel, &hz) in observation.frequencies_hz.iter().enumerate() {
                    let model = |s: &evensky::sky::Component| {
                        let [l, m, n] = frame.lmn(s.direction);
                        let turns = (u * l + v * m + w * (n - 1.0)) * hz / LIGHT;
                        let flux = s.flux_jy * (hz / s.reference_hz).powf(s.spectral_index);
                        Complex64::from_polar(flux, -TAU * turns)
                    };
                    let want: Complex64 = sky.iter().map(model).sum();
                    for hand in 0..2 {
                        let got = block.data[block.index(row, channel) + hand];
                        let got = Complex64::new(f64::from(got.re), f64::from(got.im));
                        assert!((got - want).norm() <= 3e-7, "{got} against {want}");
                        compared += 1;
                    }
                }
            }
        }
    }
    assert_eq!(compared, 2 * 20 * 15 * 3 * 2);
}

/// Baselines are r_q − r_p in the frame of the aim; the layout is East, North, up of the site. Bound: 1e-6 m, far below
/// a wavelength and above the double rounding of an Earth radius (1e-9 m) through the file's seconds.
#[test]
fn baselines_are_those_of_the_layout() {
    let site = Site::new(SITE[0].to_radians(), SITE[1].to_radians(), SITE[2]).unwrap();
    let positions: Vec<[f64; 3]> = LAYOUT
        .lines()
        .skip(1)
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            site.to_earth(std::array::from_fn(|axis| cells[axis + 1].parse().unwrap()))
        })
        .collect();
    let sources = Scene::new(&[]).observed();
    for (source, start) in sources.iter().zip([61_082.0 + 2.5 / 24.0, 61_082.0 + 2.5 / 24.0 + 300.0 / 86_400.0]) {
        let observation = source.observation();
        let mounts: Vec<Mount> = observation.stations.iter().map(|s| s.mount).collect();
        assert_eq!(mounts[..4], [Mount::AltAzimuth; 4]);
        assert_eq!(mounts[4..], [Mount::Equatorial; 2]);
        assert_eq!(observation.stations[5].diameter_m, Some(9.0));
        let frame = observation.phase_centre.frame();
        let mut row_of_all = 0;
        for block in source.blocks() {
            for row in 0..block.rows() {
                let mjd = start + (row_of_all / 15) as f64 * 600.0 / 86_400.0;
                assert!((block.mjd_utc[row] - mjd).abs() < 1e-9, "{} against {mjd}", block.mjd_utc[row]);
                let (p, q) = (block.first[row] as usize, block.second[row] as usize);
                let baseline = std::array::from_fn(|axis| positions[q][axis] - positions[p][axis]);
                let want = baseline_uvw(baseline, &frame, block.mjd_utc[row], 0.0);
                for (got, want) in block.uvw_m[row].iter().zip(want) {
                    assert!((got - want).abs() < 1e-6, "{got} against {want}");
                }
                row_of_all += 1;
            }
        }
        assert_eq!(row_of_all, 20 * 15);
    }
}

/// The difference of a noisy and a noiseless file is the noise. Of n independent draws the rms scatters by σ/√(2n), the
/// mean by σ/√n, a correlation by 1/√n: bounds are five times that.
#[test]
fn noise_has_the_stated_size_and_weights_are_its_inverse_variance() {
    let sigma = 0.05;
    let clean = Scene::new(&[]).observed();
    let noisy = Scene::new(&[("noise_jy = 0", "noise_jy = 0.05")]).observed();
    let mut draws = Vec::new();
    for (clean, noisy) in clean.iter().zip(&noisy) {
        draws.extend(data(clean).iter().zip(data(noisy)).map(|(c, n)| n - c));
        let weights = |s: &MemorySource| s.blocks().iter().flat_map(|b| b.weight.clone()).collect::<Vec<_>>();
        assert!(weights(clean).iter().all(|w| *w == 1.0));
        assert!(weights(noisy).iter().all(|w| (w / 400.0 - 1.0).abs() < 1e-6), "1/0.05²");
    }
    assert_eq!(draws.len(), 2 * 20 * 15 * 3 * 2);
    let n = 2.0 * draws.len() as f64;
    let rms = (draws.iter().map(|d| d.norm_sqr()).sum::<f64>() / n).sqrt();
    let mean = draws.iter().map(|d| d.re + d.im).sum::<f64>() / n;
    let pairs = draws.len() as f64;
    let parts = draws.iter().map(|d| d.re * d.im).sum::<f64>() / (pairs * sigma * sigma);
    let pointings = draws[..draws.len() / 2].iter().zip(&draws[draws.len() / 2..]);
    let between = pointings.map(|(a, b)| a.re * b.re).sum::<f64>() / (0.5 * pairs * sigma * sigma);
    println!("rms {rms}, mean {mean}, correlations {parts} {between}");
    assert!((rms - sigma).abs() <= 5.0 * sigma / (2.0 * n).sqrt(), "rms {rms}");
    assert!(mean.abs() <= 5.0 * sigma / n.sqrt(), "mean {mean}");
    assert!(parts.abs() <= 5.0 / pairs.sqrt(), "real and imaginary parts correlate: {parts}");
    assert!(between.abs() <= 5.0 / (0.5 * pairs).sqrt(), "pointings share their noise: {between}");
}

/// The seed decides the file to the last bit, whatever the threads; another seed gives another one; other flags leave
/// the noise alone.
#[test]
fn a_seed_repeats_the_file() {
    let bytes = |changes: &[(&str, &str)], flags: &[&str]| {
        let scene = Scene::new(changes);
        scene.simulate(flags, 0);
        std::fs::read(scene.path("seen.fits")).expect("the file")
    };
    let noise = ("noise_jy = 0", "noise_jy = 0.05\nflagged_fraction = 0.1");
    let first = bytes(&[noise], &["--quiet"]);
    assert!(first == bytes(&[noise], &["--quiet", "--threads", "1"]), "the same seed gave another file");
    assert!(first != bytes(&[noise, ("seed = 5", "seed = 6")], &["--quiet"]), "another seed gave the same file");
    let unflagged = Scene::new(&[("noise_jy = 0", "noise_jy = 0.05")]).observed();
    let flagged = Scene::new(&[noise]).observed();
    for (one, other) in unflagged.iter().zip(&flagged) {
        assert_eq!(data(one), data(other));
    }
}

/// Whole rows are flagged, each with the stated probability: their number is binomial, bound five standard deviations.
#[test]
fn the_stated_share_of_rows_is_flagged() {
    let scene = Scene::new(&[("noise_jy = 0", "flagged_fraction = 0.2")]);
    let (mut rows, mut flagged) = (0.0, 0.0);
    for source in scene.observed() {
        for block in source.blocks() {
            for weights in block.weight.chunks(6) {
                let zeros = weights.iter().filter(|w| **w == 0.0).count();
                assert!(zeros == 0 || zeros == 6, "a row is flagged in part: {zeros} of 6");
                rows += 1.0;
                flagged += f64::from(zeros == 6);
            }
        }
    }
    assert_eq!(rows, 600.0);
    let deviation = (rows * 0.2 * 0.8f64).sqrt();
    assert!((flagged - 0.2 * rows).abs() <= 5.0 * deviation, "{flagged} of {rows} rows");
}

/// Rows below the lowest elevation are left out, and their number told. Elevation here from hour angle and declination:
/// sin a = sin φ sin δ + cos φ cos δ cos H.
#[test]
fn rows_below_the_lowest_elevation_are_left_out() {
    let scene = Scene::new(&[
        ("start_utc = 2026-02-11T02:30:00Z", "start_utc = 2026-02-10T22:00:00Z\nlowest_elevation_deg = 25"),
        ("name = \"EAST\"", "name = \"NEVER\""),
        ("aim_deg = [201.9, 29.9]", "aim_deg = [201.9, -52.0]"),
    ]);
    let sources = scene.observed();
    assert_eq!(sources.len(), 1);
    let observation = sources[0].observation();
    let elevation = |station: usize, mjd: f64| {
        let position = observation.stations[station].position_m;
        let (hour_angle, declination) = hour_angle_declination(position, observation.aim, mjd, 0.0);
        let latitude = Site::at(position).latitude;
        (latitude.sin() * declination.sin() + latitude.cos() * declination.cos() * hour_angle.cos()).asin()
    };
    let start = 61_081.0 + 22.0 / 24.0;
    let high = |time: &usize| elevation(0, start + *time as f64 * 600.0 / 86_400.0) >= 25.0f64.to_radians();
    let times = (0..20).filter(high).count();
    assert!((1..19).contains(&times), "the limit must divide the times: {times}");
    let kept: usize = sources[0].blocks().iter().map(|block| block.rows()).sum();
    assert_eq!(kept, times * 15);
    for block in sources[0].blocks() {
        for row in 0..block.rows() {
            for station in [block.first[row], block.second[row]] {
                assert!(elevation(station as usize, block.mjd_utc[row]) >= 25.0f64.to_radians());
            }
        }
    }
    let (out, err) = scene.simulate(&[], 0);
    let low = (20 - times) * 15;
    assert!(err.contains(&format!("WEST: {low} of 300 rows left out, below 25° elevation")), "{err}");
    assert!(err.contains("warning: NEVER is left out: all its 300 rows are below 25° elevation"), "{err}");
    assert!(out.contains(&format!("  {} rows left out, below 25° elevation", low + 300 - 300)), "{out}");
}

#[test]
fn a_sky_that_never_rises_is_refused() {
    let scene = Scene::new(&[("29.8]\n[[sim", "-80.0]\n[[sim"), ("[201.9, 29.9]", "[201.9, -80.0]")]);
    let (out, err) = scene.simulate(&["--quiet"], 2);
    assert!(out.is_empty() && err.contains("simulate.start_utc: found no row: every aim stays below 0°"), "{err}");
    assert!(!scene.path("seen.fits").exists());
}

#[test]
fn a_grid_too_wide_is_refused_in_favour_of_direct_sums() {
    let scene = Scene::new(&[("\"exact\"", "\"gridded\"")]);
    let far = format!("{SKY}FAR,214.0,29.8,1.0,1.2e9,0\n");
    std::fs::write(scene.path("sky.csv"), far).unwrap();
    std::fs::write(scene.path("layout.csv"), LAYOUT.replace("211.0,97.5", "9211.0,97.5")).unwrap();
    let (_, err) = scene.simulate(&["--quiet"], 2);
    for part in
        ["simulate.method: found the gridded prediction of WEST would need ", "to reach FAR 11.", "\"exact\""]
    {
        assert!(err.contains(part), "no {part:?} in {err}");
    }
    let beyond = format!("{SKY}FAR,261.0,29.8,1.0,1.2e9,0\n");
    std::fs::write(scene.path("sky.csv"), beyond).unwrap();
    let (_, err) = scene.simulate(&["--quiet"], 2);
    assert!(err.contains("the gridded prediction of WEST does not reach FAR, 51."), "{err}");
}

#[test]
fn what_cannot_be_simulated_is_told() {
    for (changes, status, parts) in [
        (
            &[("\"seen.fits\"", "\"sky.csv\"")][..],
            2,
            ["run.toml:8: simulate.output: ", "an input of this simulation"],
        ),
        (
            &[("\"seen.fits\"", "\"no/seen.fits\"")],
            2,
            ["run.toml:8: simulate.output: ", "whose folder is not there"],
        ),
        (&[("\"seen.fits\"", "\".\"")], 2, ["run.toml:8: simulate.output: ", "name of a file"]),
        (
            &[("times = 20", "times = 10000000\nlowest_elevation_deg = 1")],
            2,
            ["run.toml:7: simulate: ", "at most 268435456"],
        ),
        (
            &[("noise_jy = 0", "lowest_elevation_deg = 90")],
            2,
            ["simulate.lowest_elevation_deg: found", "-90 to less"],
        ),
        (
            &[("noise_jy = 0", "noise_jy = 1e-30")],
            2,
            ["simulate.noise_jy: found a noise of 1e-30", "single precision"],
        ),
        (&[("match = \"Q*\"", "match = \"Q1\"")], 2, ["no beam for station Q2", "run.toml"]),
        (
            &[
                ("start_utc = 2026-02-11T02:30:00Z\ntimes = 20", "times = 1"),
                ("channels = 3", "channels = 3\nflagged_fraction = 0.9999999"),
                ("aim_deg = [201.3, 29.8]\n[[", "start_utc = 2026-02-11T02:30:00Z\naim_deg = [201.3, 29.8]\n[["),
            ],
            2,
            ["simulate.flagged_fraction: all rows came to be flagged", "smaller fraction"],
        ),
    ] {
        let scene = Scene::new(changes);
        let (out, err) = scene.simulate(&["--quiet"], status);
        assert!(out.is_empty(), "{changes:?}: {out}");
        for part in parts {
            assert!(err.contains(part), "{changes:?}: no {part:?} in {err}");
        }
        assert!(!scene.path("seen.fits").exists(), "{changes:?}");
    }
    let scene = Scene::new(&[]);
    std::fs::write(scene.path("sky.csv"), SKY.replace("29.80,1.25", "29.80,much")).unwrap();
    let (_, err) = scene.simulate(&["--quiet"], 1);
    assert!(err.contains("sky.csv: ") && err.contains("line: 2"), "{err}");
}

/// The committed file of the demonstration is what its run file makes. Bound: another processor's mathematical library may
/// round a few last bits of single precision, 2e-6 Jy at the brightest; times and weights have no such excuse.
#[test]
fn the_demonstration_can_be_remade() {
    let demo = PathBuf::from(concat!(env!("CARGO_MANIFEST_DIR"), "/beams-demo"));
    let folder = tempfile::tempdir().expect("a temporary folder");
    let output = Command::new(env!("CARGO_BIN_EXE_evensky"))
        .args(["simulate", "--quiet", "--out"])
        .args([folder.path(), &demo.join("candlewick.toml")])
        .output()
        .expect("the program starts");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let read = |path: PathBuf| -> Vec<MemorySource> {
        let sources = open(&path, &Selection::All).expect("a readable file");
        sources.into_iter().map(|mut s| MemorySource::read(s.as_mut()).expect("readable rows")).collect()
    };
    let (made, kept) = (read(folder.path().join("candlewick.fits")), read(demo.join("candlewick.fits")));
    assert_eq!((made.len(), kept.len()), (7, 7));
    for (made, kept) in made.iter().zip(&kept) {
        assert_eq!(made.observation().stations, kept.observation().stations);
        assert_eq!(made.observation().aim, kept.observation().aim);
        let [made_rows, kept_rows] = [made, kept].map(|s| {
            let weights: Vec<f32> = s.blocks().iter().flat_map(|b| b.weight.clone()).collect();
            (s.blocks().iter().flat_map(|b| b.mjd_utc.clone()).collect::<Vec<f64>>(), weights)
        });
        assert!(made_rows == kept_rows, "times or weights of {} differ", made.observation().name);
        let (made_data, kept_data) = (data(made), data(kept));
        let differences = made_data.iter().zip(kept_data).map(|(m, k)| (m - k).norm());
        for difference in differences {
            assert!(difference <= 2e-6, "{}: {difference:e} Jy", made.observation().name);
        }
    }
}

/// `--out` puts the file elsewhere, under the same name; `--json` says what was done.
#[test]
fn the_summary_says_what_was_written_and_where() {
    let scene = Scene::new(&[("noise_jy = 0", "flagged_fraction = 0.2")]);
    let folder = scene.path("elsewhere");
    let flags = ["--json", "--out", folder.to_str().expect("a plain name")];
    let (out, err) = scene.simulate(&flags, 0);
    assert_eq!(err, "");
    let told: serde_json::Value = serde_json::from_str(&out).expect("one JSON object");
    let file = folder.join("seen.fits");
    assert_eq!(told["output"], serde_json::json!(file));
    assert_eq!(told["bytes"], serde_json::json!(std::fs::metadata(&file).expect("the file").len()));
    assert_eq!(told["visibilities"], 2 * 20 * 15 * 3 * 2);
    assert_eq!(told["pointings"][1]["name"], "EAST");
    assert_eq!(told["pointings"][1]["first_utc"], "2026-02-11T02:35:00Z");
    assert_eq!(told["pointings"][1]["last_utc"], "2026-02-11T05:45:00Z");
    assert!(!scene.path("seen.fits").exists());
    let (out, err) = scene.simulate(&[], 0);
    for part in
        ["seen.fits: 3600 visibilities of 3 components", "TESTS: 6 stations, 3 channels", "Next: evensky describe"]
    {
        assert!(out.contains(part), "no {part:?} in\n{out}");
    }
    assert!(err.contains("predicting: 3600 visibilities in "), "{err}");
}
