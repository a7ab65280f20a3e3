//! Gradient descent on the squared opening residual, with decay toward the flat tip, beside the
//! estimate: does it do better?
//!
//! The opening is differentiated through the winning offsets of its erosion and its dilation
//! (Sci. Rep. 13, 129 (2023), the published differentiable approach; step rule: D. P. Kingma,
//! J. Ba, arXiv:1412.6980, with decoupled decay, arXiv:1711.05101, from memory).

use crate::cells::{N, cells};
use crate::score::fit;
use ndarray::{Array2, ArrayView2, Zip};
use std::error::Error;
use truewidth::heightmap::Pitch;
use truewidth::morphology::{NO_CONTACT, contacts};
use truewidth::progress::Progress;
use truewidth::tip::blind::{Method, Settings, estimate};
use truewidth::virtual_scan::{self as scan, Distortion};

const STEPS: i32 = 400;

/// Gradient of the mean squared opening residual by the tip's cells, and that mean.
fn gradient(image: ArrayView2<f32>, tip: &Array2<f32>) -> truewidth::Result<(Array2<f64>, f64)> {
    let watch = Progress::new();
    let (cr, cc) = (tip.nrows() / 2, tip.ncols() / 2);
    // The erosion is the dilation of the negated map by the mirrored tip.
    let mirrored = tip.slice(ndarray::s![..;-1, ..;-1]);
    let eroded = contacts(image.mapv(|z| -z).view(), mirrored, &watch)?;
    let surface = eroded.heights.mapv(|z| -z);
    let opened = contacts(surface.view(), tip.view(), &watch)?;
    let mut slope = Array2::<f64>::zeros(tip.dim());
    let mut sum = 0.0;
    let scale = 2.0 / image.len() as f64;
    for ((r, c), &[dr, dc]) in opened.offsets.indexed_iter() {
        let residual = f64::from(image[(r, c)] - opened.heights[(r, c)]);
        sum += residual * residual;
        if [dr, dc] == NO_CONTACT {
            continue;
        }
        let at = |dr: i16, dc: i16| {
            let row = (cr as isize + isize::from(dr)) as usize;
            (row, (cc as isize + isize::from(dc)) as usize)
        };
        slope[at(dr, dc)] -= scale * residual;
        let touched = (
            (r as isize + isize::from(dr)) as usize,
            (c as isize + isize::from(dc)) as usize,
        );
        let [er, ec] = eroded.offsets[touched];
        if [er, ec] != NO_CONTACT {
            slope[at(-er, -ec)] += scale * residual;
        }
    }
    Ok((slope, sum / image.len() as f64))
}

/// The tip after [`STEPS`] steps from `start`.
fn descend(
    image: ArrayView2<f32>,
    start: Array2<f32>,
    rate: f64,
    decay: f64,
) -> truewidth::Result<Array2<f32>> {
    let mut tip = start;
    let mut first = Array2::<f64>::zeros(tip.dim());
    let mut second = Array2::<f64>::zeros(tip.dim());
    let centre = (tip.nrows() / 2, tip.ncols() / 2);
    for step in 1..=STEPS {
        let (slope, _) = gradient(image, &tip)?;
        // The step falls to nothing: the end does not depend on where it stops.
        let rate =
            rate * 0.5 * (1.0 + (std::f64::consts::PI * f64::from(step) / f64::from(STEPS)).cos());
        let (bias_1, bias_2) = (1.0 - 0.9_f64.powi(step), 1.0 - 0.999_f64.powi(step));
        Zip::from(&mut tip)
            .and(&mut first)
            .and(&mut second)
            .and(&slope)
            .for_each(|p, m, v, &g| {
                *m = 0.9 * *m + 0.1 * g;
                *v = 0.999 * *v + 0.001 * g * g;
                let move_by = *m / bias_1 / ((*v / bias_2).sqrt() + 1e-9);
                let pulled = f64::from(*p) * (1.0 - rate * decay);
                *p = (pulled - rate * move_by).min(0.0) as f32;
            });
        tip[centre] = 0.0;
    }
    Ok(tip)
}

/// Prints the normal RMS of the estimate and of the descent from three starts.
pub fn compare(seeds: u64, first: u64) -> Result<(), Box<dyn Error>> {
    println!(
        "cell | noise | seed | rate | decay | estimate | from it | textbook | from it | from flat"
    );
    for cell in cells()
        .iter()
        .filter(|c| c.limits.is_some() && c.radius.is_some() && c.px == 1.0)
    {
        for seed in first..first + seeds {
            let scene = (cell.surface)(seed, cell.px);
            let tip = (cell.tip)();
            let pitch = Pitch::square(cell.px);
            let mut settings = scan::Settings::new(N, N, pitch);
            settings.distortion = Distortion {
                noise_nm: cell.noise,
                ..Distortion::default()
            };
            settings.seed = seed;
            settings.support_nm = 64.0;
            let watch = Progress::new();
            let made = scan::scan(|x, y| scene.height(x, y), &tip, &settings, &watch)?;
            let own = estimate(&made.scan, None, &Settings::default(), &watch)?;
            let textbook = Settings {
                method: Method::Textbook,
                ..Settings::default()
            };
            let textbook = estimate(&made.scan, None, &textbook, &watch)?;
            let Some(depth) = own.exercised_depth_nm else {
                continue;
            };
            let truth = (cell.identified)();
            let rms = |shape: ArrayView2<f32>| fit(shape, pitch, depth, &truth).rms;
            let image = made.scan.heights();
            for (rate, decay) in [(0.05, 0.0), (0.05, 0.01), (0.2, 0.01), (0.2, 0.1)] {
                let from = |start: ArrayView2<f32>| -> truewidth::Result<f64> {
                    Ok(rms(descend(image, start.to_owned(), rate, decay)?.view()))
                };
                let flat = Array2::zeros(own.tip.shape().dim());
                println!(
                    "{} | {} | {seed} | {rate} | {decay} | {:.3} | {:.3} | {:.3} | {:.3} | {:.3}",
                    cell.name,
                    cell.noise,
                    rms(own.tip.shape()),
                    from(own.tip.shape())?,
                    rms(textbook.tip.shape()),
                    from(textbook.tip.shape())?,
                    from(flat.view())?,
                );
            }
        }
    }
    Ok(())
}
