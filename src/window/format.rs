//! Numbers as people read them.

use crate::dimensions::{CorrectedValue, Value};

/// Written where there is no value.
pub const NONE: &str = "–";

/// Decimals that show `u` with two digits.
fn decimals_for(u: f64) -> usize {
    if !(u.is_finite() && u > 0.0) {
        return 2;
    }
    (1 - u.log10().floor() as i32).clamp(0, 5) as usize
}

/// A number with about `digits` significant digits.
pub fn significant(value: f64, digits: i32) -> String {
    if !value.is_finite() {
        return NONE.to_owned();
    }
    if value == 0.0 {
        return "0".to_owned();
    }
    let decimals = (digits - 1 - value.abs().log10().floor() as i32).clamp(0, 6) as usize;
    plain(format!("{value:.decimals$}"))
}

/// No "-0.0".
fn plain(text: String) -> String {
    if text.starts_with('-') && !text.contains(|c: char| ('1'..='9').contains(&c)) {
        text[1..].to_owned()
    } else {
        text
    }
}

/// `value ± u` at the digits that `u` allows.
pub fn with_u(value: f64, u: Option<f64>) -> String {
    match u {
        Some(u) if u.is_finite() => {
            let d = decimals_for(u);
            format!("{} ± {u:.d$}", plain(format!("{value:.d$}")))
        }
        _ => significant(value, 4),
    }
}

/// The as-scanned column.
pub fn as_scanned(value: Option<Value>) -> String {
    value.map_or_else(|| NONE.to_owned(), |v| with_u(v.value, v.u))
}

/// The corrected column: value and expanded uncertainty.
pub fn corrected(value: Option<CorrectedValue>) -> String {
    match value {
        Some(CorrectedValue {
            value: Some(v),
            expanded,
            ..
        }) => with_u(v, expanded),
        _ => NONE.to_owned(),
    }
}

/// The 95 % interval.
pub fn interval(value: Option<CorrectedValue>) -> String {
    let Some(c) = value else {
        return NONE.to_owned();
    };
    let width = match (c.low, c.high) {
        (Some(low), Some(high)) => high - low,
        _ => f64::NAN,
    };
    let d = decimals_for(width / 4.0);
    match (c.low, c.high) {
        (Some(low), Some(high)) => format!(
            "{} … {}",
            plain(format!("{low:.d$}")),
            plain(format!("{high:.d$}"))
        ),
        (Some(low), None) => format!("≥ {}", plain(format!("{low:.d$}"))),
        (None, Some(high)) => format!("≤ {}", plain(format!("{high:.d$}"))),
        (None, None) => NONE.to_owned(),
    }
}

/// A unit for the numbers on an axis.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Unit {
    /// Nanometres in one.
    pub nm: f64,
    /// Its sign.
    pub sign: &'static str,
}

/// The unit in which lengths of about this size have a few digits before the point.
pub fn unit_for(nm: f64) -> Unit {
    let (nm, sign) = match nm.abs() {
        a if a >= 1e10 => (1e9, "m"),
        a if a >= 1e7 => (1e6, "mm"),
        a if a >= 1e4 => (1e3, "µm"),
        _ => (1.0, "nm"),
    };
    Unit { nm, sign }
}

/// A height for the readouts, fixed digits so that it does not jump.
pub fn height(nm: f32) -> String {
    if nm.is_nan() {
        return "void".to_owned();
    }
    let unit = unit_for(f64::from(nm));
    let value = f64::from(nm) / unit.nm;
    let decimals = match value.abs() {
        _ if unit.nm > 1.0 => 3,
        a if a >= 1e3 => 1,
        _ => 2,
    };
    format!("{} {}", plain(format!("{value:.decimals$}")), unit.sign)
}

/// A fraction as per cent.
pub fn percent(fraction: f64) -> String {
    let p = 100.0 * fraction;
    match p {
        _ if p == 0.0 => "0 %".to_owned(),
        _ if p < 0.1 => "< 0.1 %".to_owned(),
        _ if p > 99.9 && p < 100.0 => "> 99.9 %".to_owned(),
        _ => format!("{p:.1} %"),
    }
}

/// Round steps for ticks and scale bars: the largest of 1, 2, 5 x 10^n not above `limit`.
pub fn round_step(limit: f64) -> f64 {
    if !(limit > 0.0 && limit.is_finite()) {
        return 1.0;
    }
    let power = 10f64.powf(limit.log10().floor());
    [5.0, 2.0, 1.0]
        .into_iter()
        .map(|m| m * power)
        .find(|s| *s <= limit * (1.0 + 1e-9))
        .unwrap_or(power)
}

/// A round length ("200 nm", "1 µm") for scale bars.
pub fn round_length(nm: f64) -> String {
    let (value, unit) = match nm {
        _ if nm >= 1e9 => (nm / 1e9, "m"),
        _ if nm >= 1e6 => (nm / 1e6, "mm"),
        _ if nm >= 1e3 => (nm / 1e3, "µm"),
        _ => (nm, "nm"),
    };
    format!("{} {unit}", (value * 1e6).round() / 1e6)
}

/// A tick's number, with the digits that ticks over `span` need.
pub fn tick(value: f64, span: f64) -> String {
    let decimals = (1 - span.abs().max(1e-9).log10().floor() as i32).clamp(0, 6) as usize;
    plain(format!("{value:.decimals$}"))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_digits_of_uncertainty() {
        assert_eq!(with_u(100.4321, Some(2.23)), "100.4 ± 2.2");
        assert_eq!(with_u(100.4321, Some(0.0123)), "100.432 ± 0.012");
        assert_eq!(with_u(12345.6, Some(230.0)), "12346 ± 230");
        assert_eq!(with_u(50.0, None), "50.00");
        assert_eq!(with_u(-0.001, Some(0.5)), "0.00 ± 0.50");
    }

    #[test]
    fn intervals_open_on_either_side() {
        let c = CorrectedValue {
            value: None,
            u: None,
            expanded: None,
            k: None,
            low: Some(97.94),
            high: Some(103.11),
        };
        assert_eq!(interval(Some(c)), "97.9 … 103.1");
        let open = CorrectedValue { high: None, ..c };
        assert_eq!(interval(Some(open)), "≥ 97.94");
        assert_eq!(corrected(Some(c)), NONE);
        assert_eq!(interval(None), NONE);
    }

    #[test]
    fn steps_are_round() {
        assert_eq!(round_step(73.0), 50.0);
        assert_eq!(round_step(0.1), 0.1);
        assert_eq!(round_step(2.0), 2.0);
        assert_eq!(round_length(2000.0), "2 µm");
        assert_eq!(round_length(200.0), "200 nm");
    }

    #[test]
    fn heights_have_a_unit_that_suits_them() {
        assert_eq!(height(59.5432), "59.54 nm");
        assert_eq!(height(-9590.31), "-9590.3 nm");
        assert_eq!(height(16094.0), "16.094 µm");
        assert_eq!(height(-0.001), "0.00 nm");
        assert_eq!(height(1.017e12), "1017.000 m");
        assert_eq!(height(f32::NAN), "void");
    }
}
