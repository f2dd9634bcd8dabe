//! `[measure]` in the run file and in `evensky image`: every key refused with file, line and key; the tables appear; without
//! the table nothing changes.

mod image_support;

use evensky::run::{FluxesFrom, RunError, RunFile, SourceShape};
use evensky::sky::{Component, Direction, ImageGeometry};
use image_support::{Folder, Invented, names_in, run_text, write_pointings};
use num_complex::Complex32;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use std::path::Path;

const HEAD: &str = "[[pointing]]\nvisibilities = \"a.fits\"\n[measure]\n";

fn complaint(keys: &str) -> String {
    match RunFile::parse(Path::new("run.toml"), &format!("{HEAD}{keys}")).unwrap_err() {
        RunError::Complaints(list) => {
            assert_eq!(list.len(), 1, "{keys:?} gave {list:?}");
            list[0].to_string()
        }
        other => panic!("{other}"),
    }
}

#[test]
fn every_key_says_what_is_wrong_with_it() {
    for (keys, said) in [
        (
            "find_above_nose = 5",
            "run.toml:4: measure.find_above_nose: unknown key (did you mean \"find_above_noise\"?)",
        ),
        (
            "find_above_noise = \"5\"",
            "run.toml:4: measure.find_above_noise: found the string \"5\"; expected a multiple",
        ),
        ("find_above_noise = 0", "measure.find_above_noise: found the number 0"),
        ("find_above_noise = -3.5", "measure.find_above_noise: found the number -3.5"),
        ("find_above_noise = inf", "measure.find_above_noise: found the number inf"),
        ("find_above_noise = nan", "measure.find_above_noise: found the number nan"),
        ("island_above_noise = 0", "measure.island_above_noise: found the number 0"),
        (
            "find_above_noise = 4\nisland_above_noise = 4.5",
            "run.toml:5: measure.island_above_noise: islands above 4.5 times the noise, peaks above 4; expected",
        ),
        ("rounds = -1", "measure.rounds: found the number -1; expected a number of further searches"),
        ("rounds = 2.5", "measure.rounds: found the number 2.5"),
        (
            "shape = \"round\"",
            "measure.shape: found the string \"round\"; expected \"auto\", \"point\" or \"gaussian\"",
        ),
        ("fluxes_from = \"map\"", "measure.fluxes_from: found the string \"map\"; expected \"visibilities\" or"),
        ("errors = 1", "measure.errors: found the number 1; expected \"covariance\" or \"condon\""),
        ("spectral_index_error = -0.1", "measure.spectral_index_error: found the number -0.1"),
        (
            "assumed_spectral_index = 11",
            "measure.assumed_spectral_index: found the number 11; expected a spectral index",
        ),
        ("positions = \"\"", "measure.positions: found an empty string; expected the name of a CSV list"),
        ("positions = [1, 2]", "measure.positions: found the list [1, 2]"),
        (
            "positions = \"p.csv\"\nfind_above_noise = 5",
            "run.toml:5: measure.find_above_noise: find_above_noise beside",
        ),
        ("positions = \"p.csv\"\nshape = \"point\"", "run.toml:5: measure.shape: shape beside positions"),
        ("positions = \"p.csv\"\nerrors = \"condon\"", "measure.errors: errors beside positions"),
        ("positions = \"p.csv\"\nrounds = 3", "measure.rounds: rounds beside positions"),
        ("positions = \"p.csv\"\nisland_above_noise = 2", "measure.island_above_noise: island_above_noise beside"),
        (
            "positions = \"p.csv\"\nfluxes_from = \"image\"",
            "run.toml:5: measure.fluxes_from: \"image\" beside positions",
        ),
        ("fluxes_from = \"image\"\nrounds = 2", "run.toml:5: measure.rounds: further rounds with"),
        (
            "fluxes_from = \"image\"\nspectral_index_error = 0.2",
            "run.toml:5: measure.spectral_index_error: a spectral",
        ),
    ] {
        let got = complaint(keys);
        assert!(got.contains(said), "{keys:?} gave {got:?}");
    }
    let error =
        RunFile::parse(Path::new("run.toml"), "measure = 5\n[[pointing]]\nvisibilities = \"a\"\n").unwrap_err();
    assert!(error.to_string().contains("run.toml:1: measure: found the number 5; expected a table"), "{error}");
}

#[test]
fn defaults_are_filled_in_and_give_way() {
    let run = RunFile::parse(Path::new("run.toml"), HEAD).unwrap();
    let measure = run.measure().unwrap().unwrap();
    assert_eq!((measure.find_above_noise.value, measure.island_above_noise.value), (5.0, 3.0));
    assert_eq!((measure.shape, measure.fluxes_from), (SourceShape::Auto, FluxesFrom::Visibilities));
    // a low search takes its islands along
    let run = RunFile::parse(Path::new("run.toml"), &format!("{HEAD}find_above_noise = 2\n")).unwrap();
    assert_eq!(run.measure().unwrap().unwrap().island_above_noise.value, 2.0);
    let none = RunFile::parse(Path::new("run.toml"), "[[pointing]]\nvisibilities = \"a.fits\"\n").unwrap();
    assert!(none.measure().unwrap().is_none());
}

/// A run of its own: two pointings that see three sources, noise of 10 mJy a visibility.
fn scene(folder: &Folder, measure: &str) -> Vec<Component> {
    let centre = Direction::from_deg(152.678, 41.863);
    let geometry = ImageGeometry::new(centre, 150, 150, (30.0_f64 / 3600.0).to_radians()).unwrap();
    let sky: Vec<Component> = [(-0.25, 0.1, 0.5), (0.2, 0.15, 0.3), (0.05, -0.28, 0.2)]
        .iter()
        .enumerate()
        .map(|(i, &(east, north, flux_jy))| Component {
            name: format!("T{}", i + 1),
            direction: centre.frame().direction(f64::to_radians(east), f64::to_radians(north)).unwrap(),
            flux_jy,
            reference_hz: 1.33e9,
            spectral_index: -0.8,
        })
        .collect();
    let invented = Invented { times: 12, ..Invented::default() };
    let mut random = ChaCha8Rng::seed_from_u64(31);
    let aims = [centre, centre.frame().direction(0.006, 0.002).unwrap()];
    let pointings: Vec<_> = aims
        .iter()
        .zip(["P1", "P2"])
        .map(|(&aim, name)| {
            let (observation, mut block) = invented.pointing(name, aim);
            invented.fill(&sky, &observation, &mut block);
            for (value, weight) in block.data.iter_mut().zip(&mut block.weight) {
                *weight = if *weight > 0.0 { 1e4 } else { 0.0 };
                let mut draw = || -> f32 { StandardNormal.sample(&mut random) };
                *value += Complex32::new(0.01 * draw(), 0.01 * draw());
            }
            (observation, block)
        })
        .collect();
    write_pointings(&folder.path("data.idifits"), &pointings);
    folder.run_file(&format!("{}\n[measure]\n{measure}", run_text(&["data.idifits"], &geometry, 1e-4)));
    sky
}

fn table(folder: &Folder) -> Vec<std::collections::BTreeMap<String, String>> {
    let mut reader = csv::Reader::from_path(folder.out().join("sources.csv")).unwrap();
    reader.deserialize().map(|row| row.unwrap()).collect()
}

/// Found and given alike: each flux density within 4.5 errors of the truth, three sources and no other.
#[test]
fn sources_are_measured_and_every_table_is_written() {
    for measure in ["find_above_noise = 6.0", "positions = \"sky.csv\""] {
        let folder = Folder::new();
        let sky = scene(&folder, measure);
        let rows: Vec<String> = sky
            .iter()
            .map(|c| {
                let (ra, dec) = c.direction.to_deg();
                format!("{},{ra},{dec},-0.8", c.name)
            })
            .collect();
        std::fs::write(
            folder.path("sky.csv"),
            format!("name,ra_deg,dec_deg,spectral_index\n{}\n", rows.join("\n")),
        )
        .unwrap();
        let ended = folder.imaged(&[]);
        assert!(ended.out.contains("sources    3 sources, "), "{}", ended.out);
        let written = names_in(&folder.out());
        for name in ["sources.csv", "sources.vot", "sources.fits", "flux-covariance.csv"] {
            assert!(written.iter().any(|w| w == name), "{written:?}");
        }
        let found = table(&folder);
        assert_eq!(found.len(), 3);
        let record = folder.record();
        assert_eq!(record["measured"]["sources"], 3);
        let page = std::fs::read_to_string(folder.out().join("report.html")).unwrap();
        for c in &sky {
            let (ra, dec) = c.direction.to_deg();
            let number =
                |row: &std::collections::BTreeMap<String, String>, key: &str| row[key].parse::<f64>().unwrap();
            let row = found
                .iter()
                .min_by(|a, b| {
                    let far = |r| (number(r, "ra_deg") - ra).hypot(number(r, "dec_deg") - dec);
                    far(a).total_cmp(&far(b))
                })
                .unwrap();
            let truth = c.flux_at(number(row, "reference_hz"));
            let z = (number(row, "flux_jy") - truth) / number(row, "flux_error_jy");
            assert!(z.abs() < 4.5, "{} with {measure}: {z}", c.name);
            assert_eq!(row["pointings"], "2");
            assert!(number(row, "response") > 0.1 && number(row, "noise_jy_per_beam") > 0.0);
            assert!((number(row, "peak_jy_per_beam") / truth - 1.0).abs() < 0.5);
            assert!(page.contains(&row["name"]), "{} is not on the page", row["name"]);
        }
        let inputs: Vec<&str> =
            record["inputs"].as_array().unwrap().iter().map(|i| i["path"].as_str().unwrap()).collect();
        assert_eq!(inputs.iter().any(|path| path.ends_with("sky.csv")), measure.starts_with("positions"));
    }
}

#[test]
fn fluxes_from_the_image_alone() {
    let folder = Folder::new();
    let sky =
        scene(&folder, "fluxes_from = \"image\"\nshape = \"point\"\nerrors = \"condon\"\nfind_above_noise = 40\n");
    let ended = folder.imaged(&[]);
    assert!(ended.err.contains("side lobes"), "{}", ended.err);
    let found = table(&folder);
    assert!(found.len() >= sky.len() && found.iter().all(|row| row["method"] == "image-point"));
    assert!(!folder.out().join("flux-covariance.csv").exists());
}

#[test]
fn bad_lists_are_refused_before_the_long_work() {
    for (content, status, said) in [
        (None, 2, "measure.positions"),
        (Some("name,ra_deg\nA,1\n"), 1, "column dec_deg: missing"),
        (Some("name,ra_deg,dec_deg\n"), 1, "no rows"),
        (Some("name,ra_deg,dec_deg\nA,1,x\n"), 1, "row 1, column dec_deg: \"x\""),
    ] {
        let folder = Folder::new();
        scene(&folder, "positions = \"places.csv\"");
        if let Some(content) = content {
            std::fs::write(folder.path("places.csv"), content).unwrap();
        }
        let ended = folder.image(&[]);
        assert_eq!(ended.status, Some(status), "{}", ended.err);
        assert!(ended.err.contains(said) && ended.err.contains("places.csv"), "{}", ended.err);
        assert!(!ended.err.contains("gridding"), "it worked before it complained: {}", ended.err);
    }
}

/// Twins and sources out of sight: told in the summary and the table, and the run is not lost.
#[test]
fn twins_and_sources_out_of_sight_are_told() {
    let folder = Folder::new();
    let sky = scene(&folder, "positions = \"places.csv\"");
    let (ra, dec) = sky[0].direction.to_deg();
    let twin = dec + 1e-7;
    let text = format!("name,ra_deg,dec_deg\nA,{ra},{dec}\nB,{ra},{twin}\nbehind,332.7,-41.9\n");
    std::fs::write(folder.path("places.csv"), text).unwrap();
    let ended = folder.imaged(&[]);
    assert!(ended.err.contains("A and B cannot be told apart"), "{}", ended.err);
    let found = table(&folder);
    assert!(found[1]["flux_jy"].is_empty() && found[1]["remarks"].contains("its flux is in A"), "{:?}", found[1]);
    assert!(found[0]["remarks"].contains("holds the flux of B too"), "{:?}", found[0]);
    assert!(found[2]["flux_jy"].is_empty() && found[2]["remarks"] == "seen by no visibility", "{:?}", found[2]);
    assert_eq!(found[2]["pointings"], "0");
}
