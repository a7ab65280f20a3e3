//! The outline of a tip along an azimuth, on a grid finer than the tip's own.

use super::Tip;

/// Which outline.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Cut {
    /// The section through the apex.
    Section,
    /// The shadow seen across the azimuth: at each place the least depth along the line athwart.
    /// It is what a long straight edge or trench athwart the azimuth feels.
    Silhouette,
}

/// Depth of a tip below its apex along an azimuth.
#[derive(Debug, Clone, PartialEq)]
pub struct Outline {
    /// Distance between two samples, nm.
    pub step_nm: f64,
    /// Depths, nm, odd in number with the apex in the middle; infinite outside the tip.
    pub depth_nm: Vec<f64>,
}

impl Tip {
    /// Depth below the apex (nm, `>= 0`) at a lateral offset (nm) from it; infinite outside the tip,
    /// NaN beyond the outermost cell centres.
    ///
    /// Cubic convolution along x, then along y, which follows a rounded apex where a bilinear patch
    /// cuts it short by `pitch^2 / (8 R)` (Keys, IEEE Trans. ASSP 29, 1153 (1981), a = -1/2; its
    /// edge rule); kept between the chord and the two lines beside it, so that it does not swing
    /// over at an edge of a pyramid. Bilinear next to cells outside the tip.
    pub fn depth_at(&self, dx_nm: f64, dy_nm: f64) -> f64 {
        let (rows, columns) = self.shape.dim();
        let place = |offset: f64, pitch: f64, count: usize| {
            let p = offset / pitch + (count / 2) as f64;
            // Rounding must not push a place on the rim out of the grid.
            let near = (p - p.round()).abs() < 1e-9;
            let p = if near { p.round() } else { p };
            if !(0.0..=(count - 1) as f64).contains(&p) {
                return None;
            }
            let i = (p.floor() as isize).min(count as isize - 2).max(0);
            Some((i, p - i as f64))
        };
        let (Some((r, fy)), Some((c, fx))) = (
            place(dy_nm, self.pitch.y, rows),
            place(dx_nm, self.pitch.x, columns),
        ) else {
            return f64::NAN;
        };
        let along = |i: isize| between([-1, 0, 1, 2].map(|j| self.cell(i, c + j)), fx);
        let smooth = between([-1, 0, 1, 2].map(|i| along(r + i)), fy);
        let depth = if smooth.is_finite() {
            smooth
        } else {
            let along = |i: isize| mix(self.cell(i, c), self.cell(i, c + 1), fx);
            mix(along(r), along(r + 1), fy)
        };
        depth.max(0.0)
    }

    /// Depth of a cell; one cell beyond the grid by the quadratic through the last three.
    fn cell(&self, r: isize, c: isize) -> f64 {
        let (rows, columns) = self.shape.dim();
        let beyond = |i: isize, count: usize| i < 0 || i >= count as isize;
        let inward = |i: isize, count: usize, k: isize| {
            let i = if i < 0 { k - 1 } else { i - k };
            i.clamp(0, count as isize - 1)
        };
        let extended = |at: &dyn Fn(isize) -> f64| 3.0 * at(1) - 3.0 * at(2) + at(3);
        if beyond(r, rows) {
            extended(&|k| self.cell(inward(r, rows, k), c))
        } else if beyond(c, columns) {
            extended(&|k| self.cell(r, inward(c, columns, k)))
        } else {
            -f64::from(self.shape[[r as usize, c as usize]])
        }
    }

    /// The outline along `azimuth_deg` (0 = along +x, 90 = along +y), sampled every `step_nm` as far
    /// as the grid reaches on both sides. A step that is not positive is an eighth of the pitch.
    pub fn outline(&self, cut: Cut, azimuth_deg: f64, step_nm: f64) -> Outline {
        let (rows, columns) = self.shape.dim();
        let (w, h) = (
            (columns / 2) as f64 * self.pitch.x,
            (rows / 2) as f64 * self.pitch.y,
        );
        let finer = self.pitch.x.min(self.pitch.y);
        let step = if step_nm > 0.0 { step_nm } else { finer / 8.0 };
        let (sin, cos) = azimuth_deg.to_radians().sin_cos();
        let (sin, cos) = (clean(sin), clean(cos));
        let reach = (w / cos.abs()).min(h / sin.abs());
        let n = (reach / step + 1e-9).floor() as i64;
        // Athwart a half pitch is fine enough: a cap is flat across its crest.
        let across = 0.5 * finer;
        let m = match cut {
            Cut::Section => 0,
            Cut::Silhouette => (w.hypot(h) / across).ceil() as i64,
        };
        let depth_nm = (-n..=n)
            .map(|i| {
                let s = i as f64 * step;
                (-m..=m)
                    .map(|k| {
                        let v = k as f64 * across;
                        self.depth_at(s * cos - v * sin, s * sin + v * cos)
                    })
                    // `min` passes over the NaN beyond the grid.
                    .fold(f64::INFINITY, f64::min)
            })
            .collect();
        Outline {
            step_nm: step,
            depth_nm,
        }
    }
}

/// The value a part `f` of the way from the second to the third of four equally spaced ones.
fn between(z: [f64; 4], f: f64) -> f64 {
    // A neighbour outside the tip must not matter where its weight is nothing.
    if f == 0.0 {
        return z[1];
    }
    let chord = mix(z[1], z[2], f);
    let curved = z[1]
        + 0.5 * f * (z[2] - z[0])
        + 0.5 * f * f * (2.0 * z[0] - 5.0 * z[1] + 4.0 * z[2] - z[3])
        + 0.5 * f * f * f * (3.0 * (z[1] - z[2]) + z[3] - z[0]);
    let (left, right) = (z[1] + f * (z[1] - z[0]), z[2] + (1.0 - f) * (z[2] - z[3]));
    // Heights are f32: what differs by less is on the chord.
    let rounding = 1e-6 * chord.abs();
    if left.max(right) <= chord + rounding {
        curved.min(chord).max(left.max(right).min(chord))
    } else if left.min(right) >= chord - rounding {
        curved.max(chord).min(left.min(right).max(chord))
    } else {
        curved
    }
}

/// Linear between two values; one of no weight does not matter.
fn mix(a: f64, b: f64, f: f64) -> f64 {
    match f {
        0.0 => a,
        1.0 => b,
        f => a * (1.0 - f) + b * f,
    }
}

/// The sine of 180 degrees is nothing.
fn clean(x: f64) -> f64 {
    if x.abs() < 1e-12 { 0.0 } else { x }
}

impl Outline {
    /// Place of sample `i` from the apex, nm.
    pub fn place_nm(&self, i: usize) -> f64 {
        (i as f64 - self.middle() as f64) * self.step_nm
    }

    fn middle(&self) -> usize {
        self.depth_nm.len() / 2
    }

    /// Depth to which both flanks are on the grid, nm: below it the width is not known.
    pub fn known_depth_nm(&self) -> f64 {
        let middle = self.middle();
        let end = |side: &mut dyn Iterator<Item = &f64>| {
            side.take_while(|z| z.is_finite()).fold(0.0, |_, z| *z)
        };
        let right = end(&mut self.depth_nm[middle..].iter());
        let left = end(&mut self.depth_nm[..=middle].iter().rev());
        right.min(left)
    }

    /// How far the tip extends to the minus and the plus side at `distance_nm` from its apex, nm
    /// (both `>= 0`); the outermost places count where a side has several. `None` deeper than
    /// [`Self::known_depth_nm`] or for a distance below 0.
    pub fn extent_nm(&self, distance_nm: f64) -> Option<[f64; 2]> {
        if !(distance_nm >= 0.0 && distance_nm <= self.known_depth_nm()) {
            return None;
        }
        let middle = self.middle();
        let side = |sign: isize| {
            let at = |k: usize| {
                let i = middle.checked_add_signed(sign * k as isize)?;
                self.depth_nm.get(i).copied()
            };
            let last = (0..=middle)
                .rev()
                .find(|&k| at(k).is_some_and(|z| z <= distance_nm))?;
            let here = at(last)?;
            let part = match at(last + 1) {
                Some(next) if next.is_finite() && next > here => {
                    (distance_nm - here) / (next - here)
                }
                _ => 0.0,
            };
            Some((last as f64 + part) * self.step_nm)
        };
        Some([side(-1)?, side(1)?])
    }
}

#[cfg(test)]
mod tests {
    use super::super::model::{Model, sphere_cone_half_width};
    use super::*;
    use crate::heightmap::Pitch;
    use ndarray::Array2;

    #[test]
    fn a_quadratic_is_met_exactly_up_to_the_rim() {
        let pitch = Pitch { x: 1.0, y: 2.0 };
        let tip = Model::Paraboloid { radius: 5.0 }
            .sample(21.0, pitch)
            .unwrap();
        for (x, y) in [(0.3, 0.4), (-9.7, 3.1), (10.0, -9.9), (9.9, 10.0)] {
            let exact = (x * x + y * y) / 10.0;
            assert!((tip.depth_at(x, y) - exact).abs() < 1e-5, "{x} {y}");
        }
        assert!(tip.depth_at(10.2, 0.0).is_nan());
    }

    #[test]
    fn outside_the_tip_is_infinitely_deep_and_a_needle_has_an_apex() {
        let mut shape = Array2::from_elem((5, 5), f32::NEG_INFINITY);
        shape[[2, 2]] = 0.0;
        shape[[2, 3]] = -1.0;
        let tip = Tip::new(shape, Pitch::square(1.0)).unwrap();
        assert_eq!(tip.depth_at(0.5, 0.0), 0.5);
        assert_eq!(tip.depth_at(-0.5, 0.0), f64::INFINITY);
        assert_eq!(tip.outline(Cut::Section, 0.0, 0.5).known_depth_nm(), 0.0);
        let needle = Tip::new(Array2::zeros((1, 1)), Pitch::square(1.0)).unwrap();
        let outline = needle.outline(Cut::Silhouette, 30.0, 0.1);
        assert_eq!(outline.depth_nm, [0.0]);
        assert_eq!(outline.extent_nm(0.0), Some([0.0, 0.0]));
        assert_eq!(outline.extent_nm(0.1), None);
    }

    /// Half-widths of the sphere-cone, closed form.
    #[test]
    fn a_round_tip_is_as_wide_along_every_azimuth() {
        let model = Model::SphereCone {
            radius: 10.0,
            half_angle: 15.0,
        };
        let tip = model.sample(81.0, Pitch::square(0.5)).unwrap();
        for azimuth in [0.0, 33.0, 90.0, 135.0] {
            for cut in [Cut::Section, Cut::Silhouette] {
                let outline = tip.outline(cut, azimuth, 0.0);
                for z in [1.0, 4.0, 6.5, 20.0, 60.0] {
                    let exact = sphere_cone_half_width(10.0, 15.0, z);
                    for side in outline.extent_nm(z).unwrap() {
                        assert!((side - exact).abs() < 0.02, "{azimuth} {cut:?} {z} {side}");
                    }
                }
            }
        }
    }

    #[test]
    fn a_shadow_is_wider_than_a_section_of_a_tip_that_is_skew() {
        // A roof along the diagonal: its section across is thin, its shadow along x is not.
        let shape = Array2::from_shape_fn((41, 41), |(i, j)| {
            let (x, y) = (j as f64 - 20.0, i as f64 - 20.0);
            let (along, athwart) = ((x + y) / 2f64.sqrt(), (y - x) / 2f64.sqrt());
            -(3.0 * athwart.abs() + (along.abs() - 10.0).max(0.0) * 3.0) as f32
        });
        let tip = Tip::new(shape, Pitch::square(1.0)).unwrap();
        let width = |cut| tip.outline(cut, 0.0, 0.0).extent_nm(6.0).unwrap()[1];
        // Section along x: 3 x / sqrt 2 = 6. Shadow: the ridge's end at 10 / sqrt 2 and more.
        assert!((width(Cut::Section) - 2.0 * 2f64.sqrt()).abs() < 0.05);
        assert!(width(Cut::Silhouette) > 7.0 && width(Cut::Silhouette) < 10.0);
    }
}
