//! Histograms of the particles listed: a figure of the report.

use super::format::about;
use super::report::dimensions;
use super::svg::{Axis, counting_frame, open, text, xy};
use crate::dimensions::{Kind, ParticleHistogram, particle_histograms, request_of};
use crate::job::{Job, Outcome};
use std::fmt::Write;

const WIDE: f64 = 290.0;
const HIGH: f64 = 150.0;
const LEFT: f64 = 58.0;
const TOP: f64 = 34.0;

/// Name of each request for particles and its figure, where there are enough of them.
pub fn particle_figures<'a>(
    job: &'a Job,
    outcome: &'a Outcome,
) -> impl Iterator<Item = (&'a str, String)> {
    let requests = &job.file.dimensions;
    let particles = requests.iter().enumerate();
    particles
        .filter(|(_, r)| r.kind == Kind::Particle)
        .filter_map(move |(i, request)| {
            let mine: Vec<_> = dimensions(outcome)
                .filter(|l| request_of(requests, l) == Some(i))
                .collect();
            let histograms = particle_histograms(&mine);
            (!histograms.is_empty()).then(|| (request.name.as_str(), drawing(&histograms)))
        })
}

fn drawing(histograms: &[ParticleHistogram]) -> String {
    let each = LEFT + WIDE + 20.0;
    let says: Vec<String> = histograms.iter().map(words).collect();
    let width = each * histograms.len() as f64;
    let mut svg = open(width, TOP + HIGH + 48.0, &says.join(" "));
    for (i, histogram) in histograms.iter().enumerate() {
        bars(&mut svg, histogram, i as f64 * each + LEFT);
    }
    svg.push_str("</svg>");
    svg
}

fn bars(svg: &mut String, histogram: &ParticleHistogram, left: f64) {
    let bins = histogram.corrected.len();
    let end = histogram.bin(bins.saturating_sub(1))[2];
    let counts = histogram.corrected.iter().chain(&histogram.as_scanned);
    let most = counts.copied().max().unwrap_or(0).max(1) as f64;
    let x = Axis {
        low: histogram.from,
        high: end,
        from: left,
        to: left + WIDE,
    };
    let y = Axis {
        low: 0.0,
        high: 1.08 * most,
        from: TOP + HIGH,
        to: TOP,
    };
    for (class, counts) in [
        ("column corrected", &histogram.corrected),
        ("column scanned", &histogram.as_scanned),
    ] {
        for (i, n) in counts.iter().enumerate().filter(|c| *c.1 > 0) {
            let [from, _, to] = histogram.bin(i).map(|v| x.at(v));
            let top = y.at(*n as f64);
            let _ = write!(
                svg,
                r#"<rect class="{class}" x="{}" y="{}" width="{}" height="{}"/>"#,
                xy(from),
                xy(top),
                xy(to - from),
                xy(TOP + HIGH - top)
            );
        }
    }
    counting_frame(svg, x, y, &histogram.quantity, "particles");
    let title = match histogram.quantity.as_str() {
        "height" => "heights",
        _ => "diameters",
    };
    text(svg, "title", left, 24.0, title);
}

/// See [`super::histogram_words`].
pub fn words(histogram: &ParticleHistogram) -> String {
    let bins = (0..histogram.corrected.len()).map(|i| {
        let [low, _, high] = histogram.bin(i);
        format!(
            "{} to {}: {} as scanned, {} corrected",
            about(low, histogram.unit),
            about(high, histogram.unit),
            histogram.as_scanned[i],
            histogram.corrected[i]
        )
    });
    let bins: Vec<String> = bins.collect();
    format!("Histogram of {}s. {}.", histogram.quantity, bins.join("; "))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::dimensions::{Dimension, Request, Value};
    use std::path::Path;
    use std::sync::Arc;

    fn height(name: String, value: f64) -> Dimension {
        Dimension {
            name,
            kind: Kind::Particle,
            quantity: "height".to_owned(),
            at: None,
            unit: "nm",
            as_scanned: Some(Value {
                value,
                u: Some(0.1),
            }),
            corrected: None,
            status: None,
            flags: Vec::new(),
            budget: Vec::new(),
            evidence: Default::default(),
            assumptions: "",
            marks: Vec::new(),
        }
    }

    #[test]
    fn each_request_has_its_own_figure_and_too_few_have_none() {
        let mut job = Job::on_scan(Path::new("a.tiff"));
        for name in ["left", "right"] {
            job.file.dimensions.push(Request::new(name, Kind::Particle));
        }
        let left = (0..10).map(|i| height(format!("left {}", i + 1), 20.0 + f64::from(i)));
        let right = [height("right".to_owned(), 50.0)];
        let outcome = Outcome {
            dimensions: Some(Arc::new(left.chain(right).collect())),
            ..Outcome::default()
        };
        let figures: Vec<_> = particle_figures(&job, &outcome).collect();
        assert_eq!(figures.len(), 1);
        assert_eq!(figures[0].0, "left");
        // 2 IQR n^(-1/3) = 2 * 5 / 2.15 = 4.6: bins of 5 nm, [20, 25) and [25, 30).
        let drawing = &figures[0].1;
        assert_eq!(drawing.matches("column scanned").count(), 2);
        assert_eq!(drawing.matches("column corrected").count(), 0);
        assert!(
            drawing.contains("20 nm to 25 nm: 5 as scanned, 0 corrected"),
            "{drawing}"
        );
    }
}
