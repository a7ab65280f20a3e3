//! Closed forms of spheres, cones, paraboloids and pyramids; refusals; coverage.

use super::super::model::Model;
use super::*;

fn sphere_cone(radius: f64, half_angle: f64, px: f64) -> Tip {
    Model::SphereCone { radius, half_angle }
        .sample(65.0 * px, Pitch::square(px))
        .unwrap()
}

/// methods: the figure wanted is the curvature at the apex (closed form of the sphere).
#[test]
fn a_sphere_of_radius_8_reads_8() {
    for (radius, angle, px) in [
        (8.0, 15.0, 1.0),
        (10.0, 20.0, 1.0),
        (20.0, 15.0, 2.0),
        (8.0, 10.0, 0.5),
    ] {
        let tip = sphere_cone(radius, angle, px);
        let out = read_out(&tip, 40.0 * px, 0.01);
        let r = out
            .apex_radius
            .unwrap_or_else(|| panic!("{:?}", out.reasons));
        assert!((r.value / radius - 1.0).abs() < 0.005, "{r:?}");
        assert!(r.fit_depth_nm < radius * (1.0 - angle.to_radians().sin()));
        let a = out
            .half_angle
            .unwrap_or_else(|| panic!("{:?}", out.reasons));
        assert!((a.value - angle).abs() < 0.4, "{a:?}");
    }
}

#[test]
fn a_paraboloid_reads_its_radius_and_an_apex_between_pixels_does_no_harm() {
    let tip = Model::Paraboloid { radius: 12.0 }
        .sample(41.0, Pitch::square(1.0))
        .unwrap();
    let r = read_out(&tip, 10.0, 0.0).apex_radius.unwrap();
    assert!((r.value - 12.0).abs() < 1e-3, "{r:?}");
    let shifted = Model::SphereCone {
        radius: 8.0,
        half_angle: 15.0,
    };
    let base = shifted.height(0.4, 0.3);
    let shape = ndarray::Array2::from_shape_fn((41, 41), |(i, j)| {
        let (x, y) = (j as f64 - 20.0 + 0.4, i as f64 - 20.0 + 0.3);
        (base - shifted.height(x, y)).min(0.0) as f32
    });
    let tip = Tip::new(shape, Pitch::square(1.0)).unwrap();
    let r = read_out(&tip, 20.0, 0.01).apex_radius.unwrap();
    assert!((r.value - 8.0).abs() < 0.1, "{r:?}");
}

#[test]
fn principal_radii_and_unequal_pitch() {
    let shape = ndarray::Array2::from_shape_fn((41, 61), |(i, j)| {
        let (x, y) = ((j as f64 - 30.0) * 0.5, (i as f64 - 20.0) * 1.0);
        -(x * x / 16.0 + y * y / 30.0) as f32
    });
    let tip = Tip::new(shape, Pitch { x: 0.5, y: 1.0 }).unwrap();
    let r = read_out(&tip, 4.0, 0.0).apex_radius.unwrap();
    assert!((r.principal_nm[0] - 8.0).abs() < 0.01, "{r:?}");
    assert!((r.principal_nm[1] - 15.0).abs() < 0.01, "{r:?}");
}

#[test]
fn what_is_not_there_is_refused_with_a_reason() {
    let pyramid = Model::Pyramid {
        half_angles: [15.0, 25.0, 20.0, 20.0],
    }
    .sample(65.0, Pitch::square(1.0))
    .unwrap();
    let out = read_out(&pyramid, 50.0, 0.05);
    assert!(out.apex_radius.is_none());
    assert!(
        out.reasons[0].contains("sharper than the pixels"),
        "{:?}",
        out.reasons
    );
    // Faces towards -x (15) and +x (25) at azimuths 180 and 0.
    let angles = out.half_angle.unwrap().per_azimuth;
    let at = |a: f64| angles.iter().find(|p| (p.0 - a).abs() < 1e-6).unwrap().1;
    assert!((at(0.0) - 25.0).abs() < 0.2 && (at(180.0) - 15.0).abs() < 0.2);

    let flat = Tip::new(ndarray::Array2::zeros((21, 21)), Pitch::square(1.0)).unwrap();
    assert!(read_out(&flat, 5.0, 0.1).apex_radius.is_none());
    let one = Tip::new(ndarray::Array2::zeros((1, 1)), Pitch::square(1.0)).unwrap();
    assert_eq!(read_out(&one, 5.0, 0.1).reasons.len(), 1);
    // Exercised too little, or too noisy.
    let tip = sphere_cone(8.0, 15.0, 1.0);
    assert!(read_out(&tip, 0.3, 0.01).apex_radius.is_none());
    assert!(read_out(&tip, 20.0, 1.5).apex_radius.is_none());
    assert!(read_out(&tip, 4.0, 0.01).half_angle.is_none());
}

#[test]
fn the_uncertainty_covers_the_scatter() {
    // A plain linear congruence is noise enough here.
    let mut state = 1u64;
    let mut noise = || {
        let mut sum = 0.0;
        for _ in 0..12 {
            state = state
                .wrapping_mul(6364136223846793005)
                .wrapping_add(1442695040888963407);
            sum += (state >> 11) as f64 / (1u64 << 53) as f64;
        }
        sum - 6.0
    };
    let clean = sphere_cone(8.0, 15.0, 1.0);
    let inside = (0..60)
        .filter(|_| {
            let mut shape = clean.shape().to_owned();
            shape.mapv_inplace(|p| (p + 0.05 * noise() as f32).min(0.0));
            shape[[32, 32]] = 0.0;
            let tip = Tip::new(shape, Pitch::square(1.0)).unwrap();
            let r = read_out(&tip, 40.0, 0.05).apex_radius.unwrap();
            (r.value - 8.0).abs() < 2.0 * r.u
        })
        .count();
    assert!(inside >= 55, "{inside} of 60");
}

/// Pointwise over the apex a sphere of radius R reads R - z / 2 as a paraboloid, and a paraboloid
/// R + z / 2 as a sphere (closed forms; methods): the variants lie between these and R.
#[test]
fn sphere_and_paraboloid_variants_err_the_known_way() {
    let ball = read_out(&sphere_cone(8.0, 15.0, 0.5), 20.0, 0.005)
        .apex_radius
        .unwrap();
    assert!((ball.sphere_nm.unwrap() - 8.0).abs() < 1e-3, "{ball:?}");
    let parabola = ball.paraboloid_nm.unwrap();
    assert!(parabola > 8.0 - ball.fit_depth_nm && parabola < 8.0 - 0.25 * ball.fit_depth_nm);
    assert!((ball.value - 8.0).abs() < 0.02, "{ball:?}");
    let tip = Model::Paraboloid { radius: 12.0 }
        .sample(41.0, Pitch::square(0.5))
        .unwrap();
    let cup = read_out(&tip, 10.0, 0.0).apex_radius.unwrap();
    assert!((cup.paraboloid_nm.unwrap() - 12.0).abs() < 1e-3, "{cup:?}");
    let ball = cup.sphere_nm.unwrap();
    assert!(ball > 12.0 + 0.25 * cup.fit_depth_nm && ball < 12.0 + cup.fit_depth_nm);
}

/// A cone of half-angle a whose axis leans by tau towards p0: its surface in closed form.
fn tilted_cone(half_angle: f64, tau: f64, towards: f64) -> Tip {
    let (sin, cos) = tau.to_radians().sin_cos();
    let (ey, ex) = towards.to_radians().sin_cos();
    let axis = [sin * ex, sin * ey, cos];
    let c2 = half_angle.to_radians().cos().powi(2);
    let shape = ndarray::Array2::from_shape_fn((81, 81), |(i, j)| {
        let (x, y) = (j as f64 - 40.0, i as f64 - 40.0);
        // (n . r)^2 = cos^2 a |r|^2 for r = (x, y, z): the upper root in z.
        let flat = axis[0] * x + axis[1] * y;
        let (a, b) = (axis[2] * axis[2] - c2, axis[2] * flat);
        let d2 = flat * flat - c2 * (x * x + y * y);
        -((-b + (b * b - a * d2).max(0.0).sqrt()) / a).max(0.0) as f32
    });
    Tip::new(shape, Pitch::square(1.0)).unwrap()
}

#[test]
fn a_tilted_cone_tells_its_tilt_and_an_upright_one_none() {
    for (tau, towards) in [(4.0, 30.0), (2.5, 200.0)] {
        let out = read_out(&tilted_cone(20.0, tau, towards), 90.0, 0.01);
        let angle = out
            .half_angle
            .unwrap_or_else(|| panic!("{:?}", out.reasons));
        let tilt = angle.tilt.unwrap();
        assert!((tilt.value - tau).abs() < 0.05, "{tilt:?}");
        assert!((tilt.azimuth_deg - towards).abs() < 1.0, "{tilt:?}");
    }
    let upright = read_out(&sphere_cone(8.0, 15.0, 1.0), 60.0, 0.01);
    assert!(upright.half_angle.unwrap().tilt.unwrap().value < 1e-3);
    // Faces of 15 towards -x and 25 towards +x: the bisector leans by 5 towards +x in the section
    // along x and by nothing along y.
    let pyramid = Model::Pyramid {
        half_angles: [15.0, 25.0, 20.0, 20.0],
    }
    .sample(65.0, Pitch::square(1.0))
    .unwrap();
    let tilt = read_out(&pyramid, 50.0, 0.05)
        .half_angle
        .unwrap()
        .tilt
        .unwrap();
    assert!(tilt.value > 2.0 && tilt.value < 5.0, "{tilt:?}");
    assert!(
        tilt.azimuth_deg.min(360.0 - tilt.azimuth_deg) < 0.5,
        "{tilt:?}"
    );
}
