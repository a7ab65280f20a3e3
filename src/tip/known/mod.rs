//! The tip from a scan of a known characterizer: ridges, a step, spheres, spikes of certified
//! shape.
//!
//! The shape is registered in the scan (position, rotation, tilt, base), then the tip is found in
//! two ways: by least squares of the image that a tip given by formula makes of the shape, and
//! free-form, by erosion with the shape. The certified values' uncertainties enter both the
//! registration and the tip. Ridges and steps show the tip across their edges only.

mod findings;
mod fit;
mod free_form;
mod image;
mod register;
mod shape;
mod state;
#[cfg(test)]
mod tests;

pub use free_form::FreeForm;
pub use shape::{Certified, Quantity, Shape};

use super::model::Model;
use super::read_out::ReadOut;
use super::{Band, Tip};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, Pitch};
use crate::progress::Progress;
use fit::{Fit, Pixel, Unknown};
use state::{Parameter, State};

/// The formula that is fitted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Formula {
    /// Sphere and cone: radius, half-angle.
    #[default]
    SphereCone,
    /// Paraboloid: radius.
    Paraboloid,
    /// Four faces: half-angles; no radius.
    Pyramid,
}

impl Formula {
    /// "sphere-cone", "paraboloid", "pyramid".
    pub fn name(self) -> &'static str {
        match self {
            Self::SphereCone => "sphere-cone",
            Self::Paraboloid => "paraboloid",
            Self::Pyramid => "pyramid",
        }
    }
}

/// What to estimate from.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Settings {
    /// The certified shape.
    pub shape: Shape,
    /// The formula to fit.
    pub formula: Formula,
    /// Full width of the tip grids, nm.
    pub support_nm: f64,
    /// Pitch of the tip grids; that of the scan to be corrected.
    pub pitch: Pitch,
}

/// What one certified value does to the tip.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Influence {
    /// Which value.
    pub quantity: Quantity,
    /// As certified.
    pub certified: Certified,
    /// What certificate and scan together say: value and standard uncertainty.
    pub adjusted: Certified,
    /// Change of the apex radius when the certified value grows by its standard uncertainty, nm;
    /// `None` where the formula has none or it is not determined.
    pub radius_nm: Option<f64>,
    /// The same of the half-angle, degrees.
    pub half_angle_deg: Option<f64>,
}

/// The tip from a known characterizer.
#[derive(Debug, Clone)]
pub struct Known {
    /// The certified shape.
    pub shape: Shape,
    /// The formula fitted.
    pub formula: Formula,
    /// The fitted tip on its grid; what is not determined is outside the tip.
    pub tip: Tip,
    /// Two standard uncertainties to each side; not determined: outside the sharper, in the blunter.
    pub band: Option<Band>,
    /// Radius and half-angle of the fit; `None` where not determined.
    pub read_out: ReadOut,
    /// The free-form tip.
    pub free_form: FreeForm,
    /// Depth below the apex to which contacts reached, nm.
    pub exercised_depth_nm: f64,
    /// Standard uncertainty of the fitted tip's surface along its normal, nm.
    pub height_u_nm: f64,
    /// Azimuths at which the tip was seen, degrees; empty = all around.
    pub azimuths_deg: Vec<f64>,
    /// Direction across the ridges or up the step, degrees from +x; `None` for round features.
    pub rotation_deg: Option<f64>,
    /// Slope of the characterizer's base in the levelled scan, along x and y, nm per nm.
    pub slope: [f64; 2],
    /// Spheres, spikes or ridges that showed the tip.
    pub features: usize,
    /// Standard deviation of what the fit leaves, nm.
    pub residual_nm: f64,
    /// What it leaves at the edges beyond the noise, root mean square, nm.
    pub misfit_nm: f64,
    /// The certified values and what each does.
    pub influences: Vec<Influence>,
    /// Whether the tip is known well enough for corrected values.
    pub identified: bool,
    /// Findings, plain sentences, worst first.
    pub diagnosis: Vec<String>,
}

/// More pixels than this are thinned out by whole rows.
const MOST_PIXELS: usize = 300_000;
/// Nothing is known closer than this part of a pixel, or this many degrees: certified values, radius
/// and half-angles alike. Tuned on virtual scans.
const CLOSEST: f64 = 0.01;
/// Half-angles that can be told, degrees.
const ANGLES: [f64; 2] = [0.5, 80.0];

/// Estimates the tip from the levelled `scan` of a known characterizer; `noise_nm` as measured.
///
/// Errors: kind `Data` where the scan does not show the shape (with what to do), `Setting` for
/// certified values or a support that cannot be used, `Cancelled`. What the scan does not determine
/// is `None` with the reason in `read_out.reasons`. Deterministic for any number of threads.
pub fn estimate(
    scan: &HeightMap,
    noise_nm: Option<f64>,
    settings: &Settings,
    progress: &Progress,
) -> Result<Known> {
    let shape = settings.shape.checked()?;
    let noise = noise_nm
        .or_else(|| crate::leveling::noise(scan))
        .unwrap_or(0.0);
    let pixels = pixels(scan);
    if pixels.len() < 200 || scan.rows().min(scan.columns()) < 8 {
        return Err(Error::new(
            ErrorKind::Data,
            format!(
                "no tip from a scan of {} x {} pixels, {} of them void",
                scan.columns(),
                scan.rows(),
                scan.void_count()
            ),
        )
        .remedy("Scan the characterizer with more pixels"));
    }
    progress.say("registering the characterizer");
    let start = State::new(shape, settings.formula);
    let start = register::register(start, scan, &pixels, noise)
        .map_err(|lost| Error::new(ErrorKind::Data, lost.0).remedy(lost.1))?;
    progress.check()?;
    progress.say("fitting the tip");
    let fit = fit_tip(scan, start, &pixels, &progress.part(0.1, 0.8))?;
    progress.say("free-form tip");
    findings::known(
        scan,
        noise,
        settings,
        fit,
        &pixels,
        &progress.part(0.8, 1.0),
    )
}

fn pixels(scan: &HeightMap) -> Vec<Pixel> {
    let pitch = scan.pitch();
    let (rows, columns) = (scan.rows(), scan.columns());
    let every = (rows * columns).div_ceil(MOST_PIXELS);
    let middle = [scan.width_nm() / 2.0, scan.length_nm() / 2.0];
    scan.heights()
        .indexed_iter()
        .filter(|((r, _), z)| r % every == 0 && !z.is_nan())
        .map(|((row, column), &z)| Pixel {
            x: (column as f64 + 0.5) * pitch.x - middle[0],
            y: (row as f64 + 0.5) * pitch.y - middle[1],
            z: f64::from(z),
            row,
            column,
        })
        .collect()
}

/// The faces of a pyramid that are told apart; the others follow the first set.
fn faces(state: &State) -> Vec<[bool; 4]> {
    const ALL: [bool; 4] = [true; 4];
    if state.formula != Formula::Pyramid {
        return vec![ALL];
    }
    let n = state.normal();
    match state.shape {
        // Across ridges along y the faces towards -x and +x; those along them cannot be told.
        Shape::Ridges { .. } if n[0].abs() >= n[1].abs() => {
            vec![[true, false, false, false], [false, true, false, false]]
        }
        Shape::Ridges { .. } => vec![[false, false, true, false], [false, false, false, true]],
        Shape::Step { .. } => vec![ALL],
        _ => (0..4).map(|k| [0, 1, 2, 3].map(|i| i == k)).collect(),
    }
}

fn unknowns(state: &State, px: f64) -> Vec<Unknown> {
    const WIDE: f64 = 1e7;
    const ANY: [f64; 2] = [f64::NEG_INFINITY, f64::INFINITY];
    let free = |parameter: Parameter, step: f64| Unknown {
        parameter,
        step,
        observed: [0.0, WIDE],
        within: ANY,
    };
    let mut list = Vec::new();
    if state.formula != Formula::Pyramid {
        list.push(Unknown {
            within: [0.0, f64::INFINITY],
            ..free(Parameter::Radius, 1e-4 * px)
        });
    }
    if state.formula != Formula::Paraboloid {
        list.extend(faces(state).into_iter().map(|which| Unknown {
            // So wide that it decides only what the scan does not show at all.
            observed: [20.0, 60.0],
            within: ANGLES,
            ..free(Parameter::HalfAngle(which), 1e-4)
        }));
    }
    let certified = state.shape.certified();
    for (quantity, certified) in &certified {
        let is_angle = quantity.unit() == "deg";
        let closest = if is_angle { CLOSEST } else { CLOSEST * px };
        let least = match quantity {
            Quantity::CornerRadius | Quantity::Radius => 0.0,
            Quantity::HalfAngle => 0.1,
            _ => 1e-6,
        };
        list.push(Unknown {
            parameter: Parameter::Certified(*quantity),
            step: if is_angle { 1e-4 } else { 1e-4 * px },
            observed: [certified.value, certified.u.max(closest)],
            within: [least, f64::INFINITY],
        });
    }
    let has = |q: Quantity| certified.iter().any(|c| c.0 == q);
    if state.shape.is_straight() {
        if !has(Quantity::Height) {
            list.push(free(Parameter::Certified(Quantity::Height), 1e-4 * px));
        }
        list.push(free(Parameter::Across, 1e-4 * px));
        list.push(free(Parameter::Turn, 1e-4));
    }
    list.push(free(Parameter::Base, 1.0));
    list.push(free(Parameter::SlopeX, 1.0));
    list.push(free(Parameter::SlopeY, 1.0));
    for k in 0..state.places.len() {
        list.push(free(Parameter::PlaceX(k), 1e-4 * px));
        list.push(free(Parameter::PlaceY(k), 1e-4 * px));
        if matches!(state.shape, Shape::Spike { .. }) {
            list.push(free(Parameter::Top(k), 1.0));
        }
    }
    list
}

fn fit_tip(scan: &HeightMap, start: State, pixels: &[Pixel], progress: &Progress) -> Result<Fit> {
    let px = (scan.pitch().x * scan.pitch().y).sqrt();
    let step = 1e-4 * px;
    let list = unknowns(&start, px);
    let mut fit = fit::fit(start, list, pixels, step, progress)?;
    if fit.state.formula == Formula::Pyramid && matches!(fit.state.shape, Shape::Ridges { .. }) {
        fit = with_level_faces(fit, pixels, step, progress)?;
    }
    // Rows share jumps, columns and places of the shape share what is wrong with the shape.
    let mut groupings = vec![
        pixels.iter().map(|p| p.row).collect(),
        pixels.iter().map(|p| p.column).collect(),
    ];
    let state = &fit.state;
    if state.shape.is_straight() {
        let across: Vec<i64> = pixels
            .iter()
            .map(|p| (state.across_of(p.x, p.y) / px).floor() as i64)
            .collect();
        let least = across.iter().copied().min().unwrap_or(0);
        groupings.push(across.iter().map(|a| (a - least) as usize).collect());
    } else {
        let image = state.image();
        let of = |p: &Pixel| match image.above(p.x, p.y).1 {
            state::Seen::Base => 0,
            state::Seen::Feature(k) => k + 1,
        };
        groupings.push(pixels.iter().map(of).collect());
    }
    fit.widen(pixels, &groupings, step, [CLOSEST * px, CLOSEST]);
    Ok(fit)
}

/// Faces that ridges do not show are taken as the mean of those they do: with ridges slightly
/// turned they have a small part in the section.
fn with_level_faces(mut fit: Fit, pixels: &[Pixel], step: f64, progress: &Progress) -> Result<Fit> {
    for _ in 0..2 {
        let seen: Vec<usize> = faces(&fit.state)
            .iter()
            .filter_map(|which| which.iter().position(|w| *w))
            .collect();
        let mean = seen.iter().map(|k| fit.state.faces[*k]).sum::<f64>() / seen.len() as f64;
        for k in (0..4).filter(|k| !seen.contains(k)) {
            fit.state.faces[k] = mean;
        }
        fit = fit::fit(fit.state, fit.unknowns, pixels, step, progress)?;
    }
    Ok(fit)
}

impl State {
    /// The fitted tip by formula; a face that is not seen keeps what was taken for it.
    fn model(&self) -> Model {
        match self.formula {
            Formula::SphereCone => Model::SphereCone {
                radius: self.radius,
                half_angle: self.faces[0],
            },
            Formula::Paraboloid => Model::Paraboloid {
                radius: self.radius.max(1e-6),
            },
            Formula::Pyramid => Model::Pyramid {
                half_angles: self.faces,
            },
        }
    }
}
