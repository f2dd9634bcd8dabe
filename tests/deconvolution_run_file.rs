//! The table `[deconvolution]` of a run file: defaults, and what each key refuses.

use evensky::run::{Deconvolution, DeconvolutionMethod, NoiseSource, RunError, RunFile};
use std::path::Path;

const BEFORE: &str = "[[pointing]]\nvisibilities = \"a.fits\"\n[image]\ncentre_deg = [152.678, 41.863]\nsize_px = [40, 30]\n\
                      pixel_arcsec = 25\n";

fn parse(table: &str) -> Result<RunFile, RunError> {
    RunFile::parse(Path::new("folder/run.toml"), &format!("{BEFORE}{table}"))
}

#[test]
fn without_the_table_nothing_is_deconvolved() {
    assert_eq!(parse("").unwrap().deconvolution, Deconvolution::default());
    assert_eq!(Deconvolution::default().method, DeconvolutionMethod::None);
}

#[test]
fn defaults_and_all_keys() {
    let plain = parse("[deconvolution]\nmethod = \"clark\"\n").unwrap().deconvolution;
    assert_eq!(plain, Deconvolution { method: DeconvolutionMethod::Clark, line: 7, ..Deconvolution::default() });
    let all = "[deconvolution]\nmethod = \"multi-scale\"\nloop_gain = 0.2\nstop_at_noise = 4\nstop_at_jy = 1e-3\n\
               max_components = 500\nmax_major_cycles = 7\nmajor_depth = 0.3\nnoise = \"measured\"\n\
               scales_arcsec = [0, 60, 180.5]\nscale_bias = 0.4\nmask_above_noise = 5\nnon_negative = true\n\
               spectral_index = -0.7\nfit_points_above_noise = 20\nrestoring_beam_arcsec = [90, 60]\n\
               restoring_angle_deg = -30\n";
    let all = parse(all).unwrap().deconvolution;
    assert_eq!(all.method, DeconvolutionMethod::MultiScale);
    assert_eq!((all.loop_gain, all.stop_at_noise, all.stop_at_jy), (0.2, 4.0, 1e-3));
    assert_eq!((all.max_components, all.max_major_cycles, all.major_depth), (500, 7, 0.3));
    assert_eq!((all.noise, all.scale_bias, all.non_negative), (NoiseSource::Measured, 0.4, true));
    assert_eq!(all.scales_arcsec.as_deref(), Some(&[0.0, 60.0, 180.5][..]));
    assert_eq!(
        (all.mask_above_noise, all.fit_points_above_noise, all.spectral_index),
        (Some(5.0), Some(20.0), -0.7)
    );
    assert_eq!((all.restoring_beam_arcsec, all.restoring_angle_deg), (Some([90.0, 60.0]), -30.0));
}

/// A flux density asked for alone is not undercut by the default multiple of the noise; both may be asked for.
#[test]
fn a_flux_density_alone_is_the_only_level() {
    let of = |keys: &str| parse(&format!("[deconvolution]\nmethod = \"hogbom\"\n{keys}")).unwrap().deconvolution;
    assert_eq!(of("").stop_at_noise, 3.0);
    assert_eq!(of("stop_at_jy = 0.001\n").stop_at_noise, 0.0);
    assert_eq!(of("stop_at_jy = 0.001\nstop_at_noise = 3\n").stop_at_noise, 3.0);
    assert_eq!(of("stop_at_jy = 0\n").stop_at_noise, 3.0);
}

#[test]
fn frequency_terms_are_for_pixels() {
    let of = |keys: &str| parse(&format!("[deconvolution]\nmethod = \"clark\"\n{keys}"));
    assert_eq!(of("frequency_terms = 2\n").unwrap().deconvolution.frequency_terms, 2);
    let refused = of("frequency_terms = 2\nfit_points_above_noise = 9\n").unwrap_err().to_string();
    assert!(refused.contains("run.toml:9: deconvolution.frequency_terms"), "{refused}");
    assert!(refused.contains("or no fit_points_above_noise"), "{refused}");
}

/// Each bad value is the only complaint, on its line (8: after the table's line 7 and method) and with its key.
#[test]
fn every_key_refuses_what_it_cannot_mean() {
    for (line, key, part) in [
        ("frequency_terms = 0", "frequency_terms", "1 (one spectrum for all)"),
        ("frequency_terms = 4", "frequency_terms", "1 (one spectrum for all)"),
        ("frequency_terms = 2", "frequency_terms", "\"clark\" or \"hogbom\""),
        ("loop_gain = 0", "loop_gain", "greater than 0, at most 1"),
        ("loop_gain = 1.01", "loop_gain", "greater than 0, at most 1"),
        ("loop_gain = nan", "loop_gain", "greater than 0, at most 1"),
        ("stop_at_noise = -1", "stop_at_noise", "multiple of the local noise"),
        ("stop_at_noise = \"three\"", "stop_at_noise", "multiple of the local noise"),
        ("stop_at_jy = -0.1", "stop_at_jy", "a flux density"),
        ("stop_at_jy = inf", "stop_at_jy", "a flux density"),
        ("max_components = 0", "max_components", "a whole number"),
        ("max_components = 10.5", "max_components", "a whole number"),
        ("max_major_cycles = 0", "max_major_cycles", "a whole number"),
        ("major_depth = 1", "major_depth", "0.001 to 0.9"),
        ("noise = \"guessed\"", "noise", "\"weights\" or \"measured\""),
        ("scales_arcsec = [60, 120]", "scales_arcsec", "ascending from 0"),
        ("scales_arcsec = [0, 120, 60]", "scales_arcsec", "ascending from 0"),
        ("scales_arcsec = []", "scales_arcsec", "ascending from 0"),
        ("scales_arcsec = [0, -60]", "scales_arcsec", "ascending from 0"),
        ("scale_bias = 1", "scale_bias", "less than 1"),
        ("mask = \"no-mask.fits\"", "mask", "folder/no-mask.fits: no such file"),
        ("mask = 1", "mask", "a FITS image"),
        ("mask_circles = \"no-circles.csv\"", "mask_circles", "folder/no-circles.csv: no such file"),
        ("mask_above_noise = 0", "mask_above_noise", "greater than 0"),
        ("non_negative = 1", "non_negative", "true or false"),
        ("start_from = \"nothing.csv\"", "start_from", "folder/nothing.csv: no such file"),
        ("spectral_index = -11", "spectral_index", "-10 to 10"),
        ("fit_points_above_noise = -5", "fit_points_above_noise", "greater than 0"),
        ("restoring_beam_arcsec = [60, 90]", "restoring_beam_arcsec", "the larger first"),
        ("restoring_beam_arcsec = [60, 0]", "restoring_beam_arcsec", "greater than 0"),
        ("restoring_beam_arcsec = 60", "restoring_beam_arcsec", "[major, minor]"),
        ("restoring_angle_deg = 30", "restoring_angle_deg", "restoring_beam_arcsec beside it"),
        ("loopgain = 0.1", "loopgain", "did you mean \"loop_gain\"?"),
        ("stop_at_sigma = 3", "stop_at_sigma", "unknown key"),
        ("niter = 3", "niter", "expected one of: method, loop_gain"),
    ] {
        let error = parse(&format!("[deconvolution]\nmethod = \"multi-scale\"\n{line}\n")).expect_err(line);
        let message = error.to_string();
        assert_eq!(error.complaints().len(), 1, "{message}");
        assert!(message.starts_with(&format!("folder/run.toml:9: deconvolution.{key}: ")), "{line}: {message}");
        assert!(message.contains(part), "{line}: {message}");
    }
    let missing = parse("[deconvolution]\nloop_gain = 0.1\n").unwrap_err().to_string();
    assert!(missing.starts_with("folder/run.toml:7: deconvolution.method: missing"), "{missing}");
    let unknown = parse("[deconvolution]\nmethod = \"clerk\"\n").unwrap_err().to_string();
    assert!(unknown.contains("folder/run.toml:8: deconvolution.method: found the string \"clerk\""), "{unknown}");
    let points = parse("[deconvolution]\nmethod = \"clark\"\nscales_arcsec = [0, 9]\n").unwrap_err().to_string();
    assert!(points.contains("deconvolution.scales_arcsec: scales for a method that has only points"), "{points}");
}

#[test]
fn circles_are_read_and_refused_by_row() {
    for (table, at, part) in [
        ("ra_deg,dec_deg\n1,2\n", "1: radius_arcsec", "the columns ra_deg, dec_deg"),
        ("ra_deg,dec_deg,radius_arcsec\n1,2,0\n", "2: radius_arcsec", "greater than 0"),
        ("ra_deg,dec_deg,radius_arcsec\n1,2,3\n1,91,3\n", "3: dec_deg", "-90 to 90"),
        ("ra_deg,dec_deg,radius_arcsec\n1,,3\n", "2: dec_deg", "an empty cell"),
        ("ra_deg,dec_deg,radius_arcsec\n361,0,3\n", "2: ra_deg", "-360 to 360"),
        ("ra_deg,dec_deg,radius_arcsec\n", "1: ", "no rows"),
    ] {
        let folder = tempfile::tempdir().unwrap();
        std::fs::write(folder.path().join("circles.csv"), table).unwrap();
        let run = format!("{BEFORE}[deconvolution]\nmethod = \"clark\"\nmask_circles = \"circles.csv\"\n");
        let message = RunFile::parse(&folder.path().join("run.toml"), &run).expect_err(table).to_string();
        assert!(message.contains(&format!("circles.csv:{at}")), "{table:?}: {message}");
        assert!(message.contains(part), "{table:?}: {message}");
    }
    let folder = tempfile::tempdir().unwrap();
    let table = "name,ra_deg,dec_deg,radius_arcsec\n# bright\nA,152.5,41.5,120\n";
    std::fs::write(folder.path().join("circles.csv"), table).unwrap();
    let run = format!("{BEFORE}[deconvolution]\nmethod = \"clark\"\nmask_circles = \"circles.csv\"\n");
    let run = RunFile::parse(&folder.path().join("run.toml"), &run).unwrap();
    let circles = run.deconvolution.circles.as_ref().unwrap();
    assert_eq!((circles.len(), circles[0].centre_deg, circles[0].radius_arcsec), (1, [152.5, 41.5], 120.0));
    assert!(run.inputs().contains(&folder.path().join("circles.csv")), "it decides the result");
}
