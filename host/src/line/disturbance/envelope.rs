//! Coming and going: a first-order envelope over a timetable.

use crate::line::schedule::Gate;
use crate::line::{BLOCK, Wave};

/// Differences below this are nothing.
const STEADY: f64 = 1e-7;

/// What a block of an envelope looks like.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum Level {
    /// The same value throughout; the block was not written.
    Constant(f32),
    /// Written sample by sample.
    Varying,
}

/// 0 while off, 1 while on, with one time constant between; may decay while on.
#[derive(Clone, Debug)]
pub(crate) struct Envelope {
    gate: Gate,
    rise: f64,
    decay: Option<f64>,
    delay: f64,
    value: f64,
    goal: f64,
}

impl Envelope {
    /// All times in samples. `starts_on` for something that has no timetable: on from before the start.
    pub fn new(mut gate: Gate, starts_on: bool, rise: f64, decay: Option<f64>, delay: f64) -> Self {
        let value = f64::from(starts_on);
        if starts_on {
            gate.step();
        }
        Self { gate, rise: rise.max(1e-6), decay, delay, value, goal: value }
    }

    /// One block from sample `first` on.
    pub fn fill(&mut self, first: f64, wave: &mut Wave) -> Level {
        let change_at = |gate: &Gate, delay: f64| gate.change_at() - first - delay;
        if self.is_steady() && change_at(&self.gate, self.delay) > (BLOCK - 1) as f64 {
            return Level::Constant(self.value as f32);
        }
        let whole = self.factors(1.0);
        let mut position = -1.0;
        for (sample, slot) in wave.iter_mut().enumerate() {
            let now = sample as f64;
            while change_at(&self.gate, self.delay) <= now {
                let at = change_at(&self.gate, self.delay).max(position);
                let factors = self.factors(at - position);
                self.advance(factors);
                position = at;
                self.gate.step();
                self.goal = f64::from(self.gate.is_on());
            }
            let factors = if now - position == 1.0 { whole } else { self.factors(now - position) };
            self.advance(factors);
            position = now;
            *slot = self.value as f32;
        }
        if (self.value - self.goal).abs() < STEADY && (self.decay.is_none() || self.goal < STEADY) {
            self.goal = if self.goal < STEADY { 0.0 } else { self.goal };
            self.value = self.goal;
        }
        Level::Varying
    }

    fn is_steady(&self) -> bool {
        self.value == self.goal && (self.decay.is_none() || self.goal == 0.0)
    }

    fn factors(&self, samples: f64) -> (f64, f64) {
        ((-samples / self.rise).exp(), self.decay.map_or(1.0, |decay| (-samples / decay).exp()))
    }

    fn advance(&mut self, (approach, decay): (f64, f64)) {
        self.goal *= decay;
        self.value = self.goal + (self.value - self.goal) * approach;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::line::scenario::Schedule;
    use crate::line::schedule::Occurrences;

    #[test]
    fn rises_and_falls_exponentially_from_the_exact_instant() {
        let schedule =
            Schedule { from_s: 0.3005, for_s: Some(0.7), every_s: Some(2.0), ..Schedule::default() };
        let gate = Gate::new(Occurrences::new(Some(&schedule), "x", 1, 1000.0));
        let mut envelope = Envelope::new(gate, false, 40.0, None, 0.25);
        let mut worst = 0.0_f64;
        let mut steady_blocks = 0;
        for block in 0..40 {
            let first = (block * BLOCK) as f64;
            let mut wave = [0.0; BLOCK];
            if let Level::Constant(value) = envelope.fill(first, &mut wave) {
                wave.fill(value);
                steady_blocks += 1;
            }
            for (sample, &value) in wave.iter().enumerate() {
                let t = (first + sample as f64 + 0.25 - 300.5).rem_euclid(2000.0);
                let started = first + sample as f64 + 0.25 >= 300.5;
                let expected = if !started {
                    0.0
                } else if t < 700.0 {
                    1.0 - (-t / 40.0).exp()
                } else {
                    (1.0 - (-700.0_f64 / 40.0).exp()) * (-(t - 700.0) / 40.0).exp()
                };
                worst = worst.max((f64::from(value) - expected).abs());
            }
        }
        println!("worst {worst:.2e}, steady blocks {steady_blocks}");
        assert!(worst < 2.0 * STEADY + 6e-8);
        // Off from 1000, within 1e-7 after 16 time constants, on again at 2300: 655 steady samples hold
        // at least one whole block in each of five periods, and the first block comes before all.
        assert!(steady_blocks >= 6);
    }

    #[test]
    fn inrush_decays_while_on() {
        let schedule = Schedule { from_s: 0.0, for_s: Some(10.0), ..Schedule::default() };
        let gate = Gate::new(Occurrences::new(Some(&schedule), "x", 1, 1000.0));
        let mut envelope = Envelope::new(gate, false, 1.0, Some(300.0), 0.0);
        let mut wave = [0.0; BLOCK];
        envelope.fill(0.0, &mut wave);
        // After the rise has died away the value lags its goal by tau/decay = 0.3 % and falls with it.
        for sample in [60_usize, 120, 240] {
            let expected = (-(sample as f64) / 300.0).exp();
            assert!((f64::from(wave[sample]) / expected - 1.0).abs() < 0.01);
        }
    }
}
