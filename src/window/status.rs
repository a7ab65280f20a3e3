//! The line at the bottom: the pointer's place at the left, the work at the right; messages.

use super::colours::Palette;
use super::command::Command;
use super::format;
use super::map_view::pixel_at;
use super::marks::{Mark, mark_ui};
use crate::error::Error;
use crate::job::Outcome;
use crate::progress::Progress;
use eframe::egui::{Align, Layout, ProgressBar, RichText, Ui};

/// Something to tell that stays until it is put away.
#[derive(Debug, Clone, PartialEq)]
pub struct Message {
    /// What happened.
    pub what: String,
    /// What can be done about it.
    pub remedy: String,
    /// Whether something failed.
    pub failed: bool,
}

impl Message {
    /// Of an error.
    pub fn of(error: &Error) -> Self {
        Self {
            what: error.what().to_owned(),
            remedy: error.remedy_text().to_owned(),
            failed: true,
        }
    }

    /// Good news.
    pub fn news(what: impl Into<String>) -> Self {
        Self {
            what: what.into(),
            remedy: String::new(),
            failed: false,
        }
    }
}

/// The readout: place and both heights.
pub fn readout(outcome: &Outcome, pointer: Option<(f64, f64)>) -> Option<String> {
    let (x, y) = pointer?;
    let level = outcome.level.as_ref()?;
    let at = pixel_at(&level.map, (x, y))?;
    let scanned = format::height(level.map.heights()[at]);
    let place = |nm: f64| crate::units::format_length(nm);
    let mut text = format!("x {}   y {}   as scanned {scanned}", place(x), place(y));
    if let Some(z) = outcome
        .surface
        .as_ref()
        .and_then(|s| s.surface.heights().get(at).copied())
    {
        text += &format!("   corrected {}", format::height(z));
    }
    Some(text)
}

/// Paints the line.
pub fn status_ui(
    ui: &mut Ui,
    readout: Option<&str>,
    hint: &str,
    work: Option<&Progress>,
    out: &mut Vec<Command>,
) {
    let p = Palette::of(ui);
    ui.horizontal_centered(|ui| {
        match readout {
            Some(text) => ui.monospace(text),
            None => ui.label(RichText::new(hint).color(p.faint)),
        };
        ui.with_layout(Layout::right_to_left(Align::Center), |ui| match work {
            Some(progress) => {
                if ui.small_button("Stop").on_hover_text("Esc").clicked() {
                    out.push(Command::Cancel);
                }
                let bar = ProgressBar::new(progress.fraction()).desired_width(160.0);
                ui.add(bar).accessible_name("Progress");
                ui.label(progress.label());
            }
            None => {
                ui.label(RichText::new("nothing under way").color(p.faint));
            }
        });
    });
}

/// Paints a message with a button that puts it away.
pub fn message_ui(ui: &mut Ui, message: &Message, out: &mut Vec<Command>) {
    let p = Palette::of(ui);
    let mark = if message.failed {
        Mark::Failed
    } else {
        Mark::Done
    };
    ui.horizontal_top(|ui| {
        mark_ui(ui, mark);
        ui.with_layout(Layout::right_to_left(Align::Min), |ui| {
            if ui.small_button("Put away").clicked() {
                out.push(Command::Dismiss);
            }
            ui.with_layout(Layout::top_down(Align::Min), |ui| {
                ui.add(eframe::egui::Label::new(&message.what).wrap());
                if !message.remedy.is_empty() {
                    let text = RichText::new(&message.remedy).color(p.faint);
                    ui.add(eframe::egui::Label::new(text).wrap());
                }
            });
        });
    });
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;

    #[test]
    fn the_readout_gives_both_heights() {
        let outcome = invented::outcome();
        let text = readout(&outcome, Some((60.0, 60.0))).unwrap();
        assert!(
            text.contains("x 60.00 nm") && text.contains("as scanned 30.00 nm"),
            "{text}"
        );
        assert!(text.contains("corrected 30.00 nm"), "{text}");
        assert!(readout(&outcome, Some((-1.0, 60.0))).is_none());
        assert!(readout(&Outcome::default(), Some((1.0, 1.0))).is_none());
    }
}
