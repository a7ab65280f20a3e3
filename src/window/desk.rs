//! What stands on the desk at each stage.

use super::colours::Palette;
use super::command::Command;
use super::images::MapRef;
use super::map_marks::RegionMark;
use super::map_view::{Desk, Maps, Side, maps_ui, pixel_at};
use super::section::{
    GhostOutline, Section, SectionData, ghost_outline, ghost_top, section_data, section_ui, span_in,
};
use super::state::{ColourSpan, Line, Stage, Tool, request_of};
use super::table::{Results, results_ui};
use crate::job::{GhostTip, JobFile, Outcome, ghost_tip};
use eframe::egui::{CentralPanel, ComboBox, Frame, Margin, Panel, Sense, Ui};
use std::sync::Arc;

/// The chosen dimension and result line.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Chosen {
    /// Index of the job's dimension.
    pub request: Option<usize>,
    /// Index of the result line.
    pub line: Option<usize>,
}

/// What the maps of the desk are made of.
pub struct OnDesk<'a> {
    /// Stage.
    pub stage: Stage,
    /// Job.
    pub job: &'a JobFile,
    /// What is shown.
    pub outcome: &'a Outcome,
    /// What is chosen.
    pub chosen: Chosen,
}

/// Curves and ghost tip, kept until what they are made of changes.
#[derive(Default)]
pub struct Cuts {
    section: Option<(CutKey, SectionData)>,
    ghost: Option<(CutKey, (usize, usize), GhostTip, GhostOutline)>,
}

/// The line and the addresses of what it cuts; those are held as long as they are shown.
type CutKey = (Line, [usize; 3]);

fn cut_key(outcome: &Outcome, line: Line) -> CutKey {
    let level = outcome
        .level
        .as_ref()
        .map_or(0, |l| Arc::as_ptr(l) as usize);
    let tip = outcome.tip.as_ref().map_or(0, |t| Arc::as_ptr(t) as usize);
    let surface = outcome
        .surface
        .as_ref()
        .map_or(0, |s| Arc::as_ptr(s) as usize);
    (line, [level, tip, surface])
}

impl Cuts {
    /// Whether the ghost tip stands somewhere.
    #[cfg(test)]
    pub fn has_ghost(&self) -> bool {
        self.ghost.is_some()
    }

    fn refresh(&mut self, outcome: &Outcome, line: Option<Line>, apex: Option<(usize, usize)>) {
        let Some(line) = line else {
            self.section = None;
            self.ghost = None;
            return;
        };
        let key = cut_key(outcome, line);
        if self.section.as_ref().is_none_or(|(k, _)| *k != key) {
            self.section = Some((key, section_data(outcome, line)));
        }
        let Some(apex) = apex else {
            self.ghost = None;
            return;
        };
        if self
            .ghost
            .as_ref()
            .is_some_and(|g| g.0 == key && g.1 == apex)
        {
            return;
        }
        self.ghost = None;
        if let (Some(tip), Some(surface), Some(ghost), Some((_, section))) = (
            &outcome.tip,
            &outcome.surface,
            ghost_tip(outcome, apex.0, apex.1),
            &self.section,
        ) {
            let top = ghost_top(section);
            let outline = ghost_outline(&tip.tip, &ghost, &surface.surface, line, top);
            self.ghost = Some((key, apex, ghost, outline));
        }
    }
}

/// Paints maps, section and results.
pub fn desk_ui(ui: &mut Ui, on: &OnDesk, desk: &mut Desk, cuts: &mut Cuts, out: &mut Vec<Command>) {
    let Some(level) = &on.outcome.level else {
        return;
    };
    let map = &level.map;
    let size = (map.width_nm(), map.length_nm());
    let set = *desk.line.get_or_insert_with(|| Line::across(map));
    let ghostly = desk.ghost && on.stage != Stage::Scan && on.outcome.surface.is_some();
    let pointer = desk.pointer.filter(|_| ghostly);
    let line = pointer.map_or(set, |p| set.through(p, size));
    let apex = pointer.and_then(|p| pixel_at(map, p));
    cuts.refresh(on.outcome, Some(line), apex);

    tools_ui(ui, on.stage, desk, out);
    let bare = Frame::new().inner_margin(Margin::symmetric(0, 6));
    if on.stage == Stage::Dimensions {
        let tall = (ui.available_height() * 0.25).clamp(120.0, 360.0);
        Panel::bottom("results")
            .resizable(true)
            .default_size(tall)
            .size_range(80.0..=600.0)
            .frame(bare)
            .show(ui, |ui| {
                let results = Results {
                    lines: on.outcome.dimensions.as_ref().map(|d| d.as_slice()),
                    requests: &on.job.dimensions,
                    line: on.chosen.line,
                    chosen: on.chosen.request,
                };
                results_ui(ui, &results, out);
            });
    }
    let share = if on.stage == Stage::Dimensions {
        0.28
    } else {
        0.30
    };
    let tall = (ui.available_height() * share).clamp(120.0, 360.0);
    Panel::bottom(if on.stage == Stage::Dimensions {
        "section below"
    } else {
        "section"
    })
    .resizable(true)
    .default_size(tall)
    .size_range(90.0..=600.0)
    .frame(bare)
    .show(ui, |ui| {
        let rect = ui.available_rect_before_wrap();
        ui.allocate_rect(rect, Sense::hover());
        let empty = SectionData::default();
        let section = Section {
            data: cuts.section.as_ref().map_or(&empty, |(_, d)| d),
            ghost: cuts.ghost.as_ref().map(|g| &g.3),
            pointer: desk.pointer.map(|p| line.coordinates(p).0),
            spans: &chosen_spans(on, line),
            corrected: on.stage != Stage::Scan && on.outcome.surface.is_some(),
        };
        let along = section_ui(ui, rect, &section);
        desk.plot_pointer = along
            .filter(|a| (0.0..=line.length()).contains(a))
            .map(|a| line.at(a));
    });
    CentralPanel::default().frame(bare).show(ui, |ui| {
        let rect = ui.available_rect_before_wrap();
        let maps = maps_on(on, line, cuts);
        maps_ui(ui, rect, &maps, desk, out);
    });
}

fn chosen_spans(on: &OnDesk, line: Line) -> Vec<[f64; 2]> {
    on.chosen
        .request
        .filter(|_| on.stage == Stage::Dimensions)
        .and_then(|i| on.job.dimensions.get(i)?.region)
        .and_then(|region| span_in(line, region))
        .into_iter()
        .collect()
}

fn maps_on<'a>(on: &'a OnDesk, line: Line, cuts: &'a Cuts) -> Maps<'a> {
    let o = on.outcome;
    let scan = on.stage == Stage::Scan;
    let level = o.level.as_ref().map(|l| MapRef::Level(Arc::clone(l)));
    let surface = o.surface.as_ref().map(|s| Side {
        title: "Corrected",
        map: MapRef::Surface(Arc::clone(s)),
    });
    let (left, right) = match (scan, &o.scan, level) {
        (true, Some(opened), Some(level)) => (
            Side {
                title: "As opened",
                map: MapRef::Scan(Arc::clone(opened)),
            },
            Ok(Side {
                title: "Levelled",
                map: level,
            }),
        ),
        (_, Some(opened), level) => (
            Side {
                title: "As scanned",
                map: level.unwrap_or_else(|| MapRef::Scan(Arc::clone(opened))),
            },
            surface.ok_or_else(|| no_surface(o)),
        ),
        // The desk is shown only with a levelled scan, which comes after an opened one.
        (_, None, level) => {
            let map = level.unwrap_or_else(|| unreachable!("a desk without a scan"));
            (
                Side {
                    title: "As scanned",
                    map,
                },
                Err(no_surface(o)),
            )
        }
    };
    Maps {
        left,
        right,
        one_scale: !scan,
        surface: o.surface.as_ref().filter(|_| !scan),
        regions: regions_on(on),
        marks: marks_on(on),
        line: Some(line),
        ghost: cuts.ghost.as_ref().map(|g| &g.2),
        row_jumps: o
            .level
            .as_ref()
            .filter(|_| scan)
            .map_or(&[], |l| &l.row_jumps),
    }
}

fn no_surface(outcome: &Outcome) -> String {
    outcome
        .warnings
        .iter()
        .find(|w| w.starts_with("No tip"))
        .cloned()
        .unwrap_or_else(|| "The corrected surface comes after the tip.".to_owned())
}

fn regions_on(on: &OnDesk) -> Vec<RegionMark> {
    match on.stage {
        Stage::Scan => on
            .job
            .level
            .regions
            .iter()
            .enumerate()
            .map(|(i, region)| RegionMark {
                index: i,
                name: format!("level {}", i + 1),
                kind: None,
                region: *region,
                chosen: false,
                movable: false,
            })
            .collect(),
        Stage::Dimensions => on
            .job
            .dimensions
            .iter()
            .enumerate()
            .filter_map(|(i, request)| {
                Some(RegionMark {
                    index: i,
                    name: request.name.clone(),
                    kind: Some(request.kind),
                    region: request.region?,
                    chosen: on.chosen.request == Some(i),
                    movable: true,
                })
            })
            .collect(),
        _ => Vec::new(),
    }
}

fn marks_on(on: &OnDesk) -> Vec<[f64; 4]> {
    let (Stage::Dimensions, Some(lines)) = (on.stage, on.outcome.dimensions.as_deref()) else {
        return Vec::new();
    };
    match on.chosen {
        Chosen { line: Some(i), .. } => lines.get(i).map_or(Vec::new(), |l| l.marks.clone()),
        Chosen {
            request: Some(i), ..
        } => lines
            .iter()
            .filter(|l| request_of(&on.job.dimensions, l) == Some(i))
            .flat_map(|l| l.marks.iter().copied())
            .collect(),
        _ => Vec::new(),
    }
}

fn tools_ui(ui: &mut Ui, stage: Stage, desk: &Desk, out: &mut Vec<Command>) {
    ui.horizontal_wrapped(|ui| {
        let tools = [
            (
                Tool::Look,
                "Look",
                "Move the maps; take the line and the regions by their edges (Esc)",
            ),
            (
                Tool::Section,
                "Section line",
                "Draw the section line anew (L)",
            ),
        ];
        for (tool, name, help) in tools {
            if ui
                .selectable_label(desk.tool == tool, name)
                .on_hover_text(help)
                .clicked()
            {
                out.push(Command::Take(tool));
            }
        }
        ui.separator();
        if stage != Stage::Scan {
            let mut marks = desk.reliability;
            let help = "Dots: bounded. Hatch: never touched. Clear: touched (M)";
            if ui
                .checkbox(&mut marks, "Reliability marks")
                .on_hover_text(help)
                .changed()
            {
                out.push(Command::Reliability(marks));
            }
            let mut ghost = desk.ghost;
            let help = "Stands the tip in contact under the pointer; the section follows (G)";
            if ui
                .checkbox(&mut ghost, "Ghost tip")
                .on_hover_text(help)
                .changed()
            {
                out.push(Command::Ghost(ghost));
            }
            ui.separator();
        }
        let p = Palette::of(ui);
        let label = ui.colored_label(p.faint, "Colours over");
        let name = |span| match span {
            ColourSpan::Full => "all heights",
            ColourSpan::Inner => "inner 99 %",
        };
        ComboBox::from_id_salt("span")
            .width(96.0)
            .selected_text(name(desk.span))
            .show_ui(ui, |ui| {
                for span in [ColourSpan::Full, ColourSpan::Inner] {
                    if ui.selectable_label(desk.span == span, name(span)).clicked() {
                        out.push(Command::Span(span));
                    }
                }
            })
            .response
            .labelled_by(label.id);
        if ui
            .button("Fit")
            .on_hover_text("Show the whole maps (F, or double click)")
            .clicked()
        {
            out.push(Command::Look(None));
        }
    });
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;

    #[test]
    fn cuts_are_kept_until_something_changes() {
        let outcome = invented::outcome();
        let map = &outcome.level.as_ref().unwrap().map;
        let line = Line::across(map);
        let mut cuts = Cuts::default();
        cuts.refresh(&outcome, Some(line), Some((10, 10)));
        let first = cuts.section.as_ref().unwrap().0;
        assert!(cuts.ghost.is_some());
        cuts.refresh(&outcome, Some(line), None);
        assert_eq!(cuts.section.as_ref().unwrap().0, first);
        assert!(cuts.ghost.is_none());
        let moved = line.moved(0.0, 4.0, (map.width_nm(), map.length_nm()));
        cuts.refresh(&outcome, Some(moved), None);
        assert_ne!(cuts.section.as_ref().unwrap().0, first);
    }

    #[test]
    fn the_chosen_dimension_shows_its_marks_and_its_span() {
        let (outcome, job) = (invented::outcome(), invented::job());
        let mut on = OnDesk {
            stage: Stage::Dimensions,
            job: &job.file,
            outcome: &outcome,
            chosen: Chosen::default(),
        };
        let line = Line {
            from: (0.0, 60.0),
            to: (192.0, 60.0),
        };
        assert!(marks_on(&on).is_empty() && chosen_spans(&on, line).is_empty());
        on.chosen.request = Some(0);
        assert_eq!(marks_on(&on).len(), 1);
        assert_eq!(chosen_spans(&on, line), [[20.0, 100.0]]);
        assert!(regions_on(&on)[0].chosen);
        on.stage = Stage::Surface;
        assert!(marks_on(&on).is_empty() && regions_on(&on).is_empty());
    }
}
