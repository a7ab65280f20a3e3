//! The ordered stages, each computed anew only when a setting or an earlier stage changed.

use super::spec::{Job, JobFile, LevelSpec, ScanSpec, TipFrom, TipSpec};
use crate::dimensions::{self, Calibration, Corrected, Dimension, Input, Request};
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::heightmap::HeightMap;
use crate::leveling::{self, Leveled};
use crate::morphology::{self, certainty};
use crate::progress::Progress;
use crate::tip::blind::{self, Estimate};
use crate::tip::read_out::{ReadOut, read_out};
use crate::tip::{Band, Tip};
use ndarray::Array2;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::PathBuf;
use std::sync::Arc;

/// The tip stage's result.
#[derive(Debug, Clone)]
pub struct TipResult {
    /// Where it came from.
    pub from: TipFrom,
    /// The tip.
    pub tip: Tip,
    /// Apex radius and half-angle.
    pub read_out: ReadOut,
    /// The blind estimate behind it, if it was one.
    pub estimate: Option<Estimate>,
    /// The band around it, if one could be had.
    pub band: Option<Band>,
    /// Whether it is known well enough for corrected values, not only bounds.
    pub identified: bool,
    /// Depth to which it is known, nm; `None` = all of it.
    pub exercised_depth_nm: Option<f64>,
    /// Standard uncertainty of its heights, nm.
    pub height_u_nm: f64,
    /// SHA-256 of the tip file, if from a file.
    pub sha256: Option<String>,
    /// Findings and what to do, plain sentences.
    pub diagnosis: Vec<String>,
}

/// The surface stage's result.
#[derive(Debug, Clone)]
pub struct SurfaceResult {
    /// The reconstruction: an upper bound of the surface, exact where touched.
    pub surface: HeightMap,
    /// Reconstruction with the sharper tip of the band.
    pub upper: Option<HeightMap>,
    /// Reconstruction with the blunter tip of the band.
    pub lower: Option<HeightMap>,
    /// Certainty, see [`certainty`].
    pub certainty: Array2<u8>,
    /// Pixels that lean on the edge of the scan or on voids.
    pub edge_leaning: Array2<bool>,
    /// Tolerance of the contact search, nm.
    pub tolerance_nm: f64,
    /// Fractions of the non-void pixels.
    pub reliability: Reliability,
}

/// Fractions of the non-void surface pixels.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Reliability {
    /// Touched for certain.
    pub touched: f64,
    /// Contacts only together with others.
    pub bounded: f64,
    /// Never a contact.
    pub never: f64,
}

/// What the stages have given so far; cheap to clone.
#[derive(Debug, Clone, Default)]
pub struct Outcome {
    /// The scan as opened.
    pub scan: Option<Arc<HeightMap>>,
    /// The levelled scan.
    pub level: Option<Arc<Leveled>>,
    /// The tip; `None` while under way, or where none could be had (then a warning says why).
    pub tip: Option<Arc<TipResult>>,
    /// The surface.
    pub surface: Option<Arc<SurfaceResult>>,
    /// The dimensions.
    pub dimensions: Option<Arc<Vec<Dimension>>>,
    /// Plain sentences on the whole.
    pub warnings: Vec<String>,
}

/// A value kept with the settings and the upstream value it was computed from.
#[derive(Debug)]
struct Kept<K, T> {
    held: Option<(K, Arc<T>)>,
}

impl<K, T> Default for Kept<K, T> {
    fn default() -> Self {
        Self { held: None }
    }
}

impl<K: PartialEq, T> Kept<K, T> {
    fn get(&mut self, key: K, compute: impl FnOnce() -> Result<T>) -> Result<Arc<T>> {
        if let Some((held, value)) = &self.held
            && *held == key
        {
            return Ok(Arc::clone(value));
        }
        let value = Arc::new(compute()?);
        self.held = Some((key, Arc::clone(&value)));
        Ok(value)
    }
}

/// An upstream result as part of a key: equal only if it is the very same value.
#[derive(Debug)]
struct Same<T>(Arc<T>);

impl<T> PartialEq for Same<T> {
    fn eq(&self, other: &Self) -> bool {
        Arc::ptr_eq(&self.0, &other.0)
    }
}

/// When a file last changed and its size: what tells that it must be read again.
type FileStamp = (PathBuf, Option<std::time::SystemTime>, u64);

fn stamp(path: PathBuf) -> FileStamp {
    let meta = std::fs::metadata(&path).ok();
    let time = meta.as_ref().and_then(|m| m.modified().ok());
    (path, time, meta.map_or(0, |m| m.len()))
}

/// A tip, or why the data do not allow one.
pub type TipOrReason = std::result::Result<Arc<TipResult>, String>;

/// The file, its sidecar, and what the job says of them.
type ScanKey = (FileStamp, FileStamp, ScanSpec);
type LevelKey = (Same<HeightMap>, LevelSpec);
type TipKey = (Same<Leveled>, TipSpec, Option<FileStamp>);
type SurfaceKey = (Same<Leveled>, Same<TipResult>);
type DimensionsKey = (
    Same<Leveled>,
    Option<Same<SurfaceResult>>,
    Option<Calibration>,
    Vec<Request>,
);

/// Runs jobs and keeps what each stage gave for the next run.
#[derive(Debug, Default)]
pub struct Stages {
    scan: Kept<ScanKey, HeightMap>,
    level: Kept<LevelKey, Leveled>,
    tip: Kept<TipKey, TipOrReason>,
    surface: Kept<SurfaceKey, SurfaceResult>,
    dimensions: Kept<DimensionsKey, Vec<Dimension>>,
}

impl Stages {
    /// Runs `job` through all stages. `watch` sees the outcome after each stage.
    ///
    /// Errors: the scan or the tip file cannot be opened, a setting cannot be used, cancelled; a
    /// fault of the program itself (kind `Data`), which so neither takes a batch down nor leaves a
    /// window waiting. A tip that the data do not allow is no error: the outcome then has no tip
    /// and a warning.
    pub fn run(
        &mut self,
        job: &Job,
        progress: &Progress,
        watch: &mut dyn FnMut(&Outcome),
    ) -> Result<Outcome> {
        let run = AssertUnwindSafe(|| self.run_all(job, progress, watch));
        catch_unwind(run).unwrap_or_else(|_| {
            *self = Self::default();
            Err(Error::new(
                ErrorKind::Data,
                "the computation stopped after an internal error",
            )
            .remedy("Save the job, undo the last change, and report the fault"))
        })
    }

    fn run_all(
        &mut self,
        job: &Job,
        progress: &Progress,
        watch: &mut dyn FnMut(&Outcome),
    ) -> Result<Outcome> {
        let spec = &job.file;
        spec.validate()?;
        let mut outcome = Outcome::default();

        let scan = self.scan(job, progress)?;
        outcome.scan = Some(Arc::clone(&scan));
        watch(&outcome);

        let level = self.level(job, &scan, &progress.part(0.05, 0.1))?;
        outcome.warnings.extend(level.warnings.iter().cloned());
        outcome.level = Some(Arc::clone(&level));
        watch(&outcome);

        let tip = self.tip_of(job, &level, &progress.part(0.1, 0.7))?;
        match &*tip {
            Ok(found) => {
                if !found.identified {
                    outcome.warnings.push(
                        "The tip is not identified: surface and certainty are those of the \
                         bluntest tip that the scan allows, and corrected dimensions are bounds \
                         without a value."
                            .to_owned(),
                    );
                }
                outcome.tip = Some(Arc::clone(found));
            }
            Err(reason) => outcome.warnings.push(format!("No tip: {reason}")),
        }
        watch(&outcome);

        if let Ok(found) = &*tip {
            progress.check()?;
            progress.say("reconstructing the surface");
            let key = (Same(Arc::clone(&level)), Same(Arc::clone(found)));
            let part = progress.part(0.7, 0.9);
            outcome.surface = Some(
                self.surface
                    .get(key, || reconstruct(&level, found, &part))?,
            );
            watch(&outcome);
        }

        progress.check()?;
        progress.say("measuring");
        let key = (
            Same(Arc::clone(&level)),
            outcome.surface.clone().map(Same),
            spec.calibration,
            spec.dimensions.clone(),
        );
        let part = progress.part(0.9, 1.0);
        outcome.dimensions = Some(
            self.dimensions
                .get(key, || measure(&level, &outcome, spec, &part))?,
        );
        if spec.calibration.is_none() && !spec.dimensions.is_empty() {
            outcome.warnings.push(
                "No calibration uncertainty was stated for the axes, so none is in the budgets. \
                 State it in [calibration] before a value is signed."
                    .to_owned(),
            );
        }
        progress.report(1.0);
        watch(&outcome);
        Ok(outcome)
    }

    /// Runs `job` as far as its tip. Errors as [`Stages::run`].
    pub fn tip(&mut self, job: &Job, progress: &Progress) -> Result<Arc<TipOrReason>> {
        job.file.validate()?;
        let scan = self.scan(job, progress)?;
        let level = self.level(job, &scan, &progress.part(0.05, 0.1))?;
        self.tip_of(job, &level, &progress.part(0.1, 1.0))
    }

    fn scan(&mut self, job: &Job, progress: &Progress) -> Result<Arc<HeightMap>> {
        progress.check()?;
        progress.say("opening the scan");
        let spec = &job.file.scan;
        let path = job.scan_path();
        let sidecar = files::sidecar_path(&path);
        let key = (stamp(path.clone()), stamp(sidecar), spec.clone());
        self.scan
            .get(key, || files::open(&path, &spec.open_options()?))
    }

    fn level(
        &mut self,
        job: &Job,
        scan: &Arc<HeightMap>,
        progress: &Progress,
    ) -> Result<Arc<Leveled>> {
        progress.check()?;
        progress.say("levelling");
        let spec = &job.file.level;
        self.level.get((Same(Arc::clone(scan)), spec.clone()), || {
            leveling::level(scan, &spec.settings()?, progress)
        })
    }

    fn tip_of(
        &mut self,
        job: &Job,
        level: &Arc<Leveled>,
        progress: &Progress,
    ) -> Result<Arc<TipOrReason>> {
        progress.check()?;
        progress.say("finding the tip");
        let spec = &job.file.tip;
        let file = spec.file.as_ref().map(|f| stamp(job.folder.join(f)));
        let key = (Same(Arc::clone(level)), spec.clone(), file);
        self.tip.get(key, || find_tip(job, level, progress))
    }
}

/// Width of the tip grid where none is stated: enough for the flank of a usual probe over the
/// features' height, within what the scan can hold.
fn default_support_nm(map: &HeightMap) -> f64 {
    let pitch = map.pitch();
    let shorter = map.width_nm().min(map.length_nm());
    (64.0 * pitch.x.max(pitch.y)).min(shorter / 2.0)
}

fn find_tip(job: &Job, level: &Leveled, progress: &Progress) -> Result<TipOrReason> {
    let spec = &job.file.tip;
    let scan = &level.map;
    if spec.from == TipFrom::Blind {
        let settings = blind::Settings {
            support_nm: spec.support.map(|l| l.nm()),
            threshold_nm: spec.fixed_threshold_nm(),
            feature_radius_nm: spec.feature_radius.map(|l| l.nm()),
            ..blind::Settings::default()
        };
        return match blind::estimate(scan, level.noise_nm, &settings, progress) {
            Ok(estimate) => Ok(Ok(Arc::new(from_estimate(estimate, spec)))),
            Err(e) if e.kind() == ErrorKind::Data => Ok(Err(e.to_string())),
            Err(e) => Err(e),
        };
    }
    let (tip, sha256) = match spec.model()? {
        Some(model) => {
            let support = spec
                .support
                .map_or_else(|| default_support_nm(scan), |l| l.nm());
            (model.sample(support, scan.pitch())?, None)
        }
        None => open_tip(&job.folder.join(spec.given_file()?), scan)?,
    };
    let height_u_nm = spec.uncertainty.map_or(0.0, |l| l.nm());
    let mut diagnosis = Vec::new();
    if spec.uncertainty.is_none() {
        diagnosis.push(
            "No uncertainty was stated for this tip: none is carried into the results. \
             State it as [tip] uncertainty."
                .to_owned(),
        );
    }
    let read_out = read_out(&tip, tip.depth_nm(), height_u_nm);
    Ok(Ok(Arc::new(TipResult {
        from: spec.from,
        band: None,
        identified: true,
        exercised_depth_nm: None,
        height_u_nm,
        sha256,
        diagnosis,
        read_out,
        estimate: None,
        tip,
    })))
}

/// Opens a tip file for use with `scan`; gives its SHA-256 too. A tip without a pitch of its own
/// has the scan's, one with another pitch is refused (kind `Data`). Other errors as
/// [`files::read_tip_grid`], [`Tip::new`].
pub fn open_tip(path: &std::path::Path, scan: &HeightMap) -> Result<(Tip, Option<String>)> {
    let grid = files::read_tip_grid(path, &files::OpenOptions::default())?;
    let wanted = scan.pitch();
    if let Some(pitch) = grid.pitch
        && !pitch.agrees_with(wanted)
    {
        return Err(Error::new(
            ErrorKind::Data,
            format!(
                "the tip's pixel pitch is {} nm x {} nm, the scan's {} nm x {} nm",
                pitch.x, pitch.y, wanted.x, wanted.y
            ),
        )
        .remedy("Give a tip on the scan's own grid")
        .at(path));
    }
    let tip = Tip::new(grid.heights, wanted).map_err(|e| e.at(path))?;
    Ok((tip, grid.provenance.sha256))
}

fn from_estimate(estimate: Estimate, spec: &TipSpec) -> TipResult {
    let mut diagnosis: Vec<String> = estimate
        .diagnosis
        .iter()
        .map(|d| format!("{}. {}", d.finding.trim_end_matches('.'), d.advice))
        .collect();
    diagnosis.extend(estimate.read_out.reasons.iter().cloned());
    if spec.feature_radius.is_none() && estimate.read_out.apex_radius.is_some() {
        diagnosis.push(
            "The radius is that of the tip and of the scan's sharpest feature together. \
             Where the feature's own radius is known, state it as [tip] feature-radius."
                .to_owned(),
        );
    }
    TipResult {
        from: TipFrom::Blind,
        tip: estimate.tip.clone(),
        band: estimate.band.clone(),
        identified: estimate.apex_identified,
        exercised_depth_nm: Some(estimate.exercised_depth_nm.unwrap_or(0.0)),
        height_u_nm: estimate.height_u_nm,
        sha256: None,
        diagnosis,
        read_out: estimate.read_out.clone(),
        estimate: Some(estimate),
    }
}

/// Rows and columns over which nothing tells where an apex touched: a pixel to each side, since a
/// contact lies anywhere between pixels, or the `sqrt(2 R tolerance)` over which an apex of radius
/// R is flat within the tolerance. None for a tip that is not identified.
fn contact_spread(found: &TipResult, tolerance_nm: f64) -> [usize; 2] {
    if !found.identified {
        return [0, 0];
    }
    let radius = found.read_out.apex_radius.map_or(0.0, |apex| apex.value);
    let half_width = (2.0 * radius * tolerance_nm).sqrt();
    let pitch = found.tip.pitch();
    [pitch.y, pitch.x].map(|pitch| 2 * ((half_width / pitch) as usize).max(1))
}

fn reconstruct(level: &Leveled, found: &TipResult, progress: &Progress) -> Result<SurfaceResult> {
    let scan = level.map.heights();
    let tip = found.tip.shape();
    let eroded = morphology::erode(scan, tip, &progress.part(0.0, 0.2))?;
    // Twice the noise keeps most true contacts and few false ones; the floor covers rounding.
    let (low, high) = level.map.range().unwrap_or((0.0, 0.0));
    let rounding = 4.0 * f64::from(f32::EPSILON) * f64::from(low.abs().max(high.abs()));
    let tolerance_nm = (2.0 * level.noise_nm.unwrap_or(0.0))
        .max(rounding)
        .max(1e-4);
    // A given tip's uncertainty is of its whole size, not of the course of its flank.
    let flank_u = if found.from == TipFrom::Blind {
        found.height_u_nm
    } else {
        0.0
    };
    let certainty = morphology::certainty_map(
        eroded.view(),
        scan,
        found.tip.for_contacts(flank_u).view(),
        tolerance_nm as f32,
        contact_spread(found, tolerance_nm),
        &progress.part(0.2, 0.5),
    )?;
    let edge_leaning =
        morphology::edge_leaning(scan, eroded.view(), tip, &progress.part(0.5, 0.7))?;
    let with = |tip: &Tip, name: &str, part: Progress| -> Result<HeightMap> {
        let heights = morphology::erode(scan, tip.shape(), &part)?;
        Ok(level
            .map
            .with_heights(heights, format!("eroded with the {name} tip of the band")))
    };
    let (upper, lower) = match &found.band {
        Some(band) => (
            Some(with(&band.sharper, "sharper", progress.part(0.7, 0.85))?),
            Some(with(&band.blunter, "blunter", progress.part(0.85, 1.0))?),
        ),
        None => (None, None),
    };
    let count = |value: u8| certainty.iter().filter(|&&c| c == value).count() as f64;
    let all = (certainty.len() as f64 - count(certainty::VOID)).max(1.0);
    let reliability = Reliability {
        touched: count(certainty::TOUCHED) / all,
        bounded: count(certainty::BOUNDED) / all,
        never: count(certainty::NEVER) / all,
    };
    Ok(SurfaceResult {
        surface: level
            .map
            .with_heights(eroded, "tip effect taken off by erosion"),
        upper,
        lower,
        certainty,
        edge_leaning,
        tolerance_nm,
        reliability,
    })
}

fn measure(
    level: &Leveled,
    outcome: &Outcome,
    spec: &JobFile,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let requests = &spec.dimensions;
    let corrected = match (&outcome.tip, &outcome.surface) {
        (Some(tip), Some(surface)) => Some(Corrected {
            tip: &tip.tip,
            surface: &surface.surface,
            surface_upper: surface.upper.as_ref(),
            surface_lower: surface.lower.as_ref(),
            certainty: surface.certainty.view(),
            edge_leaning: surface.edge_leaning.view(),
            identified: tip.identified,
            height_u_nm: tip.height_u_nm,
            exercised_depth_nm: tip.exercised_depth_nm,
            // A radius that the user states was taken off by the estimate.
            contains_feature_radius: tip.from == TipFrom::Blind
                && spec.tip.feature_radius.is_none(),
        }),
        _ => None,
    };
    let input = Input {
        scan: &level.map,
        noise_nm: level.noise_nm,
        calibration: spec.calibration.unwrap_or_default(),
        slope: level.slope,
        corrected,
    };
    let mut lines = Vec::new();
    for (i, request) in requests.iter().enumerate() {
        progress.check()?;
        let n = requests.len() as f32;
        let part = progress.part(i as f32 / n, (i + 1) as f32 / n);
        let measured = dimensions::measure(&input, request, &part)
            .map_err(|e| e.context(format!("dimension \"{}\"", request.name)))?;
        lines.extend(measured);
    }
    Ok(lines)
}
