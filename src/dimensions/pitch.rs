//! Pitch of a grating by three methods: its Fourier component, which is the result, the centroids
//! of its lines and the cross-correlation with one period of itself, shown beside it.

use super::sections::{Frame, Layout};
use super::statistics;
use super::{Axis, Dimension, Input, Kind, Request, answer, fill_period};
use crate::error::Result;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series};
use ndarray::ArrayView2;
use std::f64::consts::TAU;

const ASSUMPTIONS: &str = "Equidistant, identical lines: the tip widens all alike and leaves their \
    distance. Fourier, centroid and cross-correlation methods across the lines, along the \
    surface's own plane, after ISO 11952 (from memory)";

/// Measures the pitch: a line for the result, by the Fourier component, and one for each other
/// method.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let frame = Frame::new(input, request)?;
    let mut line = answer(request, Kind::Pitch, "pitch", "nm", ASSUMPTIONS);
    let sections = frame.of(input.scan);
    let grating = match Grating::find(sections, frame.noise) {
        Ok(grating) => grating,
        Err(reason) => {
            line.flags.push(format!("not measured: {reason}"));
            return Ok(vec![line]);
        }
    };
    progress.check()?;
    if grating.lines.len() < 4 {
        line.flags.push(format!(
            "only {} whole lines: few for a pitch",
            grating.lines.len()
        ));
    }
    let voids = sections.iter().filter(|z| z.is_nan()).count();
    if voids > 0 {
        line.flags
            .push(format!("{voids} void pixels inside the region"));
    }
    let refined = refine(sections, grating.period, progress)?;
    let (tangent, series) = match &refined {
        Some(r) => (r.shear * frame.pitch / frame.spacing, r.periods),
        None => {
            line.flags
                .push("too short for the Fourier refinement: centroids only".to_owned());
            (
                0.0,
                Series {
                    mean: grating.period,
                    deviation: 0.0,
                    count: 1,
                    effective: 1.0,
                },
            )
        }
    };
    let cosine = 1.0 / tangent.hypot(1.0);
    // Along the plane that levelling laid flat: pitch = apparent / cos(tilt).
    let tilt = match frame.axis {
        Axis::X => input.slope[0],
        Axis::Y => input.slope[1],
    };
    if tilt.abs() > 3e-3 {
        line.flags.push(format!(
            "taken along the plane, tilted by {:.2} degrees across the lines",
            tilt.abs().atan().to_degrees()
        ));
    }
    let scale = frame.pitch * cosine * tilt.hypot(1.0);
    let value = series.mean * scale;
    let centroid = grating.period * scale;
    if tangent.atan().to_degrees().abs() > 0.5 {
        line.flags.push(format!(
            "the lines run {:.1} degrees askew; the pitch is taken across them",
            tangent.atan().to_degrees().abs()
        ));
    }
    let calibration = match frame.axis {
        Axis::X => input.calibration.x,
        Axis::Y => input.calibration.y,
    };
    if calibration == 0.0 {
        line.flags
            .push("no uncertainty of the axis calibration was given".to_owned());
    }
    if frame.axis == Axis::Y {
        line.flags
            .push("taken along the slow axis: drift enters in full".to_owned());
    }
    let mut budget = Budget::new();
    budget.push("axis calibration", calibration, Distribution::Normal, value);
    budget.add(Component {
        source: "repeatability over the sections".to_owned(),
        u: series.standard_error() * scale,
        distribution: Distribution::Normal,
        sensitivity: 1.0,
        degrees_of_freedom: series.degrees_of_freedom(),
    });
    let placement = grating.scatter * scale;
    budget.add(Component {
        source: "placement of the lines".to_owned(),
        u: placement,
        distribution: Distribution::Normal,
        sensitivity: 1.0,
        degrees_of_freedom: Some((grating.lines.len() as f64 - 2.0).max(1.0)),
    });
    if (value - centroid).abs() > 4.0 * placement.max(2e-4 * value) {
        line.flags
            .push(format!("the centroid method gives {centroid:.3} nm"));
    }
    line.marks = grating.marks(&frame);
    fill_period(&mut line, input, value, budget, Some("a pitch"));
    let mut lines = vec![line];
    let correlated = by_correlation(&grating);
    for (quantity, figure) in [
        (
            "pitch, centroid method",
            Some((grating.period, grating.scatter)),
        ),
        ("pitch, cross-correlation method", correlated),
    ] {
        let mut other = answer(request, Kind::Pitch, quantity, "nm", ASSUMPTIONS);
        other.marks.clone_from(&lines[0].marks);
        match figure {
            Some((period, scatter)) => {
                let number = grating.lines.len();
                let u = [scatter * scale, series.standard_error() * scale];
                beside(&mut other, input, calibration, period * scale, u, number);
            }
            None => other.flags.push(
                "not measured: fewer than three places correlate with the middle period".to_owned(),
            ),
        }
        lines.push(other);
    }
    Ok(lines)
}

/// Fills the line of another method: its value, with the placement of its `number` lines and the
/// repeatability over the sections.
fn beside(
    line: &mut Dimension,
    input: &Input,
    calibration: f64,
    value: f64,
    [placement, repeatability]: [f64; 2],
    number: usize,
) {
    let mut budget = Budget::new();
    budget.push("axis calibration", calibration, Distribution::Normal, value);
    budget.add(Component {
        source: "placement of the lines".to_owned(),
        u: placement,
        distribution: Distribution::Normal,
        sensitivity: 1.0,
        degrees_of_freedom: Some((number as f64 - 2.0).max(1.0)),
    });
    budget.push(
        "repeatability over the sections",
        repeatability,
        Distribution::Normal,
        1.0,
    );
    fill_period(line, input, value, budget, None);
}

/// Period and its standard uncertainty, pixels: places where one period from the middle of the
/// profile correlates best with it, a straight line through them over their number. `None` with
/// fewer than three places.
fn by_correlation(grating: &Grating) -> Option<(f64, f64)> {
    let profile = &grating.profile;
    let width = grating.period.round() as usize;
    let last = profile.len().checked_sub(width)?;
    let start = last / 2;
    if width < 4 || last < width {
        return None;
    }
    let normalised = |from: usize| -> Vec<f64> {
        let part = &profile[from..from + width];
        let mean = statistics::mean(part);
        let off: Vec<f64> = part.iter().map(|z| z - mean).collect();
        let size = off.iter().map(|z| z * z).sum::<f64>().sqrt();
        off.iter().map(|z| z / size.max(1e-300)).collect()
    };
    let template = normalised(start);
    let match_at: Vec<f64> = (0..=last)
        .map(|from| {
            let part = normalised(from);
            part.iter().zip(&template).map(|(a, b)| a * b).sum()
        })
        .collect();
    let mut places = Vec::new();
    for i in 1..last {
        let [before, here, after] = [match_at[i - 1], match_at[i], match_at[i + 1]];
        if here > 0.6 && here >= before && here > after {
            let bend = 2.0 * here - before - after;
            places.push(i as f64 + 0.5 * (after - before) / bend);
        }
    }
    // The nearest whole number of periods from the template numbers each place.
    let number = |at: &f64| ((at - start as f64) / grating.period).round();
    let numbers: Vec<f64> = places.iter().map(number).collect();
    let n = places.len();
    if n < 3 || numbers.windows(2).any(|pair| pair[0] == pair[1]) {
        return None;
    }
    let (period, offset) = statistics::line(&numbers, &places)?;
    let squares: f64 = numbers
        .iter()
        .zip(&places)
        .map(|(i, x)| (x - offset - period * i).powi(2))
        .sum();
    let mean = statistics::mean(&numbers);
    let spread: f64 = numbers.iter().map(|i| (i - mean).powi(2)).sum();
    Some((period, (squares / (n as f64 - 2.0) / spread).sqrt()))
}

/// Whole lines of the central profile.
struct Grating {
    /// Centroids, pixels.
    lines: Vec<f64>,
    /// Distance per line by least squares, pixels.
    period: f64,
    /// Standard uncertainty of it from the scatter of the centroids, pixels.
    scatter: f64,
    /// The central profile.
    profile: Vec<f64>,
}

impl Grating {
    fn find(sections: ArrayView2<f32>, noise: f64) -> std::result::Result<Self, String> {
        let layout = Layout::find(sections, noise)?;
        let level = layout.low.value + 0.5 * layout.height();
        // Centroid of what stands above mid-height between a rising and the next falling edge.
        let lines: Vec<f64> = layout
            .edges
            .windows(2)
            .filter(|pair| pair[0].rising)
            .map(|pair| centroid(&layout.profile, pair[0].at, pair[1].at, level))
            .collect();
        if lines.len() < 2 {
            return Err("fewer than two whole lines".to_owned());
        }
        let number: Vec<f64> = (0..lines.len()).map(|i| i as f64).collect();
        let (period, offset) = statistics::line(&number, &lines).unwrap_or((f64::NAN, 0.0));
        let n = lines.len() as f64;
        let squares: f64 = number
            .iter()
            .zip(&lines)
            .map(|(i, x)| (x - offset - period * i).powi(2))
            .sum();
        // Var(slope) = s^2 * 12 / (n (n^2 - 1)) for equidistant abscissae.
        let variance = squares / (n - 2.0).max(1.0) * 12.0 / (n * (n * n - 1.0));
        Ok(Self {
            lines,
            period,
            scatter: variance.sqrt(),
            profile: layout.profile,
        })
    }

    fn marks(&self, frame: &Frame) -> Vec<[f64; 4]> {
        let sections = match frame.axis {
            Axis::X => frame.pixels.rows,
            Axis::Y => frame.pixels.columns,
        };
        let middle = (sections as f64 - 1.0) / 2.0;
        self.lines
            .windows(2)
            .map(|pair| frame.segment((middle, pair[0]), (middle, pair[1])))
            .collect()
    }
}

fn centroid(profile: &[f64], from: f64, to: f64, level: f64) -> f64 {
    let (mut sum, mut moment) = (0.0, 0.0);
    for (i, &z) in profile.iter().enumerate() {
        let x = i as f64;
        if (from..=to).contains(&x) {
            let weight = (z - level).max(0.0);
            sum += weight;
            moment += weight * x;
        }
    }
    if sum > 0.0 {
        moment / sum
    } else {
        (from + to) / 2.0
    }
}

struct Refined {
    /// Period per section group, pixels.
    periods: Series,
    /// Shift of the lines per section, pixels.
    shear: f64,
}

/// The period at which the windowed Fourier component of the sections is largest. Sections are
/// taken in up to 16 groups, so that their scatter is seen. `None` with fewer than three periods.
fn refine(sections: ArrayView2<f32>, rough: f64, progress: &Progress) -> Result<Option<Refined>> {
    let (count, columns) = sections.dim();
    if rough.is_nan() || rough <= 2.0 || (columns as f64) < 3.0 * rough {
        return Ok(None);
    }
    let groups = count.min(16);
    let mut periods = Vec::with_capacity(groups);
    let mut phases = Vec::with_capacity(groups);
    for g in 0..groups {
        progress.check()?;
        let part = g * count / groups..(g + 1) * count / groups;
        let profile: Vec<f64> = (0..columns)
            .map(|c| {
                let values: Vec<f64> = part.clone().map(|r| f64::from(sections[[r, c]])).collect();
                statistics::mean(&values)
            })
            .collect();
        let mean = statistics::mean(&profile);
        // Voids take the mean: they add nothing to the component.
        let profile: Vec<f64> = profile
            .iter()
            .map(|z| if z.is_finite() { z - mean } else { 0.0 })
            .collect();
        let Some(period) = strongest(&profile, rough) else {
            continue;
        };
        periods.push(period);
        phases.push((
            (part.start + part.end) as f64 / 2.0,
            component(&profile, rough),
        ));
    }
    let shear = shear_of(&phases, rough);
    Ok(Series::of(&periods).map(|periods| Refined { periods, shear }))
}

/// Complex amplitude at `period` pixels under a Hann window, phase referred to the middle.
fn component(profile: &[f64], period: f64) -> (f64, f64) {
    let n = profile.len() as f64;
    let middle = (n - 1.0) / 2.0;
    profile
        .iter()
        .enumerate()
        .fold((0.0, 0.0), |(re, im), (i, z)| {
            let x = i as f64;
            let window = 0.5 - 0.5 * (TAU * (x + 0.5) / n).cos();
            let (sin, cos) = (TAU * (x - middle) / period).sin_cos();
            (re + window * z * cos, im - window * z * sin)
        })
}

/// Period of the largest component within a window's width of `rough`, by golden section.
fn strongest(profile: &[f64], rough: f64) -> Option<f64> {
    let power = |frequency: f64| {
        let (re, im) = component(profile, 1.0 / frequency);
        re * re + im * im
    };
    let reach = 0.7 / profile.len() as f64;
    let (mut low, mut high) = (1.0 / rough - reach, 1.0 / rough + reach);
    if low <= 0.0 || power(1.0 / rough) <= 0.0 {
        return None;
    }
    let ratio = (5f64.sqrt() - 1.0) / 2.0;
    for _ in 0..40 {
        let a = high - ratio * (high - low);
        let b = low + ratio * (high - low);
        if power(a) > power(b) {
            high = b
        } else {
            low = a
        }
    }
    Some(2.0 / (low + high))
}

/// Shift of the lines per section, pixels, from the phases of the groups, unwrapped.
fn shear_of(phases: &[(f64, (f64, f64))], period: f64) -> f64 {
    let mut shifts = Vec::with_capacity(phases.len());
    let mut last = 0.0;
    for (i, (_, (re, im))) in phases.iter().enumerate() {
        let mut shift = -im.atan2(*re) / TAU * period;
        if i > 0 {
            shift -= ((shift - last) / period).round() * period;
        }
        last = shift;
        shifts.push(shift);
    }
    let at: Vec<f64> = phases.iter().map(|p| p.0).collect();
    statistics::line(&at, &shifts).map_or(0.0, |l| l.0)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::dimensions::Calibration;
    use crate::heightmap::{HeightMap, Pitch};

    fn measure_map(map: &HeightMap) -> Dimension {
        let input = Input {
            scan: map,
            noise_nm: Some(0.0),
            calibration: Calibration::default(),
            slope: [0.0; 2],
            corrected: None,
        };
        let request = Request::new("g", Kind::Pitch);
        measure(&input, &request, &Progress::new())
            .unwrap()
            .remove(0)
    }

    #[test]
    fn the_period_of_a_skew_sinusoid_is_found() {
        let angle = 3f64.to_radians();
        let map = HeightMap::from_fn(64, 400, Pitch::square(2.0), |x, y| {
            5.0 * (TAU * (x * angle.cos() + y * angle.sin()) / 61.7).cos()
        })
        .unwrap();
        let value = measure_map(&map).as_scanned.unwrap().value;
        assert!((value / 61.7 - 1.0).abs() < 2e-4, "{value}");
    }

    #[test]
    fn the_three_methods_agree_on_a_grating() {
        let map = HeightMap::from_fn(32, 500, Pitch::square(1.0), |x, _| {
            ((9.0 - ((x - 4.3).rem_euclid(41.3) - 20.65).abs()) * 3.0).clamp(0.0, 15.0)
        })
        .unwrap();
        let input = Input {
            scan: &map,
            noise_nm: Some(0.0),
            calibration: Calibration::default(),
            slope: [0.0; 2],
            corrected: None,
        };
        let lines = measure(&input, &Request::new("g", Kind::Pitch), &Progress::new()).unwrap();
        assert_eq!(lines.len(), 3);
        for line in lines {
            let value = line.as_scanned.unwrap().value;
            assert!((value - 41.3).abs() < 0.01, "{}: {value}", line.quantity);
        }
    }

    #[test]
    fn one_line_has_no_pitch() {
        let map = HeightMap::from_fn(20, 60, Pitch::square(1.0), |x, _| {
            if (20.0..40.0).contains(&x) { 5.0 } else { 0.0 }
        })
        .unwrap();
        let line = measure_map(&map);
        assert!(line.as_scanned.is_none() && line.flags[0].contains("fewer than two"));
    }
}
