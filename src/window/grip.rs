//! What of a line or a region lies under the pointer, and what dragging it does.

use super::state::Line;
use crate::heightmap::{Pitch, Region};
use eframe::egui::{CursorIcon, Pos2, Rect};

/// How near the pointer must be, screen points.
const NEAR: f32 = 6.0;

/// Which edges of a region move; none = all of it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Edges {
    /// The left edge.
    pub left: bool,
    /// The right edge.
    pub right: bool,
    /// The upper edge.
    pub top: bool,
    /// The lower edge.
    pub bottom: bool,
}

/// Something that can be dragged.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Grip {
    /// The start of the section line.
    LineStart,
    /// The end of the section line.
    LineEnd,
    /// The section line.
    WholeLine,
    /// A dimension's region, or edges of it.
    Region(usize, Edges),
}

impl Grip {
    /// The pointer's shape over it.
    pub fn cursor(self) -> CursorIcon {
        match self {
            Self::LineStart | Self::LineEnd => CursorIcon::Crosshair,
            Self::WholeLine => CursorIcon::Grab,
            Self::Region(_, e) => match (e.left || e.right, e.top || e.bottom) {
                (false, false) => CursorIcon::Move,
                (true, false) => CursorIcon::ResizeHorizontal,
                (false, true) => CursorIcon::ResizeVertical,
                (true, true) if (e.left && e.top) || (e.right && e.bottom) => {
                    CursorIcon::ResizeNwSe
                }
                (true, true) => CursorIcon::ResizeNeSw,
            },
        }
    }
}

/// A dimension's region on the screen.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Placed {
    /// Index of the dimension in the job.
    pub index: usize,
    /// Where it is on the screen.
    pub rect: Rect,
    /// Whether it is the chosen one: only that one can be moved by its inside.
    pub chosen: bool,
}

/// The edges of `rect` near `p`; `None` when it is near none.
fn edges_at(rect: Rect, p: Pos2) -> Option<Edges> {
    if !rect.expand(NEAR).contains(p) {
        return None;
    }
    // Of a rectangle narrower than the reach, the nearer edge.
    let pick = |low: f32, high: f32, at: f32| {
        let (a, b) = ((at - low).abs(), (at - high).abs());
        (a <= NEAR && a <= b, b <= NEAR && b < a)
    };
    let (left, right) = pick(rect.left(), rect.right(), p.x);
    let (top, bottom) = pick(rect.top(), rect.bottom(), p.y);
    let edges = Edges {
        left,
        right,
        top,
        bottom,
    };
    (edges != Edges::default()).then_some(edges)
}

fn distance_to(a: Pos2, b: Pos2, p: Pos2) -> f32 {
    let ab = b - a;
    let t = if ab.length_sq() > 0.0 {
        ((p - a).dot(ab) / ab.length_sq()).clamp(0.0, 1.0)
    } else {
        0.0
    };
    (p - (a + t * ab)).length()
}

/// What lies under `p`: the line's ends first, then the chosen region, the line, other regions.
pub fn grip_at(p: Pos2, line: Option<(Pos2, Pos2)>, regions: &[Placed]) -> Option<Grip> {
    if let Some((from, to)) = line {
        let reach = NEAR + 3.0;
        if (p - to).length() <= reach {
            return Some(Grip::LineEnd);
        }
        if (p - from).length() <= reach {
            return Some(Grip::LineStart);
        }
    }
    let region = |placed: &Placed| {
        edges_at(placed.rect, p)
            .or((placed.chosen && placed.rect.contains(p)).then(Edges::default))
            .map(|edges| Grip::Region(placed.index, edges))
    };
    let chosen = regions.iter().filter(|r| r.chosen).find_map(region);
    let on_edge = matches!(chosen, Some(Grip::Region(_, e)) if e != Edges::default());
    if on_edge {
        return chosen;
    }
    let on_line = line.is_some_and(|(from, to)| distance_to(from, to, p) <= NEAR);
    if on_line {
        return Some(Grip::WholeLine);
    }
    chosen.or_else(|| regions.iter().filter(|r| !r.chosen).find_map(region))
}

/// The region of the topmost, smallest rectangle that holds `p`.
pub fn region_at(p: Pos2, regions: &[Placed]) -> Option<usize> {
    regions
        .iter()
        .filter(|r| r.rect.contains(p))
        .min_by(|a, b| a.rect.area().total_cmp(&b.rect.area()))
        .map(|r| r.index)
}

/// The line after its grip was dragged by `d` nm.
pub fn drag_line(line: Line, grip: Grip, d: (f64, f64), size: (f64, f64)) -> Line {
    let end = |p: (f64, f64)| {
        (
            (p.0 + d.0).clamp(0.0, size.0),
            (p.1 + d.1).clamp(0.0, size.1),
        )
    };
    match grip {
        Grip::LineStart => Line {
            from: end(line.from),
            ..line
        },
        Grip::LineEnd => Line {
            to: end(line.to),
            ..line
        },
        _ => line.moved(d.0, d.1, size),
    }
}

/// The region after `edges` were dragged by `d` nm, on pixel edges and on the map.
pub fn drag_region(
    region: Region,
    edges: Edges,
    d: (f64, f64),
    pitch: Pitch,
    size: (f64, f64),
) -> Region {
    let axis = |start: f64, extent: f64, low: bool, high: bool, d: f64, pitch: f64, size: f64| {
        let (mut a, mut b) = (start, start + extent);
        match (low, high) {
            (false, false) => {
                let d = d.clamp(-a, (size - b).max(-a));
                a += d;
                b += d;
            }
            (true, _) => a = (a + d).clamp(0.0, (b - pitch).max(0.0)),
            (false, true) => b = (b + d).clamp(a + pitch, size.max(a + pitch)),
        }
        (a, b - a)
    };
    let whole = edges == Edges::default();
    let still = |low: bool, high: bool| !whole && !low && !high;
    let (left, width) = if still(edges.left, edges.right) {
        (region.left, region.width)
    } else {
        axis(
            region.left,
            region.width,
            edges.left,
            edges.right,
            d.0,
            pitch.x,
            size.0,
        )
    };
    let (top, height) = if still(edges.top, edges.bottom) {
        (region.top, region.height)
    } else {
        axis(
            region.top,
            region.height,
            edges.top,
            edges.bottom,
            d.1,
            pitch.y,
            size.1,
        )
    };
    on_pixels(
        Region {
            left,
            top,
            width,
            height,
        },
        pitch,
        size,
    )
}

/// The region with its edges on the nearest pixel edges of the map, at least one pixel each way.
pub fn on_pixels(region: Region, pitch: Pitch, size: (f64, f64)) -> Region {
    let axis = |start: f64, extent: f64, pitch: f64, size: f64| {
        let count = (size / pitch).round().max(1.0);
        let a = (start / pitch).round().clamp(0.0, count - 1.0);
        let b = ((start + extent) / pitch).round().clamp(a + 1.0, count);
        (tidy(a * pitch), tidy((b - a) * pitch))
    };
    let (left, width) = axis(region.left, region.width, pitch.x, size.0);
    let (top, height) = axis(region.top, region.height, pitch.y, size.1);
    Region {
        left,
        top,
        width,
        height,
    }
}

/// Without the last digits of binary fractions: job files are read by people.
fn tidy(nm: f64) -> f64 {
    (nm * 1e6).round() / 1e6
}

#[cfg(test)]
mod tests {
    use super::*;
    use eframe::egui::pos2;

    fn placed(index: usize, x0: f32, x1: f32, chosen: bool) -> Placed {
        Placed {
            index,
            rect: Rect::from_min_max(pos2(x0, 0.0), pos2(x1, 100.0)),
            chosen,
        }
    }

    #[test]
    fn the_nearest_thing_is_taken() {
        let regions = [placed(0, 10.0, 60.0, true), placed(1, 100.0, 180.0, false)];
        let line = Some((pos2(0.0, 50.0), pos2(200.0, 50.0)));
        let edges = |i, p| match grip_at(p, line, &regions) {
            Some(Grip::Region(index, edges)) if index == i => edges,
            other => panic!("{other:?}"),
        };
        assert!(edges(0, pos2(12.0, 30.0)).left);
        assert!(edges(0, pos2(58.0, 99.0)).right && edges(0, pos2(58.0, 99.0)).bottom);
        assert_eq!(edges(0, pos2(35.0, 30.0)), Edges::default());
        assert!(edges(1, pos2(178.0, 30.0)).right);
        assert_eq!(grip_at(pos2(140.0, 30.0), line, &regions), None);
        assert_eq!(
            grip_at(pos2(140.0, 52.0), line, &regions),
            Some(Grip::WholeLine)
        );
        assert_eq!(
            grip_at(pos2(199.0, 52.0), line, &regions),
            Some(Grip::LineEnd)
        );
        assert_eq!(region_at(pos2(140.0, 30.0), &regions), Some(1));
    }

    #[test]
    fn dragged_regions_stay_on_the_map_and_on_pixels() {
        let region = Region {
            left: 20.0,
            top: 0.0,
            width: 40.0,
            height: 100.0,
        };
        let (pitch, size) = (Pitch::square(2.0), (100.0, 100.0));
        let moved = drag_region(region, Edges::default(), (70.3, 5.0), pitch, size);
        assert_eq!((moved.left, moved.width, moved.top), (60.0, 40.0, 0.0));
        let right = Edges {
            right: true,
            ..Edges::default()
        };
        let wide = drag_region(region, right, (11.2, 40.0), pitch, size);
        assert_eq!((wide.left, wide.width, wide.height), (20.0, 52.0, 100.0));
        let thin = drag_region(region, right, (-400.0, 0.0), pitch, size);
        assert_eq!((thin.left, thin.width), (20.0, 2.0));
    }

    #[test]
    fn a_line_keeps_its_ends_on_the_map() {
        let line = Line {
            from: (0.0, 10.0),
            to: (100.0, 10.0),
        };
        let size = (100.0, 50.0);
        let dragged = drag_line(line, Grip::LineEnd, (30.0, 70.0), size);
        assert_eq!((dragged.from, dragged.to), ((0.0, 10.0), (100.0, 50.0)));
        let dragged = drag_line(line, Grip::WholeLine, (30.0, 70.0), size);
        assert_eq!((dragged.from, dragged.to), ((0.0, 50.0), (100.0, 50.0)));
    }
}
