//! Virtual scans whose truth is finer than the pixel: what a probe of known tip would record of a
//! known surface, for tests, demonstrations and validation.
//!
//! `I(x) = max over u of S(x + u) - t(u)` with `t(u) >= 0` the height of the tip's surface at the
//! offset `u` from its apex (the convention of [`crate::morphology`], with `p = -t`). Surface and
//! tip are functions of continuous positions. The maximum is searched on a grid `oversampling`
//! times finer than the pixel and then refined around its place, so that vertical walls stand
//! where they are and not at the nearest grid point.
//!
//! The fine grid is anchored on the pixel *centres*: every centre is a grid point whatever the
//! oversampling, odd or even. It reaches half the tip support beyond the scan, so that the border
//! pixels are as right as the others.

mod distortion;
mod random;
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
    let blocks = tip_blocks(&tip, settings);
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
                    match fine.contact(&blocks, row, column) {
                        Some((block, cell)) => {
                            refine(at, blocks[block].offset(cell, settings), settings) as f32
                        }
                        None => f32::NAN,
                    }
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

/// Climbs from the fine-grid contact `offset` to the continuous one nearby: looks at the eight
/// neighbours at half the fine step, takes the highest, halves the step, down to 1/64.
/// Returns the height; never below that of the start.
fn refine(at: impl Fn([f64; 2]) -> f64, mut offset: [f64; 2], settings: &Settings) -> f64 {
    let half = settings.support_nm / 2.0;
    let mut step = [settings.pitch.x, settings.pitch.y].map(|p| p / settings.oversampling as f64);
    let mut best = at(offset);
    for _ in 0..6 {
        step = step.map(|s| s / 2.0);
        let centre = offset;
        for (sx, sy) in [
            (-1.0, -1.0),
            (0.0, -1.0),
            (1.0, -1.0),
            (-1.0, 0.0),
            (1.0, 0.0),
            (-1.0, 1.0),
            (0.0, 1.0),
            (1.0, 1.0),
        ] {
            let tried = [centre[0] + sx * step[0], centre[1] + sy * step[1]];
            if tried.iter().any(|d| d.abs() > half) {
                continue;
            }
            let height = at(tried);
            if height > best {
                (best, offset) = (height, tried);
            }
        }
    }
    best
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
        Ok(Self {
            margin,
            columns,
            n,
            heights,
            peaks,
            highest,
        })
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
            let r = (row + self.margin[0]).wrapping_add_signed(block.rows);
            let c = (column + self.margin[1]).wrapping_add_signed(block.columns);
            let place = r * self.columns + c;
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
    /// Depth below the apex at each fine point, row-major, infinite outside the tip.
    depths: Vec<f32>,
}

impl TipBlock {
    /// Offset `[dx, dy]` from the apex of fine point `cell`, nm.
    fn offset(&self, cell: usize, settings: &Settings) -> [f64; 2] {
        block_offset(self.rows, self.columns, cell, settings)
    }
}

fn block_offset(rows: isize, columns: isize, cell: usize, settings: &Settings) -> [f64; 2] {
    let n = settings.oversampling;
    let along = |block: isize, cell: usize, pitch: f64| {
        (block as f64 + (cell as f64 - (n / 2) as f64) / n as f64) * pitch
    };
    [
        along(columns, cell % n, settings.pitch.x),
        along(rows, cell / n, settings.pitch.y),
    ]
}

/// The tip in blocks by increasing depth, nearest the apex first among equals.
fn tip_blocks(tip: &impl Fn(f64, f64) -> f64, settings: &Settings) -> Vec<TipBlock> {
    let n = settings.oversampling;
    let half = settings.support_nm / 2.0 * (1.0 + 1e-12);
    let [margin_rows, margin_columns] = margin(settings).map(|m| m as isize);
    let mut blocks = Vec::new();
    for rows in -margin_rows..=margin_rows {
        for columns in -margin_columns..=margin_columns {
            let depths: Vec<f32> = (0..n * n)
                .map(|cell| {
                    let [dx, dy] = block_offset(rows, columns, cell, settings);
                    let inside = dx.abs() <= half && dy.abs() <= half;
                    let depth = if inside {
                        tip(dx, dy) as f32
                    } else {
                        f32::INFINITY
                    };
                    if depth.is_nan() { f32::INFINITY } else { depth }
                })
                .collect();
            let least_depth = depths.iter().copied().fold(f32::INFINITY, f32::min);
            if least_depth < f32::INFINITY {
                blocks.push(TipBlock {
                    rows,
                    columns,
                    least_depth,
                    depths,
                });
            }
        }
    }
    blocks.sort_by(|a, b| {
        let distance = |t: &TipBlock| t.rows * t.rows + t.columns * t.columns;
        (a.least_depth.total_cmp(&b.least_depth)).then(distance(a).cmp(&distance(b)))
    });
    blocks
}
