//! What `evensky image` writes, as astropy sees it.

use crate::compare;
use crate::image_support::{Folder, Invented, run_text, write_pointings};
use evensky::sky::{Direction, ImageGeometry};
use serde_json::{Value, json};

/// Near a pole, across right ascension 0, and neither; odd and even sides, pixels from 8 to 90 arcseconds.
const FIELDS: [(&str, f64, f64, usize, usize, f64); 3] = [
    ("pole", 211.0, 89.7, 41, 50, 90.0),
    ("right ascension 0", 0.01, -21.5, 48, 37, 60.0),
    ("elsewhere", 152.678, 41.863, 64, 64, 8.0),
];

fn imaged(folder: &Folder, ra: f64, dec: f64, width: usize, height: usize, arcsec: f64) {
    let invented = Invented { times: 2, start_mjd: 59_321.987_654_321, ..Invented::default() };
    let geometry =
        ImageGeometry::new(Direction::from_deg(ra, dec), width, height, (arcsec / 3600.0).to_radians()).unwrap();
    let aim = geometry.direction_of(0.4 * width as f64, 0.6 * height as f64).unwrap();
    write_pointings(&folder.path("data.idifits"), &[invented.pointing("P", aim)]);
    folder.run_file(&run_text(&["data.idifits"], &geometry, 1e-3));
    folder.imaged(&["--quiet"]);
}

#[test]
fn products_open_in_astropy_without_a_warning() {
    let folders: Vec<Folder> = FIELDS.iter().map(|_| Folder::new()).collect();
    let cases: Vec<Value> = FIELDS
        .iter()
        .zip(&folders)
        .map(|(&(name, ra, dec, width, height, arcsec), folder)| {
            imaged(folder, ra, dec, width, height, arcsec);
            json!({
                "name": name, "folder": folder.out(), "ra_deg": ra, "dec_deg": dec,
                "width": width, "height": height, "pixel_arcsec": arcsec, "start_mjd": 59_321.987_654_321,
                "units": { "dirty.fits": "Jy / beam", "weight.fits": "beam2 / Jy2", "psf.fits": "" },
            })
        })
        .collect();
    compare("products.py", &json!({ "cases": cases }));
}
