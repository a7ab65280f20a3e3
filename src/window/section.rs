//! The section along the line: both curves, and the ghost tip in contact.

use super::colours::Palette;
use super::format;
use super::map_view::pixel_at;
use super::marks::{Sample, samples_ui, title_ui, x_axis, y_axis};
use super::state::Line;
use crate::heightmap::{HeightMap, Profile, Region};
use crate::job::{GhostTip, Outcome};
use crate::morphology::certainty;
use crate::tip::Tip;
use eframe::egui::accesskit::Role;
use eframe::egui::{Rect, Stroke, Ui, UiBuilder, WidgetInfo, vec2};
use egui_plot::{Line as Curve, LineStyle, MarkerShape, Plot, PlotPoints, Points, Polygon, VLine};

/// Height of the line of text above the plot.
const HEAD: f32 = 22.0;

/// A curve in pieces without voids, `[along, height]` in nm.
pub type Pieces = Vec<Vec<[f64; 2]>>;

/// The curves of a section.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct SectionData {
    /// As scanned.
    pub scanned: Pieces,
    /// Corrected, where the tip touched for certain.
    pub touched: Pieces,
    /// Corrected, where it is only a bound.
    pub bound: Pieces,
}

/// Splits a profile wherever `keep` fails or there is no height.
fn pieces(profile: &Profile, keep: impl Fn(usize) -> bool) -> Pieces {
    let mut all: Pieces = vec![Vec::new()];
    for (i, (x, z)) in profile
        .position_nm
        .iter()
        .zip(&profile.height_nm)
        .enumerate()
    {
        if z.is_nan() || !keep(i) {
            if all.last().is_some_and(|piece| !piece.is_empty()) {
                all.push(Vec::new());
            }
        } else if let Some(piece) = all.last_mut() {
            piece.push([*x, f64::from(*z)]);
        }
    }
    all.retain(|piece| !piece.is_empty());
    all
}

/// Samples both maps along `line`.
pub fn section_data(outcome: &Outcome, line: Line) -> SectionData {
    let Some(level) = &outcome.level else {
        return SectionData::default();
    };
    let scanned = pieces(&level.map.profile(line.from, line.to), |_| true);
    let Some(surface) = &outcome.surface else {
        return SectionData {
            scanned,
            ..SectionData::default()
        };
    };
    let profile = surface.surface.profile(line.from, line.to);
    let sure: Vec<bool> = profile
        .position_nm
        .iter()
        .map(|along| {
            pixel_at(&surface.surface, line.at(*along))
                .and_then(|at| surface.certainty.get(at))
                .is_some_and(|&c| c == certainty::TOUCHED)
        })
        .collect();
    // A bound's piece reaches to the touched points beside it, so that the curve has no gaps.
    let beside =
        |i: usize| !sure[i] || (i > 0 && !sure[i - 1]) || sure.get(i + 1).is_some_and(|next| !next);
    SectionData {
        scanned,
        touched: pieces(&profile, |i| sure[i]),
        bound: pieces(&profile, beside),
    }
}

/// The ghost tip in the plane of the section.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct GhostOutline {
    /// Where the apex stands along the line, nm.
    pub along: f64,
    /// Outline `[along, height]`, left to right.
    pub outline: Vec<[f64; 2]>,
    /// Contacts in or next to the plane.
    pub contacts: Vec<[f64; 2]>,
}

/// The outline of `tip` standing as `ghost` says, cut along `line`, up to `top` nm.
pub fn ghost_outline(
    tip: &Tip,
    ghost: &GhostTip,
    surface: &HeightMap,
    line: Line,
    top: f64,
) -> GhostOutline {
    let pitch = surface.pitch();
    let centre = |(row, column): (usize, usize)| {
        (
            (column as f64 + 0.5) * pitch.x,
            (row as f64 + 0.5) * pitch.y,
        )
    };
    let (along, _) = line.coordinates(centre(ghost.apex));
    let apex = f64::from(ghost.apex_height_nm);
    let profile = tip.profile(line.azimuth_deg());
    let outline = profile
        .position_nm
        .iter()
        .zip(&profile.height_nm)
        .filter(|(_, p)| p.is_finite())
        .map(|(d, p)| [along + d, apex - f64::from(*p)])
        .filter(|[_, z]| *z <= top)
        .collect();
    let near = pitch.x.max(pitch.y);
    let contacts = ghost
        .contacts
        .iter()
        .filter_map(|at| {
            let (along, beside) = line.coordinates(centre(*at));
            let z = f64::from(*surface.heights().get(*at)?);
            (beside.abs() <= near && z.is_finite()).then_some([along, z])
        })
        .collect();
    GhostOutline {
        along,
        outline,
        contacts,
    }
}

/// The part of the line that lies in a region, `[from, to]` nm along it.
pub fn span_in(line: Line, region: Region) -> Option<[f64; 2]> {
    let (ux, uy) = line.direction();
    let (mut from, mut to) = (0.0f64, line.length());
    for (start, unit, low, extent) in [
        (line.from.0, ux, region.left, region.width),
        (line.from.1, uy, region.top, region.height),
    ] {
        if unit == 0.0 {
            if !(low..=low + extent).contains(&start) {
                return None;
            }
            continue;
        }
        let (a, b) = ((low - start) / unit, (low + extent - start) / unit);
        from = from.max(a.min(b));
        to = to.min(a.max(b));
    }
    (to > from).then_some([from, to])
}

/// Highest point to which the ghost tip is drawn: above the curves, not so far that they shrink.
pub fn ghost_top(data: &SectionData) -> f64 {
    let (low, high) = data
        .scanned
        .iter()
        .flatten()
        .fold((f64::MAX, f64::MIN), |(a, b), p| (a.min(p[1]), b.max(p[1])));
    if low > high {
        return 0.0;
    }
    high + 0.5 * (high - low).max(1.0)
}

/// What the section shows.
pub struct Section<'a> {
    /// The curves.
    pub data: &'a SectionData,
    /// The ghost tip.
    pub ghost: Option<&'a GhostOutline>,
    /// Where the map's pointer stands along the line, nm.
    pub pointer: Option<f64>,
    /// Heights of the chosen results' fractions or regions along the line, `[from, to]` nm.
    pub spans: &'a [[f64; 2]],
    /// Whether there is a corrected surface.
    pub corrected: bool,
}

fn summary(section: &Section) -> String {
    let range = |pieces: &[&Pieces]| {
        pieces.iter().flat_map(|p| p.iter().flatten()).fold(
            None,
            |r: Option<(f64, f64)>, [_, z]| {
                let (a, b) = r.unwrap_or((*z, *z));
                Some((a.min(*z), b.max(*z)))
            },
        )
    };
    let say = |name: &str, r: Option<(f64, f64)>| {
        r.map_or(format!("{name}: nothing"), |(a, b)| {
            format!(
                "{name} from {} to {}",
                format::height(a as f32),
                format::height(b as f32)
            )
        })
    };
    format!(
        "Section: {}; {}",
        say("as scanned", range(&[&section.data.scanned])),
        say(
            "corrected",
            range(&[&section.data.touched, &section.data.bound])
        ),
    )
}

fn head_ui(ui: &Ui, rect: Rect, section: &Section) {
    let p = Palette::of(ui);
    title_ui(
        ui,
        rect,
        "Section",
        "height over distance along the line, nm",
    );
    let mut samples = vec![(Sample::Dashed, p.scanned, "as scanned")];
    if section.corrected {
        samples.push((Sample::Line(3.0), p.corrected, "corrected, touched"));
        samples.push((Sample::Line(1.0), p.corrected, "corrected, only a bound"));
    }
    if section.ghost.is_some() {
        samples.push((Sample::Area, p.ghost.gamma_multiply(0.5), "ghost tip"));
        samples.push((Sample::Diamond, p.ghost, "contact"));
    }
    samples_ui(ui, rect, &samples);
}

/// Paints the section into `rect`; the position along the line under the pointer, if any.
pub fn section_ui(ui: &mut Ui, rect: Rect, section: &Section) -> Option<f64> {
    let p = Palette::of(ui);
    let head = Rect::from_min_size(rect.min, vec2(rect.width(), HEAD));
    head_ui(ui, head, section);
    let below = rect.with_min_y(rect.top() + HEAD);
    let mut child = ui.new_child(UiBuilder::new().max_rect(below).id_salt("section"));
    let plot = Plot::new("section plot")
        .allow_scroll(false)
        .allow_boxed_zoom(false)
        .set_margin_fraction(vec2(0.01, 0.08))
        .custom_x_axes(vec![x_axis()])
        .custom_y_axes(vec![y_axis()])
        .grid_color(p.line)
        .label_formatter(|_| None)
        .coordinates_formatter(
            egui_plot::Corner::RightTop,
            egui_plot::CoordinatesFormatter::new(|at, _| format!("{:.1} nm, {:.2} nm", at.x, at.y)),
        );
    let response = plot.show(&mut child, |plot| {
        for [from, to] in section.spans {
            plot.span(
                egui_plot::Span::new("", *from..=*to)
                    .fill(p.accent.gamma_multiply(0.10))
                    .border(Stroke::new(1.0, p.accent)),
            );
        }
        for piece in &section.data.scanned {
            plot.line(
                Curve::new("as scanned", PlotPoints::new(piece.clone()))
                    .color(p.scanned)
                    .style(LineStyle::dashed_dense())
                    .width(1.5)
                    .allow_hover(false),
            );
        }
        if section.corrected {
            for piece in &section.data.touched {
                plot.line(
                    Curve::new("corrected, touched", PlotPoints::new(piece.clone()))
                        .color(p.corrected)
                        .width(2.2)
                        .allow_hover(false),
                );
            }
            for piece in &section.data.bound {
                plot.line(
                    Curve::new("corrected, bound only", PlotPoints::new(piece.clone()))
                        .color(p.corrected)
                        .width(1.0)
                        .allow_hover(false),
                );
            }
        }
        if let Some(ghost) = section.ghost {
            plot.polygon(
                Polygon::new("ghost tip", PlotPoints::new(ghost.outline.clone()))
                    .fill_color(p.ghost.gamma_multiply(0.18))
                    .stroke(Stroke::new(1.5, p.ghost))
                    .allow_hover(false),
            );
            plot.points(
                Points::new("contact", PlotPoints::new(ghost.contacts.clone()))
                    .shape(MarkerShape::Diamond)
                    .radius(4.5)
                    .color(p.ghost)
                    .allow_hover(false),
            );
        } else if let Some(at) = section.pointer {
            plot.vline(
                VLine::new("", at)
                    .color(p.faint)
                    .width(1.0)
                    .allow_hover(false),
            );
        }
    });
    let text = summary(section);
    response
        .response
        .widget_info(|| WidgetInfo::labeled(Role::Image, true, text.clone()));
    response
        .response
        .hover_pos()
        .map(|at| response.transform.value_from_position(at).x)
}

#[cfg(test)]
mod tests {
    use super::super::invented;
    use super::*;
    use crate::job::ghost_tip;

    #[test]
    fn the_curves_cover_the_line_and_the_corrected_one_lies_below() {
        let outcome = invented::outcome();
        let line = Line::across(&outcome.level.as_ref().unwrap().map);
        let data = section_data(&outcome, line);
        assert_eq!(data.scanned.len(), 1);
        let n: usize = data.touched.iter().map(Vec::len).sum();
        assert!(n > 0 && !data.bound.is_empty());
        for (a, b) in [(&data.scanned, &data.touched), (&data.scanned, &data.bound)] {
            for [x, z] in b.iter().flatten() {
                let over = a.iter().flatten().find(|p| p[0] == *x).unwrap();
                assert!(*z <= over[1] + 0.01, "corrected above scanned at {x}");
            }
        }
    }

    #[test]
    fn a_region_cuts_its_part_out_of_the_line() {
        let line = Line {
            from: (0.0, 50.0),
            to: (100.0, 50.0),
        };
        let region = |left: f64, top: f64| Region {
            left,
            top,
            width: 30.0,
            height: 20.0,
        };
        assert_eq!(span_in(line, region(20.0, 40.0)), Some([20.0, 50.0]));
        assert_eq!(span_in(line, region(80.0, 40.0)), Some([80.0, 100.0]));
        assert_eq!(span_in(line, region(20.0, 60.0)), None);
    }

    #[test]
    fn voids_cut_a_curve() {
        let profile = Profile {
            position_nm: vec![0.0, 1.0, 2.0, 3.0],
            height_nm: vec![1.0, f32::NAN, 2.0, 3.0],
        };
        let cut = pieces(&profile, |_| true);
        assert_eq!(cut, vec![vec![[0.0, 1.0]], vec![[2.0, 2.0], [3.0, 3.0]]]);
    }

    #[test]
    fn the_ghost_tip_never_cuts_the_surface_and_touches_it() {
        let outcome = invented::outcome();
        let (tip, surface) = (
            outcome.tip.as_ref().unwrap(),
            outcome.surface.as_ref().unwrap(),
        );
        let map = &surface.surface;
        let y = (map.rows() as f64 / 2.0).floor() * map.pitch().y + map.pitch().y / 2.0;
        let line = Line {
            from: (0.0, y),
            to: (map.width_nm(), y),
        };
        let row = map.rows() / 2;
        for column in [5, map.columns() / 2, map.columns() / 2 + 9] {
            let ghost = ghost_tip(&outcome, row, column).unwrap();
            let drawn = ghost_outline(&tip.tip, &ghost, map, line, 1e9);
            assert!(!drawn.contacts.is_empty(), "column {column}");
            for [along, z] in &drawn.outline {
                let below = map.height_at(line.at(*along).0, y);
                if below.is_finite() {
                    assert!(*z >= f64::from(below) - 0.02, "column {column}, {along}");
                }
            }
        }
    }
}
