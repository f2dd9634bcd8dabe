//! Mosaics of Gaussian beams against closed forms: what overlapping fields must give at one place of the sky.
//!
//! All values are **computed** apart from this crate (numpy 2.4.6) from the expression named. A is the power beam
//! exp(−4 ln2 r²/θ²), which is the beam product of two equal stations. Fields are small (θ = 0.02°), so that the sphere
//! bends distances between field centres by less than 1e-7.

use evensky::beam::{Gaussian, StationBeam, StationBeams};
use evensky::observation::{Block, Hand, MemorySource, Mount, Observation, Station};
use evensky::response::gridded::Options;
use evensky::response::{Exact, Gridded, Response, Sums};
use evensky::sky::{Direction, ImageGeometry};
use num_complex::Complex32;
use std::f64::consts::{LN_2, PI};
use std::sync::Arc;

const HZ: f64 = 1.4e9;

/// θ: full width at half power, radians.
fn theta() -> f64 {
    0.02_f64.to_radians()
}

fn centre() -> Direction {
    Direction::from_deg(152.7, 41.9)
}

#[track_caller]
fn close(what: &str, got: f64, want: f64, bound: f64) {
    let error = (got - want).abs();
    assert!(error <= bound, "{what}: {got:?} against {want:?}, off by {error:e}, bound {bound:e}");
}

/// A field aimed at (x, y), in θ East and North of the centre: one visibility of zero spacing, of value `datum` and noise
/// `sigma`.
struct Field {
    observation: Observation,
    beams: StationBeams,
    source: MemorySource,
}

fn field(x: f64, y: f64, datum: f64, sigma: f64) -> Field {
    let aim = centre().frame().direction(x * theta(), y * theta()).unwrap();
    let station = |name: &str| Station {
        name: name.to_owned(),
        position_m: [6_378_137.0, 0.0, 0.0],
        mount: Mount::Equatorial,
        diameter_m: None,
        feed_angle: 0.0,
    };
    let observation = Observation {
        origin: "closed form".to_owned(),
        name: format!("{x} {y}"),
        array_name: "two".to_owned(),
        phase_centre: aim,
        aim,
        stations: vec![station("A1"), station("A2")],
        frequencies_hz: vec![HZ],
        widths_hz: vec![1e6],
        hands: vec![Hand::I],
        ut1_utc_s: 0.0,
        notes: Vec::new(),
    };
    let pattern = Arc::new(Gaussian::new(theta(), HZ, 1.0).unwrap());
    let beam = StationBeam { pattern, offset: [0.0, 0.0], beam_name: "bell".to_owned() };
    let block = Block {
        mjd_utc: vec![58_849.0],
        uvw_m: vec![[0.0; 3]],
        first: vec![0],
        second: vec![1],
        channels: 1,
        hands: 1,
        data: vec![Complex32::new(datum as f32, 0.0)],
        weight: vec![(1.0 / (sigma * sigma)) as f32],
    };
    Field {
        beams: StationBeams::new(&observation, vec![beam.clone(), beam], None),
        source: MemorySource::new(observation.clone(), vec![block]),
        observation,
    }
}

/// N and W of all `fields` at (x, y), in θ from the centre, by direct sums.
fn sums_at(fields: &mut [Field], x: f64, y: f64) -> (f64, f64) {
    let geometry = ImageGeometry::new(centre(), 16, 16, theta() / 8.0).unwrap();
    let direction = centre().frame().direction(x * theta(), y * theta()).unwrap();
    let mut total = (0.0, 0.0);
    for field in fields {
        let exact = Exact::new(&field.observation, field.beams.clone(), geometry);
        let sums = exact.adjoint_at(&mut field.source, &[direction]).unwrap();
        total = (total.0 + sums[0].0, total.1 + sums[0].1);
    }
    total
}

/// Field centres of a hexagonal mosaic, out to `rings` rings, at distance `spacing` θ.
fn hexagon(rings: i32, spacing: f64) -> Vec<(f64, f64)> {
    let mut centres = Vec::new();
    for i in -rings..=rings {
        for j in -rings..=rings {
            if (i + j).abs() <= rings {
                let (x, y) = (f64::from(i) + 0.5 * f64::from(j), 0.75_f64.sqrt() * f64::from(j));
                centres.push((spacing * x, spacing * y));
            }
        }
    }
    centres
}

fn mosaic(rings: i32, spacing: f64) -> Vec<Field> {
    hexagon(rings, spacing).into_iter().map(|(x, y)| field(x, y, 0.0, 1.0)).collect()
}

/// D1, D1n: Σ 2^(−8r²/θ²) over 7 and 19 fields at the central one, and the noise 1/√ΣA² (Cornwell 1988; Sault, Staveley-Smith &
/// Brouw 1996).
#[test]
fn d1_hexagonal_mosaics() {
    for (spacing, seven, noise_seven, nineteen, noise_nineteen) in [
        (1.0 / 3.0_f64.sqrt(), 1.944941, 0.717046, 1.972069, 0.712097),
        (0.5, 2.500000, 0.632456, 2.617188, 0.618134),
        (0.5_f64.sqrt(), 1.375000, 0.852803, 1.376556, 0.852321),
    ] {
        for (rings, count, sum, noise) in [(1, 7, seven, noise_seven), (2, 19, nineteen, noise_nineteen)] {
            let mut fields = mosaic(rings, spacing);
            assert_eq!(fields.len(), count);
            let (_, normaliser) = sums_at(&mut fields, 0.0, 0.0);
            close(&format!("ΣA², {count} fields at {spacing:.4} θ"), normaliser, sum, 1e-6);
            close(&format!("noise, {count} fields at {spacing:.4} θ"), 1.0 / normaliser.sqrt(), noise, 1e-6);
        }
    }
}

/// D1: an endless mosaic (nine rings: the next adds 2^(−8·25) at spacing θ/2) at a centre, the middle of an edge and of a triangle.
#[test]
fn d1_wide_hexagonal_mosaic() {
    let spacing = 0.5;
    let mut fields = mosaic(9, spacing);
    for (name, x, y, want) in [
        ("field centre", 0.0, 0.0, 2.617943),
        ("edge midpoint", 0.5 * spacing, 0.0, 2.616365),
        ("triangle centroid", 0.5 * spacing, 0.5 * spacing / 3.0_f64.sqrt(), 2.616167),
    ] {
        close(name, sums_at(&mut fields, x, y).1, want, 1e-6);
    }
    // the mean over the lattice cell is π/(8 ln2) over its area, all places lie within 4e-4 of it
    let mean = PI / (8.0 * LN_2) / (0.75_f64.sqrt() * spacing * spacing);
    close("mean", mean, 2.616759, 1e-6);
}

/// The seven-field values of D1 through the gridded response and a common image, to ten times its promise at one pixel.
#[test]
fn d1_seven_fields_gridded() {
    let geometry = ImageGeometry::new(centre(), 128, 128, theta() / 20.0).unwrap();
    let mut sums = Sums::zero(&geometry);
    let tolerance = 1e-5;
    for mut field in mosaic(1, 0.5) {
        let (beams, options) = (&field.beams, Options::default());
        let gridded = Gridded::new(beams, geometry, tolerance, &mut field.source, options).unwrap();
        gridded.adjoint(&mut field.source, &mut sums).unwrap();
    }
    let (x, y) = geometry.reference();
    close("ΣA², gridded", sums.normaliser[[y, x]], 2.5, 2.5 * 10.0 * tolerance);
}

/// Distance from a field's aim, in θ, at which A = `level`.
fn distance_of(level: f64) -> f64 {
    (-level.ln() / (4.0 * LN_2)).sqrt()
}

/// D3: A = (0.9, 0.4), σ = (1, 2), data D = (0.95, 0.35): I = ΣAD/σ² / ΣA²/σ², σ_I = 1/√ΣA²/σ². The data are single precision.
#[test]
fn d3_two_unequal_fields() {
    let mut fields = [field(distance_of(0.9), 0.0, 0.95, 1.0), field(0.0, -distance_of(0.4), 0.35, 2.0)];
    let (numerator, normaliser) = sums_at(&mut fields, 0.0, 0.0);
    close("I", numerator / normaliser, 1.0470588, 2e-7);
    close("weight", normaliser, 0.85, 1e-7);
    close("σ", 1.0 / normaliser.sqrt(), 1.0846523, 1e-7);
}

/// D5: midway between two fields one θ apart the noise is √2; where A = 0.5 in one field it is 2.
#[test]
fn d5_noise_between_fields() {
    let mut pair = [field(-0.5, 0.0, 0.0, 1.0), field(0.5, 0.0, 0.0, 1.0)];
    close("midway", 1.0 / sums_at(&mut pair, 0.0, 0.0).1.sqrt(), std::f64::consts::SQRT_2, 1e-7);
    let mut single = [field(0.0, 0.5, 0.0, 1.0)];
    close("half power", 1.0 / sums_at(&mut single, 0.0, 0.0).1.sqrt(), 2.0, 1e-7);
}

/// D6: a 1 Jy source where A = 0.5 is seen as 0.5 Jy: beam-weighted 0.25, flat-noise 0.5, flat-sky 1. A missing or doubled beam
/// factor shows here.
#[test]
fn d6_three_scales_of_one_source() {
    let mut fields = [field(0.3, 0.4, 0.5, 1.0)];
    let (numerator, normaliser) = sums_at(&mut fields, 0.0, 0.0);
    close("beam-weighted", numerator, 0.25, 1e-8);
    close("flat-noise", numerator / normaliser.sqrt(), 0.5, 1e-8);
    close("flat-sky", numerator / normaliser, 1.0, 1e-8);
}
