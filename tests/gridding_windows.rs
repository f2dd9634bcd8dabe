//! Windows by name, with a source outside the image: what of it the grid folds in, against direct sums.

mod common;

use common::{Beam, Setting, geometry, relative, scene};
use evensky::response::gridded::Options;
use evensky::response::window::Kind;
use evensky::response::{Exact, Gridded, Response, ResponseError, Sums};
use evensky::sky::{Component, ImageGeometry};

const SIZE: usize = 96;
/// No beams, and a field so narrow that w does not blur what is folded in (1800 m of w, 0.005 rad off: 0.1 turns).
const NARROW: (Beam, f64) = (Beam::Unity, 0.003);

/// What N of a source at pixel (x, y) beyond the image is too much by, at every pixel, in units of what the source would be in
/// the image (Σω): gridded less exact sums. Also how much the window is said to let through, and the transform's length.
fn ghost(
    (kind, tolerance): (Kind, f64),
    (beam, field): (Beam, f64),
    place: impl Fn(f64) -> (f64, f64),
) -> (ndarray::Array2<f64>, f64, f64) {
    let setting = Setting { beam, times: 40, channels: 4, radius_m: 900.0, ..Setting::default() };
    let mut scene = scene(&setting);
    let geometry: ImageGeometry = geometry(setting.aim, SIZE, SIZE, field);
    let options = Options { window: kind, ..Options::default() };
    let gridded = Gridded::new(&scene.beams, geometry, tolerance, &mut scene.source(), options).unwrap();
    let report = gridded.report();
    assert_eq!(report.window, kind);
    // the padded field, pixels
    let length = report.transform.0 as f64;
    let (x, y) = place(length);
    let direction = geometry.direction_of(x, y).unwrap();
    let source =
        Component { name: "out".into(), direction, flux_jy: 1.0, reference_hz: 1.35e9, spectral_index: 0.0 };
    let exact = Exact::new(&scene.observation, scene.beams.clone(), geometry);
    exact.predict_exactly(&[source], &mut scene.block);
    let (mut got, mut want) = (Sums::zero(&geometry), Sums::zero(&geometry));
    gridded.adjoint(&mut scene.source(), &mut got).unwrap();
    exact.adjoint(&mut scene.source(), &mut want).unwrap();
    let weight: f64 = scene.block.weight.iter().map(|w| f64::from(*w)).sum();
    println!(
        "{}: {} cells, padding {}, transform {length}, aliasing {:.1e}",
        kind.name(),
        report.window_support,
        report.padding,
        report.window_error
    );
    ((&got.numerator - &want.numerator) / weight, report.window_error, length)
}

fn largest(image: &ndarray::Array2<f64>) -> f64 {
    image.iter().fold(0.0, |most: f64, v| if v.abs() <= most { most } else { v.abs() })
}

/// Unity beams, so that the source is as strong outside the image as in it. It lies one padded field from a pixel of the image:
/// what comes through stays below the aliasing that the window is said to have, plus the other shares of the tolerance (1e-4).
#[test]
fn a_source_outside_comes_through_no_more_than_is_said() {
    for kind in [Kind::KaiserBessel, Kind::Spheroidal] {
        for tolerance in [1e-2, 1e-4] {
            let (excess, said, _) = ghost((kind, tolerance), NARROW, |length| (30.0 + length, 50.0));
            let most = largest(&excess);
            println!("  tolerance {tolerance:e}: {most:.1e} comes through, at most {said:.1e} is said");
            assert!(said <= tolerance, "{said}");
            assert!(most <= said + 0.1 * tolerance, "{most:e} against {said:e}");
            // a window that said much more than it does would pass everything
            assert!(most >= 0.01 * said, "{most:e} against {said:e}");
        }
    }
}

/// The nearest cell: a boxcar's transform is sinc, so the source comes through at its alias with sinc(x)/sinc(x − 1) of its strength,
/// x its place in padded fields (Bracewell, The Fourier Transform and its Applications: the sampling theorem). Bound: 0.02, since the
/// positions of the visibilities in their cells are a sample of some thousands, whose other aliases are noise of 1/√n.
#[test]
fn the_nearest_cell_lets_through_what_a_boxcar_does() {
    let column = 20.0;
    let (excess, said, length) = ghost((Kind::Nearest, 1e-3), NARROW, |length| (column + length, 48.0));
    let x = (column - SIZE as f64 / 2.0) / length;
    let sinc = |x: f64| (std::f64::consts::PI * x).sin() / (std::f64::consts::PI * x);
    let expected = sinc(x + 1.0) / sinc(x);
    let got = excess[[48, column as usize]];
    println!("  at the alias {got:.4}, a boxcar's {expected:.4}; said at most {said:.2}");
    assert!((got - expected).abs() <= 0.02, "{got} against {expected}");
    assert!(largest(&excess) <= said, "{} against {said}", largest(&excess));
}

/// With beams, which both station classes and the response have: N as a whole stays within the tolerance for either window, and a source
/// outside in the beams' skirts comes through no more than said.
#[test]
fn the_promise_is_kept_with_either_window_and_beams() {
    let setting = Setting::default();
    let scene = scene(&setting);
    let geometry = geometry(setting.aim, 48, 48, 0.05);
    let mut want = Sums::zero(&geometry);
    Exact::new(&scene.observation, scene.beams.clone(), geometry).adjoint(&mut scene.source(), &mut want).unwrap();
    for kind in [Kind::KaiserBessel, Kind::Spheroidal] {
        for tolerance in [1e-3, 1e-5] {
            let options = Options { window: kind, ..Options::default() };
            let gridded = Gridded::new(&scene.beams, geometry, tolerance, &mut scene.source(), options).unwrap();
            let mut got = Sums::zero(&geometry);
            gridded.adjoint(&mut scene.source(), &mut got).unwrap();
            let error = relative(&got.numerator, &want.numerator);
            println!("{} {tolerance:e}: {error:.1e}, {} cells", kind.name(), gridded.report().window_support);
            assert!(error <= tolerance, "{error:e}");
        }
        let (excess, said, _) = ghost((kind, 1e-4), (Beam::Gaussian, 0.03), |length| (60.0 + length, 40.0));
        assert!(largest(&excess) <= said + 1e-5, "{:e} against {said:e}", largest(&excess));
    }
}

/// Below the smallest tolerance any window is refused; at 1e-6 spheroidal windows still do.
#[test]
fn what_a_window_cannot_keep_is_refused_by_name() {
    let setting = Setting { beam: Beam::Unity, ..Setting::default() };
    let scene = scene(&setting);
    let geometry = geometry(setting.aim, 32, 32, 0.02);
    let at = |tolerance: f64| {
        let options = Options { window: Kind::Spheroidal, ..Options::default() };
        Gridded::new(&scene.beams, geometry, tolerance, &mut scene.source(), options)
    };
    match at(1e-9) {
        Err(ResponseError::Tolerance { asked, .. }) => assert_eq!(asked, 1e-9),
        Err(other) => panic!("{other}"),
        Ok(_) => panic!("1e-9 is below the smallest tolerance"),
    }
    assert!(at(1e-6).is_ok());
}
