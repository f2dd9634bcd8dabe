//! World coordinates of any image, and what `evensky combine` writes, as astropy sees them.

use crate::combine_support::Sheet;
use crate::compare;
use crate::image_support::{Folder, evensky};
use evensky::fits::{FitsFile, Value, celestial_axes, write_image_f64};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use serde_json::{Value as Json, json};

fn with(more: &[(&'static str, f64)]) -> Vec<(&'static str, Value)> {
    more.iter().map(|&(key, value)| (key, Value::from(value))).collect()
}

/// Headers of every kind that is understood.
fn sheets() -> Vec<(String, Sheet)> {
    let mut random = ChaCha8Rng::seed_from_u64(71);
    let mut found: Vec<(String, Sheet)> = Vec::new();
    for projection in ["SIN", "TAN", "ARC", "STG", "ZEA"] {
        for (place, centre_deg) in [
            ("elsewhere", [83.6, 22.0]),
            ("pole", [211.0, 90.0]),
            ("south pole", [3.0, -90.0]),
            ("zero", [0.001, -41.0]),
        ] {
            let sheet = Sheet {
                projection,
                centre_deg,
                step_arcsec: [-random.random_range(0.5..60.0), random.random_range(0.5..60.0)],
                rotation_deg: random.random_range(-180.0..180.0),
                reference: [random.random_range(-50.0..200.0), random.random_range(-50.0..200.0)],
                swapped: random.random_range(0..2) == 1,
                ..Sheet::default()
            };
            found.push((format!("{projection} {place} CROTA"), sheet.clone()));
            let pole = random.random_range(-180.0..180.0);
            let more = with(&[("LONPOLE", pole), ("LATPOLE", 12.0)]);
            found.push((format!("{projection} {place} LONPOLE"), Sheet { more, ..sheet.clone() }));
            let matrix = with(&[("CD1_1", -3e-3), ("CD1_2", 4e-4), ("CD2_1", 1e-4), ("CD2_2", 2e-3)]);
            let bare = Sheet { rotation_deg: 0.0, ..sheet };
            found.push((format!("{projection} {place} CD"), Sheet { more: matrix, ..bare.clone() }));
            let matrix = with(&[("PC1_1", 0.9), ("PC1_2", 0.3), ("PC2_1", -0.4)]);
            found.push((format!("{projection} {place} PC"), Sheet { more: matrix, ..bare }));
        }
    }
    let plain = Sheet { rotation_deg: 21.0, ..Sheet::default() };
    found.push(("slant SIN".into(), Sheet { more: with(&[("PV2_1", 0.3), ("PV2_2", -1.4)]), ..plain.clone() }));
    let swapped = Sheet { swapped: true, more: with(&[("PV1_1", 0.3), ("PV1_2", -1.4)]), ..plain.clone() };
    found.push(("slant SIN, declination first".into(), swapped));
    found.push(("NCP".into(), Sheet { projection: "NCP", ..plain.clone() }));
    found.push(("PV1_3".into(), Sheet { more: with(&[("PV1_3", 100.0)]), ..plain.clone() }));
    let mut fk5 = with(&[("EQUINOX", 2000.0)]);
    fk5.push(("RADESYS", Value::Undefined));
    found.push(("FK5".into(), Sheet { more: fk5, ..plain }));
    found
}

#[test]
fn world_coordinates_agree_with_astropy() {
    let folder = Folder::new();
    let mut random = ChaCha8Rng::seed_from_u64(72);
    let cases: Vec<Json> = sheets()
        .iter()
        .enumerate()
        .map(|(number, (name, sheet))| {
            let path = folder.path(&format!("{number}.fits"));
            if number % 3 == 0 {
                // with a frequency and a Stokes axis behind
                let mut header = sheet.header();
                header
                    .set("CTYPE3", "STOKES", "")
                    .set("CRVAL3", 1.0, "")
                    .set("CRPIX3", 1.0, "")
                    .set("CDELT3", 1.0, "");
                header
                    .set("CTYPE4", "FREQ", "")
                    .set("CRVAL4", 1.4e9, "")
                    .set("CRPIX4", 1.0, "")
                    .set("CDELT4", 1e6, "");
                let pixels = vec![0.0; sheet.size[0] * sheet.size[1]];
                write_image_f64(&path, &header, &[sheet.size[0], sheet.size[1], 1, 1], &pixels).unwrap();
            } else {
                sheet.write(&path, &sheet.empty());
            }
            let file = FitsFile::open(&path).unwrap();
            let axes = celestial_axes(&file.hdus()[0]).unwrap_or_else(|e| panic!("{name}: {e}"));
            assert_eq!((axes.width, axes.height, axes.frequency_hz), (120, 110, Some(1.4e9)), "{name}");
            let pixels: Vec<[f64; 2]> =
                (0..60).map(|_| [random.random_range(-20.0..140.0), random.random_range(-20.0..130.0)]).collect();
            let sky: Vec<_> = pixels.iter().map(|&[x, y]| axes.wcs.direction_of(x, y).unwrap()).collect();
            json!({
                "name": name, "file": path, "pixels": pixels,
                "sky_deg": sky.iter().map(|d| { let (ra, dec) = d.to_deg(); [ra, dec] }).collect::<Vec<_>>(),
                "back": sky.iter().map(|&d| axes.wcs.pixel_of(d).unwrap()).collect::<Vec<_>>(),
            })
        })
        .collect();
    compare("wcs.py", &json!({ "cases": cases }));
}

/// The same checks as for the products of `image`.
#[test]
fn combined_products_open_in_astropy_without_a_warning() {
    let folder = Folder::new();
    let sheet = Sheet { centre_deg: [0.05, -21.5], ..Sheet::default() };
    let second = Sheet { centre_deg: [359.9, -21.4], rotation_deg: 25.0, beam: [40.0, 40.0, 0.0], ..sheet.clone() };
    sheet.write(&folder.path("a.fits"), &sheet.noise(1e-3, 1));
    second.write(&folder.path("b.fits"), &second.noise(1e-3, 2));
    let text = "title = \"Invented\"\n[[field]]\nimage = 'a.fits'\nnoise_jy = 0.001\n\
                [[field]]\nimage = 'b.fits'\nnoise_jy = 0.001\n\
                [image]\ncentre_deg = [0.01, -21.45]\nsize_px = [131, 120]\npixel_arcsec = 9.0\n";
    folder.run_file(text);
    let run =
        evensky().arg("combine").arg(folder.path("run.toml")).arg("--out").arg(folder.out()).output().unwrap();
    assert!(run.status.success(), "{}", String::from_utf8_lossy(&run.stderr));
    let case = json!({
        "name": "combined", "folder": folder.out(), "ra_deg": 0.01, "dec_deg": -21.45,
        "width": 131, "height": 120, "pixel_arcsec": 9.0, "start_mjd": 59_321.5,
        "units": { "sky.fits": "Jy / beam", "weight.fits": "beam2 / Jy2" },
    });
    compare("products.py", &json!({ "cases": [case] }));
}

/// Three fields of different beams and pixels, from their files to the mosaic, with nothing of this program in between.
#[test]
fn sources_of_combined_fields_are_where_astropy_puts_them() {
    let folder = Folder::new();
    let plain = Sheet { size: [180, 170], reference: [90.0, 86.0], centre_deg: [0.05, 62.0], ..Sheet::default() };
    let sheets = [
        Sheet { beam: [50.0, 36.0, 10.0], ..plain.clone() },
        Sheet { beam: [46.0, 40.0, -60.0], projection: "TAN", rotation_deg: 30.0, ..plain.clone() },
        Sheet {
            beam: [42.0, 42.0, 0.0],
            projection: "ZEA",
            centre_deg: [359.95, 62.02],
            step_arcsec: [-9.0, 9.5],
            ..plain
        },
    ];
    let wcs = sheets[0].wcs();
    let sources: Vec<_> = [[60.3, 64.8, 0.4], [118.7, 60.1, 1.3], [92.2, 117.9, 0.02]]
        .map(|[x, y, jy]| (wcs.direction_of(x, y).unwrap(), jy))
        .into();
    let mut text = "title = \"Invented\"\n".to_owned();
    for (number, sheet) in sheets.iter().enumerate() {
        sheet.write(&folder.path(&format!("{number}.fits")), &sheet.sources(&sources));
        text += &format!("[[field]]\nimage = '{number}.fits'\nnoise_jy = 0.00{}\n", number + 1);
    }
    folder.run_file(&text);
    let run =
        evensky().arg("combine").arg(folder.path("run.toml")).arg("--out").arg(folder.out()).output().unwrap();
    assert!(run.status.success(), "{}", String::from_utf8_lossy(&run.stderr));
    let record: Json = serde_json::from_slice(&std::fs::read(folder.out().join("run.json")).unwrap()).unwrap();
    let weight: f64 = (0..3)
        .map(|i| {
            let factor = record["combined"]["fields"][i]["noise_factor"].as_f64().unwrap();
            assert!((1.0..1.2).contains(&factor), "{factor}");
            (1e-3 * (i + 1) as f64 * factor).powi(-2)
        })
        .sum();
    let degrees: Vec<[f64; 3]> = sources.iter().map(|(d, jy)| [d.to_deg().0, d.to_deg().1, *jy]).collect();
    compare(
        "combined.py",
        &json!({
            "file": folder.out().join("sky.fits"), "weight_file": folder.out().join("weight.fits"), "sources": degrees,
            "weights": degrees.iter().map(|[ra, dec, _]| [*ra, *dec, weight]).collect::<Vec<_>>(),
        }),
    );
}
