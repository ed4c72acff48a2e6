//! Common mode of a two-level three-phase bridge: the average of its three legs against the middle of
//! the DC link, in units of the DC link.
//!
//! Sine against triangle, natural sampling. In each half period of the carrier every leg switches
//! once, so the common mode walks through +1/2, +1/6, -1/6, -1/2 and back, a step of 1/3 at each
//! crossing. Crossings are solved by Newton's method on `x = m sin(theta + d x)`, where x runs from -1
//! to 1 over the half period; they fall between samples and are kept as instants.

use super::{Block, LegClock};
use crate::line::Wave;
use crate::line::follower::{Event, Follower, Queue};
use crate::line::schedule::Gate;
use std::f64::consts::{PI, TAU};

/// State 0: switched off, 0 V. State 1 + k: k legs are high.
const OFF: u32 = 0;

/// The bridge and both legs that see it.
#[derive(Clone, Debug)]
pub(crate) struct Bridge {
    queue: Queue,
    followers: [Follower; 2],
    switching: Switching,
}

/// Where the edges fall. Times in samples.
#[derive(Clone, Debug)]
struct Switching {
    gate: Gate,
    /// Half a carrier period.
    half: f64,
    /// Motor frequency, turns per sample.
    output: f64,
    modulation: f64,
    /// Number of the half period at work.
    number: u64,
    /// Edges are complete up to here.
    made: f64,
}

impl Bridge {
    /// Times in samples, `output` in turns per sample, `edge_tau` the time constant of each edge.
    pub fn new(
        gate: Gate,
        half: f64,
        output: f64,
        modulation: f64,
        edge_tau: f64,
        legs: [LegClock; 2],
    ) -> Self {
        let levels = vec![vec![0.0], vec![-0.5], vec![-1.0 / 6.0], vec![1.0 / 6.0], vec![0.5]];
        let followers =
            legs.map(|leg| Follower::new(levels.clone(), vec![Some(edge_tau); 5], leg.filter_tau, leg.delay));
        let switching = Switching { gate, half, output, modulation, number: 0, made: 0.0 };
        Self { queue: Queue::default(), followers, switching }
    }

    /// Makes all edges before `until`.
    pub fn prepare(&mut self, until: f64) {
        self.queue.tidy();
        self.switching.extend(until, &mut self.queue.events);
    }

    /// Writes one block for a leg; `false` when it is off.
    pub fn fill(&mut self, leg: usize, block: Block<'_>, wave: &mut Wave) -> bool {
        let follower = &mut self.followers[leg];
        let read = &mut self.queue.read[leg];
        if *read == self.queue.events.len() && follower.is_resting_at(0.0) {
            follower.skip();
            return false;
        }
        follower.fill(block.first as f64, &self.queue.events, read, block.jitter, std::slice::from_mut(wave));
        true
    }
}

impl Switching {
    fn extend(&mut self, until: f64, events: &mut Vec<Event>) {
        while self.made < until {
            if !self.gate.is_on() {
                if self.gate.change_at() >= until {
                    self.made = until;
                    return;
                }
                self.made = self.gate.change_at();
                self.gate.step();
                self.number = (self.made / self.half).floor() as u64;
                events.push(Event { at: self.made, state: self.state_at(self.made) });
            }
            let end = (self.number + 1) as f64 * self.half;
            let stop = self.gate.change_at();
            let crossings = self.crossings();
            for (place, &at) in crossings.iter().enumerate() {
                if at > self.made && at < stop {
                    events.push(Event { at, state: self.state_after(place as u32 + 1) });
                }
            }
            if stop <= end {
                events.push(Event { at: stop.max(self.made), state: OFF });
                self.gate.step();
                self.made = stop.max(self.made);
            } else {
                self.made = end.max(self.made);
                self.number += 1;
            }
        }
    }

    /// The state after so many crossings of this half period.
    fn state_after(&self, crossings: u32) -> u32 {
        if self.number.is_multiple_of(2) { 1 + 3 - crossings } else { 1 + crossings }
    }

    fn state_at(&self, at: f64) -> u32 {
        let passed = self.crossings().iter().filter(|&&crossing| crossing <= at).count();
        self.state_after(passed as u32)
    }

    /// The three instants of this half period at which reference and carrier meet, in order.
    fn crossings(&self) -> [f64; 3] {
        let middle = (self.number as f64 + 0.5) * self.half;
        let depth = if self.number.is_multiple_of(2) { self.modulation } else { -self.modulation };
        let swing = PI * self.output * self.half;
        let turns = (self.output * middle).fract();
        let mut instants = [0.0, 1.0, 2.0].map(|phase| {
            let (sin, cos) = (TAU * (turns - phase / 3.0)).sin_cos();
            let mut x = depth * sin;
            for _ in 0..3 {
                let (near_sin, near_cos) = sin_cos_near(sin, cos, swing * x);
                let miss = x - depth * near_sin;
                x -= miss / (1.0 - depth * swing * near_cos);
            }
            middle + 0.5 * self.half * x
        });
        instants.sort_by(f64::total_cmp);
        instants
    }
}

/// Sine and cosine of an angle a little `d` (below 0.4 rad) away from one whose sine and cosine are known.
fn sin_cos_near(sin: f64, cos: f64, d: f64) -> (f64, f64) {
    let square = d * d;
    let near_sin = d * (1.0 - square / 6.0 * (1.0 - square / 20.0 * (1.0 - square / 42.0)));
    let near_cos = 1.0 - square / 2.0 * (1.0 - square / 12.0 * (1.0 - square / 30.0));
    (sin * near_cos + cos * near_sin, cos * near_cos - sin * near_sin)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::scenario::Schedule;
    use crate::line::schedule::Occurrences;

    const LEVELS: [f64; 5] = [0.0, -0.5, -1.0 / 6.0, 1.0 / 6.0, 0.5];

    /// 4 kHz carrier, 40 Hz output, modulation 0.9, one second, times in seconds.
    fn edges() -> Vec<Event> {
        let gate = Gate::new(Occurrences::new(None, "x", 1, 1.0));
        let mut switching =
            Switching { gate, half: 1.0 / 8000.0, output: 40.0, modulation: 0.9, number: 0, made: 0.0 };
        let mut events = Vec::new();
        switching.extend(1.0, &mut events);
        events.retain(|event| event.at < 1.0);
        events
    }

    /// Amplitude of a line in the piecewise-constant common mode over one second, by the exact
    /// Fourier integral of each level.
    fn line(events: &[Event], hz: f64) -> f64 {
        let (mut re, mut im) = (0.0, 0.0);
        for (place, event) in events.iter().enumerate() {
            let end = events.get(place + 1).map_or(1.0, |next| next.at);
            let level = LEVELS[event.state as usize];
            let (from, until) = (TAU * hz * event.at, TAU * hz * end);
            re += level * (until.sin() - from.sin());
            im += level * (from.cos() - until.cos());
        }
        2.0 * f64::hypot(re, im) / (TAU * hz)
    }

    /// Eight states of a two-level bridge at 565.69 V: +-282.84 V twice, +-94.28 V six times, and every
    /// single-leg step 188.56 V (arithmetic on the mean of three legs).
    #[test]
    fn bridge_states_and_steps_are_those_of_the_arithmetic() {
        let link_v = 565.69;
        for state in 0..8_u32 {
            let legs: f64 = (0..3).map(|leg| if state >> leg & 1 == 1 { 0.5 } else { -0.5 }).sum();
            let from_table = link_v * LEVELS[1 + state.count_ones() as usize];
            assert!((link_v * legs / 3.0 - from_table).abs() < 0.01);
            let expected = if matches!(state, 0 | 7) { 282.84 } else { 94.28 };
            assert!((from_table.abs() - expected).abs() < 0.01);
        }
        let events = edges();
        assert!(events.len() > 23_990, "{}", events.len());
        for pair in events.windows(2) {
            let step = link_v * (LEVELS[pair[1].state as usize] - LEVELS[pair[0].state as usize]);
            assert!((step.abs() - 188.56).abs() < 0.01 && pair[0].at <= pair[1].at);
        }
    }

    /// Sidebands of natural sampling after Lipo's textbook formula and an independent simulation: in
    /// the common mode only multiples of three of the output frequency survive.
    #[test]
    fn common_mode_lines_are_those_of_the_textbook() {
        let events = edges();
        for (hz, expected) in [(4000.0, 0.3561), (8120.0, 0.0884), (12000.0, 0.0786), (16120.0, 0.0342)] {
            let measured = line(&events, hz);
            println!("{hz} Hz: {measured:.5}, expected {expected}");
            assert!((measured - expected).abs() < 5e-4);
        }
        assert!((line(&events, 7880.0) - 0.0884).abs() < 5e-4);
        assert!((line(&events, 12240.0) - 0.0137).abs() < 5e-4);
        for hz in [4080.0, 8040.0] {
            println!("{hz} Hz: {:.2e}", line(&events, hz));
            assert!(line(&events, hz) < 2e-4);
        }
    }

    /// Time share of the levels at modulation 0.9: 12.8 % at each end, 37.2 % at each inner level
    /// (simulation).
    #[test]
    fn levels_are_held_for_their_published_shares() {
        let events = edges();
        let mut shares = [0.0; 5];
        for (place, event) in events.iter().enumerate() {
            shares[event.state as usize] += events.get(place + 1).map_or(1.0, |next| next.at) - event.at;
        }
        println!("{shares:.4?}");
        for (state, expected) in [(1, 0.128), (2, 0.372), (3, 0.372), (4, 0.128)] {
            assert!((shares[state] - expected).abs() < 1e-3);
        }
    }

    /// The sampled waveform carries the same lines: a DFT of it over a whole number of output periods,
    /// the RC pole's response taken out. What folds down from above half of 4 MS/s is below 1/500 of
    /// the carrier's line after a pole at 160 kHz (harmonics fall as 1/m, the pole as 1/f).
    #[test]
    fn sampled_waveform_carries_the_same_lines() {
        let rate = 4e6;
        let schedule = Schedule::default();
        let gate = Gate::new(Occurrences::new(Some(&schedule), "x", 1, rate));
        let tau = 1e-6 * rate;
        let legs = [LegClock { filter_tau: tau, delay: 0.0 }; 2];
        let mut bridge = Bridge::new(gate, rate / 8000.0, 40.0 / rate, 0.9, 0.0, legs);
        let samples = 100_000 + 25_600;
        let mut signal = Vec::new();
        for first in (0..samples as u64).step_by(crate::line::BLOCK) {
            bridge.prepare((first + 257) as f64);
            let mut wave = [0.0; crate::line::BLOCK];
            assert!(bridge.fill(0, Block { first, jitter: None }, &mut wave));
            signal.extend(wave.map(f64::from));
        }
        let piece = &signal[25_600..125_600]; // 25 ms: one output period, 100 carrier periods
        for (hz, expected) in [(4000.0, 0.3561), (8120.0, 0.0884), (12000.0, 0.0786), (16120.0, 0.0342)] {
            let (mut re, mut im) = (0.0, 0.0);
            for (n, value) in piece.iter().enumerate() {
                let angle = TAU * hz * n as f64 / rate;
                re += value * angle.cos();
                im += value * angle.sin();
            }
            let response = 1.0 / (TAU * hz * 1e-6).hypot(1.0);
            let measured = 2.0 * f64::hypot(re, im) / piece.len() as f64 / response;
            println!("{hz} Hz sampled: {measured:.5}");
            assert!((measured - expected).abs() < 5e-4);
        }
    }

    #[test]
    fn bridge_is_silent_outside_its_timetable() {
        let schedule = Schedule { from_s: 0.1, for_s: Some(0.2), every_s: Some(0.5), ..Schedule::default() };
        let gate = Gate::new(Occurrences::new(Some(&schedule), "x", 1, 200e3));
        let legs = [LegClock { filter_tau: 0.3, delay: 0.0 }; 2];
        let mut bridge = Bridge::new(gate, 25.0, 40.0 / 200e3, 0.9, 0.0, legs);
        for first in (0..300_000_u64).step_by(crate::line::BLOCK) {
            bridge.prepare((first + 257) as f64);
            let mut wave = [0.0; crate::line::BLOCK];
            let is_on = bridge.fill(0, Block { first, jitter: None }, &mut wave);
            let phase = first % 100_000;
            if (20_000..59_000).contains(&phase) {
                assert!(is_on && wave.iter().any(|value| value.abs() > 0.1), "on at {first}");
            }
            if !(19_740..60_260).contains(&phase) {
                assert!(!is_on, "off at {first}");
            }
        }
    }
}
