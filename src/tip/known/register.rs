//! Where the characterizer lies in the scan: position, rotation, base. Good enough for the fit to
//! take over.

use super::Formula;
use super::fit::{Pixel, cost};
use super::shape::Shape;
use super::state::{Place, State};
use crate::heightmap::HeightMap;
use ndarray::{Array2, ArrayView2};

/// Pixels looked at by the coarse search.
const ENOUGH: usize = 2500;
/// Round features used at most.
const MOST_FEATURES: usize = 40;

/// Why a scan does not show the shape, with what to do.
pub(super) struct Lost(pub String, pub &'static str);

/// Brings `state` to the pose that the scan shows.
pub(super) fn register(
    mut state: State,
    scan: &HeightMap,
    pixels: &[Pixel],
    noise: f64,
) -> Result<State, Lost> {
    if state.shape.is_straight() {
        straight(&mut state, scan, pixels, noise)?;
    } else {
        round(&mut state, scan, noise)?;
    }
    first_tip(&mut state, scan, pixels);
    neighbours(&mut state, pixels);
    Ok(state)
}

fn sample(pixels: &[Pixel], most: usize) -> Vec<Pixel> {
    // Stepping by about the golden section of the whole spreads the picks over rows and columns.
    let n = pixels.len();
    if n <= most {
        return pixels.to_vec();
    }
    (0..most)
        .map(|i| pixels[(i as f64 * 0.618_033_988_749_895 * n as f64) as usize % n])
        .collect()
}

fn quantile(sorted: &[f64], part: f64) -> f64 {
    let last = sorted.len().saturating_sub(1);
    sorted
        .get((part * last as f64) as usize)
        .copied()
        .unwrap_or(0.0)
}

/// Mean over 3 x 3 pixels, voids left out.
fn smooth(z: ArrayView2<'_, f32>) -> Array2<f64> {
    let (rows, columns) = z.dim();
    Array2::from_shape_fn((rows, columns), |(r, c)| {
        let (mut sum, mut n) = (0.0, 0.0);
        for i in r.saturating_sub(1)..(r + 2).min(rows) {
            for j in c.saturating_sub(1)..(c + 2).min(columns) {
                if !z[[i, j]].is_nan() {
                    sum += f64::from(z[[i, j]]);
                    n += 1.0;
                }
            }
        }
        sum / n
    })
}

fn straight(state: &mut State, scan: &HeightMap, pixels: &[Pixel], noise: f64) -> Result<(), Lost> {
    let few = sample(pixels, 4 * ENOUGH);
    let mut heights: Vec<f64> = few.iter().map(|p| p.z).collect();
    heights.sort_by(f64::total_cmp);
    let (low, high) = (quantile(&heights, 0.02), quantile(&heights, 0.98));
    if high - low < 6.0 * noise || high - low <= 0.0 {
        return Err(Lost(
            format!(
                "The scan's heights span {:.3} nm at a noise of {noise:.3} nm: no {} stands out.",
                high - low,
                state.shape.name()
            ),
            "Scan the characterizer where its edges lie well inside the scan.",
        ));
    }
    if !(state.height > 0.0) {
        state.height = high - low;
    }
    let turn = direction(scan, matches!(state.shape, Shape::Step { .. })).ok_or(Lost(
        "The scan shows no edge.".to_owned(),
        "Scan the characterizer where its edges lie well inside the scan.",
    ))?;
    let few = sample(pixels, ENOUGH);
    let px = scan.pitch().x.max(scan.pitch().y);
    let mut best = (f64::INFINITY, state.clone());
    for (radius, angle) in [(4.0 * px, 15.0), (12.0 * px, 25.0)] {
        for tenths in (-30..=30).step_by(5) {
            let mut tried = state.clone();
            tried.radius = radius;
            tried.faces = [angle; 4];
            tried.turn = turn + f64::from(tenths) / 10.0;
            let n = tried.normal();
            let far = few.iter().map(|p| (p.x * n[0] + p.y * n[1]).abs());
            let far = far.fold(0.0, f64::max);
            let (from, to) = match tried.pitch {
                Some(pitch) => (-pitch / 2.0, pitch / 2.0),
                None => (-far, far),
            };
            if let Some(pitch) = tried.pitch {
                let most = (far / pitch).ceil() as i64 + 1;
                tried.ridges = [-most, most];
            }
            let steps = ((to - from) / (3.0 * px)).clamp(40.0, 160.0) as usize;
            for i in 0..steps {
                tried.across = from + (to - from) * i as f64 / steps as f64;
                let (spread, base) = spread(&tried, &few);
                if spread < best.0 {
                    tried.base = base;
                    best = (spread, tried.clone());
                }
            }
        }
    }
    *state = best.1;
    standing(state, pixels);
    let shown = (best.0 / few.len() as f64).sqrt();
    // The scan's own spread about its mean: what "no characterizer" leaves.
    let nothing = {
        let mean = few.iter().map(|p| p.z).sum::<f64>() / few.len() as f64;
        let sum: f64 = few.iter().map(|p| (p.z - mean).powi(2)).sum();
        (sum / few.len() as f64).sqrt()
    };
    if shown > 0.9 * nothing {
        return Err(Lost(
            format!(
                "No {} of the certified shape was found in the scan.",
                state.shape.name()
            ),
            "Check width, height and pitch, and that the scan shows the characterizer.",
        ));
    }
    Ok(())
}

/// Sum of squares about the image and the base that makes it least.
fn spread(state: &State, pixels: &[Pixel]) -> (f64, f64) {
    let image = state.image();
    let (mut sum, mut squares) = (0.0, 0.0);
    for p in pixels {
        let off = p.z - image.above(p.x, p.y).0;
        sum += off;
        squares += off * off;
    }
    let n = pixels.len().max(1) as f64;
    (squares - sum * sum / n, sum / n)
}

/// Direction across the edges, degrees in -90..=90, or up the step, from the steep gradients.
fn direction(scan: &HeightMap, signed: bool) -> Option<f64> {
    let z = smooth(scan.heights());
    let (rows, columns) = z.dim();
    let pitch = scan.pitch();
    let mut gradients = Vec::new();
    for r in 1..rows.saturating_sub(1) {
        for c in 1..columns.saturating_sub(1) {
            let gx = (z[[r, c + 1]] - z[[r, c - 1]]) / (2.0 * pitch.x);
            let gy = (z[[r + 1, c]] - z[[r - 1, c]]) / (2.0 * pitch.y);
            if gx.is_finite() && gy.is_finite() {
                gradients.push((gx, gy));
            }
        }
    }
    let mut sizes: Vec<f64> = gradients.iter().map(|g| g.0.hypot(g.1)).collect();
    sizes.sort_by(f64::total_cmp);
    let steep = 0.5 * quantile(&sizes, 0.99);
    let (mut xx, mut xy, mut yy, mut x, mut y) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for (gx, gy) in gradients.into_iter().filter(|g| g.0.hypot(g.1) >= steep) {
        xx += gx * gx;
        xy += gx * gy;
        yy += gy * gy;
        x += gx;
        y += gy;
    }
    if !(xx + yy > 0.0) {
        return None;
    }
    let axis = 0.5 * (2.0 * xy).atan2(xx - yy);
    let (sin, cos) = axis.sin_cos();
    let turned = signed && x * cos + y * sin < 0.0;
    Some(axis.to_degrees() + if turned { 180.0 } else { 0.0 })
}

/// Bound of residuals while the tip is rough, nm: no single edge decides.
fn rough(state: &State) -> f64 {
    let top = state
        .places
        .iter()
        .map(|p| p.top)
        .fold(state.height, f64::max);
    (0.02 * top).max(1e-6)
}

/// Adds a ridge off the scan at either end where its flank shows at the scan's border.
fn neighbours(state: &mut State, pixels: &[Pixel]) {
    if state.pitch.is_none() {
        return;
    }
    let bound = rough(state);
    for (end, step) in [(0, -1), (1, 1)] {
        let without = cost(state, pixels, bound);
        state.ridges[end] += step;
        if cost(state, pixels, bound) >= without {
            state.ridges[end] -= step;
        }
    }
}

/// Which ridges really stand: drops those at the ends whose place is empty or off the scan.
fn standing(state: &mut State, pixels: &[Pixel]) {
    let Some(pitch) = state.pitch else { return };
    let n = state.normal();
    let mut heights = std::collections::BTreeMap::<i64, (f64, u32)>::new();
    for p in pixels {
        let along = p.x * n[0] + p.y * n[1] - state.across;
        let number = (along / pitch).round();
        if (along - number * pitch).abs() < 0.25 * state.width {
            let entry = heights.entry(number as i64).or_default();
            entry.0 += p.z - state.plane(p.x, p.y);
            entry.1 += 1;
        }
    }
    let stands = |(sum, count): &(f64, u32)| sum / f64::from((*count).max(1)) > 0.5 * state.height;
    let up: Vec<i64> = heights
        .iter()
        .filter(|(_, h)| stands(h))
        .map(|(number, _)| *number)
        .collect();
    if let (Some(&first), Some(&last)) = (up.first(), up.last()) {
        state.ridges = [first, last];
    }
}

fn round(state: &mut State, scan: &HeightMap, noise: f64) -> Result<(), Lost> {
    let z = smooth(scan.heights());
    let (rows, columns) = z.dim();
    let pitch = scan.pitch();
    let mut sorted: Vec<f64> = z.iter().copied().filter(|z| z.is_finite()).collect();
    sorted.sort_by(f64::total_cmp);
    let base = quantile(&sorted, 0.5).min(quantile(&sorted, 0.25) + 6.0 * noise);
    let highest = quantile(&sorted, 1.0) - base;
    let (least, most) = match state.shape {
        Shape::Sphere { diameter } => (0.7 * diameter.value, 1.3 * diameter.value),
        _ => ((0.4 * highest).max(8.0 * noise), f64::INFINITY),
    };
    let mut tops: Vec<(f64, usize, usize)> = Vec::new();
    for r in 3..rows.saturating_sub(3) {
        for c in 3..columns.saturating_sub(3) {
            let here = z[[r, c]];
            if !(here - base > least && here - base < most) {
                continue;
            }
            let mut around = (r - 2..r + 3).flat_map(|i| (c - 2..c + 3).map(move |j| (i, j)));
            if around.all(|at| !(z[at] > here)) {
                tops.push((here - base, r, c));
            }
        }
    }
    tops.sort_by(|a, b| b.0.total_cmp(&a.0).then((a.1, a.2).cmp(&(b.1, b.2))));
    let mut kept: Vec<(f64, usize, usize)> = Vec::new();
    for top in tops {
        if kept.len() >= MOST_FEATURES {
            break;
        }
        let own = kept.iter().all(|other| {
            let steps = top.1.abs_diff(other.1).max(top.2.abs_diff(other.2)).max(1);
            let between = (0..=steps).map(|i| {
                let t = i as f64 / steps as f64;
                let at = |a: usize, b: usize| (a as f64 + t * (b as f64 - a as f64)).round();
                z[[at(top.1, other.1) as usize, at(top.2, other.2) as usize]] - base
            });
            let saddle = between.fold(f64::INFINITY, f64::min);
            saddle < top.0 - (0.15 * top.0).max(3.0 * noise)
        });
        if own {
            kept.push(top);
        }
    }
    if kept.is_empty() {
        return Err(Lost(
            format!(
                "No {} was found: nothing stands between {least:.3} and {most:.3} nm above the \
                 base; the highest point is {highest:.3} nm.",
                state.shape.name()
            ),
            "Check the certified value, and that the scan shows the characterizer on a flat.",
        ));
    }
    state.base = base;
    state.places = kept
        .into_iter()
        .map(|(height, r, c)| Place {
            x: (c as f64 + 0.5) * pitch.x - scan.width_nm() / 2.0,
            y: (r as f64 + 0.5) * pitch.y - scan.length_nm() / 2.0,
            top: match state.shape {
                Shape::Sphere { diameter } => diameter.value,
                _ => height,
            },
        })
        .collect();
    Ok(())
}

/// The tip that fits best among a few, the pose held.
fn first_tip(state: &mut State, scan: &HeightMap, pixels: &[Pixel]) {
    let few = if state.shape.is_straight() {
        sample(pixels, 2 * ENOUGH)
    } else {
        // Round features cover little of a scan: only what lies near them tells.
        let near = |p: &&Pixel| {
            let reach = |t: &Place| 2.0 * state.corner.radius + 0.7 * t.top;
            let places = &state.places;
            places
                .iter()
                .any(|t| (p.x - t.x).hypot(p.y - t.y) < reach(t))
        };
        let near: Vec<Pixel> = pixels.iter().filter(near).copied().collect();
        sample(&near, 2 * ENOUGH)
    };
    let px = (scan.pitch().x * scan.pitch().y).sqrt();
    let radii: &[f64] = match state.formula {
        Formula::Pyramid => &[0.0],
        _ => &[1.0, 2.0, 4.0, 7.0, 12.0, 20.0, 35.0, 60.0],
    };
    let angles: &[f64] = match state.formula {
        Formula::Paraboloid => &[20.0],
        _ => &[6.0, 11.0, 16.0, 22.0, 30.0, 42.0],
    };
    let bound = rough(state);
    let mut best = (f64::INFINITY, state.radius, state.faces);
    for radius in radii {
        for angle in angles {
            state.radius = radius * px;
            state.faces = [*angle; 4];
            let cost = cost(state, &few, bound);
            if cost < best.0 {
                best = (cost, state.radius, state.faces);
            }
        }
    }
    (state.radius, state.faces) = (best.1, best.2);
}
