//! Colours of the figures: one ramp for heights, one set for the certainty classes.
//!
//! The ramp runs from ink blue over teal and sage to straw. It is a cubic Bézier curve in OKLab,
//! walked at constant speed, so that equal steps in height look equally large; its lightness only
//! rises, so that it reads the same in grey print and with any colour-vision deficiency.
//! OKLab: B. Ottosson, "A perceptual color space for image processing" (2020), constants from
//! memory; sRGB transfer: IEC 61966-2-1, from memory.

use crate::morphology::certainty;
use std::sync::OnceLock;

/// Control points of the ramp: lightness, chroma, hue in degrees.
const CONTROL: [[f64; 3]; 4] = [
    [0.22, 0.075, 292.0],
    [0.46, 0.150, 255.0],
    [0.72, 0.130, 160.0],
    [0.96, 0.065, 98.0],
];

/// Colour of a void where no pattern can be drawn, and of [`ramp`] for NaN.
pub const VOID: [u8; 3] = [150, 150, 150];

/// The colour (sRGB) of the fraction `t` of the height scale: 0 lowest, 1 highest; clamped.
/// NaN gives [`VOID`].
pub fn ramp(t: f32) -> [u8; 3] {
    if t.is_nan() {
        return VOID;
    }
    let table = table();
    table[(t.clamp(0.0, 1.0) * (table.len() - 1) as f32).round() as usize]
}

/// Colour (sRGB) of a certainty class; lightness falls as the certainty does.
pub fn class(value: u8) -> [u8; 3] {
    match value {
        certainty::TOUCHED => [223, 238, 232],
        certainty::BOUNDED => [228, 188, 122],
        certainty::NEVER => [92, 44, 92],
        _ => [255, 255, 255],
    }
}

/// Colour (sRGB) of the pattern drawn over [`class`], which tells the classes apart without colour.
pub fn class_ink(value: u8) -> [u8; 3] {
    match value {
        certainty::BOUNDED => [168, 112, 36],
        certainty::NEVER => [224, 186, 216],
        _ => [120, 120, 120],
    }
}

/// Whether the pattern of a certainty class has ink at the drawing pixel (`x`, `y`): touched is
/// plain, bounded hatched one way, never hatched both ways, void dotted. Period 8 pixels.
pub fn class_has_ink(value: u8, x: usize, y: usize) -> bool {
    let (falling, rising) = ((x + 8 - y % 8) % 8 < 2, (x + y) % 8 < 2);
    match value {
        certainty::TOUCHED => false,
        certainty::BOUNDED => rising,
        certainty::NEVER => rising || falling,
        _ => x % 8 < 2 && y % 8 < 2,
    }
}

/// `#rrggbb`.
pub fn hex([r, g, b]: [u8; 3]) -> String {
    format!("#{r:02x}{g:02x}{b:02x}")
}

fn table() -> &'static [[u8; 3]; 256] {
    static TABLE: OnceLock<[[u8; 3]; 256]> = OnceLock::new();
    TABLE.get_or_init(|| {
        const FINE: usize = 8192;
        let points: Vec<[f64; 3]> = (0..=FINE).map(|i| curve(i as f64 / FINE as f64)).collect();
        let mut travelled = vec![0.0];
        for pair in points.windows(2) {
            travelled.push(travelled[travelled.len() - 1] + distance(pair[0], pair[1]));
        }
        let whole = travelled[FINE];
        std::array::from_fn(|i| {
            let wanted = whole * i as f64 / 255.0;
            let at = travelled.partition_point(|&d| d < wanted).min(FINE);
            to_srgb(points[at]).map(|c| (255.0 * c.clamp(0.0, 1.0)).round() as u8)
        })
    })
}

/// The Bézier curve in OKLab.
fn curve(t: f64) -> [f64; 3] {
    let s = 1.0 - t;
    let weights = [s * s * s, 3.0 * s * s * t, 3.0 * s * t * t, t * t * t];
    let mut lab = [0.0; 3];
    for (w, [lightness, chroma, hue]) in weights.into_iter().zip(CONTROL) {
        let (sin, cos) = hue.to_radians().sin_cos();
        lab[0] += w * lightness;
        lab[1] += w * chroma * cos;
        lab[2] += w * chroma * sin;
    }
    lab
}

fn distance(a: [f64; 3], b: [f64; 3]) -> f64 {
    ((a[0] - b[0]).powi(2) + (a[1] - b[1]).powi(2) + (a[2] - b[2]).powi(2)).sqrt()
}

/// OKLab to sRGB, each 0..1 where inside the gamut.
fn to_srgb([l, a, b]: [f64; 3]) -> [f64; 3] {
    let l1 = (l + 0.3963377774 * a + 0.2158037573 * b).powi(3);
    let m1 = (l - 0.1055613458 * a - 0.0638541728 * b).powi(3);
    let s1 = (l - 0.0894841775 * a - 1.2914855480 * b).powi(3);
    [
        4.0767416621 * l1 - 3.3077115913 * m1 + 0.2309699292 * s1,
        -1.2684380046 * l1 + 2.6097574011 * m1 - 0.3413193965 * s1,
        -0.0041960863 * l1 - 0.7034186147 * m1 + 1.7076147010 * s1,
    ]
    .map(|c| {
        if c <= 0.0031308 {
            12.92 * c
        } else {
            1.055 * c.powf(1.0 / 2.4) - 0.055
        }
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// sRGB to OKLab, the inverse of [`to_srgb`] (Ottosson 2020, from memory).
    fn to_lab(rgb: [f64; 3]) -> [f64; 3] {
        let [r, g, b] = rgb.map(|c| {
            if c <= 0.04045 {
                c / 12.92
            } else {
                ((c + 0.055) / 1.055).powf(2.4)
            }
        });
        let l = (0.4122214708 * r + 0.5363325363 * g + 0.0514459929 * b).cbrt();
        let m = (0.2119034982 * r + 0.6806995451 * g + 0.1073969566 * b).cbrt();
        let s = (0.0883024619 * r + 0.2817188376 * g + 0.6299787005 * b).cbrt();
        [
            0.2104542553 * l + 0.7936177850 * m - 0.0040720468 * s,
            1.9779984951 * l - 2.4285922050 * m + 0.4505937099 * s,
            0.0259040371 * l + 0.7827717662 * m - 0.8086757660 * s,
        ]
    }

    fn lab8(rgb: [u8; 3]) -> [f64; 3] {
        to_lab(rgb.map(|c| f64::from(c) / 255.0))
    }

    #[test]
    fn white_and_red_have_their_known_coordinates() {
        // OKLab of sRGB white is (1, 0, 0), of red (0.628, 0.225, 0.126); from memory.
        assert!(distance(lab8([255, 255, 255]), [1.0, 0.0, 0.0]) < 1e-3);
        assert!(distance(lab8([255, 0, 0]), [0.628, 0.225, 0.126]) < 1e-3);
        let back = to_srgb([0.628, 0.225, 0.126]);
        assert!((back[0] - 1.0).abs() < 5e-3 && back[1].abs() < 5e-2 && back[2].abs() < 5e-2);
    }

    #[test]
    fn the_ramp_stays_in_gamut_grows_lighter_and_steps_evenly() {
        for i in 0..=1000 {
            for c in to_srgb(curve(f64::from(i) / 1000.0)) {
                assert!((-1e-3..=1.0 + 1e-3).contains(&c), "{i}: {c}");
            }
        }
        let labs: Vec<_> = (0..=16).map(|i| lab8(ramp(i as f32 / 16.0))).collect();
        let steps: Vec<f64> = labs.windows(2).map(|p| distance(p[0], p[1])).collect();
        let mean = steps.iter().sum::<f64>() / steps.len() as f64;
        for (pair, step) in labs.windows(2).zip(&steps) {
            assert!(pair[1][0] > pair[0][0] + 0.01, "lightness must rise");
            // The chord of a bend falls short of its arc, and eight bits round.
            assert!((step / mean - 1.0).abs() < 0.1, "{step} against {mean}");
        }
    }

    #[test]
    fn red_green_and_blue_yellow_deficiencies_keep_every_step_apart() {
        // Dichromacy in linear sRGB at severity 1: Machado, Oliveira, Fernandes 2009, from memory.
        let deficiencies = [
            [
                [0.152286, 1.052583, -0.204868],
                [0.114503, 0.786281, 0.099216],
                [-0.003882, -0.048116, 1.051998],
            ],
            [
                [0.367322, 0.860646, -0.227968],
                [0.280085, 0.672501, 0.047413],
                [-0.011820, 0.042940, 0.968881],
            ],
            [
                [1.255528, -0.076749, -0.178779],
                [-0.078411, 0.930809, 0.147602],
                [0.004733, 0.691367, 0.303900],
            ],
        ];
        for matrix in deficiencies {
            let seen = |t: f32| {
                let linear = ramp(t).map(|c| (f64::from(c) / 255.0).powf(2.2));
                to_lab(matrix.map(|row: [f64; 3]| {
                    let c: f64 = row.iter().zip(linear).map(|(m, c)| m * c).sum();
                    c.clamp(0.0, 1.0).powf(1.0 / 2.2)
                }))
            };
            for i in 0..16 {
                let (a, b) = (seen(i as f32 / 16.0), seen((i + 1) as f32 / 16.0));
                assert!(b[0] > a[0] + 0.02, "step {i}: {} then {}", a[0], b[0]);
            }
        }
    }

    #[test]
    fn ends_and_what_is_no_height() {
        assert_eq!(ramp(-3.0), ramp(0.0));
        assert_eq!(ramp(7.0), ramp(1.0));
        assert_eq!(ramp(f32::NAN), VOID);
        assert_ne!(ramp(0.0), ramp(1.0));
    }

    #[test]
    fn classes_differ_in_lightness_and_in_pattern() {
        let order = [certainty::TOUCHED, certainty::BOUNDED, certainty::NEVER];
        for pair in order.windows(2) {
            assert!(lab8(class(pair[0]))[0] > lab8(class(pair[1]))[0] + 0.1);
        }
        let ink = |class: u8| {
            (0..64)
                .filter(|i| class_has_ink(class, i % 8, i / 8))
                .count()
        };
        let counts = [2u8, 1, 0, 255].map(ink);
        assert_eq!(counts[0], 0);
        assert_eq!(counts[1], 16);
        assert!(counts[2] > counts[1] && counts[3] < counts[1] && counts[3] > 0);
    }
}
