//! Sampling instants counted by a timer that runs through, across changes of the sampling period.
//!
//! ```text
//!  ticks  ──┬──────┬──────┬──────┬─────────┬─────────┬──
//!  scans    0      1      2      3         4         5      period 680 until scan 3, then 697
//! ```
//!
//! A timer that triggers a converter takes a new period at its next instant. A second one, free-running from
//! the same clock, is read here: instants are ticks since the last change divided by the period.

/// Instants so far, from ticks.
#[derive(Clone, Copy, Debug)]
pub struct TickClock {
    base_ticks: u64,
    base_scans: u64,
    ticks_per_scan: u32,
}

impl TickClock {
    /// Scan 0 at tick 0. A period of 0 counts as 1.
    pub const fn new(ticks_per_scan: u32) -> Self {
        Self {
            base_ticks: 0,
            base_scans: 0,
            ticks_per_scan: if ticks_per_scan == 0 { 1 } else { ticks_per_scan },
        }
    }

    /// Instants up to and including `ticks`, which never fall.
    pub const fn scans(&self, ticks: u64) -> u64 {
        if ticks < self.base_ticks {
            // The period given last does not hold yet; the instant at which it will is the next one.
            return self.base_scans.saturating_sub(1);
        }
        self.base_scans + (ticks - self.base_ticks) / self.ticks_per_scan as u64
    }

    /// Ticks until the next instant, 1 at least.
    pub const fn ticks_left(&self, ticks: u64) -> u32 {
        if ticks < self.base_ticks {
            return (self.base_ticks - ticks) as u32;
        }
        let passed = ticks.saturating_sub(self.base_ticks) % self.ticks_per_scan as u64;
        self.ticks_per_scan - passed as u32
    }

    /// At `ticks` the trigger was given another period, which holds from the next instant on; the number of
    /// that instant. A period of 0 changes nothing.
    pub const fn change(&mut self, ticks: u64, ticks_per_scan: u32) -> u64 {
        let next = self.scans(ticks) + 1;
        if ticks_per_scan > 0 {
            self.base_ticks = ticks + self.ticks_left(ticks) as u64;
            self.base_scans = next;
            self.ticks_per_scan = ticks_per_scan;
        }
        next
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A trigger timer with a period taken over at each instant, played tick by tick.
    #[test]
    fn instants_are_those_of_a_timer_that_takes_its_period_at_each() {
        let mut clock = TickClock::new(7);
        let (mut period, mut next_period, mut next_at, mut instants) = (7, 7, 7, 0);
        for tick in 0..10_000_u64 {
            if tick == next_at {
                instants += 1;
                period = next_period;
                next_at += period;
            }
            assert_eq!(clock.scans(tick), instants, "tick {tick}");
            assert_eq!(u64::from(clock.ticks_left(tick)), next_at - tick, "tick {tick}");
            if tick % 997 == 5 {
                next_period = 5 + tick / 997;
                assert_eq!(clock.change(tick, next_period as u32), instants + 1);
            }
        }
        assert!(instants > 500 && period > 7);
    }

    #[test]
    fn a_period_of_nothing_is_ignored() {
        let mut clock = TickClock::new(0);
        assert_eq!(clock.scans(5), 5);
        assert_eq!(clock.change(5, 0), 6);
        assert_eq!(clock.scans(7), 7);
    }
}
