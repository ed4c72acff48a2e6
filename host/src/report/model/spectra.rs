//! The spectral part of the report: densities and lines, the sources they come from, and what the pair makes
//! of one mode in the other.

use super::Moment;
use serde::Serialize;

/// Averaged spectra of both modes, and what they show. The lines are of idle and driven segments together.
#[derive(Clone, Debug, Serialize)]
pub struct Spectra {
    /// The common mode.
    pub common: Option<ModeSpectrum>,
    /// The differential mode.
    pub differential: Option<ModeSpectrum>,
    /// Stored spectra left out because they are of another rate, length or kind.
    pub left_out: u64,
    /// Full rate of a second set of spectra, Hz, by which lines were checked against aliases.
    pub second_rate_hz: Option<f64>,
    /// Sources of the lines of both modes, strongest first, the bus's own data last.
    pub sources: Vec<Source>,
    /// Weaker sources that are not listed.
    pub sources_not_listed: u64,
    /// Common to differential mode, from idle segments.
    pub conversion: Conversion,
    /// Differential to common mode, from driven segments at the full rate.
    pub driver_imbalance: Conversion,
}

/// The averaged spectrum of one mode. Its first keys are of the highest rate.
#[derive(Clone, Debug, Serialize)]
pub struct ModeSpectrum {
    /// Stored spectra averaged.
    pub spectra: u64,
    /// Segments in them.
    pub segments: u64,
    /// Segments passed over meanwhile to save time.
    pub skipped_segments: u64,
    /// Points per segment.
    pub points: u32,
    /// Distance between bins, Hz.
    pub bin_hz: f64,
    /// Noise bandwidth of a bin, Hz.
    pub noise_bandwidth_hz: f64,
    /// Noise floor (from the median of all bins), V/√Hz.
    pub noise_floor_v_per_rthz: f64,
    /// Rungs of the decimation ladder, the full rate first.
    pub rungs: Vec<RungSpectrum>,
    /// What lies below this frequency is not resolved, Hz.
    pub unresolved_below_hz: f64,
    /// What lies there, V rms (the mean of each segment left out).
    pub unresolved_rms_v: f64,
    /// Strongest lines, largest first.
    pub lines: Vec<SpectralLine>,
}

/// One rung of the decimation ladder in the spectrum of one mode.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct RungSpectrum {
    /// Its number; 0 is the full rate.
    pub rung: u8,
    /// Its rate: pairs per second / 8^`rung`, Hz.
    pub rate_hz: f64,
    /// Points per segment.
    pub points: u32,
    /// Distance between bins, Hz.
    pub bin_hz: f64,
    /// Lowest frequency it tells: below, the next rung does, Hz.
    pub from_hz: f64,
    /// Highest frequency it tells, Hz.
    pub to_hz: f64,
    /// Stored spectra averaged.
    pub spectra: u64,
    /// Segments in them.
    pub segments: u64,
    /// Segments passed over meanwhile to save time.
    pub skipped_segments: u64,
    /// Noise floor (from the median of its bins), V/√Hz.
    pub noise_floor_v_per_rthz: f64,
}

/// One spectral line.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct SpectralLine {
    /// Frequency, Hz.
    pub frequency_hz: f64,
    /// Its uncertainty without that of the sample clock, Hz.
    pub frequency_uncertainty_hz: f64,
    /// Peak amplitude, V.
    pub amplitude_v: f64,
    /// V rms.
    pub rms_v: f64,
    /// Height over the local floor, dB.
    pub above_floor_db: f64,
    /// Rung of the ladder that shows it.
    pub rung: u8,
    /// `interpolated`, or `band-power` where lines crowd, are wide or lie at the edge of the band.
    pub method: &'static str,
    /// `confirmed` at a second sample rate, `suspect` of being an alias, or `not-confirmed`.
    pub alias: &'static str,
}

/// Lines of one source.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Source {
    /// `mains`, `drive`, `supply`, `traffic` or `unknown`.
    pub kind: &'static str,
    /// Fundamental, Hz: the true one where a second rate told it; `null` for data.
    pub frequency_hz: Option<f64>,
    /// Its uncertainty without that of the sample clock, Hz.
    pub frequency_uncertainty_hz: Option<f64>,
    /// Bit rate of data, bit/s; `null` where it cannot be told and for other sources.
    pub bit_rate_hz: Option<f64>,
    /// Its uncertainty, bit/s.
    pub bit_rate_uncertainty_hz: Option<f64>,
    /// Output frequency of a drive, Hz.
    pub output_hz: Option<f64>,
    /// Its uncertainty, Hz.
    pub output_uncertainty_hz: Option<f64>,
    /// All its lines together in the common mode, V rms, averaged over the whole time; `null` where none stands
    /// out.
    pub common_rms_v: Option<f64>,
    /// The same in the differential mode.
    pub differential_rms_v: Option<f64>,
    /// Segments its strongest line was measured in: `idle`, `driven`, or `all`.
    pub set: &'static str,
    /// How well the evidence carries the name, 0 to 1: a rule, not a probability.
    pub confidence: f64,
    /// What it was told by, in a few words.
    pub summary: String,
    /// What speaks for and against the name, one observation each.
    pub evidence: Vec<String>,
    /// Of its fundamental: `confirmed`, `suspect` or `not-confirmed`, as of lines.
    pub alias: &'static str,
    /// Where its fundamental may truly be, Hz, when it is suspect: likeliest first.
    pub candidates_hz: Vec<f64>,
    /// When it was there; `null` where the log cannot tell.
    pub presence: Option<Presence>,
    /// Its lines, the fundamental first.
    pub lines: Vec<SourceLine>,
}

/// One line of a source.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct SourceLine {
    /// What it is to the source: `fundamental`, `3 x fundamental` and so on.
    pub role: String,
    /// Frequency at which it shows, Hz.
    pub frequency_hz: f64,
    /// Its uncertainty without that of the sample clock, Hz; half the band where power was summed.
    pub frequency_uncertainty_hz: f64,
    /// Level in the common mode, V rms.
    pub common_rms_v: Option<f64>,
    /// Level in the differential mode, V rms.
    pub differential_rms_v: Option<f64>,
    /// Rung of the ladder it was measured on.
    pub rung: u8,
    /// Segments it was measured in, as of sources.
    pub set: &'static str,
    /// As of lines.
    pub alias: &'static str,
}

/// When a source was there, from the spectra one after another.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Presence {
    /// Share of the time looked at.
    pub share: f64,
    /// Spectra in which it would have shown.
    pub looks: u64,
    /// Time they cover, s.
    pub looked_s: Option<f64>,
    /// Stretches of presence.
    pub stretches: u64,
    /// First moment it was there.
    pub first_start: Option<Moment>,
    /// Last moment it was there.
    pub last_stop: Option<Moment>,
    /// The stretches in order, from the first.
    pub list: Vec<PresenceStretch>,
    /// Whether more exist than are listed.
    pub list_truncated: bool,
}

/// One stretch of presence.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct PresenceStretch {
    /// Start of the first spectrum that shows it.
    pub start: Moment,
    /// How far off the start may be, s; `null` where it was there when looking began.
    pub start_uncertainty_s: Option<f64>,
    /// End of the last spectrum that shows it.
    pub stop: Moment,
    /// How far off the stop may be, s; `null` where it was there when looking ended.
    pub stop_uncertainty_s: Option<f64>,
    /// From start to stop, s.
    pub duration_s: Option<f64>,
}

/// What one mode makes in the other.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Conversion {
    /// `significant`, `upper-limit` (below 0.1 V/V somewhere) or `not-known`.
    pub finding: &'static str,
    /// In words.
    pub text: String,
    /// Whether the board's own conversion was taken into account.
    pub is_board_known: bool,
    /// Places of the spectrum at which it was asked for.
    pub tested: u64,
    /// Of these with a significant value.
    pub significant: u64,
    /// The most telling places: highest significant values, else lowest upper limits.
    pub points: Vec<ConversionPoint>,
}

/// Conversion at one place of the spectrum.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ConversionPoint {
    /// `band` or `line`.
    pub kind: &'static str,
    /// Frequency, Hz.
    pub frequency_hz: f64,
    /// Where its bins begin, Hz.
    pub from_hz: f64,
    /// Where they end, Hz.
    pub to_hz: f64,
    /// Magnitude of the ratio, V/V; `null` for an upper limit.
    pub magnitude: Option<f64>,
    /// Lowest magnitude of the 95 % region.
    pub magnitude_low: Option<f64>,
    /// Highest magnitude of the 95 % region, or the upper limit; `null` where noise leaves none.
    pub magnitude_high: Option<f64>,
    /// Phase of the answering mode against the asking one, degrees.
    pub phase_deg: Option<f64>,
    /// How far the phase may be off, degrees.
    pub phase_uncertainty_deg: Option<f64>,
    /// Coherence of the modes.
    pub coherence: f64,
    /// Independent segments that would scatter as much.
    pub effective_segments: f64,
    /// The board's own ratio with its uncertainty, V/V; `null` when not known.
    pub board_floor: Option<f64>,
    /// `significant`, or why it is an upper limit: `not-significant`, `below-board`, `leg-noise`,
    /// `other-direction`.
    pub verdict: &'static str,
}
