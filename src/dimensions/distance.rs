//! Distance and angle on a profile: between two points, or between the edges nearest to them.

use super::sections::{self, Frame};
use super::statistics;
use super::{
    Axis, Corrected, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer,
};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::HeightMap;
use crate::morphology::certainty::TOUCHED;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Distribution, Series};

const DISTANCE: &str = "Between two points of a profile, or the steepest places nearest to them; \
    two edges that face the same way are shifted alike by the tip, two that face each other are \
    not. Common practice";
const ANGLE: &str = "Angle from the horizontal of the least-squares line through the profile \
    between two points. Common practice";

/// Fewest points of a profile.
const FEWEST: usize = 5;

/// Measures the lateral distance and the height difference (kind distance, two lines) or the slope
/// angle (one line) between `from` and `to`; without them between the ends of the region's mean
/// profile.
///
/// Errors of kind `Setting`: one point without the other, a point off the scan, both the same.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let noise = sections::noise(input, sections::region_pixels(input.scan, request)?);
    let path = Path::of(input, request)?;
    progress.check()?;
    let scan = path.on(input.scan);
    let noise = noise / (path.averaged as f64).sqrt();
    let mut lines = if request.kind == Kind::Angle {
        vec![angle(input, request, &path, &scan, noise)]
    } else {
        distances(input, request, &path, &scan, noise)
    };
    for line in &mut lines {
        line.marks = vec![path.mark];
    }
    Ok(lines)
}

/// Heights at equal steps along the line.
struct Profile {
    heights: Vec<f64>,
}

/// Where the profile runs.
struct Path<'a> {
    /// Sections of the region to average over; `None` for a line between two points.
    frame: Option<Frame>,
    from: (f64, f64),
    to: (f64, f64),
    /// Distance of neighbouring profile points, nm.
    step: f64,
    /// Profiles averaged.
    averaged: usize,
    mark: [f64; 4],
    corrected: Option<Corrected<'a>>,
    /// Relative calibration uncertainty along the profile.
    calibration: f64,
}

impl<'a> Path<'a> {
    fn of(input: &Input<'a>, request: &Request) -> Result<Self> {
        let refuse = |what: String, remedy: &str| {
            Err(
                Error::new(ErrorKind::Setting, format!("\"{}\": {what}", request.name))
                    .remedy(remedy),
            )
        };
        let map = input.scan;
        let (from, to) = match (request.from, request.to) {
            (Some(from), Some(to)) => (from, to),
            (None, None) => return Self::of_region(input, request),
            _ => {
                return refuse(
                    "one point without the other".to_owned(),
                    "Give both from = [\"x\", \"y\"] and to = [\"x\", \"y\"], or neither",
                );
            }
        };
        let [from, to] = [from, to].map(|p| (p[0].nm(), p[1].nm()));
        for (x, y) in [from, to] {
            let inside =
                (0.0..=map.width_nm()).contains(&x) && (0.0..=map.length_nm()).contains(&y);
            if !inside {
                return refuse(
                    format!("the point {x} nm, {y} nm is off the scan"),
                    "Give points inside the scan",
                );
            }
        }
        let length = (to.0 - from.0).hypot(to.1 - from.1);
        if length <= 0.0 {
            return refuse(
                "both points are the same".to_owned(),
                "Give two different points",
            );
        }
        let count = map.profile(from, to).position_nm.len();
        let [cx, cy] = [(to.0 - from.0) / length, (to.1 - from.1) / length];
        let calibration = (cx * cx * input.calibration.x).hypot(cy * cy * input.calibration.y);
        Ok(Self {
            frame: None,
            from,
            to,
            step: length / (count.max(2) - 1) as f64,
            averaged: 1,
            mark: [from.0, from.1, to.0, to.1],
            corrected: input.corrected,
            calibration,
        })
    }

    fn of_region(input: &Input<'a>, request: &Request) -> Result<Self> {
        let frame = Frame::new(input, request)?;
        let sections = frame.of(input.scan);
        let last = sections.ncols().saturating_sub(1) as f64;
        let middle = (sections.nrows() as f64 - 1.0) / 2.0;
        let mark = frame.segment((middle, 0.0), (middle, last));
        Ok(Self {
            from: (mark[0], mark[1]),
            to: (mark[2], mark[3]),
            step: frame.pitch,
            averaged: sections.nrows(),
            mark,
            corrected: input.corrected,
            calibration: match frame.axis {
                Axis::X => input.calibration.x,
                Axis::Y => input.calibration.y,
            },
            frame: Some(frame),
        })
    }

    fn on(&self, map: &HeightMap) -> Profile {
        let heights = match self.frame {
            Some(frame) => frame
                .of(map)
                .columns()
                .into_iter()
                .map(|c| statistics::mean(&c.iter().map(|&z| f64::from(z)).collect::<Vec<_>>()))
                .collect(),
            None => map
                .profile(self.from, self.to)
                .height_nm
                .iter()
                .map(|&z| f64::from(z))
                .collect(),
        };
        Profile { heights }
    }

    /// Share of the touched pixels at profile point `at`.
    fn touched(&self, certainty: ndarray::ArrayView2<u8>, map: &HeightMap, at: f64) -> f64 {
        match self.frame {
            Some(frame) => {
                let sections = frame.of_array(certainty);
                let column = (at.round().max(0.0) as usize).min(sections.ncols() - 1);
                let column = sections.column(column);
                column.iter().filter(|&&c| c == TOUCHED).count() as f64 / column.len() as f64
            }
            None => {
                let part =
                    at * self.step / (self.to.0 - self.from.0).hypot(self.to.1 - self.from.1);
                let place = |a: f64, b: f64, pitch: f64, count: usize| {
                    (((a + part * (b - a)) / pitch).max(0.0) as usize).min(count - 1)
                };
                let pitch = map.pitch();
                let row = place(self.from.1, self.to.1, pitch.y, map.rows());
                let column = place(self.from.0, self.to.0, pitch.x, map.columns());
                f64::from(u8::from(certainty[[row, column]] == TOUCHED))
            }
        }
    }
}

/// One end of a distance.
#[derive(Debug, Clone, Copy)]
struct End {
    /// Place along the profile, points.
    at: f64,
    height: f64,
    /// Slope there, nm per point.
    slope: f64,
}

impl Profile {
    fn height(&self, at: f64) -> f64 {
        let i = (at.max(0.0) as usize).min(self.heights.len().saturating_sub(2));
        let part = at - i as f64;
        match self.heights.get(i..i + 2) {
            Some(pair) => pair[0] + part * (pair[1] - pair[0]),
            None => f64::NAN,
        }
    }

    /// The steepest place within `reach` points of `at`, at the middle height between the flats
    /// to both sides within that reach; `at` itself without a reach. `None` where void, or where
    /// nothing stands out from `noise`.
    fn end(&self, at: f64, reach: Option<f64>, noise: f64) -> Option<End> {
        let last = self.heights.len().checked_sub(1)? as f64;
        let at = at.clamp(0.0, last);
        let Some(reach) = reach else {
            let height = self.height(at);
            return height.is_finite().then_some(End {
                at,
                height,
                slope: 0.0,
            });
        };
        let from = (at - reach).ceil().max(0.0) as usize;
        let to = (at + reach).floor().min(last) as usize;
        let part = self.heights.get(from..=to)?;
        let (low, high) = part
            .iter()
            .filter(|z| z.is_finite())
            .fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), &z| {
                (l.min(z), h.max(z))
            });
        if !(high - low > 8.0 * noise) {
            return None;
        }
        let level = 0.5 * (low + high);
        let crossings = (from..to).filter(|&i| {
            (self.heights[i] < level) != (self.heights[i + 1] < level)
                && (self.heights[i + 1] - self.heights[i]).is_finite()
        });
        crossings
            .map(|i| {
                let slope = self.heights[i + 1] - self.heights[i];
                End {
                    at: i as f64 + (level - self.heights[i]) / slope,
                    height: level,
                    slope,
                }
            })
            .min_by(|a, b| (a.at - at).abs().total_cmp(&(b.at - at).abs()))
    }

    fn ends(&self, request: &Request, path: &Path, noise: f64) -> Option<[End; 2]> {
        let last = self.heights.len().checked_sub(1)? as f64;
        let reach = request.search.map(|l| l.nm() / path.step);
        Some([self.end(0.0, reach, noise)?, self.end(last, reach, noise)?])
    }
}

fn distances(
    input: &Input,
    request: &Request,
    path: &Path,
    scan: &Profile,
    noise: f64,
) -> Vec<Dimension> {
    let mut lateral = answer(request, Kind::Distance, "lateral distance", "nm", DISTANCE);
    let mut vertical = answer(request, Kind::Distance, "height difference", "nm", DISTANCE);
    let Some(ends) = scan.ends(request, path, noise) else {
        for line in [&mut lateral, &mut vertical] {
            line.flags.push(
                "not measured: no edge within the search distance of both points, or a void there"
                    .to_owned(),
            );
        }
        return vec![lateral, vertical];
    };
    let edges = request.search.is_some();
    let along = |ends: &[End; 2]| (ends[1].at - ends[0].at) * path.step;
    let up = |ends: &[End; 2]| ends[1].height - ends[0].height;
    let lateral_budget = |ends: &[End; 2]| {
        let mut budget = Budget::new();
        budget.push(
            "axis calibration",
            path.calibration,
            Distribution::Normal,
            along(ends),
        );
        // Given points are exact; an edge lies within a pixel.
        if edges {
            let pixel = path.step / 6f64.sqrt();
            budget.push("pixel, both edges", pixel, Distribution::Rectangular, 1.0);
            let shift = |e: &End| noise * path.step / e.slope.abs().max(noise);
            let both = shift(&ends[0]).hypot(shift(&ends[1]));
            budget.push("noise, both edges", both, Distribution::Normal, 1.0);
        }
        budget
    };
    let vertical_budget = |ends: &[End; 2]| {
        let mut budget = Budget::new();
        budget.push(
            "z calibration",
            input.calibration.z,
            Distribution::Normal,
            up(ends).abs(),
        );
        budget.push("noise", noise, Distribution::Normal, 2f64.sqrt());
        budget
    };
    let put = |line: &mut Dimension, value: f64, budget: Budget| {
        line.as_scanned = Some(Value {
            value,
            u: Some(budget.combined(0.95).u),
        });
        line.budget = budget.into_components();
    };
    put(&mut lateral, along(&ends), lateral_budget(&ends));
    put(&mut vertical, up(&ends), vertical_budget(&ends));
    let Some(given) = path.corrected else {
        return vec![lateral, vertical];
    };
    let surface = path.on(given.surface);
    let Some(below) = surface.ends(request, path, noise) else {
        for line in [&mut lateral, &mut vertical] {
            line.flags
                .push("no corrected value: the surface has no such edges".to_owned());
        }
        return vec![lateral, vertical];
    };
    // Which ends may lie lower than the surface shows them.
    let open = below.map(|e| path.touched(given.certainty, given.surface, e.at) < 0.9);
    let same_way = (below[0].slope > 0.0) == (below[1].slope > 0.0);
    let lateral_room = match (edges, same_way) {
        (false, _) | (true, true) => [true, true],
        // Facing outwards: a ridge, which the reconstruction shows too wide if not right.
        (true, false) if below[0].slope > 0.0 => [false, true],
        _ => [true, false],
    };
    if lateral_room != [true, true] {
        lateral.flags.push(
            "the edges face opposite ways: the tip's effect is bounded on one side only; line-width \
             gives both bounds"
                .to_owned(),
        );
    }
    // A lower true first point raises the difference, a lower second one lowers it.
    let vertical_room = [!open[1], !open[0]];
    if open != [false, false] && !edges {
        vertical.flags.push(
            "the tip did not touch the surface for certain at both points: the surface may lie \
             lower there"
                .to_owned(),
        );
    }
    if edges {
        vertical
            .flags
            .push("taken at the middle heights of the two edges".to_owned());
    }
    let vertical_room = if edges { [true, true] } else { vertical_room };
    column(
        &mut lateral,
        &given,
        along(&below),
        lateral_budget(&below),
        lateral_room,
        !edges || same_way,
    );
    column(
        &mut vertical,
        &given,
        up(&below),
        vertical_budget(&below),
        vertical_room,
        edges,
    );
    vec![lateral, vertical]
}

/// Writes the corrected column; `bounded_by` tells whether there is a bound below and above, and
/// `free` that the tip has no part in it.
fn column(
    line: &mut Dimension,
    given: &Corrected,
    value: f64,
    budget: Budget,
    bounds: [bool; 2],
    free: bool,
) {
    let all = budget.combined(0.95);
    let known = given.identified || free;
    let bounds = if known { bounds } else { [false; 2] };
    if !known {
        line.flags
            .push("the tip is not identified: no corrected value".to_owned());
    }
    line.corrected = Some(CorrectedValue {
        value: known.then_some(value),
        u: known.then_some(all.u),
        expanded: known.then_some(all.expanded),
        k: known.then_some(all.k),
        low: bounds[0].then_some(value - all.expanded),
        high: bounds[1].then_some(value + all.expanded),
    });
    line.status = Some(if bounds == [true; 2] {
        Status::Touched
    } else {
        Status::Bounded
    });
    line.budget = budget.into_components();
}

/// Slope of the profile between its ends, nm per nm, with its standard uncertainty and degrees of
/// freedom. `None` with fewer than [`FEWEST`] heights.
fn slope_of(profile: &Profile, step: f64) -> Option<(f64, f64)> {
    let x: Vec<f64> = (0..profile.heights.len())
        .map(|i| i as f64 * step)
        .collect();
    let n = profile.heights.iter().filter(|z| z.is_finite()).count();
    if n < FEWEST {
        return None;
    }
    let (slope, offset) = statistics::line(&x, &profile.heights)?;
    let rest: Vec<f64> = x
        .iter()
        .zip(&profile.heights)
        .map(|(x, z)| z - slope * x - offset)
        .collect();
    let series = Series::of(&rest)?;
    let mean = statistics::mean(&x);
    let spread = (x.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / x.len() as f64).sqrt();
    Some((slope, series.standard_error() / spread))
}

fn angle(input: &Input, request: &Request, path: &Path, scan: &Profile, noise: f64) -> Dimension {
    let mut line = answer(request, Kind::Angle, "slope angle", "deg", ANGLE);
    let Some((slope, u)) = slope_of(scan, path.step) else {
        line.flags.push(format!(
            "not measured: fewer than {FEWEST} heights on the profile"
        ));
        return line;
    };
    let budget_of = |slope: f64, u: f64, count: usize| {
        let sensitivity = (1.0 / (1.0 + slope * slope)).to_degrees();
        let mut budget = Budget::new();
        let mut push = |source: &str, u: f64| {
            budget.push(source, u, Distribution::Normal, sensitivity);
        };
        push("axis calibration", slope.abs() * path.calibration);
        push("z calibration", slope.abs() * input.calibration.z);
        push("scatter about the line (noise, waviness)", u);
        // Few points may lie on a line by chance: the noise is there all the same.
        let length = path.step * count as f64;
        push("noise", noise * (12.0 / count as f64).sqrt() / length);
        budget
    };
    let budget = budget_of(slope, u, scan.heights.len());
    line.as_scanned = Some(Value {
        value: slope.atan().to_degrees(),
        u: Some(budget.combined(0.95).u),
    });
    line.budget = budget.into_components();
    let Some(given) = path.corrected else {
        return line;
    };
    let surface = path.on(given.surface);
    let Some((slope, u)) = slope_of(&surface, path.step) else {
        line.flags
            .push("no corrected value: the surface is void here".to_owned());
        return line;
    };
    let shares: Vec<f64> = (0..surface.heights.len())
        .map(|i| path.touched(given.certainty, given.surface, i as f64))
        .collect();
    let touched = statistics::mean(&shares) >= 0.9;
    if !touched {
        line.flags.push(
            "less than 90 % of the profile was touched: the surface may lie lower elsewhere, no \
             interval can be given"
                .to_owned(),
        );
    }
    let budget = budget_of(slope, u, surface.heights.len());
    column(
        &mut line,
        &given,
        slope.atan().to_degrees(),
        budget,
        [touched; 2],
        false,
    );
    line
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::dimensions::Calibration;
    use crate::heightmap::Pitch;
    use crate::units::Length;

    fn measured(map: &HeightMap, request: &Request) -> Result<Vec<Dimension>> {
        let input = Input {
            scan: map,
            noise_nm: Some(0.0),
            calibration: Calibration::default(),
            slope: [0.0; 2],
            corrected: None,
        };
        measure(&input, request, &Progress::new())
    }

    fn point(x: f64, y: f64) -> Option<[Length; 2]> {
        Some([x, y].map(Length::from_nm))
    }

    #[test]
    fn given_points_on_a_ramp_have_their_distance_and_its_angle() {
        let map =
            HeightMap::from_fn(60, 80, Pitch { x: 1.0, y: 2.0 }, |x, y| 0.3 * x - 0.4 * y).unwrap();
        let request = Request {
            from: point(10.0, 20.0),
            to: point(50.0, 50.0),
            ..Request::new("d", Kind::Distance)
        };
        let lines = measured(&map, &request).unwrap();
        let value = |l: &Dimension| l.as_scanned.unwrap().value;
        assert!((value(&lines[0]) - 50.0).abs() < 1e-9);
        assert!((value(&lines[1]) - (0.3 * 40.0 - 0.4 * 30.0)).abs() < 1e-4);
        let request = Request {
            from: point(10.0, 20.0),
            to: point(70.0, 20.0),
            ..Request::new("a", Kind::Angle)
        };
        let lines = measured(&map, &request).unwrap();
        assert!((value(&lines[0]) - 0.3f64.atan().to_degrees()).abs() < 1e-4);
    }

    #[test]
    fn edges_are_found_within_the_search_distance() {
        let map = HeightMap::from_fn(10, 100, Pitch::square(1.0), |x, _| {
            (2.0 * (15.0 - (x - 50.3).abs())).clamp(0.0, 10.0)
        })
        .unwrap();
        let request = Request {
            from: point(33.0, 5.0),
            to: point(68.0, 5.0),
            search: Some(Length::from_nm(8.0)),
            ..Request::new("d", Kind::Distance)
        };
        let lines = measured(&map, &request).unwrap();
        // Walls of slope 2 cross 5 nm at 12.5 nm from the middle.
        let value = lines[0].as_scanned.unwrap().value;
        assert!((value - 25.0).abs() < 0.05, "{value}");
    }

    #[test]
    fn half_a_pair_and_points_off_the_scan_are_refused() {
        let map = HeightMap::from_fn(10, 10, Pitch::square(1.0), |x, _| x).unwrap();
        let one = Request {
            from: point(1.0, 1.0),
            ..Request::new("d", Kind::Distance)
        };
        assert!(measured(&map, &one).is_err());
        let off = Request {
            to: point(400.0, 1.0),
            ..one.clone()
        };
        let error = measured(&map, &off).unwrap_err().to_string();
        assert!(error.contains("400"), "{error}");
        let same = Request {
            to: one.from,
            ..one
        };
        assert!(measured(&map, &same).is_err());
    }
}
