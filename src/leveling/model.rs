//! A plane with one offset per row, the pixels near it, and its least-squares update.

use ndarray::parallel::prelude::*;
use ndarray::{Array2, Axis, Zip};

/// Half-widths of the neighbourhood that must be mostly base for a pixel to be trusted.
const CORE_REACH: [usize; 3] = [4, 2, 1];

/// A plane over pixel indices counted from the middle of the map.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub(super) struct Plane {
    /// Height at the middle of the map, nm.
    pub at_centre: f64,
    /// Slope, nm per column.
    pub per_column: f64,
    /// Slope, nm per row.
    pub per_row: f64,
}

impl Plane {
    /// The height at `u` columns and `v` rows from the middle.
    pub(super) fn at(&self, u: f64, v: f64) -> f64 {
        self.at_centre + self.per_column * u + self.per_row * v
    }

    /// The least-squares plane from the centroid, the second moments uu, uv, vv of the positions
    /// about it, and theirs with the height, uz, vz. A direction in which the points do not
    /// spread gets no slope.
    pub(super) fn from_moments(
        [u, v, z]: [f64; 3],
        [uu, uv, vv]: [f64; 3],
        [uz, vz]: [f64; 2],
    ) -> Self {
        let determinant = uu * vv - uv * uv;
        let (per_column, per_row) = if determinant > 1e-9 * uu * vv && determinant > 0.0 {
            (
                (uz * vv - vz * uv) / determinant,
                (vz * uu - uz * uv) / determinant,
            )
        } else if uu >= vv && uu > 0.0 {
            (uz / uu, 0.0)
        } else if vv > 0.0 {
            (0.0, vz / vv)
        } else {
            (0.0, 0.0)
        };
        Self {
            at_centre: z - per_column * u - per_row * v,
            per_column,
            per_row,
        }
    }

    pub(super) fn plus(self, other: Self) -> Self {
        Self {
            at_centre: self.at_centre + other.at_centre,
            per_column: self.per_column + other.per_column,
            per_row: self.per_row + other.per_row,
        }
    }
}

/// The index `i` of `count` counted from the middle.
pub(super) fn from_middle(i: usize, count: usize) -> f64 {
    i as f64 - 0.5 * (count as f64 - 1.0)
}

/// What is taken off the heights: a plane and one offset per row.
#[derive(Debug, Clone)]
pub(super) struct Model {
    pub plane: Plane,
    /// Offset of each row beyond the plane, nm.
    pub offsets: Vec<f64>,
}

impl Model {
    /// The model that takes nothing off a map of `rows` rows.
    pub(super) fn flat(rows: usize) -> Self {
        Self {
            plane: Plane::default(),
            offsets: vec![0.0; rows],
        }
    }

    /// The model's height in row `r` of a `rows` x `columns` map at column 0, and per column.
    fn row(&self, r: usize, (rows, columns): (usize, usize)) -> (f64, f64) {
        let start = self.plane.at(from_middle(0, columns), from_middle(r, rows));
        (start + self.offsets[r], self.plane.per_column)
    }

    /// Height of pixel `[r, c]` above the model.
    pub(super) fn residual(&self, z: &Array2<f64>, r: usize, c: usize) -> f64 {
        let (start, slope) = self.row(r, z.dim());
        z[[r, c]] - start - slope * c as f64
    }

    /// All heights above the model.
    pub(super) fn residuals(&self, z: &Array2<f64>) -> Array2<f32> {
        let mut out = Array2::zeros(z.dim());
        Zip::indexed(out.axis_iter_mut(Axis(0)))
            .and(z.axis_iter(Axis(0)))
            .par_for_each(|r, mut out, row| {
                let (start, slope) = self.row(r, z.dim());
                for (c, (o, z)) in out.iter_mut().zip(row).enumerate() {
                    *o = (z - start - slope * c as f64) as f32;
                }
            });
        out
    }

    /// The allowed pixels within `half_band` of the model.
    pub(super) fn near(
        &self,
        z: &Array2<f64>,
        half_band: f64,
        allowed: Option<&Array2<bool>>,
    ) -> Array2<bool> {
        let mut mask = Array2::from_elem(z.dim(), false);
        Zip::indexed(mask.axis_iter_mut(Axis(0)))
            .and(z.axis_iter(Axis(0)))
            .par_for_each(|r, mut mask, row| {
                let (start, slope) = self.row(r, z.dim());
                for (c, (m, z)) in mask.iter_mut().zip(row).enumerate() {
                    // A void compares false.
                    *m = (z - start - slope * c as f64).abs() <= half_band;
                }
            });
        if let Some(allowed) = allowed {
            Zip::from(&mut mask)
                .and(allowed)
                .par_for_each(|m, a| *m &= *a);
        }
        mask
    }
}

/// Weight of a pixel that lies the share `t` of the half band off the model: 1 in its inner half,
/// falling to 0 at five sixths, so that no pixel comes or goes at once and a refit settles
/// instead of hopping, and so that a level five noise widths away does not reach in.
pub(super) fn weight(t: f64) -> f64 {
    let outer = (3.0 * t.abs() - 1.5).clamp(0.0, 1.0);
    let kept = 1.0 - outer * outer;
    kept * kept
}

/// Weighted sums over the marked pixels of one row: `u` counts columns from the middle, `z` is the height
/// above the model.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct RowMoments {
    pub n: f64,
    pub u: f64,
    pub uu: f64,
    pub z: f64,
    pub uz: f64,
    pub zz: f64,
}

/// The sums of every row, in order: rows are summed apart, so any number of threads gives the
/// same bits. An infinite `half_band` weighs all alike.
pub(super) fn moments(
    z: &Array2<f64>,
    model: &Model,
    mask: &Array2<bool>,
    half_band: f64,
) -> Vec<RowMoments> {
    let columns = z.ncols();
    let narrow = 1.0 / half_band;
    (0..z.nrows())
        .into_par_iter()
        .map(|r| {
            let (start, slope) = model.row(r, z.dim());
            let mut m = RowMoments::default();
            for (c, (z, marked)) in z.row(r).iter().zip(mask.row(r)).enumerate() {
                // A marked pixel is never void.
                let h = if *marked {
                    z - start - slope * c as f64
                } else {
                    0.0
                };
                let w = if *marked { weight(h * narrow) } else { 0.0 };
                let u = from_middle(c, columns);
                m.n += w;
                m.u += w * u;
                m.uu += w * u * u;
                m.z += w * h;
                m.uz += w * u * h;
                m.zz += w * h * h;
            }
            m
        })
        .collect()
}

/// Correlation of marked pixels that are neighbours along a row, about the mean of their row, 0
/// to 0.95; 0 where there are none.
pub(super) fn neighbour_correlation(z: &Array2<f64>, model: &Model, mask: &Array2<bool>) -> f64 {
    let rows: Vec<[f64; 4]> = (0..z.nrows())
        .into_par_iter()
        .map(|r| {
            let marked = || (0..z.ncols()).filter(|&c| mask[[r, c]]);
            let n = marked().count().max(1) as f64;
            let mean = marked().map(|c| model.residual(z, r, c)).sum::<f64>() / n;
            let mut sums = [0.0; 4];
            let mut before: Option<(usize, f64)> = None;
            for c in marked() {
                let h = model.residual(z, r, c) - mean;
                sums[0] += h * h;
                sums[1] += 1.0;
                if let Some((_, b)) = before.filter(|b| b.0 + 1 == c) {
                    sums[2] += b * h;
                    sums[3] += 1.0;
                }
                before = Some((c, h));
            }
            sums
        })
        .collect();
    let [squares, n, products, pairs] = rows
        .iter()
        .fold([0.0; 4], |s, r| std::array::from_fn(|k| s[k] + r[k]));
    if squares > 0.0 && pairs > 0.0 {
        (products / pairs / (squares / n)).clamp(0.0, 0.95)
    } else {
        0.0
    }
}

/// The least-squares plane through the marked pixels, as a correction to the model.
pub(super) fn plane_correction(moments: &[RowMoments]) -> Plane {
    let rows = moments.len();
    let total = |f: &dyn Fn(f64, &RowMoments) -> f64| -> f64 {
        moments
            .iter()
            .enumerate()
            .map(|(r, m)| f(from_middle(r, rows), m))
            .sum()
    };
    let n = total(&|_, m| m.n);
    if n == 0.0 {
        return Plane::default();
    }
    let mean = |sum: f64| sum / n;
    let (u, v, z) = (
        mean(total(&|_, m| m.u)),
        mean(total(&|v, m| v * m.n)),
        mean(total(&|_, m| m.z)),
    );
    // Second moments about the centroid, so that nothing large cancels.
    let cuu = total(&|_, m| m.uu - 2.0 * u * m.u + u * u * m.n);
    let cvv = total(&|w, m| (w - v).powi(2) * m.n);
    let cuv = total(&|w, m| (w - v) * (m.u - u * m.n));
    let cuz = total(&|_, m| m.uz - u * m.z - z * (m.u - u * m.n));
    let cvz = total(&|w, m| (w - v) * (m.z - z * m.n));
    Plane::from_moments([u, v, z], [cuu, cuv, cvv], [cuz, cvz])
}

/// The marked pixels whose neighbourhood is mostly marked: without the feet of features, which
/// lie a little above the base and would lift it. Falls back to a smaller neighbourhood, at last
/// to `mask` itself, where too little would be left. Void and disallowed pixels do not count.
pub(super) fn core(
    z: &Array2<f64>,
    mask: &Array2<bool>,
    allowed: Option<&Array2<bool>>,
    reach: usize,
) -> Array2<bool> {
    if reach == 0 {
        return mask.clone();
    }
    let (rows, columns) = mask.dim();
    // Marked pixels count in the low byte, foreign ones in the high byte; 81 at most of each.
    let mut along = Array2::<u16>::zeros((rows, columns));
    Zip::indexed(along.axis_iter_mut(Axis(0))).par_for_each(|r, mut out| {
        let kind: Vec<u16> = (0..columns)
            .map(|c| match mask[[r, c]] {
                true => 1,
                false if z[[r, c]].is_nan() => 0,
                false if allowed.is_some_and(|a| !a[[r, c]]) => 0,
                false => 1 << 8,
            })
            .collect();
        let mut sum: u16 = kind.iter().take(reach).sum();
        for c in 0..columns {
            if c + reach < columns {
                sum += kind[c + reach];
            }
            out[c] = sum;
            if c >= reach {
                sum -= kind[c - reach];
            }
        }
    });
    let mut kept = mask.clone();
    Zip::indexed(kept.axis_iter_mut(Axis(0))).par_for_each(|r, mut kept| {
        let mut sum = vec![0u16; columns];
        for near in r.saturating_sub(reach)..(r + reach + 1).min(rows) {
            for (s, a) in sum.iter_mut().zip(along.row(near)) {
                *s += a;
            }
        }
        for (k, s) in kept.iter_mut().zip(sum) {
            *k &= 3 * (s >> 8) <= (s & 0xff);
        }
    });
    kept
}

/// The widest neighbourhood of `core` that keeps a quarter of the marked pixels.
pub(super) fn core_reach(
    z: &Array2<f64>,
    mask: &Array2<bool>,
    allowed: Option<&Array2<bool>>,
) -> usize {
    let marked = count(mask);
    CORE_REACH
        .into_iter()
        .find(|&reach| 4 * count(&core(z, mask, allowed, reach)) >= marked)
        .unwrap_or(0)
}

/// Number of marked pixels.
pub(super) fn count(mask: &Array2<bool>) -> usize {
    mask.iter().filter(|m| **m).count()
}
