//! The record of invented outcomes: schema, well-formed page, one scale, nothing made up.

use super::*;
use crate::dimensions::{Axis, CorrectedValue, Dimension, Kind, Request, Status, Value};
use crate::heightmap::{HeightMap, Pitch, Provenance, Region};
use crate::job::{Reliability, SurfaceResult, TipFrom};
use crate::leveling::Leveled;
use crate::tip::model::Model;
use crate::tip::read_out::{ApexRadius, HalfAngle, ReadOut};
use crate::tip::{Band, Tip};
use crate::uncertainty::{Component, Distribution};
use base64::Engine;
use ndarray::Array2;
use proptest::prelude::*;
use quick_xml::events::Event;
use serde_json::Value as Json;
use std::sync::Arc;

const NASTY: &str = "<script>alert('a & b')</script> \"q\" ]]> \u{1b}[31m \u{0} é µ";

fn job() -> Job {
    let mut job = Job::on_scan(Path::new("folder/stamp & <14>.tiff"));
    job.file.title = NASTY.to_owned();
    job.file.dimensions.push(Request {
        region: Some(Region {
            left: 10.0,
            top: 10.0,
            width: 40.0,
            height: 100.0,
        }),
        at: vec![0.5],
        across: Some(Axis::X),
        ..Request::new(NASTY, Kind::LineWidth)
    });
    job.path = Some("folder/stamp.toml".into());
    job.sha256 = Some("ab".repeat(32));
    job
}

/// 48 rows by 40 columns at 2 nm by 4 nm: a ridge 50 nm high, and one void.
fn scan() -> HeightMap {
    let map = HeightMap::from_fn(48, 40, Pitch { x: 2.0, y: 4.0 }, |x, _| {
        if (20.0..40.0).contains(&x) { 50.0 } else { 0.1 }
    })
    .unwrap();
    let mut heights = map.heights().to_owned();
    heights[[3, 4]] = f32::NAN;
    HeightMap::new(heights, map.pitch())
        .unwrap()
        .with_provenance(Provenance {
            file: Some("folder/stamp.tiff".into()),
            sha256: Some("cd".repeat(32)),
            scale_source: "sidecar <x>".into(),
            steps: vec!["read as 16-bit".into()],
        })
}

fn tip() -> TipResult {
    let sample = |radius| {
        Model::SphereCone {
            radius,
            half_angle: 17.0,
        }
        .sample(30.0, Pitch { x: 2.0, y: 4.0 })
        .unwrap()
    };
    TipResult {
        from: TipFrom::Model,
        tip: sample(10.0),
        read_out: ReadOut {
            apex_radius: Some(ApexRadius {
                value: 9.8,
                u: 0.6,
                fit_depth_nm: 2.5,
                principal_nm: [9.7, 9.9],
                sphere_nm: Some(9.9),
                paraboloid_nm: Some(8.6),
            }),
            half_angle: Some(HalfAngle {
                value: 17.2,
                u: 0.9,
                between_nm: [10.0, 30.0],
                per_azimuth: vec![(0.0, 17.0), (90.0, 17.4)],
                tilt: None,
            }),
            reasons: Vec::new(),
        },
        estimate: None,
        band: Some(Band {
            sharper: sample(9.0),
            blunter: sample(11.0),
        }),
        identified: true,
        exercised_depth_nm: Some(20.0),
        height_u_nm: 0.2,
        sha256: None,
        known: None,
        diagnosis: vec!["A finding <b>. Do this.".into()],
    }
}

fn dimension(value: f64, u: f64) -> Dimension {
    Dimension {
        name: NASTY.to_owned(),
        kind: Kind::LineWidth,
        quantity: "line width".into(),
        at: Some(0.5),
        unit: "nm",
        as_scanned: Some(Value {
            value: 128.7,
            u: Some(0.9),
        }),
        corrected: Some(CorrectedValue {
            value: Some(value),
            u: Some(u),
            expanded: Some(2.0 * u),
            k: Some(2.0),
            low: Some(value - 2.0 * u),
            high: Some(value + 2.0 * u),
        }),
        status: Some(Status::Bounded),
        flags: vec!["one <flag>".into(), "another".into()],
        budget: vec![
            Component {
                source: "axis calibration".into(),
                u: 0.002,
                distribution: Distribution::Normal,
                sensitivity: value,
                degrees_of_freedom: None,
            },
            Component {
                source: "tip".into(),
                u: 0.6,
                distribution: Distribution::OneSided,
                sensitivity: 1.7,
                degrees_of_freedom: Some(12.0),
            },
        ],
        evidence: Default::default(),
        assumptions: "vertical walls & more",
        marks: vec![[20.0, 60.0, 40.0, 60.0], [f64::NAN, 0.0, 1.0, 1.0]],
    }
}

fn level() -> Leveled {
    let scan = scan();
    let heights = scan.heights().mapv(|z| z - 0.1);
    Leveled {
        base: Array2::from_elem(heights.dim(), true),
        map: scan.with_heights(heights, "levelled: plane <taken> off"),
        noise_nm: Some(f64::from(0.21f32)),
        slope: [1e-3, -2e-3],
        row_jumps: Vec::new(),
        drift_nm: None,
        warnings: Vec::new(),
    }
}

fn outcome() -> Outcome {
    let level = level();
    let heights = level
        .map
        .heights()
        .mapv(|z| if z > 40.0 { z } else { z - 5.0 });
    let mut certainty = Array2::from_elem(heights.dim(), 2u8);
    certainty[[3, 4]] = 255;
    certainty[[10, 10]] = 1;
    certainty[[11, 10]] = 0;
    let surface = SurfaceResult {
        surface: level.map.with_heights(heights, "tip effect taken off"),
        upper: Some(level.map.clone()),
        lower: Some(level.map.clone()),
        edge_leaning: Array2::from_elem(certainty.dim(), false),
        certainty,
        tolerance_nm: 0.42,
        reliability: Reliability {
            touched: 0.81,
            bounded: 0.17,
            never: 0.02,
        },
    };
    Outcome {
        scan: Some(Arc::new(scan())),
        level: Some(Arc::new(level)),
        pairs: None,
        tip: Some(Arc::new(tip())),
        surface: Some(Arc::new(surface)),
        dimensions: Some(Arc::new(vec![dimension(100.4, 1.1), dimension(-3.0, 0.2)])),
        warnings: vec!["A <warning>.".into()],
    }
}

/// Outcomes cut off after each stage, the last without dimensions asked for.
fn partial_outcomes() -> Vec<Outcome> {
    let whole = outcome();
    let scan = Outcome {
        scan: whole.scan.clone(),
        warnings: vec!["No tip: too few <features>.".into()],
        ..Outcome::default()
    };
    let level = Outcome {
        level: whole.level.clone(),
        ..scan.clone()
    };
    let mut bare = dimension(1.0, 0.1);
    bare.corrected = None;
    bare.status = None;
    bare.at = None;
    let no_tip = Outcome {
        dimensions: Some(Arc::new(vec![bare])),
        ..level.clone()
    };
    let tip = Outcome {
        tip: whole.tip.clone(),
        ..level.clone()
    };
    let no_dimensions = Outcome {
        dimensions: Some(Arc::new(Vec::new())),
        ..whole
    };
    vec![Outcome::default(), scan, level, no_tip, tip, no_dimensions]
}

/// Asserts that `html` is well-formed, refers to nothing outside itself, and returns its text.
fn well_formed(html: &str) -> String {
    let mut reader = quick_xml::Reader::from_str(html);
    reader.config_mut().check_end_names = true;
    let (mut depth, mut text) = (0, String::new());
    loop {
        match reader.read_event().expect("well-formed XML") {
            Event::Start(e) => {
                depth += 1;
                check_element(&e);
            }
            Event::Empty(e) => check_element(&e),
            Event::End(_) => depth -= 1,
            Event::Text(t) => text.push_str(&t),
            Event::GeneralRef(r) => {
                let name = r.to_string();
                assert!(
                    ["amp", "lt", "gt", "quot", "#39"].contains(&name.as_str()),
                    "entity {name}"
                );
            }
            Event::Eof => break,
            _ => {}
        }
    }
    assert_eq!(depth, 0);
    text
}

fn check_element(element: &quick_xml::events::BytesStart) {
    let name = element.name();
    let name = name.as_ref().to_owned();
    assert!(
        !["script", "link", "iframe", "img", "object"].contains(&name.as_str()),
        "{name}"
    );
    for attribute in element.attributes() {
        let attribute = attribute.expect("a well-formed attribute");
        let key = attribute.key.as_ref().to_owned();
        let value = attribute.value.to_string();
        assert!(!key.starts_with("on"), "{key}");
        if matches!(key.as_str(), "href" | "src" | "xlink:href") {
            assert!(value.starts_with("data:image/png;base64,"), "{value}");
        } else if key != "xmlns" {
            assert!(!value.contains("://"), "{key}={value}");
        }
    }
}

fn no_nan(text: &str) {
    for word in ["NaN", "nan,", ">inf", "-inf", ": inf"] {
        assert!(!text.contains(word), "{word}");
    }
}

/// The contract's example of result.json, as in the project's outward contract.
const CONTRACT: &str = r#"{
  "schema": "truewidth.result/1",
  "program": "0.1.0",
  "job": {"title": "...", "sha256": "..."},
  "scan": {"file": "...", "sha256": "...", "columns": 512, "rows": 512, "pitch_nm": [2.0, 2.0], "noise_nm": 0.21},
  "tip": {"from": "blind", "threshold_nm": 0.4, "exercised_depth_nm": 61.0,
          "apex_radius_nm": {"value": 9.8, "u": 0.6, "fit_depth_nm": 2.5},
          "half_angle_deg": {"value": 17.2, "u": 0.9},
          "diagnosis": []},
  "reliability": {"touched": 0.81, "bounded": 0.17, "never": 0.02},
  "dimensions": [
    {"name": "line 2", "kind": "line-width", "at": 0.5, "unit": "nm",
     "as_scanned": {"value": 128.7, "u": 0.9},
     "corrected": {"value": 100.4, "u": 1.1, "U": 2.2, "k": 2.0, "low": 97.9, "high": 103.1},
     "status": "bounded", "flags": ["..."],
     "budget": [{"source": "axis calibration", "u": 0.2, "distribution": "normal", "sensitivity": 1.0}]}
  ],
  "warnings": ["..."]
}"#;

/// Every key of `wanted` is in `found` with a value of the same type, or null.
fn covers(wanted: &Json, found: &Json, at: &str) {
    match (wanted, found) {
        (_, Json::Null) => {}
        (Json::Object(wanted), Json::Object(found)) => {
            for (key, value) in wanted {
                let there = found
                    .get(key)
                    .unwrap_or_else(|| panic!("{at}.{key} is missing"));
                covers(value, there, &format!("{at}.{key}"));
            }
        }
        (Json::Array(wanted), Json::Array(found)) => {
            for item in found {
                if let Some(first) = wanted.first() {
                    covers(first, item, &format!("{at}[]"));
                }
            }
        }
        _ => assert_eq!(
            std::mem::discriminant(wanted),
            std::mem::discriminant(found),
            "{at}: {found}"
        ),
    }
}

#[test]
fn the_result_has_every_key_of_the_contract() {
    let contract: Json = serde_json::from_str(CONTRACT).unwrap();
    let result = result_json(&job(), &outcome());
    covers(&contract, &result, "result");
    assert_eq!(result["schema"], contract["schema"]);
    assert_eq!(result["tip"]["apex_radius_nm"]["value"], 9.8);
    assert_eq!(result["dimensions"][0]["corrected"]["U"], 2.2);
    assert_eq!(result["dimensions"][0]["status"], "bounded");
    assert_eq!(
        result["dimensions"][0]["budget"][1]["distribution"],
        "one-sided"
    );
    assert_eq!(result["scan"]["noise_nm"], 0.21, "no noise digits of f32");
    assert_eq!(
        result["scan"]["file"], "stamp & <14>.tiff",
        "as given in the job"
    );
    assert_eq!(tip_json(&tip()), {
        let mut alone = result["tip"].clone();
        alone["file"] = Json::Null;
        alone
    });
    for outcome in partial_outcomes() {
        covers(&contract, &result_json(&job(), &outcome), "partial");
    }
}

#[test]
fn what_could_not_be_had_is_null_with_a_reason() {
    let outcome = &partial_outcomes()[3];
    let result = result_json(&job(), outcome);
    for key in [
        "apex_radius_nm",
        "half_angle_deg",
        "threshold_nm",
        "exercised_depth_nm",
    ] {
        assert!(result["tip"][key].is_null(), "{key}");
    }
    assert_eq!(result["tip"]["diagnosis"][0], "No tip: too few <features>.");
    assert!(result["reliability"].is_null());
    assert!(result["dimensions"][0]["corrected"].is_null());
    assert_eq!(result["dimensions"][0]["as_scanned"]["value"], 128.7);
    let mut odd = dimension(f64::NAN, f64::INFINITY);
    odd.budget[0].u = f64::NAN;
    odd.as_scanned = Some(Value {
        value: f64::NAN,
        u: None,
    });
    let outcome = Outcome {
        dimensions: Some(Arc::new(vec![odd])),
        ..self::outcome()
    };
    let result = result_json(&job(), &outcome);
    assert!(result["dimensions"][0]["as_scanned"].is_null());
    assert!(result["dimensions"][0]["corrected"]["value"].is_null());
    assert!(result["dimensions"][0]["budget"][0]["u"].is_null());
    no_nan(&result.to_string());
    no_nan(&text_table(&job(), &outcome));
    no_nan(&well_formed(&report::page(&job(), &outcome, "t").unwrap()));
}

#[test]
fn the_page_is_well_formed_and_escaped_whatever_stage_is_missing() {
    for outcome in partial_outcomes().into_iter().chain([outcome()]) {
        let html = report::page(&job(), &outcome, "2026-01-01T00:00:00Z").unwrap();
        let text = well_formed(&html);
        assert!(!html.contains("<script"), "a title must not run");
        assert!(!html.contains('\u{1b}') && !html.contains('\u{0}'));
        assert!(text.contains("Cautions"));
        no_nan(&text);
        assert!(text_table(&job(), &outcome).is_ascii() || !text.is_empty());
    }
    let html = report::page(&job(), &outcome(), "t").unwrap();
    for wanted in [
        "one &lt;flag&gt;",
        "A &lt;warning&gt;.",
        "A finding &lt;b&gt;.",
        "levelled: plane &lt;taken&gt; off",
        "sidecar &lt;x&gt;",
        "vertical walls &amp; more",
        "stamp &amp; &lt;14&gt;.tiff",
    ] {
        assert!(html.contains(wanted), "{wanted}");
    }
    for sum in ["ab".repeat(32), "cd".repeat(32)] {
        assert!(html.contains(&sum));
    }
}

#[test]
fn numbers_of_the_page_carry_their_unit_and_digits() {
    let html = report::page(&job(), &outcome(), "t").unwrap();
    for wanted in [
        ">128.70 nm<",
        "u = 0.90 nm",
        ">100.4 nm<",
        ">2.2 nm<",
        "98.2 to 102.6 nm",
        "\u{2212}3.40 to \u{2212}2.60 nm",
        "apex radius 9.80 nm (u = 0.60 nm, fitted over 2.5 nm",
        "half-angle 17.20° (u = 0.90°",
        "2 nm along x, 4 nm along y",
    ] {
        assert!(html.contains(wanted), "{wanted}");
    }
}

/// The PNG pictures of class `class`, decoded.
fn pictures(html: &str, class: &str) -> Vec<image::RgbaImage> {
    html.split(&format!("<image class=\"{class}\""))
        .skip(1)
        .map(|rest| {
            let data = rest.split("base64,").nth(1).unwrap();
            let data = data.split('"').next().unwrap();
            let bytes = base64::engine::general_purpose::STANDARD
                .decode(data)
                .unwrap();
            image::load_from_memory(&bytes).unwrap().to_rgba8()
        })
        .collect()
}

#[test]
fn both_maps_are_on_one_scale_and_voids_are_clear() {
    let outcome = outcome();
    let drawing = maps::height_maps(&outcome, None).unwrap().unwrap();
    let [scanned, corrected]: [image::RgbaImage; 2] = pictures(&drawing, "map").try_into().unwrap();
    // The scan spans 0 to 50 nm, the corrected map -5 to 50: one scale from -5 to 50.
    let t = |z: f32| colour::ramp(((z + 5.0) / 55.0 * 254.0).round() / 254.0);
    assert_eq!(scanned.get_pixel(0, 0).0[..3], t(0.0));
    assert_eq!(corrected.get_pixel(0, 0).0[..3], t(-5.0));
    assert_eq!(scanned.get_pixel(15, 0).0, corrected.get_pixel(15, 0).0);
    assert_eq!(scanned.get_pixel(15, 0).0[..3], t(50.0));
    assert_eq!(scanned.get_pixel(4, 3).0[3], 0);
    assert_eq!(corrected.get_pixel(4, 3).0[3], 0);
    assert_eq!(drawing.matches("fill=\"url(#void)\"").count(), 2);
    assert_eq!(
        drawing.matches("linearGradient id=").count(),
        1,
        "one colour bar"
    );
}

#[test]
fn maps_keep_their_true_aspect_and_large_ones_are_reduced() {
    let side = |drawing: &str, name: &str| -> f64 {
        let image = drawing.split("<image class=\"map\"").nth(1).unwrap();
        let value = image.split(&format!(" {name}=\"")).nth(1).unwrap();
        value.split('"').next().unwrap().parse().unwrap()
    };
    // 40 columns of 2 nm by 48 rows of 4 nm.
    let drawing = maps::height_maps(&outcome(), None).unwrap().unwrap();
    assert!((side(&drawing, "width") / side(&drawing, "height") - 80.0 / 192.0).abs() < 1e-3);
    let mut level = level();
    let (rows, columns) = (300, 5000);
    let mut heights = Array2::zeros((rows, columns));
    heights[[123, 3456]] = 90.0f32;
    level.map = HeightMap::new(heights, Pitch { x: 1.0, y: 3.0 }).unwrap();
    let wide = Outcome {
        level: Some(Arc::new(level)),
        ..Outcome::default()
    };
    let drawing = maps::height_maps(&wide, None).unwrap().unwrap();
    assert!((side(&drawing, "width") / side(&drawing, "height") - 5000.0 / 900.0).abs() < 1e-2);
    let picture = &pictures(&drawing, "map")[0];
    assert_eq!(picture.dimensions(), (1000, 60));
    assert_eq!(
        picture.get_pixel(3456 / 5, 123 / 5).0[..3],
        colour::ramp(1.0)
    );
}

#[test]
fn the_section_goes_through_the_first_region_across_its_line() {
    let section = sections::Section::choose(&job(), &outcome()).unwrap();
    assert_eq!((section.from, section.to), ((2.0, 60.0), (58.0, 60.0)));
    assert!(
        section
            .place
            .starts_with("along x at y = 60 nm, through the middle of the region")
    );
    let mut across_y = job();
    across_y.file.dimensions[0].across = Some(Axis::Y);
    let section = sections::Section::choose(&across_y, &outcome()).unwrap();
    assert_eq!((section.from, section.to), ((30.0, 0.0), (30.0, 130.0)));
    let mut none = job();
    none.file.dimensions.clear();
    let section = sections::Section::choose(&none, &outcome()).unwrap();
    assert_eq!((section.from, section.to), ((0.0, 96.0), (80.0, 96.0)));
    assert_eq!(sections::Section::choose(&none, &Outcome::default()), None);
    let drawing = sections::surface_section(&outcome(), &section).unwrap();
    for class in ["\"scanned\"", "\"corrected\"", "\"band\""] {
        assert!(drawing.contains(class), "{class}");
    }
}

#[test]
fn the_same_outcome_gives_the_same_bytes_apart_from_the_time() {
    let folder = tempfile::tempdir().unwrap();
    let (a, b) = (folder.path().join("a"), folder.path().join("b"));
    write_at(&a, &job(), &outcome(), "2026-01-01T00:00:00Z").unwrap();
    write_at(&b, &job(), &outcome(), "2027-12-31T23:59:59Z").unwrap();
    for name in ["surface.npy", "certainty.npy", "tip.npy"] {
        let read = |f: &Path| std::fs::read(f.join(name)).unwrap();
        assert_eq!(read(&a), read(&b), "{name}");
    }
    for name in ["result.json", "report.html"] {
        let read = |f: &Path| std::fs::read_to_string(f.join(name)).unwrap();
        let (a, b) = (read(&a), read(&b));
        let other: Vec<_> = a.lines().zip(b.lines()).filter(|(a, b)| a != b).collect();
        assert_eq!(other.len(), 1, "{name}");
        assert!(other[0].0.contains("2026-01-01T00:00:00Z"));
        assert_eq!(a.lines().count(), b.lines().count());
    }
    let text = std::fs::read_to_string(a.join("result.json")).unwrap();
    let mut read: Json = serde_json::from_str(&text).unwrap();
    read.as_object_mut().unwrap().remove("written");
    assert_eq!(read, result_json(&job(), &outcome()));
}

#[test]
fn the_maps_read_back_and_stale_ones_go() {
    let folder = tempfile::tempdir().unwrap();
    let written = write(folder.path(), &job(), &outcome()).unwrap();
    assert!(written.result.exists() && written.report.exists());
    let tip: Array2<f32> = ndarray_npy::read_npy(folder.path().join("tip.npy")).unwrap();
    assert_eq!(tip, self::tip().tip.shape());
    let surface: Array2<f32> = ndarray_npy::read_npy(folder.path().join("surface.npy")).unwrap();
    let wanted = outcome().surface.unwrap();
    assert_eq!(
        surface.mapv(f32::to_bits),
        wanted.surface.heights().mapv(f32::to_bits)
    );
    let certainty: Array2<u8> = ndarray_npy::read_npy(folder.path().join("certainty.npy")).unwrap();
    assert_eq!(certainty, wanted.certainty);
    write(folder.path(), &job(), &partial_outcomes()[3]).unwrap();
    for name in ["surface.npy", "certainty.npy", "tip.npy"] {
        assert!(!folder.path().join(name).exists(), "{name}");
    }
    assert!(folder.path().join("result.json").exists());
}

#[test]
fn the_terminal_table_is_aligned_and_tame() {
    let text = text_table(&job(), &outcome());
    assert!(!text.chars().any(|c| c.is_control() && c != '\n'));
    let table: Vec<&str> = text.lines().filter(|l| l.contains("line width")).collect();
    assert_eq!(table.len(), 2);
    let head = text.lines().find(|l| l.starts_with("Dimension")).unwrap();
    // Right-aligned columns end where their heading ends.
    let end = |line: &str, word: &str| {
        let at = line.find(word).unwrap() + word.len();
        line[..at].chars().count()
    };
    assert_eq!(end(head, "As scanned"), end(table[0], "128.70 nm"));
    assert_eq!(end(head, "Corrected"), end(table[0], "100.4 nm"));
    assert_eq!(end(head, "Corrected"), end(table[1], "-3.00 nm"));
    assert!(table[0].ends_with("bounded  1, 2"));
    assert!(text.contains(" 1  one <flag>"));
    let none = text_table(&job(), &Outcome::default());
    assert!(none.contains("No dimension was asked for") && none.contains("Tip: none"));
    assert!(tip_text(&tip()).contains("apex radius 9.80 nm"));
}

#[test]
fn one_pixel_and_all_void_are_drawn_or_said() {
    for heights in [ndarray::arr2(&[[4.0f32]]), ndarray::arr2(&[[f32::NAN]])] {
        let mut level = level();
        level.map = HeightMap::new(heights, Pitch::square(2.0)).unwrap();
        let mut tip = tip();
        tip.tip = Tip::new(ndarray::arr2(&[[0.0]]), Pitch::square(2.0)).unwrap();
        tip.band = None;
        let outcome = Outcome {
            level: Some(Arc::new(level)),
            tip: Some(Arc::new(tip)),
            ..Outcome::default()
        };
        well_formed(&report::page(&job(), &outcome, "t").unwrap());
    }
}

#[test]
fn dates_are_those_of_the_calendar() {
    // Unix times from common practice: `date -u -d @N`.
    assert_eq!(utc(0), "1970-01-01T00:00:00Z");
    assert_eq!(utc(951_782_399), "2000-02-28T23:59:59Z");
    assert_eq!(utc(951_782_400), "2000-02-29T00:00:00Z");
    assert_eq!(utc(1_709_251_199), "2024-02-29T23:59:59Z");
    assert_eq!(utc(4_107_542_400), "2100-03-01T00:00:00Z");
    assert_eq!(utc(1_767_225_599), "2025-12-31T23:59:59Z");
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(48))]

    #[test]
    fn any_text_and_any_number_give_a_well_formed_page(
        text in any::<String>(),
        value in any::<f64>(),
        u in any::<f64>(),
        low in proptest::option::of(any::<f64>()),
    ) {
        let mut job = job();
        job.file.title = text.clone();
        job.file.dimensions[0].name = text.clone();
        let mut odd = dimension(value, u);
        odd.name = text.clone();
        odd.flags = vec![text.clone()];
        if let Some(corrected) = &mut odd.corrected {
            corrected.low = low;
        }
        let outcome = Outcome {
            dimensions: Some(Arc::new(vec![odd])),
            warnings: vec![text],
            ..Outcome::default()
        };
        well_formed(&report::page(&job, &outcome, "t").unwrap());
        let result = serde_json::to_string(&result_json(&job, &outcome)).unwrap();
        prop_assert!(serde_json::from_str::<Json>(&result).is_ok());
        text_table(&job, &outcome);
    }
}
