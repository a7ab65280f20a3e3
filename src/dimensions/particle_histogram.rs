//! Histograms of the particles listed one by one: their heights and diameters.

use super::{Dimension, Kind};
use std::f64::consts::SQRT_2;

/// Fewer particles make no histogram.
const FEWEST: usize = 3;
/// Most bins.
const MOST_BINS: f64 = 24.0;

/// How many particles fall into each bin, as scanned and corrected, on the same bins.
#[derive(Debug, Clone, PartialEq)]
pub struct ParticleHistogram {
    /// "height" or "diameter".
    pub quantity: String,
    /// Unit of the bins.
    pub unit: &'static str,
    /// Lower end of the first bin.
    pub from: f64,
    /// Width of a bin.
    pub step: f64,
    /// Particles in each bin, as scanned.
    pub as_scanned: Vec<usize>,
    /// Particles in each bin, corrected.
    pub corrected: Vec<usize>,
}

impl ParticleHistogram {
    /// Lower end, centre and upper end of bin `i`.
    pub fn bin(&self, i: usize) -> [f64; 3] {
        [0.0, 0.5, 1.0].map(|part| self.from + (i as f64 + part) * self.step)
    }
}

/// The histograms of the single particles among `lines` (means are left out): heights, diameters.
/// None of a quantity with fewer than three values. Bins are 1, 2 or 5 times a power of ten wide,
/// about Freedman and Diaconis' 2 IQR n^(-1/3) (Z. Wahrscheinlichkeitstheorie 57, 453 (1981), from
/// memory), not below the mean standard uncertainty: finer bins would show noise.
pub fn particle_histograms(lines: &[&Dimension]) -> Vec<ParticleHistogram> {
    let of = |quantity: &str| {
        let single = lines
            .iter()
            .filter(|l| l.kind == Kind::Particle && l.quantity == quantity);
        let scanned: Vec<f64> = single
            .clone()
            .filter_map(|l| Some(l.as_scanned?.value))
            .collect();
        let corrected: Vec<f64> = single.clone().filter_map(|l| l.corrected?.value).collect();
        let u: Vec<f64> = single
            .clone()
            .filter_map(|l| l.corrected.and_then(|c| c.u).or(l.as_scanned?.u))
            .collect();
        let unit = single.clone().next()?.unit;
        let u = u.iter().sum::<f64>() / u.len().max(1) as f64;
        histogram(quantity, unit, &scanned, &corrected, u)
    };
    ["height", "diameter"].into_iter().filter_map(of).collect()
}

fn histogram(
    quantity: &str,
    unit: &'static str,
    scanned: &[f64],
    corrected: &[f64],
    u: f64,
) -> Option<ParticleHistogram> {
    if scanned.len().max(corrected.len()) < FEWEST {
        return None;
    }
    let all = scanned.iter().chain(corrected);
    let (low, high) = all.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), v| {
        (l.min(*v), h.max(*v))
    });
    let wish = spread(scanned).max(spread(corrected));
    let least = u.max((high - low) / MOST_BINS);
    // Rounded to about the nearest; never below what must not be resolved.
    let step = match (wish > 0.0, least > 0.0) {
        (true, true) => round_down(wish * SQRT_2).max(round_up(least)),
        (true, false) => round_down(wish * SQRT_2),
        (false, true) => round_up(least),
        (false, false) => round_up(high.abs().max(1.0) * 1e-3),
    };
    let from = (low / step).floor() * step;
    let bins = ((high - from) / step).floor() as usize + 1;
    let count = |values: &[f64]| {
        let mut counts = vec![0; bins];
        for v in values {
            counts[(((v - from) / step) as usize).min(bins - 1)] += 1;
        }
        counts
    };
    Some(ParticleHistogram {
        quantity: quantity.to_owned(),
        unit,
        from,
        step,
        as_scanned: count(scanned),
        corrected: count(corrected),
    })
}

/// Bin width of Freedman and Diaconis; 0 for too few values.
fn spread(values: &[f64]) -> f64 {
    if values.len() < FEWEST {
        return 0.0;
    }
    let mut sorted = values.to_vec();
    sorted.sort_by(f64::total_cmp);
    let at = |q: f64| sorted[(q * (sorted.len() - 1) as f64).round() as usize];
    2.0 * (at(0.75) - at(0.25)) / (values.len() as f64).cbrt()
}

/// The greatest of 1, 2, 5 x 10^n not above `x`.
fn round_down(x: f64) -> f64 {
    let power = 10f64.powf(x.log10().floor());
    [5.0, 2.0, 1.0]
        .into_iter()
        .map(|m| m * power)
        .find(|s| *s <= x * (1.0 + 1e-9))
        .unwrap_or(power)
}

/// The least of 1, 2, 5 x 10^n not below `x`.
fn round_up(x: f64) -> f64 {
    let power = 10f64.powf(x.log10().floor());
    [1.0, 2.0, 5.0, 10.0]
        .into_iter()
        .map(|m| m * power)
        .find(|s| *s >= x * (1.0 - 1e-9))
        .unwrap_or(10.0 * power)
}

#[cfg(test)]
mod tests {
    use super::super::{CorrectedValue, Request, Value, answer};
    use super::*;

    fn histograms_of(lines: &[Dimension]) -> Vec<ParticleHistogram> {
        particle_histograms(&lines.iter().collect::<Vec<_>>())
    }

    fn line(quantity: &str, scanned: f64, corrected: Option<f64>, u: f64) -> Dimension {
        let request = Request::new("particles", Kind::Particle);
        let mut line = answer(&request, Kind::Particle, quantity, "nm", "");
        line.as_scanned = Some(Value {
            value: scanned,
            u: Some(u),
        });
        line.corrected = Some(CorrectedValue {
            value: corrected,
            u: Some(u),
            expanded: None,
            k: None,
            low: None,
            high: None,
        });
        line
    }

    #[test]
    fn every_particle_falls_into_its_bin_and_means_into_none() {
        // Heights 10, 10.5 ... 19.5; diameters wider as scanned by 8.
        let mut lines = vec![line("mean height", 14.75, Some(14.75), 0.1)];
        for i in 0..20 {
            let h = 10.0 + 0.5 * f64::from(i);
            lines.push(line("height", h, Some(h), 0.1));
            lines.push(line("diameter", h + 8.0, (i > 0).then_some(h), 0.1));
        }
        let all = histograms_of(&lines);
        assert_eq!(all.len(), 2);
        // 2 IQR n^(-1/3) = 2 * 4.5 / 2.714 = 3.3, rounded to 2: 5 is further than a factor sqrt(2).
        assert_eq!((all[0].from, all[0].step), (10.0, 2.0));
        assert_eq!(all[0].as_scanned, [4; 5]);
        assert_eq!(all[0].corrected, [4; 5]);
        assert_eq!(all[1].as_scanned, [0, 0, 0, 0, 4, 4, 4, 4, 4]);
        assert_eq!(all[1].corrected, [3, 4, 4, 4, 4, 0, 0, 0, 0]);
        assert_eq!(all[1].bin(1), [12.0, 13.0, 14.0]);
    }

    #[test]
    fn bins_are_no_finer_than_the_uncertainty_and_few_or_equal_values_do_no_harm() {
        let lines: Vec<Dimension> = (0..9)
            .map(|i| line("height", 10.0 + 0.01 * f64::from(i), None, 0.4))
            .collect();
        assert_eq!(histograms_of(&lines)[0].step, 0.5);
        assert!(histograms_of(&lines[..2]).is_empty());
        let same: Vec<Dimension> = (0..4)
            .map(|_| line("height", 7.0, Some(7.0), 0.0))
            .collect();
        let found = histograms_of(&same);
        assert_eq!(found[0].corrected.iter().sum::<usize>(), 4);
    }
}
