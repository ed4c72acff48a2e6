//! A board's own conversion in a file: measured once with both legs tied together, used for every log after.
//!
//! ```toml
//! format = "legwise-board/1"
//! board = "panel monitor"            # as the board names itself
//! serial = "17"                      # left out when it has none
//! sample_rate_hz = 500000.0
//! measured_utc = "2026-03-01T01:00:00Z"
//! tool_version = "0.1.0"
//! segments = 1900                    # at the full rate
//!
//! [[points]]                         # by rising frequency
//! frequency_hz = 50.0
//! real = -0.0049                     # of S_cd/S_cc
//! imaginary = 0.0
//! radius = 0.0001                    # 95 %
//! common_noise_v2_per_hz = 2e-11     # of the board itself
//! ```
//!
//! Unknown keys are refused, so that a misspelt one does not go unnoticed. Measuring: [`tied_legs`].

use crate::log::{Log, LogError};
use crate::report::figures;
use crate::spectrum::conversion::{ConversionFloor, FloorError, FloorPoint};
use serde::{Deserialize, Serialize};
use std::fs::OpenOptions;
use std::io::{self, Write};
use std::path::{Path, PathBuf};

pub mod tied_legs;

/// Name and version of this layout.
pub const FORMAT: &str = "legwise-board/1";
/// Rates that differ by less than this share are one: boards move theirs by a few per cent on purpose.
const SAME_RATE: f64 = 0.05;

/// Why a board file could not be read or written.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum BoardFileError {
    /// It could not be opened or read.
    #[error("could not read the board file {}: {source}; try checking its path", path.display())]
    Read {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// It is something else.
    #[error(
        "could not understand the board file {}: {reason}; try a file written by 'legwise trim'",
        path.display()
    )]
    Content {
        /// The file.
        path: PathBuf,
        /// What is wrong.
        reason: String,
    },
    /// Its points are no measured values.
    #[error("{}: {source}", path.display())]
    Points {
        /// The file.
        path: PathBuf,
        /// What is wrong with them.
        source: FloorError,
    },
    /// It would replace an older one.
    #[error("could not make {}: it exists already; try another name, or move it away first", path.display())]
    Exists {
        /// The file.
        path: PathBuf,
    },
    /// A recording beside it would take it for its own description.
    #[error(
        "could not make {}: a file of this name describes the recording beside it; try another name",
        path.display()
    )]
    IsSidecar {
        /// The file.
        path: PathBuf,
    },
    /// It could not be written.
    #[error("could not write {}: {source}; try another folder", path.display())]
    Write {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: io::Error,
    },
    /// A log could not be asked which board it is of.
    #[error(transparent)]
    Log(#[from] LogError),
}

/// Which board, at which rate, measured when: what a log says of the board that made it.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct BoardFacts {
    /// As the board names itself.
    pub board: Option<String>,
    /// Its number, when it has one.
    pub serial: Option<String>,
    /// Pairs per second.
    pub sample_rate_hz: Option<f64>,
    /// When the log was begun, UTC, RFC 3339.
    pub created_utc: Option<String>,
}

impl BoardFacts {
    /// The facts of the first run of a log.
    ///
    /// # Errors
    /// When the log cannot be read.
    pub fn of(log: &Log) -> Result<Self, LogError> {
        let mut statement = log
            .connection()
            .prepare("SELECT board, serial, sample_rate_mhz FROM run ORDER BY run LIMIT 1")?;
        let mut rows = statement.query([])?;
        let mut facts = Self { created_utc: log.info("created_utc")?, ..Self::default() };
        if let Some(row) = rows.next()? {
            facts.board = row.get(0)?;
            facts.serial = row.get(1)?;
            facts.sample_rate_hz = row.get::<_, Option<i64>>(2)?.map(|rate| rate as f64 / 1000.0);
        }
        Ok(facts)
    }
}

/// A board file.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct BoardFile {
    /// [`FORMAT`].
    pub format: String,
    /// As the board names itself.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub board: Option<String>,
    /// Its number, when it has one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub serial: Option<String>,
    /// Pairs per second.
    pub sample_rate_hz: f64,
    /// When it was measured, UTC, RFC 3339.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub measured_utc: Option<String>,
    /// Version of the tool that wrote it.
    pub tool_version: String,
    /// Segments at the full rate that it was measured with.
    pub segments: u64,
    /// By rising frequency.
    pub points: Vec<FloorPoint>,
}

impl BoardFile {
    /// Reads a file.
    ///
    /// # Errors
    /// When it cannot be read, or is no board file.
    pub fn read(path: &Path) -> Result<Self, BoardFileError> {
        let owned = || path.to_path_buf();
        let bytes = std::fs::read(path).map_err(|source| BoardFileError::Read { path: owned(), source })?;
        let content = |reason: String| BoardFileError::Content { path: owned(), reason };
        let text = String::from_utf8(bytes).map_err(|_| content("it is not text".to_owned()))?;
        let file: Self = toml::from_str(&text).map_err(|error| content(one_line(error.message())))?;
        if file.format != FORMAT {
            return Err(content(format!("its format is \"{}\", not \"{FORMAT}\"", file.format)));
        }
        if !(file.sample_rate_hz > 0.0 && file.sample_rate_hz.is_finite()) {
            return Err(content(format!("a sample rate of {} Hz cannot be", file.sample_rate_hz)));
        }
        file.floor().map_err(|source| BoardFileError::Points { path: owned(), source })?;
        Ok(file)
    }

    /// The conversion in it.
    ///
    /// # Errors
    /// When there are no points, or one that cannot be a measured value.
    pub fn floor(&self) -> Result<ConversionFloor, FloorError> {
        ConversionFloor::new(self.points.clone())
    }

    /// The text of the file.
    ///
    /// # Errors
    /// When a value has no TOML form, which finite numbers and text always have.
    pub fn to_text(&self) -> Result<String, toml::ser::Error> {
        let head =
            "# A board's own conversion, measured with both legs tied together. For `--board` of legwise.\n";
        Ok(format!("{head}{}", toml::to_string(self)?))
    }

    /// Writes a new file.
    ///
    /// # Errors
    /// When it exists, or cannot be written.
    pub fn write(&self, path: &Path) -> Result<(), BoardFileError> {
        let owned = || path.to_path_buf();
        let failed = |source: io::Error| match source.kind() {
            io::ErrorKind::AlreadyExists => BoardFileError::Exists { path: owned() },
            _ => BoardFileError::Write { path: owned(), source },
        };
        let text = self.to_text().map_err(|error| failed(io::Error::other(error)))?;
        let mut file = OpenOptions::new().write(true).create_new(true).open(path).map_err(failed)?;
        file.write_all(text.as_bytes()).map_err(failed)
    }

    /// In what the board of a log differs from that of this file, a sentence each.
    pub fn differences(&self, log: &BoardFacts) -> Vec<String> {
        let mut differences = Vec::new();
        if let Some(rate_hz) = log.sample_rate_hz
            && (rate_hz / self.sample_rate_hz - 1.0).abs() > SAME_RATE
        {
            differences.push(format!(
                "the board file was measured at {}, this log was taken at {}: what a board converts depends on its rate; \
                 try a board file of the same rate",
                figures::pair_rate(self.sample_rate_hz),
                figures::pair_rate(rate_hz)
            ));
        }
        for (what, own, other) in
            [("serial number", &self.serial, &log.serial), ("name", &self.board, &log.board)]
        {
            if let (Some(own), Some(other)) = (own, other)
                && own != other
            {
                differences.push(format!(
                    "the board file is of a board with the {what} \"{own}\", this log of one with \"{other}\": no two boards \
                     convert alike; try the file of that board"
                ));
            }
        }
        differences
    }
}

fn one_line(text: &str) -> String {
    text.split_whitespace().collect::<Vec<_>>().join(" ")
}

#[cfg(test)]
mod tests;
