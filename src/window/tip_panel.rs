//! The panel of the tip: where it comes from, what it is, what is wrong with it.

use super::command::{BrowseFor, Command};
use super::fields::{caution, choice_row, fact, heading, length_row, number_row, remark, text_row};
use super::format;
use super::known_panel::{
    self, begin, both_ways_ui, give_up, is_stating, known_settings, own_scan_setting,
};
use super::laid_over::laid_ui;
use super::panels::Panel;
use crate::job::{Outcome, Threshold, TipFrom, TipShape, TipSpec};
use crate::units::Length;
use eframe::egui::Ui;
use std::path::PathBuf;

const SOURCES: [(TipFrom, &str, &str); 4] = [
    (
        TipFrom::Blind,
        "Blind",
        "The bluntest tip that the scan allows. It holds the bluntness of the sharpest feature too.",
    ),
    (
        TipFrom::KnownShape,
        "Known shape",
        "A scan of a characterizer whose shape is certified: ridges, a step, spheres, spikes.",
    ),
    (TipFrom::Model, "Model", "A shape given by its formula."),
    (TipFrom::File, "File", "A tip on the scan's own grid."),
];

/// The tip: where it comes from, what it is, what is wrong with it.
pub fn tip_ui(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    heading(ui, "Where the tip comes from");
    let tip = &panel.job.tip;
    let stated = match is_stating(ui, panel) {
        true => TipFrom::KnownShape,
        false => tip.from,
    };
    let help = "Where the tip's shape comes from";
    if let Some(from) = choice_row(ui, "From", help, stated, &SOURCES) {
        give_up(ui);
        if from == TipFrom::KnownShape {
            known_panel::state(ui, panel, begin(panel), out);
        } else if from != tip.from {
            panel.edit(out, |job| take_source(&mut job.tip, from));
        }
        if from == TipFrom::File && tip.file.is_none() && panel.browse {
            out.push(Command::Browse(BrowseFor::Tip));
        }
    }
    let support = length_row(
        ui,
        "Support",
        "Full width of the tip's grid. It must hold the tip over the height of the features, and both apexes of a double tip.",
        tip.support,
        "chosen from the scan",
    );
    if let Some(support) = support {
        panel.edit(out, |job| job.tip.support = support);
    }
    match stated {
        TipFrom::Blind => {
            blind_settings(ui, panel, out);
            own_scan_setting(ui, panel, out);
        }
        TipFrom::KnownShape => {
            known_settings(ui, panel, out);
            own_scan_setting(ui, panel, out);
        }
        TipFrom::Model => model_settings(ui, panel, out),
        TipFrom::File => file_settings(ui, panel, out),
    }
    if let Some(found) = &panel.outcome.tip {
        heading(ui, "What it is");
        read_out_ui(ui, found);
        both_ways_ui(ui, found);
    }
    let findings = findings(panel.outcome);
    if !findings.is_empty() {
        heading(ui, "Findings");
        for (finding, advice) in findings {
            caution(ui, &finding);
            if !advice.is_empty() {
                ui.indent(("advice", &finding), |ui| {
                    remark(ui, &format!("What to do: {advice}"));
                });
            }
        }
    }
    laid_ui(ui, panel, out);
}

/// What was found about the tip and what to do about it, where that is a sentence of its own.
fn findings(outcome: &Outcome) -> Vec<(String, String)> {
    let none = outcome.warnings.iter().filter(|w| w.starts_with("No tip"));
    let mut all: Vec<(String, String)> = none.map(|w| (w.clone(), advice_on(w))).collect();
    let Some(tip) = &outcome.tip else {
        return all;
    };
    let estimate = tip.estimate.iter().flat_map(|e| &e.diagnosis);
    all.extend(
        estimate
            .clone()
            .map(|d| (d.finding.clone(), d.advice.clone())),
    );
    // The same in one sentence each, and what the stage adds.
    let told = |text: &str| {
        let mut said = estimate.clone();
        said.any(|d| text.starts_with(d.finding.trim_end_matches('.')))
    };
    let rest = tip.diagnosis.iter().filter(|d| !told(d));
    all.extend(rest.map(|d| (d.clone(), advice_on(d))));
    all
}

/// What to do about a sentence that does not say it.
fn advice_on(finding: &str) -> String {
    let advice = [
        (
            "No half-angle",
            "Scan taller features, or give a wider support, so that the flank shows.",
        ),
        (
            "No radius",
            "Scan sharper, taller, isolated features with finer pixels.",
        ),
        (
            "The tip shows no depth",
            "Give a tip with more than its apex, or scan features that exercise it.",
        ),
        (
            "No tip",
            "Scan a characterizer with the same probe, and take its tip from a file.",
        ),
    ];
    let found = advice.iter().find(|a| finding.starts_with(a.0));
    found.map_or(String::new(), |a| a.1.to_owned())
}

/// Another source with settings that can be used at once.
fn take_source(tip: &mut TipSpec, from: TipFrom) {
    tip.from = from;
    if from == TipFrom::Model {
        tip.shape.get_or_insert(TipShape::SphereCone);
        tip.radius.get_or_insert(Length::from_nm(10.0));
        tip.half_angle.get_or_insert(17.0);
    }
}

fn blind_settings(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    let tip = &panel.job.tip;
    let value = tip.fixed_threshold_nm().map(Length::from_nm);
    let threshold = length_row(
        ui,
        "Threshold",
        "Height differences below it count as noise. Too small and noise sharpens the tip to a spike, too large and it stays blunt.",
        value,
        "from the noise",
    );
    if let Some(threshold) = threshold {
        panel.edit(out, |job| {
            job.tip.threshold = threshold.map(Threshold::Fixed)
        });
    }
    let radius = length_row(
        ui,
        "Feature radius",
        "Apex radius of the sharpest feature, where you know it. The estimate holds tip radius plus feature radius.",
        tip.feature_radius,
        "not stated",
    );
    if let Some(radius) = radius {
        panel.edit(out, |job| job.tip.feature_radius = radius);
    }
}

const SHAPES: [(TipShape, &str, &str); 3] = [
    (
        TipShape::SphereCone,
        "Sphere and cone",
        "A sphere that goes over into a cone",
    ),
    (TipShape::Paraboloid, "Paraboloid", ""),
    (
        TipShape::Pyramid,
        "Pyramid",
        "Four faces, each with its own half-angle",
    ),
];

fn model_settings(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    let tip = &panel.job.tip;
    let shape = tip.shape.unwrap_or_default();
    if let Some(shape) = choice_row(ui, "Shape", "The model's formula", shape, &SHAPES) {
        panel.edit(out, |job| {
            job.tip.shape = Some(shape);
            if shape == TipShape::Pyramid {
                job.tip.half_angles.get_or_insert([17.0; 4]);
            }
        });
    }
    if shape != TipShape::Pyramid
        && let Some(Some(r)) = length_row(ui, "Apex radius", "", tip.radius, "")
    {
        panel.edit(out, |job| job.tip.radius = Some(r));
    }
    if shape == TipShape::SphereCone {
        let help = "Degrees between the axis and the flank";
        if let Some(Some(a)) = number_row(ui, "Half-angle, °", help, tip.half_angle, "") {
            panel.edit(out, |job| job.tip.half_angle = Some(a));
        }
    }
    if shape == TipShape::Pyramid {
        let angles = tip.half_angles.unwrap_or([17.0; 4]);
        for (i, side) in ["−x", "+x", "−y", "+y"].into_iter().enumerate() {
            let name = format!("Face {side}, °");
            let help = "Degrees between the axis and this face";
            if let Some(Some(a)) = number_row(ui, &name, help, Some(angles[i]), "") {
                panel.edit(out, |job| {
                    let mut angles = angles;
                    angles[i] = a;
                    job.tip.half_angles = Some(angles);
                });
            }
        }
    }
    uncertainty_setting(ui, panel, out);
}

fn file_settings(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    let now = panel
        .job
        .tip
        .file
        .as_ref()
        .map_or(String::new(), |f| f.display().to_string());
    let help = "A tip on the scan's grid: a .npy array with its apex, height 0, at the centre, or any map this program reads";
    if let Some(path) = text_row(ui, "Tip file", help, &now, "path of tip.npy") {
        panel.edit(out, |job| {
            job.tip.file = (!path.is_empty()).then(|| PathBuf::from(path));
        });
    }
    if panel.browse && ui.button("Browse…").clicked() {
        out.push(Command::Browse(BrowseFor::Tip));
    }
    uncertainty_setting(ui, panel, out);
}

fn uncertainty_setting(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    let help =
        "Standard uncertainty of the given tip's surface. It goes into every corrected value.";
    let u = length_row(
        ui,
        "Uncertainty",
        help,
        panel.job.tip.uncertainty,
        "not stated",
    );
    if let Some(u) = u {
        panel.edit(out, |job| job.tip.uncertainty = u);
    }
}

fn read_out_ui(ui: &mut Ui, found: &crate::job::TipResult) {
    match &found.read_out.apex_radius {
        Some(r) => {
            fact(
                ui,
                "Apex radius",
                format!("{} nm", format::with_u(r.value, Some(r.u))),
            )
            .on_hover_text(format!(
                "Principal radii {} nm and {} nm; ± is the standard uncertainty\n\
                 On the same cap a sphere reads {} nm, a paraboloid {} nm",
                format::significant(r.principal_nm[0], 3),
                format::significant(r.principal_nm[1], 3),
                format::significant(r.sphere_nm.unwrap_or(f64::NAN), 3),
                format::significant(r.paraboloid_nm.unwrap_or(f64::NAN), 3)
            ));
            fact(
                ui,
                "Fit depth",
                format!("{} nm", format::significant(r.fit_depth_nm, 2)),
            )
            .on_hover_text("Depth below the apex that the radius was fitted over");
        }
        None => {
            fact(ui, "Apex radius", "not identified");
        }
    }
    match &found.read_out.half_angle {
        Some(a) => {
            fact(
                ui,
                "Half-angle",
                format!("{}°", format::with_u(a.value, Some(a.u))),
            )
            .on_hover_text(format!(
                "Mean over all azimuths, between {} nm and {} nm below the apex",
                format::significant(a.between_nm[0], 3),
                format::significant(a.between_nm[1], 3)
            ));
            if let Some(tilt) = a.tilt {
                fact(
                    ui,
                    "Tilt",
                    format!("{}°", format::with_u(tilt.value, Some(tilt.u))),
                )
                .on_hover_text(format!(
                    "Lean of the flanks' bisector, towards azimuth {:.0}° (from +x towards +y), \
                     which means nothing where the tilt does not exceed twice its uncertainty",
                    tilt.azimuth_deg
                ));
            }
        }
        None => {
            fact(ui, "Half-angle", "not identified");
        }
    }
    let depth = match found.exercised_depth_nm {
        None => "all of it".to_owned(),
        Some(d) if d > 0.0 => format!("{} nm", format::significant(d, 3)),
        Some(_) => "none".to_owned(),
    };
    fact(ui, "Exercised depth", depth).on_hover_text(
        "How far up from its apex the scan has tested the tip. Above that it is only a bound.",
    );
    if let Some(estimate) = &found.estimate {
        fact(
            ui,
            "Threshold used",
            format!("{} nm", format::significant(estimate.threshold_nm, 2)),
        );
    }
    let (rows, columns) = found.tip.shape().dim();
    fact(ui, "Grid", format!("{columns} × {rows} pixels"));
    let band = if found.band.is_some() {
        "shown shaded"
    } else {
        "none"
    };
    fact(ui, "Band", band)
        .on_hover_text("The pair of tips, sharper and blunter, between which the true one lies");
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;

    #[test]
    fn every_finding_comes_once_with_what_to_do() {
        let mut outcome = invented::outcome();
        let mut tip = (**outcome.tip.as_ref().unwrap()).clone();
        tip.diagnosis = vec!["No half-angle: the flank does not show.".to_owned()];
        outcome.tip = Some(std::sync::Arc::new(tip));
        let all = findings(&outcome);
        assert_eq!(all.len(), 1);
        assert!(all[0].1.contains("taller"));
        outcome.tip = None;
        outcome.warnings = vec!["No tip: nothing sharp.".to_owned(), "Else.".to_owned()];
        let all = findings(&outcome);
        assert_eq!(all.len(), 1);
        assert!(all[0].1.contains("characterizer"));
    }
}
