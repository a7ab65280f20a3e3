//! Every sample job from end to end, against the truth beside it: what is corrected must be nearer
//! to the truth than what was scanned, and every interval must hold it.

use std::path::{Path, PathBuf};
use truewidth::dimensions::{Dimension, Kind, Status};
use truewidth::job::{Job, Outcome, Stages};
use truewidth::progress::Progress;

fn folder() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("sample-scans")
}

fn run(name: &str) -> Outcome {
    let job = Job::open(&folder().join(format!("{name}.toml"))).unwrap();
    Stages::default()
        .run(&job, &Progress::new(), &mut |_| {})
        .unwrap()
}

fn truth(name: &str) -> toml::Table {
    let path = folder().join("truth").join(format!("{name}.toml"));
    std::fs::read_to_string(path).unwrap().parse().unwrap()
}

/// The truth of one result line; `None` where the truth file states none.
fn true_value(truth: &toml::Table, line: &Dimension) -> Option<f64> {
    let kind = serde_json::to_value(line.kind).unwrap();
    let several = matches!(line.kind, Kind::Particle | Kind::Texture);
    // The first line of a pitch is its result; the other methods stand beside it.
    if line.kind == Kind::Pitch && line.quantity != "pitch" {
        return None;
    }
    let entry = truth["dimension"].as_array().unwrap().iter().find(|d| {
        d["name"].as_str() == Some(&line.name)
            && d["kind"].as_str() == kind.as_str()
            && (!several || d["quantity"].as_str() == Some(&line.quantity))
    })?;
    let values = entry["true_nm"].as_array().unwrap();
    let index = line.at.map_or(Some(0), |at| {
        entry["at"]
            .as_array()
            .unwrap()
            .iter()
            .position(|a| a.as_float() == Some(at))
    })?;
    values[index].as_float()
}

/// Every line of `name` that has a truth, with it. Prints the errors: `--nocapture` shows them.
fn lines_with_truth(name: &str) -> Vec<(Dimension, f64)> {
    let outcome = run(name);
    // A second job on a scan shares its truth.
    let truth = truth(name.strip_suffix("-gauge").unwrap_or(name));
    let lines: Vec<_> = outcome
        .dimensions
        .unwrap()
        .iter()
        .filter_map(|line| Some((line.clone(), true_value(&truth, line)?)))
        .collect();
    for (line, truth) in &lines {
        let scanned = line.as_scanned.map(|v| v.value - truth);
        let corrected = line.corrected.and_then(|c| Some(c.value? - truth));
        println!(
            "{name}: {} {} at {:?}: true {truth}, scanned {scanned:+.2?}, corrected {corrected:+.2?}, {:?}",
            line.name, line.quantity, line.at, line.status
        );
    }
    lines
}

/// Every interval holds the truth; returns the lines.
fn holds(name: &str) -> Vec<(Dimension, f64)> {
    let lines = lines_with_truth(name);
    assert!(!lines.is_empty(), "{name}: nothing measured has a truth");
    for (line, truth) in &lines {
        let corrected = line.corrected.expect("a corrected column");
        if let (Some(low), Some(high)) = (corrected.low, corrected.high) {
            assert!(
                low <= *truth && *truth <= high,
                "{name}: {} {} at {:?}: {truth} is not in {low}..{high}",
                line.name,
                line.quantity,
                line.at
            );
        }
    }
    lines
}

#[test]
fn vertical_walls_with_a_blind_tip_are_bounded_and_the_interval_holds() {
    let lines = holds("stamp-14");
    for (line, _) in lines
        .iter()
        .filter(|(line, _)| line.kind == Kind::LineWidth)
    {
        // A wall steeper than the flank is never touched, at no height.
        assert_eq!(
            line.status,
            Some(Status::Bounded),
            "{} at {:?}",
            line.name,
            line.at
        );
    }
}

#[test]
fn sloped_walls_are_corrected_to_within_a_nanometre() {
    for (line, truth) in holds("stamp-22") {
        if line.kind == Kind::LineWidth && line.status == Some(Status::Touched) {
            assert!((line.as_scanned.unwrap().value - truth).abs() > 8.0);
            assert!((line.corrected.unwrap().value.unwrap() - truth).abs() < 1.0);
        }
    }
}

#[test]
fn a_step_keeps_its_height_under_tilt_and_drift() {
    let (step, truth) = holds("shim").remove(0);
    assert!((step.as_scanned.unwrap().value - truth).abs() < 0.05);
    assert!((step.corrected.unwrap().value.unwrap() - truth).abs() < 0.05);
}

#[test]
fn particles_are_held() {
    let lines = holds("filler");
    let (mean, truth) = &lines[0];
    let scanned = mean.as_scanned.unwrap().value - truth;
    let corrected = mean.corrected.unwrap().value.unwrap() - truth;
    assert!(
        corrected.abs() < 0.2 * scanned.abs(),
        "{corrected} against {scanned}"
    );
}

#[test]
fn the_tip_of_the_spikes_is_the_true_one() {
    let outcome = run("tip-check");
    let truth = truth("tip-check");
    let tip = outcome.tip.unwrap();
    let radius = tip.read_out.apex_radius.unwrap();
    let half_angle = tip.read_out.half_angle.as_ref().unwrap();
    let radius_error = radius.value - truth["tip"]["radius_nm"].as_float().unwrap();
    let angle_error = half_angle.value - truth["tip"]["half_angle_deg"].as_float().unwrap();
    assert!(radius_error.abs() < 0.08 * 8.0, "{radius_error}");
    assert!(angle_error.abs() < 0.5, "{angle_error}");
}

#[test]
fn a_rough_floor_gives_its_texture() {
    for (line, truth) in holds("etched-floor") {
        let scanned = line.as_scanned.unwrap().value;
        assert!(
            (scanned - truth).abs() < 0.08 * truth,
            "{} {scanned}",
            line.quantity
        );
    }
}

#[test]
fn the_tip_of_the_gauge_is_the_true_one_within_its_interval() {
    let tip = run("gauge-5").tip.unwrap();
    let truth = truth("gauge-5");
    let radius = tip.read_out.apex_radius.unwrap();
    let half_angle = tip.read_out.half_angle.clone().unwrap();
    let radius_error = radius.value - truth["tip"]["radius_nm"].as_float().unwrap();
    let angle_error = half_angle.value - truth["tip"]["half_angle_deg"].as_float().unwrap();
    assert!(radius_error.abs() < 0.03 * 8.0 && radius_error.abs() < 2.0 * radius.u);
    assert!(angle_error.abs() < 0.5 && angle_error.abs() < 2.0 * half_angle.u);
    assert!(tip.identified && tip.band.is_some());
    let json = truewidth::record::tip_json(&tip);
    for way in ["model_fit", "free_form"] {
        let radius = json["known"][way]["apex_radius_nm"]["value"]
            .as_f64()
            .unwrap();
        assert!((radius - 8.0).abs() < 0.8, "{way} {radius}");
    }
    let corner = &json["known"]["certified"][4];
    assert_eq!(corner["name"], "corner-radius");
    // A rounder corner leaves a sharper tip; the width, known too, tells a part of the rounding.
    let change = corner["radius_change_nm"].as_f64().unwrap();
    assert!((-0.15..-0.05).contains(&change), "{change}");
}

#[test]
fn a_tip_from_a_separate_scan_of_another_pitch_corrects_the_lines() {
    for (line, truth) in holds("stamp-22-gauge") {
        if line.kind == Kind::LineWidth && line.status == Some(Status::Touched) {
            assert!((line.as_scanned.unwrap().value - truth).abs() > 8.0);
            assert!((line.corrected.unwrap().value.unwrap() - truth).abs() < 1.0);
        }
    }
}
