//! Where on the scan the tip was seen: the contacts that the estimate rests on.

use super::colours::Palette;
use super::images::{MapRef, Pair, PairKey, paint_pair};
use super::later::Later;
use super::legend;
use super::map_marks;
use super::marks::title_ui;
use super::state::ColourSpan;
use super::view::View;
use crate::job::TipResult;
use crate::leveling::Leveled;
use eframe::egui::accesskit::Role;
use eframe::egui::{Color32, Pos2, Rect, Sense, Stroke, StrokeKind, Ui, WidgetInfo, pos2, vec2};
use std::collections::BTreeSet;
use std::path::Path;
use std::sync::Arc;

/// Points of the screen that a mark takes; nearer ones are drawn as one.
const MARK: f32 = 6.0;

/// State of the view.
#[derive(Default)]
pub struct EvidenceView {
    pictures: Later<PairKey, Pair>,
}

/// What is known of the tip's evidence, in words.
pub fn evidence_words(found: &TipResult) -> String {
    if let Some((known, _)) = found.known.as_deref() {
        return format!(
            "The whole characterizer ({}) showed the tip: no single points.",
            known.shape.name()
        );
    }
    match &found.estimate {
        None => "The tip was given: no place of this scan is its evidence.".to_owned(),
        Some(e) if e.evidence.is_empty() => {
            "No feature showed the tip: there is no evidence on this scan.".to_owned()
        }
        Some(e) => format!(
            "{} contact points on {} {} showed the tip.",
            e.evidence.len(),
            e.features,
            if e.features == 1 {
                "feature"
            } else {
                "features"
            }
        ),
    }
}

/// Paints the scan with the evidence into `rect`.
pub fn evidence_ui(
    ui: &mut Ui,
    rect: Rect,
    (found, own_scan): (&TipResult, Option<&Path>),
    level: &Arc<Leveled>,
    view: &mut EvidenceView,
) {
    let p = Palette::of(ui);
    // Places on another scan have no business on this map.
    let words = match own_scan {
        Some(path) => format!(
            "{} The scan that showed it is {}.",
            evidence_words(found),
            path.display()
        ),
        None => evidence_words(found),
    };
    let head = Rect::from_min_size(rect.min, vec2(rect.width(), 22.0));
    title_ui(ui, head, "Where the tip was seen", "marks: contact points");
    let key = PairKey {
        left: MapRef::Level(Arc::clone(level)),
        right: None,
        span: ColourSpan::Full,
        one_scale: true,
    };
    let (ctx, wanted) = (ui.ctx().clone(), key.clone());
    view.pictures
        .want(ui.ctx(), &key, move || paint_pair(&ctx, &wanted));
    let map = &level.map;
    let size = (map.width_nm(), map.length_nm());
    let room = Rect::from_min_max(
        pos2(rect.left(), head.bottom() + 2.0),
        pos2(rect.right() - 84.0, rect.bottom() - 30.0),
    );
    let tall = (room.width() as f64 * size.1 / size.0).min(f64::from(room.height())) as f32;
    let pane = Rect::from_min_size(room.min, vec2(room.width(), tall.max(40.0)));
    let painter = ui.painter().with_clip_rect(pane);
    painter.rect_filled(pane, 0.0, p.well);
    let seen = View::fit(size, pane.size());
    if let Some(pair) = view.pictures.get(&key) {
        let uv = Rect::from_min_max(pos2(0.0, 0.0), pos2(1.0, 1.0));
        let texture = pair.left.texture.id();
        painter.image(texture, seen.map_rect(pane, size), uv, Color32::WHITE);
        let scale = Rect::from_min_size(
            pos2(pane.right() + 10.0, pane.top()),
            vec2(74.0, pane.height()),
        );
        legend::scale_ui(ui, scale, pair.left.range, "z");
    }
    let pitch = map.pitch();
    let here = found.estimate.iter().filter(|_| own_scan.is_none());
    let evidence = here.flat_map(|e| &e.evidence);
    let places = evidence.map(|&(r, c)| {
        let at = ((c as f64 + 0.5) * pitch.x, (r as f64 + 0.5) * pitch.y);
        seen.to_screen(pane, at)
    });
    map_marks::dots(&painter, thinned(places));
    map_marks::scale_bar(&painter, pane, seen.nm_per_point);
    ui.painter()
        .rect_stroke(pane, 0.0, Stroke::new(1.0, p.line), StrokeKind::Outside);
    ui.painter().text(
        pos2(pane.left(), pane.bottom() + 14.0),
        eframe::egui::Align2::LEFT_CENTER,
        &words,
        eframe::egui::FontId::proportional(13.0),
        p.text,
    );
    ui.interact(pane, ui.scope_id().with("evidence"), Sense::hover())
        .widget_info(|| WidgetInfo::labeled(Role::Image, true, format!("Scan map. {words}")));
}

/// One place for each square of [`MARK`] points.
fn thinned(places: impl Iterator<Item = Pos2>) -> Vec<Pos2> {
    let squares: BTreeSet<(i32, i32)> = places
        .map(|at| ((at.y / MARK).floor() as i32, (at.x / MARK).floor() as i32))
        .collect();
    squares
        .into_iter()
        .map(|(y, x)| pos2((x as f32 + 0.5) * MARK, (y as f32 + 0.5) * MARK))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;

    #[test]
    fn near_marks_are_one_and_far_ones_stay() {
        let places = [pos2(1.0, 1.0), pos2(2.0, 2.5), pos2(40.0, 1.0)];
        assert_eq!(
            thinned(places.into_iter()),
            [pos2(3.0, 3.0), pos2(39.0, 3.0)]
        );
        assert!(thinned(std::iter::empty()).is_empty());
    }

    #[test]
    fn a_given_tip_has_no_evidence_and_says_so() {
        let outcome = invented::outcome();
        let words = evidence_words(outcome.tip.as_ref().unwrap());
        assert!(words.contains("was given"));
    }
}
