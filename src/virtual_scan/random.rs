//! Seeded randomness: placements and correlated roughness.

use crate::error::{Error, ErrorKind, Result};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::StandardNormal;

/// An independent stream `number` of `seed`; the same on every machine.
pub(super) fn stream(seed: u64, number: u64) -> ChaCha8Rng {
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    random.set_stream(number);
    random
}

pub(super) fn normals(random: &mut ChaCha8Rng, count: usize) -> Vec<f64> {
    (0..count).map(|_| random.sample(StandardNormal)).collect()
}

/// Grid points per correlation length of a correlated field.
const POINTS_PER_LENGTH: f64 = 6.0;

/// Weights of a Gaussian that turns unit white noise into unit noise whose correlation falls as
/// `exp(-(d / length)^2)`, on a grid with [`POINTS_PER_LENGTH`] points per length.
fn kernel() -> Vec<f64> {
    // White noise through a Gaussian of width w has the correlation exp(-d^2 / 4 w^2): w = L / 2.
    let width = POINTS_PER_LENGTH / 2.0;
    let reach = (4.0 * width).ceil() as i32;
    let weights: Vec<f64> = (-reach..=reach)
        .map(|i| (-0.5 * (f64::from(i) / width).powi(2)).exp())
        .collect();
    let norm = weights.iter().map(|w| w * w).sum::<f64>().sqrt();
    weights.iter().map(|w| w / norm).collect()
}

/// Weights of the four grid points around a position for Catmull-Rom cubic interpolation;
/// `f` in 0..1 is the position between the middle two.
fn cubic(f: f64) -> [f64; 4] {
    [
        ((2.0 - f) * f - 1.0) * f / 2.0,
        ((3.0 * f - 5.0) * f * f + 2.0) / 2.0,
        ((4.0 - 3.0 * f) * f + 1.0) * f / 2.0,
        (f - 1.0) * f * f / 2.0,
    ]
}

/// First of four grid points around `position` and the fraction beyond the second, kept inside a
/// grid of `count >= 4` points: outside, the end values go on.
fn cell(position: f64, count: usize) -> (usize, f64) {
    let p = position.clamp(1.0, (count - 2) as f64);
    let first = (p.floor() as usize - 1).min(count - 4);
    (first, p - (first + 1) as f64)
}

/// A smooth random function of one coordinate: Gaussian heights, mean 0, correlation
/// `exp(-(d / length)^2)`.
#[derive(Debug, Clone, PartialEq)]
pub struct CorrelatedLine {
    from: f64,
    spacing: f64,
    values: Vec<f64>,
}

impl CorrelatedLine {
    /// Over `from..to` (nm; beyond, the end values go on) with standard deviation `sigma` and
    /// correlation length `length`, both nm.
    ///
    /// Errors of kind `Setting`: a length that is not positive, or a range of more than 1e6 of
    /// them.
    pub fn new(sigma: f64, length: f64, from: f64, to: f64, seed: u64) -> Result<Self> {
        let count = points(length, from, to)?;
        let kernel = kernel();
        let white = normals(&mut stream(seed, 11), count + kernel.len());
        let values = (0..count)
            .map(|i| sigma * dot(&kernel, &white[i..i + kernel.len()]))
            .collect();
        Ok(Self {
            from,
            spacing: length / POINTS_PER_LENGTH,
            values,
        })
    }

    /// The value at `position`, nm.
    pub fn at(&self, position: f64) -> f64 {
        let (first, f) = cell(
            (position - self.from) / self.spacing + 1.0,
            self.values.len(),
        );
        dot(&cubic(f), &self.values[first..first + 4])
    }
}

/// A smooth random surface: Gaussian heights, mean 0, correlation `exp(-(d / length)^2)`.
#[derive(Debug, Clone, PartialEq)]
pub struct CorrelatedMap {
    from: [f64; 2],
    spacing: f64,
    columns: usize,
    values: Vec<f64>,
}

impl CorrelatedMap {
    /// Over the rectangle `[left, top]` to `[right, bottom]` (nm; beyond, the edge values go on)
    /// with standard deviation `sigma` and correlation length `length`, both nm.
    ///
    /// Errors as [`CorrelatedLine::new`], and for more than 1e8 grid points.
    pub fn new(sigma: f64, length: f64, from: [f64; 2], to: [f64; 2], seed: u64) -> Result<Self> {
        let columns = points(length, from[0], to[0])?;
        let rows = points(length, from[1], to[1])?;
        if columns * rows > 100_000_000 {
            return Err(too_fine(length));
        }
        let kernel = kernel();
        let wide = columns + kernel.len();
        let white = normals(&mut stream(seed, 12), wide * (rows + kernel.len()));
        let along_x: Vec<Vec<f64>> = white
            .chunks(wide)
            .map(|line| {
                (0..columns)
                    .map(|c| dot(&kernel, &line[c..c + kernel.len()]))
                    .collect()
            })
            .collect();
        let mut values = Vec::with_capacity(rows * columns);
        for r in 0..rows {
            for c in 0..columns {
                let along_y = kernel
                    .iter()
                    .zip(&along_x[r..])
                    .map(|(k, line)| k * line[c]);
                values.push(sigma * along_y.sum::<f64>());
            }
        }
        Ok(Self {
            from,
            spacing: length / POINTS_PER_LENGTH,
            columns,
            values,
        })
    }

    /// The height at a position, nm.
    pub fn at(&self, x: f64, y: f64) -> f64 {
        let position = |p: f64, from: f64| (p - from) / self.spacing + 1.0;
        let rows = self.values.len() / self.columns;
        let (column, fx) = cell(position(x, self.from[0]), self.columns);
        let (row, fy) = cell(position(y, self.from[1]), rows);
        let (wx, wy) = (cubic(fx), cubic(fy));
        (0..4)
            .map(|i| {
                let start = (row + i) * self.columns + column;
                wy[i] * dot(&wx, &self.values[start..start + 4])
            })
            .sum()
    }
}

fn dot(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(a, b)| a * b).sum()
}

fn points(length: f64, from: f64, to: f64) -> Result<usize> {
    let count = ((to - from) / length * POINTS_PER_LENGTH).ceil() + 4.0;
    if length > 0.0 && count < 6e6 && count.is_finite() {
        Ok(count.max(4.0) as usize)
    } else {
        Err(too_fine(length))
    }
}

fn too_fine(length: f64) -> Error {
    Error::new(
        ErrorKind::Setting,
        format!("a correlation length of {length} nm"),
    )
    .remedy("Give a positive length that is not too small for the range it has to cover")
}

/// Random positions in the rectangle `from..to` (nm) for discs of the given radii, no two nearer
/// than `gap` edge to edge and none over the rectangle's edge; one position per radius, in order.
///
/// Errors of kind `Data` when a disc finds no place in 20000 tries.
pub fn scatter(
    radii: &[f64],
    gap: f64,
    from: [f64; 2],
    to: [f64; 2],
    seed: u64,
) -> Result<Vec<[f64; 2]>> {
    let mut random = stream(seed, 13);
    let mut placed: Vec<[f64; 2]> = Vec::with_capacity(radii.len());
    for (i, &radius) in radii.iter().enumerate() {
        let position = (0..20_000).find_map(|_| {
            let mut along = |axis: usize| {
                let (low, high) = (from[axis] + radius, to[axis] - radius);
                low + random.random::<f64>() * (high - low)
            };
            let p = [along(0), along(1)];
            let inside = (0..2).all(|a| to[a] - from[a] >= 2.0 * radius);
            let free = placed
                .iter()
                .zip(radii)
                .all(|(q, other)| (p[0] - q[0]).hypot(p[1] - q[1]) >= radius + other + gap);
            (inside && free).then_some(p)
        });
        placed.push(position.ok_or_else(|| {
            Error::new(
                ErrorKind::Data,
                format!("no room for feature {} of {}", i + 1, radii.len()),
            )
            .remedy("Ask for fewer, smaller or closer features")
        })?);
    }
    Ok(placed)
}
