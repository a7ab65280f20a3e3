//! Curves: profiles thinned for drawing, with gaps at voids.

use super::svg::{Axis, xy};
use std::fmt::Write;

/// Points of a profile, at most about four per column of `columns`: first, lowest, highest and
/// last of each column, so that no extreme is lost. NaN heights stay as gaps.
pub fn thin(points: &[(f64, f64)], columns: usize) -> Vec<(f64, f64)> {
    let columns = columns.max(1);
    if points.len() <= 4 * columns {
        return points.to_vec();
    }
    let mut out = Vec::with_capacity(4 * columns);
    for chunk in points.chunks(points.len().div_ceil(columns)) {
        let mut keep = vec![0, chunk.len() - 1];
        if let Some(gap) = chunk.iter().position(|p| p.1.is_nan()) {
            keep.push(gap);
        }
        let finite = || chunk.iter().enumerate().filter(|(_, p)| p.1.is_finite());
        keep.extend(finite().min_by(|a, b| a.1.1.total_cmp(&b.1.1)).map(|p| p.0));
        keep.extend(finite().max_by(|a, b| a.1.1.total_cmp(&b.1.1)).map(|p| p.0));
        keep.sort_unstable();
        keep.dedup();
        out.extend(keep.into_iter().map(|i| chunk[i]));
    }
    out
}

/// The path data of a curve; NaN lifts the pen.
pub fn path(points: &[(f64, f64)], x: Axis, y: Axis) -> String {
    let mut d = String::new();
    let mut down = false;
    for &(px, py) in points {
        if !py.is_finite() {
            down = false;
            continue;
        }
        let letter = if down { 'L' } else { 'M' };
        let _ = write!(d, "{letter}{} {}", xy(x.at(px)), xy(y.at(py)));
        down = true;
    }
    d
}

/// The path data of the area between two curves on the same positions; where either is NaN the
/// area is broken.
pub fn between(low: &[(f64, f64)], high: &[(f64, f64)], x: Axis, y: Axis) -> String {
    let mut d = String::new();
    let pairs: Vec<_> = low.iter().zip(high).collect();
    for run in pairs.split(|(a, b)| !(a.1.is_finite() && b.1.is_finite())) {
        if run.len() < 2 {
            continue;
        }
        let there = run.iter().map(|(a, _)| *a);
        let back = run.iter().rev().map(|(_, b)| *b);
        for (i, (px, py)) in there.chain(back).enumerate() {
            let letter = if i == 0 { 'M' } else { 'L' };
            let _ = write!(d, "{letter}{} {}", xy(x.at(*px)), xy(y.at(*py)));
        }
        d.push('Z');
    }
    d
}

/// Lowest and highest finite height of some curves.
pub fn range<'a>(curves: impl IntoIterator<Item = &'a [(f64, f64)]>) -> Option<(f64, f64)> {
    curves
        .into_iter()
        .flatten()
        .map(|p| p.1)
        .filter(|z| z.is_finite())
        .fold(None, |range, z| {
            let (low, high) = range.unwrap_or((z, z));
            Some((low.min(z), high.max(z)))
        })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn thinning_keeps_extremes_ends_and_gaps() {
        let mut points: Vec<(f64, f64)> = (0..10_000)
            .map(|i| (f64::from(i), f64::from(i % 7)))
            .collect();
        points[4321].1 = 99.0;
        points[777].1 = -99.0;
        points[5000].1 = f64::NAN;
        let thinned = thin(&points, 100);
        assert!(thinned.len() <= 500);
        assert_eq!(range([thinned.as_slice()]), Some((-99.0, 99.0)));
        assert!(thinned.iter().any(|p| p.1.is_nan()));
        assert_eq!((thinned[0].0, thinned[thinned.len() - 1].0), (0.0, 9999.0));
        assert!(thinned.windows(2).all(|p| p[0].0 < p[1].0));
    }

    #[test]
    fn a_gap_lifts_the_pen_and_breaks_the_area() {
        let axis = Axis {
            low: 0.0,
            high: 10.0,
            from: 0.0,
            to: 10.0,
        };
        let curve = [
            (0.0, 1.0),
            (1.0, 2.0),
            (2.0, f64::NAN),
            (3.0, 4.0),
            (4.0, 5.0),
        ];
        assert_eq!(path(&curve, axis, axis), "M0 1L1 2M3 4L4 5");
        assert_eq!(between(&curve, &curve, axis, axis).matches('Z').count(), 2);
        assert_eq!(path(&[], axis, axis), "");
        assert_eq!(range([]), None);
    }
}
