//! Step height by the histogram: the distance of the two densest levels of the region.
//!
//! For plateaus that lie in many pieces, islands or gratings, whose edges need not be found. The
//! region must be level: what tilt is left widens both levels.

use super::sections::{self, region_pixels};
use super::statistics::{self, Level};
use super::{CorrectedValue, Dimension, Input, Kind, Request, Status, Value, answer};
use crate::error::Result;
use crate::progress::Progress;
use crate::uncertainty::{Budget, Distribution};
use ndarray::ArrayView2;

const ASSUMPTIONS: &str = "Two plane-parallel levels in a levelled region; the densest level on \
    each side of the threshold that separates them best (N. Otsu, IEEE Trans. SMC 9, 62 (1979), \
    from memory). Histogram method: common practice";

/// Measures the step: one line.
///
/// Errors of kind `Setting`: a region off the scan.
pub(super) fn measure(
    input: &Input,
    request: &Request,
    progress: &Progress,
) -> Result<Vec<Dimension>> {
    let pixels = region_pixels(input.scan, request)?;
    let noise = sections::noise(input, pixels);
    let quantity = "step height (histogram of two levels)";
    let mut line = answer(request, Kind::StepHeight, quantity, "nm", ASSUMPTIONS);
    let Some(scanned) = levels(sections::cut(input.scan, pixels), noise) else {
        line.flags
            .push("not measured: no two levels stand out from the noise".to_owned());
        return Ok(vec![line]);
    };
    progress.check()?;
    if input.calibration.z == 0.0 {
        line.flags
            .push("no uncertainty of the z calibration was given".to_owned());
    }
    let height = |levels: &[Level; 2]| levels[1].value - levels[0].value;
    let budget_of = |levels: &[Level; 2]| {
        let mut budget = Budget::new();
        let z = input.calibration.z;
        budget.push("z calibration", z, Distribution::Normal, height(levels));
        for (source, level) in ["lower level", "upper level"].into_iter().zip(levels) {
            // A hundredth of the pixels taken as independent: drift and waviness.
            let u = level.deviation / (level.count as f64 / 100.0).max(1.0).sqrt();
            budget.push(source, u, Distribution::Normal, 1.0);
        }
        budget
    };
    let budget = budget_of(&scanned);
    line.as_scanned = Some(Value {
        value: height(&scanned),
        u: Some(budget.combined(0.95).u),
    });
    let surface = input
        .corrected
        .and_then(|c| Some((c, levels(sections::cut(c.surface, pixels), noise)?)));
    let Some((given, surface)) = surface else {
        if input.corrected.is_some() {
            line.flags
                .push("no corrected value: the reconstruction shows no two levels".to_owned());
        }
        line.budget = budget.into_components();
        return Ok(vec![line]);
    };
    let mut budget = budget_of(&surface);
    // Plateaus are parallel before and after: what changes is noise taken differently.
    let change = (height(&surface) - height(&scanned)).abs();
    budget.push(
        "change by the tip correction",
        change / 3f64.sqrt(),
        Distribution::Rectangular,
        1.0,
    );
    let all = budget.combined(0.95);
    let known = given.identified;
    let ends = [height(&surface), height(&scanned)];
    let (low, high) = if known {
        (ends[0], ends[0])
    } else {
        (ends[0].min(ends[1]), ends[0].max(ends[1]))
    };
    line.corrected = Some(CorrectedValue {
        value: known.then_some(ends[0]),
        u: known.then_some(all.u),
        expanded: known.then_some(all.expanded),
        k: known.then_some(all.k),
        low: Some(low - all.expanded),
        high: Some(high + all.expanded),
    });
    line.status = Some(if known {
        Status::Touched
    } else {
        line.flags
            .push("the tip is not identified: bounds only".to_owned());
        Status::Bounded
    });
    line.budget = budget.into_components();
    Ok(vec![line])
}

/// The lower and the upper level; `None` where they do not stand out from the noise.
fn levels(view: ArrayView2<f32>, noise: f64) -> Option<[Level; 2]> {
    let heights: Vec<f64> = view
        .iter()
        .map(|&z| f64::from(z))
        .filter(|z| z.is_finite())
        .collect();
    let threshold = statistics::two_class_threshold(&heights)?;
    let (mut below, mut above): (Vec<f64>, Vec<f64>) =
        heights.into_iter().partition(|&z| z < threshold);
    let low = statistics::level(&mut below, noise)?;
    let high = statistics::level(&mut above, noise)?;
    (high.value - low.value > 4.0 * noise).then_some([low, high])
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::Array2;

    #[test]
    fn two_levels_in_pieces_and_none_in_a_flat() {
        let map = Array2::from_shape_fn((40, 40), |(r, c)| {
            if (r / 7 + c / 5) % 2 == 0 {
                3.5f32
            } else {
                1.25
            }
        });
        let [low, high] = levels(map.view(), 0.0).unwrap();
        assert_eq!((low.value, high.value), (1.25, 3.5));
        assert!(levels(Array2::<f32>::zeros((5, 5)).view(), 0.0).is_none());
    }
}
