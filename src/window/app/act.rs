//! What the commands do.

use super::super::command::Command;
use super::super::desk::Chosen;
use super::super::history::History;
use super::super::open_dialog::{PathDialog, Purpose};
use super::super::state::{Stage, Tool, new_name, request_of};
use super::super::status::Message;
use super::{App, Dialog};
use crate::dimensions::{Kind, Request};
use crate::heightmap::Region;
use crate::job::{JobFile, ScanSpec};
use crate::units::Length;
use eframe::egui::ViewportCommand;
use std::path::PathBuf;
use std::time::Instant;

impl App {
    pub(super) fn change(&mut self, change: impl FnOnce(&mut JobFile)) {
        if let Some(opened) = &self.opened {
            let mut job = opened.history.now().clone();
            change(&mut job);
            self.edit(job, false);
        }
    }

    pub(super) fn edit(&mut self, job: JobFile, gesture: bool) {
        // A setting that cannot be used is refused here, with its reason, and the old one stays.
        if let Err(error) = job.validate() {
            self.message = Some(Message::of(&error));
            return;
        }
        let Some(opened) = &mut self.opened else {
            return;
        };
        if opened.history.edit(job, gesture) {
            self.edited_now();
        }
    }

    pub(super) fn edited_now(&mut self) {
        if self.message.as_ref().is_some_and(|m| m.failed) {
            self.message = None;
        }
        self.edited = Some(Instant::now());
        if let Some(opened) = &self.opened {
            let count = opened.history.now().dimensions.len();
            if self.chosen.request.is_some_and(|i| i >= count) {
                self.chosen = Chosen::default();
            }
        }
        self.run();
    }

    pub(super) fn placed(&mut self, tool: Tool, region: Region) {
        match tool {
            Tool::Place(kind) => self.place(kind, region),
            Tool::LevelRegion => self.change(|job| job.level.regions.push(region)),
            Tool::Look | Tool::Section => {}
        }
        self.desk.tool = Tool::Look;
    }

    pub(super) fn place(&mut self, kind: Kind, region: Region) {
        let Some(opened) = &self.opened else {
            return;
        };
        let count = opened.history.now().dimensions.len();
        self.change(|job| {
            let request = Request {
                region: Some(region),
                at: if kind == Kind::LineWidth {
                    vec![0.5]
                } else {
                    Vec::new()
                },
                ..Request::new(new_name(&job.dimensions, kind), kind)
            };
            job.dimensions.push(request);
        });
        self.chosen = Chosen {
            request: Some(count),
            line: None,
        };
        self.stage = Stage::Dimensions;
    }

    pub(super) fn move_region(&mut self, index: usize, region: Region) {
        if let Some(opened) = &self.opened {
            let mut job = opened.history.now().clone();
            if let Some(request) = job.dimensions.get_mut(index) {
                request.region = Some(region);
                self.edit(job, true);
            }
        }
    }

    /// Does what a view asked for.
    pub(in super::super) fn execute(&mut self, command: Command) {
        match command {
            Command::Go(stage) => {
                self.stage = stage;
                self.desk.tool = Tool::Look;
                self.desk.pointer = None;
                self.desk.plot_pointer = None;
            }
            Command::AskOpen => self.ask_path(Purpose::Open),
            Command::AskSave => self.ask_path(Purpose::Save),
            Command::Open(path) => {
                self.dialog = Dialog::None;
                self.open_path(&path);
            }
            Command::Browse(purpose) => self.chores.browse(purpose, self.here()),
            Command::Edit { job, gesture } => self.edit(*job, gesture),
            Command::Find(what) => {
                if let Some(level) = &self.shown.level {
                    self.chores.find(std::sync::Arc::clone(level), what);
                }
            }
            Command::EndGesture => {
                if let Some(opened) = &mut self.opened {
                    opened.history.end_gesture();
                }
            }
            Command::Undo => self.step(History::undo),
            Command::Redo => self.step(History::redo),
            Command::Run => self.run(),
            Command::Cancel => {
                if let Some(worker) = &mut self.worker {
                    worker.cancel();
                }
            }
            Command::Save => self.save(),
            Command::SaveAs(path) => {
                self.dialog = Dialog::None;
                if let Some(opened) = &self.opened {
                    self.chores.save(opened.job(), path);
                }
            }
            Command::WriteRecord(folder) => self.write_record(folder),
            Command::LayOver(None) => self.laid = None,
            Command::LayOver(Some((path, uncertainty))) => self.lay_over(&path, uncertainty),
            Command::Recover | Command::Forget => self.recover(command == Command::Recover),
            Command::CloseAnyway => {
                if let Some(store) = &self.store {
                    store.forget_own();
                }
                self.closing = true;
                self.ctx.send_viewport_cmd(ViewportCommand::Close);
            }
            other => self.look(other),
        }
    }

    /// Commands that change only what is seen.
    pub(super) fn look(&mut self, command: Command) {
        match command {
            Command::Take(tool) => self.desk.tool = tool,
            Command::Placed(tool, region) => self.placed(tool, region),
            Command::MoveRegion(index, region) => self.move_region(index, region),
            Command::Look(view) => self.desk.view = view,
            Command::Section(line) => self.desk.line = Some(line),
            Command::Select(request) if request == self.chosen.request => {}
            Command::Select(request) => {
                let line = request.and_then(|i| self.first_line(i));
                self.chosen = Chosen { request, line };
            }
            Command::SelectLine(i) => self.select_line(i),
            Command::Reliability(on) => {
                self.desk.reliability = on;
                self.settings.reliability = on;
                self.keep_settings();
            }
            Command::Ghost(on) => self.desk.ghost = on,
            Command::Span(span) => self.desk.span = span,
            Command::Theme(choice) => {
                self.settings.theme = choice;
                self.apply_theme(choice);
                self.keep_settings();
            }
            Command::Help(true) => self.dialog = Dialog::Help,
            Command::Help(false) => self.dialog = Dialog::None,
            Command::Stay => {
                if let Dialog::Question(question) =
                    std::mem::replace(&mut self.dialog, Dialog::None)
                {
                    self.unanswered = Some(question);
                }
            }
            Command::Ask => {
                if let Some(question) = self.unanswered.take() {
                    self.dialog = Dialog::Question(question);
                }
            }
            Command::Dismiss => self.message = None,
            _ => {}
        }
    }

    pub(super) fn first_line(&self, request: usize) -> Option<usize> {
        let requests = &self.opened.as_ref()?.history.now().dimensions;
        let lines = self.shown.dimensions.as_ref()?;
        lines
            .iter()
            .position(|l| request_of(requests, l) == Some(request))
    }

    pub(super) fn select_line(&mut self, i: usize) {
        if self.chosen.line == Some(i) {
            self.chosen = Chosen::default();
            return;
        }
        let request = self.opened.as_ref().and_then(|opened| {
            let line = self.shown.dimensions.as_ref()?.get(i)?;
            request_of(&opened.history.now().dimensions, line)
        });
        self.chosen = Chosen {
            request,
            line: Some(i),
        };
    }

    pub(super) fn step(&mut self, step: impl FnOnce(&mut History) -> bool) {
        if self.opened.as_mut().is_some_and(|o| step(&mut o.history)) {
            self.edited_now();
        }
    }

    /// The folder in which dialogs begin.
    pub(super) fn here(&self) -> PathBuf {
        let folder = self.opened.as_ref().map(|o| o.folder.clone());
        let folder = folder
            .or_else(|| Some(self.settings.recent.first()?.parent()?.to_owned()))
            .unwrap_or_default();
        std::path::absolute(&folder)
            .or_else(|_| std::env::current_dir())
            .unwrap_or(folder)
    }

    pub(super) fn ask_path(&mut self, purpose: Purpose) {
        let here = self.here();
        let text = match (purpose, &self.opened) {
            (Purpose::Save, None) => return,
            (Purpose::Save, Some(opened)) => opened
                .path
                .clone()
                .unwrap_or_else(|| opened.job().scan_path().with_extension("toml"))
                .display()
                .to_string(),
            (Purpose::Open, _) => format!("{}/", here.display().to_string().trim_end_matches('/')),
        };
        self.dialog = Dialog::Path(Box::new(PathDialog::new(purpose, text)));
    }

    pub(super) fn save(&mut self) {
        match self.opened.as_ref().map(|o| (o.job(), o.path.clone())) {
            Some((job, Some(path))) => self.chores.save(job, path),
            Some((_, None)) => self.ask_path(Purpose::Save),
            None => {}
        }
    }

    pub(super) fn write_record(&mut self, folder: PathBuf) {
        if self.writing || !self.keep().ready {
            return;
        }
        if let Some(opened) = &self.opened {
            self.writing = true;
            self.record_folder = Some(folder.clone());
            let outcome = self.shown.clone();
            self.chores
                .record(self.state, folder, opened.job(), outcome);
        }
    }

    /// Opens a second tip; a relative path is seen from the job.
    pub(super) fn lay_over(&mut self, path: &std::path::Path, uncertainty: Option<Length>) {
        if let Some(level) = &self.shown.level {
            let path = self.here().join(path);
            let pitch = level.map.pitch();
            self.chores.lay_over(path, uncertainty, pitch);
        }
    }

    pub(super) fn recover(&mut self, take: bool) {
        let Some(left) = self.left.take() else {
            return;
        };
        left.forget();
        if take {
            let job = left.job.clone();
            self.open_job(job.clone(), None);
            if let Some(opened) = &mut self.opened {
                // What is on the disk is older: the recovered job counts as changed.
                opened.history.mark_unsaved(JobFile::on_scan(""));
                self.edited = Some(Instant::now());
            }
        }
    }

    /// Takes the scan's entry that answers the question.
    pub(in super::super) fn answer(&mut self, scan: ScanSpec) {
        self.dialog = Dialog::None;
        self.message = None;
        self.change(|job| job.scan = scan);
    }

    /// Asks before unsaved changes are lost.
    pub(in super::super) fn asked_to_close(&mut self) {
        let unsaved = self.opened.as_ref().is_some_and(|o| o.history.unsaved());
        if unsaved && !self.closing {
            self.ctx.send_viewport_cmd(ViewportCommand::CancelClose);
            self.dialog = Dialog::Close;
        } else if let Some(store) = &self.store {
            store.forget_own();
        }
    }

    /// Puts the tool away, else stops the work.
    pub(in super::super) fn escape(&mut self) {
        if self.desk.tool != Tool::Look {
            self.desk.tool = Tool::Look;
        } else {
            self.execute(Command::Cancel);
        }
    }
}
