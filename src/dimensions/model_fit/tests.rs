//! Fits on virtual scans whose truth is finer than the pixel; more seeds and forms in
//! `examples/dimension_validation.rs --model-fit`.

use super::*;
use crate::dimensions::{Calibration, Corrected, measure};
use crate::heightmap::Pitch;
use crate::leveling;
use crate::morphology;
use crate::tip::model::Model;
use crate::virtual_scan::{
    self, Bump, BumpShape, Bumps, Distortion, Feature, Lines, Settings, Step,
};

/// Scans `surface` with a sphere-cone, levels, corrects, measures and fits.
fn fitted(
    surface: &dyn Feature,
    size: [usize; 2],
    kind: Kind,
    (radius, half_angle): (f64, f64),
    doctor: &dyn Fn(&mut Vec<Dimension>),
) -> Vec<Dimension> {
    let progress = Progress::new();
    let model = Model::SphereCone { radius, half_angle };
    let tip = model.sample(61.0, Pitch::square(1.0)).unwrap();
    let settings = Settings {
        support_nm: 61.0,
        distortion: Distortion {
            noise_nm: 0.2,
            ..Distortion::default()
        },
        seed: 3,
        ..Settings::new(size[0], size[1], Pitch::square(1.0))
    };
    let made = virtual_scan::scan(
        |x, y| surface.height(x, y),
        |dx, dy| model.height(dx, dy),
        &settings,
        &progress,
    )
    .unwrap();
    let level = leveling::level(&made.scan, &leveling::Settings::default(), &progress).unwrap();
    let heights = morphology::erode(level.map.heights(), tip.shape(), &progress).unwrap();
    let surface = level.map.with_heights(heights, "corrected");
    let certainty = surface.heights().mapv(|_| morphology::certainty::TOUCHED);
    let leaning = surface.heights().mapv(|_| false);
    let input = Input {
        scan: &level.map,
        noise_nm: level.noise_nm,
        calibration: Calibration::default(),
        slope: level.slope,
        corrected: Some(Corrected::exact(
            &tip,
            &surface,
            certainty.view(),
            leaning.view(),
        )),
    };
    let request = Request::new("it", kind);
    let mut lines = measure(&input, &request, &progress).unwrap();
    doctor(&mut lines);
    second_opinion(&input, &request, None, &mut lines, &progress).unwrap();
    lines
}

fn fit_of(line: &Dimension) -> &ModelFit {
    line.evidence.model_fit.as_ref().unwrap()
}

fn parameter<'a>(fit: &'a ModelFit, name: &str) -> &'a Fitted {
    fit.parameters.iter().find(|p| p.name == name).unwrap()
}

fn near(fitted: &Fitted, truth: f64, error: f64) {
    let value = fitted.value.unwrap();
    assert!(
        (value - truth).abs() < error,
        "{}: {value} {truth}",
        fitted.name
    );
    assert!(
        fitted.low.unwrap() < truth && truth < fitted.high.unwrap(),
        "{fitted:?}"
    );
}

#[test]
fn a_line_that_the_tip_can_follow_is_determined() {
    let line = Lines::new(80.3, 400.0, 1, 50.4, 30.0).walls(70.0, 0.0);
    let lines = fitted(&line, [32, 160], Kind::LineWidth, (6.0, 8.0), &|_| ());
    let fit = fit_of(&lines[0]);
    near(fit.value.as_ref().unwrap(), 50.4, 0.15);
    near(parameter(fit, "height"), 30.0, 0.05);
    near(parameter(fit, "left wall angle"), 70.0, 0.5);
    near(parameter(fit, "right wall angle"), 70.0, 0.5);
    assert!(
        parameter(fit, "upper corner radius")
            .not_determined
            .is_some()
    );
    assert_eq!(fit.agrees, Some(true));
    assert!(fit.misfit.unwrap() < 1.5);
}

#[test]
fn a_wall_steeper_than_the_flank_is_not_determined_but_its_interval_holds() {
    let line = Lines::new(80.3, 400.0, 1, 50.4, 30.0).walls(89.0, 0.0);
    let lines = fitted(&line, [32, 160], Kind::LineWidth, (6.0, 15.0), &|_| ());
    let fit = fit_of(&lines[0]);
    let angle = parameter(fit, "left wall angle");
    assert!(angle.value.is_none() && angle.low.unwrap() < 76.0);
    assert!(angle.not_determined.as_ref().unwrap().contains("flank"));
    let width = fit.value.as_ref().unwrap();
    assert!(width.value.is_none() && width.not_determined.is_some());
    assert!(width.low.unwrap() < 50.4 && width.high.unwrap() > 50.4);
}

#[test]
fn a_large_upper_corner_radius_is_found() {
    let line = Lines::new(80.3, 400.0, 1, 50.4, 30.0).walls(75.0, 6.0);
    let lines = fitted(&line, [32, 160], Kind::LineWidth, (6.0, 8.0), &|_| ());
    let radius = parameter(fit_of(&lines[0]), "upper corner radius");
    assert!((radius.value.unwrap() - 6.0).abs() < 0.8, "{radius:?}");
}

#[test]
fn the_floor_of_a_narrow_trench_is_not_determined() {
    let lines = Lines::new(39.0, 81.0, 2, 70.0, 40.0);
    let found = fitted(&lines, [32, 160], Kind::LineWidth, (6.0, 15.0), &|_| ());
    let fit = fit_of(&found[0]);
    let height = parameter(fit, "height");
    assert!(
        height.value.is_none() && height.high.is_none(),
        "{height:?}"
    );
    assert!(height.not_determined.as_ref().unwrap().contains("floor"));
}

#[test]
fn steps_gratings_and_spheres_have_their_forms() {
    let step = Step {
        at_nm: 60.2,
        height_nm: 20.0,
        wall_angle_deg: 70.0,
    };
    let lines = fitted(&step, [32, 120], Kind::StepHeight, (6.0, 8.0), &|_| ());
    near(fit_of(&lines[0]).value.as_ref().unwrap(), 20.0, 0.05);
    near(parameter(fit_of(&lines[0]), "wall angle"), 70.0, 0.5);
    let grating = Lines::new(20.0, 50.2, 5, 24.0, 15.0).walls(70.0, 0.0);
    let lines = fitted(&grating, [32, 250], Kind::Pitch, (6.0, 8.0), &|_| ());
    near(fit_of(&lines[0]).value.as_ref().unwrap(), 50.2, 0.02);
    let shape = BumpShape::Sphere { radius: 9.0 };
    let sphere = Bumps::new(vec![Bump {
        at: [48.3, 47.6],
        shape,
    }])
    .unwrap();
    let lines = fitted(&sphere, [96, 96], Kind::Particle, (8.0, 8.0), &|_| ());
    for line in &lines {
        near(fit_of(line).value.as_ref().unwrap(), 18.0, 0.3);
    }
}

#[test]
fn a_contradiction_is_flagged() {
    let line = Lines::new(80.3, 400.0, 1, 50.4, 30.0).walls(70.0, 0.0);
    let shifted = |lines: &mut Vec<Dimension>| {
        let c = lines[0].corrected.as_mut().unwrap();
        for v in [&mut c.value, &mut c.low, &mut c.high] {
            *v = v.map(|v| v + 3.0);
        }
    };
    let lines = fitted(&line, [32, 160], Kind::LineWidth, (6.0, 8.0), &shifted);
    assert_eq!(fit_of(&lines[0]).agrees, Some(false));
    assert!(lines[0].flags.iter().any(|f| f.contains("contradicts")));
}
