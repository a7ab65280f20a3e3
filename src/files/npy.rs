//! NumPy arrays (`.npy`), versions 1 to 3: 2-D, or 1-D as a map of one row.
//!
//! Source: NumPy enhancement proposal 1, "A simple file format for NumPy arrays". The format
//! states no scale: options or sidecar do.

use super::format::{Contents, Format, MapHead, Raster, malformed};
use super::limits::{check_claim, check_size};
use super::samples::{Endian, SampleType, Samples};
use crate::error::{Error, ErrorKind, Result};

const MAGIC: &[u8] = b"\x93NUMPY";

/// The format's name for people.
pub const NAME: &str = "NumPy array";

/// The `.npy` reader.
pub struct Npy;

impl Format for Npy {
    fn name(&self) -> &'static str {
        NAME
    }

    fn recognises(&self, bytes: &[u8]) -> bool {
        bytes.starts_with(MAGIC)
    }

    fn contents(&self, bytes: &[u8]) -> Result<Contents> {
        let array = Array::parse(bytes)?;
        let (rows, columns) = array.plane()?;
        let mut notes = Vec::new();
        if array.shape.len() == 1 {
            notes.push("the array has one dimension: taken as a map of one row".to_owned());
        }
        Ok(Contents {
            maps: vec![MapHead::new("array", 0, (columns, rows), array.kind)?],
            notes,
        })
    }

    fn read(&self, bytes: &[u8], _head: &MapHead) -> Result<Raster> {
        Ok(Array::parse(bytes)?.samples()?.into())
    }
}

/// An array's header and the bytes of its numbers.
pub struct Array<'a> {
    pub kind: SampleType,
    pub shape: Vec<usize>,
    endian: Endian,
    fortran: bool,
    data: &'a [u8],
}

impl<'a> Array<'a> {
    /// Errors: `Malformed` for a damaged or cut file, `Unsupported` for numbers that are no
    /// heights (complex, text, records).
    pub fn parse(bytes: &'a [u8]) -> Result<Self> {
        let cut = || malformed("the NumPy header is cut short");
        let rest = bytes.strip_prefix(MAGIC).ok_or_else(cut)?;
        let (version, rest) = rest.split_first_chunk::<2>().ok_or_else(cut)?;
        let (length, rest) = match version[0] {
            1 => {
                let (length, rest) = rest.split_first_chunk::<2>().ok_or_else(cut)?;
                (usize::from(u16::from_le_bytes(*length)), rest)
            }
            2 | 3 => {
                let (length, rest) = rest.split_first_chunk::<4>().ok_or_else(cut)?;
                (u32::from_le_bytes(*length) as usize, rest)
            }
            other => {
                return Err(Error::new(
                    ErrorKind::Unsupported,
                    format!("NumPy format version {other}"),
                )
                .remedy("Save the array again with numpy.save"));
            }
        };
        let (header, data) = rest.split_at_checked(length).ok_or_else(cut)?;
        let header = String::from_utf8_lossy(header);
        let (kind, endian) = dtype(text_after(&header, "descr")?)?;
        Ok(Self {
            kind,
            endian,
            fortran: text_after(&header, "fortran_order")?.starts_with("True"),
            shape: shape(text_after(&header, "shape")?)?,
            data,
        })
    }

    /// Rows and columns. Errors: `Unsupported` unless 1-D or 2-D, and the limits'.
    pub fn plane(&self) -> Result<(usize, usize)> {
        let (rows, columns) = match self.shape[..] {
            [columns] => (1, columns),
            [rows, columns] => (rows, columns),
            _ => {
                return Err(Error::new(
                    ErrorKind::Unsupported,
                    format!("an array of shape {:?} is no height map", self.shape),
                )
                .remedy("Save a 2-D array, rows by columns"));
            }
        };
        check_size(columns, rows)?;
        Ok((rows, columns))
    }

    /// The numbers in C order. Errors: `Malformed` when the file holds fewer than the header
    /// claims.
    pub fn samples(&self) -> Result<Samples> {
        let (rows, columns) = self.plane()?;
        let needed = rows * columns * self.kind.bytes();
        check_claim(needed, self.data.len(), false)?;
        let samples = Samples::from_bytes(self.kind, self.endian, &self.data[..needed])?;
        Ok(if self.fortran {
            samples.turned_from_fortran(rows, columns)
        } else {
            samples
        })
    }

    /// The numbers of a small array of any shape, a scalar included.
    pub fn few(&self, most: usize) -> Option<Vec<f64>> {
        let count = self
            .shape
            .iter()
            .try_fold(1usize, |a, &b| a.checked_mul(b))?;
        let needed = count.checked_mul(self.kind.bytes())?;
        if count > most {
            return None;
        }
        let bytes = self.data.get(..needed)?;
        Samples::from_bytes(self.kind, self.endian, bytes)
            .ok()
            .map(|samples| samples.to_f64())
    }
}

/// What follows `'key':` in the header's dictionary.
fn text_after<'h>(header: &'h str, key: &str) -> Result<&'h str> {
    [format!("'{key}'"), format!("\"{key}\"")]
        .iter()
        .find_map(|quoted| header.split_once(quoted.as_str()))
        .and_then(|(_, rest)| rest.trim_start().strip_prefix(':'))
        .map(str::trim_start)
        .ok_or_else(|| malformed(format!("the NumPy header has no \"{key}\"")))
}

fn dtype(text: &str) -> Result<(SampleType, Endian)> {
    let unsupported = |what: String| {
        Error::new(ErrorKind::Unsupported, what)
            .remedy("Save a plain array of integers or floats, for example with .astype('float32')")
    };
    let quote = text.chars().next().filter(|c| matches!(c, '\'' | '"'));
    let Some(descr) = quote.and_then(|q| text[1..].split(q).next()) else {
        return Err(unsupported(
            "an array of records is no height map".to_owned(),
        ));
    };
    let (order, code) = match descr.split_at_checked(1) {
        Some((order @ ("<" | ">" | "=" | "|"), code)) => (order, code),
        _ => ("<", descr),
    };
    let kind = match code {
        "u1" => SampleType::Uint8,
        "i1" => SampleType::Int8,
        "u2" => SampleType::Uint16,
        "i2" => SampleType::Int16,
        "u4" => SampleType::Uint32,
        "i4" => SampleType::Int32,
        "u8" => SampleType::Uint64,
        "i8" => SampleType::Int64,
        "f2" => SampleType::Float16,
        "f4" => SampleType::Float32,
        "f8" => SampleType::Float64,
        _ => {
            let shown: String = descr.chars().take(20).collect();
            return Err(unsupported(format!(
                "an array of type \"{shown}\" is no height map"
            )));
        }
    };
    let endian = if order == ">" {
        Endian::Big
    } else {
        Endian::Little
    };
    Ok((kind, endian))
}

fn shape(text: &str) -> Result<Vec<usize>> {
    let wrong = || malformed("the NumPy header's shape is no tuple of sizes");
    let inside = text
        .strip_prefix('(')
        .and_then(|t| t.split_once(')'))
        .ok_or_else(wrong)?
        .0;
    inside
        .split(',')
        .map(str::trim)
        .filter(|part| !part.is_empty())
        .map(|part| part.trim_end_matches('L').parse().map_err(|_| wrong()))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::{Array2, ShapeBuilder};
    use ndarray_npy::WriteNpyExt;

    /// A file by hand, of any dtype and order.
    fn file(descr: &str, fortran: &str, shape: &str, data: &[u8]) -> Vec<u8> {
        let header =
            format!("{{'descr': {descr}, 'fortran_order': {fortran}, 'shape': {shape}, }}");
        let mut bytes = MAGIC.to_vec();
        bytes.extend([1, 0]);
        bytes.extend((header.len() as u16).to_le_bytes());
        bytes.extend(header.as_bytes());
        bytes.extend(data);
        bytes
    }

    #[test]
    fn what_another_writer_writes_in_either_order() {
        let c = Array2::from_shape_fn((3, 4), |(r, c)| (10 * r + c) as f64);
        let mut f = Array2::zeros((3, 4).f());
        f.assign(&c);
        for array in [c.clone(), f] {
            let mut bytes = Vec::new();
            array.write_npy(&mut bytes).unwrap();
            let contents = Npy.contents(&bytes).unwrap();
            let head = &contents.maps[0];
            assert_eq!(
                (head.columns, head.rows, head.samples),
                (4, 3, SampleType::Float64)
            );
            let samples = Npy.read(&bytes, head).unwrap().samples;
            assert_eq!(samples, Samples::F64(c.iter().copied().collect()));
        }
    }

    #[test]
    fn every_numeric_dtype_and_big_endian() {
        for (descr, data, value) in [
            ("'|u1'", vec![200], 200.0),
            ("'|i1'", vec![0xff], -1.0),
            ("'>u2'", vec![1, 2], 258.0),
            ("'<i2'", vec![0xfe, 0xff], -2.0),
            ("'>u4'", vec![0, 0, 1, 0], 256.0),
            ("'<i4'", vec![1, 0, 0, 0], 1.0),
            ("'>i8'", vec![0xff; 8], -1.0),
            ("'<u8'", vec![3, 0, 0, 0, 0, 0, 0, 0], 3.0),
            ("'<f2'", vec![0, 0x3c], 1.0),
            ("'>f4'", 1.5f32.to_be_bytes().to_vec(), 1.5),
            ("'>f8'", (-2.5f64).to_be_bytes().to_vec(), -2.5),
        ] {
            let bytes = file(descr, "False", "(1, 1)", &data);
            let samples = Array::parse(&bytes).unwrap().samples().unwrap();
            assert_eq!(samples.to_f64(), [value], "{descr}");
        }
    }

    #[test]
    fn shapes_and_types_that_are_no_map() {
        let contents = |descr, shape| Npy.contents(&file(descr, "False", shape, &[0; 64]));
        let profile = contents("'<f4'", "(5,)").unwrap();
        assert_eq!((profile.maps[0].columns, profile.maps[0].rows), (5, 1));
        assert_eq!(profile.notes.len(), 1);
        for (descr, shape, kind) in [
            ("'<f4'", "(2, 2, 2)", ErrorKind::Unsupported),
            ("'<f4'", "()", ErrorKind::Unsupported),
            ("'<c8'", "(2, 2)", ErrorKind::Unsupported),
            ("[('x', '<f4')]", "(2, 2)", ErrorKind::Unsupported),
            ("'<f4'", "(0, 2)", ErrorKind::Malformed),
            ("'<f4'", "(2, -2)", ErrorKind::Malformed),
            (
                "'<f4'",
                "(99999999999, 99999999999)",
                ErrorKind::Unsupported,
            ),
        ] {
            assert_eq!(
                contents(descr, shape).unwrap_err().kind(),
                kind,
                "{descr} {shape}"
            );
        }
        let bytes = file("'<f4'", "False", "(8000, 8000)", &[0; 64]);
        let head = &Npy.contents(&bytes).unwrap().maps[0];
        assert_eq!(
            Npy.read(&bytes, head).unwrap_err().kind(),
            ErrorKind::Malformed
        );
    }
}
