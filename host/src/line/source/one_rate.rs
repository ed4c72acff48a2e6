//! The simulated pair at one rate.
//!
//! ```text
//!  traffic -> bus states -> follower per leg -> volts and gains ─┐
//!  disturbances -> envelope, tones, bridge, arc ─ x gains ───────┴─ + noise -> converter -> codes
//! ```
//!
//! Work is done in blocks that start at multiples of [`BLOCK`], whatever buffers the caller brings:
//! that makes the codes independent of how they are fetched. Memory is a few blocks and one exchange
//! of messages, whatever the length.

use crate::line::disturbance::{Active, Block, LegClock};
use crate::line::error::ScenarioError;
use crate::line::follower::{Follower, Queue};
use crate::line::front_end::Converter;
use crate::line::random::Hiss;
use crate::line::responses::Responses;
use crate::line::scenario::Scenario;
use crate::line::traffic::{PollCounts, Talk};
use crate::line::{Activity, BLOCK, Wave};
use legwise_firmware::source::SourceDescription;

/// Stream numbers of the noise of leg A, leg B and of the sampling instant.
const HISS: [u64; 2] = [0x6e6f_6973_6541, 0x6e6f_6973_6542];
const JITTER: u64 = 0x6a69_7474_6572;

/// A simulated pair behind a simulated monitor, pairs without end.
#[derive(Clone, Debug)]
pub(super) struct OneRate {
    description: SourceDescription,
    sample_rate_hz: f64,
    /// Number of the next pair handed out.
    next: u64,
    talk: Talk,
    queue: Queue,
    disturbances: Vec<Active>,
    legs: [Leg; 2],
    jitter: Option<(f64, Hiss)>,
    /// Number of the first pair of the block that is ready; `u64::MAX` before the first.
    ready: u64,
}

#[derive(Clone, Debug)]
struct Leg {
    follower: Follower,
    /// Volts, then the gain of each channel.
    waves: Vec<Wave>,
    noise_v: f64,
    hiss: Hiss,
    converter: Converter,
    codes: [i32; BLOCK],
}

impl OneRate {
    /// A source for `scenario`. The same scenario and seed give the same codes.
    ///
    /// # Errors
    /// When the scenario has a value that cannot be used.
    pub fn new(scenario: &Scenario, seed: u64) -> Result<Self, ScenarioError> {
        scenario.check()?;
        let rate = scenario.sample_rate_hz;
        let responses = Responses::new(scenario)?;
        let monitor = &scenario.monitor;
        let clocks = [0.5, -0.5].map(|sign| LegClock {
            filter_tau: monitor.front_end.rc_us * 1e-6 * rate * (1.0 + sign * monitor.front_end.rc_mismatch),
            delay: if sign < 0.0 { f64::from(monitor.adc.skew_ns) * 1e-9 * rate } else { 0.0 },
        });
        let legs = [0, 1].map(|leg: usize| {
            let edges = responses.edges_s.iter().map(|edge| edge.map(|seconds| seconds * rate)).collect();
            let clock = clocks[leg];
            Leg {
                follower: Follower::new(responses.legs[leg].clone(), edges, clock.filter_tau, clock.delay),
                waves: vec![[0.0; BLOCK]; 1 + responses.channels.len()],
                noise_v: monitor.front_end.noise_uv * 1e-6,
                hiss: Hiss::new(seed, HISS[leg]),
                converter: Converter::new(monitor, leg),
                codes: [0; BLOCK],
            }
        });
        let disturbances = (0..scenario.disturbances.len())
            .filter_map(|index| Active::new(scenario, index, seed, clocks, &responses.channels))
            .collect();
        let jitter = monitor.adc.jitter_ns * 1e-9 * rate;
        Ok(Self {
            description: SourceDescription {
                sample_rate_mhz: (rate * 1e3).round() as u64,
                skew_ns: monitor.adc.skew_ns,
                legs: [legs[0].converter.scale, legs[1].converter.scale],
            },
            sample_rate_hz: rate,
            next: 0,
            talk: Talk::new(scenario, seed)?,
            queue: Queue::default(),
            disturbances,
            legs,
            jitter: (jitter > 0.0).then(|| (jitter, Hiss::new(seed, JITTER))),
            ready: u64::MAX,
        })
    }

    /// What it is.
    pub fn describe(&self) -> SourceDescription {
        self.description
    }

    /// Pairs per second.
    pub fn rate_hz(&self) -> f64 {
        self.sample_rate_hz
    }

    /// Number of the next pair.
    pub fn next(&self) -> u64 {
        self.next
    }

    /// Every disturbance that is on between two instants, in seconds from the first pair; in the order
    /// of the scenario. Asked for at any time, for any stretch: nothing is recorded for it.
    pub fn activity(&self, from_s: f64, until_s: f64) -> Vec<Activity> {
        self.disturbances
            .iter()
            .flat_map(|disturbance| disturbance.activity(from_s, until_s, self.sample_rate_hz))
            .collect()
    }

    /// Questions and answers of the simulated traffic so far, up to one exchange ahead of the pairs.
    pub fn polls(&self) -> PollCounts {
        self.talk.polls()
    }

    /// Events of the traffic that wait, and room for them.
    #[cfg(test)]
    pub fn waiting_events(&self) -> (usize, usize) {
        (self.queue.events.len(), self.queue.events.capacity())
    }

    /// Makes the block that starts at pair `first`; one that is not heard makes no codes. Blocks must be made
    /// in order.
    fn make(&mut self, first: u64, is_heard: bool) {
        // A leg sampled later looks up to one sample past the end of the block.
        let until = (first + BLOCK as u64 + 1) as f64;
        self.queue.tidy();
        self.talk.extend(until, &mut self.queue.events);
        for disturbance in &mut self.disturbances {
            disturbance.prepare(until);
        }
        let mut instants = [0.0; BLOCK];
        let jitter = self.jitter.as_mut().map(|(rms, hiss)| {
            hiss.add(*rms, &mut instants);
            &instants
        });
        let block = Block { first, jitter };
        let mut scratch = [0.0; BLOCK];
        for (index, leg) in self.legs.iter_mut().enumerate() {
            let read = &mut self.queue.read[index];
            leg.follower.fill(first as f64, &self.queue.events, read, jitter, &mut leg.waves);
            if let Some((volts, gains)) = leg.waves.split_first_mut() {
                if !is_heard {
                    for disturbance in &mut self.disturbances {
                        disturbance.pass_over(index, block, &mut scratch);
                    }
                    continue;
                }
                for disturbance in &mut self.disturbances {
                    disturbance.add(index, block, &mut scratch, gains, volts);
                }
                if leg.noise_v > 0.0 {
                    leg.hiss.add(leg.noise_v, volts);
                }
                leg.converter.convert(volts, &mut leg.codes);
            }
        }
        self.ready = first;
    }
}

impl OneRate {
    /// Writes the next pairs.
    pub fn fill(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) {
        let mut pairs = 0;
        while pairs < leg_a.len() {
            let offset = (self.next % BLOCK as u64) as usize;
            let block = self.next - offset as u64;
            if self.ready != block {
                self.make(block, true);
            }
            let count = (BLOCK - offset).min(leg_a.len() - pairs);
            leg_a[pairs..pairs + count].copy_from_slice(&self.legs[0].codes[offset..offset + count]);
            leg_b[pairs..pairs + count].copy_from_slice(&self.legs[1].codes[offset..offset + count]);
            pairs += count;
            self.next += count as u64;
        }
    }

    /// Lets the time until pair `next` pass unheard. Nothing happens when that pair has passed already.
    pub fn pass_over(&mut self, next: u64) {
        let target = next / BLOCK as u64 * BLOCK as u64;
        let mut block = self.next.div_ceil(BLOCK as u64) * BLOCK as u64;
        while block < target {
            self.make(block, false);
            block += BLOCK as u64;
        }
        self.next = self.next.max(next);
    }
}
