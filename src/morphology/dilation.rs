//! Dilation and erosion of a whole map, tile row by tile row, on all threads.

use super::field::{BLOCK, Field};
use super::flat;
use super::part::{Engine, Part};
use super::search::{Tile, Vector, Visitor, Window, lowest, peaks, raise, search, wanted};
use super::tip::{Block, Order, Tip};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use pulp::{Simd, WithSimd};
use rayon::prelude::*;
use std::sync::atomic::{AtomicUsize, Ordering};

/// Dilation (`Order::Max`) or erosion (`Order::Min`); see the module's conventions.
pub(super) fn extreme(
    engine: Engine,
    map: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    order: Order,
    progress: &Progress,
) -> Result<Array2<f32>> {
    let mut out = Array2::zeros(map.dim());
    let values = out.as_slice_mut().unwrap_or_default();
    extreme_into(engine, map, tip, order, values, progress)?;
    Ok(out)
}

/// The same into `out`, row by row, as long as the map has pixels.
pub(super) fn extreme_into(
    engine: Engine,
    map: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    order: Order,
    out: &mut [f32],
    progress: &Progress,
) -> Result<()> {
    progress.check()?;
    if map.is_empty() {
        return Ok(());
    }
    if let Some(depth) = flat::flat_depth(tip) {
        return flat::extreme_into(engine.arch, map, tip.dim(), depth, order, out, progress);
    }
    let tip = Tip::new(tip, order, map.dim(), false);
    let (rows, cols) = map.dim();
    let parts = Part::cut(engine, (rows, cols), tip.reach);
    let steps = Steps::new(progress, &parts);
    let mut field = Field::default();
    for part in &parts {
        field.load(engine.arch, part.seen(map), order, progress)?;
        let values = &mut out[part.rows.start * cols..part.rows.end * cols];
        let tile_rows = values.par_chunks_mut(BLOCK * cols).enumerate();
        tile_rows.try_for_each(|(row, values)| {
            engine.arch.dispatch(TileRow {
                field: &field,
                tip: &tip,
                part,
                row: part.first_tile_row() + row,
                order,
                values,
                stride: cols,
                progress,
            });
            steps.done()
        })?;
    }
    Ok(())
}

/// Counts finished tile rows, reports them, and passes a cancellation on.
pub(super) struct Steps<'a> {
    progress: &'a Progress,
    done: AtomicUsize,
    all: usize,
}

impl<'a> Steps<'a> {
    pub(super) fn new(progress: &'a Progress, parts: &[Part]) -> Self {
        Self {
            progress,
            done: AtomicUsize::new(0),
            all: parts.iter().map(Part::tile_rows).sum(),
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
    part: &'a Part,
    /// Counted in what the part sees, as the field is.
    row: usize,
    order: Order,
    /// Up to `BLOCK` whole rows of results, `stride` columns each.
    values: &'a mut [f32],
    stride: usize,
    progress: &'a Progress,
}

impl WithSimd for TileRow<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(mut self, simd: S) {
        let rows = self.values.len() / self.stride;
        let cols = self.part.cols.clone();
        for col in cols.clone().step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let tile = Tile {
                row: self.row,
                col: col - self.part.seen_cols.start,
            };
            let start = wanted(simd, (rows, cols.end - col), f32::NEG_INFINITY);
            let mut raise = Raise::new(simd, start);
            search(simd, self.field, self.tip, tile, &mut raise);
            self.write(col, &raise.values);
        }
    }
}

impl TileRow<'_> {
    #[inline(always)]
    fn write<V: Vector>(&mut self, col: usize, tile: &[V]) {
        let end = self.part.cols.end;
        for (row, vector) in self.values.chunks_exact_mut(self.stride).zip(tile) {
            for (to, &value) in row[col..end].iter_mut().zip(vector.lanes()) {
                *to = match self.order {
                    _ if value == f32::NEG_INFINITY => f32::NAN,
                    Order::Max => value,
                    // Not `-value`: zero stays a plain zero.
                    Order::Min => 0.0 - value,
                };
            }
        }
    }
}

/// The running maxima of a tile.
struct Raise<S: Simd> {
    values: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
}

impl<S: Simd> Raise<S> {
    /// Starts from `values`: `-inf`, or `+inf` where no output is wanted.
    #[inline(always)]
    fn new(simd: S, values: [S::f32s; BLOCK]) -> Self {
        let floors = lowest(simd, &values);
        Self {
            values,
            floors,
            floor: simd.reduce_min_f32s(floors),
        }
    }
}

impl<'a, 't, S: Simd> Visitor<'a, 't, S> for Raise<S> {
    const EQUAL_MATTERS: bool = false;

    #[inline(always)]
    fn floor(&self) -> f32 {
        self.floor
    }

    #[inline(always)]
    fn floors(&self) -> S::f32s {
        self.floors
    }

    #[inline(always)]
    fn visit(&mut self, simd: S, window: Window<'a>, block: &'t Block) {
        raise(simd, &mut self.values, &peaks(simd, window, block));
        self.floors = lowest(simd, &self.values);
    }

    #[inline(always)]
    fn settle(&mut self, simd: S) {
        self.floor = simd.reduce_min_f32s(self.floors);
    }
}
