//! The wired part of a scenario: nodes, cable, faults, monitor.
//!
//! Defaults are an ordinary RS-485 pair: a 5 V driver of 3.6 V open circuit behind 40 ohm (model
//! driver, common practice, no source), one unit load of 12 kohm per node (TI SLLA272), and a
//! monitor with a 100 k divider of 110 kohm input resistance against 1.57 V, -16.1 to +20.9 V, one
//! RC pole at 100 kHz (own arithmetic on the divider 100 k / 20.5 k / 18.7 k at 3.3 V).

use serde::Deserialize;

/// Who listens.
#[derive(Clone, Debug, Default, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct Monitor {
    /// The node it is clipped at; the first one when left out. Its reference clip is 0 V of everything.
    pub at: Option<String>,
    /// Divider, filter, noise.
    pub front_end: FrontEnd,
    /// Converter.
    pub adc: Adc,
}

/// Divider, filter and noise of the monitor.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct FrontEnd {
    /// Input resistance per leg.
    pub input_ohm: f64,
    /// Voltage an unconnected leg reads.
    pub input_rest_v: f64,
    /// Relative error of leg A's gain (0.001 = reads 0.1 % high).
    pub gain_error_a: f64,
    /// Relative error of leg B's gain.
    pub gain_error_b: f64,
    /// Offset of leg A's reading.
    pub offset_error_a_v: f64,
    /// Offset of leg B's reading.
    pub offset_error_b_v: f64,
    /// Whether the declared scale has these errors taken out.
    pub calibrated: bool,
    /// Declared uncertainty of the gain; left out: 3640 ppm (0.1 % parts), calibrated 500 ppm.
    pub gain_uncertainty_ppm: Option<u32>,
    /// Declared uncertainty of the offset; left out: 36 mV (0.1 % parts), calibrated 5 mV.
    pub offset_uncertainty_uv: Option<u32>,
    /// Time constant of the anti-alias pole, mean of both legs.
    pub rc_us: f64,
    /// Relative difference of the two time constants, (A - B) / mean.
    pub rc_mismatch: f64,
    /// White noise per leg, referred to the bus.
    pub noise_uv: f64,
}

impl Default for FrontEnd {
    fn default() -> Self {
        Self {
            input_ohm: 110e3,
            input_rest_v: 1.57,
            gain_error_a: 0.0,
            gain_error_b: 0.0,
            offset_error_a_v: 0.0,
            offset_error_b_v: 0.0,
            calibrated: false,
            gain_uncertainty_ppm: None,
            offset_uncertainty_uv: None,
            rc_us: 1.6,
            rc_mismatch: 0.0,
            noise_uv: 3000.0,
        }
    }
}

/// The converter.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct Adc {
    /// Resolution, 8 to 16.
    pub bits: u8,
    /// Bus voltage of code 0.
    pub low_v: f64,
    /// Bus voltage of the highest code.
    pub high_v: f64,
    /// How much later than leg A leg B is sampled; less than one sample period.
    pub skew_ns: i32,
    /// Random error of the sampling instant, both legs alike, r.m.s.
    pub jitter_ns: f64,
}

impl Default for Adc {
    fn default() -> Self {
        Self { bits: 12, low_v: -16.1, high_v: 20.9, skew_ns: 0, jitter_ns: 0.0 }
    }
}

/// A device on the pair.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Node {
    /// Unique name.
    pub name: String,
    /// Cable resistance per leg from the node before.
    #[serde(default)]
    pub cable_ohm: f64,
    /// Ground potential against the monitor's reference.
    #[serde(default)]
    pub ground_v: f64,
    /// Resistance between the node's common and that ground; large for an isolated node.
    #[serde(default)]
    pub ground_ohm: f64,
    /// Input resistance per leg (12 kohm is one unit load).
    #[serde(default = "default_input_ohm")]
    pub input_ohm: f64,
    /// Voltage the input resistance pulls to, against the node's common (2.5 V for CAN).
    #[serde(default)]
    pub input_rest_v: f64,
    /// Terminator across the pair.
    pub terminator_ohm: Option<f64>,
    /// Idle bias.
    pub bias: Option<Bias>,
    /// Driver, when the node can talk.
    pub driver: Option<Driver>,
}

fn default_input_ohm() -> f64 {
    12e3
}

/// Pull-up on leg A, pull-down on leg B.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Bias {
    /// Supply against the node's common.
    pub supply_v: f64,
    /// From the supply to leg A.
    pub pull_up_ohm: f64,
    /// From leg B to the common.
    pub pull_down_ohm: f64,
    /// Pulls leg B up and leg A down instead.
    #[serde(default)]
    pub reversed: bool,
}

/// A line driver: two Thevenin sources.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct Driver {
    /// How it drives.
    pub kind: DriverKind,
    /// Differential voltage without load.
    pub open_v: f64,
    /// Output resistance, both legs together.
    pub output_ohm: f64,
    /// Average of the two outputs against the node's common.
    pub offset_v: f64,
    /// 10 to 90 % rise time.
    pub rise_ns: f64,
    /// Leg A and leg B exchanged at this node.
    pub swapped: bool,
}

impl Default for Driver {
    fn default() -> Self {
        Self {
            kind: DriverKind::Both,
            open_v: 3.6,
            output_ohm: 40.0,
            offset_v: 2.5,
            rise_ns: 100.0,
            swapped: false,
        }
    }
}

/// Which levels a driver drives.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum DriverKind {
    /// Mark (leg A above leg B) and space.
    Both,
    /// Dominant (leg A above leg B) only; recessive is left to the inputs.
    DominantOnly,
}

/// Something broken, for the whole run.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub enum Fault {
    /// A leg is open.
    Open {
        /// The node.
        at: String,
        /// The leg.
        leg: FaultLeg,
        /// Where at that node.
        place: FaultPlace,
    },
    /// A bad contact.
    Series {
        /// The node.
        at: String,
        /// The leg.
        leg: FaultLeg,
        /// Where at that node.
        place: FaultPlace,
        /// Resistance of the contact.
        ohm: f64,
    },
    /// A leg touches the node's common.
    LegToCommon {
        /// The node.
        at: String,
        /// The leg.
        leg: FaultLeg,
        /// Resistance of the touch.
        ohm: f64,
    },
    /// A leg touches a supply.
    LegToSupply {
        /// The node.
        at: String,
        /// The leg.
        leg: FaultLeg,
        /// Resistance of the touch.
        ohm: f64,
        /// The supply against the node's common.
        supply_v: f64,
    },
    /// The legs touch each other.
    LegToLeg {
        /// The node.
        at: String,
        /// Resistance of the touch.
        ohm: f64,
    },
}

/// A leg, as scenario files name it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum FaultLeg {
    /// Leg A.
    A,
    /// Leg B.
    B,
}

/// Where a series fault sits.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum FaultPlace {
    /// Between the cable and this node's driver and input.
    Tap,
    /// In the cable between the node before and this one.
    Cable,
}
