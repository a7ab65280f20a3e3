//! Validates the blind tip estimate on virtual scans whose truth is finer than the pixel.
//!
//! `tip_validation [SEEDS] [FIRST] [CELL]`: SEEDS scans per cell (10), from seed FIRST (1), only
//! cells whose name holds CELL. `tip_validation short` runs two seeds per cell and fails
//! when a figure passes its limit.

use std::error::Error;
use std::time::Instant;
use truewidth::heightmap::Pitch;
use truewidth::progress::Progress;
use truewidth::tip::blind::{Estimate, Settings, estimate};
use truewidth::tip::model::Model;
use truewidth::virtual_scan::{
    self as scan, BumpShape, Bumps, CorrelatedMap, Distortion, Feature, Scene,
};

type Shape = Box<dyn Fn(f64, f64) -> f64 + Sync>;
type ShapeOf = fn() -> Shape;
type SceneOf = fn(u64, f64) -> Scene;

/// One row of the table.
struct Cell {
    name: &'static str,
    px: f64,
    noise: f64,
    tip: ShapeOf,
    /// What the scan identifies: the tip joined with its sharpest feature.
    identified: ShapeOf,
    /// Radius of it, `None` where a radius must be refused.
    radius: Option<f64>,
    surface: SceneOf,
    /// Limits: normal RMS nm, radius error.
    limits: Option<(f64, f64)>,
}

const N: usize = 192;

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
fn summit_radii(scene: &Scene, px: f64) -> Vec<f64> {
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

fn cells() -> Vec<Cell> {
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

/// Error of the tip along its normal over the exercised depth, the best lateral fit allowed, and
/// the shares of cells within the band: both edges, sharper edge, blunter edge.
struct Score {
    rms: f64,
    bias: f64,
    inside: f64,
    above_sharper: f64,
    below_blunter: f64,
}

fn score(e: &Estimate, truth: &Shape) -> Option<Score> {
    let depth = e.exercised_depth_nm?;
    let shape = e.tip.shape();
    let pitch = e.tip.pitch();
    let (cr, cc) = (shape.nrows() / 2, shape.ncols() / 2);
    let at = |i: usize, j: usize| {
        (
            (j as f64 - cc as f64) * pitch.x,
            (i as f64 - cr as f64) * pitch.y,
        )
    };
    let normal = |x: f64, y: f64| {
        let h = 0.05 * pitch.x;
        let gx = (truth(x + h, y) - truth(x - h, y)) / (2.0 * h);
        let gy = (truth(x, y + h) - truth(x, y - h)) / (2.0 * h);
        1.0 / (1.0 + gx * gx + gy * gy).sqrt()
    };
    let cells: Vec<(f64, f64, f64, usize, usize)> = shape
        .indexed_iter()
        .map(|((i, j), &p)| {
            let (x, y) = at(i, j);
            (x, y, -f64::from(p), i, j)
        })
        .filter(|c| truth(c.0, c.1) <= depth)
        .collect();
    let rms_at = |dx: f64, dy: f64| {
        let errors = cells
            .iter()
            .map(|&(x, y, t, _, _)| (t - truth(x - dx, y - dy)) * normal(x - dx, y - dy));
        let (s, q) = errors.fold((0.0, 0.0), |a, e| (a.0 + e, a.1 + e * e));
        (s / cells.len() as f64, (q / cells.len() as f64).sqrt())
    };
    let (mut best, mut place) = (rms_at(0.0, 0.0), (0.0, 0.0));
    let mut step = 0.25 * pitch.x;
    while step > 0.02 * pitch.x {
        let mut moved = false;
        for (i, j) in [(1.0, 0.0), (-1.0, 0.0), (0.0, 1.0), (0.0, -1.0)] {
            let tried = (place.0 + i * step, place.1 + j * step);
            let r = rms_at(tried.0, tried.1);
            if r.1 < best.1 {
                (best, place, moved) = (r, tried, true);
            }
        }
        if !moved {
            step /= 2.0;
        }
    }
    let (mut inside, mut above, mut below, mut n) = (0.0, 0.0, 0.0, 0.0f64);
    if let Some(band) = &e.band {
        for &(x, y, _, i, j) in &cells {
            let p = -truth(x - place.0, y - place.1);
            let a = f64::from(band.sharper.shape()[[i, j]]) <= p + 1e-6;
            let b = f64::from(band.blunter.shape()[[i, j]]) >= p - 1e-6;
            inside += f64::from(u8::from(a && b));
            above += f64::from(u8::from(a));
            below += f64::from(u8::from(b));
            n += 1.0;
        }
    }
    Some(Score {
        rms: best.1,
        bias: best.0,
        inside: inside / n.max(1.0),
        above_sharper: above / n.max(1.0),
        below_blunter: below / n.max(1.0),
    })
}

fn main() -> Result<(), Box<dyn Error>> {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let short = arguments.first().is_some_and(|a| a == "short");
    let number = |k: usize, default: u64| {
        arguments
            .get(k)
            .and_then(|a| a.parse().ok())
            .unwrap_or(default)
    };
    let seeds = if short { 2 } else { number(0, 10) };
    let first = number(1, 1);
    let only = arguments.get(2).cloned().unwrap_or_default();
    let verbose = seeds <= 2;
    let mut failures = Vec::new();
    println!(
        "cell | noise | normal RMS | bias | R error median (min..max) | refused | depth | band in/above/below | R in 2u | further apices | s"
    );
    for cell in cells().iter().filter(|c| c.name.contains(&only)) {
        let (mut rms, mut bias, mut errors, mut depths) = (vec![], vec![], vec![], vec![]);
        let (mut inside, mut above, mut below) = (vec![], vec![], vec![]);
        let (mut refused, mut covered, mut apices) = (0, 0, 0);
        let mut seconds = 0.0;
        let mut reasons = String::new();
        for seed in first..first + seeds {
            let scene = (cell.surface)(seed, cell.px);
            let tip = (cell.tip)();
            let mut settings = scan::Settings::new(N, N, Pitch::square(cell.px));
            settings.distortion = Distortion {
                noise_nm: cell.noise,
                ..Distortion::default()
            };
            settings.seed = seed;
            settings.support_nm = 64.0 * cell.px.min(1.5);
            let made = scan::scan(|x, y| scene.height(x, y), &tip, &settings, &Progress::new())?;
            if verbose && cell.name == "rough" {
                let r = summit_radii(&scene, cell.px);
                println!(
                    "  summits {} radii {:.2} {:.2} {:.2} {:.2} {:.2}",
                    r.len(),
                    r[0],
                    r[5],
                    r[r.len() / 10],
                    r[r.len() / 4],
                    r[r.len() / 2]
                );
            }
            let start = Instant::now();
            let e = estimate(&made.scan, None, &Settings::default(), &Progress::new())?;
            seconds += start.elapsed().as_secs_f64();
            match (&e.read_out.apex_radius, cell.radius) {
                (Some(r), truth) => {
                    let truth = truth.unwrap_or(f64::NAN);
                    errors.push(r.value / truth - 1.0);
                    covered += usize::from((r.value - truth).abs() <= 2.0 * r.u);
                    if verbose || truth.is_nan() {
                        println!(
                            "  {} seed {seed}: R {:.2} u {:.2} depth {:.2} principal {:.2?}",
                            cell.name, r.value, r.u, r.fit_depth_nm, r.principal_nm
                        );
                    }
                }
                (None, _) => {
                    refused += 1;
                    reasons = e
                        .diagnosis
                        .first()
                        .map(|d| d.finding.clone())
                        .unwrap_or_default();
                }
            }
            apices += e.further_apices.len();
            if let Some(s) = score(&e, &(cell.identified)()) {
                rms.push(s.rms);
                bias.push(s.bias);
                inside.push(s.inside);
                above.push(s.above_sharper);
                below.push(s.below_blunter);
                depths.push(e.exercised_depth_nm.unwrap_or(0.0));
            }
            if verbose {
                println!(
                    "  smoothing {:.2} thr {:.3} features {} half {} u {:.3} angle {:?}",
                    e.smoothing_px,
                    e.threshold_nm,
                    e.features,
                    e.tip.shape().nrows() / 2,
                    e.height_u_nm,
                    e.read_out.half_angle.as_ref().map(|a| a.value)
                );
                if std::env::var_os("TIP_PROFILE").is_some() {
                    let (c, truth) = (e.tip.shape().nrows() / 2, (cell.identified)());
                    for k in 0..e.tip.shape().ncols() {
                        let x = (k as f64 - c as f64) * cell.px;
                        println!(
                            "    {x:6.1} {:8.3} true {:8.3} seen {} diagonal {:8.3} true {:8.3} seen {}",
                            e.tip.shape()[[c, k]],
                            -truth(x, 0.0),
                            e.support[[c, k]],
                            e.tip.shape()[[k, k]],
                            -truth(x, x),
                            e.support[[k, k]]
                        );
                    }
                }
                for d in &e.diagnosis {
                    println!("  - {}", d.finding);
                }
            }
        }
        let (rms_m, e_m) = (median(&mut rms), median(&mut errors));
        println!(
            "{} | {} | {:.3} | {:+.3} | {:+.1} % ({:+.1}..{:+.1}) | {refused}/{seeds} | {:.1} | {:.3}/{:.3}/{:.3} | {covered}/{} | {apices} | {:.2}",
            cell.name,
            cell.noise,
            rms_m,
            median(&mut bias),
            100.0 * e_m,
            100.0 * errors.first().copied().unwrap_or(f64::NAN),
            100.0 * errors.last().copied().unwrap_or(f64::NAN),
            median(&mut depths),
            mean(&inside),
            mean(&above),
            mean(&below),
            errors.len(),
            seconds / seeds as f64,
        );
        if refused > 0 && cell.radius.is_some() {
            println!("  refused: {reasons}");
        }
        if let Some((limit, e_limit)) = cell.limits
            && !(rms_m <= limit && (cell.radius.is_none() || e_m.abs() <= e_limit))
        {
            failures.push(format!(
                "{} at {} nm: {rms_m:.3} nm, {:.1} %",
                cell.name,
                cell.noise,
                100.0 * e_m
            ));
        }
        if cell.radius.is_none() && cell.name != "worn" && cell.name != "double" && refused < seeds
        {
            failures.push(format!(
                "{} at {} nm: a radius was given",
                cell.name, cell.noise
            ));
        }
        if cell.name == "double" && apices < seeds as usize {
            failures.push(format!(
                "double at {} nm: {apices} second apices",
                cell.noise
            ));
        }
    }
    for failure in &failures {
        println!("beyond the limit: {failure}");
    }
    if short && !failures.is_empty() {
        std::process::exit(1);
    }
    Ok(())
}

fn median(values: &mut [f64]) -> f64 {
    values.sort_by(f64::total_cmp);
    values.get(values.len() / 2).copied().unwrap_or(f64::NAN)
}

fn mean(values: &[f64]) -> f64 {
    values.iter().sum::<f64>() / (values.len() as f64).max(1.0)
}
