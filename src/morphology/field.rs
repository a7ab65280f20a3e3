//! The height map as the kernels see it: padded, voids at -inf, with tables of local maxima.

use super::tip::Order;
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{ArrayView2, Axis};
use pulp::{Arch, Simd, WithSimd};
use rayon::prelude::*;

/// Rows of an output tile, and the side of a tip block.
pub(super) const BLOCK: usize = 4;
/// Columns that share one entry of the table of local maxima.
pub(super) const TILE: usize = 16;
/// Tip blocks along a side of a tip superblock.
pub(super) const SUPER: usize = 4;
/// Map rows that a tile and a tip block touch together.
pub(super) const WINDOW_ROWS: usize = 2 * BLOCK - 1;
/// Map columns that a tile and a tip block touch together.
const WINDOW_COLUMNS: usize = TILE + BLOCK - 1;
/// Map row 0 lies in this padded row: tip blocks begin at `4 k - 2`, windows at multiples of 4.
pub(super) const TOP: usize = 6;
/// Map column 0 lies in this padded column, so that superblock windows begin at multiples of 16.
pub(super) const LEFT: usize = 26;

/// A padded map, or a part of one, and upper bounds over its windows. Everything unseen is `-inf`.
/// Loading another map keeps the memory.
///
/// - `data[[TOP + r, LEFT + c]]`: the height, negated for an erosion.
/// - `columns[[i, c]]`: maximum over padded rows `4 i ..= 4 i + 6`, columns `c ..= c + 3`.
/// - `fine[[i, j]]`: the same rows, columns `4 j ..= 4 j + 18` (a tile and a tip block).
/// - `coarse[[i, j]]`: rows `4 (i - 3) ..= 4 i + 6`, columns `16 j ..= 16 j + 30`
///   (a tile and a superblock).
#[derive(Default)]
pub(super) struct Field {
    pub(super) rows: usize,
    pub(super) cols: usize,
    pub(super) stride: usize,
    pub(super) data: Vec<f32>,
    pub(super) columns: Vec<f32>,
    pub(super) fine_rows: usize,
    pub(super) fine_cols: usize,
    pub(super) fine: Vec<f32>,
    pub(super) coarse_cols: usize,
    pub(super) coarse: Vec<f32>,
    /// The highest of all.
    pub(super) highest: f32,
}

/// The larger, in the form that compiles to one instruction; no NaN ever gets here.
#[inline(always)]
pub(super) fn larger(a: f32, b: f32) -> f32 {
    if a > b { a } else { b }
}

impl Field {
    /// Errors only when cancelled. The map must not be empty.
    pub(super) fn load(
        &mut self,
        arch: Arch,
        map: ArrayView2<f32>,
        order: Order,
        progress: &Progress,
    ) -> Result<()> {
        let (rows, cols) = map.dim();
        (self.rows, self.cols) = (rows, cols);
        self.fine_rows = (TOP + rows - 1) / BLOCK + 1;
        self.fine_cols = (LEFT + cols - 1) / BLOCK + 1;
        let padded_rows = BLOCK * (self.fine_rows - 1) + WINDOW_ROWS;
        let width = BLOCK * (self.fine_cols - 1) + WINDOW_COLUMNS + BLOCK;
        self.stride = width.next_multiple_of(TILE);
        if self.stride.is_multiple_of(256) {
            // Rows a power of two apart would fall on the same cache lines.
            self.stride += TILE;
        }
        self.data.resize(padded_rows * self.stride, 0.0);
        let rows_of_data = self.data.par_chunks_mut(self.stride).enumerate();
        rows_of_data.try_for_each(|(r, to)| {
            if !(TOP..TOP + rows).contains(&r) {
                to.fill(f32::NEG_INFINITY);
                return progress.check();
            }
            to[..LEFT].fill(f32::NEG_INFINITY);
            to[LEFT + cols..].fill(f32::NEG_INFINITY);
            let from = map.index_axis(Axis(0), r - TOP);
            let to = &mut to[LEFT..LEFT + cols];
            match from.as_slice() {
                Some(from) => arch.dispatch(Load { from, to, order }),
                None => to
                    .iter_mut()
                    .zip(from)
                    .for_each(|(to, &z)| *to = seen(z, order)),
            }
            progress.check()
        })?;
        self.bound(arch, progress)
    }

    /// Fills the tables of local maxima.
    fn bound(&mut self, arch: Arch, progress: &Progress) -> Result<()> {
        let (stride, data) = (self.stride, &self.data);
        self.columns.resize(self.fine_rows * stride, 0.0);
        self.fine.resize(self.fine_rows * self.fine_cols, 0.0);
        self.columns
            .par_chunks_mut(stride)
            .zip(self.fine.par_chunks_mut(self.fine_cols))
            .enumerate()
            .try_for_each(|(i, (columns, fine))| {
                let rows = &data[i * BLOCK * stride..][..WINDOW_ROWS * stride];
                arch.dispatch(Bound {
                    rows,
                    columns,
                    fine,
                });
                progress.check()
            })?;
        self.highest = self.fine.iter().copied().fold(f32::NEG_INFINITY, larger);
        let (fine, fine_rows, fine_cols) = (&self.fine, self.fine_rows, self.fine_cols);
        let coarse_cols = fine_cols.div_ceil(SUPER);
        self.coarse_cols = coarse_cols;
        self.coarse
            .resize((fine_rows + SUPER - 1) * coarse_cols, 0.0);
        self.coarse
            .par_chunks_mut(coarse_cols)
            .enumerate()
            .for_each(|(i, coarse)| {
                coarse.fill(f32::NEG_INFINITY);
                for k in (i + 1).saturating_sub(SUPER)..(i + 1).min(fine_rows) {
                    let row = &fine[k * fine_cols..][..fine_cols];
                    for (to, group) in coarse.iter_mut().zip(row.chunks(SUPER)) {
                        *to = group.iter().copied().fold(*to, larger);
                    }
                }
            });
        Ok(())
    }
}

/// What the kernels see of one height: anything not finite is a void and constrains nothing.
#[inline(always)]
fn seen(z: f32, order: Order) -> f32 {
    let z = match order {
        Order::Max => z,
        Order::Min => -z,
    };
    if z.abs() < f32::INFINITY {
        z
    } else {
        f32::NEG_INFINITY
    }
}

/// Copies heights as the kernels see them.
pub(super) struct Load<'a> {
    pub(super) from: &'a [f32],
    pub(super) to: &'a mut [f32],
    pub(super) order: Order,
}

impl WithSimd for Load<'_> {
    type Output = ();
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        for (to, &z) in self.to.iter_mut().zip(self.from) {
            *to = seen(z, self.order);
        }
    }
}

struct Bound<'a> {
    rows: &'a [f32],
    columns: &'a mut [f32],
    fine: &'a mut [f32],
}

impl WithSimd for Bound<'_> {
    type Output = ();
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let columns = self.columns;
        let stride = columns.len();
        columns.copy_from_slice(&self.rows[..stride]);
        for row in self.rows.chunks_exact(stride).skip(1) {
            for (to, &z) in columns.iter_mut().zip(row) {
                *to = larger(*to, z);
            }
        }
        // Each entry reads only entries at or after itself: in place, left to right.
        for c in 0..stride - 3 {
            let (a, b) = (columns[c], columns[c + 1]);
            let (d, e) = (columns[c + 2], columns[c + 3]);
            columns[c] = larger(larger(a, b), larger(d, e));
        }
        for (j, to) in self.fine.iter_mut().enumerate() {
            let at = &columns[BLOCK * j..BLOCK * j + TILE];
            *to = larger(
                larger(larger(at[0], at[4]), larger(at[8], at[12])),
                at[TILE - 1],
            );
        }
    }
}
