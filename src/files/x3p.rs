//! X3P, ISO 5436-2 and ISO 25178-72: areal maps and profiles on a regular grid, binary or XML.
//!
//! Readers of real files must tolerate: no namespace, a root `ISO5436`, everything inside a
//! folder, `__MACOSX` litter, a byte order mark, a missing CZ increment, infinities as invalid
//! points, wrong or bare checksum files. Point lists and irregular grids are refused.
//!
//! Heights are `value * Increment + Offset` of CZ for integers. For floats writers disagree
//! whether that applies; it is applied only where the revision is ISO 25178-72 DAM1, and noted.

mod main_xml;

use super::archive::Archive;
use super::format::{Contents, Format, HeightScale, MapHead, Raster, Stated, malformed};
use super::limits::{MAX_DECODED_BYTES, check_claim, check_size};
use super::samples::{Endian, SampleType, Samples};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use main_xml::{Axis, Data, Document};
use md5::{Digest, Md5};

/// The X3P reader.
pub struct X3p;

/// Longest `main.xml`: a list of the largest sensible size, about 10 million points.
const MAX_XML: usize = 512 << 20;

const BY: &str = "X3P axes";

impl Format for X3p {
    fn name(&self) -> &'static str {
        "X3P"
    }

    fn recognises(&self, bytes: &[u8]) -> bool {
        Archive::open(bytes).is_ok_and(|a| main_entry(&a).is_some())
    }

    fn contents(&self, bytes: &[u8]) -> Result<Contents> {
        let package = Package::open(bytes)?;
        let document = &package.document;
        let mut notes = package.notes.clone();
        let (columns, rows, layers) = check_grid(document)?;
        let kind = sample_type(document)?;
        let pitch = pitch(document, &mut notes);
        let height = height(document, kind, &mut notes);
        if document.rotated {
            notes.push("a rotation of the axes is stated: not applied".to_owned());
        }
        let mut maps = Vec::new();
        for layer in 0..layers {
            let mut head = MapHead::new(format!("layer {layer}"), layer, (columns, rows), kind)?;
            head.pitch = pitch.clone();
            head.height = height.clone();
            maps.push(head);
        }
        Ok(Contents { maps, notes })
    }

    fn read(&self, bytes: &[u8], head: &MapHead) -> Result<Raster> {
        let mut package = Package::open(bytes)?;
        let (columns, rows, layers) = check_grid(&package.document)?;
        let pixels = columns * rows;
        let mut notes = Vec::new();
        let mut values = match std::mem::replace(&mut package.document.data, Data::None) {
            Data::List(values) => {
                if values.len() != pixels * layers {
                    return Err(malformed(format!(
                        "the list holds {} points, the matrix {columns} x {rows} x {layers}",
                        values.len()
                    )));
                }
                values[pixels * head.locator..pixels * (head.locator + 1)].to_vec()
            }
            Data::Link { points, md5 } => {
                package.linked(&points, md5.as_deref(), (pixels, layers, head), &mut notes)?
            }
            Data::None => return Err(malformed("Record3 links to no data and lists none")),
        };
        if let Some((link, md5)) = package.document.valid.clone() {
            package.mark_invalid(
                &link,
                md5.as_deref(),
                (pixels, layers, head),
                &mut values,
                &mut notes,
            )?;
        }
        Ok(Raster {
            samples: Samples::F64(values),
            notes,
        })
    }
}

/// The index and folder of `main.xml`, the shallowest one.
fn main_entry(archive: &Archive) -> Option<(usize, String)> {
    archive
        .names()
        .filter_map(|(i, name)| {
            let folder = name.strip_suffix("main.xml")?;
            (folder.is_empty() || folder.ends_with('/')).then(|| (i, folder.to_owned()))
        })
        .min_by_key(|(_, folder)| folder.len())
}

/// The opened archive with its parsed document.
struct Package<'a> {
    archive: Archive<'a>,
    folder: String,
    document: Document,
    notes: Vec<String>,
}

/// Pixels of a layer, number of layers, the layer wanted.
type Wanted<'a> = (usize, usize, &'a MapHead);

impl<'a> Package<'a> {
    fn open(bytes: &'a [u8]) -> Result<Self> {
        let mut archive = Archive::open(bytes)?;
        let (index, folder) = main_entry(&archive).ok_or_else(|| malformed("no main.xml"))?;
        let xml = archive.read(index, MAX_XML)?;
        let document = Document::parse(&xml)?;
        let mut package = Self {
            archive,
            folder,
            document,
            notes: Vec::new(),
        };
        package.check_main(&xml);
        Ok(package)
    }

    fn check_main(&mut self, xml: &[u8]) {
        let name = self.document.checksum_file.clone();
        let name = name.unwrap_or_else(|| "md5checksum.hex".to_owned());
        let stated = self
            .find(&name)
            .and_then(|i| self.archive.read(i, 4096).ok())
            .map(|bytes| String::from_utf8_lossy(&bytes).into_owned());
        match stated {
            None => self
                .notes
                .push("the checksum of main.xml is missing".to_owned()),
            Some(text) => {
                let stated = text.split_whitespace().next().unwrap_or("").to_owned();
                if !stated.eq_ignore_ascii_case(&md5_hex(xml)) {
                    self.notes.push(
                        "the MD5 checksum of main.xml does not match: it was changed after writing"
                            .to_owned(),
                    );
                }
            }
        }
    }

    /// Links are relative to the folder of `main.xml`.
    fn find(&self, link: &str) -> Option<usize> {
        let link = link.trim().replace('\\', "/");
        let plain = link.trim_start_matches("./").trim_start_matches('/');
        self.archive.find(&format!("{}{plain}", self.folder))
    }

    fn entry(&mut self, link: &str, most: usize) -> Result<Vec<u8>> {
        let index = self
            .find(link)
            .ok_or_else(|| malformed(format!("main.xml links to \"{link}\", which is missing")))?;
        self.archive.read(index, most)
    }

    /// One layer of the binary points, unscaled.
    fn linked(
        &mut self,
        link: &str,
        md5: Option<&str>,
        (pixels, layers, head): Wanted,
        notes: &mut Vec<String>,
    ) -> Result<Vec<f64>> {
        let size = pixels * head.samples.bytes();
        let needed = size
            .checked_mul(layers)
            .filter(|&n| n <= 2 * MAX_DECODED_BYTES)
            .ok_or_else(|| malformed(format!("{layers} layers of {pixels} points are too many")))?;
        let data = self.entry(link, 2 * MAX_DECODED_BYTES)?;
        check_md5(link, md5, &data, notes);
        check_claim(needed, data.len(), false)?;
        if data.len() > needed {
            notes.push(format!(
                "\"{link}\" holds {} bytes too many: left aside",
                data.len() - needed
            ));
        }
        let layer = &data[size * head.locator..size * (head.locator + 1)];
        Ok(Samples::from_bytes(head.samples, Endian::Little, layer)?.to_f64())
    }

    /// Makes NaN of the points that the validity bits (LSB first, 1 = valid) exclude.
    fn mark_invalid(
        &mut self,
        link: &str,
        md5: Option<&str>,
        (pixels, layers, head): Wanted,
        values: &mut [f64],
        notes: &mut Vec<String>,
    ) -> Result<()> {
        let bits = self.entry(link, MAX_DECODED_BYTES)?;
        check_md5(link, md5, &bits, notes);
        check_claim((pixels * layers).div_ceil(8), bits.len(), false)?;
        let first = pixels * head.locator;
        for (i, value) in values.iter_mut().enumerate() {
            let bit = first + i;
            if bits[bit / 8] >> (bit % 8) & 1 == 0 {
                *value = f64::NAN;
            }
        }
        Ok(())
    }
}

fn md5_hex(bytes: &[u8]) -> String {
    super::write::hex(&Md5::digest(bytes))
}

fn check_md5(link: &str, stated: Option<&str>, bytes: &[u8], notes: &mut Vec<String>) {
    if let Some(stated) = stated
        && !stated.trim().eq_ignore_ascii_case(&md5_hex(bytes))
    {
        notes.push(format!("the MD5 checksum of \"{link}\" does not match"));
    }
}

/// Columns, rows and layers of a regular grid.
/// Errors: `Unsupported` for point lists and irregular grids, `Malformed` without a size.
fn check_grid(document: &Document) -> Result<(usize, usize, usize)> {
    let refuse = |what: &str| {
        Err(Error::new(ErrorKind::Unsupported, what).remedy(
            "Export a surface on a regular grid (feature type SUR with incremental x and y axes)",
        ))
    };
    match document.feature.as_str() {
        "SUR" | "PRF" | "" => {}
        "PCL" => return refuse("the X3P holds a point cloud (feature type PCL)"),
        other => {
            let shown: String = other.chars().take(20).collect();
            return refuse(&format!(
                "the X3P holds an unknown feature type \"{shown}\""
            ));
        }
    }
    let profile = document.feature == "PRF";
    if document.x.absolute() || (document.y.absolute() && !profile) {
        return refuse("the X3P holds points on an irregular grid (absolute x or y axis)");
    }
    if document.list_dimension && document.size.is_none() {
        return refuse("the X3P holds a list of points, not a grid");
    }
    let Some([columns, rows, layers]) = document.size else {
        return Err(malformed("main.xml states no MatrixDimension"));
    };
    if profile && document.y.absolute() && rows > 1 {
        return refuse("the X3P holds profiles with an absolute y axis");
    }
    check_size(columns, rows)?;
    if layers == 0 || layers > 10_000 {
        return Err(malformed(format!("main.xml claims {layers} layers")));
    }
    Ok((columns, rows, layers))
}

fn sample_type(document: &Document) -> Result<SampleType> {
    Ok(match document.z.data_type.as_deref() {
        Some("I") => SampleType::Int16,
        Some("L") => SampleType::Int32,
        Some("F") => SampleType::Float32,
        Some("D") => SampleType::Float64,
        other => {
            return Err(malformed(format!(
                "the z axis has the data type \"{}\", not I, L, F or D",
                other.unwrap_or("").chars().take(20).collect::<String>()
            )));
        }
    })
}

/// Increments of the axes in metres. One row has no y increment: x's stands in.
fn pitch(document: &Document, notes: &mut Vec<String>) -> Option<Stated<Pitch>> {
    let step = |axis: &Axis| axis.increment.map(|m| m * 1e9).filter(|nm| *nm > 0.0);
    let one_row = document.size.is_some_and(|[_, rows, _]| rows == 1);
    let x = step(&document.x);
    let y = match step(&document.y) {
        None if one_row => x,
        y => y,
    };
    let pitch = match (x, y) {
        (Some(x), Some(y)) => Pitch { x, y }.checked().ok(),
        _ => None,
    };
    if pitch.is_none() {
        notes.push("the x and y axes state no positive increment".to_owned());
    }
    pitch.map(|p| Stated::new(p, BY))
}

/// How a stored z becomes metres; `None` when integers come without an increment.
fn height(
    document: &Document,
    kind: SampleType,
    notes: &mut Vec<String>,
) -> Option<Stated<HeightScale>> {
    let Axis {
        increment, offset, ..
    } = document.z;
    let stated = (increment.unwrap_or(1.0), offset.unwrap_or(0.0));
    let applies = kind.is_integer() || document.revision.contains("DAM1");
    if kind.is_integer() && increment.is_none_or(|i| i == 0.0) {
        notes.push("the z axis holds integers but states no increment".to_owned());
        return None;
    }
    if !kind.is_integer() && stated != (1.0, 0.0) {
        notes.push(format!(
            "the z axis of floats states increment {} and offset {} m: {}",
            stated.0,
            stated.1,
            if applies {
                "applied"
            } else {
                "not applied, as the revision is older than ISO 25178-72 DAM1"
            },
        ));
    }
    let (increment, offset) = if applies { stated } else { (1.0, 0.0) };
    let scale = HeightScale {
        unit: "m".to_owned(),
        nm_per_count: increment * 1e9,
        offset_nm: offset * 1e9,
    };
    if !scale.nm_per_count.is_finite() || !scale.offset_nm.is_finite() || scale.nm_per_count == 0.0
    {
        notes.push("the z axis states no usable increment".to_owned());
        return None;
    }
    Some(Stated::new(scale, BY))
}

#[cfg(test)]
mod tests;
