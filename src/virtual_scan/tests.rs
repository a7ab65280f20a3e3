//! Closed forms: methods of grey-scale dilation of simple bodies by a sphere-cone, worked out from
//! the geometry of tangent spheres and cones and checked against brute-force dilation.

use super::*;
use crate::tip::model::{Model, sphere_cone_half_width};

const TIP: Model = Model::SphereCone {
    radius: 10.0,
    half_angle: 15.0,
};

fn taken(
    surface: impl Fn(f64, f64) -> f64 + Sync,
    tip: impl Fn(f64, f64) -> f64 + Sync,
    settings: &Settings,
) -> VirtualScan {
    scan(surface, tip, settings, &Progress::new()).unwrap()
}

fn line(heights: &HeightMap, row: usize) -> Vec<f64> {
    let row = heights.heights().row(row).to_vec();
    row.into_iter().map(f64::from).collect()
}

/// Full width above `level` of a single ridge, by linear interpolation between pixels.
fn width_above(profile: &[f64], pitch: f64, level: f64) -> f64 {
    let crossing = |a: usize, b: usize| {
        a as f64 + (b as f64 - a as f64) * (level - profile[a]) / (profile[b] - profile[a])
    };
    let first = profile.iter().position(|&z| z >= level).unwrap();
    let last = profile.iter().rposition(|&z| z >= level).unwrap();
    (crossing(last, last + 1) - crossing(first, first - 1)) * pitch
}

/// Image width of a line of width w with vertical walls: `w + 2 w_t((1 - f) h)`. The edges are
/// placed off the grid: the truth is finer than the pixel.
#[test]
fn a_line_with_vertical_walls_widens_by_the_tip() {
    let lines = Lines::new(100.13, 1.0, 1, 100.0, 50.0);
    let settings = Settings {
        support_nm: 60.0,
        ..Settings::new(1, 2000, Pitch { x: 0.1, y: 2.0 })
    };
    let image = taken(
        |x, y| lines.height(x, y),
        |x, y| TIP.height(x, y),
        &settings,
    );
    let profile = line(&image.scan, 0);
    for (fraction, width) in [(0.1, 139.46), (0.5, 128.74), (0.9, 117.32)] {
        let measured = width_above(&profile, 0.1, fraction * 50.0);
        assert!((measured - width).abs() < 0.02, "{fraction}: {measured}");
    }
    let base = width_above(&profile, 0.1, 0.001);
    assert!((base - 142.14).abs() < 0.1, "{base}");
}

#[test]
fn width_does_not_depend_on_where_the_line_stands_between_the_pixels() {
    for shift in [0.0, 0.31, 0.77, 1.2] {
        let lines = Lines::new(100.0 + shift, 1.0, 1, 99.7, 50.0);
        let settings = Settings {
            support_nm: 60.0,
            ..Settings::new(1, 100, Pitch::square(2.0))
        };
        let image = taken(
            |x, y| lines.height(x, y),
            |x, y| TIP.height(x, y),
            &settings,
        );
        // On the straight flank, where interpolation between pixels is exact.
        let measured = width_above(&line(&image.scan, 0), 2.0, 20.0);
        let width = 99.7 + 2.0 * sphere_cone_half_width(10.0, 15.0, 30.0);
        assert!((measured - width).abs() < 0.05, "{shift}: {measured}");
    }
}

/// Sphere r on a flat: `I = r - R + sqrt((R + r)^2 - x^2)` on the spherical part; base width from
/// the tangent cone, (10, 10, 15 deg) -> 41.41.
#[test]
fn a_sphere_on_a_flat_follows_the_tangent_spheres() {
    let bumps = Bumps::all(BumpShape::Sphere { radius: 10.0 }, &[[30.0, 2.5]]).unwrap();
    let settings = Settings {
        support_nm: 60.0,
        ..Settings::new(5, 600, Pitch { x: 0.1, y: 1.0 })
    };
    let image = taken(
        |x, y| bumps.height(x, y),
        |x, y| TIP.height(x, y),
        &settings,
    );
    let profile = line(&image.clean, 2);
    for (column, &z) in profile.iter().enumerate() {
        let x = (column as f64 + 0.5) * 0.1 - 30.0;
        let expected = (400.0 - x * x).sqrt();
        // Contact on both spherical caps while x / (R + r) <= cos a.
        if x.abs() <= 20.0 * 15f64.to_radians().cos() && expected > 6.0 {
            assert!((z - expected).abs() < 2e-3, "{x}: {z} {expected}");
        }
    }
    let base = width_above(&profile, 0.1, 0.001);
    assert!((base - 41.41).abs() < 0.1, "{base}");
    // (10, 2.5, 15 deg) -> 4 sqrt(R r) = 20.00.
    let bumps = Bumps::all(BumpShape::Sphere { radius: 2.5 }, &[[15.0, 0.05]]).unwrap();
    let settings = Settings {
        support_nm: 30.0,
        ..Settings::new(1, 300, Pitch::square(0.1))
    };
    let image = taken(
        |x, y| bumps.height(x, y),
        |x, y| TIP.height(x, y),
        &settings,
    );
    let profile = line(&image.clean, 0);
    let base = width_above(&profile, 0.1, 0.005);
    // The foot is found to a pixel.
    assert!((base - 20.0).abs() < 0.1, "{base}");
    let top = profile.iter().copied().fold(0.0, f64::max);
    assert!((top - 5.0).abs() < 1e-3, "{top}");
}

/// Paraboloids add: the image's apex radius is R + r.
#[test]
fn radii_of_paraboloids_add() {
    let spike = BumpShape::Paraboloid {
        radius: 3.0,
        height: 20.0,
    };
    let bumps = Bumps::all(spike, &[[16.2, 16.9]]).unwrap();
    let tip = Model::Paraboloid { radius: 8.0 };
    let settings = Settings {
        support_nm: 24.0,
        ..Settings::new(33, 33, Pitch::square(1.0))
    };
    let image = taken(
        |x, y| bumps.height(x, y),
        |x, y| tip.height(x, y),
        &settings,
    );
    for ((r, c), &z) in image.clean.heights().indexed_iter() {
        let d2 = (c as f64 + 0.5 - 16.2).powi(2) + (r as f64 + 0.5 - 16.9).powi(2);
        if d2 < 100.0 {
            let expected = 20.0 - d2 / (2.0 * 11.0);
            assert!((f64::from(z) - expected).abs() < 2e-3, "{z} {expected}");
        }
    }
}

/// The classic mistake is to forget the mirror: a single needle shows the tip mirrored.
#[test]
fn a_needle_shows_a_skew_tip_mirrored() {
    let skew = Model::Pyramid {
        half_angles: [10.0, 35.0, 20.0, 50.0],
    };
    let pitch = Pitch { x: 1.0, y: 1.5 };
    // The needle stands on the centre of pixel [10, 12]; the flat lies far below the tip.
    let (x0, y0) = (12.5, 15.75);
    let needle = |x: f64, y: f64| {
        if (x - x0).hypot(y - y0) < 1e-3 {
            50.0
        } else {
            -1e3
        }
    };
    for oversampling in [1, 4, 5] {
        let settings = Settings {
            support_nm: 20.0,
            oversampling,
            ..Settings::new(21, 25, pitch)
        };
        let image = taken(needle, |x, y| skew.height(x, y), &settings);
        for ((r, c), &z) in image.clean.heights().indexed_iter() {
            let (dx, dy) = (c as f64 + 0.5 - x0, (r as f64 + 0.5) * 1.5 - y0);
            if dx.abs() <= 10.0 && dy.abs() <= 10.0 {
                let expected = 50.0 - skew.height(-dx, -dy);
                assert!(
                    (f64::from(z) - expected).abs() < 1e-4,
                    "{dx} {dy}: {z} {expected}"
                );
            } else {
                assert!(z <= -1000.0 + 1e-3);
            }
        }
    }
}

/// The pruned search against a plain loop over every fine point of the support.
#[test]
fn the_search_finds_what_a_plain_loop_finds() {
    let rough = CorrelatedMap::new(3.0, 6.0, [-20.0; 2], [40.0; 2], 5).unwrap();
    let surface = |x: f64, y: f64| rough.at(x, y);
    let tip = |x: f64, y: f64| (0.2 * x.max(0.0) + 0.1 * y.abs()) + x * x / 9.0;
    for oversampling in [1, 2, 4, 5] {
        let settings = Settings {
            support_nm: 12.0,
            oversampling,
            ..Settings::new(7, 9, Pitch { x: 1.5, y: 2.0 })
        };
        let fine = FineSurface::sample(&surface, &settings, &Progress::new()).unwrap();
        let blocks = tip_blocks(&tip, &settings);
        let n = oversampling as f64;
        for row in 0..7 {
            for column in 0..9 {
                let (block, cell) = fine.contact(&blocks, row, column).unwrap();
                let [dx, dy] = blocks[block].offset(cell, &settings);
                let (x, y) = ((column as f64 + 0.5) * 1.5, (row as f64 + 0.5) * 2.0);
                let mut plain = f64::NEG_INFINITY;
                for i in -40..=40 {
                    for j in -40..=40 {
                        let (u, v) = (f64::from(j) * 1.5 / n, f64::from(i) * 2.0 / n);
                        if u.abs() <= 6.0 && v.abs() <= 6.0 {
                            plain = plain.max(surface(x + u, y + v) - tip(u, v));
                        }
                    }
                }
                let found = surface(x + dx, y + dy) - tip(dx, dy);
                assert!((found - plain).abs() < 1e-5, "{found} {plain}");
            }
        }
    }
}

#[test]
fn the_same_seed_gives_the_same_bytes_on_any_number_of_threads() {
    let positions = scatter(&[6.0; 8], 2.0, [0.0; 2], [64.0; 2], 3).unwrap();
    let spike = BumpShape::Spike {
        radius: 1.5,
        half_angle: 10.0,
        height: 20.0,
    };
    let scene = Scene::new()
        .with(Bumps::all(spike, &positions).unwrap())
        .with(Step {
            at_nm: 50.0,
            height_nm: 5.0,
            wall_angle_deg: 70.0,
        });
    let settings = Settings {
        support_nm: 30.0,
        distortion: Distortion {
            noise_nm: 0.2,
            tilt: [0.01, -0.02],
            drift_nm: 3.0,
            row_jitter_nm: 0.1,
            quantum_nm: 0.01,
        },
        ..Settings::new(64, 64, Pitch::square(1.0))
    };
    let bits = |threads: usize, seed: u64| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build();
        let settings = Settings { seed, ..settings };
        let image = pool.unwrap().install(|| {
            taken(
                |x, y| scene.height(x, y),
                |x, y| TIP.height(x, y),
                &settings,
            )
        });
        let bits = image.scan.heights().mapv(f32::to_bits);
        bits.into_raw_vec_and_offset().0
    };
    let one = bits(1, 7);
    assert_eq!(one, bits(3, 7));
    assert_ne!(one, bits(1, 8));
}

#[test]
fn distortions_have_the_size_they_were_asked_for() {
    let flat = |distortion| {
        let settings = Settings {
            support_nm: 4.0,
            distortion,
            ..Settings::new(200, 100, Pitch::square(2.0))
        };
        taken(|_, _| 0.0, |x, y| TIP.height(x, y), &settings).scan
    };
    let deviation = |values: &[f64]| {
        let mean = values.iter().sum::<f64>() / values.len() as f64;
        (values.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / values.len() as f64).sqrt()
    };
    let all = |map: &HeightMap| {
        map.heights()
            .iter()
            .map(|&z| f64::from(z))
            .collect::<Vec<_>>()
    };

    let noisy = flat(Distortion {
        noise_nm: 0.3,
        ..Distortion::default()
    });
    // 20000 values: the standard error of the deviation is 0.5 %.
    assert!((deviation(&all(&noisy)) / 0.3 - 1.0).abs() < 0.02);

    let tilted = flat(Distortion {
        tilt: [0.01, -0.02],
        ..Distortion::default()
    });
    let z = tilted.heights();
    assert!((z[[0, 99]] - z[[0, 0]] - 0.01 * 198.0).abs() < 1e-4);
    assert!((z[[199, 0]] - z[[0, 0]] + 0.02 * 398.0).abs() < 1e-4);

    let drifting = flat(Distortion {
        drift_nm: 4.0,
        ..Distortion::default()
    });
    let (low, high) = drifting.range().unwrap();
    assert!((high - low - 4.0).abs() < 1e-5);
    // Smooth: no row moves by more than a few percent of the whole.
    let rows: Vec<f32> = drifting.heights().column(0).to_vec();
    assert!(rows.windows(2).all(|w| (w[1] - w[0]).abs() < 0.25));
    assert!(
        drifting
            .heights()
            .rows()
            .into_iter()
            .all(|r| r.iter().all(|&z| z == r[0]))
    );

    let jumpy = flat(Distortion {
        row_jitter_nm: 1.0,
        quantum_nm: 0.5,
        ..Distortion::default()
    });
    assert!(jumpy.heights().iter().all(|z| (z * 2.0).fract() == 0.0));
    let column: Vec<f64> = jumpy
        .heights()
        .column(3)
        .iter()
        .map(|&z| f64::from(z))
        .collect();
    assert!(
        (deviation(&column) - 1.0).abs() < 0.2,
        "{}",
        deviation(&column)
    );
}

#[test]
fn correlated_fields_have_their_deviation_and_correlation() {
    let edge = CorrelatedLine::new(2.0, 10.0, 0.0, 40_000.0, 1).unwrap();
    let values: Vec<f64> = (0..40_000).map(|i| edge.at(f64::from(i))).collect();
    let product = |lag: usize| {
        let pairs = values.iter().zip(&values[lag..]);
        pairs.map(|(a, b)| a * b).sum::<f64>() / (values.len() - lag) as f64
    };
    // About 2000 independent stretches: 3 %.
    assert!((product(0) - 4.0).abs() < 0.4, "{}", product(0));
    let expected = (-1.0f64).exp();
    assert!((product(10) / product(0) - expected).abs() < 0.06);
    assert!((product(30) / product(0)).abs() < 0.08);

    let map = CorrelatedMap::new(2.0, 5.0, [0.0; 2], [400.0; 2], 1).unwrap();
    let sum = |dx: f64, dy: f64| {
        let at = |i: i32| (f64::from(i % 390), f64::from(i / 390));
        let one = |i: i32| map.at(at(i).0, at(i).1) * map.at(at(i).0 + dx, at(i).1 + dy);
        (0..390 * 390).map(one).sum::<f64>() / (390.0 * 390.0)
    };
    assert!((sum(0.0, 0.0) - 4.0).abs() < 0.3, "{}", sum(0.0, 0.0));
    assert!((sum(5.0, 0.0) / sum(0.0, 0.0) - expected).abs() < 0.05);
    assert!((sum(0.0, 5.0) / sum(0.0, 0.0) - expected).abs() < 0.05);
}

#[test]
fn walls_slope_and_round_as_told() {
    let lines = Lines::new(0.0, 100.0, 3, 40.0, 30.0).walls(80.0, 0.0);
    let tan = 80f64.to_radians().tan();
    for (line, fraction) in [(0, 0.1), (1, 0.5), (2, 0.9)] {
        let width = 40.0 + 2.0 * (0.5 - fraction) * 30.0 / tan;
        assert!((lines.width_at(line, 0.0, fraction) - width).abs() < 1e-12);
        let edge = lines.centre(line) + width / 2.0;
        assert!((lines.height(edge, 3.0) - fraction * 30.0).abs() < 1e-9);
    }
    // A rounded corner: on the top 45 degrees round a vertical corner the arc is r (1 - 1/sqrt 2)
    // below the top at r (1 - 1/sqrt 2) inside the wall.
    let round = Lines::new(0.0, 100.0, 1, 40.0, 30.0).walls(90.0, 4.0);
    let back = 4.0 * (1.0 - 0.5f64.sqrt());
    assert!((round.height(20.0 - back, 0.0) - (30.0 - back)).abs() < 1e-9);
    assert_eq!(round.height(20.001, 0.0), 0.0);
    assert_eq!(round.height(15.9, 0.0), 30.0);
    // On a sloped wall the arc meets wall and top without a jump.
    let round = Lines::new(0.0, 100.0, 1, 40.0, 30.0).walls(70.0, 5.0);
    let heights: Vec<f64> = (0..4000)
        .map(|i| round.height(f64::from(i) * 0.01, 0.0))
        .collect();
    let steepest = 0.01 * 70f64.to_radians().tan() + 1e-9;
    assert!(
        heights
            .windows(2)
            .all(|w| w[0] >= w[1] && w[0] - w[1] <= steepest)
    );
}

#[test]
fn rough_edges_move_each_edge_by_itself() {
    let roughness = EdgeRoughness {
        sigma_nm: 1.5,
        length_nm: 12.0,
        seed: 4,
    };
    let lines = Lines::new(50.0, 80.0, 2, 40.0, 30.0)
        .rough(roughness, 0.0, 500.0)
        .unwrap();
    let y = 123.4;
    let [left, right] = lines.displacement(0, y);
    assert!(left != right && lines.displacement(1, y) != [left, right]);
    assert_eq!(lines.height(30.0 - left + 1e-6, y), 30.0);
    assert_eq!(lines.height(30.0 - left - 1e-6, y), 0.0);
    assert_eq!(lines.height(70.0 + right - 1e-6, y), 30.0);
    assert_eq!(lines.height(70.0 + right + 1e-6, y), 0.0);
    assert!((lines.width_at(0, y, 0.2) - 40.0 - left - right).abs() < 1e-12);
}

#[test]
fn scattered_features_keep_their_distance() {
    let radii: Vec<f64> = (0..60).map(|i| 2.0 + f64::from(i % 5)).collect();
    let placed = scatter(&radii, 1.5, [10.0, 20.0], [210.0, 180.0], 9).unwrap();
    for (i, (p, r)) in placed.iter().zip(&radii).enumerate() {
        assert!(p[0] - r >= 10.0 && p[0] + r <= 210.0 && p[1] - r >= 20.0 && p[1] + r <= 180.0);
        for (q, s) in placed[..i].iter().zip(&radii) {
            assert!((p[0] - q[0]).hypot(p[1] - q[1]) >= r + s + 1.5);
        }
    }
    let crowded = scatter(&[30.0; 5], 0.0, [0.0; 2], [70.0; 2], 1);
    assert_eq!(crowded.unwrap_err().kind(), ErrorKind::Data);
}

#[test]
fn a_scene_is_the_highest_of_its_features_on_its_base() {
    let scene = Scene::new()
        .on(|x: f64, _: f64| 0.1 * x)
        .with(Block {
            from: [0.0, 0.0],
            to: [10.0, 10.0],
            height_nm: 5.0,
        })
        .with(Block {
            from: [5.0, 0.0],
            to: [20.0, 10.0],
            height_nm: 8.0,
        });
    assert_eq!(scene.height(2.0, 5.0), 5.2);
    assert_eq!(scene.height(7.0, 5.0), 8.7);
    assert_eq!(scene.height(30.0, 5.0), 3.0);
}

#[test]
fn small_and_unusable_settings_answer() {
    let tip = |x: f64, y: f64| TIP.height(x, y);
    let one = taken(|_, _| 2.0, tip, &Settings::new(1, 1, Pitch::square(1.0)));
    assert_eq!(one.scan.heights()[[0, 0]], 2.0);
    let void = taken(
        |_, _| f64::NAN,
        tip,
        &Settings::new(1, 2, Pitch::square(8.0)),
    );
    assert_eq!(void.scan.void_count(), 2);

    let progress = Progress::new();
    let fails = |settings: Settings| {
        scan(|_, _| 0.0, tip, &settings, &progress)
            .unwrap_err()
            .kind()
    };
    let good = Settings::new(2, 2, Pitch::square(1.0));
    assert_eq!(
        fails(Settings::new(0, 2, Pitch::square(1.0))),
        ErrorKind::Data
    );
    assert_eq!(
        fails(Settings {
            oversampling: 0,
            ..good.clone()
        }),
        ErrorKind::Setting
    );
    assert_eq!(
        fails(Settings {
            support_nm: -1.0,
            ..good.clone()
        }),
        ErrorKind::Setting
    );
    assert_eq!(
        fails(Settings {
            support_nm: 1e9,
            ..good.clone()
        }),
        ErrorKind::Setting
    );
    let mut noisy = good.clone();
    noisy.distortion.noise_nm = f64::NAN;
    assert_eq!(fails(noisy), ErrorKind::Setting);
    progress.cancel();
    assert_eq!(fails(good), ErrorKind::Cancelled);
}
