//! Small labelled widgets that the panels share. Every input has a name for screen readers.

use super::colours::Palette;
use super::marks::{Mark, mark_ui};
use crate::units::Length;
use eframe::egui::{
    Align, ComboBox, Context, Frame, Id, Label, Layout, Margin, Modal, Response, RichText,
    TextEdit, Ui, Widget, vec2,
};

/// Width of the names in front of fields and facts.
const NAME: f32 = 112.0;

/// A group's heading with air above.
pub fn heading(ui: &mut Ui, text: &str) {
    ui.add_space(8.0);
    let p = Palette::of(ui);
    ui.label(RichText::new(text).size(14.0).color(p.accent).strong());
    ui.add_space(1.0);
}

/// A name and a value side by side.
pub fn fact(ui: &mut Ui, name: &str, value: impl Into<String>) -> Response {
    row(ui, Align::Min, name, |ui| {
        ui.add(Label::new(value.into()).wrap())
    })
    .1
}

/// A name in a column of its own, then what `add` puts beside it; both responses.
fn row(
    ui: &mut Ui,
    align: Align,
    name: &str,
    add: impl FnOnce(&mut Ui) -> Response,
) -> (Response, Response) {
    let p = Palette::of(ui);
    let left = ui.cursor().left();
    let height = if align == Align::Center { 26.0 } else { 17.0 };
    let size = vec2(ui.available_width(), height);
    ui.allocate_ui_with_layout(size, Layout::left_to_right(align), |ui| {
        let text = RichText::new(name).color(p.faint);
        let label = ui
            .scope(|ui| {
                ui.set_max_width(NAME);
                ui.add(Label::new(text).wrap())
            })
            .inner;
        ui.add_space((left + NAME + 8.0 - ui.cursor().left()).max(0.0));
        let width = ui.available_width();
        let value = ui
            .scope(|ui| {
                ui.set_max_width(width);
                add(ui)
            })
            .inner;
        (label, value)
    })
    .inner
}

/// A sentence of caution: a mark, then words.
pub fn caution(ui: &mut Ui, text: &str) {
    ui.horizontal_top(|ui| {
        mark_ui(ui, Mark::Attention);
        ui.add(Label::new(text).wrap());
    });
}

/// A sentence of explanation.
pub fn remark(ui: &mut Ui, text: &str) {
    let p = Palette::of(ui);
    ui.add(Label::new(RichText::new(text).size(12.5).color(p.faint)).wrap());
}

/// A text that is taken when the field is left or Enter pressed, not at every key.
/// Returns the new text where it was changed.
pub fn text_row(ui: &mut Ui, name: &str, help: &str, value: &str, hint: &str) -> Option<String> {
    let mut taken = None;
    row_labelled(ui, name, help, |ui| {
        let id = ui.scope_id().with(("text", name));
        let width = ui.available_width().min(190.0);
        let (response, text) = edit(ui, id, value, hint, width);
        taken = text;
        response
    });
    taken
}

/// The field itself.
fn edit(ui: &mut Ui, id: Id, value: &str, hint: &str, width: f32) -> (Response, Option<String>) {
    let mut taken = None;
    let mut draft = ui
        .data(|d| d.get_temp::<String>(id))
        .unwrap_or_else(|| value.to_owned());
    let response = TextEdit::singleline(&mut draft)
        .id(id.with("edit"))
        .hint_text(hint)
        .desired_width(width)
        .ui(ui);
    if response.has_focus() {
        ui.data_mut(|d| d.insert_temp(id, draft));
    } else if response.lost_focus() {
        ui.data_mut(|d| d.remove::<String>(id));
        if draft.trim() != value {
            taken = Some(draft.trim().to_owned());
        }
    }
    (response, taken)
}

fn row_labelled(ui: &mut Ui, name: &str, help: &str, add: impl FnOnce(&mut Ui) -> Response) {
    let (label, field) = row(ui, Align::Center, name, add);
    let label = if help.is_empty() {
        label
    } else {
        label.on_hover_text(help)
    };
    let field = field.labelled_by(label.id);
    if !help.is_empty() {
        field.on_hover_text(help);
    }
}

/// What [`parsed_row`] took: the value, or `None` for an emptied field.
pub type Taken<T> = Option<Option<T>>;

/// A field that `parse` understands; what it does not is said below the field until it is mended.
pub fn parsed_row<T>(
    ui: &mut Ui,
    name: &str,
    help: &str,
    value: &str,
    hint: &str,
    parse: impl FnOnce(&str) -> Result<T, String>,
) -> Taken<T> {
    let id = ui.scope_id().with(("refused", name));
    let refused = ui.data(|d| d.get_temp::<Refused>(id));
    let shown = refused.as_ref().map_or(value, |(text, _)| text);
    let text = text_row(ui, name, help, shown, hint);
    if text.is_none() {
        refused_ui(ui, refused);
    }
    text.and_then(|text| understood(ui, id, text, parse))
}

/// What was typed and why it is refused.
type Refused = (String, String);

fn refused_ui(ui: &mut Ui, refused: Option<Refused>) {
    if let Some((_, why)) = refused {
        let p = Palette::of(ui);
        ui.label(RichText::new(why).color(p.bad).size(12.5));
    }
}

/// Parses `text`; what is refused is kept under `id`.
fn understood<T>(
    ui: &Ui,
    id: Id,
    text: String,
    parse: impl FnOnce(&str) -> Result<T, String>,
) -> Taken<T> {
    ui.data_mut(|d| d.remove::<Refused>(id));
    if text.is_empty() {
        return Some(None);
    }
    match parse(&text) {
        Ok(value) => Some(Some(value)),
        Err(why) => {
            ui.data_mut(|d| d.insert_temp(id, (text, why)));
            None
        }
    }
}

/// A value and its standard uncertainty, both understood by `parse`.
pub fn value_and_u_row<T>(
    ui: &mut Ui,
    name: &str,
    help: &str,
    texts: [&str; 2],
    hint: &str,
    parse: impl Fn(&str) -> Result<T, String>,
) -> [Taken<T>; 2] {
    let scope = ui.scope_id();
    let ids = [0, 1].map(|k: usize| scope.with(("refused", name, k)));
    let refused = ids.map(|id| ui.data(|d| d.get_temp::<Refused>(id)));
    let mut taken = [None, None];
    row_labelled(ui, name, help, |ui| {
        ui.horizontal(|ui| {
            let mut field = |ui: &mut Ui, k: usize, hint: &str, width: f32| {
                let shown = refused[k].as_ref().map_or(texts[k], |(text, _)| text);
                let id = scope.with(("text", name, k));
                let (response, text) = edit(ui, id, shown, hint, width);
                taken[k] = text;
                response
            };
            let value = field(ui, 0, hint, 64.0);
            ui.label("±");
            field(ui, 1, "exact", 74.0)
                .on_hover_text("Its standard uncertainty")
                .accessible_name(format!("Standard uncertainty of {}", name.to_lowercase()));
            value
        })
        .inner
    });
    for (refused, taken) in refused.into_iter().zip(&taken) {
        if taken.is_none() {
            refused_ui(ui, refused);
        }
    }
    let [value, u] = taken;
    [
        value.and_then(|text| understood(ui, ids[0], text, &parse)),
        u.and_then(|text| understood(ui, ids[1], text, &parse)),
    ]
}

/// A length as people write it.
pub fn parse_length(text: &str) -> Result<Length, String> {
    text.parse::<Length>().map_err(|e| e.to_string())
}

/// A bare number.
pub fn parse_number(text: &str) -> Result<f64, String> {
    let number = text.parse::<f64>().ok().filter(|v| v.is_finite());
    number.ok_or_else(|| format!("\"{text}\" is not a number"))
}

/// A length with its unit; empty = `hint`.
pub fn length_row(
    ui: &mut Ui,
    name: &str,
    help: &str,
    value: Option<Length>,
    hint: &str,
) -> Taken<Length> {
    let text = value.map_or(String::new(), |l| l.to_string());
    parsed_row(ui, name, help, &text, hint, parse_length)
}

/// A bare number; empty = `hint`.
pub fn number_row(
    ui: &mut Ui,
    name: &str,
    help: &str,
    value: Option<f64>,
    hint: &str,
) -> Taken<f64> {
    let text = value.map_or(String::new(), |v| v.to_string());
    parsed_row(ui, name, help, &text, hint, parse_number)
}

/// One of several choices; returns the new one where it was changed.
pub fn choice_row<T: Copy + PartialEq>(
    ui: &mut Ui,
    name: &str,
    help: &str,
    now: T,
    choices: &[(T, &str, &str)],
) -> Option<T> {
    let mut taken = None;
    row_labelled(ui, name, help, |ui| {
        let text = choices.iter().find(|c| c.0 == now).map_or("–", |c| c.1);
        ComboBox::from_id_salt(("choice", name))
            .selected_text(text)
            .width(ui.available_width().min(190.0))
            .show_ui(ui, |ui| {
                for (value, label, meaning) in choices {
                    let response = ui.selectable_label(*value == now, *label);
                    let response = if meaning.is_empty() {
                        response
                    } else {
                        response.on_hover_text(*meaning)
                    };
                    if response.clicked() && *value != now {
                        taken = Some(*value);
                    }
                }
            })
            .response
    });
    taken
}

/// Puts buttons at the right end of a dialog.
pub fn at_right(ui: &mut Ui, add: impl FnOnce(&mut Ui)) {
    ui.allocate_ui_with_layout(
        vec2(ui.available_width(), 26.0),
        Layout::right_to_left(Align::Center),
        add,
    );
}

/// A dialog over everything, with air inside.
pub fn dialog(ctx: &Context, name: &'static str) -> Modal {
    let frame = Frame::popup(&ctx.global_style()).inner_margin(Margin::same(18));
    Modal::new(Id::unique(name)).frame(frame)
}
