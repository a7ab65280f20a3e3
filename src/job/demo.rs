//! The demo job: an invented scan that comes with the program.

use super::spec::Job;
use crate::error::{Error, ErrorKind, Result};
use crate::files::write_atomically;
use std::path::{Path, PathBuf};

const JOB: (&str, &[u8]) = (
    "stamp-14.toml",
    include_bytes!("../../sample-scans/stamp-14.toml"),
);
const SCAN: (&str, &[u8]) = (
    "stamp-14.tiff",
    include_bytes!("../../sample-scans/stamp-14.tiff"),
);

/// The user's data folder: `TRUEWIDTH_DATA` where set, else the platform's own place.
///
/// Errors of kind `Io` where the platform names none.
pub fn data_folder() -> Result<PathBuf> {
    if let Some(folder) = std::env::var_os("TRUEWIDTH_DATA") {
        return Ok(folder.into());
    }
    directories::ProjectDirs::from("", "", "truewidth")
        .map(|dirs| dirs.data_local_dir().to_owned())
        .ok_or_else(|| {
            Error::new(
                ErrorKind::Io,
                "no home folder, so no place for the program's own files",
            )
            .remedy("Set TRUEWIDTH_DATA to a folder that may be written to")
        })
}

/// Opens the demo job, laying its files into the data folder where they are missing or differ.
pub fn demo() -> Result<Job> {
    demo_in(&data_folder()?.join("demo"))
}

fn demo_in(folder: &Path) -> Result<Job> {
    std::fs::create_dir_all(folder).map_err(|e| Error::io(folder, e))?;
    for (name, bytes) in [JOB, SCAN] {
        let path = folder.join(name);
        if std::fs::read(&path).ok().as_deref() != Some(bytes) {
            write_atomically(&path, bytes)?;
        }
    }
    Job::open(&folder.join(JOB.0))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_demo_is_laid_out_whole_and_mended_when_damaged() {
        let folder = tempfile::tempdir().unwrap();
        let job = demo_in(folder.path()).unwrap();
        assert!(job.scan_path().is_file());
        std::fs::write(job.scan_path(), b"damaged").unwrap();
        assert_eq!(demo_in(folder.path()).unwrap(), job);
        assert_eq!(std::fs::read(job.scan_path()).unwrap(), SCAN.1);
    }
}
