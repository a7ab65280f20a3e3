//! The radius of curvature at the apex, with what refuses it.

use super::quadric::{Quadric, paraboloid_radius, sphere_radius};
use super::*;

pub(super) fn apex_radius(
    tip: &Tip,
    depth: f64,
    sin: f64,
    noise: f64,
) -> Result<ApexRadius, String> {
    let pitch = tip.pitch();
    let px = pitch.x.max(pitch.y);
    let [w, h] = tip.support_nm();
    let rough = rough_radius(tip)
        .ok_or("No radius: the tip's grid is smaller than 5 x 5 pixels.".to_owned())?;
    let mut radius = rough.clamp(1.5 * px, 0.5 * w.min(h));
    let mut found = None;
    for _ in 0..12 {
        let least = (LEAST_HALF_WIDTH_PX * px).powi(2) / (2.0 * radius);
        let allowed = (CAP_PART * radius * (1.0 - sin)).min(depth);
        let cap_depth = allowed.max(least).min(depth);
        let Some(fit) = Quadric::fit(tip.shape(), pitch, cap_depth, noise) else {
            break;
        };
        let [k1, k2] = fit.principal();
        if !(k2 > 0.0) {
            return Err(
                "No radius: the apex is flat or hollow within the depth that is known.".to_owned(),
            );
        }
        let next = 1.0 / (k1 * k2).sqrt();
        let done = (next - radius).abs() < 1e-3 * radius;
        found = Some((fit, next));
        // Damped: the depth follows the radius and the radius the depth.
        radius = if done { next } else { 0.5 * (radius + next) };
        if done {
            break;
        }
    }
    if radius < 3.0 * px {
        return Err(format!(
            "No radius: the apex is sharper than the pixels show (about {:.1} pixels; 3 are needed).",
            radius / px
        ));
    }
    let Some((fit, radius)) = found else {
        return Err(format!(
            "No radius: too few tip pixels lie within {depth:.3} nm of the apex."
        ));
    };
    if radius > 0.5 * w.max(h) {
        return Err(format!(
            "No radius: the apex is nearly flat over the tip's grid (radius above {:.0} nm).",
            0.5 * w.max(h)
        ));
    }
    let least = (LEAST_HALF_WIDTH_PX * px).powi(2) / (2.0 * radius);
    if fit.depth < 0.999 * least {
        return Err(format!(
            "No radius: known to {:.3} nm below the apex, a radius of {radius:.1} nm needs {least:.3} nm.",
            fit.depth
        ));
    }
    if fit.depth < DEPTH_OVER_NOISE * noise {
        return Err(format!(
            "No radius: a cap {:.3} nm deep does not stand out from height errors of {noise:.3} nm.",
            fit.depth
        ));
    }
    if fit.misfit > 3.0 * noise + ROUND * fit.depth {
        return Err(format!(
            "No radius: the apex is not round; it departs from a rounded cap by {:.3} nm over the \
             upper {:.3} nm (worn, chipped or flat).",
            fit.misfit, fit.depth
        ));
    }
    let [k1, k2] = fit.principal();
    // Heights that err together by `noise` over the cap tilt its curvature by noise / depth.
    let u = (fit.u_relative * radius).hypot(radius * noise / fit.depth);
    Ok(ApexRadius {
        value: radius,
        u,
        fit_depth_nm: fit.depth,
        principal_nm: [1.0 / k1, 1.0 / k2],
        sphere_nm: sphere_radius(tip.shape(), pitch, fit.depth, radius),
        paraboloid_nm: paraboloid_radius(tip.shape(), pitch, fit.depth),
    })
}
