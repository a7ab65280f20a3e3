//! Hole depth: of a pit or a trench below the plateau around it, and whether the tip got to its
//! floor.
//!
//! Heights that the tip's apex touched are not changed by it. Where the tip is stopped by the
//! walls before it meets the floor, the scan comes to a point there: the depth is a lower bound.

use super::sections::{self, region_pixels};
use super::segmentation::{self, Segment};
use super::statistics::{self, Level};
use super::{CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer};
use crate::error::Result;
use crate::heightmap::{Pitch, PixelRegion};
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series};
use ndarray::{Array2, ArrayView2, s};

const ASSUMPTIONS: &str = "Densest level of the surrounding plateau less densest level of the \
    floor; the floor counts as reached only where the scan is flat over the middle of the hole, \
    otherwise the depth is at least the one seen. Two levels: common practice; touched heights \
    not changed by the tip: J. S. Villarrubia, J. Res. NIST 102, 425 (1997), from memory";

/// Smallest hole, pixels.
const FEWEST: usize = 12;
/// Width of the rim that is left out of the plateau, pixels.
const RIM: usize = 4;
/// Half the width of the middle of the hole that must be flat, pixels.
const MIDDLE: f64 = 2.0;

/// Measures the depth of the most central hole of the region: one line.
///
/// Errors of kind `Setting`: a region off the scan.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let pixels = region_pixels(input.scan, request)?;
    let view = sections::cut(input.scan, pixels);
    let noise = sections::noise(input, pixels);
    let mut line = answer(request, Kind::HoleDepth, "hole depth", "nm", ASSUMPTIONS);
    match Hole::find(view, noise) {
        Ok(hole) => {
            progress.check()?;
            fill(&mut line, input, &hole, noise);
            line.marks = hole.marks(pixels, input.scan.pitch());
        }
        Err(reason) => line.flags.push(format!("not measured: {reason}")),
    }
    Ok(vec![line])
}

/// One hole on the scan.
struct Hole {
    plateau: Level,
    /// The floor; without one the lowest place that the tip got to.
    floor: Level,
    reached: bool,
    /// How much the middle rises over [`MIDDLE`] pixels, nm, and the least that would be seen.
    rise: [f64; 2],
    trench: bool,
    /// Standard deviation of the plateau's level among the quarters of the region, nm.
    unevenness: f64,
    /// Holes in the region.
    count: usize,
    cut_off: bool,
    segment: Segment,
}

impl Hole {
    fn find(view: ArrayView2<f32>, noise: f64) -> std::result::Result<Self, String> {
        let heights: Vec<f64> = view
            .iter()
            .map(|&z| f64::from(z))
            .filter(|z| z.is_finite())
            .collect();
        if heights.is_empty() {
            return Err("the region is void".to_owned());
        }
        let flat = || "the region is flat: no hole in it".to_owned();
        let threshold = statistics::two_class_threshold(&heights).ok_or_else(flat)?;
        let mut above: Vec<f64> = heights.into_iter().filter(|z| *z >= threshold).collect();
        let rough = statistics::level(&mut above, noise).ok_or_else(flat)?;
        let step = (8.0 * noise).max(4.0 * rough.deviation);
        // Rounded rims are no plateau.
        let rim = depth_in(view.mapv(|z| f64::from(z) > rough.value - step));
        let clear = |r: std::ops::Range<usize>, c: std::ops::Range<usize>| {
            let part = s![r, c];
            let mut heights: Vec<f64> = view
                .slice(part)
                .iter()
                .zip(rim.slice(part))
                .filter(|(_, d)| **d > RIM)
                .map(|(z, _)| f64::from(*z))
                .collect();
            statistics::level(&mut heights, noise)
        };
        let (rows, columns) = view.dim();
        let plateau = clear(0..rows, 0..columns).unwrap_or(rough);
        let quarters: Vec<f64> = [(0..rows / 2), (rows / 2..rows)]
            .into_iter()
            .flat_map(|r| [(r.clone(), 0..columns / 2), (r, columns / 2..columns)])
            .filter_map(|(r, c)| clear(r, c).filter(|l| l.count >= 50))
            .map(|l| l.value)
            .collect();
        let unevenness = Series::of(&quarters).map_or(0.0, |s| s.deviation);
        let upside_down = view.mapv(|z| -z);
        let rise = |top: f64| (6.0 * noise).max(0.15 * (top + plateau.value));
        let all = segmentation::segments(upside_down.view(), step - plateau.value, FEWEST, rise);
        let depth_at = |s: &Segment| plateau.value - f64::from(view[s.peak]);
        let deepest = all.iter().map(depth_at).fold(0.0, f64::max);
        if deepest < (10.0 * noise).max(1e-9) {
            return Err(format!(
                "no hole stands out: the deepest place is {deepest:.2} nm below the plateau"
            ));
        }
        let centre = |s: &Segment| {
            let n = s.pixels.len() as f64;
            let mean = |i: usize| s.pixels.iter().map(|p| p[i] as f64).sum::<f64>() / n;
            let (rows, columns) = view.dim();
            (mean(0) - (rows as f64 - 1.0) / 2.0).hypot(mean(1) - (columns as f64 - 1.0) / 2.0)
        };
        let holes: Vec<&Segment> = all.iter().filter(|s| depth_at(s) > 0.1 * deepest).collect();
        let central = holes
            .iter()
            .min_by(|a, b| centre(a).total_cmp(&centre(b)))
            .ok_or_else(flat)?;
        // Against the plateau in the hole's own rows, where it is: drift runs from row to row.
        let places = || central.pixels.iter().map(|p| p[0]);
        let (top, bottom) = (places().min().unwrap_or(0), places().max().unwrap_or(0));
        let plateau = clear(top..bottom + 1, 0..columns)
            .filter(|l| l.count >= 100)
            .unwrap_or(plateau);
        let mut hole = Self::of(view, central, plateau, noise, holes.len())?;
        hole.unevenness = unevenness;
        Ok(hole)
    }

    fn of(
        view: ArrayView2<f32>,
        segment: &Segment,
        plateau: Level,
        noise: f64,
        count: usize,
    ) -> std::result::Result<Self, String> {
        let (rows, columns) = view.dim();
        let spans = |axis: usize, count: usize| {
            segment.pixels.iter().any(|p| p[axis] == 0)
                && segment.pixels.iter().any(|p| p[axis] + 1 == count)
        };
        let trench = spans(0, rows) != spans(1, columns);
        let bottom = f64::from(view[segment.peak]);
        let half = 0.5 * (plateau.value + bottom);
        let inner = inwards(view, segment, half);
        let (middle, flat) = middle_of(view, &inner);
        if middle.len() < 9 {
            return Err("the hole is too narrow: no nine pixels in its middle".to_owned());
        }
        let depth = plateau.value - flat.at_middle;
        // What the fit cannot tell from level, or a fiftieth of the depth where that is more.
        let seen = (3.0 * flat.slope_u * MIDDLE).max(0.02 * depth);
        let rise = flat.slope.max(0.0) * MIDDLE;
        let wide = flat.widest > MIDDLE;
        let reached = wide && rise <= seen;
        let floor = if reached {
            // The inner half, clear of the fillet that the tip leaves at the wall's foot.
            let clear = (flat.widest - MIDDLE).min(0.5 * flat.widest);
            let mut heights: Vec<f64> = inner
                .iter()
                .filter(|i| i.1 > clear)
                .map(|(place, _)| f64::from(view[*place]))
                .collect();
            statistics::level(&mut heights, noise).ok_or("the hole is void")?
        } else {
            Level {
                value: flat.at_middle,
                deviation: flat.scatter,
                count: middle.len(),
            }
        };
        Ok(Self {
            plateau,
            floor,
            reached,
            rise: [rise, seen],
            trench,
            unevenness: 0.0,
            count,
            cut_off: segment.at_border && !trench,
            segment: segment.clone(),
        })
    }

    fn marks(&self, pixels: PixelRegion, pitch: Pitch) -> Vec<[f64; 4]> {
        let range = |axis: usize, from: usize, pitch: f64| {
            let places = || self.segment.pixels.iter().map(|p| p[axis]);
            let (low, high) = (places().min().unwrap_or(0), places().max().unwrap_or(0));
            (
                (from + low) as f64 * pitch,
                (from + high + 1) as f64 * pitch,
            )
        };
        let (y1, y2) = range(0, pixels.row, pitch.y);
        let (x1, x2) = range(1, pixels.column, pitch.x);
        let (x, y) = ((x1 + x2) / 2.0, (y1 + y2) / 2.0);
        vec![[x1, y, x2, y], [x, y1, x, y2]]
    }
}

/// Pixels of the hole below `half`, each with its distance in pixels (chessboard) from what is
/// not; the region's border does not count as such.
fn inwards(view: ArrayView2<f32>, segment: &Segment, half: f64) -> Vec<([usize; 2], f64)> {
    let mut inside = Array2::from_elem(view.dim(), false);
    for &place in &segment.pixels {
        inside[place] = f64::from(view[place]) < half;
    }
    let distance = depth_in(inside);
    let widest = view.nrows().max(view.ncols());
    segment
        .pixels
        .iter()
        .filter(|p| distance[**p] > 0)
        .map(|p| (*p, distance[*p].min(widest) as f64))
        .collect()
}

/// Distance in pixels (chessboard) of what is `inside` from the nearest that is not, 0 there.
fn depth_in(inside: Array2<bool>) -> Array2<usize> {
    let mut distance = inside.mapv(|inside| if inside { usize::MAX / 2 } else { 0 });
    let (rows, columns) = inside.dim();
    // Two passes of the chessboard distance (Rosenfeld and Pfaltz, J. ACM 13, 471 (1966), from
    // memory); outside the region nothing is nearer.
    let relax = |distance: &mut Array2<usize>, r: usize, c: usize, steps: [(isize, isize); 4]| {
        let mut least = distance[[r, c]];
        for (dr, dc) in steps {
            let (Some(r), Some(c)) = (r.checked_add_signed(dr), c.checked_add_signed(dc)) else {
                continue;
            };
            if r < rows && c < columns {
                least = least.min(distance[[r, c]] + 1);
            }
        }
        distance[[r, c]] = least;
    };
    for r in 0..rows {
        for c in 0..columns {
            relax(&mut distance, r, c, [(-1, -1), (-1, 0), (-1, 1), (0, -1)]);
        }
    }
    for r in (0..rows).rev() {
        for c in (0..columns).rev() {
            relax(&mut distance, r, c, [(1, 1), (1, 0), (1, -1), (0, 1)]);
        }
    }
    distance
}

/// How the heights rise away from the middle of the hole.
struct Flat {
    at_middle: f64,
    /// Rise per pixel outwards, nm, and its standard uncertainty.
    slope: f64,
    slope_u: f64,
    scatter: f64,
    /// Greatest distance from what is not the hole, pixels.
    widest: f64,
}

/// The pixels within [`MIDDLE`] of the innermost, and the straight line through their heights over
/// the distance from it.
fn middle_of(view: ArrayView2<f32>, inner: &[([usize; 2], f64)]) -> (Vec<[usize; 2]>, Flat) {
    let widest = inner.iter().map(|i| i.1).fold(0.0, f64::max);
    let middle: Vec<&([usize; 2], f64)> = inner.iter().filter(|i| i.1 >= widest - MIDDLE).collect();
    let out: Vec<f64> = middle.iter().map(|i| widest - i.1).collect();
    let heights: Vec<f64> = middle.iter().map(|i| f64::from(view[i.0])).collect();
    let centre = statistics::mean(&heights);
    let (slope, at_middle) = statistics::line(&out, &heights).unwrap_or((0.0, centre));
    let n = middle.len() as f64;
    let squares: f64 = out
        .iter()
        .zip(&heights)
        .map(|(x, z)| (z - at_middle - slope * x).powi(2))
        .sum();
    let scatter = (squares / (n - 2.0).max(1.0)).sqrt();
    let mean = statistics::mean(&out);
    let spread: f64 = out.iter().map(|x| (x - mean).powi(2)).sum();
    let flat = Flat {
        at_middle,
        slope,
        slope_u: if spread > 0.0 {
            scatter / spread.sqrt()
        } else {
            0.0
        },
        scatter,
        widest,
    };
    (middle.iter().map(|i| i.0).collect(), flat)
}

fn budget_of(hole: &Hole, calibration: f64, noise: f64) -> Budget {
    let depth = hole.plateau.value - hole.floor.value;
    let mut budget = Budget::new();
    budget.push("z calibration", calibration, Distribution::Normal, depth);
    for (source, level) in [
        ("level of the plateau", hole.plateau),
        ("level of the floor", hole.floor),
    ] {
        let count = level.count as f64;
        // White noise, and a hundredth of the pixels taken as independent for the rest of the
        // scatter: drift and waviness.
        let white = noise / count.sqrt();
        let rest = (level.deviation.powi(2) - noise * noise).max(0.0).sqrt();
        let rest = rest / (count / 100.0).max(1.0).sqrt();
        budget.add(Component {
            source: source.to_owned(),
            u: white.hypot(rest),
            distribution: Distribution::Normal,
            sensitivity: 1.0,
            degrees_of_freedom: None,
        });
    }
    // The plateau where the hole is lies within what it does from quarter to quarter.
    budget.push(
        "unevenness of the plateau (waviness, drift)",
        hole.unevenness,
        Distribution::Normal,
        1.0,
    );
    // A floor that falls or rises within what cannot be seen of it.
    if hole.reached {
        budget.push(
            "floor not level",
            hole.rise[0] / 3f64.sqrt(),
            Distribution::Rectangular,
            1.0,
        );
    }
    budget
}

fn fill(line: &mut Dimension, input: &Input, hole: &Hole, noise: f64) {
    line.quantity = if hole.trench {
        "trench depth"
    } else {
        "pit depth"
    }
    .to_owned();
    if hole.count > 1 {
        line.flags.push(format!(
            "the region holds {} holes; the most central one was measured",
            hole.count
        ));
    }
    if hole.cut_off {
        line.flags
            .push("the hole is cut off by the region's border or holds voids".to_owned());
    }
    if input.calibration.z == 0.0 {
        line.flags
            .push("no uncertainty of the z calibration was given".to_owned());
    }
    let budget = budget_of(hole, input.calibration.z, noise);
    let all = budget.combined(0.95);
    let depth = hole.plateau.value - hole.floor.value;
    line.as_scanned = Some(Value {
        value: depth,
        u: Some(all.u),
    });
    if !hole.reached {
        line.flags.push(format!(
            "the floor was not reached for certain: the scan rises by {:.2} nm over {MIDDLE} \
             pixels from the hole's middle; depth at least {depth:.2} nm",
            hole.rise[0]
        ));
    }
    // Neither an unidentified tip nor one known to a small depth changes heights that the apex
    // touched, nor the bound.
    if input.corrected.is_some() {
        let low = Some((depth - all.expanded).max(0.0));
        line.corrected = Some(if hole.reached {
            CorrectedValue {
                low,
                ..CorrectedValue::around(depth, &all)
            }
        } else {
            CorrectedValue::between(low, None)
        });
        line.status = Some(if hole.reached {
            Status::Touched
        } else {
            Status::Bounded
        });
    }
    line.budget = budget.into_components();
}

#[cfg(test)]
mod tests {
    use super::*;

    fn hole(f: impl Fn(f64) -> f64) -> std::result::Result<Hole, String> {
        let map = Array2::from_shape_fn((60, 60), |(r, c)| {
            f((r as f64 - 29.3).hypot(c as f64 - 30.1)) as f32
        });
        Hole::find(map.view(), 0.0)
    }

    #[test]
    fn a_flat_floor_is_reached_and_a_pointed_one_not() {
        let flat = hole(|d| if d < 10.0 { -20.0 } else { 0.0 }).unwrap();
        assert!(flat.reached && !flat.trench && !flat.cut_off);
        assert!((flat.plateau.value - flat.floor.value - 20.0).abs() < 1e-6);
        let pointed = hole(|d| (2.0 * (d - 10.0)).min(0.0)).unwrap();
        assert!(!pointed.reached);
        let depth = pointed.plateau.value - pointed.floor.value;
        assert!((16.0..20.0).contains(&depth), "{depth}");
    }

    #[test]
    fn no_hole_is_told() {
        assert!(hole(|_| 1.0).is_err());
        assert!(hole(|_| f64::NAN).is_err());
    }
}
