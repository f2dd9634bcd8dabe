//! Deconvolution through the library: what is found, what is left, and what the settings change.
//!
//! Skies are predicted by the direct sums, so that everything here is known to rounding (6e-8 of single-precision
//! visibilities) and the gridded sums err by 1e-5. Levels at which minor cycles stop bound what is left; the true sky bounds
//! what is found.

mod common;
mod deconvolution_support;

use common::{Beam, Setting};
use deconvolution_support::{Field, Given, flux_around, largest};
use evensky::imaging::deconvolve::{Minor, Model, NoiseLevel, Settings, Stop, circles_mask};
use evensky::run::Circle;
use evensky::sky::{Component, Direction, ImageGeometry};

const HZ: f64 = 1.35e9;

/// Twelve stations of two kinds with pointing offsets, four hours.
fn setting() -> Setting {
    Setting { stations: 12, times: 12, interval: 0.015, channels: 3, ..Setting::default() }
}

/// 25 arcsec pixels: a beam of about three.
fn geometry(size: usize) -> ImageGeometry {
    ImageGeometry::new(setting().aim, size, size, (25.0 / 3600f64).to_radians()).unwrap()
}

fn to_jy(minor: Minor, jy: f64) -> Settings {
    Settings { stop_at_noise: 0.0, stop_at_jy: jy, max_major_cycles: 60, ..Settings::new(minor, HZ) }
}

/// Three sources on pixels: (x, y, Jy).
const THREE: [(f64, f64, f64); 3] = [(60.0, 66.0, 1.0), (78.0, 50.0, 0.4), (30.0, 88.0, 0.7)];

fn three(geometry: &ImageGeometry) -> Vec<Component> {
    THREE.iter().map(|&(x, y, jy)| Field::source(geometry, x, y, jy)).collect()
}

/// Högbom and Clark on the same point sources. Both leave at most the level L = 2 mJy; the flux within two pixels of a
/// source then differs from the truth by L over what the side lobes of 3 sources leave of a pixel's own weight (here at
/// most a third is lost): both agree with the truth to 2 L, and with each other to 4 L = 0.8 % of the brightest.
#[test]
fn hogbom_and_clark_find_the_same_points() {
    let geometry = geometry(128);
    let mut field = Field::new(&[setting()], &three(&geometry), geometry, false, 1.0);
    let level = 2e-3;
    let mut found = Vec::new();
    for minor in [Minor::Hogbom, Minor::Clark] {
        let outcome = field.deconvolved(&to_jy(minor.clone(), level));
        let left = largest(&field.residual(&outcome));
        println!(
            "{minor:?}: {} components, {} cycles, {:?}, left {left:.2e} Jy, steps {:?}",
            outcome.components,
            outcome.cycles.len(),
            outcome.stop,
            outcome.cycles.iter().map(|c| c.step).collect::<Vec<_>>()
        );
        assert_eq!(outcome.stop, Stop::FluxDensity);
        assert!(left <= level * 1.0001, "{left}");
        let fluxes = THREE.map(|(x, y, _)| flux_around(&outcome.model, x, y, 2.0));
        for (flux, (_, _, jy)) in fluxes.iter().zip(THREE) {
            assert!((flux - jy).abs() <= 2.0 * level, "{flux} for {jy}");
        }
        assert!(outcome.cycles.iter().all(|cycle| cycle.step > 0.0 && cycle.step <= 1.0));
        found.push(fluxes);
    }
    for (one, other) in found[0].iter().zip(&found[1]) {
        assert!((one - other).abs() <= 4.0 * level, "{one} and {other}");
    }
}

/// A mosaic of three pointings whose fields overlap; minor cycles that go far deeper than their point spread functions
/// are good for, in whole steps: the share taken keeps the misfit falling, and the residual ends below the level.
#[test]
fn a_mosaic_converges_even_with_reckless_minor_cycles() {
    let geometry = geometry(160);
    let settings: Vec<Setting> = [(0.0, 0.0), (0.35, 0.1), (-0.2, 0.3)]
        .iter()
        .enumerate()
        .map(|(n, (ra, dec))| Setting {
            aim: Direction::from_deg(152.3 + ra, 41.7 + dec),
            seed: 1 + n as u64,
            times: 6,
            ..setting()
        })
        .collect();
    let sky = [(80.0, 80.0, 1.0), (50.0, 100.0, 0.5), (110.0, 60.0, 0.3), (84.0, 95.0, 0.2)]
        .map(|(x, y, jy)| Field::source(&geometry, x, y, jy));
    let mut field = Field::new(&settings, &sky, geometry, false, 1.0);
    let level = 3e-3;
    let reckless =
        Settings { loop_gain: 0.5, major_depth: 0.01, max_major_cycles: 100, ..to_jy(Minor::Hogbom, level) };
    let outcome = field.deconvolved(&reckless);
    let left = largest(&field.residual(&outcome));
    println!("{} cycles, {:?}, left {left:.2e} Jy", outcome.cycles.len(), outcome.stop);
    assert_eq!(outcome.stop, Stop::FluxDensity);
    assert!(left <= level * 1.0001, "{left}");
    for (source, jy) in sky.iter().zip([1.0, 0.5, 0.3, 0.2]) {
        let (x, y) = geometry.pixel_of(source.direction).unwrap();
        let flux = flux_around(&outcome.model, x, y, 2.0);
        assert!((flux - jy).abs() <= 2.0 * level, "{flux} for {jy}");
    }
}

/// A Gaussian of 300″, a beam and a half, of 2 Jy: multi-scale keeps its flux within 1 %. (The shortest baselines see 95 %
/// of it.) The flux is that of the model within 3 full widths, and that of the whole model.
#[test]
fn multi_scale_keeps_the_flux_of_a_gaussian() {
    let pixel = (50.0 / 3600f64).to_radians();
    let setting = Setting { radius_m: 110.0, stations: 20, beam: Beam::Gaussian, channels: 2, ..setting() };
    let geometry = ImageGeometry::new(setting.aim, 96, 96, pixel).unwrap();
    let (width_px, jy, half_px) = (6.0, 2.0, 18);
    let shape = |d: f64| (-4.0 * std::f64::consts::LN_2 * (d / width_px).powi(2)).exp();
    let steps: Vec<f64> = (-2 * half_px..=2 * half_px).map(|i| 0.5 * f64::from(i)).collect();
    let all: f64 = steps.iter().map(|d| shape(*d)).sum::<f64>().powi(2);
    let (cx, cy) = (45.3, 50.6);
    let sky: Vec<Component> = steps
        .iter()
        .flat_map(|dy| steps.iter().map(move |dx| (*dx, *dy)))
        .map(|(dx, dy)| Field::source(&geometry, cx + dx, cy + dy, jy * shape(dx) * shape(dy) / all))
        .collect();
    let mut field = Field::new(&[setting], &sky, geometry, false, 1.0);
    let minor = Minor::MultiScale { scales_px: vec![0.0, 3.0, 6.0, 12.0], bias: 0.6 };
    let outcome = field.deconvolved(&to_jy(minor, 3e-4));
    let flux = flux_around(&outcome.model, cx, cy, 3.0 * width_px);
    let left = largest(&field.residual(&outcome));
    println!(
        "{flux} Jy of {jy}, {} in all, {} components, {} cycles, {:?}, left {left:.2e}",
        outcome.model.flux_at(HZ),
        outcome.components,
        outcome.cycles.len(),
        outcome.stop
    );
    assert!((flux / jy - 1.0).abs() <= 0.01, "{flux} Jy of {jy}");
    assert!((outcome.model.flux_at(HZ) / jy - 1.0).abs() <= 0.01, "nothing is made up elsewhere");
    assert!(left <= 1e-3, "{left}");
}

/// A negative source: found as such, unless the model must not be negative; then every pixel keeps at or above zero.
#[test]
fn a_model_that_may_not_be_negative_is_not() {
    let geometry = geometry(128);
    let sky = [(60.0, 66.0, 1.0), (80.0, 50.0, -0.5)].map(|(x, y, jy)| Field::source(&geometry, x, y, jy));
    let mut field = Field::new(&[setting()], &sky, geometry, false, 1.0);
    for minor in [Minor::Hogbom, Minor::Clark, Minor::MultiScale { scales_px: vec![0.0, 6.0], bias: 0.6 }] {
        let free = field.deconvolved(&to_jy(minor.clone(), 5e-3));
        assert!((flux_around(&free.model, 80.0, 50.0, 2.0) + 0.5).abs() < 0.02, "{minor:?}");
        let held = Settings { non_negative: true, max_major_cycles: 12, ..to_jy(minor.clone(), 5e-3) };
        let held = field.deconvolved(&held);
        let lowest = held.model.pixels.iter().copied().fold(f64::INFINITY, f64::min);
        assert!(lowest >= -1e-12, "{minor:?}: {lowest}");
        let flux = flux_around(&held.model, 60.0, 66.0, 2.0);
        assert!((flux - 1.0).abs() < 0.15, "{minor:?}: {flux} Jy beside a source that cannot be modelled");
    }
}

/// Circles, and a mask grown from the noise: components lie in them and nowhere else.
#[test]
fn masks_hold() {
    let geometry = geometry(128);
    let mut field = Field::new(&[setting()], &three(&geometry), geometry, false, 1.0);
    let (x, y, _) = THREE[0];
    let (ra, dec) = geometry.direction_of(x, y).unwrap().to_deg();
    let circle = Circle { centre_deg: [ra, dec], radius_arcsec: 100.0 };
    let mask = circles_mask(&geometry, &[circle]);
    let settings = Settings { max_major_cycles: 5, ..to_jy(Minor::Clark, 2e-2) };
    let outcome = field.deconvolved_with(&settings, Given { mask: Some(mask.clone()), start: None });
    assert!(outcome.components > 10);
    for (flux, open) in outcome.model.pixels.iter().zip(&mask) {
        assert!(*open || *flux == 0.0);
    }
    assert_eq!(outcome.searched_pixels, mask.iter().filter(|open| **open).count());

    let settings = Settings { mask_above_noise: Some(6.0), ..to_jy(Minor::Clark, 1e-2) };
    let outcome = field.deconvolved(&settings);
    assert!(outcome.searched_pixels < 128 * 128 / 10, "{} pixels", outcome.searched_pixels);
    for (x, y, jy) in THREE {
        let flux = flux_around(&outcome.model, x, y, 3.0);
        assert!((flux - jy).abs() < 0.03, "{flux} for {jy}");
    }
    let nowhere = Given { mask: Some(ndarray::Array2::from_elem((128, 128), false)), start: None };
    let outcome = field.deconvolved_with(&to_jy(Minor::Clark, 1e-2), nowhere);
    assert_eq!((outcome.stop, outcome.components), (Stop::NothingToSearch, 0));
}

/// Started from what an earlier run found there is nothing left to do, and the residual is the same to rounding.
#[test]
fn a_model_to_start_from() {
    let geometry = geometry(128);
    let mut field = Field::new(&[setting()], &three(&geometry), geometry, false, 1.0);
    let settings = to_jy(Minor::Clark, 5e-3);
    let first = field.deconvolved(&settings);
    let sky = first.model.pixel_components(&geometry, HZ, 0.0);
    let start = Model::from_components(sky, &geometry, HZ, 0.0);
    let again = field.deconvolved_with(&settings, Given { mask: None, start: Some(start) });
    assert_eq!((again.components, again.stop), (0, Stop::FluxDensity));
    let difference = largest(&(&again.numerator - &first.numerator)) / largest(&field.sums.numerator);
    assert!(difference < 1e-5, "{difference:e}");
}

/// The number of components ends it, to the last one; so does the number of major cycles.
#[test]
fn counts_are_kept() {
    let geometry = geometry(96);
    let sky = [Field::source(&geometry, 50.0, 40.0, 1.0)];
    let mut field = Field::new(&[setting()], &sky, geometry, false, 1.0);
    let outcome = field.deconvolved(&Settings { max_components: 17, ..to_jy(Minor::Hogbom, 1e-4) });
    assert_eq!((outcome.components, outcome.stop), (17, Stop::Components));
    // gain 0.1 on a lone source: 1 − 0.9^17 of it, to the few per cent that other pixels took
    let taken = outcome.model.flux_at(HZ);
    assert!((taken - (1.0 - 0.9f64.powi(17))).abs() < 0.03, "{taken}");
    let outcome = field.deconvolved(&Settings { max_major_cycles: 2, ..to_jy(Minor::Clark, 1e-9) });
    assert_eq!((outcome.cycles.len(), outcome.stop), (2, Stop::MajorCycles));
}

/// Noise: at three times it, next to nothing is found beside the source; where weights claim a tenth of the noise that is
/// there, only the measured noise knows where to stop.
#[test]
fn levels_follow_the_noise() {
    let geometry = geometry(128);
    let sky = [Field::source(&geometry, 60.0, 66.0, 3.0)];
    let settings = Settings { max_components: 4000, max_major_cycles: 8, ..Settings::new(Minor::Clark, HZ) };
    let mut honest = Field::new(&[setting()], &sky, geometry, true, 1.0);
    let outcome = honest.deconvolved(&settings);
    assert_eq!(outcome.stop, Stop::Noise);
    let last = outcome.cycles.last().unwrap();
    assert!(last.peak_over_noise <= 3.0001, "{}", last.peak_over_noise);
    let rms = {
        let residual = honest.residual(&outcome);
        let over: Vec<f64> = residual
            .iter()
            .zip(&honest.sums.normaliser)
            .filter(|(r, _)| !r.is_nan())
            .map(|(r, w)| r * r * w)
            .collect();
        (over.iter().sum::<f64>() / over.len() as f64).sqrt()
    };
    // 1 but for the peaks cleaned away; the number of independent beams (about 400) makes 4 %
    assert!((0.8..1.12).contains(&rms), "{rms}");
    let mut wrong = Field::new(&[setting()], &sky, geometry, true, 100.0);
    let believed = wrong.deconvolved(&settings);
    let measured = wrong.deconvolved(&Settings { noise: NoiseLevel::Measured, ..settings });
    println!("{} honest, {} believed, {} measured", outcome.components, believed.components, measured.components);
    assert!(believed.components > 4 * measured.components, "{} {}", believed.components, measured.components);
    assert_eq!(measured.stop, Stop::Noise);
}

/// Sources between pixels with spectra of their own, one of them a double half a beam apart, come out of the visibilities
/// themselves. Bounds: position 1e-3 of a beam, flux 1e-4, index 0.01, residual 1e-5 of the brightest (the tolerance of
/// the gridded prediction); without fits the residual is a hundred times that.
#[test]
fn compact_sources_are_fitted_in_the_visibilities() {
    let geometry = geometry(128);
    let truth =
        [(60.37, 66.21, 1.0, -0.9), (81.48, 47.63, 0.4, 0.3), (30.5, 88.5, 0.7, -0.5), (32.3, 88.9, 0.5, -1.2)];
    let sky =
        truth.map(|(x, y, jy, alpha)| Component { spectral_index: alpha, ..Field::source(&geometry, x, y, jy) });
    let mut field = Field::new(&[setting()], &sky, geometry, false, 1e4);
    let beam_px = field.beam.minor / geometry.pixel;
    let settings = Settings { fit_points_above_noise: Some(20.0), ..to_jy(Minor::Clark, 1e-5) };
    let outcome = field.deconvolved(&settings);
    let left = largest(&field.residual(&outcome));
    println!("{} points, {:?}, left {left:.1e} Jy, beam {beam_px:.2} px", outcome.fitted_points, outcome.stop);
    for point in &outcome.model.points {
        let (x, y) = geometry.pixel_of(point.direction).unwrap();
        println!("{} {x:.5} {y:.5} {:.6} {:.4}", point.name, point.flux_jy, point.spectral_index);
    }
    assert_eq!(outcome.fitted_points, 4);
    for (x, y, jy, alpha) in truth {
        let near = |c: &&Component| {
            let (px, py) = geometry.pixel_of(c.direction).unwrap();
            (px - x).hypot(py - y) < 1e-3 * beam_px
        };
        let point = outcome.model.points.iter().find(near).unwrap_or_else(|| panic!("nothing at {x}, {y}"));
        assert!((point.flux_at(HZ) / jy - 1.0).abs() < 1e-4, "{} for {jy}", point.flux_jy);
        assert!((point.spectral_index - alpha).abs() < 0.01, "{} for {alpha}", point.spectral_index);
    }
    assert!(left < 1e-5, "{left:e}");
    let plain = field.deconvolved(&Settings { max_major_cycles: 12, ..to_jy(Minor::Clark, 1e-5) });
    let left = largest(&field.residual(&plain));
    assert!(left > 1e-4, "pixels alone are as good ({left:e}): the fits are not tested");
}
