//! Writers, all of them atomic: a reader sees the old file or the whole new one.

use super::format::HeightScale;
use super::{provenance, sidecar, sidecar_path};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::HeightMap;
use ndarray::ArrayView2;
use ndarray_npy::WriteNpyExt;
use sha2::{Digest, Sha256};
use std::io::{Cursor, Write};
use std::path::Path;
use tiff::encoder::{TiffEncoder, colortype::Gray32Float};
use tiff::tags::Tag;

/// The stored value of a pixel without a height in our PNG files.
const PNG_VOID: u16 = 0;

/// Writes `map` to `path` in the format of its ending, atomically.
///
/// - `.tif`, `.tiff`: float32 in nm, voids NaN, scale and history as `key=value` lines in the
///   description. A sidecar of that name is renewed if there is one, as it would override them.
/// - `.npy`: float32 in nm, voids NaN, with a sidecar that carries the pitch and the unit.
/// - `.png`: 16-bit grey with a sidecar that carries pitch, height scale and offset; heights are
///   rounded to 1/65534 of the range, 0 marks a void.
///
/// Errors: `Setting` for another ending, `Io` (a missing folder by name), `Unsupported` when the
/// map is too large for the format.
pub fn write(path: &Path, map: &HeightMap) -> Result<()> {
    let ending = path.extension().unwrap_or_default().to_string_lossy();
    let nanometres = HeightScale {
        unit: "nm".to_owned(),
        nm_per_count: 1.0,
        offset_nm: 0.0,
    };
    let sidecar = |scale: &HeightScale, void| sidecar::text_of(map.pitch(), scale, void);
    let (bytes, sidecar) = match ending.to_ascii_lowercase().as_str() {
        "tif" | "tiff" => {
            let stale = sidecar_path(path).exists();
            (tiff(map)?, stale.then(|| sidecar(&nanometres, None)))
        }
        "npy" => (npy(map.heights())?, Some(sidecar(&nanometres, None))),
        "png" => {
            let (bytes, scale) = png(map)?;
            (bytes, Some(sidecar(&scale, Some(f64::from(PNG_VOID)))))
        }
        _ => {
            return Err(Error::new(
                ErrorKind::Setting,
                format!(
                    "{}: no format is written under the ending \"{ending}\"",
                    path.display()
                ),
            )
            .remedy("Use .tif, .tiff, .npy or .png"));
        }
    };
    if let Some(text) = sidecar {
        write_atomically(&sidecar_path(path), text.as_bytes())?;
    }
    write_atomically(path, &bytes)
}

/// Writes a certainty map as a uint8 `.npy`, atomically. Errors: `Io`.
pub fn write_npy_u8(path: &Path, values: ArrayView2<'_, u8>) -> Result<()> {
    write_atomically(path, &npy(values)?)
}

/// The bytes of a `.npy` file.
pub(super) fn npy<T: ndarray_npy::WritableElement>(values: ArrayView2<'_, T>) -> Result<Vec<u8>> {
    let mut bytes = Vec::new();
    values
        .write_npy(&mut bytes)
        .map_err(|e| Error::new(ErrorKind::Unsupported, "the array cannot be written").source(e))?;
    Ok(bytes)
}

fn tiff(map: &HeightMap) -> Result<Vec<u8>> {
    let failed = |e: tiff::TiffError| {
        Error::new(
            ErrorKind::Unsupported,
            format!("the map cannot be written as TIFF: {e}"),
        )
        .remedy("Write it as .npy")
    };
    let (columns, rows) = sides(map)?;
    let heights = map.heights();
    let values: Vec<f32> = heights.iter().copied().collect();
    let mut bytes = Cursor::new(Vec::with_capacity(values.len() * 4 + 4096));
    let mut encoder = TiffEncoder::new(&mut bytes).map_err(failed)?;
    let mut image = encoder
        .new_image::<Gray32Float>(columns, rows)
        .map_err(failed)?;
    image
        .encoder()
        .write_tag(Tag::ImageDescription, provenance::describe(map).as_str())
        .map_err(failed)?;
    image.write_data(&values).map_err(failed)?;
    Ok(bytes.into_inner())
}

/// 16-bit grey and its scale: counts 1 to 65535 over the range, 0 for voids.
fn png(map: &HeightMap) -> Result<(Vec<u8>, HeightScale)> {
    let failed = |e: png::EncodingError| {
        Error::new(
            ErrorKind::Unsupported,
            format!("the map cannot be written as PNG: {e}"),
        )
        .remedy("Write it as .tif or .npy")
    };
    let (columns, rows) = sides(map)?;
    let (low, high) = map.range().unwrap_or((0.0, 0.0));
    let (low, high) = (f64::from(low), f64::from(high));
    // A flat map has no range: a step of its own size brings the height back exactly.
    let step = match high - low {
        range if range > 0.0 => range / 65534.0,
        _ if low != 0.0 => low.abs(),
        _ => 1.0,
    };
    let heights = map.heights();
    let data: Vec<u8> = heights
        .iter()
        .flat_map(|&z| {
            let count = if z.is_nan() {
                PNG_VOID
            } else {
                (1.0 + (f64::from(z) - low) / step).round() as u16
            };
            count.to_be_bytes()
        })
        .collect();
    let mut bytes = Vec::new();
    let mut encoder = png::Encoder::new(&mut bytes, columns, rows);
    encoder.set_color(png::ColorType::Grayscale);
    encoder.set_depth(png::BitDepth::Sixteen);
    let mut writer = encoder.write_header().map_err(failed)?;
    writer.write_image_data(&data).map_err(failed)?;
    writer.finish().map_err(failed)?;
    let scale = HeightScale {
        unit: "nm".to_owned(),
        nm_per_count: step,
        offset_nm: low - step,
    };
    Ok((bytes, scale))
}

/// Columns and rows as the image formats count them, within what is read back.
fn sides(map: &HeightMap) -> Result<(u32, u32)> {
    super::limits::check_size(map.columns(), map.rows())?;
    Ok((map.columns() as u32, map.rows() as u32))
}

/// Writes `bytes` to `path` so that no half-written file is ever seen under that name.
/// Errors: `Io`; a missing folder is named.
pub fn write_atomically(path: &Path, bytes: &[u8]) -> Result<()> {
    if let Some(folder) = path.parent().filter(|f| !f.as_os_str().is_empty())
        && !folder.is_dir()
    {
        return Err(Error::new(
            ErrorKind::Io,
            format!(
                "{}: the folder {} does not exist",
                path.display(),
                folder.display()
            ),
        )
        .remedy("Create it first, or choose another place"));
    }
    if path.is_dir() {
        return Err(Error::new(
            ErrorKind::Io,
            format!("{}: this is a folder", path.display()),
        )
        .remedy("Give the path of a file"));
    }
    let write = || -> std::io::Result<()> {
        let mut file = atomic_write_file::AtomicWriteFile::open(path)?;
        file.write_all(bytes)?;
        file.commit()
    };
    write().map_err(|e| Error::io(path, e))
}

/// SHA-256 of `bytes` in lower-case hex.
pub fn sha256_hex(bytes: &[u8]) -> String {
    hex(&Sha256::digest(bytes))
}

pub(super) fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|b| format!("{b:02x}")).collect()
}
