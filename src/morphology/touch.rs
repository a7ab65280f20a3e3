//! Which surface pixels the tip touched.

use super::certainty::{BOUNDED, NEVER, TOUCHED, VOID};
use super::dilation::Steps;
use super::field::{BLOCK, Field, LEFT, TOP, WINDOW_ROWS};
use super::search::{Tile, Vector, Visitor, Window, load, lowest, search};
use super::tip::{Block, Order, Tip};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use pulp::{Arch, Simd, WithSimd};
use rayon::prelude::*;
use std::ops::Range;
use std::sync::Mutex;

/// Rows whose marks one thread keeps to itself until it has them all.
const BAND: usize = 64;

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
    let field = Field::new(arch, surface, Order::Max, progress)?;
    let scan = scan.as_standard_layout();
    let scan = scan.as_slice().unwrap_or_default();
    let mut marks = Array2::from_elem(surface.dim(), NEVER);
    let cols = field.cols;
    let bands: Vec<Mutex<&mut [u8]>> = marks
        .as_slice_mut()
        .unwrap_or_default()
        .chunks_mut(BAND * cols)
        .map(Mutex::new)
        .collect();
    let step = Steps::new(progress, field.rows);
    (0..bands.len()).into_par_iter().try_for_each(|band| {
        let mut band = Band::new(&field, &tip, band);
        for row in band.tile_rows.clone() {
            arch.dispatch(TouchRow {
                band: &mut band,
                scan,
                tolerance,
                row,
                progress,
            });
            step.done()?;
        }
        band.merge(&bands);
        Ok(())
    })?;
    drop(bands);
    ndarray::Zip::from(&mut marks)
        .and(surface)
        .par_for_each(|mark, s| {
            if !s.is_finite() {
                *mark = VOID;
            }
        });
    Ok(marks)
}

/// Some tile rows and the marks that they leave, which reach as far beyond them as the tip does.
struct Band<'a> {
    field: &'a Field,
    tip: &'a Tip,
    tile_rows: Range<usize>,
    /// The first padded row that can be marked.
    first: usize,
    /// Marks by padded row (from `first`) and column, in the field's stride.
    marks: Vec<u32>,
}

impl<'a> Band<'a> {
    fn new(field: &'a Field, tip: &'a Tip, band: usize) -> Self {
        let start = band * BAND / BLOCK;
        let end = (start + BAND / BLOCK).min(field.rows.div_ceil(BLOCK));
        let (mut above, mut below) = (0, 0);
        for block in tip.supers.iter().flat_map(|s| &s.blocks) {
            above = above.min(block.row);
            below = below.max(block.row);
        }
        // Windows begin at padded row 4 (tile row + block row + 1).
        let first = start.saturating_add_signed(above + 1);
        let last = end.saturating_add_signed(below).min(field.fine_rows - 1);
        let rows = (last.max(first) - first) * BLOCK + WINDOW_ROWS;
        Self {
            field,
            tip,
            tile_rows: start..end,
            first: first * BLOCK,
            marks: vec![0; rows * field.stride],
        }
    }

    /// Takes its marks into the surface's.
    fn merge(&self, bands: &[Mutex<&mut [u8]>]) {
        let (stride, rows, cols) = (self.field.stride, self.field.rows, self.field.cols);
        for (i, from) in self.marks.chunks_exact(stride).enumerate() {
            let Some(row) = (self.first + i).checked_sub(TOP).filter(|&r| r < rows) else {
                continue;
            };
            // A poisoned lock cannot be: nothing here panics.
            let Ok(mut to) = bands[row / BAND].lock() else {
                continue;
            };
            let to = &mut to[row % BAND * cols..][..cols];
            for (to, &mark) in to.iter_mut().zip(&from[LEFT..]) {
                *to = (*to).max(mark.min(u32::from(TOUCHED)) as u8);
            }
        }
    }
}

/// One row of tiles.
struct TouchRow<'a, 'b> {
    band: &'b mut Band<'a>,
    scan: &'b [f32],
    tolerance: f32,
    row: usize,
    progress: &'b Progress,
}

impl WithSimd for TouchRow<'_, '_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let (field, tip) = (self.band.field, self.band.tip);
        let mut touching = Vec::new();
        for col in (0..field.cols).step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let tile = Tile { row: self.row, col };
            touching.clear();
            let thresholds = self.thresholds(simd, col);
            let floors = lowest(simd, &thresholds);
            let mut touch = Touch {
                thresholds,
                counts: [simd.splat_f32s(0.0); BLOCK],
                floors,
                floor: simd.reduce_min_f32s(floors),
                touching: &mut touching,
            };
            search(simd, field, tip, tile, &mut touch);
            let values = values(simd, &touch.counts);
            for &(window, block) in &touching {
                let at = (window.row - self.band.first) * field.stride + window.col;
                let marks = &mut self.band.marks[at..];
                mark(simd, window, block, &thresholds, &values, marks);
            }
        }
    }
}

impl TouchRow<'_, '_> {
    /// The height from which a sum counts as a touch; `+inf` for voids and beyond the map.
    #[inline(always)]
    fn thresholds<S: Simd>(&self, simd: S, col: usize) -> [S::f32s; BLOCK] {
        let mut tile = [simd.splat_f32s(f32::INFINITY); BLOCK];
        let cols = self.band.field.cols;
        let rows = self.scan.chunks_exact(cols).skip(BLOCK * self.row);
        for (vector, row) in tile.iter_mut().zip(rows) {
            for (lane, &height) in vector.lanes_mut().iter_mut().zip(&row[col..]) {
                let threshold = height - self.tolerance;
                if height.is_finite() && !threshold.is_nan() {
                    // No padding (-inf) ever counts.
                    *lane = threshold.max(f32::MIN);
                }
            }
        }
        tile
    }
}

/// Counts the touches of each scan pixel and keeps the blocks that touch.
struct Touch<'a, 't, S: Simd> {
    thresholds: [S::f32s; BLOCK],
    counts: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
    touching: &'t mut Vec<(Window<'a>, &'a Block)>,
}

impl<'a, S: Simd> Visitor<'a, S> for Touch<'a, '_, S> {
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
        let one = simd.splat_f32s(1.0);
        let rows = window.rows::<S>();
        let mut counts = self.counts;
        for j in 0..BLOCK {
            for i in 0..BLOCK {
                let cell = simd.splat_f32s(block.cells[i][j]);
                for r in 0..BLOCK {
                    let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                    let hit = simd.greater_than_or_equal_f32s(sum, self.thresholds[r]);
                    counts[r] = simd.select_f32s(hit, simd.add_f32s(counts[r], one), counts[r]);
                }
            }
        }
        let mut more = simd.greater_than_f32s(counts[0], self.counts[0]);
        for r in 1..BLOCK {
            more = simd.or_m32s(more, simd.greater_than_f32s(counts[r], self.counts[r]));
        }
        if simd.first_true_m32s(more) < S::F32_LANES {
            self.counts = counts;
            self.touching.push((window, block));
        }
    }

    #[inline(always)]
    fn settle(&mut self, _: S) {}
}

/// What each scan pixel gives to the surface pixels that it touches: more when it is only one.
#[inline(always)]
fn values<S: Simd>(simd: S, counts: &[S::f32s; BLOCK]) -> [S::u32s; BLOCK] {
    let one = simd.splat_f32s(1.0);
    let touched = simd.splat_u32s(u32::from(TOUCHED));
    let bounded = simd.splat_u32s(u32::from(BOUNDED));
    let mut values = [bounded; BLOCK];
    for r in 0..BLOCK {
        values[r] = simd.select_u32s(simd.equal_f32s(counts[r], one), touched, bounded);
    }
    values
}

/// Leaves the marks of a block on its window: of each pixel the values given to it, as bits.
#[inline(always)]
fn mark<S: Simd>(
    simd: S,
    window: Window,
    block: &Block,
    thresholds: &[S::f32s; BLOCK],
    values: &[S::u32s; BLOCK],
    marks: &mut [u32],
) {
    let zero = simd.splat_u32s(0);
    let rows = window.rows::<S>();
    let mut targets: [&mut [u32]; WINDOW_ROWS] = Default::default();
    for (to, row) in targets.iter_mut().zip(marks.chunks_mut(window.stride())) {
        *to = &mut row[..S::F32_LANES + BLOCK - 1];
    }
    for j in 0..BLOCK {
        let mut column = [zero; WINDOW_ROWS];
        for i in 0..BLOCK {
            let cell = simd.splat_f32s(block.cells[i][j]);
            for r in 0..BLOCK {
                let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                let hit = simd.greater_than_or_equal_f32s(sum, thresholds[r]);
                let both = simd.or_u32s(column[r + i], values[r]);
                column[r + i] = simd.select_u32s(hit, both, column[r + i]);
            }
        }
        for (to, &column) in targets.iter_mut().zip(&column) {
            let to = &mut to[j..j + S::U32_LANES];
            let old: S::u32s = pulp::bytemuck::pod_read_unaligned(pulp::bytemuck::cast_slice(to));
            let new = simd.or_u32s(old, column);
            to.copy_from_slice(pulp::bytemuck::cast_slice(std::slice::from_ref(&new)));
        }
    }
}
