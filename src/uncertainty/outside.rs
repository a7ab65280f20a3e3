//! Checks from outside: the worked examples of JCGM 100:2008 and JCGM 101:2008.

use super::monte_carlo::{Draws, Settings, Trials, propagate};
use super::{Budget, Component, Distribution, Joint};
use crate::progress::Progress;
use rand::Rng;
use rand_chacha::ChaCha8Rng;
use rand_distr::{StandardNormal, StudentT};

/// JCGM 100:2008, H.2: resistance, reactance and impedance from voltage, current and phase, five
/// observations of all three together (data and table H.4 from memory; the data give the means,
/// uncertainties and correlations of table H.2).
#[test]
fn gum_h2_three_outputs_of_correlated_inputs() {
    let observations: Vec<Vec<f64>> = [
        [5.007, 19.663e-3, 1.0456],
        [4.994, 19.639e-3, 1.0438],
        [5.005, 19.640e-3, 1.0468],
        [4.990, 19.685e-3, 1.0428],
        [4.999, 19.678e-3, 1.0433],
    ]
    .map(Vec::from)
    .into();
    let inputs = Joint::of_observations(&observations).unwrap();
    for (i, (mean, u)) in [
        (4.9990, 0.0032),
        (19.6610e-3, 0.0095e-3),
        (1.04446, 0.00075),
    ]
    .into_iter()
    .enumerate()
    {
        assert!((inputs.values()[i] / mean - 1.0).abs() < 1e-6);
        assert!((inputs.u(i) / u - 1.0).abs() < 0.01, "{}", inputs.u(i));
    }
    for (i, j, r) in [(0, 1, -0.36), (0, 2, 0.86), (1, 2, -0.65)] {
        assert!((inputs.correlation(i, j) - r).abs() < 0.006);
    }
    let impedance = |x: &[f64]| {
        let z = x[0] / x[1];
        vec![z * x[2].cos(), z * x[2].sin(), z]
    };
    let out = inputs.through(impedance).unwrap();
    for (i, (value, u)) in [(127.732, 0.071), (219.847, 0.295), (254.260, 0.236)]
        .into_iter()
        .enumerate()
    {
        assert!(
            (out.values()[i] - value).abs() < 6e-4,
            "{}",
            out.values()[i]
        );
        assert!((out.u(i) - u).abs() < 6e-4, "{}", out.u(i));
    }
    for (i, j, r) in [(0, 1, -0.588), (0, 2, -0.485), (1, 2, 0.993)] {
        let found = out.correlation(i, j);
        assert!((found - r).abs() < 6e-4, "{i} {j}: {found}");
    }
    // The same through a budget with correlations: sensitivities of R in closed form.
    let [v, i, phi] = [inputs.values()[0], inputs.values()[1], inputs.values()[2]];
    let mut budget = Budget::new();
    let sensitivities = [phi.cos() / i, -v * phi.cos() / (i * i), -v * phi.sin() / i];
    for (k, sensitivity) in sensitivities.into_iter().enumerate() {
        budget.add(Component {
            source: String::new(),
            u: inputs.u(k),
            distribution: Distribution::Normal,
            sensitivity,
            degrees_of_freedom: None,
        });
    }
    for (a, b) in [(0, 1), (0, 2), (1, 2)] {
        budget.correlate(a, b, inputs.correlation(a, b));
    }
    assert!((budget.combined(0.95).u - out.u(0)).abs() < 1e-5);
}

fn draw(coverage: f64, model: impl Fn(&mut ChaCha8Rng) -> f64 + Sync) -> Draws {
    let settings = Settings {
        trials: Trials::Fixed(400_000),
        seed: 101,
        coverage,
    };
    let trial = |random: &mut ChaCha8Rng, out: &mut [f64]| {
        out[0] = model(random);
        Ok(())
    };
    let all = propagate(&settings, 1, trial, &Progress::new()).unwrap();
    all.outputs[0].clone()
}

fn normal(random: &mut ChaCha8Rng) -> f64 {
    random.sample(StandardNormal)
}

/// Rectangular between two limits.
fn between(random: &mut ChaCha8Rng, low: f64, high: f64) -> f64 {
    low + (high - low) * random.random::<f64>()
}

/// Curvilinear trapezoid: JCGM 101:2008, 6.4.3.4.
fn curvilinear_trapezoid(random: &mut ChaCha8Rng, half: f64, d: f64) -> f64 {
    let inner = between(random, half - d, half + d);
    inner * (2.0 * random.random::<f64>() - 1.0)
}

/// Scaled and shifted t: JCGM 101:2008, 6.4.9.
fn student(random: &mut ChaCha8Rng, value: f64, u: f64, freedom: f64) -> f64 {
    value + u * random.sample(StudentT::new(freedom).unwrap())
}

fn symmetric_half(draws: &Draws) -> f64 {
    let [low, high] = draws.symmetric().unwrap();
    (high - low) / 2.0
}

/// JCGM 101:2008, 9.2.2: the sum of four standard normals.
#[test]
fn jcgm_101_additive_normal() {
    let draws = draw(0.95, |r| (0..4).map(|_| normal(r)).sum());
    assert!(draws.mean().abs() < 0.02 && (draws.u() - 2.0).abs() < 0.01);
    let half = symmetric_half(&draws);
    assert!((half - 3.92).abs() < 0.02, "{half}");
}

/// JCGM 101:2008, 9.2.3: four rectangular inputs of unit standard uncertainty; the exact end is
/// 3.879 41 (the sum of four uniforms in closed form, 9.2.3 gives 3.88).
#[test]
fn jcgm_101_additive_rectangular() {
    let a = 3f64.sqrt();
    let draws = draw(0.95, |r| (0..4).map(|_| between(r, -a, a)).sum());
    assert!((draws.u() - 2.0).abs() < 0.01);
    let half = symmetric_half(&draws);
    assert!((half - 3.87941).abs() < 0.02, "{half}");
}

/// JCGM 101:2008, 9.2.4: one of the rectangular inputs ten times as wide; the framework of
/// JCGM 100 gives 19.9, the propagation of distributions 17.0.
#[test]
fn jcgm_101_additive_with_one_dominant_rectangle() {
    let a = 3f64.sqrt();
    let draws = draw(0.95, |r| {
        (0..3).map(|_| between(r, -a, a)).sum::<f64>() + between(r, -10.0 * a, 10.0 * a)
    });
    assert!((draws.u() - 10.15).abs() < 0.03, "{}", draws.u());
    let half = symmetric_half(&draws);
    assert!((half - 17.0).abs() < 0.06, "{half}");
    assert!((1.96 * draws.u() - 19.9).abs() < 0.06);
}

/// JCGM 101:2008, 9.3: calibration of a mass of 100 g against a standard, air buoyancy in the
/// model's product of uncertain densities; mg. The law of propagation to first order gives 0.0539.
#[test]
fn jcgm_101_mass_calibration() {
    let draws = draw(0.95, |r| {
        let standard = 100_000.0 + 0.050 * normal(r);
        let difference = 1.234 + 0.020 * normal(r);
        let air = between(r, 1.10, 1.30);
        let weight = between(r, 7e3, 9e3);
        let reference = between(r, 7.95e3, 8.05e3);
        (standard + difference) * (1.0 + (air - 1.2) * (1.0 / weight - 1.0 / reference)) - 1e5
    });
    assert!((draws.mean() - 1.234).abs() < 0.001);
    assert!((draws.u() - 0.0754).abs() < 4e-4, "{}", draws.u());
    let [low, high] = draws.shortest().unwrap();
    assert!((high - low - 0.299).abs() < 0.003, "{low} {high}");
    assert!((low - 1.0834).abs() < 0.008 && (high - 1.3825).abs() < 0.008);
}

/// JCGM 101:2008, 9.5: gauge block calibration (table 10, from memory); nm. The framework of
/// JCGM 100 gives u = 32.
#[test]
fn jcgm_101_gauge_block() {
    let draws = draw(0.99, |r| {
        let standard = student(r, 50_000_623.0, 25.0, 18.0);
        let difference =
            student(r, 215.0, 6.0, 24.0) + student(r, 0.0, 4.0, 5.0) + student(r, 0.0, 7.0, 8.0);
        let expansion = between(r, 9.5e-6, 13.5e-6);
        let mean_temperature = -0.1 + 0.2 * normal(r);
        // Arc sine: a thermostat's cycle.
        let cycle = 0.5 * (std::f64::consts::TAU * r.random::<f64>()).sin();
        let expansion_difference = curvilinear_trapezoid(r, 1e-6, 0.1e-6);
        let temperature_difference = curvilinear_trapezoid(r, 0.05, 0.025);
        let temperature = mean_temperature + cycle;
        // Expansion coefficient and temperature are the standard's.
        standard * (1.0 + expansion * (temperature - temperature_difference))
            / (1.0 + (expansion + expansion_difference) * temperature)
            + difference
            - 50_000_000.0
    });
    assert!((draws.mean() - 838.0).abs() < 0.5, "{}", draws.mean());
    assert!((draws.u() - 36.0).abs() < 0.5, "{}", draws.u());
    let [low, high] = draws.symmetric().unwrap();
    assert!(
        (low - 744.0).abs() < 2.0 && (high - 932.0).abs() < 2.0,
        "{low} {high}"
    );
}
