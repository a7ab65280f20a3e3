//! What the estimate does to the scan first: noise figure, Gaussian smoothing, half-pixel envelope.

use ndarray::{Array2, ArrayView2, Axis, Zip};
use rayon::prelude::*;

/// Gaussian smoothing of standard deviation `sigma` pixels, voids left out of the mean and kept
/// void. Beyond the border the mean is over what is there.
pub(super) fn gauss(map: ArrayView2<f32>, sigma: f64) -> Array2<f32> {
    if !(sigma > 0.0) {
        return map.to_owned();
    }
    // Heights far from zero would lose their digits in the weighted sums.
    let offset = map.iter().copied().find(|z| !z.is_nan()).unwrap_or(0.0);
    let mut sum = map.mapv(|z| if z.is_nan() { 0.0 } else { z - offset });
    let mut weight = map.mapv(|z| f32::from(u8::from(!z.is_nan())));
    let kernel = kernel(sigma);
    for axis in [Axis(1), Axis(0)] {
        sum = convolve(&sum, &kernel, axis);
        weight = convolve(&weight, &kernel, axis);
    }
    Zip::from(&mut sum)
        .and(&weight)
        .and(map)
        .for_each(|s, &w, &z| {
            *s = if z.is_nan() {
                f32::NAN
            } else {
                *s / w + offset
            }
        });
    sum
}

/// What smoothing leaves of white noise: `sqrt(sum k^2)` of the two-dimensional kernel.
pub(super) fn gain(sigma: f64) -> f64 {
    if !(sigma > 0.0) {
        return 1.0;
    }
    kernel(sigma).iter().map(|&k| f64::from(k).powi(2)).sum()
}

fn kernel(sigma: f64) -> Vec<f32> {
    let reach = (4.0 * sigma).ceil() as i64;
    let raw: Vec<f64> = (-reach..=reach)
        .map(|i| (-0.5 * (i as f64 / sigma).powi(2)).exp())
        .collect();
    let total: f64 = raw.iter().sum();
    raw.iter().map(|k| (k / total) as f32).collect()
}

/// One-dimensional convolution along `axis`, zero outside.
fn convolve(map: &Array2<f32>, kernel: &[f32], axis: Axis) -> Array2<f32> {
    let reach = kernel.len() / 2;
    if axis == Axis(0) {
        return convolve(&map.t().as_standard_layout().into_owned(), kernel, Axis(1))
            .t()
            .as_standard_layout()
            .into_owned();
    }
    let mut out = Array2::zeros(map.dim());
    out.axis_iter_mut(Axis(0))
        .into_par_iter()
        .zip(map.axis_iter(Axis(0)).into_par_iter())
        .for_each(|(mut to, from)| {
            let n = from.len();
            for (k, &weight) in kernel.iter().enumerate() {
                // to[i] += weight * from[i + k - reach]
                let (skip, lead) = (k.saturating_sub(reach), reach.saturating_sub(k));
                for i in lead..n.saturating_sub(skip).max(lead) {
                    to[i] += weight * from[i + k - reach];
                }
            }
        });
    out
}

/// Upper envelope over half a pixel: the largest mean with any of the eight neighbours. A contact
/// between pixel centres is then never mistaken for a violation. Voids stay NaN.
pub(super) fn envelope(map: ArrayView2<f32>) -> Array2<f32> {
    let (rows, columns) = map.dim();
    Array2::from_shape_fn((rows, columns), |(r, c)| {
        let here = map[(r, c)];
        let mut best = here;
        for i in r.saturating_sub(1)..(r + 2).min(rows) {
            for j in c.saturating_sub(1)..(c + 2).min(columns) {
                // A NaN neighbour compares false.
                let mean = 0.5 * (here + map[(i, j)]);
                if mean > best {
                    best = mean;
                }
            }
        }
        best
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn smoothing_keeps_constants_and_voids() {
        let mut map = Array2::from_elem((9, 11), 5.0f32);
        map[(4, 5)] = f32::NAN;
        let smooth = gauss(map.view(), 1.3);
        assert!(smooth[(4, 5)].is_nan());
        assert!(
            smooth
                .iter()
                .filter(|z| !z.is_nan())
                .all(|z| (z - 5.0).abs() < 1e-5)
        );
        assert_eq!(
            gauss(Array2::from_elem((1, 1), 2.0).view(), 2.0)[(0, 0)],
            2.0
        );
    }

    #[test]
    fn smoothing_adds_curvature_times_variance_to_a_paraboloid() {
        // E[(x + e)^2] = x^2 + sigma^2.
        let map = Array2::from_shape_fn((41, 41), |(r, c)| {
            ((r as f32 - 20.0).powi(2) + (c as f32 - 20.0).powi(2)) / 10.0
        });
        let smooth = gauss(map.view(), 1.5);
        assert!((smooth[(20, 20)] - 2.0 * 2.25 / 10.0).abs() < 0.005);
    }

    #[test]
    fn the_gain_is_that_of_the_continuous_kernel() {
        // 1 / (2 sigma sqrt(pi)), about 0.28 / sigma.
        assert!((gain(2.0) - 0.5 / (2.0 * std::f64::consts::PI.sqrt())).abs() < 1e-4);
        assert_eq!(gain(0.0), 1.0);
    }

    #[test]
    fn envelope_is_half_way_to_the_highest_neighbour() {
        let map = ndarray::arr2(&[[0.0, 0.0, 0.0], [0.0, 4.0, f32::NAN], [1.0, 0.0, 0.0]]);
        let up = envelope(map.view());
        assert_eq!(up[(0, 0)], 2.0);
        assert_eq!(up[(1, 1)], 4.0);
        assert_eq!(up[(2, 0)], 2.5);
        assert!(up[(1, 2)].is_nan());
    }
}
