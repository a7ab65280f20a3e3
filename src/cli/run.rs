//! `truewidth run`: jobs headless, one record each.

use super::args::Common;
use super::show::Show;
use crate::error::{Error, ErrorKind, Result};
use crate::job::{Job, MonteCarloSpec, Stages};
use crate::progress::Progress;
use crate::record;
use crate::units::Length;
use std::collections::BTreeMap;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::sync::Mutex;
use std::sync::atomic::{AtomicUsize, Ordering};

/// Second opinions asked for on the command line, beside those of the jobs.
#[derive(Debug, Clone, Copy, Default)]
pub struct Opinions {
    /// Monte Carlo trials.
    pub monte_carlo: Option<usize>,
    /// Whether models are fitted.
    pub model_fit: bool,
}

/// Runs all `jobs`, `workers` at a time; returns how many failed.
///
/// Errors of kind `Setting`, before anything runs, when two jobs would write to the same folder.
pub fn run_all(
    jobs: &[PathBuf],
    out: &Path,
    workers: u16,
    opinions: Opinions,
    common: &Common,
    show: &Show,
) -> Result<usize> {
    let folders = record_folders(jobs, out)?;
    let next = AtomicUsize::new(0);
    let failed = AtomicUsize::new(0);
    // Tables are printed in the order of the jobs, whichever finishes first.
    let printer = Mutex::new(InOrder::default());
    std::thread::scope(|scope| {
        for _ in 0..usize::from(workers).min(jobs.len()) {
            scope.spawn(|| {
                loop {
                    let i = next.fetch_add(1, Ordering::Relaxed);
                    let (Some(path), Some(folder)) = (jobs.get(i), folders.get(i)) else {
                        break;
                    };
                    let name = path.file_name().unwrap_or_default().to_string_lossy();
                    let result = show.during(&name, |progress| {
                        let mut job = open_job(path, common)?;
                        job.file.model_fit |= opinions.model_fit;
                        if let Some(trials) = opinions.monte_carlo {
                            let stated = job.file.monte_carlo;
                            let spec = stated.unwrap_or(MonteCarloSpec::new(trials));
                            job.file.monte_carlo = Some(MonteCarloSpec { trials, ..spec });
                        }
                        run_job(&job, folder, progress)
                    });
                    let text = match result {
                        Ok(table) => table,
                        Err(error) => {
                            failed.fetch_add(1, Ordering::Relaxed);
                            show.error(&error.at(path).to_string());
                            String::new()
                        }
                    };
                    if let Ok(mut printer) = printer.lock() {
                        printer.put(i, text);
                    }
                }
            });
        }
    });
    Ok(failed.into_inner())
}

/// Runs a job and writes its record; returns the text for stdout: title, table, where the report
/// lies.
pub fn run_job(job: &Job, folder: &Path, progress: &Progress) -> Result<String> {
    let outcome = Stages::default().run(job, progress, &mut |_| {})?;
    let written = record::write(folder, job, &outcome)?;
    Ok(format!(
        "{}\nReport: {}\n",
        record::text_table(job, &outcome).trim_end(),
        written.report.display()
    ))
}

/// Opens a job file, or makes a job for a scan; the command line's scale is added.
pub fn open_job(path: &Path, common: &Common) -> Result<Job> {
    let is_job = path
        .extension()
        .is_some_and(|e| e.eq_ignore_ascii_case("toml"));
    let mut job = if is_job {
        Job::open(path)?
    } else {
        Job::on_scan(path)
    };
    let scan = &mut job.file.scan;
    if let Some(pitch) = common.pitch {
        scan.pitch = Some([Length::from_nm(pitch.x), Length::from_nm(pitch.y)]);
    }
    if let Some(unit) = &common.height_unit {
        scan.height_unit = Some(unit.clone());
    }
    scan.map = common.map.or(scan.map);
    Ok(job)
}

fn record_folders(jobs: &[PathBuf], out: &Path) -> Result<Vec<PathBuf>> {
    let mut seen = BTreeMap::new();
    jobs.iter()
        .map(|path| {
            let stem = path.file_stem().unwrap_or_default().to_owned();
            match seen.insert(stem.clone(), path) {
                None => Ok(out.join(stem)),
                Some(other) => Err(Error::new(
                    ErrorKind::Setting,
                    format!(
                        "{} and {} would both write to {}",
                        other.display(),
                        path.display(),
                        out.join(stem).display()
                    ),
                )
                .remedy("Give the jobs different names or run them with different --out folders")),
            }
        })
        .collect()
}

/// Prints texts in the order of their numbers, each as soon as all before it are there.
#[derive(Default)]
struct InOrder {
    waiting: BTreeMap<usize, String>,
    next: usize,
}

impl InOrder {
    fn put(&mut self, number: usize, text: String) {
        self.waiting.insert(number, text);
        let mut stdout = std::io::stdout().lock();
        while let Some(text) = self.waiting.remove(&self.next) {
            self.next += 1;
            if !text.is_empty() {
                // A closed pipe is the reader's choice, not an error of the run.
                let _ = writeln!(stdout, "{text}");
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_jobs_of_one_name_are_refused_before_anything_runs() {
        let jobs = [PathBuf::from("a/job.toml"), PathBuf::from("b/job.toml")];
        let error = record_folders(&jobs, Path::new("out")).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Setting);
        assert!(error.to_string().contains("a/job.toml"));
    }

    #[test]
    fn the_command_line_adds_the_scale() {
        let common = Common {
            height_unit: Some("um".to_owned()),
            pitch: Some(crate::heightmap::Pitch { x: 2.0, y: 3.0 }),
            ..Common::default()
        };
        let job = open_job(Path::new("folder/scan.npy"), &common).unwrap();
        assert_eq!(job.scan_path(), Path::new("folder/scan.npy"));
        assert_eq!(job.file.scan.height_unit.as_deref(), Some("um"));
        assert_eq!(job.file.scan.pitch.unwrap()[1].nm(), 3.0);
    }
}
