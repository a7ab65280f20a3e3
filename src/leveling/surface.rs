//! Least-squares polynomial surfaces.

use super::least_squares::Accumulator;
use crate::error::Result;
use crate::progress::Progress;
use ndarray::parallel::prelude::*;
use ndarray::{Array2, Axis, Zip};

/// Rows that are fitted in one go; fixed, so that the bits do not depend on the threads.
const STRIPE: usize = 32;

/// A polynomial surface of a total order in centred and scaled pixel coordinates.
#[derive(Debug, Clone)]
pub(super) struct Surface {
    /// Powers of x and y of each term.
    terms: Vec<(usize, usize)>,
    coefficients: Vec<f64>,
    x: Scale,
    y: Scale,
}

#[derive(Debug, Clone, Copy)]
struct Scale {
    middle: f64,
    half: f64,
}

impl Scale {
    fn of(indices: impl Iterator<Item = usize>) -> Self {
        let (low, high) = indices.fold((usize::MAX, 0), |(l, h), i| (l.min(i), h.max(i)));
        Self {
            middle: 0.5 * (low as f64 + high as f64),
            half: (0.5 * (high as f64 - low as f64)).max(0.5),
        }
    }

    fn at(self, index: f64) -> f64 {
        (index - self.middle) / self.half
    }
}

impl Surface {
    /// Fits a surface of total `order` to the marked heights. Along a direction in which the map
    /// has n pixels no power beyond n - 1 is used, so that a profile is fitted as one.
    ///
    /// Errors of kind `Data` when the marked pixels do not determine it.
    pub(super) fn fit(
        z: &Array2<f64>,
        marked: &Array2<bool>,
        order: usize,
        progress: &Progress,
    ) -> Result<Self> {
        let (rows, columns) = z.dim();
        let any = |lane: ndarray::ArrayView1<'_, bool>| lane.iter().any(|m| *m);
        let x = Scale::of((0..columns).filter(|&c| any(marked.column(c))));
        let y = Scale::of((0..rows).filter(|&r| any(marked.row(r))));
        let terms: Vec<(usize, usize)> = (0..=order)
            .flat_map(|total| (0..=total).map(move |j| (total - j, j)))
            .filter(|&(i, j)| i < columns && j < rows)
            .collect();
        let along = (order + 1).min(columns);
        let stripes: Vec<Accumulator> = (0..rows.div_ceil(STRIPE))
            .into_par_iter()
            .map(|stripe| {
                let mut problem = Accumulator::new(terms.len());
                let mut design = vec![0.0; terms.len()];
                for r in stripe * STRIPE..((stripe + 1) * STRIPE).min(rows) {
                    if progress.is_cancelled() {
                        break;
                    }
                    // Along a row y is one number: the row's pixels are reduced in the powers of
                    // x alone, and only what is left enters the larger problem.
                    let mut row = Accumulator::new(along);
                    for c in (0..columns).filter(|&c| marked[[r, c]]) {
                        row.add(&powers(x.at(c as f64))[..along], z[[r, c]], 1.0);
                    }
                    let reduced = row.reduced();
                    let py = powers(y.at(r as f64));
                    for k in 0..=along {
                        for (d, &(i, j)) in design.iter_mut().zip(&terms) {
                            *d = reduced[(k, i)] * py[j];
                        }
                        problem.add(&design, reduced[(k, along)], 1.0);
                    }
                }
                problem
            })
            .collect();
        progress.check()?;
        let mut whole = Accumulator::new(terms.len());
        for stripe in stripes {
            whole.merge(stripe);
        }
        Ok(Self {
            coefficients: whole.solve()?.coefficients,
            terms,
            x,
            y,
        })
    }

    /// Coefficients of the powers of the scaled x along row `r`.
    fn along(&self, r: usize) -> [f64; 6] {
        let py = powers(self.y.at(r as f64));
        let mut along = [0.0; 6];
        for (c, &(i, j)) in self.coefficients.iter().zip(&self.terms) {
            along[i] += c * py[j];
        }
        along
    }

    /// `z` above the surface.
    pub(super) fn residuals(&self, z: &Array2<f64>) -> Array2<f64> {
        let mut out = z.clone();
        Zip::indexed(out.axis_iter_mut(Axis(0))).par_for_each(|r, mut row| {
            let along = self.along(r);
            for (c, z) in row.iter_mut().enumerate() {
                let u = self.x.at(c as f64);
                *z -= along.iter().rev().fold(0.0, |sum, a| sum * u + a);
            }
        });
        out
    }

    /// Slope per column and per row at the position in pixels.
    pub(super) fn gradient(&self, row: f64, column: f64) -> [f64; 2] {
        let (px, py) = (powers(self.x.at(column)), powers(self.y.at(row)));
        let slope = |n: usize, p: &[f64; 6]| {
            if n == 0 { 0.0 } else { n as f64 * p[n - 1] }
        };
        let sum = |f: &dyn Fn(usize, usize) -> f64| -> f64 {
            self.coefficients
                .iter()
                .zip(&self.terms)
                .map(|(c, &(i, j))| c * f(i, j))
                .sum()
        };
        [
            sum(&|i, j| slope(i, &px) * py[j]) / self.x.half,
            sum(&|i, j| px[i] * slope(j, &py)) / self.y.half,
        ]
    }
}

fn powers(u: f64) -> [f64; 6] {
    let mut p = [1.0; 6];
    for k in 1..6 {
        p[k] = p[k - 1] * u;
    }
    p
}
