//! Which surface pixels lean on what nobody saw.

use super::dilation::extreme;
use super::part::Engine;
use super::tip::Order;
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2, Axis};
use rayon::prelude::*;

/// The marks; see the public function. The deepest unseen tip cell decides: rounded subtraction
/// is monotonic, so the highest `p` over the unseen pixels gives the lowest constraint.
pub(super) fn edge_leaning(
    engine: Engine,
    scan: ArrayView2<f32>,
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<bool>> {
    progress.check()?;
    if surface.is_empty() {
        return Ok(Array2::from_elem(surface.dim(), false));
    }
    let lowest = scan
        .axis_iter(Axis(0))
        .into_par_iter()
        .map(|row| {
            let seen = row.iter().copied().filter(|z| z.is_finite());
            progress.check()?;
            Ok((
                seen.fold(f32::INFINITY, f32::min),
                row.iter().any(|z| !z.is_finite()),
            ))
        })
        .try_reduce(
            || (f32::INFINITY, false),
            |a, b| Ok((a.0.min(b.0), a.1 || b.1)),
        );
    let (lowest, voids) = lowest?;
    let over_voids = if voids {
        // The erosion of zeros is minus the highest cell that meets one.
        let mut unseen = Array2::zeros(scan.dim());
        ndarray::Zip::from(&mut unseen)
            .and(scan)
            .par_for_each(|to: &mut f32, z| *to = if z.is_finite() { f32::NAN } else { 0.0 });
        let part = progress.part(0.0, 0.9);
        Some(extreme(engine, unseen.view(), tip, Order::Min, &part)?)
    } else {
        None
    };
    let across_rows = Overhang::new(tip, Axis(0), scan.nrows());
    let across_cols = Overhang::new(tip, Axis(1), scan.ncols());
    let mut leaning = Array2::from_elem(surface.dim(), false);
    leaning
        .axis_iter_mut(Axis(0))
        .into_par_iter()
        .enumerate()
        .try_for_each(|(r, mut row)| {
            let over_row = across_rows.at(r);
            for (c, to) in row.iter_mut().enumerate() {
                let mut p = over_row.max(across_cols.at(c));
                if let Some(over_voids) = &over_voids {
                    p = p.max(-over_voids[(r, c)]);
                }
                *to = p > f32::NEG_INFINITY && lowest - p < surface[(r, c)];
            }
            progress.check()
        })?;
    progress.report(1.0);
    Ok(leaning)
}

/// The highest tip cell that hangs over the edge of the map, by position along one axis.
struct Overhang {
    /// `before[k]`: the highest of the cells `k` or more after the apex, which meet scan pixels
    /// before the map's first; `after[k]`: the same of the cells before the apex.
    before: Vec<f32>,
    after: Vec<f32>,
    length: usize,
}

impl Overhang {
    fn new(tip: ArrayView2<f32>, axis: Axis, length: usize) -> Self {
        let lines: Vec<f32> = tip
            .axis_iter(axis)
            .map(|line| {
                let inside = line.iter().copied().filter(|p| p.is_finite());
                inside.fold(f32::NEG_INFINITY, f32::max)
            })
            .collect();
        let apex = lines.len() / 2;
        let running = |lines: &mut dyn Iterator<Item = f32>| {
            let mut highest = f32::NEG_INFINITY;
            let mut all: Vec<f32> = lines
                .map(|p| {
                    highest = highest.max(p);
                    highest
                })
                .collect();
            all.reverse();
            all
        };
        Self {
            before: running(&mut lines[apex.min(lines.len())..].iter().rev().copied()),
            after: running(&mut lines[..(apex + 1).min(lines.len())].iter().copied()),
            length,
        }
    }

    fn at(&self, position: usize) -> f32 {
        let get = |cells: &[f32], k| cells.get(k).copied().unwrap_or(f32::NEG_INFINITY);
        get(&self.before, position + 1).max(get(&self.after, self.length - position))
    }
}
