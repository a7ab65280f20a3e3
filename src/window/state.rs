//! Plain state of the window: stages, tools, the view on the maps, the section line.

use super::marks::Mark;
pub use crate::dimensions::request_of;
use crate::dimensions::{Dimension, Kind, Request};
use crate::error::Error;
use crate::heightmap::HeightMap;
use crate::job::{JobFile, Outcome};

/// The five stages, in the order of the work.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Stage {
    /// The scan and its levelling.
    Scan,
    /// The tip.
    Tip,
    /// The corrected surface.
    Surface,
    /// What is measured.
    Dimensions,
    /// What is kept.
    Record,
}

impl Stage {
    /// All, in order.
    pub const ALL: [Self; 5] = [
        Self::Scan,
        Self::Tip,
        Self::Surface,
        Self::Dimensions,
        Self::Record,
    ];

    /// Its name.
    pub fn name(self) -> &'static str {
        match self {
            Self::Scan => "Scan",
            Self::Tip => "Tip",
            Self::Surface => "Surface",
            Self::Dimensions => "Dimensions",
            Self::Record => "Record",
        }
    }
}

/// How far a stage is.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Progressed {
    /// Not begun, and why.
    Waiting(String),
    /// Being computed.
    UnderWay,
    /// Done, nothing to see to.
    Done,
    /// Done or stopped, and what to see to.
    Attention(String),
}

impl Progressed {
    /// A mark and a word: colour is never alone.
    pub fn mark(&self) -> (Mark, &'static str) {
        match self {
            Self::Waiting(_) => (Mark::Open, "waiting"),
            Self::UnderWay => (Mark::UnderWay, "under way"),
            Self::Done => (Mark::Done, "done"),
            Self::Attention(_) => (Mark::Attention, "look here"),
        }
    }
}

/// What the stage states are judged by.
pub struct Judged<'a> {
    /// The outcome of the run under way or finished last.
    pub outcome: &'a Outcome,
    /// The job.
    pub job: Option<&'a JobFile>,
    /// Whether a run is under way.
    pub running: bool,
    /// Why the last run failed.
    pub error: Option<&'a Error>,
    /// Whether the record of this outcome was written.
    pub recorded: bool,
}

/// How far `stage` is.
pub fn progressed(stage: Stage, j: &Judged) -> Progressed {
    use Progressed::{Attention, Done, UnderWay, Waiting};
    let Some(job) = j.job else {
        return Waiting("No scan is open".to_owned());
    };
    let not_yet = |what: &str| match (j.running, j.error) {
        (true, _) => UnderWay,
        (false, Some(error)) => Attention(error.what().to_owned()),
        (false, None) => Waiting(what.to_owned()),
    };
    let o = j.outcome;
    match stage {
        Stage::Scan => match &o.level {
            None => not_yet("The scan is not open yet"),
            Some(level) => match level.warnings.first() {
                Some(first) => Attention(first.clone()),
                None if !level.row_jumps.is_empty() => {
                    Attention(format!("{} rows jump", level.row_jumps.len()))
                }
                None => Done,
            },
        },
        Stage::Tip => match &o.tip {
            None => match o.warnings.iter().find(|w| w.starts_with("No tip")) {
                Some(why) => Attention(why.clone()),
                None => not_yet("The tip comes after the scan"),
            },
            Some(tip) if !tip.identified => {
                Attention("The scan does not identify the apex".to_owned())
            }
            Some(tip) => match tip.diagnosis.first() {
                Some(first) => Attention(first.clone()),
                None => Done,
            },
        },
        Stage::Surface => match (&o.surface, &o.tip) {
            (Some(_), Some(tip)) if !tip.identified => {
                Attention("The tip is not identified: the corrected surface is no more than what the bluntest tip gives".to_owned())
            }
            (Some(_), _) => Done,
            (None, None) if !j.running => {
                Waiting("Without a tip there is no corrected surface".to_owned())
            }
            (None, _) => not_yet("The surface comes after the tip"),
        },
        Stage::Dimensions => match &o.dimensions {
            _ if job.dimensions.is_empty() => {
                Waiting("Nothing is to be measured yet: place a region on the map".to_owned())
            }
            None => not_yet("Dimensions come after the surface"),
            Some(lines) => match lines.iter().find(|d| missing(d)) {
                Some(line) => Attention(format!("\"{}\" could not be measured", line.name)),
                None => Done,
            },
        },
        Stage::Record if j.recorded => Done,
        Stage::Record => Waiting("The record of this state is not written yet".to_owned()),
    }
}

/// Whether a line has neither a value nor a bound.
fn missing(line: &Dimension) -> bool {
    line.as_scanned.is_none()
        && line
            .corrected
            .is_none_or(|c| c.value.is_none() && c.low.is_none() && c.high.is_none())
}

/// What a press on a map does.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Tool {
    /// Moves the view; grips of lines and regions can be taken.
    Look,
    /// Draws the section line anew.
    Section,
    /// Places a region for a dimension.
    Place(Kind),
    /// Places a region that the levelling may use.
    LevelRegion,
}

/// Kinds that can be placed by dragging.
pub const PLACEABLE: [Kind; 12] = [
    Kind::StepHeight,
    Kind::LineWidth,
    Kind::Pitch,
    Kind::Particle,
    Kind::Texture,
    Kind::SideWallAngle,
    Kind::EdgeRoughness,
    Kind::WidthRoughness,
    Kind::HoleDepth,
    Kind::Distance,
    Kind::Angle,
    Kind::Lattice,
];

/// What people call a kind.
pub fn kind_name(kind: Kind) -> &'static str {
    match kind {
        Kind::StepHeight => "Step height",
        Kind::LineWidth => "Line width",
        Kind::Pitch => "Pitch",
        Kind::Particle => "Particles",
        Kind::Texture => "Texture",
        Kind::SideWallAngle => "Side-wall angle",
        Kind::EdgeRoughness => "Edge roughness",
        Kind::WidthRoughness => "Width roughness",
        Kind::HoleDepth => "Hole depth",
        Kind::Distance => "Distance",
        Kind::Angle => "Angle",
        Kind::Lattice => "Lattice",
    }
}

/// The section line on the map, nm.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Line {
    /// Start.
    pub from: (f64, f64),
    /// End.
    pub to: (f64, f64),
}

impl Line {
    /// Across the middle of the map.
    pub fn across(map: &HeightMap) -> Self {
        let y = map.length_nm() / 2.0;
        Self {
            from: (0.0, y),
            to: (map.width_nm(), y),
        }
    }

    /// Length, nm.
    pub fn length(&self) -> f64 {
        (self.to.0 - self.from.0).hypot(self.to.1 - self.from.1)
    }

    /// Unit vector along it; along x for a line of no length.
    pub fn direction(&self) -> (f64, f64) {
        match self.length() {
            0.0 => (1.0, 0.0),
            n => ((self.to.0 - self.from.0) / n, (self.to.1 - self.from.1) / n),
        }
    }

    /// Azimuth in degrees: 0 along +x, 90 along +y.
    pub fn azimuth_deg(&self) -> f64 {
        let (x, y) = self.direction();
        y.atan2(x).to_degrees()
    }

    /// Where `p` lies along and beside the line, nm.
    pub fn coordinates(&self, p: (f64, f64)) -> (f64, f64) {
        let (ux, uy) = self.direction();
        let (dx, dy) = (p.0 - self.from.0, p.1 - self.from.1);
        (dx * ux + dy * uy, dy * ux - dx * uy)
    }

    /// The point at a distance along the line.
    pub fn at(&self, along: f64) -> (f64, f64) {
        let (ux, uy) = self.direction();
        (self.from.0 + along * ux, self.from.1 + along * uy)
    }

    /// Moved by `(dx, dy)` nm, kept with both ends on a map of the given size.
    #[must_use]
    pub fn moved(&self, dx: f64, dy: f64, size: (f64, f64)) -> Self {
        let fit =
            |d: f64, a: f64, b: f64, end: f64| d.clamp(-a.min(b), (end - a.max(b)).max(-a.min(b)));
        let dx = fit(dx, self.from.0, self.to.0, size.0);
        let dy = fit(dy, self.from.1, self.to.1, size.1);
        Self {
            from: (self.from.0 + dx, self.from.1 + dy),
            to: (self.to.0 + dx, self.to.1 + dy),
        }
    }

    /// The parallel through `p`.
    #[must_use]
    pub fn through(&self, p: (f64, f64), size: (f64, f64)) -> Self {
        let (ux, uy) = self.direction();
        let (_, beside) = self.coordinates(p);
        self.moved(-uy * beside, ux * beside, size)
    }
}

/// Which heights the colours span.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ColourSpan {
    /// Lowest to highest.
    Full,
    /// All but the outermost half per cent at either end.
    Inner,
}

/// A name for a new dimension that no other has.
pub fn new_name(requests: &[Request], kind: Kind) -> String {
    let base = match kind {
        Kind::StepHeight => "step",
        Kind::LineWidth => "line",
        Kind::Pitch => "pitch",
        Kind::Particle => "particles",
        Kind::Texture => "texture",
        Kind::SideWallAngle => "wall",
        Kind::EdgeRoughness => "edge roughness",
        Kind::WidthRoughness => "width roughness",
        Kind::HoleDepth => "hole",
        Kind::Distance => "distance",
        Kind::Angle => "angle",
        Kind::Lattice => "lattice",
    };
    (1..)
        .map(|i| format!("{base} {i}"))
        .find(|name| requests.iter().all(|r| r.name != *name))
        .unwrap_or_else(|| base.to_owned())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_line_knows_along_and_beside() {
        let line = Line {
            from: (10.0, 20.0),
            to: (13.0, 24.0),
        };
        assert_eq!(line.length(), 5.0);
        let (along, beside) = line.coordinates((10.0 - 4.0, 20.0 + 3.0));
        assert!(along.abs() < 1e-12 && (beside - 5.0).abs() < 1e-12);
        let p = line.at(2.5);
        assert!((p.0 - 11.5).abs() < 1e-12 && (p.1 - 22.0).abs() < 1e-12);
        let through = line.through((6.0, 23.0), (100.0, 100.0));
        assert!(through.coordinates((6.0, 23.0)).1.abs() < 1e-12);
    }

    #[test]
    fn a_moved_line_stays_on_the_map() {
        let line = Line {
            from: (0.0, 50.0),
            to: (100.0, 50.0),
        };
        let moved = line.moved(30.0, 80.0, (100.0, 100.0));
        assert_eq!((moved.from, moved.to), ((0.0, 100.0), (100.0, 100.0)));
        let moved = line.moved(0.0, -80.0, (100.0, 100.0));
        assert_eq!(moved.from.1, 0.0);
    }

    #[test]
    fn names_are_new_and_lines_find_their_request() {
        let request = |name: &str, kind| Request::new(name, kind);
        let requests = [
            request("line 1", Kind::LineWidth),
            request("line 12", Kind::LineWidth),
            request("line 2", Kind::StepHeight),
        ];
        assert_eq!(new_name(&requests, Kind::LineWidth), "line 3");
        let mut line = super::super::invented::dimension("line 12");
        assert_eq!(request_of(&requests, &line), Some(1));
        line.name = "line 2".to_owned();
        assert_eq!(request_of(&requests, &line), None);
    }
}
