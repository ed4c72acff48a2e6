//! What a scenario file says: a pair, its nodes and traffic, what disturbs it, and who listens.
//!
//! TOML, one table per thing; unknown keys are refused, every number has its unit in its name.
//! [`Scenario::from_toml`] reads and checks; the checks are in `check`. A minimal file:
//!
//! ```toml
//! title = "Two nodes"
//! description = "One master, one slave."
//! receiver = "tia485a"
//!
//! [[nodes]]
//! name = "panel"
//! terminator_ohm = 120.0
//! bias = { supply_v = 5.0, pull_up_ohm = 560.0, pull_down_ohm = 560.0 }
//! driver = {}
//!
//! [[nodes]]
//! name = "oven"
//! cable_ohm = 3.0
//! terminator_ohm = 120.0
//! driver = {}
//!
//! [traffic.uart]
//! baud = 19200.0
//! master = "panel"
//! polls = [{ slave = "oven" }]
//! ```

mod bus;
mod check;
mod disturbance;
mod talk;

pub use bus::{Adc, Bias, Driver, DriverKind, Fault, FaultLeg, FaultPlace, FrontEnd, Monitor, Node};
pub use disturbance::{Coupling, Disturbance, Harmonic, Machine, Schedule, Source};
pub use talk::{CanFrame, Parity, Poll, Traffic};

use super::error::ScenarioError;
use serde::Deserialize;

/// A simulated pair, complete.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Scenario {
    /// One line for lists.
    pub title: String,
    /// What is simulated and what should be found.
    pub description: String,
    /// Name of the receiver to judge by, as in the receiver table of `legwise_protocol::receivers`.
    pub receiver: String,
    /// Pairs per second.
    #[serde(default = "default_sample_rate_hz")]
    pub sample_rate_hz: f64,
    /// Who listens: where on the pair, through what front end, with what converter.
    #[serde(default)]
    pub monitor: Monitor,
    /// The devices along the cable, from one end to the other.
    pub nodes: Vec<Node>,
    /// Opens, shorts and bad contacts.
    #[serde(default)]
    pub faults: Vec<Fault>,
    /// Who talks, and when; nobody when left out.
    #[serde(default)]
    pub traffic: Traffic,
    /// Plant machines with a timetable that disturbances can follow.
    #[serde(default)]
    pub machines: Vec<Machine>,
    /// What disturbs the pair.
    #[serde(default)]
    pub disturbances: Vec<Disturbance>,
}

fn default_sample_rate_hz() -> f64 {
    200_000.0
}

impl Scenario {
    /// Reads and checks a scenario file.
    ///
    /// # Errors
    /// When the text is not TOML, a key is unknown or missing, or a value cannot be used; the message
    /// names the key and says what to try.
    pub fn from_toml(text: &str) -> Result<Self, ScenarioError> {
        let scenario: Self = toml::from_str(text)
            .map_err(|error| ScenarioError::Syntax { message: error.to_string().trim_end().to_owned() })?;
        scenario.check()?;
        Ok(scenario)
    }

    /// Position of the node called `name`.
    pub(crate) fn node_index(&self, name: &str) -> Option<usize> {
        self.nodes.iter().position(|node| node.name == name)
    }

    /// Position of the node the monitor is clipped at: the first one when none is named.
    pub(crate) fn monitor_index(&self) -> usize {
        self.monitor.at.as_deref().and_then(|name| self.node_index(name)).unwrap_or(0)
    }

    /// The machine called `name`.
    pub(crate) fn machine(&self, name: &str) -> Option<&Machine> {
        self.machines.iter().find(|machine| machine.name == name)
    }
}
