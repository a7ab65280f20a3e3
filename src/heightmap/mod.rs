//! The one data type all rooms share: heights in nanometres with their pitch, voids and history.
//!
//! Conventions: `heights[[row, col]]`, row = slow axis (y), col = fast axis (x). Pixel
//! `[row, col]` covers `x` from `col * pitch.x` to `(col + 1) * pitch.x`, its centre is at
//! `(col + 0.5) * pitch.x`; y likewise. A void is NaN; infinities never occur.

mod profile;
mod region;

pub use profile::Profile;
pub use region::{PixelRegion, Region};

use crate::error::{Error, ErrorKind, Result};
use ndarray::{Array2, ArrayView2};
use std::path::PathBuf;

/// Distance between neighbouring pixel centres in nanometres, along x (columns) and y (rows).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pitch {
    /// Along the fast axis, nm, positive.
    pub x: f64,
    /// Along the slow axis, nm, positive.
    pub y: f64,
}

impl Pitch {
    /// The same pitch both ways.
    pub const fn square(nm: f64) -> Self {
        Self { x: nm, y: nm }
    }

    /// Errors of kind `Setting` unless both are finite and positive.
    pub fn checked(self) -> Result<Self> {
        if self.x > 0.0 && self.y > 0.0 && self.x.is_finite() && self.y.is_finite() {
            Ok(self)
        } else {
            Err(Error::new(
                ErrorKind::Setting,
                format!("pixel pitch {} nm, {} nm is not positive", self.x, self.y),
            )
            .remedy("Give the distance between neighbouring pixels, for example \"2 nm\""))
        }
    }

    /// Whether the two pitches agree within `1e-3` relative, which is as exact as tags are written.
    pub fn agrees_with(self, other: Self) -> bool {
        let near = |a: f64, b: f64| (a - b).abs() <= 1e-3 * a.abs().max(b.abs());
        near(self.x, other.x) && near(self.y, other.y)
    }
}

/// Where a map came from and what was done to it since.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Provenance {
    /// The file it was read from, if any.
    pub file: Option<PathBuf>,
    /// SHA-256 of that file's bytes, lower-case hex.
    pub sha256: Option<String>,
    /// Where the scale came from ("X3P axes", "sidecar", "--pitch option"), for the record.
    pub scale_source: String,
    /// What was done since, one plain sentence each, in order.
    pub steps: Vec<String>,
}

/// Heights (f32, nm, row-major) on a regular grid, voids as NaN.
#[derive(Debug, Clone)]
pub struct HeightMap {
    heights: Array2<f32>,
    pitch: Pitch,
    provenance: Provenance,
}

impl HeightMap {
    /// A map from heights in nm. Infinities become voids (NaN).
    ///
    /// Errors: kind `Data` when empty, kind `Setting` when the pitch is not positive.
    pub fn new(mut heights: Array2<f32>, pitch: Pitch) -> Result<Self> {
        let pitch = pitch.checked()?;
        if heights.is_empty() {
            return Err(Error::new(
                ErrorKind::Data,
                format!(
                    "a height map of {} x {} pixels is empty",
                    heights.nrows(),
                    heights.ncols()
                ),
            ));
        }
        if !heights.is_standard_layout() {
            heights = heights.as_standard_layout().into_owned();
        }
        heights.mapv_inplace(|z| if z.is_finite() { z } else { f32::NAN });
        Ok(Self {
            heights,
            pitch,
            provenance: Provenance::default(),
        })
    }

    /// A map computed point by point; `f(x, y)` in nm at the pixel centre gives nm.
    pub fn from_fn(
        rows: usize,
        columns: usize,
        pitch: Pitch,
        mut f: impl FnMut(f64, f64) -> f64,
    ) -> Result<Self> {
        let heights = Array2::from_shape_fn((rows, columns), |(r, c)| {
            f((c as f64 + 0.5) * pitch.x, (r as f64 + 0.5) * pitch.y) as f32
        });
        Self::new(heights, pitch)
    }

    /// The same grid and history with other heights (same shape), and `step` added to the history.
    ///
    /// Panics when the shapes differ: that is a programming error.
    #[must_use]
    pub fn with_heights(&self, heights: Array2<f32>, step: impl Into<String>) -> Self {
        assert_eq!(
            heights.dim(),
            self.heights.dim(),
            "with_heights: shapes differ"
        );
        let mut map = self.clone();
        map.heights = heights;
        map.provenance.steps.push(step.into());
        map
    }

    /// Replaces the history.
    #[must_use]
    pub fn with_provenance(mut self, provenance: Provenance) -> Self {
        self.provenance = provenance;
        self
    }

    /// Rows (slow axis).
    pub fn rows(&self) -> usize {
        self.heights.nrows()
    }

    /// Columns (fast axis).
    pub fn columns(&self) -> usize {
        self.heights.ncols()
    }

    /// Pixel pitch in nm.
    pub fn pitch(&self) -> Pitch {
        self.pitch
    }

    /// Heights in nm, `[row, col]`, standard layout, NaN = void.
    pub fn heights(&self) -> ArrayView2<'_, f32> {
        self.heights.view()
    }

    /// Gives up the heights.
    pub fn into_heights(self) -> Array2<f32> {
        self.heights
    }

    /// Where it came from and what was done.
    pub fn provenance(&self) -> &Provenance {
        &self.provenance
    }

    /// Full width along x in nm (columns times pitch).
    pub fn width_nm(&self) -> f64 {
        self.columns() as f64 * self.pitch.x
    }

    /// Full length along y in nm (rows times pitch).
    pub fn length_nm(&self) -> f64 {
        self.rows() as f64 * self.pitch.y
    }

    /// The whole map as a region.
    pub fn whole(&self) -> Region {
        Region {
            left: 0.0,
            top: 0.0,
            width: self.width_nm(),
            height: self.length_nm(),
        }
    }

    /// Number of void pixels.
    pub fn void_count(&self) -> usize {
        self.heights.iter().filter(|z| z.is_nan()).count()
    }

    /// Lowest and highest height in nm over non-void pixels; `None` when all is void.
    pub fn range(&self) -> Option<(f32, f32)> {
        self.heights
            .iter()
            .filter(|z| !z.is_nan())
            .fold(None, |range, &z| {
                let (low, high) = range.unwrap_or((z, z));
                Some((low.min(z), high.max(z)))
            })
    }

    /// Height in nm at the position (nm) by bilinear interpolation between pixel centres.
    ///
    /// NaN outside the outermost pixel centres' half-pixel rim, or where a needed pixel is void.
    pub fn height_at(&self, x_nm: f64, y_nm: f64) -> f32 {
        let (w, h) = (self.width_nm(), self.length_nm());
        if !(0.0..=w).contains(&x_nm) || !(0.0..=h).contains(&y_nm) {
            return f32::NAN;
        }
        let split = |position: f64, count: usize| {
            let p = (position - 0.5).clamp(0.0, (count - 1) as f64);
            let i = (p.floor() as usize).min(count.saturating_sub(2));
            (i, (i + 1).min(count - 1), p - i as f64)
        };
        let (c0, c1, fx) = split(x_nm / self.pitch.x, self.columns());
        let (r0, r1, fy) = split(y_nm / self.pitch.y, self.rows());
        let mut sum = 0.0;
        for (r, wr) in [(r0, 1.0 - fy), (r1, fy)] {
            for (c, wc) in [(c0, 1.0 - fx), (c1, fx)] {
                let weight = wr * wc;
                // A void next door must not matter where its weight is nothing.
                if weight > 0.0 {
                    sum += weight * f64::from(self.heights[[r, c]]);
                }
            }
        }
        sum as f32
    }

    /// The heights along a straight line between two positions in nm, at the finer pitch.
    pub fn profile(&self, from: (f64, f64), to: (f64, f64)) -> Profile {
        profile::sample(self, from, to)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn interpolation_is_exact_on_a_plane_between_pixel_centres() {
        let map = HeightMap::from_fn(5, 7, Pitch { x: 2.0, y: 3.0 }, |x, y| {
            0.5 * x - 0.25 * y + 1.0
        })
        .unwrap();
        for (x, y) in [(1.0, 1.5), (6.3, 7.7), (13.0, 13.5)] {
            let expected = 0.5 * x - 0.25 * y + 1.0;
            assert!((f64::from(map.height_at(x, y)) - expected).abs() < 1e-5);
        }
        assert!(map.height_at(-0.1, 3.0).is_nan());
        assert!(map.height_at(14.1, 3.0).is_nan());
    }

    #[test]
    fn a_map_of_one_pixel_answers() {
        let map = HeightMap::from_fn(1, 1, Pitch::square(2.0), |_, _| 4.0).unwrap();
        assert_eq!(map.height_at(0.0, 2.0), 4.0);
        assert_eq!(map.range(), Some((4.0, 4.0)));
    }

    #[test]
    fn infinities_become_voids_and_emptiness_is_an_error() {
        let map = HeightMap::new(ndarray::arr2(&[[1.0, f32::INFINITY]]), Pitch::square(1.0));
        assert_eq!(map.unwrap().void_count(), 1);
        assert!(HeightMap::new(Array2::zeros((0, 3)), Pitch::square(1.0)).is_err());
        assert!(HeightMap::new(Array2::zeros((2, 3)), Pitch::square(0.0)).is_err());
    }
}
