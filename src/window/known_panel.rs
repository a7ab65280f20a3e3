//! The tip from a known characterizer in the panel: what is certified, what came of both ways.

use super::colours::Palette;
use super::command::{BrowseFor, Command};
use super::fields::{
    caution, choice_row, fact, heading, parse_length, parse_number, remark, text_row,
    value_and_u_row,
};
use super::format;
use super::panels::Panel;
use crate::job::{KnownShape, KnownSpec, TipFrom, TipResult, TipShape, TipSpec, Way};
use crate::tip::known::Known;
use crate::tip::read_out::ReadOut;
use crate::units::Length;
use eframe::egui::{Grid, Id, RichText, Ui};
use std::path::PathBuf;

/// Shapes, what they are called and what is certified of them.
const SHAPES: [(KnownShape, &str, &str); 4] = [
    (
        KnownShape::Ridges,
        "Ridges",
        "Parallel ridges of certified width: a grating or a single one",
    ),
    (KnownShape::Step, "Step", "One long step"),
    (
        KnownShape::Sphere,
        "Spheres",
        "Spheres of certified diameter on a flat",
    ),
    (
        KnownShape::Spike,
        "Spikes",
        "Spikes of certified apex radius and half-angle on a flat",
    ),
];

const WAYS: [(Way, &str, &str); 2] = [
    (
        Way::ModelFit,
        "Model fit",
        "The formula fitted to the scan by least squares",
    ),
    (
        Way::FreeForm,
        "Free form",
        "Erosion of the scan by the known surface: no formula, noisier",
    ),
];

/// Certified values that are not complete yet, and the tip's entry they began from: another one
/// (an undo, another job) ends them.
#[derive(Debug, Clone, PartialEq)]
struct Draft {
    begun_from: TipSpec,
    known: KnownSpec,
}

fn draft_id() -> Id {
    Id::unique("certified values not complete yet")
}

fn draft(ui: &Ui, panel: &Panel) -> Option<KnownSpec> {
    let draft = ui.data(|d| d.get_temp::<Draft>(draft_id()))?;
    (draft.begun_from == panel.job.tip).then_some(draft.known)
}

/// Whether a known shape is being stated that is not complete.
pub fn is_stating(ui: &Ui, panel: &Panel) -> bool {
    draft(ui, panel).is_some()
}

/// Gives up what is not complete.
pub fn give_up(ui: &Ui) {
    ui.data_mut(|d| d.remove::<Draft>(draft_id()));
}

/// Takes `known` into the job where it is complete, else keeps it until it is.
pub fn state(ui: &Ui, panel: &Panel, known: KnownSpec, out: &mut Vec<Command>) {
    if known.to_shape().is_ok() {
        give_up(ui);
        panel.edit(out, |job| {
            job.tip.from = TipFrom::KnownShape;
            job.tip.known = Some(known);
        });
    } else {
        let begun_from = panel.job.tip.clone();
        ui.data_mut(|d| d.insert_temp(draft_id(), Draft { begun_from, known }));
    }
}

/// The known shape to begin with: the job's, else ridges of which nothing is certified yet.
pub fn begin(panel: &Panel) -> KnownSpec {
    let known = panel.job.tip.known.clone();
    known.unwrap_or_else(|| KnownSpec::new(KnownShape::Ridges))
}

/// The settings.
pub fn known_settings(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    let incomplete = draft(ui, panel);
    let now = incomplete.clone().unwrap_or_else(|| begin(panel));
    let help = "What stands on the characterizer";
    if let Some(shape) = choice_row(ui, "Shape", help, now.shape, &SHAPES) {
        state(ui, panel, now.with_shape(shape), out);
    }
    let mut changed = now.clone();
    ui.push_id(("certified", now.shape.keys()), |ui| {
        certified_ui(ui, &mut changed);
    });
    if changed != now {
        state(ui, panel, changed, out);
    }
    if incomplete.is_some()
        && let Err(error) = now.to_shape()
    {
        caution(
            ui,
            &format!("Not in use yet. {}: {}.", error.what(), error.remedy_text()),
        );
    }
    let tip = &panel.job.tip;
    let models = [
        (
            TipShape::SphereCone,
            "Sphere and cone",
            "Radius, half-angle",
        ),
        (TipShape::Paraboloid, "Paraboloid", "Radius"),
        (
            TipShape::Pyramid,
            "Pyramid",
            "Half-angles of its faces; no radius",
        ),
    ];
    let fitted = tip.fitted.unwrap_or_default();
    let help = "The formula that is fitted to the scan";
    if let Some(model) = choice_row(ui, "Model", help, fitted, &models) {
        panel.edit(out, |job| job.tip.fitted = Some(model));
    }
    let way = tip.way.unwrap_or_default();
    let help = "Which of the two tips corrects the scan";
    if let Some(way) = choice_row(ui, "Corrects", help, way, &WAYS) {
        panel.edit(out, |job| job.tip.way = Some(way));
    }
}

/// The separate scan that shows the tip.
pub fn own_scan_setting(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    let now = panel.job.tip.scan.as_ref();
    let now = now.map_or(String::new(), |f| f.display().to_string());
    let help = "A separate scan that shows the tip, taken with the same probe; without one this job's own scan shows it";
    if let Some(path) = text_row(ui, "Tip's scan", help, &now, "this job's scan") {
        panel.edit(out, |job| {
            job.tip.scan = (!path.is_empty()).then(|| PathBuf::from(path));
        });
    }
    if panel.browse && ui.button("Browse for the tip's scan…").clicked() {
        out.push(Command::Browse(BrowseFor::TipScan));
    }
}

type Lengths<'a> = (&'a mut Option<Length>, &'a mut Option<Length>);
type Numbers<'a> = (&'a mut Option<f64>, &'a mut Option<f64>);

fn certified_ui(ui: &mut Ui, known: &mut KnownSpec) {
    let needed = "certified";
    let free = "from scan";
    match known.shape {
        KnownShape::Ridges => {
            let help = "Width of a ridge at mid-height, as certified";
            let of = (&mut known.width, &mut known.u_width);
            length_ui(ui, "Width", help, needed, of);
            let help = "Left out: read off the scan";
            let of = (&mut known.height, &mut known.u_height);
            length_ui(ui, "Height", help, free, of);
            let help = "Centre to centre; left out: a single ridge";
            let of = (&mut known.pitch, &mut known.u_pitch);
            length_ui(ui, "Pitch", help, "one ridge", of);
            walls_ui(ui, known);
        }
        KnownShape::Step => {
            let help = "Left out: read off the scan";
            let of = (&mut known.height, &mut known.u_height);
            length_ui(ui, "Height", help, free, of);
            walls_ui(ui, known);
        }
        KnownShape::Sphere => {
            let of = (&mut known.diameter, &mut known.u_diameter);
            length_ui(ui, "Diameter", "As certified", needed, of);
        }
        KnownShape::Spike => {
            let of = (&mut known.radius, &mut known.u_radius);
            length_ui(ui, "Apex radius", "Of the spikes", needed, of);
            let of = (&mut known.half_angle, &mut known.u_half_angle);
            number_ui(ui, "Half-angle, °", "Of the spikes", needed, of);
        }
    }
}

fn walls_ui(ui: &mut Ui, known: &mut KnownSpec) {
    let help = "From the horizontal; left out: 90";
    let of = (&mut known.wall_angle, &mut known.u_wall_angle);
    number_ui(ui, "Wall angle, °", help, "90", of);
    let help = "Radius of the upper corners; left out: sharp";
    let of = (&mut known.corner_radius, &mut known.u_corner_radius);
    length_ui(ui, "Corner radius", help, "sharp", of);
}

/// A value taken away takes its uncertainty along.
fn take<T>(
    [value, u]: [super::fields::Taken<T>; 2],
    (into, u_into): (&mut Option<T>, &mut Option<T>),
) {
    if let Some(value) = value {
        if value.is_none() {
            *u_into = None;
        }
        *into = value;
    }
    if let Some(u) = u {
        *u_into = u;
    }
}

fn length_ui(ui: &mut Ui, name: &str, help: &str, hint: &str, of: Lengths) {
    let text = |l: &Option<Length>| l.map_or(String::new(), |l| l.to_string());
    let (value, u) = (text(of.0), text(of.1));
    let taken = value_and_u_row(ui, name, help, [&value, &u], hint, parse_length);
    take(taken, of);
}

fn number_ui(ui: &mut Ui, name: &str, help: &str, hint: &str, of: Numbers) {
    let text = |v: &Option<f64>| v.map_or(String::new(), |v| v.to_string());
    let (value, u) = (text(of.0), text(of.1));
    let taken = value_and_u_row(ui, name, help, [&value, &u], hint, parse_number);
    take(taken, of);
}

/// Both ways side by side, and what the certified values do; nothing for a tip from elsewhere.
pub fn both_ways_ui(ui: &mut Ui, found: &TipResult) {
    let Some((known, used)) = found.known.as_deref() else {
        return;
    };
    heading(ui, "Both ways");
    let p = Palette::of(ui);
    Grid::new("both ways")
        .num_columns(3)
        .spacing([8.0, 3.0])
        .show(ui, |ui| {
            ui.label("");
            for (way, name, help) in WAYS {
                let name = if *used == way {
                    format!("{name}, used")
                } else {
                    name.to_owned()
                };
                ui.label(RichText::new(name).strong()).on_hover_text(help);
            }
            ui.end_row();
            for [name, fitted, free] in ways(known) {
                ui.label(RichText::new(name).color(p.faint));
                ui.label(fitted);
                ui.label(free);
                ui.end_row();
            }
        });
    let reasons = known.read_out.reasons.iter();
    for reason in reasons.chain(&known.free_form.read_out.reasons) {
        if !found.diagnosis.contains(reason) {
            remark(ui, reason);
        }
    }
    fact(
        ui,
        "Fit leaves",
        format!(
            "{} nm, {} nm at edges",
            format::significant(known.residual_nm, 2),
            format::significant(known.misfit_nm, 2)
        ),
    )
    .on_hover_text("Standard deviation in all; at the edges what is beyond the noise");
    let turned = known.rotation_deg.map_or(String::new(), |turn| {
        format!(", across at {turn:.2}° from +x")
    });
    fact(
        ui,
        "Seen on",
        format!("{} {}{turned}", known.features, features(known)),
    );
    influences_ui(ui, known);
}

fn features(known: &Known) -> &'static str {
    match (known.shape.name(), known.features) {
        ("ridges", 1) => "ridge",
        ("sphere", 1) => "sphere",
        ("sphere", _) => "spheres",
        ("spike", 1) => "spike",
        ("spike", _) => "spikes",
        (name, _) => name,
    }
}

/// Rows of name, model fit, free form.
fn ways(known: &Known) -> [[String; 3]; 3] {
    let both = |name: &str, of: &dyn Fn(&ReadOut) -> Option<String>| {
        let show = |read: &ReadOut| of(read).unwrap_or_else(|| "not known".to_owned());
        [
            name.to_owned(),
            show(&known.read_out),
            show(&known.free_form.read_out),
        ]
    };
    let u = |nm: f64| format!("{} nm", format::significant(nm, 2));
    [
        both("Radius", &|read| {
            let r = read.apex_radius?;
            Some(format!("{} nm", format::with_u(r.value, Some(r.u))))
        }),
        both("Half-angle", &|read| {
            let a = read.half_angle.as_ref()?;
            Some(format!("{}°", format::with_u(a.value, Some(a.u))))
        }),
        [
            "Surface, u".to_owned(),
            u(known.height_u_nm),
            u(known.free_form.height_u_nm),
        ],
    ]
}

fn influences_ui(ui: &mut Ui, known: &Known) {
    let read = &known.read_out;
    let radius_u = read.apex_radius.map(|r| r.u);
    let angle_u = read.half_angle.as_ref().map(|a| a.u);
    let doubtful = known.influences.iter().filter(|i| i.certified.u > 0.0);
    for (k, i) in doubtful.enumerate() {
        if k == 0 {
            heading(ui, "One u of the certificate moves");
        }
        // A hundredth of the read-out's own u is next to nothing.
        let moved =
            |by: Option<f64>, u: Option<f64>| by.filter(|b| b.abs() > 0.01 * u.unwrap_or(0.0));
        let mut moves = Vec::new();
        if let Some(nm) = moved(i.radius_nm, radius_u) {
            moves.push(format!("radius {} nm", signed(nm)));
        }
        if let Some(deg) = moved(i.half_angle_deg, angle_u) {
            moves.push(format!("half-angle {}°", signed(deg)));
        }
        let text = match (moves.is_empty(), i.radius_nm.or(i.half_angle_deg)) {
            (false, _) => moves.join("\n"),
            (true, Some(_)) => "next to nothing".to_owned(),
            (true, None) => "not determined".to_owned(),
        };
        let unit = if i.quantity.unit() == "deg" {
            "°"
        } else {
            " nm"
        };
        fact(ui, &spoken(i.quantity.name()), text).on_hover_text(format!(
            "Certified {}{unit}; certificate and scan together {}{unit}",
            format::with_u(i.certified.value, Some(i.certified.u)),
            format::with_u(i.adjusted.value, Some(i.adjusted.u))
        ));
    }
}

/// "corner-radius" as people write it.
fn spoken(key: &str) -> String {
    let words = key.replace('-', " ");
    let mut letters = words.chars();
    let first = letters.next().map(|c| c.to_uppercase().to_string());
    first.unwrap_or_default() + letters.as_str()
}

fn signed(value: f64) -> String {
    let text = format::significant(value, 2);
    if value > 0.0 {
        format!("+{text}")
    } else {
        text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_value_taken_away_takes_its_uncertainty_along() {
        let (mut value, mut u) = (Some(1.0), Some(0.1));
        take([None, Some(Some(0.2))], (&mut value, &mut u));
        assert_eq!((value, u), (Some(1.0), Some(0.2)));
        take([Some(None), None], (&mut value, &mut u));
        assert_eq!((value, u), (None, None));
    }

    #[test]
    fn another_shape_keeps_what_it_has() {
        let nm = |v| Some(Length::from_nm(v));
        let ridges = KnownSpec {
            width: nm(70.0),
            u_width: nm(0.4),
            height: nm(45.0),
            u_height: nm(0.2),
            ..KnownSpec::new(KnownShape::Ridges)
        };
        let step = ridges.with_shape(KnownShape::Step);
        assert_eq!(
            (step.height, step.u_height),
            (ridges.height, ridges.u_height)
        );
        assert_eq!((step.width, step.u_width), (None, None));
        assert!(step.to_shape().is_ok());
        let sphere = step.with_shape(KnownShape::Sphere);
        assert_eq!(sphere, KnownSpec::new(KnownShape::Sphere));
        assert!(
            sphere
                .to_shape()
                .unwrap_err()
                .to_string()
                .contains("diameter")
        );
    }
}
