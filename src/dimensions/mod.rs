//! Dimensions, as scanned and corrected. One small file per kind of measurand.

#[cfg(test)]
mod closed_forms;
mod distance;
mod erosion;
mod evidence;
mod filter;
mod find;
mod hole_depth;
mod lattice;
mod line_width;
mod model_fit;
mod particle;
mod particle_histogram;
mod pitch;
mod roughness;
mod scanner;
mod sections;
mod segmentation;
mod side_wall;
mod statistics;
mod step_height;
mod step_histogram;
#[cfg(test)]
mod tests;
mod texture;
mod trace;
mod wall;

pub use evidence::{Evidence, MonteCarlo};
pub use find::{Find, find};
pub use model_fit::{Fitted, ModelFit, second_opinion};
pub use particle_histogram::{ParticleHistogram, particle_histograms};
pub use scanner::Scanner;

use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, Region};
use crate::progress::Progress;
use crate::tip::Tip;
use crate::uncertainty::{Budget, Combined, Component};
use crate::units::Length;
use ndarray::ArrayView2;
use serde::{Deserialize, Serialize};

/// What kind of thing is measured.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// Height between a feature's top and its surroundings (ISO 5436-1).
    StepHeight,
    /// Width of a ridge or a trench at height fractions.
    LineWidth,
    /// Period of a grating.
    Pitch,
    /// Heights and diameters of particles on a flat.
    Particle,
    /// Areal texture parameters (ISO 25178-2).
    Texture,
    /// Angle of the walls of a ridge or a trench.
    SideWallAngle,
    /// Roughness of the edges of a ridge or a trench.
    EdgeRoughness,
    /// Roughness of the width of a ridge or a trench.
    WidthRoughness,
    /// Depth of a pit or a trench below the plateau around it.
    HoleDepth,
    /// Lateral distance and height difference of two points.
    Distance,
    /// Slope angle of the profile between two points.
    Angle,
    /// Vectors of a two-dimensional lattice and the angle between them.
    Lattice,
}

impl Kind {
    /// Whether height fractions ([`Request::at`]) mean something for it.
    pub fn has_fractions(self) -> bool {
        matches!(
            self,
            Self::LineWidth | Self::SideWallAngle | Self::EdgeRoughness | Self::WidthRoughness
        )
    }
}

/// Which way a line or step is crossed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Axis {
    /// Crossed along x: the line runs along y.
    X,
    /// Crossed along y: the line runs along x.
    Y,
}

/// One measurand asked for: a `[[dimension]]` entry of the job file.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct Request {
    /// Name given by the user.
    pub name: String,
    /// Kind of measurand.
    pub kind: Kind,
    /// Where; the whole scan when absent.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub region: Option<Region>,
    /// Height fractions (0 bottom, 1 top): one width or roughness each, absent = 0.5; for a side
    /// wall the two between which its angle is taken, absent = 0.3 and 0.8.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub at: Vec<f64>,
    /// Which way it is crossed; found from the data when absent.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub across: Option<Axis>,
    /// First point `[x, y]` of a distance or an angle.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub from: Option<[Length; 2]>,
    /// Second point `[x, y]` of a distance or an angle.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub to: Option<[Length; 2]>,
    /// How far from each point its edge is looked for along the profile; absent = the points
    /// themselves.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub search: Option<Length>,
    /// Nesting index of the S-filter of a texture (what is shorter is taken off).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub s_filter: Option<Length>,
    /// Nesting index of the L-filter of a texture (what is longer is taken off).
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub l_filter: Option<Length>,
    /// How a step height is taken; absent = by zones beside the edges.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub method: Option<StepMethod>,
}

impl Request {
    /// A request with everything left to the program.
    pub fn new(name: impl Into<String>, kind: Kind) -> Self {
        Self {
            name: name.into(),
            kind,
            region: None,
            at: Vec::new(),
            across: None,
            from: None,
            to: None,
            search: None,
            s_filter: None,
            l_filter: None,
            method: None,
        }
    }

    /// Checks what the types cannot. Errors of kind `Setting`.
    pub fn validate(&self) -> Result<()> {
        let bad = |what: String, remedy: &str| {
            Err(Error::new(
                ErrorKind::Setting,
                format!("dimension \"{}\": {what}", self.name),
            )
            .remedy(remedy))
        };
        if let Some(f) = self.at.iter().find(|f| !(**f > 0.0 && **f < 1.0)) {
            return bad(
                format!("height fraction {f}"),
                "Give fractions between 0 (bottom) and 1 (top), for example 0.5",
            );
        }
        for (key, length) in [
            ("search", self.search),
            ("s-filter", self.s_filter),
            ("l-filter", self.l_filter),
        ] {
            if let Some(length) = length
                && !(length.nm() > 0.0)
            {
                return bad(format!("{key} = \"{length}\""), "Give a positive length");
            }
        }
        if let (Some(s), Some(l)) = (self.s_filter, self.l_filter)
            && s.nm() >= l.nm()
        {
            return bad(
                format!("s-filter = \"{s}\" is not below l-filter = \"{l}\""),
                "Give the S-filter the shorter nesting index",
            );
        }
        Ok(())
    }
}

/// Index of the request a result line answers: names are the request's, with what was found
/// appended where one request gives several.
pub fn request_of(requests: &[Request], line: &Dimension) -> Option<usize> {
    requests
        .iter()
        .enumerate()
        .filter(|(_, r)| r.kind == line.kind && line.name.starts_with(&r.name))
        .max_by_key(|(_, r)| r.name.len())
        .map(|(i, _)| i)
}

/// How a step height is taken.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum StepMethod {
    /// Zones beside the edges: ISO 5436-1 type A1 for a ridge or a trench, two regions for an edge.
    Zones,
    /// Distance of the two densest levels of the whole region.
    Histogram,
}

/// Relative standard uncertainties of the axes.
#[derive(Debug, Clone, Copy, PartialEq, Default, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Calibration {
    /// Of x.
    pub x: f64,
    /// Of y.
    pub y: f64,
    /// Of z.
    pub z: f64,
}

/// What the tip is known to be, for the corrected column.
#[derive(Debug, Clone, Copy)]
pub struct Corrected<'a> {
    /// The tip.
    pub tip: &'a Tip,
    /// Reconstruction with the tip.
    pub surface: &'a HeightMap,
    /// Reconstruction with the sharper tip of the band (an upper bound of the surface), if any.
    pub surface_upper: Option<&'a HeightMap>,
    /// Reconstruction with the blunter tip of the band (a lower bound where touched), if any.
    pub surface_lower: Option<&'a HeightMap>,
    /// Certainty of each surface pixel, see [`crate::morphology::certainty`].
    pub certainty: ArrayView2<'a, u8>,
    /// Surface pixels that lean on the edge of the scan or on voids.
    pub edge_leaning: ArrayView2<'a, bool>,
    /// Whether the tip is known well enough to print a corrected value; otherwise only bounds.
    pub identified: bool,
    /// Standard uncertainty of the tip's heights, nm.
    pub height_u_nm: f64,
    /// Depth to which the tip is known, nm; `None` = all of it (a model or a file).
    pub exercised_depth_nm: Option<f64>,
    /// For a blind tip: it contains the sharpest feature's own radius, unknown unless stated.
    pub contains_feature_radius: bool,
}

impl<'a> Corrected<'a> {
    /// With a tip that is known exactly and to all its depth.
    pub fn exact(
        tip: &'a Tip,
        surface: &'a HeightMap,
        certainty: ArrayView2<'a, u8>,
        edge_leaning: ArrayView2<'a, bool>,
    ) -> Self {
        Self {
            tip,
            surface,
            surface_upper: None,
            surface_lower: None,
            certainty,
            edge_leaning,
            identified: true,
            height_u_nm: 0.0,
            exercised_depth_nm: None,
            contains_feature_radius: false,
        }
    }
}

/// Everything a measurand may look at.
#[derive(Debug, Clone, Copy)]
pub struct Input<'a> {
    /// The levelled scan.
    pub scan: &'a HeightMap,
    /// Its white-noise standard deviation, nm, where known.
    pub noise_nm: Option<f64>,
    /// Relative standard uncertainties of the axes.
    pub calibration: Calibration,
    /// Slope along x and y that levelling took off, nm per nm: lengths of a period are taken along
    /// the tilted plane.
    pub slope: [f64; 2],
    /// The correction, where there is one.
    pub corrected: Option<Corrected<'a>>,
}

/// A value with its standard uncertainty.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Value {
    /// In the dimension's unit.
    pub value: f64,
    /// Standard uncertainty, same unit; `None` where it could not be had.
    pub u: Option<f64>,
}

/// The corrected column. `low` and `high` enclose the truth with 95 % coverage.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct CorrectedValue {
    /// Best value; `None` where only bounds are known.
    pub value: Option<f64>,
    /// Standard uncertainty.
    pub u: Option<f64>,
    /// Expanded uncertainty k u.
    #[serde(rename = "U")]
    pub expanded: Option<f64>,
    /// Coverage factor.
    pub k: Option<f64>,
    /// Lower end of the 95 % interval; `None` = no bound.
    pub low: Option<f64>,
    /// Upper end of the 95 % interval; `None` = no bound.
    pub high: Option<f64>,
}

/// Fills both columns of what a tip does not change, the period of a pattern. `what` ("a pitch")
/// is named where the tip is not identified.
fn fill_period(
    line: &mut Dimension,
    input: &Input,
    value: f64,
    budget: Budget,
    what: Option<&str>,
) {
    let all = budget.combined(0.95);
    line.as_scanned = Some(Value {
        value,
        u: Some(all.u),
    });
    if let Some(given) = input.corrected {
        line.corrected = Some(CorrectedValue::around(value, &all));
        line.status = Some(Status::Touched);
        if let Some(what) = what.filter(|_| !given.identified) {
            line.flags.push(format!(
                "the tip is not identified; {what} does not depend on it"
            ));
        }
    }
    line.budget = budget.into_components();
}

impl CorrectedValue {
    /// A value in the middle of its interval.
    pub fn around(value: f64, all: &Combined) -> Self {
        Self {
            value: Some(value),
            u: Some(all.u),
            expanded: Some(all.expanded),
            k: Some(all.k),
            low: Some(value - all.expanded),
            high: Some(value + all.expanded),
        }
    }

    /// Only bounds; `None` = no bound on that side.
    pub fn between(low: Option<f64>, high: Option<f64>) -> Self {
        Self {
            value: None,
            u: None,
            expanded: None,
            k: None,
            low,
            high,
        }
    }
}

/// What the tip did to the points a dimension rests on.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Status {
    /// The tip contacted both edges (all points the dimension rests on).
    Touched,
    /// It did not: the truth lies in an interval.
    Bounded,
}

/// One result line.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Dimension {
    /// Name given by the user, with what was found appended where one request gives several.
    pub name: String,
    /// Kind of measurand.
    pub kind: Kind,
    /// Which figure of the kind ("line width", "trench width", "Sq", "height", ...).
    pub quantity: String,
    /// Height fraction, where the kind has one.
    pub at: Option<f64>,
    /// Unit of all values: "nm", "deg", "" for a ratio.
    pub unit: &'static str,
    /// Off the levelled scan.
    pub as_scanned: Option<Value>,
    /// With the tip's effect taken off.
    pub corrected: Option<CorrectedValue>,
    /// Touched or bounded; `None` where there is no corrected column.
    pub status: Option<Status>,
    /// Quality flags, one plain sentence each; also why a value is missing.
    pub flags: Vec<String>,
    /// The budget of the corrected value (of the as-scanned one where there is no other).
    pub budget: Vec<Component>,
    /// Second opinions and reliability, added after the measurement.
    pub evidence: Evidence,
    /// What it assumes and the published source, one line.
    pub assumptions: &'static str,
    /// Where it was taken, for drawing: segments `[x1, y1, x2, y2]` in nm on the map.
    #[serde(skip)]
    pub marks: Vec<[f64; 4]>,
}

/// Measures `request`; one request may give several lines (height fractions, particles).
///
/// Errors of kind `Setting` (a region off the scan, a fraction outside 0..1); what the data do
/// not allow is no error but a line without value and with the reason in its flags.
pub fn measure(input: &Input, request: &Request, progress: &Progress) -> Result<Vec<Dimension>> {
    progress.check()?;
    sections::check_sizes(input)?;
    match request.kind {
        Kind::StepHeight if request.method == Some(StepMethod::Histogram) => {
            step_histogram::measure(input, request, progress)
        }
        Kind::StepHeight => step_height::measure(input, request, progress),
        Kind::LineWidth => line_width::measure(input, request, progress),
        Kind::Pitch => pitch::measure(input, request, progress),
        Kind::Texture => texture::measure(input, request, progress),
        Kind::Particle => particle::measure(input, request, progress),
        Kind::SideWallAngle => side_wall::measure(input, request, progress),
        Kind::EdgeRoughness | Kind::WidthRoughness => roughness::measure(input, request, progress),
        Kind::HoleDepth => hole_depth::measure(input, request, progress),
        Kind::Distance | Kind::Angle => distance::measure(input, request, progress),
        Kind::Lattice => lattice::measure(input, request, progress),
    }
}

/// A line without values yet.
fn answer(
    request: &Request,
    kind: Kind,
    quantity: &str,
    unit: &'static str,
    assumptions: &'static str,
) -> Dimension {
    Dimension {
        name: request.name.clone(),
        kind,
        quantity: quantity.to_owned(),
        at: None,
        unit,
        as_scanned: None,
        corrected: None,
        status: None,
        flags: Vec::new(),
        budget: Vec::new(),
        evidence: Evidence::default(),
        assumptions,
        marks: Vec::new(),
    }
}
