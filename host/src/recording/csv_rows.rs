//! The rows of a CSV file as pairs of microvolt codes with their sample index.
//!
//! The first rows are read when the file is opened, to find the sample rate behind `time_s`; they wait
//! in a queue of bounded length. After that one row is read at a time.

use super::clock::{RateEstimate, SampleClock, TextResolution};
use super::csv_header::{Columns, Header, LEG_A, LEG_B, TIME};
use super::csv_number::{microvolts, number};
use super::scale::check_rate;
use super::{CellFault, Filled, RATE_AGREEMENT, READ_BYTES, RecordingError, Sidecar};
use std::collections::VecDeque;
use std::fs::File;
use std::io::{BufReader, Chain, Cursor, Read};
use std::path::{Path, PathBuf};

/// Rows read at once to find the rate.
const FIRST_ROWS: usize = 4096;

type Source = Chain<Cursor<Vec<u8>>, BufReader<File>>;

/// A CSV file, open for reading.
#[derive(Debug)]
pub(crate) struct CsvRows {
    path: PathBuf,
    columns: Columns,
    reader: csv::Reader<Source>,
    record: csv::ByteRecord,
    /// Lines and bytes before what `reader` sees.
    lines_before: u64,
    bytes_before: u64,
    waiting: VecDeque<Row>,
    clock: Option<SampleClock>,
    next_sample: u64,
}

#[derive(Clone, Copy, Debug)]
struct Row {
    sample: u64,
    leg_a_uv: i32,
    leg_b_uv: i32,
}

/// A row as it stands in the file.
struct RawRow {
    line: u64,
    time_s: f64,
    leg_a_uv: i32,
    leg_b_uv: i32,
}

impl CsvRows {
    /// Reads header and first rows; also returns the sample rate in Hz.
    pub(crate) fn open(
        path: &Path,
        mut file: BufReader<File>,
        has_quotes: bool,
        given_rate_hz: Option<f64>,
    ) -> Result<(Self, f64), RecordingError> {
        let header = Header::read(path, &mut file)?;
        let first_row_bytes = header.first_row.len() as u64;
        let reader = csv::ReaderBuilder::new()
            .has_headers(false)
            .flexible(true)
            .delimiter(header.columns.delimiter)
            .quoting(has_quotes)
            .comment(Some(b'#'))
            // A carriage return stays in the last field and is trimmed: lines are counted by line feeds.
            .terminator(csv::Terminator::Any(b'\n'))
            .buffer_capacity(READ_BYTES)
            .from_reader(Cursor::new(header.first_row).chain(file));
        let mut rows = Self {
            path: path.into(),
            columns: header.columns,
            reader,
            record: csv::ByteRecord::new(),
            lines_before: header.lines - u64::from(first_row_bytes > 0),
            bytes_before: header.bytes - first_row_bytes,
            waiting: VecDeque::new(),
            clock: None,
            next_sample: 0,
        };
        let rate_hz = rows.read_first_rows(given_rate_hz)?;
        Ok((rows, rate_hz))
    }

    /// How the file is laid out, in words.
    pub(crate) fn layout(&self) -> &'static str {
        match (self.columns.delimiter, self.columns.time.is_some()) {
            (b',', true) => "comma-separated, with time_s",
            (b',', false) => "comma-separated",
            (b';', true) => "semicolon-separated, with time_s",
            (b';', false) => "semicolon-separated",
            (_, true) => "tab-separated, with time_s",
            (_, false) => "tab-separated",
        }
    }

    /// Bytes taken from the file, rows waiting included.
    pub(crate) fn bytes_read(&self) -> u64 {
        self.bytes_before + self.reader.position().byte()
    }

    /// Writes rows with consecutive samples to the front of both buffers; stops at a gap, a fault, the end.
    pub(crate) fn fill(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Filled {
        let mut filled = Filled { first_sample: 0, pairs: 0, fault: None };
        for (a, b) in leg_a.iter_mut().zip(leg_b) {
            let row = match self.waiting.pop_front().map_or_else(|| self.next_row(), |row| Ok(Some(row))) {
                Ok(Some(row)) => row,
                Ok(None) => break,
                Err(error) => {
                    filled.fault = Some(error);
                    break;
                }
            };
            if filled.pairs == 0 {
                filled.first_sample = row.sample;
            } else if row.sample != filled.first_sample + filled.pairs as u64 {
                self.waiting.push_front(row);
                break;
            }
            (*a, *b) = (row.leg_a_uv, row.leg_b_uv);
            filled.pairs += 1;
        }
        filled
    }

    fn read_first_rows(&mut self, given_rate_hz: Option<f64>) -> Result<f64, RecordingError> {
        let mut rows = Vec::new();
        let mut resolution = TextResolution::default();
        let separator = if self.is_decimal_comma() { b',' } else { b'.' };
        while rows.len() < FIRST_ROWS
            && let Some(row) = self.read_row()?
        {
            if let Some(time) = self.columns.time.and_then(|column| self.record.get(column)) {
                resolution.see(time.trim_ascii(), separator);
            }
            rows.push(row);
        }
        if rows.is_empty() {
            return Err(RecordingError::NoRows { path: self.path.clone() });
        }
        let estimate = match self.columns.time {
            Some(_) => self.estimate_rate(&rows, resolution.unit())?,
            None => None,
        };
        let rate_hz = self.settle_rate(given_rate_hz, estimate.as_ref())?;
        self.clock = estimate.map(|estimate| SampleClock::new(&estimate, given_rate_hz));
        for row in rows {
            let row = self.number_row(row)?;
            self.waiting.push_back(row);
        }
        Ok(rate_hz)
    }

    fn estimate_rate(
        &self,
        rows: &[RawRow],
        resolution_s: f64,
    ) -> Result<Option<RateEstimate>, RecordingError> {
        let times_s: Vec<f64> = rows.iter().map(|row| row.time_s).collect();
        RateEstimate::from_rows(&times_s, resolution_s).map_err(|(row, fault)| RecordingError::Clock {
            path: self.path.clone(),
            line: rows.get(row).map_or(0, |row| row.line),
            fault,
        })
    }

    fn settle_rate(
        &self,
        given_hz: Option<f64>,
        estimate: Option<&RateEstimate>,
    ) -> Result<f64, RecordingError> {
        let path = || self.path.clone();
        match (given_hz, estimate) {
            (Some(given_hz), Some(estimate)) => {
                let found_hz = estimate.rate_hz;
                if (given_hz / found_hz - 1.0).abs() > RATE_AGREEMENT + estimate.uncertainty {
                    return Err(RecordingError::RateDisagrees {
                        path: path(),
                        given_hz,
                        found_hz,
                        found_in: TIME,
                    });
                }
                Ok(given_hz)
            }
            (Some(given_hz), None) => Ok(given_hz),
            (None, Some(estimate)) => check_rate(&self.path, estimate.rate_hz).map(|()| estimate.rate_hz),
            (None, None) => {
                Err(RecordingError::MissingRate { path: path(), sidecar: Sidecar::path_of(&self.path) })
            }
        }
    }

    #[inline]
    fn next_row(&mut self) -> Result<Option<Row>, RecordingError> {
        match self.read_row()? {
            Some(row) => self.number_row(row).map(Some),
            None => Ok(None),
        }
    }

    #[inline]
    fn number_row(&mut self, row: RawRow) -> Result<Row, RecordingError> {
        let sample = match &mut self.clock {
            Some(clock) => clock.index_of(row.time_s).map_err(|fault| RecordingError::Clock {
                path: self.path.clone(),
                line: row.line,
                fault,
            })?,
            None => self.next_sample,
        };
        self.next_sample = sample.saturating_add(1);
        Ok(Row { sample, leg_a_uv: row.leg_a_uv, leg_b_uv: row.leg_b_uv })
    }

    #[inline]
    fn read_row(&mut self) -> Result<Option<RawRow>, RecordingError> {
        loop {
            let line_before = self.reader.position().line();
            let read = self.reader.read_byte_record(&mut self.record);
            if !read.map_err(|error| RecordingError::from_csv(&self.path, error))? {
                return Ok(None);
            }
            let line_after = self.reader.position().line();
            let line = self.lines_before + line_after - u64::from(line_after > line_before);
            if self.record.len() != self.columns.count {
                if self.record.iter().all(|field| field.trim_ascii().is_empty()) && self.record.len() == 1 {
                    continue;
                }
                return Err(RecordingError::RaggedRow {
                    path: self.path.clone(),
                    line,
                    found: self.record.len(),
                    expected: self.columns.count,
                });
            }
            return Ok(Some(RawRow {
                line,
                time_s: match self.columns.time {
                    Some(column) => self.cell(line, column, TIME, number)?,
                    None => 0.0,
                },
                leg_a_uv: self.cell(line, self.columns.leg_a, LEG_A, microvolts)?,
                leg_b_uv: self.cell(line, self.columns.leg_b, LEG_B, microvolts)?,
            }));
        }
    }

    #[inline]
    fn cell<T>(
        &self,
        line: u64,
        column: usize,
        name: &'static str,
        parse: impl Fn(&[u8], bool) -> Result<T, CellFault>,
    ) -> Result<T, RecordingError> {
        let field = self.record.get(column).unwrap_or_default().trim_ascii();
        parse(field, self.is_decimal_comma()).map_err(|fault| RecordingError::Cell {
            path: self.path.clone(),
            line,
            column: name,
            text: String::from_utf8_lossy(field).chars().take(40).collect(),
            fault,
        })
    }

    const fn is_decimal_comma(&self) -> bool {
        self.columns.delimiter != b','
    }
}
