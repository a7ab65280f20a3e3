//! Row offsets: how rows differ from their neighbours, and what of it stands out.

use super::RowJump;
use super::base::median;
use super::model::{RowMoments, from_middle};
use ndarray::Array2;
use ndarray::parallel::prelude::*;

/// A row needs at least this many base pixels for an offset of its own.
pub(super) fn fewest_pixels(columns: usize) -> usize {
    (columns / 50).max(8)
}

/// Maps narrower than this are not row-aligned: an offset per row would eat the data.
const NARROWEST: usize = 16;

/// How far beyond the usual spread a jump must be.
const STANDS_OUT: f64 = 6.0;

/// Columns that two rows are compared on.
const COMPARED: usize = 256;

/// One row against the row before it.
#[derive(Debug, Clone, Copy)]
struct Step {
    /// Median height difference, nm.
    shift: f64,
    /// Spread of the differences about it, nm.
    spread: f64,
    /// Share of the columns that moved along with the median.
    moved: f64,
    /// Share of the columns that stayed.
    stayed: f64,
    /// Height variation along the row beyond a straight line, rms nm.
    relief: f64,
}

/// Whole rows against their neighbours, whatever is base or feature.
#[derive(Debug, Clone)]
pub(super) struct Shifts {
    /// Usual size of a row's own offset, nm: robust, so that features do not count.
    pub scatter: f64,
    /// Rows shifted alone, back to normal in the next: a scanner jump for certain.
    pub single: Vec<RowJump>,
    /// Rows from which on everything is shifted, relief and all: a scanner jump, or a step of the
    /// surface along the fast axis that all features follow.
    pub lasting: Vec<RowJump>,
}

/// Compares each row with the row before it.
pub(super) fn shifts(z: &Array2<f64>, noise: f64) -> Shifts {
    let rows = z.nrows();
    let steps: Vec<Option<Step>> = (0..rows)
        .into_par_iter()
        .map(|r| (r > 0).then(|| step(z, r)).flatten())
        .collect();
    let mut all: Vec<f64> = steps.iter().flatten().map(|s| s.shift).collect();
    let usual = median(&mut all);
    let mut off: Vec<f64> = all.iter().map(|s| (s - usual).abs()).collect();
    off.sort_unstable_by(f64::total_cmp);
    let scatter = 1.4826 * off.get(off.len() / 2).copied().unwrap_or(0.0);
    let mut spreads: Vec<f64> = steps.iter().flatten().map(|s| s.spread).collect();
    let spread = median(&mut spreads).max(std::f64::consts::SQRT_2 * noise);
    // The ninth decile keeps the tail of rows that are noisier than most from passing for jumps.
    let decile = off.get(off.len() * 9 / 10).copied().unwrap_or(0.0);
    let threshold = (8.0 * scatter).max(4.0 * spread).max(4.0 * decile);
    let excess = |r: usize| steps.get(r).copied().flatten().map(|s| s.shift - usual);
    let mut found = Shifts {
        scatter: scatter / std::f64::consts::SQRT_2,
        single: Vec::new(),
        lasting: Vec::new(),
    };
    let mut r = 1;
    while r < rows {
        let here = steps[r].filter(|s| (s.shift - usual).abs() > threshold && s.is_whole());
        if let (Some(here), true) = (here, z.ncols() >= NARROWEST) {
            let jump = RowJump {
                row: r,
                jump_nm: here.shift - usual,
            };
            let returns = excess(r + 1)
                .is_some_and(|back| (back + jump.jump_nm).abs() <= 0.25 * jump.jump_nm.abs());
            if returns {
                found.single.push(jump);
                r += 1;
            } else if here.relief > 4.0 * spread {
                found.lasting.push(jump);
            }
        }
        r += 1;
    }
    found
}

impl Shifts {
    /// All shifted rows in order.
    pub(super) fn all(&self) -> Vec<RowJump> {
        let mut all = [self.single.as_slice(), &self.lasting].concat();
        all.sort_by_key(|j| j.row);
        all
    }
}

impl Step {
    fn is_whole(&self) -> bool {
        self.moved >= 0.8 && self.stayed <= 0.02
    }
}

fn step(z: &Array2<f64>, r: usize) -> Option<Step> {
    let stride = z.ncols().div_ceil(COMPARED);
    let pairs = || {
        // Another phase in each row, so that no grating falls in step with the stride.
        ((r * 7) % stride..z.ncols())
            .step_by(stride)
            .map(|c| (c as f64, z[[r, c]], z[[r, c]] - z[[r - 1, c]]))
            .filter(|p| !p.2.is_nan())
    };
    let mut differences: Vec<f64> = pairs().map(|p| p.2).collect();
    let n = differences.len();
    if n < 3 {
        return None;
    }
    let shift = median(&mut differences);
    let mut off: Vec<f64> = differences.iter().map(|d| (d - shift).abs()).collect();
    let spread = 1.4826 * median(&mut off);
    let near = |to: f64, reach: f64| {
        let close = differences.iter().filter(|d| (*d - to).abs() <= reach);
        close.count() as f64 / n as f64
    };
    let apart = 0.3 * shift.abs();
    let count = n as f64;
    let (x, h) = pairs().fold((0.0, 0.0), |s, p| (s.0 + p.0 / count, s.1 + p.1 / count));
    let (mut xx, mut xh, mut hh) = (0.0, 0.0, 0.0);
    for (px, ph, _) in pairs() {
        xx += (px - x).powi(2) / count;
        xh += (px - x) * (ph - h) / count;
        hh += (ph - h).powi(2) / count;
    }
    let straight = if xx > 0.0 { xh * xh / xx } else { 0.0 };
    Some(Step {
        shift,
        spread,
        moved: near(shift, apart.max(3.0 * spread)),
        stayed: near(0.0, apart),
        relief: (hh - straight).max(0.0).sqrt(),
    })
}

/// The offset of each row's base pixels from the model, with its standard error.
#[derive(Debug, Clone)]
pub(super) struct Offsets {
    /// Nm; `None` where a row has too few base pixels.
    pub of_row: Vec<Option<f64>>,
    /// Typical standard error of an offset, nm.
    pub error: f64,
}

/// The offsets from the sums of the base pixels above the model; `together` is the correlation
/// of neighbours along a row, which leaves fewer independent values (AR(1) model).
pub(super) fn offsets(moments: &[RowMoments], columns: usize, together: f64) -> Offsets {
    let fewest = fewest_pixels(columns) as f64;
    let usable = |m: &&RowMoments| columns >= NARROWEST && m.n >= fewest;
    let of_row = moments
        .iter()
        .map(|m| Some(m).filter(usable).map(|m| m.z / m.n))
        .collect();
    let (mut squares, mut degrees) = (0.0, 0.0);
    let mut pixels: Vec<f64> = Vec::new();
    for m in moments.iter().filter(usable) {
        let mean = m.z / m.n;
        squares += m.zz - m.n * mean * mean;
        degrees += m.n - 1.0;
        pixels.push(m.n);
    }
    let variance = if degrees > 0.0 {
        squares / degrees
    } else {
        0.0
    };
    let n = median(&mut pixels).max(1.0);
    let error = (variance.max(0.0) / n * (1.0 + together) / (1.0 - together)).sqrt();
    Offsets { of_row, error }
}

impl Offsets {
    /// The offsets of the same rows, as they were settled in the end.
    pub(super) fn replace(&mut self, settled: &[f64]) {
        for (o, s) in self.of_row.iter_mut().zip(settled) {
            *o = o.map(|_| *s);
        }
    }

    /// The straight line through the offsets, `(at the middle row, per row)`, by least squares.
    pub(super) fn line(&self) -> (f64, f64) {
        let rows = self.of_row.len();
        let known = || {
            self.of_row
                .iter()
                .enumerate()
                .filter_map(|(r, o)| o.map(|o| (from_middle(r, rows), o)))
        };
        let n = known().count().max(1) as f64;
        let (v, o) = known().fold((0.0, 0.0), |s, k| (s.0 + k.0 / n, s.1 + k.1 / n));
        let vv: f64 = known().map(|k| (k.0 - v).powi(2)).sum();
        let vo: f64 = known().map(|k| (k.0 - v) * (k.1 - o)).sum();
        let per_row = if vv > 0.0 { vo / vv } else { 0.0 };
        (o - per_row * v, per_row)
    }

    /// Adds offsets that were taken off before.
    pub(super) fn add(&mut self, before: &[f64]) {
        for (o, b) in self.of_row.iter_mut().zip(before) {
            *o = o.map(|o| o + b);
        }
    }

    /// How far the offsets scatter from row to row, nm; `None` with fewer than eight rows.
    ///
    /// From `o_r - (o_(r-1) + o_(r+1)) / 2`: what changes slowly, as the feet of features do,
    /// drops out.
    fn roughness(&self) -> Option<f64> {
        let mut second: Vec<f64> = self
            .of_row
            .windows(3)
            .filter_map(|w| Some((w[1]? - 0.5 * (w[0]? + w[2]?)).abs()))
            .collect();
        (second.len() >= 8).then(|| 1.4826 * median(&mut second) / 1.5f64.sqrt())
    }

    /// Running mean of the offsets over a sixteenth of the rows.
    fn smooth(&self) -> Vec<f64> {
        let reach = (self.of_row.len() / 32).max(2);
        (0..self.of_row.len())
            .filter_map(|r| {
                let near =
                    &self.of_row[r.saturating_sub(reach)..(r + reach + 1).min(self.of_row.len())];
                let (sum, n) = near
                    .iter()
                    .flatten()
                    .fold((0.0, 0usize), |(s, n), o| (s + o, n + 1));
                (self.of_row[r].is_some() && n > reach).then(|| sum / n as f64)
            })
            .collect()
    }

    /// Slow drift from the first to the last row beyond the plane, peak to peak, nm; `None` when
    /// fewer than 16 rows, or less than half of them, have base pixels enough.
    pub(super) fn drift(&self) -> Option<f64> {
        let smooth = self.smooth();
        if smooth.len() < 16 || 2 * smooth.len() < self.of_row.len() {
            return None;
        }
        let high = smooth.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        let low = smooth.iter().copied().fold(f64::INFINITY, f64::min);
        Some(high - low)
    }

    /// Whether row offsets as a whole stand out: they scatter twice as far as the noise of their
    /// means would have them, or drift by more than the noise of a pixel.
    pub(super) fn stand_out(&self, noise: f64) -> bool {
        let scatter = self.roughness().is_some_and(|s| s > 2.0 * self.error);
        let drift = self
            .drift()
            .is_some_and(|d| d > (STANDS_OUT * self.error).max(noise));
        // Rounding to f32 scatters too; it is not worth a correction.
        (scatter && self.roughness().is_some_and(|s| s > 0.02 * noise)) || drift
    }

    /// Rows whose offset from the row before stands out from the usual row-to-row change.
    pub(super) fn jumps(&self, noise: f64) -> Vec<RowJump> {
        let change = |r: usize| match (r.checked_sub(1).map(|b| self.of_row[b]), self.of_row[r]) {
            (Some(Some(before)), Some(here)) => Some(here - before),
            _ => None,
        };
        let mut sizes: Vec<f64> = (0..self.of_row.len())
            .filter_map(|r| change(r).map(f64::abs))
            .collect();
        if sizes.len() < 8 {
            return Vec::new();
        }
        let threshold = STANDS_OUT
            * (1.4826 * median(&mut sizes))
                .max(std::f64::consts::SQRT_2 * self.error)
                .max(0.05 * noise);
        let mut jumps = Vec::new();
        let mut r = 1;
        while r < self.of_row.len() {
            if let Some(jump_nm) = change(r).filter(|j| j.abs() > threshold) {
                jumps.push(RowJump { row: r, jump_nm });
                // The way back of a single row is not a jump of its own.
                if change(r + 1 - usize::from(r + 1 == self.of_row.len()))
                    .is_some_and(|back| (back + jump_nm).abs() <= threshold)
                {
                    r += 1;
                }
            }
            r += 1;
        }
        jumps
    }

    /// Offsets of all rows: rows without their own between their neighbours, and which those are.
    pub(super) fn filled(&self) -> (Vec<f64>, Vec<usize>) {
        let known: Vec<(usize, f64)> = self
            .of_row
            .iter()
            .enumerate()
            .filter_map(|(r, o)| o.map(|o| (r, o)))
            .collect();
        let missing: Vec<usize> = (0..self.of_row.len())
            .filter(|&r| self.of_row[r].is_none())
            .collect();
        let at = |r: usize| {
            let after = known.partition_point(|k| k.0 < r);
            match (after.checked_sub(1).map(|i| known[i]), known.get(after)) {
                (_, Some(&(k, o))) if k == r => o,
                (Some((a, oa)), Some(&(b, ob))) => oa + (ob - oa) * (r - a) as f64 / (b - a) as f64,
                (Some((_, o)), None) | (None, Some(&(_, o))) => o,
                (None, None) => 0.0,
            }
        };
        ((0..self.of_row.len()).map(at).collect(), missing)
    }
}

/// Rows as people write them: "3, 7-9 and 12"; long lists end in how many more there are.
pub(super) fn list(rows: &[usize]) -> String {
    let mut runs: Vec<(usize, usize)> = Vec::new();
    for &r in rows {
        match runs.last_mut() {
            Some(run) if run.1 + 1 == r => run.1 = r,
            _ => runs.push((r, r)),
        }
    }
    let shown: Vec<String> = runs
        .iter()
        .take(8)
        .map(|&(a, b)| {
            if a == b {
                a.to_string()
            } else {
                format!("{a}-{b}")
            }
        })
        .collect();
    let rest: usize = runs.iter().skip(8).map(|(a, b)| b - a + 1).sum();
    match rest {
        0 => shown.join(", "),
        _ => format!("{} and {rest} more", shown.join(", ")),
    }
}
