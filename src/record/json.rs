//! result.json, schema `truewidth.result/1`.
//!
//! Numbers: heights are f32, so everything read off them carries noise digits. Each number is
//! written to seven significant digits, a measured value to a thousandth of its standard
//! uncertainty where that is finer; pixel pitches to twelve digits. What could not be had is
//! `null`; NaN and infinities never appear.

use super::format::tame;
use super::known::KnownPart;
use crate::dimensions::{Dimension, Fitted, Kind, ModelFit, MonteCarlo, Status};
use crate::heightmap::HeightMap;
use crate::job::{
    Further, Job, Outcome, Reliability, ShapeFigures, SurfaceResult, TipFrom, TipResult,
    shape_figures,
};
use crate::leveling::Leveled;
use crate::tip::area::ContactArea;
use crate::tip::probe_shape::ProbeShape;
use crate::uncertainty::Distribution;
use serde::Serialize;
use std::path::Path;

/// Schema of result.json.
pub const SCHEMA: &str = "truewidth.result/1";

/// The whole of result.json.
#[derive(Debug, Serialize)]
pub struct ResultFile {
    schema: &'static str,
    program: &'static str,
    #[serde(skip_serializing_if = "Option::is_none")]
    written: Option<String>,
    job: JobPart,
    scan: ScanPart,
    level: Option<LevelPart>,
    tip: TipPart,
    surface: Option<SurfacePart>,
    reliability: Option<Reliability>,
    dimensions: Vec<DimensionPart>,
    warnings: Vec<String>,
}

#[derive(Debug, Serialize)]
struct JobPart {
    title: String,
    file: Option<String>,
    sha256: Option<String>,
}

#[derive(Debug, Serialize)]
struct ScanPart {
    file: String,
    sha256: Option<String>,
    columns: Option<usize>,
    rows: Option<usize>,
    pitch_nm: Option<[f64; 2]>,
    noise_nm: Option<f64>,
    scale_source: Option<String>,
    voids: Option<usize>,
    range_nm: Option<[f64; 2]>,
    steps: Vec<String>,
    /// Retrace of the same lines.
    #[serde(skip_serializing_if = "Option::is_none")]
    retrace: Option<FurtherPart>,
    /// Scan of the same place, straight after.
    #[serde(skip_serializing_if = "Option::is_none")]
    second: Option<FurtherPart>,
}

/// A further scan, registered on the scan; `null` what it does not show.
#[derive(Debug, Serialize)]
struct FurtherPart {
    file: String,
    sha256: Option<String>,
    shift_nm: [Option<f64>; 2],
    height_difference_nm: Option<f64>,
}

impl FurtherPart {
    fn of(further: &Further) -> Self {
        let pair = further.pair;
        Self {
            file: path_text(&further.file),
            sha256: further.sha256.clone(),
            shift_nm: pair.map_or([None; 2], |p| p.shift_nm.map(|s| s.and_then(number))),
            height_difference_nm: pair.and_then(|p| number(p.height_nm)),
        }
    }
}

#[derive(Debug, Serialize)]
struct LevelPart {
    method: serde_json::Value,
    slope: [Option<f64>; 2],
    drift_nm: Option<f64>,
    row_jumps: Vec<JumpPart>,
}

#[derive(Debug, Serialize)]
struct JumpPart {
    row: usize,
    jump_nm: Option<f64>,
}

/// The `tip` object. Where there is no tip all is `null` and `diagnosis` says why.
#[derive(Debug, Serialize)]
pub struct TipPart {
    from: TipFrom,
    file: Option<String>,
    sha256: Option<String>,
    identified: bool,
    threshold_nm: Option<f64>,
    smoothing_px: Option<f64>,
    exercised_depth_nm: Option<f64>,
    depth_nm: Option<f64>,
    height_u_nm: Option<f64>,
    support_nm: Option<[f64; 2]>,
    apex_radius_nm: Option<RadiusPart>,
    half_angle_deg: Option<AnglePart>,
    band: bool,
    probe_shape: Option<ShapePart>,
    contact_area: Vec<AreaPart>,
    diagnosis: Vec<String>,
    /// Both ways side by side, for a tip from a known shape.
    #[serde(skip_serializing_if = "Option::is_none")]
    known: Option<KnownPart>,
}

/// Full widths of the projected profile, `[distance from the apex, width]` in nm.
#[derive(Debug, Serialize)]
struct ShapePart {
    along_x_nm: Vec<[Option<f64>; 2]>,
    along_y_nm: Vec<[Option<f64>; 2]>,
}

#[derive(Debug, Serialize)]
struct AreaPart {
    depth_nm: Option<f64>,
    projected_nm2: Option<f64>,
    surface_nm2: Option<f64>,
}

#[derive(Debug, Serialize)]
struct TiltPart {
    value: Option<f64>,
    u: Option<f64>,
    azimuth_deg: Option<f64>,
}

#[derive(Debug, Serialize)]
struct RadiusPart {
    value: f64,
    u: Option<f64>,
    fit_depth_nm: Option<f64>,
    principal_nm: [Option<f64>; 2],
    sphere_nm: Option<f64>,
    paraboloid_nm: Option<f64>,
}

#[derive(Debug, Serialize)]
struct AnglePart {
    value: f64,
    u: Option<f64>,
    between_nm: [Option<f64>; 2],
    per_azimuth_deg: Vec<[Option<f64>; 2]>,
    tilt_deg: Option<TiltPart>,
}

#[derive(Debug, Serialize)]
struct SurfacePart {
    contact_tolerance_nm: Option<f64>,
    edge_leaning: f64,
    bracketed_by_band: bool,
}

#[derive(Debug, Serialize)]
struct DimensionPart {
    name: String,
    kind: Kind,
    quantity: String,
    at: Option<f64>,
    unit: &'static str,
    as_scanned: Option<ScannedPart>,
    corrected: Option<CorrectedPart>,
    status: Option<Status>,
    reliability: Option<Reliability>,
    model_fit: Option<ModelFit>,
    monte_carlo: Option<MonteCarlo>,
    flags: Vec<String>,
    budget: Vec<ComponentPart>,
    assumptions: String,
}

#[derive(Debug, Serialize)]
struct ScannedPart {
    value: f64,
    u: Option<f64>,
}

#[derive(Debug, Serialize)]
struct CorrectedPart {
    value: Option<f64>,
    u: Option<f64>,
    #[serde(rename = "U")]
    expanded: Option<f64>,
    k: Option<f64>,
    low: Option<f64>,
    high: Option<f64>,
}

#[derive(Debug, Serialize)]
struct ComponentPart {
    source: String,
    u: Option<f64>,
    distribution: Distribution,
    sensitivity: Option<f64>,
    #[serde(skip_serializing_if = "Option::is_none")]
    degrees_of_freedom: Option<f64>,
}

/// `x` to `digits` significant digits; `None` for what is no number.
fn significant(x: f64, digits: i32) -> Option<f64> {
    if !x.is_finite() {
        return None;
    }
    if x == 0.0 {
        return Some(0.0);
    }
    // Printing and reading back rounds in decimal, which powers of ten in binary do not.
    format!("{x:.*e}", (digits - 1).max(0) as usize)
        .parse()
        .ok()
}

/// To seven significant digits.
pub(super) fn number(x: f64) -> Option<f64> {
    significant(x, 7)
}

/// A measured value: to seven digits, or a thousandth of `u` where that is finer.
fn measured(x: f64, u: Option<f64>) -> Option<f64> {
    let digits = match u {
        Some(u) if u > 0.0 && u.is_finite() && x != 0.0 => {
            (4.0 + (x.abs() / u).log10().floor()).clamp(7.0, 16.0) as i32
        }
        _ => 7,
    };
    significant(x, digits)
}

fn path_text(path: &Path) -> String {
    path.to_string_lossy().into_owned()
}

impl ResultFile {
    /// The result of `outcome`, with the time stamp `written` where there is to be one.
    pub fn of(job: &Job, outcome: &Outcome, written: Option<&str>) -> Self {
        Self {
            schema: SCHEMA,
            program: env!("CARGO_PKG_VERSION"),
            written: written.map(str::to_owned),
            job: JobPart {
                title: job.file.title.clone(),
                file: job
                    .path
                    .as_deref()
                    .and_then(Path::file_name)
                    .map(|n| n.to_string_lossy().into_owned()),
                sha256: job.sha256.clone(),
            },
            scan: scan_part(job, outcome),
            level: outcome.level.as_deref().map(|level| level_part(job, level)),
            tip: TipPart::of(job, outcome),
            surface: outcome.surface.as_deref().map(surface_part),
            reliability: outcome.surface.as_deref().map(|s| rounded(s.reliability)),
            dimensions: outcome
                .dimensions
                .iter()
                .flat_map(|all| all.iter())
                .map(dimension_part)
                .collect(),
            warnings: outcome.warnings.clone(),
        }
    }
}

fn scan_part(job: &Job, outcome: &Outcome) -> ScanPart {
    let scan = outcome.scan.as_deref();
    let history = outcome.level.as_deref().map(|level| &level.map).or(scan);
    let range = scan.and_then(HeightMap::range);
    let pairs = outcome.pairs.as_deref();
    ScanPart {
        file: path_text(&job.file.scan.file),
        sha256: scan.and_then(|s| s.provenance().sha256.clone()),
        columns: scan.map(HeightMap::columns),
        rows: scan.map(HeightMap::rows),
        pitch_nm: scan.map(|s| {
            let pitch = s.pitch();
            // A pitch is checked to be finite where a map is made.
            [pitch.x, pitch.y].map(|p| significant(p, 12).unwrap_or(p))
        }),
        noise_nm: outcome
            .level
            .as_deref()
            .and_then(|l| l.noise_nm)
            .and_then(number),
        scale_source: scan.map(|s| s.provenance().scale_source.clone()),
        voids: scan.map(HeightMap::void_count),
        range_nm: range
            .and_then(|(low, high)| Some([number(f64::from(low))?, number(f64::from(high))?])),
        steps: history.map_or_else(Vec::new, |m| m.provenance().steps.clone()),
        retrace: pairs.and_then(|p| p.retrace.as_ref()).map(FurtherPart::of),
        second: pairs.and_then(|p| p.second.as_ref()).map(FurtherPart::of),
    }
}

fn level_part(job: &Job, level: &Leveled) -> LevelPart {
    LevelPart {
        // A unit variant of a plain enum always serializes.
        method: serde_json::to_value(job.file.level.method).unwrap_or_default(),
        slope: level.slope.map(number),
        drift_nm: level.drift_nm.and_then(number),
        row_jumps: level
            .row_jumps
            .iter()
            .map(|jump| JumpPart {
                row: jump.row,
                jump_nm: number(jump.jump_nm),
            })
            .collect(),
    }
}

impl TipPart {
    fn of(job: &Job, outcome: &Outcome) -> Self {
        let spec = &job.file.tip;
        let mut part = match outcome.tip.as_deref() {
            Some(tip) => Self::of_tip(tip),
            None => Self::missing(spec.from, &outcome.warnings),
        };
        let file = spec.file.as_deref().filter(|_| spec.from == TipFrom::File);
        part.file = file.or(spec.own_scan()).map(path_text);
        part
    }

    /// The object for `tip` alone, as `truewidth tip --json` prints it.
    pub fn of_tip(tip: &TipResult) -> Self {
        let estimate = tip.estimate.as_ref();
        let figures = shape_figures(tip);
        let mut diagnosis = tip.diagnosis.clone();
        if estimate.is_none() && tip.known.is_none() {
            diagnosis.push(
                "The tip was given, not estimated: it has no threshold and no exercised depth."
                    .to_owned(),
            );
        }
        Self {
            from: tip.from,
            file: None,
            sha256: tip.sha256.clone(),
            identified: tip.identified,
            threshold_nm: estimate.and_then(|e| number(e.threshold_nm)),
            smoothing_px: estimate.and_then(|e| number(e.smoothing_px)),
            exercised_depth_nm: tip.exercised_depth_nm.and_then(number),
            depth_nm: number(tip.tip.depth_nm()),
            height_u_nm: number(tip.height_u_nm),
            support_nm: Some(
                tip.tip
                    .support_nm()
                    .map(|s| significant(s, 12).unwrap_or(s)),
            ),
            apex_radius_nm: tip.read_out.apex_radius.and_then(|r| {
                Some(RadiusPart {
                    value: number(r.value)?,
                    u: number(r.u),
                    fit_depth_nm: number(r.fit_depth_nm),
                    principal_nm: r.principal_nm.map(number),
                    sphere_nm: r.sphere_nm.and_then(number),
                    paraboloid_nm: r.paraboloid_nm.and_then(number),
                })
            }),
            half_angle_deg: tip.read_out.half_angle.as_ref().and_then(|a| {
                Some(AnglePart {
                    value: number(a.value)?,
                    u: number(a.u),
                    between_nm: a.between_nm.map(number),
                    per_azimuth_deg: a
                        .per_azimuth
                        .iter()
                        .map(|&(azimuth, angle)| [number(azimuth), number(angle)])
                        .collect(),
                    tilt_deg: a.tilt.map(|t| TiltPart {
                        value: number(t.value),
                        u: number(t.u),
                        azimuth_deg: number(t.azimuth_deg),
                    }),
                })
            }),
            band: tip.band.is_some(),
            probe_shape: shape_part(&figures),
            contact_area: figures.areas.iter().map(area_part).collect(),
            diagnosis,
            known: KnownPart::of(tip),
        }
    }

    fn missing(from: TipFrom, warnings: &[String]) -> Self {
        let mut diagnosis: Vec<String> = warnings
            .iter()
            .filter(|w| w.starts_with("No tip"))
            .cloned()
            .collect();
        if diagnosis.is_empty() {
            diagnosis.push("No tip: this stage has given no result.".to_owned());
        }
        Self {
            from,
            file: None,
            sha256: None,
            identified: false,
            threshold_nm: None,
            smoothing_px: None,
            exercised_depth_nm: None,
            depth_nm: None,
            height_u_nm: None,
            support_nm: None,
            apex_radius_nm: None,
            half_angle_deg: None,
            band: false,
            probe_shape: None,
            contact_area: Vec::new(),
            diagnosis,
            known: None,
        }
    }
}

fn shape_part(figures: &ShapeFigures) -> Option<ShapePart> {
    let points = |shape: &ProbeShape| -> Vec<[Option<f64>; 2]> {
        let points = shape.points.iter();
        points
            .map(|p| [number(p.distance_nm), number(p.width_nm())])
            .collect()
    };
    let [x, y] = &figures.shapes;
    let part = ShapePart {
        along_x_nm: points(x),
        along_y_nm: points(y),
    };
    (!part.along_x_nm.is_empty() || !part.along_y_nm.is_empty()).then_some(part)
}

fn area_part(area: &ContactArea) -> AreaPart {
    AreaPart {
        depth_nm: number(area.depth_nm),
        projected_nm2: number(area.projected_nm2),
        surface_nm2: number(area.surface_nm2),
    }
}

fn surface_part(surface: &SurfaceResult) -> SurfacePart {
    let leaning = surface.edge_leaning.iter().filter(|&&e| e).count() as f64;
    let all = surface.edge_leaning.len().max(1) as f64;
    SurfacePart {
        contact_tolerance_nm: number(surface.tolerance_nm),
        edge_leaning: number(leaning / all).unwrap_or(0.0),
        bracketed_by_band: surface.upper.is_some() && surface.lower.is_some(),
    }
}

fn rounded(r: Reliability) -> Reliability {
    // Fractions are finite.
    let round = |x: f64| number(x).unwrap_or(0.0);
    Reliability {
        touched: round(r.touched),
        bounded: round(r.bounded),
        never: round(r.never),
    }
}

fn fitted_part(fitted: &Fitted) -> Fitted {
    let place = |x: Option<f64>| x.and_then(|x| measured(x, fitted.u));
    Fitted {
        value: place(fitted.value),
        u: fitted.u.and_then(number),
        low: place(fitted.low),
        high: place(fitted.high),
        ..fitted.clone()
    }
}

fn model_fit_part(fit: &ModelFit) -> ModelFit {
    ModelFit {
        value: fit.value.as_ref().map(fitted_part),
        parameters: fit.parameters.iter().map(fitted_part).collect(),
        misfit: fit.misfit.and_then(number),
        ..fit.clone()
    }
}

fn monte_carlo_part(drawn: &MonteCarlo) -> Option<MonteCarlo> {
    let place = |x: f64| measured(x, Some(drawn.u));
    Some(MonteCarlo {
        mean: place(drawn.mean)?,
        u: number(drawn.u)?,
        low: place(drawn.low)?,
        high: place(drawn.high)?,
        shortest_low: place(drawn.shortest_low)?,
        shortest_high: place(drawn.shortest_high)?,
        tolerance: number(drawn.tolerance)?,
        ..drawn.clone()
    })
}

fn dimension_part(dimension: &Dimension) -> DimensionPart {
    DimensionPart {
        name: tame(&dimension.name),
        kind: dimension.kind,
        quantity: dimension.quantity.clone(),
        at: dimension.at.and_then(number),
        unit: dimension.unit,
        as_scanned: dimension.as_scanned.and_then(|v| {
            Some(ScannedPart {
                value: measured(v.value, v.u)?,
                u: v.u.and_then(number),
            })
        }),
        corrected: dimension.corrected.map(|c| CorrectedPart {
            value: c.value.and_then(|x| measured(x, c.u)),
            u: c.u.and_then(number),
            expanded: c.expanded.and_then(number),
            k: c.k.and_then(number),
            low: c.low.and_then(|x| measured(x, c.u)),
            high: c.high.and_then(|x| measured(x, c.u)),
        }),
        status: dimension.status,
        reliability: dimension.evidence.reliability.map(rounded),
        model_fit: dimension.evidence.model_fit.as_ref().map(model_fit_part),
        monte_carlo: dimension
            .evidence
            .monte_carlo
            .as_ref()
            .and_then(monte_carlo_part),
        flags: dimension.flags.clone(),
        budget: dimension
            .budget
            .iter()
            .map(|c| ComponentPart {
                source: c.source.clone(),
                u: number(c.u),
                distribution: c.distribution,
                sensitivity: number(c.sensitivity),
                degrees_of_freedom: c.degrees_of_freedom.and_then(number),
            })
            .collect(),
        assumptions: dimension.assumptions.to_owned(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn noise_digits_of_f32_go_and_fine_values_stay() {
        assert_eq!(number(f64::from(128.7f32)), Some(128.7));
        assert_eq!(number(f64::from(0.1f32)), Some(0.1));
        assert_eq!(number(-0.0).map(f64::to_bits), Some(0));
        assert_eq!(number(f64::NAN), None);
        assert_eq!(number(f64::NEG_INFINITY), None);
        // A pitch known to 0.1 pm keeps its digits.
        let fine = 1_000_123.456_789;
        let kept = measured(fine, Some(1e-4)).unwrap();
        assert!((kept - fine).abs() < 1e-6, "{kept}");
        assert_eq!(measured(fine, None), Some(1_000_123.0));
    }
}
