//! Least squares on the contact graph: what the features say about the tip once it is roughly
//! known which part of the tip touched which feature where.
//!
//! A sharp feature at the (sub-pixel) place `u` with height `a` shows the tip mirrored:
//! `I(x) = a + P(u - x)` for every pixel `x` whose contact is that feature. Features, places and
//! tip are found together by alternating least squares; the places make the tip's samples dense,
//! so that neither pixel nor noise blunts or sharpens it. The scan itself is fitted, not a smoothed
//! copy; smoothing only decides which contacts belong together.

use super::smooth::{gain, gauss};
use crate::error::Result;
use crate::morphology;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use rayon::prelude::*;
use std::f64::consts::PI;

/// Contacts a feature needs.
const LEAST_CONTACTS: usize = 20;
/// Samples a tip cell needs to be believed.
pub(super) const LEAST_SUPPORT: f32 = 3.0;
const SECTORS: usize = 8;

/// A sharp feature and the scan pixels that touched it.
#[derive(Debug, Clone)]
pub(super) struct Feature {
    /// Place, pixels (row, column).
    pub place: [f64; 2],
    /// Height, nm.
    pub height: f64,
    /// Scan pixels that touch it.
    pub pixels: Vec<(u32, u32)>,
    /// Depth below the apex to which the tip was seen in every direction, nm.
    pub reach: f64,
}

/// The polished tip.
pub(super) struct Polished {
    /// Tip heights, nm, apex not yet re-centred.
    pub shape: Array2<f64>,
    /// Number of samples per cell (sum of bilinear weights), 0 where the bound was kept.
    pub support: Array2<f32>,
    /// The features used.
    pub features: Vec<Feature>,
    /// Standard deviation of the residuals, nm.
    pub scale: f64,
    /// The tip with each group of features left out, for the jackknife; empty with few features.
    pub leave_out: Vec<Array2<f64>>,
}

/// What to polish with.
pub(super) struct Input<'a> {
    /// The scan.
    pub scan: ArrayView2<'a, f32>,
    /// Noise standard deviation, nm.
    pub noise: f64,
    /// Pixel pitch, nm.
    pub px: f64,
    /// Smoothing that decides the contacts, pixels.
    pub smoothing: f64,
    /// Noise left after it, nm.
    pub smooth_noise: f64,
}

/// Rounds of finding contacts and fitting.
const ROUNDS: usize = 3;
/// Sweeps over features and tip within a round.
const SWEEPS: usize = 14;
/// Features fitted at most.
const MOST_FEATURES: usize = 200;
/// Sweeps in which features gather pixels anew.
const GROWTH: [usize; 4] = [2, 4, 6, 9];
/// Smoothing that takes noise but leaves the flanks, pixels.
const LIGHT_PX: f64 = 1.0;
/// How far features may lie beside their fitted places, pixels.
const SLACK_PX: f64 = 0.15;
/// How far the tip may lie outside its true place where it is not fitted yet, pixels.
const BLUNT_SLACK_PX: f64 = 0.6;

/// Polishes the bound `tip`. `None` when no sharp feature is found. Errors: `Cancelled`.
pub(super) fn polish<'a>(
    input: &'a Input<'a>,
    bound: &Array2<f32>,
    progress: &Progress,
) -> Result<Option<Polished>> {
    let smooth = gauss(input.scan, input.smoothing);
    let light = gauss(input.scan, input.smoothing.min(LIGHT_PX));
    let mut tip = bound.clone();
    let mut result: Option<Polished> = None;
    for round in 0..ROUNDS {
        progress.check()?;
        let part = progress.part(
            round as f32 / ROUNDS as f32,
            (round + 1) as f32 / ROUNDS as f32,
        );
        let eroded = morphology::erode(smooth.view(), tip.view(), &part.part(0.0, 0.3))?;
        let contacts = morphology::contacts(eroded.view(), tip.view(), &part.part(0.3, 0.6))?;
        let mut features = features(input, &contacts.offsets, &tip);
        if features.is_empty() {
            break;
        }
        // Where the apex itself may have touched right below: flats, and whatever is not steep.
        let tolerance = 4.0 * input.smooth_noise + 0.05 * input.px;
        let level = Array2::from_shape_fn(smooth.dim(), |at| {
            f64::from(smooth[at] - eroded[at]) <= tolerance
        });
        let core: Vec<Vec<(u32, u32)>> = features.iter().map(|f| f.pixels.clone()).collect();
        let mut fit = Fit::new(input, &tip);
        for sweep in 0..SWEEPS {
            progress.check()?;
            // Far outliers go first, then ever more of what is not this feature.
            (fit.trim, fit.blunt_slack) = if sweep < SWEEPS - 3 {
                (6.0, BLUNT_SLACK_PX)
            } else {
                (3.5, SLACK_PX)
            };
            if GROWTH.contains(&sweep) {
                fit.extend(&light, &features, &tip);
                fit.grow(&light, &level, &mut features, &core);
            }
            features.par_iter_mut().for_each(|f| fit.place(f));
            fit.update_scale(&features);
            fit.update_tip(&features);
            part.report(0.6 + 0.4 * (sweep + 1) as f32 / SWEEPS as f32);
        }
        for f in &mut features {
            f.reach = fit.reach(f);
        }
        let (shape, support) = fit.combined(bound);
        tip = shape.mapv(|p| p.min(0.0) as f32);
        let leave_out = fit.leave_out(&features, &shape, &support);
        result = Some(Polished {
            shape,
            support,
            features,
            leave_out,
            scale: fit.scale,
        });
    }
    Ok(result)
}

/// Contacts gathered into sharp, isolated features.
fn features(input: &Input, offsets: &Array2<[i16; 2]>, tip: &Array2<f32>) -> Vec<Feature> {
    let (rows, columns) = offsets.dim();
    let half = [tip.nrows() / 2, tip.ncols() / 2];
    let margin = half.map(|h| h / 3);
    let target = |r: usize, c: usize| -> Option<(usize, usize)> {
        let [dr, dc] = offsets[(r, c)];
        let inside = r >= margin[0]
            && c >= margin[1]
            && r + margin[0] < rows
            && c + margin[1] < columns
            && dr != i16::MIN
            && !input.scan[(r, c)].is_nan();
        inside.then(|| {
            (
                (r as isize + isize::from(dr)) as usize,
                (c as isize + isize::from(dc)) as usize,
            )
        })
    };
    let mut count = Array2::<u32>::zeros((rows, columns));
    for r in 0..rows {
        for c in 0..columns {
            if let Some(u) = target(r, c) {
                count[u] += 1;
            }
        }
    }
    let around = |(r, c): (usize, usize), reach: usize| {
        (r.saturating_sub(reach)..(r + reach + 1).min(rows)).flat_map(move |i| {
            (c.saturating_sub(reach)..(c + reach + 1).min(columns)).map(move |j| (i, j))
        })
    };
    let mut seeds: Vec<(u32, usize, usize)> = count
        .indexed_iter()
        .filter(|(_, n)| **n >= 4)
        .map(|((r, c), &n)| (n, r, c))
        .collect();
    seeds.sort_by_key(|&(n, r, c)| (std::cmp::Reverse(n), r, c));
    // Which feature each touched surface pixel belongs to.
    let mut owner = Array2::from_elem((rows, columns), u32::MAX);
    let mut places = Vec::new();
    for &(_, r, c) in &seeds {
        if owner[(r, c)] != u32::MAX {
            continue;
        }
        let near: Vec<_> = around((r, c), 1)
            .filter(|&u| owner[u] == u32::MAX)
            .collect();
        let own: u32 = near.iter().map(|&u| count[u]).sum();
        let wide: u32 = around((r, c), 3).map(|u| count[u]).sum();
        // A feature as sharp as the tip shows gathers its contacts on one spot.
        if (own as usize) < LEAST_CONTACTS || 2 * own < wide {
            continue;
        }
        let id = places.len() as u32;
        let mut place = [0.0; 2];
        for &u in &near {
            owner[u] = id;
            let weight = f64::from(count[u]) / f64::from(own);
            place[0] += weight * u.0 as f64;
            place[1] += weight * u.1 as f64;
        }
        places.push(place);
    }
    let mut features: Vec<Feature> = places
        .into_iter()
        .map(|place| Feature {
            place,
            height: f64::NAN,
            pixels: Vec::new(),
            reach: 0.0,
        })
        .collect();
    let owner_of = |r: usize, c: usize| target(r, c).map_or(u32::MAX, |u| owner[u]);
    for r in 1..rows.saturating_sub(1) {
        for c in 1..columns.saturating_sub(1) {
            let id = owner_of(r, c);
            // Pixels whose neighbours touch elsewhere may do so too.
            let alone = |(i, j)| owner_of(i, j) == id;
            if id != u32::MAX
                && [(r - 1, c), (r + 1, c), (r, c - 1), (r, c + 1)]
                    .into_iter()
                    .all(alone)
            {
                features[id as usize].pixels.push((r as u32, c as u32));
            }
        }
    }
    features.retain(|f| {
        f.pixels.len() >= LEAST_CONTACTS / 2
            && reach(f, half, |i, j| -f64::from(tip[(i, j)])) > 5.0 * input.smooth_noise
    });
    // More features cost time and tell little; those with the most contacts show the most.
    features.sort_by_key(|f| (std::cmp::Reverse(f.pixels.len()), f.pixels[0]));
    features.truncate(MOST_FEATURES);
    features
}

/// Least over eight directions of the greatest depth at which the feature touched the tip.
fn reach(feature: &Feature, half: [usize; 2], depth: impl Fn(usize, usize) -> f64) -> f64 {
    let mut deepest = [0.0f64; SECTORS];
    for &(r, c) in &feature.pixels {
        let (dy, dx) = (
            feature.place[0] - f64::from(r),
            feature.place[1] - f64::from(c),
        );
        if dy.hypot(dx) < 0.75 {
            continue;
        }
        let sector = ((dy.atan2(dx) / (2.0 * PI) + 1.0) * SECTORS as f64 + 0.5) as usize % SECTORS;
        let i = (dy.round() + half[0] as f64).max(0.0) as usize;
        let j = (dx.round() + half[1] as f64).max(0.0) as usize;
        if i <= 2 * half[0] && j <= 2 * half[1] {
            deepest[sector] = deepest[sector].max(depth(i, j));
        }
    }
    deepest.into_iter().fold(f64::INFINITY, f64::min)
}

/// The alternating fit.
struct Fit<'a> {
    input: &'a Input<'a>,
    tip: Array2<f64>,
    weight: Array2<f32>,
    scale: f64,
    /// Residuals beyond `trim` times the scale are left out, below the tip those beyond another
    /// `blunt_slack` pixels along the slope.
    trim: f64,
    blunt_slack: f64,
    half: [f64; 2],
}

/// A bilinear look-up: top-left cell and the weights of its four corners.
struct Corner {
    at: (usize, usize),
    fraction: [f64; 2],
}

impl Corner {
    fn weights(&self) -> [((usize, usize), f64); 4] {
        let [fr, fc] = self.fraction;
        let (r, c) = self.at;
        [
            ((r, c), (1.0 - fr) * (1.0 - fc)),
            ((r, c + 1), (1.0 - fr) * fc),
            ((r + 1, c), fr * (1.0 - fc)),
            ((r + 1, c + 1), fr * fc),
        ]
    }
}

/// Tip height and its slope along rows and columns.
fn look(tip: &Array2<f64>, corner: &Corner) -> (f64, [f64; 2]) {
    let (r, c) = corner.at;
    let [fr, fc] = corner.fraction;
    let t = |i: usize, j: usize| tip[(r + i, c + j)];
    let top = t(0, 0) * (1.0 - fc) + t(0, 1) * fc;
    let bottom = t(1, 0) * (1.0 - fc) + t(1, 1) * fc;
    let left = t(0, 0) * (1.0 - fr) + t(1, 0) * fr;
    let right = t(0, 1) * (1.0 - fr) + t(1, 1) * fr;
    (top * (1.0 - fr) + bottom * fr, [bottom - top, right - left])
}

/// Bilinear; `None` outside the map or beside a void.
fn interpolate(map: &Array2<f32>, [r, c]: [f64; 2]) -> Option<f64> {
    if !(r >= 0.0 && c >= 0.0) {
        return None;
    }
    let (i, j, fr, fc) = (r as usize, c as usize, r.fract(), c.fract());
    if i + 1 >= map.nrows() || j + 1 >= map.ncols() {
        return None;
    }
    let z = |a: usize, b: usize| f64::from(map[(i + a, j + b)]);
    let value = (z(0, 0) * (1.0 - fc) + z(0, 1) * fc) * (1.0 - fr)
        + (z(1, 0) * (1.0 - fc) + z(1, 1) * fc) * fr;
    value.is_finite().then_some(value)
}

/// Slope by central differences over two cells to each side (noise matters here), nm per cell.
fn slope_at(tip: &Array2<f64>, r: usize, c: usize) -> f64 {
    let (rows, columns) = tip.dim();
    let (r0, r1) = (r.saturating_sub(2), (r + 2).min(rows - 1));
    let (c0, c1) = (c.saturating_sub(2), (c + 2).min(columns - 1));
    let down = (tip[(r1, c)] - tip[(r0, c)]) / (r1 - r0).max(1) as f64;
    let along = (tip[(r, c1)] - tip[(r, c0)]) / (c1 - c0).max(1) as f64;
    down.hypot(along)
}

/// Weighted local quadratic over a square of half-width `reach` cells (Savitzky and Golay, Anal.
/// Chem. 36, 1627 (1964), in two dimensions; from memory): takes noise, keeps curvature. Cells
/// without weight stay.
fn local_quadratic(
    tip: &Array2<f64>,
    weight: &Array2<f32>,
    reach: usize,
    per_px: f64,
    noise: f64,
) -> Array2<f64> {
    let (rows, columns) = tip.dim();
    let values: Vec<f64> = (0..rows * columns)
        .into_par_iter()
        .map(|k| {
            let (r, c) = (k / columns, k % columns);
            if weight[(r, c)] < 0.5 {
                return tip[(r, c)];
            }
            // On the flank height errors are small along the normal, and curvature changes fast.
            let steep = slope_at(tip, r, c) * per_px;
            if steep >= 0.8 {
                return tip[(r, c)];
            }
            let mut normal = nalgebra::SMatrix::<f64, 6, 6>::zeros();
            let mut right = nalgebra::SVector::<f64, 6>::zeros();
            let mut count = 0;
            for i in r.saturating_sub(reach)..(r + reach + 1).min(rows) {
                for j in c.saturating_sub(reach)..(c + reach + 1).min(columns) {
                    let w = f64::from(weight[(i, j)]);
                    if w < 0.5 {
                        continue;
                    }
                    let (y, x) = (i as f64 - r as f64, j as f64 - c as f64);
                    let g = nalgebra::SVector::<f64, 6>::from([1.0, x, y, x * x, x * y, y * y]);
                    normal += g * g.transpose() * w;
                    right += g * (w * (tip[(i, j)] - tip[(r, c)]));
                    count += 1;
                }
            }
            // At the rim of what was seen a quadratic runs away.
            if count < (2 * reach + 1) * (reach + 1) {
                return tip[(r, c)];
            }
            let Some(fit) = normal.cholesky().map(|factor| factor.solve(&right)) else {
                return tip[(r, c)];
            };
            // A change beyond the noise is shape.
            if fit[0].abs() > 3.0 * noise / f64::from(weight[(r, c)]).sqrt() {
                return tip[(r, c)];
            }
            tip[(r, c)] + fit[0] * (2.0 - 2.5 * steep).clamp(0.0, 1.0)
        })
        .collect();
    Array2::from_shape_vec((rows, columns), values).unwrap_or_else(|_| tip.clone())
}

impl<'a> Fit<'a> {
    fn new(input: &'a Input<'a>, tip: &Array2<f32>) -> Self {
        Self {
            input,
            tip: tip.mapv(f64::from),
            weight: Array2::zeros(tip.dim()),
            scale: f64::INFINITY,
            trim: 6.0,
            blunt_slack: BLUNT_SLACK_PX,
            half: [(tip.nrows() / 2) as f64, (tip.ncols() / 2) as f64],
        }
    }

    fn corner(&self, place: [f64; 2], pixel: (u32, u32)) -> Option<Corner> {
        let r = place[0] - f64::from(pixel.0) + self.half[0];
        let c = place[1] - f64::from(pixel.1) + self.half[1];
        let inside = r >= 0.0
            && c >= 0.0
            && r < (self.tip.nrows() - 1) as f64
            && c < (self.tip.ncols() - 1) as f64;
        inside.then(|| Corner {
            at: (r as usize, c as usize),
            fraction: [r.fract(), c.fract()],
        })
    }

    fn look(&self, corner: &Corner) -> (f64, [f64; 2]) {
        look(&self.tip, corner)
    }

    /// Residuals `(corner, scan - a - P, slope)` of the feature's pixels within the trim.
    fn residuals(&self, f: &Feature) -> Vec<(Corner, f64, [f64; 2])> {
        let limit = self.trim * self.scale;
        f.pixels
            .iter()
            .filter_map(|&(r, c)| {
                let corner = self.corner(f.place, (r, c))?;
                let (p, slope) = self.look(&corner);
                let z = f64::from(self.input.scan[(r as usize, c as usize)]);
                let e = z - f.height - p;
                // A misplaced feature errs more where the tip is steep.
                let steep = slope[0].hypot(slope[1]);
                let allowed = limit * (1.0 + 0.3 * steep) + SLACK_PX * steep;
                // Where the scan lies below, the tip is still too blunt there; where it lies above,
                // something else touched.
                let below = allowed + self.blunt_slack * steep;
                (f.height.is_nan() || (-below..=allowed).contains(&e)).then_some((corner, e, slope))
            })
            .collect()
    }

    /// Height and place of the feature by Gauss-Newton, the tip held.
    fn place(&self, f: &mut Feature) {
        if f.height.is_nan() {
            let mut first: Vec<f64> = f
                .pixels
                .iter()
                .filter_map(|&(r, c)| {
                    let p = self.look(&self.corner(f.place, (r, c))?).0;
                    Some(f64::from(self.input.scan[(r as usize, c as usize)]) - p)
                })
                .collect();
            first.sort_by(f64::total_cmp);
            match first.get(first.len() / 2) {
                Some(&median) => f.height = median,
                None => return,
            }
        }
        let start = f.place;
        for _ in 0..2 {
            let mut normal = nalgebra::Matrix3::<f64>::zeros();
            let mut right = nalgebra::Vector3::<f64>::zeros();
            for (_, e, [sr, sc]) in self.residuals(f) {
                let g = nalgebra::Vector3::new(1.0, sr, sc);
                // Errors of place count along the slope: weigh as along the surface's normal.
                let w = 1.0 / (1.0 + 0.1 * (sr * sr + sc * sc));
                normal += g * g.transpose() * w;
                right += g * (e * w);
            }
            // A little damping keeps flat features where they are.
            for k in 0..3 {
                normal[(k, k)] += 1e-3;
            }
            let Some(step) = normal.try_inverse().map(|inverse| inverse * right) else {
                return;
            };
            f.height += step[0];
            for k in 0..2 {
                f.place[k] = (f.place[k] + step[k + 1].clamp(-0.3, 0.3))
                    .clamp(start[k] - 0.5, start[k] + 0.5);
            }
        }
    }

    fn update_scale(&mut self, features: &[Feature]) {
        let mut all: Vec<f64> = features
            .par_iter()
            .flat_map_iter(|f| {
                f.pixels.iter().filter_map(|&(r, c)| {
                    let (p, slope) = self.look(&self.corner(f.place, (r, c))?);
                    let e = f64::from(self.input.scan[(r as usize, c as usize)]) - f.height - p;
                    Some((e / (1.0 + 0.3 * slope[0].hypot(slope[1]))).abs())
                })
            })
            .collect();
        if all.is_empty() {
            return;
        }
        let middle = all.len() / 2;
        let (_, &mut median, _) = all.select_nth_unstable_by(middle, f64::total_cmp);
        self.scale = (1.4826 * median).max(self.input.noise).max(1e-9);
    }

    /// Per cell the mean residual of the samples around it, summed in feature order.
    fn means(
        &self,
        features: &[Feature],
        keep: impl Fn(usize) -> bool + Sync,
    ) -> (Array2<f64>, Array2<f32>) {
        let mut sum = Array2::<f64>::zeros(self.tip.dim());
        let mut weight = Array2::<f32>::zeros(self.tip.dim());
        let residuals: Vec<_> = features
            .par_iter()
            .enumerate()
            .filter(|(k, _)| keep(*k))
            .map(|(_, f)| self.residuals(f))
            .collect();
        // Summed in feature order: the same bits for any number of threads.
        for (corner, e, _) in residuals.into_iter().flatten() {
            for (at, w) in corner.weights() {
                sum[at] += w * e;
                weight[at] += w as f32;
            }
        }
        (sum, weight)
    }

    /// Moves the tip by the mean residuals (a step of simultaneous iterative reconstruction).
    fn update_tip(&mut self, features: &[Feature]) {
        for _ in 0..2 {
            let (sum, weight) = self.means(features, |_| true);
            for ((p, &s), &w) in self.tip.iter_mut().zip(&sum).zip(&weight) {
                if w > 0.5 {
                    *p += s / f64::from(w);
                }
            }
            self.weight = weight;
        }
        self.tip = self.calmed(&self.tip);
        // Only differences count: the highest cell stays at 0.
        let high = self
            .tip
            .iter()
            .zip(&self.weight)
            .filter(|(_, w)| **w > 0.5)
            .fold(f64::NEG_INFINITY, |high, (p, _)| high.max(*p));
        if high.is_finite() {
            self.tip.mapv_inplace(|p| p - high);
        }
    }

    /// Bounds the tip where no contact was fitted yet. Every feature's surroundings are a bound,
    /// `P(d) <= I(u - d) - a`, whatever touched there: the lower fifth over all features is taken,
    /// never above the tip that the round began with.
    fn extend(&mut self, light: &Array2<f32>, features: &[Feature], start: &Array2<f32>) {
        let (rows, columns) = self.tip.dim();
        let next: Vec<f64> = (0..rows * columns)
            .into_par_iter()
            .map(|k| {
                let at = (k / columns, k % columns);
                if self.weight[at] >= LEAST_SUPPORT {
                    return self.tip[at];
                }
                let offset = [at.0 as f64 - self.half[0], at.1 as f64 - self.half[1]];
                let mut limits: Vec<f64> = features
                    .iter()
                    .filter_map(|f| {
                        let place = [f.place[0] - offset[0], f.place[1] - offset[1]];
                        Some(interpolate(light, place)? - f.height)
                    })
                    .collect();
                let limit = f64::from(start[at]);
                if limits.len() < 3 {
                    return limit;
                }
                let low = limits.len() / 5;
                limits
                    .select_nth_unstable_by(low, f64::total_cmp)
                    .1
                    .min(limit)
            })
            .collect();
        if let Ok(next) = Array2::from_shape_vec((rows, columns), next) {
            self.tip = next;
        }
    }

    /// Gives every feature the pixels that the tip on it explains. Flank against flank, the
    /// erosion's contacts are many and say little; the features themselves say more.
    fn grow(
        &self,
        light: &Array2<f32>,
        level: &Array2<bool>,
        features: &mut [Feature],
        core: &[Vec<(u32, u32)>],
    ) {
        let (rows, columns) = light.dim();
        let tolerance = 4.0 * self.input.noise * gain(self.input.smoothing.min(LIGHT_PX));
        let half = self.half.map(|h| h as usize);
        let mut best = Array2::from_elem((rows, columns), (f64::NEG_INFINITY, u32::MAX, [0.0; 2]));
        for (id, f) in features.iter().enumerate() {
            let range = |k: usize, n: usize| {
                let at = f.place[k].round().max(0.0) as usize;
                at.saturating_sub(half[k] - 1)..(at + half[k]).min(n)
            };
            for r in range(0, rows) {
                for c in range(1, columns) {
                    let Some(corner) = self.corner(f.place, (r as u32, c as u32)) else {
                        continue;
                    };
                    let (p, slope) = self.look(&corner);
                    if f.height + p > best[(r, c)].0 {
                        best[(r, c)] = (f.height + p, id as u32, slope);
                    }
                }
            }
        }
        let fits = |r: usize, c: usize| -> u32 {
            let (predicted, id, slope) = best[(r, c)];
            let steep = slope[0].hypot(slope[1]);
            if r == 0 || c == 0 || r + 1 == rows || c + 1 == columns {
                return u32::MAX;
            }
            // At the feature's foot the scan turns level where the tip goes on falling.
            let along = 0.5 * f64::from(light[(r - 1, c)] - light[(r + 1, c)]) * slope[0]
                + 0.5 * f64::from(light[(r, c - 1)] - light[(r, c + 1)]) * slope[1];
            if steep > self.input.noise && along < 0.6 * steep * steep {
                return u32::MAX;
            }
            let far = features
                .get(id as usize)
                .is_none_or(|f| (f.place[0] - r as f64).hypot(f.place[1] - c as f64) > 1.5);
            if far && level[(r, c)] {
                return u32::MAX;
            }
            let off = f64::from(light[(r, c)]) - predicted;
            let explained =
                off <= tolerance + SLACK_PX * steep && off >= -tolerance - BLUNT_SLACK_PX * steep;
            if explained { id } else { u32::MAX }
        };
        let owner = Array2::from_shape_fn((rows, columns), |(r, c)| fits(r, c));
        let mut grown: Vec<Vec<(u32, u32)>> = vec![Vec::new(); features.len()];
        for r in 1..rows.saturating_sub(1) {
            for c in 1..columns.saturating_sub(1) {
                let id = owner[(r, c)];
                let around = [(r - 1, c), (r + 1, c), (r, c - 1), (r, c + 1)];
                if id != u32::MAX && around.into_iter().all(|at| owner[at] == id) {
                    grown[id as usize].push((r as u32, c as u32));
                }
            }
        }
        for ((f, more), core) in features.iter_mut().zip(grown).zip(core) {
            f.pixels = core.iter().copied().chain(more).collect();
            f.pixels.sort_unstable();
            f.pixels.dedup();
        }
    }

    fn reach(&self, f: &Feature) -> f64 {
        reach(f, self.half.map(|h| h as usize), |i, j| -self.tip[(i, j)])
    }

    /// Half-width of the local quadratic that the noise of the cells asks for.
    fn calm_reach(&self) -> usize {
        let mut seen: Vec<f32> = self
            .weight
            .iter()
            .copied()
            .filter(|w| *w >= LEAST_SUPPORT)
            .collect();
        seen.sort_by(f32::total_cmp);
        let typical = seen.get(seen.len() / 2).map_or(1.0, |w| f64::from(*w));
        let error = self.input.noise / typical.sqrt() / self.input.px;
        match error {
            e if e < 0.01 => 0,
            e if e < 0.08 => 2,
            _ => 3,
        }
    }

    fn calmed(&self, tip: &Array2<f64>) -> Array2<f64> {
        match self.calm_reach() {
            0 => tip.clone(),
            reach => local_quadratic(
                tip,
                &self.weight,
                reach,
                1.0 / self.input.px,
                self.input.noise,
            ),
        }
    }

    /// The fit where it has support, the bound elsewhere.
    fn combined(&self, bound: &Array2<f32>) -> (Array2<f64>, Array2<f32>) {
        let mut shape = bound.mapv(f64::from);
        let mut support = self.weight.clone();
        let (rows, columns) = shape.dim();
        for r in 0..rows {
            for c in 0..columns {
                // The rim of what was seen leans on what was not.
                let inner = (r.saturating_sub(1)..(r + 2).min(rows)).all(|i| {
                    (c.saturating_sub(1)..(c + 2).min(columns))
                        .all(|j| self.weight[(i, j)] >= LEAST_SUPPORT)
                });
                shape[(r, c)] = self.tip[(r, c)].min(shape[(r, c)]);
                if inner {
                    shape[(r, c)] = self.tip[(r, c)];
                } else {
                    support[(r, c)] = 0.0;
                }
            }
        }
        (shape, support)
    }

    /// The tip without each of up to ten groups of features.
    fn leave_out(
        &self,
        features: &[Feature],
        shape: &Array2<f64>,
        support: &Array2<f32>,
    ) -> Vec<Array2<f64>> {
        let groups = features.len().min(10);
        if groups < 3 {
            return Vec::new();
        }
        (0..groups)
            .into_par_iter()
            .map(|g| {
                let (sum, weight) = self.means(features, |k| k % groups != g);
                let mut tip = shape.clone();
                for (((p, &s), &w), &all) in tip.iter_mut().zip(&sum).zip(&weight).zip(support) {
                    if all > 0.0 && w > 0.5 {
                        *p += s / f64::from(w);
                    }
                }
                self.calmed(&tip)
            })
            .collect()
    }
}
