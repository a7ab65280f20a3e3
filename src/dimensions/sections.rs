//! A region as cross-sections over lines or steps: orientation, the edges in it, and where each
//! cross-section crosses them.

use super::statistics::{self, Level};
use super::{Axis, Input, Request};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, PixelRegion};
use ndarray::{ArrayView2, s};

/// How a region is cut into cross-sections.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Frame {
    /// Pixels of the region.
    pub pixels: PixelRegion,
    /// Which way the cross-sections run.
    pub axis: Axis,
    /// Pixel pitch along a cross-section, nm.
    pub pitch: f64,
    /// Distance between neighbouring cross-sections, nm.
    pub spacing: f64,
    /// Position of the first pixel centre of a cross-section on the map, nm.
    pub start: f64,
    /// Position of the first cross-section on the map, nm.
    pub first: f64,
    /// White noise, nm; measured where it was not given.
    pub noise: f64,
}

impl Frame {
    /// The cross-sections of the request's region on the scan.
    pub fn new(input: &Input, request: &Request) -> Result<Self> {
        let map = input.scan;
        let pixels = region_pixels(map, request)?;
        let view = cut(map, pixels);
        let axis = request.across.unwrap_or_else(|| main_axis(view));
        let pitch = map.pitch();
        let at = |index: usize, pitch: f64| (index as f64 + 0.5) * pitch;
        let (x, y) = (at(pixels.column, pitch.x), at(pixels.row, pitch.y));
        let (pitch, spacing, start, first) = match axis {
            Axis::X => (pitch.x, pitch.y, x, y),
            Axis::Y => (pitch.y, pitch.x, y, x),
        };
        Ok(Self {
            pixels,
            axis,
            pitch,
            spacing,
            start,
            first,
            noise: noise(input, pixels),
        })
    }

    /// The same cut through another map of the same size: `[cross-section, pixel along it]`.
    pub fn of<'a>(&self, map: &'a HeightMap) -> ArrayView2<'a, f32> {
        self.of_array(map.heights())
    }

    /// The same cut through an array that belongs to the map.
    pub fn of_array<'a, T>(&self, array: ArrayView2<'a, T>) -> ArrayView2<'a, T> {
        let view = cut_array(array, self.pixels);
        match self.axis {
            Axis::X => view,
            Axis::Y => view.reversed_axes(),
        }
    }

    /// Map position in nm of pixel coordinate `along` on cross-section `section`.
    pub fn point(&self, section: f64, along: f64) -> [f64; 2] {
        let a = self.start + along * self.pitch;
        let b = self.first + section * self.spacing;
        match self.axis {
            Axis::X => [a, b],
            Axis::Y => [b, a],
        }
    }

    /// A segment between two such points, for drawing.
    pub fn segment(&self, from: (f64, f64), to: (f64, f64)) -> [f64; 4] {
        let ([x1, y1], [x2, y2]) = (self.point(from.0, from.1), self.point(to.0, to.1));
        [x1, y1, x2, y2]
    }
}

/// The request's pixels on `map`; the whole of it when no region was given.
pub(super) fn region_pixels(map: &HeightMap, request: &Request) -> Result<PixelRegion> {
    request.region.unwrap_or_else(|| map.whole()).pixels(map)
}

/// The region's heights.
pub(super) fn cut(map: &HeightMap, pixels: PixelRegion) -> ArrayView2<'_, f32> {
    cut_array(map.heights(), pixels)
}

fn cut_array<T>(array: ArrayView2<'_, T>, p: PixelRegion) -> ArrayView2<'_, T> {
    array.slice_move(s![p.row..p.row + p.rows, p.column..p.column + p.columns])
}

/// The noise given, or measured in the region along the fast axis; 0 where neither can be had.
pub(super) fn noise(input: &Input, pixels: PixelRegion) -> f64 {
    input
        .noise_nm
        .filter(|s| s.is_finite() && *s >= 0.0)
        .or_else(|| statistics::noise_along_rows(cut(input.scan, pixels)))
        .unwrap_or(0.0)
}

/// Errors unless the corrected maps have the scan's size.
pub(super) fn check_sizes(input: &Input) -> Result<()> {
    let Some(corrected) = input.corrected else {
        return Ok(());
    };
    let size = input.scan.heights().dim();
    let sizes = [
        Some(corrected.surface.heights().dim()),
        corrected.surface_upper.map(|m| m.heights().dim()),
        corrected.surface_lower.map(|m| m.heights().dim()),
        Some(corrected.certainty.dim()),
        Some(corrected.edge_leaning.dim()),
    ];
    match sizes.into_iter().flatten().find(|&other| other != size) {
        None => Ok(()),
        Some(other) => Err(Error::new(
            ErrorKind::Data,
            format!("the corrected map has {other:?} pixels, the scan {size:?}"),
        )
        .remedy("Reconstruct the surface from this very scan")),
    }
}

/// The axis across which the heights vary more, tilt apart.
fn main_axis(view: ArrayView2<f32>) -> Axis {
    let variation = |profile: Vec<f64>| {
        let x: Vec<f64> = (0..profile.len()).map(|i| i as f64).collect();
        let (slope, offset) = statistics::line(&x, &profile).unwrap_or((0.0, 0.0));
        let squares: Vec<f64> = x
            .iter()
            .zip(&profile)
            .map(|(x, z)| (z - slope * x - offset).powi(2))
            .collect();
        statistics::mean(&squares)
    };
    let average = |lane: ndarray::ArrayView1<f32>| {
        statistics::mean(&lane.iter().map(|&z| f64::from(z)).collect::<Vec<_>>())
    };
    let along_x = variation(view.columns().into_iter().map(average).collect());
    let along_y = variation(view.rows().into_iter().map(average).collect());
    // A NaN (everything void) compares false: x.
    if along_y > along_x { Axis::Y } else { Axis::X }
}

/// One edge of the layout.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Edge {
    /// Where the central cross-sections cross the middle height, pixels.
    pub at: f64,
    /// Whether the heights rise with the position.
    pub rising: bool,
}

/// What stands in a region of two levels.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Layout {
    /// Median profile of the central cross-sections, voids bridged.
    pub profile: Vec<f64>,
    /// Edges in order of position, rising and falling by turns.
    pub edges: Vec<Edge>,
    /// The lower level.
    pub low: Level,
    /// The upper level.
    pub high: Level,
}

impl Layout {
    /// The two levels and the edges between them, or why there are none.
    pub fn find(sections: ArrayView2<f32>, noise: f64) -> std::result::Result<Self, String> {
        let profile = central_profile(sections).ok_or_else(|| "the region is void".to_owned())?;
        let every = (sections.len() / 40_000).max(1);
        let mut heights: Vec<f64> = sections
            .iter()
            .step_by(every | 1)
            .map(|&z| f64::from(z))
            .filter(|z| z.is_finite())
            .collect();
        let flat = || "the region is flat: no edge in it".to_owned();
        let threshold = statistics::two_class_threshold(&heights).ok_or_else(flat)?;
        let (mut below, mut above): (Vec<f64>, Vec<f64>) =
            heights.drain(..).partition(|&z| z < threshold);
        let low = statistics::level(&mut below, noise).ok_or_else(flat)?;
        let high = statistics::level(&mut above, noise).ok_or_else(flat)?;
        if high.value - low.value < 4.0 * noise {
            return Err(format!(
                "no two levels stand out from the noise of {noise:.3} nm"
            ));
        }
        let edges = edges_of(&profile, low.value, high.value);
        if edges.is_empty() {
            return Err("no edge runs through the middle of the region".to_owned());
        }
        Ok(Self {
            profile,
            edges,
            low,
            high,
        })
    }

    /// Height between the levels, nm.
    pub fn height(&self) -> f64 {
        self.high.value - self.low.value
    }

    /// The pair of neighbouring edges whose middle is nearest to the region's middle:
    /// index of its first edge. `None` with a single edge.
    pub fn central_pair(&self) -> Option<usize> {
        let middle = (self.profile.len() as f64 - 1.0) / 2.0;
        let off = |i: usize| ((self.edges[i].at + self.edges[i + 1].at) / 2.0 - middle).abs();
        (0..self.edges.len().saturating_sub(1)).min_by(|&i, &j| off(i).total_cmp(&off(j)))
    }

    /// How far edge `i` may be looked for: half way to its neighbours, in pixels to each side.
    pub fn reach(&self, i: usize) -> (f64, f64) {
        let at = self.edges[i].at;
        let last = self.profile.len() as f64 - 1.0;
        let before = if i == 0 {
            at
        } else {
            (at - self.edges[i - 1].at) / 2.0
        };
        let after = match self.edges.get(i + 1) {
            Some(next) => (next.at - at) / 2.0,
            None => last - at,
        };
        (before, after)
    }
}

/// Median over up to 15 cross-sections about the middle one, voids bridged by straight lines.
fn central_profile(sections: ArrayView2<f32>) -> Option<Vec<f64>> {
    let count = sections.nrows();
    let take = count.min(15);
    let first = (count - take) / 2;
    let middle = sections.slice(s![first..first + take, ..]);
    let mut profile: Vec<f64> = middle
        .columns()
        .into_iter()
        .map(|column| {
            let mut values = column.iter().map(|&z| f64::from(z)).collect();
            statistics::median(&mut values).unwrap_or(f64::NAN)
        })
        .collect();
    bridge(&mut profile).then_some(profile)
}

/// Fills NaN by straight lines between neighbours, flat at the ends; false when all is NaN.
fn bridge(values: &mut [f64]) -> bool {
    let known: Vec<usize> = (0..values.len())
        .filter(|&i| values[i].is_finite())
        .collect();
    let (Some(&first), Some(&last)) = (known.first(), known.last()) else {
        return false;
    };
    let (head, tail) = (values[first], values[last]);
    values[..first].fill(head);
    values[last + 1..].fill(tail);
    for pair in known.windows(2) {
        let (a, b) = (pair[0], pair[1]);
        let (za, zb) = (values[a], values[b]);
        for (i, value) in values.iter_mut().enumerate().take(b).skip(a + 1) {
            *value = za + (zb - za) * (i - a) as f64 / (b - a) as f64;
        }
    }
    true
}

/// Crossings of the middle height; each must pass from beyond 35 % to beyond 65 % to count.
fn edges_of(profile: &[f64], low: f64, high: f64) -> Vec<Edge> {
    let at = |f: f64| low + f * (high - low);
    let middle = at(0.5);
    let mut edges = Vec::new();
    let mut up: Option<bool> = None;
    let mut crossing = 0.0;
    for (i, &z) in profile.iter().enumerate() {
        if i > 0 {
            let before = profile[i - 1];
            if (before < middle) != (z < middle) {
                crossing = (i - 1) as f64 + (middle - before) / (z - before);
            }
        }
        let now = if z >= at(0.65) {
            true
        } else if z <= at(0.35) {
            false
        } else {
            continue;
        };
        if up == Some(!now) {
            edges.push(Edge {
                at: crossing,
                rising: now,
            });
        }
        up = Some(now);
    }
    edges
}

/// Where each cross-section crosses `level` at one edge, pixels, NaN where it does not: followed
/// from the middle cross-section outwards, so that a line askew to the scan is kept.
pub(super) fn follow(
    sections: ArrayView2<f32>,
    edge: Edge,
    reach: (f64, f64),
    level: f64,
) -> Vec<f64> {
    let count = sections.nrows();
    let mut found = vec![f64::NAN; count];
    let start = count / 2;
    let walk = |found: &mut Vec<f64>, order: &mut dyn Iterator<Item = usize>| {
        let mut expected = edge.at;
        for i in order {
            let row = sections.row(i);
            // What lies half way to the next edge moves along with the line.
            let window = (expected - reach.0, expected + reach.1);
            if let Some(at) = nearest_crossing(row, level, edge.rising, expected, window) {
                found[i] = at;
                expected += 0.2 * (at - expected);
            }
        }
    };
    walk(&mut found, &mut (start..count));
    walk(&mut found, &mut (0..start).rev());
    found
}

/// The crossing of `level` in the wanted direction nearest to `expected`, by linear interpolation.
fn nearest_crossing(
    row: ndarray::ArrayView1<f32>,
    level: f64,
    rising: bool,
    expected: f64,
    window: (f64, f64),
) -> Option<f64> {
    let last = row.len().saturating_sub(1);
    let from = window.0.floor().max(0.0) as usize;
    let to = (window.1.ceil().max(0.0) as usize).min(last);
    let mut best: Option<f64> = None;
    for i in from..to {
        let (a, b) = (f64::from(row[i]), f64::from(row[i + 1]));
        let crosses = if rising {
            a < level && b >= level
        } else {
            a >= level && b < level
        };
        if crosses {
            let at = i as f64 + (level - a) / (b - a);
            if best.is_none_or(|old| (at - expected).abs() < (old - expected).abs()) {
                best = Some(at);
            }
        }
    }
    best
}

/// Where the cross-section `row` crosses `level`, looked for from its middle crossing `middle`
/// outwards: the mean of the first and the last crossing within `window`, so that noise on a
/// shallow wall shifts it neither way. `None` where it never does or a void lies between.
pub(super) fn crossing_from(
    row: ndarray::ArrayView1<f32>,
    level: f64,
    rising: bool,
    middle: f64,
    upwards: bool,
    window: (f64, f64),
    noise: f64,
) -> Option<f64> {
    let last = row.len() as isize - 1;
    let step: isize = if upwards == rising { 1 } else { -1 };
    // Start one pixel behind, so that a level just past the middle is not overlooked.
    let mut i = if step > 0 {
        middle.floor() as isize
    } else {
        middle.ceil() as isize
    };
    i -= step;
    let inside =
        |i: isize| i >= 0 && i <= last && i as f64 >= window.0 - 1.0 && i as f64 <= window.1 + 1.0;
    if !inside(i) {
        i += step;
    }
    let (mut first, mut at_last): (Option<f64>, f64) = (None, 0.0);
    while inside(i) && inside(i + step) {
        let (a, b) = (
            f64::from(row[i as usize]),
            f64::from(row[(i + step) as usize]),
        );
        if a.is_nan() || b.is_nan() {
            break;
        }
        if (a < level) != (b < level) {
            at_last = i as f64 + step as f64 * (level - a) / (b - a);
            first.get_or_insert(at_last);
        }
        let beyond = if upwards { b - level } else { level - b };
        if first.is_some() && beyond > 4.0 * noise {
            break;
        }
        i += step;
    }
    first.map(|first| 0.5 * (first + at_last))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;

    fn ridge(skew: f64) -> HeightMap {
        // Walls of slope 2 from 20 + skew y to 60 + skew y at mid-height, 10 nm high.
        HeightMap::from_fn(40, 100, Pitch::square(1.0), |x, y| {
            let c = 40.0 + skew * (y - 20.0);
            (5.0 + 2.0 * (20.0 - (x - c).abs())).clamp(0.0, 10.0)
        })
        .unwrap()
    }

    #[test]
    fn the_edges_of_a_ridge_are_found_and_followed() {
        let map = ridge(0.3);
        let layout = Layout::find(map.heights(), 0.0).unwrap();
        assert_eq!(layout.edges.len(), 2);
        assert!((layout.height() - 10.0).abs() < 1e-6);
        assert!(layout.edges[0].rising && !layout.edges[1].rising);
        let left = follow(map.heights(), layout.edges[0], layout.reach(0), 5.0);
        for (row, at) in left.iter().enumerate() {
            // Pixel coordinate i is at i + 0.5 nm.
            let truth = 20.0 + 0.3 * (row as f64 + 0.5 - 20.0) - 0.5;
            assert!((at - truth).abs() < 1e-4, "{row}: {at} {truth}");
        }
    }

    #[test]
    fn levels_above_and_below_the_middle_are_crossed_in_order() {
        let map = ridge(0.0);
        let row = map.heights().row(3).to_owned();
        for (level, upwards) in [(9.0, true), (1.0, false), (5.2, true)] {
            let at = crossing_from(row.view(), level, true, 19.5, upwards, (0.0, 39.5), 0.0);
            let truth = 20.0 + (level - 5.0) / 2.0 - 0.5;
            assert!((at.unwrap() - truth).abs() < 1e-4, "{level} {at:?}");
        }
    }

    #[test]
    fn flat_and_void_regions_say_so() {
        let flat = HeightMap::from_fn(5, 5, Pitch::square(1.0), |_, _| 1.0).unwrap();
        assert!(
            Layout::find(flat.heights(), 0.1)
                .unwrap_err()
                .contains("flat")
        );
        let void = HeightMap::from_fn(5, 5, Pitch::square(1.0), |_, _| f64::NAN).unwrap();
        assert!(
            Layout::find(void.heights(), 0.1)
                .unwrap_err()
                .contains("void")
        );
    }

    #[test]
    fn the_axis_is_found_in_spite_of_tilt() {
        let map = HeightMap::from_fn(60, 60, Pitch::square(1.0), |x, y| {
            0.5 * x + if (20.0..40.0).contains(&y) { 5.0 } else { 0.0 }
        })
        .unwrap();
        assert_eq!(main_axis(map.heights()), Axis::Y);
    }
}
