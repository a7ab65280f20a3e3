//! The sample scans against the truth beside them, and their jobs against both.

use std::path::{Path, PathBuf};
use truewidth::files;
use truewidth::heightmap::HeightMap;
use truewidth::job::JobFile;
use truewidth::morphology;
use truewidth::progress::Progress;
use truewidth::tip::model::Model;

const NAMES: [&str; 7] = [
    "stamp-14",
    "stamp-22",
    "tip-check",
    "gauge-5",
    "filler",
    "shim",
    "etched-floor",
];

fn folder() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("sample-scans")
}

fn open(file: &str) -> HeightMap {
    // No options: the files state their own scale.
    files::open(&folder().join(file), &files::OpenOptions::default()).unwrap()
}

fn truth(name: &str) -> toml::Table {
    let text = std::fs::read_to_string(folder().join(format!("truth/{name}.toml"))).unwrap();
    text.parse().unwrap()
}

fn number(table: &toml::Table, group: &str, key: &str) -> f64 {
    table[group][key].as_float().unwrap()
}

#[test]
fn every_job_fits_its_scan_and_its_truth() {
    let mut jobs = 0;
    for entry in std::fs::read_dir(folder()).unwrap() {
        let path = entry.unwrap().path();
        if path.extension().is_none_or(|e| e != "toml") {
            continue;
        }
        jobs += 1;
        let job = JobFile::from_toml(&std::fs::read_to_string(&path).unwrap()).unwrap();
        let scan = open(job.scan.file.to_str().unwrap());
        let name = job.scan.file.file_stem().unwrap().to_str().unwrap();
        assert!(NAMES.contains(&name), "{name}");
        let truth = truth(name);
        for request in &job.dimensions {
            let region = request.region.unwrap_or(scan.whole());
            assert!(region.left >= 0.0 && region.left + region.width <= scan.width_nm());
            assert!(region.top >= 0.0 && region.top + region.height <= scan.length_nm());
            let known = truth["dimension"].as_array().unwrap();
            let found = known
                .iter()
                .find(|d| d["name"].as_str() == Some(&request.name));
            let found = found.unwrap_or_else(|| panic!("{name}: no truth for {}", request.name));
            assert_eq!(
                serde_json::to_value(request.kind).unwrap(),
                found["kind"].as_str().unwrap()
            );
            let at: Vec<f64> = found.get("at").map_or(Vec::new(), |at| {
                at.as_array()
                    .unwrap()
                    .iter()
                    .filter_map(toml::Value::as_float)
                    .collect()
            });
            assert_eq!(request.at, at, "{name}: {}", request.name);
        }
    }
    assert!(jobs >= NAMES.len());
}

/// The reconstruction with the true tip is never below the truth by more than the noise, and
/// meets it where the tip touched. A tilt, a tip or a map turned the wrong way breaks this.
#[test]
fn the_true_tip_gives_back_the_truth_where_it_touched() {
    for name in NAMES {
        let truth = truth(name);
        let surface = open(&format!("truth/{name}.npy"));
        let scan = open(&format!("{name}.tiff"));
        assert_eq!(scan.heights().dim(), surface.heights().dim());
        let pitch = scan.pitch();
        assert!(pitch.agrees_with(surface.pitch()));
        let stated = truth["pitch_nm"].as_array().unwrap();
        assert_eq!(
            [pitch.x, pitch.y].map(Some),
            [stated[0].as_float(), stated[1].as_float()]
        );

        let tilt = truth["instrument"]["tilt_nm_per_nm"].as_array().unwrap();
        let (tilt_x, tilt_y) = (tilt[0].as_float().unwrap(), tilt[1].as_float().unwrap());
        let mut level = scan.heights().to_owned();
        for ((r, c), z) in level.indexed_iter_mut() {
            let plane = tilt_x * (c as f64 + 0.5) * pitch.x + tilt_y * (r as f64 + 0.5) * pitch.y;
            *z -= plane as f32;
        }
        let model = Model::SphereCone {
            radius: number(&truth, "tip", "radius_nm"),
            half_angle: number(&truth, "tip", "half_angle_deg"),
        };
        let tip = model
            .sample(number(&truth, "tip", "support_nm"), pitch)
            .unwrap();
        let back = morphology::erode(level.view(), tip.shape(), &Progress::new()).unwrap();

        let instrument = |key| number(&truth, "instrument", key);
        let random = instrument("noise_nm").hypot(instrument("row_jitter_nm"));
        let allowed = instrument("drift_nm") + 6.0 * random;
        let mut differences: Vec<f64> = back
            .iter()
            .zip(surface.heights())
            .map(|(b, s)| f64::from(b - s))
            .collect();
        differences.sort_by(f64::total_cmp);
        let at = |fraction: f64| differences[(fraction * (differences.len() - 1) as f64) as usize];
        assert!(
            at(0.0) > -allowed,
            "{name}: {} nm below the truth",
            -at(0.0)
        );
        assert!(at(0.5).abs() < allowed, "{name}: median {} nm", at(0.5));
    }
}
