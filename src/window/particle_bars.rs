//! Heights and diameters of the particles listed, as bars.

use super::colours::Palette;
use super::format::{Unit, unit_for};
use super::marks::{Sample, grid, samples_ui, title_ui, x_axis, y_axis};
use crate::dimensions::ParticleHistogram;
use eframe::egui::accesskit::Role;
use eframe::egui::{Rect, Sense, Stroke, Ui, UiBuilder, WidgetInfo, vec2};
use egui_plot::{Bar, BarChart, Plot};

const COUNT: Unit = Unit { nm: 1.0, sign: "" };
const TALL: f32 = 164.0;

/// One plot below the other.
pub fn bars_ui(ui: &mut Ui, histograms: &[ParticleHistogram]) {
    for histogram in histograms {
        // Clear of the scroll bar.
        let size = vec2(ui.available_width() - 12.0, TALL);
        let (rect, _) = ui.allocate_exact_size(size, Sense::hover());
        plot_ui(ui, rect, histogram);
    }
}

fn plot_ui(ui: &mut Ui, rect: Rect, histogram: &ParticleHistogram) {
    let p = Palette::of(ui);
    let head = Rect::from_min_size(rect.min, vec2(rect.width(), 22.0));
    let last = histogram.bin(histogram.corrected.len().saturating_sub(1))[2];
    let unit = unit_for(last);
    let title = match histogram.quantity.as_str() {
        "height" => "Heights",
        _ => "Diameters",
    };
    title_ui(ui, head, title, unit.sign);
    let samples = [
        (Sample::Line(1.6), p.scanned, "as scanned"),
        (Sample::Area, p.corrected, "corrected"),
    ];
    let below = head.translate(vec2(0.0, 18.0));
    samples_ui(ui, below, &samples);
    let area = rect.with_min_y(below.bottom() + 2.0);
    let mut child = ui.new_child(UiBuilder::new().max_rect(area).id_salt(title));
    let bars = |counts: &[usize], part: f64| -> Vec<Bar> {
        let bar = |(i, n): (usize, &usize)| {
            Bar::new(histogram.bin(i)[1], *n as f64).width(part * histogram.step)
        };
        counts
            .iter()
            .enumerate()
            .filter(|c| *c.1 > 0)
            .map(bar)
            .collect()
    };
    let response = Plot::new(title)
        .allow_scroll(false)
        .allow_boxed_zoom(false)
        .allow_drag(false)
        .allow_zoom(false)
        .include_y(0.0)
        .x_grid_spacer(grid(unit, 6.0))
        .y_grid_spacer(grid(COUNT, 2.5))
        .custom_x_axes(vec![x_axis(unit)])
        .custom_y_axes(vec![y_axis(COUNT)])
        .grid_color(p.line)
        .label_formatter(|_| None)
        .show(&mut child, |plot| {
            let filled = bars(&histogram.corrected, 0.86).into_iter().map(|bar| {
                bar.fill(p.corrected.gamma_multiply(0.6))
                    .stroke(Stroke::NONE)
            });
            plot.bar_chart(BarChart::new("corrected", filled.collect()).allow_hover(false));
            // Narrower and hollow: both can be told apart where they stand on one another.
            let hollow = bars(&histogram.as_scanned, 0.62).into_iter().map(|bar| {
                bar.fill(eframe::egui::Color32::TRANSPARENT)
                    .stroke(Stroke::new(1.6, p.scanned))
            });
            plot.bar_chart(BarChart::new("as scanned", hollow.collect()).allow_hover(false));
        });
    response.response.widget_info(|| {
        WidgetInfo::labeled(Role::Image, true, crate::record::histogram_words(histogram))
    });
}
