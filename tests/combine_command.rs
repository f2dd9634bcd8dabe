//! `evensky combine` as a person meets it: what it leaves, what it says, and how it says no.

mod combine_support;

use combine_support::Sheet;
use evensky::fits::{FitsFile, Header, Value, write_image_f64};
use ndarray::Array2;
use serde_json::Value as Json;
use std::path::PathBuf;
use std::process::Command;

/// Two fields, `a.fits` and `b.fits` with `aw.fits` (weights) and `bn.fits` (noise), and a fields file for them.
struct Case(tempfile::TempDir);

const FIELDS: &str = "title = \"Two fields\"\n[[field]]\nimage = \"a.fits\"\nweight = \"aw.fits\"\n\
                      [[field]]\nimage = \"b.fits\"\nnoise = \"bn.fits\"\n";

fn first() -> Sheet {
    Sheet::default()
}

fn second() -> Sheet {
    Sheet { centre_deg: [152.8, 41.9], rotation_deg: 15.0, ..first() }
}

fn unit(sheet: &Sheet, bunit: &str) -> Sheet {
    Sheet { more: vec![("BUNIT", Value::from(bunit))], ..sheet.clone() }
}

fn even(sheet: &Sheet, value: f64) -> Array2<f64> {
    sheet.empty().mapv(|_| value)
}

impl Case {
    fn sound() -> Case {
        let case = Case(tempfile::tempdir().unwrap());
        let source = (first().wcs().direction_of(52.3, 61.9).unwrap(), 0.5);
        first().write(&case.path("a.fits"), &(first().sources(&[source]) + first().noise(1e-3, 5)));
        unit(&first(), "beam2 Jy-2").write(&case.path("aw.fits"), &even(&first(), 1e6));
        second().write(&case.path("b.fits"), &(second().sources(&[source]) + second().noise(2e-3, 6)));
        unit(&second(), "Jy/beam").write(&case.path("bn.fits"), &even(&second(), 2e-3));
        case.fields(FIELDS);
        case
    }

    fn path(&self, name: &str) -> PathBuf {
        self.0.path().join(name)
    }

    fn out(&self) -> PathBuf {
        self.path("out")
    }

    fn fields(&self, text: &str) {
        std::fs::write(self.path("fields.toml"), text).unwrap();
    }

    fn run(&self, flags: &[&str], status: i32) -> (String, String) {
        let output = Command::new(env!("CARGO_BIN_EXE_evensky"))
            .arg("combine")
            .arg(self.path("fields.toml"))
            .arg("--out")
            .arg(self.out())
            .args(flags)
            .output()
            .unwrap();
        let said = |bytes: &[u8]| String::from_utf8(bytes.to_vec()).unwrap();
        let (out, err) = (said(&output.stdout), said(&output.stderr));
        assert_eq!(output.status.code(), Some(status), "--- out\n{out}\n--- err\n{err}");
        (out, err)
    }

    fn record(&self) -> Json {
        serde_json::from_slice(&std::fs::read(self.out().join("run.json")).unwrap()).unwrap()
    }

    fn left(&self) -> Vec<String> {
        let Ok(folder) = std::fs::read_dir(self.out()) else { return Vec::new() };
        let mut names: Vec<String> =
            folder.map(|entry| entry.unwrap().file_name().to_string_lossy().into_owned()).collect();
        names.sort();
        names
    }

    /// Must be refused with this status, say all of these, and leave nothing.
    fn refused(&self, status: i32, said: &[&str]) {
        let (out, err) = self.run(&["--quiet"], status);
        assert_eq!(out, "");
        for part in said {
            assert!(err.contains(part), "{part:?} is not in: {err}");
        }
        assert!(!err.contains("panicked"), "{err}");
        assert_eq!(self.left(), Vec::<String>::new());
    }
}

#[test]
fn two_fields_give_a_mosaic_its_weights_pictures_and_record() {
    let case = Case::sound();
    let (out, err) = case.run(&[], 0);
    assert_eq!(case.left(), ["run.json", "sky.fits", "sky.png", "weight.fits", "weight.png"]);
    assert!(out.contains("a source of the beam's shape keeps its peak to "), "{out}");
    assert!(out.contains("sky.png") && !err.contains("warning"), "{out}\n{err}");
    let record = case.record();
    let figures = &record["combined"];
    let (peak, flux) =
        (figures["largest_peak_error"].as_f64().unwrap(), figures["largest_flux_error"].as_f64().unwrap());
    assert!(peak > 1e-6 && peak <= 1e-3 && flux > 1e-12 && flux <= 1e-3, "{peak} {flux}");
    assert_eq!(figures["fields"].as_array().unwrap().len(), 2);
    assert_eq!(figures["fields"][1]["places"], 25);
    assert_eq!(record["inputs"].as_array().unwrap().len(), 5);
    // two fields of weights 1e6 and 2.5e5 overlap somewhere: 0.894 mJy/beam
    let lowest = record["noise"]["lowest_jy_per_beam"].as_f64().unwrap();
    assert!((lowest - 1.25e6f64.sqrt().recip()).abs() <= 1e-3 * lowest, "{lowest}");
    let file = FitsFile::open(case.out().join("sky.fits")).unwrap();
    let header = &file.hdus()[0].header;
    assert_eq!(header.text("BUNIT").unwrap().as_deref(), Some("Jy/beam"));
    assert_eq!(header.text("OBJECT").unwrap().as_deref(), Some("Two fields"));
    assert_eq!(header.float("RESTFRQ").unwrap(), Some(1.4e9));
    assert!((header.float("BMAJ").unwrap().unwrap() * 3600.0 - 48.0).abs() < 0.2);
    assert!(header.history_lines().any(|line| line.contains("keeps its peak")));
    let highest = file.image_f64(0).unwrap().into_iter().filter(|v| v.is_finite()).fold(0.0, f64::max);
    // the nearest pixel is at most 0.5 off in both axes: exp(-4 ln2 (0.25/3.6² + 0.25/4.8²)) = 0.92 of the peak
    assert!((0.45..0.505).contains(&highest), "{highest}");
}

#[test]
fn json_is_one_object_on_standard_output() {
    let case = Case::sound();
    let (out, _) = case.run(&["--json"], 0);
    let said: Json = serde_json::from_str(&out).unwrap();
    assert_eq!(said["command"], "combine");
    assert!(said["look_first"].as_str().unwrap().ends_with("sky.png"));
}

#[test]
fn coarse_beams_and_different_frequencies_are_warned_about_and_recorded() {
    let case = Case::sound();
    let coarse = Sheet { beam: [26.0, 26.0, 0.0], hz: 1.5e9, ..second() };
    coarse.write(&case.path("b.fits"), &coarse.empty());
    let (_, err) = case.run(&["--quiet"], 0);
    assert!(err.contains("b.fits: the beam is sampled by 2.60 pixels"), "{err}");
    assert!(err.contains("frequencies from 1.400000e9 to 1.500000e9 Hz"), "{err}");
    let record = case.record();
    assert_eq!(record["warnings"].as_array().unwrap().len(), 2);
    assert_eq!(record["combined"]["lowest_hz"], 1.4e9);
    assert_eq!(record["combined"]["highest_hz"], 1.5e9);
    let hz = record["image"]["reference_hz"].as_f64().unwrap();
    // weights of 1e6 and 2.5e5 on as many pixels
    assert!((hz - 1.42e9).abs() < 1.0, "{hz}");
    assert_eq!(record["combined"]["convolved"], true);
}

#[test]
fn missing_file() {
    let case = Case::sound();
    std::fs::remove_file(case.path("bn.fits")).unwrap();
    case.refused(2, &["fields.toml:7: field[2].noise:", "bn.fits: no such file", "expected a FITS image"]);
}

#[test]
fn not_an_image() {
    let case = Case::sound();
    std::fs::write(case.path("a.fits"), "no FITS at all").unwrap();
    case.refused(1, &["a.fits: not a FITS file"]);
    write_image_f64(case.path("a.fits"), &Header::new(), &[7], &[0.0; 7]).unwrap();
    case.refused(1, &["a.fits: holds no image of two or more axes; expected"]);
}

#[test]
fn no_world_coordinates() {
    let case = Case::sound();
    for (key, value, said) in [
        ("CTYPE1", Value::Undefined, "keyword CTYPE1 is missing; expected celestial axes"),
        ("CTYPE1", Value::from("GLON-SIN"), "expected celestial axes, RA---xxx and DEC--xxx"),
        ("CTYPE1", Value::from("RA---CAR"), "CTYPE2 = 'DEC--SIN'; expected the projection of CTYPE1"),
        ("CRVAL2", Value::Undefined, "keyword CRVAL2 is missing"),
        ("CDELT1", Value::from(0.0), "CDELT1 = 0"),
        ("RADESYS", Value::from("FK4"), "RADESYS = 'FK4'; expected ICRS, or FK5 with EQUINOX 2000"),
        ("CUNIT1", Value::from("rad"), "CUNIT1 = 'rad'; expected deg"),
        ("PV1_1", Value::from(3.0), "PV1_1 = 3"),
        ("PC001002", Value::from(0.1), "PCi_j in today's form"),
        ("CROTA1", Value::from(20.0), "CROTA1 = 20"),
    ] {
        let sheet = Sheet { more: vec![(key, value)], ..first() };
        sheet.write(&case.path("a.fits"), &sheet.empty());
        case.refused(1, &["a.fits: ", said]);
    }
    let old = Sheet { more: vec![("RADESYS", Value::Undefined), ("EPOCH", Value::from(1950.0))], ..first() };
    old.write(&case.path("a.fits"), &old.empty());
    case.refused(1, &["EPOCH = 1950", "expected 2000 (J2000)"]);
    let distorted = Sheet { projection: "TAN-SIP", ..first() };
    distorted.write(&case.path("a.fits"), &distorted.empty());
    case.refused(1, &["a zenithal projection without distortions: SIN, TAN, ARC, STG or ZEA"]);
    let mut cube = first().header();
    cube.set("CTYPE3", "FREQ", "").set("CRVAL3", 1.4e9, "");
    write_image_f64(case.path("a.fits"), &cube, &[120, 110, 2], &vec![0.0; 120 * 110 * 2]).unwrap();
    case.refused(1, &["NAXIS3 = 2", "cut out one plane"]);
}

#[test]
fn weights_on_other_pixels() {
    let case = Case::sound();
    let other = Sheet { size: [119, 110], ..first() };
    unit(&other, "beam2 Jy-2").write(&case.path("aw.fits"), &even(&other, 1e6));
    case.refused(
        1,
        &["aw.fits: has 119 × 110 pixels, its image", "a.fits 120 × 110", "must lie on the pixels of its image"],
    );
    let moved = Sheet { reference: [61.0, 56.0], ..first() };
    unit(&moved, "beam2 Jy-2").write(&case.path("aw.fits"), &even(&moved, 1e6));
    case.refused(1, &["aw.fits: its pixel (0, 0), counted from 0, lies 1.00 pixels off"]);
}

#[test]
fn other_units() {
    let case = Case::sound();
    unit(&first(), "K").write(&case.path("a.fits"), &first().empty());
    case.refused(1, &["a.fits: BUNIT is \"K\"; expected Jy/beam"]);
    unit(&first(), "mJy/beam").write(&case.path("a.fits"), &first().empty());
    case.refused(1, &["a.fits: BUNIT is \"mJy/beam\"; expected Jy/beam"]);
    let case = Case::sound();
    unit(&first(), "Jy/beam").write(&case.path("aw.fits"), &even(&first(), 1e6));
    case.refused(1, &["aw.fits: BUNIT is \"Jy/beam\"; expected (Jy/beam)^-2", "given as noise"]);
    let case = Case::sound();
    unit(&second(), "beam2 Jy-2").write(&case.path("bn.fits"), &even(&second(), 1e6));
    case.refused(1, &["bn.fits: BUNIT is \"beam2 Jy-2\"; expected Jy/beam", "given as weight"]);
}

#[test]
fn no_beam_no_frequency() {
    let case = Case::sound();
    for (key, said) in [
        ("BMAJ", "keyword BMAJ is missing; expected the restoring beam"),
        ("BMIN", "keyword BMIN is missing"),
        ("BPA", "keyword BPA is missing; expected the position angle"),
        ("RESTFRQ", "the frequency in Hz, here or as an axis FREQ"),
    ] {
        let sheet = Sheet { more: vec![(key, Value::Undefined)], ..second() };
        sheet.write(&case.path("b.fits"), &sheet.empty());
        case.refused(1, &["b.fits: primary header: ", said]);
    }
}

#[test]
fn a_beam_that_cannot_be() {
    let case = Case::sound();
    for beam in [[48.0 * 3600.0, 36.0 * 3600.0, 25.0], [0.013, 0.01, 0.0]] {
        let sheet = Sheet { beam, ..second() };
        sheet.write(&case.path("b.fits"), &sheet.empty());
        case.refused(1, &["b.fits: BMAJ and BMIN make a beam of", "(both are in degrees)"]);
    }
}

#[test]
fn fields_of_which_nothing_is_left() {
    let case = Case::sound();
    let small = Sheet { size: [11, 30], reference: [5.3, 9.7], rotation_deg: 12.0, ..first() };
    small.write(&case.path("a.fits"), &small.empty());
    case.fields("[[field]]\nimage = 'a.fits'\nnoise_jy = 1\n");
    case.refused(1, &["nothing is left of the fields", "6 pixels along every edge"]);
}

#[test]
fn no_overlap_with_the_pixels_wanted() {
    let case = Case::sound();
    let image = "[image]\ncentre_deg = [10.0, 41.8]\nsize_px = [50, 60]\npixel_arcsec = 10.0\n";
    case.fields(&format!("{FIELDS}{image}"));
    case.refused(
        1,
        &["no field overlaps the pixels of [image] (centre [10.0, 41.8]", "around [152.59", "compare centre_deg"],
    );
    // one field on it, one not: made, and said
    case.fields(&format!("{FIELDS}{}", image.replace("10.0, 41.8", "152.45, 41.7")));
    let (out, err) = case.run(&["--quiet"], 0);
    assert!(err.contains("b.fits: adds nothing") && out.contains("1 of 2"), "{out}\n{err}");
}

#[test]
fn all_weights_zero() {
    let case = Case::sound();
    for value in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        unit(&first(), "beam2 Jy-2").write(&case.path("aw.fits"), &even(&first(), value));
        case.refused(1, &["a.fits: all its weights are zero, negative or blank; leave this field out"]);
    }
}

#[test]
fn too_large_an_output() {
    let case = Case::sound();
    let image = "[image]\ncentre_deg = [152.6, 41.8]\nsize_px = [20000, 20000]\npixel_arcsec = 0.5\n";
    case.fields(&format!("{FIELDS}{image}"));
    case.refused(1, &["20000 × 20000 pixels of 0.5000 arcsec", "at most 268435456", "larger pixel"]);
}

#[test]
fn unknown_key() {
    let case = Case::sound();
    case.fields(&FIELDS.replace("noise =", "nose ="));
    case.refused(2, &["fields.toml:7: field[2].nose: unknown key (did you mean \"noise\"?)"]);
}

#[test]
fn output_that_cannot_be_made() {
    let case = Case::sound();
    std::fs::write(case.out(), "a file in the way").unwrap();
    let (_, err) = case.run(&["--quiet"], 1);
    assert!(err.contains("the output folder cannot be made"), "{err}");
}

/// The folder of a field's own sky.fits and weight.fits, as `evensky image` makes it: nothing there is replaced.
#[test]
fn products_never_replace_inputs() {
    let case = Case::sound();
    std::fs::create_dir(case.out()).unwrap();
    for (from, to) in [("a.fits", "sky.fits"), ("aw.fits", "weight.fits")] {
        std::fs::copy(case.path(from), case.out().join(to)).unwrap();
    }
    let before = std::fs::read(case.out().join("weight.fits")).unwrap();
    for named in
        ["image = \"out/sky.fits\"\nweight = \"aw.fits\"", "image = \"a.fits\"\nweight = \"out/weight.fits\""]
    {
        case.fields(&FIELDS.replace("image = \"a.fits\"\nweight = \"aw.fits\"", named));
        let (_, err) = case.run(&["--quiet"], 1);
        assert!(err.contains("is an input") && err.contains("--out"), "{err}");
    }
    assert_eq!(std::fs::read(case.out().join("weight.fits")).unwrap(), before);
    assert!(!case.out().join("run.json").exists());
}
