//! Levelling on the dominant flat: the plane first, then the rows on its pixels.

use super::base::{self, Samples};
use super::model::{self, Model, RowMoments, moments};
use super::rows::{self, Offsets, Shifts};
use super::{Leveled, RowJump, Scan};
use crate::error::Result;
use crate::progress::Progress;
use crate::units::format_length;
use ndarray::Array2;

/// What a refit settled on.
struct Settled {
    model: Model,
    base: Array2<bool>,
    core: Array2<bool>,
    half_band: f64,
}

/// `Auto`, and with `always` `Rows`.
pub(super) fn level(scan: &Scan<'_>, always: bool, progress: &Progress) -> Result<Leveled> {
    let shifts = rows::shifts(&scan.z, scan.finest);
    let mut warnings = shifts
        .lasting
        .iter()
        .map(|jump| lasting_jump(jump, always))
        .collect();
    let mut model = known_jumps(scan, &shifts, always);
    let samples = Samples::choose(&scan.z, scan.allowed.as_ref());
    let found = base::find(&scan.z, &model, &samples, scan.finest, shifts.scatter);
    progress.check()?;
    progress.report(0.4);
    let Some(found) = found else {
        return Ok(no_flat(scan, &shifts, always, warnings));
    };
    model.plane = found.plane;
    let mut settled = settle(scan, model, 3.0 * found.scale, None, progress)?;
    progress.report(0.7);
    let mut offsets = row_offsets(scan, &settled);
    let known = offsets.of_row.iter().flatten().count();
    let align = known > 0 && (always || offsets.stand_out(scan.finest));
    let mut how = String::new();
    if align {
        settled = align_rows(scan, settled, &samples, &offsets, progress)?;
        how = format!(", {known} rows aligned on its pixels");
        let (_, missing) = offsets.filled();
        if !missing.is_empty() {
            warnings.push(format!(
                "rows without enough base-plane pixels were aligned by their neighbours: rows {}",
                rows::list(&missing)
            ));
        }
        offsets.replace(&settled.model.offsets);
        straighten(&mut settled.model, &mut offsets);
    } else {
        let singles: Vec<usize> = shifts.single.iter().map(|j| j.row).collect();
        if !singles.is_empty() {
            how = format!(", shifted rows put back: {}", rows::list(&singles));
        }
        if always {
            warnings.push(
                "rows were not aligned: no row has enough base-plane pixels to be aligned on"
                    .to_owned(),
            );
        }
        offsets.add(&settled.model.offsets);
    }
    let plane = settled.model.plane;
    let slope = scan.slope(plane.per_column, plane.per_row);
    let share = model::count(&settled.base) as f64 / scan.usable() as f64;
    let step = format!(
        "levelled: robust plane on the dominant flat ({:.0} % of the pixels), \
         slope {:.3e} along x and {:.3e} along y{how}",
        100.0 * share,
        slope[0],
        slope[1]
    );
    let heights = settled.model.residuals(&scan.z);
    Ok(Leveled {
        map: scan.map.with_heights(heights, step),
        base: settled.base,
        noise_nm: scan.noise,
        slope,
        row_jumps: offsets.jumps(scan.finest),
        drift_nm: offsets.drift(),
        warnings,
    })
}

/// The model that puts back the rows known to be shifted; lasting shifts only with `lasting`.
fn known_jumps(scan: &Scan<'_>, shifts: &Shifts, lasting: bool) -> Model {
    let mut model = Model::flat(scan.z.nrows());
    for jump in &shifts.single {
        model.offsets[jump.row] += jump.jump_nm;
    }
    for jump in shifts.lasting.iter().filter(|_| lasting) {
        for offset in &mut model.offsets[jump.row..] {
            *offset += jump.jump_nm;
        }
    }
    model
}

/// Refits the model to the base pixels until they no longer change: the plane, or with `of_row`
/// the slope along x and an offset for each row that has one.
fn settle(
    scan: &Scan<'_>,
    mut model: Model,
    half_band: f64,
    of_row: Option<&Offsets>,
    progress: &Progress,
) -> Result<Settled> {
    let allowed = scan.allowed.as_ref();
    let (rows_n, columns) = scan.z.dim();
    let enough = 1e-5 * half_band;
    let mut base = model.near(&scan.z, half_band, allowed);
    let reach = model::core_reach(&scan.z, &base, allowed);
    let mut core = model::core(&scan.z, &base, allowed, reach);
    for _ in 0..12 {
        let trusted = of_row.map(|_| by_row(&core, &base));
        let mut moved = 0.0;
        for _ in 0..8 {
            progress.check()?;
            let sums = moments(
                &scan.z,
                &model,
                trusted.as_ref().unwrap_or(&core),
                half_band,
            );
            let change = match of_row {
                None => {
                    let correction = model::plane_correction(&sums);
                    model.plane = model.plane.plus(correction);
                    correction.at_centre.abs()
                        + correction.per_column.abs() * columns as f64
                        + correction.per_row.abs() * rows_n as f64
                }
                Some(of_row) => correct_rows(&mut model, &sums, of_row),
            };
            moved += change;
            if change < enough {
                break;
            }
        }
        base = model.near(&scan.z, half_band, allowed);
        if moved < 10.0 * enough {
            break;
        }
        core = model::core(&scan.z, &base, allowed, reach);
    }
    Ok(Settled {
        model,
        base,
        core,
        half_band,
    })
}

/// The core pixels, in rows with too few of them all base pixels.
fn by_row(core: &Array2<bool>, base: &Array2<bool>) -> Array2<bool> {
    let fewest = rows::fewest_pixels(core.ncols());
    let mut chosen = core.clone();
    for (mut chosen, base) in chosen.rows_mut().into_iter().zip(base.rows()) {
        if chosen.iter().filter(|m| **m).count() < fewest {
            chosen.assign(&base);
        }
    }
    chosen
}

/// Offsets of the rows from the settled model, also of rows that drifted out of its band.
fn row_offsets(scan: &Scan<'_>, settled: &Settled) -> Offsets {
    let trusted = by_row(&settled.core, &settled.base);
    let sums = moments(&scan.z, &settled.model, &trusted, settled.half_band);
    let together = model::neighbour_correlation(&scan.z, &settled.model, &trusted);
    let mut offsets = rows::offsets(&sums, scan.z.ncols(), together);
    if offsets.of_row.iter().all(Option::is_none) {
        return offsets;
    }
    let mut held: Vec<f64> = sums.iter().map(|m| m.n).collect();
    let usual = base::median(&mut held);
    let full: Vec<bool> = sums.iter().map(|m| m.n >= 0.5 * usual).collect();
    let n = full.len();
    // Forwards and backwards: a row takes after the neighbour that is known already.
    let walk = (1..n)
        .map(|r| (r - 1, r))
        .chain((1..n).rev().map(|r| (r, r - 1)));
    let mut sure = full.clone();
    for (from, to) in walk {
        if sure[to] || !sure[from] {
            continue;
        }
        if let Some(start) = offsets.of_row[from]
            && let Some(here) = follow(scan, settled, to, start, 0.5 * usual)
        {
            offsets.of_row[to] = Some(here);
            sure[to] = true;
        }
    }
    bridge(scan, settled, &mut offsets);
    offsets
}

/// Gives one or two rows without an offset, between rows with one, the median height of the
/// columns that are base on both sides, where these agree on it. Longer runs may be features.
fn bridge(scan: &Scan<'_>, settled: &Settled, offsets: &mut Offsets) {
    let rows_n = offsets.of_row.len();
    let known: Vec<usize> = (0..rows_n)
        .filter(|&r| offsets.of_row[r].is_some())
        .collect();
    for pair in known
        .windows(2)
        .filter(|w| (2..=3).contains(&(w[1] - w[0])))
    {
        for r in pair[0] + 1..pair[1] {
            let mut heights: Vec<f64> = (0..scan.z.ncols())
                .filter(|&c| settled.base[[pair[0], c]] && settled.base[[pair[1], c]])
                .map(|c| settled.model.residual(&scan.z, r, c))
                .filter(|h| !h.is_nan())
                .collect();
            if heights.len() < rows::fewest_pixels(scan.z.ncols()) {
                continue;
            }
            let middle = base::median(&mut heights);
            let agree = heights
                .iter()
                .filter(|h| (*h - middle).abs() <= settled.half_band)
                .count();
            if 5 * agree >= 4 * heights.len() {
                offsets.of_row[r] = Some(middle);
            }
        }
    }
}

/// The offset of row `r` when it is within a third of the band from `start`, its neighbour's: the
/// base is followed as it drifts, but not up the side of a feature.
fn follow(scan: &Scan<'_>, settled: &Settled, r: usize, start: f64, enough: f64) -> Option<f64> {
    let allowed = |c: usize| scan.allowed.as_ref().is_none_or(|a| a[[r, c]]);
    let mut centre = start;
    let mut held = 0.0;
    for _ in 0..5 {
        let (sum, n) = (0..scan.z.ncols())
            .filter(|&c| allowed(c))
            .map(|c| settled.model.residual(&scan.z, r, c))
            .filter(|h| (h - centre).abs() <= settled.half_band)
            .fold((0.0, 0.0), |(s, n), h| {
                let w = model::weight((h - centre) / settled.half_band);
                (s + w * h, n + w)
            });
        if n < rows::fewest_pixels(scan.z.ncols()) as f64 {
            return None;
        }
        (centre, held) = (sum / n, n);
    }
    (held >= enough && (centre - start).abs() <= settled.half_band / 3.0).then_some(centre)
}

/// Takes the offsets off, finds the width of the base again, which is narrower now, and settles.
fn align_rows(
    scan: &Scan<'_>,
    mut settled: Settled,
    samples: &Samples,
    offsets: &Offsets,
    progress: &Progress,
) -> Result<Settled> {
    let (fill, _) = offsets.filled();
    for (o, f) in settled.model.offsets.iter_mut().zip(fill) {
        *o += f;
    }
    let mut heights: Vec<f64> = samples
        .at
        .iter()
        .map(|&(r, c)| settled.model.residual(&scan.z, r, c))
        .collect();
    heights.sort_unstable_by(f64::total_cmp);
    let half_band = match base::dominant_pile(&heights, scan.finest) {
        Some(pile) => {
            settled.model.plane.at_centre += pile.centre;
            3.0 * pile.scale
        }
        None => settled.half_band,
    };
    settle(scan, settled.model, half_band, Some(offsets), progress)
}

/// Moves the straight part of the offsets into the plane, where slopes are told; the model as a
/// whole stays the same.
fn straighten(model: &mut Model, offsets: &mut Offsets) {
    let (middle, per_row) = offsets.line();
    model.plane.at_centre += middle;
    model.plane.per_row += per_row;
    let rows_n = model.offsets.len();
    for (r, o) in model.offsets.iter_mut().enumerate() {
        *o -= middle + per_row * model::from_middle(r, rows_n);
    }
    offsets.replace(&model.offsets);
}

/// Least squares with an offset for each row and one slope along x, in closed form; returns the
/// largest change, nm.
fn correct_rows(model: &mut Model, sums: &[RowMoments], of_row: &Offsets) -> f64 {
    let (mut uz, mut uu, mut reach) = (0.0, 0.0, 0.0f64);
    for m in sums.iter().filter(|m| m.n > 0.0) {
        uz += m.uz - m.u * m.z / m.n;
        uu += m.uu - m.u * m.u / m.n;
        reach = reach.max((m.uu / m.n).sqrt());
    }
    let slope = if uu > 0.0 { uz / uu } else { 0.0 };
    model.plane.per_column += slope;
    let own = |r: usize| of_row.of_row[r].is_some() && sums[r].n > 0.0;
    let correction = Offsets {
        of_row: (0..sums.len())
            .map(|r| own(r).then(|| (sums[r].z - slope * sums[r].u) / sums[r].n))
            .collect(),
        error: of_row.error,
    };
    let (fill, _) = correction.filled();
    let mut change = slope.abs() * reach;
    for (o, f) in model.offsets.iter_mut().zip(fill) {
        *o += f;
        change = change.max(f.abs());
    }
    change
}

/// A rough surface: a least-squares plane through everything.
fn no_flat(scan: &Scan<'_>, shifts: &Shifts, always: bool, mut warnings: Vec<String>) -> Leveled {
    let mut model = known_jumps(scan, shifts, false);
    let base = model.near(&scan.z, f64::INFINITY, scan.allowed.as_ref());
    // The second pass takes off what rounding left of the first.
    for _ in 0..2 {
        let sums = moments(&scan.z, &model, &base, f64::INFINITY);
        model.plane = model.plane.plus(model::plane_correction(&sums));
    }
    warnings.push(
        "no flat stands out: a least-squares plane through all heights was removed; \
         choose a region that is flat where a step or a height matters"
            .to_owned(),
    );
    if always {
        warnings.push("rows were not aligned: there is no base plane to align them on".to_owned());
    }
    let slope = scan.slope(model.plane.per_column, model.plane.per_row);
    let step = format!(
        "levelled: least-squares plane through all heights (no flat stands out), \
         slope {:.3e} along x and {:.3e} along y",
        slope[0], slope[1]
    );
    Leveled {
        map: scan.map.with_heights(model.residuals(&scan.z), step),
        base,
        noise_nm: scan.noise,
        slope,
        row_jumps: shifts.all(),
        drift_nm: None,
        warnings,
    }
}

fn lasting_jump(jump: &RowJump, removed: bool) -> String {
    let what = format!(
        "from row {} on everything is shifted by {}",
        jump.row,
        format_length(jump.jump_nm)
    );
    if removed {
        format!("{what}: taken as a jump of the scanner and removed")
    } else {
        format!(
            "{what}: a jump of the scanner, or a step of the surface along the fast axis; \
             left as it is (row alignment removes it)"
        )
    }
}
