//! The colour scale and the legend of the reliability marks.

use super::colours::{Palette, Pattern, ramp_at};
use super::format;
use super::images::swatch;
use crate::job::Reliability;
use eframe::egui::accesskit::Role;
use eframe::egui::{
    Align2, Color32, FontId, Mesh, Rect, Sense, Stroke, StrokeKind, TextureHandle, TextureOptions,
    Ui, WidgetInfo, pos2, vec2,
};

/// Paints the ramp from `range.0` (bottom) to `range.1` (top) with round ticks.
pub fn scale_ui(ui: &Ui, rect: Rect, range: (f32, f32), what: &str) {
    let p = Palette::of(ui);
    let bar = Rect::from_min_max(
        pos2(rect.left() + 2.0, rect.top() + 20.0),
        pos2(rect.left() + 16.0, rect.bottom() - 6.0),
    );
    if bar.height() < 20.0 {
        return;
    }
    let painter = ui.painter();
    painter.text(
        pos2(rect.left(), rect.top() + 8.0),
        Align2::LEFT_CENTER,
        what,
        FontId::proportional(12.0),
        p.faint,
    );
    let mut mesh = Mesh::default();
    const CELLS: u32 = 64;
    for i in 0..=CELLS {
        let t = i as f32 / CELLS as f32;
        let y = bar.bottom() - t * bar.height();
        let colour = ramp_at(f64::from(t));
        mesh.colored_vertex(pos2(bar.left(), y), colour);
        mesh.colored_vertex(pos2(bar.right(), y), colour);
        if i > 0 {
            let k = 2 * i;
            mesh.add_triangle(k - 2, k - 1, k);
            mesh.add_triangle(k - 1, k, k + 1);
        }
    }
    painter.add(mesh);
    painter.rect_stroke(bar, 0.0, Stroke::new(1.0, p.line), StrokeKind::Outside);
    let (low, high) = (f64::from(range.0), f64::from(range.1));
    for tick in ticks(low, high, (bar.height() / 36.0) as usize) {
        let y = bar.bottom() - ((tick - low) / (high - low)) as f32 * bar.height();
        painter.line_segment(
            [pos2(bar.right(), y), pos2(bar.right() + 4.0, y)],
            Stroke::new(1.0, p.faint),
        );
        painter.text(
            pos2(bar.right() + 7.0, y),
            Align2::LEFT_CENTER,
            format::tick(tick, high - low),
            FontId::monospace(11.5),
            p.text,
        );
    }
    let response = ui.interact(rect, ui.scope_id().with(("scale", what)), Sense::hover());
    response.widget_info(|| {
        let text = format!(
            "Colour scale from {} to {}",
            format::height(range.0),
            format::height(range.1)
        );
        WidgetInfo::labeled(Role::Label, true, text)
    });
}

/// Round values inside a range, at most about `most`.
pub fn ticks(low: f64, high: f64, most: usize) -> Vec<f64> {
    let span = high - low;
    if !(span > 0.0 && span.is_finite()) {
        return Vec::new();
    }
    let mut step = format::round_step(span);
    for finer in [0.5, 0.2, 0.1, 0.05] {
        let candidate = format::round_step(span * finer);
        if span / candidate <= most.max(2) as f64 {
            step = step.min(candidate);
        }
    }
    let first = (low / step).ceil() as i64;
    let last = (high / step).floor() as i64;
    (first..=last).map(|i| i as f64 * step).collect()
}

/// Samples of the patterns as textures.
#[derive(Default)]
pub struct Swatches {
    textures: Vec<TextureHandle>,
    scale: f32,
}

const SWATCH: (f32, f32) = (26.0, 14.0);

impl Swatches {
    fn get(&mut self, ui: &Ui) -> &[TextureHandle] {
        let scale = ui.ctx().pixels_per_point();
        if self.textures.is_empty() || self.scale != scale {
            let (w, h) = ((SWATCH.0 * scale) as usize, (SWATCH.1 * scale) as usize);
            self.textures = [None, Some(Pattern::Bounded), Some(Pattern::Never)]
                .into_iter()
                .map(|p| {
                    ui.ctx()
                        .load_texture("swatch", swatch(p, w, h), TextureOptions::NEAREST)
                })
                .collect();
            self.scale = scale;
        }
        &self.textures
    }
}

/// Says what the marks mean and how much of the surface bears each.
pub fn reliability_ui(ui: &mut Ui, swatches: &mut Swatches, r: &Reliability) {
    let textures: Vec<_> = swatches.get(ui).iter().map(TextureHandle::id).collect();
    let p = Palette::of(ui);
    let lines = [
        (
            "touched",
            r.touched,
            "The tip alone touched here for certain: the height is the surface's.",
        ),
        (
            "bounded",
            r.bounded,
            "A contact only together with others: the surface may lie lower.",
        ),
        (
            "never",
            r.never,
            "Nothing in the scan says that the tip was here: the surface lies at or below.",
        ),
    ];
    for (texture, (name, fraction, meaning)) in textures.into_iter().zip(lines) {
        ui.horizontal(|ui| {
            let (rect, _) = ui.allocate_exact_size(vec2(SWATCH.0, SWATCH.1), Sense::hover());
            let uv = Rect::from_min_max(pos2(0.0, 0.0), pos2(1.0, 1.0));
            ui.painter().image(texture, rect, uv, Color32::WHITE);
            ui.painter()
                .rect_stroke(rect, 0.0, Stroke::new(1.0, p.line), StrokeKind::Outside);
            ui.label(format!("{name} {}", format::percent(fraction)))
                .on_hover_text(meaning);
        });
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_are_round_and_inside() {
        let t = ticks(-3.2, 61.7, 8);
        assert!(t.len() >= 4 && t.len() <= 9, "{t:?}");
        assert!(
            t.iter()
                .all(|v| (-3.2..=61.7).contains(v) && v % 10.0 == 0.0)
        );
        assert!(ticks(1.0, 1.0, 5).is_empty());
        assert!(ticks(f64::NAN, 1.0, 5).is_empty());
    }
}
