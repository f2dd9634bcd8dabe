//! Pictures: tick places against the projection, over fields from 0.1° to 100°, at poles and across RA 0.

use evensky::imaging::beam_fit::FittedBeam;
use evensky::report::picture::{
    Coordinate, Edge, Frame, LabelRoom, PictureSpec, Scale, Stretch, graticule, paint, write_picture,
};
use evensky::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

fn geometry(ra_deg: f64, dec_deg: f64, side_deg: f64, width: usize, height: usize) -> ImageGeometry {
    let pixel = 2.0 * (side_deg.to_radians() / 2.0).sin() / width.max(height) as f64;
    ImageGeometry::new(Direction::from_deg(ra_deg, dec_deg), width, height, pixel).unwrap()
}

fn whole(geometry: &ImageGeometry) -> Frame {
    Frame { left: -0.5, right: geometry.width as f64 - 0.5, bottom: -0.5, top: geometry.height as f64 - 0.5 }
}

const ROOM: LabelRoom = LabelRoom { letter: 9.0, line: 62.0 };

/// The number a label states, radians.
fn stated(label: &str) -> f64 {
    let negative = label.starts_with('−');
    let text = label.trim_start_matches(['−', '+']);
    let time = text.contains("^{h}");
    let parts: Vec<f64> = text
        .replace("^{h}", " ")
        .replace("^{m}", " ")
        .replace("^{s}", " ")
        .replace(['°', '′', '″'], " ")
        .split_whitespace()
        .map(|p| p.parse().unwrap())
        .collect();
    let units = parts.iter().enumerate().map(|(i, p)| p / 60f64.powi(i as i32)).sum::<f64>();
    (if time {
        units * 15.0
    } else if negative {
        -units
    } else {
        units
    })
    .to_radians()
}

fn turn(angle: f64) -> f64 {
    (angle + std::f64::consts::PI).rem_euclid(std::f64::consts::TAU) - std::f64::consts::PI
}

/// Every tick lies on the frame, and the sky position there (through the projection, which has its own outside checks)
/// has the right ascension or declination its label states. Bound: 1e-3 pixel, seen as an angle.
#[test]
fn ticks_stand_where_their_labels_say() {
    let mut random = ChaCha8Rng::seed_from_u64(77);
    let mut cases = vec![
        (0.0, 90.0, 1.0),
        (123.0, -90.0, 0.1),
        (10.0, 89.5, 2.0),
        (200.0, -89.0, 60.0),
        (0.0, 0.0, 100.0),
        (359.999, -30.0, 0.1),
        (0.01, 60.0, 100.0),
        (152.678, 41.863, 2.8),
    ];
    for _ in 0..120 {
        let side = 10f64.powf(random.random_range(-1.0..1.85));
        cases.push((random.random_range(0.0..360.0), random.random_range(-90.0..90.0), side));
    }
    let mut ticks = 0;
    for (ra, dec, side) in cases {
        let (width, height) = (800, 500);
        let geometry = geometry(ra, dec, side, width, height);
        let frame = whole(&geometry);
        let lines = graticule(&geometry, &frame, ROOM);
        for tick in &lines.ticks {
            let (x, y) = tick.at;
            let on_edge = match tick.edge {
                Edge::Bottom => y == frame.bottom,
                Edge::Top => y == frame.top,
                Edge::Left => x == frame.left,
                Edge::Right => x == frame.right,
            };
            assert!(on_edge, "{ra} {dec} {side}: {tick:?}");
            let there = geometry.direction_of(x, y).unwrap();
            let (got, scale) = match tick.coordinate {
                Coordinate::RightAscension => (there.ra, there.dec.cos()),
                Coordinate::Declination => (there.dec, 1.0),
            };
            let off = turn(got - tick.value).abs() * scale;
            assert!(off <= 1e-3 * geometry.pixel, "{ra} {dec} {side}: {tick:?} off by {off}");
            if let Some(label) = &tick.label {
                let said = turn(stated(label) - tick.value).abs();
                assert!(said < 1e-12, "{label} is not {}", tick.value);
            }
            ticks += 1;
        }
        for label in &lines.inner {
            let (x, y) = label.at;
            let there = geometry.direction_of(x, y).unwrap();
            assert!((there.dec - label.declination).abs() <= 1e-9, "{label:?}");
            assert!((stated(&label.label) - label.declination).abs() < 1e-12, "{label:?}");
        }
        for (x, y) in lines.lines.iter().flatten() {
            assert!(*x >= frame.left && *x <= frame.right && *y >= frame.bottom && *y <= frame.top);
        }
    }
    assert!(ticks > 1000, "only {ticks} ticks were looked at");
}

/// Both axes can be read on every picture: at least two labels of each coordinate, and no two labels of an edge closer
/// than the room asked for. Fields away from the poles by more than their own size.
#[test]
fn both_axes_have_labels_with_room() {
    let mut random = ChaCha8Rng::seed_from_u64(5);
    for case in 0..200 {
        let side: f64 = 10f64.powf(random.random_range(-1.0..1.5));
        let reach = (88.0 - side).max(0.0);
        let (ra, dec) = (random.random_range(0.0..360.0), random.random_range(-reach..reach + 1e-9));
        let geometry = geometry(ra, dec, side, 800, 600);
        let lines = graticule(&geometry, &whole(&geometry), ROOM);
        for (edge, coordinate) in
            [(Edge::Bottom, Coordinate::RightAscension), (Edge::Left, Coordinate::Declination)]
        {
            let places: Vec<f64> = lines
                .ticks
                .iter()
                .filter(|t| t.edge == edge && t.coordinate == coordinate && t.label.is_some())
                .map(|t| if edge == Edge::Bottom { t.at.0 } else { t.at.1 })
                .collect();
            assert!(places.len() >= 2, "case {case} ({ra} {dec} {side}): {coordinate:?} has {}", places.len());
            assert!(places.windows(2).all(|w| (w[1] - w[0]).abs() >= 45.0), "case {case}: {places:?}");
        }
    }
}

/// With a pole inside, all 24 hours and several circles are there.
#[test]
fn polar_pictures_show_all_hours() {
    for (dec, side) in [(90.0, 0.1), (-90.0, 3.0), (89.0, 10.0), (-70.0, 88.0)] {
        let geometry = geometry(31.0, dec, side, 700, 700);
        let lines = graticule(&geometry, &whole(&geometry), ROOM);
        assert!(lines.polar);
        let mut hours: Vec<i64> = lines
            .ticks
            .iter()
            .filter(|t| t.coordinate == Coordinate::RightAscension)
            .map(|t| (t.value.to_degrees() / 15.0).round() as i64)
            .collect();
        hours.sort_unstable();
        hours.dedup();
        assert!(hours.len() >= 8, "{dec} {side}: {hours:?}");
        assert!(lines.inner.len() >= 2, "{dec} {side}: {:?}", lines.inner);
    }
}

fn sources(geometry: &ImageGeometry, noise: f64, seed: u64) -> Array2<f32> {
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    let (h, w) = (geometry.height, geometry.width);
    let spots: Vec<(f64, f64, f64, f64)> = (0..25)
        .map(|_| {
            let flux = 10f64.powf(random.random_range(-2.5..0.3));
            let size = w.max(h) as f64 * 0.006;
            (random.random_range(0.0..w as f64), random.random_range(0.0..h as f64), flux, size.max(0.8))
        })
        .collect();
    Array2::from_shape_fn((h, w), |(y, x)| {
        let r = ((x as f64 / w as f64 - 0.5).powi(2) + (y as f64 / h as f64 - 0.5).powi(2)).sqrt();
        if r > 0.49 {
            return f32::NAN;
        }
        let sky: f64 = spots
            .iter()
            .map(|(sx, sy, f, s)| f * (-((x as f64 - sx).powi(2) + (y as f64 - sy).powi(2)) / (2.0 * s * s)).exp())
            .sum();
        (sky + noise * (random.random::<f64>() + random.random::<f64>() + random.random::<f64>() - 1.5)) as f32
    })
}

fn beam(geometry: &ImageGeometry, major_px: f64, minor_px: f64) -> FittedBeam {
    FittedBeam {
        major: major_px * geometry.pixel,
        minor: minor_px * geometry.pixel,
        position_angle: 0.6,
        largest_misfit: 0.0,
        pixels: 50,
    }
}

/// Pictures of every kind of field come out, of the size promised, and are valid PNGs. They are kept under the test
/// folder of the build so that a person can look at them.
#[test]
fn pictures_of_all_kinds_are_painted() {
    let folder = std::path::Path::new(env!("CARGO_TARGET_TMPDIR")).join("pictures");
    std::fs::create_dir_all(&folder).unwrap();
    for (name, ra, dec, side, width, height) in [
        ("ordinary", 152.678, 41.863, 2.78, 400, 400),
        ("across-zero", 0.02, -30.0, 0.5, 640, 480),
        ("pole", 40.0, 90.0, 4.0, 500, 500),
        ("near-pole", 310.0, -88.5, 2.0, 500, 400),
        ("wide", 120.0, 35.0, 60.0, 700, 700),
        ("widest", 0.0, 60.0, 88.0, 700, 700),
        ("large", 201.0, 12.0, 6.0, 4000, 4000),
        ("small", 83.6, 22.0, 0.1, 48, 32),
        ("tall", 83.6, 22.0, 1.0, 60, 900),
        ("flat", 83.6, 22.0, 1.0, 900, 20),
        ("dot", 83.6, 22.0, 0.01, 1, 1),
    ] {
        let geometry = geometry(ra, dec, side, width, height);
        let image = sources(&geometry, 2e-3, 9);
        let spec = PictureSpec {
            title: "Wether Moss, seven pointings",
            quantity: "Flat-sky dirty image N/W",
            unit: "Jy/beam",
            geometry,
            beam: Some(beam(&geometry, 6.0, 4.0)),
            scale: None,
        };
        let canvas = paint(image.view(), &spec).unwrap_or_else(|e| panic!("{name}: {e}"));
        assert!(
            canvas.width() <= 1700 && canvas.height() <= 1500,
            "{name}: {} {}",
            canvas.width(),
            canvas.height()
        );
        let path = folder.join(format!("{name}.png"));
        write_picture(&path, &canvas).unwrap();
        let reader = png::Decoder::new(std::io::BufReader::new(std::fs::File::open(&path).unwrap()));
        let info = reader.read_info().unwrap().info().size();
        assert_eq!(info, (canvas.width() as u32, canvas.height() as u32), "{name}");
    }
    let geometry = geometry(152.678, 41.863, 2.78, 400, 400);
    let weight = Array2::from_shape_fn((400, 400), |(y, x)| {
        let r2 = (x as f64 - 200.0).powi(2) + (y as f64 - 190.0).powi(2);
        let w = 3.1e7 * (-r2 / 9000.0).exp();
        if w < 3e5 { f64::NAN } else { w }
    });
    let spec = PictureSpec {
        title: "Wether Moss, seven pointings",
        quantity: "Weight: inverse variance of the flat-sky image",
        unit: "(Jy/beam)^{−2}",
        geometry,
        beam: None,
        scale: None,
    };
    write_picture(&folder.join("weight.png"), &paint(weight.view(), &spec).unwrap()).unwrap();
    let psf = Array2::from_shape_fn((400, 400), |(y, x)| {
        let r = (x as f64 - 200.0).hypot(0.6 * (y as f64 - 200.0)) / 1.4;
        if r == 0.0 { 1.0 } else { 2.0 * libm::j1(r) / r }
    });
    let scale = Scale::new(-0.14, 1.0, Stretch::Asinh { softening: 0.02 }).unwrap();
    let spec = PictureSpec { quantity: "Point spread function", unit: "", scale: Some(scale), ..spec };
    write_picture(&folder.join("psf.png"), &paint(psf.view(), &spec).unwrap()).unwrap();
}

/// A single bright pixel appears where the geometry puts it: East left, North up, crisp when enlarged.
#[test]
fn east_is_left_and_north_is_up() {
    let geometry = geometry(50.0, 10.0, 0.1, 9, 9);
    let mut image = Array2::<f32>::zeros((9, 9));
    let east_north = geometry.pixel_of(Direction {
        ra: geometry.centre.ra + 3.0 * geometry.pixel,
        dec: geometry.centre.dec + 3.0 * geometry.pixel,
    });
    let (x, y) = east_north.unwrap();
    image[[y.round() as usize, x.round() as usize]] = 1.0;
    let scale = Scale::new(0.0, 1.0, Stretch::Linear).unwrap();
    let spec = PictureSpec { title: "t", quantity: "q", unit: "Jy", geometry, beam: None, scale: Some(scale) };
    let canvas = paint(image.view(), &spec).unwrap();
    let bright = scale.colour(1.0);
    let dark = scale.colour(0.0);
    let (mut bright_at, mut dark_at) = (Vec::new(), Vec::new());
    for py in 0..canvas.height() {
        for px in 0..canvas.width() {
            match canvas.at(px, py) {
                Some(c) if c == bright => bright_at.push((px, py)),
                Some(c) if c == dark => dark_at.push((px, py)),
                _ => {}
            }
        }
    }
    let mean = |v: &[(usize, usize)]| {
        let n = v.len() as f64;
        (v.iter().map(|p| p.0 as f64).sum::<f64>() / n, v.iter().map(|p| p.1 as f64).sum::<f64>() / n)
    };
    assert!(bright_at.len() >= 90 * 90, "the pixel must be a crisp square of 100 points: {}", bright_at.len());
    assert!(mean(&bright_at).0 < mean(&dark_at).0 - 200.0, "East must be left");
    assert!(mean(&bright_at).1 < mean(&dark_at).1 - 200.0, "North must be up");
}

#[test]
fn wrong_shapes_and_unwritable_places_are_named() {
    let geometry = geometry(50.0, 10.0, 0.1, 9, 8);
    let spec = PictureSpec { title: "t", quantity: "q", unit: "Jy", geometry, beam: None, scale: None };
    let error = paint(Array2::<f32>::zeros((9, 8)).view(), &spec).unwrap_err().to_string();
    assert!(error.contains("9 rows of 8 pixels, its geometry 8 of 9"), "{error}");
    let canvas = paint(Array2::<f32>::from_elem((8, 9), f32::NAN).view(), &spec).unwrap();
    let error = write_picture(std::path::Path::new("no-such-folder/a.png"), &canvas).unwrap_err().to_string();
    assert!(error.contains("no-such-folder/a.png") && error.contains("check that the folder exists"), "{error}");
}
