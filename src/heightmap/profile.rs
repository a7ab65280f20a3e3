//! Heights along a line.

use super::HeightMap;

/// Heights along a straight line: `position_nm[i]` from the line's start, `height_nm[i]` there.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Profile {
    /// Distance from the start of the line, nm, increasing.
    pub position_nm: Vec<f64>,
    /// Height, nm; NaN where void or outside the map.
    pub height_nm: Vec<f32>,
}

pub(super) fn sample(map: &HeightMap, from: (f64, f64), to: (f64, f64)) -> Profile {
    let (dx, dy) = (to.0 - from.0, to.1 - from.1);
    let length = dx.hypot(dy);
    let step = map.pitch().x.min(map.pitch().y);
    let count = (length / step).ceil() as usize + 1;
    let at = |i: usize| {
        if count == 1 {
            0.0
        } else {
            i as f64 / (count - 1) as f64
        }
    };
    Profile {
        position_nm: (0..count).map(|i| at(i) * length).collect(),
        height_nm: (0..count)
            .map(|i| map.height_at(from.0 + at(i) * dx, from.1 + at(i) * dy))
            .collect(),
    }
}

#[cfg(test)]
mod tests {
    use super::super::{HeightMap, Pitch};

    #[test]
    fn a_profile_across_a_ramp_is_the_ramp() {
        let map = HeightMap::from_fn(4, 50, Pitch::square(2.0), |x, _| 3.0 * x).unwrap();
        let profile = map.profile((1.0, 4.0), (99.0, 4.0));
        assert_eq!(profile.position_nm.len(), 50);
        for (p, z) in profile.position_nm.iter().zip(&profile.height_nm) {
            assert!((f64::from(*z) - 3.0 * (p + 1.0)).abs() < 1e-3);
        }
    }

    #[test]
    fn a_line_of_no_length_is_one_point() {
        let map = HeightMap::from_fn(4, 5, Pitch::square(2.0), |_, _| 1.0).unwrap();
        let profile = map.profile((3.0, 4.0), (3.0, 4.0));
        assert_eq!((profile.position_nm.len(), profile.height_nm[0]), (1, 1.0));
    }
}
