//! The measurands on virtual scans with closed forms, and on maps that no nanometre tip made.

use super::*;
use crate::heightmap::Pitch;
use crate::morphology;
use crate::tip::model::{Model, sphere_cone_half_width};
use crate::virtual_scan::{self, Bump, BumpShape, Bumps, Feature, Lines, Settings, Step};
use ndarray::Array2;
use proptest::prelude::*;

const KINDS: [Kind; 12] = [
    Kind::StepHeight,
    Kind::LineWidth,
    Kind::Pitch,
    Kind::Particle,
    Kind::Texture,
    Kind::SideWallAngle,
    Kind::EdgeRoughness,
    Kind::WidthRoughness,
    Kind::HoleDepth,
    Kind::Distance,
    Kind::Angle,
    Kind::Lattice,
];

fn request(kind: Kind) -> Request {
    Request::new("a", kind)
}

/// A scan with its correction by the very tip that made it.
struct Made {
    scan: HeightMap,
    tip: Tip,
    surface: HeightMap,
    certainty: Array2<u8>,
    leaning: Array2<bool>,
}

impl Made {
    fn new(feature: &dyn Feature, model: Model, rows: usize, columns: usize, noise: f64) -> Self {
        let progress = Progress::new();
        let pitch = Pitch::square(1.0);
        let mut settings = Settings::new(rows, columns, pitch);
        settings.support_nm = 61.0;
        settings.distortion.noise_nm = noise;
        let scan = virtual_scan::scan(
            |x, y| feature.height(x, y),
            |dx, dy| model.height(dx, dy),
            &settings,
            &progress,
        )
        .unwrap()
        .scan;
        Self::of(scan, model.sample(61.0, pitch).unwrap(), noise)
    }

    fn of(scan: HeightMap, tip: Tip, noise: f64) -> Self {
        let progress = Progress::new();
        let heights = morphology::erode(scan.heights(), tip.shape(), &progress).unwrap();
        let surface = scan.with_heights(heights, "corrected");
        let certainty = morphology::certainty_map(
            surface.heights(),
            scan.heights(),
            tip.shape(),
            (3.0 * noise) as f32,
            [0, 0],
            &progress,
        )
        .unwrap();
        let leaning =
            morphology::edge_leaning(scan.heights(), surface.heights(), tip.shape(), &progress)
                .unwrap();
        Self {
            scan,
            tip,
            surface,
            certainty,
            leaning,
        }
    }

    fn corrected(&self) -> Corrected<'_> {
        Corrected::exact(
            &self.tip,
            &self.surface,
            self.certainty.view(),
            self.leaning.view(),
        )
    }

    fn measure<'a>(&'a self, corrected: Corrected<'a>, request: &Request) -> Vec<Dimension> {
        let input = Input {
            scan: &self.scan,
            noise_nm: None,
            calibration: Calibration {
                x: 0.001,
                y: 0.001,
                z: 0.001,
            },
            slope: [0.0; 2],
            corrected: Some(corrected),
        };
        measure(&input, request, &Progress::new()).unwrap()
    }
}

const SLIM: Model = Model::SphereCone {
    radius: 8.0,
    half_angle: 8.0,
};
const STOUT: Model = Model::SphereCone {
    radius: 10.0,
    half_angle: 15.0,
};

/// Image width of a vertical line `w + 2 w_t((1 - f) h)`, closed form computed independently.
#[test]
fn a_vertical_line_is_scanned_too_wide_and_bounded() {
    let lines = Lines::new(100.3, 400.0, 1, 100.0, 50.0);
    let made = Made::new(&lines, STOUT, 12, 200, 0.0);
    let mut request = request(Kind::LineWidth);
    request.at = vec![0.1, 0.5, 0.9];
    for line in made.measure(made.corrected(), &request) {
        let f = line.at.unwrap();
        let expected = 100.0 + 2.0 * sphere_cone_half_width(10.0, 15.0, (1.0 - f) * 50.0);
        let scanned = line.as_scanned.unwrap().value;
        assert!(
            (scanned - expected).abs() < 0.3,
            "{f}: {scanned} {expected}"
        );
        let c = line.corrected.unwrap();
        assert_eq!(line.status, Some(Status::Bounded), "{f}");
        assert!(
            c.low.unwrap() <= 100.0 && 100.0 <= c.high.unwrap(),
            "{f}: {c:?}"
        );
        assert!(line.flags.iter().any(|f| f.contains("was touched")));
        assert_eq!(line.marks.len(), 3);
        assert!(line.budget.iter().any(|b| b.source == "axis calibration"));
    }
}

#[test]
fn walls_flatter_than_the_flank_are_touched_and_right() {
    let lines = Lines::new(90.4, 400.0, 1, 61.7, 50.0).walls(78.0, 0.0);
    let made = Made::new(&lines, SLIM, 24, 180, 0.2);
    let line = made
        .measure(made.corrected(), &request(Kind::LineWidth))
        .remove(0);
    let c = line.corrected.unwrap();
    assert_eq!(line.quantity, "line width");
    assert_eq!(line.status, Some(Status::Touched), "{:?}", line.flags);
    assert!((c.value.unwrap() - 61.7).abs() < 0.3, "{c:?}");
    assert!(c.low.unwrap() <= 61.7 && 61.7 <= c.high.unwrap());
    assert!(line.as_scanned.unwrap().value > 70.0);
}

#[test]
fn a_trench_is_found_as_one_and_crossing_along_y_gives_the_same() {
    let lines = Lines::new(33.2, 155.0, 2, 100.0, 50.0).walls(78.0, 0.0);
    let made = Made::new(&lines, SLIM, 24, 220, 0.2);
    let across = made
        .measure(made.corrected(), &request(Kind::LineWidth))
        .remove(0);
    assert_eq!(across.quantity, "trench width");
    let value = across.corrected.unwrap().value.unwrap();
    assert!((value - 55.0).abs() < 0.3, "{value}");
    let turned = made
        .scan
        .heights()
        .reversed_axes()
        .as_standard_layout()
        .into_owned();
    let turned = HeightMap::new(turned, Pitch::square(1.0)).unwrap();
    let turned = Made::of(turned, made.tip.clone(), 0.2);
    let along = turned
        .measure(turned.corrected(), &request(Kind::LineWidth))
        .remove(0);
    let other = along.corrected.unwrap().value.unwrap();
    assert!((value - other).abs() < 0.05, "{value} {other}");
}

#[test]
fn a_tip_not_identified_gives_bounds_and_no_value() {
    let lines = Lines::new(90.4, 400.0, 1, 61.7, 50.0).walls(78.0, 0.0);
    let made = Made::new(&lines, SLIM, 16, 180, 0.1);
    for kind in [Kind::LineWidth, Kind::StepHeight] {
        let corrected = Corrected {
            identified: false,
            ..made.corrected()
        };
        let line = made.measure(corrected, &request(kind)).remove(0);
        let c = line.corrected.unwrap();
        assert_eq!(
            (c.value, c.u, line.status),
            (None, None, Some(Status::Bounded))
        );
        assert!(line.flags.iter().any(|f| f.contains("not identified")));
        let scanned = line.as_scanned.unwrap().value;
        assert!(c.low.unwrap() < scanned && scanned < c.high.unwrap());
    }
}

#[test]
fn an_unknown_feature_radius_widens_the_interval_outwards_only() {
    let lines = Lines::new(90.4, 400.0, 1, 61.7, 50.0).walls(78.0, 0.0);
    let made = Made::new(&lines, SLIM, 16, 180, 0.1);
    let plain = made
        .measure(made.corrected(), &request(Kind::LineWidth))
        .remove(0);
    let corrected = Corrected {
        contains_feature_radius: true,
        ..made.corrected()
    };
    let wide = made.measure(corrected, &request(Kind::LineWidth)).remove(0);
    let (a, b) = (plain.corrected.unwrap(), wide.corrected.unwrap());
    assert!((a.low.unwrap() - b.low.unwrap()).abs() < 1e-9);
    // 2 R (1 - sin 12) / cos 12 with R = 8.
    let more = b.high.unwrap() - a.high.unwrap();
    assert!((more - 12.96).abs() < 0.5, "{more}");
}

#[test]
fn a_tip_known_to_a_small_depth_only_bounds_the_width_by_the_scan() {
    let lines = Lines::new(90.4, 400.0, 1, 61.7, 50.0).walls(78.0, 0.0);
    let made = Made::new(&lines, SLIM, 16, 180, 0.1);
    let corrected = Corrected {
        exercised_depth_nm: Some(10.0),
        ..made.corrected()
    };
    let line = made.measure(corrected, &request(Kind::LineWidth)).remove(0);
    assert_eq!(line.status, Some(Status::Bounded));
    assert!(line.corrected.unwrap().high.unwrap() >= line.as_scanned.unwrap().value);
}

#[test]
fn steps_of_ridge_trench_and_edge() {
    let ridge = Lines::new(120.0, 500.0, 1, 60.0, 30.0).walls(85.0, 0.0);
    let made = Made::new(&ridge, SLIM, 24, 240, 0.2);
    let line = made
        .measure(made.corrected(), &request(Kind::StepHeight))
        .remove(0);
    assert!(line.quantity.contains("ridge"), "{line:?}");
    assert!((line.corrected.unwrap().value.unwrap() - 30.0).abs() < 0.05);
    assert_eq!(line.status, Some(Status::Touched));

    let step = Step {
        at_nm: 80.0,
        height_nm: 12.0,
        wall_angle_deg: 80.0,
    };
    let made = Made::new(&step, SLIM, 24, 160, 0.2);
    let line = made
        .measure(made.corrected(), &request(Kind::StepHeight))
        .remove(0);
    assert!(line.quantity.contains("edge"), "{line:?}");
    assert!((line.corrected.unwrap().value.unwrap() - 12.0).abs() < 0.1);
}

/// Vertical trench of width g: the tip gets `[g/2 - R(1-s)/cos a]/tan a` deep; R = 10, a = 15,
/// g = 22: 12.4155 (computed independently).
#[test]
fn a_trench_whose_floor_is_out_of_reach_has_a_lower_bound_only() {
    let lines = Lines::new(39.0, 122.0, 2, 100.0, 50.0);
    let made = Made::new(&lines, STOUT, 12, 200, 0.0);
    let line = made
        .measure(made.corrected(), &request(Kind::StepHeight))
        .remove(0);
    let c = line.corrected.unwrap();
    assert_eq!(
        (c.value, c.high, line.status),
        (None, None, Some(Status::Bounded))
    );
    let scanned = line.as_scanned.unwrap().value;
    assert!((10.5..12.5).contains(&scanned), "{scanned}");
    assert!(
        line.flags.iter().any(|f| f.contains("lower")),
        "{:?}",
        line.flags
    );
}

/// Height exactly 2 r; half-height width of the image `2 sqrt(r^2 + 2 R r)` (computed
/// independently).
#[test]
fn a_sphere_on_a_flat() {
    let shape = BumpShape::Sphere { radius: 10.0 };
    let bumps = Bumps::new(vec![Bump {
        at: [60.2, 59.6],
        shape,
    }])
    .unwrap();
    let made = Made::new(&bumps, STOUT, 120, 120, 0.1);
    let lines = made.measure(made.corrected(), &request(Kind::Particle));
    assert_eq!(lines.len(), 2);
    let height = lines[0].corrected.unwrap().value.unwrap();
    assert!((height - 20.0).abs() < 0.15, "{height}");
    let scanned = lines[1].as_scanned.unwrap().value;
    assert!((scanned - 2.0 * 300f64.sqrt()).abs() < 0.5, "{scanned}");
    let c = lines[1].corrected.unwrap();
    assert!((c.value.unwrap() - 20.0).abs() < 0.6, "{c:?}");
    assert!(c.low.unwrap() <= 20.0 && 20.0 <= c.high.unwrap(), "{c:?}");
}

#[test]
fn several_particles_have_means_and_numbers() {
    let shape = BumpShape::Sphere { radius: 6.0 };
    let bumps = Bumps::all(
        shape,
        &[[40.0, 40.0], [110.0, 50.0], [70.0, 110.0], [2.0, 90.0]],
    );
    let made = Made::new(&bumps.unwrap(), SLIM, 150, 150, 0.1);
    let lines = made.measure(made.corrected(), &request(Kind::Particle));
    assert_eq!(lines[0].quantity, "mean height");
    assert_eq!(lines[1].quantity, "mean diameter");
    assert_eq!(lines.len(), 8);
    assert_eq!(lines[2].name, "a 1");
    assert!((lines[0].corrected.unwrap().value.unwrap() - 12.0).abs() < 0.1);
    assert!(
        lines[0]
            .flags
            .iter()
            .any(|f| f.starts_with("1 particles at the border"))
    );
}

#[test]
fn a_correction_of_another_size_is_refused() {
    let lines = Lines::new(20.0, 400.0, 1, 10.0, 5.0);
    let made = Made::new(&lines, SLIM, 8, 40, 0.0);
    let other = HeightMap::from_fn(3, 3, Pitch::square(1.0), |_, _| 0.0).unwrap();
    let input = Input {
        scan: &other,
        noise_nm: None,
        calibration: Calibration::default(),
        slope: [0.0; 2],
        corrected: Some(made.corrected()),
    };
    assert!(measure(&input, &request(Kind::Texture), &Progress::new()).is_err());
}

#[test]
fn a_fraction_out_of_range_is_named() {
    let map = HeightMap::from_fn(3, 3, Pitch::square(1.0), |_, _| 0.0).unwrap();
    let input = Input {
        scan: &map,
        noise_nm: None,
        calibration: Calibration::default(),
        slope: [0.0; 2],
        corrected: None,
    };
    let mut request = request(Kind::LineWidth);
    request.at = vec![1.5];
    let error = measure(&input, &request, &Progress::new()).unwrap_err();
    assert!(error.to_string().contains("1.5"));
}

/// Every kind answers on every map, with a reason where it has no value, and without a panic.
fn answers(map: &HeightMap) {
    let tip = Model::SphereCone {
        radius: 3.0 * map.pitch().x,
        half_angle: 20.0,
    }
    .sample(7.0 * map.pitch().x, map.pitch())
    .unwrap();
    let made = Made::of(map.clone(), tip, 0.1);
    for kind in KINDS {
        for corrected in [None, Some(made.corrected())] {
            let input = Input {
                scan: map,
                noise_nm: None,
                calibration: Calibration::default(),
                slope: [0.0; 2],
                corrected,
            };
            let lines = measure(&input, &request(kind), &Progress::new()).unwrap();
            assert!(!lines.is_empty());
            for line in lines {
                let values = [
                    line.as_scanned.map(|v| v.value),
                    line.as_scanned.and_then(|v| v.u),
                    line.corrected.and_then(|c| c.value),
                    line.corrected.and_then(|c| c.low),
                    line.corrected.and_then(|c| c.high),
                ];
                assert!(values.into_iter().flatten().all(f64::is_finite), "{line:?}");
                assert!(
                    line.as_scanned.is_some() || !line.flags.is_empty(),
                    "{line:?}"
                );
                assert!(
                    line.budget.iter().all(|b| b.u.is_finite() && b.u >= 0.0),
                    "{line:?}"
                );
            }
        }
    }
}

#[test]
fn maps_that_no_tip_made_are_answered() {
    type Surface = fn(f64, f64) -> f64;
    let maps: [(usize, usize, f64, Surface); 7] = [
        (1, 1, 1.0, |_, _| 1.0),
        (1, 50, 1.0, |x, _| if x > 20.0 { 5.0 } else { 0.0 }),
        (50, 1, 1.0, |_, y| y),
        (20, 30, 1e9, |x, y| 1e11 + x + (y / 3e9).sin() * 1e9),
        (20, 30, 500.0, |x, _| {
            if x < 4000.0 {
                f64::NAN
            } else {
                (x * 1e-3).sin()
            }
        }),
        (20, 30, 1.0, |_, _| f64::NAN),
        (30, 30, 1.0, |x, y| {
            if (x - 15.0).hypot(y - 15.0) < 6.0 {
                f64::NAN
            } else {
                x % 7.0
            }
        }),
    ];
    for (rows, columns, pitch, f) in maps {
        answers(&HeightMap::from_fn(rows, columns, Pitch::square(pitch), f).unwrap());
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(60))]
    #[test]
    fn random_maps_are_answered(
        rows in 1usize..14,
        columns in 1usize..40,
        scale in prop::sample::select(vec![1e-3f64, 1.0, 1e11]),
        seed in prop::collection::vec(-1.0f64..1.0, 560),
        voids in 0.0f64..0.3,
        levels in 1.0f64..4.0,
    ) {
        let map = HeightMap::from_fn(rows, columns, Pitch { x: 1.0, y: 2.0 }, |x, y| {
            let value = seed[(x as usize + 40 * (y / 2.0) as usize) % 560];
            if value.abs() < voids { f64::NAN } else { (value * levels).round() * scale }
        }).unwrap();
        answers(&map);
    }
}

/// Imaged wall half-angle = max(tip's, wall's), computed independently.
#[test]
fn a_wall_flatter_than_the_flank_has_its_angle_and_a_steeper_one_a_bound() {
    let measured = |wall: f64, model: Model| {
        let lines = Lines::new(90.4, 400.0, 1, 61.7, 50.0).walls(wall, 0.0);
        let made = Made::new(&lines, model, 24, 180, 0.1);
        made.measure(made.corrected(), &request(Kind::SideWallAngle))
    };
    for line in measured(70.0, SLIM) {
        let c = line.corrected.unwrap();
        assert_eq!(line.status, Some(Status::Touched), "{:?}", line.flags);
        assert!((c.value.unwrap() - 70.0).abs() < 0.2, "{c:?}");
        assert!(c.low.unwrap() <= 70.0 && 70.0 <= c.high.unwrap(), "{c:?}");
    }
    for line in measured(90.0, STOUT) {
        let c = line.corrected.unwrap();
        assert_eq!(line.status, Some(Status::Bounded));
        assert_eq!((c.value, c.high), (None, Some(90.0)));
        assert!((c.low.unwrap() - 75.0).abs() < 1.0, "{c:?}");
        assert!((line.as_scanned.unwrap().value - 75.0).abs() < 1.5);
    }
}

/// Vertical trench, R = 10, a = 15 degrees: g = 22 is reached to 12.4155, g = 19 to 6.8775
/// (computed independently); a wide one to its floor.
#[test]
fn hole_depths_reached_and_not() {
    for (gap, reached) in [(22.0, Some(12.4155)), (19.0, Some(6.8775)), (80.0, None)] {
        let lines = Lines::new(39.0, 100.0 + gap, 2, 100.0, 50.0);
        let made = Made::new(&lines, STOUT, 24, 220, 0.0);
        let line = made
            .measure(made.corrected(), &request(Kind::HoleDepth))
            .remove(0);
        let c = line.corrected.unwrap();
        assert_eq!(line.quantity, "trench depth");
        match reached {
            Some(depth) => {
                assert_eq!(
                    (c.value, c.high, line.status),
                    (None, None, Some(Status::Bounded))
                );
                let scanned = line.as_scanned.unwrap().value;
                assert!(
                    (depth - 2.0..depth + 0.1).contains(&scanned),
                    "{scanned} {depth}"
                );
            }
            None => {
                assert_eq!(line.status, Some(Status::Touched), "{:?}", line.flags);
                assert!((c.value.unwrap() - 50.0).abs() < 0.05, "{c:?}");
            }
        }
    }
}

#[test]
fn roughness_of_both_edges_and_of_the_width() {
    let lines = Lines::new(90.4, 400.0, 1, 61.7, 50.0).walls(75.0, 0.0);
    let straight = Made::new(&lines, SLIM, 64, 180, 0.1);
    let made = straight.measure(straight.corrected(), &request(Kind::EdgeRoughness));
    assert_eq!(made.len(), 4);
    // A straight edge is no rougher than its noise and what the pixels hide.
    let c = made[0].corrected.unwrap();
    assert!(c.low.unwrap() < 0.01 && c.high.unwrap() < 0.7, "{c:?}");
    let width = straight.measure(straight.corrected(), &request(Kind::WidthRoughness));
    assert_eq!(width[0].quantity, "width roughness");
}

/// Sinusoid and parabolic apex with R A k^2 <= 1: erosion recovers it exactly (computed
/// independently): Sq = A / sqrt 2 over whole waves.
#[test]
fn the_texture_of_a_gentle_sinusoid_is_recovered() {
    let k = std::f64::consts::TAU / 60.0;
    let wave = move |x: f64, _: f64| 5.0 * (k * x).cos();
    let made = Made::new(&wave, SLIM, 60, 240, 0.0);
    let lines = made.measure(made.corrected(), &request(Kind::Texture));
    let sq = lines.iter().find(|l| l.quantity == "Sq").unwrap();
    let (expected, scanned) = (5.0 / 2f64.sqrt(), sq.as_scanned.unwrap().value);
    assert!(scanned < expected - 0.02, "{scanned}");
    let c = sq.corrected.unwrap();
    assert!((c.value.unwrap() - expected).abs() < 0.02, "{c:?}");
}

#[test]
fn filters_take_their_wavelengths_off() {
    let k = std::f64::consts::TAU / 20.0;
    let map = HeightMap::from_fn(200, 400, Pitch::square(1.0), |x, _| {
        3.0 * (k * x).cos() + 0.05 * x
    })
    .unwrap();
    let input = Input {
        scan: &map,
        noise_nm: Some(0.0),
        calibration: Calibration::default(),
        slope: [0.0; 2],
        corrected: None,
    };
    let length = |nm: f64| Some(crate::units::Length::from_nm(nm));
    let sq = |request: &Request| {
        let lines = measure(&input, request, &Progress::new()).unwrap();
        let line = lines.iter().find(|l| l.quantity == "Sq").unwrap();
        line.as_scanned.unwrap().value
    };
    let region = Some(crate::heightmap::Region {
        left: 100.0,
        top: 50.0,
        width: 200.0,
        height: 100.0,
    });
    let rough = Request {
        region,
        l_filter: length(20.0),
        ..request(Kind::Texture)
    };
    // Half of the wave is taken for form at its own nesting index.
    assert!(
        (sq(&rough) - 1.5 / 2f64.sqrt()).abs() < 0.01,
        "{}",
        sq(&rough)
    );
    let smooth = Request {
        region,
        s_filter: length(40.0),
        l_filter: length(80.0),
        ..request(Kind::Texture)
    };
    assert!(sq(&smooth) < 0.15, "{}", sq(&smooth));
    let crossed = Request {
        s_filter: length(80.0),
        l_filter: length(40.0),
        ..request(Kind::Texture)
    };
    assert!(crossed.validate().is_err());
}

#[test]
fn the_histogram_gives_the_step_of_a_grating() {
    let lines = Lines::new(20.0, 60.0, 4, 30.0, 12.0).walls(80.0, 0.0);
    let made = Made::new(&lines, SLIM, 40, 240, 0.1);
    let asked = Request {
        method: Some(StepMethod::Histogram),
        ..request(Kind::StepHeight)
    };
    let line = made.measure(made.corrected(), &asked).remove(0);
    assert!(
        (line.as_scanned.unwrap().value - 12.0).abs() < 0.1,
        "{line:?}"
    );
}
