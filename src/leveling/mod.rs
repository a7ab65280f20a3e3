//! Planes, polynomials, row alignment, masks, noise and drift figures.
//!
//! Levelling must not bias what is measured afterwards. Features tilt a least-squares plane and
//! lift row medians; so the plane is taken from the dominant flat only, and rows are aligned on
//! the pixels of that base plane only, and only where their offsets stand out from the noise.
//!
//! **Which flat is the base:** the one that holds most pixels. Where two levels hold nearly as
//! many (within 20 %), the lower one: features stand on the ground.

mod base;
pub(crate) mod least_squares;
mod model;
mod noise;
pub mod pair;
mod robust;
mod rows;
mod surface;
#[cfg(test)]
mod tests;
#[cfg(test)]
mod virtual_scan;

pub use noise::noise;

use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, Region};
use crate::progress::Progress;
use model::{Model, moments};
use ndarray::{Array2, s};
use surface::Surface;

/// How to level.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Method {
    /// Leave the heights as they are.
    None,
    /// A robust plane on the dominant flat, then row alignment where row offsets stand out.
    #[default]
    Auto,
    /// A least-squares plane on the chosen regions, or on everything when none is chosen.
    Plane,
    /// A least-squares polynomial of total order 1-5 on the chosen regions or on everything.
    Polynomial {
        /// Total order, 1 to 5.
        order: u8,
    },
    /// As `Auto`, with row alignment on base-plane pixels always.
    Rows,
}

/// What to level with.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Settings {
    /// How.
    pub method: Method,
    /// Where the reference surface is taken from; empty = everywhere (or found, for `Auto`).
    pub regions: Vec<Region>,
}

/// A row whose offset from its neighbours stands out from the noise.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RowJump {
    /// Row index.
    pub row: usize,
    /// Offset from the row before, nm.
    pub jump_nm: f64,
}

/// A levelled map and what was seen on the way.
#[derive(Debug, Clone)]
pub struct Leveled {
    /// The levelled map; the base plane is at height 0 where one was found.
    pub map: HeightMap,
    /// Pixels taken as the base plane, `[row, col]`.
    pub base: Array2<bool>,
    /// Standard deviation of the white part of the noise, nm; `None` when it cannot be had.
    pub noise_nm: Option<f64>,
    /// Slope removed along x and y, nm per nm.
    pub slope: [f64; 2],
    /// Rows that jump, named.
    pub row_jumps: Vec<RowJump>,
    /// Height drift along the slow axis that rows showed beyond the plane, peak to peak, nm.
    pub drift_nm: Option<f64>,
    /// Plain sentences for the user.
    pub warnings: Vec<String>,
}

/// Levels `map`.
///
/// Voids stay void. With [`Method::None`] the heights stay as they are and the figures (base,
/// jumps, drift) are those that `Auto` would see. One row or one column is levelled as a profile.
/// Slopes are those of the plane removed; of a polynomial, at the middle of the map.
///
/// Errors: kind `Data` when everything is void or the chosen pixels do not determine the surface;
/// kind `Setting` when a region holds no pixel or the order is not 1 to 5; `Cancelled`.
pub fn level(map: &HeightMap, settings: &Settings, progress: &Progress) -> Result<Leveled> {
    progress.say("levelling");
    let scan = Scan::new(map, settings)?;
    progress.check()?;
    let leveled = match settings.method {
        Method::None => {
            let seen = robust::level(&scan, false, progress)?;
            Leveled {
                map: map.clone(),
                slope: [0.0; 2],
                ..seen
            }
        }
        Method::Auto => robust::level(&scan, false, progress)?,
        Method::Rows => robust::level(&scan, true, progress)?,
        Method::Plane => scan.polynomial(1, progress)?,
        Method::Polynomial { order } => scan.polynomial(order, progress)?,
    };
    progress.report(1.0);
    Ok(leveled)
}

/// A map made ready: heights in f64 about a middle value, so that nothing large cancels.
struct Scan<'a> {
    map: &'a HeightMap,
    z: Array2<f64>,
    /// Pixels in the chosen regions; `None` when none was chosen.
    allowed: Option<Array2<bool>>,
    noise: Option<f64>,
    /// The noise, or where there is none the finest difference worth telling apart, nm, positive.
    finest: f64,
}

impl<'a> Scan<'a> {
    fn new(map: &'a HeightMap, settings: &Settings) -> Result<Self> {
        let Some((low, high)) = map.range() else {
            return Err(Error::new(
                ErrorKind::Data,
                format!(
                    "all {} pixels of the scan are void",
                    map.rows() * map.columns()
                ),
            )
            .remedy("Check the file: there is no height to level"));
        };
        let middle = 0.5 * (f64::from(low) + f64::from(high));
        let z = map.heights().mapv(|h| f64::from(h) - middle);
        let allowed = marked_regions(map, &settings.regions)?;
        if let Some(allowed) = &allowed
            && !z.iter().zip(allowed).any(|(z, a)| *a && !z.is_nan())
        {
            return Err(
                Error::new(ErrorKind::Data, "the chosen regions hold only void pixels")
                    .remedy("Choose regions with measured heights"),
            );
        }
        let noise = noise(map);
        let range = f64::from(high) - f64::from(low);
        let rounding = 4.0 * f64::from(low.abs().max(high.abs())) * f64::from(f32::EPSILON);
        let finest = [noise.unwrap_or(0.0), 1e-5 * range, rounding, 1e-12]
            .into_iter()
            .fold(0.0, f64::max);
        Ok(Self {
            map,
            z,
            allowed,
            noise,
            finest,
        })
    }

    fn slope(&self, per_column: f64, per_row: f64) -> [f64; 2] {
        let pitch = self.map.pitch();
        [per_column / pitch.x, per_row / pitch.y]
    }

    /// Pixels that may be levelled on.
    fn usable(&self) -> usize {
        match &self.allowed {
            Some(allowed) => self
                .z
                .iter()
                .zip(allowed)
                .filter(|(z, a)| **a && !z.is_nan())
                .count(),
            None => self.z.iter().filter(|z| !z.is_nan()).count(),
        }
    }

    fn polynomial(&self, order: u8, progress: &Progress) -> Result<Leveled> {
        if !(1..=5).contains(&order) {
            return Err(Error::new(
                ErrorKind::Setting,
                format!("a levelling polynomial of order {order}"),
            )
            .remedy("Give an order from 1 to 5"));
        }
        let flat = Model::flat(self.z.nrows());
        let base = flat.near(&self.z, f64::INFINITY, self.allowed.as_ref());
        let surface = Surface::fit(&self.z, &base, usize::from(order), progress)?;
        let (rows_n, columns) = self.z.dim();
        let [sx, sy] = surface.gradient(0.5 * (rows_n as f64 - 1.0), 0.5 * (columns as f64 - 1.0));
        let slope = self.slope(sx, sy);
        let left = surface.residuals(&self.z);
        // Without a chosen flat, offsets of whole rows speak of features as much as of the scanner.
        let (row_jumps, drift_nm) = match &self.allowed {
            Some(_) => {
                let sums = moments(&left, &flat, &base, f64::INFINITY);
                let together = model::neighbour_correlation(&left, &flat, &base);
                let offsets = rows::offsets(&sums, columns, together);
                (offsets.jumps(self.finest), offsets.drift())
            }
            None => (rows::shifts(&left, self.finest).all(), None),
        };
        let on = match &self.allowed {
            Some(_) => "the chosen regions",
            None => "all heights",
        };
        let what = match order {
            1 => "plane".to_owned(),
            n => format!("polynomial of total order {n}"),
        };
        let step = format!(
            "levelled: least-squares {what} through {on}, slope {:.3e} along x and {:.3e} along y",
            slope[0], slope[1]
        );
        Ok(Leveled {
            map: self.map.with_heights(left.mapv(|z| z as f32), step),
            base,
            noise_nm: self.noise,
            slope,
            row_jumps,
            drift_nm,
            warnings: Vec::new(),
        })
    }
}

fn marked_regions(map: &HeightMap, regions: &[Region]) -> Result<Option<Array2<bool>>> {
    if regions.is_empty() {
        return Ok(None);
    }
    let mut marked = Array2::from_elem((map.rows(), map.columns()), false);
    for region in regions {
        let p = region.pixels(map)?;
        marked
            .slice_mut(s![p.row..p.row + p.rows, p.column..p.column + p.columns])
            .fill(true);
    }
    Ok(Some(marked))
}
