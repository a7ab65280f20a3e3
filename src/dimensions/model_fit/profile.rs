//! The forward model in one dimension: a cross-section of straight pieces, and its scan by a tip.
//!
//! Along a straight line every cross-section is the same, so the tip acts by its silhouette: at
//! each offset across the line the highest point of the tip along the line. Both are polylines;
//! the greatest sum of two polylines is at a vertex of one of them, so the dilation is exact and
//! continuous in the positions of the vertices: no grid stands between the parameters and the fit.

use crate::dimensions::{Axis, wall};
use crate::tip::Tip;

/// A tip's silhouette: vertices of heights `<= 0`, offsets from the apex increasing.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Silhouette {
    x: Vec<f64>,
    z: Vec<f64>,
    /// The highest of the vertices from each on, away from the apex.
    outer: Vec<f64>,
    /// The first vertex in or after each of equal stretches between the ends.
    first_in: Vec<usize>,
}

/// How the silhouette runs between the tip's cells.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Between {
    /// On a smooth curve.
    Curved,
    /// Straight: the sharpest that a convex tip can be.
    Straight,
}

impl Silhouette {
    /// The highest point along the line at each offset across it, in pixels along `axis`.
    pub fn of(tip: &Tip, axis: Axis, between: Between) -> Self {
        let (tops, pitch) = wall::tops(tip, axis);
        let centre = (tops.len() / 2) as f64;
        let cells = tops
            .iter()
            .enumerate()
            .map(|(c, &top)| ((c as f64 - centre) * pitch, f64::from(top)));
        Self::through(cells.collect(), between)
    }

    /// The tip as a round feature meets it along an azimuth (degrees): its cells within half of
    /// `sector` (degrees) to each side, by their distance from the apex, and those opposite.
    pub fn cut(tip: &Tip, azimuth_deg: f64, sector: f64, between: Between) -> Self {
        let shape = tip.shape();
        let pitch = tip.pitch();
        let (rows, columns) = shape.dim();
        let (sin, cos) = azimuth_deg.to_radians().sin_cos();
        let narrow = (sector / 2.0).to_radians().tan();
        let width = pitch.x.min(pitch.y) / 2.0;
        // Means over rings of half a pixel.
        let mut rings = std::collections::BTreeMap::<i64, [f64; 3]>::new();
        for ((r, c), &p) in shape.indexed_iter() {
            let dx = (c as f64 - (columns / 2) as f64) * pitch.x;
            let dy = (r as f64 - (rows / 2) as f64) * pitch.y;
            let (along, across) = (dx * cos + dy * sin, dy * cos - dx * sin);
            if p.is_finite() && across.abs() <= along.abs() * narrow + 1e-9 {
                let distance = dx.hypot(dy).copysign(along);
                let ring = rings.entry((distance / width).round() as i64).or_default();
                *ring = [ring[0] + distance, ring[1] + f64::from(p), ring[2] + 1.0];
            }
        }
        let cells = rings.values().map(|r| (r[0] / r[2], r[1] / r[2]));
        Self::through(cells.collect(), between)
    }

    /// Through cells in order; those outside the tip end it.
    fn through(cells: Vec<(f64, f64)>, between: Between) -> Self {
        let apex = cells.iter().position(|c| c.0 >= -1e-9).unwrap_or(0);
        let inside = |c: &&(f64, f64)| c.1.is_finite();
        let after: Vec<(f64, f64)> = cells[apex..].iter().take_while(inside).copied().collect();
        let before = cells[..apex].iter().rev().take_while(inside).copied();
        let mut points: Vec<(f64, f64)> = before.collect();
        points.reverse();
        points.extend(after);
        if between == Between::Curved {
            points = curved(&points);
        }
        let (x, z) = points.into_iter().unzip();
        Self::new(x, z)
    }

    fn new(x: Vec<f64>, z: Vec<f64>) -> Self {
        let mut outer = z.clone();
        let apex = x.partition_point(|&v| v < 0.0);
        for i in 1..apex {
            outer[i] = outer[i].max(outer[i - 1]);
        }
        for i in (apex + 1..z.len()).rev() {
            outer[i - 1] = outer[i - 1].max(outer[i]);
        }
        let stretches = 2 * x.len();
        let (from, to) = (x.first().copied(), x.last().copied());
        let width = from
            .zip(to)
            .map_or(0.0, |(a, b)| (b - a) / stretches as f64);
        let first_in = (0..stretches)
            .map(|k| x.partition_point(|&v| v < x[0] + k as f64 * width))
            .collect();
        Self {
            x,
            z,
            outer,
            first_in,
        }
    }

    /// The first vertex at `offset` or after it.
    fn first_from(&self, offset: f64) -> usize {
        let (Some(&start), Some(&end)) = (self.x.first(), self.x.last()) else {
            return 0;
        };
        let stretch = (offset - start) / (end - start) * self.first_in.len() as f64;
        // Rounding may put it into the next stretch: begin one before.
        let stretch = (stretch as usize)
            .saturating_sub(1)
            .min(self.first_in.len() - 1);
        let mut i = self.first_in[stretch];
        while self.x.get(i).is_some_and(|&x| x < offset) {
            i += 1;
        }
        i
    }

    /// How far it reaches to the wider side, nm.
    pub fn reach(&self) -> f64 {
        let ends = self.x.first().into_iter().chain(self.x.last());
        ends.fold(0.0, |a, b| a.max(b.abs()))
    }

    /// Lateral slope of one side (nm along per nm of height) between half of `depth` and all of it,
    /// or of the tip's own depth where that is less; 0 for a tip of one vertex.
    pub fn flank(&self, positive: bool, depth: f64) -> f64 {
        let side = |x: &f64| if positive { *x >= 0.0 } else { *x <= 0.0 };
        let mut points: Vec<(f64, f64)> = self
            .x
            .iter()
            .zip(&self.z)
            .filter(|(x, _)| side(x))
            .map(|(x, z)| (-z, x.abs()))
            .collect();
        points.sort_by(|a, b| a.0.total_cmp(&b.0));
        let depth = depth.min(points.last().map_or(0.0, |p| p.0));
        let reach = |depth: f64| {
            let after = points.partition_point(|p| p.0 <= depth);
            match (after.checked_sub(1), points.get(after)) {
                (Some(i), Some(&(d, x))) => {
                    let (da, xa) = points[i];
                    xa + (x - xa) * (depth - da) / (d - da)
                }
                (Some(i), None) => points[i].1,
                _ => 0.0,
            }
        };
        if depth > 0.0 {
            2.0 * (reach(depth) - reach(depth / 2.0)) / depth
        } else {
            0.0
        }
    }

    /// Height at `offset`, `-inf` outside.
    fn at(&self, offset: f64) -> f64 {
        let after = self.first_from(offset);
        let Some(&xb) = self.x.get(after) else {
            return f64::NEG_INFINITY;
        };
        if xb == offset {
            return self.z[after];
        }
        match after.checked_sub(1) {
            Some(before) => {
                let (xa, za) = (self.x[before], self.z[before]);
                za + (self.z[after] - za) * (offset - xa) / (xb - xa)
            }
            None => f64::NEG_INFINITY,
        }
    }
}

/// Points added between `points` on the curve whose direction at each point is that of its two
/// chords, each weighted by the other's length (a circle through three points has it so to third
/// order); cubic Hermite over the chord. The curve never leaves the box of its two ends.
fn curved(points: &[(f64, f64)]) -> Vec<(f64, f64)> {
    let n = points.len();
    if n < 3 {
        return points.to_vec();
    }
    let chord = |i: usize| {
        let (dx, dz) = (points[i + 1].0 - points[i].0, points[i + 1].1 - points[i].1);
        (dz.atan2(dx), dx.hypot(dz))
    };
    let angle = |i: usize| {
        if i == 0 || i == n - 1 {
            return chord(i.min(n - 2)).0;
        }
        let ((before, a), (after, b)) = (chord(i - 1), chord(i));
        (before * b + after * a) / (a + b)
    };
    let mut out = vec![points[0]];
    for i in 0..n - 1 {
        let (from, to) = (points[i], points[i + 1]);
        let (direction, length) = chord(i);
        let (start, end) = (angle(i), angle(i + 1));
        // Sagitta of the arc: a vertex for each hundredth of a nanometre or so.
        let sagitta = length * (start - direction).abs().max((end - direction).abs()) / 4.0;
        let pieces = (sagitta / 0.005).sqrt().ceil().clamp(1.0, 8.0) as usize;
        for k in 1..pieces {
            let t = k as f64 / pieces as f64;
            let (a, b) = (t * (1.0 - t) * (1.0 - t), t * t * (t - 1.0));
            let blend = t * t * (3.0 - 2.0 * t);
            let x = from.0 + blend * (to.0 - from.0) + length * (a * start.cos() + b * end.cos());
            let z = from.1 + blend * (to.1 - from.1) + length * (a * start.sin() + b * end.sin());
            let last = out[out.len() - 1].0;
            let z = z.clamp(from.1.min(to.1), from.1.max(to.1));
            if x > last && x < to.0 {
                out.push((x, z));
            }
        }
        out.push(to);
    }
    out
}

/// A cross-section: vertices with positions that do not decrease; beyond its ends it goes on level.
#[derive(Debug, Clone, Default, PartialEq)]
pub(super) struct Section {
    x: Vec<f64>,
    z: Vec<f64>,
}

impl Section {
    /// Adds a vertex; one before the last is moved to the last's position.
    pub fn push(&mut self, x: f64, z: f64) {
        let x = self.x.last().map_or(x, |&last| x.max(last));
        self.x.push(x);
        self.z.push(z);
    }

    /// Height at `x`; the later vertex at a jump.
    fn at(&self, x: f64) -> f64 {
        let after = self.x.partition_point(|&v| v <= x);
        self.between(after, x)
    }

    fn between(&self, after: usize, x: f64) -> f64 {
        if after == 0 {
            return self.z[0];
        }
        if after == self.x.len() {
            return self.z[after - 1];
        }
        let (xa, xb) = (self.x[after - 1], self.x[after]);
        let (za, zb) = (self.z[after - 1], self.z[after]);
        za + (zb - za) * (x - xa) / (xb - xa)
    }

    /// Its scan by `tip`.
    pub fn scanned_by<'a>(&'a self, tip: &'a Silhouette) -> Scanned<'a> {
        let mut highest_first: Vec<usize> = (0..self.x.len()).collect();
        highest_first.sort_by(|&a, &b| self.z[b].total_cmp(&self.z[a]));
        Scanned {
            section: self,
            tip,
            reach: tip.reach(),
            highest_first,
        }
    }
}

/// A cross-section, scanned by a tip.
pub(super) struct Scanned<'a> {
    section: &'a Section,
    tip: &'a Silhouette,
    reach: f64,
    highest_first: Vec<usize>,
}

impl Scanned<'_> {
    /// What the tip records at `x`: `max over u of S(x + u) + p(u)`.
    pub fn at(&self, x: f64) -> f64 {
        let (section, tip) = (self.section, self.tip);
        let first = section.x.partition_point(|&v| v < x - self.reach);
        let last = section.x.partition_point(|&v| v <= x + self.reach);
        // Straight within the tip's reach, it is level but for the tilt left in the scan.
        let mut best = section.at(x);
        if first == last {
            return best;
        }
        // No part of the tip is higher than its apex: what is no higher than the best so far cannot
        // lift it.
        for &v in &self.highest_first {
            if section.z[v] <= best {
                break;
            }
            if (first..last).contains(&v) {
                best = best.max(section.z[v] + tip.at(section.x[v] - x));
            }
        }
        for after in first..=last {
            let ends = [after.saturating_sub(1), after.min(section.x.len() - 1)];
            let [from, to] = ends.map(|v| section.x[v] - x);
            let top = section.z[ends[0]].max(section.z[ends[1]]);
            if top <= best {
                continue;
            }
            // Beyond its ends the section goes on level.
            let start = if after == 0 { 0 } else { tip.first_from(from) };
            let beyond = after == section.x.len();
            // The highest of the tip over this piece, and over all beyond it.
            let nearest = match (from >= 0.0 && after > 0, to <= 0.0 && !beyond) {
                (true, _) => tip.outer.get(start).copied(),
                (_, true) => tip.first_from(to).checked_sub(1).map(|i| tip.outer[i]),
                _ => Some(0.0),
            };
            if !nearest.is_some_and(|p| p + top > best) {
                continue;
            }
            for (&u, &p) in tip.x[start..].iter().zip(&tip.z[start..]) {
                if u > to && !beyond {
                    break;
                }
                if p + top > best {
                    best = best.max(section.between(after, x + u) + p);
                }
            }
        }
        best
    }
}

/// One wall seen from its upper virtual corner outwards and downwards.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Wall {
    /// Height, nm.
    pub height: f64,
    /// Lateral extent from top to foot, nm, `>= 0`.
    pub run: f64,
    /// Radius of the upper, convex corner, nm.
    pub upper: f64,
    /// Radius of the lower, concave corner, nm.
    pub lower: f64,
}

/// Straight pieces that stand for an arc.
const PIECES: usize = 12;

impl Wall {
    /// Angle from the horizontal, radians.
    pub fn angle(&self) -> f64 {
        self.height.atan2(self.run)
    }

    /// Distances of the arcs' ends from the virtual corners; together never longer than the wall.
    fn tangents(&self) -> (f64, f64) {
        let half = (self.angle() / 2.0).tan();
        let (a, b) = (self.upper * half, self.lower * half);
        let room = self.height.hypot(self.run) / (a + b).max(1e-12);
        (a * room.min(1.0), b * room.min(1.0))
    }

    /// Vertices `(outwards, height above the foot)` from the upper to the lower level.
    pub fn vertices(&self) -> Vec<(f64, f64)> {
        let angle = self.angle();
        let half = (angle / 2.0).tan().max(1e-12);
        let (above, below) = self.tangents();
        let (upper, lower) = (above / half, below / half);
        let mut vertices = Vec::with_capacity(2 * PIECES + 2);
        let phi = |i: usize| angle * i as f64 / PIECES as f64;
        if upper > 0.0 {
            vertices.extend((0..=PIECES).map(|i| {
                let (sin, cos) = phi(i).sin_cos();
                (upper * sin - above, self.height - upper * (1.0 - cos))
            }));
        } else {
            vertices.push((0.0, self.height));
        }
        if lower > 0.0 {
            vertices.extend((0..=PIECES).rev().map(|i| {
                let (sin, cos) = phi(i).sin_cos();
                (self.run + below - lower * sin, lower * (1.0 - cos))
            }));
        } else {
            vertices.push((self.run, 0.0));
        }
        vertices
    }

    /// How far out from the upper virtual corner the wall stands at a height fraction.
    pub fn outwards(&self, fraction: f64) -> f64 {
        let z = fraction * self.height;
        let vertices = self.vertices();
        let after = vertices
            .iter()
            .position(|v| v.1 <= z)
            .unwrap_or(vertices.len() - 1)
            .max(1);
        let ((sa, za), (sb, zb)) = (vertices[after - 1], vertices[after]);
        if za > zb {
            sa + (sb - sa) * (za - z) / (za - zb)
        } else {
            sb
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;
    use crate::tip::model::{Model, sphere_cone_half_width};

    fn tip(radius: f64, half_angle: f64, pitch: f64) -> Silhouette {
        let tip = Model::SphereCone { radius, half_angle }
            .sample(81.0, Pitch::square(pitch))
            .unwrap();
        Silhouette::of(&tip, Axis::X, Between::Curved)
    }

    #[test]
    fn the_flank_has_the_cones_slope() {
        let tip = tip(5.0, 15.0, 0.5);
        for positive in [true, false] {
            let slope = tip.flank(positive, 40.0);
            assert!((slope - 15f64.to_radians().tan()).abs() < 0.01, "{slope}");
        }
    }

    /// Coarse cells of a sphere-cone: the curve between them against the shape itself.
    #[test]
    fn the_curve_between_cells_is_the_tip() {
        let model = Model::SphereCone {
            radius: 8.0,
            half_angle: 8.0,
        };
        let tip = model.sample(31.0, Pitch::square(1.0)).unwrap();
        let worst = |between| {
            let silhouette = Silhouette::of(&tip, Axis::X, between);
            (-140..=140)
                .map(|i| 0.1 * f64::from(i))
                .map(|x| {
                    // Distance across the flank, not along it.
                    let slope = (model.height(x + 1e-4, 0.0) - model.height(x, 0.0)) / 1e-4;
                    (silhouette.at(x) + model.height(x, 0.0)).abs() / slope.hypot(1.0)
                })
                .fold(0.0, f64::max)
        };
        let (curved, straight) = (worst(Between::Curved), worst(Between::Straight));
        assert!(
            curved < 0.12 && straight > 1.5 * curved,
            "{curved} {straight}"
        );
    }

    /// A line of vertical walls: `W(f) = w + 2 w_t((1 - f) h)`, closed form.
    #[test]
    fn the_scan_of_a_line_has_the_closed_form() {
        let mut line = Section::default();
        for (x, z) in [(-50.0, 0.0), (-50.0, 50.0), (50.0, 50.0), (50.0, 0.0)] {
            line.push(x, z);
        }
        let tip = tip(10.0, 15.0, 0.25);
        for depth in [5.0, 25.0, 45.0] {
            let x = 50.0 + sphere_cone_half_width(10.0, 15.0, depth);
            let line = line.scanned_by(&tip);
            let z = line.at(x);
            assert!((z - (50.0 - depth)).abs() < 0.02, "{depth}: {z}");
            assert!((line.at(-x) - z).abs() < 1e-9);
        }
        assert_eq!(line.scanned_by(&tip).at(0.0), 50.0);
        assert_eq!(line.scanned_by(&tip).at(200.0), 0.0);
    }

    /// The dilation against the plain maximum over a fine grid, for a tip without symmetry.
    #[test]
    fn the_vertices_hold_the_maximum() {
        let mut section = Section::default();
        for (x, z) in [
            (0.0, 0.0),
            (8.0, 9.0),
            (11.0, 9.5),
            (11.0, 2.0),
            (19.0, 3.0),
            (30.0, 1.0),
        ] {
            section.push(x, z);
        }
        let tip = Silhouette::new(
            vec![-4.5, -3.0, -1.5, 0.0, 1.5, 3.0],
            vec![-9.0, -4.0, -2.5, 0.0, -0.3, -6.0],
        );
        for i in 0..90 {
            let x = -5.0 + 0.437 * f64::from(i);
            let plain = (0..=9000)
                .map(|k| -4.5 + 0.001 * f64::from(k))
                .map(|u| section.at(x + u) + tip.at(u))
                .fold(f64::NEG_INFINITY, f64::max);
            let exact = section.scanned_by(&tip).at(x);
            assert!(
                (exact - plain).abs() < 0.01 && exact >= plain - 1e-9,
                "{x}: {exact} {plain}"
            );
        }
    }

    #[test]
    fn a_rounded_wall_meets_its_tangents() {
        let wall = Wall {
            height: 30.0,
            run: 10.0,
            upper: 6.0,
            lower: 4.0,
        };
        let vertices = wall.vertices();
        assert!((vertices[0].1 - 30.0).abs() < 1e-12);
        assert!(vertices.last().unwrap().1.abs() < 1e-12);
        for pair in vertices.windows(2) {
            assert!(pair[1].0 >= pair[0].0 && pair[1].1 <= pair[0].1 + 1e-12);
        }
        // On the straight part the radii change nothing.
        assert!((wall.outwards(0.5) - 5.0).abs() < 1e-9);
        // Radii larger than the wall are shortened, not folded over.
        let round = Wall {
            upper: 300.0,
            lower: 300.0,
            ..wall
        };
        assert!((round.outwards(0.5) - 5.0).abs() < 0.05);
        let sharp = Wall {
            upper: 0.0,
            lower: 0.0,
            run: 0.0,
            height: 30.0,
        };
        assert_eq!(sharp.outwards(0.9), 0.0);
    }
}
