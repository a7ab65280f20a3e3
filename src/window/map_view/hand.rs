//! What the pointer and the keys do on the maps.

use super::super::command::Command;
use super::super::grip::{self, Grip, Placed};
use super::super::map_marks;
use super::super::state::{Line, Tool};
use super::super::view::View;
use super::{Desk, Drag, Maps, pixel_at, size_of, spoken};
use crate::heightmap::{HeightMap, Region};
use eframe::egui::accesskit::Role;
use eframe::egui::{
    CursorIcon, EventFilter, Key, PointerButton, Pos2, Rect, Response, Sense, Ui, Vec2, WidgetInfo,
};

/// Takes the pointer and the keys on both panes; the map point under the pointer.
#[expect(clippy::too_many_arguments, reason = "both panes share everything")]
pub(super) fn interact(
    ui: &Ui,
    map: &HeightMap,
    left: Rect,
    right: Rect,
    view: &View,
    data: &Maps,
    desk: &mut Desk,
    out: &mut Vec<Command>,
) -> Option<(f64, f64)> {
    let mut hovered = None;
    let mut any = false;
    for (pane, side) in [(left, Some(&data.left)), (right, data.right.as_ref().ok())] {
        let Some(side) = side else {
            continue;
        };
        let id = ui.scope_id().with(("map", side.title));
        let response = ui.interact(pane, id, Sense::click_and_drag());
        response.widget_info(|| WidgetInfo::labeled(Role::Image, true, spoken(side)));
        let at = |p: Pos2| view.to_map(pane, p);
        let pane = Pane {
            map,
            pane,
            view,
            data,
        };
        pane.wheel(ui, &response, out);
        pane.keys(ui, &response, desk, out);
        pane.drag(ui, &response, desk, out);
        pane.click(&response, desk, out);
        pane.cursor(ui, &response, desk);
        if let Some(p) = response.hover_pos().or(response.interact_pointer_pos()) {
            any = true;
            let q = at(p);
            if pixel_at(map, q).is_some() {
                hovered = Some(q);
            }
        }
    }
    if any && hovered.is_none() || !any && !ui.ctx().egui_is_using_pointer() {
        desk.pointer = desk.plot_pointer;
    }
    hovered
}

struct Pane<'a> {
    map: &'a HeightMap,
    pane: Rect,
    view: &'a View,
    data: &'a Maps<'a>,
}

impl Pane<'_> {
    fn size(&self) -> (f64, f64) {
        size_of(self.map)
    }

    fn look(&self, view: View, out: &mut Vec<Command>) {
        let pitch = self.map.pitch();
        let kept = view.kept(self.size(), pitch.x.min(pitch.y), self.pane.size());
        out.push(Command::Look(Some(kept)));
    }

    fn wheel(&self, ui: &Ui, response: &Response, out: &mut Vec<Command>) {
        let Some(p) = response.hover_pos() else {
            return;
        };
        let (scroll, pinch) = ui.input(|i| (i.smooth_scroll_delta().y, i.zoom_delta()));
        let factor = f64::from(pinch) * (f64::from(scroll) / 240.0).exp();
        if (factor - 1.0).abs() > 1e-6 {
            self.look(
                self.view.zoomed(factor, self.view.to_map(self.pane, p)),
                out,
            );
        }
    }

    fn keys(&self, ui: &Ui, response: &Response, desk: &Desk, out: &mut Vec<Command>) {
        if !response.has_focus() {
            return;
        }
        ui.memory_mut(|m| {
            let filter = EventFilter {
                horizontal_arrows: true,
                vertical_arrows: true,
                ..EventFilter::default()
            };
            m.set_focus_lock_filter(response.id, filter);
        });
        let (step, zoom) = ui.input(|i| {
            let n = if i.modifiers.shift { 10.0 } else { 1.0 };
            let axis = |minus, plus| (i.num_presses(plus) as f64 - i.num_presses(minus) as f64) * n;
            let step = (
                axis(Key::ArrowLeft, Key::ArrowRight),
                axis(Key::ArrowUp, Key::ArrowDown),
            );
            let zoom = i.num_presses(Key::Plus) as f64 + i.num_presses(Key::Equals) as f64
                - i.num_presses(Key::Minus) as f64;
            (step, zoom)
        });
        let pitch = self.map.pitch();
        if let (Some(line), true) = (desk.line, step != (0.0, 0.0)) {
            let moved = line.moved(step.0 * pitch.x, step.1 * pitch.y, self.size());
            out.push(Command::Section(moved));
        }
        if zoom != 0.0 {
            self.look(self.view.zoomed(1.25f64.powf(zoom), self.view.middle), out);
        }
    }

    fn placed(&self) -> Vec<Placed> {
        self.data
            .regions
            .iter()
            .filter(|r| r.movable)
            .map(|r| Placed {
                index: r.index,
                rect: map_marks::region_rect(r.region, |q| self.view.to_screen(self.pane, q)),
                chosen: r.chosen,
            })
            .collect()
    }

    fn grip_at(&self, p: Pos2, desk: &Desk) -> Option<Grip> {
        let to = |q| self.view.to_screen(self.pane, q);
        let line = desk.line.map(|l| (to(l.from), to(l.to)));
        grip::grip_at(p, line, &self.placed())
    }

    fn cursor(&self, ui: &Ui, response: &Response, desk: &Desk) {
        let Some(p) = response.hover_pos() else {
            return;
        };
        let space = ui.input(|i| i.key_down(Key::Space));
        let icon = match (desk.drag, desk.tool) {
            (Some(Drag::Pan), _) => CursorIcon::Grabbing,
            _ if space => CursorIcon::Grab,
            (None, Tool::Look) => match self.grip_at(p, desk) {
                Some(grip) => grip.cursor(),
                None => CursorIcon::Default,
            },
            _ => CursorIcon::Crosshair,
        };
        ui.ctx().set_cursor_icon(icon);
    }

    fn begin(&self, ui: &Ui, response: &Response, desk: &Desk) -> Option<Drag> {
        let p = ui.input(|i| i.pointer.press_origin())?;
        let from = self.view.to_map(self.pane, p);
        let space = ui.input(|i| i.key_down(Key::Space));
        if space || !response.dragged_by(PointerButton::Primary) {
            return Some(Drag::Pan);
        }
        if desk.tool != Tool::Look {
            return Some(Drag::Draw { from, to: from });
        }
        match (self.grip_at(p, desk), desk.line) {
            (Some(Grip::Region(index, edges)), _) => {
                let was = self.data.regions.iter().find(|r| r.index == index)?.region;
                Some(Drag::Region {
                    index,
                    edges,
                    was,
                    from,
                })
            }
            (Some(grip), Some(was)) => Some(Drag::Line { grip, was, from }),
            _ => Some(Drag::Pan),
        }
    }

    fn drag(&self, ui: &Ui, response: &Response, desk: &mut Desk, out: &mut Vec<Command>) {
        if response.drag_started() {
            response.request_focus();
            desk.drag = self.begin(ui, response, desk);
            if let Some(Drag::Region { index, .. }) = desk.drag {
                out.push(Command::Select(Some(index)));
            }
        }
        if !response.dragged() && !response.drag_stopped() {
            return;
        }
        let Some(p) = response.interact_pointer_pos() else {
            desk.drag = None;
            return;
        };
        let at = self.view.to_map(self.pane, p);
        let by = |from: (f64, f64)| (at.0 - from.0, at.1 - from.1);
        match &mut desk.drag {
            Some(Drag::Pan) if response.drag_delta() != Vec2::ZERO => {
                self.look(self.view.panned(response.drag_delta()), out);
            }
            Some(Drag::Line { grip, was, from }) => {
                let line = grip::drag_line(*was, *grip, by(*from), self.size());
                out.push(Command::Section(line));
            }
            Some(Drag::Region {
                index,
                edges,
                was,
                from,
            }) => {
                let pitch = self.map.pitch();
                let region = grip::drag_region(*was, *edges, by(*from), pitch, self.size());
                out.push(Command::MoveRegion(*index, region));
            }
            Some(Drag::Draw { to, .. }) => *to = at,
            _ => {}
        }
        if response.drag_stopped() {
            if let Some(Drag::Draw { from, to }) = desk.drag {
                self.drawn(from, to, desk.tool, out);
            }
            out.push(Command::EndGesture);
            desk.drag = None;
        }
    }

    /// What was drawn with the tool in hand, if it is larger than a slip of the hand.
    fn drawn(&self, from: (f64, f64), to: (f64, f64), tool: Tool, out: &mut Vec<Command>) {
        let size = self.size();
        let on = |p: (f64, f64)| (p.0.clamp(0.0, size.0), p.1.clamp(0.0, size.1));
        let (from, to) = (on(from), on(to));
        let points = ((to.0 - from.0).hypot(to.1 - from.1)) / self.view.nm_per_point;
        if points < 4.0 {
            return;
        }
        if tool == Tool::Section {
            out.push(Command::Section(Line { from, to }));
            out.push(Command::Take(Tool::Look));
        } else {
            let region = grip::on_pixels(Region::between(from, to), self.map.pitch(), size);
            out.push(Command::Placed(tool, region));
        }
    }

    fn click(&self, response: &Response, desk: &Desk, out: &mut Vec<Command>) {
        if response.double_clicked() {
            out.push(Command::Look(None));
            return;
        }
        if !response.clicked() {
            return;
        }
        response.request_focus();
        let Some(p) = response.interact_pointer_pos() else {
            return;
        };
        if desk.ghost
            && let Some(line) = desk.line
        {
            let at = self.view.to_map(self.pane, p);
            out.push(Command::Section(line.through(at, self.size())));
        }
        out.push(Command::Select(grip::region_at(p, &self.placed())));
    }
}
