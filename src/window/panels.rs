//! The panels at the left of the desk: one for each stage, facts first, then settings.

use super::command::{BrowseFor, Command};
use super::fields::{
    caution, choice_row, fact, heading, length_row, number_row, parsed_row, remark, text_row,
};
use super::format;
use super::legend;
use super::map_view::Desk;
use super::state::{Tool, kind_name};
use crate::heightmap::HeightMap;
use crate::job::{JobFile, LevelMethod, Outcome, Threshold, TipFrom, TipShape, TipSpec};
use crate::leveling::Leveled;
use crate::units::{Length, format_length};
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
}

impl Panel<'_> {
    /// Asks for the job changed by `change`.
    fn edit(&self, out: &mut Vec<Command>, change: impl FnOnce(&mut JobFile)) {
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

const SOURCES: [(TipFrom, &str, &str); 3] = [
    (
        TipFrom::Blind,
        "Blind, this scan",
        "The bluntest tip that the scan allows. It holds the bluntness of the sharpest feature too.",
    ),
    (TipFrom::Model, "Model", "A shape given by its formula."),
    (TipFrom::File, "File", "A tip on the scan's own grid."),
];

/// The tip: where it comes from, what it is, what is wrong with it.
pub fn tip_ui(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    heading(ui, "Where the tip comes from");
    let tip = &panel.job.tip;
    if let Some(from) = choice_row(
        ui,
        "From",
        "Where the tip's shape comes from",
        tip.from,
        &SOURCES,
    ) {
        panel.edit(out, |job| take_source(&mut job.tip, from));
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
    match tip.from {
        TipFrom::Blind | TipFrom::KnownShape => blind_settings(ui, panel, out),
        TipFrom::Model => model_settings(ui, panel, out),
        TipFrom::File => file_settings(ui, panel, out),
    }
    if let Some(found) = &panel.outcome.tip {
        heading(ui, "What it is");
        read_out_ui(ui, found);
    }
    let none = panel
        .outcome
        .warnings
        .iter()
        .filter(|w| w.starts_with("No tip"));
    let found = panel.outcome.tip.iter().flat_map(|t| t.diagnosis.iter());
    let findings: Vec<&String> = none.chain(found).collect();
    if !findings.is_empty() {
        heading(ui, "Findings");
        for finding in findings {
            caution(ui, finding);
        }
    }
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
                "Principal radii {} nm and {} nm; ± is the standard uncertainty",
                format::significant(r.principal_nm[0], 3),
                format::significant(r.principal_nm[1], 3)
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
        }
        None => {
            fact(ui, "Half-angle", "not identified");
        }
    }
    let depth = found
        .exercised_depth_nm
        .map_or("all of it".to_owned(), |d| {
            format!("{} nm", format::significant(d, 3))
        });
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
