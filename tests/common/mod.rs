//! Invented arrays, skies and data for the tests; every generator is seeded.
#![allow(dead_code)]

use evensky::beam::{Airy, Gaussian, Pattern, StationBeam, StationBeams, Unity};
use evensky::observation::{Block, Hand, MemorySource, Mount, Observation, Schedule, Station};
use evensky::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use num_complex::Complex32;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::sync::Arc;

/// An array of stations scattered within `radius_m` (east, north) about 53.2° N, 2.1° W, heights within a tenth of that.
pub fn stations(count: usize, radius_m: f64, seed: u64) -> Vec<Station> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let (lon, lat) = (-2.1f64.to_radians(), 53.2f64.to_radians());
    let (sl, cl, sp, cp) = (lon.sin(), lon.cos(), lat.sin(), lat.cos());
    let centre = [6_371_000.0 * cp * cl, 6_371_000.0 * cp * sl, 6_371_000.0 * sp];
    (0..count)
        .map(|i| {
            let mut draw = |r: f64| r * (2.0 * rng.random::<f64>() - 1.0);
            let (e, n, u) = (draw(radius_m), draw(radius_m), draw(0.1 * radius_m));
            let position_m = [
                centre[0] - sl * e - sp * cl * n + cp * cl * u,
                centre[1] + cl * e - sp * sl * n + cp * sl * u,
                centre[2] + cp * n + sp * u,
            ];
            Station {
                name: format!("T{:02}", i + 1),
                position_m,
                mount: Mount::AltAzimuth,
                diameter_m: None,
                feed_angle: 0.0,
            }
        })
        .collect()
}

/// What a test observes.
pub struct Scene {
    pub observation: Observation,
    pub block: Block,
    pub beams: StationBeams,
}

/// Knobs of [`scene`].
#[derive(Clone)]
pub struct Setting {
    pub stations: usize,
    pub radius_m: f64,
    pub times: usize,
    /// Days between times.
    pub interval: f64,
    pub channels: usize,
    pub first_hz: f64,
    pub band: f64,
    pub aim: Direction,
    /// Largest pointing offset, radians.
    pub offset: f64,
    pub beam: Beam,
    pub hands: Vec<Hand>,
    pub radius: Option<f64>,
    pub seed: u64,
}

#[derive(Clone, Copy, PartialEq)]
pub enum Beam {
    Unity,
    Gaussian,
    /// Two dish classes: blocked circular apertures of 13 m, and Gaussians (slightly elliptical) of an 8 m dish.
    Mixed,
}

impl Default for Setting {
    fn default() -> Self {
        Setting {
            stations: 9,
            radius_m: 300.0,
            times: 7,
            interval: 0.013,
            channels: 5,
            first_hz: 1.3e9,
            band: 0.08,
            aim: Direction::from_deg(152.3, 41.7),
            offset: 2.5f64.to_radians() / 60.0,
            beam: Beam::Mixed,
            hands: vec![Hand::XX, Hand::YY],
            radius: None,
            seed: 1,
        }
    }
}

pub fn scene(setting: &Setting) -> Scene {
    let mut rng = ChaCha8Rng::seed_from_u64(setting.seed ^ 0x5ce0e);
    let schedule = Schedule {
        array_name: "TEST".into(),
        stations: stations(setting.stations, setting.radius_m, setting.seed),
        mjd_utc: (0..setting.times).map(|t| 59_000.2 + setting.interval * t as f64).collect(),
        frequencies_hz: (0..setting.channels)
            .map(|c| setting.first_hz * (1.0 + setting.band * c as f64 / setting.channels.max(1) as f64))
            .collect(),
        width_hz: 1e6,
        hands: setting.hands.clone(),
        weight: 1.0,
    };
    let (observation, mut block) = schedule.pointing("test", setting.aim);
    for (data, weight) in block.data.iter_mut().zip(&mut block.weight) {
        *data = Complex32::new(2.0 * rng.random::<f32>() - 1.0, 2.0 * rng.random::<f32>() - 1.0);
        *weight = if rng.random::<f32>() < 0.05 { 0.0 } else { 0.5 + rng.random::<f32>() };
    }
    let patterns: Vec<Arc<dyn Pattern>> = match setting.beam {
        Beam::Unity => vec![Arc::new(Unity)],
        Beam::Gaussian => vec![Arc::new(Gaussian::new(1.58f64.to_radians(), 1.36e9, 1.0).unwrap())],
        Beam::Mixed => vec![
            Arc::new(Airy::new(13.0, 1.3).unwrap()),
            Arc::new(Gaussian::new(1.58f64.to_radians(), 1.36e9, 1.04).unwrap()),
        ],
    };
    let list = (0..setting.stations)
        .map(|s| StationBeam {
            pattern: patterns[(s / 2) % patterns.len()].clone(),
            offset: std::array::from_fn(|_| setting.offset * (2.0 * rng.random::<f64>() - 1.0)),
            beam_name: "test".into(),
        })
        .collect();
    let beams = StationBeams::new(&observation, list, setting.radius);
    Scene { observation, block, beams }
}

impl Scene {
    pub fn source(&self) -> MemorySource {
        MemorySource::new(self.observation.clone(), vec![self.block.clone()])
    }
}

/// Relative L2 difference of two images; NaN if either holds one.
pub fn relative(got: &Array2<f64>, want: &Array2<f64>) -> f64 {
    let difference: f64 = got.iter().zip(want).map(|(g, w)| (g - w) * (g - w)).sum();
    let size: f64 = want.iter().map(|w| w * w).sum();
    (difference / size).sqrt()
}

pub fn geometry(centre: Direction, width: usize, height: usize, field: f64) -> ImageGeometry {
    ImageGeometry::new(centre, width, height, field / width as f64).unwrap()
}
