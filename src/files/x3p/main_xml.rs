//! The `main.xml` of an X3P: only what a reader of heights needs.

use super::super::format::malformed;
use crate::error::Result;
use quick_xml::Reader;
use quick_xml::events::Event;

/// Deepest nesting that is followed; the standard's deepest path has five elements.
const MAX_DEPTH: usize = 64;

/// One axis of Record1.
#[derive(Debug, Default)]
pub struct Axis {
    pub axis_type: Option<String>,
    pub data_type: Option<String>,
    /// Metres.
    pub increment: Option<f64>,
    /// Metres.
    pub offset: Option<f64>,
}

impl Axis {
    /// Whether each point carries its own coordinate.
    pub fn absolute(&self) -> bool {
        self.axis_type.as_deref() == Some("A")
    }

    fn set(&mut self, key: &str, text: &str) -> Result<()> {
        match key {
            "AxisType" => self.axis_type = Some(text.to_owned()),
            "DataType" => self.data_type = Some(text.to_owned()),
            "Increment" => self.increment = number(key, text)?,
            "Offset" => self.offset = number(key, text)?,
            _ => {}
        }
        Ok(())
    }
}

/// Where the points are.
#[derive(Debug, Default)]
pub enum Data {
    #[default]
    None,
    /// In another entry of the archive.
    Link { points: String, md5: Option<String> },
    /// In `main.xml` itself; an empty datum is NaN.
    List(Vec<f64>),
}

/// What `main.xml` states.
#[derive(Debug, Default)]
pub struct Document {
    pub revision: String,
    pub feature: String,
    pub x: Axis,
    pub y: Axis,
    pub z: Axis,
    /// Whether a rotation other than the identity is stated.
    pub rotated: bool,
    /// Columns, rows, layers.
    pub size: Option<[usize; 3]>,
    pub list_dimension: bool,
    pub data: Data,
    /// Link to the validity bits, and their MD5.
    pub valid: Option<(String, Option<String>)>,
    pub checksum_file: Option<String>,
}

impl Document {
    /// Errors: `Malformed` where the XML is broken, its root is another, or a number is none.
    pub fn parse(bytes: &[u8]) -> Result<Self> {
        let text = decode(bytes);
        let mut reader = Reader::from_str(text.trim_start_matches('\u{feff}'));
        let mut document = Self::default();
        let mut path: Vec<String> = Vec::new();
        let mut content = String::new();
        loop {
            let event = reader
                .read_event()
                .map_err(|e| malformed("main.xml is not well-formed").source(e))?;
            match event {
                Event::Start(e) => {
                    path.push(e.local_name().as_ref().to_owned());
                    check_path(&path)?;
                    content.clear();
                }
                Event::Empty(e) => {
                    path.push(e.local_name().as_ref().to_owned());
                    check_path(&path)?;
                    document.element(&path, "")?;
                    path.pop();
                    content.clear();
                }
                Event::Text(text) => content.push_str(&text.xml10_content()),
                Event::CData(text) => content.push_str(&text.xml10_content()),
                Event::End(_) => {
                    document.element(&path, content.trim())?;
                    path.pop();
                    content.clear();
                }
                Event::Eof if path.is_empty() => break,
                Event::Eof => return Err(malformed("main.xml ends too early")),
                _ => {}
            }
        }
        Ok(document)
    }

    /// Takes the text of the element at the end of `path`.
    fn element(&mut self, path: &[String], text: &str) -> Result<()> {
        let names: Vec<&str> = path.iter().skip(1).map(String::as_str).collect();
        match names[..] {
            ["Record1", "Revision"] => self.revision = text.to_owned(),
            ["Record1", "FeatureType"] => self.feature = text.to_owned(),
            ["Record1", "Axes", "CX", key] => self.x.set(key, text)?,
            ["Record1", "Axes", "CY", key] => self.y.set(key, text)?,
            ["Record1", "Axes", "CZ", key] => self.z.set(key, text)?,
            ["Record1", "Axes", "Rotation", element] => {
                let identity = matches!(element, "r11" | "r22" | "r33");
                let value = number(element, text)?.unwrap_or(f64::from(identity));
                self.rotated |= value != f64::from(identity);
            }
            ["Record3", "ListDimension"] => self.list_dimension = true,
            ["Record3", "MatrixDimension", key] => {
                let axis = match key {
                    "SizeX" => 0,
                    "SizeY" => 1,
                    "SizeZ" => 2,
                    _ => return Ok(()),
                };
                let size = text.parse().map_err(|_| not_a(key, text, "size"))?;
                self.size.get_or_insert([0, 1, 1])[axis] = size;
            }
            ["Record3", "DataLink", key] => self.link(key, text),
            ["Record3", "DataList", "Datum"] => self.datum(text)?,
            ["Record4", "ChecksumFile"] if !text.is_empty() => {
                self.checksum_file = Some(text.to_owned());
            }
            _ => {}
        }
        Ok(())
    }

    fn link(&mut self, key: &str, text: &str) {
        if text.is_empty() {
            return;
        }
        match (key, &mut self.data) {
            ("PointDataLink", data) => {
                *data = Data::Link {
                    points: text.to_owned(),
                    md5: None,
                };
            }
            ("MD5ChecksumPointData", Data::Link { md5, .. }) => *md5 = Some(text.to_owned()),
            ("ValidPointsLink", _) => self.valid = Some((text.to_owned(), None)),
            ("MD5ChecksumValidPoints", _) => {
                if let Some((_, md5)) = &mut self.valid {
                    *md5 = Some(text.to_owned());
                }
            }
            _ => {}
        }
    }

    fn datum(&mut self, text: &str) -> Result<()> {
        // Several coordinates a point: only a list or an irregular grid has them, which the
        // reader refuses by its axes.
        let last = text.rsplit(';').next().unwrap_or("").trim();
        let value = if last.is_empty() {
            f64::NAN
        } else {
            last.parse().map_err(|_| not_a("Datum", last, "number"))?
        };
        match &mut self.data {
            Data::List(values) => values.push(value),
            Data::None => self.data = Data::List(vec![value]),
            // A link and a list: the link is the one with a checksum.
            Data::Link { .. } => {}
        }
        Ok(())
    }
}

/// UTF-8 where it is, else Latin-1, which never fails.
fn decode(bytes: &[u8]) -> std::borrow::Cow<'_, str> {
    match std::str::from_utf8(bytes) {
        Ok(text) => text.into(),
        Err(_) => bytes
            .iter()
            .map(|&b| char::from(b))
            .collect::<String>()
            .into(),
    }
}

fn check_path(path: &[String]) -> Result<()> {
    if path.len() > MAX_DEPTH {
        return Err(malformed("main.xml is nested too deeply"));
    }
    match path.first().map(String::as_str) {
        Some("ISO5436_2" | "ISO5436") => Ok(()),
        root => Err(malformed(format!(
            "main.xml has the root \"{}\", not ISO5436_2",
            root.unwrap_or("").chars().take(40).collect::<String>()
        ))),
    }
}

/// An empty element states nothing.
fn number(key: &str, text: &str) -> Result<Option<f64>> {
    if text.is_empty() {
        return Ok(None);
    }
    match text.parse::<f64>() {
        Ok(value) if value.is_finite() => Ok(Some(value)),
        _ => Err(not_a(key, text, "number")),
    }
}

fn not_a(key: &str, text: &str, what: &str) -> crate::Error {
    let shown: String = text.chars().take(40).collect();
    malformed(format!("main.xml states {key} = \"{shown}\", no {what}"))
}
