//! Dilation and erosion of a whole map, tile row by tile row, on all threads.

use super::field::{BLOCK, Field};
use super::search::{FirstHit, Raise, Tile, search};
use super::tip::{Order, Tip, rank_of};
use super::{Contacts, NO_CONTACT};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use pulp::{Arch, Simd, WithSimd};
use rayon::prelude::*;
use std::sync::atomic::{AtomicUsize, Ordering};

/// Dilation (`Order::Max`) or erosion (`Order::Min`); see the module's conventions.
pub(super) fn extreme(
    arch: Arch,
    map: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    order: Order,
    progress: &Progress,
) -> Result<Array2<f32>> {
    progress.check()?;
    let mut out = Array2::zeros(map.dim());
    if map.is_empty() {
        return Ok(out);
    }
    let tip = Tip::new(tip, order, map.dim(), false);
    let field = Field::new(arch, map, order);
    let values = out.as_slice_mut().unwrap_or_default();
    let rows = values.par_chunks_mut(BLOCK * field.cols).enumerate();
    let step = Steps::new(progress, field.rows);
    rows.try_for_each(|(row, values)| {
        arch.dispatch(TileRow {
            field: &field,
            tip: &tip,
            row,
            order,
            values,
            offsets: &mut [],
            progress,
        });
        step.done()
    })?;
    Ok(out)
}

/// Dilation with the offset that won.
pub(super) fn contacts(
    arch: Arch,
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Contacts> {
    progress.check()?;
    let mut found = Contacts {
        heights: Array2::zeros(surface.dim()),
        offsets: Array2::from_elem(surface.dim(), NO_CONTACT),
    };
    if surface.is_empty() {
        return Ok(found);
    }
    let tip = Tip::new(tip, Order::Max, surface.dim(), true);
    let field = Field::new(arch, surface, Order::Max);
    let chunk = BLOCK * field.cols;
    let values = found.heights.as_slice_mut().unwrap_or_default();
    let offsets = found.offsets.as_slice_mut().unwrap_or_default();
    let step = Steps::new(progress, field.rows);
    values
        .par_chunks_mut(chunk)
        .zip(offsets.par_chunks_mut(chunk))
        .enumerate()
        .try_for_each(|(row, (values, offsets))| {
            arch.dispatch(TileRow {
                field: &field,
                tip: &tip,
                row,
                order: Order::Max,
                values,
                offsets,
                progress,
            });
            step.done()
        })?;
    Ok(found)
}

/// Counts finished tile rows, reports them, and passes a cancellation on.
pub(super) struct Steps<'a> {
    progress: &'a Progress,
    done: AtomicUsize,
    all: usize,
}

impl<'a> Steps<'a> {
    pub(super) fn new(progress: &'a Progress, rows: usize) -> Self {
        Self {
            progress,
            done: AtomicUsize::new(0),
            all: rows.div_ceil(BLOCK),
        }
    }

    pub(super) fn done(&self) -> Result<()> {
        let done = self.done.fetch_add(1, Ordering::Relaxed) + 1;
        self.progress.report(done as f32 / self.all as f32);
        self.progress.check()
    }
}

/// One row of tiles.
struct TileRow<'a> {
    field: &'a Field,
    tip: &'a Tip,
    row: usize,
    order: Order,
    /// Up to `BLOCK` rows of results.
    values: &'a mut [f32],
    /// The same of winning offsets; empty when not wanted.
    offsets: &'a mut [[i16; 2]],
    progress: &'a Progress,
}

impl WithSimd for TileRow<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(mut self, simd: S) {
        let cols = self.field.cols;
        for col in (0..cols).step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let tile = Tile { row: self.row, col };
            let start = wanted(
                simd,
                (self.values.len() / cols, cols - col),
                f32::NEG_INFINITY,
            );
            let mut raise = Raise::new(simd, start);
            search(simd, self.field, self.tip, tile, &mut raise);
            self.write_values(col, &raise.values);
            if !self.offsets.is_empty() {
                let mut hits = FirstHit::new(simd, raise.reached(simd));
                search(simd, self.field, self.tip, tile, &mut hits);
                self.write_offsets(col, &hits.keys);
            }
        }
    }
}

/// A tile of `value`, with `+inf` beyond the `rows` and `cols` that are left of the map: what
/// is not wanted must not hold the others up.
#[inline(always)]
pub(super) fn wanted<S: Simd>(
    simd: S,
    (rows, cols): (usize, usize),
    value: f32,
) -> [S::f32s; BLOCK] {
    let mut tile = [simd.splat_f32s(value); BLOCK];
    if rows < BLOCK || cols < S::F32_LANES {
        for (r, vector) in tile.iter_mut().enumerate() {
            for (c, lane) in vector.lanes_mut().iter_mut().enumerate() {
                if r >= rows || c >= cols {
                    *lane = f32::INFINITY;
                }
            }
        }
    }
    tile
}

impl TileRow<'_> {
    #[inline(always)]
    fn write_values<S: Vector>(&mut self, col: usize, tile: &[S]) {
        let sign = self.order;
        for (row, vector) in self.values.chunks_exact_mut(self.field.cols).zip(tile) {
            for (to, &value) in row[col..].iter_mut().zip(vector.lanes()) {
                *to = match sign {
                    _ if value == f32::NEG_INFINITY => f32::NAN,
                    Order::Max => value,
                    // Not `-value`: zero stays a plain zero.
                    Order::Min => 0.0 - value,
                };
            }
        }
    }

    #[inline(always)]
    fn write_offsets<S: Vector>(&mut self, col: usize, tile: &[S]) {
        for (row, vector) in self.offsets.chunks_exact_mut(self.field.cols).zip(tile) {
            for (to, &key) in row[col..].iter_mut().zip(vector.lanes()) {
                if key < f32::INFINITY {
                    *to = self.tip.ranked[rank_of(key)];
                }
            }
        }
    }
}

/// A vector of any instruction set as numbers.
pub(super) trait Vector: pulp::bytemuck::Pod {
    #[inline(always)]
    fn lanes(&self) -> &[f32] {
        pulp::bytemuck::cast_slice(std::slice::from_ref(self))
    }

    #[inline(always)]
    fn lanes_mut(&mut self) -> &mut [f32] {
        pulp::bytemuck::cast_slice_mut(std::slice::from_mut(self))
    }
}

impl<T: pulp::bytemuck::Pod> Vector for T {}
