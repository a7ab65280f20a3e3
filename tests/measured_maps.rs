//! The whole chain on measured maps that no blunt nanometre tip made: it must say what it cannot
//! conclude instead of failing or inventing. Needs the folder of open samples.

use assert_cmd::Command;
use serde_json::Value;
use std::path::PathBuf;

fn sample(name: &str) -> PathBuf {
    let folder = std::env::var_os("TRUEWIDTH_SAMPLES").expect("TRUEWIDTH_SAMPLES names the folder");
    PathBuf::from(folder).join(name)
}

/// Runs everything on a scan with everything left to the program; returns result.json.
fn run(name: &str, options: &[&str]) -> Value {
    let out = tempfile::tempdir().unwrap();
    let scan = sample(name);
    Command::cargo_bin("truewidth")
        .unwrap()
        .args(["run", "--quiet", "--out"])
        .arg(out.path())
        .args(options)
        .arg(&scan)
        .assert()
        .success();
    let record = out.path().join(scan.file_stem().unwrap());
    assert!(record.join("report.html").metadata().unwrap().len() > 10_000);
    serde_json::from_slice(&std::fs::read(record.join("result.json")).unwrap()).unwrap()
}

/// No tip of these can be identified: no radius, and the reason.
fn refuses_the_tip(result: &Value) {
    assert!(
        result["tip"]["apex_radius_nm"].is_null(),
        "{}",
        result["tip"]
    );
    assert!(!result["tip"]["diagnosis"].as_array().unwrap().is_empty());
}

#[test]
#[ignore = "needs the folder of open samples named by TRUEWIDTH_SAMPLES"]
fn a_rubber_surface_with_voids() {
    let result = run("x3p/real-rubber-areal.x3p", &[]);
    refuses_the_tip(&result);
    assert!(result["scan"]["voids"].as_u64().unwrap() > 0);
}

#[test]
#[ignore = "needs the folder of open samples named by TRUEWIDTH_SAMPLES"]
fn a_bullet_land() {
    let result = run("x3p/real-bullet-land.x3p", &[]);
    refuses_the_tip(&result);
}

#[test]
#[ignore = "needs the folder of open samples named by TRUEWIDTH_SAMPLES"]
fn a_terrain_model_in_metres() {
    // The file states neither pitch nor unit; 90 m and metres are what such a model has.
    let result = run(
        "npy/jacksboro_fault_dem.npz",
        &["--map", "0", "--pitch", "90 m", "--height-unit", "m"],
    );
    refuses_the_tip(&result);
}
