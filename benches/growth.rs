//! How the time grows with the map, the tip and the noise: a table on standard output.
//!
//! `cargo bench --no-default-features --bench growth`

mod scenes;

use ndarray::Array2;
use std::hint::black_box;
use std::time::Instant;
use truewidth::morphology::{certainty_map, contacts, dilate, erode, open};
use truewidth::progress::Progress;

/// The median of some runs, in milliseconds; long ones are run less often.
fn median_ms(mut run: impl FnMut()) -> f64 {
    let mut times: Vec<f64> = Vec::new();
    while times.len() < 3 || (times.len() < 15 && times.iter().sum::<f64>() < 1000.0) {
        let start = Instant::now();
        run();
        times.push(start.elapsed().as_secs_f64() * 1e3);
    }
    times.sort_by(f64::total_cmp);
    times[times.len() / 2]
}

fn row(what: &str, map: &Array2<f32>, tip: &Array2<f32>) {
    let watch = Progress::new();
    let copy = median_ms(|| {
        black_box(map.to_owned());
    });
    let dilation = median_ms(|| {
        black_box(dilate(map.view(), tip.view(), &watch).unwrap());
    });
    let scan = dilate(map.view(), tip.view(), &watch).unwrap();
    let erosion = median_ms(|| {
        black_box(erode(scan.view(), tip.view(), &watch).unwrap());
    });
    let pixels = map.len() as f64;
    println!(
        "{what:<28} {:>5} {:>4}  copy {copy:9.3}  dilate {dilation:9.3} ({:6.1} copies, {:6.2} ns/px)  erode {erosion:9.3}",
        map.nrows(),
        tip.nrows(),
        dilation / copy,
        dilation * 1e6 / pixels,
    );
}

fn relatives(map: &Array2<f32>, tip: &Array2<f32>) {
    let watch = Progress::new();
    let scan = dilate(map.view(), tip.view(), &watch).unwrap();
    let surface = erode(scan.view(), tip.view(), &watch).unwrap();
    let (i, s, p) = (scan.view(), surface.view(), tip.view());
    let erosion = median_ms(|| {
        black_box(erode(i, p, &watch).unwrap());
    });
    let opening = median_ms(|| {
        black_box(open(i, p, &watch).unwrap());
    });
    let found = median_ms(|| {
        black_box(contacts(s, p, &watch).unwrap());
    });
    let marks = median_ms(|| {
        black_box(certainty_map(s, i, p, 0.5, &watch).unwrap());
    });
    println!(
        "{:>5} {:>4}  erode {erosion:8.3} ms; in erosions: open {:5.2}  contacts {:5.2}  certainty {:5.2}",
        map.nrows(),
        tip.nrows(),
        opening / erosion,
        found / erosion,
        marks / erosion
    );
}

fn main() {
    if !std::env::args().any(|a| a == "--bench") {
        return;
    }
    let only = std::env::args().nth(1).unwrap_or_default();
    let part = |name: &str| only == "--bench" || only == name;
    if part("map") {
        for size in [256, 512, 1024, 2048, 4096, 8192] {
            row(
                "lines, noise 0.5",
                &scenes::lines(size, 0.5),
                &scenes::sphere_cone(129),
            );
        }
    }
    if part("tip") {
        for side in [17, 33, 65, 129, 257] {
            row(
                "lines, noise 0.5",
                &scenes::lines(1024, 0.5),
                &scenes::sphere_cone(side),
            );
        }
    }
    if part("noise") {
        for noise in [0.0, 0.1, 0.5, 1.0, 2.0] {
            let what = format!("lines, noise {noise}");
            row(&what, &scenes::lines(1024, noise), &scenes::sphere_cone(65));
        }
    }
    if part("kind") {
        row(
            "lines, sphere-cone",
            &scenes::lines(512, 0.5),
            &scenes::sphere_cone(65),
        );
        row(
            "rough, sphere-cone",
            &scenes::rough(512, 0.5),
            &scenes::sphere_cone(65),
        );
        row(
            "lines, paraboloid",
            &scenes::lines(512, 0.5),
            &scenes::paraboloid(65),
        );
        row(
            "white noise, flat tip",
            &scenes::white(512),
            &scenes::flat(65),
        );
        row(
            "white noise, random tip",
            &scenes::white(512),
            &scenes::random_tip(65),
        );
    }
    if part("relatives") {
        relatives(&scenes::lines(512, 0.5), &scenes::sphere_cone(65));
        relatives(&scenes::lines(2048, 0.5), &scenes::sphere_cone(129));
        relatives(&scenes::rough(1024, 0.5), &scenes::sphere_cone(65));
    }
}
