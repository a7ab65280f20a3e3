//! The two walls of a ridge or a trench, section by section, on the scan and on the corrected maps.

use super::sections::{self, Frame, Layout};
use super::statistics::{self, Level};
use super::wall::{Outline, Wall};
use super::{Axis, Corrected, Dimension, Input, Request};
use crate::error::Result;
use crate::heightmap::HeightMap;
use crate::uncertainty::{Pooled, Series};
use ndarray::ArrayView2;

/// Sections used for the mean course of a wall; the widths use all.
const CURVE_SECTIONS: usize = 200;

/// The region's central ridge or trench.
pub(super) struct Feature<'a> {
    pub frame: Frame,
    pub layout: Layout,
    /// Off the levelled scan.
    pub scan: Trace,
    /// Off the corrected maps; `None` without a correction, or where the edges are lost in it.
    pub correction: Option<Correction<'a>>,
}

impl<'a> Feature<'a> {
    /// The feature's edges at the height `fractions`, or the reason why there are none.
    ///
    /// Errors of kind `Setting`: a region off the scan.
    pub fn find(
        input: &Input<'a>,
        request: &Request,
        fractions: &[f64],
    ) -> Result<std::result::Result<Self, String>> {
        let frame = Frame::new(input, request)?;
        Ok(Self::of(input, frame, fractions))
    }

    fn of(input: &Input<'a>, frame: Frame, fractions: &[f64]) -> std::result::Result<Self, String> {
        let layout = Layout::find(frame.of(input.scan), frame.noise)?;
        let first = layout
            .central_pair()
            .ok_or("the region holds one edge only, a width needs two")?;
        let trace = |map: &HeightMap| Trace::take(map, &frame, &layout, first, fractions);
        let scan =
            trace(input.scan).ok_or("the two edges cannot be followed through the region")?;
        let correction = input.corrected.and_then(|c| {
            Some(Correction {
                surface: trace(c.surface)?,
                upper: c.surface_upper.and_then(trace),
                lower: c.surface_lower.and_then(trace),
                outlines: outlines(&c, frame.axis, scan.ridge),
                given: c,
            })
        });
        Ok(Self {
            frame,
            layout,
            scan,
            correction,
        })
    }
}

/// Says why a line that could be measured on the scan only has no corrected value.
pub(super) fn flag_lost(line: &mut Dimension, input: &Input) {
    if input.corrected.is_some() {
        line.flags
            .push("no corrected value: the edges are lost in the reconstructed surface".to_owned());
    }
}

/// Everything taken from the corrected maps.
pub(super) struct Correction<'a> {
    pub surface: Trace,
    pub upper: Option<Trace>,
    pub lower: Option<Trace>,
    /// Tip outlines that meet the left and the right wall.
    pub outlines: [Outline; 2],
    pub given: Corrected<'a>,
}

fn outlines(corrected: &Corrected, axis: Axis, ridge: bool) -> [Outline; 2] {
    // The left wall of a ridge falls to the left; that of a trench to the right.
    [!ridge, ridge].map(|positive| Outline::of(corrected.tip, axis, positive))
}

/// One map's two edges, section by section.
pub(super) struct Trace {
    pub ridge: bool,
    /// Step between the plateaus, nm.
    pub height: f64,
    /// Heights of the lower and the upper plateau, nm.
    pub levels: [f64; 2],
    /// Standard uncertainty of a threshold's height, nm.
    pub level_u: f64,
    /// Heights of the plateaus left and right of the feature differ by this much, nm.
    pub imbalance: f64,
    /// Cosine of the angle between the line's normal and the cross-sections.
    pub cosine: f64,
    /// `[fraction][section]`: left and right edge, pixels.
    pub edges: Vec<[Vec<f64>; 2]>,
    /// Mean course of the left and the right wall.
    pub walls: [Wall; 2],
    pub pitch: f64,
}

impl Trace {
    fn take(
        map: &HeightMap,
        frame: &Frame,
        layout: &Layout,
        first: usize,
        fractions: &[f64],
    ) -> Option<Self> {
        let sections = frame.of(map);
        let ridge = layout.edges[first].rising;
        let reach = [layout.reach(first), layout.reach(first + 1)];
        let middle_of = |level: f64| {
            [0, 1].map(|k| sections::follow(sections, layout.edges[first + k], reach[k], level))
        };
        let rough = middle_of(layout.low.value + 0.5 * layout.height());
        let plateaus = Plateaus::of(sections, &rough, reach, frame.noise)?;
        let (low, high) = plateaus.low_high(ridge);
        let height = high.value - low.value;
        if height.is_nan() || height <= 0.0 {
            return None;
        }
        let middle = middle_of(low.value + 0.5 * height);
        let tangent = slope_over_sections(&middle) * frame.pitch / frame.spacing;
        let cosine = 1.0 / tangent.hypot(1.0);
        let crossing = |f: f64, section: usize, k: usize| {
            let at = middle[k][section];
            let rising = layout.edges[first + k].rising;
            let window = (at - reach[k].0, at + reach[k].1);
            let level = low.value + f * height;
            let row = sections.row(section);
            if at.is_nan() {
                return f64::NAN;
            }
            sections::crossing_from(row, level, rising, at, f >= 0.5, window, frame.noise)
                .unwrap_or(f64::NAN)
        };
        let count = sections.nrows();
        let edges: Vec<[Vec<f64>; 2]> = fractions
            .iter()
            .map(|&f| [0, 1].map(|k| (0..count).map(|i| crossing(f, i, k)).collect()))
            .collect();
        if edges
            .iter()
            .all(|pair| pair[0].iter().zip(&pair[1]).all(|(a, b)| (a - b).is_nan()))
        {
            return None;
        }
        let every = count.div_ceil(CURVE_SECTIONS);
        let walls = [0, 1].map(|k| {
            let outward = if layout.edges[first + k].rising {
                -1.0
            } else {
                1.0
            };
            let grid: Vec<f64> = (1..50).map(|i| f64::from(i) * 0.02).collect();
            let mut u = Vec::with_capacity(grid.len());
            let outwards = grid
                .iter()
                .map(|&f| {
                    // Relative to the middle, so that edge roughness cancels.
                    let off: Vec<f64> = (0..count)
                        .step_by(every)
                        .map(|i| crossing(f, i, k) - middle[k][i])
                        .collect();
                    let kept = statistics::clipped(&off, 4.0);
                    let n = kept.iter().filter(|v| v.is_finite()).count();
                    let scatter = statistics::robust_deviation(&kept).unwrap_or(0.0);
                    u.push(scatter / (n.max(1) as f64).sqrt() * frame.pitch);
                    if 2 * n < off.len() {
                        return f64::NAN;
                    }
                    outward * statistics::mean(&kept) * frame.pitch * cosine
                })
                .collect();
            Wall {
                fractions: grid,
                outwards,
                height,
                u,
                noise: frame.noise,
            }
        });
        Some(Self {
            ridge,
            height,
            levels: [low.value, high.value],
            level_u: plateaus.u(ridge),
            imbalance: plateaus.imbalance(),
            cosine,
            edges,
            walls,
            pitch: frame.pitch,
        })
    }

    /// Widths at one fraction, section by section, nm; outliers beyond four robust deviations and
    /// sections without both edges are NaN.
    pub fn widths(&self, i: usize) -> Vec<f64> {
        let [left, right] = &self.edges[i];
        let widths: Vec<f64> = left
            .iter()
            .zip(right)
            .map(|(a, b)| (b - a) * self.pitch * self.cosine)
            .collect();
        statistics::clipped(&widths, 4.0)
    }

    /// Mean width at one fraction, nm.
    pub fn width(&self, i: usize) -> Option<Series> {
        Series::of(&self.widths(i))
    }

    /// Standard uncertainty of the mean width at fraction number `i` by what varies along the line,
    /// nm, and its degrees of freedom. `series` is the widths'.
    ///
    /// Both edges tell how many independent pieces of line the region holds, and steadier than the
    /// widths alone, which in a short region take few pieces for many. Where the edges move
    /// together or against each other (drift) the widths' own scatter counts.
    pub fn repeatability(&self, i: usize, series: &Series) -> (f64, Option<f64>) {
        let own = (series.standard_error(), series.degrees_of_freedom());
        let edges = &self.edges[i];
        let less = |slope: f64| {
            let parts = [0, 1].map(|k| {
                let off: Vec<f64> = edges[k]
                    .iter()
                    .enumerate()
                    .map(|(section, at)| (at - slope * section as f64) * self.pitch * self.cosine)
                    .collect();
                statistics::clipped(&off, 5.0)
            });
            Pooled::of(&parts)
        };
        let slope = slope_over_sections(edges);
        let (Some(straight), Some(widths)) = (less(slope), Pooled::of(&[self.widths(i)])) else {
            return own;
        };
        // A line that runs askew is straightened; a slope that its roughness may well have is
        // part of the roughness.
        let span = slope.abs() * edges[0].len() as f64 * self.pitch;
        let usual = (12.0 * straight.variance / straight.effective()).sqrt();
        let both = if span < 3.0 * usual {
            less(0.0).unwrap_or(straight)
        } else {
            straight
        };
        // Correlation of the two edges' outward movements, against what chance gives it.
        let together = widths.variance / (2.0 * both.variance) - 1.0;
        if together.is_nan() || together.abs() > 2.0 / both.effective().sqrt() {
            return own;
        }
        (
            (2.0 * both.of_mean).sqrt(),
            Some((both.effective() - 1.0).max(1.0)),
        )
    }

    /// Standard uncertainty by the pixels of the mean place of wall `k` at fraction number `i`, nm,
    /// `effective` independent sections taken.
    ///
    /// One pixel's worth where the wall is a jump; interpolation over a wall of several pixels
    /// leaves the square of that less, never below a fortieth of a pixel; edges that wander over
    /// the grid average it out. Chosen on virtual scans (examples/dimension_validation.rs).
    pub fn pixel_u(&self, i: usize, k: usize, fraction: f64, effective: f64) -> f64 {
        let span = self.walls[k].slope(fraction) * 0.25 * self.height / self.pitch;
        let span = if span.is_finite() { span.max(1.0) } else { 1.0 };
        let wander = statistics::robust_deviation(&self.edges[i][k]).unwrap_or(0.0);
        let average = if wander > 0.3 { effective.sqrt() } else { 1.0 };
        (self.pitch / 12f64.sqrt() / (span * span)).max(self.pitch / 40.0) / average
    }

    pub fn marks(&self, frame: &Frame, i: usize) -> Vec<[f64; 4]> {
        let [left, right] = &self.edges[i];
        let sections: Vec<f64> = (0..left.len()).map(|s| s as f64).collect();
        let last = sections.len() as f64 - 1.0;
        let fit = |edge: &[f64]| {
            statistics::line(&sections, edge).unwrap_or((0.0, statistics::mean(edge)))
        };
        let (a, b) = (fit(left), fit(right));
        let at = |line: (f64, f64), s: f64| line.1 + line.0 * s;
        let marks = [
            frame.segment((0.0, at(a, 0.0)), (last, at(a, last))),
            frame.segment((0.0, at(b, 0.0)), (last, at(b, last))),
            frame.segment(
                (last / 2.0, at(a, last / 2.0)),
                (last / 2.0, at(b, last / 2.0)),
            ),
        ];
        marks
            .into_iter()
            .filter(|m| m.iter().all(|v| v.is_finite()))
            .collect()
    }
}

/// Slope of the line's middle over the sections, pixels per section.
fn slope_over_sections(middle: &[Vec<f64>; 2]) -> f64 {
    let centre: Vec<f64> = middle[0]
        .iter()
        .zip(&middle[1])
        .map(|(a, b)| (a + b) / 2.0)
        .collect();
    let sections: Vec<f64> = (0..centre.len()).map(|s| s as f64).collect();
    // Two or three sections tell no angle.
    if centre.iter().filter(|c| c.is_finite()).count() < 8 {
        return 0.0;
    }
    statistics::line(&sections, &centre).map_or(0.0, |l| l.0)
}

/// The plateaus a feature's height refers to.
struct Plateaus {
    centre: Level,
    left: Option<Level>,
    right: Option<Level>,
}

impl Plateaus {
    fn of(
        sections: ArrayView2<f32>,
        middle: &[Vec<f64>; 2],
        reach: [(f64, f64); 2],
        noise: f64,
    ) -> Option<Self> {
        let every = (sections.len() / 60_000).max(1);
        let collect = |zone: &dyn Fn(f64, f64) -> (f64, f64)| {
            let mut heights = Vec::new();
            for i in (0..sections.nrows()).step_by(every) {
                let (from, to) = zone(middle[0][i], middle[1][i]);
                // NaN makes both casts 0 and the range empty.
                let from = from.ceil().max(0.0) as usize;
                let to = ((to + 1.0).floor().max(0.0) as usize).min(sections.ncols());
                heights.extend((from..to).map(|c| f64::from(sections[[i, c]])));
            }
            statistics::level(&mut heights, noise)
        };
        // A quarter of each zone is left to the wall; the densest level forgives the rest.
        let centre = collect(&|a, b| (a + 0.25 * (b - a), b - 0.25 * (b - a)))?;
        let left = collect(&|a, _| (a - reach[0].0, a - 0.25 * reach[0].0));
        let right = collect(&|_, b| (b + 0.25 * reach[1].1, b + reach[1].1));
        (left.is_some() || right.is_some()).then_some(Self {
            centre,
            left,
            right,
        })
    }

    fn sides(&self) -> Vec<Level> {
        self.left.iter().chain(&self.right).copied().collect()
    }

    fn low_high(&self, ridge: bool) -> (Level, Level) {
        let sides = self.sides();
        let n = sides.len() as f64;
        let outer = Level {
            value: sides.iter().map(|l| l.value).sum::<f64>() / n,
            deviation: sides.iter().map(|l| l.deviation).fold(0.0, f64::max),
            count: sides.iter().map(|l| l.count).sum(),
        };
        if ridge {
            (outer, self.centre)
        } else {
            (self.centre, outer)
        }
    }

    fn imbalance(&self) -> f64 {
        match (self.left, self.right) {
            (Some(a), Some(b)) => (a.value - b.value).abs(),
            _ => 0.0,
        }
    }

    /// Standard uncertainty of a threshold between the plateaus, nm: their means (a hundredth of
    /// the pixels taken as independent) and half their imbalance as a rectangular bound.
    fn u(&self, ridge: bool) -> f64 {
        let (low, high) = self.low_high(ridge);
        let mean = |l: Level| l.deviation / (l.count as f64 / 100.0).max(1.0).sqrt();
        (0.25 * mean(low).powi(2) + 0.25 * mean(high).powi(2) + self.imbalance().powi(2) / 12.0)
            .sqrt()
    }
}
