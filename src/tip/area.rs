//! Area of contact against depth: what of a tip lies within a distance from its apex.

use super::Tip;
use super::probe_shape::distances_nm;

/// Parts into which each cell is cut along each axis, on the smooth surface between the cells.
const FINER: usize = 3;

/// Area of the tip within a depth below its apex.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ContactArea {
    /// Depth below the apex, nm.
    pub depth_nm: f64,
    /// Area of the cross-section there, nm^2: the projected area of contact.
    pub projected_nm2: f64,
    /// Area of the tip's own surface above it, nm^2.
    pub surface_nm2: f64,
}

/// Areas at `count` depths down to the lesser of `depth_nm` and the depth at which the tip's
/// cross-section would leave its grid. All parts of a tip count, a second apex too. Empty for a tip
/// that shows no depth.
///
/// The surface between the cells (see [`Tip::depth_at`]) is cut into triangles, each clipped at the
/// depth.
pub fn contact_area(tip: &Tip, depth_nm: f64, count: usize) -> Vec<ContactArea> {
    let depth = depth_nm.min(tip.enclosed_depth_nm());
    let mut areas: Vec<ContactArea> = distances_nm(depth, count)
        .into_iter()
        .map(|depth_nm| ContactArea {
            depth_nm,
            projected_nm2: 0.0,
            surface_nm2: 0.0,
        })
        .collect();
    if areas.is_empty() {
        return areas;
    }
    let (rows, columns) = tip.shape().dim();
    let pitch = tip.pitch();
    let (dx, dy) = (pitch.x / FINER as f64, pitch.y / FINER as f64);
    let (n, m) = ((columns - 1) * FINER, (rows - 1) * FINER);
    let line = |i: usize| -> Vec<f64> {
        let y = (i as f64 - 0.5 * m as f64) * dy;
        (0..=n)
            .map(|j| tip.depth_at((j as f64 - 0.5 * n as f64) * dx, y))
            .collect()
    };
    let mut above = line(0);
    for i in 1..=m {
        let below = line(i);
        for j in 1..=n {
            let (a, b) = (above[j - 1], above[j]);
            let (c, d) = (below[j - 1], below[j]);
            // The right angle first: its two legs are the triangle's slopes.
            for [corner, along, athwart] in [[a, b, c], [d, c, b]] {
                let slope = ((along - corner) / dx).hypot((athwart - corner) / dy);
                let stretch = slope.mul_add(slope, 1.0).sqrt();
                let mut depths = [corner, along, athwart];
                depths.sort_by(f64::total_cmp);
                if !depths[2].is_finite() {
                    continue;
                }
                for area in &mut areas {
                    let part = part_above(depths, area.depth_nm);
                    if part > 0.0 {
                        let projected = 0.5 * dx * dy * part;
                        area.projected_nm2 += projected;
                        area.surface_nm2 += projected * stretch;
                    }
                }
            }
        }
        above = below;
    }
    areas
}

/// Part of a plane triangle with these finite corner depths, the least first, that lies above
/// `depth`.
fn part_above([high, middle, low]: [f64; 3], depth: f64) -> f64 {
    if depth <= high {
        // A flat triangle at the very depth counts.
        return if low <= depth { 1.0 } else { 0.0 };
    }
    if depth >= low {
        1.0
    } else if depth <= middle {
        (depth - high) * (depth - high) / ((middle - high).max(f64::MIN_POSITIVE) * (low - high))
    } else {
        1.0 - (low - depth) * (low - depth) / ((low - middle) * (low - high))
    }
}

impl Tip {
    /// Depth down to which every cross-section lies within the grid and within the tip, nm: the
    /// least depth of a cell on the grid's rim or next to a cell outside the tip.
    pub fn enclosed_depth_nm(&self) -> f64 {
        let open = |r: usize, c: usize| {
            let neighbours = [(0, 1), (2, 1), (1, 0), (1, 2)];
            neighbours.iter().any(|&(i, j)| {
                let at = (r + i).checked_sub(1).zip((c + j).checked_sub(1));
                !at.and_then(|at| self.shape.get(at))
                    .is_some_and(|p| p.is_finite())
            })
        };
        self.shape
            .indexed_iter()
            .filter(|((r, c), p)| p.is_finite() && open(*r, *c))
            .map(|(_, p)| -f64::from(*p))
            .fold(f64::INFINITY, f64::min)
    }
}

#[cfg(test)]
mod tests {
    use super::super::model::Model;
    use super::*;
    use crate::heightmap::Pitch;
    use ndarray::Array2;
    use std::f64::consts::PI;

    fn near(got: f64, exact: f64, relative: f64, what: &ContactArea) {
        assert!(
            (got / exact - 1.0).abs() < relative,
            "{what:?}, exact {exact}"
        );
    }

    /// Sphere: projected `pi (2 R z - z^2)`, surface `2 pi R z`; closed forms.
    #[test]
    fn areas_of_a_sphere_and_its_cone() {
        let tip = Model::SphereCone {
            radius: 10.0,
            half_angle: 15.0,
        }
        .sample(61.0, Pitch { x: 0.5, y: 0.5 })
        .unwrap();
        let sin = 15f64.to_radians().sin();
        for a in contact_area(&tip, 40.0, 8)
            .iter()
            .filter(|a| a.depth_nm > 0.5)
        {
            let z = a.depth_nm;
            let w = super::super::model::sphere_cone_half_width(10.0, 15.0, z);
            near(a.projected_nm2, PI * w * w, 0.004, a);
            let tangent = 10.0 * (1.0 - sin);
            let surface = if z <= tangent {
                2.0 * PI * 10.0 * z
            } else {
                // The cone's frustum between the tangent circle and z.
                let w0 = 10.0 * 15f64.to_radians().cos();
                2.0 * PI * 10.0 * tangent + PI * (w * w - w0 * w0) / sin
            };
            near(a.surface_nm2, surface, 0.006, a);
        }
    }

    /// Paraboloid: projected `2 pi R z`, surface `(2 pi R^2 / 3) ((1 + 2 z / R)^(3/2) - 1)`.
    #[test]
    fn areas_of_a_paraboloid() {
        let tip = Model::Paraboloid { radius: 12.0 }
            .sample(61.0, Pitch { x: 1.0, y: 0.5 })
            .unwrap();
        for a in contact_area(&tip, 30.0, 6)
            .iter()
            .filter(|a| a.depth_nm > 0.5)
        {
            let z = a.depth_nm;
            near(a.projected_nm2, 2.0 * PI * 12.0 * z, 0.002, a);
            let whole = 2.0 * PI * 144.0 / 3.0 * ((1.0 + z / 6.0).powf(1.5) - 1.0);
            near(a.surface_nm2, whole, 0.002, a);
        }
    }

    /// Pyramid: `z^2 (tan a + tan b)(tan c + tan d)`; a square one has surface projected / sin a.
    #[test]
    fn areas_of_a_pyramid_and_of_what_shows_none() {
        let tip = Model::Pyramid {
            half_angles: [20.0; 4],
        }
        .sample(61.0, Pitch::square(0.5))
        .unwrap();
        for a in contact_area(&tip, 60.0, 6)
            .iter()
            .filter(|a| a.depth_nm > 6.0)
        {
            let side = 2.0 * a.depth_nm * 20f64.to_radians().tan();
            near(a.projected_nm2, side * side, 0.01, a);
            near(
                a.surface_nm2,
                side * side / 20f64.to_radians().sin(),
                // Between its cells the grid does not hold the pyramid's corners.
                0.035,
                a,
            );
        }
        let needle = Tip::new(Array2::zeros((1, 1)), Pitch::square(1.0)).unwrap();
        assert!(contact_area(&needle, 5.0, 4).is_empty());
        // The cross-section must not leave the grid: 30.5 / tan 20 at the rim's middle.
        let deepest = contact_area(&tip, 1e9, 3).last().unwrap().depth_nm;
        assert!(
            (deepest - 30.5 / 20f64.to_radians().tan()).abs() < 1e-3,
            "{deepest}"
        );
    }
}
