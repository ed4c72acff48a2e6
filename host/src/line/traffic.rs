//! Who drives when: a stream of bus states, made message by message.
//!
//! Memory is one exchange, whatever the length of the run.

mod can;
mod uart;

use super::error::ScenarioError;
use super::follower::Event;
use super::random::Dice;
use super::responses::{IDLE, state_of};
use super::scenario::{Scenario, Traffic};
use can::Can;
use uart::Uart;

/// Stream number of the traffic's decisions.
const STREAM: u64 = 0x7472_6166;

/// The traffic of a scenario.
#[derive(Clone, Debug)]
pub(crate) enum Talk {
    Silent,
    Uart(Uart),
    Can(Can),
}

/// What happened to the questions asked so far.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct PollCounts {
    /// Questions put on the pair.
    pub asked: u64,
    /// Answers that came.
    pub answered: u64,
}

impl Talk {
    /// The traffic of `scenario`.
    pub fn new(scenario: &Scenario, seed: u64) -> Result<Self, ScenarioError> {
        let dice = Dice::new(seed, STREAM);
        match &scenario.traffic {
            Traffic::Silent => Ok(Self::Silent),
            Traffic::Uart { .. } => Uart::new(scenario, seed, dice).map(Self::Uart),
            Traffic::Can { .. } => Can::new(scenario, dice).map(Self::Can),
        }
    }

    /// Appends events until all before `until` (samples) are there.
    pub fn extend(&mut self, until: f64, events: &mut Vec<Event>) {
        match self {
            Self::Silent => {}
            Self::Uart(uart) => uart.extend(until, events),
            Self::Can(can) => can.extend(until, events),
        }
    }

    /// Questions and answers so far; zero for other traffic.
    pub fn polls(&self) -> PollCounts {
        match self {
            Self::Uart(uart) => uart.counts(),
            _ => PollCounts::default(),
        }
    }
}

/// Writes levels as events, leaving out those that change nothing.
struct Pen<'a> {
    events: &'a mut Vec<Event>,
    at: f64,
    state: u32,
}

impl<'a> Pen<'a> {
    fn new(events: &'a mut Vec<Event>, at: f64) -> Self {
        Self { events, at, state: IDLE }
    }

    fn drive(&mut self, node: usize, is_high: bool, samples: f64) {
        self.put(state_of(node, is_high), samples);
    }

    fn release(&mut self, samples: f64) {
        self.put(IDLE, samples);
    }

    fn put(&mut self, state: u32, samples: f64) {
        if state != self.state {
            self.events.push(Event { at: self.at, state });
            self.state = state;
        }
        self.at += samples;
    }
}

/// Position of a node the scenario's checks have found.
fn index_of(scenario: &Scenario, key: &str, name: &str) -> Result<usize, ScenarioError> {
    scenario
        .node_index(name)
        .ok_or_else(|| ScenarioError::value(key, name, "no node has this name", "the name of a node"))
}
