//! The panel of the dimensions: what is measured, and the chosen one's settings.

use super::command::Command;
use super::fields::{choice_row, heading, length_row, parsed_row, remark, text_row};
use super::panels::{Panel, cautions, request_title};
use super::second_opinions::opinions_ui;
use super::state::{PLACEABLE, Tool, kind_name};
use crate::dimensions::{Axis, Find, Kind, Request};
use crate::heightmap::Region;
use crate::units::Length;
use eframe::egui::{Key, Ui};

const FINDABLE: [(Find, &str); 4] = [
    (Find::Lines, "Every line"),
    (Find::Trenches, "Every trench"),
    (Find::Steps, "Every step"),
    (Find::Particles, "Every particle"),
];

/// Buttons that place, the list, the chosen one.
pub fn dimensions_ui(
    ui: &mut Ui,
    panel: &Panel,
    tool: Tool,
    chosen: Option<usize>,
    out: &mut Vec<Command>,
) {
    heading(ui, "Place on the map");
    ui.horizontal_wrapped(|ui| {
        for kind in PLACEABLE {
            place_button(ui, kind, tool, out);
        }
    });
    match tool {
        Tool::Place(kind) => remark(ui, how_to_place(kind)),
        _ => remark(ui, "Take one, then drag a region on either map."),
    }
    ui.menu_button("Find on the scan", |ui| {
        for (what, name) in FINDABLE {
            if ui.button(name).clicked() {
                out.push(Command::Find(what));
                ui.close();
            }
        }
    })
    .response
    .on_hover_text("Adds a dimension for each one found; look at them before you use them");
    heading(ui, "Dimensions of this job");
    let requests = &panel.job.dimensions;
    if requests.is_empty() {
        remark(ui, "None yet.");
    }
    for (i, request) in requests.iter().enumerate() {
        if ui
            .selectable_label(chosen == Some(i), request_title(request))
            .clicked()
        {
            out.push(Command::Select((chosen != Some(i)).then_some(i)));
        }
    }
    if let Some((i, request)) = chosen.and_then(|i| Some((i, requests.get(i)?))) {
        heading(ui, "The chosen one");
        ui.push_id(("request", i), |ui| request_ui(ui, panel, i, request, out));
    }
    opinions_ui(ui, panel, out);
    cautions(ui, panel);
}

/// A button that takes the tool placing `kind`.
fn place_button(ui: &mut Ui, kind: Kind, tool: Tool, out: &mut Vec<Command>) {
    let key = match kind {
        Kind::StepHeight => " (H)",
        Kind::LineWidth => " (W)",
        _ => "",
    };
    let taken = tool == Tool::Place(kind);
    let response = ui.selectable_label(taken, kind_name(kind));
    let help = format!("{}{key}", how_to_place(kind));
    if response.on_hover_text(help).clicked() {
        let next = if taken { Tool::Look } else { Tool::Place(kind) };
        out.push(Command::Take(next));
    }
}

fn how_to_place(kind: Kind) -> &'static str {
    match kind {
        Kind::StepHeight => {
            "Drag over the feature and as much of the ground on either side: three times its width in all."
        }
        Kind::LineWidth => "Drag over one ridge or trench and some of what lies on either side.",
        Kind::Pitch => "Drag over as many periods of the grating as there are.",
        Kind::Particle => "Drag over the particles and the flat around them.",
        Kind::Texture => "Drag over the area whose texture counts.",
        Kind::SideWallAngle => {
            "Drag over one ridge or trench and some of what lies on either side."
        }
        Kind::EdgeRoughness | Kind::WidthRoughness => {
            "Drag along one ridge or trench, as long a piece of it as there is."
        }
        Kind::HoleDepth => "Drag over one pit or trench and the plateau around it.",
        Kind::Distance | Kind::Angle => {
            "Drag from the one point to the other: left to right through the region's middle."
        }
        Kind::Lattice => "Drag over as many cells of the lattice as there are.",
    }
}

fn request_ui(ui: &mut Ui, panel: &Panel, i: usize, request: &Request, out: &mut Vec<Command>) {
    let mut changed = request.clone();
    if let Some(name) = text_row(ui, "Name", "", &request.name, "")
        && !name.is_empty()
    {
        changed.name = name;
    }
    let kinds = PLACEABLE.map(|k| (k, kind_name(k), ""));
    if let Some(kind) = choice_row(ui, "Kind", "", request.kind, &kinds) {
        changed.kind = kind;
        if !kind.has_fractions() {
            changed.at.clear();
        }
    }
    let across = [
        (None, "Found from the data", ""),
        (Some(Axis::X), "Along x", "The line runs along y"),
        (Some(Axis::Y), "Along y", "The line runs along x"),
    ];
    if let Some(axis) = choice_row(
        ui,
        "Crossed",
        "Which way the feature is crossed",
        request.across,
        &across,
    ) {
        changed.across = axis;
    }
    if request.kind.has_fractions() {
        let text = fractions_text(&request.at);
        let help = "Height fractions between the lower plateau (0) and the upper one (1), by custom 0.1, 0.5 and 0.9";
        if let Some(at) = parsed_row(ui, "At fractions", help, &text, "0.5", parse_fractions) {
            changed.at = at.unwrap_or_default();
        }
    }
    region_ui(ui, panel, &mut changed);
    if changed != *request {
        let mut job = panel.job.clone();
        job.dimensions[i] = changed;
        out.push(Command::Edit {
            job: Box::new(job),
            gesture: false,
        });
    }
    ui.add_space(4.0);
    let remove = ui.button("Remove").on_hover_text("Delete");
    let key =
        ui.ctx().memory(|m| m.focused().is_none()) && ui.input(|x| x.key_pressed(Key::Delete));
    if remove.clicked() || key {
        let mut job = panel.job.clone();
        job.dimensions.remove(i);
        out.push(Command::Select(None));
        out.push(Command::Edit {
            job: Box::new(job),
            gesture: false,
        });
    }
}

fn region_ui(ui: &mut Ui, panel: &Panel, changed: &mut Request) {
    let Some(whole) = panel.outcome.scan.as_ref().map(|s| s.whole()) else {
        return;
    };
    let region = changed.region.unwrap_or(whole);
    let fields = [
        ("Left", "Left edge from the map's left", region.left),
        ("Top", "Upper edge from the map's top", region.top),
        ("Width", "Extent along x", region.width),
        ("Height", "Extent along y", region.height),
    ];
    for (i, (name, help, value)) in fields.into_iter().enumerate() {
        if let Some(Some(length)) = length_row(ui, name, help, Some(Length::from_nm(value)), "") {
            let mut next: Region = region;
            let nm = length.nm();
            match i {
                0 => next.left = nm,
                1 => next.top = nm,
                2 => next.width = nm,
                _ => next.height = nm,
            }
            changed.region = Some(next);
        }
    }
}

/// Fractions as people write them.
pub fn fractions_text(at: &[f64]) -> String {
    at.iter().map(f64::to_string).collect::<Vec<_>>().join(", ")
}

/// Reads fractions: "0.1, 0.5 0.9" or "10 %, 50 %".
pub fn parse_fractions(text: &str) -> Result<Vec<f64>, String> {
    let spaced = text.replace([',', ';'], " ").replace('%', " % ");
    let mut values: Vec<f64> = Vec::new();
    for word in spaced.split_whitespace() {
        if word == "%" {
            match values.last_mut() {
                Some(last) => *last /= 100.0,
                None => return Err("a number comes before %".to_owned()),
            }
        } else {
            let value = word
                .parse()
                .map_err(|_| format!("\"{word}\" is not a number"))?;
            values.push(value);
        }
    }
    match values.iter().find(|v| !(**v > 0.0 && **v < 1.0)) {
        Some(bad) => Err(format!("{bad} is not between 0 and 1")),
        None => Ok(values),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn fractions_as_people_write_them() {
        assert_eq!(parse_fractions("0.1, 0.5 0.9").unwrap(), [0.1, 0.5, 0.9]);
        assert_eq!(parse_fractions("10 %; 50%").unwrap(), [0.1, 0.5]);
        assert!(parse_fractions("50").unwrap_err().contains("50"));
        assert!(parse_fractions("half").unwrap_err().contains("half"));
        assert!(parse_fractions("%").is_err());
        assert_eq!(fractions_text(&[0.1, 0.5]), "0.1, 0.5");
    }
}
