//! The binary from outside: the commands, files and exit status of the contract.

use assert_cmd::Command;
use ndarray::{Array2, arr2};
use ndarray_npy::{read_npy, write_npy};
use predicates::prelude::*;
use serde_json::Value;
use std::path::{Path, PathBuf};

fn truewidth() -> Command {
    let mut command = Command::cargo_bin("truewidth").expect("the binary is built");
    // No window may open, whatever machine this runs on.
    command.env_remove("DISPLAY").env_remove("WAYLAND_DISPLAY");
    command
}

fn folder() -> tempfile::TempDir {
    tempfile::tempdir().expect("a temporary folder")
}

fn samples() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("sample-scans")
}

/// A tip with no symmetry: every mix-up of axes or signs shows.
fn skew_tip() -> Array2<f32> {
    arr2(&[[-9.0, -5.0, -8.0], [-2.0, 0.0, -3.0], [-7.0, -4.0, -6.0]])
}

#[test]
fn a_single_spike_shows_the_tip_mirrored() {
    let folder = folder();
    let path = |name: &str| folder.path().join(name);
    let mut surface = Array2::from_elem((7, 9), -100.0f32);
    surface[[3, 4]] = 10.0;
    write_npy(path("surface.npy"), &surface).unwrap();
    write_npy(path("tip.npy"), &skew_tip()).unwrap();

    truewidth()
        .args([
            "simulate",
            "--quiet",
            "--pitch",
            "2nm,3nm",
            "--height-unit",
            "nm",
        ])
        .arg(path("surface.npy"))
        .arg("--tip")
        .arg(path("tip.npy"))
        .arg("--out")
        .arg(path("scan.npy"))
        .assert()
        .success()
        .stderr("");
    let scan: Array2<f32> = read_npy(path("scan.npy")).unwrap();
    for i in 0..3usize {
        for j in 0..3usize {
            // scan(x) = H + tip(-x), interface contract.
            assert_eq!(
                scan[[3 + i - 1, 4 + j - 1]],
                10.0 + skew_tip()[[2 - i, 2 - j]]
            );
        }
    }

    truewidth()
        .args([
            "reconstruct",
            "--quiet",
            "--pitch",
            "2nm,3nm",
            "--height-unit",
            "nm",
        ])
        .arg(path("scan.npy"))
        .arg("--tip")
        .arg(path("tip.npy"))
        .arg("--out")
        .arg(path("back.npy"))
        .arg("--certainty")
        .arg(path("certainty.npy"))
        .assert()
        .success();
    let back: Array2<f32> = read_npy(path("back.npy")).unwrap();
    let certainty: Array2<u8> = read_npy(path("certainty.npy")).unwrap();
    assert_eq!(back[[3, 4]], 10.0);
    assert_eq!(certainty[[3, 4]], 2);
    // Next to the spike the tip did not reach down: an upper bound, no contact for certain.
    assert!(back[[3, 5]] > -100.0);
    assert_ne!(certainty[[3, 5]], 2);
}

#[test]
fn conversion_keeps_heights_scale_and_voids() {
    let folder = folder();
    let path = |name: &str| folder.path().join(name);
    let mut map = Array2::from_shape_fn((5, 8), |(r, c)| (r * 8 + c) as f32 * 0.25);
    map[[2, 3]] = f32::NAN;
    write_npy(path("a.npy"), &map).unwrap();
    let convert = |from: &str, to: &str, options: &[&str]| {
        truewidth()
            .args(["convert", "--quiet"])
            .args(options)
            .arg(path(from))
            .arg(path(to))
            .assert()
            .success();
    };
    convert(
        "a.npy",
        "b.tiff",
        &["--pitch", "2nm,4nm", "--height-unit", "nm"],
    );
    // The TIFF carries its scale: nothing needs to be given again.
    convert("b.tiff", "c.npy", &[]);
    let back: Array2<f32> = read_npy(path("c.npy")).unwrap();
    assert!(
        map.iter()
            .zip(&back)
            .all(|(a, b)| a == b || (a.is_nan() && b.is_nan()))
    );

    let facts = truewidth()
        .args(["inspect", "--json"])
        .arg(path("b.tiff"))
        .output()
        .unwrap();
    let facts: Value = serde_json::from_slice(&facts.stdout).unwrap();
    assert_eq!(facts["maps"][0]["columns"], 8);
    assert_eq!(facts["maps"][0]["rows"], 5);
    assert_eq!(facts["sha256"].as_str().map(str::len), Some(64));
}

#[test]
fn a_missing_scale_is_asked_for_not_guessed() {
    let folder = folder();
    let scan = folder.path().join("scan.npy");
    write_npy(&scan, &Array2::<f32>::zeros((4, 4))).unwrap();
    let out = folder.path().join("out.tiff");
    truewidth()
        .arg("convert")
        .arg(&scan)
        .arg(&out)
        .assert()
        .code(1)
        .stderr(predicate::str::contains("pitch").and(predicate::str::contains("--pitch")));
    truewidth()
        .args(["convert", "--pitch", "2nm"])
        .arg(&scan)
        .arg(&out)
        .assert()
        .code(1)
        .stderr(predicate::str::contains("--height-unit"));
    assert!(!out.exists());
}

#[test]
fn files_of_other_kinds_get_a_plain_answer() {
    let folder = folder();
    let cases: [(&str, &[u8]); 4] = [
        ("empty.tiff", b""),
        ("text.npy", b"this is not a height map\n"),
        ("cut.npy", b"\x93NUMPY\x01\x00v\x00{'descr': '<f4', "),
        ("cut.png", b"\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR\x00\x00"),
    ];
    for (name, bytes) in cases {
        let path = folder.path().join(name);
        std::fs::write(&path, bytes).unwrap();
        truewidth()
            .arg("inspect")
            .arg(&path)
            .assert()
            .code(1)
            .stdout("")
            .stderr(predicate::str::contains(name).and(predicate::str::contains("panicked").not()));
    }
    truewidth()
        .args(["inspect", "no/such/file.tiff"])
        .assert()
        .code(1);
}

#[test]
fn wrong_usage_is_2() {
    truewidth().args(["run"]).assert().code(2);
    truewidth()
        .args(["inspect", "x", "--pitch", "2"])
        .assert()
        .code(2);
    truewidth().args(["polish"]).arg("x").assert().code(2);
    truewidth()
        .args(["run", "a/job.toml", "b/job.toml"])
        .assert()
        .code(2);
}

#[test]
fn completions_and_manual_come_from_the_definitions() {
    truewidth()
        .args(["completions", "bash"])
        .assert()
        .success()
        .stdout(predicate::str::contains("reconstruct"));
    truewidth()
        .arg("manual")
        .assert()
        .success()
        .stdout(predicate::str::contains(".TH").and(predicate::str::contains("certainty")));
}

/// Copies the sample `name` (scan and job) into `folder`; returns the job's path.
fn sample_job(folder: &Path, name: &str) -> PathBuf {
    let job = folder.join(format!("{name}.toml"));
    std::fs::copy(samples().join(format!("{name}.toml")), &job).unwrap();
    let scan = format!("{name}.tiff");
    std::fs::copy(samples().join(&scan), folder.join(&scan)).unwrap();
    job
}

#[test]
fn a_job_gives_the_whole_record_and_twice_the_same() {
    let folder = folder();
    let job = sample_job(folder.path(), "shim");
    let record = |out: &str| {
        let out = folder.path().join(out);
        truewidth()
            .args(["run", "--quiet", "--out"])
            .arg(&out)
            .arg(&job)
            .assert()
            .success()
            .stdout(predicate::str::contains("report.html"));
        out.join("shim")
    };
    let (a, b) = (record("a"), record("b"));
    for name in ["surface.npy", "certainty.npy", "tip.npy"] {
        assert_eq!(
            std::fs::read(a.join(name)).unwrap(),
            std::fs::read(b.join(name)).unwrap()
        );
    }
    let result = |folder: &Path| -> Value {
        let mut value: Value =
            serde_json::from_slice(&std::fs::read(folder.join("result.json")).unwrap()).unwrap();
        assert!(value.as_object_mut().unwrap().remove("written").is_some());
        value
    };
    let first = result(&a);
    assert_eq!(first, result(&b));
    assert_eq!(first["schema"], "truewidth.result/1");
    for key in [
        "program",
        "job",
        "scan",
        "tip",
        "reliability",
        "dimensions",
        "warnings",
    ] {
        assert!(first.get(key).is_some(), "{key}");
    }
    let html = std::fs::read_to_string(a.join("report.html")).unwrap();
    assert!(html.contains(first["scan"]["sha256"].as_str().unwrap()));

    let surface: Array2<f32> = read_npy(a.join("surface.npy")).unwrap();
    let certainty: Array2<u8> = read_npy(a.join("certainty.npy")).unwrap();
    let tip: Array2<f32> = read_npy(a.join("tip.npy")).unwrap();
    assert_eq!(surface.dim(), certainty.dim());
    assert_eq!((tip.nrows() % 2, tip.ncols() % 2), (1, 1));
    assert_eq!(tip[[tip.nrows() / 2, tip.ncols() / 2]], 0.0);
}

#[test]
fn one_bad_job_does_not_stop_the_others() {
    let folder = folder();
    let good = sample_job(folder.path(), "shim");
    let bad = folder.path().join("bad.toml");
    std::fs::write(&bad, "[scan]\nfile = \"missing.tiff\"\n").unwrap();
    let odd = folder.path().join("odd.toml");
    std::fs::write(&odd, "[scan]\nfile = \"x.tiff\"\npich = 3\n").unwrap();
    let out = folder.path().join("out");
    truewidth()
        .args(["run", "--workers", "2", "--out"])
        .arg(&out)
        .args([&bad, &odd, &good])
        .assert()
        .code(1)
        .stderr(
            predicate::str::contains("missing.tiff")
                .and(predicate::str::contains("pich"))
                .and(predicate::str::contains("2 of 3 jobs failed")),
        );
    assert!(out.join("shim/result.json").exists());
    assert!(!out.join("bad").exists());
}

#[test]
fn the_tip_command_prints_the_tip_object() {
    let folder = folder();
    let tip = folder.path().join("tip.npy");
    let output = truewidth()
        .args(["tip", "--json", "--quiet", "--out"])
        .arg(&tip)
        .arg(samples().join("tip-check.tiff"))
        .output()
        .unwrap();
    assert!(
        output.status.success(),
        "{}",
        String::from_utf8_lossy(&output.stderr)
    );
    let object: Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(object["from"], "blind");
    for key in [
        "threshold_nm",
        "exercised_depth_nm",
        "apex_radius_nm",
        "half_angle_deg",
    ] {
        assert!(object.get(key).is_some(), "{key}");
    }
    assert!(object["diagnosis"].is_array());
    let grid: Array2<f32> = read_npy(&tip).unwrap();
    assert_eq!(grid[[grid.nrows() / 2, grid.ncols() / 2]], 0.0);
}

/// What the expert's options do: the spikes' own radius comes off; the published iteration without
/// smoothing reads another tip.
#[test]
fn the_tip_command_takes_the_experts_options() {
    let folder = folder();
    let radius = |options: &[&str]| {
        let output = truewidth()
            .args(["tip", "--json", "--quiet", "--out"])
            .arg(folder.path().join("tip.npy"))
            .arg(samples().join("tip-check.tiff"))
            .args(options)
            .output()
            .unwrap();
        let error = String::from_utf8_lossy(&output.stderr).into_owned();
        assert!(output.status.success(), "{error}");
        let object: Value = serde_json::from_slice(&output.stdout).unwrap();
        object["apex_radius_nm"]["value"].as_f64()
    };
    let own = radius(&[]).unwrap();
    let without = radius(&["--feature-radius", "1.5nm"]).unwrap();
    assert!((own - without - 1.5).abs() < 0.3, "{own} {without}");
    assert_ne!(radius(&["--textbook"]), Some(own));
    assert_ne!(radius(&["--smoothing", "2 nm"]), Some(own));
}

#[test]
fn the_tip_command_takes_a_known_shape_from_a_file() {
    let folder = folder();
    let known = folder.path().join("gauge.toml");
    let text = "model = \"sphere-cone\"\nuse = \"free-form\"\nshape = \"ridges\"\nwidth = \"70 nm\"\n\
                u-width = \"0.4 nm\"\nheight = \"45 nm\"\npitch = \"128 nm\"\ncorner-radius = \"3 nm\"\n\
                u-corner-radius = \"0.15 nm\"\n";
    std::fs::write(&known, text).unwrap();
    let run = |known: &Path| {
        truewidth()
            .args(["tip", "--json", "--quiet", "--support", "40 nm", "--out"])
            .arg(folder.path().join("tip.npy"))
            .arg("--known")
            .arg(known)
            .arg(samples().join("gauge-5.tiff"))
            .output()
            .unwrap()
    };
    let output = run(&known);
    let said = String::from_utf8_lossy(&output.stderr).into_owned();
    assert!(output.status.success(), "{said}");
    let object: Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(object["from"], "known-shape");
    assert_eq!(object["known"]["use"], "free-form");
    let fitted = &object["known"]["model_fit"]["apex_radius_nm"];
    let (low, high) = (
        fitted["low"].as_f64().unwrap(),
        fitted["high"].as_f64().unwrap(),
    );
    assert!(low < 8.0 && 8.0 < high, "{fitted}");
    let grid: Array2<f32> = read_npy(folder.path().join("tip.npy")).unwrap();
    assert_eq!(grid[[grid.nrows() / 2, grid.ncols() / 2]], 0.0);

    std::fs::write(&known, "shape = \"ridges\"\n").unwrap();
    let output = run(&known);
    assert_eq!(output.status.code(), Some(2));
    let said = String::from_utf8_lossy(&output.stderr).into_owned();
    assert!(
        said.contains("without width") && said.contains("gauge.toml"),
        "{said}"
    );
}

#[test]
fn without_a_display_the_demo_runs_headless_and_says_so() {
    let folder = folder();
    truewidth()
        .current_dir(folder.path())
        .env("TRUEWIDTH_DATA", folder.path().join("data"))
        .assert()
        .success()
        .stderr(predicate::str::contains("no display"))
        .stdout(predicate::str::contains("Report:"));
    assert!(folder.path().join("results").is_dir());
}

/// A sphere-cone on a grid of 1 nm, from its closed form.
fn sphere_cone(radius: f64, half_angle: f64) -> Array2<f32> {
    let (sin, cos) = half_angle.to_radians().sin_cos();
    Array2::from_shape_fn((61, 61), |(r, c)| {
        let d = (r as f64 - 30.0).hypot(c as f64 - 30.0);
        let deep = if d <= radius * cos {
            radius - (radius * radius - d * d).sqrt()
        } else {
            radius * (1.0 - sin) + (d - radius * cos) * cos / sin
        };
        -deep as f32
    })
}

fn json_of(command: &mut Command) -> Value {
    let output = command.output().unwrap();
    let said = String::from_utf8_lossy(&output.stderr).into_owned();
    assert!(output.status.success(), "{said}");
    serde_json::from_slice(&output.stdout).unwrap()
}

#[test]
fn a_worn_tip_is_told_from_a_fresh_one() {
    let folder = folder();
    let path = |name: &str| folder.path().join(name);
    write_npy(path("fresh.npy"), &sphere_cone(8.0, 15.0)).unwrap();
    write_npy(path("worn.npy"), &sphere_cone(12.0, 15.0)).unwrap();
    let mut command = truewidth();
    command.args(["compare", "--quiet", "--json", "--pitch", "1nm"]);
    command.args(["--uncertainty", "0.1nm", "--out"]);
    command.arg(path("difference.npy"));
    let found = json_of(command.arg(path("fresh.npy")).arg(path("worn.npy")));
    assert_eq!(found["schema"], "truewidth.comparison/1");
    assert_eq!(found["verdict"], "worn");
    let difference = found["apex_radius_nm"]["difference"].as_f64().unwrap();
    assert!((difference - 4.0).abs() < 0.1, "{difference}");
    let map: Array2<f32> = read_npy(path("difference.npy")).unwrap();
    // Blunter everywhere but at the common apex.
    assert_eq!(map[[30, 30]], 0.0);
    assert!(map[[30, 38]] > 0.5 && map[[38, 30]] > 0.5);
    // Without a pitch nothing is assumed.
    truewidth()
        .arg("compare")
        .args([path("fresh.npy"), path("worn.npy")])
        .assert()
        .code(1)
        .stderr(predicate::str::contains("--pitch"));
}

#[test]
fn reach_follows_the_closed_form_by_model_and_by_file() {
    // R = 10, 15 degrees, a trench of 22 nm: 12.4155 nm.
    let folder = folder();
    let tip = folder.path().join("tip.npy");
    write_npy(&tip, &sphere_cone(10.0, 15.0)).unwrap();
    let trench = ["--trench-width", "22nm", "--depth", "60nm", "--json"];
    let mut model = truewidth();
    model.args(["reach", "--radius", "10nm", "--half-angle", "15"]);
    let mut file = truewidth();
    file.args(["reach", "--quiet", "--pitch", "1nm", "--tip"])
        .arg(&tip);
    for command in [&mut model, &mut file] {
        let found = json_of(command.args(trench));
        let depth = found["reach"]["imaged_nm"].as_f64().unwrap();
        assert!((depth - 12.4155).abs() < 0.15, "{depth}");
        assert_eq!(found["reach"]["reaches_bottom"], false);
    }
    for wrong in [
        &["reach", "--trench-width", "22nm", "--depth", "60nm"][..],
        &["reach", "--radius", "10nm", "--half-angle", "15"],
        &[
            "reach",
            "--radius",
            "10nm",
            "--half-angle",
            "15",
            "--trench-width",
            "22nm",
        ],
        &[
            "reach",
            "--radius",
            "10nm",
            "--half-angle",
            "95",
            "--particle",
            "22nm",
        ],
    ] {
        truewidth().args(wrong).assert().code(2);
    }
}

#[test]
fn a_tip_becomes_a_closed_mesh() {
    let folder = folder();
    let path = |name: &str| folder.path().join(name);
    write_npy(path("tip.npy"), &sphere_cone(10.0, 15.0)).unwrap();
    for name in ["tip.stl", "tip.ply"] {
        truewidth()
            .args(["convert", "--quiet", "--pitch", "1nm"])
            .args([path("tip.npy"), path(name)])
            .assert()
            .success();
    }
    let stl = std::fs::read(path("tip.stl")).unwrap();
    let count = u32::from_le_bytes(stl[80..84].try_into().unwrap()) as usize;
    // Two triangles a cell above and below, two for each of the rim's 240 sides.
    assert_eq!(count, 2 * 2 * 60 * 60 + 2 * 240);
    assert_eq!(stl.len(), 84 + 50 * count);
    let ply = std::fs::read(path("tip.ply")).unwrap();
    assert!(ply.starts_with(b"ply\nformat binary_little_endian 1.0\n"));
    // A scan is no tip.
    write_npy(path("scan.npy"), &Array2::<f32>::ones((5, 5))).unwrap();
    truewidth()
        .args(["convert", "--pitch", "1nm"])
        .args([path("scan.npy"), path("scan.stl")])
        .assert()
        .code(1)
        .stderr(predicate::str::contains("centre"));
}
