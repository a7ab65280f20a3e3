//! NumPy archives (`.npz`): every 2-D array is a map.
//!
//! Companion arrays state a pitch only where their name carries the unit: `pitch_nm` (one number,
//! or two for x and y), or a pair such as `pitch_x_nm`, `pitch_y_nm` or `dx_um`, `dy_um`. A bare
//! `dx` could be degrees or pixels and is left aside with a note.

use super::archive::Archive;
use super::format::{Contents, Format, MapHead, Raster, Stated, malformed};
use super::limits::MAX_DECODED_BYTES;
use super::npy::Array;
use crate::error::Result;
use crate::heightmap::Pitch;
use crate::units::nanometres_per;

/// The `.npz` reader.
pub struct Npz;

/// Most bytes of one array file: the largest map and its header.
const MAX_ARRAY: usize = MAX_DECODED_BYTES + (1 << 16);

impl Format for Npz {
    fn name(&self) -> &'static str {
        "NumPy archive"
    }

    fn recognises(&self, bytes: &[u8]) -> bool {
        Archive::open(bytes).is_ok_and(|a| a.names().any(|(_, n)| n.ends_with(".npy")))
    }

    fn contents(&self, bytes: &[u8]) -> Result<Contents> {
        let mut archive = Archive::open(bytes)?;
        let entries: Vec<(usize, String)> = archive
            .names()
            .filter_map(|(i, n)| Some((i, n.strip_suffix(".npy")?.to_owned())))
            .collect();
        let mut contents = Contents::default();
        let mut companions = Vec::new();
        for (index, name) in entries {
            let file = archive.read(index, MAX_ARRAY)?;
            let array = match Array::parse(&file) {
                Ok(array) => array,
                Err(e) => {
                    contents
                        .notes
                        .push(format!("array \"{name}\" left aside: {}", e.what()));
                    continue;
                }
            };
            if array.shape.len() == 2 {
                match array.plane().and_then(|(rows, columns)| {
                    MapHead::new(name.as_str(), index, (columns, rows), array.kind)
                }) {
                    Ok(head) => contents.maps.push(head),
                    Err(e) => contents
                        .notes
                        .push(format!("array \"{name}\" left aside: {}", e.what())),
                }
            } else if let Some(values) = array.few(2) {
                companions.push((name, values));
            }
        }
        state_pitch(&mut contents, &companions);
        Ok(contents)
    }

    fn read(&self, bytes: &[u8], head: &MapHead) -> Result<Raster> {
        let file = Archive::open(bytes)?.read(head.locator, MAX_ARRAY)?;
        let array = Array::parse(&file)?;
        if array.plane()? != (head.rows, head.columns) {
            return Err(malformed("the array's shape changed while reading"));
        }
        Ok(array.samples()?.into())
    }
}

/// Uses companions that state a pitch with its unit; names those that do so without.
fn state_pitch(contents: &mut Contents, companions: &[(String, Vec<f64>)]) {
    let bare: Vec<&str> = companions
        .iter()
        .map(|(name, _)| name.as_str())
        .filter(|n| {
            matches!(
                *n,
                "dx" | "dy" | "pitch" | "pitch_x" | "pitch_y" | "spacing"
            )
        })
        .collect();
    if !bare.is_empty() {
        contents.notes.push(format!(
            "{} state no unit of length: not used as the pixel pitch",
            bare.join(", ")
        ));
    }
    let mut found: Vec<Stated<Pitch>> = Vec::new();
    for (name, values) in companions {
        let Some((stem, factor)) = name
            .rsplit_once('_')
            .and_then(|(stem, unit)| Some((stem, nanometres_per(unit)?)))
        else {
            continue;
        };
        let nm = |v: f64| v * factor;
        let partner = match stem {
            "pitch" => match values[..] {
                [both] => Some((nm(both), nm(both), name.clone())),
                [x, y] => Some((nm(x), nm(y), name.clone())),
                _ => None,
            },
            "pitch_x" | "dx" => {
                let other = name.replacen('x', "y", 1);
                let y = companions.iter().find(|(n, _)| *n == other);
                match (&values[..], y.map(|(_, v)| &v[..])) {
                    ([x], Some([y])) => Some((nm(*x), nm(*y), format!("{name}, {other}"))),
                    _ => None,
                }
            }
            _ => None,
        };
        if let Some((x, y, names)) = partner
            && let Ok(pitch) = (Pitch { x, y }).checked()
        {
            found.push(Stated::new(pitch, format!("array {names}")));
        }
    }
    match &found[..] {
        [] => {}
        [first, rest @ ..] if rest.iter().all(|p| p.value.agrees_with(first.value)) => {
            for map in &mut contents.maps {
                map.pitch = Some(first.clone());
            }
        }
        _ => contents
            .notes
            .push("the arrays state different pixel pitches: none is used".to_owned()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::{Array2, arr0, arr1};
    use ndarray_npy::NpzWriter;
    use std::io::Cursor;

    fn npz(numbers: &[(&str, f64)]) -> Vec<u8> {
        let mut writer = NpzWriter::new_compressed(Cursor::new(Vec::new()));
        writer
            .add_array("z", &Array2::<i16>::zeros((2, 3)))
            .unwrap();
        writer
            .add_array("other", &Array2::<f32>::ones((4, 5)))
            .unwrap();
        writer.add_array("x", &arr1(&[1.0, 2.0, 3.0])).unwrap();
        for (name, value) in numbers {
            writer.add_array(*name, &arr0(*value)).unwrap();
        }
        writer.finish().unwrap().into_inner()
    }

    #[test]
    fn every_plane_is_a_map() {
        let bytes = npz(&[]);
        assert!(Npz.recognises(&bytes));
        let contents = Npz.contents(&bytes).unwrap();
        let names: Vec<_> = contents.maps.iter().map(|m| m.name.as_str()).collect();
        assert_eq!(names, ["z", "other"]);
        let samples = Npz.read(&bytes, &contents.maps[1]).unwrap().samples;
        assert_eq!(samples.to_f64(), [1.0; 20]);
        assert_eq!(contents.maps[0].pitch, None);
    }

    #[test]
    fn a_pitch_counts_only_with_its_unit() {
        let pitch = |numbers: &[(&str, f64)]| {
            let contents = Npz.contents(&npz(numbers)).unwrap();
            (
                contents.maps[0].pitch.clone().map(|p| p.value),
                contents.notes.len(),
            )
        };
        assert_eq!(pitch(&[("dx", 2.0), ("dy", 2.0)]), (None, 1));
        assert_eq!(pitch(&[("dx_nm", 2.0)]), (None, 0));
        assert_eq!(
            pitch(&[("dx_um", 2.0), ("dy_um", 4.0)]),
            (
                Some(Pitch {
                    x: 2000.0,
                    y: 4000.0
                }),
                0
            )
        );
        assert_eq!(pitch(&[("pitch_nm", 2.0)]), (Some(Pitch::square(2.0)), 0));
        assert_eq!(pitch(&[("pitch_nm", 2.0), ("pitch_um", 1.0)]), (None, 1));
        assert_eq!(pitch(&[("pitch_nm", 0.0)]), (None, 0));
    }
}
