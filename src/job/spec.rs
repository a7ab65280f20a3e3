//! The job file: all that was done, in a form that reproduces it.

use super::known::{KnownSpec, Way};
use crate::dimensions::{Calibration, Request};
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::heightmap::{Pitch, Region};
use crate::leveling;
use crate::tip::blind;
use crate::tip::model::Model;
use crate::units::{Length, nanometres_per};
use serde::{Deserialize, Serialize};
use std::path::{Path, PathBuf};

/// A job file (TOML); the README has an example.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct JobFile {
    /// Title for the report; may be empty.
    #[serde(default)]
    pub title: String,
    /// Whether a model is fitted beside each dimension as a second opinion.
    #[serde(default, skip_serializing_if = "std::ops::Not::not")]
    pub model_fit: bool,
    /// The scan.
    pub scan: ScanSpec,
    /// How to level it.
    #[serde(default)]
    pub level: LevelSpec,
    /// Where the tip comes from.
    #[serde(default)]
    pub tip: TipSpec,
    /// Relative standard uncertainties of the axes; absent = not stated (flagged in the results).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub calibration: Option<Calibration>,
    /// Draws of the whole chain; absent = none are made.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub monte_carlo: Option<MonteCarloSpec>,
    /// What to measure.
    #[serde(default, rename = "dimension", skip_serializing_if = "Vec::is_empty")]
    pub dimensions: Vec<Request>,
}

/// `[monte-carlo]`
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct MonteCarloSpec {
    /// How often the chain is drawn, 100 to 1000000.
    pub trials: usize,
    /// Seed of all draws (default 1).
    #[serde(default = "first_seed")]
    pub seed: u64,
}

fn first_seed() -> u64 {
    1
}

impl MonteCarloSpec {
    /// So many trials with the default seed.
    pub fn new(trials: usize) -> Self {
        Self {
            trials,
            seed: first_seed(),
        }
    }

    fn validate(&self) -> Result<()> {
        if (100..=1_000_000).contains(&self.trials) {
            return Ok(());
        }
        Err(Error::new(
            ErrorKind::Setting,
            format!("[monte-carlo] trials = {}", self.trials),
        )
        .remedy("Give from 100 trials (a rough interval) to 1000000"))
    }
}

/// `[scan]`
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct ScanSpec {
    /// Path, relative to the job file.
    pub file: PathBuf,
    /// Pixel pitch x, y; only when the file carries none.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub pitch: Option<[Length; 2]>,
    /// Unit of the heights; only when the file carries none.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub height_unit: Option<String>,
    /// Which map of a file that holds several, counted from 0.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub map: Option<usize>,
    /// Retrace of the same lines, relative to the job file: tells the hysteresis.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub retrace: Option<PathBuf>,
    /// Scan of the same place taken straight after, relative to the job file: tells the drift.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub second: Option<PathBuf>,
}

/// `[level] method`
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum LevelMethod {
    /// See [`leveling::Method::Auto`].
    #[default]
    Auto,
    /// See [`leveling::Method::None`].
    None,
    /// See [`leveling::Method::Plane`].
    Plane,
    /// See [`leveling::Method::Polynomial`].
    Polynomial,
    /// See [`leveling::Method::Rows`].
    Rows,
}

/// `[level]`
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct LevelSpec {
    /// How.
    #[serde(default)]
    pub method: LevelMethod,
    /// Order of the polynomial, 1-5 (default 2).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub order: Option<u8>,
    /// Where the reference surface is taken from.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub regions: Vec<Region>,
}

/// `[tip] from`
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum TipFrom {
    /// Estimated from the scan itself.
    #[default]
    Blind,
    /// From a scan of a characterizer of certified shape.
    KnownShape,
    /// By formula.
    Model,
    /// From a file.
    File,
}

/// `[tip] shape`, for `from = "model"`
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum TipShape {
    /// Sphere and cone: `radius`, `half-angle`.
    #[default]
    SphereCone,
    /// Paraboloid: `radius`.
    Paraboloid,
    /// Four faces: `half-angles` towards -x, +x, -y, +y.
    Pyramid,
}

/// A threshold: `"auto"` or a length.
#[derive(Debug, Clone, Copy, PartialEq, Default, Serialize, Deserialize)]
#[serde(try_from = "String", into = "String")]
pub enum Threshold {
    /// From the noise.
    #[default]
    Auto,
    /// Fixed.
    Fixed(Length),
}

impl std::str::FromStr for Threshold {
    type Err = Error;
    fn from_str(text: &str) -> Result<Self> {
        if text.trim() == "auto" {
            return Ok(Self::Auto);
        }
        let length: Length = text.parse()?;
        if length.nm() < 0.0 {
            return Err(Error::new(
                ErrorKind::Setting,
                format!("threshold {length} is negative"),
            )
            .remedy("Give \"auto\" or a length of 0 or more"));
        }
        Ok(Self::Fixed(length))
    }
}

impl TryFrom<String> for Threshold {
    type Error = Error;
    fn try_from(text: String) -> Result<Self> {
        text.parse()
    }
}

impl From<Threshold> for String {
    fn from(threshold: Threshold) -> Self {
        match threshold {
            Threshold::Auto => "auto".to_owned(),
            Threshold::Fixed(length) => length.to_string(),
        }
    }
}

/// `[tip]`
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct TipSpec {
    /// Where it comes from.
    #[serde(default)]
    pub from: TipFrom,
    /// Full width of the tip grid; absent = chosen from the scan.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub support: Option<Length>,
    /// Noise threshold of the blind estimate.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub threshold: Option<Threshold>,
    /// Smoothing before the blind estimate (standard deviation); absent = matched to the noise.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub smoothing: Option<Length>,
    /// How the blind estimate goes about it; absent = the program's own way.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub method: Option<blind::Method>,
    /// Apex radius of the sharpest feature, for the blind estimate, where the user knows it.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub feature_radius: Option<Length>,
    /// Formula, for a model.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub shape: Option<TipShape>,
    /// Apex radius, for a model.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub radius: Option<Length>,
    /// Half-angle in degrees, for a sphere-cone.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub half_angle: Option<f64>,
    /// Half-angles in degrees towards -x, +x, -y, +y, for a pyramid.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub half_angles: Option<[f64; 4]>,
    /// Path relative to the job file, for a tip from a file.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub file: Option<PathBuf>,
    /// Standard uncertainty of the given tip's surface, for a model or a file.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub uncertainty: Option<Length>,
    /// Scan that shows the tip, relative to the job file, for a blind tip or a known shape; absent =
    /// the job's own scan.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub scan: Option<PathBuf>,
    /// Formula fitted to the scan of a known shape.
    #[serde(default, rename = "model", skip_serializing_if = "Option::is_none")]
    pub fitted: Option<TipShape>,
    /// Which way supplies the tip from a known shape.
    #[serde(default, rename = "use", skip_serializing_if = "Option::is_none")]
    pub way: Option<Way>,
    /// The certified shape, for a known shape.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub known: Option<KnownSpec>,
}

impl JobFile {
    /// Rewrites every path, so far relative to the folder `from`, as seen from the folder `to`.
    pub fn move_paths(&mut self, from: &Path, to: &Path) {
        let scan = &mut self.scan;
        let further = [
            &mut scan.retrace,
            &mut scan.second,
            &mut self.tip.file,
            &mut self.tip.scan,
        ];
        for path in std::iter::once(&mut scan.file).chain(further.into_iter().flatten()) {
            *path = relative_to(&from.join(&*path), to);
        }
    }

    /// A job on `file` with everything left to the program.
    pub fn on_scan(file: impl Into<PathBuf>) -> Self {
        Self {
            title: String::new(),
            model_fit: false,
            scan: ScanSpec {
                file: file.into(),
                ..ScanSpec::default()
            },
            level: LevelSpec::default(),
            tip: TipSpec::default(),
            calibration: None,
            monte_carlo: None,
            dimensions: Vec::new(),
        }
    }

    /// Reads a job from TOML text.
    ///
    /// Errors of kind `Setting` that name the line and the offending key.
    pub fn from_toml(text: &str) -> Result<Self> {
        let job: Self = toml::from_str(text).map_err(|e| {
            Error::new(ErrorKind::Setting, e.to_string().trim_end().to_owned())
                .remedy("Mend the job file at the place shown")
        })?;
        job.validate()?;
        Ok(job)
    }

    /// The job as TOML text that [`JobFile::from_toml`] reads back to an equal job.
    pub fn to_toml(&self) -> Result<String> {
        toml::to_string_pretty(self).map_err(|e| {
            Error::new(
                ErrorKind::Setting,
                format!("the job cannot be written: {e}"),
            )
        })
    }

    /// Checks what the types cannot: values in range, entries that go together.
    pub fn validate(&self) -> Result<()> {
        self.scan.open_options()?;
        self.level.settings()?;
        self.tip.validate()?;
        if let Some(monte_carlo) = &self.monte_carlo {
            monte_carlo.validate()?;
        }
        if let Some(calibration) = self.calibration {
            for (axis, u) in [
                ("x", calibration.x),
                ("y", calibration.y),
                ("z", calibration.z),
            ] {
                if !(0.0..1.0).contains(&u) {
                    return Err(Error::new(
                        ErrorKind::Setting,
                        format!("[calibration] {axis} = {u}"),
                    )
                    .remedy("Give the relative standard uncertainty, 0.002 for 0.2 %"));
                }
            }
        }
        for request in &self.dimensions {
            request.validate()?;
        }
        Ok(())
    }
}

impl ScanSpec {
    /// What the job adds to what the file says. Errors of kind `Setting`.
    pub fn open_options(&self) -> Result<files::OpenOptions> {
        let pitch = match self.pitch {
            Some([x, y]) => Some(
                Pitch {
                    x: x.nm(),
                    y: y.nm(),
                }
                .checked()?,
            ),
            None => None,
        };
        if let Some(unit) = &self.height_unit
            && nanometres_per(unit).is_none()
        {
            return Err(Error::new(
                ErrorKind::Setting,
                format!("unknown height unit \"{unit}\""),
            )
            .remedy("Give one of pm, nm, um, mm, m"));
        }
        Ok(files::OpenOptions {
            pitch,
            height_unit: self.height_unit.clone(),
            map: self.map,
        })
    }
}

impl LevelSpec {
    /// The settings for the leveling room. Errors of kind `Setting`.
    pub fn settings(&self) -> Result<leveling::Settings> {
        let method = match self.method {
            LevelMethod::Auto => leveling::Method::Auto,
            LevelMethod::None => leveling::Method::None,
            LevelMethod::Plane => leveling::Method::Plane,
            LevelMethod::Rows => leveling::Method::Rows,
            LevelMethod::Polynomial => {
                let order = self.order.unwrap_or(2);
                if !(1..=5).contains(&order) {
                    return Err(
                        Error::new(ErrorKind::Setting, format!("[level] order = {order}"))
                            .remedy("Give an order from 1 to 5"),
                    );
                }
                leveling::Method::Polynomial { order }
            }
        };
        Ok(leveling::Settings {
            method,
            regions: self.regions.clone(),
        })
    }
}

impl TipSpec {
    /// The model asked for; `None` unless `from = "model"`. Errors of kind `Setting`.
    pub fn model(&self) -> Result<Option<Model>> {
        if self.from != TipFrom::Model {
            return Ok(None);
        }
        let missing = |key: &str, example: &str| {
            Error::new(
                ErrorKind::Setting,
                format!("[tip] from = \"model\" without {key}"),
            )
            .remedy(format!("Add {key} = {example}"))
        };
        let radius = || {
            self.radius
                .map(Length::nm)
                .ok_or_else(|| missing("radius", "\"10 nm\""))
        };
        let model = match self.shape.unwrap_or_default() {
            TipShape::SphereCone => Model::SphereCone {
                radius: radius()?,
                half_angle: self.half_angle.ok_or_else(|| missing("half-angle", "17"))?,
            },
            TipShape::Paraboloid => Model::Paraboloid { radius: radius()? },
            TipShape::Pyramid => Model::Pyramid {
                half_angles: self
                    .half_angles
                    .ok_or_else(|| missing("half-angles", "[15, 25, 17, 17]"))?,
            },
        };
        model.checked().map(Some)
    }

    /// The tip file, relative to the job file. An error of kind `Setting` where none is given.
    pub fn given_file(&self) -> Result<&Path> {
        self.file.as_deref().ok_or_else(|| {
            Error::new(ErrorKind::Setting, "[tip] from = \"file\" without file")
                .remedy("Add file = \"tip.npy\"")
        })
    }

    /// The certified shape. An error of kind `Setting` where none is given.
    pub fn known_spec(&self) -> Result<&KnownSpec> {
        self.known.as_ref().ok_or_else(|| {
            Error::new(
                ErrorKind::Setting,
                "[tip] from = \"known-shape\" without known",
            )
            .remedy("Add known = { shape = \"ridges\", width = \"100 nm\" }, as certified")
        })
    }

    /// The separate scan that shows the tip, where the source uses one.
    pub fn own_scan(&self) -> Option<&Path> {
        let uses = matches!(self.from, TipFrom::Blind | TipFrom::KnownShape);
        self.scan.as_deref().filter(|_| uses)
    }

    /// The threshold that the user stated; `None` = from the noise.
    pub fn fixed_threshold_nm(&self) -> Option<f64> {
        match self.threshold {
            Some(Threshold::Fixed(length)) => Some(length.nm()),
            Some(Threshold::Auto) | None => None,
        }
    }

    fn validate(&self) -> Result<()> {
        self.model()?;
        if self.from == TipFrom::KnownShape {
            self.known_spec()?.to_shape()?;
        }
        if self.from == TipFrom::File {
            self.given_file()?;
        }
        for (key, length) in [
            ("support", self.support),
            ("radius", self.radius),
            ("feature-radius", self.feature_radius),
            ("smoothing", self.smoothing),
            ("uncertainty", self.uncertainty),
        ] {
            if let Some(length) = length
                && (length.nm() < 0.0 || (key == "support" && length.nm() == 0.0))
            {
                return Err(
                    Error::new(ErrorKind::Setting, format!("[tip] {key} = \"{length}\""))
                        .remedy("Give a positive length"),
                );
            }
        }
        Ok(())
    }
}

/// A job with the folder its relative paths start from.
#[derive(Debug, Clone, PartialEq)]
pub struct Job {
    /// What to do.
    pub file: JobFile,
    /// Relative paths start here.
    pub folder: PathBuf,
    /// Where the job was read from, if from a file.
    pub path: Option<PathBuf>,
    /// SHA-256 of the job file's bytes, if from a file.
    pub sha256: Option<String>,
}

impl Job {
    /// Reads a job file. Errors: kind `Io`, or `Setting` naming the line.
    pub fn open(path: &Path) -> Result<Self> {
        let bytes = std::fs::read(path).map_err(|e| Error::io(path, e))?;
        let text = std::str::from_utf8(&bytes).map_err(|_| {
            Error::new(
                ErrorKind::Malformed,
                format!("{}: not a text file", path.display()),
            )
            .remedy("A job file is TOML text in UTF-8")
        })?;
        let file = JobFile::from_toml(text).map_err(|e| e.context(path.display()))?;
        Ok(Self {
            file,
            folder: path.parent().unwrap_or(Path::new("")).to_owned(),
            path: Some(path.to_owned()),
            sha256: Some(files::sha256_hex(&bytes)),
        })
    }

    /// A job on the scan at `path` with everything left to the program.
    pub fn on_scan(path: &Path) -> Self {
        let name = path
            .file_name()
            .map_or_else(|| path.to_owned(), PathBuf::from);
        Self {
            file: JobFile::on_scan(name),
            folder: path.parent().unwrap_or(Path::new("")).to_owned(),
            path: None,
            sha256: None,
        }
    }

    /// Saves the job atomically to `path` and takes that as its home; its paths are rewritten so
    /// that they still point to the same files.
    pub fn save(&mut self, path: &Path) -> Result<()> {
        let folder = path.parent().unwrap_or(Path::new("")).to_owned();
        let mut file = self.file.clone();
        file.move_paths(&self.folder, &folder);
        let text = file.to_toml()?;
        files::write_atomically(path, text.as_bytes())?;
        self.file = file;
        self.folder = folder;
        self.path = Some(path.to_owned());
        self.sha256 = Some(files::sha256_hex(text.as_bytes()));
        Ok(())
    }

    /// The scan's path.
    pub fn scan_path(&self) -> PathBuf {
        self.folder.join(&self.file.scan.file)
    }
}

/// `target` as seen from `folder` where it lies inside it, else absolute where it can be had.
fn relative_to(target: &Path, folder: &Path) -> PathBuf {
    let absolute = |p: &Path| std::path::absolute(p).unwrap_or_else(|_| p.to_owned());
    let (target, folder) = (absolute(target), absolute(folder));
    target
        .strip_prefix(&folder)
        .map(Path::to_owned)
        .unwrap_or(target)
}
