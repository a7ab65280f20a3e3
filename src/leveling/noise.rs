//! The white part of the noise, from high differences along the fast axis.

use crate::heightmap::HeightMap;
use ndarray::ArrayView2;
use ndarray::parallel::prelude::*;

/// Median and lower quartile of the absolute value of a normal variable.
const MEDIAN_OF_NORMAL: f64 = 0.674_490;
const QUARTILE_OF_NORMAL: f64 = 0.318_639;

/// Fewer differences than this say nothing.
const FEWEST: usize = 20;

/// About as many differences as are looked at; larger maps are sampled by whole rows.
const ENOUGH: usize = 1 << 18;

/// The white-noise standard deviation of `map`, nm.
///
/// `1.4826 MAD / sqrt(70)` of the 4th differences along the fast axis (along the slow axis when
/// there are fewer than five columns): polynomials up to the third order drop out, and edges are
/// outvoted while they are few. Where features are so dense that few pixels are free of edges, the
/// lower quartile tells, of the 4th differences or, when even that is more than twice as large, of
/// the 2nd. Noise that is correlated over neighbouring pixels is underestimated.
///
/// Where more than half of the differences are exactly zero (coarsely quantised heights) the
/// median absolute deviation is 0 and says nothing; then it is the root mean square of the
/// differences without their largest tenth. Noise well below the height quantum q cannot be seen
/// in the data: whoever needs a floor adds q / sqrt(12) (rectangular). Noise-free data give 0.
///
/// `None` with fewer than 20 differences free of voids. Source: common practice; the factors
/// 1.4826 and sqrt(70) hold for Gaussian white noise.
pub fn noise(map: &HeightMap) -> Option<f64> {
    let z = map.heights();
    let z = if map.columns() < 5 {
        z.reversed_axes()
    } else {
        z
    };
    let mut fourth = differences(z, &[1.0, -4.0, 6.0, -4.0, 1.0]);
    if fourth.len() < FEWEST {
        return None;
    }
    let mut sd = quantile(&mut fourth, 0.5) / MEDIAN_OF_NORMAL;
    if sd > 0.0 {
        let quartile = quantile(&mut fourth, 0.25) / QUARTILE_OF_NORMAL;
        if quartile > 0.0 && quartile < 0.8 * sd {
            sd = quartile;
        }
        let mut second = differences(z, &[1.0, -2.0, 1.0]);
        let quartile = quantile(&mut second, 0.25) / QUARTILE_OF_NORMAL;
        if quartile > 0.0 && quartile < 0.5 * sd {
            sd = quartile;
        }
    } else {
        let kept = fourth.len() * 9 / 10;
        fourth.select_nth_unstable_by(kept, f64::total_cmp);
        sd = (fourth[..kept].iter().map(|d| d * d).sum::<f64>() / kept as f64).sqrt();
    }
    // What the rounding to f32 makes of noise-free heights is not noise of the scan.
    let high = z.iter().fold(0.0f32, |m, v| m.max(v.abs()));
    let rounding = f64::from(high) * f64::from(f32::EPSILON) / 12f64.sqrt();
    Some(if sd > 1.2 * rounding { sd } else { 0.0 })
}

/// Absolute values of the differences with these coefficients along the rows, scaled so that they
/// have the standard deviation of the heights' noise.
fn differences(z: ArrayView2<'_, f32>, coefficients: &[f64]) -> Vec<f64> {
    let gain = coefficients.iter().map(|c| c * c).sum::<f64>().sqrt();
    let stride = (z.len() / ENOUGH).max(1);
    let rows: Vec<_> = z.rows().into_iter().step_by(stride).collect();
    rows.into_par_iter()
        .flat_map_iter(|row| {
            (0..(row.len() + 1).saturating_sub(coefficients.len())).filter_map(move |i| {
                let d: f64 = coefficients
                    .iter()
                    .enumerate()
                    .map(|(k, c)| c * f64::from(row[i + k]))
                    .sum();
                (!d.is_nan()).then_some(d.abs() / gain)
            })
        })
        .collect()
}

fn quantile(values: &mut [f64], share: f64) -> f64 {
    let at = ((values.len() - 1) as f64 * share).round() as usize;
    *values.select_nth_unstable_by(at, f64::total_cmp).1
}

#[cfg(test)]
mod tests {
    use super::super::virtual_scan::{Gauss, with_voids};
    use super::*;
    use crate::heightmap::Pitch;
    use proptest::prelude::*;

    fn map(rows: usize, columns: usize, f: impl FnMut(f64, f64) -> f64) -> HeightMap {
        HeightMap::from_fn(rows, columns, Pitch::square(1.0), f).unwrap()
    }

    #[test]
    fn white_noise_on_tilt_bow_steps_and_voids_is_found() {
        for seed in 0..8 {
            let mut gauss = Gauss::new(seed);
            let noisy = map(128, 128, |x, y| {
                let step = if (x / 16.0) as i32 % 2 == 0 {
                    0.0
                } else {
                    50.0
                };
                0.3 * x - 0.2 * y + 1e-3 * x * x + step + gauss.next(0.3)
            });
            let s = noise(&with_voids(&noisy, 0.1, seed)).unwrap();
            // Edges in a quarter of the differences push it up.
            assert!((0.28..0.45).contains(&s), "{s}");
            let plain = map(128, 128, |_, _| gauss.next(0.3));
            assert!((noise(&plain).unwrap() / 0.3 - 1.0).abs() < 0.05);
        }
    }

    /// Lines four pixels wide leave no five pixels free of edges.
    #[test]
    fn dense_edges_do_not_pass_for_noise() {
        let mut gauss = Gauss::new(11);
        // With half of them free the quartile is the median of the free: 0.674 / 0.319 = 2.12.
        for (period, worst) in [(8.0, 2.2), (16.0, 2.2), (32.0, 1.5)] {
            let scan = map(128, 128, |x, _| {
                let step = if (x / period).fract() < 0.5 {
                    0.0
                } else {
                    20.0
                };
                step + gauss.next(0.3)
            });
            let s = noise(&scan).unwrap() / 0.3;
            assert!((0.95..worst).contains(&s), "period {period}: {s}");
        }
    }

    #[test]
    fn noise_free_maps_have_none_and_few_pixels_give_no_answer() {
        assert_eq!(noise(&map(64, 64, |_, _| 7.0)), Some(0.0));
        assert_eq!(
            noise(&map(64, 64, |x, y| 0.37 * x + 0.11 * y + 12.0)),
            Some(0.0)
        );
        let step = map(64, 64, |x, _| if x < 32.0 { 0.0 } else { 9.0 });
        assert_eq!(noise(&step), Some(0.0));
        assert_eq!(noise(&map(1, 1, |_, _| 7.0)), None);
        assert_eq!(noise(&map(4, 6, |_, _| 7.0)), None);
        assert_eq!(noise(&map(64, 64, |_, _| f64::NAN)), None);
    }

    #[test]
    fn a_single_column_is_looked_at_along_the_slow_axis() {
        let mut gauss = Gauss::new(3);
        let s = noise(&map(2000, 1, |_, _| gauss.next(0.5))).unwrap();
        assert!((s / 0.5 - 1.0).abs() < 0.12, "{s}");
    }

    /// Noise of a tenth of the quantum on a flat at the edge of a quantum: nearly all zeros.
    #[test]
    fn coarse_quanta_do_not_fool_it_to_zero() {
        let mut gauss = Gauss::new(5);
        let s = noise(&map(128, 128, |_, _| (0.35 + gauss.next(0.1)).round())).unwrap();
        assert!(s > 0.05 && s < 0.35, "{s}");
    }

    #[test]
    fn a_large_offset_does_not_hide_the_noise() {
        let mut gauss = Gauss::new(6);
        let s = noise(&map(128, 128, |_, _| 1e6 + gauss.next(0.5))).unwrap();
        assert!((s / 0.5 - 1.0).abs() < 0.1, "{s}");
    }

    proptest! {
        /// Law: adding a polynomial of the third order along the row changes nothing, scaling scales.
        #[test]
        fn cubics_drop_out(a in -1.0..1.0f64, b in -1e-2..1e-2f64, c in -1e-4..1e-4f64, k in 0.1..10.0f64) {
            let scan = |scale: f64, on: f64| {
                let mut gauss = Gauss::new(9);
                map(32, 32, |x, _| {
                    scale * gauss.next(0.3) + on * (a * x + b * x * x + c * x * x * x)
                })
            };
            let plain = noise(&scan(1.0, 0.0)).unwrap();
            prop_assert!((noise(&scan(1.0, 1.0)).unwrap() / plain - 1.0).abs() < 1e-3);
            prop_assert!((noise(&scan(k, 0.0)).unwrap() / (k * plain) - 1.0).abs() < 1e-3);
        }
    }
}
