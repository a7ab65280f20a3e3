//! What is fitted: the mean cross-section of a region, the form that stands in it, and a start.

use super::form::*;
use super::profile::{Section, Silhouette};
use crate::dimensions::sections::{self, Frame, Layout};
use crate::dimensions::statistics;
use crate::dimensions::{Corrected, Dimension, Input, Kind, Request};

/// Mean cross-section of the scan: positions across the line, heights, and their doubts, nm.
pub(super) struct Data {
    pub x: Vec<f64>,
    pub z: Vec<f64>,
    pub u: Vec<f64>,
    pub span: [f64; 2],
}

impl Data {
    /// Adds to each doubt what the tip's grid leaves open there: the difference between the scans
    /// by the curved and by the straight tip. A flank that is straight makes the curve err by it.
    pub(super) fn doubt_grid(&mut self, curved: &Section, tips: [&Silhouette; 2]) {
        let scanned = tips.map(|tip| curved.scanned_by(tip));
        for (u, &x) in self.u.iter_mut().zip(&self.x) {
            let [a, b] = [scanned[0].at(x), scanned[1].at(x)];
            if (a - b).is_finite() {
                *u = u.hypot(a - b);
            }
        }
    }
}

/// The form, the mean cross-section and the start of the fit; or why there is none.
pub(super) fn prepare(
    input: &Input,
    corrected: &Corrected,
    request: &Request,
    frame: &Frame,
    lines: &[Dimension],
) -> std::result::Result<(Form, Data, Parameters), String> {
    let scan = frame.of(input.scan);
    let layout = Layout::find(scan, frame.noise)?;
    // The start is read off the reconstruction, which stands nearer to the truth.
    let surface = Layout::find(frame.of(corrected.surface), frame.noise)?;
    let single = lines.iter().any(|l| l.quantity.contains("beside one edge"));
    let (form, first, last) = match (request.kind, layout.central_pair()) {
        (Kind::Pitch, _) => {
            if layout.edges.len() < 4 {
                return Err("fewer than two periods".to_owned());
            }
            let edges = &layout.edges;
            let lead = i32::from(!edges[0].rising);
            let whole = edges.iter().filter(|e| e.rising).count() as i32;
            let form = Form::Grating {
                first: -lead,
                last: whole - 1,
            };
            (form, 0, edges.len() - 1)
        }
        (_, Some(first)) if !single => {
            let ridge = layout.edges[first].rising;
            (Form::Feature { ridge }, first, first + 1)
        }
        _ => {
            let rising = layout.edges[0].rising;
            (Form::Step { rising }, 0, 0)
        }
    };
    let near = |at: f64, rising: bool| {
        surface
            .edges
            .iter()
            .filter(|e| e.rising == rising)
            .min_by(|a, b| (a.at - at).abs().total_cmp(&(b.at - at).abs()))
            .map_or(at, |e| e.at)
    };
    let edges = &layout.edges[first..=last];
    let (from, to) = (
        edges[0].at - layout.reach(first).0,
        edges[edges.len() - 1].at + layout.reach(last).1,
    );
    let followed: Vec<Vec<f64>> = (first..=last)
        .map(|i| {
            let level = layout.low.value + 0.5 * layout.height();
            sections::follow(scan, layout.edges[i], layout.reach(i), level)
        })
        .collect();
    let tangent = skew(&followed);
    let cosine = 1.0 / (tangent * frame.pitch / frame.spacing).hypot(1.0);
    let edges_at: Vec<f64> = edges.iter().map(|e| e.at).collect();
    let wander = wander(
        &followed,
        tangent,
        frame,
        height_per_pixel(&layout, &edges_at),
    );
    let data = mean_section(
        scan,
        frame,
        tangent,
        cosine,
        [from, to],
        (&edges_at, &wander),
    )
    .ok_or_else(|| "too few pixels about the feature".to_owned())?;
    let nm = |pixel: f64| pixel * frame.pitch * cosine;
    let mut start = [0.0; COUNT];
    let height = layout.height();
    start[OUTER] = if form.ridge() {
        layout.low.value
    } else {
        layout.high.value
    };
    start[HEIGHT] = height;
    let run = |edge: &sections::Edge| {
        let at = near(edge.at, edge.rising);
        (2.0 * nm(quarter_distance(&surface.profile, &surface, at))).max(0.05 * frame.pitch)
    };
    let sign = if form.ridge() { 1.0 } else { -1.0 };
    match form {
        Form::Step { rising } => {
            let run = run(&edges[0]);
            start[RUN[usize::from(!rising)]] = run;
            let at = nm(near(edges[0].at, rising));
            start[CENTRE] = at + if rising { run / 2.0 } else { -run / 2.0 };
        }
        Form::Feature { .. } => {
            let at = [0, 1].map(|k: usize| nm(near(edges[k].at, edges[k].rising)));
            for k in 0..2 {
                start[RUN[k]] = run(&edges[k]);
            }
            start[CENTRE] = (at[0] + at[1]) / 2.0;
            start[TOP_WIDTH] = at[1] - at[0] - sign * (start[RUN[0]] + start[RUN[1]]) / 2.0;
        }
        Form::Grating { .. } => {
            let rising: Vec<f64> = edges
                .iter()
                .filter(|e| e.rising)
                .map(|e| nm(e.at))
                .collect();
            let number: Vec<f64> = (0..rising.len()).map(|i| i as f64).collect();
            let (pitch, offset) = statistics::line(&number, &rising)
                .ok_or_else(|| "fewer than two periods".to_owned())?;
            let i = edges.iter().position(|e| e.rising).unwrap_or(0);
            let pair = &edges[i..(i + 2).min(edges.len())];
            if pair.len() < 2 {
                return Err("no whole line".to_owned());
            }
            let at = [0, 1].map(|k: usize| nm(near(pair[k].at, pair[k].rising)));
            for k in 0..2 {
                start[RUN[k]] = run(&pair[k]);
            }
            let width = at[1] - at[0];
            start[PITCH] = pitch;
            start[CENTRE] = offset + (at[0] - nm(pair[0].at)) + width / 2.0;
            start[TOP_WIDTH] = (width - (start[RUN[0]] + start[RUN[1]]) / 2.0).max(0.1);
        }
    }
    start[TOP_WIDTH] = start[TOP_WIDTH].max(0.1 * frame.pitch);
    Ok((form, data, start))
}

/// Distance between the crossings of a quarter and three quarters of the height about `at`, pixels.
fn quarter_distance(profile: &[f64], layout: &Layout, at: f64) -> f64 {
    let height = |f: f64| layout.low.value + f * layout.height();
    let crossing = |level: f64| {
        (1..profile.len())
            .filter(|&i| (profile[i - 1] < level) != (profile[i] < level))
            .map(|i| {
                let (a, b) = (profile[i - 1], profile[i]);
                (i - 1) as f64 + (level - a) / (b - a)
            })
            .min_by(|a, b| (a - at).abs().total_cmp(&(b - at).abs()))
    };
    match (crossing(height(0.25)), crossing(height(0.75))) {
        (Some(a), Some(b)) => (a - b).abs(),
        _ => 1.0,
    }
}

/// Mean drift of the edges from section to section, pixels.
fn skew(followed: &[Vec<f64>]) -> f64 {
    let count = followed.first().map_or(0, Vec::len);
    if count < 8 {
        return 0.0;
    }
    let number: Vec<f64> = (0..count).map(|i| i as f64).collect();
    let slopes: Vec<f64> = followed
        .iter()
        .filter(|f| f.iter().filter(|v| v.is_finite()).count() >= 8)
        .filter_map(|f| statistics::line(&number, f).map(|l| l.0))
        .collect();
    let mean = statistics::mean(&slopes);
    if mean.is_finite() { mean } else { 0.0 }
}

/// Steepest rise of the central profile at the edges, nm per pixel.
fn height_per_pixel(layout: &Layout, edges: &[f64]) -> f64 {
    let profile = &layout.profile;
    let rise = |at: &f64| {
        let i = (at.floor().max(0.0) as usize).min(profile.len().saturating_sub(2));
        (profile[i + 1] - profile[i]).abs()
    };
    edges.iter().map(rise).fold(f64::INFINITY, f64::min)
}

/// Deviation of each edge from its straight line, section by section, pixels, where it stands out
/// from what noise does to a crossing; else none. A rough edge must be straightened before
/// averaging: its mean cross-section has other corners than any of its sections.
fn wander(
    followed: &[Vec<f64>],
    tangent: f64,
    frame: &Frame,
    height_per_pixel: f64,
) -> Vec<Option<Vec<f64>>> {
    let by_noise = frame.noise / height_per_pixel.max(1e-9);
    followed
        .iter()
        .map(|edge| {
            let straight: Vec<f64> = (0..edge.len())
                .map(|i| edge[i] - tangent * (i as f64 - (edge.len() as f64 - 1.0) / 2.0))
                .collect();
            let mean = statistics::mean(&straight);
            let off: Vec<f64> = straight.iter().map(|v| v - mean).collect();
            let deviation = statistics::robust_deviation(&off)?;
            (deviation > (3.0 * by_noise).max(0.2)).then_some(off)
        })
        .collect()
}

/// Averages the sections along the line into cells of one pixel (a quarter where the line runs
/// askew or is straightened and so crosses the pixels), outliers beyond four robust deviations
/// left out. Each pixel goes with the edge that is nearest.
fn mean_section(
    sections: ndarray::ArrayView2<f32>,
    frame: &Frame,
    tangent: f64,
    cosine: f64,
    range: [f64; 2],
    (edges, wander): (&[f64], &[Option<Vec<f64>>]),
) -> Option<Data> {
    let middle = (sections.nrows() as f64 - 1.0) / 2.0;
    let askew = (tangent * sections.nrows() as f64).abs() > 1.0;
    let straightened = wander.iter().any(Option::is_some);
    let cells = if askew || straightened { 4.0 } else { 1.0 };
    let nearest = |at: f64| {
        let apart = |k: &usize| (edges[*k] - at).abs();
        (0..edges.len()).min_by(|a, b| apart(a).total_cmp(&apart(b)))
    };
    let count = ((range[1] - range[0]) * cells).ceil().max(0.0) as usize + 1;
    let mut heights: Vec<Vec<f64>> = vec![Vec::new(); count];
    let mut places: Vec<f64> = vec![0.0; count];
    for (i, section) in sections.rows().into_iter().enumerate() {
        let shift = tangent * (i as f64 - middle);
        for (c, &z) in section.iter().enumerate() {
            let mut at = c as f64 - shift;
            if straightened && let Some(off) = nearest(at).and_then(|k| wander[k].as_ref()) {
                at -= off[i];
            }
            let cell = ((at - range[0]) * cells).round();
            if z.is_nan() || !(cell >= 0.0 && (cell as usize) < count) {
                continue;
            }
            heights[cell as usize].push(f64::from(z));
            places[cell as usize] += at;
        }
    }
    // Noise that could not be measured leaves the numbers' own rounding.
    let least = frame.noise.max(1e-4);
    let mut data = Data {
        x: Vec::new(),
        z: Vec::new(),
        u: Vec::new(),
        span: [f64::INFINITY, f64::NEG_INFINITY],
    };
    for (values, place) in heights.iter().zip(&places) {
        if values.is_empty() {
            continue;
        }
        let kept = statistics::clipped(values, 4.0);
        let n = kept.iter().filter(|v| v.is_finite()).count().max(1) as f64;
        let scatter = statistics::robust_deviation(values).unwrap_or(0.0);
        let x = place / values.len() as f64 * frame.pitch * cosine;
        data.x.push(x);
        data.z.push(statistics::mean(&kept));
        data.u.push(scatter.max(least) / n.sqrt());
        data.span = [data.span[0].min(x), data.span[1].max(x)];
    }
    (data.x.len() >= 16).then_some(data)
}
