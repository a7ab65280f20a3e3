//! Figures of sections: one through the surface with both curves, two through the tip.

use super::curves::{between, path, range, thin};
use super::format::{fixed, plain};
use super::maps::PAGE;
use super::raster::{Scale, data_address, height_png};
use super::svg::{Axis, frame, open, text, xy};
use crate::dimensions::Axis as Across;
use crate::error::Result;
use crate::heightmap::{HeightMap, Region};
use crate::job::{Job, Outcome, SurfaceResult, TipResult};
use crate::tip::Tip;
use std::fmt::Write;

/// Where the section is taken, nm on the map.
#[derive(Debug, Clone, PartialEq)]
pub struct Section {
    /// Start.
    pub from: (f64, f64),
    /// End.
    pub to: (f64, f64),
    /// Where that is, in words.
    pub place: String,
}

impl Section {
    /// Through the middle of the first dimension's region, across its line, a fifth of the region
    /// beyond it on either side; through the middle of the map where no dimension has a region.
    pub fn choose(job: &Job, outcome: &Outcome) -> Option<Self> {
        let map = &outcome.level.as_deref()?.map;
        let request = job.file.dimensions.first();
        let region = request.and_then(|r| r.region).unwrap_or(map.whole());
        let stated = request.and_then(|r| r.across);
        // The last mark of a dimension is drawn the way it is crossed.
        let seen = outcome
            .dimensions
            .as_deref()
            .and_then(|all| all.first()?.marks.last().copied())
            .map(|[x1, y1, x2, y2]| {
                if (y2 - y1).abs() > (x2 - x1).abs() {
                    Across::Y
                } else {
                    Across::X
                }
            });
        let across = stated.or(seen).unwrap_or(Across::X);
        let Region {
            left,
            top,
            width,
            height,
        } = region;
        let (w, h) = (map.width_nm(), map.length_nm());
        let (x, y) = (
            (left + width / 2.0).clamp(0.0, w),
            (top + height / 2.0).clamp(0.0, h),
        );
        let (from, to, along) = match across {
            Across::X => (
                ((left - width / 5.0).max(0.0), y),
                ((left + 1.2 * width).min(w), y),
                format!("along x at y = {}", plain(y, "nm")),
            ),
            Across::Y => (
                (x, (top - height / 5.0).max(0.0)),
                (x, (top + 1.2 * height).min(h)),
                format!("along y at x = {}", plain(x, "nm")),
            ),
        };
        let through = match request {
            Some(r) if r.region.is_some() => {
                format!("through the middle of the region of \"{}\"", r.name)
            }
            _ => "through the middle of the map".to_owned(),
        };
        Some(Self {
            from,
            to,
            place: format!("{along}, {through}"),
        })
    }

    fn start_nm(&self) -> f64 {
        // One coordinate is constant; positions count from the map's edge, as on the map.
        if self.from.1 == self.to.1 {
            self.from.0
        } else {
            self.from.1
        }
    }

    fn name(&self) -> &'static str {
        if self.from.1 == self.to.1 { "x" } else { "y" }
    }

    fn curve(&self, map: &HeightMap) -> Vec<(f64, f64)> {
        let profile = map.profile(self.from, self.to);
        let start = self.start_nm();
        profile
            .position_nm
            .iter()
            .zip(&profile.height_nm)
            .map(|(p, z)| (start + p, f64::from(*z)))
            .collect()
    }
}

/// The section with both curves, the reconstructions with the band's tips as a shaded area, and a
/// strip that tells touched, bounded and never. `None` when the line is void.
pub fn surface_section(outcome: &Outcome, section: &Section) -> Option<String> {
    let level = outcome.level.as_deref()?;
    let surface = outcome.surface.as_deref();
    let scanned = thin(&section.curve(&level.map), 900);
    let corrected = surface.map(|s| thin(&section.curve(&s.surface), 900));
    let band = surface.and_then(|s| Some((s.lower.as_ref()?, s.upper.as_ref()?)));
    let band = band.map(|(low, high)| (section.curve(low), section.curve(high)));
    let mut curves = vec![scanned.as_slice()];
    curves.extend(corrected.as_deref());
    let (low, high) = range(curves)?;
    let margin = 0.06 * (high - low).max(1e-6 * high.abs()).max(1e-9);
    let x = Axis {
        low: scanned.first()?.0,
        high: scanned.last()?.0,
        from: 56.0,
        to: PAGE - 16.0,
    };
    if !(x.high > x.low) {
        return None;
    }
    let y = Axis {
        low: low - margin,
        high: high + margin,
        from: 262.0,
        to: 34.0,
    };
    let mut svg = open(
        PAGE,
        312.0,
        &format!("Section {}: height as scanned and corrected", section.place),
    );
    let _ = write!(
        svg,
        r#"<defs><clipPath id="plot"><rect x="{}" y="{}" width="{}" height="{}"/></clipPath></defs><g clip-path="url(#plot)">"#,
        xy(x.from),
        xy(y.to),
        xy(x.to - x.from),
        xy(y.from - y.to)
    );
    if let Some((low, high)) = &band {
        let _ = write!(
            svg,
            r#"<path class="band" d="{}"/>"#,
            between(low, high, x, y)
        );
    }
    let _ = write!(
        svg,
        r#"<path class="scanned" d="{}"/>"#,
        path(&scanned, x, y)
    );
    if let Some(curve) = &corrected {
        let _ = write!(
            svg,
            r#"<path class="corrected" d="{}"/>"#,
            path(curve, x, y)
        );
    }
    svg.push_str("</g>");
    frame(&mut svg, x, y, section.name(), "height");
    if let Some(surface) = surface {
        strip(&mut svg, surface, section, x);
    }
    legend(&mut svg, corrected.is_some(), band.is_some());
    svg.push_str("</svg>");
    Some(svg)
}

fn legend(svg: &mut String, corrected: bool, band: bool) {
    let mut left = 56.0;
    let mut entry = |svg: &mut String, sample: &str, name: &str| {
        let _ = write!(
            svg,
            r#"<g transform="translate({} 16)">{sample}</g>"#,
            xy(left)
        );
        text(svg, "", left + 32.0, 19.5, name);
        left += 48.0 + 6.0 * name.chars().count() as f64;
    };
    entry(svg, r#"<path class="scanned" d="M0 0 h26"/>"#, "as scanned");
    if corrected {
        entry(
            svg,
            r#"<path class="corrected" d="M0 0 h26"/>"#,
            "corrected",
        );
    }
    if band {
        entry(
            svg,
            r#"<rect class="band" y="-5" width="26" height="10"/>"#,
            "between the band's tips",
        );
    }
}

/// One cell per drawing unit: the certainty under the section.
fn strip(svg: &mut String, surface: &SurfaceResult, section: &Section, x: Axis) {
    let pitch = surface.surface.pitch();
    let (rows, columns) = surface.certainty.dim();
    let count = (2.0 * (x.to - x.from)) as usize;
    let cells = ndarray::Array2::from_shape_fn((1, count), |(_, i)| {
        let t = (i as f64 + 0.5) / count as f64;
        let at = |a: f64, b: f64, pitch: f64, n: usize| {
            (((a + t * (b - a)) / pitch).max(0.0) as usize).min(n - 1)
        };
        let row = at(section.from.1, section.to.1, pitch.y, rows);
        let column = at(section.from.0, section.to.0, pitch.x, columns);
        surface.certainty[[row, column]]
    });
    if let Ok(picture) = super::raster::class_png(cells.view(), count, 16) {
        let _ = write!(
            svg,
            r#"<image x="{0}" y="300" width="{1}" height="8" preserveAspectRatio="none" href="{2}"/><rect class="frame" x="{0}" y="300" width="{1}" height="8"/>"#,
            xy(x.from),
            xy(x.to - x.from),
            data_address(&picture)
        );
    }
}

/// The tip as a map and its profiles along x and y with the band shaded.
pub fn tip_figure(tip: &TipResult) -> Result<String> {
    let shape = tip.tip.shape();
    // As deep as the profiles go: the corners of the grid lie deeper, and would only flatten them.
    let curves = [0.0, 90.0].map(|azimuth| tip_curve(&tip.tip, azimuth));
    let deepest = range(curves.iter().map(Vec::as_slice)).map_or(0.0, |(low, _)| -low);
    // What lies much deeper than was exercised says nothing: it would only flatten the rest.
    let shown = match tip.exercised_depth_nm {
        Some(depth) if depth > 0.0 => deepest.min(1.6 * depth),
        _ => deepest,
    };
    let mut svg = open(
        PAGE,
        270.0,
        &format!(
            "The tip, apex up, to a depth of {}: map, and profiles along x and y",
            plain(shown, "nm")
        ),
    );
    svg.push_str(r##"<defs><pattern id="outside" width="6" height="6" patternUnits="userSpaceOnUse"><rect width="6" height="6" fill="#fff"/><path d="M0 6 L6 0" stroke="#999" stroke-width="1"/></pattern></defs>"##);
    let [w, h] = tip.tip.support_nm();
    let scale = (170.0 / w).min(186.0 / h);
    let (width, height) = ((w * scale).max(2.0), (h * scale).max(2.0));
    let x = Axis {
        low: -w / 2.0,
        high: w / 2.0,
        from: 52.0,
        to: 52.0 + width,
    };
    let y = Axis {
        low: -h / 2.0,
        high: h / 2.0,
        from: 34.0,
        to: 34.0 + height,
    };
    let colours = Scale {
        low: -shown,
        high: 0.0,
    };
    let picture = height_png(shape, colours)?;
    let _ = write!(
        svg,
        r#"<rect fill="url(#outside)" x="{0}" y="{1}" width="{2}" height="{3}"/><image class="map" x="{0}" y="{1}" width="{2}" height="{3}" preserveAspectRatio="none" href="{4}"/>"#,
        xy(x.from),
        xy(y.from),
        xy(width),
        xy(height),
        data_address(&picture)
    );
    frame(&mut svg, x, y, "x", "y");
    text(&mut svg, "title", 52.0, 24.0, "map");
    tip_profile(&mut svg, tip, 0.0, shown, 292.0);
    tip_profile(&mut svg, tip, 90.0, shown, 532.0);
    svg.push_str("</svg>");
    Ok(svg)
}

fn tip_curve(tip: &Tip, azimuth: f64) -> Vec<(f64, f64)> {
    let profile = tip.profile(azimuth);
    profile
        .position_nm
        .iter()
        .zip(&profile.height_nm)
        .map(|(p, z)| (*p, f64::from(*z)))
        .collect()
}

fn tip_profile(svg: &mut String, tip: &TipResult, azimuth: f64, shown: f64, left: f64) {
    let along = if azimuth == 0.0 { "x" } else { "y" };
    let curve = tip_curve(&tip.tip, azimuth);
    let shown = shown.max(1e-9);
    // As wide as the tip is at the depth shown, and a little more.
    let inside = curve.iter().filter(|p| p.1 >= -1.05 * shown);
    let reach = 1.15 * inside.map(|p| p.0.abs()).fold(0.0, f64::max).max(1e-9);
    // True to scale where that makes a readable plot.
    let (most_wide, most_high) = (170.0f64, 186.0f64);
    let (wide, high) = (2.0 * reach, 1.1 * shown);
    let scale = (most_wide / wide).min(most_high / high);
    let true_size = (wide * scale, high * scale);
    let (width, height) = if true_size.0.min(true_size.1) >= 56.0 {
        true_size
    } else {
        (most_wide, most_high)
    };
    let x = Axis {
        low: -reach,
        high: reach,
        from: left,
        to: left + width,
    };
    let y = Axis {
        low: -1.05 * shown,
        high: 0.05 * shown,
        from: 34.0 + height,
        to: 34.0,
    };
    let _ = write!(
        svg,
        r#"<defs><clipPath id="tip{along}"><rect x="{}" y="34" width="{}" height="{}"/></clipPath></defs><g clip-path="url(#tip{along})">"#,
        xy(left),
        xy(width),
        xy(height)
    );
    if let Some(band) = &tip.band {
        let (low, high) = (
            tip_curve(&band.sharper, azimuth),
            tip_curve(&band.blunter, azimuth),
        );
        let _ = write!(
            svg,
            r#"<path class="band" d="{}"/>"#,
            between(&low, &high, x, y)
        );
    }
    if let Some(depth) = tip.exercised_depth_nm
        && depth > 0.0
        && depth < 1.02 * shown
    {
        let _ = write!(
            svg,
            r#"<path class="depth" d="M{} {} h{}"/>"#,
            xy(left),
            xy(y.at(-depth)),
            xy(width)
        );
    }
    let _ = write!(
        svg,
        r#"<path class="corrected" d="{}"/></g>"#,
        path(&curve, x, y)
    );
    frame(svg, x, y, along, "height");
    let stretch = y.scale() / x.scale();
    let stretched = if (stretch - 1.0).abs() < 0.02 {
        String::new()
    } else {
        format!(" (heights × {})", fixed(stretch, 1))
    };
    text(
        svg,
        "title",
        left,
        24.0,
        &format!("along {along}{stretched}"),
    );
}
