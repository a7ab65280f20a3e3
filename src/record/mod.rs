//! The record of a job: result.json, report.html, the maps. Computes nothing.

use crate::error::Result;
use crate::job::{Job, Outcome, TipResult};
use std::path::{Path, PathBuf};

/// Files written by [`write`].
#[derive(Debug, Clone, PartialEq)]
pub struct Written {
    /// The folder.
    pub folder: PathBuf,
    /// `result.json`.
    pub result: PathBuf,
    /// `report.html`.
    pub report: PathBuf,
}

/// Writes the record of `outcome` into `folder` (made where missing): `result.json`,
/// `report.html`, `surface.npy`, `certainty.npy`, `tip.npy`; each atomically.
pub fn write(_folder: &Path, _job: &Job, _outcome: &Outcome) -> Result<Written> {
    todo!()
}

/// The machine-readable result, schema `truewidth.result/1`.
pub fn result_json(_job: &Job, _outcome: &Outcome) -> serde_json::Value {
    todo!()
}

/// The results as text for a terminal, as scanned and corrected side by side.
pub fn text_table(_job: &Job, _outcome: &Outcome) -> String {
    todo!()
}

/// The `tip` object of [`result_json`] alone.
pub fn tip_json(_tip: &TipResult) -> serde_json::Value {
    todo!()
}

/// The tip's read-outs and diagnosis as text for a terminal.
pub fn tip_text(_tip: &TipResult) -> String {
    todo!()
}
