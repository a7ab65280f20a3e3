//! The maps of the desk: two panes with one view, and what is drawn and dragged on them.

mod hand;

use super::colours::Palette;
use super::command::Command;
use super::format;
use super::grip::{self, Grip};
use super::images::{MapRef, Pair, PairKey, paint_pair, pattern_image, pattern_of};
use super::later::Later;
use super::legend;
use super::map_marks::{self, RegionMark};
use super::state::{ColourSpan, Line, Tool};
use super::view::{View, two_panes};
use crate::heightmap::{HeightMap, Region};
use crate::job::{GhostTip, SurfaceResult};
use crate::leveling::RowJump;
use eframe::egui::{Color32, Rect, Stroke, StrokeKind, TextureHandle, TextureOptions, Ui, pos2};
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

    let hovered = hand::interact(ui, map, left_body, right_body, &view, data, desk, out);
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
