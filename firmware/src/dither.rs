//! Moves the sampling rate by a few per cent now and then, so that a folded line gives itself away.
//!
//! A line below half the rate stays where it is when the rate changes. One from above, folded down by
//! sampling, moves with it: at `|f − n fs|` it moves by n times the change. The host compares (a textbook
//! property of sampling).
//!
//! ```text
//!   first minute            every four minutes
//!   ───── nominal ──────┬─ faster ─┬─ slower ─┬───────── nominal ─────────┬─ faster ─┬─ ...
//!                          6 s        6 s
//! ```
//!
//! Both stretches last equally long, so that over a whole schedule the mean rate is the nominal one.

use crate::source::Tuning;
use legwise_protocol::message::RateChange;

const FIRST_S: u64 = 60;
const EVERY_S: u64 = 240;
const STRETCH_S: u64 = 6;

/// When the rate is moved next, and where to.
#[derive(Clone, Copy, Debug)]
pub struct Schedule {
    tuning: Tuning,
    change_at: u64,
}

impl Schedule {
    /// A schedule for a nominal rate, from sample 0 on.
    pub const fn new(sample_rate_mhz: u64) -> Self {
        Self { tuning: Tuning::Nominal, change_at: pairs_in(FIRST_S, sample_rate_mhz) }
    }

    /// The tuning to go over to, once it is time at `sample`. Say with [`Self::changed`] what came of it.
    pub fn due(&mut self, sample: u64) -> Option<Tuning> {
        if sample < self.change_at {
            return None;
        }
        self.tuning = match self.tuning {
            Tuning::Nominal => Tuning::Faster,
            Tuning::Faster => Tuning::Slower,
            Tuning::Slower => Tuning::Nominal,
        };
        Some(self.tuning)
    }

    /// The source has gone over to another rate; `None` when it has one only, and is not asked again.
    pub const fn changed(&mut self, change: Option<RateChange>) {
        let length_s = match self.tuning {
            Tuning::Nominal => EVERY_S - 2 * STRETCH_S,
            Tuning::Faster | Tuning::Slower => STRETCH_S,
        };
        self.change_at = match change {
            Some(change) => change.first_sample.saturating_add(pairs_in(length_s, change.sample_rate_mhz)),
            None => u64::MAX,
        };
    }
}

const fn pairs_in(seconds: u64, sample_rate_mhz: u64) -> u64 {
    sample_rate_mhz.saturating_mul(seconds).div_ceil(1000)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn faster_and_slower_come_in_pairs_of_equal_length_every_four_minutes() {
        use Tuning::{Faster, Nominal, Slower};
        let mut schedule = Schedule::new(1_000_000);
        let mut changes = std::vec::Vec::new();
        for first_sample in 0..600_000 {
            let Some(tuning) = schedule.due(first_sample) else { continue };
            let sample_rate_mhz = match tuning {
                Nominal => 1_000_000,
                Faster => 1_025_000,
                Slower => 975_000,
            };
            schedule.changed(Some(RateChange { first_sample, sample_rate_mhz }));
            changes.push((first_sample, tuning));
        }
        let expected = [
            (60_000, Faster),
            (66_150, Slower),
            (72_000, Nominal),
            (300_000, Faster),
            (306_150, Slower),
            (312_000, Nominal),
            (540_000, Faster),
            (546_150, Slower),
            (552_000, Nominal),
        ];
        assert_eq!(changes, expected);
    }

    #[test]
    fn a_source_with_one_rate_is_asked_once() {
        let mut schedule = Schedule::new(1_000);
        assert_eq!(schedule.due(60), Some(Tuning::Faster));
        schedule.changed(None);
        assert_eq!(schedule.due(u64::MAX - 1), None);
    }
}
