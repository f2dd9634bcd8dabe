//! Imaging weights: noise against the weight map, the point spread function of tapers, the frequency of the sums, and what
//! is refused.

mod common;

use common::{Beam, Setting, geometry, scene};
use evensky::beam::{StationBeam, StationBeams, Unity};
use evensky::imaging::beam_fit::fit_beam;
use evensky::imaging::{Mosaic, Pointing, Price, flat_sky};
use evensky::observation::{Block, BlockSource, MemorySource, Watched};
use evensky::response::gridded::Options;
use evensky::response::{Response, Sums};
use evensky::run::{Scheme, Weighting};
use evensky::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use num_complex::Complex32;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use std::f64::consts::{LN_2, PI, TAU};
use std::sync::Arc;

/// \[m/s\], exact.
const SPEED_OF_LIGHT: f64 = 299_792_458.0;

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

/// Tapers and ranges widen the beam, density and long baselines narrow it.
#[test]
fn tapers_widen_and_robust_weights_narrow_the_beam() {
    let width = |weighting: Weighting| {
        let (mut mosaic, ..) = mosaic(&weighting, 0.004);
        let psf = point_spread(&mut mosaic);
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
    assert!(uniform < natural && longest < natural && tapered > natural);
}

fn point_spread(mosaic: &mut Mosaic) -> Array2<f64> {
    let sums = mosaic.sums(|_| ()).unwrap();
    let dirty = flat_sky(&sums, 0.1);
    mosaic.point_spread(mosaic.geometry().centre, &sums, &dirty, |_| ()).unwrap()
}

const TIGHT: f64 = 1e-4;

/// One pointing with beams of 1 everywhere, its phase centre the image centre.
fn without_beams(
    setting: &Setting,
    block: Option<Block>,
    field: f64,
    weighting: &Weighting,
) -> (Mosaic, Block, Price) {
    let scene = scene(setting);
    let mut observation = scene.observation;
    let mut block = block.unwrap_or(scene.block);
    observation.frequencies_hz.truncate(block.channels);
    observation.widths_hz.truncate(block.channels);
    block.data.fill(Complex32::ZERO);
    let unity = StationBeam { pattern: Arc::new(Unity), offset: [0.0, 0.0], beam_name: "unity".into() };
    let beams = StationBeams::new(&observation, vec![unity; observation.stations.len()], None);
    let mut mosaic = Mosaic::new(geometry(setting.aim, 48, 48, field));
    let source = Box::new(MemorySource::new(observation, vec![block.clone()]));
    mosaic.add(source, beams, TIGHT, Options::default(), |_| ()).expect("planned");
    let price = mosaic.weigh(weighting, |_| ()).unwrap();
    (mosaic, block, price)
}

fn blocks(mosaic: &mut Mosaic) -> Vec<Block> {
    let source = &mut mosaic.pointings_mut()[0].source;
    source.rewind().unwrap();
    std::iter::from_fn(|| source.next_block().unwrap()).collect()
}

fn largest(a: &Array2<f64>, b: &Array2<f64>) -> f64 {
    assert!(a.iter().chain(b).all(|value| value.is_finite()));
    a.iter().zip(b).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max)
}

fn offsets(geometry: &ImageGeometry, y: usize, x: usize) -> (f64, f64) {
    let (x0, y0) = geometry.reference();
    ((x0 as f64 - x as f64) * geometry.pixel, (y as f64 - y0 as f64) * geometry.pixel)
}

/// A u, v plane filled like a Gaussian whose transform is 40 arcsec wide, on a lattice so fine that its images lie outside the
/// field (Poisson's sum), so far out that what is cut off is 1e-6: a taper of 30 arcsec makes the point spread function the
/// Gaussian of √(40² + 30²) = 50, everywhere in the image. Bounds: the lattice's edges hold 1e-6 of the sum or less;
/// single pixels ten times the promise of N, 1e-4; the fitted width half the misfit of the pixels it is fitted to.
#[test]
fn a_gaussian_taper_convolves_the_beam_with_its_gaussian() {
    let setting = Setting { channels: 1, times: 1, ..setting() };
    let hz = setting.first_hz;
    let pattern = scene(&setting).block;
    let arcsec = |angle: f64| (angle / 3600.0).to_radians();
    let mut block = Block { channels: 1, hands: 2, ..Block::default() };
    for i in -26..=26 {
        for j in -26..=26 {
            let (u, v) = (400.0 * f64::from(i), 400.0 * f64::from(j));
            block.mjd_utc.push(pattern.mjd_utc[0]);
            block.uvw_m.push([u, v, 0.0].map(|wavelengths| wavelengths * SPEED_OF_LIGHT / hz));
            block.first.push(0);
            block.second.push(1);
            let filling = (-(PI * arcsec(40.0)).powi(2) * (u * u + v * v) / (4.0 * LN_2)).exp();
            block.weight.extend([filling as f32; 2]);
        }
    }
    block.data = vec![Complex32::ZERO; block.weight.len()];
    for (taper, width) in [(None, 40.0), (Some(30.0), 50.0), (Some(96.0), 104.0)] {
        let asked = Weighting { outer_taper_arcsec: taper, ..Weighting::default() };
        let (mut mosaic, ..) = without_beams(&setting, Some(block.clone()), arcsec(300.0), &asked);
        let geometry = *mosaic.geometry();
        let psf = point_spread(&mut mosaic);
        let want = Array2::from_shape_fn(psf.dim(), |(y, x)| {
            let (l, m) = offsets(&geometry, y, x);
            (-4.0 * LN_2 * (l * l + m * m) / arcsec(width).powi(2)).exp()
        });
        let off = largest(&psf, &want);
        let beam = fit_beam(psf.view(), geometry.reference(), geometry.pixel).unwrap();
        let wide = [beam.major, beam.minor].map(|width| width.to_degrees() * 3600.0);
        println!("taper {taper:?}: off the Gaussian of {width} arcsec by {off:.1e}; fitted {wide:.3?}");
        assert!(off <= 10.0 * TIGHT, "{taper:?}: {off:e}");
        assert!(wide.iter().all(|w| (w / width - 1.0).abs() <= 5.0 * TIGHT), "{taper:?}: {wide:?}");
    }
}

/// Few stations, no Gaussian anywhere: the point spread function is Σ w T cos(2π(ul + vm + w(n − 1))) / Σ w T, summed here
/// with T by the formulas of the documentation. Bound: ten times the promise for single pixels.
#[test]
fn tapered_point_spread_functions_are_the_direct_sum() {
    let setting = setting();
    let theta = (25.0f64 / 3600.0).to_radians();
    type Taper = Box<dyn Fn(f64) -> f64>;
    let natural = Weighting::default();
    let cases: [(Weighting, Taper); 3] = [
        (
            Weighting { outer_taper_arcsec: Some(25.0), ..natural },
            Box::new(move |rho| (-(PI * theta * rho).powi(2) / (4.0 * LN_2)).exp()),
        ),
        (
            Weighting { outer_cosine_wavelengths: Some([500.0, 1800.0]), ..natural },
            Box::new(|rho| 0.5 * (1.0 + (PI * ((rho - 500.0) / 1300.0).clamp(0.0, 1.0)).cos())),
        ),
        (
            Weighting {
                inner_taper_wavelengths: Some(600.0),
                uv_range_wavelengths: Some([0.0, 2000.0]),
                ..natural
            },
            Box::new(|rho| if rho <= 2000.0 { 1.0 - (-0.5 * (rho / 600.0).powi(2)).exp() } else { 0.0 }),
        ),
    ];
    let frequencies = scene(&setting).observation.frequencies_hz;
    for (asked, taper) in cases {
        let (mut mosaic, block, _) = without_beams(&setting, None, 0.004, &asked);
        let geometry = *mosaic.geometry();
        let mut terms = Vec::new();
        for row in 0..block.rows() {
            for (channel, hz) in frequencies.iter().enumerate() {
                let [u, v, w] = block.uvw_m[row].map(|metres| metres * hz / SPEED_OF_LIGHT);
                let at = block.index(row, channel);
                let weight: f64 = block.weight[at..at + 2].iter().map(|&w| f64::from(w)).sum();
                terms.push((u, v, w, weight * taper(u.hypot(v))));
            }
        }
        let total: f64 = terms.iter().map(|t| t.3).sum();
        let want = Array2::from_shape_fn((48, 48), |(y, x)| {
            let (l, m) = offsets(&geometry, y, x);
            let n1 = (1.0 - l * l - m * m).sqrt() - 1.0;
            terms.iter().map(|(u, v, w, t)| t * (TAU * (u * l + v * m + w * n1)).cos()).sum::<f64>() / total
        });
        let off = largest(&point_spread(&mut mosaic), &want);
        println!("{}: off the direct sum by {off:.1e}", asked.describe());
        assert!(off <= 10.0 * TIGHT, "{}: {off:e}", asked.describe());
    }
}

/// Without beams the noise is the same everywhere, and the weight map, the price and the direct sum of natural weights must
/// say the same of it. Bound: ten times the promise for single pixels, three sums in each.
#[test]
fn price_and_weight_map_agree() {
    for asked in [
        robust(0.0),
        robust(-2.0),
        Weighting { scheme: Scheme::Uniform, uv_range_m: Some([100.0, 500.0]), ..Weighting::default() },
        Weighting { outer_taper_arcsec: Some(60.0), ..Weighting::default() },
    ] {
        let (mut mosaic, block, price) = without_beams(&setting(), None, 0.004, &asked);
        let sums = mosaic.sums(|_| ()).unwrap();
        let weight = mosaic.weight_map(&sums, |_| ()).unwrap();
        let natural = mosaic.natural_weight_at(mosaic.geometry().centre).unwrap();
        let by_hand: f64 = block.weight.iter().map(|&w| f64::from(w)).sum();
        assert!(
            (natural / by_hand - 1.0).abs() <= 1e-9,
            "all visibilities, whatever is cut: {natural} and {by_hand}"
        );
        let told = price.relative_noise();
        let off = weight.mapv(|w| ((natural / w).sqrt() / told - 1.0).abs()).iter().copied().fold(0.0, f64::max);
        println!("{}: price {told:.4}, weight map off by {off:.1e}", asked.describe());
        assert!(told > 1.01 && off <= 30.0 * TIGHT, "{}: {off:e}", asked.describe());
    }
}

/// The frequency of the sums is that of the weights that are in them: against the mean over the weights that the source lends,
/// which are rounded to single precision. A cut in wavelengths drops the high end of the band on long baselines.
#[test]
fn the_frequency_is_that_of_the_imaging_weights() {
    let setting = Setting { channels: 6, band: 0.12, ..setting() };
    let mean = |mosaic: &mut Mosaic| {
        let frequencies = mosaic.pointings()[0].source.observation().frequencies_hz.clone();
        let (mut sum, mut hz_sum, mut used) = (0.0, 0.0, 0);
        for block in blocks(mosaic) {
            for (at, &weight) in block.weight.iter().enumerate() {
                sum += f64::from(weight);
                hz_sum += f64::from(weight) * frequencies[at / block.hands % block.channels];
                used += u64::from(weight > 0.0);
            }
        }
        (hz_sum / sum, used)
    };
    let (mut natural, ..) = without_beams(&setting, None, 0.004, &Weighting::default());
    let of_natural = natural.frequency_hz().unwrap();
    assert!((mean(&mut natural).0 / of_natural - 1.0).abs() <= 1e-7);
    for asked in [
        Weighting { uv_range_wavelengths: Some([0.0, 700.0]), ..robust(0.0) },
        Weighting { outer_taper_arcsec: Some(120.0), ..robust(1.0) },
    ] {
        let (mut mosaic, ..) = without_beams(&setting, None, 0.004, &asked);
        let told = mosaic.frequency_hz().unwrap();
        let (want, used) = mean(&mut mosaic);
        println!("{}: {told:e} Hz, natural {of_natural:e}: {:.2e}", asked.describe(), told / of_natural - 1.0);
        assert!((told / want - 1.0).abs() <= 1e-7, "{told} and {want}");
        assert!((told / of_natural - 1.0).abs() > 1e-4, "a case that tells the two apart");
        let (share, tally) = (mosaic.pointings()[0].share, mosaic.pointings()[0].tally);
        assert_eq!((share.used, share.used + share.excluded), (used, tally.used));
    }
}

/// What the usual ends R = ±2 give where the plane is filled unevenly: ω is off natural by up to 2.5e-3 D/⟨D⟩, off uniform by
/// up to 4e-6 ⟨D⟩/D. Bounds for cells of twenty times the mean and of a five-hundredth of it; the documentation states what is
/// printed here.
#[test]
fn robustness_of_two_is_nearly_natural_and_minus_two_nearly_uniform() {
    // cells of 250 and of 33 wavelengths
    for field in [0.004, 0.03] {
        let weights = |asked: &Weighting| -> Vec<f32> {
            let (mut mosaic, ..) = without_beams(&setting(), None, field, asked);
            blocks(&mut mosaic).iter().flat_map(|block| block.weight.clone()).collect()
        };
        let off = |a: Weighting, b: Weighting| {
            let (a, b) = (weights(&a), weights(&b));
            let pairs = a.iter().zip(&b).filter(|(_, b)| **b > 0.0);
            pairs.map(|(a, b)| (f64::from(*a) / f64::from(*b) - 1.0).abs()).fold(0.0, f64::max)
        };
        let natural = off(robust(2.0), Weighting::default());
        let uniform = off(robust(-2.0), Weighting { scheme: Scheme::Uniform, ..Weighting::default() });
        println!(
            "field {field}: R = 2 at most {natural:.1e} off natural, R = -2 at most {uniform:.1e} off uniform"
        );
        assert!(natural > 1e-3 && natural <= 5e-2, "{natural:e}");
        assert!(uniform > 1e-6 && uniform <= 2e-3, "{uniform:e}");
    }
}

/// A pointing whose beams do not reach the image adds nothing to it, and so has no part in the density, the price or the
/// frequency.
#[test]
fn pointings_out_of_sight_have_no_part_in_the_weights() {
    let near = setting();
    let far = Setting { aim: Direction::from_deg(182.3, 41.7), first_hz: 1.6e9, seed: 5, ..setting() };
    let made = |settings: &[&Setting]| {
        let mut mosaic = Mosaic::new(geometry(near.aim, 48, 48, 0.004));
        for setting in settings {
            let scene = scene(setting);
            mosaic
                .add(Box::new(scene.source()), scene.beams.clone(), 1e-3, Options::default(), |_| ())
                .expect("planned");
        }
        let price = mosaic.weigh(&robust(0.0), |_| ()).unwrap();
        let first = blocks(&mut mosaic)[0].weight.clone();
        (mosaic.pointings().iter().map(Pointing::reaches).collect::<Vec<_>>(), price, mosaic.frequency_hz(), first)
    };
    let (alone, both) = (made(&[&near]), made(&[&near, &far]));
    assert_eq!((alone.0, both.0), (vec![true], vec![true, false]));
    assert_eq!((alone.1, alone.2, alone.3), (both.1, both.2, both.3));
}

/// Flux densities are fitted with inverse variances, and never to what a range excludes.
#[test]
fn natural_weights_for_fits_keep_the_range() {
    let asked = Weighting { uv_range_m: Some([100.0, 400.0]), outer_taper_arcsec: Some(60.0), ..robust(0.0) };
    let (mut mosaic, block, _) = without_beams(&setting(), None, 0.004, &asked);
    let imaging = blocks(&mut mosaic);
    let lent = mosaic.naturally(blocks);
    let (mut within, mut outside) = (0, 0);
    for row in 0..block.rows() {
        let inside = (100.0..=400.0).contains(&block.uvw_m[row][0].hypot(block.uvw_m[row][1]));
        *(if inside { &mut within } else { &mut outside }) += 1;
        let at = block.index(row, 0)..block.index(row, 0) + block.channels * block.hands;
        for (got, own) in lent[0].weight[at.clone()].iter().zip(&block.weight[at]) {
            assert_eq!(*got, if inside { *own } else { 0.0 });
        }
    }
    assert!(within > 50 && outside > 50, "{within} and {outside} rows");
    assert_eq!(blocks(&mut mosaic)[0].weight, imaging[0].weight, "imaging weights are back");
    assert_ne!(imaging[0].weight, lent[0].weight);
    // weights anew do not multiply those there were
    mosaic.weigh(&asked, |_| ()).unwrap();
    assert_eq!(blocks(&mut mosaic)[0].weight, imaging[0].weight);
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
        ("scheme = \"uniform\"\ncell_wavelengths = 0", vec!["weighting.cell_wavelengths", "at least 0.5"]),
        (
            "scheme = \"uniform\"\ncell_wavelengths = 1e-6",
            vec![":14:", "weighting.cell_wavelengths", "at least 0.5"],
        ),
        ("cell_wavelengths = 50", vec!["weighting.cell_wavelengths", "natural weights do not go by", "\"robust\""]),
        ("density = \"pointing\"", vec!["weighting.density", "natural weights do not go by", "\"uniform\""]),
        ("scheme = \"natural\"\ndensity = \"all\"", vec![":14:", "weighting.density", "expected scheme ="]),
        ("scheme = \"uniform\"\nrobustness = 1", vec![":14:", "weighting.robustness", "without robust weights"]),
        ("uv_range_m = [300, 100]", vec!["weighting.uv_range_m", "distances in metres"]),
        ("uv_range_m = [-1, 100]", vec!["weighting.uv_range_m", "distances in metres"]),
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
        run("scheme = \"robust\"\nrobustness = -0.5\nuv_range_wavelengths = [0, 900]\nuv_range_m = [30, 500.5]"),
        "robust, robustness -0.5, only 0 to 900 wavelengths, only 30 to 500.5 m"
    );
    // one mistake, one complaint
    assert_eq!(run("scheme = \"brigs\"\nrobustness = 1\ndensity = \"all\"").lines().count(), 1);
    assert_eq!(run("scheme = \"uniform\"\ncell_wavelengths = 0.5"), "uniform, cells of 0.5 wavelengths");
}
