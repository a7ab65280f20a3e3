//! Pictures of maps: heights through the ramp, patterns over them.

use super::colours::{Pattern, STEPS, ramp};
use super::state::ColourSpan;
use super::view::View;
use crate::heightmap::HeightMap;
use crate::job::{SurfaceResult, TipResult};
use crate::leveling::Leveled;
use crate::morphology::certainty;
use eframe::egui::{
    Color32, ColorImage, Context, Rect, TextureFilter, TextureHandle, TextureOptions,
};
use ndarray::ArrayView2;
use std::sync::Arc;

/// Largest side of a texture; greater maps are thinned out by block means.
const LARGEST: usize = 2048;

/// A map shared with the computation; equal only if it is the very same one.
#[derive(Debug, Clone)]
pub enum MapRef {
    /// As opened.
    Scan(Arc<HeightMap>),
    /// Levelled.
    Level(Arc<Leveled>),
    /// Corrected.
    Surface(Arc<SurfaceResult>),
    /// The tip's shape.
    Tip(Arc<TipResult>),
}

impl PartialEq for MapRef {
    fn eq(&self, other: &Self) -> bool {
        match (self, other) {
            (Self::Scan(a), Self::Scan(b)) => Arc::ptr_eq(a, b),
            (Self::Level(a), Self::Level(b)) => Arc::ptr_eq(a, b),
            (Self::Surface(a), Self::Surface(b)) => Arc::ptr_eq(a, b),
            (Self::Tip(a), Self::Tip(b)) => Arc::ptr_eq(a, b),
            _ => false,
        }
    }
}

impl MapRef {
    /// The map; `None` for a tip, which has heights only.
    pub fn map(&self) -> Option<&HeightMap> {
        match self {
            Self::Scan(map) => Some(map),
            Self::Level(level) => Some(&level.map),
            Self::Surface(surface) => Some(&surface.surface),
            Self::Tip(_) => None,
        }
    }

    /// Heights, nm; not finite = void or outside.
    pub fn heights(&self) -> ArrayView2<'_, f32> {
        match self {
            Self::Scan(map) => map.heights(),
            Self::Level(level) => level.map.heights(),
            Self::Surface(surface) => surface.surface.heights(),
            Self::Tip(tip) => tip.tip.shape(),
        }
    }
}

/// What a pair of pictures is made of.
#[derive(Debug, Clone, PartialEq)]
pub struct PairKey {
    /// Left map.
    pub left: MapRef,
    /// Right map.
    pub right: Option<MapRef>,
    /// Which heights the colours span.
    pub span: ColourSpan,
    /// Whether both share one scale.
    pub one_scale: bool,
}

/// A map as a texture with the heights its colours span.
#[derive(Clone)]
pub struct Picture {
    /// The texture.
    pub texture: TextureHandle,
    /// Lowest and highest height of the colours, nm.
    pub range: (f32, f32),
    /// Whether the map has voids.
    pub voids: bool,
}

/// The pictures of both panes.
#[derive(Clone)]
pub struct Pair {
    /// Left.
    pub left: Picture,
    /// Right.
    pub right: Option<Picture>,
}

/// Makes the pictures of `key`. Slow: not for the paint thread.
pub fn paint_pair(ctx: &Context, key: &PairKey) -> Pair {
    let left = span_of(key.left.heights(), key.span);
    let right = key.right.as_ref().map(|r| span_of(r.heights(), key.span));
    let both = match (left, right) {
        (Some(a), Some(Some(b))) => Some((a.0.min(b.0), a.1.max(b.1))),
        (a, b) => a.or(b.flatten()),
    };
    let range = |own: Option<(f32, f32)>| {
        let chosen = if key.one_scale { both } else { own };
        chosen.unwrap_or((0.0, 0.0))
    };
    let picture = |of: &MapRef, own| {
        let range = range(own);
        let heights = of.heights();
        let options = TextureOptions {
            magnification: TextureFilter::Nearest,
            minification: TextureFilter::Linear,
            mipmap_mode: Some(TextureFilter::Linear),
            ..TextureOptions::default()
        };
        Picture {
            texture: ctx.load_texture("map", height_image(heights, range), options),
            range,
            voids: heights.iter().any(|z| !z.is_finite()),
        }
    };
    Pair {
        left: picture(&key.left, left),
        right: key.right.as_ref().map(|r| picture(r, right.flatten())),
    }
}

/// The heights that the colours span; `None` when all is void.
pub fn span_of(heights: ArrayView2<f32>, span: ColourSpan) -> Option<(f32, f32)> {
    let mut finite: Vec<f32> = heights.iter().copied().filter(|z| z.is_finite()).collect();
    if finite.is_empty() {
        return None;
    }
    let last = finite.len() - 1;
    let cut = match span {
        ColourSpan::Full => 0,
        ColourSpan::Inner => last / 200,
    };
    let low = *finite.select_nth_unstable_by(cut, f32::total_cmp).1;
    let high = *finite.select_nth_unstable_by(last - cut, f32::total_cmp).1;
    Some((low, high))
}

/// The heights as colours, voids clear; thinned out by block means above [`LARGEST`].
pub fn height_image(heights: ArrayView2<f32>, (low, high): (f32, f32)) -> ColorImage {
    let (rows, columns) = heights.dim();
    let block = rows.max(columns).div_ceil(LARGEST).max(1);
    let (h, w) = (rows.div_ceil(block), columns.div_ceil(block));
    let ramp = ramp();
    let scale = if high > low {
        (STEPS - 1) as f32 / (high - low)
    } else {
        0.0
    };
    let colour = |z: f32| {
        if z.is_finite() {
            ramp[((z - low) * scale).round().clamp(0.0, (STEPS - 1) as f32) as usize]
        } else {
            Color32::TRANSPARENT
        }
    };
    let pixels = (0..h * w)
        .map(|i| {
            let (r, c) = (i / w * block, i % w * block);
            if block == 1 {
                return colour(heights[[r, c]]);
            }
            let part = heights.slice(ndarray::s![
                r..(r + block).min(rows),
                c..(c + block).min(columns)
            ]);
            let (sum, n) = part
                .iter()
                .filter(|z| z.is_finite())
                .fold((0.0f32, 0u32), |(s, n), z| (s + z, n + 1));
            // 0 / 0 of an all-void block is not finite: clear.
            colour(sum / n as f32)
        })
        .collect();
    ColorImage::new([w, h], pixels)
}

/// What the pattern over a pixel says.
pub fn pattern_of(certainty_value: u8) -> Option<Pattern> {
    match certainty_value {
        certainty::NEVER => Some(Pattern::Never),
        certainty::BOUNDED => Some(Pattern::Bounded),
        certainty::VOID => Some(Pattern::Void),
        _ => None,
    }
}

/// Patterns in device pixels over a pane (in points), for a map of `rows` x `columns` pixels and
/// `size` nm. Costs as much as the pane has pixels, whatever the map.
pub fn pattern_image(
    pane: Rect,
    pixels_per_point: f32,
    view: &View,
    (rows, columns): (usize, usize),
    size: (f64, f64),
    pattern: impl Fn(usize, usize) -> Option<Pattern>,
) -> ColorImage {
    let w = (pane.width() * pixels_per_point).round().max(1.0) as usize;
    let h = (pane.height() * pixels_per_point).round().max(1.0) as usize;
    let index = |i: usize, points: f64, middle: f64, extent: f64, count: usize| {
        let at = middle
            + ((i as f64 + 0.5) / f64::from(pixels_per_point) - points / 2.0) * view.nm_per_point;
        let k = (at / extent * count as f64).floor();
        (k >= 0.0 && k < count as f64).then_some(k as usize)
    };
    let column_of: Vec<Option<usize>> = (0..w)
        .map(|x| index(x, f64::from(pane.width()), view.middle.0, size.0, columns))
        .collect();
    let mut pixels = vec![Color32::TRANSPARENT; w * h];
    for (y, line) in pixels.chunks_mut(w).enumerate() {
        let Some(row) = index(y, f64::from(pane.height()), view.middle.1, size.1, rows) else {
            continue;
        };
        for (x, (pixel, column)) in line.iter_mut().zip(&column_of).enumerate() {
            if let Some(p) = column.and_then(|c| pattern(row, c)) {
                *pixel = p.at(x as i32, y as i32);
            }
        }
    }
    ColorImage::new([w, h], pixels)
}

/// A sample of a pattern for legends, in device pixels; `None` = a point that was touched.
pub fn swatch(pattern: Option<Pattern>, w: usize, h: usize) -> ColorImage {
    let back = ramp()[150];
    let pixels = (0..w * h)
        .map(|i| {
            let mark = pattern.map_or(Color32::TRANSPARENT, |p| {
                p.at((i % w) as i32, (i / w) as i32)
            });
            back.blend(mark)
        })
        .collect();
    ColorImage::new([w, h], pixels)
}

#[cfg(test)]
mod tests {
    use super::*;
    use eframe::egui::{pos2, vec2};
    use ndarray::{Array2, arr2};

    #[test]
    fn heights_run_through_the_ramp_and_voids_are_clear() {
        let heights = arr2(&[[0.0, 10.0], [f32::NAN, 5.0]]);
        let image = height_image(heights.view(), (0.0, 10.0));
        assert_eq!(image.pixels[0], ramp()[0]);
        assert_eq!(image.pixels[1], ramp()[STEPS - 1]);
        assert_eq!(image.pixels[2], Color32::TRANSPARENT);
        assert_eq!(image.pixels[3], ramp()[128]);
    }

    #[test]
    fn great_maps_are_thinned_out_by_means() {
        let heights = Array2::from_shape_fn((3, 2 * LARGEST + 1), |(r, c)| {
            if (r + c) % 2 == 0 { 0.0 } else { 1.0 }
        });
        let image = height_image(heights.view(), (0.0, 1.0));
        assert!(image.size[0] <= LARGEST);
        let middle = image.pixels[image.size[0] / 2];
        assert!(middle != ramp()[0] && middle != ramp()[STEPS - 1]);
    }

    #[test]
    fn a_flat_or_empty_map_has_a_picture() {
        let flat = Array2::from_elem((4, 4), 3.0f32);
        assert_eq!(span_of(flat.view(), ColourSpan::Full), Some((3.0, 3.0)));
        height_image(flat.view(), (3.0, 3.0));
        let void = Array2::from_elem((4, 4), f32::NAN);
        assert_eq!(span_of(void.view(), ColourSpan::Inner), None);
        let image = height_image(void.view(), (0.0, 0.0));
        assert!(image.pixels.iter().all(|p| *p == Color32::TRANSPARENT));
    }

    #[test]
    fn the_inner_span_leaves_out_stray_points() {
        let mut heights = Array2::from_shape_fn((100, 100), |(r, c)| (r * 100 + c) as f32);
        heights[[50, 50]] = 1e6;
        let (_, full) = span_of(heights.view(), ColourSpan::Full).unwrap();
        let (low, inner) = span_of(heights.view(), ColourSpan::Inner).unwrap();
        assert_eq!(full, 1e6);
        assert!(inner < 10_000.0 && low >= 49.0);
    }

    #[test]
    fn patterns_lie_where_their_pixels_are() {
        let pane = Rect::from_min_size(pos2(10.0, 10.0), vec2(100.0, 100.0));
        let view = View {
            middle: (50.0, 50.0),
            nm_per_point: 1.0,
        };
        // Two columns: the left one never touched, the right one touched.
        let image = pattern_image(pane, 1.0, &view, (1, 2), (100.0, 100.0), |_, c| {
            (c == 0).then_some(Pattern::Never)
        });
        let marked = |x0: usize, x1: usize| {
            (0..100).any(|y| (x0..x1).any(|x| image.pixels[y * 100 + x] != Color32::TRANSPARENT))
        };
        assert!(marked(0, 50) && !marked(50, 100));
    }
}
