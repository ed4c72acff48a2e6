//! Which segments an average takes: idle and driven ones take turns.
//!
//! What a pair makes of its common mode shows only while nobody drives it; what a driver makes of its own
//! signal, only while it does. Two averages side by side would need twice the memory, so one average
//! collects idle segments for a while, then driven ones, and what was passed over is counted. A turn goes
//! to the set whose turn it is if that set was seen during the last turn, else to whatever comes first:
//! where there is only one set, it gets every turn.

use legwise_protocol::message::SegmentSet;

/// The account of one average.
#[derive(Clone, Copy, Debug)]
pub(super) struct Turn {
    /// The set that is collected, once that is decided.
    set: SegmentSet,
    is_decided: bool,
    /// Whether the other set has the first claim; it had none so far.
    is_driven_due: bool,
    was_seen: Seen,
    is_seen: Seen,
    /// Segments gone by, in the average or not.
    passed: u32,
    pub(super) segments: u32,
    /// Passed over to save time.
    pub(super) skipped: u32,
    /// Passed over because they belong to the other set.
    pub(super) other: u32,
    pub(super) first_sample: u64,
    pub(super) end_sample: u64,
}

/// Which sets occurred.
#[derive(Clone, Copy, Debug)]
struct Seen {
    idle: bool,
    driven: bool,
}

impl Seen {
    const NONE: Self = Self { idle: false, driven: false };

    const fn holds(self, set: SegmentSet) -> bool {
        match set {
            SegmentSet::Idle => self.idle,
            SegmentSet::Driven => self.driven,
        }
    }

    fn note(&mut self, set: SegmentSet) {
        match set {
            SegmentSet::Idle => self.idle = true,
            SegmentSet::Driven => self.driven = true,
        }
    }
}

impl Turn {
    pub(super) const fn new() -> Self {
        Self {
            set: SegmentSet::Idle,
            is_decided: false,
            is_driven_due: false,
            was_seen: Seen::NONE,
            is_seen: Seen::NONE,
            passed: 0,
            segments: 0,
            skipped: 0,
            other: 0,
            first_sample: 0,
            end_sample: 0,
        }
    }

    /// The set in the average, if there is anything in it.
    pub(super) const fn collected(&self) -> Option<SegmentSet> {
        if self.segments > 0 { Some(self.set) } else { None }
    }

    /// A segment is complete: whether it goes into the average.
    pub(super) fn admits(&mut self, set: SegmentSet, first_sample: u64, end_sample: u64) -> bool {
        self.passed = self.passed.saturating_add(1);
        self.is_seen.note(set);
        let due = if self.is_driven_due { SegmentSet::Driven } else { SegmentSet::Idle };
        if !self.is_decided && (set == due || !self.was_seen.holds(due)) {
            self.set = set;
            self.is_decided = true;
        }
        if !self.is_decided || self.set != set {
            self.other = self.other.saturating_add(1);
            return false;
        }
        if self.segments == 0 {
            self.first_sample = first_sample;
        }
        self.end_sample = end_sample;
        self.segments += 1;
        true
    }

    /// Segments are passed over.
    pub(super) fn skip(&mut self, segments: u32) {
        self.passed = self.passed.saturating_add(segments);
        self.skipped = self.skipped.saturating_add(segments);
    }

    /// Whether the turn has lasted `segments`.
    pub(super) const fn is_over(&self, segments: u32) -> bool {
        self.passed >= segments
    }

    /// A new turn, the other set's.
    pub(super) fn pass_on(&mut self) {
        let is_driven_due =
            if self.is_decided { matches!(self.set, SegmentSet::Idle) } else { self.is_driven_due };
        *self = Self { is_driven_due, was_seen: self.is_seen, ..Self::new() };
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use SegmentSet::{Driven, Idle};

    /// Plays sets; the set and size of each average of ten segments.
    fn turns(sets: impl Iterator<Item = SegmentSet>) -> std::vec::Vec<(Option<SegmentSet>, u32, u32)> {
        let (mut turn, mut averages) = (Turn::new(), std::vec::Vec::new());
        for set in sets {
            turn.admits(set, 0, 0);
            if turn.is_over(10) {
                averages.push((turn.collected(), turn.segments, turn.other));
                turn.pass_on();
            }
        }
        averages
    }

    #[test]
    fn a_lone_set_gets_every_segment() {
        assert_eq!(turns([Driven; 30].into_iter()), [(Some(Driven), 10, 0); 3]);
        assert_eq!(turns([Idle; 30].into_iter()), [(Some(Idle), 10, 0); 3]);
    }

    #[test]
    fn two_sets_take_turns_and_what_is_passed_over_is_counted() {
        let sets = [Driven, Driven, Idle, Driven].into_iter().cycle().take(40);
        let averages = turns(sets);
        assert_eq!(averages[0], (Some(Driven), 8, 2));
        assert_eq!(averages[1], (Some(Idle), 3, 7));
        assert_eq!(averages[2].0, Some(Driven));
        assert_eq!(averages[3].0, Some(Idle));
    }

    #[test]
    fn a_set_that_falls_silent_costs_one_turn() {
        let sets = [Idle, Driven].into_iter().cycle().take(10).chain([Idle; 30]);
        let averages: std::vec::Vec<_> = turns(sets).iter().map(|turn| (turn.0, turn.1)).collect();
        assert_eq!(averages, [(Some(Idle), 5), (None, 0), (Some(Idle), 10), (Some(Idle), 10)]);
    }
}
