//! Particles: a sphere on a flat, with the height of its summit and its radius free.
//!
//! On a round feature the tip's contact lies in the plane through both axes, so the scan is
//! one-dimensional along each azimuth: for a sphere of radius r under a sphere of radius R it is
//! `r - R + sqrt((R + r)^2 - d^2)` above the sphere's foot, from the dilation of its outline.

use super::profile::{Between, Section, Silhouette};
use super::{Doubtful, Fitted, ModelFit};
use crate::dimensions::{Corrected, Dimension, Input};
use crate::error::Result;
use crate::leveling::least_squares::nonlinear;
use crate::progress::Progress;
use crate::tip::Tip;
use crate::uncertainty::coverage_factor;
use rayon::prelude::*;

const NAME: &str = "sphere on a flat";

/// Azimuths at which the tip is cut.
const AZIMUTHS: usize = 16;

/// Most particles that are fitted.
const FITTED: usize = 50;

/// Pixels about a particle that are fitted.
const ENOUGH: usize = 800;

/// Straight pieces of the quarter circle.
const PIECES: usize = 32;

const OUTER: usize = 0;
const HEIGHT: usize = 1;
const RADIUS: usize = 2;
const PLACE: [usize; 2] = [3, 4];

/// Fits each particle that is listed by itself. Errors of kind `Cancelled`.
pub(super) fn fit(
    input: &Input,
    corrected: &Corrected,
    doubtful: &Doubtful,
    lines: &mut [Dimension],
    progress: &Progress,
) -> Result<()> {
    // Both lines of a particle carry the same cross as their mark.
    let mut crosses: Vec<[f64; 4]> = Vec::new();
    for line in lines.iter().filter(|l| l.corrected.is_some()) {
        if let [across, _] = line.marks[..]
            && crosses.last() != Some(&across)
        {
            crosses.push(across);
        }
    }
    crosses.truncate(FITTED);
    let fitted: Vec<_> = crosses
        .par_iter()
        .map(|&across| {
            progress.check()?;
            Ok((across, particle(input, corrected, doubtful, across)))
        })
        .collect::<Result<_>>()?;
    let fitted_lines = lines.iter_mut().filter(|l| l.corrected.is_some());
    for line in fitted_lines {
        let found = fitted.iter().find(|f| line.marks.first() == Some(&f.0));
        if let (Some((_, found)), 2) = (found, line.marks.len()) {
            line.evidence.model_fit = Some(match found {
                Ok(particle) => particle.opinion(input, &line.quantity),
                Err(reason) => ModelFit::none(NAME, reason.clone()),
            });
        }
    }
    Ok(())
}

/// Height and diameter with their standard uncertainties, calibration apart.
struct Particle {
    height: [f64; 2],
    diameter: [f64; 2],
    misfit: f64,
    freedom: f64,
    /// Why the diameter is not determined.
    hidden: Option<String>,
}

impl Particle {
    fn opinion(&self, input: &Input, quantity: &str) -> ModelFit {
        let c = input.calibration;
        let k = coverage_factor(0.95, Some(self.freedom));
        let figure = |name: &str, [value, u]: [f64; 2], calibration: f64| {
            let u = u.hypot(calibration * value);
            Fitted {
                name: name.to_owned(),
                unit: "nm",
                value: Some(value),
                u: Some(u),
                low: Some(value - k * u),
                high: Some(value + k * u),
                not_determined: None,
            }
        };
        let height = figure("height", self.height, c.z);
        let mut diameter = figure("diameter", self.diameter, (c.x + c.y) / 2.0);
        if let Some(reason) = &self.hidden {
            diameter.value = None;
            diameter.u = None;
            diameter.low = Some(0.0);
            diameter.not_determined = Some(reason.clone());
        }
        let (own, other) = if quantity.contains("height") {
            (height, diameter)
        } else {
            (diameter, height)
        };
        ModelFit {
            model: NAME,
            value: Some(own),
            parameters: vec![other],
            misfit: Some(self.misfit),
            agrees: None,
            reason: None,
        }
    }
}

/// One pixel about the particle, nm.
struct Pixel {
    x: f64,
    y: f64,
    z: f64,
}

fn particle(
    input: &Input,
    corrected: &Corrected,
    doubtful: &Doubtful,
    across: [f64; 4],
) -> std::result::Result<Particle, String> {
    let radius = (across[2] - across[0]) / 2.0;
    let centre = [(across[0] + across[2]) / 2.0, across[1]];
    let cuts = |tip: &Tip, between: Between| -> Vec<Silhouette> {
        let sector = 360.0 / AZIMUTHS as f64;
        (0..AZIMUTHS)
            .map(|i| Silhouette::cut(tip, sector * i as f64, sector, between))
            .collect()
    };
    let tip = cuts(corrected.tip, Between::Curved);
    let around = image_radius(radius, &tip) + 4.0 * input.scan.pitch().x.max(input.scan.pitch().y);
    let pixels = pixels(input, centre, around);
    // More would tell no more: calibration and tip decide the doubt, not the noise.
    let every = pixels.len().div_ceil(ENOUGH).max(1);
    let pixels: Vec<Pixel> = pixels.into_iter().step_by(every).collect();
    if pixels.len() < 40 {
        return Err(format!("only {} pixels about the particle", pixels.len()));
    }
    let noise = input.noise_nm.unwrap_or(0.0).max(1e-4);
    let rim: Vec<f64> = pixels
        .iter()
        .filter(|p| (p.x - centre[0]).hypot(p.y - centre[1]) > around - 2.0 * input.scan.pitch().x)
        .map(|p| p.z)
        .collect();
    let outer = crate::dimensions::statistics::median(&mut rim.clone()).unwrap_or(0.0);
    let top = pixels.iter().map(|p| p.z).fold(f64::NEG_INFINITY, f64::max);
    let start = [outer, top - outer, radius, centre[0], centre[1]];
    let solve = |start: &[f64], tip: &[Silhouette], fixed: Option<f64>| {
        let residuals = |p: &[f64], r: &mut [f64]| {
            let radius = fixed.unwrap_or_else(|| p[4].abs());
            let (outer, height, place) = (p[0], p[1], [p[2], p[3]]);
            let sphere = outline(outer, height, radius);
            let scanned: Vec<_> = tip.iter().map(|tip| sphere.scanned_by(tip)).collect();
            for (r, pixel) in r.iter_mut().zip(&pixels) {
                let (dx, dy) = (pixel.x - place[0], pixel.y - place[1]);
                let turn = dy.atan2(dx).rem_euclid(std::f64::consts::TAU) / std::f64::consts::TAU;
                let azimuth = (turn * AZIMUTHS as f64).round() as usize % AZIMUTHS;
                *r = (scanned[azimuth].at(dx.hypot(dy)) - pixel.z) / noise;
            }
        };
        // The radius comes last, so that it can be left out.
        let mut order = vec![
            start[OUTER],
            start[HEIGHT],
            start[PLACE[0]],
            start[PLACE[1]],
        ];
        if fixed.is_none() {
            order.push(start[RADIUS]);
        }
        let scale = vec![1.0; order.len()];
        nonlinear::fit(&order, &scale, pixels.len(), &residuals).ok()
    };
    let best = solve(&start, &tip, None).ok_or("the fit found no minimum")?;
    let freedom = best.degrees_of_freedom.max(1) as f64;
    let variance = (best.residual_sum / freedom).max(1.0);
    let figures = |p: &[f64]| [p[1], 2.0 * p[4].abs()];
    let here = figures(&best.parameters);
    let u = |i: usize| (variance * best.inverse_normal[(i, i)]).sqrt();
    let mut tips = [0.0f64; 2];
    let refit: Vec<f64> = [0, 1, 4, 2, 3].map(|i| best.parameters[i]).into();
    for other in &doubtful.tips {
        if let Some(fit) = solve(&refit, &cuts(other, Between::Curved), None) {
            let there = figures(&fit.parameters);
            for k in 0..2 {
                tips[k] = tips[k].max((there[k] - here[k]).abs() / doubtful.deviations);
            }
        }
    }
    let straight = solve(&refit, &cuts(corrected.tip, Between::Straight), None);
    let grid = straight.map_or([0.0; 2], |fit| figures(&fit.parameters));
    let grid = [0, 1].map(|k| {
        if grid[k] > 0.0 {
            (grid[k] - here[k]) / 3f64.sqrt()
        } else {
            0.0
        }
    });
    // A point gives the same scan where the tip is much blunter than the particle.
    let point = solve(&refit, &tip, Some(0.02 * input.scan.pitch().x));
    let hidden = point
        .is_some_and(|p| p.residual_sum <= best.residual_sum + 4.0 * variance)
        .then(|| "a sharp point gives the same scan: the tip is much blunter".to_owned());
    Ok(Particle {
        height: [here[0], u(1).hypot(tips[0]).hypot(grid[0])],
        diameter: [here[1], (2.0 * u(4)).hypot(tips[1]).hypot(grid[1])],
        misfit: (best.residual_sum / freedom).sqrt(),
        freedom,
        hidden,
    })
}

/// Where the tip leaves the flat to climb a sphere, nm from its axis.
fn image_radius(radius: f64, tip: &[Silhouette]) -> f64 {
    let sphere = outline(0.0, 2.0 * radius, radius);
    let reach = tip.iter().map(Silhouette::reach).fold(0.0, f64::max);
    let step = radius / 16.0;
    let scanned = sphere.scanned_by(&tip[0]);
    let mut at = radius;
    while at < radius + reach && scanned.at(at) > 0.02 * radius {
        at += step;
    }
    at
}

fn pixels(input: &Input, centre: [f64; 2], around: f64) -> Vec<Pixel> {
    let pitch = input.scan.pitch();
    let heights = input.scan.heights();
    let range = |c: f64, pitch: f64, count: usize| {
        let from = ((c - around) / pitch).floor().max(0.0) as usize;
        let to = (((c + around) / pitch).ceil().max(0.0) as usize).min(count);
        from..to
    };
    let columns = range(centre[0], pitch.x, heights.ncols());
    let mut pixels = Vec::new();
    for r in range(centre[1], pitch.y, heights.nrows()) {
        for c in columns.clone() {
            let (x, y) = ((c as f64 + 0.5) * pitch.x, (r as f64 + 0.5) * pitch.y);
            let z = f64::from(heights[[r, c]]);
            if z.is_finite() && (x - centre[0]).hypot(y - centre[1]) <= around {
                pixels.push(Pixel { x, y, z });
            }
        }
    }
    pixels
}

/// A cut through the sphere's axis: its upper half, upright below its equator.
fn outline(outer: f64, height: f64, radius: f64) -> Section {
    let mut section = Section::default();
    let equator = outer + height - radius;
    section.push(-4.0 * radius - 1.0, outer);
    section.push(-radius, outer);
    for i in 0..=2 * PIECES {
        let angle = std::f64::consts::PI * i as f64 / (2 * PIECES) as f64;
        section.push(-radius * angle.cos(), equator + radius * angle.sin());
    }
    section.push(radius, outer);
    section.push(4.0 * radius + 1.0, outer);
    section
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;
    use crate::tip::model::Model;

    /// Closed form of a sphere under a sphere.
    #[test]
    fn the_scan_of_a_sphere_has_the_closed_form() {
        let (r, radius) = (6.0, 10.0);
        let tip = Model::SphereCone {
            radius,
            half_angle: 10.0,
        }
        .sample(60.0, Pitch::square(0.5))
        .unwrap();
        let sphere = outline(0.0, 2.0 * r, r);
        for azimuth in [0.0, 22.5, 90.0, 202.5] {
            let cut = Silhouette::cut(&tip, azimuth, 22.5, Between::Curved);
            for d in [0.0f64, 3.0, 7.0, 10.0] {
                let truth = r - radius + ((radius + r).powi(2) - d * d).sqrt();
                let z = sphere.scanned_by(&cut).at(d);
                assert!((z - truth).abs() < 0.03, "{azimuth} {d}: {z} {truth}");
            }
        }
    }
}
