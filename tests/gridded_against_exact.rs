//! The promised tolerance, kept: the gridded sums against the direct ones.
//!
//! Bound: the relative L2 error over the field of N and of W is at most the tolerance asked for (the promise itself).

mod common;

use common::{Beam, Setting, geometry, relative, scene};
use evensky::response::gridded::Options;
use evensky::response::{Exact, Gridded, Response, Sums};
use evensky::sky::Direction;

/// Errors of N and of W of one setting, and what was built.
fn errors(setting: &Setting, field: f64, size: (usize, usize), centre: Direction, tolerances: &[f64]) {
    let scene = scene(setting);
    let geometry = geometry(centre, size.0, size.1, field);
    let mut truth = Sums::zero(&geometry);
    Exact::new(&scene.observation, scene.beams.clone(), geometry).adjoint(&mut scene.source(), &mut truth).unwrap();
    for &tolerance in tolerances {
        let gridded =
            Gridded::new(&scene.beams, geometry, tolerance, &mut scene.source(), Options::default()).unwrap();
        let mut sums = Sums::zero(&geometry);
        gridded.adjoint(&mut scene.source(), &mut sums).unwrap();
        let n = relative(&sums.numerator, &truth.numerator);
        let w = relative(&sums.normaliser, &truth.normaliser);
        let report = gridded.report();
        println!(
            "tolerance {tolerance:.0e}: N {n:.2e} W {w:.2e}; terms {:?} / {:?}, {} layers, window {} cells, transforms {:?}, \
             patch {:?}, difference {:.1e} of {:.1e}, built in {:.2} s",
            report.terms,
            report.power_terms,
            report.w_layers,
            report.window_support,
            report.transform,
            report.patch_px,
            report.largest_difference,
            report.bound,
            report.build_seconds
        );
        assert!(n <= tolerance, "N errs by {n:e}, promised {tolerance:e}");
        assert!(w <= tolerance, "W errs by {w:e}, promised {tolerance:e}");
    }
}

const ALL: [f64; 5] = [1e-2, 1e-3, 1e-4, 1e-5, 1e-6];

#[test]
fn unity_beams() {
    let setting = Setting { beam: Beam::Unity, ..Setting::default() };
    errors(&setting, 0.05, (48, 40), setting.aim, &ALL);
}

#[test]
fn two_dish_classes_with_pointing_offsets() {
    let setting = Setting::default();
    let centre = Direction::from_deg(152.9, 41.5);
    errors(&setting, 0.05, (48, 40), centre, &ALL);
}

#[test]
fn long_w() {
    let setting = Setting { radius_m: 6_000.0, aim: Direction::from_deg(152.3, 5.0), ..Setting::default() };
    errors(&setting, 0.05, (40, 48), Direction::from_deg(152.9, 4.5), &ALL);
}

/// Random arrays: any declination from pole to pole, w up to 50 000 wavelengths, fields from 0.5 to 8 λ/D, pointing offsets
/// up to a third of the beam's width. Fixed seeds.
#[test]
fn random_arrays() {
    use rand::{Rng, SeedableRng};
    let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(2024);
    let lambda_over_d = 0.22 / 13.0;
    for case in 0..10u64 {
        let declination = [-90.0, 90.0, 0.0, 53.0][case as usize % 4] + if case > 3 { 9.0 } else { 0.0 };
        let declination = if declination > 90.0 { 80.0 } else { declination };
        let widths = [0.5, 8.0, 2.0, 4.0, 1.0][case as usize % 5];
        let field = widths * lambda_over_d;
        // w in wavelengths is at most the longest baseline; half of it is common
        let longest_w = if widths < 3.0 { 50_000.0 } else { 4_000.0 };
        let setting = Setting {
            stations: 5,
            times: 4,
            channels: 3,
            radius_m: longest_w * 0.22 / 2.0,
            aim: Direction::from_deg(360.0 * rng.random::<f64>(), declination),
            offset: lambda_over_d / 3.0,
            beam: [Beam::Mixed, Beam::Gaussian][case as usize % 2],
            seed: case,
            interval: 0.08,
            ..Setting::default()
        };
        println!("case {case}: declination {declination}, field {widths} λ/D, w to {longest_w}");
        errors(&setting, field, (32, 36), setting.aim, &[1e-2, 1e-4, 1e-6]);
    }
}
