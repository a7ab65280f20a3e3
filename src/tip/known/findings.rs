//! From the fit to the result: what is determined, how well, and what is wrong.

use super::fit::{Fit, Pixel};
use super::free_form::{Cell, free_form, stack};
use super::shape::{Certified, Quantity, Shape};
use super::state::{Parameter, State};
use super::{ANGLES, CLOSEST, Formula, Influence, Known, Settings, faces};
use crate::error::Result;
use crate::heightmap::HeightMap;
use crate::progress::Progress;
use crate::tip::read_out::{ApexRadius, HalfAngle, ReadOut};
use crate::tip::{Band, Tip};
use crate::units::format_length;

/// A half-angle less certain than this is not printed, degrees.
const LOOSEST_ANGLE: f64 = 3.0;
/// A radius less certain than this part of itself is not printed.
const LOOSEST_RADIUS: f64 = 0.25;
/// A misfit at the edges beyond this many pixels and parts of the noise is one of shape.
const MISFIT: [f64; 2] = [0.1, 0.5];

pub(super) fn known(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    fit: Fit,
    pixels: &[Pixel],
    progress: &Progress,
) -> Result<Known> {
    let state = &fit.state;
    let px = (scan.pitch().x * scan.pitch().y).sqrt();
    let cells = stack(state, pixels, px);
    let seen = Seen::of(&fit, &cells);
    let misfit_nm = misfit(&cells);
    let flat = fit.sd.min(noise.max(0.3 * fit.sd));
    let wrong = misfit_nm > MISFIT[0] * px + MISFIT[1] * flat;
    let mut read_out = read_outs(&fit, &seen);
    let mut diagnosis = Vec::new();
    if wrong {
        diagnosis.push(format!(
            "The scan does not look like the certified shape under this tip: at the edges {} (root \
             mean square) is left beyond the noise of {}. Check the certified values, the scan's \
             scale and the formula of the tip.",
            format_length(misfit_nm),
            format_length(fit.sd)
        ));
        read_out = ReadOut {
            reasons: vec![
                "No radius and no half-angle: the fit does not describe the scan.".to_owned(),
            ],
            ..ReadOut::default()
        };
    }
    if !fit.settled {
        diagnosis.push("The fit did not settle. Scan more edges or with less noise.".to_owned());
    }
    diagnosis.extend(read_out.reasons.iter().cloned());
    diagnosis.extend(contradictions(&fit, px));
    diagnosis.extend(remarks(&fit, &seen));
    let identified = !wrong
        && fit.settled
        && match state.formula {
            Formula::Pyramid => read_out.half_angle.is_some(),
            _ => read_out.apex_radius.is_some(),
        };
    let (tip, band, height_u_nm) = grids(&fit, &seen, settings, misfit_nm)?;
    let half = [tip.shape().nrows() / 2, tip.shape().ncols() / 2];
    let free_form = free_form(
        state,
        &cells,
        0.97 * seen.depth,
        fit.sd,
        settings.pitch,
        half,
        progress,
    )?;
    let influences = influences(&fit, &read_out);
    Ok(Known {
        shape: settings.shape,
        formula: settings.formula,
        tip,
        band: identified.then_some(band),
        free_form,
        exercised_depth_nm: seen.depth,
        height_u_nm,
        azimuths_deg: seen.azimuths,
        rotation_deg: state.shape.is_straight().then_some(state.turn),
        slope: state.slope,
        features: match state.shape {
            Shape::Ridges { .. } => (state.ridges[1] - state.ridges[0] + 1).max(1) as usize,
            Shape::Step { .. } => 1,
            _ => state.places.len(),
        },
        residual_nm: fit.sd,
        misfit_nm,
        influences,
        identified,
        diagnosis,
        read_out,
    })
}

/// What of the tip the contacts showed.
struct Seen {
    /// Deepest contact below the apex, nm.
    depth: f64,
    /// Whether the flank touched, not only the apex.
    flank: bool,
    /// Depth at which the round apex goes over into the flank, nm; infinite for a paraboloid.
    tangent: f64,
    azimuths: Vec<f64>,
}

impl Seen {
    fn of(fit: &Fit, cells: &[Cell]) -> Self {
        let state = &fit.state;
        let n = state.normal();
        let wrapped = |degrees: f64| degrees.rem_euclid(360.0);
        let azimuths = match state.shape {
            Shape::Ridges { .. } => vec![wrapped(state.turn), wrapped(state.turn + 180.0)],
            Shape::Step { .. } => vec![wrapped(state.turn)],
            _ => Vec::new(),
        };
        let angle = if state.shape.is_straight() {
            state.half_angle(n).max(match state.shape {
                Shape::Ridges { .. } => state.half_angle([-n[0], -n[1]]),
                _ => 0.0,
            })
        } else {
            state.faces.iter().copied().fold(0.0, f64::max)
        };
        let wall = state.corner.wall.min(90.0);
        let (top, low) = if state.shape.is_straight() {
            let low = cells.iter().map(|c| c.height).fold(f64::INFINITY, f64::min);
            (state.height, low.clamp(0.0, state.height))
        } else {
            let tops = state.places.iter().map(|p| p.top);
            (tops.fold(0.0, f64::max), 0.0)
        };
        let rho = state.corner.radius;
        // Where the apex rests lowest the tip touches the shape at its own slope.
        let under = |slope_angle: f64| top - low - rho * (1.0 - slope_angle.to_radians().cos());
        match state.formula {
            Formula::Paraboloid => {
                let wall = wall.to_radians();
                let (depth, radius) = (under(90.0f64.min(wall.to_degrees())), state.radius);
                let steepest = 0.5 * radius * wall.tan().powi(2);
                Self {
                    depth: if wall.to_degrees() >= 89.9 {
                        depth
                    } else {
                        steepest.min(depth)
                    },
                    flank: false,
                    tangent: f64::INFINITY,
                    azimuths,
                }
            }
            _ => {
                let radius = if state.formula == Formula::Pyramid {
                    0.0
                } else {
                    state.radius
                };
                let flank_slope = 90.0 - angle;
                let tangent = radius * (1.0 - angle.to_radians().sin());
                let flank = flank_slope < wall && under(flank_slope) > tangent;
                let depth = if flank {
                    under(flank_slope)
                } else {
                    let steepest = flank_slope.min(wall).to_radians();
                    (radius * (1.0 - steepest.cos())).min(under(flank_slope.min(wall)))
                };
                Self {
                    depth: depth.max(0.0),
                    flank,
                    tangent,
                    azimuths,
                }
            }
        }
    }
}

/// Root mean square of the mean residuals at the edges, less what the noise gives, nm.
fn misfit(cells: &[Cell]) -> f64 {
    let (mut sum, mut count) = (0.0, 0.0);
    for cell in cells.iter().filter(|c| c.edge) {
        let mean = cell.residual * cell.residual;
        let by_noise = if cell.count > 1.0 {
            (cell.square - mean).max(0.0) / (cell.count - 1.0)
        } else {
            mean
        };
        sum += cell.count * (mean - by_noise);
        count += cell.count;
    }
    (sum / f64::max(count, 1.0)).max(0.0).sqrt()
}

fn read_outs(fit: &Fit, seen: &Seen) -> ReadOut {
    let state = &fit.state;
    let mut out = ReadOut::default();
    match state.formula {
        Formula::Pyramid => out
            .reasons
            .push("No apex radius: a pyramid of four faces has none.".to_owned()),
        _ => match radius(fit, seen) {
            Ok(radius) => out.apex_radius = Some(radius),
            Err(why) => out.reasons.push(why),
        },
    }
    match state.formula {
        Formula::Paraboloid => out
            .reasons
            .push("No half-angle: a paraboloid has none.".to_owned()),
        _ => match half_angle(fit, seen) {
            Ok(angle) => out.half_angle = Some(angle),
            Err(why) => out.reasons.push(why),
        },
    }
    out
}

fn radius(fit: &Fit, seen: &Seen) -> std::result::Result<ApexRadius, String> {
    let state = &fit.state;
    let (value, u) = (state.radius, fit.u(Parameter::Radius));
    if !(u <= LOOSEST_RADIUS * value) {
        let quantity = match state.shape {
            Shape::Sphere { .. } => Quantity::Diameter,
            Shape::Spike { .. } => Quantity::Radius,
            _ => Quantity::CornerRadius,
        };
        let by_shape = fit
            .index(Parameter::Radius)
            .and_then(|i| Some(fit.shift(Parameter::Certified(quantity))?[i].abs()));
        let why = if by_shape.is_some_and(|s| s > 0.7 * u) {
            format!(
                "the certified {} is too uncertain for so sharp a tip",
                quantity.name()
            )
        } else {
            "the scan does not tell it".to_owned()
        };
        return Err(format!(
            "No radius: {value:.2} nm with a standard uncertainty of {u:.2} nm was found; {why}."
        ));
    }
    Ok(ApexRadius {
        value,
        u,
        fit_depth_nm: seen.tangent.min(seen.depth),
        principal_nm: [value, value],
        // The formula that was fitted is the one or the other.
        sphere_nm: (state.formula == Formula::SphereCone).then_some(value),
        paraboloid_nm: (state.formula == Formula::Paraboloid).then_some(value),
    })
}

fn half_angle(fit: &Fit, seen: &Seen) -> std::result::Result<HalfAngle, String> {
    let state = &fit.state;
    let own = 90.0 - state.corner.wall.min(90.0);
    let (shape_u, what) = match state.shape {
        Shape::Spike { .. } => (fit.u(Parameter::Certified(Quantity::HalfAngle)), "spike"),
        _ => (fit.u(Parameter::Certified(Quantity::WallAngle)), "walls"),
    };
    let sets = faces(state);
    let mut per_azimuth = Vec::new();
    let (mut sum, mut squares) = (0.0, 0.0);
    for which in &sets {
        let parameter = Parameter::HalfAngle(*which);
        let (value, u) = (state.get(parameter), fit.u(parameter));
        // A flank steeper than the shape's own never touches it.
        if value < own + 3.0 * u.min(LOOSEST_ANGLE).hypot(shape_u) && own > ANGLES[0] {
            return Err(format!(
                "No half-angle: the tip's flank is as steep as the {what} ({own:.2} degrees from \
                 the vertical) or steeper, so it did not touch."
            ));
        }
        if u > LOOSEST_ANGLE || !seen.flank {
            return Err(format!(
                "No half-angle: contacts reach {:.2} nm below the apex, which does not tell the \
                 flank.",
                seen.depth
            ));
        }
        sum += value;
        squares += u * u;
        if seen.azimuths.is_empty() {
            let azimuths = [180.0, 0.0, 270.0, 90.0];
            let own = azimuths.iter().zip(which).filter(|(_, w)| **w);
            per_azimuth.extend(own.map(|(azimuth, _)| (*azimuth, value)));
        }
    }
    let n = sets.len() as f64;
    let mut value = sum / n;
    if !seen.azimuths.is_empty() {
        // What straight edges show is the section across them.
        per_azimuth = seen
            .azimuths
            .iter()
            .map(|a| {
                let (sin, cos) = a.to_radians().sin_cos();
                (*a, state.half_angle([cos, sin]))
            })
            .collect();
        value = per_azimuth.iter().map(|p| p.1).sum::<f64>() / per_azimuth.len() as f64;
    }
    Ok(HalfAngle {
        value,
        u: squares.sqrt() / n,
        between_nm: [seen.tangent, seen.depth],
        per_azimuth,
        tilt: None,
    })
}

/// Certified values that the scan speaks against.
fn contradictions(fit: &Fit, px: f64) -> Vec<String> {
    let mut out = Vec::new();
    for (quantity, certified) in fit.state.shape.certified() {
        let parameter = Parameter::Certified(quantity);
        let found = fit.state.get(parameter);
        let is_angle = quantity.unit() == "deg";
        let closest = if is_angle { CLOSEST } else { CLOSEST * px };
        let off = (found - certified.value).abs();
        if off > 3.0 * certified.u.max(closest) && off > 2.0 * closest {
            let unit = quantity.unit();
            out.push(format!(
                "The scan asks for a {} of {found:.2} {unit}, certified is {} {unit} with a standard \
                 uncertainty of {} {unit}. Check the certificate and the scan's scale.",
                quantity.name(),
                certified.value,
                certified.u
            ));
        }
    }
    out
}

/// What the reader must know though nothing is wrong.
fn remarks(fit: &Fit, seen: &Seen) -> Vec<String> {
    let state = &fit.state;
    let mut out = Vec::new();
    if !seen.azimuths.is_empty() {
        let list: Vec<String> = seen.azimuths.iter().map(|a| format!("{a:.1}")).collect();
        let rest = match state.formula {
            Formula::Pyramid => "the other faces are taken as their mean",
            _ => "elsewhere it is taken as round",
        };
        out.push(format!(
            "The tip was seen across the edges only, towards {} degrees from +x; {rest}.",
            list.join(" and ")
        ));
    }
    if state.shape.certified().iter().all(|(_, c)| c.u == 0.0) {
        out.push(
            "No uncertainty was stated for the certified values: none is carried into the results. \
             State it, as u-width for width."
                .to_owned(),
        );
    }
    out
}

fn influences(fit: &Fit, read: &ReadOut) -> Vec<Influence> {
    let of = |quantity: Quantity, certified: Certified| {
        let parameter = Parameter::Certified(quantity);
        let shift = fit.shift(parameter);
        let on = |other: Parameter| Some(shift.as_ref()?[fit.index(other)?]);
        let angles: Vec<f64> = faces(&fit.state)
            .into_iter()
            .filter_map(|which| on(Parameter::HalfAngle(which)))
            .collect();
        let mean = angles.iter().sum::<f64>() / angles.len().max(1) as f64;
        Influence {
            quantity,
            certified,
            adjusted: Certified::new(fit.state.get(parameter), fit.u(parameter)),
            radius_nm: on(Parameter::Radius).filter(|_| read.apex_radius.is_some()),
            half_angle_deg: read.half_angle.as_ref().map(|_| mean),
        }
    };
    let certified = fit.state.shape.certified();
    certified.into_iter().map(|(q, c)| of(q, c)).collect()
}

/// The tip on its grid, the band, and the standard uncertainty along the normal.
fn grids(fit: &Fit, seen: &Seen, settings: &Settings, misfit: f64) -> Result<(Tip, Band, f64)> {
    let state = &fit.state;
    let model = state.model();
    let whole = model.sample(settings.support_nm, settings.pitch)?;
    let own: Vec<usize> = (0..fit.unknowns.len())
        .filter(|&i| {
            matches!(
                fit.unknowns[i].parameter,
                Parameter::Radius | Parameter::HalfAngle(_)
            )
        })
        .collect();
    // One model to each side of every unknown, for the slopes.
    let moved: Vec<(State, State, f64)> = own
        .iter()
        .map(|&i| {
            let unknown = &fit.unknowns[i];
            let here = state.get(unknown.parameter);
            let at = |value: f64| {
                let mut other = state.clone();
                other.set(unknown.parameter, value);
                other
            };
            let down = (here - unknown.step).max(0.0);
            (
                at(here + unknown.step),
                at(down),
                here + unknown.step - down,
            )
        })
        .collect();
    let flank_known = seen.flank || state.formula == Formula::Paraboloid;
    let pitch = settings.pitch;
    let mut shape = whole.shape().to_owned();
    let mut sharper = shape.clone();
    let mut blunter = shape.clone();
    let centre = [shape.nrows() / 2, shape.ncols() / 2];
    let mut normals = Vec::new();
    for ((r, c), p) in whole.shape().indexed_iter() {
        if [r, c] == centre {
            continue;
        }
        let x = (c as f64 - centre[1] as f64) * pitch.x;
        let y = (r as f64 - centre[0] as f64) * pitch.y;
        let depth = -f64::from(*p);
        let slopes: Vec<f64> = moved
            .iter()
            .map(|(up, down, span)| (up.model().height(x, y) - down.model().height(x, y)) / span)
            .collect();
        let mut variance = misfit * misfit;
        for (a, &i) in own.iter().enumerate() {
            for (b, &j) in own.iter().enumerate() {
                variance += slopes[a] * slopes[b] * fit.covariance[(i, j)];
            }
        }
        let u = variance.max(0.0).sqrt();
        let half = 2.0 * u;
        let beyond = depth > seen.depth && !flank_known;
        if beyond {
            shape[[r, c]] = f32::NEG_INFINITY;
            sharper[[r, c]] = f32::NEG_INFINITY;
            blunter[[r, c]] = (-(seen.depth - half).max(0.0)) as f32;
        } else {
            sharper[[r, c]] = (-(depth + half)) as f32;
            blunter[[r, c]] = (-(depth - half).max(0.0)) as f32;
        }
        if depth <= seen.depth {
            let step = 0.1 * pitch.x.min(pitch.y);
            let gx = (model.height(x + step, y) - model.height(x - step, y)) / (2.0 * step);
            let gy = (model.height(x, y + step) - model.height(x, y - step)) / (2.0 * step);
            normals.push(u / (1.0 + gx * gx + gy * gy).sqrt());
        }
    }
    normals.sort_by(f64::total_cmp);
    let height_u = normals.get(normals.len() / 2).copied().unwrap_or(0.0);
    Ok((
        Tip::new(shape, pitch)?,
        Band {
            sharper: Tip::new(sharper, pitch)?,
            blunter: Tip::new(blunter, pitch)?,
        },
        height_u,
    ))
}
