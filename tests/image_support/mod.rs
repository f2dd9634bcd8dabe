//! The `image` command on invented observations: files written for it, runs of the binary, products read back.
#![allow(dead_code)]

use evensky::beam::{Airy, Gaussian, Pattern, StationBeam, StationBeams};
use evensky::fits::{FitsFile, Header};
use evensky::observation::{
    Block, BlockSource, Hand, MemorySource, Mount, Observation, Schedule, Station, write_idi,
};
use evensky::response::{Exact, Response, Sums};
use evensky::sky::{Component, Direction, ImageGeometry};
use ndarray::Array2;
use num_complex::Complex32;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::Arc;

/// Every file that `image` writes.
pub const PRODUCTS: [&str; 8] =
    ["dirty.fits", "dirty.png", "psf.fits", "psf.png", "report.html", "run.json", "weight.fits", "weight.png"];

/// The program under test.
pub fn evensky() -> Command {
    Command::new(env!("CARGO_BIN_EXE_evensky"))
}

/// How a run ended.
pub struct Ended {
    pub status: Option<i32>,
    pub out: String,
    pub err: String,
}

/// A folder of inputs, and `out` in it for the products.
pub struct Folder(tempfile::TempDir);

impl Folder {
    pub fn new() -> Folder {
        Folder(tempfile::tempdir().expect("a temporary folder"))
    }

    pub fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    pub fn out(&self) -> PathBuf {
        self.path("out")
    }

    /// Writes the run file `run.toml`.
    pub fn run_file(&self, text: &str) {
        std::fs::write(self.path("run.toml"), text).expect("a run file");
    }

    /// `evensky image run.toml --out out` with more flags.
    pub fn image(&self, flags: &[&str]) -> Ended {
        self.image_into(&self.out(), flags)
    }

    /// As [`Folder::image`], into a folder of one's own choice.
    pub fn image_into(&self, out: &Path, flags: &[&str]) -> Ended {
        let mut command = evensky();
        command.arg("image").arg(self.path("run.toml")).arg("--out").arg(out).args(flags);
        let output = command.output().expect("the program starts");
        let text = |bytes: Vec<u8>| String::from_utf8(bytes).expect("messages are UTF-8");
        Ended { status: output.status.code(), out: text(output.stdout), err: text(output.stderr) }
    }

    /// As [`Folder::image`], which must succeed.
    pub fn imaged(&self, flags: &[&str]) -> Ended {
        let ended = self.image(flags);
        assert_eq!(ended.status, Some(0), "--- out\n{}\n--- err\n{}", ended.out, ended.err);
        ended
    }

    /// The run's record, `run.json`.
    pub fn record(&self) -> serde_json::Value {
        let text = std::fs::read_to_string(self.out().join("run.json")).expect("run.json");
        serde_json::from_str(&text).expect("run.json is JSON")
    }

    /// A FITS product: header and image `[y][x]`.
    pub fn product(&self, name: &str) -> (Header, Array2<f64>) {
        read_image(&self.out().join(name))
    }
}

/// A FITS image of one plane.
pub fn read_image(path: &Path) -> (Header, Array2<f64>) {
    let file = FitsFile::open(path).unwrap_or_else(|e| panic!("{e}"));
    let header = file.hdus()[0].header.clone();
    let axis = |name: &str| header.integer(name).unwrap().unwrap_or(1) as usize;
    let shape = (axis("NAXIS2"), axis("NAXIS1"));
    assert_eq!((axis("NAXIS3"), axis("NAXIS4")), (1, 1));
    let image = Array2::from_shape_vec(shape, file.image_f64(0).unwrap()).unwrap();
    (header, image)
}

/// Names in a folder, sorted; none when it is not there.
pub fn names_in(folder: &Path) -> Vec<String> {
    let Ok(entries) = std::fs::read_dir(folder) else { return Vec::new() };
    let mut names: Vec<String> =
        entries.map(|entry| entry.unwrap().file_name().to_string_lossy().into_owned()).collect();
    names.sort();
    names
}

/// An observation to be imaged: an invented array of ten stations of two kinds, all alt-azimuth.
///
/// Stations A1 to A6 are circular apertures of 13 m with a blockage, B1 to B4 have the Gaussian beam of an 8 m dish;
/// each kind mispoints in its own way. [`BEAMS`] says the same in a run file.
#[derive(Clone)]
pub struct Invented {
    pub stations: usize,
    pub hands: Vec<Hand>,
    pub times: usize,
    pub frequencies_hz: Vec<f64>,
    pub start_mjd: f64,
    /// Radius of the array, metres.
    pub radius_m: f64,
    pub seed: u64,
}

impl Default for Invented {
    fn default() -> Self {
        Invented {
            stations: 10,
            hands: vec![Hand::XX, Hand::YY],
            times: 5,
            frequencies_hz: vec![1.30e9, 1.33e9, 1.36e9],
            start_mjd: 59_000.2,
            radius_m: 250.0,
            seed: 7,
        }
    }
}

/// The beams of [`Invented`], as the run file says them.
pub const BEAMS: &str = r#"
[beams.large]
shape = "airy"
diameter_m = 13.0
blockage_m = 1.3
[beams.small]
shape = "gaussian"
half_power_deg = 1.58
at_hz = 1.36e9
[[stations]]
match = "A*"
beam = "large"
pointing_arcmin = [1.5, -0.75]
[[stations]]
match = "B*"
beam = "small"
pointing_arcmin = [-2.0, 2.5]
"#;

impl Invented {
    fn array(&self) -> Vec<Station> {
        let mut rng = ChaCha8Rng::seed_from_u64(self.seed);
        // 53° N, 2° W of a sphere
        let (lat, lon) = (53f64.to_radians(), -2f64.to_radians());
        let up = Direction { ra: lon, dec: lat }.unit_vector();
        let east = nalgebra::Vector3::new(-lon.sin(), lon.cos(), 0.0);
        let north = up.cross(&east);
        (0..self.stations)
            .map(|n| {
                let mut draw = |r: f64| r * rng.random_range(-1.0..1.0);
                let place = east * draw(self.radius_m)
                    + north * draw(self.radius_m)
                    + up * (6_371_000.0 + draw(0.05 * self.radius_m));
                let large = n < 6;
                Station {
                    name: if large { format!("A{}", n + 1) } else { format!("B{}", n - 5) },
                    position_m: place.into(),
                    mount: Mount::AltAzimuth,
                    diameter_m: Some(if large { 13.0 } else { 8.0 }),
                    feed_angle: 0.0,
                }
            })
            .collect()
    }

    /// A pointing: random data of unit size, random weights, one in twenty flagged.
    pub fn pointing(&self, name: &str, aim: Direction) -> (Observation, Block) {
        let schedule = Schedule {
            array_name: "INVENTED".into(),
            stations: self.array(),
            mjd_utc: (0..self.times).map(|t| self.start_mjd + 0.02 * t as f64).collect(),
            frequencies_hz: self.frequencies_hz.clone(),
            width_hz: 3e7,
            hands: self.hands.clone(),
            weight: 1.0,
        };
        let (observation, mut block) = schedule.pointing(name, aim);
        let mut rng = ChaCha8Rng::seed_from_u64(self.seed ^ 0xda7a ^ name.len() as u64);
        for (data, weight) in block.data.iter_mut().zip(&mut block.weight) {
            *data = Complex32::new(rng.random_range(-1.0..1.0), rng.random_range(-1.0..1.0));
            *weight = if rng.random::<f32>() < 0.05 { 0.0 } else { rng.random_range(20.0..60.0) };
        }
        (observation, block)
    }

    /// The beams of a pointing's stations: [`BEAMS`], built by hand.
    pub fn beams(&self, observation: &Observation) -> StationBeams {
        let large: Arc<dyn Pattern> = Arc::new(Airy::new(13.0, 1.3).unwrap());
        let small: Arc<dyn Pattern> = Arc::new(Gaussian::new(1.58f64.to_radians(), 1.36e9, 1.0).unwrap());
        let list = observation.stations.iter().map(|station| {
            let (pattern, offset) = match station.name.starts_with('A') {
                true => (large.clone(), [1.5, -0.75]),
                false => (small.clone(), [-2.0, 2.5]),
            };
            let offset = offset.map(|arcmin: f64| (arcmin / 60.0).to_radians());
            StationBeam { pattern, offset, beam_name: String::new() }
        });
        StationBeams::new(observation, list.collect(), None)
    }

    /// Overwrites the block's data with the exact visibilities of `sky`.
    pub fn fill(&self, sky: &[Component], observation: &Observation, block: &mut Block) {
        let geometry = ImageGeometry::new(observation.phase_centre, 2, 2, 1e-4).unwrap();
        Exact::new(observation, self.beams(observation), geometry).predict_exactly(sky, block);
    }

    /// N and W by direct sums over a whole image.
    pub fn exact(&self, pointings: &[(Observation, Block)], geometry: &ImageGeometry) -> Sums {
        let mut sums = Sums::zero(geometry);
        for (observation, block) in pointings {
            let exact = Exact::new(observation, self.beams(observation), *geometry);
            exact.adjoint(&mut MemorySource::new(observation.clone(), vec![block.clone()]), &mut sums).unwrap();
        }
        sums
    }
}

/// Writes pointings into one FITS-IDI file.
pub fn write_pointings(path: &Path, pointings: &[(Observation, Block)]) {
    let mut sources: Vec<MemorySource> =
        pointings.iter().map(|(o, b)| MemorySource::new(o.clone(), vec![b.clone()])).collect();
    let mut list: Vec<&mut dyn BlockSource> = sources.iter_mut().map(|s| s as &mut dyn BlockSource).collect();
    write_idi(path, &mut list).unwrap_or_else(|e| panic!("{e}"));
}

/// A run file for [`Invented`] observations.
pub fn run_text(files: &[&str], geometry: &ImageGeometry, tolerance: f64) -> String {
    let (ra, dec) = geometry.centre.to_deg();
    let pixel = geometry.pixel.to_degrees() * 3600.0;
    let mut text = String::from("title = \"Invented\"\n");
    for file in files {
        text += &format!("[[pointing]]\nvisibilities = \"{file}\"\n");
    }
    text += &format!(
        "[image]\ncentre_deg = [{ra:?}, {dec:?}]\nsize_px = [{}, {}]\npixel_arcsec = {pixel:?}\n\
         tolerance = {tolerance:e}\nlowest_response = 0.05\n{BEAMS}",
        geometry.width, geometry.height
    );
    text
}

/// A source of constant flux density.
pub fn source(direction: Direction, flux_jy: f64) -> Component {
    Component { name: "source".into(), direction, flux_jy, reference_hz: 1e9, spectral_index: 0.0 }
}

/// ‖(got − want) · weight‖ / ‖want · weight‖ over pixels where `got` is not blank. NaN, which no bound admits, when
/// nothing is left.
pub fn weighted_difference(got: &Array2<f64>, want: &Array2<f64>, weight: &Array2<f64>) -> f64 {
    assert_eq!((got.dim(), want.dim()), (weight.dim(), weight.dim()));
    let (mut difference, mut size) = (0.0, 0.0);
    for ((g, w), weight) in got.iter().zip(want).zip(weight) {
        if !g.is_nan() {
            difference += ((g - w) * weight).powi(2);
            size += (w * weight).powi(2);
        }
    }
    (difference / size).sqrt()
}
