//! The ghost tip: the tip in contact under the pointer, and where it touches.

use super::stages::Outcome;

/// The tip standing on the surface at one scan pixel.
#[derive(Debug, Clone, PartialEq)]
pub struct GhostTip {
    /// Scan pixel (row, column) of the apex's lateral position.
    pub apex: (usize, usize),
    /// Height of the apex, nm: the scan's value there.
    pub apex_height_nm: f32,
    /// Surface pixels (row, column) in contact within the tolerance; empty where noise lifts the
    /// scan above anything the tip could have touched.
    pub contacts: Vec<(usize, usize)>,
}

/// The ghost tip at a scan pixel; `None` where the scan is void, off the map, or there is no
/// surface yet.
pub fn ghost_tip(outcome: &Outcome, row: usize, column: usize) -> Option<GhostTip> {
    let (level, tip, surface) = (
        outcome.level.as_ref()?,
        outcome.tip.as_ref()?,
        outcome.surface.as_ref()?,
    );
    let height = *level.map.heights().get((row, column))?;
    if height.is_nan() {
        return None;
    }
    let shape = tip.tip.shape();
    let heights = surface.surface.heights();
    let reach = height - surface.tolerance_nm as f32;
    let contacts = shape
        .indexed_iter()
        .filter_map(|((i, j), &p)| {
            let r = (row + i).checked_sub(shape.nrows() / 2)?;
            let c = (column + j).checked_sub(shape.ncols() / 2)?;
            let s = heights.get((r, c))?;
            (s + p >= reach).then_some((r, c))
        })
        .collect();
    Some(GhostTip {
        apex: (row, column),
        apex_height_nm: height,
        contacts,
    })
}
