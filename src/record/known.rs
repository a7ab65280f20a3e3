//! The tip from a known characterizer: its part of result.json, of the report and of the text.

use super::format::{about, with_u};
use super::json::number;
use crate::job::{TipResult, Way};
use crate::tip::known::{Known, Shape};
use crate::tip::read_out::ReadOut;
use serde::Serialize;

/// Two standard uncertainties to each side.
const COVERAGE: f64 = 2.0;

/// `tip.known` of result.json.
#[derive(Debug, Serialize)]
pub struct KnownPart {
    shape: &'static str,
    #[serde(rename = "use")]
    way: Way,
    rotation_deg: Option<f64>,
    slope: [Option<f64>; 2],
    features: usize,
    /// Azimuths at which the tip was seen; empty = all around.
    azimuths_deg: Vec<Option<f64>>,
    residual_nm: Option<f64>,
    misfit_nm: Option<f64>,
    certified: Vec<CertifiedPart>,
    model_fit: WayPart,
    free_form: WayPart,
}

#[derive(Debug, Serialize)]
struct CertifiedPart {
    name: &'static str,
    unit: &'static str,
    value: Option<f64>,
    u: Option<f64>,
    adjusted: Option<f64>,
    adjusted_u: Option<f64>,
    /// Changes when the certified value grows by u.
    radius_change_nm: Option<f64>,
    half_angle_change_deg: Option<f64>,
}

#[derive(Debug, Serialize)]
struct WayPart {
    model: Option<&'static str>,
    apex_radius_nm: Option<FigurePart>,
    half_angle_deg: Option<FigurePart>,
    height_u_nm: Option<f64>,
    /// `[distance, height]` of the section across ridges or a step.
    section_nm: Vec<[Option<f64>; 2]>,
    reasons: Vec<String>,
}

#[derive(Debug, Serialize)]
struct FigurePart {
    value: f64,
    u: Option<f64>,
    low: Option<f64>,
    high: Option<f64>,
}

fn figure(value: f64, u: f64) -> Option<FigurePart> {
    Some(FigurePart {
        value: number(value)?,
        u: number(u),
        low: number(value - COVERAGE * u),
        high: number(value + COVERAGE * u),
    })
}

fn way(read: &ReadOut, model: Option<&'static str>, height_u: f64) -> WayPart {
    WayPart {
        model,
        apex_radius_nm: read.apex_radius.and_then(|r| figure(r.value, r.u)),
        half_angle_deg: read.half_angle.as_ref().and_then(|a| figure(a.value, a.u)),
        height_u_nm: number(height_u),
        section_nm: Vec::new(),
        reasons: read.reasons.clone(),
    }
}

impl KnownPart {
    /// `None` for a tip from elsewhere.
    pub fn of(tip: &TipResult) -> Option<Self> {
        let (known, used) = tip.known.as_deref()?;
        let mut free_form = way(&known.free_form.read_out, None, known.free_form.height_u_nm);
        free_form.section_nm = known
            .free_form
            .section
            .iter()
            .map(|&(v, t)| [number(v), number(t)])
            .collect();
        Some(Self {
            shape: known.shape.name(),
            way: *used,
            rotation_deg: known.rotation_deg.and_then(number),
            slope: known.slope.map(number),
            features: known.features,
            azimuths_deg: known.azimuths_deg.iter().map(|a| number(*a)).collect(),
            residual_nm: number(known.residual_nm),
            misfit_nm: number(known.misfit_nm),
            certified: known
                .influences
                .iter()
                .map(|i| CertifiedPart {
                    name: i.quantity.name(),
                    unit: i.quantity.unit(),
                    value: number(i.certified.value),
                    u: number(i.certified.u),
                    adjusted: number(i.adjusted.value),
                    adjusted_u: number(i.adjusted.u),
                    radius_change_nm: i.radius_nm.and_then(number),
                    half_angle_change_deg: i.half_angle_deg.and_then(number),
                })
                .collect(),
            model_fit: way(
                &known.read_out,
                Some(known.formula.name()),
                known.height_u_nm,
            ),
            free_form,
        })
    }
}

fn figures(read: &ReadOut) -> String {
    let radius = read
        .apex_radius
        .map_or("radius not determined".to_owned(), |r| {
            let (value, u) = with_u(r.value, r.u, "nm");
            format!("radius {value} (u = {u})")
        });
    let angle = read
        .half_angle
        .as_ref()
        .map_or("half-angle not determined".to_owned(), |a| {
            let (value, u) = with_u(a.value, a.u, "deg");
            format!("half-angle {value} (u = {u})")
        });
    format!("{radius}, {angle}")
}

/// Rows of a table that set both ways side by side; empty for a tip from elsewhere.
pub fn rows(tip: &TipResult) -> Vec<(&'static str, String)> {
    let Some((known, used)) = tip.known.as_deref() else {
        return Vec::new();
    };
    let mark = |way: Way| if *used == way { "; used" } else { "" };
    let mut rows = vec![
        (
            "Model fit",
            format!(
                "{}: {}{}",
                known.formula.name(),
                figures(&known.read_out),
                mark(Way::ModelFit)
            ),
        ),
        (
            "Free form",
            format!(
                "{}{}",
                figures(&known.free_form.read_out),
                mark(Way::FreeForm)
            ),
        ),
        ("Shape", shape(known)),
        (
            "Fit leaves",
            format!(
                "{} in all, {} at the edges beyond the noise",
                about(known.residual_nm, "nm"),
                about(known.misfit_nm, "nm")
            ),
        ),
    ];
    for i in &known.influences {
        if i.certified.u <= 0.0 {
            continue;
        }
        let mut text = format!(
            "{} (u = {})",
            about(i.certified.value, i.quantity.unit()),
            about(i.certified.u, i.quantity.unit())
        );
        if let Some(change) = i.radius_nm {
            text.push_str(&format!(
                "; one u of it moves the radius by {}",
                about(change, "nm")
            ));
        }
        if let Some(change) = i.half_angle_deg {
            text.push_str(&format!("; the half-angle by {}", about(change, "deg")));
        }
        rows.push((i.quantity.name(), text));
    }
    rows
}

fn shape(known: &Known) -> String {
    let count = match (&known.shape, known.features) {
        (Shape::Step { .. }, _) => "one step".to_owned(),
        (Shape::Sphere { .. }, 1) => "1 sphere".to_owned(),
        (Shape::Spike { .. }, 1) => "1 spike".to_owned(),
        (Shape::Sphere { .. }, n) => format!("{n} spheres"),
        (Shape::Spike { .. }, n) => format!("{n} spikes"),
        (Shape::Ridges { .. }, n) => format!("ridges, {n} in view"),
    };
    match known.rotation_deg {
        Some(turn) => format!("{count}, across at {turn:.2} degrees from +x"),
        None => count,
    }
}
