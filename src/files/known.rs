//! Files that are not read, by their name: what they are and what to do.

use super::archive::looks_like_zip;
use crate::error::{Error, ErrorKind};

const PICTURE: &str = "A picture has no heights: export the height map itself, as 16-bit PNG, 32-bit TIFF, X3P or .npy";
const EXPORT: &str = "Export the height map as TIFF, 16-bit PNG, X3P or .npy";

/// First bytes, name, remedy.
const KINDS: &[(&[u8], &str, &str)] = &[
    (b"\xff\xd8\xff", "a JPEG picture", PICTURE),
    (b"GIF8", "a GIF picture", PICTURE),
    (b"BM", "a BMP picture", PICTURE),
    (b"%PDF", "a PDF document", EXPORT),
    (b"%!PS", "a PostScript document", EXPORT),
    (b"{\\rtf", "a text document (RTF)", EXPORT),
    (b"\x89HDF\r\n\x1a\n", "an HDF5 file", EXPORT),
    (b"CDF\x01", "a NetCDF file", EXPORT),
    (b"CDF\x02", "a NetCDF file", EXPORT),
    (b"MATLAB 5.0", "a MATLAB file", EXPORT),
    (b"\x1f\x8b", "a gzip archive", "Unpack it first"),
    (b"BZh", "a bzip2 archive", "Unpack it first"),
    (b"\xfd7zXZ\0", "an xz archive", "Unpack it first"),
    (b"7z\xbc\xaf\x27\x1c", "a 7z archive", "Unpack it first"),
    (b"Rar!", "a RAR archive", "Unpack it first"),
    (
        b"\x28\xb5\x2f\xfd",
        "a Zstandard archive",
        "Unpack it first",
    ),
    (b"\x7fELF", "a program", EXPORT),
    (b"MZ", "a program", EXPORT),
    (b"aISO-", "a surface data file (SDF, ISO 25178-71)", EXPORT),
    (b"bISO-", "a surface data file (SDF, ISO 25178-71)", EXPORT),
    (b"aBCR-", "a surface data file (SDF, BCR)", EXPORT),
    (b"bBCR-", "a surface data file (SDF, BCR)", EXPORT),
];

/// The error for a file that no reader recognises.
pub fn not_read(bytes: &[u8]) -> Error {
    if bytes.is_empty() {
        return Error::new(ErrorKind::UnknownFormat, "the file is empty")
            .remedy("Export or copy it again");
    }
    if looks_like_zip(bytes) {
        return match super::archive::Archive::open(bytes) {
            Err(e) => e,
            Ok(_) => unknown("a zip archive with neither a main.xml (X3P) nor arrays (.npz)")
                .remedy("Unpack it and open the height map inside"),
        };
    }
    if bytes.starts_with(b"RIFF") && bytes.get(8..12) == Some(b"WEBP") {
        return unknown("a WebP picture").remedy(PICTURE);
    }
    if let Some((_, name, remedy)) = KINDS.iter().find(|(magic, ..)| bytes.starts_with(magic)) {
        return unknown(name).remedy(*remedy);
    }
    let head = &bytes[..bytes.len().min(4096)];
    let printable = |b: &u8| matches!(b, b'\t' | b'\n' | b'\r' | 0x20..=0x7e | 0x80..);
    if head.iter().all(printable) {
        let trimmed = head.trim_ascii_start();
        let name = match trimmed {
            [b'<', ..] => "an XML or HTML text",
            [b'{' | b'[', ..] => "a JSON text",
            _ => "a text",
        };
        return unknown(name).remedy(EXPORT);
    }
    let first: Vec<String> = bytes.iter().take(8).map(|b| format!("{b:02x}")).collect();
    unknown(&format!(
        "of an unknown kind (it begins with {})",
        first.join(" ")
    ))
    .remedy(EXPORT)
}

fn unknown(name: &str) -> Error {
    Error::new(
        ErrorKind::UnknownFormat,
        format!("the file is {name}, which is not read as a height map"),
    )
}

#[cfg(test)]
mod tests {
    use super::super::archive::tests::zip_of;
    use super::*;

    #[test]
    fn strangers_are_named() {
        let zip = zip_of(&[("a.txt", b"x")]);
        for (bytes, name) in [
            (&b""[..], "empty"),
            (b"\xff\xd8\xff\xe0\0\x10JFIF", "JPEG"),
            (b"%PDF-1.7", "PDF"),
            (b"RIFF\0\0\0\0WEBPVP8 ", "WebP"),
            (b"1 2 3\n4 5 6\n", "a text"),
            (b"  <html>", "XML or HTML"),
            (b"\0\x01\x02\x03", "00 01 02 03"),
            (b"bISO-1.0", "ISO 25178-71"),
            (&zip, "zip archive"),
        ] {
            let error = not_read(bytes);
            assert_eq!(error.kind(), ErrorKind::UnknownFormat, "{name}");
            assert!(error.what().contains(name), "{error}");
            assert!(!error.remedy_text().is_empty(), "{name}");
        }
        // Cut inside: the list of entries at the end is gone.
        assert_eq!(not_read(&zip[..zip.len() / 2]).kind(), ErrorKind::Malformed);
    }
}
