//! Damaged files of every format: cut anywhere and with bytes changed anywhere, a reader answers
//! with an error or with the true heights, never with a panic.

use super::archive::tests::zip_of;
use super::*;
use proptest::prelude::*;
use std::io::Cursor;

/// A small valid file of every format.
fn files() -> Vec<(&'static str, Vec<u8>)> {
    static FILES: std::sync::LazyLock<Vec<(&'static str, Vec<u8>)>> =
        std::sync::LazyLock::new(make_files);
    FILES.clone()
}

fn make_files() -> Vec<(&'static str, Vec<u8>)> {
    let values = ndarray::Array2::from_shape_fn((3, 4), |(r, c)| (r * 4 + c) as f32);
    let map = HeightMap::new(values.clone(), Pitch::square(2.0)).unwrap();
    let folder = tempfile::tempdir().unwrap();
    let written = |ending: &str| {
        let path = folder.path().join(format!("a.{ending}"));
        write(&path, &map).unwrap();
        std::fs::read(path).unwrap()
    };
    let mut npz = ndarray_npy::NpzWriter::new_compressed(Cursor::new(Vec::new()));
    npz.add_array("z", &values).unwrap();
    npz.add_array("pitch_nm", &ndarray::arr0(2.0)).unwrap();
    let mut packed = Cursor::new(Vec::new());
    ::tiff::encoder::TiffEncoder::new(&mut packed)
        .unwrap()
        .with_compression(::tiff::encoder::Compression::Lzw)
        .write_image::<::tiff::encoder::colortype::Gray16>(3, 2, &[1, 2, 3, 4, 5, 6])
        .unwrap();
    let xml = "<ISO5436_2><Record1><FeatureType>SUR</FeatureType><Axes>\
<CX><AxisType>I</AxisType><Increment>2e-9</Increment></CX><CY><AxisType>I</AxisType><Increment>2e-9</Increment></CY>\
<CZ><AxisType>A</AxisType><DataType>F</DataType></CZ></Axes></Record1><Record3>\
<MatrixDimension><SizeX>2</SizeX><SizeY>2</SizeY><SizeZ>1</SizeZ></MatrixDimension>\
<DataLink><PointDataLink>data.bin</PointDataLink><ValidPointsLink>valid.bin</ValidPointsLink></DataLink></Record3></ISO5436_2>";
    let data: Vec<u8> = [1e-9f32, 2e-9, 3e-9, 4e-9]
        .iter()
        .flat_map(|v| v.to_le_bytes())
        .collect();
    let x3p = zip_of(&[
        ("main.xml", xml.as_bytes()),
        ("data.bin", &data),
        ("valid.bin", &[0b0111]),
    ]);
    vec![
        ("tif", written("tif")),
        ("packed tif", packed.into_inner()),
        ("png", written("png")),
        ("npy", written("npy")),
        ("npz", npz.finish().unwrap().into_inner()),
        ("x3p", x3p),
    ]
}

/// Every map's samples, as [`open`] would decode them.
fn decode(bytes: &[u8]) -> Result<Vec<Vec<f64>>> {
    let format = FORMATS
        .iter()
        .find(|f| f.recognises(bytes))
        .ok_or_else(|| known::not_read(bytes))?;
    let contents = format.contents(bytes)?;
    contents
        .maps
        .iter()
        .map(|head| {
            let samples = format.read(bytes, head)?.samples;
            assert_eq!(samples.len(), head.columns * head.rows);
            Ok(samples.to_f64())
        })
        .collect()
}

fn bits(maps: &[Vec<f64>]) -> Vec<u64> {
    maps.iter().flatten().map(|z| z.to_bits()).collect()
}

#[test]
fn cut_anywhere_a_file_gives_an_error_or_its_true_heights() {
    for (name, bytes) in files() {
        let whole = decode(&bytes).unwrap_or_else(|e| panic!("{name}: {e}"));
        let mut refused = 0;
        for length in 0..bytes.len() {
            match decode(&bytes[..length]) {
                Ok(cut) => assert_eq!(bits(&cut), bits(&whole), "{name} cut to {length}"),
                Err(e) => {
                    refused += 1;
                    assert!(!e.what().is_empty());
                }
            }
        }
        assert!(
            refused > bytes.len() / 2,
            "{name}: {refused} of {}",
            bytes.len()
        );
    }
}

#[test]
fn every_single_byte_set_to_extremes() {
    for (_, bytes) in files() {
        for at in 0..bytes.len() {
            for value in [0, 1, 0x7f, 0x80, 0xff, bytes[at] ^ 1] {
                let mut changed = bytes.clone();
                changed[at] = value;
                let _ = decode(&changed);
            }
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(1000))]

    #[test]
    fn changed_bytes_never_panic(
        which in 0usize..6,
        changes in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 1..12),
        keep in any::<prop::sample::Index>(),
        cut in any::<bool>(),
    ) {
        let (_, mut bytes) = files().swap_remove(which);
        for (at, value) in changes {
            let at = at.index(bytes.len());
            bytes[at] = value;
        }
        if cut {
            bytes.truncate(keep.index(bytes.len()));
        }
        let _ = decode(&bytes);
    }

    #[test]
    fn any_bytes_after_a_magic_never_panic(
        magic in prop::sample::select(vec![
            &b"II*\0"[..], b"MM\0*", b"II+\0\x08\0\0\0", b"\x89PNG\r\n\x1a\n", b"\x93NUMPY\x01\0", b"PK\x03\x04", b"",
        ]),
        rest in prop::collection::vec(any::<u8>(), 0..200),
    ) {
        let mut bytes = magic.to_vec();
        bytes.extend(rest);
        let _ = decode(&bytes);
    }
}

#[test]
fn headers_that_claim_the_moon() {
    // A TIFF of 4 billion pixels a side, and one within the limits that holds four bytes.
    for side in [u32::MAX, 16384] {
        let mut bytes = b"II*\0\x08\0\0\0\x09\0".to_vec();
        for (tag, value) in [
            (256u16, side),
            (257, side),
            (258, 32),
            (259, 1),
            (262, 1),
            (273, 4),
            (278, side),
            (279, 4),
            (339, 3),
        ] {
            bytes.extend(tag.to_le_bytes());
            bytes.extend(4u16.to_le_bytes());
            bytes.extend(1u32.to_le_bytes());
            bytes.extend(value.to_le_bytes());
        }
        bytes.extend([0; 4]);
        let error = decode(&bytes).unwrap_err();
        assert!(error.to_string().contains("claims"), "{error}");
    }
    let png = files().swap_remove(2).1;
    for side in [0x7fff_ffff_u32, 16384] {
        let mut bytes = png.clone();
        bytes[16..20].copy_from_slice(&side.to_be_bytes());
        bytes[20..24].copy_from_slice(&side.to_be_bytes());
        // The header's CRC-32 has to be right for the size to be believed.
        let crc = crc32(&bytes[12..29]);
        bytes[29..33].copy_from_slice(&crc.to_be_bytes());
        let error = decode(&bytes).unwrap_err();
        assert!(error.to_string().contains("claims"), "{error}");
    }
}

/// CRC-32 of PNG, bit by bit (W3C PNG specification, annex D).
fn crc32(bytes: &[u8]) -> u32 {
    !bytes.iter().fold(u32::MAX, |crc, &byte| {
        (0..8).fold(crc ^ u32::from(byte), |c, _| {
            if c & 1 == 1 {
                0xedb8_8320 ^ (c >> 1)
            } else {
                c >> 1
            }
        })
    })
}
