//! Least squares of the image on the scan's pixels (Levenberg-Marquardt), with covariance.
//!
//! Certified values are unknowns too, each observed once with its own standard uncertainty, so
//! that they enter the covariance of the tip with their correlations (generalised least squares).
//! Large residuals are bounded (Huber). Source of the algorithm: Marquardt 1963, Huber 1964 (from
//! memory).

use super::state::{Image, Parameter, Seen, State};
use crate::error::Result;
use crate::progress::Progress;
use nalgebra::{DMatrix, DVector};
use rayon::prelude::*;

/// Residuals beyond this many standard deviations pull no harder.
const HUBER: f64 = 4.0;
/// Pixels are gone through in this many parts, whatever the number of threads.
const PARTS: usize = 16;
/// Standard deviation of the heights, nm, below which rounding counts as noise.
const LEAST_SD: f64 = 1e-4;

/// One height; position from the middle of the scan, nm.
#[derive(Debug, Clone, Copy)]
pub(super) struct Pixel {
    pub x: f64,
    pub y: f64,
    pub z: f64,
    pub row: usize,
    pub column: usize,
}

/// An unknown.
#[derive(Debug, Clone, Copy)]
pub(super) struct Unknown {
    pub parameter: Parameter,
    /// Step of the numerical derivative.
    pub step: f64,
    /// Value and standard uncertainty it was observed with beforehand; very wide where not at all.
    pub observed: [f64; 2],
    pub within: [f64; 2],
}

/// The state that fits best.
#[derive(Debug, Clone)]
pub(super) struct Fit {
    pub state: State,
    pub unknowns: Vec<Unknown>,
    /// Covariance of the unknowns.
    pub covariance: DMatrix<f64>,
    /// Standard deviation of the residuals, bounded, nm.
    pub sd: f64,
    pub settled: bool,
}

impl Fit {
    pub fn index(&self, parameter: Parameter) -> Option<usize> {
        self.unknowns.iter().position(|u| u.parameter == parameter)
    }

    /// Standard uncertainty; 0 for what is no unknown.
    pub fn u(&self, parameter: Parameter) -> f64 {
        self.index(parameter)
            .map_or(0.0, |i| self.covariance[(i, i)].max(0.0).sqrt())
    }

    /// Change of the unknowns when the value that `parameter` was observed with grows by its
    /// standard uncertainty: what a refit with the shifted value gives, to first order.
    pub fn shift(&self, parameter: Parameter) -> Option<DVector<f64>> {
        let i = self.index(parameter)?;
        Some(self.covariance.column(i) / self.unknowns[i].observed[1])
    }
}

/// Normal equations, scaled by the noise.
struct Sums {
    normal: DMatrix<f64>,
    right: DVector<f64>,
    cost: f64,
}

/// Perturbed images for the derivatives by the unknowns that act everywhere.
struct Derivatives<'a> {
    /// `(unknown, image with it larger, image with it smaller, 1 / (2 step))`.
    everywhere: Vec<(usize, Image<'a>, Image<'a>, f64)>,
    /// Unknowns of each feature: x, y, top.
    local: Vec<[Option<usize>; 3]>,
    plane: [Option<usize>; 3],
    step: f64,
}

fn is_local(parameter: Parameter) -> Option<(usize, usize)> {
    match parameter {
        Parameter::PlaceX(k) => Some((k, 0)),
        Parameter::PlaceY(k) => Some((k, 1)),
        Parameter::Top(k) => Some((k, 2)),
        _ => None,
    }
}

fn of_plane(parameter: Parameter) -> Option<usize> {
    match parameter {
        Parameter::Base => Some(0),
        Parameter::SlopeX => Some(1),
        Parameter::SlopeY => Some(2),
        _ => None,
    }
}

/// States with each unknown that acts everywhere moved up and down.
fn moved(state: &State, unknowns: &[Unknown]) -> Vec<(usize, State, State, f64)> {
    let mut list = Vec::new();
    for (i, unknown) in unknowns.iter().enumerate() {
        if is_local(unknown.parameter).is_some() || of_plane(unknown.parameter).is_some() {
            continue;
        }
        let at = |value: f64| {
            let mut other = state.clone();
            other.set(unknown.parameter, value);
            other
        };
        let here = state.get(unknown.parameter);
        // One-sided where the other side is out of bounds.
        let up = here + unknown.step;
        let down = (here - unknown.step).max(unknown.within[0].min(here));
        list.push((i, at(up), at(down), 1.0 / (up - down)));
    }
    list
}

impl<'a> Derivatives<'a> {
    fn new(
        state: &State,
        unknowns: &[Unknown],
        moved: &'a [(usize, State, State, f64)],
        step: f64,
    ) -> Self {
        let mut local = vec![[None; 3]; state.places.len()];
        let mut plane = [None; 3];
        for (i, unknown) in unknowns.iter().enumerate() {
            if let Some((k, which)) = is_local(unknown.parameter) {
                local[k][which] = Some(i);
            }
            if let Some(which) = of_plane(unknown.parameter) {
                plane[which] = Some(i);
            }
        }
        Self {
            everywhere: moved
                .iter()
                .map(|(i, up, down, per)| (*i, up.image(), down.image(), *per))
                .collect(),
            local,
            plane,
            step,
        }
    }

    /// Residual, and the entries of the design's row.
    fn row(&self, image: &Image<'_>, p: &Pixel, row: &mut Vec<(usize, f64)>) -> f64 {
        row.clear();
        let (z, seen) = image.at(p.x, p.y);
        for (which, value) in [1.0, p.x, p.y].into_iter().enumerate() {
            if let Some(i) = self.plane[which] {
                row.push((i, value));
            }
        }
        if let Seen::Feature(k) = seen {
            for (i, up, down, per) in &self.everywhere {
                let slope = (up.above(p.x, p.y).0 - down.above(p.x, p.y).0) * per;
                if slope != 0.0 {
                    row.push((*i, slope));
                }
            }
            if let Some([x, y, top]) = self.local.get(k) {
                let h = self.step;
                if let Some(i) = x {
                    let slope = image.bump(k, p.x - h, p.y) - image.bump(k, p.x + h, p.y);
                    row.push((*i, slope / (2.0 * h)));
                }
                if let Some(i) = y {
                    let slope = image.bump(k, p.x, p.y - h) - image.bump(k, p.x, p.y + h);
                    row.push((*i, slope / (2.0 * h)));
                }
                if let Some(i) = top {
                    row.push((*i, 1.0));
                }
            }
        }
        p.z - z
    }
}

/// Huber's bounded square over the variance, and the weight it stands for.
fn bounded(residual: f64, sd: f64) -> (f64, f64) {
    let t = residual.abs() / sd;
    if t <= HUBER {
        (t * t, 1.0)
    } else {
        (HUBER * (2.0 * t - HUBER), HUBER / t)
    }
}

fn sums(state: &State, unknowns: &[Unknown], pixels: &[Pixel], sd: f64, step: f64) -> Sums {
    let n = unknowns.len();
    let moved = moved(state, unknowns);
    let image = state.image();
    let derivatives = Derivatives::new(state, unknowns, &moved, step);
    let parts: Vec<Sums> = pixels
        .par_chunks(pixels.len().div_ceil(PARTS).max(1))
        .map(|part| {
            let mut sums = Sums {
                normal: DMatrix::zeros(n, n),
                right: DVector::zeros(n),
                cost: 0.0,
            };
            let mut row = Vec::with_capacity(n);
            for p in part {
                let residual = derivatives.row(&image, p, &mut row);
                let (cost, weight) = bounded(residual, sd);
                sums.cost += cost;
                let weight = weight / (sd * sd);
                for &(i, a) in &row {
                    sums.right[i] += weight * a * residual;
                    for &(j, b) in &row {
                        sums.normal[(i, j)] += weight * a * b;
                    }
                }
            }
            sums
        })
        .collect();
    let mut all = Sums {
        normal: DMatrix::zeros(n, n),
        right: DVector::zeros(n),
        cost: 0.0,
    };
    for part in parts {
        all.normal += part.normal;
        all.right += part.right;
        all.cost += part.cost;
    }
    for (i, unknown) in unknowns.iter().enumerate() {
        let [value, u] = unknown.observed;
        let off = value - state.get(unknown.parameter);
        all.normal[(i, i)] += 1.0 / (u * u);
        all.right[i] += off / (u * u);
    }
    all.cost += observed_cost(state, unknowns);
    all
}

fn observed_cost(state: &State, unknowns: &[Unknown]) -> f64 {
    let off = |u: &Unknown| (u.observed[0] - state.get(u.parameter)) / u.observed[1];
    unknowns.iter().map(|u| off(u).powi(2)).sum()
}

/// Sum of the bounded squares of all residuals over the variance.
pub(super) fn cost(state: &State, pixels: &[Pixel], sd: f64) -> f64 {
    let image = state.image();
    let parts: Vec<f64> = pixels
        .par_chunks(pixels.len().div_ceil(PARTS).max(1))
        .map(|part| {
            part.iter()
                .map(|p| bounded(p.z - image.at(p.x, p.y).0, sd).0)
                .sum()
        })
        .collect();
    parts.iter().sum()
}

/// Standard deviation of the residuals, those beyond [`HUBER`] times `sd` counted as that.
fn spread(state: &State, pixels: &[Pixel], sd: f64) -> f64 {
    let image = state.image();
    let sum: f64 = pixels
        .iter()
        .map(|p| (p.z - image.at(p.x, p.y).0).abs().min(HUBER * sd).powi(2))
        .sum();
    (sum / pixels.len().max(1) as f64).sqrt().max(LEAST_SD)
}

/// Fits `unknowns` from `state` on; `step` is a short length for derivatives, nm.
///
/// Errors: only when cancelled. Where it does not settle, `settled` is false.
pub(super) fn fit(
    mut state: State,
    unknowns: Vec<Unknown>,
    pixels: &[Pixel],
    step: f64,
    progress: &Progress,
) -> Result<Fit> {
    let mut sd = spread(&state, pixels, f64::INFINITY);
    let mut settled = false;
    for round in 0..8 {
        progress.report(round as f32 / 8.0);
        settled = descend(&mut state, &unknowns, pixels, sd, step, progress)?;
        let next = spread(&state, pixels, if round == 0 { f64::INFINITY } else { sd });
        let same = (next - sd).abs() < 0.01 * sd;
        sd = next;
        if same && round > 1 {
            break;
        }
    }
    let sums = sums(&state, &unknowns, pixels, sd, step);
    let covariance = covariance(&sums.normal);
    Ok(Fit {
        state,
        unknowns,
        covariance,
        sd,
        settled,
    })
}

fn covariance(normal: &DMatrix<f64>) -> DMatrix<f64> {
    let n = normal.nrows();
    let scale = DVector::from_fn(n, |i, _| 1.0 / normal[(i, i)].sqrt());
    let scaled = DMatrix::from_fn(n, n, |i, j| normal[(i, j)] * scale[i] * scale[j]);
    let inverse = match scaled.clone().cholesky() {
        Some(factor) => factor.inverse(),
        None => scaled
            .pseudo_inverse(1e-12)
            .unwrap_or_else(|_| DMatrix::identity(n, n)),
    };
    DMatrix::from_fn(n, n, |i, j| inverse[(i, j)] * scale[i] * scale[j])
}

fn descend(
    state: &mut State,
    unknowns: &[Unknown],
    pixels: &[Pixel],
    sd: f64,
    step: f64,
    progress: &Progress,
) -> Result<bool> {
    let n = unknowns.len();
    let mut damping = 1e-3;
    let mut now = sums(state, unknowns, pixels, sd, step);
    for _ in 0..40 {
        progress.check()?;
        let scale = DVector::from_fn(n, |i, _| 1.0 / now.normal[(i, i)].sqrt());
        // What is pushed against its bound stays there.
        let held: Vec<bool> = (0..n)
            .map(|i| {
                let (here, [low, high]) = (state.get(unknowns[i].parameter), unknowns[i].within);
                here <= low && now.right[i] < 0.0 || here >= high && now.right[i] > 0.0
            })
            .collect();
        let scaled = DMatrix::from_fn(n, n, |i, j| match i == j {
            true => 1.0 + damping,
            false if held[i] || held[j] => 0.0,
            false => now.normal[(i, j)] * scale[i] * scale[j],
        });
        let Some(factor) = scaled.cholesky() else {
            damping *= 10.0;
            continue;
        };
        let mut change = factor.solve(&now.right.component_mul(&scale));
        for (change, _) in change.iter_mut().zip(&held).filter(|(_, h)| **h) {
            *change = 0.0;
        }
        let mut tried = state.clone();
        for (i, unknown) in unknowns.iter().enumerate() {
            let value = tried.get(unknown.parameter) + change[i] * scale[i];
            let [low, high] = unknown.within;
            tried.set(unknown.parameter, value.clamp(low, high));
        }
        let there = cost(&tried, pixels, sd) + observed_cost(&tried, unknowns);
        if there <= now.cost {
            let gain = now.cost - there;
            *state = tried;
            now = sums(state, unknowns, pixels, sd, step);
            damping = (damping / 5.0).max(1e-9);
            // The change is in standard uncertainties, correlations apart.
            if change.amax() < 1e-3 || gain < 1e-7 * (1.0 + there) && change.amax() < 0.05 {
                return Ok(true);
            }
        } else {
            damping *= 6.0;
            if damping > 1e8 {
                return Ok(true);
            }
        }
    }
    Ok(false)
}

impl Fit {
    /// Widens the covariance where residuals hang together within `groups` of pixels (the group
    /// of each by number): the variance of each unknown becomes the largest of that for white
    /// noise and those from the groups' sums of scores (White 1980, Liang and Zeger 1986; from
    /// memory). Correlations stay as they are. Radius and half-angles are not known
    /// better than `closest`, nm and degrees.
    pub fn widen(
        &mut self,
        pixels: &[Pixel],
        groupings: &[Vec<usize>],
        step: f64,
        closest: [f64; 2],
    ) {
        let n = self.unknowns.len();
        let moved = moved(&self.state, &self.unknowns);
        let image = self.state.image();
        let derivatives = Derivatives::new(&self.state, &self.unknowns, &moved, step);
        let mut scores: Vec<Vec<DVector<f64>>> = groupings
            .iter()
            .map(|g| vec![DVector::zeros(n); g.iter().max().map_or(0, |m| m + 1)])
            .collect();
        let mut used: Vec<Vec<bool>> = scores.iter().map(|s| vec![false; s.len()]).collect();
        let mut row = Vec::with_capacity(n);
        let per = 1.0 / (self.sd * self.sd);
        for (at, p) in pixels.iter().enumerate() {
            let residual = derivatives.row(&image, p, &mut row);
            let weight = bounded(residual, self.sd).1 * per;
            for ((grouping, scores), used) in groupings.iter().zip(&mut scores).zip(&mut used) {
                let group = grouping[at];
                used[group] = true;
                for &(i, a) in &row {
                    scores[group][i] += weight * a * residual;
                }
            }
        }
        let mut factor = DVector::from_element(n, 1.0f64);
        for (scores, used) in scores.iter().zip(&used) {
            let groups = used.iter().filter(|u| **u).count() as f64;
            if groups < 5.0 {
                continue;
            }
            let mut middle = DMatrix::zeros(n, n);
            for score in scores {
                middle += score * score.transpose();
            }
            middle *= groups / (groups - 1.0);
            for (i, unknown) in self.unknowns.iter().enumerate() {
                middle[(i, i)] += 1.0 / unknown.observed[1].powi(2);
            }
            let wide = &self.covariance * middle * &self.covariance;
            for i in 0..n {
                let white = self.covariance[(i, i)].max(f64::MIN_POSITIVE);
                factor[i] = factor[i].max((wide[(i, i)] / white).sqrt());
            }
        }
        let wide = DMatrix::from_fn(n, n, |i, j| self.covariance[(i, j)] * factor[i] * factor[j]);
        self.covariance = wide;
        for (i, unknown) in self.unknowns.iter().enumerate() {
            match unknown.parameter {
                Parameter::Radius => self.covariance[(i, i)] += closest[0] * closest[0],
                Parameter::HalfAngle(_) => self.covariance[(i, i)] += closest[1] * closest[1],
                _ => {}
            }
        }
    }
}
