//! Step height: of a ridge or trench by ISO 5436-1 type A1, of a single edge by two regions.
//!
//! Section by section `z = a X + b_section + h d` is fitted with d = 1 on the upper and 0 on the
//! lower zone; the slope `a` is common to all sections. For the complete, symmetric zones of
//! ISO 5436-1 this is its regression, since d and X are then orthogonal.

use super::sections::{self, Frame, Layout};
use super::statistics;
use super::{Corrected, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer};
use crate::error::Result;
use crate::heightmap::HeightMap;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series};
use ndarray::ArrayView2;

const ASSUMPTIONS: &str = "Plane-parallel plateaus, zones clear of the walls, section by section. \
    Ridge or trench of width w: middle third and w/3 to w beyond each edge, ISO 5436-1 type A1; \
    single edge: two regions (common practice)";

/// Fewest pixels of a zone in a section.
const FEWEST: usize = 3;

/// Measures the step: one line.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let frame = Frame::new(input, request)?;
    let mut line = answer(request, Kind::StepHeight, "step height", "nm", ASSUMPTIONS);
    let scan = frame.of(input.scan);
    let zones = Layout::find(scan, frame.noise).and_then(|l| Zones::plan(scan, l, frame.noise));
    let zones = match zones {
        Ok(zones) => zones,
        Err(reason) => {
            line.flags.push(format!("not measured: {reason}"));
            return Ok(vec![line]);
        }
    };
    progress.check()?;
    if zones.floor_lost {
        line.quantity = zones.quantity().to_owned();
        floor_lost(&mut line, input, &frame, &zones);
        return Ok(vec![line]);
    }
    line.quantity = zones.quantity().to_owned();
    line.flags.extend(zones.flags.iter().cloned());
    line.marks = zones.marks(&frame);
    let Some(scanned) = Fit::of(scan, &zones, &frame) else {
        line.flags.push(format!(
            "not measured: no section has {FEWEST} pixels in both zones"
        ));
        return Ok(vec![line]);
    };
    flags(&mut line, input, &frame, &scanned);
    let budget = budget_of(&scanned, input.calibration.z, frame.noise);
    line.as_scanned = Some(Value {
        value: scanned.heights.mean,
        u: Some(budget.combined(0.95).u),
    });
    match input.corrected {
        Some(given) => correct(&mut line, input, &frame, &zones, &scanned, &given),
        None => line.budget = budget.into_components(),
    }
    Ok(vec![line])
}

/// One pixel range of a section relative to an edge: from `edge + from` to `edge + to`, pixels.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Zone {
    upper: bool,
    edge: usize,
    from: f64,
    to: f64,
}

/// Where in each section the two plateaus are taken.
struct Zones {
    layout: Layout,
    /// First of the edges used, and how many (1 or 2).
    first: usize,
    count: usize,
    /// Position of the edges, section by section, pixels.
    followed: Vec<Vec<f64>>,
    zones: Vec<Zone>,
    /// Whether the tip may not have reached the lower plateau.
    floor_lost: bool,
    flags: Vec<String>,
}

impl Zones {
    fn plan(
        sections: ArrayView2<f32>,
        layout: Layout,
        noise: f64,
    ) -> std::result::Result<Self, String> {
        let (first, count) = match layout.central_pair() {
            Some(first) => (first, 2),
            None => (0, 1),
        };
        let level = layout.low.value + 0.5 * layout.height();
        let followed = (first..first + count)
            .map(|i| sections::follow(sections, layout.edges[i], layout.reach(i), level))
            .collect();
        let mut plan = Self {
            first,
            count,
            followed,
            zones: Vec::new(),
            floor_lost: false,
            flags: Vec::new(),
            layout,
        };
        let clear = plan.clearances(noise, sections.nrows());
        if count == 1 {
            plan.single(clear[0])?;
        } else {
            plan.pair([clear[0], clear[1]])?;
        }
        Ok(plan)
    }

    fn quantity(&self) -> &'static str {
        match (self.count, self.layout.edges[self.first].rising) {
            (1, _) => "step height (two regions beside one edge)",
            (_, true) => "step height (ridge)",
            _ => "step height (trench)",
        }
    }

    /// For each used edge the distance to its left and right beyond which the profile is flat,
    /// pixels; `None` where it is not before the middle of the next wall.
    fn clearances(&self, noise: f64, count: usize) -> Vec<[Option<f64>; 2]> {
        let layout = &self.layout;
        let noise = 3.5 * noise / (count.min(15) as f64).sqrt();
        let tolerance = (noise / layout.height()).max(0.002);
        let flat = detrended(layout);
        (self.first..self.first + self.count)
            .map(|i| {
                let edge = layout.edges[i];
                let (before, after) = layout.reach(i);
                [-1.0, 1.0].map(|side: f64| {
                    let reach = if side < 0.0 { before } else { after };
                    let target = if (side > 0.0) == edge.rising {
                        1.0
                    } else {
                        0.0
                    };
                    clearance(&flat, edge.at, side, reach, target, tolerance)
                })
            })
            .collect()
    }

    fn single(&mut self, clear: [Option<f64>; 2]) -> std::result::Result<(), String> {
        let (before, after) = self.layout.reach(0);
        let (Some(left), Some(right)) = (clear[0], clear[1]) else {
            return Err("no flat zone beside the edge".to_owned());
        };
        let rising = self.layout.edges[0].rising;
        let zone = |upper, from, to| Zone {
            upper,
            edge: 0,
            from,
            to,
        };
        self.zones = vec![zone(!rising, -before, -left), zone(rising, right, after)];
        self.flags
            .push("a single edge: two plane-parallel regions beside it".to_owned());
        Ok(())
    }

    fn pair(&mut self, clear: [[Option<f64>; 2]; 2]) -> std::result::Result<(), String> {
        let layout = &self.layout;
        let (i, j) = (self.first, self.first + 1);
        let ridge = layout.edges[i].rising;
        let width = layout.edges[j].at - layout.edges[i].at;
        // The middle third, less what the walls take.
        let inner = match (clear[0][1], clear[1][0]) {
            (Some(a), Some(b)) => (width / 6.0).min(width / 2.0 - a.max(b)),
            _ => -1.0,
        };
        if 2.0 * inner < FEWEST as f64 {
            if ridge {
                return Err("the top is too narrow: no flat zone of three pixels".to_owned());
            }
            self.floor_lost = true;
        } else {
            if inner < width / 6.0 {
                self.flags
                    .push("the walls reach into the middle third; it was narrowed".to_owned());
            }
            let from = width / 2.0 - inner;
            self.zones.push(Zone {
                upper: ridge,
                edge: 0,
                from,
                to: width - from,
            });
        }
        let mut outer = Vec::new();
        for (edge, side) in [(0, 0), (1, 1)] {
            let index = self.first + edge;
            let (before, after) = layout.reach(index);
            let neighbour = if side == 0 {
                index > 0
            } else {
                index + 1 < layout.edges.len()
            };
            let half = if side == 0 { before } else { after };
            let Some(wall) = clear[edge][side] else {
                continue;
            };
            // To the region's border, or to the neighbour's wall.
            let space = if neighbour { 2.0 * half - wall } else { half };
            let mut from = wall.max(width / 3.0);
            if from + FEWEST as f64 > space {
                from = wall.max(space / 3.0);
                self.flags.push(
                    "too little room for the zones of ISO 5436-1; nearer ones used".to_owned(),
                );
            }
            let to = space.min(width);
            if to < width - 1.0 {
                self.flags.push(
                    "the region or the next wall cuts the outer zones short of w beyond the edge"
                        .to_owned(),
                );
            }
            let to = to.max(from + FEWEST as f64).min(space);
            if to - from >= FEWEST as f64 - 1.0 {
                let (from, to) = if side == 0 { (-to, -from) } else { (from, to) };
                outer.push(Zone {
                    upper: !ridge,
                    edge,
                    from,
                    to,
                });
            }
        }
        self.flags.dedup();
        if outer.is_empty() {
            return Err("no flat zone beside the feature".to_owned());
        }
        if outer.len() == 1 {
            self.flags
                .push("a flat zone on one side of the feature only".to_owned());
        }
        self.zones.extend(outer);
        Ok(())
    }

    /// Pixels of a section: `(pixel, upper)`.
    fn pixels(&self, section: usize, columns: usize) -> Vec<(usize, bool)> {
        let mut pixels = Vec::new();
        for zone in &self.zones {
            let at = self.followed[zone.edge][section];
            if at.is_nan() {
                return Vec::new();
            }
            let from = (at + zone.from).ceil().max(0.0) as usize;
            let to = ((at + zone.to).floor() + 1.0).max(0.0) as usize;
            pixels.extend((from..to.min(columns)).map(|c| (c, zone.upper)));
        }
        pixels
    }

    fn marks(&self, frame: &Frame) -> Vec<[f64; 4]> {
        let middle = self.followed[0].len() / 2;
        let section = middle as f64;
        self.zones
            .iter()
            .filter(|z| self.followed[z.edge][middle].is_finite())
            .map(|z| {
                let at = self.followed[z.edge][middle];
                frame.segment((section, at + z.from), (section, at + z.to))
            })
            .collect()
    }
}

/// The layout's profile without its slope, in units of the step: 0 at the lower, 1 at the upper plateau.
fn detrended(layout: &Layout) -> Vec<f64> {
    let last = layout.profile.len() as f64 - 1.0;
    let mut sums = Normal::default();
    let mut ends: Vec<f64> = layout.edges.iter().map(|e| e.at).collect();
    ends.push(last);
    let mut from = 0.0;
    let mut up = !layout.edges[0].rising;
    for to in ends {
        let quarter = 0.25 * (to - from);
        let (a, b) = (
            (from + quarter).ceil() as usize,
            (to - quarter).floor() as usize,
        );
        for c in a..=b.min(layout.profile.len() - 1) {
            sums.add(c as f64, f64::from(u8::from(up)), layout.profile[c]);
        }
        (from, up) = (to, !up);
    }
    let (slope, offset, height) = match sums.solve() {
        Some((slope, height)) if height > 0.5 * layout.height() => {
            let offset = sums.mean[2] - slope * sums.mean[0] - height * sums.mean[1];
            (slope, offset, height)
        }
        _ => (0.0, layout.low.value, layout.height()),
    };
    let unit = |(c, z): (usize, &f64)| (z - slope * c as f64 - offset) / height;
    layout.profile.iter().enumerate().map(unit).collect()
}

/// First distance from `edge` on one `side` where three pixels in a row lie within `tolerance` of
/// the plateau `target`; half of it and a pixel are added, because a rounded shoulder or foot
/// comes within the tolerance before it ends.
fn clearance(
    flat: &[f64],
    edge: f64,
    side: f64,
    reach: f64,
    target: f64,
    tolerance: f64,
) -> Option<f64> {
    let near = |i: f64| {
        let i = i.round();
        i >= 0.0 && (i as usize) < flat.len() && (flat[i as usize] - target).abs() <= tolerance
    };
    (0..=(reach.max(0.0) as usize))
        .map(|d| d as f64)
        .find(|&d| (0..3).all(|k| near(edge + side * (d + f64::from(k)))))
        .map(|d| (1.5 * d + 1.0).min(0.5 * (d + reach).max(d + 1.0)))
}

/// Normal equations of `z = a X + h d` about the means, accumulated group by group.
#[derive(Debug, Clone, Copy, Default)]
struct Normal {
    n: f64,
    /// Means of X, d, z in the group being summed.
    mean: [f64; 3],
    /// Centred sums XX, Xd, dd, Xz, dz.
    sums: [f64; 5],
}

impl Normal {
    /// Adds one pixel to the group (updating means, after Welford).
    fn add(&mut self, x: f64, d: f64, z: f64) {
        self.n += 1.0;
        let old = [x - self.mean[0], d - self.mean[1], z - self.mean[2]];
        for (mean, off) in self.mean.iter_mut().zip(old) {
            *mean += off / self.n;
        }
        let new = [x - self.mean[0], d - self.mean[1], z - self.mean[2]];
        let products = [(0, 0), (0, 1), (1, 1), (0, 2), (1, 2)];
        for (sum, (i, j)) in self.sums.iter_mut().zip(products) {
            *sum += old[i] * new[j];
        }
    }

    /// Adds another group with an offset of its own.
    fn pool(&mut self, other: &Self) {
        for (sum, more) in self.sums.iter_mut().zip(other.sums) {
            *sum += more;
        }
    }

    /// `(a, h)`; `None` when X and d are not independent.
    fn solve(&self) -> Option<(f64, f64)> {
        let [xx, xd, dd, xz, dz] = self.sums;
        let determinant = xx * dd - xd * xd;
        (determinant > 1e-9 * xx * dd).then(|| {
            (
                (xz * dd - dz * xd) / determinant,
                (dz * xx - xz * xd) / determinant,
            )
        })
    }

    /// Standard deviation of h for unit noise.
    fn height_u(&self) -> f64 {
        let [xx, xd, dd, ..] = self.sums;
        (xx / (xx * dd - xd * xd)).sqrt()
    }
}

/// The fit on one map.
struct Fit {
    /// Steps of the sections.
    heights: Series,
    /// Standard uncertainty from white noise of one unit in each pixel.
    noise_gain: f64,
    /// Standard uncertainty from waviness and drift along the sections beyond the noise, nm.
    waviness: f64,
    /// Sections used, of how many.
    sections: (usize, usize),
    /// Pixels left out as outliers, and void ones.
    outliers: usize,
    voids: usize,
}

impl Fit {
    fn of(sections: ArrayView2<f32>, zones: &Zones, frame: &Frame) -> Option<Self> {
        let columns = sections.ncols();
        let mut rows: Vec<Vec<(usize, bool, f64)>> = Vec::with_capacity(sections.nrows());
        let mut voids = 0;
        for section in 0..sections.nrows() {
            let mut row = zones.pixels(section, columns);
            let before = row.len();
            row.retain(|&(c, _)| !sections[[section, c]].is_nan());
            voids += before - row.len();
            rows.push(
                row.into_iter()
                    .map(|(c, up)| (c, up, f64::from(sections[[section, c]])))
                    .collect(),
            );
        }
        let (slope, height, _) = pooled(&rows)?;
        let outliers = drop_outliers(&mut rows, slope, height, frame.noise);
        let (slope, _, normal) = pooled(&rows)?;
        let heights: Vec<f64> = rows
            .iter()
            .map(|row| {
                let side = |up: bool| {
                    let values: Vec<f64> = row
                        .iter()
                        .filter(|p| p.1 == up)
                        .map(|p| p.2 - slope * p.0 as f64)
                        .collect();
                    if values.len() < FEWEST {
                        f64::NAN
                    } else {
                        statistics::mean(&values)
                    }
                };
                side(true) - side(false)
            })
            .collect();
        let series = Series::of(&statistics::clipped(&heights, 5.0))?;
        Some(Self {
            noise_gain: normal.height_u(),
            waviness: waviness(&rows, slope, frame.noise),
            sections: (series.count, rows.len()),
            heights: series,
            outliers,
            voids,
        })
    }
}

/// Common slope (per pixel) and step over all rows that have both zones.
fn pooled(rows: &[Vec<(usize, bool, f64)>]) -> Option<(f64, f64, Normal)> {
    let mut all = Normal::default();
    for row in rows {
        let upper = row.iter().filter(|p| p.1).count();
        if upper < FEWEST || row.len() - upper < FEWEST {
            continue;
        }
        let mut one = Normal::default();
        for &(c, up, z) in row {
            one.add(c as f64, f64::from(u8::from(up)), z);
        }
        all.pool(&one);
    }
    all.solve().map(|(slope, height)| (slope, height, all))
}

/// Drops pixels beyond five deviations of their own plateau and section (debris); how many.
fn drop_outliers(
    rows: &mut [Vec<(usize, bool, f64)>],
    slope: f64,
    height: f64,
    noise: f64,
) -> usize {
    let flat = |p: &(usize, bool, f64)| p.2 - slope * p.0 as f64 - if p.1 { height } else { 0.0 };
    let centres: Vec<f64> = rows
        .iter()
        .map(|row| statistics::median(&mut row.iter().map(flat).collect()).unwrap_or(f64::NAN))
        .collect();
    let off: Vec<f64> = rows
        .iter()
        .zip(&centres)
        .flat_map(|(row, centre)| row.iter().map(move |p| flat(p) - centre))
        .collect();
    let deviation = statistics::robust_deviation(&off).unwrap_or(0.0).max(noise);
    if deviation == 0.0 {
        return 0;
    }
    let before: usize = rows.iter().map(Vec::len).sum();
    for (row, centre) in rows.iter_mut().zip(&centres) {
        row.retain(|p| (flat(p) - centre).abs() <= 5.0 * deviation);
    }
    before - rows.iter().map(Vec::len).sum::<usize>()
}

/// Uncertainty of the step from what the mean section shows beyond white noise: waviness of the
/// plateaus along x, drift along y.
fn waviness(rows: &[Vec<(usize, bool, f64)>], slope: f64, noise: f64) -> f64 {
    let columns = rows.iter().flatten().map(|p| p.0 + 1).max().unwrap_or(0);
    let side = |up: bool| {
        let mut sums = vec![(0.0, 0.0); columns];
        for row in rows {
            let values: Vec<f64> = row
                .iter()
                .filter(|p| p.1 == up)
                .map(|p| p.2 - slope * p.0 as f64)
                .collect();
            let centre = statistics::mean(&values);
            for p in row.iter().filter(|p| p.1 == up) {
                sums[p.0].0 += p.2 - slope * p.0 as f64 - centre;
                sums[p.0].1 += 1.0;
            }
        }
        let profile: Vec<f64> = sums
            .iter()
            .filter(|s| s.1 > 0.0)
            .map(|s| s.0 / s.1)
            .collect();
        let depth = sums.iter().map(|s| s.1).fold(0.0, f64::max);
        let Some(series) = Series::of(&profile) else {
            return 0.0;
        };
        let white = noise * noise / depth.max(1.0) / series.count as f64;
        (series.standard_error().powi(2) - white).max(0.0)
    };
    (side(true) + side(false)).sqrt()
}

fn budget_of(fit: &Fit, calibration: f64, noise: f64) -> Budget {
    let mut budget = Budget::new();
    budget.push(
        "z calibration",
        calibration,
        Distribution::Normal,
        fit.heights.mean,
    );
    let white = noise * fit.noise_gain;
    budget.push("noise", noise, Distribution::Normal, fit.noise_gain);
    let excess = (fit.heights.standard_error().powi(2) - white * white)
        .max(0.0)
        .sqrt();
    budget.add(Component {
        source: "scatter of the sections beyond the noise".to_owned(),
        u: excess,
        distribution: Distribution::Normal,
        sensitivity: 1.0,
        degrees_of_freedom: fit.heights.degrees_of_freedom(),
    });
    budget.push(
        "waviness and drift along the sections",
        fit.waviness,
        Distribution::Normal,
        1.0,
    );
    budget
}

fn flags(line: &mut Dimension, input: &Input, frame: &Frame, fit: &Fit) {
    if fit.sections.0 < 3 {
        line.flags
            .push(format!("too few sections: {}", fit.sections.0));
    } else if 2 * fit.sections.0 < fit.sections.1 {
        let (used, all) = fit.sections;
        line.flags
            .push(format!("only {used} of {all} sections could be used"));
    }
    if fit.voids > 0 {
        line.flags
            .push(format!("{} void pixels inside the zones", fit.voids));
    }
    if fit.outliers > 0 {
        line.flags
            .push(format!("{} outlying pixels left out", fit.outliers));
    }
    if frame.axis == super::Axis::Y {
        line.flags
            .push("taken along the slow axis: drift enters in full".to_owned());
    }
    if input.calibration.z == 0.0 {
        line.flags
            .push("no uncertainty of the z calibration was given".to_owned());
    }
}

/// The corrected column.
fn correct(
    line: &mut Dimension,
    input: &Input,
    frame: &Frame,
    zones: &Zones,
    scanned: &Fit,
    given: &Corrected,
) {
    let map: &HeightMap = given.surface;
    let Some(fit) = Fit::of(frame.of(map), zones, frame) else {
        line.flags
            .push("no corrected value: the zones are void in the surface".to_owned());
        line.budget = budget_of(scanned, input.calibration.z, frame.noise).into_components();
        return;
    };
    let mut budget = budget_of(&fit, input.calibration.z, frame.noise);
    let change = fit.heights.mean - scanned.heights.mean;
    // Plateaus are parallel before and after: what changes is noise taken differently.
    let u = change.abs() / 3f64.sqrt();
    budget.push(
        "change by the tip correction",
        u,
        Distribution::Rectangular,
        1.0,
    );
    lean(line, frame, zones, given);
    let all = budget.combined(0.95);
    let value = fit.heights.mean;
    let mut column = CorrectedValue::around(value, &all);
    line.status = Some(Status::Touched);
    if !given.identified {
        let (a, b) = (
            value.min(scanned.heights.mean),
            value.max(scanned.heights.mean),
        );
        column = CorrectedValue::between(Some(a - all.expanded), Some(b + all.expanded));
        line.status = Some(Status::Bounded);
        line.flags.push(
            "the tip is not identified: bounds only; a step between wide plateaus does not depend on it, see the scanned value"
                .to_owned(),
        );
    }
    line.corrected = Some(column);
    line.budget = budget.into_components();
}

/// A trench whose floor shows no flat: only how deep the tip got.
fn floor_lost(line: &mut Dimension, input: &Input, frame: &Frame, zones: &Zones) {
    let sections = frame.of(input.scan);
    let depths: Vec<f64> = (0..sections.nrows())
        .map(|section| {
            let (a, b) = (zones.followed[0][section], zones.followed[1][section]);
            let mut rim: Vec<f64> = zones
                .pixels(section, sections.ncols())
                .iter()
                .map(|&(c, _)| f64::from(sections[[section, c]]))
                .collect();
            let lowest = (a.max(0.0) as usize..=b.max(0.0) as usize)
                .filter_map(|c| sections.get([section, c]).map(|&z| f64::from(z)))
                .filter(|z| z.is_finite())
                .fold(f64::INFINITY, f64::min);
            statistics::median(&mut rim).unwrap_or(f64::NAN) - lowest
        })
        .collect();
    line.flags.push(
        "the floor shows no flat zone: the tip may not have reached it; the depth is a lower \
         bound"
            .to_owned(),
    );
    line.marks = zones.marks(frame);
    let Some(series) = Series::of(&statistics::clipped(&depths, 5.0)) else {
        return;
    };
    let mut budget = Budget::new();
    budget.push(
        "z calibration",
        input.calibration.z,
        Distribution::Normal,
        series.mean,
    );
    budget.push(
        "noise of the lowest pixel",
        frame.noise,
        Distribution::Normal,
        1.0,
    );
    budget.add(Component {
        source: "scatter of the sections".to_owned(),
        u: series.standard_error(),
        distribution: Distribution::Normal,
        sensitivity: 1.0,
        degrees_of_freedom: series.degrees_of_freedom(),
    });
    let all = budget.combined(0.95);
    line.as_scanned = Some(Value {
        value: series.mean,
        u: Some(all.u),
    });
    if input.corrected.is_some() {
        line.status = Some(Status::Bounded);
        line.corrected = Some(CorrectedValue::between(
            Some((series.mean - all.expanded).max(0.0)),
            None,
        ));
    }
    line.budget = budget.into_components();
}

/// Flags zones that lean on the edge of the scan.
fn lean(line: &mut Dimension, frame: &Frame, zones: &Zones, given: &Corrected) {
    let leaning = frame.of_array(given.edge_leaning);
    let (mut leans, mut total) = (0usize, 0usize);
    for section in 0..leaning.nrows() {
        for (c, _) in zones.pixels(section, leaning.ncols()) {
            total += 1;
            leans += usize::from(leaning[[section, c]]);
        }
    }
    if leans > 0 {
        let percent = (100.0 * leans as f64 / total as f64).max(1.0);
        line.flags.push(format!(
            "{percent:.0} % of the plateau pixels lean on the edge of the scan or on voids"
        ));
    }
}
