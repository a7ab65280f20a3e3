//! The forms that have walls: their parameters and cross-sections.

use super::profile::{Section, Wall};

/// Parameters of a form, in this order; a form uses some of them.
pub(super) const OUTER: usize = 0;
pub(super) const TILT: usize = 1;
pub(super) const HEIGHT: usize = 2;
pub(super) const CENTRE: usize = 3;
pub(super) const TOP_WIDTH: usize = 4;
pub(super) const RUN: [usize; 2] = [5, 6];
pub(super) const UPPER: usize = 7;
pub(super) const LOWER: usize = 8;
pub(super) const PITCH: usize = 9;
pub(super) const COUNT: usize = 10;

pub(super) type Parameters = [f64; COUNT];

/// What stands in the region.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Form {
    Step { rising: bool },
    Feature { ridge: bool },
    Grating { first: i32, last: i32 },
}

impl Form {
    pub(super) fn name(self) -> &'static str {
        match self {
            Self::Step { .. } => "step with a sloped wall and rounded corners",
            Self::Feature { ridge: true } => "line: trapezoid with rounded corners",
            Self::Feature { ridge: false } => "trench: trapezoid with rounded corners",
            Self::Grating { .. } => "grating of equal trapezoids with rounded corners",
        }
    }

    /// Whether the outer level is the lower one.
    pub(super) fn ridge(self) -> bool {
        self != Self::Feature { ridge: false }
    }

    /// The parameters that it has, corners apart.
    pub(super) fn free(self) -> Vec<usize> {
        let common = [OUTER, TILT, HEIGHT, CENTRE];
        let own: &[usize] = match self {
            Self::Step { rising: true } => &[RUN[0]],
            Self::Step { rising: false } => &[RUN[1]],
            Self::Feature { .. } => &[TOP_WIDTH, RUN[0], RUN[1]],
            Self::Grating { .. } => &[TOP_WIDTH, RUN[0], RUN[1], PITCH],
        };
        common.iter().chain(own).copied().collect()
    }

    pub(super) fn runs(self) -> &'static [usize] {
        match self {
            Self::Step { rising: true } => &RUN[..1],
            Self::Step { rising: false } => &RUN[1..],
            _ => &RUN,
        }
    }

    /// Whether the tip meets wall `side` with its side of positive offsets: it stands before a
    /// rising wall.
    pub(super) fn meets(self, side: usize) -> bool {
        (side == 0) == self.ridge()
    }

    /// The wall with run number `side`; lengths are taken positive, whatever the fit tries.
    pub(super) fn wall(p: &Parameters, side: usize) -> Wall {
        Wall {
            height: p[HEIGHT].abs().max(1e-6),
            run: p[RUN[side]].abs(),
            upper: p[UPPER].abs(),
            lower: p[LOWER].abs(),
        }
    }

    /// The edges from left to right: position of the upper virtual corner, side, rising.
    fn edges(self, p: &Parameters) -> Vec<(f64, usize, bool)> {
        let half = p[TOP_WIDTH].abs() / 2.0;
        let pair = |centre: f64| [(centre - half, 0, true), (centre + half, 1, false)];
        match self {
            Self::Step { rising } => vec![(p[CENTRE], usize::from(!rising), rising)],
            Self::Feature { ridge: true } => pair(p[CENTRE]).to_vec(),
            Self::Feature { ridge: false } => {
                vec![(p[CENTRE] - half, 0, false), (p[CENTRE] + half, 1, true)]
            }
            Self::Grating { first, last } => (first..=last)
                .flat_map(|k| pair(p[CENTRE] + f64::from(k) * p[PITCH]))
                .collect(),
        }
    }

    /// The cross-section over `span`; the tilt turns about the span's middle.
    pub(super) fn section(self, p: &Parameters, span: [f64; 2]) -> Section {
        let height = p[HEIGHT].abs();
        let low = if self.ridge() {
            p[OUTER]
        } else {
            p[OUTER] - height
        };
        let middle = (span[0] + span[1]) / 2.0;
        let edges = self.edges(p);
        let mut section = Section::default();
        let mut push = |x: f64, z: f64| section.push(x, low + z + p[TILT] * (x - middle));
        let level = |high: bool| if high { height } else { 0.0 };
        let starts_high = edges.first().is_some_and(|e| !e.2);
        let ends_high = edges.last().is_some_and(|e| e.2);
        let first = edges.first().map_or(span[0], |e| e.0);
        push(span[0].min(first - 2.0 * height), level(starts_high));
        for (at, side, rising) in edges {
            let vertices = Self::wall(p, side).vertices();
            if rising {
                vertices.iter().rev().for_each(|v| push(at - v.0, v.1));
            } else {
                vertices.iter().for_each(|v| push(at + v.0, v.1));
            }
        }
        push(span[1], level(ends_high));
        section
    }

    /// Width at a height fraction; the sign of the walls' slope is that of the form.
    pub(super) fn width(self, p: &Parameters, fraction: f64) -> f64 {
        let out = (0..2)
            .map(|k| Self::wall(p, k).outwards(fraction))
            .sum::<f64>();
        let sign = if self.ridge() { 1.0 } else { -1.0 };
        p[TOP_WIDTH].abs() + sign * out
    }
}
