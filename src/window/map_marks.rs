//! What is drawn over a map: regions, lines, contact points, the scale bar.

use super::colours::Palette;
use super::format;
use crate::dimensions::Kind;
use crate::heightmap::{Pitch, Region};
use crate::job::GhostTip;
use eframe::egui::{
    Align2, Color32, FontId, Painter, Pos2, Rect, Stroke, StrokeKind, Ui, pos2, vec2,
};

/// Dark rim under every mark, so that it shows on any colour of the ramp.
const RIM: Color32 = Color32::from_rgba_premultiplied(6, 8, 10, 190);
const BRIGHT: Color32 = Color32::from_rgb(0xff, 0xff, 0xff);
const PLATE: Color32 = Color32::from_rgba_premultiplied(10, 12, 15, 205);
const GHOST: Color32 = Color32::from_rgb(0xe6, 0xd8, 0xff);

/// A dimension's region.
#[derive(Debug, Clone, PartialEq)]
pub struct RegionMark {
    /// Index of the dimension in the job.
    pub index: usize,
    /// Its name.
    pub name: String,
    /// Its kind; `None` for a region that the levelling uses.
    pub kind: Option<Kind>,
    /// Where.
    pub region: Region,
    /// Whether it is the chosen one.
    pub chosen: bool,
    /// Whether it can be moved here.
    pub movable: bool,
}

fn colour_of(kind: Option<Kind>) -> Color32 {
    match kind {
        Some(Kind::StepHeight) => Color32::from_rgb(0xff, 0xd0, 0x80),
        Some(Kind::LineWidth) => Color32::from_rgb(0x9f, 0xe8, 0xff),
        Some(_) => Color32::from_rgb(0xd7, 0xf2, 0xa8),
        None => Color32::from_rgb(0xd0, 0xd4, 0xd8),
    }
}

/// A region on the screen.
pub fn region_rect(region: Region, to: impl Fn((f64, f64)) -> Pos2) -> Rect {
    Rect::from_min_max(
        to((region.left, region.top)),
        to((region.left + region.width, region.top + region.height)),
    )
}

/// Regions with their names; the chosen one last, filled and with grips.
pub fn regions(painter: &Painter, marks: &[RegionMark], to: impl Fn((f64, f64)) -> Pos2 + Copy) {
    // Small ones over large ones, the chosen one over all.
    let mut order: Vec<&RegionMark> = marks.iter().collect();
    let area = |m: &RegionMark| m.region.width * m.region.height;
    order.sort_by(|a, b| (a.chosen.cmp(&b.chosen)).then(area(b).total_cmp(&area(a))));
    for mark in &order {
        // Drawn just inside, so that edges on the map's border are seen whole.
        let rect = region_rect(mark.region, to).shrink(1.0);
        let colour = colour_of(mark.kind);
        let width = if mark.chosen { 2.5 } else { 1.5 };
        if mark.chosen {
            painter.rect_filled(rect, 0.0, colour.gamma_multiply(0.14));
        }
        painter.rect_stroke(rect, 0.0, Stroke::new(width + 2.0, RIM), StrokeKind::Middle);
        if mark.kind.is_none() {
            let corners = [
                rect.left_top(),
                rect.right_top(),
                rect.right_bottom(),
                rect.left_bottom(),
                rect.left_top(),
            ];
            let dashes =
                eframe::egui::Shape::dashed_line(&corners, Stroke::new(width, colour), 6.0, 4.0);
            painter.extend(dashes);
        } else {
            painter.rect_stroke(rect, 0.0, Stroke::new(width, colour), StrokeKind::Middle);
        }
        if mark.chosen && mark.movable {
            for grip in [
                rect.left_center(),
                rect.right_center(),
                rect.center_top(),
                rect.center_bottom(),
            ] {
                let square = Rect::from_center_size(grip, vec2(7.0, 7.0));
                painter.rect_filled(square.expand(1.5), 1.0, RIM);
                painter.rect_filled(square, 1.0, colour);
            }
        }
    }
    let mut plates = Vec::new();
    let clip = painter.clip_rect();
    for mark in order {
        let rect = region_rect(mark.region, to);
        let corner = rect.left_top().max(clip.left_top()) + vec2(5.0, 5.0);
        let room = rect.right().min(clip.right()) - corner.x;
        let colour = colour_of(mark.kind);
        // A name wider than its region would cover the neighbour's.
        if mark.chosen || room > 7.0 * mark.name.len() as f32 {
            plate(painter, corner, &mark.name, colour, &mut plates);
        } else if room > 14.0 {
            let number = (mark.index + 1).to_string();
            plate(painter, corner, &number, colour, &mut plates);
        }
    }
}

/// Text on a dark plate, below the plates that are already there.
fn plate(painter: &Painter, at: Pos2, text: &str, colour: Color32, others: &mut Vec<Rect>) {
    let galley = painter.layout_no_wrap(text.to_owned(), FontId::proportional(12.0), colour);
    let mut rect = Rect::from_min_size(at, galley.size()).expand2(vec2(4.0, 2.0));
    for _ in 0..8 {
        if !others.iter().any(|other| other.intersects(rect)) {
            break;
        }
        rect = rect.translate(vec2(0.0, rect.height() + 2.0));
    }
    others.push(rect);
    painter.rect_filled(rect, 3.0, PLATE);
    painter.galley(rect.min + vec2(4.0, 2.0), galley, colour);
}

/// Segments of results.
pub fn segments(painter: &Painter, marks: &[[f64; 4]], to: impl Fn((f64, f64)) -> Pos2) {
    for [x1, y1, x2, y2] in marks {
        let ends = [to((*x1, *y1)), to((*x2, *y2))];
        painter.line_segment(ends, Stroke::new(3.5, RIM));
        painter.line_segment(ends, Stroke::new(1.5, BRIGHT));
    }
}

/// The section line: a ring at its start, an arrow head at its end. Dashed while it follows the
/// ghost tip.
pub fn line(painter: &Painter, from: Pos2, to: Pos2, follows: bool) {
    painter.line_segment([from, to], Stroke::new(4.0, RIM));
    if follows {
        let dashes =
            eframe::egui::Shape::dashed_line(&[from, to], Stroke::new(1.8, BRIGHT), 7.0, 5.0);
        painter.extend(dashes);
    } else {
        painter.line_segment([from, to], Stroke::new(1.8, BRIGHT));
    }
    // Drawn a little inside: ends on the map's border stay whole.
    let along = (to - from).normalized();
    let (from, to) = (from + 6.0 * along, to - 2.0 * along);
    painter.circle(from, 4.5, RIM, Stroke::new(1.8, BRIGHT));
    let side = vec2(-along.y, along.x);
    let head = vec![
        to,
        to - 11.0 * along + 5.5 * side,
        to - 11.0 * along - 5.5 * side,
    ];
    painter.add(eframe::egui::Shape::convex_polygon(
        head,
        BRIGHT,
        Stroke::new(1.0, RIM),
    ));
}

/// What is being drawn.
pub fn drawn(painter: &Painter, from: Pos2, to: Pos2, as_line: bool) {
    if as_line {
        line(painter, from, to, false);
        return;
    }
    let rect = Rect::from_two_pos(from, to);
    painter.rect_filled(rect, 0.0, BRIGHT.gamma_multiply(0.15));
    painter.rect_stroke(rect, 0.0, Stroke::new(3.5, RIM), StrokeKind::Middle);
    painter.rect_stroke(rect, 0.0, Stroke::new(1.5, BRIGHT), StrokeKind::Middle);
}

/// The pointer's place, shown on both maps.
pub fn cross(painter: &Painter, at: Pos2) {
    for (width, colour) in [(3.0, RIM), (1.0, BRIGHT)] {
        let stroke = Stroke::new(width, colour);
        for d in [
            vec2(1.0, 0.0),
            vec2(-1.0, 0.0),
            vec2(0.0, 1.0),
            vec2(0.0, -1.0),
        ] {
            painter.line_segment([at + 4.0 * d, at + 10.0 * d], stroke);
        }
    }
}

/// The ghost tip: a ring at its apex, a dot at every contact on the corrected map.
pub fn ghost(
    painter: &Painter,
    ghost: &GhostTip,
    pitch: Pitch,
    on_surface: bool,
    to: impl Fn((f64, f64)) -> Pos2,
) {
    let centre = |(row, column): (usize, usize)| {
        to((
            (column as f64 + 0.5) * pitch.x,
            (row as f64 + 0.5) * pitch.y,
        ))
    };
    let apex = centre(ghost.apex);
    painter.circle_stroke(apex, 7.0, Stroke::new(4.0, RIM));
    painter.circle_stroke(apex, 7.0, Stroke::new(2.0, GHOST));
    if on_surface {
        for contact in ghost.contacts.iter().take(2000) {
            let at = centre(*contact);
            painter.circle_filled(at, 4.0, RIM);
            painter.circle_filled(at, 2.6, GHOST);
        }
    }
}

/// Contact points.
pub fn dots(painter: &Painter, places: impl IntoIterator<Item = Pos2>) {
    for at in places {
        painter.circle_filled(at, 2.8, RIM);
        painter.circle_filled(at, 1.7, GHOST);
    }
}

/// A row that jumps: a wedge at the map's left edge.
pub fn row_jump(painter: &Painter, at: Pos2, p: &Palette) {
    let wedge = [at, at + vec2(-8.0, -4.0), at + vec2(-8.0, 4.0)];
    painter.add(eframe::egui::Shape::convex_polygon(
        wedge.iter().map(|q| *q + vec2(9.0, 0.0)).collect(),
        p.warn,
        Stroke::new(1.0, RIM),
    ));
}

/// A round length, drawn to scale.
pub fn scale_bar(painter: &Painter, pane: Rect, nm_per_point: f64) {
    let length = format::round_step(f64::from(pane.width()) * 0.28 * nm_per_point);
    let points = (length / nm_per_point) as f32;
    let text = format::round_length(length);
    let plate_rect = Rect::from_min_size(
        pos2(pane.left() + 8.0, pane.bottom() - 34.0),
        vec2(points + 16.0, 26.0),
    );
    painter.rect_filled(plate_rect, 4.0, PLATE);
    let y = plate_rect.bottom() - 6.0;
    let (a, b) = (plate_rect.left() + 8.0, plate_rect.right() - 8.0);
    painter.line_segment([pos2(a, y), pos2(b, y)], Stroke::new(2.0, BRIGHT));
    for x in [a, b] {
        painter.line_segment([pos2(x, y - 4.0), pos2(x, y)], Stroke::new(2.0, BRIGHT));
    }
    painter.text(
        pos2(plate_rect.center().x, plate_rect.top() + 9.0),
        Align2::CENTER_CENTER,
        text,
        FontId::proportional(11.5),
        BRIGHT,
    );
}

/// A sentence in the middle of an empty pane.
pub fn note(ui: &Ui, pane: Rect, text: &str, colour: Color32) {
    let width = (pane.width() - 40.0).clamp(80.0, 380.0);
    let galley = ui
        .painter()
        .layout(text.to_owned(), FontId::proportional(13.5), colour, width);
    let at = Align2::CENTER_CENTER.anchor_size(pane.center(), galley.size());
    ui.painter().galley(at.min, galley, colour);
}
