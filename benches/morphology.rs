//! The morphology kernels: `cargo bench --no-default-features --bench morphology`.

mod scenes;

use divan::{Bencher, counter::ItemsCount};
use ndarray::Array2;
use truewidth::morphology::{certainty_map, contacts, dilate, edge_leaning, erode, open};
use truewidth::progress::Progress;

fn main() {
    divan::main();
}

/// Surfaces and tips by name.
fn scene(name: &str) -> (Array2<f32>, Array2<f32>) {
    let size = 512;
    match name {
        "lines, sphere-cone" => (scenes::lines(size, 0.5), scenes::sphere_cone(65)),
        "rough, sphere-cone" => (scenes::rough(size, 0.5), scenes::sphere_cone(65)),
        "lines, paraboloid" => (scenes::lines(size, 0.5), scenes::paraboloid(65)),
        "white, flat" => (scenes::white(size), scenes::flat(65)),
        _ => (scenes::white(size), scenes::random_tip(65)),
    }
}

const ALL: [&str; 5] = [
    "lines, sphere-cone",
    "rough, sphere-cone",
    "lines, paraboloid",
    "white, flat",
    "white, random",
];
const USUAL: [&str; 2] = ["lines, sphere-cone", "rough, sphere-cone"];

#[divan::bench(args = ALL)]
fn dilation(bencher: Bencher, name: &str) {
    let (map, tip) = scene(name);
    bencher
        .counter(ItemsCount::new(map.len()))
        .bench(|| dilate(map.view(), tip.view(), &Progress::new()));
}

/// The scan, the surface corrected from it, and the tip.
fn scanned(name: &str) -> (Array2<f32>, Array2<f32>, Array2<f32>) {
    let (map, tip) = scene(name);
    let scan = dilate(map.view(), tip.view(), &Progress::new()).unwrap();
    let surface = erode(scan.view(), tip.view(), &Progress::new()).unwrap();
    (scan, surface, tip)
}

#[divan::bench(args = ALL)]
fn erosion(bencher: Bencher, name: &str) {
    let (scan, _, tip) = scanned(name);
    bencher
        .counter(ItemsCount::new(scan.len()))
        .bench(|| erode(scan.view(), tip.view(), &Progress::new()));
}

#[divan::bench(args = USUAL)]
fn opening(bencher: Bencher, name: &str) {
    let (scan, _, tip) = scanned(name);
    bencher.bench(|| open(scan.view(), tip.view(), &Progress::new()));
}

#[divan::bench(args = USUAL)]
fn contact_search(bencher: Bencher, name: &str) {
    let (_, surface, tip) = scanned(name);
    bencher.bench(|| contacts(surface.view(), tip.view(), &Progress::new()));
}

#[divan::bench(args = USUAL)]
fn certainty(bencher: Bencher, name: &str) {
    let (scan, surface, tip) = scanned(name);
    let (s, i, p) = (surface.view(), scan.view(), tip.view());
    bencher.bench(|| certainty_map(s, i, p, 0.5, [0, 0], &Progress::new()));
}

#[divan::bench(args = USUAL)]
fn edges(bencher: Bencher, name: &str) {
    let (scan, surface, tip) = scanned(name);
    bencher.bench(|| edge_leaning(scan.view(), surface.view(), tip.view(), &Progress::new()));
}
