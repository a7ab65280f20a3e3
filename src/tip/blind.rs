//! The blind estimate: the tip from the scan itself.
//!
//! [`Method::Auto`]: Gaussian smoothing matched to the noise, the published iteration on a
//! half-pixel envelope for a first bound, then least squares on the contacts of sharp features.
//! What comes out is the bluntest tip the scan allows: it holds the bluntness of the sharpest
//! feature too (apex radius of the tip plus that of the feature).

mod diagnose;
mod finish;
mod iterate;
mod polish;
mod smooth;
mod window;

use super::read_out::ReadOut;
use super::{Band, Tip};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::HeightMap;
use crate::progress::Progress;
use ndarray::Array2;
use serde::{Deserialize, Serialize};

/// How the estimate goes about it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Method {
    /// The program's own choice.
    #[default]
    Auto,
    /// The published iteration with the half-pixel envelope and a noise threshold, no smoothing.
    Textbook,
}

/// Settings of the blind estimate; `None` = chosen from the scan.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Settings {
    /// Full width of the tip grid, nm.
    pub support_nm: Option<f64>,
    /// Noise threshold, nm.
    pub threshold_nm: Option<f64>,
    /// Gaussian smoothing before the estimate, pixels (standard deviation).
    pub smoothing_px: Option<f64>,
    /// Which iteration.
    pub method: Method,
    /// Apex radius of the sharpest feature as the user states it, nm: the estimate identifies
    /// tip radius plus feature radius.
    pub feature_radius_nm: Option<f64>,
}

/// A finding about the estimate, for the user.
#[derive(Debug, Clone, PartialEq)]
pub struct Diagnosis {
    /// What was seen, with the numbers.
    pub finding: String,
    /// What to do about it.
    pub advice: String,
    /// Whether it forbids printing a radius.
    pub refuses_radius: bool,
}

/// The tip that the scan allows.
#[derive(Debug, Clone)]
pub struct Estimate {
    /// The estimate.
    pub tip: Tip,
    /// The band around it, where one could be had.
    pub band: Option<Band>,
    /// Threshold used, nm.
    pub threshold_nm: f64,
    /// Smoothing used, pixels.
    pub smoothing_px: f64,
    /// How far up from the apex the scan has tested the tip, nm; `None` = not at all.
    pub exercised_depth_nm: Option<f64>,
    /// Number of scan pixels that touch with each tip cell, `[row, col]` of the tip.
    pub support: Array2<u32>,
    /// Scan pixels (row, col) where the tip was seen: its contact evidence.
    pub evidence: Vec<(usize, usize)>,
    /// Standard uncertainty of the tip's heights within the exercised depth, nm.
    pub height_u_nm: f64,
    /// Whether the apex is identified, so that a radius may be printed.
    pub apex_identified: bool,
    /// Radius and half-angle of the tip; no radius where the apex is not identified.
    pub read_out: ReadOut,
    /// Distinct sharp features that showed the tip from all sides.
    pub features: usize,
    /// Further apices found on the tip (row, col of its grid), deepest last.
    pub further_apices: Vec<(usize, usize)>,
    /// Findings, worst first.
    pub diagnosis: Vec<Diagnosis>,
}

/// Estimates the tip from the levelled `scan` with noise `noise_nm` (`None` = measure it).
///
/// Refuses rather than guesses: where the scan cannot tell the apex, `apex_identified` is false and
/// `diagnosis` says why. Where it tells nothing at all the tip is a needle (one cell), which
/// corrects nothing.
///
/// Errors: kind `Data` for a map of voids or narrower than 16 pixels, `Setting` for settings out of
/// range, `Cancelled`. Deterministic for any number of threads.
pub fn estimate(
    scan: &HeightMap,
    noise_nm: Option<f64>,
    settings: &Settings,
    progress: &Progress,
) -> Result<Estimate> {
    settings.checked()?;
    let (rows, columns) = (scan.rows(), scan.columns());
    if scan.range().is_none() || rows.min(columns) < 16 {
        return Err(Error::new(
            ErrorKind::Data,
            format!(
                "no tip from a scan of {columns} x {rows} pixels, {} of them void",
                scan.void_count()
            ),
        )
        .remedy("Give a scan of at least 16 x 16 pixels that holds sharp features"));
    }
    progress.say("estimating the tip");
    if let Some(diagnosis) = diagnose::hopeless(scan) {
        return Ok(Estimate::needle(scan, diagnosis));
    }
    let noise = match noise_nm.filter(|n| n.is_finite() && *n >= 0.0) {
        Some(noise) => noise,
        None => crate::leveling::noise(scan).unwrap_or(0.0),
    };
    let bound = match settings.method {
        Method::Auto => {
            let bound = matched_bound(scan, noise, settings, &progress.part(0.0, 0.3))?;
            wide_enough(scan, noise, settings, bound, &progress.part(0.3, 0.6))?
        }
        Method::Textbook => textbook_bound(scan, noise, settings, &progress.part(0.0, 0.6))?,
    };
    finish::finish(scan, noise, settings, bound, &progress.part(0.6, 1.0))
}

impl Settings {
    fn checked(&self) -> Result<()> {
        let entries = [
            ("tip support", self.support_nm, f64::MIN_POSITIVE),
            ("noise threshold", self.threshold_nm, 0.0),
            ("smoothing", self.smoothing_px, 0.0),
            ("feature radius", self.feature_radius_nm, 0.0),
        ];
        for (name, value, least) in entries {
            if let Some(value) = value.filter(|v| !(*v >= least && v.is_finite())) {
                let what = format!("{name} {value}");
                return Err(Error::new(ErrorKind::Setting, what)
                    .remedy("Give a positive length, or leave it to the program"));
            }
        }
        Ok(())
    }
}

impl Estimate {
    /// Nothing is known: a tip of one cell.
    fn needle(scan: &HeightMap, diagnosis: Vec<Diagnosis>) -> Self {
        let tip = Tip::new(Array2::zeros((1, 1)), scan.pitch());
        Self {
            // A grid of one 0 at a checked pitch is always a tip.
            tip: tip.unwrap_or_else(|_| unreachable!("a needle is a tip")),
            band: None,
            threshold_nm: 0.0,
            smoothing_px: 0.0,
            exercised_depth_nm: None,
            support: Array2::zeros((1, 1)),
            evidence: Vec::new(),
            height_u_nm: 0.0,
            apex_identified: false,
            read_out: ReadOut {
                reasons: diagnosis.iter().map(|d| d.finding.clone()).collect(),
                ..ReadOut::default()
            },
            features: 0,
            further_apices: Vec::new(),
            diagnosis,
        }
    }
}

/// The first bound and how it was had.
struct Bound {
    found: iterate::Bluntest,
    threshold: f64,
    smoothing: f64,
}

/// Radius that the smoothing is matched to; the least-squares fit does the rest for other radii.
const TYPICAL_RADIUS_PX: f64 = 15.0;
/// Smoothing by less than this does not pay, by more hides the tip; pixels.
const SMOOTHING_PX: [f64; 2] = [0.7, 4.0];

/// The iteration on a scan smoothed just enough that the curvature of its noise stays below the
/// tip's own: after a Gaussian of width w noise curvature falls as w^-3.
fn matched_bound(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    progress: &Progress,
) -> Result<Bound> {
    let px = (scan.pitch().x * scan.pitch().y).sqrt();
    let matched = (0.244 * 4.5 * noise * TYPICAL_RADIUS_PX / (0.5 * px)).cbrt();
    let smoothing = settings
        .smoothing_px
        .unwrap_or(matched.clamp(SMOOTHING_PX[0], SMOOTHING_PX[1]));
    let heights = smooth::gauss(scan.heights(), smoothing);
    let left = noise * smooth::gain(smoothing);
    iterate_on(
        scan,
        heights,
        left,
        smoothing,
        settings.threshold_nm.unwrap_or(2.0 * left),
        settings,
        progress,
    )
}

impl Bound {
    /// Whether most of what could show the tip is higher than the window can hold: corners of wide
    /// plateaus, which show no apex.
    fn mostly_guarded(&self) -> bool {
        5 * self.found.guarded > 2 * self.found.candidates
    }
}

/// Where the program chose the window and it cannot hold most features (a double tip shows each
/// twice, further apart than one summit is wide), a wider one if that helps.
fn wide_enough(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    bound: Bound,
    progress: &Progress,
) -> Result<Bound> {
    if settings.support_nm.is_some() || !bound.mostly_guarded() {
        return Ok(bound);
    }
    let (rows, columns) = bound.found.shape.dim();
    let (y, x) = (
        scan.pitch().y * rows as f64,
        scan.pitch().x * columns as f64,
    );
    let wider = Settings {
        support_nm: Some(1.5 * x.max(y)),
        ..*settings
    };
    let wider = matched_bound(scan, noise, &wider, progress)?;
    Ok(if wider.mostly_guarded() { bound } else { wider })
}

/// The published iteration with the half-pixel envelope; threshold four times the noise.
fn textbook_bound(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    progress: &Progress,
) -> Result<Bound> {
    let smoothing = settings.smoothing_px.unwrap_or(0.0);
    let heights = smooth::gauss(scan.heights(), smoothing);
    let left = noise * smooth::gain(smoothing);
    iterate_on(
        scan,
        heights,
        left,
        smoothing,
        settings.threshold_nm.unwrap_or(4.0 * left),
        settings,
        progress,
    )
}

fn iterate_on(
    scan: &HeightMap,
    heights: Array2<f32>,
    noise: f64,
    smoothing: f64,
    threshold: f64,
    settings: &Settings,
    progress: &Progress,
) -> Result<Bound> {
    let upper = smooth::envelope(heights.view());
    let input = iterate::Input {
        heights: heights.view(),
        upper: upper.view(),
        threshold: threshold as f32,
        half: window::half_widths(scan, &heights, noise, settings),
    };
    let found = iterate::bluntest(&input, progress)?;
    Ok(Bound {
        found,
        threshold,
        smoothing,
    })
}

#[cfg(test)]
mod tests;
