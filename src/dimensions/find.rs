//! What there is to measure in a scan: proposals.

use super::sections::{self, Frame, Layout};
use super::segmentation;
use super::statistics;
use super::{Axis, Calibration, Input, Kind, Request};
use crate::error::Result;
use crate::heightmap::{HeightMap, Region};
use crate::progress::Progress;

/// What to look for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Find {
    /// Whole ridges, for line widths.
    Lines,
    /// Whole trenches, for trench widths.
    Trenches,
    /// Every edge, for step heights.
    Steps,
    /// Whole particles.
    Particles,
}

/// Most proposals that are made.
const MOST: usize = 500;

/// Proposes one request for each line, trench, step or particle of the scan, named and numbered
/// in order of position (particles by size). Empty where there is none.
///
/// Lines, trenches and steps are looked for in the middle of the scan and taken over its whole
/// length; their regions reach half way to their neighbours. Errors of kind `Cancelled`.
pub fn find(
    scan: &HeightMap,
    noise_nm: Option<f64>,
    what: Find,
    progress: &Progress,
) -> Result<Vec<Request>> {
    progress.check()?;
    let input = Input {
        scan,
        noise_nm,
        calibration: Calibration::default(),
        slope: [0.0; 2],
        corrected: None,
    };
    if what == Find::Particles {
        return particles(&input);
    }
    let whole = request(String::new(), Kind::LineWidth, None, None);
    let frame = Frame::new(&input, &whole)?;
    let Ok(layout) = Layout::find(frame.of(scan), frame.noise) else {
        return Ok(Vec::new());
    };
    let edges = &layout.edges;
    let across = Some(frame.axis);
    let found: Vec<Request> = match what {
        Find::Steps => (0..edges.len())
            .map(|i| {
                (
                    edges[i].at - layout.reach(i).0,
                    edges[i].at + layout.reach(i).1,
                )
            })
            .enumerate()
            .map(|(i, span)| {
                let region = strip(&frame, scan, span);
                request(
                    format!("step {}", i + 1),
                    Kind::StepHeight,
                    Some(region),
                    across,
                )
            })
            .collect(),
        _ => (0..edges.len().saturating_sub(1))
            .filter(|&i| edges[i].rising == (what == Find::Lines))
            .map(|i| {
                (
                    edges[i].at - layout.reach(i).0,
                    edges[i + 1].at + layout.reach(i + 1).1,
                )
            })
            .enumerate()
            .map(|(i, span)| {
                let name = if what == Find::Lines {
                    "line"
                } else {
                    "trench"
                };
                let region = strip(&frame, scan, span);
                request(
                    format!("{name} {}", i + 1),
                    Kind::LineWidth,
                    Some(region),
                    across,
                )
            })
            .collect(),
    };
    Ok(found.into_iter().take(MOST).collect())
}

fn request(name: String, kind: Kind, region: Option<Region>, across: Option<Axis>) -> Request {
    Request {
        region,
        across,
        ..Request::new(name, kind)
    }
}

/// The whole length of the scan between two positions (pixels) across.
fn strip(frame: &Frame, scan: &HeightMap, span: (f64, f64)) -> Region {
    let (from, to) = (
        frame.start + (span.0 - 0.5) * frame.pitch,
        frame.start + (span.1 + 0.5) * frame.pitch,
    );
    match frame.axis {
        Axis::X => Region::between((from, 0.0), (to, scan.length_nm())),
        Axis::Y => Region::between((0.0, from), (scan.width_nm(), to)),
    }
}

fn particles(input: &Input) -> Result<Vec<Request>> {
    let scan = input.scan;
    let pixels = scan.whole().pixels(scan)?;
    let noise = sections::noise(input, pixels);
    let mut heights: Vec<f64> = scan
        .heights()
        .iter()
        .step_by((scan.heights().len() / 100_000).max(1) | 1)
        .map(|&z| f64::from(z))
        .collect();
    let Some(base) = statistics::level(&mut heights, noise) else {
        return Ok(Vec::new());
    };
    let step = (8.0 * noise).max(4.0 * base.deviation);
    let rise = |summit: f64| (6.0 * noise).max(0.15 * (summit - base.value));
    let pitch = scan.pitch();
    let found = segmentation::segments(scan.heights(), base.value + step, 12, rise);
    let whole = found.iter().filter(|s| !s.at_border && !s.touching);
    Ok(whole
        .take(MOST)
        .enumerate()
        .map(|(i, segment)| {
            let range = |axis: usize| {
                let places = || segment.pixels.iter().map(|p| p[axis]);
                let (low, high) = (places().min().unwrap_or(0), places().max().unwrap_or(0));
                let grow = 0.4 * (high - low) as f64 + 5.0;
                (low as f64 - grow, high as f64 + 1.0 + grow)
            };
            let ((top, bottom), (left, right)) = (range(0), range(1));
            let corner = |x: f64, y: f64| {
                (
                    (x * pitch.x).clamp(0.0, scan.width_nm()),
                    (y * pitch.y).clamp(0.0, scan.length_nm()),
                )
            };
            let region = Region::between(corner(left, top), corner(right, bottom));
            request(
                format!("particle {}", i + 1),
                Kind::Particle,
                Some(region),
                None,
            )
        })
        .collect())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;

    fn grating(turned: bool) -> HeightMap {
        HeightMap::from_fn(200, 200, Pitch::square(1.0), |x, y| {
            let across = if turned { y } else { x };
            let from_centre = ((across - 25.0).rem_euclid(50.0) - 25.0).abs();
            ((from_centre - 12.0) * 3.0).clamp(0.0, 10.0)
        })
        .unwrap()
    }

    #[test]
    fn lines_trenches_and_steps_of_a_grating() {
        let progress = Progress::new();
        for turned in [false, true] {
            let map = grating(turned);
            let count = |what| find(&map, Some(0.0), what, &progress).unwrap().len();
            // Ridges about 25, 75, 125, 175; the trenches between them are whole.
            assert_eq!(count(Find::Lines), 4);
            assert_eq!(count(Find::Trenches), 3);
            assert_eq!(count(Find::Steps), 8);
            let lines = find(&map, Some(0.0), Find::Lines, &progress).unwrap();
            assert_eq!(lines[1].name, "line 2");
            let axis = if turned { Axis::Y } else { Axis::X };
            assert_eq!(lines[1].across, Some(axis));
            let region = lines[1].region.unwrap();
            let (from, extent) = match axis {
                Axis::X => (region.left, region.width),
                Axis::Y => (region.top, region.height),
            };
            assert!(
                (from - 50.0).abs() < 1.1 && (extent - 50.0).abs() < 2.1,
                "{region:?}"
            );
        }
    }

    #[test]
    fn particles_away_from_the_border() {
        let map = HeightMap::from_fn(100, 100, Pitch::square(2.0), |x, y| {
            [[50.0, 50.0], [130.0, 90.0], [2.0, 150.0]]
                .iter()
                .map(|c: &[f64; 2]| 12.0 - 0.1 * ((x - c[0]).powi(2) + (y - c[1]).powi(2)))
                .fold(0.0, f64::max)
        })
        .unwrap();
        let found = find(&map, Some(0.05), Find::Particles, &Progress::new()).unwrap();
        assert_eq!(found.len(), 2);
        assert!(
            found
                .iter()
                .all(|r| r.kind == Kind::Particle && r.region.is_some())
        );
    }

    #[test]
    fn nothing_in_a_flat_or_a_void() {
        for value in [0.0, f64::NAN] {
            let map = HeightMap::from_fn(8, 8, Pitch::square(1.0), |_, _| value).unwrap();
            for what in [Find::Lines, Find::Trenches, Find::Steps, Find::Particles] {
                assert!(find(&map, None, what, &Progress::new()).unwrap().is_empty());
            }
        }
    }
}
