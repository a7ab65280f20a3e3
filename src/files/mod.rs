//! Readers and writers of open formats, sniffing, calibration sidecars, limits.

use crate::error::Result;
use crate::heightmap::{HeightMap, Pitch};
use std::path::Path;

/// What the user adds to what a file says. `None` everywhere means: take the file's word.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct OpenOptions {
    /// Pixel pitch for files that carry none. Overrides the file's when both are there
    /// (said in the provenance).
    pub pitch: Option<Pitch>,
    /// Unit of the heights for files that carry none ("nm", "um", ...), a name that
    /// [`crate::units::nanometres_per`] knows.
    pub height_unit: Option<String>,
    /// Which map of a file that holds several: page, layer or array, counted from 0.
    pub map: Option<usize>,
}

/// Opens the height map in `path`; the format is found by content.
pub fn open(_path: &Path, _options: &OpenOptions) -> Result<HeightMap> {
    todo!()
}

/// Writes `map` to `path` in the format of its ending, atomically.
pub fn write(_path: &Path, _map: &HeightMap) -> Result<()> {
    todo!()
}

/// SHA-256 of `bytes`, lower-case hex.
pub fn sha256_hex(_bytes: &[u8]) -> String {
    todo!()
}

/// Writes a file whole or not at all: on failure what was there before stays.
pub fn write_atomically(_path: &Path, _bytes: &[u8]) -> Result<()> {
    todo!()
}

/// Writes a certainty map (uint8).
pub fn write_npy_u8(_path: &Path, _marks: ndarray::ArrayView2<u8>) -> Result<()> {
    todo!()
}

/// Writes a tip grid with `-inf` outside the tip.
pub fn write_tip_npy(_path: &Path, _shape: ndarray::ArrayView2<f32>) -> Result<()> {
    todo!()
}
