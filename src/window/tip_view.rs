//! The tip on the desk: its map, and one of three sheets beside it: profiles along x and y, figures
//! against the distance from the apex, the places where the scan showed it.

use super::colours::Palette;
use super::format::{self, Unit, unit_for};
use super::images::{MapRef, Pair, PairKey, paint_pair};
use super::later::Later;
use super::legend;
use super::map_marks;
use super::marks::{Sample, grid, reach, samples_ui, title_ui, x_axis, y_axis};
use super::reach_view::{ReachView, reach_ui};
use super::state::ColourSpan;
use super::tip_evidence::{EvidenceView, evidence_ui};
use super::tip_shape_view::{ShapeView, shape_ui};
use super::view::View;
use crate::heightmap::Profile;
use crate::job::{TipResult, Way};
use crate::leveling::Leveled;
use crate::tip::Tip;
use eframe::egui::accesskit::Role;
use eframe::egui::{
    Color32, Rect, Sense, Stroke, StrokeKind, Ui, UiBuilder, WidgetInfo, pos2, vec2,
};
use egui_plot::{FilledArea, HLine, Line, LineStyle, Plot, PlotPoints};
use std::path::Path;
use std::sync::Arc;

const DEGREES: Unit = Unit {
    nm: 1.0, sign: "°"
};

/// Curves of one profile of the tip.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct TipCurves {
    /// The tip.
    pub tip: Vec<[f64; 2]>,
    /// The band: position, blunter tip's height, sharper tip's height.
    pub band: (Vec<f64>, Vec<f64>, Vec<f64>),
    /// The fitted sphere, to its fit depth.
    pub sphere: Vec<[f64; 2]>,
    /// The tip that the other way gives, for one from a known shape.
    pub other_way: Vec<[f64; 2]>,
}

impl TipCurves {
    /// The tip down to a little below `deepest`: what is deeper would only flatten a drawing.
    fn above(&self, deepest: f64) -> Vec<[f64; 2]> {
        let near = self.tip.iter().filter(|p| p[1] >= 1.15 * deepest);
        near.copied().collect()
    }
}

fn finite(profile: &Profile) -> Vec<[f64; 2]> {
    profile
        .position_nm
        .iter()
        .zip(&profile.height_nm)
        .filter(|(_, z)| z.is_finite())
        .map(|(x, z)| [*x, f64::from(*z)])
        .collect()
}

/// The curves along an azimuth.
pub fn tip_curves(found: &TipResult, azimuth_deg: f64) -> TipCurves {
    let profile = |tip: &Tip| tip.profile(azimuth_deg);
    let mut curves = TipCurves {
        tip: finite(&profile(&found.tip)),
        ..TipCurves::default()
    };
    if let Some(band) = &found.band {
        let (sharp, blunt) = (profile(&band.sharper), profile(&band.blunter));
        for ((x, low), high) in sharp
            .position_nm
            .iter()
            .zip(&sharp.height_nm)
            .zip(&blunt.height_nm)
        {
            if low.is_finite() && high.is_finite() {
                curves.band.0.push(*x);
                curves.band.1.push(f64::from(low.min(*high)));
                curves.band.2.push(f64::from(low.max(*high)));
            }
        }
    }
    if let Some((known, way)) = found.known.as_deref() {
        let other = match way {
            Way::ModelFit => &known.free_form.tip,
            Way::FreeForm => &known.tip,
        };
        curves.other_way = finite(&profile(other));
    }
    if let Some(r) = &found.read_out.apex_radius {
        let depth = r.fit_depth_nm.min(r.value);
        let reach = (2.0 * r.value * depth - depth * depth).max(0.0).sqrt();
        curves.sphere = (-40..=40)
            .map(|i| {
                let x = reach * f64::from(i) / 40.0;
                [x, (r.value * r.value - x * x).max(0.0).sqrt() - r.value]
            })
            .collect();
    }
    curves
}

/// What stands beside the tip's map.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Sheet {
    /// Profiles along x and y.
    #[default]
    Profiles,
    /// Probe shape characteristic and area of contact.
    Shape,
    /// Where the scan showed the tip.
    Evidence,
    /// What the tip reaches of a planned feature.
    Reach,
}

/// State of the tip's view.
#[derive(Default)]
pub struct TipView {
    /// What stands beside the map.
    pub sheet: Sheet,
    pictures: Later<PairKey, Pair>,
    curves: Option<(MapRef, [TipCurves; 2])>,
    second: Option<(MapRef, [TipCurves; 2])>,
    shape: ShapeView,
    evidence: EvidenceView,
    reach: ReachView,
}

/// What the view shows.
pub struct OnTip<'a> {
    /// The tip.
    pub found: Option<&'a Arc<TipResult>>,
    /// Why there is none.
    pub why: &'a str,
    /// The scan.
    pub level: Option<&'a Arc<Leveled>>,
    /// The separate scan that showed the tip, if one did.
    pub own_scan: Option<&'a Path>,
    /// A tip laid over it.
    pub second: Option<&'a Arc<TipResult>>,
}

/// The curves of a tip along x and y, kept while it stays the same.
fn keep(held: &mut Option<(MapRef, [TipCurves; 2])>, tip: Option<&Arc<TipResult>>) {
    let of = tip.map(|t| MapRef::Tip(Arc::clone(t)));
    if held.as_ref().map(|h| &h.0) != of.as_ref() {
        *held = of
            .zip(tip)
            .map(|(of, tip)| (of, [tip_curves(tip, 0.0), tip_curves(tip, 90.0)]));
    }
}

/// Paints the tip into the whole of `ui`.
pub fn tip_ui(ui: &mut Ui, on: &OnTip, view: &mut TipView) {
    let (found, why) = (on.found, on.why);
    let rect = ui.available_rect_before_wrap();
    ui.allocate_rect(rect, Sense::hover());
    let p = Palette::of(ui);
    let Some(found) = found else {
        ui.painter().rect_filled(rect, 0.0, p.well);
        map_marks::note(ui, rect, why, p.faint);
        ui.interact(rect, ui.scope_id().with("no tip"), Sense::hover())
            .widget_info(|| WidgetInfo::labeled(Role::Label, true, why));
        return;
    };
    let of = MapRef::Tip(Arc::clone(found));
    keep(&mut view.curves, Some(found));
    keep(&mut view.second, on.second);
    let side = (rect.width() * 0.46).min(rect.height() - 30.0).max(60.0);
    let map = Rect::from_min_size(rect.min, vec2(side, side + 24.0));
    let scale = Rect::from_min_size(pos2(map.right() + 10.0, map.top() + 24.0), vec2(74.0, side));
    tip_map(ui, map, scale, found, of, view);
    let below = Rect::from_min_max(
        pos2(map.left(), map.bottom() + 14.0),
        pos2(scale.right(), rect.bottom() - 8.0),
    );
    if below.height() > 130.0 {
        azimuth_ui(ui, below, found);
    }
    let right = Rect::from_min_max(pos2(scale.right() + 8.0, rect.top()), rect.max);
    let row = Rect::from_min_size(right.min, vec2(right.width(), 24.0));
    sheets_ui(ui, row, &mut view.sheet);
    let plots = right.with_min_y(row.bottom() + 8.0);
    match (view.sheet, on.level) {
        (Sheet::Shape, _) => shape_ui(ui, plots, found, on.second, &mut view.shape),
        (Sheet::Evidence, Some(level)) => {
            let seen = (found.as_ref(), on.own_scan);
            evidence_ui(ui, plots, seen, level, &mut view.evidence);
        }
        (Sheet::Reach, _) => reach_ui(ui, plots, found, &mut view.reach),
        _ => profiles_ui(ui, plots, found, view),
    }
}

fn sheets_ui(ui: &mut Ui, row: Rect, sheet: &mut Sheet) {
    let mut child = ui.new_child(UiBuilder::new().max_rect(row).id_salt("sheets"));
    child.horizontal(|ui| {
        for (which, name, help) in [
            (Sheet::Profiles, "Profiles", "Sections along x and y"),
            (
                Sheet::Shape,
                "Probe shape",
                "Full width and area of contact against the distance from the apex",
            ),
            (
                Sheet::Evidence,
                "Evidence",
                "Where on the scan the tip was seen",
            ),
            (
                Sheet::Reach,
                "Reach",
                "What the tip reaches of a planned trench, ridge, grating or particle",
            ),
        ] {
            let label = ui.selectable_label(*sheet == which, name);
            if label.on_hover_text(help).clicked() {
                *sheet = which;
            }
        }
    });
}

fn profiles_ui(ui: &mut Ui, plots: Rect, found: &TipResult, view: &TipView) {
    let half = plots.height() / 2.0;
    for (i, name) in ["Along x", "Along y"].into_iter().enumerate() {
        let top = plots.top() + i as f32 * half;
        let area = Rect::from_min_size(pos2(plots.left(), top), vec2(plots.width(), half - 8.0));
        if let Some((_, curves)) = &view.curves {
            let second = view.second.as_ref().map(|(_, s)| &s[i]);
            profile_ui(ui, area, name, &curves[i], second, found);
        }
    }
}

fn tip_map(ui: &Ui, map: Rect, scale: Rect, found: &TipResult, of: MapRef, view: &mut TipView) {
    let p = Palette::of(ui);
    let key = PairKey {
        left: of,
        right: None,
        span: ColourSpan::Full,
        one_scale: true,
    };
    let (ctx, wanted) = (ui.ctx().clone(), key.clone());
    view.pictures
        .want(ui.ctx(), &key, move || paint_pair(&ctx, &wanted));
    ui.painter().text(
        pos2(map.left(), map.top() + 11.0),
        eframe::egui::Align2::LEFT_CENTER,
        "Tip, seen along its axis, apex up",
        eframe::egui::FontId::proportional(14.0),
        p.text,
    );
    let pane = Rect::from_min_max(pos2(map.left(), map.top() + 24.0), map.max);
    let painter = ui.painter().with_clip_rect(pane);
    painter.rect_filled(pane, 0.0, p.well);
    let [w, h] = found.tip.support_nm();
    let seen = View::fit((w, h), pane.size());
    if let Some(pair) = view.pictures.get(&key) {
        let uv = Rect::from_min_max(pos2(0.0, 0.0), pos2(1.0, 1.0));
        painter.image(
            pair.left.texture.id(),
            seen.map_rect(pane, (w, h)),
            uv,
            Color32::WHITE,
        );
        legend::scale_ui(ui, scale, pair.left.range, "z");
    }
    map_marks::cross(&painter, seen.to_screen(pane, (w / 2.0, h / 2.0)));
    map_marks::scale_bar(&painter, pane, seen.nm_per_point);
    ui.painter()
        .rect_stroke(pane, 0.0, Stroke::new(1.0, p.line), StrokeKind::Outside);
    let (rows, columns) = found.tip.shape().dim();
    ui.interact(pane, ui.scope_id().with("tip map"), Sense::hover())
        .widget_info(|| {
            let text = format!(
                "Tip map, {columns} by {rows} pixels, down to {} nm below the apex",
                format::significant(found.tip.depth_nm(), 3)
            );
            WidgetInfo::labeled(Role::Image, true, text)
        });
}

/// The half-angle by azimuth, where it was had: a round tip gives a level curve.
fn azimuth_ui(ui: &mut Ui, rect: Rect, found: &TipResult) {
    let angle = found.read_out.half_angle.as_ref();
    let Some(angle) = angle.filter(|a| a.per_azimuth.len() > 2) else {
        return;
    };
    let p = Palette::of(ui);
    let head = Rect::from_min_size(rect.min, vec2(rect.width(), 22.0));
    title_ui(
        ui,
        head,
        "Half-angle",
        "over azimuth from +x towards +y, degrees",
    );
    let samples = [
        (Sample::Line(2.0), p.corrected, "flank"),
        (Sample::Dashed, p.faint, "mean"),
    ];
    samples_ui(ui, head, &samples);
    let area = rect.with_min_y(rect.top() + 24.0);
    let mut child = ui.new_child(UiBuilder::new().max_rect(area).id_salt("azimuth"));
    let points: Vec<[f64; 2]> = angle.per_azimuth.iter().map(|(a, h)| [*a, *h]).collect();
    let (low, high) = points.iter().fold((angle.value, angle.value), |(a, b), q| {
        (a.min(q[1]), b.max(q[1]))
    });
    let response = Plot::new("azimuth plot")
        .allow_scroll(false)
        .allow_boxed_zoom(false)
        // Never so near that the noise of a round tip looks like a shape.
        .include_y(angle.value - 2.0)
        .include_y(angle.value + 2.0)
        .y_grid_spacer(grid(DEGREES, 2.5))
        .custom_x_axes(vec![x_axis(DEGREES)])
        .custom_y_axes(vec![y_axis(DEGREES)])
        .grid_color(p.line)
        .label_formatter(|_| None)
        .show(&mut child, |plot| {
            plot.hline(
                HLine::new("mean", angle.value)
                    .color(p.faint)
                    .style(LineStyle::dashed_loose())
                    .allow_hover(false),
            );
            plot.line(
                Line::new("flank", PlotPoints::new(points))
                    .color(p.corrected)
                    .width(2.0)
                    .allow_hover(false),
            );
        });
    response.response.widget_info(|| {
        let text = format!("Half-angle by azimuth, from {low:.1} to {high:.1} degrees");
        WidgetInfo::labeled(Role::Image, true, text)
    });
}

fn profile_ui(
    ui: &mut Ui,
    rect: Rect,
    name: &str,
    curves: &TipCurves,
    second: Option<&TipCurves>,
    found: &TipResult,
) {
    let p = Palette::of(ui);
    let mut samples = vec![(Sample::Line(3.0), p.corrected, "tip")];
    if second.is_some() {
        samples.push((Sample::Line(1.3), p.text, "second tip"));
    }
    let other_way = found.known.as_deref().map(|(_, way)| match way {
        Way::ModelFit => "free form",
        Way::FreeForm => "model fit",
    });
    if let Some(name) = other_way {
        samples.push((Sample::Line(1.6), p.good, name));
    }
    if !curves.sphere.is_empty() {
        let name = if second.is_some() {
            "radius"
        } else {
            "apex radius"
        };
        samples.push((Sample::Dashed, p.scanned, name));
    }
    if !curves.band.0.is_empty() {
        samples.push((Sample::Area, p.ghost.gamma_multiply(0.5), "band"));
    }
    if found.exercised_depth_nm.is_some() {
        let name = if second.is_some() {
            "exercised"
        } else {
            "exercised depth"
        };
        samples.push((Sample::Dashed, p.warn, name));
    }
    let mut head = Rect::from_min_size(rect.min, vec2(rect.width(), 22.0));
    let unit = unit_for(reach(curves.tip.iter(), 0));
    title_ui(ui, head, name, unit.sign);
    if samples.len() > 4 {
        // One sample more than the line of the title holds; a line of its own needs no room for it.
        head = head.translate(vec2(0.0, 18.0));
        head.min.x -= 80.0;
    }
    samples_ui(ui, head, &samples);
    let area = rect.with_min_y(head.bottom() + 2.0);
    let mut child = ui.new_child(UiBuilder::new().max_rect(area).id_salt(name));
    let plot = Plot::new(name)
        .data_aspect(1.0)
        .allow_scroll(false)
        .allow_boxed_zoom(false)
        .x_grid_spacer(grid(unit, 6.0))
        .y_grid_spacer(grid(unit, 2.5))
        .custom_x_axes(vec![x_axis(unit)])
        .custom_y_axes(vec![y_axis(unit)])
        .grid_color(p.line)
        .label_formatter(|_| None);
    let response = plot.show(&mut child, |plot| {
        let (xs, low, high) = &curves.band;
        if !xs.is_empty() {
            plot.add(
                FilledArea::new("band", xs, low, high)
                    .fill_color(p.ghost.gamma_multiply(0.30))
                    .allow_hover(false),
            );
        }
        if let Some(depth) = found.exercised_depth_nm {
            plot.hline(
                HLine::new("exercised depth", -depth)
                    .color(p.warn)
                    .style(LineStyle::dashed_loose())
                    .width(1.0)
                    .allow_hover(false),
            );
        }
        if let Some(second) = second {
            let deepest = curves.tip.iter().map(|p| p[1]).fold(0.0, f64::min);
            let (xs, low, high) = &second.band;
            if !xs.is_empty() {
                plot.add(
                    FilledArea::new("band of the second tip", xs, low, high)
                        .fill_color(p.text.gamma_multiply(0.14))
                        .allow_hover(false),
                );
            }
            plot.line(
                Line::new("second tip", PlotPoints::new(second.above(deepest)))
                    .color(p.text)
                    .width(1.3)
                    .allow_hover(false),
            );
        }
        plot.line(
            Line::new("tip", PlotPoints::new(curves.tip.clone()))
                .color(p.corrected)
                .width(2.2)
                .allow_hover(false),
        );
        if !curves.other_way.is_empty() {
            plot.line(
                Line::new("other way", PlotPoints::new(curves.other_way.clone()))
                    .color(p.good)
                    .width(1.4)
                    .allow_hover(false),
            );
        }
        if !curves.sphere.is_empty() {
            plot.line(
                Line::new("apex radius", PlotPoints::new(curves.sphere.clone()))
                    .color(p.scanned)
                    .style(LineStyle::dashed_dense())
                    .width(1.8)
                    .allow_hover(false),
            );
        }
    });
    response.response.widget_info(|| {
        let reach = curves.tip.last().map_or(0.0, |l| l[0]);
        let text = format!(
            "Tip profile {name}: {} to either side, {} nm deep",
            format::significant(reach, 3),
            format::significant(found.tip.depth_nm(), 3)
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
    fn curves_start_at_the_apex_and_the_sphere_fits() {
        let outcome = invented::outcome();
        let found = outcome.tip.as_ref().unwrap();
        let curves = tip_curves(found, 0.0);
        let apex = curves.tip.iter().map(|p| p[1]).fold(f64::MIN, f64::max);
        assert_eq!(apex, 0.0);
        let lowest = curves.sphere.iter().map(|p| p[1]).fold(0.0, f64::min);
        let r = found.read_out.apex_radius.unwrap();
        assert!((lowest + r.fit_depth_nm).abs() < 1e-9);
        assert!(curves.band.0.is_empty());
    }

    #[test]
    fn the_band_encloses_the_tip() {
        let outcome = invented::outcome();
        let mut found = (**outcome.tip.as_ref().unwrap()).clone();
        let scaled = |f: f32| Tip::new(found.tip.shape().mapv(|p| p * f), found.tip.pitch());
        found.band = Some(Band {
            sharper: scaled(1.1).unwrap(),
            blunter: scaled(0.9).unwrap(),
        });
        let curves = tip_curves(&found, 90.0);
        for (((x, low), high), tip) in curves
            .band
            .0
            .iter()
            .zip(&curves.band.1)
            .zip(&curves.band.2)
            .zip(&curves.tip)
        {
            assert_eq!(*x, tip[0]);
            assert!(low <= &tip[1] && &tip[1] <= high);
        }
    }
}
