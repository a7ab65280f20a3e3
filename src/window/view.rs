//! How the maps are seen: position and scale, the same on both sides.

use eframe::egui::{Pos2, Rect, Vec2, pos2, vec2};

/// A view on a map: which point (nm) is in the middle of a pane, and the nanometres per point of
/// the screen.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct View {
    /// Middle of the pane on the map, nm.
    pub middle: (f64, f64),
    /// Nanometres per screen point.
    pub nm_per_point: f64,
}

impl View {
    /// The whole map (nm) in a pane, with a little air.
    pub fn fit(size: (f64, f64), pane: Vec2) -> Self {
        let air = 0.98;
        let x = size.0 / f64::from(pane.x.max(1.0));
        let y = size.1 / f64::from(pane.y.max(1.0));
        Self {
            middle: (size.0 / 2.0, size.1 / 2.0),
            nm_per_point: (x.max(y) / air).max(f64::MIN_POSITIVE),
        }
    }

    /// Screen position of a map point.
    pub fn to_screen(self, pane: Rect, (x, y): (f64, f64)) -> Pos2 {
        let middle = pane.center();
        pos2(
            middle.x + ((x - self.middle.0) / self.nm_per_point) as f32,
            middle.y + ((y - self.middle.1) / self.nm_per_point) as f32,
        )
    }

    /// Map point at a screen position.
    pub fn to_map(self, pane: Rect, position: Pos2) -> (f64, f64) {
        let d = position - pane.center();
        (
            self.middle.0 + f64::from(d.x) * self.nm_per_point,
            self.middle.1 + f64::from(d.y) * self.nm_per_point,
        )
    }

    /// Zoomed by `factor` (above 1 = closer) so that `anchor` stays where it is.
    #[must_use]
    pub fn zoomed(&self, factor: f64, anchor: (f64, f64)) -> Self {
        Self {
            middle: (
                anchor.0 + (self.middle.0 - anchor.0) / factor,
                anchor.1 + (self.middle.1 - anchor.1) / factor,
            ),
            nm_per_point: self.nm_per_point / factor,
        }
    }

    /// Moved by a drag on the screen.
    #[must_use]
    pub fn panned(&self, drag: Vec2) -> Self {
        Self {
            middle: (
                self.middle.0 - f64::from(drag.x) * self.nm_per_point,
                self.middle.1 - f64::from(drag.y) * self.nm_per_point,
            ),
            ..*self
        }
    }

    /// Kept within reason: not closer than 4 pixels a pane, not farther than a quarter of the
    /// fit, and the map in sight.
    #[must_use]
    pub fn kept(&self, size: (f64, f64), pitch: f64, pane: Vec2) -> Self {
        let fit = Self::fit(size, pane).nm_per_point;
        let closest = (4.0 * pitch / f64::from(pane.x.max(1.0))).min(fit);
        Self {
            middle: (
                self.middle.0.clamp(0.0, size.0),
                self.middle.1.clamp(0.0, size.1),
            ),
            nm_per_point: self.nm_per_point.clamp(closest, fit * 4.0),
        }
    }

    /// Where the whole map lies on the screen.
    pub fn map_rect(&self, pane: Rect, size: (f64, f64)) -> Rect {
        Rect::from_min_max(self.to_screen(pane, (0.0, 0.0)), self.to_screen(pane, size))
    }
}

/// Splits a rectangle into two panes of the same size and a strip at their right.
pub fn two_panes(rect: Rect, gap: f32, strip: f32) -> (Rect, Rect, Rect) {
    let width = ((rect.width() - strip - 2.0 * gap) / 2.0).floor().max(1.0);
    let size = vec2(width, rect.height());
    let left = Rect::from_min_size(rect.min, size);
    let right = Rect::from_min_size(rect.min + vec2(width + gap, 0.0), size);
    let rest = Rect::from_min_max(pos2(right.right() + gap, rect.top()), rect.right_bottom());
    (left, right, rest)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn pane() -> Rect {
        Rect::from_min_size(pos2(100.0, 50.0), vec2(400.0, 300.0))
    }

    #[test]
    fn the_fit_shows_the_whole_map() {
        let view = View::fit((1024.0, 512.0), pane().size());
        let rect = view.map_rect(pane(), (1024.0, 512.0));
        assert!(pane().contains_rect(rect));
        assert!(rect.width() > 0.95 * pane().width());
    }

    #[test]
    fn screen_and_map_are_inverse_and_the_anchor_stays() {
        let view = View::fit((1000.0, 1000.0), pane().size()).zoomed(3.0, (200.0, 300.0));
        let p = (234.5, 310.25);
        let q = view.to_map(pane(), view.to_screen(pane(), p));
        assert!((p.0 - q.0).abs() < 1e-2 && (p.1 - q.1).abs() < 1e-2);
        let before = view.to_screen(pane(), p);
        let after = view.zoomed(2.0, p).to_screen(pane(), p);
        assert!((before - after).length() < 1e-2);
        let dragged = view.panned(vec2(7.0, -3.0)).to_screen(pane(), p);
        assert!((dragged - before - vec2(7.0, -3.0)).length() < 1e-2);
    }

    #[test]
    fn panes_are_equal_and_apart() {
        let (l, r, s) = two_panes(pane(), 8.0, 60.0);
        assert_eq!(l.size(), r.size());
        assert!(l.right() < r.left() && r.right() < s.left());
        assert!(s.width() >= 60.0);
    }
}
