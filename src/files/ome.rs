//! Physical pixel size from OME-XML in a TIFF description (the OME-TIFF model: attributes of
//! `Pixels`, default unit micrometre).

use crate::heightmap::Pitch;
use crate::units::nanometres_per;
use quick_xml::Reader;
use quick_xml::events::{BytesStart, Event};

/// What the description states.
#[derive(Debug, PartialEq)]
pub enum OmePitch {
    /// No OME-XML, or no physical size in it.
    None,
    /// The same size for every image.
    Stated(Pitch),
    /// A size that cannot be used, with the reason.
    Unusable(String),
}

/// Reads the `Pixels` elements. Damaged XML after the first usable one does not matter.
pub fn pitch(description: &str) -> OmePitch {
    if !description.contains("<OME") && !description.contains(":OME") {
        return OmePitch::None;
    }
    let mut reader = Reader::from_str(description);
    let mut found: Option<Pitch> = None;
    loop {
        match reader.read_event() {
            Ok(Event::Start(e) | Event::Empty(e)) if e.local_name().as_ref() == "Pixels" => {
                let pitch = match of_pixels(&e) {
                    Ok(Some(pitch)) => pitch,
                    Ok(None) => continue,
                    Err(why) => return OmePitch::Unusable(why),
                };
                if found.is_some_and(|f| !f.agrees_with(pitch)) {
                    return OmePitch::Unusable(
                        "OME-XML states different pixel sizes for its images: not used".to_owned(),
                    );
                }
                found = Some(pitch);
            }
            Ok(Event::Eof) | Err(_) => break,
            Ok(_) => {}
        }
    }
    found.map_or(OmePitch::None, OmePitch::Stated)
}

fn of_pixels(element: &BytesStart) -> Result<Option<Pitch>, String> {
    let attribute = |name: &str| {
        element
            .attributes()
            .flatten()
            .find(|a| a.key.as_ref() == name)
            .map(|a| a.value.into_owned())
    };
    let side = |axis: &str| -> Result<Option<f64>, String> {
        let Some(size) = attribute(&format!("PhysicalSize{axis}")) else {
            return Ok(None);
        };
        let unit = attribute(&format!("PhysicalSize{axis}Unit"));
        let unit = unit.as_deref().unwrap_or("um");
        match (size.trim().parse::<f64>(), nanometres_per(unit)) {
            (Ok(size), Some(nm)) => Ok(Some(size * nm)),
            _ => Err(format!(
                "OME-XML states PhysicalSize{axis} = {size} {unit}, no length: not used"
            )),
        }
    };
    match (side("X")?, side("Y")?) {
        (Some(x), Some(y)) => Pitch { x, y }
            .checked()
            .map(Some)
            .map_err(|_| format!("OME-XML states a pixel of {x} nm by {y} nm: not used")),
        (None, None) => Ok(None),
        _ => Err("OME-XML states the pixel size along one axis only: not used".to_owned()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn ome(pixels: &str) -> OmePitch {
        pitch(&format!(
            "<?xml version=\"1.0\"?><OME xmlns=\"http://www.openmicroscopy.org/Schemas/OME/2016-06\"><Image ID=\"Image:0\">{pixels}</Image></OME>"
        ))
    }

    #[test]
    fn sizes_with_and_without_unit() {
        let plain = ome("<Pixels PhysicalSizeX=\"0.25\" PhysicalSizeY=\"0.5\" SizeX=\"2\"/>");
        assert_eq!(plain, OmePitch::Stated(Pitch { x: 250.0, y: 500.0 }));
        let nm = ome(
            "<Pixels PhysicalSizeX='2' PhysicalSizeXUnit='nm' PhysicalSizeY='3' PhysicalSizeYUnit='nm'><Channel/></Pixels>",
        );
        assert_eq!(nm, OmePitch::Stated(Pitch { x: 2.0, y: 3.0 }));
    }

    #[test]
    fn what_cannot_be_used_is_said() {
        assert_eq!(ome("<Pixels SizeX=\"2\"/>"), OmePitch::None);
        assert_eq!(pitch("a plain description"), OmePitch::None);
        for pixels in [
            "<Pixels PhysicalSizeX='1' PhysicalSizeY='1' PhysicalSizeXUnit='pixel'/>",
            "<Pixels PhysicalSizeX='1'/>",
            "<Pixels PhysicalSizeX='0' PhysicalSizeY='0'/>",
            "<Pixels PhysicalSizeX='1' PhysicalSizeY='1'/><Pixels PhysicalSizeX='2' PhysicalSizeY='1'/>",
        ] {
            assert!(matches!(ome(pixels), OmePitch::Unusable(_)), "{pixels}");
        }
    }
}
