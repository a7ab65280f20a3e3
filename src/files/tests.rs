use super::*;
use ndarray::{Array2, arr2};
use proptest::prelude::*;
use tempfile::TempDir;

const PITCH: Pitch = Pitch {
    x: 2.0,
    y: 1.0 / 3.0,
};

fn map() -> HeightMap {
    let heights = arr2(&[[0.1, -2.5, f32::NAN], [1e3, 7.0, 1e-3]]);
    let provenance = Provenance {
        file: Some("scan.x3p".into()),
        sha256: Some("0f".into()),
        scale_source: "X3P axes".into(),
        steps: vec!["Levelled by a plane.".into()],
    };
    HeightMap::new(heights, PITCH)
        .unwrap()
        .with_provenance(provenance)
}

fn same_bits(a: &HeightMap, b: &HeightMap) -> bool {
    a.heights()
        .iter()
        .map(|z| z.to_bits())
        .eq(b.heights().iter().map(|z| z.to_bits()))
}

fn file(folder: &TempDir, name: &str, bytes: &[u8]) -> PathBuf {
    let path = folder.path().join(name);
    std::fs::write(&path, bytes).unwrap();
    path
}

fn array(folder: &TempDir, name: &str) -> PathBuf {
    file(
        folder,
        name,
        &write::npy(arr2(&[[1.0f32, 2.0], [3.0, f32::NEG_INFINITY]]).view()).unwrap(),
    )
}

#[test]
fn tiff_and_npy_read_back_whole() {
    let folder = tempfile::tempdir().unwrap();
    for name in ["a.tif", "b.TIFF", "c.npy"] {
        let path = folder.path().join(name);
        write(&path, &map()).unwrap();
        let back = open(&path, &OpenOptions::default()).unwrap();
        assert!(same_bits(&back, &map()), "{name}");
        assert_eq!(back.pitch(), PITCH, "{name}");
        let provenance = back.provenance();
        assert_eq!(provenance.file.as_deref(), Some(path.as_path()));
        let bytes = std::fs::read(&path).unwrap();
        assert_eq!(
            provenance.sha256.as_deref(),
            Some(sha256_hex(&bytes).as_str())
        );
        if name != "c.npy" {
            assert_eq!(
                provenance.steps,
                [
                    "Read from scan.x3p, SHA-256 0f, scale from X3P axes.",
                    "Levelled by a plane."
                ]
            );
        }
    }
}

#[test]
fn png_reads_back_within_half_a_step() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("a.png");
    write(&path, &map()).unwrap();
    let back = open(&path, &OpenOptions::default()).unwrap();
    assert_eq!(back.pitch(), PITCH);
    let half_step = (1e3 + 2.5) / 65534.0 / 2.0 * 1.001;
    for (a, b) in back.heights().iter().zip(map().heights()) {
        assert!(
            (a - b).abs() <= half_step || (a.is_nan() && b.is_nan()),
            "{a} for {b}"
        );
    }
    let flat = HeightMap::new(arr2(&[[5.0, f32::NAN]]), PITCH).unwrap();
    write(&path, &flat).unwrap();
    assert!(same_bits(
        &open(&path, &OpenOptions::default()).unwrap(),
        &flat
    ));
    let void = HeightMap::new(arr2(&[[f32::NAN]]), PITCH).unwrap();
    write(&path, &void).unwrap();
    assert_eq!(
        open(&path, &OpenOptions::default()).unwrap().void_count(),
        1
    );
}

#[test]
fn a_stale_sidecar_does_not_override_a_new_tiff() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("a.tif");
    file(
        &folder,
        "a.tif.toml",
        b"pitch = \"9 nm\"\nheight-unit = \"um\"\n",
    );
    write(&path, &map()).unwrap();
    let back = open(&path, &OpenOptions::default()).unwrap();
    assert_eq!(back.pitch(), PITCH);
    assert!(same_bits(&back, &map()));
}

#[test]
fn integers_with_a_unit_and_with_a_sidecar_scale() {
    let folder = tempfile::tempdir().unwrap();
    let path = file(
        &folder,
        "a.npy",
        &write::npy(arr2(&[[1u16, 0, 300]]).view()).unwrap(),
    );
    let options = OpenOptions {
        pitch: Some(PITCH),
        height_unit: Some("nm".into()),
        map: None,
    };
    let counted = open(&path, &options).unwrap();
    assert_eq!(counted.heights(), arr2(&[[1.0, 0.0, 300.0]]));
    assert!(counted.provenance().scale_source.contains("1 count = 1 nm"));
    file(
        &folder,
        "a.npy.toml",
        b"pitch = \"1 nm\"\nheight-scale = \"0.5 nm\"\nheight-offset = \"-1 nm\"\nvoid = 0\n",
    );
    let scaled = open(
        &path,
        &OpenOptions {
            pitch: Some(PITCH),
            ..OpenOptions::default()
        },
    )
    .unwrap();
    assert_eq!(scaled.heights()[[0, 2]], 149.0);
    assert_eq!(scaled.void_count(), 1);
    assert_eq!(scaled.pitch(), PITCH);
    let source = &scaled.provenance().scale_source;
    assert!(
        source.contains("overrides 1 nm, 1 nm from sidecar a.npy.toml"),
        "{source}"
    );
}

#[test]
fn what_is_missing_wrong_or_unknown_names_the_file() {
    let folder = tempfile::tempdir().unwrap();
    let none = OpenOptions::default();
    let npy = array(&folder, "a.npy");
    let bad = array(&folder, "b.npy");
    file(&folder, "b.npy.toml", b"pich = 2\n");
    let jpeg = file(
        &folder,
        "c.tif",
        b"\xff\xd8\xff\xe0 not what the ending says",
    );
    let empty = file(&folder, "d.png", b"");
    let tif = array(&folder, "e.tif");
    for (path, options, kind, part) in [
        (&npy, &none, ErrorKind::MissingPitch, "a.npy.toml"),
        (&bad, &none, ErrorKind::Setting, "pich"),
        (&jpeg, &none, ErrorKind::UnknownFormat, "JPEG"),
        (&empty, &none, ErrorKind::UnknownFormat, "empty"),
        // By content: an array under the ending .tif is an array.
        (&tif, &none, ErrorKind::MissingPitch, "--pitch"),
        (
            &npy,
            &OpenOptions {
                map: Some(3),
                ..none.clone()
            },
            ErrorKind::Setting,
            "map 3",
        ),
    ] {
        let error = open(path, options).unwrap_err();
        assert_eq!(error.kind(), kind, "{error}");
        assert!(error.to_string().contains(part), "{error}");
        assert!(
            error.what().starts_with(&path.display().to_string()),
            "{error}"
        );
    }
}

#[test]
fn several_maps_are_listed_and_chosen() {
    let folder = tempfile::tempdir().unwrap();
    let mut npz = ndarray_npy::NpzWriter::new(std::io::Cursor::new(Vec::new()));
    npz.add_array("height", &Array2::<f32>::ones((2, 3)))
        .unwrap();
    npz.add_array("phase", &Array2::<f32>::zeros((2, 3)))
        .unwrap();
    let path = file(&folder, "a.npz", npz.finish().unwrap().get_ref());
    let mut options = OpenOptions {
        pitch: Some(PITCH),
        height_unit: Some("nm".into()),
        map: None,
    };
    let error = open(&path, &options).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::SeveralMaps);
    assert!(
        error.to_string().contains("1: phase (3 x 2 pixels)"),
        "{error}"
    );
    let listed = inspect(&path, &options).unwrap();
    assert_eq!(
        (listed.maps.len(), listed.map, listed.range_nm),
        (2, None, None)
    );
    options.map = Some(0);
    assert_eq!(open(&path, &options).unwrap().range(), Some((1.0, 1.0)));
    assert_eq!(inspect(&path, &options).unwrap().range_nm, Some([1.0, 1.0]));
}

#[test]
fn an_inspection_says_what_it_knows_and_serializes() {
    let folder = tempfile::tempdir().unwrap();
    let path = array(&folder, "a.npy");
    let json = serde_json::to_value(inspect(&path, &OpenOptions::default()).unwrap()).unwrap();
    assert_eq!(json["format"], "NumPy array");
    assert_eq!(json["maps"][0]["sample_type"], "float32");
    assert!(json["pitch_nm"].is_null() && json["range_nm"].is_null());
    assert_eq!(json["range_raw"], serde_json::json!([1.0, 3.0]));
    assert_eq!(json["voids"], 1);
    file(
        &folder,
        "a.npy.toml",
        b"pitch = [\"2 nm\", \"4 nm\"]\nheight-unit = \"um\"\n",
    );
    let json = serde_json::to_value(inspect(&path, &OpenOptions::default()).unwrap()).unwrap();
    assert_eq!(json["pitch_nm"], serde_json::json!([2.0, 4.0]));
    assert_eq!(json["pitch_source"], "sidecar a.npy.toml");
    assert_eq!(json["height_unit"], "um");
    assert_eq!(json["range_nm"], serde_json::json!([1000.0, 3000.0]));
}

#[test]
fn a_tip_keeps_its_outside() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("tip.npy");
    let tip = arr2(&[[f32::NEG_INFINITY, -1.0], [0.0, -2.5]]);
    write_tip_npy(&path, tip.view()).unwrap();
    let grid = read_tip_grid(&path, &OpenOptions::default()).unwrap();
    assert_eq!(grid.heights, tip);
    assert_eq!(grid.pitch, None);
    file(
        &folder,
        "tip.npy.toml",
        b"pitch = \"3 nm\"\nheight-unit = \"um\"\n",
    );
    let grid = read_tip_grid(&path, &OpenOptions::default()).unwrap();
    assert_eq!(grid.pitch, Some(Pitch::square(3.0)));
    assert_eq!(grid.heights[[1, 1]], -2500.0);
    assert_eq!(grid.heights[[0, 0]], f32::NEG_INFINITY);
    // As a height map the outside is void.
    assert_eq!(
        open(&path, &OpenOptions::default()).unwrap().void_count(),
        1
    );
    let nan = folder.path().join("nan.tif");
    write(&nan, &map()).unwrap();
    let grid = read_tip_grid(&nan, &OpenOptions::default()).unwrap();
    assert_eq!(grid.heights[[0, 2]], f32::NEG_INFINITY);
    assert_eq!(grid.pitch, Some(PITCH));
}

#[test]
fn writing_where_it_cannot_be() {
    let folder = tempfile::tempdir().unwrap();
    let error = write(&folder.path().join("none/a.tif"), &map()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Io);
    assert!(error.to_string().contains("none does not exist"), "{error}");
    let error = write(&folder.path().join("a.bmp"), &map()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
    assert!(error.to_string().contains(".npy"), "{error}");
    assert!(write_atomically(folder.path(), b"x").is_err());
    let path = folder.path().join("certainty.npy");
    write_npy_u8(&path, arr2(&[[0u8, 1], [2, 255]]).view()).unwrap();
    let back: Array2<u8> = ndarray_npy::read_npy(&path).unwrap();
    assert_eq!(back, arr2(&[[0, 1], [2, 255]]));
    // Nothing but the file is left behind.
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 1);
}

#[test]
fn the_hash_of_a_known_text() {
    // FIPS 180-2, appendix B.1.
    assert_eq!(
        sha256_hex(b"abc"),
        "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    );
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(20))]

    #[test]
    fn any_map_reads_back_from_what_was_written(
        rows in 1usize..6,
        columns in 1usize..6,
        bits in prop::collection::vec(any::<u32>(), 36),
        (x, y) in (1e-3f64..1e6, 1e-3f64..1e6),
    ) {
        let heights = Array2::from_shape_fn((rows, columns), |(r, c)| f32::from_bits(bits[r * 6 + c]));
        let map = HeightMap::new(heights, Pitch { x, y }).unwrap();
        let folder = tempfile::tempdir().unwrap();
        for name in ["a.tif", "a.npy"] {
            let path = folder.path().join(name);
            write(&path, &map).unwrap();
            let back = open(&path, &OpenOptions::default()).unwrap();
            prop_assert!(same_bits(&back, &map));
            prop_assert_eq!(back.pitch(), map.pitch());
        }
        let path = folder.path().join("a.png");
        write(&path, &map).unwrap();
        let back = open(&path, &OpenOptions::default()).unwrap();
        prop_assert_eq!(back.void_count(), map.void_count());
        let (low, high) = map.range().unwrap_or((0.0, 0.0));
        let step = (f64::from(high) - f64::from(low)) / 65534.0;
        let size = f64::from(low.abs().max(high.abs()));
        for (a, b) in back.heights().iter().zip(map.heights()) {
            let difference = (f64::from(*a) - f64::from(*b)).abs();
            prop_assert!(difference <= 0.51 * step + 1e-6 * size || a.is_nan());
        }
    }
}
