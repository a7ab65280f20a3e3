use super::*;
use crate::heightmap::Pitch;
use tiff::encoder::colortype::{Gray8, Gray32Float, GrayI16, RGB8};
use tiff::encoder::{Compression, Rational, TiffEncoder};
use tiff::tags::ResolutionUnit;

/// A float page of 2 x 2 whose other tags `more` writes.
fn page(more: impl FnOnce(&mut Image<'_, '_>)) -> Vec<u8> {
    let mut bytes = Cursor::new(Vec::new());
    let mut encoder = TiffEncoder::new(&mut bytes).unwrap();
    let mut image = encoder.new_image::<Gray32Float>(2, 2).unwrap();
    more(&mut image);
    image.write_data(&[1.0, 2.0, f32::NAN, -9999.0]).unwrap();
    bytes.into_inner()
}

type Image<'a, 'b> = tiff::encoder::ImageEncoder<
    'a,
    &'b mut Cursor<Vec<u8>>,
    Gray32Float,
    tiff::encoder::TiffKindStandard,
>;

fn described(text: &str) -> Vec<u8> {
    page(|image| {
        image
            .encoder()
            .write_tag(Tag::ImageDescription, text)
            .unwrap()
    })
}

fn only(bytes: &[u8]) -> (MapHead, Vec<String>) {
    let mut contents = Tiff.contents(bytes).unwrap();
    assert_eq!(contents.maps.len(), 1);
    (contents.maps.remove(0), contents.notes)
}

#[test]
fn number_types_and_compression() {
    for compression in [
        Compression::Uncompressed,
        Compression::Lzw,
        Compression::Deflate(Default::default()),
        Compression::Packbits,
    ] {
        let values: Vec<i16> = (0..300).map(|i| i * 37 - 5000).collect();
        let mut bytes = Cursor::new(Vec::new());
        let mut encoder = TiffEncoder::new(&mut bytes)
            .unwrap()
            .with_compression(compression);
        encoder.write_image::<GrayI16>(20, 15, &values).unwrap();
        let bytes = bytes.into_inner();
        let (head, notes) = only(&bytes);
        assert_eq!(
            (head.columns, head.rows, head.samples),
            (20, 15, SampleType::Int16)
        );
        assert!(notes.is_empty(), "{notes:?}");
        assert_eq!(
            Tiff.read(&bytes, &head).unwrap().samples,
            Samples::I16(values)
        );
    }
}

#[test]
fn several_pages_and_a_picture_among_them() {
    let mut bytes = Cursor::new(Vec::new());
    let mut encoder = TiffEncoder::new_big(&mut bytes).unwrap();
    encoder.write_image::<Gray8>(2, 1, &[1, 2]).unwrap();
    encoder.write_image::<RGB8>(1, 1, &[1, 2, 3]).unwrap();
    encoder
        .write_image::<Gray32Float>(1, 2, &[3.0, 4.0])
        .unwrap();
    let bytes = bytes.into_inner();
    let contents = Tiff.contents(&bytes).unwrap();
    let names: Vec<_> = contents.maps.iter().map(|m| m.name.as_str()).collect();
    assert_eq!(names, ["page 0", "page 2"]);
    assert!(
        contents.notes[0].contains("page 1 left aside"),
        "{:?}",
        contents.notes
    );
    let read = |i: usize| Tiff.read(&bytes, &contents.maps[i]).unwrap().samples;
    assert_eq!(read(0), Samples::U8(vec![1, 2]));
    assert_eq!(read(1), Samples::F32(vec![3.0, 4.0]));
}

#[test]
fn a_picture_alone_is_refused() {
    let mut bytes = Cursor::new(Vec::new());
    TiffEncoder::new(&mut bytes)
        .unwrap()
        .write_image::<RGB8>(1, 1, &[1, 2, 3])
        .unwrap();
    let error = Tiff.contents(bytes.get_ref()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Unsupported);
    assert!(error.to_string().contains("grey"), "{error}");
}

#[test]
fn resolution_tags_only_where_finer_than_a_printer_s() {
    let pitch = |unit, x: (u32, u32), y: (u32, u32)| {
        let bytes = page(|image| {
            image.resolution_unit(unit);
            image.x_resolution(Rational { n: x.0, d: x.1 });
            image.y_resolution(Rational { n: y.0, d: y.1 });
        });
        let (head, notes) = only(&bytes);
        (head.pitch.map(|p| p.value), notes.len())
    };
    let cm = ResolutionUnit::Centimeter;
    // 5e6 and 2.5e6 pixels per cm: 2 nm and 4 nm.
    let (fine, notes) = pitch(cm, (5_000_000, 1), (5_000_000, 2));
    assert!(fine.unwrap().agrees_with(Pitch { x: 2.0, y: 4.0 }));
    assert_eq!(notes, 0);
    let inch = ResolutionUnit::Inch;
    assert_eq!(
        pitch(inch, (12_700_000, 1), (12_700_000, 1)).0,
        Some(Pitch::square(2.0))
    );
    for (unit, value) in [
        (inch, 1),
        (inch, 72),
        (inch, 96),
        (inch, 300),
        (inch, 9600),
        (cm, 1),
        (cm, 118),
    ] {
        assert_eq!(pitch(unit, (value, 1), (value, 1)), (None, 1), "{value}");
    }
    assert_eq!(
        pitch(ResolutionUnit::None, (5_000_000, 1), (5_000_000, 1)),
        (None, 1)
    );
    assert_eq!(pitch(cm, (0, 1), (1, 0)).0, None);
}

#[test]
fn ome_pixel_size() {
    let bytes = described(
        "<OME><Image><Pixels PhysicalSizeX=\"0.002\" PhysicalSizeY=\"3\" PhysicalSizeYUnit=\"nm\"/></Image></OME>",
    );
    let pitch = only(&bytes).0.pitch.unwrap();
    assert!(pitch.value.agrees_with(Pitch { x: 2.0, y: 3.0 }));
    assert_eq!(pitch.by, "OME-XML");
}

#[test]
fn geo_scale_in_metres_and_nodata() {
    let geo = |model: u16, unit: u16| {
        page(|image| {
            let keys = [
                1, 1, 0, 3, 1024, 0, 1, model, 3076, 0, 1, unit, 4099, 0, 1, unit,
            ];
            let encoder = image.encoder();
            encoder
                .write_tag(Tag::Unknown(33550), &[2e-9, 4e-9, 0.0][..])
                .unwrap();
            encoder.write_tag(Tag::Unknown(34735), &keys[..]).unwrap();
            encoder.write_tag(Tag::Unknown(42113), "-9999 ").unwrap();
        })
    };
    let (head, notes) = only(&geo(1, 9001));
    assert!(
        head.pitch
            .unwrap()
            .value
            .agrees_with(Pitch { x: 2.0, y: 4.0 })
    );
    assert_eq!(head.height.unwrap().value.nm_per_count, 1e9);
    assert_eq!(head.void, Some(-9999.0));
    assert!(notes.is_empty());
    // Geographic model (degrees), or feet.
    for (model, unit) in [(2, 9001), (1, 9002)] {
        let (head, notes) = only(&geo(model, unit));
        assert_eq!(head.pitch, None);
        assert!(notes[0].contains("metres"), "{notes:?}");
    }
}

#[test]
fn a_latin_1_description_does_no_harm() {
    let mut bytes = described("pitch 2 @m");
    let at = bytes.iter().position(|&b| b == b'@').unwrap();
    bytes[at] = 0xb5;
    let mut decoder = decoder(&bytes).unwrap();
    assert_eq!(tiff_tags::description(&mut decoder), "pitch 2 µm");
    let (head, _) = only(&bytes);
    assert_eq!(Tiff.read(&bytes, &head).unwrap().samples.len(), 4);
}

#[test]
fn white_as_zero_is_refused_rather_than_flipped() {
    let mut bytes = page(|_| {});
    // Tag 262, SHORT, count 1, value 1.
    let entry = [6, 1, 3, 0, 1, 0, 0, 0, 1, 0];
    let at = bytes.windows(10).position(|w| w == entry).unwrap();
    bytes[at + 8] = 0;
    let error = Tiff.contents(&bytes).unwrap_err();
    assert!(error.to_string().contains("inverted"), "{error}");
}
