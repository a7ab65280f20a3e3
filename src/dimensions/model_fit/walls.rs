//! Lines, trenches, steps and gratings: walls between two levels.

use super::profile::{Between, Section, Silhouette, Wall};
use super::{Doubtful, Fitted, ModelFit};
use crate::dimensions::sections::{self, Frame, Layout};
use crate::dimensions::statistics;
use crate::dimensions::{Axis, Corrected, Dimension, Input, Kind, Request};
use crate::error::Result;
use crate::leveling::least_squares::nonlinear;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Joint};
use nalgebra::DMatrix;

/// Parameters of a form, in this order; a form uses some of them.
const OUTER: usize = 0;
const TILT: usize = 1;
const HEIGHT: usize = 2;
const CENTRE: usize = 3;
const TOP_WIDTH: usize = 4;
const RUN: [usize; 2] = [5, 6];
const UPPER: usize = 7;
const LOWER: usize = 8;
const PITCH: usize = 9;
const COUNT: usize = 10;

type Parameters = [f64; COUNT];

/// Rise of the sum of squares (in units of the residual variance) up to which a parameter's value
/// is compatible with the data: two standard deviations.
const COMPATIBLE: f64 = 4.0;

/// What stands in the region.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Form {
    Step { rising: bool },
    Feature { ridge: bool },
    Grating { first: i32, last: i32 },
}

impl Form {
    fn name(self) -> &'static str {
        match self {
            Self::Step { .. } => "step with a sloped wall and rounded corners",
            Self::Feature { ridge: true } => "line: trapezoid with rounded corners",
            Self::Feature { ridge: false } => "trench: trapezoid with rounded corners",
            Self::Grating { .. } => "grating of equal trapezoids with rounded corners",
        }
    }

    /// Whether the outer level is the lower one.
    fn ridge(self) -> bool {
        self != Self::Feature { ridge: false }
    }

    /// The parameters that it has, corners apart.
    fn free(self) -> Vec<usize> {
        let common = [OUTER, TILT, HEIGHT, CENTRE];
        let own: &[usize] = match self {
            Self::Step { rising: true } => &[RUN[0]],
            Self::Step { rising: false } => &[RUN[1]],
            Self::Feature { .. } => &[TOP_WIDTH, RUN[0], RUN[1]],
            Self::Grating { .. } => &[TOP_WIDTH, RUN[0], RUN[1], PITCH],
        };
        common.iter().chain(own).copied().collect()
    }

    fn runs(self) -> &'static [usize] {
        match self {
            Self::Step { rising: true } => &RUN[..1],
            Self::Step { rising: false } => &RUN[1..],
            _ => &RUN,
        }
    }

    /// Whether the tip meets wall `side` with its side of positive offsets: it stands before a
    /// rising wall.
    fn meets(self, side: usize) -> bool {
        (side == 0) == self.ridge()
    }

    /// The wall with run number `side`; lengths are taken positive, whatever the fit tries.
    fn wall(p: &Parameters, side: usize) -> Wall {
        Wall {
            height: p[HEIGHT].abs().max(1e-6),
            run: p[RUN[side]].abs(),
            upper: p[UPPER].abs(),
            lower: p[LOWER].abs(),
        }
    }

    /// The edges from left to right: position of the upper virtual corner, side, rising.
    fn edges(self, p: &Parameters) -> Vec<(f64, usize, bool)> {
        let half = p[TOP_WIDTH].abs() / 2.0;
        let pair = |centre: f64| [(centre - half, 0, true), (centre + half, 1, false)];
        match self {
            Self::Step { rising } => vec![(p[CENTRE], usize::from(!rising), rising)],
            Self::Feature { ridge: true } => pair(p[CENTRE]).to_vec(),
            Self::Feature { ridge: false } => {
                vec![(p[CENTRE] - half, 0, false), (p[CENTRE] + half, 1, true)]
            }
            Self::Grating { first, last } => (first..=last)
                .flat_map(|k| pair(p[CENTRE] + f64::from(k) * p[PITCH]))
                .collect(),
        }
    }

    /// The cross-section over `span`; the tilt turns about the span's middle.
    fn section(self, p: &Parameters, span: [f64; 2]) -> Section {
        let height = p[HEIGHT].abs();
        let low = if self.ridge() {
            p[OUTER]
        } else {
            p[OUTER] - height
        };
        let middle = (span[0] + span[1]) / 2.0;
        let edges = self.edges(p);
        let mut section = Section::default();
        let mut push = |x: f64, z: f64| section.push(x, low + z + p[TILT] * (x - middle));
        let level = |high: bool| if high { height } else { 0.0 };
        let starts_high = edges.first().is_some_and(|e| !e.2);
        let ends_high = edges.last().is_some_and(|e| e.2);
        let first = edges.first().map_or(span[0], |e| e.0);
        push(span[0].min(first - 2.0 * height), level(starts_high));
        for (at, side, rising) in edges {
            let vertices = Self::wall(p, side).vertices();
            if rising {
                vertices.iter().rev().for_each(|v| push(at - v.0, v.1));
            } else {
                vertices.iter().for_each(|v| push(at + v.0, v.1));
            }
        }
        push(span[1], level(ends_high));
        section
    }

    /// Width at a height fraction; the sign of the walls' slope is that of the form.
    fn width(self, p: &Parameters, fraction: f64) -> f64 {
        let out = (0..2)
            .map(|k| Self::wall(p, k).outwards(fraction))
            .sum::<f64>();
        let sign = if self.ridge() { 1.0 } else { -1.0 };
        p[TOP_WIDTH].abs() + sign * out
    }
}

/// Mean cross-section of the scan: positions across the line, heights, and their doubts, nm.
struct Data {
    x: Vec<f64>,
    z: Vec<f64>,
    u: Vec<f64>,
    span: [f64; 2],
}

impl Data {
    /// Adds to each doubt what the tip's grid leaves open there: the difference between the scans
    /// by the curved and by the straight tip. A flank that is straight makes the curve err by it.
    fn doubt_grid(&mut self, curved: &Section, tips: [&Silhouette; 2]) {
        for (u, &x) in self.u.iter_mut().zip(&self.x) {
            let [a, b] = tips.map(|tip| curved.scanned_at(x, tip));
            if (a - b).is_finite() {
                *u = u.hypot(a - b);
            }
        }
    }
}

/// One fit of the form.
#[derive(Clone)]
struct Solved {
    all: Parameters,
    free: Vec<usize>,
    /// Sum of squares in units of the data's variances.
    squares: f64,
    freedom: f64,
    covariance: DMatrix<f64>,
    determined: Vec<bool>,
}

struct Fitter<'a> {
    form: Form,
    data: &'a Data,
    tip: Silhouette,
    /// Pixel pitch across, nm.
    pixel: f64,
}

impl Fitter<'_> {
    /// The levels go on beyond the data as far as the tip reaches.
    fn section(&self, p: &Parameters) -> Section {
        let reach = 2.0 * self.tip.reach();
        let span = [self.data.span[0] - reach, self.data.span[1] + reach];
        self.form.section(p, span)
    }

    fn solve(&self, start: &Parameters, free: &[usize]) -> Option<Solved> {
        let data = self.data;
        let full = |p: &[f64]| {
            let mut all = *start;
            for (&i, &value) in free.iter().zip(p) {
                all[i] = value;
            }
            all
        };
        let residuals = |p: &[f64], r: &mut [f64]| {
            let section = self.section(&full(p));
            for (i, r) in r.iter_mut().enumerate() {
                *r = (section.scanned_at(data.x[i], &self.tip) - data.z[i]) / data.u[i];
            }
        };
        let scale: Vec<f64> = free
            .iter()
            .map(|&i| if i == TILT { 1e-3 } else { 1.0 })
            .collect();
        let begin: Vec<f64> = free.iter().map(|&i| start[i]).collect();
        let fit = nonlinear::fit(&begin, &scale, data.x.len(), &residuals).ok()?;
        let mut all = full(&fit.parameters);
        for i in [HEIGHT, TOP_WIDTH, RUN[0], RUN[1], UPPER, LOWER] {
            all[i] = all[i].abs();
        }
        let freedom = fit.degrees_of_freedom.max(1) as f64;
        let variance = (fit.residual_sum / freedom).max(1.0);
        Some(Solved {
            all,
            free: free.to_vec(),
            squares: fit.residual_sum,
            freedom,
            covariance: fit.inverse_normal * variance,
            determined: fit.determined,
        })
    }

    /// The fit with parameter `i` held at `value`.
    fn held(&self, from: &Solved, i: usize, value: f64) -> Option<Solved> {
        self.all_held(from, &[(i, value)])
    }

    /// The fit with several parameters held.
    fn all_held(&self, from: &Solved, held: &[(usize, f64)]) -> Option<Solved> {
        let mut start = from.all;
        held.iter().for_each(|&(i, value)| start[i] = value);
        let loose = |k: &usize| held.iter().all(|h| h.0 != *k);
        let free: Vec<usize> = from.free.iter().copied().filter(loose).collect();
        self.solve(&start, &free)
    }

    /// The fit, corner radii added where they make it better than by chance and are larger than two
    /// pixels: smaller ones are not told from the course of the tip between its cells.
    fn best(&self, start: &Parameters, radius: f64) -> Option<Solved> {
        let mut free = self.form.free();
        let mut best = self.solve(start, &free)?;
        for (corner, first) in [(UPPER, radius / 2.0), (LOWER, 1.5 * radius)] {
            let mut tried = best.all;
            tried[corner] = first;
            free.push(corner);
            match self.solve(&tried, &free) {
                Some(s)
                    if best.squares - s.squares > COMPATIBLE * best.variance()
                        && s.all[corner] > 2.0 * self.pixel =>
                {
                    best = s;
                }
                _ => {
                    free.pop();
                }
            }
        }
        Some(best)
    }

    /// The largest value of parameter `i` that is compatible with the data, with its fit: by
    /// doubling and halving from `best`, to a twentieth of a step that starts at `step`.
    fn largest(&self, best: &Solved, i: usize, step: f64) -> Option<Solved> {
        let limit = best.squares + COMPATIBLE * best.variance();
        let fits = |value: f64| self.held(best, i, value).filter(|s| s.squares <= limit);
        let mut low = best.clone();
        let (mut at, mut reach) = (best.all[i], step);
        loop {
            match fits(at + reach) {
                Some(s) => {
                    at += reach;
                    low = s;
                    reach *= 2.0;
                }
                None => break,
            }
            if reach > 64.0 * step {
                // It fits however large it is.
                return None;
            }
        }
        while reach > step / 20.0 {
            reach /= 2.0;
            if let Some(s) = fits(at + reach) {
                at += reach;
                low = s;
            }
        }
        Some(low)
    }
}

impl Solved {
    /// Variance of the residuals in units of the data's, at least 1.
    fn variance(&self) -> f64 {
        (self.squares / self.freedom).max(1.0)
    }

    fn determines(&self, i: usize) -> bool {
        let at = self.free.iter().position(|&k| k == i);
        at.is_some_and(|k| self.determined[k])
    }

    /// Standard uncertainties of what `figures` makes of all parameters.
    fn doubts(&self, figures: &dyn Fn(&Parameters) -> Vec<f64>) -> Option<Vec<f64>> {
        let values = self.free.iter().map(|&i| self.all[i]).collect();
        let joint = Joint::new(values, self.covariance.clone()).ok()?;
        let out = joint
            .through(|p| {
                let mut all = self.all;
                for (&i, &value) in self.free.iter().zip(p) {
                    all[i] = value;
                }
                figures(&all)
            })
            .ok()?;
        Some((0..out.values().len()).map(|k| out.u(k)).collect())
    }
}

/// Fits the form of `request` and writes it beside its `lines`.
pub(super) fn fit(
    input: &Input,
    corrected: &Corrected,
    doubtful: &Doubtful,
    request: &Request,
    lines: &mut [Dimension],
    progress: &Progress,
) -> Result<()> {
    let frame = Frame::new(input, request)?;
    let prepared = prepare(input, corrected, request, &frame, lines);
    let (form, mut data, start) = match prepared {
        Ok(prepared) => prepared,
        Err(reason) => {
            for line in lines.iter_mut() {
                line.evidence.model_fit = Some(ModelFit::none("none", reason.clone()));
            }
            return Ok(());
        }
    };
    progress.check()?;
    let tip = Silhouette::of(corrected.tip, frame.axis, Between::Curved);
    let straight = Silhouette::of(corrected.tip, frame.axis, Between::Straight);
    let rough = Fitter {
        form,
        data: &data,
        tip: tip.clone(),
        pixel: frame.pitch,
    };
    if let Some(first) = rough.solve(&start, &form.free()) {
        let section = rough.section(&first.all);
        data.doubt_grid(&section, [&tip, &straight]);
    }
    let fitter = Fitter {
        form,
        data: &data,
        tip,
        pixel: frame.pitch,
    };
    let radius = corner_start(corrected, frame.axis);
    let Some(best) = fitter.best(&start, radius) else {
        for line in lines.iter_mut() {
            let reason = "the fit found no minimum".to_owned();
            line.evidence.model_fit = Some(ModelFit::none(form.name(), reason));
        }
        return Ok(());
    };
    progress.check()?;
    let hidden = Hidden::seek(&fitter, &best, radius);
    progress.check()?;
    let others: Vec<Parameters> = doubtful
        .tips
        .iter()
        .filter_map(|tip| {
            let with = Fitter {
                form,
                data: &data,
                tip: Silhouette::of(tip, frame.axis, Between::Curved),
                pixel: frame.pitch,
            };
            Some(with.solve(&best.all, &best.free)?.all)
        })
        .collect();
    let straight = Fitter {
        form,
        data: &data,
        tip: straight,
        pixel: frame.pitch,
    };
    let report = Report {
        straight: straight.solve(&best.all, &best.free).map(|s| s.all),
        best: &best,
        hidden: &hidden,
        others: &others,
        deviations: doubtful.deviations,
        calibration: match frame.axis {
            Axis::X => [input.calibration.x, input.calibration.z],
            Axis::Y => [input.calibration.y, input.calibration.z],
        },
        form,
    };
    for line in lines.iter_mut().filter(|l| l.corrected.is_some()) {
        line.evidence.model_fit = report.opinion(line);
    }
    Ok(())
}

/// Where the search for corner radii begins: the tip's own apex radius.
fn corner_start(corrected: &Corrected, axis: Axis) -> f64 {
    let outline = crate::dimensions::wall::Outline::of(corrected.tip, axis, true);
    outline.apex_radius().unwrap_or(1.0).clamp(0.5, 50.0)
}

/// The form, the mean cross-section and the start of the fit; or why there is none.
fn prepare(
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

/// What the scan does not determine, with the fits at the ends of what is compatible with it.
#[derive(Default)]
struct Hidden {
    /// Reason and largest compatible value, by parameter.
    reasons: Vec<(usize, String, Option<f64>)>,
    /// Fits at the ends of the hidden parameters' ranges.
    ends: Vec<Parameters>,
    /// The floor was not reached: heights and what hangs on them have no value.
    floor: bool,
}

impl Hidden {
    fn seek(fitter: &Fitter, best: &Solved, radius: f64) -> Self {
        let mut hidden = Self::default();
        let limit = best.squares + COMPATIBLE * best.variance();
        if fitter.form == (Form::Feature { ridge: false }) {
            let deeper = fitter.held(best, HEIGHT, 1.3 * best.all[HEIGHT]);
            hidden.floor = !best.determines(HEIGHT) || deeper.is_some_and(|s| s.squares <= limit);
        }
        if hidden.floor {
            hidden.reasons.push((
                HEIGHT,
                "the tip did not reach the floor: a deeper trench gives the same scan".to_owned(),
                None,
            ));
        }
        let (mut steepest, mut least_steep) = (Vec::new(), Vec::new());
        for &run in fitter.form.runs() {
            // Near the flank the course of the tip between its cells decides more than the wall.
            let side = usize::from(run == RUN[1]);
            let flank = fitter.tip.flank(fitter.form.meets(side), best.all[HEIGHT]);
            let steep = best.all[run] <= 1.1 * flank * best.all[HEIGHT];
            let fits = |s: &Solved| steep || s.squares <= limit;
            let upright = fitter.held(best, run, 0.0).filter(fits);
            if upright.is_some() {
                let step = (0.05 * best.all[HEIGHT]).max(0.2);
                let flattest = fitter.largest(best, run, step);
                steepest.push((run, 0.0));
                least_steep.extend(flattest.as_ref().map(|s| (run, s.all[run])));
                hidden.reasons.push((
                    run,
                    "a vertical wall gives the same scan: the wall is as steep as the tip's flank \
                     or steeper"
                        .to_owned(),
                    flattest.map(|s| s.all[run]),
                ));
            } else if !best.determines(run) {
                hidden.reasons.push((
                    run,
                    "it lies in a flat direction of the fit".to_owned(),
                    None,
                ));
            }
        }
        // All hidden walls at once: what they leave open adds up.
        if !steepest.is_empty() {
            let ends = [&steepest, &least_steep].map(|held| fitter.all_held(best, held));
            hidden.ends.extend(ends.iter().flatten().map(|s| s.all));
        }
        for (corner, reason) in [
            (
                UPPER,
                "a sharp upper corner gives the same scan, or one that differs by less than two pixels \
                 of radius",
            ),
            (
                LOWER,
                "a sharp lower corner gives the same scan: the tip is blunter than it",
            ),
        ] {
            if !best.free.contains(&corner) {
                let mut with = best.clone();
                with.free.push(corner);
                let most = fitter.largest(&with, corner, radius / 4.0);
                hidden.ends.extend(most.as_ref().map(|s| s.all));
                hidden
                    .reasons
                    .push((corner, reason.to_owned(), most.map(|s| s.all[corner])));
            }
        }
        hidden
    }

    fn reason(&self, i: usize) -> Option<&(usize, String, Option<f64>)> {
        self.reasons.iter().find(|r| r.0 == i)
    }
}

/// What a dimension varies along the line is no matter of the fit: taken from its budget.
fn along(line: &Dimension) -> Vec<Component> {
    let varies = |c: &&Component| {
        ["repeatability", "scatter"]
            .iter()
            .any(|s| c.source.starts_with(s))
    };
    line.budget.iter().filter(varies).cloned().collect()
}

struct Report<'a> {
    form: Form,
    best: &'a Solved,
    hidden: &'a Hidden,
    others: &'a [Parameters],
    /// The fit with the tip straight between its cells.
    straight: Option<Parameters>,
    deviations: f64,
    /// Relative, lateral and vertical.
    calibration: [f64; 2],
}

impl Report<'_> {
    fn opinion(&self, line: &Dimension) -> Option<ModelFit> {
        let own: Fitted = match line.kind {
            Kind::LineWidth => self.width(line.at.unwrap_or(0.5), line),
            Kind::StepHeight => self.height(&along(line)),
            Kind::Pitch => self.figure("pitch", &|p| p[PITCH], self.calibration[0], &along(line)),
            _ => return None,
        };
        let mut parameters = Vec::new();
        if line.kind != Kind::StepHeight {
            parameters.push(self.height(&[]));
        }
        if line.kind != Kind::LineWidth && !matches!(self.form, Form::Step { .. }) {
            parameters.push(self.width(0.5, line));
        }
        for &run in self.form.runs() {
            parameters.push(self.angle(run));
        }
        for (corner, name) in [
            (UPPER, "upper corner radius"),
            (LOWER, "lower corner radius"),
        ] {
            parameters.push(self.corner(corner, name));
        }
        Some(ModelFit {
            model: self.form.name(),
            value: Some(own),
            parameters,
            misfit: Some((self.best.squares / self.best.freedom).sqrt()),
            agrees: None,
            reason: None,
        })
    }

    /// A figure with its interval: the fit's covariance, the tip's doubt, the axis (relative) and
    /// `more` in the symmetric part; outside it the range of the hidden parameters.
    fn figure(
        &self,
        name: &str,
        figure: &dyn Fn(&Parameters) -> f64,
        calibration: f64,
        more: &[Component],
    ) -> Fitted {
        let best = figure(&self.best.all);
        let fit = self.best.doubts(&|p| vec![figure(p)]);
        let tip = self.others.iter().map(|p| (figure(p) - best).abs());
        let tip = tip.fold(0.0, f64::max) / self.deviations;
        let grid = self.straight.as_ref().map_or(0.0, |p| figure(p) - best);
        let mut budget = Budget::new();
        budget.add(Component {
            source: "fit".to_owned(),
            u: fit.map_or(0.0, |u| u[0]),
            distribution: Distribution::Normal,
            sensitivity: 1.0,
            degrees_of_freedom: Some(self.best.freedom),
        });
        budget.push("tip", tip, Distribution::Normal, 1.0);
        budget.push(
            "tip between its cells",
            grid,
            Distribution::Rectangular,
            1.0,
        );
        // The same for both opinions, but the second is shown on its own too.
        budget.push("axis calibration", calibration, Distribution::Normal, best);
        more.iter().for_each(|c| {
            budget.add(c.clone());
        });
        let symmetric = budget.combined(0.95);
        let ends = || self.hidden.ends.iter().map(figure).chain([best]);
        let low = ends().fold(f64::INFINITY, f64::min);
        let high = ends().fold(f64::NEG_INFINITY, f64::max);
        let between = (high - low) / 12f64.sqrt();
        Fitted {
            name: name.to_owned(),
            unit: "nm",
            value: Some((low + high) / 2.0),
            u: Some(symmetric.u.hypot(between)),
            low: Some(low - symmetric.expanded),
            high: Some(high + symmetric.expanded),
            not_determined: None,
        }
    }

    fn width(&self, fraction: f64, line: &Dimension) -> Fitted {
        let along = if line.kind == Kind::LineWidth {
            along(line)
        } else {
            Vec::new()
        };
        let name = format!("width at {:.0} %", 100.0 * fraction);
        let mut fitted = self.figure(
            &name,
            &|p| self.form.width(p, fraction),
            self.calibration[0],
            &along,
        );
        if let Some((_, reason, _)) = self.hidden.reason(HEIGHT) {
            fitted.value = None;
            fitted.u = None;
            fitted.low = None;
            fitted.not_determined = Some(reason.clone());
        } else if self
            .form
            .runs()
            .iter()
            .any(|&r| self.hidden.reason(r).is_some())
        {
            fitted.value = None;
            fitted.not_determined = self
                .form
                .runs()
                .iter()
                .find_map(|&run| self.hidden.reason(run).map(|r| r.1.clone()));
            let bounds = fitted.high.zip(fitted.low);
            let widths = || {
                let ends = self.hidden.ends.iter();
                ends.map(|p| self.form.width(p, fraction))
            };
            let most = widths().fold(f64::NEG_INFINITY, f64::max);
            let least = widths().fold(f64::INFINITY, f64::min);
            let wide = bounds.is_some_and(|(high, low)| most - least > (high - low) / 2.0);
            // Near the corner that was touched the hidden slope hardly matters.
            if !wide {
                fitted.value = bounds.map(|(h, l)| (h + l) / 2.0);
                fitted.not_determined = None;
            }
        }
        fitted
    }

    fn height(&self, along: &[Component]) -> Fitted {
        let mut fitted = self.figure("height", &|p| p[HEIGHT], self.calibration[1], along);
        if let Some((_, reason, _)) = self.hidden.reason(HEIGHT) {
            fitted.value = None;
            fitted.u = None;
            fitted.high = None;
            fitted.not_determined = Some(reason.clone());
        }
        fitted
    }

    fn angle(&self, run: usize) -> Fitted {
        let name = match run {
            _ if self.form.runs().len() == 1 => "wall angle",
            r if r == RUN[0] => "left wall angle",
            _ => "right wall angle",
        };
        let angle = |p: &Parameters| p[HEIGHT].atan2(p[run]).to_degrees();
        let mut fitted = self.figure(name, &angle, 0.0, &[]);
        fitted.unit = "deg";
        fitted.high = fitted.high.map(|h| h.min(90.0));
        if let Some((_, reason, most)) = self.hidden.reason(run) {
            fitted.value = None;
            fitted.u = None;
            fitted.high = None;
            fitted.low = most.map(|m| self.best.all[HEIGHT].atan2(m).to_degrees());
            fitted.not_determined = Some(reason.clone());
        }
        fitted
    }

    fn corner(&self, corner: usize, name: &str) -> Fitted {
        match self.hidden.reason(corner) {
            Some((_, reason, most)) => Fitted {
                name: name.to_owned(),
                unit: "nm",
                value: None,
                u: None,
                low: Some(0.0),
                high: *most,
                not_determined: Some(reason.clone()),
            },
            None => {
                let mut fitted = self.figure(name, &|p| p[corner], self.calibration[0], &[]);
                fitted.low = fitted.low.map(|l| l.max(0.0));
                fitted
            }
        }
    }
}
