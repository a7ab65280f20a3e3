//! Several quantities at once, with the covariances between them.

use crate::error::{Error, ErrorKind, Result};
use nalgebra::DMatrix;

/// Estimates of several quantities and their covariance matrix.
#[derive(Debug, Clone, PartialEq)]
pub struct Joint {
    values: Vec<f64>,
    covariance: DMatrix<f64>,
}

impl Joint {
    /// `values` with their `covariance`, square and of the same size.
    ///
    /// Errors of kind `Data`: another size, a value or variance that is not finite, a
    /// negative variance.
    pub fn new(values: Vec<f64>, covariance: DMatrix<f64>) -> Result<Self> {
        let n = values.len();
        let fits = covariance.nrows() == n && covariance.ncols() == n;
        let good = |v: &f64| *v >= 0.0 && v.is_finite();
        if !fits || !covariance.diagonal().iter().all(good) || !values.iter().all(|v| v.is_finite())
        {
            return Err(Error::new(
                ErrorKind::Data,
                format!(
                    "a covariance matrix of {} x {} for {n} quantities",
                    covariance.nrows(),
                    covariance.ncols()
                ),
            )
            .remedy("Give finite values and a square matrix of the same size with variances of 0 or more"));
        }
        Ok(Self { values, covariance })
    }

    /// Means of quantities observed together, `observations[k][i]` being quantity i in
    /// observation k, with the covariances of the means: JCGM 100:2008, 5.2.3, equation (17).
    ///
    /// Errors of kind `Data`: fewer than two observations, observations of different length.
    pub fn of_observations(observations: &[Vec<f64>]) -> Result<Self> {
        let n = observations.len();
        let size = observations.first().map_or(0, Vec::len);
        if n < 2 || observations.iter().any(|o| o.len() != size) {
            return Err(Error::new(
                ErrorKind::Data,
                format!("{n} observations of {size} quantities"),
            )
            .remedy("Give at least two observations, each of every quantity"));
        }
        let mean = |i: usize| observations.iter().map(|o| o[i]).sum::<f64>() / n as f64;
        let values: Vec<f64> = (0..size).map(mean).collect();
        let covariance = DMatrix::from_fn(size, size, |i, j| {
            observations
                .iter()
                .map(|o| (o[i] - values[i]) * (o[j] - values[j]))
                .sum::<f64>()
                / (n * (n - 1)) as f64
        });
        Self::new(values, covariance)
    }

    /// The estimates.
    pub fn values(&self) -> &[f64] {
        &self.values
    }

    /// Standard uncertainty of quantity `i`.
    pub fn u(&self, i: usize) -> f64 {
        self.covariance[(i, i)].sqrt()
    }

    /// Correlation coefficient between quantities `i` and `j`; 0 where one is certain.
    pub fn correlation(&self, i: usize, j: usize) -> f64 {
        let product = self.u(i) * self.u(j);
        if product > 0.0 {
            self.covariance[(i, j)] / product
        } else {
            0.0
        }
    }

    /// What `model` makes of the quantities, by the law of propagation with all covariances
    /// (JCGM 100:2008, 5.2.2; several outputs: JCGM 102:2011, 6.2). Sensitivities are half the
    /// change of the model over plus and minus one standard uncertainty (5.1.3, note 2).
    ///
    /// Errors of kind `Data` where the model gives no finite figure.
    pub fn through(&self, model: impl Fn(&[f64]) -> Vec<f64>) -> Result<Self> {
        let outputs = model(&self.values);
        let n = self.values.len();
        let mut contributions = DMatrix::zeros(outputs.len(), n);
        for i in 0..n {
            let moved = |sign: f64| {
                let mut inputs = self.values.clone();
                inputs[i] += sign * self.u(i);
                model(&inputs)
            };
            for (k, (up, down)) in moved(1.0).iter().zip(&moved(-1.0)).enumerate() {
                contributions[(k, i)] = (up - down) / 2.0;
            }
        }
        let correlations =
            DMatrix::from_fn(
                n,
                n,
                |i, j| if i == j { 1.0 } else { self.correlation(i, j) },
            );
        let mut covariance = &contributions * correlations * contributions.transpose();
        // Rounding must not make a variance of nothing negative.
        for i in 0..outputs.len() {
            if covariance[(i, i)] < 0.0 {
                covariance[(i, i)] = 0.0;
            }
        }
        Self::new(outputs, covariance)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sums_and_differences_of_correlated_quantities() {
        // Closed form: var(a +- b) = 4 + 9 +- 2 * 3.
        let joint = Joint::new(
            vec![1.0, 2.0],
            DMatrix::from_row_slice(2, 2, &[4.0, 3.0, 3.0, 9.0]),
        )
        .unwrap();
        let out = joint.through(|x| vec![x[0] + x[1], x[0] - x[1]]).unwrap();
        assert_eq!(out.values(), [3.0, -1.0]);
        assert!((out.u(0) - 19f64.sqrt()).abs() < 1e-12);
        assert!((out.u(1) - 7f64.sqrt()).abs() < 1e-12);
        let r = (4.0 - 9.0) / (19.0f64 * 7.0).sqrt();
        assert!((out.correlation(0, 1) - r).abs() < 1e-12);
    }

    #[test]
    fn what_is_certain_correlates_with_nothing() {
        let joint = Joint::new(vec![1.0, 2.0], DMatrix::zeros(2, 2)).unwrap();
        let out = joint.through(|x| vec![x[0] * x[1]]).unwrap();
        assert_eq!((out.u(0), joint.correlation(0, 1)), (0.0, 0.0));
    }

    #[test]
    fn bad_sizes_and_too_few_observations_are_named() {
        let error = Joint::new(vec![1.0], DMatrix::zeros(2, 2)).unwrap_err();
        assert!(error.to_string().contains("2 x 2 for 1"), "{error}");
        assert!(Joint::of_observations(&[vec![1.0]]).is_err());
        assert!(Joint::of_observations(&[vec![1.0], vec![1.0, 2.0]]).is_err());
        let one = Joint::new(vec![1.0], DMatrix::identity(1, 1)).unwrap();
        assert!(one.through(|_| vec![f64::NAN]).is_err());
    }
}
