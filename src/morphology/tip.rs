//! The tip cut into blocks, deepest reaching first.

use super::field::{BLOCK, SUPER};
use ndarray::ArrayView2;

/// Which extreme is sought. An erosion is the dilation of the negated map by the mirrored tip,
/// negated; negation of IEEE numbers is exact, so one kernel serves both.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Order {
    /// Dilation: the largest of `S(x + u) + p(u)`.
    Max,
    /// Erosion: the smallest of `I(s - u) - p(u)`.
    Min,
}

/// Four by four tip cells: rows `4 row - 2 ..= 4 row + 1` from the apex, columns likewise.
pub(super) struct Block {
    pub(super) row: isize,
    pub(super) col: isize,
    /// The highest of its cells: none reaches further.
    pub(super) max: f32,
    pub(super) cells: [[f32; BLOCK]; BLOCK],
    /// For the contact search: the order in which equal offsets win, as [`rank_key`].
    pub(super) ranks: [[f32; BLOCK]; BLOCK],
}

/// Four by four blocks: block rows `4 row - 2 ..= 4 row + 1`, columns likewise.
pub(super) struct Superblock {
    pub(super) row: isize,
    pub(super) col: isize,
    pub(super) max: f32,
    /// Its non-empty blocks, highest first.
    pub(super) blocks: Vec<Block>,
}

/// The tip, superblocks highest first; empty ones are left out.
pub(super) struct Tip {
    pub(super) supers: Vec<Superblock>,
    /// Rows and columns that it can reach from its apex on this map.
    pub(super) reach: [usize; 2],
    /// Offsets `[dr, dc]` in the order in which equals win; empty unless asked for.
    pub(super) ranked: Vec<[i16; 2]>,
}

/// A rank as a normal number: the order of positive IEEE numbers is that of their bits.
pub(super) fn rank_key(rank: usize) -> f32 {
    f32::from_bits(ONE + rank as u32)
}

/// The rank back from [`rank_key`].
pub(super) fn rank_of(key: f32) -> usize {
    (key.to_bits() - ONE) as usize
}

const ONE: u32 = 0x3f80_0000;

impl Tip {
    /// Cuts up `tip` for a map of `dim`. Cells further from the apex than the map is wide can
    /// never meet it and are left out.
    pub(super) fn new(
        tip: ArrayView2<f32>,
        order: Order,
        dim: (usize, usize),
        with_ranks: bool,
    ) -> Self {
        let (cr, cc) = (tip.nrows() as isize / 2, tip.ncols() as isize / 2);
        let (reach_r, reach_c) = (cr.min(dim.0 as isize - 1), cc.min(dim.1 as isize - 1));
        let mirror = match order {
            Order::Max => 1,
            Order::Min => -1,
        };
        let cell = |dr: isize, dc: isize| -> f32 {
            if dr.abs() > reach_r || dc.abs() > reach_c {
                return f32::NEG_INFINITY;
            }
            let at = ((cr + mirror * dr) as usize, (cc + mirror * dc) as usize);
            match tip.get(at) {
                // Adding zero makes -0 a plain 0, so that no sum is ever -0.
                Some(&p) if p.is_finite() => p + 0.0,
                _ => f32::NEG_INFINITY,
            }
        };
        // Superblock `k` holds the offsets `16 k - 10 ..= 16 k + 5`.
        let first = |reach: isize| -((reach + 5) / 16);
        let last = |reach: isize| (reach + 10) / 16;
        let mut supers = Vec::new();
        for row in first(reach_r)..=last(reach_r) {
            for col in first(reach_c)..=last(reach_c) {
                supers.extend(Superblock::cut(row, col, &cell));
            }
        }
        supers.sort_by(|a, b| b.max.total_cmp(&a.max));
        let mut cut = Self {
            supers,
            reach: [reach_r as usize, reach_c as usize],
            ranked: Vec::new(),
        };
        if with_ranks {
            cut.rank((reach_r, reach_c), &cell);
        }
        cut
    }

    /// Ranks the cells: nearest the apex first, then row-major.
    fn rank(&mut self, reach: (isize, isize), cell: &impl Fn(isize, isize) -> f32) {
        let mut cells: Vec<(isize, isize)> = (-reach.0..=reach.0)
            .flat_map(|dr| (-reach.1..=reach.1).map(move |dc| (dr, dc)))
            .filter(|&(dr, dc)| cell(dr, dc).is_finite())
            .collect();
        cells.sort_by_key(|&(dr, dc)| dr * dr + dc * dc);
        let width = 2 * reach.1 + 1;
        let index = |dr: isize, dc: isize| ((dr + reach.0) * width + dc + reach.1) as usize;
        let mut rank = vec![0; ((2 * reach.0 + 1) * width) as usize];
        for (i, &(dr, dc)) in cells.iter().enumerate() {
            rank[index(dr, dc)] = i;
        }
        for block in self.supers.iter_mut().flat_map(|s| &mut s.blocks) {
            for i in 0..BLOCK {
                for j in 0..BLOCK {
                    if block.cells[i][j].is_finite() {
                        let (dr, dc) = block.offset(i, j);
                        block.ranks[i][j] = rank_key(rank[index(dr, dc)]);
                    }
                }
            }
        }
        self.ranked = cells
            .into_iter()
            .map(|(dr, dc)| [dr as i16, dc as i16])
            .collect();
    }
}

impl Superblock {
    fn cut(row: isize, col: isize, cell: &impl Fn(isize, isize) -> f32) -> Option<Self> {
        let side = SUPER as isize;
        let mut blocks: Vec<Block> = (0..side * side)
            .filter_map(|k| Block::cut(side * row - 2 + k / side, side * col - 2 + k % side, cell))
            .collect();
        blocks.sort_by(|a, b| b.max.total_cmp(&a.max));
        let max = blocks.first()?.max;
        Some(Self {
            row,
            col,
            max,
            blocks,
        })
    }
}

impl Block {
    fn cut(row: isize, col: isize, cell: &impl Fn(isize, isize) -> f32) -> Option<Self> {
        let mut block = Self {
            row,
            col,
            max: f32::NEG_INFINITY,
            cells: [[f32::NEG_INFINITY; BLOCK]; BLOCK],
            ranks: [[f32::INFINITY; BLOCK]; BLOCK],
        };
        for i in 0..BLOCK {
            for j in 0..BLOCK {
                let (dr, dc) = block.offset(i, j);
                let p = cell(dr, dc);
                block.cells[i][j] = p;
                block.max = block.max.max(p);
            }
        }
        (block.max > f32::NEG_INFINITY).then_some(block)
    }

    /// The offset from the apex of its cell `[i][j]`.
    pub(super) fn offset(&self, i: usize, j: usize) -> (isize, isize) {
        let side = BLOCK as isize;
        (
            side * self.row - 2 + i as isize,
            side * self.col - 2 + j as isize,
        )
    }
}
