//! Validates the tip from known characterizers on virtual scans whose truth is finer than the
//! pixel.
//!
//! `known_validation [SEEDS] [FIRST] [CELL]`: SEEDS scans per cell (20), from seed FIRST (1), only
//! cells whose name holds CELL. Position, rotation and tilt differ from seed to seed, and the
//! true width, height, angle and radius are drawn about the certified ones with the stated
//! standard uncertainties: coverage is that of the whole interval, certificate included.

use anyhow::Result;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use truewidth::heightmap::{HeightMap, Pitch};
use truewidth::leveling::{self, level};
use truewidth::progress::Progress;
use truewidth::tip::known::{Certified, Formula, Known, Settings, Shape, estimate};
use truewidth::tip::model::Model;
use truewidth::virtual_scan::{
    self as virtual_scan, BumpShape, Bumps, Feature, Lines, Step, scatter,
};

const N: usize = 160;
const NOISES: [f64; 4] = [0.0, 0.1, 0.3, 1.0];

struct TipCase {
    name: &'static str,
    model: Model,
    formula: Formula,
    px: f64,
}

const TIPS: [TipCase; 4] = [
    TipCase {
        name: "sphere-cone 8 nm 15 deg, 1 nm px",
        model: Model::SphereCone {
            radius: 8.0,
            half_angle: 15.0,
        },
        formula: Formula::SphereCone,
        px: 1.0,
    },
    TipCase {
        name: "sphere-cone 20 nm 17 deg, 2 nm px",
        model: Model::SphereCone {
            radius: 20.0,
            half_angle: 17.0,
        },
        formula: Formula::SphereCone,
        px: 2.0,
    },
    TipCase {
        name: "paraboloid 10 nm, 1 nm px",
        model: Model::Paraboloid { radius: 10.0 },
        formula: Formula::Paraboloid,
        px: 1.0,
    },
    TipCase {
        name: "pyramid 15 25 18 22 deg, 1 nm px",
        model: Model::Pyramid {
            half_angles: [15.0, 25.0, 18.0, 22.0],
        },
        formula: Formula::Pyramid,
        px: 1.0,
    },
];

const SHAPES: [&str; 5] = ["ridges", "trapezoid", "step", "sphere", "spike"];

/// Places for `count` round features; tries until they fit.
fn places(count: usize, foot: f64, gap: f64, side: f64, random: &mut ChaCha8Rng) -> Vec<[f64; 2]> {
    loop {
        let seed = random.random_range(1..1_000_000);
        let found = scatter(&vec![foot; count], gap, [0.0; 2], [side; 2], seed);
        if let Ok(at) = found {
            return at;
        }
    }
}

/// A characterizer with its certified values and one true surface drawn about them.
fn characterizer(
    name: &str,
    px: f64,
    random: &mut ChaCha8Rng,
) -> Result<(Shape, Box<dyn Feature>)> {
    let side = N as f64 * px;
    let drawn = |value: f64, u: f64, random: &mut ChaCha8Rng| {
        let g: f64 = StandardNormal.sample(random);
        (Certified::new(value, u), value + u * g)
    };
    let turn: f64 = random.random_range(-6.0f64..6.0).to_radians();
    let shift: f64 = random.random_range(-0.5..0.5);
    let (sin, cos) = turn.sin_cos();
    let across = move |x: f64, y: f64| (x - side / 2.0) * cos + (y - side / 2.0) * sin;
    Ok(match name {
        "ridges" | "trapezoid" => {
            let (width, w) = drawn(60.0 * px, 0.4 * px, random);
            let (height, h) = drawn(50.0 * px, 0.2 * px, random);
            let pitch = 120.0 * px;
            let (wall_angle, a) = if name == "ridges" {
                (Certified::exact(90.0), 90.0)
            } else {
                drawn(82.0, 0.3, random)
            };
            let (corner_radius, r) = if name == "ridges" {
                (Certified::exact(0.0), 0.0)
            } else {
                drawn(4.0 * px, 0.2 * px, random)
            };
            let lines = Lines::new(-480.0 * px + shift * pitch, pitch, 9, w, h).walls(a, r);
            let shape = Shape::Ridges {
                width,
                height: Some(height),
                pitch: Some(Certified::exact(pitch)),
                wall_angle,
                corner_radius,
            };
            (
                shape,
                Box::new(move |x: f64, y: f64| lines.height(across(x, y), 0.0)),
            )
        }
        "step" => {
            let (height, height_nm) = drawn(60.0 * px, 0.2 * px, random);
            let step = Step {
                at_nm: 30.0 * shift * px,
                height_nm,
                wall_angle_deg: 90.0,
            };
            let shape = Shape::Step {
                height: Some(height),
                wall_angle: Certified::exact(90.0),
                corner_radius: Certified::exact(0.0),
            };
            (
                shape,
                Box::new(move |x: f64, y: f64| step.height(across(x, y), 0.0)),
            )
        }
        "sphere" => {
            let (diameter, d) = drawn(40.0 * px, 0.3 * px, random);
            let at = places(3, 20.0 * px, 20.0 * px, side, random);
            let bumps = Bumps::all(BumpShape::Sphere { radius: d / 2.0 }, &at)?;
            (Shape::Sphere { diameter }, Box::new(bumps))
        }
        _ => {
            let (radius, r) = drawn(3.0 * px, 0.1 * px, random);
            let (half_angle, a) = drawn(8.0, 0.2, random);
            let at = places(8, 9.0 * px, 24.0 * px, side, random);
            let bumps = Bumps::all(
                BumpShape::Spike {
                    radius: r,
                    half_angle: a,
                    height: 45.0 * px,
                },
                &at,
            )?;
            (Shape::Spike { radius, half_angle }, Box::new(bumps))
        }
    })
}

/// Half-angle that the tip has over the azimuths that were told, and its radius.
fn truth(tip: &TipCase, known: &Known) -> (Option<f64>, Option<f64>) {
    match tip.model {
        Model::SphereCone { radius, half_angle } => (Some(radius), Some(half_angle)),
        Model::Paraboloid { radius } => (Some(radius), None),
        Model::Pyramid { half_angles } => {
            let told = known.read_out.half_angle.as_ref();
            let mean = told.map(|read| {
                let of = |azimuth: f64| {
                    // The section across straight edges mixes two faces.
                    let (sin, cos) = azimuth.to_radians().sin_cos();
                    let tan = |k: usize| half_angles[k].to_radians().tan();
                    let x = cos.abs() * tan(usize::from(cos > 0.0));
                    let y = sin.abs() * tan(2 + usize::from(sin > 0.0));
                    (x + y).atan().to_degrees()
                };
                read.per_azimuth.iter().map(|p| of(p.0)).sum::<f64>()
                    / read.per_azimuth.len() as f64
            });
            (None, mean)
        }
    }
}

#[derive(Default)]
struct Tally {
    errors: Vec<f64>,
    us: Vec<f64>,
    free: Vec<f64>,
}

impl Tally {
    fn add(&mut self, value: f64, u: f64, truth: f64) {
        self.errors.push(value - truth);
        self.us.push(u);
    }

    fn text(&self, per: f64) -> String {
        let n = self.errors.len() as f64;
        if n == 0.0 {
            return "- | - | - | -".to_owned();
        }
        let mean = self.errors.iter().sum::<f64>() / n;
        let sd = (self.errors.iter().map(|e| (e - mean).powi(2)).sum::<f64>() / n).sqrt();
        let inside = self
            .errors
            .iter()
            .zip(&self.us)
            .filter(|(e, u)| e.abs() <= 2.0 * **u)
            .count();
        let u = self.us.iter().sum::<f64>() / n;
        format!(
            "{:+.3} | {:.3} | {:.3} | {inside}/{}",
            per * mean,
            per * sd,
            per * u,
            n
        )
    }
}

fn main() -> Result<()> {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let number = |i: usize, or: u64| arguments.get(i).and_then(|a| a.parse().ok()).unwrap_or(or);
    let (seeds, first) = (number(0, 20), number(1, 1));
    let wanted = arguments.get(2).cloned().unwrap_or_default();
    let talk = std::env::var("TALK").is_ok();
    println!(
        "| tip | shape | noise nm | R: mean error % | sd % | u % | in +-2u | half-angle: mean error deg | sd | u | in +-2u | free-form R: mean error % | told |"
    );
    println!("| --- | --- | --- | --- | --- | --- | --- | --- | --- | --- | --- | --- | --- |");
    for tip in &TIPS {
        for shape_name in SHAPES {
            let name = format!("{} / {shape_name}", tip.name);
            if !name.contains(&wanted) {
                continue;
            }
            let mut tallies: Vec<(Tally, Tally, usize)> =
                NOISES.iter().map(|_| Default::default()).collect();
            for seed in first..first + seeds {
                let mut random = ChaCha8Rng::seed_from_u64(seed);
                let (shape, feature) = characterizer(shape_name, tip.px, &mut random)?;
                let settings = virtual_scan::Settings {
                    support_nm: 110.0 * tip.px,
                    ..virtual_scan::Settings::new(N, N, Pitch::square(tip.px))
                };
                let made = virtual_scan::scan(
                    |x, y| feature.height(x, y),
                    |x, y| tip.model.height(x, y),
                    &settings,
                    &Progress::new(),
                )?;
                let slope: [f64; 2] = [
                    random.random_range(-0.01..0.01),
                    random.random_range(-0.01..0.01),
                ];
                for (noise, tally) in NOISES.iter().zip(&mut tallies) {
                    let mut random = ChaCha8Rng::seed_from_u64(1000 + seed);
                    let mut heights = made.clean.heights().to_owned();
                    for ((r, c), z) in heights.indexed_iter_mut() {
                        let g: f64 = StandardNormal.sample(&mut random);
                        *z += (slope[0] * c as f64 * tip.px
                            + slope[1] * r as f64 * tip.px
                            + noise * g) as f32;
                    }
                    let scan = HeightMap::new(heights, Pitch::square(tip.px))?;
                    let leveled = level(&scan, &leveling::Settings::default(), &Progress::new())?;
                    let settings = Settings {
                        shape,
                        formula: tip.formula,
                        support_nm: 64.0 * tip.px,
                        pitch: Pitch::square(tip.px),
                    };
                    let known =
                        match estimate(&leveled.map, leveled.noise_nm, &settings, &Progress::new())
                        {
                            Ok(known) => known,
                            Err(why) => {
                                if talk {
                                    println!("{name} seed {seed} noise {noise}: {why}");
                                }
                                continue;
                            }
                        };
                    let (radius, angle) = truth(tip, &known);
                    if let (Some(read), Some(truth)) = (known.read_out.apex_radius, radius) {
                        tally.0.add(read.value, read.u, truth);
                    }
                    if let (Some(read), Some(truth)) = (&known.read_out.half_angle, angle) {
                        tally.1.add(read.value, read.u, truth);
                    }
                    if let (Some(read), Some(truth)) =
                        (known.free_form.read_out.apex_radius, radius)
                    {
                        tally.0.free.push(read.value / truth - 1.0);
                    }
                    tally.2 += usize::from(known.identified);
                    if talk {
                        let r = known.read_out.apex_radius.map(|r| (r.value, r.u));
                        let a = known.read_out.half_angle.as_ref().map(|a| (a.value, a.u));
                        let f = known.free_form.read_out.apex_radius.map(|r| r.value);
                        println!(
                            "{name} seed {seed} noise {noise}: R {r:.3?} a {a:.3?} sd {:.4} misfit {:.4} depth {:.1} free {f:.3?} {:?}",
                            known.residual_nm,
                            known.misfit_nm,
                            known.exercised_depth_nm,
                            known.diagnosis
                        );
                    }
                }
            }
            for (noise, (radius, angle, told)) in NOISES.iter().zip(&tallies) {
                let per = match tip.model {
                    Model::SphereCone { radius, .. } | Model::Paraboloid { radius } => {
                        100.0 / radius
                    }
                    Model::Pyramid { .. } => 1.0,
                };
                let free = &radius.free;
                let free = if free.is_empty() {
                    "-".to_owned()
                } else {
                    format!(
                        "{:+.1} ({})",
                        100.0 * free.iter().sum::<f64>() / free.len() as f64,
                        free.len()
                    )
                };
                println!(
                    "| {} | {shape_name} | {noise} | {} | {} | {free} | {told}/{seeds} |",
                    tip.name,
                    radius.text(per),
                    angle.text(1.0)
                );
            }
        }
    }
    Ok(())
}
