//! What two scans of one place tell of the scanner, as lines of every budget: hysteresis (trace and
//! retrace) and drift (a scan taken straight after). Sources: common practice; the combination is
//! that of JCGM 100:2008, a known error that is not taken off enters as a bound to both sides.

use super::{Dimension, Kind, Request};
use crate::heightmap::HeightMap;
use crate::uncertainty::{Budget, Component, Distribution};

/// The scanner's errors; `None` what no second scan tells.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Scanner {
    /// Half the shift between trace and retrace along x, nm, `>= 0`.
    pub hysteresis_nm: Option<f64>,
    /// Half the height difference of trace and retrace that the shift leaves, nm, `>= 0`.
    pub hysteresis_height_nm: Option<f64>,
    /// How far the sample drifts along x and y in the time of one scan, nm.
    pub drift_nm: [Option<f64>; 2],
}

/// Source names of the budget lines.
const HYSTERESIS: &str = "hysteresis (trace-retrace)";
const DRIFT: &str = "drift";

/// What a result is, for the scanner.
enum Nature {
    /// A length along a direction (unit vector).
    Lateral([f64; 2]),
    /// A height.
    Height,
    /// Neither a length nor a height: angles, roughness, texture. No line.
    Other,
}

impl Scanner {
    /// Adds the lines to a result of `request` on `scan`: to both columns, the budget and the
    /// interval.
    ///
    /// Heights: half the height difference. Lengths of direction `c` (unit vector): half the shift
    /// times `|c_x|`, and the error of drift `L |d c| (|c_y| / H + |c_x| / (2 n W))` with the drift
    /// `d` in the time of a scan of `n` rows, `W` wide and `H` long: the rows come one after the
    /// other, and trace and retrace share the time of one. A period measured over N periods of the
    /// region has an Nth of the hysteresis. All are half-widths of rectangular distributions.
    pub fn enter(&self, scan: &HeightMap, request: &Request, line: &mut Dimension) {
        let value = line.corrected.and_then(|c| c.value);
        let Some(value) = value.or(line.as_scanned.map(|v| v.value)) else {
            return;
        };
        let mut added = Vec::new();
        let mut add = |source: &str, half_width: f64, sensitivity: f64| {
            if half_width > 0.0 && sensitivity > 0.0 {
                added.push(Component {
                    source: source.to_owned(),
                    u: half_width / 3f64.sqrt(),
                    distribution: Distribution::Rectangular,
                    sensitivity,
                    degrees_of_freedom: None,
                });
            }
        };
        match nature(line) {
            Nature::Other => return,
            Nature::Height => add(HYSTERESIS, self.hysteresis_height_nm.unwrap_or(0.0), 1.0),
            Nature::Lateral([x, y]) => {
                if let Some(half) = self.hysteresis_nm {
                    add(
                        HYSTERESIS,
                        half,
                        x.abs() / periods(scan, request, line, value),
                    );
                }
                let part = y.abs() / scan.length_nm()
                    + x.abs() / (2.0 * scan.rows() as f64 * scan.width_nm());
                let [dx, dy] = self.drift_nm;
                // Along an axis of no weight nothing need be known.
                let weighed = |d: Option<f64>, c: f64| {
                    if c.abs() < 1e-6 {
                        Some(0.0)
                    } else {
                        Some(d? * c)
                    }
                };
                match (weighed(dx, x), weighed(dy, y)) {
                    (Some(along_x), Some(along_y)) => {
                        add(DRIFT, (along_x + along_y).abs() * part, value.abs());
                    }
                    _ if self.drift_nm != [None, None] => line.flags.push(
                        "no drift in the budget: the second scan does not show it along this length"
                            .to_owned(),
                    ),
                    _ => {}
                }
            }
        }
        widen(line, added);
    }
}

fn nature(line: &Dimension) -> Nature {
    let along = |mark: Option<&[f64; 4]>| {
        let [x1, y1, x2, y2] = *mark?;
        let length = (x2 - x1).hypot(y2 - y1);
        (length > 0.0).then(|| [(x2 - x1) / length, (y2 - y1) / length])
    };
    // Without a direction a length is taken along the fast axis, where hysteresis is in full.
    let lateral = |mark| Nature::Lateral(along(mark).unwrap_or([1.0, 0.0]));
    match line.kind {
        Kind::StepHeight | Kind::HoleDepth => Nature::Height,
        Kind::Particle | Kind::Distance if line.quantity.contains("height") => Nature::Height,
        // The width is the last mark, the edges come before it.
        Kind::LineWidth => lateral(line.marks.last()),
        Kind::Pitch | Kind::Distance => lateral(line.marks.first()),
        Kind::Particle => lateral(None),
        Kind::Lattice if line.unit == "nm" => {
            lateral(line.marks.get(usize::from(line.quantity.ends_with('b'))))
        }
        _ => Nature::Other,
    }
}

/// Over how many periods a period was measured; 1 for all other lengths.
fn periods(scan: &HeightMap, request: &Request, line: &Dimension, value: f64) -> f64 {
    if !matches!(line.kind, Kind::Pitch | Kind::Lattice) {
        return 1.0;
    }
    let region = request.region.unwrap_or_else(|| scan.whole());
    (region.width / value).floor().max(1.0)
}

/// Adds components to a finished line.
fn widen(line: &mut Dimension, added: Vec<Component>) {
    if added.is_empty() {
        return;
    }
    let of = |components: &[Component]| {
        let mut budget = Budget::new();
        for component in components {
            budget.add(component.clone());
        }
        budget
    };
    let before = of(&line.budget);
    let size = |c: &Component| (c.u * c.sensitivity).abs();
    let more: f64 = added.iter().map(|c| size(c) * size(c)).sum::<f64>().sqrt();
    line.budget.extend(added);
    line.budget.sort_by(|a, b| size(b).total_cmp(&size(a)));
    let after = of(&line.budget);
    if let Some(scanned) = &mut line.as_scanned {
        scanned.u = scanned.u.map(|u| u.hypot(more));
    }
    let Some(corrected) = &mut line.corrected else {
        return;
    };
    let outwards = after.symmetric(0.95).expanded - before.symmetric(0.95).expanded;
    // A difference has a sign; everything else is a length.
    let least = if line.kind == Kind::Distance {
        f64::NEG_INFINITY
    } else {
        0.0
    };
    corrected.low = corrected.low.map(|low| (low - outwards).max(least));
    corrected.high = corrected.high.map(|high| high + outwards);
    if let Some(u) = corrected.u {
        // What it was, correlations and all, with the new beside it.
        let (u, k) = (u.hypot(more), after.combined(0.95).k);
        corrected.u = Some(u);
        corrected.k = Some(k);
        corrected.expanded = Some(k * u);
    }
}

#[cfg(test)]
mod tests {
    use super::super::{CorrectedValue, Value, answer};
    use super::*;
    use crate::heightmap::Pitch;

    fn line(kind: Kind, quantity: &str, mark: [f64; 4], value: f64) -> Dimension {
        let mut line = answer(&Request::new("", kind), kind, quantity, "nm", "");
        line.as_scanned = Some(Value {
            value,
            u: Some(0.3),
        });
        line.corrected = Some(CorrectedValue {
            value: Some(value),
            u: Some(0.3),
            expanded: Some(0.588),
            k: Some(1.96),
            low: Some(value - 0.588),
            high: Some(value + 1.588),
        });
        line.budget.push(Component {
            source: "repeatability".to_owned(),
            u: 0.3,
            distribution: Distribution::Normal,
            sensitivity: 1.0,
            degrees_of_freedom: None,
        });
        line.marks = vec![mark];
        line
    }

    fn entered(scanner: Scanner, mut line: Dimension) -> Dimension {
        // 100 rows of 200 nm, 400 nm long.
        let pitch = Pitch { x: 1.0, y: 4.0 };
        let scan = HeightMap::from_fn(100, 200, pitch, |_, _| 0.0).unwrap();
        scanner.enter(&scan, &Request::new("", line.kind), &mut line);
        line
    }

    fn contribution(line: &Dimension, source: &str) -> f64 {
        let of = line.budget.iter().filter(|c| c.source == source);
        of.map(|c| c.u * c.sensitivity).sum()
    }

    const ACROSS: [f64; 4] = [20.0, 50.0, 80.0, 50.0];
    const ALONG: [f64; 4] = [20.0, 50.0, 20.0, 150.0];

    #[test]
    fn a_falling_height_difference_stays_within_its_interval() {
        let scanner = Scanner {
            hysteresis_height_nm: Some(1.0),
            ..Scanner::default()
        };
        let fallen = entered(
            scanner,
            line(Kind::Distance, "height difference", ACROSS, -12.0),
        );
        let corrected = fallen.corrected.unwrap();
        let (low, high) = (corrected.low.unwrap(), corrected.high.unwrap());
        assert!(low < -12.588 && high > -12.0 + 1.588, "{corrected:?}");
    }

    /// Half a known shift, as a rectangular half-width (JCGM 100:2008, 4.3.7).
    #[test]
    fn half_the_shift_is_in_a_width_and_half_the_difference_in_a_height() {
        let scanner = Scanner {
            hysteresis_nm: Some(0.6),
            hysteresis_height_nm: Some(0.09),
            ..Scanner::default()
        };
        let width = entered(scanner, line(Kind::LineWidth, "line width", ACROSS, 60.0));
        let u = 0.6 / 3f64.sqrt();
        assert!((contribution(&width, HYSTERESIS) - u).abs() < 1e-12);
        let corrected = width.corrected.unwrap();
        let all = 0.3f64.hypot(u);
        assert!((corrected.u.unwrap() - all).abs() < 1e-12);
        assert!((width.as_scanned.unwrap().u.unwrap() - all).abs() < 1e-12);
        // One-sided room above stays what it was: 1 nm.
        let (low, high) = (corrected.low.unwrap(), corrected.high.unwrap());
        assert!((60.0 - low - 1.96 * all).abs() < 1e-4, "{low}");
        assert!((high - 61.0 - 1.96 * all).abs() < 1e-4, "{high}");
        let height = entered(scanner, line(Kind::StepHeight, "step height", ACROSS, 20.0));
        assert!((contribution(&height, HYSTERESIS) - 0.09 / 3f64.sqrt()).abs() < 1e-12);
        // The fast axis' hysteresis is in no length along the slow one.
        let slow = entered(scanner, line(Kind::LineWidth, "line width", ALONG, 100.0));
        assert_eq!(contribution(&slow, HYSTERESIS), 0.0);
        // Five periods of 40 nm in 200 nm.
        let pitch = entered(scanner, line(Kind::Pitch, "pitch", ACROSS, 40.0));
        assert!((contribution(&pitch, HYSTERESIS) - u / 5.0).abs() < 1e-12);
        let angle = line(Kind::SideWallAngle, "left wall", ACROSS, 80.0);
        assert_eq!(entered(scanner, angle.clone()), angle);
    }

    /// A drift of 8 nm per scan of 400 nm stretches what runs along it by 2 %.
    #[test]
    fn drift_stretches_lengths_along_the_slow_axis_and_hardly_those_across() {
        let scanner = Scanner {
            drift_nm: [Some(4.0), Some(8.0)],
            ..Scanner::default()
        };
        let slow = entered(scanner, line(Kind::LineWidth, "line width", ALONG, 100.0));
        assert!((contribution(&slow, DRIFT) - 2.0 / 3f64.sqrt()).abs() < 1e-12);
        // 4 nm in the time of 100 rows there and back: 60 of 200 nm of one way.
        let across = entered(scanner, line(Kind::LineWidth, "line width", ACROSS, 60.0));
        let expected = 4.0 / 200.0 * 60.0 / 200.0 / 3f64.sqrt();
        assert!((contribution(&across, DRIFT) - expected).abs() < 1e-12);
        let unknown = Scanner {
            drift_nm: [Some(4.0), None],
            ..Scanner::default()
        };
        let slow = entered(unknown, line(Kind::LineWidth, "line width", ALONG, 100.0));
        assert_eq!(contribution(&slow, DRIFT), 0.0);
        assert!(slow.flags[0].contains("no drift"), "{:?}", slow.flags);
        let none = line(Kind::LineWidth, "line width", ALONG, 100.0);
        assert_eq!(entered(Scanner::default(), none.clone()), none);
    }
}
