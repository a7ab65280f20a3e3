//! Side-wall angle: the slope of each wall of a ridge or a trench between two height fractions.

use super::line_width::common_flags;
use super::statistics;
use super::trace::{self, Correction, Feature, Trace};
use super::{
    Axis, Calibration, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer,
};
use crate::error::{Error, ErrorKind, Result};
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series};

const ASSUMPTIONS: &str = "Angle from the horizontal of the straight line through the wall \
    between two height fractions, edge position regressed on height, section by section; the wall \
    straight between them and not undercut. Line through threshold edges: common practice; an \
    imaged wall is never steeper than the tip's flank: J. S. Villarrubia, J. Res. NIST 102, 425 \
    (1997)";

/// Heights between the two fractions at which the wall is taken.
const HEIGHTS: usize = 9;
/// Fractions where none are asked for: clear of the tip's apex at the foot and of the shoulder.
const USUAL: [f64; 2] = [0.3, 0.8];
/// Sides, in the order of [`Trace::walls`].
const SIDES: [&str; 2] = ["left", "right"];

/// Measures the angle of the left and of the right wall, one line each.
///
/// Errors of kind `Setting`: other than two fractions, or two closer than 0.1 or outside
/// 0.02..0.98.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let [from, to] = match request.at[..] {
        [] => USUAL,
        [a, b] if (a - b).abs() >= 0.1 && a.min(b) >= 0.02 && a.max(b) <= 0.98 => {
            [a.min(b), a.max(b)]
        }
        _ => {
            return Err(Error::new(
                ErrorKind::Setting,
                format!("\"{}\": height fractions {:?}", request.name, request.at),
            )
            .remedy("Give two fractions from 0.02 to 0.98, at least 0.1 apart: [0.3, 0.8]"));
        }
    };
    let fractions: Vec<f64> = (0..HEIGHTS)
        .map(|i| from + (to - from) * i as f64 / (HEIGHTS - 1) as f64)
        .collect();
    let mut lines = SIDES.map(|side| {
        let quantity = format!("side-wall angle, {side} wall");
        answer(request, Kind::SideWallAngle, &quantity, "deg", ASSUMPTIONS)
    });
    let feature = match Feature::find(input, request, &fractions)? {
        Ok(feature) => feature,
        Err(reason) => {
            for line in &mut lines {
                line.flags.push(format!("not measured: {reason}"));
            }
            return Ok(lines.into());
        }
    };
    progress.check()?;
    let common = common_flags(input, &feature.frame, &feature.layout, &feature.scan);
    for (k, line) in lines.iter_mut().enumerate() {
        line.flags.clone_from(&common);
        line.flags.push(format!(
            "taken between {:.0} % and {:.0} % of the height",
            100.0 * from,
            100.0 * to
        ));
        line.marks = feature.scan.marks(&feature.frame, HEIGHTS / 2);
        fill(line, input, &feature, &fractions, k);
    }
    Ok(lines.into())
}

/// Lateral slope of wall `k`, nm along per nm of height, of each section: NaN where fewer than
/// three heights are crossed. A wall that leans outwards towards its foot has a positive one.
fn slopes(trace: &Trace, fractions: &[f64], k: usize) -> Vec<f64> {
    // The left wall of a ridge and the right one of a trench lie outwards at smaller positions.
    let outwards = if trace.ridge == (k == 0) { -1.0 } else { 1.0 };
    let heights: Vec<f64> = fractions.iter().map(|f| f * trace.height).collect();
    let sections = trace.edges[0][k].len();
    let all: Vec<f64> = (0..sections)
        .map(|s| {
            let at: Vec<f64> = trace
                .edges
                .iter()
                .map(|pair| outwards * pair[k][s] * trace.pitch * trace.cosine)
                .collect();
            if at.iter().filter(|v| v.is_finite()).count() < 3 {
                return f64::NAN;
            }
            statistics::line(&heights, &at).map_or(f64::NAN, |l| -l.0)
        })
        .collect();
    statistics::clipped(&all, 5.0)
}

/// Angle from the horizontal of a lateral slope, degrees.
fn angle(slope: f64) -> f64 {
    90.0 - slope.atan().to_degrees()
}

/// Size of the derivative of [`angle`], degrees per unit slope.
fn per_slope(slope: f64) -> f64 {
    (1.0 / (1.0 + slope * slope)).to_degrees()
}

fn budget_of(
    trace: &Trace,
    fractions: &[f64],
    k: usize,
    series: &Series,
    calibration: Calibration,
    axis: Axis,
) -> Budget {
    let slope = series.mean;
    let lateral = match axis {
        Axis::X => calibration.x,
        Axis::Y => calibration.y,
    };
    let sensitivity = per_slope(slope);
    let mut budget = Budget::new();
    let mut push = |source: &str, u: f64, distribution| {
        budget.push(source, u, distribution, sensitivity);
    };
    push(
        "axis calibration",
        slope.abs() * lateral,
        Distribution::Normal,
    );
    push(
        "z calibration",
        slope.abs() * calibration.z,
        Distribution::Normal,
    );
    // A threshold's height is known to level_u, the step between the plateaus to twice that.
    push(
        "plateau levels",
        slope.abs() * 2.0 * trace.level_u / trace.height,
        Distribution::Normal,
    );
    // What the pixels do to both ends alike leaves the slope: a third is left (chosen on virtual
    // scans, examples/dimension_validation.rs).
    let span = 3.0 * (fractions[fractions.len() - 1] - fractions[0]) * trace.height;
    let pixel = |i: usize| trace.pixel_u(i, k, fractions[i], series.effective);
    push(
        "pixel, at both heights",
        pixel(0).hypot(pixel(fractions.len() - 1)) / span,
        Distribution::Rectangular,
    );
    budget.add(Component {
        source: "repeatability along the line (noise, edge roughness)".to_owned(),
        u: series.standard_error(),
        distribution: Distribution::Normal,
        sensitivity,
        degrees_of_freedom: series.degrees_of_freedom(),
    });
    budget
}

fn fill(line: &mut Dimension, input: &Input, feature: &Feature, fractions: &[f64], k: usize) {
    let (scan, axis) = (&feature.scan, feature.frame.axis);
    let Some(series) = Series::of(&slopes(scan, fractions, k)) else {
        line.flags
            .push("not measured: no section crosses three heights of this wall".to_owned());
        return;
    };
    let budget = budget_of(scan, fractions, k, &series, input.calibration, axis);
    let scanned = angle(series.mean);
    let u = budget.combined(0.95);
    line.as_scanned = Some(Value {
        value: scanned,
        u: Some(u.u),
    });
    match &feature.correction {
        Some(correction) => {
            let seen = scanned - u.expanded;
            correct(line, input, feature, correction, fractions, k, seen);
        }
        None => {
            trace::flag_lost(line, input);
            line.budget = budget.into_components();
        }
    }
}

/// The corrected column. `scanned` is the lower end of the interval of the scan's own wall: a wall
/// is never flatter than it is seen.
fn correct(
    line: &mut Dimension,
    input: &Input,
    feature: &Feature,
    correction: &Correction,
    fractions: &[f64],
    k: usize,
    scanned: f64,
) {
    let surface = &correction.surface;
    let given = &correction.given;
    let slope_of = |trace: &Trace| Series::of(&slopes(trace, fractions, k));
    let Some(series) = slope_of(surface) else {
        line.flags
            .push("no corrected value: the reconstruction has no such wall".to_owned());
        return;
    };
    let axis = feature.frame.axis;
    let mut budget = budget_of(surface, fractions, k, &series, input.calibration, axis);
    // A touched straight wall is touched by one place of the tip: an error of the tip shifts it
    // and leaves its slope. What is left of it shows in the surfaces of the band.
    let apart = [&correction.upper, &correction.lower]
        .into_iter()
        .filter_map(|trace| Some((slope_of(trace.as_ref()?)?.mean - series.mean).abs()))
        .fold(0.0, f64::max);
    if apart > 0.0 {
        let sensitivity = per_slope(series.mean);
        budget.push("tip band", apart / 2.0, Distribution::Normal, sensitivity);
    }
    let ends = [0, fractions.len() / 2, fractions.len() - 1];
    let wall = &surface.walls[k];
    let outline = &correction.outlines[k];
    let at_flank = ends
        .iter()
        .any(|&i| !wall.hold(outline, fractions[i], given.height_u_nm).touched);
    let deepest = fractions[fractions.len() - 1] * surface.height;
    let unknown = given.exercised_depth_nm.is_some_and(|d| deepest > d);
    let value = angle(series.mean);
    let all = budget.combined(0.95);
    if at_flank {
        line.flags.push(
            "the wall is as steep as the tip's flank or steeper: the angle lies between the one \
             seen and 90 degrees, no undercut assumed"
                .to_owned(),
        );
    }
    if unknown {
        line.flags.push(format!(
            "the tip is known to {:.1} nm depth only, less than the height of this wall",
            given.exercised_depth_nm.unwrap_or(0.0)
        ));
    }
    if !given.identified {
        line.flags
            .push("the tip is not identified: bounds only".to_owned());
    }
    let touched = !(at_flank || unknown) && given.identified;
    line.corrected = Some(if touched {
        CorrectedValue {
            low: Some((value - all.expanded).max(0.0)),
            high: Some((value + all.expanded).min(90.0).max(value)),
            ..CorrectedValue::around(value, &all)
        }
    } else {
        let seen = value - all.expanded;
        // Without the tip only the scan's wall is sure not to be steeper than the true one.
        let low = if unknown || !given.identified {
            seen.min(scanned)
        } else {
            seen
        };
        CorrectedValue::between(Some(low.clamp(0.0, 90.0)), Some(90.0))
    });
    line.status = Some(if touched {
        Status::Touched
    } else {
        Status::Bounded
    });
    line.budget = budget.into_components();
}
