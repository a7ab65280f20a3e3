//! Numbers and text as people read them: digits that the uncertainty justifies, a unit each.

use crate::dimensions::{Dimension, Status};

/// A unit that reads well for numbers as large as `largest` in `unit`: the factor and its symbol.
pub fn reading_unit(unit: &str, largest: f64) -> (f64, String) {
    match unit {
        "nm" if largest >= 1e7 => (1e-6, "mm".to_owned()),
        "nm" if largest >= 1e4 => (1e-3, "µm".to_owned()),
        "deg" => (1.0, "°".to_owned()),
        other => (1.0, other.to_owned()),
    }
}

/// Decimal places (negative: tens, hundreds) that keep two significant digits of `u`;
/// `None` where `u` is no positive number.
pub fn decimals_of(u: f64) -> Option<i32> {
    if !(u > 0.0 && u.is_finite()) {
        return None;
    }
    let places = 1 - u.log10().floor() as i32;
    // 0.0996 becomes 0.10, not 0.100.
    let rounded = (u * 10f64.powi(places)).round();
    Some((if rounded >= 100.0 { places - 1 } else { places }).min(9))
}

/// Decimal places that keep `digits` significant digits of `x`.
pub fn decimals_for_digits(x: f64, digits: i32) -> i32 {
    if x == 0.0 || !x.is_finite() {
        return 0;
    }
    (digits - 1 - x.abs().log10().floor() as i32).min(9)
}

/// `x` with that many decimal places; "–" for what is no number, never "-0".
pub fn fixed(x: f64, decimals: i32) -> String {
    if !x.is_finite() {
        return "–".to_owned();
    }
    let text = if decimals >= 0 {
        format!("{x:.*}", decimals as usize)
    } else {
        let step = 10f64.powi(-decimals);
        format!("{:.0}", (x / step).round() * step)
    };
    let nothing = text.starts_with('-') && text.chars().all(|c| matches!(c, '-' | '0' | '.'));
    if nothing { text[1..].to_owned() } else { text }
}

/// As [`fixed`], rounded towards minus infinity (`up` false) or plus infinity: the ends of an
/// interval that must not shrink.
pub fn fixed_outward(x: f64, decimals: i32, up: bool) -> String {
    let step = 10f64.powi(decimals);
    // A millionth of the last digit is rounding noise, not a reason to move by a whole one.
    let scaled = x * step;
    let whole = if up {
        (scaled - 1e-6).ceil()
    } else {
        (scaled + 1e-6).floor()
    };
    fixed(whole / step, decimals)
}

/// `x` with up to six significant digits and its unit, for numbers that were given, not measured.
pub fn plain(x: f64, unit: &str) -> String {
    with_digits(x, unit, 6)
}

/// `x` with up to three significant digits and its unit, for what was measured without an
/// uncertainty of its own.
pub fn about(x: f64, unit: &str) -> String {
    with_digits(x, unit, 3)
}

fn with_digits(x: f64, unit: &str, digits: i32) -> String {
    let (factor, unit) = reading_unit(unit, x.abs());
    let x = x * factor;
    let text = fixed(x, decimals_for_digits(x, digits).max(0));
    let text = match text.contains('.') {
        true => text.trim_end_matches('0').trim_end_matches('.'),
        false => &text,
    };
    with_unit(text, &unit)
}

/// `value` rounded to what `u` justifies, `u` itself, and the unit: ("9.80 nm", "0.60 nm").
pub fn with_u(value: f64, u: f64, unit: &str) -> (String, String) {
    let (factor, unit) = reading_unit(unit, value.abs());
    let (value, u) = (value * factor, u * factor);
    match decimals_of(u) {
        Some(d) => (
            with_unit(&fixed(value, d), &unit),
            with_unit(&fixed(u, d), &unit),
        ),
        None => (
            with_unit(&fixed(value, decimals_for_digits(value, 4).max(0)), &unit),
            "–".to_owned(),
        ),
    }
}

/// A number and its unit: a space between, none before a degree sign.
pub fn with_unit(number: &str, unit: &str) -> String {
    match unit {
        _ if number == "–" => number.to_owned(),
        "" => number.to_owned(),
        "°" => format!("{number}°"),
        _ => format!("{number} {unit}"),
    }
}

/// A share in percent that never rounds something to nothing, or not quite all to all.
pub fn percent(fraction: f64) -> String {
    let p = 100.0 * fraction;
    match p {
        _ if !p.is_finite() => "–".to_owned(),
        0.0 => "0 %".to_owned(),
        100.0 => "100 %".to_owned(),
        p if p > 0.0 && p < 0.1 => "under 0.1 %".to_owned(),
        p if p < 100.0 && p > 99.9 => "over 99.9 %".to_owned(),
        p => format!("{} %", fixed(p, 1)),
    }
}

/// One result line as it is printed, in one reading unit.
#[derive(Debug, Clone, PartialEq)]
pub struct Line {
    /// The name, free of control characters.
    pub name: String,
    /// Quantity and height fraction.
    pub quantity: String,
    /// As scanned, with its unit.
    pub as_scanned: String,
    /// Standard uncertainty of it.
    pub as_scanned_u: String,
    /// Corrected.
    pub corrected: String,
    /// Standard uncertainty of it.
    pub u: String,
    /// Expanded uncertainty.
    pub expanded: String,
    /// Coverage factor.
    pub k: String,
    /// The 95 % interval: "97.9 .. 103.1 nm", or one-sided.
    pub interval: String,
    /// "touched", "bounded" or "–".
    pub status: &'static str,
}

impl Line {
    /// The line for `dimension`; "–" stands for whatever could not be had.
    pub fn of(dimension: &Dimension) -> Self {
        let scanned = dimension.as_scanned;
        let corrected = dimension.corrected;
        let numbers = [
            scanned.map(|v| v.value),
            corrected.and_then(|c| c.value),
            corrected.and_then(|c| c.low),
            corrected.and_then(|c| c.high),
        ];
        let largest = numbers
            .iter()
            .flatten()
            .fold(0.0, |a: f64, b| a.max(b.abs()));
        let (factor, unit) = reading_unit(dimension.unit, largest);
        let scale = |x: Option<f64>| x.map(|x| x * factor).filter(|x| x.is_finite());
        let show = |x: Option<f64>, decimals: Option<i32>| match scale(x) {
            Some(x) => {
                let decimals = decimals.unwrap_or_else(|| decimals_for_digits(x, 4).max(0));
                with_unit(&fixed(x, decimals), &unit)
            }
            None => "–".to_owned(),
        };
        let scanned_decimals = scale(scanned.and_then(|v| v.u)).and_then(decimals_of);
        let decimals = scale(corrected.and_then(|c| c.u)).and_then(decimals_of);
        let (low, high) = (
            scale(corrected.and_then(|c| c.low)),
            scale(corrected.and_then(|c| c.high)),
        );
        Self {
            name: tame(&dimension.name),
            quantity: quantity(dimension),
            as_scanned: show(scanned.map(|v| v.value), scanned_decimals),
            as_scanned_u: show(scanned.and_then(|v| v.u), scanned_decimals),
            corrected: show(corrected.and_then(|c| c.value), decimals),
            u: show(corrected.and_then(|c| c.u), decimals),
            expanded: show(corrected.and_then(|c| c.expanded), decimals),
            k: corrected
                .and_then(|c| c.k)
                .filter(|k| k.is_finite())
                .map_or_else(|| "–".to_owned(), |k| fixed(k, 2)),
            interval: interval(low, high, decimals, &unit),
            status: status(dimension.status),
        }
    }
}

fn interval(low: Option<f64>, high: Option<f64>, decimals: Option<i32>, unit: &str) -> String {
    let decimals = decimals.unwrap_or_else(|| match (low, high) {
        // Two digits of the quarter width: what a standard uncertainty would be.
        (Some(low), Some(high)) if high > low => decimals_of((high - low) / 4.0).unwrap_or(2),
        (Some(x), _) | (None, Some(x)) => decimals_for_digits(x, 4).max(0),
        (None, None) => 0,
    });
    let low = low.map(|x| fixed_outward(x, decimals, false));
    let high = high.map(|x| fixed_outward(x, decimals, true));
    match (low, high) {
        (Some(low), Some(high)) => with_unit(&format!("{low} .. {high}"), unit),
        (Some(low), None) => with_unit(&format!("at least {low}"), unit),
        (None, Some(high)) => with_unit(&format!("at most {high}"), unit),
        (None, None) => "–".to_owned(),
    }
}

/// "line width at 0.50"; the kind's own figure, with the height fraction where there is one.
pub fn quantity(dimension: &Dimension) -> String {
    let what = tame(&dimension.quantity);
    match dimension.at {
        Some(at) => format!("{what} at {}", fixed(100.0 * at, 0)) + " %",
        None => what,
    }
}

/// The status as a word.
pub fn status(status: Option<Status>) -> &'static str {
    match status {
        Some(Status::Touched) => "touched",
        Some(Status::Bounded) => "bounded",
        None => "–",
    }
}

/// The distinct flags of some dimensions in order of appearance, and for each dimension the
/// numbers (from 1) of those it carries.
pub fn numbered_flags(dimensions: &[Dimension]) -> (Vec<String>, Vec<Vec<usize>>) {
    let mut flags: Vec<String> = Vec::new();
    let carried = dimensions
        .iter()
        .map(|dimension| {
            let mut numbers: Vec<usize> = Vec::new();
            for flag in dimension.flags.iter().map(|f| tame(f)) {
                let at = flags.iter().position(|f| *f == flag).unwrap_or_else(|| {
                    flags.push(flag);
                    flags.len() - 1
                });
                if !numbers.contains(&(at + 1)) {
                    numbers.push(at + 1);
                }
            }
            numbers.sort_unstable();
            numbers
        })
        .collect();
    (flags, carried)
}

/// "1, 2, 5"; empty for none.
pub fn numbers(list: &[usize]) -> String {
    let words: Vec<String> = list.iter().map(usize::to_string).collect();
    words.join(", ")
}

/// Text from outside, free of control characters: they could drive a terminal or break XML.
pub fn tame(text: &str) -> String {
    text.chars()
        .map(|c| match c {
            '\n' | '\t' | '\r' => ' ',
            c if c.is_control() || matches!(c, '\u{fffe}' | '\u{ffff}') => '\u{fffd}',
            c => c,
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn two_digits_of_the_uncertainty() {
        // JCGM 100:2008, 7.2.6: two significant digits, the estimate rounded to be consistent.
        assert_eq!(
            with_u(100.021_47, 0.000_35, "g"),
            ("100.02147 g".into(), "0.00035 g".into())
        );
        assert_eq!(with_u(9.8, 0.6, "nm"), ("9.80 nm".into(), "0.60 nm".into()));
        assert_eq!(
            with_u(128.71, 0.0996, "nm"),
            ("128.71 nm".into(), "0.10 nm".into())
        );
        assert_eq!(
            with_u(4321.0, 156.0, "nm"),
            ("4320 nm".into(), "160 nm".into())
        );
        assert_eq!(
            with_u(54_321.0, 156.0, "nm"),
            ("54.32 µm".into(), "0.16 µm".into())
        );
        assert_eq!(with_u(17.23, 0.9, "deg").0, "17.23°");
        assert_eq!(with_u(5.0, f64::NAN, "nm"), ("5.000 nm".into(), "–".into()));
        assert_eq!(with_u(5.0, 0.0, "nm").1, "–");
    }

    #[test]
    fn nothing_is_shown_as_minus_zero_or_nan() {
        assert_eq!(fixed(-0.001, 1), "0.0");
        assert_eq!(fixed(-0.06, 1), "-0.1");
        assert_eq!(fixed(f64::NAN, 1), "–");
        assert_eq!(plain(f64::INFINITY, "nm"), "–");
        assert_eq!(plain(0.0, "nm"), "0 nm");
        assert_eq!(plain(2.0, "nm"), "2 nm");
        assert_eq!(plain(1.2345678, "nm"), "1.23457 nm");
        assert_eq!(plain(1200.0, "nm"), "1200 nm");
        assert_eq!(about(0.05985, "nm"), "0.0599 nm");
        assert_eq!(about(12_345.0, "nm"), "12.3 µm");
    }

    #[test]
    fn an_interval_never_shrinks_by_rounding() {
        assert_eq!(
            interval(Some(97.949), Some(103.051), Some(1), "nm"),
            "97.9 .. 103.1 nm"
        );
        assert_eq!(
            interval(Some(-3.21), Some(-1.29), Some(1), "nm"),
            "-3.3 .. -1.2 nm"
        );
        assert_eq!(interval(Some(1.0), Some(2.0), Some(1), ""), "1.0 .. 2.0");
        assert_eq!(interval(None, Some(88.24), None, "nm"), "at most 88.24 nm");
        assert_eq!(interval(None, None, None, "nm"), "–");
    }

    #[test]
    fn shares_do_not_round_something_away() {
        assert_eq!(percent(0.0), "0 %");
        assert_eq!(percent(0.000_2), "under 0.1 %");
        assert_eq!(percent(0.999_9), "over 99.9 %");
        assert_eq!(percent(1.0), "100 %");
        assert_eq!(percent(0.8125), "81.2 %");
    }

    #[test]
    fn control_characters_are_tamed() {
        assert_eq!(tame("a\u{1b}[2Jb\nc\0"), "a\u{fffd}[2Jb c\u{fffd}");
    }
}
