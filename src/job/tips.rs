//! Tips on their own: opened for comparing and planning, without a scan.

use super::spec::{Job, TipFrom};
use super::stages::{Stages, TipResult};
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::progress::Progress;
use crate::tip::Tip;
use crate::tip::area::{ContactArea, contact_area};
use crate::tip::compare::{self, Comparison, Side};
use crate::tip::outline::Cut;
use crate::tip::probe_shape::{ProbeShape, distances_nm, probe_shape};
use crate::tip::reach::{self, Feature, Known, Need, Plan, Probe};
use crate::units::Length;
use std::path::Path;
use std::sync::Arc;

/// Points of a characteristic in figures and records.
const POINTS: usize = 24;
/// Points of the area of contact.
const AREAS: usize = 12;

/// Figures of a tip's shape, down to the depth to which it is known.
#[derive(Debug, Clone, PartialEq)]
pub struct ShapeFigures {
    /// Probe shape characteristics of the projected profile, along x and along y.
    pub shapes: [ProbeShape; 2],
    /// Area of contact.
    pub areas: Vec<ContactArea>,
}

/// The figures of `tip`; empty for one that was not exercised.
pub fn shape_figures(tip: &TipResult) -> ShapeFigures {
    let depth = tip.exercised_depth_nm.unwrap_or(f64::INFINITY);
    let shapes = [0.0, 90.0].map(|azimuth| {
        let known = tip
            .tip
            .outline(Cut::Silhouette, azimuth, 0.0)
            .known_depth_nm();
        // The last distance must not fall off the rim by rounding.
        let distances = distances_nm(depth.min(known * (1.0 - 1e-9)), POINTS);
        probe_shape(&tip.tip, Cut::Silhouette, azimuth, &distances)
    });
    ShapeFigures {
        shapes,
        areas: contact_area(&tip.tip, depth, AREAS),
    }
}

/// Opens a tip that no scan goes with: a tip file, or a job (`.toml`) whose tip stage is run, which
/// brings band and uncertainty. `uncertainty` is the standard uncertainty of a tip file's heights.
///
/// Errors: `MissingPitch` for a tip file whose pitch nobody states; `Data` for a job that gives no
/// tip; others as [`files::read_tip_grid`], [`Job::open`], [`Stages::tip`].
pub fn open_any_tip(
    path: &Path,
    options: &files::OpenOptions,
    uncertainty: Option<Length>,
    progress: &Progress,
) -> Result<Arc<TipResult>> {
    let is_job = path
        .extension()
        .is_some_and(|e| e.eq_ignore_ascii_case("toml"));
    if is_job {
        let job = Job::open(path)?;
        let found = Stages::default().tip(&job, progress)?;
        return match &*found {
            Ok(found) => Ok(Arc::clone(found)),
            Err(reason) => Err(Error::new(ErrorKind::Data, reason).at(path)),
        };
    }
    let grid = files::read_tip_grid(path, options)?;
    let Some(pitch) = options.pitch.or(grid.pitch) else {
        return Err(Error::new(
            ErrorKind::MissingPitch,
            format!("{}: the tip's pixel pitch is not stated", path.display()),
        )
        .remedy("Give --pitch, or a sidecar beside the file"));
    };
    let tip = Tip::new(grid.heights, pitch).map_err(|e| e.at(path))?;
    let uncertainty = uncertainty.map(Length::nm);
    Ok(Arc::new(TipResult::given(
        TipFrom::File,
        tip,
        grid.provenance.sha256,
        uncertainty,
    )))
}

impl<'a> From<&'a TipResult> for Side<'a> {
    fn from(found: &'a TipResult) -> Self {
        Self {
            tip: &found.tip,
            band: found.band.as_ref(),
            height_u_nm: found.height_u_nm,
            known_depth_nm: found.exercised_depth_nm,
            read_out: &found.read_out,
        }
    }
}

/// Compares two tips; errors as [`compare::compare`].
pub fn compare_tips(
    first: &TipResult,
    second: &TipResult,
    settings: &compare::Settings,
) -> Result<Comparison> {
    compare::compare(&first.into(), &second.into(), settings)
}

/// What `tip` reaches of `feature` across `azimuth_deg`; errors as [`reach::plan`].
pub fn plan(
    tip: &TipResult,
    azimuth_deg: f64,
    feature: &Feature,
    at: &[f64],
    need: &Need,
) -> Result<Plan> {
    let known = Known {
        probe: Probe::Grid(&tip.tip, azimuth_deg),
        band: tip.band.as_ref(),
        exercised_depth_nm: tip.exercised_depth_nm,
        radius_nm: tip.read_out.apex_radius.map(|r| r.value),
        half_angle_deg: tip.read_out.half_angle.as_ref().map(|a| a.value),
    };
    reach::plan(&known, feature, at, need)
}
