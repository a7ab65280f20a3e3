//! Which surface pixels lean on what nobody saw.

use super::dilation::extreme;
use super::tip::Order;
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2, Axis};
use pulp::Arch;

/// The marks; see the public function. The deepest unseen tip cell decides: rounded subtraction
/// is monotonic, so the highest `p` over the unseen pixels gives the lowest constraint.
pub(super) fn edge_leaning(
    arch: Arch,
    scan: ArrayView2<f32>,
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<bool>> {
    progress.check()?;
    let seen = |z: &&f32| z.is_finite();
    let lowest = scan
        .iter()
        .filter(seen)
        .copied()
        .fold(f32::INFINITY, f32::min);
    let voids = scan.iter().any(|z| !z.is_finite());
    let over_voids = if voids {
        // The erosion of zeros is minus the highest cell that meets one.
        let unseen = scan.mapv(|z| if z.is_finite() { f32::NAN } else { 0.0 });
        Some(extreme(arch, unseen.view(), tip, Order::Min, progress)?)
    } else {
        None
    };
    let across_rows = Overhang::new(tip, Axis(0), scan.nrows());
    let across_cols = Overhang::new(tip, Axis(1), scan.ncols());
    Ok(Array2::from_shape_fn(surface.dim(), |(r, c)| {
        let mut p = across_rows.at(r).max(across_cols.at(c));
        if let Some(over_voids) = &over_voids {
            p = p.max(-over_voids[(r, c)]);
        }
        p > f32::NEG_INFINITY && lowest - p < surface[(r, c)]
    }))
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
