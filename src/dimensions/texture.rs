//! Areal texture parameters of a region, ISO 25178-2, unfiltered (S-F surface as levelled).

use super::sections::{self, region_pixels};
use super::{CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer};
use crate::error::Result;
use crate::heightmap::Pitch;
use crate::morphology::certainty::NEVER;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Distribution};
use ndarray::{ArrayView2, s};

const ASSUMPTIONS: &str = "Heights about their mean in the region, no areal filter beyond the \
    levelling. ISO 25178-2 (from memory)";

/// The parameters in the order of the result lines.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub(super) struct Texture {
    /// Arithmetic mean height, nm.
    pub sa: f64,
    /// Root mean square height, nm.
    pub sq: f64,
    /// Skewness.
    pub ssk: f64,
    /// Kurtosis.
    pub sku: f64,
    /// Highest peak above the mean, nm.
    pub sp: f64,
    /// Deepest valley below the mean, nm.
    pub sv: f64,
    /// Sp + Sv, nm.
    pub sz: f64,
    /// Developed interfacial area ratio.
    pub sdr: f64,
}

impl Texture {
    /// Over the finite heights; `None` without any. Skewness and kurtosis of a perfect flat are
    /// NaN, Sdr without a complete 2 x 2 cell too.
    pub fn of(heights: ArrayView2<f32>, pitch: Pitch) -> Option<Self> {
        let values = || {
            heights
                .iter()
                .map(|&z| f64::from(z))
                .filter(|z| z.is_finite())
        };
        let n = values().count() as f64;
        if n == 0.0 {
            return None;
        }
        let mean = values().sum::<f64>() / n;
        let moment = |p: i32| values().map(|z| (z - mean).powi(p)).sum::<f64>() / n;
        let sq = moment(2).sqrt();
        let (low, high) = values().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), z| {
            (l.min(z), h.max(z))
        });
        Some(Self {
            sa: values().map(|z| (z - mean).abs()).sum::<f64>() / n,
            sq,
            ssk: moment(3) / sq.powi(3),
            sku: moment(4) / sq.powi(4),
            sp: high - mean,
            sv: mean - low,
            sz: high - low,
            sdr: developed_area(heights, pitch),
        })
    }

    fn lines(&self) -> [(&'static str, &'static str, f64); 8] {
        [
            ("Sa", "nm", self.sa),
            ("Sq", "nm", self.sq),
            ("Ssk", "", self.ssk),
            ("Sku", "", self.sku),
            ("Sp", "nm", self.sp),
            ("Sv", "nm", self.sv),
            ("Sz", "nm", self.sz),
            ("Sdr", "", self.sdr),
        ]
    }
}

/// Mean over complete 2 x 2 cells of `sqrt(1 + gx^2 + gy^2) - 1`, averaged over the cell's four
/// corner triangles.
fn developed_area(heights: ArrayView2<f32>, pitch: Pitch) -> f64 {
    let (rows, columns) = heights.dim();
    let (mut sum, mut cells) = (0.0, 0usize);
    for r in 1..rows {
        for c in 1..columns {
            let z = |dr: usize, dc: usize| f64::from(heights[[r - dr, c - dc]]);
            let (top, bottom) = ((z(1, 0) - z(1, 1)) / pitch.x, (z(0, 0) - z(0, 1)) / pitch.x);
            let (left, right) = ((z(0, 1) - z(1, 1)) / pitch.y, (z(0, 0) - z(1, 0)) / pitch.y);
            let area = |gx: f64, gy: f64| (1.0 + gx * gx + gy * gy).sqrt() - 1.0;
            let mean =
                (area(top, left) + area(top, right) + area(bottom, left) + area(bottom, right))
                    / 4.0;
            if mean.is_finite() {
                sum += mean;
                cells += 1;
            }
        }
    }
    sum / cells as f64
}

/// Measures the eight parameters, one line each.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let pixels = region_pixels(input.scan, request)?;
    let view = sections::cut(input.scan, pixels);
    let pitch = input.scan.pitch();
    let noise = sections::noise(input, pixels);
    let mut flags = Vec::new();
    let voids = view.iter().filter(|z| z.is_nan()).count();
    if voids > 0 {
        flags.push(format!("{voids} void pixels left out"));
    }
    let few = view.len() - voids < 1000;
    if few {
        flags.push(format!("too few pixels: {}", view.len() - voids));
    }
    let empty = |quantity: &str, unit| answer(request, Kind::Texture, quantity, unit, ASSUMPTIONS);
    let Some(scanned) = Texture::of(view, pitch) else {
        let mut line = empty("Sq", "nm");
        line.flags
            .push("not measured: the region is void".to_owned());
        return Ok(vec![line]);
    };
    progress.check()?;
    let corrected = input.corrected.and_then(|c| {
        let texture = Texture::of(sections::cut(c.surface, pixels), pitch)?;
        let part = s![
            pixels.row..pixels.row + pixels.rows,
            pixels.column..pixels.column + pixels.columns
        ];
        let certainty = c.certainty.slice(part);
        let never = certainty.iter().filter(|&&v| v == NEVER).count();
        let leaning = c.edge_leaning.slice(part).iter().filter(|&&v| v).count();
        let share = |n: usize| n as f64 / certainty.len() as f64;
        Some((texture, share(never), share(leaning), c.identified))
    });
    let lines = scanned
        .lines()
        .into_iter()
        .enumerate()
        .map(|(i, (name, unit, value))| {
            let mut line = empty(name, unit);
            line.flags.clone_from(&flags);
            let budget = budget_of(name, &scanned, noise, input.calibration.z);
            let u = budget.as_ref().map(|b| b.combined(0.95).u);
            if value.is_finite() {
                line.as_scanned = Some(Value { value, u });
            } else {
                line.flags.push(format!(
                    "{name} is not defined here: the region is flat or too small"
                ));
            }
            if u.is_none() {
                line.flags
                    .push(format!("no uncertainty is given for {name}"));
            }
            if let Some((texture, never, leaning, identified)) = corrected {
                correct(&mut line, texture.lines()[i].2, never, leaning, identified);
            }
            line.budget = budget.map(Budget::into_components).unwrap_or_default();
            line
        });
    Ok(lines.collect())
}

/// The corrected column: the figure of the reconstruction. What the tip never touched is bounded
/// from above only, which bounds no texture parameter: no interval is claimed.
fn correct(line: &mut Dimension, value: f64, never: f64, leaning: f64, identified: bool) {
    if !value.is_finite() {
        return;
    }
    line.corrected = Some(CorrectedValue {
        value: identified.then_some(value),
        u: None,
        expanded: None,
        k: None,
        low: None,
        high: None,
    });
    line.status = Some(Status::Bounded);
    if !identified {
        line.flags
            .push("the tip is not identified: no corrected value".to_owned());
    }
    line.flags.push(format!(
        "the reconstruction is an upper bound of the surface and noise sinks it: no interval can \
         be given; {:.0} % of the region was never touched",
        100.0 * never
    ));
    if leaning > 0.0 {
        line.flags.push(format!(
            "{:.0} % of the region leans on the edge of the scan or on voids",
            (100.0 * leaning).max(1.0)
        ));
    }
}

/// Calibration and noise of the height parameters; `None` for extremes, shape parameters and area,
/// whose error by noise is not a small symmetric one.
fn budget_of(name: &str, texture: &Texture, noise: f64, calibration: f64) -> Option<Budget> {
    let value = match name {
        "Sa" => texture.sa,
        "Sq" => texture.sq,
        _ => return None,
    };
    if texture.sq.is_nan() || texture.sq <= 0.0 {
        return None;
    }
    let mut budget = Budget::new();
    budget.push("z calibration", calibration, Distribution::Normal, value);
    // Noise adds in squares: it lifts Sq by s^2 / (2 Sq), a bound on one side.
    let lift = texture.sq - (texture.sq.powi(2) - noise.powi(2)).max(0.0).sqrt();
    budget.push_one_sided("noise lifts the value", lift * value / texture.sq);
    Some(budget)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::HeightMap;
    use std::f64::consts::{PI, SQRT_2};

    fn wave(amplitude: f64, f: impl Fn(f64, f64) -> f64) -> Texture {
        let map = HeightMap::from_fn(400, 400, Pitch::square(1.0), |x, y| {
            let k = 2.0 * PI / 400.0;
            amplitude * f(k * x, k * y)
        })
        .unwrap();
        Texture::of(map.heights(), map.pitch()).unwrap()
    }

    /// Closed forms of A cos kx, computed independently.
    #[test]
    fn one_sinusoid() {
        let k = 2.0 * PI / 400.0;
        for (amplitude, sdr) in [(1.0 / k, 0.216_006_7), (0.1 / k, 0.002_495_33)] {
            let t = wave(amplitude, |x, _| x.cos());
            assert!((t.sa / amplitude - 2.0 / PI).abs() < 1e-4);
            assert!((t.sq / amplitude - 1.0 / SQRT_2).abs() < 1e-6);
            assert!((t.sz / amplitude - 2.0).abs() < 1e-3);
            assert!((t.sku - 1.5).abs() < 1e-4 && t.ssk.abs() < 1e-4);
            assert!((t.sdr / sdr - 1.0).abs() < 5e-3, "{}", t.sdr);
        }
    }

    #[test]
    fn two_crossed_sinusoids() {
        let t = wave(10.0, |x, y| x.cos() * y.cos());
        assert!((t.sq - 5.0).abs() < 1e-4 && (t.sa - 40.0 / PI / PI).abs() < 1e-2);
        assert!((t.sku - 2.25).abs() < 1e-3);
    }

    #[test]
    fn a_flat_has_no_shape_and_a_void_nothing() {
        let flat = ndarray::Array2::<f32>::from_elem((3, 3), 2.0);
        let t = Texture::of(flat.view(), Pitch::square(1.0)).unwrap();
        assert_eq!((t.sa, t.sz, t.sdr), (0.0, 0.0, 0.0));
        assert!(t.ssk.is_nan());
        let void = ndarray::Array2::<f32>::from_elem((3, 3), f32::NAN);
        assert_eq!(Texture::of(void.view(), Pitch::square(1.0)), None);
        let one = ndarray::Array2::<f32>::from_elem((1, 1), 1.0);
        assert!(
            Texture::of(one.view(), Pitch::square(1.0))
                .unwrap()
                .sdr
                .is_nan()
        );
    }
}
