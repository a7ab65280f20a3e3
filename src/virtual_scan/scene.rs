//! Pieces of a surface, and the scene they make together.

use super::random::CorrelatedLine;
use crate::error::{Error, ErrorKind, Result};
use crate::tip::model::Model;

/// Something that stands on the base: its height in nm above the base at a position in nm, 0 where
/// it is not. Any closure of that kind is one.
pub trait Feature: Send + Sync {
    /// Height above the base, nm.
    fn height(&self, x: f64, y: f64) -> f64;
}

impl<F: Fn(f64, f64) -> f64 + Send + Sync> Feature for F {
    fn height(&self, x: f64, y: f64) -> f64 {
        self(x, y)
    }
}

/// A base with features on it: `z = base + max(0, features)`. The base is flat at 0 unless given.
#[derive(Default)]
pub struct Scene {
    base: Option<Box<dyn Feature>>,
    features: Vec<Box<dyn Feature>>,
}

impl std::fmt::Debug for Scene {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "Scene of {} features", self.features.len())
    }
}

impl Scene {
    /// A flat at 0.
    pub fn new() -> Self {
        Self::default()
    }

    /// Replaces the base, with a rough surface say.
    #[must_use]
    pub fn on(mut self, base: impl Feature + 'static) -> Self {
        self.base = Some(Box::new(base));
        self
    }

    /// Adds a feature.
    #[must_use]
    pub fn with(mut self, feature: impl Feature + 'static) -> Self {
        self.features.push(Box::new(feature));
        self
    }

    /// Surface height at a position, all nm.
    pub fn height(&self, x: f64, y: f64) -> f64 {
        let base = self.base.as_ref().map_or(0.0, |b| b.height(x, y));
        let on_it = self.features.iter().map(|f| f.height(x, y));
        base + on_it.fold(0.0, f64::max)
    }
}

/// Height of a wall's profile at `inside` nm inwards of its edge at mid-height (negative:
/// outwards): 0 below, `height` above, between them a face at `angle` degrees from the horizontal
/// (90 = vertical) with its upper corner rounded by `corner_radius`.
fn wall(inside: f64, height: f64, angle: f64, corner_radius: f64) -> f64 {
    let (sin, cos) = angle.to_radians().sin_cos();
    let run = if angle >= 90.0 {
        0.0
    } else {
        height * cos / sin
    };
    // Inwards of the upper corner where face and top would meet.
    let inside_top = inside - run / 2.0;
    let tangent = corner_radius * (angle.min(90.0) / 2.0).to_radians().tan();
    if inside_top >= tangent {
        height
    } else if inside_top + run < 0.0 {
        0.0
    } else if corner_radius > 0.0 && inside_top >= -tangent * cos.max(0.0) {
        let across = tangent - inside_top;
        let arc = (corner_radius * corner_radius - across * across).max(0.0);
        (height - corner_radius + arc.sqrt()).max(0.0)
    } else {
        height * (inside_top + run) / run
    }
}

/// Random waviness of an edge along its length.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct EdgeRoughness {
    /// Standard deviation of the edge's position, nm.
    pub sigma_nm: f64,
    /// Correlation length along the edge, nm (correlation `exp(-(d / length)^2)`).
    pub length_nm: f64,
    /// Seed; every edge gets its own stream.
    pub seed: u64,
}

/// Parallel lines along y: a grating, or one line.
#[derive(Debug, Clone, PartialEq)]
pub struct Lines {
    /// Centre of the first line, nm.
    pub first_nm: f64,
    /// Centre-to-centre distance, nm.
    pub pitch_nm: f64,
    /// How many.
    pub count: usize,
    /// Width at mid-height, nm.
    pub width_nm: f64,
    /// Height, nm.
    pub height_nm: f64,
    /// Angle of the walls from the horizontal, degrees; 90 = vertical, which is the most a height
    /// map can hold.
    pub wall_angle_deg: f64,
    /// Radius of the upper corners, nm; 0 = sharp.
    pub corner_radius_nm: f64,
    /// Outward displacement of every edge along y: left and right of each line; empty = straight.
    edges: Vec<[CorrelatedLine; 2]>,
}

impl Lines {
    /// Straight lines with vertical walls and sharp corners.
    pub fn new(first_nm: f64, pitch_nm: f64, count: usize, width_nm: f64, height_nm: f64) -> Self {
        Self {
            first_nm,
            pitch_nm,
            count,
            width_nm,
            height_nm,
            wall_angle_deg: 90.0,
            corner_radius_nm: 0.0,
            edges: Vec::new(),
        }
    }

    /// Sloped walls; the width stays that at mid-height.
    #[must_use]
    pub fn walls(mut self, angle_deg: f64, corner_radius_nm: f64) -> Self {
        self.wall_angle_deg = angle_deg;
        self.corner_radius_nm = corner_radius_nm;
        self
    }

    /// Rough edges over `from..to` along y, nm. Errors as [`CorrelatedLine::new`].
    pub fn rough(mut self, roughness: EdgeRoughness, from: f64, to: f64) -> Result<Self> {
        let EdgeRoughness {
            sigma_nm,
            length_nm,
            seed,
        } = roughness;
        let edge = |number: u64| {
            let seed = seed.wrapping_mul(1009).wrapping_add(number);
            CorrelatedLine::new(sigma_nm, length_nm, from, to, seed)
        };
        self.edges = (0..self.count as u64)
            .map(|line| Ok([edge(2 * line)?, edge(2 * line + 1)?]))
            .collect::<Result<_>>()?;
        Ok(self)
    }

    /// Centre of line `index` (from 0), nm.
    pub fn centre(&self, index: usize) -> f64 {
        self.first_nm + index as f64 * self.pitch_nm
    }

    /// Outward displacement `[left, right]` of the edges of line `index` at `y`, nm.
    pub fn displacement(&self, index: usize, y: f64) -> [f64; 2] {
        match self.edges.get(index) {
            Some([left, right]) => [left.at(y), right.at(y)],
            None => [0.0; 2],
        }
    }

    /// True width of line `index` at `y` and the given height fraction, nm, the rounding of the
    /// corners left out.
    pub fn width_at(&self, index: usize, y: f64, fraction: f64) -> f64 {
        let slope = if self.wall_angle_deg >= 90.0 {
            0.0
        } else {
            1.0 / self.wall_angle_deg.to_radians().tan()
        };
        let [left, right] = self.displacement(index, y);
        self.width_nm + left + right + (1.0 - 2.0 * fraction) * self.height_nm * slope
    }

    fn one(&self, index: usize, x: f64, y: f64) -> f64 {
        let from_centre = x - self.centre(index);
        let half = self.width_nm / 2.0;
        let side = usize::from(from_centre > 0.0);
        let displacement = self.edges.get(index).map_or(0.0, |e| e[side].at(y));
        wall(
            half + displacement - from_centre.abs(),
            self.height_nm,
            self.wall_angle_deg,
            self.corner_radius_nm,
        )
    }
}

impl Feature for Lines {
    fn height(&self, x: f64, y: f64) -> f64 {
        if self.count == 0 {
            return 0.0;
        }
        // The nearest line decides; wide walls may reach half-way over the gap.
        let nearest = ((x - self.first_nm) / self.pitch_nm).round();
        let nearest = nearest.clamp(0.0, (self.count - 1) as f64);
        self.one(nearest as usize, x, y)
    }
}

/// A single step, high on the right.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Step {
    /// Position of the edge at mid-height, nm.
    pub at_nm: f64,
    /// Height, nm.
    pub height_nm: f64,
    /// Angle of the wall from the horizontal, degrees; 90 = vertical.
    pub wall_angle_deg: f64,
}

impl Feature for Step {
    fn height(&self, x: f64, _y: f64) -> f64 {
        wall(x - self.at_nm, self.height_nm, self.wall_angle_deg, 0.0)
    }
}

/// A flat-topped block with vertical walls, edges along x and y.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Block {
    /// Left and top, nm.
    pub from: [f64; 2],
    /// Right and bottom, nm.
    pub to: [f64; 2],
    /// Height, nm.
    pub height_nm: f64,
}

impl Feature for Block {
    fn height(&self, x: f64, y: f64) -> f64 {
        let inside =
            (self.from[0]..=self.to[0]).contains(&x) && (self.from[1]..=self.to[1]).contains(&y);
        if inside { self.height_nm } else { 0.0 }
    }
}

/// A round feature.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum BumpShape {
    /// A cone with a spherical apex.
    Spike {
        /// Apex radius, nm.
        radius: f64,
        /// Between axis and flank, degrees.
        half_angle: f64,
        /// Height of the apex, nm.
        height: f64,
    },
    /// A paraboloid.
    Paraboloid {
        /// Apex radius of curvature, nm.
        radius: f64,
        /// Height of the apex, nm.
        height: f64,
    },
    /// A sphere lying on the base; what stands under its equator is hidden from above.
    Sphere {
        /// Radius, nm.
        radius: f64,
    },
}

impl BumpShape {
    /// Height at the lateral distance `d` from the axis, nm, 0 beside it.
    fn height(self, d: f64) -> f64 {
        match self {
            Self::Spike {
                radius,
                half_angle,
                height,
            } => (height - Model::SphereCone { radius, half_angle }.height(d, 0.0)).max(0.0),
            Self::Paraboloid { radius, height } => {
                (height - Model::Paraboloid { radius }.height(d, 0.0)).max(0.0)
            }
            Self::Sphere { radius } if d <= radius => radius + (radius * radius - d * d).sqrt(),
            Self::Sphere { .. } => 0.0,
        }
    }

    /// Radius of its foot on the base, nm.
    pub fn foot(self) -> f64 {
        match self {
            Self::Spike {
                radius,
                half_angle,
                height,
            } => crate::tip::model::sphere_cone_half_width(radius, half_angle, height),
            Self::Paraboloid { radius, height } => (2.0 * radius * height).sqrt(),
            Self::Sphere { radius } => radius,
        }
    }
}

/// A round feature at its place.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Bump {
    /// Position of the axis, nm.
    pub at: [f64; 2],
    /// Shape.
    pub shape: BumpShape,
}

/// Many round features, found quickly by position.
#[derive(Debug, Clone)]
pub struct Bumps {
    bumps: Vec<Bump>,
    from: [f64; 2],
    cell: f64,
    columns: usize,
    rows: usize,
    /// Which bumps stand in each cell.
    cells: Vec<Vec<u32>>,
}

impl Bumps {
    /// Errors of kind `Data` when a position or a size is not finite or they spread over more than
    /// 1e7 feet.
    pub fn new(bumps: Vec<Bump>) -> Result<Self> {
        let foot = |b: &Bump| b.shape.foot();
        let cell = bumps.iter().map(foot).fold(1.0, f64::max);
        let mut from = [f64::INFINITY; 2];
        let mut to = [f64::NEG_INFINITY; 2];
        for bump in &bumps {
            for axis in 0..2 {
                from[axis] = from[axis].min(bump.at[axis] - foot(bump));
                to[axis] = to[axis].max(bump.at[axis] + foot(bump));
            }
        }
        if bumps.is_empty() {
            (from, to) = ([0.0; 2], [0.0; 2]);
        }
        let count = |axis: usize| ((to[axis] - from[axis]) / cell).floor() + 1.0;
        let spread = count(0) * count(1);
        // Written so that NaN fails.
        if !(0.0..=1e7).contains(&spread) || !bumps.iter().all(|b| foot(b) >= 0.0) {
            return Err(Error::new(
                ErrorKind::Data,
                "round features with positions or sizes that cannot be used",
            )
            .remedy("Give finite positions, and radii, angles and heights of 0 or more"));
        }
        let (columns, rows) = (count(0) as usize, count(1) as usize);
        let mut cells = vec![Vec::new(); columns * rows];
        for (i, bump) in bumps.iter().enumerate() {
            let span = |axis: usize, count: usize| {
                let place =
                    |p: f64| (((p - from[axis]) / cell).floor().max(0.0) as usize).min(count - 1);
                place(bump.at[axis] - foot(bump))..=place(bump.at[axis] + foot(bump))
            };
            for r in span(1, rows) {
                for c in span(0, columns) {
                    cells[r * columns + c].push(i as u32);
                }
            }
        }
        Ok(Self {
            bumps,
            from,
            cell,
            columns,
            rows,
            cells,
        })
    }

    /// The same shape at every position.
    pub fn all(shape: BumpShape, positions: &[[f64; 2]]) -> Result<Self> {
        Self::new(positions.iter().map(|&at| Bump { at, shape }).collect())
    }
}

impl Feature for Bumps {
    fn height(&self, x: f64, y: f64) -> f64 {
        let column = ((x - self.from[0]) / self.cell).floor();
        let row = ((y - self.from[1]) / self.cell).floor();
        let inside = column >= 0.0 && row >= 0.0;
        if !inside || column >= self.columns as f64 || row >= self.rows as f64 {
            return 0.0;
        }
        self.cells[row as usize * self.columns + column as usize]
            .iter()
            .map(|&i| {
                let bump = &self.bumps[i as usize];
                bump.shape.height((x - bump.at[0]).hypot(y - bump.at[1]))
            })
            .fold(0.0, f64::max)
    }
}
