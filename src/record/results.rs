//! The parts of the report that tell the dimensions: the table, flags, assumptions, budgets.

use super::format::{
    Line, about, decimals_of, fixed, numbered_flags, numbers, percent, reading_unit, with_u,
    with_unit,
};
use super::report::{dimensions, list};
use super::svg::{escape, minus};
use crate::dimensions::{Dimension, Fitted, ModelFit, MonteCarlo};
use crate::job::Outcome;
use crate::uncertainty::{Component, Distribution};
use std::fmt::Write;

/// Where the tip mattered most, relative to the value: one sentence.
pub fn greatest_change(outcome: &Outcome) -> Option<String> {
    let change = |d: &Dimension| {
        let (scanned, corrected) = (d.as_scanned?.value, d.corrected?.value?);
        let part = ((scanned - corrected) / corrected).abs();
        part.is_finite().then_some((part, scanned - corrected))
    };
    let (dimension, (_, change)) = dimensions(outcome)
        .filter_map(|d| Some((d, change(d)?)))
        .max_by(|a, b| a.1.0.total_cmp(&b.1.0))?;
    let line = Line::of(dimension);
    let u = dimension.corrected.and_then(|c| c.u).unwrap_or(f64::NAN);
    let sign = if change < 0.0 { "+" } else { "" };
    Some(format!(
        "The correction matters most for {}, {}: as scanned {}, corrected {}, a change of {}.",
        escape(&line.name),
        escape(&line.quantity),
        minus(&line.as_scanned),
        minus(&line.corrected),
        sign.to_owned() + &minus(&with_u(-change, u, dimension.unit).0)
    ))
}

fn status_mark(status: &str) -> String {
    match status {
        "–" => "–".to_owned(),
        word => format!("<span class=\"mk {word}\"></span>{word}"),
    }
}

/// The table of all results, their flags and what they assume.
pub fn results(html: &mut String, outcome: &Outcome) {
    html.push_str("<section>\n<h2>Dimensions</h2>\n");
    if dimensions(outcome).next().is_none() {
        html.push_str("<p>None was asked for.</p>\n</section>\n");
        return;
    }
    html.push_str(
        "<table>\n<thead><tr><th scope=\"col\">Dimension</th>\
         <th scope=\"col\" class=\"n\">As scanned</th><th scope=\"col\" class=\"n\">Corrected</th>\
         <th scope=\"col\" class=\"n\"><abbr title=\"expanded uncertainty, k times u\">U</abbr></th>\
         <th scope=\"col\" class=\"n\"><abbr title=\"coverage factor\">k</abbr></th>\
         <th scope=\"col\" class=\"n\">95 % interval</th><th scope=\"col\">Status</th></tr></thead>\n\
         <tbody>\n",
    );
    let all = outcome.dimensions.as_deref().map_or(&[][..], Vec::as_slice);
    let (flags, carried) = numbered_flags(all);
    for (dimension, carried) in all.iter().zip(carried) {
        let line = Line::of(dimension);
        let flagged = match carried.as_slice() {
            [] => String::new(),
            list => format!("<br /><span class=\"quiet\">flags {}</span>", numbers(list)),
        };
        let _ = writeln!(
            html,
            "<tr><th scope=\"row\">{}<br /><span class=\"quiet\">{}</span></th>\
             <td class=\"n\">{}<br /><span class=\"quiet\">u = {}</span></td>\
             <td class=\"n\">{}<br /><span class=\"quiet\">u = {}</span></td>\
             <td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td>\
             <td class=\"status\">{}{flagged}</td></tr>",
            escape(&line.name),
            escape(&line.quantity),
            escape(&minus(&line.as_scanned)),
            escape(&line.as_scanned_u),
            escape(&minus(&line.corrected)),
            escape(&line.u),
            escape(&line.expanded),
            line.k,
            escape(&line.interval.replace('-', "\u{2212}").replace("..", "to")),
            status_mark(line.status)
        );
    }
    html.push_str(
        "</tbody>\n</table>\n<p class=\"quiet\">u: standard uncertainty; U = k u: expanded \
         uncertainty. The interval encloses the true value with 95 % coverage under the assumptions \
         below, one-sided effects of the tip included; its ends are rounded outward. A dash stands \
         for what could not be had; the flags say why.</p>\n",
    );
    if !flags.is_empty() {
        html.push_str("<h3>Flags</h3>\n");
        list(html, "ol class=\"flags\"", flags.iter().map(|f| escape(f)));
    }
    html.push_str("<h3>What the figures assume</h3>\n");
    list(html, "ul", assumptions(all));
    html.push_str("</section>\n");
}

/// Second opinions and what the tip touched of each dimension's region: one table.
pub fn evidence(html: &mut String, outcome: &Outcome) {
    let any = |d: &Dimension| {
        let e = &d.evidence;
        e.model_fit.is_some() || e.monte_carlo.is_some() || e.reliability.is_some()
    };
    if !dimensions(outcome).any(any) {
        return;
    }
    html.push_str(
        "<section>\n<h2>Second opinions and reliability</h2>\n<table>\n<thead><tr>\
         <th scope=\"col\">Dimension</th><th scope=\"col\" class=\"n\">Model fit</th>\
         <th scope=\"col\" class=\"n\">Monte Carlo, 95 %</th>\
         <th scope=\"col\" class=\"n\"><abbr title=\"of the region's pixels\">Touched, bounded, \
         never</abbr></th></tr></thead>\n<tbody>\n",
    );
    for dimension in dimensions(outcome).filter(|d| any(d)) {
        let line = Line::of(dimension);
        let _ = writeln!(
            html,
            "<tr><th scope=\"row\">{}<br /><span class=\"quiet\">{}</span></th>\
             <td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td></tr>",
            escape(&line.name),
            escape(&line.quantity),
            model_fit_cell(dimension),
            monte_carlo_cell(dimension),
            dimension.evidence.reliability.map_or_else(
                || "–".to_owned(),
                |r| format!(
                    "{}, {}, {}",
                    percent(r.touched),
                    percent(r.bounded),
                    percent(r.never)
                )
            ),
        );
    }
    html.push_str(
        "</tbody>\n</table>\n<p class=\"quiet\">Model fit: a feature of the form named, scanned by \
         the tip and fitted to the levelled scan by least squares. Monte Carlo: noise, levelling, tip, \
         reconstruction and dimension drawn together (JCGM 101:2008), one-sided effects of the tip \
         added as in the budget. Both share the scan and the tip with the corrected value.</p>\n",
    );
    let parameters = fitted_parameters(outcome);
    if !parameters.is_empty() {
        html.push_str("<h3>What the model fits determine</h3>\n");
        list(html, "ul", parameters);
    }
    html.push_str("</section>\n");
}

/// See [`super::fitted_words`].
pub fn fitted_words(fitted: &Fitted) -> String {
    let bounds = match (fitted.low, fitted.high) {
        (Some(low), Some(high)) => {
            format!(
                "{} to {}",
                about(low, fitted.unit),
                about(high, fitted.unit)
            )
        }
        (Some(low), None) => format!("at least {}", about(low, fitted.unit)),
        (None, Some(high)) => format!("at most {}", about(high, fitted.unit)),
        (None, None) => "–".to_owned(),
    };
    match (fitted.value, &fitted.not_determined) {
        (Some(value), _) => {
            let (value, u) = with_u(value, fitted.u.unwrap_or(f64::NAN), fitted.unit);
            format!("{value}, u = {u}")
        }
        (None, Some(reason)) => format!("not determined ({reason}); {bounds}"),
        (None, None) => bounds,
    }
}

fn model_fit_cell(dimension: &Dimension) -> String {
    let Some(fit) = &dimension.evidence.model_fit else {
        return "–".to_owned();
    };
    let Some(value) = &fit.value else {
        let reason = fit.reason.as_deref().unwrap_or("–");
        return format!("<span class=\"quiet\">{}</span>", escape(reason));
    };
    format!(
        "{}<br /><span class=\"quiet\">{}</span>",
        escape(&minus(&fitted_words(value))),
        fit_verdict(fit)
    )
}

/// See [`super::fit_verdict`].
pub fn fit_verdict(fit: &ModelFit) -> &'static str {
    match fit.agrees {
        Some(true) => "agrees",
        Some(false) => "contradicts",
        None => "not comparable",
    }
}

/// See [`super::drawn_verdict`].
pub fn drawn_verdict(drawn: &MonteCarlo) -> &'static str {
    match drawn.agrees {
        Some(true) => "agrees with the budget",
        Some(false) => "differs from the budget",
        None => "no interval to compare with",
    }
}

fn monte_carlo_cell(dimension: &Dimension) -> String {
    let Some(drawn) = &dimension.evidence.monte_carlo else {
        return "–".to_owned();
    };
    let (low, u) = with_u(drawn.low, drawn.u, dimension.unit);
    let high = with_u(drawn.high, drawn.u, dimension.unit).0;
    format!(
        "{} to {}<br /><span class=\"quiet\">u = {}; {} trials; {}</span>",
        escape(&minus(&low)),
        escape(&minus(&high)),
        escape(&u),
        drawn.count,
        drawn_verdict(drawn)
    )
}

/// The other figures of each fit, those of one form on one feature once.
fn fitted_parameters(outcome: &Outcome) -> Vec<String> {
    let mut items: Vec<String> = Vec::new();
    for dimension in dimensions(outcome) {
        let Some(fit) = &dimension.evidence.model_fit else {
            continue;
        };
        if fit.parameters.is_empty() {
            continue;
        }
        let figures: Vec<String> = fit
            .parameters
            .iter()
            .map(|p| format!("{} {}", p.name, fitted_words(p)))
            .collect();
        let item = format!(
            "<strong>{}</strong> ({}): {}",
            escape(&Line::of(dimension).name),
            escape(fit.model),
            escape(&minus(&figures.join("; ")))
        );
        if !items.contains(&item) {
            items.push(item);
        }
    }
    items
}

/// Each kind's assumptions and source once, with the quantities they stand for.
fn assumptions(dimensions: &[Dimension]) -> Vec<String> {
    let mut texts: Vec<(&str, Vec<&str>)> = Vec::new();
    for dimension in dimensions.iter().filter(|d| !d.assumptions.is_empty()) {
        let quantity = dimension.quantity.as_str();
        match texts.iter_mut().find(|t| t.0 == dimension.assumptions) {
            Some((_, quantities)) if quantities.contains(&quantity) => {}
            Some((_, quantities)) => quantities.push(quantity),
            None => texts.push((dimension.assumptions, vec![quantity])),
        }
    }
    texts
        .into_iter()
        .map(|(text, quantities)| {
            format!(
                "<strong>{}</strong>: {}",
                escape(&quantities.join(", ")),
                escape(text)
            )
        })
        .collect()
}

/// One budget per result, largest contribution first.
pub fn budgets(html: &mut String, outcome: &Outcome) {
    if dimensions(outcome).all(|d| d.budget.is_empty()) {
        return;
    }
    html.push_str(
        "<section>\n<h2>Uncertainty budgets</h2>\n<p class=\"quiet\">The input's standard uncertainty \
         is in the input's own unit; times the sensitivity it is the contribution to the result.</p>\n",
    );
    for dimension in dimensions(outcome).filter(|d| !d.budget.is_empty()) {
        budget(html, dimension);
    }
    html.push_str("</section>\n");
}

fn budget(html: &mut String, dimension: &Dimension) {
    let line = Line::of(dimension);
    let contribution = |c: &Component| (c.u * c.sensitivity).abs();
    let squares: f64 = dimension
        .budget
        .iter()
        .map(|c| contribution(c).powi(2))
        .sum();
    let largest = [
        dimension.as_scanned.map(|v| v.value),
        dimension.corrected.and_then(|c| c.value),
    ];
    let largest = largest
        .iter()
        .flatten()
        .fold(0.0, |a: f64, b| a.max(b.abs()));
    let (factor, unit) = reading_unit(dimension.unit, largest);
    let combined = dimension
        .corrected
        .and_then(|c| c.u)
        .or(dimension.as_scanned.and_then(|v| v.u));
    let show = |u: f64| {
        let decimals = decimals_of(u * factor).unwrap_or(0);
        escape(&with_unit(&fixed(u * factor, decimals), &unit))
    };
    let _ = writeln!(
        html,
        "<details open=\"open\">\n<summary>{}, {}</summary>\n<table>\n<thead><tr>\
         <th scope=\"col\">Source</th><th scope=\"col\" class=\"n\">u of the input</th>\
         <th scope=\"col\">Distribution</th><th scope=\"col\" class=\"n\">Sensitivity</th>\
         <th scope=\"col\" class=\"n\"><abbr title=\"degrees of freedom\">ν</abbr></th>\
         <th scope=\"col\" class=\"n\">Contribution</th><th scope=\"col\" class=\"n\">Share of u²</th>\
         </tr></thead>\n<tbody>",
        escape(&line.name),
        escape(&line.quantity)
    );
    for c in &dimension.budget {
        let share = contribution(c).powi(2) / squares;
        let _ = writeln!(
            html,
            "<tr><th scope=\"row\">{}</th><td class=\"n\">{}</td><td>{}</td><td class=\"n\">{}</td>\
             <td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td></tr>",
            escape(&c.source),
            about(c.u, ""),
            distribution(c.distribution),
            minus(&about(c.sensitivity, "")),
            c.degrees_of_freedom
                .filter(|f| f.is_finite())
                .map_or_else(|| "∞".to_owned(), |f| fixed(f, 0)),
            show(contribution(c)),
            percent(share)
        );
    }
    if let Some(u) = combined {
        let _ = writeln!(
            html,
            "<tr class=\"sum\"><th scope=\"row\" colspan=\"5\">combined standard uncertainty</th>\
             <td class=\"n\">{}</td><td></td></tr>",
            show(u)
        );
    }
    html.push_str("</tbody>\n</table>\n</details>\n");
}

fn distribution(distribution: Distribution) -> &'static str {
    match distribution {
        Distribution::Normal => "normal",
        Distribution::Rectangular => "rectangular",
        Distribution::Triangular => "triangular",
        Distribution::OneSided => "one-sided",
    }
}
