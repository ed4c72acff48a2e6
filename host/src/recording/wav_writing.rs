//! Pairs to two-channel WAV, in the smallest form that gives the same microvolts back.
//!
//! 16-bit: an unsigned converter code less a centre is a WAV sample, and the full scale is 2^15 times
//! the volts per code. That works when both legs have the same volts per code and the offset of each is
//! a whole number of codes. Whether it holds is not argued but tried, for every code between the rails.

use super::RecordingError;
use super::scale::{MICROVOLT_CODES, integer_scale};
use super::writing::{Blocks, WavEncoding, WrittenFormat, rail_uv};
use hound::{SampleFormat, WavSpec, WavWriter};
use legwise_firmware::source::PairSource;
use legwise_protocol::message::LegScale;
use legwise_protocol::units::Microvolts;
use std::io::{Seek, Write};
use std::path::Path;

/// Largest data chunk: 32-bit lengths, less room for the header.
const MOST_DATA_BYTES: u64 = u32::MAX as u64 - 256;
/// Microvolts up to which every integer is a float.
const EXACT_FLOAT_UV: i32 = 1 << 24;

/// How one source goes into WAV.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum WavPlan {
    /// Codes less the centre of their leg.
    Codes { centre_codes: [i32; 2], full_scale_v: f64 },
    /// Microvolts as integers.
    Microvolts,
    /// Microvolts over the full scale, a power of two.
    Float { full_scale_uv: i32 },
}

impl WavPlan {
    /// The plan for these scales.
    pub(crate) fn choose(legs: &[LegScale; 2], encoding: WavEncoding) -> Self {
        let largest_uv = legs.iter().map(rail_uv).map(|(low, high)| high.max(-low)).max().unwrap_or(0);
        // Twice the rail, so that no reading reaches the full scale and counts as clipped for that.
        let full_scale_uv =
            i32::try_from((largest_uv.unsigned_abs() + 1).next_power_of_two() * 2).unwrap_or(1 << 30);
        let float = Self::Float { full_scale_uv: full_scale_uv.min(1 << 30) };
        match encoding {
            WavEncoding::Float32 => float,
            WavEncoding::Int32 => Self::Microvolts,
            WavEncoding::Auto => Self::codes(legs).unwrap_or(if largest_uv <= EXACT_FLOAT_UV {
                float
            } else {
                Self::Microvolts
            }),
        }
    }

    /// 16-bit codes, if every code between the rails then reads the same microvolts.
    fn codes(legs: &[LegScale; 2]) -> Option<Self> {
        let [a, b] = legs;
        if (a.mantissa, a.shift) != (b.mantissa, b.shift) || a.mantissa <= 0 {
            return None;
        }
        let uv_per_code = f64::from(a.mantissa) / 2_f64.powi(i32::from(a.shift));
        let full_scale_v = uv_per_code * 32_768.0 / 1e6;
        let wav = integer_scale(full_scale_v, 16);
        let centre_codes = legs.map(|leg| (-f64::from(leg.offset_uv) / uv_per_code).round() as i32);
        let fits = |(leg, centre): (&LegScale, i32)| {
            let codes = i64::from(leg.rail_low_code)..=i64::from(leg.rail_high_code);
            let centred = |code: i64| i16::try_from(code - i64::from(centre)).map(i32::from);
            // The ends first: they keep the range below 2^16 codes.
            centred(*codes.start()).is_ok()
                && centred(*codes.end()).is_ok()
                && codes.into_iter().all(|code| {
                    centred(code).is_ok_and(|sample| wav.microvolts(sample) == leg.microvolts(code as i32))
                })
        };
        legs.iter().zip(centre_codes).all(fits).then_some(Self::Codes { centre_codes, full_scale_v })
    }

    /// Volts of a full-scale sample, for the sidecar.
    pub(crate) fn full_scale_v(&self) -> f64 {
        match self {
            Self::Codes { full_scale_v, .. } => *full_scale_v,
            Self::Microvolts => 2_147.483_648,
            Self::Float { full_scale_uv } => f64::from(*full_scale_uv) / 1e6,
        }
    }

    /// The format it makes.
    pub(crate) const fn format(&self) -> WrittenFormat {
        match self {
            Self::Codes { .. } => WrittenFormat::Wav16,
            Self::Microvolts => WrittenFormat::Wav32,
            Self::Float { .. } => WrittenFormat::WavFloat,
        }
    }

    const fn limit_pairs(&self) -> u64 {
        match self {
            Self::Codes { .. } => MOST_DATA_BYTES / 4,
            Self::Microvolts | Self::Float { .. } => MOST_DATA_BYTES / 8,
        }
    }

    /// Refuses more pairs than a WAV file holds.
    pub(crate) fn check_length(&self, path: &Path, pairs: u64) -> Result<(), RecordingError> {
        let limit_pairs = self.limit_pairs();
        if pairs <= limit_pairs {
            return Ok(());
        }
        Err(RecordingError::WavTooLong { path: path.into(), limit_pairs })
    }
}

/// Writes header and frames; returns the largest error in microvolts.
pub(crate) fn write_wav<S: PairSource>(
    output: &mut (impl Write + Seek),
    blocks: &mut Blocks<'_, S>,
    plan: &WavPlan,
) -> Result<u32, RecordingError> {
    let part = blocks.part;
    let refuse = |error| RecordingError::from_wav_writing(part, error);
    let rate_hz = blocks.description.sample_rate_mhz.saturating_add(500) / 1000;
    let sample_rate = u32::try_from(rate_hz).unwrap_or(u32::MAX);
    let (bits_per_sample, sample_format) = match plan {
        WavPlan::Codes { .. } => (16, SampleFormat::Int),
        WavPlan::Microvolts => (32, SampleFormat::Int),
        WavPlan::Float { .. } => (32, SampleFormat::Float),
    };
    let spec = WavSpec { channels: 2, sample_rate, bits_per_sample, sample_format };
    let mut writer = WavWriter::new(output, spec).map_err(refuse)?;
    let legs = blocks.description.legs;
    let mut largest_error_uv = 0;
    while let Some(block) = blocks.next_block()? {
        if block.gap_samples > 0 {
            return Err(RecordingError::GapWithoutTime {
                path: part.into(),
                first_sample: block.first_sample,
                samples: block.gap_samples,
            });
        }
        plan.check_length(part, block.pairs_before + block.leg_a.len() as u64)?;
        let pairs = block.leg_a.iter().zip(block.leg_b).map(|(&a, &b)| [a, b]);
        let error_uv = match *plan {
            WavPlan::Codes { centre_codes, full_scale_v } => {
                write_codes(&mut writer, pairs, &legs, centre_codes, full_scale_v)
            }
            WavPlan::Microvolts => write_microvolts(&mut writer, pairs, &legs),
            WavPlan::Float { full_scale_uv } => write_floats(&mut writer, pairs, &legs, full_scale_uv),
        };
        largest_error_uv = error_uv.map_err(refuse)?.max(largest_error_uv);
    }
    writer.finalize().map_err(refuse)?;
    Ok(largest_error_uv)
}

fn write_codes<W: Write + Seek>(
    writer: &mut WavWriter<W>,
    pairs: impl ExactSizeIterator<Item = [i32; 2]>,
    legs: &[LegScale; 2],
    centre_codes: [i32; 2],
    full_scale_v: f64,
) -> Result<u32, hound::Error> {
    let wav = integer_scale(full_scale_v, 16);
    let mut largest_error_uv = 0;
    let mut samples = writer.get_i16_writer(pairs.len() as u32 * 2);
    for pair in pairs {
        for ((code, centre), leg) in pair.into_iter().zip(centre_codes).zip(legs) {
            let centred = i64::from(code) - i64::from(centre);
            let sample = centred.clamp(i64::from(i16::MIN), i64::from(i16::MAX));
            if sample != centred {
                let error_uv = wav.microvolts(sample as i32).abs_diff(leg.microvolts(code));
                largest_error_uv = error_uv.max(largest_error_uv);
            }
            samples.write_sample(sample as i16);
        }
    }
    samples.flush()?;
    Ok(largest_error_uv)
}

fn write_microvolts<W: Write + Seek>(
    writer: &mut WavWriter<W>,
    pairs: impl Iterator<Item = [i32; 2]>,
    legs: &[LegScale; 2],
) -> Result<u32, hound::Error> {
    for pair in pairs {
        for (code, leg) in pair.into_iter().zip(legs) {
            writer.write_sample(leg.microvolts(code))?;
        }
    }
    Ok(0)
}

fn write_floats<W: Write + Seek>(
    writer: &mut WavWriter<W>,
    pairs: impl Iterator<Item = [i32; 2]>,
    legs: &[LegScale; 2],
    full_scale_uv: i32,
) -> Result<u32, hound::Error> {
    // A power of two: the division is exact, and so is the product in the reader.
    let full_scale = full_scale_uv as f32;
    let mut largest_error_uv = 0;
    for pair in pairs {
        for (code, leg) in pair.into_iter().zip(legs) {
            let microvolts = leg.microvolts(code);
            let float = microvolts as f32;
            let back = (float as i32).clamp(-Microvolts::BOUND, Microvolts::BOUND);
            largest_error_uv = MICROVOLT_CODES.microvolts(back).abs_diff(microvolts).max(largest_error_uv);
            writer.write_sample(float / full_scale)?;
        }
    }
    Ok(largest_error_uv)
}
