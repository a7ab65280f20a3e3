//! From the bound to the estimate: polish, centre, band, findings.

use super::diagnose::{LEAST_FEATURES, caution, further_apices, refusal};
use super::polish::{self, Polished};
use super::{Bound, Diagnosis, Estimate, Method, Settings, smooth};
use crate::error::Result;
use crate::heightmap::{HeightMap, Pitch};
use crate::morphology;
use crate::progress::Progress;
use crate::tip::read_out::{Quadric, ReadOut, read_out, rough_radius};
use crate::tip::{Band, Tip};
use ndarray::Array2;
use std::f64::consts::{FRAC_PI_2, TAU};

/// Share of the tip cells above a depth that must have been seen for the depth to count.
const SEEN: f64 = 0.8;
/// Remaining error of the contacts' places, pixels; this and [`LEFT`] were tuned on virtual scans
/// (seeds 301-308 and 401-408) so that the band holds at least 93 in 100 cells of every kind, and checked on
/// fresh ones.
const PLACE_PX: f64 = 0.11;
/// Share of the noise that the fit leaves in a cell, beside what leaving out features shows.
const LEFT: f64 = 0.2;
/// Scatter of the features about one common tip that passes beside the noise, pixels.
const AGREE_PX: f64 = 0.1;
/// Height over the noise that makes a feature count for the apex.
const TALL: f64 = 10.0;

pub(super) fn finish(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    bound: Bound,
    progress: &Progress,
) -> Result<Estimate> {
    let left = noise * smooth::gain(bound.smoothing);
    let px = (scan.pitch().x * scan.pitch().y).sqrt();
    let polished = if settings.method == Method::Auto && !bound.mostly_guarded() {
        let input = polish::Input {
            scan: scan.heights(),
            noise,
            px,
            smoothing: bound.smoothing,
            smooth_noise: left,
        };
        polish::polish(&input, &bound.found.shape, progress)?
    } else {
        None
    };
    match polished {
        // Features must show one and the same tip, and one that has a tip's apex.
        Some(p) if p.scale <= 3.0 * noise + AGREE_PX * px && !is_plateau(&p.shape) => {
            from_polished(scan, noise, settings, &bound, &p)
        }
        _ => from_bound(scan, noise, settings, &bound, progress),
    }
}

/// Whether the shape stays next to level half-way to the window's rim on some side: the corner of a
/// plateau, not a tip.
fn is_plateau(shape: &Array2<f64>) -> bool {
    let (rows, columns) = shape.dim();
    let deepest = -shape.iter().copied().fold(0.0, f64::min);
    let ring = shape.indexed_iter().filter(|((r, c), _)| {
        let (dr, dc) = (r.abs_diff(rows / 2), c.abs_diff(columns / 2));
        dr <= rows / 4 && dc <= columns / 4 && (dr == rows / 4 || dc == columns / 4)
    });
    let shallowest = ring.map(|(_, p)| -p).fold(f64::INFINITY, f64::min);
    shallowest < 0.05 * deepest
}

/// Shape, band and figures from the least-squares fit.
fn from_polished(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    bound: &Bound,
    polished: &Polished,
) -> Result<Estimate> {
    let pitch = scan.pitch();
    let px = (pitch.x * pitch.y).sqrt();
    let centring = Centring::find(polished, pitch);
    let shape = centring.tip(&polished.shape);
    let support = centring.counts(&polished.support);
    let mut tip = Tip::new(clamped(&shape), pitch)?;
    let others: Vec<Array2<f64>> = polished.leave_out.iter().map(|t| centring.tip(t)).collect();
    let exercised = exercised_depth(&tip, &support, polished);
    let scatter = jackknife(&shape, &others);
    let cell_u = typical_u(&tip, &scatter, exercised);
    // What bilinear interpolation between the cells of a cap can err by.
    let chord = px * px / (4.0 * rough_radius(&tip).filter(|r| *r > px).unwrap_or(px));
    let mut height_u = cell_u.max(chord);
    // What leaving out features does to the radius says more than the cells' scatter.
    let first = exercised.map(|z| read_out(&tip, z, height_u));
    let radius_u = first.as_ref().and_then(|r| r.apex_radius).and_then(|r| {
        let u = radius_scatter(&others, pitch, r.fit_depth_nm, height_u)?;
        Some((r, u))
    });
    if let Some((r, u)) = radius_u {
        height_u = height_u.max(r.fit_depth_nm * u / r.value);
    }
    let mut band = band(&tip, &support, &scatter, &bound.found.shape, LEFT * noise)?;
    let features = polished.features.len();
    let further = further_apices(&tip, &support, (5.0 * height_u).max(0.25 * px));
    if let Some(r) = settings.feature_radius_nm.filter(|r| *r > 0.0) {
        (tip, band) = all_without_feature(&tip, &band, r)?;
    }
    let mut read = match exercised {
        Some(z) => read_out(&tip, z, height_u),
        None => ReadOut {
            reasons: vec!["The scan exercised no part of the tip.".to_owned()],
            ..ReadOut::default()
        },
    };
    // Features that stand out from the noise and show the fitted cap.
    let seeing = read.apex_radius.map_or(features, |r| {
        let needed = (0.5 * r.fit_depth_nm).max(TALL * noise);
        polished
            .features
            .iter()
            .filter(|f| f.reach >= needed)
            .count()
    });
    let mut diagnosis = common_findings(scan, bound, &tip, exercised, noise, &read);
    apex_findings(&mut diagnosis, &read, seeing, px);
    if let Some(r) = read.apex_radius
        && let Some(fit) = Quadric::fit(tip.shape(), pitch, r.fit_depth_nm, cell_u)
        && fit.misfit > 2.5 * cell_u + 0.02 * r.fit_depth_nm
    {
        diagnosis.push(refusal(
            format!(
                "The apex is not round: it departs from a rounded cap by {:.3} nm over the upper \
                 {:.3} nm (worn, chipped or flat).",
                fit.misfit, r.fit_depth_nm
            ),
            "Use the tip's shape as it is; a radius does not describe it.",
        ));
    }
    if !further.is_empty() {
        diagnosis.push(double_tip(&tip, &further));
    }
    let identified = settle(&mut diagnosis, &mut read);
    let evidence = polished
        .features
        .iter()
        .flat_map(|f| f.pixels.iter().map(|&(r, c)| (r as usize, c as usize)))
        .collect();
    Ok(Estimate {
        tip,
        // Fewer features do not show how far they scatter.
        band: (features >= LEAST_FEATURES).then_some(band),
        threshold_nm: bound.threshold,
        smoothing_px: bound.smoothing,
        exercised_depth_nm: exercised,
        support,
        evidence,
        height_u_nm: height_u,
        apex_identified: identified,
        read_out: read,
        features: seeing,
        further_apices: further,
        diagnosis,
    })
}

/// The iteration's bound as it is: the textbook method, or no sharp feature to polish on.
fn from_bound(
    scan: &HeightMap,
    noise: f64,
    settings: &Settings,
    bound: &Bound,
    progress: &Progress,
) -> Result<Estimate> {
    let pitch = scan.pitch();
    let px = (pitch.x * pitch.y).sqrt();
    let mut tip = Tip::new(bound.found.shape.clone(), pitch)?;
    let heights = smooth::gauss(scan.heights(), bound.smoothing);
    let eroded = morphology::erode(heights.view(), tip.shape(), &progress.part(0.0, 0.5))?;
    let contacts = morphology::contacts(eroded.view(), tip.shape(), &progress.part(0.5, 1.0))?;
    let half = [tip.shape().nrows() / 2, tip.shape().ncols() / 2];
    let mut support = Array2::<u32>::zeros(tip.shape().dim());
    let mut evidence = Vec::new();
    for (at, &[dr, dc]) in contacts.offsets.indexed_iter() {
        if dr == i16::MIN {
            continue;
        }
        let cell = (
            (half[0] as isize + isize::from(dr)) as usize,
            (half[1] as isize + isize::from(dc)) as usize,
        );
        support[cell] += 1;
        if f64::from(tip.shape()[cell]) < -4.0 * noise.max(bound.threshold) {
            evidence.push(at);
        }
    }
    let textbook = settings.method == Method::Textbook;
    let exercised = textbook
        .then(|| seen_depth(&tip, &support.mapv(|n| n > 0)))
        .flatten();
    let height_u = noise.max(bound.threshold);
    if let Some(r) = settings.feature_radius_nm.filter(|r| *r > 0.0) {
        tip = without_feature(&tip, r)?;
    }
    let mut read = match exercised {
        Some(z) => read_out(&tip, z, height_u),
        None => ReadOut {
            reasons: vec!["No sharp isolated feature showed the tip.".to_owned()],
            ..ReadOut::default()
        },
    };
    let mut diagnosis = common_findings(scan, bound, &tip, exercised, noise, &read);
    if textbook {
        apex_findings(&mut diagnosis, &read, LEAST_FEATURES, px);
    } else {
        diagnosis.push(refusal(
            "No sharp isolated feature shows the tip from all sides: the bound reflects the \
             features' own width.",
            "Scan a characterizer with sharp, tall, isolated spikes or a sharp rough surface.",
        ));
    }
    let identified = settle(&mut diagnosis, &mut read);
    Ok(Estimate {
        band: None,
        threshold_nm: bound.threshold,
        smoothing_px: bound.smoothing,
        exercised_depth_nm: exercised,
        support,
        evidence,
        height_u_nm: height_u,
        apex_identified: identified,
        read_out: read,
        features: 0,
        further_apices: Vec::new(),
        tip,
        diagnosis,
    })
}

fn clamped(shape: &Array2<f64>) -> Array2<f32> {
    let mut shape = shape.mapv(|p| p.min(0.0) as f32);
    let centre = (shape.nrows() / 2, shape.ncols() / 2);
    shape[centre] = 0.0;
    shape
}

/// The shift that brings the fitted apex to the centre cell.
struct Centring {
    rows: f64,
    columns: f64,
    apex: f64,
}

impl Centring {
    fn find(polished: &Polished, pitch: Pitch) -> Self {
        let shape = &polished.shape;
        let px = (pitch.x * pitch.y).sqrt();
        let rough = Tip::new(clamped(shape), pitch)
            .ok()
            .as_ref()
            .and_then(rough_radius);
        let radius = rough.filter(|r| r.is_finite()).unwrap_or(px).max(px);
        let depth = (0.3 * radius).max(4.5 * px * px / radius);
        let none = Self {
            rows: 0.0,
            columns: 0.0,
            apex: 0.0,
        };
        let heights = shape.mapv(|p| p as f32);
        let Some(fit) = Quadric::fit(heights.view(), pitch, depth, 0.1 * depth) else {
            return none;
        };
        let (rows, columns) = (fit.apex[1] / pitch.y, fit.apex[0] / pitch.x);
        // A fit that puts the apex elsewhere describes no apex.
        if fit.radius().is_none() || rows.abs() > 2.0 || columns.abs() > 2.0 {
            return none;
        }
        // The fit's height averages the noise; on an apex that is not round it misses the tip.
        let mut found = Self {
            rows,
            columns,
            apex: 0.0,
        };
        let centre = (shape.nrows() / 2, shape.ncols() / 2);
        let here = found.look(shape, centre);
        let error = polished.scale / f64::from(polished.support[centre].max(1.0)).sqrt();
        let apart = (here + fit.apex_depth).abs();
        found.apex = if apart <= 4.5 * error + 0.01 * px {
            -fit.apex_depth
        } else {
            here
        };
        found
    }

    /// Tip heights at the shifted places, apex carried to 0.
    fn tip(&self, grid: &Array2<f64>) -> Array2<f64> {
        Array2::from_shape_fn(grid.dim(), |at| self.look(grid, at) - self.apex)
    }

    /// Counts at the shifted places.
    fn counts(&self, grid: &Array2<f32>) -> Array2<u32> {
        let grid = grid.mapv(f64::from);
        Array2::from_shape_fn(grid.dim(), |at| {
            self.look(&grid, at).round().max(0.0) as u32
        })
    }

    /// Bilinear; beyond the grid its nearest cell.
    fn look(&self, grid: &Array2<f64>, (r, c): (usize, usize)) -> f64 {
        let (rows, columns) = grid.dim();
        let (y, x) = (r as f64 + self.rows, c as f64 + self.columns);
        let (i, j) = (y.floor() as isize, x.floor() as isize);
        let (fy, fx) = (y - y.floor(), x - x.floor());
        let at = |i: isize, j: isize| {
            let i = i.clamp(0, rows as isize - 1) as usize;
            grid[(i, j.clamp(0, columns as isize - 1) as usize)]
        };
        (at(i, j) * (1.0 - fx) + at(i, j + 1) * fx) * (1.0 - fy)
            + (at(i + 1, j) * (1.0 - fx) + at(i + 1, j + 1) * fx) * fy
    }
}

/// Deepest level above which the scan saw [`SEEN`] of the tip, no deeper than three features did.
fn exercised_depth(tip: &Tip, support: &Array2<u32>, polished: &Polished) -> Option<f64> {
    let seen = support.mapv(|n| n as f32 >= polish::LEAST_SUPPORT);
    let mut reaches: Vec<f64> = polished.features.iter().map(|f| f.reach).collect();
    reaches.sort_by(|a, b| b.total_cmp(a));
    let third = reaches.get(2.min(reaches.len().checked_sub(1)?))?;
    seen_depth(tip, &seen)
        .map(|z| z.min(0.95 * third))
        .filter(|z| *z > 0.0)
}

fn seen_depth(tip: &Tip, seen: &Array2<bool>) -> Option<f64> {
    let mut cells: Vec<(f32, bool)> = tip
        .shape()
        .iter()
        .zip(seen)
        .map(|(&p, &s)| (-p, s))
        .collect();
    cells.sort_by(|a, b| a.0.total_cmp(&b.0));
    let mut depth = None;
    let mut count = 0;
    for (k, (z, s)) in cells.iter().enumerate() {
        count += usize::from(*s);
        if *s && f64::from(count as u32) >= SEEN * (k + 1) as f64 {
            depth = Some(f64::from(*z));
        }
    }
    depth.filter(|z| z.is_finite() && *z > 0.0)
}

/// Jackknife standard error per cell, nm.
fn jackknife(shape: &Array2<f64>, others: &[Array2<f64>]) -> Array2<f64> {
    let groups = others.len() as f64;
    let mut sum = Array2::<f64>::zeros(shape.dim());
    for other in others {
        ndarray::Zip::from(&mut sum)
            .and(other)
            .and(shape)
            .for_each(|s, &o, &p| *s += (o - p) * (o - p));
    }
    sum.mapv(|s| (s * (groups - 1.0).max(0.0) / groups.max(1.0)).sqrt())
}

/// Jackknife standard error of the radius, nm.
fn radius_scatter(others: &[Array2<f64>], pitch: Pitch, depth: f64, noise: f64) -> Option<f64> {
    let radii: Vec<f64> = others
        .iter()
        .filter_map(|o| Quadric::fit(clamped(o).view(), pitch, depth, noise)?.radius())
        .collect();
    let n = radii.len() as f64;
    if radii.len() < others.len() || n < 3.0 {
        return None;
    }
    let mean = radii.iter().sum::<f64>() / n;
    let sum: f64 = radii.iter().map(|r| (r - mean) * (r - mean)).sum();
    Some((sum * (n - 1.0) / n).sqrt())
}

/// Median standard error of the cells within the exercised depth.
fn typical_u(tip: &Tip, scatter: &Array2<f64>, exercised: Option<f64>) -> f64 {
    let depth = exercised.unwrap_or(0.0);
    let mut all: Vec<f64> = tip
        .shape()
        .iter()
        .zip(scatter)
        .filter(|(p, _)| f64::from(-**p) <= depth)
        .map(|(_, u)| *u)
        .collect();
    all.sort_by(f64::total_cmp);
    all.get(all.len() / 2).copied().unwrap_or(0.0)
}

/// `+- 2 u` where the tip was seen; elsewhere nothing inside is known and only the bound outside.
fn band(
    tip: &Tip,
    support: &Array2<u32>,
    scatter: &Array2<f64>,
    bound: &Array2<f32>,
    left: f64,
) -> Result<Band> {
    let shape = tip.shape();
    let (rows, columns) = shape.dim();
    let slope = |r: usize, c: usize| {
        let along = |a: (usize, usize), b: (usize, usize), n: f64| {
            f64::from(shape[a] - shape[b]) / n.max(1.0)
        };
        let (r0, r1) = (r.saturating_sub(1), (r + 1).min(rows - 1));
        let (c0, c1) = (c.saturating_sub(1), (c + 1).min(columns - 1));
        along((r1, c), (r0, c), (r1 - r0) as f64).hypot(along((r, c1), (r, c0), (c1 - c0) as f64))
    };
    // What interpolation between cells can err by: at most an eighth of the second differences,
    // half of that on the whole.
    let bend = |r: usize, c: usize| {
        let p = |i: usize, j: usize| f64::from(shape[(i, j)]);
        let mut sum = 0.0;
        if r > 0 && r + 1 < rows {
            sum += (p(r - 1, c) - 2.0 * p(r, c) + p(r + 1, c)).abs() / 16.0;
        }
        if c > 0 && c + 1 < columns {
            sum += (p(r, c - 1) - 2.0 * p(r, c) + p(r, c + 1)).abs() / 16.0;
        }
        sum
    };
    let mut sharper = Array2::from_elem((rows, columns), f32::NEG_INFINITY);
    let mut blunter = shape.to_owned();
    for ((r, c), &p) in shape.indexed_iter() {
        let place = PLACE_PX * slope(r, c);
        let half = (2.0 * scatter[(r, c)].hypot(place).hypot(left) + bend(r, c)) as f32;
        if support[(r, c)] as f32 >= polish::LEAST_SUPPORT {
            sharper[(r, c)] = (p - half).min(0.0);
            blunter[(r, c)] = (p + half).min(0.0);
        } else {
            let up = (slope(r, c) + 2.0 * left) as f32;
            blunter[(r, c)] = (p.max(bound[(r, c)]) + up).min(0.0);
        }
    }
    let centre = (rows / 2, columns / 2);
    sharper[centre] = 0.0;
    blunter[centre] = 0.0;
    Ok(Band {
        sharper: Tip::new(sharper, tip.pitch())?,
        blunter: Tip::new(blunter, tip.pitch())?,
    })
}

/// Takes a feature of apex radius `radius` out of the identified shape (erosion by its cap).
fn without_feature(tip: &Tip, radius: f64) -> Result<Tip> {
    let shape = eroded_by_cap(tip, radius);
    raised(shape, None, tip.pitch())
}

/// The same out of tip and band, all three by the tip's own change of height, so that the band
/// still encloses it.
fn all_without_feature(tip: &Tip, band: &Band, radius: f64) -> Result<(Tip, Band)> {
    let shape = eroded_by_cap(tip, radius);
    let apex = shape[(shape.nrows() / 2, shape.ncols() / 2)];
    let side = |side: &Tip| raised(eroded_by_cap(side, radius), Some(apex), tip.pitch());
    let band = Band {
        sharper: side(&band.sharper)?,
        blunter: side(&band.blunter)?,
    };
    Ok((raised(shape, Some(apex), tip.pitch())?, band))
}

/// Slopes and azimuths at which the cap is looked at: they miss less than 0.01 of its radius.
const CAP_SLOPES: u32 = 8;
const CAP_AZIMUTHS: u32 = 32;

/// Erosion by a half sphere. Its radius is about a pixel, and a steep flank moves by several of its
/// own heights from cell to cell: so the tip is taken between its cells, at places even over the
/// sphere's slopes. (On the cells themselves a flank would move by whole pixels.)
fn eroded_by_cap(tip: &Tip, radius: f64) -> Array2<f32> {
    let cap: Vec<[f64; 3]> = (0..=CAP_SLOPES)
        .flat_map(|i| {
            let slope = f64::from(i) / f64::from(CAP_SLOPES) * FRAC_PI_2;
            let azimuths = if i == 0 { 1 } else { CAP_AZIMUTHS };
            (0..azimuths).map(move |k| {
                let azimuth = f64::from(k) / f64::from(CAP_AZIMUTHS) * TAU;
                let off = radius * slope.sin();
                let depth = radius * (1.0 - slope.cos());
                [off * azimuth.cos(), off * azimuth.sin(), depth]
            })
        })
        .collect();
    let pitch = tip.pitch();
    let mut shape = tip.shape().to_owned();
    let [rows, columns] = [shape.nrows() / 2, shape.ncols() / 2];
    ndarray::Zip::indexed(&mut shape).par_for_each(|(r, c), p| {
        let x = (c as f64 - columns as f64) * pitch.x;
        let y = (r as f64 - rows as f64) * pitch.y;
        let depth = cap
            .iter()
            .map(|&[dx, dy, depth]| tip.depth_at(x - dx, y - dy) - depth)
            // `max` passes over the NaN beyond the grid.
            .fold(f64::NEG_INFINITY, f64::max);
        *p = -depth as f32;
    });
    shape
}

/// A shape brought to its apex: lowered by `apex`, or by the height of its own centre.
fn raised(mut shape: Array2<f32>, apex: Option<f32>, pitch: Pitch) -> Result<Tip> {
    let centre = (shape.nrows() / 2, shape.ncols() / 2);
    let apex = apex.unwrap_or(shape[centre]);
    shape.mapv_inplace(|p| (p - apex).min(0.0));
    shape[centre] = 0.0;
    Tip::new(shape, pitch)
}

fn common_findings(
    scan: &HeightMap,
    bound: &Bound,
    tip: &Tip,
    exercised: Option<f64>,
    noise: f64,
    read: &ReadOut,
) -> Vec<Diagnosis> {
    let mut out = Vec::new();
    let px = (scan.pitch().x * scan.pitch().y).sqrt();
    match exercised {
        None => out.push(refusal(
            "The tip is not determined at any depth: no feature exercised it.",
            "Scan sharp, tall, isolated features.",
        )),
        Some(z) if z < 0.9 * tip.depth_nm() => out.push(caution(
            format!("The tip is not determined beyond {z:.2} nm below its apex."),
            "Scan taller features if deeper parts of the tip matter.",
        )),
        Some(_) => {}
    }
    let guarded = bound.found.guarded;
    if guarded * 5 > bound.found.candidates && guarded > 20 {
        let [w, _] = tip.support_nm();
        out.push(caution(
            format!(
                "The tip window ({w:.0} nm wide) is smaller than the features' height needs: \
                 {guarded} scan pixels were set aside."
            ),
            "Give a wider tip support.",
        ));
    }
    let coarse = read
        .apex_radius
        .is_some_and(|r| bound.smoothing * px >= r.value / 3.0 && noise > 0.0);
    if bound.smoothing > 2.5 || coarse {
        out.push(caution(
            format!(
                "The noise ({noise:.3} nm) is high for this tip and pixel: it took a smoothing of \
                 {:.1} pixels.",
                bound.smoothing
            ),
            "Scan more slowly, average scans, or scan a sharper characterizer.",
        ));
    }
    if !bound.found.settled {
        out.push(caution(
            "The iteration was stopped before it settled: the bound may be blunter than it need be.",
            "Scan a smaller area or fewer features.",
        ));
    }
    out
}

/// What speaks against an apex radius.
fn apex_findings(out: &mut Vec<Diagnosis>, read: &ReadOut, features: usize, px: f64) {
    if features < LEAST_FEATURES {
        out.push(refusal(
            format!(
                "Only {features} distinct sharp features showed the tip from all sides; \
                 {LEAST_FEATURES} are needed."
            ),
            "Scan a larger area or a surface with more sharp features.",
        ));
    }
    match &read.apex_radius {
        None => {
            let why = read.reasons.first().cloned().unwrap_or_default();
            let advice = if why.contains("sharper than the pixels") {
                format!("Scan with pixels finer than {px:.3} nm.")
            } else {
                "Scan sharper, taller, isolated features.".to_owned()
            };
            out.push(refusal(why, advice));
        }
        Some(r) if r.u > 0.15 * r.value => out.push(refusal(
            format!("The radius is uncertain by {:.0} %.", 100.0 * r.u / r.value),
            "Scan more sharp features or with less noise.",
        )),
        Some(r) if r.principal_nm[1] > 4.0 * r.principal_nm[0] => out.push(refusal(
            format!(
                "The apex is {:.1} nm one way and {:.1} nm the other: no isolated feature shows \
                 it from all sides.",
                r.principal_nm[0], r.principal_nm[1]
            ),
            "Scan isolated spikes rather than lines.",
        )),
        Some(_) => {}
    }
}

fn double_tip(tip: &Tip, further: &[(usize, usize)]) -> Diagnosis {
    let shape = tip.shape();
    let (cr, cc) = (
        shape.nrows() as f64 / 2.0 - 0.5,
        shape.ncols() as f64 / 2.0 - 0.5,
    );
    let list: Vec<String> = further
        .iter()
        .map(|&(r, c)| {
            format!(
                "({:.1}, {:.1}) nm, {:.1} nm deep",
                (c as f64 - cc) * tip.pitch().x,
                (r as f64 - cr) * tip.pitch().y,
                -shape[(r, c)]
            )
        })
        .collect();
    caution(
        format!(
            "Possible double tip: a further apex at {}.",
            list.join("; ")
        ),
        "Replace the probe, or correct with this tip: it holds all apices.",
    )
}

/// Orders the findings, worst first, and takes back the radius where one forbids it.
fn settle(diagnosis: &mut [Diagnosis], read: &mut ReadOut) -> bool {
    diagnosis.sort_by_key(|d| !d.refuses_radius);
    let refused = diagnosis.iter().find(|d| d.refuses_radius);
    if let Some(d) = refused
        && read.apex_radius.take().is_some()
    {
        read.reasons.insert(0, d.finding.clone());
    }
    read.apex_radius.is_some()
}
