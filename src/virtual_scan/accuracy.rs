//! The continuous dilation against closed forms and one-dimensional references, to 0.01 nm, at
//! oversampling 4: steep flanks beside jumps, edges of pyramids, worn and double tips.

use super::*;
use crate::tip::model::Model;

const CONE: Model = Model::SphereCone {
    radius: 10.0,
    half_angle: 15.0,
};
const SLIM: Model = Model::SphereCone {
    radius: 5.0,
    half_angle: 8.0,
};
const PYRAMID: Model = Model::Pyramid {
    half_angles: [15.0, 30.0, 20.0, 25.0],
};

type Tip = fn(f64, f64) -> f64;

/// A cone worn flat, and tilted a little.
fn worn(x: f64, y: f64) -> f64 {
    (3.0 * x.hypot(0.8 * y) + 0.2 * x - 8.0).max(0.0)
}

/// A second apex beside the first, 3 nm higher up.
fn double(x: f64, y: f64) -> f64 {
    CONE.height(x, y).min(SLIM.height(x - 17.3, y + 6.1) + 3.0)
}

/// A tip as the lowest of convex parts, each with its place and lift: what it holds is the highest
/// of what the parts hold.
struct Case {
    name: &'static str,
    tip: Tip,
    parts: &'static [(Tip, [f64; 2], f64)],
}

const SLIM_TIP: Tip = |x, y| SLIM.height(x, y);
const CONE_TIP: Tip = |x, y| CONE.height(x, y);
const PYRAMID_TIP: Tip = |x, y| PYRAMID.height(x, y);

const TIPS: [Case; 5] = [
    Case {
        name: "sphere-cone",
        tip: CONE_TIP,
        parts: &[(CONE_TIP, [0.0; 2], 0.0)],
    },
    Case {
        name: "slim sphere-cone",
        tip: SLIM_TIP,
        parts: &[(SLIM_TIP, [0.0; 2], 0.0)],
    },
    Case {
        name: "pyramid",
        tip: PYRAMID_TIP,
        parts: &[(PYRAMID_TIP, [0.0; 2], 0.0)],
    },
    Case {
        name: "worn",
        tip: worn,
        parts: &[(worn, [0.0; 2], 0.0)],
    },
    Case {
        name: "double",
        tip: double,
        parts: &[(CONE_TIP, [0.0; 2], 0.0), (SLIM_TIP, [17.3, -6.1], 3.0)],
    },
];

fn settings(pitch: Pitch) -> Settings {
    Settings {
        support_nm: 80.0,
        ..Settings::new(24, 24, pitch)
    }
}

/// Greatest departure of the scan from `expected(x, y)`, with its place.
fn departure(
    surface: impl Fn(f64, f64) -> f64 + Sync,
    case: &Case,
    settings: &Settings,
    expected: impl Fn(Tip, f64, f64) -> f64,
) -> (f64, [f64; 2]) {
    let made = scan(surface, case.tip, settings, &Progress::new()).unwrap();
    let expected = |x: f64, y: f64| {
        let parts = case.parts.iter();
        parts
            .map(|&(tip, [dx, dy], lift)| expected(tip, x + dx, y + dy) - lift)
            .fold(0.0, f64::max)
    };
    let pitch = settings.pitch;
    made.clean
        .heights()
        .indexed_iter()
        .map(|((r, c), &z)| {
            let (x, y) = ((c as f64 + 0.5) * pitch.x, (r as f64 + 0.5) * pitch.y);
            ((f64::from(z) - expected(x, y)).abs(), [x, y])
        })
        .fold((0.0, [0.0; 2]), |a, b| if b.0 > a.0 { b } else { a })
}

/// Least value of `f` on `-reach..reach`: the best of 401 places, then by thirds.
fn least(f: impl Fn(f64) -> f64, reach: f64) -> f64 {
    let step = reach / 200.0;
    let at = |i: i32| f64::from(i) * step;
    let best = (-200..=200).min_by(|&a, &b| f(at(a)).total_cmp(&f(at(b))));
    let (mut low, mut high) = (at(best.unwrap()) - step, at(best.unwrap()) + step);
    for _ in 0..60 {
        let third = (high - low) / 3.0;
        if f(low + third) < f(high - third) {
            high -= third;
        } else {
            low += third;
        }
    }
    f((low + high) / 2.0)
}

/// Beside a vertical wall of height h the contact is on the upper edge: `I = h - min t` along it.
#[test]
fn vertical_walls_of_any_direction() {
    for pitch in [Pitch::square(2.0), Pitch { x: 1.3, y: 3.1 }] {
        let settings = settings(pitch);
        for case in &TIPS {
            for turn in [0.0f64, 7.0, 33.0, 45.0, 90.0, 171.0, 262.0] {
                let (sin, cos) = turn.to_radians().sin_cos();
                let middle = [12.0 * pitch.x + 0.37, 12.0 * pitch.y - 0.53];
                // Distance from the edge, into the wall.
                let inside = |x: f64, y: f64| (x - middle[0]) * cos + (y - middle[1]) * sin;
                let surface = |x: f64, y: f64| if inside(x, y) >= 0.0 { 30.0 } else { 0.0 };
                let expected = |tip: Tip, x: f64, y: f64| {
                    let d = -inside(x, y);
                    if d <= 0.0 {
                        return 30.0;
                    }
                    let beside = least(|l| tip(d * cos - l * sin, d * sin + l * cos), 40.0);
                    (30.0 - beside).max(0.0)
                };
                let (worst, place) = departure(surface, case, &settings, expected);
                assert!(
                    worst < 0.01,
                    "{}, {turn} deg, {pitch:?}: {worst} at {place:?}",
                    case.name
                );
            }
        }
    }
}

/// A trench: the higher of what both edges hold, where the coarse search may prefer the wrong one.
#[test]
fn the_right_edge_of_a_trench_wins() {
    let settings = settings(Pitch::square(2.0));
    let (left, right) = (14.13, 33.9);
    let surface = |x: f64, _: f64| if x <= left || x >= right { 40.0 } else { 0.0 };
    for case in &TIPS {
        let expected = |tip: Tip, x: f64, _: f64| {
            if x <= left || x >= right {
                return 40.0;
            }
            let edge = |at: f64| 40.0 - least(|l| tip(at - x, l), 40.0);
            edge(left).max(edge(right)).max(0.0)
        };
        let (worst, place) = departure(surface, case, &settings, expected);
        assert!(worst < 0.01, "{}: {worst} at {place:?}", case.name);
    }
}

/// A sharp cone on a flat under a convex tip: the contact is on the apex, `I = h - t(u)`, where
/// the tip is blunter than the cone.
#[test]
fn needles_show_the_tip() {
    let settings = settings(Pitch::square(2.0));
    let at = [23.47, 25.2];
    let surface = |x: f64, y: f64| {
        let d = (x - at[0]).hypot(y - at[1]);
        (40.0 - 8.0 * d).max(0.0)
    };
    for case in &TIPS {
        let expected = |tip: Tip, x: f64, y: f64| (40.0 - tip(at[0] - x, at[1] - y)).max(0.0);
        let (worst, place) = departure(surface, case, &settings, expected);
        assert!(worst < 0.01, "{}: {worst} at {place:?}", case.name);
    }
}

/// A sphere under a pyramid: each face, edge by edge, touches where its normal is; between two
/// faces the contact runs on the edge, and the sphere's centre is nearest there.
#[test]
fn spheres_under_edges() {
    let settings = settings(Pitch::square(2.0));
    let (at, radius) = ([23.3, 24.6], 9.0f64);
    let surface = |x: f64, y: f64| {
        let d = (x - at[0]).hypot(y - at[1]);
        if d <= radius {
            radius + (radius * radius - d * d).sqrt()
        } else {
            0.0
        }
    };
    for case in &TIPS {
        let expected = |tip: Tip, x: f64, y: f64| {
            // Polar about the sphere's axis: outward along each direction a line search.
            let over = |angle: f64| {
                let (sin, cos) = angle.sin_cos();
                least(
                    |d| {
                        let d = (d + radius) / 2.0;
                        let u = [at[0] + d * cos - x, at[1] + d * sin - y];
                        tip(u[0], u[1]) - radius - (radius * radius - d * d).max(0.0).sqrt()
                    },
                    radius,
                )
            };
            let coarse = (0..180)
                .map(|i| f64::from(i).to_radians() * 2.0)
                .min_by(|&a, &b| over(a).total_cmp(&over(b)))
                .unwrap();
            let (mut low, mut high) = (coarse - 0.035, coarse + 0.035);
            for _ in 0..30 {
                let third = (high - low) / 3.0;
                if over(low + third) < over(high - third) {
                    high -= third;
                } else {
                    low += third;
                }
            }
            (-over((low + high) / 2.0)).max(0.0)
        };
        let one_in_three = Settings {
            rows: 6,
            columns: 24,
            ..settings.clone()
        };
        let raised = |x: f64, y: f64| surface(x, y + 18.0);
        let (worst, place) = departure(raised, case, &one_in_three, |tip, x, y| {
            expected(tip, x, y + 18.0)
        });
        assert!(worst < 0.01, "{}: {worst} at {place:?}", case.name);
    }
}

/// On a rough surface no closed form is known: a search on a grid ten times finer stands for it.
#[test]
fn rough_surfaces_do_not_depend_on_the_oversampling() {
    let rough = CorrelatedMap::new(3.0, 8.0, [-60.0; 2], [90.0; 2], 11).unwrap();
    for case in &TIPS {
        let of = |oversampling| {
            let settings = Settings {
                support_nm: 50.0,
                oversampling,
                ..Settings::new(10, 10, Pitch::square(2.0))
            };
            scan(|x, y| rough.at(x, y), case.tip, &settings, &Progress::new()).unwrap()
        };
        let (coarse, fine) = (of(4), of(32));
        for (a, b) in coarse.clean.heights().iter().zip(fine.clean.heights()) {
            assert!((a - b).abs() < 0.01, "{}: {a} {b}", case.name);
        }
    }
}
