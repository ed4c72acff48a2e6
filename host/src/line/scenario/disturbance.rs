//! The disturbing part of a scenario: what, when, and how it gets onto the pair.

use serde::Deserialize;

/// When something is on: first at `from_s`, for `for_s`, again every `every_s`.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct Schedule {
    /// Start of the first occurrence.
    pub from_s: f64,
    /// Length of each; left out: for ever.
    pub for_s: Option<f64>,
    /// Period; left out: once.
    pub every_s: Option<f64>,
    /// Each start is moved by up to this much either way.
    pub jitter_s: f64,
    /// Share of occurrences that happen.
    pub chance: f64,
}

impl Default for Schedule {
    fn default() -> Self {
        Self { from_s: 0.0, for_s: None, every_s: None, jitter_s: 0.0, chance: 1.0 }
    }
}

/// A plant machine: a timetable several disturbances share.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Machine {
    /// Unique name.
    pub name: String,
    /// When it runs.
    pub schedule: Schedule,
}

/// A disturbance: always on unless it follows a machine or has a schedule of its own.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Disturbance {
    /// Unique name.
    pub name: String,
    /// The machine whose timetable it follows.
    pub machine: Option<String>,
    /// Its own timetable.
    pub schedule: Option<Schedule>,
    /// How it gets onto the pair; not for `radio` and `supply-dip`, which say so themselves.
    pub coupling: Option<Coupling>,
    /// What it is.
    pub source: Source,
}

/// How a voltage gets onto the pair.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub enum Coupling {
    /// Onto both legs against the monitor's reference, whoever drives: leg A gets
    /// `gain (1 + imbalance/2)`, leg B `gain (1 - imbalance/2)`, so that `imbalance` = DM/CM.
    Pair {
        /// Volts on the pair per volt of the source.
        #[serde(default = "unity")]
        gain: f64,
        /// DM over CM.
        #[serde(default)]
        imbalance: f64,
    },
    /// Into a node's ground: the pair follows as far as that node drives or loads it.
    Ground {
        /// Name of the node.
        node: String,
        /// Volts at the ground per volt of the source.
        #[serde(default = "unity")]
        gain: f64,
    },
    /// Through a resistance onto each leg: the pair gives way as far as its own resistance lets it.
    Legs {
        /// The node where it couples in.
        node: String,
        /// Volts behind the resistance per volt of the source.
        #[serde(default = "unity")]
        gain: f64,
        /// Resistance per leg, mean of both.
        source_ohm: f64,
        /// Relative difference of the two conductances, (A - B) / mean.
        #[serde(default)]
        imbalance: f64,
    },
}

fn unity() -> f64 {
    1.0
}

/// One multiple of a fundamental.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Harmonic {
    /// Multiple of the fundamental.
    pub order: u16,
    /// Amplitude over that of the fundamental.
    pub share: f64,
    /// Phase of its sine at the fundamental's zero crossing.
    #[serde(default)]
    pub phase_deg: f64,
}

/// What disturbs.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub enum Source {
    /// Mains hum.
    Mains {
        /// Mains frequency.
        hz: f64,
        /// Amplitude of the fundamental.
        peak_v: f64,
        /// Its harmonics.
        #[serde(default)]
        harmonics: Vec<Harmonic>,
        /// Time constant of coming and going.
        #[serde(default = "default_rise_s")]
        rise_s: f64,
        /// Time constant of decay while on, as with an inrush.
        decay_s: Option<f64>,
    },
    /// Average of three rectified phases: the midpoint of a six-pulse DC link.
    SixPulse {
        /// Mains frequency.
        hz: f64,
        /// Amplitude of each phase.
        phase_peak_v: f64,
        /// Time constant of coming and going.
        #[serde(default = "default_rise_s")]
        rise_s: f64,
    },
    /// Common mode of a two-level three-phase bridge, sine against triangle, natural sampling.
    Drive {
        /// DC link.
        dc_link_v: f64,
        /// Carrier.
        carrier_hz: f64,
        /// Motor frequency.
        output_hz: f64,
        /// Modulation index, below 1.
        #[serde(default = "default_modulation")]
        modulation: f64,
        /// Time constant of each edge on its way to the pair.
        #[serde(default)]
        edge_us: f64,
    },
    /// A narrow line of a switching supply.
    SwitchingSupply {
        /// Switching frequency.
        hz: f64,
        /// Amplitude of the fundamental.
        peak_v: f64,
        /// Its harmonics.
        #[serde(default)]
        harmonics: Vec<Harmonic>,
        /// The frequency swings by this much either way.
        #[serde(default)]
        drift_hz: f64,
        /// Period of that swing.
        #[serde(default = "default_drift_period_s")]
        drift_period_s: f64,
        /// Time constant of coming and going.
        #[serde(default = "default_rise_s")]
        rise_s: f64,
    },
    /// A contactor that opens: at each occurrence trains of damped pulses whose height grows and
    /// whose rate falls while the gap opens.
    Contactor {
        /// Height of the last pulses of a train.
        peak_v: f64,
        /// Trains per opening (contact bounce).
        #[serde(default = "default_trains")]
        trains: u16,
        /// Length of a train.
        #[serde(default = "default_train_ms")]
        train_ms: f64,
        /// From one train to the next.
        #[serde(default = "default_bounce_ms")]
        bounce_ms: f64,
        /// Distance of pulses when the gap is small.
        #[serde(default = "default_first_gap_us")]
        first_gap_us: f64,
        /// Distance of pulses when the gap is wide.
        #[serde(default = "default_last_gap_us")]
        last_gap_us: f64,
        /// Ringing of each pulse.
        #[serde(default = "default_ring_hz")]
        ring_hz: f64,
        /// Time constant of each pulse.
        #[serde(default = "default_decay_us")]
        decay_us: f64,
    },
    /// A transmitter rectified in the inputs: a step on the legs while someone talks.
    Radio {
        /// Step of leg A.
        leg_a_v: f64,
        /// Step of leg B.
        leg_b_v: f64,
        /// Time constant of coming and going.
        #[serde(default = "default_radio_rise_s")]
        rise_s: f64,
    },
    /// A ground that moves.
    GroundShift {
        /// By how much.
        volts: f64,
        /// Time constant of coming and going.
        #[serde(default = "default_rise_s")]
        rise_s: f64,
    },
    /// A node's supply that sags: its driver, bias and input rest level sag alike.
    SupplyDip {
        /// Name of the node.
        node: String,
        /// Share of the supply that is missing, 0 to 1.
        share: f64,
        /// Time constant of coming and going.
        #[serde(default = "default_rise_s")]
        rise_s: f64,
    },
}

fn default_rise_s() -> f64 {
    0.02
}

fn default_radio_rise_s() -> f64 {
    0.001
}

fn default_modulation() -> f64 {
    0.9
}

fn default_drift_period_s() -> f64 {
    30.0
}

fn default_trains() -> u16 {
    3
}

fn default_train_ms() -> f64 {
    2.0
}

fn default_bounce_ms() -> f64 {
    4.0
}

fn default_first_gap_us() -> f64 {
    5.0
}

fn default_last_gap_us() -> f64 {
    100.0
}

fn default_ring_hz() -> f64 {
    150e3
}

fn default_decay_us() -> f64 {
    8.0
}
