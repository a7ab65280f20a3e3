//! Which pixels belong to which particle: threshold, connected components, watershed.

use ndarray::{Array2, ArrayView2};

/// One connected set of pixels above the threshold, or one basin of it.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Segment {
    /// Pixels `[row, column]` of the region.
    pub pixels: Vec<[usize; 2]>,
    /// The highest of them after a 3 x 3 mean.
    pub peak: [usize; 2],
    /// Whether it touches the border of the region or a void.
    pub at_border: bool,
    /// Whether it was cut off a neighbour that it touches.
    pub touching: bool,
}

/// The segments above `threshold` with at least `fewest` pixels, largest first. Components (eight
/// neighbours) are flooded from their summits downwards; two summits stay apart where both stand
/// more than `prominence(height of the lower summit)` above the saddle between them (watershed by
/// flooding, common practice).
pub(super) fn segments(
    heights: ArrayView2<f32>,
    threshold: f64,
    fewest: usize,
    prominence: impl Fn(f64) -> f64,
) -> Vec<Segment> {
    let smooth = smoothed(heights);
    let mut order: Vec<[usize; 2]> = heights
        .indexed_iter()
        .filter(|(_, z)| f64::from(**z) > threshold)
        .map(|((r, c), _)| [r, c])
        .collect();
    order.sort_by(|a, b| smooth[*b].total_cmp(&smooth[*a]));
    let mut flood = Flood::default();
    let mut label = Array2::from_elem(heights.dim(), usize::MAX);
    for &place in &order {
        let level = f64::from(smooth[place]);
        let mut met: Vec<usize> = neighbours(place, heights.dim())
            .filter(|n| label[*n] != usize::MAX)
            .map(|n| flood.root(label[n]))
            .collect();
        met.sort_unstable();
        met.dedup();
        // The highest summit takes the pixel.
        met.sort_by(|a, b| flood.summits[*b].1.total_cmp(&flood.summits[*a].1));
        let Some(&owner) = met.first() else {
            label[place] = flood.start(place, level);
            continue;
        };
        label[place] = owner;
        for &other in &met[1..] {
            let summit = flood.summits[other].1;
            if summit - level <= prominence(summit) {
                flood.parents[other] = owner;
            } else {
                flood.touching[other] = true;
                flood.touching[owner] = true;
            }
        }
    }
    collect(heights, &order, &label, &mut flood, fewest)
}

/// Summits with their basins; a merged basin points to the one that took it.
#[derive(Default)]
struct Flood {
    summits: Vec<([usize; 2], f64)>,
    parents: Vec<usize>,
    touching: Vec<bool>,
}

impl Flood {
    fn start(&mut self, place: [usize; 2], level: f64) -> usize {
        self.summits.push((place, level));
        self.parents.push(self.parents.len());
        self.touching.push(false);
        self.parents.len() - 1
    }

    fn root(&mut self, mut i: usize) -> usize {
        while self.parents[i] != i {
            self.parents[i] = self.parents[self.parents[i]];
            i = self.parents[i];
        }
        i
    }
}

fn collect(
    heights: ArrayView2<f32>,
    order: &[[usize; 2]],
    label: &Array2<usize>,
    flood: &mut Flood,
    fewest: usize,
) -> Vec<Segment> {
    let mut slot = vec![usize::MAX; flood.summits.len()];
    let mut found: Vec<Segment> = Vec::new();
    for i in 0..flood.summits.len() {
        let root = flood.root(i);
        if flood.touching[i] {
            flood.touching[root] = true;
        }
    }
    for &place in order {
        let root = flood.root(label[place]);
        if slot[root] == usize::MAX {
            slot[root] = found.len();
            found.push(Segment {
                pixels: Vec::new(),
                peak: flood.summits[root].0,
                at_border: false,
                touching: flood.touching[root],
            });
        }
        let segment = &mut found[slot[root]];
        segment.pixels.push(place);
        let seen = neighbours(place, heights.dim())
            .filter(|n| !heights[*n].is_nan())
            .count();
        segment.at_border |= seen < 8;
    }
    found.retain(|s| s.pixels.len() >= fewest);
    found.sort_by(|a, b| {
        b.pixels
            .len()
            .cmp(&a.pixels.len())
            .then(a.peak.cmp(&b.peak))
    });
    found
}

/// The up to eight pixels around one.
fn neighbours(place: [usize; 2], size: (usize, usize)) -> impl Iterator<Item = [usize; 2]> {
    let [r, c] = place;
    let rows = r.saturating_sub(1)..(r + 2).min(size.0);
    rows.flat_map(move |i| (c.saturating_sub(1)..(c + 2).min(size.1)).map(move |j| [i, j]))
        .filter(move |n| *n != place)
}

/// Mean over the finite of 3 x 3; void stays void.
fn smoothed(heights: ArrayView2<f32>) -> Array2<f32> {
    Array2::from_shape_fn(heights.dim(), |(r, c)| {
        let here = heights[[r, c]];
        if here.is_nan() {
            return here;
        }
        let (mut sum, mut count) = (here, 1.0f32);
        for n in neighbours([r, c], heights.dim()) {
            let z = heights[n];
            if !z.is_nan() {
                sum += z;
                count += 1.0;
            }
        }
        sum / count
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn bumps(centres: &[[f64; 2]], rows: usize, columns: usize) -> Array2<f32> {
        Array2::from_shape_fn((rows, columns), |(r, c)| {
            let height =
                |b: &[f64; 2]| 10.0 - 0.2 * ((r as f64 - b[0]).powi(2) + (c as f64 - b[1]).powi(2));
            centres.iter().map(height).fold(0.0, f64::max) as f32
        })
    }

    /// Labels, areas and equivalent diameters against scikit-image's watershed and regionprops
    /// (tests/python_golden.py).
    #[test]
    fn it_agrees_with_scikit_image() {
        let path = |name: &str| {
            std::path::Path::new(env!("CARGO_MANIFEST_DIR"))
                .join(format!("tests/golden/{name}.npy"))
        };
        let map: Array2<f32> = ndarray_npy::read_npy(path("segments-map")).unwrap();
        let labels: Array2<i32> = ndarray_npy::read_npy(path("segments-labels")).unwrap();
        let regions: Array2<f64> = ndarray_npy::read_npy(path("segments-regions")).unwrap();
        let found = segments(map.view(), 1.0, 12, |top| 0.15 * top);
        assert_eq!(found.len(), regions.nrows());
        let mut seen = std::collections::BTreeSet::new();
        let mut touching = [0.0; 2];
        for segment in &found {
            let label = labels[segment.peak];
            assert!(seen.insert(label), "two segments in {label}");
            let other = |p: &&[usize; 2]| labels[**p] != label;
            let strays = segment.pixels.iter().filter(other).count();
            let area = regions[[label as usize - 1, 1]];
            let diameter = regions[[label as usize - 1, 2]];
            let ours = segment.pixels.len() as f64;
            if segment.touching {
                // How the line between two is shared is not the same: the higher summit takes it.
                touching[0] += ours;
                touching[1] += area;
                continue;
            }
            assert_eq!((strays, ours), (0, area), "{label}");
            let equivalent = (4.0 * ours / std::f64::consts::PI).sqrt();
            assert!((equivalent / diameter - 1.0).abs() < 1e-9, "{label}");
        }
        assert_eq!(touching[0], touching[1]);
        assert_eq!(found.iter().filter(|s| s.touching).count(), 7);
    }

    #[test]
    fn apart_touching_and_at_the_border() {
        let map = bumps(
            &[[20.0, 20.0], [20.0, 50.0], [20.0, 61.0], [2.0, 80.0]],
            40,
            90,
        );
        let found = segments(map.view(), 0.5, 9, |top| 0.15 * top);
        assert_eq!(found.len(), 4);
        assert_eq!(found.iter().filter(|s| s.touching).count(), 2);
        assert_eq!(found.iter().filter(|s| s.at_border).count(), 1);
        let alone = found.iter().find(|s| s.peak == [20, 20]).unwrap();
        assert!(!alone.touching && !alone.at_border);
        // Disc of radius sqrt(9.5 / 0.2) pixels.
        let area = std::f64::consts::PI * 9.5 / 0.2;
        assert!((alone.pixels.len() as f64 / area - 1.0).abs() < 0.06);
    }

    #[test]
    fn a_shallow_saddle_does_not_split() {
        let map = bumps(&[[20.0, 20.0], [20.0, 23.0]], 40, 40);
        let found = segments(map.view(), 0.5, 9, |top| 0.15 * top);
        assert_eq!(found.len(), 1);
        assert!(!found[0].touching);
    }

    #[test]
    fn nothing_above_and_nothing_at_all() {
        let flat = Array2::<f32>::zeros((5, 5));
        assert!(segments(flat.view(), 0.5, 1, |_| 0.1).is_empty());
        let void = Array2::<f32>::from_elem((1, 1), f32::NAN);
        assert!(segments(void.view(), 0.5, 1, |_| 0.1).is_empty());
    }
}
