//! The description that a height map carries in our TIFF files: ASCII lines `key=value`, which
//! any program can show and which read back to the same scale and history.

use super::format::{HeightScale, MapHead, Stated};
use crate::heightmap::{HeightMap, Pitch};
use crate::units::Length;

const FIRST_LINE: &str = "height map";
const BY: &str = "description lines";

/// The description of `map`: heights in nm.
pub fn describe(map: &HeightMap) -> String {
    let provenance = map.provenance();
    let pitch = map.pitch();
    let mut text = format!(
        "{FIRST_LINE}\npitch={}, {}\nheight-unit=nm\n",
        Length::from_nm(pitch.x),
        Length::from_nm(pitch.y)
    );
    let mut line = |key: &str, value: &str| {
        if !value.is_empty() {
            text.push_str(&format!("{key}={}\n", escape(value)));
        }
    };
    if let Some(name) = provenance.file.as_deref().and_then(|f| f.file_name()) {
        line("source-file", &name.to_string_lossy());
    }
    line("source-sha256", provenance.sha256.as_deref().unwrap_or(""));
    line("source-scale", &provenance.scale_source);
    for step in &provenance.steps {
        line("step", step);
    }
    text
}

/// Takes scale and history from a description that [`describe`] wrote; others say nothing.
pub fn apply(description: &str, head: &mut MapHead) {
    let mut lines = description.lines();
    if lines.next() != Some(FIRST_LINE) {
        return;
    }
    let (mut file, mut sha256, mut scale) = (None, None, None);
    let mut steps = Vec::new();
    for (key, value) in lines.filter_map(|l| l.split_once('=')) {
        match key {
            "pitch" => head.pitch = pitch(value).map(|p| Stated::new(p, BY)),
            "height-unit" => {
                head.height = HeightScale::of_unit(value.trim()).map(|h| Stated::new(h, BY));
            }
            "source-file" => file = Some(unescape(value)),
            "source-sha256" => sha256 = Some(unescape(value)),
            "source-scale" => scale = Some(unescape(value)),
            "step" => steps.push(unescape(value)),
            // A later version may know more keys.
            _ => {}
        }
    }
    if let Some(file) = file {
        let sha256 = sha256.map_or(String::new(), |s| format!(", SHA-256 {s}"));
        let scale = scale.map_or(String::new(), |s| format!(", scale from {s}"));
        head.history
            .push(format!("Read from {file}{sha256}{scale}."));
    }
    head.history.extend(steps);
}

fn pitch(text: &str) -> Option<Pitch> {
    let (x, y) = text.split_once(',')?;
    let nm = |t: &str| t.parse::<Length>().ok().map(Length::nm);
    Pitch {
        x: nm(x)?,
        y: nm(y)?,
    }
    .checked()
    .ok()
}

/// ASCII without line breaks: TIFF text is ASCII. A backslash begins an escape.
fn escape(text: &str) -> String {
    text.chars().fold(String::new(), |mut out, c| {
        match c {
            '\\' => out.push_str("\\\\"),
            ' '..='~' => out.push(c),
            _ => out.extend(c.escape_unicode()),
        }
        out
    })
}

fn unescape(text: &str) -> String {
    let mut out = String::new();
    let mut rest = text;
    while let Some(at) = rest.find('\\') {
        out.push_str(&rest[..at]);
        let tail = &rest[at + 1..];
        let code = tail
            .strip_prefix("u{")
            .and_then(|t| t.split_once('}'))
            .and_then(|(hex, after)| {
                Some((char::from_u32(u32::from_str_radix(hex, 16).ok()?)?, after))
            });
        rest = match code {
            Some((c, after)) => {
                out.push(c);
                after
            }
            None => {
                out.push('\\');
                tail.strip_prefix('\\').unwrap_or(tail)
            }
        };
    }
    out.push_str(rest);
    out
}

#[cfg(test)]
mod tests {
    use super::super::samples::SampleType;
    use super::*;
    use crate::heightmap::Provenance;
    use proptest::prelude::*;

    #[test]
    fn scale_and_history_read_back() {
        let pitch = Pitch {
            x: 0.1 + 0.2,
            y: 1.0 / 3.0,
        };
        let map = HeightMap::from_fn(1, 1, pitch, |_, _| 0.0)
            .unwrap()
            .with_provenance(Provenance {
                file: Some("dir/µ scan.x3p".into()),
                sha256: Some("ab".into()),
                scale_source: "X3P axes".into(),
                steps: vec![
                    "Levelled: tilt 0.1°\nper µm".into(),
                    "Second = \\step".into(),
                ],
            });
        let text = describe(&map);
        assert!(text.is_ascii());
        let mut head = MapHead::new("a", 0, (1, 1), SampleType::Float32).unwrap();
        apply(&text, &mut head);
        assert_eq!(head.pitch.unwrap().value, pitch);
        assert_eq!(head.height.unwrap().value.nm_per_count, 1.0);
        assert_eq!(
            head.history,
            [
                "Read from µ scan.x3p, SHA-256 ab, scale from X3P axes.",
                "Levelled: tilt 0.1°\nper µm",
                "Second = \\step"
            ]
        );
    }

    #[test]
    fn a_stranger_s_description_says_nothing() {
        let mut head = MapHead::new("a", 0, (1, 1), SampleType::Float32).unwrap();
        apply("pitch=2 nm, 2 nm\nheight-unit=nm", &mut head);
        assert_eq!((head.pitch, head.height), (None, None));
    }

    proptest! {
        #[test]
        fn any_text_survives_the_escape(text in ".*") {
            let escaped = escape(&text);
            prop_assert!(escaped.bytes().all(|b| (b' '..=b'~').contains(&b)));
            prop_assert_eq!(unescape(&escaped), text);
        }

        #[test]
        fn no_text_breaks_the_reader(text in "[\\\\u{}0-9a-f]*") {
            let _ = unescape(&text);
        }
    }
}
