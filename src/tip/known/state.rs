//! Everything the image of a characterizer depends on: tip, certified values, pose.

use super::Formula;
use super::image::{Corner, faces_on_cap, section_slope};
use super::shape::{Quantity, Shape};

/// Place and height of one sphere or spike.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Place {
    pub x: f64,
    pub y: f64,
    pub top: f64,
}

/// A thing that the fit may move.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Parameter {
    /// Apex radius of the tip, nm.
    Radius,
    /// Half-angle of the faces marked, degrees.
    HalfAngle([bool; 4]),
    Certified(Quantity),
    /// Phase of the ridges or place of the step, nm.
    Across,
    /// Direction across, degrees from +x.
    Turn,
    Base,
    SlopeX,
    SlopeY,
    PlaceX(usize),
    PlaceY(usize),
    Top(usize),
}

/// Lengths in nm, angles in degrees; positions from the middle of the scan.
#[derive(Debug, Clone)]
pub(super) struct State {
    pub formula: Formula,
    pub radius: f64,
    /// Half-angles towards -x, +x, -y, +y; all equal for a round tip.
    pub faces: [f64; 4],
    pub shape: Shape,
    pub width: f64,
    pub height: f64,
    /// `None` = a single ridge.
    pub pitch: Option<f64>,
    pub corner: Corner,
    pub across: f64,
    pub turn: f64,
    pub base: f64,
    pub slope: [f64; 2],
    /// Spheres and spikes.
    pub places: Vec<Place>,
    /// Numbers of the first and last ridge that stand, counted from the one at `across`.
    pub ridges: [i64; 2],
}

/// What shows at a position.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Seen {
    Base,
    /// The straight shape, or the feature of that number.
    Feature(usize),
}

impl State {
    /// The certified values, a tip yet to be found, no pose.
    pub fn new(shape: Shape, formula: Formula) -> Self {
        let mut state = Self {
            formula,
            radius: 0.0,
            faces: [20.0; 4],
            shape,
            width: f64::INFINITY,
            height: 0.0,
            pitch: None,
            corner: Corner {
                radius: 0.0,
                wall: 90.0,
            },
            across: 0.0,
            turn: 0.0,
            base: 0.0,
            slope: [0.0; 2],
            places: Vec::new(),
            ridges: [0, 0],
        };
        for (quantity, certified) in shape.certified() {
            state.set(Parameter::Certified(quantity), certified.value);
        }
        state
    }

    pub fn get(&self, parameter: Parameter) -> f64 {
        match parameter {
            Parameter::Radius => self.radius,
            Parameter::HalfAngle(which) => {
                let first = which.iter().position(|w| *w).unwrap_or(0);
                self.faces[first]
            }
            Parameter::Certified(quantity) => match quantity {
                Quantity::Width => self.width,
                Quantity::Height => self.height,
                Quantity::Pitch => self.pitch.unwrap_or(f64::INFINITY),
                Quantity::WallAngle => self.corner.wall,
                Quantity::CornerRadius | Quantity::Radius => self.corner.radius,
                Quantity::Diameter => 2.0 * self.corner.radius,
                Quantity::HalfAngle => 90.0 - self.corner.wall,
            },
            Parameter::Across => self.across,
            Parameter::Turn => self.turn,
            Parameter::Base => self.base,
            Parameter::SlopeX => self.slope[0],
            Parameter::SlopeY => self.slope[1],
            Parameter::PlaceX(k) => self.places[k].x,
            Parameter::PlaceY(k) => self.places[k].y,
            Parameter::Top(k) => self.places[k].top,
        }
    }

    pub fn set(&mut self, parameter: Parameter, value: f64) {
        match parameter {
            Parameter::Radius => self.radius = value,
            Parameter::HalfAngle(which) => {
                for (face, _) in self.faces.iter_mut().zip(which).filter(|(_, w)| *w) {
                    *face = value;
                }
            }
            Parameter::Certified(quantity) => match quantity {
                Quantity::Width => self.width = value,
                Quantity::Height => self.height = value,
                Quantity::Pitch => self.pitch = Some(value),
                Quantity::WallAngle => self.corner.wall = value,
                Quantity::CornerRadius | Quantity::Radius => self.corner.radius = value,
                Quantity::Diameter => {
                    self.corner.radius = value / 2.0;
                    self.height = value;
                    for place in &mut self.places {
                        place.top = value;
                    }
                }
                Quantity::HalfAngle => self.corner.wall = 90.0 - value,
            },
            Parameter::Across => self.across = value,
            Parameter::Turn => self.turn = value,
            Parameter::Base => self.base = value,
            Parameter::SlopeX => self.slope[0] = value,
            Parameter::SlopeY => self.slope[1] = value,
            Parameter::PlaceX(k) => self.places[k].x = value,
            Parameter::PlaceY(k) => self.places[k].y = value,
            Parameter::Top(k) => self.places[k].top = value,
        }
    }

    /// Unit vector across ridges, or up the step.
    pub fn normal(&self) -> [f64; 2] {
        let (sin, cos) = self.turn.to_radians().sin_cos();
        [cos, sin]
    }

    pub fn plane(&self, x: f64, y: f64) -> f64 {
        self.base + self.slope[0] * x + self.slope[1] * y
    }

    /// Distance from the middle of a ridge, or below a step from its edge at mid-height (negative:
    /// above), to the centre of the corner's arc.
    pub fn shoulder(&self) -> f64 {
        let angle = self.corner.wall.to_radians();
        let half_run = 0.5 * self.height * angle.cos() / angle.sin();
        let tangent = self.corner.radius * (angle / 2.0).tan();
        match self.shape {
            Shape::Ridges { .. } => self.width / 2.0 - half_run - tangent,
            _ => -half_run - tangent,
        }
    }

    /// Half-angle of the tip's section towards the unit vector `n`, degrees.
    pub fn half_angle(&self, n: [f64; 2]) -> f64 {
        match self.formula {
            Formula::Pyramid => (1.0 / section_slope(self.faces, n)).atan().to_degrees(),
            _ => self.faces[0],
        }
    }

    /// Ready to be asked for many positions.
    pub fn image(&self) -> Image<'_> {
        let n = self.normal();
        let limit = if self.corner.wall >= 90.0 {
            f64::INFINITY
        } else {
            self.corner.wall.to_radians().tan()
        };
        Image {
            state: self,
            normal: n,
            shoulder: self.shoulder(),
            towards: [self.half_angle([-n[0], -n[1]]), self.half_angle(n)],
            limit,
            reach: self.places.iter().map(|p| self.reach(p.top)).collect(),
        }
    }

    /// Farther than this from its axis a round feature's image is below the base.
    fn reach(&self, top: f64) -> f64 {
        let angle = self.faces.iter().copied().fold(0.0, f64::max);
        let angle = angle.max(90.0 - self.corner.wall).to_radians();
        let round = self.corner.radius + self.radius;
        let beyond = match self.formula {
            Formula::Paraboloid => {
                (2.0 * round * top.max(0.0)).sqrt()
                    + top.max(0.0) * (90.0 - self.corner.wall).to_radians().tan().max(0.0)
            }
            _ => top.max(0.0) * angle.tan(),
        };
        // Between two faces of a pyramid its edge reaches sqrt 2 farther.
        1.5 * (round + beyond) + 1.0
    }

    /// How far the image of a corner has dropped `d` outside its arc's centre; `half_angle` is the
    /// section's.
    fn drop(&self, d: f64, half_angle: f64) -> f64 {
        match self.formula {
            Formula::SphereCone => self.corner.round(self.radius, half_angle, d),
            Formula::Paraboloid => self.corner.parabola(self.radius, d),
            Formula::Pyramid => self.corner.round(0.0, half_angle, d),
        }
    }

    /// Position across from the middle of the nearest ridge that stands, or up the step from its
    /// edge.
    pub fn across_of(&self, x: f64, y: f64) -> f64 {
        let n = self.normal();
        let along = x * n[0] + y * n[1] - self.across;
        match (self.shape, self.pitch) {
            (Shape::Ridges { .. }, Some(pitch)) => {
                let number = (along / pitch).round();
                along - pitch * number.clamp(self.ridges[0] as f64, self.ridges[1] as f64)
            }
            _ => along,
        }
    }

    /// Height of the certified surface above the base at a position across a straight shape.
    pub fn surface_across(&self, along: f64) -> f64 {
        let outside = match self.shape {
            Shape::Ridges { .. } => along.abs() - self.shoulder(),
            _ => -along - self.shoulder(),
        };
        (self.height - self.corner.surface(outside.max(0.0))).max(0.0)
    }
}

/// A state with what many positions share worked out.
#[derive(Debug)]
pub(super) struct Image<'a> {
    state: &'a State,
    normal: [f64; 2],
    shoulder: f64,
    /// Half-angles of the sections towards -n and +n.
    towards: [f64; 2],
    /// Slope of a spike's own flank.
    limit: f64,
    reach: Vec<f64>,
}

impl Image<'_> {
    /// Height of the image and what shows there.
    pub fn at(&self, x: f64, y: f64) -> (f64, Seen) {
        let (above, seen) = self.above(x, y);
        (self.state.plane(x, y) + above, seen)
    }

    /// The same above the base.
    pub fn above(&self, x: f64, y: f64) -> (f64, Seen) {
        let s = self.state;
        let mut best = (0.0, Seen::Base);
        let mut offer = |z: f64, k: usize| {
            if z > best.0 {
                best = (z, Seen::Feature(k));
            }
        };
        match s.shape {
            Shape::Ridges { .. } => {
                let along = x * self.normal[0] + y * self.normal[1] - s.across;
                match s.pitch {
                    None => offer(self.ridge(along), 0),
                    Some(pitch) => {
                        let number = (along / pitch).floor();
                        for number in [number, number + 1.0] {
                            if (s.ridges[0] as f64..=s.ridges[1] as f64).contains(&number) {
                                offer(self.ridge(along - number * pitch), 0);
                            }
                        }
                    }
                }
            }
            Shape::Step { .. } => {
                let along = x * self.normal[0] + y * self.normal[1] - s.across;
                let outside = (-along - self.shoulder).max(0.0);
                offer(s.height - s.drop(outside, self.towards[1]), 0);
            }
            Shape::Sphere { .. } | Shape::Spike { .. } => {
                for k in 0..s.places.len() {
                    offer(self.bump(k, x, y), k);
                }
            }
        }
        best
    }

    fn ridge(&self, along: f64) -> f64 {
        let outside = (along.abs() - self.shoulder).max(0.0);
        // Right of a ridge the side towards -n touches it.
        let towards = self.towards[usize::from(along < 0.0)];
        self.state.height - self.state.drop(outside, towards)
    }

    /// Height of the image of feature `k` alone above the base; below 0 where the base shows.
    pub fn bump(&self, k: usize, x: f64, y: f64) -> f64 {
        let s = self.state;
        let place = s.places[k];
        let (dx, dy) = (x - place.x, y - place.y);
        let squared = dx * dx + dy * dy;
        if squared > self.reach[k] * self.reach[k] {
            return f64::NEG_INFINITY;
        }
        match s.formula {
            Formula::Pyramid => {
                place.top - faces_on_cap(s.faces, s.corner.radius, self.limit, [dx, dy])
            }
            _ => place.top - s.drop(squared.sqrt(), s.faces[0]),
        }
    }
}
