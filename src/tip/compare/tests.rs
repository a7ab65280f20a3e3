//! Closed forms of two spheres, registration, resampling, verdicts.

use super::super::model::Model;
use super::super::read_out::read_out;
use super::*;

fn tip(radius: f64, half_angle: f64, pitch: f64) -> Tip {
    Model::SphereCone { radius, half_angle }
        .sample(61.0, Pitch::square(pitch))
        .unwrap()
}

fn compared(a: &Tip, b: &Tip, u: f64, settings: &Settings) -> Comparison {
    let (ra, rb) = (read_out(a, 40.0, u), read_out(b, 40.0, u));
    let side = |tip, read_out| Side {
        tip,
        band: None,
        height_u_nm: u,
        known_depth_nm: Some(40.0),
        read_out,
    };
    compare(&side(a, &ra), &side(b, &rb), settings).unwrap()
}

/// Two sphere-cones of one half-angle with their apices together lie `(R2 - R1)(1 - sin a)` apart
/// along the normal of the flank (closed form).
#[test]
fn a_worn_tip_is_called_worn_by_the_right_amount() {
    let found = compared(
        &tip(8.0, 15.0, 1.0),
        &tip(12.0, 15.0, 1.0),
        0.05,
        &Settings::default(),
    );
    assert_eq!(found.verdict, Verdict::Worn);
    let r = found.radius.unwrap();
    assert!(
        (r.difference - 4.0).abs() < 0.05 && r.expanded() < 1.0,
        "{r:?}"
    );
    let sin = 15f64.to_radians().sin();
    let flank = 4.0 * (1.0 - sin);
    // Deep on the flank along x: the height differs by that over sin a.
    let (rows, columns) = found.difference.dim();
    let deep = f64::from(found.difference[[rows / 2, columns / 2 + 17]]);
    assert!((deep - flank / sin).abs() < 0.02, "{deep} {}", flank / sin);
    assert!(found.normal_mean_nm > 0.7 * flank && found.normal_mean_nm < flank);
    assert!(found.normal_rms_nm >= found.normal_mean_nm && found.normal_rms_nm < flank);
    assert!(found.beyond > 0.9 && !found.resampled);
    let back = compared(
        &tip(12.0, 15.0, 1.0),
        &tip(8.0, 15.0, 1.0),
        0.05,
        &Settings::default(),
    );
    assert_eq!(back.verdict, Verdict::Sharper);
    assert!((back.normal_mean_nm + found.normal_mean_nm).abs() < 1e-9);
}

#[test]
fn a_difference_within_the_uncertainty_is_none() {
    let near = compared(
        &tip(8.0, 15.0, 1.0),
        &tip(8.2, 15.0, 1.0),
        0.3,
        &Settings::default(),
    );
    assert_eq!(near.verdict, Verdict::NotDistinguishable);
    let same = compared(
        &tip(8.0, 15.0, 1.0),
        &tip(8.0, 15.0, 1.0),
        0.3,
        &Settings::default(),
    );
    assert_eq!(
        (same.normal_rms_nm, same.verdict),
        (0.0, Verdict::NotDistinguishable)
    );
    // Without any stated uncertainty nothing is judged.
    let bare = compared(
        &tip(8.0, 15.0, 1.0),
        &tip(12.0, 15.0, 1.0),
        0.0,
        &Settings::default(),
    );
    assert_eq!(bare.verdict, Verdict::Undecided);
    assert!(bare.notes[0].contains("No uncertainty is known of the first"));
}

#[test]
fn the_band_is_the_uncertainty_where_there_is_one() {
    let (a, b) = (tip(8.0, 15.0, 1.0), tip(8.4, 15.0, 1.0));
    let wide = |t: &Tip, dr: f64| {
        let _ = t;
        Band {
            sharper: tip(8.0 - dr, 15.0, 1.0),
            blunter: tip(8.0 + dr, 15.0, 1.0),
        }
    };
    let read = ReadOut::default();
    let judge = |dr: f64| {
        let band = wide(&a, dr);
        let side = |tip| Side {
            tip,
            band: Some(&band),
            height_u_nm: 99.0,
            known_depth_nm: None,
            read_out: &read,
        };
        compare(&side(&a), &side(&b), &Settings::default()).unwrap()
    };
    // Half a band of 2 u: the difference of 0.4 nm against 2 x 0.707 dr.
    assert_eq!(judge(0.1).verdict, Verdict::Worn);
    assert_eq!(judge(1.0).verdict, Verdict::NotDistinguishable);
    let ratio = judge(1.0).normal_u_nm / judge(0.1).normal_u_nm;
    assert!((ratio - 10.0).abs() < 0.2, "{ratio}");
    assert!(judge(1.0).radius.is_none());
}

#[test]
fn a_finer_grid_is_read_at_the_coarser_one() {
    let found = compared(
        &tip(10.0, 15.0, 0.5),
        &tip(10.0, 15.0, 1.5),
        0.05,
        &Settings::default(),
    );
    assert!(found.resampled);
    assert_eq!(found.pitch, Pitch::square(1.5));
    // 1.5 is three cells of 0.5: the same places, no interpolation.
    assert!(found.normal_rms_nm < 1e-5, "{}", found.normal_rms_nm);
    let odd = compared(
        &tip(10.0, 15.0, 0.7),
        &tip(10.0, 15.0, 1.0),
        0.05,
        &Settings::default(),
    );
    assert!(odd.normal_rms_nm < 0.01, "{}", odd.normal_rms_nm);
    assert_eq!(odd.verdict, Verdict::NotDistinguishable);
}

#[test]
fn a_shift_is_found_and_taken_off() {
    let model = Model::SphereCone {
        radius: 10.0,
        half_angle: 20.0,
    };
    // An apex 0.4 pixels off the centre; the centre stays its highest cell.
    let (sx, sy) = (0.4, -0.3);
    let base = model.height(sx, sy);
    let shape = Array2::from_shape_fn((61, 61), |(i, j)| {
        let (x, y) = (j as f64 - 30.0, i as f64 - 30.0);
        (base - model.height(x - sx, y - sy)).min(0.0) as f32
    });
    let shifted = Tip::new(shape, Pitch::square(1.0)).unwrap();
    let plain = tip(10.0, 20.0, 1.0);
    let settings = Settings {
        best_shift: true,
        ..Settings::default()
    };
    let raw = compared(&plain, &shifted, 0.05, &Settings::default());
    let fitted = compared(&plain, &shifted, 0.05, &settings);
    // The second tip's apex lies at +shift: it is brought back by minus that.
    assert!(
        (fitted.shift_nm[0] + sx).abs() < 0.02,
        "{:?}",
        fitted.shift_nm
    );
    assert!(
        (fitted.shift_nm[1] + sy).abs() < 0.02,
        "{:?}",
        fitted.shift_nm
    );
    assert!(fitted.normal_rms_nm < 0.1 * raw.normal_rms_nm);
}

#[test]
fn what_cannot_be_compared_is_an_error() {
    let read = ReadOut::default();
    let side = |tip| Side {
        tip,
        band: None,
        height_u_nm: 0.1,
        known_depth_nm: None,
        read_out: &read,
    };
    let good = tip(8.0, 15.0, 1.0);
    let needle = Tip::new(Array2::zeros((1, 1)), Pitch::square(1.0)).unwrap();
    let error = compare(&side(&good), &side(&needle), &Settings::default()).unwrap_err();
    assert!(error.to_string().contains("second tip shows no depth"));
    let shallow = Settings {
        depth_nm: Some(0.01),
        best_shift: false,
    };
    let error = compare(&side(&good), &side(&good), &shallow).unwrap_err();
    assert!(error.to_string().contains("cells"), "{error}");
    let bad = Settings {
        depth_nm: Some(-1.0),
        best_shift: false,
    };
    let error = compare(&side(&good), &side(&good), &bad).unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Setting);
}
