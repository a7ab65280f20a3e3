//! What every format reader gives: the list of maps in a file, and the samples of one.

use super::samples::{SampleType, Samples};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use ndarray::Array2;

/// One file format.
pub trait Format: Sync {
    /// Its name for people.
    fn name(&self) -> &'static str;
    /// Whether `bytes` are of this format, by their content; cheap, never an error.
    fn recognises(&self, bytes: &[u8]) -> bool;
    /// The maps in the file with what it states of their scale, without decoding pixels where
    /// that can be helped. Errors: `Malformed`, `Unsupported`.
    fn contents(&self, bytes: &[u8]) -> Result<Contents>;
    /// The samples of one map that [`Format::contents`] listed.
    fn read(&self, bytes: &[u8], head: &MapHead) -> Result<Raster>;
}

/// The maps in a file and what a careful reader should say about it.
#[derive(Debug, Default)]
pub struct Contents {
    pub maps: Vec<MapHead>,
    pub notes: Vec<String>,
}

/// One map of a file: its size and what the file states of its scale.
#[derive(Debug, Clone)]
pub struct MapHead {
    /// What the file or the format calls it: "page 2", "layer 0", the array's name.
    pub name: String,
    /// The format's own locator of the map (page number, entry, layer).
    pub locator: usize,
    pub columns: usize,
    pub rows: usize,
    pub samples: SampleType,
    pub pitch: Option<Stated<Pitch>>,
    pub height: Option<Stated<HeightScale>>,
    /// The stored value that marks a void.
    pub void: Option<f64>,
    /// What was done to the heights before they were written, where the file tells.
    pub history: Vec<String>,
}

impl MapHead {
    /// A map of which only name, place, size and type are known. Errors: `Malformed` when the
    /// size is zero or beyond the limits.
    pub fn new(
        name: impl Into<String>,
        locator: usize,
        (columns, rows): (usize, usize),
        samples: SampleType,
    ) -> Result<Self> {
        super::limits::check_size(columns, rows)?;
        Ok(Self {
            name: name.into(),
            locator,
            columns,
            rows,
            samples,
            pitch: None,
            height: None,
            void: None,
            history: Vec::new(),
        })
    }
}

/// A value together with who states it, for the record.
#[derive(Debug, Clone, PartialEq)]
pub struct Stated<T> {
    pub value: T,
    pub by: String,
}

impl<T> Stated<T> {
    pub fn new(value: T, by: impl Into<String>) -> Self {
        Self {
            value,
            by: by.into(),
        }
    }
}

/// How stored numbers become heights: `z = stored * nm_per_count + offset_nm`.
#[derive(Debug, Clone, PartialEq)]
pub struct HeightScale {
    /// The unit in which the scale was stated.
    pub unit: String,
    pub nm_per_count: f64,
    pub offset_nm: f64,
}

impl HeightScale {
    /// One stored unit is one `unit`; `None` for an unknown unit.
    pub fn of_unit(unit: &str) -> Option<Self> {
        Some(Self {
            unit: unit.to_owned(),
            nm_per_count: crate::units::nanometres_per(unit)?,
            offset_nm: 0.0,
        })
    }

    /// Whether both give the same heights, as exactly as tags are written.
    pub fn agrees_with(&self, other: &Self) -> bool {
        let near = |a: f64, b: f64| (a - b).abs() <= 1e-6 * a.abs().max(b.abs());
        near(self.nm_per_count, other.nm_per_count) && near(self.offset_nm, other.offset_nm)
    }
}

/// The samples of one map, row by row, and what was noticed while reading them.
#[derive(Debug)]
pub struct Raster {
    pub samples: Samples,
    pub notes: Vec<String>,
}

impl From<Samples> for Raster {
    fn from(samples: Samples) -> Self {
        Self {
            samples,
            notes: Vec::new(),
        }
    }
}

/// Shapes row-major values into the map's grid.
pub fn grid<T>(head: &MapHead, values: Vec<T>) -> Result<Array2<T>> {
    let count = values.len();
    Array2::from_shape_vec((head.rows, head.columns), values).map_err(|_| {
        malformed(format!(
            "{count} samples do not fill {} x {} pixels",
            head.columns, head.rows
        ))
    })
}

/// A `Malformed` error with the usual remedy.
pub fn malformed(what: impl Into<String>) -> Error {
    Error::new(ErrorKind::Malformed, what)
        .remedy("The file is damaged or cut short: copy or export it again")
}
