//! The file itself: made, opened, written by transactions, read by reports.
//!
//! WAL and its durability: *Write-Ahead Logging*, sqlite.org/wal.html; `synchronous` NORMAL lets a
//! power cut take the last commits, FULL does not.

use super::pending::{Item, Pending};
use super::store::{Arrival, LinkCounts, State, Stored};
use super::{LogError, PENDING_FRAMES, rows, schema};
use legwise_protocol::framing::{Delivery, DeviceFrame};
use rusqlite::{Connection, OptionalExtension};
use std::collections::BTreeMap;
use std::fs::{self, OpenOptions};
use std::path::Path;
use std::time::Duration;

/// How long a transaction waits for another program before it is put off to the next commit.
const BUSY_WAIT: Duration = Duration::from_millis(500);
/// Prepared statements kept: more than there are in [`rows`].
const STATEMENTS: usize = 48;

/// What a log's readings come from.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Origin {
    /// A monitor on a serial port.
    Serial,
    /// A recording of both legs.
    Recording,
    /// A simulated line.
    Simulated,
}

impl Origin {
    /// The word in `info`.
    pub const fn as_text(self) -> &'static str {
        match self {
            Self::Serial => "serial",
            Self::Recording => "recording",
            Self::Simulated => "simulated",
        }
    }
}

/// What a new log says about itself.
#[derive(Clone, Debug)]
pub struct About {
    /// What the readings come from.
    pub origin: Origin,
    /// Port, recording or scenario.
    pub origin_name: String,
    /// Where on the bus the clip sits, in the user's words.
    pub point: Option<String>,
    /// Version of the tool that writes.
    pub tool_version: String,
    /// When the log was begun, nanoseconds since 1970 UTC.
    pub created_utc_ns: i64,
    /// Whether arrivals tell real time: only then are clock pairs stored and readings dated.
    pub stores_clock: bool,
}

/// A night log, open for writing or for reading.
#[derive(Debug)]
pub struct Log {
    connection: Connection,
    stores_clock: bool,
    is_temporary: bool,
    /// `synchronous` as it stands: FULL or NORMAL.
    is_full_sync: bool,
    is_stalled: bool,
    state: State,
    /// `state` as of the last commit.
    committed: State,
    pending: Pending,
    pending_limit: usize,
    links: BTreeMap<u32, LinkCounts>,
    last_utc_ns: i64,
}

impl Log {
    /// Makes a new log at `path`.
    ///
    /// # Errors
    /// When the file exists, or cannot be made or written.
    pub fn create(path: &Path, about: &About) -> Result<Self, LogError> {
        // Claims the name in one step, so that two programs cannot take it at once.
        let claimed = OpenOptions::new().write(true).create_new(true).open(path);
        claimed.map_err(|error| LogError::from_making(error, path))?;
        let made = Self::prepare_file(path, about);
        if made.is_err() {
            // The file is ours and holds nothing yet; a failure to remove it is of no further harm.
            let _ = fs::remove_file(path);
        }
        made
    }

    fn prepare_file(path: &Path, about: &About) -> Result<Self, LogError> {
        let connection = schema::open_writing(path)?;
        schema::write(&connection, about)?;
        // After the schema: a copy of the file alone is a log from the first moment on.
        connection.pragma_update(None, "journal_mode", "wal")?;
        Self::writing(connection, about, false)
    }

    /// A log in a private temporary file that goes with the last handle; small ones stay in memory.
    ///
    /// # Errors
    /// When the temporary file cannot be written.
    pub fn temporary(about: &About) -> Result<Self, LogError> {
        let connection = Connection::open("")?;
        schema::write(&connection, about)?;
        connection.pragma_update(None, "synchronous", "off")?;
        Self::writing(connection, about, true)
    }

    fn writing(connection: Connection, about: &About, is_temporary: bool) -> Result<Self, LogError> {
        if !is_temporary {
            connection.pragma_update(None, "synchronous", "normal")?;
        }
        let mut log = Self::new(connection)?;
        (log.stores_clock, log.is_temporary) = (about.stores_clock, is_temporary);
        log.last_utc_ns = about.created_utc_ns;
        Ok(log)
    }

    fn new(connection: Connection) -> Result<Self, LogError> {
        connection.busy_timeout(BUSY_WAIT)?;
        connection.set_prepared_statement_cache_capacity(STATEMENTS);
        Ok(Self {
            connection,
            stores_clock: false,
            is_temporary: false,
            is_full_sync: false,
            is_stalled: false,
            state: State::default(),
            committed: State::default(),
            pending: Pending::default(),
            pending_limit: PENDING_FRAMES,
            links: BTreeMap::new(),
            last_utc_ns: 0,
        })
    }

    /// Opens a log for reading, also while another program writes it, also on a medium that may only be read.
    ///
    /// # Errors
    /// When the file is missing, may not be read, is not a log, is damaged or too new.
    pub fn open(path: &Path) -> Result<Self, LogError> {
        Self::new(schema::open_reading(path)?)
    }

    /// For queries. What was stored since the last commit shows here, not to other programs.
    pub fn connection(&self) -> &Connection {
        &self.connection
    }

    /// A value of `info`; `None` when the log does not say.
    ///
    /// # Errors
    /// When the log cannot be read.
    pub fn info(&self, key: &str) -> Result<Option<String>, LogError> {
        let mut statement = self.connection.prepare_cached("SELECT value FROM info WHERE key = ?")?;
        Ok(statement.query_row([key], |row| row.get(0)).optional()?)
    }

    /// Stores one frame in the open transaction; [`Self::commit`] makes it last.
    ///
    /// On an error the frame is not lost: it and all others since the last good commit wait in
    /// memory and are stored by the next commit that can. Only [`LogError::TooManyWaiting`] means
    /// that this frame was refused.
    ///
    /// # Errors
    /// When the log cannot be written.
    pub fn store(&mut self, frame: &DeviceFrame, arrival: Arrival) -> Result<Stored, LogError> {
        self.last_utc_ns = arrival.utc_ns;
        self.hold(Item::Frame(Box::new(frame.clone()), arrival))?;
        if self.is_stalled {
            return Ok(Stored::Waiting);
        }
        let is_kept = frame.envelope.delivery != Delivery::Passing;
        let stored = self
            .begin(is_kept)
            .and_then(|()| self.state.store(&self.connection, frame, arrival, self.stores_clock));
        stored.map_err(|error| self.stall(error))
    }

    /// Puts a remark of the tool or the user into the log.
    ///
    /// # Errors
    /// When the log cannot be written; the note then waits like a frame.
    pub fn note(&mut self, utc_ns: i64, kind: &str, text: &str) -> Result<(), LogError> {
        self.hold(Item::Note { utc_ns, kind: kind.to_owned(), text: text.to_owned() })?;
        if self.is_stalled {
            return Ok(());
        }
        let stored = self.begin(false).and_then(|()| rows::note(&self.connection, utc_ns, kind, text));
        stored.map(|_| ()).map_err(|error| self.stall(error))
    }

    /// [`Self::note`] at the arrival of the last frame (the beginning of the log if there was none).
    ///
    /// # Errors
    /// As [`Self::note`].
    pub fn note_now(&mut self, kind: &str, text: &str) -> Result<(), LogError> {
        self.note(self.last_utc_ns, kind, text)
    }

    /// Sets the account of the link for a boot; written by the next commit.
    pub fn set_link(&mut self, boot_id: u32, counts: LinkCounts) {
        self.links.insert(boot_id, counts);
    }

    /// Writes all that was stored since the last commit, and what waits. Kept messages are on the
    /// disk when this returns.
    ///
    /// # Errors
    /// When the log cannot be written; nothing is lost, the next commit tries again.
    pub fn commit(&mut self) -> Result<(), LogError> {
        self.write_out().map_err(|error| self.stall(error))
    }

    /// Frames and notes that are not committed yet.
    pub fn waiting(&self) -> usize {
        self.pending.len()
    }

    /// Commits, notes spectra that lost a part, and makes the log one plain file that can be copied
    /// or mailed on its own.
    ///
    /// # Errors
    /// When the log cannot be written.
    pub fn finish(&mut self) -> Result<(), LogError> {
        self.commit()?;
        let dropped = self.state.dropped_spectra(true);
        if dropped > 0 {
            let text = format!("{dropped} spectra were dropped because a part was missing");
            self.note_now("spectra", &text)?;
        }
        let closing = self.begin(false).and_then(|()| self.state.finish(&self.connection));
        closing.map_err(|error| self.stall(error))?;
        self.commit()?;
        if !self.is_temporary {
            // Refused while a report reads: then the log stays as it is, which is sound too.
            let _ = self.connection.pragma_update(None, "journal_mode", "delete");
        }
        Ok(())
    }

    /// Takes `item` into memory, making room by a commit if there is none.
    fn hold(&mut self, item: Item) -> Result<(), LogError> {
        let is_full = !self.is_stalled && self.pending.len() >= self.pending_limit;
        let room = if is_full { self.commit() } else { Ok(()) };
        if self.pending.push(item, self.pending_limit) {
            room
        } else {
            Err(LogError::TooManyWaiting { frames: self.pending.len() })
        }
    }

    /// Opens a transaction if there is none. Kept messages need one that is durable when committed:
    /// passing ones stored before are then committed on their own.
    fn begin(&mut self, is_kept: bool) -> rusqlite::Result<()> {
        let needs_sync = is_kept && !self.is_temporary;
        if !self.connection.is_autocommit() {
            if self.is_full_sync || !needs_sync {
                return Ok(());
            }
            self.connection.prepare_cached("COMMIT")?.execute([])?;
            self.committed = self.state.clone();
            // The newest item is the kept one this is done for.
            self.pending.keep_newest();
        }
        if needs_sync != self.is_full_sync {
            self.connection.pragma_update(None, "synchronous", if needs_sync { "full" } else { "normal" })?;
            self.is_full_sync = needs_sync;
        }
        self.connection.prepare_cached("BEGIN IMMEDIATE")?.execute([])?;
        Ok(())
    }

    fn write_out(&mut self) -> rusqlite::Result<()> {
        if self.is_stalled {
            self.begin(true)?;
            for item in self.pending.items() {
                match item {
                    Item::Frame(frame, arrival) => {
                        self.state.store(&self.connection, frame, *arrival, self.stores_clock)?;
                    }
                    Item::Note { utc_ns, kind, text } => {
                        rows::note(&self.connection, *utc_ns, kind, text)?;
                    }
                }
            }
            let given_up = self.pending.given_up();
            if given_up > 0 {
                let text = format!("{given_up} passing messages were given up while nothing could be stored");
                rows::note(&self.connection, self.last_utc_ns, "given up", &text)?;
            }
        }
        if !self.links.is_empty() {
            self.begin(false)?;
            for (&boot_id, counts) in &self.links {
                if let Some(run) = self.state.run_of(boot_id) {
                    rows::link(&self.connection, run, counts)?;
                }
            }
        }
        if !self.connection.is_autocommit() {
            self.connection.prepare_cached("COMMIT")?.execute([])?;
        }
        self.committed = self.state.clone();
        self.pending.clear();
        let state = &self.state;
        self.links.retain(|&boot_id, _| state.run_of(boot_id).is_none());
        self.is_stalled = false;
        Ok(())
    }

    /// Undoes the open transaction in file and memory; its items wait.
    fn stall(&mut self, error: rusqlite::Error) -> LogError {
        if !self.connection.is_autocommit() {
            // SQLite rolls back by itself when the connection cannot even do this.
            let _ = self.connection.execute_batch("ROLLBACK");
        }
        self.state = self.committed.clone();
        self.is_stalled = true;
        error.into()
    }

    /// Lowers the bound of waiting items, so that a test can reach it.
    #[cfg(test)]
    pub(crate) fn limit_pending(&mut self, items: usize) {
        self.pending_limit = items;
    }
}
