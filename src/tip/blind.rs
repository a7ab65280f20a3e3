//! The blind estimate: the tip from the scan itself.

use super::{Band, Tip};
use crate::error::Result;
use crate::heightmap::HeightMap;
use crate::progress::Progress;
use ndarray::Array2;

/// How the estimate goes about it.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
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
    /// Findings, worst first.
    pub diagnosis: Vec<Diagnosis>,
}

/// Estimates the tip from the levelled `scan` with noise `noise_nm` (`None` = measure it).
pub fn estimate(
    _scan: &HeightMap,
    _noise_nm: Option<f64>,
    _settings: &Settings,
    _progress: &Progress,
) -> Result<Estimate> {
    todo!()
}
