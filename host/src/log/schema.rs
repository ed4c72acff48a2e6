//! Makes the tables of a new log, tells a log from other files, and reads older ones.
//!
//! A log is written by the run that made it and never again, so an older one stays as it is: what it lacks
//! is put beside it, empty, in the temporary database of the connection that reads it. Queries find
//! one set of tables whatever the version.
//!
//! SQLite's rules for databases in WAL mode on media that may only be read: *Write-Ahead Logging*,
//! "Read-Only Databases", sqlite.org/wal.html.

use super::clock::rfc3339;
use super::file::About;
use super::{APPLICATION_ID, LogError, SCHEMA_VERSION};
use rusqlite::{Connection, OpenFlags, params};
use std::fs;
use std::path::{Path, PathBuf};
use std::time::Duration;

const SCHEMA: &str = include_str!("schema.sql");
const FORMAT: &str = "legwise log";
/// How long opening waits for another program.
const BUSY_WAIT: Duration = Duration::from_secs(2);

/// The line of `schema.sql` behind which stands what each version after the first brought.
const SINCE: [(i32, &str); 2] = [(2, "-- Since schema 2.\n"), (3, "-- Since schema 3.\n")];
/// How many of [`TABLES`] a log of schema 1 has, of schema 2, and so on.
const TABLE_COUNTS: [usize; SCHEMA_VERSION as usize] = [15, 16, 17];

/// The tables of a log, in the order of `schema.sql`.
pub(crate) const TABLES: [&str; 17] = [
    "info",
    "run",
    "settings",
    "clock",
    "summary",
    "excursion",
    "storm",
    "snippet",
    "gap",
    "levels",
    "spectrum",
    "totals",
    "loss",
    "link",
    "note",
    "spectra",
    "rate",
];

/// Tables, versions and `info` of a new log, in one transaction.
pub(super) fn write(connection: &Connection, about: &About) -> Result<(), LogError> {
    let transaction = connection.unchecked_transaction()?;
    transaction.execute_batch(SCHEMA)?;
    transaction.pragma_update(None, "application_id", APPLICATION_ID)?;
    transaction.pragma_update(None, "user_version", SCHEMA_VERSION)?;
    let created = rfc3339(about.created_utc_ns);
    let values = [
        ("format", Some(FORMAT)),
        ("tool_version", Some(about.tool_version.as_str())),
        ("created_utc", Some(created.as_str())),
        ("origin", Some(about.origin.as_text())),
        ("origin_name", Some(about.origin_name.as_str())),
        ("point", about.point.as_deref()),
    ];
    for (key, value) in values {
        if let Some(value) = value {
            transaction.execute("INSERT INTO info (key, value) VALUES (?, ?)", params![key, value])?;
        }
    }
    transaction.commit()?;
    Ok(())
}

/// Opens a file that is there, for writing.
pub(super) fn open_writing(path: &Path) -> Result<Connection, LogError> {
    let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    Connection::open_with_flags(path, flags).map_err(|error| LogError::from_opening(error, path))
}

/// Opens a log for reading and checks that it is one.
pub(super) fn open_reading(path: &Path) -> Result<Connection, LogError> {
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    // The file is looked at through SQLite only: closing another handle on it would drop the locks
    // of a connection in this process (*How To Corrupt An SQLite Database File*, 2.2).
    let connection = match Connection::open_with_flags(path, flags).and_then(touch) {
        Ok(connection) => connection,
        Err(error) if needs_immutable(&error, path) => open_immutable(path)?,
        Err(error) => return Err(LogError::from_opening(error, path)),
    };
    let version = check(&connection, path)?;
    stand_in(&connection, version)?;
    Ok(connection)
}

/// Makes SQLite look into the file, which opening alone does not.
fn touch(connection: Connection) -> rusqlite::Result<Connection> {
    connection.busy_timeout(BUSY_WAIT)?;
    connection.query_row("SELECT count(*) FROM sqlite_schema", [], |_| Ok(()))?;
    Ok(connection)
}

/// Whether the file could be read if only an index could be made beside it.
fn needs_immutable(error: &rusqlite::Error, path: &Path) -> bool {
    use rusqlite::ErrorCode::{CannotOpen, ReadOnly};
    matches!(error.sqlite_error_code(), Some(CannotOpen | ReadOnly))
        && fs::File::open(path).is_ok()
        && path.is_file()
}

/// Reads a file in WAL mode where nothing can be written beside it. Refused when a write-ahead log
/// lies there: its rows would be left out without a word.
fn open_immutable(path: &Path) -> Result<Connection, LogError> {
    let mut wal = path.as_os_str().to_owned();
    wal.push("-wal");
    if fs::metadata(PathBuf::from(wal)).is_ok_and(|file| file.len() > 0) {
        return Err(LogError::ReadOnly);
    }
    let flags =
        OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX | OpenFlags::SQLITE_OPEN_URI;
    Connection::open_with_flags(immutable_uri(path), flags)
        .and_then(touch)
        .map_err(|error| LogError::from_opening(error, path))
}

/// `file:` URI of a path (*Uniform Resource Identifiers*, sqlite.org/uri.html).
fn immutable_uri(path: &Path) -> String {
    let mut uri = String::from("file:");
    let text = path.to_string_lossy();
    let text = if cfg!(windows) { format!("/{}", text.replace('\\', "/")) } else { text.into_owned() };
    for character in text.chars() {
        match character {
            '%' => uri.push_str("%25"),
            '?' => uri.push_str("%3f"),
            '#' => uri.push_str("%23"),
            other => uri.push(other),
        }
    }
    uri.push_str("?immutable=1");
    uri
}

/// Checks that the file is a log this version can read, and whole; its version.
fn check(connection: &Connection, path: &Path) -> Result<i32, LogError> {
    let pragma = |name: &str| connection.pragma_query_value(None, name, |row| row.get::<_, i32>(0));
    if pragma("application_id")? != APPLICATION_ID {
        return Err(LogError::NotALog { path: path.to_path_buf() });
    }
    let found = pragma("user_version")?;
    if found > SCHEMA_VERSION {
        return Err(LogError::NewerSchema { path: path.to_path_buf(), found, known: SCHEMA_VERSION });
    }
    let index = usize::try_from(found).unwrap_or(0).saturating_sub(1);
    let count = TABLE_COUNTS.get(index).copied().unwrap_or(TABLES.len());
    let mut statement =
        connection.prepare("SELECT count(*) FROM sqlite_schema WHERE type = 'table' AND name = ?")?;
    for table in TABLES.into_iter().take(count) {
        if statement.query_row([table], |row| row.get::<_, i64>(0))? != 1 {
            return Err(LogError::Damaged);
        }
    }
    Ok(found)
}

/// Puts the tables that a log of `version` lacks, empty, into the temporary database of the connection.
fn stand_in(connection: &Connection, version: i32) -> Result<(), LogError> {
    for text in added_after(version) {
        connection.execute_batch(&text.replace("CREATE TABLE ", "CREATE TEMP TABLE "))?;
    }
    Ok(())
}

/// What each version after `version` added to the schema.
fn added_after(version: i32) -> impl Iterator<Item = &'static str> {
    SINCE.into_iter().filter(move |(since, _)| *since > version).filter_map(|(since, line)| {
        let (_, added) = SCHEMA.split_once(line)?;
        let next = SINCE.iter().find(|(later, _)| *later == since + 1);
        Some(next.and_then(|(_, line)| added.split_once(line)).map_or(added, |(added, _)| added))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn signs_with_a_meaning_in_uris_are_escaped() {
        if cfg!(unix) {
            let uri = immutable_uri(Path::new("/a b/50%?#.log"));
            assert_eq!(uri, "file:/a b/50%25%3f%23.log?immutable=1");
        }
    }

    #[test]
    fn the_list_of_tables_is_that_of_the_schema() -> Result<(), rusqlite::Error> {
        let connection = Connection::open_in_memory()?;
        connection.execute_batch(SCHEMA)?;
        let mut statement =
            connection.prepare("SELECT name FROM sqlite_schema WHERE type = 'table' ORDER BY rowid")?;
        let names: Vec<String> = statement.query_map([], |row| row.get(0))?.collect::<Result<_, _>>()?;
        assert_eq!(names, TABLES);
        assert_eq!(TABLE_COUNTS.last(), Some(&TABLES.len()));
        Ok(())
    }

    #[test]
    fn what_each_version_added_makes_the_tables_of_the_next() -> Result<(), LogError> {
        for (index, count) in TABLE_COUNTS.into_iter().enumerate() {
            let connection = Connection::open_in_memory()?;
            stand_in(&connection, index as i32 + 1)?;
            let names = "SELECT name FROM sqlite_temp_schema WHERE type = 'table' ORDER BY rowid";
            let mut statement = connection.prepare(names)?;
            let names: Vec<String> = statement.query_map([], |row| row.get(0))?.collect::<Result<_, _>>()?;
            assert_eq!(names, TABLES[count..], "a log of schema {}", index + 1);
        }
        Ok(())
    }
}
