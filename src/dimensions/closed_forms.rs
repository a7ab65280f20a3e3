//! Closed forms of dilation and erosion through the virtual scan, the erosion and the measurands:
//! worked out from the geometry of tangent spheres, cones and parabolas and checked against
//! brute-force dilation independently.

use super::texture::Texture;
use super::*;
use crate::heightmap::Pitch;
use crate::morphology;
use crate::tip::model::Model;
use crate::virtual_scan::{self, BumpShape, Bumps, Feature, Settings};
use ndarray::{Array2, ArrayView2, s};
use rand::SeedableRng;
use rand_distr::{Distribution, StandardNormal};

fn dilated(surface: impl Fn(f64, f64) -> f64 + Sync, tip: Model, settings: &Settings) -> HeightMap {
    let tip = |x: f64, y: f64| tip.height(x, y);
    virtual_scan::scan(surface, tip, settings, &Progress::new())
        .unwrap()
        .clean
}

/// Full width of the feature around `centre` at height `level`, by linear interpolation.
fn width_at(map: &HeightMap, centre: usize, level: f64) -> f64 {
    let row = map.heights().row(map.rows() / 2).to_vec();
    let above = |i: usize| f64::from(row[i]) > level;
    let inner = above(centre);
    let crossing = |mut i: usize, forwards: bool| {
        let next = |i: usize| if forwards { i + 1 } else { i - 1 };
        while above(next(i)) == inner {
            i = next(i);
        }
        let (a, b) = (f64::from(row[i]), f64::from(row[next(i)]));
        let part = (level - a) / (b - a);
        if forwards {
            i as f64 + part
        } else {
            i as f64 - part
        }
    };
    (crossing(centre, true) - crossing(centre, false)) * map.pitch().x
}

fn sphere_cone(radius: f64, half_angle: f64) -> Model {
    Model::SphereCone { radius, half_angle }
}

/// Trapezoid groove, floor b, wall half-angle B from the vertical, sphere-cone of 10 nm: the depth
/// that is lost is `[R (1 - sin B) - b/2 cos B] / sin B` while `b < 2 R (1 - sin B) / cos B`; else
/// the floor is reached, and the flat that is seen is narrower by that. Walls wider open than the
/// tip keep their angle.
#[test]
fn grooves_lose_depth_and_keep_their_walls() {
    const DEPTH: f64 = 40.0;
    let settings = Settings {
        support_nm: 90.0,
        ..Settings::new(3, 321, Pitch { x: 0.5, y: 4.0 })
    };
    let centre = 160.5 * 0.5;
    for (wall, floor, lost) in [
        (35.26, 0.0, 7.3224),
        (35.26, 5.0, 3.7863),
        (35.26, 10.354, 0.0),
        (35.26, 30.0, 0.0),
        (20.0, 8.0, 8.2481),
        (20.0, 14.004, 0.0),
        (20.0, 24.0, 0.0),
    ] {
        let wall_angle = f64::to_radians(wall);
        let groove = |x: f64, _: f64| {
            let out = (x - centre).abs() - floor / 2.0;
            (out / wall_angle.tan()).clamp(0.0, DEPTH)
        };
        let image = dilated(groove, sphere_cone(10.0, 15.0), &settings);
        let bottom = f64::from(image.heights()[[1, 160]]);
        assert!((bottom - lost).abs() < 2e-3, "{wall}, {floor}: {bottom}");
        // Half-angle of the imaged wall, between 20 and 30 nm.
        let [low, high] = [20.0, 30.0].map(|level| width_at(&image, 160, level));
        let seen = ((high - low) / 20.0).atan().to_degrees();
        assert!((seen - wall).abs() < 0.02, "{wall}, {floor}: {seen}");
        let critical = 20.0 * (1.0 - wall_angle.sin()) / wall_angle.cos();
        if floor > critical + 1.0 {
            let flat = width_at(&image, 160, 10.0) - 20.0 * wall_angle.tan();
            assert!((flat - (floor - critical)).abs() < 0.01, "{floor}: {flat}");
        }
    }
}

/// The same grooves through `measure`: the depth as scanned is short by what is lost.
#[test]
fn measured_depths_of_grooves_reached_and_not() {
    let depth = 40.0;
    let model = sphere_cone(10.0, 15.0);
    let pitch = Pitch::square(0.5);
    let settings = Settings {
        support_nm: 70.0,
        ..Settings::new(16, 361, pitch)
    };
    let progress = Progress::new();
    for (wall, floor) in [(35.26f64, 30.0), (20.0, 24.0)] {
        let angle = wall.to_radians();
        let groove = |x: f64, _: f64| {
            let out = (x - 90.25).abs() - floor / 2.0;
            (out / angle.tan()).clamp(0.0, depth)
        };
        let scan = dilated(groove, model, &settings);
        let tip = model.sample(70.0, pitch).unwrap();
        let heights = morphology::erode(scan.heights(), tip.shape(), &progress).unwrap();
        let surface = scan.with_heights(heights, "corrected");
        let certainty = morphology::certainty_map(
            surface.heights(),
            scan.heights(),
            tip.shape(),
            0.01,
            [0, 0],
            &progress,
        )
        .unwrap();
        let leaning =
            morphology::edge_leaning(scan.heights(), surface.heights(), tip.shape(), &progress)
                .unwrap();
        let input = Input {
            scan: &scan,
            noise_nm: Some(0.0),
            calibration: Calibration::default(),
            slope: [0.0; 2],
            corrected: Some(Corrected::exact(
                &tip,
                &surface,
                certainty.view(),
                leaning.view(),
            )),
        };
        let lines = measure(&input, &Request::new("groove", Kind::HoleDepth), &progress).unwrap();
        let scanned = lines[0].as_scanned.unwrap().value;
        assert!((scanned - depth).abs() < 0.02, "{wall}: {scanned}");
        let corrected = lines[0].corrected.unwrap();
        assert!(
            (corrected.value.unwrap() - depth).abs() < 0.02,
            "{corrected:?}"
        );
    }
}

/// Sinusoid `A cos kx` under a paraboloid of apex radius R, `q = R A k^2`. Up to q = 1 the image's
/// Sq is smaller by `sqrt(1 - 3 q^2 / 16)` and the erosion recovers all; beyond, the image has
/// cusps, peak to valley `A (1 + cos th + th sin th / 2)` with `sin th / th = 1 / q`.
#[test]
fn sinusoids_gentle_and_with_cusps() {
    const PER_PERIOD: usize = 240;
    let (amplitude, radius) = (20.0, 10.0);
    let tip = Model::Paraboloid { radius };
    for (q, peak_to_valley, image_sq, eroded_sq) in [
        (0.5, 2.0, 0.97628, 1.0),
        (1.0, 2.0, 0.90139, 1.0),
        (1.5, 1.8207, 0.7819, 0.9246),
        (2.0, 1.5792, 0.6712, 0.7991),
        (5.0, 0.8191, 0.3456, 0.3909),
    ] {
        let k = f64::sqrt(q / (radius * amplitude));
        let pitch = Pitch {
            x: std::f64::consts::TAU / k / PER_PERIOD as f64,
            y: 4.0,
        };
        let settings = Settings {
            support_nm: 90.0,
            ..Settings::new(1, 5 * PER_PERIOD, pitch)
        };
        let wave = |x: f64, _: f64| amplitude * (k * (x - 0.5 * pitch.x)).cos();
        let image = dilated(wave, tip, &settings);
        let shape = tip.sample(90.0, pitch).unwrap();
        let eroded = morphology::erode(image.heights(), shape.shape(), &Progress::new()).unwrap();
        // The middle period: its neighbours hold all that the tip reaches.
        let middle = s![.., 2 * PER_PERIOD..3 * PER_PERIOD];
        let texture = |map: ArrayView2<f32>| Texture::of(map.slice(middle), pitch).unwrap();
        let scanned = texture(image.heights());
        let seen = scanned.sz / amplitude;
        assert!((seen - peak_to_valley).abs() < 2e-4, "q = {q}: {seen}");
        let flat_sq = amplitude / std::f64::consts::SQRT_2;
        let seen = scanned.sq / flat_sq;
        assert!((seen - image_sq).abs() < 3e-4, "q = {q}: image {seen}");
        let seen = texture(eroded.view()).sq / flat_sq;
        assert!((seen - eroded_sq).abs() < 1e-3, "q = {q}: eroded {seen}");
        if q <= 1.0 {
            let mean = f64::from(image.heights().slice(middle).mean().unwrap());
            assert!((mean - amplitude * q / 4.0).abs() < 2e-3, "q = {q}: {mean}");
        }
    }
}

/// Foot of the image of a sphere r on a flat, sphere-cone R: `4 sqrt(R r)` while
/// `r <= R (1 - s) / (1 + s)`, else `2 [r (1 + s) + R (1 - s)] / cos a`.
#[test]
fn feet_of_spheres() {
    for (tip_radius, radius, angle, base) in [
        (10.0, 2.5, 15.0, 20.00),
        (10.0, 10.0, 15.0, 41.41),
        (10.0, 30.0, 15.0, 93.54),
        (5.0, 50.0, 10.0, 127.57),
    ] {
        let pitch = Pitch { x: 0.1, y: 1.0 };
        let columns = (10.0 * (base + 12.0)) as usize | 1;
        let centre = [columns as f64 * 0.05, 1.5];
        let bumps = Bumps::all(BumpShape::Sphere { radius }, &[centre]).unwrap();
        let settings = Settings {
            support_nm: base + 10.0,
            ..Settings::new(3, columns, pitch)
        };
        let image = dilated(
            |x, y| bumps.height(x, y),
            sphere_cone(tip_radius, angle),
            &settings,
        );
        let width = |level: f64| width_at(&image, columns / 2, level);
        let foot = if base < 21.0 {
            // A circle about a centre R - r below the flat.
            let below = tip_radius - radius;
            let half = width(0.2) / 2.0;
            2.0 * (half * half + (0.2 + below).powi(2) - below * below).sqrt()
        } else {
            // The flank is straight.
            2.0 * width(1.0) - width(2.0)
        };
        assert!((foot - base).abs() < 0.01, "{radius}: {foot}, not {base}");
    }
}

/// The erosion of a noisy flat by a flat of N cells is low by the expected extreme of N normals
/// (tabulated): 1.485 s (N = 9), 1.965 (25), 2.508 (100), 3.241 (1000).
#[test]
fn a_noisy_flat_is_eroded_by_the_expected_extreme() {
    const SIDE: usize = 700;
    let noise = 0.3f32;
    let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(38);
    let flat = Array2::from_shape_fn((SIDE, SIDE), |_| {
        let z: f32 = StandardNormal.sample(&mut random);
        noise * z
    });
    for (rows, columns, cells, extreme) in [
        (3, 3, 9, 1.485),
        (5, 5, 25, 1.965),
        (11, 11, 100, 2.508),
        (33, 31, 1000, 3.241),
    ] {
        let mut tip = Array2::<f32>::zeros((rows, columns));
        // The corner cells beyond the number wanted are no part of the tip.
        let excess = rows * columns - cells;
        tip.iter_mut()
            .take(excess)
            .for_each(|p| *p = f32::NEG_INFINITY);
        let eroded = morphology::erode(flat.view(), tip.view(), &Progress::new()).unwrap();
        let inner = eroded.slice(s![20..SIDE - 20, 20..SIDE - 20]);
        let mean = inner.iter().map(|&z| f64::from(z)).sum::<f64>() / inner.len() as f64;
        let bias = -mean / f64::from(noise);
        // Independent windows: 430 of the largest, each with a deviation of 0.35.
        assert!((bias - extreme).abs() < 0.05, "{cells}: {bias}");
    }
}
