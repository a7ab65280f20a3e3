use super::*;
use crate::heightmap::Pitch;
use crate::tip::model::Model;
use crate::virtual_scan::{self, BumpShape, Bumps, Distortion, Feature, Lines};

/// A scan whose truth is finer than the pixel.
fn scan(
    surface: impl Fn(f64, f64) -> f64 + Sync,
    tip: impl Fn(f64, f64) -> f64 + Sync,
    noise_nm: f64,
    seed: u64,
) -> HeightMap {
    let mut settings = virtual_scan::Settings::new(144, 144, Pitch::square(1.0));
    settings.support_nm = 64.0;
    settings.distortion = Distortion {
        noise_nm,
        ..Distortion::default()
    };
    settings.seed = seed;
    virtual_scan::scan(surface, tip, &settings, &Progress::new())
        .unwrap()
        .scan
}

fn sphere_cone(radius: f64) -> impl Fn(f64, f64) -> f64 + Sync {
    move |x, y| {
        Model::SphereCone {
            radius,
            half_angle: 15.0,
        }
        .height(x, y)
    }
}

fn spikes(count: usize, height: f64, seed: u64) -> impl Fn(f64, f64) -> f64 + Sync {
    let shape = BumpShape::Spike {
        radius: 1.5,
        half_angle: 8.0,
        height,
    };
    let radii = vec![shape.foot(); count];
    let places = virtual_scan::scatter(&radii, 14.0, [18.0; 2], [126.0; 2], seed).unwrap();
    let bumps = Bumps::all(shape, &places).unwrap();
    move |x, y| bumps.height(x, y)
}

fn auto(scan: &HeightMap) -> Estimate {
    estimate(scan, None, &Settings::default(), &Progress::new()).unwrap()
}

fn told(e: &Estimate, what: &str) -> bool {
    e.diagnosis.iter().any(|d| d.finding.contains(what))
}

/// What is identified is the tip's radius plus the feature's (methods 3.2).
#[test]
fn spikes_identify_tip_and_feature_radius_with_and_without_noise() {
    for (noise, within) in [(0.0, 0.02), (0.3, 0.08)] {
        let e = auto(&scan(spikes(9, 40.0, 5), sphere_cone(8.0), noise, 5));
        assert!(e.apex_identified, "{:?}", e.diagnosis);
        let r = e.read_out.apex_radius.unwrap();
        assert!((r.value / 9.5 - 1.0).abs() < within, "{r:?} at {noise}");
        assert!(e.exercised_depth_nm.unwrap() > 20.0);
        let angle = e.read_out.half_angle.unwrap().value;
        assert!((angle - 15.0).abs() < 1.0, "{angle}");
        // The band encloses the identified tip on the cap.
        let truth = sphere_cone(9.5);
        let band = e.band.unwrap();
        let c = e.tip.shape().nrows() / 2;
        for k in c - 6..c + 7 {
            let p = -truth(k as f64 - c as f64, 0.0) as f32;
            assert!(band.sharper.shape()[[c, k]] <= p + 0.02);
            assert!(band.blunter.shape()[[c, k]] >= p - 0.02);
        }
    }
}

#[test]
fn a_stated_feature_radius_is_taken_out() {
    let map = scan(spikes(9, 40.0, 6), sphere_cone(8.0), 0.05, 6);
    let settings = Settings {
        feature_radius_nm: Some(1.5),
        ..Settings::default()
    };
    let e = estimate(&map, None, &settings, &Progress::new()).unwrap();
    let r = e.read_out.apex_radius.unwrap().value;
    assert!((r - 8.0).abs() < 0.5, "{r}");
    // Out of the band too: it encloses the tip that is left, and is open where nothing was seen.
    let band = e.band.unwrap();
    let sides = band.sharper.shape().into_owned();
    for ((at, p), sharp) in e.tip.shape().indexed_iter().zip(&sides) {
        assert!(*sharp <= *p && *p <= band.blunter.shape()[at], "{at:?}");
    }
    assert_eq!(sides[[0, 0]], f32::NEG_INFINITY);
}

#[test]
fn lines_flats_noise_and_few_features_are_refused() {
    let lines = Lines::new(20.3, 50.0, 3, 26.0, 40.0);
    let e = auto(&scan(
        move |x, y| lines.height(x, y),
        sphere_cone(8.0),
        0.2,
        1,
    ));
    assert!(!e.apex_identified && e.read_out.apex_radius.is_none());
    assert!(
        told(&e, "No sharp isolated feature") || told(&e, "flat"),
        "{:?}",
        e.diagnosis
    );

    let e = auto(&scan(|_, _| 0.0, sphere_cone(8.0), 0.3, 2));
    assert!(!e.apex_identified && e.exercised_depth_nm.is_none());
    assert!(told(&e, "not determined at any depth"), "{:?}", e.diagnosis);

    let e = auto(&scan(spikes(3, 40.0, 4), sphere_cone(8.0), 0.1, 4));
    assert!(!e.apex_identified);
    assert!(told(&e, "distinct sharp features"), "{:?}", e.diagnosis);

    // Nothing stands out of noise of 3 nm from features of 4 nm.
    let e = auto(&scan(spikes(9, 4.0, 4), sphere_cone(8.0), 3.0, 4));
    assert!(!e.apex_identified, "{:?}", e.diagnosis);
}

#[test]
fn a_sharp_tip_on_coarse_pixels_and_high_noise_are_told() {
    let e = auto(&scan(spikes(9, 40.0, 7), sphere_cone(0.3), 0.05, 7));
    assert!(!e.apex_identified);
    assert!(told(&e, "sharper than the pixels"), "{:?}", e.diagnosis);
    let e = auto(&scan(spikes(9, 40.0, 7), sphere_cone(8.0), 1.0, 7));
    assert!(told(&e, "noise"), "{:?}", e.diagnosis);
}

#[test]
fn a_window_smaller_than_the_features_need_is_told() {
    let settings = Settings {
        support_nm: Some(15.0),
        ..Settings::default()
    };
    let map = scan(spikes(9, 40.0, 8), sphere_cone(8.0), 0.1, 8);
    let e = estimate(&map, None, &settings, &Progress::new()).unwrap();
    assert_eq!(e.tip.shape().dim(), (15, 15));
    assert!(
        told(&e, "smaller than the features' height needs"),
        "{:?}",
        e.diagnosis
    );
}

#[test]
fn a_double_tip_is_recognised() {
    let one = Model::SphereCone {
        radius: 8.0,
        half_angle: 15.0,
    };
    let double = move |x: f64, y: f64| one.height(x, y).min(one.height(x - 14.0, y - 6.0) + 5.0);
    let e = auto(&scan(spikes(8, 40.0, 9), double, 0.1, 9));
    assert!(told(&e, "double tip"), "{:?}", e.diagnosis);
    let c = e.tip.shape().nrows() / 2;
    let (r, k) = e.further_apices[0];
    assert!(r.abs_diff(c + 6) <= 1 && k.abs_diff(c + 14) <= 1, "{r} {k}");
}

#[test]
fn a_worn_tip_has_no_radius() {
    let one = Model::SphereCone {
        radius: 10.0,
        half_angle: 15.0,
    };
    let worn = move |x: f64, y: f64| (one.height(x, y) - 1.5).max(0.0);
    let e = auto(&scan(spikes(8, 40.0, 3), worn, 0.1, 3));
    assert!(!e.apex_identified);
    assert!(told(&e, "not round"), "{:?}", e.diagnosis);
    // Flat on top all the same.
    let c = e.tip.shape().nrows() / 2;
    assert!((-0.3..=0.0).contains(&e.tip.shape()[[c, c + 3]]));
}

#[test]
fn textbook_runs_and_bounds_a_noise_free_tip_from_outside() {
    let map = scan(spikes(9, 40.0, 2), sphere_cone(8.0), 0.0, 2);
    let settings = Settings {
        method: Method::Textbook,
        ..Settings::default()
    };
    let e = estimate(&map, Some(0.0), &settings, &Progress::new()).unwrap();
    assert!(e.band.is_none());
    let truth = sphere_cone(8.0);
    let c = e.tip.shape().nrows() / 2;
    for k in c - 8..c + 9 {
        let p = -truth(k as f64 - c as f64, 0.0) as f32;
        assert!(e.tip.shape()[[c, k]] > p - 0.3, "{k}");
    }
}

#[test]
fn maps_without_a_tip_answer_quickly_and_plainly() {
    let progress = Progress::new();
    let none = Settings::default();
    for (rows, columns, z) in [
        (40, 40, f32::NAN),
        (1, 200, 1.0),
        (200, 1, 1.0),
        (9, 9, 0.0),
    ] {
        let map = HeightMap::new(Array2::from_elem((rows, columns), z), Pitch::square(1.0));
        let error = estimate(&map.unwrap(), None, &none, &progress).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Data);
    }
    // Terrain: pixels of 90 m.
    let terrain = HeightMap::from_fn(60, 60, Pitch::square(9e10), |x, y| {
        3e11 + 1e11 * (x / 4e11).sin() * (y / 7e11).cos()
    });
    let e = estimate(&terrain.unwrap(), None, &none, &progress).unwrap();
    assert!(!e.apex_identified && e.tip.shape().dim() == (1, 1));
    assert!(told(&e, "Pixel pitch"), "{:?}", e.diagnosis);
    // Constant, a spike of nonsense among voids, and huge offsets.
    for f in [
        |_: usize, _: usize| 7.0f32,
        |r, c| {
            if (r + c) % 3 == 0 {
                f32::NAN
            } else {
                (r * c) as f32
            }
        },
        |r, c| 1e20 * ((r * 7 + c * 13) % 11) as f32,
    ] {
        let map = HeightMap::new(
            Array2::from_shape_fn((40, 44), |(r, c)| f(r, c)),
            Pitch::square(1.0),
        );
        let e = estimate(&map.unwrap(), None, &none, &progress).unwrap();
        assert!(!e.apex_identified);
    }
}

#[test]
fn cancelled_and_bad_settings() {
    let map = scan(spikes(6, 30.0, 2), sphere_cone(8.0), 0.1, 2);
    let progress = Progress::new();
    progress.cancel();
    assert!(estimate(&map, None, &Settings::default(), &progress).is_err_and(|e| e.is_cancelled()));
    let bad = Settings {
        threshold_nm: Some(-1.0),
        ..Settings::default()
    };
    let error = estimate(&map, None, &bad, &Progress::new()).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
}

#[test]
fn one_thread_and_many_give_the_same_bits() {
    let map = scan(spikes(6, 30.0, 2), sphere_cone(8.0), 0.2, 2);
    let run = |threads| {
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(threads)
            .build()
            .unwrap();
        pool.install(|| auto(&map))
    };
    let (a, b) = (run(1), run(3));
    let bits = |e: &Estimate| {
        e.tip
            .shape()
            .iter()
            .map(|p| p.to_bits())
            .collect::<Vec<_>>()
    };
    assert_eq!(bits(&a), bits(&b));
    assert_eq!(a.height_u_nm.to_bits(), b.height_u_nm.to_bits());
}
