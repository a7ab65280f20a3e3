//! How large the tip's grid must be.

use super::Settings;
use crate::heightmap::HeightMap;
use ndarray::Array2;

const DIRECTIONS: [(isize, isize); 8] = [
    (0, 1),
    (1, 1),
    (1, 0),
    (1, -1),
    (0, -1),
    (-1, -1),
    (-1, 0),
    (-1, 1),
];

/// Half-widths of the tip grid in pixels, rows and columns: the stated support, or wide enough for
/// the tip as the tall isolated summits show it down to a tenth of their height. Never more than
/// a quarter of the map, so that half of it stays inside.
pub(super) fn half_widths(
    scan: &HeightMap,
    smooth: &Array2<f32>,
    noise: f64,
    settings: &Settings,
) -> [usize; 2] {
    let most = [scan.rows(), scan.columns()].map(|n| ((n - 1) / 4).clamp(1, 127));
    let pitch = [scan.pitch().y, scan.pitch().x];
    let nm = settings.support_nm.map(|s| s / 2.0).or_else(|| {
        let px = summit_half_width(smooth, noise)?;
        Some((1.15 * px + 2.0).clamp(8.0, 40.0) * (pitch[0] * pitch[1]).sqrt())
    });
    let nm = nm.unwrap_or(16.0 * pitch[0].max(pitch[1]));
    let half = |k: usize| ((nm / pitch[k] - 0.5).round().max(2.0) as usize).min(most[k]);
    [half(0), half(1)]
}

/// Upper quartile over tall isolated summits of their half-width near the base, pixels.
fn summit_half_width(map: &Array2<f32>, noise: f64) -> Option<f64> {
    let mut heights: Vec<f32> = map.iter().copied().filter(|z| !z.is_nan()).collect();
    if heights.is_empty() {
        return None;
    }
    let middle = heights.len() / 2;
    let base = *heights.select_nth_unstable_by(middle, f32::total_cmp).1;
    let top = heights.iter().copied().fold(base, f32::max);
    let tall = base + 0.4 * (top - base);
    let (rows, columns) = map.dim();
    let reach = rows.min(columns) / 4;
    let mut widths = Vec::new();
    for r in 2..rows.saturating_sub(2) {
        for c in 2..columns.saturating_sub(2) {
            let z = map[(r, c)];
            let summit =
                z > tall && (r - 2..r + 3).all(|i| (c - 2..c + 3).all(|j| !(map[(i, j)] > z)));
            if summit {
                let foot = base + 0.1 * (z - base);
                let mut sides: Vec<f64> = DIRECTIONS
                    .iter()
                    .filter_map(|&d| fall(map, (r, c), d, foot, 4.0 * noise as f32, reach))
                    .collect();
                if sides.len() >= 6 {
                    sides.sort_by(f64::total_cmp);
                    widths.push(sides[sides.len() / 2]);
                }
            }
        }
    }
    widths.sort_by(f64::total_cmp);
    widths.get(3 * widths.len() / 4).copied()
}

/// Distance in pixels to where the map falls to `foot` or begins to rise again.
fn fall(
    map: &Array2<f32>,
    from: (usize, usize),
    (dr, dc): (isize, isize),
    foot: f32,
    tolerance: f32,
    reach: usize,
) -> Option<f64> {
    let mut lowest = map[from];
    for k in 1..=reach as isize {
        let (r, c) = (from.0 as isize + k * dr, from.1 as isize + k * dc);
        let z = *map.get((usize::try_from(r).ok()?, usize::try_from(c).ok()?))?;
        if z <= foot || z > lowest + tolerance {
            return Some(k as f64 * ((dr * dr + dc * dc) as f64).sqrt());
        }
        lowest = lowest.min(z);
    }
    None
}
