//! The maps of the desk: two panes with one view, and what is drawn and dragged on them.

use super::colours::Palette;
use super::command::Command;
use super::format;
use super::grip::{self, Grip, Placed};
use super::images::{MapRef, Pair, PairKey, paint_pair, pattern_image, pattern_of};
use super::later::Later;
use super::legend;
use super::map_marks::{self, RegionMark};
use super::state::{ColourSpan, Line, Tool};
use super::view::{View, two_panes};
use crate::heightmap::{HeightMap, Region};
use crate::job::{GhostTip, SurfaceResult};
use crate::leveling::RowJump;
use eframe::egui::accesskit::Role;
use eframe::egui::{
    Color32, CursorIcon, EventFilter, Key, PointerButton, Pos2, Rect, Response, Sense, Stroke,
    StrokeKind, TextureHandle, TextureOptions, Ui, Vec2, WidgetInfo, pos2,
};
use std::sync::Arc;

/// Height of the line of text above each pane.
const HEAD: f32 = 24.0;
/// Width of the colour scale.
const SCALE: f32 = 74.0;

/// A map with its name.
pub struct Side {
    /// Name.
    pub title: &'static str,
    /// The map.
    pub map: MapRef,
}

/// What the panes show.
pub struct Maps<'a> {
    /// Left pane.
    pub left: Side,
    /// Right pane; `Err` = why there is nothing to show.
    pub right: Result<Side, String>,
    /// Whether both share one colour scale.
    pub one_scale: bool,
    /// Reliability marks for the right pane.
    pub surface: Option<&'a Arc<SurfaceResult>>,
    /// Regions of dimensions.
    pub regions: Vec<RegionMark>,
    /// Segments of the chosen results, nm.
    pub marks: Vec<[f64; 4]>,
    /// The section line as it is drawn now.
    pub line: Option<Line>,
    /// The ghost tip.
    pub ghost: Option<&'a GhostTip>,
    /// Rows that jump.
    pub row_jumps: &'a [RowJump],
}

/// A drag under way.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Drag {
    Pan,
    Line {
        grip: Grip,
        was: Line,
        from: (f64, f64),
    },
    Region {
        index: usize,
        edges: grip::Edges,
        was: Region,
        from: (f64, f64),
    },
    Draw {
        from: (f64, f64),
        to: (f64, f64),
    },
}

/// The patterns over one pane, made anew when the view changes.
#[derive(Default)]
struct Overlay {
    key: Option<(usize, View, Rect, f32)>,
    texture: Option<TextureHandle>,
}

/// State of the panes.
pub struct Desk {
    /// View; `None` = fit.
    pub view: Option<View>,
    /// Section line.
    pub line: Option<Line>,
    /// Tool in hand.
    pub tool: Tool,
    /// Which heights the colours span.
    pub span: ColourSpan,
    /// Whether reliability marks are shown.
    pub reliability: bool,
    /// Whether the ghost tip is shown.
    pub ghost: bool,
    /// Map point under the pointer, nm.
    pub pointer: Option<(f64, f64)>,
    /// Map point under the pointer in the section, nm.
    pub plot_pointer: Option<(f64, f64)>,
    drag: Option<Drag>,
    pictures: Later<PairKey, Pair>,
    overlays: [Overlay; 2],
    /// Samples of the patterns.
    pub swatches: legend::Swatches,
}

impl Default for Desk {
    fn default() -> Self {
        Self {
            view: None,
            line: None,
            tool: Tool::Look,
            span: ColourSpan::Full,
            reliability: true,
            ghost: false,
            pointer: None,
            plot_pointer: None,
            drag: None,
            pictures: Later::default(),
            overlays: Default::default(),
            swatches: legend::Swatches::default(),
        }
    }
}

fn size_of(map: &HeightMap) -> (f64, f64) {
    (map.width_nm(), map.length_nm())
}

/// Paints both maps into `rect` and takes what is done on them.
pub fn maps_ui(ui: &mut Ui, rect: Rect, data: &Maps, desk: &mut Desk, out: &mut Vec<Command>) {
    let Some(map) = data.left.map.map() else {
        return;
    };
    let key = PairKey {
        left: data.left.map.clone(),
        right: data.right.as_ref().ok().map(|s| s.map.clone()),
        span: desk.span,
        one_scale: data.one_scale,
    };
    let (ctx, wanted) = (ui.ctx().clone(), key.clone());
    desk.pictures
        .want(ui.ctx(), &key, move || paint_pair(&ctx, &wanted));
    let pair = desk.pictures.last().cloned();
    // Pictures of another map (the file was changed) are not shown on this one's grid.
    let fits = |picture_of: Option<&MapRef>, now: &MapRef| {
        picture_of.is_some_and(|p| p.heights().dim() == now.heights().dim())
    };
    let shown = desk.pictures.last_key().cloned();
    let left_fits = fits(shown.as_ref().map(|k| &k.left), &data.left.map);

    let scales = if data.one_scale { 1.0 } else { 2.0 };
    let (left, right, strip) = two_panes(rect, 10.0, SCALE * scales);
    let body = |r: Rect| Rect::from_min_max(pos2(r.left(), r.top() + HEAD), r.right_bottom());
    let (left_body, right_body, strip) = (body(left), body(right), body(strip));
    let size = size_of(map);
    let view = desk
        .view
        .unwrap_or_else(|| View::fit(size, left_body.size()));

    let hovered = interact(ui, map, left_body, right_body, &view, data, desk, out);
    if let Some(p) = hovered {
        desk.pointer = Some(p);
    }
    let panes = Panes {
        view,
        size,
        data,
        map,
    };
    let left_picture = pair.as_ref().filter(|_| left_fits).map(|p| &p.left);
    panes.paint(ui, left, left_body, Some(&data.left), left_picture, desk, 0);
    let right_picture = pair
        .as_ref()
        .filter(|_| left_fits)
        .and_then(|p| p.right.as_ref());
    panes.paint(
        ui,
        right,
        right_body,
        data.right.as_ref().ok(),
        right_picture,
        desk,
        1,
    );
    if let Err(why) = &data.right {
        let p = Palette::of(ui);
        map_marks::note(ui, right_body, why, p.faint);
    }
    if let Some(picture) = left_picture {
        let half = if data.one_scale {
            strip
        } else {
            strip.with_max_x(strip.center().x)
        };
        let what = if data.one_scale { "z" } else { "opened" };
        legend::scale_ui(ui, half, picture.range, what);
        if let (false, Some(right)) = (data.one_scale, right_picture) {
            legend::scale_ui(
                ui,
                strip.with_min_x(strip.center().x),
                right.range,
                "levelled",
            );
        }
    }
}

struct Panes<'a> {
    view: View,
    size: (f64, f64),
    data: &'a Maps<'a>,
    map: &'a HeightMap,
}

impl Panes<'_> {
    #[expect(
        clippy::too_many_arguments,
        reason = "one pane of two, painted the same"
    )]
    fn paint(
        &self,
        ui: &Ui,
        whole: Rect,
        pane: Rect,
        side: Option<&Side>,
        picture: Option<&super::images::Picture>,
        desk: &mut Desk,
        which: usize,
    ) {
        let p = Palette::of(ui);
        let painter = ui.painter().with_clip_rect(pane);
        painter.rect_filled(pane, 0.0, p.well);
        self.head(ui, whole, side, desk.pointer);
        if let Some(picture) = picture {
            let uv = Rect::from_min_max(pos2(0.0, 0.0), pos2(1.0, 1.0));
            let rect = self.view.map_rect(pane, self.size);
            painter.image(picture.texture.id(), rect, uv, Color32::WHITE);
            self.patterns(ui, pane, side, picture.voids, desk, which);
        }
        if side.is_some() {
            let to = |q| self.view.to_screen(pane, q);
            for jump in self.data.row_jumps.iter().take(200) {
                let y = to((0.0, jump.row as f64 * self.map.pitch().y)).y;
                let x = to((0.0, 0.0)).x.max(pane.left());
                map_marks::row_jump(&painter, pos2(x, y), p);
            }
            map_marks::regions(&painter, &self.data.regions, to);
            map_marks::segments(&painter, &self.data.marks, to);
            if let Some(line) = self.data.line {
                map_marks::line(&painter, to(line.from), to(line.to), desk.ghost);
            }
            if let Some(ghost) = self.data.ghost {
                map_marks::ghost(&painter, ghost, self.map.pitch(), which == 1, to);
            }
            if let Some(Drag::Draw { from, to: end }) = desk.drag {
                map_marks::drawn(&painter, to(from), to(end), desk.tool == Tool::Section);
            }
            if let Some(q) = desk.pointer {
                map_marks::cross(&painter, to(q));
            }
            map_marks::scale_bar(&painter, pane, self.view.nm_per_point);
        }
        ui.painter()
            .rect_stroke(pane, 0.0, Stroke::new(1.0, p.line), StrokeKind::Outside);
    }

    fn head(&self, ui: &Ui, whole: Rect, side: Option<&Side>, pointer: Option<(f64, f64)>) {
        let p = Palette::of(ui);
        let y = whole.top() + HEAD / 2.0 - 1.0;
        let painter = ui.painter();
        let title = side.map_or("Corrected", |s| s.title);
        painter.text(
            pos2(whole.left(), y),
            eframe::egui::Align2::LEFT_CENTER,
            title,
            eframe::egui::FontId::proportional(14.0),
            p.text,
        );
        if let (Some((x, y_nm)), Some(map)) = (pointer, side.and_then(|s| s.map.map()))
            && let Some((row, column)) = pixel_at(map, (x, y_nm))
        {
            painter.text(
                pos2(whole.right(), y),
                eframe::egui::Align2::RIGHT_CENTER,
                format!("z = {}", format::height(map.heights()[[row, column]])),
                eframe::egui::FontId::monospace(12.5),
                p.text,
            );
        }
    }

    /// Reliability over the corrected map, crosses over voids on either.
    fn patterns(
        &self,
        ui: &Ui,
        pane: Rect,
        side: Option<&Side>,
        voids: bool,
        desk: &mut Desk,
        which: usize,
    ) {
        let certainty = self
            .data
            .surface
            .filter(|_| which == 1 && desk.reliability)
            .map(|s| &s.certainty);
        let Some(heights) = side.and_then(|s| s.map.map()).map(HeightMap::heights) else {
            return;
        };
        if certainty.is_none() && !voids {
            return;
        }
        let scale = ui.ctx().pixels_per_point();
        // The address tells one map from another: it is held as long as it is shown.
        let address = heights.as_ptr() as usize ^ usize::from(certainty.is_some());
        let key = (address, self.view, pane, scale);
        let overlay = &mut desk.overlays[which];
        if overlay.key != Some(key) {
            let image = pattern_image(pane, scale, &self.view, heights.dim(), self.size, |r, c| {
                if heights[[r, c]].is_nan() {
                    return Some(super::colours::Pattern::Void);
                }
                certainty.and_then(|map| pattern_of(*map.get((r, c))?))
            });
            match &mut overlay.texture {
                Some(texture) => texture.set(image, TextureOptions::NEAREST),
                None => {
                    overlay.texture = Some(ui.ctx().load_texture(
                        "patterns",
                        image,
                        TextureOptions::NEAREST,
                    ));
                }
            }
            overlay.key = Some(key);
        }
        if let Some(texture) = &overlay.texture {
            let uv = Rect::from_min_max(pos2(0.0, 0.0), pos2(1.0, 1.0));
            ui.painter()
                .with_clip_rect(pane)
                .image(texture.id(), pane, uv, Color32::WHITE);
        }
    }
}

/// The pixel (row, column) at a map point.
pub fn pixel_at(map: &HeightMap, (x, y): (f64, f64)) -> Option<(usize, usize)> {
    let pitch = map.pitch();
    let (c, r) = ((x / pitch.x).floor(), (y / pitch.y).floor());
    (c >= 0.0 && r >= 0.0 && (c as usize) < map.columns() && (r as usize) < map.rows())
        .then_some((r as usize, c as usize))
}

/// What a screen reader says of a map.
fn spoken(side: &Side) -> String {
    let Some(map) = side.map.map() else {
        return side.title.to_owned();
    };
    let range = map.range().map_or("all void".to_owned(), |(low, high)| {
        format!(
            "heights from {} to {}",
            format::height(low),
            format::height(high)
        )
    });
    format!(
        "{} map, {} by {} pixels, {} by {}, {range}",
        side.title,
        map.columns(),
        map.rows(),
        crate::units::format_length(map.width_nm()),
        crate::units::format_length(map.length_nm()),
    )
}

/// Takes the pointer and the keys on both panes; the map point under the pointer.
#[expect(clippy::too_many_arguments, reason = "both panes share everything")]
fn interact(
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
