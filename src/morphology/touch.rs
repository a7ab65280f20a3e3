//! Which surface pixels the tip touched.

use super::certainty::{BOUNDED, NEVER, TOUCHED, VOID};
use super::dilation::Steps;
use super::field::{BLOCK, Field, LEFT, TILE, TOP, WINDOW_ROWS};
use super::search::{Tile, Vector, Visitor, Window, any_reaches, load, lowest, peaks, search};
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

/// When tip and surface count as touching.
#[derive(Clone, Copy)]
pub(super) struct Rule {
    /// How far below the scan a sum still touches, nm.
    pub(super) tolerance: f32,
    /// Rows and columns over which contacts spread and still count as one.
    pub(super) spread: [usize; 2],
}

/// The certainty map; see the public function.
pub(super) fn certainty_map(
    arch: Arch,
    surface: ArrayView2<f32>,
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    rule: Rule,
    progress: &Progress,
) -> Result<Array2<u8>> {
    progress.check()?;
    if surface.is_empty() {
        return Ok(Array2::zeros(surface.dim()));
    }
    let scan = scan.as_standard_layout();
    let search = Search {
        arch,
        tip: &Tip::new(tip, Order::Max, surface.dim(), false),
        field: &Field::new(arch, surface, Order::Max, progress)?,
        scan: scan.as_slice().unwrap_or_default(),
        rule,
    };
    let mut marks = Array2::from_elem(surface.dim(), NEVER);
    let mut shared = vec![false; surface.len()];
    search.pass(
        &mut marks,
        &mut shared,
        Pass::Sole,
        &progress.part(0.0, 0.5),
    )?;
    let touched = search.padded(&marks);
    let rest = &progress.part(0.5, 1.0);
    search.pass(&mut marks, &mut shared, Pass::Shared(&touched), rest)?;
    let same_contact = search.same_contact(&marks, surface);
    ndarray::Zip::from(&mut marks)
        .and(surface)
        .and(&same_contact)
        .par_for_each(|mark, s, &same| {
            if !s.is_finite() {
                *mark = VOID;
            } else if same {
                *mark = TOUCHED;
            }
        });
    Ok(marks)
}

/// What a pass over the scan marks.
#[derive(Clone, Copy)]
enum Pass<'a> {
    /// The contacts of scan pixels that have only one: `TOUCHED`. Notes which have several.
    Sole,
    /// The contacts of the other scan pixels, unless one of them is marked already: `BOUNDED`.
    /// The marks lie as [`Field::data`] does.
    Shared(&'a [u32]),
}

/// All that a pass needs.
#[derive(Clone, Copy)]
struct Search<'a> {
    arch: Arch,
    field: &'a Field,
    tip: &'a Tip,
    scan: &'a [f32],
    rule: Rule,
}

impl Search<'_> {
    /// Marks the surface; `shared` says of each scan pixel whether its contacts count as several.
    fn pass(
        &self,
        marks: &mut Array2<u8>,
        shared: &mut [bool],
        pass: Pass,
        progress: &Progress,
    ) -> Result<()> {
        let bands: Vec<Mutex<&mut [u8]>> = marks
            .as_slice_mut()
            .unwrap_or_default()
            .chunks_mut(BAND * self.field.cols)
            .map(Mutex::new)
            .collect();
        let step = Steps::new(progress, self.field.rows);
        let shared = shared.par_chunks_mut(BAND * self.field.cols).enumerate();
        shared.try_for_each(|(band, shared)| {
            let mut band = Band::new(self.field, self.tip, band);
            for row in band.tile_rows.clone() {
                self.arch.dispatch(TouchRow {
                    band: &mut band,
                    search: self,
                    shared,
                    pass,
                    row,
                    progress,
                });
                step.done()?;
            }
            band.merge(&bands);
            Ok(())
        })
    }

    /// Surface pixels that the rule cannot tell from a touched one: within half the spread of it
    /// and within the tolerance of its height.
    fn same_contact(&self, marks: &Array2<u8>, surface: ArrayView2<f32>) -> Array2<bool> {
        let (rows, cols) = marks.dim();
        let [down, right] = self.rule.spread.map(|spread| spread / 2);
        let mut same = Array2::from_elem(marks.dim(), false);
        if down == 0 && right == 0 {
            return same;
        }
        ndarray::Zip::indexed(&mut same)
            .and(marks)
            .and(surface)
            .par_for_each(|(r, c), same, &mark, &s| {
                let near = ndarray::s![
                    r.saturating_sub(down)..(r + down + 1).min(rows),
                    c.saturating_sub(right)..(c + right + 1).min(cols)
                ];
                *same =
                    mark != TOUCHED
                        && marks.slice(near).iter().zip(surface.slice(near)).any(
                            |(&mark, other)| {
                                mark == TOUCHED && (s - other).abs() <= self.rule.tolerance
                            },
                        );
            });
        same
    }

    /// The marks laid out as the field's data.
    fn padded(&self, marks: &Array2<u8>) -> Vec<u32> {
        let field = self.field;
        let mut padded = vec![0; field.data.len()];
        let rows = padded.chunks_exact_mut(field.stride).skip(TOP);
        for (to, from) in rows.zip(marks.rows()) {
            for (to, &mark) in to[LEFT..].iter_mut().zip(from) {
                *to = u32::from(mark);
            }
        }
        padded
    }
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
    search: &'b Search<'b>,
    /// The band's part of the flags.
    shared: &'b mut [bool],
    pass: Pass<'b>,
    row: usize,
    progress: &'b Progress,
}

impl WithSimd for TouchRow<'_, '_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(mut self, simd: S) {
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
                floors,
                floor: simd.reduce_min_f32s(floors),
                touching: &mut touching,
            };
            search(simd, field, tip, tile, &mut touch);
            let values = match self.pass {
                Pass::Sole => {
                    let sole = soles(simd, &touching, &thresholds, self.search.rule.spread);
                    self.note_shared(col, S::F32_LANES, &sole);
                    values(simd, TOUCHED, |r, lane| sole[r][lane] == Sole::Yes)
                }
                Pass::Shared(touched) => {
                    let explained = explained(simd, &touching, &thresholds, touched);
                    values(simd, BOUNDED, |r, lane| lanes(&explained[r])[lane] == 0)
                }
            };
            let Some(values) = values else { continue };
            for &(window, block) in &touching {
                let at = (window.row - self.band.first) * field.stride + window.col;
                let marks = &mut self.band.marks[at..];
                mark(simd, window, block, &thresholds, &values, marks);
            }
        }
    }
}

impl TouchRow<'_, '_> {
    /// The tile row's part of the flags, from its first row on.
    #[inline(always)]
    fn flags(&mut self) -> &mut [bool] {
        let above = BLOCK * (self.row - self.band.tile_rows.start);
        &mut self.shared[above * self.band.field.cols..]
    }

    #[inline(always)]
    fn note_shared(&mut self, col: usize, lanes: usize, sole: &[[Sole; TILE]; BLOCK]) {
        let cols = self.band.field.cols;
        for (flags, sole) in self.flags().chunks_exact_mut(cols).zip(sole) {
            for (flag, &sole) in flags[col..].iter_mut().zip(&sole[..lanes]) {
                *flag = sole == Sole::No;
            }
        }
    }

    /// The height from which a sum counts as a touch; `+inf` for voids, beyond the map, and where
    /// this pass has nothing to mark.
    #[inline(always)]
    fn thresholds<S: Simd>(&mut self, simd: S, col: usize) -> [S::f32s; BLOCK] {
        let mut tile = [simd.splat_f32s(f32::INFINITY); BLOCK];
        let cols = self.band.field.cols;
        let rows = self.search.scan.chunks_exact(cols).skip(BLOCK * self.row);
        let tolerance = self.search.rule.tolerance;
        let all = matches!(self.pass, Pass::Sole);
        let rows = rows.zip(self.flags().chunks_exact(cols));
        for (vector, (row, flags)) in tile.iter_mut().zip(rows) {
            let pixels = row[col..].iter().zip(&flags[col..]);
            for (lane, (&height, &shared)) in vector.lanes_mut().iter_mut().zip(pixels) {
                let threshold = height - tolerance;
                if height.is_finite() && !threshold.is_nan() && (all || shared) {
                    // No padding (-inf) ever counts.
                    *lane = threshold.max(f32::MIN);
                }
            }
        }
        tile
    }
}

/// Keeps the blocks in which some pixel of the tile touches.
struct Touch<'a, 't, S: Simd> {
    thresholds: [S::f32s; BLOCK],
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
        if any_reaches(simd, &peaks(simd, window, block), &self.thresholds) {
            self.touching.push((window, block));
        }
    }

    #[inline(always)]
    fn settle(&mut self, _: S) {}
}

/// Calls `f` with each cell of a block (its row and column in the block), each row of the tile,
/// and where the two touch.
#[inline(always)]
fn for_each_hit<S: Simd>(
    simd: S,
    (window, block): (Window, &Block),
    thresholds: &[S::f32s; BLOCK],
    mut f: impl FnMut(usize, usize, usize, S::m32s),
) {
    let rows = window.rows::<S>();
    for j in 0..BLOCK {
        for i in 0..BLOCK {
            let cell = simd.splat_f32s(block.cells[i][j]);
            for r in 0..BLOCK {
                let sum = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
                f(i, j, r, simd.greater_than_or_equal_f32s(sum, thresholds[r]));
            }
        }
    }
}

/// Whether a scan pixel has one contact only.
#[derive(Clone, Copy, PartialEq)]
enum Sole {
    Yes,
    No,
    /// It has no contact at all.
    None,
}

/// For each pixel of a tile, row by row, whether its contacts count as one.
#[inline(always)]
fn soles<S: Simd>(
    simd: S,
    touching: &[(Window, &Block)],
    thresholds: &[S::f32s; BLOCK],
    spread: [usize; 2],
) -> [[Sole; TILE]; BLOCK] {
    let far = simd.splat_f32s(f32::INFINITY);
    let near = simd.splat_f32s(f32::NEG_INFINITY);
    let (mut top, mut left) = ([far; BLOCK], [far; BLOCK]);
    let (mut bottom, mut right) = ([near; BLOCK], [near; BLOCK]);
    for &(window, block) in touching {
        for_each_hit(simd, (window, block), thresholds, |i, j, r, hit| {
            // Tip rows and columns are far below 2^24: exact as f32.
            let row = simd.splat_f32s((BLOCK as isize * block.row + i as isize) as f32);
            let col = simd.splat_f32s((BLOCK as isize * block.col + j as isize) as f32);
            top[r] = simd.select_f32s(hit, simd.min_f32s(top[r], row), top[r]);
            bottom[r] = simd.select_f32s(hit, simd.max_f32s(bottom[r], row), bottom[r]);
            left[r] = simd.select_f32s(hit, simd.min_f32s(left[r], col), left[r]);
            right[r] = simd.select_f32s(hit, simd.max_f32s(right[r], col), right[r]);
        });
    }
    let within = |low: &S::f32s, high: &S::f32s, lane: usize, most: usize| {
        high.lanes()[lane] - low.lanes()[lane] <= most as f32
    };
    let mut soles = [[Sole::None; TILE]; BLOCK];
    for (r, soles) in soles.iter_mut().enumerate() {
        for (lane, sole) in soles.iter_mut().enumerate().take(S::F32_LANES) {
            if top[r].lanes()[lane] < f32::INFINITY {
                let one = within(&top[r], &bottom[r], lane, spread[0])
                    && within(&left[r], &right[r], lane, spread[1]);
                *sole = if one { Sole::Yes } else { Sole::No };
            }
        }
    }
    soles
}

/// For each pixel of a tile, whether it touches (non-zero) what is marked as touched.
#[inline(always)]
fn explained<S: Simd>(
    simd: S,
    touching: &[(Window, &Block)],
    thresholds: &[S::f32s; BLOCK],
    touched: &[u32],
) -> [S::u32s; BLOCK] {
    let mut explained = [simd.splat_u32s(0); BLOCK];
    for &(window, block) in touching {
        for_each_hit(simd, (window, block), thresholds, |i, j, r, hit| {
            let at = (window.row + r + i) * window.stride() + window.col + j;
            let marks: S::u32s = pulp::bytemuck::pod_read_unaligned(pulp::bytemuck::cast_slice(
                &touched[at..at + S::U32_LANES],
            ));
            let both = simd.or_u32s(explained[r], marks);
            explained[r] = simd.select_u32s(hit, both, explained[r]);
        });
    }
    explained
}

#[inline(always)]
fn lanes<V: pulp::bytemuck::Pod>(vector: &V) -> &[u32] {
    pulp::bytemuck::cast_slice(std::slice::from_ref(vector))
}

/// `value` for the pixels of a tile that are `wanted` (row, lane), 0 for the others; `None` if
/// none is.
#[inline(always)]
fn values<S: Simd>(
    simd: S,
    value: u8,
    wanted: impl Fn(usize, usize) -> bool,
) -> Option<[S::u32s; BLOCK]> {
    let mut values = [simd.splat_u32s(0); BLOCK];
    let mut any = false;
    for (r, vector) in values.iter_mut().enumerate() {
        let vector: &mut [u32] = pulp::bytemuck::cast_slice_mut(std::slice::from_mut(vector));
        for (lane, to) in vector.iter_mut().enumerate() {
            if wanted(r, lane) {
                *to = u32::from(value);
                any = true;
            }
        }
    }
    any.then_some(values)
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
