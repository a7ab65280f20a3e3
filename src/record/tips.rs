//! Two tips compared, and what a tip reaches: for machines and for a terminal.

use super::format::{about, fixed, percent, plain, tame, with_u};
use super::json::number;
use crate::tip::compare::{Change, Comparison};
use crate::tip::reach::{Feature, Plan, Reach};
use serde_json::{Value, json};
use std::fmt::Write;

/// See [`super::comparison_json`].
pub fn comparison_json(found: &Comparison) -> Value {
    let change = |c: &Option<Change>| {
        c.map(|c| {
            json!({
                "first": number(c.values[0]),
                "second": number(c.values[1]),
                "difference": number(c.difference),
                "u": number(c.u),
                "U": number(c.expanded()),
                "k": number(c.k),
            })
        })
    };
    json!({
        "schema": "truewidth.comparison/1",
        "program": env!("CARGO_PKG_VERSION"),
        "verdict": found.verdict.name(),
        "words": found.verdict.words(),
        "depth_nm": number(found.depth_nm),
        "cells": found.cells,
        "pitch_nm": [number(found.pitch.x), number(found.pitch.y)],
        "resampled": found.resampled,
        "shift_nm": found.shift_nm.map(number),
        "normal_nm": {
            "rms": number(found.normal_rms_nm),
            "mean": number(found.normal_mean_nm),
            "u": number(found.normal_u_nm),
        },
        "beyond_uncertainty": number(found.beyond),
        "apex_radius_nm": change(&found.radius),
        "half_angle_deg": change(&found.half_angle),
        "notes": found.notes,
    })
}

/// See [`super::comparison_text`].
pub fn comparison_text(found: &Comparison) -> String {
    let change = |c: &Option<Change>, unit: &str| match c {
        Some(c) => {
            let (difference, expanded) = with_u(c.difference, c.expanded(), unit);
            format!(
                "{} and {}: difference {difference}, U = {expanded} (k = {})",
                about(c.values[0], unit),
                about(c.values[1], unit),
                fixed(c.k, 2)
            )
        }
        None => "not known of both".to_owned(),
    };
    let mut rows = vec![
        ("apex radius", change(&found.radius, "nm")),
        ("half-angle", change(&found.half_angle, "deg")),
        (
            "surface",
            format!(
                "{} rms along the normal; mean {} (u = {}), positive = second blunter",
                about(found.normal_rms_nm, "nm"),
                about(found.normal_mean_nm, "nm"),
                about(found.normal_u_nm, "nm")
            ),
        ),
        (
            "beyond 2 u",
            format!(
                "{} of {} cells, compared to {} below the apex",
                percent(found.beyond),
                found.cells,
                about(found.depth_nm, "nm")
            ),
        ),
    ];
    let [x, y] = found.shift_nm;
    if x != 0.0 || y != 0.0 {
        rows.push(("shift", format!("{}, {}", about(x, "nm"), about(y, "nm"))));
    }
    if found.resampled {
        rows.push((
            "grid",
            format!(
                "pitch {} x {}: the finer tip was interpolated at the coarser one's cells",
                plain(found.pitch.x, "nm"),
                plain(found.pitch.y, "nm")
            ),
        ));
    }
    let mut text = format!("{}\n", found.verdict.words());
    lines(&mut text, &rows, &found.notes);
    text
}

fn lines(text: &mut String, rows: &[(&str, String)], notes: &[String]) {
    let wide = rows.iter().map(|r| r.0.chars().count()).max().unwrap_or(0);
    for (name, value) in rows {
        let _ = writeln!(text, "{name:wide$}  {value}");
    }
    for note in notes {
        let _ = writeln!(text, "- {}", tame(note));
    }
}

fn feature_json(feature: &Feature) -> Value {
    match *feature {
        Feature::Trench {
            width,
            depth,
            wall_angle,
        } => json!({"kind": "trench", "width_nm": width, "depth_nm": depth,
                    "wall_angle_deg": wall_angle}),
        Feature::Ridge {
            width,
            height,
            wall_angle,
        } => json!({"kind": "ridge", "width_nm": width, "height_nm": height,
                    "wall_angle_deg": wall_angle}),
        Feature::Grating {
            pitch,
            width,
            height,
            wall_angle,
        } => json!({"kind": "grating", "pitch_nm": pitch, "width_nm": width,
                    "height_nm": height, "wall_angle_deg": wall_angle}),
        Feature::Particle { diameter } => json!({"kind": "particle", "diameter_nm": diameter}),
    }
}

fn feature_words(feature: &Feature) -> String {
    let walls = |angle: f64| match angle {
        90.0 => "upright walls".to_owned(),
        angle => format!("walls of {}", plain(angle, "deg")),
    };
    match *feature {
        Feature::Trench {
            width,
            depth,
            wall_angle,
        } => format!(
            "trench {} wide, {} deep, {}",
            plain(width, "nm"),
            plain(depth, "nm"),
            walls(wall_angle)
        ),
        Feature::Ridge {
            width,
            height,
            wall_angle,
        } => format!(
            "ridge {} wide, {} high, {}",
            plain(width, "nm"),
            plain(height, "nm"),
            walls(wall_angle)
        ),
        Feature::Grating {
            pitch,
            width,
            height,
            wall_angle,
        } => format!(
            "grating of pitch {}, ridges {} wide, {} high, {}",
            plain(pitch, "nm"),
            plain(width, "nm"),
            plain(height, "nm"),
            walls(wall_angle)
        ),
        Feature::Particle { diameter } => format!("particle of diameter {}", plain(diameter, "nm")),
    }
}

/// See [`super::reach_json`].
pub fn reach_json(plan: &Plan) -> Value {
    let part = |reach: &Reach| {
        let widths: Vec<Value> = reach
            .widths
            .iter()
            .map(|w| {
                json!({"at": w.at, "width_nm": number(w.width_nm), "imaged_nm": number(w.imaged_nm),
                       "excess_nm": number(w.excess_nm())})
            })
            .collect();
        let t = reach.touched;
        json!({
            "imaged_nm": number(reach.imaged_nm),
            "lost_nm": number(reach.lost_nm()),
            "reaches_bottom": reach.reaches_bottom(),
            "widths": widths,
            "touched": {"whole": number(t.whole), "top": t.top.and_then(number),
                        "walls": t.walls.and_then(number), "floor": t.floor.and_then(number)},
        })
    };
    json!({
        "schema": "truewidth.reach/1",
        "program": env!("CARGO_PKG_VERSION"),
        "feature": feature_json(&plan.feature),
        "reach": part(&plan.reach),
        "sharper": plan.sharper.as_ref().map(part),
        "blunter": plan.blunter.as_ref().map(part),
        "bluntest": {
            "apex_radius_nm": plan.bluntest.radius_nm.and_then(number),
            "half_angle_deg": plan.bluntest.half_angle_deg.and_then(number),
            "reasons": plan.bluntest.reasons,
        },
        "cautions": plan.cautions,
    })
}

/// See [`super::reach_rows`].
pub fn reach_rows(plan: &Plan) -> (Vec<(String, String)>, Vec<String>) {
    let reach = &plan.reach;
    // The band's figures in brackets, the sharper tip's first.
    let band = |of: &dyn Fn(&Reach) -> String| match (&plan.sharper, &plan.blunter) {
        (None, None) => String::new(),
        (a, b) => {
            let side = |r: &Option<Reach>| r.as_ref().map_or_else(|| "open".to_owned(), of);
            format!(" (band: {} to {})", side(a), side(b))
        }
    };
    let depth = if reach.reaches_bottom() {
        format!("to the bottom, {}", about(reach.height_nm, "nm"))
    } else {
        format!(
            "{} of {}; {} are lost",
            about(reach.imaged_nm, "nm"),
            about(reach.height_nm, "nm"),
            about(reach.lost_nm(), "nm")
        )
    };
    let mut rows = vec![
        ("feature".to_owned(), feature_words(&plan.feature)),
        (
            "reach".to_owned(),
            depth + &band(&|r| about(r.imaged_nm, "nm")),
        ),
    ];
    for (i, w) in reach.widths.iter().enumerate() {
        let excess = |w: f64| format!("{}{}", if w > 0.0 { "+" } else { "" }, about(w, "nm"));
        rows.push((
            format!("width at {}", percent(w.at)),
            format!(
                "{} imaged as {}, {}{}",
                about(w.width_nm, "nm"),
                about(w.imaged_nm, "nm"),
                excess(w.excess_nm()),
                band(&|r| r
                    .widths
                    .get(i)
                    .map_or_else(String::new, |w| excess(w.excess_nm())))
            ),
        ));
    }
    let t = reach.touched;
    let parts: Vec<String> = [("top", t.top), ("walls", t.walls), ("floor", t.floor)]
        .into_iter()
        .filter_map(|(name, part)| Some(format!("{name} {}", percent(part?))))
        .collect();
    rows.push((
        "touched".to_owned(),
        format!("{} ({})", percent(t.whole), parts.join(", ")),
    ));
    if let Some(r) = plan.bluntest.radius_nm {
        rows.push((
            "bluntest".to_owned(),
            format!("apex radius {} at the tip's half-angle", about(r, "nm")),
        ));
    }
    if let Some(a) = plan.bluntest.half_angle_deg {
        rows.push((
            "bluntest".to_owned(),
            format!("half-angle {} at the tip's radius", about(a, "deg")),
        ));
    }
    let notes: Vec<String> = [&plan.bluntest.reasons[..], &plan.cautions[..]].concat();
    (rows, notes)
}

/// See [`super::reach_text`].
pub fn reach_text(plan: &Plan) -> String {
    let (rows, notes) = reach_rows(plan);
    let rows: Vec<(&str, String)> = rows.iter().map(|(n, v)| (n.as_str(), v.clone())).collect();
    let mut text = String::new();
    lines(&mut text, &rows, &notes);
    text
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;
    use crate::tip::compare::{Settings, Side, compare};
    use crate::tip::model::Model;
    use crate::tip::reach::{Known, Need, Probe, plan};
    use crate::tip::read_out::read_out;

    #[test]
    fn a_plan_says_what_is_lost_and_what_would_do() {
        let known = Known {
            probe: Probe::Formula(Model::SphereCone {
                radius: 10.0,
                half_angle: 15.0,
            }),
            band: None,
            exercised_depth_nm: Some(5.0),
            radius_nm: Some(10.0),
            half_angle_deg: Some(15.0),
        };
        let feature = Feature::Trench {
            width: 19.0,
            depth: 40.0,
            wall_angle: 90.0,
        };
        let need = Need {
            excess_nm: None,
            at: 0.5,
        };
        let plan = plan(&known, &feature, &[0.5], &need).unwrap();
        let text = reach_text(&plan);
        assert!(
            text.contains("6.88 nm of 40 nm; 33.1 nm are lost"),
            "{text}"
        );
        assert!(text.contains("even a sharp tip does not"), "{text}");
        assert!(text.contains("tested the tip to 5.00 nm only"), "{text}");
        let value = reach_json(&plan);
        assert_eq!(value["feature"]["kind"], "trench");
        assert_eq!(value["reach"]["reaches_bottom"], false);
        assert!(value["bluntest"]["apex_radius_nm"].is_null());
        assert_eq!(
            value["bluntest"]["half_angle_deg"].as_f64().map(f64::round),
            None
        );
    }

    #[test]
    fn a_comparison_says_its_verdict_in_words_and_for_machines() {
        let tip = |radius| {
            Model::SphereCone {
                radius,
                half_angle: 15.0,
            }
            .sample(41.0, Pitch::square(1.0))
            .unwrap()
        };
        let (a, b) = (tip(8.0), tip(11.0));
        let (ra, rb) = (read_out(&a, 40.0, 0.05), read_out(&b, 40.0, 0.05));
        let side = |tip, read_out| Side {
            tip,
            band: None,
            height_u_nm: 0.05,
            known_depth_nm: None,
            read_out,
        };
        let found = compare(&side(&a, &ra), &side(&b, &rb), &Settings::default()).unwrap();
        let text = comparison_text(&found);
        assert!(text.starts_with("Worn:"), "{text}");
        assert!(text.contains("8 nm and 11 nm: difference 3.0"), "{text}");
        let value = comparison_json(&found);
        assert_eq!(value["verdict"], "worn");
        assert!(value["apex_radius_nm"]["U"].as_f64().unwrap() > 0.0);
    }
}
