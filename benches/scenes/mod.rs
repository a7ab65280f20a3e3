//! Surfaces and tips that the benches share.

use ndarray::Array2;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

/// Pixel pitch of every scene, nm.
pub const PITCH: f32 = 2.0;

/// Lines 80 nm high, 100 nm wide, 200 nm apart, along the slow axis, with white noise (nm).
pub fn lines(size: usize, noise: f32) -> Array2<f32> {
    let mut random = ChaCha8Rng::seed_from_u64(1);
    Array2::from_shape_fn((size, size), |(_, c)| {
        let line = if (c as f32 * PITCH) % 200.0 < 100.0 {
            0.0
        } else {
            80.0
        };
        let n: f32 = StandardNormal.sample(&mut random);
        line + noise * n
    })
}

/// A rough surface: noise of 20 nm smoothed over 9 x 9 pixels, plus white noise (nm).
pub fn rough(size: usize, noise: f32) -> Array2<f32> {
    let mut random = ChaCha8Rng::seed_from_u64(2);
    let mut normal = || -> f32 { StandardNormal.sample(&mut random) };
    let base = Array2::from_shape_simple_fn((size, size), || 20.0 * 9.0 * normal());
    let across = running_mean(&base);
    let both = running_mean(&across.t().to_owned());
    both.mapv(|z| z + noise * normal())
}

fn running_mean(map: &Array2<f32>) -> Array2<f32> {
    Array2::from_shape_fn(map.dim(), |(r, c)| {
        let window = map.slice(ndarray::s![
            r,
            c.saturating_sub(4)..(c + 5).min(map.ncols())
        ]);
        window.mean().unwrap_or(0.0)
    })
}

/// White noise of 1 nm.
pub fn white(size: usize) -> Array2<f32> {
    let mut random = ChaCha8Rng::seed_from_u64(3);
    Array2::from_shape_simple_fn((size, size), || StandardNormal.sample(&mut random))
}

/// A sphere of radius 10 nm on a cone of half-angle 17 degrees, `side` pixels wide.
pub fn sphere_cone(side: usize) -> Array2<f32> {
    let (radius, angle) = (10.0_f32, 17.0_f32.to_radians());
    let (sine, cosine) = (angle.sin(), angle.cos());
    on_grid(side, |d| {
        if d <= radius * cosine {
            (radius * radius - d * d).sqrt() - radius
        } else {
            (radius * (1.0 - sine) / cosine - d) / angle.tan()
        }
        .min(0.0)
    })
}

/// A paraboloid of apex radius 30 nm.
pub fn paraboloid(side: usize) -> Array2<f32> {
    on_grid(side, |d| -d * d / 60.0)
}

fn on_grid(side: usize, depth: impl Fn(f32) -> f32) -> Array2<f32> {
    let centre = (side / 2) as f32;
    Array2::from_shape_fn((side, side), |(i, j)| {
        depth(PITCH * (i as f32 - centre).hypot(j as f32 - centre))
    })
}

/// A flat tip.
pub fn flat(side: usize) -> Array2<f32> {
    Array2::zeros((side, side))
}

/// A tip of white depths between 0 and 1 nm: nothing can be skipped.
pub fn random_tip(side: usize) -> Array2<f32> {
    let mut random = ChaCha8Rng::seed_from_u64(4);
    let mut tip = Array2::from_shape_simple_fn((side, side), || -random.random::<f32>());
    tip[(side / 2, side / 2)] = 0.0;
    tip
}
