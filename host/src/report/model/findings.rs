//! The parts of the report that describe the signal: excursions, levels, blind spots.

use super::Moment;
use serde::Serialize;

/// Stretches outside a limit.
#[derive(Clone, Debug, Serialize)]
pub struct Excursions {
    /// How many, exactly; edge suspects left out.
    pub count: u64,
    /// Pairs with any limit strictly breached.
    pub samples_outside: u64,
    /// The same in seconds.
    pub time_outside_s: Option<f64>,
    /// The same as a share of the pairs examined.
    pub share_outside: Option<f64>,
    /// One-sample peaks of the average on a data edge, on a board with skew: counted apart.
    pub edge_suspects: u64,
    /// Storm records, each holding excursions too many to report one by one.
    pub storms: u64,
    /// Excursions in those records.
    pub coalesced: u64,
    /// Entries in time order, from the first.
    pub list: Vec<ExcursionEntry>,
    /// Whether more entries exist than are listed.
    pub list_truncated: bool,
    /// The entries furthest beyond their limit, in time order.
    pub furthest: Vec<ExcursionEntry>,
}

/// One excursion (its parts put together) or one storm record.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ExcursionEntry {
    /// Number of the excursion within its run; `null` for a storm.
    pub number: Option<u64>,
    /// First sample outside.
    pub first_sample: u64,
    /// Length of the stretch, first to last sample outside, both included.
    pub samples: u64,
    /// The same in seconds.
    pub duration_s: Option<f64>,
    /// When it began.
    pub moment: Moment,
    /// Every limit broken: as `margins[].quantity`.
    pub limits: Vec<&'static str>,
    /// The limit broken by most.
    pub worst_limit: &'static str,
    /// The voltage furthest outside (of the leg, or of the average), V.
    pub extreme_v: f64,
    /// Its sample.
    pub extreme_sample: u64,
    /// How far beyond the limit, V; `null` when the limits of that time are unknown.
    pub beyond_v: Option<f64>,
    /// Pairs strictly outside any limit.
    pub outside_samples: u64,
    /// Sum of the distance outside over time, V·s.
    pub area_v_s: Option<f64>,
    /// Lowest VA-VB meanwhile, V.
    pub dm_min_v: Option<f64>,
    /// Highest VA-VB meanwhile, V.
    pub dm_max_v: Option<f64>,
    /// Pairs at a converter rail meanwhile: the true extreme may be larger.
    pub clipped_samples: u64,
    /// Excursions in this storm record; 0 for an excursion reported by itself.
    pub coalesced: u64,
    /// Whether it is (or a storm holds nothing but) one-sample peaks of the average on a data edge.
    pub is_edge_suspect: bool,
    /// Ended by a gap, a restart or the end of the recording.
    pub is_cut: bool,
    /// Whether the waveform around it was kept.
    pub has_waveform: bool,
}

/// Signal levels over all intervals.
#[derive(Clone, Debug, Serialize)]
pub struct Levels {
    /// Intervals that reported levels.
    pub intervals: u64,
    /// Resting differential level, V: median over intervals, weighted by samples.
    pub idle_v: Option<f64>,
    /// Level while driven high (VA above VB), V.
    pub driven_high_v: Option<f64>,
    /// Level while driven low, V.
    pub driven_low_v: Option<f64>,
    /// 5 and 95 % of the intervals.
    pub idle_spread: Option<LevelSpread>,
    /// 5 and 95 % of the intervals.
    pub driven_high_spread: Option<LevelSpread>,
    /// 5 and 95 % of the intervals.
    pub driven_low_spread: Option<LevelSpread>,
    /// Share of pairs at the resting level.
    pub idle_share: Option<f64>,
    /// Share of pairs driven high or low.
    pub driven_share: Option<f64>,
    /// Share of pairs between 0.3 and 0.7 of a driven level.
    pub mid_level_share: Option<f64>,
    /// Average of the legs while not driven, V.
    pub cm_idle_v: Option<f64>,
    /// Average of the legs while driven high, V.
    pub cm_driven_high_v: Option<f64>,
    /// Average of the legs while driven low, V.
    pub cm_driven_low_v: Option<f64>,
    /// 5 and 95 % of the intervals.
    pub cm_idle_spread: Option<LevelSpread>,
    /// What the levels mean to the receiver.
    pub judgements: Vec<LevelJudgement>,
    /// Bias and termination that would give this idle level, nearest first.
    pub bias_candidates: Vec<BiasCandidate>,
    /// What the driven level says about the number of terminators, or why it says nothing.
    pub driven_hint: Option<String>,
}

/// Where nine in ten intervals lie.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct LevelSpread {
    /// 5 % of the intervals lie below, V.
    pub p5_v: f64,
    /// 5 % of the intervals lie above, V.
    pub p95_v: f64,
}

/// What one level means to the receiver.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct LevelJudgement {
    /// `idle`, `driven-high`, `driven-low` or `cm`.
    pub subject: &'static str,
    /// `good`, `weak`, `wrong` or `not-judged`.
    pub finding: &'static str,
    /// In words.
    pub text: String,
}

/// A bias and termination that would give the idle level seen.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct BiasCandidate {
    /// In words.
    pub description: String,
    /// Supply of the bias, V.
    pub supply_v: f64,
    /// Resistor from each leg, ohm, of one set.
    pub bias_ohm: f64,
    /// Sets of bias resistors on the bus.
    pub bias_sets: u32,
    /// Terminators on the bus.
    pub terminators: u32,
    /// Idle level this gives, V.
    pub expected_idle_v: f64,
    /// Average of the legs this gives against the bias supply's 0 V, V.
    pub expected_cm_v: f64,
    /// How far the level seen lies from it, as a share of it.
    pub deviation_share: f64,
}

/// What could not be seen.
#[derive(Clone, Debug, Serialize)]
pub struct Blind {
    /// Half the sample rate, Hz: nothing above it is seen as what it is.
    pub half_rate_hz: Option<f64>,
    /// A pulse at least this long meets one sample for certain, s.
    pub shortest_certain_s: Option<f64>,
    /// A pulse at least this long meets two samples for certain, s.
    pub shortest_certain_two_samples_s: Option<f64>,
    /// Probability that a pulse of 50 ns meets a sample.
    pub probability_50_ns: Option<f64>,
    /// The limits of the claim, one sentence each.
    pub statements: Vec<String>,
}
