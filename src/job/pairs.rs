//! What the job's further scans of the same place tell of the scanner.

use super::spec::{Job, ScanSpec};
use crate::dimensions::Scanner;
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::leveling::{self, Leveled, pair::Freedom, pair::Pair};
use crate::progress::Progress;
use std::path::{Path, PathBuf};

/// A further scan of the same place, registered on the job's own.
#[derive(Debug, Clone, PartialEq)]
pub struct Further {
    /// Its path as the job gives it.
    pub file: PathBuf,
    /// SHA-256 of the file.
    pub sha256: Option<String>,
    /// Shift and difference; `None` where the two do not show the same.
    pub pair: Option<Pair>,
}

/// What further scans showed.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Pairs {
    /// Of the same lines on the way back.
    pub retrace: Option<Further>,
    /// Of the same place, straight after.
    pub second: Option<Further>,
    /// Plain sentences for the user.
    pub warnings: Vec<String>,
}

impl Pairs {
    /// What goes into the budgets.
    pub fn scanner(&self) -> Scanner {
        let pair = |further: &Option<Further>| further.as_ref().and_then(|f| f.pair);
        let retrace = pair(&self.retrace);
        Scanner {
            hysteresis_nm: retrace.and_then(|p| Some(p.shift_nm[0]?.abs() / 2.0)),
            hysteresis_height_nm: retrace.map(|p| p.height_nm / 2.0),
            drift_nm: pair(&self.second).map_or([None; 2], |p| p.shift_nm),
        }
    }
}

impl ScanSpec {
    /// The entry without its further scans: what the scan itself hangs on.
    pub(super) fn alone(&self) -> Self {
        Self {
            retrace: None,
            second: None,
            ..self.clone()
        }
    }

    /// The further scans as the job gives them.
    pub(super) fn further(&self) -> impl Iterator<Item = &Path> {
        self.retrace
            .iter()
            .chain(&self.second)
            .map(PathBuf::as_path)
    }
}

/// Opens, levels and registers the further scans.
///
/// Errors: a file that cannot be opened; kind `Setting` for another size or pitch than that of the
/// job's scan. Scans that do not show the same are no error but a warning, and no budget line.
pub(super) fn pairs(job: &Job, level: &Leveled, progress: &Progress) -> Result<Pairs> {
    let spec = &job.file.scan;
    let mut warnings = Vec::new();
    let mut further = |key: &str, path: &Option<PathBuf>, freedom, what: &str| {
        let Some(file) = path else {
            return Ok(None);
        };
        let other = open(job, key, file, level, progress)?;
        let pair = leveling::pair::pair(level, &other, freedom, progress)?;
        let name = file.display();
        match &pair {
            None => warnings.push(format!(
                "[scan] {key} = \"{name}\" does not show the same as the scan: no {what} is in the \
                 budgets."
            )),
            Some(pair) if pair.shift_nm[0].is_none() => warnings.push(format!(
                "[scan] {key} = \"{name}\" shows too little along x to tell a shift: no {what} \
                 along x is in the budgets."
            )),
            Some(_) => {}
        }
        Ok(Some(Further {
            file: file.clone(),
            sha256: other.map.provenance().sha256.clone(),
            pair,
        }))
    };
    let retrace = further("retrace", &spec.retrace, Freedom::Fast, "hysteresis")?;
    let second = further("second", &spec.second, Freedom::Both, "drift")?;
    Ok(Pairs {
        retrace,
        second,
        warnings,
    })
}

fn open(
    job: &Job,
    key: &str,
    file: &Path,
    level: &Leveled,
    progress: &Progress,
) -> Result<Leveled> {
    let path = job.folder.join(file);
    let map = files::open(&path, &job.file.scan.open_options()?).map_err(|e| e.at(&path))?;
    let own = &level.map;
    let same = map.heights().dim() == own.heights().dim() && map.pitch().agrees_with(own.pitch());
    if !same {
        let of = |m: &crate::heightmap::HeightMap| {
            let p = m.pitch();
            let (columns, rows) = (m.columns(), m.rows());
            format!("{columns} x {rows} pixels of {} nm x {} nm", p.x, p.y)
        };
        return Err(Error::new(
            ErrorKind::Setting,
            format!(
                "[scan] {key} = \"{}\" has {}, the scan {}",
                file.display(),
                of(&map),
                of(own)
            ),
        )
        .remedy("Give a scan of the same place with the same size and pitch"));
    }
    leveling::level(&map, &job.file.level.settings()?, progress).map_err(|e| e.at(&path))
}
