//! What the device says. Enum numbers are wire format: append, never reorder (`WIRE.md` pins them).
//!
//! Suffixes carry the unit: `_uv` microvolts, `_twice_uv` twice the value in microvolts (so that
//! the average of two legs is exact), `_samples` sample pairs, `_mhz` millihertz, `_ns` nanoseconds.

use crate::bytes::Bytes;
use crate::limits::{Limit, LimitMask, LimitSet};
use crate::receivers::ReceiverId;
use crate::units::{Microvolts, Span};
use postcard::experimental::max_size::MaxSize;
use serde::{Deserialize, Serialize};

/// Bytes of snippet blocks or spectrum codes one message carries.
pub const PAYLOAD_BYTES: usize = 384;
/// Bytes of a board's name.
pub const NAME_BYTES: usize = 24;

/// Everything a device sends, behind an [`crate::framing::Envelope`].
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Message {
    /// Who speaks: sent at start and on request.
    Hello(Hello),
    /// What is being watched for, and how: sent at start and after every change.
    Settings(Settings),
    /// One interval of readings.
    Summary(Summary),
    /// A stretch of samples outside a limit.
    Excursion(Excursion),
    /// Excursions too many to report one by one, counted exactly.
    Storm(Storm),
    /// Part of the raw waveform around an excursion.
    Snippet(SnippetPart),
    /// Samples that were not examined.
    Gap(Gap),
    /// Signal levels of one interval.
    Levels(Levels),
    /// Part of one averaged spectrum of one mode. Devices before version 2 send it.
    Spectrum(SpectrumPart),
    /// Counts and extremes since the start.
    Totals(Totals),
    /// Kept messages the device had to give up.
    Loss(Loss),
    /// Answer to a command.
    Reply(Reply),
    /// The source has no more samples, or the host asked to stop.
    End(End),
    /// Part of the averaged spectra of one rung: both modes and their cross density. Since version 2.
    Spectra(SpectraPart),
    /// The source takes pairs at another rate from some pair on. Since version 3.
    Rate(RateChange),
}

/// Who speaks.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Hello {
    /// [`crate::WIRE_VERSION`] of the device.
    pub wire_version: u16,
    /// Firmware version: major, minor, patch.
    pub firmware_version: (u16, u16, u16),
    /// Name of the board, UTF-8.
    pub board: Bytes<NAME_BYTES>,
    /// Serial number of the board; 0 when it has none.
    pub serial: u64,
    /// Why the device started.
    pub reset_cause: ResetCause,
    /// Pairs per second, in millihertz.
    pub sample_rate_mhz: u64,
    /// How much later than leg A leg B is sampled; 0 for simultaneous sampling.
    pub skew_ns: i32,
    /// How codes become volts: leg A, leg B.
    pub legs: [LegScale; 2],
}

/// Why the device started.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum ResetCause {
    /// Not known to the board.
    #[default]
    Unknown,
    /// Power was applied.
    PowerOn,
    /// The reset pin was pulled.
    Pin,
    /// The watchdog bit.
    Watchdog,
    /// The supply fell below its minimum.
    BrownOut,
    /// The program asked for it.
    Software,
}

/// How the codes of one leg become microvolts:
/// `µV = ((code * mantissa + 2^(shift-1)) >> shift) + offset_uv`, in 64-bit arithmetic, then bounded to ±1000 V.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct LegScale {
    /// Microvolts per code times 2^`shift`.
    pub mantissa: i32,
    /// Binary point of `mantissa`, 1..=40.
    pub shift: u8,
    /// Added after scaling.
    pub offset_uv: i32,
    /// A code at or below this is clipped.
    pub rail_low_code: i32,
    /// A code at or above this is clipped.
    pub rail_high_code: i32,
    /// Uncertainty of the gain, parts per million of the reading.
    pub gain_uncertainty_ppm: u32,
    /// Uncertainty of the offset.
    pub offset_uncertainty_uv: u32,
}

impl LegScale {
    /// The microvolts of `code`, by the formula above; a `shift` outside 1..=40 counts as the nearer end.
    ///
    /// Rounds to the nearest microvolt, ties upward; saturates at ±1000 V ([`Microvolts::BOUND`]).
    #[inline]
    pub const fn microvolts(&self, code: i32) -> i32 {
        let shift = match self.shift {
            0 => 1,
            41.. => 40,
            shift => shift as u32,
        };
        // |code * mantissa| <= 2^62 and the half is at most 2^39: the sum stays inside an i64.
        let scaled = (code as i64 * self.mantissa as i64 + (1 << (shift - 1))) >> shift;
        let microvolts = scaled + self.offset_uv as i64;
        let bound = Microvolts::BOUND as i64;
        if microvolts > bound {
            Microvolts::BOUND
        } else if microvolts < -bound {
            -Microvolts::BOUND
        } else {
            microvolts as i32
        }
    }
}

/// What is being watched for, and how.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Settings {
    /// The receiver the limits were taken from.
    pub receiver: ReceiverId,
    /// The windows.
    pub limits: LimitSet,
    /// How excursions are told apart.
    pub detection: Detection,
    /// How often readings are reported.
    pub reporting: Reporting,
}

/// How excursions are told apart and when they are reported one by one.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Detection {
    /// An open excursion closes only when every watched quantity is this far inside its window.
    pub hysteresis_uv: u32,
    /// ... for this many samples in a row (at least 1).
    pub hold_off_samples: u32,
    /// An excursion that lasts longer is reported in parts of this length.
    pub longest_samples: u32,
    /// Length of the storm window.
    pub storm_samples: u32,
    /// Excursions reported one by one in a storm window; the rest are coalesced.
    pub storm_after: u32,
    /// |DM| at or below which the pair counts as not driven.
    pub idle_below_uv: u32,
    /// |DM| step between neighbouring samples from which a data edge is assumed (edge-suspect rule).
    pub edge_step_uv: u32,
}

/// How often readings are reported. All lengths are multiples of the device's block.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Reporting {
    /// Pairs per [`Summary`].
    pub summary_samples: u32,
    /// Pairs per [`Levels`] and [`Totals`].
    pub levels_samples: u32,
    /// Segments of the full rate that go by, averaged or passed over, until its average is sent; 0 turns
    /// spectra off.
    pub spectrum_segments: u32,
    /// Segments skipped after each one transformed (0 = every segment at 50 % overlap).
    pub spectrum_skip: u16,
    /// Pairs kept from before an excursion.
    pub snippet_before: u16,
    /// Pairs kept from the start of an excursion onwards; 0 turns snippets off.
    pub snippet_after: u16,
    /// Snippets per storm window at most.
    pub snippets_per_window: u16,
}

/// One interval of readings. Spans are inclusive extremes; all are empty when `samples` is 0.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Summary {
    /// First pair of the interval.
    pub first_sample: u64,
    /// Pairs examined.
    pub samples: u32,
    /// Leg A, microvolts.
    pub leg_a: Span,
    /// Leg B, microvolts.
    pub leg_b: Span,
    /// Twice the common mode (VA+VB), microvolts; data edges are left out where a skew is declared.
    pub twice_cm: Span,
    /// Differential mode, microvolts.
    pub dm: Span,
    /// Mean of twice the common mode, microvolts, rounded toward negative infinity.
    pub twice_cm_mean_uv: i32,
    /// Pairs with a leg at its converter's rail.
    pub clipped: u32,
    /// Pairs with any limit strictly breached.
    pub outside: u32,
    /// Excursions that began in the interval.
    pub excursions: u32,
    /// Whether the alarm is on at the end of the interval.
    pub alarm: bool,
}

/// Which part of an excursion a record holds.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Part {
    /// All of it.
    #[default]
    Whole,
    /// Its beginning; more follows.
    Begin,
    /// A middle part.
    Middle,
    /// Its end.
    Finish,
}

/// A stretch of samples outside a limit: from the first sample outside to the last.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Excursion {
    /// Number since the start, from 1. Parts of one excursion share it.
    pub number: u64,
    /// First sample outside (of this part).
    pub first_sample: u64,
    /// Length of the stretch, first to last sample outside, both included.
    pub samples: u32,
    /// What happened within it.
    pub breach: Breach,
    /// Which part this is.
    pub part: Part,
    /// One-sample peak of the average that coincides with a data edge, on a board with skew.
    pub is_edge_suspect: bool,
    /// Ended by a gap, a restart or the end of the recording rather than by coming back inside.
    pub is_cut: bool,
}

/// What happened while outside; the same for one excursion and for a storm of them.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Breach {
    /// Every limit broken.
    pub limits: LimitMask,
    /// The limit broken by most.
    pub worst_limit: Limit,
    /// Twice the voltage furthest outside (of the leg, or of the average), microvolts.
    pub extreme_twice_uv: i32,
    /// Its sample.
    pub extreme_sample: u64,
    /// Samples strictly outside any limit.
    pub outside_samples: u64,
    /// Sum over those samples of twice the distance outside the limit broken by most:
    /// divide by 2e6 and by the sample rate for volt-seconds.
    pub area_twice_uv_samples: u64,
    /// Differential mode meanwhile, microvolts.
    pub dm: Span,
    /// Samples at a converter rail meanwhile: the true extreme may be larger.
    pub clipped_samples: u64,
}

/// Excursions of one storm window beyond those reported one by one.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Storm {
    /// How many excursions are in here.
    pub excursions: u32,
    /// How many of them are edge suspects.
    pub edge_suspects: u32,
    /// First sample outside of the first.
    pub first_sample: u64,
    /// From there to the last sample outside of the last, both included.
    pub samples: u64,
    /// All of them together.
    pub breach: Breach,
}

/// Part of the raw waveform around an excursion. Parts of one snippet are numbered from 0 and hold
/// whole [`crate::snippet`] blocks, so each can be decoded on its own.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SnippetPart {
    /// Excursion that triggered it.
    pub excursion: u64,
    /// First pair in this part.
    pub first_sample: u64,
    /// Pairs in this part.
    pub samples: u16,
    /// Number of this part.
    pub part: u8,
    /// Whether more parts follow.
    pub more: bool,
    /// Encoded blocks.
    pub blocks: Bytes<PAYLOAD_BYTES>,
}

/// Why samples are missing.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum GapCause {
    /// The sampler produced faster than they were taken away.
    Overrun,
    /// The source skipped them and does not know why.
    Skipped,
    /// The host stopped and started the monitor.
    Stopped,
    /// The channel order had to be found again.
    Resynchronised,
}

/// Samples that were not examined.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Gap {
    /// First missing pair.
    pub first_sample: u64,
    /// How many are missing; 0 when the source knows only that some are.
    pub samples: u64,
    /// Why.
    pub cause: GapCause,
}

/// One level of the differential mode and how much of the interval was spent there.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Level {
    /// Differential mode, microvolts.
    pub dm_uv: i32,
    /// Pairs within two histogram bins of it.
    pub samples: u32,
}

/// Signal levels of one interval: three states, because a bus rests between driven levels.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Levels {
    /// First pair of the interval.
    pub first_sample: u64,
    /// Pairs examined.
    pub samples: u32,
    /// Resting level.
    pub idle: Option<Level>,
    /// Level while driven high (VA above VB).
    pub driven_high: Option<Level>,
    /// Level while driven low.
    pub driven_low: Option<Level>,
    /// Pairs between 0.3 and 0.7 of the driven level of their sign, the resting level left out.
    pub mid_samples: u32,
    /// Settled pairs not driven, and the sum of their VA+VB.
    pub idle_cm: Plateau,
    /// Settled pairs driven high.
    pub high_cm: Plateau,
    /// Settled pairs driven low.
    pub low_cm: Plateau,
}

/// The common mode while the pair stays in one state.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Plateau {
    /// Settled pairs in that state (the pair before was in it too).
    pub samples: u32,
    /// Mean of VA+VB over them, microvolts, rounded toward negative infinity.
    pub twice_cm_uv: i32,
}

/// Which signal a spectrum is of.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Mode {
    /// (VA+VB)/2.
    Common,
    /// VA−VB.
    Differential,
}

/// Part of one averaged spectrum: one-sided power spectral density in V²/Hz, Hann window (periodic),
/// mean removed per segment, 50 % overlap unless segments were skipped.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SpectrumPart {
    /// First pair of the first segment.
    pub first_sample: u64,
    /// From there to the last pair of the last segment.
    pub span_samples: u64,
    /// Which signal.
    pub mode: Mode,
    /// Rung of the decimation ladder: 0 is the full rate.
    pub rung: u8,
    /// Points per segment; the spectrum has `points / 2 + 1` bins from 0 Hz to half the rate.
    pub points: u16,
    /// Segments averaged.
    pub segments: u32,
    /// Segments passed over meanwhile.
    pub skipped: u32,
    /// Bin of the first code.
    pub first_bin: u16,
    /// [`crate::power`] codes, two bytes each, little-endian.
    pub codes: Bytes<PAYLOAD_BYTES>,
}

/// Which segments an average holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum SegmentSet {
    /// DM at rest from the first to the last sample of the segment.
    Idle,
    /// DM moved.
    Driven,
}

/// From pair `first_sample` on pairs are taken at another rate, until the next change. The index goes on:
/// it counts pairs, not time.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct RateChange {
    /// The first pair at the new rate.
    pub first_sample: u64,
    /// Pairs per second, in millihertz.
    pub sample_rate_mhz: u64,
}

/// Part of the averaged spectra of one rung of the decimation ladder and one set of segments.
///
/// One-sided densities in V²/Hz of CM and DM and their cross density `conj(C)·D`; Hann window
/// (periodic), mean removed per segment. Segments follow each other with 50 % overlap unless `skipped`
/// is above 0. The rate of rung k is the sample rate / 8^k.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct SpectraPart {
    /// First pair of the first segment, at the full rate.
    pub first_sample: u64,
    /// From there to the last pair of the last segment, at the full rate.
    pub span_samples: u64,
    /// Which segments.
    pub set: SegmentSet,
    /// Rung of the decimation ladder: 0 is the full rate.
    pub rung: u8,
    /// Points per segment: bins are the rung's rate / `points` apart.
    pub points: u16,
    /// Segments averaged.
    pub segments: u32,
    /// Segments passed over meanwhile to save time.
    pub skipped: u32,
    /// Segments passed over meanwhile because they belong to the other set.
    pub other: u32,
    /// First bin that the whole holds; bin 0 is 0 Hz.
    pub from_bin: u16,
    /// Bins that the whole holds, over all its parts.
    pub bins: u16,
    /// Bin of the first code of this part.
    pub first_bin: u16,
    /// [`crate::cross`] bins, seven bytes each.
    pub codes: Bytes<PAYLOAD_BYTES>,
}

/// A value and the sample at which it was first reached.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Moment {
    /// The value, in the unit of the quantity.
    pub value: i32,
    /// Its sample.
    pub sample: u64,
}

/// Lowest and highest value since the start, with their moments.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Extremes {
    /// The lowest.
    pub low: Moment,
    /// The highest.
    pub high: Moment,
}

impl Extremes {
    /// Nothing seen yet: `low.value > high.value`.
    pub const EMPTY: Self =
        Self { low: Moment { value: i32::MAX, sample: 0 }, high: Moment { value: i32::MIN, sample: 0 } };

    /// Whether nothing has been seen.
    pub const fn is_empty(&self) -> bool {
        self.low.value > self.high.value
    }
}

impl Default for Extremes {
    fn default() -> Self {
        Self::EMPTY
    }
}

/// Counts and extremes since the start. The last one received is the whole account.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Totals {
    /// First pair that was examined.
    pub first_sample: u64,
    /// Pairs examined.
    pub samples: u64,
    /// Pairs with a leg at its converter's rail.
    pub clipped: u64,
    /// Pairs with any limit strictly breached.
    pub outside: u64,
    /// The same for each limit on its own, in bit order of [`LimitMask`].
    pub outside_by_limit: [u64; Limit::COUNT],
    /// Excursions, edge suspects left out.
    pub excursions: u64,
    /// Edge suspects.
    pub edge_suspects: u64,
    /// Gaps.
    pub gaps: u64,
    /// Pairs known to be missing.
    pub gap_samples: u64,
    /// Leg A, microvolts.
    pub leg_a: Extremes,
    /// Leg B, microvolts.
    pub leg_b: Extremes,
    /// VA+VB, microvolts; data edges are left out where a skew is declared.
    pub twice_cm: Extremes,
    /// Differential mode, microvolts.
    pub dm: Extremes,
}

/// Kept messages the device had to give up because its outbox was full. Counts since the start.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Loss {
    /// Snippet parts.
    pub snippet_parts: u32,
    /// Other kept messages; their samples stay in [`Totals`].
    pub records: u32,
}

/// Answer to a command.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Reply {
    /// Sequence number of the command.
    pub to: u32,
    /// What became of it.
    pub outcome: Outcome,
}

/// What became of a command.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum Outcome {
    /// Done.
    Done,
    /// A value is out of its range; nothing was changed.
    OutOfRange,
    /// This device cannot do it.
    Unsupported,
}

/// Why the stream ends.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub enum EndCause {
    /// The source has no more samples.
    SourceExhausted,
    /// The host asked.
    Stopped,
}

/// The last message of a run: everything before it has been said.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize, MaxSize)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct End {
    /// Why.
    pub cause: EndCause,
    /// The whole account.
    pub totals: Totals,
}

impl Message {
    /// Whether the message must not get lost: it is numbered and held until acknowledged.
    pub const fn is_kept(&self) -> bool {
        match self {
            Self::Settings(_)
            | Self::Excursion(_)
            | Self::Storm(_)
            | Self::Snippet(_)
            | Self::Gap(_)
            | Self::Loss(_)
            | Self::Rate(_)
            | Self::End(_) => true,
            Self::Hello(_)
            | Self::Summary(_)
            | Self::Levels(_)
            | Self::Spectrum(_)
            | Self::Totals(_)
            | Self::Reply(_)
            | Self::Spectra(_) => false,
        }
    }
}
