//! Reach and width excess of a sphere-cone in closed form. Sources: geometry; each agrees with the
//! dilation of the same shapes to a grid step.

use super::Feature;
use crate::tip::model::{Model, sphere_cone_half_width};

/// Depth that a sphere-cone's apex reaches in a deep trench of width `width` with upright walls, nm:
/// `R - sqrt(R^2 - g^2 / 4)` for `g <= 2 R cos a`, else `[g / 2 - R (1 - sin a) / cos a] / tan a`;
/// infinite for a cylinder (`a = 0`) in a trench wider than itself.
pub fn vertical_trench_reach(radius: f64, half_angle: f64, width: f64) -> f64 {
    Model::SphereCone { radius, half_angle }.height(0.5 * width, 0.0)
}

/// Depth that a sphere of radius `radius` loses in a groove of floor width `floor` whose walls stand
/// at `wall` degrees from the vertical, more than the tip's own half-angle:
/// `[R (1 - sin B) - (b / 2) cos B] / sin B`, and 0 from `b = 2 R (1 - sin B) / cos B` on.
pub fn groove_lost_depth(radius: f64, wall: f64, floor: f64) -> f64 {
    let (sin, cos) = wall.to_radians().sin_cos();
    ((radius * (1.0 - sin) - 0.5 * floor * cos) / sin).max(0.0)
}

/// Depth that a sphere-cone's apex reaches over the middle of `feature`, no more than the feature's:
/// the least distance between tip and walls, which lies at an edge of the wall or where the tip is
/// as steep as the wall. `None` for features without a hollow.
pub(super) fn hollow_reach(model: Model, feature: &Feature) -> Option<f64> {
    let (width, depth, wall_angle) = match *feature {
        Feature::Trench {
            width,
            depth,
            wall_angle,
        } => (width, depth, wall_angle),
        Feature::Grating {
            pitch,
            width,
            height,
            wall_angle,
        } => (pitch - width, height, wall_angle),
        Feature::Ridge { .. } | Feature::Particle { .. } => return None,
    };
    let run = if wall_angle >= 90.0 {
        0.0
    } else {
        depth / wall_angle.to_radians().tan()
    };
    let (top, floor) = (0.5 * (width + run), 0.5 * (width - run));
    let steep = match model {
        Model::SphereCone { radius, .. } => radius * wall_angle.to_radians().sin(),
        Model::Paraboloid { radius } if run > 0.0 => radius * depth / run,
        Model::Paraboloid { .. } | Model::Pyramid { .. } => top,
    };
    // Wall's depth below the top at a place; the wall's foot belongs to the floor.
    let gap = |x: f64| {
        let down = if run > 0.0 {
            depth * (top - x) / run
        } else {
            0.0
        };
        model.height(x, 0.0) + down
    };
    Some(gap(top).min(gap(steep.clamp(floor, top))).min(depth))
}

/// How much wider the image of a ridge (narrower that of a trench) is than the feature, `below` its
/// top, nm: `2 max (w_t(t) - t tan B)` over `0 <= t <= below`, with B the wall's angle from the
/// vertical. The greatest lies on the tip's sphere where it is as steep as the wall.
pub(super) fn wall_excess(radius: f64, half_angle: f64, wall: f64, below: f64) -> f64 {
    let (sin, cos) = wall.to_radians().sin_cos();
    let t = if wall > half_angle {
        below.min(radius * (1.0 - sin))
    } else {
        below
    };
    2.0 * (sphere_cone_half_width(radius, half_angle, t) - t * sin / cos)
}

/// The same for a ball of radius `ball` on a plane, upright below its equator: the greatest of
/// `sqrt(2 r h - h^2) + w_t(below - h)` over the contact's depth h below the summit.
pub(super) fn ball_excess(radius: f64, half_angle: f64, ball: f64, below: f64) -> f64 {
    let half = |h: f64| {
        (2.0 * ball * h - h * h).max(0.0).sqrt()
            + sphere_cone_half_width(radius, half_angle, below - h)
    };
    // Both terms are concave: the greatest by thirds.
    let (mut low, mut high) = (0.0, below.min(ball));
    for _ in 0..200 {
        let (a, b) = (low + (high - low) / 3.0, high - (high - low) / 3.0);
        if half(a) < half(b) { low = a } else { high = b }
    }
    let own = below.min(ball);
    2.0 * (half(0.5 * (low + high)) - (2.0 * ball * own - own * own).max(0.0).sqrt())
}
