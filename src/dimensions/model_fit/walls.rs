//! Lines, trenches, steps and gratings: walls between two levels, fitted.

use super::average::{Data, prepare};
use super::form::*;
use super::profile::{Between, Section, Silhouette};
use super::report::{Hidden, Report};
use super::{Doubtful, ModelFit};
use crate::dimensions::sections::Frame;
use crate::dimensions::{Axis, Corrected, Dimension, Input, Request};
use crate::error::Result;
use crate::leveling::least_squares::nonlinear;
use crate::progress::Progress;
use crate::uncertainty::Joint;
use nalgebra::DMatrix;

/// Rise of the sum of squares (in units of the residual variance) up to which a parameter's value
/// is compatible with the data: two standard deviations.
pub(super) const COMPATIBLE: f64 = 4.0;

/// One fit of the form.
#[derive(Clone)]
pub(super) struct Solved {
    pub all: Parameters,
    pub free: Vec<usize>,
    /// Sum of squares in units of the data's variances.
    pub squares: f64,
    pub freedom: f64,
    pub covariance: DMatrix<f64>,
    pub determined: Vec<bool>,
}

pub(super) struct Fitter<'a> {
    pub form: Form,
    pub data: &'a Data,
    pub tip: Silhouette,
    /// Pixel pitch across, nm.
    pub pixel: f64,
}

impl Fitter<'_> {
    /// The levels go on beyond the data as far as the tip reaches.
    fn section(&self, p: &Parameters) -> Section {
        let reach = 2.0 * self.tip.reach();
        let span = [self.data.span[0] - reach, self.data.span[1] + reach];
        self.form.section(p, span)
    }

    fn solve(&self, start: &Parameters, free: &[usize]) -> Option<Solved> {
        let data = self.data;
        let full = |p: &[f64]| {
            let mut all = *start;
            for (&i, &value) in free.iter().zip(p) {
                all[i] = value;
            }
            all
        };
        let residuals = |p: &[f64], r: &mut [f64]| {
            let section = self.section(&full(p));
            let scanned = section.scanned_by(&self.tip);
            for (i, r) in r.iter_mut().enumerate() {
                *r = (scanned.at(data.x[i]) - data.z[i]) / data.u[i];
            }
        };
        let scale: Vec<f64> = free
            .iter()
            .map(|&i| if i == TILT { 1e-3 } else { 1.0 })
            .collect();
        let begin: Vec<f64> = free.iter().map(|&i| start[i]).collect();
        let fit = nonlinear::fit(&begin, &scale, data.x.len(), &residuals).ok()?;
        let mut all = full(&fit.parameters);
        for i in [HEIGHT, TOP_WIDTH, RUN[0], RUN[1], UPPER, LOWER] {
            all[i] = all[i].abs();
        }
        let freedom = fit.degrees_of_freedom.max(1) as f64;
        let variance = (fit.residual_sum / freedom).max(1.0);
        Some(Solved {
            all,
            free: free.to_vec(),
            squares: fit.residual_sum,
            freedom,
            covariance: fit.inverse_normal * variance,
            determined: fit.determined,
        })
    }

    /// The fit with parameter `i` held at `value`.
    pub(super) fn held(&self, from: &Solved, i: usize, value: f64) -> Option<Solved> {
        self.all_held(from, &[(i, value)])
    }

    /// The fit with several parameters held.
    pub(super) fn all_held(&self, from: &Solved, held: &[(usize, f64)]) -> Option<Solved> {
        let mut start = from.all;
        held.iter().for_each(|&(i, value)| start[i] = value);
        let loose = |k: &usize| held.iter().all(|h| h.0 != *k);
        let free: Vec<usize> = from.free.iter().copied().filter(loose).collect();
        self.solve(&start, &free)
    }

    /// The fit, corner radii added where they make it better than by chance and are larger than two
    /// pixels: smaller ones are not told from the course of the tip between its cells.
    fn best(&self, start: &Parameters, radius: f64) -> Option<Solved> {
        let mut free = self.form.free();
        let mut best = self.solve(start, &free)?;
        for (corner, first) in [(UPPER, radius / 2.0), (LOWER, 1.5 * radius)] {
            let mut tried = best.all;
            tried[corner] = first;
            free.push(corner);
            match self.solve(&tried, &free) {
                Some(s)
                    if best.squares - s.squares > COMPATIBLE * best.variance()
                        && s.all[corner] > 2.0 * self.pixel =>
                {
                    best = s;
                }
                _ => {
                    free.pop();
                }
            }
        }
        Some(best)
    }

    /// The largest value of parameter `i` that is compatible with the data, with its fit: by
    /// doubling and halving from `best`, to a twentieth of a step that starts at `step`.
    pub(super) fn largest(&self, best: &Solved, i: usize, step: f64) -> Option<Solved> {
        let limit = best.squares + COMPATIBLE * best.variance();
        let fits = |value: f64| self.held(best, i, value).filter(|s| s.squares <= limit);
        let mut low = best.clone();
        let (mut at, mut reach) = (best.all[i], step);
        while let Some(s) = fits(at + reach) {
            at += reach;
            low = s;
            reach *= 2.0;
            if reach > 64.0 * step {
                // It fits however large it is.
                return None;
            }
        }
        while reach > step / 20.0 {
            reach /= 2.0;
            if let Some(s) = fits(at + reach) {
                at += reach;
                low = s;
            }
        }
        Some(low)
    }
}

impl Solved {
    /// Variance of the residuals in units of the data's, at least 1.
    pub(super) fn variance(&self) -> f64 {
        (self.squares / self.freedom).max(1.0)
    }

    pub(super) fn determines(&self, i: usize) -> bool {
        let at = self.free.iter().position(|&k| k == i);
        at.is_some_and(|k| self.determined[k])
    }

    /// Standard uncertainties of what `figures` makes of all parameters.
    pub(super) fn doubts(&self, figures: &dyn Fn(&Parameters) -> Vec<f64>) -> Option<Vec<f64>> {
        let values = self.free.iter().map(|&i| self.all[i]).collect();
        let joint = Joint::new(values, self.covariance.clone()).ok()?;
        let out = joint
            .through(|p| {
                let mut all = self.all;
                for (&i, &value) in self.free.iter().zip(p) {
                    all[i] = value;
                }
                figures(&all)
            })
            .ok()?;
        Some((0..out.values().len()).map(|k| out.u(k)).collect())
    }
}

/// Fits the form of `request` and writes it beside its `lines`.
pub(super) fn fit(
    input: &Input,
    corrected: &Corrected,
    doubtful: &Doubtful,
    request: &Request,
    lines: &mut [Dimension],
    progress: &Progress,
) -> Result<()> {
    let frame = Frame::new(input, request)?;
    let prepared = prepare(input, corrected, request, &frame, lines);
    let (form, mut data, start) = match prepared {
        Ok(prepared) => prepared,
        Err(reason) => {
            for line in lines.iter_mut() {
                line.evidence.model_fit = Some(ModelFit::none("none", reason.clone()));
            }
            return Ok(());
        }
    };
    progress.check()?;
    let tip = Silhouette::of(corrected.tip, frame.axis, Between::Curved);
    let straight = Silhouette::of(corrected.tip, frame.axis, Between::Straight);
    let rough = Fitter {
        form,
        data: &data,
        tip: tip.clone(),
        pixel: frame.pitch,
    };
    if let Some(first) = rough.solve(&start, &form.free()) {
        let section = rough.section(&first.all);
        data.doubt_grid(&section, [&tip, &straight]);
    }
    let fitter = Fitter {
        form,
        data: &data,
        tip,
        pixel: frame.pitch,
    };
    let radius = corner_start(corrected, frame.axis);
    let Some(best) = fitter.best(&start, radius) else {
        for line in lines.iter_mut() {
            let reason = "the fit found no minimum".to_owned();
            line.evidence.model_fit = Some(ModelFit::none(form.name(), reason));
        }
        return Ok(());
    };
    progress.check()?;
    let hidden = Hidden::seek(&fitter, &best, radius);
    progress.check()?;
    let others: Vec<Parameters> = doubtful
        .tips
        .iter()
        .filter_map(|tip| {
            let with = Fitter {
                form,
                data: &data,
                tip: Silhouette::of(tip, frame.axis, Between::Curved),
                pixel: frame.pitch,
            };
            Some(with.solve(&best.all, &best.free)?.all)
        })
        .collect();
    let straight = Fitter {
        form,
        data: &data,
        tip: straight,
        pixel: frame.pitch,
    };
    let report = Report {
        straight: straight.solve(&best.all, &best.free).map(|s| s.all),
        best: &best,
        hidden: &hidden,
        others: &others,
        deviations: doubtful.deviations,
        calibration: match frame.axis {
            Axis::X => [input.calibration.x, input.calibration.z],
            Axis::Y => [input.calibration.y, input.calibration.z],
        },
        form,
    };
    for line in lines.iter_mut().filter(|l| l.corrected.is_some()) {
        line.evidence.model_fit = report.opinion(line);
    }
    Ok(())
}

/// Where the search for corner radii begins: the tip's own apex radius.
fn corner_start(corrected: &Corrected, axis: Axis) -> f64 {
    let outline = crate::dimensions::wall::Outline::of(corrected.tip, axis, true);
    outline.apex_radius().unwrap_or(1.0).clamp(0.5, 50.0)
}
