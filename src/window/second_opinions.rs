//! Second opinions on dimensions: the job's settings, and what they say of one result line.

use super::command::Command;
use super::fields::{caution, fact, heading, parsed_row, remark};
use super::format;
use super::panels::Panel;
use crate::dimensions::{CorrectedValue, Dimension, ModelFit, MonteCarlo};
use crate::job::MonteCarloSpec;
use crate::record;
use eframe::egui::Ui;

/// Trials that are begun with: some seconds' worth.
const TRIALS: usize = 200;

const FIT_COSTS: &str = "A line, a trench, a step, a grating or a ball is scanned by the tip and \
    fitted to the scan by least squares. It changes no value: it agrees or contradicts.\n\
    Costs some seconds for a job, more with many particles. Stop (Esc) ends it.";
const DRAW_COSTS: &str = "Noise, levelling, tip, reconstruction and dimensions are drawn together, \
    again and again (JCGM 101): a second interval beside the budget's.\n\
    Each trial costs about as much as surface and dimensions do once: 200 trials some seconds, \
    thousands some minutes. Stop (Esc) ends it.";

/// The two settings of the job.
pub fn opinions_ui(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    heading(ui, "Second opinions");
    let mut fit = panel.job.model_fit;
    if ui
        .checkbox(&mut fit, "Fit a model as a second opinion")
        .on_hover_text(FIT_COSTS)
        .changed()
    {
        panel.edit(out, |job| job.model_fit = fit);
    }
    let now = panel.job.monte_carlo;
    let mut draw = now.is_some();
    if ui
        .checkbox(&mut draw, "Monte Carlo of the whole chain")
        .on_hover_text(DRAW_COSTS)
        .changed()
    {
        panel.edit(out, |job| {
            job.monte_carlo = draw.then(|| MonteCarloSpec::new(TRIALS));
        });
    }
    if let Some(spec) = now {
        let text = spec.trials.to_string();
        let help = "From 100 (a rough interval) to 1000000";
        let taken = parsed_row(ui, "Trials", help, &text, "none", parse_trials);
        if let Some(trials) = taken {
            panel.edit(out, |job| {
                job.monte_carlo = trials.map(|trials| MonteCarloSpec { trials, ..spec });
            });
        }
    }
}

fn parse_trials(text: &str) -> Result<usize, String> {
    let plain: String = text.split_whitespace().collect();
    plain
        .parse()
        .map_err(|_| format!("\"{text}\" is not a whole number"))
}

/// What speaks for or against a line, besides its budget.
pub fn evidence_ui(ui: &mut Ui, line: &Dimension) {
    let evidence = &line.evidence;
    if evidence.model_fit.is_some() || evidence.monte_carlo.is_some() {
        heading(ui, "Second opinions");
    }
    if let Some(fit) = &evidence.model_fit {
        fit_ui(ui, fit);
    }
    if let Some(drawn) = &evidence.monte_carlo {
        drawn_ui(ui, line, drawn);
    }
    if let Some(r) = evidence.reliability {
        heading(ui, "What the tip did in its region");
        for (name, part) in [
            ("Touched", r.touched),
            ("Bounded", r.bounded),
            ("Never", r.never),
        ] {
            fact(ui, name, format::percent(part));
        }
    }
}

fn fit_ui(ui: &mut Ui, fit: &ModelFit) {
    let Some(value) = &fit.value else {
        fact(ui, "Model fit", "none");
        if let Some(reason) = &fit.reason {
            remark(ui, reason);
        }
        return;
    };
    let verdict = record::fit_verdict(fit);
    if fit.agrees == Some(false) {
        caution(ui, "The model fit contradicts the corrected value.");
    }
    fact(
        ui,
        "Model fit",
        format!("{}; {verdict}", record::fitted_words(value)),
    )
    .on_hover_text(format!("Form: {}", fit.model));
    if let Some(text) = interval(value.low, value.high) {
        fact(ui, "Its interval", format!("{text} {}", value.unit))
            .on_hover_text("95 % coverage, of the fit alone");
    }
    if let Some(misfit) = fit.misfit {
        fact(ui, "Fit leaves", format!("{} × noise", format::significant(misfit, 2)))
            .on_hover_text("Root mean square of what the form leaves over what noise accounts for; 1 = the feature is of that form");
    }
    for parameter in &fit.parameters {
        fact(ui, &parameter.name, record::fitted_words(parameter));
    }
}

fn interval(low: Option<f64>, high: Option<f64>) -> Option<String> {
    low.or(high)?;
    Some(format::interval(Some(CorrectedValue {
        value: None,
        u: None,
        expanded: None,
        k: None,
        low,
        high,
    })))
}

fn drawn_ui(ui: &mut Ui, line: &Dimension, drawn: &MonteCarlo) {
    if drawn.agrees == Some(false) {
        caution(ui, "Monte Carlo gives another interval than the budget.");
    }
    let ends = interval(Some(drawn.low), Some(drawn.high)).unwrap_or_default();
    fact(
        ui,
        "Monte Carlo",
        format!("{ends} {}; {}", line.unit, record::drawn_verdict(drawn)),
    )
    .on_hover_text(format!(
        "95 %, one-sided effects of the tip added as in the budget; shortest interval {} … {} {}; \
         the ends count as the same within {} {}",
        format::significant(drawn.shortest_low, 5),
        format::significant(drawn.shortest_high, 5),
        line.unit,
        format::significant(drawn.tolerance, 2),
        line.unit
    ));
    fact(
        ui,
        "Its draws",
        format!(
            "{} {}, {} of {} trials",
            format::with_u(drawn.mean, Some(drawn.u)),
            line.unit,
            drawn.count,
            drawn.trials
        ),
    )
    .on_hover_text("Mean ± standard deviation; trials that gave this value");
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn trials_are_whole_numbers_and_intervals_may_have_one_end() {
        assert_eq!(parse_trials("10 000"), Ok(10_000));
        assert!(parse_trials("1.5").unwrap_err().contains("1.5"));
        assert_eq!(interval(Some(97.94), Some(103.12)).unwrap(), "97.9 … 103.1");
        assert!(interval(None, Some(3.0)).unwrap().starts_with('≤'));
        assert_eq!(interval(None, None), None);
    }
}
