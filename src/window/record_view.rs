//! What is kept: where the record goes, and on the desk what it will say.

use super::colours::Palette;
use super::command::{BrowseFor, Command};
use super::fields::{caution, heading, remark};
use super::marks::{Mark, mark_ui};
use super::table::{quantity, status, values};
use crate::dimensions::Dimension;
use crate::job::{Job, JobFile, Outcome};
use crate::record::Written;
use eframe::egui::{Grid, RichText, ScrollArea, TextEdit, Ui, Widget};
use std::path::{Path, PathBuf};

/// Where things are kept.
#[derive(Debug, Clone, Default)]
pub struct Keep {
    /// The job file, or that there is none.
    pub job_file: String,
    /// The folder the record goes into.
    pub folder: PathBuf,
    /// The record written of this very state.
    pub written: Option<Written>,
    /// Whether it is being written.
    pub writing: bool,
    /// Whether everything is computed.
    pub ready: bool,
}

/// The folder a job's record goes into unless another is given: beside the job.
pub fn folder_for(job: &Job) -> PathBuf {
    let named = job.path.clone().unwrap_or_else(|| job.scan_path());
    let stem = named
        .file_stem()
        .map_or_else(|| "job".into(), |s| s.to_string_lossy().into_owned());
    let folder = job.folder.join(format!("{stem}-record"));
    std::path::absolute(&folder).unwrap_or(folder)
}

/// A relative uncertainty: "0.2 %" or "0.002".
pub fn relative(text: &str) -> Result<f64, String> {
    let (number, factor) = match text.trim().strip_suffix('%') {
        Some(number) => (number.trim(), 0.01),
        None => (text.trim(), 1.0),
    };
    let value = factor
        * number
            .parse::<f64>()
            .map_err(|_| format!("\"{text}\" is not a number"))?;
    if (0.0..1.0).contains(&value) {
        Ok(value)
    } else {
        Err(format!("\"{text}\" is not from 0 to below 100 %"))
    }
}

/// The folder's field and the button that writes.
pub fn keep_ui(ui: &mut Ui, keep: &Keep, browse: bool, out: &mut Vec<Command>) {
    let label = ui.label("Folder").on_hover_text(
        "Receives result.json, report.html and the maps surface.npy, certainty.npy, tip.npy",
    );
    let id = ui.scope_id().with("record folder");
    let shown = keep.folder.display().to_string();
    // A draft belongs to the folder it was typed over: another job has another one.
    let (over, mut draft) = ui
        .data(|d| d.get_temp::<(String, String)>(id))
        .filter(|(over, _)| *over == shown)
        .unwrap_or_else(|| (shown.clone(), shown.clone()));
    TextEdit::singleline(&mut draft)
        .desired_width(ui.available_width() - 8.0)
        .ui(ui)
        .labelled_by(label.id)
        .on_hover_text(&draft);
    ui.data_mut(|d| d.insert_temp(id, (over, draft.clone())));
    ui.horizontal(|ui| {
        let can = keep.ready && !keep.writing && !draft.trim().is_empty();
        let button = ui.add_enabled(can, eframe::egui::Button::new("Write record"));
        let button = button
            .on_hover_text("Ctrl+R")
            .on_disabled_hover_text("When everything is computed");
        if button.clicked() {
            out.push(Command::WriteRecord(PathBuf::from(draft.trim())));
        }
        if browse && ui.button("Browse…").clicked() {
            out.push(Command::Browse(BrowseFor::Record));
        }
        if keep.writing {
            ui.spinner();
            ui.label("writing");
        }
    });
    if let Some(written) = &keep.written {
        let p = Palette::of(ui);
        ui.horizontal(|ui| {
            mark_ui(ui, Mark::Done);
            ui.label(RichText::new("Written").color(p.good));
        });
        path_ui(ui, "Report", &written.report);
        path_ui(ui, "Results", &written.result);
    }
}

/// A path that can be copied: there may be no program to show a folder.
fn path_ui(ui: &mut Ui, name: &str, path: &Path) {
    let text = path.display().to_string();
    remark(ui, &format!("{name}: {text}"));
    if ui
        .small_button("Copy path")
        .accessible_name(format!("Copy path of the {}", name.to_lowercase()))
        .clicked()
    {
        ui.ctx().copy_text(text);
    }
}

/// What the record will say, on the desk.
pub fn preview_ui(ui: &mut Ui, job: &JobFile, outcome: &Outcome) {
    ScrollArea::vertical().auto_shrink(false).show(ui, |ui| {
        ui.add_space(4.0);
        let title = if job.title.is_empty() {
            "Untitled job"
        } else {
            &job.title
        };
        ui.heading(title);
        remark(
            ui,
            "What the record will say. The report adds the figures and the budgets.",
        );
        heading(ui, "Dimensions");
        match outcome.dimensions.as_deref() {
            Some(lines) if !lines.is_empty() => lines_ui(ui, lines),
            _ => remark(ui, "None were asked for."),
        }
        heading(ui, "Cautions");
        let findings = outcome.tip.iter().flat_map(|tip| &tip.diagnosis);
        let mut cautions: Vec<&String> = outcome.warnings.iter().chain(findings).collect();
        cautions.dedup();
        if cautions.is_empty() {
            remark(ui, "None.");
        }
        for text in cautions {
            caution(ui, text);
        }
        heading(ui, "Job file");
        remark(ui, "Reproduces all of this.");
        match job.to_toml() {
            Ok(mut text) => {
                let label = "Job file as text, read only";
                TextEdit::multiline(&mut text.as_str())
                    .code_editor()
                    .desired_width(f32::INFINITY)
                    .desired_rows(6)
                    .ui(ui)
                    .accessible_name(label);
                text.clear();
            }
            Err(error) => caution(ui, &error.to_string()),
        }
    });
}

fn lines_ui(ui: &mut Ui, lines: &[Dimension]) {
    let p = Palette::of(ui);
    Grid::new("record lines")
        .num_columns(6)
        .spacing([22.0, 6.0])
        .striped(true)
        .show(ui, |ui| {
            for head in [
                "Name",
                "Quantity",
                "As scanned, ± u",
                "Corrected, ± U",
                "95 % interval",
                "Status",
            ] {
                ui.label(RichText::new(head).color(p.faint));
            }
            ui.end_row();
            for line in lines {
                ui.label(&line.name);
                ui.label(quantity(line));
                for text in values(line) {
                    ui.monospace(text);
                }
                let (mark, word) = status(line);
                ui.horizontal(|ui| {
                    mark_ui(ui, mark);
                    ui.label(word);
                });
                ui.end_row();
            }
        });
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn relative_uncertainties_as_people_write_them() {
        assert_eq!(relative("0.2 %"), Ok(0.002));
        assert_eq!(relative("0.002"), Ok(0.002));
        assert!(relative("2").unwrap_err().contains('2'));
        assert!(relative("-1 %").is_err() && relative("some").is_err());
    }

    #[test]
    fn the_record_lies_beside_the_job() {
        let mut job = Job::on_scan(Path::new("/scans/a.tiff"));
        assert_eq!(folder_for(&job), Path::new("/scans/a-record"));
        job.path = Some("/jobs/b.toml".into());
        job.folder = "/jobs".into();
        assert_eq!(folder_for(&job), Path::new("/jobs/b-record"));
    }
}
