//! Dilation that keeps which offset won.

use super::dilation::Steps;
use super::field::{BLOCK, Field};
use super::search::{
    Tile, Vector, Visitor, Window, any_reaches, load, lowest, peaks, raise, search, wanted,
};
use super::tip::{Block, Order, Tip, rank_of};
use super::{Contacts, NO_CONTACT};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use pulp::{Arch, Simd, WithSimd};
use rayon::prelude::*;

/// The contacts; see the public function.
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
    let field = Field::new(arch, surface, Order::Max, progress)?;
    let chunk = BLOCK * field.cols;
    let heights = found.heights.as_slice_mut().unwrap_or_default();
    let offsets = found.offsets.as_slice_mut().unwrap_or_default();
    let step = Steps::new(progress, field.rows);
    heights
        .par_chunks_mut(chunk)
        .zip(offsets.par_chunks_mut(chunk))
        .enumerate()
        .try_for_each(|(row, (heights, offsets))| {
            arch.dispatch(ContactRow {
                field: &field,
                tip: &tip,
                row,
                heights,
                offsets,
                progress,
            });
            step.done()
        })?;
    Ok(found)
}

/// One row of tiles.
struct ContactRow<'a> {
    field: &'a Field,
    tip: &'a Tip,
    row: usize,
    /// Up to `BLOCK` rows of results.
    heights: &'a mut [f32],
    offsets: &'a mut [[i16; 2]],
    progress: &'a Progress,
}

impl WithSimd for ContactRow<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(mut self, simd: S) {
        let cols = self.field.cols;
        let rows = self.heights.len() / cols;
        let mut candidates = Vec::new();
        for col in (0..cols).step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let tile = Tile { row: self.row, col };
            candidates.clear();
            // Not -inf: an equal value would count as a tie among things unseen.
            let start = wanted(simd, (rows, cols - col), f32::MIN);
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
        let cols = self.field.cols;
        let rows = self.heights.chunks_exact_mut(cols).zip(values);
        for (row, vector) in rows {
            for (to, &value) in row[col..].iter_mut().zip(vector.lanes()) {
                *to = if value > f32::MIN { value } else { f32::NAN };
            }
        }
        for (row, vector) in self.offsets.chunks_exact_mut(cols).zip(keys) {
            for (to, &key) in row[col..].iter_mut().zip(vector.lanes()) {
                if key < f32::INFINITY {
                    *to = self.tip.ranked[rank_of(key)];
                }
            }
        }
    }
}

/// A block that reached the running maxima somewhere when it was looked at.
struct Candidate<'a, S: Simd> {
    window: Window<'a>,
    block: &'a Block,
    peaks: [S::f32s; BLOCK],
}

/// The running maxima of a tile and the blocks that may hold them.
struct Record<'a, 'c, S: Simd> {
    values: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
    candidates: &'c mut Vec<Candidate<'a, S>>,
}

impl<'a, S: Simd> Visitor<'a, S> for Record<'a, '_, S> {
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
