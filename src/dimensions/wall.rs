//! Whether the tip could touch a wall, and between which positions the wall lies where it could
//! not.
//!
//! All positions here are *outwards*: from the higher side of the wall towards the lower one, so
//! that a wall runs from its foot (large) to its shoulder (small) and the reconstruction, an upper
//! bound of the surface, can only lie too far out.
//!
//! A convex tip touches a wall where its own surface has the wall's slope. At a height `z` above
//! the floor only the tip's lowest `z` can get there, so the wall is touched there iff its lateral
//! slope `dx/dz` exceeds that of the tip's outline somewhere between its apex and the height `z`.
//! Where it is not touched the reconstruction shows the tip's own outline, drawn from a shoulder
//! further up that was touched: without undercut the wall lies between that shoulder and the
//! reconstruction. (J. S. Villarrubia, J. Res. NIST 102, 425 (1997), on certainty; the slope form
//! is common practice.)

use super::Axis;
use super::statistics;
use crate::tip::Tip;
use ndarray::ArrayView1;

/// The tip seen along a line: how far it reaches to one side at each height above its apex.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Outline {
    /// Least height of the tip's surface above the apex at `k` pixels to the side, increasing.
    heights: Vec<f64>,
    /// Pixel pitch to the side, nm.
    pitch: f64,
}

/// The tip's highest point along a straight line, at each offset across it: what the line feels.
/// With the pitch across, nm.
pub(super) fn tops(tip: &Tip, axis: Axis) -> (Vec<f32>, f64) {
    let (shape, pitch) = match axis {
        Axis::X => (tip.shape(), tip.pitch().x),
        Axis::Y => (tip.shape().reversed_axes(), tip.pitch().y),
    };
    let top = |column: ArrayView1<f32>| column.iter().copied().fold(f32::NEG_INFINITY, f32::max);
    (shape.columns().into_iter().map(top).collect(), pitch)
}

impl Outline {
    /// The outline that meets a wall whose lower side lies towards larger (`outwards_positive`) or
    /// smaller positions along `axis`. The tip stands on the lower side, hence the wall is met by
    /// the tip's other side.
    pub fn of(tip: &Tip, axis: Axis, outwards_positive: bool) -> Self {
        let (tops, pitch) = tops(tip, axis);
        let centre = tops.len() / 2;
        let mut heights = Vec::with_capacity(centre + 1);
        let mut least = 0.0f64;
        for k in 0..=centre {
            let column = if outwards_positive {
                centre - k
            } else {
                centre + k
            };
            let top = tops[column];
            if !top.is_finite() {
                break;
            }
            least = least.max(-f64::from(top));
            heights.push(least);
        }
        Self { heights, pitch }
    }

    /// Height up to which the tip's grid goes on this side, nm.
    pub fn depth(&self) -> f64 {
        self.heights.last().copied().unwrap_or(0.0)
    }

    /// Distance from the apex at which the tip's surface stands `height` above it, nm; its
    /// greatest where the grid ends.
    pub fn half_width(&self, height: f64) -> f64 {
        let after = self.heights.partition_point(|&t| t <= height);
        let Some(&below) = after.checked_sub(1).and_then(|i| self.heights.get(i)) else {
            return 0.0;
        };
        let part = match self.heights.get(after) {
            Some(&above) => (height - below) / (above - below),
            None => 0.0,
        };
        (after as f64 - 1.0 + part) * self.pitch
    }

    /// Mean lateral slope between two heights above the apex, nm per nm.
    fn slope(&self, from: f64, to: f64) -> f64 {
        let to = to.min(self.depth());
        let from = from.clamp(0.0, to);
        if to - from <= 0.0 {
            return 0.0;
        }
        (self.half_width(to) - self.half_width(from)) / (to - from)
    }

    /// The steepest wall that the tip can follow at these `heights` above the floor (nm,
    /// increasing): least lateral slope of a straight line through its outline there or lower.
    pub fn steepest(&self, heights: &[f64]) -> f64 {
        const STEPS: u32 = 32;
        let (Some(&low), Some(&high)) = (heights.first(), heights.last()) else {
            return f64::INFINITY;
        };
        // Above its grid the tip is unknown: judge by what there is.
        let over = (high - self.depth()).max(0.0).min(low);
        (0..=STEPS)
            .map(|i| {
                let down = over + (low - over) * f64::from(i) / f64::from(STEPS);
                let lower: Vec<f64> = heights.iter().map(|z| z - down).collect();
                let reach: Vec<f64> = lower.iter().map(|&z| self.half_width(z)).collect();
                statistics::line(&lower, &reach).map_or(f64::INFINITY, |l| l.0)
            })
            .fold(f64::INFINITY, f64::min)
    }

    /// Radius of the sphere through the apex and the outline about three pixels from it, nm.
    pub fn apex_radius(&self) -> Option<f64> {
        let k = 3.min(self.heights.len().checked_sub(1)?);
        let (d, t) = (k as f64 * self.pitch, self.heights[k]);
        (t > 0.0).then(|| (d * d + t * t) / (2.0 * t))
    }
}

/// Mean course of one wall: outward position over height.
#[derive(Debug, Clone, Default, PartialEq)]
pub(super) struct Wall {
    /// Heights above the lower plateau as fractions of the step, increasing.
    pub fractions: Vec<f64>,
    /// Outward position, nm, at each; NaN where unknown.
    pub outwards: Vec<f64>,
    /// Step between the plateaus, nm.
    pub height: f64,
    /// Standard uncertainty of each position relative to the middle of the wall, nm.
    pub u: Vec<f64>,
    /// White noise of the scan, nm.
    pub noise: f64,
}

/// What is known of a wall at one height.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Hold {
    /// Whether the tip touched it there.
    pub touched: bool,
    /// How far inside the reconstruction it may lie, nm, `>= 0`.
    pub slack: f64,
    /// The same without allowance for doubt in the shoulder's place: twice the best guess of how
    /// far inside it lies.
    pub likely: f64,
    /// Lateral slope of the reconstruction, nm per nm, `>= 0`.
    pub slope: f64,
}

/// Half the window for slopes, as a fraction of the step.
const HALF_WINDOW: f64 = 0.06;
/// Slopes closer than this (nm per nm, about 0.9 degrees at the vertical) are not told apart.
const SLOPE_MARGIN: f64 = 0.015;

impl Wall {
    /// Position at `fraction`, by linear interpolation; NaN outside what is known.
    pub fn at(&self, fraction: f64) -> f64 {
        let after = self.fractions.partition_point(|&f| f < fraction);
        match (after.checked_sub(1), self.fractions.get(after)) {
            (_, Some(&f)) if f == fraction => self.outwards[after],
            (Some(i), Some(&f)) => {
                let part = (fraction - self.fractions[i]) / (f - self.fractions[i]);
                self.outwards[i] + part * (self.outwards[after] - self.outwards[i])
            }
            _ => f64::NAN,
        }
    }

    /// Indices of the heights in the window about `fraction`.
    fn window(&self, fraction: f64) -> std::ops::Range<usize> {
        let inside = |f: &f64| (f - fraction).abs() <= HALF_WINDOW + 1e-9;
        let from = self
            .fractions
            .partition_point(|f| *f < fraction && !inside(f));
        let to = self
            .fractions
            .partition_point(|f| *f < fraction || inside(f));
        from..to
    }

    /// The steepest wall that the tip can follow at the known heights about `fraction`.
    fn steepest(&self, outline: &Outline, fraction: f64) -> f64 {
        let heights: Vec<f64> = self
            .window(fraction)
            .filter(|&i| self.outwards[i].is_finite())
            .map(|i| self.fractions[i] * self.height)
            .collect();
        outline.steepest(&heights)
    }

    /// Lateral slope about `fraction` by a straight line through the window, `>= 0`.
    pub fn slope(&self, fraction: f64) -> f64 {
        let window = self.window(fraction);
        statistics::line(&self.fractions[window.clone()], &self.outwards[window])
            .map_or(f64::NAN, |(slope, _)| (-slope / self.height).max(0.0))
    }

    /// Mean standard uncertainty of the positions in the window about `fraction`, nm.
    fn u_about(&self, fraction: f64) -> f64 {
        let taken: Vec<f64> = self.window(fraction).map(|i| self.u[i]).collect();
        let mean = statistics::mean(&taken);
        if mean.is_finite() { mean } else { 0.0 }
    }

    /// How much too far out noise may let the shoulder at `fraction` seem: the plateau sinks by
    /// about two deviations, the shoulder hardly.
    fn shoulder_doubt(&self, fraction: f64) -> f64 {
        let slope = self.slope(fraction);
        if slope.is_finite() {
            2.0 * self.noise * slope
        } else {
            0.0
        }
    }

    /// Whether the tip with `outline` touched the wall at `fraction`. `tip_u` is the standard
    /// uncertainty of the tip's heights, nm.
    fn touched(&self, outline: &Outline, fraction: f64, tip_u: f64) -> bool {
        let span = 2.0 * HALF_WINDOW * self.height;
        let tip = self.steepest(outline, fraction);
        // A straight line through n points knows its slope to sqrt(12 / n) u / span.
        let doubt = 2.0 * (1.5 * self.u_about(fraction) + 2f64.sqrt() * tip_u * tip) / span;
        // Noise sinks the floor by about two deviations against the fillet that the tip leaves at
        // its foot, which then looks flatter than the tip.
        let (foot, head) = (
            fraction * self.height - 0.5 * span,
            fraction * self.height + 0.5 * span,
        );
        let part = 0.2 * span;
        let bend = |foot: f64| {
            let foot = foot.max(0.0);
            (outline.slope(foot, foot + part) - outline.slope(head - part, head)).max(0.0)
        };
        let sinking = 4.0 * self.noise * bend(foot) / span;
        // The last pixel in which the tip still stood on the floor may be a whole pixel away from
        // the wall: so far out the fillet may lie against the flank.
        let placing = bend(foot - 0.5 * span).min(outline.pitch / span);
        let doubt = doubt + sinking + placing;
        self.slope(fraction) > tip + SLOPE_MARGIN + doubt
    }

    /// What the tip with `outline` lets one know of the wall at `fraction`.
    pub fn hold(&self, outline: &Outline, fraction: f64, tip_u: f64) -> Hold {
        let slope = self.slope(fraction);
        let here = self.at(fraction);
        if self.touched(outline, fraction, tip_u) {
            return Hold {
                touched: true,
                slack: 0.0,
                likely: 0.0,
                slope,
            };
        }
        let higher = self.fractions.partition_point(|f| *f <= fraction);
        let known = (higher..self.fractions.len()).filter(|&i| self.outwards[i].is_finite());
        let mut shoulder = here;
        let mut top = fraction;
        for i in known {
            top = self.fractions[i];
            shoulder = self.outwards[i];
            if self.touched(outline, top, tip_u) {
                // The slope's window reaches down into the untouched part: take its upper end.
                let end = self.at(top + HALF_WINDOW);
                let inner = if end.is_finite() { end } else { shoulder };
                return Hold {
                    touched: false,
                    slack: (here - inner + self.shoulder_doubt(top)).max(0.0),
                    likely: (here - shoulder).max(0.0),
                    slope,
                };
            }
        }
        // Untouched up to where the curve ends: the tip's flank, carried on to the very top.
        let rest = (1.0 - top) * self.height;
        let flank = self.steepest(outline, fraction);
        let flank = if flank.is_finite() { flank } else { slope };
        Hold {
            touched: false,
            slack: (here - shoulder + rest * flank + self.shoulder_doubt(top)).max(0.0),
            likely: (here - shoulder + rest * flank).max(0.0),
            slope,
        }
    }
}

/// Lateral shift per nm of apex radius of a wall with lateral slope `slope`, followed by a sphere:
/// `(1 - sin B) / cos B`, B the wall's angle from the vertical. The apex rests on the floor with
/// either radius.
pub(super) fn shift_per_radius(slope: f64) -> f64 {
    let angle = slope.max(0.0).atan();
    (1.0 - angle.sin()) / angle.cos()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;
    use crate::tip::model::{Model, sphere_cone_half_width};

    fn outline() -> Outline {
        let model = Model::SphereCone {
            radius: 10.0,
            half_angle: 15.0,
        };
        let tip = model.sample(81.0, Pitch::square(1.0)).unwrap();
        Outline::of(&tip, Axis::X, true)
    }

    fn straight(slope: f64) -> Wall {
        let fractions: Vec<f64> = (1..50).map(|i| f64::from(i) * 0.02).collect();
        let outwards = fractions.iter().map(|f| (1.0 - f) * 50.0 * slope).collect();
        Wall {
            fractions,
            outwards,
            height: 50.0,
            u: vec![0.0; 49],
            noise: 0.0,
        }
    }

    #[test]
    fn the_outline_of_a_sphere_cone_is_its_half_width() {
        let outline = outline();
        for z in [2.0, 5.0, 20.0, 45.0] {
            let expected = sphere_cone_half_width(10.0, 15.0, z);
            assert!((outline.half_width(z) - expected).abs() < 0.12, "{z}");
        }
        assert!((outline.apex_radius().unwrap() - 10.0).abs() < 1e-4);
        let flank = outline.steepest(&[39.0, 42.0, 45.0]);
        assert!((flank - 15f64.to_radians().tan()).abs() < 1e-3, "{flank}");
    }

    #[test]
    fn unequal_sides_meet_the_walls_they_face() {
        let model = Model::Pyramid {
            half_angles: [10.0, 30.0, 20.0, 40.0],
        };
        let tip = model.sample(41.0, Pitch::square(1.0)).unwrap();
        let slope = |axis, positive| {
            Outline::of(&tip, axis, positive)
                .steepest(&[5.0, 7.0, 10.0])
                .atan()
                .to_degrees()
        };
        // The tip stands right of a wall that falls to the right: its left face meets it.
        assert!((slope(Axis::X, true) - 10.0).abs() < 1e-3);
        assert!((slope(Axis::X, false) - 30.0).abs() < 1e-3);
        assert!((slope(Axis::Y, true) - 20.0).abs() < 1e-3);
        assert!((slope(Axis::Y, false) - 40.0).abs() < 1e-3);
    }

    #[test]
    fn a_wall_flatter_than_the_flank_is_touched_and_a_steeper_one_not() {
        let outline = outline();
        let flat = straight(20f64.to_radians().tan());
        assert!(flat.hold(&outline, 0.5, 0.0).touched);
        // The reconstruction of a vertical wall shows the tip's flank from the shoulder down.
        let steep = straight(15f64.to_radians().tan());
        let hold = steep.hold(&outline, 0.5, 0.0);
        assert!(!hold.touched);
        let expected = 25.0 * 15f64.to_radians().tan();
        assert!((hold.slack - expected).abs() < 0.05, "{hold:?}");
    }

    #[test]
    fn near_the_floor_the_sphere_keeps_the_tip_off_the_wall() {
        // At 5 nm above the floor the sphere's own slope is 30 degrees.
        let wall = straight(20f64.to_radians().tan());
        let hold = wall.hold(&outline(), 0.1, 0.0);
        assert!(!hold.touched && hold.slack > 0.0, "{hold:?}");
    }
}
