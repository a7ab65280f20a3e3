//! The tip's figures against the distance from its apex: probe shape characteristic and area of
//! contact.

use super::colours::Palette;
use super::format::{Unit, unit_for};
use super::images::MapRef;
use super::later::Later;
use super::marks::{Sample, grid, reach, samples_ui, title_ui, x_axis, y_axis};
use crate::job::{TipResult, shape_figures};
use crate::tip::Tip;
use crate::tip::outline::Cut;
use crate::tip::probe_shape::{ProbeShape, probe_shape};
use eframe::egui::accesskit::Role;
use eframe::egui::{Color32, Rect, Ui, UiBuilder, WidgetInfo, pos2, vec2};
use egui_plot::{FilledArea, Line, LineStyle, Plot, PlotPoints};
use std::sync::Arc;

const AREA: Unit = Unit {
    nm: 1.0,
    sign: "nm²",
};

/// Curves of a tip against the distance from its apex.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct ShapeCurves {
    /// Full width along x and along y.
    pub widths: [Vec<[f64; 2]>; 2],
    /// The band along x: distance, sharper tip's width, blunter tip's width.
    pub band: (Vec<f64>, Vec<f64>, Vec<f64>),
    /// Projected area and surface area.
    pub areas: [Vec<[f64; 2]>; 2],
}

/// The part of a curve that reaches no farther than a little beyond `end`.
fn clipped(points: &[[f64; 2]], end: f64) -> Vec<[f64; 2]> {
    let near = points.iter().filter(|p| p[0] <= 1.15 * end);
    near.copied().collect()
}

/// The curves of `found`. Slow: not for the paint thread.
pub fn shape_curves(found: &TipResult) -> ShapeCurves {
    let figures = shape_figures(found);
    let from_apex = |points: Vec<[f64; 2]>| match points.is_empty() {
        true => points,
        false => [vec![[0.0, 0.0]], points].concat(),
    };
    let line = |shape: &ProbeShape| {
        let points = shape.points.iter();
        from_apex(points.map(|p| [p.distance_nm, p.width_nm()]).collect())
    };
    let [x, y] = &figures.shapes;
    let mut curves = ShapeCurves {
        widths: [line(x), line(y)],
        ..ShapeCurves::default()
    };
    if let Some(band) = &found.band {
        let distances: Vec<f64> = x.points.iter().map(|p| p.distance_nm).collect();
        let of = |tip: &Tip| probe_shape(tip, Cut::Silhouette, 0.0, &distances).points;
        for (sharp, blunt) in of(&band.sharper).iter().zip(of(&band.blunter)) {
            curves.band.0.push(sharp.distance_nm);
            curves.band.1.push(sharp.width_nm().min(blunt.width_nm()));
            curves.band.2.push(sharp.width_nm().max(blunt.width_nm()));
        }
    }
    let areas = &figures.areas;
    curves.areas = [
        from_apex(
            areas
                .iter()
                .map(|a| [a.depth_nm, a.projected_nm2])
                .collect(),
        ),
        from_apex(areas.iter().map(|a| [a.depth_nm, a.surface_nm2]).collect()),
    ];
    curves
}

type Pair = (ShapeCurves, Option<ShapeCurves>);

/// State of the view: the curves, kept until a tip changes.
#[derive(Default)]
pub struct ShapeView {
    curves: Later<(MapRef, Option<MapRef>), Pair>,
}

/// Paints both plots into `rect`.
pub fn shape_ui(
    ui: &mut Ui,
    rect: Rect,
    found: &Arc<TipResult>,
    second: Option<&Arc<TipResult>>,
    view: &mut ShapeView,
) {
    let key = (
        MapRef::Tip(Arc::clone(found)),
        second.map(|s| MapRef::Tip(Arc::clone(s))),
    );
    let (first, other) = (Arc::clone(found), second.cloned());
    view.curves.want(ui.ctx(), &key, move || {
        (shape_curves(&first), other.map(|o| shape_curves(&o)))
    });
    let Some((own, other)) = view.curves.last() else {
        return;
    };
    let p = Palette::of(ui);
    let half = rect.height() / 2.0;
    let top = Rect::from_min_size(rect.min, vec2(rect.width(), half - 8.0));
    let below = Rect::from_min_size(
        pos2(rect.left(), rect.top() + half),
        vec2(rect.width(), half - 8.0),
    );
    let widths = Curves {
        name: "Probe shape",
        axes: "full width over distance from the apex, nm",
        names: ["along x", "along y"],
        own: &own.widths,
        other: other.as_ref().map(|o| &o.widths),
        band: Some(&own.band).filter(|b| !b.0.is_empty()),
        unit: unit_for(reach(own.widths[0].iter(), 1)),
        says: "Probe shape characteristic",
    };
    plot_ui(ui, top, &widths, p);
    let areas = Curves {
        name: "Area of contact",
        axes: "nm² over depth, nm",
        names: ["projected", "surface"],
        own: &own.areas,
        other: other.as_ref().map(|o| &o.areas),
        band: None,
        unit: AREA,
        says: "Area of contact",
    };
    plot_ui(ui, below, &areas, p);
}

struct Curves<'a> {
    name: &'static str,
    axes: &'static str,
    names: [&'static str; 2],
    own: &'a [Vec<[f64; 2]>; 2],
    other: Option<&'a [Vec<[f64; 2]>; 2]>,
    band: Option<&'a (Vec<f64>, Vec<f64>, Vec<f64>)>,
    unit: Unit,
    says: &'static str,
}

fn plot_ui(ui: &mut Ui, rect: Rect, curves: &Curves, p: &Palette) {
    let head = Rect::from_min_size(rect.min, vec2(rect.width(), 22.0));
    let mut samples = vec![
        (Sample::Line(3.0), p.corrected, curves.names[0]),
        (Sample::Dashed, p.corrected, curves.names[1]),
    ];
    if curves.other.is_some() {
        samples.push((Sample::Line(2.0), p.text, "second tip"));
    }
    if curves.band.is_some() {
        samples.push((Sample::Area, p.ghost.gamma_multiply(0.5), "band"));
    }
    title_ui(ui, head, curves.name, curves.axes);
    let below = head.translate(vec2(0.0, 20.0));
    samples_ui(ui, below, &samples);
    let area = rect.with_min_y(below.bottom() + 2.0);
    let mut child = ui.new_child(UiBuilder::new().max_rect(area).id_salt(curves.name));
    let along = unit_for(reach(curves.own[0].iter(), 0));
    let response = Plot::new(curves.name)
        .allow_scroll(false)
        .allow_boxed_zoom(false)
        .include_x(0.0)
        .include_y(0.0)
        .x_grid_spacer(grid(along, 6.0))
        .y_grid_spacer(grid(curves.unit, 2.5))
        .custom_x_axes(vec![x_axis(along)])
        .custom_y_axes(vec![y_axis(curves.unit)])
        .grid_color(p.line)
        .label_formatter(|_| None)
        .show(&mut child, |plot| {
            if let Some((x, low, high)) = curves.band {
                plot.add(
                    FilledArea::new("band", x, low, high)
                        .fill_color(p.ghost.gamma_multiply(0.30))
                        .allow_hover(false),
                );
            }
            let line = |points: &[[f64; 2]], colour: Color32, dashed: bool, width: f32| {
                let style = match dashed {
                    true => LineStyle::dashed_dense(),
                    false => LineStyle::Solid,
                };
                Line::new("", PlotPoints::new(points.to_vec()))
                    .color(colour)
                    .style(style)
                    .width(width)
                    .allow_hover(false)
            };
            // Deeper than the first tip there is nothing to compare, and it would flatten the rest.
            if let Some(other) = curves.other {
                let end = curves.own[0].last().map_or(f64::INFINITY, |l| l[0]);
                plot.line(line(&clipped(&other[0], end), p.text, false, 1.3));
                plot.line(line(&clipped(&other[1], end), p.text, true, 1.3));
            }
            plot.line(line(&curves.own[0], p.corrected, false, 2.2));
            plot.line(line(&curves.own[1], p.corrected, true, 2.2));
        });
    response.response.widget_info(|| {
        let last = |k: usize| curves.own[k].last().copied().unwrap_or([0.0, 0.0]);
        let text = format!(
            "{}: {} {:.1}, {} {:.1} {} at {:.1} nm from the apex",
            curves.says,
            curves.names[0],
            last(0)[1],
            curves.names[1],
            last(1)[1],
            curves.unit.sign,
            last(0)[0]
        );
        WidgetInfo::labeled(Role::Image, true, text)
    });
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;
    use crate::tip::Band;

    #[test]
    fn curves_begin_at_the_apex_rise_and_lie_in_the_band() {
        let outcome = invented::outcome();
        let mut found = (**outcome.tip.as_ref().unwrap()).clone();
        let scaled = |f: f32| Tip::new(found.tip.shape().mapv(|p| p * f), found.tip.pitch());
        found.band = Some(Band {
            sharper: scaled(1.1).unwrap(),
            blunter: scaled(0.9).unwrap(),
        });
        let curves = shape_curves(&found);
        for curve in curves.widths.iter().chain(&curves.areas) {
            assert_eq!(curve[0], [0.0, 0.0]);
            assert!(
                curve
                    .windows(2)
                    .all(|w| w[0][0] < w[1][0] && w[0][1] <= w[1][1])
            );
        }
        let (x, low, high) = &curves.band;
        assert!(!x.is_empty());
        for (i, point) in curves.widths[0][1..].iter().take(x.len()).enumerate() {
            assert!(low[i] <= point[1] + 1e-9 && point[1] <= high[i] + 1e-9);
        }
    }
}
