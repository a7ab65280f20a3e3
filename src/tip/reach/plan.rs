//! A whole answer for a planned feature: nominal tip, both tips of its band, the bluntest that does.

use super::{Bluntest, Feature, Need, Probe, Reach, bluntest, reach};
use crate::error::Result;
use crate::tip::Band;

/// A probe and what is known of it.
#[derive(Debug, Clone, Copy)]
pub struct Known<'a> {
    /// The probe.
    pub probe: Probe<'a>,
    /// Its band, where there is one.
    pub band: Option<&'a Band>,
    /// Depth to which a scan has tested it, nm; `None` = all of it is known.
    pub exercised_depth_nm: Option<f64>,
    /// Apex radius, nm.
    pub radius_nm: Option<f64>,
    /// Half-angle, degrees.
    pub half_angle_deg: Option<f64>,
}

/// What a tip does on a planned feature.
#[derive(Debug, Clone, PartialEq)]
pub struct Plan {
    /// The feature.
    pub feature: Feature,
    /// With the tip itself.
    pub reach: Reach,
    /// With the sharper tip of the band.
    pub sharper: Option<Reach>,
    /// With the blunter tip of the band.
    pub blunter: Option<Reach>,
    /// The bluntest tips that would do.
    pub bluntest: Bluntest,
    /// What has to be minded, plain sentences.
    pub cautions: Vec<String>,
}

/// Plans `feature` for the probe `known`, with widths at the fractions `at`. Errors as [`reach`] and
/// [`bluntest()`].
pub fn plan(known: &Known, feature: &Feature, at: &[f64], need: &Need) -> Result<Plan> {
    let nominal = reach(&known.probe, feature, at)?;
    let mut cautions = Vec::new();
    let mut with = |tip: &crate::tip::Tip, name: &str| {
        let Probe::Grid(_, azimuth) = known.probe else {
            return None;
        };
        reach(&Probe::Grid(tip, azimuth), feature, at)
            .map_err(|_| {
                cautions.push(format!(
                    "The {name} tip of the band does not reach as deep as the feature: that side of \
                     the answer is open."
                ));
            })
            .ok()
    };
    let sharper = known.band.and_then(|b| with(&b.sharper, "sharper"));
    let blunter = known.band.and_then(|b| with(&b.blunter, "blunter"));
    let height = feature.height_nm();
    if let Some(depth) = known.exercised_depth_nm.filter(|d| *d < nominal.imaged_nm) {
        cautions.push(format!(
            "The scan tested the tip to {depth:.2} nm only; the answer rests on {:.2} nm of it. \
             Scan taller features to know the rest.",
            nominal.imaged_nm
        ));
    }
    if let Feature::Particle { .. } = feature {
        cautions.push(
            "No vertical probe sees a particle's underside: its diameter is best taken from its \
             height."
                .to_owned(),
        );
    }
    if nominal.imaged_nm < 0.999 * height {
        cautions.push(format!(
            "The image is {:.2} nm high, the feature {height:.2} nm: heights and fractions taken \
             from the image are those of its own plateaus.",
            nominal.imaged_nm
        ));
    }
    Ok(Plan {
        feature: *feature,
        reach: nominal,
        sharper,
        blunter,
        bluntest: bluntest(feature, need, known.radius_nm, known.half_angle_deg)?,
        cautions,
    })
}
