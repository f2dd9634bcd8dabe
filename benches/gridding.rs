//! How fast is the gridded response, beside finufft's type 1 transform of the same points?
//!
//! `cargo bench --bench gridding`. Scene: two dish classes, pointing offsets of about two per cent of the beam width,
//! alt-azimuth mounts, 27 stations, natural weights; image about 3 λ/D wide; tolerance 1e-4. finufft gets the same u, v
//! (both parallel hands already summed, no beams, no w) with eps = 1e-4 in single precision, its whole call: what plain
//! gridding of these points costs with a good library. Times are the best of a few; quote ratios.

#[path = "../tests/common/mod.rs"]
mod common;
#[path = "../tests/python_references/environment.rs"]
#[allow(dead_code)]
mod environment;

use common::{Beam, Setting, geometry, scene};
use evensky::observation::{MemorySource, SPEED_OF_LIGHT};
use evensky::response::gridded::{Instructions, Options};
use evensky::response::{Gridded, Response, Sums};
use evensky::sky::Component;
use std::io::Write;
use std::time::Instant;

const TOLERANCE: f64 = 1e-4;

fn best<R>(times: usize, mut work: impl FnMut() -> R) -> f64 {
    (0..times)
        .map(|_| {
            let started = Instant::now();
            std::hint::black_box(work());
            started.elapsed().as_secs_f64()
        })
        .fold(f64::INFINITY, f64::min)
}

fn peak_memory_mib() -> Option<f64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find(|line| line.starts_with("VmHWM"))?;
    line.split_whitespace().nth(1)?.parse::<f64>().ok().map(|kib| kib / 1024.0)
}

fn main() {
    let short = std::env::args().any(|a| a == "--test");
    let (times, channels) = if short { (4, 4) } else { (480, 32) };
    println!("instructions: {}", Instructions::detect().name());
    for beam in [Beam::Unity, Beam::Gaussian, Beam::Mixed] {
        let setting = Setting {
            stations: 27,
            radius_m: 500.0,
            times,
            // eight hours, whatever the number of times
            interval: 8.0 / 24.0 / times as f64,
            channels,
            beam,
            offset: 1.9f64.to_radians() / 60.0,
            ..Setting::default()
        };
        let scene = scene(&setting);
        let size = 512;
        let geometry = geometry(setting.aim, size, size, 0.052);
        let mut source = scene.source();
        let samples = (scene.block.rows() * scene.block.channels) as f64;
        let visibilities = scene.block.weight.iter().filter(|w| **w > 0.0).count() as f64;
        let started = Instant::now();
        let gridded =
            Gridded::new(&scene.beams, geometry, TOLERANCE, &mut source, Options::default()).expect("plan");
        let planned = started.elapsed().as_secs_f64();
        let report = gridded.report();
        println!(
            "\n{} beams: {samples:.2e} samples of u, v ({visibilities:.2e} visibilities), terms {:?}, power terms {:?}, \
             {} layers, window {} cells, transforms {:?}",
            match beam {
                Beam::Unity => "unity",
                Beam::Gaussian => "gaussian",
                Beam::Mixed => "two classes of",
            },
            report.terms,
            report.power_terms,
            report.w_layers,
            report.window_support,
            report.transform
        );
        let references = finufft(&scene.block, &scene.observation.frequencies_hz, &geometry, size);
        let sky = [Component {
            name: "one".into(),
            direction: geometry.direction_of(300.0, 200.0).expect("inside"),
            flux_jy: 1.0,
            reference_hz: 1.36e9,
            spectral_index: 0.0,
        }];
        for threads in [1, 2] {
            let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().expect("threads");
            let repeats = if short { 1 } else { 3 };
            let adjoint = pool.install(|| {
                best(repeats, || {
                    let mut sums = Sums::zero(&geometry);
                    gridded.adjoint(&mut source, &mut sums).expect("adjoint");
                    sums
                })
            });
            let mut blocks = vec![scene.block.clone()];
            let predict = pool.install(|| best(repeats, || gridded.predict(&sky, &mut blocks).expect("predict")));
            println!(
                "  {threads} thread(s): adjoint {:.2} million samples/s ({:.2} million visibilities/s), predict {:.2} million \
                 samples/s; kernels built in {:.2} s = {:.0} % of build + adjoint",
                samples / adjoint / 1e6,
                visibilities / adjoint / 1e6,
                samples / predict / 1e6,
                planned,
                100.0 * planned / (planned + adjoint),
            );
            match &references {
                Ok(seconds) => {
                    let finufft = seconds[threads - 1];
                    println!(
                        "    finufft type 1: {:.2} million samples/s; ratio of rates, ours to finufft's: adjoint {:.2}, \
                         predict {:.2}",
                        samples / finufft / 1e6,
                        finufft / adjoint,
                        finufft / predict
                    );
                }
                Err(reason) => println!("    no ratio to finufft: {reason}"),
            }
        }
        if let Some(mib) = peak_memory_mib() {
            let data = scene.block.data.len() * 12 / (1 << 20);
            println!(
                "  peak memory of the process so far {mib:.0} MiB, of which data and its copies {} MiB",
                3 * data
            );
        }
        drop(MemorySource::new(scene.observation.clone(), Vec::new()));
    }
}

/// Seconds of finufft type 1 on one and two threads.
fn finufft(
    block: &evensky::observation::Block,
    frequencies_hz: &[f64],
    geometry: &evensky::sky::ImageGeometry,
    size: usize,
) -> Result<[f64; 2], String> {
    let python = environment::python().map_err(str::to_owned)?;
    let folder = tempfile::tempdir().map_err(|e| e.to_string())?;
    let write = |name: &str, bytes: Vec<u8>| -> Result<(), String> {
        std::fs::File::create(folder.path().join(name))
            .and_then(|mut file| file.write_all(&bytes))
            .map_err(|e| e.to_string())
    };
    let (mut x, mut y, mut c) = (Vec::new(), Vec::new(), Vec::new());
    for row in 0..block.rows() {
        for (channel, hz) in frequencies_hz.iter().enumerate() {
            let scale = std::f64::consts::TAU * geometry.pixel * hz / SPEED_OF_LIGHT;
            x.extend((-block.uvw_m[row][0] * scale).to_le_bytes());
            y.extend((block.uvw_m[row][1] * scale).to_le_bytes());
            let at = block.index(row, channel);
            let sum =
                (0..block.hands).map(|h| block.data[at + h] * block.weight[at + h]).sum::<num_complex::Complex32>();
            c.extend(sum.re.to_le_bytes());
            c.extend(sum.im.to_le_bytes());
        }
    }
    write("x.f64", x)?;
    write("y.f64", y)?;
    write("c.c64", c)?;
    let script = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("benches/finufft_type1.py");
    let output = environment::clean(python)
        .arg(script)
        .arg(folder.path())
        .args([size.to_string(), size.to_string(), TOLERANCE.to_string()])
        .output()
        .map_err(|e| e.to_string())?;
    if !output.status.success() {
        return Err(String::from_utf8_lossy(&output.stderr).into_owned());
    }
    let seconds: std::collections::BTreeMap<String, f64> =
        serde_json::from_slice(&output.stdout).map_err(|e| e.to_string())?;
    Ok([seconds["1"], seconds["2"]])
}
