//! Tips given by formula.

use super::Tip;
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use ndarray::Array2;

/// A tip given by formula; lengths in nm, half-angles in degrees from the vertical.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Model {
    /// A sphere of `radius` that goes over tangentially into a cone of `half_angle`.
    SphereCone {
        /// Apex radius, nm, `>= 0` (0 = a sharp cone).
        radius: f64,
        /// Half-angle of the cone, degrees, in `0..90`.
        half_angle: f64,
    },
    /// `height = d^2 / (2 radius)`.
    Paraboloid {
        /// Apex radius of curvature, nm, `> 0`.
        radius: f64,
    },
    /// Four plane faces through the apex, each with its own half-angle.
    Pyramid {
        /// Half-angles, degrees, of the faces towards -x, +x, -y, +y.
        half_angles: [f64; 4],
    },
}

impl Model {
    /// Errors of kind `Setting` with the offending value.
    pub fn checked(self) -> Result<Self> {
        let fail =
            |what: String, remedy: &str| Err(Error::new(ErrorKind::Setting, what).remedy(remedy));
        let angle_ok = |a: f64| (0.0..90.0).contains(&a);
        match self {
            Self::SphereCone { radius, half_angle } => {
                if !(radius >= 0.0 && radius.is_finite()) {
                    return fail(
                        format!("tip radius {radius} nm"),
                        "Give a radius of 0 or more",
                    );
                }
                if !angle_ok(half_angle) {
                    return fail(
                        format!("tip half-angle {half_angle} degrees"),
                        "Give the angle between axis and flank, from 0 to below 90",
                    );
                }
            }
            Self::Paraboloid { radius } => {
                if !(radius > 0.0 && radius.is_finite()) {
                    return fail(format!("tip radius {radius} nm"), "Give a radius above 0");
                }
            }
            Self::Pyramid { half_angles } => {
                if let Some(bad) = half_angles.iter().find(|&&a| !(a > 0.0 && a < 90.0)) {
                    return fail(
                        format!("face half-angle {bad} degrees"),
                        "Give four angles between axis and face, above 0 and below 90",
                    );
                }
            }
        }
        Ok(self)
    }

    /// Height of the tip's surface above its apex (nm, `>= 0`) at a lateral offset (nm);
    /// infinite beside a cylinder (half-angle 0).
    pub fn height(&self, dx: f64, dy: f64) -> f64 {
        match *self {
            Self::SphereCone { radius, half_angle } => {
                let d = dx.hypot(dy);
                let (sin, cos) = half_angle.to_radians().sin_cos();
                if d <= radius * cos {
                    radius - (radius * radius - d * d).sqrt()
                } else if sin == 0.0 {
                    f64::INFINITY
                } else {
                    // Beyond the tangent circle at d = R cos a, height R (1 - sin a).
                    radius * (1.0 - sin) + (d - radius * cos) * cos / sin
                }
            }
            Self::Paraboloid { radius } => (dx * dx + dy * dy) / (2.0 * radius),
            Self::Pyramid {
                half_angles: [left, right, up, down],
            } => {
                let face = |distance: f64, angle: f64| distance.max(0.0) / angle.to_radians().tan();
                face(-dx, left)
                    .max(face(dx, right))
                    .max(face(-dy, up))
                    .max(face(dy, down))
            }
        }
    }

    /// The model sampled at pixel centres on the smallest odd grid at least `support_nm` wide.
    ///
    /// Errors of kind `Setting`: bad parameters, or a support that is not positive or needs more
    /// than 4095 pixels.
    pub fn sample(&self, support_nm: f64, pitch: Pitch) -> Result<Tip> {
        self.checked()?;
        let pitch = pitch.checked()?;
        let half = |pitch: f64| ((support_nm / pitch - 1.0) / 2.0 - 1e-9).ceil().max(0.0);
        let (hx, hy) = (half(pitch.x), half(pitch.y));
        if support_nm.is_nan() || support_nm <= 0.0 || hx > 2047.0 || hy > 2047.0 {
            return Err(Error::new(
                ErrorKind::Setting,
                format!(
                    "tip support {support_nm} nm at a pitch of {} nm, {} nm",
                    pitch.x, pitch.y
                ),
            )
            .remedy("Give a support from one to 4095 pixels wide"));
        }
        let (hx, hy) = (hx as usize, hy as usize);
        let shape = Array2::from_shape_fn((2 * hy + 1, 2 * hx + 1), |(r, c)| {
            let dx = (c as f64 - hx as f64) * pitch.x;
            let dy = (r as f64 - hy as f64) * pitch.y;
            // `0 - h` rather than `-h`: the apex is +0.
            (0.0 - self.height(dx, dy)) as f32
        });
        Tip::new(shape, pitch)
    }
}

/// Half-width of a sphere-cone at depth `z` above its apex, all nm and degrees:
/// `sqrt(2 R z - z^2)` on the sphere, `z tan a + R (1 - sin a) / cos a` on the flank.
pub fn sphere_cone_half_width(radius: f64, half_angle: f64, z: f64) -> f64 {
    let (sin, cos) = half_angle.to_radians().sin_cos();
    if z <= radius * (1.0 - sin) {
        (2.0 * radius * z - z * z).max(0.0).sqrt()
    } else {
        z * sin / cos + radius * (1.0 - sin) / cos
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sphere_cone_height_and_half_width_are_inverse() {
        let model = Model::SphereCone {
            radius: 10.0,
            half_angle: 15.0,
        };
        for z in [0.5, 3.0, 7.4, 7.5, 20.0, 50.0] {
            let w = sphere_cone_half_width(10.0, 15.0, z);
            assert!((model.height(w, 0.0) - z).abs() < 1e-9, "{z}");
            assert!((model.height(0.6 * w, -0.8 * w) - z).abs() < 1e-9, "{z}");
        }
    }

    #[test]
    fn the_grid_is_odd_and_covers_the_support() {
        let tip = Model::Paraboloid { radius: 5.0 }
            .sample(10.0, Pitch { x: 2.0, y: 3.0 })
            .unwrap();
        assert_eq!(tip.shape().dim(), (5, 5));
        let tip = Model::Paraboloid { radius: 5.0 }
            .sample(130.0, Pitch::square(2.0))
            .unwrap();
        assert_eq!(tip.shape().dim(), (65, 65));
        assert_eq!(tip.shape()[[32, 32]].to_bits(), 0);
    }

    #[test]
    fn unequal_faces_keep_their_sides() {
        let model = Model::Pyramid {
            half_angles: [10.0, 20.0, 30.0, 40.0],
        };
        let tan = |a: f64| a.to_radians().tan();
        assert!((model.height(-3.0, 0.0) - 3.0 / tan(10.0)).abs() < 1e-12);
        assert!((model.height(3.0, 0.0) - 3.0 / tan(20.0)).abs() < 1e-12);
        assert!((model.height(0.0, -3.0) - 3.0 / tan(30.0)).abs() < 1e-12);
        assert!((model.height(0.0, 3.0) - 3.0 / tan(40.0)).abs() < 1e-12);
    }

    #[test]
    fn bad_parameters_are_named() {
        let bad = Model::SphereCone {
            radius: -1.0,
            half_angle: 15.0,
        };
        assert!(bad.checked().unwrap_err().to_string().contains("-1 nm"));
        let bad = Model::Pyramid {
            half_angles: [10.0, 95.0, 10.0, 10.0],
        };
        assert!(bad.checked().unwrap_err().to_string().contains("95"));
        let good = Model::Paraboloid { radius: 1.0 };
        assert!(good.sample(0.0, Pitch::square(1.0)).is_err());
        assert!(good.sample(1e7, Pitch::square(1.0)).is_err());
    }
}
