//! Weights against their formulas, by hand and by closed forms.

use super::*;
use crate::observation::{Hand, MemorySource, Mount, SPEED_OF_LIGHT, Schedule, Station};
use crate::sky::Direction;
use rand::{Rng, SeedableRng};
use std::collections::HashMap;

fn scene() -> (Observation, Block, ImageGeometry) {
    let centre = Direction::from_deg(40.0, 35.0);
    let mut place = rand_chacha::ChaCha8Rng::seed_from_u64(3);
    let stations = (0..6)
        .map(|i| Station {
            name: format!("S{i}"),
            position_m: [3.8e6, -1.4e5, 5.1e6].map(|at: f64| at + 900.0 * place.random::<f64>()),
            mount: Mount::AltAzimuth,
            diameter_m: None,
            feed_angle: 0.0,
        })
        .collect();
    let schedule = Schedule {
        array_name: "TEST".into(),
        stations,
        mjd_utc: (0..6).map(|t| 59_000.3 + 0.02 * f64::from(t)).collect(),
        frequencies_hz: vec![1.3e9, 1.32e9],
        width_hz: 1e6,
        hands: vec![Hand::XX, Hand::YY],
        weight: 1.0,
    };
    let (observation, mut block) = schedule.pointing("p", centre);
    let mut rng = rand_chacha::ChaCha8Rng::seed_from_u64(4);
    block
        .weight
        .iter_mut()
        .for_each(|w| *w = if rng.random::<f32>() < 0.1 { 0.0 } else { 0.5 + rng.random::<f32>() });
    (observation, block, ImageGeometry::new(centre, 64, 64, 1e-3).unwrap())
}

/// Weights as they were and as they are; what they cost.
fn weights(weighting: Weighting) -> (Block, Block, Price, Weigher) {
    let (observation, block, geometry) = scene();
    let (weighted, price, _, weigher) = weighed(weighting, observation, &block, &geometry);
    (block, weighted, price, weigher)
}

fn weighed(
    weighting: Weighting,
    observation: Observation,
    block: &Block,
    geometry: &ImageGeometry,
) -> (Block, Price, Share, Weigher) {
    let mut weighers = vec![Weigher::new(weighting, &observation, geometry)];
    let mut source = Weighted::new(Box::new(MemorySource::new(observation, vec![block.clone()])), 1.0);
    let (price, shares) =
        weigh(&mut weighers, &mut [&mut source as &mut dyn BlockSource], most_cells(geometry), |_| ()).unwrap();
    source.weigh_by(weighers.pop());
    source.rewind().unwrap();
    let weighted = source.next_block().unwrap().unwrap();
    (weighted, price, shares[0], source.weigher().unwrap().clone())
}

/// Two hands of half the weight at each (u, v, weight), metres, which are wavelengths at `hz` = the speed of light.
fn by_hand(samples: &[(f64, f64, f32)], frequencies_hz: Vec<f64>) -> (Observation, Block, ImageGeometry) {
    let (mut observation, block, geometry) = scene();
    let channels = frequencies_hz.len();
    observation.widths_hz = vec![1e6; channels];
    observation.frequencies_hz = frequencies_hz;
    let mut made = Block { channels, hands: 2, ..Block::default() };
    for &(u, v, weight) in samples {
        made.mjd_utc.push(block.mjd_utc[0]);
        made.uvw_m.push([u, v, 0.0]);
        made.first.push(0);
        made.second.push(1);
        made.weight.extend(vec![0.5 * weight; 2 * channels]);
    }
    made.data = vec![Default::default(); made.weight.len()];
    (observation, made, geometry)
}

/// ω/w of every sample of [`by_hand`], its first channel.
fn factors(samples: &[(f64, f64, f32)], weighting: Weighting) -> (Vec<f64>, Price, Share) {
    let (observation, block, geometry) = by_hand(samples, vec![SPEED_OF_LIGHT]);
    let (weighted, price, share, _) = weighed(weighting, observation, &block, &geometry);
    let ratio = |(after, before): (&f32, &f32)| f64::from(*after) / f64::from(*before);
    (weighted.weight.iter().zip(&block.weight).step_by(2).map(ratio).collect(), price, share)
}

#[track_caller]
fn close(got: &[f64], want: &[f64], bound: f64) {
    assert_eq!(got.len(), want.len());
    assert!(got.iter().zip(want).all(|(g, w)| (g - w).abs() <= bound * w.abs()), "{got:?} against {want:?}");
}

/// Cells of 100 wavelengths: three visibilities in the pair ±(1, 3), one of them in the opposite cell, D = 1 + 2 + 3; one
/// in ±(4, −2), D = 4; one in that of the centre, where it counts twice, D = 10.
const KNOWN: [(f64, f64, f32); 5] =
    [(120.0, 310.0, 1.0), (80.0, 290.0, 2.0), (-95.0, -305.0, 3.0), (400.0, -200.0, 4.0), (10.0, 20.0, 5.0)];

fn in_cells(scheme: Scheme) -> Weighting {
    Weighting { scheme, cell_wavelengths: Some(100.0), ..Weighting::default() }
}

/// By hand: Σ w/D = 1 + 1 + 1/2, Σ w = 15, so that ω/w = 6/D; Σ ω²/w = 6 · 1 + 4 · 2.25 + 5 · 0.36 = 16.8, a noise of √1.12.
/// Bound: rounding to single precision.
#[test]
fn uniform_weights_in_known_cells() {
    let (got, price, share) = factors(&KNOWN, in_cells(Scheme::Uniform));
    close(&got, &[1.0, 1.0, 1.0, 1.5, 0.6], 1e-6);
    close(&[price.relative_noise()], &[1.12f64.sqrt()], 1e-12);
    assert_eq!((share.used, share.excluded), (10, 0), "two hands each");
    close(&[share.weight, share.weight_hz], &[15.0, 15.0 * SPEED_OF_LIGHT], 1e-12);
}

/// Briggs's f² by hand, both halves of the plane: Σ D² = 2 · 36 + 2 · 16 + 100 = 204, 2Σw = 30, f² = 25 · 30/204 at R = 0.
#[test]
fn robust_weights_in_known_cells() {
    for robustness in [0.0, 1.0, -0.5] {
        let (got, ..) = factors(&KNOWN, Weighting { robustness, ..in_cells(Scheme::Robust) });
        let f2 = 25.0 * 10f64.powf(-2.0 * robustness) * 30.0 / 204.0;
        let want: Vec<f64> = [6.0, 6.0, 6.0, 4.0, 10.0].map(|d| 1.0 / (1.0 + f2 * d)).into();
        let scale = 15.0 / want.iter().zip(KNOWN).map(|(f, (.., w))| f * f64::from(w)).sum::<f64>();
        close(&got, &want.iter().map(|f| f * scale).collect::<Vec<f64>>(), 1e-6);
    }
    // away from the cell of the centre that is the ratio of Briggs's sums over one half: Σ W² = 36 + 16, Σ w = 10
    let (got, ..) = factors(&KNOWN[..4], in_cells(Scheme::Robust));
    let f2 = 25.0 * 10.0 / 52.0;
    close(&[got[3] / got[0]], &[(1.0 + 6.0 * f2) / (1.0 + 4.0 * f2)], 1e-6);
}

/// What a range or the cosine excludes has no part in D or f²: the rest is weighted as if it were not there.
#[test]
fn what_is_excluded_does_not_count_in_the_density() {
    let far = (2000.0, 0.0, 500.0);
    let within = [KNOWN[1], KNOWN[3], KNOWN[4]];
    // 300.8, 447.2 and 22.4 wavelengths; the others of the first cell lie at 332.4 and 319.5
    let without: Vec<(f64, f64, f32)> = KNOWN.into_iter().filter(|at| within.contains(at)).collect();
    for scheme in [Scheme::Uniform, Scheme::Robust] {
        let (want, ..) = factors(&without, in_cells(scheme));
        let range = Weighting { uv_range_wavelengths: Some([0.0, 1000.0]), ..in_cells(scheme) };
        let cosine = Weighting { outer_cosine_wavelengths: Some([1000.0, 1500.0]), ..in_cells(scheme) };
        let metres = Weighting { uv_range_m: Some([0.0, 1000.0]), ..in_cells(scheme) };
        let mut samples = without.clone();
        samples.push(far);
        for asked in [range, cosine, metres] {
            let (got, price, share) = factors(&samples, asked);
            assert_eq!(got[3], 0.0);
            assert_eq!((share.used, share.excluded), (6, 2));
            // all are scaled by Σw, that of the excluded among them
            let ratios = |f: &[f64]| [f[1] / f[0], f[2] / f[0]];
            close(&ratios(&got), &ratios(&want), 1e-6);
            assert!(price.relative_noise() > 5.0, "excluding most of the weight costs: {price:?}");
        }
    }
    // a range that parts a cell: only 300.8 wavelengths of the first, D = 2 and not 6
    let (got, _, share) =
        factors(&KNOWN[..4], Weighting { uv_range_m: Some([0.0, 305.0]), ..in_cells(Scheme::Uniform) });
    assert_eq!((share.used, share.excluded), (2, 6));
    close(&got, &[0.0, 5.0, 0.0, 0.0], 1e-6);
}

/// Metres are metres at every frequency, wavelengths are not; both may be asked for, and both hold.
#[test]
fn ranges_in_metres_and_in_wavelengths() {
    let samples = [(90.0, 0.0, 1.0), (0.0, 110.0, 1.0), (-150.0, 150.0, 1.0)];
    let used = |weighting: Weighting| -> Vec<bool> {
        let (observation, block, geometry) = by_hand(&samples, vec![SPEED_OF_LIGHT, 2.0 * SPEED_OF_LIGHT]);
        let (weighted, ..) = weighed(weighting, observation, &block, &geometry);
        weighted.weight.iter().step_by(2).map(|&w| w > 0.0).collect()
    };
    let natural = Weighting::default();
    let metres = Weighting { uv_range_m: Some([100.0, 200.0]), ..natural };
    assert_eq!(used(metres), [false, false, true, true, false, false]);
    let wavelengths = Weighting { uv_range_wavelengths: Some([100.0, 200.0]), ..natural };
    assert_eq!(used(wavelengths), [false, true, true, false, false, false]);
    let both = Weighting { uv_range_m: metres.uv_range_m, ..wavelengths };
    assert_eq!(used(both), [false, false, true, false, false, false]);
}

/// Cells far smaller than any that a run file may ask for: positions beyond an i32 and beyond an i64 neither panic nor
/// meet in one cell by overflow. Every visibility has a cell of its own, where uniform weights are all alike.
#[test]
fn tiny_cells_do_not_overflow() {
    for cell in [1e-6, 1e-9, 1e-12] {
        let asked = Weighting { cell_wavelengths: Some(cell), ..in_cells(Scheme::Uniform) };
        let (got, ..) = factors(&KNOWN, asked);
        // ω = 1 for each but that none lies at the centre: Σω = 5, scaled to 15
        close(&got, &[3.0, 1.5, 1.0, 0.75, 0.6], 1e-6);
    }
    let (got, ..) = factors(&KNOWN, Weighting { cell_wavelengths: Some(1e-300), ..in_cells(Scheme::Robust) });
    assert!(got.iter().all(|f| f.is_finite() && *f > 0.0), "{got:?}");
}

#[test]
fn a_density_has_bounded_memory() {
    let (observation, block, geometry) = by_hand(&KNOWN, vec![SPEED_OF_LIGHT]);
    let fill = |density, most| {
        let asked = Weighting { density, ..in_cells(Scheme::Uniform) };
        let mut sources: Vec<MemorySource> = vec![MemorySource::new(observation.clone(), vec![block.clone()]); 2];
        let mut weighers = vec![Weigher::new(asked, &observation, &geometry); 2];
        let mut lent: Vec<&mut dyn BlockSource> =
            sources.iter_mut().map(|source| source as &mut dyn BlockSource).collect();
        weigh(&mut weighers, &mut lent, most, |_| ()).map(|_| ()).map_err(|error| error.to_string())
    };
    // three pairs of cells
    assert_eq!(fill(DensityOf::All, 3), Ok(()));
    assert_eq!(fill(DensityOf::Pointing, 6), Ok(()));
    let said = fill(DensityOf::All, 2).unwrap_err();
    assert!(said.contains("weighting.cell_wavelengths: cells of 100 × 100 wavelengths"), "{said}");
    assert!(said.contains("more than 2") && said.ends_with("take larger cells"), "{said}");
    let said = fill(DensityOf::Pointing, 5).unwrap_err();
    assert!(said.ends_with("take larger cells, or density = \"all\""), "{said}");
    assert!(most_cells(&geometry) == MOST_CELLS && MOST_CELLS == 29_360_128);
}

/// Where a scale takes weights out of single precision reading fails: neither infinite sums nor dropped visibilities.
#[test]
fn scales_that_weights_do_not_bear_are_refused() {
    let read = |weight: f32, scale: f64| {
        let (observation, block, _) = by_hand(&[(1.0, 2.0, 2.0 * weight), (3.0, 4.0, 0.0)], vec![SPEED_OF_LIGHT]);
        let mut source = Weighted::new(Box::new(MemorySource::new(observation, vec![block])), scale);
        source.next_block().map(|block| block.unwrap().weight).map_err(|error| error.to_string())
    };
    assert_eq!(read(3.0, 4.0), Ok(vec![12.0, 12.0, 0.0, 0.0]));
    assert_eq!(read(3.0, 1e12), Ok(vec![3e12, 3e12, 0.0, 0.0]));
    for (weight, scale) in [(1e30, 1e12), (1e-30, 1e-12), (1.0, 1e39), (1.0, 1e-50)] {
        let said = read(weight, scale).unwrap_err();
        assert!(said.contains("times weight_scale") && said.contains("another weight_scale"), "{said}");
    }
}

/// Largest relative difference of weights from those of another scheme.
fn difference(a: &Block, b: &Block) -> f64 {
    let pairs = a.weight.iter().zip(&b.weight).filter(|(_, b)| **b > 0.0);
    pairs.map(|(a, b)| (f64::from(*a) / f64::from(*b) - 1.0).abs()).fold(0.0, f64::max)
}

/// R = 5 and −5 change ω by f² D = 25 · 10^∓10 D/⟨D⟩ against natural and uniform. Bound: 1e-5, with rounding to f32. The usual
/// ends R = ±2 are 2.5e-3 D/⟨D⟩ from natural and 4e-6 ⟨D⟩/D from uniform: bounds for D within a tenth and ten of its mean.
#[test]
fn robust_ends_are_natural_and_uniform() {
    let robust = |robustness| weights(Weighting { scheme: Scheme::Robust, robustness, ..Weighting::default() }).1;
    let (natural, ..) = weights(Weighting::default());
    let (_, uniform, ..) = weights(Weighting { scheme: Scheme::Uniform, ..Weighting::default() });
    for (end, bounds) in [(5.0, [1e-5, 1e-5]), (2.0, [2.5e-2, 4e-5])] {
        let (high, low) = (difference(&robust(end), &natural), difference(&robust(-end), &uniform));
        println!("R = ±{end}: at most {high:.1e} from natural, {low:.1e} from uniform");
        assert!(high <= bounds[0] && low <= bounds[1], "R = ±{end}: {high:e} from natural, {low:e} from uniform");
    }
    // f² = 1
    let middle = robust(5f64.log10());
    assert!(difference(&middle, &natural) > 0.1 && difference(&middle, &uniform) > 0.1);
}

/// Uniform weights: every filled cell has the same sum of ω. By hand over the cells.
#[test]
fn uniform_cells_count_alike() {
    let (_, weighted, price, weigher) = weights(Weighting { scheme: Scheme::Uniform, ..Weighting::default() });
    let mut cells: HashMap<(i64, i64), f64> = HashMap::new();
    weigher.each(&weighted, |Sample { place, weight, .. }| {
        let [x, y] = [place.u / weigher.cell.0, place.v / weigher.cell.1].map(|at| at.round() as i64);
        *cells.entry((x, y)).or_default() += weight;
        *cells.entry((-x, -y)).or_default() += weight;
    });
    let (low, high) = cells.values().fold((f64::INFINITY, 0.0f64), |(l, h), &d| (l.min(d), h.max(d)));
    assert!(cells.len() > 50 && high / low - 1.0 < 1e-5, "{} cells, {low} to {high}", cells.len());
    assert!(price.relative_noise() > 1.05);
}

/// The closed form of the price, term by term in double precision from the weights themselves.
#[test]
fn the_price_is_its_closed_form_and_the_sum_is_kept() {
    for scheme in [Scheme::Natural, Scheme::Uniform, Scheme::Robust] {
        let asked = Weighting { scheme, outer_taper_arcsec: Some(30.0), ..Weighting::default() };
        let (block, weighted, price, _) = weights(asked);
        let (mut w, mut o, mut s) = (0.0, 0.0, 0.0);
        for (&natural, &imaging) in block.weight.iter().zip(&weighted.weight) {
            let (natural, imaging) = (f64::from(natural), f64::from(imaging));
            assert_eq!(natural == 0.0, imaging == 0.0, "what is not used stays so");
            if natural > 0.0 {
                w += natural;
                o += imaging;
                s += imaging * imaging / natural;
            }
        }
        assert!((o / w - 1.0).abs() < 1e-5);
        assert!((price.relative_noise() / ((s * w).sqrt() / o) - 1.0).abs() < 1e-5);
    }
}

#[test]
fn tapers_and_ranges_go_by_their_formulas() {
    let taper = |w: Weighting, distance: f64| {
        let (observation, _, geometry) = scene();
        let (u, v) = (0.6 * distance, 0.8 * distance);
        Weigher::new(w, &observation, &geometry).factor(Place { u, v, length_m: f64::NAN })
    };
    let natural = Weighting::default();
    let inner = Weighting { inner_taper_wavelengths: Some(100.0), ..natural };
    assert!((taper(inner, 100.0) - 0.393_469_340_287_366_6).abs() < 1e-12, "1 − exp(−1/2)");
    let cosine = Weighting { outer_cosine_wavelengths: Some([100.0, 300.0]), ..natural };
    assert_eq!([taper(cosine, 50.0), taper(cosine, 400.0)], [1.0, 0.0]);
    assert!((taper(cosine, 200.0) - 0.5).abs() < 1e-12 && (taper(cosine, 150.0) - 0.853_553_39).abs() < 1e-8);
    let range = Weighting { uv_range_wavelengths: Some([100.0, 300.0]), ..natural };
    assert_eq!([99.0, 101.0, 299.0, 301.0].map(|d| taper(range, d)), [0.0, 1.0, 1.0, 0.0]);
    // a Gaussian of width θ is half in the image where its transform is exp(−(π θ ρ)²/(4 ln 2)): by quadrature
    let width = 20f64.to_radians() / 3600.0;
    let (mut sum, mut norm) = (0.0, 0.0);
    let distance = 7000.0;
    for i in -4000..=4000 {
        let x = f64::from(i) * width / 500.0;
        let value = (-4.0 * LN_2 * (x / width).powi(2)).exp();
        sum += value * (2.0 * PI * x * distance).cos();
        norm += value;
    }
    let outer = Weighting { outer_taper_arcsec: Some(20.0), ..natural };
    assert!((taper(outer, distance) - sum / norm).abs() < 1e-12);
}
