#![allow(missing_docs)]
use truewidth::job::{Job, Stages};
use truewidth::progress::Progress;
fn main() {
    for path in std::env::args().skip(1) {
        let p = std::path::PathBuf::from(&path);
        let job = if path.ends_with("toml") {
            Job::open(&p).unwrap()
        } else {
            Job::on_scan(&p)
        };
        let t = std::time::Instant::now();
        let mut last = t.elapsed();
        let out = Stages::default().run(&job, &Progress::new(), &mut |o| {
            println!(
                "   {:?} scan {} level {} tip {} surf {} dims {}",
                t.elapsed() - last,
                o.scan.is_some(),
                o.level.is_some(),
                o.tip.is_some(),
                o.surface.is_some(),
                o.dimensions.is_some()
            );
            last = t.elapsed();
        });
        let out = match out {
            Ok(o) => o,
            Err(e) => {
                println!("{path}: ERROR {e}");
                continue;
            }
        };
        println!("## {path}");
        let l = out.level.as_ref().unwrap();
        println!(
            "noise {:?} slope {:?} jumps {} drift {:?}",
            l.noise_nm,
            l.slope,
            l.row_jumps.len(),
            l.drift_nm
        );
        if let Some(t) = &out.tip {
            println!(
                "tip identified {} depth {:?} R {:?} a {:?} u {} support {:?}",
                t.identified,
                t.exercised_depth_nm,
                t.read_out.apex_radius,
                t.read_out
                    .half_angle
                    .as_ref()
                    .map(|h| (h.value, h.u, h.between_nm)),
                t.height_u_nm,
                t.tip.shape().dim()
            );
            for d in &t.diagnosis {
                println!("  - {d}");
            }
        }
        if let Some(s) = &out.surface {
            println!("reliability {:?} tol {}", s.reliability, s.tolerance_nm);
        }
        for d in out.dimensions.iter().flat_map(|d| d.iter()) {
            println!(
                "{:16} {:14} at {:?} scanned {:?} corrected {:?} {:?}",
                d.name,
                d.quantity,
                d.at,
                d.as_scanned.map(|v| (v.value, v.u)),
                d.corrected.map(|c| (c.value, c.u, c.low, c.high)),
                d.status
            );
            for f in &d.flags {
                println!("      ! {f}");
            }
            if std::env::var_os("BUDGET").is_some() {
                for b in &d.budget {
                    println!(
                        "      . {} {:.3} x {:.3} {:?}",
                        b.source, b.u, b.sensitivity, b.distribution
                    );
                }
            }
        }
        for w in &out.warnings {
            println!("  warning: {w}");
        }
    }
}
