//! Zip archives read with care: no entry becomes larger than was asked for.

use super::format::malformed;
use super::limits::check_claim;
use crate::error::{Error, ErrorKind, Result};
use std::io::{Cursor, Read};
use zip::ZipArchive;

/// An archive in memory.
pub struct Archive<'a> {
    zip: ZipArchive<Cursor<&'a [u8]>>,
    names: Vec<String>,
}

/// Whether the bytes begin like a zip archive.
pub fn looks_like_zip(bytes: &[u8]) -> bool {
    bytes.starts_with(b"PK\x03\x04") || bytes.starts_with(b"PK\x05\x06")
}

impl<'a> Archive<'a> {
    /// Errors: `Malformed` when it is no whole zip archive.
    pub fn open(bytes: &'a [u8]) -> Result<Self> {
        if !looks_like_zip(bytes) {
            return Err(malformed("no zip archive"));
        }
        let zip = ZipArchive::new(Cursor::new(bytes))
            .map_err(|e| malformed("the zip archive is damaged").source(e))?;
        let names = (0..zip.len())
            .map(|i| match zip.name_for_index(i) {
                Some(Ok(name)) => name.replace('\\', "/"),
                _ => String::new(),
            })
            .collect();
        Ok(Self { zip, names })
    }

    /// The entries' names by index; those that the operating system of the writer left behind
    /// (`__MACOSX`) and unreadable ones are empty.
    pub fn names(&self) -> impl Iterator<Item = (usize, &str)> {
        self.names.iter().enumerate().map(|(i, name)| {
            let litter = name.split('/').any(|part| part == "__MACOSX");
            (i, if litter { "" } else { name.as_str() })
        })
    }

    /// The entry of this name, if there is one.
    pub fn find(&self, name: &str) -> Option<usize> {
        let plain = name.trim_start_matches("./").trim_start_matches('/');
        self.names().find(|(_, n)| *n == plain).map(|(i, _)| i)
    }

    /// The bytes of an entry, at most `most`.
    ///
    /// Errors: `Malformed` when damaged (length, CRC-32) or beyond what deflate can reach,
    /// `Unsupported` when larger than `most` or packed in an unknown way.
    pub fn read(&mut self, index: usize, most: usize) -> Result<Vec<u8>> {
        let name = self.names.get(index).cloned().unwrap_or_default();
        let broken = |e: Box<dyn std::error::Error + Send + Sync>| {
            malformed(format!("the zip entry \"{name}\" cannot be unpacked")).source(e)
        };
        let too_large = || {
            Error::new(
                ErrorKind::Unsupported,
                format!("the zip entry \"{name}\" is larger than the {most} bytes that fit here"),
            )
            .remedy("Export the map again; if it is that large, crop it")
        };
        let entry = self.zip.by_index(index).map_err(|e| match e {
            zip::result::ZipError::UnsupportedArchive(why) => Error::new(
                ErrorKind::Unsupported,
                format!("the zip entry \"{name}\" is stored in a way that is not read: {why}"),
            )
            .remedy("Pack it again with plain deflate"),
            other => broken(other.into()),
        })?;
        let claimed = usize::try_from(entry.size()).map_err(|_| too_large())?;
        if claimed > most {
            return Err(too_large());
        }
        let stored = usize::try_from(entry.compressed_size()).unwrap_or(usize::MAX);
        check_claim(claimed, stored.saturating_add(1), true)?;
        let mut bytes = Vec::with_capacity(claimed.min(1 << 26));
        entry
            .take(most as u64 + 1)
            .read_to_end(&mut bytes)
            .map_err(|e| broken(e.into()))?;
        if bytes.len() > most {
            return Err(too_large());
        }
        Ok(bytes)
    }
}

#[cfg(test)]
pub mod tests {
    use super::*;
    use std::io::Write;

    /// A deflated archive of these entries.
    pub fn zip_of(entries: &[(&str, &[u8])]) -> Vec<u8> {
        let mut writer = zip::ZipWriter::new(Cursor::new(Vec::new()));
        for (name, bytes) in entries {
            let options = zip::write::SimpleFileOptions::default();
            writer.start_file(*name, options).unwrap();
            writer.write_all(bytes).unwrap();
        }
        writer.finish().unwrap().into_inner()
    }

    #[test]
    fn entries_by_name_without_litter() {
        let bytes = zip_of(&[("__MACOSX/a.npy", b"x"), ("in/a.npy", b"abc")]);
        let mut archive = Archive::open(&bytes).unwrap();
        assert_eq!(archive.find("a.npy"), None);
        let index = archive.find("./in/a.npy").unwrap();
        assert_eq!(archive.read(index, 3).unwrap(), b"abc");
        assert_eq!(
            archive.read(index, 2).unwrap_err().kind(),
            ErrorKind::Unsupported
        );
    }

    #[test]
    fn an_entry_that_swells_is_refused() {
        let zeros = vec![0; 1 << 20];
        let bytes = zip_of(&[("a", &zeros)]);
        let mut archive = Archive::open(&bytes).unwrap();
        assert!(bytes.len() < 4000);
        assert_eq!(
            archive.read(0, 1 << 19).unwrap_err().kind(),
            ErrorKind::Unsupported
        );
        assert_eq!(archive.read(0, 1 << 20).unwrap().len(), 1 << 20);
    }
}
