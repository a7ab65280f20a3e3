//! Which surface pixels the tip touched.

use super::certainty::{BOUNDED, NEVER, TOUCHED, VOID};
use super::dilation::Steps;
use super::field::{BLOCK, Field, LEFT, TILE, TOP, WINDOW_ROWS};
use super::part::{Engine, Part};
use super::search::{Tile, Visitor, Window, any_reaches, load, lowest, peaks, search};
use super::tip::{Block, Order, Tip};
use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2, s};
use pulp::{Simd, WithSimd};
use rayon::prelude::*;
use std::ops::Range;
use std::sync::Mutex;

/// Rows of the surface whose marks one lock guards.
const STRIP: usize = 64;

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
    engine: Engine,
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
    let search = Search {
        engine,
        tip: &Tip::new(tip, Order::Max, surface.dim(), false),
        surface,
        scan,
        rule,
    };
    let mut marks = Array2::from_elem(surface.dim(), NEVER);
    let mut field = Field::default();
    let sole = &progress.part(0.0, 0.6);
    let shared = search.mark_sole(&mut field, &mut marks, sole)?;
    search.mark_shared(&mut field, &mut marks, &shared, &progress.part(0.6, 1.0))?;
    let same_contact = search.same_contact(&marks);
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
    progress.report(1.0);
    Ok(marks)
}

/// All that a pass needs.
#[derive(Clone, Copy)]
struct Search<'s> {
    engine: Engine,
    tip: &'s Tip,
    surface: ArrayView2<'s, f32>,
    scan: ArrayView2<'s, f32>,
    rule: Rule,
}

impl<'s> Search<'s> {
    /// Marks the contacts of scan pixels that have only one: `TOUCHED`. The contacts of the others.
    /// `field` holds the last part afterwards.
    fn mark_sole(
        &self,
        field: &mut Field,
        marks: &mut Array2<u8>,
        progress: &Progress,
    ) -> Result<Vec<Band<'s>>> {
        let mut shared = Vec::new();
        let parts = self.parts();
        let steps = Steps::new(progress, &parts);
        for part in parts {
            field.load(
                self.engine.arch,
                part.seen(self.surface),
                Order::Max,
                progress,
            )?;
            let field = &*field;
            let strips = strips(marks);
            let mut bands = self.bands(part);
            bands.par_iter_mut().try_for_each(|band| {
                let mut left = Marks::new(field, self.tip, band);
                for row in 0..band.tile_rows() {
                    self.engine.arch.dispatch(SoleRow {
                        search: self,
                        field,
                        band,
                        marks: &mut left,
                        row,
                        progress,
                    });
                    steps.done()?;
                }
                left.merge(band, &strips, self.surface.ncols());
                Ok(())
            })?;
            shared.push(bands);
        }
        Ok(shared.into_iter().flatten().collect())
    }

    /// Marks the contacts of scan pixels that have several, unless one of them is marked already:
    /// `BOUNDED`.
    fn mark_shared(
        &self,
        field: &mut Field,
        marks: &mut Array2<u8>,
        shared: &[Band],
        progress: &Progress,
    ) -> Result<()> {
        let parts = shared.chunk_by(|a, b| a.part == b.part).count();
        for bands in shared.chunk_by(|a, b| a.part == b.part) {
            let part = &bands[0].part;
            progress.report(part.rows.start as f32 / self.surface.nrows() as f32);
            if bands.iter().all(|band| band.contacts.is_empty()) {
                continue;
            }
            // A single part is the one that is held already.
            if parts > 1 {
                field.load(
                    self.engine.arch,
                    part.seen(self.surface),
                    Order::Max,
                    progress,
                )?;
            }
            let field = &*field;
            let touched = padded(field, part.seen(marks.view()));
            let strips = strips(marks);
            bands.par_iter().try_for_each(|band| {
                let mut left = Marks::new(field, self.tip, band);
                self.engine.arch.dispatch(SharedBand {
                    field,
                    band,
                    touched: &touched,
                    marks: &mut left,
                    progress,
                });
                left.merge(band, &strips, self.surface.ncols());
                progress.check()
            })?;
        }
        Ok(())
    }

    fn parts(&self) -> Vec<Part> {
        Part::cut(self.engine, self.surface.dim(), self.tip.reach)
    }

    /// The part in bands. A band's marks reach as far beyond it as the tip does: a tall tip needs
    /// high bands.
    fn bands(&self, part: Part) -> Vec<Band<'s>> {
        let height = STRIP.max(4 * self.tip.reach[0]).next_multiple_of(BLOCK);
        let bands = part.rows.clone().step_by(height);
        bands
            .map(|first| Band {
                rows: first..(first + height).min(part.rows.end),
                part: part.clone(),
                thresholds: Vec::new(),
                contacts: Vec::new(),
            })
            .collect()
    }

    /// Surface pixels that the rule cannot tell from a touched one: within half the spread of it
    /// and within the tolerance of its height.
    fn same_contact(&self, marks: &Array2<u8>) -> Array2<bool> {
        let (rows, cols) = marks.dim();
        let [down, right] = self.rule.spread.map(|spread| spread / 2);
        let mut same = Array2::from_elem(marks.dim(), false);
        if down == 0 && right == 0 {
            return same;
        }
        ndarray::Zip::indexed(&mut same)
            .and(marks)
            .and(self.surface)
            .par_for_each(|(r, c), same, &mark, &z| {
                if mark == TOUCHED {
                    return;
                }
                let near = s![
                    r.saturating_sub(down)..(r + down + 1).min(rows),
                    c.saturating_sub(right)..(c + right + 1).min(cols)
                ];
                let mut others = marks.slice(near).into_iter().zip(self.surface.slice(near));
                *same = others.any(|(&mark, other)| {
                    mark == TOUCHED && (z - other).abs() <= self.rule.tolerance
                });
            });
        same
    }
}

/// Which surface pixels are marked as touched, laid out as the field's data.
fn padded(field: &Field, marks: ArrayView2<u8>) -> Vec<u32> {
    let mut padded = vec![0; field.data.len()];
    let rows = padded.par_chunks_exact_mut(field.stride).skip(TOP);
    rows.zip(marks.outer_iter().into_par_iter())
        .for_each(|(to, from)| {
            for (to, &mark) in to[LEFT..].iter_mut().zip(from) {
                *to = u32::from(mark == TOUCHED);
            }
        });
    padded
}

/// The surface's marks, strip by strip, each behind a lock.
fn strips(marks: &mut Array2<u8>) -> Vec<Mutex<&mut [u8]>> {
    let strip = STRIP * marks.ncols();
    let marks = marks.as_slice_mut().unwrap_or_default();
    marks.chunks_mut(strip).map(Mutex::new).collect()
}

/// Some tile rows of a part, and which blocks the pixels with several contacts touch.
struct Band<'s> {
    part: Part,
    rows: Range<usize>,
    /// Of each open tile and row of it, one vector: the height from which a sum counts as a touch;
    /// `+inf` where nothing is left to mark.
    thresholds: Vec<f32>,
    contacts: Vec<Open<'s>>,
}

/// A tile that has pixels with several contacts.
struct Open<'s> {
    tile: Tile,
    blocks: Vec<(&'s Block, [bool; BLOCK])>,
}

impl Band<'_> {
    fn tile_rows(&self) -> usize {
        self.rows.len().div_ceil(BLOCK)
    }

    /// Its first tile row, counted in what the part sees.
    fn first_tile_row(&self) -> usize {
        (self.rows.start - self.part.seen_rows.start) / BLOCK
    }
}

/// The marks that a band leaves.
struct Marks {
    /// The first padded row that can be marked.
    first: usize,
    stride: usize,
    /// By padded row (from `first`) and column.
    marks: Vec<u32>,
}

impl Marks {
    fn new(field: &Field, tip: &Tip, band: &Band) -> Self {
        let start = band.first_tile_row();
        let (mut above, mut below) = (0, 0);
        for block in tip.supers.iter().flat_map(|s| &s.blocks) {
            above = above.min(block.row);
            below = below.max(block.row);
        }
        // Windows begin at padded row 4 (tile row + block row + 1).
        let first = start.saturating_add_signed(above + 1);
        let last = (start + band.tile_rows()).saturating_add_signed(below);
        let last = last.min(field.fine_rows - 1).max(first);
        Self {
            first: first * BLOCK,
            stride: field.stride,
            // The last vector of a window may reach beyond its row.
            marks: vec![0; ((last - first) * BLOCK + WINDOW_ROWS) * field.stride + TILE],
        }
    }

    /// From the window's first pixel on.
    #[inline(always)]
    fn at(&mut self, window: Window) -> &mut [u32] {
        &mut self.marks[(window.row - self.first) * self.stride + window.col..]
    }

    /// Takes them into the surface's.
    fn merge(&self, band: &Band, strips: &[Mutex<&mut [u8]>], stride: usize) {
        let (seen_rows, seen_cols) = (&band.part.seen_rows, &band.part.seen_cols);
        for (i, from) in self.marks.chunks_exact(self.stride).enumerate() {
            let row = (self.first + i)
                .checked_sub(TOP)
                .map(|r| r + seen_rows.start);
            let Some(row) = row.filter(|row| seen_rows.contains(row)) else {
                continue;
            };
            // A poisoned lock cannot be: nothing here panics.
            let Ok(mut to) = strips[row / STRIP].lock() else {
                continue;
            };
            let to = &mut to[row % STRIP * stride..][seen_cols.clone()];
            for (to, &mark) in to.iter_mut().zip(&from[LEFT..]) {
                *to = (*to).max(mark as u8);
            }
        }
    }
}

/// One row of tiles, searched for contacts.
struct SoleRow<'a, 's> {
    search: &'a Search<'s>,
    field: &'a Field,
    band: &'a mut Band<'s>,
    marks: &'a mut Marks,
    /// Counted in the band.
    row: usize,
    progress: &'a Progress,
}

impl WithSimd for SoleRow<'_, '_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let (band, tip) = (self.band, self.search.tip);
        let row = band.first_tile_row() + self.row;
        let top = band.rows.start + BLOCK * self.row;
        let rows = top..(top + BLOCK).min(band.rows.end);
        let cols = band.part.cols.clone();
        let width = cols.len().next_multiple_of(TILE);
        let tolerance = self.search.rule.tolerance;
        let mut all = vec![f32::INFINITY; BLOCK * width];
        let scan = self.search.scan.slice(s![rows, cols.clone()]);
        for (to, from) in all.chunks_exact_mut(width).zip(scan.outer_iter()) {
            for (to, &height) in to.iter_mut().zip(from) {
                let threshold = height - tolerance;
                if height.abs() < f32::INFINITY && !threshold.is_nan() {
                    // No padding (-inf) ever counts.
                    *to = threshold.max(f32::MIN);
                }
            }
        }
        let mut touching = Vec::new();
        for col in (0..cols.len()).step_by(S::F32_LANES) {
            if self.progress.is_cancelled() {
                return;
            }
            let mut thresholds = [simd.splat_f32s(0.0); BLOCK];
            for (r, vector) in thresholds.iter_mut().enumerate() {
                *vector = load::<S>(&all[r * width + col..]);
            }
            let floors = lowest(simd, &thresholds);
            touching.clear();
            let mut touch = Touch {
                thresholds,
                floors,
                floor: simd.reduce_min_f32s(floors),
                touching: &mut touching,
            };
            let tile = Tile {
                row,
                col: cols.start - band.part.seen_cols.start + col,
            };
            search(simd, self.field, tip, tile, &mut touch);
            let (values, open) = soles(simd, &touching, &thresholds, self.search.rule.spread);
            if any(simd, &values) {
                for contact in &touching {
                    let marks = self.marks.at(contact.window);
                    leave(simd, contact, &thresholds, &values, marks);
                }
            }
            let far = simd.splat_f32s(f32::INFINITY);
            if simd.first_true_m32s(simd.less_than_f32s(lowest(simd, &open), far)) < S::F32_LANES {
                for vector in &open {
                    let lanes = pulp::bytemuck::cast_slice(std::slice::from_ref(vector));
                    band.thresholds.extend_from_slice(lanes);
                }
                let blocks = touching.iter().map(|c| (c.block, c.rows)).collect();
                band.contacts.push(Open { tile, blocks });
            }
        }
    }
}

/// The open tiles of a band.
struct SharedBand<'a, 's> {
    field: &'a Field,
    band: &'a Band<'s>,
    touched: &'a [u32],
    marks: &'a mut Marks,
    progress: &'a Progress,
}

impl WithSimd for SharedBand<'_, '_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let all = self.band.thresholds.chunks_exact(BLOCK * S::F32_LANES);
        let mut touching = Vec::new();
        for (open, from) in self.band.contacts.iter().zip(all) {
            if self.progress.is_cancelled() {
                return;
            }
            let mut thresholds = [simd.splat_f32s(0.0); BLOCK];
            for (r, vector) in thresholds.iter_mut().enumerate() {
                *vector = load::<S>(&from[r * S::F32_LANES..]);
            }
            touching.clear();
            for &(block, rows) in &open.blocks {
                if let Some(window) = Window::of(self.field, open.tile, block) {
                    touching.push(Contact {
                        window,
                        block,
                        rows,
                    });
                }
            }
            let values = unexplained(simd, &touching, &thresholds, self.touched);
            if any(simd, &values) {
                for contact in &touching {
                    let marks = self.marks.at(contact.window);
                    leave(simd, contact, &thresholds, &values, marks);
                }
            }
        }
    }
}

/// Whether any pixel of a tile is to be marked.
#[inline(always)]
fn any<S: Simd>(simd: S, values: &[S::u32s; BLOCK]) -> bool {
    let mut all = values[0];
    for &row in &values[1..] {
        all = simd.or_u32s(all, row);
    }
    let marked = simd.greater_than_u32s(all, simd.splat_u32s(0));
    simd.first_true_m32s(marked) < S::U32_LANES
}

/// The first vector of a slice.
#[inline(always)]
fn load_u32s<S: Simd>(from: &[u32]) -> S::u32s {
    pulp::bytemuck::pod_read_unaligned(pulp::bytemuck::cast_slice(&from[..S::U32_LANES]))
}

#[inline(always)]
fn store<V: pulp::bytemuck::Pod, T: pulp::bytemuck::Pod>(to: &mut [T], vector: &V) {
    let from: &[T] = pulp::bytemuck::cast_slice(std::slice::from_ref(vector));
    to[..from.len()].copy_from_slice(from);
}

/// A block with which some pixel of the tile touches.
#[derive(Clone, Copy)]
struct Contact<'a, 't> {
    window: Window<'a>,
    block: &'t Block,
    /// Which rows of the tile touch.
    rows: [bool; BLOCK],
}

impl Contact<'_, '_> {
    /// The sums of row `r` of the tile with each of the block's cells. Row by row all that is done
    /// with them stays in registers.
    #[inline(always)]
    fn sums<S: Simd>(&self, simd: S, r: usize) -> [[S::f32s; BLOCK]; BLOCK] {
        let rows = self.window.rows::<S>();
        let mut sums = [[simd.splat_f32s(0.0); BLOCK]; BLOCK];
        for i in 0..BLOCK {
            for j in 0..BLOCK {
                let cell = simd.splat_f32s(self.block.cells[i][j]);
                sums[i][j] = simd.add_f32s(load::<S>(&rows[r + i][j..]), cell);
            }
        }
        sums
    }
}

/// Keeps the blocks with which some pixel of the tile touches.
struct Touch<'a, 't, 'c, S: Simd> {
    thresholds: [S::f32s; BLOCK],
    floors: S::f32s,
    floor: f32,
    touching: &'c mut Vec<Contact<'a, 't>>,
}

impl<'a, 't, S: Simd> Visitor<'a, 't, S> for Touch<'a, 't, '_, S> {
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
        if any_reaches(simd, &peaks, &self.thresholds) {
            let mut rows = [false; BLOCK];
            for (r, row) in rows.iter_mut().enumerate() {
                let hit = simd.greater_than_or_equal_f32s(peaks[r], self.thresholds[r]);
                *row = simd.first_true_m32s(hit) < S::F32_LANES;
            }
            self.touching.push(Contact {
                window,
                block,
                rows,
            });
        }
    }

    #[inline(always)]
    fn settle(&mut self, _: S) {}
}

/// For each pixel of a tile: `TOUCHED` if its contacts count as one, else 0; and its threshold if
/// they count as several, else `+inf`.
#[inline(always)]
fn soles<S: Simd>(
    simd: S,
    touching: &[Contact],
    thresholds: &[S::f32s; BLOCK],
    spread: [usize; 2],
) -> ([S::u32s; BLOCK], [S::f32s; BLOCK]) {
    let far = simd.splat_f32s(f32::INFINITY);
    let near = simd.splat_f32s(f32::NEG_INFINITY);
    let (mut low, mut high) = ([[far; BLOCK]; 2], [[near; BLOCK]; 2]);
    for contact in touching {
        for r in 0..BLOCK {
            if !contact.rows[r] {
                continue;
            }
            let sums = contact.sums(simd, r);
            let mut peaks = [[near; BLOCK]; 2];
            for i in 0..BLOCK {
                for j in 0..BLOCK {
                    peaks[0][i] = simd.max_f32s(peaks[0][i], sums[i][j]);
                    peaks[1][j] = simd.max_f32s(peaks[1][j], sums[i][j]);
                }
            }
            for axis in 0..2 {
                let corner = BLOCK as isize * [contact.block.row, contact.block.col][axis];
                let (mut least, mut most) = (low[axis][r], high[axis][r]);
                for (k, &peak) in peaks[axis].iter().enumerate() {
                    // Tip rows and columns are far below 2^24: exact as f32.
                    let at = simd.splat_f32s((corner + k as isize) as f32);
                    let hit = simd.greater_than_or_equal_f32s(peak, thresholds[r]);
                    least = simd.select_f32s(hit, simd.min_f32s(least, at), least);
                    most = simd.select_f32s(hit, simd.max_f32s(most, at), most);
                }
                (low[axis][r], high[axis][r]) = (least, most);
            }
        }
    }
    let mut values = [simd.splat_u32s(0); BLOCK];
    let mut open = [far; BLOCK];
    for r in 0..BLOCK {
        let some = simd.less_than_f32s(low[0][r], far);
        let mut one = some;
        for axis in 0..2 {
            let extent = simd.sub_f32s(high[axis][r], low[axis][r]);
            let most = simd.splat_f32s(spread[axis] as f32);
            one = simd.and_m32s(one, simd.less_than_or_equal_f32s(extent, most));
        }
        let touched = simd.splat_u32s(u32::from(TOUCHED));
        values[r] = simd.select_u32s(one, touched, values[r]);
        let several = simd.select_f32s(one, far, thresholds[r]);
        open[r] = simd.select_f32s(some, several, far);
    }
    (values, open)
}

/// For each open pixel of a tile: `BOUNDED` unless it touches what is marked as touched, then 0.
#[inline(always)]
fn unexplained<S: Simd>(
    simd: S,
    touching: &[Contact],
    thresholds: &[S::f32s; BLOCK],
    touched: &[u32],
) -> [S::u32s; BLOCK] {
    let zero = simd.splat_u32s(0);
    let mut explained = [zero; BLOCK];
    let mut open = [false; BLOCK];
    let far = simd.splat_f32s(f32::INFINITY);
    for r in 0..BLOCK {
        let some = simd.less_than_f32s(thresholds[r], far);
        open[r] = simd.first_true_m32s(some) < S::F32_LANES;
    }
    for contact in touching {
        let window = contact.window;
        for r in 0..BLOCK {
            if !(contact.rows[r] && open[r]) {
                continue;
            }
            let sums = contact.sums(simd, r);
            for i in 0..BLOCK {
                let row = &touched[(window.row + r + i) * window.stride() + window.col..];
                for j in 0..BLOCK {
                    let marks = load_u32s::<S>(&row[j..]);
                    let both = simd.or_u32s(explained[r], marks);
                    let hit = simd.greater_than_or_equal_f32s(sums[i][j], thresholds[r]);
                    explained[r] = simd.select_u32s(hit, both, explained[r]);
                }
            }
        }
    }
    let bounded = simd.splat_u32s(u32::from(BOUNDED));
    let mut values = [zero; BLOCK];
    for (value, &marks) in values.iter_mut().zip(&explained) {
        *value = simd.select_u32s(simd.equal_u32s(marks, zero), bounded, zero);
    }
    values
}

/// Leaves the marks of a block on its window: of each pixel the value given to it, as bits.
///
/// What the block's four columns leave is shifted into place in registers: a load that overlaps a
/// fresh store only in part would have to wait for it.
#[inline(always)]
fn leave<S: Simd>(
    simd: S,
    contact: &Contact,
    thresholds: &[S::f32s; BLOCK],
    values: &[S::u32s; BLOCK],
    marks: &mut [u32],
) {
    let zero = simd.splat_u32s(0);
    let lanes = load_u32s::<S>(&LANES);
    let (mut here, mut beyond) = ([zero; WINDOW_ROWS], [zero; WINDOW_ROWS]);
    let rows = contact.window.rows::<S>();
    for j in 0..BLOCK {
        let mut map = [simd.splat_f32s(0.0); WINDOW_ROWS];
        for i in 0..WINDOW_ROWS {
            map[i] = load::<S>(&rows[i][j..]);
        }
        let mut column = [zero; WINDOW_ROWS];
        for i in 0..BLOCK {
            let cell = simd.splat_f32s(contact.block.cells[i][j]);
            for r in 0..BLOCK {
                let sum = simd.add_f32s(map[r + i], cell);
                let hit = simd.greater_than_or_equal_f32s(sum, thresholds[r]);
                let both = simd.or_u32s(column[r + i], values[r]);
                column[r + i] = simd.select_u32s(hit, both, column[r + i]);
            }
        }
        if S::U32_LANES < BLOCK {
            // Without vectors there is nothing to shift.
            for (row, &new) in column.iter().enumerate() {
                let to = &mut marks[row * contact.window.stride() + j..];
                let old = load_u32s::<S>(to);
                store(to, &simd.or_u32s(old, new));
            }
            continue;
        }
        let inside = simd.greater_than_or_equal_u32s(lanes, simd.splat_u32s(j as u32));
        for row in 0..WINDOW_ROWS {
            let turned = simd.rotate_right_u32s(column[row], j);
            here[row] = simd.or_u32s(here[row], simd.select_u32s(inside, turned, zero));
            beyond[row] = simd.or_u32s(beyond[row], simd.select_u32s(inside, zero, turned));
        }
    }
    let stride = contact.window.stride();
    for row in 0..WINDOW_ROWS {
        for (at, new) in [(0, here[row]), (S::U32_LANES, beyond[row])] {
            if simd.first_true_m32s(simd.greater_than_u32s(new, zero)) < S::U32_LANES {
                let to = &mut marks[row * stride + at..];
                let old = load_u32s::<S>(to);
                store(to, &simd.or_u32s(old, new));
            }
        }
    }
}

const LANES: [u32; TILE] = [0, 1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 15];
