//! Model fit: a second opinion on dimensions.
//!
//! A feature of known form (a line, a trench, a step or a grating with sloped walls and rounded
//! corners; a sphere on a flat) is scanned by the tip in one dimension and fitted to the levelled
//! scan, as recorded, by least squares. It shares with the first opinion the scan and the tip, but
//! neither the reconstruction nor the thresholds. What the tip hides (a wall steeper than its
//! flank, a corner it cannot enter, a floor it does not reach) leaves the sum of squares where it
//! is: such a parameter is reported as not determined, with the reason.
//! Sources: fitting a scanned model by least squares, common practice; covariance: JCGM 100:2008,
//! H.3 and 5.2.2; confidence limits by the profile of the sum of squares: common practice.

mod average;
mod form;
mod profile;
mod report;
mod sphere;
#[cfg(test)]
mod tests;
mod walls;

use super::{Dimension, Input, Kind, Request};
use crate::error::Result;
use crate::progress::Progress;
use crate::tip::{Band, Tip};
use serde::Serialize;

/// One figure of a fitted model.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Fitted {
    /// What it is ("width at 50 %", "left wall angle", ...).
    pub name: String,
    /// Unit: "nm" or "deg".
    pub unit: &'static str,
    /// Best value; `None` where the scan does not determine it.
    pub value: Option<f64>,
    /// Standard uncertainty: fit, tip, axis, and for widths the repeatability along the line.
    pub u: Option<f64>,
    /// Lower end of the 95 % interval; `None` = no bound.
    pub low: Option<f64>,
    /// Upper end of the 95 % interval; `None` = no bound.
    pub high: Option<f64>,
    /// Why the scan does not determine it.
    pub not_determined: Option<String>,
}

/// A feature of known form, fitted to the scan, as a second opinion on one dimension.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ModelFit {
    /// The form.
    pub model: &'static str,
    /// The dimension itself, by the fit; `None` where there was no fit (then `reason` says why).
    pub value: Option<Fitted>,
    /// The other figures of the form.
    pub parameters: Vec<Fitted>,
    /// Root mean square of what the form leaves, over what noise accounts for; 1 = nothing left.
    pub misfit: Option<f64>,
    /// Whether both opinions agree within their combined doubt; `None` where one has no interval.
    pub agrees: Option<bool>,
    /// Why there is no fit.
    pub reason: Option<String>,
}

impl ModelFit {
    fn none(model: &'static str, reason: String) -> Self {
        Self {
            model,
            value: None,
            parameters: Vec::new(),
            misfit: None,
            agrees: None,
            reason: Some(reason),
        }
    }
}

/// Tips to fit with besides the best one, and how many standard uncertainties they stand away.
struct Doubtful {
    tips: Vec<Tip>,
    deviations: f64,
}

impl Doubtful {
    /// The band's (two standard uncertainties to each side), else the tip with its heights moved by
    /// one standard uncertainty.
    fn of(tip: &Tip, band: Option<&Band>, height_u_nm: f64) -> Result<Self> {
        if let Some(band) = band {
            return Ok(Self {
                tips: vec![band.sharper.clone(), band.blunter.clone()],
                deviations: 2.0,
            });
        }
        let mut tips = Vec::new();
        if height_u_nm > 0.0 {
            for sign in [-1.0, 1.0] {
                tips.push(tip.moved(sign * height_u_nm)?);
            }
        }
        Ok(Self {
            tips,
            deviations: 1.0,
        })
    }
}

/// Adds a model fit to those of `lines`, the results of `request`, that have a form; and a flag
/// where it contradicts the corrected value. Without a known tip there is nothing to fit with.
///
/// Errors: as [`super::measure`].
pub fn second_opinion(
    input: &Input,
    request: &Request,
    band: Option<&Band>,
    lines: &mut [Dimension],
    progress: &Progress,
) -> Result<()> {
    let Some(corrected) = input.corrected else {
        return Ok(());
    };
    let fitting = matches!(
        request.kind,
        Kind::LineWidth | Kind::StepHeight | Kind::Pitch | Kind::Particle
    );
    if !fitting || lines.iter().all(|l| l.corrected.is_none()) {
        return Ok(());
    }
    progress.check()?;
    if !corrected.identified {
        for line in lines.iter_mut().filter(|l| l.corrected.is_some()) {
            let reason = "the tip is not identified: there is nothing to scan the form with";
            line.evidence.model_fit = Some(ModelFit::none("none", reason.to_owned()));
        }
        return Ok(());
    }
    let doubtful = Doubtful::of(corrected.tip, band, corrected.height_u_nm)?;
    if request.kind == Kind::Particle {
        sphere::fit(input, &corrected, &doubtful, lines, progress)?;
    } else {
        walls::fit(input, &corrected, &doubtful, request, lines, progress)?;
    }
    lines.iter_mut().for_each(judge);
    Ok(())
}

/// Compares both opinions: they contradict each other where their values stand further apart than
/// the quadratic sum of the two half-intervals that face each other.
fn judge(line: &mut Dimension) {
    let Some(fit) = &mut line.evidence.model_fit else {
        return;
    };
    let (Some(second), Some(first)) = (&fit.value, &line.corrected) else {
        return;
    };
    let (Some(low), Some(high)) = (second.low, second.high) else {
        return;
    };
    let (Some(first_low), Some(first_high)) = (first.low, first.high) else {
        return;
    };
    let at = second.value.unwrap_or((low + high) / 2.0);
    let first_at = first.value.unwrap_or((first_low + first_high) / 2.0);
    let doubt = if at > first_at {
        (at - low).hypot(first_high - first_at)
    } else {
        (high - at).hypot(first_at - first_low)
    };
    let apart = at - first_at;
    let agrees = apart.abs() <= doubt;
    fit.agrees = Some(agrees);
    if !agrees {
        line.flags.push(format!(
            "the model fit contradicts: {at:.2} {} ({low:.2} to {high:.2}), {apart:+.2} from the \
             corrected value, more than the combined doubt of {doubt:.2}",
            line.unit
        ));
    } else if let Some(misfit) = fit.misfit
        && misfit > 3.0
    {
        line.flags.push(format!(
            "the form fitted as a second opinion leaves {misfit:.1} times the noise: the feature \
             is not quite of that form"
        ));
    }
}
