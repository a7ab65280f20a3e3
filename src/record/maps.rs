//! Figures of maps: as scanned and corrected on one scale, and the reliability.

use super::colour;
use super::format::{plain, tame};
use super::raster::{Scale, class_png, data_address, height_png, reduce, reduce_classes};
use super::sections::Section;
use super::svg::{Axis, axis_unit, escape, frame, minus, nice, open, text, tick_labels, ticks, xy};
use crate::error::Result;
use crate::heightmap::{HeightMap, Pitch};
use crate::job::{Outcome, SurfaceResult};
use crate::morphology::certainty;
use ndarray::ArrayView2;
use std::fmt::Write;

/// Width of the page's drawings, drawing units (180 mm of an A4 page).
pub const PAGE: f64 = 720.0;
/// Pixels that a map keeps on its longer side in a figure.
const MOST_PIXELS: usize = 1024;
/// Room left of a plot for its labels.
const LEFT: f64 = 52.0;

/// Width and height in drawing units of a map of that extent, true to scale, within a box.
fn fit(width_nm: f64, length_nm: f64, most: (f64, f64)) -> (f64, f64) {
    let scale = (most.0 / width_nm).min(most.1 / length_nm);
    // A hair's breadth at least, or a single row of pixels would vanish.
    ((width_nm * scale).max(2.0), (length_nm * scale).max(2.0))
}

fn extent(dim: (usize, usize), pitch: Pitch) -> (f64, f64) {
    (dim.1 as f64 * pitch.x, dim.0 as f64 * pitch.y)
}

/// What both maps are drawn with.
struct Panel {
    x: Axis,
    y: Axis,
}

impl Panel {
    fn new(left: f64, top: f64, (width, height): (f64, f64), (w_nm, h_nm): (f64, f64)) -> Self {
        Self {
            x: Axis {
                low: 0.0,
                high: w_nm,
                from: left,
                to: left + width,
            },
            y: Axis {
                low: 0.0,
                high: h_nm,
                from: top,
                to: top + height,
            },
        }
    }

    fn image(&self, svg: &mut String, class: &str, address: &str) {
        let _ = write!(
            svg,
            r#"<image class="{class}" x="{}" y="{}" width="{}" height="{}" preserveAspectRatio="none" href="{address}"/>"#,
            xy(self.x.from),
            xy(self.y.from),
            xy(self.x.to - self.x.from),
            xy(self.y.to - self.y.from),
        );
    }

    fn scale_bar(&self, svg: &mut String) {
        let length = nice(self.x.high / 4.0);
        let (factor, unit) = axis_unit(length);
        let width = length * self.x.scale();
        let (x, y) = (self.x.from + 8.0, self.y.to - 9.0);
        if self.y.to - self.y.from < 40.0 || width < 12.0 {
            return;
        }
        let label = format!("{} {unit}", xy(length * factor));
        let plate = width.max(6.2 * label.chars().count() as f64) + 10.0;
        let _ = write!(
            svg,
            r#"<rect class="plate" x="{}" y="{}" width="{}" height="24" rx="3"/><path class="bar" d="M{} {} h{}"/>"#,
            xy(x - 5.0),
            xy(y - 18.0),
            xy(plate),
            xy(x),
            xy(y),
            xy(width)
        );
        text(svg, "", x, y - 6.0, &label);
    }

    fn line(&self, svg: &mut String, class: &str, [x1, y1, x2, y2]: [f64; 4]) {
        if ![x1, y1, x2, y2].iter().all(|v| v.is_finite()) {
            return;
        }
        let d = format!(
            "M{} {} L{} {}",
            xy(self.x.at(x1)),
            xy(self.y.at(y1)),
            xy(self.x.at(x2)),
            xy(self.y.at(y2))
        );
        // A light line under the dark one is seen on any colour.
        let _ = write!(
            svg,
            r#"<path class="under" d="{d}"/><path class="{class}" d="{d}"/>"#
        );
    }
}

/// The figure of the maps as scanned (levelled) and corrected on one colour scale, with the
/// places of the dimensions and of the section. `None` when nothing was levelled or all is void.
pub fn height_maps(outcome: &Outcome, section: Option<&Section>) -> Result<Option<String>> {
    let Some(level) = outcome.level.as_deref() else {
        return Ok(None);
    };
    let mut maps: Vec<(&str, &HeightMap)> = vec![("As scanned (levelled)", &level.map)];
    if let Some(surface) = outcome.surface.as_deref() {
        maps.push(("Corrected", &surface.surface));
    }
    let views: Vec<ArrayView2<f32>> = maps.iter().map(|(_, m)| m.heights()).collect();
    let Some(scale) = Scale::over(&views) else {
        return Ok(None);
    };
    let whole = (level.map.width_nm(), level.map.length_nm());
    let stacked = whole.0 > 2.2 * whole.1;
    let size = fit(
        whole.0,
        whole.1,
        if stacked {
            (570.0, 250.0)
        } else {
            (250.0, 380.0)
        },
    );
    let step = if stacked {
        (0.0, size.1 + 72.0)
    } else {
        (size.0 + LEFT + 10.0, 0.0)
    };
    let more = (maps.len() - 1) as f64;
    let bottom = 24.0 + more * step.1 + size.1;
    let bar_height = if stacked {
        bottom - 24.0
    } else {
        size.1.max(90.0)
    };
    let height = (24.0 + bar_height).max(bottom) + 38.0;
    let (low, high) = (plain(scale.low, "nm"), plain(scale.high, "nm"));
    let mut svg = open(
        PAGE,
        height,
        &format!(
            "Height maps {}, one colour scale from {low} to {high}",
            if maps.len() > 1 {
                "as scanned and corrected"
            } else {
                "as scanned"
            }
        ),
    );
    svg.push_str(r##"<defs><pattern id="void" width="6" height="6" patternUnits="userSpaceOnUse"><rect width="6" height="6" fill="#fff"/><path d="M0 6 L6 0" stroke="#999" stroke-width="1"/></pattern></defs>"##);
    for (i, (name, map)) in maps.iter().enumerate() {
        let left = LEFT + i as f64 * step.0;
        let panel = Panel::new(left, 24.0 + i as f64 * step.1, size, whole);
        text(&mut svg, "title", left, panel.y.from - 8.0, name);
        let _ = write!(
            svg,
            r#"<rect fill="url(#void)" x="{}" y="{}" width="{}" height="{}"/>"#,
            xy(left),
            xy(panel.y.from),
            xy(size.0),
            xy(size.1)
        );
        let small = reduce(map.heights(), MOST_PIXELS, scale);
        let picture = height_png(small.view(), scale)?;
        panel.image(&mut svg, "map", &data_address(&picture));
        // On the scan alone: the corrected walls stay free of lines.
        if i == 0 {
            marks(&mut svg, &panel, outcome);
        }
        if let Some(Section { from, to, .. }) = section {
            panel.line(&mut svg, "cut", [from.0, from.1, to.0, to.1]);
        }
        panel.scale_bar(&mut svg);
        frame(&mut svg, panel.x, panel.y, "x", "y");
    }
    let right = LEFT + more * step.0 + size.0 + 22.0;
    colour_bar(&mut svg, scale, (right, 24.0), bar_height);
    svg.push_str("</svg>");
    Ok(Some(svg))
}

fn marks(svg: &mut String, panel: &Panel, outcome: &Outcome) {
    for dimension in outcome.dimensions.iter().flat_map(|all| all.iter()) {
        for mark in &dimension.marks {
            panel.line(svg, "mark", *mark);
        }
    }
}

/// The ramp with its heights.
fn colour_bar(svg: &mut String, scale: Scale, (left, top): (f64, f64), height: f64) {
    const STOPS: usize = 32;
    svg.push_str(r#"<defs><linearGradient id="ramp" x1="0" y1="1" x2="0" y2="0">"#);
    for i in 0..=STOPS {
        let t = i as f64 / STOPS as f64;
        let _ = write!(
            svg,
            r#"<stop offset="{}" stop-color="{}"/>"#,
            xy(t),
            colour::hex(colour::ramp(t as f32))
        );
    }
    let _ = write!(
        svg,
        r#"</linearGradient></defs><rect class="frame" style="fill:url(#ramp)" x="{}" y="{}" width="14" height="{}"/>"#,
        xy(left),
        xy(top),
        xy(height)
    );
    let axis = Axis {
        low: scale.low,
        high: scale.high,
        from: top + height,
        to: top,
    };
    let (factor, unit) = axis_unit(scale.low.abs().max(scale.high.abs()));
    let values = ticks(
        scale.low * factor,
        scale.high * factor,
        (height / 45.0).max(2.0),
    );
    let labels = tick_labels(&values);
    for (value, label) in values.iter().zip(labels) {
        let y = axis.at(value / factor);
        let _ = write!(
            svg,
            r#"<path class="tick" d="M{} {} h4"/>"#,
            xy(left + 14.0),
            xy(y)
        );
        text(svg, "", left + 21.0, y + 3.5, &label);
    }
    if values.is_empty() {
        let only = minus(&plain(scale.low, "nm"));
        text(svg, "", left + 21.0, top + height / 2.0, &only);
    }
    text(
        svg,
        "name",
        left - 6.0,
        top - 8.0,
        &format!("height / {unit}"),
    );
}

/// The reliability map with its legend.
pub fn reliability_map(surface: &SurfaceResult) -> Result<String> {
    let map = &surface.surface;
    let whole = extent(surface.certainty.dim(), map.pitch());
    let size = fit(whole.0, whole.1, (384.0, 400.0));
    let height = (size.1 + 62.0).max(170.0);
    let r = surface.reliability;
    let share = super::format::percent;
    let mut svg = open(
        PAGE,
        height,
        &format!(
            "Reliability map: {} of the surface touched, {} bounded, {} never reached",
            share(r.touched),
            share(r.bounded),
            share(r.never)
        ),
    );
    let panel = Panel::new(LEFT, 12.0, size, whole);
    let small = reduce_classes(surface.certainty.view(), MOST_PIXELS);
    // Two picture pixels per drawing unit: the patterns stay crisp in print.
    let pixels = |v: f64| (2.0 * v).round().max(1.0) as usize;
    let picture = class_png(small.view(), pixels(size.0), pixels(size.1))?;
    panel.image(&mut svg, "classes", &data_address(&picture));
    frame(&mut svg, panel.x, panel.y, "x", "y");
    let left = LEFT + size.0 + 28.0;
    let voids = surface
        .certainty
        .iter()
        .filter(|&&c| c == certainty::VOID)
        .count() as f64
        / surface.certainty.len().max(1) as f64;
    let legend = [
        (
            certainty::TOUCHED,
            format!("touched, {}", share(r.touched)),
            "sole contact of a probe position",
        ),
        (
            certainty::BOUNDED,
            format!("bounded, {}", share(r.bounded)),
            "contact only together with others",
        ),
        (
            certainty::NEVER,
            format!("never, {}", share(r.never)),
            "out of the tip's reach",
        ),
        (
            certainty::VOID,
            format!("void, {}", share(voids)),
            "no data",
        ),
    ];
    for (i, (class, name, meaning)) in legend.into_iter().enumerate() {
        let y = 14.0 + 36.0 * i as f64;
        let one = ndarray::arr2(&[[class]]);
        let swatch = class_png(one.view(), 56, 40)?;
        let _ = write!(
            svg,
            r#"<image x="{0}" y="{1}" width="28" height="20" href="{2}"/><rect class="frame" x="{0}" y="{1}" width="28" height="20"/>"#,
            xy(left),
            xy(y),
            data_address(&swatch)
        );
        text(&mut svg, "title", left + 36.0, y + 9.0, &name);
        text(&mut svg, "", left + 36.0, y + 22.0, meaning);
    }
    svg.push_str("</svg>");
    Ok(svg)
}

/// What a reader of the map figure must know beyond it.
pub fn reduction_note(map: &HeightMap) -> Option<String> {
    let n = map.rows().max(map.columns()).div_ceil(MOST_PIXELS);
    (n > 1).then(|| {
        escape(&tame(&format!(
            "Drawn as means over blocks of {n} by {n} pixels; a block with a spike or pit beyond an \
             eighth of the scale shows that instead. All results come from the full map."
        )))
    })
}
