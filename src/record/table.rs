//! Results as text for a terminal.

use super::format::{Line, about, numbered_flags, numbers, percent, plain, tame, with_u};
use super::known;
use crate::job::{Job, Outcome, TipFrom, TipResult};
use std::fmt::Write;

/// The results, as scanned and corrected side by side, aligned in columns: see
/// [`super::text_table`].
pub fn results(job: &Job, outcome: &Outcome) -> String {
    let mut text = String::new();
    let file = tame(&job.file.scan.file.to_string_lossy());
    let title = tame(&job.file.title);
    // Writing to a String cannot fail.
    let _ = match title.trim() {
        "" => writeln!(text, "{file}"),
        title => writeln!(text, "{title}  ({file})"),
    };
    match outcome.tip.as_deref() {
        Some(tip) => {
            let _ = writeln!(text, "Tip: {}", tip_line(tip));
        }
        None => text.push_str("Tip: none, so nothing is corrected\n"),
    }
    if let Some(surface) = outcome.surface.as_deref() {
        let r = surface.reliability;
        let _ = writeln!(
            text,
            "Surface: {} touched, {} bounded, {} never reached",
            percent(r.touched),
            percent(r.bounded),
            percent(r.never)
        );
    }
    let dimensions = outcome.dimensions.as_deref().map_or(&[][..], Vec::as_slice);
    let (flags, carried) = numbered_flags(dimensions);
    text.push('\n');
    if dimensions.is_empty() {
        text.push_str("No dimension was asked for.\n");
    } else {
        let lines: Vec<Line> = dimensions.iter().map(Line::of).collect();
        let carried: Vec<String> = carried.iter().map(|c| numbers(c)).collect();
        text.push_str(&aligned(&lines, &carried));
    }
    if !flags.is_empty() {
        text.push_str("\nFlags\n");
        for (i, flag) in flags.iter().enumerate() {
            let _ = writeln!(text, "{:>2}  {flag}", i + 1);
        }
    }
    if !outcome.warnings.is_empty() {
        text.push_str("\nMind\n");
        for warning in &outcome.warnings {
            let _ = writeln!(text, "- {}", tame(warning));
        }
    }
    text
}

fn aligned(lines: &[Line], flags: &[String]) -> String {
    const HEAD: [&str; 9] = [
        "Dimension",
        "Quantity",
        "As scanned",
        "Corrected",
        "U",
        "k",
        "95 % interval",
        "Status",
        "Flags",
    ];
    let rows: Vec<[&str; 9]> = std::iter::once(HEAD)
        .chain(lines.iter().zip(flags).map(|(l, flags)| {
            [
                l.name.as_str(),
                &l.quantity,
                &l.as_scanned,
                &l.corrected,
                &l.expanded,
                &l.k,
                &l.interval,
                l.status,
                flags,
            ]
        }))
        .collect();
    let widths: [usize; 9] = std::array::from_fn(|column| {
        rows.iter()
            .map(|row| row[column].chars().count())
            .max()
            .unwrap_or(0)
    });
    let mut text = String::new();
    for (i, row) in rows.iter().enumerate() {
        let mut line = String::new();
        for (column, (cell, width)) in row.iter().zip(widths).enumerate() {
            // Numbers to the right, words to the left.
            let _ = match column {
                2..=6 => write!(line, "{cell:>width$}  "),
                _ => write!(line, "{cell:<width$}  "),
            };
        }
        let _ = writeln!(text, "{}", line.trim_end());
        if i == 0 {
            let whole = widths.iter().sum::<usize>() + 2 * (widths.len() - 1);
            let _ = writeln!(text, "{}", "-".repeat(whole));
        }
    }
    text
}

/// Where a tip comes from, in words.
pub fn origin(from: TipFrom) -> &'static str {
    match from {
        TipFrom::Blind => "estimated blind from the scan",
        TipFrom::KnownShape => "from a characterizer of known shape",
        TipFrom::Model => "a model",
        TipFrom::File => "from a file",
    }
}

/// Apex radius with its uncertainty and fit depth in words, or that there is none.
pub fn radius_words(tip: &TipResult) -> String {
    match tip.read_out.apex_radius {
        Some(r) => {
            let (value, u) = with_u(r.value, r.u, "nm");
            format!(
                "apex radius {value} (u = {u}, fitted over {} below the apex)",
                about(r.fit_depth_nm, "nm")
            )
        }
        None => "apex radius not identified".to_owned(),
    }
}

/// Half-angle with its uncertainty in words, or that there is none.
pub fn angle_words(tip: &TipResult) -> String {
    match &tip.read_out.half_angle {
        Some(a) => {
            let (value, u) = with_u(a.value, a.u, "deg");
            format!(
                "half-angle {value} (u = {u}, between {} and {} below the apex)",
                about(a.between_nm[0], "nm"),
                about(a.between_nm[1], "nm")
            )
        }
        None => "half-angle not identified".to_owned(),
    }
}

fn tip_line(tip: &TipResult) -> String {
    let mut text = format!(
        "{}; {}; {}",
        origin(tip.from),
        radius_words(tip),
        angle_words(tip)
    );
    if let Some(depth) = tip.exercised_depth_nm {
        let _ = write!(text, "; exercised to {}", about(depth, "nm"));
    }
    text
}

/// A tip's read-outs and diagnosis: see [`super::tip_text`].
pub fn tip(tip: &TipResult) -> String {
    let mut rows = vec![
        ("from", origin(tip.from).to_owned()),
        ("apex", radius_words(tip)),
        ("flank", angle_words(tip)),
    ];
    if let Some(depth) = tip.exercised_depth_nm {
        rows.push(("depth", format!("exercised to {}", about(depth, "nm"))));
    }
    rows.push((
        "heights",
        format!("known to u = {}", about(tip.height_u_nm, "nm")),
    ));
    let [width, length] = tip.tip.support_nm();
    rows.push((
        "grid",
        format!("{} x {}", plain(width, "nm"), plain(length, "nm")),
    ));
    if let Some(estimate) = &tip.estimate {
        rows.push(("threshold", about(estimate.threshold_nm, "nm")));
    }
    let both_ways = known::rows(tip);
    rows.extend(both_ways.iter().map(|(name, text)| (*name, text.clone())));
    let mut text = String::new();
    let wide = rows.iter().map(|r| r.0.chars().count()).max();
    let wide = wide.unwrap_or(0).max(9);
    for (name, value) in rows {
        let _ = writeln!(text, "{:wide$}  {value}", name.to_lowercase());
    }
    for finding in &tip.diagnosis {
        let _ = writeln!(text, "- {}", tame(finding));
    }
    text
}
