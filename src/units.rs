//! Lengths and angles as people write them; parsed once at the edge, formatted last.

use crate::error::{Error, ErrorKind, Result};
use serde::{Deserialize, Serialize};
use std::str::FromStr;

/// The nanometres in one of `unit`, or `None` for an unknown unit.
///
/// Case matters only where the SI makes it matter (`m`, `M`): `um`, `µm` and `μm` are the same.
pub fn nanometres_per(unit: &str) -> Option<f64> {
    Some(match unit {
        "pm" => 1e-3,
        "Å" | "A" | "angstrom" | "Angstrom" => 0.1,
        "nm" => 1.0,
        "um" | "µm" | "μm" | "micrometre" | "micrometer" | "micron" => 1e3,
        "mm" => 1e6,
        "cm" => 1e7,
        "m" | "metre" | "meter" => 1e9,
        _ => return None,
    })
}

/// A length with its unit, held in nanometres. Written "2 nm", "0.5 um", "130nm".
#[derive(Debug, Clone, Copy, PartialEq, PartialOrd, Serialize, Deserialize)]
#[serde(try_from = "String", into = "String")]
pub struct Length {
    nm: f64,
}

impl Length {
    /// A length of `nm` nanometres.
    pub const fn from_nm(nm: f64) -> Self {
        Self { nm }
    }

    /// The length in nanometres.
    pub const fn nm(self) -> f64 {
        self.nm
    }
}

impl FromStr for Length {
    type Err = Error;

    /// Errors of kind `Setting` when the number or the unit is missing or unknown.
    fn from_str(text: &str) -> Result<Self> {
        let trimmed = text.trim();
        let fail = |why: &str| {
            Error::new(
                ErrorKind::Setting,
                format!("{why} in the length \"{text}\""),
            )
            .remedy("Write a number and a unit, for example \"2 nm\", \"0.5 um\" or \"130nm\"")
        };
        let split = trimmed
            .char_indices()
            .find(|&(i, c)| {
                // An `e` between digits belongs to the number, not to the unit.
                let exponent = (c == 'e' || c == 'E')
                    && trimmed[i + 1..]
                        .starts_with(|n: char| n.is_ascii_digit() || n == '-' || n == '+');
                !(c.is_ascii_digit() || matches!(c, '.' | '-' | '+') || exponent)
            })
            .map_or(trimmed.len(), |(i, _)| i);
        let (number, unit) = trimmed.split_at(split);
        let unit = unit.trim();
        if unit.is_empty() {
            return Err(fail("no unit"));
        }
        let value: f64 = number.parse().map_err(|_| fail("no number"))?;
        let factor = nanometres_per(unit).ok_or_else(|| fail("unknown unit"))?;
        let nm = value * factor;
        if !nm.is_finite() {
            return Err(fail("no finite number"));
        }
        Ok(Self { nm })
    }
}

impl TryFrom<String> for Length {
    type Error = Error;
    fn try_from(text: String) -> Result<Self> {
        text.parse()
    }
}

impl From<Length> for String {
    fn from(length: Length) -> Self {
        length.to_string()
    }
}

impl std::fmt::Display for Length {
    /// Exact and readable back: the shortest number that round-trips, in nanometres.
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{} nm", self.nm)
    }
}

/// Writes a length for people with about four digits, choosing nm, um or mm by size.
pub fn format_length(nm: f64) -> String {
    let (value, unit) = match nm.abs() {
        _ if !nm.is_finite() => return "–".to_owned(),
        a if a >= 1e9 => (nm / 1e9, "m"),
        a if a >= 1e6 => (nm / 1e6, "mm"),
        a if a >= 1e4 => (nm / 1e3, "µm"),
        _ => (nm, "nm"),
    };
    let decimals = match value.abs() {
        a if a >= 1000.0 => 0,
        a if a >= 100.0 => 1,
        a if a >= 1.0 || a == 0.0 => 2,
        _ => 3,
    };
    format!("{value:.decimals$} {unit}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn lengths_as_people_write_them() {
        for (text, nm) in [
            ("2 nm", 2.0),
            ("130nm", 130.0),
            ("0.5 um", 500.0),
            ("0.5 µm", 500.0),
            ("1e-3 mm", 1000.0),
            ("-3.5e2pm", -0.35),
            (" 2 Å ", 0.2),
        ] {
            let length: Length = text.parse().unwrap();
            assert!((length.nm() - nm).abs() < 1e-9 * nm.abs(), "{text}");
            assert_eq!(length, length.to_string().parse().unwrap());
        }
    }

    #[test]
    fn a_length_without_unit_or_number_is_refused() {
        for text in [
            "2",
            "nm",
            "",
            "two nm",
            "2 furlong",
            "2 MM",
            "1e400 nm",
            "nan nm",
        ] {
            let error = text.parse::<Length>().unwrap_err();
            assert_eq!(error.kind(), ErrorKind::Setting, "{text}");
            assert!(error.to_string().contains(text), "{error}");
        }
    }
}
