//! Areal Gaussian filters: what is shorter than an S-filter's nesting index or longer than an
//! L-filter's is taken off.
//!
//! Linear Gaussian filter, ISO 16610-21 (profile) and ISO 16610-61 (areal), from memory: weight
//! `exp(-pi (x / (alpha l))^2) / (alpha l)` with `alpha = sqrt(ln 2 / pi)`, amplitude transmission
//! of the mean line `2^-(l / wavelength)^2`, one half at the nesting index `l`. The areal one is
//! the product along x and y.
//!
//! At the borders and beside voids the weights of what is there are brought to sum 1 (normalised
//! convolution; Knutsson and Westin, CVPR 1993, from memory). A void stays void. Within about half
//! a nesting index of a border the filter is one-sided: tilted there, but not biased on a flat.

use crate::heightmap::Pitch;
use ndarray::{Array2, ArrayView2, Axis, Zip};

/// The filter's kernel reaches this many nesting indices to each side: what is left out weighs
/// less than 1e-6.
const REACH: f64 = 1.0;

/// The mean surface: `heights` after the Gaussian low-pass of nesting index `index` nm (`> 0`),
/// same shape, voids (NaN) where they were.
pub(super) fn mean_surface(heights: ArrayView2<f32>, pitch: Pitch, index: f64) -> Array2<f32> {
    let known = heights.mapv(|z| f64::from(u8::from(z.is_finite())));
    // About the mean, so that the zeros standing for voids lose no digits.
    let count = known.sum();
    let sum: f64 = heights
        .iter()
        .filter(|z| z.is_finite())
        .map(|&z| f64::from(z))
        .sum();
    let mean = if count > 0.0 { sum / count } else { 0.0 };
    let values = heights.mapv(|z| {
        if z.is_finite() {
            f64::from(z) - mean
        } else {
            0.0
        }
    });
    let weighed = smooth(
        &smooth(&values, Axis(1), index / pitch.x),
        Axis(0),
        index / pitch.y,
    );
    let weights = smooth(
        &smooth(&known, Axis(1), index / pitch.x),
        Axis(0),
        index / pitch.y,
    );
    let mut out = Array2::from_elem(heights.dim(), f32::NAN);
    Zip::from(&mut out)
        .and(&heights)
        .and(&weighed)
        .and(&weights)
        .for_each(|out, z, sum, weight| {
            if z.is_finite() && *weight > 0.0 {
                *out = (mean + sum / weight) as f32;
            }
        });
    out
}

/// The scale-limited surface: S-filtered by `s` nm, then less its mean surface of `l` nm.
pub(super) fn scale_limited(
    heights: ArrayView2<f32>,
    pitch: Pitch,
    s: Option<f64>,
    l: Option<f64>,
) -> Array2<f32> {
    let mut out = match s {
        Some(index) => mean_surface(heights, pitch, index),
        None => heights.to_owned(),
    };
    if let Some(index) = l {
        let mean = mean_surface(out.view(), pitch, index);
        out -= &mean;
    }
    out
}

/// Share of white noise's variance that the low-pass of `index` nm leaves: the sum of the squared
/// weights.
pub(super) fn white_noise_share(pitch: Pitch, index: f64) -> f64 {
    let one = |index: f64| {
        let half = kernel(index);
        let sum = half[0] + 2.0 * half[1..].iter().sum::<f64>();
        (half[0].powi(2) + 2.0 * half[1..].iter().map(|w| w * w).sum::<f64>()) / (sum * sum)
    };
    one(index / pitch.x) * one(index / pitch.y)
}

/// Weights at 0, 1, 2 ... pixels for a nesting index in pixels, not normalised.
fn kernel(index: f64) -> Vec<f64> {
    let alpha = (std::f64::consts::LN_2 / std::f64::consts::PI).sqrt();
    let reach = (REACH * index).ceil() as usize;
    (0..=reach)
        .map(|i| (-std::f64::consts::PI * (i as f64 / (alpha * index)).powi(2)).exp())
        .collect()
}

fn smooth(values: &Array2<f64>, axis: Axis, index: f64) -> Array2<f64> {
    let half = kernel(index);
    let mut out = Array2::zeros(values.dim());
    for (from, mut to) in values.lanes(axis).into_iter().zip(out.lanes_mut(axis)) {
        let n = from.len();
        let from = from.to_vec();
        for i in 0..n {
            let mut sum = half[0] * from[i];
            for (d, w) in half.iter().enumerate().skip(1).take(n) {
                if d <= i {
                    sum += w * from[i - d];
                }
                if i + d < n {
                    sum += w * from[i + d];
                }
            }
            to[i] = sum;
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::HeightMap;
    use std::f64::consts::TAU;

    /// Amplitude left of a wave of `wavelength` nm by a low-pass of 40 nm, away from the border.
    fn transmission(wavelength: f64, along_x: bool) -> f64 {
        let pitch = Pitch { x: 1.0, y: 2.0 };
        let map = HeightMap::from_fn(200, 400, pitch, |x, y| {
            let at = if along_x { x } else { y };
            (TAU * at / wavelength).cos()
        })
        .unwrap();
        let out = mean_surface(map.heights(), pitch, 40.0);
        // Over whole waves in the middle the root mean square tells the amplitude.
        let (mut before, mut after) = (0.0, 0.0);
        for r in 50..150 {
            for c in 100..300 {
                before += f64::from(map.heights()[[r, c]]).powi(2);
                after += f64::from(out[[r, c]]).powi(2);
            }
        }
        (after / before).sqrt()
    }

    /// `2^-(l / wavelength)^2`: 0.8409 at twice the nesting index, 0.5 at it, 0.0625 at half of it
    /// (ISO 16610-21, from memory).
    #[test]
    fn the_transmission_is_the_standard_one() {
        for (wavelength, expected) in [(80.0, 0.8409), (40.0, 0.5), (20.0, 0.0625)] {
            for along_x in [true, false] {
                let seen = transmission(wavelength, along_x);
                assert!((seen - expected).abs() < 2e-3, "{wavelength}: {seen}");
            }
        }
    }

    #[test]
    fn a_flat_stays_a_flat_to_the_border_and_beside_voids() {
        let pitch = Pitch::square(1.0);
        let map = HeightMap::from_fn(30, 40, pitch, |x, y| {
            if (x - 20.0).hypot(y - 15.0) < 5.0 {
                f64::NAN
            } else {
                1e4
            }
        })
        .unwrap();
        let out = mean_surface(map.heights(), pitch, 12.0);
        for (a, b) in map.heights().iter().zip(&out) {
            assert!(a == b || (a.is_nan() && b.is_nan()));
        }
        let rest = scale_limited(map.heights(), pitch, Some(3.0), Some(12.0));
        assert!(rest.iter().filter(|z| z.is_finite()).all(|z| *z == 0.0));
    }

    #[test]
    fn white_noise_is_averaged_as_told() {
        // Deviation l alpha / sqrt(2 pi): variance share 1 / (4 pi deviation^2) for a wide kernel.
        let deviation: f64 = 20.0 * 0.469_718_64 / TAU.sqrt();
        let share = white_noise_share(Pitch::square(1.0), 20.0);
        let expected = 1.0 / (2.0 * TAU * deviation * deviation);
        assert!((share / expected - 1.0).abs() < 1e-3, "{share} {expected}");
    }

    /// `scipy.ndimage.gaussian_filter1d`-equivalent normalised convolution; the file and the map
    /// are made by tests/filter_golden.py.
    #[test]
    fn it_agrees_with_scipy() {
        let read = |name: &str| -> Array2<f32> {
            let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR"))
                .join("tests/golden")
                .join(name);
            ndarray_npy::read_npy(path).unwrap()
        };
        let map = read("filter-map.npy");
        let expected = read("filter-mean.npy");
        let out = mean_surface(map.view(), Pitch { x: 1.0, y: 1.5 }, 9.0);
        for (a, b) in out.iter().zip(&expected) {
            assert_eq!(a.is_nan(), b.is_nan());
            assert!(a.is_nan() || (a - b).abs() < 2e-5, "{a} {b}");
        }
    }
}
