//! Planes, polynomials, row alignment, masks, noise and drift figures.

use crate::error::Result;
use crate::heightmap::{HeightMap, Region};
use crate::progress::Progress;
use ndarray::Array2;

/// How to level.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Method {
    /// Leave the heights as they are.
    None,
    /// A robust plane on the dominant flat, then row alignment where row offsets stand out.
    #[default]
    Auto,
    /// A least-squares plane on the chosen regions, or on everything when none is chosen.
    Plane,
    /// A least-squares polynomial of total order 1-5 on the chosen regions or on everything.
    Polynomial {
        /// Total order, 1 to 5.
        order: u8,
    },
    /// As `Auto`, with row alignment on base-plane pixels always.
    Rows,
}

/// What to level with.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Settings {
    /// How.
    pub method: Method,
    /// Where the reference surface is taken from; empty = everywhere (or found, for `Auto`).
    pub regions: Vec<Region>,
}

/// A row whose offset from its neighbours stands out from the noise.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RowJump {
    /// Row index.
    pub row: usize,
    /// Offset from the row before, nm.
    pub jump_nm: f64,
}

/// A levelled map and what was seen on the way.
#[derive(Debug, Clone)]
pub struct Leveled {
    /// The levelled map; the base plane is at height 0 where one was found.
    pub map: HeightMap,
    /// Pixels taken as the base plane, `[row, col]`.
    pub base: Array2<bool>,
    /// Standard deviation of the white part of the noise, nm; `None` when it cannot be had.
    pub noise_nm: Option<f64>,
    /// Slope removed along x and y, nm per nm.
    pub slope: [f64; 2],
    /// Rows that jump, named.
    pub row_jumps: Vec<RowJump>,
    /// Height drift along the slow axis that rows showed beyond the plane, peak to peak, nm.
    pub drift_nm: Option<f64>,
    /// Plain sentences for the user.
    pub warnings: Vec<String>,
}

/// Levels `map`.
pub fn level(_map: &HeightMap, _settings: &Settings, _progress: &Progress) -> Result<Leveled> {
    todo!()
}

/// The white-noise standard deviation of `map`, nm.
pub fn noise(_map: &HeightMap) -> Option<f64> {
    todo!()
}
