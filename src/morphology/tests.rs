//! The fast paths against their plain twins, bit for bit, and the laws of morphology.
//!
//! Laws (duality, adjunction, idempotence, translation, order): Serra, Image Analysis and
//! Mathematical Morphology, 1982, from memory. Mirroring and certainty: J. S. Villarrubia,
//! J. Res. NIST 102, 425 (1997), doi 10.6028/jres.102.030.

use super::tip::Order;
use super::*;
use ndarray::{Array2, array};
use proptest::prelude::*;
use pulp::Arch;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// Every instruction set that this machine has, with the map in one part and in many.
fn engines() -> Vec<Engine> {
    let mut all = vec![Arch::Scalar, Arch::new()];
    #[cfg(target_arch = "x86_64")]
    all.extend(pulp::x86::V3::try_new().map(Arch::V3));
    let engine = |part| move |&arch: &Arch| Engine { arch, part, rim: 0 };
    let whole = all.iter().map(engine(Engine::new().part));
    whole.chain(all.iter().map(engine([8, 16]))).collect()
}

/// What the random scenes vary.
#[derive(Debug, Clone, Copy)]
struct Scene {
    seed: u64,
    rows: usize,
    cols: usize,
    tip_rows: usize,
    tip_cols: usize,
    /// Curvature of the tip: 0 is flat, so that nothing can be skipped.
    steep: f32,
    /// Heights are multiples of this: coarse ones make ties.
    grain: f32,
    voids: f64,
    holes: f64,
}

fn scenes() -> impl Strategy<Value = Scene> {
    (
        (
            any::<u64>(),
            1..40_usize,
            1..70_usize,
            0..14_usize,
            0..14_usize,
        ),
        prop::sample::select(vec![0.0, 0.02, 0.3, 5.0]),
        prop::sample::select(vec![1.0, 0.25, 1e-3, 1e-40, 1e5]),
        prop::sample::select(vec![0.0, 0.05, 0.9, 1.0]),
        prop::sample::select(vec![0.0, 0.2]),
    )
        .prop_map(
            |((seed, rows, cols, hr, hc), steep, grain, voids, holes)| Scene {
                seed,
                rows,
                cols,
                tip_rows: 2 * hr + 1,
                tip_cols: 2 * hc + 1,
                steep,
                grain,
                voids,
                holes,
            },
        )
}

impl Scene {
    fn build(self) -> (Array2<f32>, Array2<f32>) {
        let mut random = ChaCha8Rng::seed_from_u64(self.seed);
        let map = Array2::from_shape_fn((self.rows, self.cols), |(_, c)| {
            if random.random_bool(self.voids) {
                return f32::NAN;
            }
            let line = if (c / 9) % 2 == 0 { 12.0 } else { -0.0 };
            (random.random_range(-2..=2) as f32 + line) * self.grain
        });
        let (cr, cc) = (self.tip_rows / 2, self.tip_cols / 2);
        let tip = Array2::from_shape_fn((self.tip_rows, self.tip_cols), |(i, j)| {
            let (y, x) = (i as f32 - cr as f32, j as f32 - cc as f32);
            if (i, j) == (cr, cc) {
                -0.0
            } else if random.random_bool(self.holes) {
                f32::NEG_INFINITY
            } else {
                // Skewed, so that a wrong mirroring shows.
                let steps = self.steep * (x * x + 0.5 * y * y + 2.0 * x.max(0.0));
                -(steps.round() * self.grain)
            }
        });
        (map, tip)
    }
}

fn bits(map: &Array2<f32>) -> Vec<u32> {
    map.iter()
        .map(|z| if z.is_nan() { f32::NAN } else { *z }.to_bits())
        .collect()
}

fn fast(map: &Array2<f32>, tip: &Array2<f32>, order: Order, engine: Engine) -> Array2<f32> {
    dilation::extreme(engine, map.view(), tip.view(), order, &Progress::new()).unwrap()
}

fn agree_with_the_twins(map: &Array2<f32>, tip: &Array2<f32>) {
    let progress = Progress::new();
    let dilated = reference::contacts(map.view(), tip.view());
    let eroded = reference::erode(map.view(), tip.view());
    for engine in engines() {
        assert_eq!(
            bits(&fast(map, tip, Order::Max, engine)),
            bits(&dilated.heights)
        );
        assert_eq!(bits(&fast(map, tip, Order::Min, engine)), bits(&eroded));
        let contacts = contact::contacts(engine, map.view(), tip.view(), &progress).unwrap();
        assert_eq!(bits(&contacts.heights), bits(&dilated.heights));
        assert_eq!(contacts.offsets, dilated.offsets);
        for tolerance in [0.0, 0.6, 1e6, f32::INFINITY] {
            let (s, i, p) = (eroded.view(), map.view(), tip.view());
            for spread in [[0, 0], [1, 2], [3, 0]] {
                let rule = touch::Rule { tolerance, spread };
                let marks = touch::certainty_map(engine, s, i, p, rule, &progress).unwrap();
                assert_eq!(marks, reference::certainty_map(s, i, p, tolerance, spread));
            }
        }
        let (s, i, p) = (eroded.view(), map.view(), tip.view());
        let leaning = edges::edge_leaning(engine, i, s, p, &progress).unwrap();
        assert_eq!(leaning, reference::edge_leaning(i, s, p));
    }
}

/// `a <= b` wherever both are known.
fn below(a: &Array2<f32>, b: &Array2<f32>) -> bool {
    a.iter()
        .zip(b)
        .all(|(a, b)| a <= b || a.is_nan() || b.is_nan())
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(96))]

    #[test]
    fn fast_paths_equal_their_twins_bit_for_bit(scene in scenes()) {
        let (map, tip) = scene.build();
        agree_with_the_twins(&map, &tip);
    }

    #[test]
    fn one_thread_and_many_give_the_same_bits(scene in scenes()) {
        let (map, tip) = scene.build();
        let all = || {
            let surface = erode(map.view(), tip.view(), &Progress::new()).unwrap();
            let contacts = contacts(surface.view(), tip.view(), &Progress::new()).unwrap();
            let marks =
                certainty_map(surface.view(), map.view(), tip.view(), 0.1, [0, 0], &Progress::new());
            (bits(&surface), bits(&contacts.heights), contacts.offsets, marks.unwrap())
        };
        let pool = |n| rayon::ThreadPoolBuilder::new().num_threads(n).build().unwrap();
        prop_assert_eq!(pool(1).install(all), pool(3).install(all));
    }

    #[test]
    fn erosion_is_the_dual_of_dilation(scene in scenes()) {
        let (map, tip) = scene.build();
        let mirrored = tip.slice(ndarray::s![..;-1, ..;-1]).to_owned();
        let negated = map.mapv(|z| -z);
        let dual = fast(&negated, &mirrored, Order::Max, Engine::new()).mapv(|z| 0.0 - z);
        prop_assert_eq!(bits(&fast(&map, &tip, Order::Min, Engine::new())), bits(&dual));
    }

    #[test]
    fn opening_stays_below_and_is_idempotent(scene in scenes()) {
        // Heights that are multiples of a power of two: every sum is exact.
        let (map, tip) = Scene { grain: 0.25, ..scene }.build();
        let once = open(map.view(), tip.view(), &Progress::new()).unwrap();
        prop_assert!(below(&once, &map));
        // Voids are filled by an opening, so idempotence is a law of maps without them.
        if scene.voids == 0.0 {
            let twice = open(once.view(), tip.view(), &Progress::new()).unwrap();
            prop_assert_eq!(bits(&once), bits(&twice));
        }
    }

    #[test]
    fn adjunction(scene in scenes(), other in any::<u64>(), shift in -40..40_i32) {
        // erode(I) >= S  iff  I >= dilate(S)
        let (image, tip) = Scene { grain: 0.25, voids: 0.0, ..scene }.build();
        let (mut surface, _) = Scene { grain: 0.25, voids: 0.0, seed: other, ..scene }.build();
        surface += shift as f32 * 0.25;
        let eroded = fast(&image, &tip, Order::Min, Engine::new());
        let dilated = fast(&surface, &tip, Order::Max, Engine::new());
        prop_assert_eq!(below(&surface, &eroded), below(&dilated, &image));
    }

    #[test]
    fn order_and_height_shift_are_kept(scene in scenes(), lift in 0..40_i32) {
        let (map, tip) = Scene { grain: 0.25, ..scene }.build();
        let lifted = &map + lift as f32 * 0.25;
        for order in [Order::Max, Order::Min] {
            let plain = fast(&map, &tip, order, Engine::new());
            let moved = fast(&lifted, &tip, order, Engine::new());
            prop_assert!(below(&plain, &moved));
            prop_assert_eq!(bits(&(plain + lift as f32 * 0.25)), bits(&moved));
        }
    }
}

#[test]
fn a_spike_records_the_tip_mirrored() {
    // I(x) = max over u of S(x + u) + p(u): the cell at u shows at x = spike - u.
    let mut surface = Array2::from_elem((7, 7), -100.0_f32);
    surface[(3, 3)] = 0.0;
    let mut tip = Array2::from_elem((3, 3), f32::NEG_INFINITY);
    tip[(1, 1)] = 0.0;
    tip[(1, 2)] = -1.0;
    let scan = dilate(surface.view(), tip.view(), &Progress::new()).unwrap();
    assert_eq!(scan[(3, 2)], -1.0);
    assert_eq!(scan[(3, 4)], -100.0);
    let corrected = erode(scan.view(), tip.view(), &Progress::new()).unwrap();
    assert_eq!(corrected[(3, 3)], 0.0);
}

#[test]
fn shapes_at_the_limits() {
    let shapes = [
        (1, 1),
        (1, 50),
        (50, 1),
        (4, 16),
        (5, 17),
        (3, 65),
        (33, 31),
    ];
    let tips = [(1, 1), (3, 1), (1, 9), (5, 5), (21, 7), (101, 3), (3, 171)];
    for (rows, cols) in shapes {
        for (tip_rows, tip_cols) in tips {
            let scene = Scene {
                seed: 7,
                rows,
                cols,
                tip_rows,
                tip_cols,
                steep: 0.1,
                grain: 0.5,
                voids: 0.1,
                holes: 0.1,
            };
            let (map, tip) = scene.build();
            agree_with_the_twins(&map, &tip);
        }
    }
}

#[test]
fn flat_tips_equal_their_twin() {
    let sizes = [(1, 1), (1, 5), (3, 3), (7, 5), (9, 171), (101, 3)];
    for (rows, cols) in [(1, 1), (1, 40), (13, 33), (40, 7)] {
        for (tip_rows, tip_cols) in sizes {
            let scene = Scene {
                seed: 11,
                rows,
                cols,
                tip_rows: 1,
                tip_cols: 1,
                steep: 0.0,
                grain: 0.25,
                voids: 0.3,
                holes: 0.0,
            };
            let (map, _) = scene.build();
            for depth in [0.0, -0.0, -1.3] {
                let tip = Array2::from_elem((tip_rows, tip_cols), depth);
                agree_with_the_twins(&map, &tip);
            }
        }
    }
}

#[test]
fn nothing_in_nothing_out() {
    let progress = Progress::new();
    let tip = array![[0.0_f32]];
    for dim in [(0, 0), (0, 5), (5, 0)] {
        let empty = Array2::<f32>::zeros(dim);
        assert_eq!(
            dilate(empty.view(), tip.view(), &progress).unwrap().dim(),
            dim
        );
        let found = contacts(empty.view(), tip.view(), &progress).unwrap();
        assert_eq!(found.offsets.dim(), dim);
        let marks = certainty_map(
            empty.view(),
            empty.view(),
            tip.view(),
            0.0,
            [0, 0],
            &progress,
        );
        assert_eq!(marks.unwrap().dim(), dim);
        let leaning = edge_leaning(empty.view(), empty.view(), tip.view(), &progress);
        assert_eq!(leaning.unwrap().dim(), dim);
    }
    let map = array![[1.0_f32, 2.0]];
    for tip in [
        Array2::zeros((0, 0)),
        array![[f32::NEG_INFINITY]],
        array![[f32::NAN]],
    ] {
        let scan = dilate(map.view(), tip.view(), &progress).unwrap();
        assert!(scan.iter().all(|z| z.is_nan()));
        agree_with_the_twins(&map, &tip);
    }
}

#[test]
fn voids_and_infinities_constrain_nothing() {
    let map = array![[
        f32::NAN,
        f32::INFINITY,
        f32::NEG_INFINITY,
        3.0,
        f32::NAN,
        f32::NAN
    ]];
    let tip = array![[f32::INFINITY, 0.0_f32, -1.0]];
    let scan = dilate(map.view(), tip.view(), &Progress::new()).unwrap();
    let expected = array![[f32::NAN, f32::NAN, 2.0, 3.0, f32::NAN, f32::NAN]];
    assert_eq!(bits(&scan), bits(&expected));
    agree_with_the_twins(&map, &tip);
}

#[test]
fn no_result_is_a_negative_zero() {
    let map = array![[-0.0_f32, 0.0, -0.0]];
    let tip = array![[-0.0_f32, -0.0, -0.0]];
    for order in [Order::Max, Order::Min] {
        let result = fast(&map, &tip, order, Engine::new());
        assert!(result.iter().all(|z| z.to_bits() == 0));
    }
}

#[test]
fn views_of_any_layout_are_read_right() {
    let map = Array2::from_shape_fn((20, 30), |(r, c)| ((r * 7 + c * 13) % 11) as f32);
    let tip = array![
        [-3.0_f32, -1.0, f32::NEG_INFINITY],
        [-2.0, 0.0, -5.0],
        [-1.0, -1.5, -4.0]
    ];
    let (turned, turned_tip) = (map.t(), tip.slice(ndarray::s![..;-1, ..]));
    let progress = Progress::new();
    let scan = dilate(turned, turned_tip, &progress).unwrap();
    assert_eq!(bits(&scan), bits(&reference::dilate(turned, turned_tip)));
}

#[test]
fn a_cancelled_run_says_so() {
    let progress = Progress::new();
    progress.cancel();
    let map = Array2::<f32>::zeros((40, 40));
    let tip = Array2::<f32>::zeros((5, 5));
    let (s, p) = (map.view(), tip.view());
    assert!(dilate(s, p, &progress).is_err_and(|e| e.is_cancelled()));
    assert!(contacts(s, p, &progress).is_err_and(|e| e.is_cancelled()));
    assert!(certainty_map(s, s, p, 0.0, [0, 0], &progress).is_err_and(|e| e.is_cancelled()));
    assert!(edge_leaning(s, s, p, &progress).is_err_and(|e| e.is_cancelled()));
}

#[test]
fn a_cancellation_stops_a_run_under_way() {
    // Random depths: nothing can be skipped, so the run outlasts the watcher by far.
    let mut random = ChaCha8Rng::seed_from_u64(5);
    let map = Array2::from_shape_simple_fn((1500, 1500), || random.random::<f32>());
    let tip = Array2::from_shape_simple_fn((201, 201), || -random.random::<f32>());
    let progress = Progress::new();
    let result = std::thread::scope(|scope| {
        let run = scope.spawn(|| dilate(map.view(), tip.view(), &progress));
        while progress.fraction() == 0.0 {
            std::thread::yield_now();
        }
        progress.cancel();
        run.join().unwrap()
    });
    assert!(result.is_err_and(|e| e.is_cancelled()));
    assert!(progress.fraction() < 1.0);
}

#[test]
fn heights_of_a_millimetre_and_subnormal_ones_are_exact() {
    // A surface lowered and raised by 1e6 nm, in steps that single precision holds exactly.
    let map = Array2::from_shape_fn((9, 40), |(r, c)| ((r * 5 + c * 3) % 7) as f32);
    let tip = array![
        [-2.0_f32, -1.0, -3.0],
        [-1.0, 0.0, -4.0],
        [-6.0, -1.0, -2.0]
    ];
    for order in [Order::Max, Order::Min] {
        let plain = fast(&map, &tip, order, Engine::new());
        for lift in [-1e6_f32, 1e6] {
            let lifted = fast(&(&map + lift), &tip, order, Engine::new());
            assert_eq!(bits(&lifted), bits(&(&plain + lift)));
        }
        let tiny = f32::from_bits(1);
        let small = fast(&(&map * tiny), &(&tip * tiny), order, Engine::new());
        assert_eq!(bits(&small), bits(&(&plain * tiny)));
    }
}

#[test]
fn a_shifted_surface_gives_a_shifted_scan() {
    let scene = Scene {
        seed: 3,
        rows: 30,
        cols: 50,
        tip_rows: 5,
        tip_cols: 7,
        steep: 0.3,
        grain: 0.25,
        voids: 0.0,
        holes: 0.1,
    };
    let (map, tip) = scene.build();
    for order in [Order::Max, Order::Min] {
        let whole = fast(&map, &tip, order, Engine::new());
        let part = fast(
            &map.slice(ndarray::s![3.., 5..]).to_owned(),
            &tip,
            order,
            Engine::new(),
        );
        // Away from the edges by half a tip.
        let inner = ndarray::s![2..25, 3..42];
        let moved = whole.slice(ndarray::s![5..28, 8..47]).to_owned();
        assert_eq!(bits(&part.slice(inner).to_owned()), bits(&moved));
    }
}

#[test]
fn progress_ends_at_one() {
    let progress = Progress::new();
    let map = Array2::<f32>::zeros((41, 40));
    erode(map.view(), array![[0.0_f32]].view(), &progress).unwrap();
    assert_eq!(progress.fraction(), 1.0);
}

#[test]
fn shapes_that_do_not_belong_together_are_refused() {
    let (a, b) = (Array2::<f32>::zeros((3, 4)), Array2::<f32>::zeros((4, 3)));
    let tip = array![[0.0_f32]];
    let error = certainty_map(
        a.view(),
        b.view(),
        tip.view(),
        0.0,
        [0, 0],
        &Progress::new(),
    )
    .unwrap_err();
    assert_eq!(error.kind(), ErrorKind::Data);
    assert!(error.to_string().contains("3 x 4"));
    assert!(edge_leaning(a.view(), b.view(), tip.view(), &Progress::new()).is_err());
}

#[test]
fn a_map_is_filled_in_place_as_it_is_returned() {
    let scene = Scene {
        seed: 5,
        rows: 37,
        cols: 61,
        tip_rows: 7,
        tip_cols: 11,
        steep: 0.3,
        grain: 0.25,
        voids: 0.05,
        holes: 0.2,
    };
    let progress = Progress::new();
    for (map, tip) in [
        scene.build(),
        Scene {
            steep: 0.0,
            ..scene
        }
        .build(),
    ] {
        let (m, p) = (map.view(), tip.view());
        let mut out = Array2::from_elem(map.dim(), 7.0);
        dilate_into(m, p, out.view_mut(), &progress).unwrap();
        assert_eq!(bits(&out), bits(&dilate(m, p, &progress).unwrap()));
        erode_into(m, p, out.view_mut(), &progress).unwrap();
        assert_eq!(bits(&out), bits(&erode(m, p, &progress).unwrap()));
        let turned = out.view_mut().reversed_axes();
        let turned = erode_into(m.reversed_axes(), p, turned, &progress).unwrap_err();
        assert!(turned.to_string().contains("row by row"), "{turned}");
    }
    let (map, tip) = scene.build();
    let mut small = Array2::zeros((3, 3));
    let small = erode_into(map.view(), tip.view(), small.view_mut(), &progress).unwrap_err();
    assert!(small.to_string().contains("3 x 3"), "{small}");
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn an_erosion_brought_up_to_date_is_the_erosion(
        scene in scenes(),
        corner in (0.0..1.0_f64, 0.0..1.0_f64),
        size in (0..9_usize, 0..20_usize),
    ) {
        let (mut map, tip) = scene.build();
        let progress = Progress::new();
        let mut surface = erode(map.view(), tip.view(), &progress).unwrap();
        let range = |at: f64, size: usize, length: usize| {
            let first = (at * length as f64) as usize;
            first..(first + size).min(length)
        };
        let rows = range(corner.0, size.0, scene.rows);
        let cols = range(corner.1, size.1, scene.cols);
        map.slice_mut(s![rows.clone(), cols.clone()]).mapv_inplace(|z| 3.0 * scene.grain - z);
        erode_again(map.view(), tip.view(), surface.view_mut(), [rows, cols], &progress).unwrap();
        prop_assert_eq!(bits(&surface), bits(&reference::erode(map.view(), tip.view())));
    }
}
