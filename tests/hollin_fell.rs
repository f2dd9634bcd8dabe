//! The independent observation: N and W of the clean Hollin Fell files at the positions of its table of exact values.
//!
//! Outside source: tests/data/hollin-fell/README.md (numpy direct sums in double precision by an independent simulator,
//! an invented scene). Bound: the tolerance, for the largest error at any position relative to the root mean square of the
//! table's values, which is stricter than the relative L2 error. (The table's hour angle is of date, our parallactic angle
//! points to ICRS North: that alone makes 2.4e-6, measured with numpy.)

use evensky::beam::station_beams;
use evensky::observation::{Selection, open};
use evensky::response::gridded::Options;
use evensky::response::{Gridded, Response, Sums};
use evensky::run::RunFile;
use evensky::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use std::f64::consts::PI;
use std::path::Path;

const RUN: &str = r#"
station_table = "fell-stations.csv"
[[pointing]]
visibilities = "fell-1-clean.uvfits"
[image]
centre_deg = [152.678, 41.863]
size_px = [800, 800]
pixel_arcsec = 12.5
[beams.dish13]
shape = "airy"
diameter_m = 13.0
blockage_m = 1.3
[beams.dish8]
shape = "gaussian"
half_power_deg = 1.58
at_hz = 1.36e9
"#;

/// A band-limited image between its pixels: sinc times a Gaussian over 24 pixels to each side. The longest baseline makes
/// 0.14 cycles a pixel here, so the series errs by about exp(−π 24 (1 − 0.28)/2) = 2e-12 (Qian 2003).
fn between_pixels(image: &Array2<f64>, x: f64, y: f64) -> f64 {
    let weights = |at: f64| -> Vec<(usize, f64)> {
        let first = at.floor() as i64 - 23;
        (first..first + 48)
            .map(|pixel| {
                let d = at - pixel as f64;
                let sinc = if d.abs() < 1e-12 { 1.0 } else { (PI * d).sin() / (PI * d) };
                (pixel as usize, sinc * (-d * d * PI * 0.72 / 48.0).exp())
            })
            .collect()
    };
    let across = weights(x);
    weights(y).iter().map(|(py, wy)| wy * across.iter().map(|(px, wx)| wx * image[[*py, *px]]).sum::<f64>()).sum()
}

struct Row {
    x: f64,
    y: f64,
    /// N and W of the mosaic, N and W of the first pointing.
    exact: [f64; 4],
}

fn table(geometry: &ImageGeometry, path: &Path) -> Vec<Row> {
    let mut reader = csv::Reader::from_path(path).unwrap();
    reader
        .deserialize::<[f64; 6]>()
        .map(|row| {
            let [ra, dec, exact @ ..] = row.unwrap();
            let (x, y) = geometry.pixel_of(Direction::from_deg(ra, dec)).unwrap();
            Row { x, y, exact }
        })
        .collect()
}

#[test]
fn mosaic_and_first_pointing_at_every_position_of_the_table() {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/hollin-fell");
    let run = RunFile::parse(&folder.join("run.toml"), RUN).unwrap();
    let geometry = run.image().unwrap().geometry;
    let rows = table(&geometry, &folder.join("fell-exact.csv"));
    assert_eq!(rows.len(), 144, "every position takes part");
    for tolerance in [1e-3, 1e-4, 1e-5] {
        let mut sums = Sums::zero(&geometry);
        let mut first = None;
        for number in 1..=3 {
            let path = folder.join(format!("fell-{number}-clean.uvfits"));
            let mut source = open(&path, &Selection::All).unwrap().remove(0);
            let beams = station_beams(&run, source.observation(), None).unwrap();
            let gridded = Gridded::new(&beams, geometry, tolerance, source.as_mut(), Options::default()).unwrap();
            gridded.adjoint(source.as_mut(), &mut sums).unwrap();
            first.get_or_insert_with(|| sums.clone());
        }
        let first = first.unwrap();
        let images = [&sums.numerator, &sums.normaliser, &first.numerator, &first.normaliser];
        for (which, image) in images.iter().enumerate() {
            let name = ["N of the mosaic", "W of the mosaic", "N of the first", "W of the first"][which];
            let size = (rows.iter().map(|r| r.exact[which].powi(2)).sum::<f64>() / rows.len() as f64).sqrt();
            let worst = rows
                .iter()
                .map(|r| (between_pixels(image, r.x, r.y) - r.exact[which]).abs() / size)
                .fold(0.0, |a: f64, b| if b.is_nan() { f64::NAN } else { a.max(b) });
            println!("tolerance {tolerance:.0e}, {name}: worst {worst:.2e}");
            assert!(worst <= tolerance, "{name} errs by {worst:e}, promised {tolerance:e}");
        }
    }
}
