//! What a fit says: figures with intervals, and what the scan leaves open.

use super::form::*;
use super::walls::{COMPATIBLE, Fitter, Solved};
use super::{Fitted, ModelFit};
use crate::dimensions::{Dimension, Kind};
use crate::uncertainty::{Budget, Component, Distribution};

/// What the scan does not determine, with the fits at the ends of what is compatible with it.
#[derive(Default)]
pub(super) struct Hidden {
    /// Reason and largest compatible value, by parameter.
    pub reasons: Vec<(usize, String, Option<f64>)>,
    /// Fits at the ends of the hidden parameters' ranges.
    pub ends: Vec<Parameters>,
    /// The floor was not reached: heights and what hangs on them have no value.
    pub floor: bool,
}

impl Hidden {
    pub(super) fn seek(fitter: &Fitter, best: &Solved, radius: f64) -> Self {
        let mut hidden = Self::default();
        let limit = best.squares + COMPATIBLE * best.variance();
        if fitter.form == (Form::Feature { ridge: false }) {
            let deeper = fitter.held(best, HEIGHT, 1.3 * best.all[HEIGHT]);
            hidden.floor = !best.determines(HEIGHT) || deeper.is_some_and(|s| s.squares <= limit);
        }
        if hidden.floor {
            hidden.reasons.push((
                HEIGHT,
                "the tip did not reach the floor: a deeper trench gives the same scan".to_owned(),
                None,
            ));
        }
        let (mut steepest, mut least_steep) = (Vec::new(), Vec::new());
        for &run in fitter.form.runs() {
            // Near the flank the course of the tip between its cells decides more than the wall.
            let side = usize::from(run == RUN[1]);
            let flank = fitter.tip.flank(fitter.form.meets(side), best.all[HEIGHT]);
            let steep = best.all[run] <= 1.1 * flank * best.all[HEIGHT];
            let fits = |s: &Solved| steep || s.squares <= limit;
            let upright = fitter.held(best, run, 0.0).filter(fits);
            if upright.is_some() {
                let step = (0.05 * best.all[HEIGHT]).max(0.2);
                let flattest = fitter.largest(best, run, step);
                steepest.push((run, 0.0));
                least_steep.extend(flattest.as_ref().map(|s| (run, s.all[run])));
                hidden.reasons.push((
                    run,
                    "a vertical wall gives the same scan: the wall is as steep as the tip's flank \
                     or steeper"
                        .to_owned(),
                    flattest.map(|s| s.all[run]),
                ));
            } else if !best.determines(run) {
                hidden.reasons.push((
                    run,
                    "it lies in a flat direction of the fit".to_owned(),
                    None,
                ));
            }
        }
        // All hidden walls at once: what they leave open adds up.
        if !steepest.is_empty() {
            let ends = [&steepest, &least_steep].map(|held| fitter.all_held(best, held));
            hidden.ends.extend(ends.iter().flatten().map(|s| s.all));
        }
        for (corner, reason) in [
            (
                UPPER,
                "a sharp upper corner gives the same scan, or one that differs by less than two pixels \
                 of radius",
            ),
            (
                LOWER,
                "a sharp lower corner gives the same scan: the tip is blunter than it",
            ),
        ] {
            if !best.free.contains(&corner) {
                let mut with = best.clone();
                with.free.push(corner);
                let most = fitter.largest(&with, corner, radius / 4.0);
                hidden.ends.extend(most.as_ref().map(|s| s.all));
                hidden
                    .reasons
                    .push((corner, reason.to_owned(), most.map(|s| s.all[corner])));
            }
        }
        hidden
    }

    fn reason(&self, i: usize) -> Option<&(usize, String, Option<f64>)> {
        self.reasons.iter().find(|r| r.0 == i)
    }
}

/// What a dimension varies along the line is no matter of the fit: taken from its budget.
fn along(line: &Dimension) -> Vec<Component> {
    let varies = |c: &&Component| {
        ["repeatability", "scatter"]
            .iter()
            .any(|s| c.source.starts_with(s))
    };
    line.budget.iter().filter(varies).cloned().collect()
}

pub(super) struct Report<'a> {
    pub form: Form,
    pub best: &'a Solved,
    pub hidden: &'a Hidden,
    pub others: &'a [Parameters],
    /// The fit with the tip straight between its cells.
    pub straight: Option<Parameters>,
    pub deviations: f64,
    /// Relative, lateral and vertical.
    pub calibration: [f64; 2],
}

impl Report<'_> {
    pub(super) fn opinion(&self, line: &Dimension) -> Option<ModelFit> {
        let own: Fitted = match line.kind {
            Kind::LineWidth => self.width(line.at.unwrap_or(0.5), line),
            Kind::StepHeight => self.height(&along(line)),
            Kind::Pitch => self.figure("pitch", &|p| p[PITCH], self.calibration[0], &along(line)),
            _ => return None,
        };
        let mut parameters = Vec::new();
        if line.kind != Kind::StepHeight {
            parameters.push(self.height(&[]));
        }
        if line.kind != Kind::LineWidth && !matches!(self.form, Form::Step { .. }) {
            parameters.push(self.width(0.5, line));
        }
        for &run in self.form.runs() {
            parameters.push(self.angle(run));
        }
        for (corner, name) in [
            (UPPER, "upper corner radius"),
            (LOWER, "lower corner radius"),
        ] {
            parameters.push(self.corner(corner, name));
        }
        Some(ModelFit {
            model: self.form.name(),
            value: Some(own),
            parameters,
            misfit: Some((self.best.squares / self.best.freedom).sqrt()),
            agrees: None,
            reason: None,
        })
    }

    /// A figure with its interval: the fit's covariance, the tip's doubt, the axis (relative) and
    /// `more` in the symmetric part; outside it the range of the hidden parameters.
    fn figure(
        &self,
        name: &str,
        figure: &dyn Fn(&Parameters) -> f64,
        calibration: f64,
        more: &[Component],
    ) -> Fitted {
        let best = figure(&self.best.all);
        let fit = self.best.doubts(&|p| vec![figure(p)]);
        let tip = self.others.iter().map(|p| (figure(p) - best).abs());
        let tip = tip.fold(0.0, f64::max) / self.deviations;
        let grid = self.straight.as_ref().map_or(0.0, |p| figure(p) - best);
        let mut budget = Budget::new();
        budget.add(Component {
            source: "fit".to_owned(),
            u: fit.map_or(0.0, |u| u[0]),
            distribution: Distribution::Normal,
            sensitivity: 1.0,
            degrees_of_freedom: Some(self.best.freedom),
        });
        budget.push("tip", tip, Distribution::Normal, 1.0);
        budget.push(
            "tip between its cells",
            grid,
            Distribution::Rectangular,
            1.0,
        );
        // The same for both opinions, but the second is shown on its own too.
        budget.push("axis calibration", calibration, Distribution::Normal, best);
        more.iter().for_each(|c| {
            budget.add(c.clone());
        });
        let symmetric = budget.combined(0.95);
        let ends = || self.hidden.ends.iter().map(figure).chain([best]);
        let low = ends().fold(f64::INFINITY, f64::min);
        let high = ends().fold(f64::NEG_INFINITY, f64::max);
        let between = (high - low) / 12f64.sqrt();
        Fitted {
            name: name.to_owned(),
            unit: "nm",
            value: Some((low + high) / 2.0),
            u: Some(symmetric.u.hypot(between)),
            low: Some(low - symmetric.expanded),
            high: Some(high + symmetric.expanded),
            not_determined: None,
        }
    }

    fn width(&self, fraction: f64, line: &Dimension) -> Fitted {
        let along = if line.kind == Kind::LineWidth {
            along(line)
        } else {
            Vec::new()
        };
        let name = format!("width at {:.0} %", 100.0 * fraction);
        let mut fitted = self.figure(
            &name,
            &|p| self.form.width(p, fraction),
            self.calibration[0],
            &along,
        );
        if let Some((_, reason, _)) = self.hidden.reason(HEIGHT) {
            fitted.value = None;
            fitted.u = None;
            fitted.low = None;
            fitted.not_determined = Some(reason.clone());
        } else if self
            .form
            .runs()
            .iter()
            .any(|&r| self.hidden.reason(r).is_some())
        {
            fitted.value = None;
            fitted.not_determined = self
                .form
                .runs()
                .iter()
                .find_map(|&run| self.hidden.reason(run).map(|r| r.1.clone()));
            let bounds = fitted.high.zip(fitted.low);
            let widths = || {
                let ends = self.hidden.ends.iter();
                ends.map(|p| self.form.width(p, fraction))
            };
            let most = widths().fold(f64::NEG_INFINITY, f64::max);
            let least = widths().fold(f64::INFINITY, f64::min);
            let wide = bounds.is_some_and(|(high, low)| most - least > (high - low) / 2.0);
            // Near the corner that was touched the hidden slope hardly matters.
            if !wide {
                fitted.value = bounds.map(|(h, l)| (h + l) / 2.0);
                fitted.not_determined = None;
            }
        }
        fitted
    }

    fn height(&self, along: &[Component]) -> Fitted {
        let mut fitted = self.figure("height", &|p| p[HEIGHT], self.calibration[1], along);
        if let Some((_, reason, _)) = self.hidden.reason(HEIGHT) {
            fitted.value = None;
            fitted.u = None;
            fitted.high = None;
            fitted.not_determined = Some(reason.clone());
        }
        fitted
    }

    fn angle(&self, run: usize) -> Fitted {
        let name = match run {
            _ if self.form.runs().len() == 1 => "wall angle",
            r if r == RUN[0] => "left wall angle",
            _ => "right wall angle",
        };
        let angle = |p: &Parameters| p[HEIGHT].atan2(p[run]).to_degrees();
        let mut fitted = self.figure(name, &angle, 0.0, &[]);
        fitted.unit = "deg";
        fitted.high = fitted.high.map(|h| h.min(90.0));
        if let Some((_, reason, most)) = self.hidden.reason(run) {
            fitted.value = None;
            fitted.u = None;
            fitted.high = None;
            fitted.low = most.map(|m| self.best.all[HEIGHT].atan2(m).to_degrees());
            fitted.not_determined = Some(reason.clone());
        }
        fitted
    }

    fn corner(&self, corner: usize, name: &str) -> Fitted {
        match self.hidden.reason(corner) {
            Some((_, reason, most)) => Fitted {
                name: name.to_owned(),
                unit: "nm",
                value: None,
                u: None,
                low: Some(0.0),
                high: *most,
                not_determined: Some(reason.clone()),
            },
            None => {
                let mut fitted = self.figure(name, &|p| p[corner], self.calibration[0], &[]);
                fitted.low = fitted.low.map(|l| l.max(0.0));
                fitted
            }
        }
    }
}
