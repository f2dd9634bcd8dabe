//! `evensky image` with a table `[deconvolution]`: products, record, files that go in, and Hollin Fell's clean files.

mod image_support;

use evensky::sky::{Component, Direction, ImageGeometry, read_components};
use image_support::{Folder, Invented, PRODUCTS, names_in, read_image, run_text, source, write_pointings};
use ndarray::Array2;
use std::f64::consts::{LN_2, PI};
use std::path::Path;
use std::sync::OnceLock;

const MORE: [&str; 9] = [
    "components.csv",
    "model.fits",
    "model.png",
    "noise.fits",
    "noise.png",
    "residual.fits",
    "residual.png",
    "sky.fits",
    "sky.png",
];
const AIM: (f64, f64) = (152.3, 41.7);
const TABLE: &str = "\n[deconvolution]\nmethod = \"clark\"\nstop_at_noise = 0\nstop_at_jy = 5e-3\n";

fn geometry() -> ImageGeometry {
    let centre = Direction::from_deg(AIM.0, AIM.1);
    ImageGeometry::new(centre, 100, 90, (40.0 / 3600f64).to_radians()).unwrap()
}

/// Two sources on pixels, 2 and 1 Jy.
const SOURCES: [(f64, f64, f64); 2] = [(50.0, 45.0, 2.0), (63.0, 30.0, 1.0)];

fn observed() -> Folder {
    let invented = Invented { times: 12, ..Invented::default() };
    let (observation, mut block) = invented.pointing("P", Direction::from_deg(AIM.0, AIM.1));
    let sky = SOURCES.map(|(x, y, jy)| source(geometry().direction_of(x, y).unwrap(), jy));
    invented.fill(&sky, &observation, &mut block);
    let folder = Folder::new();
    write_pointings(&folder.path("data.idifits"), &[(observation, block)]);
    folder
}

fn text(table: &str) -> String {
    run_text(&["data.idifits"], &geometry(), 1e-5) + table
}

/// One deconvolved run for all tests that look at it.
fn made() -> &'static Folder {
    static MADE: OnceLock<Folder> = OnceLock::new();
    MADE.get_or_init(|| {
        let folder = observed();
        folder.run_file(&text(TABLE));
        let ended = folder.imaged(&[]);
        assert!(ended.out.contains("model      clark: "), "{}", ended.out);
        assert!(ended.err.contains("major cycle 1: "), "{}", ended.err);
        folder
    })
}

#[test]
fn products_units_and_record() {
    let folder = made();
    let mut all: Vec<&str> = PRODUCTS.iter().chain(&MORE).copied().collect();
    all.sort_unstable();
    assert_eq!(names_in(&folder.out()), all);
    for (name, unit) in [
        ("sky", "Jy/beam"),
        ("residual", "Jy/beam"),
        ("model", "Jy/pixel"),
        ("noise", "Jy/beam"),
        ("dirty", "Jy/beam"),
    ] {
        let (header, image) = folder.product(&format!("{name}.fits"));
        assert_eq!(header.text("BUNIT").unwrap().as_deref(), Some(unit), "{name}");
        assert_eq!(image.dim(), (90, 100));
        assert_eq!(header.float("BMAJ").unwrap().is_some(), ["sky", "residual", "dirty"].contains(&name), "{name}");
    }
    let record = folder.record();
    let figures = &record["deconvolution"];
    assert_eq!(figures["method"], "clark");
    assert_eq!(figures["stop"], "flux-density");
    assert_eq!(figures["finished"], true);
    let cycles = figures["cycles"].as_array().unwrap();
    let counted: u64 = cycles.iter().map(|cycle| cycle["components"].as_u64().unwrap()).sum();
    assert_eq!(figures["components"].as_u64(), Some(counted));
    assert!(!cycles.is_empty() && counted > 20);
    let mut told: Vec<&str> =
        record["products"].as_array().unwrap().iter().filter_map(|product| product["path"].as_str()).collect();
    told.sort_unstable();
    assert_eq!(told, all);
    let page = std::fs::read_to_string(folder.out().join("report.html")).unwrap();
    assert!(page.contains("<h2>Deconvolution</h2>") && page.contains("no peak above the flux density asked for"));
    let bytes = std::fs::read(folder.out().join("sky.fits")).unwrap();
    assert!(String::from_utf8_lossy(&bytes).contains("HISTORY deconvolution: clark: "));
}

/// The images hang together: sky − residual is the restored model, whose peak at a lone source is its flux density; the
/// noise is one over the root of the weights; the model's flux is that of the components. Products hold f32.
#[test]
fn images_agree_with_each_other() {
    let folder = made();
    let image = |name: &str| folder.product(&format!("{name}.fits")).1;
    let (sky, residual, model, noise, weight) =
        (image("sky"), image("residual"), image("model"), image("noise"), image("weight"));
    let most = residual.iter().filter(|v| !v.is_nan()).map(|v| v.abs()).fold(0.0, f64::max);
    assert!(most > 0.0 && most <= 5.001e-3, "{most}");
    for (x, y, jy) in SOURCES {
        let at = [y as usize, x as usize];
        assert!((sky[at] - jy).abs() < 0.02 * jy, "{} for {jy}", sky[at]);
        assert!((noise[at] * weight[at].sqrt() - 1.0).abs() < 1e-6);
    }
    for ((s, r), n) in sky.iter().zip(&residual).zip(&noise) {
        assert!(s.is_nan() == r.is_nan() && s.is_nan() == n.is_nan(), "blank in all or in none");
    }
    let components = read_components(&folder.out().join("components.csv")).unwrap();
    let flux: f64 = components.iter().map(|c| c.flux_jy).sum();
    assert!((flux - model.sum()).abs() < 1e-5, "{flux} and {}", model.sum());
    assert!((flux - 3.0).abs() < 0.06, "{flux}");
    let told = folder.record()["deconvolution"]["model_jy"].as_f64().unwrap();
    assert!((told - flux).abs() < 1e-9);
}

/// A later run starts from the components, sees only a circle, and restores with another beam.
#[test]
fn files_go_in_and_a_beam_is_asked_for() {
    let folder = observed();
    std::fs::copy(made().out().join("components.csv"), folder.path("start.csv")).unwrap();
    let (ra, dec) = geometry().direction_of(50.0, 45.0).unwrap().to_deg();
    std::fs::write(folder.path("circles.csv"), format!("ra_deg,dec_deg,radius_arcsec\n{ra},{dec},300\n")).unwrap();
    let table = format!(
        "{TABLE}start_from = \"start.csv\"\nmask_circles = \"circles.csv\"\nrestoring_beam_arcsec = [200, 160]\n\
         restoring_angle_deg = 40\n"
    );
    folder.run_file(&text(&table));
    folder.imaged(&["--quiet"]);
    let record = folder.record();
    assert_eq!(record["deconvolution"]["components"].as_u64(), Some(0), "nothing is left to find");
    let (header, sky) = folder.product("sky.fits");
    assert!((header.float("BMAJ").unwrap().unwrap() * 3600.0 - 200.0).abs() < 1e-6);
    assert!((header.float("BPA").unwrap().unwrap() - 40.0).abs() < 1e-9);
    assert!((sky[[45, 50]] - 2.0).abs() < 0.1);
    let (_, before) = made().product("residual.fits");
    let (_, after) = folder.product("residual.fits");
    for (b, a) in before.iter().zip(&after).filter(|(b, _)| !b.is_nan()) {
        assert!((a - b).abs() < 1e-4, "{a} for {b}");
    }
    let inputs: Vec<&str> =
        record["inputs"].as_array().unwrap().iter().filter_map(|input| input["path"].as_str()).collect();
    for name in ["start.csv", "circles.csv"] {
        assert!(inputs.iter().any(|path| path.ends_with(name)), "{name} in {inputs:?}");
    }
}

/// A FITS mask on other pixels, components that are none, a count that ends it early: told with file, line, key.
#[test]
fn what_cannot_be_used_is_told() {
    let folder = observed();
    std::fs::copy(made().out().join("model.fits"), folder.path("mask.fits")).unwrap();
    std::fs::write(folder.path("sky.csv"), "name,ra_deg,dec_deg\nA,1,2\n").unwrap();
    let run = |table: &str, size: &str| {
        folder.run_file(&text(table).replace("size_px = [100, 90]", size));
        folder.image(&["--quiet"])
    };
    let line = 2 + text(TABLE).lines().count() - 1;
    let ended = run(&format!("{TABLE}mask = \"mask.fits\"\n"), "size_px = [100, 92]");
    assert_eq!(ended.status, Some(2), "{}", ended.err);
    let at = format!("run.toml:{line}: deconvolution.mask: ");
    assert!(ended.err.contains(&at) && ended.err.contains("its size is 100 × 90 × 1 × 1 pixels"), "{}", ended.err);
    let ended = run(&format!("{TABLE}start_from = \"sky.csv\"\n"), "size_px = [100, 90]");
    assert_eq!(ended.status, Some(2));
    assert!(ended.err.contains("deconvolution.start_from: ") && ended.err.contains("flux_jy"), "{}", ended.err);
    let ended = run(&format!("{TABLE}mask = \"mask.fits\"\nmax_components = 5\n"), "size_px = [100, 90]");
    assert_eq!(ended.status, Some(0), "{}", ended.err);
    assert!(ended.err.contains("ended before its levels were reached: the number of components"), "{}", ended.err);
    assert_eq!(folder.record()["deconvolution"]["components"].as_u64(), Some(5));
}

const FELL: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/data/hollin-fell");

/// The clean files of Hollin Fell: two dish classes, pointing offsets of two per cent of the width, three pointings, 24
/// sources between pixels with spectra of their own. Outside source: tests/data/hollin-fell/README.md. With compact
/// sources fitted, the residual stays below 1e-4 of the brightest source on every pixel that is not blank, and the model seen
/// with the restoring beam is the true sky so seen at each of the 24 places, three within one beam among them, to four times
/// as much and 1e-3 of itself: what little is left in the residual may be more of the sky, where beams are weak or sources
/// blend. (Measured: 2.2e-4 of the brightest at most.) The plain sum of the components about a source is another matter: it
/// hangs on spacings shorter than any baseline, and came out up to 1.4 % low for a source of pixels alone.
#[test]
fn hollin_fell_without_noise_leaves_less_than_a_ten_thousandth() {
    let folder = Folder::new();
    let mut text = format!("station_table = \"{FELL}/fell-stations.csv\"\n");
    for n in 1..=3 {
        text += &format!("[[pointing]]\nvisibilities = \"{FELL}/fell-{n}-clean.uvfits\"\n");
    }
    text += "[image]\ncentre_deg = [152.678, 41.863]\nsize_px = [176, 176]\npixel_arcsec = 60.0\ntolerance = 1e-5\n\
             [beams.dish13]\nshape = \"airy\"\ndiameter_m = 13.0\nblockage_m = 1.3\n\
             [beams.dish8]\nshape = \"gaussian\"\nhalf_power_deg = 1.58\nat_hz = 1.36e9\n\
             [deconvolution]\nmethod = \"clark\"\nstop_at_jy = 4e-5\nmax_components = 1000000\nmax_major_cycles = 60\n\
             fit_points_above_noise = 15\n";
    folder.run_file(&text);
    let ended = folder.imaged(&[]);
    println!("{}\n{}", ended.err, ended.out);
    let (header, residual) = read_image(&folder.out().join("residual.fits"));
    let hz = header.float("CRVAL3").unwrap().unwrap();
    let truth = read_components(&Path::new(FELL).join("fell-sky.csv")).unwrap();
    let brightest = truth.iter().map(|source| source.flux_at(hz)).fold(0.0, f64::max);
    let most = largest(&residual);
    println!("largest residual {most:.2e} Jy, {:.2e} of the brightest", most / brightest);
    assert!(most < 1e-4 * brightest, "{most:e} Jy left of {brightest}");
    let components = read_components(&folder.out().join("components.csv")).unwrap();
    assert_eq!(truth.len(), 24);
    // both skies seen with the restoring beam, at the place of every source
    let width = |key: &str| header.float(key).unwrap().unwrap().to_radians();
    let (major, minor, (sin, cos)) = (width("BMAJ"), width("BMIN"), width("BPA").sin_cos());
    let seen = |sky: &[Component], at: Direction| -> f64 {
        let one = |c: &Component| {
            let turn = (c.direction.ra - at.ra + 3.0 * PI).rem_euclid(2.0 * PI) - PI;
            let (east, north) = (turn * at.dec.cos(), c.direction.dec - at.dec);
            let (along, across) = (east * sin + north * cos, east * cos - north * sin);
            c.flux_at(hz) * (-4.0 * LN_2 * ((along / major).powi(2) + (across / minor).powi(2))).exp()
        };
        sky.iter().map(one).sum()
    };
    let mut worst = 0.0f64;
    for source in &truth {
        let (want, got) = (seen(&truth, source.direction), seen(&components, source.direction));
        println!("{} {want:.6} {got:.6}, {:.1e} of the brightest", source.name, (got - want) / brightest);
        let off = (got - want).abs() / (1e-3 * want + 4e-4 * brightest);
        worst = if off <= worst { worst } else { off };
    }
    assert!(worst <= 1.0, "a source is off by {worst:.2} of its bound");
}

fn largest(image: &Array2<f64>) -> f64 {
    image.iter().filter(|v| !v.is_nan()).map(|v| v.abs()).reduce(f64::max).unwrap_or(f64::NAN)
}

/// Frequency terms as a person asks for them: the maps are there, and sources that are flat have an index of 0 within what the level
/// of 5 mJy leaves of 1 Jy over the root mean square of the band of ξ (here below 0.04 of ν₀: 0.2).
#[test]
fn frequency_terms_make_maps_of_the_spectrum() {
    let folder = observed();
    folder.run_file(&text(&format!("{TABLE}frequency_terms = 3\n")));
    let ended = folder.imaged(&[]);
    let names = names_in(&folder.out());
    for name in ["spectral-index", "spectral-index-error", "spectral-curvature", "spectral-curvature-error"] {
        assert!(names.contains(&format!("{name}.fits")) && names.contains(&format!("{name}.png")), "{names:?}");
        let (header, image) = folder.product(&format!("{name}.fits"));
        assert_eq!(header.text("BUNIT").unwrap().unwrap_or_default(), "", "{name}");
        assert_eq!(image.dim(), (90, 100));
    }
    let (index, error) = (folder.product("spectral-index.fits").1, folder.product("spectral-index-error.fits").1);
    for (x, y, _) in SOURCES {
        let at = [y as usize, x as usize];
        println!("index {} ± {}", index[at], error[at]);
        assert!(index[at].abs() <= 0.2 && error[at] > 0.0, "{}", index[at]);
    }
    assert!(index[[3, 3]].is_nan());
    assert!(folder.record()["limits"].to_string().contains("Spectral indices"), "{}", ended.out);
}

/// A bright source at the corner of four pixels is a little wide in the restored image, whose model has pixels only; the visibilities
/// say that it is one point. Data without noise: places to 0.01 pixel, flux densities to 1e-3.
#[test]
fn a_bright_point_between_pixels_is_one_source() {
    let invented = Invented { times: 12, ..Invented::default() };
    let (observation, mut block) = invented.pointing("P", Direction::from_deg(AIM.0, AIM.1));
    let sources = [(50.5, 45.5, 2.0), (63.3, 30.4, 0.9)];
    let sky = sources.map(|(x, y, jy)| source(geometry().direction_of(x, y).unwrap(), jy));
    invented.fill(&sky, &observation, &mut block);
    let folder = Folder::new();
    write_pointings(&folder.path("data.idifits"), &[(observation, block)]);
    folder.run_file(&text(&format!("{TABLE}[measure]\nfind_above_noise = 5\n")));
    folder.imaged(&[]);
    let found = read_sources(&folder.out().join("sources.csv"));
    assert_eq!(found.len(), 2, "{found:?}");
    for ((x, y, jy), (place, flux)) in sources.iter().zip(&found) {
        let (px, py) = geometry().pixel_of(*place).unwrap();
        println!("({px:.4}, {py:.4}) {flux}");
        assert!((px - x).hypot(py - y) <= 0.01 && (flux - jy).abs() <= 1e-3 * jy, "({px}, {py}) {flux}");
    }
}

/// Places and flux densities of `sources.csv`, brightest first.
fn read_sources(path: &Path) -> Vec<(Direction, f64)> {
    let mut table = csv::Reader::from_path(path).unwrap();
    let headers = table.headers().unwrap().clone();
    let column = |name: &str| headers.iter().position(|h| h == name).unwrap();
    let columns = ["ra_deg", "dec_deg", "flux_jy"].map(column);
    let mut rows: Vec<(Direction, f64)> = table
        .records()
        .map(|row| {
            let row = row.unwrap();
            let [ra, dec, flux] = columns.map(|c| row[c].parse::<f64>().unwrap());
            (Direction::from_deg(ra, dec), flux)
        })
        .collect();
    rows.sort_by(|a, b| b.1.total_cmp(&a.1));
    rows
}
