//! Seven overlapping fields in a hexagon: the weight map of a mosaic against closed forms.
//!
//! Fields of equal noise σ with Gaussian power beams A = exp(−4 ln2 r²/θ²) at distance d θ from the central one give, where
//! all are summed with their beams, the weight Σ A²/σ² = (1 + 6 · 2^(−8 d²))/σ² at its centre (A² = 2^(−8 r²/θ²)) and the
//! noise 1/√Σ(A²/σ²): the linear mosaic of Cornwell 1988 and of Sault, Staveley-Smith & Brouw 1996. The numbers below
//! are check values D1 and D1n, \[computed\]: lattice sums in Python, printed to 1e-6. The check values ask for 0.5 % of a
//! map; W is promised to the tolerance here, so that the tests hold it to far less.
//!
//! Distances are direction cosines: a beam depends on the sine of the angle from its aim, which is the same seen from the
//! aim or from the place. The closed form therefore holds at the centre for fields of any size.

use evensky::beam::{Gaussian, Pattern, StationBeam, StationBeams};
use evensky::imaging::{Mosaic, flat_noise, flat_sky};
use evensky::observation::{Block, Hand, MemorySource, Mount, Observation, Schedule, Station};
use evensky::response::Exact;
use evensky::response::gridded::Options;
use evensky::run::{DensityOf, Scheme, Weighting};
use evensky::sky::{Direction, ImageGeometry};
use num_complex::Complex32;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use std::collections::HashMap;
use std::sync::Arc;

const HZ: f64 = 1.4e9;
/// Weight of one visibility, Jy⁻².
const WEIGHT: f32 = 4.0;
const TOLERANCE: f64 = 1e-5;

/// Spacing in θ; D1 for seven fields at the centre; D1n.
const CLOSED_FORMS: [(f64, f64, f64); 3] = [
    (0.577_350_269_189_625_8, 1.944941, 0.717046),
    (0.5, 2.500000, 0.632456),
    (std::f64::consts::FRAC_1_SQRT_2, 1.375000, 0.852803),
];
/// Half a unit of the last printed digit.
const PRINTED: f64 = 0.6e-6;

/// θ: full width at half power.
fn theta() -> f64 {
    0.8_f64.to_radians()
}

/// The centre of the hexagon and six fields around it at `spacing` θ.
fn aims(centre: Direction, spacing: f64) -> Vec<Direction> {
    let frame = centre.frame();
    let ring = (0..6).map(|n| {
        let (m, l) = (f64::from(n) * 60.0 + 10.0).to_radians().sin_cos();
        frame.direction(spacing * theta() * l, spacing * theta() * m).unwrap()
    });
    std::iter::once(centre).chain(ring).collect()
}

fn schedule() -> Schedule {
    let lon = 20f64.to_radians();
    let place = |n: i32| {
        // east and up-ish metres on a sphere at 35° N
        let (east, north) = (f64::from(n * n) * 13.0 - 70.0, f64::from((n * 37) % 11) * 19.0 - 90.0);
        let (sin, cos) = (35f64 + north / 111_000.0).to_radians().sin_cos();
        let turned = lon + east / 5_200_000.0;
        [6_371_000.0 * cos * turned.cos(), 6_371_000.0 * cos * turned.sin(), 6_371_000.0 * sin]
    };
    Schedule {
        array_name: "HEX".into(),
        stations: (0..6)
            .map(|n| Station {
                name: format!("H{n}"),
                position_m: place(n),
                mount: Mount::AltAzimuth,
                diameter_m: None,
                feed_angle: 0.0,
            })
            .collect(),
        mjd_utc: vec![58_849.1, 58_849.15, 58_849.2],
        frequencies_hz: vec![HZ],
        width_hz: 1e6,
        hands: vec![Hand::XX, Hand::YY],
        weight: WEIGHT,
    }
}

/// Sum of the weights of one field: 1/σ².
fn field_weight() -> f64 {
    let pairs = 6 * 5 / 2;
    f64::from(pairs * 3 * 2) * f64::from(WEIGHT)
}

fn beams(observation: &Observation) -> StationBeams {
    let pattern: Arc<dyn Pattern> = Arc::new(Gaussian::new(theta(), HZ, 1.0).unwrap());
    let beam = StationBeam { pattern, offset: [0.0, 0.0], beam_name: "bell".into() };
    StationBeams::new(observation, vec![beam; observation.stations.len()], None)
}

/// Where the phases of the fields refer to.
#[derive(Clone, Copy)]
enum Phases {
    /// Each field to its own aim.
    Aims,
    /// All to one direction.
    At(Direction),
}

fn fields(centre: Direction, spacing: f64, phases: Phases) -> Vec<(Observation, Block)> {
    let field = |(n, aim): (usize, Direction)| {
        let phase_centre = match phases {
            Phases::Aims => aim,
            Phases::At(direction) => direction,
        };
        let (mut observation, block) = schedule().pointing(&format!("field {n}"), phase_centre);
        observation.aim = aim;
        (observation, block)
    };
    aims(centre, spacing).into_iter().enumerate().map(field).collect()
}

fn mosaic(geometry: ImageGeometry, fields: Vec<(Observation, Block)>) -> Mosaic {
    let mut mosaic = Mosaic::new(geometry);
    for (observation, block) in fields {
        let beams = beams(&observation);
        let source = Box::new(MemorySource::new(observation, vec![block]));
        mosaic.add(source, beams, TOLERANCE, Options::default(), |_| ()).unwrap_or_else(|e| panic!("{e}"));
    }
    mosaic
}

#[track_caller]
fn close(what: &str, got: f64, want: f64, bound: f64) {
    let error = (got - want).abs();
    println!("{what}: {got:.7} against {want:.7}, off by {error:.1e}, bound {bound:.1e}");
    assert!(error <= bound, "{what}: {got} against {want}, off by {error:e}, bound {bound:e}");
}

/// ΣA² and noise at the hexagon's centre, which is pixel (x, y) of the mosaic, from its weight map. A single pixel is held to
/// ten times the promise, which is an L2 error over the field.
fn held_to_the_closed_form(mut mosaic: Mosaic, (x, y): (usize, usize), sum: f64, noise: f64) {
    let weight = mosaic.sums(|_| ()).unwrap().normaliser[[y, x]] / field_weight();
    close("ΣA²", weight, sum, PRINTED + 10.0 * TOLERANCE * sum);
    close("noise", 1.0 / weight.sqrt(), noise, PRINTED + 5.0 * TOLERANCE * noise);
}

#[test]
fn noise_at_the_image_centre() {
    let centre = Direction::from_deg(152.7, 41.9);
    for (spacing, sum, noise) in CLOSED_FORMS {
        let geometry = ImageGeometry::new(centre, 80, 72, theta() / 24.0).unwrap();
        let mosaic = mosaic(geometry, fields(centre, spacing, Phases::Aims));
        held_to_the_closed_form(mosaic, geometry.reference(), sum, noise);
    }
}

/// The image centre lies away from the middle of the mosaic, also near a pole and across right ascension 0: phases at the
/// aims are turned to it, each beam stays at its own aim.
#[test]
fn noise_away_from_the_image_centre() {
    let images = [(152.7, 41.9, 61.0, 20.0), (0.05, -3.0, 3.0, 55.0), (77.0, 89.6, 40.0, 40.0)];
    for ((spacing, sum, noise), (ra, dec, x, y)) in CLOSED_FORMS.into_iter().zip(images) {
        let geometry = ImageGeometry::new(Direction::from_deg(ra, dec), 80, 72, theta() / 24.0).unwrap();
        let centre = geometry.direction_of(x, y).unwrap();
        let mosaic = mosaic(geometry, fields(centre, spacing, Phases::Aims));
        held_to_the_closed_form(mosaic, (x as usize, y as usize), sum, noise);
    }
}

/// One phase centre for all fields, as a correlator that does not follow the aims would give.
#[test]
fn noise_with_one_phase_centre_for_all_fields() {
    let geometry = ImageGeometry::new(Direction::from_deg(30.0, -40.0), 80, 72, theta() / 24.0).unwrap();
    let centre = geometry.direction_of(52.0, 41.0).unwrap();
    for (spacing, sum, noise) in CLOSED_FORMS {
        let phases = Phases::At(Direction::from_deg(30.2, -39.8));
        held_to_the_closed_form(mosaic(geometry, fields(centre, spacing, phases)), (52, 41), sum, noise);
    }
}

/// The same by direct sums, to rounding: what the gridded numbers above are held against is the formula itself.
#[test]
fn exact_sums_give_the_closed_form() {
    let centre = Direction::from_deg(152.7, 41.9);
    let geometry = ImageGeometry::new(Direction::from_deg(153.0, 42.0), 16, 16, theta() / 8.0).unwrap();
    for (spacing, sum, _) in CLOSED_FORMS {
        let total: f64 = fields(centre, spacing, Phases::Aims)
            .into_iter()
            .map(|(observation, block)| {
                let exact = Exact::new(&observation, beams(&observation), geometry);
                let mut source = MemorySource::new(observation, vec![block]);
                exact.adjoint_at(&mut source, &[centre]).unwrap()[0].1
            })
            .sum();
        let formula = 1.0 + 6.0 * (-8.0 * spacing * spacing).exp2();
        close("printed", formula, sum, PRINTED);
        close("direct sum", total / field_weight(), formula, 1e-12);
    }
}

/// Robust and uniform weights over seven fields of unlike depth: with ω of each visibility worked out here, cell by cell, from
/// u, v, w and the formulas of the documentation, the inverse variance of the flat sky is
/// (Σ_f A_f² Σω)² / Σ_f A_f² Σω²/w, sums of ω over a field, for every beam of a field is the same. Natural weights of the same
/// data are Σ_f A_f² Σw. Bound: single pixels down to a
/// twentieth of the deepest are off by ten times the promise of 1e-5 of the deepest, hence 2e-3 at the worst; held to half that.
#[test]
fn noise_of_robust_weights_over_unlike_fields() {
    let centre = Direction::from_deg(152.7, 41.9);
    let geometry = ImageGeometry::new(centre, 40, 36, theta() / 12.0).unwrap();
    let mut fields = fields(centre, 0.5, Phases::At(centre));
    for (n, (_, block)) in fields.iter_mut().enumerate() {
        for (at, weight) in block.weight.iter_mut().enumerate() {
            *weight *= if (at / 2 + n) % 5 == 0 { 0.0 } else { (1 + (3 * n) % 7) as f32 };
        }
    }
    // wide enough that fields and baselines share cells
    const CELL: f64 = 150.0;
    let cell = |at: f64| (at * HZ / 299_792_458.0 / CELL).round() as i64;
    for (scheme, robustness) in [(Scheme::Robust, 0.0), (Scheme::Robust, -1.0), (Scheme::Uniform, 0.0)] {
        for density in [DensityOf::All, DensityOf::Pointing] {
            // samples of each field: cell and w of both hands together
            let samples: Vec<Vec<((i64, i64), f64)>> = fields
                .iter()
                .map(|(_, block)| {
                    let cells = block.uvw_m.iter().map(|&[u, v, _]| (cell(u), cell(v)));
                    cells.zip(block.weight.chunks(2).map(|w| f64::from(w[0]) + f64::from(w[1]))).collect()
                })
                .collect();
            let together: Vec<((i64, i64), f64)> = samples.concat();
            let mut factors = Vec::new();
            for own in &samples {
                let filling = if density == DensityOf::All { &together } else { own };
                let mut cells: HashMap<(i64, i64), f64> = HashMap::new();
                for &((x, y), w) in filling {
                    *cells.entry((x, y)).or_default() += w;
                    *cells.entry((-x, -y)).or_default() += w;
                }
                let total: f64 = filling.iter().map(|(_, w)| w).sum();
                let squares: f64 = cells.values().map(|d| d * d).sum();
                let f2 = 25.0 * 10f64.powf(-2.0 * robustness) / (squares / (2.0 * total));
                let factor = |at: &(i64, i64)| match scheme {
                    Scheme::Robust => 1.0 / (1.0 + f2 * cells[at]),
                    _ => 1.0 / cells[at].max(f64::MIN_POSITIVE),
                };
                let (mut omega, mut square) = (0.0, 0.0);
                for (at, w) in own.iter().filter(|(_, w)| *w > 0.0) {
                    omega += w * factor(at);
                    square += w * factor(at) * factor(at);
                }
                factors.push((omega, square, own.iter().map(|(_, w)| w).sum::<f64>()));
            }
            let mut mosaic = mosaic(geometry, fields.clone());
            let cell_wavelengths = Some(CELL);
            let asked = Weighting { scheme, robustness, density, cell_wavelengths, ..Weighting::default() };
            mosaic.weigh(&asked, |_| ()).unwrap();
            let sums = mosaic.sums(|_| ()).unwrap();
            let weight = mosaic.weight_map(&sums, |_| ()).unwrap();
            let (mut worst, mut price): (f64, f64) = (0.0, 1.0);
            for ((y, x), &got) in weight.indexed_iter() {
                let place = geometry.direction_of(x as f64, y as f64).unwrap();
                let (mut omega, mut square, mut natural) = (0.0, 0.0, 0.0);
                for ((observation, _), (o, s, w)) in fields.iter().zip(&factors) {
                    let [l, m, _] = observation.aim.frame().lmn(place);
                    let power = (-8.0 * (l * l + m * m) / theta().powi(2)).exp2();
                    omega += o * power;
                    square += s * power;
                    natural += w * power;
                }
                let want = omega * omega / square;
                price = price.max((natural / want).sqrt());
                if sums.normaliser[[y, x]] > 0.05 * sums.normaliser[[18, 20]] {
                    worst = worst.max((got / want - 1.0).abs());
                }
                assert!(got.is_finite());
            }
            close(
                &format!("{}: weight map, noise up to {price:.3} of natural", asked.describe()),
                worst,
                0.0,
                1e-3,
            );
            assert!(price > 1.01);
        }
    }
}

/// Fields that hold noise of the stated weights and nothing else: the weight map must be the inverse variance of what the
/// mosaic shows. 400 draws of the whole data give the rms to 1/√800 = 3.5 %; five of these are allowed.
#[test]
fn the_weight_map_is_the_inverse_variance() {
    let centre = Direction::from_deg(152.7, 41.9);
    let geometry = ImageGeometry::new(centre, 16, 16, theta() / 12.0).unwrap();
    let frame = centre.frame();
    let places: Vec<Direction> = [(0.0, 0.0), (0.3, 0.1), (-0.5, 0.4), (0.7, -0.6)]
        .map(|(l, m)| frame.direction(l * theta(), m * theta()).unwrap())
        .into();
    let mut rng = ChaCha8Rng::seed_from_u64(2);
    let sigma = 1.0 / WEIGHT.sqrt();
    let mut fields = fields(centre, 0.5, Phases::Aims);
    let responses: Vec<Exact> =
        fields.iter().map(|(observation, _)| Exact::new(observation, beams(observation), geometry)).collect();
    const DRAWS: usize = 400;
    let mut squares = vec![0.0; places.len()];
    let mut weights = vec![0.0; places.len()];
    for _ in 0..DRAWS {
        let mut sums = vec![(0.0, 0.0); places.len()];
        for ((observation, block), exact) in fields.iter_mut().zip(&responses) {
            draw_noise(block, sigma, &mut rng);
            let mut source = MemorySource::new(observation.clone(), vec![block.clone()]);
            for (sum, (n, w)) in sums.iter_mut().zip(exact.adjoint_at(&mut source, &places).unwrap()) {
                *sum = (sum.0 + n, sum.1 + w);
            }
        }
        for (at, (n, w)) in sums.into_iter().enumerate() {
            squares[at] += (n / w).powi(2);
            weights[at] = w;
        }
    }
    for (square, weight) in squares.iter().zip(&weights) {
        let rms = (square / DRAWS as f64).sqrt();
        close("rms of the flat sky, in units of 1/√W", rms * weight.sqrt(), 1.0, 5.0 / (2.0 * DRAWS as f64).sqrt());
    }
    let mut mosaic = mosaic(geometry, fields);
    let sums = mosaic.sums(|_| ()).unwrap();
    let (sky, noise) = (flat_sky(&sums, 0.1), flat_noise(&sums, 0.1));
    for ((s, n), w) in sky.iter().zip(&noise).zip(&sums.normaliser).filter(|((s, _), _)| !s.is_nan()) {
        assert!((s * w.sqrt() - n).abs() <= 1e-12 * (1.0 + n.abs()), "flat noise is flat sky times √W");
        assert!(n.abs() < 5.0, "{n} σ in 256 pixels");
    }
}

/// Real and imaginary parts each of standard deviation `sigma`, as the weights mean it.
fn draw_noise(block: &mut Block, sigma: f32, rng: &mut ChaCha8Rng) {
    for value in &mut block.data {
        let [re, im]: [f32; 2] = std::array::from_fn(|_| StandardNormal.sample(rng));
        *value = Complex32::new(sigma * re, sigma * im);
    }
}
