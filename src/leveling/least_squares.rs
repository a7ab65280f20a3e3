//! Weighted linear least squares by orthogonal factorisation, with covariance.
//!
//! The observations are folded block by block into one triangular factor (Householder QR), so a
//! million rows need no more memory than a hundred. Normal equations are never formed.
//! Source: Golub and Van Loan, Matrix Computations, ch. 5 (from memory).

// The fits of dimensions and tips are built on this too; levelling alone needs only a part.
#![allow(dead_code)]

use crate::error::{Error, ErrorKind, Result};
use nalgebra::{DMatrix, DVector};

/// Rows gathered before they are folded into the factor.
const BLOCK: usize = 128;

/// Condition number of the column-scaled factor above which a fit is refused.
const WORST_CONDITION: f64 = 1e13;

/// A linear least-squares problem that observations are added to.
#[derive(Debug, Clone)]
pub(crate) struct Accumulator {
    unknowns: usize,
    count: usize,
    /// Upper triangle of `[A | y]`, `(unknowns + 1)` squared, row-major.
    factor: DMatrix<f64>,
    /// Rows not folded in yet, each `unknowns + 1` long.
    pending: Vec<f64>,
}

/// A solved least-squares problem.
#[derive(Debug, Clone)]
pub(crate) struct Fit {
    /// The coefficients, in the order of the design's columns.
    pub coefficients: Vec<f64>,
    /// `(A' W A)^-1`: the covariance when each weight is one over the observation's variance.
    pub inverse_normal: DMatrix<f64>,
    /// Weighted sum of squared residuals.
    pub residual_sum: f64,
    /// Observations of positive weight minus unknowns.
    pub degrees_of_freedom: usize,
    /// Condition number of the design with its columns scaled to unit length.
    pub condition: f64,
}

impl Accumulator {
    /// An empty problem with `unknowns` coefficients.
    pub(crate) fn new(unknowns: usize) -> Self {
        let width = unknowns + 1;
        Self {
            unknowns,
            count: 0,
            factor: DMatrix::zeros(width, width),
            pending: Vec::with_capacity(BLOCK * width),
        }
    }

    /// Adds one observation; `row` holds the design's entries. Weights that are not positive and
    /// finite, and observations that are not finite, add nothing.
    pub(crate) fn add(&mut self, row: &[f64], y: f64, weight: f64) {
        debug_assert_eq!(row.len(), self.unknowns);
        let usable = weight > 0.0 && weight.is_finite() && y.is_finite();
        if !usable || row.iter().any(|a| !a.is_finite()) {
            return;
        }
        let root = weight.sqrt();
        self.pending.extend(row.iter().map(|a| a * root));
        self.pending.push(y * root);
        self.count += 1;
        if self.pending.len() >= BLOCK * (self.unknowns + 1) {
            self.fold();
        }
    }

    /// Adds all observations of `other`, which has the same unknowns.
    pub(crate) fn merge(&mut self, mut other: Self) {
        debug_assert_eq!(self.unknowns, other.unknowns);
        other.fold();
        self.fold();
        for r in 0..=self.unknowns {
            self.pending.extend(other.factor.row(r).iter());
        }
        self.count += other.count;
        self.fold();
    }

    /// As few rows `[design | y]` as there are columns, which weigh as much as all observations
    /// added so far.
    pub(crate) fn reduced(mut self) -> DMatrix<f64> {
        self.fold();
        self.factor
    }

    fn fold(&mut self) {
        let width = self.unknowns + 1;
        if self.pending.is_empty() {
            return;
        }
        let rows = self.pending.len() / width;
        let mut stacked = DMatrix::zeros(width + rows, width);
        stacked.rows_mut(0, width).copy_from(&self.factor);
        stacked
            .rows_mut(width, rows)
            .copy_from(&DMatrix::from_row_slice(rows, width, &self.pending));
        self.factor = stacked.qr().unpack_r();
        self.pending.clear();
    }

    /// Solves.
    ///
    /// Errors of kind `Data` when there are fewer observations than unknowns, or when the
    /// observations do not tell the unknowns apart.
    pub(crate) fn solve(mut self) -> Result<Fit> {
        let p = self.unknowns;
        if self.count < p || p == 0 {
            return Err(Error::new(
                ErrorKind::Data,
                format!(
                    "a least-squares fit of {p} coefficients has only {} usable points",
                    self.count
                ),
            )
            .remedy("Choose a larger region or a lower order"));
        }
        self.fold();
        let r = self.factor.view((0, 0), (p, p)).into_owned();
        let right = DVector::from_iterator(p, self.factor.view((0, p), (p, 1)).iter().copied());
        // Columns of unit length: the condition then speaks of geometry, not of units.
        let scale: Vec<f64> = (0..p).map(|j| r.column(j).norm()).collect();
        let dependent = |condition: f64| {
            Error::new(
                ErrorKind::Data,
                format!(
                    "the points do not determine all {p} coefficients of the fit \
                     (condition number {condition:.1e})"
                ),
            )
            .remedy("Choose points that spread over more positions, or a lower order")
        };
        if scale.iter().any(|s| *s <= 0.0 || !s.is_finite()) {
            return Err(dependent(f64::INFINITY));
        }
        let scaled = DMatrix::from_fn(p, p, |i, j| r[(i, j)] / scale[j]);
        let singular = scaled.singular_values();
        let condition = singular.max() / singular.min();
        if condition.is_nan() || condition > WORST_CONDITION {
            return Err(dependent(condition));
        }
        let solve = |b: &DMatrix<f64>| {
            scaled
                .solve_upper_triangular(b)
                .ok_or_else(|| dependent(f64::INFINITY))
        };
        let solution = solve(&DMatrix::from_column_slice(p, 1, right.as_slice()))?;
        let inverse = solve(&DMatrix::identity(p, p))?;
        let normal = &inverse * inverse.transpose();
        Ok(Fit {
            coefficients: (0..p).map(|j| solution[(j, 0)] / scale[j]).collect(),
            inverse_normal: DMatrix::from_fn(p, p, |i, j| normal[(i, j)] / (scale[i] * scale[j])),
            residual_sum: self.factor[(p, p)].powi(2),
            degrees_of_freedom: self.count - p,
            condition,
        })
    }
}

impl Fit {
    /// Residual standard deviation; `None` when the fit has no observation to spare.
    pub(crate) fn residual_sd(&self) -> Option<f64> {
        (self.degrees_of_freedom > 0)
            .then(|| (self.residual_sum / self.degrees_of_freedom as f64).sqrt())
    }

    /// Covariance of the coefficients, scaled by the residuals; `None` with no spare observation.
    pub(crate) fn covariance(&self) -> Option<DMatrix<f64>> {
        self.residual_sd()
            .map(|sd| &self.inverse_normal * (sd * sd))
    }
}

/// Fits `y = sum_j c_j design(i)_j` with unit weights, or with `weights`.
///
/// `design(i, row)` fills the entries of observation `i`. Errors as [`Accumulator::solve`].
pub(crate) fn fit(
    unknowns: usize,
    y: &[f64],
    weights: Option<&[f64]>,
    design: impl Fn(usize, &mut [f64]),
) -> Result<Fit> {
    let mut problem = Accumulator::new(unknowns);
    let mut row = vec![0.0; unknowns];
    for (i, &value) in y.iter().enumerate() {
        design(i, &mut row);
        problem.add(&row, value, weights.map_or(1.0, |w| w[i]));
    }
    problem.solve()
}

/// A polynomial in one variable, fitted in the centred and scaled variable `(x - centre) / scale`.
#[derive(Debug, Clone)]
pub(crate) struct Polynomial {
    /// Middle of the abscissae.
    pub centre: f64,
    /// Half their extent.
    pub scale: f64,
    /// The fit in the scaled variable, constant first.
    pub fit: Fit,
}

impl Polynomial {
    /// Fits a polynomial of `order` to the points.
    ///
    /// Errors as [`Accumulator::solve`].
    pub(crate) fn fit(x: &[f64], y: &[f64], weights: Option<&[f64]>, order: usize) -> Result<Self> {
        let finite = || x.iter().copied().filter(|v| v.is_finite());
        let low = finite().fold(f64::INFINITY, f64::min);
        let high = finite().fold(f64::NEG_INFINITY, f64::max);
        let centre = if low <= high { 0.5 * (low + high) } else { 0.0 };
        let half = 0.5 * (high - low);
        let scale = if half > 0.0 { half } else { 1.0 };
        let fit = fit(order + 1, y, weights, |i, row| {
            let u = (x[i] - centre) / scale;
            let mut power = 1.0;
            for entry in row {
                *entry = power;
                power *= u;
            }
        })?;
        Ok(Self { centre, scale, fit })
    }

    /// The value at `x`.
    pub(crate) fn at(&self, x: f64) -> f64 {
        let u = (x - self.centre) / self.scale;
        self.fit
            .coefficients
            .iter()
            .rev()
            .fold(0.0, |sum, c| sum * u + c)
    }

    /// The coefficients of the powers of plain `x`, constant first.
    pub(crate) fn plain_coefficients(&self) -> Vec<f64> {
        let mut plain = vec![0.0; self.fit.coefficients.len()];
        // Horner with polynomials: plain = plain * (x - centre) / scale + c.
        for c in self.fit.coefficients.iter().rev() {
            for j in (0..plain.len()).rev() {
                let below = if j > 0 { plain[j - 1] } else { 0.0 };
                plain[j] = (below - self.centre * plain[j]) / self.scale;
            }
            plain[0] += c;
        }
        plain
    }
}

pub(crate) mod nonlinear;
#[cfg(test)]
mod tests;
