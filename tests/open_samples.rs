//! Files that others wrote, against values read independently with Python (NumPy, tifffile,
//! Pillow, zipfile). The small ones are in `tests/data`; the others in the folder of open samples.

use std::path::{Path, PathBuf};
use truewidth::ErrorKind;
use truewidth::files::{OpenOptions, inspect, open};
use truewidth::heightmap::Pitch;

/// Name, columns, rows, voids, and in the stored unit or nm: lowest, highest, mean, `[1, 2]`
/// (`[0, 2]` of one row).
type Expected = (&'static str, usize, usize, usize, f64, f64, f64, f64);

fn data(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("tests/data")
        .join(name)
}

fn samples(name: &str) -> PathBuf {
    let folder = std::env::var_os("TRUEWIDTH_SAMPLES").expect("TRUEWIDTH_SAMPLES names the folder");
    Path::new(&folder).join(name)
}

/// Options for files without calibration: a stored 1 is 1 nm.
fn plain() -> OpenOptions {
    OpenOptions {
        pitch: Some(Pitch::square(2.0)),
        height_unit: Some("nm".to_owned()),
        map: None,
    }
}

fn check(path: &Path, options: &OpenOptions, expected: &Expected) {
    let (name, columns, rows, voids, low, high, mean, near) = *expected;
    let map = open(path, options).unwrap();
    assert_eq!((map.columns(), map.rows()), (columns, rows), "{name}");
    assert_eq!(map.void_count(), voids, "{name}");
    let heights = map.heights();
    let finite: Vec<f64> = heights
        .iter()
        .filter(|z| !z.is_nan())
        .map(|&z| f64::from(z))
        .collect();
    let got = [
        finite.iter().copied().fold(f64::INFINITY, f64::min),
        finite.iter().copied().fold(f64::NEG_INFINITY, f64::max),
        finite.iter().sum::<f64>() / finite.len() as f64,
        f64::from(heights[[usize::from(rows > 1), 2]]),
    ];
    for (got, expected) in got.into_iter().zip([low, high, mean, near]) {
        let close = (got - expected).abs() <= 2e-7 * low.abs().max(high.abs());
        assert!(
            close || (got.is_nan() && expected.is_nan()),
            "{name}: {got} for {expected}"
        );
    }
    let inspection = inspect(path, options).unwrap();
    assert_eq!(inspection.voids, Some(voids), "{name}");
    let range = inspection.range_nm.unwrap();
    assert!(
        (range[0] - low).abs() <= 1e-6 * low.abs(),
        "{name}: {range:?}"
    );
    assert!(
        (range[1] - high).abs() <= 1e-6 * high.abs(),
        "{name}: {range:?}"
    );
}

fn kind(path: &Path, options: &OpenOptions) -> ErrorKind {
    open(path, options).unwrap_err().kind()
}

#[test]
fn tiff_and_png_with_options() {
    for expected in [
        (
            "imagetiff_gradient-1c-32b-float.tiff",
            256,
            1,
            0,
            0.000_893_527_641_9,
            0.998_265_147_2,
            0.500_124_691_7,
            0.009_984_508_157,
        ),
        (
            "imagetiff_minisblack-1c-i16b.tiff",
            157,
            151,
            0,
            -32767.0,
            26186.0,
            -1_843.458_43,
            -4519.0,
        ),
        (
            "imagetiff_seq-1c-16b-bigendian.tiff",
            16,
            16,
            0,
            0.0,
            255.0,
            127.5,
            18.0,
        ),
        (
            "imagetiff_seq-1c-16b-tiled.tiff",
            16,
            16,
            0,
            0.0,
            255.0,
            127.5,
            18.0,
        ),
        (
            "rasterio_float_nan.tif",
            3,
            2,
            1,
            -1.879_999_995,
            1.409_999_966,
            0.169_999_995_8,
            -1.879_999_995,
        ),
        (
            "rasterio_float_raster_with_nodata.tif",
            13,
            12,
            58,
            0.0,
            0.25,
            0.007_653_061_224,
            0.0,
        ),
        (
            "pngsuite_basn0g16.png",
            32,
            32,
            0,
            0.0,
            65535.0,
            36_969.794_921_875,
            5120.0,
        ),
        (
            "pngsuite_basi0g16.png",
            32,
            32,
            0,
            0.0,
            65535.0,
            36_969.794_921_875,
            5120.0,
        ),
    ] {
        check(&data(expected.0), &plain(), &expected);
        // Only one of them states a pitch: GeoTIFF in metres.
        let no_pitch = OpenOptions {
            pitch: None,
            ..plain()
        };
        if expected.0.contains("nodata") {
            assert!(open(&data(expected.0), &no_pitch).is_ok());
        } else {
            assert_eq!(kind(&data(expected.0), &no_pitch), ErrorKind::MissingPitch);
        }
        let no_unit = OpenOptions {
            height_unit: None,
            ..plain()
        };
        assert_eq!(
            kind(&data(expected.0), &no_unit),
            ErrorKind::MissingHeightUnit
        );
    }
}

#[test]
fn print_resolution_is_no_pitch_and_a_geo_scale_is() {
    let inspection = inspect(
        &data("imagetiff_gradient-1c-32b-float.tiff"),
        &OpenOptions::default(),
    )
    .unwrap();
    assert_eq!(inspection.pitch_nm, None);
    assert!(
        inspection
            .notes
            .iter()
            .any(|n| n.contains("72 x 72 per inch")),
        "{:?}",
        inspection.notes
    );
    // Projected model, linear unit metre, 500 x 500.
    let inspection = inspect(
        &data("rasterio_float_raster_with_nodata.tif"),
        &OpenOptions::default(),
    )
    .unwrap();
    assert_eq!(inspection.pitch_nm, Some([5e11, 5e11]));
    assert_eq!(
        inspection.pitch_source.as_deref(),
        Some("GeoTIFF pixel scale")
    );
    assert_eq!(inspection.height_unit, None);
}

#[test]
fn x3p_states_everything() {
    let none = OpenOptions::default();
    for (expected, pitch) in [
        (
            (
                "areal-2017-binary.x3p",
                200,
                150,
                180,
                -1_261.368_152_19,
                1_261.368_152_19,
                1.098_184_995_24,
                1_095.531_365_19,
            ),
            1e3,
        ),
        (
            (
                "profile-xml.x3p",
                256,
                1,
                0,
                -1_186.835_175_85,
                1_192.365_128_63,
                43.746_005_955_97,
                508.163_829_634,
            ),
            2e3,
        ),
        (("pyramid.x3p", 5, 5, 0, 2e9, 1e10, 3.6e9, 6e9), 1e9),
    ] {
        check(&data(expected.0), &none, &expected);
        let map = open(&data(expected.0), &none).unwrap();
        assert!(
            map.pitch().agrees_with(Pitch::square(pitch)),
            "{}",
            expected.0
        );
        assert!(map.provenance().scale_source.starts_with("X3P axes"));
    }
    // An en-dash in the revision and a checksum file of the digits only are tolerated.
    assert!(
        inspect(&data("pyramid.x3p"), &none)
            .unwrap()
            .notes
            .is_empty()
    );
}

#[test]
#[ignore = "needs the folder of open samples named by TRUEWIDTH_SAMPLES"]
fn every_sample_in_the_folder() {
    let none = OpenOptions::default();
    let layer = |map| OpenOptions {
        map: Some(map),
        ..OpenOptions::default()
    };
    let nan = f64::NAN;
    for (options, expected) in [
        (
            &none,
            (
                "x3p/conformance-sample1.x3p",
                4,
                4,
                1,
                -808_368_571.682_830_1,
                1_047_596_025.661_420_1,
                291_925_832.724_804_16,
                1_018_792_252.777_98,
            ),
        ),
        (
            &none,
            (
                "x3p/conformance-sample1_bin.x3p",
                4,
                4,
                1,
                -808_368_571.682_830_1,
                1_047_596_025.661_420_1,
                291_925_832.724_804_16,
                1_018_792_252.777_98,
            ),
        ),
        (
            &none,
            (
                "x3p/conformance-sample4.x3p",
                4,
                4,
                1,
                -808e6,
                1048e6,
                292e6,
                1019e6,
            ),
        ),
        (
            &none,
            (
                "x3p/conformance-sample4_bin.x3p",
                4,
                4,
                1,
                -808e6,
                1048e6,
                292e6,
                1019e6,
            ),
        ),
        (
            &layer(0),
            (
                "x3p/layers-binary.x3p",
                160,
                120,
                0,
                -1_261.368_152_192_7,
                1_261.368_152_192_7,
                2.919_498_700_3,
                1_095.545_471_094_9,
            ),
        ),
        (
            &layer(1),
            (
                "x3p/layers-binary.x3p",
                160,
                120,
                0,
                -1_287.787_268_028_3,
                1_285.881_413_624_6,
                2.343_182_626_8,
                898.379_304_336,
            ),
        ),
        (
            &layer(2),
            (
                "x3p/layers-binary.x3p",
                160,
                120,
                0,
                -1_259.594_422_656,
                1_264.940_914_515_2,
                1.669_763_216_2,
                520.112_914_113_6,
            ),
        ),
        (
            &none,
            (
                "x3p/real-bullet-land.x3p",
                918,
                256,
                25292,
                -79_473.480_582_24,
                52_498.580_771_5,
                -535.206_834_754_8,
                -54_890.544_561_2,
            ),
        ),
        (
            &none,
            (
                "x3p/real-rubber-areal.x3p",
                860,
                634,
                5296,
                -9_590.286_936_145,
                16_094.123_566_29,
                18.921_794_772,
                nan,
            ),
        ),
        (
            &plain(),
            (
                "tiff/imagetiff_minisblack-1c-16b.tiff",
                157,
                151,
                0,
                0.0,
                58955.0,
                30_924.462_774_7,
                28249.0,
            ),
        ),
        (
            &plain(),
            (
                "tiff/imagetiff_predictor-3-gray-f32.tif",
                200,
                200,
                0,
                0.0,
                0.999_264_359_474,
                0.500_206_982_946,
                0.916_823_267_937,
            ),
        ),
        (
            &plain(),
            (
                "npy/jacksboro_fault_dem.npz",
                403,
                344,
                0,
                236.0,
                1076.0,
                531.031_168_749_9,
                489.0,
            ),
        ),
    ] {
        check(&samples(expected.0), options, &expected);
    }
    let rubber = open(&samples("x3p/real-rubber-areal.x3p"), &none)
        .unwrap()
        .pitch();
    assert!((rubber.x - 2_279.984_215).abs() < 1e-6 && (rubber.y - 2_279.794_519).abs() < 1e-6);
    assert!(
        open(&samples("x3p/real-bullet-land.x3p"), &none)
            .unwrap()
            .pitch()
            .agrees_with(Pitch::square(2580.0))
    );
}

#[test]
#[ignore = "needs the folder of open samples named by TRUEWIDTH_SAMPLES"]
fn samples_that_must_be_refused_or_asked_about() {
    let none = OpenOptions::default();
    for (name, expected) in [
        ("x3p/conformance-sample2.x3p", ErrorKind::Unsupported),
        ("x3p/irregular-binary.x3p", ErrorKind::Unsupported),
        ("x3p/layers-binary.x3p", ErrorKind::SeveralMaps),
        ("npy/jacksboro_fault_dem.npz", ErrorKind::MissingPitch),
    ] {
        assert_eq!(kind(&samples(name), &none), expected, "{name}");
    }
    // dx and dy are there but state no unit (they are degrees).
    let inspection = inspect(&samples("npy/jacksboro_fault_dem.npz"), &none).unwrap();
    assert!(
        inspection.notes.iter().any(|n| n.contains("dx, dy")),
        "{:?}",
        inspection.notes
    );
    assert_eq!(inspection.maps[0].sample_type, "int16");
}
