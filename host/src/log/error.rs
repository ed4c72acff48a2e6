//! What can go wrong with a log, and what to try.
//!
//! SQLite's result codes: *Result and Error Codes*, sqlite.org/rescode.html. A full disk shows as
//! `SQLITE_FULL` from the database and its write-ahead log, but as an I/O error from the shared
//! index and from quotas.

use rusqlite::ffi;
use std::io;
use std::path::{Path, PathBuf};

/// Why a log could not be made, opened, read or written.
#[derive(Debug, thiserror::Error)]
pub enum LogError {
    /// The file is something else.
    #[error(
        "could not open {}: it is not a Legwise log; try a file written by `legwise log` or `legwise demo`",
        path.display()
    )]
    NotALog {
        /// The file.
        path: PathBuf,
    },
    /// The file was written by a newer version.
    #[error(
        "could not open {}: it has schema {found}, this version knows up to {known}; try a newer Legwise",
        path.display()
    )]
    NewerSchema {
        /// The file.
        path: PathBuf,
        /// Its schema version.
        found: i32,
        /// The newest schema this version reads.
        known: i32,
    },
    /// There is no such file.
    #[error("could not find {}; try checking its spelling", path.display())]
    Missing {
        /// What was looked for.
        path: PathBuf,
    },
    /// The file may not be read.
    #[error(
        "could not read {}: permission denied; try a copy, or ask its owner for access",
        path.display()
    )]
    PermissionDenied {
        /// The file.
        path: PathBuf,
    },
    /// A new log cannot be made there.
    #[error(
        "could not make {}: the directory may not be written; try another one, or ask its owner for access",
        path.display()
    )]
    CannotMake {
        /// The file.
        path: PathBuf,
    },
    /// A new log is to go into a directory that is not there.
    #[error("could not make {}: there is no such directory; try another one, or make it first", path.display())]
    NoDirectory {
        /// The file.
        path: PathBuf,
    },
    /// A new log would overwrite something.
    #[error("could not make {}: it exists already; try another name, or move it away first", path.display())]
    Exists {
        /// The file.
        path: PathBuf,
    },
    /// No room, or the medium refuses writes.
    #[error(
        "could not write to the log: the disk is full or refuses writes; try freeing space or plugging \
         the medium back in (nothing stored so far is lost, waiting messages are stored as soon as there is room)"
    )]
    DiskFull,
    /// Another program holds the log.
    #[error("could not use the log: another program is writing to it; try again when it has finished")]
    Busy,
    /// The file is a log, but broken.
    #[error(
        "could not read the log: the file is damaged; try a copy, or `.recover` of the sqlite3 command-line tool"
    )]
    Damaged,
    /// The log or its medium may only be read.
    #[error(
        "could not use the log: it may only be read here; try copying it and any -wal file beside it to a writable directory"
    )]
    ReadOnly,
    /// More kept messages wait for room on the disk than memory may hold.
    #[error(
        "could not hold more than {frames} waiting messages; try freeing space on the disk (the device keeps the rest and sends them again)"
    )]
    TooManyWaiting {
        /// Messages waiting.
        frames: usize,
    },
    /// The operating system refused.
    #[error("could not use {}: {source}; try another file or directory", path.display())]
    Io {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// Anything else SQLite reports.
    #[error("could not use the log: {0}; try again with another file")]
    Other(#[source] rusqlite::Error),
}

impl LogError {
    /// Whether it is about making or filling a log, rather than about one that is to be read.
    pub fn is_about_storing(&self) -> bool {
        match self {
            Self::CannotMake { .. }
            | Self::NoDirectory { .. }
            | Self::Exists { .. }
            | Self::DiskFull
            | Self::Busy
            | Self::TooManyWaiting { .. } => true,
            Self::NotALog { .. }
            | Self::NewerSchema { .. }
            | Self::Missing { .. }
            | Self::PermissionDenied { .. }
            | Self::Damaged
            | Self::ReadOnly
            | Self::Io { .. }
            | Self::Other(_) => false,
        }
    }

    /// The reason why `path` could not be made.
    pub(super) fn from_making(source: io::Error, path: &Path) -> Self {
        let path = path.to_path_buf();
        match source.kind() {
            io::ErrorKind::NotFound | io::ErrorKind::NotADirectory => Self::NoDirectory { path },
            io::ErrorKind::AlreadyExists => Self::Exists { path },
            io::ErrorKind::PermissionDenied | io::ErrorKind::ReadOnlyFilesystem => Self::CannotMake { path },
            io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => Self::DiskFull,
            _ => Self::Io { path, source },
        }
    }

    /// The reason why `path` could not be looked at.
    fn from_io(source: io::Error, path: &Path) -> Self {
        let path = path.to_path_buf();
        match source.kind() {
            io::ErrorKind::NotFound | io::ErrorKind::NotADirectory => Self::Missing { path },
            io::ErrorKind::PermissionDenied => Self::PermissionDenied { path },
            _ => Self::Io { path, source },
        }
    }

    /// The reason behind an SQLite error met while opening `path`.
    pub(crate) fn from_opening(error: rusqlite::Error, path: &Path) -> Self {
        let path = path.to_path_buf();
        if path.is_dir() {
            return Self::NotALog { path };
        }
        match error.sqlite_error_code() {
            Some(rusqlite::ErrorCode::NotADatabase) => Self::NotALog { path },
            Some(rusqlite::ErrorCode::PermissionDenied) => Self::PermissionDenied { path },
            Some(rusqlite::ErrorCode::CannotOpen) => match std::fs::metadata(&path) {
                Err(source) => Self::from_io(source, &path),
                Ok(_) => Self::PermissionDenied { path },
            },
            _ => error.into(),
        }
    }
}

impl From<rusqlite::Error> for LogError {
    fn from(error: rusqlite::Error) -> Self {
        use rusqlite::ErrorCode;
        let Some(code) = error.sqlite_error() else { return Self::Other(error) };
        match code.code {
            ErrorCode::DiskFull => Self::DiskFull,
            ErrorCode::DatabaseBusy | ErrorCode::DatabaseLocked => Self::Busy,
            ErrorCode::DatabaseCorrupt | ErrorCode::NotADatabase => Self::Damaged,
            ErrorCode::ReadOnly => Self::ReadOnly,
            ErrorCode::SystemIoFailure => match code.extended_code {
                ffi::SQLITE_IOERR_WRITE
                | ffi::SQLITE_IOERR_FSYNC
                | ffi::SQLITE_IOERR_DIR_FSYNC
                | ffi::SQLITE_IOERR_TRUNCATE
                | ffi::SQLITE_IOERR_SHMSIZE
                | ffi::SQLITE_IOERR_SHMMAP => Self::DiskFull,
                ffi::SQLITE_IOERR_SHORT_READ | ffi::SQLITE_IOERR_DATA | ffi::SQLITE_IOERR_CORRUPTFS => {
                    Self::Damaged
                }
                _ => Self::Other(error),
            },
            _ => Self::Other(error),
        }
    }
}
