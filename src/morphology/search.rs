//! The search for the tip blocks that can matter to an output tile.
//!
//! Superblocks come highest first; a block is looked at only if the highest map value it could
//! meet, plus the highest of its own cells, reaches the lowest value that still matters in the
//! tile. Rounded addition is monotonic, so nothing that could win is ever skipped.

use super::field::{BLOCK, Field, SUPER, TILE, WINDOW_ROWS};
use super::tip::{Block, Tip};
use pulp::Simd;

/// One output tile: `BLOCK` rows from `BLOCK * row`, one vector of columns from `col`.
#[derive(Clone, Copy)]
pub(super) struct Tile {
    pub(super) row: usize,
    pub(super) col: usize,
}

/// Where in the padded map a tile and a block meet.
#[derive(Clone, Copy)]
pub(super) struct Window<'a> {
    field: &'a Field,
    /// First padded row and column.
    pub(super) row: usize,
    pub(super) col: usize,
}

impl<'a> Window<'a> {
    /// Of a tile and a block; `None` where the block meets nothing of the map.
    #[inline(always)]
    pub(super) fn of(field: &'a Field, tile: Tile, block: &Block) -> Option<Self> {
        let (i, j) = (tile.row as isize + block.row, block.col);
        // Negative positions wrap to huge ones and fail the comparison.
        let (i, j) = (
            (i + 1) as usize,
            (4 * (tile.col / TILE) as isize + j + 6) as usize,
        );
        (i < field.fine_rows && j < field.fine_cols).then_some(Self {
            field,
            row: i * BLOCK,
            col: BLOCK * j + tile.col % TILE,
        })
    }

    /// The highest that the tile's whole group of columns meets there.
    #[inline(always)]
    fn highest(self, tile: Tile) -> f32 {
        let (i, j) = (self.row / BLOCK, (self.col - tile.col % TILE) / BLOCK);
        self.field.fine[i * self.field.fine_cols + j]
    }

    /// From one row to the next in the padded map.
    #[inline(always)]
    pub(super) fn stride(self) -> usize {
        self.field.stride
    }

    /// Its rows, each just as long as a vector and the block's columns need.
    #[inline(always)]
    pub(super) fn rows<S: Simd>(self) -> [&'a [f32]; WINDOW_ROWS] {
        let stride = self.field.stride;
        let width = S::F32_LANES + BLOCK - 1;
        let mut rows: [&[f32]; WINDOW_ROWS] = [&[]; WINDOW_ROWS];
        for (i, row) in rows.iter_mut().enumerate() {
            *row = &self.field.data[(self.row + i) * stride + self.col..][..width];
        }
        rows
    }
}

/// The first vector of a slice.
#[inline(always)]
pub(super) fn load<S: Simd>(from: &[f32]) -> S::f32s {
    pulp::bytemuck::pod_read_unaligned(pulp::bytemuck::cast_slice(&from[..S::F32_LANES]))
}

/// What is done with a tile: it says which values still matter and takes in blocks.
pub(super) trait Visitor<'a, 't, S: Simd> {
    /// Whether a value equal to the floor still matters.
    const EQUAL_MATTERS: bool;
    /// The lowest value that matters anywhere in the tile.
    fn floor(&self) -> f32;
    /// The same for each column of the tile.
    fn floors(&self) -> S::f32s;
    /// Takes in a block.
    fn visit(&mut self, simd: S, window: Window<'a>, block: &'t Block);
    /// Called once after some blocks were taken in.
    fn settle(&mut self, simd: S);
}

/// Shows `visitor` every block that can matter to `tile`.
#[inline(always)]
pub(super) fn search<'a, 't, S: Simd, V: Visitor<'a, 't, S>>(
    simd: S,
    field: &'a Field,
    tip: &'t Tip,
    tile: Tile,
    visitor: &mut V,
) {
    let out_of_reach = |bound: f32, floor: f32| {
        if V::EQUAL_MATTERS {
            bound < floor
        } else {
            bound <= floor
        }
    };
    let tile_col = tile.col / TILE;
    for superblock in &tip.supers {
        let floor = visitor.floor();
        if out_of_reach(field.highest + superblock.max, floor) {
            break;
        }
        // Negative positions wrap to huge ones and fail the comparison.
        let j = (tile_col as isize + superblock.col + 1) as usize;
        let i = (tile.row as isize + SUPER as isize * superblock.row + 2) as usize;
        if j >= field.coarse_cols || i >= field.fine_rows + SUPER - 1 {
            continue;
        }
        if out_of_reach(
            field.coarse[i * field.coarse_cols + j] + superblock.max,
            floor,
        ) {
            continue;
        }
        let mut visited = false;
        for block in &superblock.blocks {
            let Some(window) = Window::of(field, tile, block) else {
                continue;
            };
            if out_of_reach(window.highest(tile) + block.max, floor) {
                continue;
            }
            let columns = &field.columns[window.row / BLOCK * field.stride + window.col..];
            let reach = load::<S>(columns);
            let bounds = simd.add_f32s(reach, simd.splat_f32s(block.max));
            let matters = if V::EQUAL_MATTERS {
                simd.greater_than_or_equal_f32s(bounds, visitor.floors())
            } else {
                simd.greater_than_f32s(bounds, visitor.floors())
            };
            if simd.first_true_m32s(matters) == S::F32_LANES {
                continue;
            }
            visitor.visit(simd, window, block);
            visited = true;
        }
        if visited {
            visitor.settle(simd);
        }
    }
}

/// The lowest of the rows, column by column.
#[inline(always)]
pub(super) fn lowest<S: Simd>(simd: S, rows: &[S::f32s; BLOCK]) -> S::f32s {
    simd.min_f32s(
        simd.min_f32s(rows[0], rows[1]),
        simd.min_f32s(rows[2], rows[3]),
    )
}

/// The highest sum that a block gives each pixel of a tile.
#[inline(always)]
pub(super) fn peaks<S: Simd>(simd: S, window: Window, block: &Block) -> [S::f32s; BLOCK] {
    let mut peaks = [simd.splat_f32s(f32::NEG_INFINITY); BLOCK];
    let rows = window.rows::<S>();
    for j in 0..BLOCK {
        let mut map = [simd.splat_f32s(0.0); WINDOW_ROWS];
        for i in 0..WINDOW_ROWS {
            map[i] = load::<S>(&rows[i][j..]);
        }
        let mut cells = [simd.splat_f32s(0.0); BLOCK];
        for (cell, row) in cells.iter_mut().zip(&block.cells) {
            *cell = simd.splat_f32s(row[j]);
        }
        for r in 0..BLOCK {
            // Pairs first: half the chain of dependent maxima.
            let pair = simd.max_f32s(
                simd.add_f32s(map[r], cells[0]),
                simd.add_f32s(map[r + 1], cells[1]),
            );
            let other = simd.max_f32s(
                simd.add_f32s(map[r + 2], cells[2]),
                simd.add_f32s(map[r + 3], cells[3]),
            );
            peaks[r] = simd.max_f32s(peaks[r], simd.max_f32s(pair, other));
        }
    }
    peaks
}

/// Raises `values` to `peaks` where those are higher.
#[inline(always)]
pub(super) fn raise<S: Simd>(simd: S, values: &mut [S::f32s; BLOCK], peaks: &[S::f32s; BLOCK]) {
    for (value, &peak) in values.iter_mut().zip(peaks) {
        *value = simd.max_f32s(*value, peak);
    }
}

/// Whether any of the tile's `values` reaches its `limit`.
#[inline(always)]
pub(super) fn any_reaches<S: Simd>(
    simd: S,
    values: &[S::f32s; BLOCK],
    limits: &[S::f32s; BLOCK],
) -> bool {
    let mut any = simd.greater_than_or_equal_f32s(values[0], limits[0]);
    for r in 1..BLOCK {
        any = simd.or_m32s(any, simd.greater_than_or_equal_f32s(values[r], limits[r]));
    }
    simd.first_true_m32s(any) < S::F32_LANES
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
