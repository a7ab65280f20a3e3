//! report.html: one file, no reference outside it, no script; well-formed as XML.

use super::format::{about, decimals_of, fixed, percent, plain};
use super::known;
use super::maps::{height_maps, reduction_note, reliability_map};
use super::particles::particle_figures;
use super::results::{budgets, evidence, greatest_change, results};
use super::sections::{Section, surface_section, tip_figure};
use super::svg::{escape, minus};
use super::table::{angle_words, origin, radius_words};
use super::tip_shape;
use crate::dimensions::{Dimension, Status};
use crate::error::Result;
use crate::heightmap::HeightMap;
use crate::job::{Further, Job, Outcome, Pairs, TipFrom, TipResult};
use crate::leveling::pair::Pair;
use std::fmt::Write;

/// The page; `time` is the time stamp it carries.
pub fn page(job: &Job, outcome: &Outcome, time: &str) -> Result<String> {
    let file = job.file.scan.file.to_string_lossy();
    let title = match job.file.title.trim() {
        "" => escape(&file),
        title => escape(title),
    };
    let mut html = format!(
        "<!DOCTYPE html>\n<html xmlns=\"http://www.w3.org/1999/xhtml\" lang=\"en\">\n<head>\n\
         <meta charset=\"utf-8\" />\n\
         <meta name=\"viewport\" content=\"width=device-width, initial-scale=1\" />\n\
         <title>{title}</title>\n<style>\n{}</style>\n</head>\n<body>\n<header>\n<h1>{title}</h1>\n\
         <p class=\"quiet\">Dimensions as scanned and corrected for the finite probe tip. \
         truewidth {}, written\n{}\n</p>\n</header>\n<main>\n",
        include_str!("style.css"),
        env!("CARGO_PKG_VERSION"),
        escape(time),
    );
    summary(&mut html, outcome);
    results(&mut html, outcome);
    evidence(&mut html, outcome);
    inputs(&mut html, job, outcome);
    steps(&mut html, job, outcome);
    figures(&mut html, job, outcome)?;
    particles(&mut html, job, outcome);
    tip_section(&mut html, outcome)?;
    budgets(&mut html, outcome);
    settings(&mut html, job);
    cautions(&mut html, job, outcome);
    html.push_str("</main>\n</body>\n</html>\n");
    Ok(html)
}

/// All results of `outcome`.
pub fn dimensions(outcome: &Outcome) -> impl Iterator<Item = &Dimension> {
    outcome.dimensions.iter().flat_map(|all| all.iter())
}

/// A list of that tag; `items` are already escaped.
pub fn list(html: &mut String, tag: &str, items: impl IntoIterator<Item = String>) {
    let _ = writeln!(html, "<{tag}>");
    for item in items {
        let _ = writeln!(html, "<li>{item}</li>");
    }
    let _ = writeln!(html, "</{}>", tag.split(' ').next().unwrap_or(tag));
}

fn summary(html: &mut String, outcome: &Outcome) {
    let count = |status| dimensions(outcome).filter(|d| d.status == status).count();
    let (touched, bounded, none) = (
        count(Some(Status::Touched)),
        count(Some(Status::Bounded)),
        count(None),
    );
    html.push_str("<section class=\"summary\" aria-label=\"Summary\">\n");
    let mut items = Vec::new();
    if touched + bounded + none > 0 {
        let mut parts = Vec::new();
        for (n, what) in [
            (
                touched,
                "touched: the tip reached the points the value rests on",
            ),
            (
                bounded,
                "bounded: the tip did not reach them, the interval holds the value",
            ),
            (none, "without a corrected value"),
        ] {
            if n > 0 {
                parts.push(format!("<strong>{n}</strong> {what}"));
            }
        }
        items.push(format!("Results: {}.", parts.join("; ")));
    } else {
        items.push("No dimension was asked for.".to_owned());
    }
    items.extend(greatest_change(outcome));
    match outcome.tip.as_deref() {
        Some(tip) => items.push(format!(
            "Tip: {}; {}; {}.",
            origin(tip.from),
            radius_words(tip),
            angle_words(tip)
        )),
        None => items.push("There is no tip, so nothing is corrected.".to_owned()),
    }
    if let Some(surface) = outcome.surface.as_deref() {
        let r = surface.reliability;
        items.push(format!(
            "Surface: {} touched for certain, {} bounded, {} never reached.",
            percent(r.touched),
            percent(r.bounded),
            percent(r.never)
        ));
    }
    list(html, "ul", items);
    if !outcome.warnings.is_empty() {
        html.push_str("<p><strong>Mind:</strong></p>\n");
        list(html, "ul", outcome.warnings.iter().map(|w| escape(w)));
    }
    html.push_str("</section>\n");
}

fn facts(html: &mut String, rows: &[(&str, String)]) {
    html.push_str("<table class=\"facts\">\n<tbody>\n");
    for (name, value) in rows {
        let _ = writeln!(
            html,
            "<tr><th scope=\"row\">{name}</th><td>{value}</td></tr>"
        );
    }
    html.push_str("</tbody>\n</table>\n");
}

fn hash(name: &str, sha256: Option<&str>) -> String {
    match sha256 {
        Some(sum) => format!(
            "{}<br /><span class=\"hash\">SHA-256 {}</span>",
            escape(name),
            escape(sum)
        ),
        None => format!(
            "{}<br /><span class=\"quiet\">no SHA-256</span>",
            escape(name)
        ),
    }
}

fn inputs(html: &mut String, job: &Job, outcome: &Outcome) {
    html.push_str("<section>\n<h2>Inputs</h2>\n");
    let scan = outcome.scan.as_deref();
    let name = job.file.scan.file.to_string_lossy();
    let mut rows = vec![(
        "Scan",
        hash(&name, scan.and_then(|s| s.provenance().sha256.as_deref())),
    )];
    let job_name = job.path.as_deref().and_then(std::path::Path::file_name);
    rows.push((
        "Job",
        match job_name {
            Some(name) => hash(&name.to_string_lossy(), job.sha256.as_deref()),
            None => "not from a file; its settings are below".to_owned(),
        },
    ));
    if let (TipFrom::File, Some(file)) = (job.file.tip.from, &job.file.tip.file) {
        let sum = outcome.tip.as_deref().and_then(|t| t.sha256.as_deref());
        rows.push(("Tip file", hash(&file.to_string_lossy(), sum)));
    }
    if let Some(scan) = scan {
        rows.extend(scan_facts(scan));
    }
    if let Some(level) = outcome.level.as_deref() {
        rows.push((
            "Noise",
            match level.noise_nm {
                Some(noise) => format!(
                    "{}, standard deviation of its white part",
                    about(noise, "nm")
                ),
                None => "could not be measured".to_owned(),
            },
        ));
        if let Some(drift) = level.drift_nm {
            rows.push((
                "Drift along y",
                format!("{} peak to peak", about(drift, "nm")),
            ));
        }
        if !level.row_jumps.is_empty() {
            rows.push(("Rows that jump", level.row_jumps.len().to_string()));
        }
    }
    rows.extend(scanner_facts(outcome));
    rows.push((
        "Calibration",
        match job.file.calibration {
            Some(c) => format!(
                "relative standard uncertainty x {}, y {}, z {}",
                percent(c.x),
                percent(c.y),
                percent(c.z)
            ),
            None => "<strong>not stated</strong>: no calibration uncertainty is in the results"
                .to_owned(),
        },
    ));
    facts(html, &rows);
    html.push_str("</section>\n");
}

/// What further scans told of the scanner, or that there are none.
fn scanner_facts(outcome: &Outcome) -> Vec<(&'static str, String)> {
    let further = |which: fn(&Pairs) -> Option<&Further>| outcome.pairs.as_deref().and_then(which);
    let told = |further: Option<&Further>, key: &str, of: &dyn Fn(&Pair) -> String| match further {
        None => format!("<strong>not stated</strong>: no [scan] {key}, none of it in the results"),
        Some(f) => {
            let figures = match &f.pair {
                Some(pair) => of(pair),
                None => "does not show the same as the scan".to_owned(),
            };
            format!(
                "{figures}<br />{}",
                hash(&f.file.to_string_lossy(), f.sha256.as_deref())
            )
        }
    };
    let shift = |s: Option<f64>| s.map_or("not told".to_owned(), |s| about(s, "nm"));
    vec![
        (
            "Trace and retrace",
            told(further(|p| p.retrace.as_ref()), "retrace", &|p| {
                format!(
                    "shift along x {}, height difference {}",
                    shift(p.shift_nm[0]),
                    about(p.height_nm, "nm")
                )
            }),
        ),
        (
            "Drift in the time of a scan",
            told(further(|p| p.second.as_ref()), "second", &|p| {
                format!("x {}, y {}", shift(p.shift_nm[0]), shift(p.shift_nm[1]))
            }),
        ),
    ]
}

fn scan_facts(scan: &HeightMap) -> Vec<(&'static str, String)> {
    let pitch = scan.pitch();
    let mut rows = vec![
        (
            "Grid",
            format!(
                "{} × {} pixels, {} × {}",
                scan.columns(),
                scan.rows(),
                plain(scan.width_nm(), "nm"),
                plain(scan.length_nm(), "nm")
            ),
        ),
        (
            "Pixel pitch",
            format!(
                "{} along x, {} along y",
                plain(pitch.x, "nm"),
                plain(pitch.y, "nm")
            ),
        ),
    ];
    let source = &scan.provenance().scale_source;
    if !source.is_empty() {
        rows.push(("Scale from", escape(source)));
    }
    if let Some((low, high)) = scan.range() {
        rows.push((
            "Heights in the file",
            minus(&plain(f64::from(low), "nm")) + " to " + &minus(&plain(f64::from(high), "nm")),
        ));
    }
    let voids = scan.void_count();
    let all = (scan.rows() * scan.columns()) as f64;
    rows.push((
        "Voids",
        match voids {
            0 => "none".to_owned(),
            n => format!("{n} pixels, {}", percent(n as f64 / all)),
        },
    ));
    rows
}

fn steps(html: &mut String, job: &Job, outcome: &Outcome) {
    html.push_str("<section>\n<h2>What was done, in order</h2>\n");
    let mut done = Vec::new();
    let mut told = 0;
    let mut tell = |map: &HeightMap, done: &mut Vec<String>| {
        let steps = &map.provenance().steps;
        done.extend(steps.iter().skip(told).map(|s| escape(s)));
        told = told.max(steps.len());
    };
    if let Some(scan) = outcome.scan.as_deref() {
        done.push(format!(
            "scan opened: {}",
            escape(&job.file.scan.file.to_string_lossy())
        ));
        tell(scan, &mut done);
    }
    if let Some(level) = outcome.level.as_deref() {
        tell(&level.map, &mut done);
    }
    if let Some(tip) = outcome.tip.as_deref() {
        let [w, h] = tip.tip.support_nm();
        let mut text = format!(
            "tip: {}, on a grid of {} × {}",
            origin(tip.from),
            plain(w, "nm"),
            plain(h, "nm")
        );
        if let Some(estimate) = &tip.estimate {
            let _ = write!(
                text,
                ", threshold {}, smoothing {} pixels",
                about(estimate.threshold_nm, "nm"),
                fixed(estimate.smoothing_px, 2)
            );
        }
        done.push(text);
    }
    if let Some(surface) = outcome.surface.as_deref() {
        tell(&surface.surface, &mut done);
        done.push(format!(
            "contacts searched with a tolerance of {}",
            about(surface.tolerance_nm, "nm")
        ));
    }
    if let Some(all) = outcome.dimensions.as_deref() {
        done.push(match all.len() {
            1 => "1 result measured on both maps".to_owned(),
            n => format!("{n} results measured on both maps"),
        });
    }
    list(html, "ol", done);
    html.push_str("</section>\n");
}

fn figure(html: &mut String, drawing: &str, caption: &str) {
    let _ = writeln!(
        html,
        "<figure>\n{drawing}\n<figcaption>{caption}</figcaption>\n</figure>"
    );
}

/// Heights and diameters of the particles listed, one figure for each request.
fn particles(html: &mut String, job: &Job, outcome: &Outcome) {
    let drawn: Vec<_> = particle_figures(job, outcome).collect();
    if drawn.is_empty() {
        return;
    }
    html.push_str("<section>\n<h2>Particles</h2>\n");
    for (name, drawing) in drawn {
        let caption = format!(
            "{}: particles listed one by one. Filled: corrected. Dashed: as scanned.",
            escape(name)
        );
        figure(html, &drawing, &caption);
    }
    html.push_str("</section>\n");
}

fn figures(html: &mut String, job: &Job, outcome: &Outcome) -> Result<()> {
    html.push_str("<section>\n<h2>Maps</h2>\n");
    let section = Section::choose(job, outcome);
    match height_maps(outcome, section.as_ref())? {
        Some(drawing) => {
            let mut caption = String::from(
                "Heights above the base plane, all maps on one colour scale over their full range. ",
            );
            if outcome.surface.is_none() {
                caption.push_str("There is no corrected map because there is no tip. ");
            }
            if dimensions(outcome).any(|d| !d.marks.is_empty()) {
                caption.push_str("Dark lines: where the dimensions were taken. ");
            }
            if section.is_some() {
                caption.push_str("Dashed: the section below. ");
            }
            let maps = [
                outcome.level.as_deref().map(|l| &l.map),
                outcome.surface.as_deref().map(|s| &s.surface),
            ];
            if maps.into_iter().flatten().any(|m| m.void_count() > 0) {
                caption.push_str("Hatched: voids. ");
            }
            if let Some(level) = outcome.level.as_deref() {
                caption.push_str(&reduction_note(&level.map).unwrap_or_default());
            }
            figure(html, &drawing, &caption);
        }
        None => html.push_str("<p>There is no height to draw.</p>\n"),
    }
    if let Some(section) = section
        && let Some(drawing) = surface_section(outcome, &section)
    {
        let mut caption = format!("Section {}. Heights are stretched.", escape(&section.place));
        if outcome.surface.is_some() {
            caption.push_str(
                " Strip below: what the tip did there, plain touched, hatched bounded, \
                 cross-hatched never, dotted void.",
            );
        }
        figure(html, &drawing, &caption);
    }
    html.push_str("</section>\n");
    if let Some(surface) = outcome.surface.as_deref() {
        html.push_str("<section>\n<h2>Reliability</h2>\n");
        let leaning = surface.edge_leaning.iter().filter(|&&e| e).count() as f64
            / surface.edge_leaning.len().max(1) as f64;
        let caption = format!(
            "What the tip did to each point of the corrected map, with a contact tolerance of {}. \
             {} of the pixels lean on the edge of the scan or on voids.",
            about(surface.tolerance_nm, "nm"),
            percent(leaning)
        );
        figure(html, &reliability_map(surface)?, &caption);
        html.push_str("</section>\n");
    }
    Ok(())
}

fn tip_section(html: &mut String, outcome: &Outcome) -> Result<()> {
    html.push_str("<section>\n<h2>Tip</h2>\n");
    let Some(tip) = outcome.tip.as_deref() else {
        html.push_str("<p>None: the summary says why. No value is corrected.</p>\n</section>\n");
        return Ok(());
    };
    let mut caption = String::from("The tip, apex up, as it enters the correction. ");
    match &tip.band {
        Some(_) => caption.push_str("Shaded: the band between the sharper and the blunter tip. "),
        None => caption.push_str("No band could be had. "),
    }
    if tip.exercised_depth_nm.is_some_and(|d| d > 0.0) {
        caption.push_str(
            "Dotted: the exercised depth; below it nothing tested the tip, and the drawing ends at \
             1.6 times that depth. ",
        );
    }
    if tip.tip.shape().iter().any(|p| p.is_infinite()) {
        caption.push_str("Hatched: outside the tip.");
    }
    figure(html, &tip_figure(tip)?, &caption);
    facts(html, &tip_facts(tip));
    tip_shape::table(html, tip);
    if !tip.diagnosis.is_empty() {
        html.push_str("<h3>Diagnosis</h3>\n");
        list(html, "ul", tip.diagnosis.iter().map(|d| escape(d)));
    }
    html.push_str("</section>\n");
    Ok(())
}

fn tip_facts(tip: &TipResult) -> Vec<(&'static str, String)> {
    let mut rows = vec![
        ("From", origin(tip.from).to_owned()),
        ("Apex", escape(&radius_words(tip))),
    ];
    if let Some(r) = tip.read_out.apex_radius {
        rows.push((
            "Principal radii",
            format!(
                "{} and {}",
                about(r.principal_nm[0], "nm"),
                about(r.principal_nm[1], "nm")
            ),
        ));
    }
    rows.push(("Flank", escape(&angle_words(tip))));
    if let Some(a) = &tip.read_out.half_angle
        && !a.per_azimuth.is_empty()
    {
        let quarter: Vec<String> = [(0.0, "+x"), (90.0, "+y"), (180.0, "−x"), (270.0, "−y")]
            .into_iter()
            .filter_map(|(azimuth, name)| {
                let (_, angle) = a.per_azimuth.iter().find(|p| (p.0 - azimuth).abs() < 1.0)?;
                let decimals = decimals_of(a.u).unwrap_or(1).clamp(0, 2);
                Some(format!("{name} {}°", fixed(*angle, decimals)))
            })
            .collect();
        if !quarter.is_empty() {
            rows.push(("Half-angle towards", quarter.join(", ")));
        }
    }
    rows.extend(tip_shape::facts(tip));
    let both_ways = known::rows(tip).into_iter();
    rows.extend(both_ways.map(|(name, text)| (name, escape(&minus(&text)))));
    rows.push((
        "Exercised depth",
        match tip.exercised_depth_nm {
            Some(depth) if depth > 0.0 => about(depth, "nm"),
            Some(_) => "none: no feature tested the tip".to_owned(),
            None => "does not apply: the tip was given".to_owned(),
        },
    ));
    rows.push((
        "Heights",
        match tip.height_u_nm {
            u if u > 0.0 => format!("standard uncertainty {}", about(u, "nm")),
            _ => "no uncertainty stated".to_owned(),
        },
    ));
    rows.push((
        "Corrected values",
        if tip.identified {
            "allowed: the tip is identified".to_owned()
        } else {
            "not allowed: the tip is not identified, only bounds are given".to_owned()
        },
    ));
    rows
}

fn settings(html: &mut String, job: &Job) {
    html.push_str(
        "<section>\n<h2>Settings</h2>\n<p class=\"quiet\">The job in full; with the scan it \
         reproduces this record.</p>\n<pre>",
    );
    // Line by line: taming the text as a whole would take its line breaks.
    let text = job
        .file
        .to_toml()
        .unwrap_or_else(|e| format!("the job cannot be written: {e}"));
    for line in text.lines() {
        let _ = writeln!(html, "{}", escape(line));
    }
    html.push_str("</pre>\n");
    html.push_str("</section>\n");
}

fn cautions(html: &mut String, job: &Job, outcome: &Outcome) {
    let mut items = vec![
        "The correction holds for a rigid tip and a rigid surface in light contact. Deformation, \
         attraction, feedback overshoot and slopes the scanner cannot follow are not taken off."
            .to_owned(),
        "The scan shows no undercut: a wall that leans over is drawn vertical at its widest."
            .to_owned(),
        "Where a point is bounded or never reached, the corrected map is an upper bound of the \
         surface, not the surface."
            .to_owned(),
    ];
    match outcome.tip.as_deref().map(|t| t.from) {
        Some(TipFrom::Blind) => items.push(
            "A tip estimated from the scan is the bluntest one the scan allows: it contains the \
             radius of the sharpest feature, so that corrected ridges tend to be narrow and trenches \
             wide; the interval allows for it as far as the budget says."
                .to_owned(),
        ),
        Some(TipFrom::KnownShape) => items.push(
            "The tip comes from a scan of a shape taken as certified: errors of the certificate \
             beyond its stated uncertainties are errors of the tip. A tip wears between scans."
                .to_owned(),
        ),
        Some(TipFrom::Model | TipFrom::File) => items.push(
            "The tip was given. Nothing in this record proves that it is the tip that scanned; a tip \
             wears."
                .to_owned(),
        ),
        None => {}
    }
    if job.file.calibration.is_none() {
        items.push(
            "<strong>No calibration uncertainty of the axes was stated.</strong> The uncertainties \
             lack it; no value here is traceable to the metre."
                .to_owned(),
        );
    } else {
        items.push(
            "The calibration uncertainties are as stated in the job; this program has not checked \
             them."
                .to_owned(),
        );
    }
    items.push(
        "This record does not replace a calibrated instrument, the local procedures for its use, or \
         accredited practice. Check the flags and the budgets before a value is signed."
            .to_owned(),
    );
    html.push_str("<section>\n<h2>Cautions</h2>\n");
    list(html, "ul", items);
    html.push_str("</section>\n");
}
