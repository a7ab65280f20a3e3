//! Edge roughness and width roughness of a ridge or a trench: three standard deviations about the
//! best-fit straight line (for a width: about its mean and trend), freed of the noise.
//!
//! Noise adds to the variance of the edge's positions: `s^2 = s_measured^2 - s_noise^2`. What is
//! stated is the roughness of the line at large, of which the scan holds a piece: the interval
//! counts the independent pieces in it.

use super::line_width::common_flags;
use super::statistics;
use super::trace::{self, Feature, Trace};
use super::{Axis, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer};
use crate::error::Result;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series, coverage_factor};
use statrs::distribution::{ChiSquared, ContinuousCDF};

const ASSUMPTIONS: &str = "3 s of the edge (of the width) about its best-fit line at one height \
    fraction, noise taken off in squares; normal, stationary roughness; wavelengths from twice the \
    distance of the sections to the region's length. 3 s and noise subtraction: common practice; \
    independent pieces of a correlated series: common practice";

/// Fewest independent pieces for a value.
const FEWEST_PIECES: f64 = 4.0;

/// Measures the roughness of both edges, or of the width, at each height fraction: a line for each
/// and a line for its correlation length.
///
/// Errors of kind `Setting`: a region off the scan.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let fractions = if request.at.is_empty() {
        vec![0.5]
    } else {
        request.at.clone()
    };
    let kind = request.kind;
    let names: &[&str] = if kind == Kind::EdgeRoughness {
        &["edge roughness, left edge", "edge roughness, right edge"]
    } else {
        &["width roughness"]
    };
    let empty = |name: &str, at: f64| Dimension {
        at: Some(at),
        ..answer(request, kind, name, "nm", ASSUMPTIONS)
    };
    let feature = match Feature::find(input, request, &fractions)? {
        Ok(feature) => feature,
        Err(reason) => {
            let mut line = empty(names[0], fractions[0]);
            line.flags.push(format!("not measured: {reason}"));
            return Ok(vec![line]);
        }
    };
    progress.check()?;
    let common = common_flags(input, &feature.frame, &feature.layout, &feature.scan);
    let mut lines = Vec::new();
    for (i, &fraction) in fractions.iter().enumerate() {
        for (k, name) in names.iter().enumerate() {
            let mut line = empty(name, fraction);
            let mut length = empty(&format!("correlation length of the {name}"), fraction);
            line.flags.clone_from(&common);
            line.marks = feature.scan.marks(&feature.frame, i);
            let wanted = Wanted {
                i,
                edge: (kind == Kind::EdgeRoughness).then_some(k),
                fraction,
            };
            fill(&mut line, &mut length, input, &feature, wanted);
            lines.extend([line, length]);
        }
    }
    Ok(lines)
}

/// Which series: fraction number `i` of one edge, or of the width.
#[derive(Clone, Copy)]
struct Wanted {
    i: usize,
    edge: Option<usize>,
    fraction: f64,
}

/// Roughness of one series of positions.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Rough {
    /// Variance about the line, freed of what fitting it took off, nm^2.
    measured: f64,
    /// Variance by noise and its standard uncertainty, nm^2.
    noise: f64,
    noise_u: f64,
    /// Independent pieces for the mean and for the variance.
    pieces: f64,
    freedom: f64,
    /// Lag at which the autocorrelation freed of noise falls to 1/e, sections, and its standard
    /// uncertainty; `None` where it does not.
    length: Option<(f64, f64)>,
}

impl Rough {
    /// `positions` in nm, section by section, NaN where unknown; `propagated` the variance that
    /// the heights' noise gives each. `None` with fewer than 16 positions.
    fn of(positions: &[f64], propagated: f64) -> Option<Self> {
        let at: Vec<f64> = (0..positions.len()).map(|i| i as f64).collect();
        let (slope, offset) = statistics::line(&at, positions)?;
        let off: Vec<f64> = at
            .iter()
            .zip(positions)
            .map(|(x, p)| p - slope * x - offset)
            .collect();
        let off = statistics::clipped(&off, 6.0);
        let series = Series::of(&off)?;
        if series.count < 16 {
            return None;
        }
        let covariance = |lag: usize| {
            let products: Vec<f64> = off[lag..].iter().zip(&off).map(|(a, b)| a * b).collect();
            let mean = statistics::mean(&products);
            if mean.is_finite() { mean } else { 0.0 }
        };
        let variance = covariance(0);
        if !(variance > 0.0) {
            return None;
        }
        // Fourth differences see the part without correlation only; what the heights' noise does
        // to the edge cannot be more than either figure.
        let differences: Vec<f64> = off
            .windows(5)
            .map(|w| (w[0] - 4.0 * w[1] + 6.0 * w[2] - 4.0 * w[3] + w[4]).powi(2) / 70.0)
            .collect();
        let fine = statistics::mean(&differences);
        let (noise, noise_u) = if fine.is_finite() && fine < propagated {
            // The squared autocorrelations of fourth differences of white noise add to 2.63.
            let pieces = differences.len() as f64 / 2.63;
            (fine, fine * (2.0 / pieces.max(1.0)).sqrt())
        } else {
            (propagated, 0.15 * propagated)
        };
        // For the variance squares of the autocorrelation count (Bartlett, common practice).
        let mut squares = 0.0;
        for lag in 1..off.len() / 3 {
            let rho = covariance(lag) / variance;
            if rho <= 0.0 {
                break;
            }
            squares += rho * rho;
        }
        let freedom = series.count as f64 / (1.0 + 2.0 * squares);
        // A line takes two pieces' worth off the variance.
        let lost = (2.0 / series.effective).min(0.5);
        let measured = variance / (1.0 - lost);
        let mut rough = Self {
            measured,
            noise,
            noise_u,
            pieces: series.effective,
            freedom: (freedom - 1.0).max(1.0),
            length: None,
        };
        rough.length = rough.length_of(&covariance, off.len() / 3);
        Some(rough)
    }

    /// Variance freed of noise, nm^2; may be negative.
    fn variance(&self) -> f64 {
        self.measured - self.noise
    }

    fn length_of(&self, covariance: &dyn Fn(usize) -> f64, longest: usize) -> Option<(f64, f64)> {
        let variance = self.variance();
        if variance <= 0.0 {
            return None;
        }
        let target = (-1f64).exp();
        let lost = self.measured - covariance(0);
        let mut before = 1.0;
        for lag in 1..longest {
            let rho = (covariance(lag) + lost) / variance;
            if rho <= target {
                let fall = before - rho;
                let at = lag as f64 - 1.0 + (before - target) / fall;
                let doubt = (1.0 - target * target) / self.freedom.sqrt();
                // The slope at the crossing is about that of the chord from the origin.
                return Some((at, doubt * at / (1.0 - target)));
            }
            before = rho;
        }
        None
    }

    /// Standard uncertainty of the variance, nm^2.
    fn variance_u(&self) -> f64 {
        (2.0 * self.measured * self.measured / self.freedom + self.noise_u * self.noise_u).sqrt()
    }

    /// 95 % interval of the standard deviation: chi-square with the degrees of freedom that the
    /// variance freed of noise has (Welch-Satterthwaite).
    fn interval(&self) -> Option<(f64, f64)> {
        let variance = self.variance();
        let freedom = 2.0 * variance * variance / self.variance_u().powi(2);
        if variance <= 0.0 || freedom < 1.0 {
            return None;
        }
        let chi = ChiSquared::new(freedom).ok()?;
        let end = |p: f64| (variance * freedom / chi.inverse_cdf(p)).sqrt();
        Some((end(0.975), end(0.025)))
    }

    /// Upper end of the interval of the measured standard deviation: what the roughness cannot
    /// exceed where noise hides it.
    fn upper(&self) -> Option<f64> {
        let chi = ChiSquared::new(self.freedom).ok()?;
        Some((self.measured * self.freedom / chi.inverse_cdf(0.025)).sqrt())
    }
}

/// Roughness on one map.
fn rough_of(trace: &Trace, noise: f64, wanted: Wanted) -> Option<Rough> {
    // Noise s in heights moves a crossing by s times the lateral slope; interpolation between two
    // pixels averages it to 2/3 in variance over all places between them.
    let by_noise = |k: usize| {
        let slope = trace.walls[k].slope(wanted.fraction);
        // A wall that is a jump in the scan runs over the pixel in which it falls.
        let least = trace.pitch / trace.height;
        let slope = if slope.is_finite() { slope } else { 0.0 };
        2.0 / 3.0 * (noise * slope.max(least)).powi(2)
    };
    match wanted.edge {
        Some(k) => {
            let scale = trace.pitch * trace.cosine;
            let places: Vec<f64> = trace.edges[wanted.i][k].iter().map(|p| p * scale).collect();
            Rough::of(&places, by_noise(k))
        }
        None => Rough::of(&trace.widths(wanted.i), by_noise(0) + by_noise(1)),
    }
}

fn budget_of(rough: &Rough, calibration: f64, resolution: f64) -> Budget {
    let s = rough.variance().max(0.0).sqrt();
    // d(3 s) = 3 / (2 s) d(s^2)
    let sensitivity = 1.5 / s;
    let mut budget = Budget::new();
    budget.push(
        "axis calibration",
        calibration,
        Distribution::Normal,
        3.0 * s,
    );
    budget.add(Component {
        source: "length of edge in the scan (independent pieces)".to_owned(),
        u: rough.measured * (2.0 / rough.freedom).sqrt(),
        distribution: Distribution::Normal,
        sensitivity,
        degrees_of_freedom: Some(rough.freedom),
    });
    budget.push(
        "noise taken off",
        rough.noise_u,
        Distribution::Normal,
        sensitivity,
    );
    // Adds in squares: linear in it only where it is small.
    let pixel = (s * s + resolution).sqrt() - s;
    budget.push("pixel", pixel, Distribution::Rectangular, 3.0);
    budget
}

fn fill(
    line: &mut Dimension,
    length: &mut Dimension,
    input: &Input,
    feature: &Feature,
    wanted: Wanted,
) {
    let frame = &feature.frame;
    let calibration = match frame.axis {
        Axis::X => [input.calibration.x, input.calibration.y],
        Axis::Y => [input.calibration.y, input.calibration.x],
    };
    let Some(scanned) = rough_of(&feature.scan, frame.noise, wanted) else {
        let reason = "not measured: fewer than 16 sections cross this height, or all alike";
        line.flags.push(reason.to_owned());
        length.flags.push(reason.to_owned());
        return;
    };
    if scanned.pieces < FEWEST_PIECES {
        line.flags.push(format!(
            "the region holds only {:.1} independent pieces of edge: take a longer one",
            scanned.pieces
        ));
    }
    let resolution = (frame.pitch * frame.pitch / 12.0) / 16.0;
    // Distance of the sections along the line.
    let step = frame.spacing / feature.scan.cosine;
    let too_noisy = |rough: &Rough| {
        format!(
            "noise moves the edge by {:.2} nm, its scatter is {:.2} nm: the roughness is bounded \
             from above only",
            rough.noise.sqrt(),
            rough.measured.sqrt()
        )
    };
    if scanned.interval().is_some() {
        let budget = budget_of(&scanned, calibration[0], resolution);
        line.as_scanned = Some(Value {
            value: 3.0 * scanned.variance().sqrt(),
            u: Some(budget.combined(0.95).u),
        });
        line.budget = budget.into_components();
        length.as_scanned = scanned.length.map(|(lag, u)| Value {
            value: lag * step,
            u: Some(u * step),
        });
    } else {
        line.flags.push(too_noisy(&scanned));
    }
    let Some(correction) = &feature.correction else {
        trace::flag_lost(line, input);
        if length.as_scanned.is_none() {
            length.flags.push(no_length());
        }
        return;
    };
    let surface = &correction.surface;
    let Some(rough) = rough_of(surface, frame.noise, wanted) else {
        line.flags
            .push("no corrected value: the reconstruction has no such edge".to_owned());
        length.flags.push(no_length());
        return;
    };
    let given = &correction.given;
    let walls = wanted.edge.map_or(vec![0, 1], |k| vec![k]);
    let touched = given.identified
        && given
            .exercised_depth_nm
            .is_none_or(|d| wanted.fraction * surface.height <= d)
        && walls.iter().all(|&k| {
            surface.walls[k]
                .hold(&correction.outlines[k], wanted.fraction, given.height_u_nm)
                .touched
        });
    let interval = rough.interval();
    if let Some((low, high)) = interval {
        let budget = budget_of(&rough, calibration[0], resolution);
        let all = budget.combined(0.95);
        let value = 3.0 * rough.variance().sqrt();
        // The chi-square ends hold the sampling; what the pixels add to the variance and the
        // calibration are put outside.
        let k = coverage_factor(0.95, None);
        let outside = k * calibration[0] * value;
        let low = (low * low - k * resolution).max(0.0).sqrt();
        let high = (high * high + k * resolution).sqrt();
        line.corrected = Some(CorrectedValue {
            value: touched.then_some(value),
            u: touched.then_some(all.u),
            expanded: touched.then_some(all.expanded),
            k: touched.then_some(all.k),
            low: Some((3.0 * low - outside).max(0.0)),
            high: touched.then_some(3.0 * high + outside),
        });
        line.budget = budget.into_components();
    } else {
        line.flags.push(too_noisy(&rough));
        line.corrected = Some(CorrectedValue::between(
            Some(0.0),
            rough.upper().filter(|_| touched).map(|s| 3.0 * s),
        ));
    }
    let status = Some(if touched && interval.is_some() {
        Status::Touched
    } else {
        Status::Bounded
    });
    line.status = status;
    line.flags.dedup();
    if !touched {
        line.flags.push(
            "the tip did not touch the wall at this height, or is not known there: the scan shows \
             the roughness of the shoulder above, smoothed by the tip; a lower bound, taking the \
             wall to be as rough as its shoulder"
                .to_owned(),
        );
    }
    match rough.length.filter(|_| interval.is_some()) {
        Some((lag, u)) => {
            let u = (u * step).hypot(calibration[1] * lag * step);
            let k = coverage_factor(0.95, Some(rough.freedom));
            let value = lag * step;
            length.corrected = Some(CorrectedValue {
                value: touched.then_some(value),
                u: touched.then_some(u),
                expanded: touched.then_some(k * u),
                k: touched.then_some(k),
                low: touched.then_some((value - k * u).max(0.0)),
                high: touched.then_some(value + k * u),
            });
            length.status = status;
        }
        None => length.flags.push(no_length()),
    }
}

fn no_length() -> String {
    "no correlation length: noise hides it, or the autocorrelation does not fall to 1/e within a \
     third of the region"
        .to_owned()
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::SeedableRng;
    use rand_distr::{Distribution as _, StandardNormal};

    /// First-order autoregression of variance 1 with coefficient `a`, and white noise on it.
    fn series(a: f64, noise: f64, n: usize, seed: u64) -> Vec<f64> {
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(seed);
        let mut normal = move || -> f64 { StandardNormal.sample(&mut random) };
        let mut x = normal();
        (0..n)
            .map(|_| {
                x = a * x + (1.0 - a * a).sqrt() * normal();
                x + noise * normal()
            })
            .collect()
    }

    /// Variances add; a correlated series of variance 1 keeps it (common practice).
    #[test]
    fn noise_is_taken_off_in_squares() {
        let rough = Rough::of(&series(0.95, 0.5, 40_000, 3), 0.25).unwrap();
        assert!((rough.measured - 1.25).abs() < 0.06, "{rough:?}");
        assert!((rough.variance() - 1.0).abs() < 0.06, "{rough:?}");
    }

    /// `n / (1 + 2 sum a^2k) = n (1 - a^2) / (1 + a^2)` pieces for the variance, 1/e after
    /// `-1 / ln a` lags (common practice).
    #[test]
    fn pieces_and_correlation_length_of_an_autoregression() {
        let a: f64 = 0.9;
        let rough = Rough::of(&series(a, 0.0, 40_000, 4), 0.0).unwrap();
        let expected = 40_000.0 * (1.0 - a * a) / (1.0 + a * a);
        assert!((rough.freedom / expected - 1.0).abs() < 0.15, "{rough:?}");
        let (lag, _) = rough.length.unwrap();
        assert!((lag * -a.ln() - 1.0).abs() < 0.15, "{lag}");
    }

    #[test]
    fn the_interval_holds_the_truth_about_as_often_as_it_says() {
        let mut held = 0;
        for seed in 0..300 {
            let rough = Rough::of(&series(0.9, 0.3, 512, 100 + seed), 0.09).unwrap();
            let (low, high) = rough.interval().unwrap();
            held += usize::from((low..=high).contains(&1.0));
        }
        assert!((273..=299).contains(&held), "{held} of 300");
    }

    /// Widths of independent edges: `s_LWR = sqrt(2) s_LER` (common practice).
    #[test]
    fn the_width_of_independent_edges_is_rougher_by_root_two() {
        let (a, b) = (series(0.9, 0.0, 40_000, 7), series(0.9, 0.0, 40_000, 8));
        let widths: Vec<f64> = a.iter().zip(&b).map(|(a, b)| a + b).collect();
        let ratio =
            Rough::of(&widths, 0.0).unwrap().variance() / Rough::of(&a, 0.0).unwrap().variance();
        assert!((ratio - 2.0).abs() < 0.2, "{ratio}");
    }

    #[test]
    fn mere_noise_has_no_value_but_a_bound() {
        let mut random = rand_chacha::ChaCha8Rng::seed_from_u64(5);
        let white: Vec<f64> = (0..400)
            .map(|_| StandardNormal.sample(&mut random))
            .collect();
        let rough = Rough::of(&white, 1.2).unwrap();
        assert_eq!(rough.interval(), None);
        assert!(rough.upper().unwrap() >= 1.0);
        assert_eq!(Rough::of(&[1.0; 30], 0.0), None);
        assert_eq!(Rough::of(&white[..9], 0.0), None);
    }
}
