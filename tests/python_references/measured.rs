//! Fits and source tables against scipy, numpy and astropy.

use crate::compare;
use evensky::beam::{Gaussian, StationBeam, StationBeams};
use evensky::fits::Header;
use evensky::imaging::beam_fit::FittedBeam;
use evensky::measure::{
    Correlation, Ellipse, Errors, FindOptions, JointOptions, Method, PixelGaussian, Plate, Reading, Rise, Shapes,
    Size, Source, find_sources, fit_peaks, joint_fluxes, noise_of, peaks,
};
use evensky::observation::{Block, Hand, MemorySource, Mount, Schedule, Site, Station};
use evensky::report::{
    SOURCE_COLUMNS, write_covariance, write_source_csv, write_source_fits, write_source_votable,
};
use evensky::response::{Exact, UnitSource};
use evensky::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use num_complex::Complex32;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use serde_json::{Value, json};
use std::sync::Arc;

const BEAM: Ellipse = Ellipse { major: 6.0, minor: 4.5, position_angle: 0.4 };

/// Single sources, blends and resolved ones in noise: the same pixels, the same model, fitted by both.
#[test]
fn gaussian_fits_agree_with_scipy() {
    let mut random = ChaCha8Rng::seed_from_u64(51);
    let cases: Vec<Value> = (0..40)
        .map(|case| {
            let mut source = |x: f64, y: f64| {
                let grown = if case % 3 == 2 { random.random_range(1.1..1.3) } else { 1.0 };
                PixelGaussian {
                    peak: random.random_range(1.0..4.0),
                    centre: [x + random.random_range(-0.5..0.5), y + random.random_range(-0.5..0.5)],
                    covariance: BEAM.scaled(grown).covariance(),
                }
            };
            let mut sky = vec![source(20.0, 20.0)];
            if case % 2 == 1 {
                sky.push(source(29.0, 25.0));
            }
            let image = Array2::from_shape_fn((48, 48), |(y, x)| {
                let noise: f64 = StandardNormal.sample(&mut random);
                sky.iter().map(|g| g.value_and_slopes(x as f64, y as f64).0).sum::<f64>() + 0.05 * noise
            });
            let noise = Array2::from_elem(image.dim(), 0.05);
            // islands only: the pixels fitted are then the beam's core and the island, which the script is told
            let found = peaks((&image / &noise).view(), 6.0, 15.0, Rise { noise: 4.0, fraction: 0.02 });
            let correlation = Correlation::White;
            let plate = Plate { image: image.view(), noise: noise.view(), beam: BEAM, correlation: &correlation };
            let shapes = if case % 3 == 0 { Shapes::Point } else { Shapes::Gaussian };
            let fitted = fit_peaks(&plate, &found, shapes);
            assert_eq!(fitted.len(), sky.len(), "case {case}");
            assert!(fitted.iter().all(|one| !one.remarks.unfitted && one.together == sky.len()));
            json!({
                "image": image.rows().into_iter().map(|row| row.to_vec()).collect::<Vec<_>>(),
                "noise": 0.05, "beam": BEAM.covariance(), "core": evensky::measure::CORE,
                "beam_widths": [BEAM.major, BEAM.minor],
                "free": shapes == Shapes::Gaussian,
                "peaks": found.iter().map(|p| p.pixel).collect::<Vec<_>>(),
                "islands": found.iter().map(|p| p.pixels.clone()).collect::<Vec<_>>(),
                "fitted": fitted.iter().map(|one| json!({
                    "peak": one.gaussian.peak, "centre": one.gaussian.centre,
                    "covariance": one.gaussian.covariance, "flux": one.flux.0,
                    "variances": one.covariance.diagonal().iter().copied().collect::<Vec<_>>(),
                })).collect::<Vec<_>>(),
            })
        })
        .collect();
    compare("gaussian_fits.py", &json!({ "cases": cases }));
}

/// A pointing of dishes with round Gaussian beams, its visibilities noise plus sources; scipy builds the matrix itself.
#[test]
fn visibility_fits_agree_with_scipy_and_numpy() {
    let mut random = ChaCha8Rng::seed_from_u64(52);
    let site = Site::new(-0.3, 0.7, 0.0).unwrap();
    let stations: Vec<Station> = (0..7)
        .map(|i| {
            let mut draw = || random.random_range(-400.0..400.0);
            let place = [draw(), draw(), 0.02 * draw()];
            Station {
                name: format!("S{i}"),
                position_m: site.to_earth(place),
                mount: Mount::Equatorial,
                diameter_m: None,
                feed_angle: 0.0,
            }
        })
        .collect();
    let aim = Direction::from_deg(77.0, 33.0);
    let schedule = Schedule {
        array_name: "TEST".into(),
        stations,
        mjd_utc: (0..5).map(|t| 59_500.1 + 0.03 * f64::from(t)).collect(),
        frequencies_hz: vec![1.30e9, 1.36e9, 1.43e9],
        width_hz: 2e7,
        hands: vec![Hand::XX, Hand::YY],
        weight: 1.0,
    };
    let (observation, mut block): (_, Block) = schedule.pointing("P", aim);
    for (value, weight) in block.data.iter_mut().zip(&mut block.weight) {
        *value = Complex32::new(random.random_range(-1.0..1.0), random.random_range(-1.0..1.0));
        *weight = if random.random_range(0.0..1.0) < 0.1 { 0.0 } else { random.random_range(0.5..4.0) };
    }
    let half_power: Vec<f64> = (0..7).map(|i| 0.025 + 0.002 * f64::from(i)).collect();
    let beams: Vec<StationBeam> = half_power
        .iter()
        .map(|&width| StationBeam {
            pattern: Arc::new(Gaussian::new(width, 1.36e9, 1.0).unwrap()),
            offset: [0.0; 2],
            beam_name: "dish".into(),
        })
        .collect();
    let beams = StationBeams::new(&observation, beams, None);
    let geometry = ImageGeometry::new(aim, 128, 128, 1e-4).unwrap();
    let exact = Exact::new(&observation, beams, geometry);
    let sources: Vec<UnitSource> = (0..6)
        .map(|i| {
            let (l, m) = (random.random_range(-0.012..0.012), random.random_range(-0.012..0.012));
            let direction = geometry.frame().direction(l, m).unwrap();
            UnitSource::point(direction, 1.36e9, -0.3 * f64::from(i))
        })
        .collect();
    let mut source = MemorySource::new(observation.clone(), vec![block.clone()]);
    let options = JointOptions { index_error: 0.0, wander: None, frame: geometry.frame() };
    let mut readings = [Reading { exact: &exact, source: &mut source, imager: None }];
    let fluxes = joint_fluxes(&mut readings, &sources, options, |_| {}).unwrap();
    let rows: Vec<Value> = (0..block.rows())
        .map(|row| {
            json!({
                "uvw_m": block.uvw_m[row], "first": block.first[row], "second": block.second[row],
                "data": (0..6).map(|k| { let v = block.data[row * 6 + k]; [v.re, v.im] }).collect::<Vec<_>>(),
                "weight": &block.weight[row * 6..row * 6 + 6],
            })
        })
        .collect();
    compare(
        "visibility_fits.py",
        &json!({
            "frequencies_hz": observation.frequencies_hz, "half_power": half_power, "at_hz": 1.36e9, "rows": rows,
            "sources": sources.iter().map(|s| {
                let [l, m, _] = geometry.frame().lmn(s.direction);
                json!({ "l": l, "m": m, "index": s.spectral_index })
            }).collect::<Vec<_>>(),
            "flux": fluxes.flux.iter().map(|f| f.0).collect::<Vec<_>>(),
            "covariance": (0..6).map(|i| (0..6).map(|j| fluxes.covariance[(i, j)]).collect::<Vec<_>>()).collect::<Vec<_>>(),
            "misfit": fluxes.reduced_misfit,
        }),
    );
}

/// CSV, VOTable and FITS table of hostile sources, read by csv and astropy.
#[test]
fn source_tables_open_in_astropy() {
    let folder = tempfile::tempdir().unwrap();
    let at = |name: &str, ra: f64, dec: f64| Source {
        flux_jy: Some(0.123_456_789_012),
        flux_error_jy: Some(1e-5),
        response: Some(0.75),
        noise_jy: Some(3e-5),
        pointings: 3,
        reference_hz: Some(1.36e9),
        ..Source::at(name, Direction::from_deg(ra, dec), -0.7)
    };
    let size = Ellipse { major: 2e-4, minor: 1e-4, position_angle: 0.5 };
    let full = Source {
        place_error: Some([1e-6, 2e-6]),
        peak_jy: Some(0.1),
        peak_error_jy: Some(2e-5),
        size: Some(Size { ellipse: size, error: size.scaled(0.01) }),
        deconvolved: Some(size.scaled(0.5)),
        spectral_index_error: Some(0.05),
        method: Method::ImageGaussian,
        remarks: vec!["one, \"two\"".to_owned(), "three < 4 & 5".to_owned()],
        ..at("<EV> & \"J\", ü", 359.999_999_9, -89.5)
    };
    let nothing = Source {
        flux_jy: None,
        flux_error_jy: None,
        noise_jy: None,
        response: None,
        reference_hz: None,
        pointings: 0,
        ..at("nothing", 0.0, 0.0)
    };
    let sources = vec![full, at("EV J1", 10.0, 20.0), nothing];
    let path = |name: &str| folder.path().join(name);
    write_source_csv(&path("sources.csv"), &sources).unwrap();
    write_source_votable(&path("sources.vot"), &sources, "a < b & c").unwrap();
    write_source_fits(&path("sources.fits"), &sources, &Header::new()).unwrap();
    write_source_csv(&path("none.csv"), &[]).unwrap();
    write_source_votable(&path("none.vot"), &[], "none").unwrap();
    write_source_fits(&path("none.fits"), &[], &Header::new()).unwrap();
    let names: Vec<String> = sources.iter().map(|s| s.name.clone()).collect();
    let covariance =
        nalgebra::DMatrix::from_fn(
            3,
            3,
            |i, j| if i == 2 || j == 2 { f64::NAN } else { 0.1 + i as f64 + j as f64 },
        );
    write_covariance(&path("covariance.csv"), &names, &covariance).unwrap();
    let columns: Vec<Value> = SOURCE_COLUMNS.iter().map(|c| json!({ "name": c.name, "unit": c.unit })).collect();
    compare("source_tables.py", &json!({ "folder": folder.path(), "columns": columns }));
}

/// A source on the sky: position, errors and sizes of `find_sources` through astropy's projection, far from the centre.
#[test]
fn found_places_agree_with_astropy() {
    let centre = Direction::from_deg(210.0, 71.0);
    let geometry = ImageGeometry::new(centre, 300, 260, 4e-5).unwrap();
    let beam = FittedBeam {
        major: BEAM.major * geometry.pixel,
        minor: BEAM.minor * geometry.pixel,
        position_angle: BEAM.position_angle,
        largest_misfit: 0.0,
        pixels: 20,
    };
    let places = [(40.3, 50.2), (250.7, 200.1), (149.5, 131.0)];
    let image = Array2::from_shape_fn((260, 300), |(y, x)| {
        places
            .iter()
            .map(|&(cx, cy)| {
                let g = PixelGaussian { peak: 1.0, centre: [cx, cy], covariance: BEAM.covariance() };
                g.value_and_slopes(x as f64, y as f64).0
            })
            .sum::<f64>()
    });
    let weight = Array2::from_elem(image.dim(), 1e6);
    let noise = noise_of(weight.view());
    assert!((noise[[0, 0]] - 1e-3).abs() < 1e-12);
    let options = FindOptions {
        find_above_noise: 5.0,
        island_above_noise: 3.0,
        shapes: Shapes::Auto,
        errors: Errors::Covariance,
        spectral_index: -0.7,
    };
    let found = find_sources(image.view(), weight.view(), &geometry, &beam, &Correlation::Gaussian(BEAM), &options);
    assert_eq!(found.len(), 3);
    let (ra, dec) = centre.to_deg();
    compare(
        "found_places.py",
        &json!({
            "ra_deg": ra, "dec_deg": dec, "pixel": geometry.pixel, "reference": geometry.reference(), "pixels": places,
            "found": found.iter().map(|s| {
                let (ra, dec) = s.direction.to_deg();
                let e = s.place_error.unwrap();
                json!({ "ra_deg": ra, "dec_deg": dec, "flux": s.flux_jy, "east": e[0], "north": e[1], "name": s.name })
            }).collect::<Vec<_>>(),
        }),
    );
}
