//! The head of a CSV file: byte-order mark, comment lines, and the line that names the columns.
//!
//! The delimiter (comma, semicolon, tab) is the one by which both leg columns are found. A header that
//! stands in a comment line (`# leg_a_v,leg_b_v`, as numeric tools write it) is accepted as well.

use super::RecordingError;
use std::io::{BufRead, BufReader, Read};
use std::path::Path;

/// Name of the column of leg A, volts.
pub(crate) const LEG_A: &str = "leg_a_v";
/// Name of the column of leg B, volts.
pub(crate) const LEG_B: &str = "leg_b_v";
/// Name of the column of time, seconds.
pub(crate) const TIME: &str = "time_s";
/// Longest header line.
const LONGEST_LINE_BYTES: u64 = 1 << 16;
/// Most lines before the header.
const MOST_COMMENT_LINES: u64 = 10_000;
const DELIMITERS: [u8; 3] = [b',', b';', b'\t'];

/// What is wrong with the header line.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum HeaderFault {
    /// Only comments and empty lines.
    #[error(
        "there is no header line; try one that reads leg_a_v,leg_b_v (volts), with one row per sample below it"
    )]
    Missing,
    /// The first line holds numbers.
    #[error(
        "the first line holds numbers instead of column names; try a header line such as leg_a_v,leg_b_v (volts) above it"
    )]
    Numbers,
    /// A line too long for a header.
    #[error("line {line} is longer than any header; try a CSV file with one row per sample")]
    TooLong {
        /// The line, counted from 1.
        line: u64,
    },
    /// A needed column is not there.
    #[error(
        "there is no column {missing}, only {found}; try naming the two columns of volts leg_a_v and leg_b_v, separated by comma, semicolon or tab"
    )]
    NoColumn {
        /// Name of the column.
        missing: &'static str,
        /// Names that are there, cut.
        found: String,
    },
    /// A column is there twice.
    #[error("there are two columns {column}; try renaming one of them")]
    TwoColumns {
        /// Name of the column.
        column: &'static str,
    },
}

/// Where the columns are.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) struct Columns {
    pub(crate) delimiter: u8,
    pub(crate) count: usize,
    pub(crate) leg_a: usize,
    pub(crate) leg_b: usize,
    pub(crate) time: Option<usize>,
}

/// A header that has been read.
#[derive(Debug)]
pub(crate) struct Header {
    pub(crate) columns: Columns,
    /// Lines consumed.
    pub(crate) lines: u64,
    /// Bytes consumed.
    pub(crate) bytes: u64,
    /// A row of data consumed on the way (last of `lines`); empty but for a header in a comment.
    pub(crate) first_row: Vec<u8>,
}

impl Header {
    /// Reads up to and including the header line.
    pub(crate) fn read<R: Read>(path: &Path, file: &mut BufReader<R>) -> Result<Self, RecordingError> {
        let refuse = |fault| RecordingError::Header { path: path.into(), fault };
        let (mut lines, mut bytes) = (0, 0);
        let mut commented: Option<Columns> = None;
        loop {
            let mut line = Vec::new();
            let read = file.by_ref().take(LONGEST_LINE_BYTES).read_until(b'\n', &mut line);
            let read = read.map_err(|error| RecordingError::from_io(path, error))? as u64;
            if read == 0 {
                return Err(refuse(HeaderFault::Missing));
            }
            lines += 1;
            bytes += read;
            if read == LONGEST_LINE_BYTES || lines > MOST_COMMENT_LINES {
                return Err(refuse(HeaderFault::TooLong { line: lines }));
            }
            let text = line.strip_prefix(b"\xef\xbb\xbf").filter(|_| lines == 1).unwrap_or(&line);
            let text = text.trim_ascii();
            if let Some(comment) = text.strip_prefix(b"#") {
                commented = Columns::find(comment).ok().or(commented);
            } else if !text.is_empty() {
                return match (Columns::find(text), commented) {
                    (Ok(columns), _) => Ok(Self { columns, lines, bytes, first_row: Vec::new() }),
                    (Err(HeaderFault::Numbers), Some(columns)) => {
                        Ok(Self { columns, lines, bytes, first_row: line })
                    }
                    (Err(fault), _) => Err(refuse(fault)),
                };
            }
        }
    }
}

impl Columns {
    fn find(line: &[u8]) -> Result<Self, HeaderFault> {
        let layouts = DELIMITERS.map(|delimiter| (delimiter, names(line, delimiter)));
        for (delimiter, names) in &layouts {
            let column = |name| position(names, name);
            let (leg_a, leg_b) = (column(LEG_A)?, column(LEG_B)?);
            if let (Some(leg_a), Some(leg_b)) = (leg_a, leg_b) {
                let time = column(TIME)?;
                return Ok(Self { delimiter: *delimiter, count: names.len(), leg_a, leg_b, time });
            }
        }
        let is_number = |name: &String| {
            let name = name.replace(',', ".");
            name.is_empty() || fast_float2::parse::<f64, _>(name.as_bytes()).is_ok()
        };
        if layouts.iter().any(|(_, names)| names.iter().all(is_number)) {
            return Err(HeaderFault::Numbers);
        }
        let Some((_, names)) = layouts.iter().rev().max_by_key(|(_, names)| names.len()) else {
            return Err(HeaderFault::Missing);
        };
        let missing = if position(names, LEG_A)?.is_none() { LEG_A } else { LEG_B };
        let found = names.join(", ");
        let found = if found.chars().count() > 200 {
            found.chars().take(200).chain("...".chars()).collect()
        } else {
            found
        };
        Err(HeaderFault::NoColumn { missing, found })
    }
}

/// The fields of one line.
fn names(line: &[u8], delimiter: u8) -> Vec<String> {
    let mut reader = csv::ReaderBuilder::new().has_headers(false).delimiter(delimiter).from_reader(line);
    let record = reader.byte_records().next().and_then(Result::ok).unwrap_or_default();
    record.iter().map(|field| String::from_utf8_lossy(field).trim().to_string()).collect()
}

fn position(names: &[String], column: &'static str) -> Result<Option<usize>, HeaderFault> {
    let mut found = (0..).zip(names).filter(|(_, name)| name.eq_ignore_ascii_case(column));
    let first = found.next().map(|(position, _)| position);
    match found.next() {
        Some(_) => Err(HeaderFault::TwoColumns { column }),
        None => Ok(first),
    }
}
