//! Readers and writers of open formats, sniffing, calibration sidecars, limits.
//!
//! A file is recognised by its content, never by its ending. Scale comes, in this order, from
//! the [`OpenOptions`], from the sidecar `NAME.EXT.toml`, from the file; what none of them states
//! is an error that says what to give, never a default. Here nothing is levelled or measured.
//!
//! To add a format: one file with a type that implements `format::Format`, one line in
//! `FORMATS`; to write it, one arm in [`write()`](write()).

mod archive;
mod format;
mod inspect;
mod known;
mod limits;
mod mesh;
mod npy;
mod npz;
mod ome;
mod png;
mod provenance;
mod samples;
mod scale;
mod sidecar;
mod tiff;
mod tiff_tags;
mod tip;
mod write;
mod x3p;

#[cfg(test)]
mod damage;

pub use inspect::{Inspection, MapEntry, inspect};
pub use mesh::{Mesh, is_mesh, write_mesh};
pub use tip::{TipGrid, read_tip_grid, write_tip, write_tip_npy};
pub use write::{sha256_hex, write, write_atomically, write_npy_u8};

use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, Pitch, Provenance};
use format::{Contents, Format, MapHead};
use scale::Scale;
use sidecar::Sidecar;
use std::path::{Path, PathBuf};

/// Every format that is read, in the order in which they are tried.
static FORMATS: &[&dyn Format] = &[&tiff::Tiff, &png::Png, &npy::Npy, &x3p::X3p, &npz::Npz];

/// What the user adds to what a file says. `None` everywhere means: take the file's word.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct OpenOptions {
    /// Pixel pitch for files that carry none. Overrides the file's when both are there
    /// (said in the provenance).
    pub pitch: Option<Pitch>,
    /// Unit of the heights for files that carry none ("nm", "um", ...), a name that
    /// [`crate::units::nanometres_per`] knows: a stored 1 is one of it. Overrides the file's
    /// when both are there (said in the provenance).
    pub height_unit: Option<String>,
    /// Which map of a file that holds several: page, layer or array, counted from 0 in the
    /// order in which [`inspect()`] lists them.
    pub map: Option<usize>,
}

/// Opens the height map in `path`; the format is found by content.
///
/// Errors: `Io`; `UnknownFormat` (not a format that is read, with its name where known);
/// `Malformed` and `Unsupported`; `MissingPitch` and `MissingHeightUnit` when neither the
/// options nor the sidecar nor the file states them; `SeveralMaps` when the file holds several
/// and none is chosen; `Setting` for a bad option or sidecar. All messages begin with the path.
pub fn open(path: &Path, options: &OpenOptions) -> Result<HeightMap> {
    open_in(path, options).map_err(|e| e.at(path))
}

fn open_in(path: &Path, options: &OpenOptions) -> Result<HeightMap> {
    let file = OpenedFile::load(path)?;
    let head = file.choose(options.map)?;
    let scale = Scale::resolve(head, file.sidecar.as_ref(), options)?;
    let (pitch, height, source) = scale.required(path, head)?;
    let raster = file.format.read(&file.bytes, head)?;
    let (heights, shift) = raster.samples.into_heights(&height, scale.void);
    let heights = format::grid(head, heights)?;
    let mut provenance = Provenance {
        file: Some(path.to_owned()),
        sha256: Some(sha256_hex(&file.bytes)),
        scale_source: source,
        steps: head.history.clone(),
    };
    provenance.steps.extend(shift);
    Ok(HeightMap::new(heights, pitch)?.with_provenance(provenance))
}

/// A file in memory with its format, its contents and its sidecar.
struct OpenedFile {
    bytes: Vec<u8>,
    format: &'static dyn Format,
    contents: Contents,
    sidecar: Option<Sidecar>,
}

impl OpenedFile {
    fn load(path: &Path) -> Result<Self> {
        let bytes = limits::read_file(path)?;
        let format = FORMATS
            .iter()
            .find(|f| f.recognises(&bytes))
            .ok_or_else(|| known::not_read(&bytes))?;
        let contents = format.contents(&bytes)?;
        let sidecar = Sidecar::beside(path)?;
        Ok(Self {
            bytes,
            format: *format,
            contents,
            sidecar,
        })
    }

    /// The map asked for, or the only one.
    fn choose(&self, map: Option<usize>) -> Result<&MapHead> {
        let maps = &self.contents.maps;
        let list = || {
            let lines: Vec<String> = maps
                .iter()
                .enumerate()
                .map(|(i, m)| format!("{i}: {} ({} x {} pixels)", m.name, m.columns, m.rows))
                .collect();
            lines.join("; ")
        };
        match (map, maps.as_slice()) {
            (_, []) => Err(Error::new(
                ErrorKind::Unsupported,
                format!("this {} file holds no height map", self.format.name()),
            )
            .remedy("Export the heights as one number a pixel (grey, not colour)")),
            (None, [only]) => Ok(only),
            (Some(index), _) => maps.get(index).ok_or_else(|| {
                Error::new(ErrorKind::Setting, format!("there is no map {index}"))
                    .remedy(format!("Choose one of {}", list()))
            }),
            (None, _) => Err(Error::new(
                ErrorKind::SeveralMaps,
                format!("the file holds {} maps: {}", maps.len(), list()),
            )
            .remedy("Choose one by its number")),
        }
    }
}

/// The sidecar's path of `path`: `NAME.EXT.toml`.
pub fn sidecar_path(path: &Path) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(".toml");
    PathBuf::from(name)
}

#[cfg(test)]
mod tests;
