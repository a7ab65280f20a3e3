//! Tip grids: heights at most 0 with `-inf` outside the tip, which no [`HeightMap`] holds.
//!
//! [`HeightMap`]: crate::heightmap::HeightMap

use super::scale::Scale;
use super::{OpenOptions, OpenedFile, format, mesh, sha256_hex, sidecar, sidecar_path, write};
use crate::error::Result;
use crate::heightmap::{HeightMap, Pitch, Provenance};
use ndarray::{Array2, ArrayView2};
use std::path::Path;

/// A tip grid as it is in a file.
#[derive(Debug, Clone, PartialEq)]
pub struct TipGrid {
    /// `[row, column]`, nm; `-inf` outside the tip, wherever the file has `-inf`, NaN or its
    /// void value.
    pub heights: Array2<f32>,
    /// The pitch that options, sidecar or file state; `None`: the scan's.
    pub pitch: Option<Pitch>,
    /// File, SHA-256 and where the scale came from.
    pub provenance: Provenance,
}

/// Reads a tip grid, which may keep its `-inf`.
///
/// A pitch is not required: a tip has the scan's. A `.npy` that nobody states a unit for is in
/// nanometres, as [`write_tip_npy`] writes it and the tip file is defined; any other format must
/// state its unit. Errors: as [`super::open`], without `MissingPitch`.
pub fn read_tip_grid(path: &Path, options: &OpenOptions) -> Result<TipGrid> {
    read(path, options).map_err(|e| e.at(path))
}

fn read(path: &Path, options: &OpenOptions) -> Result<TipGrid> {
    let file = OpenedFile::load(path)?;
    let head = file.choose(options.map)?;
    let mut scale = Scale::resolve(head, file.sidecar.as_ref(), options)?;
    if scale.height.is_none() && file.format.name() == super::npy::NAME {
        scale.height = format::HeightScale::of_unit("nm")
            .map(|h| format::Stated::new(h, "a tip.npy is in nm"));
    }
    let pitch = scale.pitch.as_ref().map(|p| p.value);
    if pitch.is_none() {
        scale.pitch = Some(format::Stated::new(Pitch::square(1.0), "the scan"));
    }
    let (_, height, source) = scale.required(path, head)?;
    let raster = file.format.read(&file.bytes, head)?;
    let mut heights = raster.samples.scaled(&height, scale.void, 0.0);
    for z in &mut heights {
        if !z.is_finite() {
            *z = f32::NEG_INFINITY;
        }
    }
    Ok(TipGrid {
        heights: format::grid(head, heights)?,
        pitch,
        provenance: Provenance {
            file: Some(path.to_owned()),
            sha256: Some(sha256_hex(&file.bytes)),
            scale_source: source,
            steps: head.history.clone(),
        },
    })
}

/// Writes a tip grid in nm as a float32 `.npy` with its `-inf`, atomically. Errors: `Io`.
pub fn write_tip_npy(path: &Path, heights: ArrayView2<'_, f32>) -> Result<()> {
    write::write_atomically(path, &write::npy(heights)?)
}

/// Writes a tip by the ending of `path`, atomically: `.npy` with its `-inf` and a sidecar that
/// carries pitch and unit; `.stl` and `.ply` as a closed mesh ([`mesh::Mesh::closed`]); every other
/// ending as [`super::write()`], which marks what is outside the tip as void.
///
/// Errors: `Io`; `Setting` for another ending; `Data` for a mesh of a tip of one cell.
pub fn write_tip(path: &Path, heights: ArrayView2<'_, f32>, pitch: Pitch) -> Result<()> {
    if mesh::is_mesh(path) {
        return mesh::write_mesh(path, &mesh::Mesh::closed(heights, pitch)?);
    }
    let npy = path
        .extension()
        .is_some_and(|e| e.eq_ignore_ascii_case("npy"));
    if !npy {
        return super::write(path, &HeightMap::new(heights.to_owned(), pitch)?);
    }
    if let Some(nm) = format::HeightScale::of_unit("nm") {
        let text = sidecar::text_of(pitch, &nm, None);
        write::write_atomically(&sidecar_path(path), text.as_bytes())?;
    }
    write_tip_npy(path, heights)
}
