//! `evensky image --continue`: a run killed at any moment goes on to the products of one that never stopped.

mod image_support;

use evensky::sky::{Direction, ImageGeometry};
use image_support::{Folder, Invented, evensky, names_in, run_text, source, write_pointings};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::process::Stdio;
use std::time::{Duration, Instant};

const STATE: &str = "deconvolution.state";
const TABLE: &str = "\n[deconvolution]\nmethod = \"clark\"\nstop_at_noise = 0\nstop_at_jy = 1e-3\n\
                     max_major_cycles = 12\nmajor_depth = 0.3\nfit_points_above_noise = 10\n";

fn geometry() -> ImageGeometry {
    ImageGeometry::new(Direction::from_deg(152.3, 41.7), 100, 90, (40.0 / 3600f64).to_radians()).unwrap()
}

/// Sources between pixels and on them: some cycles, and points fitted between.
fn observed() -> Folder {
    let invented = Invented { times: 12, ..Invented::default() };
    let (observation, mut block) = invented.pointing("P", Direction::from_deg(152.3, 41.7));
    let sky = [(50.0, 45.0, 2.0), (63.3, 30.4, 1.0), (30.7, 60.2, 0.4), (70.0, 66.0, 0.1)]
        .map(|(x, y, jy)| source(geometry().direction_of(x, y).unwrap(), jy));
    invented.fill(&sky, &observation, &mut block);
    let folder = Folder::new();
    write_pointings(&folder.path("data.idifits"), &[(observation, block)]);
    folder.run_file(&(run_text(&["data.idifits"], &geometry(), 1e-4) + TABLE));
    folder
}

const THREADS: [&str; 2] = ["--threads", "2"];

fn assert_same_products(folder: &Folder, whole: &Folder) {
    for name in ["sky.fits", "residual.fits", "model.fits", "dirty.fits"] {
        let (got, want) = (folder.product(name).1, whole.product(name).1);
        // bit for bit, blank pixels too
        let same = got.iter().zip(&want).all(|(a, b)| a.to_bits() == b.to_bits());
        assert!(same && got.dim() == want.dim(), "{name}");
    }
    let components = |folder: &Folder| std::fs::read_to_string(folder.out().join("components.csv")).unwrap();
    assert_eq!(components(folder), components(whole));
}

/// Starts the run with `flags` and kills it (SIGKILL on Unix) when `now` says so; false when it ended first.
fn killed(folder: &Folder, flags: &[&str], mut now: impl FnMut() -> bool) -> bool {
    let mut child = evensky()
        .args(["image", "run.toml", "--out", "out", "--quiet"])
        .args(THREADS)
        .args(flags)
        .current_dir(folder.path(""))
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn()
        .unwrap();
    loop {
        if child.try_wait().unwrap().is_some() {
            return false;
        }
        if now() {
            child.kill().unwrap();
            child.wait().unwrap();
            return true;
        }
        std::thread::sleep(Duration::from_millis(1));
    }
}

/// Killed once as soon as a state is there, then at random moments, until it has ended: the same products bit for bit as a
/// run that never stopped (same number of threads). Moments depend on the machine; what is asserted does not.
#[test]
fn a_killed_run_goes_on_to_the_same_products() {
    let whole = observed();
    let started = Instant::now();
    whole.imaged(&THREADS);
    let took = started.elapsed();
    assert!(!whole.out().join(STATE).exists(), "an ended run leaves no state");
    assert!(whole.record()["deconvolution"]["cycles"].as_array().unwrap().len() > 3);

    let folder = observed();
    std::fs::create_dir_all(folder.out()).unwrap();
    let state = folder.out().join(STATE);
    assert!(killed(&folder, &[], || state.exists()), "a state appears before the run ends");
    let mut rng = ChaCha8Rng::seed_from_u64(0x5709);
    for _ in 0..6 {
        let moment = Instant::now() + took.mul_f64(rng.random_range(0.3..0.9));
        if !killed(&folder, &["--continue"], || Instant::now() >= moment) {
            assert_same_products(&folder, &whole);
            break;
        }
    }
    let ended = folder.imaged(&["--threads", "2", "--continue"]);
    if folder.record()["deconvolution"]["continued_after_cycle"].is_null() {
        // the last run that was to be killed had ended by itself: it left products, and this one began anew
        assert!(ended.err.contains("starts from the beginning"), "{}", ended.err);
    } else {
        assert!(ended.err.contains("going on after major cycle"), "{}", ended.err);
    }
    assert_same_products(&folder, &whole);
    assert!(!state.exists());
}

/// A state of the first cycle, kept aside, is gone on from; changed, damaged or missing ones are told of.
#[test]
fn a_state_of_another_run_is_refused_and_none_is_no_error() {
    let folder = observed();
    // with frequency terms, which are part of a state
    let table = TABLE.replace("fit_points_above_noise = 10", "frequency_terms = 2");
    let text = run_text(&["data.idifits"], &geometry(), 1e-4) + &table;
    folder.run_file(&text);
    let whole = observed();
    whole.run_file(&text);
    whole.imaged(&THREADS);
    let ended = folder.imaged(&["--threads", "2", "--continue"]);
    assert!(ended.err.contains("is not there") && ended.err.contains("starts from the beginning"), "{}", ended.err);

    let state = folder.out().join(STATE);
    let _ = std::fs::remove_dir_all(folder.out());
    std::fs::create_dir_all(folder.out()).unwrap();
    assert!(killed(&folder, &[], || state.exists()));
    let kept = std::fs::read(&state).unwrap();

    // settings that change the result
    folder.run_file(&text.replace("max_major_cycles = 12", "max_major_cycles = 13"));
    let refused = folder.image(&["--continue"]);
    assert_eq!(refused.status, Some(1), "{}", refused.err);
    assert!(refused.err.contains(STATE) && refused.err.contains("belongs to another run"), "{}", refused.err);
    // layout that does not
    folder.run_file(&format!("# a remark\n{text}"));
    std::fs::write(&state, &kept[..kept.len() - 9]).unwrap();
    let refused = folder.image(&["--continue"]);
    assert_eq!(refused.status, Some(1), "{}", refused.err);
    assert!(refused.err.contains("is damaged"), "{}", refused.err);

    std::fs::write(&state, &kept).unwrap();
    let ended = folder.imaged(&["--threads", "2", "--continue"]);
    assert!(ended.err.contains("going on after major cycle"), "{}", ended.err);
    assert!(folder.record()["deconvolution"]["continued_after_cycle"].as_u64() >= Some(1));
    assert_same_products(&folder, &whole);
    let (got, want) = (folder.product("spectral-index.fits").1, whole.product("spectral-index.fits").1);
    assert!(got.iter().zip(&want).all(|(a, b)| a.to_bits() == b.to_bits()));
    assert!(names_in(&folder.out()).iter().all(|name| name != STATE));
}
