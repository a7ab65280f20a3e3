//! What an instrument adds to a scan.

use super::random::{normals, stream};
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::HeightMap;
use rand::Rng;

/// What the instrument adds, in this order: tilt, drift, row jumps, noise, quantisation.
/// Zero everywhere (the default) adds nothing.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Distortion {
    /// Standard deviation of white Gaussian noise, nm.
    pub noise_nm: f64,
    /// Slope of the sample along x and y, nm per nm.
    pub tilt: [f64; 2],
    /// Peak-to-valley of a smooth drift along the slow axis, nm.
    pub drift_nm: f64,
    /// Standard deviation of an independent Gaussian offset per row, nm.
    pub row_jitter_nm: f64,
    /// Height step of the converter, nm; 0 = none.
    pub quantum_nm: f64,
}

impl Distortion {
    /// Errors of kind `Setting` for negative or non-finite amounts.
    pub(super) fn checked(&self) -> Result<()> {
        let amounts = [
            self.noise_nm,
            self.drift_nm,
            self.row_jitter_nm,
            self.quantum_nm,
        ];
        let bad = amounts.iter().find(|a| !(**a >= 0.0 && a.is_finite()));
        let bad = bad.or(self.tilt.iter().find(|t| !t.is_finite()));
        match bad {
            Some(bad) => Err(Error::new(
                ErrorKind::Setting,
                format!("a virtual distortion of {bad}"),
            )
            .remedy("Give finite amounts, 0 or more (a tilt may be negative)")),
            None => Ok(()),
        }
    }

    /// The scan an instrument with this distortion records of `clean`. Each kind of distortion has
    /// its own random stream of `seed`, so that changing one leaves the others as they were.
    pub(super) fn apply(&self, clean: &HeightMap, seed: u64) -> HeightMap {
        let (rows, columns) = (clean.rows(), clean.columns());
        let pitch = clean.pitch();
        let noise = normals(&mut stream(seed, 1), rows * columns);
        let jumps = normals(&mut stream(seed, 2), rows);
        let drift = drift(seed, rows);
        let mut heights = clean.heights().to_owned();
        for ((r, c), height) in heights.indexed_iter_mut() {
            let mut z = f64::from(*height);
            z += self.tilt[0] * (c as f64 + 0.5) * pitch.x;
            z += self.tilt[1] * (r as f64 + 0.5) * pitch.y;
            z += self.drift_nm * drift[r] + self.row_jitter_nm * jumps[r];
            z += self.noise_nm * noise[r * columns + c];
            if self.quantum_nm > 0.0 {
                z = (z / self.quantum_nm).round() * self.quantum_nm;
            }
            *height = z as f32;
        }
        clean.with_heights(
            heights,
            "noise, tilt and drift of a virtual instrument added",
        )
    }
}

/// A smooth curve over the rows with peak-to-valley 1, starting at 0: a creep that dies out and
/// two slow waves of random size and phase. Zero for a single row.
fn drift(seed: u64, rows: usize) -> Vec<f64> {
    let mut random = stream(seed, 3);
    let creep: f64 = random.random_range(-1.0..1.0);
    let waves: Vec<(f64, f64)> = (0..2)
        .map(|_| (random.random_range(0.1..0.4), random.random_range(0.0..1.0)))
        .collect();
    let curve: Vec<f64> = (0..rows)
        .map(|r| {
            let t = r as f64 / rows.max(2) as f64;
            let wave = |(k, &(size, phase)): (usize, &(f64, f64))| {
                size * (std::f64::consts::TAU * (t * (k + 1) as f64 * 0.6 + phase)).sin()
            };
            creep * (1.0 - (-3.0 * t).exp()) + waves.iter().enumerate().map(wave).sum::<f64>()
        })
        .collect();
    let low = curve.iter().copied().fold(f64::INFINITY, f64::min);
    let high = curve.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let span = if high > low { high - low } else { 1.0 };
    curve.iter().map(|z| (z - curve[0]) / span).collect()
}
