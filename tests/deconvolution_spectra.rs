//! Frequency terms: spectral indices and curvatures on the sky, with the beams' own change with frequency left out of them.

mod common;
mod deconvolution_support;

use common::{Beam, Setting};
use deconvolution_support::{Field, largest};
use evensky::beam::{Gaussian, StationBeam, StationBeams};
use evensky::imaging::deconvolve::local_psf::Scaling;
use evensky::imaging::deconvolve::{Minor, Outcome, Settings, Spectrum, Stop, spectrum};
use evensky::sky::{Component, ImageGeometry};
use std::sync::Arc;

const HZ: f64 = 1.4e9;

/// Nine channels over 20 % about 1.4 GHz.
fn setting(beam: Beam) -> Setting {
    Setting {
        stations: 12,
        times: 12,
        interval: 0.015,
        channels: 9,
        first_hz: 1.26e9,
        band: 0.25,
        beam,
        ..Setting::default()
    }
}

fn geometry(size: usize) -> ImageGeometry {
    ImageGeometry::new(setting(Beam::Mixed).aim, size, size, (25.0 / 3600f64).to_radians()).unwrap()
}

fn settings(terms: usize, jy: f64) -> Settings {
    Settings {
        stop_at_noise: 0.0,
        stop_at_jy: jy,
        max_major_cycles: 60,
        frequency_terms: terms,
        ..Settings::new(Minor::Clark, HZ)
    }
}

fn source(geometry: &ImageGeometry, (x, y): (f64, f64), flux_jy: f64, spectral_index: f64) -> Component {
    let direction = geometry.direction_of(x, y).unwrap();
    Component { name: "source".into(), direction, flux_jy, reference_hz: HZ, spectral_index }
}

fn spectrum_of(field: &Field, outcome: &Outcome, settings: &Settings) -> Spectrum {
    let seen = field.dirty.mapv(|value| !value.is_nan());
    let scaling = Scaling::new(&field.sums.normaliser, &field.sums.normaliser, &seen);
    spectrum(outcome, &scaling, &field.geometry, &field.beam, settings).unwrap()
}

const PLACES: [((usize, usize), f64, f64); 3] =
    [((60, 66), 1.0, -0.8), ((78, 50), 0.4, 0.5), ((30, 88), 0.7, -1.6)];

/// Three sources of unlike spectra in the beams of two dish classes that shrink with frequency. A polynomial of T terms leaves out
/// of ν^α, over x = ν/ν₀ − 1 = ±δ, δ = 0.1, first the powers xᵀ and higher. Fitted by least squares, x³ looks like 3/5 δ² x: an
/// index wrong by c₃ 3/5 δ², c₃ = α(α−1)(α−2)/6; with two terms x² adds to it as far as weights |A|² are one-sided in frequency, at
/// most c₂ δ, c₂ = α(α−1)/2, of which a third is allowed. Half as much again for further powers, and what is left at the level L at
/// which deconvolution stops: L/S over the root mean square of x, δ/√3. One term for comparison.
#[test]
fn spectral_indices_come_out_and_the_residual_goes_down() {
    let geometry = geometry(128);
    let sky: Vec<Component> =
        PLACES.iter().map(|&((x, y), jy, index)| source(&geometry, (x as f64, y as f64), jy, index)).collect();
    let mut field = Field::new(&[setting(Beam::Mixed)], &sky, geometry, false, 1.0);
    let mut left = Vec::new();
    for terms in 1..=3 {
        let level = 5e-4;
        let settings = settings(terms, level);
        let outcome = field.deconvolved(&settings);
        let residual = largest(&field.residual(&outcome));
        println!(
            "{terms} terms: {} components, {} cycles, {:?}, left {residual:.2e} Jy",
            outcome.components,
            outcome.cycles.len(),
            outcome.stop
        );
        left.push(residual);
        if terms == 1 {
            continue;
        }
        assert_eq!(outcome.stop, Stop::FluxDensity);
        let maps = spectrum_of(&field, &outcome, &settings);
        for ((x, y), jy, index) in PLACES {
            let (got, error) = (maps.index[[y, x]], maps.index_error[[y, x]]);
            let curvature = maps.curvature.as_ref().map(|map| map[[y, x]]);
            println!("  {jy} Jy, index {index}: {got:.4} ± {error:.1e}, curvature {curvature:?}");
            let c2 = (index * (index - 1.0) / 2.0).abs();
            let c3 = (index * (index - 1.0) * (index - 2.0) / 6.0).abs();
            let one_sided = if terms == 2 { c2 * 0.1 / 3.0 } else { 0.0 };
            let bound = 1.5 * c3 * 0.6 * 0.01 + one_sided + level / jy * 3f64.sqrt() / 0.1;
            assert!((got - index).abs() <= bound, "{got} at {x}, {y}, bound {bound:.4}");
            assert!(error > 0.0);
            // the same reasoning with one power more: |α(α−1)(α−2)(α−3)| 0.11²/12 and less
            assert!(curvature.is_none_or(|beta| beta.abs() <= 0.1), "{curvature:?}");
        }
        assert!(maps.index[[5, 5]].is_nan(), "nothing is said of a spectrum where there is no source");
    }
    assert!(left[1] <= 5.001e-4 && left[2] <= 5.001e-4, "{left:?}");
}

/// A flat source where one Gaussian beam has half of its power. With the beam that shrinks with frequency in the response its
/// index is 0. With a beam of constant width, what the beam does is taken for the source: P(ν) = 2^−(ν/ν₀)² at the place
/// where P(ν₀) = 1/2, so dln P/dln ν = −2 ln 2 = −1.386. Weights of an uncorrected beam do not matter: it divides N by W of the
/// wrong beam at each place, the same for all channels. Bounds: 0.01 for the true beam (two terms), 0.05 for the false index, whose
/// spectrum is curved (third-order terms of exp over ±0.11).
#[test]
fn the_beams_own_spectrum_is_not_the_sources() {
    let geometry = geometry(256);
    let width = 1.58f64.to_radians() * 1.36e9 / HZ;
    // half the power at ν₀: half the full width from the aim
    let off = 0.5 * width / geometry.pixel;
    let (x, y) = geometry.reference();
    let place = (x as f64 + off.round(), y as f64);
    let setting = Setting { offset: 0.0, ..setting(Beam::Gaussian) };
    let sky = [source(&geometry, place, 1.0, 0.0)];
    let settings = settings(2, 2e-3);
    let index_with = |constant: bool| {
        let mut field = Field::seen_otherwise(
            std::slice::from_ref(&setting),
            &sky,
            geometry,
            false,
            1.0,
            |observation, beams| {
                if !constant {
                    return beams;
                }
                let pattern = Arc::new(Gaussian::measured(&[(1.2e9, width), (1.7e9, width)], 1.0).unwrap());
                let beam = StationBeam { pattern, offset: [0.0, 0.0], beam_name: "constant".into() };
                StationBeams::new(observation, vec![beam; observation.stations.len()], None)
            },
        );
        let outcome = field.deconvolved(&settings);
        let maps = spectrum_of(&field, &outcome, &settings);
        maps.index[[place.1 as usize, place.0 as usize]]
    };
    let (with, without) = (index_with(false), index_with(true));
    // at the pixel: −2 ln2 (r/r_half)²
    let expected = -2.0 * std::f64::consts::LN_2 * (off.round() / off).powi(2);
    println!("with the beam's frequency dependence {with:.4}, without {without:.4}, expected {expected:.4}");
    assert!(with.abs() <= 0.01, "{with}");
    assert!((without - expected).abs() <= 0.05, "{without} against {expected}");
}

/// Noise: (index − truth)/error of a source in twelve noisy observations has a scatter of one. Bound: the χ² of twelve values lies in
/// 3.1 to 28 for all but 1 % (tables of χ², 12 degrees of freedom: 3.07 and 28.30); their mean within 3/√12.
#[test]
fn errors_of_the_index_are_those_of_the_noise() {
    let geometry = geometry(64);
    let place = (35usize, 30usize);
    let mut off = Vec::new();
    for seed in 0..12 {
        let setting = Setting { seed: 40 + seed, ..setting(Beam::Gaussian) };
        let sky = [source(&geometry, (place.0 as f64, place.1 as f64), 1.0, -0.7)];
        let mut field = Field::new(&[setting], &sky, geometry, true, 1.0);
        let settings = Settings { stop_at_noise: 4.0, stop_at_jy: 0.0, ..settings(2, 0.0) };
        let outcome = field.deconvolved(&settings);
        let maps = spectrum_of(&field, &outcome, &settings);
        let (index, error) = (maps.index[[place.1, place.0]], maps.index_error[[place.1, place.0]]);
        off.push((index + 0.7) / error);
    }
    let chi2: f64 = off.iter().map(|z| z * z).sum();
    let mean = off.iter().sum::<f64>() / 12.0;
    println!("{off:.2?}: χ² {chi2:.1}, mean {mean:.2}");
    assert!((3.07..=28.3).contains(&chi2), "{chi2}");
    assert!(mean.abs() <= 3.0 / 12f64.sqrt(), "{mean}");
}
