//! What a tip's shape says: apex radius and half-angle, each with the depth it was read at.

use super::Tip;

/// Radius of curvature at the apex.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ApexRadius {
    /// Nm.
    pub value: f64,
    /// Standard uncertainty, nm.
    pub u: f64,
    /// Depth below the apex that the fit used, nm.
    pub fit_depth_nm: f64,
    /// Principal radii, smaller first, nm.
    pub principal_nm: [f64; 2],
}

/// Half-angle of the flank from the vertical.
#[derive(Debug, Clone, PartialEq)]
pub struct HalfAngle {
    /// Mean over azimuths, degrees.
    pub value: f64,
    /// Standard uncertainty, degrees.
    pub u: f64,
    /// The depths between which the slope was taken, nm.
    pub between_nm: [f64; 2],
    /// `(azimuth, half-angle)` in degrees.
    pub per_azimuth: Vec<(f64, f64)>,
}

/// Apex radius and half-angle, with the reason where one could not be had.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct ReadOut {
    /// `None` where not identified.
    pub apex_radius: Option<ApexRadius>,
    /// `None` where not identified.
    pub half_angle: Option<HalfAngle>,
    /// Why something is missing, one plain sentence each.
    pub reasons: Vec<String>,
}

/// Reads radius and half-angle off `tip`, looking no deeper than `depth_nm`;
/// `noise_nm` is the standard uncertainty of its heights.
pub fn read_out(_tip: &Tip, _depth_nm: f64, _noise_nm: f64) -> ReadOut {
    todo!()
}
