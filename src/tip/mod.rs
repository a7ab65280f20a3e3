//! Tip shapes: models, blind estimate, read-outs.
//!
//! Convention (contract of `tip.npy`): odd by odd, apex 0 at the centre, apex up, so heights are
//! `<= 0`; `-inf` outside the tip. `shape[[c + i, c + j]]` is minus the height of the tip's surface
//! at the lateral offset (i rows, j columns) from the apex, in the scan's own axes.

pub mod area;
pub mod blind;
pub mod compare;
pub mod known;
pub mod model;
pub mod outline;
pub mod probe_shape;
pub mod reach;
pub mod read_out;

use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, Pitch, Profile};
use ndarray::{Array2, ArrayView2};

/// A tip's shape on a grid, apex up and centred.
#[derive(Debug, Clone, PartialEq)]
pub struct Tip {
    shape: Array2<f32>,
    pitch: Pitch,
}

impl Tip {
    /// A tip from its grid (nm, apex 0 at the centre, `<= 0`; NaN and `-inf` = outside the tip).
    ///
    /// Errors of kind `Data`: an even or empty grid, a centre that is not 0, a height above it.
    pub fn new(mut shape: Array2<f32>, pitch: Pitch) -> Result<Self> {
        let (rows, columns) = shape.dim();
        let fail = |what: String| {
            Err(Error::new(ErrorKind::Data, what).remedy(
                "A tip is an odd by odd grid with its apex, height 0, at the centre, \
                 no height above it, and the pixel pitch of the scan",
            ))
        };
        if rows % 2 == 0 || columns % 2 == 0 {
            return fail(format!(
                "a tip grid of {rows} x {columns} has no centre pixel"
            ));
        }
        shape.mapv_inplace(|p| if p.is_nan() { f32::NEG_INFINITY } else { p });
        let apex = shape[[rows / 2, columns / 2]];
        if apex != 0.0 {
            return fail(format!("the tip's centre pixel is at {apex} nm, not 0"));
        }
        if let Some(high) = shape.iter().find(|&&p| p > 0.0) {
            return fail(format!("the tip rises to {high} nm above its apex"));
        }
        if !shape.is_standard_layout() {
            shape = shape.as_standard_layout().into_owned();
        }
        Ok(Self {
            shape,
            pitch: pitch.checked()?,
        })
    }

    /// A tip from a map read from a file; voids are outside the tip. Errors as [`Tip::new`].
    pub fn from_map(map: &HeightMap) -> Result<Self> {
        Self::new(map.heights().to_owned(), map.pitch())
    }

    /// The shape as a map, cells outside the tip as voids.
    pub fn to_map(&self) -> Result<HeightMap> {
        HeightMap::new(self.shape.clone(), self.pitch)
    }

    /// Heights in nm, `[row, col]`, apex 0 at the centre, `-inf` outside.
    pub fn shape(&self) -> ArrayView2<'_, f32> {
        self.shape.view()
    }

    /// Pixel pitch, nm.
    pub fn pitch(&self) -> Pitch {
        self.pitch
    }

    /// Full extent of the grid along x and y, nm.
    pub fn support_nm(&self) -> [f64; 2] {
        [
            self.shape.ncols() as f64 * self.pitch.x,
            self.shape.nrows() as f64 * self.pitch.y,
        ]
    }

    /// The shape for a search of contacts that the grid and an uncertain flank blur: each cell
    /// raised by a quarter of its height step to the next cells, because a contact lies anywhere
    /// between them, and by twice `flank_u_nm` (standard uncertainty of the surface along its
    /// normal) as the slope makes it a height. Never above the apex. Common practice.
    pub fn for_contacts(&self, flank_u_nm: f64) -> Array2<f32> {
        let shape = &self.shape;
        // The mean height step to the neighbours inside the tip, nm.
        let step = |(i, j): (usize, usize), (di, dj): (usize, usize)| {
            let here = shape[[i, j]];
            let height = |at: (usize, usize)| shape.get(at).copied().filter(|p| p.is_finite());
            let before = i.checked_sub(di).zip(j.checked_sub(dj)).and_then(height);
            match (before, height((i + di, j + dj))) {
                (Some(a), Some(b)) => f64::from(b - a).abs() / 2.0,
                (Some(one), None) | (None, Some(one)) => f64::from(one - here).abs(),
                (None, None) => 0.0,
            }
        };
        Array2::from_shape_fn(shape.dim(), |at| {
            if !shape[at].is_finite() {
                return shape[at];
            }
            let (down, right) = (step(at, (1, 0)), step(at, (0, 1)));
            let slope = (down / self.pitch.y).hypot(right / self.pitch.x);
            let raised = 0.25 * down.hypot(right) + 2.0 * flank_u_nm * slope;
            (shape[at] + raised as f32).min(0.0)
        })
    }

    /// The tip with all its surface but the apex `by` nm higher (blunter) or lower (sharper), never
    /// above the apex. Errors as [`Tip::new`].
    pub fn moved(&self, by: f64) -> Result<Self> {
        let mut shape = self.shape.mapv(|p| (p + by as f32).min(0.0));
        let (rows, columns) = shape.dim();
        shape[[rows / 2, columns / 2]] = 0.0;
        Self::new(shape, self.pitch)
    }

    /// Greatest depth below the apex of a cell inside the tip, nm.
    pub fn depth_nm(&self) -> f64 {
        let lowest = self
            .shape
            .iter()
            .filter(|p| p.is_finite())
            .fold(0.0f32, |a, &b| a.min(b));
        -f64::from(lowest)
    }

    /// Shape height (`<= 0`, nm) at the lateral offset (nm) from the apex, bilinear;
    /// NaN outside the grid or the tip.
    pub fn height_at(&self, dx_nm: f64, dy_nm: f64) -> f32 {
        // The apex sits at the centre of the middle pixel.
        let [w, h] = self.support_nm();
        match self.to_map() {
            Ok(map) => map.height_at(w / 2.0 + dx_nm, h / 2.0 + dy_nm),
            Err(_) => f32::NAN,
        }
    }

    /// The profile through the apex at `azimuth_deg` (0 = along +x, 90 = along +y);
    /// positions are signed distances from the apex.
    pub fn profile(&self, azimuth_deg: f64) -> Profile {
        let Ok(map) = self.to_map() else {
            return Profile::default();
        };
        let [w, h] = self.support_nm();
        let (sin, cos) = azimuth_deg.to_radians().sin_cos();
        let reach = (w / 2.0 / cos.abs().max(1e-12)).min(h / 2.0 / sin.abs().max(1e-12));
        let step = self.pitch.x.min(self.pitch.y);
        let n = (reach / step).floor() as i64;
        let position_nm: Vec<f64> = (-n..=n).map(|i| i as f64 * step).collect();
        Profile {
            height_nm: position_nm
                .iter()
                .map(|d| map.height_at(w / 2.0 + d * cos, h / 2.0 + d * sin))
                .collect(),
            position_nm,
        }
    }
}

/// The pair of tips between which the true one lies.
#[derive(Debug, Clone, PartialEq)]
pub struct Band {
    /// A tip inside the true one.
    pub sharper: Tip,
    /// A tip that encloses the true one.
    pub blunter: Tip,
}

#[cfg(test)]
mod tests {
    use super::model::Model;
    use super::*;

    #[test]
    fn a_cone_for_contacts_is_raised_by_a_quarter_step_and_the_uncertainty() {
        let (radius, half_angle) = (0.0, 45.0);
        let tip = Model::SphereCone { radius, half_angle }
            .sample(18.0, Pitch::square(2.0))
            .unwrap();
        // On the axis of a 45 degree cone the step from pixel to pixel of 2 nm is 2 nm, slope 1.
        let raised = tip.for_contacts(0.1)[[4, 7]];
        assert!(
            (f64::from(raised) - (-6.0 + 0.25 * 2.0 + 0.2)).abs() < 1e-5,
            "{raised}"
        );
        assert_eq!(tip.for_contacts(0.1)[[4, 4]], 0.0);
    }

    #[test]
    fn what_is_outside_the_tip_stays_outside() {
        let mut shape = Array2::from_elem((3, 3), f32::NEG_INFINITY);
        shape[[1, 1]] = 0.0;
        let tip = Tip::new(shape.clone(), Pitch::square(1.0)).unwrap();
        assert_eq!(tip.for_contacts(1.0), shape);
    }
}
