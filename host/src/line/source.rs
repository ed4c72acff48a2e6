//! The simulated pair as a source of sample pairs, which can move its rate.
//!
//! One scenario sampled at three rates is one pair seen three times: traffic and disturbances happen in
//! seconds. The source that is heard hands out pairs; going over to another rate lets the time that has
//! passed go by in the other one, and goes on there with its next pair.

mod one_rate;

use super::Activity;
use super::error::ScenarioError;
use super::scenario::Scenario;
use super::traffic::PollCounts;
use core::convert::Infallible;
use legwise_firmware::source::{PairSource, SourceDescription, Taken, Tuning};
use legwise_protocol::message::RateChange;
use one_rate::OneRate;

/// How far the rate is moved.
const DITHER: f64 = 0.025;

/// How much of a scenario to simulate.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Length {
    /// Until nobody asks any more.
    Endless,
    /// So many pairs.
    Pairs(u64),
    /// So many minutes of simulated time.
    Minutes(f64),
}

/// A simulated pair behind a simulated monitor.
#[derive(Clone, Debug)]
pub struct LineSource {
    scenario: Scenario,
    seed: u64,
    description: SourceDescription,
    length: u64,
    /// Number of the next pair handed out.
    next: u64,
    /// At the nominal rate, faster, slower; made when first needed.
    rates: [Option<Box<OneRate>>; 3],
    heard: usize,
}

impl LineSource {
    /// A source for `scenario`. The same scenario, seed and length give the same codes.
    ///
    /// # Errors
    /// When the scenario has a value that cannot be used or the length is not a number of minutes.
    pub fn new(scenario: &Scenario, seed: u64, length: Length) -> Result<Self, ScenarioError> {
        scenario.check()?;
        let rate = scenario.sample_rate_hz;
        let length = match length {
            Length::Endless => u64::MAX,
            Length::Pairs(pairs) => pairs,
            Length::Minutes(minutes) if minutes > 0.0 && minutes <= 1e7 => {
                (minutes * 60.0 * rate).round() as u64
            }
            Length::Minutes(minutes) => {
                let reason = "it is not a usable length";
                return Err(ScenarioError::value(
                    "minutes",
                    minutes,
                    reason,
                    "a number above 0 and up to 1e7",
                ));
            }
        };
        let nominal = Box::new(OneRate::new(scenario, seed)?);
        let description = nominal.describe();
        let rates = [Some(nominal), None, None];
        Ok(Self { scenario: scenario.clone(), seed, description, length, next: 0, rates, heard: 0 })
    }

    /// Pairs this source gives in all; `None` when it never ends.
    pub fn length_pairs(&self) -> Option<u64> {
        (self.length != u64::MAX).then_some(self.length)
    }

    /// Every disturbance that is on between two instants, in seconds from the first pair; in the order
    /// of the scenario. Asked for at any time, for any stretch: nothing is recorded for it.
    pub fn activity(&self, from_s: f64, until_s: f64) -> Vec<Activity> {
        self.rates[0].as_ref().map_or_else(Vec::new, |nominal| nominal.activity(from_s, until_s))
    }

    /// Questions and answers of the simulated traffic so far, up to one exchange ahead of the pairs.
    pub fn polls(&self) -> PollCounts {
        self.rates[self.heard].as_ref().map_or_else(PollCounts::default, |heard| heard.polls())
    }

    /// Events of the traffic that wait, and room for them.
    #[cfg(test)]
    fn waiting_events(&self) -> (usize, usize) {
        self.rates[self.heard].as_ref().map_or((0, 0), |heard| heard.waiting_events())
    }

    /// Seconds from the first pair to the next one.
    pub fn now_s(&self) -> f64 {
        self.rates[self.heard].as_ref().map_or(0.0, |heard| heard.next() as f64 / heard.rate_hz())
    }

    /// Goes over to the source of another rate at the present time; its rate in pairs per second.
    fn hear(&mut self, wanted: usize, factor: f64) -> Option<f64> {
        let now_s = self.now_s();
        if self.rates[wanted].is_none() {
            let mut scenario = self.scenario.clone();
            scenario.sample_rate_hz *= factor;
            self.rates[wanted] = Some(Box::new(OneRate::new(&scenario, self.seed).ok()?));
        }
        let source = self.rates[wanted].as_mut()?;
        source.pass_over((now_s * source.rate_hz()).ceil() as u64);
        self.heard = wanted;
        Some(source.rate_hz())
    }
}

impl PairSource for LineSource {
    type Error = Infallible;

    fn describe(&self) -> SourceDescription {
        self.description
    }

    fn take(&mut self, leg_a: &mut [i32], leg_b: &mut [i32]) -> Result<Taken, Self::Error> {
        let first_sample = self.next;
        let left = self.length - first_sample;
        if left == 0 {
            return Ok(Taken::Finished);
        }
        let wanted = leg_a.len().min(leg_b.len()).min(usize::try_from(left).unwrap_or(usize::MAX));
        let Some(heard) = self.rates[self.heard].as_mut().filter(|_| wanted > 0) else {
            return Ok(Taken::Nothing);
        };
        heard.fill(&mut leg_a[..wanted], &mut leg_b[..wanted]);
        self.next += wanted as u64;
        Ok(Taken::Pairs { first_sample, pairs: wanted, gap: None })
    }

    fn tune(&mut self, tuning: Tuning) -> Option<RateChange> {
        let (wanted, factor) = match tuning {
            Tuning::Nominal => (0, 1.0),
            Tuning::Faster => (1, 1.0 + DITHER),
            Tuning::Slower => (2, 1.0 - DITHER),
        };
        let rate_hz = self.hear(wanted, factor)?;
        Some(RateChange { first_sample: self.next, sample_rate_mhz: (rate_hz * 1e3).round() as u64 })
    }
}

#[cfg(test)]
mod tests;
