use super::super::archive::tests::zip_of;
use super::*;

const AXES: &str = "<CX><AxisType>I</AxisType><DataType>D</DataType><Increment>2e-9</Increment></CX>\
<CY><AxisType>I</AxisType><DataType>D</DataType><Increment>4e-9</Increment></CY>";

/// A `main.xml` of these parts, in the standard's namespace.
fn xml(revision: &str, feature: &str, axes: &str, z: &str, record3: &str) -> String {
    format!(
        "<?xml version=\"1.0\"?><p:ISO5436_2 xmlns:p=\"http://www.opengps.eu/2008/ISO5436_2\">\
<Record1><Revision>{revision}</Revision><FeatureType>{feature}</FeatureType><Axes>{axes}<CZ>{z}</CZ></Axes></Record1>\
<Record3>{record3}</Record3><Record4><ChecksumFile>md5checksum.hex</ChecksumFile></Record4></p:ISO5436_2>"
    )
}

fn matrix(x: usize, y: usize, z: usize) -> String {
    format!(
        "<MatrixDimension><SizeX>{x}</SizeX><SizeY>{y}</SizeY><SizeZ>{z}</SizeZ></MatrixDimension>"
    )
}

const LINK: &str = "<DataLink><PointDataLink>bindata/data.bin</PointDataLink></DataLink>";
const VALID: &str = "<DataLink><PointDataLink>bindata/data.bin</PointDataLink>\
<ValidPointsLink>bindata/valid.bin</ValidPointsLink></DataLink>";
const FLOAT: &str = "<AxisType>A</AxisType><DataType>F</DataType>";
const INT: &str =
    "<AxisType>A</AxisType><DataType>I</DataType><Increment>1e-9</Increment><Offset>5e-9</Offset>";

fn floats(values: &[f32]) -> Vec<u8> {
    values.iter().flat_map(|v| v.to_le_bytes()).collect()
}

fn package(xml: &str, data: &[u8]) -> Vec<u8> {
    let md5 = format!("{} *main.xml", md5_hex(xml.as_bytes()));
    zip_of(&[
        ("main.xml", xml.as_bytes()),
        ("md5checksum.hex", md5.as_bytes()),
        ("bindata/data.bin", data),
        ("bindata/valid.bin", &[0b1011]),
    ])
}

/// Heights in nm of map `layer`, and all notes.
fn heights(bytes: &[u8], layer: usize) -> Result<(Vec<f32>, Vec<String>)> {
    let contents = X3p.contents(bytes)?;
    let head = &contents.maps[layer];
    let raster = X3p.read(bytes, head)?;
    let mut notes = contents.notes;
    notes.extend(raster.notes);
    let scale = head.height.clone().expect("a height scale").value;
    Ok((raster.samples.into_heights(&scale, None).0, notes))
}

#[test]
fn integers_take_increment_offset_and_validity_bits() {
    let text = xml(
        "ISO5436 - 2000",
        "SUR",
        AXES,
        INT,
        &(matrix(2, 2, 1) + VALID),
    );
    let data: Vec<u8> = [1i16, -2, 3, 4]
        .iter()
        .flat_map(|v| v.to_le_bytes())
        .collect();
    let (z, notes) = heights(&package(&text, &data), 0).unwrap();
    assert!(notes.is_empty(), "{notes:?}");
    // Bits 0b1011, least significant first: the third point is invalid.
    let expected = [6.0, 3.0, f32::NAN, 9.0];
    for (z, e) in z.iter().zip(expected) {
        assert!(
            (z - e).abs() < 1e-5 || (z.is_nan() && e.is_nan()),
            "{z} for {e}"
        );
    }
    let contents = X3p.contents(&package(&text, &data)).unwrap();
    let pitch = contents.maps[0].pitch.clone().unwrap().value;
    assert!(pitch.agrees_with(Pitch { x: 2.0, y: 4.0 }));
}

#[test]
fn floats_take_the_increment_only_under_the_newer_revision() {
    let z = "<AxisType>A</AxisType><DataType>F</DataType><Increment>2</Increment>";
    for (revision, first) in [("ISO5436 - 2000", 1.0), ("ISO25178-72:2017/DAM1", 2.0)] {
        let text = xml(revision, "SUR", AXES, z, &(matrix(2, 1, 1) + LINK));
        let (z, notes) = heights(&package(&text, &floats(&[1e-9, 3e-9])), 0).unwrap();
        assert!((z[0] - first).abs() < 1e-6, "{z:?}");
        assert!(notes[0].contains("increment 2"), "{notes:?}");
    }
}

#[test]
fn layers_are_maps() {
    let text = xml("", "SUR", AXES, FLOAT, &(matrix(1, 2, 3) + LINK));
    let bytes = package(
        &text,
        &floats(&[1e-9, 2e-9, 3e-9, 4e-9, 5e-9, f32::INFINITY]),
    );
    assert_eq!(X3p.contents(&bytes).unwrap().maps.len(), 3);
    let (z, _) = heights(&bytes, 1).unwrap();
    assert!((z[0] - 3.0).abs() < 1e-6 && (z[1] - 4.0).abs() < 1e-6);
    assert!(!heights(&bytes, 2).unwrap().0[1].is_finite());
}

#[test]
fn a_list_with_an_empty_datum() {
    let list = "<DataList><Datum>1e-9</Datum><!-- none --><Datum/><Datum>3e-9</Datum></DataList>";
    let text = xml(
        "",
        "PRF",
        AXES,
        "<DataType>D</DataType>",
        &(matrix(3, 1, 1) + list),
    );
    let (z, _) = heights(&package(&text, &[]), 0).unwrap();
    assert!((z[0] - 1.0).abs() < 1e-6 && z[1].is_nan() && (z[2] - 3.0).abs() < 1e-6);
    let short = text.replace("<Datum/>", "");
    assert_eq!(
        heights(&package(&short, &[]), 0).unwrap_err().kind(),
        ErrorKind::Malformed
    );
}

#[test]
fn what_real_files_do() {
    // A byte order mark, no namespace, another root, a folder, litter, a bare wrong checksum.
    let text = xml(
        "ISO5436 – 2000",
        "SUR",
        AXES,
        FLOAT,
        &(matrix(2, 1, 1) + LINK),
    )
    .replace("p:ISO5436_2", "ISO5436")
    .replace("xmlns:p", "xmlns");
    let text = format!("\u{feff}{text}");
    let bytes = zip_of(&[
        ("__MACOSX/deep/._main.xml", b"litter"),
        ("deep/main.xml", text.as_bytes()),
        ("deep/md5checksum.hex", b"00000000000000000000000000000000"),
        ("deep/bindata/data.bin", &floats(&[1e-9, f32::NAN])),
    ]);
    assert!(X3p.recognises(&bytes));
    let (z, notes) = heights(&bytes, 0).unwrap();
    assert!((z[0] - 1.0).abs() < 1e-6 && z[1].is_nan());
    assert_eq!(notes.len(), 1);
    assert!(notes[0].contains("MD5"), "{notes:?}");
}

#[test]
fn a_changed_point_file_is_noted() {
    let link = LINK.replace(
        "</DataLink>",
        "<MD5ChecksumPointData>00</MD5ChecksumPointData></DataLink>",
    );
    let text = xml("", "SUR", AXES, FLOAT, &(matrix(1, 1, 1) + &link));
    let (_, notes) = heights(&package(&text, &floats(&[1e-9, 0.0])), 0).unwrap();
    assert!(notes.iter().any(|n| n.contains("MD5")), "{notes:?}");
    assert!(
        notes.iter().any(|n| n.contains("4 bytes too many")),
        "{notes:?}"
    );
}

#[test]
fn lists_and_irregular_grids_are_refused_with_the_remedy() {
    let absolute = AXES.replace("<AxisType>I", "<AxisType>A");
    for (feature, axes, record3) in [
        ("PCL", AXES, "<ListDimension>2</ListDimension>".to_owned()),
        ("SUR", absolute.as_str(), matrix(2, 2, 1)),
        ("SUR", AXES, "<ListDimension>2</ListDimension>".to_owned()),
        ("XYZ", AXES, matrix(2, 2, 1)),
    ] {
        let text = xml("", feature, axes, FLOAT, &(record3 + LINK));
        let error = X3p
            .contents(&package(&text, &floats(&[0.0; 4])))
            .unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Unsupported, "{feature}");
        assert!(error.remedy_text().contains("regular grid"), "{error}");
    }
}

#[test]
fn what_is_not_stated_is_not_guessed() {
    let no_step = INT.replace("<Increment>1e-9</Increment>", "");
    let bare = AXES.replace("2e-9", "0");
    let text = xml("", "SUR", &bare, &no_step, &(matrix(2, 1, 1) + LINK));
    let contents = X3p.contents(&package(&text, &[0; 4])).unwrap();
    assert_eq!(
        (&contents.maps[0].pitch, &contents.maps[0].height),
        (&None, &None)
    );
    assert_eq!(contents.notes.len(), 2);
}

#[test]
fn broken_and_boastful_files() {
    let good = xml("", "SUR", AXES, FLOAT, &(matrix(2, 2, 1) + LINK));
    let data = floats(&[0.0; 4]);
    for (text, data) in [
        (good.replace("2e-9", "two"), &data[..]),
        (good.replace("bindata/data.bin", "bindata/none.bin"), &data),
        (good.replace("</Record3>", ""), &data),
        (good.replace("ISO5436_2", "Other"), &data),
        (good.clone(), &data[..15]),
        (good.replace("<SizeX>2", "<SizeX>0"), &data),
        (good.replace("<SizeX>2", "<SizeX>-2"), &data),
        (good.replace("<SizeX>2", "<SizeX>16000"), &data),
        (good.replace("<DataType>F", "<DataType>Q"), &data),
        (format!("{}{good}", "<ISO5436>".repeat(100_000)), &data),
    ] {
        let shown: String = text.chars().take(200).collect();
        let error = heights(&package(&text, data), 0).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Malformed, "{shown}: {error}");
    }
    let huge = good.replace("<SizeX>2", "<SizeX>999999999");
    let error = heights(&package(&huge, &data), 0).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Unsupported);
}
