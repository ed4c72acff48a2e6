//! The report as data: what [`super::text`] draws and [`super::json`] writes.
//!
//! Every field here is a key of the JSON form; `SCHEMA.md` lists them all and a test compares the
//! two. Units are in the names: `_v` volts, `_s` seconds, `_hz` hertz, `_samples` and `pairs` sample
//! pairs. Optional values are `null` in JSON when they could not be had.

use super::verdict::Verdict;
use serde::Serialize;

mod findings;
mod spectra;

pub use findings::*;
pub use spectra::*;

/// Name and version of this layout.
pub const SCHEMA: &str = "legwise-report/1";

/// A log, judged.
#[derive(Clone, Debug, Serialize)]
pub struct Report {
    /// [`SCHEMA`].
    pub schema: &'static str,
    /// Version of the tool that made the report.
    pub tool_version: &'static str,
    /// The verdict over everything.
    pub verdict: Verdict,
    /// Why, in one sentence.
    pub reason: String,
    /// What was recorded.
    pub recording: Recording,
    /// How much of the time was examined.
    pub coverage: Coverage,
    /// Limits that were judged by.
    pub receiver: ReceiverUsed,
    /// The converter: rails and uncertainty.
    pub converter: Converter,
    /// Worst readings.
    pub worst: Worst,
    /// Margin of each quantity against each limit, in the order of the limits.
    pub margins: Vec<Margin>,
    /// The verdicts per terminal and on the average.
    pub judged: Judged,
    /// Stretches outside a limit.
    pub excursions: Excursions,
    /// Signal levels and what they say about bias and termination.
    pub levels: Levels,
    /// Spectra of both modes, the sources in them, conversion.
    pub spectrum: Spectra,
    /// What could not be seen.
    pub blind: Blind,
    /// What to mind before acting on this report.
    pub cautions: Vec<&'static str>,
}

/// One point in time.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Moment {
    /// Run of the device it belongs to.
    pub run: i64,
    /// Index of the sample pair within the run.
    pub sample: u64,
    /// The moment lies within this many pairs from `sample` on; 1 is exact.
    pub within_samples: u64,
    /// Seconds since the start of sampling in that run; `null` when the sample rate is unknown.
    pub seconds: Option<f64>,
    /// UTC, RFC 3339; `null` when the run has no clock.
    pub utc: Option<String>,
    /// Local time with its offset, RFC 3339; `null` when the run has no clock.
    pub local: Option<String>,
    /// Uncertainty of `utc` and `local` in seconds.
    pub uncertainty_s: Option<f64>,
}

/// What was recorded.
#[derive(Clone, Debug, Serialize)]
pub struct Recording {
    /// `serial`, `recording` or `simulated`.
    pub origin: Option<String>,
    /// Port, file or scenario.
    pub origin_name: Option<String>,
    /// Where on the bus the clip was, as the user named it.
    pub point: Option<String>,
    /// When the log was begun, UTC, RFC 3339.
    pub created_utc: Option<String>,
    /// Sample pairs examined.
    pub pairs: u64,
    /// Pairs per second (of the first run, if they differ).
    pub sample_rate_hz: Option<f64>,
    /// Seconds examined.
    pub duration_s: Option<f64>,
    /// Pairs with a leg at its converter's rail.
    pub clipped_samples: u64,
    /// Largest declared skew between the legs, ns; 0 for simultaneous sampling.
    pub skew_ns: i64,
    /// Whether every run said its last word; `false` for a log still growing or cut off.
    pub is_complete: bool,
    /// First pair examined.
    pub started: Option<Moment>,
    /// Last pair known of.
    pub ended: Option<Moment>,
    /// The starts of the device that make up the log.
    pub runs: Vec<RunPart>,
}

/// One start of the device.
#[derive(Clone, Debug, Serialize)]
pub struct RunPart {
    /// Number of the run in the log.
    pub run: i64,
    /// Drawn by the device at each start.
    pub boot_id: i64,
    /// Name of the board.
    pub board: Option<String>,
    /// Firmware version.
    pub firmware_version: Option<String>,
    /// Why the device started.
    pub reset_cause: Option<String>,
    /// Pairs examined in it.
    pub pairs: u64,
    /// Pairs per second.
    pub sample_rate_hz: Option<f64>,
    /// How it ended: `exhausted`, `stopped`, or `null` when the end was not seen.
    pub end_cause: Option<String>,
}

/// How much of the time was examined.
#[derive(Clone, Debug, Serialize)]
pub struct Coverage {
    /// Examined / (examined + lost), 0..1; `null` when nothing was recorded.
    pub share: Option<f64>,
    /// Intervals that were lost.
    pub gap_count: u64,
    /// Pairs known to be missing.
    pub gap_samples: u64,
    /// Seconds known to be missing, those between runs included.
    pub gap_s: Option<f64>,
    /// Gaps whose length nobody knows: the true coverage is smaller.
    pub gaps_of_unknown_length: u64,
    /// The gaps in time order.
    pub gaps: Vec<GapPart>,
    /// Whether more gaps exist than are listed.
    pub gaps_truncated: bool,
    /// What the link did, all runs together.
    pub link: LinkAccount,
    /// Kept messages the device had to give up.
    pub given_up: GivenUp,
}

/// Samples that were not examined.
#[derive(Clone, Debug, Serialize)]
pub struct GapPart {
    /// First missing pair.
    pub moment: Moment,
    /// Missing pairs; 0 when not known.
    pub samples: u64,
    /// Its length in seconds; `null` when not known.
    pub length_s: Option<f64>,
    /// `overrun`, `skipped`, `stopped`, `resynchronised`, or `restart` between two runs.
    pub cause: String,
}

/// What the link did.
#[derive(Clone, Copy, Debug, Default, Serialize)]
pub struct LinkAccount {
    /// Frames that arrived.
    pub frames: u64,
    /// Frames missing by their sequence numbers.
    pub missing_frames: u64,
    /// Frames that came again.
    pub repeated_frames: u64,
    /// Frames with a wrong checksum.
    pub damaged_frames: u64,
    /// Frames longer than any may be.
    pub oversize_frames: u64,
    /// Sound frames this version does not know.
    pub unknown_frames: u64,
    /// Bytes in all dropped frames.
    pub dropped_bytes: u64,
}

/// Kept messages the device had to give up; its counts still hold what was in them.
#[derive(Clone, Copy, Debug, Default, Serialize)]
pub struct GivenUp {
    /// Parts of waveforms.
    pub snippet_parts: u64,
    /// Other records.
    pub records: u64,
}

/// Limits that were judged by.
#[derive(Clone, Debug, Serialize)]
pub struct ReceiverUsed {
    /// The name users type; `custom` for limits of the user's own.
    pub name: &'static str,
    /// The standard's own name.
    pub title: &'static str,
    /// Whether the windows differ from the table's, brought by the user.
    pub is_custom: bool,
    /// Window for each terminal; `null` when it is not judged.
    pub terminal: Option<WindowUsed>,
    /// Window for the average of the two; `null` when it is not judged.
    pub average: Option<WindowUsed>,
    /// Differential decision thresholds.
    pub threshold: Option<WindowUsed>,
    /// What to know before relying on the row.
    pub note: &'static str,
    /// Pairs examined while other limits were watched; their excursions were counted by those.
    pub pairs_under_other_limits: u64,
}

/// Two limits and where they come from.
#[derive(Clone, Debug, Serialize)]
pub struct WindowUsed {
    /// The lower one in V.
    pub low_v: f64,
    /// The upper one in V.
    pub high_v: f64,
    /// Where the figures come from.
    pub source: &'static str,
    /// `seen` (verified in a secondary source), `from-memory`, or `user`.
    pub standing: &'static str,
}

/// The converter that took the samples.
#[derive(Clone, Debug, Serialize)]
pub struct Converter {
    /// Leg A and leg B of the last run that described itself; empty when none did.
    pub legs: Vec<LegPart>,
    /// Whether a rail lies inside a limit, so that a reading beyond the limit could not be taken;
    /// `null` when the rails are unknown or nothing is judged.
    pub are_rails_inside_limits: Option<bool>,
}

/// One leg of the converter.
#[derive(Clone, Debug, Serialize)]
pub struct LegPart {
    /// `A` or `B`.
    pub leg: &'static str,
    /// Lowest voltage it can tell; at or below it a sample counts as clipped.
    pub rail_low_v: f64,
    /// Highest voltage it can tell.
    pub rail_high_v: f64,
    /// Volts per code.
    pub resolution_v: f64,
    /// Uncertainty of the gain, parts per million of the reading.
    pub gain_uncertainty_ppm: u32,
    /// Uncertainty of the offset in V.
    pub offset_uncertainty_v: f64,
}

/// Worst readings of all runs.
#[derive(Clone, Debug, Serialize)]
pub struct Worst {
    /// Highest voltage of either leg, V.
    pub leg_max_v: Option<f64>,
    /// Lowest voltage of either leg, V.
    pub leg_min_v: Option<f64>,
    /// Highest average of the two legs, V (data edges left out where a skew is declared).
    pub cm_max_v: Option<f64>,
    /// Lowest average of the two legs, V (data edges left out where a skew is declared).
    pub cm_min_v: Option<f64>,
    /// Highest VA-VB, V.
    pub dm_max_v: Option<f64>,
    /// Lowest VA-VB, V.
    pub dm_min_v: Option<f64>,
    /// Smallest distance of any judged reading to its limit, V; negative when outside.
    pub margin_v: Option<f64>,
    /// Uncertainty of that reading, V.
    pub margin_uncertainty_v: Option<f64>,
    /// Which quantity that was: as `margins[].quantity`.
    pub quantity: Option<&'static str>,
    /// When.
    pub moment: Option<Moment>,
}

/// One quantity against one limit.
#[derive(Clone, Debug, Serialize)]
pub struct Margin {
    /// `leg-a-high`, `leg-a-low`, `leg-b-high`, `leg-b-low`, `average-high`, `average-low`.
    pub quantity: &'static str,
    /// `terminal` or `average`.
    pub window: &'static str,
    /// The limit, V.
    pub limit_v: f64,
    /// The reading nearest to it or furthest beyond, V.
    pub worst_v: f64,
    /// Distance left, V; negative when outside.
    pub margin_v: f64,
    /// Uncertainty of the reading, V; `null` when the device did not state it.
    pub uncertainty_v: Option<f64>,
    /// Pairs strictly beyond this limit.
    pub outside_samples: Option<u64>,
    /// When the worst reading was first reached.
    pub moment: Moment,
}

/// The two ways of judging.
#[derive(Clone, Debug, Serialize)]
pub struct Judged {
    /// Each leg against its window; `null` when the receiver defines none.
    pub terminal: Option<WindowVerdict>,
    /// The average against its window; `null` when the receiver defines none.
    pub average: Option<WindowVerdict>,
}

/// The verdict on one window.
#[derive(Clone, Debug, Serialize)]
pub struct WindowVerdict {
    /// The verdict.
    pub verdict: Verdict,
    /// Smallest margin, V; `null` when nothing was examined.
    pub margin_v: Option<f64>,
    /// Distance between the two limits, V.
    pub width_v: f64,
    /// A margin below this counts as marginal, V.
    pub marginal_below_v: f64,
}
