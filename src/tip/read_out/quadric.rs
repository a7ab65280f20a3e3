//! Surfaces fitted to the cap of a tip by least squares on its depths.

use super::NOISE_REACH;
use crate::heightmap::Pitch;
use crate::leveling::least_squares;
use nalgebra::{DMatrix, DVector, Matrix2};
use ndarray::ArrayView2;

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
    pub(super) u_relative: f64,
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

/// Apex radius of the paraboloid `t = c + a x + b y + (kxx x^2 + 2 kxy x y + kyy y^2) / 2` over the
/// cap, `1 / sqrt(det k)`, nm; `None` where it is not convex or with fewer than 12 cells.
pub(super) fn paraboloid_radius(shape: ArrayView2<f32>, pitch: Pitch, depth: f64) -> Option<f64> {
    let cells = cap(shape, pitch, depth);
    if cells.len() < 12 {
        return None;
    }
    let mut fit = least_squares::Accumulator::new(6);
    for (x, y, t) in &cells {
        fit.add(&[1.0, *x, *y, x * x / 2.0, x * y, y * y / 2.0], *t, 1.0);
    }
    let k = fit.solve().ok()?.coefficients;
    let determinant = k[3] * k[5] - k[4] * k[4];
    (determinant > 0.0 && k[3] > 0.0).then(|| 1.0 / determinant.sqrt())
}

/// Radius of the sphere `t = c + R - sqrt(R^2 - (x - a)^2 - (y - b)^2)` over the cap, nm, by
/// Gauss-Newton steps from `start`; `None` where they do not settle.
pub(super) fn sphere_radius(
    shape: ArrayView2<f32>,
    pitch: Pitch,
    depth: f64,
    start: f64,
) -> Option<f64> {
    let cells = cap(shape, pitch, depth);
    if cells.len() < 12 {
        return None;
    }
    let widest = cells.iter().map(|c| c.0.hypot(c.1)).fold(0.0, f64::max);
    let (mut a, mut b, mut c, mut radius) = (0.0, 0.0, 0.0, start.max(1.05 * widest));
    for _ in 0..50 {
        let mut fit = least_squares::Accumulator::new(4);
        for (x, y, t) in &cells {
            let (dx, dy) = (x - a, y - b);
            // Cells beside a ball that a step made too small: its rim, so that it can grow again.
            let rest = (radius * radius - dx * dx - dy * dy).max(1e-4 * radius * radius);
            let root = rest.sqrt();
            let model = c + radius - root;
            let row = [-dx / root, -dy / root, 1.0, 1.0 - radius / root];
            fit.add(&row, t - model, 1.0);
        }
        let step = fit.solve().ok()?.coefficients;
        a += step[0];
        b += step[1];
        c += step[2];
        radius = (radius + step[3]).clamp(0.5 * radius, 2.0 * radius);
        if step[3].abs() < 1e-9 * radius {
            return Some(radius);
        }
    }
    None
}
