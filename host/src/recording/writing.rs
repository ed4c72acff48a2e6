//! Pairs from any source to a recording with its sidecar.
//!
//! | format | what a reader gets back |
//! |---|---|
//! | CSV | the very microvolts of the source (six decimals of a volt) |
//! | WAV, 16-bit | the very microvolts and codes less a constant; used when that holds for *every* code between the rails |
//! | WAV, float | the very microvolts up to ±16.777216 V (2^24 µV); beyond, the nearest float |
//! | WAV, 32-bit | the very microvolts: one step is one microvolt |
//!
//! A sample at a converter rail comes back at the rail. Data and sidecar grow in part files that take
//! their final names at the end; on an error the part files stay and nothing else is touched.

use super::csv_writing::write_csv;
use super::sidecar::with_suffix;
use super::wav_writing::{WavPlan, write_wav};
use super::{PerLeg, RecordingError, Sidecar};
use legwise_firmware::source::{PairSource, SourceDescription, Taken};
use legwise_protocol::message::LegScale;
use legwise_protocol::units::Microvolts;
use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::{Path, PathBuf};

/// Pairs handed on at once.
const BLOCK_PAIRS: usize = 8192;
/// Bytes gathered before they go to the file.
const WRITE_BYTES: usize = 1 << 18;

/// How to write a recording.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct WriteOptions {
    /// Whether CSV gets a `time_s` column (nanosecond digits). Needed where the source has gaps.
    pub with_time: bool,
    /// How samples are stored in WAV.
    pub wav: WavEncoding,
    /// Pairs the source will deliver, where known: a WAV file too long is then refused at once.
    pub pairs: Option<u64>,
    /// Whether an existing file is replaced.
    pub replace: bool,
    /// Sidecar: the point on the bus.
    pub point: Option<String>,
    /// Sidecar: name of the receiver.
    pub receiver: Option<String>,
    /// Sidecar: where the recording comes from.
    pub origin: Option<String>,
    /// Sidecar: expected results, for tests.
    pub expected: Option<toml::Table>,
}

/// How samples are stored in WAV.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum WavEncoding {
    /// The smallest that loses nothing between the rails: 16-bit, then float, then 32-bit.
    #[default]
    Auto,
    /// 32-bit float.
    Float32,
    /// 32-bit integer, one step per microvolt.
    Int32,
}

/// What was written.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum WrittenFormat {
    /// CSV.
    Csv,
    /// WAV, 16-bit integer.
    Wav16,
    /// WAV, 32-bit integer.
    Wav32,
    /// WAV, 32-bit float.
    WavFloat,
}

/// Account of a recording that was written.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct WrittenSummary {
    /// The recording.
    pub path: PathBuf,
    /// Its sidecar.
    pub sidecar: PathBuf,
    /// Its format.
    pub format: WrittenFormat,
    /// Pairs written.
    pub pairs: u64,
    /// Gaps among them.
    pub gaps: u64,
    /// Samples missing in the gaps.
    pub gap_samples: u64,
    /// Largest difference between a reading of the source and of the recording, microvolts.
    pub largest_error_uv: u32,
    /// Size of the recording, bytes.
    pub bytes: u64,
}

/// Writes all pairs of `source` to `path`, as CSV or WAV by its extension, and the sidecar beside it.
///
/// # Errors
/// When the name tells no format, the file exists and `replace` is off, the pairs do not fit the
/// format, the source fails, or the disk is full.
pub fn write<S: PairSource>(
    path: &Path,
    source: &mut S,
    options: &WriteOptions,
) -> Result<WrittenSummary, RecordingError> {
    let extension = path.extension().map(|extension| extension.to_ascii_lowercase());
    let is_wav = match extension.as_ref().and_then(|extension| extension.to_str()) {
        Some("csv") => false,
        Some("wav") => true,
        _ => return Err(RecordingError::UnknownFormat { path: path.into() }),
    };
    if path.is_dir() {
        return Err(RecordingError::Exists { path: path.into() });
    }
    let sidecar_path = Sidecar::path_of(path);
    if !options.replace
        && let Some(existing) = [path, &sidecar_path].into_iter().find(|path| path.exists())
    {
        return Err(RecordingError::Exists { path: existing.into() });
    }
    let description = source.describe();
    let plan = is_wav.then(|| WavPlan::choose(&description.legs, options.wav));
    if let (Some(plan), Some(pairs)) = (&plan, options.pairs) {
        plan.check_length(path, pairs)?;
    }
    let part = with_suffix(path, ".part");
    let create = File::create(&part).map_err(|error| RecordingError::from_io_writing(&part, error))?;
    let mut output = BufWriter::with_capacity(WRITE_BYTES, create);
    let mut blocks = Blocks::new(source, &part);
    let largest_error_uv = match &plan {
        None => write_csv(&mut output, &mut blocks, options.with_time).map(|()| 0)?,
        Some(plan) => write_wav(&mut output, &mut blocks, plan)?,
    };
    let count = blocks.count;
    let bytes = finish(output, &part)?;
    let sidecar_part = with_suffix(&sidecar_path, ".part");
    let sidecar = describe(&description, plan.as_ref(), options);
    let text =
        sidecar.to_text().map_err(|source| RecordingError::SidecarWriting { path: path.into(), source })?;
    std::fs::write(&sidecar_part, text)
        .map_err(|error| RecordingError::from_io_writing(&sidecar_part, error))?;
    rename(&sidecar_part, &sidecar_path)?;
    rename(&part, path)?;
    Ok(WrittenSummary {
        path: path.into(),
        sidecar: sidecar_path,
        format: plan.as_ref().map_or(WrittenFormat::Csv, WavPlan::format),
        pairs: count.pairs,
        gaps: count.gaps,
        gap_samples: count.gap_samples,
        largest_error_uv,
        bytes,
    })
}

/// Pulls blocks of pairs from a source and counts them.
pub(crate) struct Blocks<'a, S> {
    source: &'a mut S,
    /// The file named in errors.
    pub(crate) part: &'a Path,
    pub(crate) description: SourceDescription,
    leg_a: Vec<i32>,
    leg_b: Vec<i32>,
    count: Count,
}

/// Pairs with consecutive samples.
pub(crate) struct Block<'a> {
    pub(crate) first_sample: u64,
    /// Samples missing before it.
    pub(crate) gap_samples: u64,
    /// Pairs delivered before it.
    pub(crate) pairs_before: u64,
    pub(crate) leg_a: &'a [i32],
    pub(crate) leg_b: &'a [i32],
}

#[derive(Clone, Copy, Default)]
struct Count {
    pairs: u64,
    gaps: u64,
    gap_samples: u64,
    next_sample: Option<u64>,
}

impl<'a, S: PairSource> Blocks<'a, S> {
    pub(crate) fn new(source: &'a mut S, part: &'a Path) -> Self {
        let description = source.describe();
        let (leg_a, leg_b) = (vec![0; BLOCK_PAIRS], vec![0; BLOCK_PAIRS]);
        Self { source, part, description, leg_a, leg_b, count: Count::default() }
    }

    /// The next block; `None` at the end.
    pub(crate) fn next_block(&mut self) -> Result<Option<Block<'_>>, RecordingError> {
        loop {
            let taken = self.source.take(&mut self.leg_a, &mut self.leg_b);
            let taken = taken.map_err(|error| RecordingError::Source {
                path: self.part.into(),
                pairs: self.count.pairs,
                detail: format!("{error:?}"),
            })?;
            let (first_sample, pairs) = match taken {
                Taken::Nothing | Taken::Pairs { pairs: 0, .. } => {
                    std::thread::yield_now();
                    continue;
                }
                Taken::Finished => return Ok(None),
                Taken::Pairs { first_sample, pairs, .. } => (first_sample, pairs),
            };
            let (Some(leg_a), Some(leg_b)) = (self.leg_a.get(..pairs), self.leg_b.get(..pairs)) else {
                return Ok(None);
            };
            let due = self.count.next_sample.unwrap_or(first_sample);
            let gap_samples = first_sample.saturating_sub(due);
            let pairs_before = self.count.pairs;
            self.count.pairs += pairs as u64;
            self.count.gaps += u64::from(gap_samples > 0);
            self.count.gap_samples += gap_samples;
            self.count.next_sample = Some(first_sample.saturating_add(pairs as u64));
            return Ok(Some(Block { first_sample, gap_samples, pairs_before, leg_a, leg_b }));
        }
    }
}

/// Everything to the disk; returns the size.
fn finish(output: BufWriter<File>, part: &Path) -> Result<u64, RecordingError> {
    let refuse = |error| RecordingError::from_io_writing(part, error);
    let mut output = output;
    output.flush().map_err(refuse)?;
    output.get_ref().sync_all().map_err(refuse)?;
    output.get_ref().metadata().map(|metadata| metadata.len()).map_err(refuse)
}

fn rename(from: &Path, to: &Path) -> Result<(), RecordingError> {
    std::fs::rename(from, to).map_err(|error| RecordingError::from_io_writing(to, error))
}

/// The sidecar of what is written.
fn describe(description: &SourceDescription, plan: Option<&WavPlan>, options: &WriteOptions) -> Sidecar {
    let [a, b] = &description.legs;
    let rails = [rail_uv(a), rail_uv(b)];
    let rail = |side: fn((i32, i32)) -> i32| {
        let [a_uv, b_uv] = rails.map(side);
        let is_real = |uv: i32| uv.abs() < Microvolts::BOUND;
        (is_real(a_uv) || is_real(b_uv)).then(|| PerLeg::from_legs([volts(a_uv), volts(b_uv)]))
    };
    let known = |values: [u32; 2], factor: f64| {
        (values != [0, 0]).then(|| PerLeg::from_legs(values.map(|value| f64::from(value) / factor)))
    };
    Sidecar {
        sample_rate_hz: Some(description.sample_rate_mhz as f64 / 1e3),
        full_scale_v: plan.map(WavPlan::full_scale_v),
        skew_ns: (description.skew_ns != 0).then_some(description.skew_ns),
        rail_low_v: rail(|(low, _)| low),
        rail_high_v: rail(|(_, high)| high),
        gain_uncertainty_percent: known([a.gain_uncertainty_ppm, b.gain_uncertainty_ppm], 1e4),
        offset_uncertainty_v: known([a.offset_uncertainty_uv, b.offset_uncertainty_uv], 1e6),
        point: options.point.clone(),
        receiver: options.receiver.clone(),
        origin: options.origin.clone(),
        expected: options.expected.clone(),
    }
}

/// What the rails of a leg read, lower first, in microvolts.
pub(crate) fn rail_uv(scale: &LegScale) -> (i32, i32) {
    let (low, high) = (scale.microvolts(scale.rail_low_code), scale.microvolts(scale.rail_high_code));
    (low.min(high), low.max(high))
}

fn volts(microvolts: i32) -> f64 {
    f64::from(microvolts) / 1e6
}
