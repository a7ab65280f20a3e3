//! Which surface pixels the tip touched.

use super::certainty::{BOUNDED, NEVER, TOUCHED, VOID};
use super::dilation::{Steps, Vector};
use super::field::{BLOCK, Field, LEFT, TOP, WINDOW_ROWS};
use super::search::{Tile, Visitor, Window, load, lowest, search};
use super::tip::{Block, Order, Tip};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2, Axis};
use pulp::{Arch, Simd, WithSimd};
use rayon::prelude::*;
use std::sync::atomic::{AtomicU8, Ordering};

/// The certainty map; see the public function.
pub(super) fn certainty_map(
    arch: Arch,
    surface: ArrayView2<f32>,
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    tolerance: f32,
    progress: &Progress,
) -> Result<Array2<u8>> {
    progress.check()?;
    if surface.is_empty() {
        return Ok(Array2::zeros(surface.dim()));
    }
    let tip = Tip::new(tip, Order::Max, surface.dim(), false);
    let field = Field::new(arch, surface, Order::Max);
    let mut marks = Vec::new();
    marks.resize_with(surface.len(), || AtomicU8::new(NEVER));
    let step = Steps::new(progress, field.rows);
    (0..field.rows.div_ceil(BLOCK))
        .into_par_iter()
        .try_for_each(|row| {
            arch.dispatch(TouchRow {
                field: &field,
                tip: &tip,
                scan,
                tolerance,
                row,
                marks: &marks,
                progress,
            });
            step.done()
        })?;
    let mut marks = marks.into_iter().map(AtomicU8::into_inner);
    Ok(surface.mapv(|s| {
        let mark = marks.next().unwrap_or(NEVER);
        if s.is_finite() { mark } else { VOID }
    }))
}

/// One row of tiles.
struct TouchRow<'a> {
    field: &'a Field,
    tip: &'a Tip,
    scan: ArrayView2<'a, f32>,
    tolerance: f32,
    row: usize,
    /// The surface's marks; tiles of several threads meet here.
    marks: &'a [AtomicU8],
    progress: &'a Progress,
}

impl WithSimd for TouchRow<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let mut touching = Vec::new();
        for col in (0..self.field.cols).step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let tile = Tile { row: self.row, col };
            touching.clear();
            let mut count = Count::new(simd, self.thresholds(simd, col), &mut touching);
            search(simd, self.field, self.tip, tile, &mut count);
            let (thresholds, values) = (count.thresholds, count.values(simd));
            for &(window, block) in &touching {
                let marks = mark(simd, window, block, &thresholds, &values);
                self.merge(window, &marks);
            }
        }
    }
}

impl TouchRow<'_> {
    /// The height from which a sum counts as a touch; `+inf` for voids and beyond the map.
    #[inline(always)]
    fn thresholds<S: Simd>(&self, simd: S, col: usize) -> [S::f32s; BLOCK] {
        let mut tile = [simd.splat_f32s(f32::INFINITY); BLOCK];
        let rows = self.scan.axis_iter(Axis(0)).skip(BLOCK * self.row);
        for (vector, row) in tile.iter_mut().zip(rows) {
            let heights = row.into_iter().skip(col);
            for (lane, &height) in vector.lanes_mut().iter_mut().zip(heights) {
                let threshold = height - self.tolerance;
                if height.is_finite() && !threshold.is_nan() {
                    // No padding (-inf) ever counts.
                    *lane = threshold.max(f32::MIN);
                }
            }
        }
        tile
    }

    /// Takes the marks of a window into the surface's.
    #[inline(always)]
    fn merge<V: Vector>(&self, window: Window, marks: &[[V; BLOCK]; WINDOW_ROWS]) {
        for (i, row) in marks.iter().enumerate() {
            for (j, vector) in row.iter().enumerate() {
                for (lane, &value) in vector.lanes().iter().enumerate() {
                    if value > 0.0 {
                        // Only true surface pixels are ever hit, so this cannot underflow.
                        let (r, c) = (window.row + i - TOP, window.col + j + lane - LEFT);
                        let mark = &self.marks[r * self.field.cols + c];
                        if mark.load(Ordering::Relaxed) < value as u8 {
                            mark.fetch_max(value as u8, Ordering::Relaxed);
                        }
                    }
                }
            }
        }
    }
}

/// Counts the touches of each scan pixel and keeps the blocks that touch.
struct Count<'a, 't, S: Simd> {
    thresholds: [S::f32s; BLOCK],
    counts: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
    touching: &'t mut Vec<(Window<'a>, &'a Block)>,
}

impl<'a, 't, S: Simd> Count<'a, 't, S> {
    #[inline(always)]
    fn new(
        simd: S,
        thresholds: [S::f32s; BLOCK],
        touching: &'t mut Vec<(Window<'a>, &'a Block)>,
    ) -> Self {
        let floors = lowest(simd, &thresholds);
        Self {
            thresholds,
            counts: [simd.splat_f32s(0.0); BLOCK],
            floors,
            floor: simd.reduce_min_f32s(floors),
            touching,
        }
    }

    /// What each scan pixel gives to the surface pixels that it touches.
    #[inline(always)]
    fn values(&self, simd: S) -> [S::f32s; BLOCK] {
        let one = simd.splat_f32s(1.0);
        let touched = simd.splat_f32s(f32::from(TOUCHED));
        let bounded = simd.splat_f32s(f32::from(BOUNDED));
        let mut values = self.counts;
        for v in &mut values {
            *v = simd.select_f32s(simd.equal_f32s(*v, one), touched, bounded);
        }
        values
    }
}

impl<'a, S: Simd> Visitor<'a, S> for Count<'a, '_, S> {
    const EQUAL_MATTERS: bool = true;

    #[inline(always)]
    fn floor(&self) -> f32 {
        self.floor
    }

    #[inline(always)]
    fn floors(&self) -> S::f32s {
        self.floors
    }

    #[inline(always)]
    fn visit(&mut self, simd: S, window: Window<'a>, block: &'a Block) {
        let (zero, one) = (simd.splat_f32s(0.0), simd.splat_f32s(1.0));
        let mut found = [zero; BLOCK];
        let rows = window.rows::<S>();
        for j in 0..BLOCK {
            for i in 0..BLOCK {
                let cell = simd.splat_f32s(block.cells[i][j]);
                for r in 0..BLOCK {
                    let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                    let hit = simd.greater_than_or_equal_f32s(sum, self.thresholds[r]);
                    found[r] = simd.add_f32s(found[r], simd.select_f32s(hit, one, zero));
                }
            }
        }
        let mut any = zero;
        for r in 0..BLOCK {
            self.counts[r] = simd.add_f32s(self.counts[r], found[r]);
            any = simd.max_f32s(any, found[r]);
        }
        if simd.first_true_m32s(simd.greater_than_f32s(any, zero)) < S::F32_LANES {
            self.touching.push((window, block));
        }
    }

    #[inline(always)]
    fn settle(&mut self, _: S) {}
}

/// The marks that a block leaves on its window: `[row][shift]`, shifts still apart.
#[inline(always)]
fn mark<S: Simd>(
    simd: S,
    window: Window,
    block: &Block,
    thresholds: &[S::f32s; BLOCK],
    values: &[S::f32s; BLOCK],
) -> [[S::f32s; BLOCK]; WINDOW_ROWS] {
    let zero = simd.splat_f32s(0.0);
    let mut marks = [[zero; BLOCK]; WINDOW_ROWS];
    let rows = window.rows::<S>();
    for j in 0..BLOCK {
        let mut column = [zero; WINDOW_ROWS];
        for i in 0..BLOCK {
            let cell = simd.splat_f32s(block.cells[i][j]);
            for r in 0..BLOCK {
                let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                let hit = simd.greater_than_or_equal_f32s(sum, thresholds[r]);
                let value = simd.select_f32s(hit, values[r], zero);
                column[r + i] = simd.max_f32s(column[r + i], value);
            }
        }
        for (marks, column) in marks.iter_mut().zip(column) {
            marks[j] = column;
        }
    }
    marks
}
