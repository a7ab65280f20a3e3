//! The parts figures are drawn with: escaped text, coordinates, ticks, axes.

use super::format::{fixed, reading_unit, tame};
use std::fmt::Write;

/// `text` for element content and attribute values of HTML and XML alike; control characters tamed.
pub fn escape(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in tame(text).chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&#39;"),
            c => out.push(c),
        }
    }
    out
}

/// A coordinate to a hundredth of a drawing unit, without trailing zeros.
pub fn xy(v: f64) -> String {
    let text = fixed(if v.is_finite() { v } else { 0.0 }, 2);
    match text.contains('.') {
        true => text.trim_end_matches('0').trim_end_matches('.').to_owned(),
        false => text,
    }
}

/// Round numbers 1, 2 or 5 times a power of ten apart that lie in `low..=high`, about `wanted`.
/// Empty where the range is none.
pub fn ticks(low: f64, high: f64, wanted: f64) -> Vec<f64> {
    let span = high - low;
    if !(span > 0.0 && span.is_finite()) {
        return Vec::new();
    }
    let step = nice(span / wanted);
    let first = (low / step - 1e-9).ceil() as i64;
    let last = (high / step + 1e-9).floor() as i64;
    (first..=last.min(first + 50))
        .map(|i| i as f64 * step)
        .collect()
}

/// The number of the form 1, 2 or 5 times a power of ten nearest above `x / 1.5`.
pub fn nice(x: f64) -> f64 {
    let power = 10f64.powf((x / 1.5).log10().floor());
    let lead = x / 1.5 / power;
    let step = [1.0, 2.0, 5.0]
        .into_iter()
        .find(|s| lead <= s * (1.0 + 1e-9))
        .unwrap_or(10.0);
    step * power
}

/// Labels of ticks with just the decimals their spacing needs.
pub fn tick_labels(ticks: &[f64]) -> Vec<String> {
    let step = ticks
        .windows(2)
        .map(|t| t[1] - t[0])
        .fold(f64::NAN, f64::min);
    if !(step.is_finite() && step > 0.0) {
        return ticks.iter().map(|t| minus(&xy(*t))).collect();
    }
    let decimals = (-(step * (1.0 + 1e-9)).log10().floor()).max(0.0) as i32;
    ticks.iter().map(|t| minus(&fixed(*t, decimals))).collect()
}

/// A typographic minus sign for people; files for programs keep the hyphen.
pub fn minus(number: &str) -> String {
    match number.strip_prefix('-') {
        Some(rest) => format!("\u{2212}{rest}"),
        None => number.to_owned(),
    }
}

/// A length as an axis shows it: the factor from nm and the unit's symbol.
pub fn axis_unit(largest_nm: f64) -> (f64, String) {
    reading_unit("nm", largest_nm)
}

/// A linear axis: `low..high` in nm onto `from..to` in drawing units.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Axis {
    /// Value at `from`.
    pub low: f64,
    /// Value at `to`.
    pub high: f64,
    /// Drawing coordinate of `low`.
    pub from: f64,
    /// Drawing coordinate of `high`.
    pub to: f64,
}

impl Axis {
    /// The drawing coordinate of `value`.
    pub fn at(&self, value: f64) -> f64 {
        let span = self.high - self.low;
        let t = if span != 0.0 {
            (value - self.low) / span
        } else {
            0.5
        };
        self.from + t * (self.to - self.from)
    }

    /// Drawing units per nm.
    pub fn scale(&self) -> f64 {
        ((self.to - self.from) / (self.high - self.low)).abs()
    }
}

/// Frame, ticks and labels of a plot whose x runs over `x` and whose y over `y` (drawn upwards
/// or downwards as its coordinates say).
pub fn frame(svg: &mut String, x: Axis, y: Axis, x_name: &str, y_name: &str) {
    let (factor, unit) = axis_unit(y.low.abs().max(y.high.abs()));
    let name = format!("{y_name} / {unit}");
    frame_in(svg, x, y, x_name, &name, factor);
}

/// As [`frame()`], where y counts something.
pub fn counting_frame(svg: &mut String, x: Axis, y: Axis, x_name: &str, y_name: &str) {
    frame_in(svg, x, y, x_name, y_name, 1.0);
}

fn frame_in(svg: &mut String, x: Axis, y: Axis, x_name: &str, y_name: &str, y_factor: f64) {
    let (left, right) = (x.from.min(x.to), x.from.max(x.to));
    let (top, bottom) = (y.from.min(y.to), y.from.max(y.to));
    // Writing to a String cannot fail.
    let _ = write!(
        svg,
        r#"<rect class="frame" x="{}" y="{}" width="{}" height="{}"/>"#,
        xy(left),
        xy(top),
        xy(right - left),
        xy(bottom - top)
    );
    let (factor, unit) = axis_unit(x.low.abs().max(x.high.abs()));
    let marks = ticks(
        x.low * factor,
        x.high * factor,
        ((right - left) / 60.0).max(3.0),
    );
    for (value, label) in marks.iter().zip(tick_labels(&marks)) {
        let at = xy(x.at(value / factor));
        let _ = write!(
            svg,
            r#"<path class="tick" d="M{at} {} v4"/><text class="mid" x="{at}" y="{}">{label}</text>"#,
            xy(bottom),
            xy(bottom + 15.0)
        );
    }
    let _ = write!(
        svg,
        r#"<text class="mid name" x="{}" y="{}">{} / {unit}</text>"#,
        xy((left + right) / 2.0),
        xy(bottom + 29.0),
        escape(x_name)
    );
    let factor = y_factor;
    let (low, high) = (y.low.min(y.high), y.low.max(y.high));
    let marks = ticks(
        low * factor,
        high * factor,
        ((bottom - top) / 40.0).max(2.0),
    );
    for (value, label) in marks.iter().zip(tick_labels(&marks)) {
        let at = y.at(value / factor);
        let _ = write!(
            svg,
            r#"<path class="tick" d="M{} {} h-4"/><text class="end" x="{}" y="{}">{label}</text>"#,
            xy(left),
            xy(at),
            xy(left - 7.0),
            xy(at + 3.5)
        );
    }
    let (cx, cy) = (left - 44.0, (top + bottom) / 2.0);
    let _ = write!(
        svg,
        r#"<text class="mid name" transform="translate({} {}) rotate(-90)">{}</text>"#,
        xy(cx),
        xy(cy),
        escape(y_name)
    );
}

/// Opens an SVG of that size with its text alternative.
pub fn open(width: f64, height: f64, alternative: &str) -> String {
    format!(
        r#"<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {0} {1}" width="{0}" height="{1}" role="img" aria-label="{2}">"#,
        xy(width),
        xy(height),
        escape(alternative)
    )
}

/// Lines of text of the SVG class `class` at (`x`, `y`).
pub fn text(svg: &mut String, class: &str, x: f64, y: f64, content: &str) {
    let _ = write!(
        svg,
        r#"<text class="{class}" x="{}" y="{}">{}</text>"#,
        xy(x),
        xy(y),
        escape(content)
    );
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_are_round_and_inside() {
        assert_eq!(
            ticks(0.0, 1024.0, 5.0),
            vec![0.0, 200.0, 400.0, 600.0, 800.0, 1000.0]
        );
        assert_eq!(ticks(-3.0, 4.0, 4.0), vec![-2.0, 0.0, 2.0, 4.0]);
        assert!(ticks(1.0, 1.0, 4.0).is_empty());
        assert!(ticks(0.0, f64::NAN, 4.0).is_empty());
        assert!(ticks(0.0, 1e300, 1e-9).len() <= 51);
        assert_eq!(
            tick_labels(&[-0.5, 0.0, 0.5]),
            ["\u{2212}0.5", "0.0", "0.5"]
        );
        assert_eq!(tick_labels(&[0.0, 200.0]), ["0", "200"]);
        assert_eq!(tick_labels(&[0.0]), ["0"]);
    }

    #[test]
    fn text_is_escaped() {
        assert_eq!(
            escape("<b a=\"1\" c='2'>&\u{0}"),
            "&lt;b a=&quot;1&quot; c=&#39;2&#39;&gt;&amp;\u{fffd}"
        );
    }

    #[test]
    fn coordinates_are_short_and_never_nan() {
        assert_eq!(xy(100.0), "100");
        assert_eq!(xy(1.50), "1.5");
        assert_eq!(xy(-0.001), "0");
        assert_eq!(xy(f64::NAN), "0");
    }
}
