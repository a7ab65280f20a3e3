//! Dilation, erosion and opening against results of scipy.ndimage kept in tests/golden
//! (written by tests/scipy_compare.py --write-golden, which also says how conventions map).

use ndarray::Array2;
use ndarray_npy::read_npy;
use std::path::Path;
use truewidth::morphology::{dilate, erode, open};
use truewidth::progress::Progress;

fn golden(name: &str) -> Array2<f32> {
    let path = Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("tests/golden")
        .join(format!("{name}.npy"));
    read_npy(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

fn bits(map: &Array2<f32>) -> Vec<u32> {
    map.iter()
        .map(|z| if z.is_nan() { f32::NAN } else { *z }.to_bits())
        .collect()
}

#[test]
fn results_are_those_of_scipy_bit_for_bit() {
    for case in ["plain", "voids", "holes"] {
        let map = golden(&format!("{case}-map"));
        let tip = golden(&format!("{case}-tip"));
        let (m, p, watch) = (map.view(), tip.view(), Progress::new());
        for (operation, result) in [
            ("dilate", dilate(m, p, &watch)),
            ("erode", erode(m, p, &watch)),
            ("open", open(m, p, &watch)),
        ] {
            let expected = golden(&format!("{case}-{operation}"));
            assert_eq!(result.as_ref().unwrap().dim(), expected.dim());
            assert_eq!(
                bits(&result.unwrap()),
                bits(&expected),
                "{case} {operation}"
            );
        }
    }
}
