//! The job file, the stages and the worker.

use super::*;
use crate::dimensions::{Axis, Kind, Request};
use crate::error::ErrorKind;
use crate::files;
use crate::heightmap::{HeightMap, Pitch, Region};
use crate::progress::Progress;
use crate::tip::model::Model;
use crate::units::Length;
use crate::virtual_scan::{self, Feature, Lines};
use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

/// The job file of the outward contract.
const CONTRACT: &str = r#"
title = "Stamp 14, field 3"

[scan]
file = "stamp-14-f3.tiff"
pitch = ["2 nm", "2 nm"]
height-unit = "nm"

[level]
method = "auto"

[tip]
from = "blind"
support = "130 nm"
threshold = "auto"

[calibration]
x = 0.002
y = 0.002
z = 0.005

[[dimension]]
name = "line 2"
kind = "line-width"
region = ["120 nm", "0 nm", "400 nm", "1024 nm"]
at = [0.1, 0.5, 0.9]
"#;

#[test]
fn the_job_file_of_the_contract_is_read_and_written_back() {
    let job = JobFile::from_toml(CONTRACT).unwrap();
    assert_eq!(job.scan.pitch.unwrap()[0].nm(), 2.0);
    assert_eq!(job.tip.support.unwrap().nm(), 130.0);
    assert_eq!(job.dimensions[0].region.unwrap().width, 400.0);
    assert_eq!(JobFile::from_toml(&job.to_toml().unwrap()).unwrap(), job);
}

#[test]
fn a_bad_entry_is_named() {
    for (good, bad, named) in [
        ("method = \"auto\"", "method = \"magic\"", "magic"),
        ("support = \"130 nm\"", "support = \"130\"", "130"),
        ("support = \"130 nm\"", "suport = \"130 nm\"", "suport"),
        ("threshold = \"auto\"", "threshold = \"-1 nm\"", "-1"),
        ("x = 0.002", "x = 2", "x = 2"),
        ("at = [0.1, 0.5, 0.9]", "at = [1.5]", "1.5"),
        ("from = \"blind\"", "from = \"model\"", "radius"),
        ("from = \"blind\"", "from = \"file\"", "file"),
        ("from = \"blind\"", "from = \"known-shape\"", "known"),
        (
            "height-unit = \"nm\"",
            "height-unit = \"furlong\"",
            "furlong",
        ),
        (
            "pitch = [\"2 nm\", \"2 nm\"]",
            "pitch = [\"0 nm\", \"2 nm\"]",
            "0 nm",
        ),
    ] {
        let text = CONTRACT.replace(good, bad);
        assert_ne!(text, CONTRACT);
        let error = JobFile::from_toml(&text).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Setting, "{bad}");
        assert!(error.to_string().contains(named), "{bad}: {error}");
    }
}

/// A ridge of 20 nm under a sphere-cone, on disk, with a job that measures it.
fn ridge(folder: &Path) -> Job {
    let map = HeightMap::from_fn(48, 96, Pitch::square(2.0), |x, _| {
        if (60.0..130.0).contains(&x) {
            20.0
        } else {
            0.0
        }
    });
    files::write(&folder.join("ridge.tiff"), &map.unwrap()).unwrap();
    let mut job = Job::on_scan(&folder.join("ridge.tiff"));
    job.file.tip.from = TipFrom::Model;
    job.file.tip.radius = Some(Length::from_nm(8.0));
    job.file.tip.half_angle = Some(15.0);
    job.file.dimensions.push(Request {
        across: Some(Axis::X),
        ..Request::new("ridge", Kind::StepHeight)
    });
    job
}

fn run(stages: &mut Stages, job: &Job) -> Outcome {
    stages.run(job, &Progress::new(), &mut |_| {}).unwrap()
}

#[test]
fn only_what_a_setting_touches_is_computed_anew() {
    let folder = tempfile::tempdir().unwrap();
    let mut job = ridge(folder.path());
    let mut stages = Stages::default();
    let same = |a: &Outcome, b: &Outcome| {
        [
            Arc::ptr_eq(a.level.as_ref().unwrap(), b.level.as_ref().unwrap()),
            Arc::ptr_eq(a.surface.as_ref().unwrap(), b.surface.as_ref().unwrap()),
            Arc::ptr_eq(
                a.dimensions.as_ref().unwrap(),
                b.dimensions.as_ref().unwrap(),
            ),
        ]
    };
    let first = run(&mut stages, &job);
    assert_eq!(same(&first, &run(&mut stages, &job)), [true, true, true]);
    job.file.dimensions[0].name = "renamed".to_owned();
    let renamed = run(&mut stages, &job);
    assert_eq!(same(&first, &renamed), [true, true, false]);
    job.file.tip.radius = Some(Length::from_nm(9.0));
    let blunter = run(&mut stages, &job);
    assert_eq!(same(&renamed, &blunter), [true, false, false]);
    job.file.level.method = LevelMethod::None;
    assert_eq!(
        same(&blunter, &run(&mut stages, &job)),
        [false, false, false]
    );
}

#[test]
fn a_changed_sidecar_is_noticed() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("bare.npy");
    ndarray_npy::write_npy(&path, &ndarray::Array2::<f32>::zeros((32, 32))).unwrap();
    let state = |pitch: &str| {
        let text = format!("pitch = [\"{pitch}\", \"{pitch}\"]\nheight-unit = \"nm\"\n");
        std::fs::write(files::sidecar_path(&path), text).unwrap();
    };
    let mut stages = Stages::default();
    let job = Job::on_scan(&path);
    let mut pitch = || run(&mut stages, &job).scan.unwrap().pitch();
    state("2 nm");
    assert_eq!(pitch(), Pitch::square(2.0));
    state("25 nm");
    assert_eq!(pitch(), Pitch::square(25.0));
}

#[test]
fn a_saved_job_still_points_to_its_scan() {
    let folder = tempfile::tempdir().unwrap();
    let mut job = ridge(folder.path());
    let elsewhere = folder.path().join("jobs");
    std::fs::create_dir(&elsewhere).unwrap();
    job.save(&elsewhere.join("ridge.toml")).unwrap();
    let back = Job::open(&elsewhere.join("ridge.toml")).unwrap();
    assert!(back.scan_path().is_file());
    assert_eq!(back.sha256, job.sha256);
    job.save(&folder.path().join("ridge.toml")).unwrap();
    assert_eq!(job.file.scan.file, Path::new("ridge.tiff"));
}

#[test]
fn a_cancelled_run_is_an_error_of_its_kind() {
    let folder = tempfile::tempdir().unwrap();
    let progress = Progress::new();
    progress.cancel();
    let result = Stages::default().run(&ridge(folder.path()), &progress, &mut |_| {});
    assert!(result.unwrap_err().is_cancelled());
}

#[test]
fn the_worker_keeps_its_outcome_and_drops_the_stale_run() {
    let folder = tempfile::tempdir().unwrap();
    let mut job = ridge(folder.path());
    let mut worker = Worker::start(|| {});
    let wait = |worker: &mut Worker| {
        for _ in 0..2000 {
            worker.poll();
            if worker.under_way().is_none() {
                return;
            }
            std::thread::sleep(Duration::from_millis(5));
        }
        panic!("the worker does not end");
    };
    worker.order(job.clone());
    job.file.dimensions[0].name = "second".to_owned();
    worker.order(job.clone());
    wait(&mut worker);
    let named = |worker: &Worker| worker.latest().dimensions.as_ref().unwrap()[0].name.clone();
    assert_eq!(named(&worker), "second");
    job.file.scan.file = "missing.tiff".into();
    worker.order(job);
    wait(&mut worker);
    assert_eq!(worker.error().unwrap().kind(), ErrorKind::Io);
    assert_eq!(named(&worker), "second");
}

#[test]
fn the_ghost_tip_stands_on_the_top_edge_of_a_wall() {
    let folder = tempfile::tempdir().unwrap();
    let mut job = ridge(folder.path());
    job.file.level.method = LevelMethod::None;
    let outcome = run(&mut Stages::default(), &job);
    let ghost = ghost_tip(&outcome, 24, 45).unwrap();
    assert_eq!(ghost.apex_height_nm, 20.0);
    assert!(ghost.contacts.contains(&(24, 45)));
    assert_eq!(ghost_tip(&outcome, 500, 0), None);
}

#[test]
fn a_tip_from_a_separate_scan_is_on_the_jobs_grid_and_made_anew_when_that_scan_changes() {
    let folder = tempfile::tempdir().unwrap();
    let mut job = ridge(folder.path());
    job.file.dimensions.clear();
    let lines = Lines::new(64.2, 200.0, 1, 60.0, 20.0);
    let write = |radius: f64| {
        let half_angle = 15.0;
        let model = Model::SphereCone { radius, half_angle };
        let settings = virtual_scan::Settings {
            support_nm: 60.0,
            ..virtual_scan::Settings::new(40, 128, Pitch::square(1.0))
        };
        let made = virtual_scan::scan(
            |x, y| lines.height(x, y),
            |x, y| model.height(x, y),
            &settings,
            &Progress::new(),
        );
        files::write(&folder.path().join("gauge.tiff"), &made.unwrap().scan).unwrap();
    };
    write(8.0);
    job.file.tip = toml::from_str(
        "from = \"known-shape\"\nscan = \"gauge.tiff\"\n\
         known = { shape = \"ridges\", width = \"60 nm\", height = \"20 nm\" }",
    )
    .unwrap();
    let mut stages = Stages::default();
    let radius = |stages: &mut Stages, job: &Job| {
        let tip = stages.tip(job, &Progress::new()).unwrap();
        let tip = (*tip).clone().unwrap();
        assert!(tip.tip.pitch().agrees_with(Pitch::square(2.0)));
        assert!(tip.sha256.is_some());
        let found = tip.read_out.apex_radius;
        found.unwrap_or_else(|| panic!("{:?}", tip.diagnosis)).value
    };
    let first = radius(&mut stages, &job);
    assert!((first - 8.0).abs() < 0.3, "{first}");
    write(6.0);
    let second = radius(&mut stages, &job);
    assert!((second - 6.0).abs() < 0.3, "{second}");
    // A blind tip is on the grid of its own scan: another pitch is refused.
    job.file.tip.from = TipFrom::Blind;
    let error = stages.tip(&job, &Progress::new()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
    assert!(error.to_string().contains("gauge.tiff"), "{error}");
    let text = job.file.to_toml().unwrap();
    assert_eq!(JobFile::from_toml(&text).unwrap(), job.file);
}

/// The ridge with white noise: what the chain draws of a step height is what its budget says.
#[test]
fn draws_of_the_whole_chain_agree_with_the_budget_and_repeat() {
    use rand::{Rng, SeedableRng};
    let folder = tempfile::tempdir().unwrap();
    let mut job = ridge(folder.path());
    let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(4);
    let map = HeightMap::from_fn(48, 96, Pitch::square(2.0), |x, _| {
        let noise: f64 = random.sample(rand_distr::StandardNormal);
        let ridge = if (60.0..130.0).contains(&x) {
            20.0
        } else {
            0.0
        };
        ridge + 0.2 * noise
    });
    files::write(&folder.path().join("ridge.tiff"), &map.unwrap()).unwrap();
    job.file.tip.uncertainty = Some(Length::from_nm(0.3));
    job.file.monte_carlo = Some(MonteCarloSpec::new(200));
    let outcome = run(&mut Stages::default(), &job);
    let dimensions = outcome.dimensions.unwrap();
    let drawn = dimensions[0].evidence.monte_carlo.clone().unwrap();
    assert_eq!((drawn.trials, drawn.count), (200, 200));
    assert!(drawn.low < 20.0 && 20.0 < drawn.high, "{drawn:?}");
    // Both intervals are a few hundredths of a nanometre wide about the same value.
    let budget = dimensions[0].corrected.unwrap();
    for (ends, other) in [(drawn.low, budget.low), (drawn.high, budget.high)] {
        assert!((ends - other.unwrap()).abs() < 0.05, "{drawn:?} {budget:?}");
    }
    assert!(drawn.agrees.is_some() && (0.003..0.1).contains(&drawn.u));
    let again = run(&mut Stages::default(), &job).dimensions.unwrap();
    assert_eq!(again[0].evidence.monte_carlo, Some(drawn.clone()));
    job.file.monte_carlo = Some(MonteCarloSpec {
        trials: 200,
        seed: 2,
    });
    let other = run(&mut Stages::default(), &job).dimensions.unwrap();
    assert_ne!(other[0].evidence.monte_carlo, Some(drawn));
    let reliability = dimensions[0].evidence.reliability.unwrap();
    let whole = reliability.touched + reliability.bounded + reliability.never;
    assert!((whole - 1.0).abs() < 1e-9);
}

#[test]
fn monte_carlo_and_model_fit_in_the_job_file() {
    let text = CONTRACT.replace(
        "[level]",
        "[monte-carlo]\ntrials = 400\nseed = 9\n\n[level]",
    );
    let text = text.replace("[scan]", "model-fit = true\n\n[scan]");
    let job = JobFile::from_toml(&text).unwrap();
    assert_eq!(
        job.monte_carlo,
        Some(MonteCarloSpec {
            trials: 400,
            seed: 9
        })
    );
    assert!(job.model_fit && !JobFile::from_toml(CONTRACT).unwrap().model_fit);
    assert_eq!(JobFile::from_toml(&job.to_toml().unwrap()).unwrap(), job);
    let few = JobFile::from_toml(&text.replace("400", "4")).unwrap_err();
    assert!(few.to_string().contains("trials = 4"), "{few}");
}

/// A block of 60 nm by 80 nm with walls of 4 nm, shifted, with white noise; on disk.
fn write_block(path: &Path, [dx, dy]: [f64; 2], taller: f64, seed: u64) {
    use rand::{Rng, SeedableRng};
    let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(seed);
    let within = |v: f64, half: f64| ((half - v.abs()) / 4.0 + 0.5).clamp(0.0, 1.0);
    let map = HeightMap::from_fn(160, 120, Pitch::square(1.0), |x, y| {
        let noise: f64 = random.sample(rand_distr::StandardNormal);
        (20.0 + taller) * within(x - 60.0 - dx, 30.0) * within(y - 80.0 - dy, 40.0) + 0.1 * noise
    });
    files::write(path, &map.unwrap()).unwrap();
}

#[test]
fn a_retrace_and_a_second_scan_enter_lengths_and_heights() {
    let folder = tempfile::tempdir().unwrap();
    let at = |name: &str| folder.path().join(name);
    write_block(&at("trace.tiff"), [0.0, 0.0], 0.0, 1);
    write_block(&at("retrace.tiff"), [1.2, 0.0], 0.2, 2);
    write_block(&at("later.tiff"), [0.5, -3.3], 0.0, 3);
    let mut job = Job::on_scan(&at("trace.tiff"));
    job.file.tip =
        toml::from_str("from = \"model\"\nradius = \"3 nm\"\nhalf-angle = 8\nsupport = \"15 nm\"")
            .unwrap();
    let width = |name: &str, region: [f64; 4], across| Request {
        region: Some(Region::from(region.map(Length::from_nm))),
        across: Some(across),
        ..Request::new(name, Kind::LineWidth)
    };
    job.file.dimensions = vec![
        width("across", [5.0, 60.0, 110.0, 40.0], Axis::X),
        width("along", [40.0, 10.0, 40.0, 140.0], Axis::Y),
        Request {
            kind: Kind::StepHeight,
            ..width("height", [5.0, 60.0, 110.0, 40.0], Axis::X)
        },
    ];
    let mut stages = Stages::default();
    let alone = run(&mut stages, &job);
    assert!(alone.pairs.is_none());
    job.file.scan.retrace = Some("retrace.tiff".into());
    job.file.scan.second = Some("later.tiff".into());
    let outcome = run(&mut stages, &job);
    // The scan itself is not opened or levelled anew for it.
    let levels = [&alone, &outcome].map(|o| o.level.clone().unwrap());
    assert!(Arc::ptr_eq(&levels[0], &levels[1]));
    let (before, after) = (
        alone.dimensions.unwrap(),
        outcome.dimensions.clone().unwrap(),
    );
    let line = |i: usize, source: &str| {
        let of = after[i].budget.iter().filter(|c| c.source == source);
        of.map(|c| c.u * c.sensitivity).sum::<f64>()
    };
    let root3 = 3f64.sqrt();
    let hysteresis = "hysteresis (trace-retrace)";
    let near = |is: f64, wanted: f64, by: f64| assert!((is - wanted).abs() < by, "{is} {wanted}");
    near(line(0, hysteresis), 0.6 / root3, 0.02);
    near(line(1, hysteresis), 0.0, 1e-12);
    // 3.3 nm in the time of 160 nm; 0.5 nm in that of 160 rows of 120 nm, there and back.
    let length = |i: usize| after[i].corrected.unwrap().value.unwrap();
    near(line(1, "drift"), 3.3 / 160.0 * length(1) / root3, 0.02);
    near(
        line(0, "drift"),
        0.5 / 320.0 * length(0) / 120.0 / root3,
        5e-5,
    );
    // A top 0.2 nm higher on a third of the map: half its standard deviation about the mean.
    assert!(
        (0.01..0.07).contains(&line(2, hysteresis)),
        "{}",
        line(2, hysteresis)
    );
    for (a, b) in before.iter().zip(after.iter()) {
        let (a, b) = (a.corrected.unwrap(), b.corrected.unwrap());
        assert_eq!(a.value, b.value);
        assert!(b.low < a.low && b.high > a.high && b.u > a.u, "{a:?} {b:?}");
    }
    let json = crate::record::result_json(&job, &outcome);
    near(
        json["scan"]["retrace"]["shift_nm"][0].as_f64().unwrap(),
        1.2,
        0.05,
    );
    near(
        json["scan"]["second"]["shift_nm"][1].as_f64().unwrap(),
        -3.3,
        0.1,
    );
    assert_eq!(json["scan"]["second"]["file"], "later.tiff");
    // The paths go with a saved job.
    std::fs::create_dir(at("jobs")).unwrap();
    job.save(&at("jobs").join("block.toml")).unwrap();
    let back = Job::open(&at("jobs").join("block.toml")).unwrap();
    let again = run(&mut Stages::default(), &back);
    assert_eq!(
        again.pairs.unwrap().scanner(),
        outcome.pairs.unwrap().scanner()
    );
}

#[test]
fn a_further_scan_of_another_size_is_refused_and_of_another_place_told() {
    let folder = tempfile::tempdir().unwrap();
    let at = |name: &str| folder.path().join(name);
    write_block(&at("trace.tiff"), [0.0, 0.0], 0.0, 1);
    write_block(&at("flat.tiff"), [0.0, 0.0], -20.0, 2);
    let small = HeightMap::from_fn(40, 40, Pitch::square(1.0), |x, _| x);
    files::write(&at("small.tiff"), &small.unwrap()).unwrap();
    let mut job = Job::on_scan(&at("trace.tiff"));
    job.file.scan.retrace = Some("small.tiff".into());
    let error = Stages::default()
        .run(&job, &Progress::new(), &mut |_| {})
        .unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
    assert!(error.to_string().contains("40 x 40"), "{error}");
    job.file.scan.retrace = Some("flat.tiff".into());
    let outcome = run(&mut Stages::default(), &job);
    assert!(
        outcome.warnings.iter().any(|w| w.contains("flat.tiff")),
        "{:?}",
        outcome.warnings
    );
    assert_eq!(outcome.pairs.unwrap().scanner(), Default::default());
}
