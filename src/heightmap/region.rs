//! Rectangles on a map, in length units.

use super::HeightMap;
use crate::error::{Error, ErrorKind, Result};
use crate::units::Length;
use serde::{Deserialize, Serialize};

/// A rectangle in nm: left and top edge from the map's corner, width (x) and height (y).
///
/// In job files `["120 nm", "0 nm", "400 nm", "1024 nm"]`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(from = "[Length; 4]", into = "[Length; 4]")]
pub struct Region {
    /// Left edge, nm.
    pub left: f64,
    /// Top edge, nm.
    pub top: f64,
    /// Extent along x, nm.
    pub width: f64,
    /// Extent along y, nm.
    pub height: f64,
}

impl From<[Length; 4]> for Region {
    fn from([left, top, width, height]: [Length; 4]) -> Self {
        Self {
            left: left.nm(),
            top: top.nm(),
            width: width.nm(),
            height: height.nm(),
        }
    }
}

impl From<Region> for [Length; 4] {
    fn from(region: Region) -> Self {
        [region.left, region.top, region.width, region.height].map(Length::from_nm)
    }
}

/// A half-open range of rows and columns: the pixels whose centres lie in a [`Region`].
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct PixelRegion {
    /// First row.
    pub row: usize,
    /// First column.
    pub column: usize,
    /// Number of rows, at least 1.
    pub rows: usize,
    /// Number of columns, at least 1.
    pub columns: usize,
}

impl Region {
    /// The region between two opposite corners in nm, whichever way they were dragged.
    pub fn between(a: (f64, f64), b: (f64, f64)) -> Self {
        Self {
            left: a.0.min(b.0),
            top: a.1.min(b.1),
            width: (a.0 - b.0).abs(),
            height: (a.1 - b.1).abs(),
        }
    }

    /// The pixels of `map` whose centres lie inside.
    ///
    /// Errors of kind `Setting` when none does.
    pub fn pixels(&self, map: &HeightMap) -> Result<PixelRegion> {
        let range = |start: f64, extent: f64, pitch: f64, count: usize| {
            // A rounding guard of a millionth of a pixel keeps "0 nm" to "1024 nm" whole.
            let first = ((start / pitch - 0.5) - 1e-6).ceil().max(0.0);
            let last = (((start + extent) / pitch - 0.5) + 1e-6)
                .floor()
                .min(count as f64 - 1.0);
            (last >= first).then(|| (first as usize, (last - first) as usize + 1))
        };
        let pitch = map.pitch();
        match (
            range(self.left, self.width, pitch.x, map.columns()),
            range(self.top, self.height, pitch.y, map.rows()),
        ) {
            (Some((column, columns)), Some((row, rows))) => Ok(PixelRegion {
                row,
                column,
                rows,
                columns,
            }),
            _ => Err(Error::new(
                ErrorKind::Setting,
                format!(
                    "the region {} nm, {} nm, {} nm x {} nm holds no pixel of the {} nm x {} nm scan",
                    self.left, self.top, self.width, self.height, map.width_nm(), map.length_nm()
                ),
            )
            .remedy("Give left, top, width and height inside the scan")),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::Pitch;
    use super::*;

    fn map() -> HeightMap {
        HeightMap::from_fn(10, 20, Pitch { x: 2.0, y: 4.0 }, |_, _| 0.0).unwrap()
    }

    #[test]
    fn the_whole_region_is_every_pixel() {
        let map = map();
        let pixels = map.whole().pixels(&map).unwrap();
        assert_eq!(
            (pixels.row, pixels.column, pixels.rows, pixels.columns),
            (0, 0, 10, 20)
        );
    }

    #[test]
    fn only_pixels_with_their_centre_inside_count() {
        let map = map();
        let region = Region {
            left: 3.1,
            top: 0.0,
            width: 4.0,
            height: 5.9,
        };
        let pixels = region.pixels(&map).unwrap();
        assert_eq!((pixels.column, pixels.columns), (2, 2));
        assert_eq!((pixels.row, pixels.rows), (0, 1));
    }

    #[test]
    fn a_region_off_the_map_is_an_error_with_its_numbers() {
        let map = map();
        let region = Region {
            left: 400.0,
            top: 0.0,
            width: 4.0,
            height: 5.9,
        };
        assert!(
            region
                .pixels(&map)
                .unwrap_err()
                .to_string()
                .contains("400 nm")
        );
    }
}
