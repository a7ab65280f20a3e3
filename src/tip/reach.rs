//! What a tip can reach of a planned feature, and the bluntest tip that still does.
//!
//! The feature's profile is scanned along one azimuth on a fine grid with the engine's own dilation.
//! Long features (trench, ridge, grating) feel the tip's silhouette, a particle its section through
//! the apex, which is exact for a round tip.

mod bluntest;
mod closed_forms;
mod feature;
mod plan;
#[cfg(test)]
mod tests;

pub use bluntest::{Bluntest, Need, bluntest};
pub use closed_forms::{groove_lost_depth, vertical_trench_reach};
pub use feature::Feature;
pub use plan::{Known, Plan, plan};

use super::Tip;
use super::model::Model;
use super::outline::{Cut, Outline};
use crate::error::{Error, ErrorKind, Result};
use crate::morphology::{self, NO_CONTACT};
use crate::progress::Progress;
use feature::part_of;
use ndarray::Array2;

/// Steps across the smallest length of the feature.
const FINE: f64 = 160.0;
/// Most samples of a profile.
const MOST_SAMPLES: f64 = 24_000.0;
/// About so many samples of a profile are drawn.
const DRAWN: usize = 600;
/// Contacts this many samples apart still follow each other.
const FOLLOWS: usize = 3;

/// What probes: a tip on a grid along an azimuth (0 = along +x, 90 = along +y), or a formula along x.
#[derive(Debug, Clone, Copy)]
pub enum Probe<'a> {
    /// A tip's grid.
    Grid(&'a Tip, f64),
    /// A formula.
    Formula(Model),
}

/// Width at a fraction of the height.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct WidthAt {
    /// Fraction of the height between the plateaus, 0 = bottom; of the image's own plateaus for the
    /// image.
    pub at: f64,
    /// Of the feature, nm.
    pub width_nm: f64,
    /// Of its image, nm.
    pub imaged_nm: f64,
}

impl WidthAt {
    /// Image minus feature, nm: positive for ridges and particles, negative for trenches.
    pub fn excess_nm(&self) -> f64 {
        self.imaged_nm - self.width_nm
    }
}

/// Parts of a feature that the tip touches, by length of its profile; `None` = has no such part.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Touched {
    /// Of the ridge's top.
    pub top: Option<f64>,
    /// Of the walls; of a particle's outline above its equator.
    pub walls: Option<f64>,
    /// Of the floor of a trench or between ridges.
    pub floor: Option<f64>,
    /// Of all these together.
    pub whole: f64,
}

/// What a tip reaches of a feature.
#[derive(Debug, Clone, PartialEq)]
pub struct Reach {
    /// Height or depth of the feature, nm.
    pub height_nm: f64,
    /// Height or depth of its image, nm: how far down the apex gets.
    pub imaged_nm: f64,
    /// Widths at the fractions asked for.
    pub widths: Vec<WidthAt>,
    /// What is touched.
    pub touched: Touched,
    /// For drawing: place, height of the feature, height of its image, nm, over the feature and
    /// about as much beside it.
    pub profile: Vec<[f64; 3]>,
}

impl Reach {
    /// Depth that the apex does not get to, nm.
    pub fn lost_nm(&self) -> f64 {
        (self.height_nm - self.imaged_nm).max(0.0)
    }

    /// Whether the apex reaches the bottom (within a thousandth of the height).
    pub fn reaches_bottom(&self) -> bool {
        self.lost_nm() <= 1e-3 * self.height_nm
    }
}

impl Probe<'_> {
    /// Half-width that a tip of this kind has at `height` from its apex, nm, at most.
    fn half_reach(&self, height: f64) -> f64 {
        match self {
            Self::Grid(tip, _) => {
                let [w, h] = tip.support_nm();
                0.5 * w.max(h)
            }
            Self::Formula(model) => {
                // Doubling, then halving: every formula rises with the distance on both sides.
                let deep = |x: f64| model.height(x, 0.0).min(model.height(-x, 0.0)) >= height;
                let mut far = 1.0;
                while !deep(far) && far < 1e9 {
                    far *= 2.0;
                }
                let mut near = 0.0;
                for _ in 0..40 {
                    let middle = 0.5 * (near + far);
                    if deep(middle) {
                        far = middle
                    } else {
                        near = middle
                    }
                }
                far
            }
        }
    }

    fn outline(&self, cut: Cut, step: f64, height: f64) -> Outline {
        match *self {
            Self::Grid(tip, azimuth) => tip.outline(cut, azimuth, step),
            Self::Formula(model) => {
                let n = (self.half_reach(height) / step).ceil() as i64 + 1;
                Outline {
                    step_nm: step,
                    // What is deeper than the feature is high touches nothing.
                    depth_nm: (-n..=n)
                        .map(|i| model.height(i as f64 * step, 0.0).min(2.0 * height))
                        .collect(),
                }
            }
        }
    }
}

/// What `probe` reaches of `feature`, with widths at the fractions `at` of the height.
///
/// Errors: kind `Setting` for lengths, angles or fractions out of range; kind `Data` where the tip's
/// grid ends before the feature's height, because what is not on the grid might touch first.
pub fn reach(probe: &Probe, feature: &Feature, at: &[f64]) -> Result<Reach> {
    let feature = feature.checked()?;
    if let Some(bad) = at.iter().find(|f| !(**f > 0.0 && **f < 1.0)) {
        return Err(
            Error::new(ErrorKind::Setting, format!("height fraction {bad}"))
                .remedy("Give fractions between 0 (bottom) and 1 (top), for example 0.5"),
        );
    }
    let height = feature.height_nm();
    let cut = match feature {
        Feature::Particle { .. } => Cut::Section,
        _ => Cut::Silhouette,
    };
    let half = feature.half_width();
    let wide = probe.half_reach(height);
    // The whole profile: the feature and what the tip needs beside it to meet the plane.
    let whole = match feature {
        Feature::Grating { pitch, .. } => 2.0 * (pitch + wide),
        _ => 2.0 * (1.5 * half + 2.0 * wide),
    };
    let fine = (half.min(height) / FINE).min(wide / FINE);
    let step = half / (half / fine.max(whole / MOST_SAMPLES)).ceil();
    let outline = probe.outline(cut, step, height);
    let known = outline.known_depth_nm();
    if known < height {
        return Err(Error::new(
            ErrorKind::Data,
            format!("the tip is known to {known:.3} nm below its apex, the feature is {height:.3} nm high"),
        )
        .remedy("Give a tip with a wider support, or plan a lower feature"));
    }
    let n = (0.5 * whole / step).ceil() as i64;
    let profile = Profile {
        step,
        surface: (-n..=n).map(|i| feature.height(i as f64 * step)).collect(),
    };
    let contacts = profile.scan(&outline)?;
    let image: Vec<f64> = contacts.heights.iter().map(|z| f64::from(*z)).collect();
    // A grating is judged on its middle period, where both neighbours are there.
    let middle = match feature {
        Feature::Grating { pitch, .. } => profile.within(0.5 * pitch),
        _ => 0..profile.surface.len(),
    };
    let (low, high) = image[middle.clone()]
        .iter()
        .fold((f64::INFINITY, 0f64), |(l, h), z| (l.min(*z), h.max(*z)));
    let imaged_nm = (high - low).max(0.0);
    let widths = at
        .iter()
        .map(|&at| WidthAt {
            at,
            width_nm: feature.width_at(at),
            imaged_nm: profile.width(&image, low + at * imaged_nm, feature.is_hollow()),
        })
        .collect();
    let shown = profile.within(match feature {
        Feature::Grating { pitch, .. } => 1.5 * pitch,
        _ => 2.0 * half + 0.5 * feature.wall().map_or(0.0, |w| w.1) + 0.25 * height,
    });
    Ok(Reach {
        profile: shown
            .clone()
            .step_by((shown.len() / DRAWN).max(1))
            .map(|i| [profile.place(i), profile.surface[i], image[i]])
            .collect(),
        height_nm: height,
        imaged_nm,
        widths,
        touched: profile.touched(&feature, &contacts, middle),
    })
}

/// A feature's profile on the fine grid, its middle in the middle.
struct Profile {
    step: f64,
    surface: Vec<f64>,
}

impl Profile {
    fn place(&self, i: usize) -> f64 {
        (i as f64 - (self.surface.len() / 2) as f64) * self.step
    }

    /// Samples within `half` of the middle.
    fn within(&self, half: f64) -> std::ops::Range<usize> {
        let middle = self.surface.len() / 2;
        let n = ((half / self.step).round() as usize).min(middle);
        middle - n..middle + n + 1
    }

    fn scan(&self, outline: &Outline) -> Result<morphology::Contacts> {
        let row = |values: &[f64], sign: f64| {
            Array2::from_shape_fn((1, values.len()), |(_, i)| (sign * values[i]) as f32)
        };
        let surface = row(&self.surface, 1.0);
        let mut tip = row(&outline.depth_nm, -1.0);
        let centre = (0, outline.depth_nm.len() / 2);
        tip[centre] = 0.0;
        morphology::contacts(surface.view(), tip.view(), &Progress::new())
    }

    /// Width of the image about its middle at a level, nm.
    fn width(&self, image: &[f64], level: f64, hollow: bool) -> f64 {
        let middle = image.len() / 2;
        let inside = |z: f64| if hollow { z < level } else { z >= level };
        if !inside(image[middle]) {
            return 0.0;
        }
        let side = |sign: isize| {
            let at = |k: usize| {
                let i = middle.checked_add_signed(sign * k as isize)?;
                image.get(i).copied()
            };
            let last = (0..=middle)
                .take_while(|&k| at(k).is_some_and(inside))
                .last();
            let last = last.unwrap_or(0);
            let part = match (at(last), at(last + 1)) {
                (Some(here), Some(next)) if here != next => (level - here) / (next - here),
                _ => 0.0,
            };
            last as f64 + part.clamp(0.0, 1.0)
        };
        (side(-1) + side(1)) * self.step
    }

    /// Contacts that follow each other without a jump sweep the surface between them.
    fn touched(
        &self,
        feature: &Feature,
        contacts: &morphology::Contacts,
        within: std::ops::Range<usize>,
    ) -> Touched {
        let count = self.surface.len();
        let mut swept = vec![false; count];
        let mut before: Option<usize> = None;
        for (i, offset) in contacts.offsets.iter().enumerate() {
            let here = (*offset != NO_CONTACT)
                .then(|| i.checked_add_signed(isize::from(offset[1])))
                .flatten();
            if let (Some(a), Some(b)) = (before, here)
                && a.abs_diff(b) <= FOLLOWS
            {
                // Entry k is the stretch from sample k to k + 1.
                swept[a.min(b)..a.max(b)].fill(true);
            }
            before = here;
        }
        let height = feature.height_nm();
        let mut parts = [[0.0; 2]; 3];
        let stretches = swept.iter().enumerate();
        for (k, swept) in stretches.take(within.end - 1).skip(within.start) {
            let (a, b) = (self.surface[k], self.surface[k + 1]);
            let Some(part) = part_of(feature, self.place(k) + 0.5 * self.step, [a, b], height)
            else {
                continue;
            };
            let length = self.step.hypot(b - a);
            parts[part][0] += length;
            if *swept {
                parts[part][1] += length;
            }
        }
        let share = |[all, seen]: [f64; 2]| (all > 0.0).then(|| seen / all);
        let sum = |k: usize| parts.iter().map(|p| p[k]).sum::<f64>();
        Touched {
            top: share(parts[0]),
            walls: share(parts[1]),
            floor: share(parts[2]),
            whole: share([sum(0), sum(1)]).unwrap_or(0.0),
        }
    }
}
