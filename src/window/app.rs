//! The window itself: state, what the commands do, and how the parts are laid out.

use super::Start;
mod act;

use super::chores::{Chores, Done, dialog_likely};
use super::command::{BrowseFor, Command};
use super::desk::{Chosen, Cuts};
use super::dialogs::Question;
use super::history::History;
use super::laid_over::LaidOver;
use super::map_view::Desk;
use super::open_dialog::PathDialog;
use super::record_view::{Keep, folder_for};
use super::settings::{Left, Settings, Store, ThemeChoice};
use super::state::{Stage, new_name};
use super::status::Message;
use super::theme;
use super::tip_view::TipView;
use crate::dimensions::Request;
use crate::job::{Job, JobFile, Outcome, Worker};
use crate::record::Written;
use eframe::egui::{Context, ThemePreference, ViewportCommand};
use std::path::{Path, PathBuf};
use std::time::{Duration, Instant};

/// How long after an edit the unsaved job is kept for recovery.
const KEEP_AFTER: Duration = Duration::from_secs(2);

/// The dialog at hand.
pub(super) enum Dialog {
    None,
    Path(Box<PathDialog>),
    Question(Question),
    Close,
    Help,
}

/// The job that is open.
pub(super) struct Opened {
    pub history: History,
    pub folder: PathBuf,
    pub path: Option<PathBuf>,
    pub sha256: Option<String>,
}

impl Opened {
    fn new(job: Job) -> Self {
        Self {
            history: History::new(job.file),
            folder: job.folder,
            path: job.path,
            sha256: job.sha256,
        }
    }

    /// The job as it is; the hash only while it is that of the file.
    pub fn job(&self) -> Job {
        Job {
            file: self.history.now().clone(),
            folder: self.folder.clone(),
            path: self.path.clone(),
            sha256: self.sha256.clone().filter(|_| !self.history.unsaved()),
        }
    }
}

/// Everything the window knows.
pub struct App {
    pub(super) ctx: Context,
    /// Absent in tests, where outcomes are put in by hand.
    pub(super) worker: Option<Worker>,
    pub(super) opened: Option<Opened>,
    /// What is shown: of each stage the last result, even while the next is under way.
    pub(super) shown: Outcome,
    /// Counts what changed in job or outcome, to tell whether a record is of this state.
    pub(super) state: u64,
    pub(super) stage: Stage,
    pub(super) desk: Desk,
    pub(super) cuts: Cuts,
    pub(super) tip_view: TipView,
    pub(super) laid: Option<LaidOver>,
    pub(super) chosen: Chosen,
    pub(super) message: Option<Message>,
    pub(super) dialog: Dialog,
    pub(super) settings: Settings,
    pub(super) left: Option<Left>,
    pub(super) browse: bool,
    store: Option<Store>,
    chores: Chores,
    recorded: Option<(u64, Written)>,
    writing: bool,
    record_folder: Option<PathBuf>,
    edited: Option<Instant>,
    error_told: bool,
    title: String,
    closing: bool,
    /// A question that was put away without an answer.
    pub(super) unanswered: Option<Question>,
}

impl App {
    /// A window on `start`, with a worker of its own.
    pub fn new(ctx: &Context, start: Start, store: Option<Store>) -> Self {
        let wake = ctx.clone();
        let mut app = Self::bare(ctx, store);
        app.worker = Some(Worker::start(move || wake.request_repaint()));
        app.left = app.store.as_ref().and_then(Store::left_behind);
        app.browse = dialog_likely();
        match start {
            Start::Nothing => {}
            Start::Scan(path) => app.open_scan(&path),
            Start::Job(path) => app.open_path(&path),
            Start::InMemory(job) => app.open_job(*job, None),
        }
        app
    }

    /// A window without a worker and without a file.
    pub(super) fn bare(ctx: &Context, store: Option<Store>) -> Self {
        let settings = store.as_ref().map(Store::settings).unwrap_or_default();
        theme::apply(ctx);
        let mut app = Self {
            ctx: ctx.clone(),
            worker: None,
            opened: None,
            shown: Outcome::default(),
            state: 0,
            stage: Stage::Surface,
            desk: Desk::default(),
            cuts: Cuts::default(),
            tip_view: TipView::default(),
            laid: None,
            chosen: Chosen::default(),
            message: None,
            dialog: Dialog::None,
            settings,
            left: None,
            browse: false,
            store,
            chores: Chores::new(ctx.clone()),
            recorded: None,
            writing: false,
            record_folder: None,
            edited: None,
            error_told: true,
            title: String::new(),
            closing: false,
            unanswered: None,
        };
        app.desk.reliability = app.settings.reliability;
        app.apply_theme(app.settings.theme);
        app
    }

    fn apply_theme(&mut self, choice: ThemeChoice) {
        self.ctx.set_theme(match choice {
            ThemeChoice::System => ThemePreference::System,
            ThemeChoice::Light => ThemePreference::Light,
            ThemeChoice::Dark => ThemePreference::Dark,
        });
    }

    /// Whether a run is under way.
    pub(super) fn running(&self) -> bool {
        self.worker
            .as_ref()
            .is_some_and(|w| w.under_way().is_some())
    }

    /// The outcome of the run under way or finished last.
    pub(super) fn fresh(&self) -> &Outcome {
        self.worker.as_ref().map_or(&self.shown, Worker::latest)
    }

    /// Whether the record of this very state was written.
    pub(super) fn recorded(&self) -> bool {
        self.recorded
            .as_ref()
            .is_some_and(|(s, _)| *s == self.state)
    }

    /// Where things are kept.
    pub(super) fn keep(&self) -> Keep {
        let Some(opened) = &self.opened else {
            return Keep::default();
        };
        let job = opened.job();
        Keep {
            job_file: match (&opened.path, opened.history.unsaved()) {
                (None, _) => "not saved yet".to_owned(),
                (Some(path), true) => format!("{} (changed)", path.display()),
                (Some(path), false) => path.display().to_string(),
            },
            folder: self
                .record_folder
                .clone()
                .unwrap_or_else(|| folder_for(&job)),
            written: self
                .recorded
                .as_ref()
                .filter(|(s, _)| *s == self.state)
                .map(|(_, w)| w.clone()),
            writing: self.writing,
            ready: self.shown.dimensions.is_some() && !self.running(),
        }
    }

    /// Opens a scan or, by its ending, a job.
    fn open_path(&mut self, path: &Path) {
        let is_job = path
            .extension()
            .is_some_and(|e| e.eq_ignore_ascii_case("toml"));
        if !is_job {
            self.open_scan(path);
            return;
        }
        match Job::open(path) {
            Ok(job) => self.open_job(job, Some(path)),
            Err(error) => self.message = Some(Message::of(&error)),
        }
    }

    fn open_scan(&mut self, path: &Path) {
        self.stage = Stage::Scan;
        self.open_job(Job::on_scan(path), Some(path));
    }

    fn open_job(&mut self, job: Job, path: Option<&Path>) {
        if let Some(path) = path {
            self.settings.remember(path);
            self.keep_settings();
        }
        self.message = None;
        self.opened = Some(Opened::new(job));
        self.shown = Outcome::default();
        self.chosen = Chosen::default();
        self.desk.view = None;
        self.desk.line = None;
        self.record_folder = None;
        self.recorded = None;
        self.edited = None;
        if let Some(store) = &self.store {
            store.forget_own();
        }
        self.run();
    }

    /// Orders the job to be computed; what did not change is not computed again.
    fn run(&mut self) {
        self.state += 1;
        self.error_told = false;
        self.unanswered = None;
        if let (Some(worker), Some(opened)) = (&mut self.worker, &self.opened) {
            worker.order(opened.job());
        }
    }

    /// Takes in what other threads have done. Called before every frame.
    pub(super) fn catch_up(&mut self) {
        let changed = self.worker.as_mut().is_some_and(Worker::poll);
        if changed {
            self.take_outcome();
        }
        if self.running() {
            self.ctx.request_repaint_after(Duration::from_millis(100));
        }
        for done in self.chores.poll() {
            self.take_done(done);
        }
        self.compare_laid();
        self.keep_unsaved();
        self.retitle();
    }

    /// Merges the news: a stage without a new result keeps its last one until the run is done.
    fn take_outcome(&mut self) {
        let (fresh, running) = (self.fresh().clone(), self.running());
        if !running {
            let failed = self.worker.as_ref().is_some_and(|w| w.error().is_some());
            if !failed || self.shown.scan.is_none() {
                self.shown = fresh;
            }
            self.state += 1;
            self.tell_error();
        } else {
            let old = &mut self.shown;
            old.scan = fresh.scan.or(old.scan.take());
            old.level = fresh.level.or(old.level.take());
            old.tip = fresh.tip.or(old.tip.take());
            old.surface = fresh.surface.or(old.surface.take());
            old.dimensions = fresh.dimensions.or(old.dimensions.take());
            old.warnings = fresh.warnings;
        }
        self.drop_misfits();
        if let (Some(request), None) = (self.chosen.request, self.chosen.line) {
            self.chosen.line = self.first_line(request);
        }
    }

    /// Maps of another size than the scan's cannot stand beside it.
    fn drop_misfits(&mut self) {
        let size = self.shown.level.as_ref().map(|l| l.map.heights().dim());
        let misfit = |s: &crate::job::SurfaceResult| Some(s.surface.heights().dim()) != size;
        if self.shown.surface.as_deref().is_some_and(misfit) {
            self.shown.surface = None;
            self.shown.dimensions = None;
            self.desk.view = None;
            self.desk.line = None;
        }
    }

    /// Says why a run failed, once; asks where the file does not say all.
    fn tell_error(&mut self) {
        let Some(error) = self.worker.as_ref().and_then(Worker::error) else {
            return;
        };
        if std::mem::replace(&mut self.error_told, true) {
            return;
        }
        let question = self.opened.as_ref().and_then(|opened| {
            let job = opened.job();
            Question::about(error, &job.scan_path(), &job.file.scan)
        });
        match question {
            Some(question) => self.dialog = Dialog::Question(question),
            None => self.message = Some(Message::of(error)),
        }
    }

    fn take_done(&mut self, done: Done) {
        match done {
            Done::Saved(before, Ok(job)) => self.saved(&before, *job),
            Done::Saved(_, Err(error)) | Done::NotKept(error) => {
                self.message = Some(Message::of(&error));
            }
            Done::Recorded(state, result) => {
                self.writing = false;
                match result {
                    Ok(written) => {
                        let text = format!("Record written into {}", written.folder.display());
                        self.message = Some(Message::news(text));
                        self.recorded = Some((state, written));
                    }
                    Err(error) => self.message = Some(Message::of(&error)),
                }
            }
            Done::LaidOver(_, _, Err(error)) => self.message = Some(Message::of(&error)),
            Done::LaidOver(path, uncertainty, Ok(found)) => {
                self.laid = Some(LaidOver::new(path, uncertainty, found));
            }
            Done::Compared([first, second], result) => {
                // An answer that comes late is of a tip that is not asked about any more.
                if let Some(laid) = &mut self.laid
                    && std::sync::Arc::ptr_eq(&laid.found, &first)
                    && laid.asked_about(&second)
                {
                    laid.compared = Some((second, result.map_err(|e| e.to_string())));
                }
            }
            Done::Found(Err(error)) => self.message = Some(Message::of(&error)),
            Done::Found(Ok(found)) => self.found(found),
            Done::NoDialog => {
                self.browse = false;
                self.message = Some(Message {
                    what: "No file dialog of the system answers here".to_owned(),
                    remedy: "Type the path, or drop the file on the window".to_owned(),
                    failed: false,
                });
            }
            Done::Browsed(_, None) => {}
            Done::Browsed(purpose, Some(path)) => self.browsed(purpose, path),
        }
    }

    /// Adds what was found and is not there yet, under names that are free.
    fn found(&mut self, found: Vec<Request>) {
        let Some(opened) = &self.opened else {
            return;
        };
        let mut job = opened.history.now().clone();
        let before = job.dimensions.len();
        for mut request in found {
            let same = |r: &Request| r.kind == request.kind && r.region == request.region;
            if job.dimensions.iter().any(same) {
                continue;
            }
            if job.dimensions.iter().any(|r| r.name == request.name) {
                request.name = new_name(&job.dimensions, request.kind);
            }
            job.dimensions.push(request);
        }
        let added = job.dimensions.len() - before;
        self.edit(job, false);
        self.message = Some(Message::news(match added {
            0 => "Nothing new was found".to_owned(),
            n => format!("{n} found and added; look at them before you use them"),
        }));
    }

    fn browsed(&mut self, purpose: BrowseFor, path: PathBuf) {
        match purpose {
            BrowseFor::Open => self.execute(Command::Open(path)),
            BrowseFor::Save => self.execute(Command::SaveAs(path)),
            BrowseFor::Record => self.record_folder = Some(path),
            BrowseFor::Tip => self.change(|job| job.tip.file = Some(path)),
            BrowseFor::TipScan => self.change(|job| job.tip.scan = Some(path)),
            BrowseFor::Second => self.execute(Command::LayOver(Some((path, None)))),
        }
    }

    /// The job on the disk is `job`; `before` is what was sent there.
    fn saved(&mut self, before: &JobFile, job: Job) {
        let Some(opened) = &mut self.opened else {
            return;
        };
        if opened.history.now() == before {
            opened.history.mark_saved(job.file);
        } else {
            // Edited meanwhile: paths are seen from the new folder now, the rest stays unsaved.
            let mut now = opened.history.now().clone();
            now.move_paths(&opened.folder, &job.folder);
            opened.history.mark_saved(job.file);
            opened.history.edit(now, false);
        }
        opened.folder = job.folder;
        opened.sha256 = job.sha256;
        if let Some(path) = job.path {
            self.settings.remember(&path);
            self.message = Some(Message::news(format!("Saved as {}", path.display())));
            opened.path = Some(path);
        }
        self.edited = None;
        if let Some(store) = &self.store {
            store.forget_own();
        }
        self.keep_settings();
    }

    /// Compares the second tip with the job's where that has not been asked for yet.
    fn compare_laid(&mut self) {
        if let (Some(laid), Some(tip)) = (&mut self.laid, &self.shown.tip)
            && laid.must_compare(tip)
        {
            let pair = [
                std::sync::Arc::clone(&laid.found),
                std::sync::Arc::clone(tip),
            ];
            self.chores.compare(pair);
        }
    }

    fn keep_settings(&self) {
        if let Some(store) = self.store.clone() {
            let settings = self.settings.clone();
            self.chores
                .start(move || store.keep_settings(&settings).err().map(Done::NotKept));
        }
    }

    /// Keeps the unsaved job a little after the last edit.
    fn keep_unsaved(&mut self) {
        let Some(edited) = self.edited else {
            return;
        };
        if edited.elapsed() < KEEP_AFTER {
            self.ctx.request_repaint_after(KEEP_AFTER);
            return;
        }
        self.edited = None;
        if let (Some(store), Some(opened)) = (self.store.clone(), &self.opened) {
            let (job, unsaved) = (opened.job(), opened.history.unsaved());
            self.chores.start(move || {
                if unsaved {
                    return store.keep_unsaved(&job).err().map(Done::NotKept);
                }
                store.forget_own();
                None
            });
        }
    }

    fn retitle(&mut self) {
        let name = self.opened.as_ref().map(|opened| {
            let path = opened
                .path
                .clone()
                .unwrap_or_else(|| opened.job().scan_path());
            let name = path.file_name().unwrap_or(path.as_os_str());
            let mut text = name.to_string_lossy().into_owned();
            if opened.history.unsaved() {
                text += " (changed)";
            }
            text
        });
        let title = match name {
            None => "truewidth".to_owned(),
            Some(name) if self.running() => format!("truewidth – {name} – computing"),
            Some(name) => format!("truewidth – {name}"),
        };
        if title != self.title {
            self.title.clone_from(&title);
            self.ctx.send_viewport_cmd(ViewportCommand::Title(title));
        }
    }

    /// Puts an outcome in by hand.
    #[cfg(test)]
    pub(super) fn put(&mut self, job: Job, outcome: Outcome) {
        self.opened = Some(Opened::new(job));
        self.shown = outcome;
    }
}
