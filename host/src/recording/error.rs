//! Why a recording could not be read or written. Every message names the file and ends with what to try.

use super::{CellFault, ClockFault, HeaderFault, WavFault};
use std::io;
use std::path::{Path, PathBuf};

/// Why a recording could not be read or written.
#[derive(Debug, thiserror::Error)]
pub enum RecordingError {
    /// No such file.
    #[error("could not open {}: there is no such file; try the full path, or list the directory", path.display())]
    NotFound {
        /// The file.
        path: PathBuf,
    },
    /// The file may not be read by this user.
    #[error("could not open {}: permission denied; try a copy, or change the file's permissions", path.display())]
    PermissionDenied {
        /// The file.
        path: PathBuf,
    },
    /// A directory where a file is needed.
    #[error("could not open {}: it is a directory; try a recording inside it", path.display())]
    IsDirectory {
        /// The directory.
        path: PathBuf,
    },
    /// The operating system reports another failure while reading.
    #[error("could not read {}: {source}; try copying the file to a local disk", path.display())]
    Io {
        /// The file.
        path: PathBuf,
        /// What the operating system says.
        source: io::Error,
    },
    /// Nothing in the file.
    #[error("could not read {}: the file is empty; try recording again, or check that the copy finished", path.display())]
    Empty {
        /// The file.
        path: PathBuf,
    },
    /// A database instead of a recording.
    #[error("could not read {} as a recording: it is an SQLite database; if it is a log, try `legwise report`", path.display())]
    LogDatabase {
        /// The file.
        path: PathBuf,
    },
    /// A compressed file or spreadsheet.
    #[error("could not read {} as a recording: it is compressed or a spreadsheet; try unpacking it, or saving it as CSV", path.display())]
    Compressed {
        /// The file.
        path: PathBuf,
    },
    /// Text in an encoding of two bytes per character.
    #[error("could not read {}: the text is UTF-16; try saving it as UTF-8", path.display())]
    Utf16 {
        /// The file.
        path: PathBuf,
    },
    /// Neither text nor WAV.
    #[error("could not read {} as a recording: it is neither text nor WAV; try a CSV file with columns leg_a_v and leg_b_v, or a two-channel WAV file", path.display())]
    Binary {
        /// The file.
        path: PathBuf,
    },
    /// Named like a WAV file without being one.
    #[error("could not read {}: it is named .wav but does not begin with a RIFF header; try exporting it again as WAV (PCM or float, under 4 GiB)", path.display())]
    NotWav {
        /// The file.
        path: PathBuf,
    },
    /// The header line of a CSV file.
    #[error("could not read {}: {fault}", path.display())]
    Header {
        /// The file.
        path: PathBuf,
        /// What is wrong with it.
        fault: HeaderFault,
    },
    /// A header and nothing after it.
    #[error("could not read {}: there is a header but not one row of samples; try recording again, or check that the copy finished", path.display())]
    NoRows {
        /// The file.
        path: PathBuf,
    },
    /// A row with too few or too many fields.
    #[error("could not read {} line {line}: {found} fields where the header names {expected}; try correcting or removing the line", path.display())]
    RaggedRow {
        /// The file.
        path: PathBuf,
        /// The line, counted from 1.
        line: u64,
        /// Fields in the row.
        found: usize,
        /// Fields in the header.
        expected: usize,
    },
    /// A field that is no voltage or no time.
    #[error("could not read {} line {line}, column {column}: {text:?} {fault}", path.display())]
    Cell {
        /// The file.
        path: PathBuf,
        /// The line, counted from 1.
        line: u64,
        /// Name of the column.
        column: &'static str,
        /// The field, cut.
        text: String,
        /// What is wrong with it.
        fault: CellFault,
    },
    /// The CSV reader gave up.
    #[error("could not read {}: {source}; try exporting the file again", path.display())]
    Csv {
        /// The file.
        path: PathBuf,
        /// What the reader says.
        source: csv::Error,
    },
    /// `time_s` does not advance regularly.
    #[error("could not read {} line {line}: {fault}", path.display())]
    Clock {
        /// The file.
        path: PathBuf,
        /// The line, counted from 1.
        line: u64,
        /// What is wrong.
        fault: ClockFault,
    },
    /// No sample rate known.
    #[error("could not read {}: the sample rate is not known; try one of three ways: a time_s column, sample_rate_hz in {}, or --rate HZ", path.display(), sidecar.display())]
    MissingRate {
        /// The file.
        path: PathBuf,
        /// Where the sidecar would be.
        sidecar: PathBuf,
    },
    /// Two statements of the rate that cannot both be true.
    #[error("could not read {}: the rate given is {given_hz} Hz but {found_in} says {found_hz:.6} Hz; try correcting the rate given (--rate or sample_rate_hz), or leaving it out", path.display())]
    RateDisagrees {
        /// The file.
        path: PathBuf,
        /// From the command line or the sidecar, Hz.
        given_hz: f64,
        /// From the file itself, Hz.
        found_hz: f64,
        /// Where in the file.
        found_in: &'static str,
    },
    /// A rate no recording has.
    #[error("could not use a sample rate of {rate_hz} Hz for {}; try a rate from 1 Hz to 100 MHz, in hertz", path.display())]
    RateOutOfRange {
        /// The file.
        path: PathBuf,
        /// The rate, Hz.
        rate_hz: f64,
    },
    /// No full scale known for a WAV file.
    #[error("could not read {}: the voltage of a full-scale sample is not known; try --full-scale VOLTS, or full_scale_v in {}", path.display(), sidecar.display())]
    MissingFullScale {
        /// The file.
        path: PathBuf,
        /// Where the sidecar would be.
        sidecar: PathBuf,
    },
    /// A full scale outside what can be represented.
    #[error("could not use a full scale of {full_scale_v} V for {}; try a value from 0.000001 to {highest_v} V", path.display())]
    FullScaleOutOfRange {
        /// The file.
        path: PathBuf,
        /// The value, volts.
        full_scale_v: f64,
        /// The highest permitted, volts.
        highest_v: f64,
    },
    /// A skew of a sample period or more.
    #[error("could not use a skew of {skew_ns} ns for {}: it must stay below one sample period, {period_ns:.3} ns; try shifting one leg by whole samples first", path.display())]
    SkewTooLarge {
        /// The file.
        path: PathBuf,
        /// The value, nanoseconds.
        skew_ns: i32,
        /// The sample period, nanoseconds.
        period_ns: f64,
    },
    /// Converter rails that are no range.
    #[error("could not use rails of {low_v} V and {high_v} V for {}; try the lower first, both within 1000 V of zero", path.display())]
    RailsOutOfRange {
        /// The file.
        path: PathBuf,
        /// The lower, volts.
        low_v: f64,
        /// The higher, volts.
        high_v: f64,
    },
    /// A WAV file that cannot be used.
    #[error("could not read {}: {fault}", path.display())]
    Wav {
        /// The file.
        path: PathBuf,
        /// What is wrong with it.
        fault: WavFault,
    },
    /// A sidecar that is not valid.
    #[error("could not read the sidecar {}: {}; try the keys sample_rate_hz, full_scale_v, skew_ns, point, receiver, origin, rail_low_v, rail_high_v, gain_uncertainty_percent, offset_uncertainty_v, and the table expected", path.display(), source.to_string().trim_end())]
    Sidecar {
        /// The sidecar.
        path: PathBuf,
        /// What the TOML reader says.
        source: Box<toml::de::Error>,
    },
    /// A sidecar value outside its range.
    #[error("could not use {key} = {value} of the sidecar for {}; try {permitted}", path.display())]
    SidecarValue {
        /// The recording.
        path: PathBuf,
        /// The key.
        key: &'static str,
        /// Its value.
        value: f64,
        /// What is permitted, in words.
        permitted: &'static str,
    },
    /// A name that says neither CSV nor WAV.
    #[error("could not tell which format to write from the name {}; try a name that ends in .csv or .wav", path.display())]
    UnknownFormat {
        /// The file.
        path: PathBuf,
    },
    /// The file exists and may not be replaced.
    #[error("could not write {}: it exists already; try another name, or remove it first", path.display())]
    Exists {
        /// The file.
        path: PathBuf,
    },
    /// A recording is to go into a directory that is not there.
    #[error("could not make {}: there is no such directory; try another one, or make it first", path.display())]
    NoDirectory {
        /// The file.
        path: PathBuf,
    },
    /// The directory may not be written by this user.
    #[error("could not make {}: permission denied; try another directory, or ask its owner for access", path.display())]
    CannotMake {
        /// The file.
        path: PathBuf,
    },
    /// The operating system reports another failure while writing.
    #[error("could not write {}: {source}; try another disk, or a shorter recording", path.display())]
    Writing {
        /// The part file.
        path: PathBuf,
        /// What the operating system says.
        source: io::Error,
    },
    /// No space left; what was written so far stays in the part file.
    #[error("could not finish {}: the disk is full; try freeing space or another disk, and remove the part file", path.display())]
    DiskFull {
        /// The part file.
        path: PathBuf,
    },
    /// A gap in a format that has no time.
    #[error("could not write the gap of {samples} samples before sample {first_sample} to {}: this format has no time; try a CSV file with a time_s column", path.display())]
    GapWithoutTime {
        /// The part file.
        path: PathBuf,
        /// First sample after the gap.
        first_sample: u64,
        /// Its length.
        samples: u64,
    },
    /// More pairs than a WAV file holds.
    #[error("could not write {}: a WAV file ends at 4 GiB, here after {limit_pairs} pairs; try a shorter recording, or a name that ends in .csv", path.display())]
    WavTooLong {
        /// The file.
        path: PathBuf,
        /// Pairs that fit.
        limit_pairs: u64,
    },
    /// The WAV writer gave up.
    #[error("could not write {}: {source}; try a name that ends in .csv", path.display())]
    WavWriting {
        /// The part file.
        path: PathBuf,
        /// What the writer says.
        source: hound::Error,
    },
    /// The sidecar could not be put into words.
    #[error("could not write the sidecar of {}: {source}; try leaving out the expected results", path.display())]
    SidecarWriting {
        /// The recording.
        path: PathBuf,
        /// What the TOML writer says.
        source: toml::ser::Error,
    },
    /// The source of the pairs failed.
    #[error("could not write {}: the source of the samples failed after {pairs} pairs: {detail}; try correcting the source and start again", path.display())]
    Source {
        /// The part file.
        path: PathBuf,
        /// Pairs written before.
        pairs: u64,
        /// What the source says.
        detail: String,
    },
}

impl RecordingError {
    /// Whether it was the writing of a recording that failed, not the reading of one.
    pub const fn is_about_writing(&self) -> bool {
        matches!(
            self,
            Self::Exists { .. }
                | Self::NoDirectory { .. }
                | Self::CannotMake { .. }
                | Self::Writing { .. }
                | Self::DiskFull { .. }
                | Self::GapWithoutTime { .. }
                | Self::WavTooLong { .. }
                | Self::WavWriting { .. }
                | Self::SidecarWriting { .. }
                | Self::Source { .. }
        )
    }

    /// The error for what the operating system says about reading `path`.
    pub fn from_io(path: &Path, source: io::Error) -> Self {
        let path = path.to_path_buf();
        match source.kind() {
            io::ErrorKind::NotFound => Self::NotFound { path },
            io::ErrorKind::PermissionDenied => Self::PermissionDenied { path },
            io::ErrorKind::IsADirectory => Self::IsDirectory { path },
            _ => Self::Io { path, source },
        }
    }

    /// The error for what the operating system says about writing `path`.
    pub(crate) fn from_io_writing(path: &Path, source: io::Error) -> Self {
        let path = path.to_path_buf();
        match source.kind() {
            io::ErrorKind::NotFound | io::ErrorKind::NotADirectory => Self::NoDirectory { path },
            io::ErrorKind::PermissionDenied | io::ErrorKind::ReadOnlyFilesystem => Self::CannotMake { path },
            io::ErrorKind::StorageFull | io::ErrorKind::QuotaExceeded => Self::DiskFull { path },
            _ => Self::Writing { path, source },
        }
    }

    /// The error for what the CSV reader says about `path`.
    pub(crate) fn from_csv(path: &Path, source: csv::Error) -> Self {
        match source.kind() {
            csv::ErrorKind::Io(_) => match source.into_kind() {
                csv::ErrorKind::Io(error) => Self::from_io(path, error),
                _ => Self::Binary { path: path.into() },
            },
            _ => Self::Csv { path: path.into(), source },
        }
    }

    /// The error for what the WAV writer says about `path`.
    pub(crate) fn from_wav_writing(path: &Path, source: hound::Error) -> Self {
        match source {
            hound::Error::IoError(error) => Self::from_io_writing(path, error),
            source => Self::WavWriting { path: path.into(), source },
        }
    }
}
