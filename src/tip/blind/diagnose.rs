//! What is wrong with a scan or an estimate, and what to do about it.

use super::Diagnosis;
use crate::heightmap::HeightMap;
use crate::tip::Tip;
use ndarray::Array2;

/// Largest radius of a stylus tip that the standards know, nm (ISO 3274: 2, 5, 10 um; from memory).
const LARGEST_STYLUS_NM: f64 = 10_000.0;
/// Distinct features an apex needs.
pub(super) const LEAST_FEATURES: usize = 5;

/// A finding that forbids a radius.
pub(super) fn refusal(finding: impl Into<String>, advice: impl Into<String>) -> Diagnosis {
    Diagnosis {
        finding: finding.into(),
        advice: advice.into(),
        refuses_radius: true,
    }
}

/// A finding that does not.
pub(super) fn caution(finding: impl Into<String>, advice: impl Into<String>) -> Diagnosis {
    Diagnosis {
        refuses_radius: false,
        ..refusal(finding, advice)
    }
}

/// Scans that show no tip whatever is computed.
pub(super) fn hopeless(scan: &HeightMap) -> Option<Vec<Diagnosis>> {
    let pitch = scan.pitch();
    let px = pitch.x.max(pitch.y);
    if 3.0 * px > LARGEST_STYLUS_NM {
        return Some(vec![refusal(
            format!(
                "Pixel pitch {:.3} um: three pixels are wider than the radius of any standard \
                 stylus (10 um), so the scan shows no tip.",
                px / 1000.0
            ),
            "Take the heights as they are, or give a tip from a model or a file.",
        )]);
    }
    let (low, high) = scan.range()?;
    (low == high).then(|| {
        vec![refusal(
            "The scan is perfectly flat: nothing on it touches anything but the tip's apex.",
            "Scan sharp, tall features.",
        )]
    })
}

/// Apices beside the one at the centre: cells higher than all around them by more than `least`
/// nm of prominence (drop to the saddle towards anything higher), within the supported cells.
pub(super) fn further_apices(tip: &Tip, support: &Array2<u32>, least: f64) -> Vec<(usize, usize)> {
    let shape = tip.shape();
    let (rows, columns) = shape.dim();
    let centre = (rows / 2, columns / 2);
    let mut cells: Vec<(usize, usize)> = shape
        .indexed_iter()
        .filter(|(at, p)| p.is_finite() && support[*at] > 0)
        .map(|(at, _)| at)
        .collect();
    cells.sort_by(|a, b| shape[*b].total_cmp(&shape[*a]).then(a.cmp(b)));
    // Flood from the top: every cell joins the hill of its highest neighbour; where two hills
    // meet, the lower one's prominence is known.
    let mut hill = Array2::from_elem((rows, columns), usize::MAX);
    let mut parent: Vec<usize> = Vec::new();
    let mut top: Vec<(usize, usize)> = Vec::new();
    let mut found = Vec::new();
    fn root(parent: &[usize], mut k: usize) -> usize {
        while parent[k] != k {
            k = parent[k];
        }
        k
    }
    for &(r, c) in &cells {
        let mut around: Vec<usize> = (r.saturating_sub(1)..(r + 2).min(rows))
            .flat_map(|i| (c.saturating_sub(1)..(c + 2).min(columns)).map(move |j| (i, j)))
            .filter(|&at| hill[at] != usize::MAX)
            .map(|at| root(&parent, hill[at]))
            .collect();
        around.sort_unstable();
        around.dedup();
        match around.first() {
            None => {
                hill[(r, c)] = parent.len();
                parent.push(parent.len());
                top.push((r, c));
            }
            Some(&first) => {
                hill[(r, c)] = first;
                for &other in &around[1..] {
                    // Hills are numbered by falling height of their tops.
                    let summit = top[other];
                    let prominence = f64::from(shape[summit] - shape[(r, c)]);
                    let away = summit.0.abs_diff(centre.0).max(summit.1.abs_diff(centre.1));
                    let ringed = (summit.0.saturating_sub(1)..(summit.0 + 2).min(rows)).all(|i| {
                        (summit.1.saturating_sub(1)..(summit.1 + 2).min(columns))
                            .all(|j| support[(i, j)] > 0)
                    });
                    if prominence > least && away >= 3 && ringed {
                        found.push(summit);
                    }
                    parent[other] = first;
                }
            }
        }
    }
    found.sort_by(|a, b| shape[*b].total_cmp(&shape[*a]).then(a.cmp(b)));
    found
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;

    #[test]
    fn the_second_apex_of_a_double_tip_is_found_and_a_single_tip_has_none() {
        let cone = |r: f64, c: f64, i: usize, j: usize| (i as f64 - r).hypot(j as f64 - c) * 2.0;
        let support = Array2::from_elem((31, 31), 9);
        let double = Array2::from_shape_fn((31, 31), |(i, j)| {
            -cone(15.0, 15.0, i, j).min(cone(12.0, 24.0, i, j) + 4.0) as f32
        });
        let tip = Tip::new(double, Pitch::square(1.0)).unwrap();
        assert_eq!(further_apices(&tip, &support, 0.5), vec![(12, 24)]);
        let single = Array2::from_shape_fn((31, 31), |(i, j)| -cone(15.0, 15.0, i, j) as f32);
        let tip = Tip::new(single, Pitch::square(1.0)).unwrap();
        assert!(further_apices(&tip, &support, 0.5).is_empty());
    }
}
