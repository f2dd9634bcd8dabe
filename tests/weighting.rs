//! Imaging weights: noise against the weight map, the point spread function of tapers, and what is refused.

mod common;

use common::{Beam, Setting, geometry, scene};
use evensky::imaging::beam_fit::fit_beam;
use evensky::imaging::{Mosaic, Pointing, flat_sky};
use evensky::observation::{Block, Watched};
use evensky::response::gridded::Options;
use evensky::response::{Response, Sums};
use evensky::run::{Scheme, Weighting};
use ndarray::Array2;
use num_complex::Complex32;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

fn setting() -> Setting {
    Setting { stations: 8, times: 24, channels: 2, interval: 0.01, beam: Beam::Gaussian, ..Setting::default() }
}

fn robust(robustness: f64) -> Weighting {
    Weighting { scheme: Scheme::Robust, robustness, ..Weighting::default() }
}

/// A mosaic of one pointing and its natural weights.
fn mosaic(weighting: &Weighting, field: f64) -> (Mosaic, Block, f64) {
    let scene = scene(&setting());
    let geometry = geometry(setting().aim, 48, 48, field);
    let mut mosaic = Mosaic::new(geometry);
    mosaic.add(Box::new(scene.source()), scene.beams.clone(), 1e-3, Options::default(), |_| ()).expect("planned");
    let price =
        if weighting.is_natural() { 1.0 } else { mosaic.weigh(weighting, |_| ()).unwrap().relative_noise() };
    (mosaic, scene.block, price)
}

/// 200 images of noise alone: at every pixel the scatter is what the weight map says. The mean of scatter² × weight over
/// the pixels has a relative standard error of √(2/200) for each independent beam area; at least 25 of them lie in the
/// image, so 0.1 is five of them. Natural weights have the least noise, and each scheme's price is told.
#[test]
fn noise_images_scatter_as_the_weight_map_says() {
    for weighting in [
        Weighting::default(),
        robust(0.0),
        Weighting { scheme: Scheme::Uniform, ..Weighting::default() },
        Weighting { inner_taper_wavelengths: Some(300.0), ..robust(1.0) },
    ] {
        let (mut mosaic, natural, price) = mosaic(&weighting, 0.03);
        let sums = mosaic.sums(|_| ()).unwrap();
        let weight = mosaic.weight_map(&sums, |_| ()).unwrap();
        let mut rng = ChaCha8Rng::seed_from_u64(0x0153);
        let mut squares: Array2<f64> = Array2::zeros(weight.dim());
        const IMAGES: usize = 200;
        for _ in 0..IMAGES {
            let Pointing { source, gridded, .. } = &mut mosaic.pointings_mut()[0];
            let mut noise = Watched::new(source.as_mut(), |block: &mut Block| {
                for (data, &weight) in block.data.iter_mut().zip(&natural.weight) {
                    let mut draw = || -> f32 { StandardNormal.sample(&mut rng) };
                    let sigma = if weight > 0.0 { 1.0 / weight.sqrt() } else { 0.0 };
                    *data = Complex32::new(sigma * draw(), sigma * draw());
                }
                Ok(())
            });
            let mut of_noise =
                Sums { numerator: Array2::zeros(weight.dim()), normaliser: Array2::zeros(weight.dim()) };
            gridded.adjoint(&mut noise, &mut of_noise).unwrap();
            of_noise.normaliser.assign(&sums.normaliser);
            squares += &flat_sky(&of_noise, 0.0).mapv(|value| value * value);
        }
        let ratio = (&squares * &weight).mean().unwrap() / IMAGES as f64;
        println!("{}: scatter² × weight {ratio:.3}, price {price:.3}", weighting.describe());
        assert!((ratio - 1.0).abs() <= 0.1, "{}: {ratio}", weighting.describe());
        // the same at the image centre, where the map must be that of the price: unit beams there but for offsets
        let (mut of_natural, ..) = self::mosaic(&Weighting::default(), 0.03);
        let deepest = of_natural.sums(|_| ()).unwrap().normaliser[[24, 24]];
        let told = (deepest / weight[[24, 24]]).sqrt();
        assert!(
            told >= 1.0 - 1e-3 && (told / price - 1.0).abs() < 0.02,
            "{}: {told} and {price}",
            weighting.describe()
        );
    }
}

/// With a dense filling a Gaussian outer taper convolves the point spread function with that Gaussian. A sparse array does
/// so only roughly; the analytic part that holds for any is its transform, tested beside the formula. Here: tapers widen.
#[test]
fn tapers_widen_and_robust_weights_narrow_the_beam() {
    let width = |weighting: Weighting| {
        let (mut mosaic, ..) = mosaic(&weighting, 0.004);
        let sums = mosaic.sums(|_| ()).unwrap();
        let dirty = flat_sky(&sums, 0.1);
        let centre = mosaic.geometry().centre;
        let psf = mosaic.point_spread(centre, &sums, &dirty, |_| ()).unwrap();
        let beam = fit_beam(psf.view(), mosaic.geometry().reference(), mosaic.geometry().pixel).unwrap();
        (beam.major * beam.minor).sqrt().to_degrees() * 3600.0
    };
    let natural = width(Weighting::default());
    let uniform = width(Weighting { scheme: Scheme::Uniform, ..Weighting::default() });
    let tapered = width(Weighting { outer_taper_arcsec: Some(natural), ..Weighting::default() });
    let longest = width(Weighting { uv_range_wavelengths: Some([800.0, 1e9]), ..Weighting::default() });
    println!(
        "natural {natural:.1}, uniform {uniform:.1}, tapered {tapered:.1}, long baselines {longest:.1} arcsec"
    );
    assert!(uniform < natural && longest < natural);
    // two Gaussians of one width convolved are √2 as wide; the dirty beam is a Gaussian within some tens of per cent
    assert!((tapered / natural / std::f64::consts::SQRT_2 - 1.0).abs() < 0.25, "{}", tapered / natural);
}

#[test]
fn impossible_weightings_are_refused_by_line_and_key() {
    let run = |lines: &str| -> String {
        let text = format!(
            "[[pointing]]\nvisibilities = \"a.fits\"\n[image]\ncentre_deg = [10, 20]\nsize_px = [20, 20]\npixel_arcsec = 9\n\
             [beams.b]\nshape = \"unity\"\n[[stations]]\nmatch = \"*\"\nbeam = \"b\"\n[weighting]\n{lines}\n"
        );
        match evensky::run::RunFile::parse("run.toml".as_ref(), &text) {
            Ok(run) => run.weighting.describe(),
            Err(error) => error.to_string(),
        }
    };
    for (lines, words) in [
        ("scheme = \"brigs\"", vec![":13:", "weighting.scheme", "no weighting scheme"]),
        ("scheme = \"robust\"\nrobustness = 9", vec![":14:", "weighting.robustness", "-5 (uniform) to 5"]),
        ("robustness = 0.5", vec!["weighting.robustness", "without robust weights"]),
        ("density = \"some\"", vec!["weighting.density", "\"pointing\""]),
        ("cell_wavelengths = 0", vec!["weighting.cell_wavelengths", "greater than 0"]),
        ("outer_taper_arcsec = -3", vec!["weighting.outer_taper_arcsec", "greater than 0"]),
        ("inner_taper_wavelengths = \"x\"", vec!["weighting.inner_taper_wavelengths", "the string"]),
        (
            "outer_cosine_wavelengths = [300, 100]",
            vec!["weighting.outer_cosine_wavelengths", "greater than the first"],
        ),
        ("uv_range_wavelengths = [300]", vec!["weighting.uv_range_wavelengths", "two distances"]),
        ("outer_taper = 3", vec!["weighting.outer_taper", "outer_taper_arcsec"]),
    ] {
        let said = run(lines);
        for word in words {
            assert!(said.contains(word), "{lines}: {said:?} lacks {word:?}");
        }
    }
    assert_eq!(
        run("scheme = \"robust\"\nrobustness = -0.5\nuv_range_wavelengths = [0, 900]"),
        "robust, robustness -0.5, only 0 to 900 wavelengths"
    );
}
