//! The tip's shape in the report: variants of the radius, tilt, probe shape, area of contact.

use super::format::{about, with_u};
use crate::job::{TipResult, shape_figures};
use std::fmt::Write;

/// One row of the table for so many points.
const EVERY: usize = 4;

/// Rows of the tip's facts; text without markup.
pub fn facts(tip: &TipResult) -> Vec<(&'static str, String)> {
    let mut rows = Vec::new();
    if let Some(r) = tip.read_out.apex_radius {
        let variant = |name: &str, radius: Option<f64>| match radius {
            Some(radius) => format!("{name} {}", about(radius, "nm")),
            None => format!("{name} none"),
        };
        rows.push((
            "On the same cap",
            format!(
                "{}, {}",
                variant("sphere", r.sphere_nm),
                variant("paraboloid", r.paraboloid_nm)
            ),
        ));
    }
    let angle = tip.read_out.half_angle.as_ref();
    if let Some(tilt) = angle.and_then(|a| a.tilt) {
        let (value, u) = with_u(tilt.value, tilt.u, "deg");
        let towards = if tilt.value > 2.0 * tilt.u {
            format!(", towards azimuth {:.0}°", tilt.azimuth_deg)
        } else {
            ", not distinguishable from upright".to_owned()
        };
        rows.push(("Tilt of the axis", format!("{value} (u = {u}){towards}")));
    }
    rows
}

/// The table of widths and areas; empty for a tip that was not exercised.
pub fn table(html: &mut String, tip: &TipResult) {
    let figures = shape_figures(tip);
    let [x, y] = &figures.shapes;
    if x.points.is_empty() {
        return;
    }
    html.push_str(
        "<h3>Probe shape</h3>\n<p class=\"quiet\">Full width of the projected profile and area of \
         contact (of the cross-section, and of the tip's own surface above it) against the distance \
         from the apex. All points are in result.json.</p>\n<table>\n<tr><th>From the apex</th>\
         <th>Width along x</th><th>Width along y</th><th>Projected area</th><th>Surface area</th></tr>\n",
    );
    let rows = x.points.iter().zip(&y.points).zip(&figures.areas);
    for ((x, y), area) in rows.skip(EVERY - 1).step_by(EVERY) {
        let _ = writeln!(
            html,
            "<tr><td>{}</td><td>{}</td><td>{}</td><td>{}</td><td>{}</td></tr>",
            about(x.distance_nm, "nm"),
            about(x.width_nm(), "nm"),
            about(y.width_nm(), "nm"),
            about(area.projected_nm2, "nm²"),
            about(area.surface_nm2, "nm²")
        );
    }
    html.push_str("</table>\n");
}
