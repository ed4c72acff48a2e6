//! A log as CSV files, one for each table: for a spreadsheet, a script, another eye.
//!
//! Columns are those of `schema.sql`, whose names carry the units; an empty field is NULL. Tables on
//! the sample counter get a `time_utc` column behind it (RFC 3339, microseconds), filled where the
//! run has clock pairs ([`RunClock`]). Three tables are unpacked:
//!
//! * `spectrum`: one line per bin, `frequency_hz` = bin · rate / 2^rung / points;
//! * `spectra`: one line per bin with both modes and the cross density conj(C)·D,
//!   `frequency_hz` = bin · rate / 8^rung / points;
//! * `snippet`: one line per pair, in volts; where a block cannot be decoded or the scale of the run
//!   is not known, the volts stay empty.
//!
//! CSV as in RFC 4180 with `\n` line ends. Nothing is overwritten.

mod unpack;

use crate::log::clock::{RunClock, rfc3339};
use crate::log::{Log, LogError, TABLES};
use rusqlite::types::ValueRef;
use std::collections::BTreeMap;
use std::fs::{self, File, OpenOptions};
use std::io::{self, BufWriter};
use std::path::{Path, PathBuf};

/// Why a log could not be exported.
#[derive(Debug, thiserror::Error)]
pub enum ExportError {
    /// The log could not be read.
    #[error(transparent)]
    Log(#[from] LogError),
    /// There is no such table.
    #[error("could not export {name:?}: there is no such table; try one of {}", TABLES.join(", "))]
    UnknownTable {
        /// What was asked for.
        name: String,
    },
    /// A file is in the way.
    #[error("could not write {}: it exists already; try an empty directory", path.display())]
    Exists {
        /// The file.
        path: PathBuf,
    },
    /// A file could not be written.
    #[error("could not write {}: {source}; try another directory, or free space on this one", path.display())]
    Write {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
}

impl From<rusqlite::Error> for ExportError {
    fn from(error: rusqlite::Error) -> Self {
        Self::Log(error.into())
    }
}

type Sheet = csv::Writer<BufWriter<File>>;

/// Writes `tables` (all when `None`) of `log` into `directory`, which is made if need be, as
/// `<table>.csv`. Returns the files in the order of the schema.
///
/// # Errors
/// When a table is unknown, a file exists already or cannot be written, or the log cannot be read.
/// Files that are complete by then stay; an incomplete one is removed.
pub fn write_tables(
    log: &Log,
    directory: &Path,
    tables: Option<&[String]>,
) -> Result<Vec<PathBuf>, ExportError> {
    if let Some(name) = tables.unwrap_or(&[]).iter().find(|name| !TABLES.contains(&name.as_str())) {
        return Err(ExportError::UnknownTable { name: name.clone() });
    }
    let is_wanted = |table: &&str| tables.is_none_or(|wanted| wanted.iter().any(|name| name == table));
    fs::create_dir_all(directory)
        .map_err(|source| ExportError::Write { path: directory.to_path_buf(), source })?;
    let chosen: Vec<_> = TABLES
        .into_iter()
        .filter(is_wanted)
        .map(|table| (table, directory.join(format!("{table}.csv"))))
        .collect();
    // Told before anything is written.
    if let Some((_, path)) = chosen.iter().find(|(_, path)| path.exists()) {
        return Err(ExportError::Exists { path: path.clone() });
    }
    let clocks = Clocks::load(log)?;
    let mut written = Vec::with_capacity(chosen.len());
    for (table, path) in chosen {
        if let Err(error) = write_file(log, &clocks, table, &path) {
            if !matches!(error, ExportError::Exists { .. }) {
                // Half a table would pass for a whole one; a failure to remove it changes nothing more.
                let _ = fs::remove_file(&path);
            }
            return Err(error);
        }
        written.push(path);
    }
    Ok(written)
}

fn write_file(log: &Log, clocks: &Clocks, table: &str, path: &Path) -> Result<(), ExportError> {
    let failed = |source: io::Error| match source.kind() {
        io::ErrorKind::AlreadyExists => ExportError::Exists { path: path.to_path_buf() },
        _ => ExportError::Write { path: path.to_path_buf(), source },
    };
    let file = OpenOptions::new().write(true).create_new(true).open(path).map_err(failed)?;
    let mut sheet = csv::Writer::from_writer(BufWriter::new(file));
    let rows = match table {
        "spectrum" => unpack::single_spectra(log, clocks, &mut sheet),
        "spectra" => unpack::spectra(log, clocks, &mut sheet),
        "snippet" => unpack::snippets(log, clocks, &mut sheet),
        _ => plain(log, clocks, table, &mut sheet),
    };
    match rows.and_then(|()| Ok(sheet.flush().map_err(csv::Error::from)?)) {
        Ok(()) => Ok(()),
        Err(RowError::Read(error)) => Err(error),
        Err(RowError::Write(error)) => Err(failed(io::Error::from(error))),
    }
}

/// Which side of a copy failed.
enum RowError {
    Read(ExportError),
    Write(csv::Error),
}

impl From<rusqlite::Error> for RowError {
    fn from(error: rusqlite::Error) -> Self {
        Self::Read(error.into())
    }
}

impl From<csv::Error> for RowError {
    fn from(error: csv::Error) -> Self {
        Self::Write(error)
    }
}

/// The clock of each run that has one.
struct Clocks(BTreeMap<i64, RunClock>);

impl Clocks {
    fn load(log: &Log) -> Result<Self, ExportError> {
        let mut statement = log.connection().prepare("SELECT run FROM run")?;
        let runs: Vec<i64> = statement.query_map([], |row| row.get(0))?.collect::<Result<_, _>>()?;
        let mut clocks = BTreeMap::new();
        for run in runs {
            if let Some(clock) = RunClock::load(log, run)? {
                clocks.insert(run, clock);
            }
        }
        Ok(Self(clocks))
    }

    /// RFC 3339 of a sample, or nothing.
    fn text(&self, run: i64, sample: i64) -> String {
        let sample = u64::try_from(sample).unwrap_or(0);
        self.0.get(&run).map(|clock| rfc3339(clock.at(sample).utc_ns)).unwrap_or_default()
    }
}

/// Where the time of a row comes from.
#[derive(Clone, Copy)]
enum TimeFrom {
    Nothing,
    /// Columns of the run and of the sample.
    Sample(usize, usize),
    /// Column of nanoseconds.
    Utc(usize),
}

impl TimeFrom {
    fn find(columns: &[String]) -> Self {
        let find = |name: &str| columns.iter().position(|column| column == name);
        match (find("utc_ns"), find("run"), find("first_sample").or_else(|| find("sample"))) {
            (Some(utc), _, _) => Self::Utc(utc),
            (None, Some(run), Some(sample)) => Self::Sample(run, sample),
            _ => Self::Nothing,
        }
    }

    /// The column it stands behind.
    fn column(self) -> Option<usize> {
        match self {
            Self::Nothing => None,
            Self::Sample(_, sample) => Some(sample),
            Self::Utc(utc) => Some(utc),
        }
    }

    fn text(self, clocks: &Clocks, row: &rusqlite::Row<'_>) -> rusqlite::Result<String> {
        Ok(match self {
            Self::Nothing => String::new(),
            Self::Sample(run, sample) => clocks.text(row.get(run)?, row.get(sample)?),
            Self::Utc(utc) => rfc3339(row.get(utc)?),
        })
    }
}

/// A table as it is, with the time put in.
fn plain(log: &Log, clocks: &Clocks, table: &str, sheet: &mut Sheet) -> Result<(), RowError> {
    // Only names from `TABLES` come here.
    let mut statement = log.connection().prepare(&format!("SELECT * FROM {table}"))?;
    let columns: Vec<String> = statement.column_names().map(str::to_owned).collect();
    let time = TimeFrom::find(&columns);
    for (index, column) in columns.iter().enumerate() {
        sheet.write_field(column)?;
        if time.column() == Some(index) {
            sheet.write_field("time_utc")?;
        }
    }
    sheet.write_record(None::<&[u8]>)?;
    let mut rows = statement.query([])?;
    while let Some(row) = rows.next()? {
        for index in 0..columns.len() {
            match row.get_ref(index)? {
                ValueRef::Null => sheet.write_field("")?,
                ValueRef::Integer(value) => sheet.write_field(value.to_string())?,
                ValueRef::Real(value) => sheet.write_field(value.to_string())?,
                ValueRef::Text(bytes) | ValueRef::Blob(bytes) => sheet.write_field(bytes)?,
            }
            if time.column() == Some(index) {
                sheet.write_field(time.text(clocks, row)?)?;
            }
        }
        sheet.write_record(None::<&[u8]>)?;
    }
    Ok(())
}

#[cfg(test)]
mod tests;
