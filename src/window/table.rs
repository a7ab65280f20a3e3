//! The table of results, as scanned and corrected side by side, and one line's particulars.

use super::colours::Palette;
use super::command::Command;
use super::fields::{caution, fact, heading, remark};
use super::format;
use super::marks::{Mark, mark_ui};
use super::particle_bars::bars_ui;
use super::second_opinions::evidence_ui;
use super::state::request_of;
use crate::dimensions::{Dimension, Kind, Request, Status, particle_histograms};
use crate::uncertainty::{Component, Distribution};
use eframe::egui::{Align, Layout, RichText, ScrollArea, Ui};
use egui_extras::{Column, TableBuilder};

/// What the table shows.
pub struct Results<'a> {
    /// Result lines; `None` while they are under way for the first time.
    pub lines: Option<&'a [Dimension]>,
    /// The job's dimensions.
    pub requests: &'a [Request],
    /// The chosen line.
    pub line: Option<usize>,
    /// The chosen dimension.
    pub chosen: Option<usize>,
}

/// The quantity with its height fraction.
pub fn quantity(line: &Dimension) -> String {
    match line.at {
        Some(at) => format!("{} at {} %", line.quantity, (1e4 * at).round() / 100.0),
        None => line.quantity.clone(),
    }
}

/// Mark and word of a status.
pub fn status(line: &Dimension) -> (Mark, &'static str) {
    match line.status {
        Some(Status::Touched) => (Mark::Full, "touched"),
        Some(Status::Bounded) => (Mark::Half, "bounded"),
        None => (Mark::Open, "not corrected"),
    }
}

fn meaning(line: &Dimension) -> &'static str {
    match line.status {
        Some(Status::Touched) => "The tip touched every point this rests on.",
        Some(Status::Bounded) => {
            "The tip did not touch every point this rests on: the truth lies in the interval."
        }
        None => "There is no corrected value; the flags say why.",
    }
}

/// Table at the left, the chosen line's particulars at the right.
pub fn results_ui(ui: &mut Ui, results: &Results, out: &mut Vec<Command>) {
    let Some(lines) = results.lines.filter(|l| !l.is_empty()) else {
        let text = if results.requests.is_empty() {
            "No dimensions yet. Take Step height or Line width, then drag a region on either map."
        } else {
            "Results come when the surface is there."
        };
        remark(ui, text);
        return;
    };
    let chosen = results.line.and_then(|i| lines.get(i));
    let wide = ui.available_width();
    let side = if chosen.is_some() && wide > 760.0 {
        (0.265 * wide).clamp(250.0, 460.0)
    } else {
        0.0
    };
    ui.horizontal_top(|ui| {
        ui.vertical(|ui| {
            ui.set_width(wide - side - if side > 0.0 { 16.0 } else { 0.0 });
            table(ui, lines, results, out);
        });
        if let (Some(line), true) = (chosen, side > 0.0) {
            ui.vertical(|ui| {
                ScrollArea::vertical()
                    .id_salt("particulars")
                    .auto_shrink(false)
                    .show(ui, |ui| {
                        particulars(ui, line, |ui| particles_ui(ui, line, lines, results));
                    });
            });
        }
    });
}

fn table(ui: &mut Ui, lines: &[Dimension], results: &Results, out: &mut Vec<Command>) {
    let p = Palette::of(ui);
    let right = Layout::right_to_left(Align::Center);
    let head = |ui: &mut Ui, text: &str, help: &str| {
        ui.label(RichText::new(text).color(p.faint))
            .on_hover_text(help);
    };
    // Beside the particulars of a line names and quantities give way.
    let narrow = ui.available_width() < 740.0;
    let status_gap = if narrow { 4.0 } else { 10.0 };
    let [name, quantity_wide, status_wide] = match narrow {
        true => [90.0, 110.0, 72.0],
        false => [116.0, 126.0, 110.0],
    };
    TableBuilder::new(ui)
        .id_salt(("results", narrow))
        .striped(true)
        .cell_layout(Layout::left_to_right(Align::Center))
        .auto_shrink(false)
        .column(Column::initial(name).at_least(60.0).clip(true))
        .column(Column::initial(quantity_wide).at_least(80.0).clip(true))
        .column(Column::initial(if narrow { 114.0 } else { 124.0 }).at_least(90.0))
        .column(Column::initial(if narrow { 114.0 } else { 124.0 }).at_least(90.0))
        .column(Column::initial(if narrow { 122.0 } else { 130.0 }).at_least(90.0))
        .column(Column::remainder().at_least(status_wide).clip(true))
        .header(24.0, |mut row| {
            row.col(|ui| {
                ui.add_space(9.0);
                head(ui, "Name", "");
            });
            row.col(|ui| head(ui, "Quantity", ""));
            for (text, help) in [
                (
                    "As scanned, ± u",
                    "Off the levelled scan, with its standard uncertainty",
                ),
                (
                    "Corrected, ± U",
                    "With the tip's effect taken off, with its expanded uncertainty",
                ),
                (
                    "95 % interval",
                    "Encloses the true value with 95 % coverage, one-sided tip effects included",
                ),
            ] {
                row.col(|ui| {
                    ui.with_layout(right, |ui| head(ui, text, help));
                });
            }
            row.col(|ui| {
                ui.add_space(status_gap);
                head(ui, "Status", "");
            });
        })
        .body(|mut body| {
            for (i, line) in lines.iter().enumerate() {
                let request = request_of(results.requests, line);
                let mine = request.is_some() && request == results.chosen;
                body.row(26.0, |mut row| {
                    row.set_selected(mine && results.line == Some(i));
                    row.col(|ui| {
                        if ui.selectable_label(mine, &line.name).clicked() {
                            out.push(Command::SelectLine(i));
                        }
                    });
                    row.col(|ui| {
                        ui.label(quantity(line)).on_hover_text(line.assumptions);
                    });
                    for text in values(line) {
                        row.col(|ui| {
                            ui.with_layout(right, |ui| ui.monospace(text));
                        });
                    }
                    row.col(|ui| {
                        ui.add_space(status_gap);
                        status_ui(ui, line, narrow);
                    });
                });
            }
        });
}

/// The three columns of numbers, with the unit.
pub fn values(line: &Dimension) -> [String; 3] {
    let unit = |text: String| match text.as_str() {
        format::NONE => text,
        _ if line.unit.is_empty() => text,
        _ => format!("{text} {}", line.unit),
    };
    [
        unit(format::as_scanned(line.as_scanned)),
        unit(format::corrected(line.corrected)),
        unit(format::interval(line.corrected)),
    ]
}

fn status_ui(ui: &mut Ui, line: &Dimension, narrow: bool) {
    let p = Palette::of(ui);
    let (mark, word) = status(line);
    mark_ui(ui, mark);
    ui.label(RichText::new(word).color(mark.colour(p)))
        .on_hover_text(meaning(line));
    // Where there is no room for it the particulars hold the notes.
    if !line.flags.is_empty() && !narrow {
        let text = match line.flags.len() {
            1 => "1 note".to_owned(),
            n => format!("{n} notes"),
        };
        ui.label(RichText::new(text).color(p.faint))
            .on_hover_text(line.flags.join("\n\n"));
    }
}

/// Heights and diameters of all particles of the line's request.
fn particles_ui(ui: &mut Ui, line: &Dimension, lines: &[Dimension], results: &Results) {
    if line.kind != Kind::Particle {
        return;
    }
    let of = |l: &Dimension| request_of(results.requests, l);
    let own = of(line);
    let mine: Vec<&Dimension> = lines.iter().filter(|l| of(l) == own).collect();
    let histograms = particle_histograms(&mine);
    if !histograms.is_empty() {
        heading(ui, "All particles listed");
        bars_ui(ui, &histograms);
    }
}

/// Everything about one line; `between` comes before budget and assumptions.
fn particulars(ui: &mut Ui, line: &Dimension, between: impl FnOnce(&mut Ui)) {
    heading(ui, &format!("{}: {}", line.name, quantity(line)));
    remark(ui, meaning(line));
    for flag in &line.flags {
        caution(ui, flag);
    }
    if let Some(c) = line.corrected
        && let (Some(u), Some(k)) = (c.u, c.k)
    {
        fact(
            ui,
            "u",
            format!("{} {}", format::significant(u, 2), line.unit),
        );
        fact(ui, "k", format::significant(k, 3));
    }
    evidence_ui(ui, line);
    between(ui);
    if !line.budget.is_empty() {
        heading(ui, "Budget");
        for c in &line.budget {
            fact(ui, &c.source, contribution(c, line.unit)).on_hover_text(format!(
                "u = {}, sensitivity {}, {}",
                format::significant(c.u, 3),
                format::significant(c.sensitivity, 3),
                distribution(c.distribution)
            ));
        }
    }
    heading(ui, "Assumes");
    remark(ui, line.assumptions);
}

fn contribution(c: &Component, unit: &str) -> String {
    format!(
        "{} {unit}",
        format::significant((c.u * c.sensitivity).abs(), 2)
    )
}

fn distribution(d: Distribution) -> &'static str {
    match d {
        Distribution::Normal => "normal",
        Distribution::Rectangular => "rectangular",
        Distribution::Triangular => "triangular",
        Distribution::OneSided => "one-sided",
    }
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;

    #[test]
    fn both_columns_stand_side_by_side() {
        let line = invented::dimension("line 1");
        assert_eq!(quantity(&line), "line width at 50 %");
        assert_eq!(
            values(&line),
            ["128.70 ± 0.90 nm", "100.4 ± 2.2 nm", "97.9 … 103.1 nm"]
        );
        assert_eq!(status(&line), (Mark::Half, "bounded"));
        let bare = Dimension {
            as_scanned: None,
            corrected: None,
            status: None,
            ..line
        };
        assert_eq!(values(&bare), [format::NONE; 3]);
    }
}
