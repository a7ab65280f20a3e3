//! How large a file or a map may be. A header that claims more than the file can hold, or more
//! than these limits, is refused before memory is asked for.

use super::format::malformed;
use crate::error::{Error, ErrorKind, Result};
use std::path::Path;

/// Most pixels of one map: 16384 x 16384.
pub const MAX_PIXELS: usize = 1 << 28;

/// Most bytes of decoded samples of one map: [`MAX_PIXELS`] of float64.
pub const MAX_DECODED_BYTES: usize = MAX_PIXELS * 8;

/// Most bytes of a file: one map of the largest size, uncompressed, with room for a second.
pub const MAX_FILE_BYTES: u64 = 4 << 30;

/// The most that one compressed byte can become: deflate reaches 1032, LZW 2730 (4096 bytes
/// from a 12-bit code); common practice is to refuse beyond that.
pub const MAX_EXPANSION: u64 = 3000;

/// The bytes of a regular file. Errors: `Io` when it cannot be read, `Unsupported` beyond
/// [`MAX_FILE_BYTES`].
pub fn read_file(path: &Path) -> Result<Vec<u8>> {
    let meta = std::fs::metadata(path).map_err(|e| Error::io(path, e))?;
    if !meta.is_file() {
        let what = if meta.is_dir() {
            "a folder"
        } else {
            "no regular file"
        };
        return Err(Error::new(ErrorKind::Io, format!("this is {what}"))
            .remedy("Give the path of a height-map file"));
    }
    if meta.len() > MAX_FILE_BYTES {
        return Err(Error::new(
            ErrorKind::Unsupported,
            format!("the file has {} bytes", meta.len()),
        )
        .remedy(format!(
            "Files up to {MAX_FILE_BYTES} bytes are read: crop the scan"
        )));
    }
    std::fs::read(path).map_err(|e| Error::io(path, e))
}

/// The number of pixels. Errors: `Malformed` when a side is 0, `Unsupported` beyond the limit.
pub fn check_size(columns: usize, rows: usize) -> Result<usize> {
    if columns == 0 || rows == 0 {
        return Err(malformed(format!(
            "the header claims {columns} x {rows} pixels, an empty map"
        )));
    }
    match columns.checked_mul(rows) {
        Some(pixels) if pixels <= MAX_PIXELS => Ok(pixels),
        _ => Err(Error::new(
            ErrorKind::Unsupported,
            format!("the header claims {columns} x {rows} pixels"),
        )
        .remedy(format!(
            "Maps of up to {MAX_PIXELS} pixels (16384 x 16384) are read: crop the scan, or export it again if the size is wrong"
        ))),
    }
}

/// Refuses a claim of `needed` decoded bytes that `stored` bytes of file cannot hold.
pub fn check_claim(needed: usize, stored: usize, compressed: bool) -> Result<()> {
    let factor = if compressed { MAX_EXPANSION } else { 1 };
    if needed as u64 > (stored as u64).saturating_mul(factor) {
        return Err(malformed(format!(
            "the header claims {needed} bytes of samples, the file holds {stored} bytes"
        )));
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sizes_at_and_beyond_the_limit() {
        assert_eq!(check_size(16384, 16384).unwrap(), MAX_PIXELS);
        assert_eq!(check_size(1_000_000, 1).unwrap(), 1_000_000);
        for (columns, rows, kind) in [
            (0, 5, ErrorKind::Malformed),
            (16385, 16384, ErrorKind::Unsupported),
            (usize::MAX, 2, ErrorKind::Unsupported),
        ] {
            assert_eq!(check_size(columns, rows).unwrap_err().kind(), kind);
        }
    }

    #[test]
    fn folders_and_missing_files_are_said_plainly() {
        let folder = tempfile::tempdir().unwrap();
        let error = read_file(folder.path()).unwrap_err();
        assert!(error.to_string().contains("folder"), "{error}");
        let error = read_file(&folder.path().join("none.tif")).unwrap_err();
        assert_eq!(error.kind(), ErrorKind::Io);
        assert!(error.to_string().contains("none.tif"), "{error}");
    }
}
