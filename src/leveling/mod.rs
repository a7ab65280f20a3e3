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
use crate::units::format_length;
use base::Samples;
use model::{Model, Plane, RowMoments, moments};
use ndarray::{Array2, s};
use rows::Offsets;
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
            let seen = scan.robust(false, progress)?;
            Leveled {
                map: map.clone(),
                slope: [0.0; 2],
                ..seen
            }
        }
        Method::Auto => scan.robust(false, progress)?,
        Method::Rows => scan.robust(true, progress)?,
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

/// What the robust levelling settled on.
struct Settled {
    model: Model,
    base: Array2<bool>,
    core: Array2<bool>,
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

    /// `Auto`, and with `always` `Rows`.
    fn robust(&self, always: bool, progress: &Progress) -> Result<Leveled> {
        let (rows_n, columns) = self.z.dim();
        let mut warnings = Vec::new();
        let shifts = rows::shifts(&self.z, self.finest);
        let mut model = Model {
            plane: Plane::default(),
            offsets: vec![0.0; rows_n],
        };
        for jump in &shifts.single {
            model.offsets[jump.row] += jump.jump_nm;
        }
        for jump in &shifts.lasting {
            if always {
                for offset in &mut model.offsets[jump.row..] {
                    *offset += jump.jump_nm;
                }
            }
            warnings.push(lasting_jump(jump, always));
        }
        let samples = Samples::choose(&self.z, self.allowed.as_ref());
        let found = base::find(&self.z, &model, &samples, self.finest, shifts.scatter);
        progress.check()?;
        progress.report(0.4);
        let Some(found) = found else {
            return self.no_flat(&shifts, always, warnings);
        };
        model.plane = found.plane;
        let mut settled = self.settle(model, 3.0 * found.scale, None, progress)?;
        progress.report(0.7);
        let slope = self.slope(settled.model.plane.per_column, settled.model.plane.per_row);

        let mut offsets = rows::offsets(
            &moments(
                &self.z,
                &settled.model,
                &by_row(&settled.core, &settled.base),
            ),
            columns,
        );
        let drift_nm = offsets.drift();
        for (seen, known) in offsets.of_row.iter_mut().zip(&settled.model.offsets) {
            *seen = seen.map(|o| o + known);
        }
        let row_jumps = offsets.jumps(self.finest);
        for (seen, known) in offsets.of_row.iter_mut().zip(&settled.model.offsets) {
            *seen = seen.map(|o| o - known);
        }
        if offsets.of_row.iter().any(Option::is_some) {
            offsets.bridge(&shifts, settled.model.plane.per_row);
        }
        let known = offsets.of_row.iter().flatten().count();
        let align = known > 0 && (always || offsets.stand_out(self.finest));
        let mut how = String::new();
        if align {
            let (fill, missing) = offsets.filled();
            for (o, f) in settled.model.offsets.iter_mut().zip(fill) {
                *o += f;
            }
            settled = self.settle_rows(settled, &samples, &offsets, progress)?;
            how = format!(", {known} rows aligned on its pixels");
            if !missing.is_empty() {
                warnings.push(format!(
                    "rows without enough base-plane pixels were aligned by their neighbours: rows {}",
                    rows::list(&missing)
                ));
            }
        } else {
            let singles: Vec<usize> = shifts.single.iter().map(|j| j.row).collect();
            if !singles.is_empty() {
                how = format!(", shifted rows put back: {}", rows::list(&singles));
            }
            if always {
                warnings.push(format!(
                    "rows were not aligned: {columns} columns or too few base-plane pixels in every row"
                ));
            }
        }
        let share = model::count(&settled.base) as f64 / self.usable() as f64;
        let step = format!(
            "levelled: robust plane on the dominant flat ({:.0} % of the pixels), slope {:.3e} along x and {:.3e} along y{how}",
            100.0 * share,
            slope[0],
            slope[1]
        );
        Ok(Leveled {
            map: self
                .map
                .with_heights(settled.model.residuals(&self.z), step),
            base: settled.base,
            noise_nm: self.noise,
            slope,
            row_jumps,
            drift_nm,
            warnings,
        })
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

    /// Refits the model to the base pixels until they no longer change: the plane, or with
    /// `of_row` the slope along x and an offset for each row that has one.
    fn settle(
        &self,
        mut model: Model,
        half_band: f64,
        of_row: Option<&Offsets>,
        progress: &Progress,
    ) -> Result<Settled> {
        let allowed = self.allowed.as_ref();
        let (rows_n, columns) = self.z.dim();
        let mut base = model.near(&self.z, half_band, allowed);
        let reach = model::core_reach(&self.z, &base, allowed);
        let mut core = model::core(&self.z, &base, allowed, reach);
        for _ in 0..30 {
            progress.check()?;
            let change = match of_row {
                None => {
                    let sums = moments(&self.z, &model, &core);
                    let correction = model::plane_correction(&sums);
                    model.plane = model.plane.plus(correction);
                    correction.at_centre.abs()
                        + correction.per_column.abs() * columns as f64
                        + correction.per_row.abs() * rows_n as f64
                }
                Some(of_row) => {
                    let sums = moments(&self.z, &model, &by_row(&core, &base));
                    rows_correction(&mut model, &sums, of_row)
                }
            };
            base = model.near(&self.z, half_band, allowed);
            if change < 1e-6 * half_band {
                break;
            }
            core = model::core(&self.z, &base, allowed, reach);
        }
        Ok(Settled { model, base, core })
    }

    /// Once the rows are aligned the base is narrower: find its width again and settle.
    fn settle_rows(
        &self,
        settled: Settled,
        samples: &Samples,
        offsets: &Offsets,
        progress: &Progress,
    ) -> Result<Settled> {
        let mut heights: Vec<f64> = samples
            .at
            .iter()
            .map(|&(r, c)| settled.model.residual(&self.z, r, c))
            .collect();
        heights.sort_unstable_by(f64::total_cmp);
        let Some(pile) = base::dominant_pile(&heights, self.finest) else {
            return Ok(settled);
        };
        let mut model = settled.model;
        model.plane.at_centre += pile.centre;
        self.settle(model, 3.0 * pile.scale, Some(offsets), progress)
    }

    /// A rough surface: a least-squares plane through everything.
    fn no_flat(
        &self,
        shifts: &rows::Shifts,
        always: bool,
        mut warnings: Vec<String>,
    ) -> Result<Leveled> {
        let rows_n = self.z.nrows();
        let mut model = Model {
            plane: Plane::default(),
            offsets: vec![0.0; rows_n],
        };
        for jump in &shifts.single {
            model.offsets[jump.row] += jump.jump_nm;
        }
        let base = model.near(&self.z, f64::INFINITY, self.allowed.as_ref());
        // The second pass takes off what rounding left of the first.
        for _ in 0..2 {
            let sums = moments(&self.z, &model, &base);
            model.plane = model.plane.plus(model::plane_correction(&sums));
        }
        warnings.push(
            "no flat stands out: a least-squares plane through all heights was removed; \
             choose a region that is flat where a step or a height matters"
                .to_owned(),
        );
        if always {
            warnings.push("rows were not aligned: there is no base plane to align them on".into());
        }
        let slope = self.slope(model.plane.per_column, model.plane.per_row);
        let step = format!(
            "levelled: least-squares plane through all heights (no flat stands out), slope {:.3e} along x and {:.3e} along y",
            slope[0], slope[1]
        );
        Ok(Leveled {
            map: self.map.with_heights(model.residuals(&self.z), step),
            base,
            noise_nm: self.noise,
            slope,
            row_jumps: shifts.all(),
            drift_nm: None,
            warnings,
        })
    }

    fn polynomial(&self, order: u8, progress: &Progress) -> Result<Leveled> {
        if !(1..=5).contains(&order) {
            return Err(Error::new(
                ErrorKind::Setting,
                format!("a levelling polynomial of order {order}"),
            )
            .remedy("Give an order from 1 to 5"));
        }
        let flat = Model {
            plane: Plane::default(),
            offsets: vec![0.0; self.z.nrows()],
        };
        let base = flat.near(&self.z, f64::INFINITY, self.allowed.as_ref());
        let surface = Surface::fit(&self.z, &base, usize::from(order), progress)?;
        let (rows_n, columns) = self.z.dim();
        let [sx, sy] = surface.gradient(0.5 * (rows_n as f64 - 1.0), 0.5 * (columns as f64 - 1.0));
        let slope = self.slope(sx, sy);
        let left = surface.residuals(&self.z);
        // Without a chosen flat, offsets of whole rows speak of features as much as of the scanner.
        let (row_jumps, drift_nm) = match &self.allowed {
            Some(_) => {
                let offsets = rows::offsets(&moments(&left, &flat, &base), columns);
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

/// The core pixels, in rows with too few of them all base pixels.
fn by_row(core: &Array2<bool>, base: &Array2<bool>) -> Array2<bool> {
    let fewest = rows::fewest_pixels(core.ncols());
    let mut chosen = core.clone();
    for (mut chosen, base) in chosen.rows_mut().into_iter().zip(base.rows()) {
        if chosen.iter().filter(|m| **m).count() < fewest {
            chosen.assign(&base);
        }
    }
    chosen
}

/// Least squares with an offset for each row and one slope along x, in closed form; returns the
/// largest change, nm.
fn rows_correction(model: &mut Model, sums: &[RowMoments], of_row: &Offsets) -> f64 {
    let own = |r: usize| of_row.of_row[r].is_some() && sums[r].n > 0.0;
    let (mut uz, mut uu, mut reach) = (0.0, 0.0, 0.0f64);
    for m in sums.iter().filter(|m| m.n > 0.0) {
        uz += m.uz - m.u * m.z / m.n;
        uu += m.uu - m.u * m.u / m.n;
        reach = reach.max((m.uu / m.n).sqrt());
    }
    let slope = if uu > 0.0 { uz / uu } else { 0.0 };
    model.plane.per_column += slope;
    let correction = Offsets {
        of_row: (0..sums.len())
            .map(|r| own(r).then(|| (sums[r].z - slope * sums[r].u) / sums[r].n))
            .collect(),
        error: of_row.error,
    };
    let (fill, _) = correction.filled();
    let mut change = slope.abs() * reach;
    for (o, f) in model.offsets.iter_mut().zip(fill) {
        *o += f;
        change = change.max(f.abs());
    }
    change
}

fn lasting_jump(jump: &RowJump, removed: bool) -> String {
    let what = format!(
        "from row {} on everything is shifted by {}",
        jump.row,
        format_length(jump.jump_nm)
    );
    if removed {
        format!("{what}: taken as a jump of the scanner and removed")
    } else {
        format!(
            "{what}: a jump of the scanner, or a step of the surface along the fast axis; \
             left as it is (row alignment removes it)"
        )
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
