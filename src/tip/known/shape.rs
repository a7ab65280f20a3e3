//! Characterizers: the shapes that can be certified, and their values with uncertainties.

use crate::error::{Error, ErrorKind, Result};

/// A certified value with its standard uncertainty (0 = held as exact).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Certified {
    /// Nm or degrees.
    pub value: f64,
    /// Standard uncertainty, same unit.
    pub u: f64,
}

impl Certified {
    /// A value held as exact.
    pub const fn exact(value: f64) -> Self {
        Self { value, u: 0.0 }
    }

    /// A value with its standard uncertainty.
    pub const fn new(value: f64, u: f64) -> Self {
        Self { value, u }
    }
}

/// A characterizer of certified shape; lengths in nm, angles in degrees.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Shape {
    /// Parallel ridges, rectangular or trapezoid, on a flat.
    Ridges {
        /// Width at mid-height.
        width: Certified,
        /// Height above the flat; `None` = read off the scan.
        height: Option<Certified>,
        /// Centre-to-centre distance; `None` = a single ridge.
        pitch: Option<Certified>,
        /// Angle of the walls from the horizontal, above 0, at most 90.
        wall_angle: Certified,
        /// Radius of the upper corners, tangent to top and wall.
        corner_radius: Certified,
    },
    /// One step between two flats.
    Step {
        /// Height of the upper above the lower flat; `None` = read off the scan.
        height: Option<Certified>,
        /// Angle of the wall from the horizontal, above 0, at most 90.
        wall_angle: Certified,
        /// Radius of the upper corner.
        corner_radius: Certified,
    },
    /// Spheres lying on a flat, one or several.
    Sphere {
        /// Diameter.
        diameter: Certified,
    },
    /// Cones with a spherical apex on a flat, one or several; each height is read off the scan.
    Spike {
        /// Apex radius.
        radius: Certified,
        /// Between axis and flank.
        half_angle: Certified,
    },
}

/// Which certified value.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Quantity {
    /// Width at mid-height.
    Width,
    /// Height.
    Height,
    /// Centre-to-centre distance.
    Pitch,
    /// Angle of the walls from the horizontal.
    WallAngle,
    /// Radius of the upper corners.
    CornerRadius,
    /// Diameter of a sphere.
    Diameter,
    /// Apex radius of a spike.
    Radius,
    /// Half-angle of a spike.
    HalfAngle,
}

impl Quantity {
    /// Its name in the job file and in records.
    pub fn name(self) -> &'static str {
        match self {
            Self::Width => "width",
            Self::Height => "height",
            Self::Pitch => "pitch",
            Self::WallAngle => "wall-angle",
            Self::CornerRadius => "corner-radius",
            Self::Diameter => "diameter",
            Self::Radius => "radius",
            Self::HalfAngle => "half-angle",
        }
    }

    /// "nm" or "deg".
    pub fn unit(self) -> &'static str {
        match self {
            Self::WallAngle | Self::HalfAngle => "deg",
            _ => "nm",
        }
    }
}

impl Shape {
    /// "ridges", "step", "sphere", "spike".
    pub fn name(&self) -> &'static str {
        match self {
            Self::Ridges { .. } => "ridges",
            Self::Step { .. } => "step",
            Self::Sphere { .. } => "sphere",
            Self::Spike { .. } => "spike",
        }
    }

    /// The certified values that are stated.
    pub fn certified(&self) -> Vec<(Quantity, Certified)> {
        let mut list = Vec::new();
        match *self {
            Self::Ridges {
                width,
                height,
                pitch,
                wall_angle,
                corner_radius,
            } => {
                list.push((Quantity::Width, width));
                list.extend(height.map(|h| (Quantity::Height, h)));
                list.extend(pitch.map(|p| (Quantity::Pitch, p)));
                list.push((Quantity::WallAngle, wall_angle));
                list.push((Quantity::CornerRadius, corner_radius));
            }
            Self::Step {
                height,
                wall_angle,
                corner_radius,
            } => {
                list.extend(height.map(|h| (Quantity::Height, h)));
                list.push((Quantity::WallAngle, wall_angle));
                list.push((Quantity::CornerRadius, corner_radius));
            }
            Self::Sphere { diameter } => list.push((Quantity::Diameter, diameter)),
            Self::Spike { radius, half_angle } => {
                list.push((Quantity::Radius, radius));
                list.push((Quantity::HalfAngle, half_angle));
            }
        }
        list
    }

    /// Whether it is the same all along one direction, so that it shows the tip across that only.
    pub fn is_straight(&self) -> bool {
        matches!(self, Self::Ridges { .. } | Self::Step { .. })
    }

    /// Errors of kind `Setting` with the offending value.
    pub fn checked(self) -> Result<Self> {
        let fail = |what: String, remedy: &str| {
            Err(
                Error::new(ErrorKind::Setting, format!("known {}: {what}", self.name()))
                    .remedy(remedy),
            )
        };
        for (quantity, c) in self.certified() {
            let (name, unit) = (quantity.name(), quantity.unit());
            let ok = match quantity {
                Quantity::WallAngle => c.value > 0.0 && c.value <= 90.0,
                Quantity::HalfAngle => (0.0..90.0).contains(&c.value),
                Quantity::CornerRadius | Quantity::Radius => c.value >= 0.0,
                _ => c.value > 0.0,
            };
            if !(ok && c.value.is_finite()) {
                let remedy = match quantity {
                    Quantity::WallAngle => "Give the angle from the horizontal, up to 90",
                    Quantity::HalfAngle => {
                        "Give the angle between axis and flank, from 0 to below 90"
                    }
                    _ => "Give a positive length",
                };
                return fail(format!("{name} {} {unit}", c.value), remedy);
            }
            if !(c.u >= 0.0 && c.u.is_finite()) {
                return fail(
                    format!("u-{name} {} {unit}", c.u),
                    "Give a standard uncertainty of 0 or more",
                );
            }
        }
        if let Self::Ridges {
            width,
            height,
            pitch,
            wall_angle,
            corner_radius,
        } = self
        {
            let run = height.map_or(0.0, |h| h.value / wall_angle.value.to_radians().tan());
            let tangent = corner_radius.value * (wall_angle.value / 2.0).to_radians().tan();
            let flat = width.value - run - 2.0 * tangent;
            if flat < 0.0 {
                return fail(
                    format!("walls and rounded corners leave a top {flat:.3} nm wide"),
                    "Check width (at mid-height), height, wall-angle and corner-radius",
                );
            }
            if let Some(pitch) = pitch.filter(|p| p.value <= width.value) {
                return fail(
                    format!(
                        "pitch {} nm, not wider than the ridge of {} nm",
                        pitch.value, width.value
                    ),
                    "Give the centre-to-centre distance",
                );
            }
        }
        Ok(self)
    }
}
