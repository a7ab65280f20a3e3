//! Line width: the distance between the two walls of a ridge or a trench at fractions of its
//! height above the lower plateau, the plateaus taken locally from both sides.

use super::erosion;
use super::sections::{Frame, Layout};
use super::trace::{self, Correction, Feature, Trace};
use super::wall::{self, Hold};
use super::{
    Axis, Corrected, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer,
};
use crate::error::{Error, ErrorKind, Result};
use crate::morphology::certainty::NEVER;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution, Series};

const ASSUMPTIONS: &str = "Height fractions between local plateaus (densest level within the \
    feature and to both sides); edges by linear interpolation, section by section; no undercut. \
    Threshold width: common practice; contact: J. S. Villarrubia, J. Res. NIST 102, 425 (1997)";

/// Measures the width at each height fraction asked for, one line each.
///
/// Where the region holds several features the most central one is measured, and flagged. Errors
/// of kind `Setting`: a fraction outside 0.02..0.98.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let fractions = if request.at.is_empty() {
        vec![0.5]
    } else {
        request.at.clone()
    };
    if let Some(bad) = fractions.iter().find(|f| !(0.02..=0.98).contains(*f)) {
        return Err(Error::new(
            ErrorKind::Setting,
            format!("\"{}\": height fraction {bad}", request.name),
        )
        .remedy("Give fractions from 0.02 (near the foot) to 0.98 (near the top)"));
    }
    let empty = |f: f64| Dimension {
        at: Some(f),
        ..answer(request, Kind::LineWidth, "line width", "nm", ASSUMPTIONS)
    };
    let feature = match Feature::find(input, request, &fractions)? {
        Ok(feature) => feature,
        Err(reason) => {
            let line = |f: &f64| Dimension {
                flags: vec![format!("not measured: {reason}")],
                ..empty(*f)
            };
            return Ok(fractions.iter().map(line).collect());
        }
    };
    let Feature {
        frame,
        layout,
        scan,
        correction,
    } = &feature;
    progress.check()?;
    let common = common_flags(input, frame, layout, scan);
    Ok((0..fractions.len())
        .map(|i| {
            let mut line = empty(fractions[i]);
            line.quantity = if scan.ridge {
                "line width"
            } else {
                "trench width"
            }
            .to_owned();
            line.flags.clone_from(&common);
            line.marks = scan.marks(frame, i);
            fill(&mut line, input, frame, scan, correction.as_ref(), i);
            line
        })
        .collect())
}

pub(super) fn common_flags(
    input: &Input,
    frame: &Frame,
    layout: &Layout,
    scan: &Trace,
) -> Vec<String> {
    let mut flags = Vec::new();
    if layout.edges.len() > 2 {
        flags.push(format!(
            "the region holds {} edges; the most central {} was measured",
            layout.edges.len(),
            if scan.ridge { "line" } else { "trench" }
        ));
    }
    if scan.height < 10.0 * frame.noise {
        flags.push(format!(
            "the height of {:.2} nm is less than ten times the noise",
            scan.height
        ));
    }
    let voids = frame.of(input.scan).iter().filter(|z| z.is_nan()).count();
    if voids > 0 {
        flags.push(format!("{voids} void pixels inside the region"));
    }
    if scan.imbalance > (0.02 * scan.height).max(5.0 * frame.noise) {
        flags.push(format!(
            "the plateaus to the left and right differ by {:.2} nm",
            scan.imbalance
        ));
    }
    let skew = scan.cosine.acos().to_degrees();
    if skew > 0.5 {
        flags.push(format!(
            "the line runs {skew:.1} degrees askew; widths are taken across it"
        ));
    }
    flags
}

/// Symmetric part of the budget that both columns share.
fn budget_of(trace: &Trace, i: usize, series: &Series, calibration: f64, fraction: f64) -> Budget {
    let slope = trace.walls[0].slope(fraction) + trace.walls[1].slope(fraction);
    let slope = if slope.is_finite() { slope } else { 0.0 };
    let mut budget = Budget::new();
    budget.push(
        "axis calibration",
        calibration,
        Distribution::Normal,
        series.mean,
    );
    let pixel = |k: usize| trace.pixel_u(i, k, fraction, series.effective);
    budget.push(
        "pixel, both edges",
        pixel(0).hypot(pixel(1)),
        Distribution::Rectangular,
        1.0,
    );
    budget.push("plateau levels", trace.level_u, Distribution::Normal, slope);
    let (u, degrees_of_freedom) = trace.repeatability(i, series);
    budget.add(Component {
        source: "repeatability along the line (noise, edge roughness)".to_owned(),
        u,
        distribution: Distribution::Normal,
        sensitivity: 1.0,
        degrees_of_freedom,
    });
    budget
}

/// Fills one result line: height fraction number `i`.
fn fill(
    line: &mut Dimension,
    input: &Input,
    frame: &Frame,
    scan: &Trace,
    correction: Option<&Correction>,
    i: usize,
) {
    let fraction = line.at.unwrap_or(0.5);
    let calibration = match frame.axis {
        Axis::X => input.calibration.x,
        Axis::Y => input.calibration.y,
    };
    let Some(scanned) = scan.width(i) else {
        line.flags
            .push("not measured: no section crosses this height at both walls".to_owned());
        return;
    };
    if scanned.count < 3 {
        line.flags
            .push(format!("too few sections: {}", scanned.count));
    } else if scanned.count * 2 < scan.edges[i][0].len() {
        line.flags.push(format!(
            "only {} of {} sections cross both walls at this height",
            scanned.count,
            scan.edges[i][0].len()
        ));
    }
    let budget = budget_of(scan, i, &scanned, calibration, fraction);
    line.as_scanned = Some(Value {
        value: scanned.mean,
        u: Some(budget.combined(0.95).u),
    });
    match correction {
        Some(correction) => correct(line, frame, scan, &scanned, correction, i, calibration),
        None => {
            trace::flag_lost(line, input);
            line.budget = budget.into_components();
        }
    }
}

/// The corrected column of one line.
fn correct(
    line: &mut Dimension,
    frame: &Frame,
    scan: &Trace,
    scanned: &Series,
    correction: &Correction,
    i: usize,
    calibration: f64,
) {
    let fraction = line.at.unwrap_or(0.5);
    let surface = &correction.surface;
    let given = &correction.given;
    let Some(series) = surface.width(i) else {
        line.flags
            .push("no corrected value: the reconstruction has no such width".to_owned());
        return;
    };
    let holds =
        [0, 1].map(|k| surface.walls[k].hold(&correction.outlines[k], fraction, given.height_u_nm));
    let mut budget = budget_of(surface, i, &series, calibration, fraction);
    let slope: f64 = holds
        .iter()
        .map(|h| h.slope)
        .filter(|s| s.is_finite())
        .sum();
    tip_band(&mut budget, correction, i, slope);
    let inward: f64 = holds
        .iter()
        .map(|h| h.slack)
        .filter(|s| s.is_finite())
        .sum();
    let mut outward = 0.0f64;
    let mut touched = holds.iter().all(|h| h.touched);
    explain(line, &holds, surface);
    if let Some(depth) = given.exercised_depth_nm
        && fraction * surface.height > depth
    {
        touched = false;
        outward = outward.max(if surface.ridge {
            scanned.mean - series.mean
        } else {
            series.mean - scanned.mean
        });
        line.flags.push(format!(
            "the tip is known to {depth:.1} nm depth only: above it the wall lies between the \
             corrected and the scanned one"
        ));
    }
    if !given.identified {
        touched = false;
        outward = outward.max((scanned.mean - series.mean).abs());
        line.flags
            .push("the tip is not identified: bounds only".to_owned());
    }
    if inward + outward > 0.0 {
        let u = (inward + outward) / 12f64.sqrt();
        budget.push("wall between its bounds", u, Distribution::OneSided, 1.0);
    }
    // Outwards is wider for a ridge and narrower for a trench.
    let sign = if surface.ridge { 1.0 } else { -1.0 };
    let erosion = erosion_shift(frame, scan, surface, given, &holds);
    budget.push(
        "noise and pixel grid in the reconstruction",
        erosion.abs() / 12f64.sqrt(),
        Distribution::Rectangular,
        1.0,
    );
    // The middle of what the physics leaves.
    let likely: f64 = holds
        .iter()
        .map(|h| h.likely)
        .filter(|s| s.is_finite())
        .sum();
    let shift = (outward - likely) / 2.0;
    let value = series.mean + sign * (shift - erosion);
    let inner = shift + inward;
    let mut out = outward - shift;
    if given.contains_feature_radius {
        let radius = correction.outlines[0].apex_radius().unwrap_or(0.0);
        let shift: f64 = holds
            .iter()
            .map(|h| radius * wall::shift_per_radius(h.slope))
            .sum();
        budget.push_one_sided("radius of the feature that showed the tip", shift);
        out += shift;
        line.flags.push(format!(
            "the tip contains the radius of the sharpest feature, unknown up to {radius:.1} nm: \
             state it to narrow the interval"
        ));
    }
    let (below, above) = if surface.ridge {
        (inner, out)
    } else {
        (out, inner)
    };
    let (low, high) = budget.interval(value, below, above, 0.95);
    let all = budget.combined(0.95);
    let known = given.identified;
    line.corrected = Some(CorrectedValue {
        value: known.then_some(value),
        u: known.then_some(all.u),
        expanded: known.then_some(all.expanded),
        k: known.then_some(all.k),
        low: Some(low.max(0.0)),
        high: Some(high.max(0.0)),
    });
    line.status = Some(if touched {
        Status::Touched
    } else {
        Status::Bounded
    });
    lean(line, frame, surface, given, i);
    if scan.height < 0.5 * surface.height {
        line.flags
            .push("the scan shows less than half of the corrected height".to_owned());
    }
    line.budget = budget.into_components();
}

/// How much further out than the surface the two walls of the reconstruction stand, together, nm,
/// because noise erodes the plateaus more than the walls and contacts fall between tip cells. The
/// noise part is scaled by what the plateaus were seen to sink, so that it also holds for noise
/// that is not white.
fn erosion_shift(
    frame: &Frame,
    scan: &Trace,
    surface: &Trace,
    given: &Corrected,
    holds: &[Hold; 2],
) -> f64 {
    let bias = |positive: bool, slope: f64| {
        erosion::bias(given.tip, frame.axis, positive, slope, frame.noise)
    };
    let flat = bias(true, f64::INFINITY).noise;
    let sunk = (0..2)
        .map(|i| surface.levels[i] - scan.levels[i])
        .sum::<f64>()
        / 2.0;
    let scale = if flat < 0.0 {
        (sunk / flat).clamp(0.0, 1.5)
    } else {
        0.0
    };
    [(!surface.ridge, holds[0]), (surface.ridge, holds[1])]
        .into_iter()
        .filter(|(_, hold)| hold.slope.is_finite())
        .map(|(positive, hold)| {
            let wall = bias(positive, hold.slope);
            hold.slope * (wall.grid + scale * (wall.noise - flat))
        })
        .sum()
}

/// The tip's doubt: from the surfaces with the band's tips, else from its heights.
fn tip_band(budget: &mut Budget, correction: &Correction, i: usize, slope: f64) {
    let width = |t: &Option<Trace>| t.as_ref().and_then(|t| Some(t.width(i)?.mean));
    let here = correction.surface.width(i).map_or(0.0, |s| s.mean);
    let (upper, lower) = (width(&correction.upper), width(&correction.lower));
    let height_u = correction.given.height_u_nm.max(0.0);
    if upper.is_some() || lower.is_some() {
        // The band is one of about 95 % (two standard uncertainties to each side).
        let apart = [upper, lower]
            .into_iter()
            .flatten()
            .map(|w| (w - here).abs());
        let u = apart.fold(0.0, f64::max) / 2.0;
        budget.push("tip band", u, Distribution::Normal, 1.0);
    } else if height_u > 0.0 {
        budget.push("heights of the tip", height_u, Distribution::Normal, slope);
    }
}

fn explain(line: &mut Dimension, holds: &[Hold; 2], surface: &Trace) {
    let which = match (holds[0].touched, holds[1].touched) {
        (true, true) => return,
        (false, false) => "neither wall was touched",
        (false, true) => "the left wall was not touched",
        (true, false) => "the right wall was not touched",
    };
    line.flags.push(format!(
        "{which} at this height: it is as steep as the tip's flank or steeper; the interval runs \
         from the {} that was touched to the reconstruction, no undercut assumed",
        if surface.ridge {
            "shoulder above"
        } else {
            "rim above"
        }
    ));
}

/// Flags edges that lean on the rim of the scan or that the tip never touched.
pub(super) fn lean(
    line: &mut Dimension,
    frame: &Frame,
    surface: &Trace,
    given: &Corrected,
    i: usize,
) {
    let leaning = frame.of_array(given.edge_leaning);
    let certainty = frame.of_array(given.certainty);
    let (mut total, mut leans, mut never) = (0usize, 0usize, 0usize);
    for edge in &surface.edges[i] {
        for (section, at) in edge.iter().enumerate().filter(|(_, at)| at.is_finite()) {
            let pixel = [
                section,
                (at.round().max(0.0) as usize).min(leaning.ncols() - 1),
            ];
            total += 1;
            leans += usize::from(leaning[pixel]);
            never += usize::from(certainty[pixel] == NEVER);
        }
    }
    let percent = |n: usize| 100.0 * n as f64 / total.max(1) as f64;
    if leans > 0 {
        line.flags.push(format!(
            "{:.0} % of the edge pixels lean on the edge of the scan or on voids",
            percent(leans).max(1.0)
        ));
    }
    if never * 10 > total {
        line.flags.push(format!(
            "{:.0} % of the edge pixels were never a contact of the tip",
            percent(never)
        ));
    }
}
