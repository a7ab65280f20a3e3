//! Robust figures of plain number series.

use ndarray::ArrayView2;

/// Median of the finite values; `None` when there is none. Reorders `values`.
pub(super) fn median(values: &mut Vec<f64>) -> Option<f64> {
    values.retain(|v| v.is_finite());
    if values.is_empty() {
        return None;
    }
    let middle = values.len() / 2;
    let even = values.len().is_multiple_of(2);
    let (below, &mut upper, _) = values.select_nth_unstable_by(middle, f64::total_cmp);
    if !even {
        return Some(upper);
    }
    let lower = below.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    Some(0.5 * (lower + upper))
}

/// Standard deviation by the median absolute deviation, 1.4826 MAD.
pub(super) fn robust_deviation(values: &[f64]) -> Option<f64> {
    let centre = median(&mut values.to_vec())?;
    let mut off: Vec<f64> = values.iter().map(|v| (v - centre).abs()).collect();
    Some(1.4826 * median(&mut off)?)
}

/// The values within `limit` robust deviations of the median; the others become NaN, so that the
/// order is kept.
pub(super) fn clipped(values: &[f64], limit: f64) -> Vec<f64> {
    let (Some(centre), Some(deviation)) = (median(&mut values.to_vec()), robust_deviation(values))
    else {
        return values.to_vec();
    };
    // Identical values have no deviation: keep what is at the centre but for rounding.
    let reach = (limit * deviation).max(1e-6 * centre.abs()).max(1e-9);
    values
        .iter()
        .map(|&v| {
            if (v - centre).abs() <= reach {
                v
            } else {
                f64::NAN
            }
        })
        .collect()
}

/// Mean of the finite values; NaN when there is none.
pub(super) fn mean(values: &[f64]) -> f64 {
    let (sum, count) = values
        .iter()
        .filter(|v| v.is_finite())
        .fold((0.0, 0usize), |(s, n), v| (s + v, n + 1));
    sum / count as f64
}

/// A plateau's height: the densest level of a set of heights.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Level {
    /// Height, nm.
    pub value: f64,
    /// Scatter of the pixels taken, nm.
    pub deviation: f64,
    /// Pixels taken.
    pub count: usize,
}

/// The densest level among `heights`: half-sample mode as the seed, then the mean of what lies
/// within three deviations of it. Robust against walls and debris in the set (common practice).
/// `None` without finite heights.
pub(super) fn level(heights: &mut Vec<f64>, noise: f64) -> Option<Level> {
    heights.retain(|v| v.is_finite());
    if heights.is_empty() {
        return None;
    }
    heights.sort_unstable_by(f64::total_cmp);
    let n = heights.len();
    let half = n.div_ceil(2);
    let shortest = (0..=n - half)
        .map(|i| heights[i + half - 1] - heights[i])
        .fold(f64::INFINITY, f64::min);
    let centre = half_sample_mode(heights);
    // Half of a normal sample lies within 1.349 deviations. Where less than half of the set is
    // plateau that figure is the walls', hence the cap by the noise.
    let mut spread = shortest / 1.349;
    if noise > 0.0 {
        spread = spread.clamp(noise, 4.0 * noise);
    }
    let reach = (3.0 * spread).max(1e-6 * centre.abs()).max(1e-9);
    let mut value = centre;
    let (mut first, mut last) = (0, 0);
    for _ in 0..8 {
        first = heights.partition_point(|&z| z < value - reach);
        last = heights.partition_point(|&z| z <= value + reach);
        if first >= last {
            return Some(Level {
                value: centre,
                deviation: spread,
                count: 1,
            });
        }
        let next = heights[first..last].iter().sum::<f64>() / (last - first) as f64;
        let done = (next - value).abs() < 1e-3 * spread;
        value = next;
        if done {
            break;
        }
    }
    let taken = &heights[first..last];
    let variance = taken.iter().map(|z| (z - value).powi(2)).sum::<f64>() / taken.len() as f64;
    Some(Level {
        value,
        deviation: variance.sqrt(),
        count: taken.len(),
    })
}

/// Half-sample mode of sorted values: the shortest half, again and again.
fn half_sample_mode(sorted: &[f64]) -> f64 {
    let mut part = sorted;
    while part.len() > 3 {
        let half = part.len().div_ceil(2);
        let start = (0..=part.len() - half)
            .min_by(|&i, &j| {
                let length = |k: usize| part[k + half - 1] - part[k];
                length(i).total_cmp(&length(j))
            })
            .unwrap_or(0);
        part = &part[start..start + half];
    }
    part.iter().sum::<f64>() / part.len() as f64
}

/// The threshold between two classes of heights that separates them best (Otsu, IEEE Trans. SMC
/// 9, 62 (1979), from memory). `None` with fewer than two different heights.
pub(super) fn two_class_threshold(heights: &[f64]) -> Option<f64> {
    const BINS: usize = 256;
    let (low, high) = heights
        .iter()
        .filter(|v| v.is_finite())
        .fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), &v| {
            (l.min(v), h.max(v))
        });
    if high <= low {
        return None;
    }
    let scale = BINS as f64 / (high - low);
    let mut bins = [0.0f64; BINS];
    for v in heights.iter().filter(|v| v.is_finite()) {
        bins[(((v - low) * scale) as usize).min(BINS - 1)] += 1.0;
    }
    let total: f64 = bins.iter().sum();
    let moment: f64 = bins.iter().enumerate().map(|(i, b)| i as f64 * b).sum();
    let (mut count, mut sum) = (0.0, 0.0);
    let (mut best, mut at) = (0.0, Vec::new());
    for (i, b) in bins.iter().enumerate() {
        count += b;
        sum += i as f64 * b;
        if count == 0.0 || count == total {
            continue;
        }
        let between = (moment * count / total - sum).powi(2) / (count * (total - count));
        if between > best * (1.0 + 1e-12) {
            best = between;
            at = vec![i];
        } else if between >= best * (1.0 - 1e-12) {
            at.push(i);
        }
    }
    // Empty bins between the classes all separate equally well: take their middle.
    let middle = at.iter().sum::<usize>() as f64 / at.len().max(1) as f64;
    (!at.is_empty()).then(|| low + (middle + 1.0) / scale)
}

/// White-noise standard deviation along the rows: 1.4826 MAD of the fourth differences over
/// sqrt 70 (70 = 1 + 16 + 36 + 16 + 1). `None` with fewer than 20 of them.
pub(super) fn noise_along_rows(heights: ArrayView2<f32>) -> Option<f64> {
    let mut differences = Vec::new();
    for row in heights.rows() {
        let row: Vec<f64> = row.iter().map(|&z| f64::from(z)).collect();
        differences.extend(
            row.windows(5)
                .map(|w| w[0] - 4.0 * w[1] + 6.0 * w[2] - 4.0 * w[3] + w[4])
                .filter(|d| d.is_finite()),
        );
    }
    (differences.len() >= 20)
        .then(|| robust_deviation(&differences))
        .flatten()
        .map(|d| d / 70f64.sqrt())
}

/// Slope and intercept of the least-squares line through `(x, y)`, `None` with fewer than two
/// different x. Pairs with a NaN are skipped.
pub(super) fn line(x: &[f64], y: &[f64]) -> Option<(f64, f64)> {
    let pairs = || {
        x.iter()
            .zip(y)
            .filter(|(a, b)| a.is_finite() && b.is_finite())
    };
    let n = pairs().count() as f64;
    if n < 2.0 {
        return None;
    }
    let mx = pairs().map(|p| p.0).sum::<f64>() / n;
    let my = pairs().map(|p| p.1).sum::<f64>() / n;
    let sxx: f64 = pairs().map(|p| (p.0 - mx).powi(2)).sum();
    let sxy: f64 = pairs().map(|p| (p.0 - mx) * (p.1 - my)).sum();
    (sxx > 0.0).then(|| (sxy / sxx, my - sxy / sxx * mx))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn medians_of_odd_even_and_none() {
        assert_eq!(median(&mut vec![3.0, 1.0, 2.0]), Some(2.0));
        assert_eq!(median(&mut vec![4.0, 1.0, f64::NAN, 2.0, 3.0]), Some(2.5));
        assert_eq!(median(&mut vec![7.0]), Some(7.0));
        assert_eq!(median(&mut vec![]), None);
    }

    #[test]
    fn the_level_is_the_plateau_not_the_wall() {
        let mut heights: Vec<f64> = (0..400)
            .map(|i| 10.0 + 0.1 * ((i * 37 % 101) as f64 / 50.0 - 1.0))
            .collect();
        heights.extend((0..300).map(|i| 10.5 + f64::from(i) * 0.1));
        let found = level(&mut heights, 0.06).unwrap();
        assert!((found.value - 10.0).abs() < 0.01, "{found:?}");
        assert_eq!(level(&mut vec![5.0; 3], 0.0).unwrap().value, 5.0);
        assert_eq!(level(&mut vec![f64::NAN], 0.0), None);
    }

    #[test]
    fn the_threshold_lies_between_two_levels() {
        let mut heights = vec![0.0; 50];
        heights.extend([10.0; 20]);
        let threshold = two_class_threshold(&heights).unwrap();
        assert!((4.0..6.0).contains(&threshold), "{threshold}");
        assert_eq!(two_class_threshold(&[1.0, 1.0]), None);
    }
}
