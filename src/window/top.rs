//! The bar at the top: the five stages as a track, and what concerns the whole job.

use super::colours::Palette;
use super::command::Command;
use super::settings::ThemeChoice;
use super::state::{Progressed, Stage};
use eframe::egui::{
    Align, Align2, Button, FontId, Layout, RichText, Sense, Stroke, Ui, pos2, vec2,
};

/// Width that the buttons at the right need.
const ACTIONS: f32 = 372.0;
/// Width of the arrow between two stages.
const ARROW: f32 = 14.0;
/// Height of a stage's button.
const TALL: f32 = 42.0;

/// What the bar shows.
pub struct Top<'a> {
    /// Stage on the desk.
    pub stage: Stage,
    /// How far each is.
    pub progress: [Progressed; 5],
    /// Whether there is a job.
    pub job: bool,
    /// Whether there is something to undo.
    pub can_undo: bool,
    /// Whether there is something to redo.
    pub can_redo: bool,
    /// Theme.
    pub theme: &'a ThemeChoice,
}

/// Width of a stage's button in a bar of the given width.
pub fn stage_width(bar: f32) -> f32 {
    ((bar - ACTIONS - 4.0 * ARROW) / 5.0)
        .clamp(84.0, 150.0)
        .floor()
}

/// Paints the bar.
pub fn top_ui(ui: &mut Ui, top: &Top, out: &mut Vec<Command>) {
    let width = stage_width(ui.available_width());
    ui.horizontal(|ui| {
        ui.spacing_mut().item_spacing.x = 0.0;
        for (i, stage) in Stage::ALL.into_iter().enumerate() {
            if i > 0 {
                arrow(ui);
            }
            stage_ui(ui, stage, width, top.stage == stage, &top.progress[i], out);
        }
        ui.spacing_mut().item_spacing.x = 6.0;
        ui.with_layout(Layout::right_to_left(Align::Center), |ui| {
            actions(ui, top, out)
        });
    });
}

fn arrow(ui: &mut Ui) {
    let p = Palette::of(ui);
    let (rect, _) = ui.allocate_exact_size(vec2(ARROW, TALL), Sense::hover());
    let c = rect.center();
    let stroke = Stroke::new(1.5, p.faint);
    let tip = pos2(c.x + 2.5, c.y);
    ui.painter()
        .line_segment([pos2(c.x - 2.0, c.y - 5.0), tip], stroke);
    ui.painter()
        .line_segment([pos2(c.x - 2.0, c.y + 5.0), tip], stroke);
}

fn stage_ui(
    ui: &mut Ui,
    stage: Stage,
    width: f32,
    chosen: bool,
    progress: &Progressed,
    out: &mut Vec<Command>,
) {
    let p = Palette::of(ui);
    let (mark, word) = progress.mark();
    let button = Button::new("")
        .fill(if chosen { p.chosen } else { p.button })
        .stroke(Stroke::new(1.0, if chosen { p.accent } else { p.line }))
        .min_size(vec2(width, TALL));
    let response = ui.add(button);
    let rect = response.rect;
    let painter = ui.painter();
    painter.text(
        pos2(rect.center().x, rect.top() + 14.0),
        Align2::CENTER_CENTER,
        stage.name(),
        FontId::proportional(14.5),
        p.text,
    );
    let colour = mark.colour(p);
    let galley = painter.layout_no_wrap(word.to_owned(), FontId::proportional(12.0), colour);
    let left = rect.center().x - (galley.size().x + 18.0) / 2.0;
    let y = rect.top() + 30.0;
    mark.paint(painter, pos2(left + 6.0, y), colour);
    painter.galley(pos2(left + 18.0, y - galley.size().y / 2.0), galley, colour);
    let response = match progress {
        Progressed::Waiting(why) | Progressed::Attention(why) => response.on_hover_text(why),
        _ => response,
    };
    let name = format!("{}, {word}", stage.name());
    if response.accessible_name(name).clicked() {
        out.push(Command::Go(stage));
    }
}

fn actions(ui: &mut Ui, top: &Top, out: &mut Vec<Command>) {
    if ui
        .button("Help")
        .on_hover_text("Keys and pointer (F1)")
        .clicked()
    {
        out.push(Command::Help(true));
    }
    ui.menu_button("Theme", |ui| {
        for choice in [ThemeChoice::System, ThemeChoice::Light, ThemeChoice::Dark] {
            if ui
                .selectable_label(*top.theme == choice, choice.name())
                .clicked()
            {
                out.push(Command::Theme(choice));
                ui.close();
            }
        }
    });
    let redo = ui.add_enabled(top.can_redo, Button::new("Redo"));
    if redo.on_hover_text("Ctrl+Shift+Z").clicked() {
        out.push(Command::Redo);
    }
    let undo = ui.add_enabled(top.can_undo, Button::new("Undo"));
    if undo.on_hover_text("Ctrl+Z").clicked() {
        out.push(Command::Undo);
    }
    let save = ui.add_enabled(top.job, Button::new("Save"));
    if save.on_hover_text("Save the job (Ctrl+S)").clicked() {
        out.push(Command::Save);
    }
    let p = Palette::of(ui);
    let open = Button::new(RichText::new("Open…").color(p.text)).stroke(Stroke::new(1.0, p.accent));
    if ui.add(open).on_hover_text("Ctrl+O").clicked() {
        out.push(Command::AskOpen);
    }
}
