//! The map in parts: large enough that their rims cost little, small enough to stay in the cache.
//!
//! A part's padded map and tables are made when its turn comes and forgotten after it, so working
//! memory does not grow with the map, and what bounds the search is local.

use super::field::{BLOCK, TILE};
use ndarray::{ArrayView2, s};
use pulp::Arch;
use std::ops::Range;

/// How the engine works.
#[derive(Clone, Copy)]
pub(super) struct Engine {
    /// The instruction set.
    pub(super) arch: Arch,
    /// About how many rows and columns a part has,
    pub(super) part: [usize; 2],
    /// and how many times as many as the tip reaches it has at least: rims cost.
    pub(super) rim: usize,
}

impl Engine {
    /// The best instruction set of this machine; parts of some megabytes.
    pub(super) fn new() -> Self {
        Self {
            arch: Arch::new(),
            part: [512, 1024],
            rim: 8,
        }
    }
}

/// A part of the map: the results that are wanted, and the map pixels that they depend on.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Part {
    pub(super) rows: Range<usize>,
    pub(super) cols: Range<usize>,
    pub(super) seen_rows: Range<usize>,
    pub(super) seen_cols: Range<usize>,
}

impl Part {
    /// Cuts a map of `dim` for a tip that reaches `reach` rows and columns from its apex.
    pub(super) fn cut(engine: Engine, dim: (usize, usize), reach: [usize; 2]) -> Vec<Self> {
        let dim = [dim.0, dim.1];
        let size = |axis: usize| engine.part[axis].max(engine.rim * reach[axis]);
        let rows = stretches(dim[0], size(0), BLOCK);
        let cols = stretches(dim[1], size(1), TILE);
        let seen = |wanted: &Range<usize>, axis: usize, grain: usize| {
            let first = wanted.start.saturating_sub(reach[axis]);
            first - first % grain..(wanted.end + reach[axis]).min(dim[axis])
        };
        rows.iter()
            .flat_map(|rows| cols.iter().map(move |cols| (rows, cols)))
            .map(|(rows, cols)| Self {
                rows: rows.clone(),
                cols: cols.clone(),
                seen_rows: seen(rows, 0, BLOCK),
                seen_cols: seen(cols, 1, TILE),
            })
            .collect()
    }

    /// What it sees of a map.
    pub(super) fn seen<'a, T>(&self, map: ArrayView2<'a, T>) -> ArrayView2<'a, T> {
        map.slice_move(s![self.seen_rows.clone(), self.seen_cols.clone()])
    }

    /// The first tile row of the part, counted in what it sees.
    pub(super) fn first_tile_row(&self) -> usize {
        (self.rows.start - self.seen_rows.start) / BLOCK
    }

    /// How many tile rows it has.
    pub(super) fn tile_rows(&self) -> usize {
        self.rows.len().div_ceil(BLOCK)
    }
}

/// `length` in stretches of nearly the same length near `size`, each beginning at a multiple of
/// `grain`, as tiles do.
fn stretches(length: usize, size: usize, grain: usize) -> Vec<Range<usize>> {
    let count = ((length + size / 2) / size).max(1);
    let step = length.div_ceil(count).next_multiple_of(grain).max(grain);
    let firsts = (0..length).step_by(step);
    firsts
        .map(|first| first..(first + step).min(length))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn parts_cover_what_is_wanted_once_and_see_as_far_as_the_tip() {
        for (dim, reach, size) in [
            ([1, 1], [0, 0], [4, 16]),
            ([37, 90], [3, 20], [8, 16]),
            ([2000, 3000], [32, 64], [512, 1024]),
        ] {
            let engine = Engine {
                arch: Arch::Scalar,
                part: size,
                rim: 0,
            };
            let parts = Part::cut(engine, (dim[0], dim[1]), reach);
            let area: usize = parts.iter().map(|p| p.rows.len() * p.cols.len()).sum();
            assert_eq!(area, dim[0] * dim[1]);
            for part in &parts {
                assert_eq!(
                    (part.seen_rows.start % BLOCK, part.seen_cols.start % TILE),
                    (0, 0)
                );
                assert_eq!((part.rows.start % BLOCK, part.cols.start % TILE), (0, 0));
                let above = part.rows.start.saturating_sub(reach[0]);
                assert!(part.seen_rows.start <= above && above - part.seen_rows.start < BLOCK);
                assert_eq!(part.seen_rows.end, (part.rows.end + reach[0]).min(dim[0]));
                assert_eq!(part.seen_cols.end, (part.cols.end + reach[1]).min(dim[1]));
            }
        }
    }
}
