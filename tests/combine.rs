//! Fields combined, against closed forms: sources on many kinds of pixels, weights, noise.

mod combine_support;

use combine_support::{Sheet, entry, gaussian, noise, weight};
use evensky::fits::Value;
use evensky::imaging::combine::{CombineError, Combined, PLACES, combine};
use evensky::run::{Depth, FieldEntry};
use evensky::sky::{Direction, ImageGeometry};
use nalgebra::Matrix2;
use ndarray::Array2;

/// Writes fields with their sources and combines them, 1 mJy/beam deep each.
fn combined(fields: &[(Sheet, Array2<f64>)], wanted: Option<ImageGeometry>) -> Result<Combined, CombineError> {
    let folder = tempfile::tempdir().unwrap();
    let entries: Vec<FieldEntry> = fields
        .iter()
        .enumerate()
        .map(|(i, (sheet, pixels))| {
            let path = folder.path().join(format!("{i}.fits"));
            sheet.write(&path, pixels);
            entry(path, Depth::NoiseJy(1e-3))
        })
        .collect();
    combine(&entries, wanted, &|_, _| ())
}

/// Covariance of the mosaic's beam, square pixels of the mosaic.
fn beam_px(mosaic: &Combined) -> Matrix2<f64> {
    let beam = &mosaic.beam;
    let sigma = |width: f64| width / mosaic.geometry.pixel / (8.0 * 2f64.ln()).sqrt();
    let (sin, cos) = beam.position_angle.sin_cos();
    // x runs West
    let (along, across) = (nalgebra::Vector2::new(-sin, cos), nalgebra::Vector2::new(-cos, -sin));
    along * along.transpose() * sigma(beam.major).powi(2) + across * across.transpose() * sigma(beam.minor).powi(2)
}

/// Offset in pixels, relative errors of peak and integrated flux density of a lone source.
fn errors(mosaic: &Combined, source: (Direction, f64)) -> [f64; 3] {
    let (direction, jy) = source;
    let (x, y) = mosaic.geometry.pixel_of(direction).unwrap();
    let beam = beam_px(mosaic);
    let reach = (6.2 * beam[(0, 0)].max(beam[(1, 1)]).sqrt()).ceil();
    let (mut sum, mut first) = (0.0, [0.0; 2]);
    let range = |c: f64| (c - reach).round() as usize..=(c + reach).round() as usize;
    for row in range(y) {
        for column in range(x) {
            let value = mosaic.sky[[row, column]];
            sum += value;
            first[0] += value * (column as f64 - x);
            first[1] += value * (row as f64 - y);
        }
    }
    let (column, row) = (x.round(), y.round());
    let expected = jy * gaussian(&beam.try_inverse().unwrap(), column - x, row - y);
    let peak = mosaic.sky[[row as usize, column as usize]] / expected - 1.0;
    let flux = sum / (std::f64::consts::TAU * beam.determinant().sqrt()) / jy - 1.0;
    [(first[0] / sum).hypot(first[1] / sum), peak.abs(), flux.abs()]
}

fn turned(name: &'static str, value: f64) -> Vec<(&'static str, Value)> {
    vec![(name, Value::from(value))]
}

/// Many kinds of pixels: position to 1e-2 pixel; peak and flux density to what the run itself states (measured at other
/// places: 1.5 times it, and rounding), which must itself be small.
#[test]
fn sources_keep_place_peak_and_flux_density() {
    let plain = Sheet::default();
    let sheets = [
        ("plain", plain.clone(), 1e-3),
        ("rotated", Sheet { rotation_deg: 33.0, ..plain.clone() }, 1e-3),
        ("gnomonic", Sheet { projection: "TAN", rotation_deg: -70.0, ..plain.clone() }, 1e-3),
        ("oblong pixels", Sheet { projection: "ARC", step_arcsec: [-9.0, 7.5], ..plain.clone() }, 1e-3),
        ("near the pole", Sheet { projection: "STG", centre_deg: [201.0, 89.8], ..plain.clone() }, 1e-3),
        ("on the pole", Sheet { centre_deg: [15.0, 90.0], more: turned("LONPOLE", 140.0), ..plain.clone() }, 1e-3),
        ("right ascension 0", Sheet { projection: "ZEA", centre_deg: [0.02, -20.0], ..plain.clone() }, 1e-3),
        ("declination first", Sheet { swapped: true, rotation_deg: 12.0, ..plain.clone() }, 1e-3),
        ("East to the right", Sheet { step_arcsec: [10.0, 10.0], rotation_deg: 5.0, ..plain.clone() }, 1e-3),
        (
            "slant",
            Sheet { more: vec![("PV2_1", Value::from(0.1)), ("PV2_2", Value::from(1.1))], ..plain.clone() },
            3e-3,
        ),
        // 3 pixels across: the limit of good sampling
        ("coarse", Sheet { rotation_deg: 20.0, beam: [30.0, 30.0, 0.0], ..plain.clone() }, 4e-3),
    ];
    for (name, sheet, stated) in sheets {
        let direction = sheet.wcs().direction_of(48.37, 63.71).unwrap();
        let source = (direction, 0.7);
        let mosaic = combined(&[(sheet.clone(), sheet.sources(&[source]))], None).unwrap();
        let transfer = &mosaic.fields[0].transfer;
        assert_eq!(transfer.places, PLACES, "{name}");
        let [offset, peak, flux] = errors(&mosaic, source);
        println!(
            "{name}: {offset:.1e} px; peak {peak:.1e}, stated {:.1e}; flux {flux:.1e}, stated {:.1e}; anywhere {:.1e}",
            transfer.peak, transfer.flux, transfer.anywhere
        );
        assert!(offset <= 1e-2, "{name}: {offset:e} pixels off");
        assert!(peak <= 1.5 * transfer.peak + 1e-7, "{name}: peak {peak:e}, stated {:e}", transfer.peak);
        assert!(flux <= 1.5 * transfer.flux + 1e-7, "{name}: flux {flux:e}, stated {:e}", transfer.flux);
        assert!(transfer.peak <= stated && transfer.flux <= stated, "{name}: {transfer:?}");
    }
}

/// Beams of three kinds on three kinds of pixels: one beam comes out, larger than any, and every field's source keeps its
/// peak and flux density.
#[test]
fn fields_of_different_beams_get_one() {
    let plain = Sheet::default();
    let sheets = [
        Sheet { beam: [50.0, 34.0, 10.0], ..plain.clone() },
        Sheet { beam: [46.0, 38.0, -60.0], centre_deg: [153.0, 41.8], rotation_deg: 30.0, ..plain.clone() },
        Sheet {
            beam: [40.0, 40.0, 0.0],
            centre_deg: [152.8, 42.1],
            projection: "TAN",
            step_arcsec: [-8.0, 8.0],
            ..plain
        },
    ];
    let places = [[45.3, 42.8], [78.6, 61.2], [60.1, 66.9]];
    let sources: Vec<(Direction, f64)> =
        sheets.iter().zip(places).map(|(s, [x, y])| (s.wcs().direction_of(x, y).unwrap(), 0.3)).collect();
    let fields: Vec<_> = sheets.iter().map(|sheet| (sheet.clone(), sheet.sources(&sources))).collect();
    let mosaic = combined(&fields, None).unwrap();
    let arcsec = |rad: f64| rad.to_degrees() * 3600.0;
    let (major, minor) = (arcsec(mosaic.beam.major), arcsec(mosaic.beam.minor));
    assert!(major >= 50.0 * 0.999 && minor >= 40.0 * 0.999 && major < 52.0 && minor < 46.0, "{major} × {minor}");
    assert!(mosaic.fields.iter().filter(|field| field.kernel.is_some()).count() >= 2);
    for (field, source) in mosaic.fields.iter().zip(&sources) {
        let [offset, peak, flux] = errors(&mosaic, *source);
        println!("{offset:.1e} px, peak {peak:.1e}, flux {flux:.1e}; stated {:?}", field.transfer);
        // the beams of the fields differ a little over the mosaic: convolved right at their middles
        assert!(offset <= 1e-2 && peak <= 2e-3 && flux <= 2e-3, "{offset:e} {peak:e} {flux:e}");
        assert!(field.transfer.peak <= 2e-3 && field.transfer.flux <= 2e-3);
        assert!(field.noise_factor >= 1.0 && field.noise_factor < 1.2);
    }
}

/// Weights in closed form: a constant, and one that is linear on the sky. Bound: rounding of interpolation.
#[test]
fn weights_add_up() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: &str| folder.path().join(name);
    let first = Sheet::default();
    // the same grid half a pixel away, and twice as coarse
    let second = Sheet { reference: [50.5, 50.5], ..first.clone() };
    let slope = |x: f64, y: f64| 1e6 + 1e3 * x + 2e3 * y;
    first.write(&path("a.fits"), &first.empty());
    second.write(&path("b.fits"), &second.empty());
    let map = Array2::from_shape_fn((110, 120), |(y, x)| slope(x as f64, y as f64));
    second.write(&path("bw.fits"), &map.mapv(|w: f64| w.sqrt().recip()));
    let entries = [entry(path("a.fits"), Depth::NoiseJy(1e-3)), entry(path("b.fits"), noise(path("bw.fits")))];
    let mosaic = combine(&entries, None, &|_, _| ()).unwrap();
    let (mut both, mut one) = (0, 0);
    let (wa, wb) = (first.wcs(), second.wcs());
    for ((y, x), &got) in mosaic.weight.indexed_iter() {
        let there = mosaic.geometry.direction_of(x as f64, y as f64).unwrap();
        let ([ax, ay], [bx, by]) = (wa.pixel_of(there).unwrap(), wb.pixel_of(there).unwrap());
        let well_inside = |x: f64, y: f64| x > 5.01 && y > 5.01 && x < 113.0 && y < 103.0;
        if well_inside(ax, ay) && well_inside(bx, by) {
            let want = 1e6 + slope(bx, by);
            assert!((got / want - 1.0).abs() <= 1e-5, "({x}, {y}): {got} {want}");
            both += 1;
        } else if well_inside(ax, ay) && (bx < -1.0 || by < -1.0) {
            assert!((got / 1e6 - 1.0).abs() <= 1e-9);
            one += 1;
        }
        assert_eq!(got > 0.0, !mosaic.sky[[y, x]].is_nan());
        assert!(got >= 0.0);
    }
    assert!(both > 5000 && one > 300, "{both} {one}");
}

/// Fields on one grid of our own kind are not interpolated: the mean by weight, bit by bit but for rounding, no rim lost.
#[test]
fn fields_on_one_grid_pass_unchanged() {
    let sheet = Sheet::default();
    let moved = Sheet { reference: [52.0, 60.0], ..sheet.clone() };
    let (a, b) = (sheet.noise(1.0, 3), moved.noise(1.0, 4));
    let mosaic = combined(&[(sheet.clone(), a.clone()), (moved, b.clone())], None).unwrap();
    let (x0, y0) = mosaic.geometry.reference();
    let mut seen = 0;
    for ((y, x), &value) in a.indexed_iter() {
        // CRPIX is counted from 1
        let (row, column) = ((y + y0 + 1) - 56, (x + x0 + 1) - 60);
        let other = ((y + 60).checked_sub(56), (x + 52).checked_sub(60));
        let want = match other {
            (Some(j), Some(i)) if j < 110 && i < 120 => 0.5 * (value + b[[j, i]]),
            _ => value,
        };
        assert!((mosaic.sky[[row, column]] - want).abs() <= 1e-14, "({x}, {y})");
        seen += 1;
    }
    assert_eq!(seen, 120 * 110);
    // such a source is kept exactly
    assert!(mosaic.fields[0].transfer.peak <= 1e-7 && mosaic.fields[0].transfer.flux <= 1e-6);
}

/// Seeded noise, correlated like the beams, of three depths, one field convolved and one rotated: the mosaic times the
/// root of its weight scatters by 1. There are some 1400 beams in the overlap, so that is known to 2 %; interpolation lowers
/// it by less than 1 %. Bound: three times the first, and the second.
#[test]
fn noise_is_what_the_weights_say() {
    let folder = tempfile::tempdir().unwrap();
    let path = |name: String| folder.path().join(name);
    let plain = Sheet { size: [170, 170], reference: [85.0, 85.0], beam: [45.0, 45.0, 0.0], ..Sheet::default() };
    let sheets = [
        plain.clone(),
        Sheet { rotation_deg: 40.0, reference: [86.3, 84.6], ..plain.clone() },
        Sheet { beam: [34.0, 34.0, 0.0], reference: [84.7, 85.2], ..plain },
    ];
    let depths = [1e-3, 2e-3, 1.2e-3];
    let entries: Vec<FieldEntry> = sheets
        .iter()
        .zip(depths)
        .enumerate()
        .map(|(i, (sheet, sigma))| {
            let (image, map) = (path(format!("{i}.fits")), path(format!("{i}w.fits")));
            sheet.write(&image, &sheet.noise(sigma, 90 + i as u64));
            let weights = Sheet { more: vec![("BUNIT", Value::from("beam2 Jy-2"))], ..sheet.clone() };
            weights.write(&map, &sheet.empty().mapv(|_| sigma.powi(-2)));
            entry(image, weight(map))
        })
        .collect();
    let scatter = |mosaic: &Combined, least: f64| {
        let pairs = mosaic.sky.iter().zip(&mosaic.weight).filter(|(_, w)| **w > least);
        let values: Vec<f64> = pairs.map(|(value, w)| value * w.sqrt()).collect();
        assert!(values.len() > 15_000, "{}", values.len());
        (values.iter().map(|v| v * v).sum::<f64>() / values.len() as f64).sqrt()
    };
    let all = combine(&entries, None, &|_, _| ()).unwrap();
    let third = all.fields[2].noise_factor;
    assert!(third > 1.02 && all.fields[0].kernel.is_none(), "{third}");
    let together = 1e6 + 2.5e5 + (1.2e-3 * third).powi(-2);
    let got = scatter(&all, 0.999 * together);
    println!("three fields: {got:.4}; convolving multiplies the noise of one by {third:.4}");
    for (i, sigma) in depths.iter().enumerate() {
        // alone: its own depth; the convolved one with a partner of no weight worth speaking of
        let mut pair = vec![entries[i].clone(), entries[0].clone()];
        pair[1].depth = Depth::NoiseJy(1e3);
        let mosaic = combine(&pair, None, &|_, _| ()).unwrap();
        let factor = mosaic.fields[0].noise_factor;
        let got = scatter(&mosaic, 0.999 * (sigma * factor).powi(-2));
        println!("field {i}: {got:.4}");
    }
    assert!((got - 1.0).abs() <= 0.07, "{got}");
}

/// Blank pixels: those within 6 pixels of one are lost, no others.
#[test]
fn blanks_take_no_more_than_stated() {
    let sheet = Sheet { rotation_deg: 17.0, ..Sheet::default() };
    let mut pixels = sheet.empty().mapv(|_| 2.0);
    pixels[[50, 60]] = f64::NAN;
    let mosaic = combined(&[(sheet.clone(), pixels)], None).unwrap();
    let wcs = sheet.wcs();
    let (mut lost, mut kept) = (0, 0);
    for ((y, x), &value) in mosaic.sky.indexed_iter() {
        let [fx, fy] = wcs.pixel_of(mosaic.geometry.direction_of(x as f64, y as f64).unwrap()).unwrap();
        let from_blank = (fx - 60.0).abs().max((fy - 50.0).abs());
        let from_edge = fx.min(fy).min(119.0 - fx).min(109.0 - fy);
        if from_blank > 6.0 && from_edge > 5.0 {
            assert!((value - 2.0).abs() <= 1e-12, "({fx}, {fy}): {value}");
            kept += 1;
        } else if from_blank < 5.0 || from_edge < 4.9 {
            assert!(value.is_nan(), "({fx}, {fy}): {value}");
            lost += 1;
        }
    }
    assert!(kept > 9000 && lost > 100);
}

/// The default grid holds every field and no row more than it needs: its outermost rows and columns are reached by a pixel
/// of a field, and its pixel is the finest.
#[test]
fn the_default_grid_is_the_smallest() {
    let plain = Sheet::default();
    let sheets = [
        Sheet { centre_deg: [359.9, 60.0], rotation_deg: 10.0, ..plain.clone() },
        Sheet { centre_deg: [0.4, 60.2], step_arcsec: [-7.0, 8.0], ..plain },
    ];
    let mosaic = combined(&sheets.clone().map(|s| (s.clone(), s.empty())), None).unwrap();
    let geometry = mosaic.geometry;
    assert!((geometry.pixel.to_degrees() * 3600.0 - 7.0).abs() <= 1e-9);
    let (mut low, mut high) = ([f64::INFINITY; 2], [f64::NEG_INFINITY; 2]);
    for sheet in &sheets {
        let wcs = sheet.wcs();
        for (x, y) in [(-0.5, -0.5), (119.5, -0.5), (-0.5, 109.5), (119.5, 109.5)] {
            let (x, y) = geometry.pixel_of(wcs.direction_of(x, y).unwrap()).unwrap();
            (low, high) = ([low[0].min(x), low[1].min(y)], [high[0].max(x), high[1].max(y)]);
        }
    }
    for (axis, size) in [geometry.width, geometry.height].into_iter().enumerate() {
        // whole pixels about the centre: less than one to spare on either side
        assert!(low[axis] >= -0.51 && low[axis] <= 1.0, "{axis}: {low:?}");
        assert!(high[axis] <= size as f64 - 0.49 && high[axis] >= size as f64 - 2.0, "{axis}: {high:?} of {size}");
    }
}

#[test]
fn a_grid_that_is_too_large_is_refused_before_anything_is_made() {
    let plain = Sheet::default();
    let fields = [plain.clone(), Sheet { centre_deg: [200.0, 41.0], step_arcsec: [-1.0, 1.0], ..plain }];
    let error = combined(&fields.map(|s| (s.clone(), s.empty())), None).unwrap_err();
    assert!(matches!(error, CombineError::TooLarge { .. }), "{error}");
    assert!(error.to_string().contains("give a table [image] with a larger pixel"), "{error}");
    let around = [0.0, 120.0, 240.0].map(|ra| Sheet { centre_deg: [ra, 0.0], ..Sheet::default() });
    let error = combined(&around.map(|s| (s.clone(), s.empty())), None).unwrap_err();
    assert!(matches!(error, CombineError::Grid(_)), "{error}");
}
