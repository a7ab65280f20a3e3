//! Flat rectangular tips: separable, a few comparisons a pixel whatever the size.
//!
//! Along the rows by doubling, across them by running maxima of blocks as long as the tip:
//! M. van Herk, Pattern Recognit. Lett. 13, 517 (1992), doi 10.1016/0167-8655(92)90069-C;
//! J. Gil, M. Werman, IEEE Trans. Pattern Anal. Mach. Intell. 15, 504 (1993) (from memory).

use super::field::{Load, larger};
use super::tip::Order;
use crate::error::Result;
use crate::progress::Progress;
use ndarray::ArrayView2;
use pulp::{Arch, Simd, WithSimd};
use rayon::prelude::*;

/// The depth of a tip whose every cell is the same, if `tip` is one and has a centre.
pub(super) fn flat_depth(tip: ArrayView2<f32>) -> Option<f32> {
    let depth = *tip.first()?;
    let centred = tip.nrows() % 2 == 1 && tip.ncols() % 2 == 1;
    (centred && depth.is_finite() && tip.iter().all(|&p| p == depth)).then_some(depth + 0.0)
}

/// Dilation or erosion by a flat tip of `size` cells at `depth` into `out`, as long as the map has
/// pixels. The map must not be empty.
///
/// Rounded addition is monotonic, so the maximum may be taken before the depth is added.
pub(super) fn extreme_into(
    arch: Arch,
    map: ArrayView2<f32>,
    size: (usize, usize),
    depth: f32,
    order: Order,
    out: &mut [f32],
    progress: &Progress,
) -> Result<()> {
    let (rows, cols) = map.dim();
    // A tip reaching past the opposite edge sees no more than one that just reaches it.
    let (half_r, half_c) = ((size.0 / 2).min(rows - 1), (size.1 / 2).min(cols - 1));
    let map = map.as_standard_layout();
    let from = map.as_slice().unwrap_or_default();
    let mut along = vec![0.0_f32; rows * cols];
    along
        .par_chunks_mut(cols)
        .zip(from.par_chunks(cols))
        .try_for_each_init(
            || vec![0.0_f32; cols + 2 * half_c],
            |line, (to, from)| {
                arch.dispatch(Along {
                    from,
                    to,
                    line,
                    order,
                });
                progress.check()
            },
        )?;
    progress.report(0.5);
    let height = 2 * half_r + 1;
    out.par_chunks_mut(height * cols)
        .enumerate()
        .try_for_each(|(block, to)| {
            arch.dispatch(Across {
                from: &along,
                cols,
                top: (block * height) as isize - half_r as isize,
                height,
                to,
                depth,
                order,
                progress,
            });
            progress.check()
        })?;
    progress.report(1.0);
    Ok(())
}

/// The running maximum along one row.
struct Along<'a> {
    from: &'a [f32],
    to: &'a mut [f32],
    /// The row with half a window of nothing on either side.
    line: &'a mut [f32],
    order: Order,
}

impl WithSimd for Along<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        let (line, cols) = (self.line, self.from.len());
        let half = (line.len() - cols) / 2;
        line.fill(f32::NEG_INFINITY);
        let load = Load {
            from: self.from,
            to: &mut line[half..half + cols],
            order: self.order,
        };
        load.with_simd(simd);
        let window = 2 * half + 1;
        let mut width = 1;
        while 2 * width <= window {
            // Each entry reads only itself and later ones: in place, left to right.
            for i in 0..line.len() - width {
                line[i] = larger(line[i], line[i + width]);
            }
            width *= 2;
        }
        let later = &line[window - width..];
        for ((to, &a), &b) in self.to.iter_mut().zip(line.iter()).zip(later) {
            *to = larger(a, b);
        }
    }
}

/// The running maximum across rows, for as many output rows as the window has.
struct Across<'a> {
    from: &'a [f32],
    cols: usize,
    /// The first row of the first output row's window; may lie before the map.
    top: isize,
    height: usize,
    to: &'a mut [f32],
    depth: f32,
    order: Order,
    progress: &'a Progress,
}

impl WithSimd for Across<'_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let (cols, height) = (self.cols, self.height);
        let row = |r: isize| -> Option<&[f32]> {
            let start = usize::try_from(r).ok()? * cols;
            self.from.get(start..start + cols)
        };
        // From the block's last row upwards: what each window holds of this block.
        let mut running = vec![f32::NEG_INFINITY; cols];
        for t in (0..height).rev() {
            if self.progress.is_cancelled() {
                return;
            }
            if let Some(from) = row(self.top + t as isize) {
                raise(&mut running, from);
            }
            if let Some(to) = self.to.get_mut(t * cols..(t + 1) * cols) {
                to.copy_from_slice(&running);
            }
        }
        // From the next block's first row downwards: what it holds of that one.
        running.fill(f32::NEG_INFINITY);
        for (t, to) in self.to.chunks_exact_mut(cols).enumerate() {
            if t > 0
                && let Some(from) = row(self.top + (height + t - 1) as isize)
            {
                raise(&mut running, from);
            }
            for (to, &value) in to.iter_mut().zip(&running) {
                let sum = larger(*to, value) + self.depth;
                *to = match self.order {
                    _ if sum == f32::NEG_INFINITY => f32::NAN,
                    Order::Max => sum,
                    // Not `-sum`: zero stays a plain zero.
                    Order::Min => 0.0 - sum,
                };
            }
        }
    }
}

#[inline(always)]
fn raise(running: &mut [f32], from: &[f32]) {
    for (to, &value) in running.iter_mut().zip(from) {
        *to = larger(*to, value);
    }
}
