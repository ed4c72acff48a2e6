//! What a file is, told from its first bytes.
//!
//! Signatures: RIFF and RIFX, Microsoft/IBM *Multimedia Programming Interface and Data Specifications
//! 1.0*; SQLite, "Database File Format" 1.3; gzip, RFC 1952; ZIP, APPNOTE 4.3.7. The rest from memory.

use super::RecordingError;
use std::io::{BufRead, Read};
use std::path::Path;

/// A file this room can read.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum FileKind {
    /// Text; `has_quotes` when a quotation mark shows up near its start.
    Csv { has_quotes: bool },
    /// RIFF.
    Wav,
}

const COMPRESSED: [&[u8]; 5] = [b"\x1f\x8b", b"PK\x03\x04", b"\x28\xb5\x2f\xfd", b"BZh", b"\xfd7zXZ"];

impl FileKind {
    /// Looks at the start of `file` without consuming it.
    pub(crate) fn sniff<R: Read>(
        path: &Path,
        file: &mut std::io::BufReader<R>,
    ) -> Result<Self, RecordingError> {
        let start = file.fill_buf().map_err(|error| RecordingError::from_io(path, error))?;
        let path_buf = || path.to_path_buf();
        if start.is_empty() {
            return Err(RecordingError::Empty { path: path_buf() });
        }
        if start.starts_with(b"RIFF") {
            return Ok(Self::Wav);
        }
        if start.starts_with(b"SQLite format 3\0") {
            return Err(RecordingError::LogDatabase { path: path_buf() });
        }
        if COMPRESSED.iter().any(|magic| start.starts_with(magic)) {
            return Err(RecordingError::Compressed { path: path_buf() });
        }
        if path.extension().is_some_and(|extension| extension.eq_ignore_ascii_case("wav")) {
            return Err(RecordingError::NotWav { path: path_buf() });
        }
        if start.starts_with(b"\xff\xfe") || start.starts_with(b"\xfe\xff") {
            return Err(RecordingError::Utf16 { path: path_buf() });
        }
        if start.iter().any(|&byte| byte < b' ' && !byte.is_ascii_whitespace()) {
            return Err(RecordingError::Binary { path: path_buf() });
        }
        Ok(Self::Csv { has_quotes: start.contains(&b'"') })
    }
}
