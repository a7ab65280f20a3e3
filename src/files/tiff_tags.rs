//! What the tags of a TIFF page state of its scale, and which of them are to be believed.

use super::format::{HeightScale, MapHead, Stated};
use super::ome::{self, OmePitch};
use super::provenance;
use crate::heightmap::Pitch;
use std::io::Cursor;
use tiff::decoder::Decoder;
use tiff::decoder::ifd::Value;
use tiff::tags::Tag;

/// The bytes of a TIFF file.
pub type Stream<'a> = Cursor<&'a [u8]>;

const MODEL_PIXEL_SCALE: Tag = Tag::Unknown(33550);
const GEO_KEYS: Tag = Tag::Unknown(34735);
const NODATA: Tag = Tag::Unknown(42113);

/// Longest description that is read.
const MAX_DESCRIPTION: u64 = 1 << 20;

/// Resolution tags are believed only up to this pitch: 10160 per inch. Coarser values are what
/// programs write for printers and screens (72, 96, 300 per inch, or 1). Common practice.
pub const COARSEST_TRUSTED_NM: f64 = 2500.0;

/// The texts of a page, and of the first page (where OME-XML speaks for all).
pub struct Tags<'a> {
    pub description: &'a str,
    pub first_description: &'a str,
}

impl Tags<'_> {
    /// Fills in what the page states. A tag that cannot be read counts as absent.
    pub fn apply(
        &self,
        decoder: &mut Decoder<Stream<'_>>,
        head: &mut MapHead,
        notes: &mut Vec<String>,
    ) {
        head.void = nodata(decoder);
        provenance::apply(self.description, head);
        if head.pitch.is_none() {
            head.pitch = match ome::pitch(self.first_description) {
                OmePitch::Stated(pitch) => Some(Stated::new(pitch, "OME-XML")),
                OmePitch::Unusable(why) => {
                    notes.push(why);
                    None
                }
                OmePitch::None => None,
            };
        }
        if head.pitch.is_none() {
            head.pitch = geo_pitch(decoder, notes);
        }
        if head.pitch.is_none() {
            head.pitch = resolution_pitch(decoder, notes);
        }
        // GeoTIFF 1.1, VerticalUnitsGeoKey 4099 = 9001: metre.
        if head.height.is_none() && geo_key(decoder, 4099) == Some(9001) {
            head.height =
                HeightScale::of_unit("m").map(|h| Stated::new(h, "GeoTIFF vertical unit"));
        }
    }
}

/// The description as text: UTF-8 where it is, else Latin-1, which never fails.
pub fn description(decoder: &mut Decoder<Stream<'_>>) -> String {
    text(decoder, Tag::ImageDescription).unwrap_or_default()
}

fn text(decoder: &mut Decoder<Stream<'_>>, tag: Tag) -> Option<String> {
    let mut ifd = decoder.image_ifd();
    let count = ifd.find_entry(tag)?.count().min(MAX_DESCRIPTION);
    let mut bytes = vec![0; usize::try_from(count).ok()?];
    let read = ifd.find_tag_bytes(tag, &mut bytes, 0).ok()??;
    bytes.truncate(read);
    while bytes.last() == Some(&0) {
        bytes.pop();
    }
    Some(match String::from_utf8(bytes) {
        Ok(text) => text,
        Err(e) => e.into_bytes().into_iter().map(char::from).collect(),
    })
}

/// GDAL's nodata tag, ASCII.
fn nodata(decoder: &mut Decoder<Stream<'_>>) -> Option<f64> {
    let value: f64 = text(decoder, NODATA)?.trim().parse().ok()?;
    value.is_finite().then_some(value)
}

fn numbers(decoder: &mut Decoder<Stream<'_>>, tag: Tag) -> Option<Vec<f64>> {
    let values = match decoder.find_tag(tag).ok()?? {
        Value::List(values) => values,
        value => vec![value],
    };
    values.into_iter().map(number).collect()
}

fn number(value: Value) -> Option<f64> {
    match value {
        Value::Rational(n, d) => Some(f64::from(n) / f64::from(d)),
        Value::SRational(n, d) => Some(f64::from(n) / f64::from(d)),
        Value::Float(v) => Some(f64::from(v)),
        Value::Double(v) => Some(v),
        other => other.into_u64().ok().map(|v| v as f64),
    }
}

/// The value of a GeoTIFF key that is stored in the directory itself.
fn geo_key(decoder: &mut Decoder<Stream<'_>>, key: u16) -> Option<u16> {
    let keys = decoder.find_tag(GEO_KEYS).ok()??.into_u16_vec().ok()?;
    let entries = keys.get(4..)?.as_chunks::<4>().0;
    let entry = entries
        .iter()
        .find(|e| e[0] == key && e[1] == 0 && e[2] == 1)?;
    Some(entry[3])
}

/// Pixel scale of a GeoTIFF whose model is projected (1024 = 1) with linear unit metre
/// (3076 = 9001). GeoTIFF 1.1, OGC 19-008.
fn geo_pitch(decoder: &mut Decoder<Stream<'_>>, notes: &mut Vec<String>) -> Option<Stated<Pitch>> {
    let scale = numbers(decoder, MODEL_PIXEL_SCALE)?;
    let &[x, y, ..] = scale.as_slice() else {
        return None;
    };
    let metres = geo_key(decoder, 1024) == Some(1) && geo_key(decoder, 3076) == Some(9001);
    let pitch = Pitch {
        x: x * 1e9,
        y: y * 1e9,
    }
    .checked();
    match pitch {
        Ok(pitch) if metres => Some(Stated::new(pitch, "GeoTIFF pixel scale")),
        _ => {
            notes.push(format!(
                "GeoTIFF pixel scale {x} x {y} is not stated in metres: not used"
            ));
            None
        }
    }
}

fn resolution_pitch(
    decoder: &mut Decoder<Stream<'_>>,
    notes: &mut Vec<String>,
) -> Option<Stated<Pitch>> {
    let mut first = |tag| numbers(decoder, tag)?.first().copied();
    let x = first(Tag::XResolution)?;
    let y = first(Tag::YResolution)?;
    let unit = first(Tag::ResolutionUnit).unwrap_or(2.0);
    let (nm, name) = match unit {
        2.0 => (25.4e6, "inch"),
        3.0 => (1e7, "cm"),
        // 1 per nothing is what writers put who have nothing to say.
        _ if x == 1.0 && y == 1.0 => return None,
        _ => {
            notes.push(format!(
                "resolution tags {x} x {y} without a unit: not used"
            ));
            return None;
        }
    };
    let pitch = Pitch {
        x: nm / x,
        y: nm / y,
    }
    .checked()
    .ok()?;
    if pitch.x.max(pitch.y) > COARSEST_TRUSTED_NM {
        notes.push(format!(
            "resolution tags {x} x {y} per {name} are a printer's or screen's: not used as the pixel pitch"
        ));
        return None;
    }
    Some(Stated::new(pitch, "TIFF resolution tags"))
}
