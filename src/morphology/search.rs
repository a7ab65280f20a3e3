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
pub(super) trait Visitor<'a, S: Simd> {
    /// Whether a value equal to the floor still matters.
    const EQUAL_MATTERS: bool;
    /// The lowest value that matters anywhere in the tile.
    fn floor(&self) -> f32;
    /// The same for each column of the tile.
    fn floors(&self) -> S::f32s;
    /// Takes in a block.
    fn visit(&mut self, simd: S, window: Window<'a>, block: &'a Block);
    /// Called once after some blocks were taken in.
    fn settle(&mut self, simd: S);
}

/// Shows `visitor` every block that can matter to `tile`.
#[inline(always)]
pub(super) fn search<'a, S: Simd, V: Visitor<'a, S>>(
    simd: S,
    field: &'a Field,
    tip: &'a Tip,
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
            let j = (4 * tile_col as isize + block.col + 6) as usize;
            let i = (tile.row as isize + block.row + 1) as usize;
            if j >= field.fine_cols || i >= field.fine_rows {
                continue;
            }
            if out_of_reach(field.fine[i * field.fine_cols + j] + block.max, floor) {
                continue;
            }
            let col = BLOCK * j + tile.col % TILE;
            let reach = load::<S>(&field.columns[i * field.stride + col..]);
            let bounds = simd.add_f32s(reach, simd.splat_f32s(block.max));
            let matters = if V::EQUAL_MATTERS {
                simd.greater_than_or_equal_f32s(bounds, visitor.floors())
            } else {
                simd.greater_than_f32s(bounds, visitor.floors())
            };
            if simd.first_true_m32s(matters) == S::F32_LANES {
                continue;
            }
            let window = Window {
                field,
                row: i * BLOCK,
                col,
            };
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

/// The running maxima of a tile.
pub(super) struct Raise<S: Simd> {
    pub(super) values: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
}

impl<S: Simd> Raise<S> {
    /// Starts from `values`: `-inf`, or `+inf` where no output is wanted.
    #[inline(always)]
    pub(super) fn new(simd: S, values: [S::f32s; BLOCK]) -> Self {
        let floors = lowest(simd, &values);
        Self {
            values,
            floors,
            floor: simd.reduce_min_f32s(floors),
        }
    }

    /// The maxima, `+inf` where nothing constrained: no offset reaches that.
    #[inline(always)]
    pub(super) fn reached(&self, simd: S) -> [S::f32s; BLOCK] {
        let nothing = simd.splat_f32s(f32::NEG_INFINITY);
        let never = simd.splat_f32s(f32::INFINITY);
        let mut reached = self.values;
        for v in &mut reached {
            *v = simd.select_f32s(simd.equal_f32s(*v, nothing), never, *v);
        }
        reached
    }
}

impl<'a, S: Simd> Visitor<'a, S> for Raise<S> {
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
    fn visit(&mut self, simd: S, window: Window<'a>, block: &'a Block) {
        let mut values = self.values;
        let rows = window.rows::<S>();
        for j in 0..BLOCK {
            let mut map = [simd.splat_f32s(0.0); WINDOW_ROWS];
            for i in 0..WINDOW_ROWS {
                map[i] = load::<S>(&rows[i][j..]);
            }
            let mut cells = [simd.splat_f32s(0.0); BLOCK];
            for i in 0..BLOCK {
                cells[i] = simd.splat_f32s(block.cells[i][j]);
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
                values[r] = simd.max_f32s(values[r], simd.max_f32s(pair, other));
            }
        }
        self.values = values;
        self.floors = lowest(simd, &values);
    }

    #[inline(always)]
    fn settle(&mut self, simd: S) {
        self.floor = simd.reduce_min_f32s(self.floors);
    }
}

/// Finds, for known results, the first of the offsets that reach them.
pub(super) struct FirstHit<S: Simd> {
    targets: [S::f32s; BLOCK],
    /// The best rank so far, as a key.
    pub(super) keys: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
}

impl<S: Simd> FirstHit<S> {
    /// Looks for `targets`; `+inf` where none is wanted.
    #[inline(always)]
    pub(super) fn new(simd: S, targets: [S::f32s; BLOCK]) -> Self {
        let floors = lowest(simd, &targets);
        Self {
            targets,
            keys: [simd.splat_f32s(f32::INFINITY); BLOCK],
            floors,
            floor: simd.reduce_min_f32s(floors),
        }
    }
}

impl<'a, S: Simd> Visitor<'a, S> for FirstHit<S> {
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
        let mut keys = self.keys;
        let rows = window.rows::<S>();
        let never = simd.splat_f32s(f32::INFINITY);
        for j in 0..BLOCK {
            for i in 0..BLOCK {
                let cell = simd.splat_f32s(block.cells[i][j]);
                let rank = simd.splat_f32s(block.ranks[i][j]);
                for r in 0..BLOCK {
                    let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                    let hit = simd.greater_than_or_equal_f32s(sum, self.targets[r]);
                    keys[r] = simd.min_f32s(keys[r], simd.select_f32s(hit, rank, never));
                }
            }
        }
        self.keys = keys;
    }

    #[inline(always)]
    fn settle(&mut self, _: S) {}
}
