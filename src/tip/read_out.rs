//! What a tip's shape says: apex radius and half-angle, each with the depth it was read at.
//!
//! The radius is the radius of curvature *at* the apex. A parabola fitted to a deep cap of a
//! sphere of radius `R` reads less than `R` (pointwise `R - z / 2`), so the cap is fitted with a
//! quadric, which holds sphere, paraboloid and hyperboloid alike:
//! `t = c + a x + b y + (kxx x^2 + 2 kxy x y + kyy y^2) / 2 + kappa t^2 / 2`
//! (`kappa = 1 / R` for a sphere, 0 for a paraboloid). What a sphere and a paraboloid give on the
//! same cap is told beside it, because other reports quote one or the other.

mod apex;
mod flank;
mod quadric;
#[cfg(test)]
mod tests;

pub(crate) use quadric::Quadric;

use super::Tip;
#[cfg(test)]
use crate::heightmap::Pitch;
use apex::apex_radius;
use flank::half_angle;
use std::f64::consts::PI;

/// Azimuths at which the flank is read; even, so that each has its opposite.
const AZIMUTHS: usize = 24;
/// Part of the sphere's depth `R (1 - sin a)` that the fit uses: clear of the tangent circle.
const CAP_PART: f64 = 0.6;
/// Half-width of the fitted cap in pixels that a curvature needs at least.
const LEAST_HALF_WIDTH_PX: f64 = 3.0;
/// Fit depth over the heights' uncertainty, at least.
const DEPTH_OVER_NOISE: f64 = 4.0;
/// Departure from a rounded cap over its depth up to which it passes as round.
const ROUND: f64 = 0.02;
/// Neighbouring heights err together: about this many cells count as one along each axis.
const NOISE_REACH: f64 = 3.0;

/// Radius of curvature at the apex.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ApexRadius {
    /// Nm.
    pub value: f64,
    /// Standard uncertainty, nm.
    pub u: f64,
    /// Depth below the apex that the fit used, nm.
    pub fit_depth_nm: f64,
    /// Principal radii, smaller first, nm.
    pub principal_nm: [f64; 2],
    /// Radius of the least-squares sphere over the same cap, nm; on a paraboloid it reads
    /// more than the apex has. `None` where the cap does not settle on a sphere.
    pub sphere_nm: Option<f64>,
    /// Apex radius of the least-squares paraboloid over the same cap, nm; on a sphere it reads less
    /// than the apex has. `None` where the cap is not convex.
    pub paraboloid_nm: Option<f64>,
}

/// Half-angle of the flank from the vertical.
#[derive(Debug, Clone, PartialEq)]
pub struct HalfAngle {
    /// Mean over azimuths, degrees.
    pub value: f64,
    /// Standard uncertainty, degrees.
    pub u: f64,
    /// The depths between which the slope was taken, nm.
    pub between_nm: [f64; 2],
    /// `(azimuth, half-angle)` in degrees; azimuth 0 = along +x, 90 = along +y.
    pub per_azimuth: Vec<(f64, f64)>,
    /// How the flanks lean; `None` where too few azimuths show both of two opposite flanks.
    pub tilt: Option<Tilt>,
}

/// Tilt of the tip's axis: the bisector of opposite flanks against the vertical.
///
/// In the section along azimuth `p` the bisector of a cone tilted by `tau` towards `p0` leans by
/// `d` with `tan d = tan tau cos(p - p0)`; both are fitted over all azimuths.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Tilt {
    /// Degrees from the vertical.
    pub value: f64,
    /// Standard uncertainty, degrees.
    pub u: f64,
    /// Azimuth on whose side the flank is the shallower one, degrees in `0..360`.
    pub azimuth_deg: f64,
}

/// Apex radius and half-angle, with the reason where one could not be had.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct ReadOut {
    /// `None` where not identified.
    pub apex_radius: Option<ApexRadius>,
    /// `None` where not identified.
    pub half_angle: Option<HalfAngle>,
    /// Why something is missing, one plain sentence each.
    pub reasons: Vec<String>,
}

/// Reads radius and half-angle off `tip`, looking no deeper than `depth_nm`;
/// `noise_nm` is the standard uncertainty of its heights.
///
/// The radius fit goes to `0.6 R (1 - sin a)` at most and needs a cap at least three pixels in
/// half-width and four times `noise_nm` deep; its uncertainty joins the fit's own scatter with
/// `R noise / depth` for heights that err together. Nothing is made up: what the tip's grid or the
/// depth does not show is `None`, with its reason. Depth rule: common practice.
pub fn read_out(tip: &Tip, depth_nm: f64, noise_nm: f64) -> ReadOut {
    let mut out = ReadOut::default();
    let noise = if noise_nm.is_finite() {
        noise_nm.max(0.0)
    } else {
        0.0
    };
    let depth = depth_nm.min(tip.depth_nm());
    if !(depth > 0.0) {
        let why = "The tip shows no depth below its apex: it was not exercised.".to_owned();
        out.reasons.push(why);
        return out;
    }
    // A first look at the lower half of the flank tells how deep the sphere can go.
    let flank = half_angle(tip, [0.5 * depth, 0.95 * depth], noise);
    let sin = flank.as_ref().map_or(0.0, |f| f.value.to_radians().sin());
    match apex_radius(tip, depth, sin, noise) {
        Ok(radius) => out.apex_radius = Some(radius),
        Err(why) => out.reasons.push(why),
    }
    // On the flank only: below the sphere's tangent circle.
    let tangent = out.apex_radius.map_or(0.0, |r| r.value * (1.0 - sin));
    let upper = (0.5 * depth).max(1.1 * tangent);
    let lower = 0.95 * depth;
    if upper > 0.75 * lower {
        out.reasons.push(format!(
            "No half-angle: the tip is known to a depth of {depth:.3} nm, the flank begins near \
             {tangent:.3} nm."
        ));
    } else {
        match half_angle(tip, [upper, lower], noise) {
            Some(angle) => out.half_angle = Some(angle),
            None => out.reasons.push(format!(
                "No half-angle: the flank between {upper:.3} and {lower:.3} nm below the apex lies \
                 outside the tip's grid or is steeper than its pixels show."
            )),
        }
    }
    out
}

/// Typical `r^2 / (2 t)` over a ring of cells 2 to 4 pixels from the apex, nm; infinite where the
/// tip is flat there, `None` on grids without such cells. A rough radius that needs no fit.
pub(crate) fn rough_radius(tip: &Tip) -> Option<f64> {
    let pitch = tip.pitch();
    let shape = tip.shape();
    let (cr, cc) = (shape.nrows() / 2, shape.ncols() / 2);
    let mut radii = Vec::new();
    for ((r, c), &p) in shape.indexed_iter() {
        let (i, j) = (r as f64 - cr as f64, c as f64 - cc as f64);
        if (2.0..=4.0).contains(&i.hypot(j)) {
            let r2 = (i * pitch.y).powi(2) + (j * pitch.x).powi(2);
            // Outside the tip is infinitely deep: radius 0. Flat: infinite.
            radii.push(r2 / (-2.0 * f64::from(p)).max(0.0));
        }
    }
    if radii.is_empty() {
        return None;
    }
    radii.sort_by(f64::total_cmp);
    Some(radii[radii.len() / 2])
}
