//! Small drawn marks: the same in every font, told apart by shape before colour.

use super::colours::Palette;
use eframe::egui::{
    Align2, Color32, FontId, Painter, Pos2, Rect, Sense, Shape, Stroke, Ui, pos2, vec2,
};

/// A mark.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Mark {
    /// A tick: done.
    Done,
    /// A triangle with a stroke: look here.
    Attention,
    /// A ring that is half drawn: under way.
    UnderWay,
    /// A ring: waiting, or nothing there.
    Open,
    /// A full disc: touched.
    Full,
    /// A half disc: bounded.
    Half,
    /// A cross: failed.
    Failed,
}

impl Mark {
    /// Its colour in a palette.
    pub fn colour(self, p: &Palette) -> Color32 {
        match self {
            Self::Done | Self::Full => p.good,
            Self::Attention | Self::Half => p.warn,
            Self::UnderWay => p.accent,
            Self::Open => p.faint,
            Self::Failed => p.bad,
        }
    }

    /// Paints it about `c`, 12 points wide.
    pub fn paint(self, painter: &Painter, c: Pos2, colour: Color32) {
        let stroke = Stroke::new(1.8, colour);
        let at = |x: f32, y: f32| pos2(c.x + x, c.y + y);
        match self {
            Self::Done => {
                painter.line(vec![at(-5.0, 0.5), at(-1.5, 4.0), at(5.0, -4.5)], stroke);
            }
            Self::Attention => {
                let triangle = vec![at(0.0, -5.5), at(6.0, 5.0), at(-6.0, 5.0)];
                painter.add(Shape::closed_line(triangle, Stroke::new(1.5, colour)));
                painter.line_segment([at(0.0, -2.0), at(0.0, 1.5)], Stroke::new(1.5, colour));
                painter.circle_filled(at(0.0, 3.3), 0.9, colour);
            }
            Self::UnderWay => arc(painter, c, 5.0, 0.75, stroke),
            Self::Open => {
                painter.circle_stroke(c, 4.5, Stroke::new(1.5, colour));
            }
            Self::Full => {
                painter.circle_filled(c, 5.0, colour);
            }
            Self::Half => {
                painter.circle_stroke(c, 4.5, Stroke::new(1.5, colour));
                let half = (0..=16)
                    .map(|i| {
                        let angle = std::f32::consts::PI * (0.5 + i as f32 / 16.0);
                        c + 4.5 * vec2(angle.cos(), angle.sin())
                    })
                    .collect();
                painter.add(Shape::convex_polygon(half, colour, Stroke::NONE));
            }
            Self::Failed => {
                painter.line_segment([at(-4.0, -4.0), at(4.0, 4.0)], stroke);
                painter.line_segment([at(-4.0, 4.0), at(4.0, -4.0)], stroke);
            }
        }
    }
}

fn arc(painter: &Painter, c: Pos2, radius: f32, part: f32, stroke: Stroke) {
    let points = (0..=24)
        .map(|i| {
            let angle = std::f32::consts::TAU * (part * i as f32 / 24.0 - 0.25);
            c + radius * vec2(angle.cos(), angle.sin())
        })
        .collect();
    painter.line(points, stroke);
}

/// The mark as a widget of a line's height.
pub fn mark_ui(ui: &mut Ui, mark: Mark) {
    let p = Palette::of(ui);
    let (rect, _) = ui.allocate_exact_size(vec2(14.0, 17.0), Sense::hover());
    mark.paint(ui.painter(), rect.center(), mark.colour(p));
}

/// How a curve or an area looks, for legends.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Sample {
    /// A line of a width.
    Line(f32),
    /// A dashed line.
    Dashed,
    /// An area.
    Area,
    /// A diamond.
    Diamond,
}

/// Samples with their names in one line that ends at the right of `rect`.
pub fn samples_ui(ui: &Ui, rect: Rect, samples: &[(Sample, Color32, &str)]) {
    let p = Palette::of(ui);
    let painter = ui.painter();
    let mut x = rect.right();
    let y = rect.center().y;
    for (sample, colour, name) in samples.iter().rev() {
        let font = FontId::proportional(12.5);
        let galley = painter.layout_no_wrap((*name).to_owned(), font, p.text);
        x -= galley.size().x;
        let at = Align2::LEFT_CENTER.anchor_size(pos2(x, y), galley.size());
        painter.galley(at.min, galley, p.text);
        x -= 6.0;
        let (a, b) = (pos2(x - 20.0, y), pos2(x, y));
        match sample {
            Sample::Line(width) => {
                painter.line_segment([a, b], Stroke::new(*width, *colour));
            }
            Sample::Dashed => {
                painter.extend(Shape::dashed_line(
                    &[a, b],
                    Stroke::new(1.6, *colour),
                    5.0,
                    3.0,
                ));
            }
            Sample::Area => {
                painter.rect_filled(
                    Rect::from_center_size(a.lerp(b, 0.5), vec2(20.0, 10.0)),
                    2.0,
                    *colour,
                );
            }
            Sample::Diamond => {
                let c = a.lerp(b, 0.5);
                let diamond = vec![
                    c + vec2(0.0, -5.0),
                    c + vec2(5.0, 0.0),
                    c + vec2(0.0, 5.0),
                    c + vec2(-5.0, 0.0),
                ];
                painter.add(Shape::convex_polygon(diamond, *colour, Stroke::NONE));
            }
        }
        x -= 20.0 + 13.0;
        if x < rect.left() + 90.0 {
            break;
        }
    }
}

/// A plot's axis along x whose numbers stand as near as they can be read.
pub fn x_axis() -> egui_plot::AxisHints<'static> {
    egui_plot::AxisHints::new_x().label_spacing(eframe::egui::Rangef::new(34.0, 70.0))
}

/// A plot's axis along y whose numbers stand as near as they can be read.
pub fn y_axis() -> egui_plot::AxisHints<'static> {
    egui_plot::AxisHints::new_y().label_spacing(eframe::egui::Rangef::new(15.0, 28.0))
}

/// A title above a plot, with what its axes are in smaller print behind it.
pub fn title_ui(ui: &Ui, rect: Rect, title: &str, axes: &str) {
    let p = Palette::of(ui);
    let painter = ui.painter();
    let written = painter.text(
        rect.left_center(),
        Align2::LEFT_CENTER,
        title,
        FontId::proportional(14.0),
        p.text,
    );
    painter.text(
        written.right_center() + vec2(9.0, 0.5),
        Align2::LEFT_CENTER,
        axes,
        FontId::proportional(12.0),
        p.faint,
    );
}
