//! The image of a certified shape under a tip given by formula, in closed form.
//!
//! Both are convex, so the image's contour is their Minkowski sum: contacts pair points of equal
//! slope. A corner of radius `rho` under a sphere of radius `R` gives an arc of radius `rho + R`
//! up to the lesser of wall angle and flank slope, then a straight flank. A paraboloid adds its
//! offset `R q` at slope `q`. Faces of a pyramid give the support function over the slopes they
//! span. Checked against brute-force dilation in the tests; formulas for ridge, sphere and
//! paraboloid: Minkowski sums of convex bodies (from memory).

use crate::tip::model::Model;

/// Least half-angle, degrees: a needle in all but name, and finite.
const LEAST_ANGLE: f64 = 0.01;

/// A corner of the certified shape: an arc of `radius` that goes over into a face at `wall`
/// degrees from the horizontal (90 = vertical).
#[derive(Debug, Clone, Copy)]
pub(super) struct Corner {
    pub radius: f64,
    pub wall: f64,
}

fn cone(radius: f64, half_angle: f64, d: f64) -> f64 {
    let half_angle = half_angle.max(LEAST_ANGLE);
    Model::SphereCone { radius, half_angle }.height(d, 0.0)
}

impl Corner {
    /// How far the surface itself has dropped `d >= 0` outside the corner's centre.
    pub fn surface(self, d: f64) -> f64 {
        if self.wall >= 90.0 {
            // A vertical face drops for good at the corner's own radius.
            let Self { radius, .. } = self;
            return if d <= radius {
                radius - (radius * radius - d * d).sqrt()
            } else {
                f64::INFINITY
            };
        }
        cone(self.radius, 90.0 - self.wall, d)
    }

    /// How far the image has dropped `d >= 0` outside the corner's centre under a tip whose section
    /// towards the corner is an arc of `radius` and a flank at `half_angle`.
    pub fn round(self, radius: f64, half_angle: f64, d: f64) -> f64 {
        cone(self.radius + radius, half_angle.max(90.0 - self.wall), d)
    }

    /// The same under a paraboloid of apex radius `radius`.
    pub fn parabola(self, radius: f64, d: f64) -> f64 {
        let rho = self.radius;
        // Offset and drop at slope q; the wall stops at its own slope.
        let offset = |q: f64| rho * q / q.hypot(1.0) + radius * q;
        let drop = |q: f64| rho * (1.0 - 1.0 / q.hypot(1.0)) + radius * q * q / 2.0;
        let steepest = if self.wall >= 90.0 {
            f64::INFINITY
        } else {
            self.wall.to_radians().tan()
        };
        if steepest.is_finite() && d >= offset(steepest) {
            return drop(steepest) + (d - offset(steepest)) * steepest;
        }
        if !(radius > 0.0) {
            return self.surface(d);
        }
        // Newton from the steep side: the offset is concave in the slope.
        let mut q = (d / (rho + radius)).max(0.0);
        for _ in 0..60 {
            let slope = rho / q.hypot(1.0).powi(3) + radius;
            let step = (offset(q) - d) / slope;
            q = (q - step).max(0.0);
            if step.abs() <= 1e-13 * (1.0 + q) {
                break;
            }
        }
        drop(q)
    }
}

/// Slope that four faces (half-angles towards -x, +x, -y, +y, degrees) have as one section along
/// the unit vector `n`: their convex hull of slopes cut along it.
pub(super) fn section_slope(faces: [f64; 4], n: [f64; 2]) -> f64 {
    let [gx, gy] = quadrant(faces, n);
    1.0 / (n[0].abs() / gx + n[1].abs() / gy)
}

/// Slopes of the faces towards the quadrant of `n`.
fn quadrant([left, right, up, down]: [f64; 4], n: [f64; 2]) -> [f64; 2] {
    let slope = |a: f64| 1.0 / a.max(LEAST_ANGLE).to_radians().tan();
    [
        slope(if n[0] > 0.0 { right } else { left }),
        slope(if n[1] > 0.0 { down } else { up }),
    ]
}

/// How far the image of a spherical cap of radius `r` with flank slope `limit` has dropped at
/// `x` from its axis under four `faces`: `max over g of g . x - r (sqrt(1 + g^2) - 1)` over the
/// slopes `g` that the faces span and the flank allows.
pub(super) fn faces_on_cap(faces: [f64; 4], r: f64, limit: f64, x: [f64; 2]) -> f64 {
    let distance = x[0].hypot(x[1]);
    if distance == 0.0 {
        return 0.0;
    }
    // Faces towards the feature touch it: it lies at -x of the apex.
    let [gx, gy] = quadrant(faces, [-x[0], -x[1]]);
    let (ax, ay) = (x[0].abs(), x[1].abs());
    let value = |g: [f64; 2]| {
        let squared = g[0] * g[0] + g[1] * g[1];
        // sqrt(1 + g^2) - 1 without loss.
        g[0] * ax + g[1] * ay - r * squared / (1.0 + (1.0 + squared).sqrt())
    };
    // Along x's own direction the apex touches, as far as slopes go.
    let free = if distance < r {
        distance / (r * r - distance * distance).sqrt()
    } else {
        f64::INFINITY
    };
    let own = free.min(limit);
    let towards = [ax / distance, ay / distance];
    if own * (towards[0] / gx + towards[1] / gy) <= 1.0 {
        return value([own * towards[0], own * towards[1]]);
    }
    // On the edge between two faces: g = (gx (1 - s), gy s).
    let length = gx.hypot(gy);
    let foot = gx * gx / (length * length);
    let nearest = gx * gy / length;
    let along = (gy * ay - gx * ax) / length;
    let pull = if r > 0.0 {
        along / r
    } else {
        along * f64::INFINITY
    };
    let mut y = if pull.is_nan() {
        0.0
    } else if pull.abs() < 1.0 {
        pull * (1.0 + nearest * nearest).sqrt() / (1.0 - pull * pull).sqrt()
    } else {
        pull.signum() * f64::INFINITY
    };
    if limit.is_finite() {
        let reach = (limit * limit - nearest * nearest).max(0.0).sqrt();
        y = y.clamp(-reach, reach);
    }
    let s = (foot + y / length).clamp(0.0, 1.0);
    value([gx * (1.0 - s), gy * s])
}
