//! Makes the scans in `sample-scans/` and the truth beside them, or checks that they are what this
//! program makes.
//!
//! ```text
//! cargo run --release --no-default-features --example make_samples
//! cargo run --release --no-default-features --example make_samples -- --check sample-scans
//! ```

use anyhow::{Context, Result, bail};
use serde::Serialize;
use std::path::Path;
use truewidth::heightmap::Pitch;
use truewidth::progress::Progress;
use truewidth::tip::model::Model;
use truewidth::virtual_scan::{
    Bump, BumpShape, Bumps, CorrelatedMap, Distortion, EdgeRoughness, Lines, Scene, Settings, scan,
    scatter,
};

/// A sample before it is scanned.
struct Sample {
    name: &'static str,
    scene: Scene,
    tip: Model,
    settings: Settings,
    dimensions: Vec<Dimension>,
    features: Vec<Placed>,
}

/// The truth file.
#[derive(Serialize)]
struct Truth {
    about: &'static str,
    scan: String,
    seed: u64,
    oversampling: usize,
    columns: usize,
    rows: usize,
    pitch_nm: [f64; 2],
    tip: TrueTip,
    instrument: Instrument,
    #[serde(rename = "dimension", skip_serializing_if = "Vec::is_empty")]
    dimensions: Vec<Dimension>,
    #[serde(rename = "feature", skip_serializing_if = "Vec::is_empty")]
    features: Vec<Placed>,
}

#[derive(Serialize)]
struct TrueTip {
    shape: &'static str,
    radius_nm: f64,
    half_angle_deg: f64,
    support_nm: f64,
}

#[derive(Serialize)]
struct Instrument {
    noise_nm: f64,
    tilt_nm_per_nm: [f64; 2],
    drift_nm: f64,
    row_jitter_nm: f64,
    quantum_nm: f64,
}

/// A true dimension, under the name that the job file gives it.
#[derive(Serialize)]
struct Dimension {
    name: String,
    kind: &'static str,
    quantity: &'static str,
    #[serde(skip_serializing_if = "Vec::is_empty")]
    at: Vec<f64>,
    /// One value, or one for each height fraction.
    true_nm: Vec<f64>,
}

/// A round feature and where it stands.
#[derive(Serialize)]
struct Placed {
    kind: &'static str,
    x_nm: f64,
    y_nm: f64,
    height_nm: f64,
    radius_nm: f64,
}

/// 1/128 nm: a converter step far below the noise, and exact in binary.
const QUANTUM_NM: f64 = 0.007_812_5;

const FRACTIONS: [f64; 3] = [0.1, 0.5, 0.9];

fn rounded(value: f64) -> f64 {
    (value * 1e4).round() / 1e4
}

fn one(name: &str, kind: &'static str, quantity: &'static str, value: f64) -> Dimension {
    Dimension {
        name: name.to_owned(),
        kind,
        quantity,
        at: Vec::new(),
        true_nm: vec![rounded(value)],
    }
}

/// Mean true width of each line over the scan's rows, at the customary height fractions.
fn line_widths(lines: &Lines, settings: &Settings) -> Vec<Dimension> {
    let mean = |line: usize, fraction: f64| {
        let rows = settings.rows;
        let width = |r: usize| lines.width_at(line, (r as f64 + 0.5) * settings.pitch.y, fraction);
        (0..rows).map(width).sum::<f64>() / rows as f64
    };
    (0..lines.count)
        .map(|line| Dimension {
            name: format!("line {}", line + 1),
            kind: "line-width",
            quantity: "line width",
            at: FRACTIONS.to_vec(),
            true_nm: FRACTIONS.map(|f| rounded(mean(line, f))).to_vec(),
        })
        .collect()
}

/// 3 s of all edges of all lines about their straight lines, over the scan's rows.
fn edge_roughness(lines: &Lines, settings: &Settings) -> f64 {
    let mut variances = Vec::new();
    for line in 0..lines.count {
        for side in 0..2 {
            let edge: Vec<f64> = (0..settings.rows)
                .map(|r| lines.displacement(line, (r as f64 + 0.5) * settings.pitch.y)[side])
                .collect();
            let mean = edge.iter().sum::<f64>() / edge.len() as f64;
            let squares = edge.iter().map(|e| (e - mean).powi(2)).sum::<f64>();
            variances.push(squares / edge.len() as f64);
        }
    }
    3.0 * (variances.iter().sum::<f64>() / variances.len() as f64).sqrt()
}

fn placed(bumps: &[Bump]) -> Vec<Placed> {
    bumps
        .iter()
        .map(|bump| {
            let (kind, height, radius) = match bump.shape {
                BumpShape::Spike { radius, height, .. } => ("spike", height, radius),
                BumpShape::Paraboloid { radius, height } => ("paraboloid", height, radius),
                BumpShape::Sphere { radius } => ("sphere", 2.0 * radius, radius),
            };
            Placed {
                kind,
                x_nm: rounded(bump.at[0]),
                y_nm: rounded(bump.at[1]),
                height_nm: rounded(height),
                radius_nm: rounded(radius),
            }
        })
        .collect()
}

/// Stamp 14: a grating with vertical walls; etch residue stands as sharp spikes on the open floor.
fn stamp_14() -> Result<Sample> {
    let settings = Settings {
        distortion: Distortion {
            noise_nm: 0.25,
            tilt: [0.004, -0.007],
            drift_nm: 1.5,
            row_jitter_nm: 0.05,
            quantum_nm: QUANTUM_NM,
        },
        seed: 14,
        ..Settings::new(512, 512, Pitch::square(2.0))
    };
    let lines = Lines::new(110.3, 200.0, 3, 100.0, 60.0);
    // The spikes' images reach 33 nm around and stay clear of line 3 and of the floor beside it.
    let at = scatter(&[7.0; 36], 48.0, [638.0, 0.0], [1024.0, 1024.0], 1400)?;
    let spikes: Vec<Bump> = at
        .iter()
        .enumerate()
        .map(|(i, &at)| Bump {
            at,
            shape: BumpShape::Spike {
                radius: 1.0,
                half_angle: 6.0,
                height: 48.0 + 6.0 * (i % 4) as f64,
            },
        })
        .collect();
    let mut dimensions = line_widths(&lines, &settings);
    dimensions.push(Dimension {
        name: "trench 1".to_owned(),
        kind: "line-width",
        quantity: "trench width",
        at: FRACTIONS.to_vec(),
        true_nm: vec![lines.pitch_nm - lines.width_nm; 3],
    });
    dimensions.push(one("height of line 2", "step-height", "step height", 60.0));
    dimensions.push(one("grating pitch", "pitch", "pitch", 200.0));
    Ok(Sample {
        name: "stamp-14",
        features: placed(&spikes),
        scene: Scene::new().with(lines).with(Bumps::new(spikes)?),
        tip: Model::SphereCone {
            radius: 10.0,
            half_angle: 17.0,
        },
        settings,
        dimensions,
    })
}

/// The tip of stamp 22 and of the spikes it was checked on.
const SLENDER: Model = Model::SphereCone {
    radius: 8.0,
    half_angle: 10.0,
};

/// Stamp 22: a grating with sloped walls, rounded corners and rough edges.
fn stamp_22() -> Result<Sample> {
    let settings = Settings {
        support_nm: 64.0,
        distortion: Distortion {
            noise_nm: 0.2,
            tilt: [-0.006, 0.003],
            drift_nm: 1.0,
            row_jitter_nm: 0.04,
            quantum_nm: QUANTUM_NM,
        },
        seed: 22,
        ..Settings::new(512, 512, Pitch::square(1.0))
    };
    let roughness = EdgeRoughness {
        sigma_nm: 1.2,
        length_nm: 25.0,
        seed: 2200,
    };
    let lines = Lines::new(63.7, 128.0, 4, 60.0, 40.0)
        .walls(75.0, 3.0)
        .rough(roughness, -40.0, 552.0)?;
    let mut dimensions = line_widths(&lines, &settings);
    dimensions.push(one("height of line 2", "step-height", "step height", 40.0));
    dimensions.push(one("grating pitch", "pitch", "pitch", 128.0));
    let roughness = edge_roughness(&lines, &settings);
    dimensions.push(one(
        "edge roughness (3 s)",
        "edge-roughness",
        "line edge roughness",
        roughness,
    ));
    Ok(Sample {
        name: "stamp-22",
        scene: Scene::new().with(lines),
        tip: SLENDER,
        settings,
        dimensions,
        features: Vec::new(),
    })
}

/// A field of sharp spikes, scanned with the tip of stamp 22.
fn tip_check() -> Result<Sample> {
    let settings = Settings {
        support_nm: 64.0,
        distortion: Distortion {
            noise_nm: 0.15,
            tilt: [0.005, 0.004],
            drift_nm: 0.8,
            row_jitter_nm: 0.03,
            quantum_nm: QUANTUM_NM,
        },
        seed: 3,
        ..Settings::new(384, 384, Pitch::square(1.0))
    };
    let at = scatter(&[6.0; 40], 28.0, [0.0; 2], [384.0; 2], 300)?;
    let spikes: Vec<Bump> = at
        .iter()
        .enumerate()
        .map(|(i, &at)| Bump {
            at,
            shape: BumpShape::Spike {
                radius: 1.5,
                half_angle: 5.0,
                height: 42.0 + 2.0 * (i % 5) as f64,
            },
        })
        .collect();
    Ok(Sample {
        name: "tip-check",
        features: placed(&spikes),
        scene: Scene::new().with(Bumps::new(spikes)?),
        tip: SLENDER,
        settings,
        dimensions: Vec::new(),
    })
}

/// Gauge 5: certified ridges, scanned with the tip of stamp 22. The true width and corner radius
/// differ from the certified 70 nm and 3 nm within their uncertainties.
fn gauge_5() -> Result<Sample> {
    let settings = Settings {
        support_nm: 64.0,
        distortion: Distortion {
            noise_nm: 0.2,
            tilt: [0.003, -0.005],
            drift_nm: 0.8,
            row_jitter_nm: 0.03,
            quantum_nm: QUANTUM_NM,
        },
        seed: 5005,
        ..Settings::new(200, 320, Pitch::square(0.8))
    };
    let lines = Lines::new(41.3, 128.0, 2, 70.3, 45.0).walls(90.0, 3.1);
    Ok(Sample {
        name: "gauge-5",
        scene: Scene::new().with(lines),
        tip: SLENDER,
        settings,
        dimensions: Vec::new(),
        features: Vec::new(),
    })
}

/// Filler particles on a flat.
fn filler() -> Result<Sample> {
    let settings = Settings {
        support_nm: 96.0,
        distortion: Distortion {
            noise_nm: 0.15,
            tilt: [0.002, 0.005],
            drift_nm: 1.2,
            row_jitter_nm: 0.04,
            quantum_nm: QUANTUM_NM,
        },
        seed: 4,
        ..Settings::new(384, 384, Pitch::square(2.0))
    };
    // Diameters spread evenly over 22 to 30 nm, in a mixed order.
    let radii: Vec<f64> = (0..41)
        .map(|i| 11.0 + 0.1 * f64::from(i * 17 % 41))
        .collect();
    let at = scatter(&radii, 46.0, [8.0; 2], [760.0; 2], 400)?;
    let particles: Vec<Bump> = at
        .iter()
        .zip(&radii)
        .map(|(&at, &radius)| Bump {
            at,
            shape: BumpShape::Sphere { radius },
        })
        .collect();
    let mean = 2.0 * radii.iter().sum::<f64>() / radii.len() as f64;
    Ok(Sample {
        name: "filler",
        features: placed(&particles),
        scene: Scene::new().with(Bumps::new(particles)?),
        tip: Model::SphereCone {
            radius: 12.0,
            half_angle: 15.0,
        },
        settings,
        dimensions: vec![one("particles", "particle", "mean diameter", mean)],
    })
}

/// An isolated step: one wide ridge, coarser along the slow axis.
fn shim() -> Result<Sample> {
    let settings = Settings {
        support_nm: 100.0,
        distortion: Distortion {
            noise_nm: 0.3,
            tilt: [0.012, -0.009],
            drift_nm: 4.0,
            row_jitter_nm: 0.3,
            quantum_nm: QUANTUM_NM,
        },
        seed: 5,
        ..Settings::new(192, 384, Pitch { x: 5.0, y: 10.0 })
    };
    let ridge = Lines::new(961.3, 1920.0, 1, 600.0, 22.4).walls(70.0, 0.0);
    let mut dimensions = line_widths(&ridge, &settings);
    dimensions[0].name = "ridge".to_owned();
    dimensions.push(one("step", "step-height", "step height", ridge.height_nm));
    Ok(Sample {
        name: "shim",
        scene: Scene::new().with(ridge),
        tip: Model::SphereCone {
            radius: 12.0,
            half_angle: 20.0,
        },
        settings,
        dimensions,
        features: Vec::new(),
    })
}

/// A rough etched floor.
fn etched_floor() -> Result<Sample> {
    let settings = Settings {
        support_nm: 64.0,
        distortion: Distortion {
            noise_nm: 0.1,
            tilt: [0.003, 0.002],
            drift_nm: 0.6,
            row_jitter_nm: 0.03,
            quantum_nm: QUANTUM_NM,
        },
        seed: 6,
        ..Settings::new(256, 256, Pitch::square(2.0))
    };
    let rough = CorrelatedMap::new(3.0, 12.0, [-40.0; 2], [552.0; 2], 600)?;
    let heights: Vec<f64> = (0..256 * 256)
        .map(|i| {
            rough.at(
                f64::from(i % 256) * 2.0 + 1.0,
                f64::from(i / 256) * 2.0 + 1.0,
            )
        })
        .collect();
    let mean = heights.iter().sum::<f64>() / heights.len() as f64;
    let moment =
        |f: fn(f64) -> f64| heights.iter().map(|z| f(z - mean)).sum::<f64>() / heights.len() as f64;
    let dimensions = vec![
        one("floor", "texture", "Sa", moment(f64::abs)),
        one("floor", "texture", "Sq", moment(|z| z * z).sqrt()),
    ];
    Ok(Sample {
        name: "etched-floor",
        scene: Scene::new().on(move |x: f64, y: f64| rough.at(x, y)),
        tip: Model::SphereCone {
            radius: 8.0,
            half_angle: 15.0,
        },
        settings,
        dimensions,
        features: Vec::new(),
    })
}

fn true_tip(tip: Model, support_nm: f64) -> Result<TrueTip> {
    match tip {
        Model::SphereCone { radius, half_angle } => Ok(TrueTip {
            shape: "sphere-cone",
            radius_nm: radius,
            half_angle_deg: half_angle,
            support_nm,
        }),
        _ => bail!("the samples use sphere-cone tips"),
    }
}

/// Scans `sample` and writes its files under `dir`.
fn make(sample: Sample, dir: &Path) -> Result<()> {
    let Sample {
        name,
        scene,
        tip,
        settings,
        ..
    } = sample;
    let made = scan(
        |x, y| scene.height(x, y),
        |dx, dy| tip.height(dx, dy),
        &settings,
        &Progress::new(),
    )?;
    let truth_dir = dir.join("truth");
    std::fs::create_dir_all(&truth_dir)?;
    truewidth::files::write(&dir.join(name).with_extension("tiff"), &made.scan)?;
    let distortion = settings.distortion;
    let truth = Truth {
        about: "Truth of a synthetic scan. Lengths in nm, positions from the upper left corner.",
        scan: format!("{name}.tiff"),
        seed: settings.seed,
        oversampling: settings.oversampling,
        columns: settings.columns,
        rows: settings.rows,
        pitch_nm: [settings.pitch.x, settings.pitch.y],
        tip: true_tip(tip, settings.support_nm)?,
        instrument: Instrument {
            noise_nm: distortion.noise_nm,
            tilt_nm_per_nm: distortion.tilt,
            drift_nm: distortion.drift_nm,
            row_jitter_nm: distortion.row_jitter_nm,
            quantum_nm: distortion.quantum_nm,
        },
        dimensions: sample.dimensions,
        features: sample.features,
    };
    std::fs::write(
        truth_dir.join(format!("{name}.toml")),
        toml::to_string(&truth)?,
    )?;
    truewidth::files::write(&truth_dir.join(format!("{name}.npy")), &made.truth)?;
    Ok(())
}

fn names(sample: &str) -> [String; 4] {
    [
        format!("{sample}.tiff"),
        format!("truth/{sample}.toml"),
        format!("truth/{sample}.npy"),
        format!("truth/{sample}.npy.toml"),
    ]
}

fn main() -> Result<()> {
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    let (check, dir) = match arguments.iter().map(String::as_str).collect::<Vec<_>>()[..] {
        [] => (false, "sample-scans"),
        ["--check", dir] => (true, dir),
        [dir] if !dir.starts_with('-') => (false, dir),
        _ => bail!("usage: make_samples [[--check] DIR]"),
    };
    let dir = Path::new(dir);
    let fresh = tempfile::tempdir()?;
    let target = if check { fresh.path() } else { dir };
    let mut different = Vec::new();
    for sample in [
        stamp_14()?,
        stamp_22()?,
        tip_check()?,
        gauge_5()?,
        filler()?,
        shim()?,
        etched_floor()?,
    ] {
        let name = sample.name;
        make(sample, target).with_context(|| name)?;
        for file in names(name) {
            let same = !check || {
                let kept = std::fs::read(dir.join(&file)).with_context(|| file.clone())?;
                kept == std::fs::read(target.join(&file))?
            };
            println!(
                "{file}: {}",
                if !check {
                    "made"
                } else if same {
                    "same"
                } else {
                    "different"
                }
            );
            if !same {
                different.push(file);
            }
        }
    }
    if !different.is_empty() {
        bail!("not what this program makes: {}", different.join(", "));
    }
    Ok(())
}
