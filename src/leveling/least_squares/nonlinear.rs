//! Nonlinear least squares with covariance, and with the directions that the data leave open.
//!
//! Levenberg-Marquardt in the manner of MINPACK (J. J. More, Lect. Notes Math. 630, 105 (1978),
//! from memory), from the crate `levenberg-marquardt`; Jacobians by central differences.

use crate::error::{Error, ErrorKind, Result};
use levenberg_marquardt::{LeastSquaresProblem, LevenbergMarquardt};
use nalgebra::storage::Owned;
use nalgebra::{DMatrix, DVector, Dyn};

/// Step of the differences, in units of the parameters' scales.
const STEP: f64 = 1e-5;

/// Singular values of the scaled Jacobian below this part of the largest are flat directions.
const FLAT: f64 = 1e-7;

/// A solved nonlinear problem.
#[derive(Debug, Clone)]
pub(crate) struct Fit {
    /// The parameters.
    pub parameters: Vec<f64>,
    /// Sum of the squared residuals.
    pub residual_sum: f64,
    /// Residuals minus parameters that the data determine.
    pub degrees_of_freedom: usize,
    /// `(J' J)^-1` over the directions that are not flat: the covariance for residuals of unit
    /// variance.
    pub inverse_normal: DMatrix<f64>,
    /// Whether each parameter keeps out of the Jacobian's flat directions.
    pub determined: Vec<bool>,
}

/// Minimises the sum of squares of `count` residuals, which `residuals` fills for given
/// parameters. `scale` holds a change of each parameter that matters, positive.
///
/// Errors of kind `Data`: fewer residuals than parameters, a residual that is not finite, no
/// minimum found.
pub(crate) fn fit(
    start: &[f64],
    scale: &[f64],
    count: usize,
    residuals: &dyn Fn(&[f64], &mut [f64]),
) -> Result<Fit> {
    let n = start.len();
    let refuse = |what: String| {
        Error::new(ErrorKind::Data, what)
            .remedy("Choose a region that shows the whole feature and its surroundings")
    };
    if count < n || n == 0 {
        return Err(refuse(format!(
            "a fit of {n} parameters has only {count} usable points"
        )));
    }
    let scaled = start.iter().zip(scale).map(|(p, s)| p / s);
    let problem = Problem {
        at: DVector::from_iterator(n, scaled),
        scale,
        count,
        residuals,
    };
    let (problem, report) = LevenbergMarquardt::new()
        .with_tol(1e-9)
        .with_patience(60)
        .minimize(problem);
    use levenberg_marquardt::TerminationReason as Reason;
    let settled = report.termination.was_successful()
        || matches!(
            report.termination,
            Reason::NoImprovementPossible(_) | Reason::LostPatience
        );
    let (Some(r), Some(jacobian)) = (problem.residuals(), problem.jacobian()) else {
        return Err(refuse("the fit left the numbers".to_owned()));
    };
    if !settled {
        return Err(refuse(format!(
            "the fit did not settle: {:?}",
            report.termination
        )));
    }
    let svd = jacobian.svd(false, true);
    let (values, Some(vectors)) = (svd.singular_values, svd.v_t) else {
        return Err(refuse("the fit left the numbers".to_owned()));
    };
    let largest = values.max();
    let mut inverse_normal = DMatrix::zeros(n, n);
    let mut determined = vec![true; n];
    let mut rank = 0;
    for (k, &value) in values.iter().enumerate() {
        let direction = vectors.row(k);
        if value > FLAT * largest {
            rank += 1;
            for i in 0..n {
                for j in 0..n {
                    inverse_normal[(i, j)] +=
                        direction[i] * direction[j] * scale[i] * scale[j] / (value * value);
                }
            }
        } else {
            for (i, determined) in determined.iter_mut().enumerate() {
                *determined &= direction[i].abs() < 0.01;
            }
        }
    }
    Ok(Fit {
        parameters: problem.plain(&problem.at),
        residual_sum: r.norm_squared(),
        degrees_of_freedom: count - rank,
        inverse_normal,
        determined,
    })
}

struct Problem<'a> {
    /// Parameters in units of their scales.
    at: DVector<f64>,
    scale: &'a [f64],
    count: usize,
    residuals: &'a dyn Fn(&[f64], &mut [f64]),
}

impl Problem<'_> {
    fn plain(&self, at: &DVector<f64>) -> Vec<f64> {
        at.iter().zip(self.scale).map(|(p, s)| p * s).collect()
    }

    fn residuals_at(&self, at: &DVector<f64>) -> Option<DVector<f64>> {
        let mut r = DVector::zeros(self.count);
        (self.residuals)(&self.plain(at), r.as_mut_slice());
        r.iter().all(|v| v.is_finite()).then_some(r)
    }
}

impl LeastSquaresProblem<f64, Dyn, Dyn> for Problem<'_> {
    type ResidualStorage = Owned<f64, Dyn>;
    type JacobianStorage = Owned<f64, Dyn, Dyn>;
    type ParameterStorage = Owned<f64, Dyn>;

    fn set_params(&mut self, x: &DVector<f64>) {
        self.at.copy_from(x);
    }

    fn params(&self) -> DVector<f64> {
        self.at.clone()
    }

    fn residuals(&self) -> Option<DVector<f64>> {
        self.residuals_at(&self.at)
    }

    fn jacobian(&self) -> Option<DMatrix<f64>> {
        let mut jacobian = DMatrix::zeros(self.count, self.at.len());
        for j in 0..self.at.len() {
            let moved = |step: f64| {
                let mut at = self.at.clone();
                at[j] += step;
                self.residuals_at(&at)
            };
            let step = STEP * self.at[j].abs().max(1.0);
            jacobian.set_column(j, &((moved(step)? - moved(-step)?) / (2.0 * step)));
        }
        Some(jacobian)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// NIST StRD, Misra1a: y = b1 (1 - exp(-b2 x)), both of NIST's starts.
    #[test]
    fn nist_misra1a() {
        let data = [
            (77.6, 10.07),
            (114.9, 14.73),
            (141.1, 17.94),
            (190.8, 23.93),
            (239.9, 29.61),
            (289.0, 35.18),
            (332.8, 40.02),
            (378.4, 44.82),
            (434.8, 50.76),
            (477.3, 55.05),
            (536.8, 61.01),
            (593.1, 66.40),
            (689.1, 75.47),
            (760.0, 81.78),
        ];
        let residuals = |b: &[f64], r: &mut [f64]| {
            for (r, (x, y)) in r.iter_mut().zip(data) {
                *r = y - b[0] * (1.0 - (-b[1] * x).exp());
            }
        };
        for start in [[500.0, 0.0001], [250.0, 0.0005]] {
            let fit = fit(&start, &start, data.len(), &residuals).unwrap();
            let near = |value: f64, certified: f64, relative: f64| {
                assert!(
                    (value / certified - 1.0).abs() < relative,
                    "{value:e} is not {certified:e}"
                );
            };
            near(fit.parameters[0], 2.3894212918e2, 1e-7);
            near(fit.parameters[1], 5.5015643181e-4, 1e-7);
            near(fit.residual_sum, 1.2455138894e-1, 1e-9);
            // Standard deviations of the parameters: certified, from memory.
            let variance = fit.residual_sum / fit.degrees_of_freedom as f64;
            near(
                (variance * fit.inverse_normal[(0, 0)]).sqrt(),
                2.7070075241,
                1e-5,
            );
            near(
                (variance * fit.inverse_normal[(1, 1)]).sqrt(),
                7.2668688436e-6,
                1e-5,
            );
            assert_eq!(fit.determined, [true, true]);
        }
    }

    #[test]
    fn a_flat_direction_is_found_and_named() {
        // Only the sum of the first two counts; the third stands alone.
        let residuals = |p: &[f64], r: &mut [f64]| {
            for (i, r) in r.iter_mut().enumerate() {
                *r = p[0] + p[1] - 3.0 + 0.1 * (i as f64 - 4.5) * (p[2] - 2.0);
            }
        };
        let fit = fit(&[0.5, 1.0, 0.0], &[1.0; 3], 10, &residuals).unwrap();
        assert_eq!(fit.determined, [false, false, true]);
        assert!((fit.parameters[0] + fit.parameters[1] - 3.0).abs() < 1e-9);
        assert!((fit.parameters[2] - 2.0).abs() < 1e-9);
        assert_eq!(fit.degrees_of_freedom, 8);
    }

    #[test]
    fn too_few_points_and_no_numbers_are_errors() {
        let none = |_: &[f64], r: &mut [f64]| r.fill(f64::NAN);
        assert!(fit(&[1.0, 1.0], &[1.0; 2], 1, &none).is_err());
        assert!(fit(&[1.0], &[1.0], 3, &none).is_err());
    }
}
