//! Two tips compared: what of their difference stands out from what is known of them.
//!
//! Registration: both apices at the same place and height. How much length was lost at the apex
//! cannot be told from shapes alone; wear shows as a blunter shape. On request the second tip is
//! also shifted sideways to the least squares of the normal differences, which takes up an error of
//! the apex' place (and part of a tilt) but no symmetrical wear.
//!
//! Grids of different pitch: both tips are read at the cells of the coarser pitch of each axis over
//! the lesser extent, by [`Tip::depth_at`] (interpolated, not averaged: a mean of heights is no
//! height of a tip).

use super::read_out::ReadOut;
use super::{Band, Tip};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use crate::leveling::least_squares;
use crate::uncertainty::{Budget, Combined, Distribution, coverage_factor};
use ndarray::Array2;

/// Cells that a comparison needs at least.
const LEAST_CELLS: usize = 12;
/// Share of cells beyond twice their uncertainty that calls the shape changed: five times what
/// chance allows.
const LOCAL_CHANGE: f64 = 0.25;
/// Coverage of the verdict.
const COVERAGE: f64 = 0.95;

/// A tip and what is known of it.
#[derive(Debug, Clone, Copy)]
pub struct Side<'a> {
    /// The tip.
    pub tip: &'a Tip,
    /// Its band (about two standard uncertainties to either side), where there is one.
    pub band: Option<&'a Band>,
    /// Standard uncertainty of its heights, nm, for want of a band.
    pub height_u_nm: f64,
    /// Depth to which it is known, nm; `None` = all of it.
    pub known_depth_nm: Option<f64>,
    /// Its radius and half-angle.
    pub read_out: &'a ReadOut,
}

/// How to compare.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Settings {
    /// Compare down to this depth at most, nm; `None` = as deep as both are known.
    pub depth_nm: Option<f64>,
    /// Shift the second tip sideways to the best fit.
    pub best_shift: bool,
}

/// A figure of both tips.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Change {
    /// Of the first and of the second tip.
    pub values: [f64; 2],
    /// Second minus first.
    pub difference: f64,
    /// Combined standard uncertainty of the difference.
    pub u: f64,
    /// Coverage factor for 95 %.
    pub k: f64,
}

impl Change {
    fn of(first: (f64, f64), second: (f64, f64)) -> Self {
        let mut budget = Budget::new();
        budget.push("first tip", first.1, Distribution::Normal, 1.0);
        budget.push("second tip", second.1, Distribution::Normal, 1.0);
        let Combined { u, k, .. } = budget.combined(COVERAGE);
        Self {
            values: [first.0, second.0],
            difference: second.0 - first.0,
            u,
            k,
        }
    }

    /// Expanded uncertainty of the difference.
    pub fn expanded(&self) -> f64 {
        self.k * self.u
    }

    /// -1, 0 or 1: whether the difference stands out, and which way.
    fn sign(&self) -> i8 {
        sign(self.difference, self.expanded())
    }
}

fn sign(difference: f64, expanded: f64) -> i8 {
    if difference > expanded {
        1
    } else if difference < -expanded {
        -1
    } else {
        0
    }
}

/// What the comparison comes to.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verdict {
    /// The second tip is blunter.
    Worn,
    /// The second tip is sharper.
    Sharper,
    /// Blunter here and sharper there: chipped, bent, contaminated.
    Changed,
    /// The difference lies within the uncertainty.
    NotDistinguishable,
    /// Too little is known of at least one to judge it by.
    Undecided,
}

impl Verdict {
    /// Its name.
    pub fn name(self) -> &'static str {
        match self {
            Self::Worn => "worn",
            Self::Sharper => "sharper",
            Self::Changed => "changed",
            Self::NotDistinguishable => "not distinguishable",
            Self::Undecided => "undecided",
        }
    }

    /// In words, with what to do.
    pub fn words(self) -> &'static str {
        match self {
            Self::Worn => {
                "Worn: the second tip is blunter than the first beyond their uncertainties. Correct \
                 each scan with the tip of its own time."
            }
            Self::Sharper => {
                "Sharper: the second tip is sharper than the first beyond their uncertainties. Wear \
                 does not do that: look for dirt on the first, a broken apex, or tips taken in the \
                 wrong order."
            }
            Self::Changed => {
                "Changed: blunter in some places and sharper in others. Look for a chip, dirt or a \
                 tilt, and see the difference map."
            }
            Self::NotDistinguishable => {
                "Not distinguishable: the difference lies within the combined uncertainty of the \
                 two. Wear smaller than that cannot be told from these data."
            }
            Self::Undecided => {
                "Undecided: what is known of at least one of the tips carries no verdict, see the \
                 notes. State its uncertainty, or use a tip that its scan identifies."
            }
        }
    }
}

/// Two tips side by side.
#[derive(Debug, Clone, PartialEq)]
pub struct Comparison {
    /// Height of the second tip minus the first, nm, on the common grid, apex in the centre;
    /// positive = the second is blunter there. NaN deeper than `depth_nm` or outside either tip.
    pub difference: Array2<f32>,
    /// Pitch of the common grid.
    pub pitch: Pitch,
    /// Whether either tip was resampled for it.
    pub resampled: bool,
    /// Place of the second tip's apex, nm, x and y; 0 without a best fit.
    pub shift_nm: [f64; 2],
    /// Depth compared, nm.
    pub depth_nm: f64,
    /// Cells compared.
    pub cells: usize,
    /// Root mean square of the difference along the normal, nm.
    pub normal_rms_nm: f64,
    /// Its mean, nm, positive = the second is blunter.
    pub normal_mean_nm: f64,
    /// Standard uncertainty of the mean, nm: errors of one tip are taken to go together.
    pub normal_u_nm: f64,
    /// Part of the cells whose difference exceeds twice its own uncertainty.
    pub beyond: f64,
    /// Apex radius, nm; `None` where either has none.
    pub radius: Option<Change>,
    /// Half-angle, degrees; `None` where either has none.
    pub half_angle: Option<Change>,
    /// What it comes to.
    pub verdict: Verdict,
    /// What is missing or has to be minded, plain sentences.
    pub notes: Vec<String>,
}

/// Compares `second` with `first`.
///
/// Errors of kind `Data`: either tip shows no depth or fewer than 12 cells can be compared; of kind
/// `Setting`: a depth that is not positive. Common practice.
pub fn compare(first: &Side, second: &Side, settings: &Settings) -> Result<Comparison> {
    let depth = common_depth(first, second, settings)?;
    let grid = Common::of(first.tip, second.tip);
    let mut shift = [0.0, 0.0];
    if settings.best_shift {
        for _ in 0..20 {
            let step = grid.shift_step(first.tip, second.tip, shift, depth)?;
            shift = [shift[0] + step[0], shift[1] + step[1]];
            if step[0].hypot(step[1]) < 1e-4 * grid.pitch.x.min(grid.pitch.y) {
                break;
            }
        }
    }
    let cells = grid.cells(first, second, shift, depth);
    if cells.len() < LEAST_CELLS {
        return Err(Error::new(
            ErrorKind::Data,
            format!(
                "only {} cells of the two tips can be compared down to {depth:.3} nm",
                cells.len()
            ),
        )
        .remedy("Compare deeper, or tips on finer pixels"));
    }
    let n = cells.len() as f64;
    let mean = cells.iter().map(|c| c.normal).sum::<f64>() / n;
    let u = cells.iter().map(|c| c.u).sum::<f64>() / n;
    let beyond = cells.iter().filter(|c| c.normal.abs() > 2.0 * c.u).count() as f64 / n;
    let mut difference = Array2::from_elem(grid.dim(), f32::NAN);
    for c in &cells {
        difference[c.at] = c.height as f32;
    }
    let radius = match (&first.read_out.apex_radius, &second.read_out.apex_radius) {
        (Some(a), Some(b)) => Some(Change::of((a.value, a.u), (b.value, b.u))),
        _ => None,
    };
    let half_angle = match (&first.read_out.half_angle, &second.read_out.half_angle) {
        (Some(a), Some(b)) => Some(Change::of((a.value, a.u), (b.value, b.u))),
        _ => None,
    };
    let mut found = Comparison {
        difference,
        pitch: grid.pitch,
        resampled: grid.resampled,
        shift_nm: shift,
        depth_nm: depth,
        cells: cells.len(),
        normal_rms_nm: (cells.iter().map(|c| c.normal * c.normal).sum::<f64>() / n).sqrt(),
        normal_mean_nm: mean,
        normal_u_nm: u,
        beyond,
        radius,
        half_angle,
        verdict: Verdict::Undecided,
        notes: notes(first, second),
    };
    found.verdict = verdict(first, second, &found);
    Ok(found)
}

fn common_depth(first: &Side, second: &Side, settings: &Settings) -> Result<f64> {
    if let Some(depth) = settings.depth_nm.filter(|d| !(*d > 0.0)) {
        return Err(
            Error::new(ErrorKind::Setting, format!("comparison depth {depth} nm"))
                .remedy("Give a depth above 0"),
        );
    }
    let mut depth = settings.depth_nm.unwrap_or(f64::INFINITY);
    for (name, side) in [("first", first), ("second", second)] {
        let known = side.known_depth_nm.unwrap_or(f64::INFINITY);
        let here = side.tip.depth_nm().min(known);
        if !(here > 0.0) {
            return Err(Error::new(
                ErrorKind::Data,
                format!("the {name} tip shows no depth below its apex"),
            )
            .remedy("Give a tip that a scan has exercised"));
        }
        depth = depth.min(here);
    }
    Ok(depth)
}

fn stated(side: &Side) -> bool {
    side.band.is_some() || side.height_u_nm > 0.0
}

fn notes(first: &Side, second: &Side) -> Vec<String> {
    let mut notes = Vec::new();
    for (name, side) in [("first", first), ("second", second)] {
        if !stated(side) {
            notes.push(format!(
                "No uncertainty is known of the {name} tip: state it, or use a tip with a band."
            ));
        } else if side.band.is_none() {
            notes.push(format!(
                "The {name} tip has no band: the uncertainty of its heights ({:.3} nm) is used all over.",
                side.height_u_nm
            ));
        }
        for (what, missing) in [
            ("apex radius", side.read_out.apex_radius.is_none()),
            ("half-angle", side.read_out.half_angle.is_none()),
        ] {
            if missing {
                let why = side.read_out.reasons.first().cloned().unwrap_or_default();
                notes.push(
                    format!("The {name} tip has no {what}. {why}")
                        .trim_end()
                        .to_owned(),
                );
            }
        }
    }
    notes
}

fn verdict(first: &Side, second: &Side, found: &Comparison) -> Verdict {
    if !stated(first) || !stated(second) {
        return Verdict::Undecided;
    }
    let k = coverage_factor(COVERAGE, None);
    let signs = [
        sign(found.normal_mean_nm, k * found.normal_u_nm),
        found.radius.map_or(0, |r| r.sign()),
        found.half_angle.map_or(0, |a| a.sign()),
    ];
    match (signs.contains(&1), signs.contains(&-1)) {
        (true, true) => Verdict::Changed,
        (true, false) => Verdict::Worn,
        (false, true) => Verdict::Sharper,
        (false, false) if found.beyond > LOCAL_CHANGE => Verdict::Changed,
        (false, false) => Verdict::NotDistinguishable,
    }
}

/// The grid that two tips share.
struct Common {
    pitch: Pitch,
    /// Cells to either side of the apex, rows and columns.
    half: [usize; 2],
    resampled: bool,
}

/// A compared cell.
struct Cell {
    at: (usize, usize),
    /// Height difference, nm.
    height: f64,
    /// Difference along the normal, nm, and its standard uncertainty.
    normal: f64,
    u: f64,
}

impl Common {
    fn of(a: &Tip, b: &Tip) -> Self {
        let (p, q) = (a.pitch(), b.pitch());
        let same = p.agrees_with(q);
        let pitch = if same {
            p
        } else {
            Pitch {
                x: p.x.max(q.x),
                y: p.y.max(q.y),
            }
        };
        let reach = |tip: &Tip| {
            let (rows, columns) = tip.shape().dim();
            [
                (rows / 2) as f64 * tip.pitch().y,
                (columns / 2) as f64 * tip.pitch().x,
            ]
        };
        let (ra, rb) = (reach(a), reach(b));
        let half = [0, 1].map(|k| {
            let pitch = [pitch.y, pitch.x][k];
            (ra[k].min(rb[k]) / pitch + 1e-6).floor() as usize
        });
        Self {
            pitch,
            half,
            resampled: !same,
        }
    }

    fn dim(&self) -> (usize, usize) {
        (2 * self.half[0] + 1, 2 * self.half[1] + 1)
    }

    /// Offset of a cell from the apex, nm.
    fn offset(&self, (r, c): (usize, usize)) -> [f64; 2] {
        [
            (c as f64 - self.half[1] as f64) * self.pitch.x,
            (r as f64 - self.half[0] as f64) * self.pitch.y,
        ]
    }

    /// Depths of both tips at every cell, the second one shifted.
    fn depths(&self, a: &Tip, b: &Tip, shift: [f64; 2]) -> [Array2<f64>; 2] {
        let of = |tip: &Tip, shift: [f64; 2]| {
            Array2::from_shape_fn(self.dim(), |at| {
                let [x, y] = self.offset(at);
                tip.depth_at(x - shift[0], y - shift[1])
            })
        };
        [of(a, [0.0, 0.0]), of(b, shift)]
    }

    /// Slope of the mean of both along x and y at a cell; `None` at the rim or next to the outside.
    fn slope(&self, depths: &[Array2<f64>; 2], (r, c): (usize, usize)) -> Option<[f64; 2]> {
        let mean = |i: usize, j: usize| {
            let at = [i, j];
            Some(0.5 * (depths[0].get(at)? + depths[1].get(at)?)).filter(|z| z.is_finite())
        };
        let x = (mean(r, c + 1)? - mean(r, c.checked_sub(1)?)?) / (2.0 * self.pitch.x);
        let y = (mean(r + 1, c)? - mean(r.checked_sub(1)?, c)?) / (2.0 * self.pitch.y);
        Some([x, y])
    }

    fn cells(&self, first: &Side, second: &Side, shift: [f64; 2], depth: f64) -> Vec<Cell> {
        let depths = self.depths(first.tip, second.tip, shift);
        let mut cells = Vec::new();
        for ((at, a), b) in depths[0].indexed_iter().zip(&depths[1]) {
            if !(0.5 * (a + b) <= depth) {
                continue;
            }
            let Some([sx, sy]) = self.slope(&depths, at) else {
                continue;
            };
            let [x, y] = self.offset(at);
            let u = u_at(first, x, y).hypot(u_at(second, x - shift[0], y - shift[1]));
            if !u.is_finite() {
                continue;
            }
            let stretch = (1.0 + sx * sx + sy * sy).sqrt();
            cells.push(Cell {
                at,
                height: a - b,
                normal: (a - b) / stretch,
                u: u / stretch,
            });
        }
        cells
    }

    /// A least-squares step of the second tip's shift.
    fn shift_step(&self, a: &Tip, b: &Tip, shift: [f64; 2], depth: f64) -> Result<[f64; 2]> {
        let depths = self.depths(a, b, shift);
        let mut fit = least_squares::Accumulator::new(2);
        for ((at, za), zb) in depths[0].indexed_iter().zip(&depths[1]) {
            if !(0.5 * (za + zb) <= depth) {
                continue;
            }
            if let Some([sx, sy]) = self.slope(&depths, at) {
                // A shift by s changes the second tip's depth by -slope s.
                fit.add(&[sx, sy], zb - za, 1.0 / (1.0 + sx * sx + sy * sy));
            }
        }
        let step = fit.solve()?.coefficients;
        // No farther than a pixel at once.
        let limit = |s: f64, pitch: f64| s.clamp(-pitch, pitch);
        Ok([limit(step[0], self.pitch.x), limit(step[1], self.pitch.y)])
    }
}

/// Standard uncertainty of a tip's height at a place: a quarter of the band there, infinite where
/// the band is open; without a band that of all heights.
fn u_at(side: &Side, x: f64, y: f64) -> f64 {
    match side.band {
        Some(band) => {
            let width = band.sharper.depth_at(x, y) - band.blunter.depth_at(x, y);
            if width.is_finite() {
                0.25 * width.abs()
            } else {
                f64::INFINITY
            }
        }
        None => side.height_u_nm.max(0.0),
    }
}

#[cfg(test)]
mod tests;
