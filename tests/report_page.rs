//! The report page, run.json and the closing summary, from one invented record.

use evensky::report::{
    Accuracy, BeamFigures, ImageFigures, InputFile, KernelFigures, Noise, PagePicture, PointingRecord, Product,
    RunRecord, StageTime, StationGroup, render_page, summary_json, summary_text, write_json, write_page,
    write_whole,
};
use evensky::sky::{Direction, ImageGeometry};
use std::io::Write;

fn record() -> RunRecord {
    let geometry = ImageGeometry::new(Direction::from_deg(83.25, -12.5), 480, 400, 1.2e-4).unwrap();
    RunRecord {
        title: "Wether Moss & <the> \"north\" field".into(),
        command: "image".into(),
        run_file: "moss.toml".into(),
        started_utc: "2026-12-01T04:05:06".into(),
        threads: 2,
        inputs: vec![InputFile {
            path: "moss-1.fits".into(),
            role: "visibilities".into(),
            bytes: 812_160,
            sha256: "0123456789abcdef".repeat(4),
        }],
        settings: serde_json::json!({"image": {"tolerance": 1e-4}, "weighting": {"scheme": "natural"}}),
        image: Some(ImageFigures {
            filled_fraction: Some(0.71),
            reference_hz: Some(1.36e9),
            ..ImageFigures::of(&geometry)
        }),
        pointings: vec![
            PointingRecord {
                name: "moss-1".into(),
                aim_ra_deg: 83.1,
                aim_dec_deg: -12.4,
                stations: 14,
                visibilities_used: 1_209_600,
                visibilities_excluded: 0,
                visibilities_flagged: 800,
                window_width_px: 300,
                window_height_px: 310,
            },
            PointingRecord { name: "moss-2".into(), visibilities_used: 400, ..PointingRecord::default() },
        ],
        stations: vec![StationGroup {
            beam: "dish13".into(),
            description: "airy, 13 m with a blockage of 1.3 m".into(),
            mount: "alt-azimuth".into(),
            stations: vec!["WM01".into(), "WM02".into()],
            largest_pointing_offset_arcmin: Some(3.25),
        }],
        accuracy: Some(Accuracy::new(1e-4, 3.1e-5, 2.2e-5, 4000, 256)),
        kernels: Some(KernelFigures {
            members: 91_000,
            distinct: 412,
            terms: 25,
            largest_difference: 8e-6,
            bound: 2e-5,
            memory_bytes: 3_200_000,
            build_seconds: 0.84,
            window: "kaiser-bessel".into(),
            window_support: 7,
            padding: 1.75,
            aliasing: 1.2e-5,
        }),
        beam: Some(BeamFigures {
            major_arcsec: 151.0,
            minor_arcsec: 98.4,
            position_angle_deg: -31.2,
            largest_misfit: 0.021,
        }),
        noise: Some(Noise {
            lowest_jy_per_beam: 1.23e-4,
            lowest_at_ra_deg: 83.25,
            lowest_at_dec_deg: -12.5,
            median_jy_per_beam: Some(2.4e-4),
        }),
        timings: vec![
            StageTime { stage: "reading".into(), seconds: 0.31 },
            StageTime { stage: "gridding".into(), seconds: 12.7 },
        ],
        products: vec![
            Product { path: "dirty.fits".into(), what: "flat-sky dirty image".into() },
            Product { path: "report.html".into(), what: "this page".into() },
        ],
        limits: vec!["The window of moss-2 ends at the response cut-off.".into()],
        ..RunRecord::default()
    }
}

fn picture() -> PagePicture {
    PagePicture { title: "Dirty image".into(), caption: "N/W".into(), png: vec![137, 80, 78, 71] }
}

/// A page holds every part, nothing from outside, and no text as markup.
#[test]
fn page_is_whole_and_self_contained() {
    let page = render_page(&record(), &[picture()]).unwrap();
    std::fs::write(std::path::Path::new(env!("CARGO_TARGET_TMPDIR")).join("report.html"), &page).unwrap();
    let page = page.replace("&#x2f;", "/");
    for part in [
        "Wether Moss &amp; &lt;the&gt; &quot;north&quot; field",
        "promised 1e-4",
        "3.1e-5 (N)",
        "123 µJy/beam",
        "2.52′ × 1.64′",
        "data:image/png;base64,iVBORw==",
        "moss-2",
        "1\u{202f}209\u{202f}600",
        "airy, 13 m",
        "WM01, WM02",
        "91\u{202f}000 combinations",
        "12.7 s",
        "812 kB",
        "0123456789abcdef0123456789abcdef0123456789abcdef0123456789abcdef",
        "Where a figure could mislead",
        "ends at the response cut-off",
        "&quot;tolerance&quot;: 0.0001",
        "05h33m00.0s −12°30′00″",
    ] {
        assert!(page.contains(part), "the page lacks {part:?}");
    }
    for outside in ["http:", "https:", "<script", "url(", "<the>", ">none", " none ", "undefined"] {
        assert!(!page.contains(outside), "the page holds {outside:?}");
    }
    assert!(!page.contains("WARNING"), "a good run shows no warning");
    let open = page.matches("<table").count();
    assert!(open >= 6 && open == page.matches("</table>").count());
}

/// A broken promise and every warning are loud, on the page, in the summary, and neither NaN nor absence passes as kept.
#[test]
fn broken_promises_are_loud() {
    for (numerator, normaliser) in [(3e-4, 1e-5), (1e-5, 3e-4), (f64::NAN, 1e-5), (1e-5, f64::NAN)] {
        let mut bad = record();
        bad.accuracy = Some(Accuracy::new(1e-4, numerator, normaliser, 100, 10));
        bad.warnings.push("station WM09 has no <beam>".into());
        let page = render_page(&bad, &[]).unwrap();
        assert_eq!(page.matches("<b>WARNING</b>").count(), 2);
        assert!(page.contains("the promised accuracy was not kept") && page.contains("NOT KEPT"));
        assert!(page.contains("no &lt;beam&gt;"));
        let text = summary_text(&bad, "out");
        assert!(text.starts_with("WARNING: station WM09 has no <beam>\nWARNING: the promised accuracy"), "{text}");
    }
    let mut unmeasured = record();
    unmeasured.accuracy = None;
    let page = render_page(&unmeasured, &[]).unwrap();
    assert!(page.contains("not measured") && !page.contains("kept</dd>"));
}

#[test]
fn an_empty_record_still_makes_a_page() {
    let page = render_page(&RunRecord::default(), &[]).unwrap();
    assert!(page.contains("Untitled run") && page.contains("not measured"));
    assert_eq!(summary_text(&RunRecord::default(), "out"), "untitled run");
}

#[test]
fn summary_is_short_and_says_where_to_look() {
    let text = summary_text(&record(), "moss-out");
    let lines: Vec<&str> = text.lines().collect();
    assert_eq!(
        lines[0],
        "Wether Moss & <the> \"north\" field: 480 × 400 pixels of 24.8″ from 2 pointings, \
         1\u{202f}210\u{202f}000 visibilities (800 more were flagged)"
    );
    assert_eq!(lines[1], "accuracy   promised 1e-4, measured 3.1e-5 (N) and 2.2e-5 (W): kept");
    assert_eq!(lines[2], "noise      123 µJy/beam at its lowest, thermal only");
    assert_eq!(lines[3], "beam       2.52′ × 1.64′ at position angle −31.2°");
    assert_eq!(lines[4], "time       13.0 s on 2 threads");
    assert_eq!(lines[5], "look first moss-out/report.html");
    assert_eq!(lines.len(), 6);
}

/// run.json reads back as the same record; the object of --json is the record with three more keys.
#[test]
fn json_round_trips() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("run.json");
    write_json(&path, &record()).unwrap();
    let text = std::fs::read_to_string(&path).unwrap();
    assert!(text.ends_with("}\n"));
    let back: RunRecord = serde_json::from_str(&text).unwrap();
    assert_eq!(back, record());
    let object = summary_json(&record(), "out");
    assert_eq!(object["look_first"], "out/report.html");
    assert_eq!(object["accuracy"]["kept"], true);
    assert_eq!(object["pointings"][0]["visibilities_flagged"], 800);
    assert!(object["summary"].as_str().unwrap().ends_with("flagged)."));
}

/// Outside value: SHA-256 of "abc" (FIPS 180-4, published example).
#[test]
fn inputs_are_measured() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("a.txt");
    std::fs::write(&path, "abc").unwrap();
    let input = InputFile::measure(&path, "visibilities").unwrap();
    assert_eq!((input.bytes, input.role.as_str()), (3, "visibilities"));
    assert_eq!(input.sha256, "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad");
    assert!(InputFile::measure(&folder.path().join("none"), "x").is_err());
}

/// A failed write leaves the old file and nothing beside it; the error names the file.
#[test]
fn files_are_whole_or_absent() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("report.html");
    write_page(&path, &record(), &[picture()]).unwrap();
    let before = std::fs::read(&path).unwrap();
    let full = |file: &mut std::io::BufWriter<&std::fs::File>| {
        file.write_all(b"half a pa")?;
        Err(std::io::Error::from(std::io::ErrorKind::StorageFull))
    };
    let error = write_whole(&path, full).unwrap_err().to_string();
    assert!(error.contains("report.html: writing stopped") && error.contains("space"), "{error}");
    assert_eq!(std::fs::read(&path).unwrap(), before);
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1);

    let missing = folder.path().join("no/such/report.html");
    let error = write_page(&missing, &record(), &[]).unwrap_err().to_string();
    assert!(error.contains("no/such/report.html: cannot be written"), "{error}");

    let taken = folder.path().join("taken");
    std::fs::create_dir(&taken).unwrap();
    let error = write_json(&taken, &record()).unwrap_err().to_string();
    assert!(error.contains("taken: the finished file could not take this name"), "{error}");
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 2, "nothing may be left behind");
}
