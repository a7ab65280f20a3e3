//! Commands on single maps: inspect, convert, tip, reconstruct, simulate.

use super::args::Common;
use super::show::Show;
use crate::error::{Error, ErrorKind, Result};
use crate::files::{self, OpenOptions};
use crate::heightmap::HeightMap;
use crate::job::{self, Job, Stages, Threshold, TipFrom, TipSpec};
use crate::leveling;
use crate::morphology;
use crate::progress::Progress;
use crate::record;
use crate::tip::Tip;
use crate::tip::blind::Method;
use crate::units::Length;
use std::path::Path;

/// Tolerance of the contact search on maps without noise, nm: covers the rounding of f32 sums.
const ROUNDING_NM: f32 = 1e-3;

fn options(common: &Common) -> OpenOptions {
    OpenOptions {
        pitch: common.pitch,
        height_unit: common.height_unit.clone(),
        map: common.map,
    }
}

fn open(path: &Path, common: &Common) -> Result<HeightMap> {
    files::open(path, &options(common))
}

/// `truewidth inspect`
pub fn inspect(path: &Path, json: bool, common: &Common) -> Result<()> {
    let facts = files::inspect(path, &options(common))?;
    // The noise needs heights in nm; where a scale is missing the facts already say so.
    let noise_nm = files::open(path, &options(common))
        .ok()
        .and_then(|m| leveling::noise(&m));
    if json {
        let mut value = serde_json::to_value(&facts)
            .map_err(|e| Error::new(ErrorKind::Data, format!("{}: {e}", path.display())))?;
        value["noise_nm"] = noise_nm.into();
        println!("{value:#}");
    } else {
        print!("{}", facts_text(&facts, noise_nm));
    }
    Ok(())
}

fn facts_text(facts: &files::Inspection, noise_nm: Option<f64>) -> String {
    let mut lines = vec![
        ("file", facts.file.display().to_string()),
        ("format", format!("{}, {} bytes", facts.format, facts.bytes)),
        ("sha256", facts.sha256.clone()),
    ];
    for map in &facts.maps {
        let name = if map.name.is_empty() {
            String::new()
        } else {
            format!(" \"{}\"", map.name)
        };
        lines.push((
            "map",
            format!(
                "{}{name}: {} x {} pixels, {}",
                map.index, map.columns, map.rows, map.sample_type
            ),
        ));
    }
    let by = |source: &Option<String>| {
        source
            .as_ref()
            .map(|s| format!(" ({s})"))
            .unwrap_or_default()
    };
    if facts.map.is_some() {
        lines.push((
            "pitch",
            match facts.pitch_nm {
                Some([x, y]) => format!("{x} nm, {y} nm{}", by(&facts.pitch_source)),
                None => "not stated; give --pitch".to_owned(),
            },
        ));
        lines.push((
            "heights",
            match &facts.height_unit {
                Some(unit) => format!("in {unit}{}", by(&facts.height_source)),
                None => "unit not stated; give --height-unit".to_owned(),
            },
        ));
        lines.push((
            "range",
            match (facts.range_nm, facts.range_raw) {
                (Some([low, high]), _) => format!("{low} nm to {high} nm"),
                (None, Some([low, high])) => format!("{low} to {high}, unit not stated"),
                (None, None) => "none: every pixel is void".to_owned(),
            },
        ));
        lines.push((
            "voids",
            facts
                .voids
                .map_or_else(|| "unknown".to_owned(), |n| n.to_string()),
        ));
        lines.push((
            "noise",
            match noise_nm {
                Some(noise) => format!("{noise:.3} nm, standard deviation of its white part"),
                None => "not to be had without a scale or with so few pixels".to_owned(),
            },
        ));
    } else {
        lines.push((
            "choose",
            "several maps: give --map N for scale and range".to_owned(),
        ));
    }
    lines.extend(facts.notes.iter().map(|note| ("note", note.clone())));
    lines
        .iter()
        .map(|(name, text)| format!("{name:8} {text}\n"))
        .collect()
}

/// `truewidth convert`
pub fn convert(input: &Path, output: &Path, common: &Common, show: &Show) -> Result<()> {
    if files::is_mesh(output) {
        let progress = Progress::new();
        let found = job::open_any_tip(input, &options(common), None, &progress)?;
        write_tip(output, &found.tip)?;
    } else {
        files::write(output, &open(input, common)?)?;
    }
    show.note(&format!("wrote {}", output.display()));
    Ok(())
}

/// How `truewidth tip` goes about it.
pub struct TipOptions<'a> {
    /// Full width of the tip grid.
    pub support: Option<Length>,
    /// Noise threshold of the blind estimate.
    pub threshold: Threshold,
    /// Smoothing before the blind estimate.
    pub smoothing: Option<Length>,
    /// Apex radius of the sharpest feature, where known.
    pub feature_radius: Option<Length>,
    /// Whether the published iteration is wanted.
    pub textbook: bool,
    /// File that states the known shape; blind without.
    pub known: Option<&'a Path>,
}

/// `truewidth tip`
pub fn tip(
    scan: &Path,
    out: &Path,
    how: &TipOptions<'_>,
    json: bool,
    common: &Common,
    show: &Show,
) -> Result<()> {
    let mut job: Job = super::run::open_job(scan, common)?;
    job.file.tip = match how.known {
        Some(path) => TipSpec::from_known_file(path)?,
        None => TipSpec {
            from: TipFrom::Blind,
            threshold: Some(how.threshold),
            smoothing: how.smoothing,
            feature_radius: how.feature_radius,
            method: how.textbook.then_some(Method::Textbook),
            ..TipSpec::default()
        },
    };
    job.file.tip.support = how.support;
    job.file.dimensions.clear();
    let name = scan
        .file_name()
        .unwrap_or_default()
        .to_string_lossy()
        .into_owned();
    let found = show
        .during(&name, |progress| Stages::default().tip(&job, progress))
        .map_err(|e| e.at(scan))?;
    let found = (*found)
        .as_ref()
        .map_err(|reason| Error::new(ErrorKind::Data, reason).at(scan))?;
    write_tip(out, &found.tip)?;
    if json {
        let value = record::tip_json(found);
        println!("{value:#}");
    } else {
        print!("{}", record::tip_text(found));
    }
    show.note(&format!("wrote {}", out.display()));
    Ok(())
}

fn write_tip(out: &Path, tip: &Tip) -> Result<()> {
    files::write_tip(out, tip.shape(), tip.pitch())
}

/// `truewidth reconstruct`
pub fn reconstruct(
    scan: &Path,
    tip: &Path,
    out: &Path,
    certainty: Option<&Path>,
    common: &Common,
    show: &Show,
) -> Result<()> {
    let map = open(scan, common)?;
    let (tip, _) = job::open_tip(tip, &map)?;
    show.during("reconstruct", |progress| {
        let surface = morphology::erode(map.heights(), tip.shape(), &progress.part(0.0, 0.5))?;
        if let Some(path) = certainty {
            let largest = map
                .range()
                .map_or(0.0, |(low, high)| low.abs().max(high.abs()));
            let tolerance = ROUNDING_NM.max(4.0 * f32::EPSILON * largest);
            let marks = morphology::certainty_map(
                surface.view(),
                map.heights(),
                tip.shape(),
                tolerance,
                [0, 0],
                &progress.part(0.5, 1.0),
            )?;
            files::write_npy_u8(path, marks.view())?;
        }
        files::write(out, &map.with_heights(surface, "eroded with a tip"))
    })?;
    show.note(&format!("wrote {}", out.display()));
    Ok(())
}

/// `truewidth simulate`
pub fn simulate(
    surface: &Path,
    tip: &Path,
    out: &Path,
    common: &Common,
    show: &Show,
) -> Result<()> {
    let map = open(surface, common)?;
    let (tip, _) = job::open_tip(tip, &map)?;
    let scan = show.during("simulate", |progress| {
        morphology::dilate(map.heights(), tip.shape(), progress)
    })?;
    files::write(out, &map.with_heights(scan, "dilated with a tip"))?;
    show.note(&format!("wrote {}", out.display()));
    Ok(())
}
