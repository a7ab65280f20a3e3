//! Colours of the window: the height ramp, the marks of the two themes, the patterns.
//!
//! The ramp is a path through Oklab (B. Ottosson, "A perceptual color space for image
//! processing", 2020) whose lightness rises evenly from dark to light, so that equal steps of
//! height look like equal steps with any colour vision.

use eframe::egui::{Color32, Ui};
use std::sync::LazyLock;

/// Control points of the ramp: lightness, chroma, hue in degrees. Ink, slate, sage, sand, shell.
const PATH: [[f64; 3]; 5] = [
    [0.20, 0.065, 285.0],
    [0.40, 0.080, 250.0],
    [0.60, 0.075, 195.0],
    [0.79, 0.080, 110.0],
    [0.96, 0.030, 80.0],
];

/// Number of colours in the ramp.
pub const STEPS: usize = 256;

static RAMP: LazyLock<[Color32; STEPS]> = LazyLock::new(|| {
    let mut colours = [Color32::BLACK; STEPS];
    for (colour, lab) in colours.iter_mut().zip(even_path()) {
        *colour = to_colour(lab);
    }
    colours
});

/// Linear sRGB of an Oklab colour, unclamped.
fn linear_srgb([lightness, a, b]: [f64; 3]) -> [f64; 3] {
    let l = (lightness + 0.396_337_777_4 * a + 0.215_803_757_3 * b).powi(3);
    let m = (lightness - 0.105_561_345_8 * a - 0.063_854_172_8 * b).powi(3);
    let s = (lightness - 0.089_484_177_5 * a - 1.291_485_548_0 * b).powi(3);
    [
        4.076_741_662_1 * l - 3.307_711_591_3 * m + 0.230_969_929_2 * s,
        -1.268_438_004_6 * l + 2.609_757_401_1 * m - 0.341_319_396_5 * s,
        -0.004_196_086_3 * l - 0.703_418_614_7 * m + 1.707_614_701_0 * s,
    ]
}

fn to_colour(lab: [f64; 3]) -> Color32 {
    let [r, g, b] = linear_srgb(lab).map(|c| {
        let c = c.clamp(0.0, 1.0);
        let gamma = if c <= 0.003_130_8 {
            12.92 * c
        } else {
            1.055 * c.powf(1.0 / 2.4) - 0.055
        };
        (gamma * 255.0).round() as u8
    });
    Color32::from_rgb(r, g, b)
}

fn distance(p: [f64; 3], q: [f64; 3]) -> f64 {
    p.iter()
        .zip(q)
        .map(|(a, b)| (a - b).powi(2))
        .sum::<f64>()
        .sqrt()
}

/// The path resampled at equal Oklab distances.
fn even_path() -> Vec<[f64; 3]> {
    let points = PATH.map(|[l, c, h]| {
        let (sin, cos) = h.to_radians().sin_cos();
        [l, c * cos, c * sin]
    });
    const FINE: usize = 400;
    let fine: Vec<[f64; 3]> = points
        .windows(2)
        .flat_map(|pair| {
            (0..FINE).map(|i| {
                let t = i as f64 / FINE as f64;
                std::array::from_fn(|k| pair[0][k] + t * (pair[1][k] - pair[0][k]))
            })
        })
        .chain(std::iter::once(points[points.len() - 1]))
        .collect();
    let mut along = vec![0.0];
    for pair in fine.windows(2) {
        along.push(along[along.len() - 1] + distance(pair[0], pair[1]));
    }
    let whole = along[along.len() - 1];
    (0..STEPS)
        .map(|i| {
            let wanted = whole * i as f64 / (STEPS - 1) as f64;
            let next = along.partition_point(|&s| s < wanted);
            fine[next.min(fine.len() - 1)]
        })
        .collect()
}

/// The ramp, lowest height first.
pub fn ramp() -> &'static [Color32; STEPS] {
    &RAMP
}

/// The ramp's colour at `t` in 0..=1; beyond the ends the end's colour.
pub fn ramp_at(t: f64) -> Color32 {
    RAMP[(t.clamp(0.0, 1.0) * (STEPS - 1) as f64).round() as usize]
}

/// Colours of marks and surfaces in one theme.
pub struct Palette {
    /// Behind everything.
    pub desk: Color32,
    /// Panels beside the desk.
    pub panel: Color32,
    /// Behind a map or a plot.
    pub well: Color32,
    /// Hairlines.
    pub line: Color32,
    /// Text.
    pub text: Color32,
    /// Secondary text.
    pub faint: Color32,
    /// What can be pressed or is chosen.
    pub accent: Color32,
    /// Behind what is chosen.
    pub chosen: Color32,
    /// Buttons.
    pub button: Color32,
    /// Buttons under the pointer.
    pub button_hot: Color32,
    /// The as-scanned curve.
    pub scanned: Color32,
    /// The corrected curve.
    pub corrected: Color32,
    /// The ghost tip.
    pub ghost: Color32,
    /// All is well.
    pub good: Color32,
    /// Look here.
    pub warn: Color32,
    /// Something failed.
    pub bad: Color32,
}

const DARK: Palette = Palette {
    desk: Color32::from_rgb(0x17, 0x1a, 0x1e),
    panel: Color32::from_rgb(0x1f, 0x23, 0x28),
    well: Color32::from_rgb(0x11, 0x13, 0x16),
    line: Color32::from_rgb(0x37, 0x3d, 0x45),
    text: Color32::from_rgb(0xe2, 0xe5, 0xe8),
    faint: Color32::from_rgb(0xa3, 0xac, 0xb5),
    accent: Color32::from_rgb(0x6f, 0xc3, 0xc9),
    chosen: Color32::from_rgb(0x25, 0x4b, 0x52),
    button: Color32::from_rgb(0x2e, 0x34, 0x3b),
    button_hot: Color32::from_rgb(0x3b, 0x43, 0x4c),
    scanned: Color32::from_rgb(0xf0, 0xa9, 0x5b),
    corrected: Color32::from_rgb(0x6c, 0xc6, 0xee),
    ghost: Color32::from_rgb(0xc3, 0xb4, 0xe6),
    good: Color32::from_rgb(0x84, 0xcf, 0xa0),
    warn: Color32::from_rgb(0xf2, 0xbd, 0x5c),
    bad: Color32::from_rgb(0xf2, 0x8b, 0x7d),
};

const LIGHT: Palette = Palette {
    desk: Color32::from_rgb(0xf1, 0xf2, 0xf1),
    panel: Color32::from_rgb(0xfa, 0xfa, 0xf9),
    well: Color32::from_rgb(0xff, 0xff, 0xff),
    line: Color32::from_rgb(0xcf, 0xd4, 0xd6),
    text: Color32::from_rgb(0x1f, 0x27, 0x2c),
    faint: Color32::from_rgb(0x55, 0x60, 0x68),
    accent: Color32::from_rgb(0x0c, 0x65, 0x70),
    chosen: Color32::from_rgb(0xc9, 0xe4, 0xe6),
    button: Color32::from_rgb(0xe5, 0xe8, 0xe8),
    button_hot: Color32::from_rgb(0xd6, 0xdc, 0xdd),
    scanned: Color32::from_rgb(0xa8, 0x55, 0x0b),
    corrected: Color32::from_rgb(0x0f, 0x62, 0x96),
    ghost: Color32::from_rgb(0x6a, 0x54, 0xa3),
    good: Color32::from_rgb(0x1d, 0x6b, 0x3e),
    warn: Color32::from_rgb(0x8a, 0x58, 0x00),
    bad: Color32::from_rgb(0xa8, 0x2a, 0x1c),
};

impl Palette {
    /// The palette of a theme.
    pub fn of_theme(dark: bool) -> &'static Self {
        if dark { &DARK } else { &LIGHT }
    }

    /// The palette in use.
    pub fn of(ui: &Ui) -> &'static Self {
        Self::of_theme(ui.visuals().dark_mode)
    }
}

/// What a pattern means.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Pattern {
    /// A contact only together with others: dots.
    Bounded,
    /// Never a contact: slanted hatch.
    Never,
    /// Void: crosses.
    Void,
}

const EDGE: Color32 = Color32::from_rgba_premultiplied(8, 8, 10, 190);
const BOUNDED: Color32 = Color32::from_rgb(0xff, 0xd2, 0x6b);
const NEVER: Color32 = Color32::from_rgb(0xff, 0x6f, 0x91);
const VOID: Color32 = Color32::from_rgb(0x8c, 0x93, 0x99);

impl Pattern {
    /// The pattern's colour at a device pixel; clear between the marks. Every mark has a dark rim
    /// so that it shows on any colour of the ramp.
    pub fn at(self, x: i32, y: i32) -> Color32 {
        match self {
            Self::Bounded => {
                // Dots on a staggered grid.
                let row = y.div_euclid(6);
                let dx = (x + 5 * (row & 1)).rem_euclid(10) - 4;
                let dy = y.rem_euclid(6) - 2;
                match dx * dx + dy * dy {
                    0..=2 => BOUNDED,
                    3..=5 => EDGE,
                    _ => Color32::TRANSPARENT,
                }
            }
            Self::Never => match (x + y).rem_euclid(9) {
                0 | 3 => EDGE,
                1 | 2 => NEVER,
                _ => Color32::TRANSPARENT,
            },
            Self::Void => {
                let (p, q) = ((x + y).rem_euclid(12), (x - y).rem_euclid(12));
                if p == 0 || q == 0 {
                    VOID
                } else {
                    Color32::TRANSPARENT
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_ramp_rises_evenly_and_stays_in_gamut() {
        let path = even_path();
        let steps: Vec<f64> = path.windows(2).map(|p| distance(p[0], p[1])).collect();
        let mean = steps.iter().sum::<f64>() / steps.len() as f64;
        for (pair, step) in path.windows(2).zip(&steps) {
            assert!(pair[1][0] > pair[0][0], "lightness falls");
            assert!((step / mean - 1.0).abs() < 0.25, "uneven step {step}");
        }
        for lab in path {
            for channel in linear_srgb(lab) {
                assert!((-0.001..=1.001).contains(&channel), "{lab:?}: {channel}");
            }
        }
    }

    #[test]
    fn oklab_white_and_black_are_white_and_black() {
        assert_eq!(to_colour([1.0, 0.0, 0.0]), Color32::WHITE);
        assert_eq!(to_colour([0.0, 0.0, 0.0]), Color32::BLACK);
    }

    /// Relative luminance and contrast as in WCAG 2 (from memory).
    fn contrast(a: Color32, b: Color32) -> f64 {
        let luminance = |c: Color32| {
            let lin = |v: u8| {
                let v = f64::from(v) / 255.0;
                if v <= 0.04045 {
                    v / 12.92
                } else {
                    ((v + 0.055) / 1.055).powf(2.4)
                }
            };
            0.2126 * lin(c.r()) + 0.7152 * lin(c.g()) + 0.0722 * lin(c.b())
        };
        let (a, b) = (luminance(a), luminance(b));
        (a.max(b) + 0.05) / (a.min(b) + 0.05)
    }

    #[test]
    fn text_and_marks_can_be_read_in_both_themes() {
        for dark in [true, false] {
            let p = Palette::of_theme(dark);
            for back in [p.panel, p.desk, p.well, p.button] {
                for fore in [p.text, p.faint, p.accent, p.good, p.warn, p.bad] {
                    assert!(contrast(fore, back) >= 4.5, "{dark} {fore:?} on {back:?}");
                }
            }
            for curve in [p.scanned, p.corrected, p.ghost] {
                assert!(contrast(curve, p.well) >= 4.5, "{dark} {curve:?}");
            }
        }
    }

    #[test]
    fn patterns_differ_without_colour() {
        let shape = |p: Pattern| -> Vec<bool> {
            (0..36 * 36)
                .map(|i| p.at(i % 36, i / 36) != Color32::TRANSPARENT)
                .collect()
        };
        let (b, n, v) = (
            shape(Pattern::Bounded),
            shape(Pattern::Never),
            shape(Pattern::Void),
        );
        assert!(b != n && n != v && b != v);
        for s in [b, n, v] {
            assert!(s.iter().any(|&m| m) && s.iter().any(|&m| !m));
        }
    }
}
