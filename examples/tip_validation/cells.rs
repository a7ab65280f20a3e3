//! The scans: tips, surfaces, what each identifies.

use truewidth::tip::model::Model;
use truewidth::virtual_scan::{self as scan, BumpShape, Bumps, CorrelatedMap, Feature, Scene};

pub type Shape = Box<dyn Fn(f64, f64) -> f64 + Sync>;
type ShapeOf = fn() -> Shape;
type SceneOf = fn(u64, f64) -> Scene;

/// One row of the table.
pub struct Cell {
    pub name: &'static str,
    pub px: f64,
    pub noise: f64,
    pub tip: ShapeOf,
    /// What the scan identifies: the tip joined with its sharpest feature.
    pub identified: ShapeOf,
    /// Radius of it, `None` where a radius must be refused.
    pub radius: Option<f64>,
    pub surface: SceneOf,
    /// Limits: normal RMS nm, radius error.
    pub limits: Option<(f64, f64)>,
}

pub const N: usize = 192;
fn sphere_cone(radius: f64, half_angle: f64) -> Shape {
    let model = Model::SphereCone { radius, half_angle };
    Box::new(move |x, y| model.height(x, y))
}

fn scattered(shape: BumpShape, count: usize, gap: f64, side: f64, seed: u64) -> Scene {
    let places = scan::scatter(
        &vec![shape.foot(); count],
        gap,
        [20.0; 2],
        [side - 20.0; 2],
        seed,
    )
    .expect("room for the features");
    let bumps = Bumps::all(shape, &places).expect("finite features");
    Scene::new().with(move |x: f64, y: f64| bumps.height(x, y))
}

fn spikes(seed: u64, px: f64) -> Scene {
    let shape = BumpShape::Spike {
        radius: 1.5,
        half_angle: 8.0,
        height: 40.0,
    };
    scattered(shape, 14, 14.0 * px, N as f64 * px, seed)
}

fn spheres(seed: u64, px: f64) -> Scene {
    scattered(
        BumpShape::Sphere { radius: 4.0 },
        14,
        22.0,
        N as f64 * px,
        seed,
    )
}

fn rough(seed: u64, px: f64) -> Scene {
    let side = N as f64 * px;
    let map = CorrelatedMap::new(8.0, 6.0, [-80.0 * px; 2], [side + 80.0 * px; 2], seed)
        .expect("a rough surface");
    Scene::new().on(move |x: f64, y: f64| map.at(x, y))
}

/// Radius of curvature of the rough surface's summits within the scan, nm, sharpest first.
pub fn summit_radii(scene: &Scene, px: f64) -> Vec<f64> {
    let n = 2 * N;
    let h = px / 2.0;
    let at = |i: usize, j: usize| scene.height(j as f64 * h, i as f64 * h);
    let z: Vec<Vec<f64>> = (0..n).map(|i| (0..n).map(|j| at(i, j)).collect()).collect();
    let mut radii = Vec::new();
    for i in 1..n - 1 {
        for j in 1..n - 1 {
            let around = [
                (-1, -1),
                (-1, 0),
                (-1, 1),
                (0, -1),
                (0, 1),
                (1, -1),
                (1, 0),
                (1, 1),
            ];
            let top = around.iter().all(|&(a, b): &(i32, i32)| {
                z[(i as i32 + a) as usize][(j as i32 + b) as usize] < z[i][j]
            });
            if top {
                let (x, y, e) = (j as f64 * h, i as f64 * h, 0.2);
                let f = |a: f64, b: f64| scene.height(x + a, y + b);
                let kxx = -(f(e, 0.0) + f(-e, 0.0) - 2.0 * f(0.0, 0.0)) / (e * e);
                let kyy = -(f(0.0, e) + f(0.0, -e) - 2.0 * f(0.0, 0.0)) / (e * e);
                let kxy = -(f(e, e) - f(-e, e) - f(e, -e) + f(-e, -e)) / (4.0 * e * e);
                let det = kxx * kyy - kxy * kxy;
                if det > 0.0 && z[i][j] > 8.0 {
                    radii.push(1.0 / det.sqrt());
                }
            }
        }
    }
    radii.sort_by(f64::total_cmp);
    radii
}

fn wide_lines(seed: u64, px: f64) -> Scene {
    let shift = (seed % 7) as f64 * 0.37 * px;
    Scene::new().with(scan::Lines::new(
        30.0 * px + shift,
        64.0 * px,
        3,
        30.0 * px,
        40.0,
    ))
}

fn blocks(seed: u64, px: f64) -> Scene {
    let mut scene = Scene::new();
    for k in 0..9u64 {
        let x = (20.0 + 60.0 * (k % 3) as f64 + 0.31 * ((seed + k) % 5) as f64) * px;
        let y = (20.0 + 60.0 * (k / 3) as f64 + 0.23 * ((seed + 2 * k) % 7) as f64) * px;
        let to = [x + 24.0 * px, y + 24.0 * px];
        scene = scene.with(scan::Block {
            from: [x, y],
            to,
            height_nm: 40.0,
        });
    }
    scene
}

fn flat(_: u64, _: f64) -> Scene {
    Scene::new()
}

fn few(seed: u64, px: f64) -> Scene {
    let shape = BumpShape::Spike {
        radius: 1.5,
        half_angle: 8.0,
        height: 40.0,
    };
    scattered(shape, 3, 14.0 * px, N as f64 * px, seed)
}

fn pyramid() -> Shape {
    let model = Model::Pyramid {
        half_angles: [12.0, 25.0, 18.0, 18.0],
    };
    Box::new(move |x, y| model.height(x, y))
}

/// The pyramid joined with the spikes' apex (found by search).
fn pyramid_and_spike() -> Shape {
    joined(pyramid(), 1.5, 8.0)
}

fn worn() -> Shape {
    // A sphere-cone ground off 1.5 nm above its apex.
    let model = Model::SphereCone {
        radius: 10.0,
        half_angle: 15.0,
    };
    Box::new(move |x, y| (model.height(x, y) - 1.5).max(0.0))
}

fn worn_and_spike() -> Shape {
    joined(worn(), 1.5, 8.0)
}

fn double() -> Shape {
    let model = Model::SphereCone {
        radius: 8.0,
        half_angle: 15.0,
    };
    Box::new(move |x, y| {
        model
            .height(x, y)
            .min(model.height(x - 14.0, y - 6.0) + 5.0)
    })
}

fn double_and_spike() -> Shape {
    joined(double(), 1.5, 8.0)
}

/// Dilation of the tip by a spike's sphere-cone, tabulated at a quarter nm.
fn joined(tip: Shape, radius: f64, half_angle: f64) -> Shape {
    let feature = Model::SphereCone { radius, half_angle };
    let steps: Vec<(f64, f64, f64)> = (-8..=8)
        .flat_map(|i| (-8..=8).map(move |j| (f64::from(i) * 0.25, f64::from(j) * 0.25)))
        .map(|(x, y)| (x, y, feature.height(x, y)))
        .collect();
    Box::new(move |x, y| {
        let least = |x: f64, y: f64| {
            steps
                .iter()
                .map(|&(i, j, h)| tip(x - i, y - j) + h)
                .fold(f64::INFINITY, f64::min)
        };
        least(x, y)
    })
}

pub fn cells() -> Vec<Cell> {
    let mut out = Vec::new();
    for (noise, limits) in [
        (0.0, (0.20, 0.08)),
        (0.1, (0.25, 0.08)),
        (0.3, (0.25, 0.08)),
        (1.0, (0.30, 0.10)),
    ] {
        out.push(Cell {
            name: "spikes",
            px: 1.0,
            noise,
            tip: || sphere_cone(8.0, 15.0),
            identified: || sphere_cone(9.5, 15.0),
            radius: Some(9.5),
            surface: spikes,
            limits: Some(limits),
        });
    }
    for (noise, limits) in [
        (0.0, (0.20, 0.05)),
        (0.1, (0.25, 0.08)),
        (0.3, (0.30, 0.15)),
        (1.0, (9.0, 9.0)),
    ] {
        out.push(Cell {
            name: "rough",
            px: 1.0,
            noise,
            tip: || sphere_cone(8.0, 15.0),
            // The sharper quarter of its summits has a radius of 0.68 nm or less (median over seeds).
            identified: || sphere_cone(8.68, 15.0),
            radius: (noise < 1.0).then_some(8.68),
            surface: rough,
            limits: (noise < 1.0).then_some(limits),
        });
    }
    for noise in [0.1, 0.3, 1.0] {
        out.push(Cell {
            name: "spheres-4",
            px: 1.0,
            noise,
            tip: || sphere_cone(8.0, 15.0),
            identified: || sphere_cone(12.0, 15.0),
            radius: Some(12.0),
            surface: spheres,
            limits: None,
        });
    }
    for noise in [0.1, 0.3, 1.0] {
        out.push(Cell {
            name: "spikes 2 nm px R=20",
            px: 2.0,
            noise,
            tip: || sphere_cone(20.0, 15.0),
            identified: || sphere_cone(21.5, 15.0),
            radius: Some(21.5),
            surface: spikes,
            limits: Some((0.6, 0.10)),
        });
    }
    let shapes: [(&str, ShapeOf, ShapeOf); 3] = [
        ("pyramid", pyramid, pyramid_and_spike),
        ("worn", worn, worn_and_spike),
        ("double", double, double_and_spike),
    ];
    for (name, tip, identified) in shapes {
        for noise in [0.1, 0.3] {
            out.push(Cell {
                name,
                px: 1.0,
                noise,
                tip,
                identified,
                radius: None,
                surface: spikes,
                limits: Some((0.6, 9.0)),
            });
        }
    }
    let refused: [(&str, SceneOf); 4] = [
        ("lines", wide_lines),
        ("blocks", blocks),
        ("flat", flat),
        ("few", few),
    ];
    for (name, surface) in refused {
        for noise in [0.1, 0.3, 1.0] {
            out.push(Cell {
                name,
                px: 1.0,
                noise,
                tip: || sphere_cone(8.0, 15.0),
                identified: || sphere_cone(9.5, 15.0),
                radius: None,
                surface,
                limits: None,
            });
        }
    }
    out.push(Cell {
        name: "coarse (R = 2 px)",
        px: 4.0,
        noise: 0.1,
        tip: || sphere_cone(8.0, 15.0),
        identified: || sphere_cone(9.5, 15.0),
        radius: None,
        surface: spikes,
        limits: None,
    });
    out
}
