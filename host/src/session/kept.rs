//! Which kept messages of one boot have arrived, and how far they may be acknowledged.
//!
//! The device holds kept messages in a queue, sends them in number order, and starts over from the
//! oldest it holds when asked to identify itself. Acknowledging `n` makes it forget all up to `n`, so
//! `n` must never lie beyond a message that got lost on the line.
//!
//! ```text
//!             1 arrives, or the start of a pass is seen
//!   Unknown ────────────────────────────────────────────► Known(through)
//!                                                          │  ▲ the missing one arrives, or a pass
//!                                                          └──┘ starts beyond it
//! ```
//!
//! The start of a pass: a number not above the one before it, with no frame missing in between. The
//! device holds nothing below, because others acknowledged it.

use std::collections::BTreeSet;

/// Numbers remembered beyond a hole; more are taken again when they are sent again.
const BEYOND: usize = 65_536;

/// The numbers of one boot.
#[derive(Debug, Default)]
pub(super) struct KeptNumbers {
    /// Highest number with everything below it safe; `None` while where to begin is unknown.
    through: Option<u32>,
    /// Numbers that arrived beyond.
    beyond: BTreeSet<u32>,
    /// The number that came last.
    last: Option<u32>,
    /// `through` as of the last durable commit.
    durable: Option<u32>,
    /// What has been acknowledged.
    acknowledged: Option<u32>,
}

impl KeptNumbers {
    /// Whether `number` has arrived before.
    pub(super) fn has(&self, number: u32) -> bool {
        self.through.is_some_and(|through| number <= through) || self.beyond.contains(&number)
    }

    /// Whether messages are known to be missing, or may be.
    pub(super) fn has_hole(&self) -> bool {
        !self.beyond.is_empty()
    }

    /// Takes a number that arrived; `is_unbroken`: no frame is missing before it.
    pub(super) fn take(&mut self, number: u32, is_unbroken: bool) {
        let is_pass = is_unbroken && self.last.is_some_and(|last| number <= last);
        let below = number.saturating_sub(1);
        if (is_pass || number == 1) && self.through.is_none_or(|through| through < below) {
            self.through = Some(below);
        }
        self.last = Some(number);
        if self.acknowledged.is_some_and(|acknowledged| number <= acknowledged) {
            // The device has not heard it.
            self.acknowledged = None;
        }
        if self.through.is_none_or(|through| number > through) && self.beyond.len() < BEYOND {
            self.beyond.insert(number);
        }
        self.close_up();
    }

    /// Everything that arrived is on the disk now.
    pub(super) fn commit(&mut self) {
        self.durable = self.through;
    }

    /// The number to acknowledge, once.
    pub(super) fn acknowledge(&mut self) -> Option<u32> {
        let durable = self.durable.filter(|&through| through > 0)?;
        if self.acknowledged.is_some_and(|acknowledged| acknowledged >= durable) {
            return None;
        }
        self.acknowledged = Some(durable);
        Some(durable)
    }

    /// Moves `through` over all numbers that follow it without a hole.
    fn close_up(&mut self) {
        let Some(through) = &mut self.through else { return };
        while let Some(&lowest) = self.beyond.first() {
            if lowest > through.saturating_add(1) {
                break;
            }
            *through = lowest.max(*through);
            self.beyond.pop_first();
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Takes numbers one after another without a missing frame, commits, returns the acknowledgement.
    fn after(kept: &mut KeptNumbers, numbers: &[u32]) -> Option<u32> {
        for &number in numbers {
            kept.take(number, true);
        }
        kept.commit();
        kept.acknowledge()
    }

    #[test]
    fn a_fresh_device_is_acknowledged_from_the_first_number() {
        let mut kept = KeptNumbers::default();
        assert_eq!(after(&mut kept, &[1, 2, 3]), Some(3));
        assert_eq!(kept.acknowledge(), None, "once");
        assert_eq!(after(&mut kept, &[]), None);
        assert_eq!(after(&mut kept, &[4]), Some(4));
    }

    #[test]
    fn nothing_is_acknowledged_before_a_commit() {
        let mut kept = KeptNumbers::default();
        kept.take(1, true);
        assert_eq!(kept.acknowledge(), None);
        kept.commit();
        assert_eq!(kept.acknowledge(), Some(1));
    }

    #[test]
    fn a_hole_holds_acknowledgement_back_until_it_is_filled() {
        let mut kept = KeptNumbers::default();
        kept.take(1, true);
        kept.take(2, true);
        kept.take(4, false);
        kept.take(5, true);
        assert!(kept.has_hole());
        assert_eq!(after(&mut kept, &[]), Some(2));
        assert_eq!(after(&mut kept, &[3]), Some(5));
        assert!(!kept.has_hole());
        assert!((1..=5).all(|number| kept.has(number)) && !kept.has(6));
    }

    #[test]
    fn a_late_joiner_waits_for_the_start_of_a_pass() {
        let mut kept = KeptNumbers::default();
        assert_eq!(after(&mut kept, &[20, 21]), None, "5 to 19 may still be on the device");
        assert!(kept.has_hole());
        // Asked to identify itself, the device starts over at the oldest one it holds.
        assert_eq!(after(&mut kept, &[5, 6]), Some(6));
        assert_eq!(after(&mut kept, &(7..=22).collect::<Vec<_>>()), Some(22));
    }

    #[test]
    fn a_pass_whose_start_got_lost_proves_nothing() {
        let mut kept = KeptNumbers::default();
        kept.take(20, false);
        kept.take(6, false);
        assert_eq!(after(&mut kept, &[7, 8]), None, "5 may have been lost before 6");
        assert_eq!(after(&mut kept, &[5]), Some(8));
    }

    #[test]
    fn an_acknowledgement_that_was_not_heard_is_offered_again() {
        let mut kept = KeptNumbers::default();
        assert_eq!(after(&mut kept, &[1, 2, 3]), Some(3));
        assert_eq!(after(&mut kept, &[1, 2, 3]), Some(3));
    }

    #[test]
    fn number_zero_and_the_largest_do_no_harm() {
        let mut kept = KeptNumbers::default();
        assert_eq!(after(&mut kept, &[0, 0]), None);
        assert_eq!(after(&mut kept, &[u32::MAX, u32::MAX]), Some(u32::MAX));
        assert_eq!(after(&mut kept, &[u32::MAX, 1]), Some(u32::MAX));
    }
}
