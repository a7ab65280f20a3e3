//! The engine: grey-scale morphology with a non-flat structuring function.
//!
//! Conventions (see DEVELOPERS.md): a tip is an odd-by-odd grid `p`, apex 0 at the centre,
//! `p <= 0`, `-inf` outside. With offsets `u` from the apex
//!
//! - dilation, what the probe records: `I(x) = max over u of S(x + u) + p(u)`
//! - erosion, the reconstruction:      `R(s) = min over u of I(s - u) - p(u)`
//!
//! Voids (NaN) and everything outside the map constrain nothing. Where no pixel constrains,
//! the result is NaN.

//! An infinite height counts as a void, an infinite or NaN tip cell as outside the tip. Zeros in
//! results are plain zeros, never -0. Heights and depths up to 1e30 nm cannot overflow.
//! Everything here gives the same bits on one thread and on many, on every instruction set, and
//! as the plain twins in `reference.rs`.

mod contact;
mod dilation;
mod edges;
mod field;
mod flat;
mod part;
#[cfg(test)]
mod reference;
mod search;
#[cfg(test)]
mod tests;
mod tip;
mod touch;

use crate::error::{Error, ErrorKind, Result};
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2, ArrayViewMut2, s};
use part::Engine;
use std::ops::Range;
use tip::Order;

/// The scan that a probe of shape `tip` records of `surface`: `max over u of S(x + u) + p(u)`.
///
/// Errors: only when cancelled. An empty map gives an empty one, an empty tip a map of voids.
pub fn dilate(
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<f32>> {
    dilation::extreme(Engine::new(), surface, tip, Order::Max, progress)
}

/// The highest surface compatible with `scan`: `min over u of I(s - u) - p(u)`.
///
/// Errors: only when cancelled. An empty map gives an empty one, an empty tip a map of voids.
pub fn erode(
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<f32>> {
    dilation::extreme(Engine::new(), scan, tip, Order::Min, progress)
}

/// [`dilate`] into `scan`, whatever that holds: in memory that is in use already, or in a mapped
/// file, where maps larger than the memory can be worked on. Working memory stays at some
/// megabytes.
///
/// Errors: kind `Data` when the shapes differ or `scan` is not row by row in memory; when
/// cancelled, which leaves `scan` half done.
pub fn dilate_into(
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    scan: ArrayViewMut2<f32>,
    progress: &Progress,
) -> Result<()> {
    extreme_into(surface, tip, scan, Order::Max, progress)
}

/// [`erode`] into `surface`; see [`dilate_into`].
///
/// Errors: as there.
pub fn erode_into(
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    surface: ArrayViewMut2<f32>,
    progress: &Progress,
) -> Result<()> {
    extreme_into(scan, tip, surface, Order::Min, progress)
}

fn extreme_into(
    from: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    mut to: ArrayViewMut2<f32>,
    order: Order,
    progress: &Progress,
) -> Result<()> {
    same_shape(to.view(), from)?;
    let Some(to) = to.as_slice_mut() else {
        return Err(Error::new(
            ErrorKind::Data,
            "the map to be filled does not lie row by row in memory",
        )
        .remedy("Give a map in standard layout (C order)"));
    };
    dilation::extreme_into(Engine::new(), from, tip, order, to, progress)
}

/// Brings `surface`, the erosion of `scan` before its pixels in `rows` and `columns` changed, up to
/// date: only what the tip can reach from there is computed again.
///
/// Errors: kind `Data` when the shapes differ or the changed pixels lie beyond the map; when
/// cancelled, which leaves `surface` as it was.
pub fn erode_again(
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    mut surface: ArrayViewMut2<f32>,
    [rows, columns]: [Range<usize>; 2],
    progress: &Progress,
) -> Result<()> {
    same_shape(surface.view(), scan)?;
    if rows.end > scan.nrows() || columns.end > scan.ncols() {
        return Err(Error::new(
            ErrorKind::Data,
            format!(
                "pixels up to row {} and column {} changed, but the scan has {} x {}",
                rows.end,
                columns.end,
                scan.nrows(),
                scan.ncols()
            ),
        )
        .remedy("Give rows and columns of the scan"));
    }
    if rows.is_empty() || columns.is_empty() {
        return Ok(());
    }
    let (down, right) = (tip.nrows() / 2, tip.ncols() / 2);
    let wider = |range: &Range<usize>, by: usize, end: usize| {
        range.start.saturating_sub(by)..(range.end + by).min(end)
    };
    let again = [
        wider(&rows, down, scan.nrows()),
        wider(&columns, right, scan.ncols()),
    ];
    let seen = [
        wider(&again[0], down, scan.nrows()),
        wider(&again[1], right, scan.ncols()),
    ];
    let around = erode(
        scan.slice(s![seen[0].clone(), seen[1].clone()]),
        tip,
        progress,
    )?;
    let within =
        |axis: usize| again[axis].start - seen[axis].start..again[axis].end - seen[axis].start;
    surface
        .slice_mut(s![again[0].clone(), again[1].clone()])
        .assign(&around.slice(s![within(0), within(1)]));
    Ok(())
}

/// `dilate(erode(scan))`: what of the scan the tip explains; `<= scan` everywhere.
///
/// Errors: only when cancelled.
pub fn open(
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<f32>> {
    let eroded = erode(scan, tip, &progress.part(0.0, 0.5))?;
    dilate(eroded.view(), tip, &progress.part(0.5, 1.0))
}

/// The offset where nothing constrains.
pub const NO_CONTACT: [i16; 2] = [i16::MIN; 2];

/// For each scan pixel the tip offset that touched: `winner[[r, c]] = [dr, dc]`, so that the
/// surface point is `(r + dr, c + dc)`. Ties go to the offset nearest the apex (squared pixel
/// distance), then to the first in row-major order of `(dr, dc)`.
#[derive(Debug, Clone)]
pub struct Contacts {
    /// The dilation itself.
    pub heights: Array2<f32>,
    /// Winning offset `[dr, dc]`, [`NO_CONTACT`] where nothing constrains.
    pub offsets: Array2<[i16; 2]>,
}

/// Dilation that keeps which offset won.
///
/// Errors: only when cancelled.
pub fn contacts(
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Contacts> {
    contact::contacts(Engine::new(), surface, tip, progress)
}

/// Certainty values (contract of `certainty.npy`).
pub mod certainty {
    /// Nothing in the scan says that the tip was there.
    pub const NEVER: u8 = 0;
    /// A contact only together with others: one of them was touched, which is open.
    pub const BOUNDED: u8 = 1;
    /// The only contact of some probe position.
    pub const TOUCHED: u8 = 2;
    /// Void.
    pub const VOID: u8 = 255;
}

/// Fractions of the non-void surface pixels.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Reliability {
    /// Touched for certain.
    pub touched: f64,
    /// Contacts only together with others.
    pub bounded: f64,
    /// Never a contact.
    pub never: f64,
}

impl Reliability {
    /// Of a [`certainty_map`] or a part of it; all 0 where every pixel is void.
    pub fn of(certainty: ArrayView2<u8>) -> Self {
        let count = |value: u8| certainty.iter().filter(|&&c| c == value).count() as f64;
        let all = (certainty.len() as f64 - count(certainty::VOID)).max(1.0);
        Self {
            touched: count(certainty::TOUCHED) / all,
            bounded: count(certainty::BOUNDED) / all,
            never: count(certainty::NEVER) / all,
        }
    }
}

/// Which surface pixels the tip touched. `surface` is the erosion of `scan` by `tip`.
///
/// A scan pixel `x` can touch the surface pixels `x + u` with
/// `R(x + u) + p(u) >= I(x) - tolerance` (nm). Where these lie within `spread` rows and columns of
/// each other they count as one contact, and are `TOUCHED`: something there was touched for
/// certain. Else the contact is shared: if one of the pixels is `TOUCHED` already it explains the
/// position, otherwise all are `BOUNDED`. What no position needs is `NEVER`, void surface pixels
/// are `VOID`. Last, a pixel within half the spread of a touched one and within `tolerance` of its
/// height is `TOUCHED` as well: nothing tells the two apart.
///
/// On a scan without noise take a tolerance of the size of the rounding and a spread of 0: then
/// `TOUCHED` is the published certainty. Noise blurs where an apex of radius R touched by about
/// `sqrt(2 R tolerance)` to each side; the spread should allow for that, or a noisy flat counts as
/// bounded throughout.
/// Errors: kind `Data` when the shapes differ, or when cancelled.
/// Source: J. S. Villarrubia, J. Res. NIST 102, 425 (1997), doi 10.6028/jres.102.030 (the sole
/// contact; tolerance, spread and the explained positions are this program's).
pub fn certainty_map(
    surface: ArrayView2<f32>,
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    tolerance: f32,
    spread: [usize; 2],
    progress: &Progress,
) -> Result<Array2<u8>> {
    same_shape(surface, scan)?;
    let rule = touch::Rule { tolerance, spread };
    touch::certainty_map(Engine::new(), surface, scan, tip, rule, progress)
}

/// Surface pixels that lean on the edge of the scan or on a void: a pixel nobody saw, as low as
/// the lowest of the scan, could have pulled the reconstruction down there.
///
/// Errors: kind `Data` when the shapes differ, or when cancelled.
pub fn edge_leaning(
    scan: ArrayView2<f32>,
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<bool>> {
    same_shape(surface, scan)?;
    edges::edge_leaning(Engine::new(), scan, surface, tip, progress)
}

fn same_shape(surface: ArrayView2<f32>, scan: ArrayView2<f32>) -> Result<()> {
    if surface.dim() == scan.dim() {
        return Ok(());
    }
    let ((rows, columns), (scan_rows, scan_columns)) = (surface.dim(), scan.dim());
    Err(Error::new(
        ErrorKind::Data,
        format!(
            "a surface of {rows} x {columns} pixels does not belong to a scan of \
             {scan_rows} x {scan_columns}"
        ),
    )
    .remedy("Give the erosion of this very scan"))
}
