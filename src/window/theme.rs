//! Applies the palettes to the widgets of both themes.

use super::colours::Palette;
use eframe::egui::{
    Color32, Context, CornerRadius, FontDefinitions, FontFamily, FontId, Margin, Shadow, Stroke,
    Style, TextStyle, Theme, Visuals, vec2,
};

/// Sets fonts, spacing and colours of both themes.
pub fn apply(ctx: &Context) {
    // Arrows and mathematical signs that the proportional font lacks come from the other one.
    let mut fonts = FontDefinitions::default();
    if let Some(families) = fonts.families.get_mut(&FontFamily::Proportional) {
        families.push("Hack".to_owned());
    }
    ctx.set_fonts(fonts);
    for theme in [Theme::Dark, Theme::Light] {
        ctx.style_mut_of(theme, |style| {
            let dark = theme == Theme::Dark;
            style.visuals = visuals(dark);
            layout(style);
        });
    }
}

fn layout(style: &mut Style) {
    let size = |s: f32| FontId::new(s, FontFamily::Proportional);
    style.text_styles = [
        (TextStyle::Small, size(11.5)),
        (TextStyle::Body, size(13.5)),
        (TextStyle::Button, size(13.5)),
        (TextStyle::Heading, size(17.0)),
        (
            TextStyle::Monospace,
            FontId::new(12.5, FontFamily::Monospace),
        ),
    ]
    .into();
    let spacing = &mut style.spacing;
    spacing.item_spacing = vec2(8.0, 6.0);
    spacing.button_padding = vec2(9.0, 4.0);
    spacing.interact_size = vec2(36.0, 24.0);
    spacing.window_margin = Margin::same(14);
    spacing.menu_margin = Margin::same(6);
    spacing.combo_width = 140.0;
    spacing.text_edit_width = 130.0;
    spacing.tooltip_width = 340.0;
    style.interaction.tooltip_delay = 0.35;
    style.animation_time = 0.0;
}

fn visuals(dark: bool) -> Visuals {
    let p = Palette::of_theme(dark);
    let mut v = if dark {
        Visuals::dark()
    } else {
        Visuals::light()
    };
    v.panel_fill = p.panel;
    v.window_fill = p.panel;
    v.window_stroke = Stroke::new(1.0, p.line);
    v.extreme_bg_color = p.well;
    v.faint_bg_color = p.desk;
    v.code_bg_color = p.well;
    v.hyperlink_color = p.accent;
    v.warn_fg_color = p.warn;
    v.error_fg_color = p.bad;
    v.weak_text_color = Some(p.faint);
    v.selection.bg_fill = p.chosen;
    v.selection.stroke = Stroke::new(1.0, p.text);
    v.window_corner_radius = CornerRadius::same(8);
    v.menu_corner_radius = CornerRadius::same(6);
    let shadow = Shadow {
        offset: [0, 4],
        blur: 16,
        spread: 0,
        color: Color32::from_black_alpha(if dark { 110 } else { 40 }),
    };
    v.window_shadow = shadow;
    v.popup_shadow = shadow;
    let corner = CornerRadius::same(5);
    let w = &mut v.widgets;
    w.noninteractive.bg_fill = p.panel;
    w.noninteractive.weak_bg_fill = p.panel;
    w.noninteractive.bg_stroke = Stroke::new(1.0, p.line);
    w.noninteractive.fg_stroke = Stroke::new(1.0, p.text);
    for (visuals, fill) in [
        (&mut w.inactive, p.button),
        (&mut w.hovered, p.button_hot),
        (&mut w.active, p.chosen),
        (&mut w.open, p.button_hot),
    ] {
        visuals.weak_bg_fill = fill;
        visuals.bg_fill = fill;
        visuals.bg_stroke = Stroke::new(1.0, p.line);
        visuals.fg_stroke = Stroke::new(1.0, p.text);
        visuals.corner_radius = corner;
        visuals.expansion = 0.0;
    }
    w.hovered.bg_stroke = Stroke::new(1.0, p.faint);
    w.active.bg_stroke = Stroke::new(1.0, p.accent);
    v
}
