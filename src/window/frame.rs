//! One frame: keys, bars, panels, the desk, dialogs; then what was asked for is done.

use super::app::{App, Dialog};
use super::colours::Palette;
use super::command::Command;
use super::desk::{OnDesk, desk_ui};
use super::dialogs::{close_ui, help_ui, question_ui};
use super::dimensions_panel::dimensions_ui;
use super::fields::remark;
use super::open_dialog::recent_list;
use super::panels::{Panel as StagePanel, record_ui, scan_ui, surface_ui};
use super::record_view::preview_ui;
use super::state::{Judged, Stage, Tool, progressed};
use super::status::{message_ui, readout, status_ui};
use super::tip_panel::tip_ui as tip_panel_ui;
use super::tip_view::{OnTip, tip_ui};
use super::top::{Top, top_ui};
use crate::dimensions::Kind;
use crate::job::Worker;
use eframe::egui::{
    Align2, Area, CentralPanel, Context, Frame, Id, Key, KeyboardShortcut, Margin, Modifiers,
    Order, Panel, RichText, ScrollArea, Ui, vec2,
};

/// Width of the panels at the left.
const PANEL: f32 = 312.0;

impl App {
    /// Paints one frame and does what was asked for in it.
    pub(super) fn frame(&mut self, ui: &mut Ui) {
        self.catch_up();
        let mut out = Vec::new();
        self.keys(ui, &mut out);
        self.bars(ui, &mut out);
        self.stage_panel(ui, &mut out);
        let p = Palette::of(ui);
        let frame = Frame::new()
            .fill(p.desk)
            .inner_margin(Margin::symmetric(12, 8));
        CentralPanel::default()
            .frame(frame)
            .show(ui, |ui| self.centre(ui, &mut out));
        let ctx = ui.ctx().clone();
        self.dialogs(&ctx, &mut out);
        self.drops(&ctx, &mut out);
        if ctx.input(|i| i.viewport().close_requested()) {
            self.asked_to_close();
        }
        for command in out {
            self.execute(command);
        }
    }

    fn bars(&mut self, ui: &mut Ui, out: &mut Vec<Command>) {
        let p = Palette::of(ui);
        let bar = |v: i8| {
            Frame::new()
                .fill(p.panel)
                .inner_margin(Margin::symmetric(12, v))
        };
        let judged = Judged {
            outcome: self.fresh(),
            job: self.opened.as_ref().map(|o| o.history.now()),
            running: self.running(),
            error: self.worker.as_ref().and_then(Worker::error),
            recorded: self.recorded(),
        };
        let top = Top {
            stage: self.stage,
            progress: Stage::ALL.map(|stage| progressed(stage, &judged)),
            job: self.opened.is_some(),
            can_undo: self.opened.as_ref().is_some_and(|o| o.history.can_undo()),
            can_redo: self.opened.as_ref().is_some_and(|o| o.history.can_redo()),
            theme: &self.settings.theme,
        };
        Panel::top("top")
            .frame(bar(8))
            .show(ui, |ui| top_ui(ui, &top, out));
        if let Some(left) = &self.left {
            let name = left
                .job
                .path
                .clone()
                .unwrap_or_else(|| left.job.scan_path());
            Panel::top("left behind").frame(bar(6)).show(ui, |ui| {
                ui.horizontal(|ui| {
                    ui.label(format!("A job was left unsaved: {}", name.display()));
                    if ui.button("Take it up").clicked() {
                        out.push(Command::Recover);
                    }
                    if ui.button("Forget it").clicked() {
                        out.push(Command::Forget);
                    }
                });
            });
        }
        if let Some(message) = &self.message {
            Panel::top("message")
                .frame(bar(6))
                .show(ui, |ui| message_ui(ui, message, out));
        }
        let text = readout(&self.shown, self.desk.pointer);
        Panel::bottom("status")
            .exact_size(30.0)
            .frame(bar(2))
            .show(ui, |ui| {
                let work = self.worker.as_ref().and_then(Worker::under_way);
                status_ui(ui, text.as_deref(), hint(self.desk.tool), work, out);
            });
    }

    fn stage_panel(&mut self, ui: &mut Ui, out: &mut Vec<Command>) {
        let Some(opened) = &self.opened else {
            return;
        };
        let p = Palette::of(ui);
        let job = opened.job();
        let keep = self.keep();
        let panel = StagePanel {
            job: &job.file,
            scan_path: job.scan_path(),
            outcome: &self.shown,
            browse: self.browse,
            laid: self.laid.as_ref(),
        };
        let frame = Frame::new()
            .fill(p.panel)
            .inner_margin(Margin::symmetric(12, 4));
        Panel::left("stage")
            .exact_size(PANEL)
            .resizable(false)
            .frame(frame)
            .show(ui, |ui| {
                ScrollArea::vertical()
                    .id_salt(self.stage)
                    .auto_shrink(false)
                    .show(ui, |ui| {
                        let (desk, chosen) = (&mut self.desk, self.chosen.request);
                        match self.stage {
                            Stage::Scan => scan_ui(ui, &panel, desk, out),
                            Stage::Tip => tip_panel_ui(ui, &panel, out),
                            Stage::Surface => surface_ui(ui, &panel, desk, out),
                            Stage::Dimensions => {
                                dimensions_ui(ui, &panel, desk.tool, chosen, out);
                            }
                            Stage::Record => record_ui(ui, &panel, &keep, out),
                        }
                        ui.add_space(12.0);
                    });
            });
    }

    fn centre(&mut self, ui: &mut Ui, out: &mut Vec<Command>) {
        let Some(opened) = &self.opened else {
            self.welcome(ui, out);
            return;
        };
        if self.shown.level.is_none() {
            self.nothing_to_show(ui, out);
            return;
        }
        match self.stage {
            Stage::Tip => {
                let why = self
                    .shown
                    .warnings
                    .iter()
                    .find(|w| w.starts_with("No tip"))
                    .map_or("The tip comes after the scan.", String::as_str);
                let on = OnTip {
                    found: self.shown.tip.as_ref(),
                    why,
                    level: self.shown.level.as_ref(),
                    own_scan: opened.history.now().tip.own_scan(),
                    second: self.laid.as_ref().map(|l| &l.found),
                };
                tip_ui(ui, &on, &mut self.tip_view);
            }
            Stage::Record => preview_ui(ui, opened.history.now(), &self.shown),
            stage => {
                let on = OnDesk {
                    stage,
                    job: opened.history.now(),
                    outcome: &self.shown,
                    chosen: self.chosen,
                };
                desk_ui(ui, &on, &mut self.desk, &mut self.cuts, out);
            }
        }
    }

    /// In place of the maps: that they are under way, or why there are none.
    fn nothing_to_show(&self, ui: &mut Ui, out: &mut Vec<Command>) {
        ui.vertical_centered(|ui| {
            ui.add_space(ui.available_height() * 0.3);
            ui.set_max_width(560.0);
            if self.running() {
                ui.label("Opening the scan…");
                return;
            }
            if self.unanswered.is_some() {
                ui.label("The file does not say everything that is needed to show it.");
                ui.add_space(8.0);
                if ui.button("Say what is missing…").clicked() {
                    out.push(Command::Ask);
                }
                return;
            }
            if let Some(error) = self.worker.as_ref().and_then(Worker::error) {
                ui.label(error.what());
                remark(ui, error.remedy_text());
            }
        });
    }

    fn welcome(&self, ui: &mut Ui, out: &mut Vec<Command>) {
        ui.vertical_centered(|ui| {
            ui.add_space(ui.available_height() * 0.18);
            ui.heading("Open a scan or a job");
            ui.add_space(6.0);
            remark(ui, "TIFF, PNG (16 bit), .npy, .npz, X3P, or a job file (.toml). Files can be dropped here.");
            ui.add_space(10.0);
            if ui.button("Open…").clicked() {
                out.push(Command::AskOpen);
            }
            ui.add_space(18.0);
            if !self.settings.recent.is_empty() {
                ui.label(RichText::new("Opened last").color(Palette::of(ui).faint));
                recent_list(ui, &self.settings.recent, out);
            }
        });
    }

    fn dialogs(&mut self, ctx: &Context, out: &mut Vec<Command>) {
        let mut answered = None;
        match &mut self.dialog {
            Dialog::None => {}
            Dialog::Path(dialog) => dialog.show(ctx, &self.settings.recent, self.browse, out),
            Dialog::Question(question) => {
                if let Some(opened) = &self.opened {
                    let spec = &opened.history.now().scan;
                    answered = question_ui(ctx, question, spec, out);
                }
            }
            Dialog::Close => close_ui(ctx, out),
            Dialog::Help => help_ui(ctx, out),
        }
        if let Some(scan) = answered {
            self.answer(scan);
        }
    }

    fn drops(&mut self, ctx: &Context, out: &mut Vec<Command>) {
        let (dropped, hovering) = ctx.input(|i| {
            let paths: Vec<_> = i
                .raw
                .dropped_files
                .iter()
                .map(|f| f.path().to_owned())
                .collect();
            (paths, !i.raw.hovered_files.is_empty())
        });
        if let Some(path) = dropped.first() {
            out.push(Command::Open(path.clone()));
        }
        if hovering {
            Area::new(Id::unique("drop"))
                .order(Order::Foreground)
                .anchor(Align2::CENTER_CENTER, vec2(0.0, 0.0))
                .show(ctx, |ui| {
                    Frame::popup(ui.style()).show(ui, |ui| ui.heading("Drop to open"));
                });
        }
    }

    fn keys(&mut self, ui: &Ui, out: &mut Vec<Command>) {
        let ctx = ui.ctx();
        if !matches!(self.dialog, Dialog::None) {
            return;
        }
        let folder = self.keep().folder;
        let mut asked = |modifiers, key, command: Command| {
            let shortcut = KeyboardShortcut::new(modifiers, key);
            if ctx.input_mut(|i| i.consume_shortcut(&shortcut)) {
                out.push(command);
            }
        };
        let shifted = Modifiers::COMMAND | Modifiers::SHIFT;
        asked(shifted, Key::Z, Command::Redo);
        asked(shifted, Key::S, Command::AskSave);
        let digits = [Key::Num1, Key::Num2, Key::Num3, Key::Num4, Key::Num5];
        for (key, stage) in digits.into_iter().zip(Stage::ALL) {
            asked(Modifiers::COMMAND, key, Command::Go(stage));
        }
        asked(Modifiers::COMMAND, Key::O, Command::AskOpen);
        asked(Modifiers::COMMAND, Key::S, Command::Save);
        asked(Modifiers::COMMAND, Key::R, Command::WriteRecord(folder));
        asked(Modifiers::NONE, Key::F1, Command::Help(true));
        asked(Modifiers::NONE, Key::F5, Command::Run);
        // While text is typed, the keys below belong to it.
        if ctx.text_edit_focused() {
            return;
        }
        asked(Modifiers::COMMAND, Key::Z, Command::Undo);
        asked(Modifiers::NONE, Key::L, Command::Take(Tool::Section));
        asked(Modifiers::NONE, Key::F, Command::Look(None));
        asked(Modifiers::NONE, Key::G, Command::Ghost(!self.desk.ghost));
        let marks = Command::Reliability(!self.desk.reliability);
        asked(Modifiers::NONE, Key::M, marks);
        for (key, kind) in [(Key::H, Kind::StepHeight), (Key::W, Kind::LineWidth)] {
            let shortcut = KeyboardShortcut::new(Modifiers::NONE, key);
            if ctx.input_mut(|i| i.consume_shortcut(&shortcut)) {
                out.push(Command::Go(Stage::Dimensions));
                out.push(Command::Take(Tool::Place(kind)));
            }
        }
        if ctx.input_mut(|i| i.consume_key(Modifiers::NONE, Key::Escape)) {
            self.escape();
        }
    }
}

/// What the tool in hand wants.
fn hint(tool: Tool) -> &'static str {
    match tool {
        Tool::Look => "Wheel zooms, drag moves, F1 lists the keys",
        Tool::Section => "Drag the section line over either map, Esc puts it away",
        Tool::Place(_) => "Drag a region over either map, Esc puts the tool away",
        Tool::LevelRegion => "Drag a region of the reference surface, Esc puts the tool away",
    }
}

impl eframe::App for App {
    fn ui(&mut self, ui: &mut Ui, _frame: &mut eframe::Frame) {
        self.frame(ui);
    }
}
