//! What a tip's shape says: apex radius and half-angle, each with the depth it was read at.
//!
//! The radius is the radius of curvature *at* the apex. A parabola fitted to a deep cap of a
//! sphere of radius `R` reads less than `R` (pointwise `R - z / 2`), so the cap is fitted with a
//! quadric, which holds sphere, paraboloid and hyperboloid alike:
//! `t = c + a x + b y + (kxx x^2 + 2 kxy x y + kyy y^2) / 2 + kappa t^2 / 2`
//! (`kappa = 1 / R` for a sphere, 0 for a paraboloid).

use super::Tip;
use crate::heightmap::Pitch;
use nalgebra::{DMatrix, DVector, Matrix2};
use ndarray::ArrayView2;
use std::f64::consts::PI;

/// Azimuths at which the flank is read.
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

fn apex_radius(tip: &Tip, depth: f64, sin: f64, noise: f64) -> Result<ApexRadius, String> {
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
    })
}

/// A quadric fitted to the cap.
pub(crate) struct Quadric {
    /// Depth of the cap used, nm.
    pub depth: f64,
    /// Lateral place of the apex, nm from the grid's centre, x and y.
    pub apex: [f64; 2],
    /// Depth of the fitted apex, nm (negative: above the centre cell).
    pub apex_depth: f64,
    /// Root mean square of what the quadric leaves, nm.
    pub misfit: f64,
    curvature: Matrix2<f64>,
    u_relative: f64,
}

impl Quadric {
    /// Least squares over the cells connected to the apex and at most `depth` below it;
    /// `None` with fewer than 12 such cells or a degenerate system.
    ///
    /// Heights uncertain by `noise` cannot tell how the cap departs from a sphere; then it is taken
    /// as one: `kappa R = 1` enters as a further observation with standard deviation 0.5.
    pub(crate) fn fit(
        shape: ArrayView2<f32>,
        pitch: Pitch,
        depth: f64,
        noise: f64,
    ) -> Option<Self> {
        let cells = cap(shape, pitch, depth);
        if cells.len() < 12 {
            return None;
        }
        let scale = cells.iter().map(|c| c.0.hypot(c.1)).fold(0.0, f64::max);
        let unit = depth.max(f64::MIN_POSITIVE);
        let t = DVector::from_iterator(cells.len(), cells.iter().map(|c| c.2 / unit));
        let mut fitted = t.clone();
        let mut kappa = 0.0;
        let mut solution = DVector::zeros(7);
        let mut covariance = DMatrix::zeros(7, 7);
        let mut residual = 0.0;
        // The sphere as an observation: kappa = unit / R where k = scale^2 / (R unit).
        let to_kappa = (unit / scale).powi(2);
        let n = cells.len();
        let mut prior = 0.0;
        for _ in 0..5 {
            let design = DMatrix::from_fn(n + 1, 7, |i, k| {
                if i == n {
                    return prior * [0.0, 0.0, 0.0, -0.5 * to_kappa, 0.0, -0.5 * to_kappa, 1.0][k];
                }
                let (x, y) = (cells[i].0 / scale, cells[i].1 / scale);
                // An error of t enters the equation as (1 - kappa t) dt.
                let weight = 1.0 / (1.0 - kappa * fitted[i]).max(0.1);
                weight
                    * [
                        1.0,
                        x,
                        y,
                        x * x / 2.0,
                        x * y,
                        y * y / 2.0,
                        fitted[i].powi(2) / 2.0,
                    ][k]
            });
            let right = DVector::from_fn(n + 1, |i, _| match i {
                i if i == n => 0.0,
                i => t[i] / (1.0 - kappa * fitted[i]).max(0.1),
            });
            let svd = design.clone().svd(true, true);
            solution = svd.solve(&right, 1e-9).ok()?;
            let misfit = &design * &solution - &right;
            residual = misfit.norm_squared() / (cells.len() as f64 - 7.0);
            covariance = (design.transpose() * &design).pseudo_inverse(1e-12).ok()?;
            kappa = solution[6];
            let sphere = 0.5 * to_kappa * (solution[3] + solution[5]);
            prior = NOISE_REACH * noise / unit / (0.5 * sphere.abs().max(1e-6));
            for i in 0..cells.len() {
                let (x, y) = (cells[i].0 / scale, cells[i].1 / scale);
                let q = solution[0]
                    + solution[1] * x
                    + solution[2] * y
                    + solution[3] * x * x / 2.0
                    + solution[4] * x * y
                    + solution[5] * y * y / 2.0;
                // t = q + kappa t^2 / 2, the branch through t = q.
                let root = 1.0 - 2.0 * kappa * q;
                if root > 0.0 {
                    fitted[i] = 2.0 * q / (1.0 + root.sqrt());
                }
            }
        }
        let k = Matrix2::new(solution[3], solution[4], solution[4], solution[5]);
        let place = k
            .try_inverse()
            .map(|inverse| -(inverse * nalgebra::Vector2::new(solution[1], solution[2])))?;
        // Curvature relative to its size, from the mean of both directions.
        let mean = 0.5 * (solution[3] + solution[5]);
        let var = 0.25 * (covariance[(3, 3)] + covariance[(5, 5)] + 2.0 * covariance[(3, 5)]);
        let apex_q = solution[0] + 0.5 * (solution[1] * place[0] + solution[2] * place[1]);
        Some(Self {
            depth,
            apex: [place[0] * scale, place[1] * scale],
            apex_depth: apex_q * unit,
            misfit: residual.sqrt() * unit,
            curvature: k * (unit / (scale * scale)),
            u_relative: (var * residual).sqrt() / mean.abs().max(f64::MIN_POSITIVE),
        })
    }

    /// Principal curvatures at the apex, 1/nm, larger first.
    pub(crate) fn principal(&self) -> [f64; 2] {
        let e = self.curvature.symmetric_eigenvalues();
        if e[0] >= e[1] {
            [e[0], e[1]]
        } else {
            [e[1], e[0]]
        }
    }

    /// Geometric mean radius at the apex, nm; `None` where not convex.
    pub(crate) fn radius(&self) -> Option<f64> {
        let [k1, k2] = self.principal();
        (k2 > 0.0).then(|| 1.0 / (k1 * k2).sqrt())
    }
}

/// Cells `(x, y, depth)` in nm that hang together with the apex and are at most `depth` deep.
fn cap(shape: ArrayView2<f32>, pitch: Pitch, depth: f64) -> Vec<(f64, f64, f64)> {
    let (rows, columns) = shape.dim();
    let (cr, cc) = (rows / 2, columns / 2);
    let mut seen = vec![false; rows * columns];
    let mut stack = vec![(cr, cc)];
    seen[cr * columns + cc] = true;
    let mut cells = Vec::new();
    while let Some((r, c)) = stack.pop() {
        let x = (c as f64 - cc as f64) * pitch.x;
        let y = (r as f64 - cr as f64) * pitch.y;
        cells.push((x, y, -f64::from(shape[[r, c]])));
        for (i, j) in [
            (r.wrapping_sub(1), c),
            (r + 1, c),
            (r, c.wrapping_sub(1)),
            (r, c + 1),
        ] {
            if i < rows && j < columns && !seen[i * columns + j] {
                seen[i * columns + j] = true;
                if -f64::from(shape[[i, j]]) <= depth {
                    stack.push((i, j));
                }
            }
        }
    }
    cells.sort_by(|a, b| {
        (a.1, a.0)
            .partial_cmp(&(b.1, b.0))
            .unwrap_or(std::cmp::Ordering::Equal)
    });
    cells
}

/// Flank slope between two depths per azimuth; `None` unless two thirds of the azimuths show it.
fn half_angle(tip: &Tip, between: [f64; 2], noise: f64) -> Option<HalfAngle> {
    let [upper, lower] = between;
    let map = tip.to_map().ok()?;
    let [w, h] = tip.support_nm();
    let step = 0.25 * tip.pitch().x.min(tip.pitch().y);
    let mut per_azimuth = Vec::with_capacity(AZIMUTHS);
    let mut variance = 0.0;
    for k in 0..AZIMUTHS {
        let azimuth = 2.0 * PI * k as f64 / AZIMUTHS as f64;
        let (sin, cos) = azimuth.sin_cos();
        let mut points = Vec::new();
        let mut before = f64::NEG_INFINITY;
        for i in 0.. {
            let d = f64::from(i) * step;
            let z = -f64::from(map.height_at(w / 2.0 + d * cos, h / 2.0 + d * sin));
            // NaN: past the grid or the tip. Rising again: a second apex, not this flank.
            if z.is_nan() || z > lower || z < before - 2.0 * noise - 1e-9 * lower {
                break;
            }
            before = before.max(z);
            if z >= upper {
                points.push((z, d));
            }
        }
        let enough = points.len() >= 4
            && points
                .last()
                .is_some_and(|l| l.0 - points[0].0 > 0.4 * (lower - upper));
        if let Some((slope, u)) = enough.then(|| line(&points)) {
            per_azimuth.push((azimuth.to_degrees(), slope.atan().to_degrees()));
            let u_noise = std::f64::consts::SQRT_2 * noise * slope / (lower - upper);
            variance += (u * u + u_noise * u_noise) / (1.0 + slope * slope).powi(2);
        }
    }
    if 3 * per_azimuth.len() < 2 * AZIMUTHS {
        return None;
    }
    let n = per_azimuth.len() as f64;
    Some(HalfAngle {
        value: per_azimuth.iter().map(|a| a.1).sum::<f64>() / n,
        u: (variance / n).sqrt().to_degrees(),
        between_nm: between,
        per_azimuth,
    })
}

/// Slope of `y` over `x` and its standard error.
fn line(points: &[(f64, f64)]) -> (f64, f64) {
    let n = points.len() as f64;
    let (mx, my) = points
        .iter()
        .fold((0.0, 0.0), |s, p| (s.0 + p.0 / n, s.1 + p.1 / n));
    let (mut xx, mut xy, mut yy) = (0.0, 0.0, 0.0);
    for (x, y) in points {
        xx += (x - mx) * (x - mx);
        xy += (x - mx) * (y - my);
        yy += (y - my) * (y - my);
    }
    let slope = xy / xx;
    let rss = (yy - slope * xy).max(0.0);
    (slope, (rss / (n - 2.0).max(1.0) / xx).sqrt())
}

#[cfg(test)]
mod tests {
    use super::super::model::Model;
    use super::*;

    fn sphere_cone(radius: f64, half_angle: f64, px: f64) -> Tip {
        Model::SphereCone { radius, half_angle }
            .sample(65.0 * px, Pitch::square(px))
            .unwrap()
    }

    /// methods: the figure wanted is the curvature at the apex (closed form of the sphere).
    #[test]
    fn a_sphere_of_radius_8_reads_8() {
        for (radius, angle, px) in [
            (8.0, 15.0, 1.0),
            (10.0, 20.0, 1.0),
            (20.0, 15.0, 2.0),
            (8.0, 10.0, 0.5),
        ] {
            let tip = sphere_cone(radius, angle, px);
            let out = read_out(&tip, 40.0 * px, 0.01);
            let r = out
                .apex_radius
                .unwrap_or_else(|| panic!("{:?}", out.reasons));
            assert!((r.value / radius - 1.0).abs() < 0.005, "{r:?}");
            assert!(r.fit_depth_nm < radius * (1.0 - angle.to_radians().sin()));
            let a = out
                .half_angle
                .unwrap_or_else(|| panic!("{:?}", out.reasons));
            assert!((a.value - angle).abs() < 0.4, "{a:?}");
        }
    }

    #[test]
    fn a_paraboloid_reads_its_radius_and_an_apex_between_pixels_does_no_harm() {
        let tip = Model::Paraboloid { radius: 12.0 }
            .sample(41.0, Pitch::square(1.0))
            .unwrap();
        let r = read_out(&tip, 10.0, 0.0).apex_radius.unwrap();
        assert!((r.value - 12.0).abs() < 1e-3, "{r:?}");
        let shifted = Model::SphereCone {
            radius: 8.0,
            half_angle: 15.0,
        };
        let base = shifted.height(0.4, 0.3);
        let shape = ndarray::Array2::from_shape_fn((41, 41), |(i, j)| {
            let (x, y) = (j as f64 - 20.0 + 0.4, i as f64 - 20.0 + 0.3);
            (base - shifted.height(x, y)).min(0.0) as f32
        });
        let tip = Tip::new(shape, Pitch::square(1.0)).unwrap();
        let r = read_out(&tip, 20.0, 0.01).apex_radius.unwrap();
        assert!((r.value - 8.0).abs() < 0.1, "{r:?}");
    }

    #[test]
    fn principal_radii_and_unequal_pitch() {
        let shape = ndarray::Array2::from_shape_fn((41, 61), |(i, j)| {
            let (x, y) = ((j as f64 - 30.0) * 0.5, (i as f64 - 20.0) * 1.0);
            -(x * x / 16.0 + y * y / 30.0) as f32
        });
        let tip = Tip::new(shape, Pitch { x: 0.5, y: 1.0 }).unwrap();
        let r = read_out(&tip, 4.0, 0.0).apex_radius.unwrap();
        assert!((r.principal_nm[0] - 8.0).abs() < 0.01, "{r:?}");
        assert!((r.principal_nm[1] - 15.0).abs() < 0.01, "{r:?}");
    }

    #[test]
    fn what_is_not_there_is_refused_with_a_reason() {
        let pyramid = Model::Pyramid {
            half_angles: [15.0, 25.0, 20.0, 20.0],
        }
        .sample(65.0, Pitch::square(1.0))
        .unwrap();
        let out = read_out(&pyramid, 50.0, 0.05);
        assert!(out.apex_radius.is_none());
        assert!(
            out.reasons[0].contains("sharper than the pixels"),
            "{:?}",
            out.reasons
        );
        // Faces towards -x (15) and +x (25) at azimuths 180 and 0.
        let angles = out.half_angle.unwrap().per_azimuth;
        let at = |a: f64| angles.iter().find(|p| (p.0 - a).abs() < 1e-6).unwrap().1;
        assert!((at(0.0) - 25.0).abs() < 0.2 && (at(180.0) - 15.0).abs() < 0.2);

        let flat = Tip::new(ndarray::Array2::zeros((21, 21)), Pitch::square(1.0)).unwrap();
        assert!(read_out(&flat, 5.0, 0.1).apex_radius.is_none());
        let one = Tip::new(ndarray::Array2::zeros((1, 1)), Pitch::square(1.0)).unwrap();
        assert_eq!(read_out(&one, 5.0, 0.1).reasons.len(), 1);
        // Exercised too little, or too noisy.
        let tip = sphere_cone(8.0, 15.0, 1.0);
        assert!(read_out(&tip, 0.3, 0.01).apex_radius.is_none());
        assert!(read_out(&tip, 20.0, 1.5).apex_radius.is_none());
        assert!(read_out(&tip, 4.0, 0.01).half_angle.is_none());
    }

    #[test]
    fn the_uncertainty_covers_the_scatter() {
        // A plain linear congruence is noise enough here.
        let mut state = 1u64;
        let mut noise = || {
            let mut sum = 0.0;
            for _ in 0..12 {
                state = state
                    .wrapping_mul(6364136223846793005)
                    .wrapping_add(1442695040888963407);
                sum += (state >> 11) as f64 / (1u64 << 53) as f64;
            }
            sum - 6.0
        };
        let clean = sphere_cone(8.0, 15.0, 1.0);
        let inside = (0..60)
            .filter(|_| {
                let mut shape = clean.shape().to_owned();
                shape.mapv_inplace(|p| (p + 0.05 * noise() as f32).min(0.0));
                shape[[32, 32]] = 0.0;
                let tip = Tip::new(shape, Pitch::square(1.0)).unwrap();
                let r = read_out(&tip, 40.0, 0.05).apex_radius.unwrap();
                (r.value - 8.0).abs() < 2.0 * r.u
            })
            .count();
        assert!(inside >= 55, "{inside} of 60");
    }
}
