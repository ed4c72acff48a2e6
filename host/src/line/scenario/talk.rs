//! The traffic part of a scenario: who talks, and when.

use super::Schedule;
use serde::Deserialize;

/// Who talks, and when.
#[derive(Clone, Debug, Default, PartialEq, Deserialize)]
#[serde(rename_all = "kebab-case", deny_unknown_fields)]
pub enum Traffic {
    /// Nobody talks.
    #[default]
    Silent,
    /// A master polls slaves in turn with asynchronous characters.
    Uart {
        /// Bits per second.
        baud: f64,
        /// Name of the master.
        master: String,
        /// Whom it asks, in turn, for ever.
        polls: Vec<Poll>,
        /// Parity bit.
        #[serde(default)]
        parity: Parity,
        /// Stop bits.
        #[serde(default = "one")]
        stop_bits: u8,
        /// From the end of one exchange to the next question.
        #[serde(default = "default_pause_ms")]
        pause_ms: f64,
        /// Random addition to that, uniform from 0.
        #[serde(default)]
        pause_scatter_ms: f64,
        /// How long the master waits for an answer that does not come.
        #[serde(default = "default_timeout_ms")]
        timeout_ms: f64,
        /// Bit times the driver holds mark before the first character.
        #[serde(default = "one_bit")]
        lead_bits: f64,
        /// Bit times the driver holds mark after the last character.
        #[serde(default = "one_bit")]
        tail_bits: f64,
        /// When the master's program stops asking.
        stalls: Option<Schedule>,
    },
    /// Nodes send frames of the CAN kind, one after the other.
    Can {
        /// Bits per second.
        bit_rate_hz: f64,
        /// What is sent.
        frames: Vec<CanFrame>,
    },
}

fn one() -> u8 {
    1
}

fn one_bit() -> f64 {
    1.0
}

fn default_pause_ms() -> f64 {
    20.0
}

fn default_timeout_ms() -> f64 {
    200.0
}

/// One question and its answer.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Poll {
    /// Name of the slave.
    pub slave: String,
    /// Characters of the question.
    #[serde(default = "default_ask_bytes")]
    pub ask_bytes: u16,
    /// Characters of the answer: fewest, most.
    #[serde(default = "default_reply_bytes")]
    pub reply_bytes: [u16; 2],
    /// From the end of the question to the answer.
    #[serde(default = "default_turn_round_ms")]
    pub turn_round_ms: f64,
    /// Random addition to that, uniform from 0.
    #[serde(default)]
    pub turn_round_scatter_ms: f64,
    /// Share of questions that are answered.
    #[serde(default = "default_answers")]
    pub answers: f64,
}

fn default_ask_bytes() -> u16 {
    8
}

fn default_reply_bytes() -> [u16; 2] {
    [9, 25]
}

fn default_turn_round_ms() -> f64 {
    4.0
}

fn default_answers() -> f64 {
    1.0
}

/// The bit after the data bits.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Parity {
    /// No parity bit.
    #[default]
    None,
    /// An even number of ones.
    Even,
    /// An odd number of ones.
    Odd,
}

/// A frame a node sends again and again.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct CanFrame {
    /// Name of the sender.
    pub node: String,
    /// Data bytes, 0 to 8.
    #[serde(default = "default_can_bytes")]
    pub bytes: u16,
    /// Period.
    pub every_ms: f64,
    /// Random delay, uniform from 0.
    #[serde(default)]
    pub scatter_ms: f64,
}

fn default_can_bytes() -> u16 {
    8
}
