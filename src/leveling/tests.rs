//! Laws and closed forms of levelling, on virtual scans whose truth is known. No published values
//! exist for these; the statements are checked against the construction of the scan itself.

use super::virtual_scan::{Gauss, with_voids};
use super::*;
use crate::heightmap::Pitch;
use proptest::prelude::*;

fn map(rows: usize, columns: usize, f: impl FnMut(f64, f64) -> f64) -> HeightMap {
    HeightMap::from_fn(rows, columns, Pitch::square(1.0), f).unwrap()
}

fn level_by(map: &HeightMap, method: Method) -> Leveled {
    let settings = Settings {
        method,
        regions: Vec::new(),
    };
    level(map, &settings, &Progress::new()).unwrap()
}

/// Mean of the heights where `truth(x, y)` says so.
fn mean_where(map: &HeightMap, truth: impl Fn(f64, f64) -> bool) -> f64 {
    let (mut sum, mut n) = (0.0, 0);
    for ((r, c), z) in map.heights().indexed_iter() {
        if !z.is_nan() && truth(c as f64 + 0.5, r as f64 + 0.5) {
            sum += f64::from(*z);
            n += 1;
        }
    }
    sum / f64::from(n)
}

fn largest_difference(a: &HeightMap, b: &HeightMap) -> f32 {
    a.heights()
        .iter()
        .zip(b.heights())
        .filter(|(a, b)| !a.is_nan() || !b.is_nan())
        .fold(0.0, |m, (a, b)| {
            let d = (a - b).abs();
            if d.is_nan() { f32::INFINITY } else { m.max(d) }
        })
}

/// Standard error of the difference of the slope-free means of `n` pixels each at noise `s`; the
/// plane's own error over the map is of the same size, so twice that is allowed for.
fn allowance(s: f64, n: f64) -> f64 {
    5.0 * 2.0 * s * (2.0 / n).sqrt()
}

const N: usize = 128;
const NOISE: f64 = 0.3;

fn grating(period: f64, height: f64) -> impl Fn(f64, f64) -> f64 {
    move |x, _| {
        if (x / period).fract() < 0.5 {
            0.0
        } else {
            height
        }
    }
}

/// Surfaces with a flat: truth, and what is base (0) and top.
type Truth = (&'static str, f64, Box<dyn Fn(f64, f64) -> f64>);

fn surfaces() -> Vec<Truth> {
    vec![
        ("half grating", 3.0, Box::new(grating(32.0, 3.0))),
        ("fine half grating", 20.0, Box::new(grating(8.0, 20.0))),
        ("tall half grating", 200.0, Box::new(grating(40.0, 200.0))),
        (
            "one step",
            3.0,
            Box::new(|x, _| if x < 70.0 { 0.0 } else { 3.0 }),
        ),
        (
            "one step across",
            10.0,
            Box::new(|_, y| if y < 75.0 { 0.0 } else { 10.0 }),
        ),
        (
            "pillars",
            50.0,
            Box::new(|x, y| {
                if x % 20.0 < 9.0 && y % 20.0 < 9.0 {
                    50.0
                } else {
                    0.0
                }
            }),
        ),
        (
            "one corner",
            8.0,
            Box::new(|x, y| if x > 80.0 && y > 60.0 { 8.0 } else { 0.0 }),
        ),
    ]
}

#[test]
fn a_tilted_step_keeps_its_height_and_the_base_is_at_zero() {
    for (name, height, truth) in surfaces() {
        let mut bias = 0.0;
        let seeds = 12;
        for seed in 0..seeds {
            let mut gauss = Gauss::new(seed);
            // Up to about 0.2 nm per pixel: 25 nm across the scan, more than most steps here.
            let (a, b) = (gauss.next(0.1), gauss.next(0.1));
            let scan = map(N, N, |x, y| {
                truth(x, y) + a * x + b * y + 500.0 + gauss.next(NOISE)
            });
            let leveled = level_by(&scan, Method::Auto);
            let low = mean_where(&leveled.map, |x, y| truth(x, y) == 0.0);
            let high = mean_where(&leveled.map, |x, y| truth(x, y) != 0.0);
            let allowed = allowance(NOISE, (N * N) as f64 / 8.0);
            assert!(
                (high - low - height).abs() < allowed,
                "{name}, seed {seed}: step {} not {height}; {:?}",
                high - low,
                leveled.warnings
            );
            assert!(low.abs() < allowed, "{name}, seed {seed}: base at {low}");
            assert!((leveled.slope[0] - a).abs() < 1e-3 && (leveled.slope[1] - b).abs() < 1e-3);
            assert!(
                leveled.warnings.is_empty(),
                "{name}: {:?}",
                leveled.warnings
            );
            // Differences across edges push the noise figure up; they must not rule it.
            assert!(
                (0.9..2.5).contains(&(leveled.noise_nm.unwrap() / NOISE)),
                "{name}: {:?}",
                leveled.noise_nm
            );
            bias += (high - low - height) / seeds as f64;
        }
        eprintln!("{name}: mean step error {bias:.5} nm");
        assert!(bias.abs() < allowance(NOISE, (N * N) as f64 / 8.0) / 2.0);
    }
}

/// Processor time of all threads so far where the system tells it (Linux, ticks of 10 ms), s.
fn processor_seconds() -> f64 {
    let stat = std::fs::read_to_string("/proc/self/stat").unwrap_or_default();
    let field = |k: usize| stat.split(' ').nth(k).and_then(|t| t.parse::<f64>().ok());
    0.01 * (field(13).unwrap_or(0.0) + field(14).unwrap_or(0.0))
}

/// The figures that the documentation tells; run with `--ignored --nocapture`.
#[test]
#[ignore = "prints figures"]
fn figures() {
    for noise in [0.3, 0.5, 0.6] {
        for (name, height, truth) in surfaces() {
            let errors: Vec<f64> = (0..100)
                .map(|seed| {
                    let mut gauss = Gauss::new(5000 + seed);
                    let (a, b) = (gauss.next(0.1), gauss.next(0.1));
                    let scan = map(N, N, |x, y| {
                        truth(x, y) + a * x + b * y + 500.0 + gauss.next(noise)
                    });
                    let leveled = level_by(&scan, Method::Auto);
                    mean_where(&leveled.map, |x, y| truth(x, y) != 0.0)
                        - mean_where(&leveled.map, |x, y| truth(x, y) == 0.0)
                        - height
                })
                .collect();
            let mean = errors.iter().sum::<f64>() / 100.0;
            let sd = (errors.iter().map(|e| (e - mean).powi(2)).sum::<f64>() / 99.0).sqrt();
            println!("noise {noise}, {name} {height} nm: bias {mean:.5}, sd {sd:.5} nm");
        }
    }
    for n in [1024, 4096] {
        let mut gauss = Gauss::new(1);
        let truth = grating(64.0, 30.0);
        let scan = map(n, n, |x, y| truth(x, y) + 0.1 * x + gauss.next(0.3));
        let offsets: Vec<f64> = (0..n).map(|_| gauss.next(0.5)).collect();
        let rows = map(n, n, |x, y| {
            truth(x, y) + 0.1 * x + offsets[y as usize] + gauss.next(0.3)
        });
        for (what, scan, method) in [
            ("auto", &scan, Method::Auto),
            ("auto, row noise", &rows, Method::Auto),
            ("plane", &scan, Method::Plane),
            ("order 5", &scan, Method::Polynomial { order: 5 }),
        ] {
            let (start, busy) = (std::time::Instant::now(), processor_seconds());
            let leveled = level_by(scan, method);
            println!(
                "{n}: {what} {:?}, processor {:.2} s, {:?}",
                start.elapsed(),
                processor_seconds() - busy,
                leveled.map.provenance().steps
            );
        }
        let start = std::time::Instant::now();
        println!("{n}: noise {:?} {:?}", noise(&scan), start.elapsed());
    }
}

#[test]
fn voids_change_nothing_of_that() {
    for (name, height, truth) in surfaces() {
        let mut gauss = Gauss::new(77);
        let scan = map(N, N, |x, y| {
            truth(x, y) + 0.1 * x - 0.05 * y + gauss.next(NOISE)
        });
        let leveled = level_by(&with_voids(&scan, 0.2, 3), Method::Auto);
        let low = mean_where(&leveled.map, |x, y| truth(x, y) == 0.0);
        let high = mean_where(&leveled.map, |x, y| truth(x, y) != 0.0);
        assert!((high - low - height).abs() < 0.1, "{name}: {}", high - low);
        assert!(leveled.map.void_count() > N * N / 6);
    }
}

/// Spikes imaged with a paraboloid of radius 10 nm: feet everywhere, base in less than half.
fn spikes(gauss: &mut Gauss, density: f64) -> impl Fn(f64, f64) -> f64 + use<> {
    let n = N as f64;
    let tops: Vec<(f64, f64, f64)> = (0..(n * n * density) as usize)
        .map(|_| {
            let h = 5.0 + 25.0 * gauss.uniform();
            (n * gauss.uniform(), n * gauss.uniform(), h)
        })
        .collect();
    move |x, y| {
        tops.iter().fold(0.0f64, |z, &(a, b, h)| {
            z.max(h - ((x - a).powi(2) + (y - b).powi(2)) / 20.0)
        })
    }
}

#[test]
fn dense_spikes_do_not_tilt_the_base() {
    for seed in 0..6 {
        let mut gauss = Gauss::new(100 + seed);
        let truth = spikes(&mut gauss, 1.0 / 600.0);
        let scan = map(N, N, |x, y| {
            truth(x, y) - 0.1 * x + 0.2 * y + gauss.next(NOISE)
        });
        let leveled = level_by(&scan, Method::Auto);
        let shares = [
            mean_where(&leveled.map, |x, y| truth(x, y) == 0.0 && x < 64.0),
            mean_where(&leveled.map, |x, y| truth(x, y) == 0.0 && x >= 64.0),
            mean_where(&leveled.map, |x, y| truth(x, y) == 0.0 && y < 64.0),
            mean_where(&leveled.map, |x, y| truth(x, y) == 0.0 && y >= 64.0),
        ];
        let free = (0..N * N)
            .filter(|i| truth((i % N) as f64 + 0.5, (i / N) as f64 + 0.5) == 0.0)
            .count();
        eprintln!(
            "spikes {seed}: free {} {shares:?} {:?}",
            free as f64 / (N * N) as f64,
            leveled.warnings
        );
        // Feet within the noise band lift the plane a little; a third of the noise is allowed.
        assert!(shares.iter().all(|s| s.abs() < NOISE / 3.0), "{shares:?}");
    }
}

/// What row medians do beside tall features and base-plane alignment must not do: streaks.
#[test]
fn row_alignment_leaves_no_streaks_beside_tall_features() {
    for method in [Method::Auto, Method::Rows] {
        for seed in 0..4 {
            let mut gauss = Gauss::new(200 + seed);
            let block = |x: f64, y: f64| (20.0..110.0).contains(&x) && (40.0..90.0).contains(&y);
            let offsets: Vec<f64> = (0..N).map(|_| gauss.next(1.0)).collect();
            let scan = map(N, N, |x, y| {
                let top = if block(x, y) { 80.0 } else { 0.0 };
                top + 0.05 * x + 0.03 * y + offsets[y as usize] + gauss.next(0.1)
            });
            let leveled = level_by(&scan, method);
            let rows: Vec<f64> = (0..N)
                .map(|r| mean_where(&leveled.map, |x, y| !block(x, y) && y as usize == r))
                .collect();
            let beside = rows[42..88].iter().sum::<f64>() / 46.0;
            let worst = rows.iter().fold(0.0f64, |m, r| m.max(r.abs()));
            eprintln!(
                "{method:?} {seed}: beside {beside:.4} worst {worst:.4} {:?}",
                leveled.warnings
            );
            // 38 pixels beside the block at 0.1 nm: 0.016 nm; 5 of that.
            assert!(worst < 0.1, "{method:?}: a row stands at {worst}");
            assert!(beside.abs() < 0.03);
            let top = mean_where(&leveled.map, block);
            assert!((top - 80.0).abs() < 0.03, "{top}");
        }
    }
}

/// Without row offsets the rows are left alone: nothing may be put into the scan.
#[test]
fn rows_are_not_aligned_where_nothing_stands_out() {
    let mut aligned = 0;
    for seed in 0..20 {
        let mut gauss = Gauss::new(300 + seed);
        let truth = spikes(&mut gauss, 1.0 / 1000.0);
        let scan = map(N, N, |x, y| truth(x, y) + gauss.next(NOISE));
        let leveled = level_by(&scan, Method::Auto);
        aligned += usize::from(leveled.map.provenance().steps[0].contains("aligned"));
        assert!(leveled.row_jumps.is_empty(), "{:?}", leveled.row_jumps);
    }
    assert_eq!(aligned, 0);
}

#[test]
fn a_row_that_jumps_is_named_and_put_back() {
    let mut gauss = Gauss::new(400);
    let truth = grating(32.0, 20.0);
    let scan = map(N, N, |x, y| {
        truth(x, y) + 0.02 * y + gauss.next(0.1) + if y as usize == 50 { 7.0 } else { 0.0 }
    });
    let leveled = level_by(&scan, Method::Auto);
    assert_eq!(leveled.row_jumps.len(), 1, "{:?}", leveled.row_jumps);
    assert_eq!(leveled.row_jumps[0].row, 50);
    assert!((leveled.row_jumps[0].jump_nm - 7.0).abs() < 0.2);
    let row = mean_where(&leveled.map, |x, y| truth(x, y) == 0.0 && y as usize == 50);
    assert!(row.abs() < 0.15, "{row}");
}

/// A whole half shifted: told, not touched, by `Auto` (it may be a step); removed by `Rows`.
#[test]
fn a_lasting_jump_is_told_and_only_rows_removes_it() {
    let mut gauss = Gauss::new(401);
    let truth = grating(32.0, 20.0);
    let scan = map(N, N, |x, y| {
        truth(x, y) + gauss.next(0.1) + if y > 80.0 { 7.0 } else { 0.0 }
    });
    let after = |l: &Leveled| mean_where(&l.map, |x, y| truth(x, y) == 0.0 && y > 80.0);
    let auto = level_by(&scan, Method::Auto);
    assert!((after(&auto) - 7.0).abs() < 0.1, "{}", after(&auto));
    assert!(
        auto.warnings.iter().any(|w| w.contains("row 80")),
        "{:?}",
        auto.warnings
    );
    let rows = level_by(&scan, Method::Rows);
    assert!(after(&rows).abs() < 0.1, "{}", after(&rows));
}

#[test]
fn slow_drift_is_measured_and_removed() {
    let mut gauss = Gauss::new(500);
    let truth = grating(32.0, 40.0);
    // Zero mean and no slope over the scan: all of it is beyond the plane.
    let drift = |y: f64| 2.0 * (2.0 * std::f64::consts::PI * y / N as f64).cos();
    let scan = map(N, N, |x, y| truth(x, y) + drift(y) + gauss.next(0.2));
    let leveled = level_by(&scan, Method::Auto);
    assert!(
        (leveled.drift_nm.unwrap() - 4.0).abs() < 0.3,
        "{:?}",
        leveled.drift_nm
    );
    let step = mean_where(&leveled.map, |x, y| truth(x, y) != 0.0)
        - mean_where(&leveled.map, |x, y| truth(x, y) == 0.0);
    assert!((step - 40.0).abs() < 0.05, "{step}");
    for r in 0..N {
        let row = mean_where(&leveled.map, |x, y| truth(x, y) == 0.0 && y as usize == r);
        assert!(row.abs() < 0.15, "row {r}: {row}");
    }
}

#[test]
fn rows_without_base_are_named() {
    let mut gauss = Gauss::new(501);
    let offsets: Vec<f64> = (0..N).map(|_| gauss.next(1.0)).collect();
    let bar = |y: f64| (60.0..70.0).contains(&y);
    let scan = map(N, N, |_, y| {
        offsets[y as usize] + gauss.next(0.1) + if bar(y) { 30.0 } else { 0.0 }
    });
    let leveled = level_by(&scan, Method::Rows);
    assert!(
        leveled.warnings.iter().any(|w| w.contains("60-69")),
        "{:?}",
        leveled.warnings
    );
    let top = mean_where(&leveled.map, |_, y| bar(y));
    assert!((top - 30.0).abs() < 2.0, "{top}");
}

/// Of two nearly equal levels the lower is the base, whichever holds a few pixels more.
#[test]
fn of_nearly_equal_levels_the_lower_is_the_base() {
    for (edge, base_is_low) in [(70.0, true), (60.0, true), (40.0, false)] {
        let mut gauss = Gauss::new(600);
        let scan = map(N, N, |x, _| {
            0.1 * x + gauss.next(NOISE) + if x < edge { 0.0 } else { 9.0 }
        });
        let leveled = level_by(&scan, Method::Auto);
        let low = mean_where(&leveled.map, |x, _| x < edge);
        let expected = if base_is_low { 0.0 } else { -9.0 };
        assert!((low - expected).abs() < 0.1, "{edge}: {low}");
        assert_eq!(leveled.base[[10, 10]], base_is_low);
    }
}

#[test]
fn a_rough_surface_says_that_it_has_no_flat() {
    let mut gauss = Gauss::new(700);
    let waves: Vec<[f64; 4]> = (0..200)
        .map(|_| {
            [
                gauss.next(0.3),
                gauss.next(0.3),
                6.3 * gauss.uniform(),
                gauss.next(1.0),
            ]
        })
        .collect();
    let rough = |x: f64, y: f64| -> f64 {
        waves
            .iter()
            .map(|w| w[3] * (w[0] * x + w[1] * y + w[2]).sin())
            .sum()
    };
    let scan = map(N, N, |x, y| {
        rough(x, y) + 0.5 * x - 0.5 * y + gauss.next(0.1)
    });
    let auto = level_by(&scan, Method::Auto);
    assert!(
        auto.warnings.iter().any(|w| w.contains("no flat")),
        "{:?}",
        auto.warnings
    );
    let plane = level_by(&scan, Method::Plane);
    assert!(largest_difference(&auto.map, &plane.map) < 1e-3);
    assert!(auto.row_jumps.is_empty(), "{:?}", auto.row_jumps);
}

/// Pyramids side by side have no flat: no facet may be taken for the base.
#[test]
fn a_facet_is_not_a_base() {
    let scan = map(N, N, |x, _| 20.0 * (2.0 * (x / 16.0).fract() - 1.0).abs());
    let leveled = level_by(&scan, Method::Auto);
    assert!(leveled.slope[0].abs() < 0.1, "{:?}", leveled.slope);
}

fn polynomial_surface(order: usize, x: f64, y: f64) -> f64 {
    let (u, v) = (x / 50.0, y / 50.0);
    let mut z = 0.0;
    for i in 0..=order {
        for j in 0..=order - i {
            z += ((3 * i + 5 * j + 1) % 7) as f64 * u.powi(i as i32) * v.powi(j as i32);
        }
    }
    z
}

#[test]
fn polynomials_take_themselves_off_exactly() {
    for order in 1..=5u8 {
        let scan = map(60, 90, |x, y| polynomial_surface(order.into(), x, y));
        let leveled = level_by(&with_voids(&scan, 0.3, 1), Method::Polynomial { order });
        let (low, high) = leveled.map.range().unwrap();
        let rounding = 1e-6 * scan.range().unwrap().1;
        assert!(high.max(-low) < rounding, "order {order}: {low} {high}");
        assert!(leveled.map.provenance().steps[1].contains("least-squares"));
    }
    let settings = |order| Settings {
        method: Method::Polynomial { order },
        regions: vec![],
    };
    for order in [0, 6] {
        let error = level(&map(9, 9, |_, _| 0.0), &settings(order), &Progress::new());
        assert_eq!(error.unwrap_err().kind(), ErrorKind::Setting);
    }
}

#[test]
fn a_plane_on_chosen_regions_puts_them_to_zero() {
    let mut gauss = Gauss::new(800);
    let scan = HeightMap::from_fn(60, 90, Pitch { x: 2.0, y: 4.0 }, |x, y| {
        let step = if x > 80.0 { 25.0 } else { 0.0 };
        100.0 + step + 0.1 * x - 0.2 * y + gauss.next(0.01)
    })
    .unwrap();
    let regions = vec![
        Region {
            left: 100.0,
            top: 0.0,
            width: 20.0,
            height: 240.0,
        },
        Region {
            left: 150.0,
            top: 0.0,
            width: 20.0,
            height: 240.0,
        },
    ];
    for method in [Method::Plane, Method::Auto] {
        let settings = Settings {
            method,
            regions: regions.clone(),
        };
        let leveled = level(&scan, &settings, &Progress::new()).unwrap();
        assert!((leveled.slope[0] - 0.1).abs() < 1e-4 && (leveled.slope[1] + 0.2).abs() < 1e-4);
        assert!(mean_where(&leveled.map, |x, _| x > 45.0).abs() < 2e-3);
        assert!((mean_where(&leveled.map, |x, _| x < 35.0) + 25.0).abs() < 5e-3);
        assert!(!leveled.base[[0, 0]] && leveled.base[[3, 55]]);
    }
    let nowhere = Settings {
        method: Method::Plane,
        regions: vec![Region {
            left: 900.0,
            top: 0.0,
            width: 1.0,
            height: 1.0,
        }],
    };
    let error = level(&scan, &nowhere, &Progress::new()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
    let one_row = Settings {
        method: Method::Plane,
        regions: vec![Region {
            left: 0.0,
            top: 0.0,
            width: 180.0,
            height: 4.0,
        }],
    };
    let error = level(&scan, &one_row, &Progress::new()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Data);
}

#[test]
fn tiny_maps_profiles_and_void_maps() {
    let methods = [
        Method::None,
        Method::Auto,
        Method::Plane,
        Method::Polynomial { order: 5 },
        Method::Rows,
    ];
    for method in methods {
        for (rows, columns) in [(1, 1), (1, 2), (2, 1), (2, 2), (3, 1), (1, 400), (400, 1)] {
            let mut gauss = Gauss::new(900);
            let scan = map(rows, columns, |x, y| {
                let s = x.max(y);
                4.0 + 0.3 * s + gauss.next(0.01) + if s > 300.0 { 50.0 } else { 0.0 }
            });
            let leveled = level_by(&scan, method);
            if (method == Method::Auto || method == Method::Rows) && rows.max(columns) == 400 {
                let step = mean_where(&leveled.map, |x, y| x.max(y) > 300.0);
                assert!((step - 50.0).abs() < 0.05, "{rows} x {columns}: {step}");
            }
            if method == Method::None {
                assert_eq!(largest_difference(&scan, &leveled.map), 0.0);
            }
        }
        let settings = Settings {
            method,
            regions: vec![],
        };
        let void = map(4, 5, |_, _| f64::NAN);
        let error = level(&void, &settings, &Progress::new()).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Data);
        let cancelled = Progress::new();
        cancelled.cancel();
        let error = level(&map(9, 9, |x, _| x), &settings, &cancelled).unwrap_err();
        assert!(error.is_cancelled());
    }
}

/// Terrain in nanometres: steps of a metre on a kilometre must come out as f32 can hold them.
#[test]
fn huge_heights_keep_their_precision() {
    for unit in [1e6, 1e9, 1e11] {
        let mut gauss = Gauss::new(1000);
        let truth = grating(32.0, 1.0);
        let scan = map(N, N, |x, y| {
            unit * (truth(x, y) + 1e-2 * x + 3.0 + gauss.next(0.01))
        });
        let leveled = level_by(&scan, Method::Auto);
        let low = mean_where(&leveled.map, |x, y| truth(x, y) == 0.0) / unit;
        let high = mean_where(&leveled.map, |x, y| truth(x, y) != 0.0) / unit;
        assert!(
            low.abs() < 1e-3 && (high - low - 1.0).abs() < 1e-3,
            "{low} {high}"
        );
    }
}

#[test]
fn one_thread_and_many_give_the_same_bits() {
    let mut gauss = Gauss::new(1100);
    let truth = spikes(&mut gauss, 1.0 / 800.0);
    let offsets: Vec<f64> = (0..N).map(|_| gauss.next(0.5)).collect();
    let scan = map(N, N, |x, y| {
        truth(x, y) + 0.1 * x + offsets[y as usize] + gauss.next(0.1)
    });
    for method in [Method::Auto, Method::Rows, Method::Polynomial { order: 4 }] {
        let run = |threads| {
            rayon::ThreadPoolBuilder::new()
                .num_threads(threads)
                .build()
                .unwrap()
                .install(|| level_by(&scan, method))
        };
        let (one, four) = (run(1), run(4));
        assert_eq!(one.map.heights(), four.map.heights());
        assert_eq!(one.base, four.base);
        assert_eq!(one.slope, four.slope);
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 24, failure_persistence: None, ..Default::default() })]

    /// Laws: levelling a levelled map changes nothing, and neither does adding a plane before.
    #[test]
    fn levelling_twice_or_after_a_plane_changes_nothing(
        seed in 0..1000u64,
        which in 0..7usize,
        a in -0.2..0.2f64,
        b in -0.2..0.2f64,
        rows in 0.0..1.0f64,
        method in prop::sample::select(vec![
            Method::Auto, Method::Rows, Method::Plane, Method::Polynomial { order: 3 },
        ]),
    ) {
        let (name, _, truth) = surfaces().swap_remove(which);
        let scan = |on: f64| {
            let mut gauss = Gauss::new(seed);
            let offsets: Vec<f64> = (0..N)
                .map(|_| gauss.next(0.3) * f64::from(u8::from(rows > 0.7)))
                .collect();
            map(N, N, |x, y| {
                truth(x, y) + offsets[y as usize] + gauss.next(0.2) + on * (a * x + b * y + 40.0)
            })
        };
        let once = level_by(&scan(0.0), method);
        let twice = level_by(&once.map, method);
        let d = largest_difference(&once.map, &twice.map);
        prop_assert!(d < 2e-3, "{} {:?} twice: {} {:?}", name, method, d, once.map.provenance().steps);
        let tilted = level_by(&scan(1.0), method);
        let d = largest_difference(&once.map, &tilted.map);
        prop_assert!(d < 2e-3, "{} {:?} tilted: {} {:?}", name, method, d, once.map.provenance().steps);
    }
}
