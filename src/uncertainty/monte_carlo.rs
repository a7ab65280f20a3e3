//! Propagation of distributions by a Monte Carlo method. Source: JCGM 101:2008.
//!
//! Every trial draws from its own stream of the seed (ChaCha8; the stream's number is the trial's),
//! so that the same seed gives the same bytes for any number of threads.

use super::{Component, Distribution};
use crate::error::{Error, ErrorKind, Result};
use crate::progress::Progress;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{StandardNormal, StudentT};
use rayon::prelude::*;
use std::sync::atomic::{AtomicUsize, Ordering};

/// How many trials are made.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Trials {
    /// So many.
    Fixed(usize),
    /// Blocks of trials until mean, u and both ends of the interval of every output are stable to
    /// within the numerical tolerance of `digits` significant digits of u (JCGM 101:2008, 7.9), or
    /// until `most` trials are made.
    Adaptive {
        /// Significant digits of u, 1 or 2 in practice.
        digits: u32,
        /// Give up after so many.
        most: usize,
    },
}

/// What to propagate with.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Settings {
    /// How many trials.
    pub trials: Trials,
    /// Seed of all draws.
    pub seed: u64,
    /// Coverage probability of the intervals, 0.95 for 95 %.
    pub coverage: f64,
}

/// The distribution of every output.
#[derive(Debug, Clone, PartialEq)]
pub struct Propagated {
    /// In the order of the model's outputs.
    pub outputs: Vec<Draws>,
    /// Trials made.
    pub trials: usize,
    /// Whether an adaptive run came to rest; `None` for a fixed number of trials.
    pub converged: Option<bool>,
}

/// The values drawn for one output.
#[derive(Debug, Clone, PartialEq)]
pub struct Draws {
    /// Finite values in increasing order.
    sorted: Vec<f64>,
    coverage: f64,
    /// Trials that gave no finite value.
    pub missing: usize,
}

/// Half a unit in the last of `digits` significant digits of `u` (JCGM 101:2008, 7.9.2); 0 for 0.
pub fn numerical_tolerance(u: f64, digits: u32) -> f64 {
    if !(u > 0.0 && u.is_finite()) {
        return 0.0;
    }
    let last = |u: f64| u.log10().floor() as i32 - digits.max(1) as i32 + 1;
    // 0.0996 to two digits is 0.10: the rounding may reach the next decade.
    let unit = 10f64.powi(last(u));
    0.5 * 10f64.powi(last((u / unit).round() * unit * (1.0 + 1e-12)))
}

/// Draws `trial` as often as the settings say: it fills one figure per output, from the generator
/// it is given and nothing else random. What is not finite counts as missing.
///
/// Errors: kind `Setting` (no trials, a coverage outside 0..1), `Cancelled`, and what `trial`
/// returns.
pub fn propagate(
    settings: &Settings,
    outputs: usize,
    trial: impl Fn(&mut ChaCha8Rng, &mut [f64]) -> Result<()> + Sync,
    progress: &Progress,
) -> Result<Propagated> {
    let coverage = settings.coverage;
    let (most, block) = match settings.trials {
        Trials::Fixed(count) => (count, count),
        // JCGM 101:2008, 7.9.4 b).
        Trials::Adaptive { most, .. } => {
            let enough = (100.0 / (1.0 - coverage)).ceil().max(1e4) as usize;
            (most, enough.min(most))
        }
    };
    if !(coverage > 0.0 && coverage < 1.0) || block == 0 {
        return Err(Error::new(
            ErrorKind::Setting,
            format!("a Monte Carlo run of {most} trials for a coverage of {coverage}"),
        )
        .remedy("Give at least one trial and a coverage between 0 and 1, 0.95 for 95 %"));
    }
    let done = AtomicUsize::new(0);
    let seeded = ChaCha8Rng::seed_from_u64(settings.seed);
    let draw = |from: usize, count: usize| -> Result<Vec<Vec<f64>>> {
        (from..from + count)
            .into_par_iter()
            .map(|number| {
                progress.check()?;
                let mut random = seeded.clone();
                random.set_stream(number as u64);
                let mut values = vec![f64::NAN; outputs];
                trial(&mut random, &mut values)?;
                let made = done.fetch_add(1, Ordering::Relaxed) + 1;
                progress.report(made as f32 / most as f32);
                Ok(values)
            })
            .collect()
    };
    let mut all: Vec<Vec<f64>> = Vec::new();
    let mut blocks: Vec<Vec<Draws>> = Vec::new();
    let mut converged = None;
    while all.len() + block <= most {
        let drawn = draw(all.len(), block)?;
        if let Trials::Adaptive { digits, .. } = settings.trials {
            blocks.push(gather(&drawn, outputs, coverage));
            all.extend(drawn);
            let together = gather(&all, outputs, coverage);
            let rests = blocks.len() > 1
                && (0..outputs).all(|k| {
                    let tolerance = numerical_tolerance(together[k].u(), digits);
                    let parts: Vec<&Draws> = blocks.iter().map(|b| &b[k]).collect();
                    stable(&parts, tolerance)
                });
            converged = Some(rests);
            if rests {
                break;
            }
        } else {
            all = drawn;
            break;
        }
    }
    Ok(Propagated {
        outputs: gather(&all, outputs, coverage),
        trials: all.len(),
        converged,
    })
}

fn gather(trials: &[Vec<f64>], outputs: usize, coverage: f64) -> Vec<Draws> {
    (0..outputs)
        .map(|k| Draws::new(trials.iter().map(|t| t[k]).collect(), coverage))
        .collect()
}

/// Whether twice the standard deviation of the mean over the blocks of every figure is within the
/// tolerance (JCGM 101:2008, 7.9.4 e to h).
fn stable(blocks: &[&Draws], tolerance: f64) -> bool {
    let n = blocks.len() as f64;
    let figures = |d: &Draws| {
        let [low, high] = d.symmetric().unwrap_or([f64::NAN; 2]);
        [d.mean(), d.u(), low, high]
    };
    let rows: Vec<[f64; 4]> = blocks.iter().map(|d| figures(d)).collect();
    (0..4).all(|i| {
        let mean = rows.iter().map(|r| r[i]).sum::<f64>() / n;
        let squares: f64 = rows.iter().map(|r| (r[i] - mean).powi(2)).sum();
        2.0 * (squares / (n * (n - 1.0))).sqrt() <= tolerance
    })
}

impl Draws {
    /// Sorts `values`; those that are not finite are counted as missing.
    pub fn new(values: Vec<f64>, coverage: f64) -> Self {
        let all = values.len();
        let mut sorted: Vec<f64> = values.into_iter().filter(|v| v.is_finite()).collect();
        sorted.sort_unstable_by(f64::total_cmp);
        Self {
            missing: all - sorted.len(),
            sorted,
            coverage,
        }
    }

    /// Number of finite values.
    pub fn count(&self) -> usize {
        self.sorted.len()
    }

    /// Mean; NaN without values.
    pub fn mean(&self) -> f64 {
        self.sorted.iter().sum::<f64>() / self.count() as f64
    }

    /// Standard deviation; NaN with fewer than two values.
    pub fn u(&self) -> f64 {
        let mean = self.mean();
        let squares: f64 = self.sorted.iter().map(|v| (v - mean).powi(2)).sum();
        if self.count() > 1 {
            (squares / (self.count() - 1) as f64).sqrt()
        } else {
            f64::NAN
        }
    }

    /// How many order statistics an interval spans: `p M` to the next integer, 7.7.1.
    fn span(&self) -> Option<usize> {
        let q = (self.coverage * self.count() as f64 + 0.5).floor() as usize;
        (q >= 1 && q < self.count()).then_some(q)
    }

    /// The probabilistically symmetric coverage interval, 7.7.2; `None` with too few values.
    pub fn symmetric(&self) -> Option<[f64; 2]> {
        let q = self.span()?;
        // Ranks counted from 1.
        let r = (self.count() - q).div_ceil(2);
        Some([self.sorted[r - 1], self.sorted[r + q - 1]])
    }

    /// The shortest coverage interval, 7.7.4; `None` with too few values.
    pub fn shortest(&self) -> Option<[f64; 2]> {
        let q = self.span()?;
        (0..self.count() - q)
            .map(|i| [self.sorted[i], self.sorted[i + q]])
            .min_by(|a, b| (a[1] - a[0]).total_cmp(&(b[1] - b[0])))
    }

    /// Standard uncertainties of the two ends of the symmetric interval from the finite number of
    /// trials: half the distance of the order statistics one binomial standard deviation
    /// `sqrt(M q (1 - q))` to each side of the end's rank (common practice).
    pub fn doubt_of_ends(&self) -> Option<[f64; 2]> {
        let q = self.span()?;
        let last = self.count() - 1;
        let r = (self.count() - q).div_ceil(2) - 1;
        let tail = (1.0 - self.coverage) / 2.0;
        let step = ((self.count() as f64 * tail * (1.0 - tail)).sqrt().ceil() as usize).max(1);
        let half = |rank: usize| {
            let (from, to) = (rank.saturating_sub(step), (rank + step).min(last));
            // Where one side is cut off by the outermost value, the other stands for both.
            (self.sorted[to] - self.sorted[from]) / (to - from) as f64 * step as f64
        };
        Some([half(r), half(r + q)])
    }
}

impl Component {
    /// One draw of the contribution to the result, about 0: the input's distribution (JCGM
    /// 101:2008, 6.4) times the sensitivity. Normal with degrees of freedom: Student's t. A bound
    /// on one side: from 0 to `sqrt 3 u`, all places equally likely.
    pub fn draw(&self, random: &mut ChaCha8Rng) -> f64 {
        let unit = match self.distribution {
            Distribution::Normal => match self.degrees_of_freedom.map(StudentT::new) {
                Some(Ok(student)) => random.sample(student),
                _ => random.sample(StandardNormal),
            },
            Distribution::Rectangular => 3f64.sqrt() * (2.0 * random.random::<f64>() - 1.0),
            Distribution::Triangular => {
                6f64.sqrt() * (random.random::<f64>() - random.random::<f64>())
            }
            Distribution::OneSided => 3f64.sqrt() * random.random::<f64>(),
        };
        unit * self.u * self.sensitivity
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn normal(settings: &Settings) -> Propagated {
        let trial = |random: &mut ChaCha8Rng, out: &mut [f64]| {
            out[0] = random.sample(StandardNormal);
            out[1] = out[0] * out[0];
            Ok(())
        };
        propagate(settings, 2, trial, &Progress::new()).unwrap()
    }

    const FIXED: Settings = Settings {
        trials: Trials::Fixed(20_000),
        seed: 7,
        coverage: 0.95,
    };

    #[test]
    fn the_same_seed_gives_the_same_bytes_on_any_number_of_threads() {
        let on = |threads: usize| {
            rayon::ThreadPoolBuilder::new()
                .num_threads(threads)
                .build()
                .unwrap()
                .install(|| normal(&FIXED))
        };
        let one = on(1);
        assert_eq!(one, on(3));
        let other = normal(&Settings { seed: 8, ..FIXED });
        assert_ne!(one, other);
    }

    /// Closed forms: the normal's interval, and chi-squared of one degree of freedom: mean 1,
    /// variance 2, shortest interval from 0 to 1.95996^2.
    #[test]
    fn a_normal_and_its_square() {
        let all = normal(&Settings {
            trials: Trials::Fixed(400_000),
            ..FIXED
        });
        let [low, high] = all.outputs[0].symmetric().unwrap();
        assert!((low + 1.96).abs() < 0.02 && (high - 1.96).abs() < 0.02);
        let square = &all.outputs[1];
        assert!((square.mean() - 1.0).abs() < 0.01 && (square.u() - 2f64.sqrt()).abs() < 0.02);
        let [low, high] = square.shortest().unwrap();
        assert!(low < 1e-3 && (high - 3.8415).abs() < 0.06, "{low} {high}");
        let [low, high] = square.symmetric().unwrap();
        assert!((low - 0.000982).abs() < 1e-4 && (high - 5.0239).abs() < 0.08);
    }

    /// The doubt of an end against the scatter of that end over many seeds.
    #[test]
    fn the_doubt_of_the_ends_is_their_scatter() {
        let ends: Vec<([f64; 2], [f64; 2])> = (0..200)
            .map(|seed| {
                let all = normal(&Settings {
                    trials: Trials::Fixed(400),
                    seed,
                    ..FIXED
                });
                let draws = &all.outputs[0];
                (draws.symmetric().unwrap(), draws.doubt_of_ends().unwrap())
            })
            .collect();
        for side in 0..2 {
            let values: Vec<f64> = ends.iter().map(|e| e.0[side]).collect();
            let scatter = Draws::new(values, 0.95).u();
            let told = ends.iter().map(|e| e.1[side]).sum::<f64>() / 200.0;
            assert!((0.7..1.5).contains(&(told / scatter)), "{told} {scatter}");
        }
    }

    /// JCGM 101:2008, 7.9.2, examples 1 and 2: 0.000 35 g with two digits gives 0.000 005 g,
    /// 2 K with one digit gives 0.5 K.
    #[test]
    fn tolerances_of_the_guide() {
        assert!((numerical_tolerance(0.00035, 2) / 5e-6 - 1.0).abs() < 1e-9);
        assert!((numerical_tolerance(2.0, 1) / 0.5 - 1.0).abs() < 1e-9);
        assert!((numerical_tolerance(0.0996, 2) / 0.005 - 1.0).abs() < 1e-9);
        assert_eq!(numerical_tolerance(0.0, 1), 0.0);
    }

    #[test]
    fn an_adaptive_run_rests_or_says_that_it_does_not() {
        let adaptive = |digits, most| Settings {
            trials: Trials::Adaptive { digits, most },
            ..FIXED
        };
        let rough = normal(&adaptive(1, 2_000_000));
        assert_eq!(rough.converged, Some(true));
        assert!(rough.trials >= 20_000 && rough.trials < 2_000_000);
        let never = normal(&adaptive(4, 30_000));
        assert_eq!((never.converged, never.trials), (Some(false), 30_000));
    }

    /// Every distribution has its component's standard uncertainty, a bound its root mean square.
    #[test]
    fn components_are_drawn_with_their_uncertainty() {
        for (distribution, freedom) in [
            (Distribution::Normal, None),
            (Distribution::Rectangular, None),
            (Distribution::Triangular, None),
            (Distribution::OneSided, None),
        ] {
            let component = Component {
                source: String::new(),
                u: 0.5,
                distribution,
                sensitivity: -3.0,
                degrees_of_freedom: freedom,
            };
            let trial = |random: &mut ChaCha8Rng, out: &mut [f64]| {
                out[0] = component.draw(random).powi(2);
                Ok(())
            };
            let all = propagate(&FIXED, 1, trial, &Progress::new()).unwrap();
            let rms = all.outputs[0].mean().sqrt();
            assert!((rms / 1.5 - 1.0).abs() < 0.03, "{distribution:?}: {rms}");
        }
    }

    #[test]
    fn missing_values_bad_settings_and_cancelling() {
        let progress = Progress::new();
        let some = |random: &mut ChaCha8Rng, out: &mut [f64]| {
            let x: f64 = random.random();
            out[0] = if x < 0.25 { f64::NAN } else { x };
            Ok(())
        };
        let draws = propagate(&FIXED, 1, some, &progress).unwrap();
        let missing = draws.outputs[0].missing as f64 / 20_000.0;
        assert!((missing - 0.25).abs() < 0.02);
        let none = Settings {
            trials: Trials::Fixed(0),
            ..FIXED
        };
        assert!(propagate(&none, 1, some, &progress).is_err());
        assert_eq!(Draws::new(vec![1.0], 0.95).symmetric(), None);
        progress.cancel();
        assert!(
            propagate(&FIXED, 1, some, &progress)
                .unwrap_err()
                .is_cancelled()
        );
    }
}
