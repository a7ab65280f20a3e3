//! Who states the scale: options before sidecar before file, and what is said about it.

use super::OpenOptions;
use super::format::{HeightScale, MapHead, Stated};
use super::sidecar::Sidecar;
use crate::error::{Error, ErrorKind, Result};
use crate::heightmap::Pitch;
use crate::units::{Length, nanometres_per};
use std::path::Path;

/// The scale of a map as far as anybody states it.
#[derive(Debug)]
pub struct Scale {
    pub pitch: Option<Stated<Pitch>>,
    pub height: Option<Stated<HeightScale>>,
    pub void: Option<f64>,
}

impl Scale {
    /// Errors: kind `Setting` for an option that cannot be used.
    pub fn resolve(
        head: &MapHead,
        sidecar: Option<&Sidecar>,
        options: &OpenOptions,
    ) -> Result<Self> {
        let beside = |s: &Sidecar| format!("sidecar {}", s.name);
        let given_pitch = options.pitch.map(Pitch::checked).transpose()?;
        let given_height = options.height_unit.as_deref().map(unit).transpose()?;
        let pitches = [
            given_pitch.map(|p| Stated::new(p, "option")),
            sidecar.and_then(|s| Some(Stated::new(s.pitch?, beside(s)))),
            head.pitch.clone(),
        ];
        let heights = [
            given_height.map(|h| Stated::new(h, "option")),
            sidecar.and_then(|s| Some(Stated::new(s.height.clone()?, beside(s)))),
            head.height.clone(),
        ];
        Ok(Self {
            pitch: first(pitches, |a, b| a.agrees_with(*b), show_pitch),
            height: first(heights, HeightScale::agrees_with, show_height),
            void: sidecar.and_then(|s| s.void).or(head.void),
        })
    }

    /// Pitch, height scale and the sentence for the provenance.
    /// Errors: kinds `MissingPitch`, `MissingHeightUnit`.
    pub fn required(&self, path: &Path, head: &MapHead) -> Result<(Pitch, HeightScale, String)> {
        match (&self.pitch, &self.height) {
            (Some(pitch), Some(height)) => Ok((
                pitch.value,
                height.value.clone(),
                source(pitch, height, head.samples.is_integer()),
            )),
            (None, height) => Err(Error::new(
                ErrorKind::MissingPitch,
                if height.is_none() {
                    "the file states neither its pixel pitch nor the unit of its heights"
                } else {
                    "the file does not state its pixel pitch"
                },
            )
            .remedy(format!(
                "Give the distance between neighbouring pixels (--pitch 2nm, or --pitch 2nm,4nm for x and y{}), or put {} beside it, with your numbers",
                if height.is_none() { "; --height-unit nm" } else { "" },
                paste(path, head, true, height.is_none()),
            ))),
            (Some(_), None) => Err(Error::new(
                ErrorKind::MissingHeightUnit,
                "the file does not state the unit of its heights",
            )
            .remedy(format!(
                "Give it (--height-unit nm; {}), or put {} beside it, with your numbers",
                if head.samples.is_integer() {
                    "one count is then 1 nm"
                } else {
                    "a stored 1 is then 1 nm"
                },
                paste(path, head, false, true),
            ))),
        }
    }
}

/// The sidecar text to paste.
fn paste(path: &Path, head: &MapHead, pitch: bool, height: bool) -> String {
    let name = super::sidecar_path(path);
    let name = name.file_name().unwrap_or_default().to_string_lossy();
    let mut lines = Vec::new();
    if pitch {
        lines.push("pitch = [\"2 nm\", \"2 nm\"]");
    }
    if height {
        lines.push(if head.samples.is_integer() {
            "height-scale = \"0.01 nm\""
        } else {
            "height-unit = \"nm\""
        });
    }
    format!(
        "a file {name} with the line {}",
        lines.join(" and the line ")
    )
}

fn unit(name: &str) -> Result<HeightScale> {
    HeightScale::of_unit(name).ok_or_else(|| {
        Error::new(
            ErrorKind::Setting,
            format!("height unit \"{name}\" is no unit of length"),
        )
        .remedy("Use pm, nm, um, mm or m")
    })
}

/// The first statement; where it overrides a different one, its source says so.
fn first<T>(
    statements: [Option<Stated<T>>; 3],
    agree: impl Fn(&T, &T) -> bool,
    show: impl Fn(&T) -> String,
) -> Option<Stated<T>> {
    let mut statements = statements.into_iter().flatten();
    let mut chosen = statements.next()?;
    for other in statements {
        if !agree(&chosen.value, &other.value) {
            chosen.by = format!(
                "{} (overrides {} from {})",
                chosen.by,
                show(&other.value),
                other.by
            );
        }
    }
    Some(chosen)
}

fn show_pitch(pitch: &Pitch) -> String {
    format!("{}, {}", Length::from_nm(pitch.x), Length::from_nm(pitch.y))
}

fn show_height(scale: &HeightScale) -> String {
    let step = match nanometres_per(&scale.unit) {
        Some(nm) if nm == scale.nm_per_count => format!("1 {}", scale.unit),
        _ => Length::from_nm(scale.nm_per_count).to_string(),
    };
    if scale.offset_nm == 0.0 {
        step
    } else {
        format!("{step} from {}", Length::from_nm(scale.offset_nm))
    }
}

fn source(pitch: &Stated<Pitch>, height: &Stated<HeightScale>, counts: bool) -> String {
    let stored = if counts { "1 count" } else { "a stored 1" };
    let means = format!("{stored} = {}", show_height(&height.value));
    if pitch.by == height.by {
        format!("{}; {means}", pitch.by)
    } else {
        format!("pitch: {}; heights: {}; {means}", pitch.by, height.by)
    }
}

#[cfg(test)]
mod tests {
    use super::super::samples::SampleType;
    use super::*;

    fn head(samples: SampleType) -> MapHead {
        MapHead::new("a", 0, (2, 2), samples).unwrap()
    }

    fn options(pitch: Option<f64>, unit: Option<&str>) -> OpenOptions {
        OpenOptions {
            pitch: pitch.map(Pitch::square),
            height_unit: unit.map(str::to_owned),
            map: None,
        }
    }

    #[test]
    fn options_before_sidecar_before_file_and_it_is_said() {
        let mut head = head(SampleType::Int16);
        head.pitch = Some(Stated::new(Pitch::square(5.0), "file tags"));
        let sidecar = Sidecar {
            name: "a.tif.toml".into(),
            pitch: Some(Pitch::square(4.0)),
            height: HeightScale::of_unit("um"),
            void: Some(-1.0),
        };
        let required = |sidecar, options: &OpenOptions| {
            let scale = Scale::resolve(&head, sidecar, options).unwrap();
            scale.required(Path::new("a.tif"), &head)
        };
        let (pitch, height, source) =
            required(Some(&sidecar), &options(Some(3.0), Some("nm"))).unwrap();
        assert_eq!((pitch.x, height.nm_per_count), (3.0, 1.0));
        assert!(
            source.starts_with("pitch: option (overrides 4 nm, 4 nm from sidecar"),
            "{source}"
        );
        assert!(source.contains("5 nm, 5 nm from file tags"), "{source}");
        assert!(source.ends_with("1 count = 1 nm"), "{source}");
        let (pitch, height, source) = required(Some(&sidecar), &options(None, None)).unwrap();
        assert_eq!((pitch.x, height.nm_per_count), (4.0, 1000.0));
        assert!(source.ends_with("1 count = 1 um"), "{source}");
        let (pitch, _, source) = required(None, &options(None, Some("pm"))).unwrap();
        assert_eq!(pitch.x, 5.0);
        assert_eq!(source, "pitch: file tags; heights: option; 1 count = 1 pm");
    }

    #[test]
    fn what_is_missing_is_asked_for() {
        let head = head(SampleType::Float32);
        let missing = |options: &OpenOptions| {
            let scale = Scale::resolve(&head, None, options).unwrap();
            scale
                .required(Path::new("dir/scan.npy"), &head)
                .unwrap_err()
        };
        let error = missing(&options(None, None));
        assert_eq!(error.kind(), ErrorKind::MissingPitch);
        for part in [
            "--pitch",
            "--height-unit",
            "scan.npy.toml",
            "height-unit = \"nm\"",
        ] {
            assert!(error.to_string().contains(part), "{error}");
        }
        assert_eq!(
            missing(&options(None, Some("nm"))).kind(),
            ErrorKind::MissingPitch
        );
        let error = missing(&options(Some(2.0), None));
        assert_eq!(error.kind(), ErrorKind::MissingHeightUnit);
        assert!(!error.to_string().contains("--pitch"), "{error}");
    }

    #[test]
    fn options_that_cannot_be_used() {
        let head = head(SampleType::Float32);
        for bad in [options(Some(-1.0), None), options(None, Some("volt"))] {
            let error = Scale::resolve(&head, None, &bad).unwrap_err();
            assert_eq!(error.kind(), ErrorKind::Setting);
        }
    }
}
