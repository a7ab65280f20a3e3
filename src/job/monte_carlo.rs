//! The whole chain, drawn many times: noise, levelling, tip, reconstruction, dimension.
//! Source of the method: JCGM 101:2008; of the way to its base: the parametric bootstrap (B. Efron,
//! Ann. Statist. 7, 1 (1979), from memory).
//!
//! **Base.** A scan that already holds noise must not be given it twice. So the base is a surface
//! whose dimensions are known: the reconstruction, and its scan by the tip (the opening of the
//! scan), which erosion turns back into that very surface. What noise the opening kept is measured,
//! and only the rest up to the scan's own noise is drawn: trials are as noisy as the scan.
//!
//! **Draw.** To that scan come white noise and the tilt that was taken off. It is levelled as the
//! job says, eroded with a tip drawn between the sharper and the blunter one of the band (or moved
//! by its stated uncertainty), and measured. What comes out minus the known dimension of the base
//! is the error that the chain made; taken off the corrected value it is one draw of the truth.
//! What the chain cannot draw anew (calibration, pixel, the roughness of edges along the line) is
//! drawn from the budget of the base. One-sided bounds are added outside, as in the budget.

use super::spec::{JobFile, MonteCarloSpec};
use super::stages::{Outcome, TipResult, input, measure_one, scanner};
use crate::dimensions::{Corrected, Dimension, Input, Kind, MonteCarlo, Scanner};
use crate::error::Result;
use crate::heightmap::HeightMap;
use crate::leveling::{self, Leveled};
use crate::morphology;
use crate::progress::Progress;
use crate::tip::Tip;
use crate::uncertainty::monte_carlo::{Settings, Trials, numerical_tolerance, propagate};
use crate::uncertainty::{Budget, Distribution};
use ndarray::{Array2, Zip};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::StandardNormal;

const COVERAGE: f64 = 0.95;

/// `measured` with a second interval beside each corrected value, and a flag where it disagrees.
///
/// Dimensions without a corrected value get none. The same seed gives the same bytes for any
/// number of threads. Errors: of the stages, `Cancelled`.
pub(super) fn draw(
    level: &Leveled,
    outcome: &Outcome,
    spec: &JobFile,
    drawn: &MonteCarloSpec,
    measured: &[Dimension],
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let mut lines = measured.to_vec();
    let given = input(level, outcome, spec);
    let (Some(corrected), Some(tip)) = (given.corrected, outcome.tip.as_deref()) else {
        return Ok(lines);
    };
    let chain = Chain::new(
        level,
        &given,
        scanner(outcome),
        corrected,
        tip,
        spec,
        progress,
    )?;
    let base = chain.measure(
        &chain.base,
        Some(chain.left_noise),
        chain.with(&tip.tip, corrected.surface),
    )?;
    // Each corrected value with the line of the base that it is compared with.
    let pairs: Vec<(usize, Dimension)> = lines
        .iter()
        .enumerate()
        .filter(|(_, line)| value(line).is_some())
        .filter_map(|(i, line)| Some((i, same(line, &base)?.clone())))
        .collect();
    let settings = Settings {
        trials: Trials::Fixed(drawn.trials),
        seed: drawn.seed,
        coverage: COVERAGE,
    };
    let trial = |random: &mut ChaCha8Rng, out: &mut [f64]| {
        let found = chain.trial(random)?;
        for (out, (i, known)) in out.iter_mut().zip(&pairs) {
            let here = same(known, &found).and_then(value);
            if let (Some(here), Some(known_at), Some(best)) =
                (here, value(known), value(&lines[*i]))
            {
                *out = best - (here - known_at) + redrawn(known, random);
            }
        }
        Ok(())
    };
    let all = propagate(&settings, pairs.len(), trial, progress)?;
    for ((i, _), draws) in pairs.iter().zip(&all.outputs) {
        let line = &mut lines[*i];
        let (below, above) = room(line);
        let (Some([low, high]), Some(shortest), Some(doubt)) =
            (draws.symmetric(), draws.shortest(), draws.doubt_of_ends())
        else {
            line.flags.push(format!(
                "no Monte Carlo interval: only {} of {} trials gave this value",
                draws.count(),
                all.trials
            ));
            continue;
        };
        let u = draws.u();
        let tolerance = numerical_tolerance(u, 1) + 2.0 * doubt[0].max(doubt[1]);
        let (low, high) = (low - below, high + above);
        let budget = line.corrected.and_then(|c| c.low.zip(c.high));
        let agrees = budget.map(|(a, b)| {
            // Intervals of lengths end at 0, those of differences may go below.
            let low = if a < 0.0 { low } else { low.max(0.0) };
            (a - low).abs() <= tolerance && (b - high).abs() <= tolerance
        });
        if agrees == Some(false) {
            line.flags.push(format!(
                "Monte Carlo through the whole chain gives {low:.3} to {high:.3} {}, further from \
                 the budget's interval than the tolerance of {tolerance:.3}",
                line.unit
            ));
        }
        if draws.missing > 0 {
            line.flags.push(format!(
                "{} of {} Monte Carlo trials gave no such value",
                draws.missing, all.trials
            ));
        }
        line.evidence.monte_carlo = Some(MonteCarlo {
            trials: all.trials,
            count: draws.count(),
            mean: draws.mean(),
            u,
            low,
            high,
            shortest_low: shortest[0] - below,
            shortest_high: shortest[1] + above,
            tolerance,
            agrees,
        });
    }
    Ok(lines)
}

struct Chain<'a> {
    input: &'a Input<'a>,
    scanner: Scanner,
    corrected: Corrected<'a>,
    tip: &'a TipResult,
    spec: &'a JobFile,
    leveling: leveling::Settings,
    /// The noise-poor scan of the reconstruction.
    base: HeightMap,
    /// The base with the tilt that levelling took off.
    tilted: HeightMap,
    /// White noise that the base still has, nm.
    left_noise: f64,
    /// White noise to draw, nm.
    noise: f64,
    /// Answers a cancel within a trial.
    quiet: Progress,
}

impl<'a> Chain<'a> {
    fn new(
        level: &Leveled,
        input: &'a Input<'a>,
        scanner: Scanner,
        corrected: Corrected<'a>,
        tip: &'a TipResult,
        spec: &'a JobFile,
        progress: &Progress,
    ) -> Result<Self> {
        // Reports of the single steps would run over each other: those of the trials count.
        let quiet = progress.silent();
        let scan = input.scan;
        let mut heights = morphology::dilate(corrected.surface.heights(), tip.tip.shape(), &quiet)?;
        Zip::from(&mut heights)
            .and(scan.heights())
            .for_each(|z, s| {
                if s.is_nan() {
                    *z = f32::NAN;
                }
            });
        let base = scan.with_heights(heights, "scan of the reconstruction by the tip");
        let left_noise = leveling::noise(&base).unwrap_or(0.0);
        let noise = level.noise_nm.unwrap_or(0.0);
        let pitch = base.pitch();
        let tilted = Array2::from_shape_fn(base.heights().dim(), |(r, c)| {
            let (x, y) = (c as f64 * pitch.x, r as f64 * pitch.y);
            base.heights()[[r, c]] + (level.slope[0] * x + level.slope[1] * y) as f32
        });
        Ok(Self {
            tilted: base.with_heights(tilted, "tilted"),
            noise: missing_noise(&base, noise),
            base,
            left_noise,
            leveling: spec.level.settings()?,
            input,
            scanner,
            corrected,
            tip,
            spec,
            quiet,
        })
    }

    fn measure<'b>(
        &self,
        scan: &'b HeightMap,
        noise_nm: Option<f64>,
        corrected: Corrected<'b>,
    ) -> Result<Vec<Dimension>> {
        let input = Input {
            scan,
            noise_nm,
            calibration: self.input.calibration,
            slope: self.input.slope,
            corrected: Some(corrected),
        };
        let mut lines = Vec::new();
        for request in &self.spec.dimensions {
            lines.extend(measure_one(&input, &self.scanner, request, &self.quiet)?);
        }
        Ok(lines)
    }

    /// What is known of the correction, with another tip and surface and without a band: the flags
    /// that hang on the certainty map are not drawn.
    fn with<'b>(&'b self, tip: &'b Tip, surface: &'b HeightMap) -> Corrected<'b> {
        let given = &self.corrected;
        Corrected {
            tip,
            surface,
            surface_upper: None,
            surface_lower: None,
            certainty: given.certainty.reborrow(),
            edge_leaning: given.edge_leaning.reborrow(),
            identified: given.identified,
            height_u_nm: given.height_u_nm,
            exercised_depth_nm: given.exercised_depth_nm,
            contains_feature_radius: given.contains_feature_radius,
        }
    }

    /// One drawn scan, not levelled yet.
    fn noisy(&self, random: &mut ChaCha8Rng) -> HeightMap {
        with_noise(&self.tilted, self.noise, random)
    }

    fn trial(&self, random: &mut ChaCha8Rng) -> Result<Vec<Dimension>> {
        let quiet = &self.quiet;
        let noisy = self.noisy(random);
        let level = leveling::level(&noisy, &self.leveling, quiet)?;
        let tip = drawn_tip(self.tip, random.sample(StandardNormal))?;
        let heights = morphology::erode(level.map.heights(), tip.shape(), quiet)?;
        let surface = level.map.with_heights(heights, "eroded");
        self.measure(&level.map, level.noise_nm, self.with(&tip, &surface))
    }
}

/// White noise to add to `base` so that it is seen to have that of the scan, nm.
///
/// What the opening kept is not normal, so that the two do not just add in squares as they are
/// seen: a first guess by squares is corrected by what a noisy base is seen to have.
fn missing_noise(base: &HeightMap, scan_noise: f64) -> f64 {
    let lacks = |seen: f64| scan_noise * scan_noise - seen * seen;
    let left = leveling::noise(base).unwrap_or(0.0);
    let mut variance = lacks(left).max(0.0);
    for _ in 0..4 {
        let mut random = ChaCha8Rng::seed_from_u64(0);
        let noisy = with_noise(base, variance.sqrt(), &mut random);
        let seen = leveling::noise(&noisy).unwrap_or(0.0);
        variance = (variance + lacks(seen)).max(0.0);
    }
    variance.sqrt()
}

fn with_noise(map: &HeightMap, noise: f64, random: &mut ChaCha8Rng) -> HeightMap {
    let heights = map.heights().mapv(|z| {
        let n: f64 = random.sample(StandardNormal);
        z + (noise * n) as f32
    });
    map.with_heights(heights, "noise drawn")
}

/// A tip `deviations` standard uncertainties to the blunter side: within the band, whose ends are
/// two away, or with its heights moved by its stated uncertainty.
fn drawn_tip(found: &TipResult, deviations: f64) -> Result<Tip> {
    let Some(band) = &found.band else {
        return found.tip.moved(deviations * found.height_u_nm);
    };
    let part = (deviations / 2.0).clamp(-1.0, 1.0);
    let end = if part < 0.0 {
        &band.sharper
    } else {
        &band.blunter
    };
    let best = found.tip.shape();
    if end.shape().dim() != best.dim() {
        return Ok(found.tip.clone());
    }
    let mut shape = best.to_owned();
    Zip::from(&mut shape).and(end.shape()).for_each(|p, &e| {
        // Where one of them ends the best tip stands.
        if p.is_finite() && e.is_finite() {
            *p += part.abs() as f32 * (e - *p);
        }
    });
    Tip::new(shape, found.tip.pitch())
}

fn value(line: &Dimension) -> Option<f64> {
    line.corrected?.value
}

/// The line among `others` that stands for the same thing: same kind, figure and height fraction;
/// by name, and where several things of one request are numbered anew each time, by place.
fn same<'a>(line: &Dimension, others: &'a [Dimension]) -> Option<&'a Dimension> {
    let alike = |o: &&Dimension| {
        o.kind == line.kind
            && o.quantity == line.quantity
            && o.at == line.at
            && (o.name == line.name || line.kind == Kind::Particle)
    };
    let place = |d: &Dimension| d.marks.first().map(|m| [(m[0] + m[2]) / 2.0, m[1]]);
    let apart = |o: &Dimension| match (place(line), place(o)) {
        (Some(a), Some(b)) => (a[0] - b[0]).hypot(a[1] - b[1]),
        _ => 0.0,
    };
    let size = line.marks.first().map_or(f64::INFINITY, |m| m[2] - m[0]);
    others
        .iter()
        .filter(alike)
        .min_by(|a, b| apart(a).total_cmp(&apart(b)))
        // A particle further away than its own size is another one.
        .filter(|o| line.kind != Kind::Particle || line.marks.len() > 2 || apart(o) <= size)
}

/// How far below and above the value the tip leaves room: the interval without its symmetric part.
fn room(line: &Dimension) -> (f64, f64) {
    let mut budget = Budget::new();
    for component in &line.budget {
        budget.add(component.clone());
    }
    let expanded = budget.symmetric(COVERAGE).expanded;
    let ends = line
        .corrected
        .and_then(|c| Some((c.value?, c.low?, c.high?)));
    ends.map_or((0.0, 0.0), |(value, low, high)| {
        (
            (value - low - expanded).max(0.0),
            (high - value - expanded).max(0.0),
        )
    })
}

/// One draw of what the chain does not draw: the budget of the base but for the tip and bounds.
fn redrawn(known: &Dimension, random: &mut ChaCha8Rng) -> f64 {
    known
        .budget
        .iter()
        .filter(|c| c.distribution != Distribution::OneSided && !c.source.contains("tip"))
        .map(|c| c.draw(random))
        .sum()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::dimensions::Request;
    use crate::heightmap::Pitch;
    use crate::job::{Job, Stages, TipFrom};
    use crate::units::Length;

    /// What the opening keeps of the scan's noise is not drawn twice.
    #[test]
    fn drawn_scans_are_as_noisy_as_the_scan() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("line.tiff");
        for (seed, noise) in [(1, 0.1), (2, 0.3), (3, 0.8)] {
            let mut random = ChaCha8Rng::seed_from_u64(seed);
            let map = HeightMap::from_fn(96, 128, Pitch::square(1.0), |x, _| {
                let n: f64 = random.sample(StandardNormal);
                (20.0 + 4.0 * (25.0 - (x - 64.0).abs())).clamp(0.0, 40.0) + noise * n
            });
            crate::files::write(&path, &map.unwrap()).unwrap();
            let mut job = Job::on_scan(&path);
            job.file.tip.from = TipFrom::Model;
            job.file.tip.radius = Some(Length::from_nm(8.0));
            job.file.tip.half_angle = Some(10.0);
            job.file
                .dimensions
                .push(Request::new("line", Kind::LineWidth));
            let outcome = Stages::default()
                .run(&job, &Progress::new(), &mut |_| {})
                .unwrap();
            let level = outcome.level.clone().unwrap();
            let given = input(&level, &outcome, &job.file);
            let tip = outcome.tip.as_deref().unwrap();
            let corrected = given.corrected.unwrap();
            let chain = Chain::new(
                &level,
                &given,
                Scanner::default(),
                corrected,
                tip,
                &job.file,
                &Progress::new(),
            )
            .unwrap();
            assert!(chain.left_noise < level.noise_nm.unwrap());
            for _ in 0..3 {
                let drawn = leveling::noise(&chain.noisy(&mut random)).unwrap();
                let ratio = drawn / level.noise_nm.unwrap();
                assert!((0.9..1.1).contains(&ratio), "{noise}: {ratio}");
            }
        }
    }
}
