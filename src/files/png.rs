//! Grey PNG, 16 or 8 bits, plain or interlaced. `pHYs` counts as the pitch only in metres and
//! where finer than a printer's; a PNG never states a unit of height.

use super::format::{Contents, Format, MapHead, Raster, Stated, malformed};
use super::limits::{check_claim, check_size};
use super::samples::{Endian, SampleType, Samples};
use super::tiff_tags::COARSEST_TRUSTED_NM;
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use png::{BitDepth, ColorType, Decoder, DecodingError, Limits, PixelDimensions, Reader, Unit};
use std::io::Cursor;

/// The PNG reader.
pub struct Png;

/// Bytes the decoder may use besides the samples: rows and metadata.
const WORKING_BYTES: usize = 64 << 20;

impl Format for Png {
    fn name(&self) -> &'static str {
        "PNG"
    }

    fn recognises(&self, bytes: &[u8]) -> bool {
        bytes.starts_with(b"\x89PNG\r\n\x1a\n")
    }

    fn contents(&self, bytes: &[u8]) -> Result<Contents> {
        let reader = reader(bytes)?;
        let mut contents = Contents::default();
        let mut head = head(&reader, bytes.len())?;
        let info = reader.info();
        if head.samples == SampleType::Uint8 {
            contents.notes.push(
                "8-bit grey: 256 steps of height at most, perhaps a picture rather than heights"
                    .to_owned(),
            );
        }
        if info.animation_control.is_some_and(|a| a.num_frames > 1) {
            contents
                .notes
                .push("an animation: its first frame is read".to_owned());
        }
        if let Some(dims) = info.pixel_dims {
            match pitch(dims) {
                Ok(pitch) => head.pitch = Some(Stated::new(pitch, "PNG pHYs")),
                Err(why) => contents.notes.push(why),
            }
        }
        contents.maps.push(head);
        Ok(contents)
    }

    fn read(&self, bytes: &[u8], _head: &MapHead) -> Result<Raster> {
        let mut reader = reader(bytes)?;
        let head = head(&reader, bytes.len())?;
        let needed = head.columns * head.rows * head.samples.bytes();
        if reader.output_buffer_size() != Some(needed) {
            return Err(malformed("the PNG header contradicts itself"));
        }
        let mut buffer = vec![0; needed];
        reader.next_frame(&mut buffer).map_err(failed)?;
        Ok(Samples::from_bytes(head.samples, Endian::Big, &buffer)?.into())
    }
}

fn reader(bytes: &[u8]) -> Result<Reader<Cursor<&[u8]>>> {
    let limits = Limits {
        bytes: WORKING_BYTES,
    };
    let mut decoder = Decoder::new_with_limits(Cursor::new(bytes), limits);
    decoder.set_ignore_text_chunk(true);
    decoder.set_ignore_iccp_chunk(true);
    // The size is checked before rows are set aside for it.
    let info = decoder.read_header_info().map_err(failed)?;
    check_size(info.width as usize, info.height as usize)?;
    decoder.read_info().map_err(failed)
}

fn head(reader: &Reader<Cursor<&[u8]>>, stored: usize) -> Result<MapHead> {
    let info = reader.info();
    let kind = match (info.color_type, info.bit_depth) {
        (ColorType::Grayscale, BitDepth::Sixteen) => SampleType::Uint16,
        (ColorType::Grayscale, BitDepth::Eight) => SampleType::Uint8,
        (color, depth) => {
            return Err(Error::new(
                ErrorKind::Unsupported,
                format!(
                    "a PNG of {}-bit {color:?} is a picture, not heights",
                    depth as u8
                ),
            )
            .remedy("Export the heights as 16-bit grey without transparency, or as TIFF"));
        }
    };
    let (columns, rows) = (info.width as usize, info.height as usize);
    let pixels = check_size(columns, rows)?;
    check_claim(pixels * kind.bytes(), stored, true)?;
    MapHead::new("image", 0, (columns, rows), kind)
}

fn pitch(dims: PixelDimensions) -> std::result::Result<Pitch, String> {
    if dims.unit != Unit::Meter {
        return Err("PNG pHYs states no unit: not used as the pixel pitch".to_owned());
    }
    let pitch = Pitch {
        x: 1e9 / f64::from(dims.xppu),
        y: 1e9 / f64::from(dims.yppu),
    };
    match pitch.checked() {
        Ok(pitch) if pitch.x.max(pitch.y) <= COARSEST_TRUSTED_NM => Ok(pitch),
        _ => Err(format!(
            "PNG pHYs of {} x {} per metre is a printer's or screen's: not used as the pixel pitch",
            dims.xppu, dims.yppu
        )),
    }
}

fn failed(error: DecodingError) -> Error {
    match error {
        DecodingError::LimitsExceeded => malformed("the PNG claims more than the limits allow"),
        other => malformed(format!("the PNG is damaged: {other}")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A grey PNG with these rows and physical size.
    fn png(depth: BitDepth, data: &[u8], dims: Option<PixelDimensions>) -> Vec<u8> {
        let mut bytes = Vec::new();
        let mut encoder = png::Encoder::new(&mut bytes, 2, 2);
        encoder.set_color(ColorType::Grayscale);
        encoder.set_depth(depth);
        encoder.set_pixel_dims(dims);
        let mut writer = encoder.write_header().unwrap();
        writer.write_image_data(data).unwrap();
        writer.finish().unwrap();
        bytes
    }

    #[test]
    fn sixteen_and_eight_bits() {
        let bytes = png(BitDepth::Sixteen, &[0, 1, 0, 2, 1, 0, 0xff, 0xff], None);
        let contents = Png.contents(&bytes).unwrap();
        assert!(contents.notes.is_empty());
        let samples = Png.read(&bytes, &contents.maps[0]).unwrap().samples;
        assert_eq!(samples, Samples::U16(vec![1, 2, 256, 65535]));
        let bytes = png(BitDepth::Eight, &[1, 2, 3, 4], None);
        let contents = Png.contents(&bytes).unwrap();
        assert_eq!(contents.notes.len(), 1);
        let samples = Png.read(&bytes, &contents.maps[0]).unwrap().samples;
        assert_eq!(samples, Samples::U8(vec![1, 2, 3, 4]));
    }

    #[test]
    fn physical_size_only_where_plausible() {
        let dims = |ppu, unit| {
            Some(PixelDimensions {
                xppu: ppu,
                yppu: ppu,
                unit,
            })
        };
        let read = |dims| {
            let contents = Png
                .contents(&png(BitDepth::Sixteen, &[0; 8], dims))
                .unwrap();
            (
                contents.maps[0].pitch.clone().map(|p| p.value),
                contents.notes.len(),
            )
        };
        let (pitch, notes) = read(dims(500_000_000, Unit::Meter));
        assert_eq!((pitch, notes), (Some(Pitch::square(2.0)), 0));
        // 72 and 300 per inch, no unit, zero.
        for junk in [
            dims(2835, Unit::Meter),
            dims(11811, Unit::Meter),
            dims(500_000_000, Unit::Unspecified),
            dims(0, Unit::Meter),
        ] {
            assert_eq!(read(junk), (None, 1), "{junk:?}");
        }
    }

    #[test]
    fn colour_is_no_height() {
        let mut bytes = Vec::new();
        let mut encoder = png::Encoder::new(&mut bytes, 1, 1);
        encoder.set_color(ColorType::Rgb);
        let mut writer = encoder.write_header().unwrap();
        writer.write_image_data(&[1, 2, 3]).unwrap();
        writer.finish().unwrap();
        let error = Png.contents(&bytes).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Unsupported);
        assert!(error.to_string().contains("16-bit grey"), "{error}");
    }
}
