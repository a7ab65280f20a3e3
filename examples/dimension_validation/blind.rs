//! Line widths corrected with a blind tip: the tip from a scan of spikes, used on a scan of a line,
//! both run through a job as a user would, `[tip] scan` and all.
//!
//! Every pair of scans is run with the spikes' radius stated and without. With `--trials N` the
//! whole chain is drawn as well and its intervals compared with the budget's.

use super::{Random, Tally, mean, median, rms};
use std::path::Path;
use truewidth::dimensions::{Dimension, Kind, Request};
use truewidth::heightmap::{HeightMap, Pitch};
use truewidth::job::{Job, MonteCarloSpec, Stages};
use truewidth::progress::Progress;
use truewidth::tip::model::{Model, sphere_cone_half_width};
use truewidth::units::Length;
use truewidth::virtual_scan::{
    self, BumpShape, Bumps, Distortion, Feature, Lines, Settings, scatter,
};
use truewidth::{Result, files};

const TIP: (f64, f64) = (8.0, 8.0);
const HEIGHT: f64 = 50.0;
const SPIKE: BumpShape = BumpShape::Spike {
    radius: SPIKE_RADIUS,
    half_angle: 5.0,
    height: 70.0,
};
const SPIKE_RADIUS: f64 = 1.5;
/// Rows and columns of the scan of spikes.
const SIDE: usize = 192;

/// A scan of `feature` by the tip on 1 nm pixels, with noise, tilt and drift.
fn scan(
    feature: &dyn Feature,
    [rows, columns]: [usize; 2],
    noise_nm: f64,
    depth: f64,
    random: &mut Random,
) -> Result<HeightMap> {
    let (radius, half_angle) = TIP;
    let model = Model::SphereCone { radius, half_angle };
    let settings = Settings {
        support_nm: 2.0 * sphere_cone_half_width(radius, half_angle, depth),
        distortion: Distortion {
            noise_nm,
            tilt: [random.between(-0.01, 0.01), random.between(-0.01, 0.01)],
            drift_nm: 0.5,
            ..Distortion::default()
        },
        seed: random.next().to_bits(),
        ..Settings::new(rows, columns, Pitch::square(1.0))
    };
    let made = virtual_scan::scan(
        |x, y| feature.height(x, y),
        |x, y| model.height(x, y),
        &settings,
        &Progress::new(),
    )?;
    Ok(made.scan)
}

/// Both scans in `folder`, as a job finds them; the true width at mid-height.
fn write_scans(folder: &Path, wall_deg: f64, noise: f64, seed: u64) -> Result<f64> {
    let mut random = Random(seed);
    let side = SIDE as f64;
    let feet = [SPIKE.foot(); 14];
    let places = scatter(&feet, 14.0, [20.0; 2], [side - 20.0; 2], seed)?;
    let spikes = Bumps::all(SPIKE, &places)?;
    let gauge = scan(&spikes, [SIDE, SIDE], noise, 75.0, &mut random)?;
    files::write(&folder.join("spikes.tiff"), &gauge)?;
    let width = random.between(50.0, 70.0);
    let line = Lines::new(random.between(95.0, 105.0), 400.0, 1, width, HEIGHT);
    let line = line.walls(wall_deg, 0.0);
    let made = scan(&line, [48, 200], noise, HEIGHT + 5.0, &mut random)?;
    files::write(&folder.join("line.tiff"), &made)?;
    Ok(line.width_at(0, 0.0, 0.5))
}

/// The line's width with the tip that the spikes show.
fn measure(folder: &Path, stated: bool, trials: Option<usize>, verbose: bool) -> Result<Dimension> {
    let mut job = Job::on_scan(&folder.join("line.tiff"));
    job.file.tip.scan = Some("spikes.tiff".into());
    job.file.tip.feature_radius = stated.then_some(Length::from_nm(SPIKE_RADIUS));
    job.file.monte_carlo = trials.map(MonteCarloSpec::new);
    job.file
        .dimensions
        .push(Request::new("line", Kind::LineWidth));
    let outcome = Stages::default().run(&job, &Progress::new(), &mut |_| {})?;
    if verbose && let Some(tip) = &outcome.tip {
        eprintln!(
            "tip: {:?}, exercised {:?}, height u {:.3}, {:?}",
            tip.read_out.apex_radius, tip.exercised_depth_nm, tip.height_u_nm, tip.diagnosis
        );
    }
    let lines = outcome.dimensions.unwrap_or_default();
    // One request at one height fraction: one line.
    Ok(lines[0].clone())
}

/// How the drawn intervals compare with those of the budget.
#[derive(Default)]
struct Drawn {
    /// Width of the drawn interval over that of the budget's.
    widths: Vec<f64>,
    u: Vec<f64>,
    covered: usize,
    agree: usize,
}

impl Drawn {
    fn add(&mut self, line: &Dimension, truth: f64) {
        let Some(drawn) = &line.evidence.monte_carlo else {
            return;
        };
        if let Some(c) = line.corrected
            && let (Some(u), Some(low), Some(high)) = (c.u, c.low, c.high)
        {
            self.widths.push((drawn.high - drawn.low) / (high - low));
            self.u.push(drawn.u / u);
        }
        self.covered += usize::from((drawn.low..=drawn.high).contains(&truth));
        self.agree += usize::from(drawn.agrees == Some(true));
    }
}

pub fn run(count: u64, first: u64, trials: Option<usize>, verbose: bool) -> Result<()> {
    let folder = tempfile::tempdir().map_err(|e| truewidth::Error::io(&std::env::temp_dir(), e))?;
    println!(
        "| feature radius | wall | noise | n | scanned | corrected | rms | touched | coverage | interval |{}",
        if trials.is_some() {
            " drawn: interval / budget's | u / budget's | coverage | agree |"
        } else {
            ""
        }
    );
    println!(
        "|---|---|---|---|---|---|---|---|---|---|{}",
        if trials.is_some() {
            "---|---|---|---|"
        } else {
            ""
        }
    );
    let mut row = 0;
    for wall_deg in [75.0, 80.0] {
        for noise in [0.2, 0.3] {
            let mut tallies = [Tally::default(), Tally::default()];
            let mut drawn = [Drawn::default(), Drawn::default()];
            for i in 0..count {
                let seed = 1000 * first + 7919 * row + i;
                let truth = write_scans(folder.path(), wall_deg, noise, seed)?;
                for (k, stated) in [true, false].into_iter().enumerate() {
                    let line = measure(folder.path(), stated, trials, verbose)?;
                    if verbose {
                        eprintln!("{wall_deg} {noise} {seed} {stated} truth {truth:.3}: {line:#?}");
                    }
                    tallies[k].add(Some(&line), truth);
                    drawn[k].add(&line, truth);
                }
            }
            row += 1;
            for (k, name) in ["stated", "not stated"].into_iter().enumerate() {
                let (tally, drawn) = (&tallies[k], &drawn[k]);
                let share = |n: usize| 100.0 * n as f64 / count.max(1) as f64;
                print!(
                    "| {name} | {wall_deg} deg | {noise} nm | {} | {:+.2} | {:+.3} | {:.3} | {:.0} % | {:.0} % | {:.2} |",
                    tally.intervals,
                    mean(&tally.scanned),
                    mean(&tally.corrected),
                    rms(&tally.corrected),
                    share(tally.touched),
                    share(tally.covered),
                    median(&tally.widths),
                );
                if trials.is_some() {
                    print!(
                        " {:.2} | {:.2} | {:.0} % | {} of {} |",
                        median(&drawn.widths),
                        median(&drawn.u),
                        share(drawn.covered),
                        drawn.agree,
                        drawn.widths.len()
                    );
                }
                println!();
            }
        }
    }
    Ok(())
}
