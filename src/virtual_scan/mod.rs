//! Virtual scans whose truth is finer than the pixel: what a probe of known tip would record of a
//! known surface, for tests, demonstrations and validation.
//!
//! `I(x) = max over u of S(x + u) - t(u)` with `t(u) >= 0` the height of the tip's surface at the
//! offset `u` from its apex (the convention of [`crate::morphology`], with `p = -t`). Surface and
//! tip are functions of continuous positions. The maximum is searched on a grid `oversampling`
//! times finer than the pixel and then refined from every place that could win, so that vertical
//! walls stand where they are and not at the nearest grid point: to 0.01 nm or better for what is
//! wider than a few steps of that grid.
//!
//! The fine grid is anchored on the pixel *centres*: every centre is a grid point whatever the
//! oversampling, odd or even. It reaches half the tip support beyond the scan, so that the border
//! pixels are as right as the others.

#[cfg(test)]
mod accuracy;
mod distortion;
mod random;
mod refine;
mod scene;
#[cfg(test)]
mod tests;

pub use distortion::Distortion;
pub use random::{CorrelatedLine, CorrelatedMap, scatter};
pub use scene::{Block, Bump, BumpShape, Bumps, EdgeRoughness, Feature, Lines, Scene, Step};

use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::{HeightMap, Pitch, Provenance};
use crate::progress::Progress;
use ndarray::Array2;
use rayon::prelude::*;
use std::sync::atomic::{AtomicUsize, Ordering};

/// How a virtual scan is taken.
#[derive(Debug, Clone, PartialEq)]
pub struct Settings {
    /// Scan lines (slow axis).
    pub rows: usize,
    /// Pixels per scan line (fast axis).
    pub columns: usize,
    /// Pixel pitch.
    pub pitch: Pitch,
    /// Full width of the square within which the tip acts, nm.
    pub support_nm: f64,
    /// Fine-grid points per pixel along each axis.
    pub oversampling: usize,
    /// What the instrument adds.
    pub distortion: Distortion,
    /// Seed of everything random in the distortion.
    pub seed: u64,
}

impl Settings {
    /// A scan of `rows` by `columns` pixels with a tip support of 128 nm, oversampling 4, no
    /// distortion and seed 1.
    pub fn new(rows: usize, columns: usize, pitch: Pitch) -> Self {
        Self {
            rows,
            columns,
            pitch,
            support_nm: 128.0,
            oversampling: 4,
            distortion: Distortion::default(),
            seed: 1,
        }
    }

    fn checked(&self) -> Result<()> {
        self.pitch.checked()?;
        let fine_points = self.padded(self.rows, self.pitch.y)
            * self.padded(self.columns, self.pitch.x)
            * (self.oversampling * self.oversampling) as f64;
        let good_support = self.support_nm > 0.0;
        if self.oversampling == 0 || !good_support || fine_points > 3e8 {
            return Err(Error::new(
                ErrorKind::Setting,
                format!(
                    "a virtual scan of {} x {} pixels, oversampling {}, tip support {} nm",
                    self.rows, self.columns, self.oversampling, self.support_nm
                ),
            )
            .remedy("Give an oversampling of 1 or more, a positive support, and at most 3e8 fine grid points"));
        }
        self.distortion.checked()
    }

    fn padded(&self, count: usize, pitch: f64) -> f64 {
        count as f64 + 2.0 * (self.support_nm / 2.0 / pitch).ceil()
    }
}

/// A virtual scan with what it was made of.
#[derive(Debug, Clone)]
pub struct VirtualScan {
    /// What the instrument records: dilated, then distorted.
    pub scan: HeightMap,
    /// The dilated surface without any distortion.
    pub clean: HeightMap,
    /// The true surface at the pixel centres, without tilt or drift.
    pub truth: HeightMap,
}

/// Scans `surface` with `tip`.
///
/// `surface(x, y)` is the height in nm at a position in nm (pixel `[r, c]` has its centre at
/// `((c + 0.5) pitch.x, (r + 0.5) pitch.y)`; positions outside the scan are asked for too);
/// `tip(dx, dy) >= 0` is the height in nm of the tip's surface above its apex, infinite outside
/// the tip. [`crate::tip::model::Model::height`] serves, and so does any closure: a worn, skew or
/// double tip.
///
/// A feature narrower than the fine grid's step can be missed. Where the surface is NaN it touches
/// nothing. The same arguments give the same bytes for any number of threads.
///
/// Errors: kind `Setting` for settings that cannot be used, `Data` for an empty grid, `Cancelled`.
pub fn scan(
    surface: impl Fn(f64, f64) -> f64 + Sync,
    tip: impl Fn(f64, f64) -> f64 + Sync,
    settings: &Settings,
    progress: &Progress,
) -> Result<VirtualScan> {
    settings.checked()?;
    let (rows, columns, pitch) = (settings.rows, settings.columns, settings.pitch);
    let truth = HeightMap::from_fn(rows, columns, pitch, &surface)?;

    let fine = FineSurface::sample(&surface, settings, &progress.part(0.0, 0.3))?;
    let probe = FineTip::sample(&tip, settings);
    let dilating = progress.part(0.3, 1.0);
    let done = AtomicUsize::new(0);
    let lines: Vec<Vec<f32>> = (0..rows)
        .into_par_iter()
        .map(|row| {
            dilating.check()?;
            let line = (0..columns)
                .map(|column| {
                    let x = (column as f64 + 0.5) * pitch.x;
                    let y = (row as f64 + 0.5) * pitch.y;
                    let at = |[dx, dy]: [f64; 2]| surface(x + dx, y + dy) - tip(dx, dy);
                    fine.highest(&probe, row, column, at) as f32
                })
                .collect();
            dilating.report((done.fetch_add(1, Ordering::Relaxed) + 1) as f32 / rows as f32);
            Ok(line)
        })
        .collect::<Result<_>>()?;
    let clean = Array2::from_shape_fn((rows, columns), |(r, c)| lines[r][c]);
    let clean = HeightMap::new(clean, pitch)?.with_provenance(Provenance {
        scale_source: "virtual scan".to_owned(),
        steps: vec!["made as a virtual scan of a known surface with a known tip".to_owned()],
        ..Provenance::default()
    });
    let scan = settings.distortion.apply(&clean, settings.seed);
    Ok(VirtualScan { scan, clean, truth })
}

/// The surface on the fine grid, stored block by block: one block of `n x n` points per pixel,
/// the pixel's centre being point `[n / 2, n / 2]` of its block.
struct FineSurface {
    /// Blocks in the margin on each side, `[rows, columns]`.
    margin: [usize; 2],
    /// Blocks per row of blocks.
    columns: usize,
    n: usize,
    heights: Vec<f32>,
    /// Highest point of each block.
    peaks: Vec<f32>,
    /// Whether a block and those around it are all of one height.
    level: Vec<bool>,
    highest: f32,
}

impl FineSurface {
    fn sample(
        surface: &(impl Fn(f64, f64) -> f64 + Sync),
        settings: &Settings,
        progress: &Progress,
    ) -> Result<Self> {
        let n = settings.oversampling;
        let pitch = settings.pitch;
        let margin = margin(settings);
        let rows = settings.rows + 2 * margin[0];
        let columns = settings.columns + 2 * margin[1];
        let position = |block: usize, margin: usize, cell: usize, pitch: f64| {
            let centre = block as f64 - margin as f64 + 0.5;
            (centre + (cell as f64 - (n / 2) as f64) / n as f64) * pitch
        };
        let mut heights = vec![0.0f32; rows * columns * n * n];
        let done = AtomicUsize::new(0);
        heights
            .par_chunks_mut(columns * n * n)
            .enumerate()
            .try_for_each(|(r, line)| {
                progress.check()?;
                for (c, block) in line.chunks_mut(n * n).enumerate() {
                    for (cell, height) in block.iter_mut().enumerate() {
                        let y = position(r, margin[0], cell / n, pitch.y);
                        let x = position(c, margin[1], cell % n, pitch.x);
                        *height = surface(x, y) as f32;
                    }
                }
                progress.report((done.fetch_add(1, Ordering::Relaxed) + 1) as f32 / rows as f32);
                Ok(())
            })?;
        // `f32::max` passes over NaN.
        let peak = |block: &[f32]| block.iter().copied().fold(f32::NEG_INFINITY, f32::max);
        let peaks: Vec<f32> = heights.chunks(n * n).map(peak).collect();
        let highest = peak(&peaks);
        let even = |place: usize| {
            let block = &heights[place * n * n..(place + 1) * n * n];
            block.iter().all(|&z| z == peaks[place])
        };
        let even: Vec<bool> = (0..peaks.len()).map(even).collect();
        let level = (0..peaks.len())
            .map(|place| {
                let (r, c) = (place / columns, place % columns);
                let rows = r.saturating_sub(1)..(r + 2).min(rows);
                rows.flat_map(|i| (c.saturating_sub(1)..(c + 2).min(columns)).map(move |j| (i, j)))
                    .map(|(i, j)| i * columns + j)
                    .all(|other| even[other] && peaks[other] == peaks[place])
            })
            .collect();
        Ok(Self {
            margin,
            columns,
            n,
            heights,
            peaks,
            level,
            highest,
        })
    }

    /// Height of the dilated surface over pixel `[row, column]`; NaN where nothing touches.
    /// `at` is the surface over an offset less the tip's height there.
    fn highest(
        &self,
        probe: &FineTip,
        row: usize,
        column: usize,
        at: impl Fn([f64; 2]) -> f64,
    ) -> f64 {
        let Some((block, cell)) = self.contact(&probe.blocks, row, column) else {
            return f64::NAN;
        };
        let start = probe.blocks[block].offset(cell, self.n, probe.step);
        let refined = |offset, least| refine::highest(&at, offset, probe.step, probe.half, least);
        let mut best = refined(start, f64::NEG_INFINITY);
        // Another hill of the fine grid may rise above this one between its points.
        for (height, offset) in self.rivals(probe, [row, column], start, best) {
            if height + probe.gain > best {
                best = best.max(refined(offset, best - probe.gain / 2.0));
            }
        }
        best
    }

    /// Local maxima of the fine grid that could rise above `best` between its points, the highest
    /// first, each some steps away from the higher ones and from `contact`. A block tells its highest
    /// point only.
    fn rivals(
        &self,
        probe: &FineTip,
        pixel: [usize; 2],
        contact: [f64; 2],
        best: f64,
    ) -> Vec<(f64, [f64; 2])> {
        let n = self.n as isize;
        let least = (best - probe.gain) as f32;
        let mut rivals: Vec<(f64, [f64; 2])> = Vec::new();
        for block in &probe.blocks {
            if self.highest - block.least_depth <= least {
                break;
            }
            let place = self.place(pixel, block);
            // On a level piece of surface only the tip's own apices are summits.
            if self.peaks[place] - block.least_depth <= least || self.level[place] && !block.apex {
                continue;
            }
            let cells = self.n * self.n;
            let heights = &self.heights[place * cells..(place + 1) * cells];
            let (mut height, mut cell) = (least, usize::MAX);
            for (i, (&s, &depth)) in heights.iter().zip(&block.depths).enumerate() {
                if s - depth > height {
                    (height, cell) = (s - depth, i);
                }
            }
            if cell == usize::MAX {
                continue;
            }
            let row = block.rows * n + cell as isize / n;
            let column = block.columns * n + cell as isize % n;
            let beside = |[r, c]: &[isize; 2]| self.over(probe, pixel, row + r, column + c);
            // Strictly above those before it, so that a level place counts once.
            let summit = BEFORE.iter().all(|n| beside(n) < height)
                && AFTER.iter().all(|n| beside(n) <= height);
            if summit {
                let offset = block.offset(cell, self.n, probe.step);
                rivals.push((f64::from(height), offset));
            }
        }
        rivals.sort_by(|a, b| b.0.total_cmp(&a.0));
        let mut apart: Vec<(f64, [f64; 2])> = Vec::new();
        for rival in rivals {
            let near = |other: [f64; 2]| {
                (0..2).all(|i| (other[i] - rival.1[i]).abs() < APART * probe.step[i])
            };
            if apart.len() < RIVALS && !near(contact) && !apart.iter().any(|a| near(a.1)) {
                apart.push(rival);
            }
        }
        apart
    }

    /// Surface less tip at the fine point `[row, column]` of the tip's grid.
    fn over(&self, probe: &FineTip, pixel: [usize; 2], row: isize, column: isize) -> f32 {
        let n = self.n as isize;
        let (block_row, block_column) = (row.div_euclid(n), column.div_euclid(n));
        let Some(block) = probe.block(block_row, block_column) else {
            return f32::NEG_INFINITY;
        };
        let cell = (row.rem_euclid(n) * n + column.rem_euclid(n)) as usize;
        let cells = self.n * self.n;
        let height = self.heights[self.place(pixel, block) * cells + cell] - block.depths[cell];
        // NaN touches nothing.
        height.max(f32::NEG_INFINITY)
    }

    /// Number of the surface block under `block` of a tip over `pixel`.
    fn place(&self, pixel: [usize; 2], block: &TipBlock) -> usize {
        let r = (pixel[0] + self.margin[0]).wrapping_add_signed(block.rows);
        let c = (pixel[1] + self.margin[1]).wrapping_add_signed(block.columns);
        r * self.columns + c
    }

    /// The fine-grid contact of the tip over pixel `[row, column]`: index of the tip block and of
    /// the cell in it. Exact: a block is passed over only where its highest surface point on the
    /// tip's highest point would not beat what was found.
    fn contact(&self, blocks: &[TipBlock], row: usize, column: usize) -> Option<(usize, usize)> {
        let mut best = f32::NEG_INFINITY;
        let mut contact = None;
        for (index, block) in blocks.iter().enumerate() {
            // Blocks come by increasing depth: none of the rest can win.
            if self.highest - block.least_depth <= best {
                break;
            }
            let place = self.place([row, column], block);
            if self.peaks[place] - block.least_depth <= best {
                continue;
            }
            let cells = self.n * self.n;
            let heights = &self.heights[place * cells..(place + 1) * cells];
            for (cell, (&s, &depth)) in heights.iter().zip(&block.depths).enumerate() {
                if s - depth > best {
                    best = s - depth;
                    contact = Some((index, cell));
                }
            }
        }
        contact
    }
}

/// Pixels that half the tip support needs on each side, `[rows, columns]`.
fn margin(settings: &Settings) -> [usize; 2] {
    [settings.pitch.y, settings.pitch.x]
        .map(|pitch| (settings.support_nm / 2.0 / pitch).ceil() as usize)
}

/// The tip over one pixel's worth of offsets.
struct TipBlock {
    /// Offset from the apex in pixels.
    rows: isize,
    columns: isize,
    least_depth: f32,
    /// Whether one of its points is at least as high as those around it.
    apex: bool,
    /// Depth below the apex at each fine point, row-major, infinite outside the tip.
    depths: Vec<f32>,
}

impl TipBlock {
    /// Offset `[dx, dy]` from the apex of fine point `cell` of `n` by `n`, nm.
    fn offset(&self, cell: usize, n: usize, step: [f64; 2]) -> [f64; 2] {
        let along = |block: isize, cell: usize, step: f64| {
            (block * n as isize + cell as isize - (n / 2) as isize) as f64 * step
        };
        [
            along(self.columns, cell % n, step[0]),
            along(self.rows, cell / n, step[1]),
        ]
    }
}

/// Fine points before one in reading order, and after it.
const BEFORE: [[isize; 2]; 4] = [[-1, -1], [-1, 0], [-1, 1], [0, -1]];
const AFTER: [[isize; 2]; 4] = [[0, 1], [1, -1], [1, 0], [1, 1]];

/// Hills of the fine grid that are looked at beside the highest.
const RIVALS: usize = 4;
/// Fine steps by which they stand apart.
const APART: f64 = 3.5;

/// Steepest tip face that the gain between fine points allows for (5 degrees from the axis).
const STEEPEST: f64 = 12.0;

/// The tip on the fine grid.
struct FineTip {
    /// By increasing depth, nearest the apex first among equals.
    blocks: Vec<TipBlock>,
    /// Number in `blocks` by place; `None` outside the tip.
    places: Vec<Option<usize>>,
    margin: [isize; 2],
    /// Step of the fine grid along x and y, nm.
    step: [f64; 2],
    /// Half the support, nm.
    half: f64,
    /// What a step of the tip's steepest face, and one as steep of the surface, can add to a
    /// contact between fine points, nm.
    gain: f64,
}

impl FineTip {
    fn sample(tip: &impl Fn(f64, f64) -> f64, settings: &Settings) -> Self {
        let n = settings.oversampling;
        let half = settings.support_nm / 2.0 * (1.0 + 1e-12);
        let step = [settings.pitch.x, settings.pitch.y].map(|p| p / n as f64);
        let margin = margin(settings).map(|m| m as isize);
        let depth = |[dx, dy]: [f64; 2]| {
            let inside = dx.abs() <= half && dy.abs() <= half;
            let depth = if inside { tip(dx, dy) } else { f64::INFINITY };
            if depth.is_nan() { f64::INFINITY } else { depth }
        };
        let mut blocks = Vec::new();
        let mut gain = [0.0f64; 2];
        for rows in -margin[0]..=margin[0] {
            for columns in -margin[1]..=margin[1] {
                let mut block = TipBlock {
                    rows,
                    columns,
                    least_depth: f32::INFINITY,
                    apex: false,
                    depths: Vec::with_capacity(n * n),
                };
                for cell in 0..n * n {
                    let offset = block.offset(cell, n, step);
                    let here = depth(offset);
                    block.depths.push(here as f32);
                    block.least_depth = block.least_depth.min(here as f32);
                    let lower = |[r, c]: &[isize; 2]| {
                        let [dx, dy] = offset;
                        depth([dx + *c as f64 * step[0], dy + *r as f64 * step[1]]) >= here
                    };
                    block.apex |= here.is_finite() && BEFORE.iter().chain(&AFTER).all(lower);
                    for axis in 0..2 {
                        let mut beside = offset;
                        beside[axis] += step[axis];
                        let rise = (depth(beside) - here).abs();
                        if rise.is_finite() {
                            gain[axis] = gain[axis].max(rise.min(STEEPEST * step[axis]));
                        }
                    }
                }
                if block.least_depth < f32::INFINITY {
                    blocks.push(block);
                }
            }
        }
        blocks.sort_by(|a, b| {
            let distance = |t: &TipBlock| t.rows * t.rows + t.columns * t.columns;
            (a.least_depth.total_cmp(&b.least_depth)).then(distance(a).cmp(&distance(b)))
        });
        let width = (2 * margin[1] + 1) as usize;
        let mut places = vec![None; width * (2 * margin[0] + 1) as usize];
        for (number, block) in blocks.iter().enumerate() {
            let row = (block.rows + margin[0]) as usize;
            places[row * width + (block.columns + margin[1]) as usize] = Some(number);
        }
        Self {
            blocks,
            places,
            margin,
            step,
            half,
            gain: 1.5 * (gain[0] + gain[1]),
        }
    }

    /// The block at an offset in pixels from the apex; `None` outside the tip.
    fn block(&self, rows: isize, columns: isize) -> Option<&TipBlock> {
        if rows.abs() > self.margin[0] || columns.abs() > self.margin[1] {
            return None;
        }
        let width = 2 * self.margin[1] + 1;
        let place = (rows + self.margin[0]) * width + columns + self.margin[1];
        self.places[place as usize].map(|number| &self.blocks[number])
    }
}
