//! Repeated observations that are not independent.

/// Mean, standard deviation and effective size of a series.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Series {
    /// Arithmetic mean.
    pub mean: f64,
    /// Standard deviation, freed of the correlation's bias; 0 for one value.
    pub deviation: f64,
    /// Number of values.
    pub count: usize,
    /// Number of independent values with the same standard error, 1..=n.
    pub effective: f64,
}

impl Series {
    /// Reads `values` in their order; not-a-numbers are skipped. `None` when nothing is left.
    ///
    /// `n_eff = n / (1 + 2 sum (1 - k/n) rho_k)`, the sum stopped at the first pair of lags whose
    /// autocorrelations add up to nothing (initial positive sequence; Geyer, Statist. Sci. 7, 473
    /// (1992), from memory); both it and the deviation are then freed, to first order, of what
    /// removing the series' own mean took off (common practice).
    pub fn of(values: &[f64]) -> Option<Self> {
        let values: Vec<f64> = values.iter().copied().filter(|v| v.is_finite()).collect();
        let count = values.len();
        if count == 0 {
            return None;
        }
        let n = count as f64;
        let mean = values.iter().sum::<f64>() / n;
        let variance = values.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / n;
        let mut deviation = if count > 1 {
            (variance * n / (n - 1.0)).sqrt()
        } else {
            0.0
        };
        let rho = |lag: usize| {
            values[lag..]
                .iter()
                .zip(&values)
                .map(|(a, b)| (a - mean) * (b - mean))
                .sum::<f64>()
                / n
                / variance
        };
        let mut effective = n;
        if variance > 0.0 {
            // Beyond a third of the series the autocorrelation is mere noise.
            let longest = count / 3;
            let mut rhos = Vec::new();
            let mut lag = 1;
            while lag < longest {
                let pair = [rho(lag), rho(lag + 1)];
                if pair[0] + pair[1] <= 0.0 {
                    break;
                }
                rhos.extend(pair);
                lag += 2;
            }
            let size = |sum: f64| (n / (1.0 + 2.0 * sum)).clamp(1.0, n);
            effective = size(rhos.iter().sum());
            if effective < n {
                // Taking the mean off the series takes about 1 / n_eff off its variance and off
                // every autocorrelation: put both back.
                let lost = 1.0 / effective.max(1.5);
                effective = size(rhos.iter().map(|r| r + (1.0 - r) * lost).sum());
                deviation /= (1.0 - lost).sqrt();
            }
        }
        Some(Self {
            mean,
            deviation,
            count,
            effective,
        })
    }

    /// Standard uncertainty of the mean, from the effective size.
    pub fn standard_error(&self) -> f64 {
        self.deviation / self.effective.sqrt()
    }

    /// Degrees of freedom of that standard uncertainty; `None` when one value tells nothing.
    pub fn degrees_of_freedom(&self) -> Option<f64> {
        (self.count > 1).then(|| (self.effective - 1.0).max(1.0))
    }
}

/// What several independent, equally rough series tell together of the mean of one of them.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pooled {
    /// Variance about the true mean.
    pub variance: f64,
    /// Variance of the mean of one series.
    pub of_mean: f64,
}

impl Pooled {
    /// Averages the autocovariances of `parts` (equally long, in their order, NaN where unknown),
    /// which so become steadier than one series' own. What removing each mean takes off every
    /// autocovariance, the variance of the mean, is put back until it no longer changes; the sum
    /// is stopped as in [`Series::of`]. Short series are so seen to hold few independent pieces.
    /// `None` without two finite values in a part.
    pub fn of(parts: &[Vec<f64>]) -> Option<Self> {
        let length = parts.iter().map(Vec::len).min()?;
        let off: Vec<Vec<f64>> = parts
            .iter()
            .map(|part| {
                let finite = || part.iter().filter(|v| v.is_finite());
                let count = finite().count();
                let mean = finite().sum::<f64>() / count as f64;
                (count > 1).then(|| part.iter().map(|v| v - mean).collect())
            })
            .collect::<Option<_>>()?;
        let covariance = |lag: usize| {
            let (mut sum, mut count) = (0.0, 0usize);
            for part in &off {
                for (a, b) in part[lag..].iter().zip(part) {
                    let product = a * b;
                    if product.is_finite() {
                        sum += product;
                        count += 1;
                    }
                }
            }
            if count > 0 { sum / count as f64 } else { 0.0 }
        };
        let n = length as f64;
        // Half the series' lags at most; the first pair that adds up to nothing ends them.
        let mut covariances = vec![covariance(0)];
        let mut lag = 1;
        while lag + 1 < length / 2 {
            let pair = [covariance(lag), covariance(lag + 1)];
            if pair[0] + pair[1] <= 0.0 {
                break;
            }
            covariances.extend(pair);
            lag += 2;
        }
        let mut of_mean = 0.0;
        for _ in 0..8 {
            let mut sum = covariances[0] + of_mean;
            for (lag, c) in covariances.iter().enumerate().skip(1) {
                sum += 2.0 * (1.0 - lag as f64 / n) * (c + of_mean);
            }
            of_mean = (sum / n).clamp(covariances[0] / n, covariances[0]);
        }
        Some(Self {
            variance: covariances[0] + of_mean,
            of_mean,
        })
    }

    /// Independent values with the same standard error of the mean, at least 1.
    pub fn effective(&self) -> f64 {
        if self.of_mean > 0.0 {
            (self.variance / self.of_mean).max(1.0)
        } else {
            f64::INFINITY
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{Rng, SeedableRng};

    #[test]
    fn independent_values_count_in_full_and_repeated_ones_once() {
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(5);
        let white: Vec<f64> = (0..2000).map(|_| random.random::<f64>()).collect();
        let series = Series::of(&white).unwrap();
        assert!(series.effective > 1500.0, "{}", series.effective);
        let repeated: Vec<f64> = white.iter().flat_map(|&v| [v; 8]).collect();
        let eight = Series::of(&repeated).unwrap();
        let ratio = eight.effective / 2000.0;
        assert!((0.7..1.3).contains(&ratio), "{ratio}");
    }

    /// First-order autoregression: n_eff / n = (1 - a) / (1 + a), common practice.
    #[test]
    fn autoregressive_series_has_its_known_size() {
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(6);
        let mut x = 0.0;
        let values: Vec<f64> = (0..20_000)
            .map(|_| {
                x = 0.8 * x + random.random::<f64>() - 0.5;
                x
            })
            .collect();
        let ratio = Series::of(&values).unwrap().effective / 20_000.0;
        assert!((ratio - 0.2 / 1.8).abs() < 0.03, "{ratio}");
    }

    /// Two short, smooth series of few independent pieces: the interval of the sum of their means,
    /// with the pieces less one as degrees of freedom, holds the truth about as often as it says.
    #[test]
    fn short_correlated_series_are_not_taken_for_long_ones() {
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(9);
        let mut held = 0;
        for _ in 0..400 {
            let parts = [0, 1].map(|_| {
                let white: Vec<f64> = (0..160).map(|_| random.random::<f64>() - 0.5).collect();
                // Moving Gaussian sum: correlation exp(-(d / 15)^2).
                (0..48)
                    .map(|i| {
                        (0..112)
                            .map(|j| {
                                white[i + j] * (-2.0 * ((j as f64 - 56.0) / 15.0).powi(2)).exp()
                            })
                            .sum()
                    })
                    .collect::<Vec<f64>>()
            });
            let pooled = Pooled::of(&parts).unwrap();
            let u = (2.0 * pooled.of_mean).sqrt();
            let freedom = pooled.effective() - 1.0;
            let mean: f64 = parts.iter().flatten().sum::<f64>() / 48.0;
            let k = crate::uncertainty::coverage_factor(0.95, Some(freedom));
            held += usize::from(mean.abs() <= k * u);
        }
        assert!((368..=398).contains(&held), "{held} of 400");
    }

    #[test]
    fn little_or_nothing_is_answered() {
        assert_eq!(Pooled::of(&[]), None);
        assert_eq!(Pooled::of(&[vec![1.0, f64::NAN]]), None);
        assert_eq!(Pooled::of(&[vec![2.0; 9]]).unwrap().of_mean, 0.0);
        assert_eq!(Series::of(&[]), None);
        assert_eq!(Series::of(&[f64::NAN]), None);
        let one = Series::of(&[3.0]).unwrap();
        assert_eq!(
            (one.mean, one.standard_error(), one.degrees_of_freedom()),
            (3.0, 0.0, None)
        );
        let same = Series::of(&[2.0; 9]).unwrap();
        assert_eq!((same.deviation, same.effective), (0.0, 9.0));
    }
}
