//! The frames of a two-channel WAV file as pairs of codes: channel 1 is leg A, channel 2 is leg B.
//!
//! Integer samples are the codes. Float samples become microvolts, rounded to the nearest, ties away
//! from zero. The header is taken apart by a WAV library; the frames are converted here, a block at a
//! time, because a call per sample is several times slower than the pipeline behind.

use super::scale::{Calibration, check_rate};
use super::{Filled, RATE_AGREEMENT, RecordingError, Sidecar};
use hound::{SampleFormat, WavReader};
use legwise_protocol::message::LegScale;
use std::fs::File;
use std::io::{BufReader, Read, Seek, SeekFrom};
use std::path::{Path, PathBuf};

/// Frames converted at once.
const BLOCK_FRAMES: usize = 1 << 14;
/// Largest full scale of a float file, volts: its codes are microvolts in an `i32`.
const HIGHEST_FLOAT_FULL_SCALE_V: f64 = 2147.0;

/// What is wrong with a WAV file.
#[derive(Debug, thiserror::Error)]
pub enum WavFault {
    /// The header cannot be used.
    #[error("the WAV header is not usable ({0}); try exporting it again as plain PCM or 32-bit float")]
    Header(#[source] hound::Error),
    /// Not two channels.
    #[error(
        "it has {channels} channel(s) where two are needed, leg A and leg B; try exporting exactly these two as one stereo file"
    )]
    Channels {
        /// Channels in the file.
        channels: u16,
    },
    /// A sample format that is not read.
    #[error(
        "it has {bits}-bit samples in {container_bits}-bit words; try exporting it as 16, 24 or 32-bit PCM or 32-bit float"
    )]
    Depth {
        /// Bits of a sample.
        bits: u16,
        /// Bits of the word that holds it.
        container_bits: u32,
    },
    /// Fewer frames than the header says.
    #[error(
        "the header promises {promised_pairs} pairs but the file ends after {held_pairs}; try copying it again, or repairing the header with an audio editor"
    )]
    Truncated {
        /// Pairs by the header.
        promised_pairs: u64,
        /// Pairs in the file.
        held_pairs: u64,
    },
    /// No frames.
    #[error("it holds not one sample; try recording again, or check that the recording was stopped properly")]
    NoSamples,
    /// A float sample that is no number.
    #[error(
        "sample {pair} of leg {leg} is not a finite number; try exporting the file again without it, or as integer PCM"
    )]
    NotFinite {
        /// Which pair, from 0.
        pair: u64,
        /// `A` or `B`.
        leg: char,
    },
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Coding {
    I16,
    I24,
    I32,
    F32,
}

impl Coding {
    const fn frame_bytes(self) -> usize {
        match self {
            Self::I16 => 4,
            Self::I24 => 6,
            Self::I32 | Self::F32 => 8,
        }
    }

    const fn name(self) -> &'static str {
        match self {
            Self::I16 => "16-bit integer",
            Self::I24 => "24-bit integer",
            Self::I32 => "32-bit integer",
            Self::F32 => "32-bit float",
        }
    }
}

/// A WAV file, open for reading.
#[derive(Debug)]
pub(crate) struct WavFrames {
    path: PathBuf,
    file: BufReader<File>,
    coding: Coding,
    full_scale_v: f64,
    rate_hz: f64,
    legs: [LegScale; 2],
    data_start: u64,
    pairs_total: u64,
    pairs_read: u64,
    block: Vec<u8>,
}

impl WavFrames {
    /// Reads the header. `file_bytes` is the length of the file.
    pub(crate) fn open(
        path: &Path,
        file: BufReader<File>,
        file_bytes: u64,
        calibration: &Calibration,
    ) -> Result<Self, RecordingError> {
        let refuse = |fault| RecordingError::Wav { path: path.into(), fault };
        let refuse_io = |error| RecordingError::from_io(path, error);
        let reader = WavReader::new(file).map_err(|error| refuse(WavFault::Header(error)))?;
        let (spec, words) = (reader.spec(), u64::from(reader.len()));
        let mut file = reader.into_inner();
        let data_start = file.stream_position().map_err(refuse_io)?;
        if spec.channels != 2 {
            return Err(refuse(WavFault::Channels { channels: spec.channels }));
        }
        let data_bytes = data_length(&mut file, data_start).map_err(refuse_io)?;
        if words == 0 {
            return Err(refuse(WavFault::NoSamples));
        }
        let container_bits = (data_bytes / words * 8) as u32;
        let coding = match (spec.sample_format, spec.bits_per_sample, container_bits) {
            (SampleFormat::Int, 16, 16) => Coding::I16,
            (SampleFormat::Int, 24, 24) => Coding::I24,
            (SampleFormat::Int, 32, 32) => Coding::I32,
            (SampleFormat::Float, 32, 32) => Coding::F32,
            (_, bits, _) => return Err(refuse(WavFault::Depth { bits, container_bits })),
        };
        let (promised_pairs, frame_bytes) = (words / 2, coding.frame_bytes() as u64);
        let held_pairs = file_bytes.saturating_sub(data_start) / frame_bytes;
        if held_pairs < promised_pairs {
            return Err(refuse(WavFault::Truncated { promised_pairs, held_pairs }));
        }
        let full_scale_v = calibration.full_scale_v.ok_or_else(|| RecordingError::MissingFullScale {
            path: path.into(),
            sidecar: Sidecar::path_of(path),
        })?;
        Ok(Self {
            path: path.into(),
            file,
            coding,
            full_scale_v,
            rate_hz: settle_rate(path, calibration.rate_hz, f64::from(spec.sample_rate))?,
            legs: scales(path, coding, full_scale_v, calibration)?,
            data_start,
            pairs_total: promised_pairs,
            pairs_read: 0,
            block: vec![0; BLOCK_FRAMES * coding.frame_bytes()],
        })
    }

    pub(crate) const fn rate_hz(&self) -> f64 {
        self.rate_hz
    }

    pub(crate) const fn legs(&self) -> [LegScale; 2] {
        self.legs
    }

    pub(crate) const fn pairs_total(&self) -> u64 {
        self.pairs_total
    }

    /// What the file is, in words.
    pub(crate) fn layout(&self) -> String {
        format!("WAV, {}, full scale {} V", self.coding.name(), self.full_scale_v)
    }

    /// Bytes taken from the file.
    pub(crate) const fn bytes_read(&self) -> u64 {
        self.data_start + self.pairs_read * self.coding.frame_bytes() as u64
    }

    /// Writes the next frames to the front of both buffers, which have the same length.
    pub(crate) fn fill(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Filled {
        let mut filled = Filled { first_sample: self.pairs_read, pairs: 0, fault: None };
        let blocks = leg_a.chunks_mut(BLOCK_FRAMES).zip(leg_b.chunks_mut(BLOCK_FRAMES));
        for (leg_a, leg_b) in blocks {
            let (pairs, fault) = self.fill_block(leg_a, leg_b);
            filled.pairs += pairs;
            filled.fault = fault;
            if filled.fault.is_some() || pairs < leg_a.len() {
                break;
            }
        }
        filled
    }

    fn fill_block(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> (usize, Option<RecordingError>) {
        let left = usize::try_from(self.pairs_total - self.pairs_read).unwrap_or(usize::MAX);
        let pairs = leg_a.len().min(left);
        let Some(bytes) = self.block.get_mut(..pairs * self.coding.frame_bytes()) else {
            return (0, None);
        };
        if let Err(error) = self.file.read_exact(bytes) {
            return (0, Some(self.read_error(error)));
        }
        let legs = leg_a.iter_mut().zip(leg_b.iter_mut());
        match self.coding {
            Coding::I16 => {
                for ((a, b), &[a0, a1, b0, b1]) in legs.zip(bytes.as_chunks().0) {
                    (*a, *b) =
                        (i32::from(i16::from_le_bytes([a0, a1])), i32::from(i16::from_le_bytes([b0, b1])));
                }
            }
            Coding::I24 => {
                for ((a, b), &[a0, a1, a2, b0, b1, b2]) in legs.zip(bytes.as_chunks().0) {
                    // In the upper three bytes, then down again: the sign comes along.
                    *a = i32::from_le_bytes([0, a0, a1, a2]) >> 8;
                    *b = i32::from_le_bytes([0, b0, b1, b2]) >> 8;
                }
            }
            Coding::I32 => {
                for ((a, b), &[a0, a1, a2, a3, b0, b1, b2, b3]) in legs.zip(bytes.as_chunks().0) {
                    (*a, *b) = (i32::from_le_bytes([a0, a1, a2, a3]), i32::from_le_bytes([b0, b1, b2, b3]));
                }
            }
            Coding::F32 => {
                let full_scale_uv = self.full_scale_v * 1e6;
                let mut is_finite = true;
                for ((a, b), &[a0, a1, a2, a3, b0, b1, b2, b3]) in legs.zip(bytes.as_chunks().0) {
                    let (float_a, float_b) =
                        (f32::from_le_bytes([a0, a1, a2, a3]), f32::from_le_bytes([b0, b1, b2, b3]));
                    is_finite &= float_a.is_finite() & float_b.is_finite();
                    *a = rounded_uv(float_a, full_scale_uv);
                    *b = rounded_uv(float_b, full_scale_uv);
                }
                if !is_finite {
                    let (pairs, leg) = first_not_finite(bytes);
                    let fault = WavFault::NotFinite { pair: self.pairs_read + pairs as u64, leg };
                    self.pairs_read += pairs as u64;
                    return (pairs, Some(RecordingError::Wav { path: self.path.clone(), fault }));
                }
            }
        }
        self.pairs_read += pairs as u64;
        (pairs, None)
    }

    fn read_error(&self, error: std::io::Error) -> RecordingError {
        if error.kind() != std::io::ErrorKind::UnexpectedEof {
            return RecordingError::from_io(&self.path, error);
        }
        let fault = WavFault::Truncated { promised_pairs: self.pairs_total, held_pairs: self.pairs_read };
        RecordingError::Wav { path: self.path.clone(), fault }
    }
}

/// Nearest microvolt, ties away from zero; saturates far beyond any full scale.
#[inline]
fn rounded_uv(sample: f32, full_scale_uv: f64) -> i32 {
    let microvolts = f64::from(sample) * full_scale_uv;
    (microvolts + 0.5_f64.copysign(microvolts)) as i32
}

/// Frame and leg of the first float that is no number.
fn first_not_finite(bytes: &[u8]) -> (usize, char) {
    let words = bytes.as_chunks().0.iter();
    let word = words.map(|&word| f32::from_le_bytes(word)).position(|float| !float.is_finite()).unwrap_or(0);
    (word / 2, if word % 2 == 0 { 'A' } else { 'B' })
}

/// The length field of the data chunk: the four bytes before the data.
fn data_length(file: &mut BufReader<File>, data_start: u64) -> std::io::Result<u64> {
    let mut length = [0; 4];
    file.seek(SeekFrom::Start(data_start.saturating_sub(4)))?;
    file.read_exact(&mut length)?;
    Ok(u64::from(u32::from_le_bytes(length)))
}

/// The given rate, finer than the whole hertz of the header, or else the header's.
fn settle_rate(path: &Path, given_hz: Option<f64>, found_hz: f64) -> Result<f64, RecordingError> {
    match given_hz {
        // Half a hertz is the rounding of the header.
        Some(given_hz) if (given_hz - found_hz).abs() > RATE_AGREEMENT * found_hz + 0.5 => {
            let found_in = "the WAV header";
            Err(RecordingError::RateDisagrees { path: path.into(), given_hz, found_hz, found_in })
        }
        Some(given_hz) => Ok(given_hz),
        None => check_rate(path, found_hz).map(|()| found_hz),
    }
}

fn scales(
    path: &Path,
    coding: Coding,
    full_scale_v: f64,
    calibration: &Calibration,
) -> Result<[LegScale; 2], RecordingError> {
    Ok(match coding {
        Coding::I16 => calibration.integer_legs(full_scale_v, 16),
        Coding::I24 => calibration.integer_legs(full_scale_v, 24),
        Coding::I32 => calibration.integer_legs(full_scale_v, 32),
        Coding::F32 if full_scale_v > HIGHEST_FLOAT_FULL_SCALE_V => {
            let highest_v = HIGHEST_FLOAT_FULL_SCALE_V;
            return Err(RecordingError::FullScaleOutOfRange { path: path.into(), full_scale_v, highest_v });
        }
        Coding::F32 => calibration.microvolt_legs(Some((full_scale_v * 1e6).round() as i32)),
    })
}
