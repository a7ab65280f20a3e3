//! Two scans of one place: how far the second lies from the first, and what height is left over.
//!
//! A whole-pixel search, then Gauss-Newton on the sum of squared differences (B. D. Lucas, T. Kanade,
//! Proc. 7th IJCAI, 674 (1981), from memory), with the gradient of both pictures together, so that
//! noise does not pull.

use super::Leveled;
use crate::Result;
use crate::progress::Progress;
use ndarray::{Array2, ArrayView2, Zip};

/// Along which axes the second scan may be shifted.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Freedom {
    /// Along the fast axis: trace and retrace of one line.
    Fast,
    /// Along both: a scan taken later.
    Both,
}

/// What two scans of one place differ by.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pair {
    /// How far things lie further along x and y in the second scan, nm; `None` along an axis that
    /// shows too little to tell (lines that run along it). 0 along an axis without freedom.
    pub shift_nm: [Option<f64>; 2],
    /// Root mean square height difference that is left beyond the noise, nm, off the walls.
    pub height_nm: f64,
}

/// Greatest shift looked for, pixels, and as a part of the map.
const FURTHEST: usize = 32;
/// The whole-pixel search looks at about so many pixels.
const LOOKED_AT: usize = 10_000;
/// Sums of squares up to this part of the least are alike.
const ALIKE: f64 = 1.2;
/// Doubt in a shift above which it is not told, pixels.
const DOUBT: f64 = 0.25;

/// Registers `second` on `first`, levelled maps of one size and pitch. Of a grating the shift is
/// taken as less than half a period.
///
/// `None` where the two are not alike: the shift lies at the end of what was looked for (a quarter
/// of the map, at most 32 pixels), or half of the first map's own variation is left over. Errors:
/// `Cancelled`.
pub fn pair(
    first: &Leveled,
    second: &Leveled,
    freedom: Freedom,
    progress: &Progress,
) -> Result<Option<Pair>> {
    let (a, b) = (first.map.heights(), second.map.heights());
    if a.dim() != b.dim() {
        return Ok(None);
    }
    let (rows, columns) = a.dim();
    let far = |n: usize| (n / 4).min(FURTHEST) as isize;
    let reach = match freedom {
        Freedom::Fast => [0, far(columns)],
        Freedom::Both => [far(rows), far(columns)],
    };
    let mut tried = Vec::new();
    for dr in -reach[0]..=reach[0] {
        progress.check()?;
        for dc in -reach[1]..=reach[1] {
            tried.push((coarse(a, b, [dr, dc]), [dr, dc]));
        }
    }
    let least = tried.iter().map(|t| t.0).fold(f64::INFINITY, f64::min);
    // Of shifts that fit alike (periods, along lines) the smallest.
    let alike = tried.iter().filter(|t| t.0 <= ALIKE * least);
    let Some(&best) = alike.min_by_key(|t| t.1[0].pow(2) + t.1[1].pow(2)) else {
        return Ok(None);
    };
    let at_the_end = (0..2).any(|k| reach[k] > 0 && best.1[k].abs() == reach[k]);
    // Height 0 is the base: what is left over counts against the first scan itself.
    let own = coarse_variance(a);
    if at_the_end || best.0 > 0.25 * own.max(f64::MIN_POSITIVE) {
        return Ok(None);
    }
    let noise = [first, second].map(|l| l.noise_nm.unwrap_or(0.0));
    let start = best.1.map(|d| d as f64);
    let (shift, told) = refine(a, b, start, freedom, noise);
    let pitch = first.map.pitch();
    let in_nm = |k: usize, pitch: f64| told[k].then_some(shift[k] * pitch);
    Ok(Some(Pair {
        shift_nm: [in_nm(1, pitch.x), in_nm(0, pitch.y)],
        height_nm: left_over(a, b, shift, noise),
    }))
}

/// Variance of the difference at a whole-pixel shift, on a part of the pixels.
fn coarse(a: ArrayView2<f32>, b: ArrayView2<f32>, [dr, dc]: [isize; 2]) -> f64 {
    let (rows, columns) = a.dim();
    let every = ((rows * columns / LOOKED_AT).max(1) as f64).sqrt() as usize;
    let (mut n, mut sum, mut squares) = (0.0, 0.0, 0.0);
    for r in (0..rows).step_by(every) {
        for c in (0..columns).step_by(every) {
            let (i, j) = (r.wrapping_add_signed(dr), c.wrapping_add_signed(dc));
            let Some(&other) = b.get((i, j)) else {
                continue;
            };
            let d = f64::from(other) - f64::from(a[(r, c)]);
            if d.is_finite() {
                n += 1.0;
                sum += d;
                squares += d * d;
            }
        }
    }
    (squares - sum * sum / n) / n
}

fn coarse_variance(a: ArrayView2<f32>) -> f64 {
    let (mut n, mut sum, mut squares) = (0.0, 0.0, 0.0);
    for z in a.iter().map(|z| f64::from(*z)).filter(|z| z.is_finite()) {
        n += 1.0;
        sum += z;
        squares += z * z;
    }
    (squares - sum * sum / n) / n
}

/// The shift `[rows, columns]`, and along which axes it is told.
fn refine(
    a: ArrayView2<f32>,
    b: ArrayView2<f32>,
    mut shift: [f64; 2],
    freedom: Freedom,
    noise: [f64; 2],
) -> ([f64; 2], [bool; 2]) {
    let mut told = [false; 2];
    for _ in 0..12 {
        let moved = moved(b, shift);
        let sums = Sums::of(a, moved.view());
        told = [0, 1].map(|k| {
            let free = k == 1 || freedom == Freedom::Both;
            free && sums.doubt(k, noise) < DOUBT
        });
        let step = sums.step(told);
        shift = [shift[0] + step[0], shift[1] + step[1]];
        if step.iter().all(|s| s.abs() < 1e-4) {
            break;
        }
    }
    let start_of_rows = freedom == Freedom::Fast;
    (shift, [told[0] || start_of_rows, told[1]])
}

/// `b` looked at `shift` further on, by linear interpolation along rows and columns.
fn moved(b: ArrayView2<f32>, shift: [f64; 2]) -> Array2<f64> {
    let at = |r: isize, c: isize| {
        let found = (usize::try_from(r).ok())
            .zip(usize::try_from(c).ok())
            .and_then(|at| b.get(at));
        found.map_or(f64::NAN, |z| f64::from(*z))
    };
    let whole = shift.map(f64::floor);
    let part = [shift[0] - whole[0], shift[1] - whole[1]];
    let along = |r: isize, c: isize| {
        // A weight of nothing must not let a void in.
        if part[1] == 0.0 {
            at(r, c)
        } else {
            at(r, c) * (1.0 - part[1]) + at(r, c + 1) * part[1]
        }
    };
    Array2::from_shape_fn(b.dim(), |(r, c)| {
        let (r, c) = (
            r as isize + whole[0] as isize,
            c as isize + whole[1] as isize,
        );
        if part[0] == 0.0 {
            along(r, c)
        } else {
            along(r, c) * (1.0 - part[0]) + along(r + 1, c) * part[0]
        }
    })
}

/// The normal equations of one step.
#[derive(Default)]
struct Sums {
    n: f64,
    /// Sums of the gradient's squares along rows and columns, and of its product.
    squares: [f64; 2],
    product: f64,
    /// Sums of gradient times difference.
    pull: [f64; 2],
    /// Sum of the difference and its square.
    difference: [f64; 2],
}

impl Sums {
    fn of(a: ArrayView2<f32>, b: ArrayView2<f64>) -> Self {
        let (rows, columns) = a.dim();
        let mut sums = Self::default();
        let d = |r: usize, c: usize| b[(r, c)] - f64::from(a[(r, c)]);
        let both = |r: usize, c: usize| 0.5 * (b[(r, c)] + f64::from(a[(r, c)]));
        let mut gradient = [0.0; 2];
        for r in 1..rows.saturating_sub(1) {
            for c in 1..columns.saturating_sub(1) {
                let g = [
                    0.5 * (both(r + 1, c) - both(r - 1, c)),
                    0.5 * (both(r, c + 1) - both(r, c - 1)),
                ];
                let d = d(r, c);
                if !(g[0] + g[1] + d).is_finite() {
                    continue;
                }
                sums.n += 1.0;
                for k in 0..2 {
                    sums.squares[k] += g[k] * g[k];
                    sums.pull[k] += g[k] * d;
                    gradient[k] += g[k];
                }
                sums.product += g[0] * g[1];
                sums.difference[0] += d;
                sums.difference[1] += d * d;
            }
        }
        // A height offset between the two is no shift.
        let mean = sums.difference[0] / sums.n.max(1.0);
        for (pull, gradient) in sums.pull.iter_mut().zip(gradient) {
            *pull -= gradient * mean;
        }
        sums
    }

    /// Standard uncertainty of the shift along an axis, pixels; infinite where the gradient is no
    /// more than that of noise.
    fn doubt(&self, k: usize, noise: [f64; 2]) -> f64 {
        let n = self.n.max(1.0);
        // Of the mean of both pictures, by central differences.
        let by_noise = (noise[0] * noise[0] + noise[1] * noise[1]) / 8.0;
        let signal = self.squares[k] - n * by_noise - 5.0 * by_noise * (3.0 * n).sqrt();
        if signal <= 0.0 {
            return f64::INFINITY;
        }
        let variance = self.difference[1] / n - (self.difference[0] / n).powi(2);
        (variance.max(0.0) / signal).sqrt()
    }

    /// The step along the axes that tell, pixels.
    fn step(&self, told: [bool; 2]) -> [f64; 2] {
        let [yy, xx] = self.squares;
        let determinant = yy * xx - self.product * self.product;
        // The second picture seen further on: its things move back.
        let step = match told {
            [true, true] if determinant > 1e-9 * yy * xx => [
                -(xx * self.pull[0] - self.product * self.pull[1]) / determinant,
                -(yy * self.pull[1] - self.product * self.pull[0]) / determinant,
            ],
            [true, false] => [-self.pull[0] / yy, 0.0],
            [_, true] => [0.0, -self.pull[1] / xx],
            _ => [0.0; 2],
        };
        step.map(|s| s.clamp(-1.0, 1.0))
    }
}

/// Root mean square difference beyond the noise, off the walls, where a remaining shift would count
/// as height.
fn left_over(a: ArrayView2<f32>, b: ArrayView2<f32>, shift: [f64; 2], noise: [f64; 2]) -> f64 {
    let b = moved(b, shift);
    // Linear interpolation averages noise.
    let kept: f64 = shift
        .iter()
        .map(|s| {
            let part = s - s.floor();
            (1.0 - part).powi(2) + part * part
        })
        .product();
    let range = a.iter().filter(|z| z.is_finite());
    let (low, high) = range.fold((f32::MAX, f32::MIN), |(l, h), &z| (l.min(z), h.max(z)));
    let level = 6.0 * noise[0] + 0.01 * f64::from(high - low);
    let mut flat = Array2::from_elem(a.dim(), true);
    for ((r, c), flat) in flat.indexed_iter_mut() {
        let here = f64::from(a[(r, c)]);
        let near = [(0, 1), (0, -1), (1, 0), (-1, 0)].map(|(i, j): (isize, isize)| {
            let at = (r.wrapping_add_signed(i), c.wrapping_add_signed(j));
            a.get(at).map_or(0.0, |z| (f64::from(*z) - here).abs())
        });
        *flat = near.iter().all(|d| *d <= level);
    }
    let (mut n, mut squares, mut sum) = (0.0, 0.0, 0.0);
    Zip::from(&a).and(&b).and(&flat).for_each(|a, b, flat| {
        let d = b - f64::from(*a);
        if *flat && d.is_finite() {
            n += 1.0;
            squares += d * d;
            sum += d;
        }
    });
    if n < 2.0 {
        return 0.0;
    }
    // A height offset of the whole map is in no dimension.
    let variance: f64 = squares / n - (sum / n) * (sum / n);
    (variance - noise[0] * noise[0] - kept * noise[1] * noise[1])
        .max(0.0)
        .sqrt()
}

#[cfg(test)]
mod tests {
    use super::super::{Method, Settings, level};
    use super::*;
    use crate::heightmap::{HeightMap, Pitch};
    use crate::leveling::virtual_scan::Gauss;

    /// Rounded bumps on a grid, or lines along y, shifted.
    fn scan(lines: bool, [dx, dy]: [f64; 2], taller: f64, noise: f64, seed: u64) -> Leveled {
        let mut gauss = Gauss::new(seed);
        let wave = |v: f64, period: f64| (std::f64::consts::TAU * v / period).cos().max(0.0);
        let pitch = Pitch { x: 2.0, y: 3.0 };
        let map = HeightMap::from_fn(80, 120, pitch, |x, y| {
            let (x, y) = (x - dx, y - dy);
            // Two periods along x, so that no other shift fits as well.
            let along_x = wave(x, 70.0) + 0.5 * wave(x, 190.0);
            let along_y = if lines { 1.0 } else { 0.3 + wave(y, 90.0) };
            10.0 * along_x * along_y * (1.0 + taller) + gauss.next(noise)
        });
        let settings = Settings {
            method: Method::None,
            ..Settings::default()
        };
        level(&map.unwrap(), &settings, &Progress::new()).unwrap()
    }

    fn paired(a: &Leveled, b: &Leveled, freedom: Freedom) -> Option<Pair> {
        pair(a, b, freedom, &Progress::new()).unwrap()
    }

    #[test]
    fn a_known_shift_is_found_between_the_pixels() {
        for noise in [0.0, 0.2] {
            for shift in [[0.0, 0.0], [5.3, 0.0], [-7.1, 0.0]] {
                let a = scan(true, [0.0; 2], 0.0, noise, 1);
                let b = scan(true, shift, 0.0, noise, 2);
                let found = paired(&a, &b, Freedom::Fast).unwrap();
                let x = found.shift_nm[0].unwrap();
                assert!((x - shift[0]).abs() < 0.05, "{shift:?} {noise}: {found:?}");
                assert_eq!(found.shift_nm[1], Some(0.0));
                assert!(found.height_nm < 0.06, "{found:?}");
            }
        }
    }

    #[test]
    fn both_axes_are_told_by_bumps_and_one_by_lines() {
        let noise = 0.2;
        let shift = [4.4, -6.7];
        let a = scan(false, [0.0; 2], 0.0, noise, 1);
        let found = paired(&a, &scan(false, shift, 0.0, noise, 2), Freedom::Both).unwrap();
        let [x, y] = found.shift_nm.map(Option::unwrap);
        assert!((x - 4.4).abs() < 0.1 && (y + 6.7).abs() < 0.1, "{found:?}");
        let a = scan(true, [0.0; 2], 0.0, noise, 1);
        let found = paired(&a, &scan(true, shift, 0.0, noise, 2), Freedom::Both).unwrap();
        assert!((found.shift_nm[0].unwrap() - 4.4).abs() < 0.1);
        assert_eq!(found.shift_nm[1], None);
    }

    #[test]
    fn a_height_that_differs_is_left_over_and_what_is_not_alike_is_refused() {
        let a = scan(false, [0.0; 2], 0.0, 0.1, 1);
        // Heights 10 % apart: the difference is a tenth of the map, whose heights vary by about 3 nm.
        let b = scan(false, [4.0, 0.0], 0.1, 0.1, 2);
        let found = paired(&a, &b, Freedom::Fast).unwrap();
        assert!((0.1..0.5).contains(&found.height_nm), "{found:?}");
        let flat = scan(false, [0.0; 2], -1.0, 0.1, 3);
        assert_eq!(paired(&a, &flat, Freedom::Both), None);
    }
}
