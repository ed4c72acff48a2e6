//! Recordings of two legs: files of sampled pairs, read as a [`PairSource`] and written from one.
//!
//! A recording takes the very same path as a board: this room only turns file content into codes, a
//! sample index and a [`SourceDescription`]. Two formats, both with an optional TOML file beside them
//! ([`Sidecar`]):
//!
//! ```text
//!  name.csv   header naming leg_a_v, leg_b_v (volts) and perhaps time_s    codes are microvolts
//!  name.wav   channel 1 = leg A, channel 2 = leg B, full scale in volts    codes are the samples (integer)
//!                                                                          or microvolts (float)
//! ```
//!
//! Reading streams: memory does not depend on the length. Pairs are numbered from 0; where `time_s`
//! jumps by whole samples the index jumps with it, so that the pipeline sees a gap.

mod clock;
mod csv_header;
mod csv_number;
mod csv_rows;
mod csv_writing;
mod error;
mod file_kind;
mod scale;
mod sidecar;
mod wav_frames;
mod wav_writing;
mod writing;

pub use clock::ClockFault;
pub use csv_header::HeaderFault;
pub use csv_number::CellFault;
pub use error::RecordingError;
pub use sidecar::{PerLeg, Sidecar};
pub use wav_frames::WavFault;
pub use writing::{WavEncoding, WriteOptions, WrittenFormat, WrittenSummary, write};

use csv_rows::CsvRows;
use file_kind::FileKind;
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use scale::Calibration;
use std::fs::File;
use std::io::BufReader;
use std::path::Path;
use wav_frames::WavFrames;

/// Lowest sample rate a recording may have, Hz.
pub const LOWEST_RATE_HZ: f64 = 1.0;
/// Highest sample rate a recording may have, Hz: ten times the fastest the monitor is meant for.
pub const HIGHEST_RATE_HZ: f64 = 100e6;
/// Largest relative difference between two statements of the sample rate that counts as agreement.
pub const RATE_AGREEMENT: f64 = 0.01;
/// Bytes read from the file at once.
const READ_BYTES: usize = 1 << 18;

/// What the user says about a recording. Each value given here wins over the sidecar.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct OpenOptions {
    /// Pairs per second, Hz.
    pub rate_hz: Option<f64>,
    /// Volts of a full-scale WAV sample: 1.0 in a float file, 2^(bits-1) in an integer file. CSV ignores it.
    pub full_scale_v: Option<f64>,
    /// How much later than leg A leg B was sampled, nanoseconds.
    pub skew_ns: Option<i32>,
    /// Lowest and highest voltage the converter could show, volts: a sample there is clipped.
    pub rails_v: Option<(f64, f64)>,
}

/// Where a recording comes from, in words for a report.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Origin {
    /// Name of the file, without its directory.
    pub file_name: String,
    /// What the file is, for example `WAV, 16-bit integer, full scale 12 V`.
    pub format: String,
    /// The sidecar's `origin`, if any.
    pub note: Option<String>,
}

/// An open recording: a source of pairs, numbered from 0.
///
/// An error in the middle is handed out after all pairs before it; after that the source is finished.
#[derive(Debug)]
pub struct Recording {
    description: SourceDescription,
    origin: Origin,
    point: Option<String>,
    receiver: Option<String>,
    reader: Reader,
    bytes_total: u64,
    held_error: Option<RecordingError>,
    is_spent: bool,
}

#[derive(Debug)]
enum Reader {
    Csv(Box<CsvRows>),
    Wav(Box<WavFrames>),
}

/// What one call brought from a file: pairs with consecutive indices, then perhaps an error.
pub(crate) struct Filled {
    pub(crate) first_sample: u64,
    pub(crate) pairs: usize,
    pub(crate) fault: Option<RecordingError>,
}

/// Opens the recording at `path`.
///
/// What the file is shows in its first bytes, not in its name. The start of the file (up to 4096 rows)
/// is read at once, so most bad files are refused here.
///
/// # Errors
/// When the file cannot be read, is no recording, or leaves rate or full scale open; the message says
/// what to try.
pub fn open(path: &Path, options: &OpenOptions) -> Result<Recording, RecordingError> {
    let metadata = std::fs::metadata(path).map_err(|error| RecordingError::from_io(path, error))?;
    if metadata.is_dir() {
        return Err(RecordingError::IsDirectory { path: path.into() });
    }
    let file = File::open(path).map_err(|error| RecordingError::from_io(path, error))?;
    let mut file = BufReader::with_capacity(READ_BYTES / 4, file);
    let kind = FileKind::sniff(path, &mut file)?;
    let sidecar = Sidecar::load(path)?;
    let calibration = Calibration::resolve(path, options, &sidecar)?;
    let (reader, rate_hz, legs, format) = match kind {
        FileKind::Csv { has_quotes } => {
            let (rows, rate_hz) = CsvRows::open(path, file, has_quotes, calibration.rate_hz)?;
            let format = format!("CSV, {}", rows.layout());
            (Reader::Csv(Box::new(rows)), rate_hz, calibration.microvolt_legs(None), format)
        }
        FileKind::Wav => {
            let frames = WavFrames::open(path, file, metadata.len(), &calibration)?;
            let (rate_hz, legs, format) = (frames.rate_hz(), frames.legs(), frames.layout());
            (Reader::Wav(Box::new(frames)), rate_hz, legs, format)
        }
    };
    calibration.check_skew(path, rate_hz)?;
    Ok(Recording {
        description: SourceDescription {
            sample_rate_mhz: (rate_hz * 1e3).round() as u64,
            skew_ns: calibration.skew_ns,
            legs,
        },
        origin: Origin { file_name: file_name(path), format, note: sidecar.origin },
        point: sidecar.point,
        receiver: sidecar.receiver,
        reader,
        bytes_total: metadata.len(),
        held_error: None,
        is_spent: false,
    })
}

impl Recording {
    /// Where the recording comes from.
    pub const fn origin(&self) -> &Origin {
        &self.origin
    }

    /// The point on the bus, from the sidecar.
    pub fn point(&self) -> Option<&str> {
        self.point.as_deref()
    }

    /// The receiver to judge by, from the sidecar.
    pub fn receiver(&self) -> Option<&str> {
        self.receiver.as_deref()
    }

    /// Bytes read so far and bytes in the file; the second is 0 when not known (a pipe).
    pub fn progress(&self) -> (u64, u64) {
        let read = match &self.reader {
            Reader::Csv(rows) => rows.bytes_read(),
            Reader::Wav(frames) => frames.bytes_read(),
        };
        (read, self.bytes_total)
    }

    /// Pairs in the whole recording, where the format says so (WAV).
    pub fn pairs_total(&self) -> Option<u64> {
        match &self.reader {
            Reader::Csv(_) => None,
            Reader::Wav(frames) => Some(frames.pairs_total()),
        }
    }
}

impl PairSource for Recording {
    type Error = RecordingError;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, RecordingError> {
        if let Some(error) = self.held_error.take() {
            self.is_spent = true;
            return Err(error);
        }
        if self.is_spent {
            return Ok(Taken::Finished);
        }
        let room = leg_a.len().min(leg_b.len());
        let (Some(leg_a), Some(leg_b)) = (leg_a.get_mut(..room), leg_b.get_mut(..room)) else {
            return Ok(Taken::Nothing);
        };
        if room == 0 {
            return Ok(Taken::Nothing);
        }
        let filled = match &mut self.reader {
            Reader::Csv(rows) => rows.fill(leg_a, leg_b),
            Reader::Wav(frames) => frames.fill(leg_a, leg_b),
        };
        if filled.pairs > 0 {
            self.held_error = filled.fault;
            return Ok(Taken::Pairs { first_sample: filled.first_sample, pairs: filled.pairs, gap: None });
        }
        self.is_spent = true;
        filled.fault.map_or(Ok(Taken::Finished), Err)
    }
}

fn file_name(path: &Path) -> String {
    path.file_name().unwrap_or(path.as_os_str()).to_string_lossy().into_owned()
}

#[cfg(test)]
mod tests;
