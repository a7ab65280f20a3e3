//! Small virtual scans for the tests of this room.

use crate::heightmap::HeightMap;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

/// A seeded source of Gaussian numbers.
pub(super) struct Gauss(ChaCha8Rng);

impl Gauss {
    pub(super) fn new(seed: u64) -> Self {
        Self(ChaCha8Rng::seed_from_u64(seed))
    }

    /// The next number, with standard deviation `sd`.
    pub(super) fn next(&mut self, sd: f64) -> f64 {
        let unit: f64 = StandardNormal.sample(&mut self.0);
        unit * sd
    }

    /// The next number in 0..1.
    pub(super) fn uniform(&mut self) -> f64 {
        self.0.random()
    }
}

/// `map` with about the share `share` of its pixels void.
pub(super) fn with_voids(map: &HeightMap, share: f64, seed: u64) -> HeightMap {
    let mut gauss = Gauss::new(seed ^ 0x5eed);
    let mut heights = map.heights().to_owned();
    for z in &mut heights {
        if gauss.uniform() < share {
            *z = f32::NAN;
        }
    }
    map.with_heights(heights, "pixels dropped")
}
