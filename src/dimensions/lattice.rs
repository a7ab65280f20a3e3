//! Two-dimensional lattice: its two shortest vectors and the angle between them.
//!
//! The two shortest independent wave vectors that stand out of the windowed Fourier transform are
//! refined by the phase of their component in tiles of the region: a plane through the phases gives
//! the rest of the wave vector, its scatter the uncertainty. Offsets of whole rows are kept out.

use super::sections::{self, region_pixels};
use super::{Dimension, Input, Kind, Request, answer, fill_period};
use crate::error::Result;
use crate::heightmap::Pitch;
use crate::leveling::least_squares;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Component, Distribution};
use ndarray::{Array2, ArrayView2, s};
use std::f64::consts::TAU;

const ASSUMPTIONS: &str = "Identical, equidistant features on a two-dimensional lattice: the tip \
    widens all alike and leaves their distances. Wave vectors by Fourier transform, vectors as \
    their reciprocals, lengths along the surface's own plane, after ISO 11952 (from memory)";

/// Most points of the coarse transform along each side.
const COARSE: usize = 512;
/// Tiles along each side.
const TILES: std::ops::RangeInclusive<usize> = 2..=8;
/// Power of a component that stands out, as a share of the strongest.
const STANDS_OUT: f64 = 0.03;
/// The same of one that is used only to keep clear of row offsets.
const WEAKEST: f64 = 0.001;

type Vector = [f64; 2];

/// Measures vector a (the one nearest to x), vector b, the angle between them and what it lacks of
/// 90 degrees: four lines.
///
/// Errors of kind `Setting`: a region off the scan.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let pixels = region_pixels(input.scan, request)?;
    let view = sections::cut(input.scan, pixels);
    let pitch = input.scan.pitch();
    let mut lines = [
        ("lattice vector a", "nm"),
        ("lattice vector b", "nm"),
        ("angle between a and b", "deg"),
        ("non-orthogonality", "deg"),
    ]
    .map(|(quantity, unit)| answer(request, Kind::Lattice, quantity, unit, ASSUMPTIONS));
    let lattice = match Lattice::find(view, pitch, progress)? {
        Ok(lattice) => lattice,
        Err(reason) => {
            for line in &mut lines {
                line.flags.push(format!("not measured: {reason}"));
            }
            return Ok(lines.into());
        }
    };
    let corner = [pixels.column as f64 * pitch.x, pixels.row as f64 * pitch.y];
    let middle = [
        corner[0] + 0.5 * pixels.columns as f64 * pitch.x,
        corner[1] + 0.5 * pixels.rows as f64 * pitch.y,
    ];
    let [a, b] = lattice.vectors(&lattice.waves);
    let arrow = |v: Vector| [middle[0], middle[1], middle[0] + v[0], middle[1] + v[1]];
    for (i, line) in lines.iter_mut().enumerate() {
        if input.calibration.x == 0.0 || input.calibration.y == 0.0 {
            line.flags
                .push("no uncertainty of the axis calibration was given".to_owned());
        }
        if lattice.voids > 0 {
            line.flags
                .push(format!("{} void pixels inside the region", lattice.voids));
        }
        let steepest = input.slope[0].hypot(input.slope[1]);
        if steepest > 3e-3 {
            line.flags.push(format!(
                "lengths are taken along the plane, tilted by {:.2} degrees",
                steepest.atan().to_degrees()
            ));
        }
        line.marks = vec![arrow(a), arrow(b)];
        fill(line, input, &lattice, i);
    }
    Ok(lines.into())
}

fn fill(line: &mut Dimension, input: &Input, lattice: &Lattice, which: usize) {
    let figure = |waves: &[f64; 4], scale: Vector| {
        let [a, b] = lattice
            .vectors(waves)
            .map(|v| [v[0] * scale[0], v[1] * scale[1]]);
        figures(a, b, input.slope)[which]
    };
    let value = figure(&lattice.waves, [1.0; 2]);
    // Derivatives by small steps: the figures are smooth in all six.
    const STEP: f64 = 1e-6;
    let by_scale = |axis: usize| {
        let mut scale = [1.0; 2];
        scale[axis] += STEP;
        (figure(&lattice.waves, scale) - value) / STEP
    };
    let size = lattice.waves.iter().fold(0.0f64, |m, k| m.max(k.abs()));
    let by_wave = |i: usize| {
        let mut waves = lattice.waves;
        waves[i] += STEP * size;
        (figure(&waves, [1.0; 2]) - value) / (STEP * size)
    };
    let mut budget = Budget::new();
    for (axis, u, source) in [
        (0, input.calibration.x, "x calibration"),
        (1, input.calibration.y, "y calibration"),
    ] {
        budget.push(source, u, Distribution::Normal, by_scale(axis));
    }
    let mut index = Vec::new();
    for i in 0..4 {
        let (wave, axis) = (1 + i / 2, ["x", "y"][i % 2]);
        index.push(budget.add(Component {
            source: format!("wave vector {wave} along {axis}, scatter of the tiles"),
            u: lattice.u[i],
            distribution: Distribution::Normal,
            sensitivity: by_wave(i),
            degrees_of_freedom: Some(lattice.freedom),
        }));
    }
    budget.correlate(index[0], index[1], lattice.correlation[0]);
    budget.correlate(index[2], index[3], lattice.correlation[1]);
    fill_period(line, input, value, budget, Some("a lattice"));
}

/// Lengths of `a` and `b` on a plane of the given slopes, nm, the angle between them and 90 less
/// that, degrees.
fn figures(a: Vector, b: Vector, slope: Vector) -> [f64; 4] {
    let on_plane = |v: Vector| [v[0], v[1], v[0] * slope[0] + v[1] * slope[1]];
    let (a, b) = (on_plane(a), on_plane(b));
    let dot = |p: [f64; 3], q: [f64; 3]| p.iter().zip(q).map(|(p, q)| p * q).sum::<f64>();
    let (la, lb) = (dot(a, a).sqrt(), dot(b, b).sqrt());
    let angle = (dot(a, b) / (la * lb)).clamp(-1.0, 1.0).acos().to_degrees();
    [la, lb, angle, 90.0 - angle]
}

/// What was found.
struct Lattice {
    /// Two wave vectors, cycles per nm: x, y, x, y.
    waves: [f64; 4],
    /// Their standard uncertainties, and the correlation of x and y of each.
    u: [f64; 4],
    correlation: [f64; 2],
    freedom: f64,
    /// Integer combination of the reciprocals that gives vectors a and b.
    combination: [[f64; 2]; 2],
    voids: usize,
}

impl Lattice {
    fn find(
        view: ArrayView2<f32>,
        pitch: Pitch,
        progress: &Progress,
    ) -> Result<std::result::Result<Self, String>> {
        let known: Vec<f64> = view
            .iter()
            .filter(|z| z.is_finite())
            .map(|&z| f64::from(z))
            .collect();
        let voids = view.len() - known.len();
        if known.is_empty() || view.nrows() < 16 || view.ncols() < 16 {
            return Ok(Err(
                "the region is void or has fewer than 16 x 16 pixels".to_owned()
            ));
        }
        let mean = known.iter().sum::<f64>() / known.len() as f64;
        // Voids take the mean: they add nothing to the components.
        let values = view.mapv(|z| {
            if z.is_finite() {
                f64::from(z) - mean
            } else {
                0.0
            }
        });
        progress.check()?;
        let [first, second] = match peaks(&values, pitch) {
            Ok(peaks) => peaks,
            Err(reason) => return Ok(Err(reason)),
        };
        progress.check()?;
        let extent = [view.ncols() as f64 * pitch.x, view.nrows() as f64 * pitch.y];
        let shorter = length(first).min(length(second));
        // A tile holds four periods or more, so that the components do not leak into each other.
        let tiles = extent.map(|e| ((e * shorter / 4.0) as usize).min(*TILES.end()));
        if tiles.iter().any(|t| t < TILES.start()) {
            return Ok(Err(
                "the region holds fewer than eight cells along a side".to_owned()
            ));
        }
        let refined = [first, second].map(|wave| {
            let once = refine(&values, pitch, tiles, wave)?;
            refine(&values, pitch, tiles, once.wave)
        });
        let [Some(one), Some(two)] = refined else {
            return Ok(Err(
                "the phases of the tiles do not fit a lattice".to_owned()
            ));
        };
        let mut lattice = Self {
            waves: [one.wave[0], one.wave[1], two.wave[0], two.wave[1]],
            u: [one.u[0], one.u[1], two.u[0], two.u[1]],
            correlation: [one.correlation, two.correlation],
            freedom: (tiles[0] * tiles[1]) as f64 - 3.0,
            combination: [[1.0, 0.0], [0.0, 1.0]],
            voids,
        };
        lattice.freedom = lattice.freedom.max(1.0);
        lattice.choose();
        Ok(Ok(lattice))
    }

    /// The lattice vectors `[a, b]` for wave vectors: `a_i . k_j = delta_ij`, combined.
    fn vectors(&self, waves: &[f64; 4]) -> [Vector; 2] {
        let [kx, ky, qx, qy] = *waves;
        let determinant = kx * qy - ky * qx;
        let one = [qy / determinant, -qx / determinant];
        let two = [-ky / determinant, kx / determinant];
        self.combination
            .map(|[m, n]| [m * one[0] + n * two[0], m * one[1] + n * two[1]])
    }

    /// Sets the combination to the two shortest vectors (Gauss's reduction), a the one nearer to
    /// the x axis and pointing along it, b pointing along y.
    fn choose(&mut self) {
        for _ in 0..64 {
            let [a, b] = self.vectors(&self.waves);
            if length(a) > length(b) {
                self.combination.swap(0, 1);
                continue;
            }
            let times = ((a[0] * b[0] + a[1] * b[1]) / (a[0] * a[0] + a[1] * a[1])).round();
            if times == 0.0 {
                break;
            }
            let [first, second] = &mut self.combination;
            second[0] -= times * first[0];
            second[1] -= times * first[1];
        }
        let [a, b] = self.vectors(&self.waves);
        if a[0].abs() / length(a) < b[0].abs() / length(b) {
            self.combination.swap(0, 1);
        }
        for (i, vector) in self.vectors(&self.waves).into_iter().enumerate() {
            if vector[i] < 0.0 {
                self.combination[i] = self.combination[i].map(|c| -c);
            }
        }
        // A hexagonal lattice has three shortest vectors: of its angles 60 and 120 take 60.
        let [a, b] = self.vectors(&self.waves);
        if length([a[0] + b[0], a[1] + b[1]]) < 1.02 * length(b) {
            let [first, second] = &mut self.combination;
            second[0] += first[0];
            second[1] += first[1];
        }
    }
}

fn length(v: Vector) -> f64 {
    v[0].hypot(v[1])
}

fn hann(i: usize, n: usize) -> f64 {
    0.5 - 0.5 * (TAU * (i as f64 + 0.5) / n as f64).cos()
}

/// The two shortest independent wave vectors whose components stand out, cycles per nm, to about
/// half a bin.
fn peaks(values: &Array2<f64>, pitch: Pitch) -> std::result::Result<[Vector; 2], String> {
    let block = [values.nrows(), values.ncols()].map(|n| n.div_ceil(COARSE));
    let coarse = means(values, block);
    let (rows, columns) = coarse.dim();
    // Periods of four points and more: frequencies 0..=n/4 along x, -n/4..=n/4 along y.
    let (across, up) = (columns / 4, rows / 4);
    let turn = |n: usize| -> Vec<(f64, f64)> {
        (0..n)
            .map(|i| (TAU * i as f64 / n as f64).sin_cos())
            .collect()
    };
    let (turn_x, turn_y) = (turn(columns), turn(rows));
    let mut along = Array2::from_elem((rows, across + 1), (0.0, 0.0));
    for (r, row) in coarse.rows().into_iter().enumerate() {
        let window = hann(r, rows);
        let row: Vec<f64> = row
            .iter()
            .enumerate()
            .map(|(c, z)| z * window * hann(c, columns))
            .collect();
        for k in 0..=across {
            let mut sum = (0.0, 0.0);
            for (c, z) in row.iter().enumerate() {
                let (sin, cos) = turn_x[c * k % columns];
                sum.0 += z * cos;
                sum.1 -= z * sin;
            }
            along[[r, k]] = sum;
        }
    }
    let mut power = Array2::zeros((2 * up + 1, across + 1));
    for k in 0..=across {
        for l in 0..=2 * up {
            let turns = (l + rows - up) % rows;
            let mut sum = (0.0, 0.0);
            for r in 0..rows {
                let (sin, cos) = turn_y[r * turns % rows];
                let (re, im) = along[[r, k]];
                sum.0 += re * cos + im * sin;
                sum.1 += im * cos - re * sin;
            }
            // What a tilt or a bow leaves about zero is no lattice.
            let far = l.abs_diff(up).max(k);
            power[[l, k]] = if far < 3 {
                0.0
            } else {
                sum.0 * sum.0 + sum.1 * sum.1
            };
        }
    }
    let strongest = power.iter().copied().fold(0.0, f64::max);
    let typical = {
        let mut all: Vec<f64> = power.iter().copied().collect();
        super::statistics::median(&mut all).unwrap_or(0.0)
    };
    let step = [
        1.0 / (columns as f64 * pitch.x * block[1] as f64),
        1.0 / (rows as f64 * pitch.y * block[0] as f64),
    ];
    let mut found: Vec<Vector> = Vec::new();
    let mut all: Vec<(f64, Vector)> = Vec::new();
    for ((l, k), &p) in power.indexed_iter() {
        let top = |dl: isize, dk: isize| {
            let (l, k) = (l.checked_add_signed(dl), k.checked_add_signed(dk));
            match (l, k) {
                (Some(l), Some(k)) => power.get([l, k]).is_none_or(|&other| other <= p),
                _ => true,
            }
        };
        let highest = (-2..=2).all(|dl| (-2..=2).all(|dk| top(dl, dk)));
        // A component at kx = 0 shows twice, at +ky and -ky.
        let twice = k == 0 && l < up;
        if p >= WEAKEST * strongest && p > 100.0 * typical && highest && !twice {
            let wave = [k as f64 * step[0], (l as f64 - up as f64) * step[1]];
            all.push((p, wave));
            if p >= STANDS_OUT * strongest {
                found.push(wave);
            }
        }
    }
    all.sort_by(|a, b| b.0.total_cmp(&a.0));
    found.sort_by(|a, b| length(*a).total_cmp(&length(*b)));
    let none = || "no two-dimensional lattice stands out".to_owned();
    let first = *found.first().ok_or_else(none)?;
    let independent = |k: &&Vector| {
        let sine = (first[0] * k[1] - first[1] * k[0]) / (length(first) * length(**k));
        sine.abs() > 0.25
    };
    let second = *found.iter().find(independent).ok_or_else(|| {
        "the features repeat in one direction only: a grating, which kind pitch measures".to_owned()
    })?;
    Ok(clear_of_rows([first, second], &all, 3.0 * step[0]))
}

/// Offsets of whole rows, the scanner's or the levelling's, lie along the y axis of the transform
/// and pull at components near it. Where another wave vector spans the same cell with `pair` the
/// near one (`|kx| < near`) gives way to it. `all` holds power and wave vector, strongest first.
fn clear_of_rows(mut pair: [Vector; 2], all: &[(f64, Vector)], near: f64) -> [Vector; 2] {
    let cross = |p: Vector, q: Vector| (p[0] * q[1] - p[1] * q[0]).abs();
    let cell = cross(pair[0], pair[1]);
    for i in 0..2 {
        let other = pair[1 - i];
        if pair[i][0].abs() >= near || other[0].abs() < near {
            continue;
        }
        let same_cell =
            |k: &Vector| k[0].abs() >= near && (cross(other, *k) / cell - 1.0).abs() < 0.1;
        if let Some((_, k)) = all.iter().find(|(_, k)| same_cell(k)) {
            pair[i] = *k;
        }
    }
    pair
}

/// Means over blocks of rows by columns.
fn means(values: &Array2<f64>, block: [usize; 2]) -> Array2<f64> {
    let size = (values.nrows() / block[0], values.ncols() / block[1]);
    Array2::from_shape_fn(size, |(r, c)| {
        let part = s![
            r * block[0]..(r + 1) * block[0],
            c * block[1]..(c + 1) * block[1]
        ];
        values.slice(part).mean().unwrap_or(0.0)
    })
}

/// A refined wave vector.
struct Refined {
    wave: Vector,
    u: Vector,
    correlation: f64,
}

/// The plane through the phases of `wave`'s component in the tiles. `None` where it cannot be
/// fitted.
fn refine(values: &Array2<f64>, pitch: Pitch, tiles: [usize; 2], wave: Vector) -> Option<Refined> {
    let (rows, columns) = values.dim();
    let at = |index: f64, pitch: f64| (index + 0.5) * pitch;
    let mut phases = Vec::new();
    for j in 0..tiles[1] {
        for i in 0..tiles[0] {
            let r = j * rows / tiles[1]..(j + 1) * rows / tiles[1];
            let c = i * columns / tiles[0]..(i + 1) * columns / tiles[0];
            let (height, width) = (r.len(), c.len());
            let turn_x: Vec<(f64, f64)> = c
                .clone()
                .enumerate()
                .map(|(n, c)| {
                    let (sin, cos) = (TAU * wave[0] * at(c as f64, pitch.x)).sin_cos();
                    (sin * hann(n, width), cos * hann(n, width))
                })
                .collect();
            let mut sum = (0.0, 0.0);
            for (n, row) in r.clone().enumerate() {
                let mut line = (0.0, 0.0);
                for (z, (sin, cos)) in values.slice(s![row, c.clone()]).iter().zip(&turn_x) {
                    line.0 += z * cos;
                    line.1 -= z * sin;
                }
                let (sin, cos) = (TAU * wave[1] * at(row as f64, pitch.y)).sin_cos();
                let window = hann(n, height);
                sum.0 += window * (line.0 * cos + line.1 * sin);
                sum.1 += window * (line.1 * cos - line.0 * sin);
            }
            let centre = [
                at(c.start as f64 + (width as f64 - 1.0) / 2.0, pitch.x),
                at(r.start as f64 + (height as f64 - 1.0) / 2.0, pitch.y),
            ];
            phases.push((centre, sum.1.atan2(sum.0) / TAU));
        }
    }
    // Neighbouring tiles differ by less than half a turn: unwrap along the rows of tiles.
    for n in 1..phases.len() {
        let before = if n % tiles[0] == 0 {
            n - tiles[0]
        } else {
            n - 1
        };
        let apart = phases[n].1 - phases[before].1;
        phases[n].1 -= apart.round();
    }
    let turns: Vec<f64> = phases.iter().map(|p| p.1).collect();
    let middle = [columns as f64 * pitch.x / 2.0, rows as f64 * pitch.y / 2.0];
    let fit = least_squares::fit(3, &turns, None, |n, row| {
        let centre = phases[n].0;
        row.copy_from_slice(&[1.0, centre[0] - middle[0], centre[1] - middle[1]]);
    })
    .ok()?;
    let variance = fit.residual_sum / (fit.degrees_of_freedom.max(1)) as f64;
    let covariance = |i: usize, j: usize| variance * fit.inverse_normal[(i, j)];
    let u = [
        covariance(1, 1).max(0.0).sqrt(),
        covariance(2, 2).max(0.0).sqrt(),
    ];
    let product = u[0] * u[1];
    Some(Refined {
        wave: [wave[0] + fit.coefficients[1], wave[1] + fit.coefficients[2]],
        u,
        correlation: if product > 0.0 {
            covariance(1, 2) / product
        } else {
            0.0
        },
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::dimensions::Calibration;
    use crate::heightmap::HeightMap;

    fn measured(a: Vector, b: Vector, slope: Vector) -> Vec<Dimension> {
        // Bumps on the lattice as products of waves of the reciprocal vectors.
        let determinant = a[0] * b[1] - a[1] * b[0];
        let (k, q) = (
            [b[1] / determinant, -b[0] / determinant],
            [-a[1] / determinant, a[0] / determinant],
        );
        let map = HeightMap::from_fn(300, 260, Pitch { x: 2.0, y: 1.5 }, |x, y| {
            let wave = |k: Vector| 0.5 + 0.5 * (TAU * (k[0] * x + k[1] * y)).cos();
            5.0 * (wave(k) * wave(q)).powi(2)
        })
        .unwrap();
        let input = Input {
            scan: &map,
            noise_nm: Some(0.0),
            calibration: Calibration::default(),
            slope,
            corrected: None,
        };
        let request = Request::new("l", Kind::Lattice);
        measure(&input, &request, &Progress::new()).unwrap()
    }

    #[test]
    fn square_skew_and_hexagonal_lattices() {
        let hexagonal = 40.0 * 0.75f64.sqrt();
        for (a, b) in [
            ([37.3, 0.9], [-0.4, 41.2]),
            ([40.0, 0.0], [20.0, hexagonal]),
            ([30.0, 3.0], [4.0, 45.0]),
        ] {
            let lines = measured(a, b, [0.0; 2]);
            let values: Vec<f64> = lines.iter().map(|l| l.as_scanned.unwrap().value).collect();
            let expected = figures(a, b, [0.0; 2]);
            for (seen, expected) in values.iter().zip(expected) {
                assert!((seen - expected).abs() < 0.02, "{values:?} {expected:?}");
            }
        }
    }

    /// `pitch = apparent / cos(theta)`: 1 degree adds 1.52e-4 (computed independently).
    #[test]
    fn lengths_are_those_along_the_tilted_plane() {
        let flat = measured([40.0, 0.0], [0.0, 40.0], [0.0; 2]);
        let tilted = measured([40.0, 0.0], [0.0, 40.0], [1f64.to_radians().tan(), 0.0]);
        let ratio = |i: usize| {
            tilted[i].as_scanned.unwrap().value / flat[i].as_scanned.unwrap().value - 1.0
        };
        assert!((ratio(0) - 1.523e-4).abs() < 1e-6, "{}", ratio(0));
        assert!(ratio(1).abs() < 1e-6);
    }

    #[test]
    fn a_grating_and_a_flat_are_no_lattice() {
        let reason = |f: fn(f64, f64) -> f64| {
            let map = HeightMap::from_fn(128, 128, Pitch::square(1.0), f).unwrap();
            let found = Lattice::find(map.heights(), map.pitch(), &Progress::new()).unwrap();
            found.err().unwrap()
        };
        assert!(reason(|x, _| (TAU * x / 9.0).cos()).contains("grating"));
        assert!(reason(|_, _| 1.0).contains("no two-dimensional"));
    }
}
