//! Closed forms of reach and width, by formula and on grids; refusals.

use super::closed_forms::{ball_excess, hollow_reach, wall_excess};
use super::*;
use crate::heightmap::Pitch;

const R10: Model = Model::SphereCone {
    radius: 10.0,
    half_angle: 15.0,
};

fn trench(width: f64, depth: f64) -> Feature {
    Feature::Trench {
        width,
        depth,
        wall_angle: 90.0,
    }
}

/// A deep groove of floor `b` whose walls stand at `beta` from the vertical.
fn groove(b: f64, beta: f64, depth: f64) -> Feature {
    Feature::Trench {
        width: b + depth * beta.to_radians().tan(),
        depth,
        wall_angle: 90.0 - beta,
    }
}

/// methods, closed form 4 (computed and brute-forced independently).
#[test]
fn upright_trenches() {
    for (g, d) in [
        (10.0, 1.3397),
        (19.0, 6.8775),
        (22.0, 12.4155),
        (40.0, 46.0040),
    ] {
        assert!(
            (vertical_trench_reach(10.0, 15.0, g) - d).abs() < 1e-4,
            "{g}"
        );
        let found = reach(&Probe::Formula(R10), &trench(g, 60.0), &[]).unwrap();
        assert!((found.imaged_nm - d).abs() < 1e-3 * d, "{g} {found:?}");
        assert!(!found.reaches_bottom());
        assert_eq!(found.touched.floor, Some(0.0));
        assert_eq!(
            hollow_reach(R10, &trench(g, 60.0)),
            Some(vertical_trench_reach(10.0, 15.0, g))
        );
    }
    // The same on a tip's grid.
    let tip = R10.sample(61.0, Pitch::square(0.5)).unwrap();
    for (g, d) in [
        (10.0, 1.3397),
        (19.0, 6.8775),
        (22.0, 12.4155),
        (40.0, 46.0040),
    ] {
        for azimuth in [0.0, 37.0, 90.0] {
            let found = reach(&Probe::Grid(&tip, azimuth), &trench(g, 60.0), &[]).unwrap();
            assert!(
                (found.imaged_nm - d).abs() < 0.05 + 0.002 * d,
                "{g} {azimuth} {found:?}"
            );
        }
    }
}

/// methods, closed form 5: lost depth, critical floor, visible flat.
#[test]
fn grooves_with_sloping_walls() {
    for (beta, b, lost, critical) in [
        (35.26, 0.0, 7.3224, 10.354),
        (35.26, 5.0, 3.7863, 10.354),
        (20.0, 8.0, 8.2481, 14.004),
    ] {
        assert!(
            (groove_lost_depth(10.0, beta, b) - lost).abs() < 2e-3,
            "{beta} {b}"
        );
        assert!(groove_lost_depth(10.0, beta, critical - 0.01) > 0.0);
        assert_eq!(groove_lost_depth(10.0, beta, critical + 0.01), 0.0);
        let feature = groove(b, beta, 60.0);
        let exact = hollow_reach(R10, &feature).unwrap();
        assert!((60.0 - exact - lost).abs() < 2e-3);
        let found = reach(&Probe::Formula(R10), &feature, &[]).unwrap();
        assert!(
            (found.lost_nm() - lost).abs() < 0.05,
            "{beta} {b} {}",
            found.lost_nm()
        );
        // The flank is steeper than the wall: the wall is touched except at its foot.
        let walls = found.touched.walls.unwrap();
        assert!(walls > 0.6 && walls < 1.0, "{walls}");
        assert_eq!(found.touched.floor.unwrap_or(0.0), 0.0);
    }
    // Wider than critical: the flat that is seen is the floor less the critical width.
    let found = reach(&Probe::Formula(R10), &groove(20.0, 20.0, 60.0), &[]).unwrap();
    assert!(found.reaches_bottom());
    let floor = found.touched.floor.unwrap();
    assert!((20.0 * floor - (20.0 - 14.004)).abs() < 0.3, "{floor}");
}

/// methods, closed form 3: `W(f) = w + 2 w_t((1 - f) h)`; for a trench the minus sign.
#[test]
fn widths_of_ridges_and_trenches() {
    let ridge = Feature::Ridge {
        width: 100.0,
        height: 50.0,
        wall_angle: 90.0,
    };
    let at = [0.1, 0.5, 0.9];
    let found = reach(&Probe::Formula(R10), &ridge, &at).unwrap();
    for (w, exact) in found.widths.iter().zip([139.46, 128.74, 117.32]) {
        assert!((w.imaged_nm - exact).abs() < 0.3, "{w:?}");
        let below = (1.0 - w.at) * 50.0;
        assert!((wall_excess(10.0, 15.0, 0.0, below) - (exact - 100.0)).abs() < 0.01);
    }
    assert_eq!(found.touched.top.map(|t| (t * 100.0).round()), Some(100.0));
    // An upright wall is never touched below its edge.
    assert!(found.touched.walls.unwrap() < 0.01);
    let found = reach(&Probe::Formula(R10), &trench(100.0, 50.0), &at).unwrap();
    for (w, exact) in found.widths.iter().zip([39.46, 28.74, 17.32]) {
        assert!((w.excess_nm() + exact).abs() < 0.3, "{w:?}");
    }
    // Sloping walls: the excess of a flank steeper than the wall does not grow with the depth.
    let sloping = Feature::Ridge {
        width: 100.0,
        height: 50.0,
        wall_angle: 60.0,
    };
    let found = reach(&Probe::Formula(R10), &sloping, &[0.2, 0.5]).unwrap();
    for w in &found.widths {
        let exact = wall_excess(10.0, 15.0, 30.0, (1.0 - w.at) * 50.0);
        assert!((w.excess_nm() - exact).abs() < 0.3, "{w:?} {exact}");
    }
    assert!(found.touched.walls.unwrap() > 0.8);
}

/// methods, closed form 1: base and half-height widths of a ball on a plane.
#[test]
fn widths_of_particles() {
    for (radius, ball, angle, half_height) in [
        // R / (R + r) >= s: 2 sqrt(r^2 + 2 R r).
        (10.0, 10.0, 15.0, 2.0 * 300f64.sqrt()),
        (10.0, 2.5, 15.0, 2.0 * 56.25f64.sqrt()),
        // Else 2 [r + R (1 - s)] / cos a.
        (5.0, 50.0, 10.0, {
            let (s, c) = 10f64.to_radians().sin_cos();
            2.0 * (50.0 + 5.0 * (1.0 - s)) / c
        }),
    ] {
        let model = Model::SphereCone {
            radius,
            half_angle: angle,
        };
        let feature = Feature::Particle {
            diameter: 2.0 * ball,
        };
        let found = reach(&Probe::Formula(model), &feature, &[0.5]).unwrap();
        let w = found.widths[0];
        assert!((found.imaged_nm - 2.0 * ball).abs() < 1e-3 * ball);
        assert!(
            (w.imaged_nm - half_height).abs() < 0.01 * half_height,
            "{w:?} {half_height}"
        );
        let excess = ball_excess(radius, angle, ball, ball);
        assert!(
            (excess - (half_height - 2.0 * ball)).abs() < 1e-3,
            "{excess}"
        );
        // Touched from the summit to where the ball is as steep as the flank.
        let walls = found.touched.walls.unwrap();
        assert!(walls > 0.4 && walls < 1.0, "{walls}");
    }
}

#[test]
fn a_grating_is_a_trench_between_ridges() {
    let grating = Feature::Grating {
        pitch: 60.0,
        width: 41.0,
        height: 40.0,
        wall_angle: 90.0,
    };
    let found = reach(&Probe::Formula(R10), &grating, &[]).unwrap();
    // The gap of 19 nm: closed form 4.
    assert!((found.imaged_nm - 6.8775).abs() < 0.05, "{found:?}");
    assert_eq!(found.touched.floor, Some(0.0));
    assert!(found.touched.top.unwrap() > 0.98);
}

#[test]
fn a_skew_tip_reaches_by_its_own_two_flanks() {
    // Faces of 10 towards -x and 30 towards +x: in a trench of width g the apex goes where
    // z (tan 10 + tan 30) = g, off the middle.
    let model = Model::Pyramid {
        half_angles: [10.0, 30.0, 20.0, 20.0],
    };
    let tip = model.sample(101.0, Pitch::square(1.0)).unwrap();
    let tan = |a: f64| a.to_radians().tan();
    let found = reach(&Probe::Grid(&tip, 0.0), &trench(30.0, 60.0), &[]).unwrap();
    let exact = 30.0 / (tan(10.0) + tan(30.0));
    assert!(
        (found.imaged_nm - exact).abs() < 0.3,
        "{} {exact}",
        found.imaged_nm
    );
}

#[test]
fn the_bluntest_tip_stands_at_the_edge_of_the_closed_forms() {
    let need = Need {
        excess_nm: None,
        at: 0.5,
    };
    let feature = trench(40.0, 40.0);
    let found = bluntest(&feature, &need, Some(10.0), Some(15.0)).unwrap();
    let (radius, angle) = (found.radius_nm.unwrap(), found.half_angle_deg.unwrap());
    assert!((vertical_trench_reach(radius, 15.0, 40.0) - 40.0).abs() < 1e-6);
    assert!((vertical_trench_reach(10.0, angle, 40.0) - 40.0).abs() < 1e-6);
    // A little blunter no longer gets down, by the dilation itself.
    for (r, a, down) in [
        (0.98 * radius, 15.0, true),
        (1.05 * radius, 15.0, false),
        (10.0, 0.98 * angle, true),
        (10.0, 1.05 * angle, false),
    ] {
        let model = Model::SphereCone {
            radius: r,
            half_angle: a,
        };
        let got = reach(&Probe::Formula(model), &feature, &[]).unwrap();
        assert_eq!(got.reaches_bottom(), down, "{r} {a} {got:?}");
    }
    // A half-angle that cannot: tan a > g / 2 / d.
    let found = bluntest(&feature, &need, None, Some(30.0)).unwrap();
    assert!(found.radius_nm.is_none() && found.reasons[0].contains("even a sharp tip"));
    // Ridges need a stated excess; the radius then gives just that.
    let ridge = Feature::Ridge {
        width: 100.0,
        height: 50.0,
        wall_angle: 88.0,
    };
    assert!(
        bluntest(&ridge, &need, Some(10.0), Some(15.0))
            .unwrap()
            .reasons[0]
            .contains("excess")
    );
    let need = Need {
        excess_nm: Some(25.0),
        at: 0.5,
    };
    let radius = bluntest(&ridge, &need, None, Some(15.0))
        .unwrap()
        .radius_nm
        .unwrap();
    assert!((wall_excess(radius, 15.0, 2.0, 25.0) - 25.0).abs() < 1e-6);
    let ball = Feature::Particle { diameter: 30.0 };
    let radius = bluntest(&ball, &need, None, Some(15.0))
        .unwrap()
        .radius_nm
        .unwrap();
    assert!((ball_excess(radius, 15.0, 15.0, 15.0) - 25.0).abs() < 1e-6);
}

#[test]
fn what_cannot_be_planned_is_refused() {
    let told = |feature: Feature| reach(&Probe::Formula(R10), &feature, &[]).unwrap_err();
    assert!(
        told(trench(-3.0, 10.0))
            .to_string()
            .contains("trench width -3")
    );
    let meeting = Feature::Trench {
        width: 10.0,
        depth: 100.0,
        wall_angle: 80.0,
    };
    assert!(told(meeting).to_string().contains("meet"));
    let over = Feature::Ridge {
        width: 10.0,
        height: 10.0,
        wall_angle: 95.0,
    };
    assert!(told(over).to_string().contains("95"));
    let error = reach(&Probe::Formula(R10), &trench(10.0, 10.0), &[1.5]).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
    // A tip that is known no deeper than 20 nm says nothing of a trench of 60.
    let tip = R10.sample(27.0, Pitch::square(1.0)).unwrap();
    let error = reach(&Probe::Grid(&tip, 0.0), &trench(40.0, 60.0), &[]).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Data);
    assert!(error.to_string().contains("60.000 nm"), "{error}");
}
