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
