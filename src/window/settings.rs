//! Settings of the window and the recovery of unsaved jobs, in the user's data folder.

use crate::error::{Error, ErrorKind, Result};
use crate::files::write_atomically;
use crate::job::{Job, JobFile};
use serde::{Deserialize, Serialize};
use std::path::{Path, PathBuf};

/// How many files the recent list holds.
const RECENT: usize = 10;

/// Light, dark, or as the system says.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum ThemeChoice {
    /// As the system says.
    #[default]
    System,
    /// Light.
    Light,
    /// Dark.
    Dark,
}

impl ThemeChoice {
    /// Its name.
    pub fn name(self) -> &'static str {
        match self {
            Self::System => "As the system",
            Self::Light => "Light",
            Self::Dark => "Dark",
        }
    }
}

/// What the window remembers.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(default, rename_all = "kebab-case")]
pub struct Settings {
    /// Theme.
    pub theme: ThemeChoice,
    /// Whether the reliability marks are shown.
    pub reliability: bool,
    /// Files opened last, newest first.
    pub recent: Vec<PathBuf>,
}

impl Default for Settings {
    fn default() -> Self {
        Self {
            theme: ThemeChoice::System,
            reliability: true,
            recent: Vec::new(),
        }
    }
}

impl Settings {
    /// Puts `path` at the head of the recent list.
    pub fn remember(&mut self, path: &Path) {
        let path = std::path::absolute(path).unwrap_or_else(|_| path.to_owned());
        self.recent.retain(|p| *p != path);
        self.recent.insert(0, path);
        self.recent.truncate(RECENT);
    }
}

/// The folder of settings and recovery files.
#[derive(Debug, Clone)]
pub struct Store {
    folder: PathBuf,
}

impl Store {
    /// The user's data folder, see [`crate::job::data_folder`]; `None` where there is none.
    pub fn find() -> Option<Self> {
        let folder = crate::job::data_folder().ok()?;
        Some(Self { folder })
    }

    /// A given folder.
    #[cfg(test)]
    pub fn at(folder: impl Into<PathBuf>) -> Self {
        Self {
            folder: folder.into(),
        }
    }

    fn settings_path(&self) -> PathBuf {
        self.folder.join("settings.toml")
    }

    /// The settings; the defaults where there are none or they cannot be read.
    pub fn settings(&self) -> Settings {
        std::fs::read_to_string(self.settings_path())
            .ok()
            .and_then(|text| toml::from_str(&text).ok())
            .unwrap_or_default()
    }

    /// Keeps the settings.
    pub fn keep_settings(&self, settings: &Settings) -> Result<()> {
        let text = toml::to_string_pretty(settings).map_err(|e| {
            Error::new(
                ErrorKind::Setting,
                format!("settings cannot be written: {e}"),
            )
        })?;
        self.write(&self.settings_path(), &text)
    }

    fn write(&self, path: &Path, text: &str) -> Result<()> {
        std::fs::create_dir_all(&self.folder).map_err(|e| Error::io(&self.folder, e))?;
        write_atomically(path, text.as_bytes())
    }

    fn recovery_path(&self, process: u32) -> PathBuf {
        self.folder.join(format!("unsaved-{process}.toml"))
    }

    /// Keeps the unsaved job of this process.
    pub fn keep_unsaved(&self, job: &Job) -> Result<()> {
        let unsaved = Unsaved {
            home: job.path.clone(),
            folder: std::path::absolute(&job.folder).unwrap_or_else(|_| job.folder.clone()),
            job: job.file.clone(),
        };
        let text = toml::to_string_pretty(&unsaved)
            .map_err(|e| Error::new(ErrorKind::Setting, format!("the job cannot be kept: {e}")))?;
        self.write(&self.recovery_path(std::process::id()), &text)
    }

    /// Forgets the unsaved job of this process.
    pub fn forget_own(&self) {
        // Nothing there is as good as removed.
        let _ = std::fs::remove_file(self.recovery_path(std::process::id()));
    }

    /// A job left unsaved by a process that is gone, newest first.
    pub fn left_behind(&self) -> Option<Left> {
        let mut found: Vec<(std::time::SystemTime, PathBuf)> = std::fs::read_dir(&self.folder)
            .ok()?
            .flatten()
            .filter(|entry| {
                entry
                    .file_name()
                    .to_str()
                    .and_then(|n| n.strip_prefix("unsaved-")?.strip_suffix(".toml"))
                    .and_then(|n| n.parse().ok())
                    .is_some_and(|process: u32| !alive(process))
            })
            .filter_map(|entry| Some((entry.metadata().ok()?.modified().ok()?, entry.path())))
            .collect();
        found.sort();
        found.into_iter().rev().find_map(|(_, path)| {
            let text = std::fs::read_to_string(&path).ok()?;
            let unsaved: Unsaved = toml::from_str(&text).ok()?;
            let job = Job {
                file: unsaved.job,
                folder: unsaved.folder,
                path: unsaved.home,
                sha256: None,
            };
            Some(Left { job, kept_in: path })
        })
    }
}

/// Whether a process of this program runs under that number; this one counts. Known only where
/// there is `/proc`.
fn alive(process: u32) -> bool {
    let stat = |of: &str| std::fs::read_to_string(format!("/proc/{of}/stat")).ok();
    // "number (name) state ...": one that has ended but was not waited for is in state Z.
    let name_and_state = |text: String| {
        let (front, back) = text.rsplit_once(')')?;
        let name = front.split_once('(')?.1.to_owned();
        Some((name, back.trim_start().chars().next()?))
    };
    let Some((name, state)) = stat(&process.to_string()).and_then(name_and_state) else {
        return process == std::process::id();
    };
    let own = stat("self").and_then(name_and_state);
    !matches!(state, 'Z' | 'X') && own.is_some_and(|(own, _)| own == name)
}

#[derive(Serialize, Deserialize)]
struct Unsaved {
    #[serde(skip_serializing_if = "Option::is_none")]
    home: Option<PathBuf>,
    folder: PathBuf,
    job: JobFile,
}

/// A job left unsaved.
#[derive(Debug, Clone)]
pub struct Left {
    /// The job.
    pub job: Job,
    /// The file that keeps it.
    pub kept_in: PathBuf,
}

impl Left {
    /// Removes the file that keeps it.
    pub fn forget(&self) {
        // Nothing there is as good as removed.
        let _ = std::fs::remove_file(&self.kept_in);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn settings_come_back_and_damaged_ones_are_the_defaults() {
        let dir = tempfile::tempdir().unwrap();
        let store = Store::at(dir.path().join("new"));
        assert_eq!(store.settings(), Settings::default());
        let mut settings = Settings {
            theme: ThemeChoice::Dark,
            reliability: false,
            ..Settings::default()
        };
        for i in 0..15 {
            settings.remember(Path::new(&format!("/scans/{i}.tiff")));
        }
        settings.remember(Path::new("/scans/9.tiff"));
        assert_eq!(settings.recent.len(), RECENT);
        assert_eq!(settings.recent[0], Path::new("/scans/9.tiff"));
        assert_eq!(settings.recent[1], Path::new("/scans/14.tiff"));
        store.keep_settings(&settings).unwrap();
        assert_eq!(store.settings(), settings);
        std::fs::write(store.settings_path(), "theme = ").unwrap();
        assert_eq!(store.settings(), Settings::default());
    }

    #[test]
    fn only_jobs_of_processes_that_are_gone_are_offered() {
        let dir = tempfile::tempdir().unwrap();
        let store = Store::at(dir.path());
        assert!(store.left_behind().is_none());
        let mut job = Job::on_scan(Path::new("/scans/a.tiff"));
        job.file.title = "kept".to_owned();
        store.keep_unsaved(&job).unwrap();
        assert!(store.left_behind().is_none(), "this process is alive");
        // No process has the largest number.
        std::fs::rename(
            store.recovery_path(std::process::id()),
            store.recovery_path(u32::MAX),
        )
        .unwrap();
        let left = store.left_behind().unwrap();
        assert_eq!(left.job.file, job.file);
        assert_eq!(left.job.folder, Path::new("/scans"));
        left.forget();
        assert!(store.left_behind().is_none());
    }

    #[test]
    fn this_process_is_alive_and_others_are_not_this_program() {
        assert!(alive(std::process::id()));
        assert!(!alive(1) && !alive(u32::MAX));
    }
}
