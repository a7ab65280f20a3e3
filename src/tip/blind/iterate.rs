//! The published iteration: the bluntest tip consistent with the scan.
//!
//! J. S. Villarrubia, J. Res. NIST 102, 425 (1997), doi 10.6028/jres.102.030 (details from memory).
//! With `p <= 0` the tip, apex up: where the tip stood at `x` it touched some surface point
//! `x + d` at height `J(x) - p(d)`. Standing at `x + d - v` it could not sink below that point, so
//! `p(v) <= U(x + d - v) - J(x) + p(d)`. Which `d` touched is unknown: only the weakest constraint
//! over all possible `d` is certain.

use crate::error::Result;
use crate::morphology;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2};
use rayon::prelude::*;

/// What to iterate with; lengths in nm, half-widths in pixels.
pub(super) struct Input<'a> {
    /// Heights that constrain: where the tip stood.
    pub heights: ArrayView2<'a, f32>,
    /// Upper envelope: what the tip may not sink below. NaN constrains nothing.
    pub upper: ArrayView2<'a, f32>,
    /// Noise threshold.
    pub threshold: f32,
    /// Half-width of the tip grid, rows and columns.
    pub half: [usize; 2],
}

/// The bluntest tip and how it was found.
pub(super) struct Bluntest {
    /// Odd by odd, apex 0 at the centre, `<= 0`.
    pub shape: Array2<f32>,
    /// Scan pixels that could have constrained the tip.
    pub candidates: usize,
    /// Those set aside because a feature is higher than the window can hold.
    pub guarded: usize,
    /// Whether the fixed point was reached within the allowed passes.
    pub settled: bool,
}

/// Scan pixels handled against the same tip before it is updated.
const BATCH: usize = 64;
/// Pixels handled in one pass; most lose their residual through the first of them.
const PASS: usize = 1024;
const PASSES: usize = 14;
/// Tip cells compared in all; plateaus could ask for far more and tell no more.
const MOST_WORK: usize = 3_000_000_000;

/// Iterates from the flat tip to the fixed point.
///
/// Only pixels at least the half-width from the border constrain, so that nothing unseen is
/// needed. Deterministic for any number of threads. Errors: `Cancelled`.
pub(super) fn bluntest(input: &Input, progress: &Progress) -> Result<Bluntest> {
    let [hr, hc] = input.half;
    let mut tip = Array2::<f32>::zeros((2 * hr + 1, 2 * hc + 1));
    let padded = Padded::new(input.upper, input.half);
    let ring = ring_maximum(input.upper, input.half);
    let (rows, columns) = input.heights.dim();
    let range = input.heights.iter().filter(|z| z.is_finite());
    let (low, high) = range.fold((f32::INFINITY, f32::NEG_INFINITY), |(l, h), &z| {
        (l.min(z), h.max(z))
    });
    // What f32 cannot tell apart is no violation.
    let eps = 4.0 * f32::EPSILON * (high - low).max(low.abs()).max(high.abs());
    let inner = |r: usize, c: usize| {
        r >= hr && r + hr < rows && c >= hc && c + hc < columns && !input.heights[(r, c)].is_nan()
    };
    let mut found = Bluntest {
        shape: tip.clone(),
        candidates: 0,
        guarded: 0,
        settled: false,
    };
    let mut spent = 0;
    for pass in 0..PASSES {
        progress.check()?;
        let done = pass as f32 / PASSES as f32;
        progress.report(done);
        let explained = if pass == 0 {
            None
        } else {
            let eroded = morphology::erode(input.upper, tip.view(), &progress.part(done, done))?;
            Some(morphology::contacts(
                eroded.view(),
                tip.view(),
                &progress.part(done, done),
            )?)
        };
        let rim = rim_depth(&tip);
        let mut work: Vec<(f32, usize, usize)> = Vec::new();
        let (mut candidates, mut guarded) = (0, 0);
        for ((r, c), &z) in input.heights.indexed_iter() {
            if !inner(r, c) {
                continue;
            }
            let residual = match &explained {
                None if is_summit(input.heights, r, c) => f32::INFINITY,
                None => continue,
                Some(o) => z - o.heights[(r, c)],
            };
            if residual > input.threshold + eps {
                candidates += 1;
                // A feature in the ring beyond the window, higher than the tip's rim reaches, may
                // be what the tip touched here.
                if ring[(r, c)] > z + rim + input.threshold {
                    guarded += 1;
                } else {
                    work.push((residual, r, c));
                }
            }
        }
        (found.candidates, found.guarded) = (candidates, guarded);
        if work.is_empty() {
            found.settled = true;
            break;
        }
        work.sort_by(|a, b| b.0.total_cmp(&a.0).then((a.1, a.2).cmp(&(b.1, b.2))));
        let work = spread(&work, rows, columns);
        let mut lowered = 0.0f32;
        for batch in work.chunks(BATCH) {
            progress.check()?;
            if spent > MOST_WORK {
                break;
            }
            let start = |r: usize, c: usize| match &explained {
                Some(o) if o.offsets[(r, c)][0] != i16::MIN => o.offsets[(r, c)],
                _ => [0, 0],
            };
            let limits: Vec<(Option<Array2<f32>>, usize)> = batch
                .par_iter()
                .map(|&(r, c)| constrain(input, &padded, &tip, (r, c), start(r, c), eps))
                .collect();
            for (limit, work) in limits {
                spent += work;
                let Some(limit) = limit else { continue };
                tip.zip_mut_with(&limit, |p, &l| {
                    if l < *p {
                        lowered = lowered.max(*p - l);
                        *p = l;
                    }
                });
            }
            tip[(hr, hc)] = 0.0;
        }
        if spent > MOST_WORK {
            break;
        }
        if pass > 0 && lowered <= eps {
            found.settled = true;
            break;
        }
    }
    found.shape = tip;
    Ok(found)
}

/// The weakest constraint that pixel `x` puts on the tip, plus the threshold, `None` where it does
/// not lower any cell; and the number of tip cells compared.
fn constrain(
    input: &Input,
    upper: &Padded,
    tip: &Array2<f32>,
    x: (usize, usize),
    start: [i16; 2],
    eps: f32,
) -> (Option<Array2<f32>>, usize) {
    let [hr, hc] = input.half;
    let (nr, nc) = tip.dim();
    let z = input.heights[x];
    // Flipped like the window it is compared with: cell (i, j) is v = (hr - i, hc - j).
    let mut flipped: Vec<f32> = tip.iter().copied().collect();
    flipped.reverse();
    let mut limit = vec![f32::NEG_INFINITY; nr * nc];
    let mut live: Vec<usize> = (0..nr).collect();
    let mut raise = |i: usize, j: usize, live: &mut Vec<usize>| -> usize {
        let compared = live.len() * nc;
        let shift = tip[(i, j)] - z;
        live.retain(|&row| {
            let from = upper.row(x.0 + i + row - hr, x.1 + j - hc, nc);
            let to = &mut limit[row * nc..(row + 1) * nc];
            let old = &flipped[row * nc..(row + 1) * nc];
            let mut lowers = false;
            for ((l, &u), &p) in to.iter_mut().zip(from).zip(old) {
                *l = l.max(u + shift);
                lowers |= *l + input.threshold + eps < p;
            }
            lowers
        });
        compared
    };
    let (si, sj) = (
        (start[0] as isize + hr as isize) as usize,
        (start[1] as isize + hc as isize) as usize,
    );
    let mut work = raise(si, sj, &mut live);
    for i in 0..nr {
        for j in 0..nc {
            if live.is_empty() {
                return (None, work);
            }
            // Feasible: the tip, standing at x, can have touched x + d.
            let u = upper.at(x.0 + i, x.1 + j);
            if (i, j) != (si, sj) && z - tip[(i, j)] <= u + input.threshold {
                work += raise(i, j, &mut live);
            }
        }
    }
    let mut result = Array2::from_elem((nr, nc), f32::INFINITY);
    for &row in &live {
        for j in 0..nc {
            result[(nr - 1 - row, nc - 1 - j)] = limit[row * nc + j] + input.threshold;
        }
    }
    (Some(result), work)
}

/// The envelope with a margin in which nothing constrains (`+inf`, as for voids).
struct Padded {
    heights: Array2<f32>,
}

impl Padded {
    fn new(upper: ArrayView2<f32>, [hr, hc]: [usize; 2]) -> Self {
        let (rows, columns) = upper.dim();
        let mut heights = Array2::from_elem((rows + 2 * hr, columns + 2 * hc), f32::INFINITY);
        heights
            .slice_mut(ndarray::s![hr..hr + rows, hc..hc + columns])
            .assign(&upper.mapv(|u| if u.is_nan() { f32::INFINITY } else { u }));
        Self { heights }
    }

    /// `n` cells of a padded row.
    fn row(&self, row: usize, column: usize, n: usize) -> &[f32] {
        let width = self.heights.ncols();
        let start = row * width + column;
        self.heights
            .as_slice()
            .map_or(&[], |s| &s[start..start + n])
    }

    fn at(&self, row: usize, column: usize) -> f32 {
        self.heights[(row, column)]
    }
}

/// Whether the pixel is the highest of its 5 x 5 neighbourhood.
fn is_summit(map: ArrayView2<f32>, r: usize, c: usize) -> bool {
    let (rows, columns) = map.dim();
    let z = map[(r, c)];
    (r.saturating_sub(2)..(r + 3).min(rows))
        .all(|i| (c.saturating_sub(2)..(c + 3).min(columns)).all(|j| !(map[(i, j)] > z)))
}

/// The pixels in the given order, none next to another, at most [`PASS`].
fn spread(work: &[(f32, usize, usize)], rows: usize, columns: usize) -> Vec<(usize, usize)> {
    let mut taken = Array2::from_elem((rows, columns), false);
    let mut chosen = Vec::new();
    for &(_, r, c) in work {
        let mut near = (r.saturating_sub(1)..(r + 2).min(rows))
            .flat_map(|i| (c.saturating_sub(1)..(c + 2).min(columns)).map(move |j| (i, j)));
        if !near.any(|at| taken[at]) {
            taken[(r, c)] = true;
            chosen.push((r, c));
            if chosen.len() == PASS {
                break;
            }
        }
    }
    chosen
}

/// Depth of the tip's rim where it is shallowest: what lies beyond the window is deeper.
fn rim_depth(tip: &Array2<f32>) -> f32 {
    let (rows, columns) = tip.dim();
    tip.indexed_iter()
        .filter(|((r, c), _)| *r == 0 || *c == 0 || r + 1 == rows || c + 1 == columns)
        .map(|(_, p)| -p)
        .fold(f32::INFINITY, f32::min)
}

/// Highest envelope over the window of twice the half-width without the window itself.
fn ring_maximum(upper: ArrayView2<f32>, [hr, hc]: [usize; 2]) -> Array2<f32> {
    let (hr, hc) = (hr as isize, hc as isize);
    let bar = |rows: [isize; 2], columns: [isize; 2]| {
        let tall = sliding_maximum(upper, rows, true);
        sliding_maximum(tall.view(), columns, false)
    };
    let wide = [-2 * hc, 2 * hc];
    let mut ring = bar([-2 * hr, -hr - 1], wide);
    for other in [
        bar([hr + 1, 2 * hr], wide),
        bar([-hr, hr], [-2 * hc, -hc - 1]),
        bar([-hr, hr], [hc + 1, 2 * hc]),
    ] {
        ring.zip_mut_with(&other, |a, &b| *a = a.max(b));
    }
    ring
}

/// `out[x] = max of map over [x + first, x + last]` along one axis, by running maxima of blocks
/// (M. van Herk, Pattern Recognit. Lett. 13, 517 (1992); from memory); `-inf` where nothing lies
/// there.
fn sliding_maximum(
    map: ArrayView2<f32>,
    [first, last]: [isize; 2],
    along_rows: bool,
) -> Array2<f32> {
    let view = if along_rows { map.reversed_axes() } else { map };
    let mut out = Array2::from_elem(view.dim(), f32::NEG_INFINITY);
    if last < first {
        return if along_rows { out.reversed_axes() } else { out };
    }
    let n = view.ncols();
    let width = (last - first + 1) as usize;
    let pad = first.unsigned_abs().max(last.unsigned_abs());
    let total = (n + 2 * pad).div_ceil(width) * width;
    let mut line = vec![f32::NEG_INFINITY; total];
    let (mut ahead, mut behind) = (line.clone(), line.clone());
    for (from, mut to) in view.outer_iter().zip(out.outer_iter_mut()) {
        for (l, &z) in line[pad..].iter_mut().zip(from) {
            *l = if z.is_nan() { f32::NEG_INFINITY } else { z };
        }
        for i in 0..total {
            ahead[i] = if i % width == 0 {
                line[i]
            } else {
                line[i].max(ahead[i - 1])
            };
            let k = total - 1 - i;
            let at_end = k % width == width - 1;
            behind[k] = if at_end {
                line[k]
            } else {
                line[k].max(behind[k + 1])
            };
        }
        for (x, t) in to.iter_mut().enumerate() {
            let from = ((x + pad) as isize + first) as usize;
            *t = behind[from].max(ahead[from + width - 1]);
        }
    }
    if along_rows {
        out.reversed_axes().as_standard_layout().into_owned()
    } else {
        out
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::morphology::{dilate, open};

    fn run(scan: &Array2<f32>, half: usize, threshold: f32) -> Bluntest {
        let input = Input {
            heights: scan.view(),
            upper: scan.view(),
            threshold,
            half: [half, half],
        };
        bluntest(&input, &Progress::new()).unwrap()
    }

    /// A tip without any symmetry.
    fn skew(half: usize) -> Array2<f32> {
        let n = 2 * half + 1;
        Array2::from_shape_fn((n, n), |(i, j)| {
            let (y, x) = (i as f32 - half as f32, j as f32 - half as f32);
            let side = if x > 0.0 { 0.9 * x } else { -0.4 * x };
            -(side + 0.05 * x * x + if y > 0.0 { 1.3 * y } else { -0.6 * y })
        })
    }

    fn surface(spikes: &[(usize, usize)], height: f32) -> Array2<f32> {
        let mut map = Array2::zeros((40, 44));
        for &s in spikes {
            map[s] = height;
        }
        map
    }

    /// Villarrubia 1997: one-pixel spikes taller than the tip give back the tip exactly.
    #[test]
    fn tall_spikes_give_back_a_skew_tip() {
        let tip = skew(5);
        let spikes = surface(&[(12, 13), (25, 30)], 30.0);
        let scan = dilate(spikes.view(), tip.view(), &Progress::new()).unwrap();
        let found = run(&scan, 5, 0.0);
        assert!(found.settled);
        for (a, b) in found.shape.iter().zip(&tip) {
            assert!((a - b).abs() < 1e-4, "{a} {b}");
        }
    }

    /// Villarrubia 1997: the estimate is never sharper than the tip, and it explains the scan.
    #[test]
    fn the_bound_encloses_the_tip_and_opens_the_scan_to_itself() {
        let tip = skew(4);
        let mut state = 7u64;
        let rough = Array2::from_shape_fn((40, 44), |_| {
            state = state
                .wrapping_mul(6364136223846793005)
                .wrapping_add(1442695040888963407);
            ((state >> 40) as f32 / (1u64 << 24) as f32).powi(8) * 12.0
        });
        let scan = dilate(rough.view(), tip.view(), &Progress::new()).unwrap();
        let found = run(&scan, 4, 0.0);
        for (a, b) in found.shape.iter().zip(&tip) {
            assert!(*a >= b - 1e-4, "sharper: {a} {b}");
        }
        let opened = open(scan.view(), found.shape.view(), &Progress::new()).unwrap();
        for r in 4..36 {
            for c in 4..40 {
                assert!((opened[(r, c)] - scan[(r, c)]).abs() < 1e-3 || found.guarded > 0);
            }
        }
        let blunter = run(&scan, 4, 0.5);
        assert!(blunter.shape.iter().sum::<f32>() > found.shape.iter().sum::<f32>());
    }

    #[test]
    fn flat_void_and_tiny_maps_leave_the_flat_tip() {
        for scan in [
            Array2::zeros((20, 20)),
            Array2::from_elem((20, 20), f32::NAN),
            Array2::zeros((3, 3)),
            Array2::zeros((1, 30)),
        ] {
            assert!(run(&scan, 4, 0.0).shape.iter().all(|&p| p == 0.0));
        }
    }

    #[test]
    fn ring_maximum_agrees_with_the_plain_one() {
        let map = Array2::from_shape_fn((23, 19), |(r, c)| ((r * 37 + c * 91) % 101) as f32);
        let half = [3usize, 2];
        let fast = ring_maximum(map.view(), half);
        for ((r, c), &f) in fast.indexed_iter() {
            let mut plain = f32::NEG_INFINITY;
            for ((i, j), &z) in map.indexed_iter() {
                let (dr, dc) = (i.abs_diff(r), j.abs_diff(c));
                let inside = dr <= half[0] && dc <= half[1];
                if !inside && dr <= 2 * half[0] && dc <= 2 * half[1] {
                    plain = plain.max(z);
                }
            }
            assert_eq!(f, plain, "{r} {c}");
        }
    }
}
