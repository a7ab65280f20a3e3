//! The probe shape characteristic: full width against the distance from the apex.
//!
//! Term: ISO 13095:2014 (from memory). Given for a section through the apex or for the shadow, which
//! long straight edges feel; the two are the same for a round tip.

use super::Tip;
use super::outline::Cut;

/// Azimuths among which the narrowest and the widest are looked for.
const AZIMUTHS: usize = 36;

/// Full width of a tip against the distance from its apex, along one azimuth.
#[derive(Debug, Clone, PartialEq)]
pub struct ProbeShape {
    /// Azimuth, degrees; 0 = along +x, 90 = along +y.
    pub azimuth_deg: f64,
    /// Section or shadow.
    pub cut: Cut,
    /// By increasing distance, as deep as both flanks are on the tip's grid.
    pub points: Vec<ShapePoint>,
}

/// One point of a probe shape characteristic.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ShapePoint {
    /// Distance from the apex along the axis, nm.
    pub distance_nm: f64,
    /// Extent to the minus and the plus side of the apex, nm, both `>= 0`.
    pub extent_nm: [f64; 2],
}

impl ShapePoint {
    /// Full width, nm.
    pub fn width_nm(&self) -> f64 {
        self.extent_nm[0] + self.extent_nm[1]
    }
}

/// Widths of a tip across its azimuths at one distance from the apex.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Aspect {
    /// Distance from the apex, nm.
    pub distance_nm: f64,
    /// Least and greatest full width, nm.
    pub width_nm: [f64; 2],
    /// Azimuths of these, degrees in `0..180`.
    pub azimuth_deg: [f64; 2],
}

impl Aspect {
    /// Distance from the apex over the greatest width: what depth a hole may have for its width.
    pub fn ratio(&self) -> f64 {
        self.distance_nm / self.width_nm[1]
    }

    /// Greatest over least width; 1 for a round tip.
    pub fn elongation(&self) -> f64 {
        self.width_nm[1] / self.width_nm[0]
    }
}

/// The characteristic of `tip` along `azimuth_deg` at the increasing `distances_nm`; it ends where a
/// flank leaves the tip's grid, and is empty for distances below 0 or a tip of one cell.
pub fn probe_shape(tip: &Tip, cut: Cut, azimuth_deg: f64, distances_nm: &[f64]) -> ProbeShape {
    let outline = tip.outline(cut, azimuth_deg, 0.0);
    ProbeShape {
        azimuth_deg,
        cut,
        points: distances_nm
            .iter()
            .map_while(|&distance_nm| {
                let extent_nm = outline.extent_nm(distance_nm)?;
                Some(ShapePoint {
                    distance_nm,
                    extent_nm,
                })
            })
            .collect(),
    }
}

/// `count` distances down to `depth_nm`, closer to each other near the apex, where the width changes
/// fastest; empty for a depth that is not positive.
pub fn distances_nm(depth_nm: f64, count: usize) -> Vec<f64> {
    if !(depth_nm > 0.0 && depth_nm.is_finite()) {
        return Vec::new();
    }
    (1..=count)
        .map(|i| depth_nm * (i as f64 / count as f64).powi(2))
        .collect()
}

/// Least and greatest width at `distance_nm` from the apex over all azimuths of sections through
/// the apex; `None` where a flank lies outside the grid there.
pub fn aspect(tip: &Tip, distance_nm: f64) -> Option<Aspect> {
    let mut found: Option<Aspect> = None;
    for k in 0..AZIMUTHS {
        let azimuth = 180.0 * k as f64 / AZIMUTHS as f64;
        let [minus, plus] = tip
            .outline(Cut::Section, azimuth, 0.0)
            .extent_nm(distance_nm)?;
        let width = minus + plus;
        let all = found.get_or_insert(Aspect {
            distance_nm,
            width_nm: [width; 2],
            azimuth_deg: [azimuth; 2],
        });
        if width < all.width_nm[0] {
            (all.width_nm[0], all.azimuth_deg[0]) = (width, azimuth);
        }
        if width > all.width_nm[1] {
            (all.width_nm[1], all.azimuth_deg[1]) = (width, azimuth);
        }
    }
    found.filter(|a| a.width_nm[0] > 0.0)
}

#[cfg(test)]
mod tests {
    use super::super::model::Model;
    use super::*;
    use crate::heightmap::Pitch;

    /// Full width `2 sqrt(2 R z)` of a paraboloid, `z (tan a + tan b)` of a pyramid: closed forms.
    #[test]
    fn widths_of_a_paraboloid_and_of_a_pyramid() {
        let tip = Model::Paraboloid { radius: 12.0 }
            .sample(61.0, Pitch { x: 1.0, y: 1.5 })
            .unwrap();
        for azimuth in [0.0, 90.0, 40.0] {
            let shape = probe_shape(&tip, Cut::Section, azimuth, &[0.5, 2.0, 10.0, 1000.0]);
            assert_eq!(shape.points.len(), 3);
            for p in &shape.points {
                let exact = 2.0 * (24.0 * p.distance_nm).sqrt();
                assert!((p.width_nm() - exact).abs() < 0.01, "{azimuth} {p:?}");
            }
        }
        let tan = |a: f64| a.to_radians().tan();
        let tip = Model::Pyramid {
            half_angles: [15.0, 25.0, 20.0, 30.0],
        }
        .sample(81.0, Pitch::square(1.0))
        .unwrap();
        let along_x = probe_shape(&tip, Cut::Silhouette, 0.0, &[20.0, 50.0]);
        for p in &along_x.points {
            assert!(
                (p.extent_nm[0] - p.distance_nm * tan(15.0)).abs() < 0.05,
                "{p:?}"
            );
            assert!(
                (p.extent_nm[1] - p.distance_nm * tan(25.0)).abs() < 0.05,
                "{p:?}"
            );
        }
        let along_y = probe_shape(&tip, Cut::Section, 90.0, &[40.0]).points[0];
        assert!((along_y.width_nm() - 40.0 * (tan(20.0) + tan(30.0))).abs() < 0.05);
    }

    #[test]
    fn a_pyramid_is_widest_from_corner_to_corner() {
        let tip = Model::Pyramid {
            half_angles: [20.0; 4],
        }
        .sample(81.0, Pitch::square(1.0))
        .unwrap();
        let a = aspect(&tip, 40.0).unwrap();
        // The corner lies between cells: half a pixel of the 41 nm is lost there.
        assert!((a.elongation() - 2f64.sqrt()).abs() < 0.02, "{a:?}");
        assert!((a.azimuth_deg[1] - 45.0).abs() < 0.1 || (a.azimuth_deg[1] - 135.0).abs() < 0.1);
        let widest = 2.0 * 40.0 * 20f64.to_radians().tan() * 2f64.sqrt();
        assert!((a.ratio() - 40.0 / widest).abs() < 0.015);
        assert!(aspect(&tip, 500.0).is_none());
    }

    #[test]
    fn distances_are_close_near_the_apex_and_none_without_a_depth() {
        let d = distances_nm(16.0, 4);
        assert_eq!(d, [1.0, 4.0, 9.0, 16.0]);
        assert!(distances_nm(0.0, 4).is_empty() && distances_nm(f64::NAN, 4).is_empty());
    }
}
