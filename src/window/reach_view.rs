//! What the tip reaches of a planned feature: fields, figures and a drawing.

use super::colours::Palette;
use super::fields::{caution, choice_row, fact, heading, length_row, number_row, remark};
use super::format::unit_for;
use super::images::MapRef;
use super::later::Later;
use super::marks::{Sample, grid, reach, samples_ui, title_ui, x_axis, y_axis};
use crate::job::{TipResult, plan};
use crate::record;
use crate::tip::outline::Cut;
use crate::tip::reach::{Feature, Need, Plan};
use crate::units::Length;
use eframe::egui::accesskit::Role;
use eframe::egui::{Rect, ScrollArea, Ui, UiBuilder, WidgetInfo, pos2, vec2};
use egui_plot::{FilledArea, Line, LineStyle, Plot, PlotPoints};
use std::sync::Arc;

/// Fraction of the height at which widths are told.
const AT: f64 = 0.5;

/// What is planned.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Planned {
    /// A long trench.
    #[default]
    Trench,
    /// A long ridge.
    Ridge,
    /// Ridges side by side.
    Grating,
    /// A ball on the flat.
    Particle,
}

const PLANNED: [(Planned, &str, &str); 4] = [
    (Planned::Trench, "Trench", "A long trench in a plane"),
    (Planned::Ridge, "Ridge", "A long ridge on a plane"),
    (Planned::Grating, "Grating", "Long ridges side by side"),
    (Planned::Particle, "Particle", "A ball on a plane"),
];

/// The feature as far as it is stated.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Wish {
    /// Its kind.
    pub planned: Planned,
    /// Width at half height; a particle's diameter.
    pub width: Option<Length>,
    /// Height or depth.
    pub height: Option<Length>,
    /// From ridge to ridge.
    pub pitch: Option<Length>,
    /// Angle of the walls from the horizontal, degrees.
    pub wall_angle: f64,
    /// Width excess that is still accepted.
    pub excess: Option<Length>,
    /// Direction across it, degrees from +x.
    pub azimuth_deg: f64,
}

impl Default for Wish {
    fn default() -> Self {
        Self {
            planned: Planned::Trench,
            width: None,
            height: None,
            pitch: None,
            wall_angle: 90.0,
            excess: None,
            azimuth_deg: 0.0,
        }
    }
}

impl Wish {
    /// The feature, once everything it needs is stated.
    pub fn feature(&self) -> Option<Feature> {
        let width = self.width?.nm();
        let wall_angle = self.wall_angle;
        let height = self.height.map(Length::nm);
        Some(match self.planned {
            Planned::Particle => Feature::Particle { diameter: width },
            Planned::Trench => Feature::Trench {
                width,
                depth: height?,
                wall_angle,
            },
            Planned::Ridge => Feature::Ridge {
                width,
                height: height?,
                wall_angle,
            },
            Planned::Grating => Feature::Grating {
                pitch: self.pitch?.nm(),
                width,
                height: height?,
                wall_angle,
            },
        })
    }
}

/// A plan, and the tip's outline standing over the feature's middle.
struct Answer {
    plan: Plan,
    tip: Vec<[f64; 2]>,
}

/// State of the sheet.
#[derive(Default)]
pub struct ReachView {
    /// What is planned; it belongs to no job.
    pub wish: Wish,
    answer: Later<(MapRef, Wish), Result<Arc<Answer>, String>>,
}

/// Slow: not for the paint thread.
fn answer(found: &TipResult, wish: &Wish, feature: &Feature) -> Result<Arc<Answer>, String> {
    let need = Need {
        excess_nm: wish.excess.map(Length::nm),
        at: AT,
    };
    let plan = plan(found, wish.azimuth_deg, feature, &[AT], &need)
        .map_err(|e| format!("{}. {}.", e.what(), e.remedy_text()))?;
    let profile = &plan.reach.profile;
    let middle = profile.len() / 2;
    let (base, reach) = profile.get(middle).map_or((0.0, 0.0), |m| {
        (m[2], profile.last().map_or(0.0, |l| l[0].abs()))
    });
    let cut = match feature {
        Feature::Particle { .. } => Cut::Section,
        _ => Cut::Silhouette,
    };
    let step = (reach / 150.0).max(1e-3);
    let outline = found.tip.outline(cut, wish.azimuth_deg, step);
    let half = (outline.depth_nm.len() / 2) as f64;
    let tip = outline
        .depth_nm
        .iter()
        .enumerate()
        .map(|(i, depth)| [(i as f64 - half) * outline.step_nm, base + depth])
        .filter(|p| p[1].is_finite() && p[1] <= 1.6 * plan.reach.height_nm + base.max(0.0))
        .collect();
    Ok(Arc::new(Answer { plan, tip }))
}

/// Paints the sheet into `rect`.
pub fn reach_ui(ui: &mut Ui, rect: Rect, found: &Arc<TipResult>, view: &mut ReachView) {
    let drawing = (0.42 * rect.height()).clamp(150.0, 380.0);
    let above = rect.with_max_y(rect.bottom() - drawing - 6.0);
    let mut child = ui.new_child(UiBuilder::new().max_rect(above).id_salt("reach"));
    let wish = &mut view.wish;
    let later = &mut view.answer;
    ScrollArea::vertical()
        .id_salt("planned feature")
        .auto_shrink(false)
        .show(&mut child, |ui| {
            wish_ui(ui, wish);
            if let Some(feature) = wish.feature() {
                let key = (MapRef::Tip(Arc::clone(found)), *wish);
                let (tip, wish) = (Arc::clone(found), *wish);
                later.want(ui.ctx(), &key, move || answer(&tip, &wish, &feature));
                match later.last() {
                    None => remark(ui, "Being computed…"),
                    Some(Err(why)) => caution(ui, why),
                    Some(Ok(answer)) => figures_ui(ui, &answer.plan),
                }
            } else {
                remark(ui, needed(wish.planned));
            }
        });
    if view.wish.feature().is_some()
        && let Some(Ok(answer)) = view.answer.last()
    {
        let below = Rect::from_min_max(pos2(rect.left(), rect.bottom() - drawing), rect.max);
        drawing_ui(ui, below, answer);
    }
}

fn needed(planned: Planned) -> &'static str {
    match planned {
        Planned::Trench => "Say how wide and how deep the trench is planned.",
        Planned::Ridge => "Say how wide and how high the ridge is planned.",
        Planned::Grating => "Say pitch, width and height of the ridges.",
        Planned::Particle => "Say the particle's diameter.",
    }
}

fn wish_ui(ui: &mut Ui, wish: &mut Wish) {
    heading(ui, "Planned feature");
    if let Some(planned) = choice_row(ui, "Feature", "", wish.planned, &PLANNED) {
        wish.planned = planned;
    }
    let (width, height) = match wish.planned {
        Planned::Trench => ("Width", "Depth"),
        Planned::Ridge | Planned::Grating => ("Width", "Height"),
        Planned::Particle => ("Diameter", ""),
    };
    let length = |ui: &mut Ui, name: &str, help: &str, value: &mut Option<Length>, hint| {
        if let Some(taken) = length_row(ui, name, help, *value, hint) {
            *value = taken;
        }
    };
    let needed = "for example 40 nm";
    if wish.planned == Planned::Grating {
        let help = "From ridge to ridge";
        length(ui, "Pitch", help, &mut wish.pitch, needed);
    }
    length(ui, width, "At half height", &mut wish.width, needed);
    if wish.planned != Planned::Particle {
        length(ui, height, "", &mut wish.height, needed);
        let help = "From the horizontal: 90 is vertical";
        if let Some(a) = number_row(ui, "Wall angle, °", help, Some(wish.wall_angle), "90") {
            wish.wall_angle = a.unwrap_or(90.0);
        }
        let across = [(0.0, "Along x", ""), (90.0, "Along y", "")];
        let help = "Which way the tip crosses the feature";
        if let Some(a) = choice_row(ui, "Crossed", help, wish.azimuth_deg, &across) {
            wish.azimuth_deg = a;
        }
    }
    let help = "How much wider or narrower the image may be at half height; the bluntest tip is sought for it";
    length(ui, "Accepted excess", help, &mut wish.excess, "any");
}

fn figures_ui(ui: &mut Ui, plan: &Plan) {
    heading(ui, "What this tip does");
    let (rows, notes) = record::reach_rows(plan);
    // The first tells the feature, which stands above.
    for (name, text) in rows.into_iter().skip(1) {
        let mut letters = name.chars();
        let first = letters.next().map(|c| c.to_uppercase().to_string());
        fact(ui, &(first.unwrap_or_default() + letters.as_str()), text);
    }
    for note in notes {
        remark(ui, &note);
    }
}

fn drawing_ui(ui: &mut Ui, rect: Rect, answer: &Answer) {
    let p = Palette::of(ui);
    let profile = &answer.plan.reach.profile;
    let curve = |k: usize| -> Vec<[f64; 2]> { profile.iter().map(|s| [s[0], s[k]]).collect() };
    let (feature, image) = (curve(1), curve(2));
    let unit = unit_for(reach(feature.iter(), 0));
    let head = Rect::from_min_size(rect.min, vec2(rect.width(), 22.0));
    title_ui(ui, head, "Across", unit.sign);
    let samples = [
        (Sample::Area, p.corrected.gamma_multiply(0.6), "feature"),
        (Sample::Line(2.0), p.scanned, "its image"),
        (Sample::Dashed, p.text, "tip"),
    ];
    samples_ui(ui, head, &samples);
    let area = rect.with_min_y(head.bottom() + 2.0);
    let mut child = ui.new_child(UiBuilder::new().max_rect(area).id_salt("reach plot"));
    let low = feature.iter().map(|f| f[1]).fold(0.0, f64::min);
    let deeper = low - 0.12 * answer.plan.reach.height_nm;
    let response = Plot::new("reach")
        .data_aspect(1.0)
        .allow_scroll(false)
        .allow_boxed_zoom(false)
        .allow_drag(false)
        .allow_zoom(false)
        .x_grid_spacer(grid(unit, 6.0))
        .y_grid_spacer(grid(unit, 2.5))
        .custom_x_axes(vec![x_axis(unit)])
        .custom_y_axes(vec![y_axis(unit)])
        .grid_color(p.line)
        .label_formatter(|_| None)
        .show(&mut child, |plot| {
            let xs: Vec<f64> = feature.iter().map(|f| f[0]).collect();
            let tops: Vec<f64> = feature.iter().map(|f| f[1]).collect();
            let floor = vec![deeper; xs.len()];
            plot.add(
                FilledArea::new("feature", &xs, &floor, &tops)
                    .fill_color(p.corrected.gamma_multiply(0.30))
                    .allow_hover(false),
            );
            plot.line(
                Line::new("outline", PlotPoints::new(feature))
                    .color(p.corrected)
                    .width(1.6)
                    .allow_hover(false),
            );
            plot.line(
                Line::new("tip", PlotPoints::new(answer.tip.clone()))
                    .color(p.text)
                    .style(LineStyle::dashed_dense())
                    .width(1.3)
                    .allow_hover(false),
            );
            plot.line(
                Line::new("image", PlotPoints::new(image))
                    .color(p.scanned)
                    .width(2.0)
                    .allow_hover(false),
            );
        });
    response.response.widget_info(|| {
        let (rows, _) = record::reach_rows(&answer.plan);
        let text: Vec<String> = rows
            .iter()
            .take(2)
            .map(|(n, v)| format!("{n} {v}"))
            .collect();
        WidgetInfo::labeled(Role::Image, true, format!("Drawing: {}", text.join("; ")))
    });
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;

    #[test]
    fn nothing_is_planned_before_it_is_stated() {
        let mut wish = Wish::default();
        assert!(wish.feature().is_none());
        wish.width = Some(Length::from_nm(40.0));
        assert!(wish.feature().is_none());
        wish.planned = Planned::Particle;
        assert_eq!(wish.feature(), Some(Feature::Particle { diameter: 40.0 }));
        wish.planned = Planned::Grating;
        wish.height = Some(Length::from_nm(20.0));
        assert!(wish.feature().is_none());
        wish.pitch = Some(Length::from_nm(100.0));
        assert!(wish.feature().is_some());
    }

    #[test]
    fn the_drawn_tip_stands_in_the_drawn_image() {
        let outcome = invented::outcome();
        let found = outcome.tip.as_ref().unwrap();
        let wish = Wish {
            width: Some(Length::from_nm(12.0)),
            height: Some(Length::from_nm(25.0)),
            ..Wish::default()
        };
        let answer = answer(found, &wish, &wish.feature().unwrap()).unwrap();
        let profile = &answer.plan.reach.profile;
        assert!((300..=1300).contains(&profile.len()), "{}", profile.len());
        // The image of a trench is nowhere below it, and its lowest point carries the apex.
        assert!(profile.iter().all(|s| s[2] >= s[1] - 1e-3));
        let lowest = profile.iter().map(|s| s[2]).fold(f64::MAX, f64::min);
        let apex = answer.tip.iter().map(|t| t[1]).fold(f64::MAX, f64::min);
        assert!((apex - lowest).abs() < 0.3, "{apex} {lowest}");
        let lost = answer.plan.reach.lost_nm();
        assert!(
            lost > 0.0 && (lowest - lost).abs() < 1e-2,
            "{lost} {lowest}"
        );
        let bad = Wish {
            wall_angle: 95.0,
            ..wish
        };
        let refused = super::answer(found, &bad, &bad.feature().unwrap());
        assert!(refused.is_err_and(|e| e.contains("95")));
    }
}
