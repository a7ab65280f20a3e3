//! The bluntest sphere-cone that still does a job.

use super::Feature;
use super::closed_forms::{ball_excess, hollow_reach, wall_excess};
use crate::error::{Error, ErrorKind, Result};
use crate::tip::model::Model;

/// Halvings of the search: to a billionth of its range.
const HALVINGS: usize = 60;

/// What the tip must do beside reaching the bottom of a hollow.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Need {
    /// Width excess that is still accepted (as a size, whichever its sign), nm.
    pub excess_nm: Option<f64>,
    /// Fraction of the height at which it counts, 0 = bottom.
    pub at: f64,
}

/// The bluntest sphere-cones for a job.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Bluntest {
    /// Greatest apex radius at the given half-angle, nm.
    pub radius_nm: Option<f64>,
    /// Greatest half-angle at the given radius, degrees.
    pub half_angle_deg: Option<f64>,
    /// Why something is missing.
    pub reasons: Vec<String>,
}

/// The greatest radius at `half_angle_deg` and the greatest half-angle at `radius_nm` that do the
/// job: reach the bottom of a trench or a grating, and keep the width excess within `need`. A ridge
/// or a particle needs a stated excess, as every tip widens them. In closed form, by bisection.
///
/// Errors of kind `Setting`: a feature, an excess or a fraction out of range.
pub fn bluntest(
    feature: &Feature,
    need: &Need,
    radius_nm: Option<f64>,
    half_angle_deg: Option<f64>,
) -> Result<Bluntest> {
    let feature = feature.checked()?;
    if !(need.at > 0.0 && need.at < 1.0) {
        return Err(
            Error::new(ErrorKind::Setting, format!("height fraction {}", need.at))
                .remedy("Give a fraction between 0 (bottom) and 1 (top), for example 0.5"),
        );
    }
    if let Some(bad) = need.excess_nm.filter(|e| !(*e > 0.0)) {
        return Err(
            Error::new(ErrorKind::Setting, format!("width excess {bad} nm"))
                .remedy("Give a length above 0"),
        );
    }
    let mut found = Bluntest::default();
    let hollow = matches!(feature, Feature::Trench { .. } | Feature::Grating { .. });
    if need.excess_nm.is_none() && !hollow {
        found.reasons.push(
            "Every tip widens a ridge or a particle: state the width excess that you accept."
                .to_owned(),
        );
        return Ok(found);
    }
    let does = |radius: f64, half_angle: f64| does_job(&feature, need, radius, half_angle);
    match half_angle_deg {
        Some(angle) => match greatest(1e7, |radius| does(radius, angle)) {
            Some(f64::INFINITY) => found.reasons.push("Any radius does.".to_owned()),
            Some(radius) => found.radius_nm = Some(radius),
            None => found.reasons.push(format!(
                "No radius: with a half-angle of {angle:.2} degrees even a sharp tip does not do it."
            )),
        },
        None => found
            .reasons
            .push("No radius: the tip's half-angle is not known.".to_owned()),
    }
    match radius_nm {
        Some(radius) => match greatest(89.9, |angle| does(radius, angle)) {
            Some(f64::INFINITY) => found.reasons.push("Any half-angle does.".to_owned()),
            Some(angle) => found.half_angle_deg = Some(angle),
            None => found.reasons.push(format!(
                "No half-angle: with an apex radius of {radius:.2} nm even an upright flank does not do it."
            )),
        },
        None => found
            .reasons
            .push("No half-angle: the tip's radius is not known.".to_owned()),
    }
    Ok(found)
}

/// Greatest value in `0..=most` that does, where all below a value do and none above; infinite where
/// `most` does.
fn greatest(most: f64, does: impl Fn(f64) -> bool) -> Option<f64> {
    if !does(0.0) {
        return None;
    }
    if does(most) {
        return Some(f64::INFINITY);
    }
    let (mut low, mut high) = (0.0, most);
    for _ in 0..HALVINGS {
        let middle = 0.5 * (low + high);
        if does(middle) {
            low = middle
        } else {
            high = middle
        }
    }
    Some(low)
}

fn does_job(feature: &Feature, need: &Need, radius: f64, half_angle: f64) -> bool {
    let height = feature.height_nm();
    let reached = hollow_reach(Model::SphereCone { radius, half_angle }, feature)
        .is_none_or(|depth| depth >= height * (1.0 - 1e-12));
    let below = (1.0 - need.at) * height;
    let excess = match *feature {
        Feature::Particle { diameter } => ball_excess(radius, half_angle, 0.5 * diameter, below),
        Feature::Trench { wall_angle, .. }
        | Feature::Ridge { wall_angle, .. }
        | Feature::Grating { wall_angle, .. } => {
            wall_excess(radius, half_angle, 90.0 - wall_angle, below)
        }
    };
    reached && need.excess_nm.is_none_or(|most| excess <= most)
}
