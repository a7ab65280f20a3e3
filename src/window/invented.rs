//! An invented outcome for the tests: three ridges under a known tip.

use crate::dimensions::{CorrectedValue, Dimension, Kind, Request, Status, Value};
use crate::heightmap::{HeightMap, Pitch, Region};
use crate::job::{Job, JobFile, Outcome, Reliability, SurfaceResult, TipFrom, TipResult};
use crate::leveling::Leveled;
use crate::morphology;
use crate::progress::Progress;
use crate::tip::model::Model;
use crate::tip::read_out::{ApexRadius, HalfAngle, ReadOut};
use crate::uncertainty::{Component, Distribution};
use ndarray::Array2;
use std::path::PathBuf;
use std::sync::Arc;

/// A result line.
pub fn dimension(name: &str) -> Dimension {
    Dimension {
        name: name.to_owned(),
        kind: Kind::LineWidth,
        quantity: "line width".to_owned(),
        at: Some(0.5),
        unit: "nm",
        as_scanned: Some(Value {
            value: 128.7,
            u: Some(0.9),
        }),
        corrected: Some(CorrectedValue {
            value: Some(100.4),
            u: Some(1.1),
            expanded: Some(2.2),
            k: Some(2.0),
            low: Some(97.9),
            high: Some(103.1),
        }),
        status: Some(Status::Bounded),
        flags: vec!["The right edge was not touched.".to_owned()],
        budget: vec![Component {
            source: "axis calibration".to_owned(),
            u: 0.002,
            distribution: Distribution::Normal,
            sensitivity: 100.4,
            degrees_of_freedom: None,
        }],
        evidence: Default::default(),
        assumptions: "invented",
        marks: vec![[40.0, 64.0, 80.0, 64.0]],
    }
}

/// A job on a file that is not there.
pub fn job() -> Job {
    let mut file = JobFile::on_scan("invented.tiff");
    file.dimensions.push(Request {
        region: Some(Region {
            left: 20.0,
            top: 0.0,
            width: 80.0,
            height: 128.0,
        }),
        at: vec![0.5],
        ..Request::new("line 1", Kind::LineWidth)
    });
    Job {
        file,
        folder: PathBuf::from("/nowhere"),
        path: None,
        sha256: None,
    }
}

/// All stages done.
pub fn outcome() -> Outcome {
    let pitch = Pitch::square(2.0);
    let none = Progress::new();
    let truth = HeightMap::from_fn(64, 96, pitch, |x, _| {
        if (x - 60.0).abs() < 20.0 || (x - 140.0).abs() < 25.0 {
            30.0
        } else {
            0.0
        }
    })
    .unwrap();
    let tip = Model::SphereCone {
        radius: 8.0,
        half_angle: 15.0,
    }
    .sample(50.0, pitch)
    .unwrap();
    let scan = morphology::dilate(truth.heights(), tip.shape(), &none).unwrap();
    let scan = truth.with_heights(scan, "invented");
    let surface = morphology::erode(scan.heights(), tip.shape(), &none).unwrap();
    let certainty = morphology::certainty_map(
        surface.view(),
        scan.heights(),
        tip.shape(),
        0.01,
        [0, 0],
        &none,
    )
    .unwrap();
    let surface = SurfaceResult {
        surface: scan.with_heights(surface, "eroded"),
        upper: None,
        lower: None,
        edge_leaning: Array2::from_elem(certainty.dim(), false),
        certainty,
        tolerance_nm: 0.01,
        reliability: Reliability {
            touched: 0.8,
            bounded: 0.15,
            never: 0.05,
        },
    };
    Outcome {
        level: Some(Arc::new(Leveled {
            base: Array2::from_elem(scan.heights().dim(), true),
            map: scan.clone(),
            noise_nm: Some(0.2),
            slope: [0.001, -0.002],
            row_jumps: Vec::new(),
            drift_nm: Some(0.3),
            warnings: Vec::new(),
        })),
        scan: Some(Arc::new(scan)),
        pairs: None,
        tip: Some(Arc::new(tip_result(tip))),
        surface: Some(Arc::new(surface)),
        dimensions: Some(Arc::new(vec![dimension("line 1")])),
        warnings: vec!["An invented caution.".to_owned()],
    }
}

fn tip_result(tip: crate::tip::Tip) -> TipResult {
    TipResult {
        from: TipFrom::Blind,
        tip,
        read_out: ReadOut {
            apex_radius: Some(ApexRadius {
                value: 8.1,
                u: 0.4,
                fit_depth_nm: 2.5,
                principal_nm: [7.9, 8.3],
                sphere_nm: Some(8.2),
                paraboloid_nm: Some(7.4),
            }),
            half_angle: Some(HalfAngle {
                value: 15.2,
                u: 0.8,
                between_nm: [8.0, 25.0],
                per_azimuth: Vec::new(),
                tilt: None,
            }),
            reasons: Vec::new(),
        },
        estimate: None,
        band: None,
        identified: true,
        exercised_depth_nm: Some(29.0),
        height_u_nm: 0.3,
        sha256: None,
        known: None,
        diagnosis: Vec::new(),
    }
}
