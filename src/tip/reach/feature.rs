//! Planned features and their profiles.

use crate::error::{Error, ErrorKind, Result};

/// A planned feature; lengths in nm, wall angles in degrees from the horizontal (90 = vertical).
/// Widths of long features are those at half height.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Feature {
    /// A long trench in a plane.
    Trench {
        /// Width at half depth.
        width: f64,
        /// Depth.
        depth: f64,
        /// Angle of both walls.
        wall_angle: f64,
    },
    /// A long ridge on a plane.
    Ridge {
        /// Width at half height.
        width: f64,
        /// Height.
        height: f64,
        /// Angle of both walls.
        wall_angle: f64,
    },
    /// Long ridges side by side; the tip must get between them.
    Grating {
        /// From ridge to ridge.
        pitch: f64,
        /// Width of a ridge at half height.
        width: f64,
        /// Height.
        height: f64,
        /// Angle of all walls.
        wall_angle: f64,
    },
    /// A ball on a plane. Its underside cannot be seen: it counts as upright below its equator.
    Particle {
        /// Diameter.
        diameter: f64,
    },
}

impl Feature {
    /// Errors of kind `Setting` with the offending value.
    pub fn checked(self) -> Result<Self> {
        let fail =
            |what: String, remedy: &str| Err(Error::new(ErrorKind::Setting, what).remedy(remedy));
        let lengths: &[(&str, f64)] = &match self {
            Self::Trench { width, depth, .. } => {
                [("trench width", width), ("depth", depth), ("depth", depth)]
            }
            Self::Ridge { width, height, .. } => [
                ("ridge width", width),
                ("height", height),
                ("height", height),
            ],
            Self::Grating {
                pitch,
                width,
                height,
                ..
            } => [
                ("grating pitch", pitch),
                ("ridge width", width),
                ("height", height),
            ],
            Self::Particle { diameter } => [("particle diameter", diameter); 3],
        };
        if let Some((name, bad)) = lengths.iter().find(|l| !(l.1 > 0.0 && l.1.is_finite())) {
            return fail(format!("{name} {bad} nm"), "Give a length above 0");
        }
        if let Some((angle, run)) = self.wall() {
            if !(angle > 0.0 && angle <= 90.0) {
                return fail(
                    format!("wall angle {angle} degrees"),
                    "Give the angle from the horizontal, above 0 and up to 90 (vertical)",
                );
            }
            let narrowest = match self {
                Self::Grating { pitch, width, .. } => width.min(pitch - width),
                Self::Trench { width, .. } | Self::Ridge { width, .. } => width,
                Self::Particle { .. } => f64::INFINITY,
            };
            if narrowest < run {
                return fail(
                    format!(
                        "walls of {angle} degrees, {:.3} nm high, meet within a width of \
                         {narrowest:.3} nm at half height",
                        self.height_nm()
                    ),
                    "Give a steeper wall, a lesser height or a greater width",
                );
            }
        }
        Ok(self)
    }

    /// Height or depth, nm.
    pub fn height_nm(&self) -> f64 {
        match *self {
            Self::Trench { depth, .. } => depth,
            Self::Ridge { height, .. } | Self::Grating { height, .. } => height,
            Self::Particle { diameter } => diameter,
        }
    }

    /// Wall angle from the horizontal and the horizontal run of a wall.
    pub(super) fn wall(&self) -> Option<(f64, f64)> {
        let (Self::Trench { wall_angle, .. }
        | Self::Ridge { wall_angle, .. }
        | Self::Grating { wall_angle, .. }) = *self
        else {
            return None;
        };
        let run = if wall_angle >= 90.0 {
            0.0
        } else {
            self.height_nm() / wall_angle.to_radians().tan()
        };
        Some((wall_angle, run))
    }

    /// Whether the image of the feature is narrower than the feature.
    pub(super) fn is_hollow(&self) -> bool {
        matches!(self, Self::Trench { .. })
    }

    /// Height of the surface at a distance from the feature's middle, nm, the floor at 0.
    pub(super) fn height(&self, x: f64) -> f64 {
        let height = self.height_nm();
        let run = self.wall().map_or(0.0, |w| w.1);
        // 1 inside `half` less half the run, 0 outside half the run more.
        let ramp = |x: f64, half: f64| {
            let beyond = x.abs() - half;
            if beyond <= -0.5 * run {
                1.0
            } else if beyond > 0.5 * run {
                0.0
            } else {
                (0.5 - beyond / run).clamp(0.0, 1.0)
            }
        };
        match *self {
            // The rim of an upright wall belongs to the top.
            Self::Trench { width, .. } => {
                let beyond = x.abs() - 0.5 * width;
                if run == 0.0 {
                    if beyond < -1e-9 * width { 0.0 } else { height }
                } else {
                    height * (1.0 - ramp(x, 0.5 * width))
                }
            }
            Self::Ridge { width, .. } => {
                height * ramp(x, 0.5 * width * (1.0 + if run == 0.0 { 1e-9 } else { 0.0 }))
            }
            Self::Grating { pitch, width, .. } => {
                let x = x - pitch * (x / pitch).round();
                height * ramp(x, 0.5 * width * (1.0 + if run == 0.0 { 1e-9 } else { 0.0 }))
            }
            Self::Particle { diameter } => {
                let r = 0.5 * diameter;
                if x.abs() <= r * (1.0 + 1e-12) {
                    r + (r * r - x * x).max(0.0).sqrt()
                } else {
                    0.0
                }
            }
        }
    }

    /// Width at a fraction of the height, nm.
    pub(super) fn width_at(&self, at: f64) -> f64 {
        let run = self.wall().map_or(0.0, |w| w.1);
        match *self {
            Self::Trench { width, .. } => width + run * (2.0 * at - 1.0),
            Self::Ridge { width, .. } | Self::Grating { width, .. } => {
                width - run * (2.0 * at - 1.0)
            }
            Self::Particle { diameter } => {
                let above = (at - 0.5).max(0.0) * diameter;
                2.0 * (0.25 * diameter * diameter - above * above).max(0.0).sqrt()
            }
        }
    }

    /// Half of the least length that shapes the image: what the grid must divide evenly.
    pub(super) fn half_width(&self) -> f64 {
        match *self {
            Self::Trench { width, .. }
            | Self::Ridge { width, .. }
            | Self::Grating { width, .. } => 0.5 * width,
            Self::Particle { diameter } => 0.5 * diameter,
        }
    }
}

/// Top 0, wall 1 or floor 2: what the stretch between the heights `z` at place `x` belongs to.
pub(super) fn part_of(feature: &Feature, x: f64, z: [f64; 2], height: f64) -> Option<usize> {
    let level = |h: f64| z.iter().all(|z| (z - h).abs() < 1e-9 * height);
    match feature {
        Feature::Particle { diameter } => (x.abs() < 0.5 * diameter).then_some(1),
        // The planes beside a trench or a ridge are no part of it.
        Feature::Trench { .. } if level(height) => None,
        Feature::Ridge { .. } if level(0.0) => None,
        _ if level(height) => Some(0),
        _ if level(0.0) => Some(2),
        _ => Some(1),
    }
}
