//! FITS products: what is written reads back, in order, with the header the standard asks for.

use evensky::fits::{FitsFile, Header};
use evensky::imaging::beam_fit::FittedBeam;
use evensky::report::{ProductHeader, write_image_product};
use evensky::sky::{Direction, ImageGeometry};
use ndarray::Array2;
use rand::{Rng, SeedableRng};

fn about() -> ProductHeader {
    ProductHeader {
        bunit: "Jy/beam".into(),
        object: "Wether Moss – süd".into(),
        frequency_hz: 1.36e9,
        bandwidth_hz: 6.4e7,
        beam: Some(FittedBeam { major: 7e-4, minor: 4e-4, position_angle: -0.5, largest_misfit: 0.01, pixels: 20 }),
        start_mjd_utc: Some(61375.25),
        description: "Flat-sky dirty image N/W".into(),
        history: vec![
            "tolerance 1e-4, natural weights".into(),
            format!("stations {}", (0..60).map(|i| format!("WM{i:02}")).collect::<Vec<_>>().join(" ")),
        ],
    }
}

/// The world coordinate of a FITS pixel (from 1) by the SIN equations of Calabretta & Greisen 2002 (2 and 5 for the
/// rotation, 59 and 60 for the projection), from the header alone: an independent path to the sky position.
fn world(header: &Header, px: f64, py: f64) -> (f64, f64) {
    let key = |name: &str| header.float(name).unwrap().unwrap();
    let x = ((px - key("CRPIX1")) * key("CDELT1")).to_radians();
    let y = ((py - key("CRPIX2")) * key("CDELT2")).to_radians();
    let phi = x.atan2(-y);
    let theta = x.hypot(y).acos();
    let (ra_p, dec_p, phi_p) =
        (key("CRVAL1").to_radians(), key("CRVAL2").to_radians(), key("LONPOLE").to_radians());
    let turned = phi - phi_p;
    let ra = ra_p
        + (-theta.cos() * turned.sin()).atan2(theta.sin() * dec_p.cos() - theta.cos() * dec_p.sin() * turned.cos());
    let dec = (theta.sin() * dec_p.sin() + theta.cos() * dec_p.cos() * turned.cos()).asin();
    (ra, dec)
}

/// Seeded images over the sky, poles and odd sizes included: values bit for bit, positions to 1e-3 pixel.
#[test]
fn values_and_positions_read_back() {
    let folder = tempfile::tempdir().unwrap();
    let keep = std::path::Path::new(env!("CARGO_TARGET_TMPDIR")).join("products");
    std::fs::create_dir_all(&keep).unwrap();
    let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(4);
    let mut centres = vec![(0.0, 90.0), (17.0, -90.0), (359.9999, 0.0), (0.0, -41.0)];
    centres.extend((0..12).map(|_| (random.random_range(0.0..360.0), random.random_range(-90.0..90.0))));
    for (case, (ra, dec)) in centres.into_iter().enumerate() {
        let (width, height) = (random.random_range(1..70), random.random_range(1..70));
        let pixel = 10f64.powf(random.random_range(-6.0..-2.2));
        let geometry = ImageGeometry::new(Direction::from_deg(ra, dec), width, height, pixel).unwrap();
        let mut image = Array2::from_shape_fn((height, width), |_| random.random_range(-1.0..1.0f32));
        image[[height / 2, 0]] = f32::NAN;
        let path = keep.join(format!("product-{case}.fits"));
        write_image_product(&path, image.view(), &geometry, &about()).unwrap();

        let file = FitsFile::open(&path).unwrap();
        let header = &file.hdus()[0].header;
        let back = file.image_f32(0).unwrap();
        assert!(image.iter().zip(&back).all(|(a, b)| a.to_bits() == b.to_bits() || (a.is_nan() && b.is_nan())));
        assert_eq!(back.len(), width * height);
        for _ in 0..50 {
            let (x, y) =
                (random.random_range(-0.5..width as f64 - 0.5), random.random_range(-0.5..height as f64 - 0.5));
            let (ra, dec) = world(header, x + 1.0, y + 1.0);
            let want = geometry.direction_of(x, y).unwrap();
            let off = want.separation(Direction { ra, dec });
            assert!(off <= 1e-3 * pixel, "case {case}: pixel ({x}, {y}) is off by {} pixels", off / pixel);
        }
    }
    drop(folder);
}

#[test]
fn header_has_the_keywords_promised() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("dirty.fits");
    let geometry = ImageGeometry::new(Direction::from_deg(83.25, -12.5), 48, 40, 1.2e-4).unwrap();
    write_image_product(&path, Array2::<f64>::zeros((40, 48)).view(), &geometry, &about()).unwrap();
    let file = FitsFile::open(&path).unwrap();
    let header = &file.hdus()[0].header;
    for (key, want) in [("NAXIS", 4), ("NAXIS1", 48), ("NAXIS2", 40), ("NAXIS3", 1), ("NAXIS4", 1), ("BITPIX", -32)]
    {
        assert_eq!(header.integer(key).unwrap(), Some(want), "{key}");
    }
    for (key, want) in [
        ("CTYPE1", "RA---SIN"),
        ("CTYPE2", "DEC--SIN"),
        ("CTYPE3", "FREQ"),
        ("CTYPE4", "STOKES"),
        ("CUNIT1", "deg"),
        ("RADESYS", "ICRS"),
        ("BUNIT", "Jy/beam"),
        ("OBJECT", "Wether Moss - sud"),
        ("DATE-OBS", "2026-12-01T06:00:00.000"),
    ] {
        assert_eq!(header.text(key).unwrap().as_deref(), Some(want), "{key}");
    }
    for (key, want) in [
        ("CRPIX1", 25.0),
        ("CRPIX2", 21.0),
        ("CRVAL1", 83.25),
        ("CRVAL2", -12.5),
        ("CDELT1", -1.2e-4f64.to_degrees()),
        ("CDELT2", 1.2e-4f64.to_degrees()),
        ("LONPOLE", 180.0),
        ("LATPOLE", -12.5),
        ("RESTFRQ", 1.36e9),
        ("CRVAL3", 1.36e9),
        ("CDELT3", 6.4e7),
        ("CRVAL4", 1.0),
        ("MJD-OBS", 61375.25),
        ("BMAJ", 7e-4f64.to_degrees()),
        ("BMIN", 4e-4f64.to_degrees()),
        ("BPA", -0.5f64.to_degrees()),
    ] {
        let got = header.float(key).unwrap().unwrap_or(f64::NAN);
        assert!((got - want).abs() <= 1e-15 * want.abs(), "{key}: {got} against {want}");
    }
    assert!(header.get("EQUINOX").is_none(), "ICRS takes no equinox");
    let history: Vec<&str> = header.history_lines().collect();
    assert!(history.len() >= 6 && history.iter().all(|l| l.len() <= 72 && l.is_ascii()), "{history:?}");
    for station in 0..60 {
        let name = format!("WM{station:02}");
        assert!(history.iter().any(|l| l.contains(&name)), "{name} was lost in the wrapping");
    }
}

/// What cannot be written is refused by name and leaves nothing behind.
#[test]
fn refusals_name_file_and_keyword() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("dirty.fits");
    let geometry = ImageGeometry::new(Direction::from_deg(83.25, -12.5), 4, 3, 1.2e-4).unwrap();
    let image = Array2::<f32>::zeros((3, 4));
    let refuse = |image: &Array2<f32>, about: ProductHeader| {
        write_image_product(&path, image.view(), &geometry, &about).unwrap_err().to_string()
    };
    let text = refuse(&Array2::zeros((4, 3)), about());
    assert!(text.contains("dirty.fits: the image has 4 rows of 3 pixels"), "{text}");
    for hz in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        let text = refuse(&image, ProductHeader { frequency_hz: hz, ..about() });
        assert!(text.contains("dirty.fits: RESTFRQ is"), "{text}");
    }
    let text = refuse(&image, ProductHeader { bandwidth_hz: -2.0, ..about() });
    assert!(text.contains("CDELT3 is -2"), "{text}");
    let text = refuse(&image, ProductHeader { start_mjd_utc: Some(f64::NAN), ..about() });
    assert!(text.contains("MJD-OBS is NaN; expected a Modified Julian Date"), "{text}");
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0);

    let nowhere = folder.path().join("no/dirty.fits");
    let text = write_image_product(&nowhere, image.view(), &geometry, &about()).unwrap_err().to_string();
    assert!(text.contains("no/dirty.fits"), "{text}");
}
