//! Dilation that keeps which offset won.

use super::dilation::Steps;
use super::field::{BLOCK, Field};
use super::part::{Engine, Part};
use super::search::{
    Tile, Vector, Visitor, Window, any_reaches, load, lowest, peaks, raise, search, wanted,
};
use super::tip::{Block, Order, Tip, rank_of};
use super::{Contacts, NO_CONTACT};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use pulp::{Simd, WithSimd};
use rayon::prelude::*;

/// The contacts; see the public function.
pub(super) fn contacts(
    engine: Engine,
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
    let (rows, cols) = surface.dim();
    let parts = Part::cut(engine, (rows, cols), tip.reach);
    let steps = Steps::new(progress, &parts);
    let mut field = Field::default();
    for part in &parts {
        field.load(engine.arch, part.seen(surface), Order::Max, progress)?;
        let all = part.rows.start * cols..part.rows.end * cols;
        let heights = &mut found.heights.as_slice_mut().unwrap_or_default()[all.clone()];
        let offsets = &mut found.offsets.as_slice_mut().unwrap_or_default()[all];
        heights
            .par_chunks_mut(BLOCK * cols)
            .zip(offsets.par_chunks_mut(BLOCK * cols))
            .enumerate()
            .try_for_each(|(row, (heights, offsets))| {
                engine.arch.dispatch(ContactRow {
                    field: &field,
                    tip: &tip,
                    part,
                    row: part.first_tile_row() + row,
                    heights,
                    offsets,
                    stride: cols,
                    progress,
                });
                steps.done()
            })?;
    }
    Ok(found)
}

/// One row of tiles.
struct ContactRow<'a> {
    field: &'a Field,
    tip: &'a Tip,
    part: &'a Part,
    /// Counted in what the part sees, as the field is.
    row: usize,
    /// Up to `BLOCK` whole rows of results, `stride` columns each.
    heights: &'a mut [f32],
    offsets: &'a mut [[i16; 2]],
    stride: usize,
    progress: &'a Progress,
}

impl WithSimd for ContactRow<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(mut self, simd: S) {
        let rows = self.heights.len() / self.stride;
        let cols = self.part.cols.clone();
        let mut candidates = Vec::new();
        for col in cols.clone().step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let tile = Tile {
                row: self.row,
                col: col - self.part.seen_cols.start,
            };
            candidates.clear();
            // Not -inf: an equal value would count as a tie among things unseen.
            let start = wanted(simd, (rows, cols.end - col), f32::MIN);
            let mut record = Record {
                floors: lowest(simd, &start),
                floor: f32::MIN,
                values: start,
                candidates: &mut candidates,
            };
            search(simd, self.field, self.tip, tile, &mut record);
            let values = record.values;
            let mut keys = [simd.splat_f32s(f32::INFINITY); BLOCK];
            for candidate in &candidates {
                if any_reaches(simd, &candidate.peaks, &values) {
                    first_hit(simd, candidate, &values, &mut keys);
                }
            }
            self.write(col, &values, &keys);
        }
    }
}

impl ContactRow<'_> {
    #[inline(always)]
    fn write<V: Vector>(&mut self, col: usize, values: &[V], keys: &[V]) {
        let end = self.part.cols.end;
        for (row, vector) in self.heights.chunks_exact_mut(self.stride).zip(values) {
            for (to, &value) in row[col..end].iter_mut().zip(vector.lanes()) {
                *to = if value > f32::MIN { value } else { f32::NAN };
            }
        }
        for (row, vector) in self.offsets.chunks_exact_mut(self.stride).zip(keys) {
            for (to, &key) in row[col..end].iter_mut().zip(vector.lanes()) {
                if key < f32::INFINITY {
                    *to = self.tip.ranked[rank_of(key)];
                }
            }
        }
    }
}

/// A block that reached the running maxima somewhere when it was looked at.
struct Candidate<'a, 't, S: Simd> {
    window: Window<'a>,
    block: &'t Block,
    peaks: [S::f32s; BLOCK],
}

/// The running maxima of a tile and the blocks that may hold them.
struct Record<'a, 't, 'c, S: Simd> {
    values: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
    candidates: &'c mut Vec<Candidate<'a, 't, S>>,
}

impl<'a, 't, S: Simd> Visitor<'a, 't, S> for Record<'a, 't, '_, S> {
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
    fn visit(&mut self, simd: S, window: Window<'a>, block: &'t Block) {
        let peaks = peaks(simd, window, block);
        if any_reaches(simd, &peaks, &self.values) {
            raise(simd, &mut self.values, &peaks);
            self.floors = lowest(simd, &self.values);
            self.candidates.push(Candidate {
                window,
                block,
                peaks,
            });
        }
    }

    #[inline(always)]
    fn settle(&mut self, simd: S) {
        self.floor = simd.reduce_min_f32s(self.floors);
    }
}

/// Takes the ranks of the block's cells that reach `values` into `keys`, the lowest first.
#[inline(always)]
fn first_hit<S: Simd>(
    simd: S,
    candidate: &Candidate<S>,
    values: &[S::f32s; BLOCK],
    keys: &mut [S::f32s; BLOCK],
) {
    let rows = candidate.window.rows::<S>();
    let mut best = *keys;
    for j in 0..BLOCK {
        for i in 0..BLOCK {
            let cell = simd.splat_f32s(candidate.block.cells[i][j]);
            let rank = simd.splat_f32s(candidate.block.ranks[i][j]);
            for r in 0..BLOCK {
                let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                let hit = simd.greater_than_or_equal_f32s(sum, values[r]);
                best[r] = simd.select_f32s(hit, simd.min_f32s(best[r], rank), best[r]);
            }
        }
    }
    *keys = best;
}
