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

mod reference;

use crate::error::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};

/// The scan that a probe of shape `tip` records of `surface`: `max over u of S(x + u) + p(u)`.
pub fn dilate(
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<f32>> {
    progress.check()?;
    Ok(reference::dilate(surface, tip))
}

/// The highest surface compatible with `scan`: `min over u of I(s - u) - p(u)`.
pub fn erode(
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<f32>> {
    progress.check()?;
    Ok(reference::erode(scan, tip))
}

/// `dilate(erode(scan))`: what of the scan the tip explains; `<= scan` everywhere.
pub fn open(
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<f32>> {
    let eroded = erode(scan, tip, &progress.part(0.0, 0.5))?;
    dilate(eroded.view(), tip, &progress.part(0.5, 1.0))
}

/// For each scan pixel the tip offset that touched: `winner[[r, c]] = [dr, dc]`, so that the
/// surface point is `(r + dr, c + dc)`. Ties go to the offset nearest the apex (squared pixel
/// distance), then to the first in row-major order of `(dr, dc)`.
#[derive(Debug, Clone)]
pub struct Contacts {
    /// The dilation itself.
    pub heights: Array2<f32>,
    /// Winning offset `[dr, dc]`, `[i16::MIN; 2]` where nothing constrains.
    pub offsets: Array2<[i16; 2]>,
}

/// Dilation that keeps which offset won.
pub fn contacts(
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Contacts> {
    progress.check()?;
    Ok(reference::contacts(surface, tip))
}

/// Certainty values (contract of `certainty.npy`).
pub mod certainty {
    /// Never a contact.
    pub const NEVER: u8 = 0;
    /// A contact only together with others.
    pub const BOUNDED: u8 = 1;
    /// The only contact of some probe position.
    pub const TOUCHED: u8 = 2;
    /// Void.
    pub const VOID: u8 = 255;
}

/// Which surface pixels the tip touched. `surface` is the erosion of `scan` by `tip`.
///
/// A scan pixel `x` touches the surface pixels `x + u` with `R(x + u) + p(u) >= I(x) - tolerance`
/// (nm). A surface pixel that is the only one touched at some `x` is `TOUCHED`; one touched only
/// together with others `BOUNDED`; else `NEVER`. Void surface pixels are `VOID`.
/// Source: J. S. Villarrubia, J. Res. NIST 102, 425 (1997), doi 10.6028/jres.102.030.
pub fn certainty_map(
    surface: ArrayView2<f32>,
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    tolerance: f32,
    progress: &Progress,
) -> Result<Array2<u8>> {
    progress.check()?;
    Ok(reference::certainty_map(surface, scan, tip, tolerance))
}

/// Surface pixels that lean on the edge of the scan or on a void: a pixel nobody saw, as low as
/// the lowest of the scan, could have pulled the reconstruction down there.
pub fn edge_leaning(
    scan: ArrayView2<f32>,
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    progress: &Progress,
) -> Result<Array2<bool>> {
    progress.check()?;
    Ok(reference::edge_leaning(scan, surface, tip))
}
