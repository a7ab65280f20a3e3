//! How the time grows with the map, the tip and the noise: a table on standard output. Dilation,
//! erosion and the copy that they are compared with all fill memory that is in use already.
//!
//! `cargo bench --no-default-features --bench growth`

mod scenes;

use ndarray::Array2;
use std::hint::black_box;
use std::time::Instant;
use truewidth::morphology::{
    certainty_map, contacts, dilate, dilate_into, erode, erode_into, open,
};
use truewidth::progress::Progress;

/// What a run takes, milliseconds.
struct Cost {
    /// The median by the clock on the wall.
    wall: f64,
    /// Processor time of all threads, the mean; the wall's where the system does not tell.
    cpu: f64,
}

/// Processor seconds of this process so far, in hundredths, as Linux tells.
fn cpu_seconds() -> Option<f64> {
    let stat = std::fs::read_to_string("/proc/self/stat").ok()?;
    let mut fields = stat.rsplit_once(')')?.1.split_whitespace().skip(11);
    let mut ticks = || fields.next()?.parse::<f64>().ok();
    Some((ticks()? + ticks()?) / 100.0)
}

/// Runs often enough for hundredths of a second to tell; long ones less often.
fn cost(mut run: impl FnMut()) -> Cost {
    run();
    let mut times: Vec<f64> = Vec::new();
    let before = cpu_seconds();
    while times.len() < 3 || times.iter().sum::<f64>() < 1500.0 {
        let start = Instant::now();
        run();
        times.push(start.elapsed().as_secs_f64() * 1e3);
    }
    let after = cpu_seconds();
    let runs = times.len() as f64;
    times.sort_by(f64::total_cmp);
    let wall = times[times.len() / 2];
    let cpu = match (before, after) {
        (Some(before), Some(after)) => (after - before) * 1e3 / runs,
        _ => wall,
    };
    Cost { wall, cpu }
}

fn head() {
    println!(
        "\n| scene | map | tip | dilation ms | its processor ms | ns/pixel | erosion, processor ms | dilation in copies |"
    );
    println!("|---|---|---|---|---|---|---|---|");
}

fn row(what: &str, map: &Array2<f32>, tip: &Array2<f32>) {
    let watch = Progress::new();
    let mut target = map.to_owned();
    let copy = cost(|| {
        target.assign(black_box(map));
        black_box(&target);
    });
    let dilation = cost(|| {
        dilate_into(map.view(), tip.view(), target.view_mut(), &watch).unwrap();
        black_box(&target);
    });
    let scan = dilate(map.view(), tip.view(), &watch).unwrap();
    let erosion = cost(|| {
        erode_into(scan.view(), tip.view(), target.view_mut(), &watch).unwrap();
        black_box(&target);
    });
    println!(
        "| {what} | {} | {} | {:.2} | {:.2} | {:.2} | {:.2} | {:.1} |",
        map.nrows(),
        tip.nrows(),
        dilation.wall,
        dilation.cpu,
        dilation.cpu * 1e6 / map.len() as f64,
        erosion.cpu,
        dilation.wall / copy.wall,
    );
}

fn relatives(what: &str, map: &Array2<f32>, tip: &Array2<f32>) {
    let watch = Progress::new();
    let scan = dilate(map.view(), tip.view(), &watch).unwrap();
    let surface = erode(scan.view(), tip.view(), &watch).unwrap();
    let (i, s, p) = (scan.view(), surface.view(), tip.view());
    let erosion = cost(|| {
        black_box(erode(i, p, &watch).unwrap());
    });
    let opening = cost(|| {
        black_box(open(i, p, &watch).unwrap());
    });
    let found = cost(|| {
        black_box(contacts(s, p, &watch).unwrap());
    });
    let marks = [0.0, 0.5].map(|tolerance| {
        cost(|| {
            black_box(certainty_map(s, i, p, tolerance, [0, 0], &watch).unwrap());
        })
    });
    println!(
        "| {what} | {} | {} | {:.2} | {:.2} | {:.2} | {:.2} | {:.2} |",
        map.nrows(),
        tip.nrows(),
        erosion.cpu,
        opening.cpu / erosion.cpu,
        found.cpu / erosion.cpu,
        marks[0].cpu / erosion.cpu,
        marks[1].cpu / erosion.cpu,
    );
}

/// A paraboloid need not be searched: two passes of the lower envelope of parabolas give the same
/// surface, but for rounding. P. Felzenszwalb, D. Huttenlocher, Theory of Computing 8, 415 (2012),
/// doi 10.4086/toc.2012.v008a019. In f64, a column at a time, one thread.
fn envelope(map: &Array2<f32>, curvature: f64) -> Array2<f32> {
    let along = map.map(|&z| f64::from(-z));
    let mut across = Array2::zeros(map.dim());
    for (from, to) in along.rows().into_iter().zip(across.rows_mut()) {
        lower_envelope(&from.to_vec(), curvature, to);
    }
    let mut both = Array2::zeros(map.dim());
    for (from, to) in across.columns().into_iter().zip(both.columns_mut()) {
        lower_envelope(&from.to_vec(), curvature, to);
    }
    both.map(|&z: &f64| -z as f32)
}

/// `to[x] = min over q of from[q] + curvature (x - q)^2`.
fn lower_envelope(from: &[f64], curvature: f64, mut to: ndarray::ArrayViewMut1<f64>) {
    let (mut seats, mut starts): (Vec<usize>, Vec<f64>) = (vec![0], vec![f64::NEG_INFINITY]);
    let height = |q: usize| from[q] / curvature + (q * q) as f64;
    for q in 1..from.len() {
        loop {
            let last = seats[seats.len() - 1];
            let start = (height(q) - height(last)) / (2.0 * (q - last) as f64);
            if start > starts[starts.len() - 1] {
                seats.push(q);
                starts.push(start);
                break;
            }
            seats.pop();
            starts.pop();
        }
    }
    let mut k = 0;
    for (x, to) in to.iter_mut().enumerate() {
        while k + 1 < seats.len() && starts[k + 1] < x as f64 {
            k += 1;
        }
        let d = x as f64 - seats[k] as f64;
        *to = from[seats[k]] + curvature * d * d;
    }
}

fn paraboloid(size: usize, noise: f32) {
    let (map, tip) = (scenes::lines(size, noise), scenes::paraboloid(129));
    let watch = Progress::new();
    let searched = cost(|| {
        black_box(dilate(map.view(), tip.view(), &watch).unwrap());
    });
    // The paraboloid of the scene: d^2 / 60 nm, d in pixels of the scene's pitch.
    let curvature = f64::from(scenes::PITCH * scenes::PITCH) / 60.0;
    let passes = cost(|| {
        black_box(envelope(&map, curvature));
    });
    let found = dilate(map.view(), tip.view(), &watch).unwrap();
    let apart = (&found - &envelope(&map, curvature)).mapv(f32::abs);
    println!(
        "| {size} | {noise} | {:.2} | {:.2} | {:.1} | {:.1e} |",
        searched.cpu,
        passes.cpu,
        passes.cpu / searched.cpu,
        apart.fold(0.0_f32, |a, &b| a.max(b)),
    );
}

/// How long a cancelled run goes on: the median and the longest of some, ms.
fn cancelled(what: &str, map: &Array2<f32>, tip: &Array2<f32>, after_ms: u64) {
    let mut times: Vec<f64> = (0..9)
        .map(|_| {
            let watch = Progress::new();
            let run = std::thread::scope(|scope| {
                let worker = scope.spawn(|| {
                    let end = dilate(map.view(), tip.view(), &watch).is_err();
                    (end, Instant::now())
                });
                std::thread::sleep(std::time::Duration::from_millis(after_ms));
                let asked = Instant::now();
                watch.cancel();
                let (cancelled, ended) = worker.join().unwrap();
                cancelled.then(|| ended.duration_since(asked).as_secs_f64() * 1e3)
            });
            run.unwrap_or(f64::NAN)
        })
        .collect();
    times.sort_by(f64::total_cmp);
    println!(
        "| {what} | {} | {} | {:.2} | {:.2} |",
        map.nrows(),
        tip.nrows(),
        times[4],
        times[8]
    );
}

fn relatives_head() {
    println!(
        "\n| scene | map | tip | erosion, processor ms | opening in erosions | contacts | certainty, exact | certainty, 0.5 nm |"
    );
    println!("|---|---|---|---|---|---|---|---|");
}

fn main() {
    if !std::env::args().any(|a| a == "--bench") {
        return;
    }
    let only = std::env::args().nth(1).unwrap_or_default();
    let part = |name: &str| only == "--bench" || only == name;
    println!(
        "{} threads",
        std::thread::available_parallelism().map_or(1, usize::from)
    );
    if part("map") {
        head();
        for size in [256, 512, 1024, 2048, 4096, 8192] {
            row(
                "lines, noise 0.5",
                &scenes::lines(size, 0.5),
                &scenes::sphere_cone(129),
            );
        }
    }
    if part("tip") {
        head();
        for side in [17, 33, 65, 129, 257] {
            row(
                "lines, noise 0.5",
                &scenes::lines(1024, 0.5),
                &scenes::sphere_cone(side),
            );
        }
    }
    if part("noise") {
        head();
        for noise in [0.0, 0.1, 0.5, 1.0, 2.0] {
            let what = format!("lines, noise {noise}");
            row(&what, &scenes::lines(1024, noise), &scenes::sphere_cone(65));
        }
    }
    if part("kind") {
        head();
        row(
            "lines, sphere-cone",
            &scenes::lines(512, 0.5),
            &scenes::sphere_cone(65),
        );
        row(
            "rough, sphere-cone",
            &scenes::rough(512, 0.5),
            &scenes::sphere_cone(65),
        );
        row(
            "lines, paraboloid",
            &scenes::lines(512, 0.5),
            &scenes::paraboloid(65),
        );
        row(
            "white noise, flat tip",
            &scenes::white(512),
            &scenes::flat(65),
        );
        row(
            "white noise, random tip",
            &scenes::white(512),
            &scenes::random_tip(65),
        );
    }
    if part("paraboloid") {
        println!("\n| map | noise nm | searched ms | envelopes ms | times | apart nm |");
        println!("|---|---|---|---|---|---|");
        for (size, noise) in [(512, 0.0), (512, 0.5), (2048, 0.5)] {
            paraboloid(size, noise);
        }
    }
    if part("cancel") {
        println!("\n| scene | map | tip | goes on for ms | at most |");
        println!("|---|---|---|---|---|");
        let (lines, white) = (scenes::lines(8192, 0.5), scenes::white(2048));
        cancelled("lines, sphere-cone", &lines, &scenes::sphere_cone(257), 100);
        cancelled("lines, flat tip", &lines, &scenes::flat(257), 100);
        cancelled(
            "white noise, random tip",
            &white,
            &scenes::random_tip(257),
            100,
        );
    }
    if part("relatives") {
        relatives_head();
        relatives(
            "lines, sphere-cone",
            &scenes::lines(512, 0.5),
            &scenes::sphere_cone(65),
        );
        relatives(
            "lines, sphere-cone",
            &scenes::lines(2048, 0.5),
            &scenes::sphere_cone(129),
        );
        relatives(
            "rough, sphere-cone",
            &scenes::rough(1024, 0.5),
            &scenes::sphere_cone(65),
        );
        relatives(
            "lines, paraboloid",
            &scenes::lines(1024, 0.5),
            &scenes::paraboloid(65),
        );
    }
}
