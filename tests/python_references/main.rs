//! This crate's numbers against numpy, scipy, astropy, erfa and finufft.
//!
//! Each test writes what the crate computes as JSON; a script of tests/python computes the same with the reference
//! libraries, prints the worst difference beside its bound, and fails when one is passed. Without Python or network the
//! first test says what is missing, and every other test fails with the same reason: nothing passes unseen.
//!
//! `cargo test --test python_references -- --nocapture` shows the figures.

#[path = "../combine_support/mod.rs"]
mod combine_support;
mod combined;
mod environment;
#[path = "../image_support/mod.rs"]
mod image_support;
mod measured;
mod products;
mod visibilities;

use evensky::beam::{Airy, Extent, Gaussian, Pattern, StationBeam, StationBeams, Unity};
use evensky::observation::{
    Block, Hand, MemorySource, Mount, Observation, SPEED_OF_LIGHT, Station, baseline_uvw, hour_angle_declination,
    parallactic_angle,
};
use evensky::response::gridded::Options;
use evensky::response::window::{KaiserBessel, Spheroidal, Window};
use evensky::response::{Exact, Gridded, Response, Sums};
use evensky::sky::{Direction, ImageGeometry};
use num_complex::{Complex32, Complex64};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use serde_json::{Value, json};
use std::f64::consts::{FRAC_PI_2, PI, TAU};
use std::sync::Arc;

/// Runs a script on `data`. Passes only when it ends well *and* says how many values agreed.
fn compare(script: &str, data: &Value) {
    let python = match environment::python() {
        Ok(python) => python,
        Err(reason) => panic!("NOT COMPARED with the Python reference {script}: {reason}"),
    };
    let mut file = tempfile::NamedTempFile::new().expect("a temporary file");
    serde_json::to_writer(&mut file, data).expect("written JSON");
    let output = environment::clean(python)
        .arg(environment::scripts().join(script))
        .arg(file.path())
        .output()
        .expect("a started script");
    let (said, complaint) = (String::from_utf8_lossy(&output.stdout), String::from_utf8_lossy(&output.stderr));
    println!("{script}:\n{said}");
    let agreed = said.lines().last().and_then(|line| line.strip_prefix("agreed: ")?.strip_suffix(" values"));
    let counted = agreed.is_some_and(|count| count.parse::<usize>().is_ok_and(|count| count > 0));
    assert!(output.status.success() && counted, "{script} disagrees or broke off:\n{said}{complaint}");
}

/// Every library the other tests compare with, imported in the pinned version.
#[test]
fn python_with_numpy_scipy_astropy_erfa_finufft_is_available() {
    let python = environment::python().unwrap_or_else(|reason| {
        panic!(
            "the checks against Python references did NOT run: {reason}. They need Python 3.11 or newer with the venv \
             module, and a package index or a filled pip cache, once."
        )
    });
    let script = "import numpy, scipy, astropy, erfa, finufft; \
                  print(numpy.__version__, scipy.__version__, astropy.__version__, erfa.__version__, finufft.__version__)";
    let output = environment::clean(python).args(["-c", script]).output().unwrap();
    let said = String::from_utf8_lossy(&output.stdout);
    assert_eq!(
        said.trim(),
        "2.4.6 1.17.1 8.0.2 2.0.1.5 2.5.1",
        "not the pinned versions: {}",
        String::from_utf8_lossy(&output.stderr)
    );
}

/// A harness that lets a disagreement pass would be worth nothing.
#[test]
#[should_panic(expected = "directions.py disagrees")]
fn a_wrong_direction_fails() {
    if let Err(reason) = environment::python() {
        panic!("NOT COMPARED: {reason}");
    }
    let mut data = directions();
    let l = &mut data["geometries"][0]["lmn_of_targets"][0][0];
    *l = json!(l.as_f64().unwrap() + 1e-12);
    compare("directions.py", &data);
}

/// The same for a number that is none.
#[test]
#[should_panic(expected = "directions.py disagrees")]
fn a_direction_that_is_not_a_number_fails() {
    if let Err(reason) = environment::python() {
        panic!("NOT COMPARED: {reason}");
    }
    let mut data = directions();
    data["geometries"][3]["lmn_of_targets"][1][2] = json!(f64::NAN);
    compare("directions.py", &data);
}

/// A direction evenly drawn from the sphere.
fn anywhere(random: &mut ChaCha8Rng) -> Direction {
    Direction { ra: random.random_range(0.0..TAU), dec: random.random_range(-1.0_f64..1.0).asin() }
}

fn degrees(direction: Direction) -> [f64; 2] {
    let (ra, dec) = direction.to_deg();
    [ra, dec]
}

fn directions() -> Value {
    let mut random = ChaCha8Rng::seed_from_u64(11);
    let corners =
        [(0.0, 0.0), (0.0, 90.0), (77.0, 90.0), (200.0, -90.0), (359.9999, 12.0), (0.0001, -41.0), (180.0, 89.999)];
    let mut centres: Vec<Direction> = corners.iter().map(|&(ra, dec)| Direction::from_deg(ra, dec)).collect();
    centres.extend((0..60).map(|_| anywhere(&mut random)));
    let geometries: Vec<Value> = centres
        .into_iter()
        .map(|centre| {
            let (width, height) = (random.random_range(1..5000), random.random_range(1..5000));
            // from arcseconds to most of the hemisphere
            let corner = 10.0_f64.powf(random.random_range(-4.0..-0.05));
            let pixel = corner / (width as f64 / 2.0).hypot(height as f64 / 2.0);
            let geometry = ImageGeometry::new(centre, width, height, pixel).unwrap();
            let mut position =
                || [random.random_range(-0.5..width as f64 - 0.5), random.random_range(-0.5..height as f64 - 0.5)];
            let pixels: Vec<[f64; 2]> = (0..20).map(|_| position()).collect();
            let sky = |&[x, y]: &[f64; 2]| degrees(geometry.direction_of(x, y).unwrap());
            // directions as they stand in a file: degrees, taken as exact by either program
            let targets: Vec<[f64; 2]> = (0..20).map(|_| sky(&position())).collect();
            let direction = |t: &[f64; 2]| Direction::from_deg(t[0], t[1]);
            let (ra_deg, dec_deg) = centre.to_deg();
            json!({
                "ra_deg": ra_deg, "dec_deg": dec_deg, "width": width, "height": height, "pixel": pixel,
                "sky_of_pixels": pixels.iter().map(sky).collect::<Vec<_>>(),
                "pixels": pixels,
                "pixels_of_targets":
                    targets.iter().map(|t| geometry.pixel_of(direction(t)).unwrap()).collect::<Vec<_>>(),
                "lmn_of_targets": targets.iter().map(|t| geometry.frame().lmn(direction(t))).collect::<Vec<_>>(),
                "targets": targets,
            })
        })
        .collect();
    json!({ "geometries": geometries })
}

#[test]
fn directions_and_pixels_agree_with_astropy_wcs() {
    compare("directions.py", &directions());
}

#[test]
fn parallactic_angles_and_baselines_agree_with_erfa() {
    let mut random = ChaCha8Rng::seed_from_u64(12);
    let cases: Vec<Value> = (0..200)
        .map(|case| {
            let (longitude, latitude) = (random.random_range(-PI..PI), random.random_range(-1.0_f64..1.0).asin());
            let radius = random.random_range(6.36e6..6.38e6);
            let position = [
                radius * latitude.cos() * longitude.cos(),
                radius * latitude.cos() * longitude.sin(),
                radius * latitude.sin(),
            ];
            let mut aim = anywhere(&mut random);
            match case {
                0 => aim.dec = FRAC_PI_2 - 1e-6,
                1 => aim.dec = -FRAC_PI_2 + 1e-6,
                2 => aim.ra = 0.0,
                _ => {}
            }
            // 1990 to 2035
            let mjd = random.random_range(47_892.0..64_328.0);
            let ut1_utc_s = random.random_range(-0.9..0.9);
            let length = 10.0_f64.powf(random.random_range(1.0..6.0));
            let baseline = anywhere(&mut random).unit_vector() * length;
            let baseline_m: [f64; 3] = baseline.into();
            let (hour_angle, declination) = hour_angle_declination(position, aim, mjd, ut1_utc_s);
            json!({
                "position_m": position, "aim": [aim.ra, aim.dec], "mjd_utc": mjd, "ut1_utc_s": ut1_utc_s,
                "baseline_m": baseline_m,
                "hour_angle": hour_angle, "declination": declination,
                "parallactic_angle": parallactic_angle(position, aim, mjd, ut1_utc_s),
                "uvw_m": baseline_uvw(baseline_m, &aim.frame(), mjd, ut1_utc_s),
            })
        })
        .collect();
    compare("times.py", &json!({ "cases": cases }));
}

fn real_voltages(pattern: &dyn Pattern, points: &[[f64; 2]], hz: f64) -> Vec<f64> {
    let mut out = vec![Complex64::ZERO; points.len()];
    pattern.voltages(points, hz, 0, &mut out);
    assert!(out.iter().all(|value| value.im == 0.0));
    out.into_iter().map(|value| value.re).collect()
}

fn extents(pattern: &dyn Pattern, hz: f64) -> Vec<[f64; 2]> {
    let radius = |level| match pattern.extent(level, hz) {
        Extent::Radius(radius) => [level, radius],
        Extent::Unbounded => [level, f64::NAN],
    };
    [0.9, 0.3, 0.1, 1e-2, 1e-3, 1e-4, 1e-6].into_iter().map(radius).collect()
}

#[test]
fn beams_agree_with_scipy() {
    let mut random = ChaCha8Rng::seed_from_u64(13);
    let mut airy = Vec::new();
    let mut gaussian = Vec::new();
    let mut stations = Vec::new();
    for case in 0..60 {
        let hz = random.random_range(5e7..2e10);
        let diameter = random.random_range(1.0..100.0);
        let blockage = if case % 3 == 0 { 0.0 } else { diameter * random.random_range(0.01..0.95) };
        let reach = 10.0_f64.powf(random.random_range(-1.0..1.5)) * 3e8 / hz / diameter;
        let mut points: Vec<[f64; 2]> =
            (0..50).map(|_| [random.random_range(-reach..reach), random.random_range(-reach..reach)]).collect();
        points[0] = [0.0, 0.0];
        points[1] = [1e-9 * reach, 0.0];
        let dish = Airy::new(diameter, blockage).unwrap();
        airy.push(json!({
            "diameter_m": diameter, "blockage_m": blockage, "hz": hz, "points": points,
            "voltages": real_voltages(&dish, &points, hz),
            "half_power_width": dish.half_power_width(hz), "extents": extents(&dish, hz),
        }));

        let half_power = reach * random.random_range(0.5..3.0);
        let axis_ratio: f64 = if case % 2 == 0 { 1.0 } else { random.random_range(0.5..2.0) };
        let at_hz = hz * random.random_range(0.7..1.4);
        let bell = Gaussian::new(half_power, at_hz, axis_ratio).unwrap();
        gaussian.push(json!({
            "half_power": half_power, "at_hz": at_hz, "axis_ratio": axis_ratio, "hz": hz, "points": points,
            "voltages": real_voltages(&bell, &points, hz), "extents": extents(&bell, hz),
        }));

        let offset = [random.random_range(-0.3..0.3) * half_power, random.random_range(-0.3..0.3) * half_power];
        let angle = random.random_range(-PI..PI);
        let beam = StationBeam { pattern: Arc::new(bell), offset, beam_name: "test".to_owned() };
        let beams = StationBeams::new(&observation(Mount::AltAzimuth), vec![beam], None);
        let mut out = vec![Complex64::ZERO; points.len()];
        beams.voltages(0, angle, hz, 0, &points, &mut out);
        stations.push(json!({
            "half_power": half_power, "at_hz": at_hz, "axis_ratio": axis_ratio, "hz": hz, "lm": points,
            "angle": angle, "offset": offset, "voltages": out.iter().map(|v| v.re).collect::<Vec<_>>(),
        }));
    }
    compare("beams.py", &json!({ "airy": airy, "gaussian": gaussian, "stations": stations }));
}

/// One station, one channel, nothing else of note.
fn observation(mount: Mount) -> Observation {
    let aim = Direction::from_deg(100.0, 20.0);
    let position_m = [-1_601_201.0, -5_042_007.0, 3_554_843.0];
    Observation {
        origin: "test".to_owned(),
        name: "test".to_owned(),
        array_name: "test".to_owned(),
        phase_centre: aim,
        aim,
        stations: vec![Station { name: "A1".to_owned(), position_m, mount, diameter_m: None, feed_angle: 0.0 }],
        frequencies_hz: vec![1.4e9],
        widths_hz: vec![1e6],
        hands: vec![Hand::I],
        ut1_utc_s: 0.0,
        notes: Vec::new(),
    }
}

#[test]
fn windows_agree_with_scipy() {
    let mut random = ChaCha8Rng::seed_from_u64(14);
    let mut sample = |window: &dyn Window| {
        let half = window.support() as f64 / 2.0;
        let mut d: Vec<f64> = (0..40).map(|_| random.random_range(-half..half)).collect();
        d.extend([0.0, half, -half, 0.999_999 * half]);
        let mut x: Vec<f64> = (0..10).map(|_| random.random_range(0.0..0.5)).collect();
        x.extend([0.0, 0.5, 0.75, 1.0, 1.4, 3.3]);
        json!({
            "support": window.support(),
            "values": d.iter().map(|&d| window.value(d)).collect::<Vec<_>>(), "d": d,
            "transforms": x.iter().map(|&x| [x, window.transform(x)]).collect::<Vec<_>>(),
        })
    };
    let mut kaiser_bessel = Vec::new();
    let mut spheroidal = Vec::new();
    for support in 1..=16 {
        for per_cell in [1.3, 1.9, 2.3] {
            let window = KaiserBessel::new(support, per_cell * support as f64).unwrap();
            let mut case = sample(&window);
            case["beta"] = json!(window.beta());
            kaiser_bessel.push(case);
        }
        for alpha in [0, 1] {
            let mut windows = vec![Spheroidal::new(support, alpha).unwrap()];
            windows.push(Spheroidal::with_c(support, alpha, 1.1 * support as f64).unwrap());
            for window in windows {
                let mut case = sample(&window);
                case["alpha"] = json!(alpha);
                case["c"] = json!(window.c());
                spheroidal.push(case);
            }
        }
    }
    compare("windows.py", &json!({ "kaiser_bessel": kaiser_bessel, "spheroidal": spheroidal }));
}

/// A pointing of `stations` unity stations with visibilities scattered over a disc of the (u, v) plane, w = 0.
fn scattered(random: &mut ChaCha8Rng, rows: usize, longest_wavelengths: f64) -> MemorySource {
    let mut observation = observation(Mount::Equatorial);
    let station = observation.stations[0].clone();
    observation.stations.push(Station { name: "A2".to_owned(), ..station });
    observation.frequencies_hz = vec![1.30e9, 1.34e9, 1.40e9];
    observation.widths_hz = vec![1e6; 3];
    let longest_m = longest_wavelengths * SPEED_OF_LIGHT / 1.40e9;
    let values = rows * observation.frequencies_hz.len();
    let block = Block {
        mjd_utc: vec![58_849.25; rows],
        uvw_m: (0..rows)
            .map(|_| {
                let (r, turn) =
                    (longest_m * random.random_range(0.0_f64..1.0).sqrt(), random.random_range(0.0..TAU));
                [r * turn.cos(), r * turn.sin(), 0.0]
            })
            .collect(),
        first: vec![0; rows],
        second: vec![1; rows],
        channels: observation.frequencies_hz.len(),
        hands: 1,
        data: (0..values)
            .map(|_| Complex32::new(random.random_range(-1.0..1.0), random.random_range(-1.0..1.0)))
            .collect(),
        weight: (0..values).map(|_| random.random_range(0.1..3.0)).collect(),
    };
    MemorySource::new(observation, vec![block])
}

fn unity(observation: &Observation) -> StationBeams {
    let pattern: Arc<dyn Pattern> = Arc::new(Unity);
    let beam = StationBeam { pattern, offset: [0.0, 0.0], beam_name: "unity".to_owned() };
    StationBeams::new(observation, vec![beam; observation.stations.len()], None)
}

/// Without beams and w the adjoint is a type-1 non-uniform Fourier transform: the exact sums to rounding, the gridded
/// ones to their promise.
#[test]
fn adjoint_with_unity_beams_agrees_with_finufft() {
    let mut random = ChaCha8Rng::seed_from_u64(15);
    let mut cases = Vec::new();
    for (width, height) in [(48, 40), (33, 57)] {
        let pixel = 2e-4;
        let mut source = scattered(&mut random, 700, 0.4 / pixel);
        let observation = evensky::observation::BlockSource::observation(&source).clone();
        let beams = unity(&observation);
        let geometry = ImageGeometry::new(observation.phase_centre, width, height, pixel).unwrap();
        let block = source.blocks()[0].clone();
        let mut uv = [Vec::new(), Vec::new()];
        for [u, v, _] in &block.uvw_m {
            for hz in &observation.frequencies_hz {
                uv[0].push(u * hz / SPEED_OF_LIGHT);
                uv[1].push(v * hz / SPEED_OF_LIGHT);
            }
        }
        let mut add = |name: String, response: &dyn Response, bound: f64| {
            let mut sums = Sums::zero(&geometry);
            response.adjoint(&mut source, &mut sums).unwrap();
            cases.push(json!({
                "name": format!("{name}, {width} × {height}"), "width": width, "height": height, "pixel": pixel,
                "u": uv[0], "v": uv[1],
                "re": block.data.iter().map(|v| v.re).collect::<Vec<_>>(),
                "im": block.data.iter().map(|v| v.im).collect::<Vec<_>>(),
                "weight": block.weight,
                "numerator": sums.numerator.iter().collect::<Vec<_>>(),
                "normaliser": sums.normaliser.iter().collect::<Vec<_>>(),
                "bound": bound,
            }));
        };
        // finufft is asked for 1e-13 and keeps about 1e-12 of the norm
        add("exact".to_owned(), &Exact::new(&observation, beams.clone(), geometry), 1e-11);
        for tolerance in [1e-2, 1e-4, 1e-6] {
            let blocks = std::slice::from_ref(&block);
            let gridded =
                Gridded::for_blocks(&observation, &beams, geometry, tolerance, blocks, Options::default()).unwrap();
            add(format!("gridded to {tolerance:e}"), &gridded, tolerance);
        }
    }
    compare("nufft.py", &json!({ "cases": cases }));
}

/// What `evensky simulate` writes, without beams: station positions, u, v, w and visibilities from the layout and the sky.
#[test]
fn a_simulated_file_agrees_with_astropy_and_numpy() {
    let folder = tempfile::tempdir().expect("a temporary folder");
    let mut random = ChaCha8Rng::seed_from_u64(17);
    let site = [-28.5, 41.2, 15.0];
    let places: Vec<[f64; 3]> =
        (0..7).map(|_| std::array::from_fn(|_| random.random_range(-900.0..900.0))).collect();
    let names: Vec<String> = (1..=places.len()).map(|n| format!("P{n}")).collect();
    let sources = [("ONE", 201.3, 29.8), ("TWO", 203.0, 31.5)];
    let components: Vec<Value> = (0..5)
        .map(|_| {
            json!({
                "ra_deg": random.random_range(199.0..205.0), "dec_deg": random.random_range(28.0..33.0),
                "flux_jy": random.random_range(0.1..2.0), "reference_hz": 1.3e9,
                "spectral_index": random.random_range(-1.5..0.5),
            })
        })
        .collect();
    let layout: Vec<String> =
        names.iter().zip(&places).map(|(name, [e, n, u])| format!("{name},{e:?},{n:?},{u:?}")).collect();
    let sky: Vec<String> = components
        .iter()
        .enumerate()
        .map(|(i, c)| {
            let cells =
                ["ra_deg", "dec_deg", "flux_jy", "reference_hz", "spectral_index"].map(|key| c[key].to_string());
            format!("S{i},{}", cells.join(","))
        })
        .collect();
    let pointings: Vec<String> = sources
        .iter()
        .map(|(name, ra, dec)| format!("[[simulate.pointing]]\nname = \"{name}\"\naim_deg = [{ra:?}, {dec:?}]\n"))
        .collect();
    let run = format!(
        "[simulate]\noutput = \"seen.fits\"\nsky = \"sky.csv\"\nstations = \"layout.csv\"\nsite_deg = [{:?}, {:?}]\n\
         site_height_m = {:?}\nstart_utc = 2026-02-11T02:30:00Z\ntimes = 9\ninterval_s = 1500\nfirst_hz = 1.25e9\n\
         channel_hz = 2e7\nchannels = 4\nhands = [\"XX\", \"YY\"]\n{}\
         [beams.none]\nshape = \"unity\"\n[[stations]]\nmatch = \"*\"\nbeam = \"none\"\n",
        site[0],
        site[1],
        site[2],
        pointings.concat()
    );
    let write = |name: &str, text: String| std::fs::write(folder.path().join(name), text).expect("a written file");
    write("run.toml", run);
    write("layout.csv", format!("name,east_m,north_m,up_m\n{}\n", layout.join("\n")));
    write("sky.csv", format!("name,ra_deg,dec_deg,flux_jy,reference_hz,spectral_index\n{}\n", sky.join("\n")));
    let output = std::process::Command::new(env!("CARGO_BIN_EXE_evensky"))
        .args(["simulate", "--quiet"])
        .arg(folder.path().join("run.toml"))
        .output()
        .expect("the program starts");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let of_source =
        |&(name, ra_deg, dec_deg): &(&str, f64, f64)| json!({ "name": name, "ra_deg": ra_deg, "dec_deg": dec_deg });
    let data = json!({
        "file": folder.path().join("seen.fits"), "rows": 2 * 9 * 21, "components": components, "stations": names,
        "site": site, "east_north_up": places, "sources": sources.iter().map(of_source).collect::<Vec<_>>(),
    });
    compare("simulated.py", &data);
}
