//! The record of a job: result.json, report.html, the maps. Computes no result.
//!
//! # How to read a report
//!
//! **Summary.** How many results are *touched* (the tip reached the points the value rests on) and
//! how many *bounded* (it did not; the interval holds the value), where the correction matters
//! most, the tip, how much of the surface the tip touched, and what to mind.
//!
//! **Dimensions.** One row per result, as scanned beside corrected. The digits shown are those that
//! two digits of the standard uncertainty u justify. U = k u is the expanded uncertainty. The 95 %
//! interval is the figure to rely on: it holds the one-sided effects of the tip too, need not be
//! centred on the corrected value, and is rounded outward. A row without a corrected value but with
//! an interval is an honest answer: the scan bounds the dimension and no more. The numbers under
//! the status refer to the flags below the table.
//!
//! **Inputs** and **What was done, in order** let a reviewer repeat the work: files with SHA-256,
//! the scale and where it came from, every step from the file to the result. The job in full is
//! under **Settings**; `truewidth run` on it gives the same record apart from the time.
//!
//! **Maps.** As scanned and corrected on one colour scale over the full range of both, so that
//! equal colours are equal heights. Dark lines mark where the dimensions were taken, the dashed
//! line the section drawn below. Where the two curves of the section part, the tip was in the way;
//! the shaded area lies between the reconstructions with the sharper and the blunter tip.
//!
//! **Reliability.** Plain: touched, the map is the surface there. Hatched: bounded, it is an upper
//! bound. Cross-hatched: never in contact, the surface lies somewhere below. Dotted: void.
//!
//! **Tip.** Trust it down to the exercised depth, no further. A radius is given with the depth it
//! was fitted over; one that is not identified is not printed. Beside it stands what a sphere and a
//! paraboloid read on the same cap. The probe shape gives the full width of the projected profile
//! and the area of contact against the distance from the apex. The diagnosis says what to do.
//!
//! **Budgets.** Per result, largest contribution first: what to improve is at the top.
//!
//! **Cautions.** What the result assumes and what is missing. Read them before a value is signed.

pub mod colour;
mod curves;
mod format;
mod json;
mod known;
mod maps;
mod particles;
mod raster;
mod report;
mod results;
mod sections;
mod svg;
mod table;
#[cfg(test)]
mod tests;
mod tip_shape;
mod tips;

use crate::dimensions::{Fitted, ModelFit, MonteCarlo, ParticleHistogram};
use crate::error::{Error, Result};
use crate::files;
use crate::job::{Job, Outcome, TipResult};
use crate::tip::compare::Comparison;
use crate::tip::reach::Plan;
use std::path::{Path, PathBuf};

/// Files written by [`write()`].
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
///
/// Maps that the outcome does not have are not written, and such a file of an earlier run is
/// removed, so that all files in the folder belong together. The same job and outcome give the
/// same bytes apart from the time stamp: `written` in result.json, one line of the report.
///
/// Errors of kind `Io`.
pub fn write(folder: &Path, job: &Job, outcome: &Outcome) -> Result<Written> {
    write_at(folder, job, outcome, &now())
}

fn write_at(folder: &Path, job: &Job, outcome: &Outcome, time: &str) -> Result<Written> {
    std::fs::create_dir_all(folder).map_err(|e| Error::io(folder, e))?;
    let written = Written {
        folder: folder.to_owned(),
        result: folder.join("result.json"),
        report: folder.join("report.html"),
    };
    if let Some(surface) = outcome.surface.as_deref() {
        files::write(&folder.join("surface.npy"), &surface.surface)?;
        files::write_npy_u8(&folder.join("certainty.npy"), surface.certainty.view())?;
    } else {
        for name in ["surface.npy", "surface.npy.toml", "certainty.npy"] {
            remove(&folder.join(name))?;
        }
    }
    match outcome.tip.as_deref() {
        Some(tip) => {
            files::write_tip(&folder.join("tip.npy"), tip.tip.shape(), tip.tip.pitch())?;
        }
        None => {
            for name in ["tip.npy", "tip.npy.toml"] {
                remove(&folder.join(name))?;
            }
        }
    }
    let result = json::ResultFile::of(job, outcome, Some(time));
    let mut text = serde_json::to_string_pretty(&result).map_err(|e| {
        Error::new(crate::ErrorKind::Data, "result.json cannot be written").source(e)
    })?;
    text.push('\n');
    files::write_atomically(&written.result, text.as_bytes())?;
    let page = report::page(job, outcome, time)?;
    files::write_atomically(&written.report, page.as_bytes())?;
    Ok(written)
}

fn remove(path: &Path) -> Result<()> {
    match std::fs::remove_file(path) {
        Err(e) if e.kind() != std::io::ErrorKind::NotFound => Err(Error::io(path, e)),
        _ => Ok(()),
    }
}

/// The machine-readable result, schema `truewidth.result/1`, without a time stamp.
///
/// Numbers are written to seven significant digits, a measured value to a thousandth of its
/// standard uncertainty where that is finer; what could not be had is `null`, never NaN.
pub fn result_json(job: &Job, outcome: &Outcome) -> serde_json::Value {
    // Plain structs of numbers and text with text keys always serialize.
    serde_json::to_value(json::ResultFile::of(job, outcome, None)).unwrap_or_default()
}

/// The results as text for a terminal, as scanned and corrected side by side, then the notes.
pub fn text_table(job: &Job, outcome: &Outcome) -> String {
    table::results(job, outcome)
}

/// The `tip` object of [`result_json`] alone.
pub fn tip_json(tip: &TipResult) -> serde_json::Value {
    serde_json::to_value(json::TipPart::of_tip(tip)).unwrap_or_default()
}

/// The comparison of two tips, schema `truewidth.comparison/1`, without the difference map.
pub fn comparison_json(found: &Comparison) -> serde_json::Value {
    tips::comparison_json(found)
}

/// The comparison of two tips as text for a terminal.
pub fn comparison_text(found: &Comparison) -> String {
    tips::comparison_text(found)
}

/// What a tip reaches of a planned feature, schema `truewidth.reach/1`.
pub fn reach_json(plan: &Plan) -> serde_json::Value {
    tips::reach_json(plan)
}

/// What a tip reaches of a planned feature as text for a terminal.
pub fn reach_text(plan: &Plan) -> String {
    tips::reach_text(plan)
}

/// The rows (name and figures) of [`reach_text`], and its notes.
pub fn reach_rows(plan: &Plan) -> (Vec<(String, String)>, Vec<String>) {
    tips::reach_rows(plan)
}

/// A figure of a fitted model: "59.1 nm, u = 0.2 nm", or its bounds and why it is not determined.
pub fn fitted_words(fitted: &Fitted) -> String {
    results::fitted_words(fitted)
}

/// Whether a model fit agrees with the corrected value, in a word or two.
pub fn fit_verdict(fit: &ModelFit) -> &'static str {
    results::fit_verdict(fit)
}

/// Whether the draws agree with the budget, in a few words.
pub fn drawn_verdict(drawn: &MonteCarlo) -> &'static str {
    results::drawn_verdict(drawn)
}

/// A histogram for those who do not see it.
pub fn histogram_words(histogram: &ParticleHistogram) -> String {
    particles::words(histogram)
}

/// The tip's read-outs and diagnosis as text for a terminal.
pub fn tip_text(tip: &TipResult) -> String {
    table::tip(tip)
}

/// The time of the system's clock as ISO 8601 in UTC, to the second.
fn now() -> String {
    let seconds = std::time::SystemTime::now()
        .duration_since(std::time::UNIX_EPOCH)
        .map_or(0, |d| d.as_secs());
    utc(seconds)
}

/// Seconds since 1970 as `2026-01-31T12:00:00Z`.
///
/// Days to a civil date in eras of 400 years that begin on 1 March, so that the leap day comes
/// last (common practice).
fn utc(seconds: u64) -> String {
    let (days, rest) = (seconds / 86_400, seconds % 86_400);
    let days = days + 719_468;
    let (era, day) = (days / 146_097, days % 146_097);
    let year = (day - day / 1_460 + day / 36_524 - day / 146_096) / 365;
    let day = day - (365 * year + year / 4 - year / 100);
    let shifted = (5 * day + 2) / 153;
    let day = day - (153 * shifted + 2) / 5 + 1;
    let month = if shifted < 10 {
        shifted + 3
    } else {
        shifted - 9
    };
    let year = year + 400 * era + u64::from(month <= 2);
    format!(
        "{year:04}-{month:02}-{day:02}T{:02}:{:02}:{:02}Z",
        rest / 3600,
        rest / 60 % 60,
        rest % 60
    )
}
