//! Tips on their own: opened for comparing and planning, without a scan.

use super::spec::{Job, TipFrom};
use super::stages::{Stages, TipResult};
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::progress::Progress;
use crate::tip::Tip;
use crate::tip::area::{ContactArea, contact_area};
use crate::tip::compare::{self, Comparison, Side, Verdict};
use crate::tip::outline::Cut;
use crate::tip::probe_shape::{ProbeShape, distances_nm, probe_shape};
use crate::tip::reach::{self, Feature, Known, Need, Plan, Probe};
use crate::units::Length;
use std::path::Path;
use std::sync::Arc;

/// Distances from the apex in figures and records.
const POINTS: usize = 24;

/// Figures of a tip's shape at the same distances from the apex, down to the depth to which it is
/// known and its grid holds it on all sides.
#[derive(Debug, Clone, PartialEq)]
pub struct ShapeFigures {
    /// Probe shape characteristics of the projected profile, along x and along y.
    pub shapes: [ProbeShape; 2],
    /// Area of contact.
    pub areas: Vec<ContactArea>,
}

/// The figures of `tip`; empty for one that was not exercised.
pub fn shape_figures(tip: &TipResult) -> ShapeFigures {
    let exercised = tip.exercised_depth_nm.unwrap_or(f64::INFINITY);
    let depth = exercised.min(tip.tip.enclosed_depth_nm() * (1.0 - 1e-6));
    let distances = distances_nm(depth, POINTS);
    ShapeFigures {
        shapes: [0.0, 90.0]
            .map(|azimuth| probe_shape(&tip.tip, Cut::Silhouette, azimuth, &distances)),
        areas: contact_area(&tip.tip, depth, POINTS),
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

/// Compares two tips; no verdict on one that is not identified, as that is no more than a bound.
/// Errors as [`compare::compare`].
pub fn compare_tips(
    first: &TipResult,
    second: &TipResult,
    settings: &compare::Settings,
) -> Result<Comparison> {
    let mut found = compare::compare(&first.into(), &second.into(), settings)?;
    for (name, tip) in [("first", first), ("second", second)] {
        if !tip.identified {
            found.verdict = Verdict::Undecided;
            found.notes.push(format!(
                "The {name} tip is not identified: it is the bluntest that its scan allows, so a \
                 difference need not be one of the tips."
            ));
        }
    }
    if [first, second].iter().any(|t| t.from == TipFrom::Blind) {
        found.notes.push(
            "A blind tip holds the radius of its scan's sharpest feature: compare tips seen on one \
             and the same characterizer."
                .to_owned(),
        );
    }
    Ok(found)
}

/// What `tip` reaches of `feature` across `azimuth_deg`; errors as [`reach::plan()`].
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;
    use crate::tip::model::Model;

    #[test]
    fn a_tip_keeps_its_pitch_in_a_sidecar_and_none_is_invented() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("tip.npy");
        let pitch = Pitch { x: 1.0, y: 2.0 };
        let tip = Model::Paraboloid { radius: 9.0 }
            .sample(31.0, pitch)
            .unwrap();
        let open =
            |options: &files::OpenOptions| open_any_tip(&path, options, None, &Progress::new());
        files::write_tip_npy(&path, tip.shape()).unwrap();
        let error = open(&files::OpenOptions::default()).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::MissingPitch);
        files::write_tip(&path, tip.shape(), pitch).unwrap();
        let found = open(&files::OpenOptions::default()).unwrap();
        assert_eq!(found.tip, tip);
        assert!(found.diagnosis[0].contains("No uncertainty"));
    }

    #[test]
    fn the_figures_share_their_distances_and_end_where_the_grid_does() {
        let tip = Model::Paraboloid { radius: 9.0 }
            .sample(31.0, Pitch { x: 1.0, y: 2.0 })
            .unwrap();
        let mut found = TipResult::given(TipFrom::File, tip, None, Some(0.1));
        let figures = shape_figures(&found);
        let [x, y] = &figures.shapes;
        assert_eq!((x.points.len(), y.points.len()), (POINTS, POINTS));
        for ((x, y), area) in x.points.iter().zip(&y.points).zip(&figures.areas) {
            assert!(x.distance_nm == y.distance_nm && y.distance_nm == area.depth_nm);
            // Round: the projected area is that of the circle of this width.
            let circle = std::f64::consts::PI * x.width_nm() * x.width_nm() / 4.0;
            assert!(area.depth_nm < 0.5 || (area.projected_nm2 / circle - 1.0).abs() < 0.02);
        }
        found.exercised_depth_nm = Some(0.0);
        assert!(shape_figures(&found).areas.is_empty());
    }
}
