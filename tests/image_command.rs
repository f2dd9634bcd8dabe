//! `evensky image` as a person runs it: what it writes, what it says, and whether the numbers are right.
//!
//! The judge of the numbers is [`evensky::response::Exact`], the direct sums, with beams built by hand; for Hollin Fell
//! it is an independent simulator's table (the README beside the files). Promises are relative L2 errors of N and W over
//! the field; a single pixel may be further off, since errors gather where there is little signal: single pixels are
//! held to ten times the promise, a rule of thumb (common practice, no source).

mod image_support;

use evensky::observation::Hand;
use evensky::sky::{Direction, ImageGeometry};
use image_support::{
    BEAMS, Folder, Invented, PRODUCTS, names_in, run_text, source, weighted_difference, write_pointings,
};
use ndarray::Array2;
use sha2::{Digest, Sha256};
use std::path::Path;
use std::sync::OnceLock;

const FELL: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/data/hollin-fell");
const FELL_TOLERANCE: f64 = 1e-3;
const FELL_TITLE: &str = "Hollin <script>alert('fell')</script> & Co.";
/// S12 of fell-sky.csv, the image centre, so that it falls on the middle of a pixel.
const BRIGHT: (f64, f64) = (152.619008, 41.438887);

/// The three Hollin Fell pointings, imaged once for all tests that look at them.
fn fell() -> &'static Folder {
    static MADE: OnceLock<Folder> = OnceLock::new();
    MADE.get_or_init(|| {
        let folder = Folder::new();
        let mut text = format!("title = \"{FELL_TITLE}\"\nstation_table = \"{FELL}/fell-stations.csv\"\n");
        for n in 1..=3 {
            text += &format!("[[pointing]]\nvisibilities = \"{FELL}/fell-{n}-clean.uvfits\"\n");
        }
        text += &format!(
            "[image]\ncentre_deg = [{}, {}]\nsize_px = [160, 150]\npixel_arcsec = 60.0\ntolerance = {FELL_TOLERANCE}\n\
             [beams.dish13]\nshape = \"airy\"\ndiameter_m = 13.0\nblockage_m = 1.3\n\
             [beams.dish8]\nshape = \"gaussian\"\nhalf_power_deg = 1.58\nat_hz = 1.36e9\n",
            BRIGHT.0, BRIGHT.1
        );
        folder.run_file(&text);
        let ended = folder.imaged(&[]);
        assert!(ended.out.contains("3 pointings") && ended.out.contains("kept"), "{}", ended.out);
        folder
    })
}

/// The columns of a CSV table of the Hollin Fell folder, as numbers; text becomes NaN.
fn fell_table(name: &str) -> Vec<Vec<f64>> {
    let text = std::fs::read_to_string(Path::new(FELL).join(name)).expect(name);
    let rows: Vec<Vec<f64>> =
        text.lines().skip(1).map(|line| line.split(',').map(|c| c.parse().unwrap_or(f64::NAN)).collect()).collect();
    assert!(rows.len() > 20, "{name}");
    rows
}

#[test]
fn every_product_is_there_and_whole() {
    let folder = fell();
    assert_eq!(names_in(&folder.out()), PRODUCTS, "nothing missing, nothing left over");
    for name in ["dirty", "weight", "psf"] {
        let (header, image) = folder.product(&format!("{name}.fits"));
        assert_eq!(image.dim(), (150, 160), "{name}");
        assert!(image.iter().any(|v| v.is_finite()), "{name}");
        assert_eq!(header.text("CTYPE1").unwrap().as_deref(), Some("RA---SIN"));
        let file = std::fs::File::open(folder.out().join(format!("{name}.png"))).unwrap();
        let mut reader = png::Decoder::new(std::io::BufReader::new(file)).read_info().unwrap();
        let mut pixels = vec![0; reader.output_buffer_size().unwrap()];
        let frame = reader.next_frame(&mut pixels).unwrap_or_else(|e| panic!("{name}.png: {e}"));
        assert!(frame.width > 300 && frame.height > 300, "{name}: {} × {}", frame.width, frame.height);
        let first = pixels[..4].to_vec();
        assert!(pixels.chunks(first.len()).any(|pixel| pixel != first), "{name}.png is of one colour");
    }
    let page = std::fs::read_to_string(folder.out().join("report.html")).unwrap();
    assert!(page.trim_end().ends_with("</html>"));
    let (_, dirty) = folder.product("dirty.fits");
    let (_, psf) = folder.product("psf.fits");
    for (d, p) in dirty.iter().zip(&psf) {
        assert_eq!(d.is_nan(), p.is_nan(), "blank in both or in neither");
    }
}

#[test]
fn the_record_names_inputs_with_checksums() {
    let record = fell().record();
    let inputs = record["inputs"].as_array().expect("inputs");
    let mut roles: Vec<&str> = Vec::new();
    for input in inputs {
        let path = input["path"].as_str().expect("a path");
        let bytes = std::fs::read(path).unwrap_or_else(|e| panic!("{path}: {e}"));
        let digest: String = Sha256::digest(&bytes).iter().map(|byte| format!("{byte:02x}")).collect();
        assert_eq!(input["sha256"].as_str(), Some(digest.as_str()), "{path}");
        assert_eq!(input["bytes"].as_u64(), Some(bytes.len() as u64), "{path}");
        roles.push(input["role"].as_str().expect("a role"));
    }
    roles.sort_unstable();
    assert_eq!(roles, ["run file", "table", "visibilities", "visibilities", "visibilities"]);
}

/// Visibilities: counted by astropy (tests/visibility_files.rs has the same numbers from the reader).
#[test]
fn the_record_tells_what_was_done_and_how_well() {
    let record = fell().record();
    let number = |pointer: &str| record.pointer(pointer).and_then(|v| v.as_f64()).unwrap_or(f64::NAN);
    assert_eq!(record["title"].as_str(), Some(FELL_TITLE));
    for (n, (used, flagged)) in [(25284, 924), (25380, 828), (25440, 768)].into_iter().enumerate() {
        let pointing = &record["pointings"][n];
        assert_eq!(pointing["visibilities_used"].as_u64(), Some(used));
        assert_eq!(pointing["visibilities_flagged"].as_u64(), Some(flagged));
        assert_eq!(pointing["stations"].as_u64(), Some(14));
    }
    assert_eq!(record["accuracy"]["kept"].as_bool(), Some(true));
    assert_eq!(number("/accuracy/promised"), FELL_TOLERANCE);
    for measured in ["/accuracy/measured_numerator", "/accuracy/measured_normaliser"] {
        assert!(number(measured) > 0.0 && number(measured) <= FELL_TOLERANCE, "{measured}: {}", number(measured));
    }
    assert!(number("/accuracy/sample_pixels") >= 48.0);
    assert_eq!(number("/accuracy/sample_visibilities"), (25284 + 25380 + 25440) as f64);

    let (members, distinct) = (number("/kernels/members"), number("/kernels/distinct"));
    assert!(distinct >= 1.0 && distinct < members, "{distinct} kernels for {members} members");
    assert!(number("/kernels/largest_difference") > 0.0);
    assert!(number("/kernels/largest_difference") <= number("/kernels/bound"));
    assert!(number("/kernels/memory_bytes") > 0.0 && number("/kernels/terms") >= 1.0);

    let stages: Vec<&str> =
        record["timings"].as_array().unwrap().iter().filter_map(|stage| stage["stage"].as_str()).collect();
    for stage in ["building kernels", "gridding", "point spread function", "writing products"] {
        assert!(stages.contains(&stage), "{stage} in {stages:?}");
    }
    assert!(record["timings"].as_array().unwrap().iter().all(|stage| stage["seconds"].as_f64().unwrap() >= 0.0));

    let mut told: Vec<&str> =
        record["products"].as_array().unwrap().iter().filter_map(|product| product["path"].as_str()).collect();
    told.sort_unstable();
    assert_eq!(told, PRODUCTS);
    assert_eq!(record["versions"]["evensky"].as_str(), Some(env!("CARGO_PKG_VERSION")));
    assert_eq!(record["settings"]["image"]["tolerance"].as_f64(), Some(FELL_TOLERANCE));

    let (_, weight) = fell().product("weight.fits");
    let most = weight.iter().copied().fold(0.0, f64::max);
    let lowest = number("/noise/lowest_jy_per_beam");
    // the product holds f32
    assert!((lowest * most.sqrt() - 1.0).abs() < 1e-6, "noise {lowest} against weight {most}");
}

/// N and W of the independent simulator at the one tabled position that is the middle of a pixel.
#[test]
fn the_central_pixel_is_that_of_the_independent_simulator() {
    let rows = fell_table("fell-exact.csv");
    let row = rows.iter().find(|r| (r[0], r[1]) == BRIGHT).expect("S12 is tabled");
    let (_, dirty) = fell().product("dirty.fits");
    let (_, weight) = fell().product("weight.fits");
    let at = [75, 80];
    let (flux, w) = (row[2] / row[3], row[3]);
    println!("dirty {} against {flux}, weight {} against {w}", dirty[at], weight[at]);
    assert!((dirty[at] - flux).abs() <= 10.0 * FELL_TOLERANCE * flux);
    assert!((weight[at] - w).abs() <= 10.0 * FELL_TOLERANCE * w);
}

/// The dirty flux density of a source differs from the true one by the side lobes of all others. By symmetry of the
/// sums, N_t(s) = N_s(t): a source t of 1 Jy adds psf(t) W(t)/W(s) at s.
#[test]
fn a_bright_source_is_seen_within_the_side_lobes_of_the_others() {
    let folder = fell();
    let (_, dirty) = folder.product("dirty.fits");
    let (_, weight) = folder.product("weight.fits");
    let (_, psf) = folder.product("psf.fits");
    let centre = Direction::from_deg(BRIGHT.0, BRIGHT.1);
    let geometry = ImageGeometry::new(centre, 160, 150, (60.0 / 3600f64).to_radians()).unwrap();
    let (x0, y0) = geometry.reference();
    let (mut flux, mut range, mut inside) = (f64::NAN, 0.0, 0);
    for row in fell_table("fell-sky.csv") {
        // band centre 1.35 GHz; curvature of the power law over ±50 MHz is below 1e-3
        let jy = row[3] * (1.35e9 / row[4]).powf(row[5]);
        if (row[1], row[2]) == BRIGHT {
            flux = jy;
            continue;
        }
        let Some((x, y)) = geometry.pixel_of(Direction::from_deg(row[1], row[2])) else { continue };
        let mut most: f64 = 0.0;
        for (py, px) in pixels_around(x, y) {
            if let (Some(p), Some(w)) = (psf.get([py, px]), weight.get([py, px]))
                && !p.is_nan()
            {
                most = most.max((p * w).abs() / weight[[y0, x0]]);
            }
        }
        inside += usize::from(most > 0.0);
        range += jy * most;
    }
    assert!(inside >= 15, "only {inside} other sources are in the image");
    let error = (dirty[[y0, x0]] - flux).abs();
    println!("true {flux} Jy, dirty {} Jy, side lobes of the others at most {range} Jy", dirty[[y0, x0]]);
    assert!(range < 0.5 * flux, "a range of {range} Jy says nothing");
    assert!(error <= range + 1e-2 * flux, "off by {error} Jy, side lobes explain {range} Jy");
    let peak = (y0 - 1..=y0 + 1).flat_map(|y| (x0 - 1..=x0 + 1).map(move |x| [y, x])).map(|at| dirty[at]);
    assert_eq!(peak.fold(f64::MIN, f64::max), dirty[[y0, x0]], "a peak at its place");
}

/// Row and column of the pixels around a position.
fn pixels_around(x: f64, y: f64) -> impl Iterator<Item = (usize, usize)> {
    let range = |at: f64| {
        let middle = at.round().max(0.0) as usize;
        middle.saturating_sub(1)..=middle + 1
    };
    range(y).flat_map(move |py| range(x).map(move |px| (py, px)))
}

#[test]
fn the_report_stands_alone_and_escapes_the_title() {
    let page = std::fs::read_to_string(fell().out().join("report.html")).unwrap();
    let lower = page.to_lowercase();
    for tag in ["<script", "<link", "<iframe", "<object", "<embed", "@import", "<base"] {
        assert!(!lower.contains(tag), "{tag} in the report");
    }
    for attribute in ["src=", "href=", "srcset=", "url("] {
        for (at, _) in lower.match_indices(attribute) {
            let value = lower[at + attribute.len()..].trim_start_matches(['"', '\'']);
            assert!(value.starts_with("data:") || value.starts_with('#'), "{attribute}{:.40}", value);
        }
    }
    assert_eq!(lower.matches("src=\"data:image/png;base64,").count(), 3, "three pictures");
    assert!(page.contains("Hollin &lt;script&gt;alert("), "the title is shown, escaped");
    assert!(page.contains("&amp; Co."));
}

/// One pointing of the invented array about `centre`.
fn small(centre: Direction, width: usize, height: usize) -> ImageGeometry {
    ImageGeometry::new(centre, width, height, (70.0 / 3600f64).to_radians()).unwrap()
}

#[test]
fn json_is_one_object_on_standard_output() {
    let (folder, _) = one_source();
    let ended = folder.imaged(&["--json"]);
    let told: serde_json::Value = serde_json::from_str(&ended.out).expect("one JSON object and nothing else");
    assert!(told.is_object());
    assert_eq!(ended.err, "", "no progress with --json");
    let record = folder.record();
    for key in ["title", "inputs", "accuracy", "kernels", "beam", "noise", "products", "warnings", "settings"] {
        assert_eq!(told[key], record[key], "{key}");
    }
    assert!(told["look_first"].as_str().is_some_and(|path| Path::new(path).exists()), "{}", told["look_first"]);
}

#[test]
fn quiet_is_quiet() {
    let (folder, _) = one_source();
    let ended = folder.imaged(&["--quiet"]);
    assert_eq!(ended.err, "");
    assert!(ended.out.contains("accuracy"), "{}", ended.out);
    assert!(ended.out.lines().count() <= 12, "read in ten seconds:\n{}", ended.out);
}

/// A loud run says where it is, in plain lines off a terminal: no control characters.
#[test]
fn progress_is_plain_off_a_terminal() {
    let (folder, _) = one_source();
    let ended = folder.imaged(&[]);
    for stage in ["building kernels", "gridding", "point spread function", "checking against exact sums"] {
        assert!(ended.err.contains(stage), "{stage}: {}", ended.err);
    }
    assert!(ended.err.chars().all(|c| c == '\n' || !c.is_control()), "{:?}", ended.err);
}

/// Threads share out sums whose order then differs: rounding of single-precision grids (6e-8), carried by some ten
/// thousand visibilities of random sign, is bounded by 3e-6 of the largest sum, a thirtieth of the promise. Quotients are
/// compared as the sums they come from, since they grow where W is small. The same number of threads gives the same bits.
#[test]
fn threads_change_nothing_but_rounding() {
    let (folder, _) = one_source();
    let image = |threads: &str| {
        folder.imaged(&["--quiet", "--threads", threads]);
        assert_eq!(folder.record()["threads"].as_u64(), threads.parse().ok());
        ["dirty.fits", "weight.fits", "psf.fits"].map(|name| folder.product(name).1)
    };
    let (one, two, again) = (image("1"), image("2"), image("2"));
    let weight = &one[1];
    for n in 0..3 {
        let scale = |at: usize| if n == 1 { 1.0 } else { weight.as_slice().unwrap()[at] };
        let (mut worst, mut largest, mut seen): (f64, f64, usize) = (0.0, 0.0, 0);
        for (at, ((a, b), c)) in one[n].iter().zip(&two[n]).zip(&again[n]).enumerate() {
            assert_eq!(a.is_nan(), b.is_nan());
            assert_eq!(b.to_bits(), c.to_bits(), "the same threads, the same result");
            if !a.is_nan() {
                worst = worst.max(scale(at) * (a - b).abs());
                largest = largest.max(scale(at) * a.abs());
                seen += 1;
            }
        }
        println!("product {n}: largest difference {:.1e} of the largest sum", worst / largest);
        assert!(seen > 1000 && worst <= 3e-6 * largest, "product {n}: {worst:e} of {largest:e}");
    }
}

const FLUX: f64 = 0.75;
const TOLERANCE: f64 = 1e-4;

/// One source of [`FLUX`] Jy at the image centre, off the aim; nothing else, no noise.
fn one_source() -> (Folder, ImageGeometry) {
    let folder = Folder::new();
    let invented = Invented::default();
    let geometry = small(Direction::from_deg(152.6, 41.4), 66, 60);
    let (observation, mut block) = invented.pointing("P", Direction::from_deg(152.3, 41.7));
    invented.fill(&[source(geometry.centre, FLUX)], &observation, &mut block);
    write_pointings(&folder.path("one.idifits"), &[(observation, block)]);
    folder.run_file(&run_text(&["one.idifits"], &geometry, TOLERANCE));
    (folder, geometry)
}

#[test]
fn one_source_alone_is_the_point_spread_function_times_its_flux_density() {
    let (folder, geometry) = one_source();
    folder.imaged(&["--quiet"]);
    let (_, dirty) = folder.product("dirty.fits");
    let (_, weight) = folder.product("weight.fits");
    let (_, psf) = folder.product("psf.fits");
    let (x0, y0) = geometry.reference();
    println!("peak of the point spread function {}, dirty {}", psf[[y0, x0]], dirty[[y0, x0]]);
    assert!((psf[[y0, x0]] - 1.0).abs() <= 10.0 * TOLERANCE);
    assert!((dirty[[y0, x0]] - FLUX).abs() <= 10.0 * TOLERANCE * FLUX);
    // |N_s(t)| ≤ √(W(s) W(t)): on the flat sky the peak stands out by that
    for (p, w) in psf.iter().zip(&weight).filter(|(p, _)| !p.is_nan()) {
        assert!(p.abs() <= (weight[[y0, x0]] / w).sqrt() * (1.0 + 10.0 * TOLERANCE), "{p}");
    }
    let scaled = psf.mapv(|p| FLUX * p);
    let error = weighted_difference(&dirty, &scaled, &weight);
    println!("dirty against {FLUX} times the point spread function: {error:.1e}");
    assert!(error <= TOLERANCE);
}

/// A source away from the image centre shows its flux density at its own pixel.
#[test]
fn the_flux_density_is_true_anywhere_in_the_mosaic() {
    let folder = Folder::new();
    let invented = Invented::default();
    let geometry = small(Direction::from_deg(0.1, -12.0), 61, 64);
    let aims = [Direction::from_deg(359.8, -11.9), Direction::from_deg(0.5, -12.2)];
    let place = [47, 12];
    let sky = [source(geometry.direction_of(place[1] as f64, place[0] as f64).unwrap(), FLUX)];
    let mut names = Vec::new();
    for (n, aim) in aims.into_iter().enumerate() {
        let (observation, mut block) = invented.pointing(&format!("P{n}"), aim);
        invented.fill(&sky, &observation, &mut block);
        names.push(format!("p{n}.idifits"));
        write_pointings(&folder.path(&names[n]), &[(observation, block)]);
    }
    folder.run_file(&run_text(&names.iter().map(String::as_str).collect::<Vec<_>>(), &geometry, TOLERANCE));
    folder.imaged(&["--quiet"]);
    let (_, dirty) = folder.product("dirty.fits");
    println!("{} Jy for {FLUX} Jy", dirty[place]);
    assert!((dirty[place] - FLUX).abs() <= 10.0 * TOLERANCE * FLUX);
}

/// Images `pointings` (as one file), and holds dirty.fits and weight.fits against the exact sums of all of `judged`.
#[track_caller]
fn held_against_exact(
    invented: &Invented,
    written: &[(evensky::observation::Observation, evensky::observation::Block)],
    judged: &[(evensky::observation::Observation, evensky::observation::Block)],
    geometry: ImageGeometry,
    more: &str,
) -> Folder {
    let folder = Folder::new();
    write_pointings(&folder.path("data.idifits"), written);
    let text = run_text(&["data.idifits"], &geometry, TOLERANCE);
    folder.run_file(&text.replacen("data.idifits\"\n", &format!("data.idifits\"\n{more}"), 1));
    folder.imaged(&["--quiet"]);
    let exact = invented.exact(judged, &geometry);
    let (_, dirty) = folder.product("dirty.fits");
    let (_, weight) = folder.product("weight.fits");
    let flat: Array2<f64> = &exact.numerator / &exact.normaliser;
    let seen = dirty.iter().filter(|d| !d.is_nan()).count();
    assert!(seen * 2 > dirty.len(), "only {seen} pixels are not blank");
    let error = weighted_difference(&dirty, &flat, &exact.normaliser);
    let one = Array2::ones(weight.dim());
    let weight_error = weighted_difference(&weight, &exact.normaliser, &one);
    println!("N off by {error:.1e}, W by {weight_error:.1e}, promised {TOLERANCE:e}");
    // N/W with W and N both off; the L2 norms are over nearly the same pixels
    assert!(error <= 2.0 * TOLERANCE && weight_error <= TOLERANCE);
    folder
}

/// The weight map is W, pixel by pixel, and random data give the dirty image of the direct sums.
#[test]
fn weight_map_and_dirty_image_are_the_exact_sums() {
    let invented = Invented::default();
    let geometry = small(Direction::from_deg(152.5, 41.5), 48, 52);
    let pointing = [invented.pointing("P", Direction::from_deg(152.3, 41.7))];
    let folder = held_against_exact(&invented, &pointing, &pointing, geometry, "");
    let (_, weight) = folder.product("weight.fits");
    let exact = invented.exact(&pointing, &geometry);
    let mut worst: f64 = 0.0;
    for (got, want) in weight.iter().zip(&exact.normaliser) {
        worst = worst.max((got - want).abs() / exact.normaliser[[26, 24]]);
    }
    println!("largest error of W at a pixel: {worst:.1e} of its value at the centre");
    assert!(worst <= 10.0 * TOLERANCE);
}

#[test]
fn stokes_i_data() {
    let invented = Invented { hands: vec![Hand::I], ..Invented::default() };
    let pointing = [invented.pointing("P", Direction::from_deg(200.0, 61.0))];
    held_against_exact(&invented, &pointing, &pointing, small(Direction::from_deg(200.2, 61.1), 40, 44), "");
}

#[test]
fn circular_hands() {
    let invented = Invented { hands: vec![Hand::RR, Hand::LL], ..Invented::default() };
    let pointing = [invented.pointing("P", Direction::from_deg(200.0, 31.0))];
    held_against_exact(&invented, &pointing, &pointing, small(Direction::from_deg(200.2, 31.1), 40, 44), "");
}

/// Crossed hands carry no total intensity: they change nothing.
#[test]
fn crossed_hands_are_left_out() {
    let invented =
        Invented { hands: vec![Hand::XX, Hand::YY, Hand::XY, Hand::YX], times: 3, ..Invented::default() };
    let pointing = [invented.pointing("P", Direction::from_deg(200.0, 31.0))];
    let folder =
        held_against_exact(&invented, &pointing, &pointing, small(Direction::from_deg(200.2, 31.1), 40, 44), "");
    let parallel = pointing[0].1.weight.chunks(4).flat_map(|w| &w[..2]).filter(|w| **w > 0.0).count() as u64;
    assert_eq!(folder.record()["pointings"][0]["visibilities_used"].as_u64(), Some(parallel));
}

fn two_sources(invented: &Invented) -> [(evensky::observation::Observation, evensky::observation::Block); 2] {
    [("WEST", 99.6), ("EAST FIELD", 100.3)].map(|(name, ra)| invented.pointing(name, Direction::from_deg(ra, 20.0)))
}

#[test]
fn each_source_of_a_file_is_a_pointing() {
    let invented = Invented { times: 3, ..Invented::default() };
    let both = two_sources(&invented);
    let folder = held_against_exact(&invented, &both, &both, small(Direction::from_deg(99.95, 20.1), 46, 40), "");
    let record = folder.record();
    let names: Vec<&str> =
        record["pointings"].as_array().unwrap().iter().filter_map(|p| p["name"].as_str()).collect();
    assert_eq!(names, ["WEST", "EAST FIELD"]);
    let aims: Vec<f64> =
        record["pointings"].as_array().unwrap().iter().filter_map(|p| p["aim_ra_deg"].as_f64()).collect();
    assert!((aims[0] - 99.6).abs() < 1e-9 && (aims[1] - 100.3).abs() < 1e-9, "{aims:?}");
    let inputs = record["inputs"].as_array().unwrap();
    assert_eq!(inputs.iter().filter(|input| input["role"] == "visibilities").count(), 1, "one file, named once");
}

#[test]
fn one_source_of_a_file_by_name() {
    let invented = Invented { times: 3, ..Invented::default() };
    let both = two_sources(&invented);
    let geometry = small(Direction::from_deg(99.95, 20.1), 46, 40);
    held_against_exact(&invented, &both, &both[1..], geometry, "sources = [\"EAST FIELD\"]\n");
}

/// An aim of the run file's own moves the beams, not the phases.
#[test]
fn the_run_file_can_say_where_the_stations_looked() {
    let invented = Invented { times: 3, ..Invented::default() };
    let pointing = invented.pointing("P", Direction::from_deg(200.0, 31.0));
    let mut moved = pointing.clone();
    moved.0.aim = Direction::from_deg(200.4, 31.2);
    let geometry = small(Direction::from_deg(200.2, 31.1), 40, 44);
    held_against_exact(&invented, &[pointing], &[moved], geometry, "aim_deg = [200.4, 31.2]\n");
}

/// A pointing that looks elsewhere adds nothing, and the reason given is that, not its data.
#[test]
fn a_pointing_that_misses_the_image_is_told() {
    let invented = Invented { times: 2, ..Invented::default() };
    let both = [("HERE", 99.6), ("ELSEWHERE", 250.0)]
        .map(|(name, ra)| invented.pointing(name, Direction::from_deg(ra, 20.0)));
    let folder = Folder::new();
    write_pointings(&folder.path("data.idifits"), &both);
    folder.run_file(&run_text(&["data.idifits"], &small(Direction::from_deg(99.6, 20.1), 40, 44), TOLERANCE));
    let ended = folder.imaged(&["--quiet"]);
    let warning = "pointing ELSEWHERE does not reach the image and adds nothing";
    assert!(ended.err.contains(warning), "{}", ended.err);
    let record = folder.record();
    assert_eq!(record["warnings"], serde_json::json!([warning]));
    for (n, (_, block)) in both.iter().enumerate() {
        let usable = block.weight.iter().filter(|w| **w > 0.0).count() as u64;
        assert_eq!(record["pointings"][n]["visibilities_used"].as_u64(), Some(usable));
    }
}

/// Two runs, one output folder: the later products replace the earlier.
#[test]
fn a_second_run_replaces_the_first() {
    let (folder, _) = one_source();
    folder.imaged(&["--quiet"]);
    let text = std::fs::read_to_string(folder.path("run.toml")).unwrap();
    folder.run_file(&text.replace("title = \"Invented\"", "title = \"Again\""));
    folder.imaged(&["--quiet"]);
    assert_eq!(names_in(&folder.out()), PRODUCTS);
    assert_eq!(folder.record()["title"].as_str(), Some("Again"));
    assert_eq!(folder.product("psf.fits").0.text("OBJECT").unwrap().as_deref(), Some("Again"));
    assert!(text.contains(BEAMS));
}
