//! What only the inside can show: the bound of every kernel, and the adjoint identity before rounding to f32.

use super::family::{Family, Member};
use super::*;
use crate::beam::{Airy, Gaussian, Pattern, StationBeam};
use crate::observation::{Hand, MemorySource, Mount, Schedule, Station};
use crate::sky::Direction;
use num_complex::{Complex32, Complex64};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::sync::Arc;

/// Six stations of two classes with pointing offsets, alt-azimuth mounts, three hours, four channels of an 8 % band.
pub(super) fn scene(seed: u64) -> (Observation, Block, StationBeams) {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let stations = (0..6)
        .map(|i| Station {
            name: format!("S{i}"),
            position_m: [
                3.8e6 + 400.0 * rng.random::<f64>(),
                -1.4e5 + 900.0 * rng.random::<f64>(),
                5.1e6 + 700.0 * rng.random::<f64>(),
            ],
            mount: if i == 5 { Mount::Equatorial } else { Mount::AltAzimuth },
            diameter_m: None,
            feed_angle: 0.0,
        })
        .collect();
    let schedule = Schedule {
        array_name: "TEST".into(),
        stations,
        mjd_utc: (0..5).map(|t| 59_000.3 + 0.03 * f64::from(t)).collect(),
        frequencies_hz: (0..4).map(|c| 1.3e9 + 2.5e7 * f64::from(c)).collect(),
        width_hz: 1e6,
        hands: vec![Hand::XX, Hand::YY],
        weight: 1.0,
    };
    let (observation, mut block) = schedule.pointing("p", Direction::from_deg(40.0, 35.0));
    for (data, weight) in block.data.iter_mut().zip(&mut block.weight) {
        *data = Complex32::new(rng.random::<f32>() - 0.5, rng.random::<f32>() - 0.5);
        *weight = 0.5 + rng.random::<f32>();
    }
    let patterns: [Arc<dyn Pattern>; 2] = [
        Arc::new(Airy::new(13.0, 1.3).unwrap()),
        Arc::new(Gaussian::new(1.6f64.to_radians(), 1.36e9, 1.05).unwrap()),
    ];
    let beams = (0..6)
        .map(|s| StationBeam {
            pattern: patterns[s % 2].clone(),
            offset: std::array::from_fn(|_| 0.001 * (rng.random::<f64>() - 0.5)),
            beam_name: "b".into(),
        })
        .collect();
    let beams = StationBeams::new(&observation, beams, None);
    (observation, block, beams)
}

/// Every member of every partition, at three offsets in w, on every pixel of the patch: the true difference between its
/// screen and the terms that stand for it. Bounds: `KernelReport::bound` for each in the root mean square over the field,
/// a third of it in the root mean square of all (the promise of `Terms::build`; 10 % more for the pixels' spread, since
/// the build measures on Chebyshev nodes and random directions).
#[test]
fn every_kernel_keeps_its_bound_on_the_whole_field() {
    for tolerance in [1e-2, 1e-4, 1e-6] {
        let (observation, block, beams) = scene(3);
        let geometry = ImageGeometry::new(Direction::from_deg(40.3, 34.8), 40, 36, 0.05 / 40.0).unwrap();
        let mut source = MemorySource::new(observation.clone(), vec![block.clone()]);
        let options = Options { force_double: true, ..Options::default() };
        let gridded = Gridded::new(&beams, geometry, tolerance, &mut source, options).unwrap();
        let Some(Precision::Double(engine)) = &gridded.engine else { panic!("double precision was asked for") };
        let plan = engine.plan();
        let mut times: Vec<f64> = block.mjd_utc.clone();
        times.dedup();
        let angles: Vec<Vec<f64>> = times.iter().map(|&t| beams.angles_at(t)).collect();
        let mut members = 0;
        for partition in &plan.partitions {
            let half_w = plan.half_w;
            let family = Family {
                beams: &beams,
                patch: &plan.patch,
                pairs: partition.pairs.clone(),
                angles: &angles,
                frequencies_hz: observation.frequencies_hz[partition.channels.clone()].to_vec(),
                feeds: vec![0],
                half_w,
                middle_bend: plan.middle_bend,
                power: false,
            };
            let mut all = Vec::new();
            for &pair in &family.pairs {
                for time in 0..times.len() {
                    for &hz in &family.frequencies_hz {
                        for part in [-1.0, 0.0, 0.77] {
                            all.push(Member { pair, time, hz, feed: 0, dw: part * half_w });
                        }
                    }
                }
            }
            let ((left, _), (low, _)) = family.span();
            let (nx, ny) = plan.patch.size;
            let pixels: Vec<_> =
                (0..nx * ny).map(|i| family.point(left + (i % nx) as f64, low + (i / nx) as f64)).collect();
            let differences = partition.kernel.differences(&family, &all, &pixels);
            let worst =
                differences.iter().copied().fold(0.0, |a: f64, b| if b.is_nan() { f64::NAN } else { a.max(b) });
            let mean = (differences.iter().map(|d| d * d).sum::<f64>() / differences.len() as f64).sqrt();
            let bound = gridded.report().bound;
            println!(
                "tolerance {tolerance:.0e}: {} members, worst {worst:.1e}, all {mean:.1e}, bound {bound:.1e}",
                all.len()
            );
            assert!(worst <= bound, "a member differs by {worst:e}, bound {bound:e}");
            assert!(mean <= 1.1 * bound / 3.0, "all members differ by {mean:e}, bound {:e}", bound / 3.0);
            members += all.len() / 3;
        }
        assert_eq!(members, gridded.report().members, "the report counts every member");
    }
}

/// ⟨A x, y⟩ = ⟨x, A* y⟩ in double precision, prediction not rounded to f32. Bound: 1e-11 of the norms' product (sums of
/// some thousand terms of f64, 1e-16 each, with room for the transforms).
#[test]
fn adjoint_identity_in_double_precision() {
    for seed in 0..4 {
        let (observation, block, beams) = scene(seed);
        let geometry = ImageGeometry::new(Direction::from_deg(40.2, 35.1), 30, 42, 0.04 / 40.0).unwrap();
        let mut source = MemorySource::new(observation, vec![block.clone()]);
        let options = Options { force_double: true, ..Options::default() };
        let gridded = Gridded::new(&beams, geometry, 1e-3, &mut source, options).unwrap();
        let Some(Precision::Double(engine)) = &gridded.engine else { panic!("double precision was asked for") };
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let sky: Vec<Component> = (0..25)
            .map(|_| {
                let (x, y) = (rng.random_range(0..30), rng.random_range(0..42));
                Component {
                    name: "c".into(),
                    direction: geometry.direction_of(f64::from(x), f64::from(y)).unwrap(),
                    flux_jy: rng.random::<f64>() - 0.3,
                    reference_hz: 1e9,
                    spectral_index: 0.0,
                }
            })
            .collect();
        let predicted = engine.predicted(&geometry, &sky, std::slice::from_ref(&block)).unwrap();
        let (mut left, mut of_x, mut of_y) = (0.0, 0.0, 0.0);
        for (at, [re, im]) in predicted[0].iter().enumerate() {
            let a = Complex64::new(*re, *im);
            for hand in 0..2 {
                let (y, w) = (block.data[2 * at + hand], f64::from(block.weight[2 * at + hand]));
                let y = Complex64::new(y.re.into(), y.im.into());
                left += w * (a.conj() * y).re;
                of_x += w * a.norm_sqr();
                of_y += w * y.norm_sqr();
            }
        }
        let mut sums = Sums::zero(&geometry);
        gridded.adjoint(&mut source, &mut sums).unwrap();
        let right: f64 = sky
            .iter()
            .map(|c| {
                let (x, y) = geometry.pixel_of(c.direction).unwrap();
                c.flux_jy * sums.numerator[[y.round() as usize, x.round() as usize]]
            })
            .sum();
        let defect = (left - right).abs() / (of_x.sqrt() * of_y.sqrt());
        println!("seed {seed}: defect {defect:.1e}");
        assert!(defect <= 1e-11, "seed {seed}: {defect:e}");
    }
}
