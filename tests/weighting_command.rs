//! Weights as a person asks for them: `weight_scale`, `[weighting]`, and what record, summary and products tell of them.

mod image_support;

use evensky::sky::{Direction, ImageGeometry};
use image_support::{Folder, Invented, run_text, source, weighted_difference, write_pointings};
use num_complex::Complex32;

const TOLERANCE: f64 = 1e-4;

fn image(centre: Direction) -> ImageGeometry {
    ImageGeometry::new(centre, 40, 36, (70.0 / 3600f64).to_radians()).unwrap()
}

/// A file whose weights are multiplied by 4 counts four times as much in the mosaic, and the noise follows: against direct sums
/// of both files. Bounds: the promise of each sum, an L2 norm over the field.
#[test]
fn a_weight_scale_multiplies_the_weights_of_its_file() {
    let folder = Folder::new();
    let invented = Invented::default();
    let geometry = image(Direction::from_deg(152.6, 41.5));
    let a = invented.pointing("A", Direction::from_deg(152.4, 41.6));
    let b = Invented { seed: 11, ..Invented::default() }.pointing("BB", Direction::from_deg(152.8, 41.4));
    let sums = |pointing: &_| invented.exact(std::slice::from_ref(pointing), &geometry);
    let (of_a, of_b) = (sums(&a), sums(&b));
    write_pointings(&folder.path("a.idifits"), &[a]);
    write_pointings(&folder.path("b.idifits"), &[b]);
    let text = run_text(&["a.idifits", "b.idifits"], &geometry, TOLERANCE);
    let mut lowest = Vec::new();
    for (scale_a, scale_b) in [(1.0, 1.0), (1.0, 4.0), (4.0, 4.0)] {
        let scaled = |text: &str, file: &str, scale: f64| {
            text.replace(&format!("{file}\"\n"), &format!("{file}\"\nweight_scale = {scale:?}\n"))
        };
        folder.run_file(&scaled(&scaled(&text, "a.idifits", scale_a), "b.idifits", scale_b));
        folder.imaged(&["--quiet"]);
        let (weight, dirty) = (folder.product("weight.fits").1, folder.product("dirty.fits").1);
        let normaliser = &of_a.normaliser * scale_a + &of_b.normaliser * scale_b;
        let numerator = &of_a.numerator * scale_a + &of_b.numerator * scale_b;
        let ones = ndarray::Array2::ones(weight.dim());
        let off = weighted_difference(&weight, &normaliser, &ones);
        let off_dirty = weighted_difference(&dirty, &(&numerator / &normaliser), &normaliser);
        println!("scales {scale_a}, {scale_b}: weight map off by {off:.1e}, image by {off_dirty:.1e}");
        assert!(off <= TOLERANCE && off_dirty <= 2.0 * TOLERANCE, "{scale_a}, {scale_b}: {off:e}, {off_dirty:e}");
        let record = folder.record();
        assert_eq!(record["settings"]["pointings"][1]["weight_scale"].as_f64(), Some(scale_b));
        lowest.push(record["noise"]["lowest_jy_per_beam"].as_f64().unwrap());
    }
    assert!((lowest[0] / lowest[2] - 2.0).abs() < 1e-6, "four times the weight, half the noise: {lowest:?}");
    for bad in ["1e39", "1e-50", "0", "-1", "nan", "1e13", "\"4\""] {
        folder.run_file(&text.replace("b.idifits\"\n", &format!("b.idifits\"\nweight_scale = {bad}\n")));
        let ended = folder.image(&[]);
        assert_eq!(ended.status, Some(2), "{bad}: {}", ended.err);
        for words in ["weight_scale", "1e-12 to 1e12", "run.toml:6:"] {
            assert!(ended.err.contains(words), "{bad}: {} lacks {words}", ended.err);
        }
    }
}

/// Robust weights with a range: what is told must agree with itself, with the natural run and with the products.
#[test]
fn record_summary_and_history_tell_what_weights_did() {
    let folder = Folder::new();
    let invented = Invented { frequencies_hz: vec![1.28e9, 1.33e9, 1.38e9, 1.43e9], ..Invented::default() };
    let geometry = image(Direction::from_deg(152.6, 41.5));
    write_pointings(&folder.path("a.idifits"), &[invented.pointing("A", Direction::from_deg(152.4, 41.6))]);
    let text = run_text(&["a.idifits"], &geometry, TOLERANCE);
    folder.run_file(&text);
    let ended = folder.imaged(&[]);
    assert!(!ended.out.contains("excluded"), "{}", ended.out);
    let natural = folder.record();
    let (x, y) = geometry.reference();
    let natural_weight = folder.product("weight.fits").1[[y, x]];
    assert_eq!(natural["weighting"]["relative_noise_at_centre"].as_f64(), Some(1.0));

    folder
        .run_file(&(text + "[weighting]\nscheme = \"robust\"\nrobustness = -1\nuv_range_wavelengths = [0, 700]\n"));
    let ended = folder.imaged(&[]);
    let record = folder.record();
    let number = |pointer: &str| record.pointer(pointer).and_then(|v| v.as_f64()).unwrap_or(f64::NAN);
    let (used, excluded) = (number("/pointings/0/visibilities_used"), number("/pointings/0/visibilities_excluded"));
    assert!(used > 0.0 && excluded > 0.0);
    assert_eq!(Some(used + excluded), natural["pointings"][0]["visibilities_used"].as_f64());
    assert!(ended.out.contains("excluded by [weighting])"), "{}", ended.out);
    let (header, weight) = folder.product("weight.fits");
    let noise = (natural_weight / weight[[y, x]]).sqrt();
    let told = number("/weighting/relative_noise_at_centre");
    // both maps to ten times the promise at a pixel, and half of the sum of three such errors in the root
    assert!(noise > 1.05 && (told / noise - 1.0).abs() <= 2e-3, "{told} and {noise}");
    assert!(number("/weighting/relative_noise") > 1.05);
    assert_eq!(header.float("RESTFRQ").unwrap(), Some(number("/image/reference_hz")));
    let of_natural = natural["image"]["reference_hz"].as_f64().unwrap();
    let shift = number("/image/reference_hz") / of_natural - 1.0;
    println!("frequency off that of natural weights by {shift:.1e}");
    assert!(shift.abs() > 1e-5, "another than that of natural weights: {shift:e}");
    let history: String = header.history_lines().collect();
    for words in [
        "robust, robustness -1, only 0 to 700 wavelengths".to_owned(),
        format!("noise {:.4} times that of natural", number("/weighting/relative_noise")),
        format!("{told:.4} where psf.fits has its peak"),
        format!(
            "highest {:.4}, lowest {:.4}",
            number("/weighting/highest_side_lobe"),
            number("/weighting/lowest_side_lobe")
        ),
        "from 1.2 to 10 beam widths".to_owned(),
    ] {
        // lines of HISTORY break between words
        let squeezed = |text: &str| text.replace(' ', "");
        assert!(squeezed(&history).contains(&squeezed(&words)), "{words:?} in {history}");
    }
    assert!(ended.out.contains(&format!("{told:.2} at the peak of the point spread function")), "{}", ended.out);
    assert!(ended.out.contains("side lobes beyond 1.2 beams"), "{}", ended.out);
    let page = std::fs::read_to_string(folder.out().join("report.html")).unwrap();
    assert!(page.contains("excluded by weights") && page.contains("from 1.2 to 10 beams"));
}

/// Short baselines hold 5 Jy of something wide that is in no list. A range keeps it out of the fitted flux density, though the
/// fit itself goes by inverse variances; without the range it is far off. Bound: data in single precision, no noise.
#[test]
fn flux_densities_from_the_visibilities_keep_the_range() {
    const FLUX: f64 = 0.75;
    let folder = Folder::new();
    let invented = Invented::default();
    let centre = Direction::from_deg(152.6, 41.5);
    let (observation, mut block) = invented.pointing("A", centre);
    invented.fill(&[source(centre, FLUX)], &observation, &mut block);
    let mut short = 0;
    for row in 0..block.rows() {
        if block.uvw_m[row][0].hypot(block.uvw_m[row][1]) < 99.0 {
            let at = block.index(row, 0)..block.index(row, 0) + block.channels * block.hands;
            block.data[at].iter_mut().for_each(|v| *v += Complex32::new(5.0, 0.0));
            short += 1;
        }
    }
    assert!(short > 10 && short < block.rows() / 2, "{short} of {} rows", block.rows());
    write_pointings(&folder.path("a.idifits"), &[(observation, block)]);
    let (ra, dec) = centre.to_deg();
    std::fs::write(folder.path("sky.csv"), format!("name,ra_deg,dec_deg,spectral_index\nS,{ra},{dec},0\n"))
        .unwrap();
    let text = run_text(&["a.idifits"], &image(centre), TOLERANCE) + "[measure]\npositions = \"sky.csv\"\n";
    let flux = |weighting: &str| {
        folder.run_file(&format!("{text}{weighting}"));
        folder.imaged(&["--quiet"]);
        let record = folder.record();
        let how = record["measured"]["how"].as_str().unwrap().to_owned();
        (record["measured"]["brightest"][0]["flux_jy"].as_f64().unwrap(), how)
    };
    let (off, how) = flux("");
    assert!(off > 1.2 * FLUX && !how.contains("weighted"), "{off}, {how}");
    let (kept, how) = flux("[weighting]\nscheme = \"uniform\"\nuv_range_m = [100, 1e5]\n");
    println!("{off:.4} Jy with, {kept:.7} Jy without what the range excludes");
    assert!((kept / FLUX - 1.0).abs() < 1e-5, "{kept}");
    assert!(how.ends_with("weighted by inverse variances (natural, only 100 to 100000 m)"), "{how}");
}
