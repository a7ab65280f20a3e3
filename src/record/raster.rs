//! Maps as pictures: block reduction, palette indices, PNG.

use super::colour;
use crate::error::{Error, ErrorKind, Result};
use crate::morphology::certainty;
use base64::Engine;
use ndarray::{Array2, ArrayView2, s};

/// The one height scale of all maps in a report, nm.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Scale {
    /// Drawn in the first colour of the ramp.
    pub low: f64,
    /// Drawn in the last.
    pub high: f64,
}

impl Scale {
    /// The scale that spans all finite heights of `maps`; `None` when there is none.
    pub fn over(maps: &[ArrayView2<f32>]) -> Option<Self> {
        let (low, high) = maps
            .iter()
            .flat_map(|map| map.iter())
            .filter(|z| z.is_finite())
            .fold((f32::INFINITY, f32::NEG_INFINITY), |(low, high), &z| {
                (low.min(z), high.max(z))
            });
        (low <= high).then_some(Self {
            low: f64::from(low),
            high: f64::from(high),
        })
    }

    /// Palette index of a height: 0 for a void, 1..=255 along the ramp.
    pub fn index(&self, height: f32) -> u8 {
        if !height.is_finite() {
            return 0;
        }
        let span = self.high - self.low;
        let t = if span > 0.0 {
            (f64::from(height) - self.low) / span
        } else {
            0.5
        };
        1 + (254.0 * t.clamp(0.0, 1.0)).round() as u8
    }
}

/// Pixels per block so that the longer side has at most `limit` blocks.
fn block(dim: (usize, usize), limit: usize) -> usize {
    dim.0.max(dim.1).div_ceil(limit).max(1)
}

/// `heights` reduced to at most `limit` pixels a side by block means. A block whose extreme lies
/// more than an eighth of the scale off its mean shows the extreme, so that a lone spike or pit
/// is still seen; a block that is mostly void is void.
pub fn reduce(heights: ArrayView2<f32>, limit: usize, scale: Scale) -> Array2<f32> {
    let n = block(heights.dim(), limit);
    if n == 1 {
        return heights.to_owned();
    }
    let (rows, columns) = heights.dim();
    let much = (scale.high - scale.low) / 8.0;
    Array2::from_shape_fn((rows.div_ceil(n), columns.div_ceil(n)), |(r, c)| {
        let block = heights.slice(s![
            r * n..((r + 1) * n).min(rows),
            c * n..((c + 1) * n).min(columns)
        ]);
        let (mut count, mut sum) = (0usize, 0.0f64);
        let (mut low, mut high) = (f64::INFINITY, f64::NEG_INFINITY);
        for z in block.iter().filter(|z| z.is_finite()) {
            let z = f64::from(*z);
            count += 1;
            sum += z;
            low = low.min(z);
            high = high.max(z);
        }
        if 2 * count < block.len() || count == 0 {
            return f32::NAN;
        }
        let mean = sum / count as f64;
        let shown = match (high - mean, mean - low) {
            (up, down) if up.max(down) <= much => mean,
            (up, down) if up >= down => high,
            _ => low,
        };
        shown as f32
    })
}

/// A certainty map reduced to at most `limit` pixels a side: each block shows the least certain
/// class that fills a quarter of it (void: half), so that narrow unreached corners stay visible.
pub fn reduce_classes(map: ArrayView2<u8>, limit: usize) -> Array2<u8> {
    let n = block(map.dim(), limit);
    if n == 1 {
        return map.to_owned();
    }
    let (rows, columns) = map.dim();
    Array2::from_shape_fn((rows.div_ceil(n), columns.div_ceil(n)), |(r, c)| {
        let block = map.slice(s![
            r * n..((r + 1) * n).min(rows),
            c * n..((c + 1) * n).min(columns)
        ]);
        let count = |class: u8| block.iter().filter(|&&v| v == class).count();
        if 2 * count(certainty::VOID) > block.len() {
            return certainty::VOID;
        }
        [certainty::NEVER, certainty::BOUNDED]
            .into_iter()
            .find(|&class| 4 * count(class) >= block.len())
            .unwrap_or(certainty::TOUCHED)
    })
}

/// Heights as a PNG on `scale`; voids are transparent, for the pattern behind to show.
pub fn height_png(heights: ArrayView2<f32>, scale: Scale) -> Result<Vec<u8>> {
    let mut palette = vec![colour::VOID];
    palette.extend((0..255).map(|i| colour::ramp(i as f32 / 254.0)));
    let indices: Vec<u8> = heights.iter().map(|&z| scale.index(z)).collect();
    png(heights.dim(), &indices, &palette, true)
}

/// Certainty classes as a PNG of `width` by `height` pixels, each class with its own pattern.
pub fn class_png(map: ArrayView2<u8>, width: usize, height: usize) -> Result<Vec<u8>> {
    const CLASSES: [u8; 4] = [
        certainty::NEVER,
        certainty::BOUNDED,
        certainty::TOUCHED,
        certainty::VOID,
    ];
    let palette: Vec<[u8; 3]> = CLASSES
        .iter()
        .flat_map(|&c| [colour::class(c), colour::class_ink(c)])
        .collect();
    let (rows, columns) = map.dim();
    let mut indices = Vec::with_capacity(width * height);
    for y in 0..height {
        for x in 0..width {
            let class = map[[y * rows / height, x * columns / width]];
            let index = CLASSES.iter().position(|&c| c == class).unwrap_or(3);
            let ink = colour::class_has_ink(CLASSES[index], x, y);
            indices.push(2 * index as u8 + u8::from(ink));
        }
    }
    png((height, width), &indices, &palette, false)
}

fn png(
    (rows, columns): (usize, usize),
    indices: &[u8],
    palette: &[[u8; 3]],
    first_is_clear: bool,
) -> Result<Vec<u8>> {
    let fail = |e: png::EncodingError| {
        Error::new(
            ErrorKind::Data,
            format!("a figure cannot be encoded as PNG: {e}"),
        )
        .source(e)
    };
    let mut bytes = Vec::new();
    let mut encoder = png::Encoder::new(&mut bytes, columns as u32, rows as u32);
    encoder.set_color(png::ColorType::Indexed);
    encoder.set_depth(png::BitDepth::Eight);
    encoder.set_palette(palette.concat());
    if first_is_clear {
        encoder.set_trns(vec![0u8]);
    }
    let mut writer = encoder.write_header().map_err(fail)?;
    writer.write_image_data(indices).map_err(fail)?;
    writer.finish().map_err(fail)?;
    Ok(bytes)
}

/// `bytes` of a PNG as a `data:` address.
pub fn data_address(bytes: &[u8]) -> String {
    format!(
        "data:image/png;base64,{}",
        base64::engine::general_purpose::STANDARD.encode(bytes)
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_scale_spans_all_maps_and_leaves_voids_out() {
        let a = ndarray::arr2(&[[0.0f32, f32::NAN], [5.0, 1.0]]);
        let b = ndarray::arr2(&[[-2.0f32, 3.0], [f32::NEG_INFINITY, 1.0]]);
        let scale = Scale::over(&[a.view(), b.view()]).unwrap();
        assert_eq!((scale.low, scale.high), (-2.0, 5.0));
        assert_eq!(
            (scale.index(-2.0), scale.index(5.0), scale.index(f32::NAN)),
            (1, 255, 0)
        );
        assert_eq!(Scale::over(&[]), None);
        assert_eq!(Scale::over(&[ndarray::arr2(&[[f32::NAN]]).view()]), None);
        assert_eq!(
            Scale {
                low: 1.0,
                high: 1.0
            }
            .index(1.0),
            128
        );
    }

    #[test]
    fn reduction_keeps_means_spikes_pits_and_voids() {
        let mut map = Array2::from_shape_fn((40, 40), |(r, _)| (r % 2) as f32);
        map[[13, 13]] = 50.0;
        map[[27, 5]] = -50.0;
        map.slice_mut(s![32..40, 32..40]).fill(f32::NAN);
        let small = reduce(
            map.view(),
            5,
            Scale {
                low: -50.0,
                high: 50.0,
            },
        );
        assert_eq!(small.dim(), (5, 5));
        assert_eq!(small[[0, 0]], 0.5);
        assert_eq!(small[[1, 1]], 50.0);
        assert_eq!(small[[3, 0]], -50.0);
        assert!(small[[4, 4]].is_nan());
    }

    #[test]
    fn reduction_covers_an_uneven_rest_and_leaves_small_maps_alone() {
        let map = Array2::from_elem((7, 3), 2.0f32);
        let scale = Scale {
            low: 0.0,
            high: 4.0,
        };
        assert_eq!(reduce(map.view(), 4, scale).dim(), (4, 2));
        assert_eq!(reduce(map.view(), 7, scale), map);
    }

    #[test]
    fn reduced_classes_show_the_least_certain_quarter() {
        let mut map = Array2::from_elem((8, 8), certainty::TOUCHED);
        map.slice_mut(s![0..4, 0]).fill(certainty::NEVER);
        map.slice_mut(s![0..3, 4]).fill(certainty::NEVER);
        map.slice_mut(s![4..8, 4..8]).fill(certainty::VOID);
        let small = reduce_classes(map.view(), 2);
        assert_eq!(small, ndarray::arr2(&[[0, 2], [2, 255]]));
    }

    #[test]
    fn a_height_png_decodes_to_the_indices_with_voids_clear() {
        let map = ndarray::arr2(&[[0.0f32, 10.0], [f32::NAN, 5.0]]);
        let scale = Scale {
            low: 0.0,
            high: 10.0,
        };
        let bytes = height_png(map.view(), scale).unwrap();
        let image = image::load_from_memory(&bytes).unwrap().to_rgba8();
        assert_eq!(image.get_pixel(0, 0).0[..3], colour::ramp(0.0));
        assert_eq!(image.get_pixel(1, 0).0[..3], colour::ramp(1.0));
        assert_eq!(image.get_pixel(0, 1).0[3], 0);
        assert_eq!(image.get_pixel(1, 1).0, {
            let [r, g, b] = colour::ramp(0.5);
            [r, g, b, 255]
        });
    }
}
