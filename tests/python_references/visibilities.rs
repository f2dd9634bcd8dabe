//! What the FITS writers write, as astropy reads it.

use super::compare;
use evensky::fits::{Header, write_image_f64};
use evensky::observation::{BlockSource, MemorySource, Selection, open, write_idi};
use serde_json::json;
use std::path::Path;

#[test]
fn written_fits_files_open_in_astropy_without_a_warning() {
    let folder = tempfile::tempdir().unwrap();
    let (visibilities, image) = (folder.path().join("a.idifits"), folder.path().join("a.fits"));
    let fell = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/hollin-fell/fell-1-clean.uvfits");
    let mut source = MemorySource::read(open(fell, &Selection::All).unwrap()[0].as_mut()).unwrap();
    write_idi(&visibilities, &mut [&mut source as &mut dyn BlockSource]).unwrap();
    let block = &source.blocks()[0];
    assert_eq!(source.blocks().len(), 1);

    let long = "a string that needs CONTINUE, with 'quotes' in it, ".repeat(5).trim_end().to_string();
    let reals = [-1.0 / 3600.0, 0.1, 1e22, 5e-324, 123456789012345680.0];
    let mut header = Header::new();
    header.set("LONGTEXT", long.as_str(), "").set("YES", true, "").set("COUNT", -42, "with a comment");
    let mut keywords = json!({ "LONGTEXT": long, "YES": true, "COUNT": -42 });
    for (n, real) in reals.into_iter().enumerate() {
        let key = format!("REAL{n}");
        header.set(&key, real, "bit for bit");
        keywords[&key] = json!(real);
    }
    header.history(&"history longer than one card ".repeat(6)).comment("and a comment");
    write_image_f64(&image, &header, &[3, 2], &reals.iter().copied().chain([7.0]).collect::<Vec<_>>()).unwrap();

    let observation = source.observation();
    compare(
        "visibilities.py",
        &json!({
            "visibilities": visibilities,
            "rows": {
                "uvw_m": block.uvw_m, "mjd_utc": block.mjd_utc, "first": block.first, "second": block.second,
                "re": block.data.iter().map(|v| v.re).collect::<Vec<_>>(),
                "im": block.data.iter().map(|v| v.im).collect::<Vec<_>>(),
                "weight": block.weight,
            },
            "stations_m": observation.stations.iter().map(|s| s.position_m).collect::<Vec<_>>(),
            "frequencies_hz": observation.frequencies_hz,
            "image": image,
            "keywords": keywords,
            "pixels": reals.iter().copied().chain([7.0]).collect::<Vec<_>>(),
        }),
    );
}
