//! What noise and the pixel grid do to a reconstruction, on the mean.
//!
//! The reconstruction is the least of many constraints `I(x) + t(u - x)`. White noise of standard
//! deviation `s` in `I` lets the least of those that nearly touch win: on a flat many do, on a
//! steep wall few, so that a flat is eroded further than a wall and a threshold between plateaus
//! meets the wall too far out. On a plane surface the constraints stand `g_i >= 0` above the
//! surface, known from the tip alone, and the mean of `min_i (g_i + s n_i)` follows from the
//! product of the normal probabilities (order statistics of independent normals, common practice).

use super::Axis;
use crate::tip::Tip;
use statrs::function::erf::erfc;

/// Mean of reconstruction minus surface on a plane, nm.
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub(super) struct Bias {
    /// By the pixel grid, `>= 0`: the tip's contact falls between its cells.
    pub grid: f64,
    /// By noise, `<= 0`.
    pub noise: f64,
}

/// On a plane that falls outwards with lateral slope `slope` (nm along per nm of height; infinite
/// = level), met along `axis`.
pub(super) fn bias(tip: &Tip, axis: Axis, outwards_positive: bool, slope: f64, noise: f64) -> Bias {
    let (shape, pitch) = match axis {
        Axis::X => (tip.shape(), tip.pitch().x),
        Axis::Y => (tip.shape().reversed_axes(), tip.pitch().y),
    };
    let fall = if slope.is_finite() {
        pitch / slope.max(0.02)
    } else {
        0.0
    };
    let fall = if outwards_positive { fall } else { -fall };
    let centre = (shape.ncols() / 2) as f64;
    // Height of each cell above the falling plane through the apex; the highest cell touches.
    let over = |c: usize, p: f32| f64::from(p) - (c as f64 - centre) * fall;
    let mut best = (f64::NEG_INFINITY, 0, 0);
    for ((r, c), &p) in shape.indexed_iter() {
        let value = over(c, p);
        if value > best.0 {
            best = (value, r, c);
        }
    }
    let (top, row, column) = best;
    let grid = if fall == 0.0 || column == 0 || column + 1 == shape.ncols() {
        0.0
    } else {
        let at = |c: usize| over(c, shape[[row, c]]);
        rise_to_vertex(at(column - 1), top, at(column + 1))
    };
    let mut gaps: Vec<f64> = Vec::new();
    if noise > 0.0 {
        gaps = shape
            .indexed_iter()
            .map(|((_, c), &p)| (top - over(c, p)) / noise)
            .filter(|gap| *gap < 7.0)
            .collect();
    }
    Bias {
        grid,
        noise: noise * expected_least(&gaps),
    }
}

/// How far the parabola through three equidistant heights rises above the middle, highest one.
fn rise_to_vertex(before: f64, middle: f64, after: f64) -> f64 {
    let curvature = 2.0 * middle - before - after;
    let rise = (after - before).powi(2) / (8.0 * curvature);
    // Outside the tip a neighbour is -inf: no parabola, no rise.
    if rise.is_finite() && curvature > 0.0 {
        rise
    } else {
        0.0
    }
}

/// Mean of `min (gap_i + n_i)` over independent standard normal `n_i`; 0 without any.
fn expected_least(gaps: &[f64]) -> f64 {
    if gaps.is_empty() {
        return 0.0;
    }
    const FROM: f64 = -6.0;
    const STEPS: usize = 90;
    let step = 0.1;
    // E = FROM + integral of P(min > y), trapezoidal; the integrand runs from 1 to 0.
    let survival = |y: f64| {
        let mut product = 1.0;
        for gap in gaps {
            product *= 0.5 * erfc((y - gap) / std::f64::consts::SQRT_2);
            if product < 1e-9 {
                return 0.0;
            }
        }
        product
    };
    let inner: f64 = (1..STEPS).map(|i| survival(FROM + step * i as f64)).sum();
    FROM + step * (0.5 + inner)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::heightmap::Pitch;
    use crate::tip::model::Model;

    /// Expected extremes of 9, 25, 100 and 1000 standard normals (tabulated, methods of order
    /// statistics, common practice).
    #[test]
    fn the_least_of_equal_constraints_is_the_normal_extreme() {
        for (n, extreme) in [
            (1, 0.0),
            (9, 1.485),
            (25, 1.965),
            (100, 2.508),
            (1000, 3.241),
        ] {
            let mean = expected_least(&vec![0.0; n]);
            assert!((mean + extreme).abs() < 2e-3, "{n}: {mean}");
        }
    }

    #[test]
    fn a_wall_is_eroded_less_than_a_flat_and_without_noise_nothing_is() {
        let model = Model::SphereCone {
            radius: 8.0,
            half_angle: 8.0,
        };
        let tip = model.sample(41.0, Pitch::square(1.0)).unwrap();
        let flat = bias(&tip, Axis::X, true, f64::INFINITY, 0.3);
        let wall = bias(&tip, Axis::X, true, 0.2, 0.3);
        assert!(
            flat.noise < wall.noise && wall.noise <= 0.0,
            "{flat:?} {wall:?}"
        );
        assert!(wall.grid > 0.0);
        let quiet = bias(&tip, Axis::Y, false, f64::INFINITY, 0.0);
        assert_eq!((quiet.noise, quiet.grid), (0.0, 0.0));
    }
}
