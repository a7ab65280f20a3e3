//! The tip as the scan shows it, without a formula: erosion by the known surface,
//! `t(v) = max over x of [Sc(x + v) - I(x)]`.
//!
//! Every image point tells `t(v) >= Sc(x + v) - I(x)`, so without noise the tip lies inside the
//! result, and meets it wherever the characterizer touched it. Noise would push a maximum up; so
//! pixels that show the same place of the shape are averaged first, and what is left of the push
//! at the apex is taken off everywhere. Source: Villarrubia, J. Res. NIST 102, 425 (1997),
//! erosion by a known surface (from memory).

use super::fit::Pixel;
use super::state::{Seen, State};
use crate::error::Result;
use crate::heightmap::Pitch;
use crate::progress::Progress;
use crate::tip::Tip;
use crate::tip::read_out::{ReadOut, read_out};
use ndarray::Array2;
use rayon::prelude::*;
use std::collections::BTreeMap;

/// The free-form tip.
#[derive(Debug, Clone)]
pub struct FreeForm {
    /// On the grid asked for; what no contact determined is outside the tip. From ridges and steps
    /// the section across, turned about the axis, each side for its half.
    pub tip: Tip,
    /// The section across ridges or a step: signed distance from the apex along the direction
    /// across, height above the apex, nm. Empty for spheres and spikes.
    pub section: Vec<(f64, f64)>,
    /// Apex radius and half-angle read off it.
    pub read_out: ReadOut,
    /// Standard uncertainty of its heights, nm: the averaged heights', and what noise may have left
    /// of its push.
    pub height_u_nm: f64,
}

/// Pixels that show the same place of the shape.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Cell {
    /// Mean position: across, or x and y from the axis.
    pub x: f64,
    pub y: f64,
    /// Mean height above the base, or below the top for round features.
    pub height: f64,
    /// Mean residual of the fit and mean square of it.
    pub residual: f64,
    pub square: f64,
    pub count: f64,
    /// Whether edges, not flats, show here.
    pub edge: bool,
}

/// Averages the pixels by the place of the shape that they show.
pub(super) fn stack(state: &State, pixels: &[Pixel], px: f64) -> Vec<Cell> {
    let image = state.image();
    let is_straight = state.shape.is_straight();
    let mut cells = BTreeMap::<(i64, i64), Cell>::new();
    for p in pixels {
        let (above, seen) = image.above(p.x, p.y);
        let z = p.z - state.plane(p.x, p.y);
        let (key, x, y, height, top) = if is_straight {
            let across = state.across_of(p.x, p.y);
            let key = ((across / (0.25 * px)).floor() as i64, 0);
            (key, across, 0.0, z, state.height)
        } else {
            let Seen::Feature(k) = seen else { continue };
            let place = state.places[k];
            let (x, y) = (p.x - place.x, p.y - place.y);
            let key = ((x / px).round() as i64, (y / px).round() as i64);
            (key, x, y, z - place.top, place.top)
        };
        let residual = z - above;
        let cell = cells.entry(key).or_default();
        cell.x += x;
        cell.y += y;
        cell.height += height;
        cell.residual += residual;
        cell.square += residual * residual;
        cell.count += 1.0;
        // Not the foot, where base and flank compete for the contact.
        cell.edge |= above > 0.1 * top && above < 0.99 * top;
    }
    let mean = |c: Cell| Cell {
        x: c.x / c.count,
        y: c.y / c.count,
        height: c.height / c.count,
        residual: c.residual / c.count,
        square: c.square / c.count,
        ..c
    };
    cells.into_values().map(mean).collect()
}

/// The free-form tip on a grid of `half` cells to each side; `depth` is how deep contacts reach,
/// `sd` the standard deviation of a pixel.
pub(super) fn free_form(
    state: &State,
    cells: &[Cell],
    depth: f64,
    sd: f64,
    pitch: Pitch,
    half: [usize; 2],
    progress: &Progress,
) -> Result<FreeForm> {
    let mut counts: Vec<f64> = cells.iter().filter(|c| c.edge).map(|c| c.count).collect();
    counts.sort_by(f64::total_cmp);
    let usual = counts.get(counts.len() / 2).copied().unwrap_or(1.0);
    let averaged = sd / usual.sqrt();
    let (section, shape, push) = if state.shape.is_straight() {
        let reach = (half[1] as f64 * pitch.x).hypot(half[0] as f64 * pitch.y);
        let step = 0.5 * pitch.x.min(pitch.y);
        let (section, push) = section(state, cells, step, reach, depth);
        let shape = turned(state, &section, pitch, half);
        (section, shape, push)
    } else {
        let (shape, push) = round(state, cells, pitch, half, progress)?;
        (Vec::new(), shape, push)
    };
    // Where fewer contacts compete than at the apex the push is less: it is known to its half.
    let height_u_nm = averaged.hypot(push / 2.0);
    progress.check()?;
    let mut shape = shape.mapv(|t| {
        if t <= depth {
            (0.0 - t.max(0.0)) as f32
        } else {
            f32::NEG_INFINITY
        }
    });
    shape[[half[0], half[1]]] = 0.0;
    let tip = Tip::new(shape, pitch)?;
    let read_out = read_out(&tip, 0.98 * tip.depth_nm(), height_u_nm);
    Ok(FreeForm {
        tip,
        section,
        read_out,
        height_u_nm,
    })
}

/// Heights of the averaged image at equal steps across.
struct Profile {
    at: Vec<(f64, f64)>,
}

impl Profile {
    fn look(&self, x: f64) -> Option<f64> {
        let i = self.at.partition_point(|c| c.0 < x);
        let (a, b) = (self.at.get(i.checked_sub(1)?)?, self.at.get(i)?);
        let t = (x - a.0) / (b.0 - a.0).max(f64::MIN_POSITIVE);
        Some(a.1 + t * (b.1 - a.1))
    }
}

/// `(v, t(v))` over the offsets across that contacts determine, around 0, and what noise pushed
/// the apex up by, taken off already.
fn section(
    state: &State,
    cells: &[Cell],
    step: f64,
    reach: f64,
    depth: f64,
) -> (Vec<(f64, f64)>, f64) {
    let image = Profile {
        at: cells.iter().map(|c| (c.x, c.height)).collect(),
    };
    // Just inside the edges a vertical wall's height is still there.
    let shoulder = state.shoulder() + state.corner.radius - 1e-6;
    let edges: Vec<f64> = if matches!(state.shape, super::Shape::Ridges { .. }) {
        vec![-shoulder, shoulder]
    } else {
        vec![-shoulder]
    };
    let height = |v: f64| {
        let of_cells = image
            .at
            .iter()
            .map(|&(x, z)| state.surface_across(x + v) - z);
        let of_edges = edges
            .iter()
            .filter_map(|e| Some(state.surface_across(*e) - image.look(e - v)?));
        of_cells.chain(of_edges).fold(f64::NEG_INFINITY, f64::max)
    };
    let push = height(0.0);
    let mut sides = Vec::new();
    for sign in [-1.0, 1.0] {
        let mut side = Vec::new();
        for i in 1..=(reach / step).ceil() as usize {
            let v = sign * i as f64 * step;
            let t = (height(v) - push).max(0.0);
            if t > depth {
                break;
            }
            side.push((v, t));
        }
        sides.push(side);
    }
    let up = sides.pop().unwrap_or_default();
    let mut section = sides.pop().unwrap_or_default();
    // A step shows the side towards its top only.
    if !matches!(state.shape, super::Shape::Ridges { .. }) {
        section.clear();
    }
    section.reverse();
    section.push((0.0, 0.0));
    section.extend(up);
    (section, push)
}

/// The section turned about the apex: each half-plane has its own side, a single side serves both.
fn turned(state: &State, section: &[(f64, f64)], pitch: Pitch, half: [usize; 2]) -> Array2<f64> {
    let n = state.normal();
    let profile = Profile {
        at: section.to_vec(),
    };
    let both = section.first().is_some_and(|p| p.0 < 0.0);
    Array2::from_shape_fn((2 * half[0] + 1, 2 * half[1] + 1), |(r, c)| {
        let x = (c as f64 - half[1] as f64) * pitch.x;
        let y = (r as f64 - half[0] as f64) * pitch.y;
        let d = x.hypot(y);
        let across = x * n[0] + y * n[1];
        if d == 0.0 {
            return 0.0;
        }
        let look = |d: f64| profile.look(d).unwrap_or(f64::INFINITY);
        if !both {
            return look(d);
        }
        // From one side's section to the other's by the angle to the direction across.
        let part = 0.5 * (1.0 + across / d);
        if part >= 1.0 {
            look(d)
        } else if part <= 0.0 {
            look(-d)
        } else {
            part * look(d) + (1.0 - part) * look(-d)
        }
    })
}

/// `t` on the grid, and what noise pushed the apex up by, taken off already.
fn round(
    state: &State,
    cells: &[Cell],
    pitch: Pitch,
    half: [usize; 2],
    progress: &Progress,
) -> Result<(Array2<f64>, f64)> {
    let least = state.places.iter().map(|p| p.top);
    let lowest = least.fold(f64::INFINITY, f64::min);
    let surface = |d: f64| {
        let drop = state.corner.surface(d);
        if drop <= lowest {
            -drop
        } else {
            f64::NEG_INFINITY
        }
    };
    let height = |vx: f64, vy: f64| {
        cells
            .iter()
            .map(|c| surface((c.x + vx).hypot(c.y + vy)) - c.height)
            .fold(f64::NEG_INFINITY, f64::max)
    };
    let push = height(0.0, 0.0);
    let rows: Vec<Vec<f64>> = (0..2 * half[0] + 1)
        .into_par_iter()
        .map(|r| {
            progress.check()?;
            let y = (r as f64 - half[0] as f64) * pitch.y;
            Ok((0..2 * half[1] + 1)
                .map(|c| height((c as f64 - half[1] as f64) * pitch.x, y) - push)
                .collect())
        })
        .collect::<Result<_>>()?;
    let shape = (2 * half[0] + 1, 2 * half[1] + 1);
    Ok((Array2::from_shape_fn(shape, |(r, c)| rows[r][c]), push))
}
