//! Validates the blind tip estimate on virtual scans whose truth is finer than the pixel.
//!
//! `tip_validation [SEEDS] [FIRST] [CELL]`: SEEDS scans per cell (10), from seed FIRST (1), only
//! cells whose name holds CELL. `tip_validation short` runs two seeds per cell and fails
//! when a figure passes its limit. `tip_validation descent [SEEDS] [FIRST]` sets gradient descent
//! on the squared opening residual beside the estimate.

mod cells;
mod descent;
mod score;

use cells::{N, cells, summit_radii};
use score::score;
use std::error::Error;
use std::time::Instant;
use truewidth::heightmap::Pitch;
use truewidth::progress::Progress;
use truewidth::tip::blind::{Settings, estimate};
use truewidth::virtual_scan::{self as scan, Distortion};

fn main() -> Result<(), Box<dyn Error>> {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let short = arguments.first().is_some_and(|a| a == "short");
    let number = |k: usize, default: u64| {
        arguments
            .get(k)
            .and_then(|a| a.parse().ok())
            .unwrap_or(default)
    };
    let seeds = if short { 2 } else { number(0, 10) };
    let first = number(1, 1);
    if arguments.first().is_some_and(|a| a == "descent") {
        return descent::compare(number(1, 2), number(2, 1));
    }
    let only = arguments.get(2).cloned().unwrap_or_default();
    let verbose = seeds <= 1;
    let mut failures = Vec::new();
    println!(
        "cell | noise | normal RMS | bias | R error median (min..max) | refused | depth | band in/above/below | of it needed | R in 2u | further apices | s"
    );
    for cell in cells().iter().filter(|c| c.name.contains(&only)) {
        let (mut rms, mut bias, mut errors, mut depths) = (vec![], vec![], vec![], vec![]);
        let (mut inside, mut above, mut below) = (vec![], vec![], vec![]);
        let mut needed = vec![];
        let (mut refused, mut covered, mut apices) = (0, 0, 0);
        let mut seconds = 0.0;
        let mut reasons = String::new();
        for seed in first..first + seeds {
            let scene = (cell.surface)(seed, cell.px);
            let tip = (cell.tip)();
            let mut settings = scan::Settings::new(N, N, Pitch::square(cell.px));
            settings.distortion = Distortion {
                noise_nm: cell.noise,
                ..Distortion::default()
            };
            settings.seed = seed;
            settings.support_nm = 64.0 * cell.px.min(1.5);
            let made = scan::scan(|x, y| scene.height(x, y), &tip, &settings, &Progress::new())?;
            if verbose && cell.name == "rough" {
                let r = summit_radii(&scene, cell.px);
                println!(
                    "  summits {} radii {:.2} {:.2} {:.2} {:.2} {:.2}",
                    r.len(),
                    r[0],
                    r[5],
                    r[r.len() / 10],
                    r[r.len() / 4],
                    r[r.len() / 2]
                );
            }
            let start = Instant::now();
            let e = estimate(&made.scan, None, &Settings::default(), &Progress::new())?;
            seconds += start.elapsed().as_secs_f64();
            match (&e.read_out.apex_radius, cell.radius) {
                (Some(r), truth) => {
                    let truth = truth.unwrap_or(f64::NAN);
                    errors.push(r.value / truth - 1.0);
                    covered += usize::from((r.value - truth).abs() <= 2.0 * r.u);
                    if verbose || truth.is_nan() {
                        println!(
                            "  {} seed {seed}: R {:.2} u {:.2} depth {:.2} principal {:.2?}",
                            cell.name, r.value, r.u, r.fit_depth_nm, r.principal_nm
                        );
                    }
                }
                (None, _) => {
                    refused += 1;
                    reasons = e
                        .diagnosis
                        .first()
                        .map(|d| d.finding.clone())
                        .unwrap_or_default();
                }
            }
            apices += e.further_apices.len();
            if let Some(s) = score(&e, &(cell.identified)()) {
                rms.push(s.rms);
                bias.push(s.bias);
                inside.push(s.inside);
                above.push(s.above_sharper);
                below.push(s.below_blunter);
                needed.push(s.needed);
                depths.push(e.exercised_depth_nm.unwrap_or(0.0));
            }
            if verbose {
                println!(
                    "  smoothing {:.2} thr {:.3} features {} half {} u {:.3} angle {:?}",
                    e.smoothing_px,
                    e.threshold_nm,
                    e.features,
                    e.tip.shape().nrows() / 2,
                    e.height_u_nm,
                    e.read_out.half_angle.as_ref().map(|a| a.value)
                );
                if std::env::var_os("TIP_PROFILE").is_some() {
                    let (c, truth) = (e.tip.shape().nrows() / 2, (cell.identified)());
                    for k in 0..e.tip.shape().ncols() {
                        let x = (k as f64 - c as f64) * cell.px;
                        println!(
                            "    {x:6.1} {:8.3} true {:8.3} seen {} diagonal {:8.3} true {:8.3} seen {}",
                            e.tip.shape()[[c, k]],
                            -truth(x, 0.0),
                            e.support[[c, k]],
                            e.tip.shape()[[k, k]],
                            -truth(x, x),
                            e.support[[k, k]]
                        );
                    }
                }
                for d in &e.diagnosis {
                    println!("  - {}", d.finding);
                }
            }
        }
        let (rms_m, e_m) = (median(&mut rms), median(&mut errors));
        println!(
            "{} | {} | {:.3} | {:+.3} | {:+.1} % ({:+.1}..{:+.1}) | {refused}/{seeds} | {:.1} | {:.3}/{:.3}/{:.3} | {:.2} | {covered}/{} | {apices} | {:.2}",
            cell.name,
            cell.noise,
            rms_m,
            median(&mut bias),
            100.0 * e_m,
            100.0 * errors.first().copied().unwrap_or(f64::NAN),
            100.0 * errors.last().copied().unwrap_or(f64::NAN),
            median(&mut depths),
            mean(&inside),
            mean(&above),
            mean(&below),
            mean(&needed),
            errors.len(),
            seconds / seeds as f64,
        );
        if refused > 0 && cell.radius.is_some() {
            println!("  refused: {reasons}");
        }
        if let Some((limit, e_limit)) = cell.limits
            && !(rms_m <= limit && (cell.radius.is_none() || e_m.abs() <= e_limit))
        {
            failures.push(format!(
                "{} at {} nm: {rms_m:.3} nm, {:.1} %",
                cell.name,
                cell.noise,
                100.0 * e_m
            ));
        }
        if cell.radius.is_none() && cell.name != "worn" && cell.name != "double" && refused < seeds
        {
            failures.push(format!(
                "{} at {} nm: a radius was given",
                cell.name, cell.noise
            ));
        }
        if cell.name == "double" && apices < seeds as usize {
            failures.push(format!(
                "double at {} nm: {apices} second apices",
                cell.noise
            ));
        }
    }
    for failure in &failures {
        println!("beyond the limit: {failure}");
    }
    if short && !failures.is_empty() {
        std::process::exit(1);
    }
    Ok(())
}

fn median(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    values.get(values.len() / 2).copied().unwrap_or(f64::NAN)
}

fn mean(values: &[f64]) -> f64 {
    values.iter().sum::<f64>() / (values.len() as f64).max(1.0)
}
