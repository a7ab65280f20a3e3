//! The search for the plane of the dominant flat.
//!
//! A least-squares plane follows the features: an isolated step tilts it. Here the tilt is taken
//! from the commonest local slope, found coarse to fine over growing lags; then the heights left
//! after the tilt pile up at the flats, and the plane is refitted to the dominant pile until it
//! no longer changes. Several starts are tried and the one that piles up most pixels is kept.

use super::model::{Model, Plane, from_middle};
use ndarray::Array2;
use ndarray::parallel::prelude::*;
use statrs::function::erf::erf;

/// Pixels that the search looks at; the plane is refined on all of them afterwards.
const SAMPLES: usize = 1 << 14;

/// A flat that holds fewer of the pixels than this is no base.
const SMALLEST_SHARE: f64 = 0.03;

/// Share of the pixel pairs that must agree on a slope for it to be taken without a search.
const AGREED: f64 = 0.4;

/// Of two levels whose areas differ by no more than this share, the lower is the base.
const NEARLY_EQUAL: f64 = 0.2;

/// Pixels `[row, col]` to search on: all of the usable ones, or one by chance from each cell.
pub(super) struct Samples {
    pub at: Vec<(usize, usize)>,
}

impl Samples {
    /// Chooses them; `usable(r, c)` says whether a pixel may be looked at. Always the same ones:
    /// the place in each cell is a hash of the cell, so that no grating falls in step with it.
    pub(super) fn choose(z: &Array2<f64>, allowed: Option<&Array2<bool>>) -> Self {
        let (rows, columns) = z.dim();
        let usable = |r: usize, c: usize| !z[[r, c]].is_nan() && allowed.is_none_or(|a| a[[r, c]]);
        let among = allowed.map_or(rows * columns, super::model::count);
        let cell = (among as f64 / SAMPLES as f64).sqrt().ceil().max(1.0) as usize;
        let (tall, wide) = (cell.min(rows), cell.min(columns));
        let mut at = Vec::with_capacity(2 * SAMPLES);
        for top in (0..rows).step_by(tall) {
            for left in (0..columns).step_by(wide) {
                let h = hash((top * columns + left) as u64);
                let r = top + (h % tall as u64) as usize;
                let c = left + ((h >> 32) % wide as u64) as usize;
                if r < rows && c < columns && usable(r, c) {
                    at.push((r, c));
                }
            }
        }
        Self { at }
    }
}

/// SplitMix64.
fn hash(mut x: u64) -> u64 {
    x = x.wrapping_add(0x9e37_79b9_7f4a_7c15);
    x = (x ^ (x >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    x = (x ^ (x >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    x ^ (x >> 31)
}

/// The dominant pile of heights.
#[derive(Debug, Clone, Copy)]
pub(super) struct Pile {
    /// Its middle, nm.
    pub centre: f64,
    /// About its standard deviation, nm.
    pub scale: f64,
}

/// The plane of the dominant flat.
#[derive(Debug, Clone, Copy)]
pub(super) struct Found {
    pub plane: Plane,
    pub scale: f64,
}

/// Finds the plane of the dominant flat. `model` carries row offsets known before; `noise` is the
/// scale of heights on a flat along a row, `row_noise` that between rows, nm, both positive.
///
/// `None` where no flat stands out.
pub(super) fn find(
    z: &Array2<f64>,
    model: &Model,
    samples: &Samples,
    noise: f64,
    row_noise: f64,
) -> Option<Found> {
    let (rows, columns) = z.dim();
    let scale = noise.hypot(row_noise);
    let flat_model = Model {
        plane: Plane::default(),
        offsets: model.offsets.clone(),
    };
    let points: Vec<[f64; 3]> = samples
        .at
        .iter()
        .map(|&(r, c)| {
            [
                from_middle(c, columns),
                from_middle(r, rows),
                flat_model.residual(z, r, c),
            ]
        })
        .collect();
    if points.len() < 3 {
        return None;
    }
    let along_x = |lag: usize| -> Vec<f64> {
        differences(samples, |r, c| {
            (c + lag < columns).then(|| z[[r, c + lag]] - z[[r, c]])
        })
    };
    let along_y = |lag: usize| -> Vec<f64> {
        differences(samples, |r, c| {
            (r + lag < rows)
                .then(|| z[[r + lag, c]] - model.offsets[r + lag] - z[[r, c]] + model.offsets[r])
        })
    };
    let tilt = |per_column, per_row| Plane {
        at_centre: 0.0,
        per_column,
        per_row,
    };
    let (across, down) = (
        local_slope(along_x, columns, noise),
        local_slope(along_y, rows, scale),
    );
    let local = tilt(across.slope, down.slope);
    // Where near and far pixels agree on the slope there is nothing to search: a step of a few
    // times the noise piles up best when it is tilted away, and must not be.
    if across.agreement.min(down.agreement) >= AGREED
        && let Some(found) = refine(&points, local, scale)
    {
        return Some(found);
    }
    let starts = [
        local,
        tilt(median(&mut along_x(1)), median(&mut along_y(1))),
        least_squares(points.iter()),
        Plane::default(),
    ];
    let fewer: Vec<[f64; 3]> = points.iter().step_by(4).copied().collect();
    let tried: Vec<Option<(usize, Found)>> = starts
        .into_par_iter()
        .flat_map_iter(|start| [start, most_piled_up(&fewer, start, scale)])
        .map(|start| {
            let found = refine(&points, start, scale)?;
            let (_, piled) = densest(&sorted_residuals(&points, found.plane), 4.0 * scale);
            Some((piled, found))
        })
        .collect();
    let mut best: Option<(usize, Found)> = None;
    for (piled, found) in tried.into_iter().flatten() {
        if best.is_none_or(|(most, _)| piled > most) {
            best = Some((piled, found));
        }
    }
    best.map(|(_, found)| found)
}

/// The tilt near `start` at which most heights fall within a narrow window: a pattern search on
/// windows from wide to narrow, with steps that move the map's edge by about the window.
fn most_piled_up(points: &[[f64; 3]], start: Plane, scale: f64) -> Plane {
    let reach = |k: usize| points.iter().fold(1.0f64, |m, p| m.max(p[k].abs()));
    let (across, down) = (reach(0), reach(1));
    let mut best = start;
    let mut heights = Vec::with_capacity(points.len());
    let mut cells = Vec::new();
    for narrower in 0..6 {
        let width = 4.0 * scale * f64::from(1 << (5 - narrower));
        let mut held = piled_up(points, best, width, &mut heights, &mut cells);
        for _ in 0..8 {
            let before = best;
            for (i, j) in [
                (1, 0),
                (-1, 0),
                (0, 1),
                (0, -1),
                (1, 1),
                (-1, -1),
                (1, -1),
                (-1, 1),
            ] {
                let tried = Plane {
                    at_centre: 0.0,
                    per_column: before.per_column + 0.5 * width / across * f64::from(i),
                    per_row: before.per_row + 0.5 * width / down * f64::from(j),
                };
                let n = piled_up(points, tried, width, &mut heights, &mut cells);
                if n > held {
                    (best, held) = (tried, n);
                }
            }
            if best == before {
                break;
            }
        }
    }
    best
}

/// The largest number of heights in a window of about `width` (three cells of a histogram).
fn piled_up(
    points: &[[f64; 3]],
    plane: Plane,
    width: f64,
    heights: &mut Vec<f64>,
    cells: &mut Vec<u32>,
) -> u32 {
    const MOST_CELLS: f64 = 65536.0;
    heights.clear();
    heights.extend(points.iter().map(|p| p[2] - plane.at(p[0], p[1])));
    let (low, high) = heights
        .iter()
        .fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), z| {
            (l.min(*z), h.max(*z))
        });
    let cell = (width / 3.0).max((high - low) / MOST_CELLS);
    cells.clear();
    cells.resize(((high - low) / cell) as usize + 3, 0);
    for z in heights {
        cells[((*z - low) / cell) as usize] += 1;
    }
    cells.windows(3).map(|w| w.iter().sum()).max().unwrap_or(0)
}

/// Refits the plane to the dominant pile until it no longer changes.
fn refine(points: &[[f64; 3]], mut plane: Plane, scale: f64) -> Option<Found> {
    let reach = points
        .iter()
        .fold(1.0f64, |m, p| m.max(p[0].abs()).max(p[1].abs()));
    let mut found = None;
    for _ in 0..25 {
        let pile = dominant_pile(&sorted_residuals(points, plane), scale)?;
        let inliers = || {
            points
                .iter()
                .filter(|p| (p[2] - plane.at(p[0], p[1]) - pile.centre).abs() <= 2.0 * pile.scale)
        };
        if !spreads(points, inliers()) {
            return None;
        }
        let next = least_squares(inliers());
        let change = (next.per_column - plane.per_column)
            .abs()
            .max((next.per_row - plane.per_row).abs())
            * reach
            + (next.at_centre - plane.at_centre).abs();
        plane = next;
        found = Some(Found {
            plane,
            scale: pile.scale,
        });
        if change < 0.01 * pile.scale {
            break;
        }
    }
    found
}

/// Whether the chosen points are many, or spread over enough of the map to carry a plane: one
/// facet of many tilted ones does not.
fn spreads<'a>(points: &[[f64; 3]], chosen: impl Iterator<Item = &'a [f64; 3]>) -> bool {
    let chosen: Vec<[f64; 3]> = chosen.copied().collect();
    let share = chosen.len() as f64 / points.len() as f64;
    let sd = |p: &[[f64; 3]], k: usize| {
        let mean = p.iter().map(|p| p[k]).sum::<f64>() / p.len() as f64;
        (p.iter().map(|p| (p[k] - mean).powi(2)).sum::<f64>() / p.len() as f64).sqrt()
    };
    let wide = |k| sd(&chosen, k) >= 0.35 * sd(points, k);
    chosen.len() >= 3 && (share >= 0.25 || (share >= SMALLEST_SHARE && wide(0) && wide(1)))
}

fn least_squares<'a>(points: impl Iterator<Item = &'a [f64; 3]> + Clone) -> Plane {
    let n = points.clone().count().max(1) as f64;
    let mean = |k: usize| points.clone().map(|p| p[k]).sum::<f64>() / n;
    let (u, v, z) = (mean(0), mean(1), mean(2));
    let (mut uu, mut uv, mut vv, mut uz, mut vz) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for p in points.clone() {
        let (a, b, h) = (p[0] - u, p[1] - v, p[2] - z);
        uu += a * a;
        uv += a * b;
        vv += b * b;
        uz += a * h;
        vz += b * h;
    }
    Plane::from_moments([u, v, z], [uu, uv, vv], [uz, vz])
}

fn differences(samples: &Samples, f: impl Fn(usize, usize) -> Option<f64>) -> Vec<f64> {
    samples
        .at
        .iter()
        .filter_map(|&(r, c)| f(r, c).filter(|d| !d.is_nan()))
        .collect()
}

/// A slope and the share of the pixel pairs that agree with it, the median over the lags: at half
/// the period of a grating none does, at the period all do.
struct LocalSlope {
    slope: f64,
    agreement: f64,
}

/// The commonest slope per pixel: the mode of the differences at lag 1, sharpened by the median
/// of those that agree with it at lags 2, 4, 8, ... up to a quarter of the map.
fn local_slope(at_lag: impl Fn(usize) -> Vec<f64>, count: usize, noise: f64) -> LocalSlope {
    let width = 4.0 * std::f64::consts::SQRT_2 * noise;
    let mut steps = at_lag(1);
    if steps.is_empty() {
        // One row or one column has no slope across.
        return LocalSlope {
            slope: 0.0,
            agreement: 1.0,
        };
    }
    steps.sort_unstable_by(f64::total_cmp);
    let (first, n) = densest(&steps, width);
    let mut slope = steps[first..first + n].iter().sum::<f64>() / n as f64;
    let mut agreement = vec![n as f64 / steps.len() as f64];
    let mut lag = 2;
    while lag <= count / 4 {
        let all = at_lag(lag);
        let mut agreeing: Vec<f64> = all
            .iter()
            .map(|d| d - slope * lag as f64)
            .filter(|d| d.abs() <= 0.75 * width)
            .collect();
        agreement.push(agreeing.len() as f64 / all.len().max(1) as f64);
        if agreeing.len() >= 8 && 5 * agreeing.len() >= all.len() {
            slope += median(&mut agreeing) / lag as f64;
        }
        lag *= 2;
    }
    LocalSlope {
        slope,
        agreement: median(&mut agreement),
    }
}

pub(super) fn median(values: &mut [f64]) -> f64 {
    if values.is_empty() {
        return 0.0;
    }
    let mid = values.len() / 2;
    *values.select_nth_unstable_by(mid, f64::total_cmp).1
}

fn sorted_residuals(points: &[[f64; 3]], plane: Plane) -> Vec<f64> {
    let mut residuals: Vec<f64> = points.iter().map(|p| p[2] - plane.at(p[0], p[1])).collect();
    residuals.sort_unstable_by(f64::total_cmp);
    residuals
}

/// The window of `width` that holds most of the sorted values: its first index and their number.
fn densest(sorted: &[f64], width: f64) -> (usize, usize) {
    windows(sorted, width).fold(
        (0, 0),
        |best, (i, n)| if n > best.1 { (i, n) } else { best },
    )
}

/// For each first index the number of sorted values within `width` above it.
fn windows(sorted: &[f64], width: f64) -> impl Iterator<Item = (usize, usize)> {
    let mut end = 0;
    (0..sorted.len()).map(move |i| {
        while end < sorted.len() && sorted[end] - sorted[i] <= width {
            end += 1;
        }
        (i, end - i)
    })
}

/// The middle of the lowest of the piles that hold nearly as many as the largest.
fn lowest_large(sorted: &[f64], width: f64) -> f64 {
    let (_, most) = densest(sorted, width);
    let enough = (1.0 - NEARLY_EQUAL) * most as f64;
    let first = windows(sorted, width)
        .find(|&(_, n)| n as f64 >= enough)
        .map_or(0, |(i, _)| i);
    // The window that first holds enough lies on the pile's lower flank; its top is close above.
    let (i, n) = windows(sorted, width)
        .skip(first)
        .take_while(|&(i, _)| sorted[i] - sorted[first] <= width)
        .fold((first, 0), |best, w| if w.1 > best.1 { w } else { best });
    sorted[i + n / 2]
}

/// The dominant pile of the sorted heights, searched from `scale` upwards in width.
///
/// A pile must fall off on both sides. Then it is a flat when it is no wider than the noise and
/// holds a fifth of the pixels (or a twentieth, if these are many); or stands out twofold from what a Gaussian spread over the whole
/// range of heights would show; or has valleys on both sides and a seventh of all beyond them.
/// `None` otherwise: one broad hill of heights is a rough surface.
pub(super) fn dominant_pile(sorted: &[f64], scale: f64) -> Option<Pile> {
    let n = sorted.len();
    if n < 3 {
        return None;
    }
    let quantile = |q: f64| sorted[((n - 1) as f64 * q).round() as usize];
    let hull = (quantile(0.95) - quantile(0.05)) / 3.29;
    let within = |low: f64, high: f64| {
        let below = |x: f64| sorted.partition_point(|z| *z < x);
        below(high).saturating_sub(below(low)) as f64
    };
    let mut s = scale;
    loop {
        let centre = lowest_large(sorted, 2.0 * s);
        let at = |x: f64| within(centre + (x - 0.5) * s, centre + (x + 0.5) * s);
        let falls_off = at(-2.0).max(at(2.0)) <= 0.4 * at(0.0);
        let count = n as f64;
        let held = within(centre - 2.0 * s, centre + 2.0 * s);
        let expected = count * erf(2.0 * s / (2f64.sqrt() * hull));
        let narrow =
            s <= 2.0 * scale && (held >= 0.2 * count || (held >= 0.05 * count && at(0.0) >= 25.0));
        let stands_out = held >= 2.0 * expected && held - expected >= 6.0 * expected.sqrt();
        let valley = |side: f64| (4..=8).any(|k| at(side * 0.5 * f64::from(k)) <= 0.15 * at(0.0));
        let apart = within(centre - 3.0 * s, centre + 3.0 * s) <= 0.86 * count
            && held >= 0.2 * count
            && valley(-1.0)
            && valley(1.0);
        if falls_off && (narrow || stands_out || apart) {
            return Some(Pile { centre, scale: s });
        }
        s *= 1.25;
        if s > hull.max(2.0 * scale) {
            return None;
        }
    }
}
