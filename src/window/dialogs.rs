//! The other dialogs: what a file does not say, unsaved changes, the help.

use super::command::Command;
use super::fields::{at_right, dialog, remark};
use crate::error::{Error, ErrorKind};
use crate::files;
use crate::heightmap::Pitch;
use crate::job::ScanSpec;
use crate::units::Length;
use eframe::egui::{Button, ComboBox, Context, Grid, Key, RichText, TextEdit, Ui, Widget};
use std::path::Path;

/// Units that heights are usually stated in.
const UNITS: [&str; 5] = ["pm", "nm", "um", "mm", "m"];

/// What the user is asked because the file does not say it.
#[derive(Debug, Clone, PartialEq)]
pub struct Question {
    /// Why it is asked.
    pub why: String,
    /// Pixel pitch as typed, x and y, where it is missing.
    pub pitch: Option<[String; 2]>,
    /// Height unit, where it is missing; empty until chosen, for a unit is never guessed.
    pub unit: Option<String>,
    /// The maps of the file by name, and the one chosen, where there are several.
    pub maps: Option<(Vec<String>, usize)>,
    /// What was wrong with the answer.
    pub refused: String,
}

impl Question {
    /// The question that `error` raises about the scan at `path`; `None` where it raises none.
    ///
    /// Looks into the file for everything it does not say, so that one question is enough.
    pub fn about(error: &Error, path: &Path, spec: &ScanSpec) -> Option<Self> {
        use ErrorKind::{MissingHeightUnit, MissingPitch, SeveralMaps};
        let kind = error.kind();
        if !matches!(kind, MissingHeightUnit | MissingPitch | SeveralMaps) {
            return None;
        }
        let mut question = Self {
            why: error.what().to_owned(),
            pitch: (kind == MissingPitch).then(|| [String::new(), String::new()]),
            unit: (kind == MissingHeightUnit).then(String::new),
            maps: None,
            refused: String::new(),
        };
        let seen = spec.open_options().and_then(|o| files::inspect(path, &o));
        if let Ok(seen) = seen {
            let several = seen.maps.len() > 1 && spec.map.is_none();
            if several && (kind == SeveralMaps || seen.map.is_none()) {
                let names = seen
                    .maps
                    .iter()
                    .map(|m| format!("{} ({} × {})", m.name, m.columns, m.rows))
                    .collect();
                question.maps = Some((names, 0));
            } else {
                if seen.pitch_nm.is_none() {
                    question.pitch = Some([String::new(), String::new()]);
                }
                if seen.nm_per_count.is_none() {
                    question.unit = Some(String::new());
                }
            }
        } else if kind == SeveralMaps {
            question.maps = Some((Vec::new(), 0));
        }
        Some(question)
    }

    /// The scan's entry with the answers, or what is wrong with them.
    pub fn answered(&self, spec: &ScanSpec) -> Result<ScanSpec, String> {
        let mut spec = spec.clone();
        if let Some([x, y]) = &self.pitch {
            let x: Length = x.parse().map_err(|e: Error| e.to_string())?;
            let y = if y.trim().is_empty() {
                x
            } else {
                y.parse().map_err(|e: Error| e.to_string())?
            };
            Pitch {
                x: x.nm(),
                y: y.nm(),
            }
            .checked()
            .map_err(|e| e.to_string())?;
            spec.pitch = Some([x, y]);
        }
        if let Some(unit) = &self.unit {
            if unit.is_empty() {
                return Err("Choose the unit of the stored heights.".to_owned());
            }
            spec.height_unit = Some(unit.clone());
        }
        if let Some((_, chosen)) = &self.maps {
            spec.map = Some(*chosen);
        }
        Ok(spec)
    }
}

/// Asks; gives the completed entry when answered.
pub fn question_ui(
    ctx: &Context,
    question: &mut Question,
    spec: &ScanSpec,
    out: &mut Vec<Command>,
) -> Option<ScanSpec> {
    let mut answer = None;
    let modal = dialog(ctx, "question").show(ctx, |ui| {
        ui.set_width(460.0);
        ui.heading("The file does not say everything");
        ui.add_space(4.0);
        ui.label(&question.why);
        ui.add_space(6.0);
        question_fields(ui, question);
        if !question.refused.is_empty() {
            let p = super::colours::Palette::of(ui);
            ui.label(RichText::new(question.refused.clone()).color(p.bad));
        }
        remark(ui, "The answer is kept in the job. Nothing is guessed.");
        ui.add_space(6.0);
        at_right(ui, |ui| {
            let enter = ui.input(|i| i.key_pressed(Key::Enter));
            if ui.button("Open with this").clicked() || enter {
                match question.answered(spec) {
                    Ok(spec) => answer = Some(spec),
                    Err(why) => question.refused = why,
                }
            }
            if ui.button("Cancel").clicked() {
                out.push(Command::Stay);
            }
        });
    });
    if modal.should_close() {
        out.push(Command::Stay);
    }
    answer
}

fn question_fields(ui: &mut Ui, question: &mut Question) {
    Grid::new("question")
        .num_columns(2)
        .spacing([14.0, 8.0])
        .show(ui, |ui| {
            if let Some([x, y]) = &mut question.pitch {
                for (name, text, hint) in [
                    ("Pixel pitch along x", x, "for example 2 nm"),
                    ("Pixel pitch along y", y, "as along x"),
                ] {
                    let label = ui.label(name);
                    TextEdit::singleline(text)
                        .hint_text(hint)
                        .desired_width(180.0)
                        .ui(ui)
                        .labelled_by(label.id);
                    ui.end_row();
                }
            }
            if let Some(unit) = &mut question.unit {
                let label = ui
                    .label("A stored 1 is one")
                    .on_hover_text("Unit of the stored heights");
                ComboBox::from_id_salt("unit")
                    .selected_text(if unit.is_empty() {
                        "choose"
                    } else {
                        unit.as_str()
                    })
                    .show_ui(ui, |ui| {
                        for known in UNITS {
                            ui.selectable_value(unit, known.to_owned(), known);
                        }
                    })
                    .response
                    .labelled_by(label.id);
                ui.end_row();
            }
            if let Some((names, chosen)) = &mut question.maps {
                let label = ui.label("Map");
                if names.is_empty() {
                    ui.add(eframe::egui::DragValue::new(chosen))
                        .labelled_by(label.id);
                } else {
                    let text = names.get(*chosen).cloned().unwrap_or_default();
                    ComboBox::from_id_salt("map")
                        .width(260.0)
                        .selected_text(text)
                        .show_ui(ui, |ui| {
                            for (i, name) in names.iter().enumerate() {
                                ui.selectable_value(chosen, i, name);
                            }
                        })
                        .response
                        .labelled_by(label.id);
                }
                ui.end_row();
            }
        });
}

/// Asks what to do with unsaved changes.
pub fn close_ui(ctx: &Context, out: &mut Vec<Command>) {
    let modal = dialog(ctx, "close").show(ctx, |ui| {
        ui.set_width(400.0);
        ui.heading("The job has unsaved changes");
        ui.add_space(4.0);
        ui.label("Save it first? A saved job reproduces every result.");
        ui.add_space(8.0);
        at_right(ui, |ui| {
            if ui.button("Save").clicked() {
                out.push(Command::Stay);
                out.push(Command::Save);
            }
            if ui.button("Close without saving").clicked() {
                out.push(Command::CloseAnyway);
            }
            if ui.button("Stay").clicked() {
                out.push(Command::Stay);
            }
        });
    });
    if modal.should_close() {
        out.push(Command::Stay);
    }
}

/// Keys and what they do.
pub const KEYS: [(&str, &str); 20] = [
    ("Ctrl+1 … Ctrl+5", "Scan, Tip, Surface, Dimensions, Record"),
    ("Ctrl+O", "Open a scan or a job"),
    ("Ctrl+S", "Save the job"),
    ("Ctrl+Shift+S", "Save the job under another name"),
    ("Ctrl+R", "Write the record"),
    ("Ctrl+Z, Ctrl+Shift+Z", "Undo, redo"),
    ("F5", "Compute again, files read anew"),
    ("Esc", "Put the tool away; stop computing"),
    ("L", "Draw the section line"),
    ("H, W", "Place a step height, a line width"),
    ("Delete", "Remove the chosen dimension"),
    ("G", "Ghost tip on or off"),
    ("M", "Reliability marks on or off"),
    ("F, double click", "Fit the maps"),
    ("Wheel, pinch", "Zoom both maps at the pointer"),
    ("Drag, Space+drag", "Move both maps"),
    ("+, −", "Zoom the map that has the focus"),
    ("Arrows", "Move the section line by a pixel (Shift: ten)"),
    ("Tab", "Next field or button"),
    ("F1", "This list"),
];

/// The help.
pub fn help_ui(ctx: &Context, out: &mut Vec<Command>) {
    let modal = dialog(ctx, "help").show(ctx, |ui| {
        ui.set_width(520.0);
        ui.heading("Keys and pointer");
        ui.add_space(6.0);
        Grid::new("keys").num_columns(2).spacing([24.0, 5.0]).striped(true).show(ui, |ui| {
            for (key, does) in KEYS {
                ui.label(RichText::new(key).strong());
                ui.label(does);
                ui.end_row();
            }
        });
        ui.add_space(6.0);
        remark(
            ui,
            "Files can be dropped on the window. Everything the mouse does can be typed in the panels at the left.",
        );
        at_right(ui, |ui| {
            if ui.add(Button::new("Close")).clicked() {
                out.push(Command::Help(false));
            }
        });
    });
    if modal.should_close() {
        out.push(Command::Help(false));
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn only_what_is_missing_is_asked_for() {
        let spec = ScanSpec::default();
        let error = Error::new(ErrorKind::MissingPitch, "no pitch");
        let question = Question::about(&error, Path::new("/nowhere"), &spec).unwrap();
        assert!(question.pitch.is_some() && question.unit.is_none());
        let other = Error::new(ErrorKind::Malformed, "cut short");
        assert!(Question::about(&other, Path::new("/nowhere"), &spec).is_none());
    }

    #[test]
    fn a_bare_array_is_asked_for_pitch_and_unit_at_once() {
        let dir = tempfile::tempdir().unwrap();
        let path = dir.path().join("bare.npy");
        ndarray_npy::write_npy(&path, &ndarray::Array2::<f32>::zeros((3, 4))).unwrap();
        let spec = ScanSpec::default();
        let error = files::open(&path, &files::OpenOptions::default()).unwrap_err();
        let mut question = Question::about(&error, &path, &spec).unwrap();
        assert!(question.pitch.is_some() && question.unit.is_some());
        assert!(question.answered(&spec).unwrap_err().contains("length"));
        question.pitch = Some(["2".to_owned(), String::new()]);
        assert!(question.answered(&spec).unwrap_err().contains("unit"));
        question.pitch = Some(["2 nm".to_owned(), String::new()]);
        assert!(question.answered(&spec).unwrap_err().contains("heights"));
        question.unit = Some("nm".to_owned());
        let answered = question.answered(&spec).unwrap();
        let map = files::open(&path, &answered.open_options().unwrap()).unwrap();
        assert_eq!(map.pitch(), Pitch::square(2.0));
    }
}
