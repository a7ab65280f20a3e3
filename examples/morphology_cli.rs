//! Morphology from NumPy file to NumPy file, with the time that the computation itself took.
//!
//! `morphology_cli OPERATION map.npy tip.npy out.npy [repeats]`
//!
//! Operations: `dilate`, `erode`, `open` (float32 out), `contacts` (int16 out, rows x columns x 2:
//! the offsets) and `certainty` (uint8 out; the map is the scan, corrected by the tip first).
//! Maps and tips are float32, C order. Prints the seconds of each repeat, one a line.

use anyhow::{Context, Result, bail};
use ndarray::{Array2, Array3};
use ndarray_npy::{read_npy, write_npy};
use std::time::Instant;
use truewidth::morphology::{certainty_map, contacts, dilate, erode, open};
use truewidth::progress::Progress;

fn main() -> Result<()> {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let [operation, map, tip, out, rest @ ..] = arguments.as_slice() else {
        bail!("usage: morphology_cli OPERATION map.npy tip.npy out.npy [repeats]");
    };
    let repeats: usize = match rest.first() {
        Some(n) => n.parse().with_context(|| format!("repeats: \"{n}\""))?,
        None => 1,
    };
    let map: Array2<f32> = read_npy(map).with_context(|| format!("reading {map}"))?;
    let tip: Array2<f32> = read_npy(tip).with_context(|| format!("reading {tip}"))?;
    let (m, p, watch) = (map.view(), tip.view(), Progress::new());
    match operation.as_str() {
        "dilate" => write_npy(out, &timed(repeats, || dilate(m, p, &watch))?)?,
        "erode" => write_npy(out, &timed(repeats, || erode(m, p, &watch))?)?,
        "open" => write_npy(out, &timed(repeats, || open(m, p, &watch))?)?,
        "contacts" => {
            let found = timed(repeats, || contacts(m, p, &watch))?;
            let (rows, columns) = map.dim();
            let offsets =
                Array3::from_shape_fn((rows, columns, 2), |(r, c, k)| found.offsets[(r, c)][k]);
            write_npy(out, &offsets)?;
        }
        "certainty" => {
            let surface = erode(m, p, &watch)?;
            let marks = timed(repeats, || {
                certainty_map(surface.view(), m, p, 0.0, [0, 0], &watch)
            })?;
            write_npy(out, &marks)?;
        }
        other => bail!("unknown operation \"{other}\""),
    }
    Ok(())
}

/// The last result; prints the seconds of each run.
fn timed<T>(repeats: usize, run: impl Fn() -> truewidth::Result<T>) -> Result<T> {
    let mut last = None;
    for _ in 0..repeats.max(1) {
        let start = Instant::now();
        let result = run()?;
        println!("{:.9}", start.elapsed().as_secs_f64());
        last = Some(result);
    }
    last.context("no run")
}
