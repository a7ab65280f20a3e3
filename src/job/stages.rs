//! The ordered stages, each computed anew only when a setting or an earlier stage changed.

use super::known::{Way, tip_from_known};
use super::monte_carlo;
use super::pairs::{Pairs, pairs};
use super::spec::{Job, JobFile, LevelSpec, MonteCarloSpec, ScanSpec, TipFrom, TipSpec};
use crate::dimensions::{self, Calibration, Corrected, Dimension, Input, Request, Scanner};
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::heightmap::HeightMap;
use crate::leveling::{self, Leveled};
use crate::morphology::{self, Reliability};
use crate::progress::Progress;
use crate::tip::blind::{self, Estimate};
use crate::tip::known::Known;
use crate::tip::read_out::{ReadOut, read_out};
use crate::tip::{Band, Tip};
use ndarray::{Array2, s};
use rayon::prelude::*;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};

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
    /// SHA-256 of the tip file or of the separate scan that showed the tip, if from one.
    pub sha256: Option<String>,
    /// Findings and what to do, plain sentences.
    pub diagnosis: Vec<String>,
    /// Both results from a known shape and which of them `tip` is, if from one.
    pub known: Option<Box<(Known, Way)>>,
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
    /// Certainty, see [`morphology::certainty`].
    pub certainty: Array2<u8>,
    /// Pixels that lean on the edge of the scan or on voids.
    pub edge_leaning: Array2<bool>,
    /// Tolerance of the contact search, nm.
    pub tolerance_nm: f64,
    /// Fractions of the non-void pixels.
    pub reliability: Reliability,
}

/// What the stages have given so far; cheap to clone.
#[derive(Debug, Clone, Default)]
pub struct Outcome {
    /// The scan as opened.
    pub scan: Option<Arc<HeightMap>>,
    /// The levelled scan.
    pub level: Option<Arc<Leveled>>,
    /// What further scans of the same place showed; `None` where the job gives none.
    pub pairs: Option<Arc<Pairs>>,
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
type PairsKey = (Same<Leveled>, ScanSpec, LevelSpec, Vec<FileStamp>);
type TipKey = (Same<Leveled>, TipSpec, LevelSpec, Vec<FileStamp>);
type SurfaceKey = (Same<Leveled>, Same<TipResult>);
type DimensionsKey = (
    Same<Leveled>,
    Option<Same<SurfaceResult>>,
    Option<Same<Pairs>>,
    Option<Calibration>,
    Vec<Request>,
    bool,
);
/// Beside the dimensions, which hang on all before them, what the draws themselves need.
type MonteCarloKey = (Same<Vec<Dimension>>, LevelSpec, MonteCarloSpec);

/// Runs jobs and keeps what each stage gave for the next run.
#[derive(Debug, Default)]
pub struct Stages {
    scan: Kept<ScanKey, HeightMap>,
    level: Kept<LevelKey, Leveled>,
    pairs: Kept<PairsKey, Pairs>,
    tip: Kept<TipKey, TipOrReason>,
    surface: Kept<SurfaceKey, SurfaceResult>,
    dimensions: Kept<DimensionsKey, Vec<Dimension>>,
    monte_carlo: Kept<MonteCarloKey, Vec<Dimension>>,
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

        // Second opinions take longer than all before them.
        let slow = spec.model_fit || spec.monte_carlo.is_some();
        let (whole, progress) = (progress, &progress.part(0.0, if slow { 0.4 } else { 1.0 }));
        let scan = self.scan(job, progress)?;
        outcome.scan = Some(Arc::clone(&scan));
        watch(&outcome);

        let level = self.level(job, &scan, &progress.part(0.05, 0.1))?;
        outcome.warnings.extend(level.warnings.iter().cloned());
        outcome.level = Some(Arc::clone(&level));
        outcome.pairs = self.pairs_of(job, &level, &progress.part(0.1, 0.12))?;
        if let Some(pairs) = &outcome.pairs {
            outcome.warnings.extend(pairs.warnings.iter().cloned());
        }
        watch(&outcome);

        let tip = self.tip_of(job, &level, &progress.part(0.12, 0.7))?;
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
            outcome.pairs.clone().map(Same),
            spec.calibration,
            spec.dimensions.clone(),
            spec.model_fit,
        );
        let (from, until) = match (slow, spec.model_fit, spec.monte_carlo) {
            (false, ..) => (0.9, 1.0),
            (true, true, Some(_)) => (0.36, 0.6),
            (true, false, Some(_)) => (0.36, 0.42),
            (true, _, None) => (0.36, 1.0),
        };
        if spec.model_fit {
            progress.say("measuring, and fitting a model");
        }
        let part = whole.part(from, until);
        let measured = self
            .dimensions
            .get(key, || measure(&level, &outcome, spec, &part))?;
        outcome.dimensions = Some(Arc::clone(&measured));
        if let Some(drawn) = spec.monte_carlo {
            watch(&outcome);
            progress.say("drawing the whole chain");
            let key = (Same(Arc::clone(&measured)), spec.level.clone(), drawn);
            let part = whole.part(until, 1.0);
            outcome.dimensions = Some(self.monte_carlo.get(key, || {
                monte_carlo::draw(&level, &outcome, spec, &drawn, &measured, &part)
            })?);
        }
        if spec.calibration.is_none() && !spec.dimensions.is_empty() {
            outcome.warnings.push(
                "No calibration uncertainty was stated for the axes, so none is in the budgets. \
                 State it in [calibration] before a value is signed."
                    .to_owned(),
            );
        }
        whole.report(1.0);
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
        let spec = job.file.scan.alone();
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

    fn pairs_of(
        &mut self,
        job: &Job,
        level: &Arc<Leveled>,
        progress: &Progress,
    ) -> Result<Option<Arc<Pairs>>> {
        progress.check()?;
        let spec = &job.file.scan;
        let files = spec.further().flat_map(|f| {
            let path = job.folder.join(f);
            [files::sidecar_path(&path), path]
        });
        let files: Vec<FileStamp> = files.map(stamp).collect();
        if files.is_empty() {
            return Ok(None);
        }
        progress.say("comparing with the further scans");
        let key = (
            Same(Arc::clone(level)),
            spec.clone(),
            job.file.level.clone(),
            files,
        );
        let found = self.pairs.get(key, || pairs(job, level, progress))?;
        Ok(Some(found))
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
        let mut files: Vec<PathBuf> = spec.file.iter().map(|f| job.folder.join(f)).collect();
        if let Some(scan) = spec.own_scan() {
            let scan = job.folder.join(scan);
            files.extend([files::sidecar_path(&scan), scan]);
        }
        let files = files.into_iter().map(stamp).collect();
        let leveling = job.file.level.clone();
        let key = (Same(Arc::clone(level)), spec.clone(), leveling, files);
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
    let own = match spec.own_scan() {
        Some(path) => Some(tip_scan(job, path, &progress.part(0.0, 0.1))?),
        None => None,
    };
    let progress = &progress.part(0.1, 1.0);
    let shown = own.as_ref().unwrap_or(level);
    let sha256 = own.as_ref().and_then(|o| o.map.provenance().sha256.clone());
    if spec.from == TipFrom::KnownShape {
        let support = spec
            .support
            .map_or_else(|| default_support_nm(scan), |l| l.nm());
        let found = tip_from_known(spec, shown, support, scan.pitch(), progress)?;
        return Ok(found.map(|tip| Arc::new(TipResult { sha256, ..tip })));
    }
    if spec.from == TipFrom::Blind {
        let settings = blind::Settings {
            support_nm: spec.support.map(|l| l.nm()),
            threshold_nm: spec.fixed_threshold_nm(),
            smoothing_px: spec.smoothing.map(|l| {
                let pitch = shown.map.pitch();
                l.nm() / (pitch.x * pitch.y).sqrt()
            }),
            method: spec.method.unwrap_or_default(),
            feature_radius_nm: spec.feature_radius.map(|l| l.nm()),
        };
        same_pitch(shown, scan, spec)?;
        return match blind::estimate(&shown.map, shown.noise_nm, &settings, progress) {
            Ok(estimate) => Ok(Ok(Arc::new(TipResult {
                sha256,
                ..from_estimate(estimate, spec)
            }))),
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
    let uncertainty = spec.uncertainty.map(|l| l.nm());
    let found = TipResult::given(spec.from, tip, sha256, uncertainty);
    Ok(Ok(Arc::new(found)))
}

impl TipResult {
    /// A tip that was given, with the standard uncertainty of its heights (nm) where stated.
    pub(super) fn given(
        from: TipFrom,
        tip: Tip,
        sha256: Option<String>,
        uncertainty_nm: Option<f64>,
    ) -> Self {
        let height_u_nm = uncertainty_nm.unwrap_or(0.0);
        let mut diagnosis = Vec::new();
        if uncertainty_nm.is_none() {
            diagnosis.push(
                "No uncertainty was stated for this tip: none is carried into the results. \
                 State it as [tip] uncertainty."
                    .to_owned(),
            );
        }
        Self {
            from,
            band: None,
            identified: true,
            exercised_depth_nm: None,
            height_u_nm,
            sha256,
            diagnosis,
            // The corners of a grid lie deeper than its flanks reach all round.
            read_out: read_out(&tip, tip.enclosed_depth_nm(), height_u_nm),
            estimate: None,
            known: None,
            tip,
        }
    }
}

/// The separate scan that shows the tip, levelled as the job says but on no region of the job's
/// own scan. Its scale comes from the file or its sidecar.
fn tip_scan(job: &Job, path: &Path, progress: &Progress) -> Result<Leveled> {
    let path = job.folder.join(path);
    let map = files::open(&path, &files::OpenOptions::default()).map_err(|e| e.at(&path))?;
    let settings = LevelSpec {
        regions: Vec::new(),
        ..job.file.level.clone()
    }
    .settings()?;
    leveling::level(&map, &settings, progress).map_err(|e| e.at(&path))
}

/// A blind tip comes on the grid of the scan that shows it: that must be the grid it corrects.
fn same_pitch(shown: &Leveled, scan: &HeightMap, spec: &TipSpec) -> Result<()> {
    let (own, wanted) = (shown.map.pitch(), scan.pitch());
    if own.agrees_with(wanted) {
        return Ok(());
    }
    let name = spec.own_scan().unwrap_or(Path::new("")).display();
    Err(Error::new(
        ErrorKind::Setting,
        format!(
            "[tip] scan = \"{name}\" has a pitch of {} nm x {} nm, the job's scan {} nm x {} nm",
            own.x, own.y, wanted.x, wanted.y
        ),
    )
    .remedy("Take both scans with one pixel pitch, or the tip from a known shape"))
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
        known: None,
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
    let flank_u = match found.from {
        TipFrom::Blind | TipFrom::KnownShape => found.height_u_nm,
        TipFrom::Model | TipFrom::File => 0.0,
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
    let reliability = Reliability::of(certainty.view());
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

/// What the measurands may look at.
pub(super) fn input<'a>(level: &'a Leveled, outcome: &'a Outcome, spec: &JobFile) -> Input<'a> {
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
    Input {
        scan: &level.map,
        noise_nm: level.noise_nm,
        calibration: spec.calibration.unwrap_or_default(),
        slope: level.slope,
        corrected,
    }
}

/// Measures one request with what is known of the scanner, errors with its name.
pub(super) fn measure_one(
    input: &Input,
    scanner: &Scanner,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let mut lines = dimensions::measure(input, request, progress)
        .map_err(|e| e.context(format!("dimension \"{}\"", request.name)))?;
    for line in &mut lines {
        scanner.enter(input.scan, request, line);
    }
    Ok(lines)
}

/// What further scans tell of the scanner.
pub(super) fn scanner(outcome: &Outcome) -> Scanner {
    outcome
        .pairs
        .as_deref()
        .map(Pairs::scanner)
        .unwrap_or_default()
}

fn measure(
    level: &Leveled,
    outcome: &Outcome,
    spec: &JobFile,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let requests = &spec.dimensions;
    let input = input(level, outcome, spec);
    let scanner = scanner(outcome);
    let band = outcome.tip.as_ref().and_then(|tip| tip.band.as_ref());
    let done = AtomicUsize::new(0);
    let lines: Vec<Vec<Dimension>> = requests
        .par_iter()
        .map(|request| {
            progress.check()?;
            // Several go on at once: the progress is how many are done.
            let quiet = progress.silent();
            let mut measured = measure_one(&input, &scanner, request, &quiet)?;
            if let Some(corrected) = &input.corrected {
                let reliability = reliability(&input, corrected, request)?;
                for line in &mut measured {
                    line.evidence.reliability = Some(reliability);
                }
            }
            if spec.model_fit {
                dimensions::second_opinion(&input, request, band, &mut measured, &quiet)?;
            }
            let done = done.fetch_add(1, Ordering::Relaxed) + 1;
            progress.report(done as f32 / requests.len() as f32);
            Ok(measured)
        })
        .collect::<Result<_>>()?;
    Ok(lines.into_iter().flatten().collect())
}

/// What the tip touched of the request's region.
fn reliability(input: &Input, corrected: &Corrected, request: &Request) -> Result<Reliability> {
    let whole = request.region.unwrap_or_else(|| input.scan.whole());
    let p = whole.pixels(input.scan)?;
    let part = s![p.row..p.row + p.rows, p.column..p.column + p.columns];
    Ok(Reliability::of(corrected.certainty.slice(part)))
}
