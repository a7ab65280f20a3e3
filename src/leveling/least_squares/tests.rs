use super::*;
use proptest::prelude::*;

// Data and certified values: NIST Statistical Reference Datasets, linear regression (public
// domain). The data were written down from memory and then proved: solved with 60 digits they
// reproduce every digit of the certified values.

/// Pairs (y, x).
const NORRIS: [(f64, f64); 36] = [
    (0.1, 0.2),
    (338.8, 337.4),
    (118.1, 118.2),
    (888.0, 884.6),
    (9.2, 10.1),
    (228.1, 226.5),
    (668.5, 666.3),
    (998.5, 996.3),
    (449.1, 448.6),
    (778.9, 777.0),
    (559.2, 558.2),
    (0.3, 0.4),
    (0.1, 0.6),
    (778.1, 775.5),
    (668.8, 666.9),
    (339.3, 338.0),
    (448.9, 447.5),
    (10.8, 11.6),
    (557.7, 556.0),
    (228.3, 228.1),
    (998.0, 995.8),
    (888.8, 887.6),
    (119.6, 120.2),
    (0.3, 0.3),
    (0.6, 0.3),
    (557.6, 556.8),
    (339.3, 339.1),
    (888.0, 887.2),
    (998.5, 999.0),
    (778.9, 779.0),
    (10.2, 11.1),
    (117.6, 118.3),
    (228.9, 229.2),
    (668.4, 669.1),
    (449.2, 448.9),
    (0.2, 0.5),
];

/// Pairs (y, x).
const PONTIUS: [(f64, f64); 40] = [
    (0.11019, 150000.0),
    (0.21956, 300000.0),
    (0.32949, 450000.0),
    (0.43899, 600000.0),
    (0.54803, 750000.0),
    (0.65694, 900000.0),
    (0.76562, 1050000.0),
    (0.87487, 1200000.0),
    (0.98292, 1350000.0),
    (1.09146, 1500000.0),
    (1.20001, 1650000.0),
    (1.30822, 1800000.0),
    (1.41599, 1950000.0),
    (1.52399, 2100000.0),
    (1.63194, 2250000.0),
    (1.73947, 2400000.0),
    (1.84646, 2550000.0),
    (1.95392, 2700000.0),
    (2.06128, 2850000.0),
    (2.16844, 3000000.0),
    (0.11052, 150000.0),
    (0.22018, 300000.0),
    (0.32939, 450000.0),
    (0.43886, 600000.0),
    (0.54798, 750000.0),
    (0.65739, 900000.0),
    (0.76596, 1050000.0),
    (0.87474, 1200000.0),
    (0.983, 1350000.0),
    (1.0915, 1500000.0),
    (1.20004, 1650000.0),
    (1.30818, 1800000.0),
    (1.41613, 1950000.0),
    (1.52408, 2100000.0),
    (1.63159, 2250000.0),
    (1.73965, 2400000.0),
    (1.84696, 2550000.0),
    (1.95445, 2700000.0),
    (2.06177, 2850000.0),
    (2.16829, 3000000.0),
];

/// Pairs (y, x).
const FILIP: [(f64, f64); 82] = [
    (0.8116, -6.860120914),
    (0.9072, -4.324130045),
    (0.9052, -4.358625055),
    (0.9039, -4.358426747),
    (0.8053, -6.955852379),
    (0.8377, -6.661145254),
    (0.8667, -6.355462942),
    (0.8809, -6.118102026),
    (0.7975, -7.115148017),
    (0.8162, -6.815308569),
    (0.8515, -6.519993057),
    (0.8766, -6.204119983),
    (0.8885, -5.853871964),
    (0.8859, -6.109523091),
    (0.8959, -5.79832982),
    (0.8913, -5.482672118),
    (0.8959, -5.171791386),
    (0.8971, -4.851705903),
    (0.9021, -4.517126416),
    (0.909, -4.143573228),
    (0.9139, -3.709075441),
    (0.9199, -3.499489089),
    (0.8692, -6.300769497),
    (0.8872, -5.953504836),
    (0.89, -5.642065153),
    (0.891, -5.031376979),
    (0.8977, -4.680685696),
    (0.9035, -4.329846955),
    (0.9078, -3.928486195),
    (0.7675, -8.56735134),
    (0.7705, -8.363211311),
    (0.7713, -8.107682739),
    (0.7736, -7.823908741),
    (0.7775, -7.522878745),
    (0.7841, -7.218819279),
    (0.7971, -6.920818754),
    (0.8329, -6.628932138),
    (0.8641, -6.323946875),
    (0.8804, -5.991399828),
    (0.7668, -8.781464495),
    (0.7633, -8.663140179),
    (0.7678, -8.473531488),
    (0.7697, -8.247337057),
    (0.77, -7.971428747),
    (0.7749, -7.676129393),
    (0.7796, -7.352812702),
    (0.7897, -7.072065318),
    (0.8131, -6.774174009),
    (0.8498, -6.478861916),
    (0.8741, -6.159517513),
    (0.8061, -6.835647144),
    (0.846, -6.53165267),
    (0.8751, -6.224098421),
    (0.8856, -5.910094889),
    (0.8919, -5.598599459),
    (0.8934, -5.290645224),
    (0.894, -4.974284616),
    (0.8957, -4.64454848),
    (0.9047, -4.290560426),
    (0.9129, -3.885055584),
    (0.9209, -3.408378962),
    (0.9219, -3.13200249),
    (0.7739, -8.726767166),
    (0.7681, -8.66695597),
    (0.7665, -8.511026475),
    (0.7703, -8.165388579),
    (0.7702, -7.886056648),
    (0.7761, -7.588043762),
    (0.7809, -7.283412422),
    (0.7961, -6.995678626),
    (0.8253, -6.691862621),
    (0.8602, -6.392544977),
    (0.8809, -6.067374056),
    (0.8301, -6.684029655),
    (0.8664, -6.378719832),
    (0.8834, -6.065855188),
    (0.8898, -5.752272167),
    (0.8964, -5.132414673),
    (0.8963, -4.811352704),
    (0.9074, -4.098269308),
    (0.9119, -3.66174277),
    (0.9228, -3.2644011),
];

fn near(value: f64, certified: f64, relative: f64) {
    assert!(
        (value - certified).abs() <= relative * certified.abs(),
        "{value:e} is not {certified:e}"
    );
}

fn polynomial(data: &[(f64, f64)], order: usize) -> (Vec<f64>, Polynomial) {
    let y: Vec<f64> = data.iter().map(|d| d.0).collect();
    let x: Vec<f64> = data.iter().map(|d| d.1).collect();
    let fit = Polynomial::fit(&x, &y, None, order).unwrap();
    (fit.plain_coefficients(), fit)
}

#[test]
fn nist_norris() {
    let (b, fit) = polynomial(&NORRIS, 1);
    near(b[0], -0.262323073774029, 1e-12);
    near(b[1], 1.00211681802045, 1e-13);
    near(fit.fit.residual_sd().unwrap(), 0.884796396144373, 1e-12);
    let mean = NORRIS.iter().map(|d| d.0).sum::<f64>() / 36.0;
    let total: f64 = NORRIS.iter().map(|d| (d.0 - mean).powi(2)).sum();
    near(1.0 - fit.fit.residual_sum / total, 0.999993745883712, 1e-14);
    near(fit.at(100.0), b[0] + 100.0 * b[1], 1e-13);
}

#[test]
fn nist_pontius() {
    let (b, fit) = polynomial(&PONTIUS, 2);
    near(b[0], 0.673565789473684e-3, 1e-10);
    near(b[1], 0.732059160401003e-6, 1e-12);
    near(b[2], -0.316081871345029e-14, 1e-10);
    near(fit.fit.residual_sd().unwrap(), 0.205177424076185e-3, 1e-10);
}

#[test]
fn nist_filip_of_degree_ten() {
    let (b, fit) = polynomial(&FILIP, 10);
    near(b[0], -1467.48961422980, 1e-8);
    near(b[10], -0.402962525080404e-4, 1e-8);
    near(fit.fit.residual_sd().unwrap(), 0.334801051324544e-2, 1e-10);
}

#[test]
fn nist_wampler1() {
    let data: Vec<(f64, f64)> = (0..21)
        .map(|x| ((0..6).map(|k| f64::from(x).powi(k)).sum(), f64::from(x)))
        .collect();
    let (b, _) = polynomial(&data, 5);
    for c in b {
        near(c, 1.0, 1e-9);
    }
}

/// JCGM 100:2008, H.3: calibration of a thermometer (data from memory; they reproduce the result).
#[test]
fn gum_h3_straight_line_with_covariance() {
    let t = [
        21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511,
    ];
    let b = [
        -0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160,
    ];
    let line = fit(2, &b, None, |i, row| {
        row[0] = 1.0;
        row[1] = t[i] - 20.0;
    })
    .unwrap();
    let v = line.covariance().unwrap();
    let (u0, u1) = (v[(0, 0)].sqrt(), v[(1, 1)].sqrt());
    assert!((line.coefficients[0] + 0.1712).abs() < 5e-5);
    assert!((line.coefficients[1] - 0.00218).abs() < 5e-6);
    assert!((u0 - 0.0029).abs() < 5e-5 && (u1 - 0.00067).abs() < 5e-6);
    assert!((v[(0, 1)] / (u0 * u1) + 0.930).abs() < 5e-4);
    assert!((line.residual_sd().unwrap() - 0.0035).abs() < 5e-5);
}

/// Closed form: a weighted mean has the variance one over the sum of the weights.
#[test]
fn a_weighted_mean_and_its_variance() {
    let mean = fit(1, &[1.0, 4.0, 100.0], Some(&[3.0, 1.0, 0.0]), |_, row| {
        row[0] = 1.0;
    })
    .unwrap();
    near(mean.coefficients[0], 1.75, 1e-14);
    near(mean.inverse_normal[(0, 0)], 0.25, 1e-14);
    assert_eq!(mean.degrees_of_freedom, 1);
    near(mean.condition, 1.0, 1e-12);
}

#[test]
fn what_is_not_determined_is_an_error() {
    let few = Polynomial::fit(&[1.0, 2.0], &[1.0, 2.0], None, 2).unwrap_err();
    assert_eq!(few.kind(), ErrorKind::Data);
    assert!(few.to_string().contains("3 coefficients"), "{few}");
    let same = Polynomial::fit(&[5.0; 8], &[1.0; 8], None, 1).unwrap_err();
    assert_eq!(same.kind(), ErrorKind::Data);
    assert!(Polynomial::fit(&[], &[], None, 0).is_err());
    assert!(Polynomial::fit(&[f64::NAN; 4], &[1.0; 4], None, 1).is_err());
    let exact = Polynomial::fit(&[1.0, 2.0], &[3.0, 5.0], None, 1).unwrap();
    assert!(exact.fit.residual_sd().is_none() && exact.fit.covariance().is_none());
}

proptest! {
    /// Law: points on a polynomial give it back, however far from the origin, and merging parts
    /// is the same as adding all.
    #[test]
    fn exact_points_give_the_polynomial_back(
        c in prop::collection::vec(-2.0..2.0f64, 1..5),
        shift in -1e6..1e6f64,
        n in 12usize..300,
    ) {
        let x: Vec<f64> = (0..n).map(|i| shift + i as f64).collect();
        let truth = |x: f64| {
            let u = (x - shift) / n as f64;
            c.iter().rev().fold(0.0, |s, a| s * u + a)
        };
        let y: Vec<f64> = x.iter().map(|&x| truth(x)).collect();
        let fit = Polynomial::fit(&x, &y, None, c.len() - 1).unwrap();
        for &x in &x {
            prop_assert!((fit.at(x) - truth(x)).abs() < 1e-8);
        }
        let line = |i: usize| [1.0, i as f64 / n as f64];
        let mut whole = Accumulator::new(2);
        let mut parts = [Accumulator::new(2), Accumulator::new(2)];
        for (i, &y) in y.iter().enumerate() {
            whole.add(&line(i), y, 1.0);
            parts[usize::from(i > n / 3)].add(&line(i), y, 1.0);
        }
        let [mut one, other] = parts;
        one.merge(other);
        let (a, b) = (whole.solve().unwrap(), one.solve().unwrap());
        prop_assert_eq!(a.degrees_of_freedom, b.degrees_of_freedom);
        for (a, b) in a.coefficients.iter().zip(&b.coefficients) {
            prop_assert!((a - b).abs() < 1e-10);
        }
        prop_assert!((a.residual_sum - b.residual_sum).abs() < 1e-9);
    }
}

/// A plane and a bivariate cubic by numpy.linalg.lstsq (tests/python_golden.py).
#[test]
fn planes_and_cubics_agree_with_numpy() {
    let read = |name: &str| -> ndarray::Array2<f64> {
        let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR"));
        ndarray_npy::read_npy(path.join(format!("tests/golden/lstsq-{name}.npy"))).unwrap()
    };
    let (rows, expected) = (read("rows"), read("coefficients"));
    let heights = rows.column(10).to_vec();
    let terms: [&[usize]; 2] = [&[0, 1, 4], &[0, 1, 2, 3, 4, 5, 6, 7, 8, 9]];
    for (number, terms) in terms.iter().enumerate() {
        let fitted = fit(terms.len(), &heights, None, |i, row| {
            for (entry, &term) in row.iter_mut().zip(*terms) {
                *entry = rows[[i, term]];
            }
        })
        .unwrap();
        for (c, &term) in fitted.coefficients.iter().zip(*terms) {
            let theirs = expected[[number, term]];
            assert!(
                (c - theirs).abs() < 1e-10 * theirs.abs().max(1.0),
                "{c} {theirs}"
            );
        }
    }
}
