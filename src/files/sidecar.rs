//! The calibration sidecar `NAME.EXT.toml`: what a file cannot say of its scale.

use super::format::HeightScale;
use super::sidecar_path;
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use crate::units::{Length, nanometres_per};
use serde::Deserialize;
use std::path::Path;

/// What the sidecar states, checked.
#[derive(Debug, Clone, PartialEq)]
pub struct Sidecar {
    /// Its file name, for the record.
    pub name: String,
    pub pitch: Option<Pitch>,
    pub height: Option<HeightScale>,
    /// The stored value that marks a void.
    pub void: Option<f64>,
}

#[derive(Deserialize)]
#[serde(deny_unknown_fields, rename_all = "kebab-case")]
struct Keys {
    pitch: Option<OneOrTwo>,
    height_unit: Option<String>,
    height_scale: Option<Length>,
    height_offset: Option<Length>,
    void: Option<f64>,
}

/// `"2 nm"` or `["2 nm", "4 nm"]` (x, y).
#[derive(Deserialize)]
#[serde(
    untagged,
    expecting = "pitch must be \"2 nm\" or [\"2 nm\", \"4 nm\"] (x, y)"
)]
enum OneOrTwo {
    One(Length),
    Two([Length; 2]),
}

impl Sidecar {
    /// The sidecar beside `path`, if there is one. Errors: kind `Setting` with the sidecar's
    /// name and the key at fault.
    pub fn beside(path: &Path) -> Result<Option<Self>> {
        let path = sidecar_path(path);
        let text = match std::fs::read_to_string(&path) {
            Ok(text) => text,
            Err(e) if e.kind() == std::io::ErrorKind::NotFound => return Ok(None),
            Err(e) => return Err(Error::io(&path, e)),
        };
        let name = path.file_name().unwrap_or_default().to_string_lossy();
        let parsed = Self::parse(&name, &text);
        parsed.map(Some).map_err(|e| e.context(path.display()))
    }

    fn parse(name: &str, text: &str) -> Result<Self> {
        let keys: Keys = toml::from_str(text).map_err(|e| {
            let message = e.message().replace('`', "\"");
            let line = e
                .span()
                .map_or(1, |s| text[..s.start].lines().count().max(1));
            setting(format!("line {line}: {message}"))
        })?;
        let pitch = match keys.pitch {
            None => None,
            Some(OneOrTwo::One(p)) => Some(Pitch::square(p.nm()).checked()?),
            Some(OneOrTwo::Two([x, y])) => Some(
                Pitch {
                    x: x.nm(),
                    y: y.nm(),
                }
                .checked()?,
            ),
        };
        if let Some(unit) = &keys.height_unit
            && nanometres_per(unit).is_none()
        {
            return Err(setting(format!(
                "height-unit = \"{unit}\" is no unit of length"
            )));
        }
        Ok(Self {
            name: name.to_owned(),
            pitch,
            height: height_of(&keys)?,
            void: keys.void,
        })
    }
}

/// A count's height: `height-scale` where given (it carries its own unit), else the unit.
fn height_of(keys: &Keys) -> Result<Option<HeightScale>> {
    let mut scale = match (keys.height_scale, &keys.height_unit) {
        (Some(length), unit) => {
            if length.nm() == 0.0 {
                return Err(setting(
                    "height-scale = \"0 nm\" makes every height the same",
                ));
            }
            HeightScale {
                unit: unit.clone().unwrap_or_else(|| "nm".to_owned()),
                nm_per_count: length.nm(),
                offset_nm: 0.0,
            }
        }
        (None, Some(unit)) => match HeightScale::of_unit(unit) {
            Some(scale) => scale,
            None => return Ok(None),
        },
        (None, None) if keys.height_offset.is_some() => {
            return Err(setting("height-offset needs height-scale or height-unit"));
        }
        (None, None) => return Ok(None),
    };
    scale.offset_nm = keys.height_offset.map_or(0.0, Length::nm);
    Ok(Some(scale))
}

fn setting(what: impl Into<String>) -> Error {
    Error::new(ErrorKind::Setting, what).remedy(
        "A sidecar may hold pitch = [\"2 nm\", \"2 nm\"], height-unit = \"nm\", height-scale = \"0.01 nm\", height-offset = \"0 nm\", void = 0",
    )
}

/// The text of a sidecar for a map of this scale. Reads back to the same numbers.
pub fn text_of(pitch: Pitch, height: &HeightScale, void: Option<f64>) -> String {
    let length = Length::from_nm;
    let mut text = format!(
        "# Calibration of the file of the same name without .toml\npitch = [\"{}\", \"{}\"]\n",
        length(pitch.x),
        length(pitch.y)
    );
    if height.nm_per_count == 1.0 && height.offset_nm == 0.0 {
        text.push_str("height-unit = \"nm\"\n");
    } else {
        text.push_str(&format!(
            "# height = stored number * height-scale + height-offset\nheight-scale = \"{}\"\nheight-offset = \"{}\"\n",
            length(height.nm_per_count),
            length(height.offset_nm)
        ));
    }
    if let Some(void) = void {
        text.push_str(&format!(
            "# stored number of pixels without a height\nvoid = {void}\n"
        ));
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn all_keys() {
        let sidecar = Sidecar::parse(
            "a.png.toml",
            "pitch = [\"2 nm\", \"0.004 um\"]\nheight-scale = \"10 pm\"\nheight-offset = \"-5 nm\"\nvoid = 0\n",
        )
        .unwrap();
        assert!(sidecar.pitch.unwrap().agrees_with(Pitch { x: 2.0, y: 4.0 }));
        let height = sidecar.height.unwrap();
        assert!((height.nm_per_count - 0.01).abs() < 1e-15);
        assert_eq!(height.offset_nm, -5.0);
        assert_eq!(sidecar.void, Some(0.0));
        let one = Sidecar::parse("b", "pitch = \"3 nm\"\nheight-unit = \"um\"").unwrap();
        assert_eq!(one.pitch, Some(Pitch::square(3.0)));
        assert_eq!(one.height.unwrap().nm_per_count, 1000.0);
        let nothing = Sidecar::parse("c", "").unwrap();
        assert_eq!((nothing.pitch, nothing.height), (None, None));
    }

    #[test]
    fn mistakes_are_named() {
        for (text, named) in [
            ("pich = \"2 nm\"", "pich"),
            ("pitch = [\"2\", \"2\"]", "pitch"),
            ("pitch = [\"0 nm\", \"2 nm\"]", "0 nm"),
            ("pitch = 2", "pitch"),
            ("height-unit = \"counts\"", "counts"),
            ("height-scale = \"0 nm\"", "height-scale"),
            ("height-offset = \"1 nm\"", "height-offset"),
            ("void = \"none\"", "line 1"),
            ("= broken", "line 1"),
        ] {
            let error = Sidecar::parse("a.toml", text).unwrap_err();
            assert_eq!(error.kind(), ErrorKind::Setting, "{text}");
            assert!(error.to_string().contains(named), "{text}: {error}");
        }
    }

    #[test]
    fn written_text_reads_back() {
        let pitch = Pitch {
            x: 1.0 / 3.0,
            y: 7.25,
        };
        let height = HeightScale {
            unit: "nm".into(),
            nm_per_count: 0.1 / 3.0,
            offset_nm: -1e-7,
        };
        let back = Sidecar::parse("x", &text_of(pitch, &height, Some(0.0))).unwrap();
        assert_eq!(back.pitch, Some(pitch));
        assert_eq!(back.height, Some(height));
        assert_eq!(back.void, Some(0.0));
        let unit = HeightScale::of_unit("nm").unwrap();
        let back = Sidecar::parse("x", &text_of(pitch, &unit, None)).unwrap();
        assert_eq!(back.height, Some(unit));
    }
}
