//! The plain twins: obviously right, slow.

use super::Contacts;
use super::certainty::{BOUNDED, NEVER, TOUCHED, VOID};
use ndarray::{Array2, ArrayView2};

/// Every tip cell inside the tip as `(dr, dc, p)`, row-major.
fn cells(tip: ArrayView2<f32>) -> Vec<(isize, isize, f32)> {
    let (cr, cc) = (tip.nrows() as isize / 2, tip.ncols() as isize / 2);
    tip.indexed_iter()
        .filter(|(_, p)| p.is_finite())
        .map(|((i, j), &p)| (i as isize - cr, j as isize - cc, p))
        .collect()
}

/// The height there; none outside the map or where void.
fn get(map: ArrayView2<f32>, r: isize, c: isize) -> Option<f32> {
    (r >= 0 && c >= 0)
        .then(|| map.get((r as usize, c as usize)).copied())
        .flatten()
        .filter(|z| z.is_finite())
}

pub(super) fn dilate(surface: ArrayView2<f32>, tip: ArrayView2<f32>) -> Array2<f32> {
    contacts(surface, tip).heights
}

pub(super) fn erode(scan: ArrayView2<f32>, tip: ArrayView2<f32>) -> Array2<f32> {
    let cells = cells(tip);
    Array2::from_shape_fn(scan.dim(), |(r, c)| {
        cells
            .iter()
            .filter_map(|&(dr, dc, p)| Some(get(scan, r as isize - dr, c as isize - dc)? - p))
            .reduce(f32::min)
            // Adding zero makes -0 a plain 0.
            .map_or(f32::NAN, |v| v + 0.0)
    })
}

pub(super) fn contacts(surface: ArrayView2<f32>, tip: ArrayView2<f32>) -> Contacts {
    let mut cells = cells(tip);
    // A stable sort keeps row-major order among equals; a later cell must win by more.
    cells.sort_by_key(|&(dr, dc, _)| dr * dr + dc * dc);
    let best = |r: usize, c: usize| {
        let mut best = (f32::NAN, [i16::MIN; 2]);
        for &(dr, dc, p) in &cells {
            if let Some(s) = get(surface, r as isize + dr, c as isize + dc) {
                let v = s + p;
                if v > best.0 || best.0.is_nan() {
                    best = (v + 0.0, [dr as i16, dc as i16]);
                }
            }
        }
        best
    };
    let both = Array2::from_shape_fn(surface.dim(), |(r, c)| best(r, c));
    Contacts {
        heights: both.mapv(|b| b.0),
        offsets: both.mapv(|b| b.1),
    }
}

pub(super) fn certainty_map(
    surface: ArrayView2<f32>,
    scan: ArrayView2<f32>,
    tip: ArrayView2<f32>,
    tolerance: f32,
    spread: [usize; 2],
) -> Array2<u8> {
    let cells = cells(tip);
    let mut map = surface.mapv(|s| if s.is_finite() { NEVER } else { VOID });
    let contacts: Vec<Vec<(usize, usize)>> = scan
        .indexed_iter()
        .filter(|(_, height)| height.is_finite())
        .map(|((r, c), height)| {
            cells
                .iter()
                .map(|&(dr, dc, p)| (r as isize + dr, c as isize + dc, p))
                .filter(|&(sr, sc, p)| {
                    get(surface, sr, sc)
                        .is_some_and(|s| s.is_finite() && s + p >= height - tolerance)
                })
                .map(|(sr, sc, _)| (sr as usize, sc as usize))
                .collect()
        })
        .collect();
    let range = |values: &mut dyn Iterator<Item = usize>| {
        let (low, high) = values.fold((usize::MAX, 0), |(l, h), v| (l.min(v), h.max(v)));
        high.saturating_sub(low)
    };
    let sole = |touched: &[(usize, usize)]| {
        range(&mut touched.iter().map(|t| t.0)) <= spread[0]
            && range(&mut touched.iter().map(|t| t.1)) <= spread[1]
    };
    for touched in contacts.iter().filter(|touched| sole(touched)) {
        touched.iter().for_each(|&at| map[at] = TOUCHED);
    }
    for touched in contacts.iter().filter(|touched| !sole(touched)) {
        if touched.iter().all(|&at| map[at] != TOUCHED) {
            touched.iter().for_each(|&at| map[at] = BOUNDED);
        }
    }
    let sole = map.clone();
    for ((r, c), mark) in map.indexed_iter_mut().filter(|(_, mark)| **mark != VOID) {
        for ((sr, sc), _) in sole.indexed_iter().filter(|(_, mark)| **mark == TOUCHED) {
            let near = r.abs_diff(sr) <= spread[0] / 2 && c.abs_diff(sc) <= spread[1] / 2;
            if near && (surface[(r, c)] - surface[(sr, sc)]).abs() <= tolerance {
                *mark = TOUCHED;
            }
        }
    }
    map
}

pub(super) fn edge_leaning(
    scan: ArrayView2<f32>,
    surface: ArrayView2<f32>,
    tip: ArrayView2<f32>,
) -> Array2<bool> {
    let cells = cells(tip);
    let lowest = scan
        .iter()
        .copied()
        .filter(|z| z.is_finite())
        .fold(f32::INFINITY, f32::min);
    Array2::from_shape_fn(surface.dim(), |(r, c)| {
        let here = surface[(r, c)];
        cells.iter().any(|&(dr, dc, p)| {
            let unseen = get(scan, r as isize - dr, c as isize - dc).is_none();
            // A void surface pixel leans on nothing; NaN compares false.
            unseen && lowest - p < here
        })
    })
}
