//! What a file says of itself, for people and programs.

use super::format::{HeightScale, MapHead};
use super::samples::Samples;
use super::scale::Scale;
use super::{OpenOptions, OpenedFile, sha256_hex};
use crate::error::Result;
use serde::Serialize;
use std::path::{Path, PathBuf};

/// One map in a file.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct MapEntry {
    /// The number that chooses it.
    pub index: usize,
    /// Page, layer or array.
    pub name: String,
    /// Columns (fast axis).
    pub columns: usize,
    /// Rows (slow axis).
    pub rows: usize,
    /// Type of the stored numbers under NumPy's names: "uint16", "float32".
    pub sample_type: &'static str,
}

/// What a file says, and what of it is used. `None` where nobody states it.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Inspection {
    /// As given.
    pub file: PathBuf,
    /// Name of the format.
    pub format: &'static str,
    /// Size of the file.
    pub bytes: u64,
    /// SHA-256 of the file, lower-case hex.
    pub sha256: String,
    /// Every map in the file.
    pub maps: Vec<MapEntry>,
    /// The map that the following describe: the only one, or the chosen one. `None`: several
    /// and none chosen.
    pub map: Option<usize>,
    /// Columns of that map.
    pub columns: Option<usize>,
    /// Rows of that map.
    pub rows: Option<usize>,
    /// Pixel pitch along x and y in nm.
    pub pitch_nm: Option<[f64; 2]>,
    /// Who states the pitch.
    pub pitch_source: Option<String>,
    /// The unit in which the heights are stated.
    pub height_unit: Option<String>,
    /// Nanometres of one stored unit or count.
    pub nm_per_count: Option<f64>,
    /// Who states the height unit.
    pub height_source: Option<String>,
    /// Lowest and highest height in nm, where the unit is known and not all is void.
    pub range_nm: Option<[f64; 2]>,
    /// Lowest and highest stored number.
    pub range_raw: Option<[f64; 2]>,
    /// Pixels without a height.
    pub voids: Option<usize>,
    /// What a careful reader should know: ignored resolution tags, wrong checksums, ...
    pub notes: Vec<String>,
}

/// Looks into `path` with the same rules as [`super::open`]; a missing scale is no error here.
///
/// Errors: as [`super::open`], without `MissingPitch`, `MissingHeightUnit`, `SeveralMaps`.
pub fn inspect(path: &Path, options: &OpenOptions) -> Result<Inspection> {
    inspect_in(path, options).map_err(|e| e.at(path))
}

fn inspect_in(path: &Path, options: &OpenOptions) -> Result<Inspection> {
    let file = OpenedFile::load(path)?;
    let entry = |(index, head): (usize, &MapHead)| MapEntry {
        index,
        name: head.name.clone(),
        columns: head.columns,
        rows: head.rows,
        sample_type: head.samples.name(),
    };
    let maps = &file.contents.maps;
    let mut inspection = Inspection {
        file: path.to_owned(),
        format: file.format.name(),
        bytes: file.bytes.len() as u64,
        sha256: sha256_hex(&file.bytes),
        maps: maps.iter().enumerate().map(entry).collect(),
        map: None,
        columns: None,
        rows: None,
        pitch_nm: None,
        pitch_source: None,
        height_unit: None,
        nm_per_count: None,
        height_source: None,
        range_nm: None,
        range_raw: None,
        voids: None,
        notes: file.contents.notes.clone(),
    };
    if options.map.is_some() || maps.len() == 1 {
        let head = file.choose(options.map)?;
        inspection.map = Some(options.map.unwrap_or(0));
        let scale = Scale::resolve(head, file.sidecar.as_ref(), options)?;
        let raster = file.format.read(&file.bytes, head)?;
        inspection.notes.extend(raster.notes);
        inspection.describe(head, scale, &raster.samples);
    }
    Ok(inspection)
}

impl Inspection {
    fn describe(&mut self, head: &MapHead, scale: Scale, samples: &Samples) {
        self.columns = Some(head.columns);
        self.rows = Some(head.rows);
        let statistics = samples.statistics(scale.void);
        self.voids = Some(statistics.voids);
        self.range_raw = statistics.range.map(|(low, high)| [low, high]);
        if let Some(pitch) = scale.pitch {
            self.pitch_nm = Some([pitch.value.x, pitch.value.y]);
            self.pitch_source = Some(pitch.by);
        }
        if let Some(height) = scale.height {
            let HeightScale {
                unit,
                nm_per_count,
                offset_nm,
            } = height.value;
            self.range_nm = self.range_raw.map(|[low, high]| {
                let (a, b) = (
                    low * nm_per_count + offset_nm,
                    high * nm_per_count + offset_nm,
                );
                [a.min(b), a.max(b)]
            });
            self.height_unit = Some(unit);
            self.nm_per_count = Some(nm_per_count);
            self.height_source = Some(height.by);
        }
    }
}
