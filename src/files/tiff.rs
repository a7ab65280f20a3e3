//! TIFF and BigTIFF: grey pages of any number type, strips or tiles, either byte order.
//!
//! Scale, in this order: our own description lines, OME-XML, GeoTIFF pixel scale in metres, and
//! the resolution tags where they are finer than any printer's (see [`super::tiff_tags`]).
//! No TIFF tag states a unit of height except the GeoTIFF vertical unit.

use super::format::{Contents, Format, MapHead, Raster, malformed};
use super::limits::{MAX_DECODED_BYTES, check_claim, check_size};
use super::samples::{SampleType, Samples};
use super::tiff_tags::{self, Stream};
use crate::error::{Error, ErrorKind, Result};
use std::io::Cursor;
use tiff::decoder::{Decoder, DecodingResult, Limits};
use tiff::tags::Tag;
use tiff::{ColorType, TiffError};

/// Most pages that are listed.
const MAX_PAGES: usize = 10_000;

/// The TIFF reader.
pub struct Tiff;

impl Format for Tiff {
    fn name(&self) -> &'static str {
        "TIFF"
    }

    fn recognises(&self, bytes: &[u8]) -> bool {
        [b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"]
            .iter()
            .any(|magic| bytes.starts_with(*magic))
    }

    fn contents(&self, bytes: &[u8]) -> Result<Contents> {
        let mut decoder = decoder(bytes)?;
        let mut contents = Contents::default();
        let mut first_description = String::new();
        for page in 0..MAX_PAGES {
            let description = tiff_tags::description(&mut decoder);
            if page == 0 {
                first_description.clone_from(&description);
            }
            match page_head(&mut decoder, page) {
                Ok(mut head) => {
                    let tags = tiff_tags::Tags {
                        description: &description,
                        first_description: &first_description,
                    };
                    tags.apply(&mut decoder, &mut head, &mut contents.notes);
                    contents.maps.push(head);
                }
                Err(why) => contents
                    .notes
                    .push(format!("page {page} left aside: {}", why.what())),
            }
            if !decoder.more_images() {
                break;
            }
            // A damaged later page must not hide the ones before it.
            if let Err(e) = decoder.next_image() {
                contents
                    .notes
                    .push(format!("page {} cannot be read: {e}", page + 1));
                break;
            }
        }
        if contents.maps.is_empty() {
            return Err(no_map(&contents.notes));
        }
        contents.notes.dedup();
        Ok(contents)
    }

    fn read(&self, bytes: &[u8], head: &MapHead) -> Result<Raster> {
        let mut decoder = decoder(bytes)?;
        decoder.seek_to_image(head.locator).map_err(failed)?;
        let samples = samples(decoder.read_image().map_err(failed)?);
        if samples.len() != head.columns * head.rows {
            return Err(malformed(format!(
                "{} samples for {} x {} pixels",
                samples.len(),
                head.columns,
                head.rows
            )));
        }
        Ok(samples.into())
    }
}

fn decoder(bytes: &[u8]) -> Result<Decoder<Stream<'_>>> {
    let mut limits = Limits::default();
    limits.decoding_buffer_size = MAX_DECODED_BYTES;
    limits.intermediate_buffer_size = MAX_DECODED_BYTES;
    let decoder = Decoder::new(Cursor::new(bytes)).map_err(failed)?;
    Ok(decoder.with_limits(limits))
}

/// Size and type of the current page. Errors say why the page is no height map.
fn page_head(decoder: &mut Decoder<Stream<'_>>, page: usize) -> Result<MapHead> {
    let (columns, rows) = decoder.dimensions().map_err(failed)?;
    let (columns, rows) = (columns as usize, rows as usize);
    let pixels = check_size(columns, rows)?;
    let unsupported = |what: String| Error::new(ErrorKind::Unsupported, what);
    let bits = match decoder.colortype().map_err(failed)? {
        ColorType::Gray(bits) => bits,
        other => return Err(unsupported(format!("{other:?} is a picture, not heights"))),
    };
    let tag = |decoder: &mut Decoder<Stream<'_>>, tag: Tag, default: u64| {
        let value = decoder.find_tag(tag).ok().flatten();
        value
            .and_then(|v| v.into_u64_vec().ok()?.first().copied())
            .unwrap_or(default)
    };
    if tag(decoder, Tag::NewSubfileType, 0) & 1 == 1 {
        return Err(unsupported("a reduced copy of another page".to_owned()));
    }
    // The decoder would flip the numbers; whether the heights are flipped nobody says.
    if tag(decoder, Tag::PhotometricInterpretation, 1) == 0 {
        return Err(unsupported(
            "its grey scale is stored inverted (white is zero); save it with black as zero"
                .to_owned(),
        ));
    }
    let kind = match (tag(decoder, Tag::SampleFormat, 1), bits) {
        (1 | 4, 8) => SampleType::Uint8,
        (1 | 4, 16) => SampleType::Uint16,
        (1 | 4, 32) => SampleType::Uint32,
        (1 | 4, 64) => SampleType::Uint64,
        (2, 8) => SampleType::Int8,
        (2, 16) => SampleType::Int16,
        (2, 32) => SampleType::Int32,
        (2, 64) => SampleType::Int64,
        (3, 16) => SampleType::Float16,
        (3, 32) => SampleType::Float32,
        (3, 64) => SampleType::Float64,
        (format, bits) => {
            return Err(unsupported(format!(
                "{bits}-bit samples of format {format} are not read"
            )));
        }
    };
    let compressed = tag(decoder, Tag::Compression, 1) != 1;
    let stored = decoder.inner().get_ref().len();
    check_claim(pixels * kind.bytes(), stored, compressed)?;
    MapHead::new(format!("page {page}"), page, (columns, rows), kind)
}

fn samples(decoded: DecodingResult) -> Samples {
    match decoded {
        DecodingResult::U8(v) => Samples::U8(v),
        DecodingResult::U16(v) => Samples::U16(v),
        DecodingResult::U32(v) => Samples::U32(v),
        DecodingResult::U64(v) => Samples::U64(v),
        DecodingResult::I8(v) => Samples::I8(v),
        DecodingResult::I16(v) => Samples::I16(v),
        DecodingResult::I32(v) => Samples::I32(v),
        DecodingResult::I64(v) => Samples::I64(v),
        DecodingResult::F16(v) => Samples::F32(v.into_iter().map(half::f16::to_f32).collect()),
        DecodingResult::F32(v) => Samples::F32(v),
        DecodingResult::F64(v) => Samples::F64(v),
    }
}

fn no_map(notes: &[String]) -> Error {
    let why = notes.join("; ");
    Error::new(
        ErrorKind::Unsupported,
        format!("the TIFF holds no page that is a height map ({why})"),
    )
    .remedy("Export the heights as one number a pixel: grey, 8 to 64 bits, integer or float")
}

fn failed(error: TiffError) -> Error {
    match error {
        TiffError::UnsupportedError(why) => Error::new(
            ErrorKind::Unsupported,
            format!("the TIFF uses what is not read here: {why}"),
        )
        .remedy("Save it without compression, as 32-bit float grey"),
        TiffError::LimitsExceeded => malformed("the TIFF claims more than the limits allow"),
        other => malformed(format!("the TIFF is damaged: {other}")),
    }
}

#[cfg(test)]
mod tests;
