//! Slow errands off the paint thread: saving, writing the record, the system's file dialog.

use super::command::BrowseFor;
use crate::dimensions::{Find, Request, find};
use crate::error::{Error, ErrorKind, Result};
use crate::files::OpenOptions;
use crate::heightmap::Pitch;
use crate::job::{self, Job, JobFile, Outcome, TipResult};
use crate::leveling::Leveled;
use crate::progress::Progress;
use crate::record::{self, Written};
use crate::tip::compare::{Comparison, Settings};
use crate::units::Length;
use eframe::egui::Context;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::mpsc::{Receiver, Sender, channel};
use std::time::{Duration, Instant};

/// A finished errand.
pub enum Done {
    /// The job was saved: the job as it was then, and as it is on the disk now.
    Saved(Box<JobFile>, Result<Box<Job>>),
    /// The record was written: of which state, and where.
    Recorded(u64, Result<Written>),
    /// A second tip was opened.
    LaidOver(PathBuf, Option<Length>, Result<Arc<TipResult>>),
    /// The second tip (first of the pair) was compared with the job's.
    Compared([Arc<TipResult>; 2], Result<Comparison>),
    /// Things to measure were looked for.
    Found(Result<Vec<Request>>),
    /// A file was chosen, or none.
    Browsed(BrowseFor, Option<PathBuf>),
    /// There is no file dialog on this system after all.
    NoDialog,
    /// Settings or the unsaved job could not be kept.
    NotKept(Error),
}

/// Errands under way.
pub struct Chores {
    sender: Sender<Done>,
    receiver: Receiver<Done>,
    ctx: Context,
}

impl Chores {
    /// None yet; `ctx` is asked for a repaint when one is done.
    pub fn new(ctx: Context) -> Self {
        let (sender, receiver) = channel();
        Self {
            sender,
            receiver,
            ctx,
        }
    }

    /// Does `errand` on a thread of its own.
    pub fn start(&self, errand: impl FnOnce() -> Option<Done> + Send + 'static) {
        let (sender, ctx) = (self.sender.clone(), self.ctx.clone());
        std::thread::spawn(move || {
            if let Some(done) = errand()
                && sender.send(done).is_ok()
            {
                ctx.request_repaint();
            }
        });
    }

    /// What is done.
    pub fn poll(&self) -> Vec<Done> {
        self.receiver.try_iter().collect()
    }

    /// Saves `job` to `path`.
    pub fn save(&self, job: Job, path: PathBuf) {
        self.start(move || {
            let before = Box::new(job.file.clone());
            let mut job = job;
            let saved = job.save(&path).map(|()| Box::new(job));
            Some(Done::Saved(before, saved))
        });
    }

    /// Writes the record of `outcome`, which is that of `state`.
    pub fn record(&self, state: u64, folder: PathBuf, job: Job, outcome: Outcome) {
        self.start(move || {
            Some(Done::Recorded(
                state,
                record::write(&folder, &job, &outcome),
            ))
        });
    }

    /// Opens a second tip; one whose pitch nobody states has the scan's.
    pub fn lay_over(&self, path: PathBuf, uncertainty: Option<Length>, scan: Pitch) {
        self.start(move || {
            let open = |pitch: Option<Pitch>| {
                let options = OpenOptions {
                    pitch,
                    ..OpenOptions::default()
                };
                job::open_any_tip(&path, &options, uncertainty, &Progress::new())
            };
            let found = match open(None) {
                Err(e) if e.kind() == ErrorKind::MissingPitch => open(Some(scan)),
                found => found,
            };
            Some(Done::LaidOver(path.clone(), uncertainty, found))
        });
    }

    /// Compares the job's tip, the second of the pair, with the one laid over it.
    pub fn compare(&self, pair: [Arc<TipResult>; 2]) {
        self.start(move || {
            let found = job::compare_tips(&pair[0], &pair[1], &Settings::default());
            Some(Done::Compared(pair, found))
        });
    }

    /// Looks for things to measure.
    pub fn find(&self, level: Arc<Leveled>, what: Find) {
        self.start(move || {
            let found = find(&level.map, level.noise_nm, what, &Progress::new());
            Some(Done::Found(found))
        });
    }

    /// Shows the system's file dialog.
    pub fn browse(&self, purpose: BrowseFor, begin: PathBuf) {
        self.start(move || {
            let begun = Instant::now();
            let dialog = rfd::FileDialog::new().set_directory(&begin);
            let chosen = match purpose {
                BrowseFor::Open => dialog.set_title("Open a scan or a job").pick_file(),
                BrowseFor::Tip => dialog.set_title("Choose the tip's file").pick_file(),
                BrowseFor::TipScan => dialog
                    .set_title("Choose the scan that shows the tip")
                    .pick_file(),
                BrowseFor::Second => dialog.set_title("Choose a second tip").pick_file(),
                BrowseFor::Save => dialog
                    .set_title("Save the job")
                    .add_filter("job file", &["toml"])
                    .save_file(),
                BrowseFor::Record => dialog.set_title("Folder of the record").pick_folder(),
            };
            // Nobody cancels a dialog that fast: there was none.
            let none = chosen.is_none() && begun.elapsed() < Duration::from_millis(200);
            Some(if none {
                Done::NoDialog
            } else {
                Done::Browsed(purpose, chosen)
            })
        });
    }
}

/// Whether a file dialog of the system may answer: a desktop portal that the session bus can
/// start, or zenity.
pub fn dialog_likely() -> bool {
    if !cfg!(target_os = "linux") {
        return true;
    }
    let set = |name: &str| std::env::var_os(name).is_some_and(|v| !v.is_empty());
    let portal = set("DBUS_SESSION_BUS_ADDRESS")
        && ["/usr/share", "/usr/local/share"].iter().any(|share| {
            Path::new(share)
                .join("dbus-1/services/org.freedesktop.portal.Desktop.service")
                .exists()
        });
    let zenity = std::env::var_os("PATH").is_some_and(|paths| {
        std::env::split_paths(&paths).any(|folder| folder.join("zenity").exists())
    });
    portal || zenity
}
