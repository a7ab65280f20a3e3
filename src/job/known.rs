//! `[tip] known`: a certified shape as the job file states it, and the tip it gives.

use super::spec::{TipFrom, TipShape, TipSpec};
use super::stages::TipResult;
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use crate::leveling::Leveled;
use crate::progress::Progress;
use crate::tip::known::{self, Certified, Formula, Known, Shape};
use crate::units::Length;
use serde::{Deserialize, Serialize};
use std::path::Path;

/// `[tip.known] shape`
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum KnownShape {
    /// Parallel ridges: `width`, and where known `height`, `pitch`, `wall-angle`, `corner-radius`.
    #[default]
    Ridges,
    /// One step: where known `height`, `wall-angle`, `corner-radius`.
    Step,
    /// Spheres on a flat: `diameter`.
    Sphere,
    /// Spikes on a flat: `radius`, `half-angle`.
    Spike,
}

impl KnownShape {
    /// Keys of its certified values.
    pub fn keys(self) -> &'static [&'static str] {
        match self {
            Self::Ridges => &["width", "height", "pitch", "wall-angle", "corner-radius"],
            Self::Step => &["height", "wall-angle", "corner-radius"],
            Self::Sphere => &["diameter"],
            Self::Spike => &["radius", "half-angle"],
        }
    }
}

/// `[tip] use`: which of the two ways supplies the tip.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Way {
    /// The formula fitted to the scan.
    #[default]
    ModelFit,
    /// Erosion by the known surface.
    FreeForm,
}

/// `[tip.known]`: certified values, and their standard uncertainties as `u-...`.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub struct KnownSpec {
    /// Which shape.
    pub shape: KnownShape,
    /// Width of the ridges at mid-height.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub width: Option<Length>,
    /// Height; left out: read off the scan.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub height: Option<Length>,
    /// Centre-to-centre distance; left out: a single ridge.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub pitch: Option<Length>,
    /// Angle of the walls from the horizontal, degrees; left out: 90.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub wall_angle: Option<f64>,
    /// Radius of the upper corners; left out: 0.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub corner_radius: Option<Length>,
    /// Diameter of the spheres.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub diameter: Option<Length>,
    /// Apex radius of the spikes.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub radius: Option<Length>,
    /// Half-angle of the spikes, degrees.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub half_angle: Option<f64>,
    /// Standard uncertainty of `width`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_width: Option<Length>,
    /// Standard uncertainty of `height`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_height: Option<Length>,
    /// Standard uncertainty of `pitch`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_pitch: Option<Length>,
    /// Standard uncertainty of `wall-angle`, degrees.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_wall_angle: Option<f64>,
    /// Standard uncertainty of `corner-radius`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_corner_radius: Option<Length>,
    /// Standard uncertainty of `diameter`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_diameter: Option<Length>,
    /// Standard uncertainty of `radius`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_radius: Option<Length>,
    /// Standard uncertainty of `half-angle`, degrees.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub u_half_angle: Option<f64>,
}

/// A file that states a known shape for the command line: the keys of `[tip.known]`, and `model`
/// and `use` beside them.
#[derive(Deserialize)]
struct KnownFile {
    model: Option<TipShape>,
    #[serde(rename = "use")]
    way: Option<Way>,
    #[serde(flatten)]
    known: toml::Table,
}

impl TipSpec {
    /// The tip from a known shape that the file at `path` states.
    ///
    /// Errors: kind `Io`, or `Setting` naming the file and the offending key.
    pub fn from_known_file(path: &Path) -> Result<Self> {
        let text = std::fs::read_to_string(path).map_err(|e| Error::io(path, e))?;
        let fail = |e: toml::de::Error| {
            Error::new(ErrorKind::Setting, e.to_string().trim_end().to_owned())
                .remedy("Mend the file at the place shown")
                .at(path)
        };
        let file: KnownFile = toml::from_str(&text).map_err(fail)?;
        let known: KnownSpec = file.known.try_into().map_err(fail)?;
        known.to_shape().map_err(|e| e.at(path))?;
        Ok(Self {
            from: TipFrom::KnownShape,
            fitted: file.model,
            way: file.way,
            known: Some(known),
            ..Self::default()
        })
    }
}

fn length(value: Option<Length>, u: Option<Length>) -> Option<Certified> {
    value.map(|v| Certified::new(v.nm(), u.map_or(0.0, Length::nm)))
}

fn angle(value: Option<f64>, u: Option<f64>) -> Option<Certified> {
    value.map(|v| Certified::new(v, u.unwrap_or(0.0)))
}

impl KnownSpec {
    /// Of a shape, nothing certified yet.
    pub fn new(shape: KnownShape) -> Self {
        Self {
            shape,
            ..Self::default()
        }
    }

    /// The same values as far as another shape has them.
    #[must_use]
    pub fn with_shape(&self, shape: KnownShape) -> Self {
        let has = |key| shape.keys().contains(&key);
        let straight = has("height");
        Self {
            height: self.height.filter(|_| straight),
            u_height: self.u_height.filter(|_| straight),
            wall_angle: self.wall_angle.filter(|_| straight),
            u_wall_angle: self.u_wall_angle.filter(|_| straight),
            corner_radius: self.corner_radius.filter(|_| straight),
            u_corner_radius: self.u_corner_radius.filter(|_| straight),
            ..Self::new(shape)
        }
    }

    /// The shape stated. Errors of kind `Setting`: a key missing or of another shape, a value that
    /// cannot be, an uncertainty without its value.
    pub fn to_shape(&self) -> Result<Shape> {
        let name = match self.shape {
            KnownShape::Ridges => "ridges",
            KnownShape::Step => "step",
            KnownShape::Sphere => "sphere",
            KnownShape::Spike => "spike",
        };
        let fail = |what: String, remedy: String| {
            Err(Error::new(ErrorKind::Setting, format!("[tip] known: {what}")).remedy(remedy))
        };
        let keys: [(&str, bool, bool); 8] = [
            ("width", self.width.is_some(), self.u_width.is_some()),
            ("height", self.height.is_some(), self.u_height.is_some()),
            ("pitch", self.pitch.is_some(), self.u_pitch.is_some()),
            (
                "wall-angle",
                self.wall_angle.is_some(),
                self.u_wall_angle.is_some(),
            ),
            (
                "corner-radius",
                self.corner_radius.is_some(),
                self.u_corner_radius.is_some(),
            ),
            (
                "diameter",
                self.diameter.is_some(),
                self.u_diameter.is_some(),
            ),
            ("radius", self.radius.is_some(), self.u_radius.is_some()),
            (
                "half-angle",
                self.half_angle.is_some(),
                self.u_half_angle.is_some(),
            ),
        ];
        let own = self.shape.keys();
        for (key, stated, u) in keys {
            if (stated || u) && !own.contains(&key) {
                return fail(
                    format!("shape = \"{name}\" has no {key}"),
                    format!("Its keys are {}", own.join(", ")),
                );
            }
            // Walls are vertical and corners sharp where nothing is said: that can be uncertain.
            let default = matches!(key, "wall-angle" | "corner-radius");
            if u && !stated && !default {
                return fail(format!("u-{key} without {key}"), format!("Add {key}"));
            }
        }
        let missing = |key: &str, example: &str| {
            Error::new(
                ErrorKind::Setting,
                format!("[tip] known: shape = \"{name}\" without {key}"),
            )
            .remedy(format!("Add {key} = {example}, as certified"))
        };
        let nm = |u: Option<Length>| u.map_or(0.0, Length::nm);
        let wall_angle = Certified::new(
            self.wall_angle.unwrap_or(90.0),
            self.u_wall_angle.unwrap_or(0.0),
        );
        let corner_radius = Certified::new(nm(self.corner_radius), nm(self.u_corner_radius));
        let height = length(self.height, self.u_height);
        let shape = match self.shape {
            KnownShape::Ridges => Shape::Ridges {
                width: length(self.width, self.u_width)
                    .ok_or_else(|| missing("width", "\"100 nm\""))?,
                height,
                pitch: length(self.pitch, self.u_pitch),
                wall_angle,
                corner_radius,
            },
            KnownShape::Step => Shape::Step {
                height,
                wall_angle,
                corner_radius,
            },
            KnownShape::Sphere => Shape::Sphere {
                diameter: length(self.diameter, self.u_diameter)
                    .ok_or_else(|| missing("diameter", "\"30 nm\""))?,
            },
            KnownShape::Spike => Shape::Spike {
                radius: length(self.radius, self.u_radius)
                    .ok_or_else(|| missing("radius", "\"2 nm\""))?,
                half_angle: angle(self.half_angle, self.u_half_angle)
                    .ok_or_else(|| missing("half-angle", "8"))?,
            },
        };
        shape.checked()
    }
}

/// The tip from the levelled `scan` of the characterizer, on a grid of `pitch`. `Err` inside: why
/// the scan does not show it. Errors of kind `Setting`, `Cancelled`.
pub(super) fn tip_from_known(
    spec: &TipSpec,
    scan: &Leveled,
    support_nm: f64,
    pitch: Pitch,
    progress: &Progress,
) -> Result<std::result::Result<TipResult, String>> {
    let settings = known::Settings {
        shape: spec.known_spec()?.to_shape()?,
        formula: match spec.fitted.unwrap_or_default() {
            TipShape::SphereCone => Formula::SphereCone,
            TipShape::Paraboloid => Formula::Paraboloid,
            TipShape::Pyramid => Formula::Pyramid,
        },
        support_nm,
        pitch,
    };
    match known::estimate(&scan.map, scan.noise_nm, &settings, progress) {
        Ok(known) => Ok(Ok(result(known, spec.way.unwrap_or_default()))),
        Err(e) if e.kind() == ErrorKind::Data => Ok(Err(e.to_string())),
        Err(e) => Err(e),
    }
}

fn result(known: Known, way: Way) -> TipResult {
    let mut diagnosis = known.diagnosis.clone();
    let free = way == Way::FreeForm;
    if free {
        diagnosis
            .push("The free-form tip corrects: the fitted formula is shown beside it.".to_owned());
        diagnosis.extend(known.free_form.read_out.reasons.iter().cloned());
    }
    TipResult {
        from: TipFrom::KnownShape,
        tip: if free {
            known.free_form.tip.clone()
        } else {
            known.tip.clone()
        },
        read_out: if free {
            known.free_form.read_out.clone()
        } else {
            known.read_out.clone()
        },
        estimate: None,
        // The band belongs to the formula.
        band: if free { None } else { known.band.clone() },
        identified: known.identified,
        exercised_depth_nm: Some(known.exercised_depth_nm),
        height_u_nm: if free {
            known.free_form.height_u_nm
        } else {
            known.height_u_nm
        },
        sha256: None,
        diagnosis,
        known: Some(Box::new((known, way))),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn spec(text: &str) -> KnownSpec {
        toml::from_str(text).unwrap()
    }

    #[test]
    fn a_grating_is_read_with_its_uncertainties() {
        let text =
            "shape = \"ridges\"\nwidth = \"100 nm\"\nu-width = \"1 nm\"\npitch = \"0.2 um\"\n";
        let Shape::Ridges {
            width,
            height,
            pitch,
            wall_angle,
            corner_radius,
        } = spec(text).to_shape().unwrap()
        else {
            panic!("not ridges")
        };
        assert_eq!(width, Certified::new(100.0, 1.0));
        assert_eq!((height, pitch), (None, Some(Certified::exact(200.0))));
        assert_eq!(wall_angle, Certified::exact(90.0));
        assert_eq!(corner_radius, Certified::exact(0.0));
    }

    #[test]
    fn what_does_not_go_together_is_named() {
        for (text, named) in [
            ("shape = \"ridges\"", "width"),
            (
                "shape = \"sphere\"\ndiameter = \"30 nm\"\npitch = \"1 nm\"",
                "pitch",
            ),
            ("shape = \"sphere\"\ndiameter = \"-30 nm\"", "-30 nm"),
            ("shape = \"spike\"\nradius = \"2 nm\"", "half-angle"),
            (
                "shape = \"step\"\nu-height = \"1 nm\"",
                "u-height without height",
            ),
            ("shape = \"step\"\nwall-angle = 95", "95 deg"),
            (
                "shape = \"ridges\"\nwidth = \"10 nm\"\ncorner-radius = \"8 nm\"",
                "-6.000 nm wide",
            ),
        ] {
            let error = spec(text).to_shape().unwrap_err();
            assert_eq!(error.kind(), ErrorKind::Setting);
            assert!(error.to_string().contains(named), "{text}: {error}");
        }
        assert!(toml::from_str::<KnownSpec>("shape = \"cube\"").is_err());
    }
}
