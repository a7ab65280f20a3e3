//! The highest place of a function of two offsets near a start: smooth, kinked or with jumps.
//!
//! Direct searches (pattern search with halved steps, common practice) need nothing but values,
//! and surfaces here have none but values. Where the function is smooth the eight directions of
//! [`climb`] do. On a kink or beside a jump, the edge of a pyramid or of a vertical wall, they halt
//! early: every one of them falls, though the ridge still rises between two of them. There
//! [`along_ridge`] searches the line across the ridge anew at each place along it.

/// Halvings of the step by [`climb`].
const CLIMB: u32 = 6;
/// Halvings of the step along a ridge, and across it.
const ALONG: u32 = 10;
const ACROSS: u32 = 12;
/// Steps taken at one size before it is halved.
const REPEATS: usize = 12;
/// What a neighbour of a smooth summit may be lower after the last halving, nm.
const SMOOTH_NM: f64 = 3e-4;

/// The highest value of `at` that can be reached from `start` with steps of at most `step`
/// (along x and y) within `half` of 0; never below the value at `start`. Halts early below `least`.
pub(super) fn highest(
    at: &impl Fn([f64; 2]) -> f64,
    start: [f64; 2],
    step: [f64; 2],
    half: f64,
    least: f64,
) -> f64 {
    let inside = |offset: [f64; 2]| {
        if offset.iter().any(|d| d.abs() > half) {
            return f64::NEG_INFINITY;
        }
        let height = at(offset);
        if height.is_nan() {
            f64::NEG_INFINITY
        } else {
            height
        }
    };
    let climbed = climb(&inside, start, step);
    if climbed.fall <= SMOOTH_NM || climbed.height < least {
        return climbed.height;
    }
    along_ridge(&inside, climbed, step)
}

#[derive(Clone, Copy)]
struct Climbed {
    offset: [f64; 2],
    height: f64,
    /// Greatest fall to a neighbour after the last halving; 0 on a level place, where nothing
    /// nearby is higher or lower.
    fall: f64,
    /// Halvings at which it fell more along x than along y, less those where along y.
    steeper_in_x: i32,
}

fn climb(at: &impl Fn([f64; 2]) -> f64, start: [f64; 2], step: [f64; 2]) -> Climbed {
    let mut here = Climbed {
        offset: start,
        height: at(start),
        fall: 0.0,
        steeper_in_x: 0,
    };
    let mut step = step;
    for level in 0..CLIMB {
        step = step.map(|s| s / 2.0);
        let mut level_place = true;
        for _ in 0..REPEATS {
            let centre = here;
            let mut fall = 0.0f64;
            let mut axes = [0.0f64; 2];
            for (sx, sy) in [
                (-1.0, -1.0),
                (0.0, -1.0),
                (1.0, -1.0),
                (-1.0, 0.0),
                (1.0, 0.0),
                (-1.0, 1.0),
                (0.0, 1.0),
                (1.0, 1.0),
            ] {
                let tried = [
                    centre.offset[0] + sx * step[0],
                    centre.offset[1] + sy * step[1],
                ];
                let height = at(tried);
                level_place &= height == centre.height;
                fall = fall.max(centre.height - height);
                if sx == 0.0 || sy == 0.0 {
                    let axis = usize::from(sx == 0.0);
                    axes[axis] = axes[axis].max(centre.height - height);
                }
                if height > here.height {
                    (here.height, here.offset) = (height, tried);
                }
            }
            if level_place && level == 0 {
                return here;
            }
            here.fall = fall;
            here.steeper_in_x += i32::from(axes[0] > axes[1]) - i32::from(axes[1] > axes[0]);
            if here.height <= centre.height {
                break;
            }
        }
    }
    here
}

/// Highest place along a line from `start`: step by step, the step halved where neither side is
/// higher. Returns the place and its value.
fn along(at: &impl Fn(f64) -> f64, start: f64, known: f64, step: f64, halvings: u32) -> (f64, f64) {
    let (mut place, mut best) = (start, known);
    let mut step = step;
    for _ in 0..halvings {
        step /= 2.0;
        // Both sides: beside a jump the low side may rise too, away from it.
        let [ahead, behind] = [at(place + step), at(place - step)];
        let side = if behind > ahead { -step } else { step };
        let mut next = ahead.max(behind);
        for _ in 0..REPEATS {
            if next <= best {
                break;
            }
            (place, best) = (place + side, next);
            next = at(place + side);
        }
    }
    (place, best)
}

/// Follows a ridge to its summit: over each place along one axis the highest place along
/// the other.
fn along_ridge(at: &impl Fn([f64; 2]) -> f64, start: Climbed, step: [f64; 2]) -> f64 {
    // A line nearly along the ridge finds nothing: across is where the function falls faster.
    let across = usize::from(start.steeper_in_x < 0);
    let other = 1 - across;
    let point = |l: f64, d: f64| if across == 0 { [d, l] } else { [l, d] };
    // From the crossing found last; a ridge runs at most as far across as along.
    let crest = |l: f64, from: f64, stride: f64| {
        let line = |d: f64| at(point(l, d));
        let halvings = ACROSS.saturating_sub((step[across] / stride).log2() as u32);
        along(&line, from, line(from), 2.0 * stride, halvings + 1)
    };
    let mut place = start.offset[other];
    let (mut crossing, mut best) = crest(place, start.offset[across], step[across]);
    let mut stride = step;
    for _ in 0..ALONG {
        stride = stride.map(|s| s / 2.0);
        for _ in 0..REPEATS {
            let mut moved = false;
            for side in [1.0, -1.0] {
                let tried = place + side * stride[other];
                let (d, height) = crest(tried, crossing, stride[other]);
                if height > best {
                    (place, crossing, best) = (tried, d, height);
                    moved = true;
                    break;
                }
            }
            if !moved {
                break;
            }
        }
    }
    best.max(start.height)
}
