//! The panels at the left of the desk: one for each stage, facts first, then settings.

use super::command::Command;
use super::fields::{caution, choice_row, fact, heading, parsed_row, remark, text_row};
use super::format;
use super::laid_over::LaidOver;
use super::legend;
use super::map_view::Desk;
use super::state::{Tool, kind_name};
use crate::heightmap::HeightMap;
use crate::job::{JobFile, LevelMethod, Outcome};
use crate::leveling::Leveled;
use crate::units::format_length;
use eframe::egui::Ui;
use std::path::PathBuf;

/// What the panels read.
pub struct Panel<'a> {
    /// The job.
    pub job: &'a JobFile,
    /// The scan's path.
    pub scan_path: PathBuf,
    /// What was computed.
    pub outcome: &'a Outcome,
    /// Whether the system's file dialog can be had.
    pub browse: bool,
    /// The second tip.
    pub laid: Option<&'a LaidOver>,
}

impl Panel<'_> {
    /// Asks for the job changed by `change`.
    pub fn edit(&self, out: &mut Vec<Command>, change: impl FnOnce(&mut JobFile)) {
        let mut job = self.job.clone();
        change(&mut job);
        out.push(Command::Edit {
            job: Box::new(job),
            gesture: false,
        });
    }
}

/// The scan: what the file says, how it is levelled, what was seen.
pub fn scan_ui(ui: &mut Ui, panel: &Panel, desk: &Desk, out: &mut Vec<Command>) {
    heading(ui, "File");
    let name = panel.scan_path.file_name().map_or_else(
        || panel.scan_path.display().to_string(),
        |n| n.to_string_lossy().into_owned(),
    );
    fact(ui, "Name", name).on_hover_text(panel.scan_path.display().to_string());
    if let Some(scan) = &panel.outcome.scan {
        file_facts(ui, scan);
    }
    heading(ui, "Levelling");
    level_settings(ui, panel, desk, out);
    if let Some(level) = &panel.outcome.level {
        heading(ui, "Seen on the scan");
        level_facts(ui, level);
    }
}

fn file_facts(ui: &mut Ui, scan: &HeightMap) {
    let pitch = scan.pitch();
    fact(
        ui,
        "Pixels",
        format!("{} × {}", scan.columns(), scan.rows()),
    )
    .on_hover_text("Columns (fast axis) by rows (slow axis)");
    fact(
        ui,
        "Extent",
        format!(
            "{} × {}",
            format_length(scan.width_nm()),
            format_length(scan.length_nm())
        ),
    );
    let text = if pitch.x == pitch.y {
        format_length(pitch.x)
    } else {
        format!("{} × {}", format_length(pitch.x), format_length(pitch.y))
    };
    fact(ui, "Pixel pitch", text);
    if let Some((low, high)) = scan.range() {
        fact(
            ui,
            "Heights",
            format!("{} … {}", format::height(low), format::height(high)),
        );
    }
    let voids = scan.void_count();
    let all = scan.rows() * scan.columns();
    let text = match voids {
        0 => "none".to_owned(),
        n => format!("{n} pixels ({})", format::percent(n as f64 / all as f64)),
    };
    fact(ui, "Voids", text).on_hover_text("Pixels without a height. They constrain nothing.");
    let from = scan.provenance();
    fact(ui, "Scale from", from.scale_source.clone())
        .on_hover_text("Who states the pixel pitch and the unit of the heights");
    if let Some(sha) = &from.sha256 {
        let short: String = sha.chars().take(16).collect();
        let response = fact(ui, "SHA-256", format!("{short}…"));
        if response
            .on_hover_text(format!("{sha}\nClick to copy"))
            .clicked()
        {
            ui.ctx().copy_text(sha.clone());
        }
    }
}

const METHODS: [(LevelMethod, &str, &str); 5] = [
    (
        LevelMethod::Auto,
        "Automatic",
        "A robust plane on the dominant flat, so that steps and gratings do not tilt it; rows are aligned where they stand out.",
    ),
    (
        LevelMethod::Rows,
        "Automatic, every row",
        "As automatic, and every row is aligned on base-plane pixels.",
    ),
    (
        LevelMethod::Plane,
        "Plane",
        "A least-squares plane on the regions drawn, or on everything.",
    ),
    (
        LevelMethod::Polynomial,
        "Polynomial",
        "A least-squares polynomial on the regions drawn, or on everything.",
    ),
    (
        LevelMethod::None,
        "Leave as it is",
        "The heights as the file has them.",
    ),
];

fn level_settings(ui: &mut Ui, panel: &Panel, desk: &Desk, out: &mut Vec<Command>) {
    let level = &panel.job.level;
    if let Some(method) = choice_row(
        ui,
        "Method",
        "How the scan is levelled before anything else",
        level.method,
        &METHODS,
    ) {
        panel.edit(out, |job| {
            job.level.method = method;
            job.level.order = (method == LevelMethod::Polynomial).then_some(2);
        });
    }
    if level.method == LevelMethod::Polynomial {
        let orders = [
            (1, "1", ""),
            (2, "2", ""),
            (3, "3", ""),
            (4, "4", ""),
            (5, "5", ""),
        ];
        let now = level.order.unwrap_or(2);
        if let Some(order) = choice_row(ui, "Order", "Total order of the polynomial", now, &orders)
        {
            panel.edit(out, |job| job.level.order = Some(order));
        }
    }
    if matches!(level.method, LevelMethod::Auto | LevelMethod::None) && level.regions.is_empty() {
        return;
    }
    for (i, region) in level.regions.iter().enumerate() {
        ui.horizontal(|ui| {
            ui.label(format!(
                "Region {}: {} × {}",
                i + 1,
                format_length(region.width),
                format_length(region.height)
            ));
            let remove = ui.small_button("Remove");
            if remove
                .accessible_name(format!("Remove levelling region {}", i + 1))
                .clicked()
            {
                panel.edit(out, |job| {
                    job.level.regions.remove(i);
                });
            }
        });
    }
    let drawing = desk.tool == Tool::LevelRegion;
    let response = ui.selectable_label(drawing, "Draw a region on the map");
    if response
        .on_hover_text("Where the reference surface is taken from; none = everywhere")
        .clicked()
    {
        let tool = if drawing {
            Tool::Look
        } else {
            Tool::LevelRegion
        };
        out.push(Command::Take(tool));
    }
}

fn level_facts(ui: &mut Ui, level: &Leveled) {
    let noise = level.noise_nm.map_or("not known".to_owned(), |n| {
        format!("{} nm", format::significant(n, 2))
    });
    fact(ui, "Noise", noise).on_hover_text("Standard deviation of the white part of the noise");
    let degrees = |slope: f64| format!("{}°", format::significant(slope.atan().to_degrees(), 2));
    fact(
        ui,
        "Tilt taken off",
        format!(
            "{} in x, {} in y",
            degrees(level.slope[0]),
            degrees(level.slope[1])
        ),
    );
    if let Some(drift) = level.drift_nm {
        fact(ui, "Drift", format!("{} nm", format::significant(drift, 2)))
            .on_hover_text("Height drift along the slow axis beyond the plane, peak to peak");
    }
    let jumps = &level.row_jumps;
    if jumps.is_empty() {
        fact(ui, "Row jumps", "none");
    } else {
        let text = jumps
            .iter()
            .take(6)
            .map(|j| format!("row {}: {:+.2} nm", j.row, j.jump_nm))
            .collect::<Vec<_>>()
            .join("\n");
        let more = jumps.len().saturating_sub(6);
        let text = match more {
            0 => text,
            n => format!("{text}\nand {n} more"),
        };
        fact(ui, "Row jumps", text).on_hover_text("Wedges at the left of the map show where");
    }
    for warning in &level.warnings {
        caution(ui, warning);
    }
}

/// The surface: how much of it can be relied on.
pub fn surface_ui(ui: &mut Ui, panel: &Panel, desk: &mut Desk, out: &mut Vec<Command>) {
    heading(ui, "What the tip touched");
    match &panel.outcome.surface {
        None => remark(ui, "There is no corrected surface: it needs a tip."),
        Some(surface) => {
            legend::reliability_ui(ui, &mut desk.swatches, &surface.reliability);
            let mut marks = desk.reliability;
            if ui
                .checkbox(&mut marks, "Marks on the corrected map")
                .changed()
            {
                out.push(Command::Reliability(marks));
            }
            let leaning = surface.edge_leaning.iter().filter(|&&e| e).count();
            let all = surface.edge_leaning.len().max(1);
            fact(ui, "Edge-leaning", format::percent(leaning as f64 / all as f64)).on_hover_text(
                "Pixels whose height could change if more had been scanned: beyond the edge or in voids",
            );
            fact(
                ui,
                "Tolerance",
                format!("{} nm", format::significant(surface.tolerance_nm, 2)),
            )
            .on_hover_text("How near a height must be to count as a contact");
            ui.add_space(4.0);
            remark(
                ui,
                "The corrected surface is exact, within noise and tip, where the tip touched. Elsewhere it is an upper bound.",
            );
        }
    }
    cautions(ui, panel);
    heading(ui, "Ghost tip");
    let mut ghost = desk.ghost;
    if ui
        .checkbox(&mut ghost, "Follow the pointer")
        .on_hover_text("Stands the tip in contact under the pointer; the section follows (G)")
        .changed()
    {
        out.push(Command::Ghost(ghost));
    }
    remark(
        ui,
        "Its outline stands in the section, its contacts are marked on the corrected map. A click leaves the section there.",
    );
}

/// The cautions on the whole that concern corrected heights and dimensions.
pub fn cautions(ui: &mut Ui, panel: &Panel) {
    let o = panel.outcome;
    let of_level = o.level.as_ref().map_or(&[][..], |l| &l.warnings);
    let texts: Vec<&String> = o
        .warnings
        .iter()
        .filter(|w| !of_level.contains(w))
        .collect();
    if !texts.is_empty() {
        heading(ui, "Cautions");
    }
    for text in texts {
        caution(ui, text);
    }
}

/// The record: what a reader must know, where things are kept.
pub fn record_ui(
    ui: &mut Ui,
    panel: &Panel,
    keep: &super::record_view::Keep,
    out: &mut Vec<Command>,
) {
    heading(ui, "Job");
    let help = "Stands at the head of the report";
    if let Some(title) = text_row(ui, "Title", help, &panel.job.title, "none") {
        panel.edit(out, |job| job.title = title);
    }
    fact(ui, "Job file", keep.job_file.clone());
    ui.horizontal(|ui| {
        if ui.button("Save job").on_hover_text("Ctrl+S").clicked() {
            out.push(Command::Save);
        }
        if ui.button("Save as…").clicked() {
            out.push(Command::AskSave);
        }
    });
    heading(ui, "Calibration of the axes");
    calibration_ui(ui, panel, out);
    heading(ui, "Record");
    super::record_view::keep_ui(ui, keep, panel.browse, out);
}

fn calibration_ui(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    remark(ui, "Relative standard uncertainties, for example 0.2 %.");
    let now = panel.job.calibration;
    let per_cent = |v: f64| format!("{} %", (v * 1e8).round() / 1e6);
    for axis in 0..3 {
        let name = ["x", "y", "z"][axis];
        let value = now.map(|c| [c.x, c.y, c.z][axis]);
        let text = value.map_or(String::new(), per_cent);
        let taken = parsed_row(
            ui,
            name,
            "",
            &text,
            "not stated",
            super::record_view::relative,
        );
        if let Some(taken) = taken {
            panel.edit(out, |job| {
                let mut c = job.calibration.unwrap_or_default();
                let v = taken.unwrap_or(0.0);
                match axis {
                    0 => c.x = v,
                    1 => c.y = v,
                    _ => c.z = v,
                }
                let nothing = c.x == 0.0 && c.y == 0.0 && c.z == 0.0 && taken.is_none();
                job.calibration = (!nothing).then_some(c);
            });
        }
    }
    if now.is_none() {
        caution(ui, "Not stated: no calibration is in the budgets.");
    }
}

/// What a dimension is called in lists.
pub fn request_title(request: &crate::dimensions::Request) -> String {
    format!(
        "{} · {}",
        request.name,
        kind_name(request.kind).to_lowercase()
    )
}
