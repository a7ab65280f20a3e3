//! The half-angle of the flank by azimuth, and how the flanks lean.

use super::*;
use crate::leveling::least_squares;

/// Flank slope between two depths per azimuth; `None` unless two thirds of the azimuths show it.
pub(super) fn half_angle(tip: &Tip, between: [f64; 2], noise: f64) -> Option<HalfAngle> {
    let [upper, lower] = between;
    let map = tip.to_map().ok()?;
    let [w, h] = tip.support_nm();
    let step = 0.25 * tip.pitch().x.min(tip.pitch().y);
    let mut per_azimuth = Vec::with_capacity(AZIMUTHS);
    let mut variance = 0.0;
    for k in 0..AZIMUTHS {
        let azimuth = 2.0 * PI * k as f64 / AZIMUTHS as f64;
        let (sin, cos) = azimuth.sin_cos();
        let mut points = Vec::new();
        let mut before = f64::NEG_INFINITY;
        for i in 0.. {
            let d = f64::from(i) * step;
            let z = -f64::from(map.height_at(w / 2.0 + d * cos, h / 2.0 + d * sin));
            // NaN: past the grid or the tip. Rising again: a second apex, not this flank.
            if z.is_nan() || z > lower || z < before - 2.0 * noise - 1e-9 * lower {
                break;
            }
            before = before.max(z);
            if z >= upper {
                points.push((z, d));
            }
        }
        let enough = points.len() >= 4
            && points
                .last()
                .is_some_and(|l| l.0 - points[0].0 > 0.4 * (lower - upper));
        if let Some((slope, u)) = enough.then(|| line(&points)) {
            per_azimuth.push((azimuth.to_degrees(), slope.atan().to_degrees()));
            let u_noise = std::f64::consts::SQRT_2 * noise * slope / (lower - upper);
            variance += (u * u + u_noise * u_noise) / (1.0 + slope * slope).powi(2);
        }
    }
    if 3 * per_azimuth.len() < 2 * AZIMUTHS {
        return None;
    }
    let n = per_azimuth.len() as f64;
    let u = (variance / n).sqrt().to_degrees();
    Some(HalfAngle {
        value: per_azimuth.iter().map(|a| a.1).sum::<f64>() / n,
        u,
        between_nm: between,
        tilt: tilt(&per_azimuth, u),
        per_azimuth,
    })
}

/// The tilt from `(azimuth, half-angle)` with standard uncertainty `u`, degrees; `None` unless a
/// third of the azimuths have an opposite.
fn tilt(per_azimuth: &[(f64, f64)], u: f64) -> Option<Tilt> {
    let mut fit = least_squares::Accumulator::new(2);
    let mut pairs = 0;
    for &(azimuth, angle) in per_azimuth.iter().filter(|a| a.0 < 180.0 - 1e-6) {
        let opposite = per_azimuth
            .iter()
            .find(|other| (other.0 - azimuth - 180.0).abs() < 1e-6);
        let Some(&(_, other)) = opposite else {
            continue;
        };
        let (sin, cos) = azimuth.to_radians().sin_cos();
        fit.add(&[cos, sin], (0.5 * (angle - other)).to_radians().tan(), 1.0);
        pairs += 1;
    }
    if 3 * pairs < AZIMUTHS / 2 {
        return None;
    }
    let lean = fit.solve().ok()?.coefficients;
    Some(Tilt {
        value: lean[0].hypot(lean[1]).atan().to_degrees(),
        // Half the difference of two flanks; azimuths err together, so they are not averaged.
        u: u / std::f64::consts::SQRT_2,
        azimuth_deg: lean[1].atan2(lean[0]).to_degrees().rem_euclid(360.0),
    })
}

/// Slope of `y` over `x` and its standard error.
fn line(points: &[(f64, f64)]) -> (f64, f64) {
    let n = points.len() as f64;
    let (mx, my) = points
        .iter()
        .fold((0.0, 0.0), |s, p| (s.0 + p.0 / n, s.1 + p.1 / n));
    let (mut xx, mut xy, mut yy) = (0.0, 0.0, 0.0);
    for (x, y) in points {
        xx += (x - mx) * (x - mx);
        xy += (x - mx) * (y - my);
        yy += (y - my) * (y - my);
    }
    let slope = xy / xx;
    let rss = (yy - slope * xy).max(0.0);
    (slope, (rss / (n - 2.0).max(1.0) / xx).sqrt())
}
