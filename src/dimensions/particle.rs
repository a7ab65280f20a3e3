//! Particles on a flat: height and equivalent diameter of each, and their means.
//!
//! The height of a particle above its surroundings is not changed by the tip. Its diameter at
//! half height is: the reconstruction shows it too wide below the equator, where the tip cannot
//! get, and the widest circle that was touched shows it too narrow. The truth lies between.

use super::erosion;
use super::sections::{self, region_pixels};
use super::segmentation::{self, Segment};
use super::statistics::{self, Level};
use super::wall::{self, Outline, Wall};
use super::{
    Axis, Corrected, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer,
};
use crate::error::Result;
use crate::heightmap::{Pitch, PixelRegion};
use crate::leveling::least_squares;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series};
use ndarray::ArrayView2;
use std::f64::consts::PI;

const ASSUMPTIONS: &str = "Separate particles on a flat; height of the fitted summit above the \
    surroundings; diameter of the circle of equal area at half height; no undercut beyond the \
    equator. Equivalent diameter: common practice; height not changed by the tip: J. S. \
    Villarrubia, J. Res. NIST 102, 425 (1997), from memory";

/// Most particles that are listed one by one.
const LISTED: usize = 100;
/// Most particles measured.
const MEASURED: usize = 2000;
/// Smallest particle, pixels.
const FEWEST: usize = 12;

/// Measures the particles: mean height and mean diameter, then each.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let pixels = region_pixels(input.scan, request)?;
    let view = sections::cut(input.scan, pixels);
    let noise = sections::noise(input, pixels);
    let refuse = |reason: String| {
        let mut line = answer(
            request,
            Kind::Particle,
            "particle height",
            "nm",
            ASSUMPTIONS,
        );
        line.flags.push(format!("not measured: {reason}"));
        Ok(vec![line])
    };
    let mut heights: Vec<f64> = view
        .iter()
        .step_by((view.len() / 100_000).max(1) | 1)
        .map(|&z| f64::from(z))
        .collect();
    let Some(base) = statistics::level(&mut heights, noise) else {
        return refuse("the region is void".to_owned());
    };
    let step = (8.0 * noise).max(4.0 * base.deviation);
    let rise = |summit: f64| (6.0 * noise).max(0.15 * (summit - base.value));
    let all = segmentation::segments(view, base.value + step, FEWEST, rise);
    progress.check()?;
    let border = all.iter().filter(|s| s.at_border).count();
    let inside: Vec<&Segment> = all.iter().filter(|s| !s.at_border).take(MEASURED).collect();
    if inside.is_empty() {
        return refuse(format!(
            "no whole particle stands {step:.2} nm above the flat; {border} at the border"
        ));
    }
    let field = Field {
        scan: view,
        surface: input.corrected.map(|c| sections::cut(c.surface, pixels)),
        pitch: input.scan.pitch(),
        pixels,
        noise,
        base,
        corrected: input.corrected,
        calibration: [
            input.calibration.x,
            input.calibration.y,
            input.calibration.z,
        ],
    };
    let mut found = Vec::with_capacity(inside.len());
    for (i, segment) in inside.iter().enumerate() {
        progress.check()?;
        progress.report(i as f32 / inside.len() as f32);
        found.extend(field.particle(segment));
    }
    if found.is_empty() {
        return refuse("no summit could be fitted".to_owned());
    }
    let mut flags = Vec::new();
    if border > 0 {
        flags.push(format!(
            "{border} particles at the border or at voids left out"
        ));
    }
    let touching = found.iter().filter(|p| p.touching).count();
    if touching > 0 {
        flags.push(format!(
            "{touching} touching particles split, and left out of the means"
        ));
    }
    if all.len() - border > MEASURED {
        flags.push(format!(
            "only the {MEASURED} largest of {} were measured",
            all.len() - border
        ));
    }
    Ok(lines(request, &field, &found, &flags))
}

fn lines(request: &Request, field: &Field, found: &[Particle], flags: &[String]) -> Vec<Dimension> {
    let alone: Vec<&Particle> = found.iter().filter(|p| !p.touching).collect();
    let marks: Vec<[f64; 4]> = found
        .iter()
        .take(MEASURED)
        .flat_map(Particle::marks)
        .collect();
    let mut lines = Vec::new();
    let empty = |quantity: &str| answer(request, Kind::Particle, quantity, "nm", ASSUMPTIONS);
    if found.len() > 1 && !alone.is_empty() {
        for (quantity, figure) in [
            ("mean height", (|p| &p.height) as fn(&Particle) -> &Figure),
            ("mean diameter", |p| &p.diameter),
        ] {
            let mut line = empty(quantity);
            line.flags = flags.to_vec();
            line.flags
                .push(format!("mean over {} particles", alone.len()));
            line.marks.clone_from(&marks);
            let figures: Vec<&Figure> = alone.iter().map(|p| figure(p)).collect();
            mean_of(&mut line, field, &figures);
            lines.push(line);
        }
    }
    for (i, particle) in found.iter().take(LISTED).enumerate() {
        for (quantity, figure) in [
            ("height", &particle.height),
            ("diameter", &particle.diameter),
        ] {
            let mut line = empty(quantity);
            if found.len() > 1 {
                line.name = format!("{} {}", request.name, i + 1);
            } else {
                line.flags = flags.to_vec();
            }
            if particle.touching {
                line.flags
                    .push("touches its neighbour: cut off at the saddle".to_owned());
            }
            line.flags.extend(figure.flags.iter().cloned());
            line.marks = particle.marks();
            figure.fill(&mut line, field);
            lines.push(line);
        }
    }
    if found.len() > LISTED {
        lines[0]
            .flags
            .push(format!("{LISTED} of {} particles are listed", found.len()));
    }
    lines
}

/// Mean of many: scatter over the root of their number, calibration and bounds in full.
fn mean_of(line: &mut Dimension, field: &Field, figures: &[&Figure]) {
    let values = |f: &dyn Fn(&Figure) -> Option<f64>| {
        Series::of(&figures.iter().filter_map(|x| f(x)).collect::<Vec<_>>())
    };
    let scatter = |series: &Series, calibration: f64| {
        let mut budget = Budget::new();
        budget.push(
            "calibration",
            calibration,
            Distribution::Normal,
            series.mean,
        );
        budget.add(Component {
            source: "scatter of the particles".to_owned(),
            u: series.deviation / (series.count as f64).sqrt(),
            distribution: Distribution::Normal,
            sensitivity: 1.0,
            degrees_of_freedom: Some((series.count as f64 - 1.0).max(1.0)),
        });
        budget
    };
    let calibration = figures[0].calibration;
    let Some(scanned) = values(&|f| Some(f.scanned)) else {
        return;
    };
    let mut budget = scatter(&scanned, calibration);
    line.as_scanned = Some(Value {
        value: scanned.mean,
        u: Some(budget.combined(0.95).u),
    });
    if let Some(corrected) = values(&|f| f.corrected) {
        let room = [0, 1].map(|i| values(&|f| Some(f.room[i])).map_or(0.0, |s| s.mean));
        budget = scatter(&corrected, calibration);
        let all = figures.iter().all(|f| f.touched);
        let radius = values(&|f| Some(f.radius_shift)).map_or(0.0, |s| s.mean);
        column(line, field, budget, corrected.mean, room, radius, all);
    } else {
        line.budget = budget.into_components();
    }
}

/// Writes the corrected column.
fn column(
    line: &mut Dimension,
    field: &Field,
    mut budget: Budget,
    value: f64,
    room: [f64; 2],
    radius_shift: f64,
    touched: bool,
) {
    let between = room[0] + room[1];
    if between > 0.0 {
        let u = between / 12f64.sqrt();
        budget.push(
            "below the equator, between bounds",
            u,
            Distribution::OneSided,
            1.0,
        );
    }
    if radius_shift > 0.0 {
        budget.push_one_sided("radius of the feature that showed the tip", radius_shift);
    }
    let identified = field.corrected.is_some_and(|c| c.identified) || touched;
    let scanned = line.as_scanned.map_or(value, |v| v.value);
    let above = if identified {
        room[1]
    } else {
        room[1].max(scanned - value)
    };
    let (low, high) = budget.interval(value, room[0], above + radius_shift, 0.95);
    let all = budget.combined(0.95);
    line.corrected = Some(CorrectedValue {
        value: identified.then_some(value),
        u: identified.then_some(all.u),
        expanded: identified.then_some(all.expanded),
        k: identified.then_some(all.k),
        low: Some(low.max(0.0)),
        high: Some(high),
    });
    if !identified {
        line.flags
            .push("the tip is not identified: bounds only".to_owned());
    }
    line.status = Some(if touched {
        Status::Touched
    } else {
        Status::Bounded
    });
    line.budget = budget.into_components();
}

/// One figure of one particle.
struct Figure {
    scanned: f64,
    corrected: Option<f64>,
    /// How far below and above the value the tip leaves room, nm.
    room: [f64; 2],
    /// What an unknown feature radius may add, nm.
    radius_shift: f64,
    touched: bool,
    /// Standard uncertainty beyond the calibration, nm, and what it is.
    parts: Vec<(&'static str, f64)>,
    /// Relative.
    calibration: f64,
    flags: Vec<String>,
}

impl Figure {
    fn fill(&self, line: &mut Dimension, field: &Field) {
        let budget = |value: f64| {
            let mut budget = Budget::new();
            budget.push("calibration", self.calibration, Distribution::Normal, value);
            for &(source, u) in &self.parts {
                budget.push(source, u, Distribution::Normal, 1.0);
            }
            budget
        };
        let scanned = budget(self.scanned);
        line.as_scanned = Some(Value {
            value: self.scanned,
            u: Some(scanned.combined(0.95).u),
        });
        match self.corrected {
            Some(value) => {
                column(
                    line,
                    field,
                    budget(value),
                    value,
                    self.room,
                    self.radius_shift,
                    self.touched,
                );
            }
            None => line.budget = scanned.into_components(),
        }
    }
}

struct Particle {
    /// Summit on the map, nm.
    at: [f64; 2],
    touching: bool,
    height: Figure,
    diameter: Figure,
}

impl Particle {
    /// A cross as wide as the particle.
    fn marks(&self) -> Vec<[f64; 4]> {
        let [x, y] = self.at;
        let r = self.diameter.corrected.unwrap_or(self.diameter.scanned) / 2.0;
        vec![[x - r, y, x + r, y], [x, y - r, x, y + r]]
    }
}

/// The region's maps.
struct Field<'a> {
    scan: ArrayView2<'a, f32>,
    surface: Option<ArrayView2<'a, f32>>,
    pitch: Pitch,
    pixels: PixelRegion,
    noise: f64,
    base: Level,
    corrected: Option<Corrected<'a>>,
    calibration: [f64; 3],
}

impl Field<'_> {
    fn particle(&self, segment: &Segment) -> Option<Particle> {
        let window = Window::around(segment, self.scan.dim());
        let size = (segment.pixels.len() as f64 / PI).sqrt();
        let summit = summit(self.scan, segment, size)?;
        let level = window.base(self.scan, self.noise).unwrap_or(self.base);
        let base = level.value;
        let height = summit.height - base;
        if height.is_nan() || height <= 0.0 {
            return None;
        }
        let cell = (self.pitch.x * self.pitch.y).sqrt();
        let scanned = self.course(&window, self.scan, segment, base, height);
        let width = 2.0 * scanned.at(0.5);
        if !width.is_finite() {
            return None;
        }
        let mut figure = Figure {
            scanned: width,
            corrected: None,
            room: [0.0; 2],
            radius_shift: 0.0,
            touched: false,
            parts: Vec::new(),
            calibration: (self.calibration[0] + self.calibration[1]) / 2.0,
            flags: Vec::new(),
        };
        // Pixels along the outline err independently by about p / sqrt 12 each.
        let around = (PI * width / cell).max(1.0).sqrt();
        figure
            .parts
            .push(("pixel", 2.0 * cell / 12f64.sqrt() / around));
        figure.parts.push((
            "noise",
            2.0 * self.noise * scanned.slope(0.5).max(0.0) / around,
        ));
        let mut height_figure = Figure {
            scanned: height,
            corrected: self.corrected.map(|_| height),
            room: [0.0; 2],
            radius_shift: 0.0,
            touched: true,
            parts: vec![
                ("noise of the fitted summit", self.noise * summit.gain),
                // A hundredth of the pixels taken as independent: drift and waviness.
                (
                    "level of the surroundings",
                    level.deviation / (level.count as f64 / 100.0).max(1.0).sqrt(),
                ),
            ],
            calibration: self.calibration[2],
            flags: Vec::new(),
        };
        if segment.pixels.len() < 50 {
            let few = format!("few pixels: {}", segment.pixels.len());
            figure.flags.push(few.clone());
            height_figure.flags.push(few);
        }
        if let (Some(surface), Some(given)) = (self.surface, self.corrected) {
            let below = summit_height(surface, segment, size);
            let floor = window.base(surface, self.noise).map(|l| l.value);
            if let (Some(below), Some(floor)) = (below, floor) {
                let course = self.course(&window, surface, segment, floor, below - floor);
                self.correct(&mut figure, &course, &given);
            }
        }
        let at = |index: usize, pixel: f64, pitch: f64| (index as f64 + pixel + 0.5) * pitch;
        Some(Particle {
            at: [
                at(self.pixels.column, summit.at[1], self.pitch.x),
                at(self.pixels.row, summit.at[0], self.pitch.y),
            ],
            touching: segment.touching,
            height: height_figure,
            diameter: figure,
        })
    }

    /// Radius of the circle of equal area over the height fraction.
    fn course(
        &self,
        window: &Window,
        map: ArrayView2<f32>,
        segment: &Segment,
        base: f64,
        height: f64,
    ) -> Wall {
        let pitch = self.pitch;
        let part = window.of(map);
        // What is not the particle's counts as base.
        let mut own = ndarray::Array2::from_elem(part.dim(), base);
        for &[r, c] in &segment.pixels {
            let z = f64::from(map[[r, c]]);
            if z.is_finite() {
                own[[r - window.rows.start, c - window.columns.start]] = z;
            }
        }
        let fine = if segment.pixels.len() > 20_000 { 1 } else { 4 };
        let mut samples = Vec::new();
        for r in 1..own.nrows() {
            for c in 1..own.ncols() {
                let corner = [
                    own[[r - 1, c - 1]],
                    own[[r - 1, c]],
                    own[[r, c - 1]],
                    own[[r, c]],
                ];
                if corner.iter().all(|&z| z <= base) {
                    continue;
                }
                for i in 0..fine * fine {
                    let f = |k: usize| (k as f64 + 0.5) / fine as f64;
                    let (fy, fx) = (f(i / fine), f(i % fine));
                    let top = corner[0] + fx * (corner[1] - corner[0]);
                    let bottom = corner[2] + fx * (corner[3] - corner[2]);
                    samples.push(top + fy * (bottom - top));
                }
            }
        }
        samples.sort_unstable_by(f64::total_cmp);
        let cell = pitch.x * pitch.y / (fine * fine) as f64;
        let fractions: Vec<f64> = (1..50).map(|i| f64::from(i) * 0.02).collect();
        let outwards: Vec<f64> = fractions
            .iter()
            .map(|f| {
                let above = samples.len() - samples.partition_point(|&z| z <= base + f * height);
                if above == 0 {
                    f64::NAN
                } else {
                    (above as f64 * cell / PI).sqrt()
                }
            })
            .collect();
        // Pixels along the outline err independently by about p / sqrt 12 each.
        let step = (pitch.x * pitch.y).sqrt();
        let u = outwards
            .iter()
            .map(|r| step / 12f64.sqrt() / (2.0 * PI * r / step).max(1.0).sqrt())
            .collect();
        Wall {
            u,
            fractions,
            outwards,
            height,
            noise: self.noise,
        }
    }

    fn correct(&self, figure: &mut Figure, course: &Wall, given: &Corrected) {
        let radius = course.at(0.5);
        if !radius.is_finite() {
            figure
                .flags
                .push("no corrected diameter: too small in the surface".to_owned());
            return;
        }
        let sides = [
            (Axis::X, true),
            (Axis::X, false),
            (Axis::Y, true),
            (Axis::Y, false),
        ];
        let mut slack = 0.0;
        let mut likely = 0.0;
        let mut shift = 0.0;
        let mut sharp = 0.0;
        let mut slope = 0.0;
        figure.touched = true;
        for (axis, positive) in sides {
            let outline = Outline::of(given.tip, axis, positive);
            let hold = course.hold(&outline, 0.5, given.height_u_nm);
            figure.touched &= hold.touched;
            slack += hold.slack / 2.0;
            likely += hold.likely / 2.0;
            slope += hold.slope / 2.0;
            let bias = |slope| erosion::bias(given.tip, axis, positive, slope, self.noise);
            let (wall, flat) = (bias(hold.slope), bias(f64::INFINITY));
            shift += hold.slope * (wall.grid + wall.noise - flat.noise) / 2.0;
            if given.contains_feature_radius {
                let apex = outline.apex_radius().unwrap_or(0.0);
                sharp += apex * wall::shift_per_radius(hold.slope) / 2.0;
            }
        }
        if !(slack.is_finite() && shift.is_finite()) {
            return;
        }
        figure.room = [(slack - likely / 2.0).max(0.0), likely / 2.0];
        figure.corrected = Some(2.0 * radius - shift - likely / 2.0);
        figure.radius_shift = sharp;
        figure.parts.push((
            "noise and pixel grid in the reconstruction",
            shift.abs() / 3f64.sqrt(),
        ));
        figure
            .parts
            .push(("heights of the tip", given.height_u_nm.max(0.0) * slope));
        if !figure.touched {
            figure.flags.push(
                "the tip did not touch the particle at half height: the diameter lies between the \
                 widest circle touched and the reconstruction"
                    .to_owned(),
            );
        }
    }
}

/// Pixels about a segment.
struct Window {
    rows: std::ops::Range<usize>,
    columns: std::ops::Range<usize>,
}

impl Window {
    /// The segment's box, grown by half its size and two pixels.
    fn around(segment: &Segment, size: (usize, usize)) -> Self {
        let range = |axis: usize, count: usize| {
            let places = || segment.pixels.iter().map(|p| p[axis]);
            let (low, high) = (places().min().unwrap_or(0), places().max().unwrap_or(0));
            let grow = (high - low) / 4 + 3;
            low.saturating_sub(grow)..(high + grow + 1).min(count)
        };
        Self {
            rows: range(0, size.0),
            columns: range(1, size.1),
        }
    }

    fn of<'a>(&self, map: ArrayView2<'a, f32>) -> ArrayView2<'a, f32> {
        map.slice_move(ndarray::s![self.rows.clone(), self.columns.clone()])
    }

    /// Densest level on the window's rim, nm; `None` when it has too few pixels.
    fn base(&self, map: ArrayView2<f32>, noise: f64) -> Option<Level> {
        let part = self.of(map);
        let (rows, columns) = part.dim();
        let rim = |r: usize, c: usize| r < 3 || c < 3 || r + 3 >= rows || c + 3 >= columns;
        let mut heights: Vec<f64> = part
            .indexed_iter()
            .filter(|((r, c), _)| rim(*r, *c))
            .map(|(_, &z)| f64::from(z))
            .collect();
        let level = statistics::level(&mut heights, noise)?;
        (level.count >= 20).then_some(level)
    }
}

/// A fitted summit.
struct Summit {
    height: f64,
    /// Row and column, pixels.
    at: [f64; 2],
    /// Standard uncertainty of the height for unit noise.
    gain: f64,
}

fn summit_height(map: ArrayView2<f32>, segment: &Segment, size: f64) -> Option<f64> {
    summit(map, segment, size).map(|s| s.height)
}

/// Vertex of the quadric through the pixels about the segment's peak.
fn summit(map: ArrayView2<f32>, segment: &Segment, size: f64) -> Option<Summit> {
    let half = (0.25 * size).round().clamp(1.0, 6.0) as usize;
    let [r0, c0] = segment.peak;
    let mut places = Vec::new();
    for r in r0.saturating_sub(half)..=(r0 + half).min(map.nrows() - 1) {
        for c in c0.saturating_sub(half)..=(c0 + half).min(map.ncols() - 1) {
            let z = f64::from(map[[r, c]]);
            if z.is_finite() {
                places.push((r as f64 - r0 as f64, c as f64 - c0 as f64, z));
            }
        }
    }
    if places.len() < 9 {
        return None;
    }
    // Heights about the first keep large offsets out of the fit.
    let zero = places[0].2;
    let values: Vec<f64> = places.iter().map(|p| p.2 - zero).collect();
    let fit = least_squares::fit(6, &values, None, |i, row| {
        let (y, x, _) = places[i];
        row.copy_from_slice(&[1.0, x, y, x * x, x * y, y * y]);
    })
    .ok()?;
    let k = &fit.coefficients;
    let determinant = 4.0 * k[3] * k[5] - k[4] * k[4];
    let (mut x, mut y) = (0.0, 0.0);
    if k[3] < 0.0 && determinant > 0.0 {
        x = (k[4] * k[2] - 2.0 * k[5] * k[1]) / determinant;
        y = (k[4] * k[1] - 2.0 * k[3] * k[2]) / determinant;
        let reach = half as f64;
        x = x.clamp(-reach, reach);
        y = y.clamp(-reach, reach);
    }
    let row = [1.0, x, y, x * x, x * y, y * y];
    let height: f64 = row.iter().zip(k).map(|(a, b)| a * b).sum();
    let gain: f64 = (0..6)
        .flat_map(|i| (0..6).map(move |j| (i, j)))
        .map(|(i, j)| row[i] * row[j] * fit.inverse_normal[(i, j)])
        .sum();
    Some(Summit {
        height: height + zero,
        at: [r0 as f64 + y, c0 as f64 + x],
        gain: gain.max(0.0).sqrt(),
    })
}
