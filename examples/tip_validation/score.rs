//! How far an estimate is from the truth.

use crate::cells::Shape;
use ndarray::ArrayView2;
use truewidth::heightmap::Pitch;
use truewidth::tip::blind::Estimate;

/// Error of the tip along its normal over the exercised depth, the best lateral fit allowed, and
/// the shares of cells within the band: both edges, sharper edge, blunter edge.
pub struct Score {
    pub rms: f64,
    pub bias: f64,
    pub inside: f64,
    pub above_sharper: f64,
    pub below_blunter: f64,
    /// Share of the band's half-width that would have held 95 % of the cells.
    pub needed: f64,
}

pub fn score(e: &Estimate, truth: &Shape) -> Option<Score> {
    let fit = fit(e.tip.shape(), e.tip.pitch(), e.exercised_depth_nm?, truth);
    let place = fit.place;
    let (mut inside, mut above, mut below, mut n) = (0.0, 0.0, 0.0, 0.0f64);
    let mut shares = Vec::new();
    if let Some(band) = &e.band {
        for &(x, y, _, i, j) in &fit.cells {
            let p = -truth(x - place.0, y - place.1);
            let a = f64::from(band.sharper.shape()[[i, j]]) <= p + 1e-6;
            let b = f64::from(band.blunter.shape()[[i, j]]) >= p - 1e-6;
            inside += f64::from(u8::from(a && b));
            above += f64::from(u8::from(a));
            below += f64::from(u8::from(b));
            n += 1.0;
            let here = f64::from(e.tip.shape()[[i, j]]);
            let edge = match p < here {
                true => band.sharper.shape()[[i, j]],
                false => band.blunter.shape()[[i, j]],
            };
            let half = (f64::from(edge) - here).abs();
            if half > 0.0 {
                shares.push((p - here).abs() / half);
            }
        }
    }
    shares.sort_by(f64::total_cmp);
    Some(Score {
        rms: fit.rms,
        bias: fit.bias,
        inside: inside / n.max(1.0),
        above_sharper: above / n.max(1.0),
        below_blunter: below / n.max(1.0),
        needed: shares
            .get(shares.len() * 95 / 100)
            .copied()
            .unwrap_or(f64::NAN),
    })
}

/// The best lateral fit of a tip to the truth.
pub struct Fit {
    pub rms: f64,
    pub bias: f64,
    place: (f64, f64),
    /// x, y, depth, row, column of each cell that counts.
    cells: Vec<(f64, f64, f64, usize, usize)>,
}

/// The errors of `shape` along the normal where the truth is no deeper than `depth`.
pub fn fit(shape: ArrayView2<f32>, pitch: Pitch, depth: f64, truth: &Shape) -> Fit {
    let (cr, cc) = (shape.nrows() / 2, shape.ncols() / 2);
    let at = |i: usize, j: usize| {
        (
            (j as f64 - cc as f64) * pitch.x,
            (i as f64 - cr as f64) * pitch.y,
        )
    };
    let normal = |x: f64, y: f64| {
        let h = 0.05 * pitch.x;
        let gx = (truth(x + h, y) - truth(x - h, y)) / (2.0 * h);
        let gy = (truth(x, y + h) - truth(x, y - h)) / (2.0 * h);
        1.0 / (1.0 + gx * gx + gy * gy).sqrt()
    };
    let cells: Vec<(f64, f64, f64, usize, usize)> = shape
        .indexed_iter()
        .map(|((i, j), &p)| {
            let (x, y) = at(i, j);
            (x, y, -f64::from(p), i, j)
        })
        .filter(|c| truth(c.0, c.1) <= depth)
        .collect();
    let rms_at = |dx: f64, dy: f64| {
        let errors = cells
            .iter()
            .map(|&(x, y, t, _, _)| (t - truth(x - dx, y - dy)) * normal(x - dx, y - dy));
        let (s, q) = errors.fold((0.0, 0.0), |a, e| (a.0 + e, a.1 + e * e));
        (s / cells.len() as f64, (q / cells.len() as f64).sqrt())
    };
    let (mut best, mut place) = (rms_at(0.0, 0.0), (0.0, 0.0));
    let mut step = 0.25 * pitch.x;
    while step > 0.02 * pitch.x {
        let mut moved = false;
        for (i, j) in [(1.0, 0.0), (-1.0, 0.0), (0.0, 1.0), (0.0, -1.0)] {
            let tried = (place.0 + i * step, place.1 + j * step);
            let r = rms_at(tried.0, tried.1);
            if r.1 < best.1 {
                (best, place, moved) = (r, tried, true);
            }
        }
        if !moved {
            step /= 2.0;
        }
    }
    Fit {
        rms: best.1,
        bias: best.0,
        place,
        cells,
    }
}
