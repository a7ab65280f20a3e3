//! The white part of the noise, from high differences along the fast axis.

use crate::heightmap::HeightMap;

/// Fewer differences than this say nothing.
const FEWEST: usize = 20;

/// About as many differences as are looked at; larger maps are sampled by whole rows.
const ENOUGH: usize = 1 << 20;

/// Sum of the squares of 1, -4, 6, -4, 1.
const GAIN_SQUARED: f64 = 70.0;

/// The white-noise standard deviation of `map`, nm.
///
/// `1.4826 MAD / sqrt(70)` of the 4th differences along the fast axis (along the slow axis when
/// there are fewer than five columns): polynomials up to the third order drop out, and edges are
/// outvoted. Noise that is correlated over neighbouring pixels is underestimated.
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
    let stride = (z.nrows().saturating_mul(z.ncols()) / ENOUGH).max(1);
    let mut differences: Vec<f64> = Vec::new();
    for row in z.rows().into_iter().step_by(stride) {
        for i in 4..row.len() {
            let at = |k: usize| f64::from(row[i - k]);
            let d = at(0) - 4.0 * at(1) + 6.0 * at(2) - 4.0 * at(3) + at(4);
            if !d.is_nan() {
                differences.push(d.abs());
            }
        }
    }
    let n = differences.len();
    if n < FEWEST {
        return None;
    }
    let mid = n / 2;
    let (_, &mut median, _) = differences.select_nth_unstable_by(mid, f64::total_cmp);
    let sd = if median > 0.0 {
        1.4826 * median / GAIN_SQUARED.sqrt()
    } else {
        let kept = n * 9 / 10;
        differences.select_nth_unstable_by(kept, f64::total_cmp);
        let sum: f64 = differences[..kept].iter().map(|d| d * d).sum();
        (sum / (kept as f64 * GAIN_SQUARED)).sqrt()
    };
    // What the rounding to f32 makes of noise-free heights is not noise of the scan.
    let high = z.iter().fold(0.0f32, |m, v| m.max(v.abs()));
    let rounding = f64::from(high) * f64::from(f32::EPSILON) / 12f64.sqrt();
    Some(if sd > 1.2 * rounding { sd } else { 0.0 })
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
            // Relative spread of a MAD over about 8000 overlapping differences: below 3 %; the
            // edges of 15 of 128 columns, five differences each, push it up.
            assert!((0.28..0.5).contains(&s), "{s}");
            let plain = map(128, 128, |_, _| gauss.next(0.3));
            assert!((noise(&plain).unwrap() / 0.3 - 1.0).abs() < 0.05);
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
