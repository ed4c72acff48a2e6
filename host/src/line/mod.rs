//! The simulated pair: a bus with talkers, faults and disturbances, sampled by a simulated monitor.
//!
//! Rooms, from the file to the codes:
//!
//! * [`scenario`]: what a scenario file says, read and checked; [`scenarios`]: those built in;
//! * [`network`]: the wiring as a resistive network; `responses`: what each leg does in every bus state;
//! * [`pair_theory`]: closed formulas to check a wiring by hand;
//! * `traffic`: who drives when; `schedule`: when something is on;
//! * `follower` and `disturbance`: waveforms behind the monitor's RC pole, exact between samples;
//! * `front_end`: codes, and the scale the board declares; `random`: decisions and noise;
//! * [`LineSource`]: all of it as a [`legwise_firmware::source::PairSource`].
//!
//! What it leaves out: the cable is resistive (no reflections, no capacitance), receivers do nothing,
//! two drivers never talk at once, and a fault stays as it is for the whole run.

mod disturbance;
mod error;
mod follower;
mod front_end;
pub mod network;
pub mod pair_theory;
mod random;
mod responses;
pub mod scenario;
pub mod scenarios;
mod schedule;
mod source;
mod traffic;

pub use error::ScenarioError;
pub use scenario::Scenario;
pub use source::{Length, LineSource};
pub use traffic::PollCounts;

/// Pairs made at a time.
const BLOCK: usize = 256;

/// One block of one quantity.
type Wave = [f32; BLOCK];

/// A stretch during which a disturbance is on. What fades does so from `until_s` on.
#[derive(Clone, Debug, PartialEq)]
pub struct Activity {
    /// The disturbance.
    pub name: String,
    /// Start, seconds from the first pair.
    pub from_s: f64,
    /// End, seconds from the first pair; infinite for something that is always on.
    pub until_s: f64,
}
