//! Areal texture parameters of a region, ISO 25178-2: of the surface as levelled (F-operator), or
//! of the scale-limited one where an S-filter or an L-filter is asked for.

use super::filter;
use super::sections::{self, region_pixels};
use super::{Calibration, CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer};
use crate::error::Result;
use crate::heightmap::{HeightMap, Pitch, PixelRegion};
use crate::morphology::certainty::NEVER;
use crate::progress::Progress;
use crate::tip::Tip;
use crate::uncertainty::{Budget, Distribution};
use ndarray::{Array2, ArrayView2, s};

const ASSUMPTIONS: &str = "Heights of this region, at this pixel pitch, about their mean, after the \
    levelling and the filters stated. ISO 25178-2, filters ISO 16610-61 (from memory); noise taken \
    off in squares: common practice";

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
    let pitch = input.scan.pitch();
    let filters = Filters::of(request);
    let view = filters.surface(input.scan, pixels);
    progress.check()?;
    let noise = sections::noise(input, pixels) * filters.noise_share(pitch).sqrt();
    let mut flags = filters.flags(input.scan, pixels);
    let voids = view.iter().filter(|z| z.is_nan()).count();
    if voids > 0 {
        flags.push(format!("{voids} void pixels left out"));
    }
    let few = view.len() - voids < 1000;
    if few {
        flags.push(format!("too few pixels: {}", view.len() - voids));
    }
    let empty = |quantity: &str, unit| answer(request, Kind::Texture, quantity, unit, ASSUMPTIONS);
    let Some(scanned) = Texture::of(view.view(), pitch) else {
        let mut line = empty("Sq", "nm");
        line.flags
            .push("not measured: the region is void".to_owned());
        return Ok(vec![line]);
    };
    progress.check()?;
    let doubt = Doubt {
        grid: input.corrected.map_or(0.0, |c| grid_rise(c.tip)),
        noise,
        count: (view.len() - voids) as f64,
        pitch,
        calibration: input.calibration,
    };
    let corrected = input.corrected.and_then(|c| {
        let texture = Texture::of(filters.surface(c.surface, pixels).view(), pitch)?;
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
            let budget = doubt.budget(name, &scanned);
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
            line.budget = budget.map(Budget::into_components).unwrap_or_default();
            if let Some((texture, never, leaning, identified)) = corrected {
                let bounds = doubt.bounds(name, &texture);
                let value = texture.lines()[i].2;
                correct(&mut line, value, bounds, never, leaning, identified);
                if let Some(budget) = doubt.corrected_budget(name, &texture) {
                    line.budget = budget.into_components();
                }
            }
            line
        });
    Ok(lines.collect())
}

/// The areal filters asked for.
struct Filters {
    s: Option<f64>,
    l: Option<f64>,
}

impl Filters {
    fn of(request: &Request) -> Self {
        Self {
            s: request.s_filter.map(|l| l.nm()),
            l: request.l_filter.map(|l| l.nm()),
        }
    }

    /// The region's scale-limited heights. What lies around the region takes part in the filters.
    fn surface(&self, map: &HeightMap, pixels: PixelRegion) -> Array2<f32> {
        let Some(widest) = self.s.into_iter().chain(self.l).reduce(f64::max) else {
            return sections::cut(map, pixels).to_owned();
        };
        let pitch = map.pitch();
        let grown = |start: usize, count: usize, all: usize, pitch: f64| {
            let by = (widest / pitch).ceil() as usize;
            let from = start.saturating_sub(by);
            (from, (start + count + by).min(all) - from)
        };
        let (row, rows) = grown(pixels.row, pixels.rows, map.rows(), pitch.y);
        let (column, columns) = grown(pixels.column, pixels.columns, map.columns(), pitch.x);
        let around = PixelRegion {
            row,
            column,
            rows,
            columns,
        };
        let wide = filter::scale_limited(sections::cut(map, around), pitch, self.s, self.l);
        let (r, c) = (pixels.row - row, pixels.column - column);
        wide.slice(s![r..r + pixels.rows, c..c + pixels.columns])
            .to_owned()
    }

    /// Share of white noise's variance that is left.
    fn noise_share(&self, pitch: Pitch) -> f64 {
        self.s
            .map_or(1.0, |index| filter::white_noise_share(pitch, index))
    }

    fn flags(&self, map: &HeightMap, pixels: PixelRegion) -> Vec<String> {
        let mut flags = Vec::new();
        let shorter =
            (pixels.columns as f64 * map.pitch().x).min(pixels.rows as f64 * map.pitch().y);
        for (name, index) in [("S", self.s), ("L", self.l)] {
            let Some(index) = index else { continue };
            flags.push(format!("{name}-filter: Gaussian, nesting index {index} nm"));
            if index > shorter / 2.0 {
                flags.push(format!(
                    "the {name}-filter's nesting index is more than half of the region"
                ));
            }
        }
        if let Some(index) = self.s
            && index < 2.0 * map.pitch().x.max(map.pitch().y)
        {
            flags.push("the S-filter's nesting index is less than two pixels".to_owned());
        }
        flags
    }
}

/// What noise and calibration do to the parameters.
struct Doubt {
    /// How far the reconstruction may stand above the surface because the tip's contact falls
    /// between its cells, nm.
    grid: f64,
    /// White noise left by the filters, nm.
    noise: f64,
    /// Heights.
    count: f64,
    pitch: Pitch,
    calibration: Calibration,
}

impl Doubt {
    /// Highest of `count` normal numbers, in deviations, about (common practice).
    fn extreme(&self) -> f64 {
        (2.0 * self.count.max(2.0).ln()).sqrt()
    }

    /// How far noise may have lifted the parameter, and how far sunk it; `None` for the shape
    /// parameters, whose error by noise has no sign.
    fn room(&self, name: &str, texture: &Texture) -> Option<[f64; 2]> {
        let (noise, gradient) = (self.noise, self.noise * self.noise);
        match name {
            // Noise adds in squares.
            "Sq" | "Sa" => {
                let value = if name == "Sa" { texture.sa } else { texture.sq };
                if !(texture.sq > 0.0) {
                    return None;
                }
                let rest = (texture.sq.powi(2) - noise.powi(2)).max(0.0).sqrt();
                Some([(texture.sq - rest) * value / texture.sq, 0.0])
            }
            // A peak of the surface stands in the noise that it happens to have.
            "Sp" | "Sv" => Some([self.extreme() * noise, 2.0 * noise]),
            "Sz" => Some([2.0 * self.extreme() * noise, 3.0 * noise]),
            // Differences of neighbours have twice the variance: half its square is the area.
            "Sdr" => {
                let lift = gradient * (1.0 / self.pitch.x.powi(2) + 1.0 / self.pitch.y.powi(2));
                texture
                    .sdr
                    .is_finite()
                    .then_some([lift.min(texture.sdr), 0.0])
            }
            _ => None,
        }
    }

    /// The budget of a parameter: z calibration, that of the lateral axes for the area, and noise
    /// as a bound.
    fn budget(&self, name: &str, texture: &Texture) -> Option<Budget> {
        let [lift, sink] = self.room(name, texture)?;
        let value = texture.lines().into_iter().find(|l| l.0 == name)?.2;
        let mut budget = Budget::new();
        let z = self.calibration.z;
        if name == "Sdr" {
            // Slopes enter in squares.
            let lateral = self.calibration.x.max(self.calibration.y);
            budget.push("z calibration", z, Distribution::Normal, 2.0 * value);
            budget.push(
                "axis calibration",
                lateral,
                Distribution::Normal,
                2.0 * value,
            );
        } else {
            budget.push("z calibration", z, Distribution::Normal, value);
        }
        budget.push_one_sided("noise lifts the value", lift);
        if sink > 0.0 {
            budget.push_one_sided("noise sinks the value", sink);
        }
        if name == "Sq" || name == "Sa" {
            // Sampling of the noise's own variance: s^2 sqrt(2 / n) / (2 Sq), and the chance
            // product of noise and surface: s / sqrt n.
            let u = self.noise * self.noise / (2.0 * self.count).sqrt() / texture.sq;
            let u = u.hypot(self.noise / self.count.sqrt());
            budget.push("scatter of the noise", u, Distribution::Normal, 1.0);
        }
        Some(budget)
    }

    /// The same for the reconstruction.
    fn corrected_budget(&self, name: &str, texture: &Texture) -> Option<Budget> {
        let mut budget = self.budget(name, texture)?;
        if name != "Sdr" {
            let u = self.grid / 3f64.sqrt();
            let source = "pixel grid in the reconstruction";
            budget.push(source, u, Distribution::Rectangular, 1.0);
        }
        Some(budget)
    }

    /// The 95 % interval of a parameter of the reconstruction where all of it was touched. How
    /// much of the scan's noise is in the reconstruction is not known: none to all of it.
    fn bounds(&self, name: &str, texture: &Texture) -> Option<[f64; 2]> {
        let value = texture.lines().into_iter().find(|l| l.0 == name)?.2;
        let [lift, sink] = self.room(name, texture)?;
        let budget = self.corrected_budget(name, texture)?;
        let (low, high) = budget.interval(value, lift, sink, 0.95);
        Some([low.max(0.0), high])
    }
}

/// Height of the tip's surface a pixel from its apex over four: a parabola's greatest rise above its
/// samples between two of them.
fn grid_rise(tip: &Tip) -> f64 {
    let shape = tip.shape();
    let (r, c) = (shape.nrows() / 2, shape.ncols() / 2);
    [(r + 1, c), (r, c + 1)]
        .into_iter()
        .filter_map(|place| shape.get(place))
        .map(|&p| -f64::from(p) / 4.0)
        .filter(|rise| rise.is_finite())
        .fold(0.0, f64::max)
}

/// Share of pixels never touched above which the reconstruction is smoother than the surface.
const UNTOUCHED: f64 = 0.01;

/// The corrected column: the figure of the reconstruction. It is an upper bound of the surface
/// that fills what the tip never touched: amplitudes are then lower bounds.
fn correct(
    line: &mut Dimension,
    value: f64,
    bounds: Option<[f64; 2]>,
    never: f64,
    leaning: f64,
    identified: bool,
) {
    if !value.is_finite() {
        return;
    }
    let touched = never <= UNTOUCHED && identified;
    // The middle of what noise leaves; for extremes and shapes the figure itself.
    let likely = match (line.quantity.as_str(), bounds) {
        ("Sq" | "Sa" | "Sdr", Some([low, high])) => 0.5 * (low + high),
        _ => value,
    };
    let half = bounds.map(|[low, high]| 0.5 * (high - low));
    line.corrected = Some(CorrectedValue {
        value: identified.then_some(likely),
        u: half.filter(|_| touched).map(|h| h / 1.96),
        expanded: half.filter(|_| touched),
        k: half.filter(|_| touched).map(|_| 1.96),
        low: bounds.map(|b| b[0]).filter(|_| identified),
        high: bounds.map(|b| b[1]).filter(|_| touched),
    });
    line.status = Some(if touched {
        Status::Touched
    } else {
        Status::Bounded
    });
    if !identified {
        line.flags
            .push("the tip is not identified: no corrected value".to_owned());
    } else if !touched {
        line.flags.push(format!(
            "{:.0} % of the region was never touched: the reconstruction is an upper bound of the \
             surface and smoother than it; amplitudes are bounded from below only",
            100.0 * never
        ));
    }
    if bounds.is_none() {
        line.flags.push(format!(
            "no interval is given for {}: noise may move it either way",
            line.quantity
        ));
    }
    if leaning > 0.0 {
        line.flags.push(format!(
            "{:.0} % of the region leans on the edge of the scan or on voids",
            (100.0 * leaning).max(1.0)
        ));
    }
}

#[cfg(test)]
mod tests {
    use super::*;
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
